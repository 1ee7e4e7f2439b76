"""Proofs that routes do not exist, and routes that the heuristic alone would miss, against an integer programme."""

import numpy as np
import pytest
from plane_nets import as_drawn, least_total_cells, plane_net, wide_reach

from meshctl.mesh.plane import hexagonal
from meshctl.solver import conflict
from meshctl.solver.conflict import decide
from meshctl.solver.flows import Demand
from meshctl.solver.layers import Layers
from meshctl.solver.route import find_routes
from meshctl.solver.waves import route_graph

pytest.importorskip("pysat", reason="the extra [exact] is not installed")


def graph_of(lattice):
    net = plane_net(lattice)
    return route_graph(net, as_drawn(net), wide_reach(net))


LATTICE = hexagonal(2)
GRAPH = graph_of(LATTICE)


def random_wishes(rim, count, seed):
    ends = np.random.default_rng(seed).choice(rim, 2 * count, replace=False) + 1
    return [f"p{a}:p{b}" for a, b in zip(ends[:count], ends[count:], strict=True)]


def without_exact(monkeypatch):
    monkeypatch.setattr(conflict, "has_exact", lambda: False)


def agreement(seeds, **words):
    verdicts = []
    for seed in seeds:
        wishes = random_wishes(36, 2 + seed % 4, seed)
        routing = find_routes(GRAPH, wishes, **words)
        exists = least_total_cells(LATTICE, wishes) is not None  # an independent integer programme
        assert routing.status == ("found" if exists else "impossible"), wishes
        verdicts.append(exists)
    return verdicts


def test_sixty_verdicts_agree_with_integer_programme():
    verdicts = agreement(range(60))
    assert 10 <= sum(verdicts) <= 50  # both answers are well represented


def test_verdicts_agree_without_the_extra(monkeypatch):
    without_exact(monkeypatch)
    assert set(agreement(range(8))) == {True, False}


@pytest.mark.parametrize("extra", [True, False], ids=["satisfiability", "flows"])
def test_conflict_has_no_superfluous_route(extra, monkeypatch):
    if not extra:
        without_exact(monkeypatch)
    refused = 0
    for seed in range(6):
        routing = find_routes(GRAPH, random_wishes(36, 5, seed))
        if routing.status != "impossible":
            continue
        refused += 1
        named = [str(w) for w in routing.conflict]
        assert least_total_cells(LATTICE, named) is None
        for k in range(len(named)):
            fewer = named[:k] + named[k + 1 :]
            assert not fewer or least_total_cells(LATTICE, fewer) is not None
    assert refused >= 3


def demands_of(wishes):
    ends = [w.split(":") for w in wishes]
    return [Demand(int(GRAPH.entry[GRAPH.end_row[a]]), (GRAPH.end_row[b],)) for a, b in ends]


@pytest.mark.parametrize("extra", [True, False], ids=["satisfiability", "flows"])
def test_proof_finds_routes_that_exist(extra, monkeypatch):
    if not extra:
        without_exact(monkeypatch)
    wishes = next(w for w in (random_wishes(36, 3, s) for s in range(50)) if least_total_cells(LATTICE, w) is not None)
    verdict = decide(GRAPH, demands_of(wishes), 20.0)
    assert verdict.status == "exists"
    state = np.full(len(GRAPH.switches), -1)
    for wish, (way,) in zip(wishes, verdict.ways, strict=True):
        for node, s in way:
            assert state[node >> 2] in (-1, s)  # one state for each cell
            state[node >> 2] = s
        source, sink = wish.split(":")
        assert way[0][0] == GRAPH.entry[GRAPH.end_row[source]]
        assert GRAPH.ends[GRAPH.leaves[way[-1]]] == sink


def test_no_time_gives_no_verdict():
    wishes = next(w for w in (random_wishes(36, 5, s) for s in range(50)) if least_total_cells(LATTICE, w) is None)
    assert decide(GRAPH, demands_of(wishes), 0.0).status == "unknown"
    assert find_routes(GRAPH, wishes, seconds=1e-9).status == "not_found"


def test_layers_of_every_length_decide_alone():
    verdicts = set()
    for seed in range(20):
        wishes = random_wishes(36, 2 + seed % 3, seed)
        layers = Layers(GRAPH, demands_of(wishes), None)
        found = layers.solve(range(len(wishes)), 20.0)
        layers.close()
        assert not layers.bounded
        assert found == (least_total_cells(LATTICE, wishes) is not None), wishes
        verdicts.add(found)
    assert verdicts == {True, False}


def test_layers_find_exact_lengths_only():
    # p1 to p20 takes 8 cells; with a middle one gone the next ways are longer
    graph = GRAPH.avoiding(["c16"])
    shortest = find_routes(GRAPH, ["p1:p20"]).routes[0].cells
    longer = find_routes(graph, ["p1:p20"]).routes[0].cells
    assert longer > shortest
    source, sink = int(graph.entry[graph.end_row["p1"]]), graph.end_row["p20"]
    for cells, exists in ((shortest, False), (longer, True)):
        layers = Layers(graph, [Demand(source, (sink,), cells)], None)
        assert layers.solve([0], 20.0) is exists
        layers.close()


def test_bounded_proof_says_that_it_is_bounded(monkeypatch):
    wishes = next(w for w in (random_wishes(36, 3, s) for s in range(50)) if least_total_cells(LATTICE, w) is None)
    monkeypatch.setattr(conflict, "MOST_VARIABLES", 0)
    monkeypatch.setattr(conflict, "SLACKS", (0, 2))
    monkeypatch.setattr("meshctl.solver.flows.FlowProgramme.solve", lambda *_, **__: ("unknown", None, None))
    routing = find_routes(GRAPH, wishes)
    assert routing.status == "impossible_within"
    assert "at most 2 cells more than their shortest" in routing.words
    assert routing.conflict


def test_words_say_how_it_was_proved():
    routing = next(r for r in (find_routes(GRAPH, random_wishes(36, 5, s)) for s in range(20)) if not r.found)
    assert routing.words.startswith("proved by")


@pytest.mark.slow
@pytest.mark.parametrize("rings", [6, 11])
def test_verdict_is_reached_in_large_lattices(rings):
    lattice = hexagonal(rings)
    graph = graph_of(lattice)
    for count in (5, 20):
        for seed in range(4):
            wishes = random_wishes(len(lattice.rim), count, 1000 * count + seed)
            routing = find_routes(graph, wishes, seconds=60.0)
            assert routing.found or (routing.status == "impossible" and 1 <= len(routing.conflict) <= 3)
