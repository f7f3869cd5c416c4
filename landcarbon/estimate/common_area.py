"""Change where boundaries move: areas by survey, and the land two surveys have in common.

Change is stated for the land that is in the inventory, and in the same unit, at both surveys: its plots are those that
lie on it, its hectares those of the common area. What a change of area contributes is in ``area_effect``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.estimate.tables import LEVELS
from landcarbon.findings import join_findings
from landcarbon.read.limits import limit

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = [
    "ROUNDING",
    "CommonArea",
    "change_on_common_area",
    "common_area",
    "equal_areas",
    "on_common_area",
    "place_by_survey",
    "stocks_by_survey",
    "tables_at",
]

Estimate = Callable[[pd.DataFrame, pd.DataFrame, pd.DataFrame | None], tuple[pd.DataFrame, pd.DataFrame]]
"""Change from a plot table, strata and parcels, as ``estimate_change`` with its other arguments filled in."""

EstimateStocks = Callable[[pd.DataFrame, pd.DataFrame, pd.DataFrame, str], tuple[pd.DataFrame, pd.DataFrame]]
"""Stocks from a plot table, strata, parcels and a survey, as ``estimate_stocks``."""

ROUNDING = 1e-9  # share of an area below which two are equal


@dataclass(frozen=True)
class CommonArea:
    """The land two surveys have in common.

    Attributes
    ----------
    since, until : str
        The surveys.
    areas : DataFrame
        by, unit, area_since_ha, area_until_ha, area_common_ha: of the inventory, every stratum and every parcel that
        was there at either survey; 0 where it was not, NaN where the area is unknown.
    strata : DataFrame
        stratum, area_ha, area_source: land of each stratum of the first survey that is in the inventory at both.
    same_strata : DataFrame
        Likewise, land that is in the same stratum at both.
    parcels : DataFrame
        parcel, stratum, land_use (of the first survey), area_ha: land that is in the same parcel at both.
    plots : DataFrame
        plot, stratum (of the first survey), parcel (blank if another at either), inside (in the inventory at both),
        same (in the same stratum at both).
    """

    since: str
    until: str
    areas: pd.DataFrame
    strata: pd.DataFrame
    same_strata: pd.DataFrame
    parcels: pd.DataFrame
    plots: pd.DataFrame

    @property
    def strata_moved(self) -> bool:
        """Whether land or a plot went from one stratum to another."""
        wide = self.strata.merge(self.same_strata, on="stratum", how="left", suffixes=("", "_same"))
        land = ~equal_areas(wide["area_ha"].to_numpy(), wide["area_ha_same"].fillna(0.0).to_numpy())
        plots = self.plots["inside"] & ~self.plots["same"]
        return bool((land & wide["area_ha"].notna().to_numpy()).any() or plots.any())

    def changed(self) -> np.ndarray:
        """Rows of ``areas`` whose two areas and common area are not all the same."""
        since, until, common = (
            self.areas[name].to_numpy(dtype=float) for name in ("area_since_ha", "area_until_ha", "area_common_ha")
        )
        known = np.isfinite(since) & np.isfinite(until)
        return np.asarray(known & ~(equal_areas(since, until) & equal_areas(since, common)))


def tables_at(
    versions: gpd.GeoDataFrame, in_force: pd.DataFrame, strata: pd.DataFrame, survey: str
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return strata and parcels with the areas of one survey.

    Parameters
    ----------
    versions : GeoDataFrame
        ``Inputs.parcel_versions``.
    in_force : DataFrame
        ``Inputs.parcels_in_force``.
    strata : DataFrame
        ``Inputs.strata``, as of the latest survey.
    survey : str
        The survey.

    Returns
    -------
    strata : DataFrame
        As given, with the areas of the day. An area stated by the user is taken as that of the latest survey and
        changed in the proportion of the polygons; a stratum without land at this survey is left out.
    parcels : DataFrame
        parcel, stratum, land_use, area_ha.
    """
    parcels = pd.DataFrame(_at(versions, in_force, survey).drop(columns="geometry"))
    latest = _at(versions, in_force, str(in_force["survey"].iloc[-1]))
    now = parcels.groupby("stratum")["area_ha"].sum()
    then = latest.groupby("stratum")["area_ha"].sum()
    ever = set(versions["stratum"].iloc[in_force["row"].unique()])
    listed = strata[~strata["stratum"].isin(list(ever - set(now.index)))]
    fresh = sorted(set(now.index) - set(listed["stratum"]))
    more = pd.DataFrame({"stratum": fresh, "area_ha": now.reindex(fresh).to_numpy(), "area_source": "polygons"})
    table = pd.concat([listed, more], ignore_index=True) if fresh else listed.reset_index(drop=True)
    drawn = table["stratum"].map(now)
    stated = (table["area_source"] == "stated").to_numpy()
    scaled = table["area_ha"] * (drawn / table["stratum"].map(then)).fillna(1.0)
    table["area_ha"] = np.where(stated, scaled, drawn.fillna(table["area_ha"]))
    return table.astype({"stratum": "str", "area_source": "str"}), parcels[["parcel", "stratum", "land_use", "area_ha"]]


