"""Why not closer: the part of a plan's error that each cause is owed, and the elements that would help most.

Each cause is switched off alone in the model of the chip, and the whole is solved again with the same effort.
Parts of causes that act together do not add up: what one alone cannot mend is in `rest`, and the other end of
the order, each cause with all others off, is told beside.
Public: account, without, most_helpful, error_of, CAUSES, ELEMENTS.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.errors import DriveFinding
from meshctl.mesh.graph import Mesh
from meshctl.mesh.response import Response
from meshctl.optics.elements import COUPLER, LOSS
from meshctl.plan.chip import Chip
from meshctl.plan.placing import fixed_settings
from meshctl.plan.plan import Plan
from meshctl.plan.settling import Effort
from meshctl.plan.wanted import MEASURES, Wanted
from meshctl.solver.target import Target

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.solver.objective import Objective

ELEMENTS = 10
FINE_BITS = 30  # of codes that count as none
WIDER_BITS = 3  # a source without limits goes this many doublings further, in the same steps
LOSSES_TO = 2000  # elements of odd loss tried one by one
STEP_RAD = 1e-4
LEAST_SHARE = 1e-6  # below, it is rounding


def _split(mesh: Mesh) -> Mesh:
    even = np.where(mesh.net.kind == COUPLER, 0.0, mesh.as_built.error_rad)
    return replace(mesh, as_built=replace(mesh.as_built, error_rad=even))


def _lossless(mesh: Mesh) -> Mesh:
    net = mesh.net
    nominal = np.where(net.kind == LOSS, 0.0, net.nominal)
    return replace(
        mesh,
        net=replace(net, nominal=nominal, guide_loss_db_per_cm=0.0),
        as_built=replace(mesh.as_built, loss_db=np.zeros(net.n_elements)),
    )


def _alone(mesh: Mesh) -> Mesh:
    channels = replace(mesh.channels, ground_ohm=np.zeros(len(mesh.channels.ground_ohm)))
    return replace(mesh, actuators=replace(mesh.actuators, crosstalk=None), channels=channels)


def _unlimited(mesh: Mesh) -> Mesh:
    c, far = mesh.channels, np.full(len(mesh.channels), np.inf)
    bits = c.bits + WIDER_BITS
    wider = (2.0**bits - 1.0) / (2.0**c.bits - 1.0)
    channels = replace(
        c,
        bits=bits,
        max_v=c.min_v + (c.max_v - c.min_v) * wider,
        max_ma=c.min_ma + (c.max_ma - c.min_ma) * wider,
        limit_v=far,
        limit_ma=far,
        limit_mw=far,
    )
    return replace(mesh, channels=channels)


def _sound(mesh: Mesh) -> Mesh:
    as_built = replace(mesh.as_built, stuck_rad=np.full(mesh.net.n_settings, np.nan))
    return replace(mesh, as_built=as_built, actuators=replace(mesh.actuators, dead=np.zeros(len(mesh.actuators), bool)))


def _finest(mesh: Mesh) -> Mesh:
    return replace(mesh, channels=replace(mesh.channels, bits=np.maximum(mesh.channels.bits, FINE_BITS)))


# what may keep an answer from being nearer: what is said of it, and the mesh without it
CAUSES: dict[str, tuple[str, Callable[[Mesh], Mesh]]] = {
    "splitting": ("splitting errors of the couplers", _split),
    "losses": ("losses, which differ from path to path", _lossless),
    "crosstalk": ("crosstalk and shared grounds", _alone),
    "limits": ("limits of the source", _unlimited),
    "faults": ("stuck settings and dead actuators", _sound),
    "codes": ("steps of the codes", _finest),
    "dispersion": ("dispersion over the band", lambda mesh: mesh),
}


def _present(mesh: Mesh, wish: Target | Objective, plan: Plan) -> list[str]:
    """Causes that there are on this chip for this wish."""
    net, as_built = mesh.net, mesh.as_built
    lossy = as_built.loss_db.any() or (net.nominal[net.kind == LOSS]).any()
    lossy = lossy or bool(net.guide_loss_db_per_cm and net.length_um.any())
    there = {
        "splitting": as_built.error_rad[net.kind == COUPLER].any(),
        "losses": lossy,
        "crosstalk": mesh.actuators.crosstalk is not None or mesh.channels.ground_ohm.any(),
        "limits": plan.reason == "limits",
        "faults": bool((~np.isnan(as_built.stuck_rad)).any() or mesh.actuators.dead.any()),
        "codes": True,
        "dispersion": isinstance(wish, Target)
        and wish.wavelengths_nm is not None
        and (wish.least_db is None or bool(np.isnan(wish.least_db).all()))
        and bool((wish.wavelengths_nm != net.wavelength_nm).any()),
    }
    return [cause for cause, present in there.items() if present]


def without(mesh: Mesh, wish: Target | Objective, causes: Iterable[str]) -> tuple[Mesh, Target | Objective]:
    """The same chip and wish with some of CAUSES switched off.

    Dispersion is switched off by asking for the wish of every wavelength at the centre.
    """
    for cause in causes:
        mesh = CAUSES[cause][1](mesh)
        if cause == "dispersion" and isinstance(wish, Target) and wish.wavelengths_nm is not None:
            wish = replace(wish, wavelengths_nm=np.full(len(wish.wavelengths_nm), mesh.net.wavelength_nm))
    return mesh, wish


def error_of(plan: Plan) -> tuple[str, float]:
    """What the plan is judged by, one of MEASURES, and how much of it is left."""
    if not math.isnan(plan.matrix_error):
        return "matrix_error", plan.matrix_error
    return next((name, plan.measures[name]) for name in MEASURES if name in plan.measures)


def account(
    mesh: Mesh,
    wish: Target | Objective,
    plan: Plan,
    best_effort: bool,
    least_power: bool,
    aware: bool,
    joint: bool,
    effort: Effort,
) -> dict[str, Any]:
    """The account of a plan.

    Returns
    -------
    dict
        `measure` and `error` of the plan; `causes`, by what switching each off gains: `cause`, `words`, `without`
        (error where it alone is off), `part` (error - without), `alone` (error where all others are off); `all_off`;
        `rest` (error - all_off - sum of parts: below 0 where parts overlap, above where causes hide one another);
        `elements`, see `most_helpful`. Empty where it was stopped.

    Cost: two solves for each cause there is.
    """
    measure, error = error_of(plan)

    def solved(off: Iterable[str]) -> float:
        from meshctl.plan.pipeline import solve

        there, asked = without(mesh, wish, off)
        try:
            again = solve(
                there, asked, best_effort=best_effort, least_power=least_power, aware=aware, joint=joint, effort=effort
            )
        except DriveFinding:
            return math.nan
        return error_of(again)[1]

    present = _present(mesh, wish, plan)
    causes: list[dict[str, Any]] = []
    for cause in present:
        left = solved([cause])
        alone = solved([other for other in present if other != cause]) if len(present) > 1 else error
        causes.append(
            {
                "cause": cause,
                "words": CAUSES[cause][0],
                "without": _number(left),
                "part": _number(error - left),
                "alone": _number(alone),
            }
        )
    all_off = solved(present)
    if effort.cancel is not None and effort.cancel():
        return {}  # the solves were cut short and say nothing
    causes.sort(key=lambda entry: -(entry["part"] or 0.0))
    parts = sum(entry["part"] or 0.0 for entry in causes)
    return {
        "measure": measure,
        "error": error,
        "causes": causes,
        "all_off": _number(all_off),
        "rest": _number(error - all_off - parts),
        "elements": most_helpful(mesh, wish, plan),
    }


def _number(value: float) -> float | None:
    return None if math.isnan(value) else float(value)


def most_helpful(mesh: Mesh, wish: Target | Objective, plan: Plan) -> list[dict[str, Any]]:
    """The elements whose mending would help most, by the derivative of what is to be made small.

    Returns
    -------
    list of dict, at most ELEMENTS
        `element`, `cause`, `off` (rad, or dB for a loss), and `share` of what is left of what is to be made small,
        codes in. For a splitting error e it is e times the derivative by it over two, as the whole grows with the
        square of the errors; for a setting that nothing moves what a parabola through its derivatives promises; for
        a loss that stands out from its kind what equal loss would change. Other settings stay where they are.
    """
    wanted = Wanted.of(wish, (len(mesh.net.outputs), len(mesh.net.inputs)))
    chip = Chip(mesh)
    settings = mesh.as_built.in_force(plan.settings)
    fixed = fixed_settings(chip)
    settings = np.where(fixed, plan.actual, settings)
    as_built = chip.as_built(chip.levels(plan.codes))
    here = wanted.value(Response(mesh.net, as_built).matrix(settings, wanted.wavelengths_nm))
    total = max(here, wanted.value(chip.matrix(plan.codes, wanted.wavelengths_nm)))
    if total <= 0.0:
        return []
    found = [*_splits(mesh, as_built.error_rad, settings, wanted, total)]
    found += _clamped(mesh, as_built, settings, np.flatnonzero(fixed), wanted, total)
    found += _odd_losses(mesh, as_built, settings, wanted, here, total)
    found = [entry for entry in found if entry["share"] > LEAST_SHARE]
    return sorted(found, key=lambda entry: -entry["share"])[:ELEMENTS]


def _splits(
    mesh: Mesh, error_rad: np.ndarray, settings: np.ndarray, wanted: Wanted, total: float
) -> Iterable[dict[str, Any]]:
    net = mesh.net
    rows = np.flatnonzero((net.kind == COUPLER) & (error_rad != 0.0))
    if not len(rows):
        return
    # every coupler with an error as a setting of its own, all else as it stands
    value = Response(net, replace(mesh.as_built, error_rad=error_rad)).values(settings)
    setting_of = np.full(net.n_elements, -1, np.int32)
    setting_of[rows] = np.arange(len(rows))
    loose = replace(net, setting_of=setting_of, nominal=np.where(net.kind == LOSS, net.nominal, value))
    plain = replace(mesh.as_built, error_rad=np.zeros(net.n_elements), stuck_rad=np.full(len(rows), np.nan))
    pull = wanted.pull(Response(loose, plain), value[rows])
    shares = 0.5 * pull * error_rad[rows] / total
    names = net.names.elements
    for row, share in zip(rows.tolist(), shares.tolist(), strict=True):
        yield {"element": names[row], "cause": "splitting", "off": float(error_rad[row]), "share": share}


def _clamped(
    mesh: Mesh, as_built: Any, settings: np.ndarray, rows: np.ndarray, wanted: Wanted, total: float
) -> Iterable[dict[str, Any]]:
    free = Response(mesh.net, replace(as_built, stuck_rad=np.full(mesh.net.n_settings, np.nan)))
    for row in rows.tolist():
        step = np.zeros(len(settings))
        step[row] = STEP_RAD
        above, below = wanted.pull(free, settings + step)[row], wanted.pull(free, settings - step)[row]
        slope, bend = 0.5 * (above + below), (above - below) / (2.0 * STEP_RAD)
        share = min(0.5 * slope**2 / bend / total, 1.0) if bend > 0.0 else 0.0
        off = slope / bend if bend > 0.0 else 0.0
        stuck = not np.isnan(mesh.as_built.stuck_rad[row])
        name = mesh.net.setting_names[row]
        yield {"element": name, "cause": "stuck" if stuck else "dead", "off": float(off), "share": float(share)}


def _odd_losses(
    mesh: Mesh, as_built: Any, settings: np.ndarray, wanted: Wanted, here: float, total: float
) -> Iterable[dict[str, Any]]:
    net, loss = mesh.net, as_built.loss_db
    usual = np.zeros(net.n_elements)
    for kind in np.unique(net.kind):
        usual[net.kind == kind] = np.median(loss[net.kind == kind])
    rows = np.flatnonzero(np.abs(loss - usual) > 1e-12)
    rows = rows[np.argsort(-np.abs(loss - usual)[rows], kind="stable")][:LOSSES_TO]
    for row in rows.tolist():
        even = loss.copy()
        even[row] = usual[row]
        matrix = Response(net, replace(as_built, loss_db=even)).matrix(settings, wanted.wavelengths_nm)
        share = (here - wanted.value(matrix)) / total
        yield {
            "element": net.names.elements[row],
            "cause": "losses",
            "off": float(loss[row] - usual[row]),
            "share": float(share),
        }
