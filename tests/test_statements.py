"""Stocks and change where some parts were measured at some surveys only."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from landcarbon.estimate.stocks import estimate_stocks
from landcarbon.statements import state_change, state_stocks

SUMS = {
    "above_ground": ["above_ground.trees", "above_ground.ground_vegetation"],
    "soil": ["soil.soil"],
    "all": ["above_ground.trees", "above_ground.ground_vegetation", "soil.soil"],
}
STRATA = pd.DataFrame({"stratum": ["s"], "area_ha": [100.0], "area_source": ["stated"]})
OPTIONS = {"strata": STRATA, "parcels": None, "confidence": 0.95, "inventory_name": "w"}


def table(missing=()):
    """Invented figures of six plots at three surveys; ``missing`` lists survey and column without measurements."""
    rng = np.random.default_rng(2)
    rows = [
        {"survey": survey, "plot": plot, "parcel": "", "stratum": "s", "inside": True, "size": 1.0,
         "date": pd.Timestamp(f"{survey}-06-01"), "above_ground.trees": 80 + rng.normal(0, 9) + year,
         "above_ground.ground_vegetation": 0.5 + rng.random(), "soil.soil": 60 + rng.normal(0, 5)}
        for year, survey in enumerate(["2010", "2015", "2020"]) for plot in "abcdef"
    ]  # fmt: skip
    frame = pd.DataFrame(rows)
    for survey, column in missing:
        frame.loc[frame["survey"] == survey, column] = np.nan
    return frame


def figure(stocks, survey, pool, name="density_t_c_ha", by="inventory"):
    row = stocks[(stocks["by"] == by) & (stocks["survey"] == survey) & (stocks["pool"] == pool)]
    return row[name].iloc[0]


def test_nothing_missing_is_what_the_estimator_gives():
    surveys = ["2010", "2015", "2020"]
    stocks, _ = state_stocks(table(), SUMS, surveys, **OPTIONS)
    expected, _ = estimate_stocks(table(), surveys=surveys, pools=["above_ground", "soil"], sums=SUMS, **OPTIONS)
    pd.testing.assert_frame_equal(stocks, expected)


def test_a_small_part_that_is_missing_does_not_take_the_pool_with_it():
    gap = [("2015", "above_ground.ground_vegetation")]
    stocks, _ = state_stocks(table(gap), SUMS, ["2010", "2015", "2020"], **OPTIONS)
    whole, _ = state_stocks(table(), SUMS, ["2010", "2015", "2020"], **OPTIONS)
    trees = table().query("survey == '2015'")["above_ground.trees"].mean()
    assert figure(stocks, "2015", "above_ground") == pytest.approx(trees)
    told = "without above_ground.ground_vegetation: not measured, or no usable rows"
    assert told in figure(stocks, "2015", "above_ground", "method")
    assert told in figure(stocks, "2015", "all", "method")
    assert figure(stocks, "2010", "above_ground") == pytest.approx(figure(whole, "2010", "above_ground"))
    assert list(stocks["survey"].unique()) == ["2010", "2015", "2020"]


def test_sums_hold_whatever_is_missing():
    gap = [("2015", "above_ground.ground_vegetation"), ("2020", "soil.soil")]
    stocks, _ = state_stocks(table(gap), SUMS, ["2010", "2015", "2020"], **OPTIONS)
    pools = stocks[stocks["pool"] != "all"].groupby(["by", "unit", "survey"])["stock_t_c"].sum()
    whole = stocks[stocks["pool"] == "all"].set_index(["by", "unit", "survey"])["stock_t_c"]
    pd.testing.assert_series_equal(pools.sort_index(), whole.sort_index(), check_names=False)


def test_change_covers_the_parts_measured_at_both():
    gap = [("2015", "above_ground.ground_vegetation")]
    change, findings = state_change(table(gap), SUMS, "2010", "2015", **OPTIONS)
    row = change[(change["by"] == "inventory") & (change["pool"] == "above_ground")].iloc[0]
    trees = table().groupby("survey")["above_ground.trees"].mean()
    assert row["change_t_c"] == pytest.approx((trees["2015"] - trees["2010"]) * 100)
    assert "not measured at both surveys" in row["method"]
    assert "part measured at one survey" in set(findings["rule"])


def test_pool_measured_once_has_a_stock_and_no_change():
    gap = [("2010", "soil.soil"), ("2020", "soil.soil")]
    stocks, _ = state_stocks(table(gap), SUMS, ["2010", "2015", "2020"], **OPTIONS)
    change, _ = state_change(table(gap), SUMS, "2010", "2015", **OPTIONS)
    assert figure(stocks, "2015", "soil") > 0
    soil = change[(change["by"] == "inventory") & (change["pool"] == "soil")].iloc[0]
    assert np.isnan(soil["change_t_c"])
    assert "2015" in soil["method"]


def test_survey_without_plots_has_no_change():
    change, findings = state_change(table(), SUMS, "2010", "2030", **OPTIONS)
    assert change.empty
    assert findings["rule"].tolist() == ["survey without plots"]


def test_default_factor_has_a_figure_and_no_error():
    """A flat factor does not vary between plots: stating a standard error of zero would be untrue."""
    sums = {"above_ground": ["above_ground.trees"], "litter": ["litter.default"]}
    sums["all"] = [*sums["above_ground"], *sums["litter"]]
    frame = table().assign(**{"litter.default": 22.0}).drop(columns=["above_ground.ground_vegetation", "soil.soil"])
    stocks, findings = state_stocks(frame, sums, ["2010", "2015", "2020"], **OPTIONS)
    assert figure(stocks, "2015", "litter") == 22.0
    assert np.isnan(figure(stocks, "2015", "litter", "density_se"))
    assert "default factor" in figure(stocks, "2015", "litter", "method")
    assert figure(stocks, "2015", "all") == pytest.approx(figure(stocks, "2015", "above_ground") + 22.0)
    assert "zero variance" not in set(findings["rule"])
    change, _ = state_change(frame, sums, "2010", "2015", **OPTIONS)
    row = change[(change["by"] == "inventory") & (change["pool"] == "litter")].iloc[0]
    assert row["change_t_c"] == 0.0
    assert np.isnan(row["change_se"])
