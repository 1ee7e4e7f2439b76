"""Compiled descent over whole turns: single steps and pairs of neighbours, first violation, then power.

Public: descend.
"""

from __future__ import annotations

from meshctl.optics.kernels import filled, float64, given, int32, int64, kernel

_EASED = 1e-10  # turns of violation that count as a change
_SAVED = 1e-9  # of power (in units of the costs) that count as a change
_STAY = 100  # steps at one place before going on to the next


@kernel(float64(float64, float64, float64))
def _over(p, low, high):  # type: ignore[no-untyped-def]
    if p < low:
        return low - p
    if p > high:
        return p - high
    return 0.0


@kernel(float64(*[given(int32)] * 2, *[given(float64)] * 3, filled(float64), int64, int64, int64, int64))
def _violation_change(start, row, value, low, high, own, i, di, j, dj):  # type: ignore[no-untyped-def]
    """Change of the violation when turns i and j (-1: none) step by di and dj; columns are sorted by row."""
    a, a_end = start[i], start[i + 1]
    b, b_end = 0, 0
    if j >= 0:
        b, b_end = start[j], start[j + 1]
    change = 0.0
    while a < a_end or b < b_end:
        if b >= b_end or (a < a_end and row[a] <= row[b]):
            r = row[a]
        else:
            r = row[b]
        step = 0.0
        if a < a_end and row[a] == r:
            step += di * value[a]
            a += 1
        if b < b_end and row[b] == r:
            step += dj * value[b]
            b += 1
        change += _over(own[r] + step, low[r], high[r]) - _over(own[r], low[r], high[r])
    return change


@kernel(
    int64(
        *[given(int32)] * 2,
        *[given(float64)] * 5,
        given(int32, 2),
        given(float64, 2),
        *[given(int64)] * 2,
        filled(int64),
        filled(float64),
        int64,
    )
)
def descend(  # type: ignore[no-untyped-def]
    start, row, value, diagonal, cost, low, high, partner, cross, n_low, n_high, n, own, sweeps
):
    """Step n (and own with it) while violation falls, or stays and power falls; returns the steps taken.

    start, row, value: columns of the inverse, sorted by row; diagonal [A] of it; cost [A] of each turn;
    partner [A, k]: neighbours to step with, -1 for none; cross [A, k]: what one turn of each of them
    changes here. Turns with n_low = n_high stay.
    """
    taken = 0
    for _ in range(sweeps):
        before = taken
        violation = 0.0
        for i in range(len(n)):
            violation += _over(own[i], low[i], high[i])
        for i in range(len(n)):
            if n_low[i] == n_high[i]:
                continue
            for _ in range(_STAY):
                best_v, best_p = 0.0, -_SAVED
                best_di, best_j, best_dj = 0, -1, 0
                within = violation <= _EASED
                for di in (-1, 1):
                    if n[i] + di < n_low[i] or n[i] + di > n_high[i]:
                        continue
                    for k in range(-1, partner.shape[1]):
                        j = -1 if k < 0 else partner[i, k]
                        if k >= 0 and (j < 0 or n_low[j] == n_high[j]):
                            continue
                        for dj in (-1, 1):
                            power, here = di * cost[i], own[i] + di * diagonal[i]
                            if k >= 0:
                                if n[j] + dj < n_low[j] or n[j] + dj > n_high[j]:
                                    continue
                                power += dj * cost[j]
                                here += dj * cross[i, k]
                            elif dj == 1:
                                continue
                            # nothing to ease: most steps cost power or break the own limit at once
                            if within and (power >= best_p or _over(here, low[i], high[i]) > _EASED):
                                continue
                            change = _violation_change(start, row, value, low, high, own, i, di, j, dj)
                            if change > _EASED:
                                continue
                            if change < -_EASED:
                                better = change < best_v - _EASED or (change < best_v + _EASED and power < best_p)
                            else:
                                better = best_v == 0.0 and power < best_p
                                change = 0.0
                            if better:
                                best_v, best_p = change, power
                                best_di, best_j, best_dj = di, j, dj
                if best_di == 0:
                    break
                n[i] += best_di
                for k in range(start[i], start[i + 1]):
                    own[row[k]] += best_di * value[k]
                if best_j >= 0:
                    n[best_j] += best_dj
                    for k in range(start[best_j], start[best_j + 1]):
                        own[row[k]] += best_dj * value[k]
                violation += best_v
                taken += 1
        if taken == before:
            break
    return taken
