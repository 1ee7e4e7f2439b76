"""The commands `route` and `states`, and routes and states as text and JSON.

Public: route, states, signal_table.
"""

from __future__ import annotations

import dataclasses
import json
import math
import sys
from argparse import Namespace
from collections.abc import Sequence
from typing import Any

from meshctl.cli import printing
from meshctl.errors import DONE, OUT_OF_REACH, Finding, NoRoutes, WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.plan.signals import Signal
from meshctl.plan.states import STALE, Difference, StateRow
from meshctl.plan.switching import RouteTarget
from meshctl.session import Session
from meshctl.solver.solution import REASONS

ALL = "all"
SIGNAL_HEAD = (
    ("route", ""),
    ("share", "reached"),
    ("signal", "dB"),
    ("loss", "dB"),
    ("crosstalk", "dB"),
    ("worst", "dB"),
    ("stray", "dB"),
    ("ripple", "dB"),
    ("slow", "dB"),
)


def _print(entry: dict[str, Any]) -> None:
    print(json.dumps(printing.finite(entry), allow_nan=False))


def _remark(lines: Sequence[str]) -> None:
    for line in lines:
        print(f"warning: {line}", file=sys.stderr)


# ---- route
def route(words: Namespace) -> int:
    """Search, place, simulate; exit 4 with the routes in conflict where there are none."""
    session = Session(words.mesh)
    if words.save:
        session.check_state_name(words.save)
    asked = RouteTarget(
        tuple(words.routes),
        tuple(name for name in words.avoid.split(",") if name),
        _priorities(words.priorities),
        words.unused,
        words.seed,
        words.seconds,
        words.band,
        words.best_effort,
    )
    try:
        plan = session.route(asked)
    except NoRoutes as finding:
        if words.json:
            _print(_refusal_entry(session.mesh, asked, finding))
        raise
    if words.out:
        session.write_plan(words.out)
    if words.save:
        session.save_state(words.save)
    if words.json:
        _print(printing.plan_entry(session.mesh, plan, session.seconds))
    else:
        print(printing.plan_table(session.mesh, plan))
        print(printing.plan_summary(plan))
        _remark(plan.warnings)
    return DONE


def _priorities(words: str | None) -> tuple[float, ...] | None:
    if words is None:
        return None
    try:
        found = tuple(float(word) for word in words.split(","))
    except ValueError:
        found = (math.nan,)
    if not all(map(math.isfinite, found)):
        raise WrongUsage(f"--priorities {words} are no numbers", remedy="write one for each route, such as 2,1,1")
    return found


def _refusal_entry(mesh: Mesh, asked: RouteTarget, finding: NoRoutes) -> dict[str, Any]:
    return {
        "mesh": mesh.name,
        "mesh_hash": mesh.hash,
        "target": asked.described(),
        "reason": finding.status,
        "reason_text": REASONS[finding.status],
        "conflict": list(finding.conflict),
        "proof": finding.proof,
        "message": str(finding),
    }


def signal_table(rows: Sequence[Signal | dict[str, Any]]) -> list[str]:
    """A line for each output of a route: what arrives at the centre and at worst over the band."""
    entries = [vars(row) if isinstance(row, Signal) else row for row in rows]
    lines = [tuple(word for word, _ in SIGNAL_HEAD), tuple(unit for _, unit in SIGNAL_HEAD)]
    for e in entries:
        share = "" if e["share_reached"] is None else f"{e['share_reached']:.4f}"
        levels = ("signal_db", "insertion_loss_db", "crosstalk_db", "worst_crosstalk_db", "worst_stray_db")
        small = ("ripple_db", "slow_db")
        lines.append(
            (
                f"{e['input']}:{e['output']}",
                share,
                *(_level(e[key], 2) for key in levels),
                *(_level(e[key], 4) for key in small),
            )
        )
    width = [max(len(line[k]) for line in lines) for k in range(len(SIGNAL_HEAD))]
    return [
        "  ".join(
            f"{text:<{w}}" if k == 0 else f"{text:>{w}}" for k, (text, w) in enumerate(zip(line, width, strict=True))
        ).rstrip()
        for line in lines
    ]


def _level(value: float | None, digits: int) -> str:
    return "-" if value is None else f"{value:.{digits}f}"


