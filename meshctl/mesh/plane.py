"""Lattices whose light runs both ways, from plane graphs: every edge is a cell, every junction joins cells.

Conventions, each tested by number in tests/test_plane.py:

- Lengths are in sides of a polygon; x grows to the right, y upward; rows of polygons count downward.
- Cells stand in reading order of their middles: top to bottom, then left to right.
- End a of a cell is its left end; of an upright cell, its upper end. Looking from a to b, side 1 lies to
  the left (so above a level cell). Ports of cell c are 4 c + (0: a1, 1: a2, 2: b1, 3: b2).
- A side faces one polygon: bar (a1 to b1, a2 to b2) keeps light in its polygon, cross changes it.
- At a junction each port is linked to the port of the next cell that faces the same polygon. Ports that face
  the outside are free: they are the rim, in clockwise order from twelve o'clock.

Public: PlaneLattice, plane_lattice, from_polygons, hexagonal, hexagonal_rows, square, trigrid.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.errors import OutOfRange, UnsoundNet

ROOT3 = float(np.sqrt(3.0))
_DIGITS = 6  # corners nearer than this many decimals of a side are one junction


@dataclass(frozen=True, eq=False)
class PlaneLattice:
    """A plane graph read as a chip: V junctions, C cells, 4 C ports."""

    vertices: np.ndarray  # f64[V, 2]
    ends: np.ndarray  # i32[C, 2], junctions of ends a and b
    mate: np.ndarray  # i32[4 C], partner port or -1 on the rim
    rim: np.ndarray  # i32[X], free ports clockwise from the top
    faces: int  # polygons inside

    @property
    def n_cells(self) -> int:
        return len(self.ends)

    @property
    def cell_xy(self) -> np.ndarray:
        """Middles of the cells, f64[C, 2]."""
        middles: np.ndarray = self.vertices[self.ends].mean(axis=1)
        return middles

    @property
    def port_xy(self) -> np.ndarray:
        """Where each port is drawn, f64[4 C, 2]: a quarter along the cell, a tenth to its side."""
        a, b = self.vertices[self.ends[:, 0]], self.vertices[self.ends[:, 1]]
        along = b - a
        left = 0.1 * np.column_stack([-along[:, 1], along[:, 0]])
        near, far = a + 0.25 * along, b - 0.25 * along
        return np.stack([near + left, near - left, far + left, far - left], axis=1).reshape(-1, 2)


def plane_lattice(vertices: np.ndarray, edges: np.ndarray) -> PlaneLattice:
    """Cells, links and rim of a connected plane graph drawn with straight edges.

    Parameters
    ----------
    vertices : float (V, 2)
    edges : int (C, 2), in any order and direction

    Returns
    -------
    PlaneLattice

    Raises
    ------
    UnsoundNet
        Where the graph is not connected, has an edge twice, or is not plane (Euler's count fails).

    Cost: a sort of the edges.
    """
    xy = np.asarray(vertices, float)
    ends = _in_reading_order(xy, np.asarray(edges, np.int64).reshape(-1, 2))
    after = _next_around(xy, ends)
    face, outer, n_faces = _walk_faces(xy, ends, after)
    _check_plane(len(xy), ends, n_faces)
    half = np.arange(2 * len(ends))
    left = 4 * (half >> 1) + np.where(half & 1, 3, 0)  # seen when leaving the junction
    right = 4 * (half >> 1) + np.where(half & 1, 2, 1)
    inside = face != outer
    mate = np.full(4 * len(ends), -1, np.int32)
    mate[left[inside]] = right[after[inside]]
    mate[right[after[inside]]] = left[inside]
    rim = _rim(xy, ends, after, np.flatnonzero(~inside), left, right)
    return PlaneLattice(xy, ends.astype(np.int32), mate, rim.astype(np.int32), n_faces - 1)


def _in_reading_order(xy: np.ndarray, edges: np.ndarray) -> np.ndarray:
    rounded = np.round(xy, _DIGITS)
    first, second = rounded[edges[:, 0]], rounded[edges[:, 1]]
    swap = (first[:, 0] > second[:, 0]) | ((first[:, 0] == second[:, 0]) & (first[:, 1] < second[:, 1]))
    ends = np.where(swap[:, None], edges[:, ::-1], edges)
    middle = np.round(xy[ends].mean(axis=1), _DIGITS)
    return ends[np.lexsort((middle[:, 0], -middle[:, 1]))]


def _next_around(xy: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Of every half-edge, the next one leaving the same junction, counter-clockwise.

    Half-edge 2 c leaves end a of cell c, 2 c + 1 leaves end b.
    """
    start, stop = ends.ravel(), ends[:, ::-1].ravel()
    along = xy[stop] - xy[start]
    angle = np.arctan2(along[:, 1], along[:, 0])
    order = np.lexsort((angle, start))
    at = start[order]
    first = np.searchsorted(at, at)
    last = np.searchsorted(at, at, side="right") - 1
    place = np.arange(len(order))
    after = np.empty_like(order)
    after[order] = order[np.where(place == last, first, place + 1)]
    return after


def _walk_faces(xy: np.ndarray, ends: np.ndarray, after: np.ndarray) -> tuple[np.ndarray, int, int]:
    """The face to the left of every half-edge, the outer face, and how many faces there are."""
    start, stop = ends.ravel(), ends[:, ::-1].ravel()
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    onward = before[np.arange(len(after)) ^ 1].tolist()  # keep the face to the left: turn clockwise
    shoelace = (xy[start, 0] * xy[stop, 1] - xy[start, 1] * xy[stop, 0]).tolist()
    face = [-1] * len(after)
    areas: list[float] = []
    for h in range(len(after)):
        if face[h] < 0:
            area = 0.0
            while face[h] < 0:
                face[h] = len(areas)
                area += shoelace[h]
                h = onward[h]
            areas.append(area)
    # inner faces are walked counter-clockwise, so only the outer one has a negative area
    return np.array(face), int(np.argmin(areas)), len(areas)


def _check_plane(n_vertices: int, ends: np.ndarray, n_faces: int) -> None:
    low, high = ends.min(axis=1), ends.max(axis=1)
    if len(np.unique(low * n_vertices + high)) < len(ends) or (low == high).any():
        raise UnsoundNet("the plane graph joins two junctions twice or one to itself")
    found = n_vertices - len(ends) + n_faces
    if found != 2:
        raise UnsoundNet(
            f"the graph is not plane and connected: junctions - cells + faces is {found}, must be 2",
            remedy="join its pieces and remove edges that cross",
        )


def _rim(
    xy: np.ndarray,
    ends: np.ndarray,
    after: np.ndarray,
    outside: np.ndarray,
    left: np.ndarray,
    right: np.ndarray,
) -> np.ndarray:
    """Free ports by walking round the outer face, clockwise, from twelve o'clock."""
    before = np.empty_like(after)
    before[after] = np.arange(len(after))
    walk = [int(outside[0])]
    while len(walk) < len(outside):
        walk.append(int(before[walk[-1] ^ 1]))
    # the outer face lies to the left of this walk, so it runs clockwise round the chip
    halves = np.array(walk)
    ports = np.column_stack([left[halves], right[halves ^ 1]]).ravel()
    a, b = xy[ends.ravel()[halves]], xy[ends[:, ::-1].ravel()[halves]]
    place = np.stack([0.75 * a + 0.25 * b, 0.25 * a + 0.75 * b], axis=1).reshape(-1, 2)
    centre = 0.5 * (xy.min(axis=0) + xy.max(axis=0))
    out = place - centre
    clockwise = np.round(np.arctan2(out[:, 0], out[:, 1]) % (2 * np.pi), _DIGITS)
    return np.roll(ports, -int(np.argmin(clockwise % round(2 * np.pi, _DIGITS))))


def from_polygons(polygons: np.ndarray) -> PlaneLattice:
    """The lattice of equal polygons side by side: float (F, corners, 2).

    Corners that fall together are one junction, sides that fall together one cell.
    """
    corners = np.asarray(polygons, float)
    grid = np.round(corners.reshape(-1, 2), _DIGITS) + 0.0
    _, first, vertex = np.unique(grid, axis=0, return_index=True, return_inverse=True)
    around = vertex.reshape(corners.shape[:2])
    sides = np.stack([around, np.roll(around, -1, axis=1)], axis=-1).reshape(-1, 2)
    return plane_lattice(corners.reshape(-1, 2)[first], np.unique(np.sort(sides, axis=1), axis=0))


def _at_least_one(**counts: int) -> None:
    for name, count in counts.items():
        if count < 1:
            raise OutOfRange(f"{name} is {count}, must be at least 1")


def _hexagons(column: np.ndarray, row: np.ndarray) -> PlaneLattice:
    """Hexagons with a corner on top; `column` in widths, `row` in rows, both may be fractions."""
    turn = np.pi / 6 + np.arange(6) * np.pi / 3
    centre = np.stack([ROOT3 * column, -1.5 * row], axis=-1)
    return from_polygons(centre[:, None, :] + np.stack([np.cos(turn), np.sin(turn)], axis=-1))


def hexagonal(rings: int) -> PlaneLattice:
    """Hexagons in rings round one: 9 R^2 - 3 R cells, 6 R^2 junctions, 24 R - 12 free ports.

    Source: counting; R rings hold 3 R^2 - 3 R + 1 hexagons.
    """
    _at_least_one(rings=rings)
    span = np.arange(1 - rings, rings)
    q, r = (g.ravel() for g in np.meshgrid(span, span, indexing="ij"))
    kept = abs(q + r) < rings
    q, r = q[kept], r[kept]
    return _hexagons(q + 0.5 * r, r)


def hexagonal_rows(rows: int, columns: int) -> PlaneLattice:
    """Hexagons in rows, every second row half a hexagon to the right: 3 r c + 2 r + 2 c - 1 cells."""
    _at_least_one(rows=rows, columns=columns)
    row, column = (g.ravel() for g in np.meshgrid(np.arange(rows), np.arange(columns), indexing="ij"))
    return _hexagons(column + 0.5 * (row % 2), row)


def square(rows: int, columns: int) -> PlaneLattice:
    """Squares in rows: r (c + 1) + c (r + 1) cells, 4 (r + c) free ports."""
    _at_least_one(rows=rows, columns=columns)
    row, column = (g.ravel() for g in np.meshgrid(np.arange(rows), np.arange(columns), indexing="ij"))
    corner = np.array([[0, 0], [1, 0], [1, -1], [0, -1]])
    return from_polygons(np.stack([column, -row], axis=-1)[:, None, :] + corner)


def trigrid(rows: int, columns: int) -> PlaneLattice:
    """Triangles, two in each place of a leaning grid: 3 r c + r + c cells, 4 (r + c) free ports."""
    _at_least_one(rows=rows, columns=columns)
    row, column = (g.ravel() for g in np.meshgrid(np.arange(rows), np.arange(columns), indexing="ij"))
    upper = np.array([[0, 0], [1, 0], [0, 1]])  # column, row
    lower = np.array([[1, 0], [1, 1], [0, 1]])
    place = np.stack([column, row], axis=-1)[:, None, :]
    grid = np.concatenate([place + upper, place + lower])
    return from_polygons(np.stack([grid[..., 0] + 0.5 * grid[..., 1], -0.5 * ROOT3 * grid[..., 1]], axis=-1))
