"""Cells recognised in a net, and their states and splits as settings, checked by light."""

from dataclasses import replace

import numpy as np
import pytest
from plane_nets import Light, as_drawn, plane_net, wide_reach

from meshctl.mesh.meshfile import lattice
from meshctl.mesh.plane import hexagonal
from meshctl.mesh.response import Response
from meshctl.solver.reach import Reach, full_reach
from meshctl.solver.switches import find_switches, settings_for

ONE_CELL = {"mzi": lattice("rectangular", modes=2), "gap": lattice("rectangular", modes=2, cell="gap")}


def limited(reach, setting, low, high, rest):
    ends = [end.copy() for end in (reach.low, reach.high, reach.period, reach.idle)]
    for end, value in zip(ends, (low, high, 0.0, rest), strict=True):
        end[setting] = value
    return Reach(*ends)


def cross_power(mesh, as_built, reach, share):
    """Power from in1 to out2 with the one cell of a two-mode mesh put to a cross share."""
    switches = find_switches(mesh.net, as_built, reach)
    settings = settings_for(switches, np.full(len(switches), share))
    matrix = np.abs(Response(mesh.net, as_built).matrix(settings)) ** 2
    return matrix[1, 0], settings


@pytest.mark.parametrize(
    ("shape", "cell", "cells"), [("rectangular", "mzi", 28), ("triangular", "gap", 28), ("benes", "mzi", 20)]
)
def test_every_cell_is_one_switch(shape, cell, cells):
    mesh = lattice(shape, modes=8, cell=cell)
    switches = find_switches(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
    assert len(switches) == cells
    assert sorted(switches.names) == sorted(mesh.net.names.cells)


@pytest.mark.parametrize("form", ["gap", "mzi"])
def test_lattice_cells_are_recognised_too(form):
    net = plane_net(hexagonal(2), form)
    switches = find_switches(net, as_drawn(net), wide_reach(net))
    assert len(switches) == 30  # 9 R^2 - 3 R cells for R = 2
    assert switches.is_pair.all() == (form == "mzi")


@pytest.mark.parametrize("cell", ["mzi", "gap"])
@pytest.mark.parametrize("share", [0.0, 1e-4, 0.3, 0.5, 0.99, 1.0])
def test_split_is_met_despite_errors(cell, share):
    mesh = ONE_CELL[cell]
    error = np.where(mesh.net.kind == 0, 0.0, 0.7)  # of the phases; then of the angle of the gap
    if cell == "gap":
        error[mesh.net.kind == 0] = 0.11
    as_built = replace(mesh.as_built, error_rad=error)
    power, _ = cross_power(mesh, as_built, full_reach(mesh.net.setting_is_angle), share)
    assert power == pytest.approx(share, abs=1e-12)  # rounding of sin^2 near its flat ends


def test_splitting_errors_bound_the_states():
    mesh = ONE_CELL["mzi"]
    error = np.zeros(mesh.net.n_elements)
    couplers = np.flatnonzero(mesh.net.kind == 0)
    error[couplers] = 0.05, 0.02
    as_built = replace(mesh.as_built, error_rad=error)
    reach = full_reach(mesh.net.setting_is_angle)
    # two couplers in a row: angles add up at phase 0 and subtract at pi (product of the two matrices)
    assert cross_power(mesh, as_built, reach, 1.0)[0] == pytest.approx(np.cos(0.07) ** 2, abs=1e-12)
    assert cross_power(mesh, as_built, reach, 0.0)[0] == pytest.approx(np.sin(0.03) ** 2, abs=1e-12)
    assert cross_power(mesh, as_built, reach, 0.4)[0] == pytest.approx(0.4, abs=1e-12)


def test_gap_that_only_closes_takes_higher_branches():
    mesh = ONE_CELL["gap"]
    setting = int(np.flatnonzero(mesh.net.setting_is_angle)[0])
    reach = limited(full_reach(mesh.net.setting_is_angle), setting, 3.05, 5.2, 3.05)
    for share, angle in ((0.0, np.pi), (1.0, 1.5 * np.pi)):
        power, settings = cross_power(mesh, mesh.as_built, reach, share)
        assert settings[setting] == pytest.approx(angle, abs=1e-12)
        assert power == pytest.approx(share, abs=1e-12)


def test_nearest_setting_to_rest_is_taken():
    mesh = ONE_CELL["mzi"]
    inner = mesh.net.setting_of[mesh.net.names.element_row["c1_1.inner"]]
    base = full_reach(mesh.net.setting_is_angle)
    for rest, expected in ((0.4, 0.0), (5.0, 2 * np.pi)):  # cross at both ends of the turn
        _, settings = cross_power(mesh, mesh.as_built, limited(base, inner, 0.0, 2 * np.pi, rest), 1.0)
        assert settings[inner] == pytest.approx(expected, abs=1e-12)


def test_states_out_of_reach_are_not_offered():
    mesh = ONE_CELL["mzi"]
    inner = mesh.net.setting_of[mesh.net.names.element_row["c1_1.inner"]]
    base = full_reach(mesh.net.setting_is_angle)
    for low, high, offered in ((0.0, 1.0, [False, True]), (3.0, 4.0, [True, False]), (1.5, 1.6, [False, False])):
        switches = find_switches(mesh.net, mesh.as_built, limited(base, inner, low, high, low))
        assert switches.states_within().tolist() == [offered]


def test_stuck_setting_counts_as_its_value():
    mesh = ONE_CELL["mzi"]
    stuck = np.full(mesh.net.n_settings, np.nan)
    stuck[mesh.net.setting_of[mesh.net.names.element_row["c1_1.inner"]]] = np.pi
    switches = find_switches(mesh.net, replace(mesh.as_built, stuck_rad=stuck), full_reach(mesh.net.setting_is_angle))
    assert switches.states_within().tolist() == [[True, False]]  # inner = pi is bar


def test_powers_of_switch_agree_with_light():
    net = plane_net(hexagonal(1), "mzi", side_um=0.0)
    rng = np.random.default_rng(3)
    as_built = as_drawn(net, error_rad=rng.normal(0.0, 0.1, 12))
    as_built = replace(as_built, loss_db=rng.uniform(0.0, 1.0, net.n_elements) * (net.kind != 2))
    settings = rng.uniform(0.0, 6.0, net.n_settings)
    switches = find_switches(net, as_built, wide_reach(net))
    powers = switches.powers(switches.drive_of(settings))
    # one cell cut out of the net, solved alone: all its links outward are taken away
    light = Light(_alone(net, 0), as_built)
    found = light.power(settings)[0]
    a1, a2, b1, b2 = range(4)
    assert powers[0, a1, 0] == pytest.approx(found[b1, a1], abs=1e-12)
    assert powers[0, a2, 1] == pytest.approx(found[b1, a2], abs=1e-12)
    assert powers[0, b2, 1] == pytest.approx(found[a1, b2], abs=1e-12)
    assert powers[0, b1, 1] == pytest.approx(found[a2, b1], abs=1e-12)


def _alone(net, cell):
    mate = net.mate.copy()
    owner = net.element_of_port
    mine = net.cell_of[owner] == cell
    outward = mine & (mate >= 0) & (net.cell_of[owner[np.maximum(mate, 0)]] != cell)
    mate[mate[outward]] = -1
    mate[outward] = -1
    first = net.port_start[6 * cell]
    ports = {
        "a1": first,
        "a2": first + 1,
        "b1": net.port_start[6 * cell + 4] + 1,
        "b2": net.port_start[6 * cell + 5] + 1,
    }
    return replace(net, mate=mate, externals={k: int(v) for k, v in ports.items()}, inputs=(*ports,), outputs=(*ports,))


def test_tied_couplers_have_one_state(chip):
    from meshctl.mesh.meshfile import load

    folder = chip(
        """
format = 1
name = "two"
wavelength_nm = 1550.0
inputs = ["in1", "in2", "in3"]
outputs = ["out1", "out2", "out3"]
elements = [["x", "coupler"], ["y", "coupler"]]
tunable = ["x y"]
links = ["in1 x.a1", "in2 x.a2", "x.b1 out1", "x.b2 y.a1", "in3 y.a2", "y.b1 out2", "y.b2 out3"]
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
[channel]
bits = 14
max_v = 8.0
"""
    )
    mesh = load(folder)
    switches = find_switches(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
    assert switches.tied.tolist() == [0, 0]
