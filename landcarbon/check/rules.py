"""The rules of the checks: severity, limits with their source, and the words of each finding, read from ``rules.csv``.

A limit is a figure of the trade, so it is data: ``threshold`` holds it as ``name=value`` pairs, ``source``, ``where``
and ``known`` say where it comes from (``none`` where the rule needs no figure, ``no source`` for common practice).
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from importlib.resources import files
from importlib.resources.abc import Traversable
from types import MappingProxyType

import numpy as np
import pandas as pd

from landcarbon.findings import empty_findings, join_findings, make_findings

__all__ = ["Outcome", "Rule", "joined", "load_rules", "no_findings", "rule", "rules_page"]

_NO_LIMITS: Mapping[str, float] = MappingProxyType({})


@cache
def no_findings() -> pd.DataFrame:
    """Return the findings table without rows; one frame for all, so not to be changed in place."""
    return empty_findings()


def joined(parts: Iterable[pd.DataFrame]) -> pd.DataFrame:
    """Put findings together in the order given, without work where there is nothing to put together."""
    kept = [part for part in parts if len(part)]
    if len(kept) > 1:
        return join_findings(kept)
    return kept[0] if kept else no_findings()


@dataclass(frozen=True)
class Rule:
    """One rule of the checks.

    Attributes
    ----------
    name : str
        Short fixed name, as in the findings.
    severity : str
        error, warning or note.
    table, column : str
        Canonical table and column the rule looks at.
    used : bool
        False if the rule sets the row aside.
    limits : mapping of str to float
        Limits by name, in ``unit``.
    unit, source, where, known : str
        Unit of the limits and where they come from.
    message, remedy : str
        What it means for the result, and what to do; limits and further words in braces.
    """

    name: str
    severity: str
    table: str
    column: str
    used: bool
    limits: Mapping[str, float]
    unit: str
    source: str
    where: str
    known: str
    message: str
    remedy: str

    def found(
        self, rows: pd.DataFrame | None = None, *, fill: Mapping[str, object] | None = None, **fields: object
    ) -> pd.DataFrame:
        """Make findings of this rule, one per row of ``rows`` (a single one without).

        Parameters
        ----------
        rows : DataFrame, optional
            Offending rows.
        fill : mapping, optional
            Words for the braces of message and remedy, besides the limits.
        **fields
            Values of other finding columns.

        Returns
        -------
        DataFrame
            Findings.
        """
        if rows is not None and len(rows) == 0:
            return no_findings()
        if rows is not None and self.column in rows and pd.api.types.is_float_dtype(rows[self.column]):
            fields.setdefault("value", _figures(rows[self.column]))
        words = {**self.limits, **(fill or {})}
        return make_findings(
            self.name,
            rows,
            severity=self.severity,
            table=self.table,
            column=self.column,
            used=self.used,
            message=self.message.format(**words),
            remedy=self.remedy.format(**words),
            **fields,
        )

    def found_each(self, rows: pd.DataFrame, words: Sequence[Mapping[str, object]], **fields: object) -> pd.DataFrame:
        """Make findings of this rule whose message differs from row to row.

        Parameters
        ----------
        rows : DataFrame
            Offending rows, or a table made for the purpose (columns survey, plot, ... as far as they apply).
        words : sequence of mapping
            Words for the braces of message and remedy, one mapping per row.
        **fields
            Values of other finding columns.

        Returns
        -------
        DataFrame
            Findings.
        """
        if len(rows) == 0:
            return no_findings()
        filled = [{**self.limits, **line} for line in words]
        found = make_findings(
            self.name,
            rows,
            severity=self.severity,
            table=self.table,
            column=self.column,
            used=self.used,
            message="",
            remedy="",
            **fields,
        )
        return found.assign(
            message=pd.Series([self.message.format(**line) for line in filled], dtype="str"),
            remedy=pd.Series([self.remedy.format(**line) for line in filled], dtype="str"),
        )


@dataclass(frozen=True)
class Outcome:
    """What one check found.

    Attributes
    ----------
    findings : DataFrame
        Its findings.
    aside : ndarray of bool, optional
        Tree rows to set aside, in the order of the tree table.
    height_ignored : ndarray of bool, optional
        Tree rows whose height is not to be used.
    visit_unusable : ndarray of bool, optional
        Visits that cannot be used, in the order of the visits table.
    plot_dropped : ndarray of bool, optional
        Plot rows to leave out, in the order of the plots table.
    """

    findings: pd.DataFrame = field(default_factory=no_findings)
    aside: np.ndarray | None = None
    height_ignored: np.ndarray | None = None
    visit_unusable: np.ndarray | None = None
    plot_dropped: np.ndarray | None = None


@cache
def load_rules() -> Mapping[str, Rule]:
    """Read the rules of the checks by name, in the order of the file."""
    with (files("landcarbon") / "check" / "rules.csv").open(encoding="utf-8") as stream:
        table = pd.read_csv(stream, dtype=str, keep_default_na=False)
    rows = [{str(name): str(value) for name, value in row.items()} for row in table.to_dict("records")]
    return MappingProxyType({row["rule"]: _rule(row) for row in rows})


def rule(name: str) -> Rule:
    """Return one rule by its name."""
    return load_rules()[name]


def rules_page() -> str:
    """Write the page of all rules as Markdown, for ``docs/findings.md``."""
    lines = [
        "# Findings of the checks",
        "",
        "Generated from `landcarbon/check/rules.csv`; do not edit by hand. Reading the files has findings of its own",
        "(cells that are no numbers, unknown codes, broken polygons); those below come from the checks afterwards.",
        "",
        "*error*: a row is not used, or a result is wrong until it is mended. *warning*: look at it. *note*: good to",
        "know. *used* says whether the row still counts. A limit is given with its source: *read* (the publication was",
        "seen), *secondary* (quoted elsewhere), *memory*, *no source* (common practice). Limits serve to draw the eye;",
        "nothing is ever corrected silently.",
        "",
        "| rule | severity | table, column | used | limit | source | what it means | what to do |",
        "| --- | --- | --- | --- | --- | --- | --- | --- |",
    ]
    for item in load_rules().values():
        limit = "; ".join(f"{name.replace('_', ' ')} {value:g}" for name, value in item.limits.items())
        source = ", ".join(part for part in (item.source, item.where) if part)
        source = f"{source} ({item.known})" if item.known != "none" else source
        message, remedy = (_plain(text, item.limits) for text in (item.message, item.remedy))
        lines.append(
            f"| {item.name} | {item.severity} | {item.table}, {item.column} | {'yes' if item.used else 'no'} "
            f"| {limit} | {source} | {message} | {remedy} |"
        )
    factors = files("landcarbon.factors")
    lines += ["", "## Findings of dead wood", "", *_table_of(factors.joinpath("dead_wood_findings.csv"), "rule")]
    lines += ["", "## Findings of soil", "", *_table_of(factors.joinpath("soil_limits.csv"), "name")]
    rasters = files("landcarbon.read").joinpath("raster_rules.csv")
    lines += ["", "## Findings of rasters", "", *_table_of(rasters, "rule")]
    lines += [
        "",
        "## Findings of the estimates",
        "",
        "What could not be estimated, what rests on another figure, and what looks too good: strata and parcels with",
        "too few plots or none, pools left out of a sum, equal values on all plots, parcels that do not differ or have",
        "too few plots for a model, rasters that do not serve, plots visited in another season or that changed their",
        "stratum, lines that are not straight, units without land at both surveys. The texts stand beside the",
        "estimators; each names the units, what it does to the figure and what to do.",
    ]
    lines += [
        "",
        "Frames (litter, ground vegetation) and saplings are checked for masses, areas, shares and counts that cannot",
        "be (negative, missing, dry above fresh, a share above one): such a row is set aside, its finding says why.",
    ]
    return "\n".join(lines) + "\n"


def _table_of(table: Traversable, key: str) -> list[str]:
    """Rows of a data file that are findings, as Markdown."""
    with table.open(encoding="utf-8") as handle:
        rows = [row for row in csv.DictReader(handle) if row["severity"]]
    head = ["| rule | severity | column | what it means | what to do |", "| --- | --- | --- | --- | --- |"]
    return head + [
        f"| {row[key]} | {row['severity']} | {row['column']} | {_blanked(row['message'])} | {_blanked(row['remedy'])} |"
        for row in rows
    ]


def _blanked(text: str) -> str:
    return re.sub(r"\{[^}]*\}", "…", text).replace("|", "\\|")


def _figures(values: pd.Series) -> np.ndarray:
    """Write figures without the noise of unit conversion (17.58, not 17.580000000000002)."""
    return np.array(["" if np.isnan(value) else f"{value:.10g}" for value in values.to_numpy()], dtype=object)


class _Names(dict[str, object]):
    """Words for a text; a name without a word becomes an ellipsis in the page of rules."""

    def __missing__(self, key: str) -> object:
        return _Ellipsis()


class _Ellipsis:
    def __format__(self, spec: str) -> str:
        return "…"


def _plain(text: str, limits: Mapping[str, float]) -> str:
    return text.format_map(_Names(limits)).replace("|", "\\|")


def _rule(row: Mapping[str, str]) -> Rule:
    limits = {}
    for part in filter(None, (piece.strip() for piece in row["threshold"].split(";"))):
        name, _, value = part.partition("=")
        limits[name.strip()] = float(value)
    return Rule(
        name=row["rule"],
        severity=row["severity"],
        table=row["table"],
        column=row["column"],
        used=row["used"] == "yes",
        limits=MappingProxyType(limits) if limits else _NO_LIMITS,
        unit=row["unit"],
        source=row["source"],
        where=row["where"],
        known=row["known"],
        message=row["message"],
        remedy=row["remedy"],
    )
