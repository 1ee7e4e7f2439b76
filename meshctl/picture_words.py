"""A mesh and its states in words: for logs, screen readers, and the lines below a picture.

Public: describe, fault_words, power_text.
"""

from __future__ import annotations

import numpy as np

from meshctl.mesh.graph import Mesh
from meshctl.picture_states import faults_of, sites_of
from meshctl.units import db

DARKEST_DB = -99.9  # below, a port is called dark: far under any detector


def power_text(power: float) -> str:
    """A power of 1 or less in dB, or "dark"."""
    level = db(power)
    return f"{round(level, 1) + 0.0:.1f}" if level >= DARKEST_DB else "dark"


def fault_words(mesh: Mesh) -> dict[int, str]:
    """What is wrong with each faulty setting."""
    stuck = mesh.as_built.stuck_rad
    dead = np.zeros(mesh.net.n_settings, bool)
    dead[mesh.actuators.setting[mesh.actuators.dead]] = True
    words: dict[int, str] = {}
    for s in np.flatnonzero(faults_of(mesh)).tolist():
        said = ["its actuator is dead"] if dead[s] else []
        if not np.isnan(stuck[s]):
            said.insert(0, f"stuck at {stuck[s]:.3f} rad")
        words[s] = " and ".join(said)
    return words


def describe(mesh: Mesh, settings: np.ndarray | None = None) -> str:
    """Every cell in words, a line each: its cross power, its settings from the exit backwards, its faults.

    Parameters
    ----------
    mesh : Mesh, with or without loops
    settings : float (S,), rad, in force at the centre wavelength; None: names and faults alone

    Returns
    -------
    str; faults of settings outside any cell follow.

    Raises
    ------
    WrongSize
        For settings of another mesh.

    Example
    -------
    >>> from meshctl import lattice
    >>> print(describe(lattice("rectangular", modes=2), np.zeros(4)))
    c1_1: cross power 1.00, inner 0.000 rad, outer 0.000 rad
    """
    net = mesh.net
    sites = sites_of(mesh, settings)
    powers: dict[int, list[float]] = {}
    for cell, power in zip(sites.cell.tolist(), sites.cross_power.tolist(), strict=True):
        powers.setdefault(cell, []).append(power)
    held = None if settings is None else mesh.as_built.in_force(settings)
    settings_of: dict[int, list[int]] = {}
    for s, cell in enumerate(net.cell_of[net.first_element].tolist()):
        settings_of.setdefault(cell, []).append(s)
    names, faults = net.setting_names, fault_words(mesh)
    lines = []
    for cell, name in enumerate(net.names.cells):
        parts = [f"cross power {p:.2f}" for p in powers.get(cell, []) if not np.isnan(p)]
        for s in reversed(settings_of.get(cell, [])):
            role = "angle" if names[s] == name else names[s].removeprefix(f"{name}.")
            value = "" if held is None else f" {held[s]:.3f} rad"
            fault = f" ({faults[s]})" if s in faults else ""
            parts.append(f"{role}{value}{fault}")
        lines.append(f"{name}: {', '.join(parts) or 'nothing to set'}")
    lines += [f"{names[s]}: {faults[s]}" for s in settings_of.get(-1, []) if s in faults]
    return "\n".join(lines)
