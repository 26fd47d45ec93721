"""`vidkin demo` as a user runs it, held to its promises; and `vidkin export` of its result."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.io import loadmat

from vidkin.app import actions
from vidkin.files.layouts import data_folder
from vidkin.files.store import OWN_FILES

#: Not comparable: a drag constant fitted with the power lumps the body's own losses into the air's.
LUMPED = {"k_drag"}


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """One run in a folder of its own, as the README has it: what it printed, what it wrote, and the truth."""
    folder = tmp_path_factory.mktemp("demo")
    found = subprocess.run(
        [sys.executable, "-m", "vidkin", "demo"],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(Path(__file__).resolve().parents[2])},
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        check=False,
    )
    assert found.returncode == 0, found.stderr
    assert found.stderr == ""
    known = json.loads((data_folder("demo_clips") / "clip.truth.json").read_text(encoding="utf-8"))
    return {
        "out": found.stdout,
        "folder": folder / "out" / "demo",
        "summary": json.loads((folder / "out" / "demo" / "summary.json").read_text(encoding="utf-8")),
        "truth": {name: value for name, value in known["quantities"].items() if name not in LUMPED},
        "splits": {split["distance_m"]: split["time_s"] for split in known["splits"]},
    }


def test_it_writes_every_file(demo: dict[str, Any]) -> None:
    assert {path.name for path in demo["folder"].iterdir()} == set(OWN_FILES) - {"export"}
    assert all(path.stat().st_size > 100 for path in demo["folder"].iterdir())


def test_it_prints_the_truth_beside_each_result(demo: dict[str, Any]) -> None:
    rows = {line.split()[0]: line for line in demo["out"].splitlines() if line[:1].isalpha()}
    for name in (*demo["truth"], *(f"split_{distance:g}" for distance in demo["splits"])):
        assert name in rows
    for name in LUMPED:
        assert name not in rows
    assert rows["top_speed"].rstrip().endswith("yes")
    assert "Report: out/demo/report.html\nVideo:  out/demo/tracked.mp4\n" in demo["out"]


def test_top_speed(demo: dict[str, Any]) -> None:
    found, truth = demo["summary"]["quantities"]["top_speed"], demo["truth"]["top_speed"]
    assert found["value"] == pytest.approx(truth, rel=0.01)


@pytest.mark.parametrize("name", ["F0", "V0", "P_max"])
def test_force_and_power(demo: dict[str, Any], name: str) -> None:
    found, truth = demo["summary"]["quantities"][name], demo["truth"][name]
    assert found["value"] == pytest.approx(truth, rel=0.05)


def test_splits(demo: dict[str, Any]) -> None:
    found = {split["distance_m"]: split for split in demo["summary"]["splits"]}
    assert len(demo["splits"]) >= 4
    for distance, truth in demo["splits"].items():
        split = found[distance]
        assert split["time_s"] == pytest.approx(truth, abs=0.02)
        assert split["low_s"] <= truth <= split["high_s"], distance


def test_every_truth_is_inside_its_interval(demo: dict[str, Any]) -> None:
    found = demo["summary"]["quantities"]
    compared = {name for name in demo["truth"] if "low" in found.get(name, {})}
    assert compared >= {"top_speed", "F0", "V0", "P_max", "first_movement", "step_rate", "step_length", "drag_force"}
    outside = {
        name: (found[name]["low"], demo["truth"][name], found[name]["high"])
        for name in compared
        if not found[name]["low"] <= demo["truth"][name] <= found[name]["high"]
    }
    assert outside == {}
    assert found["air_density"]["value"] == pytest.approx(demo["truth"]["air_density"], rel=1e-3)


def test_the_lumping_is_said(demo: dict[str, Any]) -> None:
    assert "lumped_drag" in {notice["code"] for notice in demo["summary"]["notices"]}


# --- a demo that fails ----------------------------------------------------------------------------


@pytest.fixture
def few_marks(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """The bundled clip with five marks in its sheet."""
    for name in ("clip.mp4", "clip.toml", "clip.truth.json"):
        (tmp_path / name).write_bytes((data_folder("demo_clips") / name).read_bytes())
    sheet = (tmp_path / "clip.toml").read_text(encoding="utf-8")
    (tmp_path / "clip.toml").write_text("[[mark]]".join(sheet.split("[[mark]]")[:6]), encoding="utf-8")
    monkeypatch.setattr(actions, "data_folder", lambda _name: tmp_path)
    monkeypatch.chdir(tmp_path)


@pytest.mark.usefixtures("few_marks")
def test_a_demo_that_fails(vidkin: Any) -> None:
    said = vidkin("demo")
    assert said.code == 4
    assert "Measured beside the known truth" in said.out
    assert "Report: out/demo/report.html" in said.out
    assert "tracked.mp4" not in said.out
    assert said.err.startswith("Error: Camera could not answer: 5 marks given, at least 6 are needed.")
    record = vidkin("demo", "--json", "--out", "elsewhere").record
    assert record["exit_code"] == 4
    (result,) = record["results"]
    known = json.loads(Path("clip.truth.json").read_text(encoding="utf-8"))
    assert result["truth"] == {"quantities": known["quantities"], "splits": known["splits"]}
    assert result["folder"] == "elsewhere"
    assert result["files"] == ["summary.json", "report.html"]


# --- export ---------------------------------------------------------------------------------------


def test_csv(vidkin: Any, demo: dict[str, Any], tmp_path: Path) -> None:
    said = vidkin("export", demo["folder"], "--format", "CSV", "--out", tmp_path / "x")
    assert (said.code, said.err) == (0, "")
    assert f"Wrote {tmp_path / 'x' / 'quantities.csv'}" in said.out.splitlines()
    table = pd.read_csv(tmp_path / "x" / "quantities.csv").set_index("name")
    assert table.loc["F0", "value"] == pytest.approx(demo["summary"]["quantities"]["F0"]["value"], rel=1e-9)


def test_mat(vidkin: Any, demo: dict[str, Any], tmp_path: Path) -> None:
    said = vidkin("export", demo["folder"], "--format", "mat", "--out", tmp_path / "r.mat", "--json")
    assert said.record["results"] == [{"folder": str(demo["folder"]), "files": [str(tmp_path / "r.mat")]}]
    motion = loadmat(tmp_path / "r.mat", simplify_cells=True)["motion"]
    np.testing.assert_allclose(motion["v_mps"], pd.read_csv(demo["folder"] / "motion.csv")["v_mps"], rtol=1e-9)


def test_json_goes_into_the_result(vidkin: Any, demo: dict[str, Any]) -> None:
    assert vidkin("export", demo["folder"], "--format", "json").code == 0
    made = json.loads((demo["folder"] / "export" / "result.json").read_text(encoding="utf-8"))
    assert made["summary"] == json.loads((demo["folder"] / "summary.json").read_text(encoding="utf-8"))


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda folder: folder / "nowhere", "is not there; a result folder is needed."),
        (lambda folder: folder, "holds no summary.json: it is no result folder."),
    ],
)
def test_what_is_no_result(vidkin: Any, tmp_path: Path, make: Callable[[Path], Path], words: str) -> None:
    said = vidkin("export", make(tmp_path), "--format", "csv")
    assert said.code == 5
    assert words in said.err
    assert said.err.endswith("Name the folder that `vidkin analyse` wrote.\n")
