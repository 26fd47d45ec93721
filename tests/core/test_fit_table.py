"""Tables of other instruments: splits to a hundredth, speeds to a tenth; what they tell, and how surely."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from vidkin.core.air import air_density, drag_area_m2
from vidkin.core.fit import fit_table
from vidkin.core.models import ForceVelocity, MonoExponential
from vidkin.notices import Failure
from vidkin.stages import Air, Athlete, Fit, Rep, Settings

MONO = MonoExponential(v_max=9.6, tau=1.25)
TENS = np.arange(10.0, 61.0, 10.0)


def fitted(rep, **table) -> Fit:
    fit = fit_table(rep=rep, **{"x_m": None, "v_mps": None, **table})
    assert isinstance(fit, Fit), fit
    return fit


def refused(rep, code, **table) -> Failure:
    answer = fit_table(rep=rep, **{"x_m": None, "v_mps": None, **table})
    assert isinstance(answer, Failure)
    assert not answer
    assert (answer.stage, answer.code) == ("fit", code)
    return answer


def value(fit: Fit, name: str) -> float:
    return fit.quantities[name].value


def codes(fit: Fit) -> dict[str, str]:
    return {r.code: r.reason for r in fit.refused} | {n.code: n.text for n in fit.notices}


def rounded_splits(law, distances, *, react_s, rng=None):
    """Times at the distances, the reaction inside, read to 0.01 s; a hundredth of jitter where `rng` is given."""
    t = react_s + law.time_at(distances)
    return np.round(t + (0 if rng is None else 0.005 * rng.standard_normal(t.size)), 2)


@pytest.fixture(scope="module")
def bare(world: SimpleNamespace) -> Rep:
    """Neither body nor air."""
    return replace(world.REP, athlete=Athlete(), air=Air(), splits_m=(10.0,))


# --- what is recovered --------------------------------------------------------------------------


def test_splits_give_the_law(bare) -> None:
    fit = fitted(bare, t_s=0.15 + MONO.time_at(TENS), x_m=TENS)
    assert fit.start == "standing"
    assert fit.law == "mono_exponential"
    assert value(fit, "v_max") == pytest.approx(9.6, rel=2e-3)
    assert value(fit, "tau") == pytest.approx(1.25, rel=5e-3)
    assert value(fit, "first_movement") == pytest.approx(0.15, abs=5e-3)
    assert value(fit, "top_speed") == pytest.approx(float(MONO.speed(MONO.time_at(60.0))), rel=2e-3)
    assert [s.distance_m for s in fit.splits] == [10.0]
    assert fit.splits[0].time_s == pytest.approx(float(MONO.time_at(10.0)), abs=5e-3)


def test_force_velocity_from_splits(world: SimpleNamespace) -> None:
    k = air_density(20.0, 101325.0, 50.0) * drag_area_m2(1.75, 70.0) / (2 * 70.0)
    law = ForceVelocity(F0=7.8, V0=10.2, k_drag=k)
    fit = fitted(replace(world.REP, splits_m=(10.0,)), t_s=0.15 + law.time_at(TENS), x_m=TENS)
    for name, truth in (("F0", 7.8), ("V0", 10.2), ("P_max", 7.8 * 10.2 / 4), ("P_max_absolute", 70 * 7.8 * 10.2 / 4)):
        assert value(fit, name) == pytest.approx(truth, rel=0.02)


def test_a_curve_of_speeds_gives_the_law(bare) -> None:
    """Speeds 20 times a second, the start among them: no positions, so places are counted from the start."""
    t = np.arange(0, 6, 0.05)
    fit = fitted(bare, t_s=t, v_mps=MONO.speed(t - 0.6))
    assert fit.start == "standing"
    assert value(fit, "v_max") == pytest.approx(9.6, rel=2e-3)
    assert value(fit, "tau") == pytest.approx(1.25, rel=5e-3)
    assert value(fit, "first_movement") == pytest.approx(0.6, abs=0.01)
    assert value(fit, "top_speed_at") == pytest.approx(float(MONO.position(t[-1] - 0.6)), rel=5e-3)


def test_a_curve_of_positions_gives_the_law(bare) -> None:
    """Positions 20 times a second, from behind the start line on."""
    t = np.arange(0, 6, 0.05)
    fit = fitted(bare, t_s=t, x_m=MONO.position(t - 0.6) - 0.4)
    assert fit.start == "standing"
    assert value(fit, "v_max") == pytest.approx(9.6, rel=3e-3)
    assert value(fit, "first_movement") == pytest.approx(0.6, abs=0.01)
    assert fit.splits[0].time_s == pytest.approx(float(MONO.time_at(10.4)), abs=0.01)


def test_positions_come_first_where_both_are_given(bare) -> None:
    """Speeds that contradict the positions are not looked at."""
    t = 0.15 + MONO.time_at(TENS)
    plain, both = fitted(bare, t_s=t, x_m=TENS), fitted(bare, t_s=t, x_m=TENS, v_mps=np.full(t.size, 3.0))
    assert both.quantities == plain.quantities


def test_the_start_itself_is_no_reading(bare) -> None:
    """A first row 0 s, 0 m, as many tables carry: the gun, not a place that was timed."""
    t = 0.15 + MONO.time_at(TENS)
    plain = fitted(bare, t_s=t, x_m=TENS)
    with_gun = fitted(bare, t_s=np.append(0.0, t), x_m=np.append(0.0, TENS))
    assert with_gun.quantities == plain.quantities


# --- outside ------------------------------------------------------------------------------------


def test_published_final(bare) -> None:
    """2009 championships, men's final, 1st, wind +0.9, reaction 0.146 s.

    Splits: Graubner & Nixdorf, New Stud. Athl. 26:1/2 (2011) 19-53, Table A, READ. Top speed 12.32 +- 0.15 m/s:
    Bioengineering 10 (2023) 1254, abstract, READ. v_max 12.22-12.41 by model and window: CALC (references, check 2).
    """
    t = np.array([1.88, 2.88, 3.78, 4.64, 5.47, 6.29, 7.10, 7.92, 8.74, 9.58])
    fit = fitted(bare, t_s=t, x_m=np.arange(10.0, 101.0, 10.0))
    assert fit.start == "standing"
    assert 12.17 < value(fit, "v_max") < 12.46
    assert value(fit, "top_speed") == pytest.approx(12.32, abs=0.15)
    assert fit.quantities["top_speed"].low < 12.32 < fit.quantities["top_speed"].high


# --- coverage -----------------------------------------------------------------------------------

#: Of 16 intervals at 95 %, 14 (88 %) or more cover with a probability of 95.7 % (binomial: 15.2 +- 0.9).
REPS, AT_LEAST = 16, 14


def covered(fits_and_truths):
    """How many of the intervals hold the truth, by quantity."""
    held: dict[str, list[bool]] = {}
    for fit, truths in fits_and_truths:
        for name, truth in truths.items():
            q = fit.quantities[name]
            assert q.low is not None, q.why_no_interval
            held.setdefault(name, []).append(q.low <= truth <= q.high)
        for s in fit.splits:
            held.setdefault("split", []).append(s.low_s <= truths_of_split(fit, truths) <= s.high_s)
    return {name: sum(h) for name, h in held.items()}


def truths_of_split(fit, truths):
    """Time to 10 m by the mono-exponential truth."""
    return float(MonoExponential(v_max=truths["v_max"], tau=truths["tau"]).time_at(fit.splits[0].distance_m))


def random_law(rng):
    return MonoExponential(v_max=rng.uniform(8, 11), tau=rng.uniform(1.0, 1.5))


def test_intervals_from_rounded_splits_cover(bare) -> None:
    """Seven splits, 5 m and then every 10 m, read to 0.01 s."""
    at = np.append(5.0, TENS)

    def reps():
        for seed in range(REPS):
            rng = np.random.default_rng([8, seed])
            law, react = random_law(rng), rng.uniform(0.12, 0.2)
            t = rounded_splits(law, at, react_s=react, rng=rng)
            top = float(law.speed(t[-1] - react))
            truths = {"v_max": law.v_max, "tau": law.tau, "first_movement": react, "top_speed": top}
            yield fitted(bare, t_s=t, x_m=at), truths

    counts = covered(reps())
    assert counts.pop("split") >= AT_LEAST
    assert min(counts.values()) >= AT_LEAST, counts


def test_intervals_from_noisy_speeds_cover(bare) -> None:
    """Ten readings a second with 0.1 m/s of noise."""
    t = np.arange(0, 5.5, 0.1)

    def reps():
        for seed in range(REPS):
            rng = np.random.default_rng([9, seed])
            law, start = random_law(rng), rng.uniform(0.3, 0.7)
            v = np.maximum(law.speed(t - start) + 0.1 * rng.standard_normal(t.size), 0.0)
            top = float(law.speed(t[-1] - start))
            truths = {"v_max": law.v_max, "tau": law.tau, "first_movement": start, "top_speed": top}
            yield fitted(bare, t_s=t, v_mps=v), truths

    counts = covered(reps())
    assert counts.pop("split") >= AT_LEAST
    assert min(counts.values()) >= AT_LEAST, counts


# --- errors, sized by the table -----------------------------------------------------------------


def test_table_errors_are_told(bare) -> None:
    """The sd is the scatter about the law, with Student's factor for few rows; what all rows share is left out."""
    rng = np.random.default_rng(1)
    t = np.arange(0, 5.5, 0.1)
    fit = fitted(bare, t_s=t, v_mps=MONO.speed(t - 0.5) + 0.1 * rng.standard_normal(t.size))
    text = codes(fit)["table_errors"]
    sd, unit = text.split("law (")[1].split(")")[0].split()
    assert unit == "m/s"
    assert float(sd) == pytest.approx(0.1, rel=0.25)
    assert "not in the intervals" in text
    splits = fitted(bare, t_s=rounded_splits(MONO, TENS, react_s=0.15), x_m=TENS)
    assert " m)" in codes(splits)["table_errors"]


