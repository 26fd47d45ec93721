"""Laws fitted to 10 m splits of championship finals (runners by letter; source and mark beside each)."""

from __future__ import annotations

import numpy as np
import pytest

from vidkin.core import uncertainty
from vidkin.core.models import MonoExponential
from vidkin.core.uncertainty import Solution

# Letter: reaction time [s], times at 10, 20 ... 100 m [s] with the reaction inside.
SPLITS = {
    # 2009 championships, men's final, first three, wind +0.9: Graubner & Nixdorf, New Stud. Athl. 26:1/2 (2011) 19-53,
    # Table A. READ.
    "A": (0.146, [1.88, 2.88, 3.78, 4.64, 5.47, 6.29, 7.10, 7.92, 8.74, 9.58]),
    "B": (0.144, [1.91, 2.93, 3.84, 4.70, 5.54, 6.36, 7.19, 8.02, 8.86, 9.71]),
    "C": (0.134, [1.88, 2.90, 3.83, 4.71, 5.56, 6.40, 7.24, 8.09, 8.95, 9.84]),
    # 2008 games, men's final, 1st, wind 0.0. Intervals READ (personal page, from television), RT MEM.
    "D": (0.165, [1.85, 2.87, 3.78, 4.65, 5.50, 6.32, 7.14, 7.97, 8.81, 9.69]),
    # 1987 championships, men's final, first two across, wind +1.0 MEM. Splits READ (calculus problem page), RT MEM.
    "E": (0.109, [1.84, 2.86, 3.80, 4.67, 5.53, 6.38, 7.23, 8.10, 8.96, 9.83]),
    "F": (0.196, [1.94, 2.96, 3.91, 4.78, 5.64, 6.50, 7.36, 8.22, 9.07, 9.93]),
    # 1988 games, men's final, first two across, wind +1.1 READ. Splits and RT MEM, values from memory
    # (Brueggemann & Glad 1990).
    "G": (0.132, [1.83, 2.87, 3.80, 4.66, 5.50, 6.33, 7.17, 8.02, 8.89, 9.79]),
    "H": (0.136, [1.89, 2.96, 3.90, 4.79, 5.65, 6.48, 7.33, 8.18, 9.04, 9.92]),
    # 1988 games, women's final, 1st, wind +3.0. RT, final time, wind READ; splits MEM, values from memory.
    "W": (0.131, [2.00, 3.09, 4.09, 5.04, 5.97, 6.89, 7.80, 8.71, 9.62, 10.54]),
}
X_M = np.arange(10.0, 101.0, 10.0)

# CALC with another program, references section 7: v_max and tau with the reaction fixed; v_max, tau, t0 with t0 free,
# rms [m] of both; v_max with t0 free on 0-70 m.
CALC = {
    "A": ((12.223, 1.241, 0.128), (12.271, 1.333, 0.082, 0.105), 12.414),
    "B": ((12.077, 1.268, 0.141), (12.093, 1.299, 0.122, 0.139), 12.321),
    "C": ((11.778, 1.186, 0.199), (11.799, 1.233, 0.099, 0.196), 12.065),
    "D": ((11.979, 1.150, 0.238), (12.049, 1.301, 0.056, 0.205), 12.307),
    "E": ((11.680, 1.147, 0.142), (11.708, 1.214, 0.060, 0.132), 11.925),
    "F": ((11.685, 1.177, 0.122), (11.736, 1.291, 0.113, 0.085), 11.823),
    "G": ((11.796, 1.137, 0.308), (11.819, 1.192, 0.090, 0.305), 12.289),
    "H": ((11.758, 1.260, 0.239), (11.841, 1.432, 0.015, 0.197), 12.192),
    "W": ((10.935, 1.268, 0.120), (10.999, 1.428, 0.016, 0.040), 10.998),
}

# A: laser re-analysis, Bioengineering 10 (2023) 1254, READ (12.34 in other texts is a segment mean). B, C: MEM, values
# from memory. The others have no published top speed: their fastest 10 m stands in (from the splits above).
TOP_MPS = {"A": 12.32, "B": 12.20, "C": 11.99}


def fastest_10_m(times):
    return float(np.max(10 / np.diff(times)))


def fit(times, x_m, reaction=None):
    """Mono-exponential law fitted to positions at the split times; the start is free unless `reaction` is given."""
    times = np.asarray(times)

    def residual(p):
        start = p[2] if reaction is None else reaction
        return x_m - MonoExponential(v_max=np.exp(p[0]), tau=np.exp(p[1])).position(times - start)

    start = [np.log(11.0), np.log(1.2)] + ([0.1] if reaction is None else [])
    found = uncertainty.solve(residual, np.array(start), scale_by_residual=True)
    assert isinstance(found, Solution)
    assert found.converged
    v_max, tau = np.exp(found.parameters[:2])
    rms = float(np.sqrt(np.mean(found.residual**2)))
    return v_max, tau, *found.parameters[2:], rms


