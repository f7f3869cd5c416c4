"""The nearest known name to a mistyped one, for messages."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = ["nearest", "suggestion"]

_LIKENESS = 0.6  # share of letters in common below which a suggestion would confuse more than help


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known name most like ``word``, case aside, or None if nothing comes close."""
    folded: dict[str, str] = {}
    for name in known:
        folded.setdefault(name.casefold(), name)
    found = difflib.get_close_matches(word.casefold(), folded, n=1, cutoff=_LIKENESS)
    return folded[found[0]] if found else None


def suggestion(word: str, known: Iterable[str]) -> str:
    """Return the sentence ``Did you mean 'x'?`` or an empty text."""
    found = nearest(word, known)
    return f"Did you mean {found!r}?" if found else ""
