"""Crosstalk: what each actuator's own change adds to the others, and the own changes that give wanted totals.

Own changes p and total changes x, both in the same unit (rad or turns of 2 pi), obey x = C p with
C = I + K: K[i, j] is what actuator j adds to i for each unit that it gives itself. The near part of K
is sparse and factored once; a far part (dense, or a product U V^T of few columns) is kept beside it.
Coefficients from the places of the heaters, and what leaving out the far ones costs, are in `mesh.neighbours`.

Public: Crosstalk, CONDITION_LIMIT, DENSE_TO, PARTNERS.
"""

from __future__ import annotations

from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.drive.factor import factor, norm_of_inverse, positive_definite, sparse_inverse
from meshctl.errors import CrosstalkNotDominant, CrosstalkUnsound

Floats = NDArray[np.float64]

CONDITION_LIMIT = 1e6  # coefficients are measured to three digits; beyond this nothing of them is left
DENSE_TO = 1000  # actuators up to which the whole inverse is formed (0.1 s and 8 MB at 1000)
PARTNERS = 12
_POSITIVE = 1e-13  # rounding of the inverse below which an entry counts as not positive
_RESIDUAL = 1e-14  # relative, of the iteration with a dense far part


class Crosstalk:
    """The matrix C = I + K, factored.

    Parameters
    ----------
    K : scipy.sparse matrix or array, [A, A]
        rad of actuator row per rad that actuator column gives itself.
    far : array [A, A], or pair of arrays U [A, r] and V [A, r], optional
        Further crosstalk that is not factored: dense, or U @ V.T. The diagonal of both parts together
        must be zero: K takes back what U @ V.T puts there.

    Raises
    ------
    CrosstalkUnsound
        Where C is singular, ill-conditioned or not finite, or the diagonal of K is not zero.

    Example
    -------
    >>> import numpy as np
    >>> crosstalk = Crosstalk(np.array([[0.0, 0.1], [0.1, 0.0]]))
    >>> crosstalk.solve(np.array([1.1, 1.1])).round(12)
    array([1., 1.])

    Cost: one sparse factorisation; 0.02 s for 4032 actuators of 38 neighbours each.
    """

    def __init__(self, K: Any, far: ArrayLike | tuple[ArrayLike, ArrayLike] | None = None) -> None:
        from scipy import sparse

        self.near = sparse.csr_array(K, dtype=float)
        self.size = int(self.near.shape[0])
        if self.near.shape != (self.size, self.size):
            raise CrosstalkUnsound(f"crosstalk has shape {self.near.shape}, must be square")
        self.far: Floats | None = None
        self.low_rank: tuple[Floats, Floats] | None = None
        if isinstance(far, tuple):
            self.low_rank = (np.array(far[0], float), np.array(far[1], float))
        elif far is not None:
            self.far = np.array(far, float)
        self._check_values()
        self._matrix = (sparse.eye_array(self.size) + self.near).tocsc()
        self._lu = factor(self._matrix)
        if self.low_rank is not None:
            U, V = self.low_rank
            self._near_u = np.column_stack([self._lu.solve(u) for u in U.T])
            self._near_v = np.column_stack([self._lu.solve(v, "T") for v in V.T])
            self._small = np.eye(U.shape[1]) + V.T @ self._near_u
        if not self.condition < CONDITION_LIMIT:
            raise CrosstalkUnsound(
                f"crosstalk matrix is singular or nearly so: condition {self.condition:.1e} is above"
                f" {CONDITION_LIMIT:.0e}",
                remedy="look for two actuators with the same rows of coefficients",
            )

    def _check_values(self) -> None:
        parts = [self.near.data, *(self.low_rank or ()), *(() if self.far is None else (self.far,))]
        if not all(np.isfinite(part).all() for part in parts):
            raise CrosstalkUnsound("crosstalk holds a coefficient that is not a finite number")
        own = self.near.diagonal()
        if self.far is not None:
            own = own + np.diagonal(self.far)
        if self.low_rank is not None:
            own = own + np.einsum("ij,ij->i", *self.low_rank)
        if (np.abs(own) > _RESIDUAL).any():
            row = int(np.argmax(np.abs(own)))
            raise CrosstalkUnsound(
                f"an actuator's coefficient on itself is {own[row]:.4g}, must be 0",
                where=f"actuator {row}",
                remedy="its own change is counted already",
            )

    # ---- C and its inverse
    def apply(self, own: ArrayLike) -> Floats:
        """Total changes [A] or [A, n] of own changes."""
        p = np.asarray(own, float)
        total = p + self.near @ p
        if self.far is not None:
            total = total + self.far @ p
        if self.low_rank is not None:
            total = total + self.low_rank[0] @ (self.low_rank[1].T @ p)
        return np.asarray(total)

    def solve(self, total: ArrayLike) -> Floats:
        """Own changes [A] that give total changes [A]."""
        x = np.asarray(total, float)
        if self.far is not None:
            return self._iterate(x, transposed=False)
        p = self._lu.solve(x)
        if self.low_rank is not None:
            p = p - self._near_u @ np.linalg.solve(self._small, self.low_rank[1].T @ p)
        return np.asarray(p)

    def solve_transposed(self, weight: ArrayLike) -> Floats:
        """C^-T @ weight: what one unit of each total change costs when own changes cost `weight`."""
        w = np.asarray(weight, float)
        if self.far is not None:
            return self._iterate(w, transposed=True)
        c = self._lu.solve(w, "T")
        if self.low_rank is not None:
            c = c - self._near_v @ np.linalg.solve(self._small.T, self.low_rank[0].T @ c)
        return np.asarray(c)

    def _iterate(self, x: Floats, transposed: bool) -> Floats:
        """Solve with the dense far part, its iteration preconditioned by the factored near part."""
        from scipy.sparse.linalg import LinearOperator, gmres

        C = self._dense_or_operator(transposed)
        shape = (self.size, self.size)
        near = LinearOperator(shape, lambda v: self._lu.solve(np.ravel(v), "T" if transposed else "N"))
        whole = LinearOperator(shape, C)
        scale = float(np.linalg.norm(x)) or 1.0
        p = near.matvec(x)
        for _ in range(4):  # each round solves for what the one before left over
            left = x - C(p)
            if np.linalg.norm(left) <= _RESIDUAL * scale:
                return np.asarray(p)
            step, stalled = gmres(whole, left, M=near, rtol=1e-8, atol=0.0, restart=80, maxiter=5)
            if stalled:
                break
            p = p + step
        if np.linalg.norm(x - C(p)) <= 100.0 * _RESIDUAL * scale:
            return np.asarray(p)
        raise CrosstalkUnsound(
            "the iteration with the far part of the crosstalk does not converge",
            remedy="let the near part, which is factored, hold more of the coefficients",
        )

    def _dense_or_operator(self, transposed: bool) -> Any:
        if not transposed:
            return lambda v: self.apply(np.ravel(v))
        far = self.far
        assert far is not None
        return lambda v: np.ravel(v) + self.near.T @ np.ravel(v) + far.T @ np.ravel(v)

    # ---- what is known of C
    @cached_property
    def condition(self) -> float:
        """Estimate of the 1-norm condition number; with a dense far part, that of the near part."""
        columns = 1.0 + np.asarray(abs(self.near).sum(axis=0)).ravel()
        if self.low_rank is not None:
            columns = columns + np.abs(self.low_rank[1]) @ np.abs(self.low_rank[0]).sum(axis=0)
        solve: Any = self.solve if self.far is None else self._lu.solve
        transposed: Any = self.solve_transposed if self.far is None else lambda v: self._lu.solve(v, "T")
        with np.errstate(all="ignore"):
            estimate = norm_of_inverse(solve, transposed, self.size)
        return float(columns.max(initial=1.0) * estimate)

    @cached_property
    def not_negative(self) -> bool:
        """Whether every coefficient is zero or positive, so that no heater lowers a neighbour's phase."""
        entries = self.near.tocoo()
        near = bool((entries.data[entries.row != entries.col] >= 0.0).all())
        far = self.far is None or bool((self.far >= 0.0).all())
        low_rank = self.low_rank is None or all(bool((part >= 0.0).all()) for part in self.low_rank)
        return near and far and low_rank

    @cached_property
    def inverse(self) -> Floats | None:
        """The whole of C^-1 [A, A], or None above DENSE_TO actuators."""
        if self.size > DENSE_TO:
            return None
        whole: Floats = np.linalg.inv(self.apply(np.eye(self.size))).astype(float)
        whole.flags.writeable = False
        return whole

    @cached_property
    def inverse_columns(self) -> Any:
        """C^-1 as a scipy.sparse.csc_array [A, A], without what is negligible in a search.

        Up to DENSE_TO actuators the whole inverse; above, of the near part (`factor.sparse_inverse`).
        """
        from scipy import sparse

        if self.inverse is not None:
            columns = sparse.csc_array(self.inverse)
        else:
            columns = sparse_inverse(self._matrix, self._lu)
        columns.sort_indices()
        return columns

    @cached_property
    def partners(self) -> tuple[NDArray[np.int32], Floats]:
        """Of each actuator: the PARTNERS others that it moves most through C^-1, and how each moves it.

        Returns
        -------
        partner : int array [A, PARTNERS], -1 where there are fewer
        cross : array [A, PARTNERS], entries [row, partner] of C^-1
        """
        entries = self.inverse_columns.tocoo()
        row, column, value = (v.ravel() for v in (entries.row, entries.col, entries.data))
        place = row.astype(np.int64) * self.size + column
        in_order = np.argsort(place)
        off = np.flatnonzero(row != column)
        off = off[np.lexsort((row[off], -np.abs(value[off]), column[off]))]
        rank = np.arange(len(off)) - np.searchsorted(column[off], column[off])
        off, rank = off[rank < PARTNERS], rank[rank < PARTNERS]
        partner = np.full((self.size, PARTNERS), -1, np.int32)
        partner[column[off], rank] = row[off]
        back = column[off].astype(np.int64) * self.size + row[off]
        k = np.minimum(np.searchsorted(place, back, sorter=in_order), len(place) - 1)
        cross = np.zeros((self.size, PARTNERS))
        cross[column[off], rank] = np.where(place[in_order[k]] == back, value[in_order[k]], 0.0)
        return partner, cross

    @cached_property
    def inverse_falls_off_diagonal(self) -> bool | None:
        """Whether C^-1 has no positive entry off its diagonal and C none below zero; None if not known.

        Then raising one total change lowers every other own change, on which proofs about whole turns rest.
        """
        if self.size == 0 or not (self.near.nnz or self.far is not None or self.low_rank is not None):
            return True
        if not self.not_negative:
            return False
        if self.inverse is None:
            return None
        off = self.inverse - np.diag(np.diagonal(self.inverse))
        return bool(off.max() <= _POSITIVE)

    def diagonal_of_inverse(self, rows: ArrayLike | None = None) -> Floats:
        """A_ii of A = C^-1 for `rows`, or for all. Cost: one solve a row above DENSE_TO actuators."""
        wanted = np.arange(self.size) if rows is None else np.asarray(rows, int)
        if self.inverse is not None:
            return np.diagonal(self.inverse)[wanted].copy()
        unit = np.zeros(self.size)
        found = np.empty(len(wanted))
        for k, row in enumerate(wanted):
            unit[row] = 1.0
            found[k] = self.solve(unit)[row]
            unit[row] = 0.0
        return found

    @cached_property
    def not_dominant(self) -> NDArray[np.int64]:
        """Rows with A_ii <= 0: more total change there asks for less own change.

        Diagonal dominance or a positive definite symmetric part rules that out without forming A.
        """
        if self.low_rank is None:
            off = abs(self.near)
            rows, columns = np.asarray(off.sum(axis=1)).ravel(), np.asarray(off.sum(axis=0)).ravel()
            if self.far is not None:
                far = np.abs(self.far)
                rows, columns = rows + far.sum(axis=1), columns + far.sum(axis=0)
            if rows.max(initial=0.0) < 1.0 or columns.max(initial=0.0) < 1.0:
                return np.empty(0, np.int64)
            if self.far is None and positive_definite(self._matrix):
                return np.empty(0, np.int64)
        return np.flatnonzero(self.diagonal_of_inverse() <= 0.0)

    def require_dominant(self) -> None:
        """Raise CrosstalkNotDominant with the rows where A_ii <= 0."""
        rows = self.not_dominant
        if len(rows):
            raise CrosstalkNotDominant(
                "{names}: neighbours change the phase more than the own heater does (more phase would need"
                " less own power)",
                rows=[int(r) for r in rows],
                remedy="check their crosstalk coefficients, which are rad per rad of the heater's own phase",
            )

    def image(self, low: ArrayLike, high: ArrayLike) -> tuple[Floats, Floats]:
        """Interval [A], [A] that total changes cannot leave while own changes stay from low to high."""
        bottom, top = np.asarray(low, float), np.asarray(high, float)
        low_x, high_x = bottom.copy(), top.copy()
        parts: list[Any] = [self.near] if self.far is None else [self.near, self.far]
        for part in parts:
            below, above = _interval(part, bottom, top)
            low_x, high_x = low_x + below, high_x + above
        if self.low_rank is not None:
            U, V = self.low_rank
            below, above = _interval(U, *_interval(V.T, bottom, top))
            low_x, high_x = low_x + below, high_x + above
        return low_x, high_x


def _interval(part: Any, low: Floats, high: Floats) -> tuple[Floats, Floats]:
    middle, half = part @ (0.5 * (low + high)), abs(part) @ (0.5 * (high - low))
    return middle - half, middle + half
