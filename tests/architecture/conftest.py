"""The checkout's root, and how the tests of the architecture read its files."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def root() -> Path:
    """The folder with pyproject.toml."""
    return Path(__file__).resolve().parents[2]


@pytest.fixture(scope="session")
def generated() -> ModuleType:
    """The module that makes the generated parts of the documents."""
    spec = importlib.util.spec_from_file_location("generated", Path(__file__).with_name("generated.py"))
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module
