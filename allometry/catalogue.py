"""The catalogue of published tree equations: query it, and compute dry mass per tree.

Equations are evaluated as published: a bias correction that stands inside the printed equation is inside the result,
one that the publication says must be added (column ``correction``) is applied, and no other is. Masses are always
returned in kg of oven-dry matter per tree, whatever unit was printed.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from difflib import get_close_matches
from functools import cache, cached_property
from importlib.resources.abc import Traversable
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from allometry._build import Equation, build_equations
from allometry._evaluate import Evaluator, gather
from allometry._tables import (
    Faults,
    folder,
    read_component_sets,
    read_components,
    read_equations,
    read_rules,
    read_screened,
    read_sources,
)
from allometry.errors import UnknownEquationError
from allometry.forms import FloatArray

__all__ = ["Catalogue", "Equation", "component_biomass", "load_catalogue", "read_catalogue"]


class Catalogue:
    """Published equations and their evaluation.

    Parameters
    ----------
    equations
        Rows in catalogue order; the position of a row is its code.
    sources
        Bibliography by source key.
    components
        Vocabulary of components.
    sets
        Component sets, complete or not.
    """

    def __init__(
        self,
        equations: tuple[Equation, ...],
        sources: dict[str, dict[str, Any]],
        components: dict[str, dict[str, str]],
        sets: tuple[dict[str, str], ...],
    ) -> None:
        self.equations = equations
        self.sources = sources
        self.components = components
        self.sets = sets
        self._code = {e.equation_id: i for i, e in enumerate(equations)}
        self._evaluator = Evaluator(equations)

    @cached_property
    def table(self) -> pd.DataFrame:
        """All equations, one row each; the position of a row is its code for :meth:`evaluate_codes`."""
        return pd.DataFrame({f.name: [getattr(e, f.name) for e in self.equations] for f in fields(Equation)})

    def __len__(self) -> int:
        """Return the number of equations."""
        return len(self.equations)

    def code(self, equation_id: str) -> int:
        """Return the position of an equation in :attr:`table`.

        Raises
        ------
        UnknownEquationError
            If there is no such equation; the message names near ids.
        """
        code = self._code.get(equation_id)
        if code is None:
            near = get_close_matches(str(equation_id), self._code, n=3, cutoff=0.6)
            hint = f"; did you mean {' or '.join(near)}?" if near else "; search by part of a species, genus or source"
            raise UnknownEquationError(f"no equation {equation_id!r} in the catalogue{hint}")
        return code

    def codes(self, equation_ids: ArrayLike) -> NDArray[np.int32]:
        """Return the positions of many equations; missing ids (None, NaN or "") give -1."""
        factor, distinct = pd.factorize(np.asarray(equation_ids, dtype=object))
        lookup = np.array([self.code(str(name)) if name != "" else -1 for name in distinct] + [-1], dtype=np.int32)
        return lookup[factor]

    def row(self, equation_id: str) -> Equation:
        """Return one equation.

        Parameters
        ----------
        equation_id
            Id, as in the tables.

        Returns
        -------
        Equation
            The row.

        Raises
        ------
        UnknownEquationError
            If there is no such equation; the message names near ids.
        """
        return self.equations[self.code(equation_id)]

    def find(
        self,
        text: str | None = None,
        *,
        taxon: str | None = None,
        region: str | None = None,
        component: str | None = None,
        known: str | None = None,
        source: str | None = None,
    ) -> pd.DataFrame:
        """Search the catalogue.

        Parameters
        ----------
        text
            Text looked for in id, taxon, printed name and note, upper or lower case.
        taxon
            Scientific name, genus, family or group.
        region
            Region; rows valid in any region are found too.
        component, known, source
            Exact values of these columns.

        Returns
        -------
        DataFrame
            The matching rows of :attr:`table`, in its order and with its index.
        """
        table = self.table
        keep = pd.Series(True, index=table.index)
        if text:
            columns = table[["equation_id", "taxon", "taxon_printed", "note"]]
            keep &= columns.apply(lambda c: c.str.contains(text, case=False, regex=False)).any(axis=1)
        if taxon:
            names = ("; " + table["taxon"] + "; " + table["genus"] + "; " + table["family"] + "; ").str.lower()
            keep &= names.str.contains(f"; {taxon.lower().strip()}; ", regex=False)
        if region:
            keep &= table["region"].isin([region, "any"])
        for column, value in (("component", component), ("known", known), ("source_key", source)):
            if value:
                keep &= table[column] == value
        return table[keep]

    def evaluate(
        self,
        equation_id: str | ArrayLike,
        dbh_cm: ArrayLike | None,
        height_m: ArrayLike | None = None,
        wood_density_g_cm3: ArrayLike | None = None,
        *,
        stress: ArrayLike | None = None,
        extra: Mapping[str, ArrayLike] | None = None,
    ) -> pd.DataFrame:
        """Compute dry mass per tree with the equation(s) as published.

        Parameters
        ----------
        equation_id
            One id for all trees, or one per tree.
        dbh_cm
            Diameter at breast height over bark [cm].
        height_m
            Total height [m].
        wood_density_g_cm3
            Basic wood density, oven-dry mass over green volume [g/cm3].
        stress
            Bioclimatic stress E [-].
        extra
            Other measured variables by name (``drc_cm``, ``d10_cm``, ...), for the few equations that need them.

        Returns
        -------
        DataFrame
            ``biomass_kg`` (oven-dry, NaN where an input is missing or not positive), ``out_of_range`` (diameter outside
            the range of the equation, or a value below zero that was set to zero), ``residual_sd``, ``residual_scale``.
            The index is that of ``dbh_cm`` if it is a Series.

        Raises
        ------
        UnknownEquationError, MissingInputError, NotAMassError
            If an id is unknown, an input is not given at all, or a row is no mass.
        """
        given = {"dbh_cm": dbh_cm, "height_m": height_m, "wood_density_g_cm3": wood_density_g_cm3, "stress": stress}
        trees = gather({**given, **(extra or {})}, () if isinstance(equation_id, str) else np.shape(equation_id))
        ids = [equation_id] if isinstance(equation_id, str) else np.asarray(equation_id, dtype=object).ravel()
        codes = np.broadcast_to(self.codes(ids), (trees.size,))
        biomass, outside = self._evaluator.mass(codes, trees)
        sd = np.array([e.residual_sd for e in self.equations] + [np.nan])
        scale = np.array([e.residual_scale for e in self.equations] + [""], dtype=object)
        index = next((v.index for v in given.values() if isinstance(v, pd.Series)), None)
        return pd.DataFrame(
            {
                "biomass_kg": biomass,
                "out_of_range": outside,
                "residual_sd": sd[codes],
                "residual_scale": pd.Categorical(scale[codes], categories=["", "ln", "kg"]),
            },
            index=index,
        )

    def evaluate_codes(
        self,
        codes: NDArray[np.integer[Any]],
        dbh_cm: FloatArray,
        height_m: FloatArray | None = None,
        wood_density_g_cm3: FloatArray | None = None,
        stress: FloatArray | None = None,
    ) -> tuple[FloatArray, NDArray[np.bool_]]:
        """Compute dry mass for many trees of many equations; the fast path.

        Parameters
        ----------
        codes
            Position of the equation in :attr:`table` per tree; -1 = none (NaN out).
        dbh_cm, height_m, wood_density_g_cm3, stress
            As in :meth:`evaluate`, as arrays (or scalars).

        Returns
        -------
        biomass_kg, out_of_range : ndarray
            As in :meth:`evaluate`.
        """
        given = {"dbh_cm": dbh_cm, "height_m": height_m, "wood_density_g_cm3": wood_density_g_cm3, "stress": stress}
        codes = np.asarray(codes)
        trees = gather(given, codes.shape)
        return self._evaluator.mass(np.broadcast_to(codes, (trees.size,)), trees)

    def value(
        self,
        equation_id: str,
        dbh_cm: ArrayLike | None = None,
        *,
        correct: bool = True,
        **inputs: ArrayLike,
    ) -> FloatArray:
        """Compute one row in its own unit: heights, diameters, ratios and masses alike.

        Parameters
        ----------
        equation_id
            Id of the row.
        dbh_cm
            Diameter at breast height over bark [cm].
        correct
            Apply the correction the publication calls for (column ``correction``).
        **inputs
            The other measured variables by name, for example ``height_m``.

        Returns
        -------
        ndarray
            Value in the unit of column ``output_unit``, not clipped.
        """
        code = self.code(equation_id)
        values = self._evaluator.own_unit(code, gather({"dbh_cm": dbh_cm, **inputs}, ()))
        return values if correct else values / self.equations[code].correction_factor

    def clip_to_range(self, codes: NDArray[np.integer[Any]], dbh_cm: FloatArray) -> FloatArray:
        """Return the diameters moved to the nearest end of the range of their equation.

        Parameters
        ----------
        codes
            Position of the equation per tree; -1 leaves the diameter as it is.
        dbh_cm
            Diameters [cm].

        Returns
        -------
        ndarray
            Diameters [cm]; NaN stays NaN, a missing end does not clip.
        """
        low, high = self._evaluator.limits
        return np.minimum(np.maximum(np.asarray(dbh_cm, dtype=float), low[codes]), high[codes])


def read_catalogue(root: Traversable) -> Catalogue:
    """Read and validate a folder of equation tables.

    Parameters
    ----------
    root
        Folder with ``sources.toml``, ``rules.toml``, ``components.csv``, ``component_sets.csv``, ``screened.csv`` and
        one CSV per publication.

    Returns
    -------
    Catalogue
        The catalogue.

    Raises
    ------
    CatalogueError
        If the tables contradict themselves; all faults are listed with file and line.
    """
    faults = Faults()
    sources = read_sources(root, faults)
    rows = read_equations(root, [k for k, e in sources.items() if not e.get("supporting")], faults)
    sets = read_component_sets(root)
    equations = build_equations(rows, sets, read_screened(root), read_rules(root)["small_trees"]["below_cm"], faults)
    return Catalogue(equations, sources, read_components(root), tuple(raw.values for raw in sets))


@cache
def load_catalogue() -> Catalogue:
    """Return the catalogue that comes with the package (read once).

    Returns
    -------
    Catalogue
        The catalogue.
    """
    return read_catalogue(folder())


RATIO_ROWS = {
    "foliage_kg": "foliage",
    "stem_wood_kg": "merch_stem_wood",
    "stem_bark_kg": "merch_stem_bark",
    "branches_kg": "branches",
    "coarse_root_kg": "coarse_root",
}


def component_biomass(agb_kg: ArrayLike, dbh_cm: ArrayLike, wood: str) -> pd.DataFrame:
    """Split above-ground mass into components with the national ratios of Jenkins et al. (2003).

    Parameters
    ----------
    agb_kg
        Above-ground dry mass per tree [kg].
    dbh_cm
        Diameter at breast height [cm].
    wood
        ``hardwood`` or ``softwood``.

    Returns
    -------
    DataFrame
        ``foliage_kg``, ``stem_wood_kg`` and ``stem_bark_kg`` (merchantable stem), ``branches_kg`` (the remainder:
        branches, top and stump), all adding to ``agb_kg``, and ``coarse_root_kg`` on top of it.

    Raises
    ------
    ValueError
        If ``wood`` is neither.

    References
    ----------
    Jenkins et al. 2003, Forest Science 49:12-35, Table 6 and p. 23.
    """
    prefix = {"hardwood": "hw", "softwood": "sw"}.get(wood)
    if prefix is None:
        raise ValueError(f"wood is {wood!r}; give 'hardwood' or 'softwood'")
    agb, dbh = np.broadcast_arrays(np.atleast_1d(np.asarray(agb_kg, float)), np.asarray(dbh_cm, float))
    catalogue = load_catalogue()
    index = agb_kg.index if isinstance(agb_kg, pd.Series) else None
    ratios = {column: catalogue.value(f"jenkins2003_ratio_{prefix}_{name}", dbh) for column, name in RATIO_ROWS.items()}
    return pd.DataFrame({column: agb * ratio for column, ratio in ratios.items()}, index=index)
