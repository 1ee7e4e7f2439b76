"""A net made ready for scattering: one-lane parts folded into the ports that they lead to, the rest compiled.

What is joined are couplers, crossings and parts that reflect. An entry of a part's S is then
``own * g_out * g_in``, g the product of the phases, guides and losses that stand before each of its two ports.
Public: Woven, woven, FOLDED.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from weakref import WeakKeyDictionary

import numpy as np

from meshctl.mesh.graph import Net
from meshctl.optics import elements as parts
from meshctl.optics.pattern import WavePattern, compile_pattern
from meshctl.units import amplitude_from_loss_db

FOLDED = (parts.PHASE, parts.GUIDE, parts.LOSS)


@dataclass(frozen=True, eq=False)
class Woven:
    """A net with its one-lane parts folded away. N entries of S, Q ports that are left."""

    pattern: WavePattern
    row: np.ndarray  # i64[N], element of each entry
    through: np.ndarray  # i64, entries that are cos of a coupler's angle
    cross: np.ndarray  # i64, entries that are i sin of it
    fixed: np.ndarray  # c128[N], entries that do not change with wavelength, without further loss
    measured: list[tuple[int, np.ndarray, np.ndarray, np.ndarray]]  # element, its entries, out and in by port
    folded: np.ndarray  # i64, elements folded into a port
    folded_at: np.ndarray  # i64, that port


_known: WeakKeyDictionary[Net, Woven] = WeakKeyDictionary()


def _chains(net: Net, is_core: np.ndarray) -> tuple[np.ndarray, dict[int, int], dict[int, list[int]]]:
    """Follow every port of the core parts outward: its core partner, the free port it ends at, what lies between."""
    owner, mate, start = net.element_of_port.tolist(), net.mate.tolist(), net.port_start.tolist()
    core = is_core.tolist()
    partner = np.full(len(mate), -1, np.int64)
    ends: dict[int, int] = {}
    between: dict[int, list[int]] = {}
    for p in np.flatnonzero(is_core[net.element_of_port]).tolist():
        if partner[p] >= 0:
            continue
        at, chain = p, []
        while mate[at] >= 0 and not core[owner[mate[at]]]:
            e = owner[mate[at]]
            chain.append(e)
            at = start[e] + start[e + 1] - 1 - mate[at]  # the other one of its two ports
        if mate[at] >= 0:
            partner[p], partner[mate[at]] = mate[at], p
        else:
            ends[at] = p
        between[p] = chain
    return partner, ends, between


def woven(net: Net) -> Woven:
    """The net woven; once for each net.

    Cost: linear in the elements, and the compilation of the pattern.
    """
    if net not in _known:
        _known[net] = _weave(net)
    return _known[net]


def _weave(net: Net) -> Woven:
    kind = net.kind
    is_core = ~np.isin(kind, FOLDED)
    # a lane of one-lane parts alone keeps the one behind its external port
    owner = net.element_of_port
    _, ends, _ = _chains(net, is_core)
    for port in net.externals.values():
        if not is_core[owner[port]] and port not in ends:
            is_core[owner[port]] = True
            _, ends, _ = _chains(net, is_core)
    partner, ends, between = _chains(net, is_core)
    elements = np.flatnonzero(is_core)
    counts = np.diff(net.port_start)[elements]
    start = np.concatenate([[0], np.cumsum(counts)])
    renumber = np.full(len(partner) + 1, -1, np.int64)
    renumber[np.flatnonzero(is_core[owner])] = np.arange(start[-1])
    mate = renumber[partner[is_core[owner]]]

    out, into, row, what, fixed = [], [], [], [], []
    measured: list[tuple[int, np.ndarray, np.ndarray, np.ndarray]] = []
    entries = 0
    for e, first in zip(elements.tolist(), start.tolist(), strict=False):
        for o, i, role, value in _entries(net, e):
            out.append(first + o)
            into.append(first + i)
            row.append(e)
            what.append(role)
            fixed.append(value)
        if e in net.measured:
            where = np.arange(entries, len(out))
            measured.append((e, where, np.array(out[entries:]) - first, np.array(into[entries:]) - first))
        entries = len(out)
    cell_of = net.cell_of[elements]
    pattern = compile_pattern(
        start,
        mate,
        np.array(out, np.int64),
        np.array(into, np.int64),
        cell_of,
        np.array([int(renumber[ends.get(port, port)]) for port in net.externals.values()]),
        net.cell_xy_um[: int(cell_of.max(initial=-1)) + 1],
    )
    roles = np.array(what, np.int64)
    folded = []
    for p, chain in between.items():
        q, cells = int(partner[p]), net.cell_of
        for e in chain:
            # to the end in its own cell, so that what moves a cell changes entries of that cell alone
            far = q >= 0 and cells[e] == cells[owner[q]] != cells[owner[p]]
            folded.append((e, int(renumber[q if far else p])))
    at = np.array(folded, np.int64).reshape(-1, 2)
    return Woven(
        pattern,
        np.array(row, np.int64),
        np.flatnonzero(roles == 1),
        np.flatnonzero(roles == 2),
        np.array(fixed, complex),
        measured,
        at[:, 0],
        at[:, 1],
    )


def _entries(net: Net, e: int) -> Iterator[tuple[int, int, int, complex]]:
    """(out, in, role, value) of a core part: role 1 cos, 2 i sin of the angle, 0 the value itself."""
    kind = int(net.kind[e])
    if kind in (parts.COUPLER, parts.CROSSING):
        for a, b in ((0, 2), (1, 3)):
            if kind == parts.COUPLER:
                yield from ((b, a, 1, 0j), (a, b, 1, 0j))
        for a, b in ((0, 3), (1, 2)):
            role = 2 if kind == parts.COUPLER else 0
            yield from ((b, a, role, 1.0 + 0j), (a, b, role, 1.0 + 0j))
    elif e in net.measured:
        n = len(parts.KINDS[kind].ports)
        yield from ((o, i, 0, 0j) for o in range(n) for i in range(n))
    elif kind == parts.TERMINATOR:
        yield 0, 0, 0, net.reflections.get(e, 0j)
    elif kind in FOLDED:
        yield from ((1, 0, 0, 1.0 + 0j), (0, 1, 0, 1.0 + 0j))
    else:
        passes = complex(amplitude_from_loss_db(float(net.nominal[e])))
        yield from ((1, 0, 0, passes), (0, 1, 0, passes))
        returns = net.reflections.get(e, 0j)
        if returns:
            yield from ((0, 0, 0, returns), (1, 1, 0, returns))
