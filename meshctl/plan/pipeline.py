"""The main job from end to end: target -> settings -> volts and codes -> what the chip will really do.

Public: solve, predict, Prediction, Effort.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NoReturn

import numpy as np

from meshctl.errors import NoClosedForm
from meshctl.mesh.graph import Mesh, frozen
from meshctl.optics.measures import matrix_error, throughput, throughput_per_input
from meshctl.plan.chip import Chip
from meshctl.plan.gauges import least_power_flips
from meshctl.plan.placing import Placed, fixed_settings, place, reach_of
from meshctl.plan.plan import Plan
from meshctl.plan.refusal import refuse
from meshctl.plan.rounding import rounded
from meshctl.solver.closed import ClosedForm
from meshctl.solver.reach import Reach
from meshctl.solver.solution import Shortfall, Solution
from meshctl.solver.target import Target, described, from_description
from meshctl.units import TWO_PI, turns

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.solver.refine import Progress

BLIND_STARTS = 16  # descents where no closed form gives a first one
_DEAD_ROUNDS = 8  # settings -> drive -> warmth at dead heaters -> settings; crosstalk makes each far smaller
_DEAD_WITHIN = 1e-9  # rad
CODES_WORTH = 0.01  # share of E^2 that codes must add before they are rounded against the matrix
CODES_SHOW = 1e-6  # matrix error that codes add beyond which they are the reason


@dataclass(frozen=True, eq=False)
class Prediction:
    """What the chip does with a plan's codes."""

    matrix: np.ndarray  # c128[out, in], or [W, out, in]
    actual: np.ndarray  # f64[S]
    volts: np.ndarray  # f64[K]
    power_mw: np.ndarray  # f64[A]
    fidelity: float
    matrix_error: float
    throughput: float
    throughput_per_input: np.ndarray  # f64[in]
    wavelengths_nm: np.ndarray | None = None
    residual: float | None = None  # of a scattering solve: largest breach of a link over the largest field
    dark_loops: int = 0  # loops that no light enters


def _unlimited(chip: Chip, reach: Reach) -> Reach:
    """The reach with the drive's limits off: full turns for phases, any angle for couplers."""
    fixed = fixed_settings(chip)
    is_angle = chip.net.setting_is_angle
    low = np.where(fixed, reach.low, np.where(is_angle, reach.idle - 2 * np.pi, chip.reference_rad))
    high = np.where(fixed, reach.high, np.where(is_angle, reach.idle + 2 * np.pi, low + 2 * np.pi))
    return Reach(low, high, reach.period, np.clip(reach.idle, low, high))


def _beyond_limits(chip: Chip, solution: Solution) -> list[Shortfall]:
    """Shortfalls owed to limits of the drive and not to the cell or to a fault."""
    fixed = fixed_settings(chip)
    return [s for s in solution.shortfalls if abs(s.off_rad) > 1e-8 and not fixed[s.setting]]


def _refuse_limits(chip: Chip, missed: list[Shortfall]) -> NoReturn:
    worst = max(missed, key=lambda s: abs(s.off_rad))
    change = worst.wanted_rad - float(chip.reference_rad[worst.setting])
    if chip.period_rad[worst.setting]:
        change %= TWO_PI
    rows = [int(chip.primary[s.setting]) for s in missed]
    refuse(chip, int(chip.primary[worst.setting]), change, rows)


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
class _Work:
    """What solving and placing came to."""

    continuous: Solution  # with the drive's limits off
    solution: Solution
    placed: Placed
    saved_mw: float


def _moved_by(chip: Chip, settings: np.ndarray, background: np.ndarray, least_power: bool) -> np.ndarray:
    """The actuator that moves each setting: where there are two, the one that takes less power."""
    if not least_power or not chip.second.any():
        return chip.primary
    p2pi = chip.actuators.params["p2pi_mw"]
    own = np.mod(turns(settings - chip.reference_rad - background) * chip.arm[chip.primary], 1.0)
    other = chip.second & ((1.0 - own) * p2pi[chip.partner] < own * p2pi[chip.primary])
    return np.where(other, chip.partner, chip.primary)


