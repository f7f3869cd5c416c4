"""Change where plots changed their stratum or parcel between the surveys, against brute force and simulation."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import NAME, POOL, change, parcel_table, pick, plot_table, strata_table, whole
from hypothesis import given, settings
from hypothesis import strategies as st
from test_change_sums import SUMS, divided

from landcarbon.change import estimate_change


def moving(
    seed: int = 0, plots: int = 40, strata: float = 0.3, parcels: float = 0.3, size: bool = True
) -> pd.DataFrame:
    """Plots repeated at two surveys, of which a share lies in another stratum or parcel at the second."""
    rng = np.random.default_rng(seed)
    stratum, parcel = rng.integers(0, 2, plots), rng.integers(0, 3, plots)
    stratum_2 = np.where(rng.uniform(size=plots) < strata, 1 - stratum, stratum)
    parcel_2 = np.where(rng.uniform(size=plots) < parcels, rng.integers(0, 3, plots), parcel)
    first = 100 + 60 * stratum + rng.normal(0, 20, plots)
    second = 0.9 * first + 10 + 30 * stratum_2 + rng.normal(0, 8, plots)
    share = rng.uniform(0.4, 1, plots) if size else np.ones(plots)
    return pd.concat(
        [
            plot_table(
                value,
                survey=name,
                stratum=np.array(list("ab"))[h],
                parcel=np.array(list("xyz"))[p],
                date=pd.Timestamp(date),
                size=share,
            )
            for name, date, value, h, p in (
                ("t1", "2010-07-01", first, stratum, parcel),
                ("t2", "2020-07-01", second, stratum_2, parcel_2),
            )
        ],
        ignore_index=True,
    )


AREAS = {"a": 30.0, "b": 10.0}
PARCELS = {"x": 10.0, "y": 10.0, "z": 20.0}


def mean_and_deviations(rows: pd.DataFrame, inside: np.ndarray) -> tuple[float, np.ndarray]:
    """Brute force: domain mean and what each plot brings in, written out with loops over strata (numpy)."""
    size, value = rows["size"].to_numpy(), rows[POOL].to_numpy()
    stratum = rows["stratum"].to_numpy(dtype=object)
    weight = np.zeros(len(rows))
    for name, area in AREAS.items():
        mine = stratum == name
        weight[mine] = area / size[mine].sum()
    whole_weight = (weight * size * inside).sum()
    mean = (weight * size * inside * value).sum() / whole_weight
    deviation = np.zeros(len(rows))
    for name in AREAS:
        mine = stratum == name
        z = size * inside * (value - mean) * mine
        slope = z.sum() / size[mine].sum()
        deviation += np.where(mine, weight / whole_weight * (z - slope * size), 0.0)
    return mean, deviation


def brute_force(table: pd.DataFrame, column: str, name: str) -> tuple[float, float]:
    """Change of a domain and its standard error, all plots repeated; n is that of the first stratum."""
    one, two = (table[table["survey"] == survey].reset_index(drop=True) for survey in ("t1", "t2"))
    inside = [np.ones(len(one)) if not column else (rows[column] == name).to_numpy(dtype=float) for rows in (one, two)]
    (mean_1, c_1), (mean_2, c_2) = (
        mean_and_deviations(rows, here) for rows, here in zip((one, two), inside, strict=True)
    )
    variance = 0.0
    for stratum in AREAS:
        mine = (one["stratum"] == stratum).to_numpy()
        moved, n = (c_2 - c_1)[mine], int(mine.sum())
        variance += n / (n - 1) * (moved**2).sum()
    return mean_2 - mean_1, np.sqrt(variance)


def check(table: pd.DataFrame, frame: pd.DataFrame, *, rel: float = 1e-8) -> None:
    rows = [("inventory", "", NAME, 40.0)]
    rows += [("stratum", "stratum", name, area) for name, area in AREAS.items()]
    rows += [("parcel", "parcel", name, area) for name, area in PARCELS.items()]
    for by, column, unit, area in rows:
        row = pick(frame, by).loc[unit]
        mean, se = brute_force(table, column, unit)
        assert row["change_t_c"] == pytest.approx(area * mean, rel=rel)
        assert row["change_se"] == pytest.approx(area * se, rel=rel)
        assert row["change_t_c_ha_yr_se"] == pytest.approx(se / row["years"], rel=rel)


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 1000))
def test_plots_that_changed_their_parcel(seed: int) -> None:
    table = moving(seed, strata=0.0, parcels=0.4)
    frame, findings = change(table, strata_table(AREAS), parcel_table(PARCELS))
    check(table, frame)
    assert "plot changed its stratum" not in set(findings["rule"])


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 1000))
def test_plots_that_changed_their_stratum(seed: int) -> None:
    table = moving(seed, parcels=0.0, strata=0.3)
    frame, findings = change(table, strata_table(AREAS), parcel_table(PARCELS))
    check(table, frame)
    assert "plot changed its stratum" in set(findings["rule"])


@settings(max_examples=20, deadline=None)
@given(st.integers(0, 1000))
def test_plots_that_changed_both(seed: int) -> None:
    table = moving(seed)
    frame, _ = change(table, strata_table(AREAS), parcel_table(PARCELS))
    check(table, frame)


def test_parts_of_plots_that_moved() -> None:
    """Identity: values cut in parts."""
    table = divided(moving(3))
    for pool, parts in SUMS.items():
        table[pool] = table[parts].sum(axis=1)
    table["all"] = table[list(SUMS)].sum(axis=1)
    plain, _ = change(table, strata_table(AREAS), parcel_table(PARCELS), pools=list(SUMS))
    frame, _ = change(table, strata_table(AREAS), parcel_table(PARCELS), pools=list(SUMS), sums=SUMS)
    pd.testing.assert_frame_equal(frame, plain, rtol=1e-7)


def test_units_without_moved_plots_are_as_before() -> None:
    """Identity: a stratum and parcel apart, whose plots stay, have the figures they have on their own."""
    table = moving(5)
    other = moving(6, strata=0.0, parcels=0.0).assign(stratum="c", parcel="w")
    other["plot"] = "c" + other["plot"]
    areas, parcels = strata_table(AREAS | {"c": 5.0}), parcel_table(PARCELS | {"w": 5.0})
    frame, _ = change(pd.concat([table, other]), areas, parcels)
    alone, _ = change(other, strata_table({"c": 5.0}), parcel_table({"w": 5.0}))
    for by, unit in (("stratum", "c"), ("parcel", "w")):
        pd.testing.assert_series_equal(pick(frame, by).loc[unit], pick(alone, by).loc[unit], rtol=1e-10)


def test_best_combination_leaves_moved_plots_to_the_difference() -> None:
    table = moving(5)
    table = table[~((table["survey"] == "t1") & table["plot"].isin([f"p{i:03d}" for i in range(8)]))]
    options = {"since": "t1", "until": "t2", "pools": [POOL], "confidence": 0.95, "inventory_name": NAME}
    plain, best = (
        estimate_change(table, strata_table(AREAS), None, change=way, **options)[0]
        for way in ("difference", "best combination")
    )
    pd.testing.assert_frame_equal(best, plain)


@pytest.mark.parametrize(("strata", "parcels"), [(0.15, 0.0), (0.4, 0.2)])
def test_standard_errors_over_many_samples(strata: float, parcels: float) -> None:
    """Simulation: random samples of a population of which a share of the land changed its stratum."""
    rng = np.random.default_rng(7)
    land = moving(1, plots=8000, strata=strata, parcels=parcels, size=False)
    one, two = (land[land["survey"] == name].reset_index(drop=True) for name in ("t1", "t2"))
    share = [(rows["stratum"] == "a").mean() for rows in (one, two)]
    made, repeats = [], 120
    for _ in range(repeats):
        drawn = rng.choice(8000, 60, replace=False)
        areas = strata_table({"a": 100 * np.mean(share), "b": 100 * (1 - np.mean(share))})
        frame, _ = change(pd.concat([one.iloc[drawn], two.iloc[drawn]]), areas)
        rows = pick(frame, "stratum").loc["a"]
        made.append([*whole(frame)[["change_t_c", "change_se"]], *rows[["change_t_c", "change_se"]]])
    result = np.array(made, dtype=float)
    for place in (0, 2):
        true, stated = result[:, place].std(), np.sqrt((result[:, place + 1] ** 2).mean())
        assert stated == pytest.approx(true, rel=0.15)
