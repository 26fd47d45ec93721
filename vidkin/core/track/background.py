"""The static background of a fixed camera, learnt from frames spread over the clip, and its noise."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Final, TypeAlias

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.stages import Frame

Planes: TypeAlias = tuple[NDArray[np.uint8], NDArray[np.uint8], NDArray[np.uint8]]
Singles: TypeAlias = NDArray[np.float32]

_KEEP: Final = 48
_BYTES: Final = 120_000_000
#: Least noise [grey levels]: rounding and what compression leaves standing.
_LEAST_NOISE: Final = 0.8
_ROWS_AT_ONCE: Final = 32
_NOISE_PAIRS: Final = 12
_DRIFT_PIXELS: Final = 1500
_STIRRED_LEVELS: Final = 8.0
_STIRRED_TIME: Final = 0.35
#: The majority is overruled only where its outline stands out by this factor.
_CLEARLY: Final = 1.25
_TEXTURE_PX: Final = 0.25


class Sampler:
    """Keeps frames spread evenly over a clip of unknown length: every k-th, k doubling when the store is full.

    `rows` is the slice of picture rows worth keeping (even start).
    """

    def __init__(self, rows: slice) -> None:
        self._rows = rows
        self._every = 1
        self._seen = 0
        self._most = _KEEP
        self.samples: list[tuple[int, Planes]] = []

    def add(self, frame: Frame) -> None:
        """Offer the next frame."""
        if self._seen % self._every == 0:
            planes = cut(frame, self._rows)
            if not self.samples:
                size = sum(p.nbytes for p in planes)
                self._most = max(12, min(_KEEP, _BYTES // max(size, 1)))
            self.samples.append((frame.index, tuple(p.copy() for p in planes)))  # type: ignore[arg-type]
            if len(self.samples) > self._most:
                self.samples = self.samples[::2]
                self._every *= 2
        self._seen += 1


def cut(frame: Frame, rows: slice) -> Planes:
    """Luma and chroma rows of the corridor. Chroma is brought to half of luma's size if it is not."""
    luma = frame.luma[rows]
    half = (luma.shape[1] // 2 + luma.shape[1] % 2, luma.shape[0] // 2 + luma.shape[0] % 2)
    step_v = max(1, round(frame.luma.shape[0] / max(frame.chroma_u.shape[0], 1)))
    chroma = []
    for plane in (frame.chroma_u, frame.chroma_v):
        part = plane[rows.start // step_v : -(-rows.stop // step_v)]
        if (part.shape[1], part.shape[0]) != half:
            part = np.asarray(cv2.resize(part, half, interpolation=cv2.INTER_AREA), dtype=np.uint8)
        chroma.append(part)
    return luma, chroma[0], chroma[1]


@dataclass(frozen=True, slots=True)
class Background:
    """Median planes and noise sd planes [grey levels] of the corridor's rows; luma, U, V.

    `moving_share`: share of textured pixels that change much of the time (a moving camera).
    """

    rows: slice
    planes: tuple[Singles, Singles, Singles]
    noise: tuple[Singles, Singles, Singles]
    moving_share: float


@functools.lru_cache(maxsize=64)
def _sorting_network(count: int) -> tuple[tuple[int, int], ...]:
    """Comparator pairs that sort `count` values (Batcher's odd-even merge sort; Knuth, vol. 3, 5.2.2 M)."""
    pairs: list[tuple[int, int]] = []
    p = 1
    while p < count:
        k = p
        while k >= 1:
            for j in range(k % p, count - k, 2 * k):
                pairs.extend(
                    (i + j, i + j + k)
                    for i in range(min(k, count - j - k))
                    if (i + j) // (2 * p) == (i + j + k) // (2 * p)
                )
            k //= 2
        p *= 2
    return tuple(pairs)


def _median(stack: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Upper median over the first axis by whole-row minimum and maximum: far faster than sorting each pixel."""
    count = stack.shape[0]
    out = np.empty(stack.shape[1:], dtype=np.uint8)
    for start in range(0, stack.shape[1], _ROWS_AT_ONCE):
        rows = [stack[i, start : start + _ROWS_AT_ONCE].copy() for i in range(count)]
        spare = np.empty_like(rows[0])
        for i, j in _sorting_network(count):
            np.minimum(rows[i], rows[j], out=spare)
            np.maximum(rows[i], rows[j], out=rows[j])
            rows[i], spare = spare, rows[i]
        out[start : start + _ROWS_AT_ONCE] = rows[count // 2]
    return out


def _noise(stack: NDArray[np.uint8], median: Singles) -> Singles:
    """What may differ without anything having moved [grey levels]: noise, and texture re-encoded a little off.

    The noise comes from neighbouring samples: robust, blind to slow drift, smoothed over the neighbourhood. A
    quarter pixel of the background's own gradient is added: compression and faint shake move texture by that.
    """
    some = np.linspace(0, stack.shape[0] - 2, min(_NOISE_PAIRS, stack.shape[0] - 1)).astype(int)
    steps = np.stack([cv2.absdiff(stack[i + 1], stack[i]) for i in some]).astype(np.uint8)
    # A mean of small steps instead of their median: whole grey levels make a median coarse. Steps larger
    # than three times the typical one belong to something that moved.
    limit = 3 * np.maximum(_median(steps), 1)
    total = np.zeros(median.shape, np.float32)
    for step in steps:
        total += np.minimum(step, limit)
    sd = cv2.blur(total / np.float32(len(steps) * 2 / np.sqrt(np.pi)), (9, 9))
    gx, gy = cv2.Sobel(median, cv2.CV_32F, 1, 0, scale=0.125), cv2.Sobel(median, cv2.CV_32F, 0, 1, scale=0.125)
    texture = cv2.blur(np.hypot(gx, gy), (3, 3)) * np.float32(_TEXTURE_PX)
    return np.asarray(np.hypot(np.maximum(sd, np.float32(_LEAST_NOISE)), texture), dtype=np.float32)


def learn(samples: list[tuple[int, Planes]], rows: slice) -> Background:
    """Background from a sampler's frames (at least three).

    A runner who stands still for much of the clip (in the set position, or after the run) would be learnt as
    background; where the clip's beginning and end disagree for good, the candidate whose outline does NOT stand
    out from its surroundings is taken.
    """
    planes, noise = [], []
    stacks = [np.stack([s[1][i] for s in samples]) for i in range(3)]
    for i, stack in enumerate(stacks):
        planes.append(_median(stack).astype(np.float32))
        noise.append(_noise(stack, planes[i]))
    _settle(stacks, planes, noise[0])
    return Background(
        rows, (planes[0], planes[1], planes[2]), (noise[0], noise[1], noise[2]), _moving_share(stacks[0], planes[0])
    )


def _moving_share(stack: NDArray[np.uint8], median: Singles) -> float:
    """Share of textured pixels that differ from their median in much of the clip: large for a moving camera.

    Against a fixed step, not the noise: under a pan the noise estimate itself is made of the pan.
    """
    far = np.mean(np.abs(stack[:, ::4, ::4].astype(np.float32) - median[::4, ::4]) > _STIRRED_LEVELS, axis=0)
    smooth = cv2.GaussianBlur(stack[0].astype(np.float32), (0, 0), 2)
    edge = np.hypot(cv2.Sobel(smooth, cv2.CV_32F, 1, 0), cv2.Sobel(smooth, cv2.CV_32F, 0, 1))[::4, ::4]
    textured = edge >= np.quantile(edge, 0.7)
    return float(np.mean(far[textured] > _STIRRED_TIME))


def _settle(stacks: list[NDArray[np.uint8]], planes: list[Singles], noise: Singles) -> None:
    """Decide, patch by patch, between the first and the last samples where they disagree for good."""
    count = stacks[0].shape[0]
    part = max(3, count // 6)
    first, last = (_median(stacks[0][s]).astype(np.float32) for s in (slice(0, part), slice(count - part, count)))
    apart = (np.abs(cv2.blur(first - last, (3, 3))) > 4 * noise + 4).astype(np.uint8)
    apart = cv2.morphologyEx(apart, cv2.MORPH_CLOSE, np.ones((7, 7), np.uint8)).astype(np.uint8)
    labels_count, labels, stats, _ = cv2.connectedComponentsWithStats(apart, connectivity=8)
    for label in range(1, labels_count):
        x, y, w, h, area = (int(s) for s in stats[label])
        if area < 60:
            continue
        pad = 3
        box = (slice(max(0, y - pad), y + h + pad), slice(max(0, x - pad), x + w + pad))
        blob = (labels[box] == label).astype(np.uint8)
        wide = cv2.dilate(blob, np.ones((5, 5), np.uint8)).astype(np.uint8)
        rim = wide - cv2.erode(blob, np.ones((3, 3), np.uint8)).astype(np.uint8)
        begin, end, now = (_edge_strength(c[box], rim) for c in (first, last, planes[0]))
        if min(begin, end) * _CLEARLY > now:
            continue
        part_slice = slice(0, part) if begin < end else slice(count - part, count)
        inside = cv2.dilate(blob, np.ones((7, 7), np.uint8)) > 0
        _paste(planes[0], box, inside, _median(stacks[0][(part_slice, *box)]).astype(np.float32))
        half = tuple(slice(s.start // 2, -(-s.stop // 2)) for s in box)
        for i in (1, 2):
            patch = _median(stacks[i][(part_slice, *half)]).astype(np.float32)
            small = cv2.resize(inside.astype(np.uint8), patch.shape[::-1], interpolation=cv2.INTER_NEAREST) > 0
            _paste(planes[i], half, small, patch)


def _paste(plane: Singles, box: tuple[slice, ...], inside: NDArray[np.bool_], patch: Singles) -> None:
    target = plane[box]
    target[inside] = patch[inside]


def _edge_strength(picture: Singles, rim: NDArray[np.uint8]) -> float:
    """Mean gradient along a patch's outline [grey levels per px]."""
    gx, gy = cv2.Sobel(picture, cv2.CV_32F, 1, 0), cv2.Sobel(picture, cv2.CV_32F, 0, 1)
    size = np.hypot(gx, gy)
    return float(size[rim > 0].mean()) if np.any(rim) else 0.0


def drift(small: Singles, small_background: Singles) -> tuple[float, float]:
    """Gain and offset that bring the background to a frame's exposure: a robust line through grey levels."""
    stride = max(1, small.size // _DRIFT_PIXELS)
    b, y = small_background.ravel()[::stride], small.ravel()[::stride]
    keep = np.ones(b.size, dtype=bool)
    gain, offset = 1.0, 0.0
    for _ in range(3):
        bk, yk = b[keep], y[keep]
        if bk.size < 50 or float(np.ptp(bk)) < 8:
            return 1.0, float(np.median(y - b))
        centred = bk - bk.mean()
        gain = float(centred @ yk / (centred @ centred))
        offset = float(yk.mean() - gain * bk.mean())
        miss = np.abs(y - gain * b - offset)
        keep = miss <= max(2.0, 2.5 * float(np.median(miss)))
    return (gain, offset) if 0.7 < gain < 1.4 else (1.0, float(np.median(y - b)))
