"""Two-phase (double) sampling for stratification: areas of strata told by a first sample of points.

A large first sample is only classified, and carbon is measured on a part of it in each class. The areas of the strata
are then estimates, and the inventory carries their error. Symbols are those of ``docs/estimation.md``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Protocol, TypeVar

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.interval import satterthwaite

if TYPE_CHECKING:
    from landcarbon.estimate.tables import Units

__all__ = [
    "DoubleSample",
    "double_sampling",
    "double_sampling_exact",
    "first_phase_area_se",
    "first_phase_areas",
    "say_two_phase",
    "stock_error",
    "with_first_phase",
]


class _Estimate(Protocol):
    """Density, variance and degrees of freedom by domain and pool."""

    @property
    def density(self) -> np.ndarray: ...
    @property
    def variance(self) -> np.ndarray: ...
    @property
    def df(self) -> np.ndarray: ...


_Whole = TypeVar("_Whole", bound=_Estimate)


@dataclass(frozen=True)
class DoubleSample:
    """Mean and the two parts of its variance: of the second phase within strata, and of the first between them."""

    mean: float
    within: float
    between: float

    @property
    def variance(self) -> float:
        """Variance of the mean."""
        return self.within + self.between


def double_sampling(first_phase: np.ndarray, mean: np.ndarray, variance: np.ndarray) -> DoubleSample:
    """Mean of a population whose strata have shares known from a first sample.

    Parameters
    ----------
    first_phase : ndarray
        Points of the first phase by stratum.
    mean, variance : ndarray
        Mean of each stratum and the variance of that mean, from the second phase.

    Notes
    -----
    V = sum w_h^2 V_h + (1 / n_1) sum w_h (R_h - R)^2 with w_h the share of the n_1 points.

    References
    ----------
    .. [1] Särndal, C.-E., Swensson, B., Wretman, J. (1992). Model Assisted Survey Sampling, Springer: section 9.4.
    .. [2] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC: section 11.1, eq. 11.5.
    """
    share = _shares(first_phase)
    whole = float(share @ mean)
    between = float(share @ (mean - whole) ** 2) / float(first_phase.sum())
    return DoubleSample(whole, float(share**2 @ variance), between)


def double_sampling_exact(
    first_phase: np.ndarray,
    second_phase: np.ndarray,
    mean: np.ndarray,
    spread: np.ndarray,
    population: float = np.inf,
) -> DoubleSample:
    """Estimate as :func:`double_sampling`, with the variance free of the approximations for large samples.

    Parameters
    ----------
    first_phase, second_phase : ndarray
        Points of the two phases by stratum.
    mean, spread : ndarray
        Mean and variance s^2 of the values of the second phase.
    population : float
        Units in the population; infinite if it is land.

    Notes
    -----
    With N units of which n_1 are in the first phase, a_h = (n_1h - 1) / (n_1 - 1) and b_h = (n_2h - 1) / (N - 1)

    V = (N - 1) / N sum (a_h - b_h) w_h s_h^2 / n_2h + (N - n_1) / (N (n_1 - 1)) sum w_h (R_h - R)^2

    References
    ----------
    .. [1] Särndal, C.-E., Swensson, B., Wretman, J. (1992). Model Assisted Survey Sampling, Springer: eq. 9.4.14, as
       quoted in Brus, D. J. (2022), Spatial Sampling with R, section 11.1.
    """
    share, points = _shares(first_phase), float(first_phase.sum())
    whole = float(share @ mean)
    land = not np.isfinite(population)
    left = 1.0 if land else (population - 1.0) / population
    taken = np.zeros_like(share) if land else (second_phase - 1.0) / (population - 1.0)
    free = 1.0 if land else (population - points) / population
    kept = (first_phase - 1.0) / (points - 1.0) - taken
    within = left * float(np.sum(kept * share * spread / second_phase))
    between = free / (points - 1.0) * float(share @ (mean - whole) ** 2)
    return DoubleSample(whole, within, between)


def _shares(first_phase: np.ndarray) -> np.ndarray:
    points = np.asarray(first_phase, dtype=float)
    if not (points > 0).all() or points.sum() <= 1:
        raise UserError(
            "a stratum has no point of the first phase",
            where="first phase",
            remedy="Leave out strata that the first sample did not find.",
        )
    return points / points.sum()


def first_phase_areas(first_phase: np.ndarray, area_ha: float) -> np.ndarray:
    """Area of each stratum [ha] from its share of the points in land of known area; NaN where there is no count."""
    return np.asarray(area_ha * first_phase / np.nansum(first_phase))


def first_phase_area_se(units: Units) -> np.ndarray | None:
    """Return the standard error of the area of each stratum [ha]; 0 where it is known exactly, None if all are.

    Notes
    -----
    A sqrt(w_h (1 - w_h) / n_1), with w_h the share of the stratum in the area A of all strata told by points.
    """
    if units.first_phase is None:
        return None
    told = np.isfinite(units.first_phase)
    area = np.where(told, units.stratum_area_ha, 0.0)
    whole = area.sum()
    share = np.divide(area, whole, out=np.zeros_like(area), where=whole > 0)
    se = whole * np.sqrt(share * (1.0 - share) / units.first_phase[told].sum())
    return np.where(told, se, 0.0)


def with_first_phase(whole: _Whole, strata: _Estimate, units: Units) -> _Whole:
    """Give the inventory the error of the areas of its strata.

    Parameters
    ----------
    whole : estimate
        Of the inventory; density, variance and df of shape (1, pools). Of stocks or of change.
    strata : estimate
        Of the strata; shapes (strata, pools).
    units : Units
        Areas and points of the first phase.

    Returns
    -------
    estimate
        ``whole`` itself where all areas are known exactly.

    Notes
    -----
    The density gains (A_2 / A)^2 (1 / n_1) sum w_h (R_h - R)^2 over the strata told by points that are estimable: A_2
    is their area, A that of the inventory, w_h their share in A_2, n_1 their points and R = sum w_h R_h. The part has
    n_1 - 1 degrees of freedom.
    """
    if units.first_phase is None:
        return whole
    there = np.isfinite(strata.density)
    told = there & np.isfinite(units.first_phase)[:, None]
    area = np.where(there, units.stratum_area_ha[:, None], 0.0)
    second = np.where(told, area, 0.0)
    points = np.where(told, units.first_phase[:, None], 0.0).sum(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = second / second.sum(axis=0)
        density = np.where(told, strata.density, 0.0)
        between = np.sum(share * (density - np.sum(share * density, axis=0)) ** 2, axis=0) / points
        extra = np.nan_to_num((second.sum(axis=0) / area.sum(axis=0)) ** 2 * between)
    pieces = np.concatenate([whole.variance, extra[None]])
    free = np.concatenate([np.nan_to_num(whole.df), np.where(extra > 0, np.maximum(points - 1.0, 1.0), 0.0)[None]])
    df = satterthwaite(pieces, free, np.zeros(2, dtype=np.int64), 1)
    known = np.isfinite(whole.variance)
    # the protocol stands for several frozen dataclasses
    return replace(  # type: ignore[type-var]
        whole, variance=np.where(known, whole.variance + extra, np.nan), df=np.where(known & (extra > 0), df, whole.df)
    )


def stock_error(
    density_se: np.ndarray, density: np.ndarray, area_ha: np.ndarray, area_se: np.ndarray | None
) -> np.ndarray:
    """Return the standard error of a stock: that of the density, and that of the area where there is one.

    Parameters
    ----------
    density_se, density : ndarray
        By unit and pool [t C/ha].
    area_ha : ndarray
        By unit and pool [ha].
    area_se : ndarray or None
        By unit [ha].
    """
    se = density_se * area_ha
    return se if area_se is None else np.hypot(se, density * area_se[:, None])


def say_two_phase(method: np.ndarray, known: np.ndarray, by: str, units: Units) -> np.ndarray:
    """Add to the method of inventory and strata that areas come from a first phase."""
    if units.first_phase is None or by not in ("inventory", "stratum"):
        return method
    told = np.isfinite(units.first_phase)[:, None] if by == "stratum" else np.array([[True]])
    return np.where(known & told, method.astype(object) + ", two-phase", method)
