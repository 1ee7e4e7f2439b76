"""A mesh drawn as text: the choice of form, panels and port names, and the legend.

Public: draw, and from its neighbours describe (words), light and light_together (where inputs' light goes).
"""

from __future__ import annotations

import textwrap
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from meshctl.errors import OutOfRange
from meshctl.mesh.graph import Mesh, Net
from meshctl.mesh.response import circuit_of
from meshctl.picture_lanes import (
    LEAST_PITCH,
    LINES,
    PLAIN,
    WEIGHTS_DB,
    Layout,
    Marks,
    is_crossing,
    layout_of,
    panels_of,
    sheet,
)
from meshctl.picture_light import lane_ends, light, light_together, output_powers
from meshctl.picture_states import BAR, BAR_BELOW, CROSS, CROSS_ABOVE, SPLIT, UNKNOWN, Sites, sites_of, state_of
from meshctl.picture_table import summary, table
from meshctl.picture_words import describe, fault_words, power_text

__all__ = ["describe", "draw", "light", "light_together"]

LEAST_WIDTH = 32
MOST_LANES = 64  # drawn lane by lane; above, one character for each cell
MOST_PITCH = 8  # characters from column to column; wider only makes the eye travel
MOST_NAME = 12  # characters of a cell's name beside its mark
POWERS = 8  # characters that the outputs' powers take beside their names
FAULTS_SHOWN = 6


def draw(
    mesh: Mesh,
    settings: np.ndarray | None = None,
    *,
    lit: np.ndarray | None = None,
    routes: Sequence[tuple[str, Sequence[str]]] = (),
    width: int = 80,
    ascii: bool = False,
) -> str:
    """The mesh as lines of text: lanes and cells, their states, and the light of an input.

    Parameters
    ----------
    mesh : Mesh
    settings : float (S,), rad, in force at the centre wavelength; None: cells are drawn without state
    lit : what `light` returned for one input; None: no light is shown
    routes : name of each route and of the cells that it passes; they are listed, and marked in the table of a
        net with loops
    width : longest line, 32 or more; wider meshes are cut into panels
    ascii : only characters that every terminal has

    Returns
    -------
    str, lines without trailing blanks, a legend below. More than 64 lanes: one character for each cell.
    A net with loops: one line for each cell.

    Raises
    ------
    OutOfRange
        For a width below 32.
    LoopInNet
        For light in a net with loops.
    WrongSize
        For settings or light of another mesh.

    Cost: linear in cells times columns; 64 modes take some 50 ms.

    Example
    -------
    >>> from meshctl import lattice
    >>> print(draw(lattice("rectangular", modes=2), width=60, ascii=True))
            1
    in1 ---+ +-- out1
            o
    in2 ---+ +-- out2
    <BLANKLINE>
    o cell, state not known
    """
    if width < LEAST_WIDTH:
        raise OutOfRange(f"a picture {width} characters wide has no room", remedy=f"allow {LEAST_WIDTH} or more")
    marks = PLAIN if ascii else LINES
    sites = sites_of(mesh, settings)
    shown = None if lit is None else _Shown.of(mesh.net, lit)
    circuit = circuit_of(mesh.net)
    if circuit is None:
        head = f"net with loops, one line for each of {len(sites)} cells"
        body = [*textwrap.wrap(head, width), "", *table(mesh, sites, marks, width, _passing(routes))]
    elif circuit.n_lanes > MOST_LANES:
        layout = layout_of(mesh.net, sites, marks)
        named = ", cell cK_R in column K, row R" if _told_by_place(mesh.net, sites, layout) else ""
        body = summary(layout, f"{layout.n_rows} lanes: one character for each cell{named}", width)
        body += shown.listed(width) if shown else []
    else:
        body = _Lanes(mesh.net, sites, shown, marks, width).lines()
    lines = [*body, "", *_route_lines(routes, width), *_legend(mesh, sites, shown, marks, width)]
    return "\n".join(_within(line, width, ascii) for line in lines)


def _passing(routes: Sequence[tuple[str, Sequence[str]]]) -> dict[str, list[int]]:
    """Numbers, from 1, of the routes through each cell."""
    passing: dict[str, list[int]] = {}
    for number, (_, cells) in enumerate(routes, 1):
        for cell in dict.fromkeys(cells):
            passing.setdefault(cell, []).append(number)
    return passing


