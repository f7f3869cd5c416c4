"""Two-phase sampling for stratification: published and computed values, and what reaches the tables."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
from estimate_frames import POOL, cases, change, pick, plot_table, stocks, whole

from landcarbon.errors import UserError
from landcarbon.estimate.difference import difference_of_ratios
from landcarbon.estimate.tables import read_plots
from landcarbon.estimate.two_phase import (
    double_sampling,
    double_sampling_exact,
    first_phase_areas,
    with_first_phase,
)


def statistics(case: dict[str, Any], counts: str) -> dict[str, np.ndarray]:
    given = case["inputs"]
    names = list(given[counts])
    values = [np.array(given["phase2"][name], dtype=float) for name in names]
    return {
        "first": np.array([given[counts][name] for name in names], dtype=float),
        "second": np.array([len(value) for value in values], dtype=float),
        "mean": np.array([value.mean() for value in values]),
        "spread": np.array([value.var(ddof=1) for value in values]),
    }


def tables(case: dict[str, Any], counts: str, area_ha: float) -> tuple[pd.DataFrame, pd.DataFrame]:
    given = case["inputs"]
    parts = [
        plot_table(values, plot=[f"{name}{i}" for i in range(len(values))], stratum=name)
        for name, values in given["phase2"].items()
    ]
    points = np.array([given[counts][name] for name in given["phase2"]], dtype=float)
    strata = pd.DataFrame({"stratum": list(given["phase2"]), "area_ha": first_phase_areas(points, area_ha)})
    return pd.concat(parts, ignore_index=True), strata.assign(first_phase=points)


def test_published_example() -> None:
    """PS-10, published: Brus (2022) section 11.1, approximate and exact standard error."""
    case = cases("published")["PS-10"]
    found, printed = statistics(case, "n1_by_stratum"), case["printed"]
    plain = double_sampling(found["first"], found["mean"], found["spread"] / found["second"])
    exact = double_sampling_exact(found["first"], found["second"], found["mean"], found["spread"], case["inputs"]["N"])
    assert plain.mean == pytest.approx(printed["mean"]["value"], abs=0.51e-3)
    assert np.sqrt(plain.variance) == pytest.approx(printed["se_approximate"]["value"], abs=0.05)
    assert np.sqrt(exact.variance) == pytest.approx(printed["se_exact"]["value"], abs=0.5e-6)


def test_computed_case() -> None:
    """A-TWO-2, independent: by formula, and R package survey 4.1.1 (twophase), which is the exact form without N."""
    case = cases("computed")["A-TWO-2"]
    found, expected = statistics(case, "n1_by_class"), case["expected"]
    plain = double_sampling(found["first"], found["mean"], found["spread"] / found["second"])
    assert plain.mean == pytest.approx(expected["estimate"], rel=1e-12)
    assert np.sqrt(plain.variance) == pytest.approx(expected["se_formula"], rel=1e-12)
    # the package takes s^2 (n_2h - 1) / n_2h for the spread within and n_1 for n_1 - 1, so it is near the exact form:
    # V = sum w^2 s^2 / n_2 (1 - n_2 / n_1h) + (within + between) / n_1
    first, second, spread = found["first"], found["second"], found["spread"]
    share, points = first / first.sum(), first.sum()
    rest = float(np.sum(share**2 * spread / second * (1 - second / first)))
    within, between = float(np.sum(share * spread * (second - 1) / second)), plain.between * points
    package = expected["survey_twophase"]["se"] ** 2
    assert rest + (within + between) / points == pytest.approx(package, rel=1e-12)
    exact = double_sampling_exact(first, second, found["mean"], spread)
    assert exact.variance == pytest.approx(package, rel=0.01)


@pytest.mark.parametrize("sums", [None, {POOL: [POOL]}])
def test_inventory_row_carries_the_error_of_areas(sums: dict[str, list[str]] | None) -> None:
    """A-TWO-2 through the tables."""
    case = cases("computed")["A-TWO-2"]
    table, strata = tables(case, "n1_by_class", 500.0)
    frame, _ = stocks(table, strata, sums=sums)
    row, rows = whole(frame), pick(frame, "stratum")
    assert row["density_t_c_ha"] == pytest.approx(case["expected"]["estimate"], rel=1e-12)
    assert row["density_se"] == pytest.approx(case["expected"]["se_formula"], rel=1e-12)
    assert row["method"] == "stratified ratio of means, two-phase"
    np.testing.assert_allclose(
        rows["density_se"], stocks(table, strata[["stratum", "area_ha"]])[0].pipe(pick, "stratum")["density_se"]
    )
    # binomial error of the share, by hand
    share = strata["first_phase"].to_numpy() / strata["first_phase"].sum()
    area_se = 500.0 * np.sqrt(share * (1 - share) / strata["first_phase"].sum())
    expected = np.hypot(rows["area_ha"] * rows["density_se"], rows["density_t_c_ha"] * area_se)
    np.testing.assert_allclose(rows["stock_se"], expected, rtol=1e-12)
    assert set(rows["method"]) == {"ratio of means, two-phase"}


def test_strata_of_known_area_beside() -> None:
    """By hand: the part told by points has its share of the land squared."""
    case = cases("computed")["A-TWO-2"]
    table, strata = tables(case, "n1_by_class", 500.0)
    more = plot_table([10.0, 30.0, 20.0], plot=["m1", "m2", "m3"], stratum="known")
    strata = pd.concat([strata, pd.DataFrame({"stratum": ["known"], "area_ha": [250.0], "first_phase": [np.nan]})])
    row = whole(stocks(pd.concat([table, more]), strata)[0])
    known = np.array([10.0, 30.0, 20.0]).var(ddof=1) / 3
    two = case["expected"]["se_formula"] ** 2
    assert row["density_se"] ** 2 == pytest.approx((2 / 3) ** 2 * two + (1 / 3) ** 2 * known, rel=1e-12)


def test_change_takes_the_change_density() -> None:
    case = cases("computed")["A-TWO-2"]
    table, strata = tables(case, "n1_by_class", 500.0)
    later = table.assign(survey="t2", **{name: 1.1 * table[name] for name in (POOL, "all")})
    plots = read_plots(pd.concat([table.assign(survey="t1"), later]), strata, None, [POOL])
    samples = plots.sample("t1"), plots.sample("t2")
    area, allowed = plots.units.stratum_area_ha, np.ones((3, 2), dtype=bool)
    by_stratum = difference_of_ratios(samples, (samples[0].stratum, samples[1].stratum), 3, area, allowed)
    domains = (np.zeros_like(samples[0].stratum), np.zeros_like(samples[1].stratum))
    made = with_first_phase(difference_of_ratios(samples, domains, 1, area, allowed), by_stratum, plots.units)
    # every plot grew by a tenth, so the change is a tenth of the stock in every respect
    assert made.density[0, 0] == pytest.approx(0.1 * case["expected"]["estimate"], rel=1e-9)
    assert np.sqrt(made.variance[0, 0]) == pytest.approx(0.1 * case["expected"]["se_formula"], rel=1e-9)
    assert np.isfinite(made.df).all()


def test_simulated_two_phases() -> None:
    """On average the variance is that of the estimates: 3 strata, areas from 60 points, 20 of them measured."""
    rng = np.random.default_rng(9)
    share, centre = np.array([0.5, 0.3, 0.2]), np.array([100.0, 60.0, 10.0])
    estimate, variance = [], []
    for _ in range(1500):
        first = rng.multinomial(60, share).astype(float)
        count = np.maximum(np.round(first / 3), 2).astype(int)
        values = [rng.normal(mean, 15.0, number) for mean, number in zip(centre, count, strict=True)]
        mean = np.array([value.mean() for value in values])
        of_mean = np.array([value.var(ddof=1) / len(value) for value in values])
        made = double_sampling(first, mean, of_mean)
        estimate.append(made.mean)
        variance.append(made.variance)
    assert np.mean(variance) == pytest.approx(np.var(estimate), rel=0.1)


def test_change_table_of_two_phases() -> None:
    """The same through the table of changes, with the error of areas in the rows of the strata."""
    case = cases("computed")["A-TWO-2"]
    table, strata = tables(case, "n1_by_class", 500.0)
    later = table.assign(survey="t2", date=pd.Timestamp("2024-07-01"))
    later = later.assign(**{name: 1.1 * table[name] for name in (POOL, "all")})
    frame, _ = change(pd.concat([table.assign(survey="t1"), later]), strata)
    plain, _ = stocks(table, strata)
    row = whole(frame)
    assert row["change_se"] == pytest.approx(0.1 * 500.0 * case["expected"]["se_formula"], rel=1e-9)
    assert row["method"] == "difference of ratio means, paired, two-phase"
    rows, expected = pick(frame, "stratum"), pick(plain, "stratum")
    np.testing.assert_allclose(rows["change_se"], 0.1 * expected["stock_se"], rtol=1e-9)


def test_class_that_the_first_phase_did_not_find() -> None:
    case = cases("computed")["A-TWO-2"]
    table, strata = tables(case, "n1_by_class", 500.0)
    more = pd.concat([strata, pd.DataFrame({"stratum": ["scree"], "area_ha": [0.0], "first_phase": [0.0]})])
    assert whole(stocks(table, more)[0])["stock_se"] == whole(stocks(table, strata)[0])["stock_se"]


def test_points_are_checked() -> None:
    table = plot_table([1.0, 2.0])
    strata = pd.DataFrame({"stratum": ["S"], "area_ha": [10.0], "first_phase": [-1.0]})
    with pytest.raises(UserError, match="negative number of points"):
        stocks(table, strata)
    with pytest.raises(UserError, match="no point of the first phase"):
        double_sampling(np.array([3.0, 0.0]), np.array([1.0, 2.0]), np.array([1.0, 1.0]))
