"""All inputs to all outputs at once: closed forms for meshes of neighbouring lanes and for Benes meshes.

- Neighbouring lanes (rectangular, triangular, spare columns): every cell crosses where the light on its lower
  lane wants the higher output. That sorts if it sorts the reversed order (de Bruijn 1974); in a rectangle it is
  odd-even transposition, in a triangle insertion. With stuck cells the order of crossings is also tried at
  random: a crossing that can wait waits, one that is undone later is put in.
- Benes meshes: looping (Opferman & Tsao-Wu 1971), from the outer columns inward. Each loop may start in either
  half, which leaves a choice where cells are stuck.

Both are recognised from the graph alone.
Public: Permuter, permuter.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from weakref import WeakKeyDictionary

import numpy as np

from meshctl.errors import NoClosedForm, WrongUsage
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import CROSSING
from meshctl.optics.kernels import filled, given, int32, int64, kernel, uint8, void
from meshctl.solver.waves import RouteGraph

MOST_TRIES, MOST_STEPS = 20_000, 20_000_000  # tries, and cells passed in them: some hundredths of a second


@kernel(
    int64(
        given(int32), given(int32), given(uint8, 2), given(int32), int64, int64, filled(int32), filled(int32),
    )
)  # fmt: skip
def _sort(upper, lower, allowed, wanted, tries, seed, at, state):  # type: ignore[no-untyped-def]
    """Cross where the order is wrong; returns the number of the try in which all lanes ended right, or -1.

    The first try does just that. In later ones a wrong pair may stay and a right pair may cross, by chance.
    """
    n = len(upper)
    draw = (seed * 7919 + 12345) & 0x7FFFFFFF
    for k in range(tries):
        at[:] = wanted
        wait, detour = 0, 0  # chances in 2^31
        if k:
            draw = (draw * 1103515245 + 12345) & 0x7FFFFFFF
            wait = draw >> 1
            draw = (draw * 1103515245 + 12345) & 0x7FFFFFFF
            detour = draw >> 2
        fits = True
        for c in range(n):
            a, b = upper[c], lower[c]
            draw = (draw * 1103515245 + 12345) & 0x7FFFFFFF
            cross = draw >= wait if at[a] > at[b] else draw < detour
            if not allowed[c, 1 if cross else 0]:
                cross = not cross
                fits = fits and allowed[c, 1 if cross else 0]
            state[c] = 1 if cross else 0
            if cross:
                at[a], at[b] = at[b], at[a]
        for lane in range(len(at)):
            fits = fits and at[lane] == lane
        if fits:
            return k
    return -1


@kernel(
    void(
        given(int32, 3), given(int32, 3), given(int32, 2), given(int32, 2), given(int32, 3), given(int32, 3),
        given(int32), given(int32, 2), filled(int32),
    )
)  # fmt: skip
def _loop(enter, leave, inlet, outlet, into, back, wanted, choice, state):  # type: ignore[no-untyped-def]
    """States of a Benes mesh by looping.

    enter, leave [level, line, 2]: switch and port index (0 upper, 1 lower) of every line of every block
    inlet, outlet [switch, half]: port index of the first (last) switch that leads to (from) a half
    into, back [level, switch place, half]: line of the next level that a first (last) switch feeds (is fed by);
    by the number of any line of the switch
    choice [level, line]: half that a loop starting at this line takes first
    """
    levels, n = enter.shape[0], enter.shape[1]
    q, r = wanted.copy(), wanted.copy()
    inverse = np.empty(n, np.int32)
    half = np.empty(n, np.int32)
    partner_in, partner_out = np.empty(n, np.int32), np.empty(n, np.int32)
    seen = np.empty(len(state), np.int32)
    for level in range(levels - 1):
        for line in range(n):
            inverse[q[line]] = line
            half[line] = -1
        seen[:] = -1
        for line in range(n):
            s = enter[level, line, 0]
            if seen[s] >= 0:
                partner_in[line], partner_in[seen[s]] = seen[s], line
            seen[s] = line
        seen[:] = -1
        for line in range(n):
            s = leave[level, line, 0]
            if seen[s] >= 0:
                partner_out[line], partner_out[seen[s]] = seen[s], line
            seen[s] = line
        for first in range(n):
            line = first
            while half[line] < 0:
                half[line] = choice[level, first]
                other = inverse[partner_out[q[line]]]
                half[other] = 1 - choice[level, first]
                line = partner_in[other]
        for line in range(n):
            s, port, h = enter[level, line, 0], enter[level, line, 1], half[line]
            state[s] = port ^ inlet[s, h]
            e, gate = leave[level, q[line], 0], leave[level, q[line], 1]
            state[e] = gate ^ outlet[e, h]
            r[into[level, line, h]] = back[level, q[line], h]
        q, r = r, q
    for line in range(n):
        state[enter[levels - 1, line, 0]] = enter[levels - 1, line, 1] ^ leave[levels - 1, q[line], 1]


@dataclass(frozen=True, eq=False)
class _Lanes:
    """A mesh whose switches join neighbouring lanes, in light order."""

    switch: np.ndarray  # i32[R]
    upper: np.ndarray  # i32[R], lanes
    lower: np.ndarray
    entered: np.ndarray  # i32[N], lane of each input
    left: np.ndarray  # i32[N], lane of each output


@dataclass(frozen=True, eq=False)
class _Benes:
    enter: np.ndarray
    leave: np.ndarray
    inlet: np.ndarray
    outlet: np.ndarray
    into: np.ndarray
    back: np.ndarray


class Permuter:
    """The closed form of one mesh, compiled once.

    Parameters
    ----------
    graph : RouteGraph

    Raises
    ------
    NoClosedForm
        For meshes that are neither of neighbouring lanes nor Benes.
    """

    def __init__(self, graph: RouteGraph) -> None:
        net = graph.net
        if len(net.inputs) != len(net.outputs) or set(net.inputs) & set(net.outputs):
            raise NoClosedForm(
                f"no closed form for permutations: {len(net.inputs)} inputs and {len(net.outputs)} outputs, which must "
                "be as many and apart",
                remedy="ask for routes one by one",
            )
        if graph.n_lots < len(graph.switches):
            raise NoClosedForm(
                f"no closed form for permutations: {len(graph.switches)} cells share {graph.n_lots} settings",
                remedy="ask for routes one by one",
            )
        self.n = len(net.inputs)
        # the graph itself is not kept: `permuter` keeps these as long as their graph lives
        self._allowed = graph.allowed
        self._benes = _find_benes(graph)
        self._lanes = None if self._benes is not None else _find_lanes(graph)
        if self._benes is None and self._lanes is None:
            raise NoClosedForm(
                "no closed form for permutations: the mesh is neither of neighbouring lanes nor a Benes mesh",
                remedy="ask for routes one by one",
            )

    @property
    def method(self) -> str:
        """The closed form in words."""
        return "looping" if self._benes is not None else "transposition of neighbours"

    def states(self, order: Sequence[int] | np.ndarray, *, seed: int = 0) -> np.ndarray:
        """States that send input k to output order[k].

        Parameters
        ----------
        order : int (N,), positions from 0
        seed : of the random tries where cells are stuck

        Returns
        -------
        int32 (R,), 0 bar, 1 cross

        Raises
        ------
        WrongUsage
            Where order is no permutation.
        NoClosedForm
            Where cells cannot be set as wanted and no other order of crossings was found.

        Cost: one pass over the cells; with stuck cells random tries, up to a tenth of a second.
        """
        wanted = np.asarray(order)
        if wanted.shape != (self.n,) or not np.array_equal(np.sort(wanted), np.arange(self.n)):
            raise WrongUsage(
                f"{list(order)} is no permutation of the {self.n} outputs",
                remedy=f"name each of 0 to {self.n - 1} once",
            )
        if self._benes is not None:
            return self._by_looping(self._benes, wanted, seed)
        assert self._lanes is not None
        return self._by_sorting(self._lanes, wanted, seed)

    def _by_looping(self, mesh: _Benes, wanted: np.ndarray, seed: int) -> np.ndarray:
        n_switches = len(self._allowed)
        state, everyone = np.zeros(n_switches, np.int32), np.arange(n_switches)
        choice = np.zeros(mesh.enter.shape[:2], np.int32)
        rng = np.random.default_rng(seed)
        for _ in range(1 if self._allowed.all() else max(1, min(MOST_TRIES // 64, MOST_STEPS // (64 * n_switches)))):
            _loop(
                mesh.enter, mesh.leave, mesh.inlet, mesh.outlet, mesh.into, mesh.back, wanted.astype(np.int32), choice,
                state,
            )  # fmt: skip
            cannot = np.count_nonzero(~self._allowed[everyone, state])
            if not cannot:
                return state
            choice = rng.integers(0, 2, choice.shape, np.int32)
        raise NoClosedForm(
            f"looping found no states that all {n_switches} cells can take", remedy="ask for routes one by one"
        )

    def _by_sorting(self, mesh: _Lanes, wanted: np.ndarray, seed: int) -> np.ndarray:
        at_entrance = np.empty(self.n, np.int32)
        at_entrance[mesh.entered] = mesh.left[wanted]
        n = len(mesh.switch)
        allowed = np.ascontiguousarray(self._allowed[mesh.switch], np.uint8)
        at, state = np.empty(self.n, np.int32), np.empty(n, np.int32)
        tries = 1 if allowed.all() else max(1, min(MOST_TRIES, MOST_STEPS // max(n, 1)))
        found = _sort(mesh.upper, mesh.lower, allowed, at_entrance, tries, seed, at, state)
        if found < 0:
            raise NoClosedForm(
                f"no order of crossings was found with {int((~allowed.astype(bool)).any(1).sum())} cells that cannot "
                "take both states",
                remedy="ask for routes one by one: their search is exact",
            )
        out = np.zeros(len(self._allowed), np.int32)
        out[mesh.switch] = state
        return out


_known: WeakKeyDictionary[RouteGraph, Permuter] = WeakKeyDictionary()


def permuter(graph: RouteGraph) -> Permuter:
    """The closed form of a graph, kept as long as the graph is."""
    if graph not in _known:
        _known[graph] = Permuter(graph)
    return _known[graph]


def _find_lanes(graph: RouteGraph) -> _Lanes | None:
    net = graph.net
    circuit = circuit_of(net)
    if circuit is None or (net.kind == CROSSING).any() or circuit.n_lanes != len(net.inputs):
        return None
    place = np.empty(net.n_elements, np.int64)
    place[circuit.element] = np.arange(net.n_elements)
    first = graph.switches.couplers[:, 0]
    switch = np.argsort(place[first]).astype(np.int32)
    a, b = circuit.element_lane_a[first[switch]], circuit.element_lane_b[first[switch]]
    if (np.abs(a - b) != 1).any():
        return None
    return _Lanes(
        switch,
        np.minimum(a, b).astype(np.int32),
        np.maximum(a, b).astype(np.int32),
        np.arange(len(net.inputs), dtype=np.int32),
        circuit.output_lane.astype(np.int32),
    )


def _find_benes(graph: RouteGraph) -> _Benes | None:
    """The recursive structure of a Benes mesh, or None; only links count, not places or names."""
    net, n = graph.net, len(graph.net.inputs)
    levels = n.bit_length() - 1
    if n < 4 or n & (n - 1) or len(graph.switches) != (2 * levels - 1) * n // 2:
        return None
    entry = graph.entry[[graph.end_row[name] for name in net.inputs]]
    onward = np.where((np.arange(len(graph.onward)) & 3 < 2)[:, None], graph.onward, -1)[:, 0]  # leaving b1, b2 in bar
    ahead = onward.reshape(-1, 4)[:, :2]  # [switch, port]: node entered from its b port
    exit_at: dict[int, tuple[int, int]] = {}
    for r, four in enumerate(graph.leaves.reshape(-1, 4, 2)[:, :2, 0].tolist()):
        for port, end in enumerate(four):
            if end >= 0:
                exit_at[end] = r, port
    ends = [graph.end_row[name] for name in net.outputs]
    if (entry < 0).any() or (entry & 2).any() or any(e not in exit_at for e in ends):
        return None
    shape = levels, n, 2
    enter, leave, into, back = (np.full(shape, -1, np.int32) for _ in range(4))
    inlet, outlet = (np.full((len(graph.switches), 2), -1, np.int32) for _ in range(2))
    behind = np.full((len(ahead), 2), -1)  # [switch, port a]: 2 * switch + port b that feeds it
    for r, pair in enumerate(ahead.tolist()):
        for port, node in enumerate(pair):
            if node >= 0:
                if node & 2:
                    return None
                behind[node >> 2, node & 1] = 2 * r + port
    # blocks of each level: lines as (switch, port) at the entrance and at the exit
    blocks = [([(int(e) >> 2, int(e) & 1) for e in entry], [exit_at[e] for e in ends])]
    for level in range(levels):
        at, following = 0, []
        for lines_in, lines_out in blocks:
            size = len(lines_in)
            enter[level, at : at + size] = lines_in
            leave[level, at : at + size] = lines_out
            if level < levels - 1:
                parted = _halves(lines_in, lines_out, ahead, behind)
                if parted is None:
                    return None
                for half, (numbers_in, numbers_out) in enumerate(parted):
                    inner_in: list[tuple[int, int]] = []
                    inner_out: list[tuple[int, int]] = []
                    for r, port in numbers_in.items():
                        inlet[r, half] = port
                        node = int(ahead[r, port])
                        for k, (s, _) in enumerate(lines_in):
                            if s == r:
                                into[level, at + k, half] = at + half * (size // 2) + len(inner_in)
                        inner_in.append((node >> 2, node & 1))
                    for r, port in numbers_out.items():
                        outlet[r, half] = port
                        fed = int(behind[r, port])
                        for k, (s, _) in enumerate(lines_out):
                            if s == r:
                                back[level, at + k, half] = at + half * (size // 2) + len(inner_out)
                        inner_out.append((fed >> 1, fed & 1))
                    following.append((inner_in, inner_out))
            elif lines_in[0][0] != lines_in[1][0] or {s for s, _ in lines_out} != {lines_in[0][0]}:
                return None
            at += size
        blocks = following
    return _Benes(enter, leave, inlet, outlet, into, back)


_Half = tuple[dict[int, int], dict[int, int]]  # first switches and their b port, last switches and their a port


def _halves(
    lines_in: list[tuple[int, int]], lines_out: list[tuple[int, int]], ahead: np.ndarray, behind: np.ndarray
) -> tuple[_Half, _Half] | None:
    """Which ports of the outer switches of a block lead into its one half and its other, or None."""
    first, last = list(dict.fromkeys(r for r, _ in lines_in)), list(dict.fromkeys(r for r, _ in lines_out))
    if 2 * len(first) != len(lines_in) or 2 * len(last) != len(lines_out):
        return None
    outer = set(last)
    halves: list[_Half] = []
    taken: set[tuple[int, int]] = set()
    for port in (0, 1):
        if (first[0], port) in taken:
            return None
        # everything that is joined to this port without passing the outer switches
        inside: set[int] = set()
        gates_in, gates_out = {first[0]: port}, dict[int, int]()
        waiting = [int(ahead[first[0], port]) >> 2]
        while waiting:
            r = waiting.pop()
            if r in inside or r < 0:
                continue
            inside.add(r)
            for b in (0, 1):
                node = int(ahead[r, b])
                if node >> 2 in outer and node >= 0:
                    if gates_out.setdefault(node >> 2, node & 1) != node & 1:
                        return None
                elif node >= 0:
                    waiting.append(node >> 2)
                fed = int(behind[r, b])
                if fed >> 1 in first and fed >= 0:
                    if gates_in.setdefault(fed >> 1, fed & 1) != fed & 1:
                        return None
                elif fed >= 0:
                    waiting.append(fed >> 1)
        if set(gates_in) != set(first) or set(gates_out) != outer:
            return None
        ordered = {r: gates_in[r] for r in first}, {r: gates_out[r] for r in last}
        halves.append(ordered)
        taken |= set(ordered[0].items())
    if len(taken) != len(lines_in):
        return None
    return halves[0], halves[1]
