"""How far as-built parts scatter about their drawn values: one error model for dies drawn at random.

Public: Spread, drawn.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np


@dataclass(frozen=True)
class Spread:
    """Standard deviations of independent normal scatter, part by part; 0 where nothing scatters."""

    split_rad: float = 0.0  # angle of every coupler
    phase_rad: float = 0.0  # offset of every phase actuator
    loss_db: float = 0.0  # loss of every coupler, never below 0
    p2pi_share: float = 0.0  # power for 2 pi, as a share of its nominal
    r_share: float = 0.0  # resistance, as a share of its nominal

    @classmethod
    def keys(cls) -> tuple[str, ...]:
        return tuple(f.name for f in fields(cls))


@dataclass(frozen=True)
class Draw:
    """One die drawn from a spread."""

    error_rad: np.ndarray  # f64[E]
    loss_db: np.ndarray  # f64[E]
    offset_rad: np.ndarray  # f64[A]
    p2pi_factor: np.ndarray  # f64[A]
    r_factor: np.ndarray  # f64[A]


def drawn(spread: Spread, is_coupler: np.ndarray, loss_db: np.ndarray, n_actuators: int, seed: int) -> Draw:
    """Draw one die.

    Parameters
    ----------
    is_coupler : bool (E,)
    loss_db : float (E,), nominal loss
    seed : int, for numpy's PCG64; the order of draws is splitting, loss, offset, p2pi, r

    Returns
    -------
    Draw
    """
    rng = np.random.default_rng(seed)
    n = int(is_coupler.sum())
    error, loss = np.zeros(len(is_coupler)), loss_db.copy()
    error[is_coupler] = spread.split_rad * rng.standard_normal(n)
    loss[is_coupler] = np.abs(loss[is_coupler] + spread.loss_db * rng.standard_normal(n))
    return Draw(
        error,
        loss,
        spread.phase_rad * rng.standard_normal(n_actuators),
        np.exp(spread.p2pi_share * rng.standard_normal(n_actuators)),
        np.exp(spread.r_share * rng.standard_normal(n_actuators)),
    )
