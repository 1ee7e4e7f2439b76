"""Every optical part as numbers: the only home of sign and port conventions.

Conventions, each tested by number in tests/test_elements.py:

- A field goes as exp(-i w t); a waveguide of length L multiplies it by exp(+i 2 pi n L / lambda), so
  phases grow with path.
- A coupler with angle k is ``[[cos k, i sin k], [i sin k, cos k]]``; cross_power = sin^2 k. k = 0 is bar,
  pi/2 is cross. Angles are never folded: k + pi is the same block times -1.
- A Mach-Zehnder cell is ``C(pi/4 + e2) diag(exp(i inner), 1) C(pi/4 + e1) diag(exp(i outer), 1)`` with
  both phases on the upper arm: inner = 0 is cross, inner = pi is bar.
- A crossing is ``[[0, 1], [1, 0]]``. Matrices are [out, in].
- A part that reflects is ``[[r, t], [t, r]]`` with t >= 0 and r = |r| exp(i psi); psi is +pi/2 unless given,
  which keeps it passive: |t +- r| <= 1. A terminator is ``[r]``, psi 0 unless given.
- Values hold at the centre wavelength l0. A phase scales as l0/l; a guide turns by
  2 pi L (n(l)/l - n(l0)/l0) with n(l) = n_eff - (n_group - n_eff)(l - l0)/l0; a coupler angle is
  value * (1 + angle_slope_per_nm (l - l0)).

All functions take numpy or jax.numpy arrays: pass the module as `xp`.
Public: KINDS, kind_row, HAS_PHASE, through_and_cross, coupler_block, phase_block, cell_block, phase_scale,
angle_scale, guide_phase_rad, phase_slope_per_nm, guide_phase_rad_per_um, guide_slope_rad_per_um_nm.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from meshctl.units import NM_PER_UM, TWO_PI, amplitude_from_loss_db


@dataclass(frozen=True)
class Kind:
    """One kind of optical part: its name, its ports, the unit and default of its value."""

    name: str
    ports: tuple[str, ...]
    unit: str  # of the value: rad, dB, um or "" for none
    value_keys: tuple[str, ...]  # keys by which a mesh file may give the value
    default: float | None  # None: must be given
    reflects: bool = False


FOUR = ("a1", "a2", "b1", "b2")
_RETURNS = ("reflection_db", "reflected_power", "reflection_rad")
_PASSES = ("loss_db", "transmitted_power", *_RETURNS)
_FILE = ("file", "ports", "time")
KINDS: tuple[Kind, ...] = (
    Kind("coupler", FOUR, "rad", ("angle_rad", "cross_power"), np.pi / 4),
    Kind("phase", ("a", "b"), "rad", ("phase_rad",), 0.0),
    Kind("guide", ("a", "b"), "um", ("length_um",), None),
    Kind("loss", ("a", "b"), "dB", ("loss_db",), None),
    Kind("crossing", FOUR, "", (), 0.0),
    Kind("isolation", ("a", "b"), "dB", _PASSES, None, reflects=True),  # an electrical gap across a waveguide
    Kind("tether", ("a", "b"), "dB", _PASSES, None, reflects=True),  # holds a suspended waveguide
    Kind("mirror", ("a", "b"), "dB", _PASSES, None, reflects=True),
    Kind("terminator", ("a",), "", _RETURNS, 0.0, reflects=True),
    Kind("measured", ("a", "b"), "", _FILE, None, reflects=True),
    Kind("measured", FOUR, "", _FILE, None, reflects=True),
)
COUPLER, PHASE, GUIDE, LOSS, CROSSING, ISOLATION, TETHER, MIRROR, TERMINATOR, MEASURED2, MEASURED4 = range(11)
HAS_PHASE = (COUPLER, PHASE, GUIDE)  # kinds whose value in force is an angle or a phase
_ROWS = {kind.name: row for row, kind in reversed(list(enumerate(KINDS)))}


def kind_row(name: str) -> int | None:
    """Row of a kind in KINDS (of several with one name the first), or None for an unknown name."""
    return _ROWS.get(name)


def coupler_block(angle_rad: Any, xp: Any = np) -> Any:
    """Coupler blocks [..., 2, 2] of angles [...] in rad."""
    c, s = xp.cos(angle_rad) + 0j, 1j * xp.sin(angle_rad)
    return xp.stack([xp.stack([c, s], -1), xp.stack([s, c], -1)], -2)


def phase_block(phase_rad: Any, xp: Any = np) -> Any:
    """Blocks [..., 2, 2] of a phase on the upper arm."""
    e = xp.exp(1j * phase_rad)
    one, zero = xp.ones_like(e), xp.zeros_like(e)
    return xp.stack([xp.stack([e, zero], -1), xp.stack([zero, one], -1)], -2)


def cell_block(inner_rad: Any, outer_rad: Any, error1_rad: Any = 0.0, error2_rad: Any = 0.0, xp: Any = np) -> Any:
    """Mach-Zehnder cells [..., 2, 2] with splitting errors of the first and second coupler."""
    quarter = xp.asarray(np.pi / 4)
    first = coupler_block(quarter + error1_rad, xp) @ phase_block(xp.asarray(outer_rad), xp)
    return coupler_block(quarter + error2_rad, xp) @ phase_block(xp.asarray(inner_rad), xp) @ first


def phase_scale(wavelength_nm: Any, centre_nm: float) -> Any:
    """What a phase is multiplied by at another wavelength than the centre."""
    return centre_nm / wavelength_nm


def angle_scale(wavelength_nm: Any, centre_nm: float, angle_slope_per_nm: float) -> Any:
    """What a coupler's angle is multiplied by at another wavelength than the centre."""
    return 1.0 + angle_slope_per_nm * (wavelength_nm - centre_nm)


