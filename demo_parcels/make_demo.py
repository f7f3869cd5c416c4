"""Make the input files of the demo inventory from the invented woodland: what the crews wrote down, and their mistakes.

Run ``python make_demo.py [FOLDER]``. The same seed gives the same files. Nothing here is real; see ``woodland.py``.
"""

from __future__ import annotations

import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import pyproj
import shapely
from canopy import write_canopy
from floor_sheets import write_floor
from sheets import FIXED_TIME, Fault, fault_lines, write_xlsx
from woodland import (
    CRS,
    LARGE_LIMIT_CM,
    SMALL_LIMIT_CM,
    SMALL_RADIUS_M,
    SPECIES,
    SURVEYS,
    draw_parcels,
    lay_out_plots,
    live_through,
)

__all__ = ["make_demo"]

SEED = 144
NUMERIC = {"tree_no": int, "stem_no": int, "diam_mm": int, "ht_m": float, "rot": int}

FIRST_DAY = {2014: "2014-05-12", 2019: "2019-05-20", 2024: "2024-05-13"}


# --- what the crews write down ---------------------------------------------------------------------------------------


def _visits(plots: pd.DataFrame, rng: np.random.Generator) -> dict[int, pd.DataFrame]:
    """Give every plot its day in the field: two to five plots a working day, bad weather in between."""
    visits = {}
    shut = {plots["plot"][plots.stand == "alder"].iloc[2]: "ford under water, no way across",
            plots["plot"][plots.stand == "beech"].iloc[9]: "rockfall above the plot, not entered"}  # fmt: skip
    for survey in SURVEYS:
        here = plots[plots["first"] <= survey]
        days = np.cumsum(rng.choice([0, 0, 1, 1, 4], size=len(here)))
        dates = np.busday_offset(FIRST_DAY[survey], days, roll="forward")
        table = pd.DataFrame(
            {"plot_no": here["plot"].to_numpy(), "date": dates.astype(str), "visited": "yes", "remark": ""}
        )
        if survey == SURVEYS[-1]:
            missed = table.plot_no.isin(list(shut))
            table.loc[missed, "visited"] = "no"
            table.loc[missed, "remark"] = table.plot_no.map(shut)
        visits[survey] = table
    return visits


def _tally(states: dict[int, pd.DataFrame], visits: dict[int, pd.DataFrame], rng: np.random.Generator) -> pd.DataFrame:
    """Tally the stems a crew sees: those over the limit of their circle, those seen before, and those now gone."""
    first = states[SURVEYS[0]]
    seen = pd.Series(False, index=first.index)
    written = pd.Series(0.0, index=first.index)
    number = pd.Series(np.nan, index=first.index)
    sheets = []
    for survey, now in states.items():
        table = visits[survey]
        open_plot = now["plot"].isin(table.plot_no[table.visited == "yes"])
        limit = np.where(now.dist <= SMALL_RADIUS_M, SMALL_LIMIT_CM, LARGE_LIMIT_CM)
        gone = seen & (now.state == "G") & open_plot
        standing = (now.state != "G") & (now.born <= survey) & open_plot
        seen = standing & (seen | (now.dbh >= limit))
        noisy = np.round(10.0 * now.dbh + rng.normal(0.0, 1.5, len(now)))
        written = written.where(
            (now.state == "D") & (written > 0), np.maximum(np.maximum(noisy, written), 10.0 * limit)
        )
        known = number.groupby(now.key).transform("max")
        fresh = now[seen & known.isna()].drop_duplicates("key").sort_values(["plot", "bearing"])
        start = known.groupby(now["plot"]).max().fillna(0.0)
        order = fresh.groupby("plot").cumcount() + 1 + fresh["plot"].map(start)
        number = known.fillna(now.key.map(pd.Series(order.to_numpy(), index=fresh.key.to_numpy())))
        traits = SPECIES.loc[now.sp]
        cm = written / 10.0
        height = now.tall * (1.3 + (cm / (traits.a.to_numpy() + traits.b.to_numpy() * cm)) ** 2)
        rows = now.assign(survey=survey, dbh_mm=written.where(~gone), tree_no=number,
                          ht=height.where(now.sampled & (now.state == "L")).round(1))  # fmt: skip
        sheets.append(rows[seen | gone])
    return pd.concat(sheets).sort_values(["survey", "plot", "tree_no", "stem_no"], ignore_index=True)


