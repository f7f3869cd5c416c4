"""Trend over several surveys: closed forms, generalised least squares beside another package, coverage, sums, ends."""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from estimate_frames import NAME, POOL, change, parcel_table, pick, plot_table, strata_table, whole
from hypothesis import given, settings
from hypothesis import strategies as st

from landcarbon.errors import UserError
from landcarbon.estimate.overlap import covariance, survey_table, weighted_variance
from landcarbon.estimate.tables import read_plots
from landcarbon.estimate.trend import TREND_COLUMNS, estimate_trend
from landcarbon.estimate.trend_lines import line_weights, misfit, trend_lines

SURVEYS = ["2004", "2009", "2014", "2019"]
SLOPES = ["slope_t_c_yr", "slope_se", "slope_low", "slope_high", "slope_t_c_ha_yr", "slope_t_c_ha_yr_se"]


def run(table, strata, parcels=None, *, surveys=SURVEYS, pools=(POOL,), sums=None, confidence=0.95):
    return estimate_trend(
        table, strata, parcels, surveys, pools=pools, confidence=confidence, inventory_name=NAME, sums=sums
    )


def chain(
    values: np.ndarray, keep: np.ndarray | None = None, days: np.ndarray | None = None, **columns: object
) -> pd.DataFrame:
    """Plot table of a chain of surveys from an array (plots, surveys); ``keep`` says which plots were visited."""
    keep = np.ones(values.shape, dtype=bool) if keep is None else keep
    parts = []
    for place, name in enumerate(SURVEYS[: values.shape[1]]):
        here = keep[:, place]
        late = 0 if days is None else days[here, place]
        own = {key: np.asarray(column)[here] for key, column in columns.items()}
        parts.append(
            plot_table(
                values[here, place],
                survey=name,
                plot=np.array([f"p{i:03d}" for i in range(len(values))])[here],
                date=pd.Timestamp(f"{name}-07-01") + pd.to_timedelta(late, unit="D"),
                **own,
            )
        )
    return pd.concat(parts, ignore_index=True)


def grown(plots: int, seed: int = 0, noise: float = 3.0, surveys: int = 4) -> np.ndarray:
    rng = np.random.default_rng(seed)
    years = 5.0 * np.arange(surveys)
    start, rate = rng.normal(100, 20, plots), rng.normal(2, 0.5, plots)
    return start[:, None] + rate[:, None] * years + rng.normal(0, noise, (plots, surveys))


def years_of(table: pd.DataFrame) -> np.ndarray:
    dates = [table.loc[table["survey"] == name, "date"].mean() for name in SURVEYS if (table["survey"] == name).any()]
    return np.array([(date - dates[0]).total_seconds() for date in dates]) / 86400 / 365.25


def test_the_slope_stays_within_the_rates_it_is_made_of() -> None:
    """Property: almost perfect repeats with a bend, whose best weights would count one interval against the others."""
    rng = np.random.default_rng(2)
    level = rng.normal(100, 25, 40)
    # The spread grows with time, so that the first survey tells nearly all about the second.
    values = np.stack([level, 1.10 * level + 1.0, 1.32 * level + 9.0], axis=1) + rng.normal(0, 0.05, (40, 3))
    table = chain(values)
    row = whole(run(table, strata_table({"S": 20}), surveys=SURVEYS[:3])[0])
    rates = np.diff(table.groupby("survey")[POOL].mean().to_numpy()) / np.diff(years_of(table))
    assert rates.min() < row["slope_t_c_ha_yr"] < rates.max()
    ordinary = np.polyfit(years_of(table), values.mean(axis=0), 1)[0]
    assert row["slope_t_c_ha_yr"] == pytest.approx(ordinary, rel=1e-9)


