"""Which parts of a net can be set to bar or cross, as built and within reach, and states turned into settings.

A switch is a coupler alone, or two fixed couplers of one cell joined on both arms (Mach-Zehnder). One number
moves it, its drive: the coupler's angle, or the phase difference of the arms, both in force:

- coupler of angle k: cross power sin^2 k, bar at k = 0 and cross at k = pi/2, again after every pi;
- couplers k1, k2 and phase difference d: cross power sin^2(k1 + k2) cos^2(d/2) + sin^2(k1 - k2) sin^2(d/2),
  so the extremes stand at d = 0 and pi, again after every 2 pi.

Public: BAR, CROSS, Switches, find_switches, settings_for, Passing, passing.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from meshctl.mesh.graph import AsBuilt, Net
from meshctl.optics.elements import COUPLER, CROSSING, GUIDE, KINDS, LOSS, PHASE
from meshctl.solver.reach import Reach
from meshctl.units import TWO_PI, UM_PER_CM, amplitude_from_loss_db

BAR, CROSS = 0, 1
SLACK = 1e-9  # rad; as in the local correction: far below what any source resolves
LEAST_EXTINCTION_DB = 10.0  # a state that leaks more is none: a tenth of the light goes astray


@dataclass(frozen=True, eq=False)
class Switches:
    """R switches; port order is a1, a2, b1, b2, bar joins a1-b1 and a2-b2, cross a1-b2 and a2-b1."""

    net: Net
    couplers: np.ndarray  # i32[R, 2], elements; -1 second: a coupler alone
    ports: np.ndarray  # i32[R, 4], ports of the net
    angles: np.ndarray  # f64[R, 2], of a pair in force; 0 for a coupler alone
    amplitude: np.ndarray  # f64[R, 3]: couplers, upper arm, lower arm
    base_rad: np.ndarray  # f64[R], drive with all its settings at zero
    of: np.ndarray  # i32[M], (switch, setting) pairs, sorted by switch
    setting: np.ndarray  # i32[M]
    weight: np.ndarray  # f64[M], drive per setting
    low: np.ndarray  # f64[M], of the setting
    high: np.ndarray
    idle: np.ndarray
    length_um: np.ndarray  # f64[R], guides inside (mean of the arms)
    rest_rad: np.ndarray  # f64[S], where all settings of the net stand without drive

    def __len__(self) -> int:
        return len(self.base_rad)

    @property
    def is_pair(self) -> np.ndarray:
        return np.asarray(self.couplers[:, 1] >= 0)

    @property
    def cell(self) -> np.ndarray:
        """The net's cell of each switch, -1: in none."""
        return np.asarray(self.net.cell_of[self.couplers[:, 0]])

    @cached_property
    def names(self) -> list[str]:
        """The cell's name where the cell has one switch, else the first coupler's."""
        cells, elements = self.net.names.cells, self.net.names.elements
        count = np.bincount(self.cell[self.cell >= 0], minlength=self.net.n_cells)
        return [
            cells[c] if c >= 0 and count[c] == 1 else elements[e]
            for c, e in zip(self.cell.tolist(), self.couplers[:, 0].tolist(), strict=True)
        ]

    @property
    def period(self) -> np.ndarray:
        return np.where(self.is_pair, TWO_PI, np.pi)

    def _summed(self, per_pair: np.ndarray) -> np.ndarray:
        return self.base_rad + np.bincount(self.of, per_pair, minlength=len(self))

    @cached_property
    def range_rad(self) -> tuple[np.ndarray, np.ndarray]:
        """Lowest and highest drive within the settings' reach, f64[R] each."""
        ends = self.weight * self.low, self.weight * self.high
        return self._summed(np.minimum(*ends)), self._summed(np.maximum(*ends))

    @cached_property
    def idle_rad(self) -> np.ndarray:
        """Drive where all settings rest."""
        return self._summed(self.weight * self.idle)

    def drive_of(self, settings: np.ndarray) -> np.ndarray:
        """Drive [R] of settings [S], stuck ones as they are stuck."""
        return self._summed(self.weight * np.clip(settings[self.setting], self.low, self.high))

    def powers(self, drive: np.ndarray) -> np.ndarray:
        """Power passed from each port in bar and in cross, f64[R, 4, 2], losses in."""
        pair = self.is_pair
        single = np.stack([np.cos(drive) ** 2, np.sin(drive) ** 2], 1)[:, None, :].repeat(4, 1)
        (c1, s1), (c2, s2) = ((np.cos(k), np.sin(k)) for k in self.angles.T)
        up, low = self.amplitude[:, 1] * np.exp(1j * drive), self.amplitude[:, 2]
        bar = c2 * c1 * up - s2 * s1 * low, c2 * c1 * low - s2 * s1 * up
        cross = s2 * c1 * up + c2 * s1 * low, c2 * s1 * up + s2 * c1 * low  # from a1, from a2
        # from b1 and b2 by reciprocity
        fields = np.stack([[bar[0], bar[1], bar[0], bar[1]], [cross[0], cross[1], cross[1], cross[0]]], -1)
        double = np.abs(fields.swapaxes(0, 1)) ** 2
        out: np.ndarray = np.where(pair[:, None, None], double, single) * self.amplitude[:, :1, None] ** 2
        return out

    def cross_share(self, drive: np.ndarray) -> np.ndarray:
        """Cross power over all power that leaves, from each port, f64[R, 4]."""
        power = self.powers(drive)
        return np.asarray(power[..., CROSS] / power.sum(-1))

    def _extremes(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """Drives of least and of greatest cross power, and these powers, without losses."""
        total, apart = (np.sin(self.angles[:, 0] + sign * self.angles[:, 1]) ** 2 for sign in (1, -1))
        pair = self.is_pair
        at_zero = pair & (total < apart)
        least = np.where(pair, np.where(at_zero, 0.0, np.pi), 0.0)
        most = np.where(pair, np.where(at_zero, np.pi, 0.0), np.pi / 2)
        low, high = np.minimum(total, apart), np.maximum(total, apart)
        return least, most, np.where(pair, low, 0.0), np.where(pair, high, 1.0)

    def drives_for(self, share: np.ndarray, entering: np.ndarray | None = None) -> np.ndarray:
        """Drives within reach that come nearest to wished cross shares, f64[R].

        Parameters
        ----------
        share : float (R,), cross power over all power that leaves: 0 is bar, 1 is cross
        entering : int (R,), port that light enters, where arms lose unequally; None: a1

        Of drives that come equally near, the one nearest to rest.
        """
        least, most, low, high = self._extremes()
        span = np.where(high > low, high - low, 1.0)
        part = np.clip((share - low) / span, 0.0, 1.0)
        turn = np.where(self.is_pair, 2.0, 1.0) * np.arctan2(np.sqrt(part), np.sqrt(1.0 - part))
        # the way from the least to the greatest cross power is pi for a pair, pi/2 for a coupler, either sign
        direction = np.where(most >= least, 1.0, -1.0)
        turn = self._uneven(share, np.zeros(len(self), int) if entering is None else entering, least, direction, turn)
        both = [self._within_reach(least + sign * direction * turn) for sign in (1.0, -1.0)]
        (first, off_first), (second, off_second) = both
        nearer = np.abs(second - self.idle_rad) < np.abs(first - self.idle_rad) - SLACK
        swap = (off_second < off_first - SLACK) | ((off_second <= off_first + SLACK) & nearer)
        return np.where(swap, second, first)

    def _uneven(
        self, share: np.ndarray, entering: np.ndarray, least: np.ndarray, direction: np.ndarray, turn: np.ndarray
    ) -> np.ndarray:
        """Halve the way from bar to cross where arms of a pair lose unequally, which the closed form leaves out."""
        rows = np.flatnonzero(self.is_pair & (np.abs(self.amplitude[:, 1] - self.amplitude[:, 2]) > 1e-12))
        rows = rows[(share[rows] > 0.0) & (share[rows] < 1.0)]
        if not len(rows):
            return turn
        low, high = np.zeros(len(self)), np.full(len(self), np.pi)
        everyone = np.arange(len(self))
        for _ in range(60):  # pi / 2^60 is below rounding
            middle = 0.5 * (low + high)
            less = self.cross_share(least + direction * middle)[everyone, entering] < share
            low, high = np.where(less, middle, low), np.where(less, high, middle)
        turn = turn.copy()
        turn[rows] = 0.5 * (low + high)[rows]
        return turn

    def _within_reach(self, wanted: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The drive within reach equal to `wanted` up to whole periods, nearest to rest, else the nearest end.

        Returns the drive and how far it is off.
        """
        (low, high), period = self.range_rad, self.period
        first = np.ceil((low - SLACK - wanted) / period)
        last = np.floor((high + SLACK - wanted) / period)
        n = np.clip(np.round((self.idle_rad - wanted) / period), first, np.maximum(first, last))
        inside = np.clip(wanted + n * period, low, high)
        off_low, off_high = (np.abs(end - wanted - period * np.round((end - wanted) / period)) for end in (low, high))
        reached = first <= last
        drive = np.where(reached, inside, np.where(off_high <= off_low, high, low))
        return drive, np.where(reached, 0.0, np.minimum(off_low, off_high))

    @cached_property
    def state_drive(self) -> np.ndarray:
        """Drive of bar and of cross, the nearest that reach allows, f64[R, 2]."""
        return np.stack([self.drives_for(np.full(len(self), float(state))) for state in (BAR, CROSS)], 1)

    @cached_property
    def state_loss_db(self) -> np.ndarray:
        """Loss from each port in bar and in cross, leaks counted as lost, f64[R, 4, 2]."""
        with np.errstate(divide="ignore"):
            return np.stack([-10.0 * np.log10(self.powers(self.state_drive[:, s])[..., s]) for s in (BAR, CROSS)], -1)

    def states_within(self, least_extinction_db: float = LEAST_EXTINCTION_DB) -> np.ndarray:
        """True where a switch can be set to bar, to cross, with at least this extinction, bool[R, 2]."""
        leak = 10.0 ** (-0.1 * least_extinction_db)
        astray = np.stack([np.abs(self.cross_share(self.state_drive[:, s]) - s).max(1) for s in (BAR, CROSS)], 1)
        return np.asarray(astray <= leak)

    @cached_property
    def tied(self) -> np.ndarray:
        """The same number for switches that share a setting, numbers without holes, i32[R]."""
        first = np.arange(len(self))
        free = self.high > self.low  # what nothing moves ties nothing
        of, setting = self.of[free], self.setting[free]
        order = np.argsort(setting, kind="stable")
        shared = np.flatnonzero(setting[order][1:] == setting[order][:-1])
        pairs = [(int(of[order[k]]), int(of[order[k + 1]])) for k in shared]
        while pairs:  # smallest number of a chain of shared settings wins
            low = [min(first[a], first[b]) for a, b in pairs]
            if all(first[a] == first[b] for a, b in pairs):
                break
            for (a, b), number in zip(pairs, low, strict=True):
                first[a] = first[b] = number
        return np.unique(first, return_inverse=True)[1].astype(np.int32)


def _value_in_force(net: Net, as_built: AsBuilt) -> np.ndarray:
    """Values [E] with every setting at zero."""
    return np.where(net.setting_of >= 0, 0.0, net.nominal) + as_built.error_rad


@dataclass(frozen=True, eq=False)
class Passing:
    """Light through fixed parts, for every port that it enters; P ports."""

    after: np.ndarray  # i32[P], port that it leaves by; -1: it stops or is divided there
    loss_db: np.ndarray  # f64[P]


def element_loss_db(net: Net, as_built: AsBuilt) -> np.ndarray:
    """Loss of every element but measured ones in dB per lane, f64[E]."""
    own = np.array([kind.unit == "dB" for kind in KINDS])[net.kind]
    out: np.ndarray = (
        as_built.loss_db + np.where(own, net.nominal, 0.0) + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
    )
    return out


def passing(net: Net, as_built: AsBuilt) -> Passing:
    """How fixed parts pass light on: straight through two ports, crossed in crossings.

    A measured part of four ports passes light as it does with most of it, if what goes astray is little. Light that
    parts return is lost to routes.
    """
    owner = net.element_of_port
    place = np.arange(len(net.mate)) - net.port_start[owner]
    size = np.diff(net.port_start)[owner]
    after = np.full(len(net.mate), -1, np.int32)
    two = size == 2
    after[two] = net.port_start[owner[two]] + 1 - place[two]
    crossing = net.kind[owner] == CROSSING
    after[crossing] = net.port_start[owner[crossing]] + 3 - place[crossing]  # a1 - b2, a2 - b1
    loss = element_loss_db(net, as_built)[owner]
    for e, part in net.measured.items():
        power = np.abs(part.at(np.array([net.wavelength_nm]))[0]) ** 2  # [out, in]
        first, n = int(net.port_start[e]), len(power)
        into = np.arange(n)
        to = 1 - into if n == 2 else _most(power)
        if to is None:
            continue
        after[first : first + n] = first + to
        with np.errstate(divide="ignore"):
            loss[first : first + n] -= 10.0 * np.log10(power[to, into])
    return Passing(after, loss)


def _most(power: np.ndarray) -> np.ndarray | None:
    """Ports that a part of four ports sends light to from each, or None where it divides light."""
    into = np.arange(4)
    for to in (np.array([2, 3, 0, 1]), np.array([3, 2, 1, 0])):
        astray = power.sum(0) - power[to, into]
        if (astray <= 10.0 ** (-0.1 * LEAST_EXTINCTION_DB) * power[to, into]).all():
            return to
    return None


def _arms(net: Net, leaving: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Follow light through phases, guides and losses of the same cell from ports [n].

    Returns the port it ends before (-1: free), and the elements passed as pairs (row, element).
    """
    owner, cell, start = net.element_of_port, net.cell_of, net.port_start
    home = cell[owner[leaving]]
    plain = np.isin(net.kind, (PHASE, GUIDE, LOSS))
    at = net.mate[leaving].astype(np.int64)
    rows, elements = [], []
    for _ in range(net.n_elements):
        e = owner[at]
        go = (at >= 0) & plain[e] & (cell[e] == home)
        if not go.any():
            break
        moving = np.flatnonzero(go)
        rows.append(moving)
        elements.append(e[moving])
        passed = e[moving]
        at[moving] = net.mate[2 * start[passed] + 1 - at[moving]]
    none = np.empty(0, np.int64)
    return at, np.concatenate([none, *rows]), np.concatenate([none, *elements])


def find_switches(net: Net, as_built: AsBuilt, reach: Reach) -> Switches:
    """Sort the couplers of a net into switches.

    Parameters
    ----------
    net : Net, with or without loops
    as_built : AsBuilt
    reach : Reach of the settings

    Returns
    -------
    Switches
        In the order of their first couplers. A coupler that nothing moves and that is no half of a pair is a
        switch with one drive, such as a tap, which stands in bar.

    Cost: a few passes over ports.
    """
    owner = net.element_of_port
    value, loss = _value_in_force(net, as_built), element_loss_db(net, as_built)
    couplers = np.flatnonzero(net.kind == COUPLER)
    start = net.port_start
    fixed = couplers[net.setting_of[couplers] < 0]
    upper, up_row, up_element = _arms(net, start[fixed] + 2)
    lower, low_row, low_element = _arms(net, start[fixed] + 3)
    other = np.where(upper >= 0, owner[upper], -1)
    joined = (upper >= 0) & (lower == upper + 1) & (upper == start[other])
    joined &= (net.kind[other] == COUPLER) & (net.setting_of[other] < 0) & (net.cell_of[other] == net.cell_of[fixed])
    joined &= other != fixed
    partner: dict[int, int] = {}
    seconds: set[int] = set()
    for row in np.flatnonzero(joined).tolist():
        if int(fixed[row]) not in seconds:  # the second of one pair is not the first of the next
            partner[int(fixed[row])] = row
            seconds.add(int(other[row]))
    first = np.array([e for e in couplers.tolist() if e not in seconds], np.int64)
    row_of = np.array([partner.get(e, -1) for e in first.tolist()], np.int64)
    pair = row_of >= 0
    second = np.where(pair, other[row_of], -1) if len(fixed) else np.full(len(first), -1)

    n_fixed = len(fixed)
    arm_loss = [np.bincount(r, loss[e], minlength=n_fixed) for r, e in ((up_row, up_element), (low_row, low_element))]
    arm_length = 0.5 * (
        np.bincount(up_row, net.length_um[up_element], minlength=n_fixed)
        + np.bincount(low_row, net.length_um[low_element], minlength=n_fixed)
    )
    arm_value = np.bincount(up_row, value[up_element], minlength=n_fixed) - np.bincount(
        low_row, value[low_element], minlength=n_fixed
    )
    picked = np.where(pair, row_of, 0)

    def of_pair(per_fixed: np.ndarray) -> np.ndarray:
        return np.where(pair, per_fixed[picked], 0.0) if n_fixed else np.zeros(len(first))

    both = loss[first] + np.where(pair, loss[second], 0.0)
    angles = np.where(pair[:, None], np.stack([value[first], value[second]], 1), 0.0)
    outlet = np.where(pair, start[np.maximum(second, 0)], start[first])
    ports = np.stack([start[first], start[first] + 1, outlet + 2, outlet + 3], 1).astype(np.int32)
    base = np.where(pair, of_pair(arm_value), value[first])

    switch_of_row = np.full(n_fixed, -1)
    switch_of_row[row_of[pair]] = np.flatnonzero(pair)
    alone = np.flatnonzero(~pair)
    of = np.r_[alone, switch_of_row[up_row], switch_of_row[low_row]]
    element = np.r_[first[alone], up_element, low_element]
    weight = np.r_[np.ones(len(alone) + len(up_row)), -np.ones(len(low_row))]
    setting = net.setting_of[element]
    kept = (of >= 0) & (setting >= 0)
    of, setting, weight = _merged(of[kept], setting[kept], weight[kept], max(net.n_settings, 1))
    stuck = as_built.stuck_rad[setting]
    low, high, idle = (np.where(np.isnan(stuck), end[setting], stuck) for end in (reach.low, reach.high, reach.idle))
    return Switches(
        net,
        np.stack([first, second], 1).astype(np.int32),
        ports,
        angles,
        np.stack([amplitude_from_loss_db(both), *(amplitude_from_loss_db(of_pair(a)) for a in arm_loss)], 1),
        base,
        of.astype(np.int32),
        setting.astype(np.int32),
        weight,
        low,
        high,
        np.clip(idle, low, high),
        of_pair(arm_length) if n_fixed else np.zeros(len(first)),
        as_built.in_force(reach.idle),
    )


def _merged(
    of: np.ndarray, setting: np.ndarray, weight: np.ndarray, n_settings: int
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """One row per (switch, setting); a setting in both arms cancels."""
    key, place = np.unique(of.astype(np.int64) * n_settings + setting, return_inverse=True)
    total = np.bincount(place, weight, minlength=len(key))
    kept = total != 0.0
    return key[kept] // n_settings, key[kept] % n_settings, total[kept]


def settings_for(
    switches: Switches, share: np.ndarray, entering: np.ndarray | None = None, *, idle: np.ndarray | None = None
) -> np.ndarray:
    """Settings that put switches into wished states.

    Parameters
    ----------
    switches : Switches
    share : float (R,), wished cross share: 0 is bar, 1 is cross, between is a split, NaN leaves it at rest
    entering : int (R,), port (0 to 3) that the light to be split enters; None: a1
    idle : float (S,), where all other settings are to stand; None: at rest

    Returns
    -------
    float (S,), rad: errors as built allowed for, nearest to rest within reach.
    """
    settings = np.array(switches.rest_rad if idle is None else idle, float)
    asked = ~np.isnan(share)
    drive = switches.drives_for(np.where(asked, share, 0.0), entering)
    todo = np.where(asked, drive - switches.idle_rad, 0.0)
    span = switches.high - switches.low
    # most room first, so that a cell with two moved arms moves one where one will do
    order = np.lexsort((-span, switches.of))
    moved = np.zeros(len(settings), bool)
    of = switches.of[order]
    rank = np.arange(len(of)) - np.searchsorted(of, of)
    settings[switches.setting] = switches.idle
    for turn in range(int(rank.max(initial=-1)) + 1):
        rows = order[rank == turn]
        rows = rows[asked[switches.of[rows]]]
        _, unique = np.unique(switches.setting[rows], return_index=True)  # tied switches: the first decides
        rows = rows[np.sort(unique)]
        rows = rows[~moved[switches.setting[rows]]]
        s, r = switches.setting[rows], switches.of[rows]
        want = switches.idle[rows] + todo[r] / switches.weight[rows]
        settings[s] = np.clip(want, switches.low[rows], switches.high[rows])
        moved[s] = True
        todo[r] -= (settings[s] - switches.idle[rows]) * switches.weight[rows]
    return settings
