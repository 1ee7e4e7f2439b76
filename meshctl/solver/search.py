"""Cheapest ways through a route graph, by A* and by layers of length, each cell in one state only.

A way found by either search may pass one cell in two states, which no setting gives. Such a clash is resolved
by branching: the one state forbidden, then the other, cheapest first, so the first way without a clash is the
cheapest of all.
Public: Search, Way, bounds_to.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numba import int64 as i64  # a node as the heap keeps it

from meshctl.optics.kernels import filled, float64, given, int32, int64, kernel, void
from meshctl.solver.waves import RouteGraph

FAR = 1e300
MOST_BRANCHES = 60  # searches for one way round its clashes with itself


@kernel(
    void(
        given(int32, 2),
        given(int32),
        given(int32),
        given(float64, 2),
        given(float64, 2),
        given(int32),
        int64,
        filled(float64),
    )
)
def _bounds(leaves, back_first, back_pass, base, price, lot, sink, bound):  # type: ignore[no-untyped-def]
    """Least cost from every node to a sink, by Dijkstra backwards; FAR where there is no way."""
    bound[:] = FAR
    heap = [(0.0, i64(-1))]
    for p in range(len(leaves)):
        for s in range(2):
            if leaves[p, s] == sink and price[lot[p >> 2], s] < FAR:
                g = base[p, s] * price[lot[p >> 2], s]
                if g < bound[p]:
                    bound[p] = g
                    heapq.heappush(heap, (g, i64(p)))
    while len(heap) > 0:
        g, n = heapq.heappop(heap)
        if n < 0 or g > bound[n]:
            continue
        for k in range(back_first[n], back_first[n + 1]):
            p, s = back_pass[k] >> 1, back_pass[k] & 1
            if price[lot[p >> 2], s] < FAR:
                h = g + base[p, s] * price[lot[p >> 2], s]
                if h < bound[p]:
                    bound[p] = h
                    heapq.heappush(heap, (h, i64(p)))


@kernel(
    int64(
        given(int32, 2),
        given(int32, 2),
        given(int32),
        given(float64, 2),
        given(float64, 2),
        given(float64),
        given(int32),
        given(int32),
        given(float64),
        int64,
        filled(float64),
        filled(int32),
    )
)
def _cheapest(  # type: ignore[no-untyped-def]
    onward, leaves, lot, base, price, bound, start, start_state, start_price, sink, cost, parent
):
    """A* from any of the start nodes to a sink; returns the last pass 2 n + s, or -1.

    start_state: the only state that a start node may be left in, at start_price; -1: both, as priced.
    """
    cost[:] = FAR
    parent[:] = -1
    done = np.zeros(len(onward), np.uint8)
    only = np.full(len(onward), -1, np.int32)
    heap = [(0.0, i64(-1))]
    heapq.heappop(heap)
    for k in range(len(start)):
        n = start[k]
        cost[n] = 0.0
        only[n] = k
        # a branching start may leave in the dearer state, so its own bound need not hold
        heapq.heappush(heap, (bound[n] if start_state[k] < 0 else 0.0, i64(n)))
    best, last = FAR, i64(-1)
    while len(heap) > 0:
        f, n = heapq.heappop(heap)
        if f >= best:
            break
        if done[n]:
            continue
        done[n] = 1
        for s in range(2):
            weight = price[lot[n >> 2], s]
            if only[n] >= 0 and start_state[only[n]] >= 0:
                if start_state[only[n]] != s:
                    continue
                weight = start_price[only[n]]
            if weight >= FAR:
                continue
            g = cost[n] + base[n, s] * weight
            if leaves[n, s] == sink:
                if g < best:
                    best, last = g, i64(2 * n + s)
            else:
                y = onward[n, s]
                if y >= 0 and bound[y] < FAR and g < cost[y]:
                    cost[y] = g
                    parent[y] = 2 * n + s
                    heapq.heappush(heap, (g + bound[y], i64(y)))
    cost[0] = best
    return last


@kernel(
    void(
        given(int32, 2),
        given(int32, 2),
        given(int32),
        given(float64, 2),
        given(float64, 2),
        given(int32, 2),
        given(int32),
        int64,
        int64,
        filled(float64, 2),
        filled(int32, 2),
        filled(float64),
        filled(int32),
    )
)
def _layered(  # type: ignore[no-untyped-def]
    onward, leaves, lot, base, price, advance, left, source, sink, cost, parent, end_cost, end_pass
):
    """Cheapest walks by length: cost [L + 1, N] of coming to a node after a length, end_cost [L + 1] at the sink.

    left [N]: least length still to go from a node. Passes of no length are relaxed until nothing changes.
    """
    longest = len(cost) - 1
    cost[:] = FAR
    parent[:] = -1
    end_cost[:] = FAR
    end_pass[:] = -1
    cost[0, source] = 0.0
    for t in range(longest + 1):
        again = True
        while again:
            again = False
            for n in range(len(onward)):
                if cost[t, n] >= FAR:
                    continue
                for s in range(2):
                    weight = price[lot[n >> 2], s]
                    after = t + advance[n, s]
                    if weight >= FAR or after > longest:
                        continue
                    g = cost[t, n] + base[n, s] * weight
                    y = onward[n, s]
                    if leaves[n, s] == sink:
                        if g < end_cost[after]:
                            end_cost[after] = g
                            end_pass[after] = 2 * n + s
                    elif y >= 0 and after + left[y] <= longest and g < cost[after, y]:
                        cost[after, y] = g
                        parent[after, y] = 2 * n + s
                        again = again or after == t


@dataclass(frozen=True)
class Way:
    """Passes (node, state) in light order, and their price."""

    passes: tuple[tuple[int, int], ...]
    price: float


def bounds_to(graph: RouteGraph, sink: int, base: np.ndarray | None = None) -> np.ndarray:
    """Least cost from every node to an external port over allowed states, f64[N]; FAR where there is no way."""
    bound = np.empty(len(graph.onward))
    first, passes = graph.back
    cost = graph.base_cost if base is None else base
    _bounds(graph.leaves, first, passes, cost, open_price(graph), graph.lot, sink, bound)
    return bound


def open_price(graph: RouteGraph) -> np.ndarray:
    """1 for states that every switch of a lot can take, FAR for others, f64[G, 2]."""
    allowed = np.ones((max(graph.n_lots, 1), 2), bool)
    np.logical_and.at(allowed, graph.lot, graph.allowed)
    return np.where(allowed, 1.0, FAR)


class Search:
    """Searches on one graph, with their working arrays kept."""

    def __init__(self, graph: RouteGraph) -> None:
        self.graph = graph
        self.base = np.ascontiguousarray(graph.base_cost)
        n = len(graph.onward)
        self._cost, self._parent = np.empty(n), np.empty(n, np.int32)
        self._bound: dict[int, np.ndarray] = {}
        self.searches = 0
        self.open_price = open_price(graph)
        self._none = np.full(1, -1, np.int32), np.ones(1)

    def bound(self, sink: int) -> np.ndarray:
        """Least cost to a sink, f64[N], kept."""
        if sink not in self._bound:
            first, passes = self.graph.back
            bound = np.empty(len(self.graph.onward))
            _bounds(self.graph.leaves, first, passes, self.base, self.open_price, self.graph.lot, sink, bound)
            self._bound[sink] = bound
        return self._bound[sink]

    def _back(self, last: int) -> tuple[tuple[int, int], ...]:
        passes = []
        parent = self._parent
        while last >= 0:
            node = last >> 1
            passes.append((node, last & 1))
            last = int(parent[node])
        return tuple(passes[::-1])

    def _clash(self, passes: tuple[tuple[int, int], ...]) -> int:
        """The first lot that the passes need in two states, or -1."""
        lot = self.graph.lot
        seen: dict[int, int] = {}
        for node, state in passes:
            k = int(lot[node >> 2])
            if seen.setdefault(k, state) != state:
                return k
        return -1

    def way(self, source: int, sink: int, price: np.ndarray) -> Way | None:
        """The cheapest way from a node to a sink at prices [G, 2] (FAR: forbidden), or None.

        None too where it was not found in MOST_BRANCHES searches.
        """
        states, ones = self._none
        start = np.array([source], np.int32)
        return self._without_clash(price, partial(self._run, start, states, ones, sink))

    def _run(
        self, start: np.ndarray, start_state: np.ndarray, start_price: np.ndarray, sink: int, price: np.ndarray
    ) -> Way | None:
        self.searches += 1
        g = self.graph
        last = _cheapest(
            g.onward, g.leaves, g.lot, self.base, price, self.bound(sink), start, start_state, start_price, sink,
            self._cost, self._parent,
        )  # fmt: skip
        return Way(self._back(int(last)), float(self._cost[0])) if last >= 0 else None

    def _without_clash(self, price: np.ndarray, run: Callable[[np.ndarray], Way | None]) -> Way | None:
        way = run(price)
        if way is None:
            return None
        clash = self._clash(way.passes)
        if clash < 0:
            return way
        waiting = [(way.price, 0, price, way, clash)]
        count = 1
        while waiting and count < MOST_BRANCHES:
            _, _, price, way, clash = heapq.heappop(waiting)
            if clash < 0:
                return way
            for state in (0, 1):
                without = price.copy()
                without[clash, state] = FAR
                way = run(without)
                count += 1
                if way is not None:
                    heapq.heappush(waiting, (way.price, count, without, way, self._clash(way.passes)))
        while waiting:
            _, _, _, way, clash = heapq.heappop(waiting)
            if clash < 0:
                return way
        return None

    def branch(self, tree: list[tuple[int, int, float]], sink: int, price: np.ndarray) -> Way | None:
        """The cheapest way from a tree of passes to one more sink.

        Parameters
        ----------
        tree : (node, state that the branch would take, price of splitting there)
        price : float (G, 2); states that the tree excludes are FAR
        """
        left = list(tree)
        while left:
            start = np.array([node for node, _, _ in left], np.int32)
            state = np.array([s for _, s, _ in left], np.int32)
            cost = np.array([c for _, _, c in left])
            way = self._without_clash(price, partial(self._run, start, state, cost, sink))
            if way is None:
                return None
            first = way.passes[0][0]
            lot = self.graph.lot
            if all(lot[node >> 2] != lot[first >> 2] for node, _ in way.passes[1:]):
                return way
            left = [entry for entry in left if entry[0] != first]  # it came back to the cell that it split
        return None

    def lengths(self, source: int, sink: int, advance: np.ndarray, longest: int) -> np.ndarray:
        """Lengths 0 to `longest` that walks from a node to a sink have, bool; a way has no others."""
        return self._layers(source, sink, advance, longest, self.open_price)[2] < FAR

    def _layers(
        self, source: int, sink: int, advance: np.ndarray, longest: int, price: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        g, n = self.graph, len(self.graph.onward)
        first, passes = g.back
        left = np.empty(n)
        _bounds(g.leaves, first, passes, advance.astype(float), self.open_price, g.lot, sink, left)
        left = np.minimum(left, longest + 1).astype(np.int32)
        cost, parent = np.empty((longest + 1, n)), np.empty((longest + 1, n), np.int32)
        end_cost, end_pass = np.empty(longest + 1), np.empty(longest + 1, np.int32)
        self.searches += 1
        _layered(
            g.onward, g.leaves, g.lot, self.base, price, advance, left, source, sink, cost, parent, end_cost, end_pass
        )
        return cost, parent, end_cost, end_pass

    def way_of_length(self, source: int, sink: int, advance: np.ndarray, length: int, price: np.ndarray) -> Way | None:
        """The cheapest way of exactly this length, or None where none was found.

        Parameters
        ----------
        advance : int32 (N, 2), length of each pass
        """
        return self._without_clash(price, partial(self._run_layers, source, sink, advance, length))

    def _run_layers(self, source: int, sink: int, advance: np.ndarray, length: int, price: np.ndarray) -> Way | None:
        _, parent, end_cost, end_pass = self._layers(source, sink, advance, length, price)
        last, at = int(end_pass[length]), length
        if last < 0:
            return None
        passes: list[tuple[int, int]] = []
        while last >= 0:
            node, state = last >> 1, last & 1
            passes.append((node, state))
            at -= int(advance[node, state])
            last = int(parent[at, node])
        return Way(tuple(passes[::-1]), float(end_cost[length]))
