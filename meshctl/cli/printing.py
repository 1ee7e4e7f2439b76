"""Answers as text for people and as JSON objects for programs.

Public: plan_entry, plan_table, plan_summary, prediction_entry, prediction_text, inventory_text, demo_text, finite.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any, NoReturn

import numpy as np

from meshctl.cli import wishing
from meshctl.errors import WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.mesh.inventory import Inventory
from meshctl.mesh.tables import unknown_name
from meshctl.optics.features import Feature
from meshctl.plan.energy import Energy
from meshctl.plan.pipeline import Prediction
from meshctl.plan.plan import Plan
from meshctl.solver.solution import REASONS

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.plan.signals import Signal


def finite(entry: Any) -> Any:
    """The same structure with NaN and infinity as null, for JSON."""
    if isinstance(entry, dict):
        return {key: finite(value) for key, value in entry.items()}
    if isinstance(entry, list | tuple):
        return [finite(value) for value in entry]
    return None if isinstance(entry, float) and not math.isfinite(entry) else entry


def counted(count: int, thing: str) -> str:
    """A count with its noun: 1 cell, 2 cells."""
    return f"{count} {thing}" if count == 1 else f"{count} {thing}s"


def require_port(name: str, ports: tuple[str, ...]) -> None:
    """Refuse a port that is not among the mesh's."""
    if name not in ports:
        finding = unknown_name("port", name, ports, "")
        raise WrongUsage(finding.what, remedy=finding.remedy)


def needs_plan(word: str) -> NoReturn:
    raise WrongUsage(f"{word} needs a plan", remedy="name a plan file that 'solve' wrote")


# ---- plans
def _actuator_rows(mesh: Mesh, plan: Plan) -> list[dict[str, Any]]:
    net, actuators = mesh.net, mesh.actuators
    settings, channels, is_angle = net.setting_names, mesh.channel_names, net.setting_is_angle
    rows = []
    for a, name in enumerate(mesh.actuator_names):
        s, k = int(actuators.setting[a]), int(actuators.channel[a])
        rows.append(
            {
                "actuator": name,
                "element": settings[s],
                "channel": channels[k],
                "volts": float(plan.volts[k]),
                "code": int(plan.codes[k]),
                "angle_rad" if is_angle[s] else "phase_rad": float(plan.actual[s]),
                "power_mw": float(plan.power_mw[a]),
                "headroom_v": float(plan.headroom_v[k]),
            }
        )
    return rows


def plan_entry(mesh: Mesh, plan: Plan, seconds: float) -> dict[str, Any]:
    """The JSON object of `solve` and of `route`."""
    if plan.is_routes:
        asked: dict[str, Any] = {
            "power_error": plan.power_error,
            "insertion_loss_db": {f"{r['input']}:{r['output']}": r["insertion_loss_db"] for r in plan.routes},
            "routes": plan.routes,
            "search": plan.search,
        }
    else:
        asked = wishing.near_entry(plan.fidelity, plan.matrix_error, plan.measures, plan.has_matrix)
        if plan.account:
            asked["account"] = plan.account
    return finite(
        {
            "mesh": mesh.name,
            "mesh_hash": plan.mesh_hash,
            "target": wishing.shown_target(plan.target),
            **asked,
            "continuous": plan.continuous,
            "throughput": plan.throughput,
            "throughput_per_input": plan.throughput_per_input,
            "power_mw": float(plan.power_mw.sum()),
            "saved_mw": plan.saved_mw,
            "actuators": _actuator_rows(mesh, plan),
            "reason": plan.reason,
            "reason_text": REASONS[plan.reason],
            "out_of_range": plan.shortfalls,
            "warnings": plan.warnings,
            "seconds": seconds,
        }
    )


