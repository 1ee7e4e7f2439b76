"""Joining scattering matrices: which waves meet in which dense block, and the compiled joins.

Two multi-ports are joined by eliminating the waves on the links between them; what is left is the
scattering matrix of both over the ports that stay open. Done from single parts up to the whole net along
nested halves, this is the LU of (I - P S) on a fixed pattern without pivoting, which is safe because no
part makes light: |P S| <= 1. A block (a front) holds m link waves first, then the open ports:

    rows: waves that leave; columns: waves that enter
    [[S_links,links  S_links,open], [S_open,links  S_open,open]]

A wave that leaves by port q enters by its partner p, so pivot k has row q_k and column p_k. Waves that
never meet (the two directions of a lattice without reflections) fall into different fronts. As all parts
are reciprocal, the front of the waves that run backwards is the transpose, and only one of a pair is kept.
A front whose waves run both ways is symmetric over its ports: its open columns are its open rows, and
pivots 2 k and 2 k + 1 are the two directions of one link.
Public: Fronts, compile_fronts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.optics.kernels import filled, given, int64, kernel, uint8, void

# columns of Fronts.table
OFFSET, LINKS, ROWS, COLUMNS, ENTRY, ENTRY_END, CHILD, CHILD_END, PIVOT, PAIRED, PORT_ROW, PORT_COLUMN = range(12)


@dataclass(frozen=True, eq=False)
class Fronts:
    """A net compiled for the kernels: B fronts, innermost first; the last one is the response."""

    table: np.ndarray  # i64[B, 12]: see the names of the columns above
    children: np.ndarray  # i64[., 4]: front, transposed or not, where its row and column maps start
    maps: np.ndarray  # i64, rows and columns of a parent
    entries: np.ndarray  # i64[., 2]: slot of a front, row of the S entries
    ports: np.ndarray  # i64, ports of rows and columns of all fronts
    size: int  # numbers in all fronts
    pivots: int
    live: np.ndarray  # u8[size], 0 where a front is zero whatever the values of S


class _Wave:
    """A set of waves while the fronts are being compiled: those that leave (rows) and enter (columns)."""

    __slots__ = ("columns", "entries", "front", "partner", "rows", "transposed")

    def __init__(self, rows: np.ndarray, columns: np.ndarray) -> None:
        self.rows, self.columns = rows, columns
        self.entries: np.ndarray | None = None  # rows of S entries, for a single part
        self.front, self.transposed = -1, 0
        self.partner: _Wave = self


def compile_fronts(
    mate: np.ndarray,
    s_out_port: np.ndarray,
    s_in_port: np.ndarray,
    external_ports: np.ndarray,
    steps: list[np.ndarray],
) -> Fronts:
    """Find the fronts of a net.

    Parameters
    ----------
    mate : int (P,)
    s_out_port, s_in_port : int (N,), symmetric as a pattern: with (p, q) also (q, p)
    external_ports : int (X,); other free ports are dark
    steps : list of int arrays, links that close together, each link by its lower port

    Returns
    -------
    Fronts
    """
    return _Compiler(mate, s_out_port, s_in_port, external_ports).run(steps)


class _Compiler:
    def __init__(self, mate: np.ndarray, s_out: np.ndarray, s_in: np.ndarray, external_ports: np.ndarray) -> None:
        self.mate, self.s_out, self.s_in, self.external = mate, s_out, s_in, external_ports
        self.table: list[list[int]] = []
        self.children: list[tuple[int, int, int, int]] = []
        self.maps: list[np.ndarray] = []
        self.map_length = 0
        self.entries: list[np.ndarray] = []
        self.entry_length = 0
        self.ports: list[np.ndarray] = []
        self.port_length = 0
        self.size = self.pivots = 0
        n_ports = len(mate)
        self.row_place = np.full(n_ports, -1, np.int64)
        self.column_place = np.full(n_ports, -1, np.int64)
        self.row_owner: list[_Wave] = [None] * n_ports  # type: ignore[list-item]
        self.column_owner: list[_Wave] = [None] * n_ports  # type: ignore[list-item]
        self._single_parts()

    def _single_parts(self) -> None:
        """Waves of the single parts: connected sets of entries between lit ports."""
        n_ports = len(self.mate)
        lit = self.mate >= 0
        lit[self.external] = True
        used = np.flatnonzero(lit[self.s_out] & lit[self.s_in])
        label = np.arange(2 * n_ports)
        _unite(label, self.s_out[used].astype(np.int64), self.s_in[used].astype(np.int64) + n_ports)
        lit_ports = np.flatnonzero(lit)
        nodes = np.concatenate([lit_ports, lit_ports + n_ports])
        by_label = nodes[np.argsort(label[nodes], kind="stable")]
        used = used[np.argsort(label[self.s_out[used]], kind="stable")]
        names, starts = np.unique(label[by_label], return_index=True)
        entry_starts = np.searchsorted(label[self.s_out[used]], names)
        stops = np.append(starts[1:], len(by_label)).tolist()
        entry_stops = np.searchsorted(label[self.s_out[used]], names, side="right").tolist()
        for a, b, c, d in zip(starts.tolist(), stops, entry_starts.tolist(), entry_stops, strict=True):
            members = by_label[a:b]
            rows, columns = members[members < n_ports], members[members >= n_ports] - n_ports
            wave = _Wave(rows, columns)
            wave.entries = used[c:d]
            self._own(wave)
        for port in lit_ports.tolist():
            forth, back = self.row_owner[port], self.column_owner[port]
            forth.partner, back.partner = back, forth

    def _own(self, wave: _Wave) -> None:
        for port in wave.rows.tolist():
            self.row_owner[port] = wave
        for port in wave.columns.tolist():
            self.column_owner[port] = wave

    def run(self, steps: list[np.ndarray]) -> Fronts:
        for step in steps:
            self._close(step.tolist())
        waves: dict[int, _Wave] = {}
        for port in self.external.tolist():
            for wave in (self.row_owner[port], self.column_owner[port]):
                waves[id(wave)] = wave
        inner = np.empty(0, np.int64)
        self._front(list(waves.values()), inner, inner, self.external, self.external, paired=False)
        compiled = (
            np.array(self.table, np.int64),
            np.array(self.children, np.int64).reshape(-1, 4),
            np.concatenate([*self.maps, inner]),
            np.concatenate([*self.entries, inner.reshape(0, 2)]),
        )
        live = np.zeros(self.size, np.uint8)
        _mark_live(*compiled, live)
        return Fronts(*compiled, np.concatenate([*self.ports, inner]), self.size, self.pivots, live)

    def _close(self, low_ports: list[int]) -> None:
        """Join the waves that meet on these links."""
        root: dict[int, int] = {}

        def find(key: int) -> int:
            while root[key] != key:
                root[key] = root[root[key]]
                key = root[key]
            return key

        met: dict[int, _Wave] = {}
        pivots = [pivot for p in low_ports for pivot in ((p, int(self.mate[p])), (int(self.mate[p]), p))]
        for leaving, entering in pivots:
            pair = self.row_owner[leaving], self.column_owner[entering]
            for wave in pair:
                if root.setdefault(id(wave), id(wave)) == id(wave):
                    met[id(wave)] = wave
            root[find(id(pair[0]))] = find(id(pair[1]))
        members: dict[int, list[_Wave]] = {}
        for key, wave in met.items():
            members.setdefault(find(key), []).append(wave)
        closing: dict[int, list[tuple[int, int]]] = {}
        for pivot in pivots:
            closing.setdefault(find(id(self.row_owner[pivot[0]])), []).append(pivot)
        done: set[int] = set()
        made: list[_Wave] = []
        for key, waves in members.items():
            if key in done:
                continue
            mirror = find(id(waves[0].partner))
            done |= {key, mirror}
            links = np.array(closing[key], np.int64)
            rows = _without(np.concatenate([w.rows for w in waves]), links[:, 0])
            columns = rows
            if mirror != key:
                columns = _without(np.concatenate([w.columns for w in waves]), links[:, 1])
            joined = _Wave(rows, columns)
            joined.front = self._front(waves, links[:, 0], links[:, 1], rows, columns, paired=mirror != key)
            made.append(joined)
            if mirror != key:
                back = _Wave(columns, rows)
                back.front, back.transposed = joined.front, 1
                joined.partner, back.partner = back, joined
                made.append(back)
        for wave in made:
            self._own(wave)

    def _front(
        self,
        waves: list[_Wave],
        leaving: np.ndarray,
        entering: np.ndarray,
        rows: np.ndarray,
        columns: np.ndarray,
        *,
        paired: bool,
    ) -> int:
        all_rows, all_columns = np.concatenate([leaving, rows]), np.concatenate([entering, columns])
        self.row_place[all_rows] = np.arange(len(all_rows))
        self.column_place[all_columns] = np.arange(len(all_columns))
        width = len(all_columns)
        first_entry, first_child = self.entry_length, len(self.children)
        for wave in waves:
            if wave.entries is not None:
                own = wave.entries
                slot = self.row_place[self.s_out[own]] * width + self.column_place[self.s_in[own]]
                self.entries.append(np.column_stack([slot + self.size, own]))
                self.entry_length += len(own)
                continue
            child = self.table[wave.front]
            at_row, at_column = self.row_place[wave.rows], self.column_place[wave.columns]
            if wave.transposed:
                at_row, at_column = at_column, at_row
            self.children.append((wave.front, wave.transposed, self.map_length, self.map_length + child[ROWS]))
            self.maps += [at_row, at_column]
            self.map_length += len(at_row) + len(at_column)
        self.table.append(
            [
                self.size,
                len(leaving),
                len(rows),
                len(columns),
                first_entry,
                self.entry_length,
                first_child,
                len(self.children),
                self.pivots,
                int(paired),
                self.port_length,
                self.port_length + len(all_rows),
            ]
        )
        self.ports += [all_rows, all_columns]
        self.port_length += len(all_rows) + len(all_columns)
        self.size += len(all_rows) * width
        self.pivots += len(leaving)
        return len(self.table) - 1


def _without(ports: np.ndarray, gone: np.ndarray) -> np.ndarray:
    return ports[~np.isin(ports, gone)]


@kernel(void(filled(int64), given(int64), given(int64)))
def _unite(label, first, second):  # type: ignore[no-untyped-def]
    """Give nodes that are linked, first to second, one label: the lowest of their set."""
    for k in range(len(first)):
        a, b = first[k], second[k]
        while label[a] != a:
            label[a] = label[label[a]]
            a = label[a]
        while label[b] != b:
            label[b] = label[label[b]]
            b = label[b]
        if a < b:
            label[b] = a
        else:
            label[a] = b
    for k in range(len(label)):
        label[k] = label[label[k]]


@kernel(void(given(int64, 2), given(int64, 2), given(int64), given(int64, 2), filled(uint8)))
def _mark_live(table, children, maps, entries, live):  # type: ignore[no-untyped-def]
    """The join done with "may differ from zero" in place of numbers; live is zero on entry."""
    for e in range(len(entries)):
        live[entries[e, 0]] = 1
    for b in range(len(table)):
        o, m, width = table[b, 0], table[b, 1], table[b, 1] + table[b, 3]
        for c in range(table[b, 6], table[b, 7]):
            child, turned, at_row, at_column = children[c, 0], children[c, 1], children[c, 2], children[c, 3]
            m_c, nr_c, nc_c = table[child, 1], table[child, 2], table[child, 3]
            for i in range(nr_c):
                source = table[child, 0] + (m_c + i) * (m_c + nc_c) + m_c
                for j in range(nc_c):
                    if turned:
                        t = o + maps[at_column + j] * width + maps[at_row + i]
                    else:
                        t = o + maps[at_row + i] * width + maps[at_column + j]
                    live[t] |= live[source + j]
        for i in range(m + table[b, 2]):
            row = o + i * width
            for k in range(min(i, m)):
                if live[row + k]:
                    for j in range(k + 1, width):
                        live[row + j] |= live[o + k * width + j]
