"""Tables of raster values of plots and units: checked, laid out alike, and told apart by raster and survey."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from landcarbon.errors import UserError

__all__ = ["Given", "Variable", "long_means", "long_values", "read_given"]

_COVERED = "covered."  # prefix of columns with the share that one raster covers
_KEYS = ("survey", "plot", "by", "unit", "stratum", "area_ha", "points", "valid_ha", "share_covered")


@dataclass(frozen=True)
class Variable:
    """One auxiliary variable: a raster of a survey, serving all surveys.

    Attributes
    ----------
    label : str
        Name of the raster, with the survey if there are several.
    raster : str
        Name of the raster.
    source : str
        Survey it is of, the latest if the raster is the same at several.
    plot_values : Series
        Value by plot.
    unit_means : DataFrame
        Its rows of the table of means.
    """

    label: str
    raster: str
    source: str
    plot_values: pd.Series
    unit_means: pd.DataFrame


@dataclass(frozen=True)
class Given:
    """The two tables of raster values.

    Attributes
    ----------
    plot_values : DataFrame
        survey, plot, raster, value.
    unit_means : DataFrame
        survey, by, unit, raster, mean, covered (share of the area with a value), stratum, area_ha, points.
    strata : list of str
        Labels of the strata.
    """

    plot_values: pd.DataFrame
    unit_means: pd.DataFrame
    strata: list[str]

    def own(self, raster: str, survey: str) -> bool:
        """Whether a raster has means at a survey."""
        rows = (self.unit_means["raster"] == raster) & (self.unit_means["survey"] == survey)
        return bool(self.unit_means["mean"][rows].notna().any())

    def variables(self, surveys: Sequence[str]) -> list[Variable]:
        """Rasters in the order given, of each those of all surveys, the latest first.

        Parameters
        ----------
        surveys : sequence of str
            In the order of time. A raster with the same means at several surveys is one variable.
        """
        found = []
        for raster in (str(name) for name in pd.unique(self.unit_means["raster"])):
            groups = self._alike(raster, [name for name in reversed(surveys) if self.own(raster, name)])
            for sources in groups:
                label = raster if len(groups) == 1 else f"{raster} {sources[0]}"
                found.append(self._variable(label, raster, sources))
        return found

    def _alike(self, raster: str, surveys: list[str]) -> list[list[str]]:
        """Put surveys with the same means together."""
        keys = ["by", "unit", "stratum"]
        rows = self.unit_means[self.unit_means["raster"] == raster]
        groups: list[list[str]] = []
        tables: list[pd.Series] = []
        for survey in surveys:
            mine = rows[rows["survey"] == survey].set_index(keys)["mean"].sort_index()
            same = [at for at, other in enumerate(tables) if mine.equals(other)]
            if same:
                groups[same[0]].append(survey)
            else:
                groups.append([survey])
                tables.append(mine)
        return groups

    def _variable(self, label: str, raster: str, sources: list[str]) -> Variable:
        rows = self.plot_values[self.plot_values["raster"] == raster]
        values = pd.Series(dtype=float)
        for survey in sources:
            mine = rows[rows["survey"] == survey]
            values = values.combine_first(pd.Series(mine["value"].to_numpy(float), index=mine["plot"].astype("str")))
        means = self.unit_means[(self.unit_means["raster"] == raster) & (self.unit_means["survey"] == sources[0])]
        return Variable(label, raster, sources[0], values, means)


def read_given(plot_values: pd.DataFrame, unit_means: pd.DataFrame, strata: list[str]) -> Given:
    """Check the two tables, long (a row per raster) or wide (a column per raster), and fill in what may be left out.

    Parameters
    ----------
    plot_values : DataFrame
        survey, plot, and raster and value, or one column per raster.
    unit_means : DataFrame
        survey, by, unit, and raster, mean and covered, or one column per raster and share_covered (``covered.<raster>``
        where they differ). Further columns: stratum, area_ha, points.
    strata : list of str
        Labels of the strata.

    Raises
    ------
    UserError
        If a column is missing or a row occurs twice.
    """
    values, means = long_values(plot_values), long_means(unit_means)
    for name, table, needed in (
        ("raster values of plots", values, ("survey", "plot", "raster", "value")),
        ("raster means of units", means, ("survey", "by", "unit", "raster", "mean", "covered")),
    ):
        lacking = [column for column in needed if column not in table]
        if lacking:
            raise UserError(f"no column {', '.join(lacking)}", where=name, remedy=f"It needs {', '.join(needed)}.")
    plain: dict[str, Any] = {"stratum": "", "area_ha": np.nan, "points": np.nan}
    means = means.assign(**{name: value for name, value in plain.items() if name not in means})
    for name, table, keys in (
        ("raster values of plots", values, ["survey", "plot", "raster"]),
        ("raster means of units", means, ["survey", "by", "unit", "raster", "stratum"]),
    ):
        twice = table.duplicated(keys)
        if twice.any():
            row = table[twice].iloc[0]
            told = ", ".join(f"{key} {row[key]!r}" for key in keys)
            raise UserError(f"{told} occurs twice", where=name, remedy="Give each one row.")
    text = {key: "str" for key in ("survey", "raster")}
    values, means = values.astype(text), means.astype(text)
    return Given(values, means, strata)


def long_values(table: pd.DataFrame) -> pd.DataFrame:
    """Lay raster values of plots out with a row per raster; tables that are long already stay as they are."""
    if "raster" in table or "plot" not in table:
        return table
    keys = [name for name in table if name in _KEYS]
    rasters = [name for name in table if name not in _KEYS]
    return table.melt(id_vars=keys, value_vars=rasters, var_name="raster", value_name="value")


def long_means(table: pd.DataFrame) -> pd.DataFrame:
    """Lay raster means of units out with a row per raster; tables that are long already stay as they are."""
    if "raster" in table or "unit" not in table:
        return table
    keys = [name for name in table if name in _KEYS]
    shares = [str(name) for name in table if str(name).startswith(_COVERED)]
    rasters = [name for name in table if name not in _KEYS and name not in shares]
    long = table.melt(id_vars=keys, value_vars=rasters, var_name="raster", value_name="mean")
    long = long.assign(covered=long.get("share_covered", 1.0))
    for name in shares:  # over rasters
        own = (long["raster"] == name.removeprefix(_COVERED)).to_numpy()
        long.loc[own, "covered"] = table[name].to_numpy(dtype=float)
    return long
