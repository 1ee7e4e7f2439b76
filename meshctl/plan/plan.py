"""A plan: settings, volts and codes for one mesh and one wish, and how near the chip will come.

Public: Plan, plan_text, read_plan, check_fresh.
"""

from __future__ import annotations

import json
import math
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from meshctl import __version__
from meshctl.errors import Finding, MissingRow, NotFinite, StalePlan, UnknownKey, UnsoundFile, WrongSize, WrongUsage
from meshctl.mesh.files import read_text
from meshctl.mesh.graph import Mesh, frozen
from meshctl.optics.grid import wavelengths_of
from meshctl.plan.structure import LEVEL, NUMBER, PLAN, ROUTE, ROUTES_ASKED, SEARCH, TARGET, require
from meshctl.plan.wanted import Wanted
from meshctl.solver.wish import parse_wish

FORMAT = 1
ARRAYS = {
    "settings": "n_settings",
    "volts": "n_channels",
    "codes": "n_channels",
    "actual": "n_settings",
    "power_mw": "n_actuators",
    "headroom_v": "n_channels",
}
ROUTES = "routes"  # kind of a target that asks for routes
ONLY_ROUTES = ("power_error", "routes", "search")  # keys that only plans for routes have
OPTIONAL = (*ONLY_ROUTES, "measures", "account")  # left out where empty


@dataclass(frozen=True, eq=False)
class Plan:
    """What `solve` and `route` return; all arrays are read-only.

    `fidelity`, `matrix_error` and the throughputs come from the codes through the forward path, all known
    errors in; `continuous` holds fidelity and matrix_error before limits and codes. Routes ask for no
    matrix: there the two are NaN (null in the file), and `power_error` takes their place, in `continuous` too.
    Wishes other than one matrix have `measures`, and NaN where no matrix is among what they ask.
    """

    mesh_name: str
    mesh_hash: str
    target: dict[str, Any]
    settings: np.ndarray  # f64[S], rad, wanted
    volts: np.ndarray  # f64[K], what the codes give at the terminals
    codes: np.ndarray  # i64[K]
    actual: np.ndarray  # f64[S], rad, what the codes give
    power_mw: np.ndarray  # f64[A]
    headroom_v: np.ndarray  # f64[K], up to the channel's limit
    fidelity: float
    matrix_error: float
    continuous: dict[str, float]
    throughput: float
    throughput_per_input: list[float]
    reason: str
    warnings: list[str] = field(default_factory=list)
    shortfalls: list[dict[str, Any]] = field(default_factory=list)
    saved_mw: float = 0.0  # heater power that free gauges saved
    seed: int = 0
    version: str = __version__
    power_error: float | None = None  # largest difference of an output's power from the wished one
    routes: list[dict[str, Any]] = field(default_factory=list)  # one for each output, see plan.signals
    search: dict[str, Any] = field(default_factory=dict)  # how the routes were found, and what free cells do
    measures: dict[str, float] = field(default_factory=dict)  # how near a wish is, see plan.wanted.MEASURES
    account: dict[str, Any] = field(default_factory=dict)  # what keeps it from being nearer, see plan.account

    @property
    def is_routes(self) -> bool:
        """True where light was sent from ports to ports, False where a matrix was asked for."""
        return self.target.get("kind") == ROUTES

    @property
    def has_matrix(self) -> bool:
        """True where a matrix is among what is asked."""
        return not (self.is_routes or _without_matrix(self.target))

    def __repr__(self) -> str:
        near = ", ".join(f"{name} {value}" for name, value in self._nearness())
        return f"<Plan for mesh '{self.mesh_name}': {self.target.get('source', '')}; {near}; {self.reason}>"

    def _repr_html_(self) -> str:
        from html import escape

        rows = (
            ("mesh", self.mesh_name),
            ("target", str(self.target.get("source", ""))),
            *self._nearness(),
            ("throughput", f"{self.throughput:.4f}"),
            ("power", f"{float(self.power_mw.sum()):.1f} mW"),
            ("reason", self.reason),
        )
        body = "".join(f"<tr><th>{name}</th><td>{escape(value)}</td></tr>" for name, value in rows)
        return f"<table><caption>plan for {escape(self.mesh_name)}</caption>{body}</table>"

    def plot(self) -> Any:
        """Volts and room of every channel, power of every actuator: a matplotlib figure, loaded on demand."""
        from meshctl.plots import plan_figure  # the one import upward: a plan draws itself in a notebook

        return plan_figure(self)

    def _nearness(self) -> list[tuple[str, str]]:
        if self.is_routes:
            return [("power error", f"{self.power_error:.3g}")]
        if not self.has_matrix:
            return [(name.replace("_", " "), f"{value:.3g}") for name, value in self.measures.items()]
        return [("fidelity", f"{self.fidelity:.9f}"), ("matrix error", f"{self.matrix_error:.3g}")]


