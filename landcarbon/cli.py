"""The command line: parse, call one function, print.

Whatever a user can cause ends in one message and exit code 2; 1 is kept for faults of the program itself.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import Annotated, Any

import typer
from rich.console import Console
from rich.markup import escape

from landcarbon import __version__

__all__ = ["app", "main"]

app = typer.Typer(
    name="landcarbon",
    help="Carbon stocks and changes of land parcels, from plot sheets to a map that can be retraced to the tree.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)

_WIDTH, _HEIGHT = 110, 60  # for output that goes to a file or a pipe, where there is no size to ask for


class _Output(Console):
    """A console whose reader may leave early, as in ``landcarbon equations | head``: that is no fault."""

    def on_broken_pipe(self) -> None:
        """Leave with code 0; what is still in the buffer goes nowhere."""
        self.quiet = True
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        raise SystemExit(0)


def _console() -> Console:
    return _Output(highlight=False) if sys.stdout.isatty() else _Output(highlight=False, width=_WIDTH, height=_HEIGHT)


out = _console()
err = Console(stderr=True, highlight=False)

InventoryFile = Annotated[Path, typer.Argument(metavar="INVENTORY", help="The project file, inventory.toml.")]
ResultsFolder = Annotated[Path, typer.Argument(metavar="RESULTS", help="A results folder.")]
Tiles = Annotated[bool, typer.Option("--tiles", help="Put background tiles under the map (these need the network).")]


def _version(value: bool) -> None:
    if value:
        out.print(f"landcarbon {__version__}")
        raise typer.Exit


@app.callback()
def _options(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and leave.")
    ] = False,
) -> None:
    """Carbon stocks and changes of land parcels, from plot sheets to a map that can be retraced to the tree."""


@app.command()
def demo(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Where the demo goes.")] = Path("landcarbon-demo"),
) -> None:
    """Copy the invented demo woodland to a folder, run it, and say what to look at."""
    from landcarbon.demo import copy_demo

    project = copy_demo(folder)
    results = _run(project, project.parent / "results", tiles=False)
    first = results.stocks.query("by == 'parcel'").dropna(subset="density_t_c_ha")["unit"].iloc[0]
    out.print("\nWhat to look at:")
    out.print(
        f"  - the files a crew handed over, and what is wrong with them on purpose: {project.parent}", soft_wrap=True
    )
    out.print("  - what the checks found: results/findings.csv; every row is used or accounted for")
    out.print("  - the map: switch between surveys and change, point at a parcel")
    folder_of_results = project.parent / "results"
    out.print(
        f"  - where a figure comes from: landcarbon trace {folder_of_results} --parcel '{first}'",
        soft_wrap=True,
    )


@app.command()
def new(
    folder: Annotated[Path, typer.Argument(metavar="FOLDER", help="Where to put the project file.")] = Path("."),
) -> None:
    """Write a commented project file to start from."""
    from landcarbon.demo import write_template

    path = write_template(folder)
    out.print(f"Wrote {path}. Fill in the file names and columns, then: landcarbon check {path}", soft_wrap=True)


@app.command()
def check(inventory: InventoryFile) -> None:
    """Read and check an inventory without writing results."""
    from landcarbon.publish.terminal import print_check

    opened = _open(inventory)
    with _status() as status:
        opened.progress = status
        results = opened.results
    print_check(results, out)


@app.command()
def run(
    inventory: InventoryFile,
    folder: Annotated[
        Path | None, typer.Option("--out", metavar="FOLDER", help="Results folder; default: results/ beside the file.")
    ] = None,
    tiles: Tiles = False,
) -> None:
    """Run an inventory and write its results folder."""
    target = folder if folder is not None else inventory.parent / "results"
    _run(inventory, target, tiles=tiles)


@app.command()
def show(
    results: ResultsFolder,
    by: Annotated[str, typer.Option("--by", help="inventory, stratum or parcel.")] = "inventory",
) -> None:
    """Print the tables of a results folder."""
    from landcarbon.publish.folder import open_results
    from landcarbon.publish.terminal import print_results

    print_results(open_results(results), out, by=by)


@app.command("map")
def map_command(
    results: ResultsFolder,
    page: Annotated[Path | None, typer.Option("--out", metavar="PAGE", help="Default: map.html in the folder.")] = None,
    tiles: Tiles = False,
) -> None:
    """Write the map page of a results folder anew."""
    from landcarbon.publish.folder import open_results
    from landcarbon.publish.map_page import map_page
    from landcarbon.publish.writing import write_text_aside

    target = page if page is not None else results / "map.html"
    write_text_aside(target, map_page(open_results(results), base_tiles=tiles))
    out.print(f"Map: {target.resolve()}", soft_wrap=True)


@app.command()
def trace(
    results: ResultsFolder,
    parcel: Annotated[str | None, typer.Option("--parcel", help="Parcel to trace.")] = None,
    stratum: Annotated[str | None, typer.Option("--stratum", help="Stratum to trace.")] = None,
    survey: Annotated[str | None, typer.Option("--survey", help="Survey; default: the last.")] = None,
    since: Annotated[
        str | None, typer.Option("--since", help="Earlier survey: trace the change from it instead of a stock.")
    ] = None,
    pool: Annotated[str, typer.Option("--pool", help="Pool, or all.")] = "above_ground",
    plot: Annotated[str | None, typer.Option("--plot", help="Only this plot, with all its trees.")] = None,
    trees: Annotated[
        int | None, typer.Option("--trees", min=0, help="How many of the largest trees to list; default: 10.")
    ] = None,
) -> None:
    """Show the plots and trees a figure was worked out from, with file and line."""
    from landcarbon.publish.folder import open_results
    from landcarbon.publish.terminal_trace import print_trace
    from landcarbon.trace import trace_unit

    opened = open_results(results)
    if since is not None:
        from landcarbon.publish.terminal_trace import print_change_trace
        from landcarbon.trace_change import trace_change

        changed = trace_change(opened, since, parcel=parcel, stratum=stratum, survey=survey, pool=pool)
        print_change_trace(changed, out)
        return
    found = trace_unit(opened, parcel=parcel, stratum=stratum, survey=survey, pool=pool, plot=plot)
    all_of_plot = len(found.trees) if plot is not None else 10
    print_trace(found, out, all_of_plot if trees is None else trees)


@app.command()
def equations(
    text: Annotated[
        list[str] | None,
        typer.Argument(metavar="[TEXT]...", help="Words to look for: a species, genus, publication, id."),
    ] = None,
    region: Annotated[str | None, typer.Option("--region", help="Only this region.")] = None,
    component: Annotated[str | None, typer.Option("--component", help="Only this component, e.g. agb.")] = None,
    one: Annotated[str | None, typer.Option("--id", help="Show one in full.")] = None,
) -> None:
    """List or search the published equations, root models and height curves."""
    from landcarbon.publish.equation_list import find_published, one_published
    from landcarbon.publish.terminal_equations import print_found, print_published

    if one is not None:
        print_published(*one_published(one), out)
    else:
        words = " ".join(text or [])
        print_found(find_published(words, region=region, component=component), out, text=words)


def _open(inventory: Path) -> Any:
    from landcarbon.api import open_inventory

    return open_inventory(inventory)


def _status() -> Any:
    from landcarbon.publish.terminal import StepStatus

    return StepStatus(err)


def _run(inventory: Path, target: Path, *, tiles: bool) -> Any:
    from landcarbon.assemble import refuse_nothing
    from landcarbon.publish.folder import check_target, write_results
    from landcarbon.publish.terminal import print_results

    check_target(target)
    opened = _open(inventory)
    with _status() as status:
        opened.progress = status
        results = opened.results
        refuse_nothing(results)
        status("writing the results")
        write_results(results, target, base_tiles=tiles)
    print_results(results, out, folder=target.resolve())
    return results


def main() -> None:
    """Run the command line; turn errors a user can mend into one message and exit code 2."""
    from allometry.errors import AllometryError
    from landcarbon.errors import UserError

    try:
        app()
    except (UserError, AllometryError) as error:
        err.print(f"[bold red]Error[/bold red]: {escape(str(getattr(error, 'message', error)))}", soft_wrap=True)
        sys.exit(2)


if __name__ == "__main__":
    main()
