"""Raster values of the plots of a survey, centred on what is known of each stratum, and what parcels differ by.

Where a raster has no value the mean of the stratum stands in, on the plots and on the map alike. So the auxiliary
variable has a value everywhere, no plot is lost, and the estimate stays right on average.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_limits import AssistLimits
from landcarbon.estimate.auxiliary_tables import Given, Variable
from landcarbon.estimate.groups import group_sum, label_codes
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.regression import independent_columns
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["Auxiliary", "auxiliaries", "within_strata"]

_FLAT = 1e-9  # a raster whose values differ by less than this share of their size within strata is constant


@dataclass(frozen=True)
class Auxiliary:
    """Auxiliary variables of one survey. Plots n, rasters p, strata H.

    Attributes
    ----------
    strata : list of str
        Labels.
    rasters : list of str
        Those that serve.
    sources : list of str
        Survey that each is of.
    value : ndarray
        Value of the plot less the mean of its stratum, 0 where there is none; shape (n, p).
    centre : ndarray
        Mean of each stratum, NaN where the raster does not serve; shape (H, p).
    parcels : DataFrame
        unit, stratum (code), share of the parcel in the stratum, and a column ``shift.<raster>``: mean of the parcel
        less that of the stratum. Parcels in several strata whose areas there are unknown are left out.
    """

    strata: list[str]
    rasters: list[str]
    sources: list[str]
    value: np.ndarray
    centre: np.ndarray
    parcels: pd.DataFrame

    @property
    def serves(self) -> np.ndarray:
        """Strata in which some raster serves; shape (H,)."""
        return np.asarray(np.isfinite(self.centre).any(axis=1))

    def keep(self, chosen: np.ndarray) -> Auxiliary:
        """Only these variables, by position."""
        return replace(
            self,
            rasters=[self.rasters[at] for at in chosen],
            sources=[self.sources[at] for at in chosen],
            value=self.value[:, chosen],
            centre=self.centre[:, chosen],
        )


def auxiliaries(
    given: Given, plots: Mapping[str, pd.DataFrame], limits: AssistLimits
) -> tuple[dict[str, Auxiliary], pd.DataFrame]:
    """Prepare the auxiliary variables of all surveys; the same serve at each.

    Parameters
    ----------
    given : Given
        Raster values.
    plots : mapping
        Plots that count at each survey, in the order of time: plot, code (of the stratum, not -1), size.
    limits : AssistLimits
        Limits.

    Returns
    -------
    auxiliaries : dict
        By survey.
    findings : DataFrame
        What was left out.

    Notes
    -----
    With the same variables at every survey, what the lines leave of a change is what a line fitted to the change itself
    would leave, so that repeated plots keep their worth. With each survey's raster at that survey alone the change
    of a raster that does not go with the plots would add to the error.
    """
    variables = given.variables(list(plots))
    found, made, usable = [], {}, np.ones(len(variables), dtype=bool)
    whys: dict[tuple[str, str], list[str]] = {}
    for survey, rows in plots.items():
        made[survey], about = _of_survey(given, variables, survey, rows, limits)
        fit, why = _usable(made[survey], rows)
        usable &= fit
        for one in why:
            whys.setdefault(one, []).append(survey)
        found += [about, _lent(given, variables, survey)]
    found += [_left(*one, [] if len(at) == len(plots) else at) for one, at in whys.items()]
    room = min((int(_free(rows) // limits.plots_per_slope) for rows in plots.values() if len(rows)), default=0)
    kept = np.flatnonzero(usable)
    found += [_left("too few plots for raster", variables[at].label, []) for at in kept[room:]]
    kept = kept[:room]
    return {survey: one.keep(kept) for survey, one in made.items()}, join_findings(found)


def _of_survey(
    given: Given, variables: list[Variable], survey: str, plots: pd.DataFrame, limits: AssistLimits
) -> tuple[Auxiliary, pd.DataFrame]:
    """All variables at the plots of a survey."""
    centre, holes = _centres(given, variables, survey, plots, limits)
    names = plots["plot"].astype("str")
    raw = np.column_stack(
        [one.plot_values.reindex(names).to_numpy(dtype=float) for one in variables] or [np.zeros((len(plots), 0))]
    )
    code = plots["code"].to_numpy()
    serves = np.isfinite(centre)[code]
    value = np.where(serves & np.isfinite(raw), raw - centre[code], 0.0)
    parcels = _parcel_shifts(given, variables, centre)
    found = Auxiliary(
        strata=given.strata,
        rasters=[one.label for one in variables],
        sources=[one.source for one in variables],
        value=value,
        centre=centre,
        parcels=parcels,
    )
    return found, join_findings([holes, _without_value(variables, raw, serves, survey)])


def within_strata(values: np.ndarray, code: np.ndarray, size: np.ndarray, strata: int) -> np.ndarray:
    """Values less the mean of their stratum in the sample, weighted by size; shape (n, K)."""
    held = np.bincount(code, weights=size, minlength=strata)
    mean = group_sum(values * size[:, None], code, strata) / np.where(held > 0, held, 1.0)[:, None]
    return np.asarray(values - mean[code])


def _free(plots: pd.DataFrame) -> int:
    """Count plots beyond one per stratum."""
    return len(plots) - plots["code"].nunique()


def _lent(given: Given, variables: list[Variable], survey: str) -> pd.DataFrame:
    """Report rasters that a survey has none of its own of."""
    lacking = sorted(
        {one.raster for one in variables} - {one.raster for one in variables if given.own(one.raster, survey)}
    )
    if not lacking:
        return empty_findings()
    others = [one.source for one in variables if one.raster in lacking]
    return make_findings(
        "raster of another survey",
        severity="note",
        table="estimate",
        column=name_list(lacking),
        value=name_list(list(dict.fromkeys(others))),
        survey=survey,
        message=(
            f"There is no raster {name_list(lacking)} of {survey}; those of other surveys serve. The estimate stays "
            "right on average, as the raster only helps to explain the plots."
        ),
        remedy="Give the raster of the survey's own date if there is one.",
    )


def _centres(
    given: Given, variables: list[Variable], survey: str, plots: pd.DataFrame, limits: AssistLimits
) -> tuple[np.ndarray, pd.DataFrame]:
    """Mean of each raster by stratum, NaN where it does not serve, and what to say about that."""
    centre = np.full((len(given.strata), len(variables)), np.nan)
    here = np.bincount(plots["code"], minlength=len(given.strata)) > 0
    found = []
    for column, one in enumerate(variables):
        rows = one.unit_means[one.unit_means["by"] == "stratum"]
        code = label_codes(rows["unit"], given.strata)
        covered = np.zeros(len(given.strata))
        covered[code[code >= 0]] = np.nan_to_num(rows["covered"].to_numpy(dtype=float))[code >= 0]
        centre[code[code >= 0], column] = rows["mean"].to_numpy(dtype=float)[code >= 0]
        known = np.isfinite(centre[:, column])
        few = known & (covered < 1.0 - limits.missing_share)
        centre[few, column] = np.nan
        for which, rule, why in (
            (~known & here, "raster without mean", "has no mean of the whole stratum"),
            (few & here, "raster with gaps", f"lacks more than {limits.missing_share:.0%} of the area"),
        ):
            names = [given.strata[at] for at in np.flatnonzero(which)]
            if names:
                found.append(_not_serving(rule, one.label, survey, names, why))
    return centre, join_findings(found)


def _not_serving(rule: str, raster: str, survey: str, names: list[str], why: str) -> pd.DataFrame:
    return make_findings(
        rule,
        severity="warning",
        table="estimate",
        column=raster,
        value=name_list(names),
        survey=survey,
        message=f"Raster {raster} {why} in stratum {name_list(names)}; the estimate there does without it.",
        remedy="Give a raster that covers the whole stratum.",
    )


def _without_value(variables: list[Variable], raw: np.ndarray, serves: np.ndarray, survey: str) -> pd.DataFrame:
    found = []
    for column, raster in enumerate(one.label for one in variables):
        without = int((serves[:, column] & ~np.isfinite(raw[:, column])).sum())
        if without:
            found.append(
                make_findings(
                    "plot without raster value",
                    severity="note",
                    table="estimate",
                    column=raster,
                    value=str(without),
                    survey=survey,
                    message=(
                        f"{without} plots have no value of raster {raster}; the mean of their stratum stands in, and "
                        "they count like all others."
                    ),
                    remedy="Give a raster that covers them.",
                )
            )
    return join_findings(found)


def _parcel_shifts(given: Given, variables: list[Variable], centre: np.ndarray) -> pd.DataFrame:
    """Return what the mean of each parcel differs from that of its stratum, one row per parcel and stratum."""
    blocks = []
    for column, one in enumerate(variables):
        rows = one.unit_means[one.unit_means["by"] == "parcel"]
        code = label_codes(rows["stratum"], given.strata)
        own = np.where(code[:, None] >= 0, centre[code], np.nan)[:, column] if len(rows) else np.zeros(0)
        covered = np.nan_to_num(rows["covered"].to_numpy(dtype=float))
        apart = covered * (rows["mean"].to_numpy(dtype=float) - own)
        blocks.append(
            pd.DataFrame(
                {
                    "unit": rows["unit"].astype("str").to_numpy(),
                    "stratum": code,
                    "area_ha": rows["area_ha"].to_numpy(dtype=float),
                    f"shift.{one.label}": np.nan_to_num(apart),
                }
            ).set_index(["unit", "stratum"])
        )
    if not blocks:
        return pd.DataFrame({"unit": [], "stratum": [], "share": []})
    area = pd.concat([block["area_ha"] for block in blocks]).groupby(level=[0, 1], sort=False).max()
    shifts = pd.concat([block.drop(columns="area_ha") for block in blocks], axis=1).reindex(area.index).fillna(0.0)
    joined = shifts.assign(area_ha=area).reset_index()
    total = joined.groupby("unit")["area_ha"].transform("sum")
    alone = ~joined["unit"].duplicated(keep=False)
    share = np.where(alone, 1.0, joined["area_ha"] / total.where(total > 0))
    unknown = joined["unit"].isin(joined["unit"][np.isnan(share)])
    return joined.drop(columns="area_ha").assign(share=share)[~unknown]


def _usable(auxiliary: Auxiliary, plots: pd.DataFrame) -> tuple[np.ndarray, list[tuple[str, str]]]:
    """Variables that tell plots of a stratum apart, each something that those before do not."""
    code, size = plots["code"].to_numpy(), plots["size"].to_numpy(dtype=float)
    strata = len(auxiliary.centre)
    spread = within_strata(auxiliary.value, code, size, strata) * np.sqrt(size)[:, None]
    length = np.sqrt((spread**2).sum(axis=0))
    scale = np.abs(np.nan_to_num(auxiliary.centre)).max(axis=0, initial=0.0) * np.sqrt(max(len(plots), 1))
    flat = length <= _FLAT * np.maximum(scale, np.abs(auxiliary.value).max(axis=0, initial=0.0))
    some = np.isfinite(auxiliary.centre).any(axis=0)
    standing = np.flatnonzero(~flat & some)
    own = independent_columns(spread[:, standing] / length[standing])
    usable = np.zeros(len(flat), dtype=bool)
    usable[standing[own]] = True
    why = [("raster constant on plots", auxiliary.rasters[at]) for at in np.flatnonzero(flat & some)]
    why += [("raster redundant", auxiliary.rasters[at]) for at in standing[~own]]
    return usable, why


_WHY = {
    "raster constant on plots": "has the same value on all plots of a stratum",
    "raster redundant": "follows from the rasters named before it",
    "too few plots for raster": "is one too many for the number of plots",
}


def _left(rule: str, raster: str, surveys: list[str]) -> pd.DataFrame:
    """Report a raster that is left out; once, with the surveys at fault unless it is all of them."""
    where = f" at {name_list(surveys)}" if surveys else ""
    return make_findings(
        rule,
        severity="warning",
        table="estimate",
        column=raster,
        survey=surveys[0] if len(surveys) == 1 else "",
        message=f"Raster {raster} {_WHY[rule]}{where}; the estimates do without it.",
        remedy="Leave it out, or name the more useful raster first.",
    )
