"""Identities that must hold for sums of parts whatever was measured where."""

from __future__ import annotations

import numpy as np
import pandas as pd
from estimate_frames import change, parcel_table, stocks, strata_table
from hypothesis import given, settings
from hypothesis import strategies as st
from test_estimate_sums import PARTS, SUMS

STRATA = {"a": 120.0, "b": 40.5, "c": 7.25}
PARCELS = {"w": 50.0, "x": 61.0, "y": 30.0, "z": 26.75}
QUICK = settings(max_examples=8, deadline=None, derandomize=True)
KEYS = ["by", "unit", "pool"]
POOLS = list(SUMS)


@st.composite
def part_tables(draw: st.DrawFn) -> pd.DataFrame:
    """Two surveys; some plots repeat, parcels cut across strata, each part is missing on plots of its own."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    count = draw(st.integers(6, 40))
    stratum = np.concatenate([["a", "a", "b", "b", "c", "c"], rng.choice(list(STRATA), count - 6)])
    parcel = rng.choice([*PARCELS, ""], count)
    measured = rng.random((count, len(PARTS))) < draw(st.floats(0.3, 1.0))
    repeated = rng.random(count) < draw(st.floats(0.0, 1.0))
    first = rng.gamma(3.0, 20.0, (count, len(PARTS)))
    tables = []
    for survey in ("t1", "t2"):
        later = survey == "t2"
        kept = first + rng.normal(4, 2, first.shape) if later else first
        values = np.where(repeated[:, None] | (not later), kept, rng.gamma(3.0, 20.0, first.shape))
        values[~measured | (rng.random(first.shape) < 0.1 * later)] = np.nan
        table = pd.DataFrame(values, columns=PARTS)
        table["survey"] = survey
        table["plot"] = [f"p{i:02d}" if same else f"{survey}-{i:02d}" for i, same in enumerate(repeated)]
        table["parcel"], table["stratum"] = parcel, stratum
        days = rng.integers(0, 300, count) + 3653 * later
        table["date"] = pd.Timestamp("2014-01-01") + pd.to_timedelta(days, "D")
        tables.append(table.assign(size=rng.uniform(0.2, 1.0, count), inside=True))
    return pd.concat(tables, ignore_index=True)


def run(table: pd.DataFrame, sums: dict[str, list[str]] = SUMS, surveys: tuple[str, ...] = ("t1", "t2")):
    return stocks(table, strata_table(STRATA), parcel_table(PARCELS), surveys=surveys, pools=POOLS, sums=sums)[0]


def run_change(table: pd.DataFrame, sums: dict[str, list[str]] = SUMS, surveys: tuple[str, str] = ("t1", "t2")):
    return change(table, strata_table(STRATA), parcel_table(PARCELS), surveys=surveys, pools=POOLS, sums=sums)[0]


def added_up(frame: pd.DataFrame, column: str, index: list[str]) -> tuple[pd.Series, pd.Series]:
    """The pools that have a figure added up, and ``all``."""
    wide = frame.pivot(index=index, columns="pool", values=column)
    return wide[POOLS].sum(axis=1, min_count=1), wide["all"]


@QUICK
@given(part_tables())
def test_all_is_the_sum_of_the_pools_at_every_level(table: pd.DataFrame) -> None:
    added, whole = added_up(run(table), "stock_t_c", ["by", "unit", "survey"])
    np.testing.assert_allclose(whole, added, rtol=1e-12)
    frame = run_change(table)
    for column in ("change_t_c", "change_t_c_yr", "co2_t_yr"):
        added, whole = added_up(frame, column, ["by", "unit"])
        np.testing.assert_allclose(whole, added, rtol=1e-9, atol=1e-9)


@QUICK
@given(part_tables())
def test_strata_add_up_to_the_inventory(table: pd.DataFrame) -> None:
    for frame, amount, error in (
        (run(table).assign(key="stock"), "stock_t_c", "stock_se"),
        (run_change(table).assign(survey="change"), "change_t_c", "change_se"),
    ):
        rows = frame[frame["by"] == "stratum"].groupby(["survey", "pool"])
        whole = frame[frame["by"] == "inventory"].set_index(["survey", "pool"])
        added = rows[amount].sum(min_count=1).loc[whole.index]
        np.testing.assert_allclose(whole[amount], added, rtol=1e-9, atol=1e-9)
        errors = np.sqrt(rows[error].apply(lambda se: (se**2).sum(min_count=1))).loc[whole.index]
        np.testing.assert_allclose(whole[error], errors, rtol=1e-9)


@QUICK
@given(part_tables())
def test_standard_errors_and_df_are_sound(table: pd.DataFrame) -> None:
    for frame, figure, error in (
        (run(table), "density_t_c_ha", "density_se"),
        (run_change(table), "change_t_c", "change_se"),
    ):
        known = frame[frame[figure].notna()]
        assert (known[error] > 0).all()
        assert known["method"].str.startswith("not estimable").sum() == 0
        lost = frame[frame[figure].isna()]
        assert lost[error].isna().all()
        assert lost["method"].str.startswith("not estimable").all()
    known = run(table).dropna(subset="density_t_c_ha")
    assert (known["df"] >= 1 - 1e-9).all()
    assert (known["density_low"] < known["density_high"]).all()


@QUICK
@given(part_tables(), st.integers(0, 1000))
def test_order_does_not_matter(table: pd.DataFrame, seed: int) -> None:
    """Rows: to the last bit. Parts of a pool: to rounding."""
    mixed = table.sample(frac=1.0, random_state=seed)
    pd.testing.assert_frame_equal(run(mixed), run(table), check_exact=True)
    pd.testing.assert_frame_equal(run_change(mixed), run_change(table), check_exact=True)
    turned = {pool: SUMS[pool][::-1] for pool in reversed(SUMS)}
    columns = ["density_t_c_ha", "density_se", "stock_t_c", "df", "plots"]
    np.testing.assert_allclose(run(table, turned)[columns], run(table)[columns], rtol=1e-9)
    columns = ["change_t_c", "change_se", "change_high", "years"]
    np.testing.assert_allclose(run_change(table, turned)[columns], run_change(table)[columns], rtol=1e-7, atol=1e-7)


@QUICK
@given(part_tables())
def test_a_part_can_be_cut_in_two(table: pd.DataFrame) -> None:
    """Cutting a part where it was measured into two parts changes no figure of any sum."""
    cut = table.assign(**{"soil.top": 0.3 * table["soil.soil"], "soil.deep": 0.7 * table["soil.soil"]})
    sums = SUMS | {"soil": ["soil.top", "soil.deep"]}
    one, two = run(table), run(cut, sums)
    known = ~one["method"].str.contains("stratum mean")  # there the parts count as fully correlated, as these are
    columns = ["density_t_c_ha", "density_se", "df"]
    np.testing.assert_allclose(two[known][columns], one[known][columns], rtol=1e-8)
    one, two = run_change(table), run_change(cut, sums)
    np.testing.assert_allclose(two[["change_t_c", "change_se"]], one[["change_t_c", "change_se"]], rtol=1e-6, atol=1e-7)


@QUICK
@given(part_tables())
def test_a_part_that_is_always_zero_adds_nothing(table: pd.DataFrame) -> None:
    table = table.assign(**{"dead_wood.down": table["dead_wood.standing"] * 0.0})
    frame = run(table).set_index(["by", "unit", "survey", "pool"])
    alone = run(table, SUMS | {"dead_wood": ["dead_wood.standing"]}).set_index(["by", "unit", "survey", "pool"])
    columns = ["density_t_c_ha", "density_se", "df"]
    np.testing.assert_allclose(frame[columns], alone[columns], rtol=1e-9)


@QUICK
@given(part_tables())
def test_sign_swaps_when_the_surveys_do(table: pd.DataFrame) -> None:
    forth, back = run_change(table), run_change(table, surveys=("t2", "t1"))
    np.testing.assert_allclose(back["change_t_c"], -forth["change_t_c"], rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(back["change_se"], forth["change_se"], rtol=1e-6, atol=1e-9)


@QUICK
@given(part_tables(), st.floats(0.01, 100.0))
def test_scales(table: pd.DataFrame, factor: float) -> None:
    scaled = run(table.assign(**{part: factor * table[part] for part in PARTS}))
    plain = run(table)
    for column in ("density_t_c_ha", "density_se", "stock_t_c", "stock_se"):
        np.testing.assert_allclose(scaled[column], factor * plain[column], rtol=1e-9)
    np.testing.assert_allclose(scaled["df"], plain["df"], rtol=1e-9)


@QUICK
@given(part_tables())
def test_a_pool_does_not_depend_on_the_others(table: pd.DataFrame) -> None:
    """Unless a parcel borrows: whether it may is told by the other parts."""
    whole, alone = run(table), run(table.assign(**{"soil.soil": np.nan}))
    same = (whole["pool"].isin(["above_ground", "dead_wood"])) & (whole["by"] != "parcel")
    pd.testing.assert_frame_equal(whole[same], alone[same])
