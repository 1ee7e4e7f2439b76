"""Nets given part by part: elements and links of mesh.toml, and parts inserted into a lattice.

Public: explicit_net, with_inserts.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import numpy as np

from meshctl.errors import (
    DuplicateName,
    MissingRow,
    NotFinite,
    OutOfRange,
    UnknownKey,
    UnsoundFile,
    UnsoundNet,
)
from meshctl.mesh.description import MESH_TOML, Description, InsertPart
from meshctl.mesh.graph import FREE, ListedNames
from meshctl.mesh.lattices import Assembly
from meshctl.mesh.quantities import QUANTITIES
from meshctl.mesh.tables import unknown_name
from meshctl.optics.elements import COUPLER, GUIDE, KINDS, PHASE, kind_row


def _value(kind: int, given: dict[str, Any], where: str) -> tuple[float, float]:
    """(nominal, length) of a part from the keys of its table in mesh.toml."""
    keys = KINDS[kind].value_keys
    for key, value in given.items():
        if key not in keys:
            raise unknown_name("key", key, keys, where)
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise NotFinite(f"{key} is {value!r}", where=where, remedy=f"write {QUANTITIES[key].allowed}")
        if not QUANTITIES[key].allows(value):
            raise OutOfRange(f"{key} is {value:g}", where=where, remedy=f"allowed is {QUANTITIES[key].allowed}")
    if len(given) > 1:
        raise DuplicateName(f"{' and '.join(given)} say the same twice", where=where, remedy="keep one")
    if not given:
        default = KINDS[kind].default
        if default is None:
            raise MissingRow(f"a {KINDS[kind].name} needs {' or '.join(keys)}", where=where, remedy="add it")
        return default, 0.0
    key, number = next(iter(given.items()))
    if key == "cross_power":
        return math.asin(math.sqrt(number)), 0.0
    return (0.0, float(number)) if key == "length_um" else (float(number), 0.0)


class _Parts:
    """Elements of an explicit net as they are read."""

    def __init__(self, rows: list[list[Any]]) -> None:
        self.names: list[str] = []
        self.kinds: list[int] = []
        self.nominal: list[float] = []
        self.length: list[float] = []
        self.row: dict[str, int] = {}
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
                raise unknown_name("kind", row[1], [k.name for k in KINDS], where)
            if row[0] in self.row:
                raise DuplicateName(f"element '{row[0]}' stands twice", where=where, remedy="rename one")
            nominal, length = _value(kind, row[2] if len(row) == 3 else {}, where)
            self.row[row[0]] = len(self.names)
            self.names.append(row[0])
            self.kinds.append(kind)
            self.nominal.append(nominal)
            self.length.append(length)
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


def explicit_net(description: Description) -> tuple[Assembly, np.ndarray]:
    """The arrays of a net given by elements and links, and setting_of [E].

    Raises
    ------
    UnknownKey, DuplicateName, MissingRow, UnsoundNet, UnsoundFile
        Naming the key, the value and what to do.
    """
    parts = _Parts(description.elements or [])
    named = [*(description.inputs or ()), *(description.outputs or ()), *description.monitors]
    both_ways = description.inputs is None and description.outputs is None
    known = None if both_ways else set(named)
    for name in named:
        if "." in name or not name:
            raise UnknownKey(
                f"port '{name}' is no port name",
                where=f"{MESH_TOML} key 'inputs'",
                remedy="use no dot or blank",
            )
    if not both_ways and len(set(named)) < len(named):
        twice = next(n for n in named if named.count(n) > 1)
        raise DuplicateName(
            f"port '{twice}' is named twice",
            where=f"{MESH_TOML} keys 'inputs', 'outputs'",
            remedy="name it once",
        )
    mate, externals = _linked(parts, description.links or [], known)
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
    )
    return assembly, setting_of


def _insert_point(assembly: Assembly, at: str, where: str) -> tuple[int, str | None]:
    """(port, external name): the port that the part goes before or behind."""
    if at in assembly.externals:
        return assembly.externals[at], at
    owner, _, letter = at.rpartition(".")
    names = assembly.names
    if owner in names.element_row:
        row = names.element_row[owner]
        letters = KINDS[assembly.kind[row]].ports
        if letter not in letters:
            raise unknown_name(f"port of '{owner}'", letter, letters, where)
        port = int(assembly.port_start[row]) + letters.index(letter)
    elif owner in names.cell_row:
        port = _cell_port(assembly, names.cell_row[owner], letter, where)
    else:
        raise unknown_name("place", at, [*names.cells[:4], *assembly.externals], where)
    outside = next((name for name, p in assembly.externals.items() if p == port), None)
    return port, outside


def _cell_port(assembly: Assembly, cell: int, letter: str, where: str) -> int:
    """A cell's outer ports are a1, a2 where light enters its parts and b1, b2 where it leaves."""
    ports: dict[str, int] = {}
    rows = np.flatnonzero(assembly.cell_of == cell)
    owner = np.repeat(np.arange(len(assembly.kind)), np.diff(assembly.port_start))
    for row in rows.tolist():
        start, stop = int(assembly.port_start[row]), int(assembly.port_start[row + 1])
        for port in range(start, stop):
            other = assembly.mate[port]
            if other >= 0 and assembly.cell_of[owner[other]] == cell:
                continue
            end = "a" if port - start < (stop - start) // 2 else "b"
            ports[f"{end}{1 + sum(p.startswith(end) for p in ports)}"] = port
    if letter not in ports:
        raise unknown_name("port of the cell", letter, ports, where)
    return ports[letter]


