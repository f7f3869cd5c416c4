"""Values of auxiliary rasters: under plots, and wall to wall over parcels, strata and the inventory.

Means are weighted by the area of each cell inside the plot or parcel on the map grid of the inventory, so a raster in
degrees counts by area too.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
import shapely

from landcarbon.errors import SettingsError
from landcarbon.findings import join_findings
from landcarbon.raster.limits import raster_limit
from landcarbon.raster.zones import Zones, ZoneSums
from landcarbon.read.footprints import Footprint, footprint_polygons
from landcarbon.read.raster_files import WINDOW_COLUMNS, WINDOW_ROWS, RasterFile, open_raster
from landcarbon.read.raster_notes import raster_note

if TYPE_CHECKING:
    import geopandas as gpd

__all__ = ["RasterFile", "RasterPlace", "plot_values", "raster_names", "serving_files", "unit_means"]

# Interpolation of equal cells gives values equal up to rounding.
_SAME = 1e-12


@dataclass(frozen=True)
class RasterPlace:
    """Where rasters are sought and how the inventory lies.

    Attributes
    ----------
    folder : Path
        Folder of the project file.
    crs : str or None
        Coordinate system of the inventory; None if nothing has coordinates.
    allow_outside : bool
        Whether files may lie outside the folder.
    """

    folder: Path
    crs: str | None
    allow_outside: bool = False


def raster_names(files: Sequence[RasterFile]) -> list[str]:
    """Return the names of the rasters, in the order given."""
    return list(dict.fromkeys(file.name for file in files))


def plot_values(
    files: Sequence[RasterFile],
    surveys: Sequence[str],
    plots: pd.DataFrame,
    footprint: Footprint,
    place: RasterPlace,
    *,
    parcels: gpd.GeoDataFrame | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the mean of each raster under each plot.

    Parameters
    ----------
    files : sequence of RasterFile
        Rasters; one without a survey serves all.
    surveys : sequence of str
        Surveys in order.
    plots : DataFrame
        plot, x, y [m, in the coordinate system of the inventory]; optional area_ha where plots differ.
    footprint : Footprint
        Ground of a plot.
    place : RasterPlace
        Where to look.
    parcels : GeoDataFrame, optional
        If given, only the ground inside the parcels counts for plots that reach over their outer edge.

    Returns
    -------
    values : DataFrame
        survey, plot, one column per raster, share_covered (the least share of the plot's ground covered by a raster).
        A plot covered too little has NaN.
    findings : DataFrame

    Raises
    ------
    InputFileError
        If a raster cannot be used.
    """
    x, y = plots["x"].to_numpy(dtype="float64"), plots["y"].to_numpy(dtype="float64")
    area = plots["area_ha"].to_numpy(dtype="float64") if "area_ha" in plots else None
    shapes, points = footprint_polygons(x, y, footprint, area)
    found = []
    if points and files:
        found.append(raster_note("plots without area of their own", value=str(points), words={"count": str(points)}))
    if parcels is not None:
        shapes = _inside(shapes, parcels)
    least = raster_limit("plot_share_least")
    ground = shapely.area(shapes)
    read = _read_all(files, shapes, place)
    blocks = []
    for survey in surveys:
        columns, share = {}, np.full(len(plots), np.inf)
        for name in raster_names(files):
            file = _serving(files, name, survey)
            if file is None:
                columns[name] = np.full(len(plots), np.nan)
                continue
            covered = read[file].share(ground)
            columns[name] = np.where(covered >= least, read[file].sums.mean, np.nan)
            share = np.minimum(share, covered)
        share = np.where(np.isfinite(share), share, np.nan)
        head = {"survey": [str(survey)] * len(plots), "plot": plots["plot"].to_numpy(dtype=object)}
        blocks.append(pd.DataFrame({**head, **columns, "share_covered": share}))
    found += [_plot_findings(file, plots, ground, read[file]) for file in read]
    names = ["survey", "plot", *raster_names(files), "share_covered"]
    table = pd.concat(blocks, ignore_index=True) if blocks else pd.DataFrame(columns=names)
    return table.astype({"survey": "str", "plot": "str"}), join_findings(found)


