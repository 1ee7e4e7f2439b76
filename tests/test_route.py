"""Routes found on meshes with and without loops, each checked by solving all waves of the chip."""

from dataclasses import replace
from itertools import permutations, product

import networkx as nx
import numpy as np
import pytest
from plane_nets import (
    Light,
    as_drawn,
    cells_by_all_states,
    least_total_cells,
    plane_net,
    reached_by_all_states,
    traced_wishes,
    wide_reach,
)

from meshctl.errors import WrongUsage
from meshctl.mesh.meshfile import lattice as named_lattice
from meshctl.mesh.meshfile import load
from meshctl.mesh.plane import hexagonal, square, trigrid
from meshctl.mesh.response import Response
from meshctl.solver import conflict
from meshctl.solver.reach import Reach, full_reach
from meshctl.solver.route import STATUSES, find_routes
from meshctl.solver.switches import settings_for
from meshctl.solver.waves import route_graph
from meshctl.solver.wish import parse_wish

LOSSLESS = 1e-9  # of arriving power: rounding over some hundred cells


class Chip:
    """A plane lattice as a net, its search graph and its light."""

    def __init__(self, lattice, form="gap", **net_words):
        self.lattice = lattice
        self.net = plane_net(lattice, form, **net_words)
        self.as_built, self.reach = as_drawn(self.net), wide_reach(self.net)
        self.graph = route_graph(self.net, self.as_built, self.reach)
        self.light = Light(self.net, self.as_built)

    def arriving(self, routing, wishes):
        """Power that arrives for each wish, unused cells left at rest."""
        settings = settings_for(routing.graph.switches, routing.share, routing.entering)
        power = self.light.power(settings)[0]
        return np.array([self.light.between(power, *wish.partition("@")[0].split(":")) for wish in wishes])


CURLEW = Chip(hexagonal(2))
SMALL = Chip(hexagonal(1))


