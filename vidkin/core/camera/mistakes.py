"""Marks that cannot be right: found by leaving them out one by one, and named with what they look like."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from scipy.stats import chi2

from vidkin.core import optics
from vidkin.core.camera.problem import Problem
from vidkin.notices import Notice, notice
from vidkin.stages import Array, Mark

#: Chance of a false alarm per set of marks that is as good as stated [-].
_FALSE_ALARM: Final = 0.004
_LEAST_LEFT: Final = 6
_MOST_SHARE: Final = 0.34
#: Positions of hurdles 1 to 10 from the start [m] (references section 8, READ).
_GRIDS: Final = {
    "110 m hurdles (9.14 m apart)": 13.72 + 9.14 * np.arange(10),
    "100 m hurdles (8.50 m apart)": 13.0 + 8.5 * np.arange(10),
}
_ON_GRID_M: Final = 0.03
_WHOLE_M: Final = 0.12
_SUSPECTS: Final = 4
_WILD_SD: Final = 12.0


@dataclass(frozen=True, slots=True)
class Cleaned:
    """The problem less the marks that were left out (by index), its solution, and what is to be said."""

    problem: Problem
    q: Array
    left_out: tuple[int, ...]
    notices: tuple[Notice, ...]


def _limit(marks: int) -> float:
    """Drop of the misfit when one of `marks` good marks is left out is chi^2(2); Bonferroni over the marks."""
    return float(chi2.isf(_FALSE_ALARM / marks, 2))


def _drops(problem: Problem, q: Array) -> Array:
    """Drop of the misfit (M,) when each mark is left out, to first order: r^T (I - H)^-1 r with its own leverage H.

    Cook & Weisberg, Residuals and Influence in Regression (1982), ch. 2 (from memory).
    """
    r, jac = problem.residual(q), problem.jacobian(q)
    inverse = np.linalg.inv(jac.T @ jac)
    out = np.empty(len(problem.marks))
    for i in range(out.size):
        rows = slice(2 * i, 2 * i + 2)
        rest = np.eye(2) - jac[rows] @ inverse @ jac[rows].T
        out[i] = r[rows] @ np.linalg.solve(rest + 1e-9 * np.eye(2), r[rows])
    return out


def _wild(problem: Problem, q: Array, most: int) -> list[int]:
    """Marks that the robust solution `q` misses by far, worst first.

    A straight least-squares fit through them could end anywhere, so they stand aside until the others have spoken.
    """
    off = np.hypot(*(problem.errors(q) / problem.sd_px(problem.parameters(q))[:, None]).T)
    room = max(0, min(most, len(problem.marks) - _LEAST_LEFT))
    return [int(i) for i in np.argsort(-off)[:room] if off[i] > _WILD_SD]


def cleaned(problem: Problem, q: Array) -> Cleaned:
    """Leave out marks that disagree with all the others, worst first, as long as the rest still defines a camera.

    A mark's own pull on the fit hides its error, so each is judged by how much the misfit drops without it. A drop
    beyond what chance gives (`_FALSE_ALARM`) convicts it. Marks left out early are taken back if the final camera
    agrees with them.
    """
    most = int(_MOST_SHARE * len(problem.marks))
    out = _wild(problem, q, most)
    now = problem.without(*out)
    at = now.descend(q)
    while len(out) < most and len(problem.marks) - len(out) > _LEAST_LEFT:
        kept = [i for i in range(len(problem.marks)) if i not in out]
        limit, guess = _limit(len(kept)), _drops(now, at)
        # The straight-line drop picks the suspects; only they are tried in full.
        suspects = [int(k) for k in np.argsort(-guess)[:_SUSPECTS] if guess[k] > 0.5 * limit]
        drops = []
        for k in suspects:
            fewer = problem.without(*out, kept[k])
            end = fewer.descend(at)
            drops.append((now.misfit(at) - fewer.misfit(end), kept[k], fewer, end))
        if not drops:
            break
        drop, worst, fewer, end = max(drops, key=lambda d: d[0])
        if drop < limit:
            break
        out.append(worst)
        now, at = fewer, end
    for i in list(out):
        others = [j for j in out if j != i]
        back = problem.without(*others)
        end = back.descend(at)
        if back.misfit(end) - now.misfit(at) < _limit(len(problem.marks)):
            out, now, at = others, back, end
    return Cleaned(now, at, tuple(sorted(out)), _words(problem, now, at, tuple(sorted(out))))


def predicted_error(now: Problem, q: Array, mark: Mark) -> tuple[Array, float]:
    """Sighting minus what the OTHER marks' camera predicts: (2,) [px], and its length at the mark's distance [m]."""
    p = now.parameters(q)
    uv = optics.project(p, np.array(mark.xyz_m)[None], now.size_px)[0]
    depth = abs(float((np.array(mark.xyz_m) - p[3:6]) @ optics.rotation(*p[6:9])[2]))
    miss = np.array(mark.uv_px) - uv
    return miss, float(np.hypot(*miss)) * depth / float(p[0])


def _words(problem: Problem, now: Problem, q: Array, out: tuple[int, ...]) -> tuple[Notice, ...]:
    if not out:
        return ()
    pair = _swapped(problem, now, q, out)
    remarks: list[Notice] = []
    if pair is not None:
        a, b = (problem.marks[i].label for i in pair)
        remarks.append(notice("marks_swapped", first=a, second=b, others=len(now.marks)))
    for i in out:
        if pair is not None and i in pair:
            continue
        mark = problem.marks[i]
        _, metres = predicted_error(now, q, mark)
        remarks.append(
            notice(
                "mark_left_out",
                label=mark.label,
                others=len(now.marks),
                cm=100 * metres,
                looks=_looks_like(now, q, mark),
            )
        )
    return tuple(remarks)


def _swapped(problem: Problem, now: Problem, q: Array, out: tuple[int, ...]) -> tuple[int, int] | None:
    """Two left-out marks that both fit once their sightings are exchanged."""
    limit = 3 * np.sqrt(_limit(len(problem.marks)))
    for k, i in enumerate(out):
        for j in out[k + 1 :]:
            a, b = problem.marks[i], problem.marks[j]
            pairs = ((a, b), (b, a))
            if all(
                np.hypot(*predicted_error(now, q, replace(m, uv_px=other.uv_px))[0]) < limit * m.sd_px
                for m, other in pairs
            ):
                return i, j
    return None


def _looks_like(now: Problem, q: Array, mark: Mark) -> str:
    """What would explain a left-out mark: a tape misread by whole metres, or a click elsewhere."""
    p = now.parameters(q)
    place = optics.to_plane(p, np.array(mark.uv_px)[None], now.size_px, axis=1, value_m=float(mark.xyz_m[1]))[0]
    off = float(place[0] - mark.xyz_m[0]) if np.isfinite(place).all() else float("nan")
    whole = round(off) if np.isfinite(off) else 0
    if whole != 0 and abs(off - whole) < _WHOLE_M and abs(float(place[2] - mark.xyz_m[2])) < _WHOLE_M:
        return f" It was clicked where x = {place[0]:.2f} m is: a tape misread by {abs(whole)} m?"
    if np.isfinite(off):
        return f" It was clicked where x = {place[0]:.2f} m is, not {float(mark.xyz_m[0]):.2f} m."
    return ""


def other_layout(problem: Problem, q: Array) -> Notice | None:
    """A notice where marks named after one hurdle event fit far better with the other event's spacing."""
    for name, grid in _GRIDS.items():
        near = np.abs(problem.xyz[:, :1] - grid[None])
        which = near.argmin(axis=1)
        on = near.min(axis=1) < _ON_GRID_M
        if np.count_nonzero(on) < 4 or len(set(which[on].tolist())) < 2:
            continue
        other_name, other = next((n, g) for n, g in _GRIDS.items() if n != name)
        marks = tuple(
            replace(m, xyz_m=np.array([other[k], *m.xyz_m[1:]])) if o else m
            for m, k, o in zip(problem.marks, which, on, strict=True)
        )
        swapped = Problem(marks, problem.prior, problem.lane, problem.size_px, sightings=problem.sightings)
        end = swapped.solve()
        if end is None:
            continue
        here, there = float(np.sum(problem.residual(q) ** 2)), float(np.sum(swapped.residual(end) ** 2))
        if here > _limit(len(marks)) + len(marks) * 2 and there < 0.25 * here:
            return notice("other_layout", used=name, better=other_name)
    return None
