"""The Python interface: the same calls as the commands, on objects in place of files.

Public: solve, route, tolerance, predict.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.errors import WrongSize, WrongUsage
from meshctl.mesh.graph import Mesh
from meshctl.optics.grid import checked_wavelengths
from meshctl.plan import pipeline
from meshctl.plan.plan import Plan, check_fresh
from meshctl.solver.target import Target, make_target, read_target

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.tolerances.whole import Tolerance

SECONDS_MOST = 1e9


def _require(mesh: Any, plan: Any = None, *, with_plan: bool = False) -> None:
    """Refuse a path or anything else where a mesh or a plan must stand."""
    if not isinstance(mesh, Mesh):
        raise WrongUsage(
            f"mesh is {_said(mesh)}, must be a Mesh", remedy='load it first: meshctl.load("meshes/plover8")'
        )
    if with_plan and not isinstance(plan, Plan):
        raise WrongUsage(
            f"plan is {_said(plan)}, must be a Plan",
            remedy="give what meshctl.solve or meshctl.route returned; a file is read by meshctl.plan.plan.read_plan",
        )


def _said(value: Any) -> str:
    shown = repr(value)
    return f"{shown if len(shown) <= 40 else f'{shown[:37]}..'} ({type(value).__name__})"


def _positive(name: str, value: Any) -> None:
    number = isinstance(value, int | float) and not isinstance(value, bool)
    if not number or not 0.0 < value < SECONDS_MOST:
        raise WrongUsage(f"{name} is {_said(value)}", remedy=f"allowed is a number above 0 and below {SECONDS_MOST:g}")


def _whole(name: str, value: Any, low: int) -> None:
    if not isinstance(value, int | np.integer) or isinstance(value, bool) or value < low:
        raise WrongUsage(f"{name} is {_said(value)}", remedy=f"allowed is a whole number from {low}")


def _words(name: str, value: Any) -> tuple[str, ...]:
    """Names from Python: several, or a single one."""
    found = (value,) if isinstance(value, str) else tuple(value)
    for word in found:
        if not isinstance(word, str):
            raise WrongUsage(f"{name} holds {_said(word)}", remedy="give a list of names")
    return found


def solve(
    mesh: Mesh,
    target: Any,
    *,
    free: str = "nothing",
    best_effort: bool = False,
    least_power: bool = False,
    refine: bool | None = None,
    starts: int = 1,
    seconds: float | None = None,
    seed: int = 0,
    explain: bool = False,
) -> Plan:
    """Voltages for a target.

    Parameters
    ----------
    mesh : Mesh
    target : complex array (out, in), Target, words such as "haar:7", an Objective, or a function
        A function takes the matrix as a complex jax array (1, out, in) and returns, by jax.numpy, a real number
        that is to be small; for more wavelengths than the centre wrap it in `solver.objective.OwnWish`.
    free : port phases that do not count: nothing, outputs, inputs, both (a Target brings its own)
    best_effort : hold what is out of reach at its limit rather than raise
    least_power : use what the matrix does not see to save power
    refine : descend on the whole chip model; None: where the closed form is not exact
    starts, seconds, seed : of the descent; `seconds` makes the answer depend on the machine
    explain : also say what keeps the answer from being better, in `plan.account`

    Returns
    -------
    Plan

    Raises
    ------
    NotUnitary, WrongSize, NotFinite, NoClosedForm, Unreachable, ..

    Example
    -------
    >>> import meshctl
    >>> plan = meshctl.solve(meshctl.lattice("rectangular", modes=4), "dft")
    >>> plan.fidelity > 0.999999
    True
    """
    _require(mesh)
    _whole("starts", starts, 1)
    _whole("seed", seed, 0)
    if seconds is not None:
        _positive("seconds", seconds)
    effort = pipeline.Effort(refine, starts, seconds, seed)
    return pipeline.solve(
        mesh,
        _wish(mesh, target, free),
        best_effort=best_effort,
        least_power=least_power,
        effort=effort,
        explain=explain,
    )


def _wish(mesh: Mesh, target: Any, free: str) -> Any:
    """A Target or an Objective from what a user may give."""
    net = mesh.net
    shape = (len(net.outputs), len(net.inputs))
    if isinstance(target, str):
        return read_target(target, shape, free, net.inputs, net.outputs)
    if isinstance(target, Target):
        if not target.plain:
            if target.size != shape:
                raise WrongSize(
                    f"the target has {target.size[0]} outputs and {target.size[1]} inputs; the mesh has {shape[0]} and "
                    f"{shape[1]}",
                    remedy="make it for this mesh",
                )
            return target
        return make_target(target.matrix, shape, target.free, target.source)
    if hasattr(target, "evaluate"):
        return target
    if callable(target):
        from meshctl.solver.objective import OwnWish

        return OwnWish(target)
    try:
        matrix = np.asarray(target)
    except ValueError:  # rows of different length
        raise WrongSize(
            "the target is no matrix: its rows differ in length",
            remedy=f"give {shape[0]} rows of {shape[1]} numbers each",
        ) from None
    return make_target(matrix, shape, free)


def route(
    mesh: Mesh,
    wishes: Iterable[str],
    *,
    avoid: Iterable[str] = (),
    priorities: Sequence[float] | None = None,
    unused: str = "",
    band: str = "",
    best_effort: bool = False,
    seconds: float = 10.0,
    seed: int = 0,
) -> Plan:
    """Voltages for routes and splits.

    Parameters
    ----------
    mesh : Mesh
    wishes : such as "in1:out3", "in2:out1=0.7,out4=0.3", "p1:p9@12cells" or "p1:p9@85ps"
    avoid : cells and fixed parts by name that no route may pass
    priorities : a number for each wish; those of lowest priority are left out where not all go together
    unused : state of cells that no route needs: cross, bar, cleanest, rest; "": what gives least ripple
    band : wavelengths of the check, such as "1540:1560:201"; "": 10 nm to either side of the centre
    best_effort : leave out what does not go together, and hold actuators at their limits, rather than raise
    seconds, seed : of the search and the proof

    Returns
    -------
    Plan; `plan.routes` lists what arrives at each output

    Raises
    ------
    NoRoutes, WrongUsage, VoltageOutOfRange, ..

    Example
    -------
    >>> import meshctl
    >>> plan = meshctl.route(meshctl.lattice("rectangular", modes=4), ["in1:out3", "in2:out1"])
    >>> [r["output"] for r in plan.routes]
    ['out3', 'out1']
    """
    from meshctl.plan import switching

    _require(mesh)
    _whole("seed", seed, 0)
    _positive("seconds", seconds)
    asked = switching.RouteTarget(
        _words("wishes", wishes),
        _words("avoid", avoid),
        None if priorities is None else _ranks(priorities),
        unused,
        seed,
        seconds,
        band,
        best_effort,
    )
    return switching.route(mesh, asked)


def _ranks(priorities: Any) -> tuple[float, ...]:
    try:
        ranks = tuple(float(p) for p in priorities)
    except (TypeError, ValueError):
        ranks = (math.nan,)
    if not all(map(math.isfinite, ranks)):
        raise WrongUsage(
            f"priorities are {_said(priorities)}", remedy="give a finite number for each wish, such as [2, 1]"
        )
    return ranks


def tolerance(
    mesh: Mesh,
    plan: Plan,
    *,
    trials: int = 1000,
    seed: int = 0,
    policy: str = "as-set",
    require: Iterable[str] = (),
    until: str | None = None,
    scale: float = 1.0,
    spec: bool = False,
    wish: str = "95%",
    folder: str | Path | None = None,
    processes: int = 1,
    cluster: str | None = None,
    lattices: bool = False,
    stale_ok: bool = False,
) -> Tolerance:
    """How far dies that scatter as the mesh's spread says will be off, and what the next chip needs.

    Parameters
    ----------
    trials, seed : dies, each drawn from seed and its number alone
    policy : as-set (the plan's codes on each die), corrected (each die corrected cell by cell), refined (solved anew)
    require : what a good die meets, such as "fidelity>=0.99"
    until : half width of the yield's interval at which to stop, such as "1%"
    scale : of all of the spread
    spec, wish : also how far each cause may scatter for the wished yield
    folder : where trials are kept as they come; a run that was broken off there goes on
    lattices : compare rectangles, triangles, spare columns and Benes lattices that scatter alike
    processes, cluster : who runs them; with several processes call this under `if __name__ == "__main__"`

    Returns
    -------
    Tolerance; `.found` the trials, `.budget` the analytic account, `.spec` what is allowed

    Raises
    ------
    StalePlan, UnsoundFile, WrongUsage, OutOfReach

    Example
    -------
    >>> import meshctl
    >>> mesh = meshctl.load("meshes/plover8")
    >>> far = meshctl.tolerance(mesh, meshctl.solve(mesh, "dft"), trials=50, scale=0.01)
    >>> far.found.trials
    50
    """
    from meshctl.tolerances.whole import Question, answer

    _require(mesh, plan, with_plan=True)
    check_fresh(mesh, plan, stale_ok=stale_ok)
    place = None if folder is None else Path(folder)
    required = (require,) if isinstance(require, str) else tuple(require)
    return answer(
        mesh,
        plan,
        Question(trials, seed, policy, required, until, scale, spec, wish, place, processes, cluster, lattices),
    )


def predict(mesh: Mesh, plan: Plan, wavelengths_nm: np.ndarray | None = None, *, stale_ok: bool = False) -> np.ndarray:
    """The matrix that a plan's codes give.

    Parameters
    ----------
    wavelengths_nm : float (W,), or None for the centre wavelength

    Returns
    -------
    complex (out, in), or (W, out, in) where wavelengths are given

    Raises
    ------
    StalePlan
        For a plan of another mesh.
    WrongUsage
        For wavelengths outside 200 to 20000 nm.

    Example
    -------
    >>> import meshctl
    >>> mesh = meshctl.lattice("rectangular", modes=4)
    >>> meshctl.predict(mesh, meshctl.solve(mesh, "dft"), [1549.0, 1551.0]).shape
    (2, 4, 4)
    """
    _require(mesh, plan, with_plan=True)
    check_fresh(mesh, plan, stale_ok=stale_ok)
    wavelengths = None if wavelengths_nm is None else checked_wavelengths(wavelengths_nm)
    if plan.is_routes:
        from meshctl.plan.switching import predict_routes

        return predict_routes(mesh, plan, wavelengths)[0].matrix
    return pipeline.predict(mesh, plan, wavelengths).matrix
