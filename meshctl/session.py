"""One piece of work: a mesh and a plan for it. Every command, and every key of a screen, ends in one call here.

Public: Session, new_mesh, demo_mesh_folder.
"""

from __future__ import annotations

import csv
import io
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.errors import MissingFile, OutOfReach, WrongUsage
from meshctl.mesh.files import new_folder, write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.inventory import Inventory, inventory
from meshctl.mesh.lightorder import HEAD, LightRow, light_order
from meshctl.mesh.meshfile import MESH_TOML, die_tables, lattice, load, write
from meshctl.mesh.tables import unknown_name
from meshctl.optics.features import Feature
from meshctl.plan.chip import Chip
from meshctl.plan.energy import Energy, energy
from meshctl.plan.pipeline import Effort, Prediction, predict, solve
from meshctl.plan.placing import require_sound_crosstalk
from meshctl.plan.plan import Plan, check_fresh, plan_text, read_plan
from meshctl.plan.spectrum import Spectrum, features, spectrum
from meshctl.plan.states import (
    Difference,
    StateRow,
    compare,
    listed_states,
    load_state,
    renew_state,
    save_state,
    state_file,
    state_names,
)
from meshctl.solver.target import Target, read_target
from meshctl.units import db_array

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.plan.signals import Signal
    from meshctl.plan.switching import RouteTarget
    from meshctl.tolerances.whole import Ears, Question, Tolerance

DEMO_MESH = "plover8"
SPECTRUM_HEAD = (
    "wavelength_nm",
    "frequency_thz",
    "input",
    "output",
    "amplitude",
    "power",
    "power_db",
    "phase_rad",
    "group_delay_ps",
)


