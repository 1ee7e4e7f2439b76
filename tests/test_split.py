"""Light divided among outputs: ratios and power checked by solving all waves of the chip."""

from dataclasses import replace
from itertools import product

import numpy as np
import pytest
from plane_nets import Light, as_drawn, plane_net, wide_reach

from meshctl.mesh.meshfile import lattice as named_lattice
from meshctl.mesh.plane import hexagonal
from meshctl.mesh.response import Response
from meshctl.solver.reach import full_reach
from meshctl.solver.route import find_routes
from meshctl.solver.split import throughput_of
from meshctl.solver.switches import settings_for
from meshctl.solver.waves import route_graph
from meshctl.solver.wish import parse_wish


def random_split(rim, fan_out, rng):
    ends = rng.choice(rim, fan_out + 1, replace=False) + 1
    share = rng.random(fan_out) + 0.1
    share /= share.sum()
    return f"p{ends[0]}:" + ",".join(f"p{e}={s:.12f}" for e, s in zip(ends[1:], share, strict=True))


def arriving(graph, net, as_built, routing, wish):
    light = Light(net, as_built)
    settings = settings_for(graph.switches, routing.share, routing.entering)
    power = light.power(settings)[0]
    parsed = parse_wish(wish)
    return np.array([light.between(power, parsed.source, sink) for sink in parsed.sinks]), parsed


@pytest.mark.parametrize("form", ["gap", "mzi"])
@pytest.mark.parametrize("fan_out", [2, 4, 8])
def test_split_on_lossless_lattice(form, fan_out):
    lattice = hexagonal(3)
    net = plane_net(lattice, form)
    as_built, reach = as_drawn(net), wide_reach(net)
    graph = route_graph(net, as_built, reach)
    found = 0
    for seed in range(10):
        wish = random_split(len(lattice.rim), fan_out, np.random.default_rng(seed))
        routing = find_routes(graph, [wish])
        assert routing.status in ("found", "impossible")
        if routing.found:
            found += 1
            power, parsed = arriving(graph, net, as_built, routing, wish)
            assert power == pytest.approx([share for _, share in parsed.shares], abs=1e-9)
            assert power.sum() == pytest.approx(1.0, abs=1e-9)  # nothing is lost
    assert found >= 2


@pytest.mark.parametrize("form", ["gap", "mzi"])
def test_losses_are_made_up_for(form):
    lattice = hexagonal(3)
    net = plane_net(lattice, form, side_um=600.0, loss_db_per_cm=3.0)
    rng = np.random.default_rng(5)
    as_built = as_drawn(net)
    loss = np.where(net.kind == 0, rng.uniform(0.05, 0.4, net.n_elements), 0.0)
    as_built, reach = replace(as_built, loss_db=loss), wide_reach(net)
    graph = route_graph(net, as_built, reach)
    wish = "p1:p12=0.5,p25=0.3,p40=0.2"
    routing = find_routes(graph, [wish])
    power, parsed = arriving(graph, net, as_built, routing, wish)
    assert power / power.sum() == pytest.approx([0.5, 0.3, 0.2], abs=1e-9)
    assert power.sum() < 0.9
    wanted = {graph.end_row[name]: share for name, share in parsed.shares}
    predicted = throughput_of(graph, [route.passes for route in routing.routes], wanted)
    entrance = 10 ** (-graph.entry_loss_db[graph.end_row["p1"]] / 10)
    assert power.sum() == pytest.approx(predicted * entrance, rel=1e-9)


def test_unequal_arms_are_allowed_for():
    lattice = hexagonal(2)
    net = plane_net(lattice, "mzi")
    as_built, reach = as_drawn(net), wide_reach(net)
    arms = np.array([name.endswith("upper") for name in net.names.elements])
    as_built = replace(as_built, loss_db=np.where(arms, 0.8, 0.0))
    graph = route_graph(net, as_built, reach)
    wish = "p1:p9=0.25,p20=0.75"
    routing = find_routes(graph, [wish])
    power, _ = arriving(graph, net, as_built, routing, wish)
    # cells with unequal arms leak, and leaks come round: 1e-3 is the square of the leaking field at 0.8 dB
    assert power / power.sum() == pytest.approx([0.25, 0.75], abs=5e-3)


