"""One cell stepped at a time: the new matrix of a net with loops without solving it afresh.

Public: Stepping.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.response import Response
from meshctl.optics.updater import Updater


class Stepping:
    """The matrix at one wavelength while single cells are moved from where all settings stand.

    Parameters
    ----------
    response : Response
    settings : float (S,), where all stand
    wavelength_nm : None for the centre

    Cost: one solve to begin with and one small one for the first step of each cell; a step then costs a twentieth
    of a solve at 306 cells.

    Example
    -------
    >>> from meshctl.mesh.meshfile import lattice
    >>> mesh = lattice("hexagonal", rings=1, cell="gap")
    >>> steps = Stepping(Response(mesh.net, mesh.as_built), np.zeros(mesh.net.n_settings))
    >>> steps.matrix(2, np.full(mesh.net.n_settings, 0.3)).shape
    (12, 12)
    """

    def __init__(self, response: Response, settings: np.ndarray, wavelength_nm: float | None = None) -> None:
        self.response, self.settings = response, settings
        self.at = np.array([response.net.wavelength_nm if wavelength_nm is None else wavelength_nm])
        solved = response.waves.solved(response.values(settings), self.at, keep=True)
        response.waves.release()
        self._updater = Updater(solved)

    def matrix(self, cell: int, settings: np.ndarray) -> np.ndarray:
        """The matrix (out, in) with the settings of one cell taken from `settings`, all others as they stood."""
        net, stood = self.response.net, self.settings.copy()
        moved = net.setting_of[net.cell_of == cell]
        moved = moved[moved >= 0]
        stood[moved] = settings[moved]
        entries = self.response.waves.entries(self.response.values(stood), self.at)
        return self._updater.response(cell, entries[:, self._updater.entries(cell)])[0]
