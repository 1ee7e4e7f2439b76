"""Loops in which light builds up so far that digits are lost: which they are, and at which wavelength.

Public: Ringing, ringing, BUILD_UP.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import Net
from meshctl.mesh.response import Response
from meshctl.mesh.waves import Waves
from meshctl.optics.pattern import WavePattern

BUILD_UP = 1e4  # field inside over field that enters: from here a result may be off by more than 10^-11
CHUNK = 64  # wavelengths at once
STRONG = 0.5  # of the power: what sends less on is not followed


@dataclass(frozen=True)
class Ringing:
    """One closed way that light hardly leaves."""

    parts: tuple[str, ...]  # cells, or elements that are in none, in the order of the light
    wavelength_nm: float  # where the build-up is largest
    build_up: float  # 1 / |1 - round trip|, infinite where nothing leaves
    error: float  # what rounding may do to the response there: 10 x build-up x rounding

    def __str__(self) -> str:
        ring = ", ".join(self.parts[:12]) + (" and more" if len(self.parts) > 12 else "")
        if np.isinf(self.build_up):
            return f"light in the loop {ring} never leaves it, and none is taken to be there"
        return (
            f"light in the loop {ring} builds up {self.build_up:.2g} times at {self.wavelength_nm:.6f} nm; the "
            f"matrix may be off by {self.error:.1g} there"
        )


class _Cells:
    """The parts of a net, each cell as one: which ports lead out of it, and its S over them."""

    def __init__(self, waves: Waves) -> None:
        pattern = waves.woven.pattern
        self.mate = pattern.mate
        owner = np.repeat(pattern.part_of, np.diff(pattern.port_start))
        inside = (self.mate >= 0) & (owner[self.mate] == owner)
        order = np.argsort(owner, kind="stable")
        self.part_of_port = owner
        self.ports = {int(owner[g[0]]): g for g in np.split(order, np.flatnonzero(np.diff(owner[order])) + 1) if len(g)}
        of_entry = owner[pattern.s_out_port]
        order = np.argsort(of_entry, kind="stable")
        cuts = np.flatnonzero(np.diff(of_entry[order])) + 1
        self.entries = {int(of_entry[g[0]]): g for g in np.split(order, cuts) if len(g)}
        self.inside, self.pattern = inside, pattern

    def outward(self, part: int) -> np.ndarray:
        ports = self.ports[part]
        return ports[~self.inside[ports]]

    def joined(self, part: int, entries: np.ndarray) -> np.ndarray:
        """S [W, n, n] of a part over its outward ports, from the entries [W, N] of the net."""
        ports, rows = self.ports[part], self.entries.get(part, np.empty(0, np.int64))
        place = {int(p): k for k, p in enumerate(ports)}
        s = np.zeros((len(entries), len(ports), len(ports)), complex)
        at_out = [place[p] for p in self.pattern.s_out_port[rows].tolist()]
        s[:, at_out, [place[p] for p in self.pattern.s_in_port[rows].tolist()]] = entries[:, rows]
        inner = np.flatnonzero(self.inside[ports])
        out = np.flatnonzero(~self.inside[ports])
        found: np.ndarray = s[:, out[:, None], out]
        if len(inner):
            onto = np.array([place[p] for p in self.mate[ports[inner]].tolist()])
            system = np.eye(len(inner)) - s[:, onto[:, None], inner]
            found = found + s[:, out[:, None], inner] @ np.linalg.solve(system, s[:, onto[:, None], out])
        return found


def _loops(cells: _Cells, entries: np.ndarray) -> list[tuple[list[tuple[int, int, int]], complex]]:
    """Closed ways along the strongest passages through cells: (part, out, in) of each, and the round trip."""
    onward: dict[int, tuple[int, int, int, int, complex]] = {}
    for part in cells.ports:
        outward = cells.outward(part)
        if not len(outward):
            continue
        s = cells.joined(part, entries)[0]
        best = np.argmax(np.abs(s), axis=0)
        for i, port in enumerate(outward.tolist()):
            o = int(best[i])
            if abs(s[o, i]) ** 2 >= STRONG:
                onward[port] = int(cells.mate[outward[o]]), part, o, i, complex(s[o, i])
    seen: dict[int, int] = {}
    found = []
    for start in onward:
        at = start
        while at in onward and at not in seen:
            seen[at] = start
            at = onward[at][0]
        if at in onward and seen[at] == start:
            ring, trip, here = [], 1.0 + 0j, at
            while True:
                after, part, o, i, field = onward[here]
                ring.append((part, o, i))
                trip, here = trip * field, after
                if here == at:
                    break
            found.append((ring, trip))
    return found


def ringing(response: Response, settings: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> list[Ringing]:
    """Loops whose light builds up beyond BUILD_UP at any of the wavelengths, each once.

    Cost: some 50 us for each cell, and for each wavelength that of making the parts' S; no solve.
    """
    net, waves = response.net, response.waves
    value = response.values(settings)
    asked = np.array([net.wavelength_nm]) if wavelengths_nm is None else np.asarray(wavelengths_nm, float)
    cells = _Cells(waves)
    loops = _loops(cells, waves.entries(value, asked[:1]))
    close = [ring for ring, trip in loops if abs(trip) > 1.0 - 10.0 / BUILD_UP]
    if not close:
        return []
    parts = sorted({part for ring in close for part, _, _ in ring})
    runs: dict[int, list[np.ndarray]] = {part: [] for part in parts}
    for k in range(0, len(asked), CHUNK):
        entries = waves.entries(value, asked[k : k + CHUNK])
        for part in parts:
            runs[part].append(cells.joined(part, entries))
    over = {part: np.concatenate(run) for part, run in runs.items()}
    found: dict[frozenset[str], Ringing] = {}
    for ring in close:
        apart = np.abs(1.0 - np.prod([over[part][:, o, i] for part, o, i in ring], axis=0))
        w = int(np.argmin(apart))
        if apart[w] <= 1.0 / BUILD_UP:
            names = _names(net, waves, [part for part, _, _ in ring])
            build_up = float(1.0 / apart[w]) if apart[w] > 0.0 else np.inf
            error = 10.0 * build_up * float(np.finfo(float).eps)
            found.setdefault(frozenset(names), Ringing(names, float(asked[w]), build_up, error))
    return list(found.values())


def _names(net: Net, waves: Waves, ring: list[int]) -> tuple[str, ...]:
    """Names of the cells of a ring, or of elements that are in none."""
    pattern = waves.woven.pattern
    first_entry: dict[int, int] = {}
    for k, part in zip(waves.woven.row.tolist(), pattern.part_of[_element(pattern)].tolist(), strict=True):
        first_entry.setdefault(part, k)
    elements = [first_entry[part] for part in ring]
    cells = net.cell_of
    return tuple(dict.fromkeys(net.names.cells[cells[e]] if cells[e] >= 0 else net.names.elements[e] for e in elements))


def _element(pattern: WavePattern) -> np.ndarray:
    """The pattern's own element of every entry."""
    owner = np.repeat(np.arange(len(pattern.part_of)), np.diff(pattern.port_start))
    return np.asarray(owner[pattern.s_out_port])
