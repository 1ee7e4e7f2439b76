"""What each command does: one call of the session, then printing. stdout is data, stderr is remarks.

Public: one function per command, named after it.
"""

from __future__ import annotations

import dataclasses
import json
import os
import shutil
import sys
from argparse import Namespace
from typing import Any

from meshctl.cli import printing, wishing
from meshctl.cli.watch import Watch
from meshctl.errors import DONE, INTERRUPTED, WrongUsage
from meshctl.optics.grid import wavelengths_of
from meshctl.session import Effort, Session, demo_mesh_folder, new_mesh, require_suffix

FIGURES = (".png", ".svg", ".pdf")


def _json(entry: dict[str, Any]) -> int:
    print(json.dumps(entry, allow_nan=False, default=str))
    return DONE


def _remark(lines: list[str]) -> None:
    for line in lines:
        print(f"warning: {line}", file=sys.stderr)


def new(words: Namespace) -> int:
    mesh = new_mesh(
        words.shape,
        words.folder,
        built=words.built,
        modes=words.modes,
        cell=words.cell,
        spare=words.spare,
        balanced=words.balanced,
        rings=words.rings,
        rows=words.rows,
        columns=words.columns,
    )
    if words.json:
        return _json({"mesh": words.folder, "hash": mesh.hash, "cells": mesh.net.n_cells})
    cells, settings = printing.counted(mesh.net.n_cells, "cell"), printing.counted(mesh.net.n_settings, "setting")
    print(f"{words.folder}: {mesh.shape}, {cells}, {settings}")
    return DONE


def check(words: Namespace) -> int:
    found = Session(words.mesh).check()
    if words.json:
        return _json(printing.finite({"mesh": found.name, **dataclasses.asdict(found)}))
    print(printing.inventory_text(found))
    _remark(found.warnings)
    return DONE


def show(words: Namespace) -> int:
    from meshctl.picture import describe, draw, light, light_together

    session = Session(words.mesh)
    mesh, settings, lit = session.mesh, None, None
    routes: list[tuple[str, list[str]]] = []
    if words.plan:
        plan = session.open_plan(words.plan, stale_ok=words.stale_ok)
        settings = plan.actual
        routes = [(f"{r['input']}:{r['output']}", r["cells"]) for r in plan.routes]
        lit = light_together(mesh, settings, list(dict.fromkeys(r["input"] for r in plan.routes)))
    _remark(session.remarks)
    if words.input is not None:
        printing.require_port(words.input, mesh.net.inputs)
        if settings is None:
            printing.needs_plan("--input")
        lit = light(mesh, settings, words.input)
    width = words.width or shutil.get_terminal_size((80, 24)).columns
    if words.words:
        text = describe(mesh, settings)
    else:
        text = draw(mesh, settings, lit=lit, routes=routes, width=width, ascii=words.ascii)
    if words.json:
        return _json({"mesh": words.mesh, "plan": words.plan, "text": text})
    print(text)
    return DONE


def solve(words: Namespace) -> int:
    session = Session(words.mesh)
    if words.save:
        session.check_state_name(words.save)
    target = session.target(words.target, words.free)
    with Watch("refining") as watch:
        effort = Effort(words.refine, words.starts, words.seconds, words.seed, watch.progress, watch.stopped)
        plan = session.solve(
            target,
            best_effort=words.best_effort,
            least_power=words.least_power,
            effort=effort,
            explain=words.explain,
        )
    if words.out:
        session.write_plan(words.out)
    if words.save:
        session.save_state(words.save)
    if words.json:
        _json(printing.plan_entry(session.mesh, plan, session.seconds))
    else:
        print(printing.plan_table(session.mesh, plan))
        print(printing.plan_summary(plan))
        if plan.account:
            print(wishing.account_text(plan))
        _remark(plan.warnings)
    return INTERRUPTED if watch.interrupted else DONE


def route(words: Namespace) -> int:
    from meshctl.cli import switching

    return switching.route(words)


