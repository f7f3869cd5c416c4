"""Sampling lines: which count, how long they are for each size class, and which piece lies on which."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from landcarbon.factors.dead_wood import rule
from landcarbon.pools.wood import RowCheck

__all__ = ["LINE_KEYS", "LaidLines", "check_lines", "class_lengths"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

LINE_KEYS = ("survey", "plot", "subplot", "line")
_RIGHT_ANGLE_DEG = 90.0


@dataclass(frozen=True)
class LaidLines:
    """Lines as they count.

    Attributes
    ----------
    rows : DataFrame
        The table of lines.
    used : ndarray of bool
        Whether the line counts.
    plots : DataFrame
        survey and plot of every plot with a line that counts.
    plot : ndarray of int
        Row in ``plots``; -1 where the line does not count.
    length_m : ndarray of float
        Length as laid out [m].
    to_horizontal : ndarray of float
        Factor from laid-out to horizontal length.
    findings : DataFrame
        What was wrong.
    """

    rows: pd.DataFrame
    used: BoolArray
    plots: pd.DataFrame
    plot: IntArray
    length_m: FloatArray
    to_horizontal: FloatArray
    findings: pd.DataFrame


def check_lines(lines: pd.DataFrame, *, default_m: float, along_slope: bool, longest_class_m: float = 0.0) -> LaidLines:
    """Settle which lines count and how long they are.

    Parameters
    ----------
    lines : DataFrame
        survey, plot, subplot, line, length_m, slope_deg, used.
    default_m : float
        Length where a line states none [m].
    along_slope : bool
        Lengths were laid out along the slope and shrink by cos(slope) in the map plane.
    longest_class_m : float
        Longest length of line stated for a size class [m].
    """
    check = RowCheck("lines", lines)
    stated = lines["length_m"].to_numpy(dtype=float)
    length = np.where(np.isnan(stated), default_m, stated)
    check.apply("line without length", ~(length > 0.0) | ~np.isfinite(length))
    slope = lines["slope_deg"].to_numpy(dtype=float)
    if along_slope:
        check.apply("slope of line impossible", (slope < 0.0) | (slope >= _RIGHT_ANGLE_DEG))
        check.apply("slope of line missing", np.isnan(slope))
        check.apply("line very steep", slope > rule("steep_line_deg"))
    repeated = lines.loc[check.used].duplicated(list(LINE_KEYS)).to_numpy()
    twice = np.zeros(len(lines), dtype=bool)
    twice[np.flatnonzero(check.used)] = repeated
    check.apply("line listed twice", twice)
    check.apply("size class longer than its line", length < longest_class_m)
    to_horizontal = np.cos(np.radians(np.nan_to_num(slope))) if along_slope else np.ones(len(lines))
    kept = lines.loc[check.used, ["survey", "plot"]].astype("str")
    groups = kept.groupby(["survey", "plot"], sort=False).ngroup().to_numpy()
    plot = np.full(len(lines), -1, dtype=np.int64)
    plot[check.used] = groups
    return LaidLines(
        rows=lines,
        used=check.used,
        plots=kept.drop_duplicates().reset_index(drop=True),
        plot=plot,
        length_m=length,
        to_horizontal=to_horizontal,
        findings=check.findings(),
    )


def class_lengths(
    laid: LaidLines, class_m: Mapping[str, float], line: IntArray, size: IntArray, own_m: FloatArray
) -> FloatArray:
    """Horizontal length each plot was sampled with, for every size class.

    Parameters
    ----------
    laid : LaidLines
        The lines.
    class_m : mapping
        Length of a line for each class [m]; NaN takes the line's own.
    line, size : ndarray of int
        Line and class of each piece that counts.
    own_m : ndarray of float
        Length stated with the piece [m]; NaN if none.

    Returns
    -------
    ndarray of float, shape (plots, classes)
        Metres.

    Notes
    -----
    A length stated with the pieces of a class counts for that line; lines where no piece of the class was found take
    the length stated most often for the class, as the crew walked that far and met nothing.
    """
    stated = np.isfinite(own_m)
    lengths = np.empty((len(laid.plots), len(class_m)))
    rows = np.flatnonzero(laid.used)
    for position, value in enumerate(class_m.values()):
        length = laid.length_m[rows].copy() if np.isnan(value) else np.full(len(rows), value)
        mine = stated & (size == position)
        if mine.any():
            per_line = pd.Series(own_m[mine]).groupby(line[mine]).first()
            usual = float(pd.Series(own_m[mine]).mode().iloc[0])
            length = per_line.reindex(rows).fillna(usual).to_numpy()
        weights = length * laid.to_horizontal[rows]
        lengths[:, position] = np.bincount(laid.plot[rows], weights=weights, minlength=len(laid.plots))
    return lengths
