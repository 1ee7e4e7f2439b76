"""Named states of a mesh folder: plans by name in its folder `states`, written one at a time.

Public: save_state, load_state, state_names, state_file, listed_states, renew_state, compare, StateRow, Difference,
STALE.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from meshctl.errors import Finding, MissingFile, StalePlan, UnsoundFile, WrongUsage
from meshctl.mesh.files import made_folder, write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.tables import unknown_name
from meshctl.plan.chip import Chip
from meshctl.plan.energy import energy
from meshctl.plan.placing import reach_of
from meshctl.plan.plan import Plan, check_fresh, plan_text, read_plan
from meshctl.units import TWO_PI

STATES = "states"
STALE = "stale"  # how the note of a stale state begins
_NAME = re.compile(r"[A-Za-z0-9_>-][A-Za-z0-9._>-]*")
_MOST = 100  # characters: file systems take 255 bytes with the ending and what is put before while writing
CROSS_POWER_SHOWS = 1e-3  # a change that a drawing or a power meter would show
PHASE_SHOWS_RAD = 1e-3


def _folder(mesh: Mesh) -> Path:
    if mesh.folder is None:
        raise WrongUsage(f"mesh '{mesh.name}' has no folder to keep states in", remedy="write it, then load it")
    return mesh.folder / STATES


def state_file(mesh: Mesh, name: str) -> Path:
    """Where a state is kept.

    Raises
    ------
    WrongUsage
        For a name that is no plain file name.
    """
    if not _NAME.fullmatch(name) or len(name) > _MOST:
        shown = name if len(name) <= 40 else f"{name[:37]}.."
        raise WrongUsage(
            f"'{shown}' is no name for a state",
            remedy=f"use letters, digits, . _ - and >, no . in front, {_MOST} characters at most",
        )
    path = _folder(mesh) / f"{name}.json"
    if path.is_dir():
        raise UnsoundFile("is a folder where a state must be", where=str(path), remedy="move it away")
    return path


def state_names(mesh: Mesh) -> list[str]:
    """Names of all states that the mesh folder keeps, sorted."""
    if mesh.folder is None or not (mesh.folder / STATES).is_dir():
        return []
    files = [path for path in (mesh.folder / STATES).glob("*.json") if not path.is_dir()]
    names = [path.name.removesuffix(".json") for path in files]
    return sorted(name for name in names if _NAME.fullmatch(name))


def save_state(mesh: Mesh, name: str, plan: Plan) -> Path:
    """Keep a plan by name; an older one of that name stays whole until the new one is there."""
    path = state_file(mesh, name)
    made_folder(path.parent)
    write_whole(path, plan_text(plan))
    return path


def load_state(mesh: Mesh, name: str, *, stale_ok: bool = False) -> tuple[Plan, list[str]]:
    """A state by name, and warnings where `stale_ok` let a stale one pass.

    Raises
    ------
    WrongUsage
        For a name that no state has.
    StalePlan, UnsoundFile, ..
    """
    path = state_file(mesh, name)
    if not path.is_file():
        known = state_names(mesh)
        finding = unknown_name("state", name, known, "")
        remedy = finding.remedy if known else "save one first: meshctl route .. --save NAME"
        raise MissingFile(finding.what, where=str(_folder(mesh)), remedy=remedy)
    plan = read_plan(path)
    return plan, check_fresh(mesh, plan, stale_ok=stale_ok, where=f"state '{name}'")


@dataclass(frozen=True)
class StateRow:
    """One state in the list."""

    name: str
    target: str  # the wish in words
    reason: str
    power_mw: float
    fresh: bool
    note: str  # why it cannot be used as it stands


def listed_states(mesh: Mesh) -> list[StateRow]:
    """All states of a mesh folder; those that cannot be read are listed with what is wrong."""
    rows = []
    for name in state_names(mesh):
        try:
            plan = read_plan(state_file(mesh, name))
        except Finding as finding:
            rows.append(StateRow(name, "", "", float("nan"), False, str(finding)))
            continue
        note = ""
        try:
            check_fresh(mesh, plan, where=f"state '{name}'")
        except StalePlan:
            now = f"made for physics {plan.mesh_hash[:12]}, now {mesh.hash[:12]}"
            note = f"{STALE}: {now}; solve again with --renew {name}"
        except Finding as finding:
            note = str(finding)
        target = str(plan.target.get("source", ""))
        rows.append(StateRow(name, target, plan.reason, float(plan.power_mw.sum()), not note, note))
    return rows


def renew_state(mesh: Mesh, name: str) -> Plan:
    """Solve the wish of a state again on the mesh as it is now, and keep the answer under the same name.

    What fails leaves the old state as it was. Of matrices the port phases that do not count, least power and the
    seed are kept.
    """
    path = state_file(mesh, name)
    old = read_plan(path) if path.is_file() else load_state(mesh, name)[0]
    if old.is_routes:
        from meshctl.plan.switching import asked_of, route

        try:
            plan = route(mesh, asked_of(old))
        except WrongUsage as finding:  # what the file asks, not what the user wrote
            raise UnsoundFile(finding.what, where=f"state '{name}'", remedy="route again and save it anew") from None
    else:
        from meshctl.plan.pipeline import Effort, solve
        from meshctl.solver.target import from_description

        effort, thrifty = Effort(seed=old.seed), old.saved_mw != 0.0
        plan = solve(mesh, from_description(old.target), least_power=thrifty, effort=effort)
    save_state(mesh, name, plan)
    return plan


@dataclass(frozen=True)
class CellChange:
    """A switch that stands otherwise in two states."""

    cell: str
    before: float  # cross power
    after: float


@dataclass(frozen=True)
class PhaseChange:
    """A phase that moves no switch and stands otherwise, whole turns apart."""

    element: str
    before_rad: float
    after_rad: float


@dataclass(frozen=True)
class ChannelChange:
    """A channel of the source that gives something else."""

    channel: str
    before_v: float
    after_v: float
    before_code: int
    after_code: int


@dataclass(frozen=True)
class Difference:
    """From one state to another."""

    cells: tuple[CellChange, ...]
    phases: tuple[PhaseChange, ...]
    channels: tuple[ChannelChange, ...]
    switch_nj: float  # that the source gives on the way; NaN where a law does not know
    back_nj: float  # on the way back
    hold_before_mw: float
    hold_after_mw: float


def compare(mesh: Mesh, before: Plan, after: Plan) -> Difference:
    """Which cells and channels change from one plan to another, by how much, and what that costs."""
    from meshctl.solver.switches import find_switches

    chip = Chip(mesh)
    switches = find_switches(mesh.net, mesh.as_built, reach_of(chip))

    def cross_power(settings: np.ndarray) -> np.ndarray:
        moved = np.bincount(switches.of, switches.weight * settings[switches.setting], minlength=len(switches))
        return switches.cross_share(switches.base_rad + moved).mean(1)

    crosses = [cross_power(plan.actual) for plan in (before, after)]
    cells = tuple(
        CellChange(switches.names[r], float(crosses[0][r]), float(crosses[1][r]))
        for r in np.flatnonzero(np.abs(crosses[1] - crosses[0]) > CROSS_POWER_SHOWS).tolist()
    )
    other = np.setdiff1d(np.arange(mesh.net.n_settings), switches.setting)
    turn = (after.actual - before.actual + np.pi) % TWO_PI - np.pi
    phases = tuple(
        PhaseChange(mesh.net.setting_names[s], float(before.actual[s]), float(after.actual[s]))
        for s in other[np.abs(turn[other]) > PHASE_SHOWS_RAD].tolist()
    )
    names = mesh.channel_names
    channels = tuple(
        ChannelChange(
            names[k], float(before.volts[k]), float(after.volts[k]), int(before.codes[k]), int(after.codes[k])
        )
        for k in np.flatnonzero(before.codes != after.codes).tolist()
    )
    there, back = energy(chip, after.codes, before.codes), energy(chip, before.codes, after.codes)
    return Difference(cells, phases, channels, there.switch_nj, back.switch_nj, back.hold_mw, there.hold_mw)
