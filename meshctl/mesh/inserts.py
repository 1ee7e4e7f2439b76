"""Parts put into the links of a net: taps to monitor ports, losses, guides, and parts that reflect.

A part stands at a port, between it and what the port was linked to. Of a part with two arms the first (a1 to b2
of a crossing, a1 to b1 else) stands at the first place of `at`; the second arm stands at the second place, or is
dark where `at` names only one. A terminator closes a free port.
Public: with_inserts.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np

from meshctl.errors import DuplicateName, MissingRow, UnsoundFile
from meshctl.mesh.description import MESH_TOML, InsertPart
from meshctl.mesh.explicit import check_port_name
from meshctl.mesh.graph import FREE, ListedNames
from meshctl.mesh.lattices import Assembly
from meshctl.mesh.parts import Part, part_of
from meshctl.mesh.tables import unknown_name
from meshctl.optics.elements import COUPLER, CROSSING, KINDS, TERMINATOR, kind_row


def with_inserts(
    assembly: Assembly, setting_of: np.ndarray, inserts: list[InsertPart], folder: Path | None = None
) -> tuple[Assembly, np.ndarray]:
    """The net with parts put into its links, and setting_of [E] with theirs."""
    for number, part in enumerate(inserts, 1):
        where = f"{MESH_TOML} key 'insert.{number}'"
        assembly = _inserted(assembly, part, where, folder)
        setting_of = np.r_[setting_of, FREE].astype(np.int32)
    return assembly, setting_of


def _place(assembly: Assembly, at: str, where: str) -> int:
    """The port that a part goes before or behind."""
    if at in assembly.externals:
        return assembly.externals[at]
    owner, _, letter = at.rpartition(".")
    names = assembly.names
    if owner in names.element_row:
        row = names.element_row[owner]
        letters = KINDS[assembly.kind[row]].ports
        if letter not in letters:
            raise unknown_name(f"port of '{owner}'", letter, letters, where)
        return int(assembly.port_start[row]) + letters.index(letter)
    if owner in names.cell_row:
        return _cell_port(assembly, names.cell_row[owner], letter, where)
    raise unknown_name("place", at, [*names.cells[:4], *assembly.externals], where)


def _outside(externals: dict[str, int], port: int) -> str | None:
    return next((name for name, p in externals.items() if p == port), None)


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


def _made(part: InsertPart, where: str, folder: Path | None) -> Part:
    kind = COUPLER if part.kind == "tap" else kind_row(part.kind)
    assert kind is not None
    given = part.model_dump(exclude={"name", "kind", "at", "monitor"}, exclude_none=True)
    if part.kind == "tap" and not given:
        raise MissingRow("a tap needs cross_power or angle_rad", where=where, remedy="say how much it takes")
    return part_of(kind, given, where, folder)


def _check_words(assembly: Assembly, part: InsertPart, where: str) -> None:
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
    if part.monitor is not None:
        check_port_name(part.monitor, where)
    if part.monitor is not None and part.monitor in assembly.externals:
        raise DuplicateName(f"port '{part.monitor}' exists already", where=where, remedy="rename the monitor")


def _inserted(assembly: Assembly, part: InsertPart, where: str, folder: Path | None) -> Assembly:
    _check_words(assembly, part, where)
    made = _made(part, where, folder)
    ports = len(KINDS[made.kind].ports)
    first = int(assembly.port_start[-1])
    mate = np.r_[assembly.mate, np.full(ports, FREE)].astype(np.int32)
    externals = dict(assembly.externals)
    places = part.at.split()
    arms = [(0, 3), (1, 2)] if made.kind == CROSSING else [(k, k + ports // 2) for k in range(ports // 2)]
    if made.kind == TERMINATOR:
        _terminate(assembly, places, where, mate, externals)
    elif not 1 <= len(places) <= (1 if part.kind == "tap" else len(arms)):
        raise UnsoundFile(
            f"at is '{part.at}'; a {part.kind} stands in {'one link' if len(arms) == 1 else 'one link or two'}",
            where=where,
            remedy="name one port for each arm",
        )
    else:
        if len(places) == 2 and places[0] == places[1]:
            raise DuplicateName(f"at names '{places[0]}' twice", where=where, remedy="name two ports")
        for at, (enter, leave) in zip(places, arms, strict=False):
            _put(assembly, at, where, mate, externals, first + enter, first + leave)
    if part.monitor is not None:
        externals[part.monitor] = first + 3
    row, names = len(assembly.kind), assembly.names
    return replace(
        assembly,
        kind=np.r_[assembly.kind, made.kind].astype(np.uint8),
        nominal=np.r_[assembly.nominal, made.nominal],
        length_um=np.r_[assembly.length_um, made.length_um],
        settable=np.r_[assembly.settable, False],
        cell_of=np.r_[assembly.cell_of, FREE].astype(np.int32),
        port_start=np.r_[assembly.port_start, first + ports].astype(np.int32),
        mate=mate,
        externals=externals,
        inputs=tuple(name for name in assembly.inputs if name in externals),
        outputs=tuple(name for name in assembly.outputs if name in externals),
        names=ListedNames([*names.elements, part.name], names.cells),
        special=assembly.special | ({row: made} if made.reflection or made.measured else {}),
    )


def _put(
    assembly: Assembly, at: str, where: str, mate: np.ndarray, externals: dict[str, int], enter: int, leave: int
) -> None:
    """Link an arm of a new part between a port and what it was linked to."""
    port = _place(assembly, at, where)
    outside = _outside(externals, port)
    row = int(np.searchsorted(assembly.port_start, port, side="right")) - 1
    entering = port - assembly.port_start[row] < (assembly.port_start[row + 1] - assembly.port_start[row]) // 2
    near, far = (leave, enter) if entering else (enter, leave)
    other = int(mate[port])
    mate[port], mate[near] = near, port
    if other >= 0:
        mate[far], mate[other] = other, far
    if outside is not None:
        externals[outside] = far


def _terminate(assembly: Assembly, places: list[str], where: str, mate: np.ndarray, externals: dict[str, int]) -> None:
    if len(places) != 1:
        raise UnsoundFile(f"at is '{' '.join(places)}'", where=where, remedy="a terminator closes one port")
    port = _place(assembly, places[0], where)
    outside = _outside(externals, port)
    if mate[port] >= 0:
        raise UnsoundFile(
            f"port '{places[0]}' is linked",
            where=where,
            remedy="a terminator closes a free port; use a mirror to reflect within a link",
        )
    if outside is not None:
        del externals[outside]
    mate[port], mate[-1] = len(mate) - 1, port
