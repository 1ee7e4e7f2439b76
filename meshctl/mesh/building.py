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

from meshctl.errors import DuplicateName, MissingRow, OutOfRange, UnknownKey, UnsoundFile
from meshctl.laws import LAWS, law_row
from meshctl.laws.law import Law, check_params
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.explicit import explicit_net, with_inserts
from meshctl.mesh.graph import FREE, Actuators, AsBuilt, Channels, Mesh, Net, frozen
from meshctl.mesh.lattices import CELL_FORMS, LATTICES, Assembly, assemble
from meshctl.mesh.quantities import QUANTITIES
from meshctl.mesh.spread import Spread
from meshctl.mesh.tables import Table, unknown_name
from meshctl.optics.elements import COUPLER, CROSSING

CHANNEL_NUMBERS = ("bits", "min_v", "max_v", "offset_v", "gain", "limit_v", "limit_ma", "limit_mw", "ramp_v_per_s")
CHANNEL_INF = ("limit_v", "limit_ma", "limit_mw", "ramp_v_per_s")
PARAM_NAMES = tuple(dict.fromkeys(param.name for law in LAWS for param in law.params))


@dataclass
class Tables:
    """The tables of a mesh folder; None where the file is not there."""

    elements: Table | None = None
    actuators: Table | None = None
    channels: Table | None = None
    tables: Table | None = None
    crosstalk: Table | None = None


def _assembled(description: Description) -> tuple[Assembly, np.ndarray]:
    lattice = description.lattice
    if lattice is None:
        assembly, setting_of = explicit_net(description)
    else:
        shape = LATTICES[lattice.shape]
        try:
            layout = shape(lattice.modes, lattice.spare) if lattice.modes else shape(spare=lattice.spare)
        except OutOfRange as finding:
            finding.where = f"{MESH_TOML} key 'lattice'"
            raise
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
        assembly, setting_of = with_inserts(assembly, setting_of, description.insert)
    return assembly, setting_of


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


def _default_law(description: Description, kind: str) -> tuple[Law | None, dict[str, float]]:
    """The law of mesh.toml's [actuator.KIND] and its parameters."""
    given = dict(description.actuator.get(kind, {}))  # type: ignore[call-overload]
    if not given:
        return None, {}
    where = f"{MESH_TOML} key 'actuator.{kind}"
    name = given.pop("law", None)
    if name is None:
        raise MissingRow("the key is missing", where=f"{where}.law'", remedy="name the law of these actuators")
    row = law_row(name) if isinstance(name, str) else None
    if row is None:
        raise unknown_name("law", str(name), [law.name for law in LAWS], f"{where}.law'")
    law = LAWS[row]
    if kind not in law.moves:
        raise UnsoundFile(
            f"law '{law.name}' moves a {' or a '.join(law.moves)}, not a {kind}",
            where=f"{where}.law'",
            remedy="choose another law",
        )
    for key, value in given.items():
        known = [param.name for param in law.params]
        if key not in known:
            raise unknown_name("key", key, known, f"{where}.{key}'")
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise UnsoundFile(
                f"the value is {value!r}", where=f"{where}.{key}'", remedy=f"write {law.param(key).allowed()}"
            )
        if not math.isfinite(value) or not law.param(key).holds(float(value)):
            raise OutOfRange(
                f"{value:g} is out of range", where=f"{where}.{key}'", remedy=f"allowed is {law.param(key).allowed()}"
            )
    return law, {k: float(v) for k, v in given.items()}


@dataclass
class _ActuatorRows:
    """Actuators while they are read; places say where a row came from, for messages."""

    setting: list[int]
    channel_name: list[str | None]
    law: list[int]
    dead: list[bool]
    given: list[dict[str, float]]
    names: dict[int, str]
    places: list[str]


