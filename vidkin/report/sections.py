"""The page's sections that show results: key numbers, curves, splits, steps, force and power, laws, air."""

from __future__ import annotations

import numpy as np

from vidkin.notices import Failure
from vidkin.report import series, svg
from vidkin.report.markup import Markup, el, join, table
from vidkin.report.words import (
    LUMPED,
    decimals,
    first_movement_s,
    interval_text,
    law_title,
    method_of,
    name_of,
    number,
    ordered,
    split_places,
    tied,
    unit_of,
    value_text,
    why_missing,
)
from vidkin.stages import Analysis, Fit, LawFit, Motion, Quantity, Steps

_KEYS = ("top_speed", "P_max", "F0", "V0", "step_rate", "top_speed_at", "Z", "v_max")
_MOST_KEYS = 6


def absent(failure: Failure) -> Markup:
    """Instead of a result: why there is none. What to do about it stands with the notices."""
    return el("p", f"Not available. {failure.reason}")


def key_numbers(analysis: Analysis) -> Markup:
    """Half a dozen numbers with their intervals."""
    fit = analysis.fit
    if not isinstance(fit, Fit):
        return absent(why_missing(analysis, "fit"))
    chosen = [fit.quantities[k] for k in _KEYS if k in fit.quantities][:_MOST_KEYS]
    tiles = [_tile(name_of(q.name).title, value_text(q), unit_of(q), interval_text(q)) for q in chosen]
    if fit.splits:
        last = max(fit.splits, key=lambda s: s.distance_m)
        places = split_places(fit.splits)
        interval = f"{number(last.low_s, places)} to {number(last.high_s, places)}"
        tiles.insert(1, _tile(f"Time to {last.distance_m:g} m", number(last.time_s, places), "s", interval))
    how = "a standing start" if fit.start == "standing" else "a flying start: already moving when it came into view"
    words = f"Read as {how}. Under each value stands its {100 * analysis.settings.level:g} % interval."
    return join([el("dl", join(tiles[:_MOST_KEYS]), class_="keys"), para(words)])


def para(text: str, *, note: bool = False) -> Markup:
    """A paragraph with numbers tied to their units."""
    return el("p", tied(text), class_="note") if note else el("p", tied(text))


def _tile(name: str, value: str, unit: str, interval: str) -> Markup:
    shown = el("dd", value, " ", el("small", unit), class_="value")
    return el("div", el("dt", name), shown, el("dd", interval, class_="note"))


def quantities(analysis: Analysis) -> Markup:
    """Every quantity of the fit."""
    fit = analysis.fit
    return _quantities(fit, analysis.settings.level) if isinstance(fit, Fit) else absent(why_missing(analysis, "fit"))


def _quantities(fit: Fit, level: float) -> Markup:
    rows = [
        (
            el("span", name_of(q.name).symbol, class_="nw"),
            name_of(q.name).meaning,
            value_text(q),
            el("span", unit_of(q), class_="nw"),
            _interval_cell(q, level),
            method_of(q),
        )
        for q in ordered(fit.quantities)
    ]
    head = ("Symbol", "Quantity", "Value", "Unit", f"{100 * level:g} % interval", "Method")
    return table(head, rows, numeric=(2,), wordy=(1, 5)) if rows else el("p", "No quantity could be given.")


def _interval_cell(q: Quantity, level: float) -> str:
    """The interval on one line; the reason for having none may run over several."""
    if q.low is None or q.high is None:
        return interval_text(q)
    return el("span", interval_text(q) + ("" if q.level == level else f" ({100 * q.level:g} %)"), class_="nw")


def curves(analysis: Analysis) -> Markup:
    """Speed against time and distance, acceleration left to the exports, residuals."""
    panels = series.speed_panels(analysis)
    if isinstance(panels, Failure):
        return absent(panels)
    motion = analysis.motion
    assert isinstance(motion, Motion)
    how = (
        f"Measured: a local polynomial (Savitzky-Golay) over a window of {motion.window_s:.2f} s, tied to the step "
        f"rate of {motion.step_rate_hz:.2f} steps/s, so that it shows step-averaged speed. Vertical lines are the "
        "splits."
    )
    shown = [para(how), *(svg.figure(p) for p in panels)]
    residual = series.residual_panel(analysis)
    if isinstance(residual, Failure):
        shown.append(el("p", f"No residuals. {residual.reason}", class_="note"))
    else:
        shown.append(
            svg.figure(
                residual,
                caption="A wave at the step rate is the outline's own movement round the body's centre. A slow bend "
                "has three causes: the outline shifts as the body comes upright, the camera's error is shared by all "
                "positions, or the law does not fit. The intervals allow for the first two.",
            )
        )
    return join(shown)


