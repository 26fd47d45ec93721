"""Accuracy and interval coverage on random rendered scenes: prints a table per quantity and a line per scene.

    python tests/bench/accuracy.py --scenes 24 --seed 1 --jobs 2

Each scene is rendered from a random athlete, camera (8-25 m, both sides of the lane), field of view, direction, light,
lateral position and lens; written as H.264 like a phone would; its marks are clicked with 0.7 px error; and the whole
job is run on the file. Errors are against the scene's truth. Nothing here is tuned: the scenes come from the seed.
"""

from __future__ import annotations

import argparse
import os
import tempfile
import time
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, field
from multiprocessing import get_context
from pathlib import Path

import numpy as np

# One thread per process, set before numpy's users start: the processes share the cores.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

CLICK_SD_PX = 0.7
#: Quantities whose error is shown as a difference, with unit and factor; all others in percent of the truth.
ABSOLUTE = {
    "top_speed_at": ("cm", 100.0),
    "first_movement": ("ms", 1000.0),
    "split": ("ms", 1000.0),
    "lateral": ("cm", 100.0),
    "drag_power_share": ("points", 1.0),
}


@dataclass(slots=True)
class Row:
    """One quantity of one scene, in shown units: error, half width of its interval, and whether it holds the truth."""

    name: str
    error: float
    half: float
    inside: bool


@dataclass(slots=True)
class Result:
    seed: int
    words: str
    rows: list[Row] = field(default_factory=list)
    refused: list[str] = field(default_factory=list)
    seconds: float = 0.0
    frames: int = 0


def shown(name: str, value: float, truth: float, low: float, high: float) -> Row:
    """Error in percent, or in the unit of `ABSOLUTE`."""
    factor = ABSOLUTE[name][1] if name in ABSOLUTE else 100.0 / abs(truth)
    return Row(name, factor * (value - truth), factor * (high - low) / 2, bool(low <= truth <= high))


def run(seed: int) -> Result:
    """Render, write, analyse, compare."""
    from vidkin.core import synth
    from vidkin.core.pipeline import Scan, analyse
    from vidkin.files.video import open_clip
    from vidkin.files.video_writer import VideoWriter
    from vidkin.stages import Fit, Motion, Rep, Steps

    rng = np.random.default_rng(seed)
    scene = synth.random_scene(rng)
    truth, marks = synth.truth(scene), synth.marks(scene, rng, sd_px=CLICK_SD_PX)
    lane = scene.lane
    distance = abs(scene.camera[4] - lane.centre_y_m)
    out = Result(
        seed,
        f"{scene.runner.start:8s} {scene.rate_hz:3.0f} Hz {distance:4.1f} m, camera {scene.camera[5]:.1f} m high, "
        f"{'left' if scene.camera[4] > lane.centre_y_m else 'right'} of the runner, {len(marks)} marks",
    )
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "clip.mp4"
        with VideoWriter(path, scene.size_px, rate=scene.rate_hz, crf=22) as writer:
            for frame in synth.render(scene):
                writer.write_planes(frame.luma, frame.chroma_u, frame.chroma_v)
        begin = time.perf_counter()
        scan = Scan(Rep(clip="clip.mp4", athlete=scene.runner.athlete, air=scene.air, lane=lane, marks=marks))
        clip = open_clip(path, visit=scan.visit)
        analysis = analyse(scan, clip.footage, clip.frames)
        out.seconds, out.frames = time.perf_counter() - begin, clip.footage.t_s.size
    if isinstance(analysis.steps, Steps):
        s = analysis.steps
        y, z = scene.runner.y_m, 1.96 * s.lateral_sd_m
        out.rows.append(shown("lateral", s.lateral_m, y, s.lateral_m - z, s.lateral_m + z))
    if isinstance(analysis.motion, Motion):
        m = analysis.motion
        law = np.interp(m.t_s, truth.t_s, truth.law_v_mps)
        here = m.inside & (law > 1.0)
        for i in np.flatnonzero(here)[:: max(1, int(np.count_nonzero(here) / 8))]:
            v, half = float(m.v_mps[i]), 1.96 * float(m.v_sd_mps[i])
            out.rows.append(shown("v_mps (curve)", v, float(law[i]), v - half, v + half))
    if isinstance(analysis.fit, Fit):
        for name, q in analysis.fit.quantities.items():
            if name in truth.quantities and q.low is not None and q.high is not None and "lumped" not in q.method:
                out.rows.append(shown(name, q.value, truth.quantities[name], q.low, q.high))
        out.rows += [
            shown("split", s.time_s, truth.splits_s[s.distance_m], s.low_s, s.high_s)
            for s in analysis.fit.splits
            if s.distance_m in truth.splits_s
        ]
    out.refused = [f.code for f in analysis.failures]
    return out


def report(results: Iterable[Result]) -> None:
    """Print a line per scene, then the table."""
    rows: list[Row] = []
    for r in results:
        top = next((f"{x.error:+.2f} %" for x in r.rows if x.name == "top_speed"), "-")
        print(
            f"{r.seed:5d}  {r.words}; top speed {top}; {r.frames / max(r.seconds, 1e-9):.0f} frames/s"
            + (f"; refused: {', '.join(r.refused)}" if r.refused else ""),
            flush=True,
        )
        rows += r.rows
    print("\n| quantity | n | unit | bias | rms error | largest | half width (median) | inside 95 % |")
    print("|---|---|---|---|---|---|---|---|")
    for name in dict.fromkeys(r.name for r in rows):
        e = np.array([r.error for r in rows if r.name == name])
        half = np.median([r.half for r in rows if r.name == name])
        inside = 100 * np.mean([r.inside for r in rows if r.name == name])
        unit = ABSOLUTE[name][0] if name in ABSOLUTE else "%"
        rms, largest = np.sqrt(np.mean(e**2)), np.abs(e).max()
        print(
            f"| {name} | {e.size} | {unit} | {e.mean():+.2f} | {rms:.2f} | {largest:.2f} | {half:.2f} "
            f"| {inside:.0f} % |"
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scenes", type=int, default=24, help="number of random scenes")
    parser.add_argument("--seed", type=int, default=1, help="first scene's seed")
    parser.add_argument("--jobs", type=int, default=2, help="processes")
    given = parser.parse_args()
    seeds = range(given.seed, given.seed + given.scenes)
    with ProcessPoolExecutor(given.jobs, mp_context=get_context("spawn")) as pool:
        report(pool.map(run, seeds))


if __name__ == "__main__":
    main()
