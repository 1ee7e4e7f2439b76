"""Light through a loop-free net together with its change with wavelength, part by part.

Public: follow.
"""

from __future__ import annotations

import numpy as np

from meshctl.optics.feedforward import Circuit
from meshctl.optics.kernels import complex128, filled, given, int32, kernel, void


@kernel(
    void(
        given(int32),  # elements in light order
        given(int32),  # lanes by element
        given(int32),
        given(complex128, 2),  # through and cross amplitude by element
        given(complex128, 2),  # their change
        filled(complex128, 2),  # fields [lanes, columns]
        filled(complex128, 2),  # their change
    )
)
def _follow(element, lane_a, lane_b, parts, changes, field, slope):  # type: ignore[no-untyped-def]
    for i in range(len(element)):
        e = element[i]
        m, n = lane_a[e], lane_b[e]
        t, dt = parts[0, e], changes[0, e]
        if n < 0:
            for q in range(field.shape[1]):
                slope[m, q] = dt * field[m, q] + t * slope[m, q]
                field[m, q] *= t
        else:
            x, dx = parts[1, e], changes[1, e]
            for q in range(field.shape[1]):
                u, v, du, dv = field[m, q], field[n, q], slope[m, q], slope[n, q]
                slope[m, q] = dt * u + dx * v + t * du + x * dv
                slope[n, q] = dx * u + dt * v + x * du + t * dv
                field[m, q] = t * u + x * v
                field[n, q] = x * u + t * v


def follow(circuit: Circuit, table: np.ndarray, change: np.ndarray) -> np.ndarray:
    """The matrix and its change, complex [2, out, in].

    Parameters
    ----------
    table, change : float (4, E), real and imaginary part of the through and the cross amplitude of every part,
        and their derivative
    """
    fields = np.zeros((2, circuit.n_lanes, circuit.n_inputs), complex)
    fields[0, : circuit.n_inputs] = np.eye(circuit.n_inputs)
    _follow(
        circuit.element,
        circuit.element_lane_a,
        circuit.element_lane_b,
        table[::2] + 1j * table[1::2],
        change[::2] + 1j * change[1::2],
        fields[0],
        fields[1],
    )
    out: np.ndarray = fields[:, circuit.output_lane]
    return out
