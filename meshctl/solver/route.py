"""Routes: light from these ports to those, any number at once, each cell in one state.

`meshctl.solver.negotiate` looks for them, `meshctl.solver.permute` knows all lanes at once, and where these fail
`meshctl.solver.conflict` finds the routes or proves that there are none.
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
from meshctl.solver.lengths import goal_of
from meshctl.solver.negotiate import Negotiation, Taken, Task, loops_of, needs_of, state_of
from meshctl.solver.permute import permuter
from meshctl.solver.search import FAR, Search
from meshctl.solver.solution import REASONS
from meshctl.solver.split import shares_of
from meshctl.solver.waves import RouteGraph
from meshctl.solver.wish import Wish, parse_wish

# how the search ended, a sentence each
STATUSES = {name: REASONS[name] for name in ("found", "partly", "impossible", "impossible_within", "not_found")}
MOST_OPENING_S = 1.0  # for ways that leave no closed loop, where the first found do


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
    Source: McMurchie & Ebeling 1995, negotiated congestion.
    """
    stop = time.monotonic() + seconds
    asked = tuple(parse_wish(w) if isinstance(w, str) else w for w in wishes)
    if not asked:
        raise WrongUsage("no route is asked for", remedy="name at least one, such as in1:out3")
    if priorities is not None and len(priorities) != len(asked):
        raise WrongUsage(
            f"priorities are {len(priorities)}, routes {len(asked)}", remedy="give one priority for each route"
        )
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
    negotiation = Negotiation(search, tasks, pay, seed, min(stop, time.monotonic() + _share_of(stop)))
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
    if len(loops_of(graph, state_of(graph, taken))):
        opened, proved = _opened(graph, tasks, stop)
        if opened is not None:
            taken = negotiation.shortened(opened, careful=True)
            words = "found by satisfiability in layers of length, no loop closed"
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


def _opened(graph: RouteGraph, tasks: Sequence[Task], stop: float) -> tuple[list[Taken] | None, bool]:
    """The same routes by ways that close no loop; whether there are proved to be none."""
    if any(len(t.sinks) > 1 or t.goal is not None for t in tasks):
        return None, False

    def rings(ways: tuple[tuple[Passes, ...], ...]) -> list[list[tuple[int, int]]]:
        return loops_of(graph, state_of(graph, _taken(graph, ways)))

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
        quick = Negotiation(search, chosen, np.ones(len(chosen)), seed, stop)
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
        out.append(Taken(cut, needs_of(graph, cut)))
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
    state = state_of(graph, taken)
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
    counts = {**counts, "cells_used": int((~np.isnan(share)).sum()), "loops_left": len(loops_of(graph, state))}
    return Routing(graph, tuple(wishes), "found", words, tuple(everything), share, entering, counts=counts)


def _route(graph: RouteGraph, wish: Wish, sink: str, source: int, way: Passes) -> Route:
    node = np.array([n for n, _ in way], np.int64)
    state = np.array([s for _, s in way], np.int64)
    loss = float(graph.entry_loss_db[source] + graph.loss_db[node, state].sum())
    length = float(graph.entry_length_um[source] + graph.length_um[node, state].sum())
    return Route(wish, sink, way, loss, length, graph.delay_ps(length))
