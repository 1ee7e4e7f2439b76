"""The closed form: recognise a rectangular or triangular mesh, decompose, put the steps on its cells.

Public: closed_form, placements.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from meshctl.errors import NoClosedForm
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.response import Response
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
    response = Response(net, as_built)
    circuit, n = response.circuit, len(net.inputs)
    table = cell_table(net, circuit)
    best: tuple[float, Fitted] | None = None
    decomposed: dict[str, Steps] = {}
    for name, first in placements(table, n):
        if name not in decomposed:
            decomposed[name] = DECOMPOSITIONS[name](target.matrix)
        steps = decomposed[name]
        fitted = fit_cells(
            net, as_built, circuit, table, steps, _steps_on_cells(table, steps, first, n), reach, target.free
        )
        error = matrix_error(response.matrix(fitted.settings), target.matrix, target.free)
        if best is None or error < best[0]:
            best = error, fitted
        if not fitted.shortfalls:
            break
    if best is None:
        raise NoClosedForm(
            f"no closed form: the {len(table.cell)} cells of this mesh of {n} modes hold neither a rectangle of "
            f"{n} columns nor a triangle of {max(2 * n - 3, 1)}"
        )
    error, fitted = best
    if fitted.shortfalls:
        reason = "out_of_range"
    elif error > EXACT:
        reason = "no_output_phases" if len(fitted.bare_lanes) else "losses"
    else:
        reason = "exact"
    counts = {"cells": len(table.cell), "out_of_range": len(fitted.shortfalls)}
    return Solution(fitted.settings, 1.0 - error**2, error, reason, fitted.shortfalls, fitted.free_settings, counts)
