"""Height from diameter: curves fitted to the measured trees of an inventory, and published ones.

A fitted curve fills in heights that were not measured; measured heights stay as they are. Imputed heights lack the
scatter of real trees about the curve, so that anything computed from them is a little too even.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from difflib import get_close_matches
from typing import NamedTuple

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from allometry._data import read_data
from allometry._height_forms import FORMS, breast_height, height_rules
from allometry.errors import AllometryError, UnknownModelError

__all__ = [
    "CURVE_COLUMNS",
    "HeightCurve",
    "HeightFitError",
    "Imputed",
    "default_trees_needed",
    "fit_curve",
    "height_forms",
    "impute",
    "published_curves",
    "published_height",
]

FloatArray = NDArray[np.float64]
CURVE_COLUMNS = [
    "species",
    "form",
    "parameters",
    "n",
    "rmse_m",
    "dbh_min_cm",
    "dbh_max_cm",
    "imputed",
    "extrapolated",
    "method",
]
"""Columns of the table of curves given by :func:`impute`."""


class HeightFitError(AllometryError):
    """A height curve could not be fitted to the measured trees."""


@dataclass(frozen=True)
class HeightCurve:
    """A fitted height curve.

    Parameters
    ----------
    form : str
        Id of the form.
    parameters : tuple of float
        In the order of ``height_forms()``, for diameters in cm and heights in m.
    n : int
        Trees fitted to.
    rmse_m : float
        Root of the residual sum of squares over n minus the number of parameters [m].
    dbh_min_cm, dbh_max_cm : float
        Diameters fitted to [cm].
    method : str
        How it was fitted.
    """

    form: str
    parameters: tuple[float, ...]
    n: int
    rmse_m: float
    dbh_min_cm: float
    dbh_max_cm: float
    method: str = field(default="least squares on height")

    def height(self, dbh_cm: ArrayLike) -> FloatArray:
        """Height of the curve [m]; NaN where the diameter is missing or not positive.

        Parameters
        ----------
        dbh_cm : array_like
            Diameters [cm].

        Returns
        -------
        ndarray
            Heights [m].
        """
        diameter = np.asarray(dbh_cm, dtype="float64")
        positive = np.where(diameter > 0, diameter, np.nan)
        return FORMS[self.form].function(positive, *self.parameters)

    def outside(self, dbh_cm: ArrayLike) -> NDArray[np.bool_]:
        """Whether diameters lie beyond those fitted to.

        Parameters
        ----------
        dbh_cm : array_like
            Diameters [cm].

        Returns
        -------
        ndarray of bool
            False where the diameter is missing.
        """
        diameter = np.asarray(dbh_cm, dtype="float64")
        return (diameter < self.dbh_min_cm) | (diameter > self.dbh_max_cm)


class Imputed(NamedTuple):
    """Heights after imputation, where each came from, and the curves used."""

    height_m: FloatArray
    source: NDArray[np.str_]
    curves: pd.DataFrame


def default_trees_needed() -> int:
    """Measured trees needed for a curve of its own.

    Returns
    -------
    int
        From ``data/height_rules.csv``, with its source.
    """
    return int(height_rules()["trees_needed"])


def height_forms() -> pd.DataFrame:
    """Forms that can be fitted.

    Returns
    -------
    DataFrame
        Columns form (id), title, formula, parameters, lower, upper (bounds of the fit), source, known, note.
    """
    return read_data("height_forms")


def _form(form: str) -> pd.Series:
    table = read_data("height_forms").set_index("form", drop=False)
    if form not in table.index:
        near = get_close_matches(form, table.index, n=3, cutoff=0.5)
        hint = f"near: {', '.join(near)}; " if near else ""
        raise UnknownModelError(f"height curve form {form!r} does not exist; {hint}accepted: {', '.join(table.index)}.")
    return pd.Series(table.loc[form])


def fit_curve(dbh_cm: ArrayLike, height_m: ArrayLike, form: str) -> HeightCurve:
    """Fit a height curve to measured trees by least squares.

    Parameters
    ----------
    dbh_cm : array_like
        Diameters at breast height [cm].
    height_m : array_like
        Total heights [m].
    form : str
        Id from :func:`height_forms`.

    Returns
    -------
    HeightCurve
        The curve.

    Raises
    ------
    UnknownModelError
        If the form does not exist.
    HeightFitError
        If there are no more trees than parameters, fewer different diameters than parameters, or the fit does not
        settle.

    Notes
    -----
    Trees with a missing or not positive diameter, or a height that is missing or not above breast height, are left
    out. The form log_quadratic is fitted on heights as well, not on their logarithms, so that no correction for the
    back-transformation is due.
    """
    entry = _form(form)
    diameter, height = _measured(dbh_cm, height_m)
    count = len(entry["parameters"].split())
    if len(diameter) <= count or len(np.unique(diameter)) < count:
        raise HeightFitError(
            f"height curve {form!r} has {count} parameters and cannot be fitted to {len(diameter)} trees "
            f"of {len(np.unique(diameter))} different diameters; measure more heights or name a published curve."
        )
    parameters = _least_squares(entry, diameter, height)
    residual = height - FORMS[form].function(diameter, *parameters)
    rmse = float(np.sqrt(np.sum(residual**2) / (len(diameter) - count)))
    if not (np.all(np.isfinite(parameters)) and np.isfinite(rmse)):
        raise HeightFitError(f"height curve {form!r} did not settle on {len(diameter)} trees; try another form.")
    return HeightCurve(
        form=form,
        parameters=tuple(float(value) for value in parameters),
        n=len(diameter),
        rmse_m=rmse,
        dbh_min_cm=float(diameter.min()),
        dbh_max_cm=float(diameter.max()),
    )


def _measured(dbh_cm: ArrayLike, height_m: ArrayLike) -> tuple[FloatArray, FloatArray]:
    diameter = np.asarray(dbh_cm, dtype="float64").ravel()
    height = np.asarray(height_m, dtype="float64").ravel()
    if diameter.shape != height.shape:
        raise AllometryError(f"{len(diameter)} diameters and {len(height)} heights were given; they must be pairs.")
    keep = np.isfinite(diameter) & np.isfinite(height) & (diameter > 0) & (height > breast_height())
    return diameter[keep], height[keep]


def _least_squares(entry: pd.Series, diameter: FloatArray, height: FloatArray) -> FloatArray:
    from scipy.optimize import curve_fit  # slow to import, and only needed here

    form = FORMS[entry["form"]]
    lower, upper = ([float(bound) for bound in entry[side].split()] for side in ("lower", "upper"))
    typical, greatest = float(np.median(diameter)), float(height.max()) - breast_height()
    start = np.clip(form.start(typical, max(greatest, 1.0)), lower, upper)
    try:
        parameters, _ = curve_fit(
            form.function,
            diameter,
            height,
            start,
            bounds=(lower, upper),
            method="trf",
            x_scale=_scale(start),
            max_nfev=5000,
        )
    except (RuntimeError, ValueError) as error:
        raise HeightFitError(
            f"height curve {entry['form']!r} did not settle on {len(diameter)} trees; try another form."
        ) from error
    return np.asarray(parameters, dtype="float64")


def _scale(start: FloatArray) -> FloatArray:
    return np.where(np.abs(start) > 1e-3, np.abs(start), 1.0)


def impute(
    dbh_cm: ArrayLike,
    height_m: ArrayLike,
    species_codes: ArrayLike,
    *,
    form: str,
    trees_needed: int | None = None,
) -> Imputed:
    """Fill in missing heights by curves fitted to the measured ones.

    Parameters
    ----------
    dbh_cm : array_like
        Diameters [cm].
    height_m : array_like
        Measured heights [m]; NaN where missing.
    species_codes : array_like or Categorical
        Species of each tree.
    form : str
        Id from :func:`height_forms`.
    trees_needed : int, optional
        Measured trees a species needs for a curve of its own, and all species together for the pooled curve; default
        :func:`default_trees_needed`.

    Returns
    -------
    Imputed
        ``height_m`` [m] (measured heights unchanged, NaN where nothing could be done), ``source`` ("measured",
        "curve" or "none") and ``curves``, a table with the columns :data:`CURVE_COLUMNS`: one row per species with
        missing heights, telling the curve that served it.

    Raises
    ------
    UnknownModelError
        If the form does not exist.

    Notes
    -----
    A species with too few measured trees, or whose trees no curve fits, is served by the pooled curve; ``method``
    says so. With too few measured trees altogether nothing is imputed.
    """
    _form(form)
    needed = default_trees_needed() if trees_needed is None else int(trees_needed)
    diameter = np.asarray(dbh_cm, dtype="float64")
    height = np.array(height_m, dtype="float64")
    codes, labels = _factorize(species_codes)
    measured = np.isfinite(height) & (height > 0)
    source = np.where(measured, "measured", "none").astype("<U8")
    wanted = ~measured & np.isfinite(diameter) & (diameter > 0)
    own = np.unique(codes[wanted])
    found = {code: _try(diameter[codes == code], height[codes == code], form, needed) for code in own}
    pooled = _try(diameter, height, form, needed) if any(isinstance(curve, str) for curve in found.values()) else ""
    rows: list[dict[str, object]] = []
    for code, curve in found.items():
        gap = wanted & (codes == code)
        method = ""
        if isinstance(curve, str):
            why, curve = curve, pooled
            method = (
                f"pooled over all species, as {why}"
                if isinstance(pooled, HeightCurve)
                else f"{why}; together: {pooled}"
            )
        rows.append(_curve_row(str(labels[code]), curve, method, diameter[gap]))
        if isinstance(curve, HeightCurve):
            height[gap] = curve.height(diameter[gap])
            source[gap] = "curve"
    return Imputed(height, source, pd.DataFrame(rows, columns=CURVE_COLUMNS))


def _factorize(species_codes: ArrayLike) -> tuple[NDArray[np.intp], NDArray[np.str_]]:
    categorical = pd.Categorical(pd.Series(species_codes))
    codes = np.asarray(categorical.codes, dtype=np.intp)
    labels = np.array([*map(str, categorical.categories), ""], dtype=object)
    # A missing species has code -1, which picks the last label: a group of its own.
    return np.where(codes < 0, len(labels) - 1, codes), labels


def _try(dbh_cm: FloatArray, height_m: FloatArray, form: str, needed: int) -> HeightCurve | str:
    """Fit the curve, or say in words why there is none."""
    count = len(_measured(dbh_cm, height_m)[0])
    if count < needed:
        return f"{count} measured heights are fewer than {needed}"
    try:
        return fit_curve(dbh_cm, height_m, form)
    except HeightFitError:
        return f"no curve fits the {count} measured heights"


def _curve_row(species: str, curve: HeightCurve | str, method: str, dbh_cm: FloatArray) -> dict[str, object]:
    if isinstance(curve, str):
        return dict(species=species, form="", parameters="", n=0, imputed=0, extrapolated=0, method=f"none: {method}")
    return dict(
        species=species,
        form=curve.form,
        parameters=" ".join(f"{value:.6g}" for value in curve.parameters),
        n=curve.n,
        rmse_m=curve.rmse_m,
        dbh_min_cm=curve.dbh_min_cm,
        dbh_max_cm=curve.dbh_max_cm,
        imputed=len(dbh_cm),
        extrapolated=int(np.count_nonzero(curve.outside(dbh_cm))),
        method=method or curve.method,
    )


def published_curves() -> pd.DataFrame:
    """List the published height curves of the catalogue.

    Returns
    -------
    DataFrame
        equation_id, source_key, where, taxon, region, inputs, dbh_min_cm, dbh_max_cm, residual_sd, known, note.
    """
    from allometry.catalogue import load_catalogue  # the catalogue is large; fitting does without it

    table = load_catalogue().table
    columns = ["equation_id", "source_key", "where", "taxon", "region", "inputs"]
    columns += ["dbh_min_cm", "dbh_max_cm", "residual_sd", "known", "note"]
    return table.loc[table["component"] == "height", columns].reset_index(drop=True)


def published_height(
    curve_id: str, dbh_cm: ArrayLike, stress: float | None = None, *, correct: bool = True
) -> FloatArray:
    """Height from a published curve.

    Parameters
    ----------
    curve_id : str
        Id from :func:`published_curves`.
    dbh_cm : array_like
        Diameters [cm].
    stress : float, optional
        Bioclimatic stress of the site, for the pantropical curve that needs it.
    correct : bool
        Apply the correction for back-transformation to a curve fitted on logarithms, where its publication leaves
        that to the reader, so that the mean height comes out; False gives the curve as printed.

    Returns
    -------
    ndarray
        Heights [m]; NaN where the diameter is missing.

    Raises
    ------
    UnknownModelError
        If there is no such curve.
    AllometryError
        If the curve needs the stress and none is given.
    """
    from allometry.catalogue import load_catalogue

    curves = published_curves().set_index("equation_id")
    if curve_id not in curves.index:
        near = get_close_matches(curve_id, curves.index, n=3, cutoff=0.4)
        hint = f"near: {', '.join(near)}; " if near else ""
        accepted = ", ".join(map(str, curves.index))
        raise UnknownModelError(f"published height curve {curve_id!r} does not exist; {hint}accepted: {accepted}.")
    inputs: dict[str, float] = {}
    if "stress" in str(curves.loc[curve_id, "inputs"]).split(";"):
        if stress is None:
            raise AllometryError(f"height curve {curve_id!r} needs the bioclimatic stress of the site; give stress.")
        inputs["stress"] = stress
    diameter = np.atleast_1d(np.asarray(dbh_cm, dtype="float64"))
    return np.asarray(load_catalogue().value(curve_id, diameter, correct=correct, **inputs), dtype="float64")
