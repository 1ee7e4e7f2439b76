"""Routes: light from these ports to those, any number at once, each cell in one state.

Negotiated congestion (McMurchie & Ebeling 1995): every route takes its cheapest way, states wanted by several
rise in price, and routes go again until none clash. Then each goes once more with the others held, as long as
that saves anything. Where it fails, `meshctl.solver.conflict` finds the routes or proves that there are none.
Public: Route, Routing, STATUSES, find_routes.
"""

from __future__ import annotations

import time
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np

from meshctl.errors import NoClosedForm, WrongUsage
from meshctl.solver.conflict import decide, without_rings
from meshctl.solver.flows import Demand, Passes
from meshctl.solver.lengths import Goal, goal_of
from meshctl.solver.permute import permuter
from meshctl.solver.search import FAR, Search, Way
from meshctl.solver.split import Tree, grow, shares_of
from meshctl.solver.unused import closed_loops, unused_states
from meshctl.solver.waves import RouteGraph
from meshctl.solver.wish import Wish, parse_wish

# the closed list: how the search ended, a sentence each
STATUSES = {
    "found": "All routes were found.",
    "partly": "Routes of lower priority were left out, as they stand in the way of others.",
    "impossible": "Proved: no states of this chip give these routes.",
    "impossible_within": "Proved within a bound only: no routes exist that are not much longer than their shortest.",
    "not_found": "None were found in the time given, and none were proved impossible.",
}
ROUNDS, RESTARTS = 60, 4
FIRST_PRICE, PRICE_GROWTH, MEMORY, DEAREST = 0.5, 1.3, 0.4, 1e3
MOST_OPENING_S = 1.0  # for ways that leave no closed loop, where the first found do
SPLIT = 2  # third state of a lot: divided for one wave, of use to no other


@dataclass(frozen=True, eq=False)
class Route:
    """One way of light, from a port to one other."""

    wish: Wish
    sink: str
    passes: Passes  # (node, state) in light order
    loss_db: float  # of switches and fixed parts; what a split sends elsewhere does not count
    length_um: float  # of guides
    delay_ps: float

    @property
    def cells(self) -> int:
        """Switches passed."""
        return len(self.passes)


@dataclass(frozen=True, eq=False)
class Routing:
    """What `find_routes` answers."""

    graph: RouteGraph = field(repr=False)
    wishes: tuple[Wish, ...]
    status: str  # a key of STATUSES
    words: str  # how it was found or proved
    routes: tuple[Route, ...]  # in the order of wishes, outputs of a split in its order
    share: np.ndarray  # f64[R], cross share of every switch: 0 bar, 1 cross, between a split, NaN unused
    entering: np.ndarray  # i32[R], port that light to be split enters, else 0
    conflict: tuple[Wish, ...] = ()  # the smallest set of wishes that cannot go together
    dropped: tuple[Wish, ...] = ()  # wishes left out for their lower priority
    counts: dict[str, int] = field(default_factory=dict)

    @property
    def found(self) -> bool:
        return self.status in ("found", "partly")

    @property
    def loss_db(self) -> np.ndarray:
        """Loss of every route, f64."""
        return np.array([route.loss_db for route in self.routes])

    @property
    def states(self) -> dict[str, float]:
        """Cross share by name of every switch that a route needs."""
        return {self.graph.switches.names[r]: float(self.share[r]) for r in np.flatnonzero(~np.isnan(self.share))}


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


def _needs(graph: RouteGraph, ways: Iterable[Passes]) -> dict[int, int]:
    needs: dict[int, int] = {}
    for way in ways:
        for node, state in way:
            lot = int(graph.lot[node >> 2])
            needs[lot] = state if needs.setdefault(lot, state) == state else SPLIT
    return needs


class _Negotiation:
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
            return None if tree is None else Taken(tree.ways, _needs(graph, tree.ways))
        way: Way | None = None
        if task.goal is None:
            way = search.way(task.node, task.sinks[0], price)
        else:
            for length in task.goal.lengths:
                way = search.way_of_length(task.node, task.sinks[0], task.goal.advance, length, price)
                if way is not None:
                    break
        return None if way is None else Taken((way.passes,), _needs(graph, (way.passes,)))

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
        state = _state_of(self.graph, taken)
        loops, label = closed_loops(self.graph, state)
        if not loops:
            return np.empty(0, np.int64)
        out: np.ndarray = np.unique(self.graph.lot[np.flatnonzero(label >= 0) >> 2])
        return out

    def shortened(self, taken: list[Taken]) -> list[Taken]:
        """Each route once more with the others held, while that saves anything."""
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
                    if len(self._rings(taken)):
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


