"""What each diagram shows, as numbers: the same for the pictures (figures.py) and for the page (svg.py)."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np

from vidkin.notices import Failure
from vidkin.report.words import half_width_factor, law_title, name_of, time_zero_s, why_missing
from vidkin.stages import Analysis, Array, Curves, Fit, LawFit, Motion

Role = Literal["measured", "ends", "law", "second", "third", "total", "drag", "dots", "zero"]

#: Per kilogram, as the fit gives them.
_FORCE: Final = "horizontal force, N/kg"
_POWER: Final = "horizontal power, W/kg"


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A curve (N,) over (N,), or dots; `low`, `high` (N,) or empty: its interval."""

    role: Role
    label: str
    x: Array
    y: Array
    low: Array
    high: Array


@dataclass(frozen=True, slots=True, kw_only=True)
class Panel:
    """One diagram. `ticks` are marked places on the x axis: (x, text); `note` says what is left out and why."""

    key: str
    title: str
    x_label: str
    y_label: str
    lines: tuple[Line, ...]
    ticks: tuple[tuple[float, str], ...] = ()
    note: str = ""
    from_zero: bool = True


def _line(role: Role, label: str, x: Array, y: Array) -> Line:
    return Line(role=role, label=label, x=x, y=y, low=np.zeros(0), high=np.zeros(0))


def speed_panels(analysis: Analysis) -> tuple[Panel, Panel] | Failure:
    """Speed against time and against distance from the start line, with splits and the preferred law."""
    motion = analysis.motion
    if not isinstance(motion, Motion):
        return why_missing(analysis, "motion")
    t0, t_label = time_zero_s(analysis)
    x0 = analysis.rep.lane.start_x_m
    fit = analysis.fit if isinstance(analysis.fit, Fit) else None
    note = "" if fit else f"No law is drawn. {why_missing(analysis, 'fit').reason}"
    splits = fit.splits if fit else ()
    by_time = Panel(
        key="speed-time",
        title="Speed against time",
        x_label=t_label,
        y_label="speed, m/s",
        lines=(*_measured(motion, motion.t_s - t0, analysis.settings.level), *_law(fit, "t", t0)),
        ticks=tuple((s.time_s, f"{s.distance_m:g} m") for s in splits),
        note=note,
    )
    by_distance = replace(
        by_time,
        key="speed-distance",
        title="Speed against distance",
        x_label="distance from the start line, m",
        lines=(*_measured(motion, motion.smooth_x_m - x0, analysis.settings.level), *_law(fit, "x", x0)),
        ticks=tuple((s.distance_m, f"{s.time_s:.2f} s") for s in splits),
    )
    return by_time, by_distance


def _measured(motion: Motion, x: Array, level: float) -> tuple[Line, ...]:
    """The smoothed curve with its band; the ends, where the window hangs over the pass, as a line of their own."""
    half = half_width_factor(level) * motion.v_sd_mps
    label = f"measured, with {100 * level:g} % interval"
    lines = []
    change = np.flatnonzero(np.diff(motion.inside.astype(int))) + 1
    for part in np.split(np.arange(x.size), change):
        inside = bool(motion.inside[part[0]])
        part = part if inside else np.arange(max(0, part[0] - 1), min(x.size, part[-1] + 2))
        lines.append(
            Line(
                role="measured" if inside else "ends",
                label=label if inside else "measured, window cut by the end of the pass",
                x=x[part],
                y=motion.v_mps[part],
                low=motion.v_mps[part] - half[part],
                high=motion.v_mps[part] + half[part],
            )
        )
    return tuple(sorted(lines, key=lambda line: line.role == "ends"))


def _law(fit: Fit | None, axis: Literal["t", "x"], zero: float) -> tuple[Line, ...]:
    if fit is None:
        return ()
    c = fit.curves
    return (_line("law", f"law: {law_title(fit.law)}", (c.t_s if axis == "t" else c.x_m) - zero, c.v_mps),)


def laws_panel(analysis: Analysis) -> Panel | Failure:
    """Each fitted law's speed minus the measured one against time, beside the measured speed's own interval."""
    fit, motion = analysis.fit, analysis.motion
    if not isinstance(fit, Fit):
        return why_missing(analysis, "fit")
    if not isinstance(motion, Motion):
        return why_missing(analysis, "motion")
    t0, t_label = time_zero_s(analysis)
    level = analysis.settings.level
    half = half_width_factor(level) * motion.v_sd_mps
    lines = [
        Line(
            role="zero",
            label=f"the measured speed's {100 * level:g} % interval",
            x=motion.t_s - t0,
            y=np.zeros_like(half),
            low=-half,
            high=half,
        )
    ]
    roles: tuple[Role, ...] = ("law", "second", "third", "drag")
    laws = _by_weight(fit)
    for role, law in zip(roles, laws, strict=False):
        rows = (motion.t_s >= law.t_s[0]) & (motion.t_s <= law.t_s[-1])
        t = motion.t_s[rows]
        if t.size > 1:
            lines.append(
                _line(role, law_title(law.name), t - t0, np.interp(t, law.t_s, law.v_mps) - motion.v_mps[rows])
            )
    left_out = [law_title(law.name) for law in laws[len(roles) :]]
    return Panel(
        key="laws",
        title="Each law's speed minus the measured speed",
        x_label=t_label,
        y_label="difference, m/s",
        lines=tuple(lines),
        note=f"Not drawn: {', '.join(left_out)}." if left_out else "",
        from_zero=False,
    )


