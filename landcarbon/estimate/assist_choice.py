"""Which pools rasters assist in which strata: variances of stocks and of changes, without and with slopes."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pandas as pd

from landcarbon.estimate.assist_limits import assist_limits
from landcarbon.estimate.assist_lines import Lines, refit
from landcarbon.estimate.assist_phases import first_phase_variances
from landcarbon.estimate.groups import group_sum

__all__ = ["COMMON", "NONE", "OWN", "Choice", "choose"]

NONE, COMMON, OWN = 0, 1, 2  # no slopes, slopes common to several strata, slopes of the stratum
_NOTHING = 1e-12  # a variance of change below this share of that of the stocks is a change that does not vary


@dataclass(frozen=True)
class Choice:
    """Slopes of each pool and stratum. Pools P, strata H.

    Attributes
    ----------
    lines : dict
        Lines by survey, with the slopes that serve.
    pools : list of str
        Without ``all``.
    taken : ndarray of int
        ``NONE``, ``COMMON`` or ``OWN``; shape (P, H).
    tried : ndarray of int
        Slopes that ``efficiency`` and ``change`` are of: those taken, or the better ones where none are; shape (P, H).
    efficiency, change : ndarray
        Variance without slopes over that with them: of stocks and changes together, and of changes alone (NaN where
        there are none); shape (P, H).
    together : ndarray of bool
        Strata with few plots, judged together; shape (P, H).
    plain, assisted : dict
        Variances of the stock at each survey without slopes, and with those of ``tried``; shape (P, H).
    weight : ndarray
        Square of the area of each stratum; shape (H,).
    """

    lines: dict[str, Lines]
    pools: list[str]
    taken: np.ndarray
    tried: np.ndarray
    efficiency: np.ndarray
    change: np.ndarray
    together: np.ndarray
    plain: dict[str, np.ndarray]
    assisted: dict[str, np.ndarray]
    weight: np.ndarray


@dataclass(frozen=True)
class _Pair:
    """Two surveys that follow each other for some pools: units in common, and parts that count by pool (K, P)."""

    since: str
    until: str
    rows: tuple[np.ndarray | slice, np.ndarray | slice]
    member: np.ndarray

    def same_parts(self, member: np.ndarray) -> bool:
        """Whether the pools that count have all their parts."""
        counts = self.member.any(axis=0)
        return bool((self.member[:, counts] == member[:, counts]).all())


@dataclass(frozen=True)
class _Frame:
    """What does not depend on the slopes: parts of each pool (K, P), sampling units (P, H) by survey, and the rest."""

    sums: dict[str, list[str]]
    member: np.ndarray
    units: dict[str, np.ndarray]
    pairs: list[_Pair]
    area: np.ndarray
    points: pd.DataFrame

    @property
    def weight(self) -> np.ndarray:
        """Square of the areas; all alike where one is unknown."""
        return np.asarray(self.area**2 if np.isfinite(self.area).all() else np.ones(len(self.area)))


@dataclass(frozen=True)
class _Verdict:
    """Variances by survey (P, H) with some slopes, and how they compare to those without (P, H)."""

    stock: dict[str, np.ndarray]
    efficiency: np.ndarray
    change: np.ndarray

    @property
    def serves(self) -> np.ndarray:
        """Where the slopes are worth having."""
        limits = assist_limits()
        with np.errstate(invalid="ignore"):
            worse = self.change * limits.growth_of_change < 1.0
            return np.asarray((self.efficiency >= limits.relative_efficiency) & ~worse)


def choose(
    lines: dict[str, Lines],
    sums: Mapping[str, Sequence[str]],
    area: np.ndarray,
    points: pd.DataFrame,
    *,
    by_stratum: bool,
) -> Choice:
    """Choose the slopes of each pool and stratum, for all surveys together.

    Parameters
    ----------
    lines : dict
        Lines of each survey in the order of time, with slopes common to all strata.
    sums : mapping
        Columns of each pool, and ``all``.
    area : ndarray
        Of the strata [ha].
    points : DataFrame
        As for :func:`landcarbon.estimate.assist_phases.first_phase_variances`.
    by_stratum : bool
        Own slopes wherever a stratum has plots enough, not only where they are clearly better.

    Notes
    -----
    Common slopes are fitted from all strata, then once more from those they serve. Variances are those of random
    samples within strata, linearised, with the raise for the fitted slopes.
    """
    frame = _frame(lines, sums, area, points)
    room = _room(lines)
    roomy = (frame.member.T.astype(float) @ room) > 0
    few = _few(frame)
    plain = _variances({survey: line.only(np.zeros_like(line.used)) for survey, line in lines.items()}, frame)
    own_lines = _refitted(lines, ~room, room)
    own = _verdict(plain, _variances(own_lines, frame), frame, np.zeros_like(few))
    good = own.serves & roomy
    first = _verdict(plain, _variances(lines, frame), frame, few)
    lend = first.serves & ~_clearly_better(good, own, first, first.serves)
    common_lines, common = lines, first
    lenders = (frame.member.astype(float) @ lend) > 0
    if any((line.used & ~lenders).any() for line in lines.values()):
        common_lines = _refitted(lines, lenders, np.zeros_like(room))
        second = _verdict(plain, _variances(common_lines, frame), frame, few & lend)
        common = _Verdict(
            {survey: np.where(lend, second.stock[survey], first.stock[survey]) for survey in lines},
            np.where(lend, second.efficiency, first.efficiency),
            np.where(lend, second.change, first.change),
        )
    serves = lend & common.serves
    taken = np.where(serves, COMMON, NONE)
    taken[_clearly_better(good, own, common, serves)] = OWN
    if by_stratum:
        taken = np.where(roomy, np.where(good, OWN, NONE), taken)
    with np.errstate(invalid="ignore"):
        better = roomy & (by_stratum | (own.efficiency > common.efficiency))
    tried = np.where(taken == NONE, np.where(better, OWN, COMMON), taken)
    mine = tried == OWN
    return Choice(
        lines=_mixed(common_lines, own_lines, (frame.member @ taken).astype(np.int64)),
        pools=[pool for pool in sums if pool != "all"],
        taken=taken,
        tried=tried,
        efficiency=np.where(mine, own.efficiency, common.efficiency),
        change=np.where(mine, own.change, common.change),
        together=few & ~mine,
        plain=plain[0],
        assisted={survey: np.where(mine, own.stock[survey], common.stock[survey]) for survey in lines},
        weight=frame.weight,
    )


def _clearly_better(good: np.ndarray, own: _Verdict, common: _Verdict, serves: np.ndarray) -> np.ndarray:
    """Strata whose own slopes serve, and better than common ones if these serve too."""
    with np.errstate(invalid="ignore"):
        return good & (~serves | (own.efficiency >= assist_limits().own_slopes * common.efficiency))


def _refitted(lines: dict[str, Lines], common: np.ndarray, own: np.ndarray) -> dict[str, Lines]:
    """Fit anew, and keep the slopes of a part in a stratum only if it has them at all surveys, as it had before."""
    made = {survey: refit(line, common, own) for survey, line in lines.items()}
    keep = np.ones(common.shape, dtype=bool)
    for survey, line in lines.items():
        keep &= made[survey].used | ~line.used
    some = np.any([line.assisted for line in lines.values()], axis=0)[:, None]
    return {survey: line.only(keep & some) for survey, line in made.items()}


def _mixed(common: dict[str, Lines], own: dict[str, Lines], taken: np.ndarray) -> dict[str, Lines]:
    """Put common and own slopes together; ``taken`` is by part, shape (K, H)."""
    return {
        survey: line.only(taken == COMMON).beside(own[survey].only(taken == OWN)) for survey, line in common.items()
    }


def _room(lines: dict[str, Lines]) -> np.ndarray:
    """Strata with plots enough for own slopes at all surveys that a part was measured in; shape (K, H)."""
    seen = np.array([line.seen for line in lines.values()])
    room = np.array([line.room & line.used for line in lines.values()])
    return np.asarray((room | ~seen).all(axis=0) & room.any(axis=0))


def _frame(
    lines: dict[str, Lines], sums: Mapping[str, Sequence[str]], area: np.ndarray, points: pd.DataFrame
) -> _Frame:
    columns = next(iter(lines.values())).columns if lines else []
    parts = {pool: list(names) for pool, names in sums.items() if pool != "all"}
    member = np.array([[name in names for names in parts.values()] for name in columns]).reshape(-1, len(parts))
    return _Frame(
        sums=parts,
        member=member,
        units={survey: _units(line, member) for survey, line in lines.items()},
        pairs=_pairs(lines, member),
        area=area,
        points=points,
    )


def _units(line: Lines, member: np.ndarray) -> np.ndarray:
    """Count sampling units with a value, by pool and stratum; shape (P, H)."""
    there = (np.isfinite(line.value).astype(float) @ member.astype(float)) > 0
    code, there = _by_unit(line, there)
    return group_sum(there > 0, code, len(line.labels)).T


def _by_unit(line: Lines, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Add up rows of the same sampling unit and stratum: code of the stratum, and sums."""
    if line.alone:
        return line.code, values
    key, row = np.unique(line.unit_key, return_inverse=True)
    return key % len(line.labels), group_sum(values, row, len(key))


