"""Checks of ids named in the project file: published models, against the data of ``allometry``, coordinate systems.

The catalogue is loaded only where the project file names something from it.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable
from importlib.resources import files

from landcarbon.inventory.faults import Fault
from landcarbon.inventory.locate import Path
from landcarbon.inventory.models import Heights, Settings
from landcarbon.inventory.nearest import suggestion

__all__ = ["id_faults"]

_MANY = 12  # up to this number every id is listed


def id_faults(settings: Settings) -> list[Fault]:
    """Check the ids of coordinate systems, root models, height curves, equations, publications and soil functions.

    Parameters
    ----------
    settings : Settings
        Sound settings.
    """
    return [
        *_crs_faults(settings),
        *_root_faults(settings),
        *_height_faults(settings.heights),
        *_equation_faults(settings),
        *_soil_faults(settings),
    ]


def _crs_faults(settings: Settings) -> list[Fault]:
    parcels = settings.parcels.crs if settings.parcels else None
    given = {"inventory": settings.inventory.crs, "parcels": parcels, "plots": settings.plots.crs}
    named = {section: text for section, text in given.items() if text is not None}
    if not named:
        return []
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    faults = []
    for section, text in named.items():
        try:
            CRS.from_user_input(text)
        except CRSError:
            what = f"{text!r} is no coordinate system"
            faults.append(Fault((section, "crs"), what, "Write it as e.g. 'EPSG:25832'."))
    return faults


def _root_faults(settings: Settings) -> list[Fault]:
    model = settings.pools.below_ground.model
    if model is None:
        return []
    from allometry.roots import root_models

    return _unknown(("pools", "below_ground", "model"), "root model", model, root_models()["model_id"])


def _height_faults(heights: Heights) -> list[Fault]:
    faults = []
    if heights.form != Heights.model_fields["form"].default:
        from allometry.heights import height_forms

        faults += _unknown(("heights", "form"), "form of height curve", heights.form, height_forms()["form"])
    if heights.missing not in ("curve", "none"):
        from allometry.heights import published_curves

        known = ["curve", "none", *published_curves()["equation_id"]]
        faults += _unknown(("heights", "missing"), "height curve", heights.missing, known)
    return faults


def _equation_faults(settings: Settings) -> list[Fault]:
    chosen, sources = settings.equations.species, settings.equations.sources
    if not chosen and not sources:
        return []
    from allometry.catalogue import load_catalogue

    table = load_catalogue().table
    faults = []
    for name, equation in chosen.items():
        faults += _unknown(("equations", "species", name), "equation", equation, table["equation_id"])
    for place, source in enumerate(sources):
        faults += _unknown(("equations", "sources", place), "publication", source, table["source_key"].unique())
    return faults


def _soil_faults(settings: Settings) -> list[Fault]:
    function = settings.soil.pedotransfer
    if function is None:
        return []
    text = files("landcarbon.factors").joinpath("pedotransfer.csv").read_text(encoding="utf-8")
    known = [line["id"] for line in csv.DictReader(text.splitlines())]
    return _unknown(("soil", "pedotransfer"), "function of bulk density", function, known)


def _unknown(path: Path, what: str, given: str, known: Iterable[str]) -> list[Fault]:
    names = [str(name) for name in known]
    if given in names:
        return []
    near = suggestion(given, names)
    listed = f"Known: {', '.join(names)}." if len(names) <= _MANY else "'landcarbon equations' lists what there is."
    return [Fault(path, f"no {what} {given!r}", f"{near} {listed}".strip())]
