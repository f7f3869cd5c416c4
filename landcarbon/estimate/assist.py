"""Estimates assisted by rasters: how the generalised regression estimator enters the program.

The assisted estimate of a stratum is the estimate from adjusted plot values y - (x - x_h) b, with x_h the mean of the
raster over the whole stratum and b the slopes; that of a parcel adds what the parcel's own mean differs from x_h, times
b. So the plot table is replaced by adjusted values, the usual estimators do all variances (parts on different plots,
partly repeated plots, clusters, domains), and offsets are added to the parcels afterwards. As everything is linear in
the parts, pools add up to ``all`` and changes are differences of stocks, as without rasters.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_choice import choose
from landcarbon.estimate.assist_gain import measure_gain
from landcarbon.estimate.assist_limits import assist_limits
from landcarbon.estimate.assist_lines import Lines, fit_survey
from landcarbon.estimate.assist_phases import first_phase_variances
from landcarbon.estimate.assist_report import REPORT_COLUMNS, not_used, worth
from landcarbon.estimate.assist_rows import model_rows, offset_rows
from landcarbon.estimate.auxiliary import auxiliaries
from landcarbon.estimate.auxiliary_tables import Given, long_means, long_values, read_given
from landcarbon.estimate.clusters import unit_codes
from landcarbon.estimate.groups import label_codes
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.post_strata import class_rasters
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["MODEL_COLUMNS", "OFFSET_COLUMNS", "REPORT_COLUMNS", "Assisted", "assist"]

OFFSET_COLUMNS = ["survey", "by", "unit", "part", "offset", "inflation", "df_share"]
MODEL_COLUMNS = ["survey", "of", "stratum", "term", "source", "coefficient", "centre", "r2", "n", "se_residual"]


@dataclass(frozen=True)
class Assisted:
    """Adjusted plot values and what belongs to them.

    Attributes
    ----------
    plot_parts : DataFrame
        As given, with adjusted values in the columns of the parts that rasters assist.
    offsets : DataFrame
        ``OFFSET_COLUMNS``, one row per survey, unit and part that is assisted: offset [t C/ha] to add to estimates
        from the adjusted values (0 for strata and the inventory), factor ``inflation`` of their variance and share
        ``df_share`` of their degrees of freedom, for the fitted slopes.
    models : DataFrame
        ``MODEL_COLUMNS``: lines by survey, part or pool (``of``) and stratum, a row per term ("intercept" or raster)
        [t C/ha, and per unit of the raster]; ``source`` is the survey whose raster serves, ``centre`` the mean of the
        raster in the stratum. Every part that was measured has a line, with slopes of 0 where it is not assisted.
    report : DataFrame
        ``REPORT_COLUMNS``: what the rasters bring; stratum "" is the inventory. ``why`` is a sentence.
    phases : DataFrame
        ``PHASE_COLUMNS``: variance to add where raster means rest on a first phase of points; empty if there is none.
    findings : DataFrame
        What was left out, dropped or not used.
    """

    plot_parts: pd.DataFrame
    offsets: pd.DataFrame
    models: pd.DataFrame
    report: pd.DataFrame
    phases: pd.DataFrame
    findings: pd.DataFrame


def assist(  # noqa: PLR0913  (the plots, two tables of raster values, units, and how to use them)
    plot_parts: pd.DataFrame,
    sums: Mapping[str, Sequence[str]],
    plot_values: pd.DataFrame,
    unit_means: pd.DataFrame,
    strata: pd.DataFrame,
    *,
    by_stratum: bool = False,
    post_stratum: tuple[pd.DataFrame, pd.DataFrame] | None = None,
    parcels: pd.DataFrame | None = None,
    engine: Mapping[str, Any] | None = None,
) -> Assisted:
    """Adjust plot values by rasters where that makes the estimates better.

    Parameters
    ----------
    plot_parts : DataFrame
        One row per plot and survey with a column per part [t C/ha].
    sums : mapping
        Columns of each pool, and ``all``.
    plot_values : DataFrame
        Raster values of plots: survey, plot and a column per raster (NaN where there is none), or long as for
        ``read_given``. Plots may be listed at surveys they were not visited in, for surveys that borrow the raster of
        another.
    unit_means : DataFrame
        Wall-to-wall means: survey, by (stratum | parcel), unit, a column per raster and share_covered; or long as for
        ``read_given``. For parcels also stratum (with a row and area_ha for each, if it lies in several). Rows with
        ``points`` are means of so many points of a first phase.
    strata : DataFrame
        stratum, area_ha.
    by_stratum : bool
        Slopes of its own for each stratum that has plots enough; otherwise only where they are clearly better.
    post_stratum : tuple of DataFrame, optional
        Classes of a map, of plots and as areas, as for ``class_rasters``; they count like rasters.
    parcels : DataFrame, optional
        parcel, stratum: for parcels whose stratum ``unit_means`` does not tell.
    engine : mapping, optional
        Further options of ``estimate_stocks`` (how variances are taken), for measuring the gain.

    Returns
    -------
    Assisted

    Notes
    -----
    Slopes are fitted by weighted least squares with an intercept per stratum; the weight of a plot is the area it
    stands for. Whether a pool is assisted in a stratum is decided once, for all surveys together, so that changes are
    differences of stocks and what repeated plots have in common is not lost; ``assist_choice`` has the rules, with the
    limits of ``assist.toml``. Where it is not, the plots stay as they are.

    References
    ----------
    .. [1] Särndal, C.-E., Swensson, B., Wretman, J. (1992). Model Assisted Survey Sampling, Springer, chapters 6 and
       10; from memory.
    """
    found: list[pd.DataFrame] = []
    if post_stratum is not None:
        class_values, class_means, finding = class_rasters(*post_stratum)
        plot_values = pd.concat([long_values(plot_values), class_values], ignore_index=True)
        unit_means = pd.concat([long_means(unit_means), class_means], ignore_index=True)
        found.append(finding)
    labels = _stratum_labels(plot_parts, strata)
    given = read_given(plot_values, unit_means, labels)
    given = replace(given, unit_means=_with_strata(given.unit_means, parcels, plot_parts, labels))
    area = strata.set_index(strata["stratum"].astype("str"))["area_ha"].reindex(labels).to_numpy(dtype=float)
    columns = [str(column) for column in sums["all"]]
    table = plot_parts.reset_index(drop=True)
    lines, lacking = _same_parts(_fit(table, given, columns, area, found=found), columns)
    points = _points(given)
    choice = choose(lines, sums, area, points, by_stratum=by_stratum)
    lines = choice.lines
    phases = first_phase_variances(lines, points, sums, area)
    adjusted = _adjusted(table, lines, columns)
    gain = measure_gain(table, adjusted, sums, strata, lines, dict(engine or {}), phases=phases, area=area)
    report = worth(gain, choice, lacking, sums)
    found += [not_used(report), _parcels_unknown(table, lines)]
    return Assisted(
        plot_parts=adjusted.set_index(plot_parts.index),
        offsets=_frame([offset_rows(survey, line, area) for survey, line in lines.items()], OFFSET_COLUMNS),
        models=_frame([model_rows(survey, line, sums) for survey, line in lines.items()], MODEL_COLUMNS),
        report=report,
        phases=phases,
        findings=join_findings(found),
    )


def _fit(
    table: pd.DataFrame,
    given: Given,
    columns: list[str],
    area: np.ndarray,
    *,
    found: list[pd.DataFrame],
) -> dict[str, Lines]:
    """Fit the lines of every survey; what is to be said goes to ``found``."""
    units = _unit_keys(table, given.strata)
    rows = {survey: _rows(table, survey, given.strata, units) for survey in _in_time(table)}
    variables, findings = auxiliaries(given, rows, assist_limits())
    found.append(findings)
    return {survey: fit_survey(table, plots, columns, variables[survey], area) for survey, plots in rows.items()}


def _points(given: Given) -> pd.DataFrame:
    """Points of the first phase by survey and stratum, the fewest of the rasters; none where known wall to wall."""
    rows = given.unit_means[(given.unit_means["by"] == "stratum") & given.unit_means["points"].notna()]
    rows = rows.assign(stratum=label_codes(rows["unit"], given.strata))
    rows = rows[(rows["stratum"] >= 0) & (rows["points"] > 0)]
    return rows.groupby(["survey", "stratum"], sort=False)["points"].min().reset_index()


def _in_time(plot_parts: pd.DataFrame) -> list[str]:
    """Surveys by the middle date of their visits, then by name."""
    name, date = plot_parts["survey"].astype("str"), pd.to_datetime(plot_parts["date"])
    middle = date.groupby(name).median()
    return [str(one) for one in middle.index[np.lexsort((middle.index.to_numpy(dtype=object).astype(str), middle))]]


def _stratum_labels(plot_parts: pd.DataFrame, strata: pd.DataFrame) -> list[str]:
    """Strata of the table, then those that only plots name."""
    listed = [str(name) for name in strata["stratum"]]
    named = plot_parts["stratum"][plot_parts["inside"].to_numpy(dtype=bool)].dropna().astype("str").unique()
    return listed + sorted({str(name) for name in named} - set(listed) - {""})


def _unit_keys(table: pd.DataFrame, labels: list[str]) -> np.ndarray:
    """Return the number of the sampling unit of each row: of its cluster within the stratum, else of its plot."""
    plot = np.asarray(pd.factorize(table["plot"])[0], dtype=np.int64)
    clusters = unit_codes(table["cluster"], label_codes(table["stratum"], labels), plot) if "cluster" in table else None
    return plot if clusters is None else clusters


def _rows(table: pd.DataFrame, survey: str, labels: list[str], units: np.ndarray) -> pd.DataFrame:
    """Take the plots of a survey that count: position in the table, plot, stratum code, size and sampling unit."""
    code = label_codes(table["stratum"], labels)
    size = table["size"].to_numpy(dtype=float)
    if "weight" in table:
        size = size * table["weight"].to_numpy(dtype=float)
    counts = (label_codes(table["survey"], [survey]) == 0) & table["inside"].to_numpy(dtype=bool)
    position = np.flatnonzero(counts & (code >= 0) & (size > 0))
    key = units[position]
    return pd.DataFrame(
        {
            "position": position,
            "plot": table["plot"].iloc[position].astype("str").to_numpy(dtype=object),
            "code": code[position],
            "size": size[position],
            "key": key,
            "unit": pd.factorize(key)[0] if "cluster" in table else np.arange(len(position)),
        }
    )


def _with_strata(
    unit_means: pd.DataFrame, parcels: pd.DataFrame | None, plot_parts: pd.DataFrame, labels: list[str]
) -> pd.DataFrame:
    """Fill in the stratum of parcels: from the table of parcels, else the one most of their plots lie in."""
    stated = unit_means["stratum"].astype("str").where(unit_means["stratum"].notna(), "")
    plots = plot_parts[plot_parts["parcel"].notna() & plot_parts["stratum"].isin(labels)]
    most = plots.groupby(["parcel", "stratum"], observed=True).size().sort_values(kind="stable").reset_index()
    known = dict(zip(most["parcel"].astype("str"), most["stratum"].astype("str"), strict=True))
    if parcels is not None and "stratum" in parcels:
        listed = parcels[parcels["stratum"].astype("str").isin(labels)]
        known |= dict(zip(listed["parcel"].astype("str"), listed["stratum"].astype("str"), strict=True))
    if len(labels) == 1:
        known = dict.fromkeys(unit_means["unit"].astype("str"), labels[0])
    lacking = (unit_means["by"] == "parcel") & ~stated.isin(labels)
    filled = unit_means["unit"].astype("str").map(known).fillna("").astype("str")
    return unit_means.assign(stratum=stated.mask(lacking, filled).mask(unit_means["by"] != "parcel", ""))


def _same_parts(lines: dict[str, Lines], columns: list[str]) -> tuple[dict[str, Lines], dict[str, str]]:
    """Keep parts that have a line at every survey they were measured in, and say why the others have none."""
    lacking: dict[str, str] = {}
    for survey, line in lines.items():
        for column, measured, why in zip(columns, line.measured, line.why, strict=True):
            if measured and why:
                lacking.setdefault(column, f"{survey}: {why}")
    keep = [column for column in columns if column not in lacking]
    mask = np.isin(np.array(columns, dtype=object), keep)[:, None]
    return {survey: line.only(mask) for survey, line in lines.items()}, lacking


def _adjusted(table: pd.DataFrame, lines: dict[str, Lines], columns: list[str]) -> pd.DataFrame:
    """Take what the rasters explain off the values of the plots."""
    values = table[columns].to_numpy(dtype=float, copy=True)
    for line in lines.values():
        values[line.position] -= line.explained()
    return table.assign(**{column: values[:, at] for at, column in enumerate(columns)})


def _frame(parts: list[pd.DataFrame], columns: list[str]) -> pd.DataFrame:
    kept = [part for part in parts if len(part)]
    return pd.concat(kept, ignore_index=True)[columns] if kept else pd.DataFrame(columns=columns)


def _parcels_unknown(table: pd.DataFrame, lines: dict[str, Lines]) -> pd.DataFrame:
    """Report parcels with adjusted plots but without a mean of their own: their figures must be plain."""
    names: set[str] = set()
    for line in lines.values():
        if line.used.any():
            known = line.auxiliary.parcels
            listed = set(known["unit"][known["stratum"] >= 0].astype("str"))
            inside = table["parcel"].iloc[line.position][np.asarray(line.used.any(axis=0))[line.code]]
            names |= {str(name) for name in inside.dropna().unique()} - listed - {""}
    if not names:
        return empty_findings()
    return make_findings(
        "parcel without raster mean",
        severity="warning",
        table="estimate",
        column="parcel",
        value=name_list(sorted(names)),
        message=(
            f"No mean of the rasters is known for parcels {name_list(sorted(names))}: their figures are the plain "
            "estimates, which do not use the rasters."
        ),
        remedy="Give polygons of all parcels, or class areas by parcel.",
    )
