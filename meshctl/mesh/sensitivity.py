"""How the matrix answers to small errors of the settings: Jacobian and Gram matrix.

Public: jacobian, gram.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.response import Response
from meshctl.optics.jacobian import jacobian_kernel


def jacobian(response: Response, settings: np.ndarray) -> np.ndarray:
    """d matrix / d setting at the centre wavelength.

    Parameters
    ----------
    settings : float (S,), rad

    Returns
    -------
    complex (S, out, in); zero rows for stuck settings

    Cost: S out in numbers of 16 bytes: 16 MB for a full mesh of 32 modes, 270 MB for 64.
    """
    circuit, net = response.circuit, response.net
    out = np.zeros((net.n_settings, len(circuit.output_lane), circuit.n_inputs), complex)
    jacobian_kernel(
        circuit.lane_a,
        circuit.lane_b,
        circuit.first,
        circuit.element,
        circuit.side,
        response.parts(settings),
        net.setting_of,
        circuit.output_lane,
        circuit.n_inputs,
        circuit.n_lanes,
        out,
    )
    out[~np.isnan(response.as_built.stuck_rad)] = 0.0
    return out


def gram(rows: np.ndarray, matrix: np.ndarray, free: str = "nothing") -> np.ndarray:
    """G of E^2 = e^T G e for small errors e of the settings, [S, S].

    Parameters
    ----------
    rows : complex (S, out, in), the Jacobian
    matrix : complex (out, in), the matrix without errors
    free : port phases that do not count; what only they or the scale of the whole would change is taken out

    Cost: S^2 out in for the products.
    """
    s = len(rows)
    flat = rows.reshape(s, -1)
    light = float(np.vdot(matrix, matrix).real)
    parts = np.concatenate([flat.real, flat.imag], axis=1)
    along = np.conj(matrix).ravel()
    scale = flat @ along / np.sqrt(light)
    seen = parts @ parts.T - np.outer(scale.real, scale.real)
    turned = np.einsum("sij,ij->sij", rows, np.conj(matrix)).imag
    if free == "nothing":
        seen -= np.outer(scale.imag, scale.imag)
    else:
        sides = []
        if free in ("outputs", "both"):
            sides.append(turned.sum(2) / np.sqrt(np.maximum((np.abs(matrix) ** 2).sum(1), 1e-300)))
        if free in ("inputs", "both"):
            sides.append(turned.sum(1) / np.sqrt(np.maximum((np.abs(matrix) ** 2).sum(0), 1e-300)))
        if len(sides) == 1:
            seen -= sides[0] @ sides[0].T
        else:
            # rows and columns overlap in the phase of the whole: project on their common span
            basis = _phase_basis(matrix)
            seen -= (parts @ basis) @ (parts @ basis).T
    return np.asarray(seen / light)


def _phase_basis(matrix: np.ndarray) -> np.ndarray:
    """Orthonormal directions, as real numbers, in which only port phases change."""
    directions = []
    for o in range(matrix.shape[0]):
        d = np.zeros_like(matrix)
        d[o] = 1j * matrix[o]
        directions.append(d.ravel())
    for i in range(matrix.shape[1]):
        d = np.zeros_like(matrix)
        d[:, i] = 1j * matrix[:, i]
        directions.append(d.ravel())
    stacked = np.array(directions)
    u, sizes, _ = np.linalg.svd(np.concatenate([stacked.real, stacked.imag], axis=1).T, full_matrices=False)
    return np.asarray(u[:, sizes > 1e-12 * sizes[0]])