def waves_of(lattice):
    """Every wave of a plane lattice as a directed graph, cells as edges, from the lattice alone."""
    graph = nx.DiGraph()
    name = {p: f"p{k + 1}" for k, p in enumerate(lattice.rim.tolist())}
    for p in range(4 * lattice.n_cells):
        for state in (0, 1):
            leaving = 4 * (p // 4) + 2 * (1 - p % 4 // 2) + (p % 2 ^ state)
            to = int(lattice.mate[leaving])
            graph.add_edge(p, to if to >= 0 else name[leaving])
    return graph, {n: p for p, n in name.items()}


def test_single_route_is_shortest_by_networkx():
    graph, port = waves_of(CURLEW.lattice)
    same = 0
    for k in range(2, 37):
        routing = find_routes(CURLEW.graph, [f"p1:p{k}"])
        shortest = nx.shortest_path_length(graph, port["p1"], f"p{k}")
        cells = routing.routes[0].cells if routing.found else None
        if cells == shortest:
            same += 1
        else:  # walks of networkx may pass a cell in two states; the integer programme knows better
            assert cells == least_total_cells(CURLEW.lattice, [f"p1:p{k}"])
    assert same >= 30


@pytest.mark.parametrize("form", ["gap", "mzi"])
@pytest.mark.parametrize("count", [2, 5, 10, 20])
def test_traced_sets_are_found_on_curlew(form, count):
    chip = CURLEW if form == "gap" else Chip(hexagonal(2), "mzi")
    for seed in range(5):
        wishes = traced_wishes(chip.lattice, count, np.random.default_rng(seed))
        routing = find_routes(chip.graph, wishes, seed=seed)
        assert routing.status == "found"
        assert chip.arriving(routing, wishes) == pytest.approx(1.0, abs=LOSSLESS)


@pytest.mark.parametrize("lattice", [square(4, 5), trigrid(4, 4)], ids=["squares", "triangles"])
def test_traced_sets_are_found_elsewhere(lattice):
    chip = Chip(lattice)
    wishes = traced_wishes(lattice, 6, np.random.default_rng(1))
    routing = find_routes(chip.graph, wishes)
    assert routing.status == "found"
    assert chip.arriving(routing, wishes) == pytest.approx(1.0, abs=LOSSLESS)


@pytest.mark.sample
@pytest.mark.slow
@pytest.mark.parametrize("rings", [6, 11])
@pytest.mark.parametrize("count", [2, 5, 10, 20])
def test_traced_sets_are_found_at_size(rings, count):
    chip = Chip(hexagonal(rings))
    for seed in range(15):
        wishes = traced_wishes(chip.lattice, count, np.random.default_rng(seed))
        routing = find_routes(chip.graph, wishes, seed=seed)
        assert routing.status == "found"
        if seed < 3:
            assert chip.arriving(routing, wishes) == pytest.approx(1.0, abs=LOSSLESS)


def test_large_set_is_found_quickly():
    chip = Chip(hexagonal(6))
    wishes = traced_wishes(chip.lattice, 10, np.random.default_rng(4))
    routing = find_routes(chip.graph, wishes)
    assert routing.status == "found"
    assert chip.arriving(routing, wishes) == pytest.approx(1.0, abs=LOSSLESS)


@pytest.mark.parametrize("count", [2, 5, 10])
def test_total_length_is_near_integer_optimum(count):
    for seed in range(3):
        wishes = traced_wishes(CURLEW.lattice, count, np.random.default_rng(seed))
        routing = find_routes(CURLEW.graph, wishes)
        least = least_total_cells(CURLEW.lattice, wishes)
        assert least <= sum(route.cells for route in routing.routes) <= 1.1 * least


def test_small_lattice_agrees_with_all_states():
    reached = reached_by_all_states(SMALL.lattice)  # brute force over 2^6 states
    rng = np.random.default_rng(0)
    statuses = set()
    for _ in range(150):
        ends = rng.permutation(12)
        count = int(rng.integers(1, 4))
        pairs = list(zip(ends[:count].tolist(), ends[6 : 6 + count].tolist(), strict=True))
        exists = np.logical_and.reduce([reached[:, a] == b for a, b in pairs]).any()
        routing = find_routes(SMALL.graph, [f"p{a + 1}:p{b + 1}" for a, b in pairs])
        assert routing.status == ("found" if exists else "impossible"), pairs
        statuses.add(routing.status)
    assert statuses == {"found", "impossible"}


def test_cheapest_way_is_shortest_of_all_states():
    # brute force over 2^6 states: least number of cells by which each pair is joined at all
    cells = cells_by_all_states(SMALL.lattice)
    for a in range(12):
        for b in range(12):
            if a == b:
                continue
            routing = find_routes(SMALL.graph, [f"p{a + 1}:p{b + 1}"])
            least = cells.get((a, b))
            assert routing.found == (least is not None)
            if routing.found:
                assert routing.routes[0].cells == least
                assert routing.words == "found by negotiation"  # without the help of proofs


def test_loss_is_what_light_loses():
    chip = Chip(hexagonal(2), side_um=500.0, loss_db_per_cm=2.0)
    lossy = replace(chip.as_built, loss_db=np.where(chip.net.kind == 0, 0.3, 0.0))
    graph = route_graph(chip.net, lossy, chip.reach)
    routing = find_routes(graph, ["p1:p14", "p8:p30"])
    settings = settings_for(graph.switches, routing.share)
    power = Light(chip.net, lossy).power(settings)[0]
    for route in routing.routes:
        arrives = chip.light.between(power, route.wish.source, route.sink)
        assert route.loss_db == pytest.approx(-10 * np.log10(arrives), abs=1e-9)
        assert route.length_um == pytest.approx(500.0 * route.cells)  # a guide behind each end b, one or none


def test_lossy_cell_is_gone_round():
    base = find_routes(CURLEW.graph, ["p1:p15"]).routes[0]
    node, _ = base.passes[len(base.passes) // 2]
    loss = np.zeros(CURLEW.net.n_elements)
    loss[CURLEW.graph.switches.couplers[node >> 2, 0]] = 40.0
    graph = route_graph(CURLEW.net, replace(CURLEW.as_built, loss_db=loss), CURLEW.reach)
    assert find_routes(graph, ["p1:p15"]).loss_db[0] < 1.0


def test_avoided_cells_are_not_passed():
    first = find_routes(CURLEW.graph, ["p1:p15"])
    node, _ = first.routes[0].passes[4]
    middle = first.graph.switches.names[node >> 2]
    second = find_routes(CURLEW.graph, ["p1:p15"], avoid=[middle])
    assert second.status == "found"
    assert middle not in second.states
    assert CURLEW.arriving(second, ["p1:p15"]) == pytest.approx(1.0, abs=LOSSLESS)


def test_avoided_guide_is_not_passed():
    first = find_routes(CURLEW.graph, ["p1:p15"])
    start, element = CURLEW.graph.passed
    node, state = first.routes[0].passes[3]
    guide = CURLEW.net.names.elements[element[start == 2 * node + state][0]]
    second = find_routes(CURLEW.graph, ["p1:p15"], avoid=[guide])
    assert guide.split(".")[1] in ("guide1", "guide2", "common1", "common2")
    assert second.status == "found"
    assert second.routes[0].passes != first.routes[0].passes


def test_stuck_cells_are_passed_as_stuck():
    rng = np.random.default_rng(2)
    stuck = np.full(CURLEW.net.n_settings, np.nan)
    angles = np.flatnonzero(CURLEW.net.setting_is_angle)
    inner = np.setdiff1d(np.arange(30), CURLEW.lattice.rim // 4)
    for setting in angles[rng.choice(inner, 5, replace=False)]:
        stuck[setting] = rng.choice([0.0, np.pi / 2])
    as_built = replace(CURLEW.as_built, stuck_rad=stuck)
    graph, light = route_graph(CURLEW.net, as_built, CURLEW.reach), Light(CURLEW.net, as_built)
    found = 0
    for k in range(2, 37):
        routing = find_routes(graph, [f"p1:p{k}"])
        found += routing.found
        if routing.found:
            power = light.power(settings_for(graph.switches, routing.share))[0]
            assert light.between(power, "p1", f"p{k}") == pytest.approx(1.0, abs=LOSSLESS)
    assert found >= 25


def test_half_open_cells_are_not_passed():
    angles = np.flatnonzero(CURLEW.net.setting_is_angle)
    low, high = CURLEW.reach.low.copy(), CURLEW.reach.high.copy()
    low[angles[12:18]] = high[angles[12:18]] = np.pi / 4  # half of the light goes either way
    reach = Reach(low, high, CURLEW.reach.period, low)
    graph = route_graph(CURLEW.net, CURLEW.as_built, reach)
    used = {name for k in range(2, 37) for name in find_routes(graph, [f"p1:p{k}"]).states}
    assert len(used) >= 12
    assert not used & {f"c{c + 1}" for c in range(12, 18)}


def test_wished_length_is_met_exactly():
    shortest = find_routes(CURLEW.graph, ["p1:p15"]).routes[0].cells
    for more in (2, 6, 8):  # the lattice has no way of 13 cells
        wish = f"p1:p15@{shortest + more}cells"
        routing = find_routes(CURLEW.graph, [wish])
        assert routing.status == "found"
        assert routing.routes[0].cells == shortest + more
        assert CURLEW.arriving(routing, [wish]) == pytest.approx(1.0, abs=LOSSLESS)


def test_length_of_wrong_parity_is_explained():
    # junctions of hexagons fall in two classes (bipartite), so lengths between two ports differ by even numbers
    shortest = find_routes(CURLEW.graph, ["p1:p15"]).routes[0].cells
    routing = find_routes(CURLEW.graph, [f"p1:p15@{shortest + 1}cells"])
    assert routing.status == "impossible"
    parity = "an even" if shortest % 2 == 0 else "an odd"
    assert f"passes {parity} number of cells, never {shortest + 1}" in routing.words
    assert str(shortest) in routing.words
    assert str(shortest + 2) in routing.words


def test_wished_delay_is_met_by_light():
    shortest = find_routes(CURLEW.graph, ["p1:p15"]).routes[0]
    step = 250.0 * 4.2 / 299.792458  # ps per cell: length, group index, um/ps
    wish = f"p1:p15@{shortest.delay_ps + 2 * step:.3f}ps"
    routing = find_routes(CURLEW.graph, [wish])
    assert routing.status == "found"
    assert routing.routes[0].delay_ps == pytest.approx(shortest.delay_ps + 2 * step, abs=0.51 * step)
    # group delay is d phase / d omega of the field that arrives
    wavelengths = np.array([1549.9995, 1550.0005])
    fields = CURLEW.light.matrix(settings_for(CURLEW.graph.switches, routing.share), wavelengths)
    arriving = CURLEW.light.between(fields, "p1", "p15")
    omega = 2 * np.pi * 299792.458 / wavelengths  # rad/ps: speed of light in nm/ps
    delay = np.angle(arriving[1] / arriving[0]) / np.diff(omega)[0]
    assert routing.routes[0].delay_ps == pytest.approx(delay, rel=1e-6)


def test_delay_beyond_tolerance_is_refused():
    routing = find_routes(CURLEW.graph, ["p1:p15@30ps"], within_ps=0.001)
    assert routing.status == "impossible"
    assert "near it are" in routing.words


def test_lower_priority_gives_way():
    wishes = ["p1:p7", "p2:p7"]
    for priorities, dropped in (((2, 1), "p2:p7"), ((1, 2), "p1:p7")):
        routing = find_routes(CURLEW.graph, wishes, priorities=priorities)
        assert routing.status == "partly"
        assert [str(w) for w in routing.dropped] == [dropped]
        assert len(routing.routes) == 1


def test_output_asked_twice_is_refused():
    routing = find_routes(CURLEW.graph, ["p1:p7", "p2:p7"])
    assert routing.status == "impossible"
    assert [str(w) for w in routing.conflict] == ["p1:p7", "p2:p7"]


@pytest.mark.parametrize("cell", ["mzi", "gap"])
def test_routes_on_mesh_without_loops(cell):
    mesh = named_lattice("rectangular", modes=8, cell=cell)
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    response = Response(mesh.net, mesh.as_built)
    rng = np.random.default_rng(0)
    for count in (1, 3, 6, 8):
        ins, outs = rng.permutation(8)[:count], rng.permutation(8)[:count]
        routing = find_routes(graph, [f"in{a + 1}:out{b + 1}" for a, b in zip(ins, outs, strict=True)])
        assert routing.status == "found"
        settings = settings_for(graph.switches, routing.share)
        power = np.abs(response.matrix(settings)) ** 2
        assert power[outs, ins] == pytest.approx(1.0, abs=LOSSLESS)


def test_bare_guide_is_route_without_cells(chip):
    folder = chip(
        """
format = 1
name = "bare"
wavelength_nm = 1550.0
inputs = ["in1", "in2"]
outputs = ["out1", "out2"]
elements = [["g", "guide", {length_um = 100.0}], ["l", "loss", {loss_db = 0.5}]]
links = ["in1 g.a", "g.b out2", "in2 l.a", "l.b out1"]
"""
    )
    mesh = load(folder)
    graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
    routing = find_routes(graph, ["in1:out2", "in2:out1"])
    assert routing.status == "found"
    assert routing.loss_db == pytest.approx([0.0, 0.5])
    assert routing.routes[0].length_um == 100.0
    assert find_routes(graph, ["in1:out1"]).status == "impossible"


def test_same_seed_gives_same_routes():
    wishes = traced_wishes(CURLEW.lattice, 8, np.random.default_rng(9))
    one, two = (find_routes(CURLEW.graph, wishes, seed=3) for _ in range(2))
    assert [r.passes for r in one.routes] == [r.passes for r in two.routes]


@pytest.mark.parametrize(
    ("wishes", "words", "message"),
    [
        (["p1:p99"], {}, "p99"),
        (["p99:p1"], {}, "p99"),
        (["p1:p2", "p1:p3"], {}, "start at the same port"),
        (["p1:p9"], {"avoid": ["c99"]}, "c99"),
        (["p1:p9"], {"priorities": [1, 2]}, "priorities are 2, routes 1"),
        ([], {}, "no route is asked for"),
    ],
)
def test_wrong_words_are_named(wishes, words, message):
    with pytest.raises(WrongUsage, match=message):
        find_routes(CURLEW.graph, wishes, **words)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("p1", "is not complete"),
        ("p1:p2=0.5,p3=0.4", "add up to 0.9, must be 1"),
        ("p1:p2=0.5,p3", "to some outputs only"),
        ("p1:p2=x,p3=0.5", "share of 'p2' is 'x'"),
        ("p1:p2,p2", "names 'p2' twice"),
        ("p1:p1", "ends where it starts"),
        ("p1:p2@12", "'12' is unclear"),
        ("p1:p2@2.5cells", "no whole number"),
        ("p1:p2,p3@4cells", "a length and several outputs"),
    ],
)
def test_unclear_wishes_are_explained(text, message):
    with pytest.raises(WrongUsage, match=message):
        parse_wish(text)


@pytest.mark.parametrize("text", ["in1:out3", "in1:out2=0.7,out5=0.3", "p1:p9@12cells", "p1:p9@85.5ps"])
def test_wishes_are_written_as_read(text):
    assert parse_wish(text).words == text
    assert parse_wish(parse_wish(text).words) == parse_wish(text)


def test_statuses_are_a_closed_list():
    asked = [["p1:p15"], ["p1:p7", "p2:p7"]]
    assert {find_routes(CURLEW.graph, wishes).status for wishes in asked} <= set(STATUSES)


@pytest.mark.parametrize("extra", [True, False], ids=["satisfiability", "flows"])
def test_switch_agrees_with_light_of_all_states(extra, monkeypatch):
    if not extra:
        monkeypatch.setattr(conflict, "has_exact", lambda: False)
    mesh = named_lattice("switch", cell="gap")
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    response = Response(mesh.net, mesh.as_built)
    maps = set()
    for states in product((0.0, np.pi / 2), repeat=4):  # 16 settings, some of which do the same
        power = np.abs(response.matrix(np.array(states))) ** 2
        maps.add(tuple(power.argmax(axis=0).tolist()))
    for order in permutations(range(4)):
        wishes = [f"{mesh.net.inputs[k]}:{mesh.net.outputs[o]}" for k, o in enumerate(order)]
        assert find_routes(graph, wishes).status == ("found" if order in maps else "impossible")


TIED = """
format = 1
name = "tied"
wavelength_nm = 1550.0
inputs = ["in1", "in2", "in3"]
outputs = ["out1", "out2", "out3"]
elements = [["x", "coupler"], ["y", "coupler"]]
tunable = ["x y"]
links = ["in1 x.a1", "in2 x.a2", "x.b1 out1", "x.b2 y.a1", "in3 y.a2", "y.b1 out2", "y.b2 out3"]
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
[channel]
bits = 14
max_v = 8.0
"""


@pytest.mark.parametrize("extra", [True, False], ids=["satisfiability", "flows"])
def test_tied_couplers_take_one_state(chip, extra, monkeypatch):
    if not extra:
        monkeypatch.setattr(conflict, "has_exact", lambda: False)
    mesh = load(chip(TIED))
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    assert find_routes(graph, ["in1:out1", "in3:out3"]).status == "found"  # both bar
    both = find_routes(graph, ["in1:out1", "in3:out2"])  # bar and cross
    assert both.status == "impossible"
    assert [str(w) for w in both.conflict] == ["in1:out1", "in3:out2"]
    routing = find_routes(graph, ["in1:out3", "in2:out1"])  # both cross
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings_for(graph.switches, routing.share)))
    assert power[[2, 0], [0, 1]] == pytest.approx(1.0, abs=LOSSLESS)


