"""Routes of bounded length as a satisfiability problem: one variable per state, and one per wave that a route
may be in after so many cells.

Needs the extra [exact].
Public: Layers, has_exact.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from importlib.util import find_spec

import numpy as np

from meshctl.solver.flows import Demand
from meshctl.solver.search import FAR, bounds_to
from meshctl.solver.waves import RouteGraph


def has_exact() -> bool:
    """True where the extra [exact] is installed."""
    return find_spec("pysat") is not None


class Layers:
    """Demands for one output each as clauses; each demand can be switched on by an assumption.

    Parameters
    ----------
    slack : cells more than its shortest that a route may pass; None: as many as any way passes

    Cost: clauses grow with cells near the shortest ways times their lengths.
    """

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
        left = bounds_to(graph, demand.sinks[0], np.ones_like(graph.base_cost))
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
                    if leaves[node][state] == demand.sinks[0] and (not exact or t == longest - 1):
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
        return lambda subset: self.solve(subset, stop - time.monotonic())

    def forbid(self, states: Sequence[tuple[int, int]]) -> None:
        """Never all of these (lot, state) together."""
        self._solver.add_clause([(lot + 1) * (1 if state == 0 else -1) for lot, state in states])

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
