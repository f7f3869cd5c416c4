"""From checked table rows to frozen equations."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, fields
from math import exp, inf, isnan, nan

from allometry._tables import COEFFICIENTS, Faults, RawRow, cyclic
from allometry.forms import FORMS

__all__ = ["Equation", "build_equations"]

TO_KG = {"kg": 1.0, "g": 1e-3, "t": 1e3}
"""Kilograms per printed mass unit (decimal prefixes of the SI; tonne = 1000 kg)."""
KNOWN_ORDER = ("read", "secondary", "memory")
"""From best to weakest knowledge of the printed coefficients."""


@dataclass(frozen=True)
class Equation:
    """One row of the catalogue.

    The attributes carry the names of the columns of :attr:`Catalogue.table`. Missing numbers are NaN, missing text is
    empty. ``printed`` holds all coefficients digit for digit as published.
    """

    equation_id: str
    source_key: str
    where: str
    taxon: str
    taxon_printed: str
    rank: str
    genus: str
    family: str
    region: str
    country: str
    component: str
    form: str
    formula: str
    b0: float
    b1: float
    b2: float
    b3: float
    b4: float
    printed: str
    parts: str
    inputs: str
    diameter: str
    output_unit: str
    dbh_min_cm: float
    dbh_max_cm: float
    h_min_m: float
    h_max_m: float
    residual_sd: float
    residual_scale: str
    bias_correction: str
    cf: float
    correction: str
    r2: float
    n_trees: float
    known: str
    usable: bool
    usable_reason: str
    screened: bool
    screen_ratio: float
    se_b1: float
    se_b2: float
    se_b3: float
    variance_exponent: float
    sigma_ii: float
    sigma2_sur: float
    note: str

    @property
    def is_mass(self) -> bool:
        """Whether the value is a dry mass."""
        return self.output_unit in TO_KG

    @property
    def input_names(self) -> tuple[str, ...]:
        """Measured variables the equation needs."""
        return tuple(self.inputs.split(";")) if self.inputs else ()

    @property
    def part_ids(self) -> tuple[str, ...]:
        """Ids of the rows a composed row is made of."""
        return tuple(self.parts.split("+")) if self.parts else ()

    @property
    def coefficients(self) -> dict[str, float]:
        """Coefficients of the form, as numbers."""
        pairs = (item.split(" = ") for item in self.printed.split("; ")) if self.printed else ()
        return {name: float(text) for name, text in pairs}

    @property
    def correction_factor(self) -> float:
        """Factor applied on top of the printed equation, where the publication says that one must be (1 otherwise)."""
        return exp(self.residual_sd**2 / 2.0) if self.correction else 1.0


def number(text: str) -> float:
    """Return the number in a cell, NaN if the cell is empty or (already reported) no number."""
    try:
        return float(text)
    except ValueError:
        return nan


DIAMETERS = {"dbh_cm": "dbh_cm", "dbh_mm": "dbh_cm", "girth_cm": "dbh_cm"}
"""Diameter column to the measured variable it comes from; the others are measured variables themselves."""


def inputs_of(values: dict[str, str]) -> str:
    """Return the names of the measured variables of a simple row."""
    form = FORMS[values["form"]]
    diameter = values["diameter"]
    return ";".join(DIAMETERS.get(diameter, diameter) if name == "D" else name for name in form.inputs)


def equation(row: RawRow, screened: dict[str, dict[str, str]]) -> Equation:
    """Build one equation from a checked row."""
    v = row.values
    flag = screened.get(v["equation_id"])
    special = {
        "source_key": row.source_key,
        "formula": FORMS[v["form"]].formula,
        "printed": "; ".join(f"{name} = {v[name]}" for name in COEFFICIENTS if v[name]),
        "inputs": "" if v["parts"] else inputs_of(v),
        "usable": v["usable"] == "true",
        "screened": flag is not None,
        "screen_ratio": number(flag["worst_ratio"]) if flag else nan,
    }
    filled: dict[str, object] = {}
    for item in fields(Equation):
        if item.name in special:
            filled[item.name] = special[item.name]
        else:
            filled[item.name] = number(v[item.name]) if item.type == "float" else v[item.name]
    return Equation(**filled)  # type: ignore[arg-type]


def build_equations(
    rows: list[RawRow], sets: list[RawRow], screened: dict[str, dict[str, str]], small_cm: float, faults: Faults
) -> tuple[Equation, ...]:
    """Turn rows and complete component sets into equations.

    Parameters
    ----------
    rows
        Checked rows of the publications.
    sets
        Component sets; only complete ones become equations of form ``sum``.
    screened
        Screening results by equation id.
    small_cm
        A sum that ends below this diameter [cm] is for small trees only.
    faults
        Collects what is wrong.

    Returns
    -------
    tuple of Equation
        In the order of the sources, sums of component sets last.
    """
    usable = [row for row in rows if row.values["form"] in FORMS]
    by_id = {row.values["equation_id"]: row for row in usable}
    composed = usable + [
        row for raw in sets if raw.values["complete"] == "true" for row in composed_row(raw, by_id, small_cm, faults)
    ]
    parts = {
        row.values["equation_id"]: tuple(row.values["parts"].split("+")) for row in composed if row.values["parts"]
    }
    for row in composed:
        for part in parts.get(row.values["equation_id"], ()):
            if part not in by_id:
                faults.add(row.place, f"part {part!r} is not an equation")
    for name in cyclic(parts):
        faults.add(name, "the parts lead back to the row itself")
    faults.raise_if_any()
    equations = [equation(row, screened) for row in composed]
    return tuple(with_inputs(equations))


def with_inputs(equations: list[Equation]) -> Iterable[Equation]:
    """Give composed rows the inputs of their parts."""
    by_id = {e.equation_id: e for e in equations}
    for e in equations:
        if not e.parts:
            yield e
            continue
        names: dict[str, None] = {}
        for part in flat_parts(e, by_id):
            names.update(dict.fromkeys(part.input_names))
        values = {f.name: getattr(e, f.name) for f in fields(Equation)}
        yield Equation(**{**values, "inputs": ";".join(names)})


def flat_parts(e: Equation, by_id: dict[str, Equation]) -> list[Equation]:
    """Return the simple rows a composed row comes down to."""
    if not e.parts:
        return [e]
    return [leaf for part in e.part_ids for leaf in flat_parts(by_id[part], by_id)]


def composed_row(raw: RawRow, by_id: dict[str, RawRow], small_cm: float, faults: Faults) -> list[RawRow]:
    """Build the sum of a complete component set; range and knowledge are those of its weakest part."""
    v = raw.values
    found = [by_id.get(name) for name in v["parts"].split("+")]
    parts = [row for row in found if row is not None]
    if len(parts) < len(found):
        faults.add(raw.place, f"parts of {v['equation_id']} are missing from the tables")
        return []
    if len({(p.source_key, p.values["taxon"]) for p in parts}) > 1:
        faults.add(raw.place, f"{v['equation_id']} mixes publications or taxa")
        return []
    first = parts[0].values
    low = max((number(p.values["dbh_min_cm"]) for p in parts if p.values["dbh_min_cm"]), default=-inf)
    high = min((number(p.values["dbh_max_cm"]) for p in parts if p.values["dbh_max_cm"]), default=inf)
    trees = [number(p.values["n_trees"]) for p in parts if p.values["n_trees"]]
    bias = {p.values["bias_correction"] for p in parts}
    small = f"small trees only: largest diameter {high:g} cm" if high < small_cm else ""
    values = {
        **first,
        **dict.fromkeys(COEFFICIENTS, ""),
        **dict.fromkeys(("r2", "residual_sd", "residual_scale", "correction", "cf", "se_b1", "se_b2", "se_b3"), ""),
        "equation_id": v["equation_id"],
        "component": v["component"],
        "where": f"sum of component rows of {first['where']}",
        "form": "sum",
        "diameter": "",
        "parts": v["parts"],
        "output_unit": "kg",
        "dbh_min_cm": "" if low == -inf else f"{low:g}",
        "dbh_max_cm": "" if high == inf else f"{high:g}",
        "n_trees": f"{min(trees):g}" if trees and not isnan(min(trees)) else "",
        "known": max((p.values["known"] for p in parts), key=KNOWN_ORDER.index),
        "bias_correction": bias.pop() if len(bias) == 1 else "not stated",
        "usable": "false" if small else "true",
        "usable_reason": small,
        "note": f"Complete component set. {v['note']} The error of the sum is not printed.",
    }
    return [RawRow(parts[0].source_key, raw.place, values)]