def test_splitting_errors_are_allowed_for():
    mesh = named_lattice("rectangular", modes=8)
    error = np.where(mesh.net.kind == 0, np.random.default_rng(2).normal(0.0, 0.02, mesh.net.n_elements), 0.0)
    as_built, reach = replace(mesh.as_built, error_rad=error), full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, as_built, reach)
    routing = find_routes(graph, ["in4:out1=0.6,out7=0.4"])
    settings = settings_for(graph.switches, routing.share, routing.entering)
    power = np.abs(Response(mesh.net, as_built).matrix(settings)[:, 3]) ** 2
    # crosses leak sin^2(e1 + e2), some 1e-3 each, and leaks meet the signal: field 0.03
    assert power[[0, 6]] / power[[0, 6]].sum() == pytest.approx([0.6, 0.4], abs=0.03)


def test_splits_and_routes_go_together():
    mesh = named_lattice("rectangular", modes=8)
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    wishes = ["in1:out3", "in5:out8=0.7,out6=0.1,out5=0.2", "in2:out1=0.5,out2=0.5"]
    routing = find_routes(graph, wishes)
    assert routing.status == "found"
    settings = settings_for(graph.switches, routing.share, routing.entering)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    assert power[2, 0] == pytest.approx(1.0, abs=1e-9)
    assert power[[7, 5, 4], 4] == pytest.approx([0.7, 0.1, 0.2], abs=1e-9)
    assert power[[0, 1], 1] == pytest.approx([0.5, 0.5], abs=1e-9)


def test_several_splits_share_no_cell():
    lattice = hexagonal(5)
    net = plane_net(lattice)
    as_built, reach = as_drawn(net), wide_reach(net)
    graph = route_graph(net, as_built, reach)
    found = 0
    for seed in range(12):
        ends = np.random.default_rng(seed).choice(len(lattice.rim), 9, replace=False) + 1
        wishes = [f"p{a}:p{b}=0.3,p{c}=0.7" for a, b, c in ends.reshape(3, 3)]
        routing = find_routes(graph, wishes)
        assert routing.status in ("found", "impossible")
        found += routing.found
        for wish in wishes if routing.found else []:
            power, _ = arriving(graph, net, as_built, routing, wish)
            assert power == pytest.approx([0.3, 0.7], abs=1e-9)
    assert found >= 6  # the others are proved impossible


def test_tree_splits_to_all_its_outputs():
    mesh = named_lattice("tree", modes=8)
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    share = np.arange(1, 9) / 36
    routing = find_routes(graph, ["in1:" + ",".join(f"out{k + 1}={s:.15f}" for k, s in enumerate(share))])
    settings = settings_for(graph.switches, routing.share, routing.entering)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)[:, 0]) ** 2
    assert power == pytest.approx(share, abs=1e-9)


def test_impossible_splits_agree_with_small_lattice():
    # one ring, 6 cells: a split of two needs one cell divided and all others in a state: 6 x 2^5 cases by hand
    lattice = hexagonal(1)
    net = plane_net(lattice)
    graph = route_graph(net, as_drawn(net), wide_reach(net))
    rim = lattice.rim.tolist()
    parted = set()
    for states in product((0, 1, 2), repeat=6):
        if states.count(2) != 1:
            continue
        for source in range(12):
            reached = _ends_of(lattice, rim[source], states)
            if reached is not None and len(reached) == 2:
                parted.add((source, *sorted(rim.index(p) for p in reached)))
    rng = np.random.default_rng(0)
    verdicts = set()
    for _ in range(60):
        source, one, two = rng.choice(12, 3, replace=False).tolist()
        routing = find_routes(graph, [f"p{source + 1}:p{one + 1},p{two + 1}"])
        exists = (source, *sorted((one, two))) in parted
        assert routing.status == ("found" if exists else "impossible")
        verdicts.add(exists)
    assert verdicts == {True, False}


def _ends_of(lattice, source, states):
    """Ports that light from `source` leaves by; None where it comes back to a divided cell."""
    ends, waiting, divided = set(), [source], set()
    while waiting:
        at = waiting.pop()
        cell, state = at // 4, states[at // 4]
        if state == 2 and cell in divided:
            return None
        divided |= {cell} if state == 2 else set()
        for s in (0, 1) if state == 2 else (state,):
            leaving = 4 * cell + 2 * (1 - at % 4 // 2) + (at % 2 ^ s)
            if lattice.mate[leaving] >= 0:
                waiting.append(int(lattice.mate[leaving]))
            else:
                ends.add(leaving)
    return ends


def test_divided_cell_serves_no_other_wave():
    # two modes, one cell: dividing in1 leaves no way for in2
    mesh = named_lattice("rectangular", modes=2)
    graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
    assert find_routes(graph, ["in1:out1=0.5,out2=0.5"]).status == "found"
    routing = find_routes(graph, ["in1:out1=0.5,out2=0.5", "in2:out2"])
    assert routing.status == "impossible"
