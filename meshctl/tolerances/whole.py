"""One question about tolerance, answered whole: the budget, the trials, and what the next chip needs.

Public: Tolerance, Question, answer, write_answer.
"""

from __future__ import annotations

import csv
import io
import json
import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

from meshctl.errors import OutOfReach, WrongUsage
from meshctl.mesh.files import write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.spread import Spread
from meshctl.plan.plan import Plan
from meshctl.tolerances.budget import Budget, budget_of
from meshctl.tolerances.lattices import Compared, compare_lattices
from meshctl.tolerances.requirement import Requirement, requirement, until_width
from meshctl.tolerances.spec import Specification, specification
from meshctl.tolerances.trials import Found, Progress, run_trials, task_of

ANSWER_FILE, TRIALS_FILE = "tolerance.json", "trials.csv"
MOST_SCALE = 1e6
COMPARED = 200  # most dies for each target of a comparison of lattices


@dataclass(frozen=True)
class Question:
    """What is asked of a mesh and a plan, in the words of the command line."""

    trials: int = 1000
    seed: int = 0
    policy: str = "as-set"
    require: tuple[str, ...] = ()
    until: str | None = None
    scale: float = 1.0  # of all causes together
    spec: bool = False
    wish: str = "95%"
    folder: Path | None = None
    processes: int = 1
    cluster: str | None = None
    lattices: bool = False


@dataclass(frozen=True, eq=False)
class Tolerance:
    """How far dies will be off."""

    mesh: Mesh
    plan: Plan
    question: Question
    budget: Budget | None  # None for routes, loops, and policies other than as-set
    found: Found
    spec: Specification | None
    lattices: tuple[Compared, ...] = ()
    remarks: tuple[str, ...] = ()
    seconds: float = 0.0

    @property
    def interrupted(self) -> bool:
        return self.found.stopped == "interrupted"

    def entry(self) -> dict[str, Any]:
        """As a JSON object: the same for the same seed whoever ran the trials, `seconds` apart."""
        names = self.mesh.net.names.elements
        return {
            "target": str(self.plan.target.get("source", "")),
            **self.found.entry(),
            "budget": None if self.budget is None else self.budget.entry(names),
            "specification": None if self.spec is None else self.spec.entry(),
            "lattices": [row.entry() for row in self.lattices],
            "remarks": list(self.remarks),
            "seconds": self.seconds,
        }

    def _repr_html_(self) -> str:
        from html import escape

        rows = [("dies", f"{self.found.trials}"), ("policy", self.question.policy)]
        for name in self.found.task.goal.measures:
            mean = self.found.summary(name)["mean"]
            rows.append((f"mean {name}", "unknown" if mean is None else f"{mean:.6g}"))
        if (good := self.found.yield_) is not None:
            rows.append(("yield", f"{good.share:.4f} ({good.low:.4f} to {good.high:.4f})"))
        body = "".join(f"<tr><th>{k}</th><td>{escape(v)}</td></tr>" for k, v in rows)
        return f"<table><caption>tolerance of {escape(self.mesh.name)}</caption>{body}</table>"


@dataclass
class Ears:
    """Who is told how far it has come, and who may stop it."""

    trials: Callable[[Progress], None] | None = None
    spec: Callable[[str], None] | None = None
    cancel: Callable[[], bool] | None = None
    remarks: list[str] = field(default_factory=list)


def _share(words: str) -> float:
    try:
        value = float(words.strip().removesuffix("%")) / (100.0 if words.strip().endswith("%") else 1.0)
    except ValueError:
        value = -1.0
    if not 0.0 < value < 1.0:
        raise WrongUsage(f"'{words}' is no yield", remedy="write a share between 0 and 1, such as 95% or 0.95")
    return value


def answer(mesh: Mesh, plan: Plan, question: Question, ears: Ears | None = None) -> Tolerance:
    """Answer a question about tolerance.

    Raises
    ------
    WrongUsage, UnsoundFile, OutOfReach, StalePlan
        For words, spreads, requirements and folders that cannot be used.
    """
    ears, started = ears or Ears(), time.perf_counter()
    if not 0.0 < question.scale <= MOST_SCALE:
        raise WrongUsage(f"scale is {question.scale:g}", remedy=f"allowed is above 0 to {MOST_SCALE:g}")
    required: list[Requirement] = [requirement(words) for words in question.require]
    until = None if question.until is None else until_width(question.until)
    wish = _share(question.wish)
    scales = {} if question.scale == 1.0 else dict.fromkeys(mesh.spread.active, question.scale)
    task = task_of(mesh, plan, seed=question.seed, policy=question.policy, scales=scales)
    task.goal.require([r.measure for r in required])
    budget, remarks = None, list(ears.remarks)
    if question.policy == "as-set":
        try:
            budget = budget_of(task)
        except OutOfReach as finding:
            remarks.append(f"no budget: {finding}")
    else:
        remarks.append(f"no budget: it is of codes as they are set, not {question.policy}")
    if budget is not None and not budget.holds:
        other = (
            "E^2 is no small number" if budget.second_order_e2 is None else f"{budget.second_order_e2:.3g} to second"
        )
        remarks.append(f"the budget's first order no longer holds: mean E^2 is {budget.e2:.3g} to first order, {other}")
    found = run_trials(
        task, question.trials, required, until=until, folder=question.folder, processes=question.processes,
        cluster=question.cluster, progress=ears.trials, cancel=ears.cancel,
    )  # fmt: skip
    spec = None
    if question.spec and found.stopped != "interrupted":
        plain = task_of(mesh, plan, seed=question.seed, policy=question.policy)
        spec = specification(
            plain, required, wish=wish, trials=question.trials, processes=question.processes,
            progress=ears.spec, cancel=ears.cancel,
        )  # fmt: skip
    lattices: list[Compared] = []
    if question.lattices and found.stopped != "interrupted":
        lattices = compare_lattices(_everywhere(mesh), trials=min(question.trials, COMPARED), seed=question.seed)
    made = Tolerance(
        mesh, plan, question, budget, found, spec, tuple(lattices), tuple(remarks), time.perf_counter() - started
    )
    if question.folder is not None:
        write_answer(made, question.folder)
    return made


def _everywhere(mesh: Mesh) -> Spread:
    """The mesh's spread without what other lattices lack: crosstalk, and shapes that lie over this die."""
    spread = replace(mesh.spread, crosstalk_share=0.0, shapes={}, between=())
    if not spread.active:
        raise OutOfReach("only crosstalk scatters here, and the lattices compared have none", remedy="leave it out")
    return spread


def write_answer(made: Tolerance, folder: Path) -> None:
    """tolerance.json and trials.csv in the folder of a run."""
    from meshctl.tolerances.chunks import finite

    write_whole(folder / ANSWER_FILE, json.dumps(finite(made.entry()), allow_nan=False, indent=1) + "\n")
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(("trial", *made.found.task.goal.measures))
    for trial, row in enumerate(made.found.values.tolist()):
        writer.writerow((trial, *("" if v != v else repr(v) for v in row)))
    write_whole(folder / TRIALS_FILE, out.getvalue())