def _unit_keys(line: Lines) -> np.ndarray:
    """Keys in the order of the rows of :func:`_by_unit`."""
    return line.unit_key if line.alone else np.unique(line.unit_key)


def _pairs(lines: dict[str, Lines], member: np.ndarray) -> list[_Pair]:
    """Surveys that follow each other, pool by pool, among those at which the pool was measured."""
    parts: dict[tuple[str, str], np.ndarray] = {}
    for pool in range(member.shape[1]):  # over pools
        seen = [survey for survey, line in lines.items() if (line.measured & member[:, pool]).any()]
        for since, until in pairwise(seen):
            both = lines[since].measured & lines[until].measured
            parts.setdefault((since, until), np.zeros(member.shape, dtype=bool))[:, pool] = member[:, pool] & both
    made = []
    for (since, until), chosen in parts.items():
        keys = [_unit_keys(lines[survey]) for survey in (since, until)]
        if np.array_equal(keys[0], keys[1]):  # all repeated, in the same order
            made.append(_Pair(since, until, (slice(None), slice(None)), chosen))
            continue
        _, first, second = np.intersect1d(keys[0], keys[1], assume_unique=True, return_indices=True)
        made.append(_Pair(since, until, (first, second), chosen))
    return made


def _variances(
    lines: dict[str, Lines], frame: _Frame
) -> tuple[dict[str, np.ndarray], dict[tuple[str, str], np.ndarray]]:
    """Variances of stratum means by survey, and of their changes by pair of surveys; shape (P, H) each."""
    strata = len(frame.area)
    phases = _phases(lines, frame)
    parts, codes, loss = {}, {}, {}
    for survey, line in lines.items():
        codes[survey], parts[survey] = _by_unit(line, line.contributions())
        loss[survey] = np.array([line.inflation[one].max(axis=0, initial=1.0) for one in frame.member.T])
    scale = {survey: np.where(n > 1, n / np.where(n > 1, n - 1.0, 1.0), np.nan) for survey, n in frame.units.items()}

    def spread(survey: str, member: np.ndarray) -> np.ndarray:
        return scale[survey] * group_sum((parts[survey] @ member.astype(float)) ** 2, codes[survey], strata).T

    alone = {survey: spread(survey, frame.member) for survey in lines}
    stock = {survey: alone[survey] * loss[survey] + phases(survey, survey) for survey in lines}
    change = {}
    for pair in frame.pairs:
        one, two = pair.since, pair.until
        member = pair.member.astype(float)
        first, second = (parts[name][rows] @ member for name, rows in zip((one, two), pair.rows, strict=True))
        shared = group_sum(first * second, codes[one][pair.rows[0]], strata).T * np.sqrt(scale[one] * scale[two])
        whole = pair.same_parts(frame.member)
        both = sum(alone[name] if whole else spread(name, pair.member) for name in (one, two))
        raised = np.maximum(both - 2.0 * shared, 0.0) * np.maximum(loss[one], loss[two]) + phases(one, two)
        change[one, two] = np.where(np.asarray(pair.member.any(axis=0))[:, None], raised, np.nan)
    return stock, change


