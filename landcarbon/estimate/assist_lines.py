"""Lines of plot values on rasters, part by part, for one survey."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_limits import assist_limits
from landcarbon.estimate.auxiliary import Auxiliary, within_strata
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.ratio import MIN_PLOTS
from landcarbon.estimate.regression import independent_columns

__all__ = ["Group", "Lines", "columns_alike", "fit_survey", "refit", "slope_loss", "slope_price"]


@dataclass(frozen=True)
class Group:
    """What lines of parts that were measured on the same plots rest on: products of deviations by stratum.

    Rasters are turned into uncorrelated ones of equal spread first (over all strata together), so that products may be
    added up and inverted without loss of digits.

    Attributes
    ----------
    parts : ndarray of int
        Positions of the parts.
    plots : ndarray of int
        Sampling units by stratum, 0 where fewer than two; shape (H,).
    back : ndarray
        Slopes of the rasters per slope of the turned ones; shape (p, q), q the number of independent rasters.
    squares, crossed : ndarray
        Products of the turned rasters with themselves (H, q, q) and with the parts (H, q, K).
    why : list of str
        Why a part has no line; "" if it may have one.
    """

    parts: np.ndarray
    plots: np.ndarray
    back: np.ndarray
    squares: np.ndarray
    crossed: np.ndarray
    why: list[str]

    @property
    def room(self) -> np.ndarray:
        """Strata with plots enough for slopes of their own; shape (H,)."""
        slopes = self.back.shape[1]
        return np.asarray((slopes > 0) & (self.plots - 1.0 >= assist_limits().plots_per_slope * slopes))


@dataclass(frozen=True)
class Lines:
    """Lines of one survey. Plots n, parts K, strata H, rasters p.

    Attributes
    ----------
    position : ndarray of int
        Rows of the plot table; shape (n,).
    plot : ndarray of str
        Their names; shape (n,).
    code : ndarray of int
        Stratum of each; shape (n,).
    size : ndarray
        Size of each; shape (n,).
    key : ndarray of int
        Sampling unit of each, the same number at all surveys; shape (n,).
    alone : bool
        Whether every plot is a sampling unit.
    labels : list of str
        Strata.
    columns : list of str
        Parts.
    value : ndarray
        Values before adjustment; shape (n, K), NaN where not measured.
    auxiliary : Auxiliary
        Rasters.
    groups : list of Group
        What the slopes are fitted from.
    slope : ndarray
        [t C/ha per unit]; 0 where a part is not assisted; shape (K, H, p).
    used, own : ndarray of bool
        Strata in which slopes serve, and those with slopes of their own; shape (K, H).
    number : ndarray of int
        Slopes fitted to each part; shape (K,).
    inflation, df_share : ndarray
        What the fitted slopes do to variances and degrees of freedom, by stratum; shape (K, H).
    measured : ndarray of bool
        Shape (K,).
    why : list of str
        Why a part has no line; "" if it has one.
    """

    position: np.ndarray
    plot: np.ndarray
    code: np.ndarray
    size: np.ndarray
    key: np.ndarray
    alone: bool
    labels: list[str]
    columns: list[str]
    value: np.ndarray
    auxiliary: Auxiliary
    groups: list[Group]
    slope: np.ndarray
    used: np.ndarray
    own: np.ndarray
    number: np.ndarray
    inflation: np.ndarray
    df_share: np.ndarray
    measured: np.ndarray
    why: list[str]

    @property
    def assisted(self) -> np.ndarray:
        """Parts that have slopes; shape (K,)."""
        return np.asarray(self.number > 0)

    @property
    def room(self) -> np.ndarray:
        """Strata with plots enough for slopes of their own, by part; shape (K, H)."""
        found = np.zeros(self.used.shape, dtype=bool)
        for group in self.groups:
            found[group.parts] = group.room & self.auxiliary.serves
        return found

    @property
    def seen(self) -> np.ndarray:
        """Strata with two plots or more, by part; shape (K, H)."""
        found = np.zeros(self.used.shape, dtype=bool)
        for group in self.groups:
            found[group.parts] = group.plots > 0
        return found

    def explained(self) -> np.ndarray:
        """Return what the rasters explain of the difference to the stratum mean; shape (n, K)."""
        found = np.zeros_like(self.value)
        for raster in np.flatnonzero(self.slope.any(axis=(0, 1))):  # few; keeps the working memory at one table
            found += self.auxiliary.value[:, [raster]] * self.slope[:, :, raster].T[self.code]
        return found

    def only(self, keep: np.ndarray) -> Lines:
        """Leave slopes to these parts and strata alone; shape (K, H)."""
        used = self.used & keep
        return replace(
            self,
            slope=np.where(used[:, :, None], self.slope, 0.0),
            used=used,
            own=self.own & used,
            number=np.where(used.any(axis=1), self.number, 0),
            inflation=np.where(used, self.inflation, 1.0),
            df_share=np.where(used, self.df_share, 1.0),
        )

    def beside(self, other: Lines) -> Lines:
        """Take the slopes of other lines where these have none."""
        return replace(
            self,
            slope=np.where(self.used[:, :, None], self.slope, other.slope),
            used=self.used | other.used,
            own=np.where(self.used, self.own, other.own),
            number=np.maximum(self.number, other.number),
            inflation=np.where(self.used, self.inflation, other.inflation),
            df_share=np.where(self.used, self.df_share, other.df_share),
        )

    @property
    def unit_key(self) -> np.ndarray:
        """Number of the sampling unit and stratum of each plot, the same at all surveys; shape (n,)."""
        return self.key * len(self.labels) + self.code

    def contributions(self) -> np.ndarray:
        """Return what each plot brings into the error of the mean of its stratum (linearised); shape (n, K)."""
        rest = self.value - self.explained()
        strata = len(self.labels)
        there = np.isfinite(rest)
        if there.all():
            held = np.bincount(self.code, weights=self.size, minlength=strata)
            return within_strata(rest, self.code, self.size, strata) * (self.size / held[self.code])[:, None]
        held = group_sum(there * self.size[:, None], self.code, strata)
        held = np.where(held > 0, held, 1.0)
        sized = np.where(there, rest, 0.0) * self.size[:, None]
        mean = group_sum(sized, self.code, strata) / held
        return (sized - there * self.size[:, None] * mean[self.code]) / held[self.code]

    def whole(self, area: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Factor of the variance and share of the degrees of freedom of the inventory, by part."""
        strata = len(self.labels)
        held = np.bincount(self.code, weights=self.size, minlength=strata)
        plots = np.bincount(self.code, minlength=strata).astype(float)
        scale = (area if np.isfinite(area).all() else held) ** 2 * plots / np.maximum(plots - 1.0, 1.0)
        spread = (group_sum(self.contributions() ** 2, self.code, strata) * scale[:, None]).T
        total = spread.sum(axis=1, keepdims=True)
        even = self.used / np.maximum(self.used.sum(axis=1, keepdims=True), 1)
        weight = np.where(total > 0, spread / np.where(total > 0, total, 1.0), even)
        none = ~self.used.any(axis=1)
        inflation, share = (weight * self.inflation).sum(axis=1), (weight * self.df_share).sum(axis=1)
        return np.where(none, 1.0, inflation), np.where(none, 1.0, share)


