"""One part of a net changed: the new response from the solved old one.

Public: Updater.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from meshctl.errors import WrongSize
from meshctl.optics.joining import substitute
from meshctl.optics.kernels import filled, float64, given, kernel, void
from meshctl.optics.scattering import Scattered, kept_room


@dataclass(frozen=True, eq=False)
class _Around:
    """What one part sees of the net: n its lit outward ports, Q its entries."""

    n_ports: int  # of the part, dark ones too
    entries: np.ndarray  # i64[Q], rows of the pattern's entries
    at: tuple[np.ndarray, np.ndarray]  # where they stand in the part's own S, out and in
    outward: np.ndarray  # places of outward ports in the part's own S
    inner: np.ndarray  # places of ports linked within the part
    partner: np.ndarray  # of each inner port, its position in `inner`
    before: np.ndarray  # c128[W, n, n], S of the part as it was solved
    back: np.ndarray  # c128[W, n, n], light that returns to the part from what leaves it
    reach: np.ndarray  # c128[W, X, n], light at external ports from what leaves the part


class Updater:
    """New responses after one part (a cell, or an element in no cell) has changed.

    Parameters
    ----------
    solved : Scattered, with keep=True

    `prepare(part)` costs one substitution with as many columns as the part has ports and happens by itself
    on first use; each `response` then costs two small products.
    Source: the matrix inversion lemma (Woodbury 1950); light reaches a part as it leaves it, by reciprocity.
    """

    def __init__(self, solved: Scattered) -> None:
        kept_room(solved)
        self.solved = solved
        self._around: dict[int, _Around] = {}

    def entries(self, part: int) -> np.ndarray:
        """Which entries of S belong to a part, in the order in which `response` takes their values."""
        return self.prepare(part).entries

    def prepare(self, part: int) -> _Around:
        """Solve once for light leaving each port of a part."""
        if part not in self._around:
            self._around[part] = self._look_around(part)
        return self._around[part]

    def _look_around(self, part: int) -> _Around:
        solved, pattern = self.solved, self.solved.pattern
        owner = np.repeat(np.arange(len(pattern.part_of)), np.diff(pattern.port_start))
        ports = np.flatnonzero(pattern.part_of[owner] == part)
        if not len(ports):
            raise WrongSize(f"there is no part {part}; they run from 0 to {pattern.part_of.max()}")
        place = np.full(len(pattern.mate), -1)
        place[ports] = np.arange(len(ports))
        mates = pattern.mate[ports]
        inside = (mates >= 0) & (place[mates] >= 0)
        lit = (mates >= 0) | np.isin(ports, pattern.external_ports)
        inner, outward = np.flatnonzero(inside), np.flatnonzero(lit & ~inside)
        entries = np.flatnonzero(place[pattern.s_out_port] >= 0)
        at = place[pattern.s_out_port[entries]], place[pattern.s_in_port[entries]]
        partner = np.searchsorted(inner, place[mates[inner]])

        n, n_waves = len(outward), len(solved.s_values)
        back = np.empty((n_waves, n, n), complex)
        reach = np.empty((n_waves, len(pattern.external_ports), n), complex)
        for w in range(n_waves):
            a, y = np.zeros((2, 2, len(pattern.mate), n))
            y[0, ports[outward], np.arange(n)] = 1.0
            kept, fronts = kept_room(solved).at(w), pattern.fronts
            substitute(fronts.table, fronts.ports, *kept, y[0], y[1], a[0], a[1], 1)
            back[w] = a[0, ports[outward]] + 1j * a[1, ports[outward]]
            reach[w] = y[0, pattern.external_ports] + 1j * y[1, pattern.external_ports]
        around = _Around(len(ports), entries, at, outward, inner, partner, back, back, reach)
        return replace(around, before=_fused(around, solved.s_values[:, entries]))

    def response(self, part: int, values: np.ndarray) -> np.ndarray:
        """The response [W, out, in] with new values [W, Q] of a part's entries, in the order of `entries`."""
        around, solved = self.prepare(part), self.solved
        if values.shape != (len(solved.s_values), len(around.entries)):
            raise WrongSize(
                f"values have shape {values.shape}; part {part} takes ({len(solved.s_values)}, {len(around.entries)})"
            )
        change = _fused(around, values) - around.before
        n = change.shape[-1]
        # waves into the part: a = to + back change a
        seen = np.linalg.solve(np.eye(n) - around.back @ change, around.reach[:, solved.inputs].swapaxes(1, 2))
        extra = change @ seen
        response = solved.response.copy()
        # as real numbers: x y = Re x (y) + Im x (i y); not by @, which may wait 100 ms for its threads
        _add_product(
            np.ascontiguousarray(around.reach[:, solved.outputs]).view(np.float64),
            np.stack([extra, 1j * extra], axis=2).reshape(len(extra), 2 * n, -1).view(np.float64),
            response.view(np.float64),
        )
        return response


@kernel(void(given(float64, 3), given(float64, 3), filled(float64, 3)))
def _add_product(left, right, total):  # type: ignore[no-untyped-def]
    """total += left @ right at every wavelength."""
    for w in range(left.shape[0]):
        for i in range(left.shape[1]):
            row = total[w, i]
            for k in range(left.shape[2]):
                x, source = left[w, i, k], right[w, k]
                for j in range(len(row)):
                    row[j] += x * source[j]


def _fused(around: _Around, values: np.ndarray) -> np.ndarray:
    """S [W, n, n] of a part over its outward ports from its entries [W, Q]."""
    s = np.zeros((len(values), around.n_ports, around.n_ports), complex)
    s[:, around.at[0], around.at[1]] = values
    out, inner = around.outward, around.inner
    fused = s[:, out[:, None], out]
    if len(inner):
        onto = s[:, inner[around.partner][:, None], inner]  # rows exchanged across the links
        into = s[:, inner[around.partner][:, None], out]
        waves = np.linalg.solve(np.eye(len(inner)) - onto, into)
        fused = fused + s[:, out[:, None], inner] @ waves
    return fused
