"""The documents say what the code does: commands, flags, notices, files, columns, sheet keys, dependencies."""

from __future__ import annotations

import os
import re
import subprocess
import tomllib
from pathlib import Path
from types import ModuleType

import pytest
import typer

from vidkin.cli import app
from vidkin.files.records import TABLES
from vidkin.files.sheets import _SheetFile, read_sheet
from vidkin.files.store import OWN_FILES
from vidkin.report.words import NAMES

SET_UP = "python3 -m venv .venv && .venv/bin/pip install --quiet"


@pytest.fixture(scope="module")
def readme(root: Path) -> str:
    return (root / "README.md").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def developers(root: Path) -> str:
    return (root / "DEVELOPERS.md").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("file", "block"), [("README.md", "help"), ("DEVELOPERS.md", "notices"), ("DEVELOPERS.md", "failures")]
)
def test_generated_block_is_up_to_date(root: Path, generated: ModuleType, file: str, block: str) -> None:
    _, held, _ = generated.split((root / file).read_text(encoding="utf-8"), block)
    assert held == generated.BLOCKS[file][block](), "run: python tests/architecture/generated.py"


def test_every_generated_block_is_tested(generated: ModuleType) -> None:
    assert {(file, block) for file, blocks in generated.BLOCKS.items() for block in blocks} == {
        ("README.md", "help"),
        ("DEVELOPERS.md", "notices"),
        ("DEVELOPERS.md", "failures"),
    }


def test_a_missing_block_is_an_error(generated: ModuleType) -> None:
    with pytest.raises(ValueError, match="no generated block 'help'"):
        generated.split("nothing here", "help")


def test_every_command_and_flag_is_in_the_readme(readme: str, generated: ModuleType) -> None:
    group = typer.main.get_command(app)
    commands = group.commands  # type: ignore[attr-defined]
    assert set(generated.COMMANDS) == {"", *commands}
    for name, command in commands.items():
        assert f"vidkin {name}" in readme
        for parameter in command.params:
            for flag in parameter.opts:
                if flag.startswith("-"):
                    assert re.search(rf"(?<![\w-]){re.escape(flag)}(?![\w-])", readme), f"{name} {flag}"


def test_the_job_comes_first(readme: str) -> None:
    title, first = readme.split("\n\n")[:2]
    assert title == "# vidkin"
    assert not first.startswith(("#", "!", "|", "-", "```"))
    for word in ("sprint", "camera", "speed", "power", "drag", "interval"):
        assert word in first


def test_readme_pictures_are_there_and_small(root: Path, readme: str) -> None:
    pictures = re.findall(r"!\[[^\]]+\]\(([^)]+)\)", readme)
    assert pictures == ["demo_clips/pictures/overlay.png", "demo_clips/pictures/speed.png"]
    for name in pictures:
        data = (root / name).read_bytes()
        assert data[:8] == b"\x89PNG\r\n\x1a\n"
        assert len(data) < 300_000, f"{name}: {len(data)} bytes"


def test_links_to_files_lead_somewhere(root: Path, readme: str, developers: str) -> None:
    for text in (readme, developers):
        for target in re.findall(r"(?<!!)\[[^\]]+\]\((?!https?:|#)([^)#]+)", text):
            assert (root / target).exists(), target


def test_one_command_does_the_job_and_one_the_tests(readme: str) -> None:
    lines = [line for line in readme.splitlines() if line.startswith("python3 -m venv")]
    assert lines == [
        f"{SET_UP} . && .venv/bin/vidkin demo",
        f"{SET_UP} -e '.[test]' && .venv/bin/python -m pytest -q -n 2",
    ]


def test_ci_runs_the_readmes_test_command(root: Path, readme: str) -> None:
    script = root / ".ci" / "run"
    assert os.access(script, os.X_OK)
    text = script.read_text(encoding="utf-8")
    assert text.startswith("#!/usr/bin/env bash\n")
    assert "set -euo pipefail" in text
    asked = subprocess.run(
        [script, "--print"], capture_output=True, text=True, check=True, stdin=subprocess.DEVNULL, cwd="/"
    )
    (command,) = [line for line in readme.splitlines() if line.startswith("python3 -m venv") and "pytest" in line]
    assert asked.stdout == f"{command}\n"


def test_every_result_file_and_column_is_in_the_readme(readme: str) -> None:
    for name in OWN_FILES:
        assert f"`{name}" in readme, name
    for table, columns in TABLES.items():
        for column in columns:
            assert f"`{column}`" in readme, f"{table}: {column}"


def test_every_name_is_in_the_nomenclature(readme: str) -> None:
    section = readme.partition("## Names")[2].partition("\n## ")[0]
    for name in NAMES:
        assert f"`{name}`" in section, name


def test_exit_codes_are_in_the_readme(readme: str) -> None:
    for code in range(7):
        assert re.search(rf"^\| {code} \|", readme, re.MULTILINE), code


def _sheet(readme: str) -> str:
    blocks = re.findall(r"```toml\n(.*?)```", readme, re.DOTALL)
    return next(block for block in blocks if block.startswith("clip = "))


def test_the_readmes_sheet_can_be_read(readme: str, tmp_path: Path) -> None:
    (tmp_path / "rep3.mp4").touch()
    path = tmp_path / "rep3.toml"
    path.write_text(_sheet(readme), encoding="utf-8")
    rep = read_sheet(path).rep
    assert rep.athlete.mass_kg is not None
    assert rep.air.wind_mps is not None
    assert len(rep.marks) >= 6


def test_every_sheet_key_is_in_the_readme(readme: str) -> None:
    section = readme.partition("## The sheet")[2].partition("\n## ")[0]
    for key, field in _SheetFile.model_fields.items():
        assert re.search(rf"\b{key}\b", section), key
        inner = getattr(field.annotation, "model_fields", {})
        for part in inner:
            assert re.search(rf"\b{part}\b", section), f"{key}.{part}"
    for part in ("label", "point", "x_m", "y_m", "z_m", "u_px", "v_px", "sd_px", "sd_m", "layout"):
        assert re.search(rf"\b{part}\b", section), part


def test_every_dependency_has_its_reason(root: Path, developers: str) -> None:
    project = tomllib.loads((root / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *(d for extra in project["optional-dependencies"].values() for d in extra)]
    section = developers.partition("## Dependencies")[2].partition("\n## ")[0]
    for requirement in wanted:
        name = re.match(r"[\w-]+", requirement)
        assert name is not None
        assert f"`{name[0]}`" in section, name[0]


def test_cautions_stand_where_users_read_them(readme: str) -> None:
    section = readme.partition("## Cautions")[2].partition("\n## ")[0].lower()
    for word in ("warm up", "doctor", "tripod", "consent", "minor", "diagnosis", "local rules", "licensed"):
        assert word in section, word
