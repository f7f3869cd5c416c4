"""Tables as they stand in the file, before they get our names and units."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
import pyarrow as pa

__all__ = ["Choose", "RawTable", "unique_names"]

Choose = Callable[[Sequence[str]], Sequence[str]]
"""Given the column names of a file, the names of those to be read."""


@dataclass
class RawTable:
    """One table of a file.

    Attributes
    ----------
    file : str
        Name of the file as in the settings.
    names : list of str
        All column names; a repeated one has a number added.
    repeated : set of str
        Names that stand more than once in the file.
    columns : dict
        The columns read.
    lines : ndarray of int
        Line of each row in the file (sheet row for workbooks); the header is line 1.
    ragged : ndarray of bool
        Rows with more or fewer cells than the header.
    comma_decimals : bool
        Whether a comma inside a number can only be a decimal comma.
    findings : list of DataFrame
        What was noted while reading.
    """

    file: str
    names: list[str]
    repeated: set[str]
    columns: dict[str, pa.Array]
    lines: np.ndarray
    ragged: np.ndarray
    comma_decimals: bool
    findings: list[pd.DataFrame] = field(default_factory=list)

    def __len__(self) -> int:
        return len(self.lines)


def unique_names(cells: Sequence[object]) -> tuple[list[str], set[str]]:
    """Tidy the cells of a header line.

    Returns
    -------
    list of str, set of str
        Names without blanks around them, made unique; and those that stood there more than once.
    """
    names: list[str] = []
    repeated: set[str] = set()
    for number, cell in enumerate(cells, start=1):
        name = str(cell).strip() if cell is not None else ""
        name = name or f"column {number}"
        if name in names:
            repeated.add(name)
            name = f"{name} ({number})"
        names.append(name)
    return names, repeated
