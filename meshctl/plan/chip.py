"""The one forward path, codes -> volts -> own changes -> settings -> light, and the limits along it.

Prediction, trials and rehearsals all go this way; nothing here inverts anything.
Public: Chip, Bounds.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from meshctl.drive.codes import Source
from meshctl.errors import WrongSize
from meshctl.laws.law import MA_PER_A, MW_PER_W
from meshctl.mesh.actuation import law_groups
from meshctl.mesh.graph import AsBuilt, Mesh
from meshctl.mesh.response import Response
from meshctl.units import TWO_PI, turns


@dataclass(frozen=True, eq=False)
class Bounds:
    """Terminal volts that each actuator may be given, all limits of source and actuator counted."""

    low_v: np.ndarray  # f64[A]
    high_v: np.ndarray  # f64[A]


class Chip:
    """A mesh with its electronics.

    Parameters
    ----------
    mesh : Mesh
    """

    def __init__(self, mesh: Mesh) -> None:
        self.mesh = mesh
        self.net, self.actuators, self.channels = mesh.net, mesh.actuators, mesh.channels
        self.groups = law_groups(mesh.actuators)

    @cached_property
    def response(self) -> Response:
        return Response(self.net, self.mesh.as_built)

    @cached_property
    def source(self) -> Source:
        """Codes to levels and back: V, or mA on channels that drive current."""
        c = self.channels
        low, high = np.where(c.by_current, c.min_ma, c.min_v), np.where(c.by_current, c.max_ma, c.max_v)
        return Source(c.bits, low, high, c.offset_v, c.gain)

    def levels(self, codes: np.ndarray) -> np.ndarray:
        """Levels [K] of codes [K]: terminal volts, or mA on channels that drive current."""
        if codes.shape != (len(self.channels),):
            raise WrongSize(f"{codes.shape} codes for {len(self.channels)} channels")
        return self.source.volts_of(codes)

    @cached_property
    def by_current(self) -> np.ndarray:
        """Actuators on channels that drive current, bool[A]."""
        return np.asarray(self.channels.by_current[self.actuators.channel])

    def volts(self, levels: np.ndarray) -> np.ndarray:
        """Terminal volts [K] for levels [K]."""
        if not self.channels.by_current.any():
            return levels
        from meshctl.plan.circuit import working_volts

        volts = np.where(self.channels.by_current, 0.0, levels)
        at = working_volts(self, levels[self.actuators.channel])
        driven = self.resistive[self.by_current[self.resistive]]
        volts[self.actuators.channel[driven]] = at[self.by_current[self.resistive]]
        return volts

    @cached_property
    def reference_rad(self) -> np.ndarray:
        """Value of every setting without drive, f64[S]."""
        reference = np.zeros(self.net.n_settings)
        for group in self.groups:
            np.add.at(reference, self.actuators.setting[group.rows], group.law.reference_rad(group.p))
        return reference

    @cached_property
    def resistive(self) -> np.ndarray:
        """Live actuators whose law dissipates through a resistance, i64."""
        rows = [group.rows for group in self.groups if group.law.power_law]
        every = np.sort(np.concatenate(rows)) if rows else np.empty(0, np.int64)
        return every[~self.actuators.dead[every]]

    @cached_property
    def ground_ohm(self) -> np.ndarray:
        """Resistance of the shared ground of every actuator, f64[A], 0 where there is none."""
        ground = self.channels.ground[self.actuators.channel]
        return np.append(self.channels.ground_ohm, 0.0)[ground]  # -1 is the last: none

    @cached_property
    def coupled(self) -> bool:
        """True where actuators share a ground, warm one another's resistance, or are driven by current."""
        rows = self.resistive
        if self.by_current[rows].any():
            return True
        rise = self.actuators.params.get("r_rise")
        warms = rise is not None and bool((np.nan_to_num(rise[rows]) != 0.0).any())
        return bool((self.ground_ohm[rows] > 0.0).any()) or (warms and self.actuators.crosstalk is not None)

    def own_changes(self, levels: np.ndarray) -> np.ndarray:
        """Change [A] that every actuator gives its own setting, for levels [K] of the source."""
        at = levels[self.actuators.channel]
        change = np.zeros(len(self.actuators))
        for group in self.groups:
            if not (group.law.power_law and self.coupled):
                change[group.rows] = group.law.change_rad(at[group.rows], group.p)
        if self.coupled:
            from meshctl.plan.circuit import working_changes

            change[self.resistive] = working_changes(self, at)
        change[self.actuators.dead] = 0.0
        return change

    def total_changes(self, change: np.ndarray) -> np.ndarray:
        """Change [S] of every setting from own changes [A], neighbours included."""
        total = np.bincount(self.actuators.setting, change, minlength=self.net.n_settings)
        if self.actuators.crosstalk is not None:
            total = total + self.actuators.crosstalk @ change
        return total

    def actual(self, codes: np.ndarray) -> np.ndarray:
        """Settings [S] that the codes give, stuck ones at their stuck values."""
        settings = self.reference_rad + self.total_changes(self.own_changes(self.levels(codes)))
        return self.mesh.as_built.in_force(settings)

    @cached_property
    def drag(self) -> np.ndarray | None:
        """Rows of the phase parts that moving couplers drag along, i32[S, 2]; None where none does."""
        if not any(
            "phase_rad_per_nm" in group.p and group.p["phase_rad_per_nm"].any() for group in self.groups
        ) and not any("phase_rad_per_nm2" in group.p and group.p["phase_rad_per_nm2"].any() for group in self.groups):
            return None
        from meshctl.mesh.drag import drag_rows

        return drag_rows(self.net)

    def as_built(self, levels: np.ndarray) -> AsBuilt:
        """The die as it is at levels [K]: with the phases that moved couplers drag along."""
        if self.drag is None:
            return self.mesh.as_built
        error = self.mesh.as_built.error_rad.copy()
        at = levels[self.actuators.channel]
        for group in self.groups:
            phase = group.law.parasitic_phase_rad(at[group.rows], group.p)
            for a, extra in zip(group.rows.tolist(), phase.tolist(), strict=True):
                rows = self.drag[self.actuators.setting[a]]
                if rows[0] >= 0 and not self.actuators.dead[a]:
                    error[rows] += extra
        return replace(self.mesh.as_built, error_rad=error)

    def response_at(self, codes: np.ndarray) -> Response:
        """The response of the die as it is at these codes."""
        return self.response if self.drag is None else Response(self.net, self.as_built(self.levels(codes)))

    def matrix(self, codes: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> np.ndarray:
        """Field matrix for codes: (out, in), or (W, out, in) where wavelengths are given."""
        return self.response_at(codes).matrix(self.actual(codes), wavelengths_nm)

    def powers(self, codes: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> np.ndarray:
        """Power at every output for unit power in every input: |matrix|^2."""
        return np.asarray(np.abs(self.matrix(codes, wavelengths_nm)) ** 2)

    def power_mw(self, levels: np.ndarray, change: np.ndarray | None = None) -> np.ndarray:
        """Static power [A] of every actuator for levels [K] of the source; `change` where it is known already."""
        at = levels[self.actuators.channel]
        power = np.zeros(len(self.actuators))
        change = self.own_changes(levels) if change is None else change
        for group in self.groups:
            if group.law.power_law:
                power[group.rows] = turns(self.arm[group.rows] * change[group.rows]) * group.p["p2pi_mw"]
            else:
                power[group.rows] = group.law.power_mw(at[group.rows], group.p)
        power[self.actuators.dead] = 0.0
        return power

    @cached_property
    def level_range(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest level of every channel: range and limit of the source, V or mA."""
        source, c = self.source, self.channels
        limit = np.where(c.by_current, c.limit_ma, c.limit_v)
        return np.maximum(source.first_v, -limit), np.minimum(source.first_v + source.step_v * source.highest, limit)

    @cached_property
    def bounds(self) -> Bounds:
        """Terminal volts of every actuator within all limits of its channel and its law."""
        c, channel = self.channels, self.actuators.channel
        low, high = (ends[channel] for ends in self.level_range)
        low, high = np.where(self.by_current, 0.0, low), np.where(self.by_current, c.limit_v[channel], high)
        most_ma = np.where(
            self.by_current, np.minimum(self.level_range[1][channel], c.limit_ma[channel]), c.limit_ma[channel]
        )
        for group in self.groups:
            rows = group.rows
            bottom, top = group.law.limits_v(group.p)
            low[rows], high[rows] = np.maximum(low[rows], bottom), np.minimum(high[rows], top)
            if group.law.power_law:
                most = self._resistive_limit_v(group.p, most_ma[rows], c.limit_mw[channel[rows]])
                low[rows], high[rows] = np.maximum(low[rows], -most), np.minimum(high[rows], most)
        return Bounds(low, high)

    @staticmethod
    def _resistive_limit_v(p: dict[str, np.ndarray], limit_ma: np.ndarray, limit_mw: np.ndarray) -> np.ndarray:
        """Volts at which a heater takes its current or power limit, warm by its own heat."""
        r, rise, p2pi = p["r_ohm"], p["r_rise"], p["p2pi_mw"]
        # P = I^2 R0 (1 + rise P / p2pi)
        limited = np.isfinite(limit_ma)
        cold_mw = np.square(np.where(limited, limit_ma, 0.0) / MA_PER_A) * r * MW_PER_W
        room = 1.0 - rise * cold_mw / p2pi
        by_current = np.where(limited & (room > 0.0), cold_mw / np.where(room > 0.0, room, 1.0), np.inf)
        most_mw = np.minimum(by_current, limit_mw)
        finite = np.where(np.isfinite(most_mw), most_mw, 0.0)
        volts = np.sqrt(finite * r * (1.0 + rise * finite / p2pi) / MW_PER_W)
        return np.where(np.isfinite(most_mw), volts, np.inf)

    @cached_property
    def own_reach(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest own change [A] within all limits; dead ones 0."""
        low, high = np.zeros(len(self.actuators)), np.zeros(len(self.actuators))
        for group in self.groups:
            rows = group.rows
            low[rows], high[rows] = group.law.reach_rad(group.p, self.bounds.low_v[rows], self.bounds.high_v[rows])
        dead = self.actuators.dead
        low[dead], high[dead] = 0.0, 0.0
        return low, high

    @cached_property
    def primary(self) -> np.ndarray:
        """The actuator that moves each setting: its first live one, else its first, i64[S]."""
        order = np.lexsort((np.arange(len(self.actuators)), self.actuators.dead))[::-1]
        primary = np.full(self.net.n_settings, -1, np.int64)
        primary[self.actuators.setting[order]] = order
        return primary

    @cached_property
    def arm(self) -> np.ndarray:
        """-1 for heaters on the other arm of their cell, else 1, f64[A]."""
        arm = self.actuators.params.get("arm")
        return np.ones(len(self.actuators)) if arm is None else np.where(np.isnan(arm), 1.0, arm)

    @cached_property
    def partner(self) -> np.ndarray:
        """A live actuator on the other arm than the primary one of each setting, i64[S], -1: none."""
        partner = np.full(self.net.n_settings, -1, np.int64)
        setting = self.actuators.setting
        other = (self.arm != self.arm[self.primary][setting]) & ~self.actuators.dead
        rows = np.flatnonzero(other)[::-1]
        partner[setting[rows]] = rows
        return partner

    @cached_property
    def second(self) -> np.ndarray:
        """Settings with a heater on either arm, bool[S]."""
        return np.asarray(self.partner >= 0)

    @cached_property
    def period_rad(self) -> np.ndarray:
        """2 pi for phases, 0 for coupler angles, f64[S]."""
        return np.where(self.net.setting_is_angle, 0.0, TWO_PI)
