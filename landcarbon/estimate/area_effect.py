"""What a change of area alone contributes to the difference of two stocks.

Land bought, sold or handed from one unit to another adds to the stock of a unit or takes from it. That is no growth and
no loss, so it is not in the change, which is stated on the common area; it stands on a line of its own.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from landcarbon.estimate.common_area import (
    ROUNDING,
    CommonArea,
    equal_areas,
)

__all__ = ["AREA_EFFECT_COLUMNS", "area_effect"]

AREA_EFFECT_COLUMNS = [
    "by",
    "unit",
    "since",
    "until",
    "pool",
    "area_since_ha",
    "area_until_ha",
    "area_common_ha",
    "stock_since_t_c",
    "stock_until_t_c",
    "change_common_t_c",
    "area_effect_t_c",
    "method",
]


def area_effect(stocks: pd.DataFrame, change: pd.DataFrame, common: CommonArea) -> pd.DataFrame:
    """State what the change of area alone contributes to the difference of two stocks.

    Parameters
    ----------
    stocks : DataFrame
        Stocks of both surveys, each on the area of its day (``common_area.tables_at``): by, unit, survey, pool,
        area_ha, stock_t_c.
    change : DataFrame
        Change on the common area: by, unit, since, until, pool, change_t_c, method.
    common : CommonArea
        The common area.

    Returns
    -------
    DataFrame
        Columns ``AREA_EFFECT_COLUMNS``; for every unit whose area changed, and for the inventory, one row per pool.
        Without rows if no area changed.

    Notes
    -----
    stock_since + change_common + area_effect = stock_until. As a difference of estimates the effect also holds what the
    plots on gained or lost land differ by chance from those on the rest. A unit that was not in the inventory at one
    survey has a stock of zero there.
    """
    changed = common.changed()
    kept = common.areas[changed | ((common.areas["by"] == "inventory").to_numpy() & changed.any())]
    pools = list(dict.fromkeys(stocks["pool"]))
    if kept.empty or not pools:
        return pd.DataFrame(columns=AREA_EFFECT_COLUMNS)
    rows = kept.merge(pd.DataFrame({"pool": pools}), how="cross")
    for name, survey in (("since", common.since), ("until", common.until)):
        here = stocks.loc[stocks["survey"] == survey, ["by", "unit", "pool", "area_ha", "stock_t_c"]]
        here = here.rename(columns={"area_ha": f"counted_{name}", "stock_t_c": f"stock_{name}_t_c"})
        rows = rows.merge(here, on=["by", "unit", "pool"], how="left")
        absent = rows[f"area_{name}_ha"] == 0
        rows[f"stock_{name}_t_c"] = rows[f"stock_{name}_t_c"].where(~absent, 0.0)
    pair = (change["since"] == common.since) & (change["until"] == common.until)
    here = change.loc[pair, ["by", "unit", "pool", "change_t_c", "method"]]
    rows = rows.merge(here, on=["by", "unit", "pool"], how="left")
    rows["change_common_t_c"] = rows["change_t_c"].where(rows["area_common_ha"] != 0, 0.0)
    rows["area_effect_t_c"] = rows["stock_until_t_c"] - rows["stock_since_t_c"] - rows["change_common_t_c"]
    rows["since"], rows["until"] = common.since, common.until
    rows["method"] = _effect_methods(rows, common)
    text = {name: "str" for name in ("by", "unit", "since", "until", "pool", "method")}
    return rows[AREA_EFFECT_COLUMNS].astype(text)


def _effect_methods(rows: pd.DataFrame, common: CommonArea) -> np.ndarray:
    """Say how each area effect came about, or why there is none."""
    since, until = common.since, common.until
    told = rows["method"].fillna("no estimate").astype("object")
    method = f"stock {until} less stock {since} less change on the common area (" + told + ")"
    unmoved = equal_areas(rows["area_since_ha"].to_numpy(), rows["area_until_ha"].to_numpy())
    unmoved &= equal_areas(rows["area_since_ha"].to_numpy(), rows["area_common_ha"].to_numpy())
    method = method.mask(unmoved, method + "; its area did not change: a difference of the estimates alone")
    apart = (rows["area_common_ha"] == 0).to_numpy()
    method = method.mask(apart, f"stock {until} less stock {since}; no land in common")
    method = method.mask((rows["area_since_ha"] == 0).to_numpy(), f"stock {until}; not there at {since}")
    method = method.mask((rows["area_until_ha"] == 0).to_numpy(), f"less stock {since}; not there at {until}")
    for name, survey in (("since", since), ("until", until)):
        short = rows[f"area_{name}_ha"] - rows[f"counted_{name}"] > ROUNDING * rows[f"area_{name}_ha"]
        hectares = rows[f"counted_{name}"].map("{:.2f}".format)
        method = method.mask(short.to_numpy(), method + f"; stock {survey} speaks for " + hectares + " ha")
    lacking = [
        (f"stock {since}", rows["stock_since_t_c"]),
        (f"stock {until}", rows["stock_until_t_c"]),
        ("change on the common area", rows["change_common_t_c"]),
    ]
    none = rows["area_effect_t_c"].isna().to_numpy()
    for what, values in reversed(lacking):
        method = method.mask(none & values.isna().to_numpy(), f"not estimable: no figure for {what}")
    return method.to_numpy()