def plan_table(mesh: Mesh, plan: Plan) -> str:
    """One line per actuator: what to set, what it gives."""
    rows = _actuator_rows(mesh, plan)
    name = max([len("actuator"), *(len(r["actuator"]) for r in rows)])
    channel = max([len("channel"), *(len(r["channel"]) for r in rows)])
    head = (
        f"{'actuator':<{name}}  {'channel':<{channel}}  {'volts':>9}  {'code':>7}  {'value_rad':>9}"
        f"  {'power_mw':>8}  {'headroom_v':>10}"
    )
    lines = [head]
    for r in rows:
        value = r.get("phase_rad", r.get("angle_rad"))
        lines.append(
            f"{r['actuator']:<{name}}  {r['channel']:<{channel}}  {r['volts']:9.5f}  {r['code']:7d}  {value:9.5f}"
            f"  {r['power_mw']:8.3f}  {r['headroom_v']:10.4f}"
        )
    return "\n".join(lines)


def plan_summary(plan: Plan) -> str:
    """How near the chip comes and why not nearer."""
    if plan.is_routes:
        return _routes_summary(plan)
    worst = min(plan.throughput_per_input)
    power = float(plan.power_mw.sum())
    share = 100.0 * plan.saved_mw / (power + plan.saved_mw) if plan.saved_mw else 0.0
    saved = f"     (free gauges saved {plan.saved_mw:.1f} mW, {share:.0f} %)" if plan.saved_mw else ""
    before = plan.continuous
    lines = []
    if plan.has_matrix:
        lines = [
            f"fidelity      {plan.fidelity:.9f}   (before limits and codes {before['fidelity']:.9f})",
            f"matrix error  {plan.matrix_error:.3e}     (before limits and codes {before['matrix_error']:.3e})",
        ]
    lines += [
        *wishing.near_lines(plan.measures, before),
        f"throughput    {plan.throughput:.4f}        (least of any input {worst:.4f})",
        f"power         {float(plan.power_mw.sum()):.1f} mW{saved}",
        f"reason        {plan.reason}: {REASONS[plan.reason]}",
    ]
    return "\n".join(lines)


def _routes_summary(plan: Plan) -> str:
    """What arrives where, at the centre and at worst over the band."""
    from meshctl.cli.switching import signal_table

    found = plan.search
    left = f", {found['loops']} closed loops left" if found.get("loops") else ""
    lines = [
        "",
        *signal_table(plan.routes),
        "",
        f"power error   {plan.power_error:.3e}     (before limits and codes {plan.continuous['power_error']:.3e})",
        f"power         {float(plan.power_mw.sum()):.1f} mW",
        f"free cells    {found.get('unused')}: {found.get('turned')} turned to open loops{left}, "
        f"{found.get('driven')} change state without drive",
        f"reason        {plan.reason}: {REASONS[plan.reason]} {_sentence(found.get('words', ''))}",
    ]
    return "\n".join(lines)


def _sentence(words: str) -> str:
    return f"{words[:1].upper()}{words[1:]}." if words else ""


# ---- predictions
def marked(words: str | None) -> tuple[str, str | None]:
    """IN:OUT and peak, dip or None, of IN:OUT, IN:OUT:peak or IN:OUT:dip."""
    if not words:
        return "", None
    pair, _, kind = words.rpartition(":")
    return (pair, kind) if kind in ("peak", "dip") else (words, None)


def feature_text(feature: Feature) -> str:
    """A line for each figure of a feature."""
    places = ", ".join(f"{thz:.6f}" for thz in feature.thz[:8]) + (", .." if len(feature.thz) > 8 else "")
    lines = [
        f"{feature.kind}s{' ' * (13 - len(feature.kind))}{places} THz",
        f"free range    {feature.free_spectral_range_ghz:.6f} GHz",
        f"bandwidth     {feature.bandwidth_ghz:.6f} GHz",
        f"extinction    {feature.extinction_db:.2f} dB",
        f"finesse       {feature.finesse:.3f}",
    ]
    return "\n".join(f"{line[:14]}not in range" if "nan" in line else line for line in lines)


