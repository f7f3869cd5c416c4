"""Which plot was visited when at which survey."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from landcarbon.errors import InputFileError
from landcarbon.inventory.measured import surveys_with_trees
from landcarbon.inventory.models import Settings
from landcarbon.inventory.nearest import suggestion
from landcarbon.read.mapping import Mapped, left_blank, not_readable, read_mapped
from landcarbon.read.notes import note
from landcarbon.read.source import FileLog, find_source
from landcarbon.read.surveys import files_of, label_day, survey_by_date, survey_by_label

__all__ = ["VisitRows", "field_rows", "make_visits", "read_visits"]

_LEVEL = 0.0
_WHOLE = 1.0


@dataclass
class VisitRows:
    """Rows of the visits files.

    Attributes
    ----------
    frame : DataFrame
        survey, plot, date, visited (NaN if not said), doubt, share_inside, slope_deg, n_subplots, file, row.
    surveys : list of str
        Surveys that have a visits file.
    findings : list of DataFrame
        What was noted.
    """

    frame: pd.DataFrame
    surveys: list[str]
    findings: list[pd.DataFrame]


def read_visits(settings: Settings, log: FileLog) -> VisitRows:
    """Read the visits files named in the settings.

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
    parts, findings, surveys = [], [], []
    for file, served in files_of(settings, "visits").items():
        source = find_source(
            file, settings.folder, f"visits {', '.join(served)}", allow_outside=settings.inventory.allow_outside
        )
        mapped = read_mapped(source, "visits", settings, log)
        frame, more = _with_survey(mapped, settings, served, source.name)
        parts.append(frame)
        told = ("date",) if _by_date(mapped, served) else ()
        findings += [*mapped.findings, *left_blank(mapped, "visits", told), *more]
        findings.append(note("ragged row of visits", mapped.frame[mapped.ragged]))
        surveys += served
    columns = ["survey", "plot", "date", "visited", "doubt", "share_inside", "slope_deg", "n_subplots", "file", "row"]
    frame = pd.concat(parts, ignore_index=True)[columns] if parts else pd.DataFrame(columns=columns)
    return VisitRows(frame, surveys, findings)


def _with_survey(
    mapped: Mapped, settings: Settings, served: list[str], file: str
) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    frame = mapped.frame.copy()
    frame["file"] = frame["file"].astype("str")
    # A list of all plots, printed beforehand, has blanks where the crew did not get to: no date and no word of a visit.
    frame["doubt"] = ("visited" in mapped.given) & frame["visited"].isna() & frame["date"].isna()
    frame.loc[mapped.bad.get("visited", pd.Series(dtype="str")).index, "doubt"] = True
    if "survey" in mapped.given and (len(served) > 1 or _labels_fit(frame["survey"], settings)):
        match = survey_by_label(frame["survey"].unique(), served)
        names = frame["survey"].map(match).astype("str")
        rule = "unknown survey of visit"
    elif len(served) == 1:
        names = pd.Series([served[0]] * len(frame), dtype="str")
        rule = "unknown survey of visit"
    elif _by_date(mapped, served):
        places = survey_by_date(frame["date"], settings, served, file)
        names = pd.Series(np.append(np.array(served, dtype=object), "")[places], dtype="str")
        rule = "date of visit outside surveys"
    else:
        raise InputFileError(
            f"the file serves the surveys {', '.join(served)}, but has neither a survey nor a date column",
            where=file,
            remedy="Map one of them under [columns.visits].",
        )
    lost = names == ""
    findings = []
    told = lost.copy()
    if _by_date(mapped, served) and "date" in mapped.bad:
        findings.append(not_readable("not readable", mapped, "visits", "date"))
        told[mapped.bad["date"].index] = False
    value = (frame["date"].dt.strftime("%Y-%m-%d").fillna("") if "date" in rule else frame["survey"])[told]
    rows = frame[told].drop(columns="survey")
    findings.append(note(rule, rows, value=value.to_numpy(dtype=object), fill={"surveys": ", ".join(served)}))
    frame["survey"] = names
    return frame[~lost], findings


def _by_date(mapped: Mapped, served: list[str]) -> bool:
    """Tell files whose rows belong to a survey by their date alone."""
    return len(served) > 1 and "survey" not in mapped.given and "date" in mapped.given


