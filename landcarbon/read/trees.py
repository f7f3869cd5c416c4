"""The tree rows of all surveys as one table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from landcarbon.errors import InputFileError
from landcarbon.inventory.models import Settings
from landcarbon.read.mapping import Mapped, read_mapped, wanted_in
from landcarbon.read.notes import note
from landcarbon.read.source import FileLog, find_source
from landcarbon.read.stack import stack_frames
from landcarbon.read.surveys import day_text, files_of, survey_by_date, survey_by_label

__all__ = ["STATUS_DEFAULTS", "TreeRows", "read_trees"]

STATUS_NAMES = ("live", "dead", "absent")

# Codes understood if there is no [status] table (words of the trade and their initials; common practice, no source).
STATUS_DEFAULTS = {
    "live": "live",
    "l": "live",
    "alive": "live",
    "a": "live",
    "1": "live",
    "dead": "dead",
    "d": "dead",
    "2": "dead",
    "absent": "absent",
    "gone": "absent",
    "cut": "absent",
    "missing": "absent",
    "0": "absent",
}

_CODES_NAMED = 12  # in one message

_COLUMNS = [
    "row_id", "file", "row", "survey", "plot", "subplot", "tree", "stem", "species", "status", "dbh_cm", "height_m",
    "expansion_per_ha", "weight", "decay_class", "break_height_m", "top_cm", "date", "used",
]  # fmt: skip


@dataclass
class TreeRows:
    """Tree rows read.

    Attributes
    ----------
    frame : DataFrame
        As described for ``Inputs.trees``.
    findings : list of DataFrame
        What was noted.
    """

    frame: pd.DataFrame
    findings: list[pd.DataFrame] = field(default_factory=list)


def read_trees(settings: Settings, log: FileLog) -> TreeRows:
    """Read every tree table named in the settings.

    Parameters
    ----------
    settings : Settings
        The project file.
    log : FileLog
        Notes what was read.

    Raises
    ------
    InputFileError
        If a file cannot be used.
    """
    parts: list[pd.DataFrame] = []
    findings: list[pd.DataFrame] = []
    codes: list[dict[str, tuple[str, int]]] = []
    start = 0
    for file, served in files_of(settings, "trees").items():
        source = find_source(
            file, settings.folder, f"trees {', '.join(served)}", allow_outside=settings.inventory.allow_outside
        )
        mapped = read_mapped(source, "trees", settings, log)
        reader = _FileRows(mapped, settings, served, start)
        parts.append(reader.rows())
        findings += [*mapped.findings, *reader.findings]
        codes.append(reader.codes)
        start += len(mapped.frame)
    findings += [] if settings.status else _understood(codes)
    findings += _unmapped(codes)
    return TreeRows(stack_frames(parts) if parts else _no_rows(settings), findings)


def _no_rows(settings: Settings) -> pd.DataFrame:
    """Return the canonical table without a row, for an inventory of samples alone."""
    text = pd.Categorical([], categories=pd.Index([], dtype="str"))
    kinds: dict[str, object] = {
        **{name: text for name in ("file", "plot", "subplot", "species", "decay_class")},
        "survey": pd.Categorical([], categories=pd.Index(list(settings.surveys), dtype="str")),
        "status": _status_category(np.empty(0, dtype="int8")),
        **{name: pd.Series(dtype="str") for name in ("tree", "stem")},
        "row_id": np.empty(0, dtype="int64"),
        "row": np.empty(0, dtype="int32"),
        "date": np.empty(0, dtype="datetime64[s]"),
        "used": np.empty(0, dtype=bool),
    }
    return pd.DataFrame({name: kinds.get(name, np.empty(0, dtype="float64")) for name in _COLUMNS})


class _FileRows:
    """The rows of one file: each step may set rows aside and notes why."""

    def __init__(self, mapped: Mapped, settings: Settings, served: list[str], start: int) -> None:
        self.mapped = mapped
        self.settings = settings
        self.served = served
        self.findings: list[pd.DataFrame] = []
        self.codes: dict[str, tuple[str, int]] = {}
        self.frame = mapped.frame
        self.labels = self.frame["survey"]
        self.frame["row_id"] = np.arange(start, start + len(self.frame), dtype="int64")
        self.frame["used"] = True
        levels = pd.Index(list(settings.surveys), dtype="str")
        self.frame["survey"] = pd.Categorical.from_codes(np.full(len(self.frame), -1, dtype="int8"), levels)

    def rows(self) -> pd.DataFrame:
        """Settle survey, status and unreadable cells; return the canonical columns."""
        self._surveys()
        self._status()
        self._cells()
        self._aside(self.mapped.ragged, "ragged row")
        if "weight" in self.mapped.given:
            # A weight left blank is for the checks to judge; without the column every row is one tree.
            return self.frame[_COLUMNS]
        return self.frame.assign(weight=1.0)[_COLUMNS]

    def _aside(self, mask: np.ndarray, rule: str, **words: object) -> None:
        if mask.any():
            self.frame.loc[mask, "used"] = False
            self.findings.append(note(rule, self.frame[mask], **words))  # type: ignore[arg-type]

    def _surveys(self) -> None:
        by_label = "survey" in self.mapped.given
        if len(self.served) == 1:
            self._one_survey(by_label)
        elif by_label:
            self._many_by_label()
        else:
            self._many_by_date()

    def _place(self, places: np.ndarray) -> None:
        """Set the survey from positions in ``served``; -1 leaves none."""
        levels = self.frame["survey"].cat.categories
        lookup = np.append(levels.get_indexer(pd.Index(self.served)), -1).astype("int8")
        self.frame["survey"] = pd.Categorical.from_codes(lookup[places], levels)

    def _label_places(self) -> np.ndarray:
        """Return the position in ``served`` of each row's label: -1 no survey at all, -2 one of another file."""
        levels = list(self.labels.cat.categories)
        match = survey_by_label(levels, list(self.settings.surveys))
        names = [match[level] for level in levels]
        known = [self.served.index(name) if name in self.served else (-2 if name else -1) for name in names]
        return np.append(np.array(known, dtype="int16"), -1)[self.labels.cat.codes.to_numpy()]

    def _one_survey(self, by_label: bool) -> None:
        self._place(np.zeros(len(self.frame), dtype="int16"))
        if not by_label:
            return
        other = self._label_places() == -2
        value = self.labels[other].to_numpy(dtype=object)
        self._aside(other, "other survey", value=value, fill={"survey": self.served[0], "table": "trees"})

    def _many_by_label(self) -> None:
        places = self._label_places()
        self._place(np.maximum(places, -1))
        unknown = places < 0
        value = self.labels[unknown].to_numpy(dtype=object)
        self._aside(unknown, "unknown survey", value=value, fill={"surveys": ", ".join(self.served)})

    def _many_by_date(self) -> None:
        file = str(self.frame["file"].cat.categories[0])
        if "date" not in self.mapped.given:
            raise InputFileError(
                f"the file serves the surveys {', '.join(self.served)}, but has neither a survey nor a date column",
                where=file,
                remedy="Map one of them under [columns.trees].",
            )
        places = survey_by_date(self.frame["date"], self.settings, self.served, file)
        self._place(places)
        lost = places < 0
        if "date" in self.mapped.bad:
            lost[self.mapped.bad["date"].index] = False  # told once, as a date that cannot be read
        self._aside(lost, "date outside surveys", value=day_text(self.frame.loc[lost, "date"]))

    def _status(self) -> None:
        codes = self.frame["status"]
        if "status" not in self.mapped.given:
            self.frame["status"] = _status_category(np.zeros(len(codes), dtype="int8"))
            return
        levels = list(codes.cat.categories)
        names = [_status_name(level, dict(self.settings.status)) for level in levels]
        counts = np.bincount(codes.cat.codes.to_numpy(), minlength=len(levels))
        self.codes = {level: (name, int(n)) for level, name, n in zip(levels, names, counts, strict=True) if n}
        known = np.array([STATUS_NAMES.index(name) if name else -1 for name in names] + [-1], dtype="int8")
        places = known[codes.cat.codes.to_numpy()]
        unknown = places < 0
        self._aside(unknown, "unknown status")
        # Set aside anyway; of the three states this is the one that adds nothing.
        self.frame["status"] = _status_category(np.where(unknown, STATUS_NAMES.index("absent"), places))

    def _cells(self) -> None:
        """Judge the cells that could not be read: without a diameter or weight that counts, the row is set aside."""
        absent = (self.frame["status"] == "absent").to_numpy()
        by_date = len(self.served) > 1 and "survey" not in self.mapped.given
        for column, texts in self.mapped.bad.items():
            mask = np.zeros(len(self.frame), dtype=bool)
            mask[texts.index] = True
            if column == "dbh":
                essential = mask & ~absent
            else:
                essential = mask & (column in ("weight", "expansion") or (column == "date" and by_date))
            words = {"column": self.mapped.given[column], "wanted": wanted_in(column, "trees")}
            value = texts[essential[texts.index]].to_numpy(dtype=object)
            self._aside(essential, "not readable", column=column, value=value, fill=words)
            rest = mask & ~essential
            value = texts[rest[texts.index]].to_numpy(dtype=object)
            self.findings.append(
                note(
                    "not readable and left blank",
                    self.frame[rest],
                    table="trees",
                    column=column,
                    value=value,
                    fill=words,
                )
            )


