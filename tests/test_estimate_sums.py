"""Pools as sums of parts, each measured on its own plots: stocks."""

from __future__ import annotations

from time import perf_counter

import numpy as np
import pandas as pd
import pytest
from estimate_frames import cases, parcel_table, pick, plot_table, stocks, strata_table, survey_a_tables, whole

from landcarbon.errors import UserError
from landcarbon.estimate.sums import read_sums

CLOSED_FORM = 1e-9
SUMS = {
    "above_ground": ["above_ground.trees"],
    "dead_wood": ["dead_wood.standing", "dead_wood.down"],
    "soil": ["soil.soil"],
}
PARTS = [part for parts in SUMS.values() for part in parts]
FIGURES = ["density_t_c_ha", "density_se", "density_low", "density_high", "stock_t_c", "stock_se", "df"]


def parts_table(values: dict[str, list[float]], **columns: object) -> pd.DataFrame:
    """A plot table of the parts; parts not named are zero."""
    count = len(next(iter(values.values())))
    given = {part: np.zeros(count) for part in PARTS} | {part: np.array(v, dtype=float) for part, v in values.items()}
    return plot_table(np.zeros(count), **given, **columns).drop(columns=["above_ground", "all"])


def run(table: pd.DataFrame, areas: dict[str, float], parcels: dict[str, float] | None = None, **options: object):
    given = None if parcels is None else parcel_table(parcels)
    return stocks(table, strata_table(areas), given, pools=list(SUMS), sums=SUMS, **options)


def inventory(frame: pd.DataFrame) -> pd.DataFrame:
    return frame[frame["by"] == "inventory"].set_index("pool")


def test_five_pools_on_the_same_plots() -> None:
    """Independent: the sum of five means with their covariances, case A-POOL-1 (package and call stand there)."""
    case = cases("computed")["A-POOL-1"]
    ours = {
        "agb": "above_ground",
        "bgb": "below_ground",
        "dead_wood": "dead_wood",
        "litter": "litter",
        "soil": "soil",
    }
    plots = pd.DataFrame(case["inputs"]["plots"])
    values = {f"{name}.part": plots[theirs].to_numpy(dtype=float) for theirs, name in ours.items()}
    table = plot_table(np.zeros(len(plots)), plot=plots["plot"], stratum=plots["stratum"], **values)
    sums = {name: [f"{name}.part"] for name in ours.values()}
    frame, _ = stocks(table, strata_table(case["inputs"]["areas_ha"]), pools=list(sums), sums=sums)
    expected, row = case["expected"], whole(frame)
    assert row["density_t_c_ha"] == pytest.approx(expected["sum_mean"], rel=CLOSED_FORM)
    assert row["density_se"] == pytest.approx(expected["sum_se"], rel=CLOSED_FORM)
    assert row["stock_se"] == pytest.approx(expected["sum_total_se"], rel=CLOSED_FORM)
    assert row["density_se"] == pytest.approx(8.674, abs=5e-4)
    # the errors of the pools in quadrature would be 6.68
    assert np.sqrt((inventory(frame)["density_se"].iloc[:-1] ** 2).sum()) == pytest.approx(
        expected["se_quadrature_ignoring_covariance"], rel=CLOSED_FORM
    )
    assert row["density_se"] > 1.29 * expected["se_quadrature_ignoring_covariance"]
    rows = inventory(frame).loc[[ours[name] for name in expected["pools"]["pool"]]]
    np.testing.assert_allclose(rows["density_se"], expected["pools"]["se"], rtol=CLOSED_FORM)


@pytest.mark.parametrize("areas", [None, {"S4": np.nan}])
def test_same_results_as_columns_where_every_part_is_on_every_plot(areas: dict[str, float] | None) -> None:
    """Identity: parts on all plots give what their sum per plot gives, texts and findings included."""
    table, strata, parcels = survey_a_tables()
    rng = np.random.default_rng(1)
    table["size"] = rng.uniform(0.3, 1.0, len(table))
    table["above_ground.trees"] = table["above_ground"]
    for part in PARTS[1:]:
        table[part] = 0.3 * table["above_ground"] + rng.gamma(3.0, 5.0, len(table))
    for pool, parts in SUMS.items():
        table[pool] = table[parts].sum(axis=1)
    table["all"] = table[list(SUMS)].sum(axis=1)
    if areas:
        strata["area_ha"] = strata["area_ha"].where(~strata["stratum"].isin(areas), np.nan)
    plain, said = stocks(table, strata, parcels, surveys=["t1", "t2", "t3"], pools=list(SUMS))
    frame, about = stocks(table, strata, parcels, surveys=["t1", "t2", "t3"], pools=list(SUMS), sums=SUMS)
    pd.testing.assert_frame_equal(frame, plain, rtol=1e-9)
    assert list(about["rule"]) == list(said["rule"])


