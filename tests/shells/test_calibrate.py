"""`vidkin calibrate`: camera, error table and overlay from the first frame alone."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import pytest

import vidkin as package
from vidkin.app import analyse, calibrate
from vidkin.files import video
from vidkin.files.store import read_result
from vidkin.stages import Camera

Write = Callable[..., Path]


def test_camera_and_overlay(vidkin: Any, rep: Path) -> None:
    said = vidkin("calibrate", rep)
    assert (said.code, said.err) == (0, "")
    folder = rep.with_name("small-calibration")
    assert {path.name for path in folder.iterdir()} == {"summary.json", "camera.json", "overlay.png"}
    assert cv2.imread(str(folder / "overlay.png")).shape == (360, 640, 3)
    assert "marks, rms" in said.out
    assert "10 m, near line" in said.out
    assert "lane lengths known to" in said.out
    assert f"Look whether the overlay's lines lie on the track's own: {folder / 'overlay.png'}" in said.out


def test_for_programs(vidkin: Any, rep: Path, tmp_path: Path) -> None:
    said = vidkin("calibrate", rep, "--json", "--out", tmp_path / "c")
    (result,) = said.record["results"]
    assert result["camera"] == json.loads((tmp_path / "c" / "camera.json").read_text(encoding="utf-8"))
    assert result["files"] == ["camera.json", "overlay.png", "summary.json"]
    assert result["summary"]["provenance"]["inputs"]["sheet"] == "small.toml"


def test_it_is_the_camera_of_the_whole_job(rep: Path) -> None:
    first = calibrate(rep)
    # A calibration is no result of the same name: neither takes the other's place.
    whole = analyse(rep, pictures=False)
    assert first.folder != whole.folder
    assert (first.folder / "camera.json").read_bytes() == (whole.folder / "camera.json").read_bytes()


def test_only_the_first_frame_is_decoded(rep: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    taken = 0
    decoded = video.decoded

    def counted(*args: Any) -> Any:
        nonlocal taken
        for picture in decoded(*args):
            taken += 1
            yield picture

    monkeypatch.setattr(video, "decoded", counted)
    assert isinstance(calibrate(rep).analysis.camera, Camera)
    assert taken == 1


def test_marks_that_define_no_camera(vidkin: Any, more: Write) -> None:
    sheet = more("few.toml", marks=5)
    said = vidkin("calibrate", sheet)
    assert said.code == 4
    assert said.err.startswith("Error: Camera could not answer: 5 marks given, at least 6 are needed.")
    assert {path.name for path in sheet.with_name("few-calibration").iterdir()} == {"summary.json"}
    assert vidkin("calibrate", sheet, "--json").record["results"][0]["summary"]["failures"][0]["stage"] == "camera"


def test_marks_that_disagree(vidkin: Any, more: Write) -> None:
    def move_a_mark(text: str) -> str:
        head, mark, tail = text.partition('label = "5 m, near line"')
        number = tail.partition("u_px = ")[2].partition("\n")[0]
        return head + mark + tail.replace(f"u_px = {number}", f"u_px = {float(number) + 22:.1f}", 1)

    sheet = more("moved.toml", edit=move_a_mark)
    said = vidkin("calibrate", sheet)
    assert said.code == 0
    assert "Warning Camera: " in said.out
    (result,) = vidkin("calibrate", sheet, "--json").record["results"]
    assert [n for n in result["summary"]["notices"] if n["stage"] == "camera" and "'5 m, near line'" in n["text"]]


def test_again_in_the_same_place(rep: Path) -> None:
    assert calibrate(rep).files == calibrate(rep).files == ("camera.json", "overlay.png", "summary.json")


def test_names_with_spaces_accents_and_dashes(vidkin: Any, rep: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(rep.parent)
    shutil.copy("small.mp4", "-séance n° 3.mp4")
    text = rep.read_text(encoding="utf-8").replace("small.mp4", "-séance n° 3.mp4")
    Path("-séance n° 3.toml").write_text(text, encoding="utf-8")
    said = vidkin("calibrate", "--", "-séance n° 3.toml")
    assert said.code == 0, said.err
    assert "-séance n° 3-calibration/overlay.png" in said.out
    kept = read_result(Path("-séance n° 3-calibration"))
    assert kept.summary["provenance"]["inputs"]["clip"] == "-séance n° 3.mp4"


def test_a_sheet_name_that_is_no_utf8(rep: Path) -> None:
    sheet = rep.parent / "caf\udce9.toml"
    shutil.copy(rep, sheet)
    assert package.calibrate(sheet).analysis.provenance["inputs"]["sheet"] == "caf\\xe9.toml"
