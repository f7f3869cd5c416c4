"""Answers to reference cases with auxiliary variables: regression, post-strata, two phases, grids, small areas."""

from __future__ import annotations

import numpy as np
import pandas as pd
from estimate_frames import pick, plot_table, stocks, strata_table, survey_a, whole
from reference_io import Answer, Case, adapter
from reference_sample import FINITE, finite, one_row

from landcarbon.estimate.adjusted_means import (
    adjusted_mean,
    difference_estimator,
    linear_estimator,
    ratio_estimator,
    two_phase_ratio,
    two_phase_regression,
)
from landcarbon.estimate.post_strata import post_stratified_mean
from landcarbon.estimate.regression import Regression, regression_estimator, separate_design, stratum_weights
from landcarbon.estimate.small_area import fit_fay_herriot
from landcarbon.estimate.systematic import square_contrast_variance, successive_difference_variance
from landcarbon.estimate.two_phase import double_sampling_exact

PLAIN = "plain residuals; default: g-weighted"


# ---------------------------------------------------------------- regression on a wall-to-wall variable


def survey_frame(column: str, panel: str = "") -> tuple[pd.DataFrame, np.ndarray, np.ndarray, np.ndarray]:
    """Plots with the variable, their stratum codes, stratum areas and known totals of x by stratum."""
    data = survey_a()
    plots = pd.DataFrame(data["plots"])
    plots = plots[plots["panel"] == panel] if panel else plots.dropna(subset=[column])
    names = list(data["areas_ha"])
    cells = pd.DataFrame(data["cells"])
    known = (cells["area_ha"] * cells["mean_x"]).groupby(cells["stratum"]).sum().loc[names].to_numpy()
    codes = pd.Categorical(plots["stratum"], categories=names).codes.astype(np.int64)
    return plots.reset_index(drop=True), codes, np.array(list(data["areas_ha"].values())), known


def regressed(y: np.ndarray, x: np.ndarray, codes: np.ndarray, area: np.ndarray, known: np.ndarray) -> Regression:
    """Combined regression estimator with an intercept and one variable."""
    design = np.column_stack([np.ones(len(x)), x])
    x_mean = np.array([1.0, known.sum() / area.sum()])
    return regression_estimator(y, design, stratum_weights(codes, area), codes, x_mean)


@adapter("A-GREG-1")
def regression_estimates(case: Case) -> Answer:
    plots, codes, area, known = survey_frame("y1")
    y, x, total = plots["y1"].to_numpy(), plots["x"].to_numpy(), area.sum()
    weight = stratum_weights(codes, area)
    found = regressed(y, x, codes, area, known)
    se = float(np.sqrt(found.variance[0]))
    answer = Answer().give(
        {
            "total_area": total,
            "total_area_times_x": known.sum(),
            "mean_x_population": known.sum() / total,
            "mean_x_sample_weighted": weight @ x,
        }
    )
    answer.give(
        {
            "intercept": found.coefficients[0, 0],
            "slope": found.coefficients[1, 0],
            "mean": found.mean[0],
            "se_g_weighted": se,
            "total": found.mean[0] * total,
            "se_total_g_weighted": se * total,
            "g_weights.g": found.g,
        },
        prefix="combined.",
    )
    answer.give({"combined.se_residuals_without_g": np.sqrt(found.variance_residuals[0])}, PLAIN)
    names = case.expected["combined.parcel_totals_from_calibrated_weights.parcel"]
    inside = (plots["parcel"].to_numpy()[:, None] == np.array(names)) * y[:, None]
    parts = regressed(inside, x, codes, area, known)
    answer.give(
        {"total": parts.mean * total, "se": np.sqrt(parts.variance) * total},
        "g-weighted total of the values inside; default: mean times known area",
        "combined.parcel_totals_from_calibrated_weights.",
    )
    apart = separate_design(np.column_stack([np.ones(len(x)), x]), codes, len(area))
    x_mean = np.column_stack([area, known]).ravel() / total
    each = regression_estimator(y, apart, weight, codes, x_mean)
    answer.give(
        {
            "intercept": each.coefficients[0::2, 0],
            "slope": each.coefficients[1::2, 0],
            "mean": each.mean[0],
            "se_g_weighted": np.sqrt(each.variance[0]),
        },
        "one line per stratum; default: one line",
        "separate.",
    )
    none = regression_estimator(y, np.ones((len(y), 1)), weight, codes, np.ones(1))
    return answer.give({"mean": none.mean[0], "se": np.sqrt(none.variance[0])}, prefix="without_auxiliary.")