def stocks_by_survey(
    estimate: EstimateStocks,
    plot_parts: pd.DataFrame,
    versions: gpd.GeoDataFrame,
    in_force: pd.DataFrame,
    strata: pd.DataFrame,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate the stocks of every survey on the area of its day.

    Parameters
    ----------
    estimate : callable
        Takes the plots of one survey, strata, parcels and the survey and returns stocks and findings.
    plot_parts : DataFrame
        Plots of all surveys, with their places by survey.
    versions, in_force, strata : DataFrame
        As for :func:`tables_at`.

    Returns
    -------
    stocks, findings : DataFrame
        Stocks in the order level, unit, survey, pool; a unit has rows for the surveys at which it was there.
    """
    tables, findings = [], []
    for survey in dict.fromkeys(in_force["survey"].astype("str")):
        rows = plot_parts[plot_parts["survey"].astype("str") == survey]
        table, found = estimate(rows, *tables_at(versions, in_force, strata, survey), survey)
        tables.append(table)
        findings.append(found)
    stocks = pd.concat([table for table in tables if len(table)] or tables, ignore_index=True)
    survey_at = pd.factorize(stocks["survey"])[0]
    unit_at = pd.factorize(pd.MultiIndex.from_frame(stocks[["by", "unit"]]))[0]
    level_at = pd.Index(LEVELS).get_indexer(pd.Index(stocks["by"]))
    order = np.lexsort((survey_at, unit_at, level_at))  # stable, so that pools keep theirs
    return stocks.iloc[order].reset_index(drop=True), join_findings(findings)


def common_area(
    versions: gpd.GeoDataFrame,
    in_force: pd.DataFrame,
    parcel_of: pd.DataFrame,
    strata: pd.DataFrame,
    *,
    since: str,
    until: str,
    inventory_name: str,
) -> CommonArea:
    """Find the land two surveys have in common, and the plots on it.

    Parameters
    ----------
    versions, in_force, parcel_of : DataFrame
        ``Inputs.parcel_versions``, ``parcels_in_force`` and ``parcel_of``.
    strata : DataFrame
        ``Inputs.strata``.
    since, until : str
        Earlier and later survey.
    inventory_name : str
        Unit of the inventory row.

    Returns
    -------
    CommonArea

    Notes
    -----
    Outlines of the two surveys are intersected in the coordinate system of the results; the pieces are measured on the
    ellipsoid. Where a parcel has a stated area, its pieces are scaled by stated over measured area, of two factors by
    the smaller. Pieces below the limit of ``read/limits.toml`` (1 m2) come from rounding and are dropped; an outline
    that its pieces add up to but for as much counts as a whole.
    """
    one, two = _at(versions, in_force, since), _at(versions, in_force, until)
    pieces = _pieces(one, two)
    whole = _by_row(pieces, one, np.ones(len(pieces), dtype=bool))
    same_stratum = pieces["stratum_1"].to_numpy() == pieces["stratum_2"].to_numpy()
    stayed = _by_row(pieces, one, same_stratum)
    same_parcel = pieces["parcel_1"].to_numpy() == pieces["parcel_2"].to_numpy()
    parcels = one[["parcel", "stratum", "land_use"]].assign(area_ha=_by_row(pieces, one, same_parcel))
    tables = [tables_at(versions, in_force, strata, survey) for survey in (since, until)]
    strata_then, strata_now = (table for table, _ in tables)
    common = _shared(strata_then, one, whole)
    same = _shared(strata_then, one, stayed)
    blocks = [
        _unit_areas("stratum", "stratum", strata_then, strata_now, same),
        _unit_areas("parcel", "parcel", one, two, parcels),
    ]
    total = [float(table["area_ha"].sum(skipna=False)) for table in (strata_then, strata_now, common)]
    total[2] = min(total[2], total[1]) if np.isfinite(total).all() else total[2]
    first = pd.DataFrame(
        [["inventory", inventory_name, *total]],
        columns=["by", "unit", "area_since_ha", "area_until_ha", "area_common_ha"],
    )
    held = parcels[parcels["area_ha"] > 0].reset_index(drop=True)
    return CommonArea(
        since,
        until,
        pd.concat([first, *blocks], ignore_index=True).astype({"by": "str", "unit": "str"}),
        _with_land(common),
        _with_land(same),
        pd.DataFrame(held),
        _plots(parcel_of, since, until),
    )


def place_by_survey(plot_parts: pd.DataFrame, parcel_of: pd.DataFrame) -> pd.DataFrame:
    """Give every plot the parcel and stratum it lies in at the survey of its row.

    Parameters
    ----------
    plot_parts : DataFrame
        survey, plot, parcel, stratum, inside and more.
    parcel_of : DataFrame
        ``Inputs.parcel_of``.
    """
    keys = pd.MultiIndex.from_frame(plot_parts[["survey", "plot"]].astype("str"))
    place = parcel_of.astype({"survey": "str", "plot": "str"}).set_index(["survey", "plot"]).reindex(keys)
    inside = place["inside"].astype("boolean").fillna(False).to_numpy(dtype=bool)
    return plot_parts.assign(
        parcel=place["parcel"].fillna("").to_numpy(), stratum=place["stratum"].fillna("").to_numpy(), inside=inside
    ).astype({"parcel": "str", "stratum": "str"})


def on_common_area(plot_parts: pd.DataFrame, common: CommonArea, *, same_stratum: bool = False) -> pd.DataFrame:
    """Return the rows of both surveys with the places change is estimated with.

    Parameters
    ----------
    plot_parts : DataFrame
        survey, plot, parcel, stratum, inside and the parts.
    common : CommonArea
        The common area.
    same_stratum : bool
        Whether only plots count that are in the same stratum at both surveys: for the rows of strata.

    Returns
    -------
    DataFrame
        Rows of the two surveys: stratum that of the first, parcel blank unless it is the same at both, inside only on
        the common area.
    """
    rows = plot_parts[plot_parts["survey"].astype("str").isin([common.since, common.until])]
    place = common.plots.set_index("plot").reindex(rows["plot"].astype("str"))
    counted = place["inside"] & place["same"] if same_stratum else place["inside"]
    return rows.assign(
        parcel=place["parcel"].fillna("").to_numpy(),
        stratum=place["stratum"].fillna("").to_numpy(),
        inside=counted.astype("boolean").fillna(False).to_numpy(dtype=bool),
    ).astype({"parcel": "str", "stratum": "str"})


def change_on_common_area(
    estimate: Estimate, plot_parts: pd.DataFrame, common: CommonArea
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Estimate change on the common area.

    Parameters
    ----------
    estimate : callable
        Takes a plot table, strata and parcels and returns change and findings.
    plot_parts : DataFrame
        Plots of both surveys.
    common : CommonArea
        The common area.

    Returns
    -------
    change, findings : DataFrame
        Rows of the inventory and the parcels rest on the land that is in the inventory at both surveys, sampled by the
        strata of the first: land that went to another stratum is in. Rows of strata rest on the land that stayed in
        its stratum; they are estimated apart only if any did not.
    """
    change, findings = estimate(on_common_area(plot_parts, common), common.strata, common.parcels)
    if not common.strata_moved:
        return change, findings
    rows, more = estimate(on_common_area(plot_parts, common, same_stratum=True), common.same_strata, None)
    parts = [change[change["by"] == "inventory"], rows[rows["by"] == "stratum"], change[change["by"] == "parcel"]]
    merged = pd.concat([part for part in parts if len(part)] or parts, ignore_index=True)
    told = join_findings([findings, more])
    return merged, told[~told.astype("str").duplicated(["rule", "column", "value", "message"])].reset_index(drop=True)


def _at(versions: gpd.GeoDataFrame, in_force: pd.DataFrame, survey: str) -> gpd.GeoDataFrame:
    rows = in_force.loc[in_force["survey"].astype("str") == survey, "row"].to_numpy()
    return versions.iloc[rows].assign(row=rows).reset_index(drop=True)


def _pieces(one: gpd.GeoDataFrame, two: gpd.GeoDataFrame) -> pd.DataFrame:
    """Intersect the outlines of two surveys: place of either row, parcel and stratum at either, area [ha]."""
    import geopandas as gpd
    import shapely

    from landcarbon.read.vectors import geodesic_area_m2, mend_polygons

    shapes = [frame.geometry.to_numpy() for frame in (one, two)]
    first, second = shapely.STRtree(shapes[1]).query(shapes[0], predicate="intersects")
    order = np.lexsort((second, first))
    first, second = first[order], second[order]
    alike = one["row"].to_numpy()[first] == two["row"].to_numpy()[second]
    alike |= shapely.equals(shapes[0][first], shapes[1][second])
    areas = [frame["area_ha"].to_numpy(dtype=float) for frame in (one, two)]
    measured = [geodesic_area_m2(frame.geometry) / M2_PER_HECTARE for frame in (one, two)]
    scale = np.minimum((areas[0] / measured[0])[first], (areas[1] / measured[1])[second])
    smaller = np.minimum(areas[0][first], areas[1][second])
    cut = np.flatnonzero(~alike)
    met = gpd.GeoSeries(shapely.intersection(shapes[0][first[cut]], shapes[1][second[cut]]), crs=one.crs)
    area = smaller.copy()
    piece_m2 = geodesic_area_m2(mend_polygons(met)[0]) if len(cut) else np.zeros(0)
    area[cut] = np.minimum(piece_m2 / M2_PER_HECTARE * scale[cut], smaller[cut])
    kept = np.ones(len(first), dtype=bool)
    kept[cut] = piece_m2 >= limit("area", "overlap_m2")
    table = pd.DataFrame({"row_1": first, "row_2": second, "area_ha": area})
    for name in ("parcel", "stratum"):
        table[f"{name}_1"] = one[name].to_numpy(dtype=object)[first]
        table[f"{name}_2"] = two[name].to_numpy(dtype=object)[second]
    return table[kept].reset_index(drop=True)


def _by_row(pieces: pd.DataFrame, one: pd.DataFrame, which: np.ndarray) -> np.ndarray:
    """Add up the pieces of each outline of the first survey, never beyond its own area (outlines may overlap)."""
    chosen = pieces[which]
    total = np.bincount(chosen["row_1"], weights=chosen["area_ha"], minlength=len(one))
    own = one["area_ha"].to_numpy(dtype=float)
    rounding = limit("area", "overlap_m2") / M2_PER_HECTARE
    return np.where(own - total < rounding, own, total) * (total > 0)


def _shared(strata: pd.DataFrame, one: pd.DataFrame, held: np.ndarray) -> pd.DataFrame:
    """Area of the strata of the first survey cut down to the share of their polygons that is held."""
    drawn = one.groupby("stratum")["area_ha"].sum()
    left = pd.Series(held).groupby(one["stratum"].to_numpy()).sum()
    share = strata["stratum"].map(left / drawn).fillna(1.0)  # a stratum without polygons stays as stated
    return strata.assign(area_ha=strata["area_ha"] * share)


def _with_land(strata: pd.DataFrame) -> pd.DataFrame:
    return strata[~(strata["area_ha"] == 0)].reset_index(drop=True)


def _unit_areas(by: str, key: str, one: pd.DataFrame, two: pd.DataFrame, common: pd.DataFrame) -> pd.DataFrame:
    names = list(dict.fromkeys([*one[key], *two[key]]))
    columns = {
        name: table.set_index(key)["area_ha"].reindex(names, fill_value=0.0).to_numpy()
        for name, table in (("area_since_ha", one), ("area_until_ha", two), ("area_common_ha", common))
    }
    columns["area_common_ha"] = np.minimum(columns["area_common_ha"], columns["area_until_ha"])
    return pd.DataFrame({"by": by, "unit": names, **columns})


def _plots(parcel_of: pd.DataFrame, since: str, until: str) -> pd.DataFrame:
    """Places of the plots on the common area."""
    survey = parcel_of["survey"].astype("str")
    one, two = (parcel_of[survey == name].astype({"plot": "str"}).set_index("plot") for name in (since, until))
    two = two.reindex(one.index)
    inside = one["inside"].to_numpy(dtype=bool) & two["inside"].astype("boolean").fillna(False).to_numpy(dtype=bool)
    return pd.DataFrame(
        {
            "plot": one.index.to_numpy(),
            "stratum": one["stratum"].to_numpy(),
            "parcel": one["parcel"].where(one["parcel"] == two["parcel"], "").to_numpy(),
            "inside": inside,
            "same": (one["stratum"] == two["stratum"]).to_numpy(),
        }
    ).astype({"plot": "str", "stratum": "str", "parcel": "str"})


def equal_areas(one: np.ndarray, two: np.ndarray) -> np.ndarray:
    """Tell which areas are the same but for rounding."""
    return np.asarray(np.abs(one - two) <= ROUNDING * np.maximum(np.abs(one), np.abs(two)))
