"""Carbon density of cells from linear models of raster values."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

__all__ = ["LinearModel", "predict"]


@dataclass(frozen=True)
class LinearModel:
    """Density = intercept + sum of coefficient times raster value, in one or several variants (e.g. one per stratum).

    Attributes
    ----------
    names : tuple of str
        Rasters, in the order of the coefficients.
    intercept : ndarray
        Shape (variants,), t C/ha.
    coefficients : ndarray
        Shape (variants, rasters), t C/ha per unit of the raster.
    """

    names: tuple[str, ...]
    intercept: np.ndarray
    coefficients: np.ndarray

    @classmethod
    def single(cls, intercept: float, coefficients: dict[str, float]) -> LinearModel:
        """Return a model with one variant from a coefficient per raster."""
        values = np.array([list(coefficients.values())], dtype="float64").reshape(1, len(coefficients))
        return cls(tuple(coefficients), np.array([intercept], dtype="float64"), values)


def predict(model: LinearModel, values: Sequence[np.ndarray], variant: np.ndarray) -> np.ndarray:
    """Return the density told by a model.

    Parameters
    ----------
    model : LinearModel
        Coefficients.
    values : sequence of ndarray
        Values of each raster, in the order of ``model.names``, n each.
    variant : ndarray of int
        Variant of the model for each of the n; -1 if none holds there.

    Returns
    -------
    ndarray
        t C/ha; NaN where a raster has no value or no variant holds.
    """
    known = variant >= 0
    chosen = np.where(known, variant, 0) if len(model.intercept) > 1 else 0  # a single variant needs no look-up
    density = np.zeros(len(variant)) + model.intercept[chosen]
    for column in range(len(model.names)):  # few rasters; keeps the working memory at one array
        density += model.coefficients[chosen, column] * values[column]
    density[~known] = np.nan
    return density
