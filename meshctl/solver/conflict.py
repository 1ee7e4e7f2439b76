"""Whether routes that were not found exist, and the smallest set of them in conflict.

- Relaxation (complete): routes as flows that divide, states as numbers from 0 to 1. No solution: no routes.
- Layers (bounded; complete where the bound takes in every way): needs the extra [exact].
- Integer programme (complete): the flows with whole states.

Public: Verdict, decide, without_rings, smallest_conflict.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np

from meshctl.solver.flows import Demand, Passes, flow_programme
from meshctl.solver.layers import Layers, has_exact
from meshctl.solver.waves import RouteGraph

SLACKS = (8, 24)  # cells more than each route's shortest that the bounded searches allow
OPENING_SLACK = 8  # the same for routes that leave no closed loop
MOST_VARIABLES = 400_000  # of the layers when they are to take in every way


@dataclass(frozen=True, eq=False)
class Verdict:
    """What is known about a set of demands."""

    status: str  # "exists", "impossible", "impossible_within", "unknown"
    words: str
    conflict: tuple[int, ...] = ()  # demands that cannot be met together, none of them superfluous
    ways: tuple[tuple[Passes, ...], ...] | None = None  # of each demand, by output, where they exist
    optimum: float | None = None  # total cost, where the integer programme was solved


def smallest_conflict(n: int, together: Callable[[Sequence[int]], bool | None], core: Sequence[int]) -> tuple[int, ...]:
    """A conflict from which no demand can be left out; of all with one or two demands, the first.

    together(subset): False where the subset cannot be met (True and None count as can).
    """
    kept = list(core)
    k = 0
    while k < len(kept) and len(kept) > 1:
        fewer = kept[:k] + kept[k + 1 :]
        if together(fewer) is False:
            kept = fewer
        else:
            k += 1
    if len(kept) > 2:
        for pair in combinations(range(n), 2):
            if together(pair) is False:
                return pair
    return tuple(kept)


def decide(
    graph: RouteGraph,
    demands: Sequence[Demand],
    seconds: float,
    *,
    tried: Callable[[Sequence[int]], bool] | None = None,
) -> Verdict:
    """Find routes that a heuristic did not find, or prove that there are none.

    Parameters
    ----------
    demands : routes that are each possible in themselves, as far as walks go
    seconds : time limit
    tried : a quick search of subsets; a subset that it finds is no conflict. Used without the extra [exact]

    Returns
    -------
    Verdict

    Cost: layers some 10 ms per route at 1056 cells; the relaxation grows with the cells between the ports.
    """
    stop = time.monotonic() + seconds
    if has_exact() and not any(d.is_split for d in demands):
        return _decide_by_layers(graph, demands, stop)
    return _decide_by_flows(graph, demands, stop, tried)


def without_rings(
    graph: RouteGraph,
    demands: Sequence[Demand],
    rings: Callable[[tuple[tuple[Passes, ...], ...]], Sequence[Sequence[tuple[int, int]]]],
    seconds: float,
) -> tuple[tuple[tuple[Passes, ...], ...] | None, bool]:
    """States of routes that close no loop among themselves.

    Parameters
    ----------
    rings : from ways to the loops that they leave closed, each as (lot, state) pairs

    Returns
    -------
    ways or None, and whether None is proved (for routes up to OPENING_SLACK longer than
    their shortest)

    Solves layers, forbids the loops found, and solves again. Needs the extra [exact]; without it, None.
    """
    if not has_exact():
        return None, False
    stop = time.monotonic() + seconds
    layers = Layers(graph, demands, OPENING_SLACK)
    try:
        while layers.solve(range(len(demands)), _left(stop)):
            ways = _traced(graph, demands, layers.state())
            closed = rings(ways)
            if not closed:
                return ways, False
            for ring in closed:
                layers.forbid(ring)
    finally:
        layers.close()
    return None, _left(stop) > 0.0


def _traced(graph: RouteGraph, demands: Sequence[Demand], state: np.ndarray) -> tuple[tuple[Passes, ...], ...]:
    """Ways that light takes when every switch has a state."""
    ways = []
    for demand in demands:
        passes: list[tuple[int, int]] = []
        node = demand.source
        while node >= 0 and len(passes) <= len(graph.onward):
            passes.append((node, int(state[node >> 2])))
            node = int(graph.onward[passes[-1]])
        ways.append((tuple(passes),))
    return tuple(ways)


def _left(stop: float) -> float:
    return stop - time.monotonic()


def _every_way_fits(graph: RouteGraph, demands: Sequence[Demand]) -> bool:
    return 2 * len(graph.switches) * len(graph.onward) * len(demands) <= MOST_VARIABLES


def _decide_by_layers(graph: RouteGraph, demands: Sequence[Demand], stop: float) -> Verdict:
    everyone = tuple(range(len(demands)))
    refused: tuple[int, ...] = ()
    within = 0
    for slack in SLACKS:
        layers = Layers(graph, demands, slack)
        try:
            answer = layers.solve(everyone, _left(stop))
            if answer:
                return Verdict(
                    "exists",
                    "found by satisfiability in layers of length",
                    ways=_traced(graph, demands, layers.state()),
                )
            if answer is None:
                break
            within = slack
            refused = smallest_conflict(len(demands), layers.before(stop), layers.core() or everyone)
            proof = _complete_proof(graph, demands, refused, layers, stop)
        finally:
            layers.close()
        if proof is not None:
            return proof
    if _every_way_fits(graph, demands):
        layers = Layers(graph, demands, None)
        try:
            answer = layers.solve(everyone, _left(stop))
            if answer:
                return Verdict(
                    "exists",
                    "found by satisfiability over ways of every length",
                    ways=_traced(graph, demands, layers.state()),
                )
            if answer is not None:
                refused = smallest_conflict(len(demands), layers.before(stop), layers.core() or everyone)
                return Verdict("impossible", "proved by satisfiability over ways of every length", refused)
        finally:
            layers.close()
    if refused:
        words = f"no states give routes that each pass at most {within} cells more than their shortest"
        return Verdict("impossible_within", words, refused)
    return Verdict("unknown", "neither found nor proved impossible in the time given")


def _complete_proof(
    graph: RouteGraph, demands: Sequence[Demand], refused: tuple[int, ...], layers: Layers, stop: float
) -> Verdict | None:
    """Are routes that layers refuse impossible whatever their lengths?"""
    chosen = [demands[k] for k in refused]
    programme = flow_programme(graph, chosen)
    if programme.solve(_left(stop), whole=False)[0] == "infeasible":
        return Verdict("impossible", "proved by the linear relaxation", refused)
    if not layers.bounded.intersection(refused):
        lengths = "at the lengths wished" if any(d.cells for d in chosen) else "over ways of every length"
        return Verdict("impossible", f"proved by satisfiability {lengths}", refused)
    return None


def _decide_by_flows(
    graph: RouteGraph, demands: Sequence[Demand], stop: float, tried: Callable[[Sequence[int]], bool] | None
) -> Verdict:
    """Without satisfiability: suspects by quick search, proofs by the relaxation, then whole states."""
    known: dict[tuple[tuple[int, ...], bool], tuple[str, float | None, np.ndarray | None]] = {}
    everyone = tuple(range(len(demands)))

    def solved(subset: Sequence[int], whole: bool) -> tuple[str, float | None, np.ndarray | None]:
        key = tuple(sorted(subset)), whole
        if key not in known:
            known[key] = flow_programme(graph, [demands[k] for k in key[0]]).solve(_left(stop), whole=whole)
        return known[key]

    def together(whole: bool) -> Callable[[Sequence[int]], bool | None]:
        def ask(subset: Sequence[int]) -> bool | None:
            if tried is not None and tried(subset):
                return True
            return False if solved(subset, whole)[0] == "infeasible" else None

        return ask

    for size in (1, 2):
        for subset in combinations(everyone, size):
            if _left(stop) > 0.0 and together(False)(subset) is False:
                return Verdict("impossible", "proved by the linear relaxation", subset)
    if solved(everyone, False)[0] == "infeasible":
        refused = smallest_conflict(len(demands), together(False), everyone)
        return Verdict("impossible", "proved by the linear relaxation", refused)
    status, cost, columns = solved(everyone, True)
    if status == "infeasible":
        refused = smallest_conflict(len(demands), together(True), everyone)
        return Verdict("impossible", "proved by the integer programme", refused)
    if status == "solved" and columns is not None and all(d.cells is None for d in demands):
        ways = flow_programme(graph, demands).ways(columns, graph.onward)
        return Verdict("exists", "found by the integer programme", ways=ways, optimum=cost)
    return Verdict("unknown", "neither found nor proved impossible in the time given")
