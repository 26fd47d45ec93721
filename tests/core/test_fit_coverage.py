"""Every interval of the fitting core covers the truth at its rate, on reps drawn from the errors that are stated.

Each rep: positions by a law, plus one draw of the shared errors (scale, place, posture), one of the outline's wobble
about the mass centre, and independent noise. Air, wind and contacts are drawn from their stated sd as well.
"""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass, field, replace
from types import SimpleNamespace

import numpy as np
import pytest

from vidkin.constants import G_MPS2
from vidkin.core.air import DRAG_AREA_REL_SD, air_density, drag_area_m2
from vidkin.core.fit import fit_motion
from vidkin.core.models import ConstantPowerDrag, ForceVelocity, MonoExponential
from vidkin.stages import Air, Athlete, Fit, Steps

MASS_KG, STATURE_M = 70.0, 1.75
DENSITY = air_density(20.0, 101325.0, 50.0)
AREA = drag_area_m2(STATURE_M, MASS_KG)
START_S, X0_M, MIDDLE_M = 0.5, -0.3, 8.0
STEP_HZ = 4.5
#: Sd of one reading of a wind gauge against the wind that the runner meets [m/s] (Linthorne; READ).
WIND_SD_MPS = 0.9
#: What a touch-down [s] and a foot place [m] are worth, as the steps at top speed take them.
CONTACT_S, FOOT_M = 0.015, 0.08


@dataclass
class Record:
    """By quantity: did the interval hold the truth, the error, the half width as an sd; how often none was given."""

    held: dict[str, list[bool]] = field(default_factory=lambda: defaultdict(list))
    error: dict[str, list[float]] = field(default_factory=lambda: defaultdict(list))
    sd: dict[str, list[float]] = field(default_factory=lambda: defaultdict(list))
    missing: dict[str, int] = field(default_factory=lambda: defaultdict(int))
    names: set[str] = field(default_factory=set)

    def add(self, name, value, low, high, truth):
        if low is None or high is None:
            self.missing[name] += 1
            return
        self.held[name].append(low <= truth <= high)
        self.error[name].append(value - truth)
        self.sd[name].append((high - low) / (2 * 1.96))

    def share(self, name):
        return float(np.mean(self.held[name]))

    def width(self, name):
        """Stated over true error (root mean square), the wildest tenth of errors left out."""
        error = np.sort(np.abs(self.error[name]))[: round(0.9 * len(self.error[name]))]
        return float(np.sqrt(np.mean(np.square(self.sd[name])) / np.mean(error**2)))


def draw(kind, rng):
    """A law of the kind, the drag constant and the wind of that day."""
    wind = WIND_SD_MPS * rng.standard_normal()
    k = DENSITY * AREA / (2 * MASS_KG) * np.exp(DRAG_AREA_REL_SD * rng.standard_normal())
    if kind == "force_velocity":
        return ForceVelocity(F0=rng.uniform(6.5, 8.5), V0=rng.uniform(9, 11), k_drag=k, wind=wind), k, wind
    if kind == "mono_exponential":
        return MonoExponential(v_max=rng.uniform(8.5, 10.5), tau=rng.uniform(1.0, 1.4)), k, wind
    return ConstantPowerDrag(Z=rng.uniform(14, 22), k_drag=rng.uniform(0.015, 0.025)), k, wind


def motion(world, law, t_s, rng):
    """What is measured of the law; shared columns are known at the measured positions only."""
    x = X0_M + law.position(t_s - START_S)
    posture = 0.05 * (1 - np.exp(-np.maximum(t_s - START_S - 0.25, 0) / 0.8))

    def columns(at_m):
        return np.column_stack([0.004 * (at_m - MIDDLE_M), np.full_like(x, 0.01), posture])

    seen = x + columns(x) @ rng.standard_normal(3) + world.wobble(t_s, rng, start_s=START_S, rate_hz=STEP_HZ)
    seen += 0.003 * rng.standard_normal(t_s.size)
    return world.as_motion(t_s, seen, shared_m=columns(seen), names=("scale", "place", "posture"), rate_hz=STEP_HZ)


