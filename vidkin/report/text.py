"""Results for the terminal: tables and lists that rich prints. No user text is read as markup."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from rich.table import Table
from rich.text import Text

from vidkin.notices import Failure
from vidkin.report.overlay import rms_m, rms_px
from vidkin.report.words import (
    SEVERITY,
    STAGE,
    decimals,
    failure_severity,
    interval_text,
    is_split,
    name_of,
    number,
    ordered,
    quantity_decimals,
    split_places,
    unit_of,
    value_text,
    why_missing,
)
from vidkin.stages import Analysis, Camera, Fit, Quantity, Split

_STYLE = {"serious": "bold red", "warning": "yellow", "info": "cyan"}


def _table(title: str, columns: Iterable[tuple[str, bool]]) -> Table:
    """A table; each column is a heading and whether it is set flush right."""
    table = Table(title=Text(title), title_justify="left", box=None, pad_edge=False, header_style="bold")
    for heading, right in columns:
        table.add_column(Text(heading), justify="right" if right else "left", overflow="fold")
    return table


def _row(table: Table, *cells: str | Text) -> None:
    table.add_row(*(c if isinstance(c, Text) else Text(c) for c in cells))


def summary_table(analysis: Analysis) -> Table:
    """Every quantity and split with its interval; where there are none, the reason."""
    level = f"{100 * analysis.settings.level:g} %"
    title = f"{analysis.rep.athlete.label}, {analysis.rep.clip}"
    columns = (("quantity", False), ("value", True), ("unit", False), (f"{level} interval", False), ("meaning", False))
    table = _table(title, columns)
    fit = analysis.fit
    if not isinstance(fit, Fit):
        _row(table, "none", "", "", why_missing(analysis, "fit").reason, "")
        return table
    for q in ordered(fit.quantities):
        _row(table, q.name, value_text(q), unit_of(q), interval_text(q), name_of(q.name).meaning)
    places = split_places(fit.splits)
    for s in fit.splits:
        interval = f"{number(s.low_s, places)} to {number(s.high_s, places)}"
        _row(
            table,
            f"split_{s.distance_m:g}",
            number(s.time_s, places),
            "s",
            interval,
            f"from first movement to {s.distance_m:g} m",
        )
    return table


def marks_table(camera: Camera) -> Table:
    """Error of each mark, numbered as in the overlay, with the rms in the title."""
    px, m = rms_px(camera), rms_m(camera)
    title = "No marks" if px is None or m is None else f"{len(camera.marks)} marks, rms {px:.2f} px = {100 * m:.2f} cm"
    columns = (
        ("no.", True),
        ("mark", False),
        ("x, m", True),
        ("y, m", True),
        ("z, m", True),
        ("error u, px", True),
        ("error v, px", True),
        ("error, cm", True),
    )
    table = _table(title, columns)
    for k, (mark, error, metres) in enumerate(
        zip(camera.marks, camera.mark_error_px, camera.mark_error_m, strict=True), start=1
    ):
        place = [number(float(c), 2) for c in mark.xyz_m]
        off = [number(float(c), 2) for c in error]
        _row(table, str(k), mark.label, *place, *off, number(100 * float(metres), 2))
    return table


def demo_table(analysis: Analysis, truth: Mapping[str, float], splits_truth: Mapping[float, float]) -> Table:
    """Value, interval, and the known truth beside it.

    Parameters
    ----------
    truth : quantity name -> true value, in the quantity's unit
    splits_truth : distance [m] -> true split time [s]
    """
    columns = (
        ("quantity", False),
        ("value", True),
        ("interval", False),
        ("truth", True),
        ("unit", False),
        ("off", True),
        ("truth inside", False),
    )
    table = _table("Measured beside the known truth", columns)
    fit = analysis.fit
    if not isinstance(fit, Fit):
        _row(table, "none", "", why_missing(analysis, "fit").reason, "", "", "", "")
        return table
    for q in ordered(fit.quantities):
        if q.name in truth:
            _compare(table, q, truth[q.name])
    for s in fit.splits:
        known = next((t for d, t in splits_truth.items() if abs(d - s.distance_m) < 1e-6), None)
        if known is not None:
            _compare(table, _as_quantity(s, analysis.settings.level), known)
    answered = {*fit.quantities, *(f"split_{s.distance_m:g}" for s in fit.splits)}
    for name, value in truth.items():
        if name not in answered and not is_split(name):
            _row(table, name, "–", "not answered", number(value, decimals(value, None)), "", "", "–")
    for distance, value in splits_truth.items():
        if f"split_{distance:g}" not in answered:
            _row(table, f"split_{distance:g}", "–", "not answered", number(value, 3), "s", "", "–")
    return table


def _as_quantity(split: Split, level: float) -> Quantity:
    return Quantity(
        name=f"split_{split.distance_m:g}",
        value=split.time_s,
        low=split.low_s,
        high=split.high_s,
        unit="s",
        method="",
        level=level,
    )


def _compare(table: Table, q: Quantity, known: float) -> None:
    places = quantity_decimals(q)
    off = number(100 * (q.value / known - 1), 2) + " %" if known else number(q.value - known, places)
    if q.low is None or q.high is None:
        verdict = Text("no interval")
    elif q.low <= known <= q.high:
        verdict = Text("yes")
    else:
        verdict = Text("NO", style="bold red")
    _row(table, q.name, value_text(q), interval_text(q), number(known, places), unit_of(q), off, verdict)


def notices_text(analysis: Analysis) -> Text:
    """Notices, the most serious first; each with what to do."""
    rank = {"serious": 0, "warning": 1, "info": 2}
    found = sorted(analysis.notices, key=lambda n: rank[n.severity])
    if not found:
        return Text("No check raised a notice.")
    return Text("\n").join(
        Text.assemble((SEVERITY[n.severity], _STYLE[n.severity]), f" {STAGE[n.stage]}: {n.text} {n.hint}")
        for n in found
    )


def failures_text(analysis: Analysis) -> Text:
    """What could not be answered, why, and what to do."""
    if not analysis.failures:
        return Text("Every question that was asked has an answer.")
    return Text("\n").join(failure_text(f) for f in analysis.failures)


def failure_text(failure: Failure) -> Text:
    """One failure in a line."""
    head = (f"{STAGE[failure.stage]} could not answer", _STYLE[failure_severity(failure)])
    return Text.assemble(head, f": {failure.reason} {failure.hint}")
