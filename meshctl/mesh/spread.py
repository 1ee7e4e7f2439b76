"""How far the parts of dies scatter about their drawn values, and drift later: the one error model.

Every cause has a standard deviation, and a `Shape` where it is not plainly independent and normal: how much
of its variance a whole wafer shares, how much tilts over the die, how much neighbours share.
Public: Cause, CAUSES, Shape, Spread, Draw, drawn.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from typing import Any

import numpy as np

from meshctl.errors import OutOfRange, UnsoundFile

DISTRIBUTIONS = ("normal", "uniform", "samples")
COUPLERS, PHASES, ACTUATORS, CROSSTALK, CHANNELS, DIE = (
    "couplers",
    "phases",
    "actuators",
    "crosstalk",
    "channels",
    "die",
)


@dataclass(frozen=True)
class Cause:
    """One thing that scatters or drifts."""

    name: str  # its key in [spread]
    parts: str  # what it is drawn for
    drifts: bool  # True: after calibration, so that no correction knows of it
    help: str


CAUSES: dict[str, Cause] = {
    c.name: c
    for c in (
        Cause("split_rad", COUPLERS, False, "angle of every coupler"),
        Cause("loss_db", COUPLERS, False, "loss of every coupler, never below 0"),
        Cause("phase_rad", PHASES, False, "offset of every settable phase"),
        Cause("p2pi_share", ACTUATORS, False, "power for 2 pi, as a share of it"),
        Cause("r_share", ACTUATORS, False, "resistance, as a share of it"),
        Cause("crosstalk_share", CROSSTALK, False, "every crosstalk coefficient, as a share of it"),
        Cause("stuck_share", ACTUATORS, False, "probability that an actuator does nothing"),
        Cause("noise_v", CHANNELS, True, "level of every channel of the source (mA where it drives current)"),
        Cause("temperature_k", PHASES, True, "temperature, times phase_rad_per_k for every settable phase"),
        Cause("laser_nm", DIE, True, "wavelength of the laser"),
    )
}


@dataclass(frozen=True, eq=False)
class Shape:
    """How one cause is distributed, and what its parts share; shares are of the variance, the rest is independent."""

    distribution: str = "normal"
    wafer: float = 0.0  # the same for the whole die
    gradient: float = 0.0  # a tilt over the die, of random direction
    correlated: float = 0.0  # falls off as exp(-distance / correlation_um)
    correlation_um: float = 0.0
    samples: np.ndarray | None = None  # measured errors, sorted

    def check(self, cause: str, where: str) -> None:
        """Refuse what does not make a distribution."""
        shared = self.wafer + self.gradient + self.correlated
        if shared > 1.0 + 1e-12:
            raise OutOfRange(
                f"wafer + gradient + correlated is {shared:g} of the variance of {cause}",
                where=where,
                remedy="allowed is at most 1 in sum; lower them",
            )
        if self.correlated > 0.0 and not self.correlation_um > 0.0:
            raise OutOfRange(
                f"correlated is {self.correlated:g} but correlation_um is {self.correlation_um:g} um",
                where=where,
                remedy="give correlation_um, above 0 um",
            )
        parts = CAUSES[cause].parts
        if parts in (DIE, CHANNELS) and shared - (self.wafer if parts == CHANNELS else 0.0) > 0.0:
            raise UnsoundFile(
                f"{cause} is drawn for the {parts[:-1] if parts == CHANNELS else parts}, which has no place on the die",
                where=where,
                remedy="remove gradient and correlated" if parts == CHANNELS else "leave its shares out",
            )
        if cause == "stuck_share" and self.distribution != "normal":
            raise UnsoundFile(f"stuck_share is a probability and takes no {self.distribution}", where=where)
        if (self.distribution == "samples") != (self.samples is not None):
            raise UnsoundFile(f"{cause} has a file of samples or none", where=where, remedy="give both or neither")

    def values(self, normal: np.ndarray, sigma: float) -> np.ndarray:
        """Errors for standard normal numbers: the distribution that has the same order of values."""
        if self.distribution == "normal":
            return sigma * normal
        from scipy.special import ndtr

        share = ndtr(normal)
        if self.distribution == "uniform":
            return np.sqrt(12.0) * sigma * (share - 0.5)
        assert self.samples is not None
        at = np.minimum((share * len(self.samples)).astype(np.int64), len(self.samples) - 1)
        return np.asarray(self.samples[at])


PLAIN = Shape()
WHOLE = Shape(wafer=1.0)  # of temperature where nothing else is said


@dataclass(frozen=True, eq=False)
class Spread:
    """Standard deviations, cause by cause; 0 where nothing scatters."""

    split_rad: float = 0.0  # angle of every coupler
    phase_rad: float = 0.0  # offset of every settable phase
    loss_db: float = 0.0  # loss of every coupler, never below 0
    p2pi_share: float = 0.0  # power for 2 pi, as a share of its nominal
    r_share: float = 0.0  # resistance, as a share of its nominal
    crosstalk_share: float = 0.0  # every crosstalk coefficient, as a share of it
    noise_v: float = 0.0  # level of every channel
    temperature_k: float = 0.0  # of the die
    phase_rad_per_k: float = 0.0  # what a kelvin does to a settable phase: the two arms of its cell differ
    laser_nm: float = 0.0
    stuck_share: float = 0.0  # probability
    shapes: Mapping[str, Shape] = field(default_factory=dict)
    between: tuple[tuple[str, str, float], ...] = ()  # correlation of two causes in the same part

    @classmethod
    def numbers(cls) -> tuple[str, ...]:
        """Names of all keys that are numbers."""
        return tuple(f.name for f in fields(cls) if f.name not in ("shapes", "between"))

    def shape(self, cause: str) -> Shape:
        return self.shapes.get(cause, WHOLE if cause == "temperature_k" else PLAIN)

    @property
    def active(self) -> tuple[str, ...]:
        """Causes that scatter, in the order of CAUSES."""
        return tuple(c for c in CAUSES if getattr(self, c) > 0.0)

    def only(self, cause: str) -> Spread:
        """The same with all other causes at rest."""
        rest: dict[str, Any] = {c: 0.0 for c in CAUSES if c != cause}
        return replace(self, **rest)

    def check(self, where: str) -> None:
        """Refuse shapes, correlations and pairs of keys that make no sense together."""
        for cause, shape in self.shapes.items():
            shape.check(cause, f"{where}.shape.{cause}")
        if self.temperature_k > 0.0 and self.phase_rad_per_k == 0.0:
            raise OutOfRange(
                f"temperature_k is {self.temperature_k:g} K but phase_rad_per_k is 0 rad/K: it would do nothing",
                where=f"{where}.temperature_k",
                remedy="give phase_rad_per_k, what a kelvin does to a phase",
            )
        for group in (COUPLERS, PHASES, ACTUATORS):
            self.mixing(group, where)

    def mixing(self, parts: str, where: str = "") -> tuple[tuple[str, ...], np.ndarray] | None:
        """(causes, L): L @ independent numbers are correlated as `between` asks; None where none of the parts is.

        Raises
        ------
        UnsoundFile
            For a correlation matrix that is not positive definite.
        """
        rows = [b for b in self.between if CAUSES[b[0]].parts == parts]
        if not rows:
            return None
        causes = tuple(dict.fromkeys(c for b in rows for c in b[:2]))
        matrix = np.eye(len(causes))
        for first, second, value in rows:
            i, k = causes.index(first), causes.index(second)
            matrix[i, k] = matrix[k, i] = value
        least = float(np.linalg.eigvalsh(matrix)[0])
        if least <= 0.0:
            listed = ", ".join(f"{a} and {b} {v:g}" for a, b, v in rows)
            raise UnsoundFile(
                f"the correlation matrix of {listed} is not positive definite: its least eigenvalue is {least:.3g}",
                where=f"{where}.between",
                remedy="bring the correlations nearer to 0",
            )
        return causes, np.linalg.cholesky(matrix)


@dataclass(frozen=True)
class Draw:
    """One die drawn from a spread, as `new --built` writes it."""

    error_rad: np.ndarray  # f64[E]
    loss_db: np.ndarray  # f64[E]
    offset_rad: np.ndarray  # f64[A]
    p2pi_factor: np.ndarray  # f64[A]
    r_factor: np.ndarray  # f64[A]


def drawn(spread: Spread, is_coupler: np.ndarray, loss_db: np.ndarray, n_actuators: int, seed: int) -> Draw:
    """Draw one die of independent normal scatter, for a mesh folder.

    Parameters
    ----------
    is_coupler : bool (E,)
    loss_db : float (E,), nominal loss
    seed : int, for numpy's PCG64; the order of draws is splitting, loss, offset, p2pi, r

    Returns
    -------
    Draw
    """
    rng = np.random.default_rng(seed)
    n = int(is_coupler.sum())
    error, loss = np.zeros(len(is_coupler)), loss_db.copy()
    error[is_coupler] = spread.split_rad * rng.standard_normal(n)
    loss[is_coupler] = np.abs(loss[is_coupler] + spread.loss_db * rng.standard_normal(n))
    return Draw(
        error,
        loss,
        spread.phase_rad * rng.standard_normal(n_actuators),
        np.exp(spread.p2pi_share * rng.standard_normal(n_actuators)),
        np.exp(spread.r_share * rng.standard_normal(n_actuators)),
    )


def spread_of(entry: Mapping[str, Any], shapes: Mapping[str, Shape], where: str) -> Spread:
    """A checked Spread from the keys of [spread] and its shapes; samples give their cause its standard deviation."""
    numbers = {key: entry[key] for key in Spread.numbers()}
    for cause, shape in shapes.items():
        if shape.samples is not None:
            if numbers[cause]:
                raise UnsoundFile(
                    f"{cause} is {numbers[cause]:g} and has samples too",
                    where=f"{where}.{cause}",
                    remedy="leave the number out: the samples say how far it scatters",
                )
            numbers[cause] = float(np.sqrt(np.mean(shape.samples**2)))
    spread = Spread(**numbers, shapes=dict(shapes), between=tuple(entry["between"]))
    spread.check(where)
    return spread
