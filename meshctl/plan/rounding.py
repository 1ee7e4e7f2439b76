"""Codes rounded against the matrix: errors are let fall where the light cares least.

Public: rounded, AWARE_TO.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.sensitivity import gram, jacobian
from meshctl.plan.chip import Chip
from meshctl.plan.placing import Placed, code_range
from meshctl.plan.wanted import Wanted

CURVED_TO = 400  # settings up to which wishes other than one matrix are followed: two gradients for each
STEP_RAD = 1e-4  # of the differences of gradients: half of the digits are left
AWARE_TO = 1100  # settings up to which the Gram matrix is formed: a full mesh of 32 modes, about a second


def rounded(chip: Chip, placed: Placed, settings: np.ndarray, wanted: Wanted) -> np.ndarray:
    """Codes near the placed ones whose errors do the matrix least harm.

    Parameters
    ----------
    settings : float (S,), the settings placed
    wanted : one matrix, or any wish: then errors are weighed by the wish's own curvature

    Returns
    -------
    int64 (K,); the placed codes themselves where a law is stepwise, a channel drives current, or the mesh has
    more than AWARE_TO settings (CURVED_TO for wishes other than one matrix, and for nets with loops).
    """
    stepwise = any(group.law.stepwise for group in chip.groups)
    by_matrix = wanted.plain and not chip.response.loops
    most = AWARE_TO if by_matrix else CURVED_TO
    if stepwise or chip.by_current.any() or chip.net.n_settings > most:
        return placed.codes
    from meshctl.drive.codes import round_against

    if by_matrix:
        costs = gram(jacobian(chip.response, settings), chip.response.matrix(settings), wanted.free)
    else:
        costs = _curvature(chip, settings, wanted)
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

    lowest, highest = code_range(chip)
    answer = round_against(
        costs,
        own_of,
        placed.change,
        placed.codes,
        highest,
        lowest=lowest,
        channel=chip.actuators.channel,
        spread=_spread(chip),
    )
    return answer.codes


def _curvature(chip: Chip, settings: np.ndarray, wanted: Wanted) -> np.ndarray:
    """G of e^T G e, what small errors e of the settings add to what is to be made small: half its second derivative."""
    step = STEP_RAD * np.eye(len(settings))
    second = np.array(
        [wanted.pull(chip.response, settings + d) - wanted.pull(chip.response, settings - d) for d in step]
    ) / (2.0 * STEP_RAD)
    sizes, directions = np.linalg.eigh(0.25 * (second + second.T))
    costs: np.ndarray = (directions * np.maximum(sizes, 0.0)) @ directions.T
    return costs


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
