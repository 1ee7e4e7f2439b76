"""The compiled joins: elimination in all fronts, waves back from them, and the reverse of the elimination.

One wavelength at a time, real and imaginary numbers in two arrays. Rows are taken as views and every inner
loop writes few arrays: only so does the compiler vectorise (three times faster).
Public: join, substitute, pull_back.
"""

from __future__ import annotations

import numpy as np

from meshctl.optics.kernels import filled, float64, given, int64, kernel, uint8, void

TINY = (8 * float(np.finfo(float).eps)) ** 2  # a pivot below this belongs to a loop that no light enters


@kernel(void(given(int64, 2), int64, given(int64, 2), given(int64), filled(float64), filled(float64)))
def _assemble(table, b, children, maps, f_re, f_im):  # type: ignore[no-untyped-def]
    """Add what is left of the children of front b into it."""
    o, width = table[b, 0], table[b, 1] + table[b, 3]
    for c in range(table[b, 6], table[b, 7]):
        child, turned, at_row, at_column = children[c, 0], children[c, 1], children[c, 2], children[c, 3]
        m, nr, nc = table[child, 1], table[child, 2], table[child, 3]
        for i in range(nr):
            source = table[child, 0] + (m + i) * (m + nc) + m
            for j in range(nc):
                if turned:
                    t = o + maps[at_column + j] * width + maps[at_row + i]
                else:
                    t = o + maps[at_row + i] * width + maps[at_column + j]
                f_re[t] += f_re[source + j]
                f_im[t] += f_im[source + j]


@kernel(void(given(int64, 2), int64, given(int64, 2), given(int64), filled(float64), filled(float64)))
def _hand_down(table, b, children, maps, g_re, g_im):  # type: ignore[no-untyped-def]
    """The reverse of `_assemble`."""
    o, width = table[b, 0], table[b, 1] + table[b, 3]
    for c in range(table[b, 6], table[b, 7]):
        child, turned, at_row, at_column = children[c, 0], children[c, 1], children[c, 2], children[c, 3]
        m, nr, nc = table[child, 1], table[child, 2], table[child, 3]
        for i in range(nr):
            target = table[child, 0] + (m + i) * (m + nc) + m
            for j in range(nc):
                if turned:
                    t = o + maps[at_column + j] * width + maps[at_row + i]
                else:
                    t = o + maps[at_row + i] * width + maps[at_column + j]
                g_re[target + j] += g_re[t]
                g_im[target + j] += g_im[t]


@kernel(
    int64(
        given(int64, 2),
        given(int64, 2),
        given(int64),
        given(int64, 2),
        given(float64),
        given(float64),
        *[filled(float64)] * 4,
    )
)
def join(table, children, maps, entries, s_re, s_im, f_re, f_im, inv_re, inv_im):  # type: ignore[no-untyped-def]
    """Fill all fronts at one wavelength, innermost first; returns how many loops are dark, each direction for itself.

    f_re, f_im are all fronts; left of and on the diagonal of the link waves stay the columns as they were
    eliminated, right of it the rows. inv is 1 / (1 - s_kk) of every pivot, 0 for a dark loop.
    """
    dark = 0
    for b in range(len(table)):
        o, m, width, pivot = table[b, 0], table[b, 1], table[b, 1] + table[b, 3], table[b, 8]
        height, paired = m + table[b, 2], table[b, 9]
        for t in range(o, o + height * width):
            f_re[t] = 0.0
            f_im[t] = 0.0
        for e in range(table[b, 4], table[b, 5]):
            f_re[entries[e, 0]] += s_re[entries[e, 1]]
            f_im[entries[e, 0]] += s_im[entries[e, 1]]
        _assemble(table, b, children, maps, f_re, f_im)
        for i in range(height):
            start, last = o + i * width, min(i, m)
            stop = width if paired or i < m else i + 1  # of a symmetric rest the lower half
            for k in range(0, last, 2):  # two pivots at a time
                here, above, rest = start + k, o + k * width + k, stop - k - 2
                if rest < 0:
                    break
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                x_re = f_re[here] * v_re - f_im[here] * v_im
                x_im = f_re[here] * v_im + f_im[here] * v_re
                f_re[here + 1] += x_re * f_re[above + 1] - x_im * f_im[above + 1]
                f_im[here + 1] += x_re * f_im[above + 1] + x_im * f_re[above + 1]
                y_re, y_im, below = 0.0, 0.0, above
                if k + 1 < last:
                    v_re, v_im, below = inv_re[pivot + k + 1], inv_im[pivot + k + 1], above + width
                    y_re = f_re[here + 1] * v_re - f_im[here + 1] * v_im
                    y_im = f_re[here + 1] * v_im + f_im[here + 1] * v_re
                if x_re == 0.0 and x_im == 0.0 and y_re == 0.0 and y_im == 0.0:
                    continue
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
                    dark += 1 + paired
        if not paired:
            for i in range(m, height):
                for j in range(m, i):
                    f_re[o + j * width + i] = f_re[o + i * width + j]
                    f_im[o + j * width + i] = f_im[o + i * width + j]
    return dark


