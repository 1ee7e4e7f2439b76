"""Plans set by hand, cell by cell, for tests of what comes behind solving."""

import numpy as np

from meshctl.optics.measures import matrix_error, throughput, throughput_per_input
from meshctl.plan.chip import Chip
from meshctl.plan.pipeline import headroom_v
from meshctl.plan.placing import place
from meshctl.plan.plan import Plan, plan_text


def plan_by_hand(mesh, settings):
    """A plan with the codes nearest to settings [S], whatever matrix that gives."""
    chip = Chip(mesh)
    codes = place(chip, settings).codes
    matrix, levels = chip.matrix(codes), chip.levels(codes)
    target = {"source": "identity", "free": "nothing", "size": list(matrix.shape)}  # nobody asks how near it comes
    near = matrix_error(matrix, np.eye(len(matrix)), "nothing")
    return Plan(
        mesh.name, mesh.hash, target, settings,
        chip.volts(levels), codes, chip.actual(codes), chip.power_mw(levels), headroom_v(chip, chip.volts(levels)),
        1.0 - near**2, near, {"fidelity": 1.0, "matrix_error": 0.0}, throughput(matrix),
        throughput_per_input(matrix).tolist(), "met",
    )  # fmt: skip


def write_plan(mesh, settings, path):
    plan = plan_by_hand(mesh, settings)
    path.write_text(plan_text(plan))
    return plan


def ring_settings(mesh, cell="c1", extra_rad=0.3, phase_rad=None):
    """Settings that make a ring of the hexagon inside a rim cell, that cell its coupler: (settings, cells, ends).

    The hexagon's other cells are bar (pi), all others cross (3 pi / 2).
    """
    net = mesh.net
    row, names = net.names.element_row, net.names.cells
    settings = np.zeros(net.n_settings)
    settings[net.setting_is_angle] = 1.5 * np.pi
    if phase_rad is not None:
        settings[~net.setting_is_angle] = phase_rad
    first = net.names.cell_row[cell]
    owner = net.element_of_port
    outer = [name for name, port in net.externals.items() if net.cell_of[owner[port]] == first]
    # follow bar round the hexagon: in by a common, out by the guide of the same side, or back
    inner = {e: net.port_start[row[f"{cell}.{e}"]] + p for e, p in (("common1", 0), ("common2", 0))}
    port = next(p for p in inner.values() if net.mate[p] >= 0)
    cells = []
    while True:
        e = owner[port]
        name = names[net.cell_of[e]]
        if name in cells:
            break
        cells.append(name)
        part = net.names.elements[e].split(".")[1]
        other = {"common1": ("guide1", 1), "common2": ("guide2", 1), "guide1": ("common1", 0), "guide2": ("common2", 0)}
        element, k = other[part]
        port = int(net.mate[net.port_start[row[f"{name}.{element}"]] + k])
    for name in cells:
        settings[net.setting_of[row[f"{name}.coupler"]]] = np.pi
    settings[net.setting_of[row[f"{cell}.coupler"]]] += extra_rad
    return settings, cells, outer
