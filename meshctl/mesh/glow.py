"""Where light runs inside a net with loops: the power on every link, both directions added.

Public: glow.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.graph import Net
from meshctl.mesh.response import Response
from meshctl.optics.scattering import fields


def glow(response: Response, settings: np.ndarray, input_row: int) -> np.ndarray:
    """Power at every port of the net for light of power 1 in one input, at the centre wavelength.

    Parameters
    ----------
    response : Response, of a net with loops
    settings : float (S,), rad
    input_row : position among the net's inputs

    Returns
    -------
    float (P,): what leaves the port and what enters it, added. Scattering folds one-lane parts away: their ports
    are given the power at the next port that is left, so their own loss does not show.

    Cost: one solve that keeps its fronts.
    """
    net, waves = response.net, response.waves
    found = waves.solved(response.values(settings), np.array([net.wavelength_nm]), keep=True)
    waves.release()
    into = np.zeros(len(found.inputs), complex)
    into[input_row] = 1.0
    enter, leave = fields(found, into)
    is_core = np.zeros(net.n_elements, bool)
    is_core[waves.woven.row] = True
    power = np.full(len(net.mate), np.nan)
    power[np.flatnonzero(is_core[net.element_of_port])] = np.abs(enter[0]) ** 2 + np.abs(leave[0]) ** 2
    return _through_folded(net, power)


def _through_folded(net: Net, power: np.ndarray) -> np.ndarray:
    """Fill NaN along links and through parts of two ports."""
    ports = np.arange(len(power))
    first = net.port_start[net.element_of_port]
    lone = np.diff(net.port_start)[net.element_of_port] == 2
    across = np.where(lone, 2 * first + 1 - ports, ports)
    linked = np.where(net.mate >= 0, net.mate, ports)
    while True:
        dark = int(np.isnan(power).sum())
        for other in (linked, across):
            power = np.where(np.isnan(power), power[other], power)
        if int(np.isnan(power).sum()) == dark:
            return power