def _state_of(graph: RouteGraph, taken: Iterable[Taken]) -> np.ndarray:
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


def find_routes(
    graph: RouteGraph,
    wishes: Sequence[Wish | str],
    *,
    avoid: Iterable[str] = (),
    priorities: Sequence[float] | None = None,
    seed: int = 0,
    seconds: float = 10.0,
    within_ps: float | None = None,
) -> Routing:
    """Find routes and splits, or say why there are none.

    Parameters
    ----------
    graph : RouteGraph
    wishes : what goes where, as `parse_wish` takes it
    avoid : cells or fixed parts by name that no route may pass
    priorities : one number per wish. Where not all go together, the lowest of those in conflict is left out.
        None: all or none
    seed : of the order in which routes go
    seconds : time limit of the search and of the proof together
    within_ps : tolerance of wished delays; None: half the shortest step of the chip

    Returns
    -------
    Routing

    Raises
    ------
    WrongUsage
        For unknown ports and cells, a port asked for twice, priorities of another number.

    Example
    -------
    >>> from meshctl.mesh.meshfile import lattice
    >>> from meshctl.solver.reach import full_reach
    >>> from meshctl.solver.waves import route_graph
    >>> mesh = lattice("rectangular", modes=4)
    >>> graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
    >>> find_routes(graph, ["in1:out3", "in2:out1"]).status
    'found'

    Cost: some ms for 20 routes on 1056 cells; proofs some seconds.
    Source: McMurchie & Ebeling, "PathFinder", 1995.
    """
    stop = time.monotonic() + seconds
    asked = tuple(parse_wish(w) if isinstance(w, str) else w for w in wishes)
    if not asked:
        raise WrongUsage("no route is asked for", remedy="name at least one, such as in1:out3")
    if priorities is not None and len(priorities) != len(asked):
        raise WrongUsage(f"{len(priorities)} priorities for {len(asked)} routes", remedy="give one for each route")
    avoid = tuple(avoid)
    graph = graph.avoiding(avoid) if avoid else graph
    _check_ports(graph, asked)
    rank = np.zeros(len(asked)) if priorities is None else np.asarray(priorities, float)
    kept, dropped = list(range(len(asked))), []
    while True:
        routing = _find(graph, [asked[k] for k in kept], rank[kept], seed, stop, within_ps)
        if routing.found or priorities is None or len(kept) == 1:
            break
        blamed = [k for k in kept if asked[k] in routing.conflict] or kept
        lowest = min(blamed, key=lambda k: (rank[k], -k))
        kept.remove(lowest)
        dropped.append(lowest)
        first_words = routing.words
    if not dropped:
        return routing
    status = "partly" if routing.found else routing.status
    left_out = tuple(asked[k] for k in sorted(dropped))
    words = f"{routing.words}; left out: {', '.join(map(str, left_out))} ({first_words})"
    return replace(routing, wishes=asked, status=status, words=words, dropped=left_out)


def _check_ports(graph: RouteGraph, wishes: Sequence[Wish]) -> None:
    seen: dict[str, Wish] = {}
    for wish in wishes:
        graph.source(wish.source)
        for sink in wish.sinks:
            graph.out(sink)
        if wish.source in seen:
            raise WrongUsage(
                f"'{wish}' and '{seen[wish.source]}' start at the same port",
                remedy="write one route with several outputs to divide light",
            )
        seen[wish.source] = wish