def guide_phase_rad(length_um: Any, wavelength_nm: float, centre_nm: float, n_eff: float, n_group: float) -> Any:
    """Phase of guides relative to the centre wavelength, rad.

    Source: first-order dispersion, n_group = n_eff - lambda dn/dlambda (textbook waveguide optics).
    """
    return length_um * guide_phase_rad_per_um(wavelength_nm, centre_nm, n_eff, n_group)


def guide_phase_rad_per_um(wavelength_nm: Any, centre_nm: float, n_eff: float, n_group: float) -> Any:
    """Phase per micrometre of guide relative to the centre wavelength; wavelengths may be an array."""
    index = n_eff - (n_group - n_eff) * (wavelength_nm - centre_nm) / centre_nm
    return TWO_PI * NM_PER_UM * (index / wavelength_nm - n_eff / centre_nm)


def phase_slope_per_nm(wavelength_nm: Any, centre_nm: float) -> Any:
    """Derivative of `phase_scale` by the wavelength."""
    return -centre_nm / wavelength_nm**2


def guide_slope_rad_per_um_nm(wavelength_nm: Any, n_group: float) -> Any:
    """Derivative of the phase per micrometre of guide by the wavelength: n(l)/l falls with n_group / l^2."""
    return -TWO_PI * NM_PER_UM * n_group / wavelength_nm**2


def through_and_cross(
    kind: Any,
    value: Any,
    loss_db: Any,
    length_um: Any,
    wavelength_nm: float,
    centre_nm: float,
    n_eff: float,
    n_group: float,
    angle_slope_per_nm: float,
    xp: Any = np,
) -> tuple[Any, Any]:
    """Through and cross amplitudes of every part at one wavelength.

    Every loop-free part of ours is ``[[t, x], [x, t]]`` on its two lanes, or ``t`` on its one lane.

    Parameters
    ----------
    kind : uint8 array (E,), rows of KINDS
    value : float array (E,), in force at the centre wavelength: rad; for a loss, dB
    loss_db : float array (E,), all further loss of the part, dB per lane
    length_um : float array (E,), length of guides, else 0

    Returns
    -------
    t, x : complex arrays (E,)
    """
    angle = value * angle_scale(wavelength_nm, centre_nm, angle_slope_per_nm)
    phase = value * phase_scale(wavelength_nm, centre_nm) + guide_phase_rad(
        length_um, wavelength_nm, centre_nm, n_eff, n_group
    )
    is_coupler, is_loss, is_crossing = kind == COUPLER, kind == LOSS, kind == CROSSING
    amplitude = amplitude_from_loss_db(loss_db + xp.where(is_loss, value, 0.0))
    turning = xp.where(is_loss, 0.0, phase)
    t = xp.where(is_coupler, xp.cos(angle) + 0j, xp.exp(1j * turning))
    t = xp.where(is_crossing, 0.0, t) * amplitude
    x = xp.where(is_coupler, 1j * xp.sin(angle), xp.where(is_crossing, 1.0 + 0j, 0j)) * amplitude
    return t, x