class _Settling:
    """Solve, refine and place until what dead heaters take from their neighbours is known."""

    def __init__(self, chip: Chip, target: Target, best_effort: bool, least_power: bool, effort: Effort) -> None:
        self.chip, self.target, self.effort = chip, target, effort
        self.best_effort, self.least_power = best_effort, least_power
        self.flip: np.ndarray | None = None
        self.form: ClosedForm | None = None
        self.refined: np.ndarray | None = None
        self.as_built = chip.mesh.as_built
        self._form()

    def _form(self) -> None:
        try:
            self.form = ClosedForm(self.chip.net, self.as_built, self.target)
        except NoClosedForm:
            if self.effort.refine is False:
                raise

    def solution(self, reach: Reach) -> Solution:
        """The closed form, and what descent makes of it where that is wanted."""
        closed = None if self.form is None else self.form.solution(reach, self.flip)
        if closed is not None:
            missed = _beyond_limits(self.chip, closed)
            if missed and not self.best_effort:
                _refuse_limits(self.chip, missed)
        wanted = self.effort.refine
        if wanted is False or (wanted is None and closed is not None and closed.reason == "exact"):
            assert closed is not None
            return closed
        return self._descend(closed, reach)

    def _descend(self, closed: Solution | None, reach: Reach) -> Solution:
        from meshctl.solver.objective import MatrixError
        from meshctl.solver.refine import refine

        effort = self.effort
        begins = (
            [closed.settings if self.refined is None else self.refined] if closed is not None else self._blind(reach)
        )
        found: Solution | None = None
        for begin in begins:
            reached = refine(
                self.chip.net,
                self.as_built,
                MatrixError(self.target.matrix, free=self.target.free),
                reach,
                begin,
                starts=effort.starts,
                seconds=effort.seconds,
                seed=effort.seed,
                progress=effort.progress,
                cancel=effort.cancel,
            )
            if found is None or reached.matrix_error < found.matrix_error:
                found = reached
            if found.reason in ("met", "stopped", "time"):
                break
        assert found is not None
        self.refined = found.settings
        if closed is None:
            return found
        return dataclasses.replace(found, shortfalls=closed.shortfalls, counts={**closed.counts, **found.counts})

    def _blind(self, reach: Reach) -> list[np.ndarray]:
        """First settings where no closed form gives any: at rest, then drawn evenly from the reach."""
        if self.refined is not None:
            return [self.refined]
        drawn = [reach.idle]
        for k in range(1, BLIND_STARTS):
            rng = np.random.Generator(np.random.PCG64([self.effort.seed, k]))
            span = np.where(
                reach.period > 0.0, np.minimum(reach.high - reach.low, reach.period), reach.high - reach.low
            )
            drawn.append(reach.low + span * rng.random(len(span)))
        return drawn

    def run(self) -> _Work:
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
            placed = place(chip, solution.settings, best_effort=self.best_effort, moved_by=moved_by)
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
        continuous = solution
        if self.form is not None and _beyond_limits(chip, solution):
            continuous = self.form.solution(_unlimited(chip, reach), self.flip)
        return _Work(continuous, solution, placed, saved)


def _warmth(chip: Chip, change: np.ndarray) -> np.ndarray:
    """What neighbours give every setting, rad [S]."""
    own = np.bincount(chip.actuators.setting, change, minlength=chip.net.n_settings)
    return chip.total_changes(change) - own


def solve(
    mesh: Mesh,
    target: Target,
    *,
    best_effort: bool = False,
    least_power: bool = False,
    aware: bool = True,
    effort: Effort | None = None,
) -> Plan:
    """Volts and codes for a target, and how near the chip will come.

    Parameters
    ----------
    mesh : Mesh
    target : Target, unitary
    best_effort : hold actuators at their limits rather than raise
    least_power : use what does not touch the matrix to save power: signs of inner phases, second heaters
    aware : round codes against the matrix; plain rounding else
    effort : whether and how long to refine; by default where the closed form is not exact

    Returns
    -------
    Plan

    Raises
    ------
    NoClosedForm
        For nets that no decomposition fits, where refining is off.
    Unreachable, VoltageOutOfRange and other findings of the drive
        Where limits are in the way and `best_effort` is off.

    Cost: O(N^3) for N modes.
    """
    chip = Chip(mesh)
    effort = effort or Effort()
    work = _Settling(chip, target, best_effort, least_power, effort).run()
    solution, placed = work.solution, work.placed
    codes = placed.codes
    ahead = predict_codes(chip, codes, target)
    # where the codes add little to what the settings leave, rounding better is not worth its time
    if aware and ahead.matrix_error**2 > (1.0 + CODES_WORTH) * solution.matrix_error**2:
        codes = rounded(chip, placed, solution.settings, target.free)
        ahead = predict_codes(chip, codes, target)
    reason = solution.reason
    if placed.held or _beyond_limits(chip, solution):
        reason = "limits"
    elif reason in ("exact", "met") and ahead.matrix_error > max(CODES_SHOW, 2 * solution.matrix_error):
        reason = "codes"
    return Plan(
        mesh.name,
        mesh.hash,
        described(target),
        frozen(solution.settings),
        frozen(ahead.volts),
        frozen(codes),
        frozen(ahead.actual),
        frozen(ahead.power_mw),
        frozen(headroom_v(chip, ahead.volts)),
        ahead.fidelity,
        ahead.matrix_error,
        {"fidelity": work.continuous.fidelity, "matrix_error": work.continuous.matrix_error},
        ahead.throughput,
        ahead.throughput_per_input.tolist(),
        reason,
        _warnings(chip, solution, placed),
        [_shown(chip, s) for s in solution.shortfalls],
        work.saved_mw,
        effort.seed,
    )


