"""Answers to reference cases of planning: allocation, sample size, areas behind a map, combined errors, log bias."""

from __future__ import annotations

import numpy as np
import pandas as pd
from reference_io import DEFAULT, Answer, Case, adapter

from allometry.log_bias import fit_log_linear, normal_factor, ratio_factor, smearing_factor
from landcarbon.estimate.allocation import anticipated_se, cost_optimal, neyman, proportional, rounded, whole_plots
from landcarbon.estimate.error_combination import (
    Combined,
    as_percent,
    combine_difference,
    combine_product,
    combine_sum,
)
from landcarbon.estimate.map_areas import adjusted_areas, area_by_grid, area_by_proportion
from landcarbon.estimate.sample_size import (
    normal_quantile,
    plots_in_area,
    relative_size,
    simple_size,
    stratified_size,
)

# ---------------------------------------------------------------- allocation and sample size


@adapter("A-STR-ALLOC")
def allocation_from_a_first_survey(case: Case) -> Answer:
    given, survey = case.inputs, case.inputs["survey_A"]
    plots = pd.DataFrame(survey["plots"]).dropna(subset=["y1"])
    area = pd.Series(survey["areas_ha"])
    sd = plots.groupby("stratum")["y1"].std().loc[area.index]
    n, fit = given["n_total"], plots_in_area(area, given["plot_area_ha"])
    mean = (area * plots.groupby("stratum")["y1"].mean()).sum() / area.sum()
    wanted = 0.1 * mean
    required = stratified_size(area, sd, wanted, quantile=2.0, population=fit.sum())
    return Answer().give(
        {
            "N_h": fit,
            "s_h": sd,
            "proportional": proportional(n, area),
            "neyman": neyman(n, area, sd),
            "E": wanted,
            "n_required_unrounded": required,
            "n_required": np.ceil(required),
            "n_required_by_stratum_unrounded": neyman(float(required), area, sd),
            "anticipated_se_neyman_60_no_fpc": anticipated_se(area, sd, neyman(n, area, sd)),
            "anticipated_se_proportional_60_no_fpc": anticipated_se(area, sd, proportional(n, area)),
        }
    )


@adapter("A-ALLOC-2")
def allocation_by_cost(case: Case) -> Answer:
    given = case.inputs
    size, sd, cost = (np.array(given[name]) for name in ("N_h", "S_h", "cost_h"))
    even = neyman(given["n_total"], size, sd)
    best = cost_optimal(size, sd, cost, budget=given["budget"])
    return Answer().give(
        {
            "proportional": proportional(given["n_total"], size),
            "neyman": even,
            "neyman_anticipated_se": anticipated_se(size, sd, even, population=size),
            "cost_optimum": best,
            "cost_optimum_se": anticipated_se(size, sd, best, population=size),
        }
    )


@adapter("PS-13")
def allocation_in_whole_plots(case: Case) -> Answer:
    given = case.inputs
    size, sd, n = np.array(given["N_h"]), np.array(given["S_h"]), given["n"]
    answer = Answer().give({"neyman_rounded": rounded(neyman(n, size, sd))})
    shares = whole_plots(proportional(n, size), n, rule="largest")
    return answer.give({"proportional_rounded_then_largest_minus_1": shares}, 'rule "largest"; default: "remainder"')


@adapter("PS-14")
def allocation_to_six_strata(case: Case) -> Answer:
    given = case.inputs
    return Answer().give({"n_h": neyman(given["n"], given["N_h"], given["S_h"])})


@adapter("PS-15")
def plots_of_one_stratum(case: Case) -> Answer:
    given = case.inputs
    fit = float(plots_in_area(given["area_ha"], given["plot_ha"]))
    number = simple_size(given["sd"], given["E"], quantile=given["t"], population=fit)
    return Answer().give({"N": fit, "n_rounded_up": np.ceil(number)})


@adapter("PS-16")
def plots_of_four_stands(case: Case) -> Answer:
    given = case.inputs
    area, cv = np.array(given["acres"]), np.array(given["cv_percent"])
    weighted = (area * cv).sum() / area.sum()
    number = relative_size(weighted, given["error_percent"], quantile=given["t"], population=given["N"])
    return Answer().give(
        {"weighted_cv": weighted, "n_total": number, "n_h_first_three": neyman(float(number), area, cv)[:3]}
    )


@adapter("PS-17")
def plots_for_a_relative_error(case: Case) -> Answer:
    given = case.inputs
    number = relative_size(given["cv"], given["r"], quantile=normal_quantile(given["conf"]))
    return Answer().give({"n": np.ceil(number)})


