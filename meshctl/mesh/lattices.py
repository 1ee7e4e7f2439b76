"""Regular meshes by name: which cells stand where, and what is linked to what.

A lattice says where its cells stand (`Plan2D`: column and upper lane of each); `assemble` turns any such
plan into the arrays of a `Net`. To add a lattice write its plan, add its line to LATTICES, and its test.
Public: LATTICES, PLANE_SIZES, Layout, CellForm, CELL_FORMS, assemble, LatticeNames.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from meshctl.errors import OutOfRange
from meshctl.mesh.graph import FREE, Names
from meshctl.mesh.parts import Part
from meshctl.mesh.plane import PlaneLattice, hexagonal, hexagonal_rows, square, trigrid
from meshctl.optics.elements import COUPLER, CROSSING, GUIDE, LOSS, PHASE


@dataclass(frozen=True)
class CellForm:
    """What one cell is made of; ports count from the cell's first port."""

    roles: tuple[str, ...]
    kinds: tuple[int, ...]
    settable: tuple[bool, ...]
    links: tuple[tuple[int, int], ...]
    enter: tuple[int, int]  # ports of the upper and lower lane, light entering
    leave: tuple[int, int]

    @property
    def port_counts(self) -> np.ndarray:
        return np.array([4 if kind == COUPLER else 2 for kind in self.kinds])


CELL_FORMS = {
    "mzi": CellForm(
        ("outer", "split1", "inner", "split2"),
        (PHASE, COUPLER, PHASE, COUPLER),
        (True, False, True, False),
        ((1, 2), (4, 6), (7, 8), (5, 9)),
        (0, 3),
        (10, 11),
    ),
    "gap": CellForm(("phase", "coupler"), (PHASE, COUPLER), (True, True), ((1, 2),), (0, 3), (4, 5)),
}
SWITCH_FORMS = {
    "mzi": CellForm(
        ("split1", "inner", "split2"),
        (COUPLER, PHASE, COUPLER),
        (False, True, False),
        ((2, 4), (5, 6), (3, 7)),
        (0, 1),
        (8, 9),
    ),
    "gap": CellForm(("coupler",), (COUPLER,), (True,), (), (0, 1), (2, 3)),
}


@dataclass(frozen=True)
class Layout:
    """Where the cells of a loop-free lattice stand, in lanes and columns from 0."""

    lanes: int
    columns: int
    column: np.ndarray  # i64[C]
    upper: np.ndarray  # i64[C], lane that enters port a1
    lower: np.ndarray  # i64[C], lane that enters port a2
    inputs: tuple[str, ...]  # name of each lane's entrance; "" is dark
    outputs: tuple[str, ...]
    cell_names: tuple[str, ...] | None = None  # None: c{column}_{row}
    forms: str = "cell"  # "cell": CELL_FORMS, "switch": SWITCH_FORMS
    crossing_gap: np.ndarray = field(default_factory=lambda: np.empty(0, np.int64))  # behind which column
    crossing_step: np.ndarray = field(default_factory=lambda: np.empty(0, np.int64))  # order within the gap
    crossing_lane: np.ndarray = field(default_factory=lambda: np.empty(0, np.int64))  # upper of the two that cross


def _in_light_order(column: np.ndarray, upper: np.ndarray) -> np.ndarray:
    return np.lexsort((upper, column))


def _alternating(modes: int, columns: range) -> tuple[np.ndarray, np.ndarray]:
    column = [c for c in columns for _ in range(c % 2, modes - 1, 2)]
    upper = [m for c in columns for m in range(c % 2, modes - 1, 2)]
    return np.array(column, np.int64), np.array(upper, np.int64)


def _numbered(word: str, count: int) -> tuple[str, ...]:
    return tuple(f"{word}{k + 1}" for k in range(count))


def rectangular(modes: int, spare: int = 0) -> Layout:
    """N columns of alternating cells and `spare` more (Clements et al. 2016)."""
    column, upper = _alternating(modes, range(modes + spare))
    names = _numbered("in", modes), _numbered("out", modes)
    # two modes meet in every second column only; the empty columns are not drawn
    if modes == 2:
        column //= 2
    columns = int(column.max(initial=-1)) + 1
    return Layout(modes, columns, column, upper, upper + 1, *names)


