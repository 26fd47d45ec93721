"""Which quantity is read off which law, and what is refused with which reason."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from scipy.optimize import least_squares
from scipy.stats import norm

from vidkin.core import models
from vidkin.core.fit.derive import DRAWS, Solved, drawn, mixed, mixed_band, profiled, ratio_of_force
from vidkin.core.fit.laws import Drag
from vidkin.core.fit.view import View
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Array, Fit, LawFit, Motion, Quantity, Split, Steps

_SPLIT_STEP_M: Final = 5.0
#: A drag constant can be told from power only where this much of the run is in view [m].
_DRAG_WAY_M: Final = 20.0
#: V0 is refused where the run in view ends below this share of it.
_PLATEAU_SHARE: Final = 0.55
_LUMPED: Final = 1.8
_DISAGREES_SD: Final = 3.5
_LEAST_CONTACTS: Final = 5
_NEAR_TOP: Final = 0.9
_MEAN_NEAR_TOP: Final = 0.985
_LENGTH_BY_SPEED: Final = 0.6
#: Arms and head stir before, or after, the centre of mass does: sd of the onset seen in an outline [s].
_ONSET_S: Final = 0.008
_NO_DOUBT: Final = 0.99
_EDGE_M: Final = 0.12
#: What a touch-down and a foot place are worth (simulated scenes): sd.
_CONTACT_S: Final = 0.015
_FOOT_M: Final = 0.08


@dataclass(slots=True)
class Answer:
    """Grows while laws are asked; read-only tuples to the outside."""

    _quantities: list[Quantity]
    _refused: list[Failure]
    _notices: list[Notice]

    @property
    def quantities(self) -> tuple[Quantity, ...]:
        return tuple(self._quantities)

    @property
    def refused(self) -> tuple[Failure, ...]:
        return tuple(self._refused)

    @property
    def notices(self) -> tuple[Notice, ...]:
        return tuple(self._notices)

    def add(self, *quantities: Quantity) -> None:
        self._quantities.extend(quantities)

    def refuse(self, code: str, **values: object) -> None:
        self._refused.append(failure(code, **values))

    def remark(self, code: str, **values: object) -> None:
        self._notices.append(notice(code, **values))


def quantities(
    laws: Mapping[str, Solved], weights: Mapping[str, float], view: View, drag: Drag | Failure, *, level: float
) -> Answer:
    """All quantities that these laws can answer."""
    out = Answer([], [], [])
    out.add(*_top_speed(laws, weights, view, level=level))
    if view.start == "standing":
        _start_quantities(out, laws, weights, view, drag, level=level)
    else:
        out.refuse("start_not_seen", names="F0, V0, P_max, RF_max, D_RF, v_max, tau, Z, first_movement and splits")
    if isinstance(drag, Failure):
        out._refused.append(drag)
        return out
    out.add(*_air(drag, level=level))
    _drag_at_top(out, laws, view, drag, level=level)
    return out


def _fastest(law: models.Law, q: Array, view: View) -> tuple[float, float]:
    """Highest speed in view, and its clip time. The laws are monotonic, so it is at one of the ends."""
    ends = np.array([max(view.first_s, q[1]), view.last_s])
    speeds = law.speed(ends - q[1])
    best = 0 if speeds[0] > speeds[1] else 1
    return float(speeds[best]), float(ends[best])


def _top_speed(laws: Mapping[str, Solved], weights: Mapping[str, float], view: View, *, level: float) -> list[Quantity]:
    def speed(law: models.Law, q: Array) -> float:
        return _fastest(law, q, view)[0]

    def place(law: models.Law, q: Array) -> float:
        return float(q[0] + law.position(_fastest(law, q, view)[1] - q[1])) - view.start_x_m

    at = mixed(laws, weights, "top_speed_at", place, unit="m", level=level)
    if at.low is not None and at.high is not None:
        # Where the body is last whole is known to a foot or a hand that the outline missed.
        edge = float(norm.ppf(0.5 + level / 2)) * _EDGE_M
        at = replace(
            at,
            low=at.value - float(np.hypot(at.value - at.low, edge)),
            high=at.value + float(np.hypot(at.high - at.value, edge)),
        )
    return [mixed(laws, weights, "top_speed", speed, unit="m/s", level=level), at]


def _start_quantities(
    out: Answer,
    laws: Mapping[str, Solved],
    weights: Mapping[str, float],
    view: View,
    drag: Drag | Failure,
    *,
    level: float,
) -> None:
    """What only a start in view can tell."""
    if (fv := laws.get(models.ForceVelocity.name)) is not None and drag:
        share = _fastest(fv.law, fv.q, view)[0] / fv.value("V0")
        out.add(profiled(fv, "F0", {"F0": 1.0}, unit="N/kg", level=level))
        if share < _PLATEAU_SHARE:
            out.refuse("plateau_not_seen", names="V0, P_max and D_RF", percent=100 * share, least=100 * _PLATEAU_SHARE)
        else:
            out.add(
                profiled(fv, "V0", {"V0": 1.0}, unit="m/s", level=level),
                profiled(fv, "P_max", {"F0": 1.0, "V0": 1.0}, unit="W/kg", level=level, factor=0.25),
            )
        largest, decrease = ratio_of_force(drag, view.last_s)
        out.add(drawn(fv, "RF_max", largest, unit="%", level=level))
        if share >= _PLATEAU_SHARE:
            out.add(drawn(fv, "D_RF", decrease, unit="%/(m/s)", level=level))
        for name in ("F0", "P_max"):
            relative = next((q for q in out.quantities if q.name == name), None)
            if relative is not None:
                out.add(_times(relative, f"{name}_absolute", drag.mass_kg, "N" if name == "F0" else "W"))
    if (mono := laws.get(models.MonoExponential.name)) is not None:
        out.add(
            profiled(mono, "v_max", {"v_max": 1.0}, unit="m/s", level=level),
            profiled(mono, "tau", {"tau": 1.0}, unit="s", level=level),
        )
    best = next(iter(_starters(laws, weights).values()))
    if best.problem.free[1]:
        out.add(profiled(best, "first_movement", {"t0": 1.0}, unit="s", level=level, log=False))
    _constant_power(out, laws, view, drag, level=level)


def _starters(laws: Mapping[str, Solved], weights: Mapping[str, float]) -> Mapping[str, Solved]:
    """The laws that may be asked for the start.

    Constant power has no finite force there and mistimes it, unless the data leave no doubt that it is the law.
    """
    power = (models.ConstantPower.name, models.ConstantPowerDrag.name)
    if sum(weights.get(name, 0.0) for name in power) > _NO_DOUBT:
        return laws
    return {name: s for name, s in laws.items() if name not in power} or laws


def _constant_power(out: Answer, laws: Mapping[str, Solved], view: View, drag: Drag | Failure, *, level: float) -> None:
    """Power and drag fitted together, where the run is long enough; the lumping is named."""
    cpd = laws.get(models.ConstantPowerDrag.name)
    if cpd is None:
        return
    way = view.last_m - view.first_m
    if way < _DRAG_WAY_M:
        out.refuse("drag_not_fitted", why=f"{way:.1f} m of the run are in view, {_DRAG_WAY_M:g} m are needed")
        return
    k = profiled(cpd, "k_drag", {"k_drag": 1.0}, unit="1/m", level=level)
    if k.low is None or k.high is None or k.low < 0.02 * k.value or k.high > 10 * k.value:
        out.refuse("drag_not_fitted", why="power and drag cannot be told apart in what is in view")
        return
    out.add(profiled(cpd, "Z", {"Z": 1.0}, unit="W/kg", level=level), replace(k, method="profile, lumped"))
    if not drag:
        return
    area = _times(k, "effective_drag_area", 2 * drag.mass_kg / drag.density_kg_m3, "m^2", method="profile, lumped")
    out.add(area)
    ratio = k.value / drag.k_drag
    if ratio > _LUMPED or k.low > drag.k_drag:
        out.remark("lumped_drag", area=area.value, ratio=ratio, body=drag.drag_area_m2)


def _times(q: Quantity, name: str, factor: float, unit: str, *, method: str | None = None) -> Quantity:
    return replace(
        q,
        name=name,
        value=q.value * factor,
        low=None if q.low is None else q.low * factor,
        high=None if q.high is None else q.high * factor,
        unit=unit,
        method=method or q.method,
    )


def _air(drag: Drag, *, level: float) -> list[Quantity]:
    half = norm.ppf(0.5 + level / 2) * drag.rel_sd
    return [
        Quantity(
            name="air_density",
            value=drag.density_kg_m3,
            low=None,
            high=None,
            unit="kg/m^3",
            method="CIPM-2007",
            level=level,
            why_no_interval="it follows from the stated weather, whose error is not stated",
        ),
        Quantity(
            name="drag_area",
            value=drag.drag_area_m2,
            low=drag.drag_area_m2 * (1 - half),
            high=drag.drag_area_m2 * (1 + half),
            unit="m^2",
            method="body size (Arsac & Locatelli 2002), +-25 %",
            level=level,
        ),
    ]


def _drag_at_top(out: Answer, laws: Mapping[str, Solved], view: View, drag: Drag, *, level: float) -> None:
    """Air drag at top speed, with the uncertainty of body size and wind drawn along."""
    rng = np.random.default_rng(1)
    area = np.exp(drag.rel_sd * rng.standard_normal(DRAWS))
    wind = drag.wind_mps + drag.wind_sd_mps * rng.standard_normal(DRAWS)

    def of_speed(v: Array, scale: Array | float, w: Array | float) -> Array:
        return np.asarray(drag.mass_kg * drag.k_drag * scale * (v - w) * np.abs(v - w))

    best = next(iter(laws.values()))
    pairs = [(_fastest(law, q, view), law, q) for q in best.draws if (law := best.problem.form.law(q)) is not None]
    v = np.array([p[0][0] for p in pairs])
    a = np.array([float(law.acceleration(np.array([at - q[1]]))[0]) for (_, at), law, q in pairs])
    force = of_speed(v, area[: v.size], wind[: v.size])
    (v_top, at), law, q = _fastest(best.law, best.q, view), best.law, best.q
    value = float(of_speed(np.array([v_top]), 1.0, drag.wind_mps)[0])
    share = 100 * force / np.maximum(force + drag.mass_kg * np.maximum(a, 0.0), 1e-9)
    a_top = max(float(law.acceleration(np.array([at - q[1]]))[0]), 0.0)
    tail = 50 * (1 - level)
    for name, centre, drawn_values, unit in (
        ("drag_force", value, force, "N"),
        ("drag_power_share", 100 * value / max(value + drag.mass_kg * a_top, 1e-9), share, "%"),
    ):
        low, high = (float(p) for p in np.percentile(drawn_values, [tail, 100 - tail]))
        out.add(
            Quantity(
                name=name,
                value=centre,
                low=low,
                high=high,
                unit=unit,
                method="draws, drag area from body size",
                level=level,
            )
        )


def splits(
    laws: Mapping[str, Solved], weights: Mapping[str, float], view: View, asked_m: tuple[float, ...], *, level: float
) -> tuple[Split, ...]:
    """Times from first movement to start line + distance, for distances in view; none without the start."""
    if view.start != "standing":
        return ()
    reach = view.last_m - view.start_x_m
    distances = asked_m or tuple(np.arange(_SPLIT_STEP_M, reach, _SPLIT_STEP_M))
    lines = np.array([float(d) for d in distances if 0 < d <= reach])
    if lines.size == 0:
        return ()

    def when(law: models.Law, q: Array) -> Array:
        return np.asarray(law.time_at(view.start_x_m + lines - q[0]))

    starters = _starters(laws, weights)
    share = sum(weights[name] for name in starters)
    shares = {name: weights[name] / share if share > 0 else 1 / len(starters) for name in starters}
    band = mixed_band(starters, shares, when, level=level)
    return tuple(
        Split(distance_m=float(d), time_s=float(t), low_s=float(low), high_s=float(high))
        for d, t, low, high, held in zip(lines, band.value, band.low, band.high, band.held, strict=True)
        if held
    )


def with_film(fit: Fit, motion: Motion, steps: Steps | Failure, *, remarks: tuple[Notice, ...], level: float) -> Fit:
    """Add what only film gives: steps at top speed, and the check of the law against the smoothed curve."""
    found = dict(fit.quantities)
    top = found["top_speed"]
    refused = fit.refused
    if isinstance(steps, Failure):
        refused = (*refused, failure("no_steps", why=steps.reason))
    else:
        for q in _steps_at_top(steps, top, fit.laws[fit.law], level=level):
            found[q.name] = q
    if (onset := found.get("first_movement")) is not None and onset.low is not None and onset.high is not None:
        edge = float(norm.ppf(0.5 + level / 2)) * _ONSET_S
        found["first_movement"] = replace(
            onset,
            low=onset.value - float(np.hypot(onset.value - onset.low, edge)),
            high=onset.value + float(np.hypot(onset.high - onset.value, edge)),
        )
    law = fit.laws[fit.law]
    here = motion.inside & (motion.t_s > law.parameters["t0"] + motion.window_s)
    off = np.abs(np.interp(motion.t_s, law.t_s, law.v_mps) - motion.v_mps)[here]
    extra: tuple[Notice, ...] = ()
    if off.size and float(np.mean(off > _DISAGREES_SD * motion.v_sd_mps[here])) > 0.1:
        extra = (notice("law_misses_curve", law=fit.law, mps=float(off.max())),)
    return replace(fit, quantities=found, refused=refused, notices=(*remarks, *fit.notices, *extra))


def _steps_at_top(steps: Steps, top: Quantity, law: LawFit, *, level: float) -> tuple[Quantity, ...]:
    """Step rate and length at top speed: robust lines through touch-downs and foot places over the count of steps.

    For the steps run near it; where contacts are few, the whole pass's rate and top speed over it.
    """
    z = float(norm.ppf(0.5 + level / 2))
    # Not the contacts' middle: the last one may be cut short by the picture's edge.
    touch = steps.on_s
    speeds = np.interp(touch, law.t_s, law.v_mps)
    scale = 0.0 if top.low is None or top.high is None else 0.5 * (top.high - top.low) / (z * top.value)
    chosen = speeds >= _NEAR_TOP * top.value
    if np.count_nonzero(chosen) < _LEAST_CONTACTS:
        chosen = np.arange(touch.size) >= touch.size - _LEAST_CONTACTS
    if touch.size >= _LEAST_CONTACTS:
        method = f"{np.count_nonzero(chosen)} contacts near top speed"
        # A missed contact is bridged by the whole number of steps that its gap holds.
        jumps = np.maximum(np.round(np.diff(touch[chosen]) * steps.step_rate_hz), 1.0)
        count = np.concatenate([[0.0], np.cumsum(jumps)])
        period, period_sd = _robust_slope(count, touch[chosen], scale=_CONTACT_S)
        way, way_sd = _robust_slope(count, steps.x_m[chosen], scale=_FOOT_M)
        rate, rate_sd = 1 / period, period_sd / period**2
        # Steps run below top speed are shorter, though less than in proportion: the rate is still rising too.
        grown = max(1.0, _MEAN_NEAR_TOP * top.value / float(speeds[chosen].mean())) ** _LENGTH_BY_SPEED
        length = grown * way
        length_sd = float(np.linalg.norm([way_sd, scale * length, 0.7 * (grown - 1) * length]))
    else:
        method = "whole pass"
        rate, rate_sd = steps.step_rate_hz, steps.step_rate_sd_hz
        length = top.value / rate
        length_sd = length * float(np.hypot(rate_sd / rate, scale))
    return tuple(
        Quantity(name=name, value=v, low=v - z * sd, high=v + z * sd, unit=u, method=method, level=level)
        for name, v, sd, u in (("step_rate", rate, rate_sd, "Hz"), ("step_length", length, length_sd, "m"))
    )


def _robust_slope(x: Array, y: Array, *, scale: float) -> tuple[float, float]:
    """Slope and its sd of a line that a few wild points do not bend (scipy's soft L1 loss); `scale`: sd of y."""

    def miss(p: Array) -> Array:
        return np.asarray((y - p[0] * x - p[1]) / scale)

    slope, offset = (float(c) for c in least_squares(miss, np.polyfit(x, y, 1), loss="soft_l1").x)
    left = y - slope * x - offset
    scatter = max(scale, 1.4826 * float(np.median(np.abs(left - np.median(left)))))
    return slope, scatter / float(np.sqrt(np.sum((x - x.mean()) ** 2)))
