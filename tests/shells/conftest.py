"""A small filmed rep of an invented run, rendered once; and how the tests call the command line."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

# Before numpy loads: matrices here are small, and threads of several test processes only get in one another's way.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np

from vidkin.cli import main
from vidkin.core import synth
from vidkin.files.video_writer import VideoWriter
from vidkin.stages import Air, Athlete

SIZE_PX = (640, 360)
RATE_HZ = 60.0


@dataclass(frozen=True)
class Said:
    """What a run of the command line left: its exit code and what it printed."""

    code: int
    out: str
    err: str

    @property
    def record(self) -> dict[str, Any]:
        """The one JSON object on standard output."""
        made = json.loads(self.out)
        assert isinstance(made, dict)
        return made


Run = Callable[..., Said]


@pytest.fixture
def vidkin(capsys: pytest.CaptureFixture[str]) -> Iterator[Run]:
    """Call the command line in this process."""
    before = signal.getsignal(signal.SIGTERM)

    def run(*args: object) -> Said:
        capsys.readouterr()
        with pytest.raises(SystemExit) as left:
            main([str(arg) for arg in args])
        said = capsys.readouterr()
        assert isinstance(left.value.code, int)
        return Said(left.value.code, said.out, said.err)

    yield run
    signal.signal(signal.SIGTERM, before)


def _environment() -> dict[str, str]:
    """This checkout's package, no terminal settings."""
    root = str(Path(__file__).resolve().parents[2])
    plain = {key: value for key, value in os.environ.items() if key not in ("FORCE_COLOR", "COLUMNS")}
    return plain | {"PYTHONPATH": root, "TERM": "xterm", "PYTHONUNBUFFERED": "1"}


@pytest.fixture
def start() -> Iterator[Callable[..., subprocess.Popen[str]]]:
    """Start Python in a process group of its own; whatever still runs at the end is stopped."""
    running: list[subprocess.Popen[str]] = []

    def begin(*args: object, cwd: Path | None = None, stderr: int = subprocess.PIPE) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [sys.executable, *(str(arg) for arg in args)],
            cwd=cwd,
            env=_environment(),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=stderr,
            text=True,
            start_new_session=True,
        )
        running.append(process)
        return process

    yield begin
    for process in running:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.communicate()


@pytest.fixture
def process(start: Callable[..., subprocess.Popen[str]]) -> Run:
    """Call the command line as a process of its own, with no terminal."""

    def run(*args: object, cwd: Path | None = None) -> Said:
        started = start("-m", "vidkin", *args, cwd=cwd)
        out, err = started.communicate()
        return Said(started.returncode, out, err)

    return run


def small_scene() -> synth.Scene:
    """A standing start, 16 m in view, a small picture."""
    focal_px = 0.5 * SIZE_PX[0] / np.tan(np.radians(68.0) / 2)
    return synth.Scene(
        camera=(float(focal_px), -0.02, 0.0, 8.0, -12.5, 1.5, np.pi / 2 - 0.01, np.radians(-2.2), np.radians(0.6)),
        size_px=SIZE_PX,
        rate_hz=RATE_HZ,
        duration_s=3.0,
        runner=synth.Runner(
            athlete=Athlete(label="A", mass_kg=71.0, stature_m=1.74),
            F0_n_kg=7.7,
            V0_mps=9.9,
            drag_area_m2=0.452,
            y_m=0.655,
            first_movement_s=0.4,
        ),
        air=Air(temperature_c=18.0, pressure_hpa=1012.0, humidity_pct=55.0, wind_mps=0.3),
        seed=7,
    )


def sheet_text(scene: synth.Scene, *, clip: str = "small.mp4", label: str = "A", marks: int | None = None) -> str:
    """A sheet for the scene with marks clicked to about a third of a pixel."""
    lines = [
        f'clip = "{clip}"',
        "[athlete]",
        f'label = "{label}"',
        "mass_kg = 71.0",
        "stature_m = 1.74",
        "[air]",
        "temperature_c = 18.0",
        "pressure_hpa = 1012.0",
        "humidity_pct = 55.0",
        "wind_mps = 0.3",
        "[lane]",
        "centre_y_m = 0.61",
        "[camera]",
        "hfov_deg = 68.0",
    ]
    for mark in synth.marks(scene, np.random.default_rng(3), sd_px=0.3)[:marks]:
        x, y, z = (float(n) for n in mark.xyz_m)
        u, v = (float(n) for n in mark.uv_px)
        lines += ["[[mark]]", f'label = "{mark.label}"', f"x_m = {x}", f"y_m = {y}", f"z_m = {z}"]
        lines += [f"u_px = {u:.1f}", f"v_px = {v:.1f}"]
    return "\n".join(lines) + "\n"


@pytest.fixture(scope="session")
def rendered(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The folder with small.mp4."""
    folder = tmp_path_factory.mktemp("rendered")
    with VideoWriter(folder / "small.mp4", SIZE_PX, rate=RATE_HZ) as writer:
        for frame in synth.render(small_scene()):
            writer.write_planes(frame.luma, frame.chroma_u, frame.chroma_v)
    return folder


def _place(rendered: Path, folder: Path) -> Path:
    shutil.copy(rendered / "small.mp4", folder)
    path = folder / "small.toml"
    path.write_text(sheet_text(small_scene()), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def shared_rep(rendered: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A sheet beside its clip, for all tests of a file: leave it as it is."""
    return _place(rendered, tmp_path_factory.mktemp("shared"))


@pytest.fixture
def rep(rendered: Path, tmp_path: Path) -> Path:
    """A sheet beside its clip, in a folder of its own."""
    return _place(rendered, tmp_path)


@pytest.fixture
def more(rep: Path) -> Callable[..., Path]:
    """Write another sheet beside the first."""

    def write(name: str, *, edit: Callable[[str], str] = str, **changes: Any) -> Path:
        path = rep.with_name(name)
        path.write_text(edit(sheet_text(small_scene(), **changes)), encoding="utf-8")
        return path

    return write
