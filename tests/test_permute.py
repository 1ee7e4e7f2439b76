"""Permutations in closed form, checked by swapping lanes and by light; the Benes lattice."""

from itertools import permutations

import numpy as np
import pytest

from meshctl.errors import NoClosedForm, OutOfRange, WrongUsage
from meshctl.mesh.lattices import benes
from meshctl.mesh.meshfile import lattice
from meshctl.mesh.response import Response
from meshctl.optics.elements import CROSSING
from meshctl.solver.permute import permuter
from meshctl.solver.reach import Reach, full_reach
from meshctl.solver.route import find_routes
from meshctl.solver.switches import settings_for
from meshctl.solver.waves import route_graph

SHAPES = ("rectangular", "triangular", "benes")


def prepared(shape, modes, **words):
    mesh = lattice(shape, modes=modes, **words)
    reach = full_reach(mesh.net.setting_is_angle)
    return mesh, route_graph(mesh.net, mesh.as_built, reach)


def arrived(mesh, graph, states):
    """Where light ends for states [B, R], by swapping lanes cell by cell: outputs [B, N] of inputs.

    Uses columns and lanes of the drawn lattice alone: cells c{column}_{row}, crossings x{gap}_{step}_{lane}.
    """
    n = len(mesh.net.inputs)
    rows = {name: k for k, name in enumerate(graph.switches.names)}
    events = []
    for c, (x, y) in enumerate(mesh.net.cell_xy_um.tolist()):
        upper = round(-y / 127.0 - 0.5)  # pitch of lanes; a cell stands between its two
        events.append((x / 400.0 - 0.5, 0, upper, rows[mesh.net.names.cells[c]]))
    for e in np.flatnonzero(mesh.net.kind == CROSSING).tolist():
        gap, step, lane = (int(word) for word in mesh.net.names.elements[e][1:].split("_"))
        events.append((gap - 1 + 0.5, step, lane - 1, None))
    at = np.tile(np.arange(n), (len(states), 1))  # which input's light is on each lane
    for _, _, upper, row in sorted(events, key=lambda e: e[:3]):
        swap = np.ones(len(states), bool) if row is None else states[:, row] == 1
        at[np.ix_(swap, [upper, upper + 1])] = at[np.ix_(swap, [upper + 1, upper])]
    return np.argsort(at, axis=1)


@pytest.mark.parametrize("shape", SHAPES)
def test_all_permutations_of_eight(shape):
    mesh, graph = prepared(shape, 8)
    form = permuter(graph)
    wanted = np.array(list(permutations(range(8))))
    states = np.array([form.states(order) for order in wanted])
    assert len(wanted) == 40320
    assert np.array_equal(arrived(mesh, graph, states), wanted)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("modes", [2, 4, 16])
def test_permutation_is_what_light_does(shape, modes):
    mesh, graph = prepared(shape, modes)
    response, rng = Response(mesh.net, mesh.as_built), np.random.default_rng(modes)
    for _ in range(10):
        order = rng.permutation(modes)
        settings = settings_for(graph.switches, permuter(graph).states(order).astype(float))
        power = np.abs(response.matrix(settings)) ** 2
        assert power[order, np.arange(modes)] == pytest.approx(1.0, abs=1e-9)  # rounding over 31 columns


@pytest.mark.parametrize("shape", ["rectangular", "benes"])
def test_large_permutation_arrives_as_wished(shape):
    mesh, graph = prepared(shape, 256)
    form, rng = permuter(graph), np.random.default_rng(0)
    orders = [rng.permutation(256) for _ in range(5)]
    states = [form.states(order) for order in orders]
    assert np.array_equal(arrived(mesh, graph, np.array(states)), np.array(orders))


def with_stuck_bar(mesh, cells):
    base = full_reach(mesh.net.setting_is_angle)
    low, high, period = base.low.copy(), base.high.copy(), base.period.copy()
    for cell in cells:
        setting = mesh.net.setting_of[mesh.net.names.element_row[f"{mesh.net.names.cells[cell]}.inner"]]
        low[setting] = high[setting] = np.pi  # inner = pi is bar
        period[setting] = 0.0
    return Reach(low, high, period, low)


