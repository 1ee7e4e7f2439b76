"""Routes as flows: one linear programme whose relaxation proves that routes do not exist, and whose whole
solutions are routes of least total cost.

Public: Demand, Passes, FlowProgramme, flow_programme.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from meshctl.solver.search import FAR, bounds_to
from meshctl.solver.waves import OTHER_END, RouteGraph

Passes = tuple[tuple[int, int], ...]  # (node, state) in light order


@dataclass(frozen=True)
class Demand:
    """One wish as the proofs see it."""

    source: int  # node
    sinks: tuple[int, ...]  # external ports
    cells: int | None = None  # exactly so many; flows leave it out, so that they prove no less

    @property
    def is_split(self) -> bool:
        return len(self.sinks) > 1


@dataclass(frozen=True, eq=False)
class FlowProgramme:
    """Minimise cost @ x for 0 <= x <= upper, equal @ x = equal_to, at_most @ x <= limit.

    Columns: flows, then bar and cross of each lot, then splits (one wave of one demand at one cell).
    """

    cost: np.ndarray
    upper: np.ndarray
    equal: Any  # csr
    equal_to: np.ndarray
    at_most: Any  # csr
    limit: np.ndarray
    n_flows: int
    commodities: tuple[tuple[int, int, int, slice], ...]  # (demand, source, sink, its flows)
    node: np.ndarray  # i64[flows]
    state: np.ndarray

    def solve(self, seconds: float, *, whole: bool) -> tuple[str, float | None, np.ndarray | None]:
        """("solved" | "infeasible" | "unknown", cost, columns); whole: states and splits are whole numbers."""
        from scipy.optimize import Bounds, LinearConstraint, milp

        if seconds <= 0.0:
            return "unknown", None, None
        integral = np.zeros(len(self.cost))
        integral[self.n_flows :] = float(whole)
        result = milp(
            self.cost,
            constraints=[
                LinearConstraint(self.equal, self.equal_to, self.equal_to),
                LinearConstraint(self.at_most, -np.inf, self.limit),
            ],
            bounds=Bounds(0.0, self.upper),
            integrality=integral,
            options={"time_limit": seconds},
        )
        if result.status == 2:
            return "infeasible", None, None
        if result.status != 0 or result.x is None:
            return "unknown", None, None
        return "solved", float(result.fun), np.asarray(result.x)

    def ways(self, columns: np.ndarray, onward: np.ndarray) -> tuple[tuple[Passes, ...], ...]:
        """Ways of each demand, by sink, from a whole solution."""
        found: dict[int, list[Passes]] = {}
        for demand, source, _, flows in self.commodities:
            runs = np.flatnonzero(columns[flows] > 0.5) + flows.start
            state = dict(zip(self.node[runs].tolist(), self.state[runs].tolist(), strict=True))
            passes, at = [], source
            while at in state:
                passes.append((at, state.pop(at)))
                at = int(onward[passes[-1]])
            found.setdefault(demand, []).append(tuple(passes))
        return tuple(tuple(found[k]) for k in sorted(found))


def flow_programme(graph: RouteGraph, demands: Sequence[Demand]) -> FlowProgramme:
    """The programme of a set of demands.

    Every output of every demand is a flow of one from its source. A waveguide of a switch carries flows only as
    far as its lot is in that state; a split carries those of its own demand both ways and closes the lot to all
    others. Cost: rows and columns are those passes that lie on some way from a source to its sink.

    Source: multi-commodity flow with states in place of capacities. Exact for whole states: light has one way to
    go then, or two where it is divided, and ways that have parted never meet.
    """
    n_lots, n_nodes = graph.n_lots, len(graph.onward)
    switch = np.arange(n_nodes) >> 2
    # the wave that runs the same way backward belongs to the same waveguide
    reverse = 4 * switch[:, None] + OTHER_END[np.arange(n_nodes) & 3]
    waveguide = np.minimum(np.arange(n_nodes)[:, None], reverse)
    conserved, commodities, nodes, states, upper = _Rows(), [], [], [], []
    n_flows = 0
    for d, demand in enumerate(demands):
        for sink in demand.sinks:
            node, state, arrives, to = _useful(graph, demand.source, sink)
            flow = n_flows + np.arange(len(node))
            own = np.unique(np.r_[node, demand.source])
            row_of = np.full(n_nodes, -1)
            row_of[own] = conserved.count + np.arange(len(own))
            inner = ~arrives & (row_of[np.maximum(to, 0)] >= 0) & (to >= 0)
            conserved.add(row_of[node], flow, 1.0)
            conserved.add(row_of[to[inner]], flow[inner], -1.0)
            conserved.close(np.where(own == demand.source, 1.0, 0.0))
            commodities.append((d, demand.source, sink, slice(n_flows, n_flows + len(node))))
            nodes.append(node)
            states.append(state)
            upper.append((inner | arrives).astype(float))
            n_flows += len(node)
    node, state = np.concatenate(nodes), np.concatenate(states)
    split_of, first_split = _splits(graph, demands, commodities, node), n_flows + 2 * n_lots
    bounded = _Rows()
    single = np.ones(n_flows, bool)
    for d, _, _, flows in commodities:
        single[flows] = not demands[d].is_split
    # flows of undivided light share a waveguide; divided light has a row of its own, open by its state or its split
    flow = np.flatnonzero(single)
    channels, row = np.unique(2 * waveguide[node[flow], state[flow]] + state[flow], return_inverse=True)
    bounded.add(bounded.count + row, flow, 1.0)
    column = n_flows + 2 * graph.lot[channels >> 3] + (channels & 1)
    bounded.add(bounded.count + np.arange(len(channels)), column, -1.0)
    bounded.close(np.zeros(len(channels)))
    for d, _, _, flows in commodities:
        if not demands[d].is_split:
            continue
        flow = np.arange(flows.start, flows.stop)
        rows = bounded.count + np.arange(len(flow))
        bounded.add(rows, flow, 1.0)
        bounded.add(rows, n_flows + 2 * graph.lot[node[flow] >> 2] + state[flow], -1.0)
        split = np.array([split_of.get((d, n), -1) for n in node[flow].tolist()], np.int64)
        bounded.add(rows[split >= 0], first_split + split[split >= 0], -1.0)
        bounded.close(np.zeros(len(flow)))
    lots = bounded.count + np.arange(n_lots)
    for kind in (0, 1):
        bounded.add(lots, n_flows + 2 * np.arange(n_lots) + kind, 1.0)
    if split_of:
        divided = np.array([n for _, n in split_of])
        bounded.add(bounded.count + graph.lot[divided >> 2], first_split + np.arange(len(divided)), 1.0)
    bounded.close(np.ones(n_lots))
    n_columns = first_split + len(split_of)
    cost = np.zeros(n_columns)
    cost[:n_flows] = graph.base_cost[node, state]
    limit = np.ones(n_columns)
    limit[:n_flows] = np.concatenate(upper)
    return FlowProgramme(
        cost,
        limit,
        *conserved.matrix(n_columns),
        *bounded.matrix(n_columns),
        n_flows,
        tuple(commodities),
        node,
        state,
    )


class _Rows:
    """Rows of a sparse matrix as they are written, and their right sides."""

    def __init__(self) -> None:
        self._rows, self._columns, self._entries = [], [], []  # type: list[np.ndarray], list[np.ndarray], list[np.ndarray]
        self._right: list[np.ndarray] = []
        self.count = 0

    def add(self, rows: np.ndarray, columns: np.ndarray, entry: float) -> None:
        self._rows.append(rows)
        self._columns.append(columns)
        self._entries.append(np.full(len(rows), entry))

    def close(self, right: np.ndarray) -> None:
        self._right.append(right)
        self.count += len(right)

    def matrix(self, n_columns: int) -> tuple[Any, np.ndarray]:
        from scipy.sparse import coo_matrix

        entries = np.concatenate(self._entries), (np.concatenate(self._rows), np.concatenate(self._columns))
        return coo_matrix(entries, shape=(self.count, n_columns)).tocsr(), np.concatenate(self._right)


def _useful(graph: RouteGraph, source: int, sink: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Passes on some walk from a node to a port: nodes, states, do they arrive, node entered next."""
    to_go = bounds_to(graph, sink, np.ones_like(graph.base_cost))
    arrives = graph.leaves == sink
    ahead = np.where(graph.onward >= 0, to_go[np.maximum(graph.onward, 0)] < FAR, False) | arrives
    usable = graph.allowed[np.arange(len(graph.onward)) >> 2]
    node, state = np.nonzero(usable & ahead & _reached(graph, source)[:, None])
    return node, state, arrives[node, state], graph.onward[node, state]


def _splits(
    graph: RouteGraph, demands: Sequence[Demand], commodities: Sequence[tuple[int, int, int, slice]], node: np.ndarray
) -> dict[tuple[int, int], int]:
    """Number of every (demand, node) where a demand may be divided: two of its outputs may come that way."""
    seen: dict[tuple[int, int], int] = {}
    for d, _, _, flows in commodities:
        if demands[d].is_split:
            for n in np.unique(node[flows]).tolist():
                seen[d, n] = seen.get((d, n), 0) + 1
    kept = [key for key, count in seen.items() if count > 1 and graph.allowed[key[1] >> 2].all()]
    return {key: k for k, key in enumerate(kept)}


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
