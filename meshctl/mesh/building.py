"""From the checked text of a mesh folder to a Mesh: defaults first, then the rows that differ.

Public: Tables, build_mesh.
"""

from __future__ import annotations

import hashlib
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import DuplicateName, OutOfRange, UnsoundFile
from meshctl.mesh.actuation import join_actuation
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.drag import with_drag
from meshctl.mesh.explicit import explicit_net
from meshctl.mesh.graph import FREE, Actuators, AsBuilt, Channels, Mesh, Net, frozen
from meshctl.mesh.inserts import with_inserts
from meshctl.mesh.lattices import CELL_FORMS, LATTICES, PLANE_SIZES, Assembly, Layout, assemble
from meshctl.mesh.plane import PlaneLattice
from meshctl.mesh.plane_net import assemble_plane
from meshctl.mesh.samples import read_spread
from meshctl.mesh.source import CHANNEL_NUMBERS
from meshctl.mesh.tables import Table, unknown_name
from meshctl.optics.elements import COUPLER, CROSSING, HAS_PHASE, KINDS


@dataclass
class Tables:
    """The tables of a mesh folder; None where the file is not there."""

    elements: Table | None = None
    actuators: Table | None = None
    channels: Table | None = None
    tables: Table | None = None
    crosstalk: Table | None = None


def _assembled(description: Description, folder: Path | None) -> tuple[Assembly, np.ndarray]:
    lattice = description.lattice
    if lattice is None:
        assembly, setting_of = explicit_net(description, folder)
    elif lattice.shape in PLANE_SIZES:
        plane = LATTICES[lattice.shape](**lattice.plane_size())
        assert isinstance(plane, PlaneLattice)
        assembly, setting_of = assemble_plane(plane, lattice.cell, lattice.side_um)
    else:
        shape = LATTICES[lattice.shape]
        try:
            layout = shape(lattice.modes, lattice.spare) if lattice.modes else shape(spare=lattice.spare)
        except OutOfRange as finding:
            finding.where = f"{MESH_TOML} key 'lattice'"
            raise
        assert isinstance(layout, Layout)
        couplers = CELL_FORMS[lattice.cell].kinds.count(COUPLER)
        assembly = assemble(
            layout,
            lattice.cell,
            lattice.pitch_um,
            balance_db=couplers * description.coupler.loss_db if lattice.balanced else 0.0,
            output_phases=lattice.output_phases and layout.forms == "cell",
        )
        setting_of = np.where(assembly.settable, np.cumsum(assembly.settable) - 1, FREE).astype(np.int32)
    if description.insert:
        assembly, setting_of = with_inserts(assembly, setting_of, description.insert, folder)
    return assembly, setting_of


def _drags(description: Description, actuators: Table | None) -> bool:
    """True where some coupler drags a phase along as it moves."""
    keys = ("phase_rad_per_nm", "phase_rad_per_nm2")
    given = any(description.actuator.get("coupler", {}).get(key) for key in keys)
    return given or (actuators is not None and any(any(actuators.column(key)) for key in keys))


def _net(description: Description, assembly: Assembly, setting_of: np.ndarray) -> Net:
    guide = description.guide
    return Net(
        description.wavelength_nm,
        frozen(assembly.kind),
        frozen(assembly.nominal),
        frozen(assembly.length_um),
        frozen(setting_of),
        frozen(assembly.cell_of),
        frozen(assembly.cell_xy_um),
        frozen(assembly.port_start),
        frozen(assembly.mate),
        assembly.externals,
        assembly.inputs,
        assembly.outputs,
        guide.n_eff,
        guide.n_group,
        guide.loss_db_per_cm,
        description.coupler.angle_slope_per_nm,
        assembly.names,
        {row: part.reflection for row, part in assembly.special.items() if part.reflection},
        {row: part.measured for row, part in assembly.special.items() if part.measured is not None},
    )


