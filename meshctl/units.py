"""Decibel, wavelength and frequency: the only place where a factor of 10 or the speed of light appears.

Public: SPEED_OF_LIGHT_M_PER_S, amplitude_from_loss_db, power_from_loss_db, loss_db_from_power, db, db_array,
thz_from_nm, nm_from_thz, ps_from_phase_slope, turns, radians.
"""

from __future__ import annotations

import math
from typing import Any

SPEED_OF_LIGHT_M_PER_S = 299_792_458.0  # exact, SI definition of the metre
UM_PER_CM = 1e4
NM_PER_UM = 1e3
THZ_PER_GHZ = 1e-3
HZ_PER_THZ = 1e12
TWO_PI = 2.0 * math.pi
_LN10 = math.log(10.0)


def amplitude_from_loss_db(loss_db: Any) -> Any:
    """Field factor of a loss in dB (positive when light is lost): 3.01 dB gives 0.7071."""
    return 10.0 ** (-0.05 * loss_db)


def power_from_loss_db(loss_db: Any) -> Any:
    """Power factor of a loss in dB: 3.01 dB gives 0.5."""
    return 10.0 ** (-0.1 * loss_db)


def db(ratio: float) -> float:
    """A power ratio in dB; 0 gives -inf."""
    return 10.0 * math.log10(ratio) if ratio > 0.0 else -math.inf


def db_array(ratios: Any) -> Any:
    """Power ratios in dB, an array; 0 gives -inf."""
    import numpy as np

    with np.errstate(divide="ignore"):
        return 10.0 * np.log10(ratios)


def loss_db_from_power(ratio: float) -> float:
    """Loss in dB (positive) of a power transmission; 0 gives inf."""
    return -db(ratio)


def thz_from_nm(wavelength_nm: Any) -> Any:
    """Optical frequency in THz of a vacuum wavelength in nm."""
    return SPEED_OF_LIGHT_M_PER_S / wavelength_nm * 1e-3


def nm_from_thz(frequency_thz: Any) -> Any:
    """Vacuum wavelength in nm of an optical frequency in THz."""
    return SPEED_OF_LIGHT_M_PER_S / frequency_thz * 1e-3


def ps_from_phase_slope(rad_per_thz: Any) -> Any:
    """Delay in ps of a phase that grows with frequency: 2 pi rad per THz is 1 ps."""
    return rad_per_thz / TWO_PI


def turns(angle_rad: Any) -> Any:
    """Radians as turns of 2 pi."""
    return angle_rad / TWO_PI


def radians(angle_turns: Any) -> Any:
    """Turns of 2 pi as radians."""
    return angle_turns * TWO_PI
