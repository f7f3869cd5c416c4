"""Soil of two open inventories, worked out a second time with pandas and compared.

Data: SCBI forest dynamics plot (Bourg et al. 2013, Ecology 94:2111; soil 2011) and mangroves of the Zambezi delta
(Trettin et al. 2017, doi 10.2737/RDS-2017-0053), both in the reference folder.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from landcarbon.pools.soil import SoilOptions, SoilWindow, profile_masses, soil

pytestmark = pytest.mark.real

FINE = "fine per whole volume"
# Frozen: what this program gave when pandas agreed with it [t C/ha]; stated in docs/soil.md.
MEAN_30, MEAN_100 = 67.19, 93.81
MANGROVE_100, MANGROVE_200 = 152.97, 302.00


@pytest.fixture(scope="module")
def scbi(reference):
    """Layers of the 24 hectare cells with the mass of fine earth per whole volume, stones included in the volume.

    0-10 cm: dry fine earth of the quantitative pit = (fresh mass - stones) x dry share - roots, over the pit's volume.
    Below: the density of the profile pits, as the keepers give it for each layer.
    """
    table = pd.read_csv(reference / "real" / "scbi" / "soil_layers.csv")
    dry_share = (table["dryness_dry_plus_pan_g"] - table["dryness_pan_g"]) / table["dryness_fresh_g"]
    roots = table["fine_root_mass_g"] + table["coarse_root_mass_g"]
    dug = ((table["total_fresh_mass_g"] - table["stone_mass_g"]) * dry_share - roots) / table["pit_volume_ml"]
    pits = table["bd_fine_earth_profile_pit_g_cm3_total_volume"]
    return pd.DataFrame(
        {
            "row_id": table.index, "file": "soil_layers.csv", "row": table.index + 2, "survey": "2011",
            "plot": table["hectare"].astype("str"), "subplot": "", "core": "",
            "top_cm": table["depth_top_cm"].astype(float), "bottom_cm": table["depth_bottom_cm"].astype(float),
            "bulk_density_g_cm3": dug.where(table["depth_top_cm"] == 0, pits),
            "organic_carbon_share": table["total_C_pct"] / 100, "cores": 1.0, "used": True,
        }
    )  # fmt: skip


def layer_stock(frame, depth):
    """Percent x g/cm3 x cm is t/ha; a layer counts by the share of it above the depth."""
    inside = (frame["bottom_cm"].clip(upper=depth) - frame["top_cm"]).clip(lower=0)
    return frame["organic_carbon_share"] * 100 * frame["bulk_density_g_cm3"] * inside


def by_plot(rows):
    return rows.set_index("plot")["density_t_c_ha"]


def test_cells_to_thirty_centimetres(scbi):
    """Independent: pandas. Cell 3 has no fresh mass, so its top layer has no density and the cell is not measured."""
    rows, findings = soil(scbi, SoilOptions(FINE, depth_cm=30))
    expected = scbi.assign(stock=layer_stock(scbi, 30)).groupby("plot")["stock"].sum().drop("3")
    pd.testing.assert_series_equal(by_plot(rows).sort_index(), expected.sort_index(), check_names=False, rtol=1e-12)
    assert len(rows) == 23
    assert set(findings.loc[~findings["used"], "plot"]) == {"3"}
    assert "bulk density missing" in findings["rule"].tolist()
    assert by_plot(rows).mean() == pytest.approx(MEAN_30, abs=0.05)


def test_cells_to_one_metre(scbi):
    """Independent: pandas. Ten cells end at 50 cm or above: set aside, or counted with the soil they have."""
    reach = scbi.groupby("plot")["bottom_cm"].max()
    expected = scbi.assign(stock=layer_stock(scbi, 100)).groupby("plot")["stock"].sum().drop("3")

    rows, findings = soil(scbi, SoilOptions(FINE, depth_cm=100))
    deep = reach.index[reach >= 100]
    assert sorted(rows["plot"]) == sorted(set(deep) - {"3"})
    pd.testing.assert_series_equal(
        by_plot(rows).sort_index(), expected[rows["plot"]].sort_index(), check_names=False, rtol=1e-12
    )
    short = findings.loc[findings["rule"] == "core stops short", "plot"]
    assert sorted(short) == sorted(set(reach.index[reach < 100]) - {"3"})

    shallow, told = soil(scbi, SoilOptions(FINE, depth_cm=100, incomplete="as measured"))
    pd.testing.assert_series_equal(by_plot(shallow).sort_index(), expected.sort_index(), check_names=False, rtol=1e-12)
    assert sorted(told.loc[told["rule"] == "core as measured", "plot"]) == sorted(short)
    assert by_plot(rows).mean() == pytest.approx(MEAN_100, abs=0.05)


def test_stones_counted_wrongly_would_show(scbi, reference):
    """The profile pits give whole-soil density beside fine earth per total volume; the first overstates by half."""
    pits = pd.read_csv(reference / "real" / "scbi" / "soil_profile_pits.csv")
    ratio = pits["bulk_density_whole_g_cm3"] / pits["bd_fine_earth_per_total_volume_g_cm3"]
    assert ratio.median() > 1.3


def test_cells_at_one_mass(scbi):
    """Independent: scipy, cell by cell; the reference is the smallest mass among the sound cells."""
    from scipy.interpolate import CubicSpline, PchipInterpolator

    masses = profile_masses(scbi, SoilOptions(FINE))
    reference = float(masses["mass_t_ha"].min())
    rows, findings = soil(scbi, SoilOptions(FINE, mass_t_ha=reference))
    assert len(rows) == 23
    assert "core too light" not in findings["rule"].tolist()
    found = rows.set_index("plot")
    for plot, layers in scbi[scbi["plot"] != "3"].groupby("plot"):
        x = np.concatenate(
            [[0], np.cumsum(100 * layers["bulk_density_g_cm3"] * (layers["bottom_cm"] - layers["top_cm"]))]
        )
        y = np.concatenate([[0], np.cumsum(layer_stock(layers, 1e9))])
        curve = CubicSpline(x, y, bc_type="natural")
        if "monotone" in found.loc[plot, "method"]:
            curve = PchipInterpolator(x, y)
        assert found.loc[plot, "density_t_c_ha"] == pytest.approx(float(curve(reference)), rel=1e-9)


# --- mangroves ------------------------------------------------------------------------------------------------------

WINDOWS = (
    SoilWindow(5, 10, 0, 15), SoilWindow(20, 25, 15, 30), SoilWindow(35, 40, 30, 45), SoilWindow(70, 75, 45, 110),
    SoilWindow(145, 150, 110, 180), SoilWindow(190, 195, 180, 200),
)  # fmt: skip


@pytest.fixture(scope="module")
def mangroves(reference):
    """Samples at the window they were taken for; the archive's interval number says which."""
    table = pd.read_csv(
        reference / "real" / "zambezi_mangrove" / "soil_samples.csv", dtype={"plot": str, "subplot": str}
    )
    window = table["interval"].map({number: w for number, w in enumerate(WINDOWS, start=1)})
    return pd.DataFrame(
        {
            "row_id": table.index, "file": "soil_samples.csv", "row": table.index + 2, "survey": "2012-2016",
            "plot": table["plot"], "subplot": table["subplot"], "core": "",
            "top_cm": window.map(lambda w: float(w.from_cm)), "bottom_cm": window.map(lambda w: float(w.to_cm)),
            "bulk_density_g_cm3": table["bulk_density_g_cm3"], "organic_carbon_share": table["C_pct"] / 100,
            "cores": 1.0, "used": True,
        }
    ).assign(interval=table["interval"])  # fmt: skip


