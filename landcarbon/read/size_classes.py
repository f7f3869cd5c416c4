"""From pieces tallied in columns, one for each size class, to one row for each class and line of the file."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.errors import InputFileError
from landcarbon.inventory.models import Settings
from landcarbon.read.mapping import Mapped, class_column

__all__ = ["LongPieces", "long_pieces"]

_FIGURES = ("diameter", "count")
_BASE, _NOTHING = -1, -2


@dataclass
class LongPieces:
    """Pieces with one row for each piece or tally.

    Attributes
    ----------
    mapped : Mapped
        Rows of the file repeated as often as they hold figures; one without any stands once.
    nothing : ndarray of bool
        Rows that hold no wood: they tell that a line was looked at.
    below_zero : dict
        Size class to the mask of rows with a figure below zero.
    """

    mapped: Mapped
    nothing: np.ndarray
    below_zero: dict[str, np.ndarray]


def long_pieces(mapped: Mapped, settings: Settings) -> LongPieces:
    """Turn the columns of size classes into rows.

    Parameters
    ----------
    mapped : Mapped
        The pieces table as read.
    settings : Settings
        The project file with the size classes.

    Returns
    -------
    LongPieces
        In the order of the file, within a row that of the classes.

    Raises
    ------
    InputFileError
        If the table has neither diameters nor counts.
    """
    classes = {name: one for name, one in settings.dead_wood.classes.items() if class_column(name) in mapped.given}
    taken = {mapped.given[class_column(name)] for name in classes}
    own = [name for name in (*_FIGURES, "size_class") if mapped.given.get(name, "") not in ("", *taken)]
    if not classes and not own:
        raise InputFileError(
            "the table of pieces has neither a column of diameters nor counts by size class",
            where=str(mapped.frame["file"].cat.categories[0]),
            remedy="Map diameter under [columns.pieces], or describe the columns under [dead_wood.classes.NAME].",
        )
    frame = mapped.frame
    places = [np.flatnonzero(_own_rows(mapped, own, wide=bool(classes)))]
    kinds = [np.full(len(places[0]), _BASE)]
    for number, name in enumerate(classes):
        values = frame[class_column(name)].to_numpy()
        wanted = (values > 0) | (values < 0) | _bad(mapped, class_column(name))
        places.append(np.flatnonzero(wanted))
        kinds.append(np.full(len(places[-1]), number))
    empty = np.ones(len(frame), dtype=bool)
    empty[np.concatenate(places)] = False
    places.append(np.flatnonzero(empty))
    kinds.append(np.full(len(places[-1]), _NOTHING))
    source, kind = np.concatenate(places), np.concatenate(kinds)
    order = np.argsort(source, kind="stable")
    source, kind = source[order], kind[order]
    result = Mapped(
        frame.take(source).reset_index(drop=True),
        mapped.given,
        _bad_rows(mapped, classes=list(classes), source=source, kind=kind),
        mapped.ragged[source],
        mapped.findings,
    )
    below = _fill(result.frame, settings, list(classes), kind)
    return LongPieces(result, kind == _NOTHING, below)


def _bad(mapped: Mapped, column: str) -> np.ndarray:
    mask = np.zeros(len(mapped.frame), dtype=bool)
    if column in mapped.bad:
        mask[mapped.bad[column].index] = True
    return mask


def _own_rows(mapped: Mapped, own: list[str], *, wide: bool) -> np.ndarray:
    """Tell which rows are a piece or tally of their own, classes in columns aside."""
    frame = mapped.frame
    if not own:
        return np.zeros(len(frame), dtype=bool)
    found = _bad(mapped, "diameter") | _bad(mapped, "count") | (frame["size_class"] != "").to_numpy()
    found |= ((frame["diameter_cm"].fillna(0) != 0) | (frame["count"].fillna(0) != 0)).to_numpy()
    if not wide:
        # Who notes species or decay has a piece before him, even where the diameter was forgotten.
        for name in ("decay_class", "wood", "species"):
            found |= (frame[name] != "").to_numpy()
    return found


def _bad_rows(mapped: Mapped, *, classes: list[str], source: np.ndarray, kind: np.ndarray) -> dict[str, pd.Series]:
    """Move the texts of unreadable cells to the rows they matter for."""
    first = np.append(True, source[1:] != source[:-1])[: len(source)]
    moved = {}
    for column, texts in mapped.bad.items():
        touched = np.isin(source, texts.index)
        if column in _FIGURES:
            touched &= kind == _BASE
        elif column in map(class_column, classes):
            touched &= kind == [class_column(name) for name in classes].index(column)
        elif column != "line_length":
            touched &= first
        rows = np.flatnonzero(touched)
        moved[column] = pd.Series(texts.loc[source[rows]].to_numpy(), index=rows, dtype="str")
    return {column: texts for column, texts in moved.items() if len(texts)}


def _fill(frame: pd.DataFrame, settings: Settings, classes: list[str], kind: np.ndarray) -> dict[str, np.ndarray]:
    """Write class, figure and length of line into the rows of the classes; return the figures below zero."""
    below = {}
    levels = frame["size_class"].cat.categories.union(pd.Index(classes, dtype="str"))
    frame["size_class"] = frame["size_class"].cat.set_categories(levels)
    for number, name in enumerate(classes):
        rows, one = kind == number, settings.dead_wood.classes[name]
        values = frame.loc[rows, class_column(name)].to_numpy()
        negative = np.zeros(len(frame), dtype=bool)
        negative[rows] = values < 0
        below[name] = negative
        frame.loc[rows, "size_class"] = name
        frame.loc[rows, "count"] = values if one.count else 1.0
        frame.loc[rows, "diameter_cm"] = np.nan if one.count else values
        frame.loc[rows, "diameter_2_cm"] = np.nan
    for name, one in settings.dead_wood.classes.items():
        if one.line_m is not None:
            of_class = (frame["size_class"] == name) & frame["line_m"].isna()
            frame.loc[of_class, "line_m"] = one.line_m
    return below
