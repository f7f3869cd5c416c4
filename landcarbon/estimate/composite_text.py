"""What is said about composite figures: how each came about, and what to know about them."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.estimate.benchmark import AS_IS, SCALED
from landcarbon.estimate.composite_core import (
    COMPOSITE,
    DIRECT,
    FLAT,
    LEVEL,
    MISSING,
    SYNTHETIC,
    WHOLE,
    Composed,
    group_of,
)
from landcarbon.estimate.composite_plots import Evidence, Places
from landcarbon.estimate.notes import name_list
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["REPLACED_RULES", "composite_findings", "composite_methods"]

# findings on direct figures of parcels that no longer hold once these are composite
REPLACED_RULES = ("parcel not estimable", "parcels and inventory", "stratum mean for a parcel")

_ASSISTED = "model-assisted"  # so begins what a method says of rasters, after a comma
_FLAT_TEXT = "the same on all plots; its error cannot be told"


def composite_methods(
    composed: Composed, evidence: Evidence, places: Places, before: np.ndarray, level: np.ndarray
) -> np.ndarray:
    """Text for each parcel and pool, ``all`` last.

    Parameters
    ----------
    composed : Composed
        The figures.
    evidence : Evidence
        What the plots told.
    places : Places
        Parcels and strata.
    before : ndarray of str
        Method of the direct figures; shape (P, J + 1).
    level : ndarray of str
        Method of the groups, empty where there is no row; shape (G, J + 1).

    Returns
    -------
    ndarray of object
        Shape (P, J + 1).
    """
    group = group_of(places)
    kind, plots = composed.kind, _numbers(evidence.plots, "plot")
    text = np.full(kind.shape, "", dtype=object)
    gamma = np.stack([pool.gamma for pool in composed.pools], axis=1)
    share = _lookup(_percent(gamma), " %")
    rest = _model_words(composed)
    text = np.where(kind == COMPOSITE, "composite: " + share + " from " + plots + ", rest " + rest, text)
    text = np.where(kind == SYNTHETIC, "synthetic: " + _why_no_plots(evidence) + ", " + rest, text)
    text = np.where(kind == LEVEL, "synthetic: mean of the stratum, none of its parcels has plots", text)
    own = _first_piece(before[:, :-1])
    estimable = ~_starts(own, "not estimable") & (own != "")
    text = np.where(kind == DIRECT, "direct " + np.where(estimable, own, "mean of plots"), text)
    text = np.where(kind == WHOLE, "direct: the parcel is its whole stratum", text)
    factor = _bare(level[:, :-1])[group]
    text = np.where(kind == FLAT, np.where(_starts(factor, "default"), factor, _FLAT_TEXT), text)
    text = _with_lacking(text, composed, evidence)
    end = _benchmark_words(composed, places, group)
    text = np.where((kind == FLAT) | (kind == MISSING), text, text + "; " + end)
    text = np.where(kind == MISSING, _missing_words(composed, before, level, group), text)
    text = np.where(kind == MISSING, text, text + _without(level[:, :-1])[group])
    whole = _sum_words(composed, evidence, text, end, group)
    known = np.isfinite(composed.value[:, -1])
    whole = np.where(known, whole + _without(level[:, -1])[group], _missing_sum(before, text, composed, group))
    return np.column_stack([text, whole])


def composite_findings(
    composed: Composed, evidence: Evidence, places: Places, pools: list[str], *, survey: str, table: str
) -> pd.DataFrame:
    """Report on one survey, or one change.

    Parameters
    ----------
    composed, evidence, places
        As for :func:`composite_methods`.
    pools : list of str
        Without ``all``.
    survey : str
        For the finding.
    table : str
        estimate or change.
    """
    group = group_of(places)
    told = [_summary(composed, places, survey, table)]
    told += [_model_finding(composed, pools, survey, table)]
    told += [_not_benchmarked(composed, places, group, survey, table)]
    told += [_scaled(composed, pools, survey, table)]
    told += [_dropped(composed, survey, table)]
    return join_findings(told)


def _percent(gamma: np.ndarray) -> np.ndarray:
    """Whole percent; not 0 or 100 where the share is not."""
    return np.clip(np.rint(100.0 * np.nan_to_num(gamma)), 1, 99).astype(np.int64)


def _lookup(number: np.ndarray, after: str) -> np.ndarray:
    values, place = np.unique(number, return_inverse=True)
    words = np.array([f"{value}{after}" for value in values], dtype=object)
    return np.asarray(words[place.reshape(number.shape)])


def _numbers(number: np.ndarray, noun: str) -> np.ndarray:
    values, place = np.unique(number, return_inverse=True)
    words = np.array([f"{value} {noun}{'' if value == 1 else 's'}" for value in values], dtype=object)
    return np.asarray(words[place.reshape(number.shape)])


def _map(function: Callable[[str], Any], values: np.ndarray) -> np.ndarray:
    """Apply a function to each distinct text."""
    codes, distinct = pd.factorize(values.ravel())
    words: np.ndarray = np.array([function(str(text)) for text in distinct], dtype=object)
    return words[codes].reshape(values.shape) if len(words) else values


def _pieces(method: str) -> list[str]:
    """Pieces of a method, without what rasters brought."""
    return [piece.split(f", {_ASSISTED}")[0] for piece in method.split("; ")]


def _first_piece(method: np.ndarray) -> np.ndarray:
    return _map(lambda text: _pieces(text)[0], method)


def _without(method: np.ndarray) -> np.ndarray:
    """Name what a figure leaves out, and the rasters that assist it, as the method of its group does."""

    def said(text: str) -> str:
        lacking = "".join(f"; {piece}" for piece in _pieces(text) if piece.startswith("without "))
        assisted = text.partition(f", {_ASSISTED}")[2].split("; ")[0].split(" (")[0]
        return lacking + (f"; {_ASSISTED}{assisted}" if assisted else "")

    return _map(said, method)


def _bare(method: np.ndarray) -> np.ndarray:
    """Take off what is said by ``_without``."""
    return _map(
        lambda text: "; ".join(p for p in _pieces(text) if not p.startswith(("without ", _ASSISTED))),
        method,
    )


def _starts(text: np.ndarray, start: str) -> np.ndarray:
    return _map(lambda words: words.startswith(start), text).astype(bool)


def _model_words(composed: Composed) -> np.ndarray:
    """Say what the rest comes from, by parcel and pool."""
    words = np.full(composed.kind.shape, "stratum model", dtype=object)
    for number, pool in enumerate(composed.pools):
        for at, model in enumerate(pool.models):
            text = "stratum and raster model" if at else "stratum model"
            if model.bound:
                text = "stratum mean (too few parcels with plots for a model)"
            words[pool.by_model == at, number] = text
    return words


def _why_no_plots(evidence: Evidence) -> np.ndarray:
    return np.where(evidence.plots > 0, "plots tell no variance", "no plots").astype(object)


def _with_lacking(text: np.ndarray, composed: Composed, evidence: Evidence) -> np.ndarray:
    """Name parts for which the mean of the stratum stands."""
    text = text.copy()
    for part, name in enumerate(evidence.parts):
        pool = evidence.part_pool[part]
        hit = evidence.lacking[:, part] & np.isin(composed.kind[:, pool], (COMPOSITE, DIRECT))
        text[hit, pool] += f"; {name}: stratum mean (no plots of its own)"
    return text


def _benchmark_words(composed: Composed, places: Places, group: np.ndarray) -> np.ndarray:
    """Say whether the figures were brought to the total of their group, by parcel and pool."""
    how, tiled = composed.made.how, composed.tiled
    words = np.where(how == AS_IS, "", np.where(how == SCALED, "benchmarked by ratio", "benchmarked")).astype(object)
    names = [f"stratum {name}" for name in places.strata] + ["the inventory"]
    estimable = composed.estimable
    for at, name in enumerate(names):
        why = f"not benchmarked: {name} is not estimable"
        if at == len(names) - 1 and not (group == at).all():
            why = "not benchmarked: the parcel has no stratum of its own"
        hit = how[at] == AS_IS
        words[at, hit] = why
        area = estimable[at] & ~tiled[at]
        words[at, hit & area] = f"not benchmarked: the areas of the parcels are not that of {name}"
        words[at, hit & estimable[at] & tiled[at]] = f"not benchmarked: not all parcels of {name} have a figure"
    return np.asarray(words[group])


def _missing_words(composed: Composed, before: np.ndarray, level: np.ndarray, group: np.ndarray) -> np.ndarray:
    """Why there is no figure: as the direct figure says, else as the group does."""
    own, whole = before[:, :-1], level[group][:, :-1]
    nowhere = _map(lambda text: "not measured" in text, whole).astype(bool)
    of_stratum = np.where(nowhere, whole, "not estimable: its stratum is " + whole)
    words = np.where(_starts(whole, "not estimable"), of_stratum, own)
    return np.where(_starts(words, "not estimable"), words, "not estimable: no plots, and no figure of its stratum")


def _sum_words(
    composed: Composed, evidence: Evidence, text: np.ndarray, end: np.ndarray, group: np.ndarray
) -> np.ndarray:
    """Say of the sum how the pools it holds came about."""
    kind = np.where(composed.included[group], composed.kind, MISSING)
    number = ((kind != MISSING) & (kind != FLAT)).sum(axis=1)
    first = np.argmax((kind != MISSING) & (kind != FLAT), axis=1)
    rows = np.arange(len(kind))
    gamma = np.stack([pool.gamma for pool in composed.pools], axis=1)
    plotted = np.isin(kind, (COMPOSITE, DIRECT))
    low = np.where(plotted, gamma, np.inf).min(axis=1, initial=np.inf)
    high = np.where(plotted, gamma, -np.inf).max(axis=1, initial=-np.inf)
    low, high = (_percent(np.where(np.isfinite(values), values, 0.0)) for values in (low, high))
    span = np.where(low == high, _lookup(high, " %"), _lookup(low, " to ") + _lookup(high, " %"))
    most = np.where(plotted, evidence.plots, 0).max(axis=1, initial=0)
    fewest = np.where(plotted, evidence.plots, most[:, None]).min(axis=1, initial=np.iinfo(np.int64).max)
    plots = np.where(fewest == most, "", _lookup(fewest, " to ")) + _numbers(most, "plot")
    words = "composite: sum of pools, " + span + " from " + plots + ", rest " + _model_words(composed)[rows, first]
    none = ~plotted.any(axis=1)
    synthetic = "synthetic: no plots, sum of pools, " + _model_words(composed)[rows, first]
    words = np.where(none, synthetic, words)
    words = np.where((kind == WHOLE).any(axis=1), "direct: the parcel is its whole stratum", words)
    direct = (np.isin(kind, (DIRECT, FLAT, MISSING))).all(axis=1)
    words = np.where(direct, "direct: sum of pools", words)
    words = words + "; " + end[rows, first]
    alone = number == 1
    words = np.where(alone & (composed.included[group].sum(axis=1) == 1), _bare(text)[rows, first], words)
    return np.where(number == 0, _FLAT_TEXT, words)


def _missing_sum(before: np.ndarray, text: np.ndarray, composed: Composed, group: np.ndarray) -> np.ndarray:
    """Why there is no sum: the reason of the first pool that is missing."""
    lacking = composed.included[group] & (composed.kind == MISSING)
    first = np.argmax(lacking, axis=1)
    reason = text[np.arange(len(text)), first]
    return np.where(lacking.any(axis=1), reason, before[:, -1])


def _summary(composed: Composed, places: Places, survey: str, table: str) -> pd.DataFrame:
    kind = composed.kind
    figure = np.isfinite(composed.value[:, -1])
    some = figure & np.isin(kind, (COMPOSITE, DIRECT, WHOLE)).any(axis=1)
    synthetic = figure & ~some & np.isin(kind, (SYNTHETIC, LEVEL)).any(axis=1)
    text = (
        f"{int(some.sum())} of {len(kind)} parcels are stated from their own plots, drawn to a model of all parcels; "
        f"{int(synthetic.sum())} from the model alone"
    )
    for hit, words in ((synthetic, ""), (~figure, "have no figure"), (figure & ~some & ~synthetic, "are all alike")):
        if hit.any():
            names = name_list([places.parcels[at] for at in np.flatnonzero(hit)])
            text += f"; {int(hit.sum())} {words} ({names})" if words else f" ({names})"
    return make_findings(
        "composite parcel figures",
        severity="note",
        table=table,
        column="parcel",
        value=str(int(synthetic.sum())),
        survey=survey,
        message=f"{text}.",
        remedy="Measure more plots in parcels whose own figure matters.",
    )


def _model_finding(composed: Composed, pools: list[str], survey: str, table: str) -> pd.DataFrame:
    """Report pools without a model, and those whose variance component was zero."""
    bound = [name for name, pool in zip(pools, composed.pools, strict=True) if any(m.bound for m in pool.models)]
    zero = [
        name
        for name, pool in zip(pools, composed.pools, strict=True)
        if any(m.fit.method == "adjusted REML" for m in pool.models)
    ]
    cases = (
        (
            bound,
            "too few parcels for a model",
            f"Too few parcels have plots to tell how much parcels of a stratum differ in {name_list(bound)}: it is "
            "taken that they differ as much as single plots do, which overstates.",
            "Measure plots in more parcels, or join strata.",
        ),
        (
            zero,
            "parcels do not differ",
            f"Parcels of a stratum differ no more in {name_list(zero)} than the error of their plots explains. The "
            "variance between them is taken from the adjusted likelihood, which is never zero.",
            "Nothing; the figures lean on the strata.",
        ),
    )
    return join_findings(
        [
            make_findings(
                rule,
                severity="note",
                table=table,
                column="parcel",
                value=name_list(names),
                survey=survey,
                message=message,
                remedy=remedy,
            )
            for names, rule, message, remedy in cases
            if names
        ]
    )


def _not_benchmarked(composed: Composed, places: Places, group: np.ndarray, survey: str, table: str) -> pd.DataFrame:
    hit = (composed.made.how == AS_IS)[group] & ~np.isin(composed.kind, (MISSING, FLAT))
    names = [places.parcels[at] for at in np.flatnonzero(hit.any(axis=1))]
    if not names:
        return empty_findings()
    reasons = sorted(set(_benchmark_words(composed, places, group)[hit]))
    return make_findings(
        "parcels do not add up",
        severity="warning",
        table=table,
        column="parcel",
        value=str(len(names)),
        survey=survey,
        message=f"{len(names)} parcels do not add up to a total: {name_list(names)}. {name_list(reasons)}.",
        remedy="Give each parcel a stratum, and polygons or areas that fill it; measure two plots in each stratum.",
    )


def _scaled(composed: Composed, pools: list[str], survey: str, table: str) -> pd.DataFrame:
    ratio, raised = composed.made.how == SCALED, composed.raised
    if not ratio.any() and not raised.any():
        return empty_findings()
    names = [pool for at, pool in enumerate(pools) if ratio[:, at].any() or raised[:, at].any()]
    return make_findings(
        "figure kept from falling below zero",
        severity="note",
        table=table,
        column="pool",
        value=name_list(names),
        survey=survey,
        message=(
            f"{int(raised.sum())} predictions below zero were set to zero, and the parcels of {int(ratio.sum())} "
            f"stratum totals were scaled instead of shifted, so that no stock is negative: {name_list(names)}."
        ),
        remedy="Nothing, if the pool is small; else look at the rasters.",
    )


def _dropped(composed: Composed, survey: str, table: str) -> pd.DataFrame:
    names = sorted({name for pool in composed.pools for model in pool.models for name in model.dropped})
    if not names:
        return empty_findings()
    return make_findings(
        "raster tells nothing new",
        severity="note",
        table=table,
        column="raster",
        value=name_list(names),
        survey=survey,
        message=f"{name_list(names)} is left out of the model of parcels: constant, or told by strata and the others.",
        remedy="Nothing, or leave the raster out.",
    )