@pytest.mark.parametrize("runner", sorted(SPLITS))
def test_fit_to_splits(runner):
    """The same fit made elsewhere (CALC, printed digits), and the top speed within 0.15 m/s (A, B) or 0.25 m/s."""
    reaction, times = SPLITS[runner]
    two, three, seventy = CALC[runner]
    assert fit(times, X_M, reaction) == pytest.approx(two, abs=6e-4)
    assert fit(times, X_M) == pytest.approx(three, abs=6e-4)
    assert fit(times[:7], X_M[:7])[0] == pytest.approx(seventy, abs=6e-4)
    top = TOP_MPS.get(runner, fastest_10_m(times))
    assert fit(times, X_M)[0] == pytest.approx(top, abs=0.15 if runner in "AB" else 0.25)
    # With the start held at the gun's reaction, two runners who fade pull the stand-in top further down: 0.3 (ours).
    fixed = 0.15 if runner in "AB" else 0.25 if runner in TOP_MPS else 0.3
    assert fit(times, X_M, reaction)[0] == pytest.approx(top, abs=fixed)


@pytest.mark.parametrize("runner", sorted(set(SPLITS) - {"W"}))
def test_a_law_without_fade_overshoots_when_the_end_is_left_out(runner):
    """Fitted to 0-70 m, v_max lies 0.05-0.25 m/s above the fastest 10 m of the men (references section 7, CALC)."""
    times = SPLITS[runner][1]
    assert 0.05 <= fit(times[:7], X_M[:7])[0] - fastest_10_m(times) <= 0.25
    assert fit(times[:7], X_M[:7])[0] > fit(times, X_M)[0]


def test_end_to_end_top_speed_of_the_2009_winner():
    """Published top speed 12.32 m/s, tolerance 0.15 (READ); 12.22-12.41 by model and window (CALC)."""
    reaction, times = SPLITS["A"]
    fits = (fit(times, X_M, reaction)[0], fit(times, X_M)[0], fit(times[:7], X_M[:7])[0])
    assert all(12.215 <= v <= 12.42 for v in fits)
    assert all(v == pytest.approx(12.32, abs=0.15) for v in fits)


def test_a_second_published_set_of_the_same_race():
    """Runner A again: 1.90 2.88 3.80 4.63 5.47 6.29 7.11 7.92 8.75 9.58 (READ-2)."""
    times = [1.90, 2.88, 3.80, 4.63, 5.47, 6.29, 7.11, 7.92, 8.75, 9.58]
    assert fit(times, X_M)[0] == pytest.approx(12.32, abs=0.15)
    assert fit(times, X_M)[0] == pytest.approx(fit(SPLITS["A"][1], X_M)[0], abs=0.05)


# Preliminary 20 m report of the same championships: runner, round: RT, times at 20, 40 ... 100 m. READ (table image).
TWENTY = {
    "A final": (0.146, [2.88, 4.64, 6.31, 7.92, 9.58]),
    "A semi": (0.135, [2.89, 4.68, 6.41, 8.11, 9.89]),
    "A heat 1": (0.155, [2.93, 4.73, 6.47, 8.20, 10.03]),
    "A heat 2": (0.144, [2.94, 4.77, 6.55, 8.33, 10.20]),
    "B final": (0.144, [2.92, 4.70, 6.39, 8.02, 9.71]),
    "B semi": (0.143, [2.99, 4.80, 6.54, 8.21, 9.93]),
    "B heat 1": (0.155, [2.97, 4.79, 6.53, 8.22, 9.98]),
    "B heat 2": (0.194, [3.02, 4.85, 6.62, 8.35, 10.16]),
    "C final": (0.134, [2.91, 4.71, 6.42, 8.10, 9.84]),
    "C semi": (0.133, [2.92, 4.73, 6.47, 8.17, 9.95]),
    "C heat 1": (0.130, [2.89, 4.69, 6.41, 8.10, 9.95]),
    "C heat 2": (0.120, [2.90, 4.72, 6.56, 8.44, 10.38]),
}


@pytest.mark.parametrize("run", sorted(TWENTY))
def test_fit_to_20_m_splits(run):
    """In finals the published top speed within 0.25 m/s; everywhere within 0.35 m/s (ours) of the fastest 20 m.

    Many runners ease up in heats, and the fit, which knows no fade, then under-tells the top.
    """
    reaction, times = TWENTY[run]
    v_max = fit(times, np.arange(20.0, 101.0, 20.0), reaction)[0]
    fastest = float(np.max(20 / np.diff(times)))
    if "final" in run:
        assert v_max == pytest.approx(TOP_MPS[run[0]], abs=0.25)
    assert v_max == pytest.approx(fastest, abs=0.35)


def test_two_reports_of_one_final_differ_by_up_to_three_hundredths():
    """At 60 m: 6.29/6.31, 6.36/6.39, 6.40/6.42 s: the honest accuracy of published splits (READ)."""
    differences = [TWENTY[f"{r} final"][1][2] - SPLITS[r][1][5] for r in "ABC"]
    assert max(np.abs(differences)) == pytest.approx(0.03)
