"""Checks of single tree rows: diameter, height, expansion factor, weight, and rows that stand twice."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from landcarbon.check.keys import combined_codes, tree_keys
from landcarbon.check.rules import Outcome, joined, rule

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = [
    "design_limits",
    "diameters",
    "diameters_of_kind",
    "doubles",
    "expansions",
    "heights",
    "tally_limit",
    "weights",
]

_MEASURED = ["species", "status", "dbh_cm", "height_m", "expansion_per_ha", "weight", "decay_class"]


def diameters(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside live and dead rows whose diameter is missing, zero, negative or impossible.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    trees = inputs.trees
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    live, dead = _standing(trees)
    impossible = rule("dbh impossible")
    masks = {
        "dead without diameter": dead & (np.isnan(dbh) | (dbh == 0)),
        "dbh missing": live & np.isnan(dbh),
        "dbh zero": live & (dbh == 0),
        "dbh negative": (live | dead) & (dbh < 0),
        impossible.name: (live | dead) & (dbh > impossible.limits["cm"]),
    }
    parts = [rule(name).found(trees[mask]) for name, mask in masks.items()]
    return Outcome(joined(parts), aside=np.logical_or.reduce(list(masks.values())))


def diameters_of_kind(inputs: Inputs, settings: Settings) -> Outcome:
    """Point at very large diameters, and at those far beyond the same species in this inventory.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Findings only.
    """
    far, large = rule("dbh far from its kind"), rule("dbh very large")
    trees = inputs.trees
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    standing = np.logical_or(*_standing(trees))
    very = standing & (dbh > large.limits["cm"])
    groups = trees.loc[standing, ["species", "dbh_cm"]].groupby("species", observed=True)["dbh_cm"]
    limit = far.limits["factor"] * groups.quantile(far.limits["quantile"])
    limit = limit[groups.size() >= far.limits["trees"]]
    of_row = trees["species"].astype("object").map(limit).to_numpy(dtype=float)
    beyond = standing & ~very & (dbh > of_row)
    return Outcome(joined([large.found(trees[very]), far.found(trees[beyond])]))


def tally_limit(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside live and dead rows thinner than the smallest diameter the plot design tallies.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file: ``plots.design``.

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    limits = design_limits(settings.plots.design)
    if not limits:
        return Outcome()
    limit = min(limits)
    live, dead = _standing(inputs.trees)
    below = (live | dead) & (inputs.trees["dbh_cm"].to_numpy(dtype=float) < limit)
    parts = [
        rule("below tally limit").found(inputs.trees[below], fill={"limit": limit}),
        _mostly_below(inputs, live, below, limit),
    ]
    return Outcome(joined(parts), aside=below)


def _mostly_below(inputs: Inputs, live: np.ndarray, below: np.ndarray, limit: float) -> pd.DataFrame:
    """Warn of surveys whose live trees mostly lie below the tally limit, as a wrong unit makes them."""
    mostly = rule("mostly below tally limit")
    table = pd.DataFrame(
        {
            "survey": inputs.trees["survey"].astype("object").to_numpy()[live],
            "dbh_cm": inputs.trees["dbh_cm"].to_numpy(dtype=float)[live],
            "below": below[live],
        }
    )
    parts = []
    for survey, rows in table.groupby("survey", sort=True):
        count = int(rows["below"].sum())
        if len(rows) >= mostly.limits["rows"] and count > mostly.limits["share"] * len(rows):
            median = f"{rows['dbh_cm'].median():.3g}"
            words = {"count": count, "total": len(rows), "survey": survey, "limit": limit, "median": median}
            parts.append(mostly.found(fill=words, survey=str(survey), value=f"{median} cm"))
    return joined(parts)


def design_limits(design: Any) -> list[float]:
    """Return the smallest diameters of the design's circles [cm]; empty if it names none."""
    return [float(circle.dbh_min_cm) for circle in getattr(design, "circles", None) or ()]


