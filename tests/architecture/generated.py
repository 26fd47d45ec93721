"""The parts of README.md and DEVELOPERS.md that come from the code. Run it to bring them up to date:

python tests/architecture/generated.py
"""

from __future__ import annotations

import re
from pathlib import Path

from typer.testing import CliRunner

from vidkin.cli import app
from vidkin.notices import FAILURES, REGISTRY, Entry

ROOT = Path(__file__).resolve().parents[2]
COMMANDS = ("", "demo", "calibrate", "analyse", "fit", "export")


def help_text(command: str) -> str:
    """What `vidkin COMMAND --help` prints on a terminal of 80 columns."""
    args = [*command.split(), "--help"]
    result = CliRunner().invoke(app, args, prog_name="vidkin", env={"COLUMNS": "80", "LINES": "24", "TERM": "dumb"})
    assert result.exit_code == 0, result.output
    return "\n".join(line.rstrip() for line in result.stdout.strip().splitlines())


def help_block() -> str:
    """All help texts."""
    return "\n\n".join(
        f"```console\n$ vidkin {f'{command} ' if command else ''}--help\n{help_text(command)}\n```"
        for command in COMMANDS
    )


def code_table(entries: dict[str, Entry]) -> str:
    """A table of notices or failures; values filled in at run time stand in braces."""
    rows = ["| code | stage | severity | text | what to do |", "|---|---|---|---|---|"]
    for code, entry in sorted(entries.items(), key=lambda item: (_ORDER.index(item[1].stage), item[0])):
        cells = (f"`{code}`", entry.stage, entry.severity, entry.text, entry.hint)
        rows.append("| " + " | ".join(re.sub(r"\{(\w+)[^}]*\}", r"{\1}", c).replace("|", "\\|") for c in cells) + " |")
    return "\n".join(rows)


_ORDER = ("footage", "camera", "track", "steps", "motion", "fit", "report")

#: File -> name of the block -> what it must hold.
BLOCKS = {
    "README.md": {"help": help_block},
    "DEVELOPERS.md": {"notices": lambda: code_table(REGISTRY), "failures": lambda: code_table(FAILURES)},
}


def split(text: str, name: str) -> tuple[str, str, str]:
    """The text before a generated block, the block, and the text after it."""
    before, start, rest = text.partition(f"<!-- generated: {name} -->\n")
    block, end, after = rest.partition(f"\n<!-- end of {name} -->")
    if not start or not end:
        raise ValueError(f"there is no generated block '{name}'")
    return before + start, block, end + after


def update() -> None:
    """Write every block anew."""
    for file, blocks in BLOCKS.items():
        path = ROOT / file
        text = path.read_text(encoding="utf-8")
        for name, made in blocks.items():
            before, _, after = split(text, name)
            text = f"{before}{made()}{after}"
        path.write_text(text, encoding="utf-8")


if __name__ == "__main__":
    update()
