"""Poor input ends well: a figure, or none with the reason, never a traceback and never a wrong number."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, POOL, parcel_table, pick, plot_table, strata_table, whole

from landcarbon.change import estimate_change
from landcarbon.estimate.domains import estimate_domains
from landcarbon.estimate.stocks import estimate_stocks

WAYS = [
    {"variance": variance, "sums": sums} for variance in ("random", "neighbours") for sums in (None, {POOL: [POOL]})
]


def both(table: pd.DataFrame, areas: dict[str, float], parcels: dict[str, float], way: dict[str, object]):
    """Stocks of the first survey and change between two; the later survey holds ten more everywhere."""
    options = {"pools": [POOL], "confidence": 0.95, "inventory_name": NAME, **way}
    later = table.assign(survey="t2", date=pd.Timestamp("2024-07-01"), **{n: table[n] + 10.0 for n in (POOL, "all")})
    twice = pd.concat([table.assign(survey="t1"), later])
    tables = strata_table(areas), parcel_table(parcels) if parcels else None
    with np.errstate(all="raise", under="ignore"):
        stocks = estimate_stocks(twice, *tables, ["t1"], **options)
        change = estimate_change(twice, *tables, since="t1", until="t2", **options)
    return stocks, change


def place(count: int) -> dict[str, np.ndarray]:
    return {"x": 100.0 * (np.arange(count) % 4), "y": 100.0 * (np.arange(count) // 4)}


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("cluster", [None, "", "k"])
def test_one_plot_in_all(way: dict[str, object], cluster: str | None) -> None:
    table = plot_table([50.0], parcel="p", **place(1), **({} if cluster is None else {"cluster": cluster}))
    (stocks, findings), (change, _) = both(table, {"S": 10.0}, {"p": 10.0}, way)
    assert stocks[["density_t_c_ha", "density_se", "stock_t_c"]].isna().all(axis=None)
    assert stocks["method"].str.startswith("not estimable: ").all()
    assert pick(stocks, "stratum").loc["S", "method"] == "not estimable: 1 plot(s)"
    assert change[["change_t_c", "change_se"]].isna().all(axis=None)
    assert change["method"].str.startswith("not estimable: ").all()
    assert "stratum not estimable" in set(findings["rule"])


@pytest.mark.parametrize("way", WAYS)
@pytest.mark.parametrize("clustered", [False, True])
def test_all_plots_equal(way: dict[str, object], clustered: bool) -> None:
    more = {"cluster": (np.arange(16) // 2).astype(str)} if clustered else {}
    table = plot_table(
        [50.0] * 16, parcel=["p", "p", "q", "q"] * 4, size=np.linspace(0.3, 1.0, 16), **place(16), **more
    )
    (stocks, findings), (change, _) = both(table, {"S": 10.0}, {"p": 5.0, "q": 5.0}, way)
    np.testing.assert_allclose(stocks["density_t_c_ha"], 50.0, rtol=1e-12)
    np.testing.assert_allclose(stocks["density_se"], 0.0, atol=1e-12)
    np.testing.assert_allclose(change["change_t_c"] / change["area_ha"], 10.0, rtol=1e-12)
    np.testing.assert_allclose(change["change_se"], 0.0, atol=1e-9)
    assert "zero variance" in set(findings["rule"])


@pytest.mark.parametrize("way", WAYS)
def test_stratum_without_plots(way: dict[str, object]) -> None:
    table = plot_table(np.linspace(10.0, 90.0, 9), stratum="a", **place(9))
    (stocks, findings), (change, _) = both(table, {"a": 10.0, "b": 7.0}, {}, way)
    assert whole(stocks)["area_ha"] == 10.0
    assert whole(change)["area_ha"] == 10.0
    assert pick(stocks, "stratum").loc["b", "method"] == "not estimable: 0 plot(s)"
    assert findings.set_index("rule").loc["stratum not estimable", "value"] == "b"


@pytest.mark.parametrize("way", WAYS)
def test_parcel_of_zero_area(way: dict[str, object]) -> None:
    table = plot_table(np.linspace(10.0, 90.0, 12), parcel=["p", "q"] * 6, **place(12))
    (stocks, _), (change, _) = both(table, {"S": 10.0}, {"p": 0.0, "q": 10.0}, way)
    row = pick(stocks, "parcel").loc["p"]
    assert (row["stock_t_c"], row["stock_se"]) == (0.0, 0.0)
    assert row["density_se"] > 0
    assert pick(change, "parcel").loc["p", "change_t_c"] == 0.0


@pytest.mark.parametrize("way", WAYS)
def test_stratum_of_zero_area(way: dict[str, object]) -> None:
    table = plot_table(np.linspace(10.0, 90.0, 12), stratum=["a", "b"] * 6, **place(12))
    (stocks, _), _ = both(table, {"a": 0.0, "b": 10.0}, {}, way)
    rows = pick(stocks, "stratum")
    assert rows.loc["a", "stock_t_c"] == 0.0
    assert whole(stocks)["stock_t_c"] == pytest.approx(rows.loc["b", "stock_t_c"], rel=1e-12)


@pytest.mark.parametrize("way", WAYS)
def test_all_plots_in_one_parcel(way: dict[str, object]) -> None:
    """The parcel is then the stratum, and the other one has nothing."""
    table = plot_table(np.linspace(10.0, 90.0, 12), parcel="p", **place(12))
    (stocks, _), _ = both(table, {"S": 10.0}, {"p": 4.0, "q": 6.0}, {**way, "variance": "random"})
    rows = pick(stocks, "parcel")
    assert rows.loc["p", "density_se"] == pytest.approx(whole(stocks)["density_se"], rel=1e-12)
    assert rows.loc["q", "method"] == "not estimable: 0 plot(s)"


@pytest.mark.parametrize("way", WAYS)
def test_all_plots_at_one_place(way: dict[str, object]) -> None:
    table = plot_table(np.linspace(10.0, 90.0, 20), x=5.0, y=5.0)
    (stocks, _), (change, _) = both(table, {"S": 10.0}, {}, way)
    assert np.isfinite(whole(stocks)["density_se"])
    assert np.isfinite(whole(change)["change_se"])


def test_domains_of_one_plot() -> None:
    table = plot_table([50.0], owner="me")
    options = {"surveys": ["2014"], "pools": [POOL], "confidence": 0.95}
    with np.errstate(all="raise", under="ignore"):
        rows = estimate_domains(table, strata_table({"S": 10.0}), "owner", **options)
    assert rows["stock_t_c"].isna().all()
    none = estimate_domains(table.assign(owner=""), strata_table({"S": 10.0}), "owner", **options)
    assert len(none) == 0
