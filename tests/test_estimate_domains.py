"""Domains of any column: computed values, live comparison with svy, and identities."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import POOL, cases, pick, plot_table, stocks, strata_table, survey_a, survey_a_tables, whole

from landcarbon.errors import UserError
from landcarbon.estimate.domains import DOMAIN_COLUMNS, estimate_domains

OPTIONS = {"surveys": ["t1"], "pools": [POOL], "confidence": 0.95}
EXPECTED = cases("computed")["A-DOM-1"]["expected"]["parcels"]


def owners() -> tuple[pd.DataFrame, pd.DataFrame]:
    table, strata, _ = survey_a_tables()
    return table.assign(owner=table["parcel"], parcel=""), strata


def test_areas_unknown() -> None:
    """A-DOM-1, independent: R package survey 4.1.1; expanded totals and areas of domains."""
    table, strata = owners()
    rows = estimate_domains(table, strata, "owner", **OPTIONS)
    assert list(rows.columns) == DOMAIN_COLUMNS
    rows = rows[rows["pool"] == "all"].set_index("unit").loc[EXPECTED["parcel"]]
    for column, name in (
        ("density_t_c_ha", "mean"),
        ("density_se", "se_mean"),
        ("stock_t_c", "total_ht"),
        ("stock_se", "se_total_ht"),
        ("area_ha", "estimated_area_ha"),
    ):
        np.testing.assert_allclose(rows[column], EXPECTED[name], rtol=1e-9)
    assert list(rows["plots"]) == EXPECTED["n"]
    assert set(rows["method"]) == {"domain ratio of means, area estimated"}


def test_error_of_areas_is_binomial_within_strata() -> None:
    """By hand: with plots alike, A_h sqrt(p (1 - p) / (n - 1)) by stratum."""
    table, strata = owners()
    table = table[table["survey"] == "t1"]
    rows = estimate_domains(table, strata, "owner", **OPTIONS)
    rows = rows[rows["pool"] == "all"].set_index("unit")
    area = survey_a()["areas_ha"]
    for owner in rows.index:
        share = (table["owner"] == owner).groupby(table["stratum"]).agg(["mean", "size"])
        variance = share["mean"] * (1 - share["mean"]) / (share["size"] - 1) * pd.Series(area) ** 2
        assert rows.loc[owner, "area_se"] == pytest.approx(np.sqrt(variance.sum()), rel=1e-9)
    assert rows["area_ha"].sum() == pytest.approx(sum(area.values()), rel=1e-12)


def test_areas_known_is_what_parcels_are() -> None:
    table, strata, parcels = survey_a_tables()
    areas = dict(zip(parcels["parcel"], parcels["area_ha"], strict=True))
    rows = estimate_domains(table.assign(owner=table["parcel"]), strata, "owner", areas, **OPTIONS)
    expected = pick(stocks(table, strata, parcels, surveys=["t1"])[0], "parcel")
    rows = rows[rows["pool"] == "all"].set_index("unit").loc[expected.index]
    names = ["area_ha", "density_t_c_ha", "density_se", "density_low", "stock_t_c", "stock_se", "stock_high", "df"]
    np.testing.assert_allclose(rows[names], expected[names], rtol=1e-9)
    assert (rows["area_se"] == 0).all()


def test_stocks_of_domains_add_up_to_the_inventory() -> None:
    """Also with soil on part of the plots, plots of unequal size and weight, and clusters."""
    rng = np.random.default_rng(3)
    table, strata = owners()
    count = len(table)
    table = table.assign(
        size=rng.uniform(0.4, 1, count),
        weight=rng.uniform(1, 3, count),
        cluster=(np.arange(count) // 2).astype(str),
        soil=np.where(rng.random(count) < 0.3, np.nan, rng.normal(60, 9, count)),
    )
    sums = {POOL: [POOL], "soil": ["soil"]}
    options = OPTIONS | {"pools": [POOL, "soil"], "sums": sums}
    rows = estimate_domains(table, strata, "owner", **options)
    frame = stocks(table, strata, surveys=["t1"], pools=[POOL, "soil"], sums=sums)[0]
    for pool in (POOL, "soil", "all"):
        assert rows.loc[rows["pool"] == pool, "stock_t_c"].sum() == pytest.approx(whole(frame, pool)["stock_t_c"])
    one = estimate_domains(table.assign(owner="mine"), strata, "owner", **options).set_index("pool")
    for pool in (POOL, "soil", "all"):
        row = whole(frame, pool)
        assert one.loc[pool, "stock_se"] > 0
        assert one.loc[pool, "density_se"] == pytest.approx(row["density_se"], rel=1e-9)
        assert one.loc[pool, "area_se"] == pytest.approx(0.0, abs=1e-6)


def test_few_plots_and_blank_names() -> None:
    table = plot_table([10.0, 20.0, 30.0, 40.0, 50.0], survey="t1", use=["grove", "grove", "", None, "glade"])
    rows = estimate_domains(table, strata_table({"S": 50.0}), "use", **OPTIONS)
    rows = rows[rows["pool"] == "all"].set_index("unit")
    assert list(rows.index) == ["glade", "grove"]
    assert rows.loc["grove", "density_t_c_ha"] == 15.0
    assert rows.loc["grove", "area_ha"] == 20.0
    assert rows.loc["glade", "method"] == "not estimable: 1 plot(s)"
    assert rows.loc["glade", ["stock_t_c", "stock_se", "density_se"]].isna().all()


def test_wrong_input() -> None:
    table, strata = owners()
    with pytest.raises(UserError, match="no column 'keeper'"):
        estimate_domains(table, strata, "keeper", **OPTIONS)
    with pytest.raises(UserError, match="no area is given for owner P2"):
        estimate_domains(table, strata, "owner", {"P1": 1.0, "P3": 1.0, "P4": 1.0, "P5": 1.0}, **OPTIONS)