def prediction_entry(
    mesh: Mesh,
    plan: Plan,
    prediction: Prediction,
    feature: Feature | None = None,
    signals: Sequence[Signal] = (),
) -> dict[str, Any]:
    """The JSON object of `predict`."""
    waves = prediction.wavelengths_nm
    if plan.is_routes:
        near: dict[str, Any] = {"routes": [dict(vars(signal)) for signal in signals]}
    else:
        near = wishing.near_entry(prediction.fidelity, prediction.matrix_error, prediction.measures, plan.has_matrix)
    return finite(
        {
            "mesh": mesh.name,
            "mesh_hash": mesh.hash,
            "target": wishing.shown_target(plan.target),
            "wavelengths_nm": None if waves is None else waves.tolist(),
            **near,
            "throughput": prediction.throughput,
            "throughput_per_input": prediction.throughput_per_input.tolist(),
            "power_mw": float(prediction.power_mw.sum()),
            "inputs": list(mesh.net.inputs),
            "outputs": list(mesh.net.outputs),
            "residual": prediction.residual,
            "dark_loops": prediction.dark_loops,
            "feature": None if feature is None else dataclasses.asdict(feature),
        }
    )


def prediction_text(
    mesh: Mesh,
    plan: Plan,
    prediction: Prediction,
    feature: Feature | None = None,
    signals: Sequence[Signal] = (),
) -> str:
    """Fidelity and throughput, or what arrives by each route; for few ports also the power matrix in dB."""
    waves = prediction.wavelengths_nm
    at = f"{mesh.net.wavelength_nm:g} nm" if waves is None else f"{waves[0]:g} to {waves[-1]:g} nm, {len(waves)} points"
    lines = [f"mesh          {mesh.name} at {at}"]
    if plan.is_routes:
        from meshctl.cli.switching import signal_table

        lines += [f"target        {plan.target.get('source', '')}", "", *signal_table(signals), ""]
    else:
        lines += [
            f"target        {plan.target.get('source', '')} (free phases: {plan.target.get('free', 'nothing')})",
        ]
        if plan.has_matrix:
            lines.append(f"fidelity      {prediction.fidelity:.9f}")
            lines.append(f"matrix error  {prediction.matrix_error:.3e}")
        lines += wishing.near_lines(prediction.measures)
    lines.append(f"throughput    {prediction.throughput:.4f}")
    if waves is None and max(prediction.matrix.shape) <= 16:
        lines.append(_power_table(mesh, prediction.matrix))
    else:
        per = ", ".join(
            f"{n} {t:.4f}" for n, t in zip(mesh.net.inputs, prediction.throughput_per_input[:64], strict=False)
        )
        lines.append(f"per input     {per}")
    if prediction.residual is not None:
        dark = f", {prediction.dark_loops} loops that no light enters" if prediction.dark_loops else ""
        lines.append(f"residual      {prediction.residual:.1e} of the largest field{dark}")
    if feature is not None:
        lines.append(feature_text(feature))
    return "\n".join(lines)


def _power_table(mesh: Mesh, matrix: np.ndarray) -> str:
    with np.errstate(divide="ignore"):
        power = 10.0 * np.log10(np.abs(matrix) ** 2)
    width = max(7, *(len(n) + 1 for n in mesh.net.inputs))
    head = f"{'power in dB':<12}" + "".join(f"{n:>{width}}" for n in mesh.net.inputs)
    lines = [head]
    for name, row in zip(mesh.net.outputs, power, strict=True):
        cells = "".join(f"{v:>{width}.2f}" if v > -99.5 else f"{'dark':>{width}}" for v in row)
        lines.append(f"{name:<12}{cells}")
    share = "".join(f"{t:>{width}.4f}" for t in np.sum(np.abs(matrix) ** 2, axis=0))
    lines.append(f"{'throughput':<12}{share}")
    return "\n".join(lines)


def energy_table(found: dict[str, Energy]) -> str:
    """States side by side: power to hold, energy to reach, and both after a second and an hour."""
    name = max(12, *(len(n) for n in found))
    head = f"{'mesh, plan':<{name}}{'hold mW':>12}{'switch nJ':>12}{'1 s in mJ':>14}{'1 h in J':>12}"
    lines = [f"{head}  hottest, ground currents"]
    for label, e in found.items():
        switch = f"{e.switch_nj:.4g}" if math.isfinite(e.switch_nj) else "unknown"
        hour = 3.6 * e.hold_mw
        held = e.hold_mw + (1e-6 * e.switch_nj if math.isfinite(e.switch_nj) else 0.0)
        notes = f"{e.hottest} {e.hottest_mw:.4g} mW" if e.hottest else "no static power"
        notes += "".join(f", {g} {ma:.4g} mA" for g, ma in e.ground_ma.items())
        lines.append(f"{label:<{name}}{e.hold_mw:>12.4g}{switch:>12}{held:>14.4g}{hour:>12.4g}  {notes}")
    return "\n".join(lines)


