"""Identities that must hold for any plot table: parts and whole, order, scale, sign, missing values."""

from __future__ import annotations

import numpy as np
import pandas as pd
from estimate_frames import POOL, change, parcel_table, pick, stocks, strata_table
from hypothesis import given, settings
from hypothesis import strategies as st

STRATA = {"a": 120.0, "b": 40.5, "c": 7.25}
PARCELS = {"w": 50.0, "x": 61.0, "y": 30.0, "z": 26.75}
QUICK = settings(max_examples=12, deadline=None, derandomize=True)
FIGURES = ["density_t_c_ha", "density_se", "stock_t_c", "stock_se", "df", "plots"]
AMOUNTS = ["change_t_c", "change_se", "change_low", "change_high", "years", "change_t_c_yr", "co2_t_yr"]


@st.composite
def plot_tables(draw: st.DrawFn, equal_sizes: bool = False) -> pd.DataFrame:
    """Two surveys of the same area: some plots repeat, parcels cut across strata, two pools."""
    seed = draw(st.integers(0, 2**32 - 1))
    rng = np.random.default_rng(seed)
    count = draw(st.integers(6, 40))
    stratum = np.concatenate([["a", "a", "b", "b", "c", "c"], rng.choice(list(STRATA), count - 6)])
    parcel = rng.choice(list(PARCELS), count)
    first = rng.gamma(3.0, 20.0, count)
    parts = []
    for survey, growth, share in (("t1", 0.0, 1.0), ("t2", 8.0, draw(st.floats(0.0, 1.0)))):
        repeated = rng.random(count) < share
        above = first * repeated + rng.gamma(3.0, 20.0, count) * ~repeated + growth + rng.normal(0, 2, count)
        soil = rng.normal(80, 15, count)
        name = [f"p{i:02d}" if same else f"{survey}-{i:02d}" for i, same in enumerate(repeated)]
        date = pd.Timestamp("2014-01-01") + pd.to_timedelta(rng.integers(0, 300, count) + 3653 * (survey == "t2"), "D")
        parts.append(
            pd.DataFrame(
                {
                    "survey": survey,
                    "plot": name,
                    "parcel": parcel,
                    "stratum": stratum,
                    "date": date,
                    "size": 1.0 if equal_sizes else rng.uniform(0.2, 1.0, count),
                    "inside": True,
                    POOL: above,
                    "soil": soil,
                    "all": above + soil,
                }
            )
        )
    return pd.concat(parts, ignore_index=True)


def run(table: pd.DataFrame, scale: float = 1.0) -> pd.DataFrame:
    strata = strata_table({name: scale * area for name, area in STRATA.items()})
    parcels = parcel_table({name: scale * area for name, area in PARCELS.items()})
    return stocks(table, strata, parcels, surveys=["t1", "t2"], pools=[POOL, "soil"])[0]


def run_change(table: pd.DataFrame, surveys: tuple[str, str] = ("t1", "t2")) -> pd.DataFrame:
    return change(table, strata_table(STRATA), parcel_table(PARCELS), surveys=surveys, pools=[POOL, "soil"])[0]


@QUICK
@given(plot_tables(), st.integers(0, 1000))
def test_order_of_rows_does_not_matter_to_the_last_bit(table: pd.DataFrame, seed: int) -> None:
    mixed = table.sample(frac=1.0, random_state=seed)
    pd.testing.assert_frame_equal(run(mixed), run(table), check_exact=True)
    pd.testing.assert_frame_equal(run_change(mixed), run_change(table), check_exact=True)


