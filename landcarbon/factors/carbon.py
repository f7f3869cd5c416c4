"""Carbon fractions of dry matter, from ``carbon_fraction.csv``."""

from __future__ import annotations

from functools import cache
from importlib import resources

import numpy as np
import pandas as pd

from landcarbon.errors import SettingsError

__all__ = ["carbon_domains", "carbon_fraction", "carbon_fraction_table"]


@cache
def _table() -> pd.DataFrame:
    with resources.files("landcarbon.factors").joinpath("carbon_fraction.csv").open(encoding="utf-8") as handle:
        return pd.read_csv(handle, keep_default_na=False, na_values=[""])


def carbon_fraction_table() -> pd.DataFrame:
    """Return the factor table: pool, domain, group, part, value, low, high, unit, source, where, known, note."""
    return _table().copy()


def carbon_domains() -> list[str]:
    """Climate domains the above-ground fractions are tabled for."""
    table = _table()
    return list(dict.fromkeys(table.loc[table["pool"] == "above_ground", "domain"]))


def carbon_fraction(group: np.ndarray, *, domain: str, pool: str = "above_ground") -> np.ndarray:
    """Carbon fraction of dry matter for whole trees.

    Parameters
    ----------
    group : array of str
        "conifer", "broadleaf" or anything else; the last takes the value for all trees of the domain.
    domain : str
        One of :func:`carbon_domains`.
    pool : {"above_ground", "dead_wood", "litter"}
        Below-ground biomass takes the above-ground values.

    Returns
    -------
    ndarray of float
        t C per t dry matter, same shape as ``group``.

    Raises
    ------
    SettingsError
        If the domain is not tabled.

    References
    ----------
    IPCC 2006 Guidelines Vol 4, Table 4.3, p. 4.48; Harmon et al. 2013 (abstract) for dead wood.
    """
    table = _table()
    rows = table[(table["pool"] == pool) & table["part"].isin(["all", "wood and bark"])]
    own = rows[rows["domain"] == domain]
    if own.empty and pool == "above_ground":
        raise SettingsError(
            f"no carbon fraction for the domain {domain!r}",
            where="[carbon] domain",
            remedy=f"Choose one of: {', '.join(carbon_domains())}",
        )
    if own.empty:
        own = rows[rows["domain"] == "default"]
    by_group = own.set_index("group")["value"].to_dict()
    fallback = by_group["any"]
    groups = np.asarray(group, dtype=object)
    result = np.full(groups.shape, fallback, dtype=float)
    for name, value in by_group.items():
        result[groups == name] = value
    return result
