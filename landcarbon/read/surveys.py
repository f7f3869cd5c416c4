"""Which survey a file or a row belongs to, and the order of the surveys."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable
from dataclasses import dataclass

import numpy as np
import pandas as pd
from pandas.api.typing import NaTType

from landcarbon.errors import InputFileError
from landcarbon.inventory.models import Settings

Moment = pd.Timestamp | NaTType

_MIDDLE_OF_YEAR = (7, 1)  # month and day that stand for a year

__all__ = [
    "Assigned",
    "assign_surveys",
    "day_text",
    "files_of",
    "label_day",
    "label_year",
    "order_surveys",
    "survey_by_date",
    "survey_by_label",
]


def files_of(settings: Settings, kind: str) -> dict[str, list[str]]:
    """Return the files of one kind, each with the surveys it serves, in the order of the settings.

    Parameters
    ----------
    settings : Settings
        The project file.
    kind : str
        trees, visits or a table of samples.
    """
    whole = getattr(settings, kind).file if kind in ("trees", "visits") else getattr(settings.samples, kind)
    shared = _listed(whole)
    found: dict[str, list[str]] = {}
    for name, survey in settings.surveys.items():
        for file in _listed(getattr(survey, kind)) or shared:
            found.setdefault(file, [])
            if name not in found[file]:
                found[file].append(name)
    return found


def _listed(value: str | list[str] | None) -> list[str]:
    if value is None:
        return []
    return [value] if isinstance(value, str) else list(value)


def survey_by_label(labels: Iterable[str], surveys: list[str]) -> dict[str, str]:
    """Match the labels in a survey column to the surveys; a label that fits none maps to a blank.

    Parameters
    ----------
    labels : iterable of str
        Distinct labels.
    surveys : list of str
        Names of the surveys the file serves.
    """
    exact = {name: name for name in surveys}
    folded = {name.casefold(): name for name in surveys}
    found = {}
    for label in labels:
        plain = re.sub(r"\.0+$", "", label)  # 2014.0: a year that went through a spreadsheet as a number
        found[label] = exact.get(label) or folded.get(label.casefold()) or folded.get(plain.casefold()) or ""
    return found


def survey_by_date(dates: pd.Series, settings: Settings, surveys: list[str], file: str) -> np.ndarray:
    """Return for each date the position in ``surveys`` of the window it falls in, -1 for none.

    Raises
    ------
    InputFileError
        If a survey has no window, or windows overlap.
    """
    bounds = []
    for name in surveys:
        since, until = settings.surveys[name].since, settings.surveys[name].until
        if since is None and until is None:
            raise InputFileError(
                f"the file serves {len(surveys)} surveys, but nothing tells which row belongs to {name}",
                where=file,
                remedy="Map a survey column, or give since and until for each survey and map a date column.",
            )
        bounds.append(
            (pd.Timestamp(since or pd.Timestamp.min.ceil("D")), pd.Timestamp(until or pd.Timestamp.max.floor("D")))
        )
    places = np.full(len(dates), -1, dtype="int16")
    for place, (since, until) in enumerate(bounds):
        others = [n for k, n in enumerate(surveys) if k != place and bounds[k][0] <= until and since <= bounds[k][1]]
        if others:
            raise InputFileError(
                f"the windows of the surveys {surveys[place]} and {others[0]} overlap, so dates cannot tell them apart",
                where=file,
                remedy="Mend since and until, or map a survey column.",
            )
        places[((dates >= since) & (dates <= until)).to_numpy()] = place
    return places


@dataclass(frozen=True)
class Assigned:
    """Surveys of the rows of a file.

    Attributes
    ----------
    names : Series
        Survey of each row; blank if none.
    lost : ndarray of bool
        Rows that belong to no survey of the file.
    rule : str
        Rule of reading these break.
    value : ndarray
        What these rows say of their survey.
    """

    names: pd.Series
    lost: np.ndarray
    rule: str
    value: np.ndarray


def assign_surveys(
    frame: pd.DataFrame, given: Collection[str], settings: Settings, served: list[str], *, file: str, table: str
) -> Assigned:
    """Find the survey of every row of a table of samples.

    Parameters
    ----------
    frame : DataFrame
        survey (labels as written), date.
    given : collection of str
        Which of our columns the file has.
    settings : Settings
        The project file.
    served : list of str
        Surveys the file serves.
    file, table : str
        The file and its canonical table, for messages.

    Raises
    ------
    InputFileError
        If the file serves several surveys and nothing tells them apart.
    """
    labels, rows = frame["survey"], len(frame)
    if "survey" in given:
        known = survey_by_label(labels.unique(), list(settings.surveys))
        names = labels.map(known).astype("str")
        if len(served) == 1:
            lost = ((names != "") & (names != served[0])).to_numpy()
            rule, names = "other survey", pd.Series([served[0]] * rows, dtype="str")
        else:
            lost = ~names.isin(served).to_numpy()
            rule, names = "unknown survey", names.where(~lost, "")
        return Assigned(names, lost, rule, labels[lost].to_numpy(dtype=object))
    if len(served) == 1:
        nothing = np.zeros(rows, dtype=bool)
        return Assigned(pd.Series([served[0]] * rows, dtype="str"), nothing, "other survey", np.empty(0, dtype=object))
    if "date" not in given:
        raise InputFileError(
            f"the file serves the surveys {', '.join(served)}, but has neither a survey nor a date column",
            where=file,
            remedy=f"Map one of them under [columns.{table}].",
        )
    places = survey_by_date(frame["date"], settings, served, file)
    names = pd.Series(np.append(np.array(served, dtype=object), "")[places], dtype="str")
    return Assigned(names, places < 0, "date outside surveys", day_text(frame.loc[places < 0, "date"]))


def day_text(days: pd.Series) -> np.ndarray:
    """Return dates as year-month-day, blank for none."""
    return days.dt.strftime("%Y-%m-%d").fillna("").to_numpy(dtype=object)


def label_year(name: str) -> int | None:
    """Return the year named in a survey label, if there is exactly one."""
    years = re.findall(r"(?<!\d)((?:1[89]|20|21)\d\d)(?!\d)", name)
    return int(years[0]) if len(set(years)) == 1 else None


def label_day(name: str) -> Moment:
    """Return the middle of the year named in a survey label; NaT without one."""
    year = label_year(name)
    return pd.Timestamp(year, *_MIDDLE_OF_YEAR) if year else pd.NaT


def order_surveys(settings: Settings, medians: dict[str, pd.Timestamp]) -> pd.DataFrame:
    """Return the surveys in the order of time.

    Parameters
    ----------
    settings : Settings
        The project file.
    medians : dict
        Median date of the rows of each survey, where there are dates.

    Returns
    -------
    DataFrame
        survey, since, until.
    """
    rows = []
    for place, (name, survey) in enumerate(settings.surveys.items()):
        since = pd.Timestamp(survey.since) if survey.since else pd.NaT
        until = pd.Timestamp(survey.until) if survey.until else pd.NaT
        rows.append((_moment(name, since, until, medians.get(name)), place, name, since, until))
    late = pd.Timestamp.max
    rows.sort(key=lambda row: (late if pd.isna(row[0]) else row[0], row[1]))
    frame = pd.DataFrame([row[2:] for row in rows], columns=["survey", "since", "until"])
    frame["survey"] = frame["survey"].astype("str")
    return frame.astype({"since": "datetime64[s]", "until": "datetime64[s]"})


def _moment(name: str, since: Moment, until: Moment, median: Moment | None) -> Moment:
    """Return the time a survey is sorted by: its window, else its rows, else the year in its name."""
    if not pd.isna(since):
        return since
    if not pd.isna(until):
        return until
    if median is not None and not pd.isna(median):
        return median
    return label_day(name)
