"""Estimates assisted by rasters: the same estimator by two ways, sums, fall-backs and what the outputs say."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from assist_frames import SUMS, assisted_estimates, estimates, rasters, survey_plots, units
from estimate_frames import whole

from landcarbon.errors import UserError
from landcarbon.estimate.adjusted_means import two_phase_regression
from landcarbon.estimate.assist import MODEL_COLUMNS, OFFSET_COLUMNS, REPORT_COLUMNS, assist
from landcarbon.estimate.assist_lines import slope_loss, slope_price
from landcarbon.estimate.post_strata import post_stratified_mean
from landcarbon.estimate.regression import change_regression, regression_estimator, separate_design, stratum_weights

ONE = {"above_ground": ["above_ground.trees"], "all": ["above_ground.trees"]}


@pytest.fixture(scope="module")
def made():
    plots = survey_plots()
    return plots, *assisted_estimates(plots)


def simple(number=30, seed=4, slope=5.0, noise=6.0, survey="1"):
    """A single stratum of 100 ha with four parcels; heights follow a normal distribution of mean 15."""
    rng = np.random.default_rng(seed)
    height = rng.normal(15, 4, number)
    plots = pd.DataFrame(
        {
            "survey": survey,
            "plot": [f"p{at:02d}" for at in range(number)],
            "parcel": np.array(["A", "B", "C", "D"])[np.arange(number) % 4],
            "stratum": "S",
            "inside": True,
            "date": pd.Timestamp("2020-06-01"),
            "size": 1.0,
            "above_ground.trees": 20 + slope * height + rng.normal(0, noise, number),
        }
    )
    values = pd.DataFrame({"survey": survey, "plot": plots["plot"], "height": height})
    means = pd.DataFrame(
        {
            "survey": survey,
            "by": ["stratum"] + ["parcel"] * 4,
            "unit": ["S", "A", "B", "C", "D"],
            "height": [15.0, 12.0, 14.0, 16.0, 18.0],
            "share_covered": 1.0,
        }
    )
    strata = pd.DataFrame({"stratum": ["S"], "area_ha": [100.0]})
    parcels = pd.DataFrame({"parcel": ["A", "B", "C", "D"], "area_ha": 25.0, "stratum": "S"})
    return plots, values, means, strata, parcels


def simple_stocks(plots, values, means, strata, parcels, **options):
    found = assist(plots, ONE, values, means, strata, parcels=parcels, **options)
    return found, estimates(plots, found, strata, parcels, sums=ONE)[0]


# ---------------------------------------------------------------- the same estimator by two ways


def design_of(plots, survey, strata):
    heights = rasters()[0]
    rows = plots[plots["survey"] == survey]
    heights = heights[heights["survey"] == survey].set_index("plot")["height"].reindex(rows["plot"]).to_numpy()
    means = rasters()[1]
    means = means[(means["survey"] == survey) & (means["by"] == "stratum")].set_index("unit")["height"]
    labels = list(strata["stratum"])
    code = rows["stratum"].map({name: at for at, name in enumerate(labels)}).to_numpy()
    area = strata["area_ha"].to_numpy()
    share = area / area.sum()
    x = np.column_stack([np.eye(len(labels))[code], heights])
    x_mean = np.append(share, share @ means.reindex(labels).to_numpy())
    return rows, code, area, x, x_mean


@pytest.mark.parametrize("survey", ["t1", "t2"])
def test_inventory_equals_the_regression_estimator(made, survey):
    """Independent of the engine: ``regression_estimator`` with an intercept per stratum; variance before the raise."""
    plots = survey_plots().assign(size=1.0)
    _, stocks, _ = assisted_estimates(plots)
    rows, code, area, x, x_mean = design_of(plots, survey, units()[0])
    y = rows["above_ground.trees"].to_numpy()
    expected = regression_estimator(y, x, stratum_weights(code, area), code, x_mean)
    row = whole(stocks, "above_ground", survey=survey)
    factor, _ = slope_price(len(rows) - 4, 1)
    assert row["density_t_c_ha"] == pytest.approx(expected.mean[0], rel=1e-9)
    assert row["density_se"] ** 2 == pytest.approx(expected.variance_residuals[0] * factor, rel=1e-9)
    assert row["stock_t_c"] == pytest.approx(expected.mean[0] * 2000, rel=1e-9)


def test_plots_of_unequal_size(made):
    """Identity: sizes weigh plots in the line and in the mean, so weighted residuals of each stratum add up to zero."""
    plots, found, stocks, _ = made
    rows, code, area, x, x_mean = design_of(plots, "t1", units()[0])
    weight = stratum_weights(code, area, rows["size"].to_numpy())
    expected = regression_estimator(rows["above_ground.trees"].to_numpy(), x, weight, code, x_mean)
    row = whole(stocks, "above_ground", survey="t1")
    assert row["density_t_c_ha"] == pytest.approx(expected.mean[0], rel=1e-9)
    line = found.models[(found.models["of"] == "above_ground") & (found.models["survey"] == "t1")]
    assert line[line["term"] == "height"]["coefficient"].to_numpy() == pytest.approx(expected.coefficients[-1, 0])
    first = line[line["term"] == "intercept"]["coefficient"].to_numpy()
    assert first == pytest.approx(expected.coefficients[:-1, 0], rel=1e-9)


def test_slopes_by_stratum_equal_the_separate_estimator():
    """Independent of the engine: separate design; strata with fewer than nine plots take the slope of all."""
    plots, values, means, _, _ = simple(40)
    plots = plots.assign(stratum=np.where(np.arange(40) < 20, "S", "T"))
    strata = pd.DataFrame({"stratum": ["S", "T"], "area_ha": [60.0, 40.0]})
    means = pd.concat([means[:1], means[:1].assign(unit="T", height=17.0)])
    found = assist(plots, ONE, values, means, strata, by_stratum=True)
    stocks, _ = estimates(plots, found, strata, None, sums=ONE)
    code = (np.arange(40) >= 20).astype(int)
    x = separate_design(np.column_stack([np.ones(40), values["height"]]), code, 2)
    x_mean = np.array([0.6, 0.6 * 15, 0.4, 0.4 * 17])
    weight = stratum_weights(code, np.array([60.0, 40.0]))
    expected = regression_estimator(plots["above_ground.trees"].to_numpy(), x, weight, code, x_mean)
    row = whole(stocks)
    assert row["density_t_c_ha"] == pytest.approx(expected.mean[0], rel=1e-9)
    assert row["density_se"] ** 2 == pytest.approx(expected.variance_residuals[0] * slope_price(19, 1)[0], rel=1e-9)


def two_strata(number=40, seed=3, low=5.0):
    """Two strata and two surveys of the same plots; in the second the carbon goes with the height by ``low``."""
    plots, values, means, _, _ = simple(number)
    rng = np.random.default_rng(seed)
    second = np.arange(number) >= number // 2
    height = values["height"].to_numpy()
    carbon = np.where(second, 20 + low * height, 20 + 5 * height) + rng.normal(0, 6, number)
    tables = []
    for survey, date, growth in (("1", "2014-06-01", 1.0), ("2", "2024-06-01", 1.2)):
        column = growth * carbon + (growth - 1) * rng.normal(0, 8, number)
        tables.append(plots.assign(survey=survey, date=pd.Timestamp(date), **{"above_ground.trees": column}))
    plots = pd.concat(tables, ignore_index=True)
    plots = plots.assign(stratum=np.where(np.tile(second, 2), "T", "S"), parcel="")
    values = pd.concat([values, values.assign(survey="2")], ignore_index=True)
    means = pd.concat([means[:1], means[:1].assign(unit="T", height=17.0)])
    means = pd.concat([means, means.assign(survey="2")], ignore_index=True)
    return plots, values, means, pd.DataFrame({"stratum": ["S", "T"], "area_ha": [60.0, 40.0]})


def test_change_equals_the_model_assisted_difference():
    """Independent of the engine: ``change_regression`` on repeated plots, each date with its own line."""
    plots, values, means, strata = two_strata()
    found = assist(plots, ONE, values, means, strata)
    _, change = estimates(plots, found, strata, None, sums=ONE)
    assert found.report["used"].all()
    assert found.report["why"].str.contains("common slopes").any()
    height, code = values["height"].to_numpy()[:40], (np.arange(40) >= 20).astype(int)
    area, x_mean = np.array([60.0, 40.0]), np.array([0.6, 0.4, 0.6 * 15 + 0.4 * 17])
    x = np.column_stack([np.eye(2)[code], height])
    y = tuple(plots["above_ground.trees"].to_numpy().reshape(2, 40))
    expected = change_regression(y, (x, x), stratum_weights(code, area), code, (x_mean, x_mean))
    row = whole(change, "above_ground")
    assert row["change_t_c"] == pytest.approx(expected.mean[0] * 100, rel=1e-9)
    assert (row["change_se"] / 100) ** 2 == pytest.approx(
        expected.variance_residuals[0] * slope_price(38, 1)[0], rel=1e-9
    )


def test_a_stratum_that_common_slopes_harm_stays_plain():
    """Identity: the figures of the low stratum are the plain ones, those of the other rest on its own plots alone."""
    plots, values, means, strata = two_strata(low=0.0)
    made = [assist(plots, ONE, values, means, strata, by_stratum=own) for own in (False, True)]
    plain, plain_change = estimates(plots, None, strata, None, sums=ONE)
    only = plots[plots["stratum"] == "S"].reset_index(drop=True)
    alone = estimates(only, assist(only, ONE, values, means, strata[:1]), strata[:1], None, sums=ONE)
    for found in made:
        stocks, change = estimates(plots, found, strata, None, sums=ONE)
        for table, other, by_itself in ((stocks, plain, alone[0]), (change, plain_change, alone[1])):
            low, high = (table["unit"] == "T", table["unit"] == "S")
            pd.testing.assert_frame_equal(table[low], other[low])
            figures = table[high].select_dtypes("number").to_numpy()
            expected = by_itself[by_itself["unit"] == "S"].select_dtypes("number").to_numpy()
            assert figures == pytest.approx(expected, rel=1e-9, nan_ok=True)
        used = found.report[found.report["pool"] == "above_ground"].drop_duplicates("stratum").set_index("stratum")
        assert used["used"].to_dict() == {"": True, "S": True, "T": False}
        assert "below 1.1" in used.loc["T", "why"]
        assert used.loc["", "why"] == "they serve in S, not in T"
        note = found.findings[found.findings["rule"] == "rasters not used in stratum"]
        assert (note["value"].item(), note["severity"].item()) == ("T", "note")
        strata_sum = stocks[stocks["by"] == "stratum"].groupby(["survey", "pool"])["stock_t_c"].sum()
        inventory = stocks[stocks["by"] == "inventory"].set_index(["survey", "pool"])
        assert strata_sum.to_numpy() == pytest.approx(inventory["stock_t_c"].reindex(strata_sum.index).to_numpy())
        error = (
            stocks[stocks["by"] == "stratum"].groupby(["survey", "pool"])["stock_se"].apply(lambda se: (se**2).sum())
        )
        assert error.to_numpy() == pytest.approx(inventory["stock_se"].reindex(error.index).to_numpy() ** 2)


def test_clearly_better_slopes_of_a_stratum_serve_unasked():
    plots, values, means, strata = two_strata(low=-5.0)
    one, two = (assist(plots, ONE, values, means, strata, by_stratum=own) for own in (False, True))
    assert one.report["used"].all()
    pd.testing.assert_frame_equal(one.plot_parts, two.plot_parts)


def test_strata_of_few_plots_are_judged_together():
    plots, values, means, strata = two_strata(12)
    found = assist(plots, ONE, values, means, strata)
    rows = found.report[(found.report["stratum"] != "") & (found.report["pool"] != "all")]
    assert rows["why"].str.contains("together with other strata").all()
    assert rows["used"].nunique() == 1
    few = plots["plot"].isin([f"p{at:02d}" for at in (0, 1, 2, 6, 7, 8)])
    found = assist(plots[few].reset_index(drop=True), ONE, values, means, strata)
    assert not found.report["used"].any()


def test_parcels_take_their_own_mean():
    """Identity: estimate of a parcel = mean of its residuals + known mean times slope."""
    plots, values, means, strata, parcels = simple()
    found, stocks = simple_stocks(plots, values, means, strata, parcels)
    slope = found.models.set_index(["of", "term"]).loc[("all", "height"), "coefficient"]
    mine = (plots["parcel"] == "A").to_numpy()
    rest = plots["above_ground.trees"].to_numpy()[mine] - slope * values["height"].to_numpy()[mine]
    row = stocks[(stocks["by"] == "parcel") & (stocks["unit"] == "A") & (stocks["pool"] == "all")].iloc[0]
    assert row["density_t_c_ha"] == pytest.approx(rest.mean() + slope * 12.0, rel=1e-12)
    assert row["stock_t_c"] == pytest.approx(25 * row["density_t_c_ha"])
    assert row["method"] == "domain ratio of means, model-assisted by height"
    offset = found.offsets[found.offsets["by"] == "parcel"].set_index("unit")["offset"]
    assert offset.to_dict() == pytest.approx({"A": -3 * slope, "B": -slope, "C": slope, "D": 3 * slope})


# ---------------------------------------------------------------- sums


@pytest.mark.parametrize("by_stratum", [False, True])
def test_pools_add_up_at_every_level(by_stratum):
    _, stocks, change = assisted_estimates(survey_plots(), by_stratum=by_stratum)
    assert stocks["method"].str.contains("model-assisted").any()
    for table, columns, keys in (
        (stocks, ["stock_t_c"], ["by", "unit", "survey"]),
        (change, ["change_t_c", "change_t_c_yr", "co2_t_yr"], ["by", "unit"]),
    ):
        pools = table[table["pool"] != "all"].groupby(keys)[columns].sum()
        whole_rows = table[table["pool"] == "all"].set_index(keys).reindex(pools.index)
        for column in columns:
            assert pools[column].to_numpy() == pytest.approx(whole_rows[column].to_numpy(), rel=1e-9)


def test_strata_add_up_to_the_inventory_and_changes_to_stocks():
    _, stocks, change = assisted_estimates(survey_plots())
    strata = stocks[stocks["by"] == "stratum"].groupby(["survey", "pool"])["stock_t_c"].sum()
    inventory = stocks[stocks["by"] == "inventory"].set_index(["survey", "pool"])["stock_t_c"]
    assert strata.reindex(inventory.index).to_numpy() == pytest.approx(inventory.to_numpy(), rel=1e-9)
    wide = stocks.pivot_table(index=["by", "unit", "pool"], columns="survey", values="stock_t_c")
    apart = change.set_index(["by", "unit", "pool"])["change_t_c"]
    difference = (wide["t2"] - wide["t1"]).reindex(apart.index)
    assert difference.to_numpy() == pytest.approx(apart.to_numpy(), rel=1e-9, abs=1e-9 * wide["t1"].max())


def test_parcels_of_whole_strata_add_up_with_known_means():
    """Identity: offsets of the parcels of a stratum, weighted by area, add up to zero."""
    plots, values, means, strata, parcels = simple()
    found, _ = simple_stocks(plots, values, means, strata, parcels)
    parts = found.offsets[found.offsets["by"] == "parcel"]
    assert (parts["offset"] * 25.0).sum() == pytest.approx(0.0, abs=1e-9)


# ---------------------------------------------------------------- decisions and what they say


def test_columns_and_words(made):
    plots, found, stocks, change = made
    assert list(found.offsets) == OFFSET_COLUMNS
    assert list(found.models) == MODEL_COLUMNS
    assert list(found.report) == REPORT_COLUMNS
    row = whole(stocks, "above_ground", survey="t1")
    assert row["method"].startswith("stratified ratio of means, model-assisted by height (relative efficiency ")
    assert "model-assisted by height" in whole(change)["method"]
    assert found.plot_parts.index.equals(plots.index)
    assert list(found.plot_parts.columns) == list(plots.columns)


def test_pools_that_rasters_do_not_help_stay_plain(made):
    plots, found, stocks, change = made
    strata, parcels = units()
    plain, plain_change = estimates(plots, None, strata, parcels)
    used = found.report.drop_duplicates("pool").set_index("pool")["used"]
    assert used.to_dict() == {"above_ground": True, "dead_wood": True, "soil": False, "all": True}
    for table, other in ((stocks, plain), (change, plain_change)):
        kept = table["pool"] == "soil"
        pd.testing.assert_frame_equal(table[kept], other[kept], check_exact=False, rtol=1e-9)
    finding = found.findings[found.findings["rule"] == "rasters not used"]
    assert finding["column"].tolist() == ["soil"]


def test_report_tells_the_ratio_of_the_variances(made):
    plots, found, stocks, _ = made
    plain, _ = estimates(plots, None, *units())
    for pool in ("above_ground", "all"):
        told = found.report.set_index(["survey", "pool", "stratum"]).loc[("t1", pool, ""), "relative_efficiency"]
        ratio = (whole(plain, pool, survey="t1")["density_se"] / whole(stocks, pool, survey="t1")["density_se"]) ** 2
        assert told == pytest.approx(ratio, rel=1e-9)


def test_a_raster_without_relation_is_not_used():
    given = simple(slope=0.0)
    found, stocks = simple_stocks(*given)
    plain, _ = estimates(given[0], None, given[3], given[4], sums=ONE)
    pd.testing.assert_frame_equal(stocks, plain)
    pd.testing.assert_frame_equal(found.plot_parts, given[0])
    assert found.offsets.empty
    assert not found.report["used"].any()
    assert "below 1.1" in found.report["why"].iloc[0]


def test_a_constant_raster_is_not_used():
    plots, values, means, strata, parcels = simple()
    found, stocks = simple_stocks(plots, values.assign(height=15.0), means.assign(height=15.0), strata, parcels)
    assert found.findings["rule"].tolist().count("raster constant on plots") == 1
    assert not found.report["used"].any()
    assert not stocks["method"].str.contains("assisted").any()


def test_of_collinear_rasters_the_first_stays():
    plots, values, means, strata, parcels = simple()
    _, expected = simple_stocks(plots, values, means, strata, parcels)
    doubled = [table.assign(feet=3.28 * table["height"] + 5) for table in (values, means)]
    found, stocks = simple_stocks(plots, *doubled, strata, parcels)
    assert found.findings[found.findings["rule"] == "raster redundant"]["column"].tolist() == ["feet"]
    pd.testing.assert_frame_equal(stocks, expected)


def test_more_rasters_than_plots_allow():
    plots, values, means, strata, parcels = simple(20)
    rng = np.random.default_rng(0)
    values = values.assign(**{f"band{at}": rng.normal(size=20) for at in range(3)})
    means = means.assign(**{f"band{at}": 0.0 for at in range(3)})
    found, _ = simple_stocks(plots, values, means, strata, parcels)
    told = found.findings[found.findings["rule"] == "too few plots for raster"]["column"].tolist()
    assert told == ["band1", "band2"]  # 19 plots beyond the stratum, eight for each raster
    assert found.report["rasters"].iloc[0] == "height, band0"


@pytest.mark.parametrize("number", [1, 2, 5, 8])
def test_too_few_plots(number):
    given = simple(number)
    found, stocks = simple_stocks(*given)
    plain, _ = estimates(given[0], None, given[3], given[4], sums=ONE)
    pd.testing.assert_frame_equal(stocks, plain)
    assert not found.report["used"].any()


def test_all_plots_equal():
    plots, values, means, strata, parcels = simple()
    plots = plots.assign(**{"above_ground.trees": 40.0})
    found, stocks = simple_stocks(plots, values, means, strata, parcels)
    assert whole(stocks)["density_se"] == 0
    assert "the same value" in found.report["why"].iloc[0]


def test_a_perfect_line():
    """Identity: without noise the estimate is the line at the known mean."""
    given = simple(noise=0.0)
    _, stocks = simple_stocks(*given)
    assert whole(stocks)["density_t_c_ha"] == pytest.approx(20 + 5 * 15.0)
    assert whole(stocks)["density_se"] == pytest.approx(0.0, abs=1e-9)


def test_plots_without_raster_value_stay_in_the_sample():
    """Identity: the mean of the stratum stands in, so the value of such a plot is not adjusted."""
    plots, values, means, strata, parcels = simple()
    holes = values.assign(height=values["height"].where(np.arange(30) % 10 != 0))
    found, stocks = simple_stocks(plots, holes, means, strata, parcels)
    row = whole(stocks)
    assert row["plots"] == 30
    blank = np.arange(30) % 10 == 0
    after, before = (table["above_ground.trees"].to_numpy() for table in (found.plot_parts, plots))
    assert after[blank] == pytest.approx(before[blank])
    assert found.findings[found.findings["rule"] == "plot without raster value"]["value"].tolist() == ["3"]


def test_a_plot_that_is_not_listed_has_no_value():
    plots, values, means, strata, parcels = simple()
    found, _ = simple_stocks(plots, values[3:], means, strata, parcels)
    assert found.findings[found.findings["rule"] == "plot without raster value"]["value"].tolist() == ["3"]


def test_raster_missing_over_half_the_parcels():
    plots, values, means, strata, parcels = simple()
    gone = plots["parcel"].isin(["A", "B"]).to_numpy()
    values = values.assign(height=values["height"].mask(gone))
    lost = means["unit"].isin(["A", "B"])
    means = means.assign(height=means["height"].mask(lost), share_covered=np.where(lost, 0.0, 1.0))
    means.loc[0, ["height", "share_covered"]] = [17.0, 0.5]
    found, stocks = simple_stocks(plots, values, means, strata, parcels)
    plain, _ = estimates(plots, None, strata, parcels, sums=ONE)
    pd.testing.assert_frame_equal(stocks, plain)
    assert "raster with gaps" in set(found.findings["rule"])


def test_a_parcel_that_the_raster_misses():
    """Identity: as the mean of the stratum stands in on map and plots, the parcel keeps its plain figure."""
    plots, values, means, strata, parcels = simple()
    values = values.assign(height=values["height"].mask((plots["parcel"] == "A").to_numpy()))
    lost = means["unit"] == "A"
    means = means.assign(height=means["height"].mask(lost), share_covered=np.where(lost, 0.0, 1.0))
    means.loc[0, ["height", "share_covered"]] = [16.0, 0.75]
    _, stocks = simple_stocks(plots, values, means, strata, parcels)
    plain, _ = estimates(plots, None, strata, parcels, sums=ONE)
    mine = (stocks["by"] == "parcel") & (stocks["unit"] == "A")
    assert stocks[mine]["density_t_c_ha"].to_numpy() == pytest.approx(plain[mine]["density_t_c_ha"].to_numpy())
    assert whole(stocks)["density_se"] < whole(plain)["density_se"]


def test_partly_covered_parcel():
    plots, values, means, strata, parcels = simple()
    means = means.assign(share_covered=np.where(means["unit"] == "D", 0.5, 1.0))
    found, _ = simple_stocks(plots, values, means, strata, parcels)
    slope = found.models.set_index(["of", "term"]).loc[("all", "height"), "coefficient"]
    offset = found.offsets[found.offsets["unit"] == "D"]["offset"].item()
    assert offset == pytest.approx(0.5 * 3.0 * slope)


def test_a_parcel_of_several_strata_without_areas_is_reported():
    """How the parcel is made up of its strata is not known: no offset, which is said, instead of one of zero."""
    plots, values, means, _, _ = simple(number=40)
    plots = plots.assign(stratum=np.where(np.arange(40) % 8 < 4, "S", "T"))
    strata = pd.DataFrame({"stratum": ["S", "T"], "area_ha": [50.0, 50.0]})
    means = pd.concat([means[:1], means[:1].assign(unit="T"), means[1:], means[4:]], ignore_index=True)
    means = means.assign(stratum=["", "", "S", "T", "S", "S", "T"])
    for areas, lacking in (([25.0] * 7, []), ([*[25.0] * 6, np.nan], ["D"])):
        found = assist(plots, ONE, values, means.assign(area_ha=areas), strata)
        named = found.offsets[found.offsets["by"] == "parcel"]["unit"].tolist()
        assert named == [unit for unit in "ABCD" if unit not in lacking]
        told = found.findings[found.findings["rule"] == "parcel without raster mean"]["value"].tolist()
        assert told == lacking


def test_a_survey_without_raster_takes_that_of_the_other():
    plots = survey_plots()
    strata, parcels = units()
    values, means = rasters()
    late = means.assign(height=means["height"].where(means["survey"] == "t2"))
    found = assist(plots, SUMS, values, late, strata)
    lent = found.findings[found.findings["rule"] == "raster of another survey"]
    assert (lent["survey"].item(), lent["value"].item()) == ("t1", "t2")
    same = assist(plots, SUMS, values, means, strata)  # the heights of both surveys are the same here
    pd.testing.assert_frame_equal(found.plot_parts, same.plot_parts)
    stocks, _ = estimates(plots, found, strata, parcels)
    assert whole(stocks, "above_ground", survey="t1")["method"].count("model-assisted") == 1


def test_a_stratum_without_mean_stays_plain(made):
    plots = survey_plots()
    strata, parcels = units()
    values, means = rasters()
    means = means[~((means["by"] == "stratum") & (means["unit"] == "S1"))]
    found = assist(plots, SUMS, values, means, strata)
    stocks, _ = estimates(plots, found, strata, parcels)
    plain, _ = estimates(plots, None, strata, parcels)
    rows = (stocks["by"] == "stratum") & (stocks["unit"] == "S1")
    pd.testing.assert_frame_equal(stocks[rows], plain[rows])
    assert "raster without mean" in set(found.findings["rule"])
    assert whole(stocks, survey="t1")["density_se"] < whole(plain, survey="t1")["density_se"]


def test_a_stratum_without_plots_or_with_one():
    plots = survey_plots()
    plots = plots[~((plots["stratum"] == "S4") & (plots["plot"] != "p56"))].reset_index(drop=True)
    strata, parcels = units()
    found = assist(plots, SUMS, *rasters(), strata)
    stocks, change = estimates(plots, found, strata, parcels)
    assert whole(stocks, "above_ground", survey="t1")["area_ha"] == pytest.approx(2000 - 71.25)
    parts = stocks[(stocks["by"] == "stratum") & (stocks["survey"] == "t1") & (stocks["pool"] == "above_ground")]
    total = parts["stock_t_c"].sum()
    assert whole(stocks, "above_ground", survey="t1")["stock_t_c"] == pytest.approx(total, rel=1e-9)
    assert np.isfinite(whole(change, "above_ground")["change_t_c"])


def test_areas_unknown():
    plots, found = survey_plots(), None
    strata, _ = units()
    strata = strata.assign(area_ha=np.nan)
    found = assist(plots, SUMS, *rasters(), strata)
    stocks, _ = estimates(plots, found, strata, None)
    assert found.report["used"].any()
    rows = stocks[(stocks["by"] == "stratum") & (stocks["pool"] == "above_ground")]
    assert rows["method"].str.contains("model-assisted").all()


def test_no_raster_at_all():
    plots = survey_plots()
    strata, _ = units()
    values, means = rasters()
    found = assist(plots, SUMS, values.drop(columns="height"), means.drop(columns="height"), strata)
    pd.testing.assert_frame_equal(found.plot_parts, plots)
    assert found.offsets.empty


def test_parcel_of_no_area_and_parcel_without_plots():
    plots, values, means, strata, parcels = simple()
    parcels = pd.concat([parcels, pd.DataFrame({"parcel": ["E", "F"], "area_ha": [0.0, 5.0], "stratum": "S"})])
    means = pd.concat([means, means[-1:].assign(unit="E", height=np.nan, share_covered=0.0)])
    _, stocks = simple_stocks(plots, values, means, strata, parcels)
    rows = stocks[(stocks["by"] == "parcel") & stocks["unit"].isin(["E", "F"])]
    assert rows["density_t_c_ha"].isna().all()
    assert not rows["method"].str.contains("assisted").any()


def test_parcels_without_mean_are_plain():
    plots, values, means, strata, parcels = simple()
    found = assist(plots, ONE, values, means[:1], strata, parcels=parcels)
    told = found.findings[found.findings["rule"] == "parcel without raster mean"]
    assert told["value"].item() == "A, B, C, D"
    plain = estimates(plots, None, strata, parcels, sums=ONE)
    stocks, _ = estimates(plots, found, strata, parcels, sums=ONE, plain=plain)
    mine = stocks["by"] == "parcel"
    pd.testing.assert_frame_equal(stocks[mine], plain[0][mine])
    assert "model-assisted" in whole(stocks)["method"]


def test_tables_with_a_row_per_raster_give_the_same():
    plots, values, means, strata, parcels = simple()
    long_values = values.melt(["survey", "plot"], var_name="raster", value_name="value")
    long_means = means.rename(columns={"height": "mean", "share_covered": "covered"}).assign(raster="height")
    one, _ = simple_stocks(plots, values, means, strata, parcels)
    two, _ = simple_stocks(plots, long_values, long_means, strata, parcels)
    pd.testing.assert_frame_equal(one.offsets, two.offsets)
    pd.testing.assert_frame_equal(one.plot_parts, two.plot_parts)


def test_tables_with_faults_are_refused():
    plots, values, means, strata, _ = simple()
    with pytest.raises(UserError, match=r"raster values of plots.*plot 'p00'.*occurs twice"):
        assist(plots, ONE, pd.concat([values, values[:1]]), means, strata)
    with pytest.raises(UserError, match="raster means of units: no column unit"):
        assist(plots, ONE, values, means.drop(columns="unit"), strata)


# ---------------------------------------------------------------- post-strata and two phases


def test_classes_give_the_post_stratified_mean():
    """Independent of the engine: ``post_stratified_mean``."""
    plots, values, means, strata, _ = simple(40, noise=3.0)
    label = np.where(values["height"] > 15, "tall", np.where(values["height"] > 12, "middle", "low"))
    classes = plots[["survey", "plot"]].assign(**{"class": label})
    area = {"low": 20.0, "middle": 30.0, "tall": 50.0}
    areas = pd.DataFrame(
        {"survey": "1", "by": "stratum", "unit": "S", "class": list(area), "area_ha": list(area.values())}
    )
    nothing = [table.drop(columns="height") for table in (values, means)]
    found = assist(plots, ONE, *nothing, strata, post_stratum=(classes, areas))
    stocks, _ = estimates(plots, found, strata, None, sums=ONE)
    code = pd.Categorical(label, categories=list(area)).codes.astype(int)
    expected = post_stratified_mean(plots["above_ground.trees"].to_numpy(), code, np.array(list(area.values())))
    row = whole(stocks)
    assert row["density_t_c_ha"] == pytest.approx(expected.mean[0], rel=1e-9)
    # the forms differ a little; the program's is that of the regression estimator
    assert row["density_se"] ** 2 == pytest.approx(expected.variance[0], rel=0.15)
    assert "model-assisted by class=middle, class=tall" in row["method"]


def test_means_from_a_first_phase_of_points():
    """Independent of the engine: ``two_phase_regression``, with the variance before the raise for the slope."""
    plots, values, means, strata, _ = simple()
    first = np.append(values["height"], np.random.default_rng(8).normal(15, 4, 170))
    means = means[:1].assign(height=first.mean(), points=float(len(first)))
    found = assist(plots, ONE, values, means, strata)
    stocks, _ = estimates(plots, found, strata, None, sums=ONE)
    y = plots["above_ground.trees"].to_numpy()
    expected = two_phase_regression(y, values["height"].to_numpy(), first, lost=1)
    row = whole(stocks)
    added = found.phases.set_index(["by", "pool"]).loc[("inventory", "all"), "variance"]
    factor = slope_price(29, 1)[0]
    assert row["density_t_c_ha"] == pytest.approx(expected.mean, rel=1e-9)
    assert (row["density_se"] ** 2 - added) / factor + added == pytest.approx(expected.variance, rel=1e-9)
    wall_to_wall = assist(plots, ONE, values, means.drop(columns="points"), strata)
    assert wall_to_wall.phases.empty
    assert found.report["relative_efficiency"].iloc[0] < wall_to_wall.report["relative_efficiency"].iloc[0]


def test_what_slopes_cost():
    """Cochran (1977) section 7.6, recalled: with one normal variable V = s_e^2 / n (1 + 1 / (n - 3))."""
    factor, share = slope_loss(9, 1)  # ten plots of one stratum
    assert factor == pytest.approx(9 / 8 * (1 + 1 / (10 - 3)))
    assert share == pytest.approx(8 / 9)
    assert slope_price(9, 1)[0] == pytest.approx(factor * (1 + 1 / 9))  # chosen by the plots at hand: a working rule