def contacts(law, end_s, rng) -> Steps:
    on = START_S + np.arange(1, int((end_s - START_S) * STEP_HZ)) / STEP_HZ
    return Steps(
        on_s=on + CONTACT_S * rng.standard_normal(on.size),
        off_s=on + 0.11,
        x_m=X0_M + law.position(on - START_S) + 0.3 + FOOT_M * rng.standard_normal(on.size),
        step_rate_hz=STEP_HZ,
        step_rate_sd_hz=0.05,
        lateral_m=0.61,
        lateral_sd_m=0.1,
        lateral_source="feet",
    )


def truths(law, k, wind, end_s):
    """True values of every quantity that has an interval, by the quantities' definitions."""
    run = end_s - START_S
    top = float(law.speed(run))
    on = np.arange(1, int(run * STEP_HZ)) / STEP_HZ
    fast = on[law.speed(on) >= 0.97 * top] if np.count_nonzero(law.speed(on) >= 0.97 * top) > 1 else on[-2:]
    known = {
        "top_speed": top,
        "top_speed_at": X0_M + float(law.position(run)),
        "first_movement": START_S,
        "step_rate": STEP_HZ,
        "step_length": float(np.mean(law.speed(fast))) / STEP_HZ,
    }
    if isinstance(law, MonoExponential):
        known |= {"v_max": law.v_max, "tau": law.tau}
    if isinstance(law, ConstantPowerDrag):
        known |= {"Z": law.Z, "k_drag": law.k_drag}
    if isinstance(law, ForceVelocity):
        known |= {"F0": law.F0, "V0": law.V0, "P_max": law.P_max, "drag_area": 2 * MASS_KG * k / DENSITY}
        known |= {"F0_absolute": MASS_KG * law.F0, "P_max_absolute": MASS_KG * law.P_max}
        t = np.arange(0.3, run, 0.02)
        v = law.speed(t)
        force = law.acceleration(t) + k * (v - wind) * np.abs(v - wind)
        ratio = 100 * force / np.hypot(force, G_MPS2)
        drag = MASS_KG * k * (top - wind) * abs(top - wind)
        known |= {"RF_max": float(ratio[0]), "D_RF": float(np.polyfit(v, ratio, 1)[0]), "drag_force": drag}
        known["drag_power_share"] = 100 * drag / (drag + MASS_KG * float(law.acceleration(run)))
    return known


def simulate(world, kind, reps, *, duration_s, seed) -> Record:
    rep = world.REP if kind == "force_velocity" else replace(world.REP, athlete=Athlete(), air=Air())
    t = 0.003 + np.arange(round(25 * duration_s)) / 25
    record = Record()
    for n in range(reps):
        rng = np.random.default_rng([seed, n])
        law, k, wind = draw(kind, rng)
        fit = fit_motion(motion(world, law, t, rng), rep, steps=contacts(law, t[-1], rng))
        assert isinstance(fit, Fit), fit
        assert fit.start == "standing"
        record.names |= set(fit.quantities)
        for name, truth in truths(law, k, wind, t[-1]).items():
            q = fit.quantities.get(name)
            if q is None:
                record.missing[name] += 1
            else:
                record.add(name, q.value, q.low, q.high, truth)
        for s in fit.splits:
            record.add(f"split {s.distance_m:g}", s.time_s, s.low_s, s.high_s, float(law.time_at(s.distance_m - X0_M)))
    return record


# Binomial, at a true rate of 95 %: 35 or more of 40 (88 %) with a probability of 98.6 %; 18 or more of 20 (90 %) with
# 92.5 %; 88 or more of 100 (88 %) with 99.6 %. Seeds are fixed, so a pass is a pass.
LEAST = 0.875
USUAL_REPS, LONG_REPS = 40, 20
LONG_S, USUAL_S = 4.2, 3.6


