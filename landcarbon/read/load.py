"""Read everything a project file names."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import pandas as pd

from landcarbon.findings import join_findings
from landcarbon.inputs import Inputs
from landcarbon.inventory.models import Settings
from landcarbon.read.crs import crs_text
from landcarbon.read.plots import PlotTable, place_by_survey, place_plots, read_plots
from landcarbon.read.samples import read_samples
from landcarbon.read.source import FileLog
from landcarbon.read.strata import first_phase_points, make_strata, read_species, read_stated_areas
from landcarbon.read.surveys import order_surveys
from landcarbon.read.trees import read_trees
from landcarbon.read.validity import survey_days
from landcarbon.read.visits import field_rows, make_visits, read_visits

if TYPE_CHECKING:
    import geopandas as gpd

    from landcarbon.read.parcels import ParcelTable

__all__ = ["load_inputs"]


def load_inputs(settings: Settings) -> Inputs:
    """Read the field files of an inventory into canonical tables.

    Parameters
    ----------
    settings : Settings
        The project file.

    Returns
    -------
    Inputs
        Tables, findings of reading, and the files with their checksums.

    Raises
    ------
    InputFileError
        If a file is missing or cannot be used.
    SettingsError
        If the settings do not fit the files.
    """
    log = FileLog()
    parcels = None
    if settings.parcels is not None:
        from landcarbon.read.parcels import read_parcels

        parcels = read_parcels(settings, log)
    plots = read_plots(settings, parcels.crs if parcels else None, log)
    trees = read_trees(settings, log)
    visit_rows = read_visits(settings, log)
    stated, stated_findings = read_stated_areas(settings, log)
    samples = read_samples(settings, list(plots.frame["plot"]), log)
    rows = trees.frame
    surveys = order_surveys(settings, _median_dates([rows, *samples.tables.values()]))
    rows["survey"] = rows["survey"].cat.reorder_categories(list(surveys["survey"]))
    visits, visit_findings = make_visits(
        settings, surveys, plots.frame, plots.extra, field_rows(settings, rows, samples.tables), visit_rows
    )
    places = _place(settings, plots, parcels, survey_days(surveys, visits))
    strata, strata_findings = make_strata(stated, places.latest(), places.parcels, first_phase_points(settings))
    codes = set(rows["species"].cat.categories) | samples.species()
    species, species_findings = read_species(settings, sorted(codes), log)
    findings = join_findings(
        [
            *(parcels.findings if parcels else []),
            *places.about_parcels,
            *stated_findings,
            *strata_findings,
            *plots.findings,
            *places.about_plots,
            *trees.findings,
            *visit_findings,
            *samples.findings,
            *species_findings,
        ]
    )
    return Inputs(
        trees=rows,
        species=species,
        plots=places.plots,
        visits=_within(visits, places.by_survey),
        parcels=places.parcels.frame if places.parcels else None,
        strata=strata,
        surveys=surveys,
        findings=findings,
        files=log.frame(),
        crs=crs_text(plots.crs) if plots.crs is not None else None,
        area_method=_area_method(strata, parcels),
        samples=samples.tables,
        parcel_versions=places.versions,
        parcels_in_force=places.in_force,
        parcel_of=places.by_survey,
    )


@dataclass(frozen=True)
class _Places:
    """Plots in their parcels, and the parcels of the latest survey; the rest where boundaries change."""

    plots: pd.DataFrame
    parcels: ParcelTable | None
    about_plots: list[pd.DataFrame]
    about_parcels: list[pd.DataFrame] = field(default_factory=list)
    versions: gpd.GeoDataFrame | None = None
    in_force: pd.DataFrame | None = None
    by_survey: pd.DataFrame | None = None

    def latest(self) -> pd.DataFrame:
        """Return the plots as they lie at the latest survey."""
        if self.by_survey is None:
            return self.plots
        return self.by_survey.iloc[-len(self.plots) :]


def _place(settings: Settings, plots: PlotTable, parcels: ParcelTable | None, days: pd.DataFrame) -> _Places:
    if parcels is None or not parcels.dated:
        frame, about = place_plots(plots, parcels, settings)
        return _Places(frame, parcels, about)
    from landcarbon.read.parcels import settle_boundaries

    found = settle_boundaries(parcels, days)
    frame, by_survey, about = place_by_survey(plots, found, settings)
    return _Places(frame, found.latest, about, found.findings, found.versions, found.in_force, by_survey)


def _within(visits: pd.DataFrame, places: pd.DataFrame | None) -> pd.DataFrame:
    """Leave out visits to plots that were not in the inventory at that survey, where boundaries change."""
    if places is None:
        return visits
    inside = places.loc[places["inside"], ["survey", "plot"]]
    there = pd.MultiIndex.from_frame(visits[["survey", "plot"]]).isin(pd.MultiIndex.from_frame(inside))
    return visits.assign(visited=visits["visited"].to_numpy(dtype=bool) & there)


def _median_dates(tables: Sequence[pd.DataFrame]) -> dict[str, pd.Timestamp]:
    """Return the median date of each survey, from the first table that has any: trees before samples."""
    found: dict[str, pd.Timestamp] = {}
    for rows in tables:
        dated = rows.loc[rows["date"].notna() & rows["used"], ["survey", "date"]]
        medians = dated.groupby("survey", observed=True)["date"].median()
        found = {**{str(name): date for name, date in medians.items()}, **found}
    return found


def _area_method(strata: pd.DataFrame, parcels: ParcelTable | None) -> str:
    """Say in one sentence where the areas come from."""
    parts = []
    if parcels is not None:
        parts.append("of parcels on the ellipsoid of their coordinate system (geodesic)")
    if parcels is not None and parcels.stated:
        parts.append("of parcels as stated in their table where given")
    if parcels is not None and parcels.dated:
        parts.append("of parcels within the boundaries in force at each survey")
    if (strata["area_source"] == "stated").any():
        by_points = "first_phase" in strata
        parts.append("of strata by points of a first phase" if by_points else "of strata as stated by the user")
    if (strata["area_source"] == "unknown").any():
        unknown = strata.loc[strata["area_source"] == "unknown", "stratum"]
        parts.append(f"not known for {len(unknown)} of {len(strata)} strata")
    return f"Areas: {'; '.join(parts)}."
