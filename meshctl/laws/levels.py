"""Stepwise, non-volatile parts: a list of levels, each written by its own pulse and kept without power.

Rows of a table are pulse volts, value_rad, sigma_rad, in any order. `off_level` (from 0) is the level that
the part is in before anything is written; changes count from it.

Public: Levels, LEVELS_LAW, Nearest, check_levels.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import DuplicateName, MissingRow, NotFinite, OutsideMeasuredRange
from meshctl.laws.law import SLACK, Breach, Law, Param, Params, Rows, raise_where


def check_levels(table: ArrayLike, where: str = "") -> None:
    """Raise what keeps a list of (volts, value_rad, sigma_rad) rows from being levels."""
    rows = np.asarray(table, float)
    if rows.ndim != 2 or rows.shape[1] != 3 or len(rows) < 2:
        raise MissingRow(f"{len(rows)} levels, at least 2 rows of volts, value_rad, sigma_rad are needed", where=where)
    if not np.isfinite(rows).all():
        bad = int(np.flatnonzero(~np.isfinite(rows).all(1))[0])
        raise NotFinite(f"level {bad} is not finite", where=where, remedy="take it out")
    volts, counts = np.unique(rows[:, 0], return_counts=True)
    if (counts > 1).any():
        raise DuplicateName(
            f"{int(counts.max())} levels have pulses of {volts[np.argmax(counts)]:g} V",
            where=where,
            remedy="one pulse writes one level",
        )


@dataclass(frozen=True)
class Nearest:
    """The levels nearest to wanted changes; `error_rad` is what they give less what was wanted."""

    level: NDArray[np.intp]
    volts: Rows
    change_rad: Rows
    error_rad: Rows


class Levels(Law):
    """A part that keeps one of a list of levels; `volts` of it are pulses, not holding voltages."""

    name = "levels"
    moves = ("phase", "coupler")
    has_tables = True
    stepwise = True
    params = (
        Param("off_level", "", 0.0, 0.0, 1e6, "row of the level before anything is written, from 0"),
        Param("pulse_window_v", "V", 0.05, 0.0, 1e4, "how far a pulse may be from its listed volts"),
        Param("pulse_energy_nj", "nJ", np.nan, 0.0, 1e12, "energy of a pulse; left out: not known"),
    )

    def rows(self, p: Params) -> int:
        return len(p["tables"])

    def check_rows(self, table: ArrayLike, where: str = "") -> None:
        check_levels(table, where)

    def breaches(self, p: Params) -> list[Breach]:
        off = self.column(p, "off_level")
        found = []
        for row, table in enumerate(p["tables"]):
            last = len(table) - 1
            if off[row] > last or off[row] % 1.0:
                found.append(Breach(row, self.param("off_level"), float(off[row]), f"a whole number, 0 to {last}"))
        return found

    def rest_rad(self, p: Params) -> Rows:
        """Value of the level that is there with nothing written."""
        off = self.column(p, "off_level")
        return np.array([np.asarray(t, float)[int(k), 1] for t, k in zip(p["tables"], off, strict=True)])

    def nearest_level(self, change_rad: ArrayLike, p: Params) -> Nearest:
        """The level nearest to each wanted change, with the error it leaves."""
        volts, changes = self._padded(p)
        wanted = np.asarray(change_rad, float) + np.zeros(len(volts))
        miss = changes - wanted[..., None]
        level = np.argmin(np.where(np.isnan(miss), np.inf, np.abs(miss)), -1)
        row = np.arange(len(volts))
        return Nearest(level, volts[row, level], changes[row, level], changes[row, level] - wanted)

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        pulses, changes = self._padded(p)
        v = np.asarray(volts, float) + np.zeros(len(pulses))
        away = np.abs(pulses - v[..., None])
        level = np.argmin(np.where(np.isnan(away), np.inf, away), -1)
        row, window = np.arange(len(pulses)), self.column(p, "pulse_window_v")
        miss = np.abs(pulses[row, level] - v)
        raise_where(
            ~(miss <= window),
            OutsideMeasuredRange,
            miss,
            lambda i: (
                f"pulse of {v[i]:.6g} V is {miss[i]:.4g} V from the nearest level's "
                f"{pulses[i[-1], level[i]]:g} V, more than {window[i[-1]]:g} V"
            ),
            "write a listed level",
        )
        return changes[row, level]

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        near = self.nearest_level(change_rad, p)
        raise_where(
            ~(np.abs(near.error_rad) <= SLACK * (1.0 + np.abs(near.change_rad))),
            OutsideMeasuredRange,
            np.abs(near.error_rad),
            lambda i: (
                f"change of {near.change_rad[i] - near.error_rad[i]:.6g} rad is no level; the nearest gives "
                f"{near.change_rad[i]:.6g} rad"
            ),
            "take the nearest level with its error",
        )
        return near.volts

    def slope_rad_per_v(
        self,
        volts: ArrayLike,
        p: Params,
        heat_turns: ArrayLike | None = None,  # noqa: ARG002
    ) -> Rows:
        return np.zeros(np.broadcast_shapes(np.shape(volts), (self.rows(p),)))

    def limits_v(self, p: Params) -> tuple[Rows, Rows]:
        pulses = self._padded(p)[0]
        return np.nanmin(pulses, 1), np.nanmax(pulses, 1)

    def reach_rad(self, p: Params, low_v: ArrayLike, high_v: ArrayLike) -> tuple[Rows, Rows]:
        """Lowest and highest change among the levels with pulses in range; between them only levels."""
        pulses, changes = self._padded(p)
        low, high = np.asarray(low_v, float)[..., None], np.asarray(high_v, float)[..., None]
        usable = (pulses >= low) & (pulses <= high)
        none = np.where(usable.any(-1), 0.0, np.nan)
        least = np.where(usable, changes, np.inf).min(-1)
        most = np.where(usable, changes, -np.inf).max(-1)
        return least + none, most + none

    def power_mw(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        return np.zeros(np.broadcast_shapes(np.shape(volts), (self.rows(p),)))

    def switch_energy_nj(self, volts_from: ArrayLike, volts_to: ArrayLike, p: Params) -> Rows:
        """Energy of the pulse; 0 where the level stays."""
        stays = np.asarray(volts_from, float) == np.asarray(volts_to, float)
        return np.where(stays, 0.0, self.column(p, "pulse_energy_nj"))

    def _padded(self, p: Params) -> tuple[Rows, Rows]:
        """Pulses and changes of each row's levels, [rows, most levels], NaN past a row's last."""
        tables = [np.asarray(t, float) for t in p["tables"]]
        for row, table in enumerate(tables):
            check_levels(table, where=f"actuator {row}")
        full = np.full((len(tables), max(map(len, tables), default=0), 2), np.nan)
        for row, table in enumerate(tables):
            full[row, : len(table)] = table[:, :2]
        return full[..., 0], full[..., 1] - self.rest_rad(p)[:, None]


LEVELS_LAW = Levels()