def _route_lines(routes: Sequence[tuple[str, Sequence[str]]], width: int) -> list[str]:
    named = [f"route {k} {name}, {len(cells)} cells" for k, (name, cells) in enumerate(routes, 1)]
    return _packed(named, "   ", width)


def _within(line: str, width: int, ascii: bool) -> str:
    line = line.rstrip()
    if ascii:
        line = line.encode("ascii", "replace").decode()  # names may hold any letter
    return line if len(line) <= width else line[: width - 2] + ".."


@dataclass(frozen=True, eq=False)
class _Shown:
    """The light that is drawn, and its numbers."""

    lit: np.ndarray
    inputs: tuple[str, ...]  # that light enters
    entering: float
    at_lane_end: list[float]
    at_output: dict[str, float]

    @classmethod
    def of(cls, net: Net, lit: np.ndarray) -> _Shown:
        start, end = lane_ends(net, lit)
        inputs = tuple(name for name, power in zip(net.inputs, start.tolist(), strict=False) if power > 0.0)
        outputs = dict(zip(net.outputs, output_powers(net, lit).tolist(), strict=True))
        return cls(lit, inputs, float(start.sum()), end.tolist(), outputs)

    def throughput(self) -> str:
        return power_text(sum(self.at_output.values()) / self.entering) if self.entering else "dark"

    def listed(self, width: int) -> list[str]:
        """The outputs' powers where there is no room for them beside the outputs."""
        powers = [f"{name} {power_text(power)}" for name, power in self.at_output.items()]
        return ["", *_packed([f"dB at the outputs: {powers[0]}", *powers[1:]], "   ", width)] if powers else []


def _names(net: Net, sites: Sites) -> list[str]:
    cells, elements = net.names.cells, net.names.elements
    both = zip(sites.cell.tolist(), sites.element.tolist(), strict=True)
    return [cells[cell] if cell >= 0 else elements[element] for cell, element in both]


def _told_by_place(net: Net, sites: Sites, layout: Layout) -> bool:
    """True if column and place in the column give the name of every cell, as in c3_2."""
    cells = net.names.cells
    place: Counter[int] = Counter()
    for column, _, cell in sorted(zip(layout.column, layout.upper, sites.cell.tolist(), strict=True)):
        if cell >= 0:
            place[column] += 1
            if cells[cell] != f"c{column + 1}_{place[column]}":
                return False
    return True