def splits(analysis: Analysis) -> Markup:
    """Split times with intervals, and the stretches between them."""
    fit = analysis.fit
    if not isinstance(fit, Fit):
        return absent(why_missing(analysis, "fit"))
    if not fit.splits:
        return el("p", "No split can be given: no start and no split line both lie in the measured stretch.")
    places = split_places(fit.splits)
    rows, d0, t0 = [], 0.0, 0.0
    for s in sorted(fit.splits, key=lambda s: s.distance_m):
        speed = (s.distance_m - d0) / (s.time_s - t0) if s.time_s > t0 else None
        rows.append(
            (
                f"{s.distance_m:g}",
                number(s.time_s, places),
                f"{number(s.low_s, places)} to {number(s.high_s, places)}",
                f"{d0:g} to {s.distance_m:g}",
                number(s.time_s - t0, places),
                "–" if speed is None else number(speed, 2),
            )
        )
        d0, t0 = s.distance_m, s.time_s
    head = (
        "Distance, m",
        "Time, s",
        f"{100 * analysis.settings.level:g} % interval, s",
        "Stretch, m",
        "Stretch time, s",
        "Mean speed, m/s",
    )
    words = (
        "From first movement to the tracked centre crossing start line plus distance. Without a reaction time, so "
        "not to be compared with a gun time. Stretch times and mean speeds stand without an interval: neighbouring "
        "splits share most of their error."
    )
    return join([table(head, rows, numeric=range(6)), para(words, note=True)])


def steps(analysis: Analysis) -> Markup:
    """Foot contacts, step by step."""
    found = analysis.steps
    if not isinstance(found, Steps):
        return absent(why_missing(analysis, "steps"))
    t0 = first_movement_s(analysis) or 0.0
    x0 = analysis.rep.lane.start_x_m
    rows = []
    for k in range(found.on_s.size):
        more = k + 1 < found.on_s.size
        step = float(found.on_s[k + 1] - found.on_s[k]) if more else 0.0
        # Where a contact was missed the gap holds several steps: their mean is shown, and no flight time.
        held = max(1, round(step * found.step_rate_hz))
        mean = "" if held == 1 else f" (mean of {held})"
        rows.append(
            (
                str(k + 1),
                number(found.on_s[k] - t0, 3),
                number(1000 * (found.off_s[k] - found.on_s[k]), 0),
                number(1000 * (found.on_s[k + 1] - found.off_s[k]), 0) if more and held == 1 else "–",
                number(found.x_m[k] - x0, 2),
                number(abs(found.x_m[k + 1] - found.x_m[k]) / held, 2) + mean if more else "–",
                number(held / step, 2) + mean if step > 0 else "–",
            )
        )
    since = "first movement" if first_movement_s(analysis) is not None else "the clip's start"
    head = (
        "Contact",
        f"Touch-down after {since}, s",
        "Contact, ms",
        "Flight, ms",
        "Foot at, m",
        "Step length, m",
        "Step rate, 1/s",
    )
    rate = analysis.footage.frame_rate_hz
    frame = f" One frame lasts {1000 / rate:.1f} ms: single times are no finer than that." if rate > 0 else ""
    side = (
        f"the feet put the runner {found.lateral_m:.2f} m from the x axis (sd {100 * found.lateral_sd_m:.0f} cm)"
        if found.lateral_source == "feet"
        else f"the runner is taken to be on the lane centre, {found.lateral_m:.2f} m from the x axis "
        f"(sd {100 * found.lateral_sd_m:.0f} cm)"
    )
    words = (
        f"Over the whole pass {found.step_rate_hz:.2f} steps/s (sd {found.step_rate_sd_hz:.2f}); {side}.{frame} "
        "Single steps stand without an interval."
    )
    shown = table(head, rows, numeric=range(7)) if rows else el("p", "No single foot contact could be told apart.")
    return join([shown, para(words, note=True)])


