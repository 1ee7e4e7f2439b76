"""Lattices from plane graphs: counts, links, order of cells and of the rim."""

import numpy as np
import pytest

from meshctl.errors import OutOfRange, UnsoundNet
from meshctl.mesh.plane import from_polygons, hexagonal, hexagonal_rows, plane_lattice, square, trigrid

A1, A2, B1, B2 = range(4)
LATTICES = [hexagonal(1), hexagonal(3), hexagonal_rows(3, 4), square(2, 3), trigrid(3, 2)]
IDS = ["hexagon", "hexagons", "rows", "squares", "triangles"]


@pytest.mark.parametrize("rings", [1, 2, 6, 18])
def test_hexagon_rings_have_counted_parts(rings):
    lattice = hexagonal(rings)
    # counted by hand for 1 and 2 rings, and by Euler: each junction inside the rim has three cells
    assert lattice.n_cells == 9 * rings**2 - 3 * rings
    assert len(lattice.vertices) == 6 * rings**2
    assert len(lattice.rim) == 24 * rings - 12
    assert lattice.faces == 3 * rings**2 - 3 * rings + 1


@pytest.mark.parametrize(
    ("lattice", "cells", "rim", "faces"),
    [
        (hexagonal_rows(3, 4), 3 * 12 + 6 + 8 - 1, None, 12),  # 6 sides a hexagon, shared ones counted once
        (square(2, 3), 2 * 4 + 3 * 3, 20, 6),  # two free ports on each of 2 (r + c) rim cells
        (trigrid(3, 2), 3 * 6 + 5, 20, 12),
    ],
    ids=IDS[2:],
)
def test_other_lattices_have_counted_parts(lattice, cells, rim, faces):
    assert lattice.n_cells == cells
    assert lattice.faces == faces
    assert rim is None or len(lattice.rim) == rim


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_euler_count_of_every_lattice(lattice):
    # Euler 1758: junctions - cells + faces (the outer one too) = 2
    assert len(lattice.vertices) - lattice.n_cells + lattice.faces + 1 == 2


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_every_port_is_linked_or_free(lattice):
    linked = np.flatnonzero(lattice.mate >= 0)
    assert np.array_equal(lattice.mate[lattice.mate[linked]], linked)
    assert np.array_equal(np.sort(lattice.rim), np.flatnonzero(lattice.mate < 0))


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_linked_ports_lie_side_by_side(lattice):
    linked = np.flatnonzero(lattice.mate >= 0)
    apart = np.linalg.norm(lattice.port_xy[linked] - lattice.port_xy[lattice.mate[linked]], axis=1)
    # two quarters of a side round a corner, less the tenths aside: below half a side, 0.65 in hexagons
    assert apart.max() < 0.66


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_bar_everywhere_circles_every_polygon(lattice):
    through = np.arange(4 * lattice.n_cells) ^ 2  # a1 - b1, a2 - b2
    seen, loops = set(lattice.rim.tolist()), 0
    for port in lattice.rim.tolist():  # light from outside leaves again
        while port >= 0:
            seen |= {port, int(through[port])}
            port = int(lattice.mate[through[port]])
    for port in range(4 * lattice.n_cells):
        loops += port not in seen
        while port not in seen:
            seen |= {port, int(through[port])}
            port = int(lattice.mate[through[port]])
    assert loops == lattice.faces


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_cells_stand_in_reading_order(lattice):
    xy = np.round(lattice.cell_xy, 6)
    rows = [(-y, x) for x, y in xy.tolist()]
    assert rows == sorted(rows)
    a, b = lattice.vertices[lattice.ends[:, 0]], lattice.vertices[lattice.ends[:, 1]]
    level = abs(a[:, 0] - b[:, 0]) > 1e-6
    assert (a[level, 0] < b[level, 0]).all()
    assert (a[~level, 1] > b[~level, 1]).all()


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_rim_runs_once_clockwise_round(lattice):
    xy = lattice.port_xy[lattice.rim]
    centre = 0.5 * (lattice.vertices.min(axis=0) + lattice.vertices.max(axis=0))
    x, y = (xy - centre).T
    # signed area of the walk: negative is clockwise; start: nothing nearer behind twelve o'clock
    assert (x * np.roll(y, -1) - y * np.roll(x, -1)).sum() < 0
    clockwise = np.arctan2(x, y) % (2 * np.pi)
    assert clockwise.argmin() == 0


def test_side_one_lies_above_level_cells():
    lattice = square(1, 1)  # cells: top, left, right, bottom
    top, left = lattice.port_xy[:4], lattice.port_xy[4:8]
    assert top[A1, 1] > top[A2, 1]
    assert top[A1, 0] < top[B1, 0]
    assert left[A1, 1] > left[B1, 1]
    assert left[A1, 0] > left[A2, 0]  # looking down, left is east
    # inside: top a2 meets left a1, top b2 meets right a2
    assert lattice.mate[A2] == 4 + A1
    assert lattice.mate[B2] == 8 + A2
    # clockwise from the top: top b1, right a1 b1, bottom b2 a2, left b2 a2, top a1
    assert lattice.rim.tolist() == [B1, 8 + A1, 8 + B1, 12 + B2, 12 + A2, 4 + B2, 4 + A2, A1]


def test_any_plane_graph_is_a_lattice():
    # a wheel: four corners and a hub, four triangles
    corners = np.array([[0, 0], [2, 0], [2, 2], [0, 2], [1, 1]])
    edges = np.array([[0, 1], [1, 2], [2, 3], [3, 0], [4, 0], [1, 4], [2, 4], [4, 3]])
    wheel = plane_lattice(corners, edges)
    assert (wheel.n_cells, wheel.faces, len(wheel.rim)) == (8, 4, 8)


def test_crossing_edges_and_pieces_are_refused():
    corners = np.array([[0, 0], [1, 0], [1, 1], [0, 1]], float)
    with pytest.raises(UnsoundNet, match="not plane and connected"):
        plane_lattice(corners, np.array([[0, 1], [1, 2], [2, 3], [3, 0], [0, 2], [1, 3]]))
    with pytest.raises(UnsoundNet, match="twice"):
        plane_lattice(corners, np.array([[0, 1], [1, 2], [2, 0], [0, 1]]))
    apart = np.array([corners, corners + 5.0])
    with pytest.raises(UnsoundNet, match="not plane and connected"):
        from_polygons(apart)
    with pytest.raises(OutOfRange, match="rings is 0"):
        hexagonal(0)
