"""Marks, sightings and priors -> Camera; its mistakes named, its precision along the lane."""

from __future__ import annotations

from vidkin.core.camera.precision import Advice, best_next_mark, lane_precision
from vidkin.core.camera.resect import resect

__all__ = ["Advice", "best_next_mark", "lane_precision", "resect"]