def _without_matrix(target: dict[str, Any]) -> bool:
    return bool(target.get("own") or (target.get("wish") and "real" not in target))


def plan_text(plan: Plan) -> str:
    """The plan as JSON, in columns; numbers are written so that they read back equal."""
    entry: dict[str, Any] = {"format": FORMAT}
    for name, value in vars(plan).items():
        if name not in OPTIONAL or value:
            entry[name] = value.tolist() if isinstance(value, np.ndarray) else value
    if plan.is_routes:
        entry |= {"fidelity": None, "matrix_error": None, "power_error": plan.power_error}
    elif not plan.has_matrix:
        entry |= {"fidelity": None, "matrix_error": None}
    return json.dumps(entry, allow_nan=False, indent=None, separators=(",", ":")) + "\n"


def _array(entry: dict[str, Any], name: str, where: str) -> np.ndarray:
    kind = np.int64 if name == "codes" else np.float64
    try:
        given = np.array(entry[name])
    except (TypeError, ValueError, OverflowError):
        raise UnsoundFile(f"'{name}' is no list of numbers", where=where, remedy="solve again") from None
    if given.size and given.dtype.kind not in ("i" if name == "codes" else "iuf"):
        numbers = "whole numbers" if name == "codes" else "numbers"
        raise UnsoundFile(f"'{name}' holds other things than {numbers}", where=where, remedy="solve again")
    array = given.astype(kind)
    if array.ndim != 1:
        raise WrongSize(f"'{name}' has {array.ndim} dimensions, must have 1", where=where, remedy="solve again")
    if not np.isfinite(array).all():
        raise NotFinite(f"'{name}' holds NaN or infinity", where=where, remedy="solve again")
    return frozen(array)


def _check_routes(entry: dict[str, Any], where: str) -> None:
    """Refuse a plan for routes of another form; NaN takes the place of what routes do not have."""
    for name in ONLY_ROUTES:
        if name not in entry:
            raise MissingRow(f"key '{name}' is missing", where=where, remedy="route again")
    require(entry["target"], ROUTES_ASKED, where, "target")
    require(entry["search"], SEARCH, where, "search")
    require(entry["continuous"], {"power_error": NUMBER}, where, "continuous")
    listed = entry["routes"]
    if not isinstance(listed, list) or not listed:
        raise UnsoundFile("'routes' must list one route or more", where=where, remedy="route again")
    for k, route in enumerate(listed):
        require(route, ROUTE, where, f"routes[{k}]")
    try:
        wishes = [parse_wish(words) for words in entry["target"]["words"]]
        if entry["target"]["band"]:
            wavelengths_of(entry["target"]["band"], "band")
    except WrongUsage as finding:  # what the file asks, not what the user wrote
        said = f"'target' cannot be used: {finding.what}"
        raise UnsoundFile(said, where=where, remedy="route again") from None
    asked = {(wish.source, sink) for wish in wishes for sink in wish.sinks}
    for k, route in enumerate(listed):
        if (route["input"], route["output"]) not in asked:
            said = f"'routes[{k}]' is a route {route['input']}:{route['output']} that its wish lacks"
            raise UnsoundFile(said, where=where, remedy="route again")
    entry |= {"fidelity": math.nan, "matrix_error": math.nan}


def _check_target(entry: dict[str, Any], where: str) -> None:
    """Refuse a target that nothing can be made of, and keys that only plans for routes have."""
    require(entry["target"], TARGET, where, "target")
    for name in ("routes", "search"):
        if name in entry:
            raise UnknownKey(f"key '{name}' belongs to plans for routes", where=where, remedy="remove it, or route")
    require({"power_error": entry.get("power_error")}, {"power_error": LEVEL}, where)
    try:
        Wanted.from_description(entry["target"])
    except Finding as finding:  # what the file asks, not what the user wrote
        said = f"'target' cannot be used: {finding.what}"
        raise UnsoundFile(said, where=where, remedy="solve again") from None


def _check_measures(entry: dict[str, Any], where: str) -> None:
    """Refuse measures and accounts of another form; NaN takes the place of what wishes without a matrix lack."""
    for name in ("measures", "account"):
        if not isinstance(entry.get(name, {}), dict):
            raise UnsoundFile(f"'{name}' is {entry[name]!r}, must be an object", where=where, remedy="solve again")
    measures = entry.get("measures", {})
    for name, value in measures.items():
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise NotFinite(f"'measures.{name}' is {value!r}, must be a number", where=where, remedy="solve again")
    if _without_matrix(entry["target"]):
        if not measures:
            raise MissingRow("key 'measures' is missing", where=where, remedy="solve again")
        entry |= {"fidelity": math.nan, "matrix_error": math.nan}
    else:
        require(entry["continuous"], {"fidelity": NUMBER, "matrix_error": NUMBER}, where, "continuous")
    entry.setdefault("power_error", measures.get("power_error"))


