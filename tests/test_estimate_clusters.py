"""Clusters and unequal weights: worked examples, results of statistics packages, and live comparison with svy."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import polars
import pytest
import svy
from estimate_frames import POOL, cases, change, parcel_table, pick, plot_table, stocks, strata_table, survey_a, whole

from landcarbon.errors import UserError
from landcarbon.estimate.difference import difference_of_ratios
from landcarbon.estimate.tables import read_plots

COMPUTED, PUBLISHED = cases("computed"), cases("published")
EXACT = 1e-9
AREAS = {"a": 300.0, "b": 120.0, "c": 40.0}


def clustered(seed: int, count: int = 240, missing: float = 0.0) -> pd.DataFrame:
    """Three strata, clusters of one to five plots that parcels cut, unequal weights and sizes."""
    rng = np.random.default_rng(seed)
    cluster = np.repeat(np.arange(count), rng.integers(1, 6, count))[:count]
    stratum = np.array(list(AREAS))[cluster % 3]
    level = rng.normal(0.0, 25.0, count)[cluster]
    table = plot_table(
        80.0 + level + rng.normal(0.0, 10.0, count),
        stratum=stratum,
        cluster=[f"k{number}" for number in cluster],
        parcel=rng.choice(["p", "q", "r", ""], count),
        size=rng.uniform(0.3, 1.0, count),
        weight=rng.uniform(0.5, 3.0, count),
    )
    table.loc[rng.random(count) < missing, [POOL, "all"]] = np.nan
    return table


def by_svy(table: pd.DataFrame, domain: str, *, psu: bool = True) -> pd.DataFrame:
    """Means of domains by svy; weights are area / sum of size in the stratum, times size and weight."""
    table = table[table[POOL].notna()]
    size = table["size"] * table.get("weight", 1.0)
    share = table["stratum"].map(AREAS) / size.groupby(table["stratum"]).transform("sum")
    columns: dict[str, list[Any]] = {
        "stratum": table["stratum"].tolist(),
        "unit": (table["stratum"] + table["cluster"]).tolist(),
        "domain": table[domain].replace("", "none").tolist(),
        "weight": (size * share).astype(float).tolist(),
        "y": table[POOL].astype(float).tolist(),
    }
    design = svy.Design(stratum="stratum", psu="unit" if psu else None, wgt="weight", wr=True)
    rows = svy.Sample(polars.DataFrame(columns), design).estimation.mean("y", by="domain").to_dicts()
    return pd.DataFrame(
        {name: [row[name] for row in rows] for name in ("est", "se")}, index=[row["by_level"][0] for row in rows]
    )


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_parcels_that_cut_clusters_agree_with_svy(seed: int) -> None:
    """Clusters alike in size: no ratio within the stratum, so svy's weights are ours."""
    rng = np.random.default_rng(seed)
    cluster = np.repeat(np.arange(60), 4)
    value = 80.0 + rng.normal(0.0, 25.0, 60)[cluster] + rng.normal(0.0, 10.0, 240)
    stratum, parcel = np.array(list(AREAS))[cluster % 3], rng.choice(["p", "q", "r", ""], 240)
    table = plot_table(value, stratum=stratum, cluster=cluster.astype(str), parcel=parcel)
    parcels = parcel_table({"p": 100.0, "q": 110.0, "r": 120.0})
    rows = pick(stocks(table, strata_table(AREAS), parcels)[0], "parcel")
    expected = by_svy(table, "parcel").loc[rows.index]
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["est"], rtol=EXACT)
    np.testing.assert_allclose(rows["density_se"], expected["se"], rtol=EXACT)
    ignoring = by_svy(table, "parcel", psu=False).loc[rows.index]
    assert (np.abs(rows["density_se"] / ignoring["se"] - 1.0) > 0.01).any()


