"""The built wheel, installed in a folder of its own: it runs, carries its data, licence and type marker."""

from __future__ import annotations

import email
import os
import subprocess
import sys
import sysconfig
import venv
import zipfile
from pathlib import Path

import pytest

import vidkin


@pytest.fixture(scope="module")
def wheel(root: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("wheel")
    command = [sys.executable, "-m", "pip", "wheel", "--quiet", "--no-deps", "--wheel-dir", str(out), str(root)]
    made = subprocess.run(command, capture_output=True, text=True, check=False)
    assert made.returncode == 0, made.stderr
    (found,) = out.glob("*.whl")
    return found


@pytest.fixture(scope="module")
def python(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A fresh environment with the wheel; the dependencies are lent to it by this one."""
    folder = tmp_path_factory.mktemp("fresh") / "env"
    venv.create(folder, with_pip=False)
    python = folder / "bin" / "python"
    command = [sys.executable, "-m", "pip", "--python", str(python), "install", "--quiet", "--no-deps", str(wheel)]
    subprocess.run(command, check=True, capture_output=True)
    (site,) = (folder / "lib").glob("python*/site-packages")
    # Added as a plain path: an editable vidkin of this environment stays out of reach.
    (site / "lent.pth").write_text(sysconfig.get_path("purelib") + "\n", encoding="utf-8")
    return python


def _run(python: Path, folder: Path, *command: str) -> str:
    env = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
    found = subprocess.run(command, cwd=folder, env=env, capture_output=True, text=True, check=False)
    assert found.returncode == 0, found.stderr
    assert python.parent.exists()
    return found.stdout


def test_it_says_its_version(python: Path, tmp_path: Path) -> None:
    said = _run(python, tmp_path, str(python.parent / "vidkin"), "--version")
    assert said == f"vidkin {vidkin.__version__}\n"
    assert _run(python, tmp_path, str(python), "-m", "vidkin", "--version") == said


def test_it_finds_the_packaged_data(python: Path, tmp_path: Path) -> None:
    code = """
import vidkin
from pathlib import Path
from vidkin.files.layouts import data_folder, layout_names, read_layout
from vidkin.files.sheets import read_sheet
package = Path(vidkin.__file__).resolve().parent
assert data_folder("calibration") == package / "_data" / "calibration"
assert data_folder("demo_clips") == package / "_data" / "demo_clips"
assert [read_layout(name).points for name in layout_names()]
sheet = read_sheet(data_folder("demo_clips") / "clip.toml")
assert sheet.clip_path.stat().st_size > 100_000
print(package)
"""
    package = Path(_run(python, tmp_path, str(python), "-c", code).strip())
    assert package.is_relative_to(python.parents[1])


def test_what_it_holds(wheel: Path, root: Path) -> None:
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
        metadata = email.message_from_bytes(archive.read(next(n for n in names if n.endswith("/METADATA"))))
        licence = next(n for n in names if n.endswith("LICENSE") and ".dist-info/" in n)
        assert archive.read(licence) == (root / "vidkin" / "LICENSE").read_bytes()
    assert metadata["Version"] == vidkin.__version__
    assert metadata["License-Expression"] == "BSD-3-Clause"
    assert "vidkin/py.typed" in names
    assert {"vidkin/_data/demo_clips/clip.mp4", "vidkin/_data/demo_clips/clip.truth.json"} <= set(names)
    assert any(n.startswith("vidkin/_data/calibration/layouts/") for n in names)
    assert not [n for n in names if n.endswith(".pyc") or n.startswith("tests/")]
    assert wheel.stat().st_size < 5_000_000
