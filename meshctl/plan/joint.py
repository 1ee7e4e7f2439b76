"""Settings refined again around what the drive gives: actuators held at limits, and coarse codes.

Descent here goes over own changes of the actuators within their limits, neighbours' shares included, so that
whatever it finds can be driven. Codes are chosen among equally good settings, then stepped one by one.
Public: Driven, within_limits, finer_codes.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from meshctl.errors import DriveFinding
from meshctl.mesh.response import Response
from meshctl.plan.chip import Chip
from meshctl.plan.placing import fixed_settings, place
from meshctl.plan.rounding import code_range, rounded
from meshctl.plan.settling import Effort, Settling, Work
from meshctl.plan.wanted import Wanted
from meshctl.solver.cells import MZI
from meshctl.solver.reach import Reach

TRIES = 40  # other signs of inner phases tried for coarse codes
REFINED_TRIES = 6  # where each is a refinement
STEPPED_TO = 300  # channels up to which codes are stepped one by one
_GROUND_ROUNDS = 3  # the shared ground's rise takes room from what was refined
_SWEEPS = 4


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

    def reach(self, high: np.ndarray) -> Reach:
        """Own changes within limits."""
        low_own, high_own = self.chip.own_reach
        low = np.where(self.live, np.nan_to_num(low_own)[self.moved_by], 0.0)
        top = np.where(self.live, np.minimum(np.nan_to_num(high_own), high)[self.moved_by], 0.0)
        return Reach(low, np.maximum(low, top), np.zeros(len(low)), np.zeros(len(low)))


def within_limits(chip: Chip, work: Work, wanted: Wanted, effort: Effort) -> Work:
    """Where actuators are held at limits: the rest refined for what those give, limits kept throughout.

    Returns
    -------
    Work, the one given where nothing comes closer.
    """
    from meshctl.solver.refine import refine

    response = Response(chip.net, chip.as_built(work.placed.levels))
    driven = Driven(chip, response, work.moved_by)
    own = work.placed.change[work.moved_by]
    waves = wanted.wavelengths_nm
    before = wanted.value(driven.matrix(own, waves))
    high = np.full(len(chip.actuators), np.inf)
    best, least = work, before
    for _ in range(_GROUND_ROUNDS):
        found = refine(
            chip.net, response.as_built, wanted.objective, driven.reach(high), own,
            starts=effort.starts, seconds=effort.seconds, seed=effort.seed, progress=effort.progress,
            cancel=effort.cancel, model=driven,
        )  # fmt: skip
        change = driven.changes(found.settings)
        settings = driven.settings(found.settings)
        placed = place(chip, settings, best_effort=True, moved_by=work.moved_by, own=change)
        reached = wanted.value(driven.matrix(placed.change[work.moved_by], waves))
        if reached < least:
            solution = replace(found, settings=settings, reason=found.reason, shortfalls=work.solution.shortfalls)
            best, least = replace(work, solution=solution, placed=placed, refined=True, limited=True), reached
        if not placed.held:
            break
        held = np.array(placed.held)
        high[held] = 0.98 * change[held]
    return best


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

    Cost: TRIES solves and roundings; then a matrix for each step of a code.
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


def _other_signs(
    chip: Chip, work: Work, codes: np.ndarray, least: float, wanted: Wanted, effort: Effort, best_effort: bool
) -> tuple[Work, np.ndarray, float]:
    """Climbing over signs of inner phases, one or two drawn at a time; what comes less close before codes is left."""
    until = math.inf if effort.seconds is None else time.monotonic() + effort.seconds
    effort = replace(effort, starts=1, progress=None)
    form = Settling(chip, wanted, best_effort, False, effort).form
    cells = np.empty(0, np.int64) if form is None else np.flatnonzero(form.table.form == MZI)
    best, flip = work, np.zeros(0 if form is None else form.n_cells, np.uint8)
    for k in range((REFINED_TRIES if work.refined else TRIES) if len(cells) else 0):
        if (effort.cancel is not None and effort.cancel()) or time.monotonic() > until:
            break
        rng = np.random.Generator(np.random.PCG64([effort.seed, k]))
        other = flip.copy()
        other[rng.choice(cells, min(1 + k % 2, len(cells)), replace=False)] ^= 1
        try:
            there = Settling(chip, wanted, best_effort, False, effort, other).run()
        except DriveFinding:
            continue  # these signs need more than the drive gives
        if there.placed.held or len(there.solution.shortfalls) > len(work.solution.shortfalls):
            continue
        theirs = rounded(chip, there.placed, there.solution.settings, wanted)
        value = _value(chip, theirs, wanted)
        if value < least:
            best, codes, least, flip = there, theirs, value, other
    return best, codes, least


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
