"""What moves the settings: actuators and channels joined from mesh.toml and its tables.

Public: join_actuation, LawGroup, law_groups, PARAM_NAMES.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from meshctl.errors import DuplicateName, MissingRow, OutOfRange, UnsoundFile
from meshctl.laws import LAWS, law_row
from meshctl.laws.law import Law, check_params
from meshctl.mesh.crosstalk import crosstalk_by_places, tabled_crosstalk
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.graph import Actuators, Channels, Net, frozen
from meshctl.mesh.source import join_channels, plain_channels
from meshctl.mesh.tables import Table, unknown_name
from meshctl.optics.elements import COUPLER

PARAM_NAMES = tuple(dict.fromkeys(param.name for law in LAWS for param in law.params))


@dataclass(frozen=True, eq=False)
class LawGroup:
    """The actuators that follow one law, and their parameters as the law takes them."""

    law: Law
    rows: np.ndarray  # i64, rows of the actuators
    p: dict[str, Any]


def law_groups(actuators: Actuators) -> list[LawGroup]:
    """Actuators sorted by law."""
    groups = []
    for number in np.unique(actuators.law).tolist():
        rows, law = np.flatnonzero(actuators.law == number), LAWS[number]
        p: dict[str, Any] = {param.name: actuators.params[param.name][rows] for param in law.params}
        if law.has_tables:
            p["tables"] = [actuators.tables[a] for a in rows.tolist()]
        groups.append(LawGroup(law, rows, p))
    return groups


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
                f"{value:g} is out of range",
                where=f"{where}.{key}'",
                remedy=f"allowed is {law.param(key).allowed()}",
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


def _actuators(description: Description, net: Net, table: Table | None) -> tuple[Actuators, dict[int, str], list[str]]:
    """Actuators without their channels, the channel names given by row, and where each row stands."""
    defaults = {kind: _default_law(description, kind) for kind in ("phase", "coupler")}
    rows = _read_actuators(net, table, defaults)
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


def _check_laws(actuators: Actuators, net: Net, places: list[str]) -> None:
    for group in law_groups(actuators):
        for breach in check_params(group.law, group.p):
            a = int(group.rows[breach.row])
            missing = math.isnan(breach.value)
            shown = "missing" if missing else f"{breach.value:g} {breach.param.unit}".rstrip()
            raise (MissingRow if missing else OutOfRange)(
                f"actuator '{actuators.names(net)[a]}': {breach.param.name} is {shown}",
                where=places[a] if a < len(places) else f"{MESH_TOML} key 'actuator'",
                remedy=f"allowed is {breach.allowed}",
            )
        if group.law.has_tables:
            for a in group.rows.tolist():
                group.law.check_rows(actuators.tables[a], where=f"tables.csv, actuator '{actuators.names(net)[a]}'")


def join_actuation(
    description: Description,
    net: Net,
    actuator_rows: Table | None,
    channel_rows: Table | None,
    measured_rows: Table | None,
    crosstalk_rows: Table | None,
) -> tuple[Actuators, Channels]:
    """Actuators and channels: the rows of the tables in their order, then defaults for the other settings.

    Raises
    ------
    UnknownKey, DuplicateName, MissingRow, OutOfRange, UnsoundFile
        With file and line or key, the value, what is allowed and what to do.
    """
    actuators, named, places = _actuators(description, net, actuator_rows)
    if description.crosstalk is not None:
        if crosstalk_rows is not None:
            raise DuplicateName(
                "crosstalk is given by [crosstalk] and by crosstalk.csv", where=MESH_TOML, remedy="keep one of them"
            )
        actuators = replace(actuators, crosstalk=crosstalk_by_places(description, net, actuators))
    needs_tables = any(LAWS[n].has_tables for n in np.unique(actuators.law).tolist())
    # names of all actuators are only made where a table speaks of them
    by_name = named or actuators.given_names or channel_rows or measured_rows or crosstalk_rows or needs_tables
    if not by_name:
        n = len(actuators)
        actuators = replace(actuators, channel=frozen(np.arange(n, dtype=np.int32)))
        _check_laws(actuators, net, places)
        return actuators, plain_channels(description, n)
    names = actuators.names(net)
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise DuplicateName(
            f"two actuators are named '{twice}'", where="actuators.csv", remedy="rename the one in the file"
        )
    channel, channels = join_channels(description, names, named, channel_rows)
    actuators = replace(
        actuators,
        channel=frozen(channel),
        tables=_measured(actuators, names, measured_rows),
        crosstalk=tabled_crosstalk(net, names, actuators, crosstalk_rows),
    )
    _check_laws(actuators, net, places)
    return actuators, channels
