"""The power and drag fitting core: positions (or any speed or split table) -> Fit."""

from __future__ import annotations

from vidkin.core.fit.core import fit_motion, fit_series
from vidkin.core.fit.table import fit_table

__all__ = ["fit_motion", "fit_series", "fit_table"]
