"""What is on a chip, counted: parts, actuators, faults, and the loss that light meets on its way.

Public: Inventory, inventory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.laws import LAWS
from meshctl.mesh.actuation import law_groups
from meshctl.mesh.budget import PathLoss, islands, path_losses, path_warnings
from meshctl.mesh.graph import Mesh
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import COUPLER, KINDS


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
    measured: dict[str, str]  # element -> what its S was read from, and how
    warnings: list[str]


_MISFIT = 1.3  # chi^2 a point above which law and measurement disagree; common practice


def _misfits(mesh: Mesh) -> list[str]:
    """Actuators whose measured points their law does not follow."""
    said = []
    for group in law_groups(mesh.actuators):
        if group.law.has_tables:
            continue
        for row, a in enumerate(group.rows.tolist()):
            table = mesh.actuators.tables.get(a)
            if table is None:
                continue
            p = {name: np.repeat(values[row : row + 1], len(table)) for name, values in group.p.items()}
            off = group.law.reference_rad(p) + group.law.change_rad(table[:, 0], p) - table[:, 1]
            sigma = np.maximum(table[:, 2], 1e-4)
            chi2 = float(np.mean((off / sigma) ** 2))
            if chi2 > _MISFIT:
                said.append(
                    f"'{mesh.actuator_names[a]}': its {len(table)} measured points lie up to {np.abs(off).max():.3g} "
                    f"rad from law '{group.law.name}' (chi^2 {chi2:.3g} a point, {_MISFIT:g} is common practice)"
                )
    return said


def _warnings(mesh: Mesh, paths: list[PathLoss]) -> list[str]:
    net, said = mesh.net, path_warnings(mesh, paths) + _misfits(mesh)
    if not mesh.shape:  # lattices hang together
        names = net.names.elements
        for group in islands(net):
            shown = ", ".join(f"'{names[e]}'" for e in group[:4]) + (" and more" if len(group) > 4 else "")
            said.append(f"no input is joined to {len(group)} parts ({shown}): link them, or take them out")
    reached = {path.output for path in paths}
    lost = [name for name in net.outputs if name not in reached]
    if lost:
        said.append(f"no light from any input reaches {', '.join(lost[:8])}{' and more' if len(lost) > 8 else ''}")
    return said


def _counted(kinds: np.ndarray) -> dict[str, int]:
    counts: dict[str, int] = {}
    for k, n in enumerate(kinds.tolist()):
        if n:
            counts[KINDS[k].name] = counts.get(KINDS[k].name, 0) + n
    return counts


def inventory(mesh: Mesh) -> Inventory:
    """Count what is on the chip."""
    net, actuators = mesh.net, mesh.actuators
    kinds = np.bincount(net.kind, minlength=len(KINDS))
    laws = np.bincount(actuators.law, minlength=len(LAWS))
    couplers = net.kind == COUPLER
    errors = mesh.as_built.error_rad[couplers]
    settings = net.setting_names if (~np.isnan(mesh.as_built.stuck_rad)).any() else []
    names = mesh.actuator_names if actuators.dead.any() else []
    paths = path_losses(mesh)
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
        _counted(kinds),
        net.n_settings,
        {LAWS[k].name: int(n) for k, n in enumerate(laws) if n},
        len(mesh.channels),
        circuit_of(net) is None,
        [settings[s] for s in np.flatnonzero(~np.isnan(mesh.as_built.stuck_rad)).tolist()],
        [names[a] for a in np.flatnonzero(actuators.dead).tolist()],
        float(np.sqrt(np.mean(errors**2))) if errors.size else 0.0,
        paths,
        {net.names.elements[e]: part.source for e, part in net.measured.items()},
        _warnings(mesh, paths),
    )
