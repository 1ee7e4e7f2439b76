"""A net compiled for light that runs both ways: checked links and entries, and the order of joining.

Public: WavePattern, compile_pattern.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from meshctl.errors import UnsoundNet
from meshctl.optics.dissection import dissect
from meshctl.optics.fronts import Fronts, compile_fronts


@dataclass(frozen=True, eq=False)
class WavePattern:
    """A net compiled for `scatter`. E elements, P ports, N entries of the parts' S, X external ports."""

    port_start: np.ndarray  # i32[E + 1]
    mate: np.ndarray  # i32[P]
    s_out_port: np.ndarray  # i64[N]
    s_in_port: np.ndarray  # i64[N]
    mirror: np.ndarray  # i64[N], the entry with out and in exchanged
    external_ports: np.ndarray  # i64[X]
    part_of: np.ndarray  # i32[E]: its cell, or a number of its own above all cells
    steps: tuple[np.ndarray, ...]  # links that are closed together, by their lower ports
    fronts: Fronts
    _narrowed: dict[tuple[int, ...], WavePattern] = field(default_factory=dict, repr=False)

    @property
    def n_entries(self) -> int:
        return len(self.s_out_port)

    def narrowed(self, positions: Sequence[int] | np.ndarray) -> WavePattern:
        """The same net with all external ports dark but these (positions); compiled once for each choice."""
        key = tuple(int(k) for k in positions)
        if key == tuple(range(len(self.external_ports))):
            return self
        if key not in self._narrowed:
            ports = self.external_ports[list(key)]
            fronts = compile_fronts(self.mate, self.s_out_port, self.s_in_port, ports, list(self.steps))
            self._narrowed[key] = WavePattern(
                self.port_start,
                self.mate,
                self.s_out_port,
                self.s_in_port,
                self.mirror,
                ports,
                self.part_of,
                self.steps,
                fronts,
            )
        return self._narrowed[key]


def compile_pattern(
    port_start: np.ndarray,
    mate: np.ndarray,
    s_out_port: np.ndarray,
    s_in_port: np.ndarray,
    cell_of: np.ndarray,
    external_ports: np.ndarray,
    cell_xy: np.ndarray | None = None,
) -> WavePattern:
    """Compile a net for `scatter`.

    Parameters
    ----------
    port_start : int (E + 1,), first port of each element
    mate : int (P,), partner of each port, -1: free
    s_out_port, s_in_port : int (N,), the entries of the parts' S that may differ from zero
    cell_of : int (E,), -1: in no cell
    external_ports : int (X,), free ports by position; other free ports are dark
    cell_xy : float (C, 2), where cells stand; None: the order is found from the links alone

    Returns
    -------
    WavePattern

    Raises
    ------
    UnsoundNet
        For links that are not mutual, external ports that are linked, entries given twice or between two
        elements, and entries whose reverse is missing.

    Cost: n log n; 0.4 s for 2862 hexagon cells.

    Example
    -------
    A ring: one coupler whose b2 is linked to its a2.

    >>> from meshctl.optics.scattering import scatter
    >>> ports = np.array([(2, 0), (2, 1), (3, 0), (3, 1)])  # b1, b2 from a1, a2
    >>> both = np.concatenate([ports, ports[:, ::-1]])
    >>> ring = compile_pattern([0, 4], [-1, 3, -1, 1], both[:, 0], both[:, 1], [-1], [0, 2])
    >>> c, s = np.cos(0.3), 1j * np.sin(0.3)
    >>> abs(scatter(ring, np.array([[c, s, s, c] * 2])).response[0, 1, 0]).round(12)
    np.float64(1.0)
    """
    port_start, mate = np.array(port_start, np.int32), np.array(mate, np.int32)
    s_out, s_in = np.array(s_out_port, np.int64), np.array(s_in_port, np.int64)
    external = np.array(external_ports, np.int64)
    owner = np.repeat(np.arange(len(port_start) - 1), np.diff(port_start))
    _check_links(mate, external)
    mirror = _mirror_entries(owner, s_out, s_in, len(mate))
    cells = np.asarray(cell_of, np.int32)
    n_cells = int(cells.max(initial=-1)) + 1
    alone = cells < 0
    part_of = cells.copy()
    part_of[alone] = n_cells + np.arange(np.count_nonzero(alone))
    steps = _steps(mate, part_of[owner], n_cells + int(np.count_nonzero(alone)), cell_xy)
    fronts = compile_fronts(mate, s_out, s_in, external, list(steps))
    for array in (port_start, mate, s_out, s_in, mirror, external, part_of):
        array.flags.writeable = False
    return WavePattern(port_start, mate, s_out, s_in, mirror, external, part_of, steps, fronts)


