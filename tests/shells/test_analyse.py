"""`vidkin analyse` on a small rendered clip: files, exit codes, several sheets at once."""

from __future__ import annotations

import hashlib
import json
import platform
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.metadata import version
from pathlib import Path
from typing import Any

import av
import cv2
import numpy as np
import pandas as pd
import pytest

import vidkin as vidkin_package
from vidkin import app as actions
from vidkin.app import Failed, Outcome, analyse, analyse_all, jobs
from vidkin.errors import ExportError, FootageError, UsageError
from vidkin.files.store import OWN_FILES, read_result

Write = Callable[..., Path]
WRITTEN = set(OWN_FILES) - {"export"}


def _another_lane(text: str) -> str:
    return text.replace("centre_y_m = 0.61", "centre_y_m = 4.5")


@dataclass(frozen=True)
class Done:
    outcome: Outcome
    told: list[tuple[str, int, int | None]]


@pytest.fixture(scope="module")
def done(shared_rep: Path) -> Done:
    told: list[tuple[str, int, int | None]] = []
    outcome = analyse(
        shared_rep,
        progress=lambda stage, done, total: told.append((stage, done, total)),
        clock=lambda: datetime(2031, 5, 4, 9, 30, tzinfo=UTC),
    )
    return Done(outcome, told)


def test_the_whole_job(done: Done, shared_rep: Path) -> None:
    folder = shared_rep.with_name("small-result")
    assert done.outcome.folder == folder
    assert done.outcome.exit_code == actions.exit_code_of(done.outcome.analysis) == 0
    names = {path.name for path in folder.iterdir()}
    assert names == set(done.outcome.files)
    assert WRITTEN - {"steps.csv"} <= names <= WRITTEN
    assert [path.name for path in shared_rep.parent.iterdir() if path.name.startswith(".")] == []
    page = (folder / "report.html").read_text(encoding="utf-8")
    for name in names - {"report.html"}:
        assert f'href="./{name}"' in page
    speed = pd.read_csv(folder / "motion.csv")
    assert 7.5 < speed["v_mps"].max() < 9.5


def test_its_provenance(done: Done) -> None:
    provenance = read_result(done.outcome.folder).summary["provenance"]
    assert provenance["date"] == "2031-05-04T09:30:00+00:00"
    assert provenance["versions"] == {
        "python": platform.python_version(),
        **{package: version(package) for package in ("numpy", "scipy", "av")},
        "opencv": cv2.__version__,
    }
    assert provenance["vidkin"] == vidkin_package.__version__
    assert provenance["settings"] == {"level": 0.95, "window_s": None}
    for name, path in (("clip", "small.mp4"), ("sheet", "small.toml")):
        data = done.outcome.sheet.with_name(path).read_bytes()
        assert provenance["inputs"][name] == path
        assert provenance["inputs"][f"{name}_sha256"] == hashlib.sha256(data).hexdigest()


def test_its_progress(done: Done) -> None:
    frames = done.outcome.analysis.footage.t_s.size
    stages = [stage for stage, _, _ in done.told]
    assert list(dict.fromkeys(stages)) == ["read", "track", "fit", "draw"]
    for stage in ("read", "track", "draw"):
        assert stages.count(stage) == frames
    assert {total for stage, _, total in done.told if stage != "read"} == {frames}
    assert {total for stage, _, total in done.told if stage == "read"} == {None}


def test_the_tracked_video_keeps_the_true_times(done: Done) -> None:
    with av.open(str(done.outcome.folder / "tracked.mp4")) as video:
        times = [float(frame.time or 0.0) for frame in video.decode(video=0)]
        assert video.streams.video[0].codec_context.name == "h264"
    np.testing.assert_allclose(times, done.outcome.analysis.footage.t_s, atol=1e-4)


