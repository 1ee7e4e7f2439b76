"""Lattices compared on the same targets: how far each is off for the same scatter, as set and corrected.

Public: Compared, compare_lattices, SHAPES.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from meshctl.errors import Finding, WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.mesh.meshfile import lattice
from meshctl.mesh.spread import Spread
from meshctl.plan.pipeline import Effort, solve
from meshctl.plan.plan import Plan
from meshctl.plan.switching import RouteTarget, route
from meshctl.solver.target import read_target
from meshctl.tolerances.budget import budget_of
from meshctl.tolerances.trials import run_trials, task_of

SHAPES = ("rectangular", "rectangular+2", "triangular", "benes")
HAAR, ROUTES = "haar", "routes"
ROOTS = ("budget", "as_set", "corrected")  # what is a mean of squares


@dataclass(frozen=True)
class Compared:
    """One lattice at one size with one kind of target; None where that does not exist."""

    lattice: str  # shape, and "+K" for spare columns
    modes: int
    target: str  # "haar": matrices, "routes": every input to an output, at random
    measure: str  # matrix_error or power_error; what follows are roots of its mean square over dies and targets
    budget: float | None = None  # analytic, as set
    as_set: float | None = None
    corrected: float | None = None
    throughput: float | None = None  # mean
    crosstalk_db: float | None = None  # median over dies
    reason: str = ""  # why nothing stands here

    def entry(self) -> dict[str, Any]:
        """As a JSON object."""
        return asdict(self)


def compare_lattices(
    spread: Spread,
    *,
    shapes: Sequence[str] = SHAPES,
    modes: Sequence[int] = (4, 8, 16),
    targets: Sequence[str] = ("haar:1", "haar:2", "routes:1", "routes:2"),
    trials: int = 200,
    seed: int = 0,
    coupler_loss_db: float = 0.0,
) -> list[Compared]:
    """Errors of lattices that scatter alike, on the same targets and the same seeds.

    Parameters
    ----------
    spread : Spread
    shapes : lattices by name, "+K" for K spare columns, such as "rectangular+2"
    modes : sizes
    targets : "haar:SEED" for a matrix, "routes:SEED" for routes of a random permutation
    trials : dies for each target
    coupler_loss_db : known loss of every coupler: what unequal paths cost

    Raises
    ------
    WrongUsage
        For targets of another kind.

    Cost: a solve and twice `trials` dies for each of shapes, modes and targets.
    """
    kinds: dict[str, list[int]] = {}
    for words in targets:
        kind, _, number = words.partition(":")
        if kind not in (HAAR, ROUTES) or not number.isdecimal():
            raise WrongUsage(f"'{words}' is no target to compare by", remedy="write haar:SEED or routes:SEED")
        kinds.setdefault(kind, []).append(int(number))
    rows = []
    for kind, seeds in kinds.items():
        for shape in shapes:
            for n in modes:
                measure = "matrix_error" if kind == HAAR else "power_error"
                empty = Compared(shape, n, kind, measure)
                try:
                    rows.append(_filled(empty, _mesh(shape, n, coupler_loss_db), spread, seeds, trials, seed))
                except Finding as finding:
                    rows.append(replace(empty, reason=str(finding)))
    return rows


def _mesh(shape: str, modes: int, loss_db: float) -> Mesh:
    name, _, spare = shape.partition("+")
    mesh = lattice(name, modes=modes, spare=int(spare or 0))
    if not loss_db:
        return mesh
    return replace(mesh, as_built=replace(mesh.as_built, loss_db=np.where(mesh.net.kind == 0, loss_db, 0.0)))


def _plan(mesh: Mesh, kind: str, seed: int) -> Plan:
    n = len(mesh.net.inputs)
    if kind == HAAR:
        return solve(mesh, read_target(f"haar:{seed}", (n, n), "nothing"), effort=Effort(refine=False))
    order = np.random.default_rng(seed).permutation(n)
    pairs = zip(mesh.net.inputs, (mesh.net.outputs[o] for o in order.tolist()), strict=True)
    return route(mesh, RouteTarget(tuple(f"{i}:{o}" for i, o in pairs)))


def _filled(empty: Compared, mesh: Mesh, spread: Spread, seeds: Sequence[int], trials: int, seed: int) -> Compared:
    sums: dict[str, list[float]] = {"budget": [], "as_set": [], "corrected": [], "throughput": [], "crosstalk_db": []}
    for number in seeds:
        plan = _plan(mesh, empty.target, number)
        task = task_of(mesh, plan, seed=seed, spread=spread)
        found = run_trials(task, trials)
        sums["as_set"].append(float(np.mean(found.column(empty.measure) ** 2)))
        sums["throughput"].append(float(found.column("throughput").mean()))
        if empty.target == ROUTES:
            sums["crosstalk_db"].append(float(np.median(found.column("crosstalk_db"))))
            continue
        sums["budget"].append(budget_of(task).e2)
        corrected = run_trials(task_of(mesh, plan, seed=seed, spread=spread, policy="corrected"), trials)
        sums["corrected"].append(float(np.mean(corrected.column("matrix_error") ** 2)))
    means = {key: float(np.mean(values)) if values else None for key, values in sums.items()}
    budget, as_set, mended = (None if (m := means[k]) is None else math.sqrt(m) for k in ROOTS)
    return replace(
        empty, budget=budget, as_set=as_set, corrected=mended,
        throughput=means["throughput"], crosstalk_db=means["crosstalk_db"],
    )  # fmt: skip
