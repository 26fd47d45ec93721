# Result folders: whole or not at all, never over somebody's files; the files of an analysis, and reading them back.
from __future__ import annotations

import dataclasses
import errno
import hashlib
import json
import os
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.stats import norm

from vidkin.errors import ExportError
from vidkin.files.store import OWN_FILES, read_result, result_folder, sha256_of, write_analysis
from vidkin.notices import Failure
from vidkin.stages import Analysis


def fill(out: Path, text: str = "new") -> None:
    with result_folder(out) as part:
        (part / "summary.json").write_text(json.dumps({"schema": "vidkin-summary-1", "text": text}))


def text_of(out: Path) -> str:
    return str(json.loads((out / "summary.json").read_text())["text"])


# --- the folder -----------------------------------------------------------------------------------


def test_a_result_appears_whole(tmp_path: Path) -> None:
    out = tmp_path / "deep" / "er" / "result"
    with result_folder(out) as part:
        assert part.parent == out.parent
        (part / "summary.json").write_text("{}")
        assert not out.exists()
    assert [p.name for p in out.parent.iterdir()] == ["result"]
    assert out.stat().st_mode & 0o777 == 0o777 & ~_umask()


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


@pytest.mark.parametrize("error", [ValueError, KeyboardInterrupt, SystemExit])
def test_an_interrupted_run_leaves_nothing(tmp_path: Path, error: type[BaseException]) -> None:
    def interrupted(out: Path) -> None:
        with result_folder(out) as part:
            (part / "motion.csv").write_text("half")
            raise error

    with pytest.raises(error):
        interrupted(tmp_path / "new")
    assert list(tmp_path.iterdir()) == []
    fill(tmp_path / "old", "before")
    with pytest.raises(error):
        interrupted(tmp_path / "old")
    assert [p.name for p in tmp_path.iterdir()] == ["old"]
    assert text_of(tmp_path / "old") == "before"


def test_an_older_result_is_replaced_but_not_other_peoples_files(tmp_path: Path) -> None:
    out = tmp_path / "result"
    fill(out, "before")
    (out / "overlay.png").write_text("stale")
    (out / "my notes.txt").write_text("keep me")
    fill(out, "after")
    assert text_of(out) == "after"
    assert sorted(p.name for p in out.iterdir()) == ["my notes.txt", "summary.json"]
    assert (out / "my notes.txt").read_text() == "keep me"
    assert [p.name for p in tmp_path.iterdir()] == ["result"]
    assert "overlay.png" in OWN_FILES


