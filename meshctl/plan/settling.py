"""Settings found and put on the drive: closed form, refinement, whole turns, until dead heaters' warmth is known.

Public: Effort, Work, Settling.
"""

from __future__ import annotations

import dataclasses
import math
import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, NoReturn

import numpy as np

from meshctl.errors import NoClosedForm
from meshctl.mesh.response import Response
from meshctl.plan.chip import Chip
from meshctl.plan.gauges import least_power_flips
from meshctl.plan.placing import Placed, fixed_settings, place, reach_of
from meshctl.plan.refusal import refuse
from meshctl.plan.wanted import Wanted
from meshctl.solver.closed import EXACT, ClosedForm
from meshctl.solver.reach import Reach
from meshctl.solver.solution import Shortfall, Solution
from meshctl.units import TWO_PI, turns

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.solver.refine import Progress

BLIND_STARTS = 16  # descents where no closed form gives a first one
WISH_STARTS = 4  # descents for a wish whose closed form is a first guess only
_DEAD_ROUNDS = 8  # settings -> drive -> warmth at dead heaters -> settings; crosstalk makes each far smaller
_DEAD_WITHIN = 1e-9  # rad
_OFF = 1e-8  # rad by which a setting misses what is wanted before it counts
_ENDED = ("met", "stopped", "time")


@dataclass(frozen=True)
class Effort:
    """How hard to look for better settings than the closed form's.

    `refine` None refines where the closed form is not exact, or where there is none.
    """

    refine: bool | None = None
    starts: int = 1
    seconds: float | None = None
    seed: int = 0
    progress: Callable[[Progress], None] | None = None
    cancel: Callable[[], bool] | None = None


@dataclass(frozen=True, eq=False)
class Work:
    """What solving and placing came to."""

    reached: dict[str, float]  # how near the settings come with the drive's limits off, as `Wanted.measured` says
    solution: Solution
    placed: Placed
    moved_by: np.ndarray  # i64[S], the actuator that moves each setting
    saved_mw: float
    refined: bool
    worked_around: int  # cells out of the closed form's range that the refinement does without
    limited: bool  # limits of the drive were in the way, of the closed form or of what was refined


def _unlimited(chip: Chip, reach: Reach) -> Reach:
    """The reach with the drive's limits off: full turns for phases, any angle for couplers."""
    fixed = fixed_settings(chip)
    is_angle = chip.net.setting_is_angle
    low = np.where(fixed, reach.low, np.where(is_angle, reach.idle - 2 * np.pi, chip.reference_rad))
    high = np.where(fixed, reach.high, np.where(is_angle, reach.idle + 2 * np.pi, low + 2 * np.pi))
    return Reach(low, high, reach.period, np.clip(reach.idle, low, high))


def beyond_limits(chip: Chip, solution: Solution) -> list[Shortfall]:
    """Shortfalls owed to limits of the drive and not to the cell or to a fault."""
    fixed = fixed_settings(chip)
    # what a refined setting wants beyond its limit is not known: NaN
    return [s for s in solution.shortfalls if not abs(s.off_rad) <= _OFF and not fixed[s.setting]]


def _refuse_limits(chip: Chip, missed: list[Shortfall]) -> NoReturn:
    worst = max(missed, key=lambda s: abs(s.off_rad))
    change = worst.wanted_rad - float(chip.reference_rad[worst.setting])
    if chip.period_rad[worst.setting]:
        change %= TWO_PI
    rows = [int(chip.primary[s.setting]) for s in missed]
    refuse(chip, int(chip.primary[worst.setting]), change, rows)


def _moved_by(chip: Chip, settings: np.ndarray, background: np.ndarray, least_power: bool) -> np.ndarray:
    """The actuator that moves each setting: where there are two, the one that takes less power."""
    if not least_power or not chip.second.any():
        return chip.primary
    p2pi = chip.actuators.params["p2pi_mw"]
    own = np.mod(turns(settings - chip.reference_rad - background) * chip.arm[chip.primary], 1.0)
    other = chip.second & ((1.0 - own) * p2pi[chip.partner] < own * p2pi[chip.primary])
    return np.where(other, chip.partner, chip.primary)


def _warmth(chip: Chip, change: np.ndarray) -> np.ndarray:
    """What neighbours give every setting, rad [S]."""
    own = np.bincount(chip.actuators.setting, change, minlength=chip.net.n_settings)
    return chip.total_changes(change) - own


