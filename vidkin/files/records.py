"""What goes into the files of a result: a record or table for each stage, with unit and meaning of each column."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict
from datetime import date
from pathlib import PurePath
from statistics import NormalDist
from typing import Any, Final

import numpy as np

from vidkin.stages import CAMERA_PARAMETERS, Analysis, Camera, Fit, LawFit, Mark, Motion, Quantity, Split, Steps

#: Table -> column -> (unit, meaning); the order of the columns in the CSV files.
TABLES: Final[dict[str, dict[str, tuple[str, str]]]] = {
    "motion": {
        "t_s": ("s", "clip time, real time from the first frame"),
        "x_m": ("m", "measured position of the tracked point along the lane"),
        "x_sd_m": ("m", "standard deviation of x_m, the part that is independent from frame to frame"),
        "v_mps": ("m/s", "smoothed speed (Savitzky-Golay)"),
        "v_low_mps": ("m/s", "lower end of the interval of v_mps, shared errors included"),
        "v_high_mps": ("m/s", "upper end of the interval of v_mps, shared errors included"),
        "a_mps2": ("m/s^2", "smoothed acceleration (Savitzky-Golay)"),
    },
    "splits": {
        "distance_m": ("m", "distance from the start line"),
        "time_s": ("s", "time from first movement to the centroid crossing that distance"),
        "low_s": ("s", "lower end of the interval of time_s"),
        "high_s": ("s", "upper end of the interval of time_s"),
    },
    "steps": {
        "on_s": ("s", "clip time at which the foot touches down"),
        "off_s": ("s", "clip time at which the foot leaves the ground"),
        "x_m": ("m", "position of the foot along the lane"),
    },
}


def motion_rows(motion: Motion, level: float) -> dict[str, Any]:
    """Columns of motion.csv; the speed's interval holds `level` of a normal error of sd `v_sd_mps`."""
    half = NormalDist().inv_cdf(0.5 + level / 2) * motion.v_sd_mps
    return {
        "t_s": motion.t_s,
        "x_m": motion.x_m,
        "x_sd_m": motion.x_sd_m,
        "v_mps": motion.v_mps,
        "v_low_mps": motion.v_mps - half,
        "v_high_mps": motion.v_mps + half,
        "a_mps2": motion.a_mps2,
    }


def split_rows(splits: tuple[Split, ...]) -> dict[str, Any]:
    """Columns of splits.csv."""
    return {key: [getattr(split, key) for split in splits] for key in TABLES["splits"]}


def step_rows(steps: Steps) -> dict[str, Any]:
    """Columns of steps.csv."""
    return {"on_s": steps.on_s, "off_s": steps.off_s, "x_m": steps.x_m}


def summary_record(analysis: Analysis) -> dict[str, Any]:
    """What summary.json holds beside its schema."""
    fit = analysis.fit if isinstance(analysis.fit, Fit) else None
    laws = (
        {"start": fit.start, "law": fit.law, "laws": {name: _law(law) for name, law in fit.laws.items()}} if fit else {}
    )
    return {
        "quantities": {name: _quantity(q) for name, q in fit.quantities.items()} if fit else {},
        "splits": [asdict(split) for split in fit.splits] if fit else [],
        **laws,
        "notices": [asdict(n) for n in analysis.notices],
        "failures": [asdict(f) for f in analysis.failures],
        "provenance": {"settings": asdict(analysis.settings), **analysis.provenance},
    }


def _quantity(quantity: Quantity) -> dict[str, Any]:
    """A quantity; without an interval it says why instead."""
    record: dict[str, Any] = {"value": quantity.value}
    if quantity.low is not None and quantity.high is not None:
        record |= {"low": quantity.low, "high": quantity.high, "level": quantity.level}
    else:
        record |= {"why_no_interval": quantity.why_no_interval}
    return record | {"unit": quantity.unit, "method": quantity.method}


def _law(law: LawFit) -> dict[str, Any]:
    """A fitted law without its curves; a standard deviation that could not be had is left out."""
    return {
        "words": law.words,
        "parameters": law.parameters,
        "sd": {name: sd for name, sd in law.sd.items() if math.isfinite(sd)},
        "criterion": law.criterion,
        "weight": law.weight,
    }


def camera_record(camera: Camera) -> dict[str, Any]:
    """What camera.json holds: parameters with sd and covariance, field of view, and the marks with their errors."""
    return {
        "schema": "vidkin-camera-1",
        "width_px": camera.width_px,
        "height_px": camera.height_px,
        "parameters": dict(zip(CAMERA_PARAMETERS, camera.parameters, strict=True)),
        "sd": dict(zip(CAMERA_PARAMETERS, np.sqrt(np.diag(camera.cov)), strict=True)),
        "cov": camera.cov,
        "hfov_deg": camera.hfov_deg,
        "scale_sd": camera.scale_sd,
        "x_sd_m": [{"x_m": x, "sd_m": sd} for x, sd in camera.x_sd_m],
        "marks": [_mark(mark, camera, i) for i, mark in enumerate(camera.marks)],
    }


def _mark(mark: Mark, camera: Camera, index: int) -> dict[str, Any]:
    return {
        "label": mark.label,
        "xyz_m": mark.xyz_m,
        "uv_px": mark.uv_px,
        "sd_px": mark.sd_px,
        "sd_m": mark.sd_m,
        "model_uv_px": camera.mark_uv_px[index],
        "error_px": camera.mark_error_px[index],
        "error_m": camera.mark_error_m[index],
    }


def plain(value: Any, place: str = "") -> Any:
    """The same value made of what JSON knows.

    Raises
    ------
    ValueError
        At a number that is not finite, naming its place.
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item, f"{place}.{key}".lstrip(".")) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist(), place)
    if isinstance(value, np.generic):
        return plain(value.item(), place)
    if isinstance(value, list | tuple):
        return [plain(item, f"{place}[{i}]") for i, item in enumerate(value)]
    if isinstance(value, float) and not math.isfinite(value):
        raise ValueError(f"{place} is {value}, which no result may hold")
    if isinstance(value, PurePath):
        return str(value)
    if isinstance(value, date):
        return value.isoformat()
    return value
