"""Parcels: polygons made sound, measured, and looked over for overlaps and gaps."""

from __future__ import annotations

from dataclasses import dataclass, replace

import geopandas as gpd
import numpy as np
import pandas as pd
import pyarrow as pa
import shapely
from pyproj import CRS

from landcarbon.constants import M2_PER_HECTARE
from landcarbon.errors import InputFileError
from landcarbon.findings import join_findings
from landcarbon.inventory.models import Settings
from landcarbon.read.crs import WGS84, is_metric, metric_crs, move_points, utm_for
from landcarbon.read.limits import limit
from landcarbon.read.mapping import Mapped, left_blank, map_raw
from landcarbon.read.notes import note
from landcarbon.read.source import FileLog, find_source
from landcarbon.read.table import RawTable
from landcarbon.read.validity import by_survey, check_periods, gaps_in_time, has_periods
from landcarbon.read.vectors import geodesic_area_m2, mend_polygons, read_vector

__all__ = ["Boundaries", "ParcelTable", "locate", "read_parcels", "settle_boundaries"]

_ALL = "all"
_UNASSIGNED = "unassigned"
_PERIOD = ["valid_from", "valid_to"]
_COLUMNS = ["parcel", "stratum", "land_use", "area_ha"]


@dataclass
class ParcelTable:
    """Parcels read.

    Attributes
    ----------
    frame : GeoDataFrame
        parcel, stratum, land_use, area_ha, geometry in the coordinate system of the results.
    crs : CRS
        That coordinate system.
    stated : bool
        Whether areas were stated by the user.
    findings : list of DataFrame
        What was noted.
    dated : bool
        Whether rows say how long they are in force. ``frame`` then holds every row of the file, with valid_from,
        valid_to, file and row, and a parcel may stand in several; :func:`settle_boundaries` takes it from there.
    """

    frame: gpd.GeoDataFrame
    crs: CRS
    stated: bool
    findings: list[pd.DataFrame]
    dated: bool = False


@dataclass(frozen=True)
class Boundaries:
    """Boundaries that change between surveys.

    Attributes
    ----------
    latest : ParcelTable
        Parcels in force at the latest survey.
    versions : GeoDataFrame
        As ``Inputs.parcel_versions``.
    in_force : DataFrame
        As ``Inputs.parcels_in_force``.
    findings : list of DataFrame
        What was noted.
    """

    latest: ParcelTable
    versions: gpd.GeoDataFrame
    in_force: pd.DataFrame
    findings: list[pd.DataFrame]

    def at(self, survey: str) -> gpd.GeoDataFrame:
        """Return the parcels in force at one survey."""
        rows = self.in_force.loc[self.in_force["survey"] == survey, "row"].to_numpy()
        return self.versions.iloc[rows].reset_index(drop=True)


def read_parcels(settings: Settings, log: FileLog) -> ParcelTable | None:
    """Read the parcels named in the settings.

    Parameters
    ----------
    settings : Settings
        The project file.
    log : FileLog
        Notes what was read.

    Returns
    -------
    ParcelTable or None
        None if the inventory has no parcels.

    Raises
    ------
    InputFileError
        If the file cannot be used, or an id stands twice.
    """
    if settings.parcels is None:
        return None
    source = find_source(
        settings.parcels.file, settings.folder, "parcels", allow_outside=settings.inventory.allow_outside
    )
    geometry, raw = read_vector(source, layer=settings.parcels.layer, crs=settings.parcels.crs)
    if len(raw) == 1 and "parcel" not in settings.columns.get("parcels", {}):
        _name_single(raw)
    mapped = map_raw(raw, "parcels", source, settings, log)
    table = mapped.frame
    if len(table) != len(geometry):  # rows without a single attribute in use
        geometry = geometry[table["row"].to_numpy() - 1].reset_index(drop=True)
    if table.empty:
        raise InputFileError("the file holds no parcel", where=source.name)
    dated = _check_periods(mapped, source.name)
    _check_ids(table, source.name, repeated=dated)
    findings = [*mapped.findings, *left_blank(mapped, "parcels")]
    given = geometry
    geometry, mended = mend_polygons(geometry)
    area = geodesic_area_m2(geometry)
    crs = _results_crs(settings, geometry)
    planar = geometry.to_crs(crs)
    findings += _mended(table, mended, given, area)
    kept = area > 0
    findings += _without_area(table[~kept])
    table, planar, area = table[kept].reset_index(drop=True), planar[kept].reset_index(drop=True), area[kept]
    if table.empty:
        raise InputFileError("no parcel has an area", where=source.name)
    findings += _planar(planar, area, source.name)
    table["measured_ha"] = area / M2_PER_HECTARE
    stated = table["area_ha"].notna() & (table["area_ha"] > 0)
    findings += _stated(table, stated)
    table["area_ha"] = table["area_ha"].where(stated, table["measured_ha"])
    findings += _strata(table, "stratum" in mapped.given)
    table["stratum"] = table["stratum"].replace(dict(settings.strata.merge))
    if dated:
        check_periods(table)
        frame = gpd.GeoDataFrame(table[[*_COLUMNS, *_PERIOD, "file", "row"]], geometry=planar, crs=crs)
        return ParcelTable(frame, crs, bool(stated.any()), findings, dated=True)
    findings += _overlaps(table, planar) + _gaps(planar, source.name)
    frame = gpd.GeoDataFrame(table[_COLUMNS], geometry=planar, crs=crs)
    return ParcelTable(frame, crs, bool(stated.any()), findings)