class Settling:
    """Solve, refine and place until what dead heaters take from their neighbours is known.

    Parameters
    ----------
    flip : uint8 (C,), cells of the closed form whose inner phase is taken negative; None: none
    """

    def __init__(
        self,
        chip: Chip,
        wanted: Wanted,
        best_effort: bool,
        least_power: bool,
        effort: Effort,
        flip: np.ndarray | None = None,
    ) -> None:
        self.chip, self.wanted, self.effort = chip, wanted, effort
        self.best_effort, self.least_power = best_effort, least_power
        self.flip = flip
        self.form: ClosedForm | None = None
        self.refined: np.ndarray | None = None
        self.worked_around, self.missed = 0, False
        self.as_built = chip.mesh.as_built
        self.until = math.inf if effort.seconds is None else time.monotonic() + effort.seconds
        self._form()

    def _form(self) -> None:
        try:
            first = self.wanted.first
            if first is None:
                raise NoClosedForm(
                    "no closed form: what is wanted gives no matrix as large as the mesh to start from",
                    remedy="leave --no-refine out",
                )
            self.form = ClosedForm(self.chip.net, self.as_built, first)
        except NoClosedForm:
            explicit = not self.wanted.plain or str(getattr(self.wanted.target, "source", "")).endswith(".toml")
            loops = self.chip.response.loops
            if self.effort.refine is False or (loops and not explicit and self.effort.refine is None):
                raise

    def _closed(self, reach: Reach) -> Solution | None:
        """The closed form's answer, measured by what is wanted."""
        if self.form is None:
            return None
        closed = self.form.solution(reach, self.flip)
        if self.wanted.plain:
            return closed
        value = self.wanted.value(self._matrix(closed.settings))
        found = self.wanted.measured(self._matrix(closed.settings))
        error = found.get("matrix_error", math.nan)
        reason = "exact" if value <= EXACT**2 else "out_of_range" if closed.shortfalls else "guess"
        shortfalls = () if reason == "exact" else closed.shortfalls
        return dataclasses.replace(
            closed, fidelity=1.0 - error**2, matrix_error=error, reason=reason, objective=value, shortfalls=shortfalls
        )

    def _matrix(self, settings: np.ndarray) -> np.ndarray:
        response = self.form.response if self.form is not None else Response(self.chip.net, self.as_built)
        return response.matrix(settings, self.wanted.wavelengths_nm)

    def solution(self, reach: Reach) -> Solution:
        """The closed form, and what descent makes of it where that is wanted."""
        closed = self._closed(reach)
        if closed is not None and self.wanted.plain:
            missed = beyond_limits(self.chip, closed)
            self.missed = bool(missed)
            if missed and not self.best_effort:
                _refuse_limits(self.chip, missed)
        wanted = self.effort.refine
        if wanted is False or (wanted is None and closed is not None and closed.reason == "exact"):
            assert closed is not None
            return closed
        return self._descend(closed, reach)

    def _descend(self, closed: Solution | None, reach: Reach) -> Solution:
        found = self._best(self._begins(closed, reach), reach)
        self.refined = found.settings
        fixed = fixed_settings(self.chip)
        if closed is None:
            clamped = [Shortfall(int(s), math.nan, float(found.settings[s]), 0.0) for s in np.flatnonzero(fixed)]
            return dataclasses.replace(found, shortfalls=(*clamped, *self._at_limits(found, reach)))
        clamped = [s for s in closed.shortfalls if fixed[s.setting]]
        around = [s.setting for s in closed.shortfalls if not fixed[s.setting]]
        self.worked_around = len(np.unique(self.chip.net.cell_of[self.chip.net.first_element[around]])) if around else 0
        shortfalls = (*clamped, *self._at_limits(found, reach))
        return dataclasses.replace(found, shortfalls=shortfalls, counts={**closed.counts, **found.counts})

    def _best(self, begins: list[np.ndarray], reach: Reach) -> Solution:
        """The best of descents from all of these settings, or the first that meets what is wanted."""
        from meshctl.solver.refine import refine

        effort, found = self.effort, None
        for begin in begins:
            left = None if effort.seconds is None else max(self.until - time.monotonic(), 1e-3)
            reached = refine(
                self.chip.net,
                self.as_built,
                self.wanted.objective,
                reach,
                begin,
                starts=effort.starts,
                seconds=left,
                seed=effort.seed,
                progress=effort.progress,
                cancel=effort.cancel,
            )
            if found is None or reached.objective < found.objective:
                found = reached
            if reached.reason in _ENDED:
                found = found if found.reason == "met" else dataclasses.replace(found, reason=reached.reason)
                break
        assert found is not None
        return found

    def _begins(self, closed: Solution | None, reach: Reach) -> list[np.ndarray]:
        """First settings: those refined before, the closed form's, at rest, and some drawn evenly from the reach."""
        if self.refined is not None:
            return [self.refined]
        if closed is not None and self.wanted.plain:
            return [closed.settings]
        begins = [reach.idle if closed is None else closed.settings]
        span = np.where(reach.period > 0.0, np.minimum(reach.high - reach.low, reach.period), reach.high - reach.low)
        for k in range(1, BLIND_STARTS if closed is None else WISH_STARTS):
            rng = np.random.Generator(np.random.PCG64([self.effort.seed, k]))
            begins.append(reach.low + span * rng.random(len(span)))
        return begins

    def _at_limits(self, found: Solution, reach: Reach) -> list[Shortfall]:
        """Settings that stand at their bounds where what is wanted would gain beyond; what they want is not known."""
        if found.reason != "limits":
            return []
        response = Response(self.chip.net, self.as_built)
        pull = self.wanted.pull(response, found.settings)
        bounded = (reach.high > reach.low) & ((reach.period == 0.0) | (reach.high - reach.low < reach.period - _OFF))
        low, high = found.settings - reach.low <= _OFF, reach.high - found.settings <= _OFF
        free = float(np.abs(pull[~low & ~high]).max(initial=0.0))
        held = bounded & ((low & (pull > 10.0 * free)) | (high & (pull < -10.0 * free)))
        return [Shortfall(int(s), math.nan, float(found.settings[s]), 0.0) for s in np.flatnonzero(held)]

    def run(self) -> Work:
        """Settings, and volts and codes for them.

        Raises
        ------
        NoClosedForm, Unreachable and other findings of the drive
        """
        chip, least_power = self.chip, self.least_power and self.form is not None
        background = np.zeros(chip.net.n_settings)
        dead = fixed_settings(chip) & np.isnan(chip.mesh.as_built.stuck_rad)
        warmed = chip.actuators.crosstalk is not None and bool(dead.any())
        plain_mw = 0.0
        for round_ in range(_DEAD_ROUNDS):
            reach = reach_of(chip, np.where(dead, background, 0.0))
            if least_power and round_ == 1:
                assert self.form is not None
                self.flip, self.refined = least_power_flips(chip, self.form, reach, background), None
            solution = self.solution(reach)
            moved_by = _moved_by(chip, solution.settings, background, least_power and round_ > 0)
            # what a wish other than one matrix is held back by is refined for, not refused
            placed = place(
                chip,
                solution.settings,
                best_effort=self.best_effort or not (self.wanted.plain or self.effort.refine is False),
                moved_by=moved_by,
                turning=self.wanted.at_centre(chip.net.wavelength_nm),
            )
            warmth = _warmth(chip, placed.change)
            if round_ == 0:
                plain_mw = float(chip.power_mw(placed.levels).sum())
            settled = not warmed or float(np.abs((warmth - background)[dead]).max()) < _DEAD_WITHIN
            background = warmth
            if chip.drag is not None:  # angles first, then the phases that they drag along
                moved = chip.as_built(placed.levels)
                settled &= float(np.abs(moved.error_rad - self.as_built.error_rad).max()) < _DEAD_WITHIN
                self.as_built = moved
                self._form()
            if settled and (round_ > 0 or not least_power):
                break
        saved = plain_mw - float(chip.power_mw(placed.levels).sum()) if least_power else 0.0
        limited = self.missed or bool(beyond_limits(chip, solution))
        return Work(
            self._without_limits(solution, reach, limited),
            solution,
            placed,
            moved_by,
            saved,
            self.refined is not None,
            self.worked_around,
            limited,
        )

    def _without_limits(self, solution: Solution, reach: Reach, limited: bool) -> dict[str, float]:
        """How near the settings would come without limits of the drive."""
        free = solution
        if limited:
            reach = _unlimited(self.chip, reach)
            closed = self._closed(reach)
            if closed is not None:
                free = closed
            if self.refined is not None and free.reason != "exact":
                free = self._best([free.settings, solution.settings], reach)
        if self.wanted.plain:
            return {"fidelity": free.fidelity, "matrix_error": free.matrix_error}
        return self.wanted.measured(self._matrix(free.settings))
