"""The code passes the tools it is held to: ruff for style, mypy --strict for types."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest


def _run(root: Path, *command: str) -> None:
    found = subprocess.run([sys.executable, "-m", *command], cwd=root, capture_output=True, text=True, check=False)
    assert found.returncode == 0, found.stdout + found.stderr


@pytest.mark.parametrize("command", [("check",), ("format", "--check")])
def test_ruff(root: Path, command: tuple[str, ...]) -> None:
    _run(root, "ruff", *command, "--no-cache", "vidkin", "tests", "demo_clips")


def test_mypy(root: Path) -> None:
    _run(root, "mypy", "--strict", "--no-error-summary")


def test_no_file_is_exempt(root: Path) -> None:
    for path in sorted((root / "vidkin").rglob("*.py")):
        text = path.read_text(encoding="utf-8")
        for marker in ("# mypy: ", "# ruff: noqa", "# flake8: noqa"):
            assert marker not in text, f"{path}: {marker}"
