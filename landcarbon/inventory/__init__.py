"""The project file ``inventory.toml``: its keys, their checks, and what is said about a faulty one."""

from __future__ import annotations

from landcarbon.inventory.load import load_settings, parse_settings
from landcarbon.inventory.models import Settings
from landcarbon.inventory.page import inventory_page, template_text
from landcarbon.inventory.reference import KeyInfo, settings_reference

__all__ = [
    "KeyInfo",
    "Settings",
    "inventory_page",
    "load_settings",
    "parse_settings",
    "settings_reference",
    "template_text",
]
