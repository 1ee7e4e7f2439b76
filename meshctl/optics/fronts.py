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
Public: Fronts, compile_fronts, join, substitute, pull_back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.optics.kernels import kernel

# columns of Fronts.table
OFFSET, LINKS, ROWS, COLUMNS, ENTRY, ENTRY_END, CHILD, CHILD_END, PIVOT, PAIRED, PORT_ROW, PORT_COLUMN = range(12)
TINY = (8 * np.finfo(float).eps) ** 2  # a pivot below this belongs to a loop that no light enters


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
        return Fronts(
            np.array(self.table, np.int64),
            np.array(self.children, np.int64).reshape(-1, 4),
            np.concatenate([*self.maps, inner]),
            np.concatenate([*self.entries, inner.reshape(0, 2)]),
            np.concatenate([*self.ports, inner]),
            self.size,
            self.pivots,
        )

    def _close(self, low_ports: list[int]) -> None:
        """Join the waves that meet on these links."""
        root: dict[int, int] = {}

        def find(key: int) -> int:
            while root[key] != key:
                root[key] = root[root[key]]
                key = root[key]
            return key

        met: dict[int, _Wave] = {}
        pivots = [(p, int(self.mate[p])) for p in low_ports]
        pivots += [(q, p) for p, q in pivots]
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


@kernel("void(int64[::1],int64[::1],int64[::1])")
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


@kernel(
    "int64(int64[:,::1],int64[:,::1],int64[::1],int64[:,::1],"
    "float64[::1],float64[::1],float64[::1],float64[::1],float64[::1],float64[::1])"
)
def join(table, children, maps, entries, s_re, s_im, f_re, f_im, inv_re, inv_im):  # type: ignore[no-untyped-def]
    """Fill all fronts at one wavelength, innermost first; returns how many pivots were dark loops.

    f_re, f_im are all fronts; left of and on the diagonal of the link waves stay the columns as they were
    eliminated, right of it the rows. inv is 1 / (1 - s_kk) of every pivot, 0 for a dark loop.
    """
    dark = 0
    for b in range(len(table)):
        o, m, nr, nc = table[b, 0], table[b, 1], table[b, 2], table[b, 3]
        width, height, pivot = m + nc, m + nr, table[b, 8]
        for t in range(o, o + height * width):
            f_re[t] = 0.0
            f_im[t] = 0.0
        for e in range(table[b, 4], table[b, 5]):
            f_re[entries[e, 0]] += s_re[entries[e, 1]]
            f_im[entries[e, 0]] += s_im[entries[e, 1]]
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
                    f_re[t] += f_re[source + j]
                    f_im[t] += f_im[source + j]
        for i in range(height):
            start, last = o + i * width, min(i, m)
            for k in range(0, last, 2):  # two pivots at a time
                here, above, rest = start + k, o + k * width + k, width - k - 2
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                x_re = f_re[here] * v_re - f_im[here] * v_im
                x_im = f_re[here] * v_im + f_im[here] * v_re
                if rest < 0:
                    break
                f_re[here + 1] += x_re * f_re[above + 1] - x_im * f_im[above + 1]
                f_im[here + 1] += x_re * f_im[above + 1] + x_im * f_re[above + 1]
                y_re, y_im, below = 0.0, 0.0, above
                if k + 1 < last:
                    v_re, v_im, below = inv_re[pivot + k + 1], inv_im[pivot + k + 1], above + width
                    y_re = f_re[here + 1] * v_re - f_im[here + 1] * v_im
                    y_im = f_re[here + 1] * v_im + f_im[here + 1] * v_re
                if x_re == 0.0 and x_im == 0.0 and y_re == 0.0 and y_im == 0.0:
                    continue
                # views and one loop per written array: only so does the compiler vectorise
                p_re, p_im = f_re[above + 2 : above + 2 + rest], f_im[above + 2 : above + 2 + rest]
                q_re, q_im = f_re[below + 2 : below + 2 + rest], f_im[below + 2 : below + 2 + rest]
                row_re, row_im = f_re[here + 2 : here + 2 + rest], f_im[here + 2 : here + 2 + rest]
                for j in range(rest):
                    row_re[j] += x_re * p_re[j] - x_im * p_im[j] + y_re * q_re[j] - y_im * q_im[j]
                for j in range(rest):
                    row_im[j] += x_re * p_im[j] + x_im * p_re[j] + y_re * q_im[j] + y_im * q_re[j]
            if i < m:
                d_re, d_im = 1.0 - f_re[start + i], -f_im[start + i]
                d = d_re * d_re + d_im * d_im
                if d > TINY:
                    inv_re[pivot + i], inv_im[pivot + i] = d_re / d, -d_im / d
                else:
                    inv_re[pivot + i], inv_im[pivot + i] = 0.0, 0.0
                    dark += 1
    return dark


