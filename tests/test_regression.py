"""Regression, ratio and difference estimators against printed examples and general-purpose packages."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import cases, survey_a

from landcarbon.errors import UserError
from landcarbon.estimate.adjusted_means import (
    adjusted_mean,
    difference_estimator,
    linear_estimator,
    ratio_estimator,
    stratified_ratio,
    two_phase_ratio,
    two_phase_regression,
)
from landcarbon.estimate.regression import (
    change_regression,
    fit_lines,
    independent_columns,
    regression_estimator,
    separate_design,
    stratum_weights,
)


def survey(panel=""):
    data = survey_a()
    names, area = list(data["areas_ha"]), np.array(list(data["areas_ha"].values()))
    cells = pd.DataFrame(data["cells"])
    known = (cells["area_ha"] * cells["mean_x"]).groupby(cells["stratum"]).sum()[names].to_numpy()
    plots = pd.DataFrame(data["plots"])
    plots = plots[plots["panel"] == panel] if panel else plots[plots["y1"].notna()]
    code = plots["stratum"].map({name: at for at, name in enumerate(names)}).to_numpy()
    return plots, code, area, known


def combined(plots, code, area, known):
    x = np.column_stack([np.ones(len(plots)), plots["x"]])
    return x, stratum_weights(code, area), np.array([1.0, known.sum() / area.sum()])


def test_combined_estimator_with_both_variances_and_weights():
    """Independent: A-GREG-1, R package survey 4.1.1 (calibrate), see tests/data/statistics_computed.json."""
    expected = cases("computed")["A-GREG-1"]["expected"]["combined"]
    plots, code, area, known = survey()
    x, weight, x_mean = combined(plots, code, area, known)
    found = regression_estimator(plots["y1"].to_numpy(), x, weight, code, x_mean)
    assert found.mean[0] == pytest.approx(expected["mean"], rel=1e-9)
    assert np.sqrt(found.variance[0]) == pytest.approx(expected["se_g_weighted"], rel=1e-9)
    assert np.sqrt(found.variance_residuals[0]) == pytest.approx(expected["se_residuals_without_g"], rel=1e-9)
    assert found.coefficients[:, 0] == pytest.approx([expected["intercept"], expected["slope"]], rel=1e-9)
    assert list(plots["plot"]) == expected["g_weights"]["plot"]
    assert found.g == pytest.approx(np.array(expected["g_weights"]["g"]), rel=1e-9)


def test_the_weights_reproduce_what_is_known():
    """Identity: weighted by w g, the auxiliary variables have their known means, and y the estimate."""
    plots, code, area, known = survey()
    x, weight, x_mean = combined(plots, code, area, known)
    found = regression_estimator(plots["y1"].to_numpy(), x, weight, code, x_mean)
    assert (weight * found.g) @ x == pytest.approx(x_mean, rel=1e-12)
    assert (weight * found.g) @ plots["y1"] == pytest.approx(found.mean[0], rel=1e-12)


def test_separate_estimator():
    """Independent: A-GREG-1, R package survey 4.1.1."""
    expected = cases("computed")["A-GREG-1"]["expected"]["separate"]
    plots, code, area, known = survey()
    x, weight, _ = combined(plots, code, area, known)
    x_mean = (np.column_stack([area, known]) / area.sum()).ravel()
    found = regression_estimator(plots["y1"].to_numpy(), separate_design(x, code, 4), weight, code, x_mean)
    assert found.mean[0] == pytest.approx(expected["mean"], rel=1e-9)
    assert np.sqrt(found.variance[0]) == pytest.approx(expected["se_g_weighted"], rel=1e-9)
    assert found.coefficients.reshape(4, 2)[:, 1] == pytest.approx(expected["slope"], rel=1e-9)


def test_change_of_repeated_plots():
    """Independent: A-CHG-3, R package survey 4.1.1; the same variable at both dates."""
    expected = cases("computed")["A-CHG-3"]["expected"]
    plots, code, area, known = survey("paired")
    x, weight, x_mean = combined(plots, code, area, known)
    y = (plots["y1"].to_numpy(), plots["y2"].to_numpy())
    found = change_regression(y, (x, x), weight, code, (x_mean, x_mean))
    assert found.mean[0] == pytest.approx(expected["mean_change"], rel=1e-9)
    assert np.sqrt(found.variance[0]) == pytest.approx(expected["se_g_weighted"], rel=1e-9)


def test_ratio_of_a_stratified_sample():
    """Independent: A-RAT-1, R package survey 4.1.1 (svyratio); published: PM-09, Brus (2022) section 10.2.1."""
    expected = cases("computed")["A-RAT-1"]["expected"]
    plots, code, area, known = survey()
    for kind in ("combined", "separate"):
        total, variance, _ = stratified_ratio(
            plots["y1"].to_numpy(), plots["x"].to_numpy(), code, area, known, separate=kind == "separate"
        )
        assert total == pytest.approx(expected[kind]["total"], rel=1e-9)
        assert np.sqrt(variance) == pytest.approx(expected[kind]["se_total"], rel=1e-9)
    case = cases("published")["PM-09"]
    given, printed = case["inputs"], case["printed"]
    code = np.array(given["stratum"]) - 1
    units, known = (np.array(list(given[name].values()), dtype=float) for name in ("N_h", "total_agri_h"))
    for kind in ("combined", "separate"):
        total, variance, _ = stratified_ratio(
            np.array(given["poppy"]), np.array(given["agri"]), code, units, known,
            separate=kind == "separate", finite=True,
        )  # fmt: skip
        assert total == pytest.approx(printed[f"{kind}_total"]["value"], abs=0.006)
        assert np.sqrt(variance) == pytest.approx(printed[f"se_{kind}"]["value"], abs=0.0006)


def test_textbook_forms_of_small_samples():
    """Published: Kauermann & Kuechenhoff (2010) pp. 85-86, quoted in the tests of a package (PS-07)."""
    y, x = np.array([9.0, 10.0, 22.0]), np.array([11.0, 11.0, 21.0])
    line = linear_estimator(y, x, 15.0, population=5)
    apart = difference_estimator(y, x, 15.0, population=5)
    ratio = ratio_estimator(y, x, 15.0, population=5, mean_below=15.0)
    assert (line.mean, line.intercept, line.slope) == pytest.approx((14.5, -4.25, 1.25))
    assert np.sqrt([line.variance, apart.variance, ratio.variance]) == pytest.approx([0.2582, 0.5578, 0.6512], abs=5e-5)
    assert (apart.mean, ratio.mean) == pytest.approx((14.3, 14.3), abs=0.05)


def test_ratio_of_two_dates():
    """Published: Lohr (2022) ch. 4, seedlings of 1992 and 1994 (PS-08; printed values recalled)."""
    first = np.array([1, 0, 8, 2, 76, 60, 25, 2, 1, 31], dtype=float)
    second = np.array([0, 0, 1, 2, 10, 15, 3, 2, 1, 27], dtype=float)
    found = ratio_estimator(second, first)
    assert found.slope == pytest.approx(0.2961, abs=5e-5)
    assert np.sqrt(found.variance) == pytest.approx(0.115, abs=5e-4)


def test_mean_from_printed_summary():
    """Published: Brus (2022) section 10.1.1, biomass on the logarithm of a raster (PS-09)."""
    assert adjusted_mean(246.51, 1.0, 0.0, -16.1039) == pytest.approx(230.41, abs=0.005)
    assert adjusted_mean(246.51, -237.1379, 6.347, 6.415) == pytest.approx(230.41, abs=0.03)  # means to 3 decimals


def test_double_sampling_for_regression():
    """Independent: A-TWO-1, R 4.2.2 (lm and the textbook formulas; Cochran 1977 eq. 12.51 recalled)."""
    case = cases("computed")["A-TWO-1"]
    x_first = np.array(case["inputs"]["x"])
    y = np.array([np.nan if one is None else one for one in case["inputs"]["y"]])
    second, expected = np.isfinite(y), case["expected"]
    args = (y[second], x_first[second], x_first)
    found = two_phase_regression(*args)
    assert found.mean == pytest.approx(expected["estimate"], rel=1e-9)
    assert found.slope == pytest.approx(expected["slope"], rel=1e-9)
    assert np.sqrt(found.variance) == pytest.approx(expected["se_no_fpc_divisor_n2_minus_2"], rel=1e-9)
    for lost in (1, 2):
        finite = two_phase_regression(*args, population=4000, lost=lost)
        assert np.sqrt(finite.variance) == pytest.approx(expected[f"se_formula_divisor_n2_minus_{lost}"], rel=1e-9)
    ratio = two_phase_ratio(*args, population=4000)
    assert ratio.mean == pytest.approx(expected["ratio_estimate"], rel=1e-9)
    assert np.sqrt(ratio.variance) == pytest.approx(expected["ratio_se_formula"], rel=1e-9)


def test_a_second_phase_larger_than_the_first_is_refused():
    with pytest.raises(UserError, match="first phase of 2 points, second of 3"):
        two_phase_regression(np.arange(3.0), np.arange(3.0), np.arange(2.0))


def test_a_stratum_with_one_plot_is_refused():
    with pytest.raises(UserError, match="fewer than two plots"):
        regression_estimator(np.arange(3.0), np.ones((3, 1)), np.ones(3), np.array([0, 0, 1]), np.ones(1))


def test_lines_agree_with_a_statistics_package():
    """Independent: weighted least squares of statsmodels."""
    models = pytest.importorskip("statsmodels.api")
    rng = np.random.default_rng(7)
    x = np.column_stack([np.ones(40), rng.normal(10, 3, 40), rng.normal(1000, 50, 40)])
    y, weight = x @ [4.0, 2.0, 0.01] + rng.normal(size=40), rng.uniform(0.5, 2, 40)
    expected = models.WLS(y, x, weights=weight).fit().params
    assert fit_lines(x, y[:, None], weight)[:, 0] == pytest.approx(expected, rel=1e-9)


def test_dependent_columns_are_found_whatever_their_unit():
    rng = np.random.default_rng(3)
    one, two = rng.normal(size=30), rng.normal(size=30)
    table = np.column_stack([one, 1e6 * one, two, one - 3e-4 * two, np.zeros(30)])
    assert independent_columns(table).tolist() == [True, False, True, False, False]


def test_calibrated_weights_agree_live():
    """Independent: linear calibration of the package svy, run in the same test on survey_A."""
    polars, svy = pytest.importorskip("polars"), pytest.importorskip("svy")
    plots, code, area, known = survey()
    x, weight, x_mean = combined(plots, code, area, known)
    found = regression_estimator(plots["y1"].to_numpy(), x, weight, code, x_mean)
    columns = {
        "stratum": plots["stratum"].tolist(),
        "weight": (weight * area.sum()).tolist(),
        "one": [1.0] * len(plots),
        "x": plots["x"].astype(float).tolist(),
        "y": plots["y1"].astype(float).tolist(),
    }
    sample = svy.Sample(polars.DataFrame(columns), svy.Design(stratum="stratum", wgt="weight", wr=True))
    made = sample.weighting.calibrate(controls={"one": float(area.sum()), "x": float(known.sum())})
    assert made.estimation.mean("y").to_dicts()[0]["est"] == pytest.approx(found.mean[0], rel=1e-9)
    table = made.data
    assert np.array(table["calib_wgt"]) == pytest.approx(weight * area.sum() * found.g, rel=1e-9)
