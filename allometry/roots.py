"""Below-ground biomass from above-ground biomass.

Two levels that are never mixed: *stand* models take the shoot biomass of a hectare (t/ha), *tree* models the shoot
biomass of one tree (kg). Most stand models are curved, so that using one on single trees, or on carbon in place of
dry mass, gives a wrong number; asking for it is an error.
"""

from __future__ import annotations

from collections.abc import Callable
from difflib import get_close_matches
from functools import cache
from typing import NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from allometry._data import read_data
from allometry.errors import AllometryError, RootLevelError, UnknownModelError

__all__ = ["StandRoots", "default_model", "level", "root_models", "root_rows", "stand_roots", "tree_roots"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_NUMBERS = ("b0", "b1", "b2", "b3", "ratio", "ratio_low", "ratio_high", "agb_min_t_ha", "agb_max_t_ha")


class StandRoots(NamedTuple):
    """Root biomass of stands and whether the model was used outside its printed range."""

    root_t_ha: FloatArray
    out_of_range: BoolArray


def _log_linear(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    return np.exp(row["b0"] + row["b1"] * np.log(shoot))


def _log_linear_age(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    if age is None:
        raise AllometryError(f"root model {row['model_id']!r} needs the stand age in years; give age.")
    return np.exp(row["b0"] + row["b1"] * np.log(shoot) + row["b2"] * np.log(np.where(age > 0, age, np.nan)))


def _log_linear_zone(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    # The zone constant is added to the exponent, outside the logarithm of the biomass.
    return np.exp(row["b0"] + row["b1"] * np.log(shoot) + row["b2"])


def _power(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    return row["b0"] * shoot ** row["b1"]


def _exp_power(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    return np.exp(row["b0"]) * shoot ** row["b1"]


def _proportional(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    return row["b0"] * shoot


def _inverted_log10(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> FloatArray:
    # Published the other way round (shoot from root) by reduced major axis, which may be inverted.
    return 10.0 ** ((np.log10(shoot) - row["b1"]) / row["b0"])


_REGRESSIONS: dict[str, Callable[[pd.Series, FloatArray, FloatArray | None], FloatArray]] = {
    "exp(b0+b1*ln(AGB))": _log_linear,
    "exp(b0+b1*ln(AGB)+b2*ln(AGE))": _log_linear_age,
    "exp(b0+b1*ln(AGB)+b2)": _log_linear_zone,
    "b0*AGB^b1": _power,
    "exp(b0)*AGB^b1": _exp_power,
    "b0*AGB": _proportional,
    "10^((log10(AGB)-b1)/b0)": _inverted_log10,
}
"""Printed formula -> function; a closed set, nothing is parsed."""


@cache
def _rows() -> pd.DataFrame:
    return read_data("root_models", numbers=_NUMBERS).set_index("model_id", drop=False)


@cache
def _sets() -> dict[str, pd.DataFrame]:
    return {str(name): part for name, part in read_data("root_sets").groupby("set_id", sort=False)}


@cache
def _tree_ratios() -> dict[str, pd.DataFrame]:
    return {str(name): part for name, part in read_data("root_tree_ratios").groupby("model_id", sort=False)}


def root_rows() -> pd.DataFrame:
    """Every printed row, with source, table, class bounds, spread and trust.

    Returns
    -------
    DataFrame
        The table ``data/root_models.csv``. Biomass in t of dry matter per hectare, ratios root over shoot.
    """
    return _rows().reset_index(drop=True).copy()


def _usable(row: pd.Series) -> bool:
    return row["level"] != "none" and (row["form"] in _REGRESSIONS or bool(np.isfinite(row["ratio"])))


@cache
def _models() -> pd.DataFrame:
    rows = _rows()
    found: list[dict[str, str]] = []
    for _, row in rows.iterrows():
        if _usable(row):
            title = f"{row['source_key']} {row['source_table']}: {row['biome_or_group']}"
            kind = "regression" if row["form"] in _REGRESSIONS else "ratio"
            found.append(_entry(row["model_id"], row["level"], kind, row["known"], row["source_key"], title))
    for name, part in _sets().items():
        members = rows.loc[part["model_id"]]
        known = _worst(members["known"])
        found.append(_entry(name, "stand", "classes", known, members["source_key"].iloc[0], part["title"].iloc[0]))
    for name, part in _tree_ratios().items():
        known = _worst(rows.loc[part["row_id"], "known"]) if part["source"].eq("root_models").all() else "read"
        title = "; ".join(part["where"].unique())
        found.append(_entry(name, "tree", "ratio", known, part["where"].iloc[0].split()[0], title))
    return pd.DataFrame(found).set_index("model_id", drop=False)


def _entry(model_id: str, at: str, kind: str, known: str, source: str, title: str) -> dict[str, str]:
    return dict(model_id=model_id, level=at, kind=kind, known=known, source_key=source, title=title)


def _worst(known: pd.Series) -> str:
    return max(known, key=["read", "secondary", "memory"].index)


def root_models() -> pd.DataFrame:
    """Models a user may name.

    Returns
    -------
    DataFrame
        model_id, level (stand or tree), kind (regression, ratio, or classes: a set of ratios of which the stand
        biomass picks one), known (read, secondary, memory: the weakest of its rows), source_key, title.
    """
    return _models().reset_index(drop=True).copy()


def _model(model_id: str) -> pd.Series:
    models = _models()
    if model_id in models.index:
        return pd.Series(models.loc[model_id])
    if model_id in _rows().index:
        raise UnknownModelError(
            f"root model {model_id!r} is printed without a value that can be applied; "
            "allometry.roots.root_models() lists the usable ones."
        )
    near = get_close_matches(model_id, models.index, n=3, cutoff=0.5)
    hint = f"near: {', '.join(near)}" if near else "allometry.roots.root_models() lists them"
    raise UnknownModelError(f"root model {model_id!r} does not exist; {hint}.")


def level(model_id: str) -> str:
    """Whether a model is for stands or for single trees.

    Parameters
    ----------
    model_id : str
        Id from :func:`root_models`.

    Returns
    -------
    str
        "stand" (t/ha) or "tree" (kg).

    Raises
    ------
    UnknownModelError
        If there is no such model.
    """
    return str(_model(model_id)["level"])


def default_model(region: str) -> pd.Series:
    """Model taken where the user names none.

    Parameters
    ----------
    region : str
        north_america, europe, tropics, mangrove or australia.

    Returns
    -------
    Series
        model_id, reason, known.

    Raises
    ------
    AllometryError
        If the region is not one of the five.
    """
    table = read_data("root_defaults").set_index("region")
    if region not in table.index:
        raise AllometryError(f"region {region!r} is not known; accepted: {', '.join(table.index)}.")
    return pd.Series(table.loc[region])


def stand_roots(
    model_id: str, shoot_t_ha: ArrayLike, conifer_share: ArrayLike | None = None, age: ArrayLike | None = None
) -> StandRoots:
    """Root biomass per hectare from shoot biomass per hectare.

    Parameters
    ----------
    model_id : str
        A stand model of :func:`root_models`.
    shoot_t_ha : array_like
        Above-ground dry matter of the stand [t/ha], not carbon. Zero gives zero, NaN gives NaN.
    conifer_share : array_like, optional
        Share of the shoot biomass in conifers [0..1]; needed by models that keep conifers and broadleaves apart.
    age : array_like, optional
        Stand age [years]; needed by one model.

    Returns
    -------
    StandRoots
        ``root_t_ha`` [t/ha] and ``out_of_range`` (True where the stand biomass lies in no printed class; the
        regressions were printed without a range).

    Raises
    ------
    RootLevelError
        If the model is for single trees.
    AllometryError
        If a needed input is missing, or biomass is negative.

    Notes
    -----
    A class printed "<125" holds biomass below 125 and the next class starts at 125; "<=125" holds 125 itself. Where
    the biomass lies in no class of a set the nearest class is used and flagged. With both conifers and broadleaves
    the class is picked by the biomass of the whole stand and the two ratios are weighted with the shares; models
    fitted to the softwood and the hardwood part of a stand are applied to each part.

    Examples
    --------
    >>> stand_roots("ipcc2006_temperate_conifer", [100.0]).root_t_ha.round(6).tolist()
    [29.0]
    """
    if level(model_id) != "stand":
        raise RootLevelError(
            f"root model {model_id!r} is for single trees (kg per tree) and was asked for stands (t/ha); "
            "use tree_roots, or name a stand model."
        )
    shoot = np.atleast_1d(np.asarray(shoot_t_ha, dtype="float64"))
    if np.any(shoot < 0):
        raise AllometryError(f"shoot biomass must not be negative; the lowest given is {np.nanmin(shoot):g} t/ha.")
    ages = None if age is None else np.broadcast_to(np.asarray(age, dtype="float64"), shoot.shape)
    parts = _sets().get(model_id)
    if parts is None:
        return _one_row(pd.Series(_rows().loc[model_id]), shoot, ages)
    if parts["part"].eq("all").all():
        return _classes(parts["model_id"], shoot, ages)
    share = _share(model_id, conifer_share, shoot)
    return _mixed(parts, shoot, share, ages)


def _share(model_id: str, conifer_share: ArrayLike | None, shoot: FloatArray) -> FloatArray:
    if conifer_share is None:
        raise AllometryError(
            f"root model {model_id!r} keeps conifers and broadleaves apart; give conifer_share (0 to 1)."
        )
    share = np.broadcast_to(np.asarray(conifer_share, dtype="float64"), shoot.shape)
    if np.any((share < 0) | (share > 1)):
        raise AllometryError("conifer_share must lie between 0 and 1.")
    # A stand without biomass has no share; its roots are zero whatever the share.
    return np.where((shoot == 0) & np.isnan(share), 0.0, share)


def _mixed(parts: pd.DataFrame, shoot: FloatArray, share: FloatArray, age: FloatArray | None) -> StandRoots:
    total = np.zeros_like(shoot)
    flag = np.zeros(shoot.shape, dtype=bool)
    for part, weight in (("conifer", share), ("broadleaf", 1.0 - share)):
        rows = parts[parts["part"] == part]
        by_part = rows["mix"].iloc[0] == "part"
        found = _classes(rows["model_id"], shoot * weight if by_part else shoot, age)
        total = total + (found.root_t_ha if by_part else found.root_t_ha * weight)
        flag |= found.out_of_range & (weight > 0)
    return StandRoots(total, flag)


def _one_row(row: pd.Series, shoot: FloatArray, age: FloatArray | None) -> StandRoots:
    outside = np.isfinite(shoot) & (shoot > 0) & ~_within(row, shoot)
    if row["form"] in _REGRESSIONS:
        positive = np.where(shoot > 0, shoot, np.nan)
        root = np.where(shoot == 0, 0.0, _REGRESSIONS[row["form"]](row, positive, age))
        return StandRoots(root, outside)
    return StandRoots(row["ratio"] * shoot, outside)


def _within(row: pd.Series, shoot: FloatArray) -> BoolArray:
    low, high = row["agb_min_t_ha"], row["agb_max_t_ha"]
    inside = np.ones(shoot.shape, dtype=bool)
    bound_in_lower = row["bound_belongs"] == "lower class"
    if np.isfinite(low):
        inside &= (shoot > low) if bound_in_lower else (shoot >= low)
    if np.isfinite(high):
        inside &= (shoot <= high) if bound_in_lower else (shoot < high)
    return inside


def _classes(model_ids: pd.Series, shoot: FloatArray, age: FloatArray | None) -> StandRoots:
    rows = _rows().loc[list(model_ids)]
    if len(rows) == 1:
        return _one_row(rows.iloc[0], shoot, age)
    root = np.full(shoot.shape, np.nan)
    flag = np.zeros(shoot.shape, dtype=bool)
    open_rows = rows[rows["agb_min_t_ha"].isna() & rows["agb_max_t_ha"].isna()]
    bounded = rows.drop(open_rows.index)
    for _, row in bounded.iterrows():
        here = _within(row, shoot) & np.isnan(root)
        root[here] = row["ratio"] * shoot[here]
    left = np.isnan(root) & np.isfinite(shoot)
    if len(open_rows):
        root[left] = open_rows["ratio"].iloc[0] * shoot[left]
    elif left.any():
        distance = [_distance(row, shoot) for _, row in bounded.iterrows()]
        nearest = np.argmin(distance, axis=0)
        root[left] = bounded["ratio"].to_numpy()[nearest][left] * shoot[left]
        flag[left] = shoot[left] > 0
    return StandRoots(root, flag)


def _distance(row: pd.Series, shoot: FloatArray) -> FloatArray:
    low = row["agb_min_t_ha"] if np.isfinite(row["agb_min_t_ha"]) else -np.inf
    high = row["agb_max_t_ha"] if np.isfinite(row["agb_max_t_ha"]) else np.inf
    return np.where(np.isfinite(shoot), np.maximum(np.maximum(low - shoot, shoot - high), 0.0), 0.0)


def tree_roots(model_id: str, biomass_kg: ArrayLike, dbh_cm: ArrayLike, conifer: ArrayLike) -> FloatArray:
    """Root biomass of single trees from their shoot biomass.

    Parameters
    ----------
    model_id : str
        A tree model of :func:`root_models`.
    biomass_kg : array_like
        Above-ground dry mass of the tree [kg], not carbon.
    dbh_cm : array_like
        Diameter at breast height [cm]; used by ratios that change with size.
    conifer : array_like of bool
        True for conifers.

    Returns
    -------
    ndarray
        Root dry mass [kg]; NaN where an input it needs is NaN.

    Raises
    ------
    RootLevelError
        If the model is for stands.

    Notes
    -----
    The size-dependent ratios hold coarse roots only; they are little more than a mean (R2 of 0.02 and 0.03 for coarse
    roots in jenkins2003, Table 6).
    """
    if level(model_id) != "tree":
        raise RootLevelError(
            f"root model {model_id!r} is for stands (t/ha) and was asked for single trees (kg per tree); "
            "use stand_roots with the biomass per hectare of the plot, or name a tree model."
        )
    biomass = np.atleast_1d(np.asarray(biomass_kg, dtype="float64"))
    parts = _tree_ratios().get(model_id)
    if parts is None:
        return float(str(_rows().loc[model_id, "ratio"])) * biomass
    diameter = np.broadcast_to(np.asarray(dbh_cm, dtype="float64"), biomass.shape)
    is_conifer = np.broadcast_to(np.asarray(conifer, dtype=bool), biomass.shape)
    ratio = np.full(biomass.shape, np.nan)
    for part, source, row_id in zip(parts["part"], parts["source"], parts["row_id"], strict=True):
        here = {"all": np.ones_like(is_conifer), "conifer": is_conifer, "broadleaf": ~is_conifer}[part]
        ratio = np.where(here, _tree_ratio(source, row_id, diameter), ratio)
    return ratio * biomass


def _tree_ratio(source: str, row_id: str, diameter: FloatArray) -> FloatArray:
    if source == "root_models":
        return np.full(diameter.shape, _rows().loc[row_id, "ratio"])
    from allometry.catalogue import load_catalogue  # the catalogue is large; stand models do without it

    return np.asarray(load_catalogue().value(row_id, np.where(diameter > 0, diameter, np.nan)), dtype="float64")
