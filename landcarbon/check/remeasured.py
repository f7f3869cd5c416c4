"""Checks of the same tree between surveys: slips, growth, loss, species, status, trees that vanish or appear."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.check.keys import survey_order, visit_positions
from landcarbon.check.pairs import (
    Numbered,
    doubtful_surveys,
    measured_pairs,
    row_dates,
    shrink_limit_cm,
    successive,
    years_apart,
)
from landcarbon.check.rules import Outcome, joined, no_findings, rule
from landcarbon.check.stems import design_limits

if TYPE_CHECKING:
    from landcarbon.inputs import Inputs
    from landcarbon.inventory import Settings

__all__ = ["between_surveys"]

_TENFOLD = 10.0
_MM_PER_CM = 10.0


def between_surveys(inputs: Inputs, settings: Settings) -> Outcome:
    """Compare each tree with itself in the survey before.

    Parameters
    ----------
    inputs : Inputs
        Canonical tables after the checks of single rows and of doubles.
    settings : Settings
        The project file: ``plots.design``.

    Returns
    -------
    Outcome
        Rows set aside (slips of a factor of ten) and findings.
    """
    if len(inputs.surveys) < 2 or inputs.trees.empty:
        return Outcome()
    stems = Numbered.of(inputs)
    pairs = measured_pairs(stems)
    doubtful, findings = doubtful_surveys(inputs, pairs)
    pairs = pairs[~doubtful].reset_index(drop=True)
    slipped, in_slip = _slips(stems, pairs, design_limits(settings.plots.design))
    sound = pairs[~in_slip]
    parts = [
        findings,
        _slip_findings(inputs, pairs[in_slip], slipped),
        _growth(inputs, sound),
        _loss(inputs, sound),
        _same_diameters(inputs, sound),
        _species(inputs, sound),
    ]
    if not doubtful.any():
        parts += [_status(stems), _vanished(stems), _missed_before(stems, design_limits(settings.plots.design))]
    return Outcome(joined(parts), aside=slipped)


def _slips(stems: Numbered, pairs: pd.DataFrame, limits: list[float]) -> tuple[np.ndarray, np.ndarray]:
    """Find diameters ten times too large or small: the rows at fault, and the pairs concerned."""
    slip = rule("diameter slip").limits
    before, after = pairs["dbh_first"].to_numpy(), pairs["dbh_second"].to_numpy()
    grown = (after - before) * _MM_PER_CM > slip["mm_per_year"] * np.nan_to_num(pairs["years"].to_numpy(), nan=1.0)
    scaled_up, scaled_down = after / before / _TENFOLD, after / before * _TENFOLD
    up = grown & (scaled_up >= slip["low"]) & (scaled_up <= slip["high"])
    down = pairs["both_live"].to_numpy() & (scaled_down >= slip["low"]) & (scaled_down <= slip["high"])
    # a thin stem after a gap is rather a new shoot from the old stump
    down &= pairs["direct"].to_numpy() & (before - after > shrink_limit_cm(before))
    in_slip = up | down
    slipped = np.zeros(len(stems.trees), dtype=bool)
    if in_slip.any():
        first, second = pairs["first"].to_numpy()[in_slip], pairs["second"].to_numpy()[in_slip]
        odd = _oddness(stems, limits)
        slipped[np.where(odd[first] > odd[second], first, second)] = True
    return slipped, in_slip


def _oddness(stems: Numbered, limits: list[float]) -> np.ndarray:
    """Say how far each diameter is from what is usual: for the tree if it was measured often enough, else its species.

    Two measurements alone cannot tell which of them has slipped; the distance from the median of the species, and a
    diameter too thin to be tallied, decide then.
    """
    trees = stems.trees
    dbh = trees["dbh_cm"].to_numpy(dtype=float)
    usable = stems.standing & trees["used"].to_numpy(dtype=bool) & (dbh > 0)
    table = pd.DataFrame({"log": np.log(dbh, where=usable, out=np.full(len(dbh), np.nan)), "key": stems.key})
    own = table.groupby("key")["log"]
    times, of_tree = own.transform("count").to_numpy(), own.transform("median").to_numpy()
    of_kind = table["log"].groupby(pd.factorize(trees["species"])[0]).transform("median").to_numpy()
    usual = np.where(times >= rule("diameter slip").limits["rows"], of_tree, of_kind)
    odd = np.abs(table["log"].to_numpy() - usual)
    return np.where(dbh < min(limits), np.inf, odd) if limits else odd


def _slip_findings(inputs: Inputs, pairs: pd.DataFrame, slipped: np.ndarray) -> pd.DataFrame:
    if pairs.empty:
        return no_findings()
    first, second = pairs["first"].to_numpy(), pairs["second"].to_numpy()
    text = _from_to(pairs)
    at_fault = np.where(slipped[second], second, first)
    table = pd.DataFrame({"at": at_fault, "text": text}).drop_duplicates("at").sort_values("at")
    return rule("diameter slip").found(inputs.trees.iloc[table["at"].to_numpy()], value=table["text"].to_numpy())


def _growth(inputs: Inputs, pairs: pd.DataFrame) -> pd.DataFrame:
    fast = rule("grew too fast")
    gain = (pairs["dbh_second"] - pairs["dbh_first"]).to_numpy() * _MM_PER_CM
    years = pairs["years"].to_numpy()
    with np.errstate(invalid="ignore"):
        too_fast = pairs["both_live"].to_numpy() & (years > 0) & (gain > fast.limits["mm_per_year"] * years)
    rows = pairs[too_fast]
    text = [
        f"{pair}, {rate:.0f} mm/yr" for pair, rate in zip(_from_to(rows), gain[too_fast] / years[too_fast], strict=True)
    ]
    return _on_later_row(inputs, "grew too fast", rows, text)


def _loss(inputs: Inputs, pairs: pd.DataFrame) -> pd.DataFrame:
    little = rule("shrank a little")
    pairs = pairs[pairs["both_live"]]
    loss = (pairs["dbh_first"] - pairs["dbh_second"]).to_numpy()
    beyond = loss > shrink_limit_cm(pairs["dbh_first"].to_numpy())
    rows = pairs[beyond]
    parts = [_on_later_row(inputs, "shrank", rows, _from_to(rows))]
    names = [str(name) for name in inputs.surveys["survey"]]
    small = pairs["until"].to_numpy()[(loss > 0) & ~beyond]
    for until, count in enumerate(np.bincount(small, minlength=len(names))):
        if count:
            fill = {"count": int(count), "survey": names[until]}
            parts.append(little.found(fill=fill, survey=names[until], value=f"{count} trees"))
    return joined(parts)


def _same_diameters(inputs: Inputs, pairs: pd.DataFrame) -> pd.DataFrame:
    """Point at plots on which no diameter has changed at all since the survey before."""
    same = rule("same diameters")
    pairs = pairs[pairs["both_live"]]
    later = inputs.trees.iloc[pairs["second"].to_numpy()]
    table = pairs[["since", "until"]].assign(
        plot=later["plot"].astype("object").to_numpy(),
        equal=(pairs["dbh_first"] == pairs["dbh_second"]).to_numpy(),
    )
    groups = table.groupby(["since", "until", "plot"])["equal"].agg(["all", "size"]).reset_index()
    groups = groups[groups["all"] & (groups["size"] >= same.limits["trees"])]
    return same.found_each(*_by_plot(inputs, groups))


def _species(inputs: Inputs, pairs: pd.DataFrame) -> pd.DataFrame:
    rows = pairs[pairs["species_differ"]]
    names = inputs.trees["species"].astype("object").to_numpy()
    text = [
        f"{old or '(blank)'} -> {new or '(blank)'}"
        for old, new in zip(names[rows["first"]], names[rows["second"]], strict=True)
    ]
    return _on_later_row(inputs, "species changed", rows, text)


def _status(stems: Numbered) -> pd.DataFrame:
    """Point at dead trees that live again, and count live ones that were absent in between."""
    trees, surveys = stems.trees, stems.inputs.surveys
    status = trees["status"].astype("object").to_numpy()
    first, second = successive(stems, stems.standing)
    risen = second[(status[first] == "dead") & (status[second] == "live")]
    parts = [rule("alive again").found(trees.iloc[risen], value="dead -> live")]
    earlier, later = successive(stems, stems.recorded)
    before = np.full(len(trees), -1, dtype=np.int64)
    before[later] = earlier
    gap = np.flatnonzero((status == "live") & (before >= 0))
    gap = gap[status[before[gap]] == "absent"]
    gap = gap[before[before[gap]] >= 0]
    gap = gap[status[before[before[gap]]] == "live"]
    for until, count in enumerate(np.bincount(stems.order[gap], minlength=len(surveys))):
        if count:
            name = str(surveys["survey"].iloc[until])
            parts.append(
                rule("missed once").found(
                    fill={"count": int(count), "survey": name}, survey=name, value=f"{count} trees"
                )
            )
    return joined(parts)


def _vanished(stems: Numbered) -> pd.DataFrame:
    """Count live trees without any row at the next visit of their plot; file and row are those of the first."""
    key, order = stems.key, stems.order
    following = _next_visit(stems, step=1)
    present = np.zeros((int(key.max(initial=-1)) + 1, len(stems.inputs.surveys)), dtype=bool)
    known = (key >= 0) & (order >= 0)
    present[key[known], order[known]] = True
    at = np.flatnonzero(stems.live & (key >= 0) & (order >= 0) & (following >= 0))
    at = at[~present[key[at], following[at]]]
    return _counted_by_plot(stems.inputs, "vanished", at, since=order[at], until=following[at])


def _missed_before(stems: Numbered, limits: list[float]) -> pd.DataFrame:
    """Count trees that appear at a plot visited before and are too thick to have grown in since."""
    key, order = stems.key, stems.order
    dbh = stems.trees["dbh_cm"].to_numpy(dtype=float)
    standing = stems.standing & (key >= 0) & (order >= 0)
    first_seen = pd.Series(np.where(standing, order, np.iinfo(np.int64).max)).groupby(key).transform("min").to_numpy()
    previous = _next_visit(stems, step=-1)
    live = standing & stems.live
    new = np.flatnonzero(live & (order == first_seen) & (previous >= 0))
    if len(new) == 0:
        return no_findings()
    start = max(limits) if limits else float(np.nanmin(dbh[live]))
    years = _years_between(stems.inputs, previous[new], new)
    thick = dbh[new] > start + rule("missed before").limits["mm_per_year"] / _MM_PER_CM * years
    at = new[thick]
    return _counted_by_plot(stems.inputs, "missed before", at, since=previous[at], until=order[at])


def _next_visit(stems: Numbered, step: int) -> np.ndarray:
    """Give for each tree row the place in time of the next (step 1) or last (-1) visit of its plot; -1 if none."""
    visits = stems.inputs.visits
    visits = visits[visits["visited"].to_numpy(dtype=bool)]
    order = survey_order(visits["survey"], stems.inputs.surveys)
    plot, _ = pd.factorize(visits["plot"])
    line = np.lexsort((order, plot))[::step]
    other = np.full(len(visits), -1, dtype=np.int64)
    linked = plot[line][1:] == plot[line][:-1]
    other[line[:-1][linked]] = order[line[1:][linked]]
    at = visit_positions(stems.trees, visits)
    if len(visits) == 0:
        return at
    return np.where(at >= 0, other[at], -1)


def _years_between(inputs: Inputs, earlier: np.ndarray, rows: np.ndarray) -> np.ndarray:
    """Give the years between tree rows and the visit of their plot in an earlier survey; infinite if not known."""
    trees = inputs.trees.iloc[rows]
    names = inputs.surveys["survey"].astype("object").to_numpy()[earlier]
    asked = pd.DataFrame({"survey": names, "plot": trees["plot"].astype("object").to_numpy(), "date": pd.NaT})
    day = row_dates(inputs, asked)
    years = years_apart(day, row_dates(inputs, trees))
    return np.where(years > 0, years, np.inf)


def _counted_by_plot(
    inputs: Inputs, name: str, at: np.ndarray, *, since: np.ndarray, until: np.ndarray
) -> pd.DataFrame:
    if len(at) == 0:
        return no_findings()
    rows = inputs.trees.iloc[at]
    table = pd.DataFrame(
        {
            "since": since,
            "until": until,
            "plot": rows["plot"].astype("object").to_numpy(),
            "tree": rows["tree"].astype("object").to_numpy(),
            "file": rows["file"].astype("object").to_numpy(),
            "row": rows["row"].to_numpy(),
        }
    )
    by_plot = table.groupby(["since", "until", "plot"])
    groups = by_plot["tree"].agg(["size", _some]).join(by_plot[["file", "row"]].first()).reset_index()
    found, words = _by_plot(inputs, groups)
    words = [{**line, "some": some} for line, some in zip(words, groups["_some"], strict=True)]
    found = found.assign(file=groups["file"].to_numpy(), row=groups["row"].to_numpy())
    value = np.array([f"{count} tree{'s' if count > 1 else ''}" for count in groups["size"]], dtype=object)
    return rule(name).found_each(found, words, value=value)


def _by_plot(inputs: Inputs, groups: pd.DataFrame) -> tuple[pd.DataFrame, list[dict[str, object]]]:
    """Turn counts by survey before, survey and plot into rows and words of findings."""
    names = inputs.surveys["survey"].astype("object").to_numpy()
    since, until = names[groups["since"]], names[groups["until"]]
    words = [
        {"count": int(count), "since": first, "survey": last}
        for count, first, last in zip(groups["size"], since, until, strict=True)
    ]
    return pd.DataFrame({"survey": until, "plot": groups["plot"].to_numpy()}), words


def _some(values: pd.Series) -> str:
    shown = 5  # enough to find them on the sheet; the rest is in the files
    text = ", ".join(values.iloc[:shown])
    return f"{text}, …" if len(values) > shown else text


def _on_later_row(inputs: Inputs, name: str, pairs: pd.DataFrame, text: list[str]) -> pd.DataFrame:
    if pairs.empty:
        return no_findings()
    line = np.argsort(pairs["second"].to_numpy(), kind="stable")
    return rule(name).found(
        inputs.trees.iloc[pairs["second"].to_numpy()[line]], value=np.array(text, dtype=object)[line]
    )


def _from_to(pairs: pd.DataFrame) -> list[str]:
    return [
        f"{before:g} -> {after:g} cm"
        for before, after in zip(pairs["dbh_first"].round(3), pairs["dbh_second"].round(3), strict=True)
    ]