def headroom_v(chip: Chip, volts: np.ndarray) -> np.ndarray:
    """Volts left on every channel up to its limit, or that of the weakest actuator on it, f64[K]."""
    by_current = chip.channels.by_current
    highest = np.where(by_current, chip.channels.limit_v, chip.level_range[1])
    np.minimum.at(highest, chip.actuators.channel, chip.bounds.high_v)
    return highest - volts


def _shown(chip: Chip, shortfall: Shortfall) -> dict[str, Any]:
    return {
        "element": chip.net.setting_names[shortfall.setting],
        "wanted_rad": shortfall.wanted_rad,
        "used_rad": shortfall.used_rad,
        "off_rad": shortfall.off_rad,
        "cross_power_off": shortfall.cross_power_off,
    }


def _warnings(chip: Chip, solution: Solution, placed: Placed) -> list[str]:
    names, said = chip.net.setting_names, list(placed.warnings)
    fixed = fixed_settings(chip)
    for s in sorted(solution.shortfalls, key=lambda s: -abs(s.cross_power_off) - abs(s.off_rad))[:8]:
        cause = "is stuck or dead" if fixed[s.setting] else "is out of its range"
        off = f"{s.off_rad:+.4g} rad" if abs(s.off_rad) > 1e-8 else f"{s.cross_power_off:+.4g} in cross power"
        said.append(f"'{names[s.setting]}' {cause}: {off} from what the closed form wants")
    if len(solution.shortfalls) > 8:
        said.append(f"{len(solution.shortfalls) - 8} more settings are out of range")
    if placed.held:
        actuators = chip.mesh.actuator_names
        listed = ", ".join(f"'{actuators[a]}'" for a in placed.held[:6])
        said.append(f"held at a limit: {listed}{' and more' if len(placed.held) > 6 else ''}")
    if solution.reason == "no_output_phases":
        said.append(
            "the target fixes output phases that nothing on the mesh sets; if they do not matter use --free outputs"
        )
    return said


def predict_codes(
    chip: Chip, codes: np.ndarray, target: Target, wavelengths_nm: np.ndarray | None = None
) -> Prediction:
    """Run codes through the forward path and compare with a target."""
    levels = chip.levels(codes)
    volts = chip.volts(levels)
    actual = chip.actual(codes)
    response = chip.response_at(codes)
    matrix = response.matrix(actual, wavelengths_nm)
    wanted = target.matrix if wavelengths_nm is None else np.broadcast_to(target.matrix, matrix.shape)
    error = matrix_error(matrix, wanted, target.free)
    return Prediction(
        matrix,
        actual,
        volts,
        chip.power_mw(levels),
        1.0 - error**2,
        error,
        throughput(matrix),
        throughput_per_input(matrix),
        wavelengths_nm,
        response.waves.residual if response.loops else None,
        response.waves.dark_loops if response.loops else 0,
    )


def predict(mesh: Mesh, plan: Plan, wavelengths_nm: np.ndarray | None = None) -> Prediction:
    """What the chip does with a plan's codes: codes -> volts -> settings -> matrix.

    Parameters
    ----------
    wavelengths_nm : float (W,), or None for the centre wavelength

    Returns
    -------
    Prediction
        Over several wavelengths fidelity is 1 - mean E^2, the target being the same at each.
    """
    return predict_codes(Chip(mesh), plan.codes, from_description(plan.target), wavelengths_nm)


__all__ = ["Effort", "Prediction", "headroom_v", "predict", "predict_codes", "solve"]
