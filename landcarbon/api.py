"""The program from Python: open an inventory, ask for stocks, change and a map."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd

from landcarbon.errors import UserError
from landcarbon.inventory import Settings, load_settings

if TYPE_CHECKING:
    from landcarbon.pipeline import PlotStage
    from landcarbon.publish.results import Results

__all__ = ["Inventory", "open_inventory"]

UNITS = ("inventory", "stratum", "parcel")


class Inventory:
    """One inventory, as its project file describes it. Reading and computing happen at first need, once.

    Parameters
    ----------
    settings : Settings
        The project file, loaded.
    progress : callable
        Told, in a few words, what is being done.
    """

    def __init__(self, settings: Settings, *, progress: Callable[[str], None] = lambda _: None) -> None:
        self.settings = settings
        self.progress = progress

    @property
    def name(self) -> str:
        """Name of the inventory."""
        return self.settings.inventory.name

    @cached_property
    def stage(self) -> PlotStage:
        """Trees and plots, before any estimate."""
        from landcarbon.assemble import run_stage

        return run_stage(self.settings, progress=self.progress)

    @cached_property
    def results(self) -> Results:
        """Everything one run gives."""
        from landcarbon.assemble import assemble

        stage = self.stage
        self.progress("estimating stocks and change")
        return assemble(stage, self.settings)

    @property
    def surveys(self) -> list[str]:
        """Names of the surveys, in the order of time."""
        return [str(name) for name in self.results.surveys["survey"]]

    def check(self) -> pd.DataFrame:
        """Return the findings of reading, checking and computing, one row each."""
        return self.results.findings.copy()

    def stocks(self, by: str = "parcel", *, pool: str | None = None) -> pd.DataFrame:
        """Carbon stocks per unit, survey and pool.

        Parameters
        ----------
        by : {"parcel", "stratum", "inventory"}
            The units.
        pool : str, optional
            Only this pool.

        Returns
        -------
        DataFrame, or GeoDataFrame with the parcels' geometry for ``by="parcel"``
            density_t_c_ha [t C/ha] and stock_t_c [t C] with standard error and interval.

        Raises
        ------
        UserError
            If ``by`` is not one of the units, or the inventory has no such pool.
        """
        return self._select(self.results.stocks, by, pool)

    def change(
        self, since: str | int, until: str | int, by: str = "parcel", *, pool: str | None = None
    ) -> pd.DataFrame:
        """Change of carbon stocks between two surveys.

        Parameters
        ----------
        since, until : str or int
            Names of the surveys.
        by : {"parcel", "stratum", "inventory"}
            The units.
        pool : str, optional
            Only this pool.

        Returns
        -------
        DataFrame, or GeoDataFrame for ``by="parcel"``
            change_t_c [t C], per year, and co2_t_yr (removal negative).

        Raises
        ------
        UserError
            If a survey is unknown.
        """
        for survey in (since, until):
            if str(survey) not in self.surveys:
                raise UserError(f"no survey {survey!r}", remedy=f"Surveys are: {', '.join(self.surveys)}")
        if self.surveys.index(str(since)) >= self.surveys.index(str(until)):
            raise UserError(
                f"survey {since} is not before {until}", remedy="Name the earlier survey first, then the later one."
            )
        table = self.results.change
        rows = table[(table["since"] == str(since)) & (table["until"] == str(until))]
        if rows.empty:
            from landcarbon.pipeline import estimation_plan
            from landcarbon.reckon import reckon_change

            rows = reckon_change(estimation_plan(self.stage, self.settings), str(since), str(until))[0]
        return self._select(rows, by, pool)

    def domains(
        self, of: str | Mapping[str, str], *, areas: Mapping[str, float] | None = None, pool: str | None = None
    ) -> pd.DataFrame:
        """Stocks of domains that are neither strata nor parcels, such as land uses or owners.

        Parameters
        ----------
        of : "land_use" or mapping
            "land_use": that of the parcel each plot lies in. Or the name of the domain of each plot; plots that are not
            named are in none.
        areas : mapping, optional
            Area of each domain [ha]. For land uses that of their parcels is taken; else areas are estimated from the
            plots, with their error.
        pool : str, optional
            Only this pool.

        Returns
        -------
        DataFrame
            by, unit, survey, pool, area_ha with its standard error, plots, density_t_c_ha and stock_t_c with standard
            errors and intervals, method. Domains may cut across strata and parcels; plots outside count in the
            variance.

        Raises
        ------
        UserError
            If there are no parcels to take the land use from, an area is missing, or the boundaries change between
            the surveys: the areas of the latest would then stand for all.
        """
        from landcarbon.statements import state_domains

        stage = self.stage
        if stage.inputs.parcel_versions is not None:
            raise UserError(
                "domains are not stated where boundaries change between the surveys",
                remedy="Leave only the outlines of one survey in the polygons and open the inventory with them.",
            )
        parcels, table = stage.inputs.parcels, stage.plot_parts
        if isinstance(of, str):
            if of != "land_use" or parcels is None:
                raise UserError(
                    f"{of!r} is no column of the parcels" if of != "land_use" else "there are no parcels",
                    remedy='Use "land_use", or give the domain of each plot.',
                )
            use = parcels.set_index(parcels["parcel"].astype("str"))["land_use"].astype("str")
            named, column = table["parcel"].astype("str").map(use).fillna(""), of
            areas = parcels.groupby(use.to_numpy())["area_ha"].sum().to_dict() if areas is None else areas
        else:
            given = {str(plot): str(domain) for plot, domain in of.items()}
            named, column = table["plot"].astype("str").map(given).fillna(""), "domain"
        rows = state_domains(
            table.assign(**{column: named.astype("str")}),
            stage.sums,
            self.surveys,
            column,
            strata=stage.inputs.strata,
            areas=areas,
            confidence=self.settings.inventory.confidence,
        )
        return rows if pool is None else rows[rows["pool"] == pool].reset_index(drop=True)

    def map(self, path: str | Path, *, base_tiles: bool = False) -> Path:
        """Write the carbon map as one page that works without a network.

        Parameters
        ----------
        path : str or Path
            The HTML file.
        base_tiles : bool
            Add background tiles; these need the network.
        """
        from landcarbon.publish.map_page import map_page
        from landcarbon.publish.writing import write_text_aside

        target = Path(path)
        write_text_aside(target, map_page(self.results, base_tiles=base_tiles))
        return target

    def run(self, out: str | Path | None = None) -> Path:
        """Write the results folder; ``results/`` beside the project file unless told otherwise.

        Raises
        ------
        UserError
            If nothing can be estimated; earlier results are left as they are.
        """
        from landcarbon.assemble import refuse_nothing
        from landcarbon.publish.folder import write_results

        refuse_nothing(self.results)
        target = Path(out) if out is not None else self.settings.folder / "results"
        write_results(self.results, target)
        return target

    def _select(self, table: pd.DataFrame, by: str, pool: str | None) -> pd.DataFrame:
        if by not in UNITS:
            raise UserError(f"by={by!r} is not a unit of estimation", remedy=f"Use one of: {', '.join(UNITS)}")
        rows = table[table["by"] == by]
        if pool is not None:
            pools = list(dict.fromkeys(table["pool"]))
            if pool not in pools:
                raise UserError(f"no pool {pool!r} in these results", remedy=f"Pools are: {', '.join(pools)}")
            rows = rows[rows["pool"] == pool]
        rows = rows.reset_index(drop=True)
        parcels = self.results.parcels
        if by != "parcel" or parcels is None:
            return rows
        import geopandas as gpd

        shapes = parcels.set_index("parcel").geometry.reindex(rows["unit"].astype("str"))
        return gpd.GeoDataFrame(rows, geometry=list(shapes), crs=parcels.crs)


def open_inventory(path: str | Path, *, progress: Callable[[str], None] = lambda _: None) -> Inventory:
    """Open an inventory by its project file.

    Parameters
    ----------
    path : str or Path
        ``inventory.toml``, or the folder that holds it.
    progress : callable
        Told, in a few words, what is being done.

    Raises
    ------
    SettingsError
        If the file is missing or has faults; all faults are named at once.
    """
    given = Path(path)
    return Inventory(load_settings(given / "inventory.toml" if given.is_dir() else given), progress=progress)