def _find(
    graph: RouteGraph, wishes: list[Wish], rank: np.ndarray, seed: int, stop: float, within_ps: float | None
) -> Routing:
    search = Search(graph)
    refusal = _refused_at_once(wishes)
    if refusal is not None:
        return _answer(graph, wishes, *refusal)
    tasks, direct = [], []
    for wish in wishes:
        source = graph.source(wish.source)
        sinks = tuple(graph.out(s) for s in wish.sinks)
        if graph.entry[source] < 0:
            if len(sinks) == 1 and graph.entry_leaves[source] == sinks[0] and wish.cells is None:
                direct.append(wish)
                continue
            words = f"light entering '{wish.source}' comes to no cell that could send it to '{wish.sinks[0]}'"
            return _answer(graph, wishes, "impossible", words, (wish,))
        node = int(graph.entry[source])
        for name, sink in zip(wish.sinks, sinks, strict=True):
            if search.bound(sink)[node] >= FAR:
                words = f"no way leads from '{wish.source}' to '{name}' through cells that can be set"
                return _answer(graph, wishes, "impossible", words, (wish,))
        goal = goal_of(graph, search, wish, source, sinks[0], within_ps)
        if isinstance(goal, str):
            return _answer(graph, wishes, "impossible", goal, (wish,))
        tasks.append(Task(wish, source, node, sinks, goal))
    pay = _payment(rank[[wishes.index(t.wish) for t in tasks]])
    closed = _closed_form(graph, tasks, seed) if len(tasks) == len(graph.net.inputs) else None
    if closed is not None:
        return _settled(graph, wishes, tasks, closed, "found in closed form", {"cells": len(graph.switches)})
    negotiation = _Negotiation(search, tasks, pay, seed, min(stop, time.monotonic() + _share_of(stop)))
    taken = negotiation.run() if tasks else []
    words, status = "found by negotiation", "found"
    conflict: tuple[Wish, ...] = ()
    if taken is None:
        taken, words = _closed_form(graph, tasks, seed), "found in closed form, other lanes as they came"
    if taken is None:
        taken, status, words, conflict = _decided(graph, search, tasks, seed, stop)
        taken = None if taken is None else negotiation.shortened(taken)
    counts = {"searches": search.searches, "rounds": negotiation.rounds, "cells": len(graph.switches)}
    if taken is None:
        return _answer(graph, wishes, status, words, conflict, counts)
    if len(_loops(graph, _state_of(graph, taken))):
        opened, proved = _opened(graph, tasks, stop)
        if opened is not None:
            taken, words = opened, "found by satisfiability in layers of length, no loop closed"
        elif proved:
            words += "; all routes that are not much longer leave a closed loop beside them"
        else:
            words += "; a closed loop beside them is left, and none without was found"
    return _settled(graph, wishes, tasks, taken, words, counts)


def _share_of(stop: float) -> float:
    """Time for the heuristic: a tenth of what is left, so that proofs have theirs."""
    return 0.1 * max(stop - time.monotonic(), 0.0)


def _payment(rank: np.ndarray) -> np.ndarray:
    """Routes of higher priority give way less: each step of rank halves what a clash costs them."""
    step = np.unique(rank, return_inverse=True)[1]
    return 0.5 ** np.minimum(step, 4.0)


def _refused_at_once(wishes: Sequence[Wish]) -> tuple[str, str, tuple[Wish, ...]] | None:
    at: dict[str, Wish] = {}
    for wish in wishes:
        for sink in wish.sinks:
            if sink in at:
                words = f"'{sink}' is asked for twice; cells in bar or cross bring light from one port only"
                return "impossible", words, (at[sink], wish)
            at[sink] = wish
    return None


def _loops(graph: RouteGraph, used: np.ndarray) -> list[list[tuple[int, int]]]:
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


def _opened(graph: RouteGraph, tasks: Sequence[Task], stop: float) -> tuple[list[Taken] | None, bool]:
    """The same routes by ways that close no loop; whether there are proved to be none."""
    if any(len(t.sinks) > 1 or t.goal is not None for t in tasks):
        return None, False

    def rings(ways: tuple[tuple[Passes, ...], ...]) -> list[list[tuple[int, int]]]:
        return _loops(graph, _state_of(graph, _taken(graph, ways)))

    demands = [Demand(task.node, task.sinks) for task in tasks]
    ways, proved = without_rings(graph, demands, rings, min(MOST_OPENING_S, stop - time.monotonic()))
    return (None if ways is None else _taken(graph, ways)), proved


def _closed_form(graph: RouteGraph, tasks: Sequence[Task], seed: int) -> list[Taken] | None:
    """Routes as part of a permutation of all lanes, where the mesh has a closed form for those."""
    if any(len(t.sinks) > 1 or t.goal is not None for t in tasks):
        return None
    net = graph.net
    try:
        form = permuter(graph)
        order = np.full(len(net.inputs), -1)
        for task in tasks:
            order[net.inputs.index(task.wish.source)] = net.outputs.index(task.wish.sinks[0])
        order[order < 0] = np.setdiff1d(np.arange(len(order)), order)
        state = form.states(order, seed=seed)
    except NoClosedForm:
        return None
    taken = _taken(graph, [(tuple(graph.trace(state, task.source)),) for task in tasks])
    for task, t in zip(tasks, taken, strict=True):
        if not t.ways[0] or graph.leaves[t.ways[0][-1]] != task.sinks[0]:
            return None  # past a part that is to be avoided
    return taken