# ---- states
def states(words: Namespace) -> int:
    """List, show, compare or renew."""
    session = Session(words.mesh)
    if words.renew is not None:
        if words.name is not None:
            raise WrongUsage(f"--renew {words.renew} and '{words.name}' together", remedy="give one of them")
        return _renew(session, words)
    if words.name is None:
        return _list(session, words)
    plan = session.open_state(words.name, stale_ok=words.stale_ok)
    if words.other is None:
        _remark(session.remarks)
        if words.json:
            entry = printing.plan_entry(session.mesh, plan, 0.0)
            del entry["seconds"]  # nothing was solved
            _print({"state": words.name, **entry})
        else:
            print(printing.plan_table(session.mesh, plan))
            print(f"state         {words.name}: {plan.target.get('source', '')}")
            print(printing.plan_summary(plan))
        return DONE
    other = session.open_state(words.other, stale_ok=words.stale_ok)
    found = session.difference(plan, other)
    _remark(session.remarks)
    if words.json:
        _print({"mesh": session.mesh.name, "from": words.name, "to": words.other, **dataclasses.asdict(found)})
    else:
        print(_difference_text(words.name, words.other, found))
    return DONE


def _list(session: Session, words: Namespace) -> int:
    rows = session.states()
    if words.json:
        _print({"mesh": session.mesh.name, "states": [dataclasses.asdict(row) for row in rows]})
        return DONE
    print(_list_text(rows) if rows else "no states; save one with: meshctl route MESH IN:OUT .. --save NAME")
    _remark([f"state '{row.name}': {row.note}" for row in rows if row.note])
    return DONE


def _list_text(rows: Sequence[StateRow]) -> str:
    name, reason = max(5, *(len(r.name) for r in rows)), max(6, *(len(r.reason) for r in rows))
    lines = [f"{'state':<{name}}  {'reason':<{reason}}  {'power_mw':>8}  {'':5}  target"]
    for r in rows:
        power = "" if math.isnan(r.power_mw) else f"{r.power_mw:.3f}"
        fresh = "fresh" if r.fresh else STALE if r.note.startswith(STALE) else "wrong"
        lines.append(f"{r.name:<{name}}  {r.reason:<{reason}}  {power:>8}  {fresh}  {r.target}".rstrip())
    return "\n".join(lines)


def _renew(session: Session, words: Namespace) -> int:
    """Solve again; with `all` go on after a failure and say at the end which states stay as they were."""
    every = words.renew == ALL
    names = [row.name for row in session.states()] if every else [words.renew]
    done: dict[str, str] = {}
    failed: dict[str, Finding] = {}
    for name in names:
        try:
            done[name] = session.renew_state(name).reason
        except Finding as finding:
            if not every:
                raise
            failed[name] = finding
    if words.json:
        _print({"mesh": session.mesh.name, "renewed": done, "failed": {n: str(f) for n, f in failed.items()}})
    else:
        for name, reason in done.items():
            print(f"{name}: {reason}: {REASONS[reason]}")
    _remark([f"state '{name}' stays as it was: {' '.join(str(f).split())}" for name, f in failed.items()])
    return OUT_OF_REACH if failed else DONE


def _difference_text(before: str, after: str, found: Difference) -> str:
    cell = max([4, *(len(c.cell) for c in found.cells)])
    channel = max([7, *(len(c.channel) for c in found.channels)])
    element = max([5, *(len(p.element) for p in found.phases)])
    count = f"{printing.counted(len(found.cells), 'cell')} and {printing.counted(len(found.channels), 'channel')}"
    lines = [f"from '{before}' to '{after}': change in {count}"]
    if found.cells:
        lines.append(f"{'cell':<{cell}}  {'cross power':>11}  {'then':>7}")
        lines += [f"{c.cell:<{cell}}  {c.before:11.4f}  {c.after:7.4f}" for c in found.cells]
    if found.phases:
        lines.append(f"{'phase':<{element}}  {'rad':>11}  {'then':>7}")
        lines += [f"{p.element:<{element}}  {p.before_rad:11.4f}  {p.after_rad:7.4f}" for p in found.phases]
    if found.channels:
        lines.append(f"{'channel':<{channel}}  {'volts':>9}  {'then':>9}  {'change':>9}  {'code':>7}  {'then':>7}")
        lines += [
            f"{c.channel:<{channel}}  {c.before_v:9.5f}  {c.after_v:9.5f}  {c.after_v - c.before_v:+9.5f}"
            f"  {c.before_code:7d}  {c.after_code:7d}"
            for c in found.channels
        ]
    lines.append(f"switching {_energy(found.switch_nj)} there, {_energy(found.back_nj)} back")
    lines.append(f"holding   {found.hold_before_mw:.4g} mW before, {found.hold_after_mw:.4g} mW after")
    return "\n".join(lines)


def _energy(nj: float) -> str:
    return f"{nj:.4g} nJ" if math.isfinite(nj) else "unknown energy"