@pytest.mark.parametrize("seed", [1, 2, 3])
@pytest.mark.parametrize("missing", [0.0, 0.3])
def test_parcels_that_cut_unequal_clusters_agree_with_svy(seed: int, missing: float) -> None:
    """The means are svy's; the error is that of svy's total of the deviations, as strata have their own ratio."""
    table = clustered(seed, missing=missing)
    rows = pick(stocks(table, strata_table(AREAS), parcel_table({"p": 100.0, "q": 110.0, "r": 120.0}))[0], "parcel")
    expected = by_svy(table, "parcel").loc[rows.index]
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["est"], rtol=EXACT)
    there = table[table[POOL].notna()]
    size = there["size"] * there["weight"]
    expansion = there["stratum"].map(AREAS) / size.groupby(there["stratum"]).transform("sum")
    for parcel in rows.index:
        inside = there["parcel"] == parcel
        z = size * inside * (there[POOL] - rows.loc[parcel, "density_t_c_ha"])
        ratio = (z.groupby(there["stratum"]).sum() / size.groupby(there["stratum"]).sum()).loc[there["stratum"]]
        deviation = expansion * (z - size * ratio.to_numpy()) / (expansion * size * inside).sum()
        assert rows.loc[parcel, "density_se"] == pytest.approx(total_error(there, deviation), rel=EXACT)


def total_error(table: pd.DataFrame, values: pd.Series) -> float:
    """Standard error of a plain total by svy, clusters as units."""
    columns: dict[str, list[Any]] = {
        "stratum": table["stratum"].tolist(),
        "unit": (table["stratum"] + table["cluster"]).tolist(),
        "one": [1.0] * len(table),
        "y": values.astype(float).tolist(),
    }
    design = svy.Design(stratum="stratum", psu="unit", wgt="one", wr=True)
    return float(svy.Sample(polars.DataFrame(columns), design).estimation.total("y").to_dicts()[0]["se"])


@pytest.mark.parametrize("parts", [False, True])
def test_strata_with_clusters_and_weights_agree_with_svy(parts: bool) -> None:
    """The same figures whether the pool is a column or a sum of one part."""
    table = clustered(5, missing=0.2)
    sums = {POOL: [POOL]} if parts else None
    rows = pick(stocks(table, strata_table(AREAS), sums=sums)[0], "stratum", POOL)
    expected = by_svy(table, "stratum").loc[rows.index]
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["est"], rtol=EXACT)
    np.testing.assert_allclose(rows["density_se"], expected["se"], rtol=EXACT)
    there = table[table[POOL].notna()]
    assert list(rows["df"]) == list(there.groupby("stratum")["cluster"].nunique() - 1)
    assert list(rows["plots"]) == list(there.groupby("stratum").size())


def test_parts_on_different_plots_of_clusters_agree_with_columns() -> None:
    """Parcels cut clusters, and parts lack on some plots: each part alone must be as the column of its own."""
    rng = np.random.default_rng(11)
    table = clustered(11, missing=0.3).assign(soil=lambda frame: rng.normal(60, 9, len(frame)))
    parcels = parcel_table({"p": 100.0, "q": 110.0, "r": 120.0})
    table["all"] = table[POOL] + table["soil"]
    sums = {POOL: [POOL], "soil": ["soil"]}
    apart = stocks(table, strata_table(AREAS), parcels, pools=[POOL, "soil"], sums=sums)[0]
    columns = stocks(table, strata_table(AREAS), parcels, pools=[POOL, "soil"])[0]
    for by in ("inventory", "stratum", "parcel"):
        for pool in (POOL, "soil"):
            one, two = pick(apart, by, pool), pick(columns, by, pool)
            np.testing.assert_allclose(one["density_se"], two["density_se"], rtol=EXACT)
            np.testing.assert_allclose(one["df"], two["df"], rtol=1e-6)
    together = table.dropna(subset=[POOL])
    one = stocks(together, strata_table(AREAS), parcels, pools=[POOL, "soil"], sums=sums)[0]
    two = stocks(together, strata_table(AREAS), parcels, pools=[POOL, "soil"])[0]
    np.testing.assert_allclose(pick(one, "parcel")["density_se"], pick(two, "parcel")["density_se"], rtol=EXACT)


