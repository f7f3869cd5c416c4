"""Errors of the package: one root, each also a built-in so that callers may catch what they expect."""

from __future__ import annotations

__all__ = [
    "AllometryError",
    "CatalogueError",
    "MissingInputError",
    "NotAMassError",
    "RootLevelError",
    "UnknownEquationError",
    "UnknownModelError",
]


class AllometryError(ValueError):
    """Root of all errors raised on purpose by the package."""


class CatalogueError(AllometryError):
    """The tables of equations contradict themselves; the message lists the faults with file and line."""


class UnknownEquationError(AllometryError, KeyError):
    """An equation id is not in the catalogue; the message names near ids."""

    def __str__(self) -> str:
        """Return the plain message (``KeyError`` would quote it)."""
        return str(self.args[0]) if self.args else ""


class UnknownModelError(AllometryError, KeyError):
    """A model id (roots, height curves) does not exist; the message names near ids."""

    def __str__(self) -> str:
        """Return the plain message (``KeyError`` would quote it)."""
        return str(self.args[0]) if self.args else ""


class MissingInputError(AllometryError):
    """An equation needs a measured variable that was not given."""


class NotAMassError(AllometryError):
    """A row that gives a height, a diameter or a ratio was asked for a mass."""


class RootLevelError(AllometryError):
    """A root model for stands was used on single trees, or the reverse."""
