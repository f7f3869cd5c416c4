"""Boundaries that change: which outline of a parcel is in force on which day, and at which survey.

A parcel may stand several times in the parcels file with different outlines, strata or land uses, each in force from
``valid_from`` to ``valid_to``. Both days count in; a day on which another row of the file begins belongs to that one,
so that it does not matter whether a boundary ends on the day the next begins or on the day before.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from landcarbon.errors import InputFileError
from landcarbon.read.notes import note
from landcarbon.read.surveys import Moment, label_day

__all__ = ["at_date", "by_survey", "check_periods", "gaps_in_time", "has_periods", "survey_days"]

_FOREVER = np.iinfo(np.int64).max
_SINCE_EVER = np.iinfo(np.int64).min
_LISTED = 5


def has_periods(parcels: pd.DataFrame) -> bool:
    """Tell whether any row says from when or until when it is in force."""
    return bool(parcels["valid_from"].notna().any() or parcels["valid_to"].notna().any())


def at_date(parcels: pd.DataFrame, day: pd.Timestamp) -> np.ndarray:
    """Return the rows in force on a day.

    Parameters
    ----------
    parcels : DataFrame
        valid_from, valid_to (NaT: open) of every row of the parcels file.
    day : Timestamp
        The day.

    Returns
    -------
    ndarray of int
        Positions of the rows, in their order.
    """
    start, end = _periods(parcels)
    wanted = np.datetime64(day, "D").astype(np.int64)
    return np.flatnonzero((start <= wanted) & (wanted <= end))


def by_survey(parcels: pd.DataFrame, surveys: pd.DataFrame) -> pd.DataFrame:
    """Find the outline of each parcel that is in force at each survey.

    Parameters
    ----------
    parcels : DataFrame
        parcel, valid_from, valid_to of every row of the parcels file.
    surveys : DataFrame
        survey, date; from :func:`survey_days`.

    Returns
    -------
    DataFrame
        survey, parcel, row (position in ``parcels``); surveys in their order, rows in theirs.

    Raises
    ------
    InputFileError
        If a survey has no date, or no row is in force at it.
    """
    file = str(parcels["file"].iloc[0]) if "file" in parcels and len(parcels) else "parcels"
    parts = []
    for name, day in zip(surveys["survey"], surveys["date"], strict=True):
        if pd.isna(day):
            raise InputFileError(
                f"boundaries change, but survey {name} has no date that would tell which of them hold",
                where=file,
                remedy="Map a date column, or give since and until of the survey.",
            )
        rows = at_date(parcels, day)
        if not len(rows):
            raise InputFileError(
                f"no parcel is in force at survey {name} ({day:%Y-%m-%d})",
                where=file,
                remedy="Leave valid_from blank for parcels that were there before, and valid_to for those still there.",
            )
        parts.append(pd.DataFrame({"survey": str(name), "parcel": parcels["parcel"].to_numpy()[rows], "row": rows}))
    found = pd.concat(parts, ignore_index=True)
    return found.astype({"survey": "str", "parcel": "str", "row": "int64"})


def survey_days(surveys: pd.DataFrame, visits: pd.DataFrame) -> pd.DataFrame:
    """Return one day per survey: the median of its visits, else the middle of its window, else that of its year.

    Parameters
    ----------
    surveys : DataFrame
        survey, since, until.
    visits : DataFrame
        survey, date, visited.

    Returns
    -------
    DataFrame
        survey, date; NaT where nothing tells.
    """
    dated = visits[visits["visited"].to_numpy(dtype=bool) & visits["date"].notna().to_numpy()]
    median = dated["date"].groupby(dated["survey"].astype("str")).median()
    days = [
        _first_known(median.get(name), since + (until - since) / 2, since, until, label_day(name))
        for name, since, until in zip(surveys["survey"], surveys["since"], surveys["until"], strict=True)
    ]
    column = pd.Series(days, index=surveys.index, dtype="datetime64[s]").dt.floor("D")
    return pd.DataFrame({"survey": surveys["survey"].astype("str"), "date": column})


def _first_known(*moments: Moment | None) -> pd.Timestamp | None:
    return next((moment for moment in moments if isinstance(moment, pd.Timestamp)), None)


def check_periods(parcels: pd.DataFrame) -> None:
    """Refuse periods that run backwards, or overlap for the same parcel.

    Parameters
    ----------
    parcels : DataFrame
        parcel, valid_from, valid_to, file, row of every row of the parcels file.

    Raises
    ------
    InputFileError
        Naming the rows.
    """
    file = str(parcels["file"].iloc[0])
    backward = parcels[parcels["valid_to"] < parcels["valid_from"]]
    if len(backward):
        raise InputFileError(
            f"valid_to lies before valid_from: {_listed(backward)}", where=file, remedy="Correct the dates."
        )
    start, end = _periods(parcels)
    code = pd.factorize(parcels["parcel"])[0]
    order = np.lexsort((start, code))
    first, second = order[:-1], order[1:]
    # Among periods in the order of their starts, some overlap if and only if one overlaps the next.
    clash = (code[first] == code[second]) & (start[second] <= end[first])
    if clash.any():
        pairs = [
            f"{parcels['parcel'].iloc[one]!r} (rows {parcels['row'].iloc[one]} and {parcels['row'].iloc[two]})"
            for one, two in zip(first[clash][:_LISTED], second[clash][:_LISTED], strict=True)
        ]
        more = " ..." if clash.sum() > _LISTED else ""
        raise InputFileError(
            f"two rows of the same parcel are in force at the same time: {', '.join(pairs)}{more}",
            where=file,
            remedy="Let valid_to of the earlier row end before valid_from of the later one.",
        )


def gaps_in_time(parcels: pd.DataFrame, surveys: pd.DataFrame, in_force: pd.DataFrame) -> list[pd.DataFrame]:
    """Tell times between two rows of a parcel in which neither holds, and rows that hold at no survey.

    Parameters
    ----------
    parcels : DataFrame
        parcel, valid_from, valid_to, file, row.
    surveys : DataFrame
        survey, date.
    in_force : DataFrame
        From :func:`by_survey`.

    Returns
    -------
    list of DataFrame
        Findings.
    """
    start, end = _periods(parcels)
    code = pd.factorize(parcels["parcel"])[0]
    order = np.lexsort((start, code))
    first, second = order[:-1], order[1:]
    apart = (code[first] == code[second]) & (start[second] - 1 > end[first])
    since, until = _day(end[first[apart]] + 1), _day(start[second[apart]] - 1)
    days = surveys["date"].to_numpy(dtype="datetime64[D]")
    names = surveys["survey"].to_numpy(dtype=object)
    told = [
        "; it counts as not in the inventory at survey " + ", ".join(map(str, names[hit])) if hit.any() else ""
        for hit in ((days >= one) & (days <= two) for one, two in zip(since, until, strict=True))
    ]
    rows = parcels.iloc[second[apart]]
    words = pd.DataFrame({"since": since.astype(str), "until": until.astype(str), "told": told})
    idle = parcels.drop(index=parcels.index[in_force["row"].unique()])
    at = ", ".join(str(day) for day in days)
    value = idle["parcel"].to_numpy(dtype=object)
    return [
        note("gap in time", rows, value=rows["parcel"].to_numpy(dtype=object), fill=words),
        note("in force at no survey", idle, value=value, fill={"days": at}),
    ]


def _periods(parcels: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """First and last day of each row as whole numbers."""
    since = parcels["valid_from"].to_numpy(dtype="datetime64[D]")
    until = parcels["valid_to"].to_numpy(dtype="datetime64[D]")
    start = np.where(np.isnat(since), _SINCE_EVER, since.astype(np.int64))
    end = np.where(np.isnat(until), _FOREVER, until.astype(np.int64))
    handed_on = np.isin(end, start) & (end > start)
    return start, np.where(handed_on, end - 1, end)


def _day(number: np.ndarray) -> np.ndarray:
    return number.astype("datetime64[D]")


def _listed(rows: pd.DataFrame) -> str:
    shown = [f"{name!r} (row {row})" for name, row in zip(rows["parcel"], rows["row"], strict=True)]
    return ", ".join(shown[:_LISTED]) + (" ..." if len(shown) > _LISTED else "")
