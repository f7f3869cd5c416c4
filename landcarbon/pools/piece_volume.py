"""Volume of a piece of wood from its diameters and length, and of wood crossed by a line.

Formulas of the trade for a round piece; nothing here knows plots or species. Diameters in cm, lengths in m, volumes in
m3 (per piece) or m3/ha (along a line).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import dead_wood_table

__all__ = [
    "FORMULAS",
    "cone_frustum",
    "conic_paraboloid",
    "cylinder",
    "huber",
    "line_volume",
    "neiloid_frustum",
    "newton",
    "piece_volume",
    "pieces_per_ha",
    "section_m2",
    "smalian",
]

FloatArray = NDArray[np.float64]


def section_m2(diameter_cm: ArrayLike) -> FloatArray:
    """Cross-section of a round piece [m2]."""
    diameter = np.asarray(diameter_cm, dtype=float)
    return cast(FloatArray, np.pi / (4.0 * M2_PER_HECTARE) * diameter**2)  # cm2 per m2 equals m2 per ha


def cylinder(length_m: ArrayLike, diameter_cm: ArrayLike) -> FloatArray:
    """Volume of a cylinder [m3]."""
    return np.asarray(length_m, dtype=float) * section_m2(diameter_cm)


def huber(length_m: ArrayLike, middle_cm: ArrayLike) -> FloatArray:
    """Volume from the middle diameter, V = l A_m [m3]."""
    return cylinder(length_m, middle_cm)


def smalian(length_m: ArrayLike, large_cm: ArrayLike, small_cm: ArrayLike) -> FloatArray:
    """Volume of a paraboloid frustum, V = l (A_b + A_s)/2 [m3].

    Notes
    -----
    A flared butt makes it too large.
    """
    return np.asarray(length_m, dtype=float) * (section_m2(large_cm) + section_m2(small_cm)) / 2.0


def newton(length_m: ArrayLike, large_cm: ArrayLike, middle_cm: ArrayLike, small_cm: ArrayLike) -> FloatArray:
    """Volume from three sections, V = l (A_b + 4 A_m + A_s)/6 [m3]."""
    ends = section_m2(large_cm) + section_m2(small_cm)
    return np.asarray(length_m, dtype=float) * (ends + 4.0 * section_m2(middle_cm)) / 6.0


def cone_frustum(length_m: ArrayLike, large_cm: ArrayLike, small_cm: ArrayLike) -> FloatArray:
    """Volume of a cone frustum, V = l (A_b + A_s + sqrt(A_b A_s))/3 [m3]."""
    large, small = section_m2(large_cm), section_m2(small_cm)
    return np.asarray(length_m, dtype=float) * (large + small + np.sqrt(large * small)) / 3.0


def neiloid_frustum(length_m: ArrayLike, large_cm: ArrayLike, small_cm: ArrayLike) -> FloatArray:
    """Volume of a neiloid frustum, V = l/4 (A_b + (A_b^2 A_s)^(1/3) + (A_b A_s^2)^(1/3) + A_s) [m3]."""
    large, small = section_m2(large_cm), section_m2(small_cm)
    between = np.cbrt(large**2 * small) + np.cbrt(large * small**2)
    return np.asarray(length_m, dtype=float) * (large + between + small) / 4.0


def conic_paraboloid(length_m: ArrayLike, large_cm: ArrayLike, small_cm: ArrayLike) -> FloatArray:
    """Volume between cone and paraboloid, V = l/12 (5 A_b + 5 A_s + 2 sqrt(A_b A_s)) [m3].

    Notes
    -----
    The mean of :func:`cone_frustum` and :func:`smalian`.

    References
    ----------
    Fraver, Ringvall and Jonsson 2007, Canadian Journal of Forest Research 37:627-633 (formula recalled, not seen).
    """
    large, small = section_m2(large_cm), section_m2(small_cm)
    return np.asarray(length_m, dtype=float) / 12.0 * (5.0 * (large + small) + 2.0 * np.sqrt(large * small))


#: Formula -> (diameters it needs in the order of its arguments, function).
FORMULAS: dict[str, tuple[tuple[str, ...], Callable[..., FloatArray]]] = {
    "huber": (("middle",), huber),
    "smalian": (("large", "small"), smalian),
    "newton": (("large", "middle", "small"), newton),
    "cone_frustum": (("large", "small"), cone_frustum),
    "neiloid_frustum": (("large", "small"), neiloid_frustum),
    "conic_paraboloid": (("large", "small"), conic_paraboloid),
}


def piece_volume(
    length_m: ArrayLike, large_cm: ArrayLike, middle_cm: ArrayLike, small_cm: ArrayLike, *, formula: str = "auto"
) -> pd.DataFrame:
    """Volume of each piece by the formula its measurements allow.

    Parameters
    ----------
    length_m : array_like
        Length [m].
    large_cm, middle_cm, small_cm : array_like
        Diameters at the two ends and half-way [cm]; NaN where not measured, a zero at the small end is a tip.
    formula : str
        A key of ``FORMULAS``, or "auto": the first rule of ``dead_wood_volume_choice.csv`` whose diameters were
        measured. A piece that lacks a diameter of the named formula falls back to those rules.

    Returns
    -------
    DataFrame
        volume_m3 (NaN where nothing fits), formula (text, "" where none), replaced (bool: another formula than the
        one asked for).

    Raises
    ------
    UserError
        If the formula has no such name.
    """
    if formula != "auto" and formula not in FORMULAS:
        raise UserError(f"no volume formula {formula!r}", remedy=f"Choose auto or one of: {', '.join(FORMULAS)}")
    length = np.atleast_1d(np.asarray(length_m, dtype=float))
    sections = {"large": large_cm, "middle": middle_cm, "small": small_cm}
    given = {name: np.broadcast_to(np.asarray(value, dtype=float), length.shape) for name, value in sections.items()}
    rules = dead_wood_table("volume_choice").sort_values("order")["formula"].tolist()
    order = rules if formula == "auto" else [formula, *rules]
    volume = np.full(length.shape, np.nan)
    chosen = np.full(length.shape, -1)
    for position, name in enumerate(order):
        needs, function = FORMULAS[name]
        fits = (chosen < 0) & np.isfinite(length) & np.all([np.isfinite(given[each]) for each in needs], axis=0)
        if fits.any():
            volume[fits] = function(length[fits], *(given[each][fits] for each in needs))
            chosen[fits] = position
    labels = np.array([*order, ""], dtype=object)
    replaced = np.zeros(length.shape, dtype=bool) if formula == "auto" else chosen != 0
    return pd.DataFrame({"volume_m3": volume, "formula": labels[chosen], "replaced": replaced})


def line_volume(sum_of_squares_cm2: Any, length_m: Any) -> FloatArray:
    """Volume per hectare of wood crossed by a line, V = pi^2/(8 L) sum d^2 [m3/ha].

    Parameters
    ----------
    sum_of_squares_cm2 : array_like
        Sum of the squared diameters at the crossings [cm2], square to the axis of each piece.
    length_m : array_like
        Horizontal length of all lines of the plot together [m].

    Notes
    -----
    With d in cm and L in m the result is in m3/ha without a further factor. Times a density in g/cm3 it is t/ha.

    References
    ----------
    Van Wagner 1968, Forest Science 14:20-26 (formula quoted elsewhere, paper not seen).
    """
    return cast(FloatArray, np.pi**2 / 8.0 * np.asarray(sum_of_squares_cm2, dtype=float) / np.asarray(length_m, float))


def pieces_per_ha(piece_length_m: ArrayLike, length_m: ArrayLike) -> FloatArray:
    """Pieces per hectare that one crossed piece stands for, pi 10 000/(2 L l).

    Parameters
    ----------
    piece_length_m : array_like
        Length of the piece l [m].
    length_m : array_like
        Horizontal length of the line L [m].

    References
    ----------
    John Bell and Associates, Inventory and Cruising Newsletter no. 57, first example.
    """
    product = 2.0 * np.asarray(length_m, dtype=float) * np.asarray(piece_length_m, dtype=float)
    return cast(FloatArray, np.pi * M2_PER_HECTARE / product)
