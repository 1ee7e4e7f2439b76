"""Measured tables as a law: a monotone curve through the rows and its own inverse, never extrapolated.

Public: Table, TABLE_LAW, check_table.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from meshctl.errors import OutsideMeasuredRange
from meshctl.laws.curves import Curves
from meshctl.laws.curves import check_table as check_table  # part of this module's face
from meshctl.laws.law import HANDLING, Law, Param, Params, Rows, raise_where

EDGE = 1e-13  # rounding that a value or volts at a table's very end may carry (relative)


class Table(Law):
    """A phase or an angle as it was measured.

    The rest is the value at 0 V. A table that does not cover 0 V has an unknown rest (NaN); changes then
    count from its first row, as `reference_rad` says. ``p["tables"]`` may be `Curves`, made once for many
    calls.
    """

    name = "table"
    moves = ("phase", "coupler")
    has_tables = True
    params = (
        Param("r_ohm", "ohm", np.inf, 1e-3, 1e9, "resistance; left out: draws no current"),
        Param("capacitance_ff", "fF", np.nan, 0.0, 1e9, "capacitance; left out: not known"),
        *HANDLING,
    )

    def rows(self, p: Params) -> int:
        return len(p["tables"])

    def check_rows(self, table: ArrayLike, where: str = "") -> None:
        check_table(table, where)

    def rest_rad(self, p: Params) -> Rows:
        curves = Curves.of(p["tables"])
        covered = (curves.low_v <= 0.0) & (curves.high_v >= 0.0)
        value = curves.at(np.where(covered, 0.0, curves.low_v))
        return np.where(covered, value, np.nan)

    def reference_rad(self, p: Params) -> Rows:
        return _reference(Curves.of(p["tables"]))

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        curves = Curves.of(p["tables"])
        return curves.at(_measured_volts(volts, curves)) - _reference(curves)

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        curves = Curves.of(p["tables"])
        value = np.asarray(change_rad, float) + _reference(curves)
        ends = curves.value[curves.start[:-1]], curves.value[curves.start[1:] - 1]
        low, high = np.minimum(*ends), np.maximum(*ends)
        slack = EDGE * (1.0 + np.maximum(np.abs(low), np.abs(high)))
        raise_where(
            ~((value >= low - slack) & (value <= high + slack)),
            OutsideMeasuredRange,
            np.maximum(low - value, value - high),
            lambda i: f"{value[i]:.6g} rad is outside its measured range of {low[i[-1]]:.6g} to {high[i[-1]]:.6g} rad",
            "ask for another branch or turn, or measure further",
        )
        return curves.volts_at(value)

    def slope_rad_per_v(
        self,
        volts: ArrayLike,
        p: Params,
        heat_turns: ArrayLike | None = None,  # noqa: ARG002
    ) -> Rows:
        curves = Curves.of(p["tables"])
        return curves.slope_at(_measured_volts(volts, curves))

    def limits_v(self, p: Params) -> tuple[Rows, Rows]:
        curves = Curves.of(p["tables"])
        return curves.low_v, curves.high_v

    def resistance_ohm(self, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        return self.column(p, "r_ohm")

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        shape = np.broadcast_shapes(np.shape(volts), (self.rows(p),))
        return np.broadcast_to(self.column(p, "capacitance_ff"), shape)


def _reference(curves: Curves) -> Rows:
    covered = (curves.low_v <= 0.0) & (curves.high_v >= 0.0)
    return curves.at(np.where(covered, 0.0, curves.low_v))


def _measured_volts(volts: ArrayLike, curves: Curves) -> Rows:
    v = np.asarray(volts, float)
    v = np.broadcast_to(v, np.broadcast_shapes(v.shape, curves.low_v.shape))
    low, high = curves.low_v, curves.high_v
    slack = EDGE * np.maximum(np.abs(low), np.abs(high))
    raise_where(
        ~((v >= low - slack) & (v <= high + slack)),
        OutsideMeasuredRange,
        np.maximum(low - v, v - high),
        lambda i: f"{v[i]:.6g} V is outside its measured range of {low[i[-1]]:g} to {high[i[-1]]:g} V",
        "stay inside, or measure further",
    )
    return np.clip(v, low, high)  # rounding within EDGE


TABLE_LAW = Table()
