"""How near a matrix comes to the wanted one, and how much light it keeps.

fidelity F = |tr(T^H U)|^2 / (tr(T^H T) tr(U^H U)) is blind to uniform loss and to a global phase;
matrix_error E = min over a complex scale c of ||c U - T|| / ||T||, so E^2 = 1 - F. Where port phases do
not count (`free`), F is the largest over those diagonal phases. All matrices are [out, in].
Public: FREE_PHASES, with_free_phases, fidelity, matrix_error, throughput, throughput_per_input,
unitarity_defect, power_error.
"""

from __future__ import annotations

import math

import numpy as np

FREE_PHASES = ("nothing", "outputs", "inputs", "both")
_ROUNDS = 500  # of the alternation for "both"


def _unit(z: np.ndarray) -> np.ndarray:
    size = np.abs(z)
    return np.where(size > 0.0, z / np.where(size > 0.0, size, 1.0), 1.0)


def with_free_phases(matrix: np.ndarray, target: np.ndarray, free: str) -> np.ndarray:
    """The matrix with those port phases turned that do not count, as near to the target as they bring it.

    Cost: one pass for one side; for "both" the two sides are turned in alternation until nothing is gained.
    """
    if free == "nothing":
        return matrix
    overlap = np.conj(target) * matrix
    rows, columns = np.ones(matrix.shape[0], complex), np.ones(matrix.shape[1], complex)
    if free in ("outputs", "both"):
        rows = np.conj(_unit(overlap.sum(1)))
    if free == "inputs":
        columns = np.conj(_unit(overlap.sum(0)))
    if free == "both":
        for _ in range(_ROUNDS):
            columns = np.conj(_unit(rows @ overlap))
            turned = np.conj(_unit(overlap @ columns))
            still = bool(np.abs(turned - rows).max() < 1e-15)
            rows = turned
            if still:
                break
    return rows[:, None] * matrix * columns


def matrix_error(matrix: np.ndarray, target: np.ndarray, free: str = "nothing") -> float:
    """E, the relative distance to the target after the best complex scale; 0 is perfect, 1 is nothing alike.

    Parameters
    ----------
    matrix, target : complex (out, in), or with wavelengths (W, out, in)
    free : which port phases do not count: nothing, outputs, inputs, both
    """
    if matrix.ndim == 3:
        return math.sqrt(float(np.mean([matrix_error(m, t, free) ** 2 for m, t in zip(matrix, target, strict=True)])))
    turned = with_free_phases(matrix, target, free)
    light = float(np.vdot(turned, turned).real)
    if light == 0.0:
        return 1.0
    scale = np.vdot(turned, target) / light
    return float(np.linalg.norm(scale * turned - target) / np.linalg.norm(target))


def fidelity(matrix: np.ndarray, target: np.ndarray, free: str = "nothing") -> float:
    """F = 1 - E^2: the shape only, blind to uniform loss and to a global phase.

    Computed from the residual, so that 1 - F is exact far below the rounding of F itself.
    """
    return 1.0 - matrix_error(matrix, target, free) ** 2


def throughput(matrix: np.ndarray) -> float:
    """tr(U^H U) / inputs: the share of light that comes out, mean over the inputs."""
    return float(np.mean(throughput_per_input(matrix)))


def throughput_per_input(matrix: np.ndarray) -> np.ndarray:
    """Share of light that comes out for each input, (in,)."""
    share: np.ndarray = np.sum(np.abs(matrix) ** 2, axis=-2)
    return share if share.ndim == 1 else share.mean(0)


def unitarity_defect(matrix: np.ndarray) -> float:
    """Largest entry of |T^H T - 1|; 0 for a matrix that neither loses nor makes light."""
    with np.errstate(over="ignore", invalid="ignore"):  # numbers of 1e200 give infinity, which is refused
        gram = np.conj(matrix.T) @ matrix
    return float(np.abs(gram - np.eye(len(gram))).max())


def power_error(matrix: np.ndarray, power: np.ndarray) -> float:
    """Largest difference of an entry of |U|^2 from the wanted power."""
    return float(np.abs(np.abs(matrix) ** 2 - power).max())