def settle_boundaries(parcels: ParcelTable, surveys: pd.DataFrame) -> Boundaries:
    """Find which outlines are in force at each survey, and look these over for overlaps and gaps.

    Parameters
    ----------
    parcels : ParcelTable
        Parcels whose rows say how long they are in force.
    surveys : DataFrame
        survey, date; in the order of time.

    Returns
    -------
    Boundaries

    Raises
    ------
    InputFileError
        If a survey has no date, or no parcel is in force at it.
    """
    frame = parcels.frame
    in_force = by_survey(frame, surveys)
    found = gaps_in_time(frame, surveys, in_force)
    seen: list[list[int]] = []
    about = []
    for name, group in in_force.groupby("survey", sort=False):
        rows = group["row"].to_numpy()
        if rows.tolist() not in seen:
            seen.append(rows.tolist())
            here = frame.iloc[rows].reset_index(drop=True)
            about += [
                part.assign(survey=str(name))
                for part in _overlaps(here, here.geometry) + _gaps(here.geometry, str(here["file"].iloc[0]))
            ]
    told = join_findings(about)
    found.append(told[~told.duplicated(["rule", "value", "message"])].reset_index(drop=True))
    latest = frame.iloc[in_force.loc[in_force["survey"] == surveys["survey"].iloc[-1], "row"].to_numpy()]
    kept = latest[[*_COLUMNS, "geometry"]].reset_index(drop=True)
    versions = frame[[*_COLUMNS, *_PERIOD, "geometry"]]
    return Boundaries(replace(parcels, frame=kept, dated=False), versions, in_force, found)


def _name_single(raw: RawTable) -> None:
    """Give the only polygon of a file an id where it has none: the outline of a whole woodland often comes bare."""
    if "parcel" not in [name.casefold() for name in raw.names]:
        raw.names.append("parcel")
        raw.columns["parcel"] = pa.array(["1"], pa.string())


def _check_periods(mapped: Mapped, file: str) -> bool:
    """Tell whether boundaries have dates; one that cannot be read must not pass for an open end."""
    for column in _PERIOD:
        if column in mapped.bad:
            texts = mapped.bad[column]
            place, text = mapped.frame["row"].iloc[texts.index[0]], texts.iloc[0]
            raise InputFileError(
                f"{len(texts)} cells under {mapped.given[column]!r} hold no date in the form expected, "
                f"the first {text!r} in row {place}",
                where=file,
                remedy="Write year-month-day, or give format under [dates]; leave the cell blank for an open end.",
            )
    return has_periods(mapped.frame)


def _check_ids(table: pd.DataFrame, file: str, *, repeated: bool) -> None:
    blank = table["parcel"] == ""
    if blank.any():
        raise InputFileError(f"{int(blank.sum())} polygons have no parcel id", where=file, remedy="Fill in the ids.")
    twice = table.loc[table["parcel"].duplicated(), "parcel"].unique()
    if len(twice) and not repeated:
        shown = ", ".join(twice[:5]) + (" ..." if len(twice) > 5 else "")
        raise InputFileError(
            f"{len(twice)} parcel ids stand more than once: {shown}",
            where=file,
            remedy="Give each polygon its own id, or join the polygons of one parcel into one feature; an outline that "
            "was in force for a time only has valid_from and valid_to.",
        )


def _results_crs(settings: Settings, geometry: gpd.GeoSeries) -> CRS:
    if settings.inventory.crs:
        return metric_crs(settings.inventory.crs)
    own = CRS.from_user_input(geometry.crs)
    if is_metric(own):
        return own
    points = shapely.get_coordinates(geometry.to_numpy())
    lon, lat = move_points(points[:, 0], points[:, 1], own, CRS.from_user_input(WGS84))
    return utm_for(lon, lat)


def _mended(table: pd.DataFrame, mended: np.ndarray, given: gpd.GeoSeries, area: np.ndarray) -> list[pd.DataFrame]:
    if not mended.any():
        return []
    shapes = given[mended].to_numpy()
    words = pd.DataFrame(
        {
            "reason": shapely.is_valid_reason(shapes),
            "before": [f"{value / M2_PER_HECTARE:.4f}" for value in geodesic_area_m2(given[mended])],
            "after": [f"{value / M2_PER_HECTARE:.4f}" for value in area[mended]],
        }
    )
    return [
        note("invalid polygon", table[mended], value=table.loc[mended, "parcel"].to_numpy(dtype=object), fill=words)
    ]


