"""Diagrams as SVG for the page: coloured by its style sheet, drawn wide and narrow, readable off by a pointer."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from vidkin.report.markup import Markup, el, join
from vidkin.report.series import Line, Panel
from vidkin.report.words import number
from vidkin.stages import Array

_WIDE: Final = (720, 300)
_NARROW: Final = (360, 270)
_MOST_POINTS: Final = 240


@dataclass(frozen=True, slots=True, kw_only=True)
class _Frame:
    """Where data lie in the drawing: `left`, `top`, `right`, `bottom` [px], `x`, `y` their limits."""

    left: float
    top: float
    right: float
    bottom: float
    x: tuple[float, float]
    y: tuple[float, float]

    def px(self, x: Array) -> Array:
        return np.asarray(self.left + (x - self.x[0]) / (self.x[1] - self.x[0]) * (self.right - self.left))

    def py(self, y: Array) -> Array:
        return np.asarray(self.bottom - (y - self.y[0]) / (self.y[1] - self.y[0]) * (self.bottom - self.top))


def nice_step(low: float, high: float, *, most: int) -> float:
    """The smallest step of 1, 2, 5 times a power of ten that divides the range into at most `most` parts."""
    span = max(high - low, 1e-12)
    power = 10.0 ** np.floor(np.log10(span / most))
    for factor in (1, 2, 5, 10):
        if span / (factor * power) <= most + 1e-9:
            return float(factor * power)
    return float(20 * power)


def ticks(low: float, high: float, *, most: int) -> tuple[Array, int]:
    """Tick places within a range, and the decimals they need."""
    step = nice_step(low, high, most=most)
    places = int(max(0, -np.floor(np.log10(step) + 1e-9)))
    return np.arange(np.ceil(low / step - 1e-9), np.floor(high / step + 1e-9) + 1) * step, places


def figure(panel: Panel, *, caption: str = "") -> Markup:
    """A diagram with its legend, a line to read values off, and what is left out of it and why."""
    legend = [
        el("span", el("i", class_=f"key {line.role}"), line.label, class_="entry") for line in _one_of_each(panel.lines)
    ]
    notes = [el("p", text, class_="note") for text in (panel.note, caption) if text]
    readable = _readout(panel)
    data = el("script", _script_safe(readable), type="application/json")
    return el(
        "figure",
        el("figcaption", panel.title),
        el("div", join(legend), class_="legend"),
        _drawing(panel, _WIDE, "wide"),
        _drawing(panel, _NARROW, "narrow"),
        el("p", "", class_="readout") if readable["series"] else Markup(),
        join(notes),
        data if readable["series"] else Markup(),
        class_="chart" if readable["series"] else "still-chart",
        id=f"chart-{panel.key}",
    )


def _one_of_each(lines: tuple[Line, ...]) -> list[Line]:
    return list({line.label: line for line in reversed(lines)}.values())[::-1]


def _limits(panel: Panel) -> tuple[tuple[float, float], tuple[float, float]]:
    x = np.concatenate([line.x for line in panel.lines])
    y = np.concatenate([np.concatenate([line.y, line.low, line.high]) for line in panel.lines])
    low, high = float(y.min()), float(y.max())
    pad = 0.06 * max(high - low, 1e-6)
    bottom = low - pad if low < 0 or not panel.from_zero else 0.0
    left, right = float(x.min()), float(x.max())
    edge = 0.015 * max(right - left, 1e-6)
    return (left - edge, right + edge), (bottom, high + pad)


def _drawing(panel: Panel, size: tuple[int, int], kind: str) -> Markup:
    x, y = _limits(panel)
    f = _Frame(left=44, top=26 if panel.ticks else 12, right=size[0] - 12, bottom=size[1] - 40, x=x, y=y)
    parts = [*_axes(panel, f, size), *_places(panel, f)]
    for line in panel.lines:
        parts.extend(_curve(line, f))
    parts.append(el("line", x1="0", x2="0", y1=_n(f.top), y2=_n(f.bottom), class_="pointer"))
    return el(
        "svg",
        join(parts),
        class_=kind,
        viewBox=f"0 0 {size[0]} {size[1]}",
        role="img",
        aria_label=f"{panel.title}: {panel.y_label} against {panel.x_label}",
        tabindex="0",
        data_left=_n(f.left),
        data_right=_n(f.right),
        data_low=repr(f.x[0]),
        data_high=repr(f.x[1]),
    )


def _axes(panel: Panel, f: _Frame, size: tuple[int, int]) -> list[Markup]:
    parts = []
    places, digits = ticks(*f.y, most=6)
    for value in places:
        at = _n(float(f.py(value)))
        parts.append(el("line", x1=_n(f.left), x2=_n(f.right), y1=at, y2=at, class_="zero" if value == 0 else "grid"))
        parts.append(el("text", number(float(value), digits), x=_n(f.left - 6), y=at, dy="0.35em", class_="end"))
    places, digits = ticks(*f.x, most=8 if size[0] > 500 else 5)
    for value in places:
        at = _n(float(f.px(value)))
        parts.append(el("line", x1=at, x2=at, y1=_n(f.bottom), y2=_n(f.bottom + 4), class_="grid"))
        parts.append(el("text", number(float(value), digits), x=at, y=_n(f.bottom + 17), class_="mid"))
    middle = _n((f.left + f.right) / 2)
    parts.append(el("text", panel.x_label, x=middle, y=_n(size[1] - 5.0), class_="mid label"))
    half = _n((f.top + f.bottom) / 2)
    parts.append(el("text", panel.y_label, transform=f"translate(12 {half}) rotate(-90)", class_="mid label"))
    return parts


def _places(panel: Panel, f: _Frame) -> list[Markup]:
    """Marked places; a text that would run into the one before is left out, its line stays."""
    parts, last = [], -np.inf
    for x, text in panel.ticks:
        if not f.x[0] <= x <= f.x[1]:
            continue
        at = float(f.px(np.array(x)))
        parts.append(el("line", x1=_n(at), x2=_n(at), y1=_n(f.top - 4), y2=_n(f.bottom), class_="split"))
        if at - last > 7.5 * len(text):
            parts.append(el("text", text, x=_n(at), y=_n(f.top - 9), class_="mid small"))
            last = at
    return parts


def _curve(line: Line, f: _Frame) -> list[Markup]:
    x, y = f.px(line.x), f.py(line.y)
    if line.role == "dots":
        dots = "".join(f"M{_n(a)} {_n(b)}h0" for a, b in zip(x, y, strict=True))
        return [el("path", d=dots, class_="dots")]
    parts = []
    if line.low.size:
        around = np.concatenate([np.column_stack([x, f.py(line.high)]), np.column_stack([x, f.py(line.low)])[::-1]])
        parts.append(el("path", d=_path(around) + "Z", class_=f"band {line.role}"))
    parts.append(el("path", d=_path(np.column_stack([x, y])), class_=f"curve {line.role}"))
    return parts


def _path(points: Array) -> str:
    """Path data; points nearer than a fifth of a pixel to the one before are left out."""
    kept = [points[0]]
    for point in points[1:-1]:
        if np.abs(point - kept[-1]).max() >= 0.2:
            kept.append(point)
    kept.append(points[-1])
    return "M" + "L".join(f"{_n(x)} {_n(y)}" for x, y in kept)


def _n(value: float) -> str:
    return f"{value:.1f}".removesuffix(".0")


def _readout(panel: Panel) -> dict[str, Any]:
    """What the pointer reads off: for each label, points rising in x, thinned."""
    series = []
    for line in panel.lines:
        if line.role in ("dots", "zero"):
            continue
        rising = np.concatenate([[True], np.diff(np.maximum.accumulate(line.x)) > 0])
        rows = np.flatnonzero(rising)
        rows = rows[np.unique(np.linspace(0, rows.size - 1, min(rows.size, _MOST_POINTS)).round().astype(int))]
        entry: dict[str, Any] = {"label": line.label, "x": _rounded(line.x[rows]), "y": _rounded(line.y[rows])}
        if line.low.size:
            entry |= {"low": _rounded(line.low[rows]), "high": _rounded(line.high[rows])}
        series.append(entry)
    return {"x": panel.x_label, "y": panel.y_label, "series": series}


def _rounded(values: Array) -> list[float]:
    return [round(float(v), 4) for v in values]


def _script_safe(data: object) -> Markup:
    """JSON that cannot end its script element, whatever a label holds."""
    text = json.dumps(data, separators=(",", ":"))
    return Markup(text.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026"))
