"""The same tree at two surveys: pairs of measured rows, and whether tree numbers can be trusted for that."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.keys import survey_order, tree_keys, visit_positions
from landcarbon.check.rules import joined, no_findings, rule
from landcarbon.constants import DAYS_PER_YEAR

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs

__all__ = [
    "Numbered",
    "doubtful_surveys",
    "measured_pairs",
    "row_dates",
    "shrink_limit_cm",
    "standing_rows",
    "successive",
    "years_apart",
]

# tenfold by a slipped decimal or mm for cm; inches taken for centimetres (2.54 by definition); girth for diameter (pi)
_FACTORS = {
    10.0: "as if in millimetres and not in centimetres, or a decimal has slipped",
    0.1: "as if in centimetres and not in millimetres, or a decimal has slipped",
    2.54: "as if in centimetres where the other is in inches",
    1 / 2.54: "as if in inches where the other is in centimetres",
    math.pi: "as if girths had been entered",
    1 / math.pi: "as if the other survey had girths entered",
}
_MM_PER_CM = 10.0


@dataclass(frozen=True)
class Numbered:
    """Tree rows with what the checks between surveys need to know of each.

    Attributes
    ----------
    inputs : Inputs
        Canonical tables.
    key : ndarray of int64
        Stem; -1 without a number.
    order : ndarray of int64
        Survey in time, 0 for the first; -1 if not declared.
    standing : ndarray of bool
        Live or dead row, see :func:`standing_rows`.
    """

    inputs: Inputs
    key: np.ndarray
    order: np.ndarray
    standing: np.ndarray

    @classmethod
    def of(cls, inputs: Inputs) -> Numbered:
        """Give each tree row of an inventory its stem and its place in time."""
        trees = inputs.trees
        return cls(inputs, tree_keys(trees), survey_order(trees["survey"], inputs.surveys), standing_rows(trees))

    @property
    def trees(self) -> pd.DataFrame:
        """The tree table."""
        return self.inputs.trees

    @property
    def recorded(self) -> np.ndarray:
        """Rows that tell of the stem: standing ones, and those that say it is absent."""
        absent = (self.trees["status"] == "absent").to_numpy(dtype=bool)
        result: np.ndarray = self.standing | (absent & self.trees["used"].to_numpy(dtype=bool))
        return result

    @property
    def live(self) -> np.ndarray:
        """Live rows in use."""
        return (self.trees["status"] == "live").to_numpy(dtype=bool) & self.trees["used"].to_numpy(dtype=bool)


def standing_rows(trees: pd.DataFrame) -> np.ndarray:
    """Mark live and dead rows, also dead ones set aside because nothing could be measured on them."""
    used = trees["used"].to_numpy(dtype=bool)
    status = trees["status"]
    dead = (status == "dead").to_numpy(dtype=bool)
    nothing = dead & ~(trees["dbh_cm"].to_numpy(dtype=float) > 0)
    return ((status == "live").to_numpy(dtype=bool) & used) | (dead & (used | nothing))


def successive(stems: Numbered, eligible: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Find each eligible row and the eligible row of the same stem in the survey before.

    Parameters
    ----------
    stems : Numbered
        Tree rows by stem and survey.
    eligible : ndarray of bool
        Tree rows to look at.

    Returns
    -------
    first, second : ndarray of int64
        Positions of the earlier and the later row. Stems without a number, or with more than one eligible row in a
        survey, are left out.
    """
    key, order = stems.key, stems.order
    place = np.flatnonzero(eligible & (key >= 0) & (order >= 0))
    if len(place) == 0:
        return place, place
    place = place[np.lexsort((order[place], key[place]))]
    same = (key[place][1:] == key[place][:-1]) & (order[place][1:] == order[place][:-1])
    unclear = np.unique(key[place][1:][same])
    place = place[~np.isin(key[place], unclear)]
    linked = key[place][1:] == key[place][:-1]
    return place[:-1][linked], place[1:][linked]


def row_dates(inputs: Inputs, rows: pd.DataFrame) -> np.ndarray:
    """Give each row a day: its own, else that of its visit, else the middle of the window or year of its survey.

    The last two serve plausibility only; change per year never rests on them.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    rows : DataFrame
        Rows with survey, plot and date.

    Returns
    -------
    ndarray of datetime64
        NaT where nothing is known.
    """
    visits, surveys = inputs.visits, inputs.surveys
    day = _filled(_days(rows["date"]), _days(visits["date"]), visit_positions(rows, visits))
    since, until = _days(surveys["since"]), _days(surveys["until"])
    middle = since + (until - since) // 2
    year = pd.to_numeric(surveys["survey"].astype("str"), errors="coerce")
    year = year.where((year == year.round()) & year.between(1600, 2600))  # a label that reads as a calendar year
    label = _days(pd.to_datetime({"year": year, "month": 7, "day": 1}, errors="coerce"))
    middle = np.where(np.isnat(middle), label, middle)
    return _filled(day, middle, survey_order(rows["survey"], surveys))


def years_apart(since: np.ndarray, until: np.ndarray) -> np.ndarray:
    """Give the years from one day to another, NaN where either is not known."""
    result: np.ndarray = (until - since) / np.timedelta64(1, "D") / DAYS_PER_YEAR
    return result