def expansions(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside live and dead rows without an expansion factor where the design takes it from the rows.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file: ``plots.design``.

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    if settings.plots.design.kind != "weighted":
        return Outcome()
    live, dead = _standing(inputs.trees)
    value = inputs.trees["expansion_per_ha"].to_numpy(dtype=float)
    bad = (live | dead) & ~((value > 0) & np.isfinite(value))
    return Outcome(rule("expansion missing").found(inputs.trees[bad]), aside=bad)


def weights(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside live and dead rows whose tree weight is blank, negative or infinite.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    live, dead = _standing(inputs.trees)
    value = inputs.trees["weight"].to_numpy(dtype=float)
    bad = (live | dead) & ~((value >= 0) & np.isfinite(value))
    return Outcome(rule("weight invalid").found(inputs.trees[bad]), aside=bad)


def heights(inputs: Inputs, settings: Settings) -> Outcome:
    """Have heights ignored that cannot be, or that do not go with the diameter; the rows stay in use.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file (not used).

    Returns
    -------
    Outcome
        Rows whose height is to be ignored, and findings.
    """
    impossible, against, unusual = rule("height impossible"), rule("height against diameter"), rule("height unusual")
    trees = inputs.trees
    live, dead = _standing(trees)
    height, dbh = trees["height_m"].to_numpy(dtype=float), trees["dbh_cm"].to_numpy(dtype=float)
    limits = impossible.limits
    cannot_be = (live | dead) & ((height <= limits["breast_height_m"]) | (height > limits["m"]))
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = 100.0 * height / dbh
    sound = live & ~cannot_be & ~np.isnan(ratio)
    off = sound & _outside(ratio, against.limits, dbh)
    odd = sound & ~off & _outside(ratio, unusual.limits, dbh)
    text = [f"{h:g} m at {d:g} cm" for h, d in zip(height[off], dbh[off], strict=True)]
    parts = [
        impossible.found(trees[cannot_be]),
        against.found(trees[off], value=np.array(text, dtype=object)),
    ]
    if odd.any():
        value = f"{ratio[odd].min():.0f} to {ratio[odd].max():.0f}"
        parts.append(unusual.found(fill={"count": int(odd.sum())}, value=value))
    return Outcome(joined(parts), height_ignored=cannot_be | off)


def doubles(inputs: Inputs, settings: Settings) -> Outcome:
    """Set aside rows that repeat a tree of the same survey; point at plots that look entered twice.

    Where stem numbers are in use, the second row of the same number goes. Where none are given, rows of one tree
    number with different values are taken for stems of one tree (or for a misread number) and stay: both stems stand
    in the wood.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    settings : Settings
        The project file: ``trees.stems``.

    Returns
    -------
    Outcome
        Rows set aside and findings.
    """
    trees = inputs.trees
    used = trees["used"].to_numpy(dtype=bool)
    key = tree_keys(trees)
    numbered = used & (key >= 0)
    group = combined_codes(trees["survey"], pd.Series(key))
    values = combined_codes(pd.Series(group), *(trees[name] for name in _MEASURED))
    repeat = _later(group, numbered, trees)
    same = _later(values, numbered, trees)
    stems_numbered = bool((trees["stem"] != "").any())
    other = repeat & ~same
    parts = [rule("duplicate row").found(trees[same])]
    if stems_numbered:
        parts.append(rule("duplicate key").found(trees[other]))
    elif settings.trees.stems == "each":
        parts.append(_per_plot(rule("tree number repeated").name, trees[other]))
    parts.append(_entered_twice(trees, used & (key < 0)))
    return Outcome(joined(parts), aside=same | other if stems_numbered else same)


def _later(code: np.ndarray, eligible: np.ndarray, trees: pd.DataFrame) -> np.ndarray:
    """Mark all but the first row of each code: standing rows before absent ones, then in the order of the files."""
    place = np.flatnonzero(eligible)
    absent = (trees["status"] == "absent").to_numpy(dtype=bool)[place]
    order = place[np.lexsort((trees["row_id"].to_numpy()[place], absent, code[place]))]
    repeat = np.zeros(len(trees), dtype=bool)
    repeat[order[1:]] = code[order[1:]] == code[order[:-1]]
    return repeat


def _entered_twice(trees: pd.DataFrame, eligible: np.ndarray) -> pd.DataFrame:
    """Point at visits on which every unnumbered row occurs at least twice."""
    twice = rule("plot entered twice")
    rows = trees[eligible & (trees["status"] != "absent").to_numpy(dtype=bool)]
    if rows.empty:
        return twice.found(rows)
    visit = combined_codes(rows["survey"], rows["plot"], rows["subplot"])
    alike = combined_codes(pd.Series(visit), *(rows[name] for name in _MEASURED))
    single = np.bincount(alike)[alike] < 2
    count = np.bincount(visit)
    suspect = (np.bincount(visit, weights=single) == 0) & (count >= twice.limits["rows"])
    first = ~pd.Series(visit).duplicated().to_numpy() & suspect[visit]
    words = [{"count": int(number)} for number in count[visit[first]]]
    return twice.found_each(rows[first], words, row=pd.NA, row_id=pd.NA)


def _per_plot(name: str, rows: pd.DataFrame) -> pd.DataFrame:
    """Make one finding per survey and plot that says how many rows there are."""
    if rows.empty:
        return rule(name).found(rows)
    groups = rows.groupby(["survey", "plot"], observed=True, sort=False)
    table = groups.agg(file=("file", "first"), count=("row_id", "size")).reset_index()
    text = np.array([f"{count} rows" for count in table["count"]], dtype=object)
    return rule(name).found_each(table, [{"count": int(count)} for count in table["count"]], value=text)


def _outside(ratio: np.ndarray, limits: Any, dbh: np.ndarray) -> np.ndarray:
    result: np.ndarray = ((ratio < limits["low"]) | (ratio > limits["high"])) & (dbh >= limits["dbh_cm"])
    return result


def _standing(trees: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Return which used rows are live and which are dead."""
    used = trees["used"].to_numpy(dtype=bool)
    status = trees["status"]
    return used & (status == "live").to_numpy(dtype=bool), used & (status == "dead").to_numpy(dtype=bool)
