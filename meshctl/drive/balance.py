"""The heat that heaters settle at under given voltages or currents, with what they share.

Newton's method on own heats and the groups' currents together; stepping one after the other diverges
once R_ground times the number of heaters nears R.

Public: HeatBalance, ground_sums, at_ground.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from meshctl.errors import GroundDiverges, ThermalRunaway
from meshctl.laws.law import MA_PER_A

Floats = NDArray[np.float64]

_TOLERANCE = 1e-13  # of the residual, in units of the largest heat and current
_SHORTEST = 2.0**-12  # of a Newton step before it counts as stuck
_SPARSE_FROM = 300  # actuators from which the derivative is factored as a sparse matrix
_NEAR_RUNAWAY = 0.5  # gain of heat on itself from which a search that fails has met runaway, at 1


class HeatBalance:
    """P - e^2 / (R p2pi) = 0 by actuator and S - sum of e / R = 0 by ground, with e = V - R_ground S.

    A current-driven row has P - I^2 R / p2pi and adds its I to S.
    """

    def __init__(
        self,
        given: Floats,
        by_current: NDArray[np.bool_],
        r_cold: Floats,
        rise: Floats,
        turn_w: Floats,
        ground: Floats,
        at: NDArray[np.int64],
        warming: Any,
    ) -> None:
        self.by_current, self.r_cold, self.rise, self.turn_w = by_current, r_cold, rise, turn_w
        self.ground, self.at, self.warming = ground, at, warming
        self.volts = np.where(by_current, 0.0, given)
        self.current = np.where(by_current, given / MA_PER_A, 0.0)
        self.n, self.n_grounds = len(given), len(ground)

    def heat(self, own: Floats) -> Floats:
        """Heat T that each heater feels."""
        return own if self.warming is None else own + np.asarray(self.warming @ own)

    def settle(self, max_steps: int) -> tuple[Floats, Floats, int]:
        """Newton's method from the cold heaters, its steps halved while they lead away."""
        own, shared = self._start()
        left, left_shared, scale = self._residual(own, shared)
        size = self._size(left, left_shared, scale)
        for step in range(max_steps + 1):
            if size <= _TOLERANCE:
                return own, shared, step
            if step == max_steps or not np.isfinite(size):
                break
            try:
                with np.errstate(all="ignore"):
                    d_own, d_shared = self._step(own, shared, left, left_shared)
            except (np.linalg.LinAlgError, RuntimeError):  # the derivative is singular, dense or sparse
                break
            share = 1.0
            while share >= _SHORTEST:
                new, new_shared = own + share * d_own, shared + share * d_shared
                left, left_shared, new_scale = self._residual(new, new_shared)
                new_size = self._size(left, left_shared, new_scale)
                if new_size < size * (1.0 - 1e-4 * share) or new_size <= _TOLERANCE:
                    break
                share /= 2.0
            else:
                if size <= 10.0 * _TOLERANCE:  # rounding has the last word
                    return own, shared, step
                break
            own, shared, size = new, new_shared, new_size
        raise self._failure(own)

    def _cold_shared(self) -> Floats:
        """Currents through the grounds while all heaters have their cold resistance."""
        through = np.where(self.by_current, 0.0, 1.0 / self.r_cold)
        feeding = ground_sums(self.current + self.volts * through, self.at, self.n_grounds)
        return np.asarray(feeding / (1.0 + self.ground * ground_sums(through, self.at, self.n_grounds)))

    def _cold_turns(self) -> Floats:
        """Heat of voltage-driven heaters at their cold resistance."""
        across = self.volts - at_ground(self.ground * self._cold_shared(), self.at)
        return np.where(self.by_current, 0.0, across**2 / self.r_cold / self.turn_w)

    def _start(self) -> tuple[Floats, Floats]:
        """Currents through the cold heaters, and the heat of each by itself at the voltage these leave."""
        shared, cold = self._cold_shared(), self._cold_turns()
        under = np.maximum(1.0 + 4.0 * self.rise * cold, 0.0)
        by_volts = 2.0 * cold / (1.0 + np.sqrt(under))
        own = np.where(self.by_current, self.current**2 * self.r_cold / self.turn_w, by_volts)
        hot = not (1.0 + self.rise * self.heat(own) > 0.0).all()
        return np.zeros(self.n) if hot else own, shared

    def _parts(self, own: Floats, shared: Floats) -> tuple[Floats, Floats]:
        across = self.volts - at_ground(self.ground * shared, self.at)
        return self.r_cold * (1.0 + self.rise * self.heat(own)), across

    def _residual(self, own: Floats, shared: Floats) -> tuple[Floats, Floats, tuple[float, float]]:
        r, across = self._parts(own, shared)
        if not (r > 0.0).all():
            return np.full(self.n, np.inf), np.full(self.n_grounds, np.inf), (1.0, 1.0)
        made = np.where(self.by_current, self.current**2 * r, across**2 / r) / self.turn_w
        current = np.where(self.by_current, self.current, across / r)
        scale = max(1.0, float(made.max(initial=0.0))), float(np.abs(current).max(initial=0.0)) or 1.0
        return own - made, shared - ground_sums(current, self.at, self.n_grounds), scale

    @staticmethod
    def _size(left: Floats, left_shared: Floats, scale: tuple[float, float]) -> float:
        return max(
            float(np.abs(left).max(initial=0.0)) / scale[0],
            float(np.abs(left_shared).max(initial=0.0)) / scale[1],
        )

    def _step(self, own: Floats, shared: Floats, left: Floats, left_shared: Floats) -> tuple[Any, Any]:
        """Newton step: the heats eliminated, the grounds solved for, the heats from them."""
        r, across = self._parts(own, shared)
        solve = self._own_solver(self._gain(own, self.heat(own)))
        # by one ampere more through its ground: how much less heat each heater makes
        lost = np.where(self.by_current, 0.0, 2.0 * across / r / self.turn_w) * at_ground(self.ground, self.at)
        columns = np.zeros((self.n, self.n_grounds))
        rows = np.flatnonzero(self.at >= 0)
        columns[rows, self.at[rows]] = lost[rows]
        answers = solve(np.column_stack([-left, columns]))
        by_left, by_ground = answers[:, 0], answers[:, 1:]
        # by one turn more heat: how much less current each heater takes
        less = np.where(self.by_current, 0.0, across / r**2 * self.r_cold * self.rise)
        taken = less[:, None] * (answers if self.warming is None else answers + self.warming @ answers)
        through = np.where(self.by_current, 0.0, 1.0 / r)
        matrix = np.diag(1.0 + self.ground * ground_sums(through, self.at, self.n_grounds))
        matrix = matrix - ground_sums(taken[:, 1:], self.at, self.n_grounds)
        d_shared = np.linalg.solve(matrix, -left_shared - ground_sums(taken[:, 0], self.at, self.n_grounds))
        return by_left - by_ground @ d_shared, d_shared

    def _gain(self, own: Floats, heat: Floats) -> Floats:
        """How much more heat each heater makes by one turn more heat at its place, at a held drive."""
        change = self.rise * own / (1.0 + self.rise * heat)
        return np.where(self.by_current, change, -change)

    def _own_solver(self, gain: Floats) -> Any:
        """Solver [A, n] -> [A, n] of (I - diag(gain)(I + warming))."""
        if self.warming is None:
            return lambda right: right / (1.0 - gain)[:, None]
        if self.n < _SPARSE_FROM:
            dense = self.warming.toarray() if hasattr(self.warming, "toarray") else np.asarray(self.warming)
            matrix = np.eye(self.n) - gain[:, None] * (np.eye(self.n) + dense)
            return lambda right: np.linalg.solve(matrix, right)
        from scipy import sparse
        from scipy.sparse.linalg import splu

        whole = sparse.eye_array(self.n) + sparse.csr_array(self.warming)
        lu = splu((sparse.eye_array(self.n) - sparse.diags_array(gain) @ whole).tocsc())
        return lambda right: np.column_stack([lu.solve(column) for column in right.T])

    def require_stable(self, own: Floats, heat: Floats) -> None:
        """Raise ThermalRunaway where a heater, or heaters together, would run away from the solution.

        A gain >= 0 everywhere leads away from the solution unless (I - gain) y = 1 has y > 0 (Z-matrix
        theory). That a ground eases runaway is not counted on.
        """
        gain = self._gain(own, heat)
        bad = ~(own >= -_TOLERANCE) | ~(gain < 1.0)
        if not bad.any() and (gain > 0.0).any():
            bad = ~(self._own_solver(np.maximum(gain, 0.0))(np.ones((self.n, 1)))[:, 0] > 0.0)
        if bad.any():
            raise self._runaway(np.flatnonzero(bad), own)

    def _runaway(self, rows: NDArray[np.int64], own: Floats) -> ThermalRunaway:
        hottest = np.maximum(np.abs(np.nan_to_num(own, nan=np.inf)), self._cold_turns())
        worst = int(rows[np.argmax(hottest[rows])])
        if self.by_current[worst]:
            drive, why = f"{self.current[worst] * MA_PER_A:.4g} mA", "rising resistance on a current source"
        else:
            drive, why = f"{self.volts[worst]:.4g} V", "falling resistance on a voltage source"
        return ThermalRunaway(
            f"{{names}}: no stable temperature at {drive}, a {why} runs away",
            rows=[int(r) for r in rows],
            remedy="lower the drive, or use the other kind of source",
        )

    def _failure(self, own: Floats) -> ThermalRunaway | GroundDiverges:
        """Which finding a search that did not settle stands for."""
        felt = 1.0 if self.warming is None else 1.0 + np.asarray(abs(self.warming).sum(axis=1)).ravel()
        heat = self.heat(own)
        near = ~(1.0 + self.rise * heat > 0.0) | ~(self._gain(own, heat) * felt < _NEAR_RUNAWAY)
        near |= -4.0 * self.rise * self._cold_turns() * felt > 1.0  # alone, past its turning point
        if near.any():
            return self._runaway(np.flatnonzero(near), own)
        rows = np.flatnonzero(self.at >= 0)
        worst = float(at_ground(self.ground, self.at).max(initial=0.0))
        return GroundDiverges(
            f"{{names}}: no working point was found with up to {worst:.4g} ohm of shared ground",
            rows=[int(r) for r in rows],
            remedy="check the grounds' resistances, or lower the drive",
        )


def ground_sums(values: Floats, at: NDArray[np.int64], n_grounds: int) -> Floats:
    """Sums [G, ..] over the actuators of each ground."""
    total = np.zeros((n_grounds, *values.shape[1:]))
    np.add.at(total, at[at >= 0], values[at >= 0])
    return total


def at_ground(by_ground: Floats, at: NDArray[np.int64]) -> Floats:
    """Values [A] of each actuator's ground, 0 without one."""
    return np.where(at >= 0, by_ground[at], 0.0) if len(by_ground) else np.zeros(len(at))
