"""Factors of dead wood: density by decay class, structure left, fresh density, limits; all from ``dead_wood_*.csv``.

Two sets of density ratios exist, one for down wood and one for standing dead trees; they were measured apart and
differ. A look-up names the position, and the structural factors are only to be had with the set they belong to.
"""

from __future__ import annotations

from functools import cache
from importlib import resources

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from landcarbon.errors import UserError

__all__ = [
    "GROUPS",
    "KNOWN",
    "POSITIONS",
    "collapse_known",
    "collapse_left",
    "dead_wood_table",
    "decay_classes",
    "density_ratios",
    "finding_text",
    "fresh_density",
    "rule",
    "status_loss",
    "structure_left",
    "world_carbon_fraction",
]

FloatArray = NDArray[np.float64]

#: How factors are known, from best to weakest; the position serves as code.
KNOWN = ("read", "secondary", "memory")
#: Groups a piece of wood of unknown species can belong to.
GROUPS = ("softwood", "hardwood", "unknown")
#: Positions dead wood can have; each has density ratios of its own.
POSITIONS = ("down", "standing")


@cache
def _table(name: str) -> pd.DataFrame:
    with resources.files("landcarbon.factors").joinpath(f"dead_wood_{name}.csv").open(encoding="utf-8") as handle:
        table = pd.read_csv(handle, dtype=str, keep_default_na=False)
    for column in ("value", "n", "order"):
        if column in table:
            table[column] = pd.to_numeric(table[column])
    return table


def dead_wood_table(name: str) -> pd.DataFrame:
    """Return a factor table: density, structure, volume, volume_choice, fresh_density, status, carbon or rules."""
    return _table(name).copy()


def decay_classes() -> list[str]:
    """Decay classes of the density ratios, from sound to nearly gone."""
    return sorted(_table("density")["decay_class"].unique())


@cache
def _ratios(position: str) -> pd.DataFrame:
    if position not in POSITIONS:
        raise UserError(
            f"no density ratios for dead wood that is {position!r}", remedy=f"Choose one of: {', '.join(POSITIONS)}"
        )
    rows = _table("density")
    rows = rows[rows["position"] == position]
    return rows.pivot(index="taxon", columns="decay_class", values="value")[decay_classes()]


def density_ratios(position: str, names: pd.Series, group: NDArray[np.object_]) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Density of dead over fresh wood for every decay class.

    Parameters
    ----------
    position : {"down", "standing"}
        Which of the two sets; they are never mixed.
    names : Series of str
        Scientific names.
    group : array of str
        One of ``GROUPS`` per name; used where the set has no row for the species.

    Returns
    -------
    ratios : ndarray of float, shape (names, classes)
        Values as printed, also where they rise from one class to the next or lie above 1.
    own : ndarray of bool
        Whether the row is the species' own.

    References
    ----------
    USDA Forest Service, national species reference table; for standing trees equal to Domke et al. 2011, Table 2.
    """
    table = _ratios(position)
    row = table.index.get_indexer(pd.Index(names))
    own = row >= 0
    row = np.where(own, row, table.index.get_indexer(pd.Index(group)))
    return table.to_numpy(dtype=float)[row], own


@cache
def _structure(position: str) -> pd.DataFrame:
    rows = _table("structure")
    rows = rows[rows["position"] == position]
    if rows.empty:
        raise UserError(
            f"no structural factors for dead wood that is {position!r}",
            remedy="They belong to the density ratios of standing trees; with others bark and branches would be "
            "taken off twice or not at all.",
        )
    return rows.pivot(index="component", columns="decay_class", values="value")[decay_classes()]


def structure_left(position: str, component: str) -> FloatArray:
    """Share of a component still there, for every decay class.

    Parameters
    ----------
    position : str
        The set of density ratios it is to be multiplied with; only "standing" has structural factors.
    component : {"top_and_branches", "bark", "bole", "stump", "roots"}
        Part of the tree.

    Raises
    ------
    UserError
        If the set has no structural factors.

    References
    ----------
    Domke, Woodall and Smith 2011, Carbon Balance and Management 6:14, Table 2 (called preliminary by the authors).
    """
    values: FloatArray = _structure(position).loc[component].to_numpy(dtype=float)
    return values


def collapse_left() -> FloatArray:
    """Share of the round-section volume left in a collapsed log, for every decay class (1 where none is given)."""
    values = _table("volume").set_index("decay_class")["value"]
    return values.reindex(decay_classes(), fill_value=1.0).to_numpy(dtype=float)


def collapse_known() -> int:
    """How the shares of :func:`collapse_left` are known, as a position in ``KNOWN``."""
    return max(KNOWN.index(mark) for mark in _table("volume")["known"])


def status_loss() -> dict[str, float]:
    """Share of the live tree's mass lost, by the status classes of dead mangroves that have one."""
    rows = _table("status")
    return {str(status): float(value) for status, value in zip(rows["status"], rows["value"], strict=True)}


def world_carbon_fraction() -> float:
    """Carbon fraction of the world's dead wood, all taxa (Martin et al. 2021, abstract)."""
    table = _table("carbon")
    return float(table.loc[table["choice"] == "world", "value"].iloc[0])


@cache
def fresh_density(group: str, domain: str) -> float:
    """Density of sound wood where only the group is known [g/cm3].

    Parameters
    ----------
    group : str
        One of ``GROUPS``.
    domain : str
        Climate domain; one without values of its own takes the first of the table.

    References
    ----------
    Means of IPCC 2006 Guidelines Vol 4, Tables 4.13 and 4.14.
    """
    rows = _table("fresh_density")
    rows = rows[rows["group"] == group]
    own = rows[rows["domain"] == domain]
    return float((rows if own.empty else own)["value"].iloc[0])


@cache
def rule(name: str) -> float:
    """Value of a limit or default of the project; its reason stands in ``dead_wood_rules.csv``."""
    rows = _table("rules")
    return float(rows.loc[rows["name"] == name, "value"].iloc[0])


@cache
def _texts() -> dict[str, dict[str, str]]:
    rows = _table("findings").to_dict("records")
    return {str(row["rule"]): {str(name): str(value) for name, value in row.items()} for row in rows}


def finding_text(rule: str) -> dict[str, str]:
    """Severity, column, message and remedy of a finding on dead wood."""
    return _texts()[rule]
