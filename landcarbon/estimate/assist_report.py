"""What rasters brought, pool by pool and stratum by stratum: the table of their worth, and findings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_choice import NONE, OWN, Choice
from landcarbon.estimate.assist_limits import assist_limits
from landcarbon.estimate.assist_lines import Lines
from landcarbon.estimate.notes import name_list
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["REPORT_COLUMNS", "not_used", "worth"]

REPORT_COLUMNS = [
    "survey",
    "pool",
    "stratum",
    "rasters",
    "plots",
    "slopes",
    "relative_efficiency",
    "used",
    "why",
]

_MOST_REASONS = 3  # strata of which a finding tells the reason


def worth(
    gain: pd.DataFrame, choice: Choice, lacking: Mapping[str, str], sums: Mapping[str, Sequence[str]]
) -> pd.DataFrame:
    """Lay out what the rasters bring, by survey, pool and stratum.

    Parameters
    ----------
    gain : DataFrame
        Of ``landcarbon.estimate.assist_gain.measure_gain``.
    choice : Choice
        Slopes taken.
    lacking : mapping
        Why a part has no line.
    sums : mapping
        Columns of each pool, and ``all``.

    Returns
    -------
    DataFrame
        ``REPORT_COLUMNS``; stratum "" is the inventory. Where rasters do not serve the relative efficiency is what they
        would have brought.
    """
    if gain.empty:
        return pd.DataFrame(columns=REPORT_COLUMNS)
    labels = next(iter(choice.lines.values())).labels
    whys = _whys(choice, labels, lacking, sums)
    pools = [*choice.pools, "all"]
    taken = choice.taken != NONE
    taken = np.vstack([taken, taken.any(axis=0)])
    taken = np.column_stack([taken, taken.any(axis=1)])  # the last column: the inventory
    pool = gain["pool"].map({name: at for at, name in enumerate(pools)}).to_numpy()
    stratum = gain["stratum"].map({**{name: at for at, name in enumerate(labels)}, "": len(labels)}).to_numpy()
    used = taken[pool, stratum]
    names = {survey: _raster_names(line, list(choice.lines)) for survey, line in choice.lines.items()}
    slopes = {survey: _slopes(line, sums, pools) for survey, line in choice.lines.items()}
    would = {survey: _would_bring(choice, survey) for survey in choice.lines}
    rows = list(zip(gain["survey"], pool, stratum, used, gain["relative_efficiency"], strict=True))
    return gain.assign(
        rasters=[names[survey][two] if yes else "" for survey, _, two, yes, _ in rows],
        slopes=[int(slopes[survey][one]) if yes else 0 for survey, one, _, yes, _ in rows],
        relative_efficiency=[
            ratio if yes or one == len(choice.pools) else would[survey][one, two]
            for survey, one, two, yes, ratio in rows
        ],
        used=used,
        why=[whys[one][two] for _, one, two, _, _ in rows],
    )[REPORT_COLUMNS]


def _slopes(line: Lines, sums: Mapping[str, Sequence[str]], pools: list[str]) -> list[int]:
    number = dict(zip(line.columns, line.number, strict=True))
    return [max((int(number[name]) for name in sums[pool]), default=0) for pool in pools]


def _raster_names(line: Lines, surveys: list[str]) -> list[str]:
    """Rasters that serve in each stratum and (last) in any, those of one name in the order of time."""
    auxiliary = line.auxiliary
    order = {survey: at for at, survey in enumerate(surveys)}
    of = [name.removesuffix(f" {source}") for name, source in zip(auxiliary.rasters, auxiliary.sources, strict=True)]
    first = {name: at for at, name in reversed(list(enumerate(of)))}
    places = sorted(range(len(of)), key=lambda at: (first[of[at]], order.get(auxiliary.sources[at], -1)))
    there = np.isfinite(auxiliary.centre)
    there = np.vstack([there, there.any(axis=0)])
    return [", ".join(auxiliary.rasters[at] for at in places if row[at]) for row in there]


def _would_bring(choice: Choice, survey: str) -> np.ndarray:
    """Ratio of variances at a survey, by pool and stratum and (last column) for the inventory."""
    plain, assisted = choice.plain[survey], choice.assisted[survey]
    known = np.isfinite(plain) & np.isfinite(assisted)
    sums = [(np.where(known, one, 0.0) * choice.weight).sum(axis=1) for one in (plain, assisted)]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.column_stack(
            [np.where(plain > 0, plain / assisted, np.nan), np.where(sums[0] > 0, sums[0] / sums[1], np.nan)]
        )


def _whys(
    choice: Choice, labels: list[str], lacking: Mapping[str, str], sums: Mapping[str, Sequence[str]]
) -> list[list[str]]:
    """Reasons by pool (``all`` last) and stratum (the inventory last)."""
    made = []
    for at, pool in enumerate(choice.pools):
        reasons = [f"{name}, {lacking[name]}" for name in sums[pool] if name in lacking]
        each = [_why(choice, at, one, reasons) for one in range(len(labels))]
        made.append([*each, _why_whole(choice, at, labels, each)])
    taken = choice.taken != NONE
    of_all = [_helped(choice.pools, column) for column in taken.T]
    return [*made, [*of_all, _helped(choice.pools, taken.any(axis=1))]]


def _helped(pools: list[str], taken: np.ndarray) -> str:
    names = [name for name, yes in zip(pools, taken, strict=True) if yes]
    return f"pools assisted: {', '.join(names)}" if names else "no pool is assisted"


def _why(choice: Choice, pool: int, stratum: int, reasons: list[str]) -> str:
    limits = assist_limits()
    ratio, change = choice.efficiency[pool, stratum], choice.change[pool, stratum]
    taken = choice.taken[pool, stratum] != NONE
    if np.isnan(ratio):
        return "; ".join(reasons) or _why_unknown(choice, pool, stratum)
    kind = "own slopes" if choice.tried[pool, stratum] == OWN else "common slopes"
    of = "of stocks" if np.isnan(change) else "of stocks and changes"
    told = f"relative efficiency {ratio:.2f} {of} with {kind}"
    if not taken and ratio >= limits.relative_efficiency:
        told += f", but the variance of the change would be {1.0 / change:.2f} times the plain one"
    else:
        told += f", {'at least' if taken else 'below'} {limits.relative_efficiency:g}"
    few = " (together with other strata of few plots)" if choice.together[pool, stratum] else ""
    return "; ".join([f"{told}{few}", *reasons])


def _why_unknown(choice: Choice, pool: int, stratum: int) -> str:
    if not any(line.auxiliary.serves[stratum] for line in choice.lines.values()):
        return "no raster serves here"
    if not any(np.isfinite(one[pool, stratum]) for one in choice.plain.values()):
        return "not measured on two plots"
    return "too few plots to judge by" if choice.together[pool, stratum] else "the plots do not vary"


def _why_whole(choice: Choice, pool: int, labels: list[str], each: list[str]) -> str:
    taken = choice.taken[pool] != NONE
    if taken.any():
        plots = np.any([np.isfinite(one[pool]) for one in choice.plain.values()], axis=0)
        out = [labels[at] for at in np.flatnonzero(plots & ~taken)]
        where = name_list([labels[at] for at in np.flatnonzero(taken)])
        return f"they serve in {where}" + (f", not in {name_list(out)}" if out else "")
    ratio = choice.efficiency[pool]
    if np.isnan(ratio).all():
        return each[0] if len(set(each)) == 1 else "no stratum with plots enough"
    best = int(np.nanargmax(ratio))
    return each[best] if len(labels) == 1 else f"best in {labels[best]}, {each[best]}"


def not_used(report: pd.DataFrame) -> pd.DataFrame:
    """Report pools, or strata of a pool, that fall back to the plain estimator."""
    if report.empty:
        return empty_findings()
    table = report[report["pool"] != "all"].drop_duplicates(["pool", "stratum"])
    found = []
    for pool, rows in table.groupby("pool", sort=False):
        whole = rows[rows["stratum"] == ""]
        out = rows[(rows["stratum"] != "") & ~rows["used"].astype(bool) & (rows["why"] != "no raster serves here")]
        if len(whole) and not whole["used"].iloc[0]:
            found.append(_note("rasters not used", str(pool), "", f" ({whole['why'].iloc[0]}): its figures are"))
        elif len(out):
            names = name_list([str(name) for name in out["stratum"]])
            told = [f"{name}: {why}" for name, why in zip(out["stratum"], out["why"], strict=True)]
            more = "; ..." if len(told) > _MOST_REASONS else ""
            text = f" in stratum {names} ({'; '.join(told[:_MOST_REASONS])}{more}): its figures there are"
            found.append(_note("rasters not used in stratum", str(pool), names, text))
    return join_findings(found)


def _note(rule: str, pool: str, value: str, text: str) -> pd.DataFrame:
    return make_findings(
        rule,
        severity="note",
        table="estimate",
        column=pool,
        value=value,
        message=f"Rasters do not serve for pool {pool}{text} the plain estimates.",
        remedy="Nothing, if the raster tells little about this pool there; else more plots.",
    )