def test_ordinary_least_squares_of_few_repeated_plots() -> None:
    """Closed form: all plots repeated, few of them: the mean of the slopes of the plots, and its standard error."""
    values = grown(8)
    table = chain(values)
    frame, findings = run(table, strata_table({"S": 20}))
    row = whole(frame)
    own = np.polyfit(years_of(table), values.T, 1)[0]
    assert list(frame.columns) == TREND_COLUMNS
    assert row["slope_t_c_ha_yr"] == pytest.approx(own.mean(), rel=1e-9)
    assert row["slope_t_c_ha_yr_se"] == pytest.approx(own.std(ddof=1) / np.sqrt(8), rel=1e-9)
    assert row["slope_t_c_yr"] == pytest.approx(20 * own.mean())
    assert row["df"] == pytest.approx(7)
    half = 2.364624 * row["slope_se"]  # published: Student's t, 7 degrees of freedom, 97.5 %, from any table
    assert row["slope_high"] - row["slope_t_c_yr"] == pytest.approx(half, rel=1e-6)
    assert row["co2_t_yr"] == pytest.approx(-44 / 12 * row["slope_t_c_yr"])
    assert row["method"] == "least squares over 2004, 2009, 2014, 2019"
    assert (row["surveys"], row["since"], row["until"]) == (4, "2004", "2019")
    assert np.isnan(row["lack_of_fit"])
    assert findings.empty


def test_generalised_least_squares_beside_statsmodels() -> None:
    """Independent: statsmodels GLS on the survey means with the covariance matrix of the plots (numpy)."""
    values = grown(40, noise=8.0)
    table = chain(values)
    row = whole(run(table, strata_table({"S": 20}))[0])
    years = years_of(table)
    matrix = np.cov(values.T) / 40
    fit = sm.GLS(values.mean(axis=0), sm.add_constant(years), sigma=matrix).fit()
    assert row["slope_t_c_ha_yr"] == pytest.approx(fit.params[1], rel=1e-9)
    factor = 39 * 38 / (37 * 36)  # two weights estimated with 39 degrees of freedom
    se = np.sqrt(fit.normalized_cov_params[1, 1] * factor)
    assert row["slope_t_c_ha_yr_se"] == pytest.approx(se, rel=1e-9)
    residual = values.mean(axis=0) - fit.fittedvalues
    square = residual @ np.linalg.solve(matrix, residual)
    from scipy.stats import f

    assert row["lack_of_fit"] == pytest.approx(f.sf(square * 38 / (39 * 2), 2, 38), rel=1e-6)
    assert row["method"] == "generalised least squares over 2004, 2009, 2014, 2019"


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10_000), st.integers(3, 7))
def test_weights_beside_statsmodels(seed: int, surveys: int) -> None:
    """Independent: statsmodels GLS with any covariance matrix."""
    rng = np.random.default_rng(seed)
    years = np.cumsum(rng.uniform(1, 9, surveys))
    root = rng.normal(size=(surveys, surveys + 3))
    matrix, values = root @ root.T, rng.normal(size=surveys)
    weights = line_weights(years[None], np.ones((1, surveys), dtype=bool), matrix)[0]
    fit = sm.GLS(values, sm.add_constant(years), sigma=matrix).fit()
    assert weights @ values == pytest.approx(fit.params[1], rel=1e-6, abs=1e-8)
    assert weights.sum() == pytest.approx(0, abs=1e-9)
    assert weights @ years == pytest.approx(1, rel=1e-9)


def test_weights_leave_missing_surveys_out() -> None:
    """Identity: the weights of the surveys that are there alone."""
    rng = np.random.default_rng(2)
    root = rng.normal(size=(5, 8))
    matrix, years = root @ root.T, np.array([0.0, 4, 11, 15, 21])
    there = np.array([True, False, True, True, True])
    weights = line_weights(np.where(there, years, np.nan)[None], there[None], matrix)[0]
    alone = line_weights(years[there][None], np.ones((1, 4), dtype=bool), matrix[np.ix_(there, there)])[0]
    assert weights[there] == pytest.approx(alone)
    assert weights[1] == 0
    one = np.array([True, False, False, False, False])
    assert np.isnan(line_weights(years[None], one[None], matrix)).all()


