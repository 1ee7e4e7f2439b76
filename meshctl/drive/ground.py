"""Heaters whose resistance follows their temperature, on grounds that they share.

From wanted heat to volts every step is explicit: own heat P and heat T (turns of 2 pi) give R(T), the
voltage across the heater sqrt(P p2pi R), its current, and the terminal voltage, which is higher by the
rise of the group's ground: V = V_eff + R_ground * sum of currents. From volts to heat it is a system of
equations, which `balance` solves.

Rows are actuators. Several of them on one channel have the same drive in their rows.
Public: terminal_volts, working_point, Terminals, WorkingPoint.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.drive.balance import HeatBalance, at_ground, ground_sums
from meshctl.errors import NotFinite, PowerOutOfRange, ThermalRunaway
from meshctl.laws.heater import STABLE_SHARE, resistance_ohm
from meshctl.laws.law import MA_PER_A, MW_PER_W, raise_where

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Terminals:
    """What the source has to give, by actuator [A], and the rise of each ground [G]."""

    volts: Floats
    current_ma: Floats
    resistance_ohm: Floats
    ground_v: Floats


@dataclass(frozen=True, eq=False)
class WorkingPoint:
    """Where the heaters settle, by actuator [A], and the rise of each ground [G]."""

    own_turns: Floats
    heat_turns: Floats
    volts: Floats
    current_ma: Floats
    resistance_ohm: Floats
    ground_v: Floats
    steps: int


def terminal_volts(
    own_turns: ArrayLike,
    heat_turns: ArrayLike,
    r_ohm: ArrayLike,
    r_rise: ArrayLike,
    p2pi_mw: ArrayLike,
    group: ArrayLike,
    ground_ohm: ArrayLike,
) -> Terminals:
    """Terminal voltages and currents that give wanted heat.

    Parameters
    ----------
    own_turns : array [A], turns of 2 pi
        Heat that each heater makes, at least 0.
    heat_turns : array [A], turns of 2 pi
        Heat that each heater feels: its own and what its neighbours give.
    r_ohm, r_rise, p2pi_mw : arrays [A]
        Cold resistance, its relative rise per turn of heat, power of a turn.
    group : int array [A]
        Ground of each heater, -1 for one without resistance.
    ground_ohm : array [G]

    Returns
    -------
    Terminals

    Raises
    ------
    PowerOutOfRange
        Where less than no heat is wanted.
    ResistanceNotPositive
        Where the resistance falls to zero.
    ThermalRunaway
        Where a falling resistance leaves less than a tenth to the heat at which it runs away.

    Example
    -------
    >>> terminal_volts([1.0], [1.0], [600.0], [0.0], [24.0], [0], [1.0]).volts.round(6)
    array([3.801058])
    """
    own, heat, r_cold, rise, p2pi = _rows(own_turns, heat_turns, r_ohm, r_rise, p2pi_mw)
    ground, at = _grounds(group, ground_ohm)
    raise_where(
        ~(own >= 0.0),
        PowerOutOfRange,
        -own,
        lambda i: f"{own[i] * p2pi[i]:.4g} mW is below 0 mW, a heater only adds phase",
        "add whole turns of 2 pi to the phase",
    )
    r = resistance_ohm(heat, r_cold, rise)
    falling = rise < 0.0
    # with the neighbours' heat held, V^2 ~ P R(T) turns back at this own heat
    turning = np.where(falling, (1.0 + rise * (heat - own)) / np.where(falling, -2.0 * rise, 1.0), np.inf)
    raise_where(
        ~(own <= STABLE_SHARE * turning),
        ThermalRunaway,
        own / turning,
        lambda i: (
            f"{own[i] * p2pi[i]:.4g} mW is above {STABLE_SHARE * turning[i] * p2pi[i]:.4g} mW,"
            f" {STABLE_SHARE:g} of the power at which its falling resistance runs away"
        ),
        "take a whole turn off the phase, or drive it from a current source",
    )
    across = np.sqrt(own * p2pi * r / MW_PER_W)
    current = across / r
    rise_v = ground * ground_sums(current, at, len(ground))
    return Terminals(across + at_ground(rise_v, at), current * MA_PER_A, r, rise_v)


def working_point(
    drive: ArrayLike,
    r_ohm: ArrayLike,
    r_rise: ArrayLike,
    p2pi_mw: ArrayLike,
    group: ArrayLike,
    ground_ohm: ArrayLike,
    *,
    warming: Any = None,
    current_driven: ArrayLike = False,
    max_steps: int = 30,
) -> WorkingPoint:
    """Where heaters settle under given voltages or currents.

    Parameters
    ----------
    drive : array [A]
        V, or mA where `current_driven`.
    r_ohm, r_rise, p2pi_mw, group, ground_ohm
        As in `terminal_volts`.
    warming : scipy.sparse matrix or array [A, A], optional
        Heat at actuator row per heat of actuator column; the diagonal is left empty.
    current_driven : bool or bool array [A]
    max_steps : int

    Returns
    -------
    WorkingPoint

    Raises
    ------
    ThermalRunaway
        Where no stable temperature exists: a falling resistance on a voltage, a rising one on a current.
    ResistanceNotPositive
        Where the resistance falls to zero at the working point.
    GroundDiverges
        Where the currents through the shared ground do not settle.

    Example
    -------
    >>> working_point([3.801058], [600.0], [0.0], [24.0], [0], [1.0]).own_turns.round(6)
    array([1.])

    Cost: about four factorisations of the derivative [A, A]; without `warming`, of [G, G].
    """
    given, r_cold, rise, p2pi = _rows(drive, r_ohm, r_rise, p2pi_mw)
    by_current = np.broadcast_to(np.asarray(current_driven, bool), given.shape)
    ground, at = _grounds(group, ground_ohm)
    system = HeatBalance(given, by_current, r_cold, rise, p2pi / MW_PER_W, ground, at, warming)
    own, shared, steps = system.settle(max_steps)
    heat = system.heat(own)
    r = resistance_ohm(heat, r_cold, rise)
    system.require_stable(own, heat)
    rise_v = ground * shared
    current = np.where(by_current, given / MA_PER_A, (given - at_ground(rise_v, at)) / r)
    volts = np.where(by_current, current * r + at_ground(rise_v, at), given)
    return WorkingPoint(own, heat, volts, current * MA_PER_A, r, rise_v, steps)


def _rows(*values: ArrayLike) -> tuple[Floats, ...]:
    arrays = np.broadcast_arrays(*(np.asarray(v, float) for v in values))
    for array in arrays:
        if not np.isfinite(array).all():
            row = int(np.argmin(np.isfinite(array)))
            raise NotFinite(f"a drive, heat or parameter is {array[row]}", where=f"actuator {row}")
    return tuple(arrays)


def _grounds(group: ArrayLike, ground_ohm: ArrayLike) -> tuple[Floats, NDArray[np.int64]]:
    return np.asarray(ground_ohm, float), np.asarray(group, np.int64)
