"""Live comparison with the general-purpose package svy (survey statistics by linearisation), run in the same test."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import polars
import pytest
import svy
from estimate_frames import change, pick, plot_table, stocks, strata_table, survey_a, survey_a_tables, whole

TOLERANCE = 1e-9


def reference(column: str = "y1", panel: str = "") -> svy.Sample:
    """survey_A as a stratified sample with weights area / plots."""
    data = survey_a()
    plots = pd.DataFrame(data["plots"])
    if panel:
        plots = plots[plots["panel"] == panel]
    plots = plots.assign(change=plots["y2"] - plots["y1"])
    plots = plots[plots[column].notna()]
    number = plots.groupby("stratum")["plot"].transform("size")
    plots = plots.assign(weight=plots["stratum"].map(data["areas_ha"]) / number)
    columns: dict[str, list[Any]] = {
        "stratum": plots["stratum"].tolist(),
        "parcel": plots["parcel"].tolist(),
        "weight": plots["weight"].astype(float).tolist(),
        "x": plots["x"].astype(float).tolist(),
        "y": plots[column].astype(float).tolist(),
    }
    columns["xy"] = [x * y for x, y in zip(columns["x"], columns["y"], strict=True)]
    return svy.Sample(polars.DataFrame(columns), svy.Design(stratum="stratum", wgt="weight", wr=True))


def by_level(estimate: Any) -> pd.DataFrame:
    rows = estimate.to_dicts()
    return pd.DataFrame(
        {name: [row[name] for row in rows] for name in ("est", "se", "df", "n")},
        index=[row["by_level"][0] for row in rows],
    )


@pytest.mark.parametrize(("column", "survey"), [("y1", "t1"), ("y2", "t2")])
def test_mean_and_total(column: str, survey: str) -> None:
    table, strata, _ = survey_a_tables()
    row = whole(stocks(table, strata, surveys=[survey])[0])
    sample = reference(column)
    mean, total = sample.estimation.mean("y").to_dicts()[0], sample.estimation.total("y").to_dicts()[0]
    assert row["density_t_c_ha"] == pytest.approx(mean["est"], rel=TOLERANCE)
    assert row["density_se"] == pytest.approx(mean["se"], rel=TOLERANCE)
    assert row["stock_t_c"] == pytest.approx(total["est"], rel=TOLERANCE)
    assert row["stock_se"] == pytest.approx(total["se"], rel=TOLERANCE)
    assert row["df"] <= mean["df"]  # plots less strata is the most that Satterthwaite allows


@pytest.mark.parametrize(("column", "survey"), [("y1", "t1"), ("y2", "t2")])
def test_parcels(column: str, survey: str) -> None:
    table, strata, parcels = survey_a_tables()
    rows = pick(stocks(table, strata, parcels, surveys=[survey])[0], "parcel")
    expected = by_level(reference(column).estimation.mean("y", by="parcel")).loc[rows.index]
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["est"], rtol=TOLERANCE)
    np.testing.assert_allclose(rows["density_se"], expected["se"], rtol=TOLERANCE)
    assert list(rows["plots"]) == list(expected["n"])


def test_ratio_within_strata() -> None:
    """The ratio of means with unequal sizes, stratum by stratum: here x stands for the size of the plot."""
    sample = reference("y1")
    data = pd.DataFrame(survey_a()["plots"]).dropna(subset="y1")
    table = plot_table(data["y1"], plot=data["plot"], stratum=data["stratum"], size=data["x"].astype(float))
    rows = pick(stocks(table, strata_table(survey_a()["areas_ha"]))[0], "stratum")
    expected = by_level(sample.estimation.ratio("xy", "x", by="stratum")).loc[rows.index]
    np.testing.assert_allclose(rows["density_t_c_ha"], expected["est"], rtol=TOLERANCE)
    np.testing.assert_allclose(rows["density_se"], expected["se"], rtol=TOLERANCE)
    np.testing.assert_allclose(rows["df"], expected["df"], rtol=TOLERANCE)


def test_paired_change() -> None:
    frame, _ = change(*survey_a_tables("paired"))
    sample = reference("change", "paired")
    row, mean = whole(frame), sample.estimation.mean("y").to_dicts()[0]
    assert row["change_t_c"] / row["area_ha"] == pytest.approx(mean["est"], rel=TOLERANCE)
    assert row["change_se"] / row["area_ha"] == pytest.approx(mean["se"], rel=TOLERANCE)
    rows = pick(frame, "parcel")
    expected = by_level(sample.estimation.mean("y", by="parcel")).loc[rows.index]
    np.testing.assert_allclose(rows["change_t_c"] / rows["area_ha"], expected["est"], rtol=TOLERANCE)
    np.testing.assert_allclose(rows["change_se"] / rows["area_ha"], expected["se"], rtol=TOLERANCE)
