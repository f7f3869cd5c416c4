"""Post-stratification: classes of a map sort the plots after they were drawn, and the map's areas weigh them.

Three variances of the same mean are in print. ``conditional`` is the default: it asks how the estimate varies among
samples with as many plots in each class as this one has, which is the question the sample at hand raises; it needs no
large sample, and the lucky share of plots in a class does not make it smaller (Holt & Smith 1979). ``linearised`` is
what weighting packages print, and rests on large samples; ``unconditional`` averages over what the class counts might
have been, and speaks of a design still to be drawn. Over all samples the three are about the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.errors import UserError
from landcarbon.estimate.groups import group_sum, label_codes
from landcarbon.estimate.interval import satterthwaite
from landcarbon.estimate.notes import name_list
from landcarbon.estimate.ratio import MIN_PLOTS
from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["FORMS", "PostStratified", "class_rasters", "collapse_classes", "post_stratified_mean"]

FORMS = ("conditional", "linearised", "unconditional")


@dataclass(frozen=True)
class PostStratified:
    """Post-stratified means of K variables.

    Attributes
    ----------
    mean : ndarray
        Shape (K,).
    variances : dict of ndarray
        The three forms by name; each of shape (K,).
    df : ndarray
        Degrees of freedom by Satterthwaite over the classes; shape (K,).
    class_mean, class_variance : ndarray
        Shape (classes, K).
    plots : ndarray
        Plots by class.
    """

    mean: np.ndarray
    variances: dict[str, np.ndarray]
    df: np.ndarray
    class_mean: np.ndarray
    class_variance: np.ndarray
    plots: np.ndarray

    @property
    def variance(self) -> np.ndarray:
        """The default form."""
        return self.variances[FORMS[0]]


def post_stratified_mean(y: np.ndarray, classes: np.ndarray, area: np.ndarray) -> PostStratified:
    """Post-stratify a simple random sample.

    Parameters
    ----------
    y : ndarray
        Shape (n,) or (n, K).
    classes : ndarray of int
        Class of each plot, 0 to G - 1.
    area : ndarray
        Known area of each class, any unit; shape (G,).

    Returns
    -------
    PostStratified

    Raises
    ------
    UserError
        If a class with area has fewer than two plots; see :func:`collapse_classes`.

    Notes
    -----
    With W_g the share of class g in the area: mean = sum W_g ybar_g. Variances: conditional sum W_g^2 s_g^2 / n_g;
    linearised n / (n - 1) sum (W_g / n_g (y - ybar_g))^2; unconditional sum W_g s_g^2 / n + sum (1 - W_g) s_g^2 / n^2.

    References
    ----------
    .. [1] Cochran, W. G. (1977). Sampling Techniques, 3rd ed., Wiley, section 5A.9; from memory.
    .. [2] Holt, D., Smith, T. M. F. (1979). Post stratification. Journal of the Royal Statistical Society A 142, 33-46;
       from memory.
    .. [3] Brus, D. J. (2022). Spatial Sampling with R, Chapman & Hall/CRC, section 10.3.
    """
    values = np.asarray(y, dtype=float).reshape(len(classes), -1)
    plots = np.bincount(classes, minlength=len(area)).astype(float)
    if ((plots < MIN_PLOTS) & (area > 0)).any():
        raise UserError(
            "a class has area but fewer than two plots",
            where="post-stratification",
            remedy="Collapse it with another class.",
        )
    held = plots > 0
    below = np.where(held, plots, 1.0)[:, None]
    class_mean = np.where(held[:, None], group_sum(values, classes, len(area)) / below, np.nan)
    squares = group_sum((values - class_mean[classes]) ** 2, classes, len(area))
    spread = squares / np.maximum(plots - 1.0, 1.0)[:, None]
    share = (area / area.sum())[:, None]
    number = plots.sum()
    conditional = np.where(held[:, None], share**2 * spread / below, 0.0)
    linearised = number / (number - 1.0) * (np.where(held[:, None], share / below, 0.0) ** 2 * squares).sum(axis=0)
    unconditional = (share * spread).sum(axis=0) / number + ((1.0 - share) * spread).sum(axis=0) / number**2
    free = np.broadcast_to(np.maximum(plots - 1.0, 0.0)[:, None], conditional.shape)
    return PostStratified(
        mean=np.where(held[:, None], share * class_mean, 0.0).sum(axis=0),
        variances=dict(zip(FORMS, (conditional.sum(axis=0), linearised, unconditional), strict=True)),
        df=satterthwaite(conditional, free, np.zeros(len(area), dtype=np.int64), 1)[0],
        class_mean=class_mean,
        class_variance=spread,
        plots=plots,
    )


def collapse_classes(
    plots: np.ndarray, area: np.ndarray, labels: list[str], *, survey: str = ""
) -> tuple[np.ndarray, pd.DataFrame]:
    """Join classes that have too few plots with others, without looking at what the plots hold.

    Parameters
    ----------
    plots, area : ndarray
        Plots and area by class.
    labels : list of str
        Names of the classes.
    survey : str
        For the findings.

    Returns
    -------
    target : ndarray of int
        Class that each one counts in. Those with fewer than two plots are put together; if they are still too few,
        with the class that has the fewest plots of the others. Classes without area and plots stay as they are.
    findings : DataFrame
        Which classes were joined, or that a single one is left so that nothing is gained.
    """
    target = np.arange(len(plots))
    small = (plots < MIN_PLOTS) & ((area > 0) | (plots > 0))
    if not small.any():
        return target, empty_findings()
    found = []
    joined = np.flatnonzero(small)
    enough = np.flatnonzero(~small & (plots >= MIN_PLOTS))
    if plots[joined].sum() < MIN_PLOTS and len(enough):
        joined = np.sort(np.append(joined, enough[np.argmin(plots[enough])]))
    target[joined] = joined[np.argmax(plots[joined])]
    names = name_list([labels[one] for one in joined])
    found.append(
        make_findings(
            "class with few plots",
            severity="warning",
            table="estimate",
            column="post_strata",
            value=name_list([labels[one] for one in np.flatnonzero(small)]),
            survey=survey,
            message=f"Classes with fewer than two plots cannot stand alone; these count as one: {names}.",
            remedy="Use a map with fewer classes, or say which belong together.",
        )
    )
    kept = np.unique(target[(area > 0) | (plots > 0)])
    if len(kept) < MIN_PLOTS:
        found.append(
            make_findings(
                "single class left",
                severity="warning",
                table="estimate",
                column="post_strata",
                survey=survey,
                message="A single class of the map is left: post-stratification changes nothing and is not made.",
                remedy="More plots, or a map with fewer classes.",
            )
        )
    return target, join_findings(found)


def class_rasters(
    plot_classes: pd.DataFrame, class_areas: pd.DataFrame, *, name: str = "class"
) -> tuple[pd.DataFrame, pd.DataFrame, pd.DataFrame]:
    """Write the classes of a map as auxiliary values of 0 and 1, as ``assist`` takes them.

    Parameters
    ----------
    plot_classes : DataFrame
        survey, plot, class (text; "" or missing where the map has none).
    class_areas : DataFrame
        survey, by (stratum | parcel), unit, class, area_ha and, for parcels, stratum if known.
    name : str
        Of the map, for the outputs.

    Returns
    -------
    plot_values : DataFrame
        survey, plot, raster, value.
    unit_means : DataFrame
        survey, by, unit, raster, mean (share of the class), covered, area_ha and stratum if given.
    findings : DataFrame
        Of the classes that were joined.

    Notes
    -----
    The estimator assisted by these is the post-stratified mean where there is one stratum. With several, the classes
    have the same effect in all of them. The others are compared with the first class, or with the first class of each
    set of strata that share no class with the rest.
    """
    values, means, found = [], [], []
    for survey, areas in class_areas.groupby("survey", sort=False):  # over surveys
        here = plot_classes[(plot_classes["survey"] == survey) & plot_classes["class"].notna()]
        here = here[here["class"].astype("str") != ""]
        labels = sorted({str(one) for one in areas["class"]} | {str(one) for one in here["class"]})
        codes = label_codes(here["class"], labels)
        plots = np.bincount(codes, minlength=len(labels))
        of_area = label_codes(areas["class"], labels)
        whole = np.bincount(of_area, weights=areas["area_ha"].to_numpy(dtype=float), minlength=len(labels))
        target, finding = collapse_classes(plots, whole, labels, survey=str(survey))
        found.append(finding)
        kept = np.unique(target[(plots > 0) | (whole > 0)])
        if len(kept) < MIN_PLOTS:
            continue
        for one in np.setdiff1d(kept, _first_of_each(areas, target[of_area])):  # over classes
            raster = f"{name}={labels[one]}"
            values.append(here[["survey", "plot"]].assign(raster=raster, value=(target[codes] == one).astype(float)))
            means.append(_class_shares(areas, target[of_area] == one, raster))
    empty_values = pd.DataFrame(columns=["survey", "plot", "raster", "value"])
    empty_means = pd.DataFrame(columns=["survey", "by", "unit", "raster", "mean", "covered", "area_ha"])
    return (
        pd.concat(values, ignore_index=True) if values else empty_values,
        pd.concat(means, ignore_index=True) if means else empty_means,
        join_findings(found),
    )


def _first_of_each(areas: pd.DataFrame, target: np.ndarray) -> np.ndarray:
    """First class of each set of classes that meet in some stratum."""
    from scipy.sparse import coo_array  # heavy; the package must import without it
    from scipy.sparse.csgraph import connected_components

    of_strata = (areas["by"] == "stratum").to_numpy() & (areas["area_ha"].to_numpy(dtype=float) > 0)
    classes, code = np.unique(target[of_strata], return_inverse=True)
    stratum = pd.factorize(areas["unit"][of_strata])[0]
    size = len(classes) + int(stratum.max(initial=-1)) + 1
    links = coo_array((np.ones(len(code)), (code, len(classes) + stratum)), shape=(size, size))
    sets = connected_components(links, directed=False)[1][: len(classes)]
    return np.asarray(classes[np.unique(sets, return_index=True)[1]])


def _class_shares(areas: pd.DataFrame, mine: np.ndarray, raster: str) -> pd.DataFrame:
    """Share of a class in each unit."""
    keys = [key for key in ("survey", "by", "unit", "stratum") if key in areas]
    parts = areas.assign(mine=np.where(mine, areas["area_ha"], 0.0))
    summed = parts.groupby(keys, sort=False, dropna=False)[["area_ha", "mine"]].sum().reset_index()
    share = summed["mine"] / summed["area_ha"].where(summed["area_ha"] > 0)
    return summed.drop(columns="mine").assign(raster=raster, mean=share, covered=1.0)
