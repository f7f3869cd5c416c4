"""Sums by group for many columns at once, in a fixed order of summation."""

from __future__ import annotations

import numpy as np
import pandas as pd

__all__ = ["group_sum", "label_codes", "narrow", "wide"]


def group_sum(values: np.ndarray, codes: np.ndarray, groups: int) -> np.ndarray:
    """Add up the rows of each group, column by column.

    Rows are added in the order given, so equal input gives equal bytes.

    Parameters
    ----------
    values : ndarray
        Shape (rows, columns); booleans are counted.
    codes : ndarray of int
        Group of each row, 0 to ``groups`` - 1.
    groups : int
        Number of groups; a group without rows sums to zero.

    Returns
    -------
    ndarray of float
        Shape (groups, columns).
    """
    from scipy.sparse import csc_array  # heavy; the package must import without it

    rows = len(codes)
    # one column per row with a single 1 in it: the product adds whole rows, in the order given
    chooses = csc_array((np.ones(rows), codes, np.arange(rows + 1)), shape=(groups, rows))
    return np.asarray(chooses @ np.asarray(values, dtype=float))


def narrow(table: np.ndarray) -> np.ndarray:
    """Keep one column of a table whose columns are all the same, so that what follows is done once."""
    same = table.shape[1] > 1 and bool((table == table[:, :1]).all())
    return table[:, :1] if same else table


def wide(values: np.ndarray, columns: int) -> np.ndarray:
    """Show one column as many, without copying it."""
    return values if values.shape[1] == columns else np.broadcast_to(values, (len(values), columns))


def label_codes(column: pd.Series, labels: list[str]) -> np.ndarray:
    """Position of each value of a column in a list of labels.

    Parameters
    ----------
    column : Series
        Text or category; other types are compared as text.
    labels : list of str
        Distinct labels.

    Returns
    -------
    ndarray of int
        -1 where the value is missing or not in ``labels``.
    """
    given = column.astype("category")
    names = [str(name) for name in given.cat.categories]
    position = np.append(pd.Index(labels, dtype=object).get_indexer(pd.Index(names, dtype=object)), -1)
    return position[given.cat.codes.to_numpy()].astype(np.int64)
