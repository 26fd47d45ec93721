"""The command line itself: help, version, what is wrong with a call, --json and --debug, errors of every kind."""

from __future__ import annotations

import json
import os
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any, get_args

import pytest
from typer.testing import CliRunner

import vidkin as package
from vidkin import app as actions
from vidkin.app import Failed, joint_exit_code
from vidkin.cli import app, commands
from vidkin.errors import CalibrationError, ExportError, FootageError, UsageError, VidkinError
from vidkin.files.exports import Format


def test_version(vidkin: Any) -> None:
    said = vidkin("--version")
    assert (said.code, said.out, said.err) == (0, f"vidkin {package.__version__}\n", "")


def test_no_command_shows_the_help(vidkin: Any) -> None:
    said = vidkin()
    assert said.code == 2
    assert "Usage: vidkin [OPTIONS] COMMAND" in said.err
    assert "Error" not in said.err
    assert said.out == ""


@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_help(vidkin: Any, flag: str) -> None:
    said = vidkin("analyse", flag)
    assert said.code == 0
    assert "Do the whole job on each SHEET" in said.out


@pytest.mark.parametrize(
    ("args", "message", "hint"),
    [
        (["run"], "No such command 'run'.", "See: vidkin --help"),
        (["analyze", "a.toml"], "No such command 'analyze'. Did you mean 'analyse'?", "See: vidkin --help"),
        (["analyse"], "Missing argument 'SHEET'.", "See: vidkin analyse --help"),
        (["analyse", "a.toml", "--jbos", "2"], "No such option: --jbos", "See: vidkin analyse --help"),
        (
            ["analyse", "a.toml", "--jobs", "0"],
            "Invalid value for '--jobs': '0' is no whole number from 1 to 64.",
            "See: vidkin analyse --help",
        ),
        (
            ["analyse", "a.toml", "--jobs", "two"],
            "Invalid value for '--jobs': 'two' is no whole number from 1 to 64.",
            "See: vidkin analyse --help",
        ),
        (
            ["analyse", "a.toml", "--level", "95"],
            "Invalid value for '--level': '95' is no number from 0.5 to 0.999.",
            "See: vidkin analyse --help",
        ),
        (
            ["analyse", "a.toml", "--window", "nan"],
            "Invalid value for '--window': 'nan' is no number from 0.05 to 5.",
            "See: vidkin analyse --help",
        ),
        (
            ["fit", "a.csv", "--mass-kg", "71000"],
            "Invalid value for '--mass-kg': '71000' is no number from 20 to 200.",
            "See: vidkin fit --help",
        ),
        (
            ["fit", "a.csv", "--split", "ten"],
            "Invalid value for '--split': 'ten' is no number from 0.1 to 1000.",
            "See: vidkin fit --help",
        ),
        (
            ["export", "out", "--format", "xls"],
            "Invalid value for '--format': 'xls' is none of csv, mat, json, parquet.",
            "See: vidkin export --help",
        ),
        (["export", "out"], "Missing option '--format'.", "See: vidkin export --help"),
        (["fit", "a.csv", "--unit", "kmh"], "--unit 'kmh' is no pair of column and unit.", "Write it as v=km/h"),
    ],
)
def test_wrong_calls_say_what_and_how(vidkin: Any, args: list[str], message: str, hint: str) -> None:
    said = vidkin(*args)
    assert said.code == 2
    assert said.out == ""
    assert said.err.startswith(f"Error: {message}")
    assert hint in said.err