# ---- meshes
def _counted(counts: dict[str, int]) -> str:
    return ", ".join(f"{n} {name}" for name, n in counts.items())


def _path_table(found: Inventory) -> list[str]:
    """Loss between ports by kind of part."""
    kinds = list(dict.fromkeys(name for path in found.paths for name in path.counts if name not in ("phase", "guide")))
    port = max(8, *(len(p.input) + len(p.output) + 2 for p in found.paths))
    lines = [
        f"{'from:to':<{port}}{'least dB':>9}{'most dB':>9}"
        + "".join(f"{name + ' dB':>16}" for name in kinds)
        + f"{'guide mm dB':>18}"
    ]
    for p in found.paths:
        cells = "".join(f"{p.counts.get(name, 0):>7d} {p.loss_db.get(name, 0.0):>8.3f}" for name in kinds)
        guide = f"{p.guide_mm:>9.3f} {p.loss_db.get('guide', 0.0):>8.3f}"
        lines.append(f"{p.input + ':' + p.output:<{port}}{p.least_db:>9.3f}{p.most_db:>9.3f}{cells}{guide}")
    how = "on the way of least loss" if found.loops else "on the way of most loss"
    pairs = "" if len(found.paths) > len(found.outputs) else "; from the input that is worst for each output"
    lines.append(f"parts {how}{pairs}; how the light is split comes on top")
    return lines


def inventory_text(found: Inventory) -> str:
    """What `check` prints."""
    lines = [
        f"mesh          {found.name}  ({found.shape}, {found.wavelength_nm:g} nm, hash {found.hash[:12]})",
        f"note          {found.note}" if found.note else "",
        f"ports         {len(found.inputs)} in, {len(found.outputs)} out"
        + (f", monitors {', '.join(found.monitors)}" if found.monitors else ""),
        f"cells         {found.cells}",
        f"elements      {_counted(found.elements)}",
        f"settings      {found.settings}",
        f"actuators     {_counted(found.actuators)}",
        f"channels      {found.channels}",
        f"split errors  {found.split_error_rms_rad:.4f} rad rms known",
        f"stuck         {', '.join(found.stuck) or 'none'}",
        f"dead          {', '.join(found.dead) or 'none'}",
        "loops         " + ("yes: light has no single order" if found.loops else "none"),
    ]
    lines += [f"measured      {name}: {source}" for name, source in found.measured.items()]
    if found.paths:
        lines += ["", *_path_table(found)]
    return "\n".join(line for line in lines if line)


def demo_text(mesh: Mesh, plan: Plan, prediction: Prediction, seconds: float) -> str:
    """The main job told step by step."""
    rows = _actuator_rows(mesh, plan)
    shown = "\n".join(plan_table(mesh, plan).splitlines()[:7])
    loss = -10.0 * math.log10(prediction.throughput)
    return f"""\
The chip: '{mesh.name}', {mesh.net.n_cells} Mach-Zehnder cells on {len(mesh.net.inputs)} lanes, a heater on every phase.
The wish: the discrete Fourier transform, so that every input is shared equally among all outputs.

1. The matrix is taken apart into {mesh.net.n_cells} cells and {len(mesh.net.outputs)} output phases.
2. Each phase becomes a heater power, each power a voltage, each voltage a code of the source:

{shown}
.. and {len(rows) - 6} more. 'meshctl solve {DEMO_COMMAND}' prints them all.

3. The codes are sent through a model of the chip as it is known, not through the steps above turned round:

fidelity    {plan.fidelity:.9f}   how alike the matrices are in shape; 1 is perfect
throughput  {prediction.throughput:.4f}        the share of light that comes out: {loss:.2f} dB are lost on the way
power       {float(plan.power_mw.sum()):.0f} mW       in all heaters together
reason      {REASONS[plan.reason]}

Done in {seconds * 1e3:.0f} ms. Next: 'meshctl new rectangular mychip --modes 8', then edit mychip/mesh.toml."""


DEMO_COMMAND = "meshes/plover8 dft"