def test_an_empty_folder_and_a_link_are_filled(tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    fill(tmp_path / "empty")
    (tmp_path / "link").symlink_to(tmp_path / "empty")
    fill(tmp_path / "link", "through")
    assert (tmp_path / "link").is_symlink()
    assert text_of(tmp_path / "empty") == "through"


def refused(out: Path, words: str) -> None:
    before = sorted(out.parent.rglob("*"))
    with pytest.raises(ExportError, match=words) as caught:
        fill(out)
    assert caught.value.hint
    assert sorted(out.parent.rglob("*")) == before


def test_what_is_no_result_is_left_alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").touch()
    refused(tmp_path / "file", "is a file; the results need a folder")
    refused(tmp_path / "file" / "below", "cannot be written: (Not a directory|File exists)")
    (tmp_path / "photos").mkdir()
    (tmp_path / "photos" / "a.jpg").touch()
    refused(tmp_path / "photos", "is not empty and holds no result of vidkin; it is left alone")
    for text in ('{"schema": "other-1"}', "[]", "not json"):
        (tmp_path / "photos" / "summary.json").write_text(text)
        refused(tmp_path / "photos", "is not empty and holds no result")
    fill(tmp_path / "here")
    monkeypatch.chdir(tmp_path / "here")
    refused(tmp_path / "here", "holds the current folder and cannot be replaced")


def test_a_folder_that_cannot_be_looked_into(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def deny(self: Path) -> None:
        raise PermissionError(errno.EACCES, "Permission denied", str(self))

    (tmp_path / "locked").mkdir()
    monkeypatch.setattr(Path, "iterdir", deny)
    with pytest.raises(ExportError, match="locked cannot be written: Permission denied") as caught:
        fill(tmp_path / "locked")
    assert "in which you may write" in caught.value.hint


def test_a_place_that_fills_up_meanwhile_is_left_alone(tmp_path: Path) -> None:
    out = tmp_path / "result"

    def slow() -> None:
        with result_folder(out):
            out.mkdir()
            (out / "a.jpg").touch()

    with pytest.raises(ExportError, match="is not empty and holds no result"):
        slow()
    assert [p.name for p in tmp_path.rglob("*")] == ["result", "a.jpg"]


@pytest.mark.parametrize(
    ("number", "hint"),
    [
        (errno.EACCES, "in which you may write"),
        (errno.EROFS, "in which you may write"),
        (errno.ENOSPC, "Free some space"),
        (errno.EIO, "Check the folder and its disk"),
    ],
)
def test_a_parent_that_cannot_be_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, number: int, hint: str
) -> None:
    def deny(self: Path, *_: object, **__: object) -> None:
        raise OSError(number, os.strerror(number), str(self))

    monkeypatch.setattr(Path, "mkdir", deny)
    with pytest.raises(ExportError, match=f"result cannot be written: {os.strerror(number)}") as caught:
        fill(tmp_path / "result")
    assert hint in caught.value.hint


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="this system has no /dev/full to stand for a full disk")
def test_a_disk_that_fills_up(tmp_path: Path, analysis: Analysis) -> None:
    def run(out: Path, write: object) -> None:
        with result_folder(out) as part:
            os.symlink("/dev/full", part / "motion.csv")
            if write:
                write_analysis(analysis, part)
            else:
                (part / "motion.csv").write_bytes(b"x" * 100_000)

    for write in (True, False):
        with pytest.raises(ExportError, match="cannot be written: No space left on device") as caught:
            run(tmp_path / "result", write)
        assert "Free some space" in caught.value.hint
        assert list(tmp_path.iterdir()) == []


def test_an_error_that_is_not_the_folders_comes_through(tmp_path: Path) -> None:
    def run() -> None:
        with result_folder(tmp_path / "result"):
            (tmp_path.parent / "no such clip.mp4").read_bytes()

    with pytest.raises(FileNotFoundError):
        run()


