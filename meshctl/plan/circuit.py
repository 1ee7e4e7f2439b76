"""Heaters of a chip on their shared grounds: the rows that `drive.ground` takes, both ways.

Public: working_changes, terminal_volts.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.drive import ground
from meshctl.errors import DriveFinding
from meshctl.units import radians, turns

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.plan.chip import Chip


def _heaters(chip: Chip) -> tuple[np.ndarray, dict[str, Any]]:
    """The live heaters and their electrical parameters."""
    rows, params = chip.resistive, chip.actuators.params
    at = chip.channels.ground[chip.actuators.channel[rows]]
    return rows, {
        "r_ohm": params["r_ohm"][rows],
        "r_rise": params["r_rise"][rows],
        "p2pi_mw": params["p2pi_mw"][rows],
        "group": np.where(chip.ground_ohm[rows] > 0.0, at, -1),
        "ground_ohm": chip.channels.ground_ohm,
    }


def working_changes(chip: Chip, volts: np.ndarray) -> np.ndarray:
    """Own changes (rad) of the live heaters for their terminal volts."""
    rows, electrical = _heaters(chip)
    matrix = chip.actuators.crosstalk
    warming = None if matrix is None else matrix.tocsr()[chip.actuators.setting[rows]][:, rows]
    try:
        point = ground.working_point(volts, **electrical, warming=warming)
    except DriveFinding as finding:
        raise finding.named([chip.mesh.actuator_names[a] for a in rows.tolist()]) from None
    return np.asarray(radians(point.own_turns))


def terminal_volts(chip: Chip, change: np.ndarray, heat_turns: np.ndarray) -> np.ndarray:
    """Terminal volts of the live heaters for own changes [A] and the heat [A] that they feel."""
    rows, electrical = _heaters(chip)
    try:
        return ground.terminal_volts(turns(change[rows]), heat_turns[rows], **electrical).volts
    except DriveFinding as finding:
        raise finding.named([chip.mesh.actuator_names[a] for a in rows.tolist()]) from None
