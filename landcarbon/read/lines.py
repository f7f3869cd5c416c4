"""The lines on which down wood was looked for: from a table of their own, or from the rows of the pieces."""

from __future__ import annotations

import numpy as np
import pandas as pd

from landcarbon.inventory.models import Settings
from landcarbon.read.mapping import class_column
from landcarbon.read.notes import note

__all__ = ["LINE_KEY", "derive_lines", "settle_lines", "untallied"]

LINE_KEY = ["survey", "plot", "subplot", "line"]

_LEVEL = 0.0


def settle_lines(lines: pd.DataFrame, settings: Settings) -> list[pd.DataFrame]:
    """Fill in lengths and slopes and set repeated lines aside, in place.

    Parameters
    ----------
    lines : DataFrame
        Rows of the tables of lines.
    settings : Settings
        The project file.

    Returns
    -------
    list of DataFrame
        Findings.
    """
    if settings.dead_wood.line_m is not None:
        lines["length_m"] = lines["length_m"].fillna(settings.dead_wood.line_m)
    _level(lines, settings)
    return _repeated(lines)


def _repeated(lines: pd.DataFrame) -> list[pd.DataFrame]:
    """Keep the first row of each line; another length further down is more than a repetition."""
    counted = lines[lines["used"]]
    twice = counted.duplicated(LINE_KEY)
    if not twice.any():
        return []
    _, start, group = np.unique(counted.groupby(LINE_KEY).ngroup(), return_index=True, return_inverse=True)
    length = counted["length_m"].to_numpy()
    first = length[start][group]
    same = (length == first) | (np.isnan(length) & np.isnan(first))
    others = counted[twice & ~same]
    words = pd.DataFrame(
        {"length": [f"{value:g} m" if value == value else "unknown" for value in first[twice & ~same]]}
    )
    lines.loc[counted.index[twice], "used"] = False
    return [note("line repeated", counted[twice & same]), note("line with two lengths", others, fill=words)]


def _level(lines: pd.DataFrame, settings: Settings) -> None:
    """Take lines as level where the slope does not matter; where it does, a missing one stays missing."""
    if settings.dead_wood.line_slope == "horizontal":
        lines["slope_deg"] = lines["slope_deg"].fillna(_LEVEL)


def derive_lines(rows: pd.DataFrame, settings: Settings) -> pd.DataFrame:
    """Return the distinct lines of some rows of pieces, those without wood among them.

    Parameters
    ----------
    rows : DataFrame
        Rows of pieces whose survey, plot and line are known; file and row are those of the first row of each line.
    settings : Settings
        The project file, which gives the length.

    Returns
    -------
    DataFrame
        Lines: file, row, survey, plot, subplot, line, length_m (NaN if nothing tells it), slope_deg, date, used.
    """
    lines = rows.drop_duplicates(LINE_KEY)[["file", "row", *LINE_KEY, "date"]].reset_index(drop=True)
    wood = settings.dead_wood
    if wood.line_m is not None:
        lines["length_m"] = wood.line_m
    else:
        # The line is at least as long as the stretch of it any class or row was taken on.
        said = [one.line_m for one in wood.classes.values() if one.line_m is not None]
        longest = rows.groupby(LINE_KEY)["line_m"].max().rename("length_m")
        lines = lines.merge(longest, how="left", left_on=LINE_KEY, right_index=True, validate="one_to_one")
        lines["length_m"] = lines["length_m"].fillna(-np.inf).clip(lower=max(said, default=-np.inf))
        lines["length_m"] = lines["length_m"].where(np.isfinite(lines["length_m"]))
    lines["slope_deg"] = np.nan
    lines["used"] = True
    _level(lines, settings)
    return lines


def untallied(rows: pd.DataFrame, settings: Settings) -> list[pd.DataFrame]:
    """Tell for each class of counts how many lines have no figure for it in any of their rows.

    Parameters
    ----------
    rows : DataFrame
        Rows of pieces of one file whose survey, plot and line are known, with the columns of the classes.
    settings : Settings
        The project file.
    """
    found = []
    for name, one in settings.dead_wood.classes.items():
        if one.count and class_column(name) in rows and len(rows):
            filled = rows[class_column(name)].notna().groupby([rows[key] for key in LINE_KEY]).any()
            count = int((~filled).sum())
            if count:
                words = {"count": count, "size_class": name}
                file = str(rows["file"].iloc[0])
                found.append(note("tally left blank", file=file, value=str(count), fill=words))
    return found
