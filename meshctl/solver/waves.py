"""A chip as a search graph for routes: waves that enter switches, and where bar and cross send them.

Node 4 r + k is the wave that enters port k (a1, a2, b1, b2) of switch r. Setting the switch to state s sends
it on to one other node or out of the chip, with what the fixed parts on the way cost. What routes compete for
are states: switches that share a setting are one lot, and a lot has one state at a time.
Public: RouteGraph, route_graph, NOWHERE.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from meshctl.errors import WrongUsage
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.tables import unknown_name
from meshctl.solver.reach import Reach
from meshctl.solver.switches import LEAST_EXTINCTION_DB, Passing, Switches, find_switches, passing
from meshctl.units import NM_PER_UM, SPEED_OF_LIGHT_M_PER_S

NOWHERE = -1
PS_PER_UM = NM_PER_UM / SPEED_OF_LIGHT_M_PER_S * 1e3  # of vacuum: 1e-6 m / c in 1e-12 s
OTHER_END = np.array([[2, 3], [3, 2], [0, 1], [1, 0]])  # port left by, from port and state


@dataclass(frozen=True, eq=False)
class RouteGraph:
    """N = 4 R nodes, R switches, G lots, X external ports (inputs, outputs and monitors, in net order)."""

    net: Net
    switches: Switches
    onward: np.ndarray  # i32[N, 2], node entered next, or NOWHERE
    leaves: np.ndarray  # i32[N, 2], external port reached, or NOWHERE
    loss_db: np.ndarray  # f64[N, 2], of the switch in that state and the fixed parts behind it
    length_um: np.ndarray  # f64[N, 2]
    allowed: np.ndarray  # bool[R, 2], states within reach and not avoided
    lot: np.ndarray  # i32[R]
    ends: tuple[str, ...]  # names of the external ports
    entry: np.ndarray  # i32[X], node that light entering there comes to, or NOWHERE
    entry_leaves: np.ndarray  # i32[X], external port that light entering there comes to past no switch
    entry_loss_db: np.ndarray  # f64[X]
    entry_length_um: np.ndarray  # f64[X]
    passed: tuple[np.ndarray, np.ndarray] = field(repr=False)  # (start, element): fixed parts on the ways

    @property
    def n_lots(self) -> int:
        return int(self.lot.max(initial=-1)) + 1

    @cached_property
    def end_row(self) -> dict[str, int]:
        return {name: row for row, name in enumerate(self.ends)}

    @cached_property
    def base_cost(self) -> np.ndarray:
        """What passing costs, f64[N, 2]: dB, with a hundredth of the mean for each switch; 1 on average.

        Without losses every pass costs the same, so the shortest way is the cheapest.
        """
        usable = np.isfinite(self.loss_db)
        mean = float(self.loss_db[usable].mean()) if usable.any() else 0.0
        if mean <= 1e-9:
            return np.ones_like(self.loss_db)
        cost = np.where(usable, self.loss_db, 1e6) + 0.01 * mean
        return np.maximum(cost, 0.01 * mean) / (1.01 * mean)

    @cached_property
    def back(self) -> tuple[np.ndarray, np.ndarray]:
        """(first, pass): the passes 2 n + s that lead to each node, grouped."""
        to = self.onward.ravel()
        order = np.argsort(to, kind="stable")
        order = order[to[order] >= 0]
        first = np.searchsorted(to[order], np.arange(len(self.onward) + 1))
        return first.astype(np.int32), order.astype(np.int32)

    def out(self, name: str) -> int:
        """Row of an external port that light may leave by."""
        return self._row(name, self.net.outputs, "output")

    def source(self, name: str) -> int:
        """Row of an external port that light may enter."""
        return self._row(name, self.net.inputs, "input")

    def _row(self, name: str, names: Sequence[str], word: str) -> int:
        if name not in names:
            finding = unknown_name(word, name, names, "")
            raise WrongUsage(finding.what, remedy=finding.remedy)
        return self.end_row[name]

    def rows_named(self, names: Iterable[str]) -> np.ndarray:
        """Switches of cells, elements or switches by name."""
        rows: list[int] = []
        for name in names:
            cell = self.net.names.cell_row.get(name)
            if cell is not None:
                rows += np.flatnonzero(self.switches.cell == cell).tolist()
            elif name in self.switches.names:
                rows.append(self.switches.names.index(name))
            else:
                finding = unknown_name("cell", name, self.switches.names, "")
                raise WrongUsage(finding.what, remedy=finding.remedy)
        return np.unique(np.array(rows, np.int64))

    def avoiding(self, names: Iterable[str]) -> RouteGraph:
        """The same graph with cells or fixed parts (guides, crossings) that no route may pass."""
        cells, ways = [], []
        start, element = self.passed
        for name in names:
            row = self.net.names.element_row.get(name)
            hit = start[element == row] if row is not None else np.empty(0, np.int64)
            if len(hit):
                ways.append(hit)
            else:
                cells.append(name)
        allowed = self.allowed.copy()
        allowed[self.rows_named(cells)] = False
        onward, leaves, entry = self.onward.copy(), self.leaves.copy(), self.entry.copy()
        entry_leaves = self.entry_leaves.copy()
        for hit in ways:
            inner = hit[hit < onward.size]
            onward.flat[inner] = leaves.flat[inner] = NOWHERE
            outer = hit[hit >= onward.size] - onward.size
            entry[outer] = entry_leaves[outer] = NOWHERE
        return replace(self, onward=onward, leaves=leaves, allowed=allowed, entry=entry, entry_leaves=entry_leaves)

    def delay_ps(self, length_um: float) -> float:
        """Group delay of a length of guide."""
        return float(length_um) * self.net.n_group * PS_PER_UM

    def trace(self, states: np.ndarray, source: int) -> Iterator[tuple[int, int]]:
        """(node, state) passed by light from an external port when switch r is in states[r] (0 or 1)."""
        node = int(self.entry[source])
        for _ in range(len(self.onward) + 1):
            if node < 0:
                return
            state = int(states[node >> 2])
            yield node, state
            node = int(self.onward[node, state])


def _ways(
    net: Net, through: Passing, leaving: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, list[np.ndarray]]:
    """Follow fixed parts from ports that light leaves by, all at once.

    Returns the last port: one that a divider or an end is entered by, or a free port with its sign turned
    (-2 - port); loss in dB; length in um; and pairs (start, element) of the parts passed.
    """
    after, owner = through.after, net.element_of_port
    at = leaving.astype(np.int64)
    stop = np.full(len(at), NOWHERE, np.int64)
    total, length = np.zeros(len(at)), np.zeros(len(at))
    moving = np.arange(len(at))
    starts, elements = [np.empty(0, np.int64)], [np.empty(0, np.int64)]
    for _ in range(net.n_elements + 1):
        port = net.mate[at[moving]]
        free = port < 0
        stop[moving[free]] = -2 - at[moving[free]]
        moving, port = moving[~free], port[~free]
        ended = after[port] < 0
        stop[moving[ended]] = port[ended]
        moving, port = moving[~ended], port[~ended]
        if not len(moving):
            break
        e = owner[port]
        total[moving] += through.loss_db[port]
        length[moving] += net.length_um[e]
        starts.append(moving)
        elements.append(e.astype(np.int64))
        at[moving] = after[port]
    return stop, total, length, [np.concatenate(starts), np.concatenate(elements)]


def route_graph(
    net: Net, as_built: AsBuilt, reach: Reach, *, least_extinction_db: float = LEAST_EXTINCTION_DB
) -> RouteGraph:
    """The search graph of a net, with or without loops.

    Parameters
    ----------
    net : Net
    as_built : AsBuilt
    reach : Reach of the settings; stuck, dead and limited ones bound the states that a switch has
    least_extinction_db : a state that leaks more than this below its signal does not count as one

    Returns
    -------
    RouteGraph

    Cost: a few passes over ports.
    """
    switches, through = find_switches(net, as_built, reach), passing(net, as_built)
    n_nodes, n_ports = 4 * len(switches), len(net.mate)
    node_of_port = np.full(n_ports, NOWHERE, np.int32)
    node_of_port[switches.ports.ravel()] = np.arange(n_nodes)
    ends = tuple(net.externals)
    port_of_end = np.array([net.externals[name] for name in ends], np.int64)
    end_of_port = np.full(n_ports, NOWHERE, np.int32)
    end_of_port[port_of_end] = np.arange(len(ends))

    left_by = switches.ports[:, OTHER_END].reshape(-1)
    # light entering at an external port has, as it were, left a port whose mate that is
    first, loss0, length0, passed0 = _entered(net, through, port_of_end)
    stop, loss, length, passed = _ways(net, through, left_by)
    onward, leaves = _landing(stop, node_of_port, end_of_port)
    entry, entry_leaves = _landing(first, node_of_port, end_of_port)
    loss = loss.reshape(-1, 2) + switches.state_loss_db.reshape(-1, 2)
    length = length.reshape(-1, 2) + np.repeat(switches.length_um, 4)[:, None]
    together = np.r_[passed[0], passed0[0] + 2 * n_nodes], np.r_[passed[1], passed0[1]]
    return RouteGraph(
        net,
        switches,
        onward.reshape(-1, 2),
        leaves.reshape(-1, 2),
        loss,
        length,
        switches.states_within(least_extinction_db),
        switches.tied,
        ends,
        entry,
        entry_leaves,
        loss0,
        length0,
        together,
    )


def _landing(stop: np.ndarray, node_of_port: np.ndarray, end_of_port: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    node = np.where(stop >= 0, node_of_port[np.maximum(stop, 0)], NOWHERE).astype(np.int32)
    end = np.where(stop <= -2, end_of_port[np.maximum(-2 - stop, 0)], NOWHERE).astype(np.int32)
    return node, end


def _entered(
    net: Net, through: Passing, ports: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray, list[np.ndarray]]:
    """`_ways` for light that enters free ports."""
    owner, leaving = net.element_of_port, through.after[ports]
    rows = np.flatnonzero(leaving >= 0)
    stop = ports.astype(np.int64)
    total, length = np.zeros(len(ports)), np.zeros(len(ports))
    e = owner[ports[rows]].astype(np.int64)
    ended, more, longer, passed = _ways(net, through, leaving[rows])
    stop[rows], total[rows], length[rows] = ended, through.loss_db[ports[rows]] + more, net.length_um[e] + longer
    return stop, total, length, [np.r_[rows, rows[passed[0]]], np.r_[e, passed[1]]]
