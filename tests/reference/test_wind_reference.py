"""Wind and altitude effects of a force-velocity runner against published ones (source and mark beside each)."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from vidkin.core import air, uncertainty
from vidkin.core.models import ForceVelocity
from vidkin.core.uncertainty import Solution

SEA_LEVEL = air.standard_atmosphere(0.0)[2]

# name: mass [kg], 100 m time without reaction [s], top speed [m/s] (references section 6)
RUNNERS = {"man": (80.0, 9.85, 11.7), "woman": (58.0, 10.85, 10.6)}


@cache
def calm(name, drag_area):
    """A force-velocity runner tuned to 100 m time and top speed in calm air at sea level."""
    mass, time, top = RUNNERS[name]
    k = 0.5 * SEA_LEVEL * drag_area / mass

    def miss(p):
        law = ForceVelocity(F0=np.exp(p[0]), V0=np.exp(p[1]), k_drag=k)
        return np.array([law.time_at(100.0) - time, law.terminal_speed - top])

    found = uncertainty.solve(miss, np.log([9.0, top]), scale_by_residual=False)
    assert isinstance(found, Solution)
    assert found.cost < 1e-18
    f0, v0 = np.exp(found.parameters)
    return ForceVelocity(F0=f0, V0=v0, k_drag=k)


def effect(name, drag_area, wind=0.0, altitude=0.0):
    """Change of the 100 m time against calm air at sea level [s]; below 0 is an advantage."""
    law = calm(name, drag_area)
    other = replace(law, wind=wind, k_drag=law.k_drag * air.standard_atmosphere(altitude)[2] / SEA_LEVEL)
    return float(other.time_at(100.0) - RUNNERS[name][1])


@pytest.mark.parametrize("name", ["man", "woman"])
@pytest.mark.parametrize("drag_area", [0.36, 0.45])
def test_signs_and_asymmetry(name, drag_area):
    """A tailwind helps; an equal headwind costs more; twice the wind helps less than twice as much.

    Linthorne, J. Appl. Biomech. 10 (1994) 110-131, abstract: READ.
    """
    plus1, plus2, minus1, minus2 = (effect(name, drag_area, w) for w in (1.0, 2.0, -1.0, -2.0))
    assert plus2 < plus1 < 0 < minus1 < minus2
    assert minus2 > -plus2
    assert minus1 > -plus1
    assert -plus2 < -2 * plus1
    assert minus2 > 2 * minus1


@pytest.mark.parametrize("drag_area", [0.36, 0.45])
def test_size_of_the_wind_effect(drag_area):
    """+2 m/s: -0.10 +- 0.01 s for men (Linthorne 1994, READ), 0.10-0.12 s (Mureika, READ): band 0.08-0.13 s."""
    assert 0.08 <= -effect("man", drag_area, 2.0) <= 0.13


def test_women_gain_more():
    """+2 m/s: -0.12 +- 0.02 s for women against -0.10 s for men (Linthorne 1994, READ).

    A drag area of 0.36 m^2 gives more than that (0.151 s CALC): why the result is reported as a band.
    """
    woman, man = effect("woman", 0.36, 2.0), effect("man", 0.36, 2.0)
    assert woman < man
    assert 0.10 <= -woman <= 0.16


@pytest.mark.parametrize("drag_area", [0.36, 0.45])
def test_size_of_the_altitude_effect(drag_area):
    """2,250 m, drag only: about -0.07 s (Linthorne 1994, READ): band 0.05-0.08 s.

    NOT the observed -0.19 s at that altitude (Linthorne, Sports 4 (2016) 29), which is 2.5 times what drag explains.
    """
    assert 0.05 <= -effect("man", drag_area, altitude=2250.0) <= 0.08
    assert -effect("man", drag_area, altitude=1000.0) == pytest.approx(0.035, abs=0.012)  # 0.03-0.04: Mureika, READ


@pytest.mark.parametrize(
    ("name", "drag_area", "effects"),
    [
        ("man", 0.36, (-0.049, -0.092, 0.054, 0.114, -0.025, -0.049, -0.055)),
        ("man", 0.45, (-0.061, -0.115, 0.067, 0.142, -0.032, -0.061, -0.068)),
        ("woman", 0.36, (-0.080, -0.151, 0.090, 0.190, -0.038, -0.074, -0.082)),
    ],
)
def test_against_an_independent_integration(name, drag_area, effects):
    """References section 6: m v' = F - c v - drag, tuned as here and integrated by another program (CALC), 2 ms."""
    found = [effect(name, drag_area, w) for w in (1.0, 2.0, -1.0, -2.0)]
    found += [effect(name, drag_area, altitude=z) for z in (1000.0, 2000.0, 2250.0)]
    assert np.allclose(found, effects, rtol=0, atol=0.002)


CASES = ((2.0, 0.0), (-2.0, 0.0), (1.0, 0.0), (0.0, 1000.0), (0.0, 2000.0), (0.0, 2250.0))


@pytest.mark.parametrize(
    ("c", "effects"),
    [
        (1.03, (-0.108, 0.132, -0.057, -0.035, -0.066, -0.074)),  # c MEM, value from memory
        (1.027, (-0.097, 0.119, -0.051, -0.032, -0.060, -0.066)),  # c READ-2
    ],
)
def test_against_the_algebraic_form(c, effects):
    """t00 = t [c - (c - 1) e^(-0.000125 H) (1 - w t/100)^2], Mureika; t = 10.00 s. Effects CALC.

    The drag areas 0.36-0.45 m^2 must enclose what either published constant says, give or take 8 ms.
    """
    for (wind, altitude), expected in zip(CASES, effects, strict=True):
        still = 10.0 * (c - (c - 1) * np.exp(-0.000125 * altitude) * (1 - wind * 10.0 / 100) ** 2)
        assert 10.0 - still == pytest.approx(expected, abs=6e-4)
        ends = sorted(effect("man", area, wind, altitude) for area in (0.36, 0.45))
        assert ends[0] - 0.008 <= expected <= ends[1] + 0.008


# Men of about 10 s: wind, altitude [m], correction [s]. Coaching page, attributed there to Mureika 2008. READ-2.
TABLE = [
    (0, 500, -0.02), (0, 1000, -0.04), (0, 1500, -0.05), (0, 2000, -0.07), (0, 2500, -0.08),
    (1, 0, -0.05), (1, 500, -0.07), (1, 1000, -0.08), (1, 1500, -0.10), (1, 2000, -0.11), (1, 2500, -0.12),
    (2, 0, -0.10), (2, 500, -0.11), (2, 1000, -0.13), (2, 1500, -0.14), (2, 2000, -0.15), (2, 2500, -0.16),
]  # fmt: skip


@pytest.mark.parametrize(("wind", "altitude", "correction"), TABLE)
def test_against_the_table_of_corrections(wind, altitude, correction):
    """Within the band of drag areas 0.36-0.45 m^2, widened by 15 ms for rounding and for another runner's speed."""
    ends = sorted(effect("man", area, float(wind), float(altitude)) for area in (0.36, 0.45))
    assert ends[0] - 0.015 <= correction <= ends[1] + 0.015