@kernel(void(given(int64, 2), given(int64), *[given(float64)] * 4, *[filled(float64, 2)] * 4, int64))
def substitute(table, ports, f_re, f_im, inv_re, inv_im, y_re, y_im, a_re, a_im, sources):  # type: ignore[no-untyped-def]
    """Waves that enter every linked port, from the fronts of one wavelength.

    y [P, K]: at port p light that is added to what leaves by p; overwritten with sums on the way up, so that
    at external ports it ends as what leaves there; sources = 0: all zero. a [P, K]: on entry the light sent
    into external ports, filled at all linked ports. Of a pair of fronts the second runs transposed.
    """
    n_columns = y_re.shape[1]
    for b in range(len(table) if sources else 0):
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
                v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
                for c in range(n_columns):
                    a_re[target, c] = v_re * y_re[mirror, c] - v_im * y_im[mirror, c]
                    a_im[target, c] = v_re * y_im[mirror, c] + v_im * y_re[mirror, c]
                for j in range(k + 1, height if turned else width):
                    t = o + j * width + k if turned else o + k * width + j
                    source = ports[rows + j] if turned else ports[columns + j]
                    x_re, x_im = f_re[t] * v_re - f_im[t] * v_im, f_re[t] * v_im + f_im[t] * v_re
                    for c in range(n_columns):
                        a_re[target, c] += x_re * a_re[source, c] - x_im * a_im[source, c]
                        a_im[target, c] += x_re * a_im[source, c] + x_im * a_re[source, c]


_FRONT = (*[int64] * 5, *[given(float64)] * 4)  # o, m, height, width, pivot; f and inv


@kernel(void(*_FRONT, *[filled(float64)] * 4, given(uint8)))
def _pull_paired(o, m, height, width, pivot, f_re, f_im, inv_re, inv_im, g_re, g_im, w_re, w_im, live):  # type: ignore[no-untyped-def]
    """Reverse of one elimination: g from that of the rest to that of what was assembled."""
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
            if not (live[here] or (k + 1 < last and live[here + 1])):
                continue
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
                u_re, u_im = inv_re[pivot + k + 1], inv_im[pivot + k + 1]
                y_re = f_re[here + 1] * u_re - f_im[here + 1] * u_im
                y_im = f_re[here + 1] * u_im + f_im[here + 1] * u_re
                g_re[here + 1] += h_re * u_re - h_im * u_im
                g_im[here + 1] += h_re * u_im + h_im * u_re
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
            g_re[here] += d_re * v_re - d_im * v_im
            g_im[here] += d_re * v_im + d_im * v_re
            w_re[pivot + k] += d_re * f_re[here] - d_im * f_im[here]
            w_im[pivot + k] += d_re * f_im[here] + d_im * f_re[here]