@pytest.fixture(scope="module")
def force_velocity(world: SimpleNamespace) -> Record:
    return simulate(world, "force_velocity", USUAL_REPS, duration_s=USUAL_S, seed=1)


@pytest.fixture(scope="module")
def mono(world: SimpleNamespace) -> Record:
    return simulate(world, "mono_exponential", USUAL_REPS, duration_s=USUAL_S, seed=2)


@pytest.fixture(scope="module")
def lumped(world: SimpleNamespace) -> Record:
    return simulate(world, "constant_power_drag", LONG_REPS, duration_s=LONG_S, seed=3)


def check(record: Record, name: str, *, reps: int) -> None:
    given = len(record.held[name])
    assert given + record.missing[name] == reps
    assert given >= 0.9 * reps, f"{name}: no interval in {record.missing[name]} of {reps} reps"
    assert record.share(name) >= LEAST, f"{name}: {record.share(name):.2f}"


OF_FORCE_VELOCITY = ("F0", "V0", "P_max", "F0_absolute", "P_max_absolute", "RF_max", "D_RF")
OF_AIR = ("drag_area", "drag_force", "drag_power_share")
OF_EVERY_LAW = ("top_speed", "top_speed_at", "first_movement", "step_rate", "step_length")


@pytest.mark.parametrize("name", [*OF_FORCE_VELOCITY, *OF_AIR, *OF_EVERY_LAW])
def test_force_velocity_reps(force_velocity: Record, name: str) -> None:
    check(force_velocity, name, reps=USUAL_REPS)


@pytest.mark.parametrize("name", ["v_max", "tau", *OF_EVERY_LAW])
def test_mono_exponential_reps(mono: Record, name: str) -> None:
    check(mono, name, reps=USUAL_REPS)


@pytest.mark.parametrize("name", ["Z", "k_drag", *OF_EVERY_LAW])
def test_constant_power_reps(lumped: Record, name: str) -> None:
    check(lumped, name, reps=LONG_REPS)


@pytest.mark.parametrize("distance_m", [5, 10, 15])
def test_splits(force_velocity: Record, mono: Record, lumped: Record, distance_m: int) -> None:
    held = [h for r in (force_velocity, mono, lumped) for h in r.held[f"split {distance_m}"]]
    assert len(held) == 2 * USUAL_REPS + LONG_REPS
    assert np.mean(held) >= 0.88


def test_every_quantity_with_an_interval_is_covered_here(force_velocity: Record, mono: Record, lumped: Record) -> None:
    """A new quantity needs a coverage test: add its truth above."""
    tested = {*OF_FORCE_VELOCITY, *OF_AIR, *OF_EVERY_LAW, "v_max", "tau", "Z", "k_drag"}
    # Air density has no interval (the stated weather carries no error); the effective area is k_drag times a constant.
    assert force_velocity.names | mono.names | lumped.names <= tested | {"air_density", "effective_drag_area"}


def test_intervals_are_not_simply_wide(force_velocity: Record, mono: Record) -> None:
    """Stated errors are no more than about twice the true ones (2.5 with the wildest tenth of those left out)."""
    for record, names in ((force_velocity, ("F0", "V0", "P_max", "top_speed")), (mono, ("v_max", "tau", "split 10"))):
        for name in names:
            assert record.width(name) < 2.5, name


def test_errors_are_of_the_size_that_coaches_need(force_velocity: Record) -> None:
    """With 0.4 % of scale error and 2 cm of wobble: top speed to 1 %, F0, V0, P_max to 4 % (root mean square)."""
    for name, truth, limit in (("top_speed", 8.7, 0.01), ("F0", 7.5, 0.04), ("V0", 10.0, 0.04), ("P_max", 18.8, 0.04)):
        assert np.sqrt(np.mean(np.square(force_velocity.error[name]))) < limit * truth
