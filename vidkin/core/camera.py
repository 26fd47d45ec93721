"""Marks + priors -> Camera: full resection by least squares, several starts, and a covariance.

Unknowns: focal length, two radial terms, position, attitude (`stages.CAMERA_PARAMETERS`). Weighted Gauss-Newton
on the sightings plus weak, stated priors (`PRIORS`); the covariance is (J^T W J)^-1, widened by the residuals
where they are larger than the stated click and placement errors (Bevington-style reduced chi-square; textbook).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from scipy.optimize import least_squares

from vidkin.core import optics
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Array, Camera, CameraPrior, Lane, Mark

LEAST_MARKS: Final = 6
#: Lines count as two when marks lie this far apart across the running direction [m].
LEAST_GAP_M: Final = 0.3
#: A stretch shorter than this says nothing of a sprint [m].
LEAST_STRETCH_M: Final = 3.0
#: Height at which the lane scale is checked: about a runner's centre of mass [m].
CHECK_HEIGHT_M: Final = 0.95
_REFUSE_M: Final = 0.25
_ANGLE_FROM_LEVEL: Final = np.radians(15.0)


@dataclass(frozen=True, slots=True)
class _Prior:
    """Gaussian priors on (ln f, k1, k2, height, distance, pitch, roll): mean, sd."""

    mean: Array
    sd: Array


def stated_priors(prior: CameraPrior, size_px: tuple[int, int]) -> _Prior:
    """Priors on (ln f, k1, k2, z, distance, pitch, roll).

    Unstated: field of view 66 deg within a factor 1.5 in focal length (phone main lens to its 2x and wide
    modes; references: equivalent 24-28 mm), k1 0 +- 0.1, k2 0 +- 0.05 (phones correct their pictures, not
    fully), height 1.5 +- 1.5 m, distance 14 m +- 20 m, pitch and roll 0 +- 15 deg. Stated values: focal length +- 5 %
    (the field of view changes with the recording mode), height +- 0.15 m, distance +- 0.5 m.
    """
    hfov = 66.0 if prior.hfov_deg is None else prior.hfov_deg
    focal = 0.5 * size_px[0] / np.tan(np.radians(hfov) / 2)
    return _Prior(
        mean=np.array(
            [
                np.log(focal),
                0.0,
                0.0,
                1.5 if prior.height_m is None else prior.height_m,
                14.0 if prior.distance_m is None else prior.distance_m,
                0.0,
                0.0,
            ]
        ),
        sd=np.array(
            [
                0.4 if prior.hfov_deg is None else 0.05,
                0.1,
                0.05,
                1.5 if prior.height_m is None else 0.15,
                20.0 if prior.distance_m is None else 0.5,
                _ANGLE_FROM_LEVEL,
                _ANGLE_FROM_LEVEL,
            ]
        ),
    )


def _missing(marks: tuple[Mark, ...], lane: Lane) -> Failure | None:
    """Why these marks cannot define a camera, naming the mark to add; None where they can."""
    near, far = lane.centre_y_m - lane.width_m / 2, lane.centre_y_m + lane.width_m / 2
    if len(marks) < LEAST_MARKS:
        xs = sorted({round(float(m.xyz_m[0]), 2) for m in marks}) or [lane.start_x_m]
        return failure(
            "too_few_marks",
            count=len(marks),
            least=LEAST_MARKS,
            missing=LEAST_MARKS - len(marks),
            where=f"x = {xs[0]:g} m and x = {xs[-1] + 10:g} m, y = {near:g} m and y = {far:g} m",
        )
    xyz = np.array([m.xyz_m for m in marks])
    stretch = float(np.ptp(xyz[:, 0]))
    if stretch < LEAST_STRETCH_M:
        return failure("short_stretch", stretch=stretch, least=LEAST_STRETCH_M, x=float(xyz[:, 0].mean()) + 10)
    # Lines along x: group by (y, z); two lines need two marks each, or the tilt across them is free.
    lines: list[list[int]] = []
    for i, (_, y, z) in enumerate(xyz):
        for line in lines:
            if np.hypot(*(xyz[line[0], 1:] - (y, z))) < LEAST_GAP_M:
                line.append(i)
                break
        else:
            lines.append([i])
    if sum(len(line) >= 2 for line in lines) < 2:
        main = max(lines, key=len)
        y = float(xyz[main, 1].mean())
        other = far if abs(y - far) > abs(y - near) else near
        return failure(
            "one_line", y=y, other=other, x1=float(xyz[main, 0].min()), x2=float(xyz[main, 0].max()), count=len(main)
        )
    return None


class _Problem:
    """The weighted least-squares problem in q = (ln f, k1, k2, x, y, z, yaw, pitch, roll)."""

    def __init__(self, marks: tuple[Mark, ...], prior: _Prior, lane: Lane, size_px: tuple[int, int]) -> None:
        self.xyz = np.array([m.xyz_m for m in marks])
        self.seen = np.array([m.uv_px for m in marks])
        self.click = np.array([m.sd_px for m in marks])
        self.placed = np.array([m.sd_m for m in marks])
        self.prior, self.lane, self.size_px = prior, lane, size_px

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

    def residual(self, q: Array) -> Array:
        p = self.parameters(q)
        miss = self.errors(q) / self.sd_px(p)[:, None]
        stated = np.array([q[0], q[1], q[2], q[5], abs(q[4] - self.lane.centre_y_m), q[7], q[8]])
        return np.concatenate([miss.ravel(), (stated - self.prior.mean) / self.prior.sd])

    def jacobian(self, q: Array) -> Array:
        p = self.parameters(q)
        _, by_p, _ = optics.project_jacobian(p, self.xyz, self.size_px)
        by_q = -by_p / self.sd_px(p)[:, None, None]
        by_q[:, :, 0] *= p[0]
        stated = np.zeros((7, 9))
        stated[[0, 1, 2, 3, 5, 6], [0, 1, 2, 5, 7, 8]] = 1.0
        stated[4, 4] = np.sign(q[4] - self.lane.centre_y_m) or 1.0
        return np.concatenate([by_q.reshape(-1, 9), stated / self.prior.sd[:, None]])


def _starts(problem: _Problem) -> list[Array]:
    """First guesses from the picture's scale: both sides of the lane, three lenses, three headings."""
    xyz, seen, (w, h) = problem.xyz, problem.seen, problem.size_px
    ends = np.argmin(xyz[:, 0]), np.argmax(xyz[:, 0])
    px_per_m = abs(seen[ends[1], 0] - seen[ends[0], 0]) / max(np.ptp(xyz[:, 0]), 1e-9)
    middle = xyz.mean(axis=0)
    to_right = seen[ends[1], 0] >= seen[ends[0], 0]
    height = problem.prior.mean[3]
    starts = []
    for log_f in problem.prior.mean[0] + problem.prior.sd[0] * np.array([0.0, -0.8, 0.8]):
        f = np.exp(log_f)
        distance = float(np.clip(f / max(px_per_m, 1e-6), 1.0, 200.0))
        off = (seen.mean(axis=0) - optics.centre_px((w, h))) / f
        for side in (-1.0, 1.0) if to_right else (1.0, -1.0):
            for slant in (0.0, -0.5, 0.5):
                heading = -side * np.pi / 2 + side * slant
                place = middle + distance * np.array([np.sin(slant), side * np.cos(slant), 0.0])
                pitch = np.arctan2(middle[2] - height, distance) + np.arctan(off[1])
                starts.append(
                    np.array([log_f, 0, 0, place[0], place[1], height, heading + np.arctan(off[0]), pitch, 0.0])
                )
    return starts


