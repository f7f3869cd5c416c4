"""Change against results computed with general-purpose statistics packages (``data/statistics_computed.json``).

Independent: package, version and call stand beside each case. Tolerance 1e-9 relative (closed forms).
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from estimate_frames import cases, change, pick, plot_table, strata_table, survey_a_tables, whole

from landcarbon.estimate.interval import t_half_width

CASES = {name: case["expected"] for name, case in cases("computed").items()}
CLOSED_FORM = 1e-9
AREA_HA = 2000.0


def test_all_plots_repeated() -> None:
    expected = CASES["A-CHG-1"]
    table, strata, _ = survey_a_tables("paired")
    frame, _ = change(table, strata)
    row, rows = whole(frame), pick(frame, "stratum")
    assert row["change_t_c"] == pytest.approx(expected["total_change"], rel=CLOSED_FORM)
    assert row["change_se"] == pytest.approx(expected["se_total"], rel=CLOSED_FORM)
    assert row["change_t_c"] / AREA_HA == pytest.approx(expected["mean_change"], rel=CLOSED_FORM)
    assert row["method"] == "difference of ratio means, paired"
    half = t_half_width(expected["se_total"], np.array(expected["df_satterthwaite"]), 0.95)
    assert row["change_high"] == pytest.approx(expected["total_change"] + half, rel=CLOSED_FORM)
    assert row["change_low"] == pytest.approx(expected["total_change"] - half, rel=CLOSED_FORM)
    assert list(rows.index) == expected["strata"]["stratum"]
    assert list(rows["plots_paired"]) == expected["strata"]["n"]
    np.testing.assert_allclose(rows["change_t_c"] / rows["area_ha"], expected["strata"]["mean_change"], rtol=1e-9)
    np.testing.assert_allclose(
        (rows["change_se"] / rows["area_ha"]) ** 2 * rows["plots_paired"],
        expected["strata"]["variance_of_differences"],
        rtol=CLOSED_FORM,
    )
    assert row["change_se"] / AREA_HA < 0.7 * expected["se_if_dates_were_independent_wrong"]


def test_all_plots_repeated_by_parcel() -> None:
    expected = CASES["A-CHG-2"]["parcels"]
    frame, _ = change(*survey_a_tables("paired"))
    rows = pick(frame, "parcel")
    assert list(rows.index) == expected["parcel"]
    assert list(rows["plots_paired"]) == expected["n"]
    np.testing.assert_allclose(rows["change_t_c"] / rows["area_ha"], expected["mean_change"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows["change_se"] / rows["area_ha"], expected["se"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows["change_t_c"], expected["total_known_area"], rtol=CLOSED_FORM)
    np.testing.assert_allclose(rows["change_se"], expected["se_total_known_area"], rtol=CLOSED_FORM)


def test_some_plots_repeated() -> None:
    expected = CASES["A-SPR-1"]["difference_of_all_plot_means"]
    table, strata, _ = survey_a_tables()
    frame, _ = change(table, strata)
    row, rows = whole(frame), pick(frame, "stratum")
    assert row["change_t_c"] / AREA_HA == pytest.approx(expected["change"], rel=CLOSED_FORM)
    assert row["change_se"] / AREA_HA == pytest.approx(expected["se"], rel=CLOSED_FORM)
    assert list(rows["plots_since"]) == expected["n1"]
    assert list(rows["plots_until"]) == expected["n2"]
    assert list(rows["plots_paired"]) == expected["m"]
    assert row["method"] == "difference of ratio means, partly paired"
    wrong = CASES["A-SPR-1"]["difference_as_if_independent_wrong_se"]
    assert row["change_se"] / AREA_HA < 0.8 * wrong


def test_no_plot_repeated() -> None:
    """With new plot names at the later date the variances add up: the result named wrong for repeated plots."""
    table, strata, _ = survey_a_tables()
    later = table["survey"] == "t2"
    table = table.assign(plot=table["plot"].where(~later, "new " + table["plot"]))
    row = whole(change(table, strata)[0])
    expected = CASES["A-SPR-1"]["difference_as_if_independent_wrong_se"]
    assert row["change_se"] / AREA_HA == pytest.approx(expected, rel=CLOSED_FORM)
    assert row["method"] == "difference of ratio means, independent"
    assert row["plots_paired"] == 0


def block(count: int, square_sum: float, rng: np.random.Generator) -> np.ndarray:
    """Random values with mean zero and a given sum of squares."""
    values = rng.normal(size=count)
    values -= values.mean()
    return values * np.sqrt(square_sum / (values**2).sum())


GRID = pd.DataFrame(CASES["A-SPR-2"]["results"])


@pytest.mark.parametrize("number", range(len(GRID)))
def test_partial_replacement_with_known_variances(number: int) -> None:
    """Samples with exactly the stated variances and correlation give the variance that theory states."""
    case = GRID.iloc[number]
    n, m = int(case["n"]), int(case["m"])
    rng = np.random.default_rng(number)
    first = block(m, (m - 1) * 900.0, rng)  # S1 = S2 = 30 in every case
    noise = rng.normal(size=m)
    noise -= noise.mean()
    noise -= first * (first @ noise) / (first @ first)
    noise *= np.sqrt((first @ first) / (noise @ noise))
    second = case["rho"] * first + np.sqrt(1 - case["rho"] ** 2) * noise
    one = np.concatenate([first, block(n - m, (n - m) * 900.0, rng)])
    two = np.concatenate([second, block(n - m, (n - m) * 900.0, rng)])
    names = np.array([f"p{i:02d}" for i in range(2 * n - m)])
    later = np.concatenate([names[:m], names[n:]])
    table = pd.concat(
        [
            plot_table(100 + one, survey="t1", plot=names[:n]),
            plot_table(120 + two, survey="t2", plot=later, date=pd.Timestamp("2024-07-01")),
        ]
    )
    row = whole(change(table, strata_table({"S": 1.0}))[0])
    assert row["change_t_c"] == pytest.approx(20.0)
    assert row["change_se"] ** 2 == pytest.approx(case["var_change_difference_of_means"], rel=CLOSED_FORM)


@pytest.mark.real
def test_documented_sample_of_schools(reference: Path) -> None:
    """Paired change on the sample that the R package survey documents; the finite population factor is added here."""
    path = reference / "facts" / "statistics" / "computed_cases.json"
    case = next(c for c in json.loads(path.read_text(encoding="utf-8"))["cases"] if c["id"] == "A-API-1")
    columns = pd.DataFrame(case["inputs"]["columns"])
    population = columns["pw"].groupby(columns["stype"]).sum()
    parts = [
        plot_table(
            columns[name],
            survey=survey,
            plot=[f"s{i:03d}" for i in range(len(columns))],
            stratum=columns["stype"],
            date=pd.Timestamp(date),
        )
        for name, survey, date in (("api99", "t1", "1999-05-01"), ("api00", "t2", "2000-05-01"))
    ]
    frame, _ = change(pd.concat(parts), strata_table(population.to_dict()))
    rows = pick(frame, "stratum")
    fraction = 1 - rows["plots_paired"] / population
    expected = case["expected"]["change_api00_minus_api99"]
    total = population.sum()
    assert whole(frame)["change_t_c"] / total == pytest.approx(expected["mean"], rel=1e-6)
    se = np.sqrt((rows["change_se"] ** 2 * fraction).sum()) / total
    assert se == pytest.approx(expected["se"], rel=1e-6)