def _read_actuators(net: Net, table: Table | None, defaults: dict[str, Any]) -> _ActuatorRows:
    rows = _ActuatorRows([], [], [], [], [], {}, [])
    if table is None:
        return rows
    elements = net.names.element_row
    words = {"actuator", "element", "channel", "law", "dead"}
    seen: dict[str, int] = {}
    for i, name in enumerate(table.column("actuator")):
        where = table.where(i)
        if name in seen:
            raise DuplicateName(f"actuator '{name}' stands twice", where=where, remedy="keep one row")
        seen[name] = i
        element = table.column("element")[i] or name
        e = elements.get(element)
        if e is None:
            raise unknown_name("element", element, elements, where)
        s = int(net.setting_of[e])
        if s < 0:
            raise UnsoundFile(
                f"element '{element}' has no setting to move", where=where, remedy="name a tunable element"
            )
        kind = "coupler" if net.kind[e] == COUPLER else "phase"
        word = table.column("law")[i]
        law, given = defaults[kind]
        if word is not None:
            number = law_row(word)
            if number is None:
                raise unknown_name("law", word, [known.name for known in LAWS], where)
            if law is None or LAWS[number].name != law.name:
                law, given = LAWS[number], {}
        if law is None:
            raise MissingRow(
                f"actuator '{name}' has no law", where=where, remedy=f"name one here or in [actuator.{kind}]"
            )
        if kind not in law.moves:
            raise UnsoundFile(
                f"law '{law.name}' moves a {' or a '.join(law.moves)}; '{element}' is a {kind}",
                where=where,
                remedy="choose another law",
            )
        given = dict(given)
        known = [param.name for param in law.params]
        for key in table.columns:
            value = None if key in words else table.column(key)[i]
            if value is None:
                continue
            if key not in known:
                raise unknown_name(f"parameter of law '{law.name}'", key, known, where)
            given[key] = value
        dead = table.column("dead")[i] or "0"
        if dead not in ("0", "1"):
            raise OutOfRange(f"dead is '{dead}'", where=where, remedy="write 0 or 1")
        number = law_row(law.name)
        assert number is not None
        if name != net.setting_names[s]:
            rows.names[len(rows.setting)] = name
        rows.setting.append(s)
        rows.channel_name.append(table.column("channel")[i])
        rows.law.append(number)
        rows.dead.append(dead == "1")
        rows.given.append(given)
        rows.places.append(where)
    return rows


def _actuators(
    description: Description, net: Net, tables: Tables
) -> tuple[Actuators, dict[int, str], list[str]]:
    """Actuators without their channels, the channel names given by row, and where each row stands."""
    defaults = {kind: _default_law(description, kind) for kind in ("phase", "coupler")}
    rows = _read_actuators(net, tables.actuators, defaults)
    moved = np.zeros(net.n_settings, bool)
    moved[rows.setting] = True
    rest = np.flatnonzero(~moved)
    n_given, n_all = len(rows.setting), len(rows.setting) + len(rest)
    setting = np.r_[np.array(rows.setting, np.int32), rest].astype(np.int32)
    law = np.zeros(n_all, np.uint8)
    law[:n_given] = rows.law
    is_angle = net.setting_is_angle[rest]
    params = {name: np.full(n_all, math.nan) for name in PARAM_NAMES}
    for kind, mine in (("phase", ~is_angle), ("coupler", is_angle)):
        if not mine.any():
            continue
        found, given = defaults[kind]
        if found is None:
            name = net.setting_names[int(rest[mine][0])]
            raise MissingRow(
                f"actuator '{name}' has no law",
                where=f"{MESH_TOML} key 'actuator.{kind}'",
                remedy=f"add [actuator.{kind}] with a law, or a row of actuators.csv for each",
            )
        number = law_row(found.name)
        assert number is not None
        at = n_given + np.flatnonzero(mine)
        law[at] = number
        for key, value in given.items():
            params[key][at] = value
    for a, given in enumerate(rows.given):
        for key, value in given.items():
            params[key][a] = value
    # a parameter left out takes its law's default, so that the arrays say what is in force
    for number in np.unique(law).tolist():
        for param in LAWS[number].params:
            if param.default is not None:
                column = params[param.name]
                column[(law == number) & np.isnan(column)] = param.default
    used = {p.name for number in np.unique(law).tolist() for p in LAWS[number].params}
    dead = np.r_[np.array(rows.dead, bool), np.zeros(len(rest), bool)]
    actuators = Actuators(
        frozen(setting),
        np.zeros(n_all, np.int32),
        frozen(law),
        {name: frozen(column) for name, column in params.items() if name in used},
        frozen(dead),
        {},
        None,
        rows.names,
    )
    channel_names = {a: name for a, name in enumerate(rows.channel_name) if name is not None}
    return actuators, channel_names, rows.places