def _as_written(tally: pd.DataFrame) -> pd.DataFrame:
    """Turn the tally into cells of text, as on a plot sheet."""
    leaning = (tally.fate > 0.985) & (tally.state == "L")
    remark = tally.note.where(tally.note != "", np.where(leaning, "leaning 15° downhill", ""))
    dead = tally.state == "D"
    return pd.DataFrame(
        {
            "plot_no": tally["plot"],
            "tree_no": tally.tree_no.astype(int).astype(str),
            "stem_no": tally.stem_no.astype(str),
            "sp": tally.sp,
            "state": tally.state,
            "diam_mm": tally.dbh_mm.map(lambda mm: "" if np.isnan(mm) else f"{mm:.0f}"),
            "ht_m": tally.ht.map(lambda m: "" if np.isnan(m) else f"{m:.1f}"),
            "rot": tally.rot.astype(int).astype(str).where(dead, ""),
            "remark": remark,
            "survey": tally.survey,
            "fault": "",
        }
    ).astype({"fault": object})


# --- the faults planted on purpose ----------------------------------------------------------------------------------


def _plant(sheet: pd.DataFrame) -> pd.DataFrame:
    """Put the faults into the sheets; column ``fault`` keeps, beside the row, its column and what is wrong."""
    sheet = sheet.copy()
    first, second, third = (sheet.survey == survey for survey in SURVEYS)
    live = (sheet.state == "L") & (sheet.stem_no == "1")
    thick = pd.to_numeric(sheet.diam_mm).between(300, 450)
    again = sheet[["plot_no", "tree_no", "stem_no"]].apply(tuple, axis=1)
    thrice = live & thick & again.isin(again[third & live]) & again.isin(again[first & live])

    def pick(mask: pd.Series, nth: int) -> int:
        return int(np.flatnonzero(mask & (sheet.fault == ""))[nth])

    def write(mask: pd.Series, nth: int, column: str, value: object, what: str) -> None:
        row = pick(mask, nth)
        sheet.loc[row, column] = value(sheet.loc[row, column]) if callable(value) else value
        sheet.loc[row, "fault"] = f"{column}|{what}"

    write(first & thrice & (sheet.sp == "SP"), 7, "diam_mm", lambda mm: f"{round(int(mm) / 10)}",
          "centimetres written into a column of millimetres|diameter slip")  # fmt: skip
    write(first & thrice & (sheet.sp == "BE"), 12, "diam_mm", lambda mm: f"{mm[:-1]},{mm[-1]} cm?".replace(",0 ", " "),
          "text in a column of numbers|not readable")  # fmt: skip
    write(
        second & thrice & (sheet.sp == "BE"),
        5,
        "diam_mm",
        lambda mm: mm + "0",
        "ten times too large, a zero too many|diameter slip",
    )
    write(
        third & live & (sheet.sp == "BI"),
        4,
        "sp",
        "HX",
        "a code that the species table does not have|species code not in table",
    )
    write(
        third & live & (sheet.sp == "SP"), 40, "state", "Q", "a code that the status table does not have|unknown status"
    )
    write(third & live & (sheet.sp == "AL"), 20, "diam_mm", "", "a living tree without a diameter|dbh missing")
    row = pick(third & thrice & (sheet.sp == "BE"), 20)
    before = sheet.index[second & (again == again[row])][0]
    sheet.loc[row, "diam_mm"] = str(int(sheet.diam_mm[before]) - 60)
    sheet.loc[row, "fault"] = f"diam_mm|thinner by 6 cm than at the survey before ({sheet.diam_mm[before]} mm)|shrank"
    write(
        second & live & (sheet.plot_no.str[1] == "0") & (sheet.sp == "SP"),
        30,
        "plot_no",
        lambda plot: plot.replace("0", "O"),
        "letter O for the digit 0: the plots table does not have this plot|plot unknown",
    )
    twin = pick(second & live & (sheet.sp == "OA"), 6)
    copy = sheet.loc[[twin]].assign(fault="tree_no|the same row twice|duplicate row")
    return pd.concat([sheet.loc[:twin], copy, sheet.loc[twin + 1 :]], ignore_index=True)


# --- the files ------------------------------------------------------------------------------------------------------


def _write_gpkg(parcels: gpd.GeoDataFrame, path: Path) -> None:
    path.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": FIXED_TIME.replace("Z", ".000Z")})
    parcels.to_file(path, layer="parcels", driver="GPKG", engine="pyogrio")
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})


