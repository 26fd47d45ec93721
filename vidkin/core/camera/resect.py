"""Marks + priors -> Camera: full resection by least squares, several starts, and a covariance.

Unknowns: focal length, two radial terms, position, attitude (`stages.CAMERA_PARAMETERS`). Weighted Gauss-Newton
on the sightings plus weak, stated priors (`problem.stated_priors`); the covariance is (J^T W J)^-1, widened by the
residuals where they are larger than the stated click and placement errors (reduced chi-square; textbook).
"""

from __future__ import annotations

from typing import Final

import numpy as np

from vidkin.core import optics
from vidkin.core.camera.mistakes import cleaned, other_layout, predicted_error
from vidkin.core.camera.precision import lane_precision
from vidkin.core.camera.problem import Problem, stated_priors
from vidkin.notices import Failure, Notice, failure, notice
from vidkin.stages import Array, Camera, CameraPrior, Lane, Mark, Sighting

LEAST_MARKS: Final = 6
#: Lines count as two when marks lie this far apart across the running direction [m].
LEAST_GAP_M: Final = 0.3
#: A stretch shorter than this says nothing of a sprint [m].
LEAST_STRETCH_M: Final = 3.0
_REFUSE_M: Final = 0.25
_DISAGREE: Final = 4.0
_MIRROR_SHARE: Final = 0.1
_UNCERTAIN_SCALE: Final = 0.01


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


def resect(
    marks: tuple[Mark, ...],
    size_px: tuple[int, int],
    *,
    prior: CameraPrior | None = None,
    lane: Lane | None = None,
    sightings: tuple[Sighting, ...] = (),
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
    sightings : tuple of Sighting
        Clicks on lane lines and poles; they help, but do not stand in for marks.

    Returns
    -------
    Camera or Failure
        Marks that disagree with all the others are left out of the solution, and named.
    """
    lane = lane or Lane()
    # A Failure is falsy: `or` would lose it.
    missing = _missing(marks, lane)
    if missing is None:
        missing = _outside((*marks, *sightings), size_px)
    if missing is not None:
        return missing
    problem = Problem(marks, stated_priors(prior or CameraPrior(), size_px), lane, size_px, sightings=sightings)
    q = problem.solve(robust=True)
    if q is None:
        return failure("no_camera", rms_px=float("inf"), rms_cm=float("inf"))
    clean = cleaned(problem, q)
    layout = other_layout(problem, problem.descend(q)) if clean.left_out else other_layout(clean.problem, clean.q)
    refused = _refusal(problem, clean.problem, clean.q)
    if refused is not None:
        return refused
    remarks = list(clean.notices) if layout is None else [layout, *clean.notices]
    return _camera(problem, clean.problem, clean.q, left_out=clean.left_out, remarks=remarks)


def _outside(clicks: tuple[Mark | Sighting, ...], size_px: tuple[int, int]) -> Failure | None:
    for m in clicks:
        if not (-0.5 <= m.uv_px[0] <= size_px[0] - 0.5 and -0.5 <= m.uv_px[1] <= size_px[1] - 0.5):
            u, v = (float(c) for c in m.uv_px)
            return failure("mark_outside", label=m.label, u=u, v=v, width=size_px[0], height=size_px[1])
    return None


def _rms(problem: Problem, q: Array) -> tuple[float, float]:
    """Rms error of the marks [px] and at their distance [m]."""
    errors = problem.errors(q)
    p = problem.parameters(q)
    depth = np.abs((problem.xyz - p[3:6]) @ optics.rotation(*p[6:9])[2])
    size = np.hypot(*errors.T)
    return float(np.sqrt(np.mean(size**2))), float(np.sqrt(np.mean((size * depth / p[0]) ** 2)))


def _refusal(problem: Problem, used: Problem, q: Array) -> Failure | None:
    """Why this solution is no camera; None where it is one."""
    rms_px, rms_m = _rms(used, q)
    p = used.parameters(q)
    cost = float(np.sum(used.residual(q) ** 2))
    bad = rms_m > _REFUSE_M or bool(np.any((used.xyz - p[3:6]) @ optics.rotation(*p[6:9])[2] <= 0))
    if not bad and cost < _DISAGREE * 2 * len(used.marks):
        return None
    # A far-off camera can half fit a mirrored course: the mirror image must not fit far better.
    turned = problem.mirrored()
    end = turned.solve()
    if end is not None and float(np.sum(turned.residual(end) ** 2)) < _MIRROR_SHARE * cost:
        return failure("mirrored_marks", rms_px=rms_px, rms_cm=100 * rms_m)
    return failure("no_camera", rms_px=rms_px, rms_cm=100 * rms_m) if bad else None


def _camera(problem: Problem, used: Problem, q: Array, *, left_out: tuple[int, ...], remarks: list[Notice]) -> Camera:
    """The solved problem as a Camera, every mark's error in it, the left-out ones included."""
    p = used.parameters(q)
    size_px, lane = problem.size_px, problem.lane
    both = [predicted_error(used, q, m) for m in problem.marks]
    errors, error_m = np.array([e for e, _ in both]), np.array([m for _, m in both])
    jac = used.jacobian(q)
    misfit = used.misfit(q)
    # The priors stand in for about the three weakest directions.
    dof = max(1, jac.shape[0] - 7 - 9 + 3)
    excess = max(1.0, misfit / dof)
    to_p = np.diag(np.concatenate([[p[0]], np.ones(8)]))
    cov = to_p @ (excess * np.linalg.inv(jac.T @ jac)) @ to_p
    stretch = (float(used.xyz[:, 0].min()), float(used.xyz[:, 0].max()))
    xs, sds, scale = lane_precision(p, cov, size_px, lane=lane, stretch=stretch)
    rms_px, rms_m = _rms(used, q)
    if excess > _DISAGREE:
        kept = [i for i in range(len(problem.marks)) if i not in left_out]
        worst = max(kept, key=lambda i: float(error_m[i]))
        remarks.append(
            notice(
                "marks_disagree",
                rms_px=rms_px,
                rms_cm=100 * rms_m,
                label=problem.marks[worst].label,
                worst_cm=100 * float(error_m[worst]),
            )
        )
    if scale > _UNCERTAIN_SCALE:
        remarks.append(notice("scale_uncertain", percent=100 * scale))
    return Camera(
        width_px=size_px[0],
        height_px=size_px[1],
        parameters=p,
        cov=(cov + cov.T) / 2,
        marks=problem.marks,
        mark_uv_px=problem.seen - errors,
        mark_error_px=errors,
        mark_error_m=error_m,
        used=np.array([i not in left_out for i in range(len(problem.marks))]),
        sightings=problem.sightings,
        sighting_error_px=np.abs(used.sighting_errors(q)),
        x_sd_m=np.column_stack([xs, sds]),
        scale_sd=scale,
        notices=tuple(remarks),
    )
