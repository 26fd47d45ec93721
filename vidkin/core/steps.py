"""Foot contacts from the silhouette's ground-near runs: cadence, step length, lateral position."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from scipy.signal import lombscargle

from vidkin.core import optics
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Array, Bools, Camera, Lane, Steps, Track

#: Step rates of walking to all-out sprinting [Hz] (references: 4-6 at top speed; walking about 1.8).
_RATES_HZ: Final = (1.2, 6.0)
_BIN_M: Final = 0.02
_SAME_FOOT_M: Final = 0.35
_AT_REST_MPS: Final = 0.5
#: A runner is within the lane; without better knowledge this sd about its centre [m].
LANE_SD_M: Final = 0.15
#: What the lowest row of a silhouette is worth [px]: outline, blur and sole thickness are the same in all frames.
_ROW_SD_PX: Final = 1.2
#: The ground plane itself, as the marks define it [m].
_GROUND_SD_M: Final = 0.02
_LEAST_CYCLES: Final = 2.0


def find_steps(track: Track, camera: Camera, lane: Lane) -> Steps | Failure:
    """Contacts, cadence and the runner's y.

    Parameters
    ----------
    track : Track
    camera : Camera
    lane : Lane

    Returns
    -------
    Steps or Failure
        A Failure where no step rhythm can be seen.
    """
    size = (camera.width_px, camera.height_px)
    whole = track.whole
    t = track.t_s[whole]
    x = optics.to_plane(camera.parameters, track.uv_px[whole], size, axis=1, value_m=lane.centre_y_m)[:, 0]
    moving = _moving(x)
    rate = cadence(t[moving], track.spread_px[whole][moving])
    if rate is None:
        return failure("no_step_rhythm", seconds=float(np.ptp(t[moving])) if np.any(moving) else 0.0)
    rate_hz, rate_sd = rate
    contacts = _contacts(track, camera, lane, rate_hz)
    if np.polyfit(t[:6] - t[0], x[:6], 1)[0] < _AT_REST_MPS:
        # The feet of the set position are no steps.
        contacts = [c for c in contacts if c.on_s > t[moving][0] - 0.5 / rate_hz]
    remarks: list[Notice] = []
    if len(contacts) >= 3:
        rate_hz, rate_sd = _rate_of(contacts, (float(t[0]), float(t[-1])), (rate_hz, rate_sd))
    if len(contacts) < 0.5 * rate_hz * float(np.ptp(t[moving])):
        remarks.append(
            notice("contacts_missed", found=len(contacts), expected=round(rate_hz * float(np.ptp(t[moving]))))
        )
    lateral, lateral_sd, source = _lateral(contacts, camera, lane)
    if abs(lateral - lane.centre_y_m) > 0.25:
        remarks.append(notice("off_centre", cm=100 * (lateral - lane.centre_y_m), sd_cm=100 * lateral_sd))
    return Steps(
        on_s=np.array([c.on_s for c in contacts]),
        off_s=np.array([c.off_s for c in contacts]),
        x_m=np.array([c.x_m for c in contacts]),
        step_rate_hz=rate_hz,
        step_rate_sd_hz=rate_sd,
        lateral_m=lateral,
        lateral_sd_m=lateral_sd,
        lateral_source="feet" if source else "lane centre",
        notices=tuple(remarks),
    )


def _moving(x: Array) -> Bools:
    """Rows from the first movement on: past 3 % of the way."""
    way = (x - x[0]) / max(float(x[-1] - x[0]), 1e-9)
    return np.asarray(way > 0.03)


def cadence(t_s: Array, spread: Array) -> tuple[float, float] | None:
    """Step rate and its sd [Hz] from the spread of the legs, which opens and closes once a step.

    Lomb-Scargle periodogram of the spread less its moving mean (Lomb 1976, Scargle 1982; from memory), its peak
    refined by a parabola; sd from the noise about it. None: no clear peak.
    """
    if t_s.size < 16 or np.ptp(t_s) * _RATES_HZ[0] < 1.0:
        return None
    span = float(np.ptp(t_s))
    smooth = np.array([spread[np.abs(t_s - ti) < 0.4].mean() for ti in t_s])
    y = spread / np.maximum(smooth, 1e-9) - 1.0
    y = (y - y.mean()) * np.hanning(y.size + 2)[1:-1]
    rates = np.arange(_RATES_HZ[0], _RATES_HZ[1], 0.02 / max(span, 0.5))
    power = np.asarray(lombscargle(t_s, y, 2 * np.pi * rates))
    best = int(np.argmax(power))
    if not 0 < best < rates.size - 1 or rates[best] * span < _LEAST_CYCLES:
        return None
    if power[best] < 6 * float(np.median(power)) or power[best] * 4 / y.size < 0.25 * float(np.var(y)):
        return None
    a, b, c = power[best - 1 : best + 2]
    shift = 0.5 * (a - c) / (a - 2 * b + c) if a - 2 * b + c != 0 else 0.0
    rate = float(rates[best] + shift * (rates[1] - rates[0]))
    return rate, _rate_sd(t_s, spread / np.maximum(smooth, 1e-9) - 1.0, rate)


def _rate_sd(t_s: Array, y: Array, rate_hz: float) -> float:
    """Sd of a sinusoid's frequency in noise [Hz]: sqrt(24 s^2/(A^2 N))/(2 pi T).

    Rife & Boorstyn, IEEE Trans. Inf. Theory 20 (1974) 591 (from memory); doubled, since neighbouring frames err
    alike, and never below 0.03/T.
    """
    basis = np.column_stack([np.cos(2 * np.pi * rate_hz * t_s), np.sin(2 * np.pi * rate_hz * t_s), np.ones_like(t_s)])
    found = np.linalg.lstsq(basis, y, rcond=None)[0]
    span, size = float(np.ptp(t_s)), float(np.hypot(found[0], found[1]))
    noise = float(np.std(y - basis @ found))
    bound = 2 * np.sqrt(24 / t_s.size) * noise / max(size, 1e-9) / (2 * np.pi * span)
    return float(np.hypot(bound, 0.03 / span))


@dataclass(frozen=True, slots=True)
class _Contact:
    on_s: float
    off_s: float
    x_m: float
    u_px: float
    v_px: float


def _contacts(track: Track, camera: Camera, lane: Lane, rate_hz: float) -> list[_Contact]:
    """Stationary ground-near runs. A stance foot covers the same metre for a contact; a swing foot rushes by."""
    if track.low_t_s.size == 0:
        return []
    size = (camera.width_px, camera.height_px)
    t, low = track.low_t_s, track.low_uv_px
    ends = [
        optics.to_plane(
            camera.parameters, np.column_stack([low[:, i], low[:, 2] + 0.5]), size, axis=1, value_m=lane.centre_y_m
        )
        for i in (0, 1)
    ]
    left, right = np.minimum(ends[0][:, 0], ends[1][:, 0]), np.maximum(ends[0][:, 0], ends[1][:, 0])
    height = 0.5 * (ends[0][:, 2] + ends[1][:, 2])
    ok = np.isfinite(left + right + height) & (right - left < 0.6)
    if np.count_nonzero(ok) < 4:
        return []
    # A foot on the ground is as low as any; the level is learnt, for the runner's y is not known yet.
    level = float(np.quantile(height[ok], 0.25))
    ok &= height < level + 0.06
    t, left, right, low = t[ok], left[ok], right[ok], low[ok]
    times = np.unique(t)
    if times.size < 8:
        return []
    dt = float(np.median(np.diff(times)))
    origin = float(left.min())
    grid = np.zeros((times.size, int((right.max() - origin) / _BIN_M) + 2), bool)
    row_of = np.searchsorted(times, t)
    for r, a, b in zip(row_of, left, right, strict=True):
        grid[r, int((a - origin) / _BIN_M) : int((b - origin) / _BIN_M) + 1] = True
    least = max(0.22 / rate_hz, 2.5 * dt)
    pieces: list[tuple[float, float, float]] = []
    for column in range(grid.shape[1]):
        on = np.flatnonzero(grid[:, column])
        if on.size < 2:
            continue
        x = origin + (column + 0.5) * _BIN_M
        held = np.split(on, np.flatnonzero(np.diff(times[on]) > max(0.02, 2.5 * dt)) + 1)
        spans = [(float(times[part[0]]), float(times[part[-1]]) + dt) for part in held]
        pieces.extend((a, b, x) for a, b in spans if b - a >= least)
    return _grouped(pieces, (t, left, right, low), rate_hz)


def _grouped(
    pieces: list[tuple[float, float, float]], runs: tuple[Array, Array, Array, Array], rate_hz: float
) -> list[_Contact]:
    """Join neighbouring columns that were covered at the same time into one contact each."""
    t, left, right, low = runs
    groups: list[list[tuple[float, float, float]]] = []
    for piece in sorted(pieces, key=lambda p: p[2]):
        for group in groups:
            on, off, x = group[-1]
            if piece[2] - x < 2.5 * _BIN_M and min(off, piece[1]) - max(on, piece[0]) > 0:
                group.append(piece)
                break
        else:
            groups.append([piece])
    contacts = []
    for group in groups:
        if len(group) * _BIN_M < 0.05:
            continue
        columns = np.array(group)
        # The median column: heel and toe leave and meet the ground band at other times than the ball of the foot.
        on, off = float(np.median(columns[:, 0])), float(np.median(columns[:, 1]))
        weight = columns[:, 1] - columns[:, 0]
        x = float(np.average(columns[:, 2], weights=weight))
        held = (t > on + 0.2 * (off - on)) & (t < off - 0.2 * (off - on)) & (left < x + 0.1) & (right > x - 0.1)
        if np.any(held):
            u, v = float(np.median(low[held, :2].mean(axis=1))), float(np.median(low[held, 2]))
            contacts.append(_Contact(on, off, x, u, v))
    contacts.sort(key=lambda c: c.on_s)
    kept: list[_Contact] = []
    for c in contacts:
        last = kept[-1] if kept else None
        if last and abs(c.x_m - last.x_m) < _SAME_FOOT_M and c.on_s - last.off_s < 0.3 / rate_hz:
            # Heel and toe of one foot, or a contact broken by noise.
            kept[-1] = replace(
                last if last.off_s - last.on_s > c.off_s - c.on_s else c, on_s=last.on_s, off_s=max(c.off_s, last.off_s)
            )
        elif last and c.on_s - last.on_s < 0.55 / rate_hz:
            # Two feet cannot follow one another this fast: the longer contact is the foot.
            if c.off_s - c.on_s > last.off_s - last.on_s:
                kept[-1] = c
        else:
            kept.append(c)
    return kept


def _rate_of(contacts: list[_Contact], seen: tuple[float, float], spectral: tuple[float, float]) -> tuple[float, float]:
    """Step rate from touch-downs and toe-offs, missed steps bridged; the spectral rate where they are too ragged.

    Events at the ends of what was `seen` (first, last time) are the picture's, not the foot's, and are left out.
    """
    middle = np.array([0.5 * (c.on_s + c.off_s) for c in contacts])
    count = np.concatenate([[0.0], np.cumsum(np.maximum(np.round(np.diff(middle) * spectral[0]), 1.0))])
    on, off = np.array([c.on_s for c in contacts]), np.array([c.off_s for c in contacts])
    margin = 0.1 / spectral[0]
    events = [(n, 0, t) for n, t in zip(count, on, strict=True) if t > seen[0] + margin]
    events += [(n, 1, t) for n, t in zip(count, off, strict=True) if t < seen[1] - margin]
    if len(events) < 5:
        return spectral
    number, kind, when = (np.array(column, dtype=np.float64) for column in zip(*events, strict=True))
    design = np.column_stack([number, 1 - kind, kind])
    c, _, rank, _ = np.linalg.lstsq(design, when, rcond=None)
    if rank < 3 or c[0] <= 0 or abs(1 / c[0] - spectral[0]) > 0.15 * spectral[0]:
        return spectral
    scatter = float(np.sqrt(np.sum((when - design @ c) ** 2) / max(when.size - 3, 1)))
    sd_period = scatter * float(np.sqrt(np.linalg.inv(design.T @ design)[0, 0]))
    return float(1 / c[0]), float(np.hypot(sd_period / c[0] ** 2, 0.005 / c[0]))


def _lateral(contacts: list[_Contact], camera: Camera, lane: Lane) -> tuple[float, float, bool]:
    """The runner's y and its sd [m]: feet through the ground plane, weighed against the lane's centre."""
    prior = lane.centre_y_m, LANE_SD_M
    if len(contacts) < 3:
        return *prior, False
    size = (camera.width_px, camera.height_px)
    # Half a pixel of edge and one of blur: what is left of the outline's rim lies below the sole.
    soles = np.array([[c.u_px, c.v_px - 0.5] for c in contacts])
    y = optics.to_plane(camera.parameters, soles, size, axis=2, value_m=0.0)[:, 1]
    lower = optics.to_plane(camera.parameters, soles + np.array([0.0, 1.0]), size, axis=2, value_m=0.0)[:, 1]
    good = np.isfinite(y) & np.isfinite(lower)
    if np.count_nonzero(good) < 3:
        return *prior, False
    per_row = float(np.median(np.abs(lower - y)[good]))
    # Not divided by the root of the count: what scatters from step to step (a dark shoe lost on dark ground) is also
    # wrong on average.
    scatter = 1.4826 * float(np.median(np.abs(y[good] - np.median(y[good]))))
    seen, seen_sd = (
        float(np.median(y[good])),
        float(np.sqrt((_ROW_SD_PX * per_row) ** 2 + scatter**2 + _GROUND_SD_M**2)),
    )
    weight = prior[1] ** 2 / (prior[1] ** 2 + seen_sd**2)
    return prior[0] + weight * (seen - prior[0]), float(prior[1] * np.sqrt(1 - weight)), weight > 0.1
