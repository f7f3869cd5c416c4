"""A small invented set of results for the tests of the outputs: five parcels, three surveys, twelve plots."""

from __future__ import annotations

import geopandas as gpd
import numpy as np
import pandas as pd
from shapely.geometry import Polygon

from landcarbon.findings import join_findings, make_findings
from landcarbon.inventory.columns import table_columns
from landcarbon.inventory.models import SAMPLE_TABLES
from landcarbon.publish.results import CHANGE_COLUMNS, STOCK_COLUMNS, Results

SURVEYS = ("2014", "2019", "2024")
CRS = "EPSG:25832"
#: Names that would do harm if a page or a table took them for code.
HOSTILE = (
    "<script>alert(1)</script>",
    "</script><img src=x onerror=alert(2)>",
    "quote \" and ' and \\ and &amp; and {{ 7*7 }} and `${8*8}`",
    "=cmd|' /C calc'!A0",
)
PARCELS = ("North bank", "Kiln <wood>", "Hollow & dell", "Old coupe", 'Long "acre"')
STRATA = ("oak", "oak", "spruce", "spruce", "alder")
#: t C/ha per parcel (rows) and survey (columns); the last parcel cannot be estimated.
DENSITY = np.array(
    [[118.4, 124.9, 131.2], [96.0, 101.3, 99.8], [151.7, 163.4, 78.5], [12.2, 19.8, 31.0], [np.nan, np.nan, np.nan]]
)
AREA = np.array([12.5, 7.25, 20.0, 9.5, 3.75])
NOT_ESTIMABLE = "not estimable: fewer than two plots in the stratum"


def sample_results(name: str = "Harrow Fell", parcels: tuple[str, ...] = PARCELS) -> Results:
    """Return the same results on every call."""
    return Results(
        settings_summary={"name": name, "confidence": 0.9, "seed": 7, "pools": {"soil": "not counted"}},
        stocks=_stocks(name, parcels),
        change=_change(name, parcels),
        findings=_findings(),
        trees=_trees(),
        plots=_plots(),
        parcels=_polygons(parcels),
        plot_points=_points(parcels),
        surveys=pd.DataFrame(
            {
                "survey": SURVEYS,
                "since": pd.to_datetime([f"{year}-05-01" for year in SURVEYS]),
                "until": pd.to_datetime([f"{year}-10-31" for year in SURVEYS]),
            }
        ),
        reconciliation=pd.DataFrame({"table": ["trees"], "rows_read": [6], "used": [4], "set_aside": [2]}),
        run={"inputs": [{"file": "trees.csv", "sha256": "0" * 64, "bytes": 10, "rows": 6, "role": "trees"}]},
        crs=CRS,
        area_method="Areas come from the polygons, computed in EPSG:25832.",
        marks=[
            "12 % of the biomass stands in trees beyond the diameter range of their equation.",
            "Survey 2014: stratum alder could not be estimated; 3.75 ha not in the total of the inventory.",
        ],
        samples={table: _samples(table) for table in SAMPLE_TABLES},
    )


def _stocks(name: str, parcels: tuple[str, ...]) -> pd.DataFrame:
    rows = []
    for column, survey in enumerate(SURVEYS):
        known = ~np.isnan(DENSITY[:, column])
        total = float((DENSITY[known, column] * AREA[known]).sum())
        for pool, share in (("above_ground", 0.8), ("below_ground", 0.2), ("all", 1.0)):
            rows.append(_stock("inventory", name, survey, pool, AREA[known].sum(), share * total, "stratified", 12))
            for index, parcel in enumerate(parcels):
                density = DENSITY[index, column]
                method = "domain of a stratified sample" if known[index] else NOT_ESTIMABLE
                rows.append(
                    _stock(
                        "parcel",
                        parcel,
                        survey,
                        pool,
                        AREA[index],
                        share * density * AREA[index],
                        method,
                        3 * known[index],
                    )
                )
        for stratum in ("oak", "spruce", "alder"):
            inside = np.array([label == stratum for label in STRATA]) & known
            total = float((DENSITY[inside, column] * AREA[inside]).sum()) if inside.any() else np.nan
            area = AREA[[label == stratum for label in STRATA]].sum()
            method = "stratified" if inside.any() else NOT_ESTIMABLE
            rows.append(_stock("stratum", stratum, survey, "all", area, total, method, 3 * inside.sum()))
    return pd.DataFrame(rows, columns=STOCK_COLUMNS)


def _stock(by, unit, survey, pool, area, stock, method, plots) -> tuple:
    density = stock / area
    half = 0.15 * stock
    bounds = (density * 0.85, density * 1.15)
    return (
        by, unit, survey, pool, area, int(plots), density, density * 0.08, *bounds,
        stock, stock * 0.08, stock - half, stock + half, 7.5 if stock == stock else np.nan, method,
    )  # fmt: skip


