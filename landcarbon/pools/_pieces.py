"""What tables of wood share: finding the line or plot of a row, limits of pieces, and sums on a plot's area."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.errors import UserError
from landcarbon.factors.dead_wood import rule
from landcarbon.pools.parts import RowShares, make_parts
from landcarbon.pools.wood import KNOWN, RowCheck, Wood, encode

__all__ = ["PLOT_KEYS", "area_parts", "check_hidden", "check_large", "filled", "match_rows", "weakest"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

PLOT_KEYS = ("survey", "plot")
_DENSE = 2**23  # as many combinations of labels fit a plain table of moderate size


def filled(values: pd.Series) -> FloatArray:
    """Numbers with zero where none was recorded."""
    numbers = values.to_numpy(dtype=float)
    return np.where(np.isnan(numbers), 0.0, numbers)


def match_rows(
    rows: pd.DataFrame, places: pd.DataFrame, keys: tuple[str, ...], prefer: BoolArray | None = None
) -> IntArray:
    """Row of ``places`` with the same keys as each row; -1 if there is none.

    Parameters
    ----------
    rows, places : DataFrame
        Both with the columns ``keys`` as text.
    keys : tuple of str
        Columns that must agree.
    prefer : ndarray of bool, optional
        Of equal places the first preferred one is found, else the first.
    """
    row_key = np.zeros(len(rows), dtype=np.int64)
    place_key = np.zeros(len(places), dtype=np.int64)
    span = 1
    missing = np.zeros(len(places), dtype=bool)
    for name in keys:
        codes, labels = encode(rows[name])
        known = {label: code for code, label in reversed(list(enumerate(labels)))}
        same = np.array([known[label] for label in labels], dtype=np.int64)
        place_codes, place_labels = encode(places[name])
        other = np.array([known.get(label, -1) for label in place_labels] or [-1], dtype=np.int64)[place_codes]
        span *= len(labels) + 1
        row_key = row_key * (len(labels) + 1) + (same[codes] if len(labels) else codes)
        place_key = place_key * (len(labels) + 1) + other
        missing |= other < 0
    # A place whose name no row bears cannot be met; distinct negative keys keep it out of the way.
    place_key = np.where(missing, -1 - np.arange(len(places)), place_key)
    order = np.arange(len(places)) if prefer is None else np.argsort(~prefer, kind="stable")
    first = order[~pd.Series(place_key[order]).duplicated().to_numpy()]
    if not len(first):
        return np.full(len(rows), -1, dtype=np.int64)
    if span <= _DENSE:
        table = np.full(span, -1, dtype=np.int64)
        met = first[place_key[first] >= 0]
        table[place_key[met]] = met
        return table[row_key]
    found = pd.Index(place_key[first]).get_indexer(pd.Index(row_key))
    return np.where(found >= 0, first[found], -1)


def check_large(check: RowCheck, mask: BoolArray, diameter: FloatArray, column: str) -> None:
    check.apply("diameter very large", mask & (diameter > rule("large_diameter_cm")), column=column)


def check_hidden(check: RowCheck, mask: BoolArray, rows: pd.DataFrame, diameter: FloatArray) -> None:
    """Check cavity and sunk share of pieces or logs.

    Parameters
    ----------
    check : RowCheck
        Collects the findings.
    mask : ndarray of bool
        Rows with a diameter.
    rows : DataFrame
        hollow_cm, sunk_share.
    diameter : ndarray of float
        Diameter the cavity must fit into [cm].
    """
    hollow = rows["hollow_cm"].to_numpy(dtype=float)
    sunk = rows["sunk_share"].to_numpy(dtype=float)
    check.apply("cavity impossible", mask & ((hollow < 0.0) | (hollow >= diameter)))
    check.apply("sunk share impossible", mask & ((sunk < 0.0) | (sunk > 1.0)))


def weakest(group: IntArray, codes: IntArray, n_groups: int) -> NDArray[np.object_]:
    """Weakest mark of every group; the best mark where there is no row."""
    worst = np.zeros(n_groups, dtype=np.int64)
    for code in range(1, len(KNOWN)):
        worst[np.unique(group[codes == code])] = code
    return np.array(KNOWN, dtype=object)[worst]


def area_parts(
    check: RowCheck,
    volume_m3: FloatArray,
    wood: Wood,
    visited: pd.DataFrame,
    *,
    area_m2: float,
    part: str,
    method: str,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon per plot of pieces measured on an area.

    Parameters
    ----------
    check : RowCheck
        The rows, with those set aside so far.
    volume_m3 : ndarray of float
        Volume per row [m3].
    wood : Wood
        Density and carbon fraction per row.
    visited : DataFrame
        survey, plot where the part was looked for; plots without rows are zero. A column area_m2, if there, holds
        the area of each plot.
    area_m2 : float
        Area the rows were found on [m2], where the plot has none of its own.
    part, method : str
        Labels of the outcome.
    shares : RowShares, optional
        Takes what each row brings in.

    Raises
    ------
    UserError
        If the area is not known.
    """
    places = visited.drop_duplicates(list(PLOT_KEYS)).reset_index(drop=True)
    area = places["area_m2"].to_numpy(dtype=float) if "area_m2" in places else np.full(len(places), area_m2)
    area = np.where(np.isnan(area), area_m2, area)
    if not (area > 0.0).all():
        raise UserError(
            "logs and stumps were measured on an unknown area",
            where="[dead_wood] log_area_m2",
            remedy="State the area in square metres on which they were looked for.",
        )
    row = match_rows(check.rows, places, PLOT_KEYS)
    check.apply("plot not visited for dead wood", row < 0)
    used = check.used
    group = row[used]
    mass = (volume_m3 * wood.density_g_cm3)[used] * M2_PER_HECTARE / area[group]
    carbon = mass * wood.carbon_fraction[used]
    if shares is not None:
        shares.add(check.table, check.rows.loc[used], carbon)
    measured = places[list(PLOT_KEYS)].assign(
        mass_t_ha=np.bincount(group, weights=mass, minlength=len(places)),
        density_t_c_ha=np.bincount(group, weights=carbon, minlength=len(places)),
        samples=np.bincount(group, minlength=len(places)),
    )
    parts = make_parts(measured, pool="dead_wood", part=part, method=method)
    return parts.assign(known=weakest(group, wood.weakest[used], len(parts))), check.findings()
