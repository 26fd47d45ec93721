"""Reads a sheet (TOML): what is known of one filmed rep. Errors name the key, the value seen, what is allowed."""

from __future__ import annotations

import math
import tomllib
from collections import Counter
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Any, Final

import numpy as np
from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError

from vidkin.errors import UsageError
from vidkin.files.layouts import find_point, read_layout
from vidkin.files.sheet_errors import describe
from vidkin.stages import Air, Athlete, CameraPrior, Lane, Mark, Rep, Sighting

#: Station pressure and altitude, both stated, may differ from the standard atmosphere by this much [-].
_PRESSURE_TOLERANCE: Final = 0.07
#: Below this pressure an altitude must confirm that no other unit is meant: 760 would be mmHg at sea level [hPa].
_LOW_PRESSURE_HPA: Final = 850.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Sheet:
    """A rep as stated, the sheet's own path and its clip's."""

    rep: Rep
    path: Path
    clip_path: Path


def _within(low: float, high: float, default: float | None = None) -> Any:
    """A finite number in a closed range; no default: not stated."""
    return Field(default=default, ge=low, le=high, allow_inf_nan=False)


def _said(text: str) -> str:
    if not text.strip():
        raise ValueError("is empty")
    return text.strip()


_Text = Annotated[str, AfterValidator(_said)]


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


class _Athlete(_Strict):
    label: _Text = "athlete"
    mass_kg: float | None = _within(20, 200)
    stature_m: float | None = _within(1.0, 2.5)


class _Air(_Strict):
    temperature_c: float | None = _within(-30, 55)
    pressure_hpa: float | None = _within(500, 1100)
    altitude_m: float | None = _within(-430, 5000)
    humidity_pct: float | None = _within(0, 100)
    wind_mps: float | None = _within(-15, 15)


class _Lane(_Strict):
    start_x_m: float = _within(-500, 500, 0.0)
    centre_y_m: float = _within(-50, 50, 0.61)
    width_m: float = _within(0.5, 10, 1.22)


class _Camera(_Strict):
    hfov_deg: float | None = _within(5, 150)
    height_m: float | None = _within(0.05, 50)
    height_sd_m: float = _within(0.001, 10, 0.15)
    distance_m: float | None = _within(1, 300)
    distance_sd_m: float = _within(0.001, 50, 0.5)


class _Calibration(_Strict):
    layout: _Text


class _Mark(_Strict):
    label: _Text | None = None
    point: _Text | None = None
    x_m: float | None = _within(-500, 500)
    y_m: float | None = _within(-100, 100)
    z_m: float | None = _within(-5, 30)
    u_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    v_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    sd_px: float = _within(0.01, 100, 1.0)
    sd_m: float | None = _within(0, 1)


class _Line(_Strict):
    """A click anywhere on a line along the lane."""

    label: _Text
    y_m: float = Field(ge=-100, le=100, allow_inf_nan=False)
    z_m: float = _within(-5, 30, 0.0)
    u_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    v_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    sd_px: float = _within(0.01, 100, 1.0)
    sd_m: float = _within(0, 1, 0.01)


class _Pole(_Strict):
    """A click anywhere on a vertical pole."""

    label: _Text
    x_m: float = Field(ge=-500, le=500, allow_inf_nan=False)
    y_m: float = Field(ge=-100, le=100, allow_inf_nan=False)
    u_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    v_px: float = Field(ge=-20_000, le=20_000, allow_inf_nan=False)
    sd_px: float = _within(0.01, 100, 1.0)
    sd_m: float = _within(0, 1, 0.01)


class _SheetFile(_Strict):
    clip: _Text
    capture_fps: float | None = _within(1, 100_000)
    splits_m: list[Annotated[float, Field(ge=0.1, le=1000, allow_inf_nan=False)]] = []
    athlete: _Athlete = _Athlete()
    air: _Air = _Air()
    lane: _Lane = _Lane()
    camera: _Camera = _Camera()
    calibration: _Calibration | None = None
    mark: list[_Mark] = []
    line: list[_Line] = []
    pole: list[_Pole] = []


