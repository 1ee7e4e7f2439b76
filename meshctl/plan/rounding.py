"""Codes rounded against the matrix: errors are let fall where the light cares least.

Public: rounded, AWARE_TO.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.sensitivity import gram, jacobian
from meshctl.plan.chip import Chip
from meshctl.plan.placing import Placed

AWARE_TO = 1100  # settings up to which the Gram matrix is formed: a full mesh of 32 modes, about a second


def rounded(chip: Chip, placed: Placed, settings: np.ndarray, free: str) -> np.ndarray:
    """Codes near the placed ones whose errors do the matrix least harm.

    Parameters
    ----------
    settings : float (S,), the settings placed
    free : port phases that do not count

    Returns
    -------
    int64 (K,); the placed codes themselves where a law is stepwise, a channel drives current, an actuator is
    held at a limit, or the mesh has more than AWARE_TO settings.
    """
    stepwise = any(group.law.stepwise for group in chip.groups)
    if stepwise or placed.held or chip.by_current.any() or chip.net.n_settings > AWARE_TO:
        return placed.codes
    from meshctl.drive.codes import round_against

    rows = jacobian(chip.response, settings)
    costs = gram(rows, chip.response.matrix(settings), free)
    if not costs.any():
        return placed.codes
    # the shared ground's rise and the heat felt are held where they are: one code moves them by little
    rise = placed.levels[chip.actuators.channel] - _across(chip, placed)
    heat = np.zeros(0)
    if chip.coupled:
        from meshctl.plan.circuit import heat_turns

        heat = heat_turns(chip, placed.change)

    def own_of(codes: np.ndarray) -> np.ndarray:
        at = chip.source.volts_of(codes)[chip.actuators.channel] - rise
        own = np.zeros(len(chip.actuators))
        for group in chip.groups:
            felt = heat[group.rows] if chip.coupled and group.law.power_law else None
            low, high = group.law.limits_v(group.p)
            inside = np.clip(at[group.rows], low, high)
            own[group.rows] = group.law.change_rad(inside, group.p, felt)
        own[chip.actuators.dead] = 0.0
        return own

    source, (lowest, highest) = chip.source, chip.level_range
    bottom, top = lowest.copy(), highest.copy()
    np.maximum.at(bottom, chip.actuators.channel, chip.bounds.low_v)
    np.minimum.at(top, chip.actuators.channel, chip.bounds.high_v)
    low = np.ceil((bottom - source.first_v) / source.step_v - 1e-9).astype(np.int64)
    high = np.floor((top - source.first_v) / source.step_v + 1e-9).astype(np.int64)
    answer = round_against(
        costs,
        own_of,
        placed.change,
        placed.codes,
        np.minimum(high, source.highest),
        lowest=np.maximum(low, 0),
        channel=chip.actuators.channel,
        spread=_spread(chip),
    )
    return answer.codes


def _across(chip: Chip, placed: Placed) -> np.ndarray:
    """Volts [A] across each actuator, the ground's rise taken off."""
    at = placed.levels[chip.actuators.channel].copy()
    if chip.coupled:
        from meshctl.plan.circuit import ground_rise

        at[chip.resistive] -= ground_rise(chip, placed.change)
    return at


def _spread(chip: Chip):  # type: ignore[no-untyped-def]
    """Error of each setting by each own change, [S, A]; None where it is the identity."""
    actuators, n = chip.actuators, chip.net.n_settings
    plain = len(actuators) == n and np.array_equal(actuators.setting, np.arange(n))
    if plain and actuators.crosstalk is None:
        return None
    from scipy.sparse import csr_matrix

    own = csr_matrix(
        (np.ones(len(actuators)), (actuators.setting, np.arange(len(actuators)))), shape=(n, len(actuators))
    )
    return own if actuators.crosstalk is None else own + actuators.crosstalk
