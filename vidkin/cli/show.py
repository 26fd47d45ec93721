"""What each command prints for people and, with --json, for programs."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import Any

import typer
from rich.table import Table
from rich.text import Text

from vidkin.app import DemoOutcome, Failed, FitOutcome, Outcome, joint_exit_code
from vidkin.cli.session import Session
from vidkin.files.records import plain
from vidkin.notices import Failure
from vidkin.report import text
from vidkin.report.words import interval_text, law_title, name_of, number, ordered, split_places, unit_of, value_text
from vidkin.stages import Analysis, Camera, Fit, Quantity


def _record(outcome: Outcome) -> dict[str, Any]:
    """An outcome for programs: the content of its own summary.json, and where everything is."""
    return {
        "sheet": str(outcome.sheet),
        "folder": str(outcome.folder),
        "files": list(outcome.files),
        "exit_code": outcome.exit_code,
        "summary": json.loads((outcome.folder / "summary.json").read_text(encoding="utf-8")),
    }


def _unanswered(analysis: Analysis) -> Failure | None:
    """The stage for which the exit code is not 0."""
    stages = (analysis.camera, analysis.track, analysis.motion, analysis.fit)
    return next((stage for stage in stages if isinstance(stage, Failure)), None)


def _close(s: Session, outcome: Outcome) -> None:
    """Say on standard error why the exit code is not 0."""
    s.code = outcome.exit_code
    failed = _unanswered(outcome.analysis)
    if failed is not None:
        typer.echo(f"Error: {text.failure_text(failed).plain}", err=True)


def _remarks(analysis: Analysis) -> list[Text]:
    """Notices, and what was refused where something was."""
    return [text.notices_text(analysis), *([text.failures_text(analysis)] if analysis.failures else [])]


# --- one sheet ------------------------------------------------------------------------------------


def analysis(s: Session, outcome: Outcome) -> None:
    """A whole analysis."""
    s.results.append(_record(outcome))
    s.say(
        text.summary_table(outcome.analysis),
        *_remarks(outcome.analysis),
        f"Report: {outcome.folder / 'report.html'}",
    )
    _close(s, outcome)


def demo(s: Session, done: DemoOutcome) -> None:
    """The demo, with the truth beside each result."""
    truth = {
        "quantities": dict(done.truth),
        "splits": [{"distance_m": d, "time_s": t} for d, t in done.splits_truth.items()],
    }
    s.results.append({**_record(done.outcome), "truth": truth})
    folder, written = done.outcome.folder, done.outcome.files
    places = {"Report": "report.html", "Video": "tracked.mp4"}
    s.say(
        text.demo_table(done.outcome.analysis, done.truth, done.splits_truth),
        *_remarks(done.outcome.analysis),
        "\n".join(f"{what + ':':7} {folder / name}" for what, name in places.items() if name in written),
    )
    _close(s, done.outcome)


def calibration(s: Session, outcome: Outcome) -> None:
    """A camera: error of each mark, where it stands, the overlay."""
    camera = outcome.analysis.camera
    record = _record(outcome)
    if not isinstance(camera, Camera):
        s.results.append(record)
        s.say(text.failures_text(outcome.analysis))
        _close(s, outcome)
        return
    s.results.append(record | {"camera": json.loads((outcome.folder / "camera.json").read_text(encoding="utf-8"))})
    x, y, z = camera.position_m
    s.say(
        text.marks_table(camera),
        Text(
            f"Camera at x = {x:.2f} m, y = {y:.2f} m, {z:.2f} m high; field of view {camera.hfov_deg:.1f} degrees; "
            f"lane lengths known to {100 * camera.scale_sd:.2f} % (one sd)."
        ),
        *([text.notices_text(outcome.analysis)] if outcome.analysis.notices else []),
        f"Look whether the overlay's lines lie on the track's own: {outcome.folder / 'overlay.png'}",
    )
    _close(s, outcome)


# --- several sheets -------------------------------------------------------------------------------


def analyses(s: Session, every: Sequence[Outcome | Failed]) -> None:
    """A row for each sheet; errors and stages that could not answer below."""
    s.code = joint_exit_code([one.exit_code for one in every])
    table = Table(title=f"{len(every)} sheets", title_justify="left", box=None, pad_edge=False, header_style="bold")
    table.add_column("sheet", overflow="fold")
    for heading, right in (("top_speed, m/s", True), ("interval", False), ("notices", True), ("outcome", False)):
        table.add_column(heading, justify="right" if right else "left", no_wrap=True)
    for one in every:
        if isinstance(one, Failed):
            error = {"message": one.message, "hint": one.hint}
            s.results.append({"sheet": str(one.sheet), "exit_code": one.exit_code, "error": error})
            table.add_row(Text(str(one.sheet)), "", "", "", f"error {one.exit_code}")
            continue
        s.results.append(_record(one))
        fitted = one.analysis.fit
        top = fitted.quantities.get("top_speed") if isinstance(fitted, Fit) else None
        failed = _unanswered(one.analysis)
        table.add_row(
            Text(str(one.sheet)),
            value_text(top) if top else "",
            Text(interval_text(top) if top else ""),
            str(len(one.analysis.notices)),
            "ok" if failed is None else f"no answer from {failed.stage}",
        )
    s.say(table)
    for one in every:
        _explain(s, one)


def _explain(s: Session, one: Outcome | Failed) -> None:
    """On standard error: what went wrong with one of several sheets."""
    if isinstance(one, Failed):
        if s.debug and one.trace:
            typer.echo(one.trace, err=True)
        typer.echo(f"Error: {one.sheet}: {_without(one.message, one.sheet)}\n{one.hint}", err=True)
        return
    failed = _unanswered(one.analysis)
    if failed is not None:
        typer.echo(f"Error: {one.sheet}: {text.failure_text(failed).plain}", err=True)


def _without(message: str, sheet: Path) -> str:
    """The message without the sheet's name in front, which is said already."""
    return message.removeprefix(f"{sheet}: ")


