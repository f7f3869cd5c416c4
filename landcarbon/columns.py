"""Add columns to a large table without copying them."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import pandas as pd

__all__ = ["with_columns"]


def with_columns(frame: pd.DataFrame, columns: Mapping[str, Any]) -> pd.DataFrame:
    """Return the frame with further columns, or with new values for columns it has.

    ``DataFrame.assign`` copies every new column, which costs more than working a million values out. Here the arrays
    are taken as they are: the caller must not change them afterwards.

    Parameters
    ----------
    frame : DataFrame
        Left as it is.
    columns : mapping
        Name -> array of the frame's length.
    """
    old = [name for name in frame.columns if name in columns]
    new = pd.DataFrame(dict(columns), index=frame.index, copy=False)
    return pd.concat([frame.drop(columns=old) if old else frame, new], axis=1)
