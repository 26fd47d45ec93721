"""One function per user action: read, core, provenance, write. Prints nothing and parses nothing."""

from __future__ import annotations

from vidkin.app.actions import DemoOutcome, FitOutcome, Outcome, analyse, calibrate, demo, exit_code_of, export, fit
from vidkin.app.jobs import Failed, analyse_all, joint_exit_code

__all__ = [
    "DemoOutcome",
    "Failed",
    "FitOutcome",
    "Outcome",
    "analyse",
    "analyse_all",
    "calibrate",
    "demo",
    "exit_code_of",
    "export",
    "fit",
    "joint_exit_code",
]