def _solve(problem: _Problem) -> Array | None:
    """The best of all starts: each a little way, the three best to the end."""
    tries: list[tuple[float, Array]] = []
    for start in _starts(problem):
        rough = least_squares(problem.residual, start, jac=problem.jacobian, x_scale="jac", loss="soft_l1", max_nfev=40)
        tries.append((float(rough.cost), rough.x))
    tries.sort(key=lambda t: t[0])
    ends = [
        least_squares(problem.residual, x, jac=problem.jacobian, x_scale="jac", xtol=1e-12, ftol=1e-12, max_nfev=300)
        for _, x in tries[:3]
    ]
    best = min(ends, key=lambda e: float(e.cost))
    return np.asarray(best.x) if np.all(np.isfinite(best.x)) else None


def resect(
    marks: tuple[Mark, ...], size_px: tuple[int, int], *, prior: CameraPrior | None = None, lane: Lane | None = None
) -> Camera | Failure:
    """Find the camera from marks.

    Parameters
    ----------
    marks : tuple of Mark
        At least six, on at least two lines along the lane.
    size_px : (int, int)
        Picture width and height.
    prior, lane : optional
        What the user states of camera and lane.

    Returns
    -------
    Camera or Failure
    """
    lane = lane or Lane()
    missing = _missing(marks, lane)
    if missing is not None:
        return missing
    for m in marks:
        if not (-0.5 <= m.uv_px[0] <= size_px[0] - 0.5 and -0.5 <= m.uv_px[1] <= size_px[1] - 0.5):
            u, v = (float(c) for c in m.uv_px)
            return failure("mark_outside", label=m.label, u=u, v=v, width=size_px[0], height=size_px[1])
    problem = _Problem(marks, stated_priors(prior or CameraPrior(), size_px), lane, size_px)
    q = _solve(problem)
    if q is None:
        return failure("no_camera", rms_px=float("inf"), rms_cm=float("inf"))
    p = problem.parameters(q)
    errors = problem.errors(q)
    depth = (problem.xyz - p[3:6]) @ optics.rotation(*p[6:9])[2]
    error_m = np.hypot(*errors.T) * np.abs(depth) / p[0]
    rms_px, rms_m = float(np.sqrt(np.mean(np.sum(errors**2, 1)))), float(np.sqrt(np.mean(error_m**2)))
    if rms_m > _REFUSE_M or np.any(depth <= 0):
        mirrored = _fits_mirrored(problem, rms_px)
        return failure("mirrored_marks" if mirrored else "no_camera", rms_px=rms_px, rms_cm=100 * rms_m)
    jac = problem.jacobian(q)
    whitened = errors / problem.sd_px(p)[:, None]
    dof = max(1, errors.size - 9 + 3)  # the priors stand in for about the three weakest directions
    excess = max(1.0, float(np.sum(whitened**2)) / dof)
    cov_q = excess * np.linalg.inv(jac.T @ jac)
    to_p = np.diag(np.concatenate([[p[0]], np.ones(8)]))
    cov = to_p @ cov_q @ to_p
    xs, sds, scale = lane_precision(
        p, cov, size_px, lane=lane, stretch=(problem.xyz[:, 0].min(), problem.xyz[:, 0].max())
    )
    remarks: list[Notice] = []
    if excess > 4.0:
        worst = int(np.argmax(np.sum(whitened**2, 1)))
        remarks.append(
            notice(
                "marks_disagree",
                rms_px=rms_px,
                rms_cm=100 * rms_m,
                label=marks[worst].label,
                worst_cm=100 * float(error_m[worst]),
            )
        )
    if scale > 0.01:
        remarks.append(notice("scale_uncertain", percent=100 * scale))
    return Camera(
        width_px=size_px[0],
        height_px=size_px[1],
        parameters=p,
        cov=(cov + cov.T) / 2,
        marks=marks,
        mark_uv_px=problem.seen - errors,
        mark_error_px=errors,
        mark_error_m=error_m,
        x_sd_m=np.column_stack([xs, sds]),
        scale_sd=scale,
        notices=tuple(remarks),
    )