def test_noisier_tables_have_wider_intervals(bare) -> None:
    t = np.arange(0, 5.5, 0.1)
    noise = np.random.default_rng(2).standard_normal(t.size)
    widths = []
    for size in (0.05, 0.2):
        q = fitted(bare, t_s=t, v_mps=MONO.speed(t - 0.5) + size * noise).quantities["v_max"]
        widths.append(q.high - q.low)
    assert widths[1] == pytest.approx(4 * widths[0], rel=0.3)


def test_a_perfect_table_is_not_called_exact(bare) -> None:
    fit = fitted(bare, t_s=0.15 + MONO.time_at(TENS), x_m=TENS)
    for name in ("v_max", "tau", "top_speed"):
        q = fit.quantities[name]
        assert q.low < q.value < q.high


def test_the_level_is_passed_on(bare) -> None:
    t = rounded_splits(MONO, TENS, react_s=0.15)
    narrow = fit_table(t_s=t, x_m=TENS, v_mps=None, rep=bare, settings=Settings(level=0.8))
    wide = fitted(bare, t_s=t, x_m=TENS)
    assert isinstance(narrow, Fit)
    a, b = (f.quantities["v_max"] for f in (narrow, wide))
    assert a.level == 0.8
    assert a.high - a.low < 0.75 * (b.high - b.low)


