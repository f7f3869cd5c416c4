"""Strata and their areas, and the table of species codes."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from landcarbon.errors import InputFileError, SettingsError
from landcarbon.inventory.models import Settings
from landcarbon.inventory.units import convert
from landcarbon.read.limits import limit
from landcarbon.read.mapping import read_mapped
from landcarbon.read.notes import note
from landcarbon.read.source import FileLog, find_source

if TYPE_CHECKING:
    from landcarbon.read.parcels import ParcelTable

__all__ = ["first_phase_points", "make_strata", "read_species", "read_stated_areas"]


def read_stated_areas(settings: Settings, log: FileLog) -> tuple[pd.Series, list[pd.DataFrame]]:
    """Return the areas of strata stated by the user.

    Parameters
    ----------
    settings : Settings
        The project file.
    log : FileLog
        Notes what was read.

    Returns
    -------
    Series, list of DataFrame
        Area [ha] by stratum, folded strata added up; and findings.

    Raises
    ------
    InputFileError
        If the file cannot be used.
    """
    strata = settings.strata
    findings: list[pd.DataFrame] = []
    areas = pd.Series(dict(strata.areas), dtype="float64")
    areas = pd.Series(convert(areas.to_numpy(), strata.unit, "ha"), index=areas.index, dtype="float64")
    if strata.first_phase_area is not None:
        points = pd.Series(dict(strata.first_phase), dtype="float64")
        whole = convert(np.array([strata.first_phase_area]), strata.unit, "ha")[0]
        areas = whole * points / points.sum()
    if strata.file:
        source = find_source(strata.file, settings.folder, "strata", allow_outside=settings.inventory.allow_outside)
        mapped = read_mapped(source, "strata", settings, log)
        table = mapped.frame
        twice = table.loc[table["stratum"].duplicated(), "stratum"]
        if len(twice):
            raise InputFileError(f"stratum {twice.iloc[0]!r} stands more than once", where=source.name)
        values = table["area_ha"].to_numpy()
        if "area" not in settings.units.get("strata", {}):
            values = convert(values, strata.unit, "ha")
        bad = ~(values > 0)
        findings = [
            *mapped.findings,
            note("stratum area not usable", table[bad], value=table.loc[bad, "stratum"].to_numpy(dtype=object)),
        ]
        areas = pd.Series(np.where(bad, np.nan, values), index=table["stratum"], dtype="float64")
    merged = areas.groupby(areas.index.to_series().replace(dict(strata.merge)).to_numpy()).sum(min_count=1)
    return merged, findings


def first_phase_points(settings: Settings) -> pd.Series | None:
    """Points of the first phase by stratum, folded strata added up; None without a first phase."""
    if not settings.strata.first_phase:
        return None
    points = pd.Series(dict(settings.strata.first_phase), dtype="float64")
    folded: pd.Series = points.groupby(points.index.to_series().replace(dict(settings.strata.merge)).to_numpy()).sum()
    return folded


def make_strata(
    stated: pd.Series, plots: pd.DataFrame, parcels: ParcelTable | None, first_phase: pd.Series | None = None
) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Settle the area of every stratum: stated before measured.

    Parameters
    ----------
    stated : Series
        Area [ha] by stratum as stated.
    plots : DataFrame
        ``Inputs.plots``.
    parcels : ParcelTable or None
        Parcels.
    first_phase : Series, optional
        Points of a first phase by stratum.

    Returns
    -------
    DataFrame, list of DataFrame
        ``Inputs.strata`` and findings.
    """
    measured = pd.Series(dtype="float64")
    if parcels is not None:
        measured = parcels.frame.groupby("stratum")["area_ha"].sum()
    of_plots = set(plots.loc[plots["inside"], "stratum"]) - {""}
    names = sorted(of_plots | set(measured.index) | set(stated.index))
    frame = pd.DataFrame({"stratum": pd.Series(names, dtype="str")})
    said = frame["stratum"].map(stated).astype("float64")
    drawn = frame["stratum"].map(measured).astype("float64")
    frame["area_ha"] = said.fillna(drawn)
    source = np.where(said.notna(), "stated", np.where(drawn.notna(), "polygons", "unknown"))
    frame["area_source"] = pd.Series(source, dtype="str")
    if first_phase is not None:
        _check_first_phase(frame["stratum"], of_plots, first_phase)
        frame["first_phase"] = frame["stratum"].map(first_phase).astype("float64")
    off = (said / drawn - 1).abs() > limit("area", "stated_difference")
    words = pd.DataFrame({"stated": said[off].map("{:.4f}".format), "measured": drawn[off].map("{:.4f}".format)})
    unknown = frame[frame["area_source"] == "unknown"]
    findings = [
        note("stratum area differs", frame[off], value=frame.loc[off, "stratum"].to_numpy(dtype=object), fill=words),
        note("stratum area unknown", unknown, value=unknown["stratum"].to_numpy(dtype=object)),
    ]
    return frame, findings


def _check_first_phase(strata: pd.Series, of_plots: set[str], first_phase: pd.Series) -> None:
    """Refuse strata that the first phase does not tell the area of.

    Raises
    ------
    SettingsError
        If a stratum is not listed, or has plots and no point.
    """
    unlisted = sorted(set(strata) - set(first_phase.index))
    if unlisted:
        raise SettingsError(
            f"the first phase does not name stratum {', '.join(unlisted)}",
            where="[strata] first_phase",
            remedy="Give the points found in every stratum; 0 where there was none.",
        )
    empty = sorted(of_plots & set(first_phase.index[first_phase <= 0]))
    if empty:
        raise SettingsError(
            f"stratum {', '.join(empty)} has plots and no point of the first phase, so its area would be zero",
            where="[strata] first_phase",
            remedy="Check the points, or fold the stratum into another with merge.",
        )


def read_species(settings: Settings, codes: Sequence[str], log: FileLog) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Return the scientific name of every species code that occurs in the tables.

    Parameters
    ----------
    settings : Settings
        The project file.
    codes : sequence of str
        Distinct codes, in order.
    log : FileLog
        Notes what was read.

    Returns
    -------
    DataFrame, list of DataFrame
        ``Inputs.species`` (the code stands for itself where no table names it) and findings.

    Raises
    ------
    InputFileError
        If the file cannot be used.
    """
    names = dict(settings.species.names)
    findings: list[pd.DataFrame] = []
    if settings.species.file:
        source = find_source(
            settings.species.file, settings.folder, "species", allow_outside=settings.inventory.allow_outside
        )
        mapped = read_mapped(source, "species", settings, log)
        table = mapped.frame
        differing = table.drop_duplicates(["species", "scientific_name"])
        twice = differing["species"].duplicated()
        findings = [
            *mapped.findings,
            note("species code repeated", differing[twice]),
        ]
        kept = differing[~twice]
        names = {**dict(zip(kept["species"], kept["scientific_name"], strict=True)), **names}
    folded = {key.casefold(): value for key, value in names.items()}
    found = [names.get(code) or folded.get(code.casefold()) or "" for code in codes]
    frame = pd.DataFrame({"species": pd.Series(codes, dtype="str"), "scientific_name": pd.Series(found, dtype="str")})
    unnamed = (frame["scientific_name"] == "") & (frame["species"] != "")
    frame["scientific_name"] = frame["scientific_name"].where(frame["scientific_name"] != "", frame["species"])
    if names and unnamed.any():
        missing = frame.loc[unnamed, ["species"]]
        findings.append(note("species code not in table", missing))
    return frame, findings
