"""Phase shifters that answer to the field or to carriers: linear and quadratic in the voltage.

change = linear_rad_per_v V + quadratic_rad_per_v2 V^2, both polarities, up to where it turns back at
V = -linear / (2 quadratic). The inverse takes the branch through 0 V in the form that loses no digits; with
no linear term it takes V >= 0.

Public: Pockels, Carrier, POCKELS_LAW, CARRIER_LAW.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from meshctl.errors import VoltageOutOfRange
from meshctl.laws.law import MW_PER_W, SLACK, Breach, Law, Param, Params, Rows, raise_where

COEFFICIENTS = (
    Param("linear_rad_per_v", "rad/V", 0.0, -1e6, 1e6, "phase per volt"),
    Param("quadratic_rad_per_v2", "rad/V^2", 0.0, -1e6, 1e6, "phase per square of the voltage"),
    Param("offset_rad", "rad", 0.0, -1e6, 1e6, "phase at 0 V"),
    Param("capacitance_ff", "fF", np.nan, 0.0, 1e9, "capacitance; left out: not known"),
)


class Pockels(Law):
    """A phase shifter by the electro-optic effect; draws no static current."""

    name = "pockels"
    moves = ("phase",)
    params: tuple[Param, ...] = COEFFICIENTS

    def breaches(self, p: Params) -> list[Breach]:
        a, b = self._coefficients(p)
        return [
            Breach(int(row), self.param("linear_rad_per_v"), 0.0, "not 0 where quadratic_rad_per_v2 is 0")
            for row in np.flatnonzero((a == 0.0) & (b == 0.0))
        ]

    def rest_rad(self, p: Params) -> Rows:
        return self.column(p, "offset_rad")

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        a, b = self._coefficients(p)
        v = np.asarray(volts, float)
        return v * (a + b * v)

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        a, b = self._coefficients(p)
        change = np.asarray(change_rad, float) + np.zeros_like(a)
        under = np.square(a) + 4.0 * b * change
        scale = np.square(a) + np.abs(4.0 * b * change)
        raise_where(
            ~(under >= -SLACK * scale) | ((a == 0.0) & (b == 0.0)),
            VoltageOutOfRange,
            -under,
            lambda i: (
                f"change of {change[i]:.6g} rad is beyond {_turning_rad(a[i[-1]], b[i[-1]]):.6g} rad, where "
                "the phase turns back over the voltage"
            ),
            "ask for another turn of 2 pi",
        )
        root = np.sqrt(np.maximum(under, 0.0))  # rounding within SLACK
        sum_ = a + np.where(a < 0.0, -root, root)
        return np.where(sum_ == 0.0, 0.0, 2.0 * change / np.where(sum_ == 0.0, 1.0, sum_))

    def slope_rad_per_v(
        self,
        volts: ArrayLike,
        p: Params,
        heat_turns: ArrayLike | None = None,  # noqa: ARG002
    ) -> Rows:
        a, b = self._coefficients(p)
        return a + 2.0 * b * np.asarray(volts, float)

    def branch_v(self, p: Params) -> tuple[Rows, Rows]:
        a, b = self._coefficients(p)
        turning = -a / np.where(b == 0.0, 1.0, 2.0 * b)
        low = np.where((b != 0.0) & (turning <= 0.0), turning, -np.inf)
        high = np.where((b != 0.0) & (turning > 0.0), turning, np.inf)
        return low, high

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        shape = np.broadcast_shapes(np.shape(volts), (self.rows(p),))
        return np.broadcast_to(self.column(p, "capacitance_ff"), shape)

    def _coefficients(self, p: Params) -> tuple[Rows, Rows]:
        return self.column(p, "linear_rad_per_v"), self.column(p, "quadratic_rad_per_v2")


class Carrier(Pockels):
    """A phase shifter by injected or depleted carriers; may draw a static current."""

    name = "carrier"
    params = (
        *COEFFICIENTS,
        Param("current_ma_per_v", "mA/V", 0.0, 0.0, 1e6, "static current per volt"),
    )

    def resistance_ohm(self, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        current = self.column(p, "current_ma_per_v")
        return np.where(current > 0.0, MW_PER_W / np.where(current > 0.0, current, 1.0), np.inf)


def _turning_rad(a: float, b: float) -> float:
    return 0.0 - a * a / (4.0 * b) if b else 0.0


POCKELS_LAW = Pockels()
CARRIER_LAW = Carrier()
