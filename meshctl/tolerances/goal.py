"""What a plan is for, as what dies are measured against: a matrix, or powers at outputs.

Public: Goal, goal_of.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from meshctl.errors import OutOfReach, WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.optics.measures import matrix_error
from meshctl.plan.plan import Plan
from meshctl.plan.wanted import Wanted
from meshctl.tolerances.requirement import MEASURES
from meshctl.units import db_array

DARK = 1e-12  # share of an input's light below which an output is not wanted


@dataclass(frozen=True, eq=False)
class Goal:
    """A target of dies.

    Parameters
    ----------
    matrix : complex (out, in), None where only powers are wanted
    power : float (out, columns), wanted powers
    columns : int, the inputs that count
    free : port phases that do not count
    """

    matrix: np.ndarray | None
    power: np.ndarray
    columns: np.ndarray
    free: str = "nothing"

    @cached_property
    def wanted(self) -> np.ndarray:
        """Entries where light is wanted, bool [out, columns]."""
        return np.asarray(self.power > DARK * self.power.sum(0))

    @cached_property
    def _whole(self) -> bool:
        """True where every input counts and every entry is wanted."""
        return bool(self.wanted.all()) and self.matrix is not None

    @property
    def measures(self) -> tuple[str, ...]:
        """Names of the measures that this goal has."""
        names = ["fidelity", "matrix_error"] if self.matrix is not None else ["power_error"]
        names += ["throughput", *(["crosstalk_db"] if not self.wanted.all() else [])]
        return (*names, "insertion_loss_db", "power_mw")

    def values(self, matrix: np.ndarray, power_mw: float) -> list[float]:
        """The measures of one die, in the order of `measures`."""
        light = matrix.real**2 + matrix.imag**2
        if self._whole:
            per_input = arrived = light.sum(0)
        else:
            light = light[:, self.columns]
            per_input, arrived = light.sum(0), np.where(self.wanted, light, 0.0).sum(0)
        if self.matrix is not None:
            error = matrix_error(matrix, self.matrix, self.free)
            found = [1.0 - error**2, error]
        else:
            found = [float(np.abs(light - self.power).max())]
        found.append(float(per_input.mean()))
        if not self.wanted.all():
            rows = self.wanted.any(1)
            good = np.where(self.wanted, light, 0.0).sum(1)[rows]
            bad = np.where(self.wanted, 0.0, light).sum(1)[rows]
            worst = float(np.max(np.divide(bad, good, out=np.full(len(good), math.inf), where=good > 0.0)))
            found.append(float(db_array(worst)) if worst < math.inf else math.inf)
        least = float((arrived / self.power.sum(0)).min())
        found.append(-10.0 * math.log10(least) if least > 0.0 else math.inf)
        found.append(power_mw)
        return found

    def require(self, names: list[str]) -> None:
        """Refuse measures that this goal does not have.

        Raises
        ------
        WrongUsage
        """
        for name in names:
            if name not in self.measures:
                raise WrongUsage(
                    f"{name} ({MEASURES[name].help}) has no meaning for this plan's target",
                    remedy=f"require one of: {', '.join(self.measures)}",
                )


def goal_of(mesh: Mesh, plan: Plan) -> Goal:
    """What a plan is for.

    Raises
    ------
    OutOfReach
        For wishes other than one matrix at the centre wavelength, and routes.
    """
    n_in = len(mesh.net.inputs)
    if plan.is_routes:
        inputs = list(dict.fromkeys(r["input"] for r in plan.routes))
        power = np.zeros((len(mesh.net.outputs), len(inputs)))
        for r in plan.routes:
            power[mesh.net.outputs.index(r["output"]), inputs.index(r["input"])] = r["share"]
        return Goal(None, power, np.array([mesh.net.inputs.index(name) for name in inputs]))
    wanted = Wanted.from_description(plan.target)
    if not wanted.plain or wanted.target is None or wanted.target.matrix is None:
        raise OutOfReach(
            "the plan is for a wish that is not one matrix at the centre wavelength",
            remedy="take a plan for a matrix or for routes",
        )
    matrix = wanted.target.matrix
    return Goal(matrix, np.abs(matrix) ** 2, np.arange(n_in), wanted.free)
