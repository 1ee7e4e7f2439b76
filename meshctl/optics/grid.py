"""Wavelengths to look at, from words: a range in nm or THz, or a plan of channels.

Public: wavelengths_of, checked_wavelengths, LOW_NM, HIGH_NM.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from meshctl.errors import WrongUsage
from meshctl.units import THZ_PER_GHZ, nm_from_thz

ANCHOR_THZ = 193.1  # ITU-T G.694.1 (2020), clause 6: nominal central frequencies 193.1 + n x spacing
SPACINGS_GHZ = (12.5, 25.0, 50.0)  # the same; 100 GHz and its multiples besides
LOW_NM, HIGH_NM = 200.0, 20000.0
COUNT_MOST = 1_000_000
FORMS = (
    "FROM:TO:COUNT in nm, such as 1540:1560:201, FROM:TO:COUNTthz, such as 192:196:401thz, "
    "or itu:GHZ:FIRST:LAST, such as itu:50:-20:20"
)


def wavelengths_of(words: str, option: str = "--wavelengths") -> np.ndarray:
    """Vacuum wavelengths in nm, float (W,), in the order asked for.

    Parameters
    ----------
    words : `FROM:TO:COUNT` (nm; "nm" may follow), `FROM:TO:COUNTthz` (equal steps of frequency), or
        `itu:GHZ:FIRST:LAST`, the channels 193.1 THz + n x GHZ for n from FIRST to LAST

    Raises
    ------
    WrongUsage

    Example
    -------
    >>> wavelengths_of("itu:100:0:0").round(2)
    array([1552.52])
    """
    parts = words.lower().split(":")
    try:
        if "_" in words:
            raise ValueError
        if parts[0] == "itu":
            found = _channels(words, [float(p) for p in parts[1:]], option)
        else:
            last = parts[-1].removesuffix("nm")
            in_thz = last.endswith("thz")
            first, to, count = float(parts[0]), float(parts[1]), int(last.removesuffix("thz"))
            if (
                len(parts) != 3
                or not 1 <= count <= COUNT_MOST
                or min(first, to) <= 0
                or not np.isfinite([first, to]).all()
            ):
                raise ValueError
            line = np.linspace(first, to, count)
            found = nm_from_thz(line) if in_thz else line
    except (ValueError, IndexError):
        raise WrongUsage(
            f"{option} {words} is no range",
            remedy=f"write {FORMS}; {LOW_NM:g} to {HIGH_NM:g} nm, 1 to {COUNT_MOST} of them",
        ) from None
    beyond = found[(found < LOW_NM) | (found > HIGH_NM)]
    if len(beyond):
        raise WrongUsage(
            f"{option} {words} reaches {beyond[0]:.6g} nm",
            remedy=f"stay within {LOW_NM:g} to {HIGH_NM:g} nm; frequencies need 'thz' behind the count",
        )
    return np.asarray(found)


def _channels(words: str, numbers: list[float], option: str) -> np.ndarray:
    spacing, first, last = numbers
    if not np.isfinite(numbers).all():
        raise ValueError
    if not (spacing in SPACINGS_GHZ or (spacing >= 100 and spacing % 100 == 0)):
        raise WrongUsage(
            f"{option} {words}: a spacing of {spacing:g} GHz is in no channel plan",
            remedy=f"use {', '.join(f'{s:g}' for s in SPACINGS_GHZ)} or a multiple of 100 GHz",
        )
    if first != int(first) or last != int(last) or last < first or last - first >= COUNT_MOST:
        raise WrongUsage(
            f"{option} {words}: channels {first:g} to {last:g} are no rising whole numbers",
            remedy="write such as itu:50:-20:20",
        )
    thz = ANCHOR_THZ + np.arange(int(first), int(last) + 1) * spacing * THZ_PER_GHZ
    if thz[0] <= 0.0:
        raise WrongUsage(
            f"{option} {words}: channel {first:g} lies at {thz[0]:.6g} THz",
            remedy=f"stay within {LOW_NM:g} to {HIGH_NM:g} nm, such as itu:50:-20:20",
        )
    return np.asarray(nm_from_thz(thz))


def checked_wavelengths(values: Any, name: str = "wavelengths_nm") -> np.ndarray:
    """Wavelengths from Python, float (W,): one number or a list of them, in nm.

    Raises
    ------
    WrongUsage

    Example
    -------
    >>> checked_wavelengths(1550)
    array([1550.])
    """
    remedy = f"give one number or a list of them, {LOW_NM:g} to {HIGH_NM:g} nm"
    if isinstance(values, str):
        raise WrongUsage(f"{name} is the text '{values}'", remedy=f"{remedy}; numpy.linspace makes ranges")
    try:
        found = np.atleast_1d(np.asarray(values))
    except ValueError:
        raise WrongUsage(f"{name} is no list of numbers", remedy=remedy) from None
    if found.dtype.kind not in "iuf":
        raise WrongUsage(f"{name} holds {found.dtype}, not numbers", remedy=remedy)
    if found.ndim != 1 or not len(found):
        said = f"has {found.ndim} dimensions" if found.ndim != 1 else "is empty"
        raise WrongUsage(f"{name} {said}", remedy=remedy)
    beyond = found[~((found >= LOW_NM) & (found <= HIGH_NM))]
    if len(beyond):
        raise WrongUsage(f"{name} holds {beyond[0]:.6g} nm", remedy=remedy)
    return found.astype(float)