@kernel(
    "void(int64[:,::1],int64[::1],float64[::1],float64[::1],float64[::1],float64[::1],"
    "float64[:,::1],float64[:,::1],float64[:,::1],float64[:,::1])"
)
def substitute(table, ports, f_re, f_im, inv_re, inv_im, y_re, y_im, a_re, a_im):  # type: ignore[no-untyped-def]
    """Waves that enter every linked port, from the fronts of one wavelength.

    y [P, K]: at port p light that is added to what leaves by p; overwritten with sums on the way up, so that
    at external ports it ends as what leaves there. a [P, K]: on entry the light sent into external
    ports, else anything; filled at all linked ports. Of a pair of fronts the second runs transposed.
    """
    n_columns = y_re.shape[1]
    for b in range(len(table)):
        o, m, width, pivot = table[b, 0], table[b, 1], table[b, 1] + table[b, 3], table[b, 8]
        height, rows, columns = table[b, 1] + table[b, 2], table[b, 10], table[b, 11]
        for turned in range(1 + table[b, 9]):
            for k in range(m):
                source = ports[columns + k] if turned else ports[rows + k]
                for i in range(k + 1, width if turned else height):
                    t = o + k * width + i if turned else o + i * width + k
                    x_re = f_re[t] * inv_re[pivot + k] - f_im[t] * inv_im[pivot + k]
                    x_im = f_re[t] * inv_im[pivot + k] + f_im[t] * inv_re[pivot + k]
                    target = ports[columns + i] if turned else ports[rows + i]
                    for c in range(n_columns):
                        y_re[target, c] += x_re * y_re[source, c] - x_im * y_im[source, c]
                        y_im[target, c] += x_re * y_im[source, c] + x_im * y_re[source, c]
    for back in range(len(table)):
        b = len(table) - 1 - back
        o, m, width, pivot = table[b, 0], table[b, 1], table[b, 1] + table[b, 3], table[b, 8]
        height, rows, columns = table[b, 1] + table[b, 2], table[b, 10], table[b, 11]
        for turned in range(1 + table[b, 9]):
            for up in range(m):
                k = m - 1 - up
                target = ports[rows + k] if turned else ports[columns + k]
                mirror = ports[columns + k] if turned else ports[rows + k]
                for c in range(n_columns):
                    a_re[target, c] = y_re[mirror, c]
                    a_im[target, c] = y_im[mirror, c]
                for j in range(k + 1, height if turned else width):
                    t = o + j * width + k if turned else o + k * width + j
                    source = ports[rows + j] if turned else ports[columns + j]
                    for c in range(n_columns):
                        a_re[target, c] += f_re[t] * a_re[source, c] - f_im[t] * a_im[source, c]
                        a_im[target, c] += f_re[t] * a_im[source, c] + f_im[t] * a_re[source, c]
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                for c in range(n_columns):
                    x_re, x_im = a_re[target, c], a_im[target, c]
                    a_re[target, c] = v_re * x_re - v_im * x_im
                    a_im[target, c] = v_re * x_im + v_im * x_re