def test_stuck_cell_and_spare_columns_route_all():
    mesh = lattice("rectangular", modes=8, spare=2)
    response, rng = Response(mesh.net, mesh.as_built), np.random.default_rng(1)
    for _ in range(100):
        reach = with_stuck_bar(mesh, [int(rng.integers(mesh.net.n_cells))])
        graph = route_graph(mesh.net, mesh.as_built, reach)
        order = rng.permutation(8)
        settings = settings_for(graph.switches, permuter(graph).states(order).astype(float))
        power = np.abs(response.matrix(settings)) ** 2
        assert power[order, np.arange(8)] == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("shape", ["rectangular", "benes"])
def test_stuck_cells_agree_with_exhaustion(shape):
    # 4 modes: all 2^6 states of 6 cells by hand; what exists is found, what does not is proved
    mesh = lattice(shape, modes=4)
    everything = (np.arange(64)[:, None] >> np.arange(6)) & 1
    _, free = prepared(shape, 4)
    for cell in range(6):
        graph = route_graph(mesh.net, mesh.as_built, with_stuck_bar(mesh, [cell]))
        row = graph.switches.names.index(mesh.net.names.cells[cell])
        possible = {tuple(o) for o in arrived(mesh, free, everything[everything[:, row] == 0]).tolist()}
        for order in permutations(range(4)):
            routing = find_routes(graph, [f"in{k + 1}:out{o + 1}" for k, o in enumerate(order)])
            assert routing.status == ("found" if order in possible else "impossible"), (cell, order)


def test_partial_permutation_of_many_lanes():
    mesh, graph = prepared("benes", 32)
    rng = np.random.default_rng(7)
    ins, outs = rng.permutation(32)[:24], rng.permutation(32)[:24]
    routing = find_routes(graph, [f"in{a + 1}:out{b + 1}" for a, b in zip(ins, outs, strict=True)])
    assert routing.status == "found"
    settings = settings_for(graph.switches, routing.share)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    assert power[outs, ins] == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize(("modes", "crossings"), [(2, 0), (4, 2), (8, 16), (16, 88)])
def test_benes_has_counted_parts(modes, crossings):
    mesh = lattice("benes", modes=modes)
    levels = int(np.log2(modes))
    assert mesh.net.n_cells == (2 * levels - 1) * modes // 2  # Benes 1964
    # a perfect shuffle of B lanes has (B/2)(B/2 - 1)/2 pairs out of order, each needs one crossing
    counted = sum(2 * (modes >> k) // 2 * ((modes >> k) // 2 - 1) // 2 << k for k in range(levels - 1))
    assert counted == crossings
    assert np.count_nonzero(mesh.net.kind == CROSSING) == crossings


def test_benes_reaches_every_permutation():
    mesh, graph = prepared("benes", 4)
    everything = (np.arange(64)[:, None] >> np.arange(6)) & 1
    reached = {tuple(order) for order in arrived(mesh, graph, everything).tolist()}
    assert len(reached) == 24  # rearrangeable: all 4! of them


def test_benes_crossings_cost_their_loss(chip, lattice_toml):
    from meshctl.mesh.meshfile import load

    mesh = load(chip(lattice_toml("benes", 8, more="[crossing]\nloss_db = 0.1")))
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    routing = find_routes(graph, ["in2:out7"])
    settings = settings_for(graph.switches, routing.share)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    assert routing.loss_db[0] > 0.05
    assert routing.loss_db[0] == pytest.approx(-10 * np.log10(power[6, 1]), abs=1e-9)


@pytest.mark.parametrize("words", [{"modes": 6}, {"modes": 8, "spare": 1}])
def test_unfit_benes_is_refused(words):
    with pytest.raises(OutOfRange, match="benes"):
        benes(**words)


def test_meshes_without_closed_form_say_so():
    for shape in ("tree", "switch"):
        words = {"modes": 4} if shape == "tree" else {}
        mesh = lattice(shape, **words)
        graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
        with pytest.raises(NoClosedForm, match="no closed form for permutations"):
            permuter(graph)


@pytest.mark.parametrize("order", [[0, 1, 2], [0, 0, 1, 2], [1, 2, 3, 4]])
def test_order_that_is_no_permutation(order):
    _, graph = prepared("rectangular", 4)
    with pytest.raises(WrongUsage, match="is no permutation of the 4 outputs"):
        permuter(graph).states(order)