def _measured(actuators: Actuators, names: list[str], table: Table | None) -> dict[int, np.ndarray]:
    points: dict[int, list[tuple[float, float, float]]] = {}
    if table is not None:
        row_of = {name: a for a, name in enumerate(names)}
        for i, name in enumerate(table.column("actuator")):
            if name not in row_of:
                raise unknown_name("actuator", name, names, table.where(i))
            sigma = table.column("sigma_rad")[i] or 0.0
            points.setdefault(row_of[name], []).append(
                (table.column("volts_v")[i], table.column("value_rad")[i], sigma)
            )
    needs = [a for a in range(len(names)) if LAWS[actuators.law[a]].has_tables]
    for a in needs:
        if a not in points:
            raise MissingRow(
                f"actuator '{names[a]}' follows law '{LAWS[actuators.law[a]].name}' but has no rows",
                where="tables.csv",
                remedy="measure it and add at least 4 rows, or give it another law",
            )
    return {a: frozen(np.array(rows, float)) for a, rows in sorted(points.items())}


def _law_rows(actuators: Actuators, number: int) -> tuple[np.ndarray, dict[str, Any]]:
    """The actuators of one law and their parameters as the law takes them."""
    rows = np.flatnonzero(actuators.law == number)
    law = LAWS[number]
    p: dict[str, Any] = {param.name: actuators.params[param.name][rows] for param in law.params}
    if law.has_tables:
        p["tables"] = [actuators.tables[a] for a in rows.tolist()]
    return rows, p


def _check_laws(actuators: Actuators, names: list[str], places: list[str]) -> None:
    from meshctl.laws.table import check_table

    for number in np.unique(actuators.law).tolist():
        rows, p = _law_rows(actuators, number)
        for breach in check_params(LAWS[number], p):
            a = int(rows[breach.row])
            kind = "" if a < len(places) else f"{MESH_TOML} key 'actuator'"
            missing = math.isnan(breach.value)
            raise (MissingRow if missing else OutOfRange)(
                f"actuator '{names[a]}': {breach.param.name} is "
                + ("missing" if missing else f"{breach.value:g} {breach.param.unit}".rstrip()),
                where=places[a] if a < len(places) else kind,
                remedy=f"allowed is {breach.allowed}",
            )
        if LAWS[number].has_tables:
            for a in rows.tolist():
                check_table(actuators.tables[a], where=f"tables.csv, actuator '{names[a]}'")


def _channels(
    description: Description, actuators: Actuators, names: list[str], named: dict[int, str], table: Table | None
) -> tuple[np.ndarray, Channels]:
    """The channel of every actuator and the channels: rows of channels.csv first, then as they appear."""
    grounds = list(description.ground)
    default = description.channel
    order: dict[str, int] = {}
    if table is not None:
        for i, name in enumerate(table.column("channel")):
            if name in order:
                raise DuplicateName(f"channel '{name}' stands twice", where=table.where(i), remedy="keep one row")
            order[name] = i
    wanted = [named.get(a, names[a]) for a in range(len(names))]
    used = set(wanted)
    for name, i in order.items():
        if name not in used:
            raise UnknownKey(
                f"no actuator sits on channel '{name}'",
                where=table.where(i) if table else "",
                remedy="correct the name, or put an actuator on it in actuators.csv",
            )
    for name in wanted:
        order.setdefault(name, len(order))
    n = len(order)
    columns: dict[str, np.ndarray] = {}
    for key in CHANNEL_NUMBERS:
        value = getattr(default, key)
        columns[key] = np.full(n, math.inf if value is None else float(value))
    ground = np.full(n, grounds.index(default.ground) if default.ground else FREE, np.int32)
    for i in range(len(table) if table is not None else 0):
        assert table is not None
        for key in CHANNEL_NUMBERS:
            value = table.column(key)[i]
            if value is not None:
                columns[key][i] = value
        name = table.column("ground")[i]
        if name is not None:
            if name not in grounds:
                raise unknown_name("ground", name, grounds, table.where(i))
            ground[i] = grounds.index(name)
        if columns["max_v"][i] <= columns["min_v"][i]:
            raise OutOfRange(
                f"max_v {columns['max_v'][i]:g} V is not above min_v {columns['min_v'][i]:g} V",
                where=table.where(i),
                remedy="raise max_v",
            )
        if columns["bits"][i] != int(columns["bits"][i]):
            raise OutOfRange(
                f"bits is {columns['bits'][i]:g}", where=table.where(i), remedy="write a whole number"
            )
    channel = np.array([order[name] for name in wanted], np.int32)
    first_user = {int(k): a for a, k in reversed(list(enumerate(channel.tolist())))}
    given = {k: name for name, k in order.items() if name != names[first_user[k]]}
    channels = Channels(
        frozen(columns["bits"].astype(np.int32)),
        *(frozen(columns[key]) for key in CHANNEL_NUMBERS[1:]),
        ground=frozen(ground),
        ground_ohm=frozen(np.array([g.resistance_ohm for g in description.ground.values()], float)),
        given_names=given,
        ground_names=tuple(grounds),
    )
    return channel, channels


