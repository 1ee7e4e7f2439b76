"""Routes and splits from words to volts: states of switches, settings, codes, and what then arrives.

Public: RouteTarget, route, predict_routes, asked_of.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from meshctl.errors import NoRoutes, UnsoundFile, WrongUsage
from meshctl.mesh.graph import Mesh, frozen
from meshctl.optics.grid import wavelengths_of
from meshctl.optics.measures import throughput, throughput_per_input
from meshctl.plan.chip import Chip
from meshctl.plan.pipeline import Prediction, headroom_v
from meshctl.plan.placing import Placed, fixed_settings, place, reach_of
from meshctl.plan.plan import ROUTES, Plan
from meshctl.plan.signals import Band, Signal, power_error, signals
from meshctl.solver.reach import Reach, full_reach
from meshctl.solver.route import Route, Routing, find_routes
from meshctl.solver.switches import settings_for
from meshctl.solver.unused import POLICIES, Unused, unused_states
from meshctl.solver.waves import RouteGraph, route_graph
from meshctl.solver.wish import Wish, parse_wish

HALF_BAND_NM, BAND_POINTS = 10.0, 201  # of the default band: fringes of a millimetre of loop are resolved
SCORE_WORK = 30_000  # cells times wavelengths of one trial of the free cells: some 0.2 s with loops
LEAST_POINTS = 21
GOOD_ENOUGH_DB = 1e-3  # of ripple and crosstalk together: below what a power meter resolves
_DEAD_ROUNDS, _DEAD_WITHIN = 8, 1e-9  # rad; as for matrices
LOSS_WITHIN_DB = 0.5  # of what the search expects; beyond, the chip does something else
CROSSTALK_SHOWS_DB = -20.0  # in practice a detector's error shows from here on (common practice)


@dataclass(frozen=True)
class RouteTarget:
    """A wish for routes, with all that is needed to solve it again."""

    words: tuple[str, ...]
    avoid: tuple[str, ...] = ()
    priorities: tuple[float, ...] | None = None
    unused: str = ""  # a key of solver.unused.POLICIES; "": the best of all
    seed: int = 0
    seconds: float = 10.0
    band: str = ""  # as for --wavelengths; "": 10 nm to either side of the centre
    best_effort: bool = False

    @property
    def wishes(self) -> list[Wish]:
        return [parse_wish(words) for words in self.words]

    def wavelengths_nm(self, centre_nm: float) -> np.ndarray:
        """The band, float (W,)."""
        if self.band:
            return wavelengths_of(self.band, "--band")
        return np.linspace(centre_nm - HALF_BAND_NM, centre_nm + HALF_BAND_NM, BAND_POINTS)

    def described(self) -> dict[str, Any]:
        """As a plan file keeps it."""
        listed = None if self.priorities is None else list(self.priorities)
        entry = {**vars(self), "words": list(self.words), "avoid": list(self.avoid), "priorities": listed}
        return {"kind": ROUTES, "source": " ".join(self.words), **entry}


def asked_of(plan: Plan) -> RouteTarget:
    """The wish that a plan for routes keeps.

    Raises
    ------
    UnsoundFile
    """
    entry = {k: v for k, v in plan.target.items() if k in RouteTarget.__dataclass_fields__}
    rank = entry["priorities"]
    lists = {"words": tuple(entry["words"]), "avoid": tuple(entry["avoid"])}
    asked = RouteTarget(**{**entry, **lists, "priorities": None if rank is None else tuple(rank)})
    try:
        _ = asked.wishes, asked.wavelengths_nm(1.0)
    except WrongUsage as finding:
        raise UnsoundFile(f"the plan's wish cannot be read: {finding.what}", remedy="route again") from None
    return asked


def route(mesh: Mesh, asked: RouteTarget) -> Plan:
    """Volts and codes for routes and splits, and what will arrive.

    Parameters
    ----------
    mesh : Mesh, with or without loops
    asked : RouteTarget; with `best_effort` routes that do not go together are left out, last named first, and
        actuators are held at their limits

    Returns
    -------
    Plan

    Raises
    ------
    NoRoutes
        With the routes in conflict, and what is proved.
    WrongUsage
        For unknown ports and cells, and the like.
    Unreachable, VoltageOutOfRange and other findings of the drive
        Where limits are in the way and `best_effort` is off.

    Cost: see `solver.route.find_routes`; then the chip is simulated up to five times over the band.
    """
    chip = Chip(mesh)
    wishes, waves = asked.wishes, asked.wavelengths_nm(mesh.net.wavelength_nm)
    graph = route_graph(mesh.net, mesh.as_built, reach_of(chip))
    rank: Sequence[float] | None = asked.priorities
    if rank is None and asked.best_effort:
        rank = [0.0] * len(wishes)
    routing = find_routes(graph, wishes, avoid=asked.avoid, priorities=rank, seed=asked.seed, seconds=asked.seconds)
    if not routing.found:
        raise _refusal(asked, routing)
    kept = [wish for wish in wishes if wish not in routing.dropped]
    judge = _Judge(chip, graph, routing, kept, waves)
    free = _free_cells(graph, routing, asked, judge)
    settings, placed = _settled(chip, graph, free, routing, asked.best_effort)
    codes = placed.codes
    band = Band.of(chip.response_at(codes), chip.actual(codes), [w.source for w in wishes], waves)
    arriving = signals(mesh.net.outputs, kept, band)
    prediction = _prediction(chip, codes, None)
    return Plan(
        mesh.name,
        mesh.hash,
        asked.described(),
        frozen(settings),
        frozen(prediction.volts),
        frozen(codes),
        frozen(prediction.actual),
        frozen(prediction.power_mw),
        frozen(headroom_v(chip, prediction.volts)),
        float("nan"),
        float("nan"),
        {"power_error": _unlimited_error(chip, free, routing, wishes)},
        prediction.throughput,
        prediction.throughput_per_input.tolist(),
        "limits" if placed.held else routing.status,
        _warnings(chip, placed, routing, free, arriving),
        seed=asked.seed,
        power_error=power_error(mesh.net.outputs, wishes, band.centre),
        routes=[_entry(graph, r, s) for r, s in zip(routing.routes, arriving, strict=True)],
        search=_search(routing, free),
    )


def predict_routes(mesh: Mesh, plan: Plan, wavelengths_nm: np.ndarray | None = None) -> tuple[Prediction, list[Signal]]:
    """What the codes of a plan for routes give: the chip as a whole, and what arrives at each route's output.

    Parameters
    ----------
    wavelengths_nm : float (W,): of the matrices and of the band; None: the centre, and the plan's band
    """
    chip, asked = Chip(mesh), asked_of(plan)
    given = asked.wavelengths_nm(mesh.net.wavelength_nm) if wavelengths_nm is None else wavelengths_nm
    ends = {(r["input"], r["output"]) for r in plan.routes}
    kept = [w for w in asked.wishes if {(w.source, sink) for sink in w.sinks} <= ends]
    asked_for = {(w.source, sink) for w in kept for sink in w.sinks}
    for source, sink in sorted(ends):
        if source not in mesh.net.inputs or sink not in mesh.net.outputs:
            said = f"the plan's route {source}:{sink} is not on mesh '{mesh.name}'"
            raise UnsoundFile(said, remedy="route again")
        if (source, sink) not in asked_for:
            raise UnsoundFile(f"the plan has a route {source}:{sink} that its wish lacks", remedy="route again")
    band = Band.of(chip.response_at(plan.codes), chip.actual(plan.codes), [w.source for w in kept], given)
    return _prediction(chip, plan.codes, wavelengths_nm), signals(mesh.net.outputs, kept, band)


def _prediction(chip: Chip, codes: np.ndarray, wavelengths_nm: np.ndarray | None) -> Prediction:
    levels, actual, response = chip.levels(codes), chip.actual(codes), chip.response_at(codes)
    matrix = response.matrix(actual, wavelengths_nm)
    return Prediction(
        matrix,
        actual,
        chip.volts(levels),
        chip.power_mw(levels),
        float("nan"),
        float("nan"),
        throughput(matrix),
        throughput_per_input(matrix),
        wavelengths_nm,
        response.waves.residual if response.loops else None,
        response.waves.dark_loops if response.loops else 0,
    )


def _free_cells(graph: RouteGraph, routing: Routing, asked: RouteTarget, judge: _Judge) -> Unused:
    """States of the cells that no route needs: the best by simulation, or the first that nothing is wrong with."""
    best: tuple[tuple[int, float], Unused] | None = None
    for policy in [asked.unused] if asked.unused else POLICIES:
        found = unused_states(graph, routing.share, policy=policy, seed=asked.seed)
        key = found.beside_routes, judge(found.share)
        if best is None or key < best[0]:
            best = key, found
        if best[0] <= (0, GOOD_ENOUGH_DB) and judge.loops:
            break
    assert best is not None
    return best[1]


class _Judge:
    """How good states of the free cells are: ripple, and what the crosstalk adds, worst of all routes, in dB."""

    def __init__(
        self, chip: Chip, graph: RouteGraph, routing: Routing, kept: Sequence[Wish], waves: np.ndarray
    ) -> None:
        self.chip, self.graph, self.routing, self.kept = chip, graph, routing, kept
        points = min(len(waves), max(LEAST_POINTS, SCORE_WORK // max(len(graph.switches), 1)))
        self.loops = chip.response.loops
        self.waves = waves[np.round(np.linspace(0, len(waves) - 1, points)).astype(int)]

    def __call__(self, share: np.ndarray) -> float:
        chip = self.chip
        settings = settings_for(self.graph.switches, share, self.routing.entering)
        band = Band.of(chip.response, settings, [wish.source for wish in self.kept], self.waves)
        found = signals(chip.net.outputs, self.kept, band)
        ripple = max(np.inf if s.ripple_db is None else s.ripple_db for s in found)
        added = max(
            10.0 * np.log10(1.0 + 10.0 ** (0.1 * s.worst_crosstalk_db)) if s.worst_crosstalk_db is not None else 0.0
            for s in found
        )
        # what is equal but for rounding: where rings can form in the order of policies, else what power off leaves
        equal = round(float(ripple + added), 6)
        return equal if self.loops else equal + 1e-9 * self._unsafe(share)

    def _unsafe(self, share: np.ndarray) -> int:
        """Free switches that change their state when the drive fails."""
        switches, free = self.graph.switches, np.isnan(self.routing.share) & ~np.isnan(share)
        at_rest = switches.cross_share(switches.idle_rad).mean(1) >= 0.5
        return int((at_rest != (share >= 0.5))[free].sum())


def _settled(
    chip: Chip, graph: RouteGraph, free: Unused, routing: Routing, best_effort: bool
) -> tuple[np.ndarray, Placed]:
    """Settings and codes, what dead heaters take from neighbours and phases that gaps drag along known."""
    dead = fixed_settings(chip) & np.isnan(chip.mesh.as_built.stuck_rad)
    warmed = chip.actuators.crosstalk is not None and bool(dead.any())
    as_built, background = chip.mesh.as_built, np.zeros(chip.net.n_settings)
    for _ in range(_DEAD_ROUNDS):
        settings = settings_for(graph.switches, free.share, routing.entering)
        placed = place(chip, settings, best_effort=best_effort)
        own = np.bincount(chip.actuators.setting, placed.change, minlength=chip.net.n_settings)
        warmth = np.where(dead, chip.total_changes(placed.change) - own, 0.0)
        moved = chip.as_built(placed.levels)
        off = float(np.abs(moved.error_rad - as_built.error_rad).max(initial=0.0))
        if warmed:
            off = max(off, float(np.abs(warmth - background).max()))
        if off < _DEAD_WITHIN:
            break
        as_built, background = moved, warmth
        graph = route_graph(chip.net, as_built, reach_of(chip, background))
    return settings, placed


def _unlimited_error(chip: Chip, free: Unused, routing: Routing, wishes: Sequence[Wish]) -> float:
    """The power error before limits and codes: phases turn fully, couplers cross twice."""
    fixed, bound, full = fixed_settings(chip), reach_of(chip), full_reach(chip.net.setting_is_angle)
    low, high = np.where(fixed, bound.low, full.low), np.where(fixed, bound.high, full.high)
    reach = Reach(low, high, bound.period, np.clip(bound.idle, low, high))
    switches = route_graph(chip.net, chip.mesh.as_built, reach).switches
    settings = settings_for(switches, free.share, routing.entering)
    power = np.abs(chip.response.matrix(settings)) ** 2
    return power_error(chip.net.outputs, wishes, power[:, [chip.net.inputs.index(w.source) for w in wishes]])


def _entry(graph: RouteGraph, found: Route, signal: Signal) -> dict[str, Any]:
    """A route as a plan file keeps it."""
    names = graph.switches.names
    cells = [names[node >> 2] for node, _ in found.passes]
    return {
        **vars(signal),
        "cells": cells,
        "states": ["cross" if state else "bar" for _, state in found.passes],
        "length_um": found.length_um,
        "delay_ps": found.delay_ps,
    }


def _search(routing: Routing, free: Unused) -> dict[str, Any]:
    return {
        "status": routing.status,
        "words": routing.words,
        "left_out": [str(wish) for wish in routing.dropped],
        "unused": free.policy,
        "turned": free.turned,
        "driven": free.driven,
        "loops": free.loops,
        "loops_beside_routes": free.beside_routes,
    }


def _warnings(chip: Chip, placed: Placed, routing: Routing, free: Unused, arriving: Sequence[Signal]) -> list[str]:
    said = list(placed.warnings)
    if routing.dropped:
        said.append(f"left out: {', '.join(map(str, routing.dropped))}: {routing.words}")
    if free.loops:
        said.append(
            f"{free.loops} closed loops are left, {free.beside_routes} of them beside routes: notches may show in "
            "the spectrum; choose other ports, or fewer routes"
        )
    if placed.held:
        names = chip.mesh.actuator_names
        listed = ", ".join(f"'{names[a]}'" for a in placed.held[:6])
        said.append(f"held at a limit: {listed}{' and more' if len(placed.held) > 6 else ''}")
    for found, signal in zip(routing.routes, arriving, strict=True):
        loss, expected = signal.insertion_loss_db, found.loss_db
        if loss is None:
            said.append(f"{signal.name}: no light arrives")
        elif not found.wish.is_split and abs(loss - expected) > LOSS_WITHIN_DB:
            said.append(f"{signal.name}: {loss:.2f} dB are lost, {expected:.2f} dB by the parts passed alone")
        worst = signal.worst_crosstalk_db
        if worst is not None and worst > CROSSTALK_SHOWS_DB:
            said.append(f"{signal.name}: crosstalk comes to {worst:.1f} dB within the band")
    return said


def _refusal(asked: RouteTarget, routing: Routing) -> NoRoutes:
    """Who is in whose way, and how sure that is."""
    names = [str(wish) for wish in routing.conflict]
    if routing.status == "not_found":
        return NoRoutes(
            f"routes {_and(list(asked.words))}: {routing.words} ({asked.seconds:g} s); none were proved impossible",
            status=routing.status,
            conflict=names,
            proof="none",
            remedy="give more --seconds or another --seed",
        )
    complete = routing.status == "impossible"
    proof = "complete proof" if complete else "bounded proof: longer ways are not ruled out"
    what = f"route {names[0]} is impossible" if len(names) == 1 else f"routes {_and(names)} cannot go together"
    fewer = ", avoid fewer cells" if asked.avoid else ""
    together = ", or leave some out with --best-effort" if len(asked.words) > 1 else ""
    return NoRoutes(
        f"{what}: {routing.words} ({proof})",
        status=routing.status,
        conflict=names,
        proof="complete" if complete else "bounded",
        remedy=f"choose other ports{fewer}{together}",
    )


def _and(names: list[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
