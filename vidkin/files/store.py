"""Result folders: written beside their place and moved in whole; the files of one analysis; reading them back."""

from __future__ import annotations

import errno
import hashlib
import json
import secrets
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import pandas as pd

from vidkin.errors import ExportError
from vidkin.files.records import TABLES, camera_record, motion_rows, plain, split_rows, step_rows, summary_record
from vidkin.stages import Analysis, Camera, Fit, Motion, Steps

SCHEMA: Final = "vidkin-summary-1"
#: Everything that vidkin writes into a result folder; an older result loses these, and nothing else.
OWN_FILES: Final = (
    "summary.json",
    "motion.csv",
    "splits.csv",
    "steps.csv",
    "camera.json",
    "overlay.png",
    "tracked.mp4",
    "report.html",
    "export",
)
#: Errors of the disk itself.
_DISK: Final = (errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EIO)


@dataclass(frozen=True, slots=True, kw_only=True)
class Result:
    """A result folder read back: `summary`, `camera` (None if there is none) and the tables by name."""

    folder: Path
    summary: Mapping[str, Any]
    camera: Mapping[str, Any] | None
    tables: Mapping[str, pd.DataFrame]


def sha256_of(path: Path) -> str:
    """SHA-256 of a file's bytes, in hex.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


# --- the folder -----------------------------------------------------------------------------------


@contextmanager
def result_folder(out: Path) -> Iterator[Path]:
    """A temporary folder beside `out` to write into; it becomes `out` at the end, or vanishes on any exception.

    An older result of vidkin at `out` is replaced; files in it that vidkin did not write are kept.

    Raises
    ------
    ExportError
        If `out` is something else, or cannot be written.
    """
    out = Path(out).resolve()
    _check_place(out)
    part = _beside(out, "part")
    try:
        part.mkdir(parents=True)
    except OSError as error:
        raise cannot_write(out, error) from error
    try:
        yield part
        _check_place(out)
        _move_in(part, out)
    except OSError as error:
        if error.errno in _DISK or str(error.filename or "").startswith(str(out.parent)):
            raise cannot_write(out, error) from error
        raise
    finally:
        shutil.rmtree(part, ignore_errors=True)


def _beside(out: Path, use: str) -> Path:
    """A hidden name beside `out`, on the same disk, that no other run uses."""
    return out.parent / f".{out.name}-{secrets.token_hex(4)}.{use}"


def _check_place(out: Path) -> None:
    """Refuse a place whose content is not an older result."""
    if not out.exists():
        return
    if not out.is_dir():
        raise ExportError(f"{out} is a file; the results need a folder.", "Name another folder with --out.")
    if Path.cwd().is_relative_to(out):
        raise ExportError(f"{out} holds the current folder and cannot be replaced.", "Name a folder below it.")
    try:
        if any(out.iterdir()) and not _is_ours(out):
            raise ExportError(
                f"{out} is not empty and holds no result of vidkin; it is left alone.",
                "Name another folder with --out.",
            )
    except OSError as error:
        raise cannot_write(out, error) from error


def _is_ours(folder: Path) -> bool:
    try:
        summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return isinstance(summary, dict) and str(summary.get("schema", "")).startswith("vidkin-summary-")


def _move_in(part: Path, out: Path) -> None:
    if not out.exists():
        part.rename(out)
        return
    old = _beside(out, "old")
    out.rename(old)
    try:
        part.rename(out)
    except BaseException:
        old.rename(out)
        raise
    for entry in old.iterdir():
        if entry.name not in OWN_FILES and not (out / entry.name).exists():
            entry.rename(out / entry.name)
    shutil.rmtree(old, ignore_errors=True)


def cannot_write(out: Path, error: OSError) -> ExportError:
    """What to tell the user of a failed write."""
    why = f"{out} cannot be written: {error.strerror or error}."
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        return ExportError(why, "Free some space, or name another folder with --out.")
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return ExportError(why, "Name a folder with --out in which you may write.")
    return ExportError(why, "Check the folder and its disk, or name another folder with --out.")


# --- writing --------------------------------------------------------------------------------------


def write_analysis(analysis: Analysis, folder: Path) -> None:
    """Write summary.json and, for each stage that answered, motion.csv, splits.csv, steps.csv and camera.json.

    Raises
    ------
    ExportError
        If a value is not finite or a file cannot be written.
    """
    level = analysis.settings.level
    _write_json(folder / "summary.json", {"schema": SCHEMA, **summary_record(analysis)})
    if isinstance(analysis.camera, Camera):
        _write_json(folder / "camera.json", camera_record(analysis.camera))
    if isinstance(analysis.motion, Motion):
        _write_table(folder, "motion", motion_rows(analysis.motion, level))
    if isinstance(analysis.fit, Fit):
        _write_table(folder, "splits", split_rows(analysis.fit.splits))
    if isinstance(analysis.steps, Steps):
        _write_table(folder, "steps", step_rows(analysis.steps))


def _write_json(path: Path, record: Mapping[str, Any]) -> None:
    try:
        text = json.dumps(plain(record), indent=1, ensure_ascii=False, allow_nan=False)
    except ValueError as error:
        raise ExportError(f"{path.name}: {error}.", "This is a fault of vidkin; please report it.") from error
    _write_text(path, text + "\n")


def _write_table(folder: Path, name: str, rows: Mapping[str, Any]) -> None:
    table = pd.DataFrame(rows, columns=list(TABLES[name]))
    # Ten digits: 0.1 nm at 1 m, 10 ns at 100 s; enough to redo every number from the file.
    _write_text(folder / f"{name}.csv", table.to_csv(index=False, float_format="%.10g", lineterminator="\n"))


def _write_text(path: Path, text: str) -> None:
    try:
        path.write_text(text, encoding="utf-8", newline="\n")
    except OSError as error:
        raise cannot_write(path, error) from error


# --- reading --------------------------------------------------------------------------------------


def read_result(folder: Path) -> Result:
    """Read a result folder back.

    Raises
    ------
    ExportError
        If it is no result folder or a file in it has been damaged.
    """
    folder = Path(folder)
    if not folder.is_dir():
        why = "is a file" if folder.exists() else "is not there"
        raise ExportError(f"{folder} {why}; a result folder is needed.", "Name the folder that `vidkin analyse` wrote.")
    if not (folder / "summary.json").is_file():
        raise ExportError(
            f"{folder} holds no summary.json: it is no result folder.", "Name the folder that `vidkin analyse` wrote."
        )
    summary = _read_json(folder / "summary.json")
    if summary.get("schema") != SCHEMA:
        raise ExportError(
            f"{folder / 'summary.json'}: schema {summary.get('schema')!r}, expected '{SCHEMA}'.",
            "It comes from another version; run the analysis again.",
        )
    camera = _read_json(folder / "camera.json") if (folder / "camera.json").exists() else None
    tables = {name: _read_table(folder / f"{name}.csv") for name in TABLES if (folder / f"{name}.csv").exists()}
    return Result(folder=folder, summary=summary, camera=camera, tables=tables)


def _read_json(path: Path) -> dict[str, Any]:
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise ExportError(f"{path} cannot be read: {error}.", "Run the analysis again.") from error
    if not isinstance(record, dict):
        raise ExportError(f"{path} holds no JSON object.", "Run the analysis again.")
    return record


def _read_table(path: Path) -> pd.DataFrame:
    columns = list(TABLES[path.stem])
    try:
        table = pd.read_csv(path, dtype="float64", skip_blank_lines=False)
    except (OSError, ValueError) as error:
        raise ExportError(f"{path} cannot be read: {error}.", "Run the analysis again.") from error
    if list(table.columns) != columns:
        raise ExportError(
            f"{path}: columns {', '.join(map(str, table.columns))}; expected {', '.join(columns)}.",
            "Run the analysis again.",
        )
    bad = ~np.isfinite(table.to_numpy(dtype=np.float64)).all(axis=1)
    if bad.any():
        raise ExportError(f"{path}: line {int(bad.argmax()) + 2} has a gap.", "Run the analysis again.")
    return table
