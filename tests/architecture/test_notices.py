"""Each registered notice and failure is raised somewhere and provoked by a test; its texts are fit to print."""

from __future__ import annotations

import ast
import string
from pathlib import Path

import pytest

from vidkin import notices
from vidkin.notices import FAILURES, REGISTRY, Entry


def _strings(folder: Path, *, without: Path | None = None) -> set[str]:
    """Every text that stands in the code of a folder."""
    found: set[str] = set()
    for path in sorted(folder.rglob("*.py")):
        if without is not None and path.is_relative_to(without):
            continue
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(node, ast.Constant) and isinstance(node.value, str):
                found.add(node.value)
    return found


@pytest.fixture(scope="module")
def tested(root: Path) -> set[str]:
    return _strings(root / "tests", without=root / "tests" / "architecture")


@pytest.fixture(scope="module")
def used(root: Path) -> set[str]:
    return _strings(root / "vidkin", without=root / "vidkin" / "notices.py")


def test_every_code_has_a_test(tested: set[str]) -> None:
    missing = sorted({*REGISTRY, *FAILURES} - tested)
    assert not missing, f"no test names {missing}"


def test_every_code_is_used(used: set[str]) -> None:
    idle = sorted({*REGISTRY, *FAILURES} - used)
    assert not idle, f"nothing raises {idle}"


def test_a_code_means_one_thing() -> None:
    assert not set(REGISTRY) & set(FAILURES)


@pytest.mark.parametrize(("code", "entry"), [*REGISTRY.items(), *FAILURES.items()])
def test_texts_are_fit_to_print(code: str, entry: Entry) -> None:
    assert code == code.lower()
    assert code.replace("_", "").isalnum()
    for text in (entry.text, entry.hint):
        assert text
        assert text == text.strip()
        assert "  " not in text
        assert all(name is None or name.isidentifier() for _, name, _, _ in string.Formatter().parse(text))
    assert entry.hint.endswith((".", "?", "}"))


def test_unknown_codes_and_missing_values_are_errors() -> None:
    with pytest.raises(KeyError):
        notices.notice("no_such_code")
    with pytest.raises(KeyError):
        notices.failure("no_such_code")
    with pytest.raises(KeyError):
        notices.failure("not_run")
