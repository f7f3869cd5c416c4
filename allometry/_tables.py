"""Reading and validating the equation tables; everything found wrong is reported at once."""

from __future__ import annotations

import csv
import tomllib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from importlib.resources import files
from importlib.resources.abc import Traversable
from typing import Any

from allometry.errors import CatalogueError
from allometry.forms import FORMS

__all__ = [
    "COEFFICIENTS",
    "Faults",
    "RawRow",
    "cyclic",
    "folder",
    "read_component_sets",
    "read_components",
    "read_equations",
    "read_rules",
    "read_screened",
    "read_sources",
]

COEFFICIENTS = ("b0", "b1", "b2", "b3", "b4", "c0", "c1", "c2", "c3")
TEXT = (
    "equation_id",
    "where",
    "taxon",
    "taxon_printed",
    "rank",
    "genus",
    "family",
    "region",
    "country",
    "component",
    "form",
    "diameter",
    "output_unit",
    "residual_scale",
    "bias_correction",
    "known",
    "note",
)
OPTIONAL_TEXT = ("parts", "correction", "usable_reason")
NUMBERS = ("dbh_min_cm", "dbh_max_cm", "residual_sd", "r2", "n_trees")
OPTIONAL_NUMBERS = (
    "h_min_m",
    "h_max_m",
    "cf",
    "se_b1",
    "se_b2",
    "se_b3",
    "variance_exponent",
    "sigma_ii",
    "sigma2_sur",
)
ALLOWED: dict[str, frozenset[str]] = {
    "rank": frozenset({"species", "genus", "family", "group", "generic"}),
    "region": frozenset({"north_america", "europe", "tropics", "mangrove", "australia", "any"}),
    "diameter": frozenset({"", "dbh_cm", "dbh_mm", "girth_cm", "drc_cm", "d10_cm", "crown_base_cm"}),
    "output_unit": frozenset({"kg", "g", "t", "m", "cm", "ratio", "1"}),
    "residual_scale": frozenset({"", "ln", "kg", "m"}),
    "bias_correction": frozenset({"inside", "none", "not stated"}),
    "correction": frozenset({"", "exp(s^2/2)"}),
    "known": frozenset({"read", "secondary", "memory"}),
    "usable": frozenset({"true", "false"}),
}
RANGES = (("dbh_min_cm", "dbh_max_cm"), ("h_min_m", "h_max_m"))


@dataclass
class Faults:
    """Faults found while reading; raised together."""

    found: list[str] = field(default_factory=list)

    def add(self, place: str, text: str) -> None:
        """Record one fault with its file and line."""
        self.found.append(f"{place}: {text}")

    def raise_if_any(self) -> None:
        """Raise one error that lists the faults.

        Raises
        ------
        CatalogueError
            If any fault was recorded.
        """
        if self.found:
            shown = "\n  ".join(self.found[:20])
            more = f"\n  and {len(self.found) - 20} more" if len(self.found) > 20 else ""
            raise CatalogueError(f"the equation tables hold {len(self.found)} fault(s):\n  {shown}{more}")


@dataclass(frozen=True)
class RawRow:
    """One line of a table: values as text, and where it stands."""

    source_key: str
    place: str
    values: dict[str, str]


def folder() -> Traversable:
    """Return the folder of the tables."""
    return files("allometry") / "equations"


def read_csv(path: Traversable) -> Iterator[tuple[int, dict[str, str]]]:
    """Yield line number and row of a CSV file."""
    with path.open(encoding="utf-8") as handle:
        reader = csv.DictReader(handle)
        for row in reader:
            yield reader.line_num, row


def read_sources(root: Traversable, faults: Faults) -> dict[str, dict[str, Any]]:
    """Read the bibliography.

    Parameters
    ----------
    root
        Folder of the tables.
    faults
        Collects what is wrong.

    Returns
    -------
    dict
        Source key to its entry, in the order of the file.
    """
    sources: dict[str, dict[str, Any]] = tomllib.loads((root / "sources.toml").read_text(encoding="utf-8"))
    for key, entry in sources.items():
        for name in ("reference", "domain", "mass", "notes"):
            if not isinstance(entry.get(name), str):
                faults.add(f"sources.toml [{key}]", f"'{name}' is missing")
    tables = {p.name.removesuffix(".csv") for p in root.iterdir() if p.name.endswith(".csv")} - OTHER_TABLES
    for key in sorted(tables - {k for k, e in sources.items() if not e.get("supporting")}):
        faults.add(f"{key}.csv", "source key is not in sources.toml")
    for key in sorted({k for k, e in sources.items() if not e.get("supporting")} - tables):
        faults.add(f"sources.toml [{key}]", f"no table {key}.csv; mark it 'supporting = true' if it has none")
    return sources


OTHER_TABLES = frozenset({"components", "component_sets", "screened"})


def read_rules(root: Traversable) -> dict[str, Any]:
    """Read the rules of the project about its own catalogue."""
    return tomllib.loads((root / "rules.toml").read_text(encoding="utf-8"))


def read_components(root: Traversable) -> dict[str, dict[str, str]]:
    """Read the vocabulary of components: component to kind and definition."""
    return {row["component"]: row for _, row in read_csv(root / "components.csv")}


def read_screened(root: Traversable) -> dict[str, dict[str, str]]:
    """Read the equations flagged by the screening, by equation id."""
    return {row["equation_id"]: row for _, row in read_csv(root / "screened.csv")}