@adapter("A-CHG-3")
def regression_of_a_paired_change(case: Case) -> Answer:
    plots, codes, area, known = survey_frame("y1", "paired")
    change = (plots["y2"] - plots["y1"]).to_numpy()
    found = regressed(change, plots["x"].to_numpy(), codes, area, known)
    return Answer().give({"mean_change": found.mean[0], "se_g_weighted": np.sqrt(found.variance[0])})


@adapter("PS-09")
def regression_from_means(case: Case) -> Answer:
    given = case.inputs
    # the means of x are printed to three decimals; the printed adjustment holds their difference to more
    mean_x, slope = given["mean_x_sample"], given["slope"]
    mean = adjusted_mean(given["mean_y_sample"], slope, mean_x, mean_x + given["adjustment"] / slope)
    return Answer().give({"mean": mean})


@adapter("PS-07", "PM-07")
def difference_ratio_and_regression(case: Case) -> Answer:
    given = case.inputs
    if "X_all" in given:
        everywhere, values = np.array(given["X_all"], dtype=float), np.array(given["y"], dtype=float)
        seen = np.isfinite(values)
        x, y, known, population = everywhere[seen], values[seen], everywhere.mean(), float(len(everywhere))
    else:
        x, y = (np.array(given[name], dtype=float) for name in ("X", "Y"))
        known, population = float(given["mean_X"]), float(given["N"])
    line = linear_estimator(y, x, known, population=population)
    parts = difference_estimator(y, x, known, population=population)
    ratio = ratio_estimator(y, x, known, population=population, mean_below=known)
    simple = one_row(y)
    found = {
        "simple": simple["density_t_c_ha"],
        "se_simple": simple["density_se"] * finite(len(y), population),
        "difference": parts.mean,
        "se_difference": np.sqrt(parts.variance),
        "ratio": ratio.mean,
        "se_ratio": np.sqrt(ratio.variance),
        "regression": line.mean,
        "se_regression": np.sqrt(line.variance),
        "intercept_slope": [line.intercept, line.slope],
    }
    answer = Answer()
    for name, value in found.items():
        if name in case.expected:
            form = FINITE if name.startswith("se") else "default"
            answer.give({name: value}, form + ("; known mean of x below" if name == "se_ratio" else ""))
    return answer


@adapter("PM-08")
def regression_on_photo_counts(case: Case) -> Answer:
    given = case.inputs
    x, y = (np.array(given[name], dtype=float) for name in ("photo", "field"))
    line = linear_estimator(y, x, given["mean_photo"], population=given["N"], lost=1)
    answer = Answer().give({"intercept": line.intercept, "slope": line.slope, "mean": line.mean})
    return answer.give({"se": np.sqrt(line.variance)}, "divisor n - 1; default: n - 2; finite population factor")


# ---------------------------------------------------------------- post-strata


