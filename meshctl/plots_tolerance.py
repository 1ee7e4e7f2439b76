"""Figures of how far dies will be off: histogram, yield against tolerance, sensitivity map, scaling with size.

Public: tolerance_figures, histogram, yield_figure, sensitivity_map, scaling_figure.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from meshctl.errors import UnsoundFile
from meshctl.tolerances.dies import positions
from meshctl.tolerances.lattices import Compared
from meshctl.tolerances.requirement import Yield
from meshctl.tolerances.spec import TOGETHER, yield_curve
from meshctl.tolerances.whole import Tolerance

if TYPE_CHECKING:  # pragma: no cover
    from matplotlib.figure import Figure

BLUE, RED, GREY = "#33658a", "#a4593f", "#b9b9b9"
CURVE = np.linspace(0.25, 2.0, 15)  # scales of the yield's curve, around the one in question
CURVE_DIES = 300


def _figure(wide: float = 7.0, high: float = 4.5) -> Figure:
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(wide, high), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def histogram(made: Tolerance) -> Figure:
    """How often each value of the first measure came, with what is required of it."""
    figure, found = _figure(), made.found
    name = found.task.goal.measures[0]
    column = found.column(name)
    axes = figure.subplots()
    known = column[np.isfinite(column)]
    axes.hist(known, bins=min(60, max(10, len(known) // 20)), color=BLUE, label=f"{len(known)} dies")
    axes.axvline(found.nominal[name], color="black", ls=":", label="without scatter")
    for r in found.requirements:
        if r.measure == name:
            axes.axvline(r.value, color=RED, label=f"required: {r}")
    axes.set(xlabel=name.replace("_", " "), ylabel="dies", title=f"{made.mesh.name}, {made.question.policy}")
    axes.legend(fontsize="small")
    return figure


def yield_figure(scales: Sequence[float], yields: Sequence[Yield], wish: float, title: str) -> Figure:
    """Yield over the scale of all causes, its intervals as a band."""
    figure = _figure()
    axes = figure.subplots()
    axes.fill_between(scales, [y.low for y in yields], [y.high for y in yields], color=GREY, label="95 % interval")
    axes.plot(scales, [y.share for y in yields], "o-", color=BLUE, label=f"{yields[0].trials} dies each")
    axes.axhline(wish, color=RED, label=f"wished: {100 * wish:g} %")
    axes.set(xlabel="scale of the mesh's spread", ylabel="yield", title=title, ylim=(-0.02, 1.02))
    axes.legend(fontsize="small")
    return figure


def sensitivity_map(made: Tolerance) -> Figure:
    """E^2 per rad^2 of an error of every part, each where it lies on the die."""
    assert made.budget is not None, "a map needs the budget"
    size = made.budget.sensitivity
    rows = np.flatnonzero(size > 0.0)
    xy = positions(made.mesh.net)[rows]
    # parts of one cell lie on one place: they are fanned out a little along the light
    _, at, count = np.unique(xy, axis=0, return_inverse=True, return_counts=True)
    order = np.argsort(at.ravel(), kind="stable")
    within = np.empty(len(rows))
    within[order] = np.concatenate([np.arange(c) - 0.5 * (c - 1) for c in count]) if len(count) else []
    pitch = np.min(np.diff(np.unique(xy[:, 0]))) if len(np.unique(xy[:, 0])) > 1 else 100.0
    figure = _figure(8.0, 5.0)
    axes = figure.subplots()
    fan = 0.8 * pitch / max(1, int(count.max(initial=1)))
    dots = axes.scatter(xy[:, 0] + fan * within, -xy[:, 1], c=size[rows], s=22, cmap="viridis")
    figure.colorbar(dots, ax=axes, label="E$^2$ per rad$^2$")
    axes.set(xlabel="along the light (um)", ylabel="across (um)", title=f"{made.mesh.name}: what errors cost")
    return figure


def scaling_figure(rows: Sequence[Compared], title: str = "error over size") -> Figure:
    """Error over the number of modes, a line for each lattice: as set, and corrected where that is known."""
    figure = _figure()
    axes = figure.subplots()
    matrices = [row for row in rows if row.measure == "matrix_error"]
    for name in dict.fromkeys(row.lattice for row in matrices):
        mine = [row for row in matrices if row.lattice == name and row.as_set is not None]
        if not mine:
            continue
        modes = [row.modes for row in mine]
        (line,) = axes.plot(modes, [row.as_set or np.nan for row in mine], "o-", label=f"{name}, as set")
        known = [row.corrected if row.corrected and row.corrected > 1e-12 else np.nan for row in mine]
        axes.plot(modes, known, "s--", color=line.get_color(), label=f"{name}, corrected")
    axes.set_xscale("log")
    sizes = sorted({row.modes for row in matrices})
    axes.set_xticks(sizes, [str(n) for n in sizes])
    axes.set_xticks([], minor=True)
    axes.set(yscale="log", xlabel="modes", ylabel="matrix error", title=title)
    axes.legend(fontsize="small")
    return figure


def tolerance_figures(made: Tolerance, folder: Path) -> list[Path]:
    """Draw what an answer holds into a folder; returns the files.

    Raises
    ------
    UnsoundFile
        Where the folder's name is a file's.
    """
    if folder.exists() and not folder.is_dir():
        raise UnsoundFile("is a file", where=str(folder), remedy="name a folder for the figures")
    folder.mkdir(parents=True, exist_ok=True)
    figures = {}
    if made.found.trials:
        figures["histogram"] = histogram(made)
    if made.found.requirements and not made.interrupted:
        middle = made.spec.allowed[TOGETHER].scale if made.spec is not None else made.question.scale
        scales = (middle * CURVE).tolist()
        wish = made.spec.wish if made.spec is not None else 0.95
        yields = yield_curve(made.found.task, made.found.requirements, scales, CURVE_DIES)
        title = " and ".join(str(r) for r in made.found.requirements)
        figures["yield"] = yield_figure(scales, yields, wish, title)
    if made.budget is not None:
        figures["sensitivity"] = sensitivity_map(made)
    if made.lattices:
        figures["scaling"] = scaling_figure(made.lattices)
    paths = []
    for name, figure in figures.items():
        paths.append(folder / f"{name}.png")
        figure.savefig(paths[-1], dpi=130)
    return paths
