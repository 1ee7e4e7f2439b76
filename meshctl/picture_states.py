"""Where two lanes meet, and how far light crosses there: what a drawing of a mesh says of its cells.

A site is a cell on one pair of lanes, or a fixed coupler or crossing in no cell. Its cross power is read off
the product of its own elements, so any form of cell will do.
Public: Sites, sites_of, faults_of, state_of, BAR, CROSS, SPLIT, UNKNOWN, BAR_BELOW, CROSS_ABOVE.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.errors import WrongSize
from meshctl.mesh.graph import Mesh, Net
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import CROSSING, through_and_cross
from meshctl.optics.feedforward import BOTH, FIRST, SECOND, Circuit, compile_circuit, fuse
from meshctl.units import UM_PER_CM

BAR, CROSS, SPLIT, UNKNOWN = range(4)
BAR_BELOW, CROSS_ABOVE = 0.02, 0.98  # cross power; 17 dB is where a switch stops being one, common practice
NONE = np.empty(0, np.int32)


@dataclass(frozen=True, eq=False)
class Sites:
    """Sites in light order (nets with loops: in cell order); U of them."""

    cell: np.ndarray  # i32[U], row in the net; -1: a fixed part in no cell
    element: np.ndarray  # i32[U], the site's first two-lane element
    lane_a: np.ndarray  # i32[U]; lanes of a net with loops mean nothing
    lane_b: np.ndarray  # i32[U]
    first_block: np.ndarray  # i32[U], where light enters the site
    last_block: np.ndarray  # i32[U], and where it leaves
    cross_power: np.ndarray  # f64[U], share of the light that changes lane; NaN: not known
    fixed: np.ndarray  # bool[U], nothing moves it
    fault: np.ndarray  # bool[U], a stuck setting or a dead actuator in it

    def __len__(self) -> int:
        return len(self.cell)


@dataclass(frozen=True, eq=False)
class _Passage:
    """Elements in light order, each with the pair of lanes of its block."""

    element: np.ndarray
    block: np.ndarray
    lane_a: np.ndarray  # of the block
    lane_b: np.ndarray
    side: np.ndarray


def _passage_of_circuit(circuit: Circuit) -> _Passage:
    block = np.repeat(np.arange(circuit.n_blocks, dtype=np.int32), np.diff(circuit.first))
    return _Passage(circuit.element, block, circuit.lane_a[block], circuit.lane_b[block], circuit.side)


def _passage_of_cells(net: Net) -> _Passage:
    """Every cell compiled by itself, once for each way in which cells are joined inside."""
    members = np.argsort(net.cell_of, kind="stable")
    members = members[net.cell_of[members] >= 0]
    starts = np.searchsorted(net.cell_of[members], np.arange(net.n_cells + 1))
    forms: dict[tuple[bytes, bytes], Circuit | None] = {}
    parts: list[tuple[np.ndarray, ...]] = []
    blocks = 0
    for cell in range(net.n_cells):
        rows = members[starts[cell] : starts[cell + 1]]
        port_start, mate = _ports_inside(net, rows)
        key = (port_start.tobytes(), mate.tobytes())
        if key not in forms:
            forms[key] = compile_circuit(port_start, mate, np.zeros(len(rows), np.int32), NONE, NONE)
        circuit = forms[key]
        if circuit is None:
            continue
        one = _passage_of_circuit(circuit)
        parts.append((rows[one.element], one.block + blocks, one.lane_a, one.lane_b, one.side))
        blocks += circuit.n_blocks
    if not parts:
        return _Passage(NONE, NONE, NONE, NONE, np.empty(0, np.uint8))
    return _Passage(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def _ports_inside(net: Net, rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(port_start, mate) of some elements alone, links that leave them cut."""
    count = net.port_start[rows + 1] - net.port_start[rows]
    port_start = np.r_[0, np.cumsum(count)].astype(np.int32)
    ports = np.repeat(net.port_start[rows] - port_start[:-1], count) + np.arange(port_start[-1])
    place = {port: k for k, port in enumerate(ports.tolist())}
    return port_start, np.array([place.get(m, -1) for m in net.mate[ports].tolist()], np.int32)


