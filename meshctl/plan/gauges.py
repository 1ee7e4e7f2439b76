"""Freedoms that cost no fidelity, used to save power: the sign of inner phases, and which of two heaters drives.

A Mach-Zehnder cell splits alike for inner phases theta and -theta; the difference is a pair of phases behind
it, which the next cells and the output phases take up. Output and input phases that a target leaves free, and
the common phase of all outputs, are used by the closed form in any case.
Public: least_power_flips, drive_power_mw, PAIRS_TO.
"""

from __future__ import annotations

import time

import numpy as np

from meshctl.plan.chip import Chip
from meshctl.solver.cells import MZI
from meshctl.solver.closed import ClosedForm
from meshctl.solver.reach import Reach
from meshctl.units import turns

PAIRS_TO = 130  # cells up to which pairs are tried: 16 modes


def drive_power_mw(chip: Chip, settings: np.ndarray, background: np.ndarray) -> float:
    """Heater power that settings take, whole turns taken off and the neighbours' warmth held fixed.

    Parameters
    ----------
    background : float (S,), rad that neighbours give
    """
    setting = chip.primary
    p2pi = chip.actuators.params.get("p2pi_mw")
    if p2pi is None:
        return 0.0
    weight = np.nan_to_num(p2pi[setting])
    own = turns(settings - chip.reference_rad - background)
    wraps = chip.period_rad > 0.0
    own = np.where(wraps, own - np.floor(own + 1e-12), own)
    if chip.second.any():  # the other arm's heater takes the rest of the turn
        own = np.where(chip.second, np.minimum(own, 1.0 - own), own)
    return float(weight @ np.maximum(own, 0.0))


class _Descent:
    """Flips of single cells and of pairs, kept where power falls."""

    def __init__(self, chip: Chip, form: ClosedForm, reach: Reach, background: np.ndarray, until: float) -> None:
        self.chip, self.form, self.reach, self.background, self.until = chip, form, reach, background, until
        self.place = form.best_place(reach)
        self.cells = np.flatnonzero(form.table.form == MZI)
        self.allowed = len(form.fit(reach, self.place).shortfalls)

    @property
    def over(self) -> bool:
        return time.monotonic() > self.until

    def power(self, flip: np.ndarray) -> float:
        fitted = self.form.fit(self.reach, self.place, flip)
        if len(fitted.shortfalls) > self.allowed:
            return np.inf
        return drive_power_mw(self.chip, fitted.settings, self.background)

    def descend(self, flip: np.ndarray, moves: list[tuple[int, ...]]) -> float:
        """Try every move until none gains; `flip` is changed in place."""
        best, gained = self.power(flip), True
        while gained and not self.over:
            gained = False
            for move in moves:
                flip[list(move)] ^= 1
                power = self.power(flip)
                if power < best - 1e-9:
                    best, gained = power, True
                else:
                    flip[list(move)] ^= 1
                if self.over:
                    break
        return best


def least_power_flips(
    chip: Chip, form: ClosedForm, reach: Reach, background: np.ndarray, seconds: float = 10.0, starts: int = 4
) -> np.ndarray:
    """Cells whose inner phase is best taken negative, by descent over cells and pairs from several starts.

    Parameters
    ----------
    background : float (S,), rad that neighbours give
    seconds : the best found by then is returned
    starts : all positive, then seeded random ones; the same answer each time where `seconds` is not reached

    Returns
    -------
    uint8 (C,), rows of the closed form's cells

    Cost: a fit of all cells for every move: 0.3 s at 8 modes; beyond PAIRS_TO cells single flips alone.
    """
    descent = _Descent(chip, form, reach, background, time.monotonic() + seconds)
    cells = descent.cells.tolist()
    singles: list[tuple[int, ...]] = [(c,) for c in cells]
    pairs: list[tuple[int, ...]] = (
        [(c, d) for i, c in enumerate(cells) for d in cells[:i]] if len(cells) <= PAIRS_TO else []
    )
    rng = np.random.default_rng(0)
    chosen, least = np.zeros(form.n_cells, np.uint8), np.inf
    for start in range(starts):
        flip = np.zeros(form.n_cells, np.uint8)
        if start:
            flip[descent.cells] = rng.integers(0, 2, len(cells))
        descent.descend(flip, singles)
        power = descent.descend(flip, singles + pairs)
        if power < least:
            chosen, least = flip, power
        if descent.over:
            break
    return chosen
