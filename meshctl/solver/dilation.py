"""Matrices that lose light, made by a larger mesh that loses none: unitary dilation.

A matrix whose singular values are at most 1 is a block of a unitary matrix if the mesh has modes enough: a
p x q block of an n x n unitary matrix has at least p + q - n singular values equal to 1, as what leaves the
block must fit into the other n - p outputs.
Public: Dilation, dilate, dilated_target, least_block_error.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from meshctl.errors import NotFinite, OutOfReach, WrongSize, WrongUsage
from meshctl.solver.target import Target
from meshctl.solver.wishes import make_wish

ONE = 1e-12  # how near to 1 a singular value counts as 1: what is lost of its light, 2e-12, shows nowhere


@dataclass(frozen=True, eq=False)
class Dilation:
    """A unitary matrix that holds scale * matrix in the rows `outputs` and columns `inputs`."""

    unitary: np.ndarray  # c128[n, n]
    scale: float
    outputs: np.ndarray  # i64[p]
    inputs: np.ndarray  # i64[q]


def least_block_error(singular_values: np.ndarray, ones: int) -> float:
    """Least E, up to scale, of matrices whose largest `ones` singular values are equal.

    Parameters
    ----------
    singular_values : float, of the wanted matrix
    ones : how many singular values the block must have at its largest

    The best shares its singular vectors with the wanted matrix (von Neumann's trace inequality), lowers none of
    the other values, and puts the mean in place of the largest.
    """
    sigma = np.sort(np.asarray(singular_values, float))[::-1]
    top = sigma[: max(ones, 1)]
    return math.sqrt(float(np.sum((top - top.mean()) ** 2) / np.sum(sigma**2)))


def _positions(name: str, given: Sequence[int] | None, count: int, modes: int) -> np.ndarray:
    at = np.arange(count) if given is None else np.asarray(given, np.int64)
    if len(at) != count or len(np.unique(at)) != count or (count and (at.min() < 0 or at.max() >= modes)):
        raise WrongSize(f"{name} are {at.tolist()}", remedy=f"give {count} different positions from 0 to {modes - 1}")
    return at


def dilate(
    matrix: np.ndarray,
    modes: int,
    *,
    largest: bool = False,
    outputs: Sequence[int] | None = None,
    inputs: Sequence[int] | None = None,
) -> Dilation:
    """A unitary matrix of `modes` modes with a scaled matrix as its block.

    Parameters
    ----------
    matrix : complex (p, q)
    largest : scale the largest singular value to 1 (the least loss); else only where it is above 1
    outputs, inputs : positions of the block, by default the first p and q

    Raises
    ------
    OutOfReach
        Where the mesh has too few modes, with the reason and the least error.

    Example
    -------
    >>> abs(dilate(np.array([[0.6]]), 2).unitary).round(12).tolist()
    [[0.6, 0.8], [0.8, 0.6]]

    Cost: one singular value decomposition.
    Source: Halmos, "Normal dilations and extensions of operators", Summa Brasil. Math. 1950; in the basis of
    singular vectors it is a rotation [[s, c], [c, -s]] for every singular value s below 1.
    """
    wanted = np.asarray(matrix, complex)
    if wanted.ndim != 2 or not wanted.size:
        raise WrongSize(f"the matrix has shape {wanted.shape}", remedy="give (outputs, inputs)")
    if not np.isfinite(wanted).all():
        row, column = np.argwhere(~np.isfinite(wanted))[0]
        raise NotFinite(f"row {row + 1} column {column + 1} is {wanted[row, column]}", remedy="give finite numbers")
    p, q = wanted.shape
    left, sigma, right = np.linalg.svd(wanted)
    norm = float(sigma[0])
    if norm == 0.0:
        raise WrongUsage("the matrix is 0 everywhere", remedy="ask for dark outputs")
    scale = 1.0 / norm if largest or norm > 1.0 + ONE else 1.0
    s = np.minimum(scale * sigma, 1.0)
    lossy = np.flatnonzero(s < 1.0 - ONE)
    needed = max(p, q) + len(lossy)
    if needed > modes:
        raise _too_small(sigma, s, p, q, modes, needed, scale)
    rows, columns = _positions("outputs", outputs, p, modes), _positions("inputs", inputs, q, modes)
    core = np.zeros((modes, modes), complex)
    core[np.arange(len(s)), np.arange(len(s))] = s
    row, column = p, q  # the next output and input beyond the block
    for i in lossy.tolist():
        c = math.sqrt((1.0 - s[i]) * (1.0 + s[i]))
        core[i, column], core[row, i], core[row, column] = c, c, -s[i]
        row, column = row + 1, column + 1
    for i in range(len(s), p):
        core[i, column] = 1.0
        column += 1
    for i in range(len(s), q):
        core[row, i] = 1.0
        row += 1
    core[np.arange(row, modes), np.arange(column, modes)] = 1.0
    core[:p] = left @ core[:p]
    core[:, :q] = core[:, :q] @ right
    unitary = np.empty_like(core)
    rows_after = np.r_[rows, np.setdiff1d(np.arange(modes), rows)]
    columns_after = np.r_[columns, np.setdiff1d(np.arange(modes), columns)]
    unitary[np.ix_(rows_after, columns_after)] = core
    return Dilation(unitary, scale, rows, columns)


def _too_small(
    sigma: np.ndarray, scaled: np.ndarray, p: int, q: int, modes: int, needed: int, scale: float
) -> OutOfReach:
    if max(p, q) > modes:
        return OutOfReach(
            f"a matrix of {p} x {q} is no part of {modes} modes", remedy=f"take a mesh of at least {needed} modes"
        )
    must = p + q - modes
    has = int(np.count_nonzero(scaled >= 1.0 - ONE))
    as_scaled = f", scaled by {scale:.6g}" if scale != 1.0 else ""
    least = least_block_error(sigma, must)
    at_largest = max(p, q) + int(np.count_nonzero(sigma < sigma[0] * (1.0 - ONE)))
    remedy = f"take a mesh of at least {needed} modes"
    if at_largest <= modes:
        remedy += ", or let it be scaled to its largest"
    return OutOfReach(
        f"impossible on {modes} lossless modes: at least {must} singular values of any {p} x {q} block are 1, and "
        f"{has} of the target's are{as_scaled} (from {scaled[-1]:.6g} to {scaled[0]:.6g}); the least error up to "
        f"scale is {least:.6g}",
        remedy=remedy,
    )


def dilated_target(
    matrix: np.ndarray,
    shape: tuple[int, int],
    free: str = "nothing",
    source: str = "array",
    *,
    largest: bool = False,
    outputs: Sequence[int] | None = None,
    inputs: Sequence[int] | None = None,
) -> Target:
    """A target that wants a matrix of norm <= 1, or a scaled one, from some ports of a larger mesh.

    Parameters
    ----------
    shape : (outputs, inputs) of the mesh, alike
    free, source : as for `make_target`
    largest, outputs, inputs : as for `dilate`

    Returns
    -------
    Target
        Its matrix is unitary and serves the closed form; only the block has a weight; `scale` tells what the
        matrix was multiplied by.

    Raises
    ------
    OutOfReach, WrongSize, NotFinite, WrongUsage
    """
    if shape[0] != shape[1]:
        raise WrongSize(
            f"the mesh has {shape[0]} outputs and {shape[1]} inputs", remedy="take a mesh with as many of each"
        )
    made = dilate(matrix, shape[0], largest=largest, outputs=outputs, inputs=inputs)
    weight = np.zeros(shape)
    weight[np.ix_(made.outputs, made.inputs)] = 1.0
    return make_wish(shape, matrix=made.unitary, weight=weight, free=free, source=source, scale=made.scale)
