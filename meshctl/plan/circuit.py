"""Heaters of a chip on their shared grounds: the rows that `drive.ground` takes, both ways.

Public: working_changes, terminal_volts, ground_rise.
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


def _terminals(chip: Chip, change: np.ndarray) -> tuple[ground.Terminals, np.ndarray]:
    """What the source has to give for own changes [A], and the ground of each live heater."""
    rows, electrical = _heaters(chip)
    heat = turns(chip.total_changes(change)[chip.actuators.setting[rows]])
    try:
        return ground.terminal_volts(turns(change[rows]), heat, **electrical), electrical["group"]
    except DriveFinding as finding:
        raise finding.named([chip.mesh.actuator_names[a] for a in rows.tolist()]) from None


def terminal_volts(chip: Chip, change: np.ndarray) -> np.ndarray:
    """Terminal volts of the live heaters for own changes [A]."""
    return _terminals(chip, change)[0].volts


def ground_rise(chip: Chip, change: np.ndarray) -> np.ndarray:
    """Volts by which the ground of each live heater rises for own changes [A]."""
    terminals, group = _terminals(chip, change)
    return np.append(terminals.ground_v, 0.0)[group]