def read_sheet(path: Path) -> Sheet:
    """Read and check a sheet.

    Parameters
    ----------
    path : Path
        A TOML file; its clip is relative to it.

    Raises
    ------
    UsageError
        If the file is no sheet, states something impossible, or its clip is missing.
    """
    path = Path(path)
    data = _load(path)
    try:
        file = _SheetFile.model_validate(data)
    except ValidationError as error:
        found = [describe(dict(e), data, _SheetFile) for e in error.errors()]
        raise UsageError(_listed(path, found), "See the sheet in the README.") from error
    wrong = [*_check_air(file.air), *_check_splits(file.splits_m), *_check_start(file.mark, file.calibration)]
    if wrong:
        raise UsageError(_listed(path, wrong), "See the sheet in the README.")
    marks = _marks(path, file)
    wrong = _check_twins(marks)
    if wrong:
        raise UsageError(_listed(path, wrong), "See the sheet in the README.")
    rep = Rep(
        clip=file.clip,
        capture_fps=file.capture_fps,
        athlete=Athlete(**file.athlete.model_dump()),
        air=Air(**file.air.model_dump()),
        lane=Lane(**file.lane.model_dump()),
        camera=CameraPrior(**file.camera.model_dump()),
        marks=marks,
        sightings=_sightings(file),
        splits_m=tuple(file.splits_m),
    )
    return Sheet(rep=rep, path=path, clip_path=_clip_path(path, file.clip))


def _sightings(file: _SheetFile) -> tuple[Sighting, ...]:
    lines = (
        Sighting(
            label=s.label,
            free="x",
            xyz_m=np.array([0.0, s.y_m, s.z_m]),
            uv_px=np.array([s.u_px, s.v_px]),
            sd_px=s.sd_px,
            sd_m=s.sd_m,
        )
        for s in file.line
    )
    poles = (
        Sighting(
            label=s.label,
            free="z",
            xyz_m=np.array([s.x_m, s.y_m, 0.0]),
            uv_px=np.array([s.u_px, s.v_px]),
            sd_px=s.sd_px,
            sd_m=s.sd_m,
        )
        for s in file.pole
    )
    return (*lines, *poles)


def _load(path: Path) -> dict[str, Any]:
    if not path.exists():
        raise UsageError(f"{path}: there is no such sheet.", "Check the name.")
    if path.is_dir():
        raise UsageError(f"{path} is a folder, not a sheet.", "Name the .toml file in it.")
    try:
        return tomllib.loads(path.read_bytes().decode("utf-8-sig"))
    except OSError as error:
        raise UsageError(f"{path} cannot be read: {error.strerror}.", "Check who may read the file.") from error
    except UnicodeDecodeError as error:
        raise UsageError(
            f"{path} is no UTF-8 text (byte {error.start}: 0x{error.object[error.start]:02x}).",
            "A sheet is a TOML text file; save it as UTF-8. A clip is named inside the sheet.",
        ) from error
    except tomllib.TOMLDecodeError as error:
        raise UsageError(
            f"{path} is no TOML: {error}.",
            'Texts stand in "quotes", decimals have a point (1.74), each mark starts with [[mark]].',
        ) from error


def _listed(path: Path, found: list[str]) -> str:
    if len(found) == 1:
        return f"{path}: {found[0]}"
    shown = "".join(f"\n- {line}" for line in found[:8])
    return f"{path}: {len(found)} things to mend:{shown}" + ("\n- ..." if len(found) > 8 else "")


