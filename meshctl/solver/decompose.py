"""A unitary matrix as a sequence of 2x2 steps: the rectangular and the triangular decomposition.

Each step is an ideal Mach-Zehnder cell on lanes m, m + 1 with half angle h = inner / 2 and outer phase p:
T = i exp(ih) [[exp(ip) sin h, cos h], [exp(ip) cos h, -sin h]]; the matrix is the product of the steps in
light order (first step first met) times a diagonal of output phases.
Public: Steps, rectangular, triangular, DECOMPOSITIONS.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meshctl.optics.kernels import complex128, filled, float64, inner, int64, kernel, void

PAD = 8  # extra columns of the working copy: a row stride of 2^k would map all rows to one cache set


@dataclass(frozen=True, eq=False)
class Steps:
    """A decomposed matrix: K steps in light order, and the output diagonal."""

    lane: np.ndarray  # i64[K], upper lane of each step
    half_angle_rad: np.ndarray  # f64[K], 0 is cross, pi/2 is bar
    outer_rad: np.ndarray  # f64[K]
    output: np.ndarray  # c128[N], unit numbers

    def __len__(self) -> int:
        return len(self.lane)


# a step while it is worked on: sin h, cos h and exp(ip); angles are taken at the end, all at once
_WORK_AND_STEPS = (
    filled(float64, 2),
    filled(float64, 2),
    filled(int64),
    filled(float64),
    filled(float64),
    filled(complex128),
    filled(complex128),
)


@inner
def _nulling(ur, ui, vr, vi):  # type: ignore[no-untyped-def]
    """(|u|, |v|) / length, 0 and 0 where both are nothing, and exp(i (arg u - arg v)), 1 without arguments."""
    u, v = math.sqrt(ur * ur + ui * ui), math.sqrt(vr * vr + vi * vi)
    both = math.sqrt(u * u + v * v)
    er, ei = 1.0, 0.0
    if u > 0.0 and v > 0.0:
        er, ei = (ur * vr + ui * vi) / (u * v), (ui * vr - ur * vi) / (u * v)
        size = math.sqrt(er * er + ei * ei)
        er, ei = er / size, ei / size
    if both > 0.0:
        return u / both, v / both, er, ei
    return 0.0, 0.0, er, ei


@inner
def _mix_columns(real, imag, r, m, s, c, e):  # type: ignore[no-untyped-def]
    """Columns m, m + 1 of rows 0..r times T^H, e = exp(-ip)."""
    g = -1j * complex(c, -s)
    a, b, d, f = g * e * s, g * c, g * e * c, -g * s
    ar, ai, br, bi, dr, di, fr, fi = a.real, a.imag, b.real, b.imag, d.real, d.imag, f.real, f.imag
    for q in range(r + 1):
        u, v = real[q], imag[q]
        xr, xi, yr, yi = u[m], v[m], u[m + 1], v[m + 1]
        u[m], v[m] = ar * xr - ai * xi + br * yr - bi * yi, ar * xi + ai * xr + br * yi + bi * yr
        u[m + 1], v[m + 1] = dr * xr - di * xi + fr * yr - fi * yi, dr * xi + di * xr + fr * yi + fi * yr


@inner
def _mix_rows(real, imag, first, m, s, c, e):  # type: ignore[no-untyped-def]
    """T times rows m, m + 1, columns first.. of a square matrix, e = exp(ip)."""
    g = 1j * complex(c, s)
    a, b, d, f = g * e * s, g * c, g * e * c, -g * s
    ar, ai, br, bi, dr, di, fr, fi = a.real, a.imag, b.real, b.imag, d.real, d.imag, f.real, f.imag
    x_real, x_imag, y_real, y_imag = real[m], imag[m], real[m + 1], imag[m + 1]
    for q in range(first, real.shape[0]):
        xr, xi, yr, yi = x_real[q], x_imag[q], y_real[q], y_imag[q]
        x_real[q] = ar * xr - ai * xi + br * yr - bi * yi
        x_imag[q] = ar * xi + ai * xr + br * yi + bi * yr
        y_real[q] = dr * xr - di * xi + fr * yr - fi * yi
        y_imag[q] = dr * xi + di * xr + fr * yi + fi * yr


@kernel(void(*_WORK_AND_STEPS))
def _rectangular(real, imag, lane, sine, cosine, turn, output):  # type: ignore[no-untyped-def]
    """Null antidiagonal by antidiagonal, from the right and from the left in turn; overwrites real, imag."""
    n = real.shape[0]
    count = n * (n - 1) // 2
    right_count, left_count = 0, 0  # left steps are kept from the end of the arrays backwards
    for i in range(n - 1):
        for j in range(i + 1):
            if i % 2 == 0:
                r, m = n - 1 - j, i - j
                c, s, er, ei = _nulling(real[r, m], imag[r, m], real[r, m + 1], imag[r, m + 1])
                if c == 0.0:
                    s = 1.0  # nothing to null: bar
                _mix_columns(real, imag, r, m, s, c, complex(-er, ei))
                k = right_count
                right_count += 1
                turn[k] = complex(-er, -ei)
            else:
                r = n - 1 - i + j
                m = r - 1
                s, c, er, ei = _nulling(real[m, j], imag[m, j], real[r, j], imag[r, j])
                if c == 0.0:
                    s = 1.0
                _mix_rows(real, imag, j, m, s, c, complex(er, -ei))
                k = count - 1 - left_count
                left_count += 1
                turn[k] = complex(er, -ei)
            lane[k], sine[k], cosine[k] = m, s, c
    for q in range(n):
        output[q] = complex(real[q, q], imag[q, q]) / math.hypot(real[q, q], imag[q, q])
    # the last left step is met first by the light: move the diagonal through, T^H D = D' T'
    for k in range(right_count, count):
        m = lane[k]
        d1, d2 = output[m], output[m + 1]
        back = complex(cosine[k], -sine[k])
        output[m] = -back * back * turn[k].conjugate() * d2
        output[m + 1] = -back * back * d2
        turn[k] = d1 / d2


@kernel(void(*_WORK_AND_STEPS))
def _triangular(real, imag, lane, sine, cosine, turn, output):  # type: ignore[no-untyped-def]
    """Null row by row from the bottom, from the right alone; overwrites real, imag."""
    n = real.shape[0]
    k = 0
    for r in range(n - 1, 0, -1):
        for m in range(r):
            c, s, er, ei = _nulling(real[r, m], imag[r, m], real[r, m + 1], imag[r, m + 1])
            if c == 0.0:
                s = 1.0
            _mix_columns(real, imag, r, m, s, c, complex(-er, ei))
            lane[k], sine[k], cosine[k], turn[k] = m, s, c, complex(-er, -ei)
            k += 1
    for q in range(n):
        output[q] = complex(real[q, q], imag[q, q]) / math.hypot(real[q, q], imag[q, q])


def _decomposed(matrix: np.ndarray, method: Callable[..., None]) -> Steps:
    n = len(matrix)
    count = n * (n - 1) // 2
    real, imag = np.zeros((2, n, n + PAD))
    real[:, :n], imag[:, :n] = matrix.real, matrix.imag
    lane, sine, cosine = np.empty(count, np.int64), np.empty(count), np.empty(count)
    turn, output = np.empty(count, complex), np.empty(n, complex)
    method(real, imag, lane, sine, cosine, turn, output)
    return Steps(lane, np.arctan2(sine, cosine), np.angle(turn), output)


def rectangular(matrix: np.ndarray) -> Steps:
    """N(N-1)/2 steps of depth N.

    Parameters
    ----------
    matrix : complex (N, N), unitary

    Cost: O(N^3), a small multiple of one QR factorisation.
    Source: Clements et al., Optica 2016.
    """
    return _decomposed(matrix, _rectangular)


def triangular(matrix: np.ndarray) -> Steps:
    """N(N-1)/2 steps of depth 2N - 3.

    Source: Reck et al., Phys. Rev. Lett. 1994.
    """
    return _decomposed(matrix, _triangular)


DECOMPOSITIONS: dict[str, Callable[[np.ndarray], Steps]] = {
    "rectangular": rectangular,
    "triangular": triangular,
}
