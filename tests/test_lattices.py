"""Regular meshes: how many cells, how deep, what they are called, where they stand."""

import networkx as nx
import numpy as np
import pytest

from meshctl.errors import WrongUsage
from meshctl.mesh.graph import network
from meshctl.mesh.lattices import LATTICES
from meshctl.mesh.meshfile import lattice, load


def cells_of(net):
    """Cells as a directed graph along the light, read off names and links."""
    graph, light = network(net), nx.DiGraph()
    light.add_nodes_from(net.names.cells)
    for _, _, ports in graph.edges(data="ports"):
        ends = [p for p in ports if "." in p]
        cells = [p.split(".")[0] for p in ends]
        if len(ends) == 2 and set(cells) <= set(light) and cells[0] != cells[1]:
            out = 0 if ends[0].split(".")[-1].startswith("b") else 1
            light.add_edge(cells[out], cells[1 - out])
    return light


@pytest.mark.parametrize("cell", ["mzi", "gap"])
@pytest.mark.parametrize("modes", range(2, 11))
@pytest.mark.parametrize("shape", ["rectangular", "triangular"])
def test_mesh_holds_every_pair_once(shape, modes, cell):
    # N (N - 1) / 2 cells, two settings each, one phase per output (Reck et al. 1994, Clements et al. 2016)
    net = lattice(shape, modes=modes, cell=cell).net
    assert net.n_cells == modes * (modes - 1) // 2
    assert net.n_settings == modes * (modes - 1) + modes


@pytest.mark.parametrize("modes", range(3, 10))
def test_rectangle_is_as_deep_as_wide(modes):
    # depth N (Clements et al. 2016)
    net = lattice("rectangular", modes=modes).net
    assert nx.dag_longest_path_length(cells_of(net)) + 1 == modes
    assert {name.split("_")[0] for name in net.names.cells} == {f"c{k}" for k in range(1, modes + 1)}


@pytest.mark.parametrize("modes", range(2, 10))
def test_triangle_has_its_known_depth(modes):
    # depth 2N - 3 (Reck et al. 1994)
    net = lattice("triangular", modes=modes).net
    assert nx.dag_longest_path_length(cells_of(net)) + 1 == 2 * modes - 3
    assert {name.split("_")[0] for name in net.names.cells} == {f"c{k}" for k in range(1, 2 * modes - 2)}


def test_eight_modes_have_documented_settings():
    net = lattice("rectangular", modes=8).net
    assert net.n_cells == 28
    assert sum(not name.startswith("out") for name in net.setting_names) == 56
    assert [name for name in net.setting_names if name.startswith("out")] == [f"out{k}.phase" for k in range(1, 9)]


def test_names_run_by_column_and_row():
    net = lattice("rectangular", modes=4).net
    assert net.names.cells == ["c1_1", "c1_2", "c2_1", "c3_1", "c3_2", "c4_1"]
    assert net.names.elements[:4] == ["c1_1.outer", "c1_1.split1", "c1_1.inner", "c1_1.split2"]
    assert net.inputs == ("in1", "in2", "in3", "in4")
    assert net.outputs == ("out1", "out2", "out3", "out4")


def test_roles_have_their_kinds_and_settings():
    net = lattice("rectangular", modes=2).net
    kinds = {name: (int(net.kind[e]), bool(net.setting_of[e] >= 0)) for e, name in enumerate(net.names.elements)}
    assert kinds["c1_1.outer"] == kinds["c1_1.inner"] == kinds["out1.phase"] == (1, True)
    assert kinds["c1_1.split1"] == kinds["c1_1.split2"] == (0, False)
    assert net.nominal[net.names.element_row["c1_1.split1"]] == np.pi / 4  # equal splitting


@pytest.mark.parametrize(("modes", "spare", "more"), [(8, 2, 7), (8, 1, 4), (5, 3, 6), (2, 1, 1)])
def test_spare_columns_go_on_alternating(modes, spare, more):
    plain, spared = (lattice("rectangular", modes=modes, spare=k).net for k in (0, spare))
    assert spared.n_cells - plain.n_cells == more
    assert spared.names.cells[: plain.n_cells] == plain.names.cells


def test_triangle_takes_spare_columns_too():
    plain, spared = (lattice("triangular", modes=4, spare=k).net for k in (0, 2))
    assert spared.n_cells - plain.n_cells == 3
    assert nx.dag_longest_path_length(cells_of(spared)) >= nx.dag_longest_path_length(cells_of(plain)) + 1


