"""Reference cases of the estimates: reading them, answering them with the program, holding answer against expectation.

Cases in ``data/statistics_*.json`` belong to the project. Those of ``data/statistics_outside.json`` rest on data under
licences of their own or on copies of copies; only their names stand here, the numbers are read from the reference
folder.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

DATA = Path(__file__).parent / "data"
FILES = ("published_cases.json", "published_cases_more.json", "computed_cases.json")
DEFAULT = "default"
RELATIVE = 1e-6  # what a computed case must agree to
BESIDE = 1e-9  # entries of a list smaller than this share of its largest are held to that share


@dataclass(frozen=True)
class Case:
    """One reference case.

    ``expected`` holds the leaves of the case by dotted path; of a published case a leaf is a mapping with value,
    decimals and perhaps slack.
    """

    id: str
    title: str
    source: str
    known: str
    inputs: dict[str, Any]
    expected: dict[str, Any]
    published: bool
    outside: bool


@dataclass
class Answer:
    """What the program has to say to a case, by path of the expected leaf."""

    ours: dict[str, Any] = field(default_factory=dict)
    form: dict[str, str] = field(default_factory=dict)
    differs: dict[str, Any] = field(default_factory=dict)
    left_out: dict[str, str] = field(default_factory=dict)

    def give(self, values: Mapping[str, Any], form: str = DEFAULT, prefix: str = "") -> Answer:
        """Add values; ``form`` says which of several estimators or variances they are."""
        for name, value in values.items():
            self.ours[prefix + name] = value
            self.form[prefix + name] = form
        return self

    def differ(self, values: Mapping[str, Any]) -> Answer:
        """Add mistakes: path of the wrong value, and the right value of ours that must not equal it."""
        self.differs.update(values)
        return self

    def leave_out(self, reasons: Mapping[str, str]) -> Answer:
        """Add leaves that the program has no answer to, with the reason."""
        self.left_out.update(reasons)
        return self


Adapter = Callable[[Case], Answer]
ADAPTERS: dict[str, Adapter] = {}
UNCOVERED: dict[str, str] = {}  # case: reason why no part of the program answers it


def adapter(*names: str) -> Callable[[Adapter], Adapter]:
    """Register a function as the answer to cases."""

    def register(function: Adapter) -> Adapter:
        ADAPTERS.update(dict.fromkeys(names, function))
        return function

    return register


def flatten(value: Any, path: str = "") -> Iterator[tuple[str, Any]]:
    """Leaves by dotted path; a list of mappings is keyed by their option, method or position."""
    if isinstance(value, Mapping) and "decimals" not in value:
        for name, part in value.items():
            yield from flatten(part, f"{path}.{name}" if path else str(name))
    elif isinstance(value, list) and value and isinstance(value[0], Mapping):
        for number, part in enumerate(value):
            name = part.get("option") or part.get("method") or str(number)
            yield from flatten(part, f"{path}.{name}" if path else str(name))
    else:
        yield path, value


def is_text(leaf: Any) -> bool:
    """A label or a sentence rather than a result."""
    if isinstance(leaf, str):
        return True
    return isinstance(leaf, list) and (not leaf or all(isinstance(item, str) for item in leaf))


def printed(leaf: Any) -> bool:
    return isinstance(leaf, Mapping)


def value_of(leaf: Any) -> np.ndarray:
    """Numbers of a leaf; null reads as NaN."""
    return np.asarray(leaf["value"] if printed(leaf) else leaf, dtype=float)


def results(case: Case) -> dict[str, Any]:
    """Leaves that are results; labels and remarks are not."""
    return {path: leaf for path, leaf in case.expected.items() if not is_text(leaf)}


def difference(leaf: Any, ours: Any) -> float:
    """Largest difference: in half units of the last printed digit, else relative; 0 where both are missing."""
    expected, value = value_of(leaf), np.asarray(ours, dtype=float)
    if expected.shape != value.shape:
        raise ValueError(f"shape {value.shape} where {expected.shape} is expected")
    both_missing = np.isnan(expected) & np.isnan(value)
    apart = np.where(both_missing, 0.0, np.abs(value - expected))
    if printed(leaf):
        scale = 0.5 * 10.0 ** -leaf["decimals"] + leaf.get("slack", 0.0)
        worst = apart / scale
    else:
        size = np.abs(expected)
        scale = np.where(both_missing | (size == 0), 1.0, size)
        worst = apart / np.maximum(scale, BESIDE * np.max(np.nan_to_num(size), initial=0.0))
    return float(np.max(np.where(np.isnan(worst), np.inf, worst), initial=0.0))


def agrees(leaf: Any, ours: Any) -> bool:
    return difference(leaf, ours) <= (1.0 + 1e-9 if printed(leaf) else RELATIVE)


def agreement(leaf: Any, ours: Any) -> str:
    """How well the two agree, in words that do not depend on the machine."""
    if not agrees(leaf, ours):
        return "NO"
    return "printed digits" if printed(leaf) else "1e-6"


def _read(path: Path) -> dict[str, Any]:
    with path.open(encoding="utf-8") as handle:
        return json.load(handle)


def inside() -> dict[str, Case]:
    """Cases that belong to the project."""
    found = {}
    for kind, key in (("published", "printed"), ("computed", "expected")):
        data = _read(DATA / f"statistics_{kind}.json")
        survey = data.get("datasets", {}).get("survey_A", {})
        for case in data["cases"]:
            found[case["id"]] = Case(
                id=case["id"],
                title=case["title"],
                source=f"{case['source']}, {case['where']}" if kind == "published" else case["computed_with"],
                known=f"inputs {_short(case['inputs_known'])}, results {_short(case['printed_known'])}"
                if kind == "published"
                else "computed",
                inputs=case["inputs"] | {"survey_A": survey},
                expected=dict(flatten(case[key])),
                published=kind == "published",
                outside=False,
            )
    return found


def _short(known: str) -> str:
    """First word of how a number is known."""
    return known.replace(";", " ").split()[0]


def outside_names() -> dict[str, dict[str, str]]:
    """Names, sources and reasons of the cases that stay outside the project."""
    return {case["id"]: case for case in _read(DATA / "statistics_outside.json")["cases"]}


def reference_ids(reference: Path) -> list[str]:
    """Ids of every case in the reference folder."""
    folder = reference / "facts" / "statistics"
    return [case["id"] for file in FILES for case in _read(folder / file)["cases"]]


def outside(reference: Path) -> dict[str, Case]:
    """Cases that stay outside, with their numbers from the reference folder."""
    folder, found = reference / "facts" / "statistics", {}
    data = {case["id"]: case for file in FILES for case in _read(folder / file)["cases"]}
    for name, entry in outside_names().items():
        case = data[name]
        found[name] = Case(
            id=name,
            title=entry["title"],
            source=entry["source"],
            known=entry["known"],
            inputs=case["inputs"],
            expected=dict(flatten(case["printed"] if "printed" in case else case["expected"])),
            published="printed" in case,
            outside=True,
        )
    return found