def measured_pairs(stems: Numbered) -> pd.DataFrame:
    """Pair the measured rows of each stem in successive surveys.

    Parameters
    ----------
    stems : Numbered
        Tree rows by stem and survey.

    Returns
    -------
    DataFrame
        first, second (positions of the tree rows), since, until (places of the surveys in time), dbh_first, dbh_second
        [cm], years, both_live, species_differ, direct (the stem was not recorded as dead or absent in between).
    """
    trees, order = stems.trees, stems.order
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    first, second = successive(stems, stems.standing & trees["used"].to_numpy(dtype=bool) & (dbh > 0))
    day = row_dates(stems.inputs, trees)
    live = (trees["status"] == "live").to_numpy(dtype=bool)
    species = pd.factorize(trees["species"])[0]
    before = np.full(len(trees), -1, dtype=np.int64)
    earlier, later = successive(stems, stems.recorded)
    before[later] = earlier
    return pd.DataFrame(
        {
            "first": first,
            "second": second,
            "since": order[first],
            "until": order[second],
            "dbh_first": dbh[first],
            "dbh_second": dbh[second],
            "years": years_apart(day[first], day[second]),
            "both_live": live[first] & live[second],
            "species_differ": species[first] != species[second],
            "direct": before[second] == first,
        }
    )


def shrink_limit_cm(dbh_cm: np.ndarray) -> np.ndarray:
    """Give the loss of diameter that measuring error can still explain.

    Parameters
    ----------
    dbh_cm : ndarray
        Diameter at the earlier survey [cm].

    Returns
    -------
    ndarray
        Largest loss [cm], as a positive figure.

    Notes
    -----
    Screening rule after Condit et al. (2004): four standard deviations, SD = 0.9036 + 0.006214 d with both in mm; the
    figures are in ``rules.csv`` (rule ``shrank``).
    """
    limits = rule("shrank").limits
    spread_mm = limits["sd_mm"] + limits["sd_mm_per_mm"] * dbh_cm * _MM_PER_CM
    result: np.ndarray = limits["multiple"] * spread_mm / _MM_PER_CM
    return result


def doubtful_surveys(inputs: Inputs, pairs: pd.DataFrame) -> tuple[np.ndarray, pd.DataFrame]:
    """Look for whole surveys in another unit, and for tree numbers that are not permanent.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables.
    pairs : DataFrame
        From :func:`measured_pairs`.

    Returns
    -------
    doubtful : ndarray of bool
        Pairs that are of no use for the checks of single trees.
    findings : DataFrame
        One per pair of surveys concerned.
    """
    names = [str(name) for name in inputs.surveys["survey"]]
    doubtful = np.zeros(len(pairs), dtype=bool)
    parts = []
    spans = pairs[["since", "until"]].drop_duplicates().sort_values(["since", "until"])
    for since, until in spans.to_numpy():
        of_span = ((pairs["since"] == since) & (pairs["until"] == until)).to_numpy()
        rows = pairs[of_span]
        fill = {"since": names[since], "survey": names[until]}
        finding = _unit_of_survey(rows, fill)
        if finding.empty:
            finding = _numbers(rows, fill)
        if len(finding):
            parts.append(finding)
            doubtful |= of_span
    return doubtful, joined(parts)


def _unit_of_survey(rows: pd.DataFrame, fill: dict[str, str]) -> pd.DataFrame:
    unit = rule("unit of a survey")
    rows = rows[rows["both_live"]]
    if len(rows) < unit.limits["trees"]:
        return no_findings()
    ratio = (rows["dbh_second"] / rows["dbh_first"]).to_numpy()
    low, middle, high = np.quantile(ratio, [0.25, 0.5, 0.75])
    near = [factor for factor in _FACTORS if abs(middle / factor - 1) <= unit.limits["tolerance"]]
    if not near or (high - low) / middle > unit.limits["spread"]:
        return no_findings()
    words = {**fill, "ratio": float(middle), "guess": _FACTORS[near[0]]}
    return unit.found(fill=words, survey=fill["survey"], value=f"{middle:.3g}")


def _numbers(rows: pd.DataFrame, fill: dict[str, str]) -> pd.DataFrame:
    permanent = rule("tree numbers not permanent")
    limit = permanent.limits["share"]
    if len(rows) < permanent.limits["trees"]:
        return no_findings()
    other_species = float(rows["species_differ"].mean())
    live = rows[rows["both_live"]]
    loss = (live["dbh_first"] - live["dbh_second"]).to_numpy()
    shrunk = float((loss > shrink_limit_cm(live["dbh_first"].to_numpy())).mean()) if len(live) else 0.0
    if other_species > limit:
        reason = f"{other_species:.0%} have another species"
    elif shrunk > limit:
        reason = f"{shrunk:.0%} have shrunk"
    else:
        return no_findings()
    return permanent.found(fill={**fill, "reason": reason}, survey=fill["survey"])


def _days(values: pd.Series) -> np.ndarray:
    return pd.to_datetime(values).to_numpy().astype("datetime64[s]")


def _filled(day: np.ndarray, source: np.ndarray, at: np.ndarray) -> np.ndarray:
    if len(source) == 0:
        return day
    return np.where(np.isnat(day) & (at >= 0), source[at], day)
