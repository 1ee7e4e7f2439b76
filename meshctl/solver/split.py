"""Light from one port divided among several: the tree of cells, and its splits from the leaves up.

Public: Tree, grow, shares_of, throughput_of.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from meshctl.solver.flows import Passes
from meshctl.solver.search import FAR, Search
from meshctl.solver.waves import RouteGraph
from meshctl.units import power_from_loss_db


@dataclass(frozen=True)
class Tree:
    """Ways from one node to several external ports that part and never meet again."""

    ways: tuple[Passes, ...]  # in the order of the sinks


def grow(search: Search, source: int, sinks: Sequence[int], price: np.ndarray, split_price: np.ndarray) -> Tree | None:
    """A cheap tree: the sink nearest to the tree is joined to it, then the next.

    Parameters
    ----------
    source : node
    sinks : external ports
    price : float (G, 2), of bar and cross; FAR: forbidden
    split_price : float (G,), of dividing light at a cell

    Returns
    -------
    Tree, or None where it was not found.

    Source: shortest path heuristic for Steiner trees, Takahashi & Matsuyama 1980.
    """
    graph = search.graph
    left = list(sinks)
    ways: dict[int, Passes] = {}
    nearest = min(left, key=lambda s: search.bound(s)[source])
    first = search.way(source, nearest, price)
    if first is None:
        return None
    ways[nearest] = first.passes
    left.remove(nearest)
    while left:
        best: tuple[float, int, Passes] | None = None
        starts, closed = _open_branches(graph, ways, price, split_price)
        for sink in left:
            way = search.branch(starts, sink, closed)
            if way is not None and (best is None or way.price < best[0]):
                best = way.price, sink, way.passes
        if best is None:
            return None
        _, sink, passes = best
        trunk = next(w for w in ways.values() if passes[0][0] in {node for node, _ in w})
        at = next(k for k, (node, _) in enumerate(trunk) if node == passes[0][0])
        ways[sink] = trunk[:at] + passes
        left.remove(sink)
    return Tree(tuple(ways[s] for s in sinks))


def _open_branches(
    graph: RouteGraph, ways: Mapping[int, Passes], price: np.ndarray, split_price: np.ndarray
) -> tuple[list[tuple[int, int, float]], np.ndarray]:
    """Where the tree may branch, as (node, state, price), and prices that keep new ways out of its cells' way."""
    lot = graph.lot
    passes = {p for way in ways.values() for p in way}
    nodes_of: dict[int, set[int]] = {}
    states_of: dict[int, set[int]] = {}
    for node, state in passes:
        nodes_of.setdefault(int(lot[node >> 2]), set()).add(node)
        states_of.setdefault(int(lot[node >> 2]), set()).add(state)
    closed = price.copy()
    starts = []
    for k, states in states_of.items():
        if len(states) == 2:
            closed[k] = FAR  # a divided cell is of use to no further wave
            continue
        (state,) = states
        closed[k, 1 - state] = FAR
        node = next(iter(nodes_of[k]))
        if len(nodes_of[k]) == 1 and price[k, 1 - state] < FAR and split_price[k] < FAR:
            starts.append((node, 1 - state, float(split_price[k])))
    return sorted(starts), closed


def _power_needed(
    graph: RouteGraph, ways: Sequence[Passes], wanted: Mapping[int, float]
) -> tuple[dict[int, dict[int, float]], int]:
    """Power that each node of a tree must send out of its switch in each state, and the root.

    A switch's own loss is not in it where light is divided: a split loses what its couplers lose.
    """
    states: dict[int, set[int]] = {}
    for way in ways:
        for node, state in way:
            states.setdefault(node, set()).add(state)
    root = ways[0][0][0]
    sent: dict[int, dict[int, float]] = {}
    order = _from_leaves(graph, states, root)
    loss = _losses(graph)
    for node in order:
        sent[node] = {}
        for state in states[node]:
            end = int(graph.leaves[node, state])
            behind = wanted[end] if end in wanted else _entering(graph, sent, int(graph.onward[node, state]))
            sent[node][state] = behind / float(power_from_loss_db(loss[node, state]))
    return sent, root


def _losses(graph: RouteGraph) -> np.ndarray:
    """Loss in dB of the fixed parts behind a switch."""
    out: np.ndarray = graph.loss_db - graph.switches.state_loss_db.reshape(-1, 2)
    return out


def _entering(graph: RouteGraph, sent: Mapping[int, Mapping[int, float]], node: int) -> float:
    """Power that must enter a node so that it sends what it must."""
    states = sent[node]
    if len(states) == 1:
        ((state, power),) = states.items()
        return power / float(power_from_loss_db(graph.switches.state_loss_db[node >> 2, node & 3, state]))
    total = sum(states.values())
    return total / _through(graph, node, states[1] / total)


def _through(graph: RouteGraph, node: int, share: float) -> float:
    """All power that leaves a switch, bar and cross, for unit power entering a node, when it splits so."""
    switches, row, port = graph.switches, node >> 2, node & 3
    shares = np.full(len(switches), np.nan_to_num(share))
    entering = np.full(len(switches), port)
    return float(switches.powers(switches.drives_for(shares, entering))[row, port].sum())


def _from_leaves(graph: RouteGraph, states: Mapping[int, set[int]], root: int) -> list[int]:
    order, waiting = [], [root]
    while waiting:
        node = waiting.pop()
        order.append(node)
        waiting += [int(graph.onward[node, s]) for s in states[node] if graph.onward[node, s] in states]
    return order[::-1]


def shares_of(graph: RouteGraph, ways: Sequence[Passes], wanted: Mapping[int, float]) -> dict[int, tuple[float, int]]:
    """Cross shares of the cells that divide a tree, losses behind them made up for.

    Parameters
    ----------
    ways : from one node to external ports
    wanted : external port -> share of what arrives

    Returns
    -------
    switch -> (cross share, port that light enters)
    """
    sent, _ = _power_needed(graph, ways, wanted)
    return {
        node >> 2: (states[1] / (states[0] + states[1]), node & 3) for node, states in sent.items() if len(states) == 2
    }


def throughput_of(graph: RouteGraph, ways: Sequence[Passes], wanted: Mapping[int, float]) -> float:
    """Power that arrives at all outputs of a tree together, for unit power at its first cell."""
    sent, root = _power_needed(graph, ways, wanted)
    return sum(wanted.values()) / _entering(graph, sent, root)