class _Lanes:
    """A loop-free mesh lane by lane: how wide its columns are, and its panels."""

    def __init__(self, net: Net, sites: Sites, shown: _Shown | None, marks: Marks, width: int) -> None:
        self.layout = layout = layout_of(net, sites, marks)
        self.shown, self.width = shown, width
        self.names = [] if _told_by_place(net, sites, layout) else [n[:MOST_NAME] for n in _names(net, sites)]
        most = (width - 2 * LEAST_PITCH) // 3
        self.entrance = [name[:most] for name in layout.entrance]
        self.exit = [name[:most] for name in layout.exit]
        digits = len(str(layout.n_rows))
        self.left = max(digits, *map(len, self.entrance))
        self.right = max(digits, *map(len, self.exit))
        room = width - self.left - self.right - 2
        least = LEAST_PITCH + max((len(name) + 1 for name in self.names), default=0)
        self.beside = shown is not None and least * layout.n_columns + POWERS <= room
        room -= POWERS * self.beside
        self.pitch = min(max(least, min(MOST_PITCH, room // layout.n_columns)), room)
        self.middle = LEAST_PITCH // 2 if self.names else self.pitch // 2
        self.panels = panels_of(layout.n_columns, room // self.pitch)
        self.page = sheet(net, layout, sites, shown.lit if shown else None, marks, self.pitch, self.middle)
        self._write_names()

    def _write_names(self) -> None:
        layout = self.layout
        for name, column, half, glyph in zip(self.names, layout.column, layout.between, layout.glyph, strict=False):
            x = column * self.pitch + self.middle + 2 + len(glyph) // 2
            self.page[half][x : x + len(name)] = name

    def lines(self) -> list[str]:
        """All panels from top to bottom, and the outputs' powers if they have no place in them."""
        lines: list[str] = []
        for first, last in self.panels:
            if len(self.panels) > 1:
                lines += [""] * bool(lines) + [f"columns {first + 1} to {last} of {self.layout.n_columns}"]
            lines += self._panel(first, last)
        return lines + (self.shown.listed(self.width) if self.shown and not self.beside else [])

    def _panel(self, first: int, last: int) -> list[str]:
        layout, pitch = self.layout, self.pitch
        powers = {row: self._power(lane) for lane, row in enumerate(layout.row_of_lane) if layout.exit[row]}
        lines = [] if self.names and not self.beside else [self._head(first, last)]
        for y, row in enumerate(self.page):
            part = "".join(row[first * pitch : last * pitch])
            lane, between = divmod(y, 2)
            if between:
                lines.append(self._line("", part))
                continue
            before = self.entrance[lane] if first == 0 else str(lane + 1)
            after = self.exit[lane] if last == layout.n_columns else str(lane + 1)
            lines.append(self._line(before, part, after, powers.get(lane, "")))
        return lines

    def _power(self, lane: int) -> str:
        return power_text(self.shown.at_lane_end[lane]) if self.shown and self.beside else ""

    def _line(self, before: str, part: str, after: str = "", power: str = "") -> str:
        return f"{before:>{self.left}} {part} {after:<{self.right}} {power:>{POWERS - 2}}".rstrip()

    def _head(self, first: int, last: int) -> str:
        """Numbers of the columns, unless names stand beside the cells, and what the powers' unit is."""
        line = [" "] * (self.pitch * (last - first))
        for column in range(first, last) if not self.names else ():
            number = str(column + 1)
            x = (column - first) * self.pitch + self.middle - (len(number) - 1) // 2
            line[x : x + len(number)] = number
        return self._line("", "".join(line), "", "dB" if self.beside else "")


def _legend(mesh: Mesh, sites: Sites, shown: _Shown | None, marks: Marks, width: int) -> list[str]:
    """What the marks in use mean, the numbers of the light, and the faults in words."""
    states = set(state_of(sites.cross_power).tolist())
    wanted = [
        (bool(states & {BAR, CROSS, SPLIT}), f"{marks.bar} bar (cross power below {BAR_BELOW:g})"),
        (bool(states & {BAR, CROSS, SPLIT}), f"{marks.cross} cross (above {CROSS_ABOVE:g})"),
        (SPLIT in states, "1..9 split (cross power in tenths)"),
        (UNKNOWN in states, f"{marks.unknown} cell, state not known"),
        (bool(sites.fixed.any()), "( ) fixed part"),
        (bool(is_crossing(mesh.net, sites).any()), f"({marks.crossing}) crossing"),
        (_some_lane_ends(mesh.net), f"{marks.end} lane ends in no port"),
        (bool(sites.fault.any()), f"{marks.fault} fault"),
    ]
    lines = _packed([text for use, text in wanted if use], "   ", width)
    if shown:
        strokes = [f"{2 * mark} {level:g}" for mark, level in zip(marks.strokes, WEIGHTS_DB, strict=False)]
        names = ", ".join(shown.inputs) or "no input"
        first = f"light of {names}: {strokes[0]} dB and more"
        last = [f"{2 * marks.strokes[-1]} less", f"throughput {shown.throughput()} dB"]
        lines += _packed([first, *strokes[1:], *last], "   ", width)
    settings = mesh.net.setting_names
    faults = [f"{settings[s]}: {word}" for s, word in fault_words(mesh).items()]
    if len(faults) > FAULTS_SHOWN:
        faults = [*faults[: FAULTS_SHOWN - 1], f"and {len(faults) - FAULTS_SHOWN + 1} more faults"]
    return lines + [part for line in faults for part in textwrap.wrap(line, width)]


def _some_lane_ends(net: Net) -> bool:
    circuit = circuit_of(net)
    return circuit is not None and circuit.n_lanes > len(net.outputs) + len(net.monitors)


def _packed(parts: list[str], between: str, width: int) -> list[str]:
    """Parts side by side, a new line where the next one does not fit; a part longer than a line is wrapped."""
    lines: list[str] = []
    for part in parts:
        if lines and len(lines[-1]) + len(between) + len(part) <= width:
            lines[-1] += between + part
        else:
            lines += textwrap.wrap(part, width)
    return lines
