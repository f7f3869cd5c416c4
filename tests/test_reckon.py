"""Everything that is reckoned for the demo holds together: identities on invented data, no evidence of any rate."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from landcarbon.assemble import assemble, run_stage
from landcarbon.estimate.report import with_interval
from landcarbon.inventory import load_settings
from landcarbon.reckon_notes import many_replaced, reckoning_marks

DEMO = Path(__file__).resolve().parent.parent / "demo_parcels"


@pytest.fixture(scope="module")
def results():
    settings = load_settings(DEMO / "inventory.toml")
    return assemble(run_stage(settings), settings)


def summed(table: pd.DataFrame, by: str, keys: list[str], value: str) -> pd.Series:
    return table[table["by"] == by].groupby(keys)[value].sum(min_count=1)


@pytest.mark.parametrize(
    ("which", "keys", "value"),
    [
        ("stocks", ["survey", "pool"], "stock_t_c"),
        ("change", ["since", "until", "pool"], "change_t_c"),
    ],
)
def test_parcels_and_strata_sum_to_the_inventory(results, which, keys, value):
    table = getattr(results, which)
    whole = table[table["by"] == "inventory"].set_index(keys)[value].dropna()
    for by in ("stratum", "parcel"):
        added = summed(table, by, keys, value).reindex(whole.index)
        assert np.allclose(added, whole, rtol=1e-9, atol=1e-9 * whole.abs().max()), by


@pytest.mark.parametrize(
    ("which", "keys", "value"),
    [
        ("stocks", ["by", "unit", "survey"], "stock_t_c"),
        ("change", ["by", "unit", "since", "until"], "change_t_c"),
    ],
)
def test_all_is_the_sum_of_the_pools_everywhere(results, which, keys, value):
    table = getattr(results, which)
    added = table[table["pool"] != "all"].groupby(keys)[value].sum(min_count=1)
    whole = table[table["pool"] == "all"].set_index(keys)[value].dropna()
    assert np.allclose(added.reindex(whole.index), whole, rtol=1e-9, atol=1e-9 * whole.abs().max())


def test_trend_sums_and_names_the_rasters(results):
    trend = results.further["trend"]
    assert set(trend["by"]) == {"inventory", "stratum"}  # parcels have composite change, not a line of their own plots
    whole = trend[trend["by"] == "inventory"].set_index("pool")["slope_t_c_yr"].dropna()
    assert np.allclose(summed(trend, "stratum", ["pool"], "slope_t_c_yr").reindex(whole.index), whole, rtol=1e-9)
    assert whole["all"] == pytest.approx(whole.drop("all").sum(), rel=1e-9)
    named = trend[trend["method"].str.contains("model-assisted by rasters")]
    assert set(named["unit"]) >= {"Aldrunthal", "beech"}
    assert (named["slope_low"] < named["slope_t_c_yr"]).all()
    # A line through all surveys lies among the changes between them.
    change = results.change.query("by == 'inventory' and pool == 'above_ground'")
    rates = change["change_t_c_yr"]
    assert rates.min() <= whole["above_ground"] <= rates.max()


def test_own_plots_of_a_composite_figure_can_be_worked_out_again(results):
    """Identity: mean of the adjusted plots plus what the rasters add is the own part of the figure."""
    detail = results.further["parcel_detail"]
    detail = detail[(detail["of"] == "stocks") & (detail["pool"] == "above_ground") & (detail["plots"] > 1)]
    plots = results.plots
    plots = plots[(plots["pool"] == "above_ground") & (plots["part"] == "") & plots["inside"]]
    weighed = plots.assign(value=plots["adjusted_t_c_ha"] * plots["size"])
    sums = weighed.groupby(["survey", "parcel"])[["value", "size"]].sum()
    mean = sums["value"] / sums["size"]
    keys = pd.MultiIndex.from_frame(detail[["survey", "parcel"]].astype("str"))
    assert np.allclose(mean.reindex(keys) + detail["raster_shift"].to_numpy(), detail["direct"], rtol=1e-9)
    assert (detail["raster_shift"] != 0).any()


def test_intervals_of_the_kind_asked_for(results):
    stocks = with_interval(results.stocks, confidence=0.95, kind="log", lower=0.9)
    known = stocks[stocks["stock_se"].gt(0)]
    logs = known[known["method"].str.endswith("log interval")]
    assert len(logs) > 100
    assert (logs["stock_low"] > 0).all()
    assert (logs["stock_high"] - logs["stock_t_c"] > logs["stock_t_c"] - logs["stock_low"]).all()
    assert (known["stock_at_least"] < known["stock_t_c"]).all()
    assert (known["stock_at_least"] > known["stock_low"]).all()  # 90 % on one side against 97.5 %
    change = with_interval(results.change, confidence=0.95, kind="t", lower=0.975)
    sure = change[change["change_se"].gt(0)]
    assert np.allclose(sure["change_at_least"], sure["change_low"], rtol=1e-6, atol=1e-6)


def test_a_hint_where_plots_were_replaced():
    row = {"by": "inventory", "pool": "all", "plots_paired": 30, "plots_since": 38, "plots_until": 40}
    found = many_replaced(pd.DataFrame([row]), "a", "b")
    assert "30 plots were repeated, 8 given up and 10 new" in found["message"].iloc[0]
    assert many_replaced(pd.DataFrame([{**row, "plots_since": 31}]), "a", "b").empty


def test_marks_say_what_figures_refer_to():
    told = reckoning_marks({"2014": pd.Timestamp("2014-07-01")}, moving=True, composite=True)
    assert "2014: 2014-07-01" in told[0]
    assert "boundaries of its day" in told[1]
    assert "parcel_detail.csv" in told[2]
    assert reckoning_marks({}, moving=False, composite=False) == []
