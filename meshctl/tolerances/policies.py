"""What is done with a die before its light is measured: codes as they are, local correction, or a full solve.

`as-set` puts the plan's codes on the die. `corrected` knows the die's parts, corrects cell by cell and takes the
nearest codes. `refined` solves for the die anew. What drifts comes after all of them.
Public: Policy, POLICIES, AsSet, Corrected, Refined.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from meshctl.mesh.response import Response
from meshctl.optics.feedforward import fuse, propagate
from meshctl.optics.turning import turn
from meshctl.plan.chip import Chip
from meshctl.plan.pipeline import Effort, solve
from meshctl.plan.placing import place, reach_of
from meshctl.plan.plan import Plan
from meshctl.solver.closed import ClosedForm
from meshctl.solver.correct import fit_cells
from meshctl.solver.target import from_description
from meshctl.tolerances.dies import ELECTRIC, Drawing, Errors, die_as_built, mesh_of

COUPLED = (*ELECTRIC, "noise_v")  # causes that change what codes give


class Light:
    """Light of dies that stand at given settings, on arrays made once.

    Parameters
    ----------
    drawing : Drawing
    settings : float (S,), rad, where most dies stand
    """

    def __init__(self, drawing: Drawing, settings: np.ndarray) -> None:
        mesh = drawing.mesh
        self.drawing, self.settings = drawing, settings
        response = self.response = Response(mesh.net, mesh.as_built)
        if response.loops:
            return
        circuit, net = response.circuit, mesh.net
        self.parts = response.parts(settings)
        self.blocks = np.empty((circuit.n_blocks, 8))
        self.real, self.imag = np.zeros((2, circuit.n_lanes, circuit.n_inputs))
        self.unit = np.eye(circuit.n_lanes, circuit.n_inputs)
        self.out = circuit.output_lane
        value = response.values(settings)
        amplitude = np.hypot(np.hypot(self.parts[0], self.parts[1]), np.hypot(self.parts[2], self.parts[3]))
        self.groups = []
        for rows, slot in ((drawing.couplers, 3), (drawing.phases, 1)):
            moved = np.flatnonzero(net.setting_of[rows] >= 0)
            self.groups.append(
                [
                    rows, slot, np.cos(value[rows]), np.sin(value[rows]), amplitude[rows],
                    moved, net.setting_of[rows[moved]], np.zeros(len(rows)),
                ]
            )  # fmt: skip

    def matrix(self, errors: Errors, settings: np.ndarray) -> np.ndarray:
        """Field matrix [out, in] of a die with these settings in force, at the centre wavelength; no loops."""
        drawing, still = self.drawing, settings is self.settings
        for group, causes in zip(self.groups, (("split_rad",), ("phase_rad", "temperature_k")), strict=True):
            rows, slot, cosine, sine, amplitude, moved, setting, zero = group
            off = zero
            for cause in causes:
                if cause in errors:
                    factor = drawing.spread.phase_rad_per_k if cause == "temperature_k" else 1.0
                    off = off + factor * errors[cause] if off is not zero or factor != 1.0 else errors[cause]
            if not still:
                off = off.copy()
                off[moved] += (settings - self.settings)[setting]
            if slot == 3 and "loss_db" in errors:
                loss = drawing.mesh.as_built.loss_db[rows]
                amplitude = amplitude * np.exp(_NEPER * (np.abs(loss + errors["loss_db"]) - loss))
            turn(rows, cosine, sine, off, amplitude, slot, self.parts)
        circuit = self.response.circuit
        fuse(circuit.first, circuit.element, circuit.side, self.parts, self.blocks)
        self.real[:] = self.unit
        self.imag[:] = 0.0
        propagate(circuit.lane_a, circuit.lane_b, self.blocks, self.real, self.imag)
        matrix: np.ndarray = self.real[self.out] + 1j * self.imag[self.out]
        return matrix


_OVER = 1e-9  # V beyond a limit that rounding may ask for
_NEPER = -np.log(10.0) / 20.0  # of an amplitude, by dB of loss


class Policy:
    """One way of treating dies.

    Parameters
    ----------
    drawing : Drawing
    plan : Plan
    """

    chunk = 250  # trials at a time: what one file of a run holds

    def __init__(self, drawing: Drawing, plan: Plan) -> None:
        self.drawing, self.plan = drawing, plan
        self.mesh = drawing.mesh
        self.chip = Chip(self.mesh)
        self.levels = self.chip.levels(plan.codes)
        self.light = Light(drawing, self.chip.actual(plan.codes))
        # what light alone does not answer for: loops, couplers that drag phases, other wavelengths
        self.slow = self.light.response.loops or self.chip.drag is not None
        self.power_mw = float(self.chip.power_mw(self.levels).sum())

    def run(self, errors: Errors) -> tuple[np.ndarray, float]:
        """(field matrix, power in mW) of one die."""
        raise NotImplementedError

    def _measured(self, chip: Chip, errors: Errors, levels: np.ndarray) -> tuple[np.ndarray, float]:
        """Light and power of a die at levels; `errors` with what drifts."""
        change = chip.own_changes(levels)
        settings = chip.mesh.as_built.in_force(chip.reference_rad + chip.total_changes(change))
        return self._lit(chip, errors, levels, settings), float(chip.power_mw(levels, change).sum())

    def _lit(self, chip: Chip, errors: Errors, levels: np.ndarray, settings: np.ndarray) -> np.ndarray:
        if not self.slow and "laser_nm" not in errors:
            return self.light.matrix(errors, settings)
        extra = die_as_built(self.drawing, errors, drift=True).error_rad - chip.mesh.as_built.error_rad
        built = chip.as_built(levels)
        response = Response(chip.net, replace(built, error_rad=built.error_rad + extra))
        if "laser_nm" not in errors:
            return response.matrix(settings)
        return response.matrix(settings, self.mesh.net.wavelength_nm + errors["laser_nm"])[0]

    def _chip(self, errors: Errors) -> Chip:
        """The chip of a die; the mesh's own where light alone sees the difference."""
        if self.slow or any(cause in errors for cause in (*ELECTRIC, "laser_nm")):
            return Chip(mesh_of(self.drawing, errors))
        return self.chip


