"""Volts to the codes of a source with few bits, rounded one by one or against the matrix of the mesh.

Rounding every channel to its nearest code leaves errors that add up at random. A mesh has many settings
whose errors nearly cancel in its matrix: rounding against the Gram matrix of the settings' effects lets
the error of one channel take back what others did.

Public: Source, Rounding, round_against, RIDGE.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import NotFinite, OutOfRange, VoltageOutOfRange
from meshctl.laws.law import raise_where

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

RIDGE = 1e-2  # of the mean diagonal of the Gram matrix: keeps phase errors small where the matrix does not care
_REACH = 16  # codes either way of the nearest that rounding may use
_SWEEPS = 30
_GAIN = 1e-12  # of the cost: steps that win less are not taken


@dataclass(frozen=True, eq=False)
class Source:
    """A source of K channels: V = offset_v + gain * (min_v + code * step).

    For channels that drive current, read mA for V.

    Example
    -------
    >>> source = Source([2, 16], [0.0, 0.0], [3.0, 10.0], [0.1, 0.0], [1.0, 1.0])
    >>> source.volts_of([3, 0])
    array([3.1, 0. ])
    >>> source.nearest_codes([1.2, 10.0])
    array([    1, 65535])
    """

    bits: ArrayLike  # int [K]
    min_v: ArrayLike  # [K]
    max_v: ArrayLike  # [K]
    offset_v: ArrayLike  # [K]; what is measured at code 0 above min_v
    gain: ArrayLike  # [K]; measured span over nominal span

    def __post_init__(self) -> None:
        for name in ("min_v", "max_v", "offset_v", "gain"):
            object.__setattr__(self, name, np.array(getattr(self, name), float))
        object.__setattr__(self, "bits", np.array(self.bits, np.int64))

    @cached_property
    def highest(self) -> Ints:
        """Highest code of each channel; the lowest is 0."""
        return np.asarray(2 ** np.asarray(self.bits) - 1, np.int64)

    @cached_property
    def step_v(self) -> Floats:
        """Volts from one code to the next."""
        span = np.asarray(self.max_v) - np.asarray(self.min_v)
        return np.asarray(np.asarray(self.gain) * span / self.highest)

    @cached_property
    def first_v(self) -> Floats:
        """Volts at code 0."""
        return np.asarray(np.asarray(self.offset_v) + np.asarray(self.gain) * np.asarray(self.min_v))

    def volts_of(self, codes: ArrayLike) -> Floats:
        """Volts [.., K] of codes [.., K]; OutOfRange for codes that the channel does not have."""
        code = np.asarray(codes)
        bad = ~((code >= 0) & (code <= self.highest) & (code == np.floor(code)))
        if bad.any():
            place = tuple(int(i) for i in np.argwhere(bad)[0])
            raise OutOfRange(
                f"code {code[place]} is not a whole number from 0 to {self.highest[place[-1]]}",
                where=f"channel {place[-1]}",
                remedy="take a code that the channel has",
            )
        return self.first_v + code * self.step_v

    def nearest_codes(self, volts: ArrayLike) -> Ints:
        """Nearest codes [.., K] of volts [.., K].

        Raises
        ------
        VoltageOutOfRange
            Where volts lie more than half a step beyond the channel's range; its rows are channels.
        """
        wanted = np.asarray(volts, float)
        first, last = self.first_v, self.first_v + self.highest * self.step_v
        code = (wanted - first) / self.step_v
        shape = np.broadcast_shapes(wanted.shape, first.shape)
        code, wanted = np.broadcast_to(code, shape), np.broadcast_to(wanted, shape)
        raise_where(
            ~((code >= -0.5) & (code <= self.highest + 0.5)),
            VoltageOutOfRange,
            np.maximum(-code, code - self.highest),
            lambda i: (
                f"{wanted[i]:.6g} V is outside {min(first[i[-1]], last[i[-1]]):.6g} V to"
                f" {max(first[i[-1]], last[i[-1]]):.6g} V of its channel"
            ),
            "lower the target's phase, allow whole turns, or use a channel of wider range",
        )
        return np.minimum(np.floor(code + 0.5).astype(np.int64), self.highest)


@dataclass(frozen=True, eq=False)
class Rounding:
    """Codes [K] rounded against the matrix, their cost, that of the codes given, and the errors [S] left."""

    codes: Ints
    cost: float
    cost_before: float
    error: Floats


def round_against(
    gram: ArrayLike,
    own_of: Callable[[Ints], ArrayLike],
    wanted_own: ArrayLike,
    codes: ArrayLike,
    highest: ArrayLike,
    *,
    lowest: ArrayLike = 0,
    channel: ArrayLike | None = None,
    spread: Any = None,
    ridge: float = RIDGE,
    reach: int = _REACH,
) -> Rounding:
    """Codes near `codes` whose errors do the matrix least harm.

    Minimises e^T (gram + ridge * mean(diag gram) * I) e over codes, e = spread @ (own - wanted_own).

    Parameters
    ----------
    gram : array [S, S]
        Harm to the matrix by errors of the settings, as their Gram matrix.
    own_of : function from codes [K] to own changes [A]
        Own change of each actuator, which depends on the code of its own channel only; any unit.
    wanted_own : array [A], the same unit
    codes : int array [K]
        Codes to start from, the nearest ones.
    lowest, highest : int or int array [K]
        Codes that limits allow; others are never asked of `own_of`.
    channel : int array [A], optional
        Channel of each actuator; actuator i sits on channel i without it.
    spread : array or scipy.sparse matrix [S, A], optional
        Error of each setting by each own change, crosstalk included; the identity without it.
    ridge : float
    reach : int
        Furthest code from the given one.

    Returns
    -------
    Rounding
        Never of higher cost than the codes given.

    Raises
    ------
    NotFinite
        For numbers that are not finite.

    Example
    -------
    >>> gram = [[1.0, 0.9], [0.9, 1.0]]
    >>> round_against(gram, lambda c: c.astype(float), [3.45, 5.4], [3, 5], 255).codes
    array([4, 5])

    Cost: A^2 S for the costs, K^3 / 3 for their factor; 0.1 s for 992 actuators.
    Source: nearest plane, Babai 1986; then descent over two codes either way.
    """
    from meshctl.drive.plane_rounding import descend_codes, nearest_plane

    start_codes = np.array(codes, np.int64)
    wanted = np.array(wanted_own, float)
    at = np.arange(len(wanted)) if channel is None else np.asarray(channel, np.int64)
    cost_matrix = _costs(np.asarray(gram, float), spread, ridge)
    low = np.maximum(np.broadcast_to(np.asarray(lowest, np.int64), start_codes.shape) - start_codes, -reach)
    high = np.minimum(np.broadcast_to(np.asarray(highest, np.int64), start_codes.shape) - start_codes, reach)
    low, high = np.minimum(low, 0), np.maximum(high, 0)
    # error of every actuator at every code within reach; columns are codes from -reach to reach
    table = np.stack(
        [np.asarray(own_of(start_codes + np.clip(k, low, high)), float) - wanted for k in range(-reach, reach + 1)],
        axis=1,
    )
    if not (np.isfinite(table).all() and np.isfinite(cost_matrix).all()):
        raise NotFinite("own changes or the Gram matrix to round against hold a number that is not finite")
    rows = np.argsort(at, kind="stable")
    first = np.searchsorted(at[rows], np.arange(len(start_codes) + 1))
    table, cost_matrix = np.ascontiguousarray(table[rows]), np.ascontiguousarray(cost_matrix[np.ix_(rows, rows)])
    low, high = low + reach, high + reach

    def cost(place: Ints) -> float:
        error = table[np.arange(len(rows)), place[at[rows]]]
        return float(error @ cost_matrix @ error)

    given = np.full(len(start_codes), reach)
    before = cost(given)
    planar = _plane_problem(cost_matrix, table, first, low, high, given)
    best, best_cost = given, before
    for place in (given.copy(), nearest_plane(*planar, low, high, given.copy())):
        descend_codes(cost_matrix, table, first, low, high, place, _GAIN * before, _SWEEPS)
        reached = cost(place)
        if reached < best_cost:
            best, best_cost = place, reached
    chosen = start_codes + best - reach
    left = np.empty(len(wanted))
    left[rows] = table[np.arange(len(rows)), best[at[rows]]]
    return Rounding(chosen, best_cost, before, left if spread is None else np.asarray(spread @ left))


def _costs(gram: Floats, spread: Any, ridge: float) -> Floats:
    """Cost matrix [A, A] of own changes."""
    whole = gram + ridge * np.trace(gram) / max(1, len(gram)) * np.eye(len(gram))
    if spread is not None:
        whole = np.asarray(spread.T @ np.asarray(spread.T @ whole).T)
    return 0.5 * (whole + whole.T)


def _plane_problem(
    cost_matrix: Floats, table: Floats, first: Ints, low: Ints, high: Ints, given: Ints
) -> tuple[Floats, Ints, Floats]:
    """Triangular factor [K, K], order [K] and places [K, L] of the channels' errors along their own direction.

    A channel with one actuator moves by that one's error itself; one with several along the change of all
    of them from one code to the next.
    """
    n = len(first) - 1
    direction = np.ones(len(table))
    above = np.minimum(given + 1, high)
    below = np.maximum(given - 1, low)
    place = np.zeros((n, table.shape[1]))
    step = np.ones(n)
    moved = np.flatnonzero((np.diff(first) > 0) & (above > below))
    for k in moved:
        span = slice(first[k], first[k + 1])
        change = (table[span, above[k]] - table[span, below[k]]) / (above[k] - below[k])
        if len(change) == 1:
            place[k], step[k] = table[first[k]], abs(change[0])
            continue
        if not change.any():
            change = np.ones(len(change))
        direction[span] = change
        along = cost_matrix[span, span] @ change
        place[k] = along @ table[span] / (along @ change)
    scaled = cost_matrix * direction * direction[:, None]
    by_channel = np.zeros((n, n))
    filled = np.flatnonzero(np.diff(first) > 0)
    starts = first[:-1][filled]
    by_channel[np.ix_(filled, filled)] = np.add.reduceat(np.add.reduceat(scaled, starts, 0), starts, 1)
    by_channel = by_channel[np.ix_(moved, moved)]
    # the last in order is chosen first: the coarsest
    order = moved[np.argsort(np.diagonal(by_channel) * step[moved] ** 2, kind="stable")]
    back = np.searchsorted(moved, order)
    ordered = by_channel[np.ix_(back, back)]
    lift = 1e-12 * np.trace(ordered) / max(1, len(ordered))
    factor = np.linalg.cholesky(ordered + lift * np.eye(len(ordered)))
    return np.ascontiguousarray(factor.T), order, place
