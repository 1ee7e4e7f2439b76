"""Heaters of a chip on their shared grounds: the rows that `drive.ground` takes, both ways.

Public: working_changes, working_volts, ground_currents_ma, heat_turns, heater_levels, ground_rise.
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


def _warming(chip: Chip, rows: np.ndarray) -> Any:
    """Heat at each live heater per heat of each: the size of the phase crosstalk stands for it."""
    matrix = chip.actuators.crosstalk
    return None if matrix is None else abs(matrix.tocsr()[chip.actuators.setting[rows]][:, rows])


def _settled(chip: Chip, levels: np.ndarray) -> ground.WorkingPoint:
    """Where the live heaters settle for the level [A] of each actuator's channel."""
    rows, electrical = _heaters(chip)
    try:
        return ground.working_point(
            levels[rows], **electrical, warming=_warming(chip, rows), current_driven=chip.by_current[rows]
        )
    except DriveFinding as finding:
        raise finding.named([chip.mesh.actuator_names[a] for a in rows.tolist()]) from None


def working_changes(chip: Chip, levels: np.ndarray) -> np.ndarray:
    """Own changes (rad) of the live heaters for the level [A] of each actuator's channel."""
    return np.asarray(chip.arm[chip.resistive] * radians(_settled(chip, levels).own_turns))


def working_volts(chip: Chip, levels: np.ndarray) -> np.ndarray:
    """Terminal volts of the live heaters for the level [A] of each actuator's channel."""
    return _settled(chip, levels).volts


def ground_currents_ma(chip: Chip, levels: np.ndarray) -> np.ndarray:
    """Current into each shared ground, mA[G], for the level [A] of each actuator's channel."""
    rows, _ = _heaters(chip)
    at = chip.channels.ground[chip.actuators.channel[rows]]
    current = _settled(chip, levels).current_ma
    return np.bincount(at[at >= 0], current[at >= 0], minlength=len(chip.channels.ground_ohm))


def _terminals(chip: Chip, change: np.ndarray) -> tuple[ground.Terminals, np.ndarray]:
    """What the source has to give for own changes [A], and the ground of each live heater."""
    rows, electrical = _heaters(chip)
    own = turns(chip.arm * change)[rows]
    try:
        return ground.terminal_volts(own, heat_turns(chip, change)[rows], **electrical), electrical["group"]
    except DriveFinding as finding:
        raise finding.named([chip.mesh.actuator_names[a] for a in rows.tolist()]) from None


def heat_turns(chip: Chip, change: np.ndarray) -> np.ndarray:
    """Heat [A], in turns of 2 pi, that each live heater feels for own changes [A]: its own and its neighbours'."""
    rows = chip.resistive
    own = turns(chip.arm * change)[rows]
    warming = _warming(chip, rows)
    heat = np.zeros(len(chip.actuators))
    heat[rows] = own if warming is None else own + warming @ own
    return heat


def heater_levels(chip: Chip, change: np.ndarray) -> np.ndarray:
    """What the source gives each live heater for own changes [A]: terminal volts, or mA."""
    terminals = _terminals(chip, change)[0]
    return np.where(chip.by_current[chip.resistive], terminals.current_ma, terminals.volts)


def ground_rise(chip: Chip, change: np.ndarray) -> np.ndarray:
    """Volts by which the ground of each live heater rises for own changes [A]."""
    terminals, group = _terminals(chip, change)
    return np.append(terminals.ground_v, 0.0)[group]
