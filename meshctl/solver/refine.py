"""The best settings for the chip as it is: descent on the whole model from one or several starts.

Quasi-Newton descent within bounds. Phases that turn fully have no bounds while only the centre
wavelength counts, as whole turns then change nothing; over a band they do, and are tried one by one. Stuck and
dead settings are no unknowns.
Public: refine, Progress.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np

from meshctl.errors import NotFinite, OutOfReach, WrongSize, WrongUsage
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.response import Response
from meshctl.solver.objective import Objective
from meshctl.solver.quasinewton import Step, descend
from meshctl.solver.reach import Reach
from meshctl.solver.solution import Solution

MET = 1e-24  # value of an objective that counts as met: E = 1e-12, common rounding of 64 modes
WINDOW = 60  # steps in which a descent has to gain
GAIN = 1e-3  # this share of its value, else it has converged
MOST_STEPS = 20000
KICK_RAD = 0.5  # standard deviation of what is added to the best settings for a further start
MOST_TURNS = 64  # settings tried for whole turns in a round, those that promise most first
TURN_ROUNDS = 10
AT_BOUND = 1e-9  # rad from its bound at which a setting counts as held there


class Model(Protocol):
    """What refine has to know of a chip; `meshctl.mesh.response.Response` is one."""

    def matrix(self, settings: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> np.ndarray: ...

    def pullback(
        self,
        settings: np.ndarray,
        cotangent: np.ndarray | Callable[[np.ndarray], np.ndarray],
        wavelengths_nm: np.ndarray | None = None,
    ) -> np.ndarray: ...


@dataclass(frozen=True)
class Progress:
    """How far a refine has come; handed to the progress callback about ten times a second."""

    start: int  # from 1
    starts: int
    evaluations: int
    value: float  # of the objective, best so far
    seconds: float


class _Stopped(Exception):
    """Control flow from deep inside a descent; never seen outside."""

    def __init__(self, reason: str) -> None:
        self.reason = reason


@dataclass
class _Search:
    """The objective over the unknowns, with a record of the best that was seen."""

    model: Model
    objective: Objective
    settings: np.ndarray  # what the unknowns are written into
    unknown: np.ndarray  # rows of the unknowns
    starts: int
    seconds: float | None
    progress: Callable[[Progress], None] | None
    cancel: Callable[[], bool] | None
    began: float = field(default_factory=time.monotonic)
    evaluations: int = 0
    steps: int = 0
    start: int = 1
    best: float = math.inf
    best_x: np.ndarray = field(default_factory=lambda: np.empty(0))
    loose: bool = False  # places out of reach are visited: they are no answers
    told: float = -1.0

    def evaluate(self, x: np.ndarray) -> tuple[float, np.ndarray]:
        elapsed = time.monotonic() - self.began
        if self.evaluations:  # one evaluation is always made, so that there is an answer
            if self.cancel is not None and self.cancel():
                raise _Stopped("stopped")
            if self.seconds is not None and elapsed > self.seconds:
                raise _Stopped("time")
        self.evaluations += 1
        self.settings[self.unknown] = x
        value = math.nan

        def cotangent(matrix: np.ndarray) -> np.ndarray:
            nonlocal value
            value, by_matrix = self.objective.evaluate(matrix if matrix.ndim == 3 else matrix[None])
            return by_matrix.reshape(matrix.shape)

        gradient = self.model.pullback(self.settings, cotangent, self.objective.wavelengths_nm)[self.unknown]
        if not math.isfinite(value):
            raise NotFinite(
                f"the objective is {value}",
                remedy="look for NaN in the mesh's element table and in the target",
            )
        if value < self.best and not self.loose:
            self.best, self.best_x = value, x.copy()
        if self.progress is not None and elapsed - self.told >= 0.1:
            self.told = elapsed
            self.progress(Progress(self.start, self.starts, self.evaluations, self.best, elapsed))
        return value, gradient


def _descend(search: _Search, x: np.ndarray, low: np.ndarray, high: np.ndarray) -> tuple[str, np.ndarray]:
    """One descent; returns why it ended, and where."""
    history: list[float] = []

    def ended(step: Step) -> bool:
        search.steps += 1
        history.append(step.value)
        slow = len(history) > WINDOW and history[-1 - WINDOW] - step.value <= GAIN * history[-1 - WINDOW]
        return step.value <= MET or slow or step.count >= MOST_STEPS

    there = descend(search.evaluate, x, low, high, ended)
    if (history and history[-1] <= MET) or search.best <= MET:
        return "met", there
    return "steps" if len(history) >= MOST_STEPS else "converged", there


def _by_a_turn(search: _Search, x: np.ndarray, centre_nm: float) -> np.ndarray:
    """First-order change of the objective for a whole turn more on each unknown, others left.

    At the centre a turn changes nothing; elsewhere it turns on by 2 pi (l0 / l - 1), which is small.
    """
    waves = np.asarray(search.objective.wavelengths_nm)
    search.settings[search.unknown] = x
    matrix = search.model.matrix(search.settings, waves)
    _, cotangent = search.objective.evaluate(matrix)
    change = np.zeros(len(x))
    for w in range(len(waves)):
        by_setting = search.model.pullback(search.settings, cotangent[w : w + 1], waves[w : w + 1])[search.unknown]
        change += by_setting * (1.0 - waves[w] / centre_nm)
    return 2.0 * np.pi * change


def _try_turns(search: _Search, low: np.ndarray, high: np.ndarray, period: np.ndarray, centre_nm: float) -> bool:
    """Add or take off whole turns of the best settings where that gains; True if any did."""
    x = search.best_x.copy()
    change = _by_a_turn(search, x, centre_nm)
    sign = -np.sign(change)
    there = x + sign * period
    open_ = np.flatnonzero((period > 0.0) & (sign != 0.0) & (there >= low) & (there <= high))
    gained = False
    for k in open_[np.argsort(-np.abs(change[open_]), kind="stable")][:MOST_TURNS]:
        trial = search.best_x.copy()
        trial[k] += sign[k] * period[k]
        before = search.best
        value, _ = search.evaluate(trial)
        gained |= value < before
    return gained


def _lowest(x: np.ndarray, low: np.ndarray, high: np.ndarray, period: np.ndarray) -> np.ndarray:
    """The lowest equal value within reach where there are whole turns to take off, else the nearest end."""
    turns = period > 0.0
    p = np.where(turns, period, 1.0)
    wrapped = low + np.mod(x - low, p)
    wrapped = np.where(wrapped - low > p - AT_BOUND, low, wrapped)
    # beyond a reach of less than a turn: the nearer end
    over = wrapped - high
    ended = np.where(over <= low + p - wrapped, high, low)
    wrapped = np.where(over > 0.0, ended, wrapped)
    return np.where(turns, wrapped, np.clip(x, low, high))


def _within(x: np.ndarray, low: np.ndarray, high: np.ndarray, period: np.ndarray) -> np.ndarray:
    """The nearest equal value within reach, or its nearer end."""
    p = np.where(period > 0.0, period, 1.0)
    moved = (
        x + p * np.where(x < low, np.ceil((low - x) / p), 0.0) - p * np.where(x > high, np.ceil((x - high) / p), 0.0)
    )
    return np.clip(np.where(period > 0.0, moved, x), low, high)


def _check(net: Net, reach: Reach, start: np.ndarray, starts: int, seconds: float | None) -> None:
    for name, array in (("start", start), ("reach.low", reach.low), ("reach.high", reach.high)):
        if np.shape(array) != (net.n_settings,):
            raise WrongSize(f"{name} has shape {np.shape(array)}; this net takes ({net.n_settings},)")
    bad = np.flatnonzero(~np.isfinite(start))
    if len(bad):
        raise NotFinite(f"the start of '{net.setting_names[bad[0]]}' is {start[bad[0]]}", remedy="give finite settings")
    crossed = np.flatnonzero(reach.low > reach.high)
    if len(crossed):
        s = int(crossed[0])
        raise OutOfReach(
            f"'{net.setting_names[s]}' can be from {reach.low[s]:g} to {reach.high[s]:g} rad, which is nothing",
            remedy="correct its limits",
        )
    if starts < 1:
        raise WrongUsage(f"starts is {starts}", remedy="give at least 1")
    if seconds is not None and not seconds > 0.0:
        raise WrongUsage(f"seconds is {seconds}", remedy="give a time above 0, or none")


def refine(
    net: Net,
    as_built: AsBuilt,
    objective: Objective,
    reach: Reach,
    start: np.ndarray,
    *,
    starts: int = 1,
    seconds: float | None = None,
    seed: int = 0,
    progress: Callable[[Progress], None] | None = None,
    cancel: Callable[[], bool] | None = None,
    model: Model | None = None,
) -> Solution:
    """Settings that make an objective smallest on the chip as built.

    Parameters
    ----------
    objective : Objective
    reach : Reach of all settings
    start : float (S,), rad, such as the closed form's answer
    starts : descents; the first from `start`, each further one from settings drawn anew
    seconds : time after which the best so far is the answer; it makes the answer depend on the machine
    seed : of the further starts; the same seed gives the same answer
    progress, cancel : called while it runs; `cancel` returns True to stop with the best so far
    model : what to descend on instead of `Response(net, as_built)`

    Returns
    -------
    Solution
        Never worse than the start brought within reach. `objective` is the value reached; `matrix_error` and
        `fidelity` are NaN where the objective wants no matrix.

    Cost: a step costs four to five times the matrix; some hundred steps a start.
    """
    start = np.asarray(start, float)
    _check(net, reach, start, starts, seconds)
    used: Model = Response(net, as_built) if model is None else model
    waves = objective.wavelengths_nm
    # away from the centre a whole turn is no identity
    centre = waves is None or bool(np.all(np.asarray(waves) == net.wavelength_nm))
    unknown = np.flatnonzero(np.isnan(as_built.stuck_rad) & (reach.high > reach.low))
    low, high, period = reach.low[unknown], reach.high[unknown], reach.period[unknown]
    turning = (period > 0.0) & (high - low >= period - AT_BOUND)
    full = turning & centre
    fixed = np.setdiff1d(np.arange(net.n_settings), unknown)
    settings = start.copy()
    settings[fixed] = np.clip(start, reach.low, reach.high)[fixed]
    turn = period if centre else np.zeros(len(unknown))
    bounds = np.where(full, -np.inf, low), np.where(full, np.inf, high)
    loose = np.where(turning, -np.inf, low), np.where(turning, np.inf, high)

    search = _Search(used, objective, settings, unknown, starts, seconds, progress, cancel)
    x = _within(start[unknown], low, high, period)
    reason = "converged"
    try:
        search.evaluate(x)
        for k in range(starts if len(unknown) else 0):
            search.start = k + 1
            if k:
                rng = np.random.Generator(np.random.PCG64([seed, k]))
                x = _lowest(search.best_x + rng.normal(0.0, KICK_RAD, len(unknown)), low, high, turn)
            reason, _ = _descend(search, x, *bounds)
            if not centre and turning.any() and reason != "met":
                # whole turns are nearly free: descend as if they were, then put them within reach
                search.loose = True
                _, there = _descend(search, x, *loose)
                search.loose = False
                reason, _ = _descend(search, _within(there, low, high, period), *bounds)
            for _ in range(0 if centre else TURN_ROUNDS):
                if reason == "met" or not _try_turns(search, low, high, period, net.wavelength_nm):
                    break
                reason, _ = _descend(search, search.best_x, *bounds)
            if reason == "met":
                break
    except _Stopped as stop:
        reason = stop.reason
    best = _lowest(search.best_x, low, high, turn)
    settings[unknown] = best
    if reason == "converged" and _held(search, best, low, high, full):
        reason = "limits"
    matrix = used.matrix(settings, waves)
    error = objective.matrix_error(matrix if matrix.ndim == 3 else matrix[None])
    counts = {"evaluations": search.evaluations, "steps": search.steps, "starts": search.start}
    return Solution(settings, 1.0 - error**2, error, reason, counts=counts, objective=search.best)


def _held(search: _Search, x: np.ndarray, low: np.ndarray, high: np.ndarray, full: np.ndarray) -> bool:
    """True if a setting stands at its bound and the objective would gain beyond it."""
    search.cancel, search.seconds = None, None
    _, gradient = search.evaluate(x)
    at_low, at_high = x - low <= AT_BOUND, high - x <= AT_BOUND
    push = np.where(at_low, np.maximum(gradient, 0.0), 0.0) + np.where(at_high, np.maximum(-gradient, 0.0), 0.0)
    free = np.where(at_low | at_high, 0.0, np.abs(gradient))
    return bool(np.any(push[~full] > 10.0 * free.max(initial=0.0)))