@adapter("A-PST-1", "PS-05")
def post_strata(case: Case) -> Answer:
    given = case.inputs
    area = given.get("class_areas_ha", given.get("N_g"))
    names = list(area)
    labels = given["plots"]["class"] if "plots" in given else given["group"]
    y = np.array(given["plots"]["y"] if "plots" in given else given["z"], dtype=float)
    codes = pd.Categorical(labels, categories=names).codes.astype(np.int64)
    hectares = np.array([float(area[name]) for name in names])
    found, total, plain = post_stratified_mean(y, codes, hectares), hectares.sum(), one_row(y)
    values = {
        "n_g": found.plots,
        "mean": found.mean[0],
        "se_conditional": np.sqrt(found.variance[0]),
        "se_conditional_on_class_counts": np.sqrt(found.variance[0]),
        "total": found.mean[0] * total,
        "without_poststratification.mean": plain["density_t_c_ha"],
        "without_poststratification.se": plain["density_se"],
    }
    for number, name in enumerate(names):
        values[f"n_by_class.{name}"] = found.plots[number]
        values[f"mean_by_class.{name}"] = found.class_mean[number, 0]
        values[f"variance_by_class.{name}"] = found.class_variance[number, 0]
    linearised, unconditional = (np.sqrt(found.variances[form][0]) for form in ("linearised", "unconditional"))
    others = {
        "linearised": {
            "se_linearised": linearised,
            "se_linearised_survey_package": linearised,
            "se_total_linearised": linearised * total,
        },
        "unconditional": {"se_unconditional_approx": unconditional},
    }
    answer = Answer().give({name: value for name, value in values.items() if name in case.expected})
    for form, named in others.items():
        kept = {name: value for name, value in named.items() if name in case.expected}
        answer.give(kept, f"{form}; default: conditional")
    return answer


# ---------------------------------------------------------------- two phases


@adapter("A-TWO-1")
def double_sampling_for_regression(case: Case) -> Answer:
    given = case.inputs
    x_first, values = np.array(given["x"], dtype=float), np.array(given["y"], dtype=float)
    second, population = np.isfinite(values), float(given["N"])
    x, y = x_first[second], values[second]
    found = two_phase_regression(y, x, x_first)
    forms = {lost: two_phase_regression(y, x, x_first, population=population, lost=lost) for lost in (1, 2)}
    ratio = two_phase_ratio(y, x, x_first, population=population)
    answer = Answer().give(
        {
            "n1": len(x_first),
            "n2": len(y),
            "N": population,
            "mean_x_phase1": x_first.mean(),
            "mean_x_phase2": x.mean(),
            "mean_y_phase2": y.mean(),
            "slope": found.slope,
            "estimate": found.mean,
            "se_no_fpc_divisor_n2_minus_2": np.sqrt(found.variance),
        }
    )
    for lost, form in forms.items():
        answer.give({f"se_formula_divisor_n2_minus_{lost}": np.sqrt(form.variance)}, FINITE)
    answer.give({"ratio_estimate": ratio.mean, "ratio_se_formula": np.sqrt(ratio.variance)}, f"ratio; {FINITE}")
    plain = one_row(y)
    path = "survey_twophase_uncalibrated."
    answer.give({"survey_twophase_calibrated.mean": found.mean, path + "mean": plain["density_t_c_ha"]})
    answer.give({path + "se": plain["density_se"] * finite(len(y), population)}, FINITE)
    return answer.leave_out(
        {"survey_twophase_calibrated.se": "weighting form of that package; ours are the formulas above"}
    )


@adapter("A-TWO-2", "PS-10")
def double_sampling_for_stratification(case: Case) -> Answer:
    given = case.inputs
    points = pd.Series(given.get("n1_by_class", given.get("n1_by_stratum")), dtype=float)
    measured = pd.Series(given["phase2"]).explode()
    number = float(points.sum())
    strata = strata_table(points.to_dict()).assign(first_phase=points.to_numpy())
    frame, _ = stocks(plot_table(measured.to_numpy(dtype=float), stratum=measured.index), strata)
    row, rows = whole(frame), pick(frame, "stratum").loc[points.index]
    mean, variance = rows["density_t_c_ha"].to_numpy(), (rows["density_se"] ** 2 * rows["plots"]).to_numpy()
    first, second = points.to_numpy(), rows["plots"].to_numpy(dtype=float)
    exact = double_sampling_exact(first, second, mean, variance, given.get("N", np.inf))
    values = {
        "weight": points / number,
        "n2": second,
        "mean": row["density_t_c_ha"] if case.published else mean,
        "variance": variance,
        "estimate": row["density_t_c_ha"],
        "se_formula": row["density_se"],
        "se_approximate": row["density_se"],
        "survey_twophase.mean": row["density_t_c_ha"],
    }
    answer = Answer().give({name: value for name, value in values.items() if name in case.expected})
    if "se_exact" in case.expected:
        return answer.give({"se_exact": np.sqrt(exact.variance)}, "exact, N known; default: formula for large samples")
    package = "weighting form of that package, divisor n within classes; ours is the formula above"
    return answer.leave_out({"survey_twophase.se": package})


