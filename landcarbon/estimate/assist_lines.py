"""Lines of plot values on rasters, part by part, for one survey."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_limits import assist_limits
from landcarbon.estimate.auxiliary import Auxiliary, within_strata
from landcarbon.estimate.groups import group_sum
from landcarbon.estimate.ratio import MIN_PLOTS
from landcarbon.estimate.regression import fit_lines, independent_columns

__all__ = ["Lines", "fit_survey", "model_rows", "offset_rows", "slope_loss"]


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
    labels : list of str
        Strata.
    columns : list of str
        Parts.
    value : ndarray
        Values before adjustment; shape (n, K), NaN where not measured.
    auxiliary : Auxiliary
        Rasters.
    slope : ndarray
        [t C/ha per unit]; 0 where a part is not assisted; shape (K, H, p).
    number : ndarray of int
        Slopes fitted to each part; shape (K,).
    inflation, df_share : ndarray
        What the fitted slopes do to variances and degrees of freedom, by stratum; shape (K, H).
    whole_inflation, whole_df_share : ndarray
        The same for the inventory; shape (K,).
    measured : ndarray of bool
        Shape (K,).
    why : list of str
        Why a part has no line; "" if it has one.
    """

    position: np.ndarray
    plot: np.ndarray
    code: np.ndarray
    size: np.ndarray
    labels: list[str]
    columns: list[str]
    value: np.ndarray
    auxiliary: Auxiliary
    slope: np.ndarray
    number: np.ndarray
    inflation: np.ndarray
    df_share: np.ndarray
    whole_inflation: np.ndarray
    whole_df_share: np.ndarray
    measured: np.ndarray
    why: list[str]

    @property
    def assisted(self) -> np.ndarray:
        """Parts that have slopes; shape (K,)."""
        return np.asarray(self.number > 0)

    def explained(self) -> np.ndarray:
        """Return what the rasters explain of the difference to the stratum mean; shape (n, K)."""
        found = np.zeros_like(self.value)
        for raster in range(self.slope.shape[2]):  # few rasters; keeps the working memory at one table
            found += self.auxiliary.value[:, [raster]] * self.slope[:, self.code, raster].T
        return found

    def only(self, columns: Sequence[str]) -> Lines:
        """Leave slopes to these parts alone."""
        keep = np.isin(np.array(self.columns, dtype=object), list(columns))
        return replace(
            self,
            slope=np.where(keep[:, None, None], self.slope, 0.0),
            number=np.where(keep, self.number, 0),
            inflation=np.where(keep[:, None], self.inflation, 1.0),
            df_share=np.where(keep[:, None], self.df_share, 1.0),
            whole_inflation=np.where(keep, self.whole_inflation, 1.0),
            whole_df_share=np.where(keep, self.whole_df_share, 1.0),
        )


@dataclass(frozen=True)
class _Line:
    """Line of one part; ``slope`` (H, p), ``loss`` and ``share`` (H,), then those of the inventory."""

    slope: np.ndarray
    number: int
    loss: np.ndarray
    share: np.ndarray
    whole: tuple[float, float]
    why: str

    @classmethod
    def none(cls, why: str, strata: int, number: int) -> _Line:
        """Without slope."""
        return cls(np.zeros((strata, number)), 0, np.ones(strata), np.ones(strata), (1.0, 1.0), why)


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