def force_power(analysis: Analysis) -> Markup:
    """Force, power and drag curves."""
    panels = series.force_panels(analysis)
    if isinstance(panels, Failure):
        return absent(panels)
    words = (
        "By the preferred law, per kilogram of body mass: the mean over a step of the horizontal force on the "
        "centre of mass. The peaks within a step are higher."
    )
    return join([para(words), svg.figure(panels[0]), *(svg.figure(p) for p in panels[1:])])


def laws(analysis: Analysis) -> Markup:
    """The fitted laws beside one another."""
    fit = analysis.fit
    if not isinstance(fit, Fit):
        return absent(why_missing(analysis, "fit"))
    panel = series.laws_panel(analysis)
    best = min((law.criterion for law in fit.laws.values()), default=0.0)
    rows = [
        (
            law_title(law.name) + (" (preferred)" if law.name == fit.law else ""),
            law.words,
            parameters(law),
            number(law.criterion, 1),
            number(law.criterion - best, 1),
            weight(law.weight),
            number(100 * float(np.sqrt(np.mean(law.residual_m**2))), 1) if law.residual_m.size else "–",
        )
        for law in sorted(fit.laws.values(), key=lambda law: law.criterion)
    ]
    head = ("Law", "What it assumes", "Parameters (± sd)", "AIC", "Above the best", "Weight", "Residual rms, cm")
    words = (
        "AIC is Akaike's criterion; smaller is better, a difference below 2 decides "
        "nothing. The weight is the law's share of support among these laws only: it does not say that any of them "
        "is true."
    )
    chart = svg.figure(panel) if isinstance(panel, series.Panel) else absent(panel)
    return join([table(head, rows, numeric=(3, 4, 5, 6), wordy=(1,)), para(words, note=True), chart])


def parameters(law: LawFit) -> Markup:
    """`name value ± sd` of each parameter, one under the other."""
    parts = []
    for name, value in law.parameters.items():
        sd = law.sd.get(name)
        if sd is None or sd <= 0:
            parts.append(f"{name} {value:.4g} (fixed)".replace("-", "−"))
        else:
            places = decimals(value, sd)
            parts.append(f"{name} {number(value, places)} ± {number(sd, places)}")
    return join(el("span", part, el("br"), class_="nw") for part in parts)


def weight(value: float) -> str:
    """An Akaike weight, never rounded to nothing or to certainty."""
    if value < 0.001:
        return "< 0.001"
    return "> 0.999" if value > 0.999 else f"{value:.3f}"


def air(analysis: Analysis) -> Markup:
    """Weather as stated, density, drag area and where it came from, and what a lumped constant is not."""
    a = analysis.rep.air
    stated = (
        ("temperature", a.temperature_c, "°C"),
        ("station pressure", a.pressure_hpa, "hPa"),
        ("altitude", a.altitude_m, "m"),
        ("relative humidity", a.humidity_pct, "%"),
        ("wind along the lane, + is a tailwind", a.wind_mps, "m/s"),
    )
    rows = [
        (name, "not stated" if value is None else f"{value:g} {unit}".replace("-", "−")) for name, value, unit in stated
    ]
    parts = [table(("Weather of the sheet", ""), rows)]
    fit = analysis.fit
    if isinstance(fit, Fit):
        names = ("air_density", "drag_area", "drag_force", "drag_power_share", "k_drag", "effective_drag_area")
        found = [fit.quantities[n] for n in names if n in fit.quantities]
        parts.extend(_air_line(q) for q in found)
        missing = [name_of(n).title.lower() for n in names[:4] if n not in fit.quantities]
        if missing:
            parts.append(el("p", f"Not given: {', '.join(missing)}. See the notices and what could not be answered."))
    else:
        parts.append(absent(why_missing(analysis, "fit")))
    parts.append(el("p", LUMPED))
    return join(parts)


def _air_line(q: Quantity) -> Markup:
    known = name_of(q.name)
    symbol = "" if known.symbol == "–" else f", {known.symbol}"
    source = f" Source: {method_of(q)}." if q.method else ""
    value = tied(f"{value_text(q)} {unit_of(q)}".strip())
    return el("p", el("b", f"{known.title}{symbol}: {value}"), f" ({interval_text(q)}), {known.meaning}.{source}")
