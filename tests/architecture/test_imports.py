"""Who may import whom, what the core may not touch, and that `import vidkin` stays light."""

from __future__ import annotations

import ast
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

HEAVY = ("av", "bokeh", "cv2", "matplotlib", "numpy", "pandas", "pydantic", "scipy", "skimage")
LINT = "from importlinter.cli import lint_imports; raise SystemExit(lint_imports(no_cache=True))"
#: Built-in functions that reach out of the core, and functions of numpy that read, write or share a random state.
REACHES_OUT = {"print", "open", "input", "breakpoint", "exec", "eval", "exit", "quit"}
NUMPY_FILES = {"load", "save", "savez", "loadtxt", "savetxt", "genfromtxt", "fromfile", "memmap", "tofile"}
SHARED_RANDOM = {"seed", "rand", "randn", "randint", "random", "normal", "uniform", "choice", "shuffle", "permutation"}


def _lint(folder: Path) -> subprocess.CompletedProcess[str]:
    env = {**os.environ, "PYTHONPATH": str(folder), "NO_COLOR": "1"}
    return subprocess.run(
        [sys.executable, "-c", LINT], cwd=folder, env=env, capture_output=True, text=True, check=False
    )


def test_contracts_hold(root: Path) -> None:
    found = _lint(root)
    assert found.returncode == 0, found.stdout
    assert "0 broken" in found.stdout


@pytest.mark.parametrize(
    ("file", "line", "broken"),
    [
        ("core/optics.py", "import os", "the core is pure"),
        ("core/camera.py", "from vidkin.core import motion", "stages of the core do not know one another"),
        ("core/air.py", "from vidkin.core import optics", "stages of the core do not know one another"),
        ("files/records.py", "from vidkin import report", "rooms are layered one way"),
        ("stages.py", "from vidkin import app", "rooms are layered one way"),
        ("attic.py", "", "attic"),
    ],
)
def test_contracts_can_break(root: Path, tmp_path: Path, file: str, line: str, broken: str) -> None:
    shutil.copy(root / "pyproject.toml", tmp_path)
    shutil.copytree(root / "vidkin", tmp_path / "vidkin", ignore=shutil.ignore_patterns("__pycache__"))
    with (tmp_path / "vidkin" / file).open("a", encoding="utf-8") as module:
        module.write(f"\n{line}\n")
    found = _lint(tmp_path)
    assert found.returncode != 0
    assert broken in found.stdout
    if line:
        assert f"{broken}: no files" in found.stdout or f"{broken} BROKEN" in found.stdout


def _core_calls(root: Path) -> list[tuple[str, ast.Call]]:
    return [
        (f"{path.relative_to(root)}:{node.lineno}", node)
        for path in sorted((root / "vidkin" / "core").rglob("*.py"))
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
        if isinstance(node, ast.Call)
    ]


def test_the_core_calls_nothing_outside_itself(root: Path) -> None:
    calls = _core_calls(root)
    assert len(calls) > 500
    wrong = []
    for place, call in calls:
        name = call.func.id if isinstance(call.func, ast.Name) else None
        attribute = call.func.attr if isinstance(call.func, ast.Attribute) else None
        owner = ast.unparse(call.func.value) if isinstance(call.func, ast.Attribute) else ""
        if name in REACHES_OUT or (owner == "np" and attribute in NUMPY_FILES) or attribute == "tofile":
            wrong.append(place)
        if owner == "np.random" and attribute in SHARED_RANDOM:
            wrong.append(place)
    assert wrong == []


def test_every_module_says_what_lives_in_it(root: Path) -> None:
    for path in sorted((root / "vidkin").rglob("*.py")):
        text = path.read_text(encoding="utf-8")
        if text.strip():
            assert ast.get_docstring(ast.parse(text)), f"{path}: its first line does not say what lives there"


def _loaded_by(code: str) -> set[str]:
    found = subprocess.run(
        [sys.executable, "-c", f"{code}\nimport sys; print(*sys.modules)"], capture_output=True, text=True, check=True
    )
    return {name.partition(".")[0] for name in found.stdout.splitlines()[-1].split()}


@pytest.mark.parametrize("code", ["import vidkin; vidkin.__version__; dir(vidkin)", "import vidkin.cli"])
def test_import_stays_light(code: str) -> None:
    loaded = _loaded_by(code)
    assert "vidkin" in loaded
    assert loaded.isdisjoint(HEAVY), loaded.intersection(HEAVY)


def test_help_stays_light() -> None:
    loaded = _loaded_by("""
from vidkin.cli import main
try:
    main(["analyse", "--help"])
except SystemExit as done:
    assert done.code == 0
""")
    # typer itself checks options with pydantic.
    assert loaded.intersection(HEAVY) <= {"pydantic"}


def test_light_import_can_fail() -> None:
    assert "numpy" in _loaded_by("import vidkin; vidkin.Analysis")


def test_public_names_load_from_where_they_live() -> None:
    import vidkin

    assert 10 <= len(vidkin.__all__) <= 16
    for name in vidkin.__all__:
        value = getattr(vidkin, name)
        assert name in dir(vidkin)
        if name != "__version__":
            assert value.__module__.startswith(vidkin._HOME[name])
    assert set(vidkin._HOME) == set(vidkin.__all__) - {"__version__"}


def test_unknown_name() -> None:
    import vidkin

    with pytest.raises(AttributeError, match="module 'vidkin' has no attribute 'nonsense'"):
        _ = vidkin.nonsense  # type: ignore[attr-defined]