def test_part_on_a_subset_of_plots() -> None:
    """By hand: three plots have soil beside trees, two have trees alone."""
    trees, soil = np.array([30.0, 50.0, 10.0, 80.0, 40.0]), np.array([60.0, 90.0, 45.0])
    table = parts_table({"above_ground.trees": list(trees), "soil.soil": [*soil, np.nan, np.nan]})
    frame, findings = run(table, {"S": 10.0})
    rows = inventory(frame)
    assert list(rows["plots"]) == [5, 5, 3, 3]
    assert rows.loc["all", "density_t_c_ha"] == pytest.approx(trees.mean() + soil.mean())
    joint = trees[:3] / 5 + soil / 3
    variance = 2 * trees.var(ddof=1) / 25 + 3 * joint.var(ddof=1)
    assert rows.loc["all", "density_se"] ** 2 == pytest.approx(variance)
    assert rows.loc["above_ground", "density_se"] == pytest.approx(trees.std(ddof=1) / np.sqrt(5))
    assert rows.loc["soil", "density_se"] == pytest.approx(soil.std(ddof=1) / np.sqrt(3))
    first, second = 2 * trees.var(ddof=1) / 25, 3 * joint.var(ddof=1)
    shared = 2 * 3 / np.sqrt(3 * 5) * first * second / np.sqrt(4 * 2)  # three of the plots tell about both
    assert rows.loc["all", "df"] == pytest.approx((first + second) ** 2 / (first**2 / 4 + second**2 / 2 + shared))
    assert rows.loc["all", "method"] == "stratified ratio of means, parts on different plots"
    assert rows.loc["soil", "method"] == "stratified ratio of means"
    note = findings.set_index("rule").loc["pool not measured"]
    assert "2 of 5 plots have no value of soil: missing there, not zero" in note["message"]


def test_parts_on_separate_plots_are_independent() -> None:
    table = parts_table({"above_ground.trees": [30, 50, 10, np.nan, np.nan], "soil.soil": [np.nan] * 3 + [60, 90]})
    rows = inventory(run(table, {"S": 10.0})[0])
    expected = np.var([30, 50, 10], ddof=1) / 3 + np.var([60, 90], ddof=1) / 2
    assert rows.loc["all", "density_se"] ** 2 == pytest.approx(expected)


def test_one_plot_with_both_parts_counts_as_fully_correlated() -> None:
    """By hand: one plot cannot tell how two parts go together; the most it can bring in is taken."""
    trees, soil = np.array([30.0, 50.0]), np.array([60.0, 90.0])
    table = parts_table({"above_ground.trees": [*trees, np.nan], "soil.soil": [np.nan, *soil]})
    rows = inventory(run(table, {"S": 10.0})[0])
    per_plot = trees.var(ddof=1) / 4, soil.var(ddof=1) / 4
    expected = sum(per_plot) + (np.sqrt(per_plot[0]) + np.sqrt(per_plot[1])) ** 2
    assert rows.loc["all", "density_se"] ** 2 == pytest.approx(expected)


def test_parcel_without_a_part_takes_the_mean_of_its_stratum() -> None:
    """By hand: trees from the parcel's own plots, soil from the stratum with the spread between plots."""
    trees = np.array([30.0, 50.0, 10.0, 80.0, 40.0, 55.0])
    soil = np.array([60.0, 90.0, 45.0, 70.0])
    table = parts_table(
        {"above_ground.trees": list(trees), "soil.soil": [np.nan, np.nan, *soil]}, parcel=["x"] * 3 + ["y"] * 3
    )
    frame, findings = run(table, {"S": 10.0}, {"x": 4.0, "y": 6.0})
    rows = frame[(frame["by"] == "parcel") & (frame["unit"] == "x")].set_index("pool")
    spread = soil.var(ddof=1) * (1 + 1 / 4)
    assert rows.loc["soil", "density_t_c_ha"] == pytest.approx(soil.mean())
    assert rows.loc["soil", "density_se"] ** 2 == pytest.approx(spread)
    assert rows.loc["soil", "df"] == pytest.approx(3)
    assert rows.loc["soil", "plots"] == 1
    assert rows.loc["soil", "method"] == "soil: stratum mean (one plot of its own)"
    assert rows.loc["all", "density_t_c_ha"] == pytest.approx(trees[:3].mean() + soil.mean())
    own = rows.loc["above_ground", "density_se"]
    assert rows.loc["all", "density_se"] ** 2 == pytest.approx(own**2 + spread)
    assert rows.loc["all", "df"] == pytest.approx((own**2 + spread) ** 2 / (own**4 / 2 + spread**2 / 3))
    assert rows.loc["all", "method"] == "domain ratio of means; soil: stratum mean (one plot of its own)"
    assert rows.loc["all", "plots"] == 3
    other = pick(frame, "parcel", "soil").loc["y"]
    assert other["method"] == "domain ratio of means"
    assert other["density_t_c_ha"] == pytest.approx(soil[1:].mean())
    note = findings.set_index("rule").loc["stratum mean for a parcel"]
    assert "1 of 2 parcels (4.00 ha) have fewer than two plots with soil" in note["message"]


