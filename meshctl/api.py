"""The Python interface: the same calls as the commands, on objects in place of files.

Public: solve, route, tolerance, predict.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.errors import WrongSize
from meshctl.mesh.graph import Mesh
from meshctl.plan import pipeline
from meshctl.plan.plan import Plan, check_fresh
from meshctl.solver.target import Target, make_target, read_target

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.tolerances.whole import Tolerance


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
    return make_target(target, shape, free)


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

    if isinstance(wishes, str):
        wishes = [wishes]
    rank = None if priorities is None else tuple(float(p) for p in priorities)
    asked = switching.RouteTarget(tuple(wishes), tuple(avoid), rank, unused, seed, seconds, band, best_effort)
    return switching.route(mesh, asked)


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

    check_fresh(mesh, plan, stale_ok=stale_ok)
    place = None if folder is None else Path(folder)
    required = (require,) if isinstance(require, str) else tuple(require)
    return answer(
        mesh, plan, Question(trials, seed, policy, required, until, scale, spec, wish, place, processes, cluster)
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
    """
    check_fresh(mesh, plan, stale_ok=stale_ok)
    wavelengths = None if wavelengths_nm is None else np.atleast_1d(np.asarray(wavelengths_nm, float))
    if plan.is_routes:
        from meshctl.plan.switching import predict_routes

        return predict_routes(mesh, plan, wavelengths)[0].matrix
    return pipeline.predict(mesh, plan, wavelengths).matrix
