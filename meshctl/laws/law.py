"""What every law of one actuator answers: volts to a change of phase or angle, and back.

A law sees rows of numbers, one row per actuator, as a mapping `p` from parameter name to an array of
equal length; laws that follow measured rows also find ``p["tables"]``, one (n, 3) array of volts,
value_rad and sigma_rad per row. Volts and changes are arrays whose last axis are those rows; leading
axes (trials, codes) are allowed. A field that is NaN or left out stands for the default of its parameter.

Public: Param, HANDLING, Breach, Law, check_params, raise_where, MW_PER_W, SLACK.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from meshctl.errors import DriveFinding, MissingRow

MW_PER_W = 1e3
MA_PER_A = 1e3
SLACK = 1e-12  # rounding that a change at the very end of a reach may carry (relative)

Rows = NDArray[np.float64]
Params = Mapping[str, Any]


@dataclass(frozen=True)
class Param:
    """A parameter of a law as data: its name ends in its unit, and table heads and errors come from here.

    A `default` of None must be given by the mesh file; one of NaN may be left out, and `help` says what
    happens then. The range is inclusive, except `low` where `open_low` is set.
    """

    name: str
    unit: str
    default: float | None
    low: float
    high: float
    help: str
    open_low: bool = False

    def allowed(self) -> str:
        """The allowed range in words: ``above 0 mW``, ``-1 to 1``."""
        unit = f" {self.unit}" if self.unit else ""
        if self.low > -np.inf and self.high < np.inf:
            return f"{'above ' if self.open_low else ''}{self.low:g} to {self.high:g}{unit}"
        if self.low > -np.inf:
            return f"{'above' if self.open_low else 'at least'} {self.low:g}{unit}"
        if self.high < np.inf:
            return f"at most {self.high:g}{unit}"
        return f"any finite number{' of' + unit if unit else ''}"

    def holds(self, values: ArrayLike) -> NDArray[np.bool_]:
        """Which values may stand: finite and in range, or the default itself."""
        v = np.asarray(values, float)
        above = v > self.low if self.open_low else v >= self.low
        good = np.isfinite(v) & above & (v <= self.high)
        if self.default is not None:
            good |= np.isnan(v) if np.isnan(self.default) else v == self.default
        return good


# how a bench has to treat parts that move or latch; no law reads these
HANDLING = (
    Param("approach", "", 0.0, -1.0, 1.0, "1: come from lower volts, -1: from higher, 0: from either side"),
    Param("release_v", "V", 0.0, -1e3, 1e3, "volts to pass through before travelling back; 0: none"),
    Param("off_rad", "rad", np.nan, -1e6, 1e6, "value with the power off; left out: the value at 0 V"),
)


@dataclass(frozen=True)
class Breach:
    """A parameter that may not stand as it is given."""

    row: int
    param: Param
    value: float
    allowed: str


class Law:
    """One kind of actuator. Members override what differs; the rest follows from their own forward.

    `branch_v` is the interval of volts that the inverse answers with, `limits_v` the interval that the
    actuator itself bears; both lie inside what the law knows.
    """

    name: str = ""
    moves: tuple[str, ...] = ()
    params: tuple[Param, ...] = ()
    power_law: bool = False  # static power through a resistance that warms: R(T) and ground matter
    has_tables: bool = False  # needs p["tables"]
    stepwise: bool = False  # only listed values can be reached

    # ---- parameters
    def param(self, name: str) -> Param:
        """The declaration of one parameter."""
        return next(q for q in self.params if q.name == name)

    def column(self, p: Params, name: str) -> Rows:
        """One parameter's rows with its default filled in."""
        default = self.param(name).default
        if name not in p:
            if default is None:
                raise MissingRow(f"law '{self.name}' needs {name}", remedy="give it in the mesh file")
            return np.full(self.rows(p), default)
        values = np.asarray(p[name], float)
        if default is None or np.isnan(default):
            return values
        return np.where(np.isnan(values), default, values)

    def rows(self, p: Params) -> int:
        """Number of actuators in `p`."""
        return len(next(iter(p.values()))) if p else 0

    def breaches(self, p: Params) -> list[Breach]:  # noqa: ARG002
        """What single ranges cannot say: parameters that do not fit one another."""
        return []

    def check_rows(self, table: ArrayLike, where: str = "") -> None:
        """Raise what keeps one actuator's measured rows from serving this law; `where` opens the message."""

    # ---- volts to value and back
    def rest_rad(self, p: Params) -> Rows:
        """Value of the setting with the drive at 0 V; NaN where that is not known."""
        raise NotImplementedError

    def reference_rad(self, p: Params) -> Rows:
        """Value from which changes count: `rest_rad`, or another known value where that is NaN."""
        return self.rest_rad(p)

    def change_rad(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Change from the reference by the actuator's own drive."""
        raise NotImplementedError

    def volts(self, change_rad: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Volts that give a change; raises a DriveFinding with the rows that cannot."""
        raise NotImplementedError

    def slope_rad_per_v(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Derivative of `change_rad` by the volts, at the same heat."""
        raise NotImplementedError

    def parasitic_phase_rad(self, volts: ArrayLike, p: Params) -> Rows:
        """Phase that both arms of the moved part gain, over that at 0 V, while its angle moves."""
        return np.zeros(np.broadcast_shapes(np.shape(volts), (self.rows(p),)))

    def angle_slope_per_nm(self, volts: ArrayLike, p: Params) -> Rows:
        """Relative slope of the value over wavelength that the drive adds to that of the net."""
        return np.zeros(np.broadcast_shapes(np.shape(volts), (self.rows(p),)))

    # ---- limits
    def limits_v(self, p: Params) -> tuple[Rows, Rows]:
        """Lowest and highest volts that the actuator bears, margins included."""
        n = self.rows(p)
        return np.full(n, -np.inf), np.full(n, np.inf)

    def branch_v(self, p: Params) -> tuple[Rows, Rows]:
        """Lowest and highest volts that the inverse may answer with."""
        return self.limits_v(p)

    def limit_v(self, p: Params) -> Rows:
        """Highest volts that the actuator bears, margin included; inf where there is no limit."""
        return self.limits_v(p)[1]

    def reach_rad(self, p: Params, low_v: ArrayLike, high_v: ArrayLike) -> tuple[Rows, Rows]:
        """Lowest and highest change between two terminal voltages; NaN, NaN where there is none."""
        bottom, top = self.branch_v(p)
        low, high = np.maximum(low_v, bottom), np.minimum(high_v, top)
        empty = ~(low <= high)
        first = self.change_rad(np.where(empty, bottom, low), p)
        last = self.change_rad(np.where(empty, bottom, high), p)
        nothing = np.where(empty, np.nan, 0.0)
        return np.minimum(first, last) + nothing, np.maximum(first, last) + nothing

    # ---- electricity
    def resistance_ohm(self, p: Params, heat_turns: ArrayLike | None = None) -> Rows:  # noqa: ARG002
        """Resistance between the terminals; inf where capacitive."""
        return np.full(self.rows(p), np.inf)

    def power_mw(self, volts: ArrayLike, p: Params, heat_turns: ArrayLike | None = None) -> Rows:
        """Static power."""
        return MW_PER_W * np.square(np.asarray(volts, float)) / self.resistance_ohm(p, heat_turns)

    def hold_power_mw(self, volts: ArrayLike, p: Params) -> Rows:
        """Power that holding a state takes, own heat alone."""
        return self.power_mw(volts, p)

    def capacitance_ff(self, volts: ArrayLike, p: Params) -> Rows:
        """Capacitance at a working point; NaN where it is not known, 0 for heaters."""
        return np.full(np.broadcast_shapes(np.shape(volts), (self.rows(p),)), np.nan)

    def switch_energy_nj(self, volts_from: ArrayLike, volts_to: ArrayLike, p: Params) -> Rows:
        """Energy that the source gives for one change of state: new volts times the charge that moves.

        From 0 V that is C V^2, half of it stored; charge that flows to ground takes none.
        """
        before, after = np.asarray(volts_from, float), np.asarray(volts_to, float)
        charge_fc = self.capacitance_ff(after, p) * after - self.capacitance_ff(before, p) * before
        return 1e-6 * np.maximum(after * charge_fc, 0.0)


def check_params(law: Law, p: Params) -> list[Breach]:
    """Every parameter of `law` that may not stand as it is in `p`, with its row and what is allowed.

    Measured rows are checked by the law's own `check_rows`.
    """
    found: list[Breach] = []
    for param in law.params:
        if param.name not in p:
            if param.default is None:
                found += [Breach(row, param, np.nan, param.allowed()) for row in range(law.rows(p))]
            continue
        values = np.asarray(p[param.name], float)
        left_out = np.isnan(values) & (param.default is not None)
        for row in np.flatnonzero(~(param.holds(values) | left_out)):
            found.append(Breach(int(row), param, float(values[row]), param.allowed()))
    return found or law.breaches(p)


def raise_where(
    bad: NDArray[np.bool_],
    finding: type[DriveFinding],
    severity: ArrayLike,
    sentence: Callable[[tuple[int, ...]], str],
    remedy: str,
) -> None:
    """Raise `finding` with the rows where `bad`, its sentence written for the most severe entry."""
    if not bad.any():
        return
    how_bad = np.where(bad, np.nan_to_num(np.broadcast_to(severity, bad.shape), nan=np.inf), -np.inf)
    worst = np.unravel_index(int(np.argmax(how_bad)), bad.shape)
    rows = np.unique(np.nonzero(bad)[-1])
    many = f" (the worst of {len(rows)})" if len(rows) > 1 else ""
    text = sentence(tuple(int(i) for i in worst))
    raise finding(f"{{names}}: {text}{many}", rows=[int(r) for r in rows], remedy=remedy)