def test_covariances_of_two_dates_are_those_of_change() -> None:
    """Identity: with weights -1 and 1 the variance and df are those of the difference, also by parcel."""
    rng = np.random.default_rng(4)
    keep = rng.uniform(size=(60, 2)) < 0.7
    size = rng.uniform(0.3, 1, 60)
    table = chain(
        grown(60, surveys=2), keep, stratum=rng.choice(list("ab"), 60), parcel=rng.choice(list("xyz"), 60), size=size
    )
    strata, parcels = strata_table({"a": 30, "b": 10}), parcel_table({"x": 10, "y": 10, "z": 20})
    frame, _ = change(table, strata, parcels, surveys=("2004", "2009"))
    plots = read_plots(table, strata, parcels, [POOL])
    samples = tuple(plots.sample(name) for name in SURVEYS[:2])
    for by, domains, number in (
        ("stratum", tuple(s.stratum for s in samples), 2),
        ("parcel", tuple(s.parcel for s in samples), 3),
    ):
        made, _ = survey_table(samples, domains, number, plots.units.stratum_area_ha, np.ones((2, 2), dtype=bool))
        told = weighted_variance(made, np.ones((1, number, 2)) * [0, 1], np.tile([-1.0, 1.0], (number, 1)))
        rows = pick(frame, by)
        np.testing.assert_allclose(np.sqrt(told.variance[:, 0]), rows["change_se"] / rows["area_ha"], rtol=1e-9)
        matrix = covariance(made, np.tile([0.0, 1.0], (number, 1)))
        if by == "stratum":
            of_change = matrix[:, 0, 0] + matrix[:, 1, 1] - 2 * matrix[:, 0, 1]
            np.testing.assert_allclose(of_change, told.variance[:, 0], rtol=1e-9)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 10_000), st.floats(0.2, 1.0))
def test_covariances_are_positive_semi_definite(seed: int, share: float) -> None:
    rng = np.random.default_rng(seed)
    keep = rng.uniform(size=(25, 4)) < share
    keep[:2] = True
    table = chain(grown(25, seed), keep, stratum=rng.choice(list("ab"), 25), parcel=rng.choice(list("xyz"), 25))
    plots = read_plots(table, strata_table({"a": 3, "b": 1}), parcel_table(dict.fromkeys("xyz", 1)), [POOL])
    samples = tuple(plots.sample(name) for name in SURVEYS)
    for domains, number in ((tuple(s.stratum for s in samples), 2), (tuple(s.parcel for s in samples), 3)):
        made, _ = survey_table(samples, domains, number, plots.units.stratum_area_ha, np.ones((2, 2), dtype=bool))
        matrix = covariance(made, np.tile([0.0, 1.0], (number, 1)))
        assert np.linalg.eigvalsh(matrix).min() >= -1e-9 * max(matrix.max(), 1e-9)


def test_strata_and_pools_add_up() -> None:
    """Identity: over strata with different dates, plots and pools, as for change."""
    rng = np.random.default_rng(5)
    values = grown(60, 5)
    keep = rng.uniform(size=values.shape) < 0.8
    days = rng.integers(-300, 300, values.shape)
    stratum = rng.choice(list("abc"), 60)
    table = chain(values, keep, days, stratum=stratum, parcel=rng.choice(list("xy"), 60))
    table["soil"] = np.where(rng.uniform(size=len(table)) < 0.7, rng.normal(60, 9, len(table)), np.nan)
    strata = strata_table({"a": 10, "b": 20, "c": 30})
    frame, _ = run(table, strata, parcel_table({"x": 30, "y": 30}), pools=(POOL, "soil"))
    wide = frame.pivot(index=["by", "unit"], columns="pool", values="slope_t_c_yr")
    np.testing.assert_allclose(wide[POOL] + wide["soil"], wide["all"], rtol=1e-9)
    strata_sum = frame[frame["by"] == "stratum"].groupby("pool")["slope_t_c_yr"].sum()
    total = frame[frame["by"] == "inventory"].set_index("pool")["slope_t_c_yr"]
    np.testing.assert_allclose(strata_sum[total.index], total, rtol=1e-9)


def test_pool_measured_twice_is_left_out_and_named() -> None:
    table = chain(grown(20))
    soil = np.random.default_rng(1).normal(60, 9, len(table))
    table["soil"] = np.where(table["survey"].isin(SURVEYS[:2]), soil, np.nan)
    frame, findings = run(table, strata_table({"S": 1}), pools=(POOL, "soil"))
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    assert np.isnan(rows.loc["soil", "slope_t_c_yr"])
    assert rows.loc["soil", "method"] == "not estimable: measured at 2 of 4 surveys"
    assert rows.loc["all", "slope_t_c_yr"] == rows.loc[POOL, "slope_t_c_yr"]
    assert rows.loc["all", "method"].endswith("; without soil")
    told = findings.set_index("rule").loc["pool without a trend"]
    assert "soil was measured at 2 of 4 surveys (2004, 2009)" in told["message"]