def _crosstalk(net: Net, actuators: Actuators, names: list[str], table: Table | None) -> Any:
    if table is None or not len(table):
        return None
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


def _digest(net: Net, as_built: AsBuilt, actuators: Actuators, channels: Channels, rest: str) -> str:
    """sha256 of everything that the forward path reads; names, notes, states and spread do not count."""
    digest = hashlib.sha256(b"meshctl 1")

    def add(label: str, value: Any) -> None:
        array = np.ascontiguousarray(value)
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
    for label in (*CHANNEL_NUMBERS, "ground", "ground_ohm"):
        add(label, getattr(channels, label))
    digest.update(rest.encode())
    return digest.hexdigest()


def build_mesh(description: Description, tables: Tables, text: str, folder: Path | None = None) -> Mesh:
    """Join mesh.toml and its tables to a Mesh.

    Raises
    ------
    UnsoundFile or a finding under it, with file, line or key, value, what is allowed and what to do.
    """
    from dataclasses import replace

    assembly, setting_of = _assembled(description)
    net = _net(description, assembly, setting_of)
    as_built = _as_built(description, net, tables.elements)
    actuators, named, places = _actuators(description, net, tables)
    # names of all actuators are only made where a table speaks of them
    plain = not (named or actuators.given_names or tables.tables or tables.channels or tables.crosstalk)
    needs_tables = any(LAWS[n].has_tables for n in np.unique(actuators.law).tolist())
    if plain and not needs_tables:
        n = len(actuators)
        names: list[str] = []
        channel, channels = np.arange(n, dtype=np.int32), _plain_channels(description, n)
    else:
        names = actuators.names(net)
        if len(set(names)) < len(names):
            twice = next(name for name in names if names.count(name) > 1)
            raise DuplicateName(
                f"two actuators are named '{twice}'", where="actuators.csv", remedy="rename the one in the file"
            )
        channel, channels = _channels(description, actuators, names, named, tables.channels)
    actuators = replace(
        actuators,
        channel=frozen(channel),
        tables=_measured(actuators, names, tables.tables) if tables.tables or needs_tables else {},
        crosstalk=_crosstalk(net, actuators, names, tables.crosstalk),
    )
    _check_laws(actuators, _LazyNames(actuators, net), places)  # type: ignore[arg-type]
    spread = Spread(**description.spread.model_dump())
    rest = description.rest.state
    return Mesh(
        description.name,
        net,
        as_built,
        actuators,
        channels,
        spread,
        _digest(net, as_built, actuators, channels, rest),
        description.lattice.shape if description.lattice else "",
        rest,
        description.budget.loss_db if description.budget else math.nan,
        description.note,
        text,
        folder,
    )


class _LazyNames:
    """Actuator names made only if a message needs one."""

    def __init__(self, actuators: Actuators, net: Net) -> None:
        self.actuators, self.net = actuators, net

    def __getitem__(self, row: int) -> str:
        return self.actuators.names(self.net)[row]


def _plain_channels(description: Description, n: int) -> Channels:
    """One channel per actuator, all alike."""
    default = description.channel
    columns = [
        np.full(n, math.inf if getattr(default, key) is None else float(getattr(default, key)))
        for key in CHANNEL_NUMBERS
    ]
    grounds = list(description.ground)
    return Channels(
        frozen(columns[0].astype(np.int32)),
        *(frozen(column) for column in columns[1:]),
        ground=frozen(np.full(n, grounds.index(default.ground) if default.ground else FREE, np.int32)),
        ground_ohm=frozen(np.array([g.resistance_ohm for g in description.ground.values()], float)),
        given_names={},
        ground_names=tuple(grounds),
    )


ELEMENT_HEAD = ("element", "error_rad", "loss_db", "stuck_rad", "sigma_rad")
ACTUATOR_WORDS = ("actuator", "element", "channel", "law", "dead")
CHANNEL_HEAD = ("channel", *CHANNEL_NUMBERS, "ground")
TABLE_HEAD = ("actuator", "volts_v", "value_rad", "sigma_rad")
CROSSTALK_HEAD = ("from", "to", "coefficient")
assert all(name in QUANTITIES for name in (*ELEMENT_HEAD[1:], *CHANNEL_NUMBERS, *TABLE_HEAD[1:]))
