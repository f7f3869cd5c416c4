"""The tables of what is measured beside the trees: wood, litter, ground vegetation, saplings and soil."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from landcarbon.inventory.columns import table_columns
from landcarbon.inventory.measured import PART_TABLES, counted_tables, tables_given
from landcarbon.inventory.models import Settings
from landcarbon.inventory.nearest import suggestion
from landcarbon.read.lines import LINE_KEY, derive_lines, settle_lines, untallied
from landcarbon.read.mapping import Mapped, class_column, not_readable, read_mapped, specs_of, wanted_in
from landcarbon.read.needs import refuse_lacking
from landcarbon.read.notes import note
from landcarbon.read.size_classes import long_pieces
from landcarbon.read.source import FileLog, find_source
from landcarbon.read.stack import stack_frames
from landcarbon.read.surveys import assign_surveys, files_of

__all__ = ["SampleTables", "read_samples"]

_ONE = 1.0
_LINES, _PIECES = "lines", "pieces"

# A row without any of these says nothing that could be worked with.
_FIGURES = {
    "logs": ("length_m", "large_cm", "middle_cm", "small_cm"),
    "stumps": ("diameter_cm", "height_m"),
    "litter": ("fresh_kg", "dry_kg", "sub_dry_g", "depth_cm"),
    "ground_vegetation": ("fresh_kg", "dry_kg", "sub_dry_g", "depth_cm"),
    "soil": (
        "bulk_density_g_cm3",
        "organic_carbon_share",
        "organic_matter_share",
        "total_carbon_share",
    ),
}


@dataclass
class SampleTables:
    """Tables of samples.

    Attributes
    ----------
    tables : dict of DataFrame
        As ``Inputs.samples``.
    findings : list of DataFrame
        What was noted.
    """

    tables: dict[str, pd.DataFrame] = field(default_factory=dict)
    findings: list[pd.DataFrame] = field(default_factory=list)

    def species(self) -> set[str]:
        """Return the species codes that occur."""
        found: set[str] = set()
        for frame in self.tables.values():
            if "species" in frame:
                found |= set(frame["species"].unique())
        return found - {""}


def read_samples(settings: Settings, plots: Sequence[str], log: FileLog) -> SampleTables:
    """Read every table of samples named in the settings.

    Parameters
    ----------
    settings : Settings
        The project file.
    plots : sequence of str
        Plots of the plots table.
    log : FileLog
        Notes what was read.

    Raises
    ------
    InputFileError
        If a file cannot be used.
    SettingsError
        If neither a table nor the settings give an area or factor that is needed.
    """
    result = SampleTables()
    derived: list[pd.DataFrame] = []
    for table in tables_given(settings):
        parts: list[pd.DataFrame] = []
        start = 0
        for file, served in files_of(settings, table).items():
            source = find_source(
                file, settings.folder, f"{table} {', '.join(served)}", allow_outside=settings.inventory.allow_outside
            )
            mapped = read_mapped(source, table, settings, log)
            refuse_lacking(mapped.given, table, settings, source.name)
            reader = _FileRows(mapped, table, settings, served)
            rows = reader.rows(plots, start, source.name)
            parts.append(rows)
            start += len(rows)
            if table == _PIECES:
                derived.append(reader.looked_at())
            result.findings += [*reader.mapped.findings, *reader.findings]
        result.tables[table] = stack_frames(parts)
    if _LINES in result.tables:
        result.findings += settle_lines(result.tables[_LINES], settings)
    if _PIECES in result.tables:
        _add_lines(result.tables, derived, settings)
    result.findings += _not_counted(settings)
    return result


class _FileRows:
    """The rows of one file: each step may set rows aside and notes why."""

    def __init__(self, mapped: Mapped, table: str, settings: Settings, served: list[str]) -> None:
        self.table = table
        self.settings = settings
        self.served = served
        self.findings: list[pd.DataFrame] = []
        self.below_zero: dict[str, np.ndarray] = {}
        self.nothing = np.zeros(len(mapped.frame), dtype=bool)
        if table == _PIECES:
            pieces = long_pieces(mapped, settings)
            mapped, self.nothing, self.below_zero = pieces.mapped, pieces.nothing, pieces.below_zero
        self.mapped = mapped
        self.frame = mapped.frame
        self.frame["used"] = True
        self.placed = np.zeros(len(self.frame), dtype=bool)

    def rows(self, plots: Sequence[str], start: int, file: str) -> pd.DataFrame:
        """Settle survey, plot and unreadable cells; return the canonical columns, numbered from ``start``."""
        number = np.cumsum(~self.nothing) - 1 + start
        self.frame["row_id"] = pd.Series(number, dtype="Int64").mask(self.nothing)
        self._surveys(file)
        self._aside(self.mapped.ragged, "ragged row")
        self._plots(plots)
        self._lines()
        self.placed = self.frame["used"].to_numpy(copy=True)
        self._cells()
        self._numbers()
        becomes = [spec.becomes for spec in table_columns(self.table).values()]
        names = ["row_id", "file", "row", *becomes, "used"]
        kept = self.frame.loc[~self.nothing, names]
        return kept.astype({"row_id": "int64"}).reset_index(drop=True)

    def looked_at(self) -> pd.DataFrame:
        """Return the rows of pieces whose line is known, also those without wood; note lines left blank."""
        rows = self.frame[self.placed]
        self.findings += untallied(rows, self.settings)
        return rows[["file", "row", *LINE_KEY, "date", "line_m"]]

    def _aside(self, mask: np.ndarray, rule: str, **words: object) -> None:
        """Set aside what still counts; ``value`` and a frame of ``fill`` stand for all rows of the mask."""
        rows = self.frame[mask]
        fresh = rows["used"].to_numpy()
        if not fresh.any():
            return
        for name, word in words.items():
            if isinstance(word, pd.DataFrame) or (isinstance(word, np.ndarray) and name == "value"):
                words[name] = word[fresh]
        self.frame.loc[rows.index[fresh], "used"] = False
        self.findings.append(note(rule, rows[fresh], table=self.table, **words))  # type: ignore[arg-type]

    def _surveys(self, file: str) -> None:
        found = assign_surveys(self.frame, self.mapped.given, self.settings, self.served, file=file, table=self.table)
        self.frame["survey"] = self._levels(found.names)
        if found.rule == "date outside surveys" and "date" in self.mapped.bad:
            self._unreadable("date", self.mapped.bad.pop("date"))  # so it is told once
        words = {"survey": self.served[0], "surveys": ", ".join(self.served), "table": self.table}
        self._aside(found.lost, found.rule, value=found.value, fill=words)

    def _levels(self, names: pd.Series) -> pd.Categorical:
        """Return the surveys as categories in the order of the settings; a blank last, where there is one."""
        levels = [*self.settings.surveys, *([""] if (names == "").any() else [])]
        return pd.Categorical(names, categories=pd.Index(levels, dtype="str"))

    def _plots(self, plots: Sequence[str]) -> None:
        named = self.frame["plot"] != ""
        self._aside((~named).to_numpy(), "sample without plot")
        unknown = (named & ~self.frame["plot"].isin(list(plots))).to_numpy()
        strange = self.frame.loc[unknown, "plot"]
        hints = {name: suggestion(name, plots) for name in strange.unique()}
        words = pd.DataFrame({"hint": [f" {hints[name]}" if hints[name] else "" for name in strange]})
        self._aside(unknown, "plot unknown", fill=words)

    def _lines(self) -> None:
        """Set aside rows without a line where their subplot has lines with names."""
        if self.table not in (_LINES, _PIECES) or "line" not in self.mapped.given:
            return
        blank = self.frame["line"] == ""
        if blank.any():
            beside = (~blank).groupby([self.frame[name] for name in LINE_KEY[:3]]).transform("any")
            self._aside((blank & beside).to_numpy(), "row without line")

    def _cells(self) -> None:
        """Judge the cells that could not be read, and figures of size classes below zero."""
        specs = specs_of(self.table, self.settings)
        for column, texts in self.mapped.bad.items():
            if specs[column].essential:
                self._unreadable(column, texts)
            else:
                told = not_readable("not readable and left blank", self.mapped, self.table, column)
                self.findings.append(told)
        for name, mask in self.below_zero.items():
            value = self.frame.loc[mask, class_column(name)].map("{:g}".format).to_numpy(dtype=object)
            self._aside(mask, "size class below zero", column=name, value=value, fill={"size_class": name})

    def _unreadable(self, column: str, texts: pd.Series) -> None:
        mask = np.zeros(len(self.frame), dtype=bool)
        mask[texts.index] = True
        words = {"column": self.mapped.given[column], "wanted": wanted_in(column, self.table)}
        self._aside(mask, "not readable", column=column, value=texts.to_numpy(dtype=object), fill=words)

    def _numbers(self) -> None:
        """Fill in what a blank means, and set aside rows without anything to work with."""
        figures = _FIGURES.get(self.table)
        if figures:
            self._aside(self.frame[list(figures)].isna().all(axis=1).to_numpy(), "row without figures")
        if self.table in (_PIECES, "saplings"):
            size = "diameter_cm" if self.table == _PIECES else "dbh_cm"
            uncounted = self.frame["count"].isna()
            if "count" in self.mapped.given:
                lost = uncounted & self.frame[size].isna() & ~self.nothing
                self._aside(lost.to_numpy(), "row without number")
            self.frame["count"] = self.frame["count"].where(~uncounted, _ONE)
        if self.table == "soil":
            self.frame["cores"] = self.frame["cores"].fillna(_ONE)


def _add_lines(tables: dict[str, pd.DataFrame], derived: list[pd.DataFrame], settings: Settings) -> None:
    """Derive the lines of the surveys that have no table of lines."""
    with_table = {name for served in files_of(settings, _LINES).values() for name in served}
    rows = stack_frames(derived)
    lines = derive_lines(rows[~rows["survey"].isin(with_table)], settings)
    parts = [tables[_LINES]] if _LINES in tables else []
    start = len(parts[0]) if parts else 0
    lines["row_id"] = np.arange(start, start + len(lines), dtype="int64")
    columns = ["row_id", "file", "row", *LINE_KEY, "length_m", "slope_deg", "date", "used"]
    tables[_LINES] = stack_frames([*parts, lines[columns]])


def _not_counted(settings: Settings) -> list[pd.DataFrame]:
    """Tell tables whose contents enter no pool."""
    counted, homes = counted_tables(settings), {_LINES: "dead_wood"}
    for pool, parts in PART_TABLES.items():
        homes.update({table: pool for tables in parts.values() for table in tables})
    found = []
    for table in tables_given(settings):
        if table not in counted:
            pool = homes[table]
            how = getattr(settings.pools, pool).how
            told = f"Say {pool} = 'measured' under [pools], or take the table out."
            if how == "measured":
                told = f"Add it to the parts of {pool} under [pools], or take the table out."
            found.append(note("table not counted", table=table, value=table, fill={"told": told}))
    return found
