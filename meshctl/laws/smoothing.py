"""Noisy measured tables made monotone, so that they can serve as a law.

With 0.01 rad of noise most tables of 50 rows turn back somewhere; a fit of V^2 (and V^4) carries physics, an
isotonic one only order.

Public: smoothed, SMOOTHINGS.
"""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import NotFinite
from meshctl.laws.curves import check_table
from meshctl.laws.law import Rows

SMOOTHINGS = ("v2", "v4", "isotonic")


def smoothed(table: ArrayLike, how: Literal["v2", "v4", "isotonic"], where: str = "") -> NDArray[np.float64]:
    """A monotone table from a noisy one: weighted fit of V^2, of V^2 and V^4, or isotonic.

    Parameters
    ----------
    table : (n, 3) array of volts, value_rad, sigma_rad
        In any order; repeated volts are merged. Rows weigh 1 / sigma_rad^2, or all the same where a
        sigma_rad is 0.
    how : "v2", "v4" or "isotonic"

    Returns
    -------
    (m, 3) array
        One row per voltage; sigma_rad is that of the fitted value, by the rows' own sigmas.

    Raises
    ------
    TableNotMonotone
        Where the fit itself turns back inside the measured range.
    """
    if how not in SMOOTHINGS:
        raise ValueError(f"how is {how!r}, must be one of {', '.join(SMOOTHINGS)}")
    rows = np.asarray(table, float)
    if rows.ndim != 2 or rows.shape[1] != 3 or not np.isfinite(rows).all():
        raise NotFinite("table must be finite rows of volts, value_rad, sigma_rad", where=where)
    known = bool((rows[:, 2] > 0.0).all())
    weight = 1.0 / np.square(rows[:, 2]) if known else np.ones(len(rows))
    volts, of = np.unique(rows[:, 0], return_inverse=True)
    total = np.bincount(of, weight).astype(float)
    value = np.bincount(of, weight * rows[:, 1]).astype(float) / total
    if how == "isotonic":
        fitted, variance = _isotonic(value, total)
    else:
        fitted, variance = _even_fit(volts, value, total, 2 if how == "v2" else 3)
    sigma = np.sqrt(variance) if known else np.zeros_like(fitted)
    result = np.stack([volts, fitted, sigma], 1)
    check_table(result, where=where)
    return result


def _even_fit(volts: Rows, value: Rows, weight: Rows, terms: int) -> tuple[Rows, Rows]:
    scale = max(float(np.abs(volts).max()), 1e-300)
    basis = np.square(volts / scale)[:, None] ** np.arange(terms)
    root = np.sqrt(weight)
    q, r = np.linalg.qr(basis * root[:, None])
    fit: Any = basis @ np.linalg.solve(r, q.T @ (root * value))
    return fit, np.square(q / root[:, None]).sum(1)


def _isotonic(value: Rows, weight: Rows) -> tuple[Rows, Rows]:
    """Nearest monotone values, rising or falling whichever is nearer (pool adjacent violators)."""
    rising, falling = _pooled(value, weight), _pooled(-value, weight)
    misses = [float(weight @ np.square(fit - v)) for (fit, _), v in ((rising, value), (falling, -value))]
    return rising if misses[0] <= misses[1] else (-falling[0], falling[1])


def _pooled(value: Rows, weight: Rows) -> tuple[Rows, Rows]:
    means: list[float] = []
    weights: list[float] = []
    counts: list[int] = []
    for v, w in zip(value.tolist(), weight.tolist(), strict=True):
        means.append(v)
        weights.append(w)
        counts.append(1)
        while len(means) > 1 and means[-2] > means[-1]:
            m, w2, c = means.pop(), weights.pop(), counts.pop()
            means[-1] = (means[-1] * weights[-1] + m * w2) / (weights[-1] + w2)
            weights[-1] += w2
            counts[-1] += c
    return np.repeat(means, counts), np.repeat(1.0 / np.asarray(weights), counts)
