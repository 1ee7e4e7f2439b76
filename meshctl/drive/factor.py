"""Sparse matrices I + K with a small K: factored, checked, and inverted as far as it matters.

Public: factor, positive_definite, norm_of_inverse, sparse_inverse, NEGLIGIBLE.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from meshctl.errors import CrosstalkUnsound

NEGLIGIBLE = 1e-4  # turns per turn; searches re-solve exactly what they found with the rest


def factor(matrix: Any) -> Any:
    """LU of I + K: that keeps to the diagonal, which is fast, or one that pivots where that goes wrong."""
    from scipy.sparse.linalg import splu

    trial = np.where(np.arange(matrix.shape[0]) % 2, -1.0, 1.0)
    fast = {"permc_spec": "MMD_AT_PLUS_A", "options": {"SymmetricMode": True}, "diag_pivot_thresh": 0.0}
    for options in (fast, {}):
        try:
            lu = splu(matrix, **options)
        except RuntimeError:  # how the factorisation says that a pivot is exactly zero
            continue
        with np.errstate(all="ignore"):
            z = lu.solve(trial)
            left = np.abs(matrix @ z - trial).max(initial=0.0)
            sound = left <= 1e-13 * max(1.0, np.abs(z).max(initial=0.0))
        if sound:
            return lu
    raise CrosstalkUnsound(
        "crosstalk matrix is singular", remedy="look for two actuators with the same rows of coefficients"
    )


def sparse_inverse(matrix: Any, lu: Any) -> Any:
    """Inverse of I + K without entries below NEGLIGIBLE: by its series where that falls fast, else by columns."""
    from scipy import sparse

    one = sparse.eye_array(matrix.shape[0], format="csc")
    K = matrix - one
    whole, power = one, one
    if abs(K).sum(axis=0).max() < 0.5:
        while power.nnz:
            power = -(K @ power)
            power.data[np.abs(power.data) < 0.1 * NEGLIGIBLE] = 0.0
            power.eliminate_zeros()
            whole = whole + power
        return whole.tocsc()
    columns = []
    unit = np.zeros(matrix.shape[0])
    for j in range(len(unit)):
        unit[j] = 1.0
        column = lu.solve(unit)
        unit[j] = 0.0
        columns.append(sparse.csc_array(np.where(np.abs(column) < NEGLIGIBLE, 0.0, column)[:, None]))
    return sparse.hstack(columns, format="csc")


def positive_definite(matrix: Any) -> bool:
    """Whether the symmetric part is positive definite: elimination along the diagonal meets no pivot <= 0."""
    from scipy.sparse.linalg import splu

    half = (0.5 * (matrix + matrix.T)).tocsc()
    try:
        lu = splu(half, permc_spec="MMD_AT_PLUS_A", options={"SymmetricMode": True}, diag_pivot_thresh=0.0)
    except RuntimeError:
        return False
    return bool((lu.perm_r == lu.perm_c).all() and (lu.U.diagonal() > 0.0).all())


def norm_of_inverse(solve: Any, transposed: Any, size: int) -> float:
    """Estimate, from below, of the largest column sum of the inverse that `solve` applies.

    Source: Hager 1984, with the alternating trial vector of Higham 1988.
    """
    if size == 0:
        return 1.0
    x, best = np.full(size, 1.0 / size), 0.0
    for _ in range(5):
        y = solve(x)
        grown = float(np.abs(y).sum())
        if not np.isfinite(grown):
            return np.inf
        z = transposed(np.where(y < 0.0, -1.0, 1.0))
        best = max(best, grown)
        row = int(np.argmax(np.abs(z)))
        if np.abs(z[row]) <= z @ x:
            break
        x = np.zeros(size)
        x[row] = 1.0
    k = np.arange(size)
    trial = np.where(k % 2, -1.0, 1.0) * (1.0 + k / max(1, size - 1))
    return max(best, 2.0 * float(np.abs(solve(trial)).sum()) / (3.0 * size))