def unit_means(
    files: Sequence[RasterFile],
    surveys: Sequence[str],
    parcels: gpd.GeoDataFrame | None,
    place: RasterPlace,
    *,
    inventory: str = "",
    strata: pd.DataFrame | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the mean of each raster over each parcel, stratum and the inventory.

    Parameters
    ----------
    files, surveys, place
        As for :func:`plot_values`.
    parcels : GeoDataFrame or None
        parcel, stratum, area_ha, geometry; without it there is nothing to average over.
    inventory : str
        Name of the inventory, as unit of its row.
    strata : DataFrame, optional
        Strata that get a row even if no parcel lies in them.

    Returns
    -------
    means : DataFrame
        survey, by (inventory, stratum, parcel), unit, one column per raster, valid_ha and share_covered (those of the
        raster that covers least); with several rasters also ``covered.<raster>``, the share of each. Means are those of
        the covered part; without any they are NaN. Parcels are weighted by their area as stated in ``parcels``.
    findings : DataFrame

    Raises
    ------
    InputFileError
        If a raster cannot be used.
    """
    names = raster_names(files)
    if parcels is None or parcels.empty:
        columns = ["survey", "by", "unit", *names, "valid_ha", "share_covered"]
        return pd.DataFrame(columns=columns), join_findings([])
    shapes = parcels.geometry.to_numpy()
    ground = shapely.area(shapes)
    read = _read_all(files, shapes, place)
    blocks, found = [], []
    for survey in surveys:
        means, share = {}, {}
        for name in names:
            file = _serving(files, name, survey)
            if file is None:
                found.append(
                    raster_note("raster lacks survey", words={"name": name, "survey": str(survey)}, value=name)
                )
                means[name], share[name] = np.full(len(parcels), np.nan), np.zeros(len(parcels))
                continue
            means[name], share[name] = read[file].sums.mean, read[file].share(ground)
        table = _by_unit(parcels, means, share, inventory, strata)
        table.insert(0, "survey", str(survey))
        blocks.append(table)
    found += [_parcel_findings(file, parcels, ground, read[file]) for file in read]
    table = pd.concat(blocks, ignore_index=True)
    return table.astype({"survey": "str", "by": "str", "unit": "str"}), join_findings(found)


def serving_files(files: Sequence[RasterFile], terms: Sequence[str], survey: str) -> list[RasterFile]:
    """Return the file behind each term of a model.

    Parameters
    ----------
    files : sequence of RasterFile
        Rasters.
    terms : sequence of str
        A raster, or raster and survey with a blank between where a model takes that of another survey.
    survey : str
        Survey of the model. A raster without a file for it is taken from the last survey that has one.

    Raises
    ------
    SettingsError
        If there is no such raster.
    """
    found = []
    for term in terms:  # a handful
        named = [file for file in files if file.name == term]
        other = [file for file in files if term == f"{file.name} {file.survey}"]
        file = _serving(files, term, survey) or next(iter([*other, *named[::-1]]), None)
        if file is None:
            raise SettingsError(
                f"the model of survey {survey} takes raster {term}, which has no file",
                where="[rasters]",
                remedy=f"Rasters are: {', '.join(raster_names(files)) or 'none'}.",
            )
        found.append(file)
    return found


def _serving(files: Sequence[RasterFile], name: str, survey: str) -> RasterFile | None:
    """Return the file of a raster for a survey: its own, else the one for all."""
    own = [file for file in files if file.name == name and file.survey == str(survey)]
    common = [file for file in files if file.name == name and file.survey == ""]
    return next(iter([*own, *common]), None)


def _check_once(files: Sequence[RasterFile]) -> None:
    keys = [(file.name, file.survey) for file in files]
    twice = sorted({key for key in keys if keys.count(key) > 1})
    if twice:
        name, survey = twice[0]
        told = f"survey {survey}" if survey else "all surveys"
        raise SettingsError(
            f"raster {name} is named twice for {told}", where="[rasters]", remedy="Keep one, or give each its own name."
        )


@dataclass(frozen=True)
class _Reading:
    """Sums of one file over the polygons, and the cells they come from."""

    sums: ZoneSums
    cell_area: float
    cell_m: str
    warped: bool

    def share(self, ground: np.ndarray) -> np.ndarray:
        """Return the covered share of polygons of the areas ``ground``; 0 for polygons without one."""
        covered = self.sums.weight * self.cell_area
        return np.minimum(np.divide(covered, ground, out=np.zeros(len(ground)), where=ground > 0), 1.0)


def _read_all(files: Sequence[RasterFile], shapes: np.ndarray, place: RasterPlace) -> dict[RasterFile, _Reading]:
    """Read every file once and sum it over the polygons."""
    _check_once(files)
    solid = shapes[~shapely.is_empty(shapes)]
    if not files or not len(solid):
        return {file: _Reading(ZoneSums.zero(len(shapes)), 1.0, "", False) for file in files}
    if place.crs is None:
        raise SettingsError(
            "rasters can only be used where plots and parcels have coordinates",
            where="[rasters]",
            remedy="Give x, y and crs (or lon, lat) of the plots, or leave the rasters out.",
        )
    left, bottom, right, top = (float(value) for value in shapely.total_bounds(solid))
    zones = Zones(shapes)
    read = {}
    for file in files:
        sums = ZoneSums.zero(len(shapes))
        with open_raster(
            file, place.folder, place.crs, bounds=(left, bottom, right, top), allow_outside=place.allow_outside
        ) as raster:
            grid = raster.grid
            for window in grid.windows(WINDOW_ROWS, WINDOW_COLUMNS):
                cover = zones.cover(grid.part(window))
                if len(cover.cell):
                    sums.add(cover, raster.read(window))
            read[file] = _Reading(sums, grid.cell_area, f"{grid.cell_x:.4g}", raster.warped)
    return read


def _inside(shapes: np.ndarray, parcels: gpd.GeoDataFrame) -> np.ndarray:
    """Cut the ground of plots that reach over the outer edge of the parcels; plots wholly outside stay whole."""
    polygons = parcels.geometry.to_numpy()
    whole = shapely.union_all(polygons)
    shapely.prepare(whole)
    crossing = shapely.intersects(whole, shapes) & ~shapely.contains(whole, shapes)
    cut = shapes.copy()
    cut[crossing] = shapely.intersection(shapes[crossing], whole)
    flat = crossing & (shapely.area(cut) <= 0)
    cut[flat] = shapes[flat]
    return cut


def _by_unit(
    parcels: gpd.GeoDataFrame,
    means: dict[str, np.ndarray],
    share: dict[str, np.ndarray],
    inventory: str,
    strata: pd.DataFrame | None,
) -> pd.DataFrame:
    """Average parcels over strata and the inventory by area."""
    area = parcels["area_ha"].to_numpy(dtype="float64")
    stratum = parcels["stratum"].astype("str").to_numpy(dtype=object)
    named = pd.unique(stratum).tolist() if strata is None else strata["stratum"].astype("str").tolist()
    groups = [
        ("inventory", [inventory], np.zeros(len(parcels), dtype=np.int64)),
        ("stratum", named, pd.Index(named).get_indexer(stratum)),
        ("parcel", parcels["parcel"].tolist(), np.arange(len(parcels))),
    ]
    parts = []
    for by, units, member in groups:
        kept, count = member >= 0, len(units)
        total = np.bincount(member[kept], area[kept], minlength=count)
        columns: dict[str, object] = {"by": [by] * count, "unit": units}
        shares: dict[str, object] = {}
        valid_ha = total if means else np.zeros(count)
        for name, mean in means.items():
            weight = area * share[name]
            valid = np.bincount(member[kept], weight[kept], minlength=count)
            sums = np.bincount(member[kept], (weight * np.where(weight > 0, mean, 0.0))[kept], minlength=count)
            columns[name] = np.divide(sums, valid, out=np.full(count, np.nan), where=valid > 0)
            if len(means) > 1:
                shares[f"covered.{name}"] = np.divide(valid, total, out=np.zeros(count), where=total > 0)
            valid_ha = np.minimum(valid_ha, valid)
        columns["valid_ha"] = valid_ha
        columns["share_covered"] = np.divide(valid_ha, total, out=np.zeros(count), where=total > 0)
        parts.append(pd.DataFrame({**columns, **shares}))
    return pd.concat(parts, ignore_index=True)


def _plot_findings(file: RasterFile, plots: pd.DataFrame, ground: np.ndarray, reading: _Reading) -> pd.DataFrame:
    least, share = raster_limit("plot_share_least"), reading.share(ground)
    short = (ground > 0) & (share < least)
    rows = pd.DataFrame({"plot": plots.loc[short, "plot"].to_numpy(dtype=object)})
    return raster_note(
        "raster misses plot",
        rows.assign(survey=file.survey),
        words={"name": file.name, "least": f"{least:.0%}"},
        shares=[_percent(one) for one in share[short]],
        value=file.name,
        file=file.path,
    )


def _parcel_findings(
    file: RasterFile, parcels: gpd.GeoDataFrame, ground: np.ndarray, reading: _Reading
) -> pd.DataFrame:
    sums, share = reading.sums, reading.share(ground)
    words = {"name": file.name, "size": reading.cell_m}
    told: dict[str, Any] = {"file": file.path, "survey": file.survey}
    found = []
    if reading.warped:
        found.append(raster_note("raster warped", words=words, value=file.name, **told))
    valid = sums.weight > 0
    if not valid.any():
        found.append(raster_note("raster without values", words=words, value=file.name, **told))
        return join_findings(found)
    if math.isclose(sums.least.min(), sums.most.max(), rel_tol=_SAME):
        same = {**words, "value": f"{sums.least.min():g}"}
        found.append(raster_note("raster constant", words=same, value=file.name, **told))
    names = parcels["parcel"].to_numpy(dtype=object)
    part = valid & (1 - share > raster_limit("parcel_share_missing"))
    rows = pd.DataFrame({"parcel": names[part]})
    missing = [_percent(1 - one) for one in share[part]]
    found.append(
        raster_note("raster misses part of parcel", rows, words=words, shares=missing, value=names[part], **told)
    )
    none = pd.DataFrame({"parcel": names[~valid]})
    found.append(raster_note("raster misses parcel", none, words=words, value=names[~valid], **told))
    return join_findings(found)


def _percent(share: float) -> str:
    return f"{share:.1%}" if 0 < share < 1 else f"{share:.0%}"
