"""Which parts of a net are cells that a decomposition can use, and on which lanes and columns they stand.

Public: CellTable, cell_table, columns_of, MZI, GAP.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.errors import NoClosedForm
from meshctl.mesh.graph import Net
from meshctl.optics.elements import COUPLER, CROSSING, PHASE
from meshctl.optics.feedforward import Circuit
from meshctl.optics.kernels import filled, given, int32, sized_kernel, void

MZI, GAP = 0, 1
OUTER, SPLIT1, INNER, SPLIT2 = range(4)  # columns of `element` for MZI
GAP_PHASE, GAP_COUPLER = 0, 1  # and for GAP


@dataclass(frozen=True, eq=False)
class CellTable:
    """Cells in light order, and the loose one-lane parts between and behind them."""

    form: np.ndarray  # u8[C], MZI or GAP
    cell: np.ndarray  # i32[C], row in the net
    lane: np.ndarray  # i32[C], upper lane; the lower is the next
    column: np.ndarray  # i32[C], earliest column
    element: np.ndarray  # i32[C, 4], -1 where the form has fewer
    event: np.ndarray  # i32[V], light order: c for cell c, -1 - e for loose element e


@sized_kernel(void(given(int32), given(int32), filled(int32), filled(int32)))
def _columns(lane_a, lane_b, depth, column):  # type: ignore[no-untyped-def]
    for i in range(len(lane_a)):
        a, b = lane_a[i], lane_b[i]
        column[i] = max(depth[a], depth[b])
        depth[a] = column[i] + 1
        depth[b] = column[i] + 1


def columns_of(lane_a: np.ndarray, lane_b: np.ndarray, n_lanes: int) -> np.ndarray:
    """Earliest column of every two-lane step, given in light order."""
    column = np.empty(len(lane_a), np.int32)
    _columns(len(lane_a), lane_a.astype(np.int32), lane_b.astype(np.int32), np.zeros(n_lanes, np.int32), column)
    return column


def _form(net: Net, rows: np.ndarray) -> int | None:
    kinds, moved = net.kind[rows].tolist(), (net.setting_of[rows] >= 0).tolist()
    if kinds == [PHASE, COUPLER, PHASE, COUPLER] and moved == [True, False, True, False]:
        return MZI
    if kinds == [PHASE, COUPLER] and moved == [True, True]:
        return GAP
    return None


def cell_table(net: Net, circuit: Circuit) -> CellTable:
    """Sort a loop-free net into cells and loose parts.

    Raises
    ------
    NoClosedForm
        Where the net holds what no decomposition can use, with the part's name.
    """
    n = len(net.inputs)
    if len(net.outputs) != n or not np.array_equal(circuit.output_lane, np.arange(n)):
        raise NoClosedForm(
            f"no closed form for a net of {n} inputs and {len(net.outputs)} outputs whose lanes do not run "
            "straight from input k to output k"
        )
    order = circuit.element
    cell = net.cell_of[order]
    inside = order[cell >= 0]
    by_cell = inside[np.argsort(net.cell_of[inside], kind="stable")]
    sizes = np.bincount(net.cell_of[inside], minlength=net.n_cells)
    starts = np.cumsum(sizes) - sizes
    element = np.full((net.n_cells, 4), -1, np.int32)
    forms = np.full(net.n_cells, 255, np.uint8)
    # cells of one size are compared with both forms at once
    for form, kinds, moved in (
        (MZI, (PHASE, COUPLER, PHASE, COUPLER), (True, False, True, False)),
        (GAP, (PHASE, COUPLER), (True, True)),
    ):
        candidates = np.flatnonzero(sizes == len(kinds))
        if not len(candidates):
            continue
        rows = by_cell[starts[candidates, None] + np.arange(len(kinds))]
        fits = (net.kind[rows] == np.array(kinds)).all(1)
        fits &= ((net.setting_of[rows] >= 0) == np.array(moved)).all(1)
        fits &= circuit.element_lane_a[rows[:, 1]] == circuit.element_lane_a[rows[:, 0]]
        fits &= circuit.element_lane_b[rows[:, 1]] == circuit.element_lane_a[rows[:, 0]] + 1
        if form == MZI:
            fits &= circuit.element_lane_a[rows[:, 2]] == circuit.element_lane_a[rows[:, 0]]
            fits &= circuit.element_lane_b[rows[:, 3]] == circuit.element_lane_b[rows[:, 1]]
        element[candidates[fits], : len(kinds)] = rows[fits]
        forms[candidates[fits]] = form
    odd = np.flatnonzero(forms == 255)
    if len(odd):
        raise NoClosedForm(
            f"no closed form: cell '{net.names.cells[int(odd[0])]}' is neither outer phase, coupler, inner phase, "
            "coupler nor phase and tunable coupler, both on the upper of two neighbouring lanes"
        )
    for e in order[(cell < 0) & (circuit.element_lane_b[order] >= 0)].tolist():
        live = max(int(circuit.element_lane_a[e]), int(circuit.element_lane_b[e])) < n
        if live or net.kind[e] == CROSSING:
            raise NoClosedForm(f"no closed form: '{net.names.elements[e]}' joins two lanes outside any cell")
    return _in_light_order(net, circuit, element, forms)


def _in_light_order(net: Net, circuit: Circuit, element: np.ndarray, forms: np.ndarray) -> CellTable:
    order = circuit.element
    last = np.where(forms == MZI, element[:, SPLIT2], element[:, GAP_COUPLER])
    is_last = np.zeros(net.n_elements, bool)
    is_last[last] = True
    loose = (net.cell_of[order] < 0) & (circuit.element_lane_b[order] < 0)
    events = order[is_last[order] | loose]
    cells = net.cell_of[events[is_last[events]]]
    position = np.full(net.n_cells + 1, -1, np.int32)  # the last one is that of parts in no cell
    position[cells] = np.arange(len(cells))
    event = np.where(net.cell_of[events] >= 0, position[net.cell_of[events]], -1 - events).astype(np.int32)
    lane = circuit.element_lane_a[last[cells]]
    column = columns_of(lane, lane + 1, circuit.n_lanes)
    return CellTable(forms[cells], cells.astype(np.int32), lane, column, element[cells], event)
