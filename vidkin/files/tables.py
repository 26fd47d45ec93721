"""Reads a table for the fitting core: time with distance, speed or both, from a text file with named columns."""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from vidkin.errors import UsageError
from vidkin.stages import Array

#: Quantity -> words that name it in a header (lower case, unit removed).
_NAMES: Final = {
    "t_s": ("t", "time", "elapsed", "elapsed time", "split", "split time", "clip time"),
    "x_m": ("x", "distance", "dist", "position", "pos", "displacement"),
    "v_mps": ("v", "speed", "velocity", "vel"),
}
#: Quantity -> unit as written (lower case) -> its size in s, m or m/s.
_UNITS: Final = {
    "t_s": {"s": 1.0, "sec": 1.0, "secs": 1.0, "second": 1.0, "seconds": 1.0, "ms": 1e-3, "min": 60.0},
    "x_m": {
        **{"m": 1.0, "metre": 1.0, "metres": 1.0, "meter": 1.0, "meters": 1.0, "cm": 0.01, "mm": 1e-3, "km": 1e3},
        **{"yd": 0.9144, "yard": 0.9144, "yards": 0.9144, "ft": 0.3048, "feet": 0.3048},
    },
    "v_mps": {
        **{"m/s": 1.0, "mps": 1.0, "ms-1": 1.0, "m s-1": 1.0, "m·s-1": 1.0, "m·s⁻¹": 1.0, "m s⁻¹": 1.0},
        **{"km/h": 1 / 3.6, "kmh": 1 / 3.6, "kph": 1 / 3.6, "mph": 0.44704},
    },
}
_SI: Final = {"t_s": "s", "x_m": "m", "v_mps": "m/s"}
_GAPS: Final = {"", "-", "--", "na", "n/a", "nan", "null", "none"}
#: Nobody runs faster; above it the unit is wrong [m/s].
_FASTEST_MPS: Final = 14.0
#: A mean speed below this is no sprint but a wrong unit [m/s].
_SLOWEST_MPS: Final = 0.2
_LEAST_ROWS: Final = 3
_HINT: Final = "Name the columns t_s with x_m or v_mps, one row for each time."


@dataclass(frozen=True, slots=True, kw_only=True)
class SpeedTable:
    """A run as a table in SI units: `t_s` (N,) rising, `x_m` (N,) and `v_mps` (N,) or None.

    `notes` say, in plain words, what was assumed and which lines were left out.
    """

    t_s: Array
    x_m: Array | None
    v_mps: Array | None
    source_name: str
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class _Column:
    """A column in use: its place in the row, name as written, unit's size in SI."""

    place: int
    header: str
    scale: float


def read_table(path: Path, *, units: Mapping[str, str] | None = None) -> SpeedTable:
    """Read a speed-time, distance-time or split table.

    Parameters
    ----------
    path : Path
        A text file with a header line; fields parted by comma, semicolon or tab; decimal point or comma.
        Lines that start with # are skipped.
    units : mapping, optional
        Units of columns whose header states none, by quantity: for example ``{"v": "km/h"}``; keys t, x, v.

    Raises
    ------
    UsageError
        If the file is no such table; the message names the line.
    """
    path = Path(path)
    lines = _lines(path)
    separator = _separator(path, lines[0][1])
    header = _split(lines[0][1], separator)
    notes: list[str] = []
    columns = _columns(path, header, _stated(units), notes)
    rows = _rows(path, lines[1:], header, separator, columns, notes)
    t_s = np.array([row["t_s"] for row in rows])
    x_m = np.array([row["x_m"] for row in rows]) if "x_m" in columns else None
    v_mps = np.array([row["v_mps"] for row in rows]) if "v_mps" in columns else None
    _check_speeds(path, t_s, x_m, v_mps)
    return SpeedTable(t_s=t_s, x_m=x_m, v_mps=v_mps, source_name=path.name, notes=tuple(notes))


# --- text -----------------------------------------------------------------------------------------


