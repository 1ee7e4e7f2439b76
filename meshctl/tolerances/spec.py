"""What the next chip needs: how far each cause may scatter, alone and all together, for a wished yield.

Every scale is tried on the same dies, drawn again larger or smaller, so that yields of two scales differ by the
scale and not by luck. A scale counts as allowed where the lower end of its yield's interval reaches the wish.
Public: Allowed, Specification, specification, yield_curve, fewest_met, fewest_trials.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from meshctl.errors import OutOfReach, WrongUsage
from meshctl.mesh.spread import CAUSES, Shape, Spread
from meshctl.tolerances.chunks import Task
from meshctl.tolerances.requirement import Requirement, Yield, yield_of
from meshctl.tolerances.trials import check_nominal
from meshctl.tolerances.workers import shared_out

WITHIN = 1.01  # ratio of the scales between which the largest allowed one is known
MOST, LEAST = 2.0**10, 2.0**-20  # scales beyond which nothing is looked for
TOGETHER, CODES = "together", "codes"


@dataclass(frozen=True)
class Allowed:
    """How far one cause may scatter."""

    cause: str  # of CAUSES, "codes" or "together"
    scale: float  # of the mesh's own spread
    value: float | None  # its standard deviation then, or bits; None for all together
    met: Yield | None  # at that scale; None where even the largest or least scale tried says nothing
    limit: str  # "found", "none" (no scale tried does harm) or "nothing" (none is allowed)

    def entry(self) -> dict[str, Any]:
        """As a JSON object."""
        y = self.met
        share = None if y is None else {"yield": y.share, "low": y.low, "high": y.high}
        return {"scale": self.scale, "value": self.value, "limit": self.limit, "at": share}


@dataclass(frozen=True)
class Specification:
    """The table of what is allowed."""

    wish: float
    trials: int
    requirements: tuple[Requirement, ...]
    allowed: dict[str, Allowed]

    def entry(self) -> dict[str, Any]:
        """As a JSON object."""
        return {
            "yield": self.wish,
            "trials": self.trials,
            "requirements": [str(r) for r in self.requirements],
            "allowed": {name: a.entry() for name, a in self.allowed.items()},
        }


def fewest_met(wish: float, trials: int) -> int:
    """Dies that must be good for the interval of the yield to lie above the wish; above `trials`: never."""
    low, high = 0, trials + 1
    while low < high:
        middle = (low + high) // 2
        if middle > trials or yield_of(middle, trials).low >= wish:
            high = middle
        else:
            low = middle + 1
    return low


def fewest_trials(wish: float) -> int:
    """Trials below which not even all dies good would show the wish."""
    trials = 1
    while fewest_met(wish, trials) > trials:
        trials *= 2
    low, high = trials // 2, trials
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if fewest_met(wish, middle) <= middle else (middle, high)
    return high


class _Bracket:
    """Yields of one task at many scales, on the same dies."""

    def __init__(
        self,
        task: Task,
        requirements: Sequence[Requirement],
        wish: float,
        trials: int,
        cancel: Callable[[], bool] | None,
    ) -> None:
        self.task, self.requirements, self.trials, self.cancel = task, requirements, trials, cancel
        self.need = fewest_met(wish, trials)
        names = task.goal.measures
        self.columns = [names.index(r.measure) for r in requirements]

    def enough(self, scale: float) -> int | None:
        """Good dies at a scale; None as soon as too many are bad."""
        task, bad = self.task, 0
        scales = dict.fromkeys(task.spread.active, scale)
        for trial in range(self.trials):
            if self.cancel is not None and self.cancel():
                raise KeyboardInterrupt
            values = task.measured(task.drawing.errors(task.drawing.normals(task.seed, trial), scales))
            good = all(r.met(np.array(values[c])) for r, c in zip(self.requirements, self.columns, strict=True))
            bad += not good
            if bad > self.trials - self.need:
                return None
        return self.trials - bad

    def largest(self) -> tuple[float, int | None, str]:
        """(scale, good dies there, "found" | "none" | "nothing")."""
        scale, found = 1.0, self.enough(1.0)
        if found is not None:
            while True:
                if scale >= MOST:
                    return scale, found, "none"
                more = self.enough(2.0 * scale)
                if more is None:
                    break
                scale, found = 2.0 * scale, more
            low, high = scale, 2.0 * scale
        else:
            while found is None:
                if scale <= LEAST:
                    return 0.0, None, "nothing"
                scale *= 0.5
                found = self.enough(scale)
            low, high = scale, 2.0 * scale
        while high / low > WITHIN:
            middle = math.sqrt(low * high)
            at = self.enough(middle)
            if at is None:
                high = middle
            else:
                low, found = middle, at
        return low, found, "found"


@dataclass(frozen=True, eq=False)
class _Search:
    """What one process looks for."""

    name: str
    task: Task
    requirements: tuple[Requirement, ...]
    wish: float
    trials: int


def _largest(search: _Search, cancel: Callable[[], bool]) -> tuple[float, int | None, str]:
    return _Bracket(search.task, search.requirements, search.wish, search.trials, cancel).largest()


def _code_spread(task: Task) -> tuple[Spread, float] | None:
    """Scatter as codes of the plan's own resolution give it, and their bits; None where channels differ.

    A level falls anywhere between two codes: uniform, with variance q^2 / 12.
    """
    from meshctl.plan.chip import Chip

    step, bits = Chip(task.mesh).source.step_v, task.mesh.channels.bits
    if not len(step) or np.ptp(step) > 0.0 or np.ptp(bits) > 0:
        return None
    rest: dict[str, Any] = dict.fromkeys(CAUSES, 0.0)
    noise = float(step[0]) / math.sqrt(12.0)
    spread = replace(task.spread, **{**rest, "noise_v": noise}, shapes={"noise_v": Shape("uniform")}, between=())
    return spread, float(bits[0])


def specification(
    task: Task,
    requirements: Sequence[Requirement],
    *,
    wish: float = 0.95,
    trials: int = 1000,
    processes: int = 1,
    progress: Callable[[str], None] | None = None,
    cancel: Callable[[], bool] | None = None,
) -> Specification:
    """The largest scale of each cause at which enough dies are good, one at a time and all together.

    Parameters
    ----------
    task : Task; its seed and trial numbers 0 to `trials` - 1 give the dies
    requirements : what a good die meets
    wish : share of good dies
    trials : dies for each scale that is tried; some fifteen scales for each cause
    processes : that share the causes out; the result is the same

    Raises
    ------
    WrongUsage
        For no requirement, a wish outside 0 to 1, or too few trials to show it.
    OutOfReach
        Where even the die without scatter misses a requirement.
    """
    if not requirements:
        raise WrongUsage("--spec needs to know what a good die is", remedy="add --require, such as 'fidelity>=0.99'")
    if not 0.0 < wish < 1.0:
        raise WrongUsage(f"the wished yield is {wish:g}", remedy="allowed is between 0 and 1, such as 95%")
    if fewest_met(wish, trials) > trials:
        raise WrongUsage(
            f"{trials} trials cannot show a yield of {wish:g}", remedy=f"take at least {fewest_trials(wish)}"
        )
    check_nominal(task, requirements)
    jobs: list[tuple[str, Spread, float | None]] = [
        (cause, task.spread.only(cause), None) for cause in task.spread.active
    ]
    codes = _code_spread(task) if task.policy != "refined" else None
    if codes is not None:
        jobs.append((CODES, *codes))
    jobs.append((TOGETHER, task.spread, None))
    searches = [
        _Search(
            name,
            Task(
                task.mesh, task.plan, replace(s, between=s.between if name == TOGETHER else ()), task.seed, task.policy
            ),
            tuple(requirements),
            wish,
            trials,
        )
        for name, s, _ in jobs
    ]
    if processes > 1:
        found = shared_out(_largest, searches, processes, cancel)
    else:
        found = []
        for search in searches:
            if progress is not None:
                progress(search.name)
            found.append(_largest(search, cancel or (lambda: False)))
    allowed = {}
    for (name, spread, bits), (scale, met, limit) in zip(jobs, found, strict=True):
        if bits is not None:
            value: float | None = float(max(1.0, math.ceil(bits - math.log2(scale)))) if scale > 0.0 else None
        else:
            value = None if name == TOGETHER else scale * getattr(spread, name)
        allowed[name] = Allowed(name, scale, value, None if met is None else yield_of(met, trials), limit)
    if allowed[TOGETHER].limit == "nothing":
        raise OutOfReach(
            f"no scatter however small leaves {wish:g} of the dies good", remedy="require less, or wish a lower yield"
        )
    return Specification(wish, trials, tuple(requirements), allowed)


def yield_curve(
    task: Task, requirements: Sequence[Requirement], scales: Sequence[float], trials: int = 300
) -> list[Yield]:
    """Yields of all causes at several scales, on the same dies."""
    names, found = task.goal.measures, []
    columns = [names.index(r.measure) for r in requirements]
    for scale in scales:
        times = dict.fromkeys(task.spread.active, scale)
        met = 0
        for trial in range(trials):
            values = task.measured(task.drawing.errors(task.drawing.normals(task.seed, trial), times))
            met += all(r.met(np.array(values[c])) for r, c in zip(requirements, columns, strict=True))
        found.append(yield_of(met, trials))
    return found
