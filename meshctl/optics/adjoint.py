"""Derivatives of light through a loop-free net: the propagation and the fusing of parts, walked backward.

Convention: a real objective changes by Re sum conj(G) dM when the matrix changes by dM; G is the cotangent of
M, and every gradient by a complex amplitude below is meant in the same way. For objective = sum |M - T|^2
it is G = 2 (M - T).

Fields are recomputed going back, each block undone by its inverse, which is faster than reading them from
memory from 16 modes upward. Where light is lost an inverse makes rounding grow; the few blocks at which
it would grow beyond GROWTH have the fields that enter them kept instead.
Public: Keeping, keeping, run_keeping, propagate_back, fuse_back, GROWTH.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.optics.feedforward import Circuit, propagate
from meshctl.optics.kernels import filled, float64, given, int32, kernel, uint8, void

GROWTH = 1e3  # of rounding, before fields are kept: leaves 12 digits of fields that entered as 1


@dataclass(frozen=True, eq=False)
class Keeping:
    """Which blocks have the fields that enter them kept, K of B."""

    blocks: np.ndarray  # i64[K], ascending
    at: np.ndarray  # i32[B], row among the kept, -1: recomputed


def keeping(circuit: Circuit, amplitude: np.ndarray) -> Keeping:
    """Choose the blocks whose entering fields are kept.

    Parameters
    ----------
    circuit : Circuit
    amplitude : float (E,), field amplitude that each part leaves of its light, 1: no loss

    Cost: linear in the blocks; once per net.
    """
    at = np.full(circuit.n_blocks, -1, np.int32)
    # no field shrinks by more than its parts' amplitudes multiplied, whatever the settings
    shrink = np.multiply.reduceat(amplitude[circuit.element], circuit.first[:-1]) if circuit.n_blocks else at
    if np.all(shrink == 1.0):
        return Keeping(np.empty(0, np.int64), at)
    left = np.ones(circuit.n_lanes)
    kept: list[int] = []
    lane_b = np.where(circuit.lane_b >= 0, circuit.lane_b, circuit.lane_a)
    for b, (m, n, s) in enumerate(zip(circuit.lane_a.tolist(), lane_b.tolist(), shrink.tolist(), strict=True)):
        now = min(left[m], left[n]) * s
        if now < 1.0 / GROWTH:
            at[b] = len(kept)
            kept.append(b)
            now = 1.0
        left[m] = left[n] = now
    return Keeping(np.array(kept, np.int64), at)


def run_keeping(
    circuit: Circuit, blocks: np.ndarray, real: np.ndarray, imag: np.ndarray, keep: Keeping
) -> tuple[np.ndarray, np.ndarray]:
    """Propagate fields [L, columns] in place as `propagate` does, and return those kept, [K, 2, columns] twice."""
    kept_real = np.zeros((len(keep.blocks), 2, real.shape[1]))
    kept_imag = np.zeros_like(kept_real)
    start = 0
    for k, b in enumerate(keep.blocks.tolist()):
        propagate(circuit.lane_a[start:b], circuit.lane_b[start:b], blocks[start:b], real, imag)
        for side, lane in enumerate((circuit.lane_a[b], circuit.lane_b[b])):
            if lane >= 0:
                kept_real[k, side], kept_imag[k, side] = real[lane], imag[lane]
        start = b
    propagate(circuit.lane_a[start:], circuit.lane_b[start:], blocks[start:], real, imag)
    return kept_real, kept_imag


@kernel(
    void(
        given(int32),  # lane_a
        given(int32),  # lane_b
        given(float64, 2),  # blocks
        given(int32),  # row among the kept, -1: recomputed
        given(float64, 3),  # kept, real
        given(float64, 3),  # and imaginary
        filled(float64, 2),  # fields behind the last block; overwritten by those before the first
        filled(float64, 2),
        filled(float64, 2),  # cotangent of the fields behind the last block; overwritten likewise
        filled(float64, 2),
        filled(float64, 2),  # gradient by the blocks' entries, laid out as the blocks
    )
)
def propagate_back(  # type: ignore[no-untyped-def]
    lane_a, lane_b, blocks, kept_at, kept_real, kept_imag, real, imag, g_real, g_imag, gradient
):
    """Walk the blocks backward: fields by inverses, cotangents by adjoints, gradient by every block entry.

    Source: reverse accumulation with an invertible step (Griewank and Walther 2008, ch. 3).
    """
    columns = real.shape[1]
    for b in range(len(lane_a) - 1, -1, -1):
        ar, ai, br, bi = blocks[b, 0], blocks[b, 1], blocks[b, 2], blocks[b, 3]
        cr, ci, dr, di = blocks[b, 4], blocks[b, 5], blocks[b, 6], blocks[b, 7]
        m, n, k = lane_a[b], lane_b[b], kept_at[b]
        er, ei, fr, fi, hr, hi, jr, ji = 1.0, 0.0, 0.0, 0.0, 0.0, 0.0, 1.0, 0.0
        if k >= 0:
            for q in range(columns):
                real[m, q], imag[m, q] = kept_real[k, 0, q], kept_imag[k, 0, q]
            if n >= 0:
                for q in range(columns):
                    real[n, q], imag[n, q] = kept_real[k, 1, q], kept_imag[k, 1, q]
        elif n >= 0:
            det_r, det_i = ar * dr - ai * di - br * cr + bi * ci, ar * di + ai * dr - br * ci - bi * cr
            size = 1.0 / (det_r * det_r + det_i * det_i)
            det_r, det_i = det_r * size, -det_i * size
            er, ei = dr * det_r - di * det_i, dr * det_i + di * det_r
            fr, fi = bi * det_i - br * det_r, -br * det_i - bi * det_r
            hr, hi = ci * det_i - cr * det_r, -cr * det_i - ci * det_r
            jr, ji = ar * det_r - ai * det_i, ar * det_i + ai * det_r
        else:
            size = 1.0 / (ar * ar + ai * ai)
            er, ei = ar * size, -ai * size
        pr, pi, qr, qi, rr, ri, sr, si = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
        # three short loops without views: one long one runs out of registers, views have their references counted
        if n >= 0:
            for q in range(columns):
                ur, ui, vr, vi = real[m, q], imag[m, q], real[n, q], imag[n, q]
                real[m, q] = er * ur - ei * ui + fr * vr - fi * vi
                imag[m, q] = er * ui + ei * ur + fr * vi + fi * vr
                real[n, q] = hr * ur - hi * ui + jr * vr - ji * vi
                imag[n, q] = hr * ui + hi * ur + jr * vi + ji * vr
            for q in range(columns):
                xr, xi, yr, yi = real[m, q], imag[m, q], real[n, q], imag[n, q]
                ur, ui, vr, vi = g_real[m, q], g_imag[m, q], g_real[n, q], g_imag[n, q]
                pr += ur * xr + ui * xi
                pi += ui * xr - ur * xi
                qr += ur * yr + ui * yi
                qi += ui * yr - ur * yi
                rr += vr * xr + vi * xi
                ri += vi * xr - vr * xi
                sr += vr * yr + vi * yi
                si += vi * yr - vr * yi
            for q in range(columns):
                ur, ui, vr, vi = g_real[m, q], g_imag[m, q], g_real[n, q], g_imag[n, q]
                g_real[m, q] = ar * ur + ai * ui + cr * vr + ci * vi
                g_imag[m, q] = ar * ui - ai * ur + cr * vi - ci * vr
                g_real[n, q] = br * ur + bi * ui + dr * vr + di * vi
                g_imag[n, q] = br * ui - bi * ur + dr * vi - di * vr
        else:
            for q in range(columns):
                ur, ui = real[m, q], imag[m, q]
                xr, xi = er * ur - ei * ui, er * ui + ei * ur
                real[m, q], imag[m, q] = xr, xi
                ur, ui = g_real[m, q], g_imag[m, q]
                pr += ur * xr + ui * xi
                pi += ui * xr - ur * xi
                g_real[m, q] = ar * ur + ai * ui
                g_imag[m, q] = ar * ui - ai * ur
        gradient[b, 0], gradient[b, 1], gradient[b, 2], gradient[b, 3] = pr, pi, qr, qi
        gradient[b, 4], gradient[b, 5], gradient[b, 6], gradient[b, 7] = rr, ri, sr, si


@kernel(
    void(
        given(int32),  # first
        given(int32),  # element
        given(uint8),  # side
        given(float64, 2),  # parts
        given(float64, 2),  # gradient by the blocks' entries
        filled(float64, 2),  # room: most parts of a block x 8
        filled(float64),  # gradient by every element's value
    )
)
def fuse_back(first, element, side, parts, by_block, room, by_value):  # type: ignore[no-untyped-def]
    """From the gradient by blocks to that by the value of every part, each block's parts walked backward.

    The value of a part on two lanes is a coupler's angle, that of a part on one lane a phase, both in rad:
    turning either by dv multiplies the part by 1 + i X dv with X = [[0, 1], [1, 0]], or 1 + i dv.
    """
    for b in range(len(first) - 1):
        m00, m01, m10, m11 = 1.0 + 0j, 0j, 0j, 1.0 + 0j
        start, stop = first[b], first[b + 1]
        for i in range(start, stop):
            e = element[i]
            t = complex(parts[0, e], parts[1, e])
            if side[i] == 0:
                x = complex(parts[2, e], parts[3, e])
                m00, m10 = t * m00 + x * m10, x * m00 + t * m10
                m01, m11 = t * m01 + x * m11, x * m01 + t * m11
            elif side[i] == 1:
                m00 *= t
                m01 *= t
            else:
                m10 *= t
                m11 *= t
            row = room[i - start]
            row[0], row[1], row[2], row[3] = m00.real, m00.imag, m01.real, m01.imag
            row[4], row[5], row[6], row[7] = m10.real, m10.imag, m11.real, m11.imag
        g = by_block[b]
        g00, g01, g10, g11 = complex(g[0], g[1]), complex(g[2], g[3]), complex(g[4], g[5]), complex(g[6], g[7])
        for i in range(stop - 1, start - 1, -1):
            e, row = element[i], room[i - start]
            # g is the gradient by the product up to this part, row that product: Re tr(g^H i X row)
            if side[i] == 0:
                by_value[e] = (
                    g00.imag * row[4] - g00.real * row[5] + g01.imag * row[6] - g01.real * row[7]
                    + g10.imag * row[0] - g10.real * row[1] + g11.imag * row[2] - g11.real * row[3]
                )  # fmt: skip
                t = complex(parts[0, e], -parts[1, e])
                x = complex(parts[2, e], -parts[3, e])
                g00, g10 = t * g00 + x * g10, x * g00 + t * g10
                g01, g11 = t * g01 + x * g11, x * g01 + t * g11
            elif side[i] == 1:
                by_value[e] = g00.imag * row[0] - g00.real * row[1] + g01.imag * row[2] - g01.real * row[3]
                t = complex(parts[0, e], -parts[1, e])
                g00 *= t
                g01 *= t
            else:
                by_value[e] = g10.imag * row[4] - g10.real * row[5] + g11.imag * row[6] - g11.real * row[7]
                t = complex(parts[0, e], -parts[1, e])
                g10 *= t
                g11 *= t