@kernel(void(*_FRONT, *[filled(float64)] * 2))
def _pull_symmetric(o, m, height, width, pivot, f_re, f_im, inv_re, inv_im, g_re, g_im):  # type: ignore[no-untyped-def]
    """`_pull_paired` where front and cotangent are symmetric over the ports: half the work.

    With A = 1 - S_links,links and T = S_open,links / A: g_open,links = g_open T^t, g_links,links =
    T^t g_open,links, and g_links,open mirrors g_open,links. m is even: two directions of each link.
    """
    for i in range(m, height):
        for pair in range(m // 2):
            k = m - 2 - 2 * pair
            here, above, rest = o + i * width + k, o + k * width + k, width - k - 2
            below = above + width
            p_re, p_im = f_re[above + 2 : above + 2 + rest], f_im[above + 2 : above + 2 + rest]
            q_re, q_im = f_re[below + 2 : below + 2 + rest], f_im[below + 2 : below + 2 + rest]
            row_re, row_im = g_re[here + 2 : here + 2 + rest], g_im[here + 2 : here + 2 + rest]
            d_re, d_im, h_re, h_im = 0.0, 0.0, 0.0, 0.0
            for j in range(rest):
                d_re += row_re[j] * p_re[j] - row_im[j] * p_im[j]
                d_im += row_re[j] * p_im[j] + row_im[j] * p_re[j]
                h_re += row_re[j] * q_re[j] - row_im[j] * q_im[j]
                h_im += row_re[j] * q_im[j] + row_im[j] * q_re[j]
            v_re, v_im = inv_re[pivot + k + 1], inv_im[pivot + k + 1]
            r_re, r_im = h_re * v_re - h_im * v_im, h_re * v_im + h_im * v_re
            g_re[here + 1], g_im[here + 1] = r_re, r_im
            d_re += r_re * f_re[above + 1] - r_im * f_im[above + 1]
            d_im += r_re * f_im[above + 1] + r_im * f_re[above + 1]
            v_re, v_im = inv_re[pivot + k], inv_im[pivot + k]
            g_re[here], g_im[here] = d_re * v_re - d_im * v_im, d_re * v_im + d_im * v_re
    for back in range(m):  # g_links,links: add what every later row took from row k
        k = m - 1 - back
        v_re, v_im, above = inv_re[pivot + k], inv_im[pivot + k], o + k * width
        gp_re, gp_im = g_re[above : above + m], g_im[above : above + m]
        for down in range(height - 1 - k):
            here = o + (k + 1 + down) * width
            x_re = f_re[here + k] * v_re - f_im[here + k] * v_im
            x_im = f_re[here + k] * v_im + f_im[here + k] * v_re
            row_re, row_im = g_re[here : here + m], g_im[here : here + m]
            for c in range(m):
                gp_re[c] += x_re * row_re[c] - x_im * row_im[c]
            for c in range(m):
                gp_im[c] += x_re * row_im[c] + x_im * row_re[c]
    for k in range(m):
        for j in range(m, width):
            g_re[o + k * width + j] = g_re[o + j * width + (k ^ 1)]
            g_im[o + k * width + j] = g_im[o + j * width + (k ^ 1)]


@kernel(
    void(
        given(int64, 2),
        given(int64, 2),
        given(int64),
        given(int64, 2),
        *[given(float64)] * 4,
        *[filled(float64)] * 6,
        given(uint8),
    )
)
def pull_back(table, children, maps, entries, f_re, f_im, inv_re, inv_im, g_re, g_im, w_re, w_im, e_re, e_im, live):  # type: ignore[no-untyped-def]
    """The reverse of `join`: cotangents g of all fronts from that of the last, and e of the S entries.

    Bilinear, not conjugated: d objective = Re sum g dS. g is zero but in the last front, where it must be
    symmetric; w (of the pivots) and e are zero on entry.
    """
    for back in range(len(table)):
        b = len(table) - 1 - back
        o, m, pivot = table[b, 0], table[b, 1], table[b, 8]
        height, width = m + table[b, 2], m + table[b, 3]
        if table[b, 9]:
            _pull_paired(o, m, height, width, pivot, f_re, f_im, inv_re, inv_im, g_re, g_im, w_re, w_im, live)
        elif m:
            _pull_symmetric(o, m, height, width, pivot, f_re, f_im, inv_re, inv_im, g_re, g_im)
        for e in range(table[b, 4], table[b, 5]):
            e_re[entries[e, 1]] += g_re[entries[e, 0]]
            e_im[entries[e, 1]] += g_im[entries[e, 0]]
        _hand_down(table, b, children, maps, g_re, g_im)
