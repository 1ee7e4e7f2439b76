"""A mesh folder: read and checked, made new from a lattice, written.

Public: load, lattice, write, MESH_TOML.
"""

from __future__ import annotations

import math
import shutil
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import MissingFile, OutOfRange, UnknownKey, WrongUsage
from meshctl.mesh.actuation import PARAM_NAMES
from meshctl.mesh.building import Tables, build_mesh
from meshctl.mesh.description import MESH_TOML, Description, parse_description
from meshctl.mesh.files import new_folder, read_text, write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.lattices import LATTICES, PLANE_SIZES
from meshctl.mesh.quantities import QUANTITIES, Quantity
from meshctl.mesh.rows import ACTUATOR_WORDS, CHANNEL_HEAD, CROSSTALK_HEAD, ELEMENT_HEAD, TABLE_HEAD, mesh_tables
from meshctl.mesh.spread import drawn
from meshctl.mesh.tables import Table, read_table, table_text, unknown_name
from meshctl.mesh.toml_text import lattice_text
from meshctl.optics.elements import COUPLER

KNOWN = {MESH_TOML, "elements.csv", "actuators.csv", "channels.csv", "tables.csv", "crosstalk.csv", "states"}


def _param(name: str) -> Quantity | None:
    """Any law's parameter as a column; each law checks its own range once the law is known."""
    if name not in PARAM_NAMES:
        return None
    return Quantity(name, "", -math.inf, math.inf, "")


_READERS: dict[str, tuple[tuple[str, ...], Any, tuple[str, ...], tuple[str, ...]]] = {
    "elements": (("element",), QUANTITIES.get, ("element",), ELEMENT_HEAD),
    "actuators": (ACTUATOR_WORDS, _param, ("actuator",), (*ACTUATOR_WORDS, *PARAM_NAMES)),
    "channels": (("channel", "ground", "drives"), QUANTITIES.get, ("channel",), CHANNEL_HEAD),
    "tables": (("actuator",), QUANTITIES.get, ("actuator", "volts_v", "value_rad"), TABLE_HEAD),
    "crosstalk": (("from", "to"), QUANTITIES.get, CROSSTALK_HEAD, CROSSTALK_HEAD),
}


def _read_one(folder: Path, name: str) -> Table | None:
    path = folder / f"{name}.csv"
    if not path.exists():
        return None
    words, numbers, required, allowed = _READERS[name]

    def known(column: str) -> Quantity | None:
        return numbers(column) if column in allowed else None

    return read_table(path, words, known, required, allowed)


def load(folder: str | Path) -> Mesh:
    """Read a mesh folder and check all of it.

    Parameters
    ----------
    folder : path of a folder with a mesh.toml

    Returns
    -------
    Mesh

    Raises
    ------
    MissingFile, UnsoundFile or a finding under it
        With file, line or key, the value, what is allowed and what to do.

    Example
    -------
    >>> load("meshes/plover8").net.n_cells
    28
    """
    folder = Path(folder)
    toml = folder / MESH_TOML
    if not folder.exists():
        raise MissingFile(
            "there is no such folder",
            where=str(folder),
            remedy="name a mesh folder, or make one with 'meshctl new'",
        )
    if not toml.is_file():
        raise MissingFile(f"no {MESH_TOML} in it", where=str(folder), remedy="name a mesh folder")
    text = read_text(toml)
    description = parse_description(text)
    measured = measured_files(description)
    for entry in folder.iterdir():
        if entry.suffix.lower() == ".csv" and entry.name not in KNOWN and entry.name not in measured:
            raise UnknownKey(
                f"table '{entry.name}' is not known",
                where=str(folder),
                remedy=f"the tables of a mesh are {', '.join(sorted(n for n in KNOWN if n.endswith('.csv')))}",
            )
    tables = Tables(*(_read_one(folder, name) for name in _READERS))
    return build_mesh(description, tables, text, folder)


def measured_files(description: Description) -> list[str]:
    """Files of measured parts and of measured scatter, by their paths within the mesh folder."""
    named = [part.file for part in description.insert]
    named += [shape.file for shape in description.spread.shape.values()]
    named += [row[2].get("file") for row in description.elements or [] if len(row) == 3 and isinstance(row[2], dict)]
    return list(dict.fromkeys(file for file in named if isinstance(file, str)))


