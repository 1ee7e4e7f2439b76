"""Nets as records, and their view as networkx graphs."""

import dataclasses

import networkx as nx
import numpy as np
import pytest

from meshctl.mesh.graph import network
from meshctl.mesh.meshfile import lattice, load


@pytest.mark.parametrize("modes", [2, 5, 8])
def test_graph_counts_parts_and_links(modes):
    # per cell 4 parts and 4 inner links; per lane a guide and a phase; ports out are joined to ports in
    graph = network(lattice("rectangular", modes=modes).net)
    cells = modes * (modes - 1) // 2
    parts, ports = 4 * cells + 2 * modes, 12 * cells + 4 * modes
    assert graph.number_of_nodes() == parts + 2 * modes
    assert graph.number_of_edges() == (ports - 2 * modes) // 2 + 2 * modes


def test_graph_is_one_connected_piece():
    graph = network(lattice("triangular", modes=6).net)
    assert nx.number_connected_components(graph) == 1
    kinds = nx.get_node_attributes(graph, "kind")
    assert all(graph.degree(node) == {"coupler": 4, "external": 1}.get(kind, 2) for node, kind in kinds.items())


def test_graph_keeps_both_links_between_couplers(chip):
    toml = (
        'format = 1\nname = "two"\nwavelength_nm = 1550.0\ninputs = ["i1", "i2"]\noutputs = ["o1", "o2"]\n'
        'elements = [["x", "coupler"], ["y", "coupler", {cross_power = 1.0}]]\n'
        'links = ["i1 x.a1", "i2 x.a2", "x.b1 y.a2", "x.b2 y.a1", "y.b1 o1", "y.b2 o2"]\n'
    )
    graph = network(load(chip(toml)).net)
    assert {edge["ports"] for edge in graph["x"]["y"].values()} == {("x.b1", "y.a2"), ("x.b2", "y.a1")}
    assert graph.nodes["y"]["nominal"] == pytest.approx(np.pi / 2, abs=1e-15)  # cross_power = sin^2 of the angle
    assert graph.graph["wavelength_nm"] == 1550.0


def test_settings_are_named_after_their_elements():
    net = lattice("rectangular", modes=3, cell="gap").net
    assert net.setting_names[:4] == ["c1_1.phase", "c1_1.coupler", "c2_1.phase", "c2_1.coupler"]
    assert net.setting_names[-3:] == ["out1.phase", "out2.phase", "out3.phase"]
    assert net.setting_is_angle.tolist() == [False, True] * 3 + [False] * 3


def test_ports_are_named_element_and_letter():
    net = lattice("rectangular", modes=2).net
    names = [net.port_name(port) for port in range(4)]
    assert names == ["c1_1.outer.a", "c1_1.outer.b", "c1_1.split1.a1", "c1_1.split1.a2"]
    assert net.port_name(net.externals["in1"]) == "c1_1.outer.a"
    assert net.port_name(net.externals["in2"]) == "c1_1.split1.a2"


def test_arrays_of_a_mesh_are_read_only():
    mesh = lattice("rectangular", modes=3, built=1)
    records = (mesh.net, mesh.as_built, mesh.actuators, mesh.channels)
    arrays = [a for record in records for a in vars(record).values() if isinstance(a, np.ndarray)]
    assert len(arrays) > 20
    assert not any(array.flags.writeable for array in arrays)


def test_as_built_holds_stuck_settings():
    mesh = lattice("rectangular", modes=2)
    stuck = np.full(4, np.nan)
    stuck[2] = 0.25
    held = dataclasses.replace(mesh.as_built, stuck_rad=stuck).in_force(np.array([1.0, 2.0, 3.0, 4.0]))
    assert held.tolist() == [1.0, 2.0, 0.25, 4.0]
