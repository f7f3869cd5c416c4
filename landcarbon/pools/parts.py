"""The one shape of every pool: parts measured on plots, and the sums they make."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

__all__ = ["PARTS", "PART_COLUMNS", "RowShares", "column_name", "empty_parts", "make_parts", "pool_of", "wide_parts"]

#: Parts of each pool, in canonical order. A part is measured on its own set of plots.
PARTS: dict[str, tuple[str, ...]] = {
    "above_ground": ("trees", "saplings", "ground_vegetation"),
    "below_ground": ("roots",),
    "dead_wood": ("standing", "stumps", "down_coarse", "down_fine", "dead_roots", "default"),
    "litter": ("litter", "duff", "default"),
    "soil": ("soil", "default"),
}

PART_COLUMNS = [
    "survey",
    "plot",
    "pool",
    "part",
    "density_t_c_ha",  # t C per ha of the land sampled
    "mass_t_ha",  # dry mass the carbon sits in; for soil the mass of fine soil
    "samples",  # pieces, frames, cores or trees used
    "method",
    "known",  # weakest of the factors used: read, secondary, memory
]


@dataclass
class RowShares:
    """What each row of a sample table brings into the figure of its plot; the modules of the pools add to it.

    Attributes
    ----------
    tables : dict
        By sample table: frames with row_id and density_t_c_ha [t C per ha of the plot].
    """

    tables: dict[str, list[pd.DataFrame]] = field(default_factory=dict)

    def add(self, table: str, rows: pd.DataFrame, density_t_c_ha: np.ndarray) -> None:
        """Add the shares of some rows.

        Parameters
        ----------
        table : str
            Canonical name of the table.
        rows : DataFrame
            The rows, with row_id.
        density_t_c_ha : ndarray
            Share of each; those of a plot and part sum to its figure.
        """
        told = pd.DataFrame({"row_id": rows["row_id"].to_numpy(), "density_t_c_ha": density_t_c_ha})
        self.tables.setdefault(table, []).append(told)

    def of(self, table: str, rows: pd.DataFrame) -> np.ndarray:
        """Share of each row of a table; NaN for rows that bring in nothing of their own."""
        parts = self.tables.get(table)
        if not parts:
            return np.full(len(rows), np.nan)
        told = pd.concat(parts, ignore_index=True).set_index("row_id")["density_t_c_ha"]
        return told.reindex(rows["row_id"].to_numpy()).to_numpy(dtype=float)


def column_name(pool: str, part: str) -> str:
    """Name of a part's column in the table of plots."""
    return f"{pool}.{part}"


def pool_of(column: str) -> str:
    """Pool a part's column belongs to."""
    return column.split(".", 1)[0]


def empty_parts() -> pd.DataFrame:
    """Return a table of parts without rows."""
    text = {name: pd.Series(dtype="str") for name in PART_COLUMNS}
    numbers = {name: pd.Series(dtype="float64") for name in ("density_t_c_ha", "mass_t_ha")}
    return pd.DataFrame({**text, **numbers, "samples": pd.Series(dtype="int64")})[PART_COLUMNS]


def make_parts(measured: pd.DataFrame, *, pool: str, part: str, method: str, known: str = "read") -> pd.DataFrame:
    """Label the outcome of a pool module.

    Parameters
    ----------
    measured : DataFrame
        survey, plot, density_t_c_ha [t C/ha], mass_t_ha [t/ha], samples; one row per plot and survey where the part
        was measured, also where nothing was found.
    pool, part : str
        As in ``PARTS``.
    method : str
        How it was obtained, in a few words.
    known : {"read", "secondary", "memory"}
        How the weakest factor is known.
    """
    if part not in PARTS[pool]:
        raise ValueError(f"{part!r} is not a part of {pool!r}")
    table = measured.assign(pool=pool, part=part, method=method, known=known)
    table = table.astype({"survey": "str", "plot": "str", "samples": "int64"})
    return table[PART_COLUMNS].reset_index(drop=True)


def wide_parts(parts: pd.DataFrame) -> pd.DataFrame:
    """Turn part rows into one row per survey and plot with a column ``pool.part`` each; NaN where not measured."""
    if parts.empty:
        return pd.DataFrame({"survey": pd.Series(dtype="str"), "plot": pd.Series(dtype="str")})
    named = parts.assign(column=parts["pool"] + "." + parts["part"])
    table = named.pivot(index=["survey", "plot"], columns="column", values="density_t_c_ha")
    order = [column_name(pool, part) for pool, names in PARTS.items() for part in names]
    table = table[[name for name in order if name in table]]
    table.columns.name = None
    return table.reset_index()