class Session:
    """A mesh, the plan in hand, and the remarks made on the way.

    Parameters
    ----------
    folder : path of a mesh folder
    """

    def __init__(self, folder: str | Path) -> None:
        self.mesh: Mesh = load(folder)
        self.plan: Plan | None = None
        self.signals: list[Signal] = []  # of the last prediction, for plans that ask for routes
        self.remarks: list[str] = []
        self.seconds = 0.0

    # ---- looking
    def check(self) -> Inventory:
        """What is on the chip, its faults and its loss budget."""
        require_sound_crosstalk(Chip(self.mesh))
        return inventory(self.mesh)

    def open_plan(self, path: str | Path, *, stale_ok: bool = False) -> Plan:
        """Take a plan file, or a state of the mesh folder by name, in hand; refuse one made for other physics."""
        if not Path(path).exists() and str(path) in state_names(self.mesh):
            return self.open_state(str(path), stale_ok=stale_ok)
        plan = read_plan(path)
        self.remarks += check_fresh(self.mesh, plan, stale_ok=stale_ok, where=str(path))
        self.plan = plan
        return plan

    # ---- states
    def states(self) -> list[StateRow]:
        """All named states of the mesh folder."""
        return listed_states(self.mesh)

    def open_state(self, name: str, *, stale_ok: bool = False) -> Plan:
        """Take a named state in hand."""
        self.plan, remarks = load_state(self.mesh, name, stale_ok=stale_ok)
        self.remarks += remarks
        return self.plan

    def check_state_name(self, name: str) -> None:
        """Refuse a name that no state can have, before any work is done."""
        state_file(self.mesh, name)

    def save_state(self, name: str) -> Path:
        """Keep the plan in hand by name."""
        return save_state(self.mesh, name, self._in_hand())

    def renew_state(self, name: str) -> Plan:
        """Solve a state's wish again on the mesh as it is now."""
        self.plan = renew_state(self.mesh, name)
        return self.plan

    def difference(self, before: Plan, after: Plan) -> Difference:
        """Which cells and channels change from one plan to another, and what switching costs."""
        return compare(self.mesh, before, after)

    # ---- working
    def target(self, words: str, free: str = "nothing") -> Target:
        """The target that the words name, checked against the mesh."""
        net = self.mesh.net
        return read_target(words, (len(net.outputs), len(net.inputs)), free, net.inputs, net.outputs)

    def solve(
        self,
        target: Target,
        *,
        best_effort: bool = False,
        least_power: bool = False,
        effort: Effort | None = None,
        explain: bool = False,
    ) -> Plan:
        """Volts and codes for a target; `explain` adds the account of what keeps it from being closer."""
        started = time.perf_counter()
        self.plan = solve(
            self.mesh, target, best_effort=best_effort, least_power=least_power, effort=effort, explain=explain
        )
        self.seconds = time.perf_counter() - started
        return self.plan

    def route(self, asked: RouteTarget) -> Plan:
        """Volts and codes for routes and splits."""
        from meshctl.plan.switching import route

        started = time.perf_counter()
        self.plan = route(self.mesh, asked)
        self.seconds = time.perf_counter() - started
        return self.plan

    def predict(self, wavelengths_nm: np.ndarray | None = None) -> Prediction:
        """What the chip does with the codes of the plan in hand; for routes also the signals at their outputs."""
        plan = self._in_hand()
        if plan.is_routes:
            from meshctl.plan.switching import predict_routes

            prediction, self.signals = predict_routes(self.mesh, plan, wavelengths_nm)
        else:
            prediction = predict(self.mesh, plan, wavelengths_nm)
        response = Chip(self.mesh).response_at(plan.codes)
        if response.loops:
            from meshctl.mesh.ringing import ringing

            self.remarks += [str(loop) for loop in ringing(response, prediction.actual, wavelengths_nm)]
        return prediction

    def port_pair(self, words: str, option: str) -> tuple[str, str]:
        """IN:OUT as two port names of the mesh."""
        entry, _, leaving = words.partition(":")
        for name, known, side in ((entry, self.mesh.net.inputs, "input"), (leaving, self.mesh.net.outputs, "output")):
            if name not in known:
                finding = unknown_name(side, name, known, "")
                raise WrongUsage(f"{option} {words}: {finding.what}", remedy=f"write IN:OUT; {finding.remedy}")
        return entry, leaving

    def spectrum(self, wavelengths_nm: np.ndarray | None, pairs: list[tuple[str, str]] | None = None) -> Spectrum:
        """Fields with their group delay between port pairs (None: all) as the codes of the plan in hand give them."""
        waves = np.array([self.mesh.net.wavelength_nm]) if wavelengths_nm is None else wavelengths_nm
        return spectrum(Chip(self.mesh), self._in_hand().codes, waves, pairs)

    def feature(self, wavelengths_nm: np.ndarray, pair: tuple[str, str], kind: str | None) -> Feature:
        """Free spectral range, bandwidth, extinction and finesse of what a port pair shows over wavelength."""
        found = features(Chip(self.mesh), self._in_hand().codes, wavelengths_nm, pair, kind)
        if found is None:
            raise OutOfReach(
                f"{pair[0]} to {pair[1]} shows no {kind or 'peak or dip'} between {wavelengths_nm.min():.6g} and "
                f"{wavelengths_nm.max():.6g} nm",
                remedy="widen --wavelengths, give more of them, or choose another pair",
            )
        if found.narrow:
            self.remarks.append(
                f"{pair[0]} to {pair[1]}: its {found.kind} is narrower than the wavelengths are apart; others may be "
                "missed: give more wavelengths"
            )
        return found

    def elements(self) -> Iterator[LightRow]:
        """The parts in light order, settings as the codes of the plan give them."""
        plan = self._in_hand()
        chip = Chip(self.mesh)
        as_built = chip.as_built(chip.levels(plan.codes))
        return light_order(self.mesh.net, as_built, plan.settings, chip.actual(plan.codes))

    def energy(self) -> Energy:
        """What holding the plan in hand costs, and reaching it from power off."""
        return energy(Chip(self.mesh), self._in_hand().codes)

    def tolerance(self, question: Question, ears: Ears | None = None) -> Tolerance:
        """How far dies will be off with the plan in hand, and what the next chip needs."""
        from meshctl.tolerances.whole import answer

        return answer(self.mesh, self._in_hand(), question, ears)

    # ---- writing
    def write_plan(self, path: str | Path) -> None:
        """Write the plan in hand; the old file stays whole until the new one is."""
        write_whole(Path(path), plan_text(self._in_hand()))

    def write_elements(self, path: str | Path) -> int:
        """Write the parts in light order as CSV; returns the number of rows."""
        require_suffix(path, ".csv")
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(HEAD)
        count = 0
        for row in self.elements():
            writer.writerow(["" if v is None else repr(v) if isinstance(v, float) else v for v in row])
            count += 1
        write_whole(Path(path), out.getvalue())
        return count

    def write_spectrum(self, spectrum: Spectrum, path: str | Path) -> None:
        """Write a spectrum as CSV: one row per wavelength and port pair."""
        require_suffix(path, ".csv")
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(SPECTRUM_HEAD)
        size, power, phase = np.abs(spectrum.field), spectrum.power, spectrum.phase_rad
        power_db, delay = db_array(power), spectrum.group_delay_ps
        inputs, outputs = zip(*spectrum.pairs, strict=True)
        for w, (wave, thz) in enumerate(zip(spectrum.wavelengths_nm.tolist(), spectrum.thz.tolist(), strict=True)):
            delays = ["" if d != d else repr(d) for d in delay[w].tolist()]  # dark: no delay
            columns = (size[w].tolist(), power[w].tolist(), power_db[w].round(6).tolist(), phase[w].tolist(), delays)
            rows = zip(inputs, outputs, *columns, strict=True)
            writer.writerows((wave, thz, *row) for row in rows)
        write_whole(Path(path), out.getvalue())

    def write_matrix(self, prediction: Prediction, path: str | Path) -> None:
        """Write the field matrix as a numpy file, [out, in] or [wavelength, out, in]."""
        require_suffix(path, ".npy")
        buffer = io.BytesIO()
        np.save(buffer, prediction.matrix)
        write_whole(Path(path), buffer.getvalue())

    def _in_hand(self) -> Plan:
        if self.plan is None:
            raise WrongUsage("no plan is in hand", remedy="solve, or open a plan file")
        return self.plan


