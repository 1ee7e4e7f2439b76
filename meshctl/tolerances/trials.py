"""Monte Carlo: many dies drawn, each measured; quantiles, yield, and when enough of them were seen.

Public: run_trials, Found, MOST_TRIALS.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import OutOfReach, UnsoundFile, WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.mesh.spread import Spread
from meshctl.plan.plan import Plan
from meshctl.tolerances.chunks import Kept, Task
from meshctl.tolerances.policies import POLICIES
from meshctl.tolerances.requirement import Requirement, Yield, yield_of
from meshctl.tolerances.workers import results

MOST_TRIALS = 10_000_000
QUANTILES = (0.01, 0.05, 0.25, 0.5, 0.75, 0.95, 0.99)


@dataclass(frozen=True)
class Progress:
    """How far a run has come."""

    trials: int
    asked: int
    met: Yield | None


@dataclass(frozen=True, eq=False)
class Found:
    """What the trials of a run gave."""

    task: Task
    values: np.ndarray  # f64[trials, measures]
    requirements: tuple[Requirement, ...]
    nominal: dict[str, float]
    asked: int
    stopped: str  # "trials", "until" or "interrupted"

    @property
    def trials(self) -> int:
        return len(self.values)

    def column(self, measure: str) -> np.ndarray:
        """Values of one measure, f64[trials]; NaN where a die's drive found no working point."""
        return self.values[:, self.task.goal.measures.index(measure)]

    @property
    def met(self) -> np.ndarray:
        """Dies that meet all requirements, bool[trials]."""
        return _met(self.task, self.values, self.requirements)

    @property
    def yield_(self) -> Yield | None:
        """Share of dies that meet all requirements; None where nothing is required."""
        return yield_of(int(self.met.sum()), self.trials) if self.requirements else None

    def summary(self, measure: str) -> dict[str, float | None]:
        """Nominal value, mean, scatter and quantiles of one measure; None where no die has it."""
        column = self.column(measure)
        known = column[np.isfinite(column)]
        entry: dict[str, float | None] = {"nominal": self.nominal[measure]}
        if not len(known):
            return entry | dict.fromkeys(["mean", "mean_square", "standard_deviation"])
        entry |= {"mean": float(known.mean()), "mean_square": float(np.mean(known**2))}
        entry["standard_deviation"] = float(known.std())
        for share, value in zip(QUANTILES, np.quantile(known, QUANTILES), strict=True):
            entry[f"quantile_{share:g}"] = float(value)
        return entry

    def entry(self) -> dict[str, Any]:
        """The run as a JSON object; the same for any number of processes."""
        one = [(r, yield_of(int(r.met(self.column(r.measure)).sum()), self.trials)) for r in self.requirements]
        whole = self.yield_
        return {
            **self.task.identity(),
            "asked": self.asked,
            "trials": self.trials,
            "stopped": self.stopped,
            "undrivable": int(np.isnan(self.values[:, 0]).sum()),
            "measures": {name: self.summary(name) for name in self.task.goal.measures},
            "requirements": {str(r): _yield_entry(y) for r, y in one},
            "yield": None if whole is None else _yield_entry(whole),
        }


def _yield_entry(found: Yield) -> dict[str, float]:
    return {"met": found.met, "yield": found.share, "low": found.low, "high": found.high}


def _met(task: Task, values: np.ndarray, requirements: Sequence[Requirement]) -> np.ndarray:
    met = np.ones(len(values), bool)
    for r in requirements:
        met &= r.met(values[:, task.goal.measures.index(r.measure)])
    return met


