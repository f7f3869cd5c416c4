"""What the soil step is told: its options, its published factors and its limits, all of them data."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.errors import SettingsError
from landcarbon.findings import make_findings

__all__ = [
    "BULK_DENSITY_KINDS",
    "COARSE_KINDS",
    "INCOMPLETE_POLICIES",
    "SoilOptions",
    "SoilWindow",
    "bulk_density_from_organic_matter",
    "check_options",
    "fine_soil_density",
    "limit",
    "limit_known",
    "organic_matter_factors",
    "pedotransfer_functions",
    "pedotransfer_known",
    "soil_finding",
]

FINE_PER_WHOLE = "fine per whole volume"
FINE_PER_FINE = "fine per fine volume"
WHOLE_PER_WHOLE = "whole per whole volume"
BULK_DENSITY_KINDS = (FINE_PER_WHOLE, FINE_PER_FINE, WHOLE_PER_WHOLE)
COARSE_KINDS = ("volume", "mass")
INCOMPLETE_POLICIES = ("set aside", "extend", "as measured")

_ROUNDING_CM = 1e-9  # depths written in a project file agree to this


@dataclass(frozen=True)
class SoilWindow:
    """A sampled window of the core that stands for a layer.

    Attributes
    ----------
    from_cm, to_cm : float
        Depths of the window that was sampled [cm].
    top_cm, bottom_cm : float
        Depths of the layer it stands for [cm].
    """

    from_cm: float
    to_cm: float
    top_cm: float
    bottom_cm: float


@dataclass(frozen=True)
class SoilOptions:
    """How the soil of an inventory is worked out; one set for all its surveys.

    Attributes
    ----------
    bulk_density : str
        What the bulk density stands for, one of ``BULK_DENSITY_KINDS``.
    depth_cm : float or None
        Reference depth [cm]; exactly one of depth and mass.
    mass_t_ha : float or None
        Reference mass of fine soil [t/ha].
    coarse : str
        What the share of coarse fragments stands for: "volume", "mass", or "" if there is none.
    organic_matter_per_carbon : float or None
        Organic matter per organic carbon [g/g], where carbon or a pedotransfer function needs it.
    pedotransfer : str
        Id of the function for missing bulk densities, see :func:`pedotransfer_functions`; "" sets such layers aside.
    incomplete : str
        What happens to a core that ends above the reference depth, one of ``INCOMPLETE_POLICIES``.
    windows : tuple of SoilWindow
        Sampled windows and the layers they stand for, if the core was not sampled throughout.
    organic : bool
        The soil is organic (peat); the limits of mineral soil are then not applied.
    """

    bulk_density: str
    depth_cm: float | None = None
    mass_t_ha: float | None = None
    coarse: str = ""
    organic_matter_per_carbon: float | None = None
    pedotransfer: str = ""
    incomplete: str = "set aside"
    windows: tuple[SoilWindow, ...] = ()
    organic: bool = False


def check_options(options: SoilOptions, *, reference: bool = True) -> None:
    """Refuse options that leave the meaning of a number open.

    Parameters
    ----------
    options : SoilOptions
        The options to check.
    reference : bool
        Whether a reference depth or mass is needed.

    Raises
    ------
    SettingsError
        Naming the key of ``[soil]`` at fault.
    """
    _one_of(options.bulk_density, BULK_DENSITY_KINDS, "bulk_density", why="it decides how stones enter")
    _one_of(options.coarse, ("", *COARSE_KINDS), "coarse", why="it decides how stones are taken off")
    _one_of(options.incomplete, INCOMPLETE_POLICIES, "incomplete")
    if options.pedotransfer:
        _one_of(options.pedotransfer, tuple(_pedotransfer().index), "pedotransfer")
    if reference:
        _check_reference(options)
    factor = options.organic_matter_per_carbon
    if factor is not None and not (math.isfinite(factor) and factor > 1.0):
        raise SettingsError(
            f"{factor:g} is no factor of organic matter to organic carbon",
            where="[soil] organic_matter_per_carbon",
            remedy="Organic matter is more than its carbon: the factor is above 1, mostly 1.4 to 2.5.",
        )
    _check_windows(options.windows)


def _one_of(value: str, accepted: tuple[str, ...], key: str, *, why: str = "") -> None:
    if value in accepted:
        return
    what = f"{value!r} is not accepted" if value else "is not stated" + (f", and {why}" if why else "")
    raise SettingsError(
        what, where=f"[soil] {key}", remedy=f"Choose one of: {', '.join(repr(name) for name in accepted if name)}."
    )


def _check_reference(options: SoilOptions) -> None:
    given = [name for name in ("depth_cm", "mass_t_ha") if getattr(options, name) is not None]
    if len(given) != 1:
        raise SettingsError(
            "both depth_cm and mass_t_ha are given" if given else "neither depth_cm nor mass_t_ha is given",
            where="[soil]",
            remedy="Give one reference for all surveys: a depth in cm, or a mass of fine soil in t/ha.",
        )
    value = getattr(options, given[0])
    if not (math.isfinite(value) and value > 0):
        raise SettingsError(
            f"{value:g} is not above zero", where=f"[soil] {given[0]}", remedy="Give a positive number."
        )
    if given == ["mass_t_ha"] and options.incomplete != "set aside":
        raise SettingsError(
            f"{options.incomplete!r} does not go with a reference mass, beyond which nothing is extrapolated",
            where="[soil] incomplete",
            remedy="Leave the key out, or choose a mass_t_ha that all profiles reach.",
        )


def _check_windows(windows: tuple[SoilWindow, ...]) -> None:
    reached = 0.0
    for window in sorted(windows, key=lambda w: w.top_cm):
        depths = (window.top_cm, window.from_cm, window.to_cm, window.bottom_cm)
        if not (all(map(math.isfinite, depths)) and window.to_cm > window.from_cm and window.bottom_cm > window.top_cm):
            raise SettingsError(
                f"a window needs from_cm above to_cm and top_cm above bottom_cm; given are {window}",
                where="[soil] windows",
                remedy="Write depths in cm from the surface of the mineral soil downwards.",
            )
        if abs(window.top_cm - reached) > _ROUNDING_CM:
            raise SettingsError(
                f"the layers of the windows do not join: one starts at {window.top_cm:g} cm instead of {reached:g} cm",
                where="[soil] windows",
                remedy="Let the first layer start at 0 and each further one where the one above it ends.",
            )
        reached = window.bottom_cm


def _read(name: str) -> pd.DataFrame:
    with resources.files("landcarbon.factors").joinpath(name).open(encoding="utf-8") as handle:
        return pd.read_csv(handle, keep_default_na=False, na_values={"value": [""], "c": [""]})


@cache
def _pedotransfer() -> pd.DataFrame:
    return _read("pedotransfer.csv").set_index("id", drop=False)


@cache
def _limits() -> dict[str, dict[str, Any]]:
    table = _read("soil_limits.csv")
    return {str(row["name"]): {str(key): cell for key, cell in row.items()} for row in table.to_dict("records")}


def pedotransfer_functions() -> pd.DataFrame:
    """Return the table of functions from organic matter [%] to bulk density [g/cm3], one row each."""
    return _pedotransfer().reset_index(drop=True).copy()


def organic_matter_factors() -> pd.DataFrame:
    """Return the published factors of organic matter, or loss on ignition, to organic carbon [g/g]."""
    return _read("organic_matter.csv")


def pedotransfer_known(function: str) -> str:
    """How the coefficients of a function are known: read, secondary or memory."""
    return str(_pedotransfer().loc[function, "known"])


def limit(name: str) -> float:
    """Value of a limit or constant of ``soil_limits.csv``, in the unit stated there."""
    return float(_limits()[name]["value"])


def limit_known(name: str) -> str:
    """How a limit or constant is known: read, secondary or memory."""
    return str(_limits()[name]["known"])


def bulk_density_from_organic_matter(organic_matter_percent: np.ndarray, function: str) -> np.ndarray:
    """Bulk density of fine earth from organic matter.

    Parameters
    ----------
    organic_matter_percent : ndarray of float
        Organic matter [% of dry mass].
    function : str
        Id of one of :func:`pedotransfer_functions`.

    Returns
    -------
    ndarray of float
        Bulk density [g/cm3]; NaN where the function has no value. Not limited: the linear function turns negative.

    References
    ----------
    FAO (2018) Soil Organic Carbon Mapping Cookbook, 2nd edition, preparation of soil data. The bracket of the mixture
    and base 10 of the logarithm differ from the print there; see the notes of the table.
    """
    row = _pedotransfer().loc[function].to_dict()
    matter = np.asarray(organic_matter_percent, dtype=float)
    a, b, c = float(row["a"]), float(row["b"]), float(row["c"])
    form = str(row["form"])
    with np.errstate(divide="ignore", invalid="ignore"):
        if form == "linear":
            density = a + b * matter
        elif form == "reciprocal":
            density = 1.0 / (a + b * matter)
        elif form == "logarithm":
            density = a + b * np.log10(matter)
        elif form == "exponential":
            density = a + b * np.exp(c * matter)
        else:  # mixture of organic and mineral matter, each with its own density
            density = 100.0 / (matter / a + (100.0 - matter) / b)
    return np.where(np.isfinite(density), density, np.nan)


def fine_soil_density(
    bulk_density_g_cm3: np.ndarray, coarse_share: np.ndarray, *, kind: str, coarse: str
) -> tuple[np.ndarray, np.ndarray]:
    """Mass of fine soil per whole volume, stones included.

    Parameters
    ----------
    bulk_density_g_cm3 : ndarray of float
        Bulk density [g/cm3] of the kind stated.
    coarse_share : ndarray of float
        Share of coarse fragments, 0 to 1; not used for "fine per whole volume".
    kind : {"fine per whole volume", "fine per fine volume", "whole per whole volume"}
        What the bulk density stands for.
    coarse : {"volume", "mass"}
        What the share stands for.

    Returns
    -------
    density : ndarray of float
        Fine soil per whole volume [g/cm3]; negative where stones by volume outweigh the soil.
    converted : ndarray of bool
        Whether the density of rock was needed to turn the share from volume to mass or back.

    Notes
    -----
    With b the bulk density, v the share by volume, r by mass and q the density of rock::

        fine per whole volume   b
        fine per fine volume    b (1 - v),   v = (r / q) / (r / q + (1 - r) / b)
        whole per whole volume  b (1 - r),   r = v q / b

    References
    ----------
    Poeplau, Vos and Don (2017) SOIL 3:61-66 and Hobley, Murphy and Simmons (2018) SOIL 4:169 for the three kinds.
    """
    density = np.asarray(bulk_density_g_cm3, dtype=float)
    share = np.asarray(coarse_share, dtype=float)
    converted = np.zeros(density.shape, dtype=bool)
    if kind == FINE_PER_WHOLE:
        return density, converted
    rock = limit("rock density")
    with np.errstate(divide="ignore", invalid="ignore"):
        if kind == FINE_PER_FINE:
            if coarse == "mass":
                stones = share / rock
                converted = share > 0
                share = stones / (stones + (1.0 - share) / density)
            return density * (1.0 - share), converted
        if coarse == "volume":
            converted = share > 0
            share = share * rock / density
        return density * (1.0 - share), converted


def soil_finding(name: str, rows: pd.DataFrame | None = None, *, value: Any = None, **words: Any) -> pd.DataFrame:
    """Make the findings of one rule of ``soil_limits.csv``, one per row (or one without rows).

    Parameters
    ----------
    name : str
        Rule.
    rows : DataFrame, optional
        Offending rows of the soil table.
    value : array of str, optional
        Shown instead of the value in the column at fault.
    **words
        What the message names in braces, besides ``value``, the limit itself.
    """
    rule = _limits()[name]
    fields = {} if value is None else {"value": value}
    return make_findings(
        name,
        rows,
        severity=rule["severity"],
        table="soil",
        column=rule["column"],
        used=rule["used"] == "yes",
        message=rule["message"].format(**{"value": rule["value"], **words}),
        remedy=rule["remedy"],
        **fields,
    )