# --- a section without a start ------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["splits", "positions", "speeds"])
def test_a_flying_table_refuses_what_needs_the_start(bare, kind) -> None:
    """Entered three seconds after the start."""
    if kind == "splits":
        x = np.arange(0.0, 41.0, 8.0)
        table = {"t_s": 1.0 + MONO.time_at(20 + x) - MONO.time_at(20.0), "x_m": x}
    else:
        t = np.arange(0, 3, 0.1)
        table = {"t_s": t}
        table |= {"v_mps": MONO.speed(t + 3)} if kind == "speeds" else {"x_m": MONO.position(t + 3) - MONO.position(3)}
    fit = fitted(bare, **table)
    assert fit.start == "flying"
    assert "start_not_seen" in codes(fit)
    assert not {"F0", "v_max", "tau", "first_movement"} & set(fit.quantities)
    assert fit.splits == ()
    assert value(fit, "top_speed") == pytest.approx(9.6, abs=0.25)


# --- refusals -----------------------------------------------------------------------------------


def test_too_few_rows(bare) -> None:
    answer = refused(bare, "too_few_rows", t_s=np.arange(1.0, 5.0), x_m=np.arange(10.0, 50.0, 10.0))
    assert "has 4 usable rows" in answer.reason
    assert "at least 5" in answer.reason
    # The gun's own row does not count.
    refused(bare, "too_few_rows", t_s=np.arange(0.0, 5.0), x_m=np.arange(0.0, 50.0, 10.0))


def test_neither_positions_nor_speeds(bare) -> None:
    with pytest.raises(ValueError, match="give positions or speeds"):
        fit_table(t_s=np.arange(10.0), x_m=None, v_mps=None, rep=bare)


def test_body_and_air_are_asked_for(bare, world: SimpleNamespace) -> None:
    t = 0.15 + MONO.time_at(TENS)
    assert "no_body_or_air" in codes(fitted(bare, t_s=t, x_m=TENS))
    no_wind = replace(world.REP, splits_m=(10.0,), air=Air(temperature_c=20.0, pressure_hpa=1013.25))
    said = codes(fitted(no_wind, t_s=t, x_m=TENS))
    assert {"humidity_assumed", "wind_unknown"} <= set(said)
    assert "no_body_or_air" not in said


def test_a_table_in_which_nobody_moves(bare) -> None:
    answer = fit_table(t_s=np.arange(1.0, 11.0), x_m=np.full(10, 20.0), v_mps=None, rep=bare)
    assert isinstance(answer, Failure)
    assert answer.code in {"no_law_fits", "too_little_run"}
