"""A mesh on a grid of characters, made once for each mesh and zoom: which strand of light or site owns each place.

Public: Raster, lanes, places, ZOOMS.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import Net
from meshctl.picture_lanes import Layout
from meshctl.picture_states import Sites

ZOOMS = 3
NONE = -1
LANE_ROWS, LANE_PITCH = (1, 2, 4), (4, 6, 16)  # characters from lane to lane and from column to column, by zoom
CARD = 13  # characters of a line of a card
PLACE_PITCH = (4.0, 8.0, 16.0)  # columns between neighbouring cells of a lattice with loops, by zoom
ROW_PER_COLUMN = 0.45  # a character is about twice as high as wide
RIM = 6


@dataclass(frozen=True, eq=False)
class Raster:
    """Height x width places; strands are pieces of waveguide, roles number the characters of a site."""

    strand: np.ndarray  # i32, NONE: no waveguide
    stroke: np.ndarray  # u8: 0 level, 1 rising, 2 falling, 3 upright
    site: np.ndarray  # i32
    role: np.ndarray  # u8
    label: np.ndarray  # u32, code points of names; 0: none
    n_roles: int
    at: np.ndarray  # i64[U, 2]: row and column of each site's mark; NONE where it is not drawn

    @property
    def height(self) -> int:
        return int(self.strand.shape[0])

    @property
    def width(self) -> int:
        return int(self.strand.shape[1])


class _Page:
    def __init__(self, height: int, width: int, n_sites: int) -> None:
        shape = (max(height, 1), max(width, 1))
        self.strand, self.site = np.full(shape, NONE, np.int32), np.full(shape, NONE, np.int32)
        self.stroke, self.role = np.zeros(shape, np.uint8), np.zeros(shape, np.uint8)
        self.label, self.at = np.zeros(shape, np.uint32), np.full((n_sites, 2), NONE)

    def write(self, y: int, x: int, text: str) -> None:
        for k, letter in enumerate(text):
            if 0 <= y < self.label.shape[0] and 0 <= x + k < self.label.shape[1]:
                self.label[y, x + k] = ord(letter)

    def own(self, site: int, y: int, x: int, role: int) -> None:
        self.site[y, x], self.role[y, x] = site, role

    def raster(self, n_roles: int) -> Raster:
        return Raster(self.strand, self.stroke, self.site, self.role, self.label, n_roles, self.at)


def lanes(layout: Layout, sites: Sites, zoom: int) -> Raster:
    """A loop-free mesh: lanes as rows, columns of cells between them.

    Strands: one before the first site of every lane [L], then two behind every site [U, 2]: lane a, lane b.
    Roles: 0 to 2 on the upper lane, 3 to 5 on the lower, 6 to 8 between, 9 the stem, then three lines of a card;
    at the smallest zoom 1 and 4 alone.
    """
    high, pitch = LANE_ROWS[zoom], LANE_PITCH[zoom]
    margin = max(map(len, layout.entrance), default=0) + 1
    wide = pitch * layout.n_columns
    end = max(map(len, layout.exit), default=0) + 1
    page = _Page((layout.n_rows - 1) * high + 1, margin + wide + 1 + end, len(sites))
    along: list[list[tuple[int, int]]] = [[] for _ in layout.row_of_lane]
    for site, pair in enumerate(zip(sites.lane_a.tolist(), sites.lane_b.tolist(), strict=True)):
        for which, lane in enumerate(pair):
            along[lane].append((site, which))
    n_lanes = len(layout.row_of_lane)
    middle = margin + pitch // 2
    for lane, row in enumerate(layout.row_of_lane):
        at, strand = margin, lane
        begun = bool(layout.entrance[row])
        for site, which in along[lane]:
            x = layout.column[site] * pitch + middle
            if begun:
                page.strand[row * high, at:x] = strand
            at, strand, begun = x, n_lanes + 2 * site + which, True
        if layout.exit[row]:
            page.strand[row * high, at : margin + wide + 1] = strand
        page.write(row * high, 0, layout.entrance[row])
        page.write(row * high, margin + wide + 2, layout.exit[row])
    for site, (column, top, bottom) in enumerate(zip(layout.column, layout.upper, layout.lower, strict=True)):
        _own_lanes(page, site, column * pitch + middle, top * high, bottom * high, zoom)
    return page.raster((2, 10, 10 + 3 * CARD)[zoom] if zoom else 10)


def _own_lanes(page: _Page, site: int, x: int, top: int, bottom: int, zoom: int) -> None:
    if zoom == 0:
        page.own(site, top, x, 1)
        page.own(site, bottom, x, 4)
        page.at[site] = top, x
        return
    for y in range(top + 1, bottom):
        page.own(site, y, x, 9)
    for dx in (-1, 0, 1):
        page.own(site, top, x + dx, 1 + dx)
        page.own(site, bottom, x + dx, 4 + dx)
    half = (top + bottom) // 2
    if zoom == 1:
        half += half == top or (half - top) % 2 == 0  # never on a lane
        for dx in (-1, 0, 1):
            page.own(site, half, x + dx, 7 + dx)
    else:
        half += 2 * ((half - top) % 4 == 0)
        for line in range(3):
            for k in range(CARD):
                page.own(site, half - 1 + line, x - CARD // 2 + k, 10 + line * CARD + k)
    page.at[site] = half, x


def places(net: Net, sites: Sites, zoom: int) -> tuple[Raster, np.ndarray]:
    """A lattice with loops: cells where they stand, and lines where light passes from cell to cell.

    Returns
    -------
    Raster, and the port i64[N] whose power each strand shows. Roles: 0 to 2 the mark; at the largest zoom
    3 to 15 the name below it.
    """
    owner = net.cell_of[net.element_of_port]
    ports = np.flatnonzero(net.mate > np.arange(len(net.mate)))
    ports = ports[(owner[ports] >= 0) & (owner[net.mate[ports]] >= 0) & (owner[ports] != owner[net.mate[ports]])]
    ends = np.column_stack([owner[ports], owner[net.mate[ports]]])
    xy = _spread(net.cell_xy_um)
    reach = np.hypot(*(xy[ends[:, 0]] - xy[ends[:, 1]]).T)
    unit = float(np.median(reach[reach > 0])) if (reach > 0).any() else 1.0
    scale = PLACE_PITCH[zoom] / unit
    x = np.round((xy[:, 0] - xy[:, 0].min(initial=0.0)) * scale).astype(int) + RIM
    y = np.round((xy[:, 1].max(initial=0.0) - xy[:, 1]) * scale * ROW_PER_COLUMN).astype(int) + 2
    page = _Page(int(y.max(initial=0)) + 4, int(x.max(initial=0)) + RIM + 2, len(sites))
    for strand, (a, b) in enumerate(ends.tolist()):
        _line(page, strand, (int(y[a]), int(x[a])), (int(y[b]), int(x[b])))
    drawn: set[int] = set()
    for site, cell in enumerate(sites.cell.tolist()):
        if cell < 0 or cell in drawn:
            continue
        drawn.add(cell)
        row, column = int(y[cell]), int(x[cell])
        page.at[site] = row, column
        for dx in (-1, 0, 1) if zoom else (0,):
            page.own(site, row, column + dx, 1 + dx)
        if zoom == 2:
            for k in range(CARD):
                if page.site[row + 1, max(column - CARD // 2 + k, 0)] == NONE:
                    page.own(site, row + 1, max(column - CARD // 2 + k, 0), 3 + k)
    _name_ports(page, net, owner, x, y)
    return page.raster(3 + CARD), ports


def _spread(xy: np.ndarray) -> np.ndarray:
    """Positions, or a square of places where a net gives none."""
    if len(xy) and not np.isnan(xy).any() and len(np.unique(np.round(xy, 3), axis=0)) == len(xy):
        return xy
    wide = int(np.ceil(np.sqrt(max(len(xy), 1))))
    at = np.arange(len(xy))
    return np.column_stack([at % wide, -(at // wide)]).astype(float)


def _line(page: _Page, strand: int, start: tuple[int, int], stop: tuple[int, int]) -> None:
    (y0, x0), (y1, x1) = start, stop
    count = max(abs(y1 - y0), abs(x1 - x0), 1)
    rows = np.round(np.linspace(y0, y1, count + 1)).astype(int)
    columns = np.round(np.linspace(x0, x1, count + 1)).astype(int)
    if x0 == x1:
        stroke = 3
    elif abs(y1 - y0) * 4 <= abs(x1 - x0):
        stroke = 0
    else:
        stroke = 1 if (y1 - y0) * (x1 - x0) < 0 else 2
    page.strand[rows, columns], page.stroke[rows, columns] = strand, stroke


def _name_ports(page: _Page, net: Net, owner: np.ndarray, x: np.ndarray, y: np.ndarray) -> None:
    """Names of the ports outside the cells that they belong to, where there is room."""
    centre = float(y.mean()) if len(y) else 0.0, float(x.mean()) if len(x) else 0.0
    for name, port in net.externals.items():
        cell = int(owner[port])
        if cell < 0:
            continue
        row, column = int(y[cell]), int(x[cell])
        right, down = column >= centre[1], row >= centre[0]
        for dy in (0, 1, -1, 2, -2) if down else (0, -1, 1, -2, 2):
            left = column + 3 if right else column - 2 - len(name)
            box = np.s_[row + dy, max(left - 1, 0) : left + len(name) + 1]
            if not (0 <= row + dy < page.label.shape[0] and left >= 0 and left + len(name) <= page.label.shape[1]):
                continue
            if (page.label[box] == 0).all() and (page.strand[box] < 0).all() and (page.site[box] < 0).all():
                page.write(row + dy, left, name)
                break