def _lines(path: Path) -> list[tuple[int, str]]:
    """Numbered lines that hold something, comments left out."""
    if not path.exists():
        raise UsageError(f"{path}: there is no such table.", "Check the name.")
    if path.is_dir():
        raise UsageError(f"{path} is a folder, not a table.", "Name the text file in it.")
    try:
        data = path.read_bytes()
    except OSError as error:
        raise UsageError(f"{path} cannot be read: {error.strerror}.", "Check who may read the file.") from error
    encoding = "utf-16" if data[:2] in (b"\xff\xfe", b"\xfe\xff") else "utf-8-sig"
    if data[:4] == b"PK\x03\x04" or (encoding != "utf-16" and b"\x00" in data[:4096]):
        raise UsageError(f"{path} is no text file.", "Save the table as CSV first.")
    try:
        text = data.decode(encoding)
    except UnicodeDecodeError:
        text = data.decode(
            "cp1252", errors="replace"
        )  # an old spreadsheet's CSV; only its header can hold such letters
    lines = [
        (number, line)
        for number, line in enumerate(text.splitlines(), 1)
        if line.strip(" \t;,") and not line.lstrip().startswith("#")
    ]
    if not lines:
        raise UsageError(f"{path} is empty.", _HINT)
    return lines


def _separator(path: Path, header: str) -> str:
    for separator in ("\t", ";", ","):
        if len(_split(header, separator)) > 1:
            return separator
    raise UsageError(
        f"{path}: the header '{_short(header)}' has only one column.", "Part the columns by comma, semicolon or tab."
    )


def _split(line: str, separator: str) -> list[str]:
    return [field.strip() for field in next(csv.reader([line], delimiter=separator))]


def _short(text: str) -> str:
    return text if len(text) <= 60 else text[:57] + "..."


# --- header ---------------------------------------------------------------------------------------


def _stated(units: Mapping[str, str] | None) -> dict[str, float]:
    """Scale by quantity of the units that the user states."""
    scales: dict[str, float] = {}
    for key, unit in (units or {}).items():
        quantity = next((q for q in _NAMES if key.lower() in (q, *_NAMES[q])), None)
        if quantity is None:
            raise UsageError(f"Units are stated for '{key}', which is no column.", "Use t, x or v, as in v=km/h.")
        scale = _UNITS[quantity].get(unit.strip().lower())
        if scale is None:
            raise UsageError(f"'{unit}' is no unit for {key}.", f"Known units: {', '.join(_UNITS[quantity])}.")
        scales[quantity] = scale
    return scales


def _columns(path: Path, header: list[str], stated: Mapping[str, float], notes: list[str]) -> dict[str, _Column]:
    """Which column is which quantity, and its unit."""
    if all(_number(field) is not None or not field for field in header):
        raise UsageError(f"{path}: the first line holds numbers, so the columns have no names.", _HINT)
    found: dict[str, list[tuple[_Column, bool]]] = {quantity: [] for quantity in _NAMES}
    for place, field in enumerate(header):
        name, unit = _name_and_unit(field)
        quantity = next((q for q, names in _NAMES.items() if name in names), None)
        if quantity is None:
            continue
        scale = _UNITS[quantity].get(unit) if unit else stated.get(quantity)
        if unit and scale is None:
            raise UsageError(
                f"{path}: column '{field}' has the unit '{unit}', which is none of {_words(quantity)}.",
                f"Known units: {', '.join(_UNITS[quantity])}.",
            )
        if unit and stated.get(quantity, scale) != scale:
            raise UsageError(
                f"{path}: column '{field}' has the unit '{unit}', but another one is stated for it.",
                "Leave the option out, or correct the header.",
            )
        found[quantity].append((_Column(place=place, header=field, scale=scale or 1.0), scale is None))
    columns: dict[str, _Column] = {}
    for quantity, entries in found.items():
        exact = [entry for entry in entries if entry[0].header == quantity]
        if len(exact or entries) > 1:
            names = " and ".join(f"'{column.header}'" for column, _ in exact or entries)
            raise UsageError(f"{path}: columns {names} both say {_words(quantity)}.", "Keep one of them.")
        for column, assumed in exact or entries:
            columns[quantity] = column
            if assumed:
                notes.append(f"column '{column.header}' states no unit: taken as {_SI[quantity]}")
    if "t_s" not in columns or len(columns) < 2:
        lacking = "time" if "t_s" not in columns else "distance or speed"
        raise UsageError(f"{path}: no column for {lacking} among '{_short(', '.join(header))}'.", _HINT)
    return columns


def _words(quantity: str) -> str:
    return {"t_s": "time", "x_m": "distance", "v_mps": "speed"}[quantity]


