"""Whole turns of least power as an integer programme, solved in a process of its own.

The solver behind scipy.optimize.milp prints to the process's standard output and cannot be stopped
from Python; in a process of its own it may print to nowhere and be ended. `python -m meshctl.drive.integer`
is that process: arrays come in on its standard input and go out on its standard output.

Public: Programme, Proof, prove.
"""

from __future__ import annotations

import io
import os
import subprocess
import sys
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_START_UP_S = 30.0  # allowance for the start of a process on a busy machine
_OPTIMAL, _INFEASIBLE = 0, 2  # scipy.optimize.milp, result.status


@dataclass(frozen=True)
class Programme:
    """min cost @ n over whole n from n_low to n_high with low <= inverse @ n <= high; M turns, A limits."""

    inverse: Floats  # [A, M]
    cost: Floats  # [M]
    low: Floats  # [A]
    high: Floats  # [A]
    n_low: Floats  # [M]
    n_high: Floats  # [M]


@dataclass(frozen=True)
class Proof:
    """What the programme gave."""

    status: str  # "optimal", "infeasible", "undecided"
    n: Floats | None  # best found
    bound: float  # no n costs less


UNDECIDED = Proof("undecided", None, -np.inf)


def prove(programme: Programme, seconds: float) -> Proof:
    """Solve the programme, stopping after `seconds`; a process that fails leaves it undecided."""
    given = io.BytesIO()
    np.savez(given, seconds=seconds, **vars(programme))
    path = os.pathsep.join(p for p in sys.path if p)
    try:
        ended = subprocess.run(
            [sys.executable, "-m", "meshctl.drive.integer"],
            input=given.getvalue(),
            capture_output=True,
            timeout=2.0 * seconds + _START_UP_S,
            env={**os.environ, "PYTHONPATH": path},
            check=True,
        )
    except (subprocess.SubprocessError, OSError):  # too slow, ended from outside, or not to be started
        return UNDECIDED
    found = np.load(io.BytesIO(ended.stdout))
    n = found["n"] if found["n"].size == len(programme.cost) else None
    return Proof(str(found["status"]), n, float(found["bound"]))


def solve(programme: Programme, seconds: float) -> Proof:
    """Solve the programme in this process; "infeasible" only where it is so without presolving too."""
    result = _milp(programme, seconds, presolve=True)
    status = {_OPTIMAL: "optimal", _INFEASIBLE: "infeasible"}.get(result.status, "undecided")
    # with equality rows beside the turns this solver was seen to call feasible programmes infeasible
    if status == "infeasible" and _milp(programme, seconds, presolve=False).status != _INFEASIBLE:
        status = "undecided"
    bound = result.get("mip_dual_bound")
    n = None if result.x is None else np.round(result.x)
    return Proof(status, n, -np.inf if bound is None else float(bound))


def _milp(programme: Programme, seconds: float, presolve: bool) -> Any:
    from scipy.optimize import Bounds, LinearConstraint, milp

    return milp(
        programme.cost,
        constraints=LinearConstraint(programme.inverse, programme.low, programme.high),
        integrality=np.ones(len(programme.cost)),
        bounds=Bounds(programme.n_low, programme.n_high),
        options={"time_limit": seconds, "mip_rel_gap": 0.0, "presolve": presolve},
    )


def _main() -> None:
    kept = os.dup(1)
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, 1)
    given = np.load(io.BytesIO(sys.stdin.buffer.read()))
    proof = solve(Programme(**{k: given[k] for k in given.files if k != "seconds"}), float(given["seconds"]))
    out = io.BytesIO()
    n = np.empty(0) if proof.n is None else proof.n
    np.savez(out, status=proof.status, bound=proof.bound, n=n)
    with os.fdopen(kept, "wb") as stdout:
        stdout.write(out.getvalue())


if __name__ == "__main__":
    _main()
