"""The two open inventories laid out as the program reads them.

Tables are copied as they are wherever the project file can map them. Where it cannot, the one table that differs is
written anew; each function says why.
"""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd

__all__ = ["HERE", "lay_out_census", "lay_out_mangroves", "quadrat_of", "with_keys"]

HERE = Path(__file__).resolve().parent / "real"
CENSUS = ("stems_2008.csv.gz", "stems_2013.csv.gz", "stems_2018.csv.gz", "species.csv", "scbi_plot.gpkg")
MANGROVES = ("plots.csv", "species_codes.csv", "woody_debris_tallies.csv", "litter_ground_vegetation.csv")
QUADRAT_M = 20
WINDOWS_CM = {"1": (5, 10), "2": (20, 25), "3": (35, 40), "4": (70, 75), "5": (145, 150), "6": (190, 195)}


def with_keys(text: str, changes: dict[str, str]) -> str:
    """Return a project file with some of its lines replaced."""
    for old, new in changes.items():
        if text.count(old) != 1:
            raise ValueError(f"{old!r} stands {text.count(old)} times in the project file")
        text = text.replace(old, new)
    return text


def quadrat_of(cells: pd.DataFrame) -> pd.Series:
    """Quadrat at the middle of a one-hectare cell: column 01-20, then row 01-32, as in the stem tables."""
    column, row = (cells[name] // QUADRAT_M + 1 for name in ("gx_m", "gy_m"))
    return column.map("{:02.0f}".format) + row.map("{:02.0f}".format)


def lay_out_census(source: Path, folder: Path, changes: dict[str, str] | None = None) -> Path:
    """Lay out the forest census.

    Parameters
    ----------
    source : Path
        Folder of the open data.
    folder : Path
        Where to write.
    changes : dict, optional
        Lines of the project file to replace.

    Notes
    -----
    Written anew: litter.csv, because the table names cells by their middle and not by a plot; soil.csv, for the same
    reason and because the density of 0 to 10 cm has to be worked out from what was dug out of the pits.
    """
    text = (HERE / "scbi" / "inventory.toml").read_text(encoding="utf-8")
    (folder / "inventory.toml").write_text(with_keys(text, changes or {}), encoding="utf-8")
    for name in CENSUS:
        shutil.copy(source / name, folder)
    litter = pd.read_csv(source / "litter_layer.csv")
    litter.assign(quadrat=quadrat_of(litter)).to_csv(folder / "litter.csv", index=False)
    soil = pd.read_csv(source / "soil_layers.csv")
    # Stones and roots are no fine earth; the volume of the pit holds them all.
    dry_share = (soil["dryness_dry_plus_pan_g"] - soil["dryness_pan_g"]) / soil["dryness_fresh_g"]
    roots_g = soil["fine_root_mass_g"] + soil["coarse_root_mass_g"]
    dug = ((soil["total_fresh_mass_g"] - soil["stone_mass_g"]) * dry_share - roots_g) / soil["pit_volume_ml"]
    density = dug.where(soil["depth_top_cm"] == 0, soil["bd_fine_earth_profile_pit_g_cm3_total_volume"])
    soil.assign(quadrat=quadrat_of(soil), fine_earth_g_cm3=density).to_csv(folder / "soil.csv", index=False)
    return folder


def lay_out_mangroves(
    source: Path, folder: Path, changes: dict[str, str] | None = None, *, written_depths: bool = False
) -> Path:
    """Lay out the mangrove inventory.

    Parameters
    ----------
    source : Path
        Folder of the open data.
    folder : Path
        Where to write.
    changes : dict, optional
        Lines of the project file to replace.
    written_depths : bool
        Place soil samples at the depths written down instead of in the window they were taken for.

    Notes
    -----
    Written anew: trees.csv, because live and dead diameters stand in two columns and one plot is spelled two ways;
    visits.csv, because the number of subplots of a plot stands in no table; soil.csv, because windows stand there as
    numbers, and the depths written down as one text for both limits.
    """
    text = (HERE / "zambezi" / "inventory.toml").read_text(encoding="utf-8")
    (folder / "inventory.toml").write_text(with_keys(text, changes or {}), encoding="utf-8")
    for name in MANGROVES:
        shutil.copy(source / name, folder)
    trees = _trees(source)
    trees.to_csv(folder / "trees.csv", index=False)
    soil = pd.read_csv(source / "soil_samples.csv", dtype=str)
    limits = soil["actual_interval_cm"].str.split("_+", regex=True, expand=True)
    if not written_depths:
        limits = pd.DataFrame([WINDOWS_CM[number] for number in soil["interval"]])
    soil.assign(top_cm=limits[0], bottom_cm=limits[1]).to_csv(folder / "soil.csv", index=False)
    wood = pd.read_csv(source / "woody_debris_tallies.csv", dtype=str)
    looked_at = pd.concat([table[["plot", "subplot"]] for table in (trees, soil, wood)]).drop_duplicates()
    plots = pd.read_csv(source / "plots.csv", dtype=str)["plot"]
    subplots = plots.map(looked_at.groupby("plot").size())
    visits = pd.DataFrame({"plot": plots, "date": "2014-06-01", "subplots": subplots})  # the middle of 2012 to 2016
    visits.to_csv(folder / "visits.csv", index=False)
    return folder


def _trees(source: Path) -> pd.DataFrame:
    tall = pd.read_csv(source / "trees_overstory.csv", dtype=str)
    tall["dbh_cm"] = tall["live_dbh_cm"].fillna(tall["dead_dbh_cm"])
    tall["status"] = np.where(tall["live_dbh_cm"].isna() & tall["dead_dbh_cm"].notna(), "dead", "live")
    small = pd.read_csv(source / "trees_understory.csv", dtype=str).assign(status="live")
    columns = ["plot", "subplot", "species_code", "dbh_cm", "height_m", "status", "dead_code"]
    trees = pd.concat([tall, small], ignore_index=True).reindex(columns=columns)
    return trees.assign(plot=trees["plot"].replace("32-B", "32B"))
