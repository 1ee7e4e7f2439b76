"""What each setting can be, as plain arrays: the solver sees no actuator.

Public: Reach, full_reach.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, eq=False)
class Reach:
    """Bounds of every setting in rad; a stuck or dead one has low = high and no period."""

    low: np.ndarray  # f64[S]
    high: np.ndarray  # f64[S]
    period: np.ndarray  # f64[S], 2 pi for phases that may wrap, else 0
    idle: np.ndarray  # f64[S], where the setting stands without drive


def full_reach(is_angle: np.ndarray) -> Reach:
    """Phases that turn fully and couplers from bar to two full crossings: no electronics in the way."""
    high = np.full(len(is_angle), 2.0 * np.pi)
    zero = np.zeros(len(is_angle))
    return Reach(zero, high, np.where(is_angle, 0.0, 2.0 * np.pi), zero)
