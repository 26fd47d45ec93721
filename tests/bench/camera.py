"""Camera accuracy, honesty and mistake detection on simulated set-ups: prints tables.

    python tests/bench/camera.py --setups 300

Set-ups: 8-25 m, 60-90 deg field of view, height 1-3 m, yaw +-8 deg, roll +-3 deg, k1 +-0.12, 6-14 marks on two lane
lines clicked with 0.7 px error and placed with 1 cm tape error.
"""

from __future__ import annotations

import argparse
import os
from collections.abc import Iterator
from dataclasses import dataclass, replace

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from vidkin.core import optics
from vidkin.core.camera import resect
from vidkin.stages import Camera, Lane, Mark

SIZE = (1920, 1080)
CLICK_PX, TAPE_M = 0.7, 0.01
LANE = Lane()


@dataclass(frozen=True, slots=True)
class Setup:
    truth: np.ndarray
    marks: tuple[Mark, ...]


def setup(rng: np.random.Generator, *, least: int = 6) -> Setup:
    """One random camera that sees at least `least` marks."""
    while True:
        distance, side = rng.uniform(8, 25), rng.choice([-1.0, 1.0])
        f = 0.5 * SIZE[0] / np.tan(np.radians(rng.uniform(60, 90)) / 2)
        height, yaw, roll = rng.uniform(1, 3), np.radians(rng.uniform(-8, 8)), np.radians(rng.uniform(-3, 3))
        half = distance * SIZE[0] / 2 / f
        x0 = rng.uniform(0, 60) + half
        pitch = -np.arctan2(height - 1.0, distance) + np.radians(rng.uniform(-3, 3))
        p = np.array([f, rng.uniform(-0.12, 0.12), 0.0, x0, LANE.centre_y_m + side * distance, height, 0, pitch, roll])
        p[6] = -side * np.pi / 2 + yaw
        if abs(np.hypot(half, 0) / distance) > optics.largest_radius(p[1], p[2]):
            continue
        step = rng.choice([2.0, 2.5, 5.0])
        xs = np.arange(np.ceil((x0 - half) / step) * step, x0 + half, step)
        places = np.array([(x, y, 0.0) for x in xs for y in (0.0, 1.22)])
        taped = places + rng.normal(0, TAPE_M, places.shape) * [1, 1, 0]
        uv = optics.project(p, taped, SIZE) + rng.normal(0, CLICK_PX, (len(places), 2))
        seen = np.flatnonzero(np.all((uv > 0) & (uv < np.array(SIZE) - 1), axis=1))
        count = int(rng.integers(least, 15))
        if seen.size < least:
            continue
        # Ends first, then whatever else: nobody leaves out the ends on purpose.
        ends = [i for i in seen if places[i, 0] in (places[seen, 0].min(), places[seen, 0].max())]
        rest = rng.permutation([i for i in seen if i not in ends])
        chosen = sorted([*ends, *rest[: max(0, count - len(ends))]])
        if len(chosen) < least or np.ptp(places[chosen, 0]) < 3:
            continue
        marks = tuple(
            Mark(
                label=f"{places[i, 0]:g} m, y {places[i, 1]:g}",
                xyz_m=places[i],
                uv_px=uv[i],
                sd_px=CLICK_PX,
                sd_m=TAPE_M,
            )
            for i in chosen
        )
        return Setup(p, marks)


