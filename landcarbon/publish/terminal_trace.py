"""What the command ``trace`` prints: the figure, its plots, and the trees and samples that make them up."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import pandas as pd
from rich.text import Text

from landcarbon.publish.figures import decimals_for, figure
from landcarbon.publish.terminal_samples import print_samples
from landcarbon.publish.terminal_tables import (
    column_of,
    finding_line,
    number_of,
    plain_text,
    print_wide,
    table_of,
    table_width,
)
from landcarbon.publish.words import NOT_ESTIMABLE

if TYPE_CHECKING:
    from rich.console import Console
    from rich.table import Table

    from landcarbon.trace import Trace
    from landcarbon.trace_change import ChangeTrace

__all__ = ["print_change_trace", "print_trace"]

_MOST_FINDINGS = 20
_DECIMALS = 3  # of contributions: the same for all, so that a column adds up


def print_trace(trace: Trace, console: Console, trees: int) -> None:
    """Print what a figure rests on.

    Parameters
    ----------
    trace : Trace
        The figure with its plots, trees and samples.
    console : rich.console.Console
        Where to print.
    trees : int
        How many of the trees with the largest contribution to list, and how many rows of each table of samples; of one
        plot all samples are listed.
    """
    row = trace.row
    density, se, stock = (float(row[name]) for name in ("density_t_c_ha", "density_se", "stock_t_c"))
    digits = decimals_for(se, density)
    console.print(Text.assemble("\n", (f"{row['by']} ", ""), plain_text(row["unit"])), style="bold")
    said = NOT_ESTIMABLE if pd.isna(density) else f"{figure(density, digits)} t C/ha, SE {figure(se, digits)}"
    total = "" if pd.isna(stock) else f"; {figure(stock, decimals_for(float(row['stock_se']), stock))} t C"
    console.print(plain_text(f"Survey {row['survey']}, pool {row['pool']}: {said}{total}"))
    console.print(plain_text(f"Method: {row['method']}"))
    if len(trace.plots):
        print_wide(_plots_of(trace), console)
        _say_mean(trace, console)
    if len(trace.composition):
        print_wide(_composed(trace.composition), console)
    for note in trace.notes:
        console.print(plain_text(note))
    _print_trees(trace, console, trees)
    for table, rows in trace.samples.items():
        print_samples(table, rows, console, len(rows) if trace.one_plot else trees)
    if len(trace.set_aside):
        console.print(f"Rows on these plots that were set aside: {len(trace.set_aside)}")
        for finding in trace.set_aside.head(_MOST_FINDINGS).itertuples(index=False):
            console.print(finding_line(finding))
        if len(trace.set_aside) > _MOST_FINDINGS:
            console.print(f"... and {len(trace.set_aside) - _MOST_FINDINGS} more in findings.csv.")


def print_change_trace(trace: ChangeTrace, console: Console) -> None:
    """Print what a change rests on: the figure, the plots of both surveys, and how a parcel's figure is composed.

    Parameters
    ----------
    trace : ChangeTrace
        The change with its plots.
    console : rich.console.Console
        Where to print.
    """
    row = trace.row
    change, se = float(row["change_t_c"]), float(row["change_se"])
    digits = decimals_for(se, change)
    console.print(Text.assemble("\n", (f"{row['by']} ", ""), plain_text(row["unit"])), style="bold")
    said = NOT_ESTIMABLE if pd.isna(change) else f"{figure(change, digits, sign=True)} t C, SE {figure(se, digits)}"
    area = float(row["area_ha"])
    per_ha = "" if pd.isna(change) or not area > 0 else f"; {figure(change / area, _DECIMALS, sign=True)} t C/ha"
    console.print(plain_text(f"Change {row['since']} to {row['until']}, pool {row['pool']}: {said}{per_ha}"))
    console.print(plain_text(f"Method: {row['method']}"))
    headings = [("plot", "left"), ("stratum", "left"), ("since", "left"), ("until", "left"), ("years", "right")]
    names = ["rel. area", "t C/ha since", "t C/ha until", "change", "per year"]
    columns = ["size", "since_t_c_ha", "until_t_c_ha", "change_t_c_ha", "change_t_c_ha_yr"]
    title = "Plots at both surveys" + (", values adjusted by rasters" if trace.adjusted else "")
    table = table_of(title, [*headings, *((name, "right") for name in names)])
    for plot in trace.plots.itertuples(index=False):
        days = [_day(value) for value in (plot.since_date, plot.until_date)]
        cells = [figure(number_of(plot, name), _DECIMALS, sign=name.startswith("change")) for name in columns]
        first = [plain_text(plot.plot), plain_text(plot.stratum), *map(Text, days)]
        table.add_row(*first, figure(number_of(plot, "years"), 2), *cells)
    print_wide(table, console)
    known = trace.plots.dropna(subset="change_t_c_ha")
    if len(known):
        mean = float((known["change_t_c_ha"] * known["size"]).sum() / known["size"].sum())
        console.print(
            f"Plots at both surveys: {len(known)} of {len(trace.plots)}; mean of their changes, weighted by relative "
            f"area: {figure(mean, _DECIMALS, sign=True)} t C/ha."
        )
    if len(trace.composition):
        print_wide(_composed(trace.composition), console)


def _day(value: Any) -> str:
    return "" if pd.isna(value) else f"{pd.Timestamp(value):%Y-%m-%d}"


def _say_mean(trace: Trace, console: Console) -> None:
    """Say how the plots make the figure, where it is as simple as that."""
    plots = trace.plots.dropna(subset="density_t_c_ha")
    if "size" not in plots or plots.empty or not plots["size"].sum() > 0:
        return
    mean = float((plots["density_t_c_ha"] * plots["size"]).sum() / plots["size"].sum())
    # The published table holds ten digits.
    if math.isclose(mean, float(trace.row["density_t_c_ha"]), rel_tol=1e-8, abs_tol=1e-8):
        console.print(f"The figure is their mean, weighted by relative area: {figure(mean, _DECIMALS)} t C/ha.")


def _composed(rows: pd.DataFrame) -> Table:
    """Show the arithmetic of a composite figure: weight x own + (1 - weight) x model + adjustment."""
    title = "Composed per pool: weight x own plots + (1 - weight) x model of the stratum + adjustment to its total"
    names = ["plots", "own plots", "weight", "model", "adjustment", "t C/ha", "SE"]
    columns = ["direct", "weight_direct", "synthetic", "adjustment", "density", "density_se"]
    if "raster_shift" in rows and rows["raster_shift"].fillna(0.0).ne(0.0).any():
        names.insert(2, "of it by raster")
        columns.insert(1, "raster_shift")
    table = table_of(title, [("pool", "left"), *((name, "right") for name in names)])
    for row in rows.itertuples(index=False):
        cells = [figure(number_of(row, name), _DECIMALS) for name in columns]
        table.add_row(plain_text(str(row.pool).replace("_", " ")), figure(number_of(row, "plots"), 0), *cells)
    return table


def _plots_of(trace: Trace) -> Table:
    further = list(trace.columns.items())
    headings = [("plot", "left"), ("stratum", "left"), ("date", "left"), ("rel. area", "right")]
    table = table_of("Plots", [*headings, *((name, "right") for _, name in further), ("t C/ha", "right")])
    for _, row in trace.plots.iterrows():
        day = row.get("date", pd.NaT)
        cells = [plain_text(row["plot"]), plain_text(row.get("stratum", ""))]
        cells += [Text("" if pd.isna(day) else f"{pd.Timestamp(day):%Y-%m-%d}"), Text(f"{row.get('size', 1.0):.3g}")]
        cells += [Text(figure(float(row[name]), 0 if name == "tree_rows" else _DECIMALS)) for name, _ in further]
        table.add_row(*cells, figure(float(row["density_t_c_ha"]), _DECIMALS))
    return table


def _print_trees(trace: Trace, console: Console, most: int) -> None:
    rows = trace.trees
    if rows.empty:
        return
    shown = rows.head(most)
    table = _tree_table(trace, shown)
    # A terminal too narrow for the table would break ids in two: there each tree gets lines of its own.
    if console.is_terminal and table_width(table, console) > console.width:
        console.print(table.title)
        for row in shown.itertuples(index=False):
            for line in _tree_lines(row):
                console.print(plain_text(line), soft_wrap=True)
    else:
        print_wide(table, console)
    left = rows.iloc[len(shown) :]
    if len(left):
        console.print(f"... and {len(left)} more; --trees {len(rows)} lists all, --plot NAME those of one plot.")


def _tree_table(trace: Trace, shown: pd.DataFrame) -> Table:
    rows, several = trace.trees, trace.trees["pool"].nunique() > 1
    by_stand = bool(rows["density_t_c_ha"].isna().all())
    left = len(rows) - len(shown)
    title = f"Trees: {len(rows)} rows counted" + (f", listed: the {len(shown)} with the largest share" if left else "")
    headings = [("file and line", "left"), ("plot", "left"), ("tree", "left"), ("species", "left")]
    headings += [("cm", "right"), ("m", "right"), ("height", "left"), ("equation", "left")]
    headings += [("pool", "left")] if several else []
    headings += [("kg dry", "right"), ("C fraction", "right"), ("trees/ha", "right")]
    headings += [("shoot t/ha" if by_stand else "t C/ha", "right"), ("remark", "left")]
    table = table_of(title, headings, whole=("file and line", "equation"))
    for row in shown.itertuples(index=False):
        cells: list[Any] = [plain_text(f"{row.file} {row.row}"), plain_text(row.plot), plain_text(row.tree)]
        cells += [plain_text(_species(row)), figure(number_of(row, "dbh_cm"), 1), figure(number_of(row, "height_m"), 1)]
        cells += [plain_text(column_of(row, "height_source")), plain_text(row.equation)]
        cells += [plain_text(row.pool)] if several else []
        cells += [figure(number_of(row, "mass_kg"), 2), figure(number_of(row, "carbon_fraction"), _DECIMALS)]
        cells += [figure(number_of(row, "expansion"), _DECIMALS), figure(_share(row), _DECIMALS)]
        table.add_row(*cells, plain_text(_remark(row)))
    if len(trace.plots) == 1 and not left and not several:
        share = rows["mass_t_ha"] if by_stand else rows["density_t_c_ha"]
        blank = [""] * (len(headings) - 3)
        table.add_row("sum", *blank, figure(float(share.sum()), _DECIMALS), "", style="bold")
    return table


def _tree_lines(row: Any) -> list[str]:
    height = f", {figure(number_of(row, 'height_m'), 1)} m ({column_of(row, 'height_source')})"
    height = height if pd.notna(number_of(row, "height_m")) else ""
    mass, expansion = figure(number_of(row, "mass_kg"), 2), figure(number_of(row, "expansion"), _DECIMALS)
    carbon = pd.notna(number_of(row, "density_t_c_ha"))
    fraction = f" x {figure(number_of(row, 'carbon_fraction'), _DECIMALS)}" if carbon else ""
    unit = "t C/ha" if carbon else "t/ha of shoots"
    remark = f"; {_remark(row)}" if _remark(row) else ""
    return [
        f"plot {row.plot} tree {row.tree}: {_species(row)}; {row.file} {row.row}; {row.pool}",
        f"  {figure(number_of(row, 'dbh_cm'), 1)} cm{height}; {row.equation}",
        f"  {mass} kg dry{fraction} x {expansion} trees/ha / 1000 = {figure(_share(row), _DECIMALS)} {unit}{remark}",
    ]


def _share(row: Any) -> float:
    density = number_of(row, "density_t_c_ha")
    return number_of(row, "mass_t_ha") if pd.isna(density) else density


def _species(row: Any) -> str:
    name, code = column_of(row, "scientific_name"), column_of(row, "species")
    return name or (f"code {code}" if code else "not stated")


def _remark(row: Any) -> str:
    said = []
    if row.pool == "dead_wood" and column_of(row, "decay_class"):
        said.append(f"decay class {row.decay_class}")
    if bool(getattr(row, "out_of_range", False)):
        said.append("beyond range")
    if column_of(row, "known") == "memory":
        said.append("equation from memory")
    return ", ".join(said)