def _fits_mirrored(problem: _Problem, rms_px: float) -> bool:
    """Whether the same marks with left and right exchanged would fit far better: a mirrored picture or course."""
    mirror = _Problem((), problem.prior, problem.lane, problem.size_px)
    mirror.xyz, mirror.click, mirror.placed = problem.xyz, problem.click, problem.placed
    mirror.seen = np.column_stack([problem.size_px[0] - 1 - problem.seen[:, 0], problem.seen[:, 1]])
    q = _solve(mirror)
    return q is not None and float(np.sqrt(np.mean(np.sum(mirror.errors(q) ** 2, 1)))) < 0.25 * rms_px


def lane_precision(
    p: Array, cov: Array, size_px: tuple[int, int], *, lane: Lane, stretch: tuple[float, float]
) -> tuple[Array, Array, float]:
    """What the camera's covariance means along the lane.

    Returns
    -------
    x_m (K,), sd_m (K,) : sd of a position measured at lane centre and centre-of-mass height.
    scale_sd : relative sd of the length between the stretch's ends [-].
    """
    xs = np.linspace(stretch[0], stretch[1], 25)
    points = np.column_stack([xs, np.full(25, lane.centre_y_m), np.full(25, CHECK_HEIGHT_M)])
    uv = optics.project(p, points, size_px)
    inside = np.all(np.isfinite(uv), axis=1)
    _, by_p, _ = optics.lane_jacobian(p, points[inside], size_px)
    rows = by_p[:, 0, :]
    sds = np.sqrt(np.einsum("ni,ij,nj->n", rows, cov, rows))
    xs = xs[inside]
    if xs.size < 2:
        return xs, sds, 0.0
    between = rows[-1] - rows[0]
    return xs, sds, float(np.sqrt(between @ cov @ between) / (xs[-1] - xs[0]))