def test_subplots_as_clusters() -> None:
    """A-CLU-1, independent: R package survey 4.1.1, separate ratio; subplots as plots, plots as clusters."""
    given, expected = COMPUTED["A-CLU-1"]["inputs"], COMPUTED["A-CLU-1"]["expected"]["separate_ratio_by_stratum"]
    data = given["subplots"]
    names = [f"{plot}-{sub}" for plot, sub in zip(data["plot"], data["subplot"], strict=True)]
    table = plot_table(data["y"], plot=names, stratum=data["stratum"], cluster=data["plot"])
    frame, _ = stocks(table, strata_table(given["areas_ha"]))
    rows, row = pick(frame, "stratum").loc[expected["stratum"]], whole(frame)
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["mean"], rtol=EXACT)
    np.testing.assert_allclose(rows["density_se"], expected["se"], rtol=EXACT)
    assert row["density_t_c_ha"] == pytest.approx(expected["overall_mean"], rel=EXACT)
    assert row["density_se"] == pytest.approx(expected["overall_se"], rel=EXACT)
    wrong = COMPUTED["A-CLU-1"]["expected"]["se_ignoring_clusters_wrong"]
    assert row["density_se"] > 1.5 * wrong


def test_transects_drawn_with_probability_proportional_to_size() -> None:
    """PS-11, published: Brus (2022) section 6.1. Equal weight to every draw: weight 1 / number of its points."""
    given, printed = PUBLISHED["PS-11"]["inputs"], PUBLISHED["PS-11"]["printed"]
    draw = pd.Series(given["draw"])
    weight = 1.0 / draw.map(draw.value_counts())
    table = plot_table(given["z"], cluster=draw.astype(str), weight=weight)
    row = whole(stocks(table, strata_table({"S": 100.0}))[0])
    assert row["density_t_c_ha"] == pytest.approx(printed["mean"]["value"], abs=0.5e-3)
    assert row["density_se"] == pytest.approx(printed["se"]["value"], abs=0.5e-3)
    assert (row["plots"], row["df"]) == (50, 5)


def test_transects_of_unequal_size() -> None:
    """PM-11, published: Brus (2022) section 6.3, ratio estimate."""
    given, printed = PUBLISHED["PM-11"]["inputs"], PUBLISHED["PM-11"]["printed"]
    row = whole(stocks(plot_table(given["z"], cluster=given["cluster"]), strata_table({"S": 1.0}))[0])
    names = {name: entry["value"] for name, entry in printed.items()}
    assert row["density_t_c_ha"] == pytest.approx(
        names["mean_ratio"], abs=0.5 * 10 ** -printed["mean_ratio"]["decimals"]
    )
    assert row["df"] == 5


def test_change_of_clusters_is_that_of_cluster_totals() -> None:
    """Identity: complete clusters of equal size give the paired difference of cluster means."""
    rng = np.random.default_rng(4)
    cluster = np.repeat(np.arange(12), 4)
    level = rng.normal(80, 20, 12)[cluster]
    growth = rng.normal(6, 4, 12)[cluster]
    one = plot_table(level + rng.normal(0, 5, 48), survey="t1", cluster=cluster.astype(str))
    two = one.assign(survey="t2", **{POOL: one[POOL] + growth + rng.normal(0, 1, 48)}).assign(all=lambda f: f[POOL])
    plots = read_plots(pd.concat([one, two]), strata_table({"S": 10.0}), None, [POOL])
    samples = plots.sample("t1"), plots.sample("t2")
    whole_area = tuple(np.zeros_like(sample.stratum) for sample in samples)
    made = difference_of_ratios(samples, whole_area, 1, np.array([10.0]), np.ones((1, 2), dtype=bool))
    means = (two[POOL] - one[POOL]).groupby(cluster).mean()
    assert made.density[0, 0] == pytest.approx(means.mean(), rel=1e-9)
    assert made.variance[0, 0] == pytest.approx(means.var() / 12, rel=1e-9)
    assert made.df[0, 0] == pytest.approx(11)
    assert (made.paired[0, 0], made.units_since[0, 0]) == (48, 12)


