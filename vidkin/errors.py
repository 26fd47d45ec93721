"""Exceptions that reach the user: what happened, the value seen, what to do; each with its exit code."""

from __future__ import annotations

EXIT_OK = 0
EXIT_INTERNAL = 1
EXIT_USAGE = 2
EXIT_FOOTAGE = 3
EXIT_CALIBRATION = 4
EXIT_EXPORT = 5
EXIT_PARTIAL = 6


class VidkinError(Exception):
    """Anything the user can mend.

    Parameters
    ----------
    message : str
        What happened, with the value seen.
    hint : str
        What to do next.
    """

    exit_code = EXIT_INTERNAL

    def __init__(self, message: str, hint: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.hint = hint

    def __str__(self) -> str:
        return f"{self.message} {self.hint}".strip()


class UsageError(VidkinError):
    """A sheet, table, option or file name that cannot be used as given."""

    exit_code = EXIT_USAGE


class FootageError(VidkinError):
    """A clip that cannot be read or cannot be measured from."""

    exit_code = EXIT_FOOTAGE


class CalibrationError(VidkinError):
    """Marks that do not define a camera."""

    exit_code = EXIT_CALIBRATION


class ExportError(VidkinError):
    """A result that cannot be written or read back."""

    exit_code = EXIT_EXPORT