def lattice(
    shape: str,
    *,
    modes: int | None = None,
    cell: str = "mzi",
    spare: int = 0,
    balanced: bool = False,
    rings: int | None = None,
    rows: int | None = None,
    columns: int | None = None,
    name: str | None = None,
    built: int | None = None,
) -> Mesh:
    """A regular mesh as drawn, or as built by chance.

    Parameters
    ----------
    shape : a key of LATTICES, such as rectangular or hexagonal
    modes : number of lanes; a switch needs none
    cell : "mzi" (two fixed couplers, inner and outer phase) or "gap" (tunable coupler and phase)
    spare : extra columns
    balanced : a dummy loss wherever a lane skips a column
    rings, rows, columns : size of a lattice with loops: hexagonal by rings or by rows and columns, else by both
    built : seed of a die drawn from the mesh's spread; None: as drawn

    Raises
    ------
    WrongUsage

    Example
    -------
    >>> lattice("rectangular", modes=8).net.n_cells
    28
    """
    for word, value, known in (("shape", shape, tuple(LATTICES)), ("cell", cell, ("mzi", "gap"))):
        if value not in known:
            finding = unknown_name(word, value, known, "")
            raise WrongUsage(finding.what, remedy=finding.remedy)
    plane = {k: v for k, v in (("rings", rings), ("rows", rows), ("columns", columns)) if v is not None}
    if shape in PLANE_SIZES:
        if tuple(plane) not in PLANE_SIZES[shape] or modes is not None or spare or balanced:
            ways = " or ".join(" and ".join(way) for way in PLANE_SIZES[shape])
            raise WrongUsage(f"a {shape} lattice is sized by {ways} alone", remedy="give these and no other size")
    elif plane:
        raise WrongUsage(f"a {shape} lattice takes no {', '.join(plane)}", remedy="give modes, such as 8")
    elif shape != "switch" and modes is None:
        raise WrongUsage(f"a {shape} lattice needs a number of modes", remedy="give modes, such as 8")
    if built is not None and (not isinstance(built, int | np.integer) or isinstance(built, bool) or built < 0):
        raise WrongUsage(f"built is {built!r}", remedy="give the seed of a die, a whole number from 0")
    for key, size in (("modes", modes), ("spare", spare), *plane.items()):
        if size is None:
            continue
        if not isinstance(size, int | np.integer) or isinstance(size, bool):
            raise WrongUsage(f"{key} is {size!r}, a {type(size).__name__}", remedy="give a whole number, such as 8")
        if not QUANTITIES[key].allows(size):
            raise WrongUsage(f"{key} is {size}", remedy=f"allowed is {QUANTITIES[key].allowed}")
    name = name or f"{shape}{modes or 'x'.join(map(str, plane.values()))}"
    text = lattice_text(shape, name, modes=modes, cell=cell, spare=spare, balanced=balanced, plane=plane)
    try:
        mesh = build_mesh(parse_description(text, "lattice"), Tables(), text)
    except OutOfRange as finding:  # a size that this shape does not take
        raise WrongUsage(finding.what, remedy=finding.remedy) from None
    return mesh if built is None else with_die(mesh, built)


def with_die(mesh: Mesh, seed: int) -> Mesh:
    """The mesh with one die drawn from its spread in place of the drawn values."""
    tables = _tables_of_text(die_tables(mesh, seed))
    return build_mesh(parse_description(mesh.text), tables, mesh.text, mesh.folder)


def die_tables(mesh: Mesh, seed: int) -> dict[str, str]:
    """elements.csv and actuators.csv of one die drawn from the mesh's spread."""
    net, actuators = mesh.net, mesh.actuators
    draw = drawn(mesh.spread, net.kind == COUPLER, mesh.as_built.loss_db, len(actuators), seed)
    names = net.names.elements
    changed = np.flatnonzero((draw.error_rad != 0.0) | (draw.loss_db != mesh.as_built.loss_db))
    elements = [
        (
            names[e],
            draw.error_rad[e],
            draw.loss_db[e] if draw.loss_db[e] != mesh.as_built.loss_db[e] else None,
        )
        for e in changed.tolist()
    ]
    heads = ["offset_rad", "p2pi_mw", "r_ohm"]
    heads = [h for h in heads if h in actuators.params]
    factor = {"p2pi_mw": draw.p2pi_factor, "r_ohm": draw.r_factor}
    columns = [
        actuators.params[h] + draw.offset_rad if h == "offset_rad" else actuators.params[h] * factor[h] for h in heads
    ]
    rows = (
        [
            (name, *(column[a] for column in columns))
            for a, name in enumerate(mesh.actuator_names)
            if not math.isnan(columns[0][a])
        ]
        if columns
        else []
    )
    texts = {}
    if elements:
        texts["elements"] = table_text(("element", "error_rad", "loss_db"), elements)
    if rows:
        texts["actuators"] = table_text(("actuator", *heads), rows)
    return texts


def _tables_of_text(texts: dict[str, str]) -> Tables:
    import tempfile

    with tempfile.TemporaryDirectory() as work:
        for name, text in texts.items():
            (Path(work) / f"{name}.csv").write_text(text)
        return Tables(*(_read_one(Path(work), name) for name in _READERS))


def write(mesh: Mesh, folder: str | Path) -> Path:
    """Write a mesh to a new folder: filled beside its place, then renamed there.

    Raises
    ------
    UnsoundFile
        If the folder exists; an existing one is never rewritten.
    """
    folder = Path(folder)
    with new_folder(folder) as work:
        write_whole(work / MESH_TOML, mesh.text)
        for name, text in mesh_tables(mesh).items():
            write_whole(work / f"{name}.csv", text)
        for file in measured_files(parse_description(mesh.text)):
            assert mesh.folder is not None, "a measured part lies in the folder that its mesh was read from"
            (work / file).parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(mesh.folder / file, work / file)
    return folder