def _write_trees(sheet: pd.DataFrame, folder: Path) -> list[Fault]:
    """Write one file of trees per survey, each in the dressing of its crew; return the faults."""
    faults = []
    for survey in SURVEYS:
        table = sheet[sheet.survey == survey].drop(columns="survey")
        plain = table.drop(columns="fault")
        name = f"trees_{survey}.csv"
        if survey == SURVEYS[0]:
            plain = plain.assign(ht_m=plain.ht_m.str.replace(".", ","))
            plain.to_csv(folder / name, sep=";", index=False, encoding="latin-1", lineterminator="\n")
        elif survey == SURVEYS[1]:
            plain.to_csv(folder / name, index=False, encoding="utf-8-sig", lineterminator="\n")
        else:
            name = f"trees_{survey}.xlsx"
            write_xlsx({"trees": plain}, folder / name, NUMERIC)
        faults += fault_lines(name, table)
    return faults


def _write_tables(plots: pd.DataFrame, visits: dict[int, pd.DataFrame], folder: Path) -> list[Fault]:
    """Write plots, species and visits; return the faults planted in them."""
    to_lonlat = pyproj.Transformer.from_crs(CRS, "EPSG:4326", always_xy=True)
    lon, lat = to_lonlat.transform(plots.x.to_numpy(), plots.y.to_numpy())
    table = plots[["plot"]].rename(columns={"plot": "plot_no"})
    table = table.assign(lon=np.round(lon, 6), lat=np.round(lat, 6), share_in=plots.share, fault="")
    astray = table.index[(plots.stand == "beech") & (plots.share == 1)][-1]
    table.loc[astray, "lat"] = round(table.lat[astray] + 0.03, 6)
    table.loc[astray, "fault"] = (
        "lat|a digit of the latitude is wrong: the point falls 3 km outside all parcels|plot outside parcels"
    )
    table = table.assign(**{name: table[name].map("{:.6f}".format) for name in ("lon", "lat")})
    faults = fault_lines("plots.csv", table)
    table.drop(columns="fault").to_csv(folder / "plots.csv", index=False, lineterminator="\n")
    species = SPECIES[["code", "latin"]].assign(fault="")
    species.loc["SY", "fault"] = "latin|misspelt: the sycamore is Acer pseudoplatanus|species unknown"
    faults += fault_lines("species.csv", species)
    species.drop(columns="fault").to_csv(folder / "species.csv", index=False, lineterminator="\n")
    for survey, visit in visits.items():
        visit.to_csv(folder / f"visits_{survey}.csv", index=False, lineterminator="\n")
    return faults


def _write_readme(faults: list[Fault], folder: Path) -> None:
    """Put the table of faults between the marks of the README kept beside this script."""
    text = (Path(__file__).parent / "README.md").read_text(encoding="utf-8")
    head, rest = text.split("<!-- faults -->\n")[0], text.split("<!-- end of faults -->\n")[-1]
    lines = ["| file | line | column | as written | what is wrong | finding |", "|---|---|---|---|---|---|"]
    lines += ["| " + " | ".join(str(part) or "(blank)" for part in fault) + " |" for fault in faults]
    block = "<!-- faults -->\n" + "\n".join(lines) + "\n<!-- end of faults -->\n"
    (folder / "README.md").write_text(head + block + rest, encoding="utf-8", newline="\n")


def make_demo(folder: Path) -> None:
    """Write all files of the demo inventory but ``inventory.toml``, which is kept by hand.

    Parameters
    ----------
    folder : Path
        Where the files go; it is made if need be, and files of the same names are replaced.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(SEED)
    parcels = draw_parcels(rng)
    plots = lay_out_plots(parcels, rng)
    states = live_through(plots, shapely.union_all(parcels.geometry.to_numpy()), rng)
    visits = _visits(plots, rng)
    sheet = _plant(_as_written(_tally(states, visits, rng)))
    _write_gpkg(parcels, folder / "parcels.gpkg")
    faults = _write_tables(plots, visits, folder) + _write_trees(sheet, folder)
    faults += write_floor(plots, visits, states, folder, SEED)
    write_canopy(parcels, plots, states, folder, SEED)
    _write_readme(faults, folder)


if __name__ == "__main__":
    make_demo(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
