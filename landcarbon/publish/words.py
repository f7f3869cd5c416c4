"""Sentences that stand on every output."""

from __future__ import annotations

__all__ = ["CAUTIONS", "NOT_ESTIMABLE", "POOL_NAMES", "SIGN_RULE"]

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
