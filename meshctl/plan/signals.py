"""What arrives at the outputs of routes, from powers of the whole chip: signal, crosstalk, ripple.

Levels are in dB of what entered. `None` stands for what is not there: no light, or no other route.
Public: Signal, Band, signals, power_error, wished_power.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from meshctl.mesh.response import Response
from meshctl.solver.wish import Wish
from meshctl.units import db_array

SLOW_DEGREE = 4  # polynomial that a coupler's slope and a cell's roll-off follow; fringes of loops do not
POINTS_PER_DEGREE = 4  # with fewer wavelengths a lower degree is taken off, so that fringes are not taken for slow


@dataclass(frozen=True)
class Signal:
    """Light of one input at one output that it was sent to, unwanted light in all outputs counted."""

    input: str
    output: str
    share: float  # wished, of what arrives at all outputs of the input
    share_reached: float | None
    signal_db: float | None  # at the centre
    insertion_loss_db: float | None  # beyond the wished division
    crosstalk_db: float | None  # light of the other routes' inputs here, over the signal
    stray_db: float | None  # strongest light of the input at an output not asked for
    least_signal_db: float | None  # over the band, as all below
    worst_crosstalk_db: float | None
    worst_stray_db: float | None
    ripple_db: float | None  # peak to peak, the slow change over the band taken off
    slow_db: float | None  # peak to peak of the slow change

    @property
    def name(self) -> str:
        return f"{self.input}:{self.output}"


@dataclass(frozen=True, eq=False)
class Band:
    """Powers between routed inputs and all outputs, at the centre and over wavelengths."""

    inputs: tuple[str, ...]
    wavelengths_nm: np.ndarray  # f64[W]
    centre: np.ndarray  # f64[out, routed]
    power: np.ndarray  # f64[W, out, routed]

    @classmethod
    def of(cls, response: Response, settings: np.ndarray, inputs: Sequence[str], wavelengths_nm: np.ndarray) -> Band:
        """By all waves of the chip: finite extinction, losses and errors in."""
        entering = _columns(response.net.inputs, inputs)
        centre, power = (np.abs(response.fields(settings, entering, waves)) ** 2 for waves in (None, wavelengths_nm))
        return cls(tuple(inputs), np.asarray(wavelengths_nm, float), centre, power)


def _columns(inputs: Sequence[str], routed: Sequence[str]) -> np.ndarray:
    rows = [inputs.index(name) for name in routed]
    entering = np.zeros((len(inputs), len(rows)))
    entering[rows, np.arange(len(rows))] = 1.0
    return entering


def fringes_db(wavelengths_nm: np.ndarray, curve_db: np.ndarray) -> tuple[float, float]:
    """Peak to peak of a curve's fast part, and of its slow one.

    Parameters
    ----------
    wavelengths_nm : float (W,)
    curve_db : float (W,)

    Returns
    -------
    ripple, slow change: dB. The slow part is a polynomial of degree 4, less for fewer than 17 wavelengths.
    """
    degree = min(SLOW_DEGREE, (len(curve_db) - 1) // POINTS_PER_DEGREE)
    middle, half = 0.5 * (wavelengths_nm.max() + wavelengths_nm.min()), 0.5 * float(np.ptp(wavelengths_nm))
    x = (wavelengths_nm - middle) / (half or 1.0)
    slow = np.polynomial.chebyshev.chebval(x, np.polynomial.chebyshev.chebfit(x, curve_db, degree))
    return float(np.ptp(curve_db - slow)), float(np.ptp(slow))


def signals(outputs: Sequence[str], wishes: Sequence[Wish], band: Band) -> list[Signal]:
    """One signal for each output of each wish, in their order."""
    found, routed = [], {wish.source for wish in wishes}
    for wish in wishes:
        column = band.inputs.index(wish.source)
        sinks = [outputs.index(name) for name in wish.sinks]
        asked = np.isin(np.arange(len(outputs)), sinks)
        others = [k for k, name in enumerate(band.inputs) if name != wish.source and name in routed]
        arrived = float(band.centre[sinks, column].sum())
        for row, (name, share) in zip(sinks, wish.shares, strict=True):
            at, over = band.centre[row, column], band.power[:, row, column]
            loss = _db(at)
            found.append(
                Signal(
                    wish.source,
                    name,
                    share,
                    float(at) / arrived if arrived > 0.0 else None,
                    loss,
                    None if loss is None else float(db_array(share)) - loss,
                    _db(_over(band.centre[row, others].sum(), at)) if others else None,
                    _db(band.centre[~asked, column].max(initial=0.0)),
                    _db(over.min()),
                    _db(_over(band.power[:, row][:, others].sum(1), over).max()) if others else None,
                    _db(band.power[:, ~asked, column].max(initial=0.0)),
                    *(fringes_db(band.wavelengths_nm, db_array(over)) if (over > 0.0).all() else (None, None)),
                )
            )
    return found


def _over(part: np.ndarray, whole: np.ndarray) -> np.ndarray:
    """A ratio; infinite where light is compared with darkness."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.nan_to_num(np.divide(part, whole), nan=0.0, posinf=np.inf)


def _db(power: float | np.ndarray) -> float | None:
    level = float(db_array(power))
    return level if np.isfinite(level) else None


def wished_power(outputs: Sequence[str], wishes: Sequence[Wish]) -> np.ndarray:
    """Powers that wishes ask for, float (out, wish)."""
    power = np.zeros((len(outputs), len(wishes)))
    for k, wish in enumerate(wishes):
        for name, share in wish.shares:
            power[outputs.index(name), k] = share
    return power


def power_error(outputs: Sequence[str], wishes: Sequence[Wish], power: np.ndarray) -> float:
    """Largest difference of a power at any output from the wished one, losses in.

    Parameters
    ----------
    power : float (out, wish)
    """
    return float(np.abs(power - wished_power(outputs, wishes)).max())
