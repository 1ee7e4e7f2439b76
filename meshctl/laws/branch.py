"""All coupler angles that do the same to light as one angle, apart from signs that phases can carry.

With B(k) the coupler block, [[cos k, i sin k], [i sin k, cos k]], and Z = diag(1, -1):
B(k + m pi) = (-1)^m B(k), and B(m pi - k) = (-1)^m Z B(k) Z.

Public: Branches, branches.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.laws.law import Rows

EDGE_RAD = 1e-12  # an angle this near to an end of the range counts as inside
TWIN_RAD = 1e-9  # two angles this near are one: the plain one stays


@dataclass(frozen=True)
class Branches:
    """Angles that stand for one angle each, rising, [..., branches], NaN past the last.

    The block of an angle is `sign` times that of the wanted one, between two Z = diag(1, -1) where
    `flipped`: pi on the second lane before and after it.
    """

    angle_rad: Rows
    sign: Rows
    flipped: NDArray[np.bool_]


def branches(angle_rad: ArrayLike, low_rad: ArrayLike, high_rad: ArrayLike) -> Branches:
    """Every k + m pi and m pi - k inside the range, for each wanted angle k.

    Parameters
    ----------
    angle_rad, low_rad, high_rad : arrays that broadcast together, finite

    Examples
    --------
    >>> branches(0.5, 3.0, 7.0).angle_rad.round(4).tolist()
    [3.6416, 5.7832, 6.7832]
    """
    k, low, high = np.broadcast_arrays(*(np.asarray(a, float) for a in (angle_rad, low_rad, high_rad)))
    if not (np.isfinite(k).all() and np.isfinite(low).all() and np.isfinite(high).all()):
        raise ValueError("angle_rad, low_rad and high_rad must be finite")
    low, high = low - EDGE_RAD, high + EDGE_RAD
    count = int(max(np.floor((high - low) / np.pi).max(initial=0.0) + 1, 1))
    families = []
    for start in (k, -k):
        first = np.ceil((low - start) / np.pi)
        m = first[..., None] + np.arange(count)
        families.append((start[..., None] + m * np.pi, m))
    angle = np.concatenate([a for a, _ in families], -1)
    sign = 1.0 - 2.0 * np.mod(np.concatenate([m for _, m in families], -1), 2.0)
    flipped = np.broadcast_to(np.arange(2 * count) >= count, angle.shape)
    outside = (angle > high[..., None]) | (angle < low[..., None])
    angle = np.where(outside, np.nan, angle)
    angle, sign, flipped = _sorted(angle, sign, flipped)
    twins = angle[..., 1:] - angle[..., :-1] <= TWIN_RAD
    doubled = np.zeros(angle.shape, bool)
    doubled[..., 1:] |= twins & flipped[..., 1:]
    doubled[..., :-1] |= twins & flipped[..., :-1]
    angle, sign, flipped = _sorted(np.where(doubled, np.nan, angle), sign, flipped)
    gone = np.isnan(angle)
    return Branches(angle, np.where(gone, np.nan, sign), flipped & ~gone)


def _sorted(angle: Rows, sign: Rows, flipped: NDArray[np.bool_]) -> tuple[Rows, Rows, NDArray[np.bool_]]:
    """Rising along the last axis, cut after the longest row that is not NaN."""
    order = np.argsort(angle, -1)  # NaN last
    found = int(np.isfinite(angle).sum(-1).max(initial=0))
    angle, sign = (np.take_along_axis(a, order, -1)[..., :found] for a in (angle, sign))
    return angle, sign, np.take_along_axis(flipped, order, -1)[..., :found]