@kernel(
    "void(int64[:,::1],int64[:,::1],int64[::1],int64[:,::1],float64[::1],float64[::1],float64[::1],float64[::1],"
    "float64[::1],float64[::1],float64[::1],float64[::1],float64[::1],float64[::1])"
)
def pull_back(table, children, maps, entries, f_re, f_im, inv_re, inv_im, g_re, g_im, w_re, w_im, e_re, e_im):  # type: ignore[no-untyped-def]
    """The reverse of `join`: cotangents g of all fronts from that of the last, and e of the S entries.

    Bilinear, not conjugated: d objective = Re sum g dS. g is zero but in the last front; w [pivots] and e
    are zero on entry.
    """
    for back in range(len(table)):
        b = len(table) - 1 - back
        o, m, nr, nc = table[b, 0], table[b, 1], table[b, 2], table[b, 3]
        width, height, pivot = m + nc, m + nr, table[b, 8]
        for up in range(height):
            i = height - 1 - up
            start, last = o + i * width, min(i, m)
            if i < m:
                v_re, v_im = inv_re[pivot + i], inv_im[pivot + i]
                x_re, x_im = v_re * v_re - v_im * v_im, 2.0 * v_re * v_im
                g_re[start + i] += x_re * w_re[pivot + i] - x_im * w_im[pivot + i]
                g_im[start + i] += x_re * w_im[pivot + i] + x_im * w_re[pivot + i]
            for pair in range((last + 1) // 2):
                k = 2 * ((last + 1) // 2 - 1 - pair)
                here, above, rest = start + k, o + k * width + k, max(0, width - k - 2)
                below = above + width if k + 1 < last else above
                p_re, p_im = f_re[above + 2 : above + 2 + rest], f_im[above + 2 : above + 2 + rest]
                q_re, q_im = f_re[below + 2 : below + 2 + rest], f_im[below + 2 : below + 2 + rest]
                row_re, row_im = g_re[here + 2 : here + 2 + rest], g_im[here + 2 : here + 2 + rest]
                gp_re, gp_im = g_re[above + 2 : above + 2 + rest], g_im[above + 2 : above + 2 + rest]
                gq_re, gq_im = g_re[below + 2 : below + 2 + rest], g_im[below + 2 : below + 2 + rest]
                d_re, d_im, h_re, h_im = 0.0, 0.0, 0.0, 0.0
                for j in range(rest):
                    d_re += row_re[j] * p_re[j] - row_im[j] * p_im[j]
                    d_im += row_re[j] * p_im[j] + row_im[j] * p_re[j]
                    h_re += row_re[j] * q_re[j] - row_im[j] * q_im[j]
                    h_im += row_re[j] * q_im[j] + row_im[j] * q_re[j]
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                x_re = f_re[here] * v_re - f_im[here] * v_im
                x_im = f_re[here] * v_im + f_im[here] * v_re
                if k + 1 < last:
                    v_re, v_im = inv_re[pivot + k + 1], inv_im[pivot + k + 1]
                    y_re = f_re[here + 1] * v_re - f_im[here + 1] * v_im
                    y_im = f_re[here + 1] * v_im + f_im[here + 1] * v_re
                    g_re[here + 1] += h_re * v_re - h_im * v_im
                    g_im[here + 1] += h_re * v_im + h_im * v_re
                    w_re[pivot + k + 1] += h_re * f_re[here + 1] - h_im * f_im[here + 1]
                    w_im[pivot + k + 1] += h_re * f_im[here + 1] + h_im * f_re[here + 1]
                    for j in range(rest):
                        gp_re[j] += x_re * row_re[j] - x_im * row_im[j]
                        gq_re[j] += y_re * row_re[j] - y_im * row_im[j]
                    for j in range(rest):
                        gp_im[j] += x_re * row_im[j] + x_im * row_re[j]
                        gq_im[j] += y_re * row_im[j] + y_im * row_re[j]
                else:
                    for j in range(rest):
                        gp_re[j] += x_re * row_re[j] - x_im * row_im[j]
                    for j in range(rest):
                        gp_im[j] += x_re * row_im[j] + x_im * row_re[j]
                if k + 1 < width:
                    r_re, r_im = g_re[here + 1], g_im[here + 1]
                    d_re += r_re * f_re[above + 1] - r_im * f_im[above + 1]
                    d_im += r_re * f_im[above + 1] + r_im * f_re[above + 1]
                    g_re[above + 1] += x_re * r_re - x_im * r_im
                    g_im[above + 1] += x_re * r_im + x_im * r_re
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                g_re[here] += d_re * v_re - d_im * v_im
                g_im[here] += d_re * v_im + d_im * v_re
                w_re[pivot + k] += d_re * f_re[here] - d_im * f_im[here]
                w_im[pivot + k] += d_re * f_im[here] + d_im * f_re[here]
        for e in range(table[b, 4], table[b, 5]):
            e_re[entries[e, 1]] += g_re[entries[e, 0]]
            e_im[entries[e, 1]] += g_im[entries[e, 0]]
        for c in range(table[b, 6], table[b, 7]):
            child, turned, at_row, at_column = children[c, 0], children[c, 1], children[c, 2], children[c, 3]
            m_c, nr_c, nc_c = table[child, 1], table[child, 2], table[child, 3]
            for i in range(nr_c):
                target = table[child, 0] + (m_c + i) * (m_c + nc_c) + m_c
                for j in range(nc_c):
                    if turned:
                        t = o + maps[at_column + j] * width + maps[at_row + i]
                    else:
                        t = o + maps[at_row + i] * width + maps[at_column + j]
                    g_re[target + j] += g_re[t]
                    g_im[target + j] += g_im[t]