def _without_area(rows: pd.DataFrame) -> list[pd.DataFrame]:
    return [note("parcel without area", rows, value=rows["parcel"].to_numpy(dtype=object))]


def _planar(planar: gpd.GeoSeries, area: np.ndarray, file: str) -> list[pd.DataFrame]:
    flat = float(shapely.area(planar.to_numpy()).sum())
    difference = flat / float(area.sum()) - 1
    if abs(difference) <= limit("area", "planar_difference"):
        return []
    return [note("map area differs", file=file, value=f"{difference:+.3%}", fill={"difference": f"{difference:+.2%}"})]


def _stated(table: pd.DataFrame, stated: pd.Series) -> list[pd.DataFrame]:
    ratio = table["area_ha"] / table["measured_ha"] - 1
    off = table[stated & (ratio.abs() > limit("area", "stated_difference"))]
    bad = table[table["area_ha"].notna() & ~stated]
    words = pd.DataFrame(
        {"stated": off["area_ha"].map("{:.4f}".format), "measured": off["measured_ha"].map("{:.4f}".format)}
    )
    return [
        note("stated area differs", off, value=off["parcel"].to_numpy(dtype=object), fill=words),
        note("stated area not usable", bad, value=bad["parcel"].to_numpy(dtype=object)),
    ]


def _strata(table: pd.DataFrame, given: bool) -> list[pd.DataFrame]:
    if not given or (table["stratum"] == "").all():
        table["stratum"] = pd.Series([_ALL] * len(table), dtype="str")
        return []
    blank = table["stratum"] == ""
    table.loc[blank, "stratum"] = _UNASSIGNED
    value = table.loc[blank, "parcel"].to_numpy(dtype=object)
    return [note("parcel without stratum", table[blank], value=value, fill={"stratum": _UNASSIGNED})]


def _overlaps(table: pd.DataFrame, planar: gpd.GeoSeries) -> list[pd.DataFrame]:
    """Measure overlaps of parcels, found through a spatial index."""
    shapes = planar.to_numpy()
    first, second = shapely.STRtree(shapes).query(shapes, predicate="intersects")
    pairs = first < second
    first, second = first[pairs], second[pairs]
    area = shapely.area(shapely.intersection(shapes[first], shapes[second]))
    large = np.flatnonzero(area > limit("area", "overlap_m2"))
    large = large[np.lexsort((second[large], first[large]))]
    names = table["parcel"].to_numpy(dtype=object)
    value = [f"{names[first[k]]} / {names[second[k]]}" for k in large]
    words = pd.DataFrame({"area": [f"{area[k] / M2_PER_HECTARE:.4f}" for k in large]})
    return [note("overlapping parcels", table.iloc[first[large]], value=value, fill=words)]


def _gaps(planar: gpd.GeoSeries, file: str) -> list[pd.DataFrame]:
    """Measure holes enclosed by several parcels; a hole inside a single parcel is a lake or the like, not a gap."""
    shapes = planar.to_numpy()
    whole = shapely.union_all(shapes)
    holes = np.array(
        [shapely.Polygon(ring) for part in shapely.get_parts(whole) for ring in part.interiors], dtype=object
    )
    if not len(holes):
        return []
    hole, _ = shapely.STRtree(shapes).query(holes, predicate="intersects")
    several = np.bincount(hole, minlength=len(holes)) > 1
    area = shapely.area(holes)
    kept = np.flatnonzero(several & (area > limit("area", "overlap_m2")))
    kept = kept[np.argsort(-area[kept], kind="stable")]
    listed = int(limit("area", "gaps_listed"))
    parts = []
    for k in kept[:listed]:
        x, y = shapely.get_coordinates(shapely.point_on_surface(holes[k]))[0]
        words = {"area": f"{area[k] / M2_PER_HECTARE:.4f}", "place": f"{x:.0f}, {y:.0f}"}
        parts.append(note("gap between parcels", file=file, value=words["place"], fill=words))
    if len(kept) > listed:
        rest = {"count": len(kept) - listed, "area": f"{area[kept[listed:]].sum() / M2_PER_HECTARE:.4f}"}
        parts.append(note("further gaps between parcels", file=file, fill=rest))
    return parts


def locate(parcels: gpd.GeoDataFrame, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """Return for each point the row of the parcel it lies in (the first of several), -1 for none.

    Parameters
    ----------
    parcels : GeoDataFrame
        Parcels.
    x, y : ndarray
        Points in the same coordinate system; NaN lies nowhere.
    """
    found = np.full(len(x), -1, dtype="int64")
    known = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
    points = shapely.points(x[known], y[known])
    point, parcel = shapely.STRtree(parcels.geometry.to_numpy()).query(points, predicate="intersects")
    order = np.lexsort((parcel, point))[::-1]
    found[known[point[order]]] = parcel[order]
    return found