def test_the_old_result_comes_back_if_the_new_one_cannot_move_in(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    fill(tmp_path / "result", "before")
    real = Path.rename

    def rename(self: Path, target: Path) -> Path:
        if self.suffix == ".part":
            raise OSError(errno.EIO, "Input/output error", str(self))
        return real(self, target)

    monkeypatch.setattr(Path, "rename", rename)
    with pytest.raises(ExportError, match="Input/output error"):
        fill(tmp_path / "result", "after")
    assert text_of(tmp_path / "result") == "before"
    assert [p.name for p in tmp_path.iterdir()] == ["result"]


# --- writing --------------------------------------------------------------------------------------


def test_the_summary_is_the_promised_one(tmp_path: Path, analysis: Analysis) -> None:
    write_analysis(analysis, tmp_path)
    text = (tmp_path / "summary.json").read_text(encoding="utf-8")
    summary = json.loads(text, parse_constant=lambda name: pytest.fail(f"{name} in JSON"))
    assert summary["schema"] == "vidkin-summary-1"
    assert summary["quantities"]["top_speed"] == {
        "value": 9.12,
        "low": 9.05,
        "high": 9.19,
        "level": 0.95,
        "unit": "m/s",
        "method": "profile",
    }
    assert summary["quantities"]["k_drag"] == {
        "value": 0.003,
        "why_no_interval": "not fitted",
        "unit": "1/m",
        "method": "given",
    }
    assert summary["splits"][0] == {"distance_m": 5.0, "time_s": 1.4, "low_s": 1.38, "high_s": 1.42}
    assert summary["notices"] == [
        {"code": "made_up", "stage": "motion", "severity": "info", "text": "Said 3.", "hint": 'Ünïcode, "quoted".'}
    ]
    assert summary["failures"] == [{"stage": "fit", "code": "no_drag", "reason": "too short", "hint": "film more"}]
    assert summary["provenance"]["settings"] == {"level": 0.9, "window_s": None}
    assert summary["provenance"]["numbers"] == [1.5, 2.5]
    assert summary["provenance"]["when"] == "2030-05-04T03:02:01+00:00"
    assert (summary["start"], summary["law"]) == ("standing", "mono")
    assert summary["laws"]["mono"]["sd"] == {"v_max": 0.1}  # an infinite one is left out
    assert "Ünïcode" in text


def test_motion_csv_has_the_promised_columns_and_interval(tmp_path: Path, analysis: Analysis) -> None:
    write_analysis(analysis, tmp_path)
    table = pd.read_csv(tmp_path / "motion.csv")
    assert list(table) == ["t_s", "x_m", "x_sd_m", "v_mps", "v_low_mps", "v_high_mps", "a_mps2"]
    motion = analysis.motion
    for column in ("t_s", "x_m", "x_sd_m", "v_mps", "a_mps2"):
        assert table[column].to_numpy() == pytest.approx(getattr(motion, column), rel=1e-9)
    half = norm.ppf(0.95) * motion.v_sd_mps  # level 0.9: 5 % on either side
    assert table["v_high_mps"].to_numpy() == pytest.approx(motion.v_mps + half, rel=1e-8)
    assert table["v_low_mps"].to_numpy() == pytest.approx(motion.v_mps - half, rel=1e-8)


def test_the_speeds_interval_covers_what_it_says(analysis: Analysis) -> None:
    from vidkin.files.records import motion_rows

    rng = np.random.default_rng(11)
    motion = analysis.motion
    n = motion.t_s.size
    inside, trials = 0, 800
    for _ in range(trials):
        measured = dataclasses.replace(motion, v_mps=motion.v_mps + motion.v_sd_mps * rng.standard_normal(n))
        rows = motion_rows(measured, 0.9)
        inside += int(((rows["v_low_mps"] <= motion.v_mps) & (motion.v_mps <= rows["v_high_mps"])).sum())
    assert inside / (n * trials) == pytest.approx(0.90, abs=4 * np.sqrt(0.09 / (n * trials)))


def test_the_other_tables_and_the_camera(tmp_path: Path, analysis: Analysis) -> None:
    write_analysis(analysis, tmp_path)
    assert (tmp_path / "splits.csv").read_text() == "distance_m,time_s,low_s,high_s\n5,1.4,1.38,1.42\n10,2.1,2,2.2\n"
    assert (tmp_path / "steps.csv").read_text() == "on_s,off_s,x_m\n0.4,0.5,1\n0.6,0.7,3.1\n"
    camera = json.loads((tmp_path / "camera.json").read_text())
    assert camera["schema"] == "vidkin-camera-1"
    assert camera["parameters"] == {
        "f_px": 1,
        "k1": 2,
        "k2": 3,
        "x_m": 4,
        "y_m": 5,
        "z_m": 6,
        "yaw_rad": 7,
        "pitch_rad": 8,
        "roll_rad": 9,
    }
    assert camera["sd"]["roll_rad"] == 9
    assert np.array(camera["cov"]).shape == (9, 9)
    assert camera["hfov_deg"] == analysis.camera.hfov_deg
    assert camera["marks"][1]["label"] == "mark 1"
    assert camera["marks"][1]["error_m"] == 0.02
    assert camera["x_sd_m"][1] == {"x_m": 10.0, "sd_m": 0.02}


def test_stages_that_failed_are_named_and_leave_no_file(tmp_path: Path, analysis: Analysis) -> None:
    failed = Failure(stage="motion", code="too_short", reason="0.2 s", hint="film longer")
    write_analysis(dataclasses.replace(analysis, motion=failed, fit=None), tmp_path)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["camera.json", "steps.csv", "summary.json"]
    result = read_result(tmp_path)
    assert [f["code"] for f in result.summary["failures"]] == ["too_short"]
    assert result.summary["quantities"] == {}
    assert result.summary["splits"] == []
    no_camera = Failure(stage="camera", code="few", reason="2 marks", hint="add some")
    folder = tmp_path / "b"
    folder.mkdir()
    write_analysis(dataclasses.replace(analysis, camera=no_camera, steps=None, motion=None, fit=None), folder)
    assert [p.name for p in folder.iterdir()] == ["summary.json"]
    assert read_result(folder).camera is None


def test_a_value_that_is_not_finite_is_named(tmp_path: Path, analysis: Analysis) -> None:
    bad = dataclasses.replace(analysis.fit.quantities["top_speed"], value=float("nan"))
    fit = dataclasses.replace(analysis.fit, quantities={"top_speed": bad})
    with pytest.raises(
        ExportError, match=r"summary\.json: quantities\.top_speed\.value is nan, which no result may hold"
    ):
        write_analysis(dataclasses.replace(analysis, fit=fit), tmp_path)
    assert list(tmp_path.iterdir()) == []


# --- reading --------------------------------------------------------------------------------------


def test_a_result_comes_back(tmp_path: Path, analysis: Analysis) -> None:
    write_analysis(analysis, tmp_path)
    result = read_result(tmp_path)
    assert set(result.tables) == {"motion", "splits", "steps"}
    assert result.tables["motion"]["t_s"].to_numpy() == pytest.approx(analysis.motion.t_s, rel=1e-9)
    assert result.camera is not None
    assert result.summary["law"] == "mono"


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("summary.json", "{", r"summary\.json cannot be read: "),
        ("summary.json", "[]", "holds no JSON object"),
        ("summary.json", '{"schema": "vidkin-summary-9"}', "schema 'vidkin-summary-9', expected 'vidkin-summary-1'"),
        ("summary.json", "{}", "schema None, expected"),
        ("camera.json", "{", r"camera\.json cannot be read"),
        ("motion.csv", "t_s,x_m\n1,2\n", "columns t_s, x_m; expected t_s, x_m, x_sd_m"),
        ("motion.csv", "", r"motion\.csv cannot be read"),
        ("splits.csv", "distance_m,time_s,low_s,high_s\n1,2,3,4\n5,,7,8\n", "line 3 has a gap"),
        ("splits.csv", "distance_m,time_s,low_s,high_s\n1,2,3,4\n5,inf,7,8\n", "line 3 has a gap"),
        ("splits.csv", "distance_m,time_s,low_s,high_s\n1,two,3,4\n", r"splits\.csv cannot be read: .*two"),
    ],
)
def test_a_damaged_result_is_named(tmp_path: Path, analysis: Analysis, name: str, text: str, words: str) -> None:
    write_analysis(analysis, tmp_path)
    (tmp_path / name).write_text(text)
    with pytest.raises(ExportError, match=words) as caught:
        read_result(tmp_path)
    assert str(tmp_path / name) in caught.value.message
    assert "analysis" in caught.value.hint


def test_what_is_no_result(tmp_path: Path) -> None:
    with pytest.raises(ExportError, match="is not there; a result folder is needed"):
        read_result(tmp_path / "none")
    (tmp_path / "file").touch()
    with pytest.raises(ExportError, match="is a file; a result folder is needed"):
        read_result(tmp_path / "file")
    with pytest.raises(ExportError, match=r"holds no summary\.json: it is no result folder"):
        read_result(tmp_path)


def test_the_hash_is_that_of_the_standard(tmp_path: Path) -> None:
    # FIPS 180-2, SHA-256 of "abc" (MEM, value from memory)
    path = tmp_path / "a"
    path.write_bytes(b"abc")
    assert sha256_of(path) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    path.write_bytes(b"x" * 3_000_000)
    assert sha256_of(path) == hashlib.sha256(b"x" * 3_000_000).hexdigest()
    with pytest.raises(FileNotFoundError):
        sha256_of(tmp_path / "none")
