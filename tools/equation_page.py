"""Text of the equations page, made from the catalogue and the printed cases."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np
import pandas as pd
from published import DIAMETERS, allowed, computed, cross_table, read_cases

from allometry._tables import folder, read_rules
from allometry.catalogue import Catalogue
from allometry.forms import FORMS

LIMIT = 1.96
"""Two-sided 95 % point of the normal distribution."""
ENFOR_START, ENFOR_END = "<!-- weighed trees: begin -->", "<!-- weighed trees: end -->"

TEXT = Path(__file__).with_suffix(".md")


def section(name: str, **values: float) -> str:
    """Return a named section of the prose, with numbers filled in."""
    parts = re.split(r"<!-- section: (.*?) -->\n", TEXT.read_text(encoding="utf-8"))
    found = dict(zip(parts[1::2], parts[2::2], strict=True))[name]
    return found.format(**values) if values else found


def table(header: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """Return a table in Markdown."""
    lines = ["| " + " | ".join(header) + " |", "| " + " | ".join("---" for _ in header) + " |"]
    lines += ["| " + " | ".join(str(cell).replace("|", "\\|") for cell in row) + " |" for row in rows]
    return "\n".join(lines) + "\n"


def number(value: float, digits: int = 4) -> str:
    """Return a number with significant digits, empty for NaN."""
    return "" if np.isnan(value) else f"{value:.{digits}g}"


def sources_part(catalogue: Catalogue) -> str:
    """Return the table of publications and the notes on each."""
    counts: dict[str, Counter[str]] = {}
    for e in catalogue.equations:
        count = counts.setdefault(e.source_key, Counter())
        count.update([e.known, "usable" if e.usable else "set aside", "rows"])
    names = ("rows", "read", "secondary", "memory", "usable", "set aside")
    rows: list[Sequence[object]] = [(key, *(c[n] for n in names)) for key, c in counts.items()]
    total = [sum(c[n] for c in counts.values()) for n in names]
    text = "## Publications\n\n" + table(("key", *names), [*rows, ("**all**", *total)])
    for key, entry in catalogue.sources.items():
        doi = f" doi:{entry['doi']}" if "doi" in entry else ""
        recalled = " (DOI from memory)" if entry.get("doi_known") == "memory" else ""
        title = " Wording of the title from memory." if entry["reference_known"] == "memory" else ""
        quoted = f" Seen as quoted in {', '.join(entry['quoted_in'])}." if "quoted_in" in entry else ""
        notes = " ".join(str(entry["notes"]).split())
        text += (
            f"\n### {key}\n\n{entry['reference']}{doi}{recalled}{title}{quoted}\n\n"
            f"Domain: {entry['domain']} Mass: {entry['mass']} {notes}\n"
        )
    return text


def forms_part(catalogue: Catalogue) -> str:
    """Return the table of forms and of components."""
    used = Counter(e.form for e in catalogue.equations)
    rows = [(f"`{f.name}`", f"`{f.formula}`", used[f.name]) for f in FORMS.values()]
    text = section("forms") + "\n" + table(("form", "formula", "rows"), rows)
    parts = Counter(e.component for e in catalogue.equations)
    components = [(f"`{k}`", v["definition"], parts[k]) for k, v in catalogue.components.items()]
    return text + "\n## Components\n\n" + table(("component", "meaning", "rows"), components)


def sets_part(catalogue: Catalogue) -> str:
    """Return the component sets, complete and not."""
    complete = [s for s in catalogue.sets if s["complete"] == "true"]
    other = [s for s in catalogue.sets if s["complete"] != "true"]
    text = "## Component sets\n\nSummed, because complete:\n\n"
    rows = [(f"`{s['equation_id']}`", s["component"], len(s["parts"].split("+")), s["note"]) for s in complete]
    text += table(("sum", "component", "parts", "what is in it"), rows)
    text += "\nNot summed, because incomplete:\n\n"
    return text + table(("set", "why"), [(f"`{s['equation_id']}`", s["note"]) for s in other])


def screened_part(catalogue: Catalogue) -> str:
    """Return the list of screened equations."""
    rules = read_rules(folder())["screening"]
    text = section("screened", factor=rules["factor"]) + "\n"
    found = pd.read_csv(str(folder() / "screened.csv"))
    rows = [(f"`{r.equation_id}`", r.worst_ratio, r.at_dbh_cm, r.n_others) for r in found.itertuples()]
    return text + table(("equation", "value / median of others", "at dbh cm", "others"), rows)


def aside_part(catalogue: Catalogue) -> str:
    """Return the equations that are never picked, by reason."""
    reasons: dict[str, list[str]] = {}
    for e in catalogue.equations:
        if not e.usable:
            reasons.setdefault(e.usable_reason.split(": largest")[0], []).append(f"`{e.equation_id}`")
    rows = [(reason, len(ids), ", ".join(ids)) for reason, ids in reasons.items()]
    return "## Never picked, and why\n\n" + table(("reason", "rows", "equations"), rows)


def printed_part(catalogue: Catalogue) -> str:
    """Return printed against computed values."""
    rows = []
    for _, case in read_cases().iterrows():
        value = computed(catalogue, case)
        size = case["dbh_cm"] if pd.notna(case["dbh_cm"]) else case["drc_cm"]
        names = str(case["equation_ids"]).replace("+", " + ")
        gap = value - case["expected"]
        figures = (f"{size:g}", case["expected"], number(value), number(gap, 2), f"{allowed(case):.3g}")
        rows.append((case["source_key"], case["where"], names, *figures, case["note"]))
    header = ("source", "place", "equation", "cm", "printed", "computed", "difference", "allowed", "note")
    return "## Printed and computed\n\n" + table(header, rows)


def cross_part(catalogue: Catalogue) -> str:
    """Return the comparison of national equations across publications."""
    found = cross_table(catalogue)
    rows = []
    for taxon, part in found.groupby("taxon"):
        ratios = [np.exp(part.loc[part["dbh_cm"] == d, "ln_species"]) for d in DIAMETERS]
        updated = [np.exp(part.loc[part["dbh_cm"] == d, "ln_chojnacky2014"]) for d in DIAMETERS]
        cells = [f"{r.iloc[0]:.2f} / {u.iloc[0]:.2f}" if len(r) else "" for r, u in zip(ratios, updated, strict=True)]
        rows.append((f"*{taxon}*", *cells, f"{np.exp(LIMIT * part['rmse_ln'].iloc[0]):.2f}"))
    z = found["ln_species"].abs() / found["rmse_ln"]
    zu = found["ln_chojnacky2014"].abs() / found["rmse_ln"]
    text = section(
        "cross",
        n=len(found),
        within=100 * (z <= LIMIT).mean(),
        within_updated=100 * (zu <= LIMIT).mean(),
        p90=np.exp(found["ln_species"].abs().quantile(0.9)),
        p90_updated=np.exp(found["ln_chojnacky2014"].abs().quantile(0.9)),
        most=np.exp(found["ln_species"].abs().max()),
        most_updated=np.exp(found["ln_chojnacky2014"].abs().max()),
    )
    header = ("species", *(f"{d:g} cm" for d in DIAMETERS), "1.96 RMSE")
    return text + "\n" + table(header, rows)


def weighed_part(found: pd.DataFrame | None) -> str:
    """Return the comparison with felled and weighed trees (empty between the marks without the open file)."""
    if found is None:
        return f"{ENFOR_START}\n{ENFOR_END}\n"
    rows = [
        (
            f"*{r.taxon}*",
            f"`{r.equation_id}`",
            r.n,
            f"{r.mean_kg:.1f}",
            f"{r.bias_percent:+.1f}",
            f"{r.rmse_kg:.1f}",
            f"{r.rmse_percent:.0f}",
            number(r.printed_rmse_kg),
        )
        for r in found.itertuples()
    ]
    text = section("weighed")
    header = ("species", "equation", "n", "mean kg", "bias %", "RMSE kg", "RMSE %", "printed RMSE kg")
    return f"{ENFOR_START}\n\n{text}\n{table(header, rows)}\n{ENFOR_END}\n"


def page(catalogue: Catalogue, weighed: pd.DataFrame | None) -> str:
    """Return the whole page.

    Parameters
    ----------
    catalogue
        The catalogue.
    weighed
        Comparison with weighed trees, or None where the open file is not at hand.

    Returns
    -------
    str
        Markdown.
    """
    parts = [
        section("introduction"),
        sources_part(catalogue),
        forms_part(catalogue),
        sets_part(catalogue),
        screened_part(catalogue),
        aside_part(catalogue),
        section("left out"),
        printed_part(catalogue),
        cross_part(catalogue),
        weighed_part(weighed),
    ]
    return "\n".join(parts)