def accuracy(setups: Iterator[Setup]) -> None:
    rms, pulls, scale_pulls, refused = [], [], [], 0
    for s in setups:
        camera = resect(s.marks, SIZE, lane=LANE)
        if not isinstance(camera, Camera):
            refused += 1
            continue
        ends = [float(m.xyz_m[0]) for m in s.marks]
        x = np.linspace(min(ends), max(ends), 15)
        points = np.column_stack([x, np.full(15, LANE.centre_y_m), np.full(15, 0.95)])
        uv = optics.project(s.truth, points, SIZE)
        inside = np.all(np.isfinite(uv), axis=1) & np.all((uv > 0) & (uv < np.array(SIZE) - 1), axis=1)
        found = optics.to_plane(camera.parameters, uv[inside], SIZE, axis=1, value_m=LANE.centre_y_m)
        error = found[:, 0] - x[inside]
        _, by_p, _ = optics.lane_jacobian(camera.parameters, found, SIZE)
        sd = np.sqrt(np.einsum("ni,ij,nj->n", by_p[:, 0], camera.cov, by_p[:, 0]))
        rms.append(np.sqrt(np.mean(error**2)))
        pulls += list(error / sd)
        between = by_p[-1, 0] - by_p[0, 0]
        scale_pulls.append((error[-1] - error[0]) / np.sqrt(between @ camera.cov @ between))
    print("| quantity | n | value |\n|---|---|---|")
    print(f"| rms position error, median set-up | {len(rms)} | {100 * np.median(rms):.2f} cm |")
    print(f"| rms position error, worst 5 % | {len(rms)} | {100 * np.quantile(rms, 0.95):.2f} cm |")
    print(f"| pulls of x, sd | {len(pulls)} | {np.std(pulls):.2f} |")
    print(f"| x inside 95 % | {len(pulls)} | {100 * np.mean(np.abs(pulls) < 1.96):.1f} % |")
    print(
        f"| length between the ends inside 95 % | {len(scale_pulls)} "
        f"| {100 * np.mean(np.abs(scale_pulls) < 1.96):.1f} % |"
    )
    print(f"| set-ups refused | {refused + len(rms)} | {refused} |")


def spoilt(s: Setup, kind: str, rng: np.random.Generator) -> tuple[tuple[Mark, ...], set[str]]:
    """One gross mistake in a set of marks, and the labels that must be named."""
    marks = list(s.marks)
    i = int(rng.integers(len(marks)))
    m = marks[i]
    if kind == "click 15 px off":
        angle = rng.uniform(0, 2 * np.pi)
        uv = np.clip(m.uv_px + 15 * np.array([np.cos(angle), np.sin(angle)]), 0, np.array(SIZE) - 1)
        marks[i] = replace(m, uv_px=uv)
        return tuple(marks), {m.label}
    if kind in ("tape 0.5 m off", "tape 1 m off"):
        off = (0.5 if "0.5" in kind else 1.0) * rng.choice([-1, 1])
        marks[i] = replace(m, xyz_m=m.xyz_m + np.array([off, 0, 0]))
        return tuple(marks), {m.label}
    j = int(rng.choice([k for k in range(len(marks)) if k != i]))
    marks[i], marks[j] = replace(m, uv_px=marks[j].uv_px), replace(marks[j], uv_px=m.uv_px)
    return tuple(marks), {m.label, marks[j].label}


def mistakes(count: int, rng: np.random.Generator) -> None:
    print(
        "\n| mistake (in one of 8 or more marks) | n | named correctly | wrongly named too | missed |"
        "\n|---|---|---|---|---|"
    )
    for kind in ("none", "click 15 px off", "tape 0.5 m off", "tape 1 m off", "two swapped"):
        right = extra = missed = 0
        for _ in range(count):
            s = setup(rng, least=8)
            marks, guilty = (s.marks, set()) if kind == "none" else spoilt(s, kind, rng)
            camera = resect(marks, SIZE, lane=LANE)
            named = (
                {m.label for m, used in zip(camera.marks, camera.used, strict=True) if not used}
                if isinstance(camera, Camera)
                else set()
            )
            right += named == guilty
            extra += bool(named - guilty)
            missed += not guilty <= named
        print(
            f"| {kind} | {count} | {100 * right / count:.1f} % | {100 * extra / count:.1f} % "
            f"| {100 * missed / count:.1f} % |",
            flush=True,
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--setups", type=int, default=300, help="number of simulated set-ups per table row")
    parser.add_argument("--seed", type=int, default=1)
    given = parser.parse_args()
    rng = np.random.default_rng(given.seed)
    accuracy(setup(rng) for _ in range(given.setups))
    mistakes(given.setups, rng)


if __name__ == "__main__":
    main()
