"""What holding and changing a state costs: static power, ground currents, the hottest heater, energy per switch.

Public: Energy, energy.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from meshctl.plan.chip import Chip


@dataclass(frozen=True)
class Energy:
    """One state of one chip; NaN where a law does not know its capacitance."""

    hold_mw: float  # power to hold the state; mJ for each second held
    ground_ma: dict[str, float]  # current into each shared ground
    hottest: str  # the actuator that takes most power, "" where none takes any
    hottest_mw: float
    hottest_share: float  # of its channel's limit_mw; NaN without one
    switch_nj: float  # energy that the source gives to reach the state from power off
    actuators: int

    def held_nj(self, seconds: float) -> float:
        """Energy to reach the state and hold it."""
        return self.switch_nj + 1e6 * self.hold_mw * seconds


def energy(chip: Chip, codes: np.ndarray, before: np.ndarray | None = None) -> Energy:
    """Energy figures of a state.

    Parameters
    ----------
    codes : int64 (K,)
    before : codes of the state before; None: power off
    """
    levels = chip.levels(codes)
    power = chip.power_mw(levels)
    hot = int(np.argmax(power)) if len(power) else 0
    limit = float(chip.channels.limit_mw[chip.actuators.channel[hot]]) if len(power) else math.inf
    grounds: dict[str, float] = {}
    if chip.coupled and len(chip.channels.ground_ohm):
        from meshctl.plan.circuit import ground_currents_ma

        currents = ground_currents_ma(chip, levels[chip.actuators.channel])
        grounds = dict(zip(chip.channels.ground_names, currents.tolist(), strict=True))
    some = len(power) and power[hot] > 0.0
    return Energy(
        float(power.sum()),
        grounds,
        chip.mesh.actuator_names[hot] if some else "",
        float(power[hot]) if some else 0.0,
        float(power[hot]) / limit if some and math.isfinite(limit) else math.nan,
        _switch_nj(chip, chip.volts(levels), None if before is None else chip.volts(chip.levels(before))),
        len(power),
    )


def _switch_nj(chip: Chip, after: np.ndarray, before: np.ndarray | None) -> float:
    total = 0.0
    for group in chip.groups:
        rows = group.rows[~chip.actuators.dead[group.rows]]
        mine = ~chip.actuators.dead[group.rows]
        if not len(rows):
            continue
        p = {
            k: v[mine] if isinstance(v, np.ndarray) else [t for t, m in zip(v, mine, strict=True) if m]
            for k, v in group.p.items()
        }
        volts = after[chip.actuators.channel[rows]]
        start = np.zeros(len(rows)) if before is None else before[chip.actuators.channel[rows]]
        total += float(group.law.switch_energy_nj(start, volts, p).sum())
    return total
