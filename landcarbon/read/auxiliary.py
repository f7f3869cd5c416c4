"""What is known of the whole area: rasters under plots and over parcels, and classes of known area."""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd

from landcarbon.errors import SettingsError
from landcarbon.findings import join_findings
from landcarbon.inputs import Inputs
from landcarbon.inventory import Settings
from landcarbon.inventory.units import convert
from landcarbon.read.footprints import Footprint
from landcarbon.read.raster_files import find_raster
from landcarbon.read.rasters import RasterFile, RasterPlace, plot_values, raster_names, unit_means
from landcarbon.read.source import FileLog

__all__ = ["Auxiliary", "PostClasses", "read_auxiliary", "read_post_strata"]


@dataclass(frozen=True)
class Auxiliary:
    """Rasters and what they hold where.

    Attributes
    ----------
    files : tuple of RasterFile
        The rasters.
    place : RasterPlace
        Where they lie.
    plot_values : DataFrame
        survey, plot, a column per raster, share_covered.
    unit_means : DataFrame
        survey, by, unit, a column per raster, valid_ha, share_covered.
    findings : DataFrame
        What was noted.
    sources : DataFrame
        The files with their checksums, as ``Inputs.files``.
    """

    files: tuple[RasterFile, ...]
    place: RasterPlace
    plot_values: pd.DataFrame
    unit_means: pd.DataFrame
    findings: pd.DataFrame
    sources: pd.DataFrame

    def covariates(self) -> pd.DataFrame:
        """Means of the rasters by survey and parcel."""
        rows = self.unit_means[self.unit_means["by"] == "parcel"]
        names = raster_names(self.files)
        return rows.rename(columns={"unit": "parcel"})[["survey", "parcel", *names]].reset_index(drop=True)


@dataclass(frozen=True)
class PostClasses:
    """Classes of the plots (survey, plot, class) and their areas (survey, by, unit, class, area_ha)."""

    plots: pd.DataFrame
    areas: pd.DataFrame


def read_auxiliary(settings: Settings, inputs: Inputs) -> Auxiliary | None:
    """Read the rasters of an inventory.

    Parameters
    ----------
    settings : Settings
        The project file.
    inputs : Inputs
        Checked tables.

    Returns
    -------
    Auxiliary or None
        None without rasters.

    Raises
    ------
    SettingsError
        If a raster or survey named in the settings does not exist, or there are no parcels for the rasters to cover.
    InputFileError
        If a raster cannot be used.
    """
    wanted = settings.estimation.rasters
    names = list(settings.rasters) if wanted is None else list(wanted)
    if not names:
        return None
    _check_names(settings, names)
    if inputs.parcels is None:
        raise SettingsError(
            "rasters assist only where there are parcels for them to cover",
            where="[rasters]",
            remedy="Name the polygons under [parcels], or take the rasters out.",
        )
    surveys = [str(name) for name in inputs.surveys["survey"]]
    files = tuple(file for name in names for file in _files(name, settings, surveys))
    place = RasterPlace(settings.folder, inputs.crs, settings.inventory.allow_outside)
    plots = inputs.plots.loc[inputs.plots["inside"].to_numpy(dtype=bool), ["plot", "x", "y"]].reset_index(drop=True)
    plots["area_ha"] = plots["plot"].map(inputs.visits.groupby("plot", observed=True)["plot_area_ha"].max())
    values, found = plot_values(files, surveys, plots, _footprint(settings), place, parcels=inputs.parcels)
    means, told = unit_means(
        files, surveys, inputs.parcels, place, inventory=settings.inventory.name, strata=inputs.strata
    )
    return Auxiliary(files, place, values, means, join_findings([found, told]), _sources(files, place))


def read_post_strata(settings: Settings, inputs: Inputs) -> PostClasses | None:
    """Gather the classes that plots were sorted into after the survey.

    Raises
    ------
    SettingsError
        If areas or the column are missing, or the inventory has several strata.
    """
    stated = settings.post_strata.areas
    given = "post_stratum" in inputs.plots and inputs.plots["post_stratum"].ne("").any()
    if not stated and not given:
        return None
    if not stated or not given:
        raise SettingsError(
            "classes of the plots and their areas go together",
            where="[post_strata] areas" if given else "[columns.plots] post_stratum",
            remedy="Map the column post_stratum of the plots and state the area of each class.",
        )
    strata = [str(name) for name in inputs.strata["stratum"]]
    if len(strata) > 1:
        raise SettingsError(
            f"classes of known area are for an inventory of one stratum, this one has {len(strata)}",
            where="[post_strata]",
            remedy="Use the classes as strata, or give them as a raster of 0 and 1 for each class under [rasters].",
        )
    surveys = [str(name) for name in inputs.surveys["survey"]]
    classes = inputs.plots[["plot"]].assign(**{"class": inputs.plots["post_stratum"].astype("str")})
    unknown = sorted(set(classes["class"]) - set(stated) - {""})
    if unknown:
        raise SettingsError(
            f"plots have classes without an area: {', '.join(unknown)}",
            where="[post_strata] areas",
            remedy="State the area of every class that plots were sorted into.",
        )
    names = list(stated)
    hectares = convert(pd.Series(stated, dtype="float64").to_numpy(), settings.post_strata.unit, "ha")
    areas = pd.DataFrame({"by": "stratum", "unit": strata[0], "class": names, "area_ha": hectares})
    return PostClasses(
        pd.concat([classes.assign(survey=name) for name in surveys], ignore_index=True),
        pd.concat([areas.assign(survey=name) for name in surveys], ignore_index=True),
    )


def _check_names(settings: Settings, names: list[str]) -> None:
    unknown = [name for name in names if name not in settings.rasters]
    if unknown:
        raise SettingsError(
            f"there is no raster {unknown[0]!r}",
            where="[estimation] rasters",
            remedy=f"Rasters named under [rasters]: {', '.join(settings.rasters) or 'none'}.",
        )


def _files(name: str, settings: Settings, surveys: list[str]) -> list[RasterFile]:
    raster = settings.rasters[name]
    if raster.file is not None:
        return [RasterFile(name, "", raster.file, raster.band, raster.crs or "")]
    unknown = [survey for survey in raster.files if survey not in surveys]
    if unknown:
        raise SettingsError(
            f"there is no survey {unknown[0]!r}",
            where=f"[rasters.{name}] files",
            remedy=f"Surveys are: {', '.join(surveys)}.",
        )
    return [RasterFile(name, survey, path, raster.band, raster.crs or "") for survey, path in raster.files.items()]


def _sources(files: tuple[RasterFile, ...], place: RasterPlace) -> pd.DataFrame:
    log = FileLog()
    for file in files:
        log.add(find_raster(file, place.folder, allow_outside=place.allow_outside), 0, columns=file.name)
    return log.frame()


def _footprint(settings: Settings) -> Footprint:
    design = settings.plots.design
    if design.kind == "circle":
        return Footprint(radius_m=design.radius_m)
    if design.kind == "nested":
        return Footprint(radius_m=max(circle.radius_m for circle in design.circles))
    if design.kind == "rectangle":
        return Footprint(width_m=design.width_m, length_m=design.length_m)
    area = getattr(design, "area_ha", None)
    return Footprint(area_ha=area) if area else Footprint()
