"""Wished lengths of routes: which lengths the chip has between two ports, and those nearest to the wish.

Public: Goal, goal_of.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.solver.search import Search
from meshctl.solver.waves import RouteGraph
from meshctl.solver.wish import Wish

MOST_STEPS = 4000  # layers of length: more would not fit in memory on a large chip
BEYOND = 12  # cells past the wish that are looked at to name lengths that exist


@dataclass(frozen=True, eq=False)
class Goal:
    """Lengths to be tried, the best first."""

    lengths: tuple[int, ...]  # in steps
    advance: np.ndarray  # i32[N, 2], steps of every pass
    in_cells: bool


def goal_of(
    graph: RouteGraph, search: Search, wish: Wish, source: int, sink: int, within_ps: float | None
) -> Goal | str | None:
    """The goal of a wish, None where it wishes no length, or words why no way has that length."""
    node = int(graph.entry[source])
    if wish.cells is not None:
        advance = np.ones(graph.onward.shape, np.int32)
        exists = search.lengths(node, sink, advance, wish.cells + BEYOND)
        if exists[wish.cells]:
            return Goal((wish.cells,), advance, True)
        return _no_such_length(wish, np.flatnonzero(exists))
    if wish.delay_ps is None:
        return None
    return _delay_goal(graph, search, wish, source, node, sink, within_ps)


def _no_such_length(wish: Wish, lengths: np.ndarray) -> str:
    assert wish.cells is not None
    ends = f"'{wish.source}' and '{wish.sinks[0]}'"
    if not len(lengths):
        return f"no way between {ends} passes {wish.cells} cells or up to {BEYOND} more"
    near = lengths[np.argsort(np.abs(lengths - wish.cells), kind="stable")][:4]
    listed = ", ".join(str(x) for x in np.sort(near))
    if len(lengths) > 1 and ((lengths - wish.cells) % 2 == 1).all():
        even = "an even" if lengths[0] % 2 == 0 else "an odd"
        return f"every way between {ends} passes {even} number of cells, never {wish.cells}; near it are {listed}"
    return f"no way between {ends} passes {wish.cells} cells; near it are {listed}"


def _delay_goal(
    graph: RouteGraph, search: Search, wish: Wish, source: int, node: int, sink: int, within_ps: float | None
) -> Goal | str:
    assert wish.delay_ps is not None
    per_um = graph.delay_ps(1.0)
    step, exact = _step_um(graph.length_um)
    if step <= 0.0:
        return f"no guide of the chip has a length, so every way takes 0 ps, not {wish.delay_ps:g} ps"
    within = 0.5 * _shortest(graph.length_um) * per_um if within_ps is None else within_ps
    wanted = (wish.delay_ps / per_um - graph.entry_length_um[source]) / step
    most = int(np.ceil(wanted + max(within / per_um / step, BEYOND)))
    if most > MOST_STEPS:
        longest = MOST_STEPS * step * per_um
        return f"{wish.delay_ps:g} ps is more than the {longest:.4g} ps up to which delays are searched"
    advance = np.round(graph.length_um / step).astype(np.int32)
    lengths = np.flatnonzero(search.lengths(node, sink, advance, max(most, 1)))
    delay = (lengths * step + graph.entry_length_um[source]) * per_um
    off = np.abs(delay - wish.delay_ps)
    slack = 1e-9 * wish.delay_ps if exact else len(graph.onward) ** 0.5 * step * per_um / 8
    order = np.argsort(off, kind="stable")
    good = order[off[order] <= within + slack]
    if not len(good):
        listed = ", ".join(f"{d:.4g}" for d in np.sort(delay[order[:4]])) or "none"
        return (
            f"no way between '{wish.source}' and '{wish.sinks[0]}' takes {wish.delay_ps:g} ps within {within:.3g} ps; "
            f"near it are {listed} ps"
        )
    return Goal(tuple(lengths[good].tolist()), advance, False)


def _shortest(length_um: np.ndarray) -> float:
    positive = length_um[length_um > 1e-9]
    return float(positive.min()) if positive.size else 0.0


def _step_um(length_um: np.ndarray) -> tuple[float, bool]:
    """The step that all lengths are whole multiples of, or else one fine enough."""
    short = _shortest(length_um)
    if short <= 0.0:
        return 0.0, True
    for parts in (1, 2, 3, 4, 5, 6, 8, 10):
        step = short / parts
        if np.allclose(length_um / step, np.round(length_um / step), atol=1e-6):
            return step, True
    return short / 10.0, False
