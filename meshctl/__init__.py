"""meshctl: from a wished matrix, route or power split to drive voltages on a real photonic chip.

The names below are loaded when first used, so that importing meshctl costs nothing.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.api import predict, route, solve, tolerance
    from meshctl.mesh.graph import Mesh
    from meshctl.mesh.meshfile import lattice, load, write
    from meshctl.plan.pipeline import Prediction
    from meshctl.plan.plan import Plan
    from meshctl.solver.target import Target

_HOMES = {
    "load": "meshctl.mesh.meshfile",
    "lattice": "meshctl.mesh.meshfile",
    "write": "meshctl.mesh.meshfile",
    "solve": "meshctl.api",
    "route": "meshctl.api",
    "predict": "meshctl.api",
    "tolerance": "meshctl.api",
    "Mesh": "meshctl.mesh.graph",
    "Plan": "meshctl.plan.plan",
    "Prediction": "meshctl.plan.pipeline",
    "Target": "meshctl.solver.target",
}

__all__ = ["Mesh", "Plan", "Prediction", "Target", "lattice", "load", "predict", "route", "solve", "tolerance", "write"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"meshctl has no '{name}'; it has {', '.join(__all__)}")
    from importlib import import_module

    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return [*__all__, "__version__"]
