"""Errors a caller can meet, all under one root.

A :class:`UserError` is something the person at the keyboard can mend: it says what was given, where, and what to do.
The command line turns it into one message and exit code 2; anything else is a bug of the program.
"""

from __future__ import annotations

__all__ = [
    "InputFileError",
    "LandcarbonError",
    "ResultsError",
    "SettingsError",
    "UserError",
]


class LandcarbonError(Exception):
    """Root of every error raised on purpose by this package."""


class UserError(LandcarbonError, ValueError):
    """Something in the input or the call that the user can mend.

    Parameters
    ----------
    what : str
        What is wrong, with the offending value quoted.
    where : str
        File, line, column or key; empty if it does not apply.
    remedy : str
        What is accepted, or what to do about it.
    """

    def __init__(self, what: str, *, where: str = "", remedy: str = "") -> None:
        self.what = what
        self.where = where
        self.remedy = remedy
        super().__init__(self.message)

    @property
    def message(self) -> str:
        """The three parts as one plain text."""
        text = f"{self.where}: {self.what}" if self.where else self.what
        return f"{text.rstrip('.')}. {self.remedy}" if self.remedy else text


class SettingsError(UserError):
    """A fault in the project file."""


class InputFileError(UserError, OSError):
    """A field file that is missing, unreadable or not what it claims to be."""


class ResultsError(UserError):
    """A results folder that is missing, incomplete, or in the way."""
