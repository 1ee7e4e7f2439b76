"""States of the cells that no route needs: no closed loop through or beside a route, clean, safe at rest.

With every switch in bar or cross, waves follow one another: from outside to outside, or round in a closed loop.
A loop beside a route makes a ring of it and puts a notch into its spectrum. Turning a switch whose waves
belong to two different ways joins them, which opens a loop.
Public: Unused, unused_states, closed_loops, POLICIES.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meshctl.errors import WrongUsage
from meshctl.optics.kernels import filled, given, int32, int64, kernel
from meshctl.solver.switches import BAR, CROSS
from meshctl.solver.waves import RouteGraph

MOST_TURNS = 400


@kernel(int64(given(int32, 2), given(int32), filled(int32)))
def _label(onward, state, label):  # type: ignore[no-untyped-def]
    """Number the closed loops of waves: label[n] is the loop of node n, -1: none. Returns how many there are.

    A state of -1 is not known: waves end there.
    """
    n_nodes = len(onward)
    fed = np.zeros(n_nodes, np.uint8)
    for n in range(n_nodes):
        s = state[n >> 2]
        if s >= 0 and onward[n, s] >= 0:
            fed[onward[n, s]] = 1
    label[:] = -2
    for n in range(n_nodes):
        if fed[n] == 0:  # a way that starts outside, or behind a switch not known
            x = n
            while x >= 0 and label[x] == -2:
                label[x] = -1
                s = state[x >> 2]
                x = onward[x, s] if s >= 0 else -1
    loops = 0
    for n in range(n_nodes):
        if label[n] == -2:
            x = n
            while label[x] == -2:
                label[x] = loops
                x = onward[x, state[x >> 2]]
            loops += 1
    return loops


def closed_loops(graph: RouteGraph, state: np.ndarray) -> tuple[int, np.ndarray]:
    """Closed loops of waves.

    Parameters
    ----------
    state : int (R,), 0 bar, 1 cross, -1 not known or split: waves are not followed through

    Returns
    -------
    how many, and the loop of every node [N], -1: none. A ring counts twice, once in each direction.
    """
    label = np.empty(len(graph.onward), np.int32)
    return int(_label(graph.onward, np.ascontiguousarray(state, np.int32), label)), label


@dataclass(frozen=True, eq=False)
class Unused:
    """Every switch with a state, and what loops are left."""

    share: np.ndarray  # f64[R], cross share: as the routes need it, 0 or 1 elsewhere, NaN: left at rest
    policy: str  # the row of POLICIES that was taken
    loops: int  # closed loops left anywhere
    beside_routes: int  # of these, loops that pass a cell of a route
    turned: int  # switches that differ from the policy to open loops
    driven: int  # free switches that would change their state if the drive failed


def _all_cross(graph: RouteGraph) -> np.ndarray:
    return np.full(len(graph.switches), CROSS)


def _all_bar(graph: RouteGraph) -> np.ndarray:
    return np.full(len(graph.switches), BAR)


def _cleanest(graph: RouteGraph) -> np.ndarray:
    """The state that leaks less as built; cross where both are clean."""
    switches = graph.switches
    leak = [np.abs(switches.cross_share(switches.state_drive[:, s]) - s).max(1) for s in (BAR, CROSS)]
    return np.where(leak[BAR] < leak[CROSS] - 1e-12, BAR, CROSS)


def _at_rest(graph: RouteGraph) -> np.ndarray:
    """The state nearest to where a switch falls without drive."""
    share = graph.switches.cross_share(graph.switches.idle_rad).mean(1)
    return np.where(share < 0.5, BAR, CROSS)


POLICIES: dict[str, Callable[[RouteGraph], np.ndarray]] = {
    "cross": _all_cross,
    "bar": _all_bar,
    "cleanest": _cleanest,
    "rest": _at_rest,
}


def unused_states(
    graph: RouteGraph,
    share: np.ndarray,
    *,
    policy: str = "",
    seed: int = 0,
    score: Callable[[np.ndarray], float] | None = None,
) -> Unused:
    """Give every switch that the routes leave free a state.

    Parameters
    ----------
    share : float (R,), cross shares that routes need, NaN: free
    policy : a key of POLICIES to start from; "": the best of all
    score : what to judge complete shares [R] by, lower is better, such as the ripple that a simulation finds;
        None: loops beside routes, then all loops, then the order of POLICIES

    Returns
    -------
    Unused

    Raises
    ------
    WrongUsage
        For an unknown policy.

    Cost: one walk over all waves per switch tried; some ms for 1056 cells.
    """
    if policy and policy not in POLICIES:
        raise WrongUsage(f"policy is '{policy}'", remedy=f"use one of: {', '.join(POLICIES)}")
    rng = np.random.default_rng(seed)
    best: tuple[tuple[float, float], Unused] | None = None
    for name in [policy] if policy else POLICIES:
        found = _opened(graph, share, POLICIES[name](graph), name, rng)
        judged = float(found.loops) if score is None else score(found.share)
        key = float(found.beside_routes), judged
        if best is None or key < best[0]:
            best = key, found
    assert best is not None
    return best[1]


def _opened(graph: RouteGraph, share: np.ndarray, wanted: np.ndarray, name: str, rng: np.random.Generator) -> Unused:
    free = np.isnan(share)
    pure = (share == BAR) | (share == CROSS)
    allowed = graph.allowed
    state = np.where(free, wanted, np.where(pure, np.nan_to_num(share), -1)).astype(np.int32)
    rows = np.flatnonzero(free)
    # a switch with one state has that, one with none stays as it is: light runs through it both ways
    state[rows] = np.where(allowed[rows, state[rows]], state[rows], 1 - state[rows])
    stiff = rows[~allowed[rows].any(1)]
    rest = _at_rest(graph)
    state[stiff] = rest[stiff]
    _agree(graph, state, ~free)
    start = state.copy()
    turnable = free & allowed.all(1)
    busy = np.zeros(graph.n_lots, bool)
    busy[graph.lot[~free]] = True
    turnable &= ~busy[graph.lot]
    loops, label = _open_one_by_one(graph, state, turnable, rng)
    if loops:
        loops, label = _open_together(graph, state, turnable, label, rng)
    final = np.where(free, state, share).astype(float)
    final[stiff] = np.nan
    used = ~free
    beside = np.unique(label.reshape(-1, 4)[used]) if used.any() else np.empty(0)
    return Unused(
        final, name, loops, int((beside >= 0).sum()), int((state != start).sum()), int((state != rest)[rows].sum())
    )


def _open_one_by_one(
    graph: RouteGraph, state: np.ndarray, turnable: np.ndarray, rng: np.random.Generator
) -> tuple[int, np.ndarray]:
    """Turn switches in `state` as long as each leaves fewer loops."""
    lot = graph.lot
    loops, label = closed_loops(graph, state)
    for _ in range(MOST_TURNS):
        if not loops:
            break
        four = label.reshape(-1, 4)
        # only where waves of two different ways meet: elsewhere a turn would cut a loop in two
        apart = (four[:, 0] != four[:, 1]) | (four[:, 2] != four[:, 3])
        cells = np.flatnonzero((four >= 0).any(1) & apart & turnable)
        rng.shuffle(cells)
        for r in cells.tolist():
            together = lot == lot[r]
            state[together] ^= 1
            fewer, relabelled = closed_loops(graph, state)
            if fewer < loops:
                loops, label = fewer, relabelled
                break
            state[together] ^= 1
        else:
            break
    return loops, label


def _open_together(
    graph: RouteGraph, state: np.ndarray, turnable: np.ndarray, label: np.ndarray, rng: np.random.Generator
) -> tuple[int, np.ndarray]:
    """Turn several switches at once: some by chance, then again one by one; the fewest loops are kept."""
    best = int(label.max()) + 1, state.copy()
    rows = np.flatnonzero(turnable)
    for _ in range(MOST_TURNS if len(rows) > 1 else 0):
        state[:] = best[1]
        for r in rng.choice(rows, min(len(rows), int(rng.integers(2, 6))), replace=False).tolist():
            state[graph.lot == graph.lot[r]] ^= 1
        loops, _ = _open_one_by_one(graph, state, turnable, rng)
        if loops < best[0]:
            best = loops, state.copy()
        if not loops:
            break
    state[:] = best[1]
    return closed_loops(graph, state)


def _agree(graph: RouteGraph, state: np.ndarray, used: np.ndarray) -> None:
    """Tied switches take one state: that of a route, else of the first."""
    if graph.n_lots == len(graph.lot):
        return
    of_lot = np.full(graph.n_lots, -2, np.int32)
    for r in [*np.flatnonzero(used).tolist(), *np.flatnonzero(~used).tolist()]:
        k = int(graph.lot[r])
        if of_lot[k] == -2:
            of_lot[k] = state[r]
        state[r] = of_lot[k]
