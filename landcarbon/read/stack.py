"""Tables of several files put together; text that repeats stays a category."""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd
from pandas.api.types import union_categoricals

__all__ = ["stack_frames"]

# Their categories keep the order of the settings; those of the others are sorted.
_ORDERED = frozenset({"file", "survey", "status"})


def stack_frames(parts: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Put tables with the same columns under one another.

    Parameters
    ----------
    parts : sequence of DataFrame
        At least one; a column is a category in all of them or in none.

    Returns
    -------
    DataFrame
        Columns as in the first; categories are united.
    """
    if len(parts) == 1:
        return parts[0].reset_index(drop=True)
    columns: dict[str, pd.Categorical | pd.Series] = {}
    for name in parts[0].columns:
        pieces = [part[name] for part in parts]
        if isinstance(pieces[0].dtype, pd.CategoricalDtype):
            columns[name] = union_categoricals(pieces, sort_categories=name not in _ORDERED)
        else:
            columns[name] = pd.concat(pieces, ignore_index=True)
    return pd.DataFrame(columns)
