"""Sums of parts: which columns of the plot table make up a pool, and which pools make up ``all``."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from landcarbon.errors import UserError
from landcarbon.estimate.tables import ALL, pool_list

__all__ = ["Sums", "read_sums"]

_CODE_BITS = 62  # sets of columns are written as bits of one integer, for two dates


@dataclass(frozen=True)
class Sums:
    """Pools as sums of parts, each part a column of the plot table.

    Attributes
    ----------
    pools : list of str
        In canonical order, without ``all``.
    parts : list of str
        Columns, pool by pool.
    pool : ndarray of int
        Pool of each part.
    """

    pools: list[str]
    parts: list[str]
    pool: np.ndarray

    @property
    def names(self) -> list[str]:
        """Pools, then ``all``: the rows of the results."""
        return [*self.pools, ALL]

    @property
    def member(self) -> np.ndarray:
        """Parts of each pool; shape (pools, parts)."""
        return np.arange(len(self.pools))[:, None] == self.pool

    def label(self, part: int) -> str:
        """Name of a part in texts: that of its pool if the pool has no other."""
        return self.pools[self.pool[part]] if (self.pool == self.pool[part]).sum() == 1 else self.parts[part]

    def labels(self) -> list[str]:
        """Names of all parts in texts."""
        return [self.label(part) for part in range(len(self.parts))]


def read_sums(sums: Mapping[str, Sequence[str]], pools: Sequence[str]) -> Sums:
    """Check what the sums are made of.

    Parameters
    ----------
    sums : mapping
        Columns of each pool. ``all`` need not be given; it is the sum of the pools.
    pools : sequence of str
        Pools counted.

    Raises
    ------
    UserError
        If a pool has no parts, a part belongs to two pools, or ``all`` is given and not the sum of the pools.
    """
    names = [name for name in pool_list(pools) if name != ALL]
    lacking = [name for name in names if not sums.get(name)]
    if lacking:
        raise UserError(f"pool {lacking[0]!r} has no parts", where="sums", remedy="Name its columns in the plot table.")
    parts = [str(part) for name in names for part in sums[name]]
    twice = {part for part in parts if parts.count(part) > 1}
    if twice:
        raise UserError(f"part {min(twice)!r} counts twice", where="sums", remedy="A part belongs to one pool, once.")
    if ALL in sums and set(sums[ALL]) != set(parts):
        raise UserError(
            "'all' is not the sum of the pools", where="sums", remedy="Give all parts of all counted pools."
        )
    if 2 * len(parts) > _CODE_BITS:
        raise UserError(f"{len(parts)} parts are too many", where="sums", remedy=f"At most {_CODE_BITS // 2}.")
    pool = np.repeat(np.arange(len(names)), [len(sums[name]) for name in names])
    return Sums(names, parts, pool)