def test_change_of_parcels_that_cut_clusters() -> None:
    """Independent: where all plots repeat with one size, change is the domain mean of the differences (svy)."""
    rng = np.random.default_rng(3)
    cluster = np.repeat(np.arange(60), 4)
    stratum, parcel = np.array(list(AREAS))[cluster % 3], rng.choice(["p", "q", "r"], 240)
    given = {"stratum": stratum, "cluster": cluster.astype(str), "parcel": parcel}
    first, growth = rng.normal(80, 20, 240), rng.normal(5, 3, 60)[cluster] + rng.normal(0, 1, 240)
    both = pd.concat([plot_table(first, survey="t1", **given), plot_table(first + growth, survey="t2", **given)])
    parcels = parcel_table({"p": 100.0, "q": 110.0, "r": 120.0})
    plots = read_plots(both, strata_table(AREAS), parcels, [POOL])
    samples = plots.sample("t1"), plots.sample("t2")
    domains = samples[0].parcel, samples[1].parcel
    made = difference_of_ratios(samples, domains, 3, np.array(list(AREAS.values())), np.ones((3, 2), dtype=bool))
    expected = by_svy(plot_table(growth, **given), "parcel").loc[["p", "q", "r"]]
    np.testing.assert_allclose(made.density[:, 0], expected["est"], rtol=1e-9)
    np.testing.assert_allclose(np.sqrt(made.variance[:, 0]), expected["se"], rtol=1e-9)


def test_change_of_partly_repeated_plots_in_clusters_agrees_with_the_jackknife() -> None:
    """Every cluster was seen at both dates, but some of its plots at one only: delete one cluster at a time."""
    rng = np.random.default_rng(8)
    cluster = np.repeat(np.arange(200), 4)
    count = len(cluster)
    level, at = rng.normal(80, 20, 200)[cluster], np.arange(count) % 4
    base = plot_table(
        level, cluster=cluster.astype(str), parcel=rng.choice(["p", "q"], count), size=rng.uniform(0.5, 1, count)
    )
    one = base.assign(survey="t1", **{POOL: level + rng.normal(0, 5, count)})[at != 0]
    two = base.assign(survey="t2", **{POOL: level + rng.normal(5, 5, count)})[at != rng.integers(0, 4, count)]
    both = pd.concat([one, two]).assign(all=lambda frame: frame[POOL])
    plots = read_plots(both, strata_table({"S": 10.0}), parcel_table({"p": 5.0, "q": 5.0}), [POOL])
    samples = plots.sample("t1"), plots.sample("t2")

    def estimate(leave: int) -> Any:
        few = tuple(
            replace(
                sample,
                **{name: value[sample.unit != leave] for name, value in vars(sample).items() if value is not None},
            )
            for sample in samples
        )
        return difference_of_ratios(
            few, (few[0].parcel, few[1].parcel), 2, np.array([10.0]), np.ones((1, 2), dtype=bool)
        )

    made = estimate(-1)
    left = np.stack([estimate(unit).density[:, 0] for unit in np.unique(samples[0].unit)])
    jackknife = 199 / 200 * ((left - made.density[:, 0]) ** 2).sum(axis=0)
    np.testing.assert_allclose(made.variance[:, 0], jackknife, rtol=0.06)
    assert made.paired[0, 0] < made.since[0, 0]


