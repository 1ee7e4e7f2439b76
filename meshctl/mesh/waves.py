"""Light through a net that runs both ways: from the values of its parts to scattering and its derivatives.

Parts that only turn or weaken light on one lane (phases, guides, losses) are folded into the ports that they
lead to: what is joined are couplers, crossings and parts that reflect. An entry of a part's S is then
``own * g_out * g_in``, g the product of what stands before each of its two ports.
Public: Waves.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import Any
from weakref import WeakKeyDictionary

import numpy as np

from meshctl.mesh.graph import AsBuilt, Net
from meshctl.optics import elements as parts
from meshctl.optics.pattern import WavePattern, compile_pattern
from meshctl.optics.scattering import Scattered, jvp, scatter, vjp
from meshctl.units import UM_PER_CM, amplitude_from_loss_db

CHUNK_BYTES = 1 << 25  # of S entries at once
FOLDED = (parts.PHASE, parts.GUIDE, parts.LOSS)


@dataclass(frozen=True, eq=False)
class _Woven:
    """A net with its one-lane parts folded away. N entries of S, Q ports that are left."""

    pattern: WavePattern
    row: np.ndarray  # i64[N], element of each entry
    through: np.ndarray  # i64, entries that are cos of a coupler's angle
    cross: np.ndarray  # i64, entries that are i sin of it
    fixed: np.ndarray  # c128[N], entries that do not change with wavelength, without further loss
    measured: list[tuple[int, np.ndarray, np.ndarray, np.ndarray]]  # element, its entries, out and in by port
    folded: np.ndarray  # i64, elements folded into a port
    folded_at: np.ndarray  # i64, that port


_woven: WeakKeyDictionary[Net, _Woven] = WeakKeyDictionary()


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


def _weave(net: Net) -> _Woven:
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
    return _Woven(
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


class Waves:
    """Light through any net between its inputs and outputs.

    Parameters
    ----------
    net : Net
    as_built : AsBuilt

    `residual` and `dark_loops` tell of the last solve: the largest breach of a link over the largest field, and
    the most loops that no light enters.
    """

    def __init__(self, net: Net, as_built: AsBuilt) -> None:
        if net not in _woven:
            _woven[net] = _weave(net)
        self.net, self.woven = net, _woven[net]
        woven = self.woven
        loss_db = as_built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
        loss_db = np.where(net.kind == parts.LOSS, loss_db + net.nominal, loss_db)
        amplitude = amplitude_from_loss_db(loss_db)
        n_ports = len(woven.pattern.mate)
        lost = np.bincount(woven.folded_at, loss_db[woven.folded], n_ports)
        # a one-lane part that was not folded stands before its own first port
        kept = np.flatnonzero(np.isin(net.kind[woven.row], FOLDED))
        lone, first = np.unique(woven.row[kept], return_index=True)
        self._lone = lone, np.minimum(woven.pattern.s_out_port, woven.pattern.s_in_port)[kept[first]]
        self._port_amplitude = amplitude_from_loss_db(lost)
        self._amplitude = amplitude[woven.row]
        names = list(net.externals)
        self.inputs = np.array([names.index(name) for name in net.inputs])
        self.outputs = np.array([names.index(name) for name in net.outputs])
        self._couplers = np.flatnonzero(net.kind == parts.COUPLER)
        place = np.full(net.n_elements, -1)
        place[self._couplers] = np.arange(len(self._couplers))
        self._angle_of = place[woven.row]
        self._turned = (net.kind == parts.PHASE) | (net.kind == parts.GUIDE)
        self._kept: Scattered | None = None
        self.residual, self.dark_loops = 0.0, 0

    # ---- parts
    @cached_property
    def _standing(self) -> tuple[np.ndarray, np.ndarray]:
        """Turning elements and the ports that they stand before."""
        woven = self.woven
        turned = self._turned[woven.folded]
        element = np.concatenate([woven.folded[turned], self._lone[0]])
        port = np.concatenate([woven.folded_at[turned], self._lone[1]])
        keep = self._turned[element]
        return element[keep], port[keep]

    def _ports(self, value: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Phase at the centre and length of guide before every port."""
        element, port = self._standing
        n = len(self.woven.pattern.mate)
        return np.bincount(port, value[element], n), np.bincount(port, self.net.length_um[element], n)

    def _scales(self, waves: np.ndarray) -> tuple[Any, Any, Any]:
        """What phases, micrometres of guide and coupler angles are multiplied by, [W] each."""
        net = self.net
        return (
            parts.phase_scale(waves, net.wavelength_nm),
            parts.guide_phase_rad_per_um(waves, net.wavelength_nm, net.n_eff, net.n_group),
            parts.angle_scale(waves, net.wavelength_nm, net.angle_slope_per_nm),
        )

    def _own(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """Entries [W, N] of the parts themselves."""
        woven = self.woven
        _, _, stretch = self._scales(waves)
        own = np.empty((len(waves), len(woven.row)), complex)
        own[:] = woven.fixed
        angle = stretch[:, None] * value[self._couplers]
        own[:, woven.through] = np.cos(angle)[:, self._angle_of[woven.through]]
        own[:, woven.cross] = 1j * np.sin(angle)[:, self._angle_of[woven.cross]]
        for e, where, out, into in woven.measured:
            own[:, where] = self.net.measured[e].at(waves)[:, out, into]
        own *= self._amplitude
        return own

    def _before(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """What stands before the two ports of every entry, multiplied, [W, N]."""
        scale, per_um, _ = self._scales(waves)
        phase, length = self._ports(value)
        turn = np.exp(1j * (scale[:, None] * phase + per_um[:, None] * length)) * self._port_amplitude
        pattern = self.woven.pattern
        both: np.ndarray = turn[:, pattern.s_out_port] * turn[:, pattern.s_in_port]
        return both

    def entries(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """The entries [W, N] of the parts' S in the order of the pattern."""
        return self._own(value, waves) * self._before(value, waves)

    def _entry_slopes(self, value: np.ndarray, waves: np.ndarray, entries: np.ndarray) -> np.ndarray:
        """Derivative of the entries by the wavelength, per nm."""
        net, woven, pattern = self.net, self.woven, self.woven.pattern
        phase, length = self._ports(value)
        turning = (
            parts.phase_slope_per_nm(waves, net.wavelength_nm)[:, None] * phase
            + parts.guide_slope_rad_per_um_nm(waves, net.n_group)[:, None] * length
        )
        slope = 1j * (turning[:, pattern.s_out_port] + turning[:, pattern.s_in_port]) * entries
        own = np.zeros((len(waves), len(woven.row)), complex)
        if net.angle_slope_per_nm:
            _, _, stretch = self._scales(waves)
            angle, rate = stretch[:, None] * value[self._couplers], net.angle_slope_per_nm * value[self._couplers]
            own[:, woven.through] = (-np.sin(angle) * rate)[:, self._angle_of[woven.through]]
            own[:, woven.cross] = 1j * (np.cos(angle) * rate)[:, self._angle_of[woven.cross]]
        for e, where, out, into in woven.measured:
            own[:, where] = net.measured[e].slope_per_nm(waves)[:, out, into]
        if net.angle_slope_per_nm or woven.measured:
            slope += own * self._amplitude * self._before(value, waves)
        return slope

    # ---- light
    def solved(
        self,
        value: np.ndarray,
        waves: np.ndarray,
        inputs: np.ndarray | None = None,
        outputs: np.ndarray | None = None,
        *,
        keep: bool = False,
    ) -> Scattered:
        """Scattering between inputs and outputs for element values [E] at wavelengths [W]."""
        found = scatter(
            self.woven.pattern,
            self.entries(value, waves),
            self.inputs if inputs is None else self.inputs[inputs],
            self.outputs if outputs is None else self.outputs[outputs],
            keep=keep,
            reuse=self._kept if keep else None,
        )
        if keep:
            self._kept = found
        self.residual = max(self.residual, float(found.residual.max(initial=0.0)))
        self.dark_loops = max(self.dark_loops, int(found.dark_loops.max(initial=0)))
        return found

    def release(self) -> None:
        """Leave what the last solve kept to whoever holds it; the next one takes memory of its own."""
        self._kept = None

    def _chunks(self, waves: np.ndarray, numbers: int) -> Iterator[slice]:
        size = max(1, CHUNK_BYTES // (16 * max(1, numbers)))
        return (slice(k, k + size) for k in range(0, len(waves), size))

    def _fresh(self) -> None:
        self.residual, self.dark_loops = 0.0, 0

    def matrix(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """Field matrices [W, out, in]."""
        self._fresh()
        runs = [self.solved(value, waves[k]).response for k in self._chunks(waves, self.woven.pattern.n_entries)]
        return np.concatenate(runs) if runs else np.empty((0, len(self.outputs), len(self.inputs)), complex)

    def slope_per_nm(
        self, value: np.ndarray, waves: np.ndarray, inputs: np.ndarray | None = None, outputs: np.ndarray | None = None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Field matrices and their derivative by the wavelength, [W, out, in] both."""
        self._fresh()
        matrices, slopes = [], []
        for k in self._chunks(waves, self.woven.pattern.fronts.size):
            found = self.solved(value, waves[k], inputs, outputs, keep=True)
            matrices.append(found.response)
            slopes.append(jvp(found, self._entry_slopes(value, waves[k], found.s_values)))
        return np.concatenate(matrices), np.concatenate(slopes)

    def pullback(
        self, value: np.ndarray, cotangent: Callable[[np.ndarray], np.ndarray], waves: np.ndarray
    ) -> np.ndarray:
        """Gradient [E] by the value of every element, for a cotangent [W, out, in] made from the matrices.

        Cost: two to three times `matrix`; 16 bytes x the size of the fronts per wavelength are kept.
        """
        woven, pattern = self.woven, self.woven.pattern
        self._fresh()
        found = self.solved(value, waves, keep=True)
        scale, _, stretch = self._scales(waves)
        g = vjp(found, cotangent(found.response)).conj()
        by_value = np.zeros(self.net.n_elements)
        # an entry turns with what stands before either of its ports
        turned = -(g * found.s_values).imag * scale[:, None]
        n = len(pattern.mate)
        by_port = np.bincount(pattern.s_out_port, turned.sum(0), n) + np.bincount(pattern.s_in_port, turned.sum(0), n)
        element, port = self._standing
        by_value[element] = by_port[port]
        angle = stretch[:, None] * value[self._couplers]
        g = g * self._before(value, waves) * self._amplitude * stretch[:, None]
        by_angle = np.zeros((len(waves), len(woven.row)))
        by_angle[:, woven.through] = (g[:, woven.through].real) * -np.sin(angle)[:, self._angle_of[woven.through]]
        by_angle[:, woven.cross] = -(g[:, woven.cross].imag) * np.cos(angle)[:, self._angle_of[woven.cross]]
        by_value += np.bincount(woven.row, by_angle.sum(0), self.net.n_elements)
        return by_value