@adapter("PM-18")
def plots_of_a_small_population(case: Case) -> Answer:
    given = case.inputs
    number = simple_size(given["S"], given["e"], quantile=normal_quantile(0.95), population=given["N"])
    return Answer().give({"n": np.ceil(number)})


# ---------------------------------------------------------------- areas


@adapter("A-AREA-1", "PS-18", "PS-19")
def areas_from_an_error_matrix(case: Case) -> Answer:
    given = case.inputs
    mapped = given.get("mapped_area", given.get("mapped_area_ha"))
    found = adjusted_areas(given["matrix_rows_map_columns_reference"], mapped)
    z = 1.96  # as the papers round it; ours is the unrounded quantile
    values = {
        "area": found.area,
        "se_area": found.area_se,
        "overall_accuracy": found.overall,
        "se_overall": found.overall_se,
        "users_accuracy": found.users,
        "se_users": found.users_se,
        "producers_accuracy": found.producers,
        "se_producers": found.producers_se,
        "ua": found.users,
        "pa": found.producers,
        "oa": found.overall,
        "se_deforestation": found.area_se[0],
    }
    half = {
        "ci95_half_width": z * found.area_se,
        "ci95": z * found.area_se,
        "ci_ua": z * found.users_se,
        "ci_oa": z * found.overall_se,
    }
    answer = Answer()
    for named, form in ((values, DEFAULT), (half, "1.96 standard errors")):
        answer.give({name: value for name, value in named.items() if name in case.expected}, form)
    return answer


@adapter("PS-20")
def areas_from_proportions(case: Case) -> Answer:
    area, se = area_by_proportion(case.inputs["points"], case.inputs["total_area_ha"])
    return Answer().give({"area": area, "se": se})


@adapter("PS-21")
def area_from_a_grid(case: Case) -> Answer:
    return Answer().give({"area_ha": area_by_grid(case.inputs["points"], case.inputs["spacing_m"])})


# ---------------------------------------------------------------- combined errors


@adapter("A-IPCC-1")
def combined_errors(case: Case) -> Answer:
    given = case.inputs
    first, second = (combine_sum(given[date]["value"], given[date]["u_percent"]) for date in ("t1", "t2"))
    values, percent = [first.value, given["area_ha"]], [first.percent, given["area_u_percent"]]
    product = combine_product(values, percent)
    apart: Combined = combine_difference(first, second)
    answer = Answer().give(
        {
            "sum_t1": first.value,
            "u_sum_t1_percent": first.percent,
            "half_width_t1": first.half_width,
            "product_total": product.value,
            "u_product_percent": product.percent,
            "sum_t2": second.value,
            "u_sum_t2_percent": second.percent,
            "change": apart.value,
            "half_width_change_independent": apart.half_width,
        }
    )
    shared = combine_difference(first, second, given["correlation_of_errors_between_dates"])
    answer.give({"half_width_change_correlated": shared.half_width}, "with correlation; default: none")
    exact = combine_product(values, percent, exact=True)
    answer.give({"product_exact_half_width_ratio": exact.percent}, "exact; default: simple rule")
    return answer.give(
        {"u_change_percent_independent": float(as_percent(apart.half_width, apart.value, across_zero=True))},
        "across zero; default: none, as the interval includes zero",
    )


# ---------------------------------------------------------------- log bias


@adapter("PS-22")
def factor_of_a_log_model(case: Case) -> Answer:
    given = case.inputs
    residual_sd = np.sqrt(2.0 * np.log(given["correction_factor"]))
    factor = normal_factor(residual_sd / np.log(10.0), base=10.0)  # the base-10 twin of the same spread
    plain = np.exp(given["ln_prediction"])
    return Answer().give({"uncorrected": plain, "corrected": plain * factor})


@adapter("A-LOG-1")
def factors_of_black_cherry(case: Case) -> Answer:
    data = {name: np.array(values, dtype=float) for name, values in case.inputs["data"].items()}
    fit = fit_log_linear(data["D"], data["V"])
    factor = normal_factor(np.sqrt(fit.residual_ms))
    predicted, wanted = fit.predict(data["D"]), fit.predict(case.inputs["predict_at_D"])
    return Answer().give(
        {
            "a": fit.intercept,
            "b": fit.slope,
            "residual_ms": fit.residual_ms,
            "correction_exp_half_ms": factor,
            "uncorrected": wanted,
            "corrected": factor * wanted,
            "smearing_factor": smearing_factor(fit.residual),
            "ratio_estimator_factor": ratio_factor(data["V"], predicted),
            "sum_of_V": data["V"].sum(),
            "sum_uncorrected": predicted.sum(),
            "sum_corrected": factor * predicted.sum(),
        }
    )