def read_plan(path: str | Path) -> Plan:
    """Read a plan file.

    Raises
    ------
    MissingFile, UnsoundFile, MissingRow, UnknownKey, NotFinite, WrongSize
    """
    where = str(path)
    try:
        entry = json.loads(read_text(Path(path), remedy="name a plan file that 'solve' wrote"))
    except (ValueError, RecursionError) as problem:  # also a number of thousands of digits
        said = "nested too deep" if isinstance(problem, RecursionError) else str(problem).partition(";")[0]
        raise UnsoundFile(f"not readable as JSON: {said}", where=where, remedy="solve again") from None
    if not isinstance(entry, dict) or entry.pop("format", None) != FORMAT:
        raise UnsoundFile("not a plan of format 1", where=where, remedy="name a plan that 'solve' wrote")
    known = set(Plan.__dataclass_fields__)
    for name in entry:
        if name not in known:
            raise UnknownKey(f"key '{name}' is not known", where=where, remedy="remove it, or solve again")
    for name in known:
        if name not in entry and name not in OPTIONAL:
            raise MissingRow(f"key '{name}' is missing", where=where, remedy="solve again")
    if not isinstance(entry["target"], dict):
        raise UnsoundFile(f"'target' is {entry['target']!r}, must be an object", where=where, remedy="solve again")
    require(entry, PLAN, where)
    routes = entry["target"].get("kind") == ROUTES
    if routes:
        _check_routes(entry, where)
    else:
        _check_target(entry, where)
        _check_measures(entry, where)
    bare = routes or _without_matrix(entry["target"])
    numbers = ("power_error",) if routes else () if bare else ("fidelity", "matrix_error")
    for name in (*numbers, "throughput"):
        value = entry[name]
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise NotFinite(f"'{name}' is {value!r}, must be a number", where=where, remedy="solve again")
    for name in ARRAYS:
        entry[name] = _array(entry, name, where)
    return Plan(**entry)


def _check_fits(mesh: Mesh, plan: Plan, where: str) -> None:
    """Refuse codes, sizes and ports that the mesh does not have."""
    highest = (np.int64(1) << mesh.channels.bits.astype(np.int64)) - 1
    wrong = np.flatnonzero((plan.codes < 0) | (plan.codes > highest))
    if len(wrong):
        k = int(wrong[0])
        said = f"code {plan.codes[k]} of channel '{mesh.channel_names[k]}' is outside 0 to {highest[k]}"
        raise UnsoundFile(said, where=where, remedy="solve again")
    inputs, outputs = mesh.net.inputs, mesh.net.outputs
    for route in plan.routes:
        if route["input"] not in inputs or route["output"] not in outputs:
            said = f"the route {route['input']}:{route['output']} is not on mesh '{mesh.name}'"
            raise UnsoundFile(said, where=where, remedy="route again")
    if len(plan.throughput_per_input) != len(inputs):
        said = f"'throughput_per_input' has {len(plan.throughput_per_input)} entries, the mesh {len(inputs)} inputs"
        raise WrongSize(said, where=where, remedy="solve again")
    size = tuple(plan.target.get("size", (len(outputs), len(inputs))))
    if size != (len(outputs), len(inputs)):
        said = f"'target.size' is {size[0]} outputs and {size[1]} inputs; the mesh has {len(outputs)} and {len(inputs)}"
        raise WrongSize(said, where=where, remedy="solve again")


def check_fresh(mesh: Mesh, plan: Plan, *, stale_ok: bool = False, where: str = "plan") -> list[str]:
    """Refuse a plan made for another mesh, or before this one's physics changed.

    Returns
    -------
    list of warnings, not empty only where `stale_ok` let a plan pass.

    Raises
    ------
    StalePlan
        With both hashes.
    WrongSize
        Where the arrays do not fit the mesh, whatever the hash.
    """
    sizes = {
        "n_settings": mesh.net.n_settings,
        "n_channels": len(mesh.channels),
        "n_actuators": len(mesh.actuators),
    }
    fits = all(getattr(plan, name).shape == (sizes[size],) for name, size in ARRAYS.items())
    if plan.mesh_hash == mesh.hash:
        for name, size in ARRAYS.items():
            has = len(getattr(plan, name))
            if has != sizes[size]:
                things = f"{sizes[size]} {size.removeprefix('n_')}"
                said = f"'{name}' has {has} entries, the mesh {things}"
                raise WrongSize(said, where=where, remedy="the file was changed by hand: solve again")
        _check_fits(mesh, plan, where)
        return []
    said = (
        f"made for mesh '{plan.mesh_name}' ({plan.mesh_hash[:12]}); "
        f"this is '{mesh.name}' ({mesh.hash[:12]}), whose physics differs"
    )
    if not stale_ok:
        raise StalePlan(said, where=where, remedy="solve again, or pass --stale-ok if you know why they differ")
    if not fits:
        raise WrongSize(f"{said} in size too", where=where, remedy="solve again")
    _check_fits(mesh, plan, where)
    return [f"{where}: {said}"]
