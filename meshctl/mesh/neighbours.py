"""Crosstalk coefficients from the places of both arms, and the phase error of leaving out the far ones.

A heater warms one arm, and a phase is the difference of two arms: a neighbour whose other arm is nearer
to the heater loses phase. So coefficients from places carry either sign.

Public: from_positions, split_far, dropped_error_rad, Dropped, DISTANCE_LAWS, DROPPED_LIMIT_RAD.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import CrosstalkUnsound, OutOfRange, UnknownKey

Floats = NDArray[np.float64]

DROPPED_LIMIT_RAD = 0.01  # common practice: an error below the calibration's own
_ROWS_AT_ONCE = 512


def _exponential(distance: Floats, length: float) -> Floats:
    return np.exp(-distance / length)


def _inverse(distance: Floats, length: float) -> Floats:
    with np.errstate(divide="ignore"):
        return length / distance


# law -> share of the heater's own warming at a distance, times the amplitude
DISTANCE_LAWS: dict[str, Callable[[Floats, float], Floats]] = {
    "exponential": _exponential,  # amplitude * exp(-distance / length): a chip on a cold base
    "inverse": _inverse,  # amplitude * length / distance: a thick, cold-bottomed chip near the heater
}


@dataclass(frozen=True)
class Dropped:
    """Phase error of crosstalk that is left out, over all actuators."""

    worst_rad: float
    rms_rad: float


def from_positions(
    xy_upper: ArrayLike,
    xy_lower: ArrayLike,
    amplitude: float,
    length_um: float,
    law: str,
    *,
    keep_above: float = 0.0,
    swing_rad: ArrayLike = 2.4 * np.pi,
) -> Any:
    """Signed crosstalk of heaters that lie on the upper arms.

    Parameters
    ----------
    xy_upper, xy_lower : arrays [A, 2], um
        Places of the warmed arm and of the arm it is compared with; a row of NaN in `xy_lower` is a phase
        with one arm.
    amplitude : float
        Warming of another arm, as a share of that of the heater's own: at no distance (exponential), at
        `length_um` (inverse).
    length_um : float, um
    law : "exponential" or "inverse"
    keep_above : float
        Coefficients of smaller size are left out, if the error of that stays below DROPPED_LIMIT_RAD.
    swing_rad : float or array [A], rad
        Largest own change of each actuator, for that error.

    Returns
    -------
    scipy.sparse.csr_array [A, A]
        rad of actuator row per rad that actuator column gives itself; empty diagonal.

    Raises
    ------
    UnknownKey
        For a law that does not exist.
    OutOfRange
        Where a heater would warm another arm as much as its own, or both arms of a phase alike.
    CrosstalkUnsound
        Where too much would be left out.

    Example
    -------
    >>> upper, lower = [[0.0, 0.0], [0.0, 100.0]], [[0.0, 50.0], [0.0, 150.0]]
    >>> from_positions(upper, lower, 0.4, 50.0, "exponential").toarray().round(4)
    array([[ 0.    , -0.1091],
           [ 0.0401,  0.    ]])

    Cost: A^2 distances, in slices of rows.
    """
    from scipy import sparse

    if law not in DISTANCE_LAWS:
        raise UnknownKey(f"distance law '{law}' is not known", remedy=f"use one of {', '.join(DISTANCE_LAWS)}")
    upper, lower = np.asarray(xy_upper, float), np.asarray(xy_lower, float)
    n = len(upper)
    other = amplitude * DISTANCE_LAWS[law](np.hypot(*(lower - upper).T), length_um)
    own = 1.0 - np.where(np.isnan(other), 0.0, other)
    if not (own > 0.0).all():
        row = int(np.argmin(own))
        raise OutOfRange(
            f"a heater warms the arm it is compared with {1.0 - own[row]:.4g} times as much as its own, must be"
            " below 1",
            where=f"actuator {row}",
            remedy="lower the amplitude or move the arms apart",
        )
    swing = np.broadcast_to(np.asarray(swing_rad, float), n)
    blocks, errors = [], []
    for start in range(0, n, _ROWS_AT_ONCE):
        rows = slice(start, min(n, start + _ROWS_AT_ONCE))
        here = np.arange(rows.start, rows.stop)
        block = _warming(upper[rows], upper, amplitude, length_um, law)
        block -= np.nan_to_num(_warming(lower[rows], upper, amplitude, length_um, law), posinf=np.inf)
        block[here - start, here] = 0.0
        block /= own
        if not (np.abs(block) < 1.0).all():
            size = np.nan_to_num(np.abs(block), nan=np.inf)
            i, j = np.unravel_index(int(np.argmax(size)), block.shape)
            raise OutOfRange(
                f"actuator {j} gives actuator {start + i} {block[i, j]:.4g} rad per rad, must be between -1 and 1",
                remedy="lower the amplitude or move the arms apart",
            )
        kept = np.where(np.abs(block) > keep_above, block, 0.0)
        errors.append(_error_by_row(block - kept, swing))
        blocks.append(sparse.csr_array(kept))
    if n == 0:
        return sparse.csr_array((0, 0))
    _refuse(np.concatenate(errors, axis=1))
    return sparse.vstack(blocks, format="csr")


def split_far(K: Any, near_tolerance: float) -> tuple[Any, Any]:
    """Part K into coefficients of a size above `near_tolerance`, and the rest.

    Returns
    -------
    near, far : scipy.sparse.csr_array [A, A]
        Their sum is K.

    Example
    -------
    >>> near, far = split_far([[0.0, 0.05], [1e-4, 0.0]], 1e-3)
    >>> near.toarray().tolist(), far.toarray().tolist()
    ([[0.0, 0.05], [0.0, 0.0]], [[0.0, 0.0], [0.0001, 0.0]])
    """
    from scipy import sparse

    entries = sparse.coo_array(K)
    big = np.abs(entries.data) > near_tolerance
    near, far = (
        sparse.coo_array((entries.data[m], (entries.row[m], entries.col[m])), shape=entries.shape).tocsr()
        for m in (big, ~big)
    )
    return near, far


def dropped_error_rad(K_dropped: Any, reach_rad: ArrayLike) -> Dropped:
    """Phase error of leaving coefficients out.

    Parameters
    ----------
    K_dropped : scipy.sparse matrix or array, [A, A]
        What is left out.
    reach_rad : float or array [A], rad
        Largest own change of each actuator, either way.

    Returns
    -------
    Dropped
        `worst_rad`: every actuator at the end of its reach, each with the worse sign; `rms_rad`: over all
        actuators, for own changes spread evenly from 0 to their reach.

    Raises
    ------
    CrosstalkUnsound
        Where the worst case is above DROPPED_LIMIT_RAD.

    Example
    -------
    >>> dropped_error_rad([[0.0, 1e-3], [0.0, 0.0]], 6.0).worst_rad
    0.006
    """
    from scipy import sparse

    dropped = sparse.csr_array(K_dropped, dtype=float)
    reach = np.broadcast_to(np.asarray(reach_rad, float), dropped.shape[1])
    return _refuse(_error_by_row(dropped, reach))


def _warming(arms: Floats, heaters: Floats, amplitude: float, length_um: float, law: str) -> Floats:
    step = arms[:, None, :] - heaters[None, :, :]
    share: Floats = amplitude * DISTANCE_LAWS[law](np.hypot(step[..., 0], step[..., 1]), length_um)
    return share


def _error_by_row(dropped: Any, reach: Floats) -> Floats:
    """Rows worst [A] and mean square [A] of the error."""
    mean = dropped @ (0.5 * reach)
    scatter = np.asarray(abs(dropped) ** 2 @ np.square(reach)) / 12.0  # variance of an even spread
    return np.stack([np.asarray(abs(dropped) @ reach), np.square(mean) + scatter])


def _refuse(by_row: Floats) -> Dropped:
    worst, square = by_row
    found = Dropped(float(worst.max(initial=0.0)), float(np.sqrt(square.mean())) if len(square) else 0.0)
    if not found.worst_rad <= DROPPED_LIMIT_RAD:
        raise CrosstalkUnsound(
            f"the crosstalk that is left out gives a phase error of up to {found.worst_rad:.4g} rad (rms"
            f" {found.rms_rad:.4g} rad), must be at most {DROPPED_LIMIT_RAD:g} rad",
            where=f"actuator {int(np.argmax(worst))}",
            remedy="keep smaller coefficients, or keep the far part beside the near one",
        )
    return found
