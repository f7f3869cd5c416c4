"""Reading of the small tables in ``allometry/data``."""

from __future__ import annotations

from functools import cache
from importlib.resources import files

import pandas as pd

__all__ = ["read_data"]


@cache
def _cached(name: str) -> pd.DataFrame:
    resource = files("allometry").joinpath("data", f"{name}.csv")
    with resource.open("r", encoding="utf-8") as stream:
        return pd.read_csv(stream, dtype=str, keep_default_na=False)


def read_data(name: str, *, numbers: tuple[str, ...] = ()) -> pd.DataFrame:
    """One table of the package, as text except for the columns named.

    Parameters
    ----------
    name : str
        File name without folder and suffix.
    numbers : tuple of str
        Columns to be read as float64; an empty cell is NaN.

    Returns
    -------
    DataFrame
        A fresh copy, so that a caller may change it.
    """
    table = _cached(name).copy()
    for column in numbers:
        table[column] = pd.to_numeric(table[column].replace("", None)).astype("float64")
    return table
