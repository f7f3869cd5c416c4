"""Sentences that stand on every output."""

from __future__ import annotations

__all__ = ["CAUTIONS", "FURTHER_WORDS", "NOT_ESTIMABLE", "POOL_NAMES", "SIGN_RULE", "raster_words"]

SIGN_RULE = (
    "Positive change = carbon gained by the land. In t CO2 a removal from the air is negative and an emission positive."
)

CAUTIONS = (
    "These are sample estimates for planning and reporting, not a certificate: any claim needs verification by those "
    "licensed for it, local codes and licensed practice come first, and field work near dead trees or on steep ground "
    "follows the local safety rules."
)

NOT_ESTIMABLE = "not estimable"

POOL_NAMES = {
    "all": "all counted pools",
    "above_ground": "above-ground biomass",
    "below_ground": "below-ground biomass",
    "dead_wood": "dead wood",
    "litter": "litter",
    "soil": "soil organic carbon",
    "harvested_wood": "harvested wood",
}

#: What the further tables hold, by their names.
FURTHER_WORDS = {
    "trend": "straight line through three or more surveys, with its error",
    "area_effect": "what a change of area alone brings, beside the change on the common area",
    "parcel_detail": "how the figure of each parcel is composed: own plots, model, adjustment",
    "parcel_models": "models behind the figures of the parcels",
    "raster_worth": "what the rasters were worth, and whether they were used",
    "raster_lines": "the lines fitted to the rasters",
}


def raster_words(file: str) -> str:
    """Say what a raster of the results holds."""
    if file.startswith("density"):
        return "carbon of all counted pools in t C per hectare; its cells sum to the parcels"
    return "change of carbon in t C per hectare between two surveys; its cells sum to the parcels"
