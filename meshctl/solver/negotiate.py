"""Routes that go again and again until none clash: negotiated congestion.

Every route takes its cheapest way; states that several want rise in price, and routes that clash go again. Then
each goes once more with the others held, as long as that saves anything.
Source: McMurchie & Ebeling 1995, negotiated congestion.
Public: Task, Taken, Negotiation, needs_of, state_of, loops_of.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from meshctl.solver.flows import Passes
from meshctl.solver.lengths import Goal
from meshctl.solver.search import FAR, Search, Way
from meshctl.solver.split import Tree, grow
from meshctl.solver.unused import closed_loops, unused_states
from meshctl.solver.waves import RouteGraph
from meshctl.solver.wish import Wish

ROUNDS, RESTARTS = 60, 4
FIRST_PRICE, PRICE_GROWTH, MEMORY, DEAREST = 0.5, 1.3, 0.4, 1e3
SPLIT = 2  # third state of a lot: divided for one wave, of use to no other


@dataclass(frozen=True, eq=False)
class Task:
    """A wish with its rows in the graph."""

    wish: Wish
    source: int  # external port
    node: int
    sinks: tuple[int, ...]
    goal: Goal | None  # wished length


@dataclass(frozen=True, eq=False)
class Taken:
    """Ways of one task, by sink, and what they need."""

    ways: tuple[Passes, ...]
    needs: dict[int, int]  # lot -> bar, cross or SPLIT


def needs_of(graph: RouteGraph, ways: Iterable[Passes]) -> dict[int, int]:
    """Lot -> the state that ways need it in; SPLIT where they need both."""
    needs: dict[int, int] = {}
    for way in ways:
        for node, state in way:
            lot = int(graph.lot[node >> 2])
            needs[lot] = state if needs.setdefault(lot, state) == state else SPLIT
    return needs


def state_of(graph: RouteGraph, taken: Iterable[Taken]) -> np.ndarray:
    """0, 1, or -1 for unused and split, i32[R]."""
    state = np.full(len(graph.switches), -1, np.int32)
    divided: set[int] = set()
    for t in taken:
        for way in t.ways:
            for node, s in way:
                state[node >> 2] = s
        divided |= {lot for lot, kind in t.needs.items() if kind == SPLIT}
    if divided:
        state[np.isin(graph.lot, list(divided))] = -1
    return state


def loops_of(graph: RouteGraph, used: np.ndarray) -> list[list[tuple[int, int]]]:
    """Loops that no states of the unused cells open, each as (lot, state): those of the routes alone, or others.

    used : int (R,), 0, 1, -1: free or split
    """
    state = used
    loops, label = closed_loops(graph, used)
    if not loops:
        complete = unused_states(graph, np.where(used >= 0, used, np.nan).astype(float), policy="cross")
        if not complete.loops:
            return []
        state = np.where(np.isnan(complete.share), -1, complete.share).astype(np.int32)
        loops, label = closed_loops(graph, state)
    cells = [np.unique(np.flatnonzero(label == k) >> 2).tolist() for k in range(loops)]
    return [[(int(graph.lot[r]), int(state[r])) for r in ring] for ring in cells]


class Negotiation:
    """Routes going again and again until none clash."""

    def __init__(self, search: Search, tasks: Sequence[Task], pay: np.ndarray, seed: int, stop: float) -> None:
        self.search, self.graph, self.tasks, self.pay, self.stop = search, search.graph, tasks, pay, stop
        self.rng = np.random.default_rng(seed)
        self.rounds = 0

    def take(self, task: Task, price: np.ndarray, split_price: np.ndarray) -> Taken | None:
        graph, search = self.graph, self.search
        price = np.where(search.open_price < FAR, price, FAR)
        if len(task.sinks) > 1:
            tree: Tree | None = grow(search, task.node, task.sinks, price, split_price)
            return None if tree is None else Taken(tree.ways, needs_of(graph, tree.ways))
        way: Way | None = None
        if task.goal is None:
            way = search.way(task.node, task.sinks[0], price)
        else:
            for length in task.goal.lengths:
                way = search.way_of_length(task.node, task.sinks[0], task.goal.advance, length, price)
                if way is not None:
                    break
        return None if way is None else Taken((way.passes,), needs_of(graph, (way.passes,)))

    def run(self, rounds: int = ROUNDS, restarts: int = RESTARTS) -> list[Taken] | None:
        """All tasks taken without a clash, or None."""
        for restart in range(restarts):
            taken = self._once(rounds, restart)
            if taken is not None:
                return self.shortened(taken)
            if time.monotonic() > self.stop:
                break
        return None

    def _once(self, rounds: int, restart: int) -> list[Taken] | None:
        n_lots = max(self.graph.n_lots, 1)
        use, memory = np.zeros((n_lots, 3)), np.zeros((n_lots, 3))
        taken: list[Taken | None] = [None] * len(self.tasks)
        pressing, opened = FIRST_PRICE, 0
        for turn in range(rounds):
            self.rounds += 1
            for k in self.rng.permutation(len(self.tasks)).tolist():
                old = taken[k]
                if old is not None:
                    if turn and not _clashes(use, old.needs):
                        continue
                    _count(use, old.needs, -1.0)
                price = self._prices(use, memory, pressing * self.pay[k], restart)
                new = self.take(self.tasks[k], np.ascontiguousarray(price[:, :2]), price[:, SPLIT])
                new = old if new is None else new
                if new is None:
                    return None  # not even on an empty chip, as prices are finite
                taken[k] = new
                _count(use, new.needs, 1.0)
            clash = ((use > 0).sum(1) > 1) | (use[:, SPLIT] > 1)
            if not clash.any():
                done = [t for t in taken if t is not None]
                rings = self._rings(done)
                if not len(rings) or opened >= 8:
                    return done
                # routes that close a loop between them: make its states dearer and go on
                opened += 1
                memory[rings] += MEMORY
                k = int(self.rng.integers(len(done)))
                _count(use, done[k].needs, -1.0)
                taken[k] = None
            memory[clash] += MEMORY
            pressing = min(pressing * PRICE_GROWTH, DEAREST)
            if time.monotonic() > self.stop:
                return None
        return None

    def _prices(self, use: np.ndarray, memory: np.ndarray, pressing: float, restart: int) -> np.ndarray:
        against = use.sum(1, keepdims=True) - use
        against[:, SPLIT] += use[:, SPLIT]  # two divided waves clash too
        price = (1.0 + memory) * (1.0 + pressing * against)
        if restart:
            price *= 1.0 + 0.3 * self.rng.random(price.shape)
        return price

    def _rings(self, taken: Sequence[Taken]) -> np.ndarray:
        """Lots on loops that the routes alone close."""
        state = state_of(self.graph, taken)
        loops, label = closed_loops(self.graph, state)
        if not loops:
            return np.empty(0, np.int64)
        out: np.ndarray = np.unique(self.graph.lot[np.flatnonzero(label >= 0) >> 2])
        return out

    def shortened(self, taken: list[Taken], *, careful: bool = False) -> list[Taken]:
        """Each route once more with the others held, while that saves anything.

        careful: nor may it leave a loop that unused cells cannot open.
        """
        use = np.zeros((max(self.graph.n_lots, 1), 3))
        for t in taken:
            _count(use, t.needs, 1.0)
        for _ in range(3):
            saved = False
            for k, task in enumerate(self.tasks):
                if time.monotonic() > self.stop or task.goal is not None:
                    continue
                _count(use, taken[k].needs, -1.0)
                against = use.sum(1, keepdims=True) - use
                against[:, SPLIT] += use[:, SPLIT]
                price = np.where(against > 0, FAR, 1.0)
                new = self.take(task, np.ascontiguousarray(price[:, :2]), price[:, SPLIT])
                if new is not None and self._cost(new) < self._cost(taken[k]) - 1e-9:
                    before = taken[k]
                    taken[k] = new
                    closes = loops_of(self.graph, state_of(self.graph, taken)) if careful else self._rings(taken)
                    if len(closes):
                        taken[k] = before
                    else:
                        saved = True
                _count(use, taken[k].needs, 1.0)
            if not saved:
                break
        return taken

    def _cost(self, taken: Taken) -> float:
        passes = {p for way in taken.ways for p in way}
        return sum(float(self.search.base[node, state]) for node, state in passes)


def _count(use: np.ndarray, needs: dict[int, int], by: float) -> None:
    lots, kinds = list(needs), list(needs.values())
    use[lots, kinds] += by


def _clashes(use: np.ndarray, needs: dict[int, int]) -> bool:
    lots, kinds = np.array(list(needs), np.int64), np.array(list(needs.values()), np.int64)
    total = use[lots].sum(1)
    return bool(((total > use[lots, kinds]) | ((kinds == SPLIT) & (total > 1))).any())