def test_mean_of_strata_is_weighted_by_the_share_of_the_parcel() -> None:
    """By hand: of four trees plots in the parcel one stands for 30 ha, three for 10 ha each."""
    stratum = ["a"] * 4 + ["b"] * 6
    soil = [np.nan, 10.0, 20.0, 30.0, np.nan, np.nan, np.nan, 50.0, 60.0, 70.0]
    table = parts_table(
        {"above_ground.trees": list(np.arange(10.0)), "soil.soil": soil},
        stratum=stratum,
        parcel=["x"] + [""] * 3 + ["x"] * 3 + [""] * 3,
    )
    row = pick(run(table, {"a": 120.0, "b": 60.0}, {"x": 9.0})[0], "parcel", "soil").loc["x"]
    assert row["density_t_c_ha"] == pytest.approx(0.5 * 20 + 0.5 * 60)
    assert row["density_se"] ** 2 == pytest.approx(0.25 * 100 * (1 + 1 / 3) * 2)


def test_parcel_with_one_plot_of_anything_has_no_figure() -> None:
    table = parts_table(
        {"above_ground.trees": [1, 2, 3, 4], "soil.soil": [5, 6, np.nan, 7]}, parcel=["x", "y", "y", ""]
    )
    frame, findings = run(table, {"S": 10.0}, {"x": 4.0, "y": 5.0, "z": 1.0})
    for parcel, plots in (("x", 1), ("z", 0)):
        rows = frame[(frame["by"] == "parcel") & (frame["unit"] == parcel)]
        assert rows[FIGURES].isna().all(axis=None)
        assert set(rows["method"]) == {f"not estimable: {plots} plot(s)"}
    assert findings.set_index("rule").loc["parcel not estimable", "value"] == "2"


def test_pool_measured_at_one_survey_only() -> None:
    parts = {"above_ground.trees": [10, 20, 40], "dead_wood.standing": [1, 2, 5], "soil.soil": [50, 60, 90]}
    first = parts_table(parts | {"soil.soil": [np.nan] * 3}, parcel="x")
    table = pd.concat([first, parts_table(parts, survey="2024", parcel="x")])
    frame, findings = run(table, {"S": 10.0}, {"x": 3.0}, surveys=["2014", "2024"])
    for by in ("inventory", "stratum", "parcel"):
        rows = frame[(frame["by"] == by) & (frame["survey"] == "2014")].set_index("pool")
        assert rows.loc["soil", FIGURES].isna().all()
        assert rows.loc["soil", "method"] == "not estimable: soil not measured"
        assert rows.loc["all", "method"].endswith("; without soil: not measured")
        added = rows.loc["above_ground", "density_t_c_ha"] + rows.loc["dead_wood", "density_t_c_ha"]
        assert rows.loc["all", "density_t_c_ha"] == pytest.approx(added)
    later = whole(frame, survey="2024")
    assert later["density_t_c_ha"] == pytest.approx(70 / 3 + 8 / 3 + 200 / 3)
    assert "without" not in later["method"]
    told = findings.set_index("rule").loc["pool left out of the sum"]
    assert told["column"] == "soil"
    assert told["survey"] == "2014"
    assert "Missing is not zero" in told["message"]
    assert "stratum not estimable" not in set(findings["rule"])


def test_pool_that_lacks_one_part_everywhere_has_no_figure() -> None:
    table = parts_table({"above_ground.trees": [10, 20, 40], "dead_wood.down": [np.nan] * 3})
    rows = inventory(run(table, {"S": 10.0})[0])
    assert rows.loc["dead_wood", "method"] == "not estimable: dead_wood.down not measured"
    assert np.isnan(rows.loc["dead_wood", "stock_t_c"])
    assert rows.loc["all", "method"] == "stratified ratio of means; without dead_wood: dead_wood.down not measured"


