"""What heaters give their neighbours' phases, from crosstalk.csv or from the places of all arms.

Public: tabled_crosstalk, crosstalk_by_places.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from meshctl.errors import DuplicateName, Finding, UnsoundFile
from meshctl.laws import LAWS
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.graph import FREE, Actuators, Net
from meshctl.mesh.tables import Table, unknown_name


def tabled_crosstalk(net: Net, names: list[str], actuators: Actuators, table: Table | None) -> Any:
    if table is None or not len(table):
        return actuators.crosstalk
    from scipy.sparse import csr_matrix

    row_of = {name: a for a, name in enumerate(names)}
    elements = net.names.element_row
    entries: dict[tuple[int, int], float] = {}
    for i, (source, target) in enumerate(zip(table.column("from"), table.column("to"), strict=True)):
        where = table.where(i)
        if source not in row_of:
            raise unknown_name("actuator", source, names, where)
        if target not in elements or net.setting_of[elements[target]] < 0:
            raise unknown_name("tunable element", target, net.setting_names, where)
        key = int(net.setting_of[elements[target]]), row_of[source]
        if key[0] == actuators.setting[key[1]]:
            raise UnsoundFile(
                f"actuator '{source}' moves '{target}' itself", where=where, remedy="leave its own effect out"
            )
        if key in entries:
            raise DuplicateName(f"'{source}' to '{target}' stands twice", where=where, remedy="keep one row")
        entries[key] = table.column("coefficient")[i]
    rows, columns = zip(*entries, strict=True)
    return csr_matrix((list(entries.values()), (rows, columns)), shape=(net.n_settings, len(names)))


def _arms(description: Description, net: Net) -> tuple[np.ndarray, np.ndarray]:
    """Places (um) of the arm that each setting's phase is of, and of the arm it is compared with, [S, 2].

    Outer phases stand a quarter of the column pitch before the middle of their cell, inner ones as far behind;
    a phase in no cell has one arm alone, behind the last column.
    """
    lattice, crosstalk = description.lattice, description.crosstalk
    assert crosstalk is not None
    if lattice is None:
        raise UnsoundFile(
            "places are known for lattices only",
            where=f"{MESH_TOML} key 'crosstalk'",
            remedy="give crosstalk.csv for a net of your own",
        )
    pitch_x, pitch_y = lattice.pitch_um
    cell = net.cell_of[net.first_element]
    middle = np.zeros((net.n_settings, 2))
    middle[cell >= 0] = net.cell_xy_um[cell[cell >= 0]]
    order = np.zeros(net.n_settings, np.int64)
    order[1:] = (cell[1:] == cell[:-1]) & (cell[1:] >= 0)
    middle[:, 0] += np.where(cell >= 0, np.where(order == 0, -0.25, 0.25) * pitch_x, 0.0)
    loose = np.flatnonzero(cell < 0)
    middle[loose, 0] = net.cell_xy_um[:, 0].max(initial=0.0) + pitch_x
    middle[loose, 1] = -np.arange(len(loose)) * pitch_y
    half = np.array([0.0, 0.5 * crosstalk.arm_um])
    upper, lower = middle + half, middle - half
    upper[loose], lower[loose] = middle[loose], np.nan
    return upper, lower


def crosstalk_by_places(description: Description, net: Net, actuators: Actuators) -> Any:
    """Signed crosstalk [S, A] of all heaters by the distance law of mesh.toml."""
    from scipy.sparse import csr_matrix, diags_array

    from meshctl.mesh.neighbours import from_positions

    crosstalk = description.crosstalk
    assert crosstalk is not None
    upper, lower = (arms[actuators.setting] for arms in _arms(description, net))
    arm = np.ones(len(actuators))
    if "arm" in actuators.params:
        arm = np.where(np.isnan(actuators.params["arm"]), 1.0, actuators.params["arm"])
    swapped = (arm < 0)[:, None] & ~np.isnan(lower)
    warmed, compared = np.where(swapped, lower, upper), np.where(swapped, upper, lower)
    try:
        matrix = from_positions(
            warmed,
            compared,
            crosstalk.amplitude,
            crosstalk.distance_um,
            crosstalk.law,
            keep_above=crosstalk.keep_above,
        )
    except Finding as finding:
        finding.where = f"{MESH_TOML} key 'crosstalk'" + (f", {finding.where}" if finding.where else "")
        raise
    heats = np.array([LAWS[number].power_law for number in actuators.law.tolist()], float)
    signed = (diags_array(arm) @ matrix @ diags_array(arm * heats)).tocoo()
    # one row per setting: that of its first actuator; a setting's own actuators do not disturb it
    first = np.full(net.n_settings, FREE)
    first[actuators.setting[::-1]] = np.arange(len(actuators))[::-1]
    keep = (first[actuators.setting[signed.row]] == signed.row) & (
        actuators.setting[signed.row] != actuators.setting[signed.col]
    )
    shape = (net.n_settings, len(actuators))
    return csr_matrix((signed.data[keep], (actuators.setting[signed.row[keep]], signed.col[keep])), shape=shape)