def fit_survey(
    table: pd.DataFrame,
    rows: pd.DataFrame,
    columns: list[str],
    auxiliary: Auxiliary,
    area: np.ndarray,
    *,
    by_stratum: bool,
) -> Lines:
    """Fit a line to each part.

    Parameters
    ----------
    table : DataFrame
        All plots and surveys.
    rows : DataFrame
        Plots of the survey: position in ``table``, code of the stratum, size, unit (number of the sampling unit).
    columns : list of str
        Parts.
    auxiliary : Auxiliary
        Rasters of the survey.
    area : ndarray
        Of the strata [ha].
    by_stratum : bool
        Slopes of each stratum, where it has plots enough.
    """
    position, code = rows["position"].to_numpy(), rows["code"].to_numpy()
    value = table[columns].to_numpy(dtype=float)[position]
    measured = np.isfinite(value).any(axis=0)
    made = _fit_parts(value, rows, auxiliary, area, by_stratum=by_stratum)
    strata, number = auxiliary.centre.shape
    empty = np.zeros((0, strata, number))
    return Lines(
        position=position,
        plot=rows["plot"].to_numpy(dtype=object).astype(str),
        code=code,
        size=rows["size"].to_numpy(dtype=float),
        labels=auxiliary.strata,
        columns=columns,
        value=value,
        auxiliary=auxiliary,
        slope=np.stack([one.slope for one in made]) if made else empty,
        number=np.array([one.number for one in made], dtype=np.int64),
        inflation=np.array([one.loss for one in made]),
        df_share=np.array([one.share for one in made]),
        whole_inflation=np.array([one.whole[0] for one in made]),
        whole_df_share=np.array([one.whole[1] for one in made]),
        measured=measured,
        why=[one.why for one in made],
    )


def _fit_parts(
    value: np.ndarray, rows: pd.DataFrame, auxiliary: Auxiliary, area: np.ndarray, *, by_stratum: bool
) -> list[_Line]:
    """Fit all parts, those measured on the same plots together."""
    made: list[_Line] = []
    place = np.zeros(value.shape[1], dtype=np.int64)
    for parts in _alike(np.isfinite(value)):
        place[parts] = len(made) + np.arange(len(parts))
        made += _fit_group(value[:, parts], rows, auxiliary, area, by_stratum=by_stratum)
    return [made[at] for at in place]


def _alike(measured: np.ndarray) -> list[np.ndarray]:
    """Columns that are true on the same rows."""
    groups: dict[bytes, list[int]] = {}
    packed = np.packbits(measured, axis=0)
    for column in range(measured.shape[1]):  # over parts
        groups.setdefault(packed[:, column].tobytes(), []).append(column)
    return [np.array(columns) for columns in groups.values()]


def _fit_group(
    value: np.ndarray, rows: pd.DataFrame, auxiliary: Auxiliary, area: np.ndarray, *, by_stratum: bool
) -> list[_Line]:
    """Fit parts on the plots where they were all measured."""
    strata, number = auxiliary.centre.shape
    parts = value.shape[1]
    code, size, unit = (rows[name].to_numpy() for name in ("code", "size", "unit"))
    measured = np.isfinite(value).all(axis=1)
    plots = _units(code, unit, measured, strata)
    used = measured & (plots >= MIN_PLOTS)[code]
    plots = np.where(plots >= MIN_PLOTS, plots, 0)
    if not number or not used.any():
        return [_Line.none("no raster serves" if used.any() else "no stratum with two plots", strata, number)] * parts
    code, size, y = code[used], size[used].astype(float), value[used]
    held = np.bincount(code, weights=size, minlength=strata)
    known = area if np.isfinite(area).all() else held
    weight = size * (known / np.where(held > 0, held, 1.0))[code]
    across = within_strata(auxiliary.value[used], code, size, strata)
    deviation = within_strata(y, code, size, strata)
    free, limit = float(plots.sum() - (plots > 0).sum()), assist_limits().plots_per_slope
    kept = independent_columns(across * np.sqrt(weight)[:, None])
    kept &= np.cumsum(kept) <= free // limit
    slopes = int(kept.sum())
    if not slopes:
        few = f"{int(plots.sum())} plots are too few, or the rasters are constant on them"
        return [_Line.none(few, strata, number)] * parts
    slope = np.zeros((parts, strata, number))
    slope[:, :, kept] = fit_lines(across[:, kept], deviation, weight).T[:, None]
    loss, share = (np.full(strata, float(one)) for one in slope_loss(free, slopes))
    if by_stratum:
        own = (plots - 1.0) >= limit * slopes
        slope[np.ix_(np.arange(parts), own, kept)] = _own_slopes(across[:, kept], deviation, weight, code, strata)[
            :, own
        ]
        loss[own], share[own] = slope_loss(plots[own] - 1.0, slopes)
    serves = auxiliary.serves & (plots > 0)
    slope = np.where(serves[:, None], slope, 0.0)
    loss, share = np.where(serves, loss, 1.0), np.where(serves, share, 1.0)
    flat = ~np.any(np.abs(deviation) > np.finfo(float).eps * np.abs(y).max(axis=0), axis=0)
    lines = []
    for part in range(parts):
        if flat[part]:
            lines.append(_Line.none("the same value on all plots of a stratum", strata, number))
            continue
        residual = deviation[:, part] - np.einsum("np,np->n", across, slope[part][code])
        spread = np.bincount(code, weights=(weight * residual) ** 2, minlength=strata)
        weighed = spread / spread.sum() if spread.sum() > 0 else np.where(serves, 1.0 / max(serves.sum(), 1), 0.0)
        lines.append(_Line(slope[part], slopes, loss, share, (float(weighed @ loss), float(weighed @ share)), ""))
    return lines


