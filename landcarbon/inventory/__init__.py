"""The project file ``inventory.toml``: its keys, their checks, and what is said about a faulty one."""

from __future__ import annotations

from landcarbon.inventory.load import load_settings, parse_settings
from landcarbon.inventory.models import Settings
from landcarbon.inventory.reference import KeyInfo, settings_reference
from landcarbon.inventory.template import template_text

__all__ = [
    "KeyInfo",
    "Settings",
    "load_settings",
    "parse_settings",
    "settings_reference",
    "template_text",
]
