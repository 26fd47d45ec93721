"""The command line: parse, hand over to `app`, print, exit code."""

from __future__ import annotations

from vidkin.cli.commands import app, main

__all__ = ["app", "main"]