def _amplitudes(mesh: Mesh, settings: np.ndarray) -> np.ndarray:
    """Through and cross amplitudes of all elements as four real rows, at the centre wavelength."""
    net, built = mesh.net, mesh.as_built
    value = net.nominal + built.error_rad
    moved = np.flatnonzero(net.setting_of >= 0)
    value[moved] = built.in_force(settings)[net.setting_of[moved]] + built.error_rad[moved]
    loss_db = built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
    centre = net.wavelength_nm
    t, x = through_and_cross(
        net.kind, value, loss_db, net.length_um, centre, centre, net.n_eff, net.n_group, net.angle_slope_per_nm
    )
    return np.ascontiguousarray([t.real, t.imag, x.real, x.imag])


def faults_of(mesh: Mesh) -> np.ndarray:
    """True for every setting that is stuck or whose actuator is dead, bool[S]."""
    fault: np.ndarray = ~np.isnan(mesh.as_built.stuck_rad)
    fault[mesh.actuators.setting[mesh.actuators.dead]] = True
    return fault


def sites_of(mesh: Mesh, settings: np.ndarray | None = None) -> Sites:
    """All places where two lanes meet, with their cross power.

    Parameters
    ----------
    mesh : Mesh, with or without loops
    settings : float (S,), rad, in force at the centre wavelength; None: only fixed parts have a cross power

    Returns
    -------
    Sites

    Raises
    ------
    WrongSize
        For settings that do not fit the mesh.

    Cost: a few sorts of the elements.

    Example
    -------
    >>> from meshctl import lattice
    >>> sites_of(lattice("rectangular", modes=4), np.zeros(16)).cross_power.round(2)
    array([1., 1., 1., 1., 1., 1.])
    """
    net = mesh.net
    if settings is not None and settings.shape != (net.n_settings,):
        raise WrongSize(f"settings have shape {settings.shape}; mesh '{mesh.name}' takes ({net.n_settings},)")
    circuit = circuit_of(net)
    way = _passage_of_cells(net) if circuit is None else _passage_of_circuit(circuit)
    low, high = np.minimum(way.lane_a, way.lane_b), np.maximum(way.lane_a, way.lane_b)
    cell = net.cell_of[way.element]
    # one key for each (cell, pair of lanes); elements in no cell are kept apart by block
    lanes = int(high.max(initial=0)) + 2
    owner = np.where(cell >= 0, cell, net.n_cells + way.block).astype(np.int64)
    keys, group = np.unique((owner * lanes + low + 1) * lanes + high + 1, return_inverse=True)
    order = np.argsort(group, kind="stable")
    starts = np.searchsorted(group[order], np.arange(len(keys) + 1)).astype(np.int32)
    side = np.where(way.side == SECOND, way.lane_b, way.lane_a) == low
    side = np.where(way.side == BOTH, BOTH, np.where(side, FIRST, SECOND)).astype(np.uint8)
    product = np.empty((len(keys), 8))
    known = settings if settings is not None else np.zeros(net.n_settings)
    amplitudes = _amplitudes(mesh, known)
    fuse(starts, way.element[order].astype(np.int32), side[order], amplitudes, product)

    joins = np.flatnonzero(way.side == BOTH)
    found, at = np.unique(group[joins], return_index=True)  # groups that join two lanes, and where first
    at = joins[at]
    by_light = np.argsort(at if circuit is not None else cell[at], kind="stable")
    found, at = found[by_light], at[by_light]
    first, last = order[starts[found]], order[starts[found + 1] - 1]
    stays = product[found, 0] ** 2 + product[found, 1] ** 2
    crosses = product[found, 4] ** 2 + product[found, 5] ** 2
    total = stays + crosses
    cross_power = np.divide(crosses, total, out=np.full(len(total), np.nan), where=total > 0.0)
    setting = net.setting_of[way.element]
    fixed = np.bincount(group, weights=setting >= 0, minlength=len(keys))[found] == 0
    bad = np.r_[faults_of(mesh), False][setting]
    fault = np.bincount(group, weights=bad, minlength=len(keys))[found] > 0
    strange = np.bincount(group, weights=net.kind[way.element] > CROSSING, minlength=len(keys))[found] > 0
    cross_power[strange | (~fixed if settings is None else False)] = np.nan
    return Sites(
        cell[at],
        way.element[at],
        low[at],
        high[at],
        way.block[first],
        way.block[last],
        cross_power,
        fixed,
        fault,
    )


def state_of(cross_power: np.ndarray) -> np.ndarray:
    """BAR, CROSS, SPLIT or UNKNOWN (NaN) of cross powers."""
    split = np.where(np.isnan(cross_power), UNKNOWN, SPLIT)
    state: np.ndarray = np.where(cross_power < BAR_BELOW, BAR, np.where(cross_power > CROSS_ABOVE, CROSS, split))
    return state
