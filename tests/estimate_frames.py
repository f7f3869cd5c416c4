"""Tables for the tests of the estimates: survey_A and small plot tables made by hand."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.change import estimate_change
from landcarbon.estimate.stocks import estimate_stocks

DATA = Path(__file__).parent / "data"
NAME = "Test inventory"
POOL = "above_ground"


def cases(kind: str) -> dict[str, dict[str, Any]]:
    """Cases of ``statistics_<kind>.json`` by id."""
    with (DATA / f"statistics_{kind}.json").open(encoding="utf-8") as handle:
        return {case["id"]: case for case in json.load(handle)["cases"]}


def survey_a() -> dict[str, Any]:
    """The invented inventory that the computed cases rest on."""
    with (DATA / "statistics_computed.json").open(encoding="utf-8") as handle:
        return json.load(handle)["datasets"]["survey_A"]


def plot_table(values: Sequence[float], **columns: Any) -> pd.DataFrame:
    """A plot table of one survey with one pool; columns not given get plain values."""
    count = len(values)
    given = {
        "survey": "2014",
        "plot": [f"p{number:03d}" for number in range(count)],
        "parcel": "",
        "stratum": "S",
        "date": pd.Timestamp("2014-07-01"),
        "size": 1.0,
        "inside": True,
        POOL: np.asarray(values, dtype=float),
    } | columns
    frame = pd.DataFrame(given)
    return frame if "all" in frame else frame.assign(all=frame[POOL])


def strata_table(areas: Mapping[str, float]) -> pd.DataFrame:
    return pd.DataFrame({"stratum": list(areas), "area_ha": [float(area) for area in areas.values()]})


def parcel_table(areas: Mapping[str, float]) -> pd.DataFrame:
    return pd.DataFrame({"parcel": list(areas), "area_ha": [float(area) for area in areas.values()]})


def survey_a_tables(panel: str = "") -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """Plot, strata and parcel tables of survey_A; ``panel`` keeps only plots of that panel."""
    data = survey_a()
    plots = pd.DataFrame(data["plots"])
    if panel:
        plots = plots[plots["panel"] == panel]
    parts = []
    for column, survey, date in (("y1", "t1", "2014-07-01"), ("y2", "t2", "2024-07-01")):
        part = plots[plots[column].notna()]
        parts.append(
            plot_table(
                part[column].to_numpy(),
                survey=survey,
                plot=part["plot"].to_numpy(),
                parcel=part["parcel"].to_numpy(),
                stratum=part["stratum"].to_numpy(),
                date=pd.Timestamp(date),
            )
        )
    table = pd.concat(parts, ignore_index=True)
    return table, strata_table(data["areas_ha"]), parcel_table(data["parcel_areas_ha"])


def stocks(
    table: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None = None,
    surveys: Sequence[str] = ("2014",),
    pools: Sequence[str] = (POOL,),
    confidence: float = 0.95,
    sums: Mapping[str, Sequence[str]] | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    options = {"pools": pools, "confidence": confidence, "inventory_name": NAME, "sums": sums}
    return estimate_stocks(table, strata, parcels, surveys, **options)


def change(
    table: pd.DataFrame,
    strata: pd.DataFrame,
    parcels: pd.DataFrame | None = None,
    surveys: tuple[str, str] = ("t1", "t2"),
    pools: Sequence[str] = (POOL,),
    confidence: float = 0.95,
    sums: Mapping[str, Sequence[str]] | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    return estimate_change(
        table,
        strata,
        parcels,
        since=surveys[0],
        until=surveys[1],
        pools=pools,
        confidence=confidence,
        inventory_name=NAME,
        sums=sums,
    )


def pick(frame: pd.DataFrame, by: str, pool: str = "all", **where: str) -> pd.DataFrame:
    """Rows of one level and pool, indexed by unit."""
    rows = frame[(frame["by"] == by) & (frame["pool"] == pool)]
    for column, value in where.items():
        rows = rows[rows[column] == value]
    return rows.set_index("unit")


def whole(frame: pd.DataFrame, pool: str = "all", **where: str) -> pd.Series:
    """The inventory row."""
    rows = pick(frame, "inventory", pool, **where)
    assert len(rows) == 1
    return rows.iloc[0]
