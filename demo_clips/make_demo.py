"""Makes the demo: clip.mp4, clip.toml (its sheet) and clip.truth.json, all from one invented scene.

Run it from anywhere:  python demo_clips/make_demo.py [FOLDER]
Sheet, truth and rendered frames are the same on every run with the same numpy, scipy and OpenCV. The bytes of clip.mp4
may differ between versions of the H.264 encoder, and with them the decoded frames by a grey level or two.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np

from vidkin.core import synth
from vidkin.files.video_writer import VideoWriter
from vidkin.stages import CAMERA_PARAMETERS, Air, Athlete, Mark

_SIZE = (1920, 1080)
_RATE = 120
_QUALITY = 24
_CLICK_SD_PX = 0.7


def scene() -> synth.Scene:
    """The demo's scene: athlete A, a training run on a club track, phone on a tripod in the infield."""
    f_px = 0.5 * _SIZE[0] / np.tan(np.radians(68.0) / 2)
    runner = synth.Runner(
        athlete=Athlete(label="A", mass_kg=71.0, stature_m=1.74),
        F0_n_kg=7.7,
        V0_mps=9.9,
        drag_area_m2=0.452,
        y_m=0.61 + 0.045,
        first_movement_s=0.70,
        set_back_m=0.28,
        step_rate_hz=4.5,
    )
    return synth.Scene(
        camera=(
            float(f_px), -0.045, 0.008, 10.3, -16.4, 1.52, np.pi / 2 - 0.012, np.radians(-2.2), np.radians(0.6),
        ),
        size_px=_SIZE,
        rate_hz=float(_RATE),
        duration_s=4.3,
        runner=runner,
        air=Air(temperature_c=18.0, pressure_hpa=1012.0, humidity_pct=55.0, wind_mps=0.3),
        seed=7,
    )  # fmt: skip


def sheet(scene: synth.Scene, marks: tuple[Mark, ...]) -> str:
    """The clip's sheet, as a coach would have written it."""
    athlete, air, lane = scene.runner.athlete, scene.air, scene.lane
    lines = [
        "# Athlete A, an invented training run: crouched start, phone on a tripod in the infield.",
        'clip = "clip.mp4"',
        "",
        "[athlete]",
        f'label = "{athlete.label}"',
        f"mass_kg = {athlete.mass_kg}",
        f"stature_m = {athlete.stature_m}",
        "",
        "[air]",
        f"temperature_c = {air.temperature_c}",
        f"pressure_hpa = {air.pressure_hpa}",
        f"humidity_pct = {air.humidity_pct}",
        f"wind_mps = {air.wind_mps}",
        "",
        "[lane]",
        f"start_x_m = {lane.start_x_m}",
        f"centre_y_m = {lane.centre_y_m}",
        f"width_m = {lane.width_m}",
        "",
        "[camera]",
        "hfov_deg = 68.0",
        "height_m = 1.5",
        "distance_m = 17.0",
    ]
    for mark in marks:
        x, y, z = (round(float(c), 3) for c in mark.xyz_m)
        u, v = (round(float(c), 1) for c in mark.uv_px)
        lines += ["", "[[mark]]", f'label = "{mark.label}"', f"x_m = {x}", f"y_m = {y}", f"z_m = {z}"]
        lines += [f"u_px = {u}", f"v_px = {v}"]
    return "\n".join(lines) + "\n"


def truth_record(scene: synth.Scene) -> dict[str, object]:
    """The truth as JSON: named quantities, splits, contacts, and the path at 100 Hz."""
    known = synth.truth(scene)
    each = slice(None, None, 10)

    def listed(values: object, digits: int) -> list[float]:
        return [round(float(v), digits) for v in values]  # type: ignore[attr-defined]

    return {
        "schema": "vidkin-truth-1",
        "about": "True values of clip.mp4, an invented scene. Times are clip times; frame i is at i/120 s, "
        "the middle of the exposure of the middle row. x, y, z: mass-weighted centre of the body. "
        "Law: dv/dt = F0 (1 - v/V0) - k_drag (v - w)|v - w| per kilogram, w the tailwind, from first_movement on.",
        "camera": dict(zip(CAMERA_PARAMETERS, scene.camera, strict=True)),
        "lateral_m": scene.runner.y_m,
        "quantities": {name: round(value, 9) for name, value in known.quantities.items()},
        "splits": [{"distance_m": d, "time_s": round(s, 6)} for d, s in known.splits_s.items()],
        "view_s": list(known.view_s),
        "contacts": {
            "on_s": listed(known.contact_on_s, 6),
            "off_s": listed(known.contact_off_s, 6),
            "x_m": listed(known.contact_x_m, 6),
            "y_m": listed(known.contact_y_m, 6),
        },
        "path": {
            "t_s": listed(known.t_s[each], 3),
            "x_m": listed(known.x_m[each], 5),
            "y_m": listed(known.y_m[each], 5),
            "z_m": listed(known.z_m[each], 5),
            "law_x_m": listed(known.law_x_m[each], 5),
            "law_v_mps": listed(known.law_v_mps[each], 5),
        },
    }  # fmt: skip


def main(folder: Path) -> None:
    """Write the three files."""
    demo = scene()
    clicked = synth.marks(demo, np.random.default_rng(11), sd_px=_CLICK_SD_PX)
    (folder / "clip.toml").write_text(sheet(demo, clicked), encoding="utf-8")
    (folder / "clip.truth.json").write_text(json.dumps(truth_record(demo), indent=1) + "\n", encoding="utf-8")
    part = folder / "clip.part.mp4"
    with VideoWriter(part, _SIZE, rate=_RATE, crf=_QUALITY, preset="slow") as out:
        for frame in synth.render(demo):
            out.write_planes(frame.luma, frame.chroma_u, frame.chroma_v)
    part.replace(folder / "clip.mp4")
    print(f"clip.mp4: {(folder / 'clip.mp4').stat().st_size / 1e6:.2f} MB, {demo.frames} frames, {len(clicked)} marks")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent)