def slope_loss(free: np.ndarray | float, slopes: np.ndarray | float) -> tuple[np.ndarray, np.ndarray]:
    """Return what fitted slopes cost: a factor of the variance, and the share of the degrees of freedom that is left.

    Parameters
    ----------
    free : array_like
        Plots less strata.
    slopes : array_like
        Number of slopes; less than ``free`` - 1.

    Notes
    -----
    free / (free - p) mends the mean square of the residuals; (free - 1) / (free - p - 1) adds what the estimated slopes
    bring in, on average over normal auxiliary values (Cochran 1977, section 7.6, for one slope; from memory). The
    second is near p / n for domains too.
    """
    left = np.asarray(free, dtype=float) - slopes
    factor = np.asarray(free) / left * (np.asarray(free) - 1.0) / (left - 1.0)
    return np.asarray(factor), np.asarray(left / free)


def slope_price(free: np.ndarray | float, slopes: np.ndarray | float) -> tuple[np.ndarray, np.ndarray]:
    """Return what slopes cost that the plots at hand have chosen: :func:`slope_loss`, and the price of the choice.

    Parameters
    ----------
    free, slopes : array_like
        As for :func:`slope_loss`.
    """
    factor, left = slope_loss(free, slopes)
    return factor * (1.0 + assist_limits().price_of_choice / np.asarray(free, dtype=float)), left