def _change(name: str, parcels: tuple[str, ...]) -> pd.DataFrame:
    rows = []
    for since, until, years in ((0, 1, 5.1), (1, 2, 4.9), (0, 2, 10.0)):
        delta = (DENSITY[:, until] - DENSITY[:, since]) * AREA
        units = [("inventory", name, AREA[:4].sum(), float(np.nansum(delta)), 12)]
        units += [
            ("parcel", parcel, AREA[i], delta[i], 0 if np.isnan(delta[i]) else 3) for i, parcel in enumerate(parcels)
        ]
        for by, unit, area, change, plots in units:
            se = abs(change) * 0.1 + 6.0
            yearly = change / years
            rows.append(
                (
                    by, unit, SURVEYS[since], SURVEYS[until], "all", area, plots, plots, plots, years, change, se,
                    change - 1.8 * se, change + 1.8 * se, yearly, yearly / area, se / years / area, -44 / 12 * yearly,
                    NOT_ESTIMABLE if np.isnan(change) else "paired plots",
                )
            )  # fmt: skip
    return pd.DataFrame(rows, columns=CHANGE_COLUMNS)


def _findings() -> pd.DataFrame:
    slip = pd.DataFrame(
        {"file": "trees.csv", "row": [4, 6], "row_id": [2, 4], "plot": ["P1", "P2"], "dbh_cm": [310.0, 512.0]}
    )
    return join_findings(
        [
            make_findings(
                "size slip", slip, severity="error", table="trees", column="dbh_cm", used=False,
                message="diameter ten times that of the other survey", remedy="=look at the unit",
            ),
            make_findings("unknown species", None, severity="warning", table="trees", value="-3.2", message="'quoted"),
        ]
    )  # fmt: skip


def _trees() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "row_id": np.arange(6),
            "survey": pd.Categorical(["2014", "2014", "2019", "2019", "2024", "2024"]),
            "plot": pd.Categorical(["P1", "P2"] * 3),
            "dbh_cm": [31.0, 22.5, 310.0, 24.0, 512.0, np.nan],
            "carbon_kg": [310.5, 120.25, np.nan, 140.0, np.nan, np.nan],
            "used": [True, True, False, True, False, True],
        }
    )


def _samples(table: str) -> pd.DataFrame:
    """Return three rows of a table with all its columns; the last was set aside."""
    count = 3
    columns: dict[str, object] = {
        "row_id": np.arange(count),
        "file": pd.Categorical([f"{table}.csv"] * count),
        "row": np.array([2, 3, 4], dtype="int32"),
    }
    for place, spec in enumerate(table_columns(table).values()):
        if spec.kind == "number":
            columns[spec.becomes] = np.array([0.25, 0.5, np.nan]) + place
        elif spec.kind == "date":
            columns[spec.becomes] = pd.to_datetime(["2014-06-02", None, "2014-06-03"])
        else:
            columns[spec.becomes] = pd.Categorical(["a", "", "b"])
    columns |= {"survey": pd.Categorical(["2014"] * count), "plot": pd.Categorical(["P1", "P2", "P1"])}
    return pd.DataFrame(columns | {"used": [True, True, False]})


def _plots() -> pd.DataFrame:
    rows = []
    for column, survey in enumerate(SURVEYS):
        for index in range(12):
            base = DENSITY[index // 3, column] * (0.8 + 0.2 * (index % 3))
            if survey == "2019" and index == 4:
                continue  # not visited
            density = 0.0 if index == 9 and survey == "2014" else base
            rows.append((survey, f"P{index + 1}", "all", density))
            rows.append((survey, f"P{index + 1}", "above_ground", 0.8 * density))
    return pd.DataFrame(rows, columns=["survey", "plot", "pool", "density_t_c_ha"])


def _polygons(parcels: tuple[str, ...]) -> gpd.GeoDataFrame:
    x, y = 560_000.0, 5_720_000.0
    corners = [
        [(0, 0), (420, 20), (400, 310), (180, 330), (-20, 260)],
        [(420, 20), (700, 0), (690, 240), (400, 310)],
        [(180, 330), (400, 310), (690, 240), (720, 560), (210, 600)],
        [(-20, 260), (180, 330), (210, 600), (-80, 640)],
        [(700, 0), (880, 40), (860, 250), (690, 240)],
    ]
    shapes = [Polygon([(x + dx, y + dy) for dx, dy in ring]) for ring in corners]
    return gpd.GeoDataFrame(
        {"parcel": list(parcels), "stratum": list(STRATA), "land_use": "forest land", "area_ha": AREA},
        geometry=shapes,
        crs=CRS,
    )


def _points(parcels: tuple[str, ...]) -> pd.DataFrame:
    polygons = _polygons(parcels).geometry
    spread = ((-60, -40), (0, 30), (60, -10))
    centres = [polygons[index // 3].centroid for index in range(12)]
    x = [centre.x + spread[index % 3][0] for index, centre in enumerate(centres)]
    y = [centre.y + spread[index % 3][1] for index, centre in enumerate(centres)]
    outside = gpd.GeoSeries(gpd.points_from_xy([*x, 560_950.0], [*y, 5_723_500.0]), crs=CRS).to_crs("EPSG:4326")
    return pd.DataFrame(
        {
            "plot": [*(f"P{index + 1}" for index in range(12)), "stray"],
            "parcel": [*(parcels[index // 3] for index in range(12)), ""],
            "stratum": [*(STRATA[index // 3] for index in range(12)), ""],
            "lon": outside.x.to_numpy(),
            "lat": outside.y.to_numpy(),
            "inside": [*[True] * 12, False],
        }
    )