def with_inserts(assembly: Assembly, setting_of: np.ndarray, inserts: list[InsertPart]) -> tuple[Assembly, np.ndarray]:
    """The net with parts put into its links: taps to monitor ports, losses, guides, fixed phases."""
    for number, part in enumerate(inserts, 1):
        where = f"{MESH_TOML} key 'insert.{number}'"
        assembly = _inserted(assembly, part, where)
        setting_of = np.r_[setting_of, FREE].astype(np.int32)
    return assembly, setting_of


def _inserted(assembly: Assembly, part: InsertPart, where: str) -> Assembly:
    names = assembly.names
    if part.name in names.element_row or part.name in assembly.externals:
        raise DuplicateName(f"the name '{part.name}' is taken", where=where, remedy="rename the insert")
    is_tap = part.kind == "tap"
    if is_tap != (part.monitor is not None):
        raise UnsoundFile(
            "a tap needs 'monitor'" if is_tap else f"a {part.kind} has no monitor",
            where=where,
            remedy="name the monitor port of a tap, and only of a tap",
        )
    if part.monitor is not None and part.monitor in assembly.externals:
        raise DuplicateName(f"port '{part.monitor}' exists already", where=where, remedy="rename the monitor")
    kind = COUPLER if is_tap else kind_row(part.kind)
    assert kind is not None
    given = part.model_dump(exclude={"name", "kind", "at", "monitor"}, exclude_none=True)
    if is_tap and not given:
        raise MissingRow("a tap needs cross_power or angle_rad", where=where, remedy="say how much it takes")
    nominal, length = _value(kind, given, where)

    port, outside = _insert_point(assembly, part.at, where)
    row = int(np.searchsorted(assembly.port_start, port, side="right")) - 1
    entering = port - assembly.port_start[row] < (assembly.port_start[row + 1] - assembly.port_start[row]) // 2
    ports = len(KINDS[kind].ports)
    first = int(assembly.port_start[-1])
    near_in, near_out = first, first + ports // 2
    near, far = (near_out, near_in) if entering else (near_in, near_out)
    mate = np.r_[assembly.mate, np.full(ports, FREE)].astype(np.int32)
    other = int(mate[port])
    mate[port], mate[near] = near, port
    if other >= 0:
        mate[far], mate[other] = other, far
    externals = dict(assembly.externals)
    if outside is not None:
        externals[outside] = far
    if part.monitor is not None:
        externals[part.monitor] = first + 3
    return replace(
        assembly,
        kind=np.r_[assembly.kind, kind].astype(np.uint8),
        nominal=np.r_[assembly.nominal, nominal],
        length_um=np.r_[assembly.length_um, length if kind == GUIDE else 0.0],
        settable=np.r_[assembly.settable, False],
        cell_of=np.r_[assembly.cell_of, FREE].astype(np.int32),
        port_start=np.r_[assembly.port_start, first + ports].astype(np.int32),
        mate=mate,
        externals=externals,
        names=ListedNames([*names.elements, part.name], names.cells),
    )
