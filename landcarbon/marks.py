"""Sentences that stand on every output: what the figures rest on."""

from __future__ import annotations

import pandas as pd

__all__ = ["output_marks"]


def output_marks(plot_pools: pd.DataFrame, pools: dict[str, str], notes: list[str]) -> list[str]:
    """Sentences every output has to carry.

    Parameters
    ----------
    plot_pools : DataFrame
        With survey, size, inside, biomass_t_ha, beyond_range_t_ha and memory_t_ha.
    pools : dict
        Pool -> how it was obtained, or the reason it is not counted.
    notes : list of str
        Further sentences, e.g. on areas.

    Returns
    -------
    list of str
    """
    used = plot_pools[plot_pools["inside"]]
    marks = []
    for survey, part in used.groupby("survey", sort=False):
        weights = part["size"].to_numpy()
        total = float((part["biomass_t_ha"] * weights).sum())
        if total <= 0:
            continue
        beyond = float((part["beyond_range_t_ha"] * weights).sum()) / total
        memory = float((part["memory_t_ha"] * weights).sum()) / total
        if beyond > 0:
            marks.append(
                f"Survey {survey}: {beyond:.1%} of the above-ground biomass stands in trees beyond the diameter range "
                "of their equation."
            )
        if memory > 0:
            marks.append(
                f"Survey {survey}: {memory:.1%} of the above-ground biomass rests on equations known only from memory; "
                "check them against print before any claim."
            )
    missing = [f"{pool} ({how})" for pool, how in pools.items() if how.startswith("not counted")]
    if missing:
        marks.append("Pools not counted: " + "; ".join(missing) + ".")
    return marks + notes
