"""Phase that a moving coupler drags along: two phase parts behind each coupler whose law says so.

Their phase is no setting: it follows the coupler's travel, and whoever knows the volts writes it into
`AsBuilt.error_rad` of these parts.
Public: with_drag, drag_rows, DRAG.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from meshctl.mesh.graph import FREE, ListedNames, Net
from meshctl.mesh.lattices import Assembly
from meshctl.optics.elements import COUPLER, PHASE

DRAG = ".drag"  # element NAME.drag1 and NAME.drag2 stand behind ports b1 and b2 of element NAME


def with_drag(assembly: Assembly, setting_of: np.ndarray) -> tuple[Assembly, np.ndarray]:
    """The net with two phase parts behind every tunable coupler."""
    rows = np.flatnonzero((setting_of >= 0) & (assembly.kind == COUPLER))
    count = 2 * len(rows)
    first = int(assembly.port_start[-1])
    behind = (assembly.port_start[rows, None] + np.array([2, 3])).ravel()
    enter = first + 2 * np.arange(count)
    mate = np.r_[assembly.mate, np.full(2 * count, FREE)].astype(np.int32)
    other = mate[behind]
    mate[behind], mate[enter] = enter, behind
    linked = other >= 0
    mate[enter[linked] + 1], mate[other[linked]] = other[linked], enter[linked] + 1
    moved = dict(zip(behind.tolist(), (enter + 1).tolist(), strict=True))
    names = assembly.names
    dragged = [f"{names.elements[e]}{DRAG}{side}" for e in rows.tolist() for side in (1, 2)]
    return (
        replace(
            assembly,
            kind=np.r_[assembly.kind, np.full(count, PHASE)].astype(np.uint8),
            nominal=np.r_[assembly.nominal, np.zeros(count)],
            length_um=np.r_[assembly.length_um, np.zeros(count)],
            settable=np.r_[assembly.settable, np.zeros(count, bool)],
            cell_of=np.r_[assembly.cell_of, np.full(count, FREE)].astype(np.int32),
            port_start=np.r_[assembly.port_start, first + 2 * np.arange(1, count + 1)].astype(np.int32),
            mate=mate,
            externals={name: moved.get(port, port) for name, port in assembly.externals.items()},
            names=ListedNames([*names.elements, *dragged], names.cells),
        ),
        np.r_[setting_of, np.full(count, FREE)].astype(np.int32),
    )


def drag_rows(net: Net) -> np.ndarray:
    """Rows of the two drag parts of every setting, i32[S, 2]; -1 for settings without."""
    rows = np.full((net.n_settings, 2), FREE, np.int32)
    index = net.names.element_row
    for s, name in enumerate(net.setting_names):
        if f"{name}{DRAG}1" in index:
            rows[s] = index[f"{name}{DRAG}1"], index[f"{name}{DRAG}2"]
    return rows
