"""What a solver answers: settings, how near they come, and why it stopped.

Public: Solution, Shortfall, REASONS.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np

# the closed list: why the answer is as it is, a sentence each
REASONS = {
    "exact": "The closed form reaches the target on this chip.",
    "losses": "The closed form is exact but for losses that differ from path to path.",
    "fixed_parts": "The closed form is exact but for fixed parts, such as taps, that no setting undoes.",
    "out_of_range": "Some cells cannot be set as the closed form wants; the nearest they reach was used.",
    "guess": "The closed form of the nearest unitary matrix was taken; a refinement comes nearer to what was asked.",
    "no_output_phases": "The target fixes output phases, and the mesh has nothing to set them with.",
    "limits": "Some actuators were held at their limits.",
    "codes": "The source has too few bits to come closer.",
    "met": "What was asked is met to rounding.",
    "converged": "No settings nearby come closer.",
    "steps": "The refinement took all the steps it may; the best so far is given.",
    "time": "The time allowed ran out; the best so far is given.",
    "stopped": "It was stopped on request; the best so far is given.",
    "found": "All routes were found.",
    "partly": "Routes of lower priority were left out, as they stand in the way of others.",
    "impossible": "Proved: no states of this chip give these routes.",
    "impossible_within": "Proved within a bound only: no routes exist that are not much longer than their shortest.",
    "not_found": "None were found in the time given, and none were proved impossible.",
}


@dataclass(frozen=True)
class Shortfall:
    """A setting that cannot be where it is wanted."""

    setting: int
    wanted_rad: float
    used_rad: float
    cross_power_off: float  # for a splitting: used minus wanted cross power; 0 for a phase

    @property
    def off_rad(self) -> float:
        return self.used_rad - self.wanted_rad


@dataclass(frozen=True, eq=False)
class Solution:
    """Settings before any electronics.

    `matrix_error` and `fidelity` are those of the chip as it is known, losses included.
    """

    settings: np.ndarray  # f64[S], rad
    fidelity: float
    matrix_error: float
    reason: str  # a key of REASONS
    shortfalls: tuple[Shortfall, ...] = ()
    free_settings: np.ndarray = field(default_factory=lambda: np.empty(0, np.int32))
    counts: dict[str, int] = field(default_factory=dict)
    objective: float = math.nan  # value reached by a refinement, 0 is met
