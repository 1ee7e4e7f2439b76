"""What a filter is judged by: free spectral range, bandwidth, extinction and finesse of its peaks or dips.

Peaks and dips are found where the derivative of the power changes sign between two samples, then followed to
its zero, so that their places are as exact as the light itself and not as the samples.
Public: Feature, feature_of.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meshctl.units import THZ_PER_GHZ, db

Light = Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]]  # THz -> power and its derivative per THz
PROMINENT = 0.5  # share of the deepest feature's height that a feature must have to count
LEAST_DB = 0.01  # a spectrum that varies by less is flat
ROUNDS_MOST = 80
CLOSE = 1e-14  # of a frequency


@dataclass(frozen=True)
class Feature:
    """Peaks or dips of one port pair within a range of frequencies; NaN for what the range does not show."""

    kind: str  # "peak" or "dip"
    thz: list[float]  # where they stand, rising
    power: list[float]  # of each
    free_spectral_range_ghz: float  # mean distance of neighbours
    bandwidth_ghz: float  # of the one nearest the middle of the range, see `feature_of`
    extinction_db: float  # highest over lowest power in the range
    finesse: float  # free spectral range over bandwidth
    narrow: bool  # narrower than the samples are apart: others may have been missed


def _zeros(value: Callable[[np.ndarray], np.ndarray], low: np.ndarray, high: np.ndarray) -> np.ndarray:
    """Zeros of a function with opposite signs at low and high, all at once.

    Source: the Illinois form of false position (Dowell and Jarratt 1971).
    """
    at_low, at_high = value(low), value(high)
    x, side, still = low, np.zeros(len(low)), 0
    for _ in range(ROUNDS_MOST):
        before = x
        x = (low * at_high - high * at_low) / (at_high - at_low)
        still = still + 1 if (np.abs(x - before) <= CLOSE * np.abs(x)).all() else 0
        if still == 2:
            break
        now = value(x)
        left = np.sign(now) != np.sign(at_high)
        # an end that stays twice counts half
        at_high = np.where(left, np.where(side == 1, 0.5, 1.0) * at_high, now)
        at_low = np.where(left, now, np.where(side == -1, 0.5, 1.0) * at_low)
        low, high = np.where(left, x, low), np.where(left, high, x)
        side = np.where(left, 1, -1)
    return np.asarray(x)


def feature_of(light: Light, thz: np.ndarray, kind: str | None = None) -> Feature | None:
    """Peaks or dips of a spectrum.

    Parameters
    ----------
    light : THz -> power and its derivative
    thz : float (W,), samples, rising; at least a few for each peak
    kind : "peak" or "dip"; None: what the spectrum spends less of its range on

    Returns
    -------
    Feature, or None where the range holds no peak or dip.
        Bandwidth is the full width at half the peak's power, or half-way between a dip's floor and the highest
        power of the range.

    Cost: about 50 calls of `light`, each with a number of frequencies like that of the features.
    """
    power, slope = light(thz)
    turns = np.flatnonzero((np.sign(slope[1:]) != np.sign(slope[:-1])) & (slope[:-1] != 0.0))
    if not len(turns):
        return None
    places = _zeros(lambda f: light(f)[1], thz[turns], thz[turns + 1])
    levels = light(places)[0]
    is_peak = slope[turns] > 0.0
    highest = max(float(power.max()), float(levels.max()))
    lowest = min(float(power.min()), float(levels.min()))
    if highest <= 0.0 or (lowest > 0.0 and db(highest / lowest) < LEAST_DB):
        return None
    if kind is None:
        kind = "dip" if float(power.mean()) > 0.5 * (highest + lowest) else "peak"
    away = levels - lowest if kind == "peak" else highest - levels
    chosen = (is_peak == (kind == "peak")) & (away >= PROMINENT * (highest - lowest))
    if not chosen.any():
        return None
    places, levels = places[chosen], levels[chosen]
    spacing = float(np.diff(places).mean()) / THZ_PER_GHZ if len(places) > 1 else math.nan
    at = int(np.argmin(np.abs(places - 0.5 * (thz[0] + thz[-1]))))
    half = 0.5 * levels[at] if kind == "peak" else 0.5 * (levels[at] + highest)
    width = _width(light, thz, power, float(places[at]), float(half)) / THZ_PER_GHZ
    step = float(np.diff(thz).max()) / THZ_PER_GHZ
    return Feature(
        kind,
        places.tolist(),
        levels.tolist(),
        spacing,
        width,
        db(highest) - db(lowest) if lowest > 0.0 else math.inf,
        spacing / width,
        bool(width < step),
    )


def _width(light: Light, thz: np.ndarray, power: np.ndarray, place: float, level: float) -> float:
    """Distance in THz of the two points about `place` where the power crosses `level`; NaN beyond the range."""
    here = float(light(np.array([place]))[0][0])
    ends = []
    for side in (thz[thz < place][::-1], thz[thz > place]):
        values = np.array([power[np.searchsorted(thz, f)] for f in side.tolist()])
        beyond = np.flatnonzero(np.sign(values - level) != np.sign(here - level))
        if not len(beyond):
            return math.nan
        k = int(beyond[0])
        near = place if k == 0 else float(side[k - 1])
        ends.append(float(_zeros(lambda f: light(f)[0] - level, np.array([near]), side[k : k + 1])[0]))
    return ends[1] - ends[0]
