"""How the matrix answers to small errors of the settings: Jacobian and Gram matrix.

Public: jacobian, part_jacobian, gram, unseen, NEPER_PER_DB.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.response import Response
from meshctl.optics.jacobian import jacobian_kernel

NEPER_PER_DB = float(np.log(10.0)) / 20.0


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
    net = response.net
    out = _rows(response, settings, net.setting_of, np.zeros(net.n_elements, np.uint8), net.n_settings)
    out[~np.isnan(response.as_built.stuck_rad)] = 0.0
    return out


def part_jacobian(response: Response, settings: np.ndarray, elements: np.ndarray, *, by_loss: bool) -> np.ndarray:
    """d matrix / d error of single parts at the centre wavelength.

    Parameters
    ----------
    settings : float (S,), rad
    elements : int (n,), rows of the parts, each once
    by_loss : by the loss in dB in place of the angle or phase in rad

    Returns
    -------
    complex (n, out, in)

    Cost: n out in numbers of 16 bytes; call it for some hundred parts at a time.
    """
    n = response.net.n_elements
    row_of = np.full(n, -1, np.int32)
    row_of[elements] = np.arange(len(elements))
    out = _rows(response, settings, row_of, np.full(n, by_loss, np.uint8), len(elements))
    return out * NEPER_PER_DB if by_loss else out


def _rows(response: Response, settings: np.ndarray, row_of: np.ndarray, fades: np.ndarray, count: int) -> np.ndarray:
    circuit = response.circuit
    out = np.zeros((count, len(circuit.output_lane), circuit.n_inputs), complex)
    jacobian_kernel(
        circuit.lane_a,
        circuit.lane_b,
        circuit.first,
        circuit.element,
        circuit.side,
        response.parts(settings),
        row_of,
        fades,
        circuit.output_lane,
        circuit.n_inputs,
        circuit.n_lanes,
        out,
    )
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


def unseen(matrix: np.ndarray, free: str = "nothing") -> np.ndarray:
    """Orthonormal directions, as real numbers (2 out in, k), in which a matrix changes by nothing that counts.

    The scale of the whole and its phase, and the port phases that are free.
    """
    along = matrix / np.linalg.norm(matrix)
    directions = [along]
    if free == "nothing":
        directions.append(1j * along)
    if free in ("outputs", "both"):
        directions += [np.where(np.arange(len(matrix))[:, None] == o, 1j * matrix, 0.0) for o in range(len(matrix))]
    if free in ("inputs", "both"):
        directions += [np.where(np.arange(matrix.shape[1]) == i, 1j * matrix, 0.0) for i in range(matrix.shape[1])]
    flat = np.array([d.ravel() for d in directions])
    u, sizes, _ = np.linalg.svd(np.concatenate([flat.real, flat.imag], axis=1).T, full_matrices=False)
    return np.asarray(u[:, sizes > 1e-12 * sizes[0]])


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