def _check_air(air: _Air) -> list[str]:
    wrong: list[str] = []
    if air.humidity_pct is not None and 0 < air.humidity_pct <= 1:
        seen = f"air.humidity_pct = {air.humidity_pct:g}"
        wrong.append(f"{seen} looks like a fraction; write per cent: {100 * air.humidity_pct:g}.")
    if air.pressure_hpa is None:
        return wrong
    if air.altitude_m is None:
        if air.pressure_hpa < _LOW_PRESSURE_HPA:
            altitude_m = (1 - (air.pressure_hpa / 1013.25) ** (1 / 5.25588)) / 2.25577e-5
            wrong.append(
                f"air.pressure_hpa = {air.pressure_hpa:g} is the station pressure at about {altitude_m:.0f} m: state "
                f"altitude_m too, to confirm it. If the value is in mmHg, write {air.pressure_hpa * 1.33322:.0f}."
            )
        return wrong
    # Standard atmosphere, ISO 2533: p = 1013.25 hPa (1 - 2.25577e-5 h)^5.25588, h in metres.
    standard = 1013.25 * (1 - 2.25577e-5 * air.altitude_m) ** 5.25588
    if abs(air.pressure_hpa / standard - 1) > _PRESSURE_TOLERANCE:
        wrong.append(
            f"air.pressure_hpa = {air.pressure_hpa:g} does not go with altitude_m = {air.altitude_m:g}, where about "
            f"{standard:.0f} hPa are usual. State the pressure at the track, not the one reduced to sea level."
        )
    return wrong


def _check_splits(splits_m: list[float]) -> list[str]:
    if any(b <= a for a, b in pairwise(splits_m)):
        return [f"splits_m = {splits_m} must rise, each distance once."]
    return []


def _check_start(marks: list[_Mark], calibration: _Calibration | None) -> list[str]:
    """Each mark has x, y and z, or a point of the layout; and a label, or a point to take it from."""
    wrong: list[str] = []
    for number, mark in enumerate(marks, 1):
        where = f"mark {number}" + (f" ('{mark.label}')" if mark.label else "")
        missing = [key for key in ("x_m", "y_m", "z_m") if getattr(mark, key) is None]
        if mark.point is None:
            wrong += [f"{where}: {' and '.join(missing)} missing."] if missing else []
            wrong += [] if mark.label else [f"{where}: label missing."]
        elif len(missing) < 3:
            wrong.append(f"{where}: give either point = '{mark.point}' or x_m, y_m and z_m, not both.")
        elif calibration is None:
            wrong.append(f"{where}: point = '{mark.point}' needs a layout: add [calibration] with layout = \"...\".")
    return wrong


def _marks(path: Path, file: _SheetFile) -> tuple[Mark, ...]:
    try:
        layout = read_layout(file.calibration.layout) if file.calibration is not None else None
        marks: list[Mark] = []
        for mark in file.mark:
            sd_m = mark.sd_m if mark.sd_m is not None else 0.01
            xyz_m = np.array([mark.x_m, mark.y_m, mark.z_m], dtype=np.float64)
            if mark.point is not None and layout is not None:
                found = find_point(layout, mark.point)
                xyz_m, sd_m = found.xyz_m, mark.sd_m if mark.sd_m is not None else found.sd_m
            label = mark.label or mark.point or ""
            uv_px = np.array([mark.u_px, mark.v_px])
            marks.append(Mark(label=label, xyz_m=xyz_m, uv_px=uv_px, sd_px=mark.sd_px, sd_m=sd_m))
    except UsageError as error:
        raise UsageError(f"{path}: {error.message}", error.hint) from error
    return tuple(marks)


def _check_twins(marks: tuple[Mark, ...]) -> list[str]:
    wrong = [
        f"{count} marks are labelled '{label}'; each label may stand once."
        for label, count in Counter(mark.label for mark in marks).items()
        if count > 1
    ]
    for i, a in enumerate(marks):
        for b in marks[i + 1 :]:
            if math.dist(a.xyz_m, b.xyz_m) < 1e-3:
                place = ", ".join(f"{n:g}" for n in a.xyz_m)
                wrong.append(f"marks '{a.label}' and '{b.label}' have the same place ({place}) m.")
            elif math.dist(a.uv_px, b.uv_px) < 1e-3:
                place = ", ".join(f"{n:g}" for n in a.uv_px)
                wrong.append(f"marks '{a.label}' and '{b.label}' are seen at the same pixel ({place}).")
    return wrong


def _clip_path(path: Path, clip: str) -> Path:
    clip_path = path.parent / clip
    if clip_path.is_dir():
        raise UsageError(f"{path}: clip = '{clip}' is a folder ({clip_path}).", "Name the video file in it.")
    if not clip_path.exists():
        raise UsageError(
            f"{path}: clip = '{clip}' is not there ({clip_path}).", "Name the clip relative to the sheet's folder."
        )
    return clip_path
