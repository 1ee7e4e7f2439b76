"""Meshes too large or too looped for lanes: one character for each cell, or one line for each cell.

Public: summary, table.
"""

from __future__ import annotations

import textwrap
from collections.abc import Mapping, Sequence

from meshctl.mesh.graph import Mesh, Net
from meshctl.picture_lanes import Layout, Marks, glyphs, panels_of
from meshctl.picture_states import Sites


def summary(layout: Layout, head: str, width: int) -> list[str]:
    """Columns of cells side by side, one character for each, in panels; its row is its place in its column."""
    grid: list[list[str]] = [[] for _ in range(layout.n_columns)]
    for column, _, glyph in sorted(zip(layout.column, layout.upper, layout.glyph, strict=True)):
        grid[column].append(glyph.strip("()"))
    margin = len(str(max(map(len, grid), default=0))) + 1
    lines = textwrap.wrap(head, width)
    for first, last in panels_of(layout.n_columns, width - margin):
        lines += ["", f"columns {first + 1} to {last} of {layout.n_columns}"]
        shown = grid[first:last]
        for row in range(max(map(len, shown), default=0)):
            marks = "".join(column[row] if row < len(column) else " " for column in shown)
            lines.append(f"{row + 1:>{margin - 1}} {marks}")
    return lines


def table(
    mesh: Mesh, sites: Sites, marks: Marks, width: int, on_routes: Mapping[str, Sequence[int]] | None = None
) -> list[str]:
    """A line for each cell of any net: name, state, cross power, and what its ports are joined to.

    `on_routes` has the numbers of the routes that pass each cell; with it a column shows them.
    """
    net = mesh.net
    neighbour = _Neighbours(net)
    rows = [("cell", "", "cross", "joined to (a1 a2 b1 b2)", "route")]
    for site, glyph in enumerate(glyphs(net, sites, marks)):
        power = f"{sites.cross_power[site]:.2f}".replace("nan", "")
        cell, element = int(sites.cell[site]), int(sites.element[site])
        numbers = " ".join(map(str, (on_routes or {}).get(neighbour.name(element), ())))
        rows.append((neighbour.name(element), glyph, power, "  ".join(neighbour.of(cell, element)), numbers))
    name, mark, cross, _, route = (max(len(row[k]) for row in rows) for k in range(5))
    lines = []
    for a, b, c, d, e in rows:
        start = f"{a:<{name}}  {b:^{mark}}  {c:>{cross}}  " + (f"{e:<{route}}  " if on_routes else "")
        lines += textwrap.wrap(start + d, width, subsequent_indent=" " * len(start), drop_whitespace=False) or [start]
    return lines


class _Neighbours:
    """What the ports of each cell, and of each part in no cell, lead to."""

    def __init__(self, net: Net) -> None:
        self.net = net
        self.outside = {port: name for name, port in net.externals.items()}
        self.members: dict[int, list[int]] = {}
        for element, cell in enumerate(net.cell_of.tolist()):
            self.members.setdefault(cell, []).append(element)

    def name(self, element: int) -> str:
        """Name of the cell that an element is in, or its own."""
        cell = int(self.net.cell_of[element])
        return self.net.names.cells[cell] if cell >= 0 else self.net.names.elements[element]

    def of(self, cell: int, element: int) -> list[str]:
        """Names behind the ports that light enters, then behind those that it leaves; "-" is dark."""
        net = self.net
        inside = self.members[cell] if cell >= 0 else [element]
        enters: list[str] = []
        leaves: list[str] = []
        for e in inside:
            first, stop = int(net.port_start[e]), int(net.port_start[e + 1])
            for port in range(first, stop):
                mate = int(net.mate[port])
                other = int(net.element_of_port[mate]) if mate >= 0 else -1
                if other in inside and cell >= 0:
                    continue
                name = self.outside.get(port, "-") if other < 0 else self.name(other)
                (enters if 2 * (port - first) < stop - first else leaves).append(name)
        return [*enters, *leaves]