def new_mesh(shape: str, folder: str | Path, *, built: int | None = None, **size: Any) -> Mesh:
    """Make a new mesh folder from a lattice; with `built` also a die drawn from its spread."""
    folder = Path(folder)
    mesh = lattice(shape, name=folder.name, **size)
    if built is None:
        write(mesh, folder)
    else:
        with new_folder(folder) as work:
            write_whole(work / MESH_TOML, mesh.text)
            for name, text in die_tables(mesh, built).items():
                write_whole(work / f"{name}.csv", text)
    return load(folder)


def demo_mesh_folder(name: str = DEMO_MESH) -> Path:
    """Where a shipped mesh lies: beside the package, or under the environment's share folder."""
    beside = Path(__file__).resolve().parent.parent / "meshes" / name
    shared = Path(sys.prefix) / "share" / "meshctl" / "meshes" / name
    for folder in (beside, shared):
        if (folder / MESH_TOML).is_file():
            return folder
    raise MissingFile("the shipped meshes are not there", where=str(shared), remedy="install meshctl again")


def require_suffix(path: str | Path, *suffixes: str) -> None:
    """Refuse a file name that does not end as its content asks."""
    if Path(path).suffix.lower() not in suffixes:
        listed = " or ".join(suffixes)
        raise WrongUsage(f"'{path}' is no {listed} file", remedy=f"name a file that ends in {listed}")


__all__ = ["Effort", "Session", "demo_mesh_folder", "new_mesh", "require_suffix"]
