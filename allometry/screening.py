"""Screening of the catalogue: equations that stand far from the others of their genus.

The test is a comparison of published equations with each other, not with trees. It finds slips (another unit, another
definition, a misprint), not the better equation. Its limits are data (``allometry/equations/rules.toml``), its
outcome is stored (``screened.csv``), and a test recomputes it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from allometry._build import Equation
from allometry._tables import folder, read_rules
from allometry.catalogue import Catalogue
from allometry.forms import FloatArray

__all__ = ["COLUMNS", "screen", "screening_height"]

COLUMNS = ["equation_id", "worst_ratio", "at_dbh_cm", "n_others"]
KNOWN_INPUTS = {"dbh_cm", "height_m"}
ROUNDING = 1e-12
"""Relative slack so that the ends of a range count as inside."""


@dataclass(frozen=True)
class Member:
    """An equation of a genus and the diameters it is compared at."""

    equation: Equation
    low: float
    high: float


def screening_height(dbh_cm: FloatArray) -> FloatArray:
    """Return the stated height of the screening.

    Parameters
    ----------
    dbh_cm
        Diameter at breast height [cm].

    Returns
    -------
    ndarray
        Height [m] of the curve in ``rules.toml``.
    """
    return _height(np.asarray(dbh_cm, dtype=float), read_rules(folder())["screening"])


def screen(catalogue: Catalogue) -> pd.DataFrame:
    """Compare each usable equation with the median of the others of its genus.

    Parameters
    ----------
    catalogue
        The catalogue.

    Returns
    -------
    DataFrame
        Equations more than the factor away somewhere in their own range: ``equation_id``, ``worst_ratio`` (value over
        median of the others), ``at_dbh_cm``, ``n_others`` (equations in that median); sorted by id.
    """
    rules = read_rules(folder())["screening"]
    found: dict[str, tuple[float, float, int]] = {}
    for members in _genera(catalogue, rules).values():
        if len(members) < rules["members"]:
            continue
        for i, member in enumerate(members):
            worst = _worst(catalogue, member, members[:i] + members[i + 1 :], rules)
            if worst is None or abs(np.log(worst[0])) <= np.log(rules["factor"]):
                continue
            before = found.get(member.equation.equation_id)
            if before is None or abs(np.log(worst[0])) > abs(np.log(before[0])):
                found[member.equation.equation_id] = worst
    rows = [(name, round(r, 3), round(d, 1), n) for name, (r, d, n) in sorted(found.items())]
    return pd.DataFrame(rows, columns=COLUMNS)


def _genera(catalogue: Catalogue, rules: dict[str, Any]) -> dict[str, list[Member]]:
    genera: dict[str, list[Member]] = {}
    for e in catalogue.equations:
        if e.component not in rules["components"] or not e.usable or not e.is_mass:
            continue
        if not e.genus or not set(e.input_names) <= KNOWN_INPUTS or "dbh_cm" not in e.input_names:
            continue
        low = max(rules["floor_cm"], np.nan_to_num(e.dbh_min_cm, nan=0.0))
        high = np.nan_to_num(e.dbh_max_cm, nan=rules["ceiling_cm"])
        if low < high:
            for genus in e.genus.split("; "):
                genera.setdefault(genus, []).append(Member(e, low, high))
    return genera


def _worst(
    catalogue: Catalogue, member: Member, others: list[Member], rules: dict[str, Any]
) -> tuple[float, float, int] | None:
    dbh = np.geomspace(member.low, member.high, rules["diameters"])
    masses = _masses(catalogue, [member, *others], dbh, rules)
    count = np.isfinite(masses[1:]).sum(axis=0)
    covered = count >= rules["median_of"]
    if not covered.any():
        return None
    median = np.full(len(dbh), np.nan)
    median[covered] = np.nanmedian(masses[1:, covered], axis=0)
    ratio = masses[0] / median
    distance = np.abs(np.log(np.where(ratio > 0, ratio, np.nan)))
    if not np.isfinite(distance).any():
        return None
    at = int(np.nanargmax(distance))
    return float(ratio[at]), float(dbh[at]), int(count[at])


def _masses(catalogue: Catalogue, members: list[Member], dbh: FloatArray, rules: dict[str, Any]) -> FloatArray:
    codes = np.repeat([catalogue.code(m.equation.equation_id) for m in members], len(dbh))
    grid = np.tile(dbh, len(members))
    mass, _ = catalogue.evaluate_codes(codes, grid, _height(grid, rules))
    low = np.array([m.low for m in members])[:, None] * (1 - ROUNDING)
    high = np.array([m.high for m in members])[:, None] * (1 + ROUNDING)
    return np.where((dbh >= low) & (dbh <= high), mass.reshape(len(members), -1), np.nan)


def _height(dbh: FloatArray, rules: dict[str, Any]) -> FloatArray:
    return np.asarray(rules["breast_height_m"] + (dbh / (rules["height_a"] + rules["height_b"] * dbh)) ** 2)
