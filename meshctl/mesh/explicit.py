"""Nets given part by part: elements and links of mesh.toml.

Public: explicit_net, check_port_name.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import (
    DuplicateName,
    MissingRow,
    UnknownKey,
    UnsoundFile,
    UnsoundNet,
)
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.graph import FREE, ListedNames
from meshctl.mesh.lattices import Assembly
from meshctl.mesh.parts import KIND_NAMES, Part, part_of
from meshctl.mesh.tables import unknown_name
from meshctl.optics.elements import COUPLER, KINDS, PHASE, kind_row

NOT_IN_PORTS = ".:=,@"


class _Parts:
    """Elements of an explicit net as they are read."""

    def __init__(self, rows: list[list[Any]], folder: Path | None) -> None:
        self.names: list[str] = []
        self.kinds: list[int] = []
        self.nominal: list[float] = []
        self.length: list[float] = []
        self.row: dict[str, int] = {}
        self.special: dict[int, Part] = {}
        for number, row in enumerate(rows, 1):
            where = f"{MESH_TOML} key 'elements.{number}'"
            fits = 2 <= len(row) <= 3 and isinstance(row[0], str) and isinstance(row[1], str)
            if not fits or (len(row) == 3 and not isinstance(row[2], dict)):
                raise UnsoundFile(
                    f"the value is {row!r}",
                    where=where,
                    remedy='write ["NAME", "KIND"] or ["NAME", "KIND", {..}]',
                )
            kind = kind_row(row[1])
            if kind is None:
                raise unknown_name("kind", row[1], KIND_NAMES, where)
            if row[0] in self.row:
                raise DuplicateName(f"element '{row[0]}' stands twice", where=where, remedy="rename one")
            part = part_of(kind, row[2] if len(row) == 3 else {}, where, folder)
            if part.reflection or part.measured:
                self.special[len(self.names)] = part
            self.row[row[0]] = len(self.names)
            self.names.append(row[0])
            self.kinds.append(part.kind)
            self.nominal.append(part.nominal)
            self.length.append(part.length_um)
        counts = [len(KINDS[k].ports) for k in self.kinds]
        self.port_start = np.r_[0, np.cumsum(counts)].astype(np.int32)

    def port(self, word: str, where: str) -> int:
        """Number of an ELEMENT.PORT."""
        element, _, letter = word.rpartition(".")
        if element not in self.row:
            raise unknown_name("element", element, self.row, where)
        row = self.row[element]
        letters = KINDS[self.kinds[row]].ports
        if letter not in letters:
            raise unknown_name(f"port of {KINDS[self.kinds[row]].name} '{element}'", letter, letters, where)
        return int(self.port_start[row]) + letters.index(letter)


def _linked(parts: _Parts, links: list[str], known: set[str] | None) -> tuple[np.ndarray, dict[str, int]]:
    mate = np.full(int(parts.port_start[-1]), FREE, np.int32)
    externals: dict[str, int] = {}
    taken: dict[int, str] = {}
    for number, link in enumerate(links, 1):
        where = f"{MESH_TOML} key 'links.{number}'"
        ends = link.split()
        outside = [end for end in ends if "." not in end]
        if len(ends) != 2 or len(outside) == 2:
            raise UnsoundFile(
                f"the value is '{link}'",
                where=where,
                remedy="write two ends, 'ELEMENT.PORT' or one port name",
            )
        ports = [parts.port(end, where) for end in ends if "." in end]
        for port in ports:
            if port in taken:
                raise UnsoundNet(
                    f"'{link}' uses a port that '{taken[port]}' uses already",
                    where=where,
                    remedy="link it once",
                )
            taken[port] = link
        if outside:
            name = outside[0]
            if name in externals:
                raise DuplicateName(f"port '{name}' is linked twice", where=where, remedy="link it once")
            if known is not None and name not in known:
                raise unknown_name("port", name, sorted(known), where)
            externals[name] = ports[0]
        else:
            mate[ports[0]], mate[ports[1]] = ports[1], ports[0]
    return mate, externals


def _settings(parts: _Parts, tunable: list[str]) -> np.ndarray:
    setting_of = np.full(len(parts.names), FREE, np.int32)
    for number, group in enumerate(tunable):
        where = f"{MESH_TOML} key 'tunable.{number + 1}'"
        for name in group.split():
            if name not in parts.row:
                raise unknown_name("element", name, parts.row, where)
            row = parts.row[name]
            if parts.kinds[row] not in (COUPLER, PHASE):
                raise UnsoundFile(
                    f"'{name}' is a {KINDS[parts.kinds[row]].name}",
                    where=where,
                    remedy="only couplers and phases are tunable",
                )
            if setting_of[row] >= 0:
                raise DuplicateName(f"'{name}' is tunable twice", where=where, remedy="name it once")
            setting_of[row] = number
        members = {parts.kinds[parts.row[n]] for n in group.split()}
        if len(members) != 1:
            raise UnsoundFile(
                f"the value is '{group}'",
                where=where,
                remedy="one setting moves couplers only, or phases only",
            )
    return setting_of


def _cells(parts: _Parts, description: Description, setting_of: np.ndarray) -> tuple[np.ndarray, list[str], np.ndarray]:
    cell_of = np.full(len(parts.names), FREE, np.int32)
    names: list[str] = []
    places: list[tuple[float, float]] = []
    for name, cell in description.cells.items():
        where = f"{MESH_TOML} key 'cells.{name}'"
        for element in cell.elements:
            if element not in parts.row:
                raise unknown_name("element", element, parts.row, where)
            if cell_of[parts.row[element]] >= 0:
                raise DuplicateName(f"'{element}' is in two cells", where=where, remedy="keep one")
            cell_of[parts.row[element]] = len(names)
        names.append(name)
        places.append(cell.at_um or (400.0 * len(places), 0.0))
    for row in np.flatnonzero((setting_of >= 0) & (cell_of < 0)).tolist():
        if parts.kinds[row] == COUPLER:  # a tunable coupler is a cell of its own
            if parts.names[row] in description.cells:
                raise DuplicateName(
                    f"cell '{parts.names[row]}' and a tunable coupler share a name",
                    where=f"{MESH_TOML} key 'cells'",
                    remedy="rename one",
                )
            cell_of[row] = len(names)
            names.append(parts.names[row])
            places.append((400.0 * len(places), 0.0))
    return cell_of, names, np.array(places, float).reshape(-1, 2)


def check_port_name(name: str, where: str) -> None:
    """Refuse a name that a route, written IN:OUT=SHARE,OUT@LENGTH, could not say."""
    wrong = [c for c in NOT_IN_PORTS if c in name]
    if wrong or not name or name.startswith("-") or any(c.isspace() for c in name):
        raise UnknownKey(
            f"port '{name}' is no port name",
            where=where,
            remedy=f"use none of {' '.join(NOT_IN_PORTS)} and no blank, and no - in front",
        )


def explicit_net(description: Description, folder: Path | None = None) -> tuple[Assembly, np.ndarray]:
    """The arrays of a net given by elements and links, and setting_of [E].

    Raises
    ------
    UnknownKey, DuplicateName, MissingRow, UnsoundNet, UnsoundFile
        Naming the key, the value and what to do.
    """
    parts = _Parts(description.elements or [], folder)
    named = [*(description.inputs or ()), *(description.outputs or ()), *description.monitors]
    both_ways = description.inputs is None and description.outputs is None
    known = None if both_ways else set(named)
    for key in ("inputs", "outputs", "monitors"):
        for name in getattr(description, key) or ():
            check_port_name(name, f"{MESH_TOML} key '{key}'")
    if not both_ways and len(set(named)) < len(named):
        twice = next(n for n in named if named.count(n) > 1)
        raise DuplicateName(
            f"port '{twice}' is named twice",
            where=f"{MESH_TOML} keys 'inputs', 'outputs'",
            remedy="name it once",
        )
    mate, externals = _linked(parts, description.links or [], known)
    for name in externals:
        check_port_name(name, f"{MESH_TOML} key 'links'")
    for name in named:
        if name not in externals:
            raise MissingRow(
                f"port '{name}' is linked to nothing",
                where=f"{MESH_TOML} key 'links'",
                remedy=f"add a link such as '{name} ELEMENT.PORT'",
            )
    if both_ways:
        inputs = outputs = tuple(n for n in externals if n not in description.monitors)
    else:
        inputs, outputs = tuple(description.inputs or ()), tuple(description.outputs or ())
    if not inputs or not outputs:
        raise MissingRow("no port is named", where=f"{MESH_TOML} key 'inputs'", remedy="name inputs and outputs")
    setting_of = _settings(parts, description.tunable)
    cell_of, cells, places = _cells(parts, description, setting_of)
    kind = np.array(parts.kinds, np.uint8)
    assembly = Assembly(
        kind,
        np.where(setting_of >= 0, 0.0, np.array(parts.nominal)),
        np.array(parts.length),
        setting_of >= 0,
        cell_of,
        places,
        parts.port_start,
        mate,
        externals,
        inputs,
        outputs,
        ListedNames(parts.names, cells),
        parts.special,
    )
    return assembly, setting_of
