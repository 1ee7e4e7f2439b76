"""The dashboard's sentences: header, inspector, account. Only wording; the numbers come from the work.

Public: header, selection, inspector, account, figure.
"""

from __future__ import annotations

import math
from typing import Any

from meshctl.errors import Finding
from meshctl.picture_states import BAR, CROSS, UNKNOWN, state_of
from meshctl.picture_words import fault_words
from meshctl.solver.solution import REASONS
from meshctl.work import Work

NARROW = 100  # columns below which the number of cells is left out


def figure(value: float, form: str = ".3f") -> str:
    """A number, or a dash where there is none."""
    return "-" if math.isnan(value) else format(value + 0.0, form)


def header(work: Work, width: int) -> str:
    """Mesh, cells, input, wavelength, faults, what is in hand; the plan's name gives way where room is short."""
    net, state = work.session.mesh.net, work.state
    faulty = int(work.faulty_settings().sum())
    faults = f"{faulty} fault{'s' * (faulty != 1)}" if faulty else "no fault"
    faults += f", {len(state.faults)} assumed" if state.faults else ""
    held = "power off" if state.plan is None else f"plan {state.plan.target.get('source', '')}"
    if state.codes is None and work.done:
        held = "set by hand" if state.plan is None else f"by hand, from {held}"
    parts = [work.session.mesh.name, f"{net.n_cells} cells", f"input {work.input_name}", f"{net.wavelength_nm:g} nm"]
    if width < NARROW:
        del parts[1]
    before, after = " | ".join([*parts, faults, ""]), " | no bench"
    room = width - len(before) - len(after)
    return before + (held if len(held) <= room else f"{held[: max(room - 2, 9)]}..") + after


def state_words(power: float) -> str:
    """A cross power as a state."""
    if math.isnan(power):
        return "no state known"
    state = int(state_of_one(power))
    name = {BAR: "bar", CROSS: "cross", UNKNOWN: "unknown"}.get(state, "split")
    return f"{name}, {100 * power:.1f} % crosses"


def state_of_one(power: float) -> int:
    import numpy as np

    return int(state_of(np.array([power]))[0])


def selection(work: Work, cell: int) -> str:
    """The selected cell in one line."""
    mesh = work.mesh
    if not mesh.net.n_cells:
        return "no cell"
    said = fault_words(mesh)
    faults = [f"{mesh.net.setting_names[s]} {said[s]}" for s in work.settings_of_cell(cell) if s in said]
    return "; ".join([f"{mesh.net.names.cells[cell]}: {state_words(work.cross_power(cell))}", *faults])


def inspector(work: Work, cell: int) -> list[str]:
    """The selected cell: state, then every setting with its drive."""
    mesh, drive = work.mesh, work.drive
    net = mesh.net
    if not net.n_cells:
        return ["no cell"]
    lines = [net.names.cells[cell], state_words(work.cross_power(cell)), ""]
    said = fault_words(mesh)
    for s in work.settings_of_cell(cell):
        lines.append(net.setting_names[s])
        lines.append(f"  wanted {work.state.wanted[s]:9.4f} rad")
        lines.append(f"  given  {work.actual[s]:9.4f} rad")
        if s in said:
            lines.append(f"  ! {said[s]}")
        for a, owner in enumerate(mesh.actuators.setting.tolist() if not isinstance(drive, Finding) else []):
            if owner != s or isinstance(drive, Finding):
                continue
            k = int(mesh.actuators.channel[a])
            lines.append(f"  channel {mesh.channel_names[k]}")
            lines.append(f"  {drive.volts[k]:.4f} V, code {drive.codes[k]}")
            lines.append(f"  {figure(float(drive.headroom_v[k]))} V below its limit")
            lines.append(f"  {drive.power_mw[a]:.3f} mW")
            if a in drive.held:
                lines.append("  held at its limit")
    if isinstance(drive, Finding):
        lines += ["", f"no drive: {drive}"]
    return lines


def account(work: Work) -> list[str]:
    """The plan in hand in words."""
    plan = work.state.plan
    if plan is None:
        return ["No plan is in hand: s solves for a matrix, r for routes, o opens a file or a state."]
    lines = [f"wish        {plan.target.get('source', '')}", f"why it ends {REASONS.get(plan.reason, plan.reason)}"]
    now = work.measures
    for name, value in now.items():
        lines.append(f"{name.replace('_', ' '):<24} {value:.6g} now")
    lines.append(f"{'throughput as planned':<24} {plan.throughput:.4f}")
    lines.append(f"{'power as planned':<24} {float(plan.power_mw.sum()):.2f} mW")
    if work.state.codes is None:
        lines.append("Cells were set by hand since; 'now' is with them.")
    for r in plan.routes:
        cells = r["cells"]
        shown = " ".join(f"{c}:{s}" for c, s in zip(cells, r["states"], strict=True))
        lines.append(f"route {r['input']} to {r['output']}: {len(cells)} cells: {shown}")
    lines += [f"! {warning}" for warning in plan.warnings]
    lines += _causes(plan.account) if plan.account else ["a finds out what keeps it from being closer"]
    return lines


def _causes(found: dict[str, Any]) -> list[str]:
    lines = [f"why not closer: {found['error']:.3e}", f"{'cause':<44}{'part':>12}"]
    lines += [f"{c['words']:<44}{c['part']:>12.3e}" for c in found["causes"] if c["part"] is not None]
    lines.append(
        f"{'rest, that no single cause explains':<44}{found['rest']:>12.3e}" if found["rest"] is not None else ""
    )
    for e in found["elements"]:
        lines.append(f"would help most: {e['element']} ({e['cause']}), {100 * e['share']:.1f} %")
    return lines
