"""Answers to reference cases of change: paired plots, partial replacement, ratio of two dates."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from estimate_frames import change, pick, survey_a, survey_a_tables, whole
from reference_designs import N_MINUS_H, ends
from reference_io import Answer, Case, adapter
from reference_sample import joint

from landcarbon.estimate.adjusted_means import ratio_estimator
from landcarbon.estimate.allocation import repeated_share, repeated_variance
from landcarbon.estimate.difference import Difference, difference_of_ratios
from landcarbon.estimate.overlap import covariance
from landcarbon.estimate.ratio import Sample
from landcarbon.estimate.replacement import (
    Combination,
    Panels,
    best_weights,
    choose_weights,
    combine_panels,
    panels,
    sum_of_strata,
)
from landcarbon.estimate.tables import read_plots

AREA_HA = 2000.0
# weights of repeated and other plots of the first date, then of the second
BASES = np.array([[1.0, 0.0, 0.0, 0.0], [0.0, 0.0, 1.0, 0.0]])
CONTRASTS = np.array([[-1.0, 1.0, 0.0, 0.0], [0.0, 0.0, -1.0, 1.0]])


@adapter("A-CHG-1")
def paired_change(case: Case) -> Answer:
    table, strata, _ = survey_a_tables("paired")
    frame, _ = change(table, strata)
    row, rows = whole(frame), pick(frame, "stratum")
    total, se = row["change_t_c"], row["change_se"]
    plots = pd.DataFrame(survey_a()["plots"]).query("panel == 'paired'")
    both = joint({"y1": plots["y1"], "y2": plots["y2"]}, plots["stratum"], survey_a()["areas_ha"])
    free = int((rows["plots_paired"] - 1).sum())
    answer = Answer().give(
        {
            "n": rows["plots_paired"],
            "mean_change": rows["change_t_c"] / rows["area_ha"],
            "variance_of_differences": (rows["change_se"] / rows["area_ha"]) ** 2 * rows["plots_paired"],
        },
        prefix="strata.",
    )
    answer.give(
        {
            "mean_change": total / AREA_HA,
            "se": se / AREA_HA,
            "total_change": total,
            "se_total": se,
            "df_satterthwaite": differenced(table, strata).df[0, 0],
            "mean_y1": both.mean[0],
            "mean_y2": both.mean[1],
            "vcov_y1_y2": both.cov,
        }
    )
    interval = {
        "df": free,
        "ci95_mean_t": ends(total / AREA_HA, se / AREA_HA, free),
        "ci95_total_t": ends(total, se, free),
    }
    return answer.give(interval, N_MINUS_H).differ({"se_if_dates_were_independent_wrong": se / AREA_HA})


@adapter("A-CHG-2")
def paired_change_by_parcel(case: Case) -> Answer:
    tables = survey_a_tables("paired")
    rows = pick(change(*tables)[0], "parcel")
    plots = pd.DataFrame(survey_a()["plots"]).query("panel == 'paired'")
    inside = {name: (plots["y2"] - plots["y1"]) * (plots["parcel"] == name) for name in rows.index}
    found = joint(inside, plots["stratum"], survey_a()["areas_ha"])
    answer = Answer().give(
        {
            "n": rows["plots_paired"],
            "mean_change": rows["change_t_c"] / rows["area_ha"],
            "se": rows["change_se"] / rows["area_ha"],
            "total_known_area": rows["change_t_c"],
            "se_total_known_area": rows["change_se"],
        },
        prefix="parcels.",
    )
    return answer.give(
        {"total_ht": AREA_HA * found.mean, "se_total_ht": AREA_HA * found.se},
        "total of the values inside; default: mean times known area",
        "parcels.",
    )


@adapter("PS-08")
def ratio_of_two_dates(case: Case) -> Answer:
    first, second = (np.array(case.inputs[name], dtype=float) for name in ("t1", "t2"))
    found = ratio_estimator(second, first)
    return Answer().give({"ratio": found.slope, "se": np.sqrt(found.variance)})


# ---------------------------------------------------------------- partial replacement


@adapter("PS-12")
def best_share_of_repeated_plots(case: Case) -> Answer:
    correlation = np.array(case.inputs["rho"])
    return Answer().give(
        {
            "optimum_percent_matched": 100.0 * repeated_share(correlation),
            "percent_gain_at_optimum": 100.0 * (1.0 / repeated_variance(correlation) - 1.0),
        }
    )


@adapter("A-SPR-2")
def partial_replacement_in_theory(case: Case) -> Answer:
    grid = pd.DataFrame(case.inputs["grid"])
    m, u = grid["m"].to_numpy(dtype=float), (grid["n"] - grid["m"]).to_numpy(dtype=float)
    # repeated and other plots of the first date, then of the second
    known = np.zeros((len(grid), 4, 4))
    for date, sd in enumerate(("S1", "S2")):
        known[:, 2 * date, 2 * date] = grid[sd] ** 2 / m
        known[:, 2 * date + 1, 2 * date + 1] = grid[sd] ** 2 / u
    known[:, 0, 2] = known[:, 2, 0] = grid["rho"] * grid["S1"] * grid["S2"] / m
    weights = np.stack([best_weights(known, np.broadcast_to(b, (len(grid), 4)), CONTRASTS) for b in BASES])
    mean = best_weights(known, np.broadcast_to(BASES[1], (len(grid), 4)), CONTRASTS)
    change_of_both = weights[1] - weights[0]
    share = (m / (m + u))[:, None]
    plain = np.hstack([-share, share - 1, share, 1 - share])

    def variance(by: np.ndarray) -> np.ndarray:
        return np.einsum("ge,gef,gf->g", by, known, by)

    answer = Answer().give({name: grid[name] for name in ("n", "m", "rho", "S1", "S2")}, "input", "results.")
    answer.give({"var_change_difference_of_means": variance(plain)}, prefix="results.")
    answer.give(
        {"var_change_paired_only": variance(np.broadcast_to([-1.0, 0.0, 1.0, 0.0], plain.shape))},
        "repeated plots alone; default: all plots",
        "results.",
    )
    return answer.give(
        {
            "var_current_mean": variance(mean),
            "var_change": variance(change_of_both),
            "weight_matched_t2": mean[:, 2],
            "weight_matched_t1": mean[:, 0],
        },
        "best combination with known variances; default: difference of means",
        "results.",
    )


@dataclass(frozen=True)
class Dates:
    """Both surveys of the invented inventory."""

    samples: tuple[Sample, Sample]
    area_ha: np.ndarray
    allowed: np.ndarray
    scale: np.ndarray  # the one pool counts, ``all`` beside it does not

    def whole(self) -> tuple[np.ndarray, np.ndarray]:
        first, second = (np.zeros(len(sample.plot), dtype=np.int64) for sample in self.samples)
        return first, second


def two_dates(table: pd.DataFrame, strata: pd.DataFrame) -> Dates:
    plots = read_plots(table, strata, None, ["above_ground"])
    samples = (plots.sample("t1"), plots.sample("t2"))
    return Dates(samples, plots.units.stratum_area_ha, np.ones((len(strata), 2), dtype=bool), np.array([1.0, 0.0]))


def differenced(table: pd.DataFrame, strata: pd.DataFrame) -> Difference:
    """Change of the mean of the whole inventory, with what the change table does not print."""
    dates = two_dates(table, strata)
    return difference_of_ratios(dates.samples, dates.whole(), 1, dates.area_ha, dates.allowed)


def best_change(dates: Dates, variances: str, *, by_stratum: bool) -> tuple[Panels, Combination]:
    """Best combination of repeated and other plots, for the whole area at once or stratum by stratum."""
    first, second = (sample.stratum for sample in dates.samples)
    number = len(dates.area_ha) if by_stratum else 1
    domains = (first, second) if by_stratum else dates.whole()
    parts = panels(dates.samples, domains, number, dates.area_ha, dates.allowed, variances=variances)
    weights = choose_weights(parts, dates.scale)
    found = combine_panels(parts, np.broadcast_to(dates.scale, (1, number, 2)), weights)
    return parts, sum_of_strata(found, dates.area_ha) if by_stratum else found


def told(found: Combination) -> dict[str, object]:
    mean, cov = found.means[0, 0], found.covariance[0, 0]
    return {
        "mean_t1": mean[0],
        "mean_t2": mean[1],
        "se_t1": np.sqrt(cov[0, 0]),
        "se_t2": np.sqrt(cov[1, 1]),
        "cov_t1_t2": cov[0, 1],
        "change": found.change[0, 0],
        "se_change": np.sqrt(found.variance[0, 0]),
        "weights_for_change": found.weights[0, 1] - found.weights[0, 0],
    }


@adapter("A-SPR-1")
def partial_replacement(case: Case) -> Answer:
    table, strata, _ = survey_a_tables()
    dates, answer = two_dates(table, strata), Answer()
    forms = (
        ("gls_combined_over_strata.", "own", False),
        ("gls_per_stratum_own_panel_variances.", "own", True),
        ("gls_per_stratum_pooled_variances.", "pooled", True),
    )
    for path, variances, by_stratum in forms:
        parts, found = best_change(dates, variances, by_stratum=by_stratum)
        kept = {name: value for name, value in told(found).items() if path + name in case.expected}
        where = "stratum by stratum" if by_stratum else "whole area at once"
        answer.give(kept, f"best combination, {variances} variances, {where}; default: difference of means", path)
        if not by_stratum:
            cov = covariance(parts.table, dates.scale[None])[0]
            named = {"value": parts.mean[0, :, 0], "se": np.sqrt(np.diag(cov))}
            answer.give(named, "own variances; default: shared", "elementary_estimates.")
            answer.give({"C": cov}, "own variances; default: shared")
    frame, _ = change(table, strata)
    row, rows = whole(frame), pick(frame, "stratum")
    path = "difference_of_all_plot_means."
    counted = {"n1": rows["plots_since"], "n2": rows["plots_until"], "m": rows["plots_paired"]}
    answer.give({"change": row["change_t_c"] / AREA_HA, **counted}, prefix=path)
    textbook = "variances of all plots, covariance of the repeated; default: sum of independent parts"
    answer.give({"se": np.sqrt(differenced(table, strata).variance_all_plots[0, 0])}, textbook, path)
    return answer.differ({"difference_as_if_independent_wrong_se": row["change_se"] / AREA_HA})