def triangular(modes: int, spare: int = 0) -> Layout:
    """2N - 3 columns in a triangle (Reck et al. 1994), then `spare` alternating columns."""
    pairs = [(j + 2 * k, j) for k in range(modes - 1) for j in range(modes - 1 - k)]
    column = np.array([c for c, _ in pairs], np.int64)
    upper = np.array([m for _, m in pairs], np.int64)
    order = _in_light_order(column, upper)
    column, upper = column[order], upper[order]
    depth = 2 * modes - 3
    more_column, more_upper = _alternating(modes, range(depth, depth + spare))
    column, upper = np.r_[column, more_column], np.r_[upper, more_upper]
    return Layout(modes, depth + spare, column, upper, upper + 1, _numbered("in", modes), _numbered("out", modes))


def tree(modes: int, spare: int = 0) -> Layout:
    """One input split to N outputs by a binary tree; the cells' second entrances are dark."""
    if modes & (modes - 1):
        raise OutOfRange(
            f"a tree of {modes} outputs is not binary",
            remedy=f"take a power of two, such as {1 << modes.bit_length()}",
        )
    _no_spare("tree", spare)
    levels = modes.bit_length() - 1
    column, upper, lower = [], [], []
    for level in range(levels):
        stride = modes >> level
        for first in range(0, modes, stride):
            column.append(level)
            upper.append(first)
            lower.append(first + stride // 2)
    inputs = ("in1", *[""] * (modes - 1))
    return Layout(modes, levels, np.array(column), np.array(upper), np.array(lower), inputs, _numbered("out", modes))


def switch(modes: int = 4, spare: int = 0) -> Layout:
    """The add-drop switch: two rows meet two columns, a tunable coupler where each meets each.

    Lanes are row 1, row 2, column 1, column 2. Bar leaves a row in its row and a column in its column.
    """
    if modes != 4:
        raise OutOfRange(f"a switch has 4 modes, not {modes}", remedy="leave --modes out")
    _no_spare("switch", spare)
    return Layout(
        4,
        3,
        np.array([0, 1, 1, 2]),
        np.array([0, 0, 1, 1]),
        np.array([2, 3, 2, 3]),
        ("in1", "in2", "add1", "add2"),
        ("out1", "out2", "drop1", "drop2"),
        ("x11", "x12", "x21", "x22"),
        "switch",
    )


def _crossings(order: np.ndarray) -> list[tuple[int, int]]:
    """(step, upper lane) of waveguide crossings that bring the light of lane m to lane order[m].

    Alternating columns of neighbours that cross; as many crossings as pairs out of order (odd-even
    transposition, Knuth 1998, section 5.3.4).
    """
    goes, steps = np.array(order), []
    step = 0
    while (np.diff(goes) < 0).any():
        upper = np.arange(step % 2, len(goes) - 1, 2)
        upper = upper[goes[upper] > goes[upper + 1]]
        goes[upper], goes[upper + 1] = goes[upper + 1], goes[upper]
        steps += [(step, int(m)) for m in upper]
        step += 1
    return steps


def benes(modes: int, spare: int = 0) -> Layout:
    """2 log2 N - 1 columns of N / 2 cells that give every permutation (Benes 1964).

    Behind a column of the first half, in blocks of N, N/2, .. lanes, upper leaving lanes go to the upper half of
    the block and lower ones to the lower half; the second half is its mirror image. Lanes change places by
    waveguide crossings.
    """
    if modes & (modes - 1):
        raise OutOfRange(
            f"a benes mesh of {modes} modes is not binary",
            remedy=f"take a power of two, such as {1 << modes.bit_length()}",
        )
    _no_spare("benes", spare)
    levels = modes.bit_length() - 1
    columns = 2 * levels - 1
    lanes = np.arange(modes)
    gaps: list[tuple[int, int, int]] = []
    for level in range(levels - 1):
        block = modes >> level
        spread = lanes // block * block + lanes % 2 * (block // 2) + lanes % block // 2
        gaps += [(level, step, m) for step, m in _crossings(spread)]
        gaps += [(columns - 2 - level, step, m) for step, m in _crossings(np.argsort(spread))]
    gap, step, lane = np.array(sorted(gaps), np.int64).reshape(-1, 3).T
    column = np.repeat(np.arange(columns), modes // 2)
    upper = np.tile(np.arange(0, modes, 2), columns)
    return Layout(
        modes,
        columns,
        column,
        upper,
        upper + 1,
        _numbered("in", modes),
        _numbered("out", modes),
        crossing_gap=gap,
        crossing_step=step,
        crossing_lane=lane,
    )


def _no_spare(shape: str, spare: int) -> None:
    if spare:
        raise OutOfRange(f"a {shape} takes no spare columns, not {spare}", remedy="leave --spare out for this shape")


def hexagons(rings: int | None = None, rows: int | None = None, columns: int | None = None) -> PlaneLattice:
    """Hexagons in rings round one, or in rows."""
    if rings is not None:
        return hexagonal(rings)
    assert rows is not None
    assert columns is not None
    return hexagonal_rows(rows, columns)


LATTICES: dict[str, Callable[..., Layout | PlaneLattice]] = {
    "rectangular": rectangular,
    "triangular": triangular,
    "tree": tree,
    "switch": switch,
    "benes": benes,
    "hexagonal": hexagons,
    "square": square,
    "trigrid": trigrid,
}
PLANE_SIZES = {  # what a lattice with loops is given by, each a way of its own
    "hexagonal": (("rings",), ("rows", "columns")),
    "square": (("rows", "columns"),),
    "trigrid": (("rows", "columns"),),
}


class LatticeNames(Names):
    """CELL.ROLE by arithmetic, so that a large mesh holds no list of strings until one is asked for."""

    def __init__(self, layout: Layout, form: CellForm, part_order: np.ndarray, loose: tuple[str, ...]) -> None:
        self.layout, self.form, self.part_order, self.loose = layout, form, part_order, loose

    def make_cells(self) -> list[str]:
        if self.layout.cell_names is not None:
            return list(self.layout.cell_names)
        column = self.layout.column
        starts = np.r_[True, column[1:] != column[:-1]]
        first = np.maximum.accumulate(np.where(starts, np.arange(len(column)), 0))
        row = np.arange(len(column)) - first
        return [f"c{c}_{r}" for c, r in zip((column + 1).tolist(), (row + 1).tolist(), strict=True)]

    def make_elements(self) -> list[str]:
        cells, n_cells = self.cells, len(self.layout.column)
        names: list[str] = []
        for part in self.part_order.tolist():
            if part < n_cells:
                names.extend(f"{cells[part]}.{role}" for role in self.form.roles)
            else:
                names.append(self.loose[part - n_cells])
        return names


@dataclass(frozen=True)
class Assembly:
    """The arrays of a net made from a layout."""

    kind: np.ndarray
    nominal: np.ndarray
    length_um: np.ndarray
    settable: np.ndarray
    cell_of: np.ndarray
    cell_xy_um: np.ndarray
    port_start: np.ndarray
    mate: np.ndarray
    externals: dict[str, int]
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    names: Names
    special: dict[int, Part] = field(default_factory=dict)  # parts that reflect or are measured, by element


def _skipped(layout: Layout) -> tuple[np.ndarray, np.ndarray]:
    """(column, lane) of every lane that passes a column without meeting a cell."""
    met = np.zeros((layout.columns, layout.lanes), bool)
    met[layout.column, layout.upper] = True
    met[layout.column, layout.lower] = True
    where = np.argwhere(~met)
    return where[:, 0], where[:, 1]


def assemble(
    layout: Layout,
    cell: str,
    pitch_um: tuple[float, float],
    *,
    balance_db: float = 0.0,
    output_phases: bool = True,
    guides: bool = True,
) -> Assembly:
    """Cells, dummies, crossings and output parts of a loop-free lattice as arrays.

    Parameters
    ----------
    layout : Layout
    cell : "mzi" or "gap"
    pitch_um : column and lane pitch
    balance_db : loss of the dummy put wherever a lane skips a column, 0: none
    output_phases : a phase shifter `outK.phase` behind every output
    guides : a waveguide `outK.guide` as long as all columns on every lane

    Cost: a few numpy sorts over cells; 10^6 elements take about a second.
    """
    form = (CELL_FORMS if layout.forms == "cell" else SWITCH_FORMS)[cell]
    n_cells, n_lanes = len(layout.column), layout.lanes
    skip_column, skip_lane = _skipped(layout) if balance_db > 0.0 else (np.empty(0, int),) * 2
    lanes = np.arange(n_lanes)
    ends: list[tuple[str, int]] = []
    if guides:
        ends.append(("guide", GUIDE))
    if output_phases:
        ends.append(("phase", PHASE))
    # parts: cells, dummies, crossings between columns, then the parts at the end of each lane
    n_skips, n_crossings = len(skip_lane), len(layout.crossing_gap)
    between = layout.crossing_gap + (layout.crossing_step + 1.0) / (layout.crossing_step.max(initial=0) + 2.0)
    column = np.r_[layout.column, skip_column, between, np.repeat(layout.columns + np.arange(len(ends)), n_lanes)]
    first_lane = np.r_[layout.upper, skip_lane, layout.crossing_lane, np.tile(lanes, len(ends))].astype(np.int64)
    loose = (
        tuple(f"d{c + 1}_{m + 1}" for c, m in zip(skip_column, skip_lane, strict=True))
        + tuple(
            f"x{c + 1}_{k + 1}_{m + 1}"
            for c, k, m in zip(layout.crossing_gap, layout.crossing_step, layout.crossing_lane, strict=True)
        )
        + tuple(f"{name or f'dark{m + 1}'}.{role}" for role, _ in ends for m, name in enumerate(layout.outputs))
    )
    loose_kind = np.r_[
        np.full(n_skips, LOSS), np.full(n_crossings, CROSSING), np.repeat([kind for _, kind in ends], n_lanes)
    ].astype(np.uint8)
    n_parts = n_cells + len(loose)
    is_cell = np.arange(n_parts) < n_cells
    order = _in_light_order(column, first_lane)
    n_roles, n_ports = len(form.roles), int(form.port_counts.sum())

    size = np.where(is_cell, n_roles, 1)[order]
    ports = np.r_[np.full(n_cells, n_ports), np.where(loose_kind == CROSSING, 4, 2)][order]
    element_at = np.empty(n_parts, np.int64)
    port_at = np.empty(n_parts, np.int64)
    element_at[order] = np.cumsum(size) - size
    port_at[order] = np.cumsum(ports) - ports
    n_elements, n_all_ports = int(size.sum()), int(ports.sum())

    kind = np.empty(n_elements, np.uint8)
    settable = np.zeros(n_elements, bool)
    cell_of = np.full(n_elements, FREE, np.int32)
    in_cells = element_at[:n_cells, None] + np.arange(n_roles)
    kind[in_cells] = np.array(form.kinds, np.uint8)
    settable[in_cells] = np.array(form.settable)
    cell_of[in_cells] = np.arange(n_cells, dtype=np.int32)[:, None]
    kind[element_at[n_cells:]] = loose_kind
    settable[element_at[n_cells:]] = loose_kind == PHASE
    nominal = np.where(kind == COUPLER, np.pi / 4, np.where(kind == LOSS, balance_db, 0.0))
    nominal[settable] = 0.0
    length = np.where(kind == GUIDE, layout.columns * pitch_um[0], 0.0)
    count = np.where((kind == COUPLER) | (kind == CROSSING), 4, 2)
    port_start = np.r_[0, np.cumsum(count)].astype(np.int32)

    mate = np.full(n_all_ports, FREE, np.int32)
    for a, b in form.links:
        mate[port_at[:n_cells] + a] = port_at[:n_cells] + b
        mate[port_at[:n_cells] + b] = port_at[:n_cells] + a
    # each lane meets its parts in column order: link each leaving port to the next entering one
    loose_at = port_at[n_cells:]
    crossing_at = loose_at[n_skips : n_skips + n_crossings]
    lane = np.r_[layout.upper, layout.lower, first_lane[n_cells:], layout.crossing_lane + 1]
    when = np.r_[layout.column, layout.column, column[n_cells:], between]
    enter = np.r_[port_at[:n_cells] + form.enter[0], port_at[:n_cells] + form.enter[1], loose_at, crossing_at + 1]
    leave = np.r_[
        port_at[:n_cells] + form.leave[0],
        port_at[:n_cells] + form.leave[1],
        loose_at + np.where(loose_kind == CROSSING, 2, 1),
        crossing_at + 3,
    ]
    along = np.lexsort((when, lane))
    same = lane[along][1:] == lane[along][:-1]
    out, into = leave[along][:-1][same], enter[along][1:][same]
    mate[out], mate[into] = into, out
    start = np.searchsorted(lane[along], lanes)
    stop = np.searchsorted(lane[along], lanes, side="right") - 1
    externals = {n: int(enter[along][k]) for n, k in zip(layout.inputs, start, strict=True) if n}
    externals |= {n: int(leave[along][k]) for n, k in zip(layout.outputs, stop, strict=True) if n}

    xy = np.column_stack([(layout.column + 0.5) * pitch_um[0], -0.5 * (layout.upper + layout.lower) * pitch_um[1]])
    return Assembly(
        kind,
        nominal,
        length,
        settable,
        cell_of,
        xy,
        port_start,
        mate,
        externals,
        tuple(n for n in layout.inputs if n),
        tuple(n for n in layout.outputs if n),
        LatticeNames(layout, form, order, loose),
    )