def test_pool_measured_at_three_of_four_surveys_has_its_own_weights() -> None:
    table = chain(grown(30))
    soil = np.random.default_rng(1).normal(60, 9, len(table))
    table["soil"] = np.where(table["survey"] != "2009", soil, np.nan)
    frame, _ = run(table, strata_table({"S": 2}), pools=(POOL, "soil"))
    rows = frame[frame["by"] == "inventory"].set_index("pool")
    assert list(rows["surveys"]) == [4, 3, 4]
    alone = table[table["survey"] != "2009"].assign(**{POOL: lambda t: t["soil"]})
    other = whole(run(alone, strata_table({"S": 2}), surveys=["2004", "2014", "2019"])[0])
    assert rows.loc["soil", "slope_t_c_yr"] == pytest.approx(other["slope_t_c_yr"])
    assert rows.loc["all", "slope_t_c_yr"] == pytest.approx(rows["slope_t_c_yr"].iloc[:2].sum())
    assert rows.loc["all", "slope_se"] > rows.loc[POOL, "slope_se"]


def test_a_straight_line_is_found_exactly() -> None:
    """Identity: plots that all grow by 1.5 t C/ha/yr, visited in different years; slope 1.5, no error."""
    rng = np.random.default_rng(8)
    days = rng.integers(-600, 600, (20, 4))
    start = rng.normal(100, 20, 20)
    stamps = np.array([pd.Timestamp(f"{name}-07-01").value / 8.64e13 for name in SURVEYS])
    values = start[:, None] + 1.5 * (stamps + days - stamps[0]) / 365.25
    row = whole(run(chain(values, days=days), strata_table({"S": 1}))[0])
    assert row["slope_t_c_ha_yr"] == pytest.approx(1.5, rel=1e-9)
    assert row["slope_t_c_ha_yr_se"] == pytest.approx(0, abs=1e-6)


def test_bent_line_is_reported() -> None:
    rng = np.random.default_rng(9)
    values = np.array([100, 140, 150, 120]) + rng.normal(0, 15, 40)[:, None] + rng.normal(0, 3, (40, 4))
    frame, findings = run(chain(values), strata_table({"S": 1}))
    assert whole(frame)["lack_of_fit"] < 1e-6
    assert "trend not straight" in set(findings["rule"])
    straight, findings = run(chain(grown(40, seed=3)), strata_table({"S": 1}))
    assert whole(straight)["lack_of_fit"] > 0.05
    assert "trend not straight" not in set(findings["rule"])


def test_lack_of_fit_is_uniform_for_straight_lines() -> None:
    """Simulation: of straight lines a share p has a lack of fit below p."""
    rng = np.random.default_rng(10)
    repeats, plots = 4000, 20
    years = np.array([0.0, 5, 9, 16])
    root = np.linalg.cholesky(np.eye(4) + 2.0)
    values = 3 * years + rng.normal(size=(repeats, plots, 4)) @ root.T
    mean = values.mean(axis=1)
    apart = values - mean[:, None]
    matrix = np.einsum("rni,rnj->rij", apart, apart) / (plots - 1) / plots
    there = np.ones((repeats, 4), dtype=bool)
    share = misfit(mean, np.tile(years, (repeats, 1)), there, matrix, np.full(repeats, plots - 1.0))
    assert np.isfinite(share).all()
    for level in (0.05, 0.5, 0.9):
        assert (share < level).mean() == pytest.approx(level, abs=4 * np.sqrt(0.25 / repeats))


@pytest.mark.parametrize(("plots", "share"), [(6, 1.0), (15, 1.0), (30, 0.4)])
def test_intervals_hold_what_they_say(plots: int, share: float) -> None:
    """Simulation, seeded: 90 to 98.5 % of the 95 % intervals hold the true slope; plots repeated fully or partly."""
    rng = np.random.default_rng(int(plots * 10 + 10 * share))
    held, errors, repeats = 0, [], 120
    for _ in range(repeats):
        values = grown(plots, int(rng.integers(1 << 30)), noise=6.0)
        keep = rng.uniform(size=values.shape) < share
        keep[:3] = True
        row = whole(run(chain(values, keep), strata_table({"S": 1}))[0])
        held += row["slope_low"] <= 2.0 * 365.25 * 5 / 1826.25 <= row["slope_high"]
        errors.append((row["slope_t_c_yr"] - 2.0, row["slope_se"]))
    slope, se = np.array(errors).T
    assert 0.90 <= held / repeats <= 0.985
    assert np.sqrt((se**2).mean()) == pytest.approx(slope.std(), rel=0.2)
    assert abs(slope.mean()) < 4 * slope.std() / np.sqrt(repeats)