class AsSet(Policy):
    """The plan's codes on every die."""

    def run(self, errors: Errors) -> tuple[np.ndarray, float]:
        chip = self._chip(errors)
        if not any(cause in errors for cause in COUPLED):
            return self._lit(chip, errors, self.levels, self.light.settings), self.power_mw
        levels = self.levels + errors["noise_v"] if "noise_v" in errors else self.levels
        return self._measured(chip, errors, levels)


class Corrected(Policy):
    """Every die with its parts known, corrected cell by cell within its limits, the nearest codes taken."""

    chunk = 100

    def __init__(self, drawing: Drawing, plan: Plan) -> None:
        super().__init__(drawing, plan)
        target = from_description(plan.target)
        closed = ClosedForm(self.mesh.net, self.mesh.as_built, target)
        self.reach = reach_of(self.chip)
        self.closed, self.free = closed, target.free
        self.steps, self.step_of = closed.places[closed.best_place(self.reach)]
        self.alone = self._alone()

    def _alone(self) -> bool:
        """True where each setting has a live heater and a channel of its own, and none touches another."""
        actuators, chip, n = self.mesh.actuators, self.chip, self.mesh.net.n_settings
        own = len(actuators) == len(self.mesh.channels) == n and all(
            np.array_equal(rows, np.arange(n)) for rows in (actuators.setting, actuators.channel)
        )
        touched = actuators.crosstalk is not None or chip.coupled or bool(chip.by_current.any())
        fixed = bool(actuators.dead.any()) or not bool(np.isnan(self.mesh.as_built.stuck_rad).all())
        return own and not touched and not fixed and all(group.law.power_law for group in chip.groups)

    def _nearest(self, settings: np.ndarray) -> np.ndarray:
        """What `place` finds where heaters stand alone: settings within reach need no further whole turns."""
        chip, (_, highest) = self.chip, self.chip.level_range
        change, levels = settings - chip.reference_rad, np.empty(len(settings))
        for group in chip.groups:
            levels[group.rows] = group.law.volts(change[group.rows], group.p)
        codes: np.ndarray = chip.source.nearest_codes(levels)
        return codes - (chip.levels(codes) > highest + _OVER)

    def run(self, errors: Errors) -> tuple[np.ndarray, float]:
        electric = any(cause in errors for cause in ELECTRIC)
        as_built, closed, chip = die_as_built(self.drawing, errors, drift=False), self.closed, self._chip(errors)
        fitted = fit_cells(
            self.mesh.net, as_built, closed.response.circuit, closed.table, self.steps, self.step_of,
            reach_of(chip) if electric else self.reach, self.free,
        )  # fmt: skip
        codes = self._nearest(fitted.settings) if self.alone and not electric else None
        if codes is None:
            codes = place(chip, fitted.settings, best_effort=True).codes
        levels = chip.levels(codes)
        return self._measured(chip, errors, levels + errors["noise_v"] if "noise_v" in errors else levels)


class Refined(Policy):
    """Every die solved for anew, refined, codes rounded."""

    chunk = 10

    def run(self, errors: Errors) -> tuple[np.ndarray, float]:
        mesh = mesh_of(self.drawing, errors)
        chip = Chip(mesh)
        plan = solve(mesh, from_description(self.plan.target), best_effort=True, effort=Effort(refine=True))
        levels = chip.levels(plan.codes)
        return self._measured(chip, errors, levels + errors["noise_v"] if "noise_v" in errors else levels)


POLICIES: dict[str, Callable[[Drawing, Plan], Any]] = {"as-set": AsSet, "corrected": Corrected, "refined": Refined}
