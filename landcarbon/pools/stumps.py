"""Stumps left by felling or breakage, measured on the area of a plot."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from landcarbon.constants import BREAST_HEIGHT_M
from landcarbon.factors.dead_wood import rule
from landcarbon.pools._pieces import area_parts, check_large
from landcarbon.pools.parts import RowShares
from landcarbon.pools.piece_volume import cylinder, section_m2
from landcarbon.pools.wood import RowCheck, WoodOptions, default_class, wood_of

__all__ = ["StumpOptions", "stump_volume", "stumps"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class StumpOptions(WoodOptions):
    """How stumps were measured; see also :class:`~landcarbon.pools.wood.WoodOptions`.

    Attributes
    ----------
    log_area_m2 : float
        Area on which stumps were measured [m2].
    taper : float
        Coefficient B of the stump diameter equation; NaN takes the stump for a cylinder of the diameter measured.
    """

    log_area_m2: float = np.nan
    taper: float = np.nan


def stump_volume(height_m: ArrayLike, diameter_cm: ArrayLike, *, taper: float = np.nan) -> FloatArray:
    """Volume of a stump from its height and the diameter at its top [m3].

    Parameters
    ----------
    height_m : array_like
        Height of the cut above the ground [m].
    diameter_cm : array_like
        Diameter at the cut [cm].
    taper : float
        Coefficient B; NaN for a cylinder, which leaves out the flare below the cut.

    Notes
    -----
    Diameter at height h (ft) in a tree of diameter D at 4.5 ft: D_h = D + B D (4.5 - h)/(h + 1). With a = 1 - B and
    c = 5.5 B this is D (a + c/(h + 1)); D follows from the diameter at the cut, and the square is integrated from the
    ground: D^2 (a^2 H + 2 a c ln(1 + H) + c^2 H/(1 + H)), exactly.

    References
    ----------
    Raile 1982, Research Paper NC-234 (form recalled, not seen). Values of B, as quoted in a national table, stand in
    the catalogue of equations.
    """
    height = np.asarray(height_m, dtype=float)
    if np.isnan(taper):
        return cylinder(height, diameter_cm)
    foot = rule("foot_m")
    feet = height / foot
    straight, flare = 1.0 - taper, (rule("stump_form_height_ft") + 1.0) * taper
    at_breast_height = np.asarray(diameter_cm, dtype=float) / (straight + flare / (feet + 1.0))
    shape = straight**2 * feet + 2.0 * straight * flare * np.log1p(feet) + flare**2 * feet / (1.0 + feet)
    volume: FloatArray = section_m2(at_breast_height) * shape * foot
    return volume


def stumps(
    stumps: pd.DataFrame,
    visited: pd.DataFrame,
    options: StumpOptions,
    species: pd.DataFrame,
    *,
    shares: RowShares | None = None,
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Carbon of stumps per plot.

    Parameters
    ----------
    stumps : DataFrame
        One row per stump: survey, plot, diameter_cm, height_m, decay_class, wood, species.
    visited : DataFrame
        survey, plot of every plot where stumps were looked for; a column area_m2, if there, holds the area of each.
    options : StumpOptions
        Area, shape and defaults.
    species : DataFrame
        species, scientific_name, conifer, wood_density_g_cm3.
    shares : RowShares, optional
        Takes what each stump brings in.

    Returns
    -------
    parts : DataFrame
        Part stumps of every visited plot; their roots are not counted.
    findings : DataFrame
        Faults of the stumps.

    Notes
    -----
    Density as for down wood of the same decay class: the sets of factors have none for stumps.
    """
    check = RowCheck("stumps", stumps)
    diameter = stumps["diameter_cm"].to_numpy(dtype=float)
    height = stumps["height_m"].to_numpy(dtype=float)
    check.apply("stump without size", ~((diameter > 0.0) & (height > 0.0) & np.isfinite(diameter * height)))
    check.apply("stump tall as a snag", height > BREAST_HEIGHT_M)
    check_large(check, np.isfinite(diameter), diameter, "diameter_cm")
    wood = wood_of(stumps, species, options)
    check.wood(wood, default_class(options))
    volume = stump_volume(height, diameter, taper=options.taper)
    method = "stumps as cylinders" if np.isnan(options.taper) else f"stumps with taper B = {options.taper:g}"
    return area_parts(
        check, volume, wood, visited, area_m2=options.log_area_m2, part="stumps", method=method, shares=shares
    )