def _units(code: np.ndarray, unit: np.ndarray, used: np.ndarray, strata: int) -> np.ndarray:
    """Count sampling units (plots, or clusters of them) with a value, by stratum."""
    if len(unit) == int(unit.max(initial=-1)) + 1:  # every plot is one
        return np.bincount(code[used], minlength=strata)
    pairs = np.unique(code[used] * (int(unit.max()) + 1) + unit[used])
    return np.bincount(pairs // (int(unit.max()) + 1), minlength=strata)


def _own_slopes(
    across: np.ndarray, deviation: np.ndarray, weight: np.ndarray, code: np.ndarray, strata: int
) -> np.ndarray:
    """Slopes of each stratum by its own plots; shape (K, H, p)."""
    number = across.shape[1]
    squares = (across[:, :, None] * across[:, None, :] * weight[:, None, None]).reshape(len(across), -1)
    moments = group_sum(squares, code, strata).reshape(strata, number, number)
    crossed = (across[:, :, None] * (weight[:, None] * deviation)[:, None, :]).reshape(len(across), -1)
    crossed = group_sum(crossed, code, strata).reshape(strata, number, -1)
    return np.asarray(np.einsum("hpq,hqk->khp", np.linalg.pinv(moments, hermitian=True), crossed))


def offset_rows(survey: str, lines: Lines) -> pd.DataFrame:
    """Offsets of one survey, by unit and part."""
    parts = np.flatnonzero(lines.assisted)
    if not len(parts):
        return pd.DataFrame()
    names = np.array(lines.columns, dtype=object)[parts]
    there = np.flatnonzero(lines.auxiliary.serves & (np.bincount(lines.code, minlength=len(lines.labels)) > 0))
    nothing = np.zeros((len(there), len(parts)))
    blocks = [
        _offset_block("inventory", [""], nothing[:1] if len(there) else np.zeros((1, len(parts))), names).assign(
            inflation=lines.whole_inflation[parts], df_share=lines.whole_df_share[parts]
        ),
        _offset_block("stratum", [lines.labels[one] for one in there], nothing, names).assign(
            inflation=lines.inflation[np.ix_(parts, there)].T.ravel(),
            df_share=lines.df_share[np.ix_(parts, there)].T.ravel(),
        ),
    ]
    table = lines.auxiliary.parcels
    table = table[table["stratum"].isin(there)]
    if len(table):
        unit, units = pd.factorize(table["unit"])
        code = table["stratum"].to_numpy()
        shift = table[[f"shift.{name}" for name in lines.auxiliary.rasters]].to_numpy(dtype=float)
        each = np.einsum("rp,krp->rk", shift, lines.slope[parts][:, code])
        each = each * table["share"].to_numpy(dtype=float)[:, None]
        worst = np.zeros((len(units), len(parts)))
        least = np.ones((len(units), len(parts)))
        np.maximum.at(worst, unit, lines.inflation[np.ix_(parts, code)].T)
        np.minimum.at(least, unit, lines.df_share[np.ix_(parts, code)].T)
        block = _offset_block("parcel", list(units), group_sum(each, unit, len(units)), names)
        blocks.append(block.assign(inflation=worst.ravel(), df_share=least.ravel()))
    return pd.concat(blocks, ignore_index=True).assign(survey=survey)


def _offset_block(by: str, units: list[str], offset: np.ndarray, names: np.ndarray) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "by": by,
            "unit": np.repeat(np.array(units, dtype=object), len(names)),
            "part": np.tile(names, len(units)),
            "offset": offset.ravel(),
        }
    )


