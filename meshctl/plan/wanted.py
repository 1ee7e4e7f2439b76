"""What a plan is after, and how near a matrix comes to it: one matrix, or any wish of the solver's.

For one plain matrix nothing of the refinement is loaded.
Public: Wanted, MEASURES.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.optics.measures import matrix_error, unitarity_defect
from meshctl.solver.target import UNITARY_WITHIN, Target, described, from_description, make_target

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.mesh.response import Response
    from meshctl.solver.objective import Objective

# what a wish can be measured by, the one that counts most first; all are 0 where it is met
MEASURES = {
    "matrix_error": "matrix error",
    "power_error": "power error",
    "excess_db": "outside mask",
    "dark_share": "dark outputs",
    "objective": "objective",
}


@dataclass(frozen=True, eq=False)
class Wanted:
    """A target, or an objective of the user's own making for a mesh of a size.

    Parameters
    ----------
    target : Target, or None
    size : (outputs, inputs)
    own : Objective that stands in place of a target; None with no target: kept by a plan in name only
    """

    target: Target | None
    size: tuple[int, int]
    own: Objective | None = None

    @classmethod
    def of(cls, wish: Any, size: tuple[int, int]) -> Wanted:
        """A Target or an Objective as what is wanted."""
        return cls(wish, size) if isinstance(wish, Target) else cls(None, size, wish)

    @classmethod
    def from_description(cls, entry: dict[str, Any]) -> Wanted:
        """What `description` wrote; a wish of the user's own making comes back without its function."""
        if entry.get("own"):
            return cls(None, (int(entry["size"][0]), int(entry["size"][1])))
        target = from_description(entry)
        return cls(target, target.size)

    def description(self) -> dict[str, Any]:
        """As a plan file keeps it."""
        if self.target is None:
            return {"source": "own wish", "free": "nothing", "size": list(self.size), "own": True}
        return described(self.target)

    @cached_property
    def plain(self) -> bool:
        """True where one unitary matrix at the centre wavelength is all that is wanted."""
        return self.target is not None and self.target.plain and unitarity_defect(self.target.matrix) <= UNITARY_WITHIN

    @property
    def free(self) -> str:
        return "nothing" if self.target is None else self.target.free

    @property
    def known(self) -> bool:
        """False for a wish of the user's own making that was read from a plan."""
        return self.target is not None or self.own is not None

    @cached_property
    def objective(self) -> Objective:
        """What is to be made small."""
        if self.own is not None:
            return self.own
        from meshctl.solver.objective import MatrixError, objective_of

        assert self.target is not None
        if self.plain:
            return MatrixError(self.target.matrix, free=self.target.free)
        return objective_of(self.target)

    @property
    def wavelengths_nm(self) -> np.ndarray | None:
        """Where it is wanted; None: the centre wavelength alone."""
        if self.own is not None:
            return self.own.wavelengths_nm
        return None if self.target is None else self.target.wavelengths_nm

    def at_centre(self, centre_nm: float) -> bool:
        """True where whole turns of phases change nothing."""
        waves = self.wavelengths_nm
        return waves is None or bool((np.asarray(waves) == centre_nm).all())

    @cached_property
    def first(self) -> Target | None:
        """The unitary target that a closed form can start from; None where there is none."""
        if self.target is None or self.size[0] != self.size[1]:
            return None
        if self.plain:
            return self.target
        return make_target(self.target.start_matrix(), self.size, self.target.free, self.target.source)

    def value(self, matrix: np.ndarray) -> float:
        """What is to be made small; for a plain matrix E^2.

        Parameters
        ----------
        matrix : complex (out, in) or (W, out, in), at `wavelengths_nm`
        """
        if self.plain:
            assert self.target is not None
            return matrix_error(matrix, self.target.matrix, self.target.free) ** 2
        return self.objective.evaluate(_stacked(matrix))[0]

    def pull(self, response: Response, settings: np.ndarray) -> np.ndarray:
        """Derivative by the settings [S] of what is to be made small."""

        def cotangent(matrix: np.ndarray) -> np.ndarray:
            return self.objective.evaluate(_stacked(matrix))[1].reshape(matrix.shape)

        return response.pullback(settings, cotangent, self.wavelengths_nm)

    def measured(self, matrix: np.ndarray) -> dict[str, float]:
        """How near a matrix comes: those of MEASURES that apply, and fidelity where a matrix is wanted.

        Parameters
        ----------
        matrix : complex (out, in) or (W, out, in), at `wavelengths_nm`
        """
        if self.plain:
            assert self.target is not None
            wanted = self.target.matrix if matrix.ndim == 2 else np.broadcast_to(self.target.matrix, matrix.shape)
            error = matrix_error(matrix, wanted, self.target.free)
            return {"fidelity": 1.0 - error**2, "matrix_error": error}
        if not self.known:
            return {}
        stack = _stacked(matrix)
        found: dict[str, float] = {}
        error = self.objective.matrix_error(stack)
        if not math.isnan(error):
            found |= {"fidelity": 1.0 - error**2, "matrix_error": error}
        if self.target is not None:
            found |= _of_target(self.target, stack)
        found["objective"] = self.objective.evaluate(stack)[0]
        return found


def _stacked(matrix: np.ndarray) -> np.ndarray:
    return matrix if matrix.ndim == 3 else matrix[None]


def _of_target(target: Target, matrix: np.ndarray) -> dict[str, float]:
    power, found = np.abs(matrix) ** 2, {}
    weight = np.ones(target.size) if target.weight is None else target.weight
    if target.matrix is not None and len(matrix) > 1:
        from meshctl.solver.objective import MatrixError

        found["matrix_error_worst"] = max(
            MatrixError(_at(target.matrix, w), _at(weight, w), target.free).matrix_error(m[None])
            for w, m in enumerate(matrix)
        )
    if target.power is not None:
        counted = np.broadcast_to(weight > 0.0, power.shape)
        found["power_error"] = float(np.abs(power - target.power)[counted].max())
    if target.least_db is not None and target.most_db is not None:
        asked = ~(np.isnan(target.least_db) & np.isnan(target.most_db))
        if asked.any():
            from meshctl.solver.objective import Mask

            mask = Mask(target.least_db, target.most_db, target.wavelengths_nm)
            found["excess_db"] = float(np.abs(mask.excess_db(matrix)).max())
    if target.dark:
        lit = weight.reshape(-1, target.size[1]).any(0)
        found["dark_share"] = float(power[:, list(target.dark)][:, :, lit].sum(1).max())
    return found


def _at(array: np.ndarray, w: int) -> np.ndarray:
    return np.asarray(array if array.ndim == 2 else array[w])
