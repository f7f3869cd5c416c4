"""Read everything a project file names."""

from __future__ import annotations

import pandas as pd

from landcarbon.findings import join_findings
from landcarbon.inputs import Inputs
from landcarbon.inventory.models import Settings
from landcarbon.read.crs import crs_text
from landcarbon.read.plots import read_plots
from landcarbon.read.samples import read_samples
from landcarbon.read.source import FileLog
from landcarbon.read.strata import make_strata, read_species, read_stated_areas
from landcarbon.read.surveys import order_surveys
from landcarbon.read.trees import read_trees
from landcarbon.read.visits import make_visits, read_visits

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
    plots = read_plots(settings, parcels, log)
    trees = read_trees(settings, log)
    rows = trees.frame
    surveys = order_surveys(settings, _median_dates(rows))
    rows["survey"] = rows["survey"].cat.reorder_categories(list(surveys["survey"]))
    visits, visit_findings = make_visits(settings, surveys, plots.frame, plots.extra, rows, read_visits(settings, log))
    stated, stated_findings = read_stated_areas(settings, log)
    strata, strata_findings = make_strata(stated, plots.frame, parcels)
    samples = read_samples(settings, list(plots.frame["plot"]), log)
    codes = set(rows["species"].cat.categories) | samples.species()
    species, species_findings = read_species(settings, sorted(codes), log)
    findings = join_findings(
        [
            *(parcels.findings if parcels else []),
            *stated_findings,
            *strata_findings,
            *plots.findings,
            *trees.findings,
            *visit_findings,
            *samples.findings,
            *species_findings,
        ]
    )
    return Inputs(
        trees=rows,
        species=species,
        plots=plots.frame,
        visits=visits,
        parcels=parcels.frame if parcels else None,
        strata=strata,
        surveys=surveys,
        findings=findings,
        files=log.frame(),
        crs=crs_text(plots.crs) if plots.crs is not None else None,
        area_method=_area_method(strata, parcels is not None, bool(parcels and parcels.stated)),
        samples=samples.tables,
    )


def _median_dates(trees: pd.DataFrame) -> dict[str, pd.Timestamp]:
    dated = trees.loc[trees["date"].notna() & trees["used"], ["survey", "date"]]
    return {str(name): date for name, date in dated.groupby("survey", observed=True)["date"].median().items()}


def _area_method(strata: pd.DataFrame, polygons: bool, stated_parcels: bool) -> str:
    """Say in one sentence where the areas come from."""
    parts = []
    if polygons:
        parts.append("of parcels on the ellipsoid of their coordinate system (geodesic)")
    if stated_parcels:
        parts.append("of parcels as stated in their table where given")
    if (strata["area_source"] == "stated").any():
        parts.append("of strata as stated by the user")
    if (strata["area_source"] == "unknown").any():
        unknown = strata.loc[strata["area_source"] == "unknown", "stratum"]
        parts.append(f"not known for {len(unknown)} of {len(strata)} strata")
    return f"Areas: {'; '.join(parts)}."
