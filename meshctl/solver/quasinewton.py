"""Quasi-Newton descent with limited memory, within bounds.

Steps of our own rather than a library's: at thousands of unknowns they cost a third, and they call no
threaded routine, which on a busy machine costs ten times the step itself.
Public: descend, Step.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meshctl.optics.kernels import filled, float64, given, int64, kernel, void

MEMORY = 20  # steps remembered
ENOUGH_GAIN, ENOUGH_TURN = 1e-4, 0.9  # of the slope: what a step must gain, and by how much it must flatten
MOST_TRIES = 25  # of step lengths


@dataclass(frozen=True)
class Step:
    """Where a descent stands after a step."""

    count: int
    value: float


@kernel(void(given(float64, 2), given(float64, 2), given(float64), int64, int64, filled(float64), filled(float64)))
def _direct(moves, turns, inverse, newest, count, room, direction):  # type: ignore[no-untyped-def]
    """Multiply the gradient in `direction` by the inverse curvature that the remembered steps tell.

    moves, turns : (m, n), changes of place and gradient; inverse : (m,), 1 / (move . turn); room : (m,)
    Source: Nocedal, Math. Comp. 1980 (two-loop recursion).
    """
    m, n = moves.shape
    for k in range(count):
        i = (newest - k) % m
        dot = 0.0
        for q in range(n):
            dot += moves[i, q] * direction[q]
        dot *= inverse[i]
        room[i] = dot
        for q in range(n):
            direction[q] -= dot * turns[i, q]
    if count > 0:
        square = 0.0
        for q in range(n):
            square += turns[newest, q] * turns[newest, q]
        scale = 1.0 / (inverse[newest] * square)
        for q in range(n):
            direction[q] *= scale
    for k in range(count - 1, -1, -1):
        i = (newest - k) % m
        dot = 0.0
        for q in range(n):
            dot += turns[i, q] * direction[q]
        dot = room[i] - dot * inverse[i]
        for q in range(n):
            direction[q] += dot * moves[i, q]


def descend(
    evaluate: Callable[[np.ndarray], tuple[float, np.ndarray]],
    start: np.ndarray,
    low: np.ndarray,
    high: np.ndarray,
    ended: Callable[[Step], bool],
) -> np.ndarray:
    """Descend to a nearby minimum.

    Parameters
    ----------
    evaluate : value and gradient at a place (n,)
    start : float (n,), within the bounds
    low, high : float (n,), may be infinite
    ended : asked after each step

    Returns
    -------
    float (n,): where it ended, by `ended` or because no step gains any more.

    Source: Nocedal, Math. Comp. 1980; bounds by projection with the held unknowns left out of the step
    (Bertsekas, SIAM J. Control Optim. 1982); step lengths by bisection (Lewis and Overton 2013).
    """
    n, bounded = len(start), bool(np.isfinite(low).any() or np.isfinite(high).any())
    moves, turns = np.zeros((2, MEMORY, n))
    inverse, room = np.zeros(MEMORY), np.zeros(MEMORY)
    newest, count, steps = -1, 0, 0
    x = start.copy()
    value, gradient = evaluate(x)
    while True:
        direction = gradient.copy()
        if bounded:
            held = ((x <= low) & (gradient > 0.0)) | ((x >= high) & (gradient < 0.0))
            direction[held] = 0.0
        _direct(moves, turns, inverse, newest, count, room, direction)
        if bounded:
            direction[held] = 0.0
        np.negative(direction, direction)
        slope = float(np.sum(direction * gradient))
        if not slope < 0.0:
            if not count:
                return x
            count = 0  # what was remembered no longer fits: steepest descent
            continue
        length = 1.0 if count else min(1.0, 0.1 / float(np.abs(direction).max()))
        found = _step(evaluate, x, value, gradient, direction, slope, length, (low, high) if bounded else None)
        if found is None:
            if not count:
                return x
            count = 0
            continue
        new_x, new_value, new_gradient = found
        move, turn = new_x - x, new_gradient - gradient
        x, value, gradient = new_x, new_value, new_gradient
        along, square = float(np.sum(move * turn)), float(np.sum(turn * turn))
        if along > 1e-12 * square and square > 0.0:
            newest = (newest + 1) % MEMORY
            count = min(count + 1, MEMORY)
            moves[newest], turns[newest], inverse[newest] = move, turn, 1.0 / along
        steps += 1
        if ended(Step(steps, value)):
            return x


def _step(
    evaluate: Callable[[np.ndarray], tuple[float, np.ndarray]],
    x: np.ndarray,
    value: float,
    gradient: np.ndarray,
    direction: np.ndarray,
    slope: float,
    length: float,
    bounds: tuple[np.ndarray, np.ndarray] | None,
) -> tuple[np.ndarray, float, np.ndarray] | None:
    """A step long enough and not too long: (place, value, gradient) there, or None where nothing gains."""
    shortest, longest = 0.0, np.inf
    best = None
    for _ in range(MOST_TRIES):
        there = x + length * direction
        if bounds is not None:
            np.clip(there, *bounds, out=there)
            expected = float(np.sum(gradient * (there - x)))
        else:
            expected = length * slope
        new_value, new_gradient = evaluate(there)
        if not new_value <= value + ENOUGH_GAIN * expected or not new_value < value:
            longest = length
            # the parabola through value, slope and new value, kept away from both ends
            fall = new_value - value - length * slope
            guess = -0.5 * slope * length * length / fall if fall > 0.0 else 0.0
            width = longest - shortest
            length = min(max(guess, shortest + 0.1 * width), longest - 0.5 * width)
        else:
            best = there, new_value, new_gradient
            if float(np.sum(new_gradient * direction)) >= ENOUGH_TURN * slope:
                break
            if bounds is not None and not np.array_equal(there, x + length * direction):
                break
            shortest = length
            length = 2.0 * length if longest == np.inf else 0.5 * (shortest + longest)
        if longest - shortest <= 1e-14 * longest:
            break
    return best