def test_one_cluster_is_not_enough() -> None:
    table = pd.concat(
        [
            plot_table([1.0, 2.0, 3.0], stratum="a", cluster=["k", "k", "k"], parcel="p"),
            plot_table(
                [5.0, 6.0, 8.0, 9.0],
                plot=list("wxyz"),
                stratum="b",
                cluster=["", "", "m", "m"],
                parcel=["q", "q", "r", "r"],
            ),
        ]
    )
    parcels = parcel_table({"p": 1.0, "q": 2.0, "r": 3.0})
    for sums in (None, {POOL: [POOL]}):
        frame, findings = stocks(table, strata_table({"a": 10.0, "b": 20.0}), parcels, sums=sums)
        rows = pick(frame, "stratum")
        assert rows.loc["a", "method"] == "not estimable: one cluster"
        assert (rows.loc["a", "plots"], rows.loc["b", "plots"], rows.loc["b", "df"]) == (3, 4, 2)
        assert np.isnan(rows.loc["a", "density_se"])
        assert whole(frame)["area_ha"] == 20.0
        assert pick(frame, "parcel").loc["r", "method"] == "not estimable: one cluster"
        loud = findings[findings["rule"] == "stratum not estimable"].iloc[0]
        assert (loud["severity"], loud["value"]) == ("error", "a")


def test_change_of_one_cluster_says_so() -> None:
    """The area of the stratum is known: the reason is that its plots are one sampling unit."""
    one = plot_table(
        [1.0, 2.0, 3.0, 5.0, 6.0, 8.0],
        survey="t1",
        stratum=list("aaabbb"),
        cluster=["k", "k", "k", "", "m", "m"],
        parcel=list("pppqrr"),
    )
    later = one[[POOL, "all"]] + np.array([[1.0], [2.0], [1.0], [3.0], [1.0], [2.0]])
    both = pd.concat([one, one.assign(survey="t2", **later)])
    strata = strata_table({"a": 10.0, "b": 20.0})
    for sums in (None, {POOL: [POOL]}):
        frame, findings = change(both, strata, parcel_table({"q": 1.0, "r": 2.0}), sums=sums)
        loud = findings[(findings["rule"] == "stratum not estimable") & (findings["table"] == "change")]
        assert loud[["column", "value"]].to_numpy().tolist() == [["cluster", "a"]]
        rows = pick(frame, "stratum")
        assert rows.loc["a", "method"] == "not estimable: one cluster"
        assert rows.loc["b", "method"].endswith("paired")
        assert pick(frame, "parcel").loc["r", "method"] == "not estimable: one cluster"


def test_weights_are_checked() -> None:
    for weight in (0.0, -1.0, np.nan, np.inf):
        table = plot_table([1.0, 2.0, 3.0], weight=[1.0, weight, 1.0])
        with pytest.raises(UserError, match="weight of plot 'p001'"):
            stocks(table, strata_table({"S": 1.0}))


def test_weighted_mean_agrees_with_svy() -> None:
    """Weights within one stratum, no clusters: the Hajek mean with its linearised error."""
    rng = np.random.default_rng(12)
    table = plot_table(rng.gamma(4, 20, 50), weight=rng.uniform(0.2, 5.0, 50))
    row = whole(stocks(table, strata_table({"S": 30.0}))[0])
    columns = {"w": table["weight"].tolist(), "y": table[POOL].tolist()}
    mean = svy.Sample(polars.DataFrame(columns), svy.Design(wgt="w", wr=True)).estimation.mean("y").to_dicts()[0]
    assert row["density_t_c_ha"] == pytest.approx(mean["est"], rel=EXACT)
    assert row["density_se"] == pytest.approx(mean["se"], rel=EXACT)


def test_ratio_to_a_measured_size() -> None:
    """A-RAT-1, independent: R package survey 4.1.1, separate ratio y / x times the known totals of x by stratum.

    x is the weight of the plot, and the known total of x takes the place of the area.
    """
    given = survey_a()
    expected = COMPUTED["A-RAT-1"]["expected"]
    data = pd.DataFrame(given["plots"]).dropna(subset="y1")
    totals = dict(zip(sorted(given["areas_ha"]), expected["known_total_x_by_stratum"], strict=True))
    table = plot_table(
        data["y1"] / data["x"], plot=data["plot"], stratum=data["stratum"], weight=data["x"].astype(float)
    )
    row = whole(stocks(table, strata_table(totals))[0])
    assert row["stock_t_c"] == pytest.approx(expected["separate"]["total"], rel=EXACT)
    assert row["stock_se"] == pytest.approx(expected["separate"]["se_total"], rel=EXACT)