@QUICK
@given(plot_tables())
def test_strata_add_up_to_the_inventory(table: pd.DataFrame) -> None:
    frame = run(table)
    for survey in ("t1", "t2"):
        for pool in (POOL, "soil", "all"):
            rows = pick(frame, "stratum", pool, survey=survey)
            row = pick(frame, "inventory", pool, survey=survey).iloc[0]
            np.testing.assert_allclose(rows["stock_t_c"].sum(), row["stock_t_c"], rtol=1e-12)
            np.testing.assert_allclose(np.sqrt((rows["stock_se"] ** 2).sum()), row["stock_se"], rtol=1e-12)
            assert rows["area_ha"].sum() == row["area_ha"]
            assert rows["plots"].sum() == row["plots"]
    frame = run_change(table)
    for pool in (POOL, "soil", "all"):
        rows, row = pick(frame, "stratum", pool), pick(frame, "inventory", pool).iloc[0]
        np.testing.assert_allclose(rows["change_t_c"].sum(), row["change_t_c"], rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(np.sqrt((rows["change_se"] ** 2).sum()), row["change_se"], rtol=1e-12)


@QUICK
@given(plot_tables())
def test_pools_add_up(table: pd.DataFrame) -> None:
    frame = run(table)
    wide = frame.pivot(index=["by", "unit", "survey"], columns="pool", values="stock_t_c")
    np.testing.assert_allclose(wide[POOL] + wide["soil"], wide["all"], rtol=1e-10)
    wide = run_change(table).pivot(index=["by", "unit"], columns="pool", values="change_t_c")
    np.testing.assert_allclose(wide[POOL] + wide["soil"], wide["all"], rtol=1e-8, atol=1e-8)


@QUICK
@given(plot_tables())
def test_change_is_the_difference_of_stocks(table: pd.DataFrame) -> None:
    wide = run(table).pivot(index=["by", "unit", "pool"], columns="survey", values="stock_t_c")
    both = run_change(table).set_index(["by", "unit", "pool"])["change_t_c"]
    np.testing.assert_allclose(both, (wide["t2"] - wide["t1"]).loc[both.index], rtol=1e-8, atol=1e-8)


@QUICK
@given(plot_tables(), st.floats(0.01, 100.0))
def test_scales(table: pd.DataFrame, factor: float) -> None:
    """Plot area (all sizes alike) does not matter; value and land area scale the figures, not the df."""
    plain = run(table)[FIGURES]
    np.testing.assert_allclose(run(table.assign(size=factor * table["size"]))[FIGURES], plain, rtol=1e-9)
    pools = [POOL, "soil", "all"]
    scaled = run(table.assign(**{name: factor * table[name] for name in pools}))[FIGURES]
    expected = plain * [factor, factor, factor, factor, 1, 1]
    np.testing.assert_allclose(scaled, expected, rtol=1e-9)
    np.testing.assert_allclose(run(table, factor)[FIGURES], plain * [1, 1, factor, factor, 1, 1], rtol=1e-9)


@QUICK
@given(plot_tables())
def test_no_change_between_equal_surveys(table: pd.DataFrame) -> None:
    same = table[table["survey"] == "t1"]
    frame = run_change(pd.concat([same, same.assign(survey="t2", date=same["date"] + pd.Timedelta(days=3653))]))
    estimable = frame["change_t_c"].notna()
    assert (frame.loc[estimable, ["change_t_c", "change_se", "co2_t_yr"]] == 0).all(axis=None)
    assert not np.signbit(frame.loc[estimable, "co2_t_yr"]).any()


@QUICK
@given(plot_tables())
def test_sign_swaps_when_the_surveys_do(table: pd.DataFrame) -> None:
    forth, back = run_change(table), run_change(table, ("t2", "t1"))
    np.testing.assert_allclose(back["change_t_c"], -forth["change_t_c"], rtol=1e-9)
    np.testing.assert_allclose(back["change_se"], forth["change_se"], rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(back["years"], -forth["years"], rtol=1e-12)
    np.testing.assert_allclose(back["change_t_c_ha_yr"], forth["change_t_c_ha_yr"], rtol=1e-9)


@QUICK
@given(plot_tables(), st.data())
def test_a_missing_value_stays_where_it_is(table: pd.DataFrame, data: st.DataObject) -> None:
    """One plot without soil changes soil in its own stratum and parcel, and nothing of the other pool."""
    number = data.draw(st.integers(0, len(table) // 2 - 1))
    stratum, parcel = table.loc[number, ["stratum", "parcel"]]
    holed = table.copy()
    holed.loc[number, "soil"] = np.nan
    before, after = run(table), run(holed)
    touched = (
        (before["survey"] == table.loc[number, "survey"])
        & (before["pool"] == "soil")
        & (before["unit"].isin([stratum, parcel]) | (before["by"] != "stratum"))
    )
    pd.testing.assert_frame_equal(after[~touched], before[~touched])
    other = before["pool"] == POOL
    pd.testing.assert_frame_equal(after[other], before[other])


@QUICK
@given(plot_tables())
def test_degrees_of_freedom_stay_in_bounds(table: pd.DataFrame) -> None:
    frame = run(table)
    known = frame.dropna(subset="density_t_c_ha")
    assert (known["df"] >= 1 - 1e-9).all()
    assert (known["df"] <= known["plots"] - 1 + 1e-9).all()
    plots = pick(frame, "stratum", survey="t1")["plots"]
    row = pick(frame, "inventory", survey="t1").iloc[0]
    assert plots.min() - 1 - 1e-9 <= row["df"] <= (plots - 1).sum() + 1e-9
    assert (known["density_low"] <= known["density_t_c_ha"]).all()
    assert (known["density_high"] >= known["density_t_c_ha"]).all()


@QUICK
@given(plot_tables(equal_sizes=True))
def test_equal_sizes_give_the_plain_mean_and_its_variance(table: pd.DataFrame) -> None:
    """Independent: mean and variance by pandas, stratum by stratum."""
    rows = pick(run(table), "stratum", survey="t1")
    groups = table[table["survey"] == "t1"].groupby("stratum")["all"]
    np.testing.assert_allclose(rows["density_t_c_ha"], groups.mean().loc[rows.index], rtol=1e-12)
    np.testing.assert_allclose(rows["density_se"], groups.sem().loc[rows.index], rtol=1e-10)


@QUICK
@given(plot_tables(), st.floats(-50.0, 50.0))
def test_a_constant_gain_on_repeated_plots_has_no_error(table: pd.DataFrame, gain: float) -> None:
    same = table[table["survey"] == "t1"]
    later = same.assign(survey="t2", date=same["date"] + pd.Timedelta(days=3653), all=same["all"] + gain)
    rows = pick(run_change(pd.concat([same, later])), "parcel").dropna(subset="change_t_c")
    np.testing.assert_allclose(rows["change_t_c"], gain * rows["area_ha"], atol=1e-9)
    assert (rows["change_se"] == 0).all()
