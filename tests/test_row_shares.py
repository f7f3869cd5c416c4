"""What each row of samples brings in sums to the figure of its plot: identity, on the demo (invented data)."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from landcarbon.assemble import assemble, run_stage
from landcarbon.inventory import load_settings

DEMO = Path(__file__).resolve().parent.parent / "demo_parcels"
FEEDS = {
    "pieces": ["down_coarse", "down_fine"],
    "stumps": ["stumps"],
    "litter": ["litter", "duff"],
    "ground_vegetation": ["ground_vegetation"],
    "saplings": ["saplings"],
    "soil": ["soil"],
}


@pytest.fixture(scope="module")
def demo():
    settings = load_settings(DEMO / "inventory.toml")
    stage = run_stage(settings)
    return stage, assemble(stage, settings)


@pytest.mark.parametrize("table", FEEDS)
def test_shares_of_rows_sum_to_the_plot(demo, table):
    stage, results = demo
    rows = results.samples[table]
    counted = rows[rows["used"] & rows["density_t_c_ha"].notna()]
    assert len(counted) > 20
    keys = [counted["survey"].astype("str"), counted["plot"].astype("str")]
    summed = counted.groupby(keys)["density_t_c_ha"].sum()
    parts = stage.sample_parts[stage.sample_parts["part"].isin(FEEDS[table])]
    figures = parts.groupby(["survey", "plot"])["density_t_c_ha"].sum()
    both = pd.concat([summed.rename("rows"), figures.rename("plot")], axis=1).fillna({"rows": 0.0})
    assert np.allclose(both["rows"], both["plot"], rtol=1e-12, atol=1e-14)


def test_a_row_set_aside_brings_in_nothing(demo):
    _, results = demo
    for rows in results.samples.values():
        assert rows.loc[~rows["used"], "density_t_c_ha"].fillna(0.0).eq(0.0).all()
