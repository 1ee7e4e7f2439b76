"""Whole turns of least power under crosstalk and limits.

Total changes x = wanted + n with whole n; own changes p = C^-1 x have to stay within limits and cost
power. Lift starts with the least x that any drive can give and raises what asks for too little; where no
entry of C^-1 off its diagonal is positive and C has none below zero, what it finds is below every other
choice in every actuator. Elsewhere a descent over single turns and pairs follows, and for small meshes an
integer programme that proves what is least and what is out of reach.

Public: Wraps, least_power_wraps, VERDICTS, LIMIT_TOLERANCE, PROGRAMME_TO.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import DriveFinding, NotFinite, NotFound, Unreachable

if TYPE_CHECKING:
    from meshctl.drive.crosstalk import Crosstalk

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Verdict = Literal["least", "found", "unreachable", "not_found"]

VERDICTS: dict[Verdict, str] = {
    "least": "within limits, and proved to take least power",
    "found": "within limits; other whole turns might take less power",
    "unreachable": "proved: no whole turns keep every actuator within its limits",
    "not_found": "none within limits was found, and none was proved impossible",
}
LIMIT_TOLERANCE = 1e-11  # turns; 6e-11 rad: what rounding may put beyond a limit is set onto it
PROGRAMME_TO = 100  # actuators up to which the integer programme is asked
_UNLIMITED = 1e6  # turns; no actuator goes further, and sums of it stay finite
_LIFTS, _SWEEPS, _ROUNDS = 300, 30, 8
_SAME_POWER = 1e-7  # relative, within which the programme's bound and what was found are one


@dataclass(frozen=True, eq=False)
class Wraps:
    """Own changes [A] and whole turns [A], both in turns of 2 pi, and what is known of them."""

    own_turns: Floats
    wraps: Ints
    violation: float  # turns beyond limits, summed
    verdict: Verdict
    rounds: int  # solves with the crosstalk
    rows: tuple[int, ...] = ()  # actuators beyond their limits

    def require(self) -> Wraps:
        """Itself, or Unreachable or NotFound raised for the actuators beyond their limits."""
        if self.verdict in ("least", "found"):
            return self
        finding: type[DriveFinding] = Unreachable if self.verdict == "unreachable" else NotFound
        raise finding(
            f"{{names}}: {VERDICTS[self.verdict]}; the best found exceeds them by {self.violation:.4g} turns of"
            " 2 pi in sum",
            rows=self.rows,
            remedy="raise the limits, choose other settings, or give dead actuators other work",
        )


def least_power_wraps(
    wanted_turns: ArrayLike,
    wraps: ArrayLike,
    crosstalk: Crosstalk | None,
    low_turns: ArrayLike,
    high_turns: ArrayLike,
    weight: ArrayLike,
    *,
    proof: Literal["never", "needed", "always"] = "needed",
    seconds: float = 10.0,
) -> Wraps:
    """Whole turns that bring every own change within its limits at least power.

    Parameters
    ----------
    wanted_turns : array [A], turns of 2 pi
        Wanted phase (or angle) minus offset.
    wraps : bool array [A]
        Where whole turns may be added; False for couplers.
    crosstalk : Crosstalk or None
    low_turns, high_turns : arrays [A], turns of 2 pi
        Limits of own changes; infinite where there is none.
    weight : array [A]
        Power of a turn (mW); power is the sum of weight times own change.
    proof : "never", "needed" or "always"
        When to ask the integer programme (up to PROGRAMME_TO actuators, half a second for its process):
        never, where nothing was found within limits, or also to prove that power is least.
    seconds : float
        Time limit of the integer programme.

    Returns
    -------
    Wraps
        `own_turns` is the best found for every verdict.

    Raises
    ------
    NotFinite
        For numbers that are not finite.
    CrosstalkNotDominant
        Where nothing was found and some actuators' own heaters are outdone by their neighbours.

    Example
    -------
    >>> least_power_wraps([0.25, -0.1], [True, True], None, [0, 0], [1.2, 1.2], [24, 24]).own_turns
    array([0.25, 0.9 ])

    Cost: about ten solves with the crosstalk where it is positive; else the columns of the inverse once.
    """
    wanted = np.array(wanted_turns, float)
    free = np.array(wraps, bool)
    low, high, cost = (np.broadcast_to(np.asarray(v, float), wanted.shape) for v in (low_turns, high_turns, weight))
    low, high = np.maximum(low, -_UNLIMITED), np.minimum(high, _UNLIMITED)
    for what, values in (("wanted phase", wanted), ("limit", low + high), ("weight", cost)):
        if not np.isfinite(values).all():
            raise NotFinite(f"a {what} of the drive is not a finite number", where=_first_row(values))
    if crosstalk is None:
        return _alone(wanted, free, low, high)
    return _Search(wanted, free, crosstalk, low, high, cost).run(proof, seconds)


def _first_row(values: Floats) -> str:
    return f"actuator {int(np.nonzero(~np.isfinite(values))[-1][0])}"


def _alone(wanted: Floats, free: NDArray[np.bool_], low: Floats, high: Floats) -> Wraps:
    """Without crosstalk every actuator is for itself: the own change nearest to zero takes least power."""
    first = np.ceil(low - wanted - LIMIT_TOLERANCE)
    last = np.floor(high - wanted + LIMIT_TOLERANCE)
    n = np.where(free, np.clip(np.round(-wanted), first, np.maximum(first, last)), 0.0)
    return _answer(wanted + n, n, low, high, "least", "unreachable", 0)


def _answer(
    own: Floats, n: NDArray[np.number], low: Floats, high: Floats, good: Verdict, bad: Verdict, rounds: int
) -> Wraps:
    over = np.maximum(low - own, own - high)
    beyond = over > LIMIT_TOLERANCE
    own = np.where(beyond, own, np.clip(own, low, high))
    verdict = bad if beyond.any() else good
    rows = tuple(int(r) for r in np.flatnonzero(beyond))
    return Wraps(own, n.astype(np.int64), float(over[beyond].sum()), verdict, rounds, rows)


class _Search:
    """One set of wanted changes under crosstalk."""

    def __init__(
        self,
        wanted: Floats,
        free: NDArray[np.bool_],
        crosstalk: Crosstalk,
        low: Floats,
        high: Floats,
        weight: Floats,
    ) -> None:
        self.wanted, self.free, self.crosstalk = wanted, free, crosstalk
        self.low, self.high, self.weight = low, high, weight
        bottom, top = crosstalk.image(low, high)
        self.n_low = np.where(free, np.ceil(bottom - wanted - LIMIT_TOLERANCE), 0.0).astype(np.int64)
        self.n_high = np.where(free, np.floor(top - wanted + LIMIT_TOLERANCE), 0.0).astype(np.int64)
        held = ~free & ((wanted < bottom - LIMIT_TOLERANCE) | (wanted > top + LIMIT_TOLERANCE))
        # no drive within limits gives these totals, whatever the others do
        self.impossible = bool((held | (self.n_low > self.n_high)).any())
        self.n_high = np.maximum(self.n_high, self.n_low)
        self.cost = crosstalk.solve_transposed(weight)  # power of one unit of each total change
        self.rounds = 0

    def run(self, proof: str, seconds: float) -> Wraps:
        """Lift, then descend, then prove."""
        unproved: Verdict = "unreachable" if self.impossible else "not_found"
        dominant = not len(self.crosstalk.not_dominant)
        n = self._start()
        # then start and lift stay below every choice within limits
        lowest = bool(self.crosstalk.inverse_falls_off_diagonal) and bool((n == self.n_low).all())
        own = self._solve(n)
        if dominant:
            n, own, passed = self._lift(n, own)
            if lowest and passed:
                unproved = "unreachable"
            if lowest and (self.cost[self.free] >= 0.0).all() and self._within(own):
                return self._answer(n, own, "least", unproved)
        positive_and_large = self.crosstalk.not_negative and self.crosstalk.inverse is None
        if not (positive_and_large and self._within(own)):
            n, own = self._descend(n, own)
        found = self._answer(n, own, "found", unproved)
        asked = proof == "always" or (proof == "needed" and found.verdict == "not_found")
        if asked and self.crosstalk.inverse is not None and len(n) <= PROGRAMME_TO:
            found = self._prove(found, seconds)
        if found.verdict == "not_found" and not dominant:
            self.crosstalk.require_dominant()
        return found

    def _start(self) -> Ints:
        """The least turns that limits allow for heaters, the nearest to zero for drives of either sign."""
        nearest = np.clip(np.round(-self.wanted).astype(np.int64), self.n_low, self.n_high)
        return np.where(self.free & (self.low < 0.0), nearest, self.n_low)

    def _solve(self, n: Ints) -> Floats:
        self.rounds += 1
        return self.crosstalk.solve(self.wanted + n)

    def _within(self, own: Floats) -> bool:
        return bool((np.maximum(self.low - own, own - self.high) <= LIMIT_TOLERANCE).all())

    def _answer(self, n: Ints, own: Floats, good: Verdict, bad: Verdict) -> Wraps:
        return _answer(own, n, self.low, self.high, good, bad, self.rounds)

    def _lift(self, n: Ints, own: Floats) -> tuple[Ints, Floats, bool]:
        """Raise turns where own changes are too low; True where some would have to pass what any drive gives."""
        for _ in range(_LIFTS):
            short = self.low - own
            lacking = short > LIMIT_TOLERANCE
            rows = np.flatnonzero(lacking & (n < self.n_high))
            if not len(rows):
                break
            raised = np.ones(len(rows), np.int64)
            far = short[rows] > 1.0
            if far.any():
                own_share = self.crosstalk.diagonal_of_inverse(rows[far])
                raised[far] = np.maximum(1, np.ceil((short[rows[far]] - LIMIT_TOLERANCE) / own_share))
            n = n.copy()
            n[rows] = np.minimum(n[rows] + raised, self.n_high[rows])
            own = self._solve(n)
        return n, own, bool(lacking.any())

    def _descend(self, n: Ints, own: Floats) -> tuple[Ints, Floats]:
        """Descent with the inverse's columns, solved again exactly until nothing moves."""
        from meshctl.drive.descent import descend

        columns = self.crosstalk.inverse_columns
        partner, cross = self.crosstalk.partners
        diagonal = columns.diagonal()
        low, high = self.low - LIMIT_TOLERANCE, self.high + LIMIT_TOLERANCE
        n = n.copy()
        for _ in range(_ROUNDS):
            taken = descend(
                columns.indptr.astype(np.int32), columns.indices.astype(np.int32), columns.data, diagonal,
                self.cost, low, high, partner, cross, self.n_low, self.n_high, n, own, _SWEEPS,
            )  # fmt: skip
            own = self._solve(n)
            if not taken:
                break
        return n, own

    def _prove(self, found: Wraps, seconds: float) -> Wraps:
        """Ask the integer programme about what the search found."""
        from meshctl.drive.integer import Programme, prove

        inverse = self.crosstalk.inverse
        assert inverse is not None
        columns = np.flatnonzero(self.free)
        base = self.crosstalk.solve(self.wanted)
        programme = Programme(
            inverse[:, columns],
            self.cost[columns],
            self.low - base,
            self.high - base,
            self.n_low[columns].astype(float),
            self.n_high[columns].astype(float),
        )
        proved = prove(programme, seconds)
        if proved.status == "infeasible":  # what was found within limits outdoes any such claim
            return self._answer(found.wraps, self._solve(found.wraps), "found", "unreachable")
        best, own = found.wraps, self._solve(found.wraps)
        if proved.n is not None:
            n = np.zeros(len(best), np.int64)
            n[columns] = proved.n.astype(np.int64)
            other = self._solve(n)
            if self._within(other) and (not self._within(own) or self.cost @ (n - best) < 0.0):
                best, own = n, other
        power = float(self.cost @ best)
        total = abs(float(self.weight @ own))
        least = power <= proved.bound + _SAME_POWER * max(1.0, total)
        return self._answer(best, own, "least" if least else "found", "not_found")
