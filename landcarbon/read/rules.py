"""The rules behind the findings of reading: severity and words, from ``rules.csv``."""

from __future__ import annotations

import csv
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from types import MappingProxyType

__all__ = ["ReadRule", "read_rules"]


@dataclass(frozen=True)
class ReadRule:
    """One rule of reading; words in braces are filled in for each finding."""

    rule: str
    table: str
    column: str
    severity: str
    used: bool
    message: str
    remedy: str


@cache
def read_rules() -> Mapping[str, ReadRule]:
    """Return the rules by name, in the order of the data file."""
    text = files("landcarbon.read").joinpath("rules.csv").read_text(encoding="utf-8")
    rules = {}
    for line in csv.DictReader(text.splitlines()):
        used = line.pop("used") == "yes"
        rules[line["rule"]] = ReadRule(used=used, **line)
    return MappingProxyType(rules)
