# Shared by all rooms: where the real footage is, which is not part of the repository.
from __future__ import annotations

import os
from pathlib import Path

import pytest

# Before numpy loads: tests run side by side, and more threads than cores cost time.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

CHECKOUT = Path(__file__).resolve().parents[1]


@pytest.fixture(scope="session")
def real_footage() -> Path:
    """Folder of real phone footage: $VIDKIN_REAL_FOOTAGE, or shared/real beside the checkout."""
    folder = Path(os.environ.get("VIDKIN_REAL_FOOTAGE", CHECKOUT.parent / "shared" / "real"))
    if not folder.is_dir():
        pytest.skip(f"no real footage: {folder} is not there (set VIDKIN_REAL_FOOTAGE)")
    return folder
