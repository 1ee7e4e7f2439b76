"""One piece of work that can be taken back: settings, faults assumed, and the input in view, with all derived values.

Nothing here draws; screens ask `Work` for every number. What can be done and taken back is in `work_commands`.
Public: Work, Drive, and from its neighbour State, Turn, Assume, Enter, Take, TOPICS.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import Finding, OutOfRange, WrongUsage
from meshctl.mesh.glow import glow
from meshctl.mesh.graph import Mesh, frozen
from meshctl.mesh.response import Response
from meshctl.picture_light import light
from meshctl.picture_states import Sites, faults_of, sites_of
from meshctl.plan.chip import Chip
from meshctl.plan.pipeline import Effort, headroom_v
from meshctl.plan.pipeline import solve as solve_matrix
from meshctl.plan.placing import place, reach_of
from meshctl.plan.plan import Plan
from meshctl.plan.spectrum import Spectrum, spectrum
from meshctl.plan.states import Difference
from meshctl.plan.wanted import Wanted
from meshctl.session import Session
from meshctl.solver.switches import Switches, find_switches, settings_for
from meshctl.units import db_array
from meshctl.work_commands import TOPICS, Assume, Command, Enter, State, Take, Turn

ANGLE_MOST_RAD = 100.0  # a setting beyond is a slip of the finger


@dataclass(frozen=True, eq=False)
class Drive:
    """What the source gives for the state in hand."""

    codes: np.ndarray  # i64[K]
    volts: np.ndarray  # f64[K]
    headroom_v: np.ndarray  # f64[K]
    power_mw: np.ndarray  # f64[A]
    actual: np.ndarray  # f64[S]
    held: tuple[int, ...]  # actuators held at a limit


class Work:
    """A session with undo.

    Parameters
    ----------
    session : Session; a plan that it has in hand is taken
    """

    def __init__(self, session: Session) -> None:
        self.session = session
        rest = np.array(reach_of(Chip(session.mesh)).idle)
        self.state = State(frozen(rest), None, None)
        if session.plan is not None:
            self.state = replace(self.state, plan=session.plan, wanted=session.plan.settings, codes=session.plan.codes)
        self.undone: list[Command] = []
        self.done: list[Command] = []
        self._listeners: list[Callable[[frozenset[str]], None]] = []
        self._derived: dict[str, Any] = {}

    # ---- commands
    def subscribe(self, listener: Callable[[frozenset[str]], None]) -> None:
        """Call `listener` with the topics after each command."""
        self._listeners.append(listener)

    def apply(self, command: Command) -> None:
        """Do a command; what was undone before can no longer be redone."""
        self.undone.clear()
        self.done.append(self._do(command))

    def undo(self) -> bool:
        """Take the last command back; False where there is none."""
        return self._step(self.done, self.undone)

    def redo(self) -> bool:
        """Do again what was taken back last; False where there is nothing."""
        return self._step(self.undone, self.done)

    def _step(self, source: list[Command], onto: list[Command]) -> bool:
        if not source:
            return False
        onto.append(self._do(source.pop()))
        return True

    def _do(self, command: Command) -> Command:
        self.state, inverse, topics = command.do(self.state)
        self._forget(topics)
        for listener in self._listeners:
            listener(topics)
        return inverse

    # ---- derived values, each until a topic that it depends on is touched
    def _forget(self, topics: frozenset[str]) -> None:
        for name, depends in _DEPENDS.items():
            if topics & depends:
                self._derived.pop(name, None)

    def _once(self, name: str, make: Callable[[], Any]) -> Any:
        if name not in self._derived:
            self._derived[name] = make()
        return self._derived[name]

    @property
    def mesh(self) -> Mesh:
        """The mesh with the faults that are assumed; its hash is then another."""
        mesh: Mesh = self._once("mesh", self._faulty)
        return mesh

    def _faulty(self) -> Mesh:
        mesh, faults = self.session.mesh, self.state.faults
        if not faults:
            return mesh
        stuck, dead = mesh.as_built.stuck_rad.copy(), mesh.actuators.dead.copy()
        for setting, value in faults:
            if math.isnan(value):
                dead[mesh.actuators.setting == setting] = True
            else:
                stuck[setting] = value
        return replace(
            mesh,
            as_built=replace(mesh.as_built, stuck_rad=frozen(stuck)),
            actuators=replace(mesh.actuators, dead=frozen(dead)),
            hash=hashlib.sha256(f"{mesh.hash} {faults}".encode()).hexdigest(),
        )

    @property
    def chip(self) -> Chip:
        """The mesh with its electronics."""
        chip: Chip = self._once("chip", lambda: Chip(self.mesh))
        return chip

    @property
    def switches(self) -> Switches:
        """What can be set to bar and cross."""
        found: Switches = self._once(
            "switches", lambda: find_switches(self.mesh.net, self.mesh.as_built, reach_of(self.chip))
        )
        return found

    @property
    def drive(self) -> Drive | Finding:
        """Codes and what they give, or why there are none."""
        drive: Drive | Finding = self._once("drive", self._placed)
        return drive

    def _placed(self) -> Drive | Finding:
        chip, codes = self.chip, self.state.codes
        held: tuple[int, ...] = ()
        if codes is None:
            try:
                placed = place(chip, self.state.wanted, best_effort=True)
            except Finding as finding:
                return finding
            codes, held = placed.codes, placed.held
        levels = chip.levels(codes)
        volts = chip.volts(levels)
        return Drive(codes, volts, headroom_v(chip, volts), chip.power_mw(levels), chip.actual(codes), held)

    @property
    def response(self) -> Response:
        """The response of the die at the codes in hand."""
        drive = self.drive
        found: Response = self._once(
            "response",
            lambda: self.chip.response if isinstance(drive, Finding) else self.chip.response_at(drive.codes),
        )
        return found

    @property
    def actual(self) -> np.ndarray:
        """Settings in force [S]: as the codes give them, or as wanted where there are none."""
        drive = self.drive
        if isinstance(drive, Finding):
            return self.mesh.as_built.in_force(self.state.wanted)
        return drive.actual

    @property
    def matrix(self) -> np.ndarray:
        """The field matrix [out, in] at the centre wavelength."""
        matrix: np.ndarray = self._once("matrix", lambda: self.response.matrix(self.actual))
        return matrix

    @property
    def target(self) -> np.ndarray | None:
        """The matrix that the plan in hand was solved for; None where it asks for none."""
        plan = self.state.plan
        if plan is None or not plan.has_matrix:
            return None
        target: np.ndarray | None = self._once("target", lambda: _wished(plan))
        return target

    @property
    def measures(self) -> dict[str, float]:
        """How near the state in hand comes to the wish of the plan in hand; empty without one."""
        plan = self.state.plan
        if plan is None or plan.is_routes:
            return {}
        found: dict[str, float] = self._once("measures", lambda: self._measured(plan))
        return found

    def _measured(self, plan: Plan) -> dict[str, float]:
        wanted = Wanted.from_description(plan.target)
        waves = wanted.wavelengths_nm
        at = self.matrix if waves is None else self.response.matrix(self.actual, waves)
        return {k: float(v) for k, v in wanted.measured(at).items() if not math.isnan(v)}

    @property
    def sites(self) -> Sites:
        """All places where two lanes meet, with their cross power now."""
        sites: Sites = self._once("sites", lambda: sites_of(self.mesh, self.actual))
        return sites

    @property
    def loops(self) -> bool:
        """True where light may run in rings."""
        return self.chip.response.loops

    @property
    def lit(self) -> np.ndarray:
        """Light of the chosen input: powers at blocks (B, 4), or with loops at ports (P,)."""
        lit: np.ndarray = self._once("lit", self._follow)
        return lit

    def _follow(self) -> np.ndarray:
        if self.loops:
            return glow(self.response, self.actual, self.state.input_row)
        return light(replace(self.mesh, as_built=self.response.as_built), self.actual, self.input_name)

    @property
    def input_name(self) -> str:
        """Name of the chosen input."""
        return self.session.mesh.net.inputs[self.state.input_row]

    def strongest_output(self) -> int:
        """Position of the output that most of the chosen input's light comes out of."""
        return int(np.argmax(np.abs(self.matrix[:, self.state.input_row])))

    # ---- changing
    def settings_of_cell(self, cell: int) -> list[int]:
        """Settings that move a cell."""
        net = self.session.mesh.net
        rows: list[int] = np.flatnonzero(net.cell_of[net.first_element] == cell).tolist()
        return rows

    def cross_power(self, cell: int) -> float:
        """Cross power of a cell now, NaN where it has none."""
        at = np.flatnonzero(self.sites.cell == cell)
        return float(self.sites.cross_power[at[0]]) if len(at) else math.nan

    def set_cell(self, cell: int, share: float) -> None:
        """Put a cell to a cross power between 0 (bar) and 1 (cross), as near as it reaches.

        Raises
        ------
        WrongUsage, OutOfRange
        """
        name = self.session.mesh.net.names.cells[cell]
        if not 0.0 <= share <= 1.0:
            raise OutOfRange(
                f"cross power {share:g} of cell '{name}' is not from 0 to 1", remedy="give 0 for bar, 1 for cross"
            )
        switches = self.switches
        mine = np.flatnonzero(switches.cell == cell)
        if not len(mine):
            raise WrongUsage(f"cell '{name}' has nothing that switches", remedy="choose another cell")
        asked = np.full(len(switches), np.nan)
        asked[mine] = share
        rows = np.unique(switches.setting[np.isin(switches.of, mine)])
        values = settings_for(switches, asked)[rows]
        self.apply(Turn(tuple(rows.tolist()), tuple(values.tolist())))

    def toggle_cell(self, cell: int) -> None:
        """Bar becomes cross; all else becomes bar."""
        self.set_cell(cell, 1.0 if self.cross_power(cell) < 0.5 else 0.0)

    def set_setting(self, setting: int, value_rad: float) -> None:
        """Put one setting to a value.

        Raises
        ------
        OutOfRange
        """
        if not abs(value_rad) <= ANGLE_MOST_RAD:
            name = self.session.mesh.net.setting_names[setting]
            raise OutOfRange(
                f"'{name}' at {value_rad:g} rad is beyond {ANGLE_MOST_RAD:g} rad", remedy="take off whole turns"
            )
        self.apply(Turn((setting,), (float(value_rad),)))

    def assume(self, setting: int, value_rad: float | None) -> None:
        """A setting stuck at a value, dead (NaN), or as the mesh has it (None)."""
        kept = tuple(f for f in self.state.faults if f[0] != setting)
        self.apply(Assume(kept if value_rad is None else tuple(sorted([*kept, (setting, float(value_rad))]))))

    def break_cell(self, cell: int) -> bool:
        """Assume the actuators that switch a cell dead, or no longer; True where they are now dead."""
        switches = self.switches
        rows = np.unique(switches.setting[np.isin(switches.of, np.flatnonzero(switches.cell == cell))]).tolist()
        rows = rows or self.settings_of_cell(cell)
        if not rows:
            name = self.session.mesh.net.names.cells[cell]
            raise WrongUsage(f"cell '{name}' has no actuator to break", remedy="choose another cell")
        kept = tuple(f for f in self.state.faults if f[0] not in rows)
        broken = kept == self.state.faults
        self.apply(Assume(tuple(sorted([*kept, *((s, math.nan) for s in rows)])) if broken else kept))
        return broken

    def mend(self) -> None:
        """Assume no faults any more."""
        if self.state.faults:
            self.apply(Assume(()))

    def choose_input(self, row: int) -> None:
        """Show the light of an input; rows beyond the last begin again."""
        row %= len(self.session.mesh.net.inputs)
        if row != self.state.input_row:
            self.apply(Enter(row))

    # ---- plans
    def solve(self, words: str, effort: Effort) -> Plan:
        """Volts and codes for a target on the mesh with its assumed faults; changes nothing, so any thread may.

        Raises
        ------
        Finding
        """
        return solve_matrix(self.mesh, self.session.target(words), best_effort=True, effort=effort)

    def explain(self, effort: Effort) -> Plan:
        """The plan in hand solved again with the account of what keeps it from being closer.

        Raises
        ------
        Finding
        """
        from meshctl.solver.target import from_description

        plan = self.state.plan
        if plan is None or plan.is_routes:
            raise WrongUsage("no plan for a matrix is in hand", remedy="solve or open one first")
        wish = from_description(plan.target)
        return solve_matrix(self.mesh, wish, best_effort=True, effort=effort, explain=True)

    def route(self, words: str, seconds: float = 10.0) -> Plan:
        """Volts and codes for routes; changes nothing, so any thread may.

        Raises
        ------
        Finding
        """
        from meshctl.plan.switching import RouteTarget, route

        return route(self.mesh, RouteTarget(tuple(words.split()), seconds=seconds))

    def take(self, plan: Plan) -> None:
        """Take a plan in hand."""
        self.apply(Take(plan, plan.settings, plan.codes))

    def open(self, path: str) -> None:
        """Take a plan file, or a state by name, in hand.

        Raises
        ------
        Finding
        """
        self.take(self.session.open_plan(path))

    def open_state(self, name: str) -> None:
        """Take a named state in hand.

        Raises
        ------
        Finding
        """
        self.take(self.session.open_state(name))

    def save_plan(self, path: str | Path) -> None:
        """Write the plan in hand.

        Raises
        ------
        WrongUsage
            Where what is in hand is not what the plan says.
        """
        self.session.plan = self._to_save()
        self.session.write_plan(path)

    def save_state(self, name: str) -> Path:
        """Keep the plan in hand by name.

        Raises
        ------
        WrongUsage
        """
        self.session.plan = self._to_save()
        return self.session.save_state(name)

    def _to_save(self) -> Plan:
        plan = self.state.plan
        if plan is None:
            raise WrongUsage("no plan is in hand", remedy="solve, route or open one first")
        if self.state.codes is None:
            raise WrongUsage("cells were set by hand since the plan", remedy="undo, or solve again, then save")
        if plan.mesh_hash != self.session.mesh.hash:
            raise WrongUsage("the plan was made with assumed faults", remedy="mend them and solve again, then save")
        return plan

    def difference(self, name: str) -> Difference:
        """What changes from the plan in hand to a state.

        Raises
        ------
        Finding
        """
        session = self.session
        held = session.plan
        try:
            return session.difference(self._to_save(), session.open_state(name))
        finally:
            session.plan = held

    def spectrum_task(self, wavelengths_nm: np.ndarray, pair: tuple[str, str]) -> Callable[[], Spectrum]:
        """What will find the field of a port pair over wavelength as the codes in hand are now, on any thread.

        Raises
        ------
        Finding
            Where there are no codes.
        """
        drive, mesh = self.drive, self.mesh
        if isinstance(drive, Finding):
            raise drive
        return lambda: spectrum(Chip(mesh), drive.codes, wavelengths_nm, [pair])

    # ---- tables
    def table(self, panel: str) -> tuple[np.ndarray | None, np.ndarray]:
        """Values and levels in dB of a panel, [out, in]: predicted and target in dB, their difference in percent.

        Values are None where the wish has no matrix.
        """
        power = np.abs(self.matrix) ** 2
        if panel == "predicted":
            return db_array(power), db_array(power)
        target = self.target
        if target is None:
            return None, np.empty((0, 0))
        wished = np.abs(target) ** 2
        if panel == "target":
            return db_array(wished), db_array(wished)
        off = power - wished
        return 100.0 * off, db_array(np.abs(off))

    def actuator_columns(self, placed: bool = True) -> list[np.ndarray] | str:
        """Name, wanted and given in rad, volts, code, room in V, mW and status of every actuator, f64[A] each.

        Where the settings have no drive: why, in words; with `placed` False NaN for what is not known.
        """
        mesh, drive = self.mesh, self.drive
        actuators, n = mesh.actuators, len(mesh.actuators)
        setting, channel = actuators.setting, actuators.channel
        stuck = ~np.isnan(mesh.as_built.stuck_rad[setting])
        names, wanted = np.array(mesh.actuator_names, dtype=str), self.state.wanted[setting]
        held = np.zeros(n, bool)
        if isinstance(drive, Finding):
            if placed:
                return str(drive)
            unknown = np.full(n, np.nan)
            numbers = [unknown, unknown, np.zeros(n, np.int64), unknown, unknown]
        else:
            held[list(drive.held)] = True
            given = (drive.actual[setting], drive.volts[channel], drive.codes[channel], drive.headroom_v[channel])
            numbers = [*given, drive.power_mw]
        status = np.select([actuators.dead, stuck, held], ["dead", "stuck", "at limit"], "")
        return [names, wanted, *numbers, status]

    # ---- words
    def faulty_settings(self) -> np.ndarray:
        """Settings that are stuck or dead, of the mesh or assumed, bool[S]."""
        return faults_of(self.mesh)


def _wished(plan: Plan) -> np.ndarray | None:
    from meshctl.solver.target import from_description

    return from_description(plan.target).matrix


_SETTINGS, _FAULTS = frozenset({"settings", "plan", "faults"}), frozenset({"faults"})
_DEPENDS = {
    "mesh": _FAULTS,
    "chip": _FAULTS,
    "switches": _FAULTS,
    "drive": _SETTINGS,
    "response": _SETTINGS,
    "matrix": _SETTINGS,
    "target": frozenset({"plan"}),
    "measures": _SETTINGS,
    "sites": _SETTINGS,
    "lit": _SETTINGS | {"input"},
}

__all__ = ["TOPICS", "Assume", "Drive", "Enter", "State", "Take", "Turn", "Work"]
