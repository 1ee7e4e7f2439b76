"""The main job from end to end: what is wanted -> settings -> volts and codes -> what the chip will really do.

Public: solve, predict, predict_codes, headroom_v, Prediction, Effort.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np

from meshctl.mesh.graph import Mesh, frozen
from meshctl.optics.measures import throughput, throughput_per_input
from meshctl.plan.chip import Chip
from meshctl.plan.plan import Plan
from meshctl.plan.remarks import out_of_range, remarks
from meshctl.plan.rounding import rounded
from meshctl.plan.settling import Effort, Settling, Work
from meshctl.plan.wanted import Wanted
from meshctl.solver.target import Target

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.solver.objective import Objective

CODES_WORTH = 0.01  # share of E^2 that codes must add before they are rounded against the matrix
CODES_SHOW = 1e-6  # matrix error that codes add beyond which they are the reason
LEAST_SECONDS = 1e-3  # that a further step may take where the time is over
COARSE = 4e-6  # what codes may add to E^2, or to another wish, before other settings are tried for them


@dataclass(frozen=True, eq=False)
class Prediction:
    """What the chip does with a plan's codes."""

    matrix: np.ndarray  # c128[out, in], or [W, out, in]
    actual: np.ndarray  # f64[S]
    volts: np.ndarray  # f64[K]
    power_mw: np.ndarray  # f64[A]
    fidelity: float  # NaN where no matrix is wanted, and so for matrix_error
    matrix_error: float
    throughput: float
    throughput_per_input: np.ndarray  # f64[in]
    wavelengths_nm: np.ndarray | None = None
    residual: float | None = None  # of a scattering solve: largest breach of a link over the largest field
    dark_loops: int = 0  # loops that no light enters
    measures: dict[str, float] = field(default_factory=dict)  # how near it comes to a wish, as `MEASURES` names them


def solve(
    mesh: Mesh,
    target: Target | Objective,
    *,
    best_effort: bool = False,
    least_power: bool = False,
    aware: bool = True,
    joint: bool = True,
    effort: Effort | None = None,
    explain: bool = False,
) -> Plan:
    """Volts and codes for what is wanted, and how near the chip will come.

    Parameters
    ----------
    mesh : Mesh
    target : Target, or an Objective of the user's own making
    best_effort : hold actuators at their limits rather than raise
    least_power : use what does not touch the matrix to save power: signs of inner phases, second heaters
    aware : round codes against what is wanted; plain rounding else
    joint : refine again around actuators held at limits, and choose settings for coarse codes
    effort : whether and how long to refine; by default where the closed form is not exact
    explain : add the account of what keeps the answer from being better, see `plan.account`

    Returns
    -------
    Plan

    Raises
    ------
    NoClosedForm
        For nets that no decomposition fits, where refining is off; for one matrix on a net with loops also where
        refining is not asked for.
    Unreachable, VoltageOutOfRange and other findings of the drive
        Where limits are in the way and `best_effort` is off.

    Cost: O(N^3) for N modes; a refinement some hundred times that, `explain` a solve for each of some ten causes.
    """
    chip = Chip(mesh)
    effort = effort or Effort()
    until = math.inf if effort.seconds is None else time.monotonic() + effort.seconds

    def rest() -> Effort:
        """The effort with what is left of its time."""
        return effort if math.isinf(until) else replace(effort, seconds=max(until - time.monotonic(), LEAST_SECONDS))

    wanted = Wanted.of(target, (len(mesh.net.outputs), len(mesh.net.inputs)))
    work = Settling(chip, wanted, best_effort, least_power, effort).run()
    joint = joint and effort.refine is not False
    if joint and work.placed.held:
        from meshctl.plan.joint import within_limits

        work = within_limits(chip, work, wanted, rest())
    before = _placed_value(chip, work, wanted)
    codes = work.placed.codes
    matrix = chip.matrix(codes, wanted.wavelengths_nm)
    reached = wanted.value(matrix)
    # where the codes add little to what the settings leave, rounding better is not worth its time
    if aware and reached > (1.0 + CODES_WORTH) * before:
        other = rounded(chip, work.placed, work.solution.settings, wanted)
        value = wanted.value(chip.matrix(other, wanted.wavelengths_nm))
        if value < reached or wanted.plain:
            codes, reached = other, value
    if joint and before == 0.0 < reached:
        from meshctl.plan.joint import well_inside

        work, codes = well_inside(chip, work, codes, wanted, rest(), best_effort)
        reached = wanted.value(chip.matrix(codes, wanted.wavelengths_nm))
    if aware and joint and reached > 1.05 * before + COARSE:
        from meshctl.plan.joint import finer_codes

        work, codes = finer_codes(chip, work, codes, wanted, rest(), least_power, best_effort)
    plan = _plan(chip, work, codes, wanted, effort)
    if explain:
        from meshctl.plan.account import account

        plan = replace(plan, account=account(mesh, target, plan, best_effort, least_power, aware, joint, effort))
    return plan