def _status_name(code: str, given: dict[str, str]) -> str:
    """Translate a code: as written in the settings, then case aside; by the defaults if the settings have no table."""
    if code in given:
        return given[code]
    folded = {key.casefold(): value for key, value in given.items()} if given else STATUS_DEFAULTS
    return folded.get(code.casefold(), "")


def _understood(codes: Sequence[dict[str, tuple[str, int]]]) -> list[pd.DataFrame]:
    """Tell which status codes were taken for what without a word of the user's."""
    rows = {key: count for key, count in _counted(codes).items() if key[0]}
    if not rows:
        return []
    told = []
    for name in STATUS_NAMES:
        mine = [f"{code!r} ({count:,} rows)" for (meaning, code), count in sorted(rows.items()) if meaning == name]
        told += [f"{', '.join(mine)} as {name}"] if mine else []
    return [note("status codes understood", value=", ".join(code for _, code in rows), fill={"codes": "; ".join(told)})]


def _unmapped(codes: Sequence[dict[str, tuple[str, int]]]) -> list[pd.DataFrame]:
    """Name the status codes that mean nothing, once for all rows that have them."""
    rows = {code: count for (name, code), count in sorted(_counted(codes).items()) if not name}
    if not rows:
        return []
    most = sorted(rows, key=lambda code: -rows[code])[:_CODES_NAMED]
    told = ", ".join(f"{repr(code) if code else 'blank'} ({rows[code]:,} rows)" for code in most)
    told += f" and {len(rows) - len(most)} more" if len(rows) > len(most) else ""
    return [note("status not mapped", value=", ".join(most), fill={"count": f"{sum(rows.values()):,}", "codes": told})]


def _counted(codes: Sequence[dict[str, tuple[str, int]]]) -> dict[tuple[str, str], int]:
    """Add up the rows of each code, by its meaning (blank: none) and the code, over all files."""
    rows: dict[tuple[str, str], int] = {}
    for of_file in codes:
        for code, (name, count) in of_file.items():
            rows[name, code] = rows.get((name, code), 0) + count
    return rows


def _status_category(places: np.ndarray) -> pd.Categorical:
    return pd.Categorical.from_codes(places.astype("int8"), pd.Index(STATUS_NAMES, dtype="str"))
