"""Lattices whose light runs both ways as nets: every edge of a plane graph becomes a cell of parts.

A gap cell is a tunable coupler with a phase on both arms before it, moved alike; a Mach-Zehnder cell has two
fixed couplers and a phase on each arm between them: moved alike they are a common phase, moved apart they
switch. A guide of one side's length closes each arm. Ends are p1, p2, .. clockwise from the top; light may
enter and leave by any of them.
Public: assemble_plane, LOOP_FORMS.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import FREE, Names
from meshctl.mesh.lattices import Assembly, CellForm
from meshctl.mesh.plane import PlaneLattice
from meshctl.optics.elements import COUPLER, GUIDE, PHASE


@dataclass(frozen=True)
class LoopForm(CellForm):
    """A cell whose parts may share settings: `setting` counts within the cell, -1 where nothing moves a part."""

    setting: tuple[int, ...] = ()


LOOP_FORMS = {
    "mzi": LoopForm(
        ("split1", "upper", "lower", "split2", "guide1", "guide2"),
        (COUPLER, PHASE, PHASE, COUPLER, GUIDE, GUIDE),
        (False, True, True, False, False, False),
        ((2, 4), (3, 6), (5, 8), (7, 9), (10, 12), (11, 14)),
        (0, 1),
        (13, 15),
        (-1, 0, 1, -1, -1, -1),
    ),
    "gap": LoopForm(
        ("common1", "common2", "coupler", "guide1", "guide2"),
        (PHASE, PHASE, COUPLER, GUIDE, GUIDE),
        (True, True, True, False, False),
        ((1, 4), (3, 5), (6, 8), (7, 10)),
        (0, 2),
        (9, 11),
        (0, 0, 1, -1, -1),
    ),
}


class PlaneNames(Names):
    """c1, c2, .. in reading order and CELL.ROLE, made when first asked for."""

    def __init__(self, n_cells: int, roles: tuple[str, ...]) -> None:
        self.n_cells, self.roles = n_cells, roles

    def make_cells(self) -> list[str]:
        return [f"c{k + 1}" for k in range(self.n_cells)]

    def make_elements(self) -> list[str]:
        return [f"{cell}.{role}" for cell in self.cells for role in self.roles]


def assemble_plane(lattice: PlaneLattice, cell: str, side_um: float) -> tuple[Assembly, np.ndarray]:
    """The arrays of a net with a cell on every edge of a plane graph, and setting_of [E] in the order of cells.

    Parameters
    ----------
    lattice : PlaneLattice
    cell : "mzi" or "gap"
    side_um : length of the guides of a cell
    """
    form, n = LOOP_FORMS[cell], lattice.n_cells
    n_ports, n_roles = int(form.port_counts.sum()), len(form.roles)
    at = n_ports * np.arange(n)
    mate = np.full(n * n_ports, FREE, np.int32)
    for a, b in form.links:
        mate[at + a], mate[at + b] = at + b, at + a
    # ports of the lattice: 4 cell + (0: a1, 1: a2, 2: b1, 3: b2)
    outer = (at[:, None] + np.array([*form.enter, *form.leave])).ravel()
    linked = np.flatnonzero(lattice.mate >= 0)
    mate[outer[linked]] = outer[lattice.mate[linked]]
    kind = np.tile(np.array(form.kinds, np.uint8), n)
    settable = np.tile(np.array(form.settable), n)
    own = np.tile(np.array(form.setting), n)
    moved = max(form.setting) + 1
    setting_of = np.where(own >= 0, own + moved * np.repeat(np.arange(n), n_roles), FREE).astype(np.int32)
    externals = {f"p{k + 1}": int(outer[p]) for k, p in enumerate(lattice.rim.tolist())}
    assembly = Assembly(
        kind,
        np.where((kind == COUPLER) & ~settable, np.pi / 4, 0.0),
        np.where(kind == GUIDE, side_um, 0.0),
        settable,
        np.repeat(np.arange(n, dtype=np.int32), n_roles),
        lattice.cell_xy * side_um,
        np.concatenate([[0], np.cumsum(np.tile(form.port_counts, n))]).astype(np.int32),
        mate,
        externals,
        tuple(externals),
        tuple(externals),
        PlaneNames(n, form.roles),
    )
    return assembly, setting_of
