"""Compiled choice of codes under a quadratic cost: nearest plane, and descent code by code.

Public: nearest_plane, descend_codes.
"""

from __future__ import annotations

from meshctl.optics.kernels import filled, float64, given, int64, kernel

_WIDTH = 2  # codes either way in one step of the descent


@kernel(filled(int64)(given(float64, 2), given(int64), given(float64, 2), given(int64), given(int64), filled(int64)))
def nearest_plane(factor, order, place, low, high, chosen):  # type: ignore[no-untyped-def]
    """Column of `place` for each channel, from the last in order to the first; returns `chosen`, filled.

    factor [k, k]: upper triangle R of the cost R^T R in that order; place [K, L]: error of each channel at
    each column, of which low to high are allowed. Each takes the column nearest to where the rest, still
    free, could undo all errors made so far.
    """
    n = len(order)
    error = chosen.astype(float64)
    for i in range(n - 1, -1, -1):
        made = 0.0
        for j in range(i + 1, n):
            made += factor[i, j] * error[j]
        wish = -made / factor[i, i]
        k = order[i]
        best = low[k]
        for c in range(low[k], high[k] + 1):
            if abs(place[k, c] - wish) < abs(place[k, best] - wish):
                best = c
        chosen[k] = best
        error[i] = place[k, best]
    return chosen


@kernel(
    int64(
        given(float64, 2),
        given(float64, 2),
        *[given(int64)] * 3,
        filled(int64),
        float64,
        int64,
    )
)
def descend_codes(cost, table, first, low, high, chosen, gain, sweeps):  # type: ignore[no-untyped-def]
    """Step channels by up to two columns while the cost falls by more than `gain`; returns the steps taken.

    cost [A, A]; table [A, L]: error of each actuator at each column, actuators in the order of channels;
    first [K + 1]: where each channel's actuators start. Fills `chosen`.
    """
    n_rows = len(table)
    error, slope = table[:, 0].copy(), table[:, 0].copy()
    for k in range(len(chosen)):
        for r in range(first[k], first[k + 1]):
            error[r] = table[r, chosen[k]]
    for r in range(n_rows):
        slope[r] = 0.0
        for s in range(n_rows):
            slope[r] += cost[r, s] * error[s]
    taken = 0
    for _ in range(sweeps):
        before = taken
        for k in range(len(chosen)):
            best, best_change = chosen[k], -gain
            for c in range(max(low[k], chosen[k] - _WIDTH), min(high[k], chosen[k] + _WIDTH) + 1):
                change = 0.0
                for r in range(first[k], first[k + 1]):
                    step = table[r, c] - error[r]
                    change += 2.0 * slope[r] * step
                    for s in range(first[k], first[k + 1]):
                        change += cost[r, s] * step * (table[s, c] - error[s])
                if change < best_change:
                    best, best_change = c, change
            if best != chosen[k]:
                chosen[k] = best
                taken += 1
                for r in range(first[k], first[k + 1]):
                    step = table[r, best] - error[r]
                    error[r] += step
                    for s in range(n_rows):
                        slope[s] += cost[r, s] * step
        if taken == before:
            break
    return taken