def _labels_fit(labels: pd.Series, settings: Settings) -> bool:
    return any(survey_by_label(labels.unique(), list(settings.surveys)).values())


def field_rows(settings: Settings, trees: pd.DataFrame, samples: Mapping[str, pd.DataFrame]) -> pd.DataFrame:
    """Return the rows that show that a crew was on a plot: trees, or samples at surveys without a tree table.

    Parameters
    ----------
    settings : Settings
        The project file.
    trees : DataFrame
        ``Inputs.trees``.
    samples : mapping of DataFrame
        ``Inputs.samples``.

    Returns
    -------
    DataFrame
        survey, plot, subplot (blank for samples: theirs are no parts of the tree plot), date, sample.
    """
    tallied = surveys_with_trees(settings)
    parts = [trees[["survey", "plot", "subplot", "date"]].assign(sample=False)]
    for table in samples.values():
        alone = table.loc[~table["survey"].isin(list(tallied)), ["survey", "plot", "date"]]
        if len(alone):
            parts.append(alone.assign(subplot="", sample=True))
    if len(parts) == 1:
        return parts[0]
    rows = pd.concat([part.astype({name: "str" for name in ("survey", "plot", "subplot")}) for part in parts])
    return rows[rows["survey"] != ""].reset_index(drop=True)


def make_visits(
    settings: Settings,
    surveys: pd.DataFrame,
    plots: pd.DataFrame,
    extra: pd.DataFrame,
    trees: pd.DataFrame,
    rows: VisitRows,
) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Settle for every survey and plot whether, when and how it was visited.

    Parameters
    ----------
    settings : Settings
        The project file.
    surveys : DataFrame
        Surveys in the order of time.
    plots : DataFrame
        ``Inputs.plots``.
    extra : DataFrame
        Slope, share and area from the plots file.
    trees : DataFrame
        From :func:`field_rows`.
    rows : VisitRows
        Rows of the visits files.

    Returns
    -------
    DataFrame, list of DataFrame
        ``Inputs.visits`` and findings.
    """
    findings = [*rows.findings]
    frame = pd.MultiIndex.from_product([surveys["survey"], plots["plot"]], names=["survey", "plot"]).to_frame(
        index=False
    )
    frame = frame.astype({"survey": "str", "plot": "str"})
    stated, more = _stated(rows.frame, list(plots["plot"]))
    findings += more
    frame = frame.merge(stated, how="left", on=["survey", "plot"], validate="one_to_one")
    frame = frame.merge(_seen(trees), how="left", on=["survey", "plot"], validate="one_to_one")
    frame = frame.merge(extra.drop(columns=["file", "row"]), how="left", on="plot", suffixes=("", "_of_plot"))
    findings += _visited(frame, settings, set(rows.surveys))
    findings += _dates(frame, surveys)
    findings += _shape(frame, settings)
    columns = [
        "survey",
        "plot",
        "date",
        "visited",
        "share_inside",
        "slope_deg",
        "n_subplots",
        "plot_area_ha",
        "date_source",
    ]
    return frame[columns], findings


def _stated(rows: pd.DataFrame, plots: list[str]) -> tuple[pd.DataFrame, list[pd.DataFrame]]:
    """Keep one row per survey and plot that is in the plots table."""
    unknown = ~rows["plot"].isin(plots)
    strange = rows[unknown]
    rows = rows[~unknown]
    twice = rows.duplicated(["survey", "plot"])
    hints = pd.Series([" " + suggestion(name, plots) for name in strange["plot"]], dtype="str").str.rstrip()
    findings = [
        note("unknown plot of visit", strange, fill=pd.DataFrame({"hint": hints})),
        note("visit repeated", rows[twice]),
    ]
    kept = rows[~twice].rename(columns={"visited": "said"})
    return kept.astype({"survey": "str", "plot": "str"}), findings


def _seen(trees: pd.DataFrame) -> pd.DataFrame:
    """Return for every survey and plot with rows of trees, or samples alone, their number, median date, subplots."""
    rows = trees[trees["survey"].notna()]
    grouped = rows.groupby(["survey", "plot"], observed=True, sort=True)
    seen = pd.DataFrame(
        {
            "tree_rows": grouped.size(),
            "tree_date": grouped["date"].median(),
            "tree_subplots": grouped["subplot"].nunique(),
            "of_samples": grouped["sample"].any(),
        }
    ).reset_index()
    return seen.astype({"survey": "str", "plot": "str"})


def _visited(frame: pd.DataFrame, settings: Settings, with_file: set[str]) -> list[pd.DataFrame]:
    """Settle which visits took place: the visits file decides; without a row there, tree rows are the evidence."""
    has_rows = frame["tree_rows"].notna()
    listed = frame["row"].notna()
    tallied = surveys_with_trees(settings)
    zero = {name for name, survey in settings.surveys.items() if survey.plots_without_rows == "zero"}
    doubtful = listed & (frame["doubt"] == True) & ~has_rows  # noqa: E712  (blank where there is no row)
    frame["visited"] = (listed & (frame["said"] != 0)) | (~listed & (has_rows | frame["survey"].isin(list(zero))))
    frame["visited"] &= ~doubtful
    unlisted = frame[has_rows & ~listed & frame["survey"].isin(list(with_file))]
    findings = [
        note("visit not listed", unlisted.drop(columns=["file", "row"])),
        note("visit in doubt", frame[doubtful]),
    ]
    for survey, group in frame[~has_rows & ~listed].groupby("survey", sort=False):
        meaning = "visited and empty, so they count as zero" if survey in zero else "missing there"
        kind = "a tree row" if survey in tallied else "a row of samples"
        words = {"count": len(group), "survey": survey, "meaning": meaning, "row": kind}
        findings.append(note("plots without rows", survey=str(survey), value=str(len(group)), fill=words))
    return findings


def _dates(frame: pd.DataFrame, surveys: pd.DataFrame) -> list[pd.DataFrame]:
    """Fill in dates: the visit's own, the median of its trees, the middle of the window, the year of the label."""
    windows = surveys.set_index("survey")
    middle = windows["since"] + (windows["until"] - windows["since"]) / 2
    labels = {name: label_day(name) for name in surveys["survey"]}
    frame["date"] = pd.to_datetime(frame["date"]).astype("datetime64[s]")
    frame["date_source"] = np.where(frame["date"].notna(), "visit", "")
    for source, values in (
        ("trees", frame["tree_date"].mask(frame["of_samples"] == True)),  # noqa: E712  (blank where there is no row)
        ("samples", frame["tree_date"]),
        ("window", frame["survey"].map(middle)),
        ("label", frame["survey"].map(labels)),
    ):
        values = pd.to_datetime(values).dt.floor("D").astype("datetime64[s]")
        filled = frame["visited"] & frame["date"].isna() & values.notna()
        frame.loc[filled, "date"] = values[filled]
        frame.loc[filled, "date_source"] = source
    frame["date_source"] = frame["date_source"].astype("str")
    findings = []
    for name, group in frame[frame["date_source"] == "label"].groupby("survey", sort=False):
        words = {"survey": name, "count": len(group), "day": "1 July"}
        findings.append(note("dates from labels", survey=str(name), value=str(len(group)), fill=words))
    return findings


