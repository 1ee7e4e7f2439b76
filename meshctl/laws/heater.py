"""Heaters: phase grows with electrical power, through a resistance that may change with temperature.

change = arm 2 pi P / p2pi_mw (arm = -1 on the other arm of the cell), P = V^2 / R,
R = r_ohm (1 + r_rise T), T the heat in turns of 2 pi. Without
`heat_turns` the heater's own heat is T. The inverse is explicit; the forward then solves
T (1 + r_rise T) = V^2 / (r_ohm p2pi_mw), which for r_rise < 0 turns back at T = 1 / (2 |r_rise|): beyond it
a voltage source finds no stable temperature. A current source runs away where r_rise > 0 instead.

Public: Heater, HEATER_LAW, resistance_ohm, STABLE_SHARE.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from meshctl.errors import PowerOutOfRange, ResistanceNotPositive, ThermalRunaway
from meshctl.laws.law import MA_PER_A, MW_PER_W, SLACK, Breach, Law, Param, Params, Rows, raise_where
from meshctl.units import radians, turns

STABLE_SHARE = 0.9  # of the heat at the turning point; common practice: the last tenth is not used


def resistance_ohm(heat_turns: ArrayLike, r_ohm: ArrayLike, r_rise: ArrayLike) -> Rows:
    """Resistance at a heat of `heat_turns` turns of 2 pi.

    Raises
    ------
    ResistanceNotPositive
        Where the straight line through r_ohm with slope r_rise has fallen to zero.
    """
    heat = np.asarray(heat_turns, float)
    r = np.asarray(r_ohm, float) * (1.0 + np.asarray(r_rise, float) * heat)
    if not (r > 0.0).all():
        worst = np.unravel_index(int(np.argmin(np.nan_to_num(r, nan=-np.inf))), r.shape)
        raise ResistanceNotPositive(
            f"resistance is {r[worst]:.4g} ohm at a heat of {np.broadcast_to(heat, r.shape)[worst]:.4g} turns"
            f" of 2 pi, must be above 0 ohm",
            where=f"actuator {worst[-1]}" if worst else "",
            remedy="correct r_ohm and r_rise, or lower the power",
        )
    return r


class Heater(Law):
    """A resistive heater beside one arm."""

    name = "heater"
    moves = ("phase",)
    power_law = True
    params = (
        Param("p2pi_mw", "mW", None, 1e-6, 1e6, "power that turns the phase by 2 pi"),
        Param("r_ohm", "ohm", None, 1e-3, 1e9, "resistance with all heaters cold"),
        Param("offset_rad", "rad", 0.0, -1e6, 1e6, "phase with all heaters cold"),
        Param("r_rise", "", 0.0, -1.0, 10.0, "relative rise of the resistance per turn of 2 pi of heat"),
        Param("arm", "", 1.0, -1.0, 1.0, "1: the heater lies on the arm of the phase, -1: on the other arm"),
    )

    def breaches(self, p: Params) -> list[Breach]:
        arm = self.column(p, "arm")
        return [
            Breach(int(row), self.param("arm"), float(arm[row]), "1 or -1")
            for row in np.flatnonzero(np.abs(arm) != 1.0)
        ]

    def rest_rad(self, p: Params) -> Rows:
        return self.column(p, "offset_rad")

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        return self.column(p, "arm") * radians(self._own_turns(np.asarray(volts, float), p, heat_turns))

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        own, heat = self._own_and_heat(change_rad, p, heat_turns)
        rise, p2pi = self.column(p, "r_rise"), self.column(p, "p2pi_mw")
        r = resistance_ohm(heat, self.column(p, "r_ohm"), rise)
        # dV^2/dP of V^2 = P R(T) falls to zero at the turning point; own + turning is its heat
        turning = _own_at_turning(rise, heat - own)
        raise_where(
            ~(own <= STABLE_SHARE * turning + SLACK),
            ThermalRunaway,
            own / turning,
            lambda i: (
                f"{own[i] * _at(p2pi, i):.4g} mW is above {STABLE_SHARE * turning[i] * _at(p2pi, i):.4g} mW, "
                f"{STABLE_SHARE:g} of the power at which its falling resistance runs away"
            ),
            "take a whole turn off the phase, or drive it from a current source",
        )
        return np.sqrt(own * p2pi * r / MW_PER_W)

    def slope_rad_per_v(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        v = np.asarray(volts, float)
        own = self._own_turns(v, p, heat_turns)
        rise = self.column(p, "r_rise")
        heat = own if heat_turns is None else np.asarray(heat_turns, float)
        r = resistance_ohm(heat, self.column(p, "r_ohm"), rise)
        feedback = 1.0 + rise * own / (1.0 + rise * heat) if heat_turns is None else 1.0
        turn = 2.0 * MW_PER_W * v / (r * self.column(p, "p2pi_mw")) / feedback
        return self.column(p, "arm") * radians(turn)

    def branch_v(self, p: Params) -> tuple[Rows, Rows]:
        high = self.limits_v(p)[1]
        return np.zeros_like(high), high

    def limits_v(self, p: Params) -> tuple[Rows, Rows]:
        rise = self.column(p, "r_rise")
        heat = STABLE_SHARE * _own_at_turning(rise, np.zeros_like(rise))
        finite = np.where(np.isfinite(heat), heat, 0.0)
        square = finite * (1.0 + rise * finite) * self._scale_v2(p)
        high = np.where(np.isfinite(heat), np.sqrt(square), np.inf)
        return -high, high

    def resistance_ohm(self, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Resistance at `heat_turns`; cold without."""
        heat = 0.0 if heat_turns is None else heat_turns
        return resistance_ohm(heat, self.column(p, "r_ohm"), self.column(p, "r_rise"))

    def power_mw(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        return self._own_turns(np.asarray(volts, float), p, heat_turns) * self.column(p, "p2pi_mw")

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        return np.zeros(np.broadcast_shapes(np.shape(volts), (self.rows(p),)))

    # ---- current sources
    def change_at_ma(self, current_ma: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Change under a current source; ThermalRunaway where a rising resistance feeds itself."""
        current = np.asarray(current_ma, float) + np.zeros(self.rows(p))
        rise, p2pi = self.column(p, "r_rise"), self.column(p, "p2pi_mw")
        cold = np.square(current) / MA_PER_A * self.column(p, "r_ohm") / p2pi
        if heat_turns is not None:
            r = self.resistance_ohm(p, heat_turns)
            return self.column(p, "arm") * radians(np.square(current) / MA_PER_A * r / p2pi)
        raise_where(
            ~(rise * cold < 1.0),
            ThermalRunaway,
            rise * cold,
            lambda i: (
                f"{current[i]:.4g} mA is at or above {abs(current[i]) / np.sqrt((rise * cold)[i]):.4g} mA, "
                "where its rising resistance runs away"
            ),
            "lower the current, or drive it from a voltage source",
        )
        return self.column(p, "arm") * radians(cold / (1.0 - rise * cold))

    def milliamps(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Current that gives a change under a current source."""
        own, heat = self._own_and_heat(change_rad, p, heat_turns)
        r = resistance_ohm(heat, self.column(p, "r_ohm"), self.column(p, "r_rise"))
        return np.sqrt(own * self.column(p, "p2pi_mw") / r * MA_PER_A)

    # ---- inside
    def _scale_v2(self, p: Params) -> Rows:
        """V^2 of one turn in a cold heater."""
        return self.column(p, "r_ohm") * self.column(p, "p2pi_mw") / MW_PER_W

    def _own_and_heat(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None) -> tuple[Rows, Rows]:
        own = np.asarray(turns(np.asarray(change_rad, float))) * self.column(p, "arm")
        p2pi = self.column(p, "p2pi_mw")
        own = np.broadcast_to(own, np.broadcast_shapes(own.shape, p2pi.shape))
        raise_where(
            ~(own >= -SLACK),
            PowerOutOfRange,
            -own,
            lambda i: f"{own[i] * _at(p2pi, i):.4g} mW is below 0 mW, a heater only adds phase",
            "add whole turns of 2 pi to the phase",
        )
        own = np.maximum(own, 0.0)  # rounding within SLACK
        heat = own if heat_turns is None else np.broadcast_to(np.asarray(heat_turns, float), own.shape)
        return own, heat

    def _own_turns(self, volts: Rows, p: Params, heat_turns: ArrayLike | None) -> Rows:
        cold = np.square(volts) / self._scale_v2(p)
        rise = self.column(p, "r_rise")
        if heat_turns is not None:
            return cold * self.column(p, "r_ohm") / self.resistance_ohm(p, heat_turns)
        under = 1.0 + 4.0 * rise * cold
        volts = np.broadcast_to(volts, cold.shape)
        limit = np.sqrt(_own_at_turning(rise, np.zeros_like(rise)) / 2.0 * self._scale_v2(p))
        raise_where(
            ~(under >= 0.0),
            ThermalRunaway,
            -under,
            lambda i: (
                f"{abs(volts[i]):.4g} V is above {_at(limit, i):.4g} V, beyond which its falling resistance runs away"
            ),
            "lower the voltage, or drive it from a current source",
        )
        return 2.0 * cold / (1.0 + np.sqrt(under))


def _own_at_turning(rise: Rows, others: ArrayLike) -> Rows:
    """Own heat at which dV^2/dP = 1 + rise (others + 2 own) falls to zero; inf where it does not."""
    falling = rise < 0.0
    safe = np.where(falling, rise, -1.0)
    return np.where(falling, (1.0 + safe * np.asarray(others)) / (-2.0 * safe), np.inf)


def _at(rows: Rows, index: tuple[int, ...]) -> float:
    """A parameter's value for an entry whose last axis is the row."""
    return float(rows[index[-1]])


HEATER_LAW = Heater()