def states(words: Namespace) -> int:
    from meshctl.cli import switching

    return switching.states(words)


def predict(words: Namespace) -> int:
    session = Session(words.mesh)
    wavelengths = wavelengths_of(words.wavelengths) if words.wavelengths else None
    for path, suffixes in ((words.matrix, (".npy",)), (words.out, (".csv",)), (words.figure, FIGURES)):
        if path:
            require_suffix(path, *suffixes)
    if wavelengths is None and (words.feature or words.figure):
        raise WrongUsage("--feature and --figure need --wavelengths", remedy="give a range, such as 1540:1560:2001")
    pairs = [session.port_pair(word, "--between") for word in words.between] or None
    if words.between and not (words.out or words.figure):
        raise WrongUsage("--between needs -o or --figure", remedy="name a file to write, or leave it out")
    marked, kind = printing.marked(words.feature)
    pair = session.port_pair(marked, "--feature") if marked else None
    plan = session.open_plan(words.plan, stale_ok=words.stale_ok)
    prediction = session.predict(wavelengths)
    if words.matrix:
        session.write_matrix(prediction, words.matrix)
    spectrum = session.spectrum(wavelengths, pairs) if words.out else None
    if spectrum is not None:
        session.write_spectrum(spectrum, words.out)
    feature = None
    if pair and wavelengths is not None:
        feature = session.feature(wavelengths, pair, kind)
    if words.figure:
        drawn = pairs or ([pair] if pair else None)
        from meshctl.plots import spectrum_figure

        spectrum_figure(session.spectrum(wavelengths, drawn), words.figure, session.mesh.name, feature, pair)
    _remark(session.remarks)
    if words.json:
        return _json(printing.prediction_entry(session.mesh, plan, prediction, feature, session.signals))
    print(printing.prediction_text(session.mesh, plan, prediction, feature, session.signals))
    return DONE


def elements(words: Namespace) -> int:
    session = Session(words.mesh)
    session.open_plan(words.plan, stale_ok=words.stale_ok)
    count = session.write_elements(words.out)
    _remark(session.remarks)
    if words.json:
        return _json({"file": words.out, "rows": count})
    print(f"{words.out}: {printing.counted(count, 'part')} in light order")
    return DONE


def energy(words: Namespace) -> int:
    if len(words.pairs) % 2:
        raise WrongUsage(f"'{words.pairs[-1]}' has no plan", remedy="name meshes and plans in pairs: MESH PLAN ..")
    found = {}
    for folder, path in zip(words.pairs[::2], words.pairs[1::2], strict=True):
        session = Session(folder)
        session.open_plan(path, stale_ok=words.stale_ok)
        _remark(session.remarks)
        found[f"{session.mesh.name} {path}"] = session.energy()
    if words.json:
        return _json(printing.finite({name: dataclasses.asdict(e) for name, e in found.items()}))
    print(printing.energy_table(found))
    return DONE


def tolerance(words: Namespace) -> int:
    from meshctl.cli import scatter

    return scatter.tolerance(words)


def dashboard(words: Namespace) -> int:
    kind = os.environ.get("TERM", "")
    if not all(end.isatty() for end in (sys.stdin, sys.stdout, sys.stderr)) or kind in ("", "dumb"):
        raise WrongUsage(
            f"the dashboard needs a terminal that can move its cursor; this is {kind or 'none'}",
            remedy="run it in one, or take 'meshctl show' and 'meshctl show --words' for text",
        )
    session = Session(words.mesh)
    if words.plan:
        session.open_plan(words.plan, stale_ok=words.stale_ok)
    _remark(session.remarks)
    from meshctl.screens.app import run

    run(session)
    return DONE


def demo(words: Namespace) -> int:
    session = Session(demo_mesh_folder())
    plan = session.solve(session.target("dft"))
    prediction = session.predict()
    if words.json:
        return _json(printing.plan_entry(session.mesh, plan, session.seconds))
    print(printing.demo_text(session.mesh, plan, prediction, session.seconds))
    return DONE
