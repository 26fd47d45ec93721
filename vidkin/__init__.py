"""vidkin: a filmed sprint rep in; speed, power, force and air drag out. Names load on first use."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from vidkin.app import Outcome, analyse, calibrate, demo, export, fit
    from vidkin.errors import VidkinError
    from vidkin.files.sheets import read_sheet
    from vidkin.files.store import read_result
    from vidkin.notices import Failure, Notice
    from vidkin.stages import Analysis, Quantity, Rep, Settings

__version__ = "0.1.0"

_HOME = {
    "Analysis": "vidkin.stages",
    "Failure": "vidkin.notices",
    "Notice": "vidkin.notices",
    "Outcome": "vidkin.app",
    "Quantity": "vidkin.stages",
    "Rep": "vidkin.stages",
    "Settings": "vidkin.stages",
    "VidkinError": "vidkin.errors",
    "analyse": "vidkin.app",
    "calibrate": "vidkin.app",
    "demo": "vidkin.app",
    "export": "vidkin.app",
    "fit": "vidkin.app",
    "read_result": "vidkin.files.store",
    "read_sheet": "vidkin.files.sheets",
}

__all__ = [
    "Analysis",
    "Failure",
    "Notice",
    "Outcome",
    "Quantity",
    "Rep",
    "Settings",
    "VidkinError",
    "__version__",
    "analyse",
    "calibrate",
    "demo",
    "export",
    "fit",
    "read_result",
    "read_sheet",
]


def __getattr__(name: str) -> object:
    """Load a public name on first use (PEP 562), so that `import vidkin` stays light."""
    if name not in _HOME:
        raise AttributeError(f"module 'vidkin' has no attribute '{name}'")
    value: object = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