def test_better_than_ordinary_least_squares_with_part_of_the_plots_repeated() -> None:
    """Simulation: replaced plots with very different levels; weighing by the covariances beats ordinary weights."""
    rng = np.random.default_rng(12)
    made, plain = [], []
    for _ in range(60):
        values = grown(60, int(rng.integers(1 << 30)), noise=2.0)
        keep = np.ones(values.shape, dtype=bool)
        keep[40:, :2] = False  # a third of the plots joins at the third survey
        table = chain(values, keep)
        made.append(whole(run(table, strata_table({"S": 1}))[0])["slope_t_c_ha_yr"])
        means = table.groupby("survey")[POOL].mean().to_numpy()
        plain.append(np.polyfit(years_of(table), means, 1)[0])
    assert np.std(made) < 0.8 * np.std(plain)


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 500))
def test_order_of_rows_does_not_matter(seed: int) -> None:
    rng = np.random.default_rng(seed)
    table = chain(grown(25, seed), rng.uniform(size=(25, 4)) < 0.9, stratum=rng.choice(list("ab"), 25))
    strata = strata_table({"a": 3, "b": 1})
    frame, _ = run(table, strata)
    mixed, _ = run(table.sample(frac=1.0, random_state=seed), strata)
    pd.testing.assert_frame_equal(mixed, frame, rtol=1e-9)


@settings(max_examples=10, deadline=None)
@given(st.integers(0, 500))
def test_reversed_time_flips_the_sign(seed: int) -> None:
    """Identity: values of the surveys exchanged first for last, at mirrored dates."""
    values = grown(25, seed)
    table = chain(values)
    back = table.copy()
    middle = table["date"].min() + (table["date"].max() - table["date"].min()) / 2
    back["date"] = middle + (middle - table["date"])
    back["survey"] = table["survey"].map(dict(zip(SURVEYS, SURVEYS[::-1], strict=True)))
    there, here = (whole(run(one, strata_table({"S": 1}))[0]) for one in (table, back))
    assert here["slope_t_c_yr"] == pytest.approx(-there["slope_t_c_yr"], rel=1e-8)
    assert here["slope_se"] == pytest.approx(there["slope_se"], rel=1e-8)


def test_no_change_gives_zero() -> None:
    start = np.random.default_rng(0).normal(100, 10, 12)
    row = whole(run(chain(np.repeat(start[:, None], 4, axis=1)), strata_table({"S": 1}))[0])
    assert row["slope_t_c_yr"] == pytest.approx(0, abs=1e-9)
    assert row["slope_se"] == pytest.approx(0, abs=1e-9)


def test_stratum_with_a_gap_uses_its_own_surveys() -> None:
    values = grown(40)
    stratum = np.array(list("ab"))[np.arange(40) % 2]
    keep = np.ones(values.shape, dtype=bool)
    keep[stratum == "b", 1] = False
    frame, _ = run(chain(values, keep, stratum=stratum), strata_table({"a": 1, "b": 1}))
    rows = pick(frame, "stratum")
    assert list(rows["surveys"]) == [4, 3]
    assert rows.loc["b", "method"].endswith("over 2004, 2014, 2019")
    assert whole(frame)["slope_t_c_yr"] == pytest.approx(rows["slope_t_c_yr"].sum())
    assert np.isnan(whole(frame)["lack_of_fit"])


def test_stratum_with_two_surveys_is_missing_loudly() -> None:
    values = grown(40)
    stratum = np.array(list("ab"))[np.arange(40) % 2]
    keep = np.ones(values.shape, dtype=bool)
    keep[stratum == "b", 1:3] = False
    frame, findings = run(chain(values, keep, stratum=stratum), strata_table({"a": 8, "b": 2}))
    rows = pick(frame, "stratum")
    assert rows.loc["b", "method"] == "not estimable: fewer than 3 surveys with two dated plots"
    assert whole(frame)["area_ha"] == 8
    told = findings.set_index("rule").loc["unit without a trend"]
    assert "2.00 ha" in told["message"]
    assert "missing from the trend of the inventory" in told["message"]


