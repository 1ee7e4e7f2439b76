"""Monotone curves through measured (volts, value) rows, with their exact inverse.

A curve is a piecewise cubic that keeps the rows' rise (Fritsch and Carlson 1980; inner slopes by the weighted
harmonic mean of Fritsch and Butland 1984; three-point ends). Its axis is V^2 where no volts are negative,
because heaters and gaps answer to V^2, else V. Level stretches are allowed: there the inverse answers with
the end that comes first in the table.

Public: Curves, check_table, LEAST_ROWS.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import MissingRow, NotFinite, OutOfRange, TableNotMonotone
from meshctl.laws.law import Rows

LEAST_ROWS = 4


def check_table(table: ArrayLike, where: str = "") -> None:
    """Raise what keeps a table of (volts, value_rad, sigma_rad) rows from being a law.

    Raises
    ------
    MissingRow
        Fewer than 4 rows.
    NotFinite, OutOfRange
        A NaN or infinity; a negative sigma_rad.
    TableNotMonotone
        Volts that do not rise from row to row, or values that turn back (or never change).
    """
    rows = np.asarray(table, float)
    if rows.ndim != 2 or rows.shape[1] != 3 or len(rows) < LEAST_ROWS:
        raise MissingRow(
            f"table has {len(rows)} rows, needs at least {LEAST_ROWS} of volts, value_rad and sigma_rad",
            where=where,
            remedy="measure more voltages",
        )
    if not np.isfinite(rows).all():
        bad = int(np.flatnonzero(~np.isfinite(rows).all(1))[0])
        raise NotFinite(f"row {bad + 1} of the table is not finite", where=where, remedy="take it out")
    if (rows[:, 2] < 0.0).any():
        bad = int(np.argmin(rows[:, 2]))
        raise OutOfRange(
            f"sigma_rad is {rows[bad, 2]:g} rad at {rows[bad, 0]:g} V, must be at least 0 rad",
            where=where,
            remedy="give 0 where it is not known",
        )
    stalls = np.flatnonzero(np.diff(rows[:, 0]) <= 0.0)
    if len(stalls):
        raise TableNotMonotone(
            f"volts do not rise after {_listed(rows[stalls, 0])}",
            where=where,
            remedy="sort the rows by volts and merge equal ones",
        )
    step = np.diff(rows[:, 1])
    sense = np.sign(rows[-1, 1] - rows[0, 1])
    turns_back = np.flatnonzero(step * sense < 0.0)
    if sense == 0.0 or len(turns_back):
        back = f"value_rad turns back after {_listed(rows[turns_back, 0])}"
        raise TableNotMonotone(
            back if sense else "value_rad ends as it began",
            where=where,
            remedy="smooth it first: fit V^2 or V^4, or make it isotonic",
        )


def _listed(volts: NDArray[np.float64], shown: int = 6) -> str:
    more = f" and {len(volts) - shown} more" if len(volts) > shown else ""
    return ", ".join(f"{v:g} V" for v in volts[:shown]) + more


class Curves:
    """Monotone cubics through many tables at once; one curve per actuator row.

    Nodes of all tables lie end to end; `start[r]` to `start[r + 1]` are those of row r.
    """

    def __init__(self, tables: Sequence[ArrayLike]) -> None:
        parts = [np.asarray(t, float) for t in tables]
        for row, part in enumerate(parts):
            if part.ndim != 2 or part.shape[1] != 3 or len(part) < LEAST_ROWS:
                check_table(part, where=f"actuator {row}")
        self.start = np.concatenate([[0], np.cumsum([len(t) for t in parts])]).astype(np.intp)
        nodes = np.concatenate(parts) if parts else np.zeros((0, 3))
        owner = np.repeat(np.arange(len(parts)), np.diff(self.start))
        self.volts, self.value = nodes[:, 0], nodes[:, 1]
        first, last = self.start[:-1], self.start[1:] - 1
        self.sense = np.sign(self.value[last] - self.value[first])
        self._check(parts, owner, nodes[:, 2])
        self.low_v, self.high_v = self.volts[first], self.volts[last]
        self.squared = self.low_v >= 0.0
        self.x = np.where(self.squared[owner], np.square(self.volts), self.volts)
        self.slope = _slopes(self.x, self.value, self.start)
        # cubic of the segment after each node in t = 0..1; entries of last nodes are never read
        h = np.append(np.diff(self.x), 1.0)
        rise = np.append(np.diff(self.value), 0.0)
        left, right = h * self.slope, h * np.append(self.slope[1:], 0.0)
        self.width = h
        self.cubic = np.stack([self.value, left, 3.0 * rise - 2.0 * left - right, left + right - 2.0 * rise])

    @staticmethod
    def of(tables: Sequence[ArrayLike] | Curves) -> Curves:
        """The curves through `tables`, or `tables` themselves where they are curves already."""
        return tables if isinstance(tables, Curves) else Curves(tables)

    def __len__(self) -> int:
        return len(self.sense)

    def _check(self, parts: list[Rows], owner: NDArray[np.intp], sigma: Rows) -> None:
        inner = owner[1:] == owner[:-1]
        bad = ~(np.diff(self.volts) > 0.0) | ~(np.diff(self.value) * self.sense[owner[1:]] >= 0.0)
        suspects = set(owner[1:][inner & bad]) | set(owner[~(sigma >= 0.0) | np.isinf(sigma)])
        suspects |= set(np.flatnonzero(~(np.abs(self.sense) > 0.0)))
        for row in sorted(suspects):
            check_table(parts[row], where=f"actuator {row}")

    def at(self, volts: Rows) -> Rows:
        """Values at volts inside the tables."""
        t, segment = self._place(volts)
        c = self.cubic[:, segment]
        return c[0] + t * (c[1] + t * (c[2] + t * c[3]))

    def slope_at(self, volts: Rows) -> Rows:
        """Derivatives of the values by the volts."""
        t, segment = self._place(volts)
        c = self.cubic[:, segment]
        by_axis = (c[1] + t * (2.0 * c[2] + t * 3.0 * c[3])) / self.width[segment]
        return by_axis * np.where(self.squared, 2.0 * volts, 1.0)

    def volts_at(self, value: Rows) -> Rows:
        """Volts at values inside the tables, to the last digits of the value."""
        rising = self.value * np.repeat(self.sense, np.diff(self.start))
        wanted = value * self.sense
        segment = self._segment(rising, wanted)
        c = self.cubic[:, segment] * self.sense
        t = _root(c, wanted)
        x = self.x[segment] + t * self.width[segment]
        return np.where(self.squared, np.sqrt(np.maximum(x, 0.0)), x)

    def _place(self, volts: Rows) -> tuple[Rows, NDArray[np.intp]]:
        x = np.where(self.squared, np.square(volts), volts)
        segment = self._segment(self.x, x)
        return np.clip((x - self.x[segment]) / self.width[segment], 0.0, 1.0), segment

    def _segment(self, nodes: Rows, wanted: Rows) -> NDArray[np.intp]:
        """Node before each wanted entry, so that entry equals at most the node after it."""
        first, last = self.start[:-1], self.start[1:] - 1
        low = np.broadcast_to(first, wanted.shape).copy()
        high = np.broadcast_to(last, wanted.shape).copy()
        while (high - low > 1).any():
            middle = (low + high) // 2
            below = nodes[middle] < wanted
            low = np.where(below, middle, low)
            high = np.where(below | (high - low <= 1), high, middle)
        return low


def _slopes(x: Rows, y: Rows, start: NDArray[np.intp]) -> Rows:
    """Node slopes that keep a monotone cubic monotone, for tables that lie end to end."""
    h, m = np.diff(x), np.diff(y)
    m = m / np.where(h == 0.0, 1.0, h)
    slope = np.zeros_like(y)
    before, after = m[:-1], m[1:]
    w1, w2 = 2.0 * h[1:] + h[:-1], h[1:] + 2.0 * h[:-1]
    same = (before * after > 0.0) & (h[:-1] > 0.0) & (h[1:] > 0.0)
    a, b = np.where(same, before, 1.0), np.where(same, after, 1.0)
    slope[1:-1] = np.where(same, (w1 + w2) / np.where(same, w1 / a + w2 / b, 1.0), 0.0)
    first, last = start[:-1], start[1:] - 1
    slope[first] = _end_slope(h[first], h[first + 1], m[first], m[first + 1])
    slope[last] = _end_slope(h[last - 1], h[last - 2], m[last - 1], m[last - 2])
    return slope


def _end_slope(h0: Rows, h1: Rows, m0: Rows, m1: Rows) -> Rows:
    """One-sided three-point slope, held to the sign of the end segment's (rows never turn back here)."""
    d = ((2.0 * h0 + h1) * m0 - h0 * m1) / (h0 + h1)
    return np.where(np.sign(d) == np.sign(m0), d, 0.0)


def _root(c: Rows, wanted: Rows) -> Rows:
    """t in 0..1 at which rising cubics c[4, ...] equal `wanted`: Newton held inside a shrinking bracket."""
    low, high = np.zeros_like(wanted), np.ones_like(wanted)
    rise = c[1] + c[2] + c[3]
    t = np.clip((wanted - c[0]) / np.where(rise > 0.0, rise, 1.0), 0.0, 1.0)
    for _ in range(80):
        miss = c[0] + t * (c[1] + t * (c[2] + t * c[3])) - wanted
        low, high = np.where(miss < 0.0, t, low), np.where(miss >= 0.0, t, high)
        steep = c[1] + t * (2.0 * c[2] + t * 3.0 * c[3])
        step = t - miss / np.where(steep > 0.0, steep, 1.0)
        inside = (steep > 0.0) & (step > low) & (step < high)
        new = np.where(miss == 0.0, t, np.where(inside, step, 0.5 * (low + high)))
        if (np.abs(new - t) <= 2e-16).all():
            break
        t = new
    return t