def _as_built(description: Description, net: Net, table: Table | None) -> AsBuilt:
    error, sigma = np.zeros(net.n_elements), np.zeros(net.n_elements)
    stuck = np.full(net.n_settings, math.nan)
    loss = np.where(net.kind == COUPLER, description.coupler.loss_db, 0.0)
    loss[net.kind == CROSSING] = description.crossing.loss_db
    if table is not None:
        rows = net.names.element_row
        seen: set[int] = set()
        for i, name in enumerate(table.column("element")):
            e = rows.get(name)
            if e is None:
                raise unknown_name("element", name, rows, table.where(i))
            if e in seen:
                raise DuplicateName(f"element '{name}' stands twice", where=table.where(i), remedy="keep one row")
            seen.add(e)
            for key, into in (("error_rad", error), ("loss_db", loss), ("sigma_rad", sigma)):
                value = table.column(key)[i]
                if value and key != "loss_db" and net.kind[e] not in HAS_PHASE:
                    raise UnsoundFile(
                        f"{key} is {value:g} for '{name}', a {KINDS[net.kind[e]].name}, which has no angle or phase",
                        where=table.where(i),
                        remedy="leave the field empty",
                    )
                if value is not None:
                    into[e] = value
            value = table.column("stuck_rad")[i]
            if value is not None:
                if net.setting_of[e] < 0:
                    raise UnsoundFile(
                        f"stuck_rad is given for '{name}', which nothing moves",
                        where=table.where(i),
                        remedy="leave the field empty; use error_rad for a fixed part",
                    )
                stuck[net.setting_of[e]] = value
    return AsBuilt(frozen(error), frozen(loss), frozen(stuck), frozen(sigma))


def _digest(net: Net, as_built: AsBuilt, actuators: Actuators, channels: Channels) -> str:
    """sha256 of everything that the forward path reads; names, notes, states, rest and spread do not count."""
    digest = hashlib.sha256(b"meshctl 1")

    def add(label: str, value: Any) -> None:
        array = np.ascontiguousarray(value)
        if array.dtype.kind == "f":
            array = array + 0.0  # -0.0 and 0.0 are one number
        digest.update(f"{label}:{array.dtype.str}:{array.shape};".encode())
        digest.update(array.tobytes())

    for label in ("kind", "nominal", "length_um", "setting_of", "port_start", "mate"):
        add(label, getattr(net, label))
    add("inputs", net.input_ports)
    add("outputs", net.output_ports)
    add(
        "guide",
        [net.wavelength_nm, net.n_eff, net.n_group, net.guide_loss_db_per_cm, net.angle_slope_per_nm],
    )
    for row, returns in net.reflections.items():
        add(f"reflection{row}", returns)
    for row, part in net.measured.items():
        add(f"measured{row}", np.stack([part.magnitude, part.phase_rad]))
        add(f"thz{row}", part.thz)
    for label in ("error_rad", "loss_db", "stuck_rad"):
        add(label, getattr(as_built, label))
    for label in ("setting", "channel", "law", "dead"):
        add(label, getattr(actuators, label))
    for label in sorted(actuators.params):
        add(label, actuators.params[label])
    for row, table in actuators.tables.items():
        add(f"table{row}", table)
    if actuators.crosstalk is not None:
        coo = actuators.crosstalk.tocoo()
        order = np.lexsort((coo.col, coo.row))
        add("crosstalk", np.column_stack([coo.row[order], coo.col[order], coo.data[order]]))
    for label in ("by_current", *CHANNEL_NUMBERS, "ground", "ground_ohm"):
        add(label, getattr(channels, label))
    return digest.hexdigest()


def build_mesh(description: Description, tables: Tables, text: str, folder: Path | None = None) -> Mesh:
    """Join mesh.toml and its tables to a Mesh.

    Raises
    ------
    UnsoundFile or a finding under it, with file, line or key, value, what is allowed and what to do.
    """
    assembly, setting_of = _assembled(description, folder)
    if _drags(description, tables.actuators):
        assembly, setting_of = with_drag(assembly, setting_of)
    net = _net(description, assembly, setting_of)
    as_built = _as_built(description, net, tables.elements)
    actuators, channels = join_actuation(
        description, net, tables.actuators, tables.channels, tables.tables, tables.crosstalk
    )
    spread = read_spread(description.spread.model_dump(), folder)
    rest = description.rest.state
    return Mesh(
        description.name,
        net,
        as_built,
        actuators,
        channels,
        spread,
        _digest(net, as_built, actuators, channels),
        description.lattice.shape if description.lattice else "",
        rest,
        description.budget.loss_db if description.budget else math.nan,
        description.note,
        text,
        folder,
    )
