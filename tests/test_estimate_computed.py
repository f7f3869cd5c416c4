"""Estimates against results of general-purpose statistics packages, kept in ``data/statistics_computed.json``.

Independent: package, version and call stand beside each case. Tolerance 1e-9 relative (closed forms).
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import (
    cases,
    parcel_table,
    pick,
    plot_table,
    stocks,
    strata_table,
    survey_a,
    survey_a_tables,
    whole,
)

from landcarbon.estimate.pairs import pool_covariance
from landcarbon.estimate.ratio import counts
from landcarbon.estimate.tables import read_plots

CASES = {name: case["expected"] for name, case in cases("computed").items()}
INPUTS = {name: case["inputs"] for name, case in cases("computed").items()}
CLOSED_FORM = 1e-9


@pytest.mark.parametrize(("case", "survey"), [("A-STR-1", "t1"), ("A-STR-2", "t2")])
def test_stratified_mean_and_total(case: str, survey: str) -> None:
    expected = CASES[case]
    table, strata, _ = survey_a_tables()
    frame, _ = stocks(table, strata, surveys=[survey])
    rows, row = pick(frame, "stratum"), whole(frame)
    assert list(rows.index) == expected["strata"]["stratum"]
    assert list(rows["plots"]) == expected["strata"]["n"]
    for column, name in (
        ("area_ha", "area_ha"),
        ("density_t_c_ha", "mean"),
        ("density_se", "se_mean"),
        ("stock_t_c", "total"),
        ("stock_se", "se_total"),
    ):
        np.testing.assert_allclose(rows[column], expected["strata"][name], rtol=CLOSED_FORM)
    for column, name in (
        ("density_t_c_ha", "mean"),
        ("density_se", "se"),
        ("stock_t_c", "total"),
        ("stock_se", "se_total"),
        ("df", "df_satterthwaite"),
    ):
        assert row[column] == pytest.approx(expected[name], rel=CLOSED_FORM)
    np.testing.assert_allclose(
        row[["density_low", "density_high"]].astype(float), expected["ci95_mean_satterthwaite"], rtol=CLOSED_FORM
    )


def test_parcels_as_domains() -> None:
    expected = CASES["A-DOM-1"]["parcels"]
    table, strata, parcels = survey_a_tables()
    frame, findings = stocks(table, strata, parcels, surveys=["t1"])
    rows = pick(frame, "parcel")
    assert list(rows.index) == expected["parcel"]
    assert list(rows["plots"]) == expected["n"]
    for column, name in (
        ("area_ha", "known_area_ha"),
        ("density_t_c_ha", "mean"),
        ("density_se", "se_mean"),
        ("stock_t_c", "total_known_area"),
        ("stock_se", "se_total_known_area"),
    ):
        np.testing.assert_allclose(rows[column], expected[name], rtol=CLOSED_FORM)
    # the sum of parcel stocks on known areas is not the total; the finding says how far off it is
    apart = sum(expected["total_known_area"]) - CASES["A-DOM-1"]["whole_total"]
    note = findings[findings["rule"] == "parcels and inventory"]
    assert float(note["value"].iloc[0]) == pytest.approx(apart, rel=1e-5)


def test_stratum_with_one_plot_is_not_certain() -> None:
    expected = CASES["A-EDGE-1"]
    table, strata, _ = survey_a_tables()
    table = table[(table["survey"] == "t1") & ((table["stratum"] != "S4") | (table["plot"] == "p55"))]
    frame, findings = stocks(table, strata, surveys=["t1"])
    lonely, row = pick(frame, "stratum").loc["S4"], whole(frame)
    assert list(pick(frame, "stratum")["plots"]) == expected["n_by_stratum"]
    assert np.isnan([lonely["density_t_c_ha"], lonely["density_se"], lonely["stock_se"]]).all()
    assert lonely["method"] == "not estimable: 1 plot(s)"
    # none of the conventions that make up a variance for one plot: the stratum is out of the figure and of its area
    for convention in expected["conventions"]:
        assert row["density_se"] != pytest.approx(convention["se"], rel=1e-3)
    assert row["density_t_c_ha"] != pytest.approx(expected["mean"], rel=1e-3)
    assert row["area_ha"] == pytest.approx(2000 - 71.25)
    complete = CASES["A-STR-1"]["strata"]
    assert row["stock_t_c"] == pytest.approx(sum(complete["total"][:3]), rel=CLOSED_FORM)
    assert row["stock_se"] == pytest.approx(np.sqrt(np.sum(np.square(complete["se_total"][:3]))), rel=CLOSED_FORM)
    loud = findings[findings["rule"] == "stratum not estimable"].iloc[0]
    assert loud["severity"] == "error"
    assert "71.25 ha of 2,000.00 ha" in loud["message"]


def test_simple_random_sample() -> None:
    given, expected = INPUTS["A-SRS-1"], CASES["A-SRS-1"]
    table, strata = plot_table(given["y"]), strata_table({"S": given["area_ha"]})
    row = whole(stocks(table, strata)[0])
    for column, name in (
        ("plots", "n"),
        ("density_t_c_ha", "mean"),
        ("density_se", "se_no_fpc"),
        ("stock_t_c", "total"),
        ("stock_se", "se_total_no_fpc"),
        ("df", "df"),
    ):
        assert row[column] == pytest.approx(expected[name], rel=CLOSED_FORM)
    for confidence, name in ((0.95, "ci95_t_no_fpc"), (0.90, "ci90_t_no_fpc")):
        row = whole(stocks(table, strata, confidence=confidence)[0])
        np.testing.assert_allclose(row[["density_low", "density_high"]].astype(float), expected[name], rtol=CLOSED_FORM)


def test_constant_values_and_single_plot() -> None:
    given, expected = INPUTS["A-SRS-2"], CASES["A-SRS-2"]
    frame, findings = stocks(plot_table(given["constant"]), strata_table({"S": 10.0}))
    row = whole(frame)
    assert row["density_t_c_ha"] == expected["constant"]["mean"]
    assert row["density_se"] == expected["constant"]["se"] == 0
    assert "zero variance" in set(findings["rule"])
    frame, findings = stocks(plot_table([given["single"]]), strata_table({"S": 10.0}))
    row = whole(frame)
    assert np.isnan([row["density_t_c_ha"], row["density_se"], row["stock_t_c"], row["df"]]).all()
    assert row["method"].startswith("not estimable")
    assert row["area_ha"] == 0
    assert "zero variance" not in set(findings["rule"])


def subplots_as_plots() -> pd.DataFrame:
    points = pd.DataFrame(INPUTS["A-CLU-1"]["subplots"])
    return points.groupby(["stratum", "plot"])["y"].agg(["mean", "size"]).reset_index()


def test_plots_of_unequal_numbers_of_subplots() -> None:
    """Of the four estimators in use ours is the separate ratio: size is the number of subplots measured."""
    expected = CASES["A-CLU-1"]
    plots = subplots_as_plots()
    table = plot_table(
        plots["mean"].to_numpy(),
        plot=plots["plot"],
        stratum=plots["stratum"],
        size=plots["size"].to_numpy(dtype=float) / 4,
    )
    frame, _ = stocks(table, strata_table(INPUTS["A-CLU-1"]["areas_ha"]))
    ratio, row = expected["separate_ratio_by_stratum"], whole(frame)
    rows = pick(frame, "stratum").loc[ratio["stratum"]]
    np.testing.assert_allclose(rows["density_t_c_ha"], ratio["mean"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows["density_se"], ratio["se"], rtol=CLOSED_FORM)
    assert row["density_t_c_ha"] == pytest.approx(ratio["overall_mean"], rel=CLOSED_FORM)
    assert row["density_se"] == pytest.approx(ratio["overall_se"], rel=CLOSED_FORM)
    assert row["density_se"] > 1.5 * expected["se_ignoring_clusters_wrong"]


def test_plots_of_equal_weight_give_the_mean_of_plot_means() -> None:
    expected = CASES["A-CLU-1"]["mean_of_plot_means"]
    plots = subplots_as_plots()
    table = plot_table(plots["mean"].to_numpy(), plot=plots["plot"], stratum=plots["stratum"])
    row = whole(stocks(table, strata_table(INPUTS["A-CLU-1"]["areas_ha"]))[0])
    assert row["density_t_c_ha"] == pytest.approx(expected["mean"], rel=CLOSED_FORM)
    assert row["density_se"] == pytest.approx(expected["se"], rel=CLOSED_FORM)


OURS = {
    "agb": "above_ground",
    "bgb": "below_ground",
    "dead_wood": "dead_wood",
    "litter": "litter",
    "soil": "soil",
}


def five_pools() -> tuple[pd.DataFrame, pd.DataFrame]:
    given = INPUTS["A-POOL-1"]
    plots = pd.DataFrame(given["plots"])
    values = {ours: plots[theirs] for theirs, ours in OURS.items()}
    table = plot_table(
        plots["agb"], plot=plots["plot"], stratum=plots["stratum"], all=plots[list(OURS)].sum(axis=1), **values
    )
    return table, strata_table(given["areas_ha"])


def test_sum_of_pools_has_its_own_standard_error() -> None:
    expected = CASES["A-POOL-1"]
    frame, _ = stocks(*five_pools(), pools=list(OURS.values()))
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    assert list(rows.index) == [*OURS.values(), "all"]
    names = [OURS[name] for name in expected["pools"]["pool"]]
    np.testing.assert_allclose(rows.loc[names, "density_t_c_ha"], expected["pools"]["mean"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows.loc[names, "density_se"], expected["pools"]["se"], rtol=CLOSED_FORM)
    row = rows.loc["all"]
    for column, name in (
        ("density_t_c_ha", "sum_mean"),
        ("density_se", "sum_se"),
        ("stock_t_c", "sum_total"),
        ("stock_se", "sum_total_se"),
    ):
        assert row[column] == pytest.approx(expected[name], rel=CLOSED_FORM)
    assert row["density_se"] > 1.2 * expected["se_quadrature_ignoring_covariance"]


def test_covariance_between_pools() -> None:
    expected = CASES["A-POOL-1"]
    table, strata = five_pools()
    plots = read_plots(table, strata, None, list(OURS.values()))
    sample = plots.sample("2014")
    allowed = counts(sample, 2) >= 2
    matrix = pool_covariance(sample, np.zeros(15, dtype=np.int64), 1, plots.units.stratum_area_ha, allowed)[0]
    np.testing.assert_allclose(matrix[:5, :5], expected["vcov"], rtol=CLOSED_FORM, atol=1e-12)
    assert np.sqrt(matrix[:5, :5].sum()) == pytest.approx(expected["check_sum_of_vcov"], rel=CLOSED_FORM)
    assert np.sqrt(matrix[5, 5]) == pytest.approx(expected["sum_se"], rel=CLOSED_FORM)


def test_parcel_covariance_makes_the_contrast_wrong_if_ignored() -> None:
    """The diagonal of the published domain covariance matrix is ours; off the diagonal it is not zero."""
    matrix = np.array(CASES["A-DOM-1"]["vcov_means"])
    table, strata, parcels = survey_a_tables()
    rows = pick(stocks(table, strata, parcels, surveys=["t1"])[0], "parcel")
    np.testing.assert_allclose(rows["density_se"] ** 2, np.diag(matrix), rtol=CLOSED_FORM)


def test_strata_as_parcels_agree_with_the_strata() -> None:
    """Identity: a domain that is a whole stratum is that stratum."""
    table, strata, _ = survey_a_tables()
    table = table.assign(parcel=table["stratum"])
    areas = survey_a()["areas_ha"]
    frame, _ = stocks(table, strata, parcel_table(areas), surveys=["t1", "t2"])
    columns = ["density_t_c_ha", "density_se", "stock_t_c", "stock_se", "df", "plots"]
    for survey in ("t1", "t2"):
        pd.testing.assert_frame_equal(
            pick(frame, "parcel", survey=survey)[columns], pick(frame, "stratum", survey=survey)[columns]
        )
