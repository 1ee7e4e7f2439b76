"""Measures of a die, what may be required of them, and how surely a share of dies is known.

Public: MEASURES, Measure, Requirement, requirement, Yield, yield_of.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from meshctl.errors import WrongUsage
from meshctl.mesh.tables import unknown_name

CONFIDENCE = 0.95  # of the intervals of yields


@dataclass(frozen=True)
class Measure:
    """One number that tells how good a die is."""

    name: str
    unit: str
    low: float
    high: float
    help: str


MEASURES: dict[str, Measure] = {
    m.name: m
    for m in (
        Measure("fidelity", "", 0.0, 1.0, "of the matrix, blind to uniform loss and a global phase"),
        Measure("matrix_error", "", 0.0, 1.0, "relative distance to the target after the best complex scale"),
        Measure("power_error", "", 0.0, 1.0, "largest difference of an output's power from the wished one, losses in"),
        Measure("throughput", "", 0.0, 1.0, "share of light that comes out, mean over inputs"),
        Measure("crosstalk_db", "dB", -math.inf, math.inf, "worst output: unwanted over wanted power"),
        Measure("insertion_loss_db", "dB", -math.inf, math.inf, "worst input: what is missing at its wanted outputs"),
        Measure("power_mw", "mW", 0.0, math.inf, "static electrical power"),
    )
}

_WORDS = re.compile(r"\s*([A-Za-z_]\w*)\s*(>=|<=|>|<)\s*(\S+)\s*")
_TESTS: dict[str, Callable[[np.ndarray, float], np.ndarray]] = {
    ">=": np.greater_equal,
    "<=": np.less_equal,
    ">": np.greater,
    "<": np.less,
}


@dataclass(frozen=True)
class Requirement:
    """What a die must reach."""

    measure: str
    relation: str
    value: float

    def __str__(self) -> str:
        return f"{self.measure}{self.relation}{self.value:g}"

    def met(self, values: np.ndarray) -> np.ndarray:
        """True for each value that meets it; NaN, a die that could not be driven, never does."""
        return np.asarray(_TESTS[self.relation](values, self.value))


def requirement(words: str) -> Requirement:
    """Read a requirement such as 'fidelity>=0.99'.

    Raises
    ------
    WrongUsage
        With what was found, what is allowed and an example.
    """
    found = _WORDS.fullmatch(words)
    if not found:
        raise WrongUsage(f"'{words}' is no requirement", remedy="write MEASURE>=NUMBER, such as 'fidelity>=0.99'")
    name, relation, number = found.groups()
    if name not in MEASURES:
        finding = unknown_name("measure", name, MEASURES, "")
        raise WrongUsage(f"'{words}': {finding.what}", remedy=finding.remedy)
    try:
        value = float(number)
    except ValueError:
        raise WrongUsage(f"'{words}': '{number}' is no number", remedy="write one, such as 0.99") from None
    measure = MEASURES[name]
    if not (math.isfinite(value) and measure.low <= value <= measure.high):
        unit = f" {measure.unit}" if measure.unit else ""
        raise WrongUsage(
            f"'{words}': {name} is never {number}", remedy=f"allowed is {measure.low:g} to {measure.high:g}{unit}"
        )
    return Requirement(name, relation, value)


@dataclass(frozen=True)
class Yield:
    """Share of dies that meet something, with its Clopper-Pearson interval."""

    met: int
    trials: int
    share: float
    low: float
    high: float

    @property
    def half_width(self) -> float:
        return 0.5 * (self.high - self.low)


def yield_of(met: int, trials: int, confidence: float = CONFIDENCE) -> Yield:
    """The exact interval of a binomial share (Clopper and Pearson, Biometrika 1934), by the quantiles of beta laws."""
    from scipy.special import betaincinv

    if trials == 0:
        return Yield(0, 0, math.nan, 0.0, 1.0)
    tail = 0.5 * (1.0 - confidence)
    low = float(betaincinv(met, trials - met + 1, tail)) if met else 0.0
    high = float(betaincinv(met + 1, trials - met, 1.0 - tail)) if met < trials else 1.0
    return Yield(met, trials, met / trials, low, high)


def until_width(words: str) -> float:
    """The half width that `--until` asks for: 1% or 0.01.

    Raises
    ------
    WrongUsage
    """
    text = words.strip()
    try:
        value = float(text.removesuffix("%")) / (100.0 if text.endswith("%") else 1.0)
    except ValueError:
        value = math.nan
    if not 0.0 < value < 0.5:
        raise WrongUsage(f"'{words}' is no width", remedy="write a share between 0 and 50 %, such as 1% or 0.01")
    return value