def test_on_paper(vidkin: Any, done: Done, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(actions, "analyse", lambda *_args, **_more: done.outcome)
    said = vidkin("analyse", "small.toml")
    assert (said.code, said.err) == (0, "")
    for words in ("top_speed", "95 % interval", "split_10", f"Report: {done.outcome.folder / 'report.html'}"):
        assert words in said.out
    assert "\x1b" not in said.out


def test_for_programs(vidkin: Any, shared_rep: Path, tmp_path: Path) -> None:
    out = tmp_path / "o"
    said = vidkin("analyse", shared_rep, "--out", out, "--no-pictures", "--json", "--level", "0.9", "--window", "0.4")
    assert (said.code, said.err) == (0, "")
    (result,) = said.record["results"]
    assert said.record["schema"] == "vidkin-run-1"
    assert result["summary"] == json.loads((out / "summary.json").read_text(encoding="utf-8"))
    assert result["summary"]["provenance"]["settings"] == {"level": 0.9, "window_s": 0.4}
    assert result["summary"]["quantities"]["top_speed"]["level"] == 0.9
    assert set(result["files"]) == {path.name for path in out.iterdir()}
    assert not {"overlay.png", "tracked.mp4"} & set(result["files"])
    assert result["exit_code"] == 0


def test_an_older_result_is_replaced_whole(done: Done, shared_rep: Path, tmp_path: Path) -> None:
    out = tmp_path / "o"
    shutil.copytree(done.outcome.folder, out)
    (out / "mine.txt").write_text("a note", encoding="utf-8")
    analyse(shared_rep, out, pictures=False)
    assert not (out / "tracked.mp4").exists()
    assert read_result(out).summary["provenance"]["date"] != "2031-05-04T09:30:00+00:00"
    assert (out / "mine.txt").read_text(encoding="utf-8") == "a note"


# --- what goes wrong ------------------------------------------------------------------------------


def test_too_few_marks(vidkin: Any, more: Write) -> None:
    said = vidkin("analyse", more("few.toml", marks=4))
    assert said.code == 4
    assert said.err.startswith("Error: Camera could not answer: 4 marks given, at least 6 are needed.")
    folder = more("few.toml", marks=4).with_name("few-result")
    assert {path.name for path in folder.iterdir()} == {"summary.json", "report.html"}
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    assert summary["quantities"] == {}
    assert summary["failures"][0]["code"] == "too_few_marks"


def test_a_stage_that_could_not_answer(vidkin: Any, more: Write) -> None:
    sheet = more("lane.toml", edit=_another_lane)
    said = vidkin("analyse", sheet)
    assert said.code == 6
    assert said.err.startswith("Error: Track could not answer: ")
    names = {path.name for path in sheet.with_name("lane-result").iterdir()}
    assert names == {"summary.json", "camera.json", "overlay.png", "report.html"}
    said = vidkin("analyse", sheet, "--json")
    assert said.record["exit_code"] == 6
    assert said.record["results"][0]["summary"]["failures"]


def test_a_clip_that_is_none(vidkin: Any, more: Write) -> None:
    sheet = more("text.toml", clip="small.toml")
    said = vidkin("analyse", sheet)
    assert said.code == 3
    assert said.err.startswith(f"Error: {sheet.with_name('small.toml')}")
    assert not sheet.with_name("text-result").exists()
    with pytest.raises(FootageError):
        analyse(sheet)


def test_a_place_that_is_taken_is_found_out_first(vidkin: Any, rep: Path, tmp_path: Path) -> None:
    (tmp_path / "taken").write_text("mine", encoding="utf-8")
    told: list[str] = []
    with pytest.raises(ExportError, match="is a file"):
        analyse(rep, tmp_path / "taken", progress=lambda stage, _done, _total: told.append(stage))
    assert told == []
    assert vidkin("analyse", rep, "--out", tmp_path / "taken").code == 5
    assert (tmp_path / "taken").read_text(encoding="utf-8") == "mine"


def test_a_sheet_that_is_none(vidkin: Any, tmp_path: Path) -> None:
    said = vidkin("analyse", tmp_path / "none.toml")
    assert said.code == 2
    assert said.err == f"Error: {tmp_path / 'none.toml'}: there is no such sheet.\nCheck the name.\n"


# --- several sheets -------------------------------------------------------------------------------


def _content(folder: Path) -> dict[str, Any]:
    """Everything in a result but the date."""
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    del summary["provenance"]["date"]
    tables = {path.name: path.read_bytes() for path in folder.iterdir() if path.suffix in (".csv", ".png", ".mp4")}
    return {"summary": summary, "camera": (folder / "camera.json").read_bytes(), **tables}


def test_results_do_not_depend_on_the_jobs(process: Any, rep: Path, more: Write, tmp_path: Path) -> None:
    sheets = [more("lane.toml", edit=_another_lane), rep]
    for jobs_at_once in (1, 2):
        said = process("analyse", *sheets, "--out", tmp_path / str(jobs_at_once), "--jobs", jobs_at_once)
        assert said.code == 6, said.err
    for sheet in sheets:
        alone, together = (_content(tmp_path / number / f"{sheet.stem}-result") for number in ("1", "2"))
        assert alone.keys() == together.keys()
        for name, content in alone.items():
            assert content == together[name], name


def test_a_bad_one_never_stops_the_rest(vidkin: Any, rep: Path, more: Write) -> None:
    bad, lane, none = more("bad.toml", clip="bad.toml"), more("lane.toml", edit=_another_lane), rep.with_name("n.toml")
    said = vidkin("analyse", "--no-pictures", "--jobs", 2, bad, rep, lane, none)
    assert said.code == 2
    assert "4 sheets" in said.out
    table = " ".join(said.out.split())
    for words in ("error 3", "error 2", "no answer from track", "ok"):
        assert words in table
    assert f"Error: {bad}: " in said.err
    assert f"Error: {lane}: Track could not answer: " in said.err
    assert f"Error: {none}: there is no such sheet.\nCheck the name." in said.err
    assert rep.with_name("small-result").is_dir()
    assert not rep.with_name("bad-result").exists()


def test_several_as_json(vidkin: Any, rep: Path, more: Write, tmp_path: Path) -> None:
    few = more("few.toml", marks=5)
    said = vidkin("analyse", "--json", "--no-pictures", "--out", tmp_path / "all", few, rep.with_name("none.toml"), rep)
    assert said.code == said.record["exit_code"] == 2
    results = said.record["results"]
    assert [result["exit_code"] for result in results] == [4, 2, 0]
    assert [result["sheet"] for result in results] == [str(few), str(rep.with_name("none.toml")), str(rep)]
    assert results[1]["error"]["hint"] == "Check the name."
    assert results[2]["folder"] == str(tmp_path / "all" / "small-result")
    assert results[2]["summary"]["quantities"]["top_speed"]["unit"] == "m/s"


def test_two_sheets_for_one_folder(vidkin: Any, rep: Path, tmp_path: Path) -> None:
    (tmp_path / "sub").mkdir()
    said = vidkin("analyse", rep, tmp_path / "sub" / "small.toml", "--out", tmp_path / "all")
    assert said.code == 2
    assert said.err.startswith(
        f"Error: 2 of the sheets would write into the same folder, {(tmp_path / 'all' / 'small-result').resolve()}."
    )
    with pytest.raises(UsageError):
        analyse_all([rep, rep])


def test_finished_is_told_of_each(rep: Path) -> None:
    told: list[Outcome | Failed] = []
    every = analyse_all([rep.with_name("x.toml"), rep.with_name("y.toml")], finished=told.append)
    assert told == every
    assert [one.exit_code for one in every] == [2, 2]
    assert all("Traceback" in one.trace for one in every if isinstance(one, Failed))


def test_a_fault_of_one_never_stops_the_rest(vidkin: Any, rep: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(sheet: Path, _folder: Path, **_more: object) -> None:
        raise RuntimeError(f"no luck with {sheet.name}")

    monkeypatch.setattr(jobs, "analyse", fails)
    said = vidkin("analyse", "--debug", rep, rep.with_name("b.toml"))
    assert said.code == 1
    assert f"Error: {rep}: Internal error: RuntimeError: no luck with small.toml" in said.err
    assert "This is a fault of vidkin; run again with --debug and report what it prints." in said.err
    assert said.err.count("Traceback") == 2


def test_a_process_that_dies_takes_no_other_with_it(start: Any, tmp_path: Path) -> None:
    script = tmp_path / "script.py"
    script.write_text(
        """
import os
from pathlib import Path
from vidkin.app import jobs

def guarded(task):
    if task.sheet.stem == "killer":
        os._exit(9)
    return jobs.Failed(sheet=task.sheet, message="was read", hint="", exit_code=2)

jobs._guarded = guarded

if __name__ == "__main__":
    names = ["a", "killer", "b"]
    for one in jobs.analyse_all([Path(name) for name in names], jobs=2):
        print(one.sheet, one.exit_code, one.message, one.hint)
""",
        encoding="utf-8",
    )
    running = start(script)
    out, err = running.communicate(timeout=120)
    assert out.splitlines() == [
        "a 2 was read ",
        "killer 1 The process that analysed this sheet ended abruptly. If memory ran out, use fewer --jobs; if not, "
        "the clip may be damaged: copy it from the phone again.",
        "b 2 was read ",
    ], err
