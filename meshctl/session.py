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
from typing import Any

import numpy as np

from meshctl.errors import MissingFile, WrongUsage
from meshctl.mesh.files import new_folder, write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.inventory import Inventory, inventory
from meshctl.mesh.lightorder import HEAD, LightRow, light_order
from meshctl.mesh.meshfile import MESH_TOML, die_tables, lattice, load, write
from meshctl.plan.chip import Chip
from meshctl.plan.energy import Energy, energy
from meshctl.plan.pipeline import Effort, Prediction, predict, solve
from meshctl.plan.plan import Plan, check_fresh, plan_text, read_plan
from meshctl.solver.target import Target, read_target
from meshctl.units import db

DEMO_MESH = "plover8"


class Session:
    """A mesh, the plan in hand, and the remarks made on the way.

    Parameters
    ----------
    folder : path of a mesh folder
    """

    def __init__(self, folder: str | Path) -> None:
        self.mesh: Mesh = load(folder)
        self.plan: Plan | None = None
        self.remarks: list[str] = []
        self.seconds = 0.0

    # ---- looking
    def check(self) -> Inventory:
        """What is on the chip, its faults and its loss budget."""
        return inventory(self.mesh)

    def open_plan(self, path: str | Path, *, stale_ok: bool = False) -> Plan:
        """Take a plan file in hand; refuse one made for other physics."""
        plan = read_plan(path)
        self.remarks += check_fresh(self.mesh, plan, stale_ok=stale_ok, where=str(path))
        self.plan = plan
        return plan

    # ---- working
    def target(self, words: str, free: str = "nothing") -> Target:
        """The target that the words name, checked against the mesh."""
        net = self.mesh.net
        return read_target(words, (len(net.outputs), len(net.inputs)), free)

    def solve(
        self, target: Target, *, best_effort: bool = False, least_power: bool = False, effort: Effort | None = None
    ) -> Plan:
        """Volts and codes for a target."""
        started = time.perf_counter()
        self.plan = solve(self.mesh, target, best_effort=best_effort, least_power=least_power, effort=effort)
        self.seconds = time.perf_counter() - started
        return self.plan

    def predict(self, wavelengths_nm: np.ndarray | None = None) -> Prediction:
        """What the chip does with the codes of the plan in hand."""
        return predict(self.mesh, self._in_hand(), wavelengths_nm)

    def elements(self) -> Iterator[LightRow]:
        """The parts in light order, settings as the codes of the plan give them."""
        plan = self._in_hand()
        chip = Chip(self.mesh)
        as_built = chip.as_built(chip.levels(plan.codes))
        return light_order(self.mesh.net, as_built, plan.settings, chip.actual(plan.codes))

    def energy(self) -> Energy:
        """What holding the plan in hand costs, and reaching it from power off."""
        return energy(Chip(self.mesh), self._in_hand().codes)

    # ---- writing
    def write_plan(self, path: str | Path) -> None:
        """Write the plan in hand; the old file stays whole until the new one is."""
        write_whole(Path(path), plan_text(self._in_hand()))

    def write_elements(self, path: str | Path) -> int:
        """Write the parts in light order as CSV; returns the number of rows."""
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(HEAD)
        count = 0
        for row in self.elements():
            writer.writerow(["" if v is None else repr(v) if isinstance(v, float) else v for v in row])
            count += 1
        write_whole(Path(path), out.getvalue())
        return count

    def write_spectrum(self, prediction: Prediction, path: str | Path) -> None:
        """Write a prediction as CSV: one row per wavelength, input and output."""
        require_suffix(path, ".csv")
        net = self.mesh.net
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow(("wavelength_nm", "input", "output", "power", "power_db", "phase_rad"))
        centre = prediction.wavelengths_nm is None
        wavelengths = [net.wavelength_nm] if centre else prediction.wavelengths_nm.tolist()  # type: ignore[union-attr]
        for w, matrix in zip(wavelengths, prediction.matrix[None] if centre else prediction.matrix, strict=True):
            power, phase = np.abs(matrix) ** 2, np.angle(matrix)
            for i, entry in enumerate(net.inputs):
                for o, leaving in enumerate(net.outputs):
                    p = float(power[o, i])
                    writer.writerow((w, entry, leaving, repr(p), f"{db(p):.6g}", repr(float(phase[o, i]))))
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


def require_suffix(path: str | Path, suffix: str) -> None:
    """Refuse a file name that does not end as its content asks."""
    if Path(path).suffix != suffix:
        raise WrongUsage(f"'{path}' is no {suffix} file", remedy=f"name a file that ends in {suffix}")


def wavelength_range(words: str) -> np.ndarray:
    """FROM:TO:COUNT in nm as wavelengths (W,).

    Raises
    ------
    WrongUsage
    """
    parts = words.split(":")
    try:
        first, last, count = float(parts[0]), float(parts[1]), int(parts[2])
        fits = len(parts) == 3
    except (ValueError, IndexError):
        fits = False
    if not fits:
        raise WrongUsage(
            f"--wavelengths {words} is no range", remedy="write FROM:TO:COUNT in nm, such as 1540:1560:201"
        )
    if not (200.0 <= first <= 20000.0 and 200.0 <= last <= 20000.0 and 1 <= count <= 1_000_000):
        raise WrongUsage(
            f"--wavelengths {words} is out of range", remedy="wavelengths are 200 to 20000 nm, 1 to 1000000 of them"
        )
    return np.linspace(first, last, count)


__all__ = ["Effort", "Session", "demo_mesh_folder", "new_mesh", "require_suffix", "wavelength_range"]
