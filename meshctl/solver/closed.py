"""The closed form: recognise a rectangular or triangular mesh, decompose, put the steps on its cells.

Public: ClosedForm, closed_form, placements.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from functools import cached_property

import numpy as np

from meshctl.errors import NoClosedForm
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.response import Response
from meshctl.optics.elements import LOSS
from meshctl.optics.measures import matrix_error
from meshctl.solver.cells import CellTable, cell_table, columns_of
from meshctl.solver.correct import Fitted, fit_cells
from meshctl.solver.decompose import DECOMPOSITIONS, Steps
from meshctl.solver.reach import Reach
from meshctl.solver.solution import Solution
from meshctl.solver.target import Target

EXACT = 1e-9  # matrix error below which the closed form counts as exact: common rounding of 1024 modes


def _grid(lane: np.ndarray, column: np.ndarray, n_lanes: int, columns: int) -> np.ndarray:
    grid = np.full((columns, n_lanes), -1, np.int64)
    grid[column, lane] = np.arange(len(lane))
    return grid


def placements(table: CellTable, n: int) -> Iterator[tuple[str, int]]:
    """(decomposition, first column) of every way in which the steps of a decomposition find their cells.

    Spare columns leave several; the first has all spare columns at the end.
    """
    if not len(table.cell):
        return
    columns = int(table.column.max()) + 1
    cells = _grid(table.lane, table.column, n, columns) >= 0
    unit = np.eye(n, dtype=complex)
    for name, decompose in DECOMPOSITIONS.items():
        steps = decompose(unit)
        column = columns_of(steps.lane, steps.lane + 1, n)
        depth = int(column.max()) + 1
        needed = _grid(steps.lane, column, n, depth) >= 0
        for first in range(columns - depth + 1):
            if cells[first : first + depth][needed].all():
                yield name, first


def _steps_on_cells(table: CellTable, steps: Steps, first: int, n: int) -> np.ndarray:
    column = columns_of(steps.lane, steps.lane + 1, n)
    grid = _grid(steps.lane, column, n, int(max(column.max() + first, table.column.max())) + 1)
    at = table.column - first
    step = grid[np.maximum(at, 0), table.lane]
    step[at < 0] = -1
    return step


class ClosedForm:
    """Decompositions of one target, ready to be put on one chip's cells again and again.

    Parameters
    ----------
    net : Net
    as_built : AsBuilt
    target : Target, unitary

    Raises
    ------
    NoClosedForm
        For nets that no decomposition fits.
    """

    def __init__(self, net: Net, as_built: AsBuilt, target: Target) -> None:
        self.net, self.as_built, self.target = net, as_built, target
        self.response = Response(net, as_built)
        n = len(net.inputs)
        if self.response.loops:
            raise NoClosedForm(
                "no closed form: this net has a loop, a link against the light or a part that reflects",
                remedy="ask for a refinement with --refine, or set its cells by routes",
            )
        self.table = cell_table(net, self.response.circuit)
        self.places: list[tuple[Steps, np.ndarray]] = []
        decomposed: dict[str, Steps] = {}
        for name, first in placements(self.table, n):
            if name not in decomposed:
                decomposed[name] = DECOMPOSITIONS[name](target.matrix)
            steps = decomposed[name]
            self.places.append((steps, _steps_on_cells(self.table, steps, first, n)))
        if not self.places:
            raise NoClosedForm(
                f"no closed form: the {len(self.table.cell)} cells of this mesh of {n} modes hold neither a rectangle "
                f"of {n} columns nor a triangle of {max(2 * n - 3, 1)}"
            )

    @cached_property
    def n_cells(self) -> int:
        return len(self.table.cell)

    def fit(self, reach: Reach, place: int = 0, flip: np.ndarray | None = None) -> Fitted:
        """Settings for one of the places, with some inner phases taken negative."""
        steps, step_of = self.places[place]
        return fit_cells(
            self.net, self.as_built, self.response.circuit, self.table, steps, step_of, reach, self.target.free, flip
        )

    def error(self, fitted: Fitted) -> float:
        """Matrix error of fitted settings on the chip as it is known."""
        return matrix_error(self.response.matrix(fitted.settings), self.target.matrix, self.target.free)

    def _left_over(self, fitted: Fitted) -> str:
        """Why settings that are all where they are wanted are not exact: what is left with losses off tells."""
        net, as_built = self.net, self.as_built
        nominal = np.where(net.kind == LOSS, 0.0, net.nominal)
        quiet = Response(
            replace(net, nominal=nominal, guide_loss_db_per_cm=0.0),
            replace(as_built, loss_db=np.zeros(net.n_elements)),
        ).matrix(fitted.settings)
        target, free = self.target.matrix, self.target.free
        if matrix_error(quiet, target, free) <= EXACT:
            return "losses"
        if len(fitted.bare_lanes) and free in ("nothing", "inputs"):
            turned = "outputs" if free == "nothing" else "both"
            if matrix_error(quiet, target, turned) <= EXACT:
                return "no_output_phases"
        return "fixed_parts"

    def best_place(self, reach: Reach) -> int:
        """The first place without shortfalls, else that of least error."""
        errors = []
        for place in range(len(self.places)):
            fitted = self.fit(reach, place)
            if not fitted.shortfalls:
                return place
            errors.append(self.error(fitted))
        return int(np.argmin(errors))

    def solution(self, reach: Reach, flip: np.ndarray | None = None) -> Solution:
        """Settings by decomposition and local correction; what lies out of range is listed in `shortfalls`."""
        fitted = self.fit(reach, self.best_place(reach), flip)
        error = self.error(fitted)
        if fitted.shortfalls:
            reason = "out_of_range"
        elif error > EXACT:
            reason = self._left_over(fitted)
        else:
            reason = "exact"
        counts = {"cells": self.n_cells, "out_of_range": len(fitted.shortfalls)}
        return Solution(fitted.settings, 1.0 - error**2, error, reason, fitted.shortfalls, fitted.free_settings, counts)


def closed_form(net: Net, as_built: AsBuilt, target: Target, reach: Reach) -> Solution:
    """Settings by decomposition and local correction.

    Parameters
    ----------
    target : Target, unitary
    reach : Reach of the settings

    Returns
    -------
    Solution
        What lies out of range is listed in `shortfalls`, the nearest reachable value used.

    Raises
    ------
    NoClosedForm
        For nets that no decomposition fits.

    Cost: O(N^3) for N modes.
    """
    return ClosedForm(net, as_built, target).solution(reach)
