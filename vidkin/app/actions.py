"""The user actions on one sheet, table or folder: read, core, provenance, write."""

from __future__ import annotations

import json
import platform
from collections.abc import Callable, Mapping
from contextlib import suppress
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Final

import av
import cv2
import numpy as np
import scipy

import vidkin
from vidkin.core import pipeline
from vidkin.core.fit import fit_table
from vidkin.errors import EXIT_CALIBRATION, EXIT_OK, EXIT_PARTIAL
from vidkin.files.exports import Format
from vidkin.files.exports import export as export_result
from vidkin.files.layouts import data_folder
from vidkin.files.sheets import Sheet, read_sheet
from vidkin.files.store import result_folder, sha256_of, write_analysis
from vidkin.files.tables import SpeedTable, read_table
from vidkin.files.video import Clip, VideoWriter, open_clip
from vidkin.notices import Failure
from vidkin.report.canvas import frame_rgb
from vidkin.report.overlay import draw_overlay
from vidkin.report.page import report_page
from vidkin.report.tracked import output_size, tracked_frames
from vidkin.stages import Analysis, Camera, Fit, Footage, Frame, Rep, Settings, Track

#: Called with a stage's name, the frames done and the frames in all (None while they are not known).
Progress = Callable[[str, int, int | None], None]
#: Gives the date that goes into the provenance.
Clock = Callable[[], datetime]

