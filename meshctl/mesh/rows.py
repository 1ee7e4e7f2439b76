"""A mesh as the rows of its tables: only what differs from mesh.toml's defaults is written.

Public: mesh_tables, ELEMENT_HEAD, ACTUATOR_WORDS, CHANNEL_HEAD, TABLE_HEAD, CROSSTALK_HEAD.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from meshctl.errors import UnsoundFile
from meshctl.laws import LAWS
from meshctl.mesh.actuation import PARAM_NAMES
from meshctl.mesh.building import Tables, build_mesh
from meshctl.mesh.description import parse_description
from meshctl.mesh.graph import Mesh
from meshctl.mesh.source import CHANNEL_NUMBERS, DRIVES
from meshctl.mesh.tables import table_text

ELEMENT_HEAD = ("element", "error_rad", "loss_db", "stuck_rad", "sigma_rad")
ACTUATOR_WORDS = ("actuator", "element", "channel", "law", "dead")
CHANNEL_HEAD = ("channel", *CHANNEL_NUMBERS, "ground", "drives")
TABLE_HEAD = ("actuator", "volts_v", "value_rad", "sigma_rad")
CROSSTALK_HEAD = ("from", "to", "coefficient")


def mesh_tables(mesh: Mesh) -> dict[str, str]:
    """All tables of a mesh as CSV text, rows only where they differ from mesh.toml's defaults."""
    plain = build_mesh(parse_description(mesh.text), Tables(), mesh.text, mesh.folder) if _has_defaults(mesh) else None
    return {
        name: text
        for name, text in (
            ("elements", _elements_text(mesh, plain)),
            ("actuators", _actuators_text(mesh, plain)),
            ("channels", _channels_text(mesh, plain)),
            ("tables", _measured_text(mesh)),
            ("crosstalk", _crosstalk_text(mesh)),
        )
        if text
    }


def _has_defaults(mesh: Mesh) -> bool:
    """True where mesh.toml alone makes a mesh, so that tables need hold only what differs."""
    try:
        build_mesh(parse_description(mesh.text), Tables(), mesh.text, mesh.folder)
    except UnsoundFile:
        return False
    return True


def _same(a: float, b: float) -> bool:
    return a == b or (math.isnan(a) and math.isnan(b))


def _elements_text(mesh: Mesh, plain: Mesh | None) -> str:
    built, net = mesh.as_built, mesh.net
    base = (plain or mesh).as_built.loss_db
    stuck = np.full(net.n_elements, math.nan)
    stuck[net.first_element] = built.stuck_rad
    loss_differs = built.loss_db != base if plain else np.ones(net.n_elements, bool)
    rows = np.flatnonzero((built.error_rad != 0) | loss_differs | ~np.isnan(stuck) | (built.sigma_rad != 0))
    names = net.names.elements
    lines = [
        (
            names[e],
            built.error_rad[e] if built.error_rad[e] else None,
            built.loss_db[e] if loss_differs[e] else None,
            stuck[e],
            built.sigma_rad[e] if built.sigma_rad[e] else None,
        )
        for e in rows.tolist()
    ]
    return table_text(ELEMENT_HEAD, lines) if lines else ""


def _actuators_text(mesh: Mesh, plain: Mesh | None) -> str:
    actuators, net = mesh.actuators, mesh.net
    names, channels, settings = mesh.actuator_names, mesh.channel_names, net.setting_names
    heads = [h for h in PARAM_NAMES if h in actuators.params]
    same_rows = plain is not None and np.array_equal(plain.actuators.setting, actuators.setting)
    lines: list[tuple[Any, ...]] = []
    needed = 0  # rows come first when read back: all up to the last that differs keep their order
    for a, name in enumerate(names):
        values = [float(actuators.params[h][a]) for h in heads]
        channel = channels[actuators.channel[a]]
        line = (
            name,
            settings[actuators.setting[a]] if settings[actuators.setting[a]] != name else None,
            channel if channel != name else None,
            LAWS[actuators.law[a]].name,
            1 if actuators.dead[a] else None,
            *(None if math.isinf(v) else v for v in values),
        )
        lines.append(line)
        if same_rows:
            assert plain is not None
            was = plain.actuators
            default = [float(was.params[h][a]) if h in was.params else math.nan for h in heads]
            unchanged = (
                line[1] is None
                and line[2] is None
                and line[4] is None
                and was.law[a] == actuators.law[a]
                and all(_same(v, d) for v, d in zip(values, default, strict=True))
            )
            if unchanged:
                continue
        needed = len(lines)
    return table_text((*ACTUATOR_WORDS, *heads), lines[:needed]) if needed else ""


def _channels_text(mesh: Mesh, plain: Mesh | None) -> str:
    channels, names = mesh.channels, mesh.channel_names
    heads = CHANNEL_NUMBERS
    lines: list[tuple[Any, ...]] = []
    default = parse_description(mesh.text).channel
    # channels without a row are read back as the actuators come to them
    _, met = np.unique(mesh.actuators.channel, return_index=True)
    needed = int(np.flatnonzero(np.diff(met) < 0).max(initial=-1)) + 1
    for k, name in enumerate(names):
        values = [float(getattr(channels, h)[k]) for h in heads]
        usual = [math.inf if getattr(default, h) is None else float(getattr(default, h)) for h in heads]
        ground = channels.ground_names[channels.ground[k]] if channels.ground[k] >= 0 else None
        shown: list[Any] = [None if math.isinf(v) else v for v in values]
        shown[0] = int(values[0])
        drives = DRIVES[int(channels.by_current[k])]
        lines.append((name, *shown, ground, drives))
        if values != usual or ground != default.ground or drives != default.drives or plain is None:
            needed = max(needed, len(lines))
    return table_text(CHANNEL_HEAD, lines[:needed]) if needed else ""


def _measured_text(mesh: Mesh) -> str:
    names = mesh.actuator_names
    lines = [(names[a], *row) for a, table in mesh.actuators.tables.items() for row in table.tolist()]
    return table_text(TABLE_HEAD, lines) if lines else ""


def _crosstalk_text(mesh: Mesh) -> str:
    matrix = mesh.actuators.crosstalk
    if matrix is None or parse_description(mesh.text).crosstalk is not None:
        return ""  # none, or made from places again when it is read
    coo, names, settings = matrix.tocoo(), mesh.actuator_names, mesh.net.setting_names
    lines = [
        (names[a], settings[s], value)
        for s, a, value in zip(coo.row.tolist(), coo.col.tolist(), coo.data.tolist(), strict=True)
    ]
    return table_text(CROSSTALK_HEAD, lines)
