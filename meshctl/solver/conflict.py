"""Whether routes that were not found exist: a linear relaxation, layers of length as a satisfiability problem,
an integer programme; and the smallest set of routes in conflict.

- Relaxation (complete): routes as flows that divide, states as numbers from 0 to 1. No solution: no routes.
- Layers (bounded, complete where the bound takes in every way): one variable per state and per wave that a
  route may be in after so many cells; needs the extra [exact].
- Integer programme (complete): the relaxation with whole states.

Public: Demand, Verdict, decide, flow_programme, has_exact.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from importlib.util import find_spec
from itertools import combinations
from typing import Any

import numpy as np

from meshctl.solver.search import FAR, bounds_to
from meshctl.solver.waves import OTHER_END, RouteGraph

SLACKS = (8, 24)  # cells more than each route's shortest that the bounded searches allow
MOST_VARIABLES = 400_000  # of the layers when they are to take in every way


@dataclass(frozen=True)
class Demand:
    """One route as the proofs see it."""

    source: int  # node
    sink: int  # external port
    cells: int | None = None  # exactly so many


@dataclass(frozen=True, eq=False)
class Verdict:
    """What is known about a set of demands."""

    status: str  # "exists", "impossible", "impossible_within", "unknown"
    words: str
    conflict: tuple[int, ...] = ()  # demands that cannot be met together, none of them superfluous
    state: np.ndarray | None = None  # i32[R], 0, 1, -1: free, where routes exist
    optimum: float | None = None  # of the integer programme, where it was solved


def has_exact() -> bool:
    """True where the extra [exact] is installed."""
    return find_spec("pysat") is not None


# ---- layers of length
class Layers:
    """Demands with bounded lengths as clauses; each demand can be switched on by an assumption."""

    def __init__(self, graph: RouteGraph, demands: Sequence[Demand], slack: int | None) -> None:
        from pysat.solvers import Solver

        self.graph, self.n_demands = graph, len(demands)
        self.bounded: set[int] = set()  # demands for which there may be longer ways than are looked at
        self.n_variables = graph.n_lots + len(demands)
        clauses: list[list[int]] = []
        for k, demand in enumerate(demands):
            clauses += self._clauses(k, demand, slack)
        self._solver = Solver(name="glucose4", bootstrap_with=clauses)

    def _clauses(self, k: int, demand: Demand, slack: int | None) -> list[list[int]]:
        graph = self.graph
        switched_on = graph.n_lots + 1 + k
        left = bounds_to(graph, demand.sink, np.ones_like(graph.base_cost))
        if left[demand.source] >= FAR:
            return [[-switched_on]]
        most = 2 * len(graph.switches)  # a way passes a cell at most twice
        if demand.cells is not None:
            longest, exact = demand.cells, True
        else:
            exact = False
            longest = most if slack is None else min(most, int(left[demand.source]) + slack)
            if longest < most:
                self.bounded.add(k)
        onward, leaves, lot, allowed = graph.onward.tolist(), graph.leaves.tolist(), graph.lot.tolist(), graph.allowed
        open_, to_go = allowed.tolist(), left.tolist()
        first = self._variable()
        clauses = [[-switched_on, first]]
        now = {demand.source: first}
        for t in range(longest):
            then: dict[int, int] = {}
            for node, here in now.items():
                for state in (0, 1):
                    otherwise = (lot[node >> 2] + 1) * (1 if state == 0 else -1)  # true in the other state
                    if not open_[node >> 2][state]:
                        clauses.append([-here, otherwise])
                        continue
                    if leaves[node][state] == demand.sink and (not exact or t == longest - 1):
                        continue
                    y = onward[node][state]
                    if y < 0 or to_go[y] > longest - t - 1:
                        clauses.append([-here, otherwise])
                        continue
                    if y not in then:
                        then[y] = self._variable()
                    clauses.append([-here, otherwise, then[y]])
            now = then
        return clauses

    def _variable(self) -> int:
        self.n_variables += 1
        return self.n_variables

    def solve(self, subset: Sequence[int], seconds: float) -> bool | None:
        """Do these demands go together; None: time is up."""
        from threading import Timer

        if seconds <= 0.0:
            return None
        timer = Timer(seconds, self._solver.interrupt)
        timer.start()
        try:
            answer = self._solver.solve_limited(
                assumptions=[self.graph.n_lots + 1 + k for k in subset], expect_interrupt=True
            )
        finally:
            timer.cancel()
            timer.join()
            self._solver.clear_interrupt()
        return None if answer is None else bool(answer)

    def before(self, stop: float) -> Callable[[Sequence[int]], bool | None]:
        """`solve` as a function of the subset alone, for what is left of the time."""
        return lambda subset: self.solve(subset, _left(stop))

    def core(self) -> list[int]:
        """Demands that the last refusal rests on."""
        return sorted(v - self.graph.n_lots - 1 for v in self._solver.get_core() or [])

    def state(self) -> np.ndarray:
        """State of every switch in the last solution."""
        model = np.array(self._solver.get_model()[: self.graph.n_lots])
        out: np.ndarray = (model > 0)[self.graph.lot].astype(np.int32)
        return out

    def close(self) -> None:
        self._solver.delete()


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


# ---- flows
@dataclass(frozen=True, eq=False)
class FlowProgramme:
    """A mixed integer programme: F flows, then G states (0 bar, 1 cross)."""

    cost: np.ndarray
    equal: Any  # csr [rows, F + G]
    equal_to: np.ndarray
    at_most: Any  # csr
    limit: np.ndarray
    upper: np.ndarray
    n_flows: int

    def solve(self, seconds: float, *, whole: bool) -> tuple[str, float | None, np.ndarray | None]:
        """("solved" | "infeasible" | "unknown", cost, states [G])."""
        from scipy.optimize import Bounds, LinearConstraint, milp

        if seconds <= 0.0:
            return "unknown", None, None
        integral = np.zeros(len(self.cost))
        integral[self.n_flows :] = float(whole)
        constraints = [LinearConstraint(self.equal, self.equal_to, self.equal_to)]
        if self.at_most.shape[0]:
            constraints.append(LinearConstraint(self.at_most, -np.inf, self.limit))
        result = milp(
            self.cost,
            constraints=constraints,
            bounds=Bounds(0.0, self.upper),
            integrality=integral,
            options={"time_limit": seconds},
        )
        if result.status == 2:
            return "infeasible", None, None
        if result.status != 0 or result.x is None:
            return "unknown", None, None
        return "solved", float(result.fun), np.asarray(result.x[self.n_flows :])


def flow_programme(graph: RouteGraph, demands: Sequence[Demand]) -> FlowProgramme:
    """Routes as flows, each waveguide of a switch open to them in one state only.

    Cost: rows and columns are those passes that lie on some way from source to sink.
    Source: multi-commodity flow with states in place of capacities; exact for whole states, since light has
    one way to go then.
    """
    from scipy.sparse import coo_matrix

    n_lots, n_nodes = graph.n_lots, len(graph.onward)
    cost, rows, columns, entries, equal_to, upper = [], [], [], [], [], []
    channel_rows, channel_columns = [], []
    n_flows = n_rows = 0
    ones = np.ones_like(graph.base_cost)
    switch = np.arange(n_nodes) >> 2
    usable = graph.allowed[switch]
    # the wave that runs the same way backward belongs to the same waveguide
    reverse = 4 * switch[:, None] + OTHER_END[np.arange(n_nodes) & 3]
    waveguide = np.minimum(np.arange(n_nodes)[:, None], reverse)
    for demand in demands:
        to_go = bounds_to(graph, demand.sink, ones)
        reached = _reached(graph, demand.source)
        ahead = np.where(graph.onward >= 0, to_go[np.maximum(graph.onward, 0)] < FAR, False)
        ahead |= graph.leaves == demand.sink
        use = usable & reached[:, None] & ahead
        node, state = np.nonzero(use)
        flow = n_flows + np.arange(len(node))
        row_of = np.full(n_nodes, -1)
        nodes = np.unique(np.r_[node, demand.source])
        row_of[nodes] = n_rows + np.arange(len(nodes))
        to = graph.onward[node, state]
        inner = (to >= 0) & (graph.leaves[node, state] != demand.sink)
        inner &= row_of[np.maximum(to, 0)] >= 0
        rows += [row_of[node], row_of[to[inner]]]
        columns += [flow, flow[inner]]
        entries += [np.ones(len(flow)), -np.ones(inner.sum())]
        wanted = np.zeros(len(nodes))
        wanted[row_of[demand.source] - n_rows] = 1.0
        equal_to.append(wanted)
        cost.append(graph.base_cost[node, state])
        reaches = inner | (graph.leaves[node, state] == demand.sink)
        upper.append(reaches.astype(float))
        channel_rows.append(2 * waveguide[node, state] + state)
        channel_columns.append(flow)
        n_flows += len(flow)
        n_rows += len(nodes)
    shape = n_rows, n_flows + n_lots
    equal = coo_matrix((np.concatenate(entries), (np.concatenate(rows), np.concatenate(columns))), shape=shape).tocsr()
    channel, flow = np.concatenate(channel_rows), np.concatenate(channel_columns)
    channels, row = np.unique(channel, return_inverse=True)
    state, lot = channels & 1, graph.lot[channels >> 3]
    at_most = coo_matrix(
        (
            np.r_[np.ones(len(flow)), np.where(state == 0, 1.0, -1.0)],
            (np.r_[row, np.arange(len(channels))], np.r_[flow, n_flows + lot]),
        ),
        shape=(len(channels), n_flows + n_lots),
    ).tocsr()
    return FlowProgramme(
        np.r_[np.concatenate(cost), np.zeros(n_lots)],
        equal,
        np.concatenate(equal_to),
        at_most,
        np.where(state == 0, 1.0, 0.0),
        np.r_[np.concatenate(upper), np.ones(n_lots)],
        n_flows,
    )


def _reached(graph: RouteGraph, source: int) -> np.ndarray:
    """Nodes that walks over allowed states come to, bool[N]."""
    seen = np.zeros(len(graph.onward), bool)
    seen[source] = True
    front = np.array([source])
    while len(front):
        to = graph.onward[front][graph.allowed[front >> 2]]
        front = np.unique(to[to >= 0])
        front = front[~seen[front]]
        seen[front] = True
    return seen


# ---- the verdict
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
    if has_exact():
        return _decide_by_layers(graph, demands, stop)
    return _decide_by_flows(graph, demands, stop, tried)


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
                return Verdict("exists", "found by satisfiability in layers of length", state=layers.state())
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
                return Verdict("exists", "found by satisfiability over ways of every length", state=layers.state())
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
    status, cost, lots = solved(everyone, True)
    if status == "infeasible":
        refused = smallest_conflict(len(demands), together(True), everyone)
        return Verdict("impossible", "proved by the integer programme", refused)
    if status == "solved" and lots is not None and all(d.cells is None for d in demands):
        state = (lots > 0.5)[graph.lot].astype(np.int32)
        return Verdict("exists", "found by the integer programme", state=state, optimum=cost)
    return Verdict("unknown", "neither found nor proved impossible in the time given")