def model_rows(survey: str, lines: Lines, sums: Mapping[str, Sequence[str]]) -> pd.DataFrame:
    """Lines of parts and of their sums, by stratum, a row per term."""
    named = {name: [name] for name in lines.columns} | {pool: list(names) for pool, names in sums.items()}
    member = np.array([[name in names for name in lines.columns] for names in named.values()]) & lines.measured
    labels = np.array(list(named), dtype=object)[member.any(axis=1)]
    member = member[member.any(axis=1)]
    if not len(member):
        return pd.DataFrame()
    measured = np.isfinite(lines.value)
    value = np.where(measured, lines.value, 0.0) @ member.T
    rest = value - lines.explained() @ member.T
    there = (measured @ member.T.astype(float)) == member.sum(axis=1)
    blocks: list[pd.DataFrame] = []
    for chosen in _alike(there):
        blocks += _model_blocks(
            labels[chosen], member[chosen], value[:, chosen], rest[:, chosen], lines, there[:, chosen[0]]
        )
    order = {name: at for at, name in enumerate(named)}
    blocks.sort(key=lambda block: order[str(block["of"].iloc[0])])
    made = pd.concat(blocks, ignore_index=True)
    sources = dict(zip(lines.auxiliary.rasters, lines.auxiliary.sources, strict=True))
    return made.assign(survey=survey, source=[sources.get(term, survey) for term in made["term"]])


def _model_blocks(
    labels: np.ndarray, member: np.ndarray, value: np.ndarray, rest: np.ndarray, lines: Lines, used: np.ndarray
) -> list[pd.DataFrame]:
    """Lines of sums that were measured on the same plots."""
    if not used.any():
        return []
    strata, columns = len(lines.labels), len(labels)
    code, size = lines.code[used], lines.size[used]
    apart = within_strata(np.concatenate([value[used], rest[used]], axis=1), code, size, strata)
    squares = size @ apart**2
    whole, left = squares[:columns], squares[columns:]
    plots = np.bincount(code, minlength=strata)
    there = np.flatnonzero(plots)
    held = np.bincount(code, weights=size, minlength=strata)
    level = group_sum(rest[used] * size[:, None], code, strata)[there] / held[there][:, None]
    centre = lines.auxiliary.centre[there]
    terms = np.array(["intercept", *lines.auxiliary.rasters], dtype=object)
    blocks = []
    for at in range(columns):
        slope = lines.slope[member[at]].sum(axis=0)[there]
        base = level[:, at] - (np.nan_to_num(centre) * slope).sum(axis=1)
        free = used.sum() - len(there) - lines.number[member[at]].max(initial=0)
        blocks.append(
            pd.DataFrame(
                {
                    "of": labels[at],
                    "stratum": np.repeat(np.array(lines.labels, dtype=object)[there], len(terms)),
                    "term": np.tile(terms, len(there)),
                    "coefficient": np.column_stack([base, slope]).ravel(),
                    "centre": np.column_stack([np.full(len(there), np.nan), centre]).ravel(),
                    "r2": 1.0 - left[at] / whole[at] if whole[at] > 0 else np.nan,
                    "n": np.repeat(plots[there], len(terms)),
                    "se_residual": np.sqrt(left[at] / size.mean() / free) if free > 0 else np.nan,
                }
            )
        )
    return blocks
