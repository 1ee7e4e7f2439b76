"""What is on a chip, counted: parts, actuators, faults, and the loss that light meets on its way.

Public: Inventory, PathLoss, inventory.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from meshctl.laws import LAWS
from meshctl.mesh.graph import Mesh
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import COUPLER, CROSSING, GUIDE, KINDS, LOSS
from meshctl.units import UM_PER_CM

UM_PER_MM = 1e3


@dataclass(frozen=True)
class PathLoss:
    """Loss of the parts met on a way from any input to one output; splitting is not counted."""

    output: str
    least_db: float
    most_db: float
    couplers: int  # met on the way of most loss
    crossings: int
    guide_mm: float


@dataclass(frozen=True)
class Inventory:
    """The chip in numbers."""

    name: str
    hash: str
    shape: str
    note: str
    wavelength_nm: float
    inputs: tuple[str, ...]
    outputs: tuple[str, ...]
    monitors: tuple[str, ...]
    cells: int
    elements: dict[str, int]
    settings: int
    actuators: dict[str, int]  # by law
    channels: int
    loops: bool
    stuck: list[str]
    dead: list[str]
    split_error_rms_rad: float
    paths: list[PathLoss]
    warnings: list[str]


def _paths(mesh: Mesh) -> list[PathLoss]:
    net, circuit = mesh.net, circuit_of(mesh.net)
    if circuit is None:
        return []
    loss = mesh.as_built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
    loss = np.where(net.kind == LOSS, loss + net.nominal, loss)
    lanes = circuit.n_lanes
    least = [0.0 if k < circuit.n_inputs else math.inf for k in range(lanes)]
    most = [(0.0 if k < circuit.n_inputs else -math.inf, 0, 0, 0.0) for k in range(lanes)]
    kinds, lengths = net.kind.tolist(), net.length_um.tolist()
    lane_a, lane_b = circuit.element_lane_a.tolist(), circuit.element_lane_b.tolist()
    for e, db in zip(circuit.element.tolist(), loss[circuit.element].tolist(), strict=True):
        a, b, kind = lane_a[e], lane_b[e], kinds[e]
        if b < 0:
            least[a] += db
            m = most[a]
            most[a] = (m[0] + db, m[1], m[2], m[3] + (lengths[e] / UM_PER_MM if kind == GUIDE else 0.0))
        elif kind == CROSSING:
            least[a], least[b] = least[b] + db, least[a] + db
            x, y = most[b], most[a]
            most[a], most[b] = (x[0] + db, x[1], x[2] + 1, x[3]), (y[0] + db, y[1], y[2] + 1, y[3])
        else:
            least[a] = least[b] = min(least[a], least[b]) + db
            m = max(most[a], most[b])
            most[a] = most[b] = (m[0] + db, m[1] + 1, m[2], m[3])
    return [
        PathLoss(name, least[lane], *most[lane]) for name, lane in zip(net.outputs, circuit.output_lane, strict=True)
    ]


def _warnings(mesh: Mesh, paths: list[PathLoss]) -> list[str]:
    said = []
    budget = mesh.loss_budget_db
    if not math.isnan(budget):
        for path in paths:
            if path.most_db > budget:
                said.append(
                    f"{path.output}: up to {path.most_db:.2f} dB on the way ({path.couplers} couplers, "
                    f"{path.crossings} crossings, {path.guide_mm:.2f} mm) is above the budget of {budget:g} dB"
                )
    if not mesh.net.input_ports.size:
        said.append("nothing enters the chip")
    return said


def inventory(mesh: Mesh) -> Inventory:
    """Count what is on the chip."""
    net, actuators = mesh.net, mesh.actuators
    kinds = np.bincount(net.kind, minlength=len(KINDS))
    laws = np.bincount(actuators.law, minlength=len(LAWS))
    couplers = net.kind == COUPLER
    errors = mesh.as_built.error_rad[couplers]
    settings = net.setting_names if (~np.isnan(mesh.as_built.stuck_rad)).any() else []
    names = mesh.actuator_names if actuators.dead.any() else []
    paths = _paths(mesh)
    return Inventory(
        mesh.name,
        mesh.hash,
        mesh.shape or "explicit",
        mesh.note,
        net.wavelength_nm,
        net.inputs,
        net.outputs,
        net.monitors,
        net.n_cells,
        {KINDS[k].name: int(n) for k, n in enumerate(kinds) if n},
        net.n_settings,
        {LAWS[k].name: int(n) for k, n in enumerate(laws) if n},
        len(mesh.channels),
        circuit_of(net) is None,
        [settings[s] for s in np.flatnonzero(~np.isnan(mesh.as_built.stuck_rad)).tolist()],
        [names[a] for a in np.flatnonzero(actuators.dead).tolist()],
        float(np.sqrt(np.mean(errors**2))) if errors.size else 0.0,
        paths,
        _warnings(mesh, paths),
    )