def test_a_name_that_starts_with_a_dash(vidkin: Any, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    (tmp_path / "-rep.toml").write_text("clip = 'c.mp4'", encoding="utf-8")
    said = vidkin("analyse", "-rep.toml")
    assert said.code == 2
    assert "No such option: -r" in said.err
    assert "Put -- before names that start with a dash." in said.err
    said = vidkin("analyse", "--", "-rep.toml")
    assert said.err.startswith("Error: -rep.toml: clip = 'c.mp4' is not there")


def test_a_wrong_call_with_json(vidkin: Any) -> None:
    said = vidkin("analyse", "--json")
    assert said.code == 2
    assert said.record["exit_code"] == 2
    assert said.record["error"]["message"] == "Missing argument 'SHEET'."


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (VidkinError("It broke at 7.", "Mend it."), 1),
        (UsageError("It broke at 7.", "Mend it."), 2),
        (FootageError("It broke at 7.", "Mend it."), 3),
        (CalibrationError("It broke at 7.", "Mend it."), 4),
        (ExportError("It broke at 7.", "Mend it."), 5),
    ],
)
def test_errors_and_their_codes(vidkin: Any, monkeypatch: pytest.MonkeyPatch, error: VidkinError, code: int) -> None:
    def fails(*_args: object, **_more: object) -> None:
        raise error

    monkeypatch.setattr(actions, "analyse", fails)
    said = vidkin("analyse", "a.toml")
    assert (said.code, said.out, said.err) == (code, "", "Error: It broke at 7.\nMend it.\n")
    traced = vidkin("analyse", "a.toml", "--debug")
    assert "Traceback (most recent call last)" in traced.err
    assert traced.err.endswith("Error: It broke at 7.\nMend it.\n")
    assert "Traceback" in vidkin("--debug", "analyse", "a.toml").err
    for args in (("--json", "analyse", "a.toml"), ("analyse", "a.toml", "--json")):
        said = vidkin(*args)
        assert said.code == code
        assert said.record == {
            "schema": "vidkin-run-1",
            "command": "analyse",
            "exit_code": code,
            "results": [],
            "error": {"message": "It broke at 7.", "hint": "Mend it."},
        }


def test_an_error_that_nobody_foresaw(vidkin: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*_args: object, **_more: object) -> None:
        raise ZeroDivisionError("division by zero")

    monkeypatch.setattr(actions, "calibrate", fails)
    said = vidkin("calibrate", "a.toml")
    assert said.code == 1
    assert said.err == (
        "Error: Internal error: ZeroDivisionError: division by zero\n"
        "This is a fault of vidkin; run again with --debug and report what it prints.\n"
    )
    assert "Traceback" in vidkin("calibrate", "a.toml", "--debug").err


def test_ctrl_c(vidkin: Any, monkeypatch: pytest.MonkeyPatch) -> None:
    def stopped(*_args: object, **_more: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(actions, "demo", stopped)
    said = vidkin("demo", "--debug")
    assert said.code == 130
    assert said.err == "Error: Stopped before the end.\nNothing half finished was left behind.\n"


def test_a_reader_that_has_gone(start: Callable[..., subprocess.Popen[str]]) -> None:
    code = """
import os, sys
from vidkin import app
app.export = lambda *_: ["x" * 100] * 5000
from vidkin.cli import main
main(["export", "somewhere", "--format", "json"])
"""
    running = start("-c", code)
    assert running.stdout is not None
    assert running.stderr is not None
    running.stdout.close()
    assert running.wait(timeout=60) == 1
    assert running.stderr.read() == ""


def test_names_that_the_terminal_cannot_show(start: Callable[..., subprocess.Popen[str]], tmp_path: Path) -> None:
    name = os.fsdecode(b"caf\xe9 \xf0\x9f\x8f\x83.toml")
    running = start("-m", "vidkin", "analyse", name, cwd=tmp_path)
    out, err = running.communicate(timeout=60)
    assert running.returncode == 2
    assert out == ""
    assert "there is no such sheet" in err
    assert "Traceback" not in err


def test_formats_are_those_that_can_be_written() -> None:
    assert get_args(Format) == commands._FORMATS


def test_joint_exit_code() -> None:
    assert joint_exit_code([]) == 0
    assert joint_exit_code([0, 0]) == 0
    assert joint_exit_code([0, 6, 0]) == 6
    assert joint_exit_code([6, 3, 4]) == 3


def test_the_app_runs_under_typers_own_runner() -> None:
    result = CliRunner().invoke(app, ["fit", "nowhere.csv", "--json"], prog_name="vidkin")
    assert result.exit_code == 2
    assert json.loads(result.stdout)["error"]["message"] == "nowhere.csv: there is no such table."


def test_a_failed_sheet_says_what_failed() -> None:
    failed = Failed(sheet=Path("a.toml"), message="m", hint="h", exit_code=3)
    assert failed.trace == ""
