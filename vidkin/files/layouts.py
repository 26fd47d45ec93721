"""Finds the data folders and reads standard track markings: named points with place, tolerance and source."""

from __future__ import annotations

import difflib
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Literal

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, ValidationError

import vidkin
from vidkin.errors import UsageError
from vidkin.stages import Array

_Number = Annotated[float, Field(allow_inf_nan=False)]


@dataclass(frozen=True, slots=True, kw_only=True)
class LayoutPoint:
    """A point of a layout: `xyz_m` (3,) [m], `sd_m` of its placement, where the numbers come from and how sure."""

    name: str
    xyz_m: Array
    sd_m: float
    source: str
    source_mark: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Layout:
    """Standard markings on one straight lane. `origin` says what x = 0 and y = 0 are, `caution` what to check."""

    name: str
    title: str
    origin: str
    caution: str
    points: Mapping[str, LayoutPoint]


class _Strict(BaseModel):
    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


class _Source(_Strict):
    id: str
    text: str
    mark: Literal["READ", "READ-2", "MEM", "CALC", "common practice, no source"]


class _Point(_Strict):
    name: str
    x_m: _Number
    y_m: _Number
    z_m: _Number = 0.0
    sd_m: Annotated[float, Field(ge=0, le=1)]
    source: str


class _File(_Strict):
    title: str
    origin: str
    caution: str
    source: list[_Source]
    point: list[_Point]


def data_folder(name: Literal["calibration", "demo_clips"]) -> Path:
    """The folder `name`: the copy inside the installed package, else the checkout's.

    Raises
    ------
    UsageError
        If neither is there.
    """
    package = Path(vidkin.__file__).resolve().parent
    for folder in (package / "_data" / name, package.parent / name):
        if folder.is_dir():
            return folder
    raise UsageError(
        f"The data folder '{name}' is missing beside {package}.", "Install vidkin again; its files are incomplete."
    )


def layout_names() -> tuple[str, ...]:
    """Names of the layouts that come with vidkin, in order."""
    return tuple(sorted(path.stem for path in (data_folder("calibration") / "layouts").glob("*.toml")))


def read_layout(name: str) -> Layout:
    """Read a layout of `calibration/layouts` by its name.

    Raises
    ------
    UsageError
        If there is no such layout or its file is not as it should be.
    """
    names = layout_names()
    if name not in names:
        near = difflib.get_close_matches(name, names, 1)
        raise UsageError(
            f"There is no layout '{name}'." + (f" Did you mean '{near[0]}'?" if near else ""),
            f"Known layouts: {', '.join(names)}.",
        )
    path = data_folder("calibration") / "layouts" / f"{name}.toml"
    try:
        file = _File.model_validate(tomllib.loads(path.read_text(encoding="utf-8")))
        sources = {source.id: source for source in file.source}
        points = {
            p.name: LayoutPoint(
                name=p.name,
                xyz_m=np.array([p.x_m, p.y_m, p.z_m]),
                sd_m=p.sd_m,
                source=sources[p.source].text,
                source_mark=sources[p.source].mark,
            )
            for p in file.point
        }
        if len(points) < len(file.point):
            raise ValueError("two points have the same name")
    except (OSError, ValidationError, ValueError, KeyError) as error:
        raise UsageError(f"{path}: this layout cannot be read: {error}.", "See calibration/README.md.") from error
    return Layout(
        name=name, title=file.title, origin=file.origin, caution=file.caution, points=MappingProxyType(points)
    )


def find_point(layout: Layout, name: str) -> LayoutPoint:
    """A layout's point by name.

    Raises
    ------
    UsageError
        If it has no such point.
    """
    if name not in layout.points:
        near = difflib.get_close_matches(name, layout.points, 3, 0.4)
        raise UsageError(
            f"Layout '{layout.name}' has no point '{name}'." + (f" Near: {', '.join(near)}." if near else ""),
            f"Its points: {', '.join(layout.points)}.",
        )
    return layout.points[name]
