"""Nets from plane lattices, and what routes they have by means other than the router's, for tests."""

import numpy as np

from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.plane_net import assemble_plane
from meshctl.mesh.response import Response
from meshctl.optics.elements import COUPLER
from meshctl.solver.reach import Reach


def plane_net(lattice, form="gap", *, side_um=250.0, loss_db_per_cm=0.0, slope=0.0):
    """A net in which every edge of a plane lattice is a cell of `form`; ends p1, p2, .. clockwise."""
    made, setting_of = assemble_plane(lattice, form, side_um)
    return Net(
        1550.0, made.kind, made.nominal, made.length_um, setting_of, made.cell_of, made.cell_xy_um, made.port_start,
        made.mate, made.externals, made.inputs, made.outputs, 2.44, 4.2, loss_db_per_cm, slope, made.names,
    )  # fmt: skip


def as_drawn(net, *, coupler_db=0.0, error_rad=0.0):
    """No errors but `error_rad` on every coupler (a number or an array per coupler)."""
    is_coupler = net.kind == COUPLER
    error = np.zeros(net.n_elements)
    error[is_coupler] = error_rad
    stuck = np.full(net.n_settings, np.nan)
    return AsBuilt(error, np.where(is_coupler, coupler_db, 0.0), stuck, np.zeros(net.n_elements))


def wide_reach(net):
    """Everything from 0 to 2 pi, at rest at zero."""
    n = net.n_settings
    angle = net.setting_is_angle
    return Reach(np.zeros(n), np.full(n, 2 * np.pi), np.where(angle, 0.0, 2 * np.pi), np.zeros(n))


class Light:
    """What leaves every port, by solving all waves of the net at once."""

    def __init__(self, net, as_built):
        self.ends = list(net.externals)
        self._response = Response(net, as_built)

    def matrix(self, settings, wavelengths_nm=(1550.0,)):
        """Fields [W, out, in] between all external ports, in the order of `ends`."""
        return self._response.matrix(settings, np.array(wavelengths_nm))

    def power(self, settings, wavelengths_nm=(1550.0,)):
        return np.abs(self.matrix(settings, wavelengths_nm)) ** 2

    def between(self, power, source, sink):
        return power[..., self.ends.index(sink), self.ends.index(source)]


def traced_wishes(lattice, count, rng):
    """Routes that exist for sure: ports that random states of all cells connect, from the lattice alone."""
    cross = rng.integers(0, 2, lattice.n_cells)
    name = {p: f"p{k + 1}" for k, p in enumerate(lattice.rim.tolist())}
    found, used = [], set()
    for start in rng.permutation(lattice.rim).tolist():
        at = start
        while True:
            c, end, side = at // 4, at % 4 // 2, at % 2
            leaving = 4 * c + 2 * (1 - end) + (side ^ int(cross[c]))
            if lattice.mate[leaving] < 0:
                break
            at = int(lattice.mate[leaving])
        if start not in used and leaving not in used and leaving != start:
            found.append(f"{name[start]}:{name[leaving]}")
            used |= {start, leaving}
    return found[:count]


def least_total_cells(lattice, wishes, seconds=60):
    """Cells passed by all routes together at the least, or None where there are no such routes.

    An integer programme of this file's own, from the lattice alone: flows of each route over waves (one per port
    that light enters), a whole number for the state of every cell. Solved by scipy.optimize.milp (HiGHS).
    """
    from scipy.optimize import Bounds, LinearConstraint, milp
    from scipy.sparse import coo_matrix

    n, ports = lattice.n_cells, 4 * lattice.n_cells
    rim = {f"p{k + 1}": p for k, p in enumerate(lattice.rim.tolist())}
    pairs = [tuple(rim[end] for end in wish.split(":")) for wish in wishes]
    port = np.arange(ports)
    leaving = np.stack([4 * (port // 4) + 2 * (1 - port % 4 // 2) + (port % 2 ^ s) for s in (0, 1)], 1)
    onward = lattice.mate[leaving]
    n_flows = 2 * ports * len(pairs)
    upper, wanted = np.ones(n_flows + n), np.zeros(ports * len(pairs))
    rows, columns, entries = [], [], []
    for k, (source, sink) in enumerate(pairs):
        wanted[ports * k + source] = 1
        for s in (0, 1):
            flow = 2 * ports * k + 2 * port + s
            rows += [ports * k + port, ports * k + onward[onward[:, s] >= 0, s]]
            columns += [flow, flow[onward[:, s] >= 0]]
            entries += [np.ones(ports), -np.ones((onward[:, s] >= 0).sum())]
            upper[flow[(onward[:, s] < 0) & (leaving[:, s] != sink)]] = 0
    shape = len(wanted), n_flows + n
    kept = coo_matrix((np.concatenate(entries), (np.concatenate(rows), np.concatenate(columns))), shape=shape)
    # a wave may pass a cell in bar only where its state is 0, in cross only where it is 1
    every = np.arange(n_flows)
    state = every % 2
    cell = every // 2 % ports // 4
    bound = coo_matrix(
        (
            np.concatenate([np.ones(n_flows), np.where(state == 0, 1.0, -1.0)]),
            (np.concatenate([every, every]), np.concatenate([every, n_flows + cell])),
        ),
        shape=(n_flows, n_flows + n),
    )
    whole = np.zeros(n_flows + n)
    whole[n_flows:] = 1
    cost = np.ones(n_flows + n)
    cost[n_flows:] = 0
    result = milp(
        cost,
        constraints=[
            LinearConstraint(kept.tocsr(), wanted, wanted),
            LinearConstraint(bound.tocsr(), -np.inf, np.where(state == 0, 1.0, 0.0)),
        ],
        bounds=Bounds(0, upper),
        integrality=whole,
        options={"time_limit": seconds},
    )
    assert result.status in (0, 2), result.message
    return None if result.status == 2 else round(result.fun)


def reached_by_all_states(lattice):
    """Where light from every rim port leaves, for every one of the 2^C states of a small lattice: [2^C, X]."""
    n, rim = lattice.n_cells, lattice.rim
    states = (np.arange(2**n)[:, None] >> np.arange(n)) & 1
    out = np.empty((2**n, len(rim)), int)
    place = np.full(4 * n, -1)
    place[rim] = np.arange(len(rim))
    for k, start in enumerate(rim.tolist()):
        at = np.full(2**n, start)
        todo = np.arange(2**n)
        while len(todo):
            p = at[todo]
            leaving = 4 * (p // 4) + 2 * (1 - p % 4 // 2) + (p % 2 ^ states[todo, p // 4])
            out[todo, k] = place[leaving]
            going = lattice.mate[leaving] >= 0
            at[todo[going]] = lattice.mate[leaving[going]]
            todo = todo[going]
    return out


def cells_by_all_states(lattice):
    """(start, end) on the rim -> fewest cells on a way between them, over every state of a small lattice."""
    n, rim = lattice.n_cells, lattice.rim.tolist()
    least = {}
    for number in range(2**n):
        for k, start in enumerate(rim):
            at, passed = start, 0
            while True:
                passed += 1
                leaving = 4 * (at // 4) + 2 * (1 - at % 4 // 2) + (at % 2 ^ number >> at // 4 & 1)
                if lattice.mate[leaving] < 0:
                    break
                at = int(lattice.mate[leaving])
            pair = k, rim.index(leaving)
            least[pair] = min(passed, least.get(pair, passed))
    return least
