"""Comb drives: fingers that slide past each other, travel growing as the square of the voltage.

travel = force_n_per_v2 (V - charge_v)^2 / stiffness. There is no pull-in along the travel; at
`side_travel_nm` the fingers snap sideways instead (Legtenberg, Groeneveld and Elwenspoek 1996, from memory).

Public: Comb, COMB_LAW.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from meshctl.laws.gap import COUPLING, FF_PER_F, M_PER_NM, NOMINAL_MARGIN, MovedCoupler
from meshctl.laws.law import HANDLING, Param, Params, Rows


class Comb(MovedCoupler):
    """A coupler moved by a comb drive."""

    name = "comb"
    params = (
        Param("force_n_per_v2", "N/V^2", None, 1e-15, 1e3, "pull per square of the voltage"),
        Param("stiffness_n_per_m", "N/m", None, 1e-6, 1e9, "stiffness of the springs along"),
        Param("side_travel_nm", "nm", None, 1e-3, 1e6, "travel where fingers snap sideways"),
        *COUPLING,
        Param("margin", "", NOMINAL_MARGIN, 0.0, 0.99, "share of the snapping voltage in use", open_low=True),
        Param("capacitance_ff", "fF", np.nan, 0.0, 1e9, "capacitance at rest; left out: not known"),
        *HANDLING,
    )

    def unstable_v(self, p: Params) -> Rows:
        """Voltage at which the travel reaches side_travel_nm."""
        force = self.column(p, "stiffness_n_per_m") * self.unstable_nm(p) * M_PER_NM
        return np.sqrt(force / self.column(p, "force_n_per_v2"))

    def unstable_nm(self, p: Params) -> Rows:
        return self.column(p, "side_travel_nm")

    def margin(self, p: Params) -> Rows:
        return self.column(p, "margin")

    def _travel_nm(self, share: Rows, p: Params) -> Rows:
        return self.unstable_nm(p) * np.square(share)

    def _share(self, travel_nm: Rows, p: Params) -> Rows:
        return np.sqrt(travel_nm / self.unstable_nm(p))

    def _travel_slope_nm(self, share: Rows, p: Params) -> Rows:
        return 2.0 * self.unstable_nm(p) * share

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        # the pull is half of dC/dx V^2
        grown = 2.0 * self.column(p, "force_n_per_v2") * self.travel_nm(volts, p) * M_PER_NM * FF_PER_F
        return self.column(p, "capacitance_ff") + grown


COMB_LAW = Comb()
