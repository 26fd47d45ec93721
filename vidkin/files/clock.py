"""From stored time stamps to true time: the stored rate, slow motion, gaps, and what to say about them."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

from vidkin.errors import UsageError
from vidkin.notices import Notice, notice
from vidkin.stages import Array

#: Capture and stored rates closer than this are the same: real time [-].
_SAME_RATE: Final = 0.01
#: A phone's tag is believed to mean slow motion from this ratio on; below it, dim light has slowed the camera [-].
_LEAST_TAGGED_FACTOR: Final = 1.5
#: Phones stretch time by whole numbers; a ratio this near to one is that number [-].
_WHOLE_FACTOR: Final = 0.015
#: Intervals outside these multiples of the median count as uneven [-].
_UNEVEN: Final = (0.5, 1.5)
#: A clock tick above this share of the frame interval is coarse [-].
_COARSE_TICK: Final = 0.05
_CAPTURE_FPS_RANGE: Final = (1.0, 100_000.0)
#: Bytes at the end of a file in which some phones keep a record of slow-motion stretches.
_TAIL_BYTES: Final = 1 << 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Slowness:
    """`factor` is capture rate / stored rate, 1 for real time; `notices` say where it came from."""

    factor: float
    notices: tuple[Notice, ...] = ()


def check_capture_fps(capture_fps: float | None) -> None:
    """Raise UsageError for a capture rate that no camera has."""
    low, high = _CAPTURE_FPS_RANGE
    if capture_fps is not None and not (math.isfinite(capture_fps) and low <= capture_fps <= high):
        raise UsageError(
            f"capture_fps = {capture_fps:g} is no capture rate: {low:g} to {high:g} pictures per second are allowed.",
            "Give the rate at which the phone filmed, for example 240, or leave the key out.",
        )


def stored_rate_hz(t_s: Array) -> float:
    """Pictures per second as stored, from rising stamps (N,) [s], N >= 2.

    The mean of those intervals that lie near the median: gaps do not count, and stamps rounded to a coarse tick
    (33, 33, 34 ms) give 30 rather than the median's 30.3.
    """
    intervals = np.diff(t_s)
    middle = float(np.median(intervals))
    near = intervals[np.abs(intervals - middle) <= 0.25 * middle]
    return 1.0 / (float(near.mean()) if near.size else middle)


def capture_tag(metadata: Mapping[str, str]) -> str | None:
    """The phone's own capture-rate tag, if the container has one."""
    found = [value for key, value in metadata.items() if key.lower().endswith("capture.fps")]
    return found[0] if found else None


def slow_record(path: Path) -> str | None:
    """Name of a slow-motion record that some phones append to the file, or None."""
    with path.open("rb") as file:
        file.seek(max(0, path.stat().st_size - _TAIL_BYTES))
        tail = file.read()
    if not tail.endswith(b"SEFT"):
        return None
    return next((name for name in ("Super_SlowMotion", "SlowMotion_Data") if name.encode() in tail), None)


def slowness(stored_hz: float, *, capture_fps: float | None, tag: str | None, record: str | None) -> Slowness:
    """Slow-motion factor from what the user says, else from the phone's tag, else 1.

    Raises
    ------
    UsageError
        If the user's capture rate lies below the rate of the stored pictures.
    """
    if capture_fps is not None:
        return _stated(stored_hz, capture_fps)
    result = Slowness(factor=1.0) if tag is None else _tagged(stored_hz, tag)
    if record is not None and (record.startswith("Super") or tag is None):
        return Slowness(factor=result.factor, notices=(*result.notices, notice("slow_motion_unknown", record=record)))
    return result


def _stated(stored_hz: float, capture_fps: float) -> Slowness:
    factor = capture_fps / stored_hz
    if abs(factor - 1) <= _SAME_RATE:
        return Slowness(factor=1.0)
    if factor < 1:
        raise UsageError(
            f"capture_fps = {capture_fps:g} is below the {stored_hz:.2f} pictures per second stored in the clip: "
            "a phone cannot store pictures that it did not take.",
            "Give the rate at which the phone filmed, or leave the key out for a clip in real time.",
        )
    notices = [notice("slow_motion", source="as stated", capture=capture_fps, stored=stored_hz, factor=factor)]
    whole = round(factor)
    if 1e-4 < abs(factor / whole - 1) <= _WHOLE_FACTOR:
        notices.append(notice("slow_factor_not_whole", factor=factor, whole=whole, capture=whole * stored_hz))
    return Slowness(factor=factor, notices=tuple(notices))


def _tagged(stored_hz: float, tag: str) -> Slowness:
    try:
        capture = float(tag)
        check_capture_fps(capture)
    except (ValueError, UsageError):
        return Slowness(factor=1.0, notices=(notice("capture_tag_ignored", tag=tag, stored=stored_hz),))
    factor = capture / stored_hz
    if abs(factor - 1) <= _SAME_RATE:
        return Slowness(factor=1.0)
    if factor < _LEAST_TAGGED_FACTOR:
        return Slowness(factor=1.0, notices=(notice("capture_tag_ignored", tag=tag, stored=stored_hz),))
    whole = round(factor)
    factor = float(whole) if abs(factor / whole - 1) <= _WHOLE_FACTOR else factor
    said = notice("slow_motion", source="by the phone's tag", capture=capture, stored=stored_hz, factor=factor)
    return Slowness(factor=factor, notices=(said,))


def evenness(t_s: Array, *, tick_s: float) -> tuple[Notice, ...]:
    """What to say about true times (N,) [s] that are uneven or rounded to a coarse tick [s]."""
    intervals = np.diff(t_s)
    usual = float(np.median(intervals))
    uneven = (intervals < _UNEVEN[0] * usual) | (intervals > _UNEVEN[1] * usual)
    said: list[Notice] = []
    if uneven.any():
        worst = int(np.argmax(intervals))
        said.append(
            notice(
                "uneven_times",
                count=int(uneven.sum()),
                total=intervals.size,
                gap_ms=1e3 * float(intervals[worst]),
                at_s=float(t_s[worst]),
                usual_ms=1e3 * usual,
            )
        )
    if tick_s > _COARSE_TICK * usual and float(np.ptp(intervals[~uneven])) > 0.5 * tick_s:
        said.append(notice("coarse_times", tick_ms=1e3 * tick_s, usual_ms=1e3 * usual, cm=1e3 * tick_s / math.sqrt(12)))
    return tuple(said)
