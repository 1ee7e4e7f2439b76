"""A loop-free mesh laid out in text: lanes as rows, cells in columns between them, light as stroke weight.

A lane has every second row of the sheet; the rows between hold the states. Bar leaves both lanes straight,
cross takes them through each other, a split bends both towards the digit between them. A cell whose lanes are no
neighbours hangs on a stem that passes over the lanes between.
Public: Marks, LINES, PLAIN, WEIGHTS_DB, Layout, layout_of, sheet,
panels_of, glyphs, is_crossing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import Net
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import CROSSING
from meshctl.optics.feedforward import Circuit
from meshctl.picture_light import lane_ends
from meshctl.picture_states import BAR, CROSS, UNKNOWN, Sites, state_of
from meshctl.units import power_from_loss_db

WEIGHTS_DB = (-3.0, -10.0, -20.0, -40.0)  # least power of each stroke but the last
_LEAST = [float(power_from_loss_db(-level)) * (1.0 - 1e-9) for level in WEIGHTS_DB]
REACH = 1  # characters that a cell takes on either side of its middle
LEAST_PITCH = 2 * REACH + 2


@dataclass(frozen=True)
class Marks:
    """The characters of a picture."""

    strokes: str  # lanes by the power in them, strongest first
    lane: str  # a lane when no light is shown
    bar: str
    cross: str
    unknown: str
    fault: str
    crossing: str  # waveguides that cross: no cell
    end: str  # a lane that ends in no port
    into_cross: tuple[str, str]  # upper lane before and behind a cross; the lower has them exchanged
    bends: tuple[str, str, str, str]  # upper before and behind, lower before and behind
    strong_bends: tuple[str, str, str, str]
    stem: str
    stem_of_bar: str

    def states(self, cross_power: np.ndarray) -> list[str]:
        """A character for each cross power."""
        named = {BAR: self.bar, CROSS: self.cross, UNKNOWN: self.unknown}
        tenths = np.clip(np.round(10 * np.nan_to_num(cross_power)), 1, 9).astype(int).tolist()
        both = zip(state_of(cross_power).tolist(), tenths, strict=True)
        return [named.get(state, str(tenth)) for state, tenth in both]


LINES = Marks(
    "━╍─╌·", "─", "═", "╳", "o", "!", "x", "×", ("╲", "╱"), ("╮", "╭", "╯", "╰"), ("┓", "┏", "┛", "┗"), "│", "┊"
)
PLAIN = Marks("#*-:.", "-", "=", "X", "o", "!", "x", "]", ("\\", "/"), ("+",) * 4, ("+",) * 4, "|", "|")


@dataclass(frozen=True, eq=False)
class Layout:
    """Where sites and lanes stand on the sheet."""

    circuit: Circuit
    row_of_lane: list[int]
    column: list[int]  # of each site
    upper: list[int]  # row of lane a or b, whichever is higher
    lower: list[int]
    glyph: list[str]
    n_columns: int
    entrance: list[str]  # name on the left of each row; "": the lane starts at its first cell
    exit: list[str]  # name on the right; "": the lane ends behind its last cell

    @property
    def n_rows(self) -> int:
        return len(self.entrance)

    @property
    def between(self) -> list[int]:
        """The line of the sheet on which each site's state stands: never on a lane."""
        return [top + bottom - 1 + (top + bottom) % 2 for top, bottom in zip(self.upper, self.lower, strict=True)]


def _rows(circuit: Circuit, sites: Sites) -> list[int]:
    """Lanes from top to bottom: inputs in their order, each dark lane beside the lane that it meets first."""
    order = list(range(circuit.n_inputs))
    placed = set(order)
    waiting = list(zip(sites.lane_a.tolist(), sites.lane_b.tolist(), sites.element.tolist(), strict=True))
    for a, b, element in waiting:
        first, second = a, b
        if int(circuit.element_lane_a[element]) != a:
            first, second = b, a
        for lane, known, below in ((second, first, 1), (first, second, 0)):
            if lane not in placed and known in placed:
                order.insert(order.index(known) + below, lane)
                placed.add(lane)
    order += [lane for lane in range(circuit.n_lanes) if lane not in placed]
    row = [0] * circuit.n_lanes
    for k, lane in enumerate(order):
        row[lane] = k
    return row