def task_of(
    mesh: Mesh, plan: Plan, *, seed: int = 0, policy: str = "as-set", spread: Spread | None = None,
    scales: dict[str, float] | None = None,
) -> Task:  # fmt: skip
    """A checked task.

    Raises
    ------
    WrongUsage, UnsoundFile
        For a policy that is not known, a seed below 0, a spread of nothing.
    """
    if policy not in POLICIES:
        raise WrongUsage(f"policy '{policy}' is not known", remedy=f"use one of: {', '.join(POLICIES)}")
    if policy != "as-set" and plan.is_routes:
        raise WrongUsage(f"policy {policy} solves for a matrix, and this plan is for routes", remedy="use as-set")
    if seed < 0:
        raise WrongUsage(f"seed is {seed}", remedy="allowed is 0 and above")
    given = mesh.spread if spread is None else spread
    if not given.active:
        raise UnsoundFile(
            "nothing scatters: all of [spread] is 0",
            where=str(mesh.folder / "mesh.toml" if mesh.folder else mesh.name),
            remedy="give [spread] keys, such as split_rad = 0.02",
        )
    return Task(mesh, plan, given, seed, policy, scales or {})


def check_nominal(task: Task, requirements: Sequence[Requirement]) -> dict[str, float]:
    """Measures of the die without scatter; refuse what even that one misses.

    Raises
    ------
    OutOfReach
    """
    task.goal.require([r.measure for r in requirements])
    nominal = task.nominal()
    for r in requirements:
        value = nominal[r.measure]
        if not r.met(np.array([value]))[0]:
            raise OutOfReach(
                f"even the die without scatter has {r.measure} {value:.6g}, which misses {r}",
                remedy="solve for a better plan, or require less",
            )
    return nominal


def run_trials(
    task: Task,
    trials: int = 1000,
    requirements: Sequence[Requirement] = (),
    *,
    until: float | None = None,
    folder: Path | None = None,
    processes: int = 1,
    cluster: str | None = None,
    progress: Callable[[Progress], None] | None = None,
    cancel: Callable[[], bool] | None = None,
) -> Found:
    """Draw dies and measure them.

    Parameters
    ----------
    task : Task
    trials : most dies
    requirements : what a die must meet to count as good
    until : half width of the interval of the yield at which to stop, never the verdict; looked at after each chunk
    folder : where chunks are kept as they come; a run that was broken off there goes on
    processes, cluster : who runs them; the result is the same
    progress, cancel : called after each chunk; asked between trials

    Returns
    -------
    Found
        With what was done so far where `cancel` ended it.

    Raises
    ------
    WrongUsage, OutOfReach, StalePlan

    Cost: as-set some matrix products of the mesh's size for each die; 56 bytes of memory each.
    """
    if not 1 <= trials <= MOST_TRIALS:
        raise WrongUsage(f"trials is {trials}", remedy=f"allowed is 1 to {MOST_TRIALS}")
    if processes < 1:
        raise WrongUsage(f"processes is {processes}", remedy="allowed is 1 and above")
    if until is not None and not requirements:
        raise WrongUsage("--until is a width of the yield, and nothing is required", remedy="add --require")
    if cluster is not None:
        from meshctl.tolerances.cluster import require_dask

        require_dask()
    nominal = check_nominal(task, requirements)
    kept = Kept(folder, task)
    size = task.chunk
    pieces = [(k, min(size, trials - k * size)) for k in range(math.ceil(trials / size))]
    found: list[np.ndarray] = []
    done, met, stopped = 0, 0, "trials"
    coming = results(task, pieces, kept, processes=processes, cluster=cluster, cancel=cancel)
    for values in coming:
        found.append(values)
        done += len(values)
        met += int(_met(task, values, requirements).sum())
        now = yield_of(met, done) if requirements else None
        if progress is not None:
            progress(Progress(done, trials, now))
        if until is not None and now is not None and now.half_width <= until and done < trials:
            stopped = "until"
            break
    if hasattr(coming, "close"):
        coming.close()
    if stopped == "trials" and done < trials:
        stopped = "interrupted"
    every = np.concatenate(found) if found else np.empty((0, len(task.goal.measures)))
    return Found(task, every, tuple(requirements), nominal, trials, stopped)
