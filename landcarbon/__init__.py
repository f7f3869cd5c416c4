"""Carbon stocks and stock changes of land parcels, from plot sheets to a map.

Examples
--------
>>> import landcarbon
>>> inv = landcarbon.open_inventory("inventory.toml")  # doctest: +SKIP
>>> inv.change(2014, 2024, by="parcel")  # doctest: +SKIP
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from landcarbon.api import Inventory, open_inventory
    from landcarbon.errors import LandcarbonError, UserError

__all__ = ["Inventory", "LandcarbonError", "UserError", "__version__", "open_inventory"]

__version__ = "0.1.0"

_HOMES = {
    "Inventory": "landcarbon.api",
    "open_inventory": "landcarbon.api",
    "LandcarbonError": "landcarbon.errors",
    "UserError": "landcarbon.errors",
}


def __getattr__(name: str) -> Any:
    # Loaded at first use, so that importing the package stays quick and pulls in no map or geodata library.
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    from importlib import import_module

    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
