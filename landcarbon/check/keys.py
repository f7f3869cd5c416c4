"""Keys of rows as whole numbers: the same tree in two surveys, the plot of a tree, the visit of a tree."""

from __future__ import annotations

import numpy as np
import pandas as pd

__all__ = ["combined_codes", "positions", "survey_order", "tree_keys", "visit_positions"]


def combined_codes(*columns: pd.Series) -> np.ndarray:
    """Give a number to each distinct combination of several columns.

    Parameters
    ----------
    *columns : Series
        Columns of equal length; blanks count as a value.

    Returns
    -------
    ndarray of int64
        One number per row, equal where all columns are equal; 0 .. n-1.
    """
    code = np.zeros(len(columns[0]), dtype=np.int64)
    for column in columns:
        part, _ = pd.factorize(column, use_na_sentinel=False)
        code = pd.factorize(code * (int(part.max(initial=0)) + 1) + part)[0].astype(np.int64)
    return code


def tree_keys(trees: pd.DataFrame) -> np.ndarray:
    """Give each stem a number by plot, subplot, tree and stem; -1 where the tree has no number.

    Parameters
    ----------
    trees : DataFrame
        Canonical tree table.

    Returns
    -------
    ndarray of int64
        One number per row.
    """
    code = combined_codes(trees["plot"], trees["subplot"], trees["tree"], trees["stem"])
    return np.where((trees["tree"] == "").to_numpy(dtype=bool), -1, code)


def positions(values: pd.Series, known: pd.Series) -> np.ndarray:
    """Find the position of each value in a column of distinct values; -1 where it is not there.

    Parameters
    ----------
    values : Series
        Values to look up (category or text).
    known : Series
        Values to look in; of doubles the first counts.

    Returns
    -------
    ndarray of int64
        Positions in ``known``.
    """
    target = pd.Index(known.astype("object"))
    lookup = pd.Series(np.arange(len(target)), index=target)
    lookup = lookup[~lookup.index.duplicated()]
    distinct, names = pd.factorize(values.astype("object"), use_na_sentinel=False)
    if len(names) == 0:
        return np.empty(0, dtype=np.int64)
    found = lookup.reindex(pd.Index(names)).fillna(-1).to_numpy(dtype=np.int64)
    return found[distinct]


def survey_order(values: pd.Series, surveys: pd.DataFrame) -> np.ndarray:
    """Give the place in time of each row's survey, 0 for the first; -1 for a survey that is not declared."""
    return positions(values, surveys["survey"])


def visit_positions(rows: pd.DataFrame, visits: pd.DataFrame) -> np.ndarray:
    """Find the visit of each row by survey and plot; -1 where there is none.

    Parameters
    ----------
    rows : DataFrame
        Any table with survey and plot.
    visits : DataFrame
        Canonical visits table.

    Returns
    -------
    ndarray of int64
        Positions in ``visits``.
    """
    if visits.empty or rows.empty:
        return np.full(len(rows), -1, dtype=np.int64)
    surveys = pd.Series(pd.unique(visits["survey"].astype("object")))
    plots = pd.Series(pd.unique(visits["plot"].astype("object")))
    width = len(plots)
    at = positions(visits["survey"], surveys) * width + positions(visits["plot"], plots)
    table = np.full(len(surveys) * width, -1, dtype=np.int64)
    table[at[::-1]] = np.arange(len(visits))[::-1]
    survey, plot = positions(rows["survey"], surveys), positions(rows["plot"], plots)
    known = (survey >= 0) & (plot >= 0)
    return np.where(known, table[np.where(known, survey * width + plot, 0)], -1)