def _check_links(mate: np.ndarray, external: np.ndarray) -> None:
    linked = np.flatnonzero(mate >= 0)
    wrong = linked[(mate[mate[linked]] != linked) | (mate[linked] == linked)]
    if len(wrong):
        raise UnsoundNet(
            f"port {wrong[0]} is linked to port {mate[wrong[0]]}, which is linked elsewhere",
            remedy="link each port once",
        )
    if len(np.unique(external)) < len(external):
        raise UnsoundNet("an external port is listed twice")
    taken = external[mate[external] >= 0]
    if len(taken):
        raise UnsoundNet(f"port {taken[0]} is external and linked", remedy="leave external ports free")


def _mirror_entries(owner: np.ndarray, s_out: np.ndarray, s_in: np.ndarray, n_ports: int) -> np.ndarray:
    across = np.flatnonzero(owner[s_out] != owner[s_in])
    if len(across):
        k = across[0]
        raise UnsoundNet(f"entry {k} of S goes from port {s_in[k]} of one element to {s_out[k]} of another")
    key, back = s_out * n_ports + s_in, s_in * n_ports + s_out
    order = np.argsort(key)
    if (np.diff(key[order]) == 0).any():
        raise UnsoundNet("an entry of S is listed twice")
    place = np.searchsorted(key[order], back).clip(max=max(0, len(key) - 1))
    missing = np.flatnonzero(key[order][place] != back) if len(key) else place
    if len(missing):
        k = missing[0]
        raise UnsoundNet(
            f"S has an entry from port {s_in[k]} to port {s_out[k]} and none back; parts must be reciprocal"
        )
    mirror: np.ndarray = order[place]
    return mirror


def _steps(mate: np.ndarray, part: np.ndarray, n_parts: int, cell_xy: np.ndarray | None) -> tuple[np.ndarray, ...]:
    """Links inside each part first, then those between parts along nested halves."""
    low = np.flatnonzero(mate > np.arange(len(mate)))
    ends = np.column_stack([part[low], part[mate[low]]]).astype(np.int64)
    own = ends[:, 0] == ends[:, 1]
    inner = low[own][np.argsort(ends[own, 0], kind="stable")]
    split = np.flatnonzero(np.diff(part[inner])) + 1
    steps = [s for s in np.split(inner, split) if len(s)]
    between, low = ends[~own], low[~own]
    halving = dissect(n_parts, between, _part_places(n_parts, between, cell_xy))
    steps += np.split(low[halving.closed], halving.first[1:-1]) if len(low) else []
    return tuple(steps)


def _part_places(n_parts: int, links: np.ndarray, cell_xy: np.ndarray | None) -> np.ndarray | None:
    """Places of all parts; those in no cell stand amid the parts they are linked to. None: unknown."""
    if cell_xy is None or len(cell_xy) > n_parts:
        return None
    place = np.full((n_parts, 2), np.nan)
    place[: len(cell_xy)] = cell_xy
    both = np.concatenate([links, links[:, ::-1]])
    while True:
        known = ~np.isnan(place[:, 0])
        if known.all():
            return place
        reach = both[~known[both[:, 0]] & known[both[:, 1]]]
        if not len(reach):
            return None
        total, count = np.zeros((n_parts, 2)), np.zeros(n_parts)
        np.add.at(total, reach[:, 0], place[reach[:, 1]])
        np.add.at(count, reach[:, 0], 1.0)
        now = count > 0
        place[now] = total[now] / count[now, None]
