"""Settings refined again around what the drive gives: actuators held at limits, and coarse codes.

Descent here goes over own changes of the actuators within their limits, neighbours' shares included, so that
whatever it finds can be driven. Codes are chosen among equally good settings, then stepped one by one.
Public: Driven, within_limits, well_inside, finer_codes.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from meshctl.errors import DriveFinding
from meshctl.mesh.response import Response
from meshctl.plan.chip import Chip
from meshctl.plan.placing import code_range, fixed_settings, place, reach_of
from meshctl.plan.rounding import AWARE_TO, rounded
from meshctl.plan.settling import Effort, Settling, Work
from meshctl.plan.wanted import Wanted
from meshctl.solver.cells import MZI
from meshctl.solver.reach import Reach

TRIES = (20, 80, 1000)  # other signs of inner phases tried for coarse codes: least, most, times cells
REFINED = 4  # of those that come closer, refined where the settings were
REFINED_TO = 400  # settings; in larger meshes one is
STEPPED_TO = 300  # channels up to which codes are stepped one by one
_GROUND_ROUNDS = 3  # the shared ground's rise takes room from what was refined
_GROUND_SHARE = 0.97  # of its reach that is left to an actuator each time
_SWEEPS = 4
_MARGINS = 4  # times that a mask is narrowed, each time by four times as much
AT_LIMIT_RAD = 1e-9  # from its limit, at which an actuator counts as held there


class Driven:
    """A chip as a function of the own changes [S] of the actuators that move its settings; a model for `refine`."""

    def __init__(self, chip: Chip, response: Response, moved_by: np.ndarray) -> None:
        self.chip, self.response, self.moved_by = chip, response, moved_by
        self.live = ~fixed_settings(chip)

    def changes(self, own: np.ndarray) -> np.ndarray:
        """Own changes of all actuators [A]."""
        change = np.zeros(len(self.chip.actuators))
        change[self.moved_by[self.live]] = own[self.live]
        return change

    def settings(self, own: np.ndarray) -> np.ndarray:
        """Settings in force [S]."""
        total = self.chip.reference_rad + self.chip.total_changes(self.changes(own))
        return self.chip.mesh.as_built.in_force(total)

    def matrix(self, own: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> np.ndarray:
        return self.response.matrix(self.settings(own), wavelengths_nm)

    def pullback(
        self,
        own: np.ndarray,
        cotangent: np.ndarray | Callable[[np.ndarray], np.ndarray],
        wavelengths_nm: np.ndarray | None = None,
    ) -> np.ndarray:
        by_setting = self.response.pullback(self.settings(own), cotangent, wavelengths_nm)
        total = by_setting
        if self.chip.actuators.crosstalk is not None:
            total = by_setting + (self.chip.actuators.crosstalk.T @ by_setting)[self.moved_by]
        return np.where(self.live, total, 0.0)

    def reach(self, share: np.ndarray) -> Reach:
        """Own changes within a share [A] of what limits allow."""
        low, high = (np.where(self.live, (share * end)[self.moved_by], 0.0) for end in self.chip.own_reach)
        return Reach(low, high, np.zeros(len(low)), np.zeros(len(low)))


def within_limits(chip: Chip, work: Work, wanted: Wanted, effort: Effort) -> Work:
    """Where actuators are held at limits: the rest refined for what those give, limits kept throughout.

    Returns
    -------
    Work, the one given where nothing comes closer.
    """
    from meshctl.solver.refine import refine

    response = Response(chip.net, chip.as_built(work.placed.levels))
    driven = Driven(chip, response, work.moved_by)
    own = np.where(driven.live, work.placed.change[work.moved_by], 0.0)
    waves = wanted.wavelengths_nm
    before = wanted.value(driven.matrix(own, waves))
    share = np.ones(len(chip.actuators))
    fixed = fixed_settings(chip)
    best, least = work, before
    for _ in range(_GROUND_ROUNDS):
        found = refine(
            chip.net, response.as_built, wanted.objective, driven.reach(share), own,
            starts=effort.starts, seconds=effort.seconds, seed=effort.seed, progress=effort.progress,
            cancel=effort.cancel, model=driven,
        )  # fmt: skip
        change = driven.changes(found.settings)
        settings = driven.settings(found.settings)
        placed = place(chip, settings, best_effort=True, moved_by=work.moved_by, own=change)
        reached = wanted.value(driven.matrix(placed.change[work.moved_by], waves))
        if reached < least:
            ends = driven.reach(share)
            at_end = driven.live & (
                (found.settings - ends.low < AT_LIMIT_RAD) | (ends.high - found.settings < AT_LIMIT_RAD)
            )
            standing = {int(a) for a in work.moved_by[at_end]} | set(placed.held)
            clamped = tuple(s for s in work.solution.shortfalls if fixed[s.setting])
            solution = replace(found, settings=settings, shortfalls=clamped)
            told = replace(placed, held=tuple(sorted(standing)))
            best, least = replace(work, solution=solution, placed=told, refined=True, limited=True), reached
        if not placed.held:
            break
        share[np.array(placed.held)] *= _GROUND_SHARE
    return best


def well_inside(
    chip: Chip, work: Work, codes: np.ndarray, wanted: Wanted, effort: Effort, best_effort: bool
) -> tuple[Work, np.ndarray]:
    """A mask that settings meet and codes do not: refined again for bands a little narrower, until codes meet it.

    Returns
    -------
    (Work, int64 (K,)), those given where nothing comes closer
    """
    target, found = wanted.target, (work, codes)
    if target is None or target.least_db is None or target.most_db is None:
        return found
    room = target.most_db - target.least_db
    widest = 0.4 * float(np.nanmin(room)) if np.isfinite(room).any() else math.inf
    least = _value(chip, codes, wanted)
    margin = 4.0 * wanted.measured(chip.matrix(codes, wanted.wavelengths_nm)).get("excess_db", 0.0)
    if margin == 0.0:
        return found  # something else than a mask is missed
    for _ in range(_MARGINS):
        margin = min(margin, widest)
        narrow = replace(target, least_db=target.least_db + margin, most_db=target.most_db - margin)
        settling = Settling(chip, Wanted(narrow, wanted.size), best_effort, False, effort)
        settling.refined = work.solution.settings
        there = settling.run()
        value = _value(chip, there.placed.codes, wanted)
        if value < least:
            there = replace(there, reached=work.reached, worked_around=work.worked_around, limited=work.limited)
            found, least = (there, there.placed.codes), value
        if least == 0.0 or margin == widest:
            break
        margin *= 4.0
    return found


def finer_codes(
    chip: Chip, work: Work, codes: np.ndarray, wanted: Wanted, effort: Effort, keep_signs: bool, best_effort: bool
) -> tuple[Work, np.ndarray]:
    """Codes that come closer than those given: other settings of the same worth, and codes stepped one by one.

    Parameters
    ----------
    keep_signs : inner phases keep their signs, as these were chosen for something else

    Returns
    -------
    (Work, int64 (K,)), those given where nothing comes closer

    Cost: 20 to 80 solves and roundings; then a matrix for each step of a code.
    """
    least = _value(chip, codes, wanted)
    best, chosen = work, codes
    if not keep_signs and not (work.refined and not wanted.plain):  # else they do not follow from the closed form
        best, chosen, least = _other_signs(chip, work, codes, least, wanted, effort, best_effort)
    if len(chip.channels) <= STEPPED_TO:
        chosen = _stepped(chip, chosen, least, wanted, effort)
    return best, chosen


def _value(chip: Chip, codes: np.ndarray, wanted: Wanted) -> float:
    return wanted.value(chip.matrix(codes, wanted.wavelengths_nm))


@dataclass
class _Climb:
    """Climbing over signs of inner phases for codes that come closer."""

    chip: Chip
    wanted: Wanted
    effort: Effort
    best_effort: bool
    allowed: int  # shortfalls of the settings that there are
    until: float

    def over(self) -> bool:
        stopped = self.effort.cancel is not None and self.effort.cancel()
        return stopped or time.monotonic() > self.until

    def rounded(self, flip: np.ndarray, refine: bool | None) -> tuple[Work, np.ndarray, float] | None:
        """Solved with some signs negative, codes, and their value; None where these need more than the drive gives."""
        effort = replace(self.effort, refine=refine)
        try:
            work = Settling(self.chip, self.wanted, self.best_effort, False, effort, flip).run()
        except DriveFinding:
            return None
        if work.placed.held:
            return None
        codes = rounded(self.chip, work.placed, work.solution.settings, self.wanted)
        return work, codes, _value(self.chip, codes, self.wanted)

    def flips(self, cells: np.ndarray, n_cells: int) -> list[np.ndarray]:
        """Signs by which codes of the closed form come closer, the best first."""
        flip, better = np.zeros(n_cells, np.uint8), []
        first = self.rounded(flip, False)
        least = math.inf if first is None else first[2]
        least_tries, most_tries, work = TRIES
        for k in range(max(least_tries, min(most_tries, work // len(cells)))):
            if self.over():
                break
            rng = np.random.Generator(np.random.PCG64([self.effort.seed, k]))
            other = flip.copy()
            other[rng.choice(cells, min(1 + k % 2, len(cells)), replace=False)] ^= 1
            there = self.rounded(other, False)
            if there is not None and there[2] < least and len(there[0].solution.shortfalls) <= self.allowed:
                flip, least = other, there[2]
                better.append(other)
        return better[::-1]


def _other_signs(
    chip: Chip, work: Work, codes: np.ndarray, least: float, wanted: Wanted, effort: Effort, best_effort: bool
) -> tuple[Work, np.ndarray, float]:
    """The best of other signs of inner phases: found for the closed form, refined where the settings were."""
    until = math.inf if effort.seconds is None else time.monotonic() + effort.seconds
    effort = replace(effort, starts=1, progress=None)
    form = Settling(chip, wanted, best_effort, False, effort).form
    cells = np.empty(0, np.int64) if form is None else np.flatnonzero(form.table.form == MZI)
    if form is None or not len(cells) or chip.net.n_settings > AWARE_TO:
        return work, codes, least
    allowed = len(form.fit(reach_of(chip), form.best_place(reach_of(chip))).shortfalls)
    climb = _Climb(chip, wanted, effort, best_effort, allowed, until)
    found = work, codes, least
    refined = 1 if not work.refined or chip.net.n_settings > REFINED_TO else REFINED
    for flip in climb.flips(cells, form.n_cells)[:refined]:
        there = climb.rounded(flip, work.refined)
        if there is not None and there[2] < found[2]:
            found = there
    return found


def _stepped(chip: Chip, codes: np.ndarray, least: float, wanted: Wanted, effort: Effort) -> np.ndarray:
    """Codes moved by one, each in turn, while what is wanted comes closer."""
    best = codes.copy()
    lowest, highest = code_range(chip)
    for _ in range(_SWEEPS):
        before = least
        for k in range(len(best)):
            if effort.cancel is not None and effort.cancel():
                return best
            for step in (1, -1):
                trial = best.copy()
                trial[k] += step
                if not lowest[k] <= trial[k] <= highest[k]:
                    continue
                value = _value(chip, trial, wanted)
                if value < least:
                    best, least = trial, value
                    break
        if least > 0.98 * before:
            break
    return best
