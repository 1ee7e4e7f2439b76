"""Decomposition steps put on real cells: known splitting errors, phase errors and limits allowed for.

Cell by cell in light order the real cell is given the wanted splitting, and what is left over, two phases
behind it, is carried on to the next column (local correction: Bandyopadhyay et al., Optica 2021). The same
walk serves tunable couplers: any 2x2 cell that reaches a splitting gives a step up to phases behind it.
Public: Fitted, fit_cells.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from meshctl.mesh.graph import AsBuilt, Net
from meshctl.optics.elements import GUIDE, PHASE
from meshctl.optics.feedforward import Circuit
from meshctl.optics.kernels import complex128, filled, float64, given, inner, int32, int64, kernel, uint8, void
from meshctl.solver.cells import CellTable
from meshctl.solver.decompose import Steps
from meshctl.solver.reach import Reach
from meshctl.solver.solution import Shortfall

SLACK = 1e-9  # rad beyond its reach that counts as in reach: far below what any source resolves
ALIGNED = 1e-13  # product of bar and cross amplitude below which a cell is bar or cross, its phase free


@inner
def _nearest(wanted, low, high, period):  # type: ignore[no-untyped-def]
    """The lowest reachable value that equals `wanted` up to whole periods, else the nearest end."""
    if period <= 0.0:
        return min(max(wanted, low), high)
    x = wanted + math.ceil((low - SLACK - wanted) / period) * period
    if x <= high + SLACK:
        return min(max(x, low), high)
    return high if x - high <= low - (x - period) else low


@inner
def _wrapped(x, period):  # type: ignore[no-untyped-def]
    """x less the nearest whole number of periods."""
    return x - period * math.floor(x / period + 0.5)


@inner
def _turn(phase):  # type: ignore[no-untyped-def]
    return complex(math.cos(phase), math.sin(phase))


@inner
def _inner_phase(bar, cross, a, b, error, low, high, period, flip):  # type: ignore[no-untyped-def]
    """(setting, wanted) of a Mach-Zehnder cell with couplers a, b that is to split as bar to cross."""
    quarter = math.pi / 4
    if abs(a - quarter) < 1e-15 and abs(b - quarter) < 1e-15:
        theta = 2.0 * math.atan2(bar, cross)  # acos loses half the digits near bar and cross
    else:
        ca, sa, cb, sb = math.cos(a), math.sin(a), math.cos(b), math.sin(b)
        swing = 2.0 * ca * cb * sa * sb
        x = (ca * ca * cb * cb + sa * sa * sb * sb - bar * bar) / swing if swing != 0.0 else 0.0
        theta = math.acos(min(max(x, -1.0), 1.0))
    if flip == 1:
        theta = -theta
    # both signs split alike; the second is taken where the first is out of reach
    plus = _nearest(theta - error, low, high, period)
    off_plus = _wrapped(plus + error - theta, 2 * math.pi)
    if abs(off_plus) <= SLACK:
        return plus, plus - off_plus
    minus = _nearest(-theta - error, low, high, period)
    off_minus = _wrapped(minus + error + theta, 2 * math.pi)
    if abs(off_minus) < abs(off_plus):
        return minus, minus - off_minus
    return plus, plus - off_plus


@inner
def _coupler_angle(bar, cross, error, low, high, idle):  # type: ignore[no-untyped-def]
    """(setting, wanted) of the angle n pi +- k nearest to rest within reach, else nearest to the reach."""
    k = math.atan2(cross, bar)
    best, best_wanted, best_cost = idle, idle, 1e300
    first, last = math.floor((low + error) / math.pi) - 1, math.ceil((high + error) / math.pi) + 1
    for n in range(int(first), int(last) + 1):
        for sign in range(-1, 2, 2):
            wanted = n * math.pi + sign * k - error
            x = min(max(wanted, low), high)
            off = abs(x - wanted)
            # out of reach counts before distance from rest
            cost = (off * 1e6 if off > SLACK else 0.0) + abs(x - idle)
            if cost < best_cost:
                best, best_wanted, best_cost = x, wanted, cost
    return best, best_wanted


@inner
def _mzi_block(a, b, theta):  # type: ignore[no-untyped-def]
    """C(b) diag(exp(i theta), 1) C(a)."""
    ca, sa, cb, sb, et = math.cos(a), math.sin(a), math.cos(b), math.sin(b), _turn(theta)
    return (
        ca * cb * et - sa * sb,
        1j * (cb * sa * et + sb * ca),
        1j * (sb * ca * et + cb * sa),
        ca * cb - sa * sb * et,
    )


@inner
def _step_block(half, outer):  # type: ignore[no-untyped-def]
    """An ideal cell of half angle `half` and outer phase `outer`."""
    s, c, e, g = math.sin(half), math.cos(half), _turn(outer), 1j * _turn(half)
    return g * e * s, g * c, g * e * c, -g * s


_IN = given(float64)


@kernel(
    void(
        given(int32),  # event
        given(uint8),  # form
        given(int32),  # lane
        given(int32, 2),  # element
        given(int64),  # step of each cell, -1: bar
        _IN,  # half angle of each step
        _IN,  # outer phase of each step
        given(int32),  # setting_of
        _IN,  # base: nominal + error, by element
        given(int32),  # lane of each element
        given(uint8),  # is_phase, by element
        _IN,  # low
        _IN,  # high
        _IN,  # period
        _IN,  # idle, within low..high
        given(uint8),  # flip: cells whose inner phase is taken negative
        uint8,  # free_inputs: 1 where input phases do not count
        filled(float64),  # settings, at idle
        filled(float64),  # wanted, at idle
        filled(float64),  # off: used minus wanted cross power, by cell
        filled(complex128),  # carried: physical = carried * ideal, by lane
        filled(uint8),  # aligned: phases that no cell needs, by setting
        filled(int32),  # output element of each lane, -1
    )
)
def _walk(  # type: ignore[no-untyped-def]
    event, form, lane, element, step, half, outer, setting_of, base, lane_of, is_phase,
    low, high, period, idle, flip, free_inputs, settings, wanted, off, carried, aligned, output,
):  # fmt: skip
    # lanes of one group hang together in phase; between groups input phases are still to be chosen
    group = np.arange(len(carried))
    for v in range(len(event)):
        c = event[v]
        if c < 0:
            e = -1 - c
            if is_phase[e] == 1:
                q = lane_of[e]
                if setting_of[e] >= 0 and output[q] < 0:
                    output[q] = e
                else:
                    s = setting_of[e]
                    carried[q] *= _turn(base[e] + (settings[s] if s >= 0 else 0.0))
            continue
        m = lane[c]
        for q in range(m, m + 2):
            if output[q] >= 0:  # a settable phase that a cell follows is no output phase: it stays at rest
                carried[q] *= _turn(base[output[q]] + settings[setting_of[output[q]]])
                output[q] = -1
        w00, w01, w10, w11 = complex(1.0, 0.0), 0j, 0j, complex(1.0, 0.0)
        if step[c] >= 0:
            w00, w01, w10, w11 = _step_block(half[step[c]], outer[step[c]])
        upper, lower = carried[m].conjugate(), carried[m + 1].conjugate()
        w00, w01, w10, w11 = w00 * upper, w01 * lower, w10 * upper, w11 * lower
        bar, cross = abs(w00), abs(w01)
        if form[c] == 0:
            i = element[c, 2]
            s = setting_of[i]
            a, b = base[element[c, 1]], base[element[c, 3]]
            settings[s], wanted[s] = _inner_phase(bar, cross, a, b, base[i], low[s], high[s], period[s], flip[c])
            z00, z01, z10, z11 = _mzi_block(a, b, settings[s] + base[i])
        else:
            i = element[c, 1]
            s = setting_of[i]
            settings[s], wanted[s] = _coupler_angle(bar, cross, base[i], low[s], high[s], idle[s])
            real = settings[s] + base[i]
            z00, z01 = complex(math.cos(real), 0.0), complex(0.0, math.sin(real))
            z10, z11 = z01, z00
        off[c] = abs(z01) ** 2 - cross**2
        p = element[c, 0]
        t = setting_of[p]
        match = z01 * w00 * (w01 * z00).conjugate()
        apart = free_inputs == 1 and group[m] != group[m + 1]
        if apart and abs(match) > 0.0:
            # the phase stays at rest, and the inputs that lead to the upper lane are turned for it
            turn = _turn(settings[t] + base[p]) * match.conjugate() / abs(match)
            moved = group[m]
            for q in range(len(group)):
                if group[q] == moved:
                    carried[q] *= turn.conjugate()
            w00, w10 = w00 * turn, w10 * turn
            aligned[t] = 1
        elif bar * cross > ALIGNED and abs(match) > 0.0:
            value = math.atan2(match.imag, match.real) - base[p]
            settings[t] = _nearest(value, low[t], high[t], period[t])
            wanted[t] = settings[t] - _wrapped(settings[t] - value, 2 * math.pi)
        else:
            aligned[t] = 1
        joined = group[m + 1]
        if joined != group[m]:
            for q in range(len(group)):
                if group[q] == joined:
                    group[q] = group[m]
        ep = _turn(settings[t] + base[p])
        # the phases behind the cell, each from the overlap of its row
        q0 = z00 * ep * w00.conjugate() + z01 * w01.conjugate()
        q1 = z10 * ep * w10.conjugate() + z11 * w11.conjugate()
        carried[m] = q0 / abs(q0) if abs(q0) > 0.0 else complex(1.0, 0.0)
        carried[m + 1] = q1 / abs(q1) if abs(q1) > 0.0 else complex(1.0, 0.0)


@dataclass(frozen=True, eq=False)
class Fitted:
    """Settings of all cells and output phases, and what could not be met."""

    settings: np.ndarray  # f64[S]
    shortfalls: tuple[Shortfall, ...]
    free_settings: np.ndarray  # i32, phases that this target leaves free
    bare_lanes: np.ndarray  # i32, lanes whose output phase nothing sets


def _output_phases(
    net: Net,
    output: np.ndarray,
    wanted: np.ndarray,
    base: np.ndarray,
    reach: Reach,
    settings: np.ndarray,
) -> list[Shortfall]:
    """Set the phases behind the lanes; the common phase is chosen for least drive.

    output : i32 (N,), element at each lane's end, -1: none; wanted : rad (N,)
    """
    lanes = np.flatnonzero(output >= 0)
    if not len(lanes):
        return []
    s = net.setting_of[output[lanes]]
    value = wanted[lanes] - base[output[lanes]]
    # candidates: each lane in turn at rest; all lanes must carry a phase for the common one to be free
    common = reach.idle[s] - value if len(lanes) == len(output) else np.zeros(1)
    above = np.mod(value[None, :] + common[:, None] - reach.low[s][None, :] + SLACK, 2 * np.pi)
    over = np.maximum(reach.low[s] + above - reach.high[s] - 2 * SLACK, 0.0)
    best = int(np.argmin(1e6 * over.sum(1) + above.sum(1)))
    low, high, period = reach.low[s], reach.high[s], reach.period[s]
    want = value + common[best]
    turning = period > 0.0
    step = np.where(turning, period, 1.0)
    x = want + np.ceil((low - SLACK - want) / step) * step
    # out of reach: the nearer end, as `_nearest` has it
    ends = np.where(x - high <= low - (x - step), high, low)
    inside = np.clip(np.where(turning, x, want), low, high)
    found = np.where(turning & (x > high + SLACK), ends, inside)
    settings[s] = found
    off = found - want - 2 * math.pi * np.floor((found - want) / (2 * math.pi) + 0.5)
    missed = np.flatnonzero(np.abs(off) > 2 * SLACK)
    return [Shortfall(int(s[k]), float(found[k] - off[k]), float(found[k]), 0.0) for k in missed]


def fit_cells(
    net: Net, as_built: AsBuilt, circuit: Circuit, table: CellTable, steps: Steps, step_of: np.ndarray,
    reach: Reach, free: str, flip: np.ndarray | None = None,
) -> Fitted:  # fmt: skip
    """Set every cell so that the chip as built gives the steps, as near as it can.

    Parameters
    ----------
    step_of : int64 (C,), the step that each cell of `table` takes, -1: bar
    reach : Reach of all settings
    free : port phases that do not count
    flip : uint8 (C,), cells whose inner phase is taken negative; the phases behind them are pushed on

    Cost: linear in the cells.
    """
    n = len(net.inputs)
    base = np.where(net.setting_of >= 0, 0.0, net.nominal) + as_built.error_rad
    settings = np.minimum(np.maximum(reach.idle, reach.low), reach.high)
    wanted, off = settings.copy(), np.zeros(len(table.cell))
    carried = np.ones(circuit.n_lanes, complex)
    aligned = np.zeros(net.n_settings, np.uint8)
    output = np.full(circuit.n_lanes, -1, np.int32)
    _walk(
        table.event, table.form, table.lane, table.element, step_of, steps.half_angle_rad, steps.outer_rad,
        net.setting_of, base, circuit.element_lane_a, ((net.kind == PHASE) | (net.kind == GUIDE)).astype(np.uint8),
        reach.low, reach.high, reach.period, reach.idle,
        np.zeros(len(table.cell), np.uint8) if flip is None else flip, np.uint8(free in ("inputs", "both")),
        settings, wanted, off, carried, aligned, output,
    )  # fmt: skip
    missed = np.flatnonzero(np.abs(settings - wanted) > 2 * SLACK)
    cell_off = np.zeros(net.n_settings)
    splitting = np.where(table.form == 0, table.element[:, 2], table.element[:, 1])
    cell_off[net.setting_of[splitting]] = off
    # a splitting out of the cell's own range shows in the power alone
    beyond = np.flatnonzero(np.abs(cell_off) > 2 * SLACK)
    rows = np.union1d(missed, beyond)
    shortfalls = [Shortfall(int(s), float(wanted[s]), float(settings[s]), float(cell_off[s])) for s in rows]
    if free in ("outputs", "both"):
        bare = np.empty(0, np.int32)
    else:
        ends = output[:n]
        phase = np.angle(steps.output * np.conj(carried[:n]))
        shortfalls += _output_phases(net, ends, phase, base, reach, settings)
        bare = np.flatnonzero(ends < 0).astype(np.int32)
    return Fitted(settings, tuple(shortfalls), np.flatnonzero(aligned).astype(np.int32), bare)