@pytest.mark.parametrize("modes", [2, 4, 16])
def test_tree_splits_one_input_binarily(modes):
    # a binary tree of N leaves has N - 1 nodes and log2 N levels
    net = lattice("tree", modes=modes).net
    light = cells_of(net)
    assert net.inputs == ("in1",)
    assert net.n_cells == modes - 1
    assert nx.is_arborescence(light) or modes == 2
    assert nx.dag_longest_path_length(light) + 1 == np.log2(modes)


def test_switch_meets_rows_with_columns():
    net = lattice("switch", cell="gap").net
    assert net.names.cells == ["x11", "x12", "x21", "x22"]
    assert net.inputs == ("in1", "in2", "add1", "add2")
    assert net.outputs == ("out1", "out2", "drop1", "drop2")
    assert set(cells_of(net).edges) == {("x11", "x12"), ("x11", "x21"), ("x12", "x22"), ("x21", "x22")}
    assert net.n_settings == 4


def test_cells_stand_on_their_pitch():
    net = lattice("rectangular", modes=4).net
    places = dict(zip(net.names.cells, net.cell_xy_um.tolist(), strict=True))
    assert places["c1_1"][0] == places["c1_2"][0]
    assert places["c2_1"][0] - places["c1_1"][0] == 400.0
    assert places["c1_1"][1] - places["c1_2"][1] == 2 * 127.0  # two lanes down


def test_balanced_mesh_loses_alike_everywhere(chip, lattice_toml):
    from meshctl.mesh.response import Response

    text = lattice_toml(modes=5, lattice="balanced = true", more="[coupler]\nloss_db = 0.3\n")
    mesh = load(chip(text))
    matrix = Response(mesh.net, mesh.as_built).matrix(np.random.default_rng(0).uniform(0, 6, mesh.net.n_settings))
    # five columns of two couplers of 0.3 dB on every way: 3 dB, and nothing but a scale
    assert np.abs(matrix.conj().T @ matrix - 10**-0.3 * np.eye(5)).max() <= 1e-13  # rounding of some 100 parts


def test_output_phases_can_be_left_out(chip, lattice_toml):
    net = load(chip(lattice_toml(modes=4, lattice="output_phases = false"))).net
    assert net.n_settings == 12


@pytest.mark.parametrize(
    ("shape", "size", "says"),
    [
        ("round", {"modes": 4}, "shape 'round' is not known"),
        ("rectangular", {}, "needs a number of modes"),
        ("rectangular", {"modes": 1}, "modes is 1; allowed is 2 to 4096"),
        ("rectangular", {"modes": 4, "spare": -1}, "spare is -1"),
        ("tree", {"modes": 6}, "a tree of 6 outputs is not binary; take a power of two, such as 8"),
        ("tree", {"modes": 4, "spare": 1}, "takes no spare columns"),
        ("switch", {"modes": 8}, "a switch has 4 modes, not 8"),
        ("rectangular", {"modes": 4, "cell": "ring"}, "cell 'ring' is not known"),
    ],
)
def test_sizes_that_fit_nothing_are_refused(shape, size, says):
    with pytest.raises(WrongUsage, match=says):
        lattice(shape, **size)


@pytest.mark.parametrize("shape", ["rectangular", "triangular", "tree", "switch"])
def test_every_shape_draws_its_die(shape):
    assert shape in LATTICES
    drawn, plain = (lattice(shape, modes=4, built=seed) for seed in (1, None))
    assert drawn.net.n_elements == plain.net.n_elements
    couplers = drawn.net.kind == 0
    assert (drawn.as_built.error_rad[couplers] != 0).all()
    assert (drawn.as_built.error_rad[~couplers] == 0).all()


def test_same_seed_draws_same_die():
    one, two, other = (lattice("rectangular", modes=5, built=seed) for seed in (7, 7, 8))
    assert one.hash == two.hash
    assert one.hash != other.hash


def test_dies_scatter_as_their_spread():
    # standard deviations of the default spread: splitting 0.02 rad, phase 1.8 rad (seeded, 992 and 1024 draws)
    mesh = lattice("rectangular", modes=32, built=5)
    couplers, offset = mesh.net.kind == 0, mesh.actuators.params["offset_rad"]
    # a sample's standard deviation scatters by 1 / sqrt(2 n) = 2.2 %: four of those
    assert abs(mesh.as_built.error_rad[couplers].std() / 0.02 - 1) <= 0.09
    assert abs(offset.std() / 1.8 - 1) <= 0.09