def _shape(frame: pd.DataFrame, settings: Settings) -> list[pd.DataFrame]:
    """Settle share, slope, area and number of subplots. Whether a figure can be is for the checks to judge."""
    for name, usual in (("share_inside", _WHOLE), ("slope_deg", _LEVEL)):
        frame[name] = frame[name].astype("float64").fillna(frame[f"{name}_of_plot"]).fillna(usual)
    complete = float(settings.plots.subplots)
    said = frame["n_subplots"].astype("float64")
    broken = said.notna() & (said != said.round())
    frame["n_subplots"] = said.where(~broken).fillna(complete).astype("int64")
    crowded = frame[frame["visited"] & (frame["tree_subplots"] > frame["n_subplots"])]
    design = settings.plots.design
    no_area = frame["plot_area_ha"].isna() & frame["visited"]
    no_area &= design.kind == "census" and design.area_ha is None
    frame.loc[no_area, "visited"] = False
    words = pd.DataFrame({"count": crowded["tree_subplots"].astype("int64"), "stated": crowded["n_subplots"]})
    value = said[broken].map("{:g}".format).to_numpy(dtype=object)
    return [
        note("number of subplots", frame[broken].drop(columns=["file", "row"]), value=value),
        note("more subplots than stated", crowded.drop(columns=["file", "row"]), fill=words),
        note("no plot area", frame[no_area].drop(columns=["file", "row"])),
    ]
