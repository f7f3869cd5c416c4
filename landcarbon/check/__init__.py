"""Checks of the canonical tables: what is wrong, in which row, what it does to the result, what to do about it."""

from __future__ import annotations

from landcarbon.check.equations import memory_findings, range_findings, species_findings
from landcarbon.check.run import reconcile, run_checks

__all__ = ["memory_findings", "range_findings", "reconcile", "run_checks", "species_findings"]
