"""The fitting core on simulated motions: what it recovers, what it refuses, and what it says about it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from vidkin.constants import G_MPS2
from vidkin.core.air import air_density, drag_area_m2
from vidkin.core.fit import fit_motion, fit_series
from vidkin.core.fit.data import Series
from vidkin.core.fit.view import Rough, View
from vidkin.core.models import ConstantPower, ConstantPowerDrag, ForceVelocity, MonoExponential
from vidkin.notices import Failure, failure
from vidkin.stages import Air, Athlete, Fit, Lane, Motion, Rep, Settings, Steps

NO_STEPS = failure("no_step_rhythm", seconds=2.0)
DENSITY = air_density(20.0, 101325.0, 50.0)
AREA = drag_area_m2(1.75, 70.0)
K = DENSITY * AREA / (2 * 70.0)
FV = ForceVelocity(F0=7.6, V0=9.8, k_drag=K)
MONO = MonoExponential(v_max=9.4, tau=1.2)
START_S, X0_M = 0.5, -0.3
#: Enough for the laws, quick to fit.
RATE_HZ = 30.0
#: A scale error of 0.3 %, a place error of 1 cm.
SHARED = (0.003, 0.01)


def columns(x_m, shared=SHARED):
    return np.column_stack([shared[0] * (x_m - 8.0), np.full_like(x_m, shared[1])])


def clock(duration_s, rate_hz=RATE_HZ):
    return 0.004 + np.arange(round(duration_s * rate_hz)) / rate_hz


def standing(world, law, *, duration_s=3.2, error_m=0.0, shared=SHARED, **how) -> Motion:
    """A start from rest at 0.5 s; `error_m` (N,) or 0 is added to the true positions."""
    t = clock(duration_s)
    x = X0_M + law.position(t - START_S) + error_m
    return world.as_motion(t, x, shared_m=columns(x, shared), names=("scale", "place"), **how)


def flying(world, law, *, since_s=2.0, duration_s=1.5, error_m=0.0, **how) -> Motion:
    """A section entered `since_s` after the start."""
    t = clock(duration_s, 60.0)
    x = law.position(t + since_s) - law.position(since_s) + error_m
    return world.as_motion(t, x, shared_m=columns(x), names=("scale", "place"), **how)


def fitted(motion, rep, *, steps=NO_STEPS, settings=None) -> Fit:
    fit = fit_motion(motion, rep, steps=steps, settings=settings)
    assert isinstance(fit, Fit), fit
    return fit


def value(fit: Fit, name: str) -> float:
    return fit.quantities[name].value


def refusals(fit: Fit) -> Mapping[str, Failure]:
    assert all(isinstance(r, Failure) and not r for r in fit.refused)
    return {r.code: r for r in fit.refused}


def remarks(fit: Fit) -> Mapping[str, str]:
    return {n.code: n.text for n in fit.notices}


@pytest.fixture(scope="module")
def rep(world: SimpleNamespace) -> Rep:
    return replace(world.REP, splits_m=(5.0, 10.0, 12.5))


@pytest.fixture(scope="module")
def bare(rep) -> Rep:
    """Neither body nor air."""
    return replace(rep, athlete=Athlete(), air=Air())


@pytest.fixture(scope="module")
def clean(world: SimpleNamespace, rep) -> Fit:
    """A standing start without errors, force-velocity law."""
    return fitted(standing(world, FV), rep)


@pytest.fixture(scope="module")
def clean_mono(world: SimpleNamespace, bare) -> Fit:
    return fitted(standing(world, MONO), bare)


@pytest.fixture(scope="module")
def fly(world: SimpleNamespace, rep) -> Fit:
    return fitted(flying(world, FV), rep)


# --- what is recovered --------------------------------------------------------------------------


def test_force_velocity_is_recovered(clean) -> None:
    assert clean.start == "standing"
    for name, truth in (("F0", 7.6), ("V0", 9.8), ("P_max", 7.6 * 9.8 / 4)):
        assert value(clean, name) == pytest.approx(truth, rel=0.01)
    assert value(clean, "F0_absolute") == pytest.approx(70 * value(clean, "F0"))
    assert value(clean, "P_max_absolute") == pytest.approx(70 * value(clean, "P_max"))
    assert value(clean, "P_max") == pytest.approx(value(clean, "F0") * value(clean, "V0") / 4)
    assert value(clean, "first_movement") == pytest.approx(START_S, abs=0.006)


def test_top_speed_and_its_place_are_recovered(clean) -> None:
    end = clock(3.2)[-1] - START_S
    assert value(clean, "top_speed") == pytest.approx(float(FV.speed(end)), rel=0.003)
    assert value(clean, "top_speed_at") == pytest.approx(X0_M + float(FV.position(end)), abs=0.03)


def test_splits_are_those_of_the_law(clean) -> None:
    """From first movement to the start line + distance, 0.3 m of which lie behind the line."""
    assert [s.distance_m for s in clean.splits] == [5.0, 10.0, 12.5]
    for split in clean.splits:
        assert split.time_s == pytest.approx(float(FV.time_at(split.distance_m - X0_M)), abs=0.008)
        assert split.low_s < split.time_s < split.high_s


def test_ratio_of_force_follows_its_definition(clean) -> None:
    """RF at 0.3 s and its slope on speed from there on (Samozino et al. 2016, method MEM), at the truth."""
    t = np.arange(0.3, clock(3.2)[-1] - START_S, 0.02)
    v = FV.speed(t)
    force = FV.acceleration(t) + K * v * np.abs(v)
    ratio = 100 * force / np.hypot(force, G_MPS2)
    assert value(clean, "RF_max") == pytest.approx(ratio[0], rel=0.01)
    assert value(clean, "D_RF") == pytest.approx(np.polyfit(v, ratio, 1)[0], rel=0.03)


def test_air_is_taken_from_body_and_weather(clean) -> None:
    top = value(clean, "top_speed")
    assert value(clean, "air_density") == pytest.approx(DENSITY)
    assert value(clean, "drag_area") == pytest.approx(AREA)
    assert value(clean, "drag_force") == pytest.approx(0.5 * DENSITY * AREA * top**2, rel=0.01)
    forward = value(clean, "drag_force") + 70.0 * float(FV.acceleration(clock(3.2)[-1] - START_S))
    assert value(clean, "drag_power_share") == pytest.approx(100 * value(clean, "drag_force") / forward, rel=0.05)


def test_mono_exponential_is_recovered(clean_mono) -> None:
    assert value(clean_mono, "v_max") == pytest.approx(9.4, rel=0.005)
    assert value(clean_mono, "tau") == pytest.approx(1.2, rel=0.02)
    assert clean_mono.law == "mono_exponential"


def test_laws_are_compared(clean, clean_mono) -> None:
    """Every law that applies, by criterion; weights add up to 1; the preferred law weighs most."""
    assert set(clean.laws) == {"force_velocity", "mono_exponential", "constant_power", "constant_power_drag"}
    assert set(clean_mono.laws) == set(clean.laws) - {"force_velocity"}
    for fit in (clean, clean_mono):
        criteria = [law.criterion for law in fit.laws.values()]
        weights = np.array([law.weight for law in fit.laws.values()])
        assert criteria == sorted(criteria)
        assert weights.sum() == pytest.approx(1.0)
        assert fit.laws[fit.law].weight == weights.max()
        assert weights == pytest.approx(np.exp(-0.5 * (np.array(criteria) - criteria[0])) * weights[0])
        for name, law in fit.laws.items():
            assert law.name == name
            assert law.words.endswith(".")
            assert {"x0", "t0"} <= set(law.parameters)
            assert set(law.sd) <= set(law.parameters)
    assert clean.laws["constant_power"].weight < 1e-6


def test_every_interval_holds_its_value(clean, clean_mono, fly) -> None:
    for fit in (clean, clean_mono, fly):
        for name, q in fit.quantities.items():
            assert q.name == name
            assert q.level == 0.95
            assert q.unit
            assert q.method
            if q.low is None or q.high is None:
                assert q.why_no_interval
            else:
                assert q.low < q.value < q.high
                assert not q.why_no_interval


def test_curves_belong_together(clean, clean_mono) -> None:
    for fit in (clean, clean_mono):
        c = fit.curves
        assert c.t_s[0] == pytest.approx(value(fit, "first_movement"), abs=0.011)
        assert np.all((c.v_low_mps <= c.v_mps) & (c.v_mps <= c.v_high_mps))
        assert np.diff(c.x_m) == pytest.approx(0.5 * (c.v_mps[1:] + c.v_mps[:-1]) * np.diff(c.t_s), abs=2e-4)
        assert c.power_w_kg == pytest.approx(c.force_n_kg * c.v_mps)
    assert clean_mono.curves.drag_n.size == 0
    assert clean_mono.curves.force_n_kg == pytest.approx(clean_mono.curves.a_mps2)
    c = clean.curves
    assert c.drag_n == pytest.approx(0.5 * DENSITY * AREA * c.v_mps**2)
    assert c.force_n_kg == pytest.approx(c.a_mps2 + c.drag_n / 70.0)


def test_residuals_are_measured_minus_fitted(world: SimpleNamespace, bare) -> None:
    rng = np.random.default_rng(1)
    noise = 0.02 * rng.standard_normal(clock(3.2).size)
    law = (fit := fitted(standing(world, MONO, error_m=noise, x_sd_m=0.02), bare)).laws[fit.law]
    truth = X0_M + MONO.position(law.t_s - START_S)
    assert law.x_m == pytest.approx(truth, abs=0.03)
    assert np.std(law.residual_m) == pytest.approx(0.02, rel=0.35)
    assert np.corrcoef(law.residual_m, noise[: law.residual_m.size])[0, 1] > 0.9


# --- symmetries ---------------------------------------------------------------------------------


def test_clock_and_start_line_may_be_anywhere(world: SimpleNamespace, bare, clean_mono) -> None:
    """The same run 100 s later in the clip and 40 m farther along the axis, start line and all."""
    motion = standing(world, MONO)
    later = replace(motion, t_s=motion.t_s + 100, x_m=motion.x_m + 40, smooth_x_m=motion.smooth_x_m + 40)
    fit = fitted(later, replace(bare, lane=Lane(start_x_m=40.0)))
    for name in ("top_speed", "v_max", "tau"):
        assert value(fit, name) == pytest.approx(value(clean_mono, name), rel=2e-3)
    assert value(fit, "first_movement") == pytest.approx(value(clean_mono, "first_movement") + 100, abs=2e-3)
    for a, b in zip(fit.splits, clean_mono.splits, strict=True):
        assert a.time_s == pytest.approx(b.time_s, abs=2e-3)
    # Places are told from the start line, like splits.
    assert value(fit, "top_speed_at") == pytest.approx(value(clean_mono, "top_speed_at"), abs=0.02)


def test_the_level_sets_the_width(world: SimpleNamespace, bare, clean_mono) -> None:
    """80 % intervals are 0.65 times as wide as 95 % ones (normal quantiles 1.2816 and 1.95996)."""
    fit = fitted(standing(world, MONO), bare, settings=Settings(level=0.8))
    for name in ("top_speed", "v_max", "tau", "first_movement"):
        narrow, wide = fit.quantities[name], clean_mono.quantities[name]
        assert narrow.level == 0.8
        assert (narrow.high - narrow.low) / (wide.high - wide.low) == pytest.approx(0.654, abs=0.07)
    assert fit.splits[0].high_s - fit.splits[0].low_s < clean_mono.splits[0].high_s - clean_mono.splits[0].low_s


def test_the_same_motion_gives_the_same_fit(world: SimpleNamespace, bare, clean_mono) -> None:
    again = fitted(standing(world, MONO), bare)
    assert again.quantities == clean_mono.quantities
    assert again.splits == clean_mono.splits


# --- shared errors ------------------------------------------------------------------------------


def test_a_shared_scale_error_does_not_pull_the_fit(world: SimpleNamespace, bare) -> None:
    """1 % of shared scale sd and 2 cm of wobble: top speed is unbiased.

    The columns grow with position; read off noisy positions they would let the fit prefer a smaller scale, by about
    1 % here (D'Agostini, Nucl. Instrum. Methods A 346 (1994) 306; from memory).
    """
    rng = np.random.default_rng(6)
    t = clock(3.2)
    truth = float(MONO.speed(t[-1] - START_S))
    errors = []
    for _ in range(10):
        error = world.wobble(t, rng, start_s=START_S, sizes=(0.02, 0.01, 0.01, 0.008))
        motion = standing(world, MONO, error_m=error, shared=(0.01, 0.0))
        q = fitted(motion, replace(bare, splits_m=(10.0,))).quantities["top_speed"]
        assert q.high - q.low > 2 * 1.9 * 0.01 * truth  # the scale is in the interval
        errors.append(q.value / truth - 1)
    # Ten reps scatter by about 0.5 % each: their mean is good to 0.2 %.
    assert abs(np.mean(errors)) < 0.004


def test_shared_errors_set_the_width(world: SimpleNamespace, bare) -> None:
    """Ten times the scale error: the interval of top speed follows, that of first movement does not."""
    small, large = (
        fitted(standing(world, MONO, shared=(scale, 0.0)), replace(bare, splits_m=(10.0,))) for scale in (0.002, 0.02)
    )
    width = [f.quantities["top_speed"].high - f.quantities["top_speed"].low for f in (small, large)]
    assert width[1] == pytest.approx(2 * 1.96 * 0.02 * value(large, "top_speed"), rel=0.15)
    assert width[0] < 0.4 * width[1]
    for name, most in (("first_movement", 1.6), ("tau", 2.0)):
        a, b = (f.quantities[name].high - f.quantities[name].low for f in (small, large))
        assert b < most * a


# --- a flying section ---------------------------------------------------------------------------


def test_a_flying_rep_refuses_what_needs_the_start(fly) -> None:
    assert fly.start == "flying"
    answer = refusals(fly)["start_not_seen"]
    for name in ("F0", "V0", "P_max", "RF_max", "D_RF", "v_max", "tau", "Z", "first_movement"):
        assert name not in fly.quantities
        assert name in answer.reason
    assert fly.splits == ()
    assert "Film the start" in answer.hint


def test_a_flying_rep_answers_the_rest(fly) -> None:
    end = clock(1.5, 60.0)[-1] + 2.0
    assert value(fly, "top_speed") == pytest.approx(float(FV.speed(end)), rel=0.01)
    assert value(fly, "drag_force") == pytest.approx(0.5 * DENSITY * AREA * value(fly, "top_speed") ** 2, rel=0.02)
    assert set(fly.laws) <= {"constant_acceleration", "mono_exponential", "constant_speed"}


def test_a_runner_who_slows_down_was_fastest_at_the_beginning(world: SimpleNamespace, bare) -> None:
    t = clock(1.5, 60.0)
    x = 9.5 * t - 0.4 * t**2
    fit = fitted(world.as_motion(t, x, shared_m=columns(x), names=("scale", "place")), bare)
    assert value(fit, "top_speed") == pytest.approx(9.5, abs=0.1)
    assert value(fit, "top_speed_at") == pytest.approx(0.0, abs=0.3)


def test_a_twitch_before_the_start_makes_no_noise(world: SimpleNamespace, bare) -> None:
    """A runner who rocks forward as the clip begins and stands again is taken for a flying one.

    No law of a flying section fits that, and some of their constants are hardly fixed: no warning, no number that is
    not finite.
    """
    t = clock(3.2)
    fit = fitted(standing(world, MONO, error_m=0.12 * np.minimum(t / 0.12, 1.0)), bare)
    assert fit.start == "flying"
    for q in fit.quantities.values():
        assert np.isfinite([q.value, q.value if q.low is None else q.low, q.value if q.high is None else q.high]).all()
    for law in fit.laws.values():
        assert np.isfinite(list(law.sd.values())).all()


def test_a_rep_first_seen_in_motion_is_no_start(world: SimpleNamespace, rep) -> None:
    """First seen a fifth of a second after the start, at 1.4 m/s: half the true power would come out."""
    fit = fitted(flying(world, FV, since_s=0.2, duration_s=2.5), rep)
    assert fit.start == "flying"
    assert "start_not_seen" in refusals(fit)


# --- refusals -----------------------------------------------------------------------------------


def test_plateau_not_seen(world: SimpleNamespace, rep) -> None:
    """The first three metres: F0, but no V0, P_max or D_RF, and the share of V0 that was reached is said."""
    slow = ForceVelocity(F0=5.0, V0=11.0, k_drag=K)
    short = standing(world, slow, duration_s=1.8)
    fit = fitted(short, rep)
    answer = refusals(fit)["plateau_not_seen"]
    assert not {"V0", "P_max", "D_RF", "P_max_absolute"} & set(fit.quantities)
    assert value(fit, "F0") == pytest.approx(5.0, rel=0.06)
    percent = float(answer.reason.split("ends at ")[1].split(" %")[0])
    assert percent == pytest.approx(100 * float(slow.speed(short.t_s[-1] - START_S)) / 11.0, abs=6)
    assert "Film farther" in answer.hint


def test_drag_not_fitted_in_a_short_view(clean) -> None:
    answer = refusals(clean)["drag_not_fitted"]
    way = float(FV.position(clock(3.2)[-1] - START_S))
    seen = float(answer.reason.split("refused: ")[1].split(" m of")[0])
    assert seen == pytest.approx(way, abs=0.2)
    assert "20 m are needed" in answer.reason
    assert not {"Z", "k_drag", "effective_drag_area"} & set(clean.quantities)


def test_drag_not_fitted_where_it_cannot_be_told_from_power(world: SimpleNamespace, bare) -> None:
    """24 m in view, but with rows that are good to two metres only."""
    fit = fitted(standing(world, MONO, duration_s=4.2, x_sd_m=2.0), bare)
    assert "told apart" in refusals(fit)["drag_not_fitted"].reason
    assert "Z" not in fit.quantities


@pytest.mark.parametrize(
    ("athlete", "air", "missing"),
    [
        ({"mass_kg": None}, {}, ["[athlete] mass_kg"]),
        ({"stature_m": None}, {"temperature_c": None}, ["[athlete] stature_m", "[air] temperature_c"]),
        ({}, {"pressure_hpa": None}, ["[air] pressure_hpa or altitude_m"]),
    ],
)
def test_no_body_or_air_names_what_is_missing(world: SimpleNamespace, rep, athlete, air, missing) -> None:
    told = replace(rep, athlete=replace(rep.athlete, **athlete), air=replace(rep.air, **air), splits_m=(10.0,))
    fit = fitted(flying(world, FV), told)
    answer = refusals(fit)["no_body_or_air"]
    assert answer.reason.endswith(f"missing: {', '.join(missing)}.")
    assert "drag_force" not in fit.quantities
    assert "top_speed" in fit.quantities


def test_without_body_the_other_laws_still_answer(clean_mono) -> None:
    assert "no_body_or_air" in refusals(clean_mono)
    assert "F0" not in clean_mono.quantities
    assert len(clean_mono.splits) == 3


@pytest.mark.parametrize(("rows", "step_m"), [(8, 1.0), (60, 0.03)])
def test_too_little_run(world: SimpleNamespace, rep, rows, step_m) -> None:
    """Too few rows, or too short a way."""
    t = np.arange(rows) / 30
    motion = world.as_motion(t, step_m * np.arange(rows), window_s=0.2)
    answer = fit_motion(motion, rep, steps=NO_STEPS)
    assert isinstance(answer, Failure)
    assert (answer.stage, answer.code) == ("fit", "too_little_run")
    assert f"{step_m * (rows - 1):.1f} m of running in {rows} rows" in answer.reason


#: Eleven rows of stillness and one 3.5 m on: where and when it began, how fast, how hard are one number together.
ONE_STEP = (np.append(np.arange(11) / 30, 1.4), np.append(np.zeros(11), 3.5))


def test_no_law_fits(world: SimpleNamespace, bare) -> None:
    t, x = ONE_STEP
    answer = fit_motion(world.as_motion(t, x, window_s=0.2), bare, steps=NO_STEPS)
    assert isinstance(answer, Failure)
    assert (answer.stage, answer.code) == ("fit", "no_law_fits")
    assert "told apart" in answer.reason.replace("tell the parameters apart", "told apart")
    assert "tracked.mp4" in answer.hint


def test_law_not_solved(bare) -> None:
    """Three rows: enough for constant power, too few for a law with two constants and no prior."""
    t = np.array([1.0, 1.5, 2.0])
    series = Series(kind="position", t_s=t, y=ConstantPower(Z=15.0).position(t - 0.5), cov=1e-4 * np.eye(t.size))
    view = View(start="standing", first_s=0.0, last_s=2.0, first_m=0.0, last_m=float(series.y[-1]), start_x_m=0.0)
    rough = Rough(x0_m=0.0, t0_s=0.45, v_start_mps=0.5, v_end_mps=5.0, tau_s=1.0)
    no_drag = failure("no_body_or_air", missing="all")
    fit = fit_series(series, view, bare, rough=rough, drag=no_drag, settings=Settings())
    assert isinstance(fit, Fit), fit
    assert "constant_power" in fit.laws
    assert value(fit, "top_speed") == pytest.approx(np.sqrt(2 * 15.0 * 1.5), rel=0.05)
    answer = refusals(fit)["law_not_solved"]
    assert "'mono_exponential'" in answer.reason
    assert "3 values cannot fix 4 parameters" in answer.reason
    assert "mono_exponential" not in fit.laws
    assert "longer stretch" in answer.hint


# --- notices ------------------------------------------------------------------------------------


def test_humidity_and_wind_are_assumed_aloud(world: SimpleNamespace, rep, fly) -> None:
    """Without them the answers hardly move, the wind's error grows, and both are said; altitude may give pressure."""
    air = Air(temperature_c=20.0, altitude_m=0.0)
    fit = fitted(flying(world, FV), replace(rep, air=air))
    said = remarks(fit)
    assert "50 %" in said["humidity_assumed"]
    assert "1.5 m/s" in said["wind_unknown"]
    assert value(fit, "air_density") == pytest.approx(DENSITY, rel=1e-4)
    plain, wide = fly.quantities["drag_force"], fit.quantities["drag_force"]
    assert wide.value == pytest.approx(plain.value, rel=0.01)
    assert wide.high - wide.low > 1.2 * (plain.high - plain.low)
    assert not {"humidity_assumed", "wind_unknown"} & set(remarks(fly))


def test_wind_pushes_or_holds(world: SimpleNamespace, rep, fly) -> None:
    """A tailwind of 2 m/s takes drag down to ((v - 2)/v)^2 of it."""
    fit = fitted(flying(world, FV), replace(rep, air=replace(rep.air, wind_mps=2.0)))
    v = value(fly, "top_speed")
    assert value(fit, "drag_force") / value(fly, "drag_force") == pytest.approx(((v - 2) / v) ** 2, rel=0.02)


def test_lumped_drag_is_named(world: SimpleNamespace, rep) -> None:
    """Power and drag fitted together over 26 m: the drag area is several times the body's, and that is said."""
    law = ConstantPowerDrag(Z=20.0, k_drag=0.02)
    fit = fitted(standing(world, law, duration_s=4.2), rep)
    assert value(fit, "Z") == pytest.approx(20.0, rel=0.03)
    assert value(fit, "k_drag") == pytest.approx(0.02, rel=0.05)
    area = value(fit, "effective_drag_area")
    assert area == pytest.approx(2 * 70.0 * value(fit, "k_drag") / DENSITY)
    text = remarks(fit)["lumped_drag"]
    assert f"{area:.2f} m²" in text
    assert f"{area / AREA:.1f} times" in text
    assert "not aerodynamic" in text
    assert "lumped" in fit.quantities["k_drag"].method
    # The air's own share is told beside it, from body size.
    assert value(fit, "drag_area") == pytest.approx(AREA)


def test_law_misses_curve(world: SimpleNamespace, bare, clean_mono) -> None:
    """A runner who holds back and then goes again: no law does that, and the curve is to be trusted."""
    t = clock(4.0)
    first, again = MonoExponential(v_max=4.5, tau=0.4), MonoExponential(v_max=5.0, tau=0.3)
    x = X0_M + first.position(t - START_S) + again.position(t - 2.4)
    fit = fitted(world.as_motion(t, x, v_sd_mps=0.1), bare)
    text = remarks(fit)["law_misses_curve"]
    assert f"'{fit.law}'" in text
    assert float(text.split("up to ")[1].split(" m/s")[0]) > 0.5
    assert "law_misses_curve" not in remarks(clean_mono)


# --- steps --------------------------------------------------------------------------------------


def contacts(law, *, rate_hz=4.5, until_s=3.2, keep=slice(None)) -> Steps:
    on = START_S + np.arange(1, int((until_s - START_S) * rate_hz)) / rate_hz
    on = on[keep]
    return Steps(
        on_s=on,
        off_s=on + 0.11,
        x_m=X0_M + law.position(on - START_S) + 0.3,
        step_rate_hz=rate_hz,
        step_rate_sd_hz=0.06,
        lateral_m=0.61,
        lateral_sd_m=0.1,
        lateral_source="feet",
    )


def test_no_steps_is_passed_on(clean_mono) -> None:
    answer = refusals(clean_mono)["no_steps"]
    assert NO_STEPS.reason in answer.reason
    assert not {"step_rate", "step_length"} & set(clean_mono.quantities)


def test_steps_near_top_speed(world: SimpleNamespace, bare) -> None:
    fit = fitted(standing(world, MONO), bare, steps=contacts(MONO))
    rate, length = fit.quantities["step_rate"], fit.quantities["step_length"]
    assert rate.value == pytest.approx(4.5, rel=0.01)
    assert length.low < value(fit, "top_speed") / 4.5 < length.high
    assert "contacts near top speed" in rate.method
    assert "no_steps" not in refusals(fit)


def test_few_contacts_leave_the_whole_pass(world: SimpleNamespace, bare) -> None:
    """With two contacts the rate is the pass's own, with its sd, and the length follows from top speed."""
    fit = fitted(standing(world, MONO), bare, steps=contacts(MONO, keep=slice(8, 10)))
    rate = fit.quantities["step_rate"]
    assert rate.method == "whole pass"
    assert rate.value == 4.5
    assert rate.high - rate.low == pytest.approx(2 * 1.96 * 0.06, rel=1e-3)
    assert value(fit, "step_length") == pytest.approx(value(fit, "top_speed") / 4.5)


def test_splits_beyond_the_view_are_left_out(world: SimpleNamespace, bare) -> None:
    fit = fitted(standing(world, MONO), replace(bare, splits_m=(10.0, 60.0)))
    assert [s.distance_m for s in fit.splits] == [10.0]
    plain = fitted(standing(world, MONO), replace(bare, splits_m=()))
    assert [s.distance_m for s in plain.splits] == [5.0, 10.0]