def fit_survey(
    table: pd.DataFrame, rows: pd.DataFrame, columns: list[str], auxiliary: Auxiliary, area: np.ndarray
) -> Lines:
    """Fit a line to each part, with slopes that all strata have in common.

    Parameters
    ----------
    table : DataFrame
        All plots and surveys.
    rows : DataFrame
        Plots of the survey: position in ``table``, plot, code of the stratum, size, key (number of the sampling unit).
    columns : list of str
        Parts.
    auxiliary : Auxiliary
        Rasters of the survey.
    area : ndarray
        Of the strata [ha].
    """
    position, code = rows["position"].to_numpy(), rows["code"].to_numpy()
    value = table[columns].to_numpy(dtype=float)[position]
    there = np.isfinite(value)
    groups = [_gather(value[:, parts], parts, rows, auxiliary, area) for parts in columns_alike(there)]
    parts, (strata, number) = len(columns), auxiliary.centre.shape
    nowhere = np.zeros((parts, strata), dtype=bool)
    bare = Lines(
        position=position,
        plot=rows["plot"].to_numpy(dtype=object),
        code=code,
        size=rows["size"].to_numpy(dtype=float),
        key=rows["key"].to_numpy(),
        alone=len(rows) == int(rows["unit"].max() if len(rows) else -1) + 1,
        labels=auxiliary.strata,
        columns=columns,
        value=value,
        auxiliary=auxiliary,
        groups=groups,
        slope=np.zeros((parts, strata, number)),
        used=nowhere,
        own=nowhere,
        number=np.zeros(parts, dtype=np.int64),
        inflation=np.ones((parts, strata)),
        df_share=np.ones((parts, strata)),
        measured=there.any(axis=0),
        why=[""] * parts,
    )
    return refit(bare, np.ones((parts, strata), dtype=bool), nowhere)


def refit(lines: Lines, common: np.ndarray, own: np.ndarray) -> Lines:
    """Fit slopes anew.

    Parameters
    ----------
    lines : Lines
        Of the survey.
    common : ndarray of bool
        Strata that common slopes are fitted from and serve in; shape (K, H).
    own : ndarray of bool
        Strata with slopes of their own, where they have plots enough; shape (K, H).

    Returns
    -------
    Lines
        Other strata have no slope. Where the strata of the common slopes have too few plots for them, neither.
    """
    slope, used = np.zeros_like(lines.slope), np.zeros_like(lines.used)
    number, why = np.zeros_like(lines.number), list(lines.why)
    loss, share, apart = np.ones(used.shape), np.ones(used.shape), np.zeros_like(used)
    serves = lines.auxiliary.serves
    for group in lines.groups:
        slopes, room = group.back.shape[1], group.room
        each = _own_slopes(group) if own[group.parts].any() else None
        for at, part in enumerate(group.parts):  # over parts
            why[part] = group.why[at]
            if group.why[at]:
                continue
            number[part] = slopes
            lent = common[part] & serves & (group.plots > 0)
            free = float(group.plots[lent].sum() - lent.sum())
            if free >= assist_limits().plots_per_slope * slopes:
                turned = np.linalg.pinv(group.squares[lent].sum(axis=0), hermitian=True)
                slope[part][lent] = group.back @ (turned @ group.crossed[lent, :, at].sum(axis=0))
                loss[part][lent], share[part][lent] = slope_price(free, slopes)
                used[part] |= lent
            if each is not None:
                mine = own[part] & room & serves
                slope[part][mine] = each[mine, :, at]
                loss[part][mine], share[part][mine] = slope_price(group.plots[mine] - 1.0, slopes)
                used[part] |= mine
                apart[part] = mine
            if not used[part].any():
                number[part], why[part] = 0, f"{int(free + lent.sum())} plots are too few for common slopes"
    return replace(
        lines, slope=slope, used=used, own=apart, number=number, inflation=loss, df_share=share, why=why
    )  # fmt: skip


