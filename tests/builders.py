"""Small canonical tables for tests: give only what matters, the rest is filled with sound values.

    inputs = make_inputs(trees=[{"plot": "A", "tree": "1", "dbh_cm": 20.0}])

``trees``, ``plots``, ``visits``, ``strata``, ``parcels`` take a list of dicts or a frame. Surveys, plots and visits not
given are those the trees name; every plot is inside and visited.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.findings import empty_findings
from landcarbon.inputs import Inputs

Rows = Iterable[Mapping[str, Any]] | pd.DataFrame

TREE_DEFAULTS: dict[str, Any] = {
    "file": "trees.csv",
    "survey": "2014",
    "plot": "A",
    "subplot": "",
    "tree": "",
    "stem": "",
    "species": "BEECH",
    "status": "live",
    "dbh_cm": 20.0,
    "height_m": np.nan,
    "expansion_per_ha": np.nan,
    "weight": 1.0,
    "decay_class": "",
    "date": pd.NaT,
    "used": True,
}
PLOT_DEFAULTS: dict[str, Any] = {
    "plot": "A",
    "x": 500_000.0,
    "y": 5_300_000.0,
    "lon": 9.0,
    "lat": 47.85,
    "parcel": "",
    "stratum": "",
    "inside": True,
}
VISIT_DEFAULTS: dict[str, Any] = {
    "survey": "2014",
    "plot": "A",
    "date": pd.NaT,
    "visited": True,
    "share_inside": 1.0,
    "slope_deg": 0.0,
    "n_subplots": 1,
    "plot_area_ha": np.nan,
}
CATEGORIES = ["file", "survey", "plot", "subplot", "species", "status", "decay_class"]


def make_trees(rows: Rows = ()) -> pd.DataFrame:
    """Build a canonical tree table."""
    frame = _filled(rows, TREE_DEFAULTS)
    if "row_id" not in frame:
        frame["row_id"] = np.arange(len(frame), dtype=np.int64)
    if "row" not in frame:
        frame["row"] = (frame["row_id"] + 2).astype("int32")
    frame["date"] = pd.to_datetime(frame["date"])
    for name in CATEGORIES:
        frame[name] = frame[name].astype("str").astype("category")
    for name in ("tree", "stem"):
        frame[name] = frame[name].astype("str")
    for name in ("dbh_cm", "height_m", "expansion_per_ha", "weight"):
        frame[name] = frame[name].astype("float64")
    frame["used"] = frame["used"].astype(bool)
    return frame[["row_id", "row", *TREE_DEFAULTS]]


def make_inputs(
    *,
    trees: Rows = (),
    plots: Rows | None = None,
    visits: Rows | None = None,
    strata: Rows = (),
    parcels: Rows | None = None,
    surveys: Rows | None = None,
    findings: pd.DataFrame | None = None,
    samples: Mapping[str, pd.DataFrame] | None = None,
) -> Inputs:
    """Build sound canonical tables around the rows given."""
    table = make_trees(trees)
    names = _surveys(surveys, table)
    plot_table = _filled(
        [{"plot": name} for name in _distinct(table["plot"])] if plots is None else plots, PLOT_DEFAULTS
    )
    if visits is None:
        visits = [{"survey": s, "plot": p} for s in names["survey"] for p in _distinct(plot_table["plot"])]
    visit_table = _filled(visits, VISIT_DEFAULTS)
    for frame, text in ((plot_table, ("plot", "parcel", "stratum")), (visit_table, ("survey", "plot"))):
        for name in text:
            frame[name] = frame[name].astype("str") if name in frame else pd.Series(dtype="str")
    visit_table["date"] = pd.to_datetime(visit_table["date"])
    return Inputs(
        trees=table,
        species=pd.DataFrame(
            {"species": _distinct(table["species"]), "scientific_name": _distinct(table["species"])}, dtype="str"
        ),
        plots=plot_table[list(PLOT_DEFAULTS)],
        visits=visit_table[list(VISIT_DEFAULTS)],
        parcels=None if parcels is None else _parcels(parcels),
        strata=_strata(strata),
        surveys=names,
        findings=empty_findings() if findings is None else findings,
        files=pd.DataFrame({"file": pd.Series(dtype="str"), "role": pd.Series(dtype="str")}),
        crs="EPSG:32632",
        area_method="made up for a test",
        samples=dict(samples or {}),
    )


def make_settings(
    *,
    kind: str = "census",
    dbh_min_cm: Iterable[float] = (),
    subplots: int = 1,
    merge: Mapping[str, str] | None = None,
    stems: str = "each",
) -> Any:
    """Stand in for the part of the project file that the checks look at."""
    circles = [SimpleNamespace(radius_m=4.0 * (at + 1), dbh_min_cm=limit) for at, limit in enumerate(dbh_min_cm)]
    return SimpleNamespace(
        plots=SimpleNamespace(design=SimpleNamespace(kind=kind, circles=circles), subplots=subplots),
        strata=SimpleNamespace(merge=dict(merge or {})),
        trees=SimpleNamespace(stems=stems),
    )


def _filled(rows: Rows, defaults: Mapping[str, Any]) -> pd.DataFrame:
    if isinstance(rows, pd.DataFrame):
        frame = rows.reset_index(drop=True)
    else:
        frame = pd.DataFrame([{**defaults, **row} for row in rows])
    for name, value in defaults.items():
        if name not in frame:
            frame[name] = pd.Series([value] * len(frame), index=frame.index)
    return frame


def _distinct(values: pd.Series) -> list[str]:
    return list(dict.fromkeys(values.astype("object").map(str)))


def _surveys(rows: Rows | None, trees: pd.DataFrame) -> pd.DataFrame:
    if rows is None:
        rows = [{"survey": name} for name in sorted(set(_distinct(trees["survey"]))) or ["2014"]]
    frame = _filled(rows, {"survey": "2014", "since": pd.NaT, "until": pd.NaT})
    frame["survey"] = frame["survey"].astype("str")
    return frame.assign(since=pd.to_datetime(frame["since"]), until=pd.to_datetime(frame["until"]))


def _strata(rows: Rows) -> pd.DataFrame:
    frame = _filled(rows, {"stratum": "", "area_ha": np.nan, "area_source": "unknown"})
    return frame.astype({"stratum": "str", "area_ha": "float64", "area_source": "str"})


def _parcels(rows: Rows) -> Any:
    import geopandas as gpd
    from shapely.geometry import box

    frame = _filled(rows, {"parcel": "P1", "stratum": "", "land_use": "", "area_ha": 1.0})
    if "geometry" not in frame:
        # one hectare each, side by side
        frame["geometry"] = [box(500_000 + 100 * i, 5_300_000, 500_100 + 100 * i, 5_300_100) for i in range(len(frame))]
    return gpd.GeoDataFrame(frame, geometry="geometry", crs="EPSG:32632")
