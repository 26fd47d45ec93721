"""One registry of quality notices: code, stage, severity, one line, what to do.

Texts are templates; `notice(code, **values)` fills them in. Docs, report and JSON are generated from here.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal

Severity = Literal["info", "warning", "serious"]
StageName = Literal["footage", "camera", "track", "steps", "motion", "fit", "report"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Notice:
    """One remark on quality; `code` is a key of `REGISTRY`."""

    code: str
    stage: StageName
    severity: Severity
    text: str
    hint: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """What a stage returns when it cannot answer. Falsy, and it says why and what to do."""

    stage: StageName
    code: str
    reason: str
    hint: str

    def __bool__(self) -> bool:
        return False


@dataclass(frozen=True, slots=True)
class Entry:
    """A registered notice or failure: `text` and `hint` are `str.format` templates."""

    stage: StageName
    severity: Severity
    text: str
    hint: str


REGISTRY: Final[dict[str, Entry]] = {
    # --- footage ---
    # --- camera ---
    # --- track ---
    # --- steps ---
    # --- motion ---
    # --- fit ---
}

FAILURES: Final[dict[str, Entry]] = {
    # --- footage ---
    # --- camera ---
    # --- track ---
    # --- steps ---
    # --- motion ---
    # --- fit ---
}


def notice(code: str, **values: object) -> Notice:
    """Make the notice `code`; raises KeyError for an unregistered code or a missing value."""
    e = REGISTRY[code]
    return Notice(
        code=code, stage=e.stage, severity=e.severity, text=e.text.format(**values), hint=e.hint.format(**values)
    )


def failure(code: str, **values: object) -> Failure:
    """Make the failure `code`; raises KeyError for an unregistered code or a missing value."""
    e = FAILURES[code]
    return Failure(stage=e.stage, code=code, reason=e.text.format(**values), hint=e.hint.format(**values))