def test_without_dates_there_is_no_trend() -> None:
    frame, findings = run(chain(grown(10)).assign(date=pd.NaT), strata_table({"S": 1}))
    assert frame[SLOPES].isna().all().all()
    told = findings.loc[findings["rule"] == "unit without a trend", "message"]
    assert told.str.contains("have no trend").all()
    assert not told.str.contains("0.00 ha", regex=False).any(), "an unknown area is not an area of zero"


def test_degenerate_input_ends_well() -> None:
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        one = chain(grown(1))
        frame, _ = run(one, strata_table({"S": 1, "empty": 2}), parcel_table({"x": 0}))
        assert frame[SLOPES].isna().all().all()
        two = chain(grown(2), parcel=["x", "x"])
        frame, _ = run(two, strata_table({"S": 1}), parcel_table({"x": 0, "bare": 1}))
        assert np.isfinite(whole(frame)["slope_se"])
        rows = pick(frame, "parcel")
        assert rows.loc["x", "slope_t_c_yr"] == 0
        assert np.isnan(rows.loc["bare", "slope_t_c_yr"])
        same = chain(np.full((6, 4), 7.0))
        assert whole(run(same, strata_table({"S": np.nan}))[0])["slope_t_c_ha_yr"] == pytest.approx(0)


def test_areas_unknown() -> None:
    values = grown(40)
    stratum = np.array(list("ab"))[np.arange(40) % 2]
    frame, _ = run(chain(values, stratum=stratum), strata_table({"a": np.nan, "b": np.nan}))
    assert "inventory" not in set(frame["by"])
    assert pick(frame, "stratum")["slope_t_c_ha_yr"].notna().all()
    assert pick(frame, "stratum")["slope_t_c_yr"].isna().all()


def test_parcel_that_is_everything_equals_the_inventory() -> None:
    table = chain(grown(25), parcel=["x"] * 25)
    frame, _ = run(table, strata_table({"S": 4}), parcel_table({"x": 4}))
    row, parcel = whole(frame), pick(frame, "parcel").loc["x"]
    for name in SLOPES:
        assert parcel[name] == pytest.approx(row[name], rel=1e-9)


def test_parts_as_sums() -> None:
    """Identity: a pool cut in two parts on the same plots."""
    table = chain(grown(25))
    share = np.random.default_rng(3).uniform(0.2, 0.8, len(table))
    table = table.assign(**{"above_ground.trees": share * table[POOL], "above_ground.small": (1 - share) * table[POOL]})
    parts = {POOL: ["above_ground.trees", "above_ground.small"]}
    plain, cut = (run(table, strata_table({"S": 4}), sums=sums)[0] for sums in (None, parts))
    pd.testing.assert_frame_equal(cut, plain, rtol=1e-8)


def test_wrong_surveys() -> None:
    table = chain(grown(10))
    with pytest.raises(UserError, match="a trend needs 3 surveys, given: 2004, 2009"):
        run(table, strata_table({"S": 1}), surveys=SURVEYS[:2])
    with pytest.raises(UserError, match="survey '2004' is given twice"):
        run(table, strata_table({"S": 1}), surveys=["2004", "2004", "2009"])
    with pytest.raises(UserError, match="survey '1999' has no plots"):
        run(table, strata_table({"S": 1}), surveys=["1999", "2004", "2009"])


def test_lines_of_units_are_array_code() -> None:
    """Many parcels in one call; a figure of one does not depend on the others."""
    rng = np.random.default_rng(6)
    parcel = np.array([f"x{i:03d}" for i in range(100)])[rng.integers(0, 100, 600)]
    table = chain(grown(600), parcel=parcel)
    parcels = parcel_table({f"x{i:03d}": 1 for i in range(100)})
    rows = pick(run(table, strata_table({"S": 100}), parcels)[0], "parcel")
    few = pick(run(table, strata_table({"S": 100}), parcel_table({"x007": 1, "x050": 1}))[0], "parcel")
    for name in SLOPES:
        np.testing.assert_allclose(few[name], rows.loc[few.index, name], rtol=1e-9)
    assert trend_lines.__module__ == "landcarbon.estimate.trend_lines"
