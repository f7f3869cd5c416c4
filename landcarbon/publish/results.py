"""The results of one run, as they are published and read back."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import pandas as pd

from landcarbon.change import CHANGE_COLUMNS
from landcarbon.estimate.stocks import STOCK_COLUMNS
from landcarbon.inventory.models import SAMPLE_TABLES

if TYPE_CHECKING:
    import geopandas as gpd

    from landcarbon.read.raster_files import RasterFile
    from landcarbon.read.rasters import RasterPlace

__all__ = [
    "CHANGE_COLUMNS",
    "FURTHER_FILES",
    "OPTIONAL_COLUMNS",
    "SAMPLE_FILES",
    "STOCK_COLUMNS",
    "RasterRequest",
    "Results",
    "parts_of_plots",
    "sums_of_plots",
]


#: Files of the sample tables by the name of the table; a results folder holds those it has samples for.
SAMPLE_FILES = {table: f"samples_{table}.parquet" for table in SAMPLE_TABLES}
#: Files of what not every inventory has, by the name in ``Results.further``.
FURTHER_FILES = {
    name: f"{name}.csv"
    for name in ("trend", "area_effect", "parcel_detail", "parcel_models", "raster_worth", "raster_lines")
}
#: Columns that stocks and change have if the project file asks for lower bounds.
OPTIONAL_COLUMNS = ("density_at_least", "stock_at_least", "change_at_least")


@dataclass(frozen=True)
class RasterRequest:
    """What the maps of cells are made from.

    Attributes
    ----------
    inventory : str
        Name of the inventory.
    parcels : GeoDataFrame
        parcel, stratum, geometry in the coordinate system of the inventory.
    place : RasterPlace
        Where files are sought; its coordinate system is that of the maps.
    files : sequence of RasterFile
        Auxiliary rasters; may be empty.
    coefficients : DataFrame
        survey, stratum, term, value; a survey without any gets a map of parcel means.
    cell_m : float, optional
        Cell size; that of the first raster if left out.
    """

    inventory: str
    parcels: gpd.GeoDataFrame
    place: RasterPlace
    files: Sequence[RasterFile] = ()
    coefficients: pd.DataFrame = field(
        default_factory=lambda: pd.DataFrame({"survey": [], "stratum": [], "term": [], "value": []})
    )
    cell_m: float | None = None


@dataclass(frozen=True)
class Results:
    """Everything one run hands to the outputs. Frames are not to be changed in place.

    Attributes
    ----------
    settings_summary : dict
        Settings in effect, JSON-able. Read here: ``name`` (of the inventory), ``confidence`` (e.g. 0.95) and ``seed``.
    stocks : DataFrame
        Columns ``STOCK_COLUMNS``; one row per unit, survey and pool. A unit that cannot be estimated has NaN in
        ``density_t_c_ha`` and the reason in ``method``.
    change : DataFrame
        Columns ``CHANGE_COLUMNS``; may be empty (one survey).
    findings : DataFrame
        Columns of :data:`landcarbon.findings.FINDING_COLUMNS`.
    trees : DataFrame
        Tree rows with the outcome of the tree step.
    plots : DataFrame
        Long: survey, plot, pool, density_t_c_ha [t C/ha] and whatever else is known of the visit. Where there is a
        column part, rows with an empty part hold the pool, the others its parts.
    parcels : GeoDataFrame or None
        parcel, stratum, land_use, area_ha [ha], geometry; None for an inventory without polygons.
    plot_points : DataFrame
        plot, parcel, stratum, lon, lat [deg, WGS 84; NaN if unknown], inside (False: in no parcel).
    surveys : DataFrame
        survey, since, until; in the order of time.
    reconciliation : DataFrame
        Rows read, used and set aside at each step.
    run : dict
        JSON-able facts for the provenance file, e.g. ``inputs`` (list of file, sha256, bytes, rows, role).
    crs : str or None
        Coordinate system of the parcels.
    area_method : str
        One sentence on where the areas come from.
    marks : list of str
        Sentences that must stand on every output, such as the share of biomass beyond the diameter ranges.
    samples : dict of DataFrame
        Rows of the sample tables (pieces, lines, logs, stumps, litter, ground_vegetation, saplings, soil) by the name
        of the table, as far as there are any, with ``used`` as it ended.
    further : dict of DataFrame
        Further tables by the names of ``FURTHER_FILES``, as far as there are any: trend lines, what a change of area
        brings, how the figures of parcels are composed, and the models behind them.
    rasters : RasterRequest or None
        What the rasters of density and change are made from; None where none are wanted, and in results read back.
    """

    settings_summary: dict[str, Any]
    stocks: pd.DataFrame
    change: pd.DataFrame
    findings: pd.DataFrame
    trees: pd.DataFrame
    plots: pd.DataFrame
    parcels: gpd.GeoDataFrame | None
    plot_points: pd.DataFrame
    surveys: pd.DataFrame
    reconciliation: pd.DataFrame
    run: dict[str, Any] = field(default_factory=dict)
    crs: str | None = None
    area_method: str = ""
    marks: list[str] = field(default_factory=list)
    samples: dict[str, pd.DataFrame] = field(default_factory=dict)
    further: dict[str, pd.DataFrame] = field(default_factory=dict)
    rasters: RasterRequest | None = None

    @property
    def name(self) -> str:
        """Name of the inventory."""
        return str(self.settings_summary.get("name", ""))

    @property
    def confidence(self) -> float:
        """Confidence level of the intervals, between 0 and 1; NaN if the settings do not say."""
        return float(self.settings_summary.get("confidence", float("nan")))

    @property
    def interval_name(self) -> str:
        """What an interval is called on the outputs, e.g. ``95 % interval``."""
        return "interval" if pd.isna(self.confidence) else f"{self.confidence * 100:g} % interval"


def sums_of_plots(plots: pd.DataFrame, pool: str | None = None) -> pd.DataFrame:
    """Return the rows of whole pools, without those of their parts.

    Parameters
    ----------
    plots : DataFrame
        As in :class:`Results`.
    pool : str, optional
        Only this pool.
    """
    keep = _blank(plots["part"]) if "part" in plots else pd.Series(True, index=plots.index)
    if pool is not None:
        keep &= plots["pool"].astype("str").eq(pool)
    return plots[keep]


def parts_of_plots(plots: pd.DataFrame, pool: str | None = None) -> pd.DataFrame:
    """Return the rows of parts of pools; none where the table has no column part."""
    if "part" not in plots:
        return plots.iloc[:0].assign(part="")
    keep = ~_blank(plots["part"])
    if pool is not None:
        keep &= plots["pool"].astype("str").eq(pool)
    return plots[keep]


def _blank(column: pd.Series) -> pd.Series:
    return column.isna() | column.astype("str").eq("")