def _decided(
    graph: RouteGraph, search: Search, tasks: list[Task], seed: int, stop: float
) -> tuple[list[Taken] | None, str, str, tuple[Wish, ...]]:
    """What the proofs say of tasks that negotiation did not bring together."""
    timed = any(t.goal is not None and not (t.goal.in_cells and len(t.goal.lengths) == 1) for t in tasks)
    demands = [
        Demand(t.node, t.sinks, t.goal.lengths[0] if t.goal is not None and t.goal.in_cells else None) for t in tasks
    ]

    def tried(subset: Sequence[int]) -> bool:
        chosen = [tasks[d] for d in subset]
        quick = _Negotiation(search, chosen, np.ones(len(chosen)), seed, stop)
        return quick.run(12, 1) is not None

    verdict = decide(graph, demands, max(stop - time.monotonic(), 0.0), tried=tried)
    if verdict.status == "exists" and verdict.ways is not None and not timed:
        return _taken(graph, verdict.ways), "found", verdict.words, ()
    if verdict.status in ("impossible", "impossible_within"):
        return None, verdict.status, verdict.words, tuple(tasks[d].wish for d in verdict.conflict)
    return None, "not_found", verdict.words if verdict.status == "unknown" else "none found in the time given", ()


def _taken(graph: RouteGraph, ways: Sequence[tuple[Passes, ...]]) -> list[Taken]:
    out = []
    for by_sink in ways:
        cut = tuple(_until_out(graph, way) for way in by_sink)
        out.append(Taken(cut, _needs(graph, cut)))
    return out


def _until_out(graph: RouteGraph, way: Passes) -> Passes:
    for k, (node, state) in enumerate(way):
        if graph.leaves[node, state] >= 0:
            return way[: k + 1]
    return way


def _answer(
    graph: RouteGraph,
    wishes: Sequence[Wish],
    status: str,
    words: str,
    conflict: tuple[Wish, ...] = (),
    counts: dict[str, int] | None = None,
) -> Routing:
    n = len(graph.switches)
    nothing = np.full(n, np.nan), np.zeros(n, np.int32)
    return Routing(graph, tuple(wishes), status, words, (), *nothing, conflict, (), counts or {})


def _settled(
    graph: RouteGraph,
    wishes: Sequence[Wish],
    tasks: Sequence[Task],
    taken: Sequence[Taken],
    words: str,
    counts: dict[str, int],
) -> Routing:
    state = _state_of(graph, taken)
    share = np.where(state >= 0, state, np.nan).astype(float)
    entering = np.zeros(len(share), np.int32)
    routes: dict[tuple[str, str], Route] = {}
    for task, t in zip(tasks, taken, strict=True):
        if len(task.sinks) > 1:
            wanted = {sink: part for sink, (_, part) in zip(task.sinks, task.wish.shares, strict=True)}
            for r, (x, port) in shares_of(graph, t.ways, wanted).items():
                share[r], entering[r] = x, port
        for name, way in zip(task.wish.sinks, t.ways, strict=True):
            routes[task.wish.source, name] = _route(graph, task.wish, name, task.source, way)
    everything = []
    for wish in wishes:
        for name in wish.sinks:
            known = routes.get((wish.source, name))
            everything.append(known or _route(graph, wish, name, graph.source(wish.source), ()))
    counts = {**counts, "cells_used": int((~np.isnan(share)).sum()), "loops_left": len(_loops(graph, state))}
    return Routing(graph, tuple(wishes), "found", words, tuple(everything), share, entering, counts=counts)


def _route(graph: RouteGraph, wish: Wish, sink: str, source: int, way: Passes) -> Route:
    node = np.array([n for n, _ in way], np.int64)
    state = np.array([s for _, s in way], np.int64)
    loss = float(graph.entry_loss_db[source] + graph.loss_db[node, state].sum())
    length = float(graph.entry_length_um[source] + graph.length_um[node, state].sum())
    return Route(wish, sink, way, loss, length, graph.delay_ps(length))