# --- tables ---------------------------------------------------------------------------------------


def fit(s: Session, done: FitOutcome) -> None:
    """What the fitting core says of a table."""
    s.code = done.exit_code
    s.results.append(_fit_record(done))
    notes = [f"{done.table.source_name}: {note}." for note in done.table.notes]
    if not isinstance(done.fit, Fit):
        s.say(*([Text("\n".join(notes))] if notes else []))
        typer.echo(f"Error: {text.failure_text(done.fit).plain}", err=True)
        return
    remarks = [f"{n.text} {n.hint}" for n in done.fit.notices]
    refused = [text.failure_text(f).plain for f in done.fit.refused]
    start = {"standing": "from rest", "flying": "already moving when first seen"}[done.fit.start]
    s.say(
        _fit_table(done.fit, done.table.source_name),
        Text(f"Law: {law_title(done.fit.law)}; the run begins {start}."),
        *(Text("\n".join(lines)) for lines in (notes, remarks, refused) if lines),
    )


def _fit_table(fitted: Fit, title: str) -> Table:
    table = Table(title=Text(title), title_justify="left", box=None, pad_edge=False, header_style="bold")
    for heading, right in (("quantity", False), ("value", True), ("unit", False), ("interval", False)):
        table.add_column(heading, justify="right" if right else "left", overflow="fold")
    table.add_column("meaning", overflow="fold")
    for q in ordered(fitted.quantities):
        table.add_row(q.name, value_text(q), unit_of(q), Text(interval_text(q)), name_of(q.name).meaning)
    places = split_places(fitted.splits)
    for split in fitted.splits:
        interval = f"{number(split.low_s, places)} to {number(split.high_s, places)}"
        table.add_row(
            f"split_{split.distance_m:g}",
            number(split.time_s, places),
            "s",
            interval,
            f"from first movement to {split.distance_m:g} m",
        )
    return table


def _fit_record(done: FitOutcome) -> dict[str, Any]:
    record: dict[str, Any] = {
        "table": done.table.source_name,
        "rows": int(done.table.t_s.size),
        "notes": list(done.table.notes),
        "exit_code": done.exit_code,
        "provenance": done.provenance,
    }
    if not isinstance(done.fit, Fit):
        return record | {"quantities": {}, "splits": [], "notices": [], "failures": [asdict(done.fit)]}
    made: dict[str, Any] = plain(
        record
        | {
            "start": done.fit.start,
            "law": done.fit.law,
            "quantities": {name: _quantity(q) for name, q in done.fit.quantities.items()},
            "splits": [asdict(split) for split in done.fit.splits],
            "curves": asdict(done.fit.curves),
            "notices": [asdict(n) for n in done.fit.notices],
            "failures": [asdict(f) for f in done.fit.refused],
        }
    )
    return made


def _quantity(q: Quantity) -> dict[str, Any]:
    """As in summary.json: with its interval, or why there is none."""
    bounds: dict[str, Any] = {"why_no_interval": q.why_no_interval}
    if q.low is not None and q.high is not None:
        bounds = {"low": q.low, "high": q.high, "level": q.level}
    return {"value": q.value, **bounds, "unit": q.unit, "method": q.method}


# --- export ---------------------------------------------------------------------------------------


def export(s: Session, folder: Path, files: Sequence[Path]) -> None:
    """The files written."""
    s.results.append({"folder": str(folder), "files": [str(file) for file in files]})
    s.say("\n".join(f"Wrote {file}" for file in files))
