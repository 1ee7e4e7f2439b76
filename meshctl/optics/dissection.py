"""In which order the parts of a net are joined: nested halves with few links between them.

Public: Halving, dissect.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

ANGLES = np.arange(6) * np.pi / 6  # directions in which a cut is tried: rows of squares and of hexagons
BALANCE = 0.35  # the smaller half holds at least this share of the parts


@dataclass(frozen=True, eq=False)
class Halving:
    """Nested halves, innermost first; step k closes the links `closed[first[k]:first[k + 1]]`."""

    closed: np.ndarray  # i64[links]
    first: np.ndarray  # i64[steps + 1]


def dissect(n_parts: int, links: np.ndarray, xy: np.ndarray | None = None, leaf: int = 2) -> Halving:
    """Halve a net again and again where few links cross.

    Parameters
    ----------
    n_parts : int
    links : int (L, 2), the two parts of every link
    xy : float (n_parts, 2), where parts stand; None: distances along the links serve instead
    leaf : int, parts that are joined at once

    Returns
    -------
    Halving

    Cost: n log n. Source: George, "Nested dissection of a regular finite element mesh", 1973.
    """
    place = _hop_places(n_parts, links) if xy is None else np.asarray(xy, float)
    along = np.stack([place @ np.array([np.cos(t), np.sin(t)]) for t in ANGLES])
    along += 1e-9 * np.ptp(along) * np.arange(n_parts) / n_parts  # ties go by number
    closed: list[np.ndarray] = []
    todo = [(np.arange(n_parts), np.arange(len(links)))]
    local = np.empty(n_parts, np.int64)
    while todo:  # outermost first, reversed at the end
        parts, inside = todo.pop()
        if len(parts) <= leaf or len(inside) == 0:
            closed.append(inside)
            continue
        ends = links[inside]
        local[parts] = np.arange(len(parts))
        left = _best_cut(along[:, parts], local[ends])
        side = left[local[ends]]
        closed.append(inside[side[:, 0] != side[:, 1]])
        todo.append((parts[left], inside[side[:, 0] & side[:, 1]]))
        todo.append((parts[~left], inside[~side[:, 0] & ~side[:, 1]]))
    closed = [step for step in reversed(closed) if len(step)]
    first = np.concatenate([[0], np.cumsum([len(step) for step in closed], dtype=np.int64)])
    return Halving(np.concatenate([*closed, np.empty(0, np.int64)]), first.astype(np.int64))


def _best_cut(along: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Which parts lie on the first side of the straight cut that the fewest links cross."""
    n = along.shape[1]
    low, high = max(1, int(BALANCE * n)), min(n - 1, n - int(BALANCE * n))
    best, left = None, np.zeros(n, bool)
    for values in along:
        order = np.argsort(values)
        rank = np.empty(n, np.int64)
        rank[order] = np.arange(n)
        reach = np.sort(rank[ends], axis=1)
        opened = np.bincount(reach[:, 0] + 1, minlength=n + 1) - np.bincount(reach[:, 1] + 1, minlength=n + 2)[: n + 1]
        crossing = np.cumsum(opened)[low : high + 1]
        lean = abs(np.arange(low, high + 1) - 0.5 * n) / n  # among equal cuts the most even
        score = crossing + lean
        at = int(np.argmin(score))
        if best is None or score[at] < best:
            best, left = score[at], rank < low + at
    return left


def _hop_places(n_parts: int, links: np.ndarray) -> np.ndarray:
    """Distances in links from two far ends of every connected piece, pieces side by side."""
    both = np.concatenate([links, links[:, ::-1]])
    both = both[np.argsort(both[:, 0], kind="stable")]
    first = np.searchsorted(both[:, 0], np.arange(n_parts + 1))
    place = np.full((n_parts, 2), -1.0)
    shift = 0.0
    for seed in range(n_parts):
        if place[seed, 0] >= 0:
            continue
        piece, hops = _hops(seed, both[:, 1], first)
        piece, hops = _hops(int(piece[-1]), both[:, 1], first)
        place[piece, 0] = hops + shift
        middle = piece[np.argmin(abs(hops - 0.5 * hops[-1]))]
        again, hops = _hops(int(middle), both[:, 1], first)
        again, hops = _hops(int(again[-1]), both[:, 1], first)
        place[again, 1] = hops
        shift += float(hops[-1]) + float(np.ptp(place[piece, 0])) + 1.0
    return place


def _hops(seed: int, neighbour: np.ndarray, first: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Parts reached from `seed`, nearest first, and their distance."""
    seen = {seed}
    reached, hops = [seed], [0]
    for part, far in zip(reached, hops, strict=False):
        for other in neighbour[first[part] : first[part + 1]].tolist():
            if other not in seen:
                seen.add(other)
                reached.append(other)
                hops.append(far + 1)
    return np.array(reached), np.array(hops)
