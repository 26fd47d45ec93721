"""`vidkin analyse` on a small rendered clip: files, exit codes, several sheets at once."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import av
import numpy as np
import pandas as pd
import pytest

from vidkin import app as actions
from vidkin.app import Failed, Outcome, analyse, analyse_all, jobs
from vidkin.errors import ExportError, FootageError, UsageError
from vidkin.files.store import OWN_FILES, read_result
from vidkin.stages import Settings

Write = Callable[..., Path]
WRITTEN = set(OWN_FILES) - {"export"}


def _another_lane(text: str) -> str:
    return text.replace("centre_y_m = 0.61", "centre_y_m = 4.5")


def test_the_whole_job(vidkin: Any, rep: Path) -> None:
    said = vidkin("analyse", rep)
    assert said.code == 0, said.err
    assert said.err == ""
    folder = rep.with_name("small-result")
    assert {path.name for path in folder.iterdir()} <= WRITTEN
    assert {path.name for path in folder.iterdir()} >= WRITTEN - {"steps.csv"}
    assert [path.name for path in rep.parent.iterdir() if path.name.startswith(".")] == []
    for words in ("top_speed", "95 % interval", "split_10", f"Report: {folder / 'report.html'}"):
        assert words in said.out
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    provenance = summary["provenance"]
    assert set(provenance["versions"]) == {"python", "numpy", "scipy", "opencv", "av"}
    assert provenance["inputs"]["clip"] == "small.mp4"
    assert len(provenance["inputs"]["clip_sha256"]) == len(provenance["inputs"]["sheet_sha256"]) == 64
    assert provenance["settings"] == {"level": 0.95, "window_s": None}
    page = (folder / "report.html").read_text(encoding="utf-8")
    for name in WRITTEN - {"steps.csv", "report.html"}:
        assert f'href="./{name}"' in page


def test_the_tracked_video_keeps_the_true_times(rep: Path, tmp_path: Path) -> None:
    outcome = analyse(rep, tmp_path / "out")
    with av.open(str(outcome.folder / "tracked.mp4")) as video:
        times = [float(frame.time or 0.0) for frame in video.decode(video=0)]
        assert video.streams.video[0].codec_context.name == "h264"
    np.testing.assert_allclose(times, outcome.analysis.footage.t_s, atol=1e-4)


def test_its_record_is_the_summary(vidkin: Any, rep: Path, tmp_path: Path) -> None:
    said = vidkin(
        "analyse", rep, "--out", tmp_path / "o", "--no-pictures", "--json", "--level", "0.9", "--window", "0.4"
    )
    assert said.code == 0
    assert said.err == ""
    (result,) = said.record["results"]
    assert said.record["schema"] == "vidkin-run-1"
    assert result["summary"] == json.loads((tmp_path / "o" / "summary.json").read_text(encoding="utf-8"))
    assert result["summary"]["provenance"]["settings"] == {"level": 0.9, "window_s": 0.4}
    assert result["summary"]["quantities"]["top_speed"]["level"] == 0.9
    assert set(result["files"]) == {path.name for path in (tmp_path / "o").iterdir()}
    assert not {"overlay.png", "tracked.mp4"} & set(result["files"])
    assert result["exit_code"] == 0


def test_clock_and_progress(rep: Path, tmp_path: Path) -> None:
    told: list[tuple[str, int, int | None]] = []
    outcome = analyse(
        rep,
        tmp_path / "o",
        progress=lambda stage, done, total: told.append((stage, done, total)),
        clock=lambda: datetime(2031, 5, 4, 9, 30, tzinfo=UTC),
    )
    assert outcome.analysis.provenance["date"] == "2031-05-04T09:30:00+00:00"
    frames = outcome.analysis.footage.t_s.size
    stages = [stage for stage, _, _ in told]
    assert list(dict.fromkeys(stages)) == ["read", "track", "fit", "draw"]
    for stage in ("read", "track", "draw"):
        assert stages.count(stage) == frames
    assert {total for stage, _, total in told if stage != "read"} == {frames}
    assert {total for stage, _, total in told if stage == "read"} == {None}
    assert read_result(outcome.folder).summary["provenance"]["date"] == "2031-05-04T09:30:00+00:00"


def test_an_older_result_is_replaced_whole(rep: Path, tmp_path: Path) -> None:
    out = tmp_path / "o"
    analyse(rep, out)
    (out / "mine.txt").write_text("a note", encoding="utf-8")
    analyse(rep, out, pictures=False)
    assert not (out / "tracked.mp4").exists()
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


def test_names_with_spaces_accents_and_dashes(vidkin: Any, rep: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(rep.parent)
    shutil.copy("small.mp4", "-séance n° 3.mp4")
    text = rep.read_text(encoding="utf-8").replace("small.mp4", "-séance n° 3.mp4")
    Path("-séance n° 3.toml").write_text(text, encoding="utf-8")
    said = vidkin("analyse", "--no-pictures", "--", "-séance n° 3.toml")
    assert said.code == 0, said.err
    assert "Report: -séance n° 3-result/report.html" in said.out
    assert read_result(Path("-séance n° 3-result")).summary["provenance"]["inputs"]["clip"] == "-séance n° 3.mp4"


def test_a_sheet_name_that_is_no_utf8(rep: Path) -> None:
    sheet = rep.parent / "caf\udce9.toml"
    shutil.copy(rep, sheet)
    outcome = analyse(sheet, pictures=False)
    assert outcome.analysis.provenance["inputs"]["sheet"] == "caf\\xe9.toml"


# --- several sheets -------------------------------------------------------------------------------


def _content(folder: Path) -> dict[str, Any]:
    """Everything in a result but the date."""
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    del summary["provenance"]["date"]
    tables = {path.name: path.read_bytes() for path in folder.iterdir() if path.suffix in (".csv", ".png", ".mp4")}
    return {"summary": summary, "camera": (folder / "camera.json").read_bytes(), **tables}


def test_results_do_not_depend_on_the_jobs(rep: Path, more: Write, tmp_path: Path) -> None:
    sheets = [rep, more("b.toml", label="B", marks=8)]
    one = analyse_all(sheets, tmp_path / "one", jobs=1, settings=Settings(level=0.9))
    two = analyse_all(sheets, tmp_path / "two", jobs=2, settings=Settings(level=0.9))
    for alone, together in zip(one, two, strict=True):
        assert isinstance(alone, Outcome)
        assert isinstance(together, Outcome)
        assert alone.folder.name == together.folder.name
        assert _content(alone.folder) == _content(together.folder)
    assert [o.sheet for o in two] == sheets


@pytest.mark.parametrize("at_once", [1, 2])
def test_a_bad_one_never_stops_the_rest(vidkin: Any, rep: Path, more: Write, at_once: int) -> None:
    bad, lane = more("bad.toml", clip="bad.toml"), more("lane.toml", edit=_another_lane)
    said = vidkin("analyse", "--no-pictures", "--jobs", at_once, bad, rep, lane, rep.with_name("none.toml"))
    assert said.code == 2
    rows = {line.split()[0]: line for line in said.out.splitlines() if line.startswith(str(rep.parent))}
    assert set(rows) <= {str(rep.with_name(name)) for name in ("bad.toml", "small.toml", "lane.toml", "none.toml")}
    assert "4 sheets" in said.out
    for words in ("error 3", "error 2", "no answer from track"):
        assert words in said.out
    assert f"Error: {bad}: " in said.err
    assert f"Error: {lane}: Track could not answer: " in said.err
    assert f"Error: {rep.with_name('none.toml')}: there is no such sheet.\nCheck the name." in said.err
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
    names = ["a", "killer", "b", "c", "d"]
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
        "c 2 was read ",
        "d 2 was read ",
    ], err


def test_public_name(rep: Path, tmp_path: Path) -> None:
    import vidkin as package

    outcome = package.analyse(rep, tmp_path / "o", pictures=False)
    assert outcome.exit_code == actions.exit_code_of(outcome.analysis) == 0
    speed = pd.read_csv(outcome.folder / "motion.csv")
    assert 7.5 < speed["v_mps"].max() < 9.5
