"""A north-up grid of cells and its windows."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

__all__ = ["Bounds", "Grid", "Window"]

Bounds = tuple[float, float, float, float]
"""Left, bottom, right, top."""


@dataclass(frozen=True)
class Window:
    """A rectangle of cells: first row and column, and how many of each."""

    row: int
    column: int
    rows: int
    columns: int

    @property
    def cells(self) -> int:
        """Number of cells."""
        return self.rows * self.columns


@dataclass(frozen=True)
class Grid:
    """Cells of equal size, rows from north to south.

    Attributes
    ----------
    left, top : float
        Outer edges of the first cell, in units of the coordinate system.
    cell_x, cell_y : float
        Width and height of a cell, both positive.
    rows, columns : int
        Number of cells.
    """

    left: float
    top: float
    cell_x: float
    cell_y: float
    rows: int
    columns: int

    @property
    def bounds(self) -> Bounds:
        """Outer edges."""
        return (
            self.left,
            self.top - self.rows * self.cell_y,
            self.left + self.columns * self.cell_x,
            self.top,
        )

    @property
    def cell_area(self) -> float:
        """Area of a cell in squared units of the coordinate system."""
        return self.cell_x * self.cell_y

    @property
    def cells(self) -> int:
        """Number of cells."""
        return self.rows * self.columns

    def part(self, window: Window) -> Grid:
        """Return the grid of a window."""
        return Grid(
            self.left + window.column * self.cell_x,
            self.top - window.row * self.cell_y,
            self.cell_x,
            self.cell_y,
            window.rows,
            window.columns,
        )

    def windows(self, rows: int, columns: int) -> Iterator[Window]:
        """Yield windows of at most so many rows and columns, row by row; together they hold every cell once."""
        for row in range(0, self.rows, rows):
            for column in range(0, self.columns, columns):
                yield Window(row, column, min(rows, self.rows - row), min(columns, self.columns - column))

    def around(self, bounds: Bounds) -> Grid:
        """Return the cells that cover some bounds, on the same lines; they may reach beyond this grid.

        A bound that lies on a line up to rounding of coordinates stays there.
        """
        left, bottom, right, top = bounds
        first = _floor((left - self.left) / self.cell_x)
        last = max(_ceil((right - self.left) / self.cell_x), first + 1)
        upper = _floor((self.top - top) / self.cell_y)
        lower = max(_ceil((self.top - bottom) / self.cell_y), upper + 1)
        return self.part(Window(upper, first, lower - upper, last - first))

    def offset(self, other: Grid) -> tuple[int, int] | None:
        """Return by how many rows and columns another grid starts later, or None if its lines are not the same."""
        same = math.isclose(self.cell_x, other.cell_x, rel_tol=1e-9) and math.isclose(
            self.cell_y, other.cell_y, rel_tol=1e-9
        )
        down, along = (self.top - other.top) / self.cell_y, (other.left - self.left) / self.cell_x
        row, column = round(down), round(along)
        if not same or abs(down - row) > _ROUNDING or abs(along - column) > _ROUNDING:
            return None
        return row, column


# Coordinates of some millions of metres are kept to about a nanometre; this is far above and far below a cell.
_ROUNDING = 1e-6


def _floor(value: float) -> int:
    near = round(value)
    return near if abs(value - near) < _ROUNDING else math.floor(value)


def _ceil(value: float) -> int:
    near = round(value)
    return near if abs(value - near) < _ROUNDING else math.ceil(value)