def test_stratum_short_of_one_part() -> None:
    """A pool that a stratum is short of is left out of the sum there, and its area is stated."""
    table = parts_table(
        {"above_ground.trees": [1, 2, 3, 4, 6], "dead_wood.down": [1, 2, 3, np.nan, 5], "soil.soil": [7, 8, 6, 9, 5]},
        stratum=["a", "a", "a", "b", "b"],
    )
    frame, findings = run(table, {"a": 10.0, "b": 5.0})
    rows, short = inventory(frame), frame[(frame["by"] == "stratum") & (frame["unit"] == "b")].set_index("pool")
    assert short.loc["dead_wood", "method"] == "not estimable: 1 plot(s) with dead_wood.down"
    assert short.loc["all", "method"] == "ratio of means; without dead_wood: 1 plot(s) with dead_wood.down"
    assert short.loc["all", "density_t_c_ha"] == 5 + 7
    assert list(rows["area_ha"]) == [15, 10, 15, 15]
    assert rows.loc["all", "stock_t_c"] == pytest.approx(rows["stock_t_c"].iloc[:3].sum())
    assert rows.loc["all", "stock_t_c"] == pytest.approx(10 * (2 + 2 + 7) + 5 * (5 + 7))
    assert rows.loc["all", "method"].endswith("; dead_wood on 10.00 of 15.00 ha")
    strata = pick(frame, "stratum")
    assert rows.loc["all", "stock_se"] ** 2 == pytest.approx((strata["stock_se"] ** 2).sum())
    loud = findings.set_index("rule").loc["stratum not estimable"]
    assert "with dead_wood.down" in loud["message"]


def test_areas_unknown() -> None:
    table = parts_table({"above_ground.trees": [1, 2, 3, 4], "soil.soil": [5, np.nan, 7, 8]}, stratum=list("aabb"))
    frame, _ = run(pd.concat([table, table.assign(plot=list("efgh"))]), {"a": np.nan, "b": 2.0})
    assert "inventory" not in set(frame["by"])
    rows = pick(frame, "stratum")
    assert rows["density_t_c_ha"].notna().all()
    assert np.isnan(rows.loc["a", "stock_t_c"])
    single = inventory(run(table.assign(stratum="S"), {"S": np.nan})[0])
    assert single.loc["all", "density_t_c_ha"] == pytest.approx(2.5 + 20 / 3)


def test_empty_table_and_survey_without_plots() -> None:
    table = parts_table({"above_ground.trees": [1, 2, 3]})
    frame, _ = run(table, {"S": 1.0}, {"x": 1.0}, surveys=["2014", "2024"])
    later = frame[frame["survey"] == "2024"]
    assert set(later["method"]) == {"not estimable: 0 plot(s)"}
    assert later[FIGURES].isna().all(axis=None)
    frame, _ = run(table.iloc[:0], {"S": 1.0}, {"x": 1.0})
    assert set(frame["method"]) == {"not estimable: 0 plot(s)"}


@pytest.mark.parametrize(
    ("sums", "message"),
    [
        ({"above_ground": ["a"]}, "pool 'soil' has no parts"),
        ({"above_ground": ["a"], "soil": []}, "pool 'soil' has no parts"),
        ({"above_ground": ["a"], "soil": ["a"]}, "part 'a' counts twice"),
        ({"above_ground": ["a"], "soil": ["s"], "all": ["a"]}, "'all' is not the sum of the pools"),
        ({"above_ground": ["a"], "soil": [f"s{i}" for i in range(40)]}, "41 parts are too many"),
    ],
)
def test_wrong_sums(sums: dict[str, list[str]], message: str) -> None:
    with pytest.raises(UserError, match=message):
        read_sums(sums, ["above_ground", "soil"])


def test_missing_column_of_a_part() -> None:
    with pytest.raises(UserError, match=r"no column dead_wood.down.*one column per part"):
        run(parts_table({"above_ground.trees": [1, 2]}).drop(columns="dead_wood.down"), {"S": 1.0})


def test_all_may_be_given() -> None:
    sums = SUMS | {"all": PARTS[::-1]}
    assert read_sums(sums, list(SUMS)).parts == PARTS
    assert read_sums(sums, [*SUMS, "all"]).names == [*SUMS, "all"]


def test_many_plots_and_parcels_take_seconds() -> None:
    """A tenth of the intended load, with a generous limit: no loop over plots or parcels has crept in."""
    rng = np.random.default_rng(1)
    count, parcels = 20_000, 2_000
    values = {part: rng.gamma(4.0, 20.0, count) for part in PARTS}
    values["soil.soil"][rng.random(count) < 0.9] = np.nan
    values["dead_wood.down"][rng.random(count) < 0.5] = np.nan
    place = rng.integers(0, parcels, count)
    table = parts_table(values, parcel=[f"c{i}" for i in place], stratum=[f"s{i}" for i in place % 8])
    began = perf_counter()
    frame, _ = run(table, {f"s{i}": 1000.0 for i in range(8)}, {f"c{i}": 4.0 for i in range(parcels)})
    assert perf_counter() - began < 10
    assert len(frame) == 4 * 2009
    assert frame["density_t_c_ha"].notna().mean() > 0.99
