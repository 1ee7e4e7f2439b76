"""What moves the settings: actuators and channels joined from mesh.toml and its tables.

Public: join_actuation, LawGroup, law_groups, CHANNEL_NUMBERS, DRIVES, PARAM_NAMES.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from meshctl.errors import DuplicateName, Finding, MissingRow, OutOfRange, UnknownKey, UnsoundFile
from meshctl.laws import LAWS, law_row
from meshctl.laws.law import Law, check_params
from meshctl.mesh.description import MESH_TOML, Description
from meshctl.mesh.graph import FREE, Actuators, Channels, Net, frozen
from meshctl.mesh.tables import Table, unknown_name
from meshctl.optics.elements import COUPLER

CHANNEL_NUMBERS = (
    "bits",
    "min_v",
    "max_v",
    "min_ma",
    "max_ma",
    "offset_v",
    "gain",
    "limit_v",
    "limit_ma",
    "limit_mw",
    "ramp_v_per_s",
)
DRIVES = ("volts", "milliamps")
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


def _channels(
    description: Description,
    names: list[str],
    named: dict[int, str],
    table: Table | None,
) -> tuple[np.ndarray, Channels]:
    """The channel of every actuator and the channels: rows of channels.csv first, then as they appear."""
    grounds = list(description.ground)
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
    columns, ground, by_current = _plain_columns(description, n)
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
        drives = table.column("drives")[i]
        if drives is not None:
            if drives not in DRIVES:
                raise unknown_name("drive", drives, DRIVES, table.where(i))
            by_current[i] = drives == DRIVES[1]
        for low, high, unit in (("min_v", "max_v", "V"), ("min_ma", "max_ma", "mA")):
            if columns[high][i] <= columns[low][i]:
                raise OutOfRange(
                    f"{high} {columns[high][i]:g} {unit} is not above {low} {columns[low][i]:g} {unit}",
                    where=table.where(i),
                    remedy=f"raise {high}",
                )
        if columns["bits"][i] != int(columns["bits"][i]):
            raise OutOfRange(f"bits is {columns['bits'][i]:g}", where=table.where(i), remedy="write a whole number")
    channel = np.array([order[name] for name in wanted], np.int32)
    first_user = {int(k): a for a, k in reversed(list(enumerate(channel.tolist())))}
    given = {k: name for name, k in order.items() if name != names[first_user[k]]}
    channels = _made(description, columns, ground, by_current, given)
    return channel, channels


def _crosstalk(net: Net, names: list[str], actuators: Actuators, table: Table | None) -> Any:
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


def _from_places(description: Description, net: Net, actuators: Actuators) -> Any:
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


def _plain_columns(description: Description, n: int) -> tuple[dict[str, np.ndarray], np.ndarray, np.ndarray]:
    """The columns of n channels that are all as mesh.toml says, their grounds, and whether they drive current."""
    default = description.channel
    columns = {}
    for key in CHANNEL_NUMBERS:
        value = getattr(default, key)
        columns[key] = np.full(n, math.inf if value is None else float(value))
    row = list(description.ground).index(default.ground) if default.ground else FREE
    return columns, np.full(n, row, np.int32), np.full(n, default.drives == DRIVES[1])


def _made(
    description: Description,
    columns: dict[str, np.ndarray],
    ground: np.ndarray,
    by_current: np.ndarray,
    given_names: dict[int, str],
) -> Channels:
    arrays = {key: frozen(column) for key, column in columns.items()}
    arrays["bits"] = frozen(columns["bits"].astype(np.int32))
    ohm = np.array([part.resistance_ohm for part in description.ground.values()], float)
    return Channels(
        by_current=frozen(by_current),
        ground=frozen(ground),
        ground_ohm=frozen(ohm),
        given_names=given_names,
        ground_names=tuple(description.ground),
        **arrays,
    )


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
        actuators = replace(actuators, crosstalk=_from_places(description, net, actuators))
    needs_tables = any(LAWS[n].has_tables for n in np.unique(actuators.law).tolist())
    # names of all actuators are only made where a table speaks of them
    by_name = named or actuators.given_names or channel_rows or measured_rows or crosstalk_rows or needs_tables
    if not by_name:
        n = len(actuators)
        actuators = replace(actuators, channel=frozen(np.arange(n, dtype=np.int32)))
        _check_laws(actuators, net, places)
        return actuators, _made(description, *_plain_columns(description, n), {})
    names = actuators.names(net)
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise DuplicateName(
            f"two actuators are named '{twice}'", where="actuators.csv", remedy="rename the one in the file"
        )
    channel, channels = _channels(description, names, named, channel_rows)
    actuators = replace(
        actuators,
        channel=frozen(channel),
        tables=_measured(actuators, names, measured_rows),
        crosstalk=_crosstalk(net, names, actuators, crosstalk_rows),
    )
    _check_laws(actuators, net, places)
    return actuators, channels
