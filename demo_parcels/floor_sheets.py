"""What the crews wrote down about the floor of the woodland, the faults planted in it, and the files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from forest_floor import (
    clip_herbs,
    count_saplings,
    lay_lines,
    lie_about,
    site_traits,
    take_cores,
    take_frames,
    tally_twigs,
    walk_stumps,
)
from sheets import Fault, fault_lines, text_of, write_text, write_xlsx
from woodland import SURVEYS

__all__ = ["write_floor"]

EVERY_NTH, FEWEST = 3, 4  # soil is cored on every third plot of a stand, and on no fewer than these
NUMERIC = {"line": int, "length_m": float, "slope_pct": int, "n": int, "diam_cm": float, "hole_cm": float, "rot": int}
Sheets = dict[str, pd.DataFrame]


# --- what the crews write down ---------------------------------------------------------------------------------------


def _open_plots(table: pd.DataFrame, visit: pd.DataFrame) -> pd.DataFrame:
    return table[table["plot"].isin(visit.plot_no[visit.visited == "yes"])]


def _line_sheet(lines: pd.DataFrame) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "plot_no": lines["plot"],
            "line": text_of(lines.line),
            "length_m": text_of(lines.length_m),
            "slope_pct": text_of(lines.slope_pct),
            "fault": "",
        }
    ).astype(object)


def _wood_sheet(pieces: pd.DataFrame, twigs: pd.DataFrame) -> pd.DataFrame:
    """Write the pieces of each line, then its twigs: a size and a number instead of a diameter."""
    coarse = pd.DataFrame(
        {
            "plot_no": pieces["plot"],
            "line": pieces.line,
            "size": "",
            "n": "",
            "diam_cm": text_of(pieces.cm, 1),
            "hole_cm": text_of(pieces.hole_cm.where(pieces.hole_cm > 0)),
            "rot": text_of(pieces.rot),
            "wood": pieces.wood,
            "sp": pieces.sp,
        }
    )
    fine = pd.DataFrame({"plot_no": twigs["plot"], "line": twigs.line, "size": twigs["size"], "n": text_of(twigs.n)})
    sheet = pd.concat([coarse, fine], ignore_index=True).sort_values(["plot_no", "line"], kind="stable")
    return sheet.assign(line=text_of(sheet.line), fault="").fillna("").astype(object).reset_index(drop=True)


def _stump_sheet(stumps: pd.DataFrame) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "year": text_of(stumps.survey),
            "plot_no": stumps["plot"],
            "stump_no": text_of(stumps.stump),
            "sp": stumps.sp,
            "wood": np.where(stumps.sp == "", "softwood", ""),
            "across_cm": text_of(stumps.cm),
            "high_cm": text_of(stumps.high_cm),
            "rot": text_of(stumps.rot),
            "fault": "",
        }
    ).astype(object)


def _frame_sheet(frames: pd.DataFrame) -> pd.DataFrame:
    labels = {"year": text_of(frames.survey), "plot_no": frames["plot"]}
    if "frame" in frames:
        labels |= {"frame": text_of(frames.frame), "layer": frames.layer}
    bags = {name: text_of(frames[name], 1) for name in ("bag_fresh_g", "bag_dry_g")}
    return pd.DataFrame({**labels, "fresh_g": text_of(frames.fresh_g), **bags, "fault": ""}).astype(object)


def _sapling_sheet(counts: pd.DataFrame, visits: dict[int, pd.DataFrame]) -> pd.DataFrame:
    """Write the tallies; a plot without any sapling has a row that says so."""
    rows = []
    for survey, visit in visits.items():
        there = _open_plots(counts[counts.survey == survey], visit)
        none = visit.plot_no[(visit.visited == "yes") & ~visit.plot_no.isin(there["plot"])]
        rows += [there, pd.DataFrame({"plot": none, "sp": "", "survey": survey, "cm": np.nan, "n": 0})]
    table = pd.concat(rows, ignore_index=True).sort_values(["survey", "plot"], kind="stable", ignore_index=True)
    return pd.DataFrame(
        {
            "year": text_of(table.survey),
            "plot_no": table["plot"],
            "sp": table.sp,
            "middle_cm": text_of(table.cm, 1),
            "n": text_of(table.n),
            "fault": "",
        }
    ).astype(object)


def _soil_sheet(cores: pd.DataFrame) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "year": text_of(cores.survey),
            "plot_no": cores["plot"],
            "core": text_of(cores.core),
            "from_cm": text_of(cores.top),
            "to_cm": text_of(cores.bottom),
            "dry_g_cm3": text_of(cores.dense, 2),
            "stones_pct": text_of(cores.stones),
            "c_org_pct": text_of(cores.carbon, 2),
            "fault": "",
        }
    ).astype(object)


def _cored(site: pd.DataFrame, visits: dict[int, pd.DataFrame]) -> pd.DataFrame:
    """Choose the plots for soil: every third of each stand, among those visited at the first and the last survey."""
    for survey in (SURVEYS[0], SURVEYS[-1]):
        site = _open_plots(site, visits[survey])
    size = site.groupby("stand")["plot"].transform("size")
    step = np.maximum(np.minimum(EVERY_NTH, size // FEWEST), 1)
    return site[site.groupby("stand").cumcount() % step == 0]


# --- the faults planted on purpose -----------------------------------------------------------------------------------


def _plant(sheet: pd.DataFrame, mask: pd.Series, nth: int, column: str, value: object, what: str) -> pd.DataFrame:
    """Spoil one cell: ``value`` is what stands there instead, or makes it of what stood there."""
    sheet = sheet.copy()
    row = sheet.index[mask & (sheet.fault == "")][nth]
    before = sheet.at[row, column]
    sheet.at[row, column] = value(before) if callable(value) else value
    sheet.at[row, "fault"] = f"{column}|{what}"
    return sheet


def _plant_soil(soil: pd.DataFrame) -> pd.DataFrame:
    """Spoil six cores, each on a plot that has another one."""
    old, new = soil.year == str(SURVEYS[0]), soil.year == str(SURVEYS[-1])
    first, top, middle = soil.core == "1", soil.from_cm == "0", soil.from_cm == "10"
    deepest = soil.from_cm == "20"
    soil = _plant(soil, old & first & top, 4, "c_org_pct", "58.00",
                  "organic carbon of pure organic matter, in mineral soil|carbon impossible")  # fmt: skip
    soil = _plant(soil, old & first & deepest, 9, "dry_g_cm3", "16",
                  "denser than any rock: the decimal point is lost|bulk density high")  # fmt: skip
    soil = _plant(soil, new & first & middle, 2, "stones_pct", "120",
                  "more stones than soil|coarse impossible")  # fmt: skip
    soil = _plant(soil, new & first & middle, 12, "from_cm", "5",
                  "the layer begins inside the one above it|layers overlap")  # fmt: skip
    soil = _plant(soil, new & first & middle, 15, "to_cm", "20",
                  "the core stops at 20 cm, the stock is that of 30 cm|core stops short")  # fmt: skip
    ends = soil.index[soil.fault.str.endswith("core stops short")][0]
    return soil.drop(index=ends + 1).reset_index(drop=True)


def _plant_wood(sheets: dict[int, Sheets]) -> None:
    lines, wood = sheets[SURVEYS[0]]["lines"], sheets[SURVEYS[1]]["wood"]
    with_wood = sheets[SURVEYS[0]]["wood"].query("size == ''").groupby(["plot_no", "line"]).size()
    bears = pd.Series([key in with_wood.index for key in zip(lines.plot_no, lines.line, strict=True)], lines.index)
    sheets[SURVEYS[0]]["lines"] = _plant(lines, bears & (lines.length_m == "20"), 31, "length_m", "0",
                                         "a line without length|line without length")  # fmt: skip
    sheets[SURVEYS[1]]["wood"] = _plant(wood, wood.rot == "2", 20, "rot", "7",
                                        "the crews' key has five classes|decay class unknown")  # fmt: skip


# --- the files -------------------------------------------------------------------------------------------------------


def _write_wood(sheets: dict[int, Sheets], folder: Path) -> list[Fault]:
    """Write lines and wood of each survey in the dressing of its crew."""
    faults = []
    for survey, pair in sheets.items():
        if survey == SURVEYS[-1]:
            name = f"wood_{survey}.xlsx"
            write_xlsx({title: table.drop(columns="fault") for title, table in pair.items()}, folder / name, NUMERIC)
            faults += [fault for title, table in pair.items() for fault in fault_lines(f"{name}#{title}", table)]
            continue
        dressing, commas = ("old", ("diam_cm",)) if survey == SURVEYS[0] else ("marked", ())
        faults += write_text(pair["lines"], folder / f"lines_{survey}.csv", dressing)
        faults += write_text(pair["wood"], folder / f"wood_{survey}.csv", dressing, commas)
    return faults


def write_floor(
    plots: pd.DataFrame,
    visits: dict[int, pd.DataFrame],
    states: dict[int, pd.DataFrame],
    folder: Path,
    seed: int,
) -> list[Fault]:
    """Write all tables beside the trees and return the faults planted in them.

    Parameters
    ----------
    plots : DataFrame
        Plots with parcel and stand.
    visits : dict
        Visits of each survey.
    states : dict
        All stems at each survey, for the stumps.
    folder : Path
        Where the files go.
    seed : int
        Start of the random numbers, apart from those of the trees.
    """
    draws = [np.random.default_rng([seed, number]) for number in range(7)]
    site = site_traits(plots, draws[0])
    lines = lay_lines(site, draws[1])
    pieces = lie_about(lines, draws[1])
    wood: dict[int, Sheets] = {}
    for survey, visit in visits.items():
        seen = _open_plots(lines, visit)
        twigs = tally_twigs(seen, survey, draws[2])
        wood[survey] = {"lines": _line_sheet(seen), "wood": _wood_sheet(_open_plots(pieces[survey], visit), twigs)}
    _plant_wood(wood)
    faults = _write_wood(wood, folder)
    walked = walk_stumps(site, states, draws[3])
    stumps = pd.concat([_open_plots(walked[walked.survey == survey], visit) for survey, visit in visits.items()])
    faults += write_text(_stump_sheet(stumps), folder / "stumps.csv", "plain")
    ends = (SURVEYS[0], SURVEYS[-1])
    frames = pd.concat([take_frames(_open_plots(site, visits[survey]), survey, draws[4]) for survey in ends])
    litter = _frame_sheet(frames.reset_index(drop=True))
    litter = _plant(litter, (litter.layer == "FH") & (litter.year == str(ends[0])), 37, "bag_dry_g",
                    lambda text: text.replace(".", ""),
                    "more dry than fresh: a decimal comma was lost|sub-sample dry above fresh")  # fmt: skip
    faults += write_text(litter, folder / "litter.csv", "old", ("bag_fresh_g", "bag_dry_g"))
    herbs = pd.concat([clip_herbs(_open_plots(site, visits[survey]), survey, draws[4]) for survey in SURVEYS])
    faults += write_text(_frame_sheet(herbs.reset_index(drop=True)), folder / "herbs.csv", "plain")
    bare = ~site["plot"].isin(states[SURVEYS[0]]["plot"][states[SURVEYS[0]].born == SURVEYS[0]])
    counts = count_saplings(site, bare & (site["first"] == SURVEYS[0]), draws[5])
    faults += write_text(_sapling_sheet(counts, visits), folder / "saplings.csv", "plain")
    cored = _cored(site, visits)
    cores = pd.concat([take_cores(cored, survey, draws[6]) for survey in ends], ignore_index=True)
    faults += write_text(_plant_soil(_soil_sheet(cores)), folder / "soil.csv", "plain")
    return faults
