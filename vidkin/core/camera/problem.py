"""The resection as a least-squares problem: residuals of marks and sightings, stated priors, Jacobian, starts."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from scipy.optimize import least_squares

from vidkin.core import optics
from vidkin.stages import Array, CameraPrior, Lane, Mark, Sighting

_ANGLE_FROM_LEVEL: Final = np.radians(15.0)
_AXES: Final = {"x": 0, "z": 2}
_SLIDE_STEPS: Final = 6


@dataclass(frozen=True, slots=True)
class Prior:
    """Gaussian priors on (ln f, k1, k2, height, distance, pitch, roll): mean, sd."""

    mean: Array
    sd: Array


def stated_priors(prior: CameraPrior, size_px: tuple[int, int]) -> Prior:
    """Priors on (ln f, k1, k2, z, distance, pitch, roll).

    Unstated: field of view 66 deg within a factor 1.5 in focal length (phone main lens to its 2x and wide modes;
    references: equivalent 24-28 mm), height 1.5 +- 1.5 m, distance 14 m +- 20 m, pitch and roll 0 +- 15 deg. Radial
    terms unless a lens profile says more: k1 0 +- 0.1, k2 0 +- 0.05 (phones correct their pictures, not fully). Stated
    values carry the sds of `CameraPrior` (a field of view +- 5 %: it changes with the recording mode).
    """
    hfov = 66.0 if prior.hfov_deg is None else prior.hfov_deg
    focal = 0.5 * size_px[0] / np.tan(np.radians(hfov) / 2)
    height = (1.5, 1.5) if prior.height_m is None else (prior.height_m, prior.height_sd_m)
    distance = (14.0, 20.0) if prior.distance_m is None else (prior.distance_m, prior.distance_sd_m)
    pairs = [
        (float(np.log(focal)), 0.4 if prior.hfov_deg is None else prior.focal_rel_sd),
        (prior.k1, prior.k1_sd),
        (prior.k2, prior.k2_sd),
        height,
        distance,
        (0.0, _ANGLE_FROM_LEVEL),
        (0.0, _ANGLE_FROM_LEVEL),
    ]
    mean, sd = np.array(pairs).T
    return Prior(mean=mean, sd=sd)


class Problem:
    """The weighted least-squares problem in q = (ln f, k1, k2, x, y, z, yaw, pitch, roll)."""

    def __init__(
        self,
        marks: tuple[Mark, ...],
        prior: Prior,
        lane: Lane,
        size_px: tuple[int, int],
        *,
        sightings: tuple[Sighting, ...] = (),
    ) -> None:
        self.marks, self.sightings = marks, sightings
        self.prior, self.lane, self.size_px = prior, lane, size_px
        self.xyz = np.array([m.xyz_m for m in marks]).reshape(-1, 3)
        self.seen = np.array([m.uv_px for m in marks]).reshape(-1, 2)
        self.click = np.array([m.sd_px for m in marks])
        self.placed = np.array([m.sd_m for m in marks])

    def without(self, *left_out: int) -> Problem:
        """The same problem less some marks."""
        kept = tuple(m for i, m in enumerate(self.marks) if i not in left_out)
        return Problem(kept, self.prior, self.lane, self.size_px, sightings=self.sightings)

    def mirrored(self) -> Problem:
        """The same problem with the picture's left and right exchanged."""
        last = self.size_px[0] - 1

        def turn(uv: Array) -> Array:
            return np.array([last - uv[0], uv[1]])

        marks = tuple(replace(m, uv_px=turn(m.uv_px)) for m in self.marks)
        sightings = tuple(replace(s, uv_px=turn(s.uv_px)) for s in self.sightings)
        return Problem(marks, self.prior, self.lane, self.size_px, sightings=sightings)

    @staticmethod
    def parameters(q: Array) -> Array:
        return np.concatenate([[np.exp(q[0])], q[1:]])

    def sd_px(self, p: Array) -> Array:
        """Sighting sd (M,) [px]: the click and the placement seen at the mark's distance."""
        depth = np.linalg.norm(self.xyz - p[3:6], axis=1)
        return np.asarray(np.hypot(self.click, p[0] / depth * self.placed))

    def errors(self, q: Array) -> Array:
        """Sighting minus model (M, 2) [px]; a mark behind the camera counts as a picture away."""
        uv = optics.project(self.parameters(q), self.xyz, self.size_px)
        return np.where(np.isfinite(uv), self.seen - uv, float(max(self.size_px)))

    def _slid(self, p: Array) -> tuple[Array, Array]:
        """Nearest point of each sighting's line to its click (S, 3) [m], and the picture's normal there (S, 2)."""
        points = np.array([s.xyz_m for s in self.sightings]).reshape(-1, 3)
        axes = np.array([_AXES[s.free] for s in self.sightings], dtype=np.int64)
        clicks = np.array([s.uv_px for s in self.sightings]).reshape(-1, 2)
        row = np.arange(len(points))
        along = np.tile([1.0, 0.0], (len(points), 1))
        for _ in range(_SLIDE_STEPS):
            uv, _, by_point = optics.project_jacobian(p, points, self.size_px)
            along = by_point[row, :, axes]
            with np.errstate(invalid="ignore"):
                step = np.sum(along * (clicks - uv), axis=1) / np.maximum(np.sum(along**2, axis=1), 1e-12)
            points[row, axes] += np.where(np.isfinite(step), np.clip(step, -20, 20), 0.0)
        length = np.maximum(np.hypot(*along.T), 1e-12)
        return points, np.column_stack([-along[:, 1], along[:, 0]]) / length[:, None]

    def sighting_errors(self, q: Array) -> Array:
        """Distance of each click from its line in the picture (S,) [px], signed."""
        p = self.parameters(q)
        points, normals = self._slid(p)
        uv = optics.project(p, points, self.size_px)
        clicks = np.array([s.uv_px for s in self.sightings]).reshape(-1, 2)
        miss = np.einsum("sk,sk->s", normals, clicks - uv)
        return np.where(np.isfinite(miss), miss, float(max(self.size_px)))

    def _sighting_sd(self, p: Array) -> Array:
        points, _ = self._slid(p)
        depth = np.linalg.norm(points - p[3:6], axis=1)
        click = np.array([s.sd_px for s in self.sightings])
        return np.asarray(np.hypot(click, p[0] / depth * np.array([s.sd_m for s in self.sightings])))

    def residual(self, q: Array) -> Array:
        p = self.parameters(q)
        parts = [(self.errors(q) / self.sd_px(p)[:, None]).ravel()]
        if self.sightings:
            parts.append(self.sighting_errors(q) / self._sighting_sd(p))
        stated = np.array([q[0], q[1], q[2], q[5], abs(q[4] - self.lane.centre_y_m), q[7], q[8]])
        parts.append((stated - self.prior.mean) / self.prior.sd)
        return np.concatenate(parts)

    def jacobian(self, q: Array) -> Array:
        p = self.parameters(q)
        _, by_p, _ = optics.project_jacobian(p, self.xyz, self.size_px)
        by_q = -by_p / self.sd_px(p)[:, None, None]
        by_q[:, :, 0] *= p[0]
        parts = [by_q.reshape(-1, 9)]
        if self.sightings:
            # The slid point moves along the line only, across the normal: its own motion drops out.
            points, normals = self._slid(p)
            _, lines_by_p, _ = optics.project_jacobian(p, points, self.size_px)
            across = -np.einsum("sk,skj->sj", normals, lines_by_p) / self._sighting_sd(p)[:, None]
            across[:, 0] *= p[0]
            parts.append(across)
        stated = np.zeros((7, 9))
        stated[[0, 1, 2, 3, 5, 6], [0, 1, 2, 5, 7, 8]] = 1.0
        stated[4, 4] = np.sign(q[4] - self.lane.centre_y_m) or 1.0
        parts.append(stated / self.prior.sd[:, None])
        return np.concatenate(parts)

    def misfit(self, q: Array) -> float:
        """Weighted sum of squares of marks and sightings, priors left out."""
        return float(np.sum(self.residual(q)[:-7] ** 2))

    def descend(self, start: Array, *, robust: bool = False) -> Array:
        """Least squares from one start; `robust` by the soft L1 loss, which a few wild marks do not bend."""
        end = least_squares(
            self.residual,
            start,
            jac=self.jacobian,
            x_scale="jac",
            loss="soft_l1" if robust else "linear",
            xtol=1e-12,
            ftol=1e-12,
            max_nfev=60 if robust else 300,
        )
        return np.asarray(end.x)

    def solve(self, *, robust: bool = False) -> Array | None:
        """The best of all starts: each a little way, the three best to the end; None where none holds."""
        tries: list[tuple[float, Array]] = []
        for start in self._starts():
            rough = least_squares(self.residual, start, jac=self.jacobian, x_scale="jac", loss="soft_l1", max_nfev=25)
            tries.append((float(rough.cost), np.asarray(rough.x)))
        # A view in which the marks lie behind the camera, or past the lens's range, is none.
        sane = [t for t in tries if self._sees(t[1])] or tries
        sane.sort(key=lambda t: t[0])
        ends = [self.descend(x, robust=robust) for _, x in sane[:3]]
        ends = [x for x in ends if self._sees(x)] or ends
        best = min(ends, key=lambda x: self._cost(x, robust=robust))
        return best if np.all(np.isfinite(best)) else None

    def _sees(self, q: Array) -> bool:
        """Whether every mark has a place in the picture's plane."""
        return bool(np.all(np.isfinite(optics.project(self.parameters(q), self.xyz, self.size_px))))

    def _cost(self, q: Array, *, robust: bool) -> float:
        r2 = self.residual(q) ** 2
        return float(np.sum(2 * (np.sqrt(1 + r2) - 1)) if robust else np.sum(r2))

    def _starts(self) -> list[Array]:
        """First guesses from the picture's scale: both sides of the lane, three lenses, three headings."""
        xyz, seen, (w, h) = self.xyz, self.seen, self.size_px
        # The median of pairwise slopes: two swapped marks do not turn the lane round.
        apart = xyz[:, None, 0] - xyz[None, :, 0]
        far = np.abs(apart) > 0.3 * np.ptp(xyz[:, 0])
        slope = float(np.median((seen[:, None, 0] - seen[None, :, 0])[far] / apart[far]))
        middle = xyz.mean(axis=0)
        height = self.prior.mean[3]
        starts = []
        for log_f in self.prior.mean[0] + self.prior.sd[0] * np.array([0.0, -0.8, 0.8]):
            f = np.exp(log_f)
            distance = float(np.clip(f / max(abs(slope), 1e-6), 1.0, 200.0))
            off = (seen.mean(axis=0) - optics.centre_px((w, h))) / f
            for side in (-1.0, 1.0) if slope >= 0 else (1.0, -1.0):
                for slant in (0.0, -0.5, 0.5):
                    heading = -side * np.pi / 2 + side * slant
                    place = middle + distance * np.array([np.sin(slant), side * np.cos(slant), 0.0])
                    pitch = np.arctan2(middle[2] - height, distance) + np.arctan(off[1])
                    starts.append(
                        np.array([log_f, 0, 0, place[0], place[1], height, heading + np.arctan(off[0]), pitch, 0.0])
                    )
        return starts