#: Where `demo` writes unless told otherwise, in the current folder.
DEMO_FOLDER: Final = Path("out") / "demo"
#: The longest side of tracked.mp4 [px]: enough to see every body, small enough to send around.
_TRACKED_PX: Final = 1280


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What an action on one sheet has left: the analysis, its folder, the names of the files in it, the exit code."""

    sheet: Path
    analysis: Analysis
    folder: Path
    files: tuple[str, ...]
    exit_code: int


@dataclass(frozen=True, slots=True, kw_only=True)
class DemoOutcome:
    """The demo's outcome with the truth that it may be compared with, by name and by distance [m]."""

    outcome: Outcome
    truth: Mapping[str, float]
    splits_truth: Mapping[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class FitOutcome:
    """A table, what the fitting core says of it, the provenance and the exit code."""

    table: SpeedTable
    fit: Fit | Failure
    provenance: Mapping[str, Any]
    exit_code: int


def utc_now() -> datetime:
    """The present moment, UTC."""
    return datetime.now(UTC)


def beside(sheet_path: Path, what: str) -> Path:
    """Where results of a sheet go unless told otherwise: `<its name>-<what>` next to it."""
    sheet_path = Path(sheet_path)
    return sheet_path.with_name(f"{sheet_path.stem}-{what}")


def exit_code_of(analysis: Analysis) -> int:
    """0, or 4 where the marks define no camera, or 6 where a later stage could not answer."""
    if isinstance(analysis.camera, Failure):
        return EXIT_CALIBRATION
    if any(isinstance(stage, Failure) for stage in (analysis.track, analysis.motion, analysis.fit)):
        return EXIT_PARTIAL
    return EXIT_OK


# --- analyse --------------------------------------------------------------------------------------


def analyse(
    sheet_path: Path,
    out: Path | None = None,
    *,
    settings: Settings | None = None,
    progress: Progress | None = None,
    pictures: bool = True,
    clock: Clock = utc_now,
) -> Outcome:
    """The whole job on one sheet.

    Parameters
    ----------
    sheet_path : Path
        A sheet (TOML).
    out : Path, optional
        The result folder; `<sheet>-result` next to the sheet if not given.
    settings : Settings, optional
    progress : callable, optional
        Called as the frames go by.
    pictures : bool
        False leaves out overlay.png and tracked.mp4.
    clock : callable
        Gives the date for the provenance.

    Raises
    ------
    UsageError, FootageError, ExportError
        If sheet, clip or result folder cannot be used. Nothing is left in `out` then.
    """
    tell = progress or _silent
    sheet = read_sheet(Path(sheet_path))
    folder = Path(out) if out is not None else beside(sheet.path, "result")
    # Entered first: a place that cannot be written is found out before the work, not after it.
    with result_folder(folder) as part:
        scan = pipeline.Scan(sheet.rep)

        def visit(frame: Frame) -> None:
            scan.visit(frame)
            tell("read", frame.index + 1, None)

        clip = open_clip(sheet.clip_path, capture_fps=sheet.rep.capture_fps, visit=visit)
        frames = clip.footage.t_s.size
        found = pipeline.analyse(
            scan,
            clip.footage,
            clip.frames,
            settings=settings,
            progress=lambda stage, done: tell(stage, done, frames),
        )
        found = replace(found, provenance=_provenance({"sheet": sheet.path, "clip": sheet.clip_path}, clock))
        write_analysis(found, part)
        picture = _overlay(found, scan.picture, part, full_range=clip.full_range) if pictures else None
        if pictures:
            _tracked(found, clip, part, tell)
        names = tuple(sorted(entry.name for entry in part.iterdir()))
        page = report_page(found, overlay_png=picture, files=names)
        (part / "report.html").write_text(page, encoding="utf-8", newline="\n")
    return Outcome(
        sheet=sheet.path,
        analysis=found,
        folder=folder,
        files=(*names, "report.html"),
        exit_code=exit_code_of(found),
    )


def _silent(_stage: str, _done: int, _total: int | None) -> None:
    """No progress wanted."""


def _provenance(inputs: Mapping[str, Path], clock: Clock) -> dict[str, Any]:
    """Versions, date, and name and SHA-256 of each input. Settings are added where the result is written."""
    return {
        "vidkin": vidkin.__version__,
        "date": clock().isoformat(timespec="seconds"),
        "versions": {
            "python": platform.python_version(),
            "numpy": np.__version__,
            "scipy": scipy.__version__,
            "opencv": cv2.__version__,
            "av": av.__version__,
        },
        "inputs": {
            key: value
            for kind, path in inputs.items()
            for key, value in ((kind, _printable(path.name)), (f"{kind}_sha256", sha256_of(path)))
        },
    }


def _printable(name: str) -> str:
    """A file name with bytes that are no UTF-8 spelt out."""
    return name.encode("utf-8", "surrogateescape").decode("utf-8", "backslashreplace")


def _overlay(analysis: Analysis, picture: Frame | None, part: Path, *, full_range: bool) -> bytes | None:
    """Write overlay.png where there is a camera; its bytes."""
    if picture is None or not isinstance(analysis.camera, Camera):
        return None
    drawn = draw_overlay(analysis.camera, analysis.rep.lane, frame_rgb(picture, full_range=full_range))
    png = bytes(cv2.imencode(".png", cv2.cvtColor(drawn, cv2.COLOR_RGB2BGR))[1].tobytes())
    (part / "overlay.png").write_bytes(png)
    return png


def _tracked(analysis: Analysis, clip: Clip, part: Path, tell: Progress) -> None:
    """Write tracked.mp4, a third pass over the clip, where there is a track."""
    if not isinstance(analysis.track, Track):
        return
    footage = clip.footage
    size = output_size(footage.width_px, footage.height_px, longest_px=_TRACKED_PX)
    pictures = tracked_frames(analysis, clip.frames(), width_px=_TRACKED_PX, full_range=clip.full_range)
    with VideoWriter(
        part / "tracked.mp4", size, rate=footage.frame_rate_hz, times_s=footage.t_s.tolist(), preset="veryfast"
    ) as writer:
        for done, (_, picture) in enumerate(pictures, 1):
            writer.write_rgb(picture)
            tell("draw", done, footage.t_s.size)


# --- calibrate ------------------------------------------------------------------------------------


class _EnoughError(Exception):
    """Ends a pass over a clip after its first frame."""


def calibrate(sheet_path: Path, out: Path | None = None, *, clock: Clock = utc_now) -> Outcome:
    """Camera and marker overlay from the first frame of a sheet's clip.

    Parameters
    ----------
    sheet_path : Path
        A sheet (TOML).
    out : Path, optional
        The folder for summary.json, camera.json and overlay.png; `<sheet>-calibration` next to the sheet if not given.
    clock : callable
        Gives the date for the provenance.

    Raises
    ------
    UsageError, FootageError, ExportError
        If sheet, clip or folder cannot be used.
    """
    sheet = read_sheet(Path(sheet_path))
    folder = Path(out) if out is not None else beside(sheet.path, "calibration")
    with result_folder(folder) as part:
        camera, first = _first_look(sheet)
        height_px, width_px = first.luma.shape
        found = Analysis(
            rep=sheet.rep,
            settings=Settings(),
            footage=Footage(name=sheet.clip_path.name, width_px=width_px, height_px=height_px, t_s=np.zeros(1)),
            camera=camera,
            provenance=_provenance({"sheet": sheet.path, "clip": sheet.clip_path}, clock),
        )
        write_analysis(found, part)
        _overlay(found, first, part, full_range=False)
        names = tuple(sorted(entry.name for entry in part.iterdir()))
    return Outcome(sheet=sheet.path, analysis=found, folder=folder, files=names, exit_code=exit_code_of(found))


def _first_look(sheet: Sheet) -> tuple[Camera | Failure, Frame]:
    """The camera and the first frame, with nothing decoded after it."""
    scan = pipeline.Scan(sheet.rep)

    def visit(frame: Frame) -> None:
        scan.visit(frame)
        raise _EnoughError

    with suppress(_EnoughError):
        open_clip(sheet.clip_path, capture_fps=sheet.rep.capture_fps, visit=visit)
    assert scan.picture is not None  # open_clip refuses a clip without pictures
    assert scan.camera is not None
    return scan.camera, scan.picture


# --- demo, fit, export ----------------------------------------------------------------------------


def demo(
    out: Path | None = None, *, progress: Progress | None = None, pictures: bool = True, clock: Clock = utc_now
) -> DemoOutcome:
    """The whole job on the bundled clip, with the known truth beside it.

    Parameters
    ----------
    out : Path, optional
        The result folder; `out/demo` in the current folder if not given.
    progress, pictures, clock
        As in `analyse`.

    Raises
    ------
    ExportError
        If the folder cannot be written.
    """
    bundled = data_folder("demo_clips")
    outcome = analyse(bundled / "clip.toml", out or DEMO_FOLDER, progress=progress, pictures=pictures, clock=clock)
    known = json.loads((bundled / "clip.truth.json").read_text(encoding="utf-8"))
    fit = outcome.analysis.fit
    # A fitted drag constant lumps the body's own losses into the air; the truth is the air's alone.
    lumped = {q.name for q in fit.quantities.values() if "lumped" in q.method} if isinstance(fit, Fit) else set()
    return DemoOutcome(
        outcome=outcome,
        truth={name: float(value) for name, value in known["quantities"].items() if name not in lumped},
        splits_truth={float(split["distance_m"]): float(split["time_s"]) for split in known["splits"]},
    )


def fit(
    table_path: Path,
    rep: Rep | None = None,
    *,
    units: Mapping[str, str] | None = None,
    settings: Settings | None = None,
    clock: Clock = utc_now,
) -> FitOutcome:
    """The fitting core on a speed-time, distance-time or split table.

    Parameters
    ----------
    table_path : Path
        A text table with a header.
    rep : Rep, optional
        Body, air and the splits asked for; what is not stated is left out of the answer.
    units : mapping, optional
        Units of columns whose header names none, such as ``{"v": "km/h"}``.
    settings : Settings, optional
    clock : callable
        Gives the date for the provenance.

    Raises
    ------
    UsageError
        If the file is no such table.
    """
    path = Path(table_path)
    table = read_table(path, units=units)
    rep = rep if rep is not None else Rep(clip=path.name)
    answer = fit_table(t_s=table.t_s, x_m=table.x_m, v_mps=table.v_mps, rep=rep, settings=settings)
    return FitOutcome(
        table=table,
        fit=answer,
        provenance=_provenance({"table": path}, clock),
        exit_code=EXIT_OK if answer else EXIT_PARTIAL,
    )


def export(folder: Path, fmt: Format, out: Path | None = None) -> list[Path]:
    """Write a result folder in another format; the files written.

    Parameters
    ----------
    folder : Path
        A result folder.
    fmt : {"csv", "mat", "json", "parquet"}
    out : Path, optional
        A folder, or for mat and json a file; `export` in the result folder if not given.

    Raises
    ------
    ExportError
        If it cannot be read or written.
    """
    return export_result(Path(folder), fmt, Path(out) if out is not None else None)