def _placed_value(chip: Chip, work: Work, wanted: Wanted) -> float:
    """What is to be made small, before codes."""
    if wanted.plain and not work.placed.held:
        return work.solution.matrix_error**2
    total = chip.mesh.as_built.in_force(chip.reference_rad + chip.total_changes(work.placed.change))
    from meshctl.mesh.response import Response

    return wanted.value(Response(chip.net, chip.as_built(work.placed.levels)).matrix(total, wanted.wavelengths_nm))


def _plan(chip: Chip, work: Work, codes: np.ndarray, wanted: Wanted, effort: Effort) -> Plan:
    mesh, solution = chip.mesh, work.solution
    ahead = predict_codes(chip, codes, wanted)
    before, after = _error(work.reached), _error({"matrix_error": ahead.matrix_error, **ahead.measures})
    reason = solution.reason
    if work.placed.held or work.limited:
        reason = "limits"
    elif reason in ("exact", "met") and after > max(CODES_SHOW, 2 * before):
        reason = "codes"
    measures = {k: v for k, v in ahead.measures.items() if k not in ("fidelity", "matrix_error")}
    return Plan(
        mesh.name,
        mesh.hash,
        wanted.description(),
        frozen(solution.settings),
        frozen(ahead.volts),
        frozen(codes),
        frozen(ahead.actual),
        frozen(ahead.power_mw),
        frozen(headroom_v(chip, ahead.volts)),
        ahead.fidelity,
        ahead.matrix_error,
        work.reached,
        ahead.throughput,
        ahead.throughput_per_input.tolist(),
        reason,
        remarks(chip, work),
        out_of_range(chip, work),
        work.saved_mw,
        effort.seed,
        measures=measures,
        power_error=measures.get("power_error"),
    )


def _error(reached: dict[str, float]) -> float:
    """Matrix error, or the root of what another wish is to make small."""
    error = reached.get("matrix_error", math.nan)
    return error if not math.isnan(error) else math.sqrt(max(reached.get("objective", 0.0), 0.0))


def headroom_v(chip: Chip, volts: np.ndarray) -> np.ndarray:
    """Volts left on every channel up to its limit, or that of the weakest actuator on it, f64[K]."""
    by_current = chip.channels.by_current
    highest = np.where(by_current, chip.channels.limit_v, chip.level_range[1])
    np.minimum.at(highest, chip.actuators.channel, chip.bounds.high_v)
    return highest - volts


def predict_codes(
    chip: Chip, codes: np.ndarray, target: Target | Wanted, wavelengths_nm: np.ndarray | None = None
) -> Prediction:
    """Run codes through the forward path and compare with what is wanted.

    A wish with wavelengths of its own is measured at these, whatever wavelengths the matrix is asked for.
    """
    wanted = target if isinstance(target, Wanted) else Wanted(target, target.size)
    levels = chip.levels(codes)
    volts = chip.volts(levels)
    actual = chip.actual(codes)
    response = chip.response_at(codes)
    matrix = response.matrix(actual, wavelengths_nm)
    at = matrix
    if wanted.wavelengths_nm is not None:
        at = response.matrix(actual, wanted.wavelengths_nm)
    measures = wanted.measured(at)
    return Prediction(
        matrix,
        actual,
        volts,
        chip.power_mw(levels),
        measures.get("fidelity", math.nan),
        measures.get("matrix_error", math.nan),
        throughput(matrix),
        throughput_per_input(matrix),
        wavelengths_nm,
        response.waves.residual if response.loops else None,
        response.waves.dark_loops if response.loops else 0,
        {} if wanted.plain else measures,
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
    return predict_codes(Chip(mesh), plan.codes, Wanted.from_description(plan.target), wavelengths_nm)


__all__ = ["Effort", "Prediction", "headroom_v", "predict", "predict_codes", "solve"]
