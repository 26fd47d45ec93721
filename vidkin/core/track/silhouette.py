"""One frame -> the moving bodies in the corridor: mask, tracked point, extent, ground-near runs."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import cv2
import numpy as np
from numpy.typing import NDArray

from vidkin.core.track.background import Background, Planes, Singles, drift
from vidkin.core.track.corridor import Corridor
from vidkin.stages import Array

#: A runner should be about this many coarse pixels high: enough to find, cheap to search.
_COARSE_PX: Final = 56
#: Least size of a body [m], [m^2]; a crouched adult is about 1 m high and 0.4 m^2.
_LEAST_HEIGHT_M: Final = 0.5
_LEAST_AREA_M2: Final = 0.10
_COARSE_LEVEL: Final = 4.0
_HIGH: Final = 5.5
_LOW: Final = 3.0
#: What compression may leave behind anywhere [grey levels].
_FLOOR: Final = 1.8
#: Ground-near band [m] in which feet, and shadows, are looked for.
_FOOT_BAND_M: Final = 0.10
_SHADOW_BAND_M: Final = 0.45
_SHADOW_RATIO: Final = (0.25, 0.985)
_DEEPEST_M: Final = 0.12
_SHOE_M: Final = 0.38
_SHOE_GAP_M: Final = 0.12
_FEET_CUT_M: Final = 0.03
#: Width of the rim that blur and compression add to a silhouette [px].
_RIM_PX: Final = 2
#: Differences above this are body even beside a stronger one.
_SURE: Final = 9.0
_LEG_BAND: Final = 0.45


@dataclass(frozen=True, slots=True)
class Body:
    """One blob in one frame. Pixels are picture pixels.

    `uv` (2,) volume-weighted centroid, `uv_area` (2,) plain area centroid, `box` left, top, right, bottom,
    `area` [px^2], `spread` horizontal spread of the legs [px], `lows` (L, 3) ground-near runs (left, right, row),
    `cut` True where the picture's edge cuts the body.
    """

    uv: Array
    uv_area: Array
    box: Array
    area: float
    spread: float
    lows: Array
    cut: bool


def _trimmed(mask: NDArray[np.uint8], score: Singles) -> NDArray[np.uint8]:
    """Move the outline to where the difference has risen half-way: a low threshold alone lies outside the body.

    Only a thin rim is judged, so weak contrast inside the body is safe.
    """
    inner = cv2.erode(mask, np.ones((2 * _RIM_PX + 1, 2 * _RIM_PX + 1), np.uint8))
    size = np.sqrt(score)
    around = cv2.dilate(size * mask, np.ones((2 * _RIM_PX + 1, 2 * _RIM_PX + 1), np.uint8))
    weak = (size < np.minimum(0.4 * around, _SURE)) & (inner == 0)
    return np.where(weak, 0, mask).astype(np.uint8)


class Finder:
    """Finds bodies in frames of one clip. Holds the background at two sizes; has no other memory."""

    def __init__(self, corridor: Corridor, background: Background) -> None:
        self.corridor, self.background = corridor, background
        self.step = max(1, round(corridor.scale_px_m * 1.7 / _COARSE_PX))
        luma = background.planes[0]
        self._small_size = (max(8, luma.shape[1] // self.step), max(4, luma.shape[0] // self.step))
        self._small = [self._shrink(p) for p in background.planes]
        # Averaging step x step pixels lowers white noise by step; compression noise falls more slowly.
        self._small_noise = [np.maximum(self._shrink(s) / np.sqrt(self.step), 0.8) for s in background.noise]

    def _shrink(self, plane: Singles | NDArray[np.uint8]) -> Singles:
        return np.asarray(cv2.resize(plane, self._small_size, interpolation=cv2.INTER_AREA), dtype=np.float32)

    def bodies(self, planes: Planes) -> list[Body]:
        """All bodies of runner size in the corridor."""
        small = [self._shrink(p) for p in planes]
        gain, offset = drift(small[0], self._small[0])
        score = np.zeros(self._small_size[::-1], np.float32)
        for i, (plane, back, noise) in enumerate(zip(small, self._small, self._small_noise, strict=True)):
            expected = gain * back + offset if i == 0 else back
            score += ((plane - expected) / (noise + _FLOOR / 2)) ** 2
        mask = (score > _COARSE_LEVEL**2).astype(np.uint8)
        scale = self.corridor.scale_px_m / self.step
        reach = max(3, round(0.12 * scale) | 1)
        mask = cv2.morphologyEx(mask, cv2.MORPH_CLOSE, np.ones((reach, reach), np.uint8)).astype(np.uint8)
        count, labels, stats, _ = cv2.connectedComponentsWithStats(mask, connectivity=8)
        found = []
        for label in range(1, count):
            x, y, w, h, area = (int(s) for s in stats[label])
            if h < 0.8 * _LEAST_HEIGHT_M * scale or area < 0.6 * _LEAST_AREA_M2 * scale**2:
                continue
            blob = (labels == label).astype(np.uint8)
            near = cv2.dilate(blob, np.ones((reach, reach), np.uint8)).astype(np.uint8)
            body = self._refine(planes, near, (x, y, w, h), (gain, offset))
            if body is not None:
                found.append(body)
        return found

    def _window(self, box: tuple[int, int, int, int]) -> tuple[slice, slice]:
        """Full-size rows and columns (within the corridor's rows) around a coarse box, even starts."""
        x, y, w, h = box
        sx = self.background.planes[0].shape[1] / self._small_size[0]
        sy = self.background.planes[0].shape[0] / self._small_size[1]
        pad = 0.15 * self.corridor.scale_px_m
        height, width = self.background.planes[0].shape
        top, bottom = int(max(0, y * sy - pad)) // 2 * 2, int(min(height, (y + h) * sy + pad))
        left, right = int(max(0, x * sx - pad)) // 2 * 2, int(min(width, (x + w) * sx + pad))
        return slice(top, bottom), slice(left, right)

    def _refine(
        self, planes: Planes, near: NDArray[np.uint8], box: tuple[int, int, int, int], light: tuple[float, float]
    ) -> Body | None:
        rows, columns = self._window(box)
        shape = (rows.stop - rows.start, columns.stop - columns.start)
        half = tuple(slice(s.start // 2, -(-s.stop // 2)) for s in (rows, columns))
        score = np.zeros(shape, np.float32)
        darker = np.zeros(shape, bool)
        back_chroma: list[Singles] = []
        seen_chroma: list[Singles] = []
        for i, (plane, back, noise) in enumerate(
            zip(planes, self.background.planes, self.background.noise, strict=True)
        ):
            part = (rows, columns) if i == 0 else half
            seen, expected = plane[part].astype(np.float32), back[part]
            if i == 0:
                expected = np.float32(light[0]) * expected + np.float32(light[1])
            # A 3 x 3 mean: single-pixel noise goes, the outline stays where it is.
            miss = cv2.blur(seen - expected, (3, 3)) / np.sqrt((0.6 * noise[part]) ** 2 + _FLOOR**2)
            if i:
                miss = cv2.resize(miss, shape[::-1], interpolation=cv2.INTER_LINEAR)
                seen_chroma.append(seen)
                back_chroma.append(expected)
            else:
                darker = miss < 0
            score += (miss**2).astype(np.float32)
        mask = _trimmed(self._hysteresis(score, near, rows, columns), score)
        self._drop_shadow(mask, planes[0][rows, columns], light, (rows, columns), seen_chroma, back_chroma)
        return self._measure(self._solid(mask, darker, rows, columns), rows, columns)

    def _hysteresis(self, score: Singles, near: NDArray[np.uint8], rows: slice, columns: slice) -> NDArray[np.uint8]:
        """Pixels over the low level that touch one over the high level, inside the coarse blob's surroundings."""
        full = self.background.planes[0].shape
        sy, sx = near.shape[0] / full[0], near.shape[1] / full[1]
        r = np.minimum((np.arange(rows.start, rows.stop) * sy).astype(int), near.shape[0] - 1)
        c = np.minimum((np.arange(columns.start, columns.stop) * sx).astype(int), near.shape[1] - 1)
        low = ((score > _LOW**2) & (near[np.ix_(r, c)] > 0)).astype(np.uint8)
        count, labels = cv2.connectedComponents(low, connectivity=8)
        strong = np.zeros(count, bool)
        strong[np.unique(labels[(score > _HIGH**2) & (low > 0)])] = True
        strong[0] = False
        return np.asarray(strong[labels], dtype=np.uint8)

    def _drop_shadow(
        self,
        mask: NDArray[np.uint8],
        luma: NDArray[np.uint8],
        light: tuple[float, float],
        window: tuple[slice, slice],
        seen: list[Singles],
        back: list[Singles],
    ) -> None:
        """Take out ground-near pixels that are the background, only darker: same colour, same texture.

        A shadow on the ground is seen low on the runner's plane, so only that band is searched and dark
        clothes higher up are safe.
        """
        rows, columns = window
        ground = self.corridor.ground_v[columns] - self.corridor.top
        v = np.arange(rows.start, rows.stop)[:, None]
        band = v > ground - _SHADOW_BAND_M * self.corridor.px_per_m[columns]
        if not np.any(band & (mask > 0)):
            return
        expected = light[0] * self.background.planes[0][window] + light[1]
        y = cv2.blur(luma.astype(np.float32), (3, 3))
        b = np.maximum(cv2.blur(expected.astype(np.float32), (3, 3)), 20.0)
        # Luma 16 is black in the limited range.
        ratio = np.clip((y - 16) / (b - 16), 0, 2).astype(np.float32)
        shaded = (ratio > _SHADOW_RATIO[0]) & (ratio < _SHADOW_RATIO[1])
        for s, c in zip(seen, back, strict=True):
            small = cv2.resize(ratio, s.shape[::-1], interpolation=cv2.INTER_AREA)
            # Chroma of a shaded surface shrinks with the light; skylight turns it a little towards blue.
            miss = np.abs(cv2.blur(s, (3, 3)) - 128 - small * (c - 128))
            shaded &= cv2.resize(miss, ratio.shape[::-1], interpolation=cv2.INTER_LINEAR) < 5.0
        mean = cv2.blur(ratio, (5, 5))
        rough = np.sqrt(np.maximum(cv2.blur(ratio * ratio, (5, 5)) - mean**2, 0))
        noise = 2.0 * self.background.noise[0][window] / np.maximum(b - 16, 10) + 0.03
        shaded &= rough < noise + 0.04
        shadow = (shaded & band & (mask > 0)).astype(np.uint8)
        shadow = cv2.morphologyEx(shadow, cv2.MORPH_OPEN, np.ones((3, 3), np.uint8)).astype(np.uint8)
        mask[shadow > 0] = 0
        # Thin rims of a shadow stay behind: what is left of them is narrower than a shank.
        left = cv2.morphologyEx(mask, cv2.MORPH_OPEN, np.ones((3, 3), np.uint8))
        mask[band & (left == 0)] = 0

    def _solid(
        self, mask: NDArray[np.uint8], darker: NDArray[np.bool_], rows: slice, columns: slice
    ) -> NDArray[np.uint8]:
        """Close small gaps and fill small holes; drop crumbs, and pieces on the ground that are left-over shadow."""
        scale = self.corridor.scale_px_m
        k = max(1, round(0.02 * scale)) * 2 + 1
        mask = cv2.morphologyEx(mask, cv2.MORPH_CLOSE, np.ones((k, k), np.uint8)).astype(np.uint8)
        # Flakes of badly compressed background hang on by less than a wrist's width.
        mask = cv2.morphologyEx(mask, cv2.MORPH_OPEN, np.ones((k, k), np.uint8)).astype(np.uint8)
        padded = cv2.copyMakeBorder(1 - mask, 1, 1, 1, 1, cv2.BORDER_CONSTANT, value=1)
        count, labels, stats, _ = cv2.connectedComponentsWithStats(padded.astype(np.uint8), connectivity=4)
        small = stats[:, cv2.CC_STAT_AREA] < 0.015 * scale**2
        small[0] = False
        mask[small[labels[1:-1, 1:-1]] & (mask == 0)] = 1
        count, labels, stats, _ = cv2.connectedComponentsWithStats(mask, connectivity=8)
        if count > 2:
            keep = stats[:, cv2.CC_STAT_AREA] >= 0.02 * stats[1:, cv2.CC_STAT_AREA].max()
            middle = columns.start + stats[:, cv2.CC_STAT_LEFT] + stats[:, cv2.CC_STAT_WIDTH] // 2
            ground = (
                self.corridor.ground_v[np.clip(middle, 0, self.corridor.width_px - 1)] - self.corridor.top - rows.start
            )
            # Apart from the body, low down, and flat or darker than the ground: a shadow's remains, unless it hangs
            # on the body and is no larger than a shoe.
            flat = stats[:, cv2.CC_STAT_HEIGHT] < 0.12 * scale
            flat &= stats[:, cv2.CC_STAT_WIDTH] > 1.5 * stats[:, cv2.CC_STAT_HEIGHT]
            dark = np.bincount(labels.ravel(), darker.ravel(), count) > 0.7 * stats[:, cv2.CC_STAT_AREA]
            largest = 1 + int(np.argmax(stats[1:, cv2.CC_STAT_AREA]))
            gap = 2 * max(1, round(_SHOE_GAP_M * scale)) + 1
            around = cv2.dilate((labels == largest).astype(np.uint8), np.ones((gap, gap), np.uint8))
            shoe = np.bincount(labels.ravel(), around.ravel(), count) > 0
            shoe &= stats[:, cv2.CC_STAT_WIDTH] < _SHOE_M * scale
            main = np.arange(count) == largest
            keep &= main | ~((flat | (dark & ~shoe)) & (stats[:, cv2.CC_STAT_TOP] > ground - _SHADOW_BAND_M * scale))
            keep[0] = False
            mask = keep[labels].astype(np.uint8)
        return mask

    def _measure(self, mask: NDArray[np.uint8], rows: slice, columns: slice) -> Body | None:
        ys, xs = np.nonzero(mask)
        scale = self.corridor.scale_px_m
        if ys.size < _LEAST_AREA_M2 * scale**2 or np.ptp(ys) < _LEAST_HEIGHT_M * scale:
            return None
        # Padded with background, so that the depth is measured to every outline; the picture's edge is one too.
        depth = cv2.distanceTransform(cv2.copyMakeBorder(mask, 1, 1, 1, 1, cv2.BORDER_CONSTANT), cv2.DIST_L2, 5)
        # Across a limb of radius R the depth sums to R^2, so these weights are those of a round limb's volume.
        # Capped, so that two limbs that touch do not count as one thick one.
        weight = np.minimum(depth[1:-1, 1:-1][ys, xs].astype(np.float64), _DEEPEST_M * scale)
        origin = np.array([columns.start, rows.start + self.corridor.top], dtype=np.float64)
        uv = np.array([np.average(xs, weights=weight), np.average(ys, weights=weight)]) + origin
        area_uv = np.array([xs.mean(), ys.mean()]) + origin
        box = np.array([xs.min(), ys.min(), xs.max(), ys.max()], dtype=np.float64) + np.tile(origin, 2)
        w, h = self.corridor.width_px, self.corridor.height_px
        column = int(np.clip(uv[0], 0, w - 1))
        # A shadow may reach the lower edge where the feet do not: there the geometry decides.
        below = box[3] > h - 3 and self.corridor.ground_v[column] > h + _FEET_CUT_M * scale
        cut = bool(box[0] < 2 or box[2] > w - 3 or box[1] < 2 or below)
        lowest = float(ys.max())
        legs = ys > lowest - _LEG_BAND * 1.7 * scale * 0.9
        spread = float(np.std(xs[legs])) if np.count_nonzero(legs) > 10 else 0.0
        return Body(uv, area_uv, box, float(ys.size), spread, self._lows(mask, rows, columns), cut)

    def _lows(self, mask: NDArray[np.uint8], rows: slice, columns: slice) -> Array:
        """Runs of columns whose lowest body pixel is near the lowest of the body: left, right, row (L, 3)."""
        present = mask.any(axis=0)
        bottom = np.where(present, mask.shape[0] - 1 - np.argmax(mask[::-1], axis=0), -1)
        band = _FOOT_BAND_M * self.corridor.scale_px_m
        low = present & (bottom > bottom.max() - max(2.0, band))
        edges = np.flatnonzero(np.diff(np.concatenate([[0], low.astype(np.int8), [0]])))
        runs = [
            (a + columns.start, b - 1 + columns.start, bottom[a:b].max() + rows.start + self.corridor.top)
            for a, b in zip(edges[::2], edges[1::2], strict=True)
            if b - a >= 2
        ]
        return np.array(runs, dtype=np.float64).reshape(-1, 3)