def _by_weight(fit: Fit) -> list[LawFit]:
    return sorted(fit.laws.values(), key=lambda law: (law.name != fit.law, law.criterion))


def residual_panel(analysis: Analysis) -> Panel | Failure:
    """Measured minus fitted position against distance, beside the error of a single position [cm]."""
    fit, motion = analysis.fit, analysis.motion
    if not isinstance(fit, Fit):
        return why_missing(analysis, "fit")
    if not isinstance(motion, Motion):
        return why_missing(analysis, "motion")
    law = fit.laws.get(fit.law)
    level = analysis.settings.level
    half = 100 * half_width_factor(level) * motion.x_sd_m
    x0 = analysis.rep.lane.start_x_m
    x = motion.smooth_x_m - x0
    lines, note = [], ""
    if law is not None and law.residual_m.size == motion.t_s.size:
        lines.append(_line("dots", f"measured minus fitted ({law_title(law.name)})", x, 100 * law.residual_m))
    elif law is not None and law.residual_m.size == law.t_s.size:
        lines.append(
            _line("dots", f"measured minus fitted ({law_title(law.name)})", law.x_m - x0, 100 * law.residual_m)
        )
        note = "Neighbouring frames were averaged for the fit; a dot is such an average."
    else:
        note = f"The law '{law_title(fit.law)}' gives no residual for each measured position."
    lines.append(
        Line(
            role="zero",
            label=f"a single position's own error ({100 * level:g} %)",
            x=x,
            y=np.zeros_like(x),
            low=-half,
            high=half,
        )
    )
    return Panel(
        key="residual",
        title="Position: measured minus fitted",
        x_label="distance from the start line, m",
        y_label="difference, cm",
        lines=tuple(lines),
        note=note,
        from_zero=False,
    )


def force_panels(analysis: Analysis) -> tuple[Panel, ...] | Failure:
    """Force against speed, power against speed and against time; what goes into the air beside the total."""
    fit = analysis.fit
    if not isinstance(fit, Fit):
        return why_missing(analysis, "fit")
    t0, t_label = time_zero_s(analysis)
    c = fit.curves
    force = [_line("total", "total force", c.v_mps, c.force_n_kg), *_force_line(fit)]
    note, drag = "", _drag_n_kg(analysis, c)
    power = [_line("total", "total power", c.v_mps, c.power_w_kg)]
    power_t = [_line("total", "total power", c.t_s - t0, c.power_w_kg)]
    if drag is None:
        note = "Air drag is not drawn: body mass or the weather is missing."
    else:
        force.append(_line("drag", "air drag", c.v_mps, drag))
        power.append(_line("drag", "power into air drag", c.v_mps, drag * c.v_mps))
        power_t.append(_line("drag", "power into air drag", c.t_s - t0, drag * c.v_mps))
    return (
        Panel(
            key="force-speed",
            title="Force against speed",
            x_label="speed, m/s",
            y_label=_FORCE,
            lines=tuple(force),
            note=note,
        ),
        Panel(
            key="power-speed",
            title="Power against speed",
            x_label="speed, m/s",
            y_label=_POWER,
            lines=tuple(power),
        ),
        Panel(
            key="power-time",
            title="Power against time",
            x_label=t_label,
            y_label=_POWER,
            lines=tuple(power_t),
        ),
    )


def _force_line(fit: Fit) -> tuple[Line, ...]:
    """The straight line from F0 to V0, where the fit gives both per kilogram."""
    f0, v0 = fit.quantities.get("F0"), fit.quantities.get("V0")
    if f0 is None or v0 is None or f0.unit != "N/kg":
        return ()
    text = f"force-velocity line, {name_of('F0').symbol} to {name_of('V0').symbol}"
    return (_line("second", text, np.array([0.0, v0.value]), np.array([f0.value, 0.0])),)


def _drag_n_kg(analysis: Analysis, curves: Curves) -> Array | None:
    mass = analysis.rep.athlete.mass_kg
    if mass is None or curves.drag_n.size != curves.t_s.size:
        return None
    return curves.drag_n / mass