def _columns(upper: list[int], lower: list[int], n_rows: int) -> list[int]:
    """The first column in which no earlier site takes a row from upper to lower."""
    depth = [0] * n_rows
    columns = []
    for top, bottom in zip(upper, lower, strict=True):
        column = max(depth[top : bottom + 1])
        depth[top : bottom + 1] = [column + 1] * (bottom + 1 - top)
        columns.append(column)
    return columns


def layout_of(net: Net, sites: Sites, marks: Marks) -> Layout:
    """Place the sites of a loop-free net in rows and columns.

    Cost: linear in sites, but for a net with many dark lanes.
    """
    circuit = circuit_of(net)
    assert circuit is not None
    row = _rows(circuit, sites)
    pairs = [sorted((row[a], row[b])) for a, b in zip(sites.lane_a.tolist(), sites.lane_b.tolist(), strict=True)]
    upper, lower = [p[0] for p in pairs], [p[1] for p in pairs]
    column = _columns(upper, lower, circuit.n_lanes)
    entrance, leaves = [""] * circuit.n_lanes, [""] * circuit.n_lanes
    for lane, name in enumerate(net.inputs):
        entrance[row[lane]] = name
    for name in (*net.monitors, *net.outputs):
        lane = _lane_of_port(net, circuit, net.externals[name])
        if name not in net.inputs:
            leaves[row[lane]] = name
    return Layout(
        circuit, row, column, upper, lower, glyphs(net, sites, marks), max(column, default=0) + 1, entrance, leaves
    )


def _lane_of_port(net: Net, circuit: Circuit, port: int) -> int:
    element = int(net.element_of_port[port])
    second = (port - int(net.port_start[element])) % 2 == 1
    two_lanes = int(circuit.element_lane_b[element]) >= 0
    return int((circuit.element_lane_b if second and two_lanes else circuit.element_lane_a)[element])


def glyphs(net: Net, sites: Sites, marks: Marks) -> list[str]:
    """One character for each site: its fault before its state; fixed parts in brackets."""
    drawn = []
    state = marks.states(sites.cross_power)
    crossings = is_crossing(net, sites).tolist()
    for mark, fault, fixed, crossing in zip(state, sites.fault.tolist(), sites.fixed.tolist(), crossings, strict=True):
        mark = marks.fault if fault else marks.crossing if crossing else mark
        drawn.append(f"({mark})" if fixed else mark)
    return drawn


def is_crossing(net: Net, sites: Sites) -> np.ndarray:
    """True where waveguides cross outside any cell, bool[U]."""
    found: np.ndarray = (net.kind[sites.element] == CROSSING) & (sites.cell < 0)
    return found


def before_crossing(net: Net, sites: Sites) -> np.ndarray:
    """Sites right before a waveguide crossing of the same block: there the block's lanes are still exchanged.

    Light is known behind whole blocks only, and a crossing is fused with the cell before it.
    """
    leave = sites.last_block
    before = np.zeros(len(sites), bool)
    before[:-1] = is_crossing(net, sites)[1:] & (leave[1:] == leave[:-1])
    return before


