"""Couplers moved by electrostatic force: parallel plates here, and what any moved coupler shares.

A voltage pulls a suspended part against its springs; the coupling angle falls exp(-gap / decay_nm) with
the optical gap, so angle = rest_rad exp(+-travel / decay_nm). The electrode gap and the optical gap are two
things: `direction` 1 says that the pull closes the optical gap (the angle rises), -1 that it opens it.
The force goes as (V - charge_v)^2: a charged insulator shifts the voltage of least force, and the inverse
answers on the side that `polarity` names, never on both.

Parallel plates (Senturia, Microsystem Design, 2001, from memory): k x = eps0 A (V - V0)^2 / (2 (g0 - x)^2).
With u = x / g0 and v = |V - V0| / V_PI this is u (1 - u)^2 = 4/27 v^2, which holds up to pull-in at
V_PI = sqrt(8 k g0^3 / (27 eps0 A)), u = 1/3. Its stable root is u = 4/3 sin^2(asin(v) / 3): all digits hold
down to v = 0, which the usual cosine form loses.

Public: MovedCoupler, Gap, GAP_LAW, pull_in_v, EPS0_F_PER_M.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from meshctl.errors import GapOutOfRange, PullIn
from meshctl.laws.law import HANDLING, SLACK, Breach, Law, Param, Params, Rows, raise_where

EPS0_F_PER_M = 8.8541878128e-12  # CODATA 2018
NOMINAL_MARGIN, MEASURED_MARGIN = 0.7, 0.8  # an undamped step pulls in at sqrt(27/32) = 0.919 V_PI
M_PER_NM, M2_PER_UM2, FF_PER_F = 1e-9, 1e-12, 1e15
END_SLACK = 1e-9  # relative; the inverse loses this much where travel is steep in volts


def pull_in_v(stiffness_n_per_m: ArrayLike, gap_nm: ArrayLike, area_um2: ArrayLike) -> Rows:
    """Voltage at which parallel plates collapse.

    Source: Senturia (2001), pull-in of a parallel-plate actuator, from memory.
    """
    k, g, area = (np.asarray(a, float) for a in (stiffness_n_per_m, gap_nm, area_um2))
    return np.sqrt(8.0 * k * (g * M_PER_NM) ** 3 / (27.0 * EPS0_F_PER_M * area * M2_PER_UM2))


COUPLING = (
    Param("decay_nm", "nm", None, 1e-3, 1e6, "gap over which the coupling falls by e"),
    Param("rest_rad", "rad", None, 1e-6, 1e6, "angle with the springs at rest"),
    Param("direction", "", 1.0, -1.0, 1.0, "1: travel closes the optical gap, -1: travel opens it"),
    Param(
        "optical_gap_nm",
        "nm",
        np.nan,
        1e-3,
        1e6,
        "optical gap at rest; left out: never closed",
    ),
    Param("charge_v", "V", 0.0, -1e3, 1e3, "voltage of least force, shifted by trapped charge"),
    Param("polarity", "", 1.0, -1.0, 1.0, "side of charge_v on which the drive stays: 1 above, -1 below"),
    Param("decay_slope_per_nm", "1/nm", 0.0, -1.0, 1.0, "relative growth of decay_nm per nm of wavelength"),
    Param("phase_rad_per_nm", "rad/nm", 0.0, -1e6, 1e6, "parasitic phase per nm of travel"),
    Param("phase_rad_per_nm2", "rad/nm^2", 0.0, -1e6, 1e6, "parasitic phase per nm^2 of travel"),
)


class MovedCoupler(Law):
    """A coupler whose optical gap an electrostatic force changes.

    Members say where the part becomes unstable and how travel and voltage go together below that, in
    shares of the unstable voltage.
    """

    moves = ("coupler",)

    def unstable_v(self, p: Params) -> Rows:
        """Distance from charge_v at which the part snaps."""
        raise NotImplementedError

    def unstable_nm(self, p: Params) -> Rows:
        """Travel at which the part snaps."""
        raise NotImplementedError

    def margin(self, p: Params) -> Rows:
        """Share of the unstable voltage that may be used."""
        raise NotImplementedError

    def _travel_nm(self, share: Rows, p: Params) -> Rows:
        raise NotImplementedError

    def _share(self, travel_nm: Rows, p: Params) -> Rows:
        raise NotImplementedError

    def _travel_slope_nm(self, share: Rows, p: Params) -> Rows:
        """Derivative of the travel by the share; inf at the unstable end."""
        raise NotImplementedError

    def breaches(self, p: Params) -> list[Breach]:
        found = []
        for name in ("direction", "polarity"):
            values = self.column(p, name)
            for row in np.flatnonzero(np.abs(values) != 1.0):
                found.append(Breach(int(row), self.param(name), float(values[row]), "-1 or 1"))
        return found

    # ---- travel
    def travel_nm(self, volts: ArrayLike, p: Params) -> Rows:
        """Travel from the unstressed springs; PullIn beyond the unstable voltage."""
        distance, end = self._distance(volts, p), self.unstable_v(p)
        share = np.abs(distance) / end
        raise_where(
            ~(share <= 1.0),
            PullIn,
            share,
            lambda i: f"{np.abs(distance[i]):.4g} V from charge_v is above {end[i[-1]]:.4g} V, where it pulls in",
            f"stay below {NOMINAL_MARGIN:g} to {MEASURED_MARGIN:g} of it",
        )
        travel, stop = self._travel_nm(share, p), self._stop_nm(p)
        raise_where(
            ~(travel <= stop * (1.0 + END_SLACK)),
            GapOutOfRange,
            travel - stop,
            lambda i: f"travel of {travel[i]:.4g} nm is above its optical gap of {stop[i[-1]]:.4g} nm",
            "lower the voltage",
        )
        return travel

    def _distance(self, volts: ArrayLike, p: Params) -> Rows:
        return np.asarray(volts, float) - self.column(p, "charge_v")

    def _stop_nm(self, p: Params) -> Rows:
        """Travel at which the optical gap is closed; inf where it opens or is not given."""
        gap = self.column(p, "optical_gap_nm")
        return np.where((self.column(p, "direction") > 0.0) & np.isfinite(gap), gap, np.inf)

    def _sign_over_decay(self, p: Params) -> Rows:
        return self.column(p, "direction") / self.column(p, "decay_nm")

    def _end_share(self, p: Params) -> Rows:
        """Highest share in use: the margin, or less where the optical gap closes first."""
        margin, stop = self.margin(p), self._stop_nm(p)
        closes = stop < self._travel_nm(margin, p)
        return np.where(closes, self._share(np.where(closes, stop, 0.0), p), margin)

    # ---- volts to angle and back
    def rest_rad(self, p: Params) -> Rows:
        return self.column(p, "rest_rad") * np.exp(self._sign_over_decay(p) * self.travel_nm(0.0, p))

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        moved = self.travel_nm(volts, p) - self.travel_nm(0.0, p)
        return self.rest_rad(p) * np.expm1(self._sign_over_decay(p) * moved)

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        rest, per_nm = self.rest_rad(p), self._sign_over_decay(p)
        change = np.asarray(change_rad, float) + np.zeros_like(rest)
        raise_where(
            ~(change > -rest),
            GapOutOfRange,
            -change,
            lambda i: f"angle of {rest[i[-1]] + change[i]:.4g} rad is not above 0 rad, which no gap gives",
            "take another branch of the angle",
        )
        travel = self.travel_nm(0.0, p) + np.log1p(change / rest) / per_nm
        rounding = SLACK * np.abs(1.0 / per_nm)
        raise_where(
            ~(travel >= -rounding),
            GapOutOfRange,
            -travel,
            lambda i: (
                f"angle of {rest[i[-1]] + change[i]:.6g} rad needs {-travel[i]:.4g} nm of travel against the "
                f"pull; it can only {'rise' if per_nm[i[-1]] > 0 else 'fall'} from "
                f"{self.column(p, 'rest_rad')[i[-1]]:.6g} rad"
            ),
            "take another branch of the angle",
        )
        travel = np.maximum(travel, 0.0)  # rounding within SLACK
        return self.column(p, "charge_v") + self.column(p, "polarity") * self._pull_v(travel, p)

    def _pull_v(self, travel: Rows, p: Params) -> Rows:
        """Distance from charge_v that holds a travel, checked against the margin and the optical gap."""
        end, margin, unstable = self.unstable_v(p), self.margin(p), self.unstable_nm(p)
        raise_where(
            ~(travel < unstable),
            PullIn,
            travel / unstable,
            lambda i: (
                f"travel of {travel[i]:.4g} nm is not below {unstable[i[-1]]:.4g} nm, where it pulls in at "
                f"{end[i[-1]]:.4g} V; margin {margin[i[-1]]:g} allows {margin[i[-1]] * end[i[-1]]:.4g} V"
            ),
            "take another branch of the angle",
        )
        share = self._share(travel, p)
        raise_where(
            ~(share <= margin * (1.0 + END_SLACK)),
            PullIn,
            share,
            lambda i: (
                f"{share[i] * end[i[-1]]:.4g} V is above {margin[i[-1]] * end[i[-1]]:.4g} V, "
                f"margin {margin[i[-1]]:g} below the pull-in at {end[i[-1]]:.4g} V"
            ),
            "take another branch of the angle, or measure V_PI and raise margin",
        )
        stop = self._stop_nm(p)
        raise_where(
            ~(travel <= stop * (1.0 + END_SLACK)),
            GapOutOfRange,
            travel - stop,
            lambda i: f"travel of {travel[i]:.4g} nm is above its optical gap of {stop[i[-1]]:.4g} nm",
            "take another branch of the angle",
        )
        return share * end

    def slope_rad_per_v(
        self,
        volts: ArrayLike,
        p: Params,
        heat_turns: ArrayLike | None = None,  # noqa: ARG002
    ) -> Rows:
        angle = self.rest_rad(p) + self.change_rad(volts, p)
        distance, end = self._distance(volts, p), self.unstable_v(p)
        nm_per_v = self._travel_slope_nm(np.abs(distance) / end, p) * np.sign(distance) / end
        return angle * self._sign_over_decay(p) * nm_per_v

    def parasitic_phase_rad(self, volts: ArrayLike, p: Params) -> Rows:
        x, x0 = self.travel_nm(volts, p), self.travel_nm(0.0, p)
        linear, square = self.column(p, "phase_rad_per_nm"), self.column(p, "phase_rad_per_nm2")
        return (x - x0) * (linear + square * (x + x0))

    def angle_slope_per_nm(self, volts: ArrayLike, p: Params) -> Rows:
        """d ln(angle) / d lambda by the travel: a longer wavelength reaches further across the gap."""
        return -self._sign_over_decay(p) * self.travel_nm(volts, p) * self.column(p, "decay_slope_per_nm")

    # ---- limits
    def limits_v(self, p: Params) -> tuple[Rows, Rows]:
        charge, far = self.column(p, "charge_v"), self._end_share(p) * self.unstable_v(p)
        return charge - far, charge + far

    def branch_v(self, p: Params) -> tuple[Rows, Rows]:
        low, high = self.limits_v(p)
        charge, above = self.column(p, "charge_v"), self.column(p, "polarity") > 0.0
        return np.where(above, charge, low), np.where(above, high, charge)


class Gap(MovedCoupler):
    """Parallel plates: a coupler on springs that pull in at a third of the electrode gap."""

    name = "gap"
    params = (
        Param("gap_nm", "nm", None, 1e-3, 1e6, "electrode gap with the springs at rest"),
        Param("stiffness_n_per_m", "N/m", None, 1e-6, 1e9, "stiffness of the springs"),
        Param("area_um2", "um^2", None, 1e-6, 1e9, "area of the electrodes"),
        *COUPLING,
        Param("v_pi_v", "V", np.nan, 1e-6, 1e6, "measured pull-in; left out: from the plates"),
        Param(
            "margin",
            "",
            np.nan,
            0.0,
            0.99,
            f"share of the pull-in voltage in use; left out: {MEASURED_MARGIN} of a measured one, "
            f"{NOMINAL_MARGIN} of a nominal one",
            open_low=True,
        ),
        *HANDLING,
    )

    def unstable_v(self, p: Params) -> Rows:
        """Pull-in voltage: the measured one, else that of the plates."""
        measured = self.column(p, "v_pi_v")
        plates = pull_in_v(*(self.column(p, n) for n in ("stiffness_n_per_m", "gap_nm", "area_um2")))
        return np.where(np.isnan(measured), plates, measured)

    def unstable_nm(self, p: Params) -> Rows:
        return self.column(p, "gap_nm") / 3.0

    def margin(self, p: Params) -> Rows:
        given = self.column(p, "margin")
        default = np.where(np.isnan(self.column(p, "v_pi_v")), NOMINAL_MARGIN, MEASURED_MARGIN)
        return np.where(np.isnan(given), default, given)

    def _travel_nm(self, share: Rows, p: Params) -> Rows:
        return self.column(p, "gap_nm") * (4.0 / 3.0) * np.square(np.sin(np.arcsin(share) / 3.0))

    def _share(self, travel_nm: Rows, p: Params) -> Rows:
        u = travel_nm / self.column(p, "gap_nm")
        return np.sqrt(6.75 * u) * (1.0 - u)

    def _travel_slope_nm(self, share: Rows, p: Params) -> Rows:
        third = np.arcsin(share) / 3.0
        cosine = np.sqrt((1.0 - share) * (1.0 + share))
        slope = (4.0 / 9.0) * np.sin(2.0 * third) / np.where(cosine > 0.0, cosine, 1.0)
        return self.column(p, "gap_nm") * np.where(cosine > 0.0, slope, np.inf)

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        plates_nm = self.column(p, "gap_nm") - self.travel_nm(volts, p)
        area = self.column(p, "area_um2") * M2_PER_UM2
        return FF_PER_F * EPS0_F_PER_M * area / (plates_nm * M_PER_NM)


GAP_LAW = Gap()
