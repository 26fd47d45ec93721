"""Real processes: terminals and pipes, Ctrl-C and SIGTERM, alone and with --jobs."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

Start = Callable[..., subprocess.Popen[str]]
Write = Callable[..., Path]

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="signals and terminals of POSIX systems")


def _wait_for(found: Callable[[], bool], running: subprocess.Popen[str]) -> None:
    deadline = time.monotonic() + 90
    while not found():
        assert running.poll() is None, running.communicate()
        assert time.monotonic() < deadline, "it never got there"
        time.sleep(0.02)


def _parts(folder: Path) -> list[str]:
    return [path.name for path in folder.iterdir() if path.name.startswith(".")]


def test_no_bar_in_a_pipe(process: Any, rep: Path) -> None:
    said = process("analyse", rep.with_name("none.toml"), rep.with_name("neither.toml"))
    assert said.code == 2
    assert said.err.startswith("Error: ")
    assert "\x1b" not in said.err + said.out
    said = process("calibrate", rep)
    assert (said.code, said.err) == (0, "")
    assert "\x1b" not in said.out


def _on_a_terminal(start: Start, *args: object) -> tuple[int, str, str]:
    """Run with standard error on a terminal; exit code, standard output, what the terminal got."""
    own, other = pty.openpty()
    running = start("-m", "vidkin", *args, stderr=other)
    os.close(other)
    got = b""
    while True:
        try:
            piece = os.read(own, 65536)
        except OSError:  # Linux: the last process has closed the terminal
            break
        if not piece:
            break
        got += piece
    os.close(own)
    out, _ = running.communicate(timeout=60)
    return running.returncode, out, got.decode(errors="replace")


def test_a_bar_on_a_terminal(start: Start, rep: Path) -> None:
    code, out, terminal = _on_a_terminal(start, "analyse", rep, "--no-pictures")
    assert code == 0
    assert "following the runner" in terminal
    assert "top_speed" in out
    assert "\x1b" not in out
    assert "following the runner" not in out


def test_a_counter_on_a_terminal(start: Start, rep: Path) -> None:
    code, out, terminal = _on_a_terminal(start, "analyse", rep.with_name("none.toml"), rep.with_name("neither.toml"))
    assert code == 2
    assert "2/2" in terminal
    assert "2 sheets" in out


@pytest.mark.parametrize("sent", [signal.SIGINT, signal.SIGTERM])
def test_stopped_alone(start: Start, rep: Path, sent: signal.Signals) -> None:
    running = start("-m", "vidkin", "analyse", rep)
    _wait_for(lambda: bool(_parts(rep.parent)), running)
    running.send_signal(sent)
    out, err = running.communicate(timeout=60)
    assert running.returncode == 130
    assert err == "Error: Stopped before the end.\nNothing half finished was left behind.\n"
    assert out == ""
    assert sorted(path.name for path in rep.parent.iterdir()) == ["small.mp4", "small.toml"]


@pytest.mark.parametrize("everyone", [True, False], ids=["Ctrl-C on a terminal", "a signal to the first process"])
def test_stopped_with_jobs(start: Start, rep: Path, more: Write, everyone: bool) -> None:
    sheets = [rep, more("b.toml"), more("c.toml"), more("d.toml")]
    before = sorted(path.name for path in rep.parent.iterdir())
    running = start("-m", "vidkin", "analyse", "--jobs", 2, *sheets)
    _wait_for(lambda: len(_parts(rep.parent)) == 2, running)
    if everyone:
        os.killpg(running.pid, signal.SIGINT)
    else:
        running.send_signal(signal.SIGINT)
    out, err = running.communicate(timeout=60)
    assert running.returncode == 130
    assert err == "Error: Stopped before the end.\nNothing half finished was left behind.\n"
    assert out == ""
    assert sorted(path.name for path in rep.parent.iterdir()) == before