class _Strokes:
    """Which stroke shows the power in front of and behind each site on each lane."""

    def __init__(self, net: Net, layout: Layout, sites: Sites, lit: np.ndarray | None, marks: Marks) -> None:
        circuit = layout.circuit
        n = len(sites)
        if lit is None:
            self.behind = [[marks.lane] * n, [marks.lane] * n]
            self.start = self.end = [marks.lane] * circuit.n_lanes
            return
        start, end = lane_ends(net, lit)
        leave = sites.last_block
        turned = (circuit.lane_a[leave] != sites.lane_a) ^ before_crossing(net, sites)
        self.behind = [
            self._drawn(lit[leave, np.where(turned, 3, 2)], marks),
            self._drawn(lit[leave, np.where(turned, 2, 3)], marks),
        ]
        self.start, self.end = self._drawn(start, marks), self._drawn(end, marks)

    @staticmethod
    def _drawn(power: np.ndarray, marks: Marks) -> list[str]:
        weight = sum((power < least).astype(int) for least in _LEAST)
        return [marks.strokes[k] for k in np.asarray(weight).tolist()]


def sheet(
    net: Net, layout: Layout, sites: Sites, lit: np.ndarray | None, marks: Marks, pitch: int, middle: int
) -> list[list[str]]:
    """All columns side by side as rows of characters, without port names.

    Parameters
    ----------
    lit : what `light` returned; None: lanes without light
    pitch : characters from column to column; middle : of them in front of a cell's middle
    """
    strokes = _Strokes(net, layout, sites, lit, marks)
    wide = pitch * layout.n_columns
    page = [[" "] * wide for _ in range(2 * layout.n_rows - 1)]
    states = state_of(sites.cross_power).tolist()
    along: list[list[tuple[int, int]]] = [[] for _ in layout.row_of_lane]  # of each lane: (site, 0 or 1)
    for site, pair in enumerate(zip(sites.lane_a.tolist(), sites.lane_b.tolist(), strict=True)):
        for which, lane in enumerate(pair):
            along[lane].append((site, which))
    for lane, row in enumerate(layout.row_of_lane):
        _draw_lane(page[2 * row], row, lane, along[lane], layout, strokes, states, marks, pitch, middle)
    for site, half in enumerate(layout.between):
        x = layout.column[site] * pitch + middle
        stem = marks.stem_of_bar if states[site] == BAR else marks.stem
        for y in range(2 * layout.upper[site] + 1, 2 * layout.lower[site]):
            page[y][x] = stem
        glyph = layout.glyph[site]
        left = x - len(glyph) // 2
        page[half][left : left + len(glyph)] = glyph
    return page


def panels_of(columns: int, most: int) -> list[tuple[int, int]]:
    """Columns cut into even panels of at most so many: (first, behind the last) of each."""
    count = max(1, -(-columns // max(most, 1)))
    each = max(1, -(-columns // count))
    return [(first, min(first + each, columns)) for first in range(0, columns, each)] or [(0, 0)]


def _draw_lane(
    line: list[str],
    row: int,
    lane: int,
    along: list[tuple[int, int]],
    layout: Layout,
    strokes: _Strokes,
    states: list[int],
    marks: Marks,
    pitch: int,
    middle: int,
) -> None:
    stroke, at = strokes.start[lane], 0
    strong = marks.strokes[:2]
    for k, (site, which) in enumerate(along):
        x = layout.column[site] * pitch + middle
        born = k == 0 and not layout.entrance[row]
        if not born:
            line[at:x] = stroke * (x - at)
        behind = strokes.behind[which][site]
        if k == len(along) - 1 and layout.exit[row]:
            behind = strokes.end[lane]
        lower = row == layout.lower[site]
        line[x] = stroke if states[site] == BAR and not born else " "
        if states[site] == BAR:
            line[x + 1] = behind
        elif states[site] == CROSS:
            before, after = marks.into_cross[::-1] if lower else marks.into_cross
            line[x - 1], line[x + 1] = before, after
        else:
            sides = 2 * lower
            line[x - 1] = (marks.strong_bends if stroke in strong else marks.bends)[sides]
            line[x + 1] = (marks.strong_bends if behind in strong else marks.bends)[sides + 1]
        if born:
            line[x - 1] = " "
        if k == len(along) - 1 and not layout.exit[row]:
            line[x + 1] = marks.end
        stroke, at = behind, x + 2
    if layout.exit[row]:
        line[at:] = strokes.end[lane] * (len(line) - at)