def _name_and_unit(field: str) -> tuple[str, str]:
    """`Speed (km/h)`, `speed [km/h]`, `speed_kmh`, `speed km/h` -> ("speed", "km/h" or "kmh"); unit "" if none."""
    text = re.sub(r"\s+", " ", field.lower().strip())
    match = re.fullmatch(r"(.*?)\s*[(\[]\s*(.*?)\s*[)\]]", text) or re.fullmatch(r"(.*?)\s*[,/]\s+(.*)", text)
    if match:
        return match[1].replace("_", " ").strip(), match[2]
    every_unit = {unit for units in _UNITS.values() for unit in units}
    for separator in ("_", " "):
        name, found, unit = text.rpartition(separator)
        if found and unit in every_unit:
            return name.replace("_", " ").strip(), unit
    return text.replace("_", " "), ""


# --- rows -----------------------------------------------------------------------------------------


def _rows(
    path: Path,
    lines: list[tuple[int, str]],
    header: list[str],
    separator: str,
    columns: Mapping[str, _Column],
    notes: list[str],
) -> list[dict[str, float]]:
    """The usable rows in SI units, times rising."""
    gaps: list[int] = []
    twins: list[int] = []
    rows: list[dict[str, float]] = []
    for number, line in lines:
        fields = _split(line, separator)
        if len(fields) > len(header) and any(fields[len(header) :]):
            raise UsageError(
                f"{path}: line {number} has {len(fields)} fields, the header has {len(header)}: '{_short(line)}'.",
                "With decimal commas, part the columns by semicolon or tab.",
            )
        fields += [""] * (len(header) - len(fields))
        if any(fields[column.place].lower() in _GAPS for column in columns.values()):
            gaps.append(number)
            continue
        row = {
            quantity: column.scale * _value(path, number, column, fields[column.place])
            for quantity, column in columns.items()
        }
        if rows and row["t_s"] <= rows[-1]["t_s"]:
            if row == rows[-1]:
                twins.append(number)
                continue
            raise UsageError(
                f"{path}: line {number}: time {row['t_s']:g} s does not come after {rows[-1]['t_s']:g} s.",
                "Times must rise from line to line; times of single sections have to be added up first.",
            )
        rows.append(row)
    if gaps:
        notes.append(f"left out for a gap: {_line_list(gaps)}")
    if twins:
        notes.append(f"left out as repeated: {_line_list(twins)}")
    if len(rows) < _LEAST_ROWS:
        raise UsageError(f"{path}: {len(rows)} usable rows, at least {_LEAST_ROWS} are needed.", _HINT)
    return rows


def _line_list(numbers: list[int]) -> str:
    shown = ", ".join(map(str, numbers[:10])) + (f" and {len(numbers) - 10} more" if len(numbers) > 10 else "")
    return f"line {shown}" if len(numbers) == 1 else f"lines {shown}"


def _number(text: str) -> float | None:
    """A finite number with decimal point or comma, or None."""
    if re.fullmatch(r"[+-]?\d*,\d+", text):
        text = text.replace(",", ".")
    try:
        value = float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) and "_" not in text else None


def _value(path: Path, line: int, column: _Column, text: str) -> float:
    value = _number(text)
    if value is None:
        raise UsageError(
            f"{path}: line {line}, column '{column.header}': '{_short(text)}' is no number.",
            "Write plain numbers; leave a field empty where there is none.",
        )
    return value


def _check_speeds(path: Path, t_s: Array, x_m: Array | None, v_mps: Array | None) -> None:
    """Refuse speeds that nobody runs: the unit is wrong."""
    hint = "State the units in the header, as in 'speed (km/h)', or as an option, as in v=km/h."
    if v_mps is not None and np.abs(v_mps).max() > _FASTEST_MPS:
        raise UsageError(f"{path}: speeds up to {np.abs(v_mps).max():.4g} m/s: nobody runs so fast.", hint)
    if x_m is not None:
        mean_mps = abs(x_m[-1] - x_m[0]) / (t_s[-1] - t_s[0])
        if not _SLOWEST_MPS <= mean_mps <= _FASTEST_MPS:
            raise UsageError(f"{path}: the table's mean speed is {mean_mps:.4g} m/s, which is no run.", hint)