@pytest.mark.parametrize("depth", [100, 200])
def test_mangrove_cores(mangroves, depth):
    """Independent: pandas. Whole cores only (every window down to the depth, none twice), averaged per plot."""
    rows, findings = soil(mangroves, SoilOptions(FINE, depth_cm=depth, windows=WINDOWS))
    layers = pd.DataFrame(
        {"interval": range(1, 7), "top_cm": [w.top_cm for w in WINDOWS], "bottom_cm": [w.bottom_cm for w in WINDOWS]}
    )
    stood = mangroves.drop(columns=["top_cm", "bottom_cm"]).merge(layers, on="interval")
    stood = stood[stood["top_cm"] < depth]
    cores = stood.assign(stock=layer_stock(stood, depth)).groupby(["plot", "subplot"])
    needed = int((layers["top_cm"] < depth).sum())
    whole = cores["interval"].agg(lambda found: sorted(found) == list(range(1, needed + 1)))
    expected = cores["stock"].sum()[whole].groupby("plot")
    pd.testing.assert_series_equal(
        by_plot(rows).sort_index(), expected.mean().sort_index(), check_names=False, rtol=1e-12
    )
    assert rows.set_index("plot")["samples"].to_dict() == expected.size().to_dict()
    aside = findings.loc[~findings["used"]]
    assert set(aside["rule"]) == {"layers overlap", "gap in core", "core stops short", "core set aside"}
    kept = mangroves.loc[~mangroves["row_id"].isin(aside["row_id"].astype(int))]
    assert kept.groupby(["plot", "subplot"]).ngroups == int(whole.sum())
    assert rows["density_t_c_ha"].mean() == pytest.approx({100: MANGROVE_100, 200: MANGROVE_200}[depth], abs=0.05)


def test_mangrove_cores_at_the_depths_written_down(mangroves, reference):
    """Most samples sit in their window; those beside it stand for the layer of their middle and are listed."""
    table = pd.read_csv(reference / "real" / "zambezi_mangrove" / "soil_samples.csv", dtype={"plot": str})
    depths = table["actual_interval_cm"].str.extract(r"^(\d+)_+(\d+)$").astype(float)
    frame = mangroves.assign(top_cm=depths[0], bottom_cm=depths[1])
    rows, findings = soil(frame, SoilOptions(FINE, depth_cm=100, windows=WINDOWS))
    assert (findings["rule"] == "beside window").sum() > 100
    slips = table.index[table["actual_interval_cm"].isin(["190_15", "177_176"])] + 2
    assert findings.loc[findings["rule"] == "bottom above top", "row"].tolist() == slips.tolist()
    assert rows["density_t_c_ha"].mean() == pytest.approx(MANGROVE_100, rel=0.02)
