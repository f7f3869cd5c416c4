"""Computing with equations: trees are grouped by equation, and each group runs through plain numpy."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from allometry._build import TO_KG, Equation, flat_parts
from allometry.errors import MissingInputError, NotAMassError
from allometry.forms import FORMS, FloatArray, Predictors

__all__ = ["Evaluator", "Trees", "gather"]

BLOCK = 1 << 15
"""Trees computed at once, so that the intermediate arrays stay in the processor cache."""
UNITS = {
    "dbh_cm": "diameter at breast height [cm]",
    "height_m": "height [m]",
    "wood_density_g_cm3": "wood density [g/cm3]",
    "stress": "bioclimatic stress E [-]",
    "drc_cm": "diameter at root collar [cm]",
    "d10_cm": "diameter at 10 cm height [cm]",
    "crown_base_cm": "diameter at the lowest living branch [cm]",
    "stem_height_m": "stem height [m]",
    "stump_height_m": "height above ground [m]",
    "dry_mass_fraction": "dry mass fraction of the stem [g/g]",
    "temperature_seasonality": "temperature seasonality [100 x standard deviation, deg C]",
    "water_deficit_mm_yr": "climatic water deficit [mm/yr, negative]",
    "precipitation_seasonality": "precipitation seasonality [percent]",
}
SCALE = {"dbh_mm": 10.0, "girth_cm": float(np.pi)}
"""Printed diameter per dbh in cm."""


@dataclass(frozen=True)
class Part:
    """A simple row, ready to compute."""

    diameter: str
    function: Callable[[Predictors], FloatArray]
    correction: float
    factor: float


@dataclass(frozen=True)
class Trees:
    """Measured variables of all trees, one array each or None."""

    values: Mapping[str, FloatArray | None]
    size: int

    def take(self, index: NDArray[np.intp] | slice, names: Sequence[str]) -> dict[str, FloatArray]:
        """Return the named variables of some trees."""
        return {name: array[index] for name in names if (array := self.values[name]) is not None}


class Evaluator:
    """Evaluates the rows of a catalogue by their code.

    Parameters
    ----------
    equations
        Rows in catalogue order.
    """

    def __init__(self, equations: Sequence[Equation]) -> None:
        self.equations = equations
        self._by_id = {e.equation_id: e for e in equations}
        self._plans: dict[int, tuple[Part, ...]] = {}

    @cached_property
    def limits(self) -> tuple[FloatArray, FloatArray]:
        """Smallest and largest diameter [cm] per code; infinite where none is printed, and for code -1."""
        low = np.array([e.dbh_min_cm for e in self.equations] + [np.nan])
        high = np.array([e.dbh_max_cm for e in self.equations] + [np.nan])
        return np.where(np.isnan(low), -np.inf, low), np.where(np.isnan(high), np.inf, high)

    def own_unit(self, code: int, trees: Trees) -> FloatArray:
        """Return the values of one row in its printed unit, corrected where the publication says so."""
        row = self.equations[code]
        check_inputs(row, trees)
        taken = trees.take(slice(None), row.input_names)
        predictors: dict[str, Predictors] = {}
        total = np.zeros(trees.size)
        for part in self._parts(code):
            factor = part.correction if not row.parts else part.factor
            total += part.function(_predictors(part.diameter, taken, predictors, trees.size)) * factor
        return 1.0 - total if row.form == "remainder" else total

    def mass(self, codes: NDArray[np.integer[Any]], trees: Trees) -> tuple[FloatArray, NDArray[np.bool_]]:
        """Return dry mass [kg] and the out-of-range flag per tree; code -1 gives NaN and no flag."""
        biomass = np.full(trees.size, np.nan)
        outside = np.zeros(trees.size, dtype=bool)
        for code, index in _groups(codes):
            if code < 0:
                continue
            row = self.equations[code]
            if not row.is_mass:
                raise NotAMassError(
                    f"equation {row.equation_id} {row.usable_reason or 'is no mass'}; use Catalogue.value for it"
                )
            check_inputs(row, trees)
            for start in range(0, len(index), BLOCK):
                block = index[start : start + BLOCK]
                taken = trees.take(block, row.input_names)
                mass, negative = self._mass(code, taken, len(block))
                biomass[block] = mass
                outside[block] = negative | self._outside(code, taken)
        return biomass, outside

    def _parts(self, code: int) -> tuple[Part, ...]:
        plan = self._plans.get(code)
        if plan is None:
            plan = tuple(
                Part(
                    diameter=e.diameter,
                    function=FORMS[e.form].bind(e.coefficients),
                    correction=e.correction_factor,
                    factor=e.correction_factor * TO_KG.get(e.output_unit, 1.0),
                )
                for e in flat_parts(self.equations[code], self._by_id)
            )
            self._plans[code] = plan
        return plan

    def _mass(self, code: int, taken: dict[str, FloatArray], size: int) -> tuple[FloatArray, NDArray[np.bool_]]:
        total: FloatArray | None = None
        negative = np.zeros(size, dtype=bool)
        predictors: dict[str, Predictors] = {}
        for part in self._parts(code):
            mass = part.function(_predictors(part.diameter, taken, predictors, size))
            if part.factor != 1.0:
                mass = mass * part.factor
            below = mass < 0
            if below.any():
                negative |= below
                mass = np.where(below, 0.0, mass)
            total = mass if total is None else total + mass
        return np.zeros(size) if total is None else total, negative

    def _outside(self, code: int, taken: dict[str, FloatArray]) -> NDArray[np.bool_]:
        row = self.equations[code]
        for name in ("dbh_cm", "drc_cm", "d10_cm", "crown_base_cm"):
            if name in taken:
                low, high = self.limits
                return np.asarray((taken[name] < low[code]) | (taken[name] > high[code]))
        if "height_m" in taken:
            return np.asarray((taken["height_m"] < row.h_min_m) | (taken["height_m"] > row.h_max_m))
        return np.zeros(len(next(iter(taken.values()))), dtype=bool)


def check_inputs(row: Equation, trees: Trees) -> None:
    """Raise if a measured variable of an equation was not given at all."""
    missing = [name for name in row.input_names if trees.values.get(name) is None]
    if missing:
        wanted = " and ".join(UNITS[name] for name in missing)
        raise MissingInputError(f"equation {row.equation_id} needs {wanted}; pass {', '.join(missing)}")


def gather(given: Mapping[str, ArrayLike | None], shape: tuple[int, ...]) -> Trees:
    """Bring all measured variables to one length.

    Parameters
    ----------
    given
        Arrays, scalars or None by name.
    shape
        Shape the result must at least have.

    Returns
    -------
    Trees
        The variables, flat.
    """
    arrays = {k: None if v is None else np.asarray(v, dtype=float) for k, v in given.items()}
    full = np.broadcast_shapes(shape, *(a.shape for a in arrays.values() if a is not None))
    size = int(np.prod(full, dtype=int))
    wide = {k: None if a is None else np.broadcast_to(a, full).reshape(size) for k, a in arrays.items()}
    return Trees(wide, size)


def _groups(codes: NDArray[np.integer[Any]]) -> Iterator[tuple[int, NDArray[np.intp]]]:
    """Yield each distinct code with the positions that carry it, in ascending position."""
    if len(codes) == 0:
        return
    small = codes.astype(np.int16) if codes.max() < np.iinfo(np.int16).max else codes
    order = np.argsort(small, kind="stable")
    ranked = small[order]
    starts = np.flatnonzero(np.concatenate(([True], ranked[1:] != ranked[:-1])))
    for start, stop in zip(starts, [*starts[1:], len(order)], strict=True):
        yield int(ranked[start]), order[start:stop]


def _predictors(diameter: str, taken: dict[str, FloatArray], cached: dict[str, Predictors], size: int) -> Predictors:
    if diameter not in cached:
        source = diameter if diameter in taken else "dbh_cm"
        values = taken.get(source) if diameter else None
        values = np.full(size, np.nan) if values is None else values
        scale = SCALE.get(diameter, 1.0)
        cached[diameter] = Predictors(
            values * scale if scale != 1.0 else values,
            taken.get("height_m"),
            taken.get("wood_density_g_cm3"),
            taken.get("stress"),
            taken,
        )
    return cached[diameter]