PASSED = """
format = 1
name = "passed"
wavelength_nm = 1550.0
inputs = ["in1", "in2"]
outputs = ["out1", "out2"]
monitors = ["pd1"]
elements = [
    ["x", "coupler"], ["tap", "coupler", {cross_power = 0.05}], ["w", "crossing"],
    ["hold", "tether", {loss_db = 0.3, reflection_db = 35.0}], ["gap", "isolation", {loss_db = 0.7}],
    ["part", "measured", {file = "part.csv", ports = ["a", "b"]}],
]
tunable = ["x"]
links = ["in1 x.a1", "in2 x.a2", "x.b1 tap.a1", "tap.b1 w.a1", "tap.b2 pd1", "w.b2 hold.a", "hold.b out1",
         "x.b2 gap.a", "gap.b part.a", "part.b w.a2", "w.b1 out2"]
[crossing]
loss_db = 0.04
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
[channel]
bits = 14
max_v = 8.0
"""


def test_parts_on_the_way_cost_their_loss(chip):
    head = ("wavelength_nm", "out", "in", "amplitude", "phase_rad")
    rows = [(w, out, into, 0.9 if out != into else 0.0, 0.0) for w in (1540.0, 1560.0) for out in "ab" for into in "ab"]
    mesh = load(chip(PASSED, part=[head, *rows]))
    reach = full_reach(mesh.net.setting_is_angle)
    graph = route_graph(mesh.net, mesh.as_built, reach)
    routing = find_routes(graph, ["in1:out1", "in2:out2"])
    settings = settings_for(graph.switches, routing.share)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    by_hand = [-10 * np.log10(0.95) + 0.04 + 0.3, 0.7 - 20 * np.log10(0.9) + 0.04]
    assert routing.loss_db == pytest.approx(by_hand, abs=1e-9)
    # what the tether returns comes back by no way here, so light loses the same
    assert -10 * np.log10(power[[0, 1], [0, 1]]) == pytest.approx(by_hand, abs=1e-6)