# ---------------------------------------------------------------- grids


@adapter("A-SYS-1")
def plots_on_a_line(case: Case) -> Answer:
    values = np.array(case.inputs["y_in_line_order"])
    row, near = one_row(values), successive_difference_variance(values)
    pairs = np.repeat([f"pair {number:02d}" for number in range(len(values) // 2)], 2)
    strata = strata_table(dict.fromkeys(pairs, 1.0))
    paired = whole(stocks(plot_table(values, stratum=pairs), strata)[0])
    answer = Answer().give({"mean": row["density_t_c_ha"]})
    answer.give({"var_as_srs": row["density_se"] ** 2, "se_as_srs": row["density_se"]})
    answer.give(
        {"var_successive_differences": near, "se_successive_differences": np.sqrt(near)},
        "successive differences; default: as a random sample",
    )
    return answer.give(
        {"var_pairs_as_strata": paired["density_se"] ** 2}, "pairs as strata; default: as a random sample"
    )


@adapter("PM-15")
def points_on_a_grid(case: Case) -> Answer:
    given = case.inputs
    column, line = (np.array(given[name]) for name in ("column", "row"))
    values = np.array(given["z"])
    row = one_row(values)
    answer = Answer().give({"n": row["plots"], "mean_ratio": row["density_t_c_ha"]})
    answer.give({"var_as_srs": row["density_se"] ** 2})
    answer.give(
        {"mean_pi": row["density_t_c_ha"] * row["plots"] / given["expected_n"]},
        "sum by the number expected; default: plain mean",
    )
    return answer.give(
        {"var_matern": square_contrast_variance(column, line, values)}, "Matérn; default: as a random sample"
    )


# ---------------------------------------------------------------- small areas


def small_areas(y: np.ndarray, variance: np.ndarray, design: np.ndarray, prefix: str) -> Answer:
    answer = Answer()
    for method in ("REML", "ML", "FH"):
        found = fit_fay_herriot(y, variance, design, method=method)
        answer.give(
            {
                "beta": found.beta,
                "se_beta": found.beta_se,
                "refvar": found.refvar[0],
                "eblup": found.eblup,
                "mse": found.mse,
                "gamma": found.gamma,
            },
            "default" if method == "REML" else f"{method}; default: REML",
            prefix.format(method=method),
        )
    return answer


def only_expected(answer: Answer, case: Case) -> Answer:
    """Leave away what the case does not ask for."""
    kept = Answer(differs=answer.differs, left_out=answer.left_out)
    for path in case.expected:
        if path in answer.ours:
            kept.give({path: answer.ours[path]}, answer.form[path])
    return kept


@adapter("A-FH-1")
def nine_parcels(case: Case) -> Answer:
    given = {name: np.array(values) for name, values in case.inputs.items() if isinstance(values, list)}
    design = np.column_stack([np.ones(len(given["direct"])), given["mean_x"]])
    found = small_areas(given["direct"], given["se_direct"] ** 2, design, "{method}.")
    return only_expected(found, case)


def milk_design(areas: np.ndarray) -> np.ndarray:
    levels = np.unique(areas)
    return np.column_stack([np.ones(len(areas))] + [areas == level for level in levels[1:]]).astype(float)


@adapter("A-FH-2", "PM-22")
def milk(case: Case) -> Answer:
    given = {name: np.array(case.inputs[name], dtype=float) for name in ("yi", "SD", "MajorArea")}
    design = milk_design(given["MajorArea"])
    if case.published:
        found = fit_fay_herriot(given["yi"], given["SD"] ** 2, design)
        early = "printed before convergence (precision 1e-4 of the package); the converged value is that of A-FH-2"
        return Answer().give({"beta": found.beta}).leave_out({"refvar": early})
    return only_expected(small_areas(given["yi"], given["SD"] ** 2, design, "{method}."), case)