def columns_alike(measured: np.ndarray) -> list[np.ndarray]:
    """Columns that are true on the same rows."""
    groups: dict[bytes, list[int]] = {}
    packed = np.packbits(measured, axis=0)
    for column in range(measured.shape[1]):  # over parts
        groups.setdefault(packed[:, column].tobytes(), []).append(column)
    return [np.array(columns) for columns in groups.values()]


def _gather(value: np.ndarray, parts: np.ndarray, rows: pd.DataFrame, auxiliary: Auxiliary, area: np.ndarray) -> Group:
    """Products of rasters and parts on the plots where these parts were all measured."""
    strata, number = auxiliary.centre.shape
    code, size, unit = (rows[name].to_numpy() for name in ("code", "size", "unit"))
    measured = np.isfinite(value[:, 0])  # the parts of a group have the same plots
    plots = _units(code, unit, measured, strata)
    used = measured & (plots >= MIN_PLOTS)[code]
    plots = np.where(plots >= MIN_PLOTS, plots, 0)
    if not number or not used.any():
        return _no_lines(parts, plots, number, "no raster serves" if used.any() else "no stratum with two plots")
    code, size, y = code[used], size[used].astype(float), value[used]
    held = np.bincount(code, weights=size, minlength=strata)
    known = area if np.isfinite(area).all() else held
    root = np.sqrt(size * (known / np.where(held > 0, held, 1.0))[code])[:, None]
    across = within_strata(auxiliary.value[used], code, size, strata) * root
    deviation = within_strata(y, code, size, strata)
    serving = auxiliary.serves & (plots > 0)
    free = float(plots[serving].sum() - serving.sum())
    kept = independent_columns(across)
    kept &= np.cumsum(kept) <= free // assist_limits().plots_per_slope
    if not kept.any():
        few = f"{int(plots.sum())} plots are too few, or the rasters are constant on them"
        return _no_lines(parts, plots, number, few)
    turned, triangle = np.linalg.qr(across[:, kept])
    back = np.zeros((number, int(kept.sum())))
    back[kept] = np.linalg.inv(triangle)
    flat = ~np.any(np.abs(deviation) > np.finfo(float).eps * np.abs(y).max(axis=0), axis=0)
    squares, crossed = _products(turned, deviation * root, code, strata)
    why = ["the same value on all plots of a stratum" if one else "" for one in flat]
    return Group(parts, plots, back, squares, crossed, why)


def _no_lines(parts: np.ndarray, plots: np.ndarray, number: int, why: str) -> Group:
    nothing = np.zeros((len(plots), 0, 0))
    return Group(parts, plots, np.zeros((number, 0)), nothing, nothing, [why] * len(parts))


def _products(x: np.ndarray, y: np.ndarray, code: np.ndarray, strata: int) -> tuple[np.ndarray, np.ndarray]:
    """Products of columns, added up by stratum; shapes (H, q, q) and (H, q, K)."""
    order = np.argsort(code, kind="stable")
    ends = np.cumsum(np.bincount(code, minlength=strata))
    x, y = x[order], y[order]
    squares = np.zeros((strata, x.shape[1], x.shape[1]))
    crossed = np.zeros((strata, x.shape[1], y.shape[1]))
    for one, (first, last) in enumerate(zip(np.append(0, ends[:-1]), ends, strict=True)):  # over strata
        squares[one] = x[first:last].T @ x[first:last]
        crossed[one] = x[first:last].T @ y[first:last]
    return squares, crossed


def _units(code: np.ndarray, unit: np.ndarray, used: np.ndarray, strata: int) -> np.ndarray:
    """Count sampling units (plots, or clusters of them) with a value, by stratum."""
    if len(unit) == int(unit.max(initial=-1)) + 1:  # every plot is one
        return np.bincount(code[used], minlength=strata)
    pairs = np.unique(code[used] * (int(unit.max()) + 1) + unit[used])
    return np.bincount(pairs // (int(unit.max()) + 1), minlength=strata)


def _own_slopes(group: Group) -> np.ndarray:
    """Slopes of each stratum by its own plots; shape (H, p, K)."""
    return np.asarray(group.back @ (np.linalg.pinv(group.squares, hermitian=True) @ group.crossed))
