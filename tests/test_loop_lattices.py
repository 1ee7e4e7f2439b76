"""Lattices whose light runs both ways, as mesh folders: names, counts, wrong sizes, curlew."""

import numpy as np
import pytest
from loop_meshes import loop_toml, response

from meshctl.mesh.meshfile import MESH_TOML, lattice, load, write
from meshctl.mesh.plane import hexagonal


# ---- lattices in a folder
@pytest.mark.parametrize("cell", ["gap", "mzi"])
@pytest.mark.parametrize(
    ("shape", "size", "cells", "ends"),
    # counted: 9 R^2 - 3 R, 24 R - 12; 3 r c + 2 r + 2 c - 1; r (c + 1) + c (r + 1), 4 (r + c); 3 r c + r + c
    [
        ("hexagonal", {"rings": 2}, 30, 36),
        ("hexagonal", {"rows": 2, "columns": 3}, 27, None),
        ("square", {"rows": 2, "columns": 3}, 17, 20),
        ("trigrid", {"rows": 2, "columns": 2}, 16, 16),
    ],
)
def test_loop_lattices_have_counted_parts(shape, size, cells, ends, cell):
    net = lattice(shape, **size, cell=cell).net
    assert net.n_cells == cells
    assert net.n_settings == 2 * cells
    assert net.inputs == net.outputs == tuple(f"p{k + 1}" for k in range(len(net.externals)))
    assert ends is None or len(net.externals) == ends


def test_loop_cells_name_their_parts():
    names = lattice("hexagonal", rings=1, cell="gap").net.names
    assert names.elements[:5] == ["c1.common1", "c1.common2", "c1.coupler", "c1.guide1", "c1.guide2"]
    assert names.cells == ["c1", "c2", "c3", "c4", "c5", "c6"]
    other = lattice("square", rows=1, columns=1).net.names.elements[:6]
    assert other == ["c1.split1", "c1.upper", "c1.lower", "c1.split2", "c1.guide1", "c1.guide2"]


def test_both_commons_share_one_setting():
    net = lattice("hexagonal", rings=1, cell="gap").net
    row = net.names.element_row
    assert net.setting_of[row["c2.common1"]] == net.setting_of[row["c2.common2"]] == 2
    assert net.setting_names[:4] == ["c1.common1", "c1.coupler", "c2.common1", "c2.coupler"]
    arms = lattice("hexagonal", rings=1).net
    assert arms.setting_names[:2] == ["c1.upper", "c1.lower"]


def test_cell_is_its_product_of_blocks():
    mesh = lattice("square", rows=1, columns=1)
    settings = np.zeros(8)  # three cells cross, so that light turns round the square no further than one corner
    settings[:2] = 0.4, 1.7
    found = response(mesh).matrix(settings)
    # C(pi/4) diag(upper, lower) C(pi/4): what goes into cell 1 outside and leaves it there
    half = np.array([[1, 1j], [1j, 1]]) / np.sqrt(2)
    cell = half @ np.diag(np.exp(1j * settings[:2])) @ half
    own = np.flatnonzero(mesh.net.cell_of[mesh.net.element_of_port[mesh.net.input_ports]] == 0)
    assert len(own) == 2
    bar = found[own[1], own[0]]
    assert min(abs(bar - cell[0, 0]), abs(bar - cell[1, 1])) < 1e-14
    assert (np.abs(found[:, own[0]]) ** 2).sum() == pytest.approx(1, abs=1e-13)


def test_lattice_ends_match_the_plane():
    plane, mesh = hexagonal(2), lattice("hexagonal", rings=2, cell="gap")
    owner = mesh.net.cell_of[mesh.net.element_of_port[mesh.net.input_ports]]
    assert np.array_equal(owner, plane.rim // 4)
    assert np.array_equal(mesh.net.cell_xy_um, 250.0 * plane.cell_xy)


def test_new_loop_mesh_reads_back(run, tmp_path):
    for words in (("hexagonal", "--rings", 2), ("square", "--rows", 2, "--columns", 3), ("trigrid", "--rows", 1)):
        code, said, remarks = run("new", words[0], tmp_path / words[0], *words[1:], "--cell", "gap", "--built", 5)
        if words[0] == "trigrid":
            assert code == 2
            assert "a trigrid lattice is sized by rows and columns" in remarks
        else:
            assert (code, remarks) == (0, "")
            mesh = load(tmp_path / words[0])
            assert f"{mesh.net.n_cells} cells, {2 * mesh.net.n_cells} settings" in said
            assert np.abs(mesh.as_built.error_rad).max() > 0


@pytest.mark.parametrize(
    ("edit", "said"),
    [
        (("rings = 2", ""), "a hexagonal lattice needs 'rings' or 'rows' and 'columns', not nothing"),
        (("rings = 2", "rings = 2\nrows = 3"), "needs 'rings' or 'rows' and 'columns', not 'rings' and 'rows'"),
        (("rings = 2", "rings = 0"), "0 is out of range; allowed is 1 to 64"),
        (("rings = 2", "rings = 2\nmodes = 8"), "a hexagonal lattice takes no 'modes'"),
        (("side_um = 200.0", "side_um = -1.0"), "-1 is out of range; allowed is above 0"),
        (("hexagonal", "hexagon"), "shape 'hexagon' is not known; did you mean 'hexagonal'?"),
        (('"hexagonal"\nrings = 2', '"rectangular"\nmodes = 4'), "a rectangular lattice takes no 'side_um'"),
    ],
)
def test_wrong_loop_lattices_are_refused(run, chip, edit, said):
    code, _, remarks = run("check", chip(loop_toml().replace(*edit)))
    assert code == 3
    assert MESH_TOML in remarks
    assert said in remarks


def test_curlew_is_written_back_equal(tmp_path):
    mesh = load("meshes/curlew")
    again = load(write(mesh, tmp_path / "curlew"))
    assert again.hash == mesh.hash
    assert again.net.setting_names == mesh.net.setting_names
    assert again.net.reflections == mesh.net.reflections
    for a, table in mesh.actuators.tables.items():
        assert np.array_equal(again.actuators.tables[a], table)


def test_curlew_reaches_bar_and_cross():
    mesh = load("meshes/curlew")
    tables = mesh.actuators.tables
    assert len(tables) == 30
    for table in tables.values():
        assert table[0, 1] < np.pi < 1.5 * np.pi < table[-1, 1]
        assert table[-1, 0] < 10.0
