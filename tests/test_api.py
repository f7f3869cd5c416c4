"""The three uses of the Python face, a line or two each."""

from __future__ import annotations

import geopandas as gpd
import pandas as pd
import pytest
from boundary_frames import PROJECT, cells, grid_plots, version, write_land

import landcarbon
from landcarbon.demo import copy_demo
from landcarbon.errors import UserError


@pytest.fixture(scope="module")
def inventory(tmp_path_factory):
    return landcarbon.open_inventory(copy_demo(tmp_path_factory.mktemp("api") / "woodland"))


def test_stocks_of_parcels_carry_their_geometry(inventory):
    table = inventory.stocks(by="parcel")
    assert isinstance(table, gpd.GeoDataFrame)
    assert table.crs == inventory.results.parcels.crs
    assert table.geometry.notna().all()


def test_change_takes_years_or_names(inventory):
    by_year = inventory.change(2014, 2024, by="parcel")
    by_name = inventory.change("2014", "2024", by="parcel")
    pd.testing.assert_frame_equal(pd.DataFrame(by_year), pd.DataFrame(by_name))


def test_change_is_the_difference_of_the_stocks(inventory):
    """Identity: in this version the change of a unit is the difference of its two stocks."""
    stocks = inventory.stocks("inventory", pool="above_ground").set_index("survey")["stock_t_c"]
    change = inventory.change(2014, 2019, "inventory", pool="above_ground")["change_t_c"].iloc[0]
    assert change == pytest.approx(stocks["2019"] - stocks["2014"], rel=1e-9)


def test_change_backwards_is_refused(inventory):
    with pytest.raises(UserError, match=r"survey 2019 is not before 2014"):
        inventory.change(2019, 2014, "inventory", pool="all")


def test_map_is_one_file(inventory, tmp_path):
    page = inventory.map(tmp_path / "carbon.html")
    assert page.stat().st_size > 100_000
    assert [path.name for path in tmp_path.iterdir()] == ["carbon.html"]


def test_findings_are_a_copy(inventory):
    findings = inventory.check()
    findings["message"] = "changed"
    assert "changed" not in set(inventory.check()["message"])


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda inv: inv.stocks(by="owner"), "by='owner'"),
        (lambda inv: inv.stocks(pool="peat"), "no pool 'peat'"),
        (lambda inv: inv.change(2014, 2030), "no survey 2030"),
    ],
)
def test_faulty_calls_say_what_is_accepted(call, said, inventory):
    with pytest.raises(landcarbon.UserError, match=said):
        call(inventory)


def test_a_missing_project_file_is_one_plain_error(tmp_path):
    with pytest.raises(landcarbon.UserError, match=r"nowhere\.toml"):
        landcarbon.open_inventory(tmp_path / "nowhere.toml")


def test_unknown_name_of_the_package():
    with pytest.raises(AttributeError, match="nosuch"):
        landcarbon.nosuch  # noqa: B018


def test_domains_by_land_use_and_by_owner(inventory):
    """Identity: one land use is the whole inventory; owners with estimated areas expand to the whole."""
    whole = inventory.domains("land_use", pool="above_ground")
    assert whole["unit"].unique().tolist() == ["forest land"]
    assert whole["area_ha"].iloc[0] == pytest.approx(inventory.results.parcels["area_ha"].sum(), rel=1e-9)
    plots = inventory.stage.inputs.plots["plot"].astype("str")
    owners = {plot: "A" if plot < "F" else "B" for plot in plots}
    split = inventory.domains(owners, pool="above_ground")
    assert set(split["unit"]) == {"A", "B"}
    assert (split["area_se"] > 0).all()
    added = split.groupby("survey")[["area_ha", "stock_t_c"]].sum()
    both = whole.set_index("survey")
    assert added["area_ha"].to_numpy() == pytest.approx(both["area_ha"].to_numpy(), rel=1e-9)
    assert added["stock_t_c"].to_numpy() == pytest.approx(both["stock_t_c"].to_numpy(), rel=1e-9)
    with pytest.raises(UserError, match="'owner' is no column of the parcels"):
        inventory.domains("owner")


def test_no_domains_where_boundaries_change(tmp_path):
    versions = [
        version("P", cells(0, 0, 2, 2), until="2019-12-31"),
        version("P", cells(0, 0, 2, 1), since="2020-01-01"),
    ]
    write_land(tmp_path, versions, grid_plots(2, 2))
    (tmp_path / "inventory.toml").write_text(PROJECT, encoding="utf-8")
    with pytest.raises(UserError, match="boundaries change between the surveys"):
        landcarbon.open_inventory(tmp_path).domains("land_use")