def _phases(lines: dict[str, Lines], frame: _Frame) -> Callable[[str, str], np.ndarray]:
    """Look up the variance of raster means from points; 0 where the map is complete."""
    if not len(frame.points):
        nothing = np.zeros((len(frame.sums), len(frame.area)))
        return lambda _since, _until: nothing
    table = first_phase_variances(lines, frame.points, frame.sums, frame.area)
    table = table[table["by"] == "stratum"]
    labels = next(iter(lines.values())).labels

    def look_up(since: str, until: str) -> np.ndarray:
        rows = table[(table["since"] == since) & (table["until"] == until)]
        wide = rows.pivot(index="pool", columns="unit", values="variance")
        return wide.reindex(index=list(frame.sums), columns=labels).fillna(0.0).to_numpy(dtype=float)

    return look_up


def _few(frame: _Frame) -> np.ndarray:
    """Strata with too few plots for a verdict of their own, by pool; shape (P, H)."""
    least = assist_limits().plots_per_slope
    few = np.zeros((frame.member.shape[1], len(frame.area)), dtype=bool)
    for number in frame.units.values():
        few |= (number > 0) & (number - 1.0 < least)
    return few


def _verdict(
    plain: tuple[dict[str, np.ndarray], dict[tuple[str, str], np.ndarray]],
    other: tuple[dict[str, np.ndarray], dict[tuple[str, str], np.ndarray]],
    frame: _Frame,
    together: np.ndarray,
) -> _Verdict:
    """Compare variances with slopes to those without; strata marked ``together`` by their sum."""
    told = _enough(frame, together)
    stock = _added(list(plain[0].values()), list(other[0].values()), frame.weight, together)
    change = _added(list(plain[1].values()), list(other[1].values()), frame.weight, together)
    with np.errstate(divide="ignore", invalid="ignore"):
        of_stock = np.where(stock[0] > 0, stock[1] / stock[0], np.nan)
        of_change = np.where(change[0] > _NOTHING * stock[0], change[1] / change[0], np.nan)
        both = np.where(np.isfinite(of_change), (of_stock + of_change) / 2.0, of_stock)
        return _Verdict(other[0], np.where(told, 1.0 / both, np.nan), np.where(told, 1.0 / of_change, np.nan))


def _enough(frame: _Frame, together: np.ndarray) -> np.ndarray:
    """Whether plots are enough for a verdict: few plots are, if the strata taken together have enough."""
    enough = np.ones(together.shape, dtype=bool)
    for number in frame.units.values():
        free = np.where(together & (number > 1), number - 1.0, 0.0).sum(axis=1, keepdims=True)
        enough &= ~together | (number < 1) | (free >= assist_limits().plots_per_slope)
    return enough


def _added(
    plain: list[np.ndarray], other: list[np.ndarray], weight: np.ndarray, together: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Add up over surveys, or pairs of them, where both are known; strata taken together have the sum over these."""
    sums = [np.zeros(together.shape), np.zeros(together.shape)]
    for one, two in zip(plain, other, strict=True):
        known = np.isfinite(one) & np.isfinite(two)
        sums[0] += np.where(known, one, 0.0)
        sums[1] += np.where(known, two, 0.0)
    made = []
    for total in sums:
        joint = np.where(together, total * weight, 0.0).sum(axis=1, keepdims=True)
        made.append(np.where(together, joint, total))
    return made[0], made[1]