def read_component_sets(root: Traversable) -> list[RawRow]:
    """Read the sets of components of one publication that do or do not make up a whole tree."""
    return [RawRow("", f"component_sets.csv line {line}", row) for line, row in read_csv(root / "component_sets.csv")]


def read_equations(root: Traversable, keys: Iterable[str], faults: Faults) -> list[RawRow]:
    """Read all publication tables and check every cell.

    Parameters
    ----------
    root
        Folder of the tables.
    keys
        Source keys, one table each.
    faults
        Collects what is wrong.

    Returns
    -------
    list of RawRow
        Rows in the order of the printed tables; ids are unique.
    """
    components = read_components(root)
    rows: list[RawRow] = []
    seen: dict[str, str] = {}
    for key in keys:
        path = root / f"{key}.csv"
        if not path.is_file():
            continue
        for line, values in read_csv(path):
            row = RawRow(key, f"{key}.csv line {line}", complete(values))
            check_row(row, values, components, faults)
            first = seen.setdefault(row.values["equation_id"], row.place)
            if first != row.place:
                faults.add(row.place, f"equation id {row.values['equation_id']!r} stands already at {first}")
            rows.append(row)
    return rows


def complete(values: dict[str, str]) -> dict[str, str]:
    """Fill absent optional columns with the empty text."""
    optional = (*COEFFICIENTS, *OPTIONAL_TEXT, *OPTIONAL_NUMBERS)
    return {**dict.fromkeys(optional, ""), **{k: v or "" for k, v in values.items() if k is not None}}


def check_row(row: RawRow, given: dict[str, str], components: dict[str, Any], faults: Faults) -> None:
    """Check the cells of one row against the schema."""
    known = {*TEXT, *NUMBERS, *OPTIONAL_TEXT, *OPTIONAL_NUMBERS, *COEFFICIENTS, "usable"}
    for name in sorted(set(given) - known, key=str):
        faults.add(row.place, f"unknown column {name!r}")
    for name in sorted({*TEXT, *NUMBERS, "usable"} - set(given)):
        faults.add(row.place, f"column {name!r} is missing")
        row.values[name] = ""
    for name, allowed in ALLOWED.items():
        if row.values[name] not in allowed:
            faults.add(row.place, f"{name} is {row.values[name]!r}; allowed: {', '.join(sorted(allowed))}")
    if row.values["component"] not in components:
        faults.add(row.place, f"component {row.values['component']!r} is not in components.csv")
    check_numbers(row, faults)
    check_form(row, faults)
    check_reasons(row, faults)


def check_numbers(row: RawRow, faults: Faults) -> None:
    """Check that number cells hold numbers and that ranges run upwards."""
    numbers: dict[str, float] = {}
    for name in (*NUMBERS, *OPTIONAL_NUMBERS, *COEFFICIENTS):
        if row.values[name]:
            try:
                numbers[name] = float(row.values[name])
            except ValueError:
                faults.add(row.place, f"{name} is {row.values[name]!r}, which is not a number")
    for low, high in RANGES:
        if low in numbers and high in numbers and numbers[low] > numbers[high]:
            faults.add(row.place, f"{low} {numbers[low]:g} is above {high} {numbers[high]:g}")
    if bool(row.values["residual_sd"]) != bool(row.values["residual_scale"]):
        faults.add(row.place, "residual_sd and residual_scale go together")


def check_form(row: RawRow, faults: Faults) -> None:
    """Check that the form exists and has exactly its coefficients."""
    form = FORMS.get(row.values["form"])
    if form is None:
        faults.add(row.place, f"form {row.values['form']!r} is not one of {', '.join(sorted(FORMS))}")
        return
    filled = {name for name in COEFFICIENTS if row.values[name]}
    for name in sorted(set(form.coefficients) - filled):
        faults.add(row.place, f"coefficient {name} of form {form.name} is missing")
    for name in sorted(filled - set(form.coefficients)):
        faults.add(row.place, f"form {form.name} has no coefficient {name}")
    if ("D" in form.inputs) != bool(row.values["diameter"]):
        faults.add(row.place, f"diameter is {row.values['diameter']!r}, which does not fit form {form.name}")
    if form.composed != bool(row.values["parts"]):
        faults.add(row.place, f"parts is {row.values['parts']!r}, which does not fit form {form.name}")


def check_reasons(row: RawRow, faults: Faults) -> None:
    """Check that a row set aside says why, and a correction has its residual error."""
    if (row.values["usable"] == "false") != bool(row.values["usable_reason"]):
        faults.add(row.place, "a row has a usable_reason if, and only if, usable is false")
    if row.values["correction"] and row.values["residual_scale"] != "ln":
        faults.add(row.place, "a correction exp(s^2/2) needs the residual error in ln units")
    if not row.values["equation_id"] or not row.values["where"]:
        faults.add(row.place, "equation_id and where must not be empty")


def cyclic(parts: dict[str, tuple[str, ...]]) -> list[str]:
    """Return the ids whose parts lead back to themselves."""
    bad = []
    for start in parts:
        stack, seen = [start], set()
        while stack:
            for part in parts.get(stack.pop(), ()):
                if part == start:
                    bad.append(start)
                elif part not in seen:
                    seen.add(part)
                    stack.append(part)
    return sorted(set(bad))
