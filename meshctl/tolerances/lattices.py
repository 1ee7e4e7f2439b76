"""Lattices compared on the same targets: how far each is off for the same scatter, as set and corrected.

Public: Compared, compare_lattices.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from meshctl.errors import Finding
from meshctl.mesh.meshfile import lattice
from meshctl.mesh.spread import Spread
from meshctl.plan.pipeline import Effort, solve
from meshctl.solver.target import read_target
from meshctl.tolerances.budget import budget_of
from meshctl.tolerances.trials import run_trials, task_of


@dataclass(frozen=True)
class Compared:
    """One lattice at one size; errors are roots of the mean of E^2 over dies and targets."""

    lattice: str  # shape, and "+K" for spare columns
    modes: int
    budget: float | None  # analytic, as set
    as_set: float | None
    corrected: float | None  # None where no closed form fits
    throughput: float | None
    reason: str = ""  # why nothing stands here

    def entry(self) -> dict[str, Any]:
        """As a JSON object."""
        return asdict(self)


def compare_lattices(
    spread: Spread,
    *,
    shapes: Sequence[str] = ("rectangular", "rectangular+2", "triangular"),
    modes: Sequence[int] = (4, 8, 16),
    targets: Sequence[str] = ("haar:1", "haar:2"),
    trials: int = 200,
    seed: int = 0,
    coupler_loss_db: float = 0.0,
) -> list[Compared]:
    """Errors of lattices that scatter alike, on the same targets and the same seeds.

    Parameters
    ----------
    spread : Spread
    shapes : lattices by name, "+K" for K spare columns, such as "rectangular+2", "benes"
    modes : sizes
    targets : words that `solve` takes; a Benes lattice takes permutations only
    trials : dies for each target
    coupler_loss_db : known loss of every coupler: what unequal paths cost

    Cost: a solve and twice `trials` dies for each of shapes, modes and targets.
    """
    rows = []
    for shape in shapes:
        name, _, spare = shape.partition("+")
        for n in modes:
            try:
                rows.append(_one(shape, name, int(spare or 0), n, spread, targets, trials, seed, coupler_loss_db))
            except Finding as finding:
                rows.append(Compared(shape, n, None, None, None, None, str(finding)))
    return rows


def _one(
    label: str, shape: str, spare: int, n: int, spread: Spread, targets: Sequence[str], trials: int, seed: int,
    loss_db: float,
) -> Compared:  # fmt: skip
    mesh = lattice(shape, modes=n, spare=spare)
    if loss_db:
        built = replace(mesh.as_built, loss_db=np.where(mesh.net.kind == 0, loss_db, 0.0))
        mesh = replace(mesh, as_built=built)
    sums: dict[str, list[float]] = {"budget": [], "as-set": [], "corrected": [], "throughput": []}
    for words in targets:
        plan = solve(mesh, read_target(words, (n, n), "nothing"), effort=Effort(refine=False))
        task = task_of(mesh, plan, seed=seed, spread=spread)
        found = run_trials(task, trials)
        sums["budget"].append(budget_of(task).e2)
        sums["as-set"].append(float(np.mean(found.column("matrix_error") ** 2)))
        sums["throughput"].append(float(found.column("throughput").mean()))
        corrected = run_trials(task_of(mesh, plan, seed=seed, spread=spread, policy="corrected"), trials)
        sums["corrected"].append(float(np.mean(corrected.column("matrix_error") ** 2)))
    root = {key: math.sqrt(float(np.mean(values))) for key, values in sums.items()}
    return Compared(label, n, root["budget"], root["as-set"], root["corrected"], float(np.mean(sums["throughput"])))
