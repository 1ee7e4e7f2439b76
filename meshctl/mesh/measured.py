"""Parts as anyone measured or computed them: scattering matrices over wavelength from Touchstone or CSV files.

Conventions: [out, in], fields as exp(-i w t). Touchstone files follow exp(+j w t) and are conjugated; a CSV
file follows ours unless its part says ``time = "exp(+jwt)"``. Between the measured wavelengths magnitude and
unwrapped phase go along monotone cubics over frequency, and beyond them nothing is known.
Public: Measured, read_measured, TIMES.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from meshctl.errors import (
    DuplicateName,
    MissingExtra,
    MissingFile,
    MissingRow,
    OutOfRange,
    UnsoundFile,
    WrongSize,
)
from meshctl.mesh.quantities import Quantity
from meshctl.mesh.tables import read_table
from meshctl.units import HZ_PER_THZ, nm_from_thz, thz_from_nm

if TYPE_CHECKING:  # pragma: no cover
    from scipy.interpolate import PchipInterpolator

TIMES = ("exp(-iwt)", "exp(+jwt)")
GAIN_WITHIN = 1e-4  # of a field amplitude: files of four digits are taken
BETWEEN_WITHIN = 1e-3  # the same half-way between two measured wavelengths
RECIPROCAL_WITHIN = 1e-3  # of a field amplitude
STEP_MOST_RAD = 0.9 * np.pi  # a step of the phase nearer to pi may as well have gone the other way
DARK = 1e-6  # amplitude below which a phase says nothing
EDGE = 1e-12  # rounding of a wavelength at the very end of the range, relative

CSV_HEAD = ("wavelength_nm", "out", "in", "amplitude", "phase_rad")
_NUMBERS = {
    "wavelength_nm": Quantity("wavelength_nm", "nm", 200.0, 20000.0, "vacuum wavelength"),
    "amplitude": Quantity("amplitude", "", 0.0, 1e3, "amplitude of the field that leaves, for 1 that enters"),
    "phase_rad": Quantity("phase_rad", "rad", -np.inf, np.inf, "its phase"),
}


@dataclass(frozen=True, eq=False)
class Measured:
    """The scattering matrix of one part over frequency; F points, n ports."""

    source: str  # what it was read from, and how
    thz: np.ndarray  # f64[F], rising
    magnitude: np.ndarray  # f64[F, n, n]
    phase_rad: np.ndarray  # f64[F, n, n], unwrapped

    @cached_property
    def _curves(self) -> tuple[PchipInterpolator, PchipInterpolator, PchipInterpolator, PchipInterpolator]:
        from scipy.interpolate import PchipInterpolator

        size = PchipInterpolator(self.thz, self.magnitude, axis=0)
        phase = PchipInterpolator(self.thz, self.phase_rad, axis=0)
        return size, phase, size.derivative(), phase.derivative()

    @property
    def range_nm(self) -> tuple[float, float]:
        """Shortest and longest measured wavelength."""
        return float(nm_from_thz(self.thz[-1])), float(nm_from_thz(self.thz[0]))

    def _inside(self, wavelengths_nm: np.ndarray) -> np.ndarray:
        low, high = self.range_nm
        waves = np.asarray(wavelengths_nm, float)
        beyond = (waves < low * (1 - EDGE)) | (waves > high * (1 + EDGE))
        if beyond.any():
            raise OutOfRange(
                f"{float(waves[beyond][0]):.6g} nm is outside the measured {low:.6g} to {high:.6g} nm",
                where=self.source,
                remedy="ask for wavelengths inside, or measure the part over a wider range",
            )
        return np.clip(thz_from_nm(waves), self.thz[0], self.thz[-1])

    def at(self, wavelengths_nm: np.ndarray) -> np.ndarray:
        """S [W, n, n].

        Raises
        ------
        OutOfRange
            Outside the measured range.
        """
        thz = self._inside(wavelengths_nm)
        size, phase, _, _ = self._curves
        found: np.ndarray = size(thz) * np.exp(1j * phase(thz))
        return found

    def slope_per_nm(self, wavelengths_nm: np.ndarray) -> np.ndarray:
        """Derivative of S [W, n, n] by the wavelength."""
        thz = self._inside(wavelengths_nm)
        size, phase, d_size, d_phase = self._curves
        along = np.exp(1j * phase(thz)) * (d_size(thz) + 1j * size(thz) * d_phase(thz))
        found: np.ndarray = along * (-thz / np.asarray(wavelengths_nm, float))[:, None, None]
        return found


def read_measured(path: Path, ports: tuple[str, ...], time: str | None, where: str) -> Measured:
    """Read one file and check it.

    Parameters
    ----------
    path : a Touchstone file (.s2p, .s4p) or a CSV file with the columns of CSV_HEAD
    ports : our port of each port of a Touchstone file, in its order; the names that a CSV file uses
    time : time convention of the file, one of TIMES; None: by the kind of file
    where : place of the part in mesh.toml, for messages

    Raises
    ------
    MissingFile, MissingExtra, WrongSize, UnsoundFile
        UnsoundFile where the part makes light, is not reciprocal, or its phase cannot be followed.
    """
    if not path.is_file():
        raise MissingFile(f"there is no file '{path.name}'", where=where, remedy="put it into the mesh folder")
    text = path.suffix.lower() == ".csv"
    thz, s = _from_csv(path, ports) if text else _from_touchstone(path, ports)
    time = time or TIMES[0 if text else 1]
    said = f"{path.name}"
    if time == TIMES[1]:
        s, said = s.conj(), f"{path.name} (conjugated: it follows {TIMES[1]})"
    _check_passive(s, thz, path.name, GAIN_WITHIN)
    apart = abs(s - s.swapaxes(1, 2)).max(axis=(1, 2))
    if apart.max() > RECIPROCAL_WITHIN:
        f = int(np.argmax(apart))
        raise UnsoundFile(
            f"the part is not reciprocal: at {nm_from_thz(thz[f]):.6g} nm S and its transpose differ by "
            f"{apart[f]:.3g}, allowed is {RECIPROCAL_WITHIN:g}",
            where=path.name,
            remedy="only reciprocal parts can stand in a mesh; check the port order and the calibration",
        )
    s = 0.5 * (s + s.swapaxes(1, 2))
    made = Measured(said, thz, np.abs(s), _followed(s, thz, path.name))
    middle = nm_from_thz(0.5 * (thz[1:] + thz[:-1]))
    _check_passive(made.at(middle), 0.5 * (thz[1:] + thz[:-1]), path.name, BETWEEN_WITHIN, between=True)
    return made


def _check_passive(s: np.ndarray, thz: np.ndarray, name: str, within: float, between: bool = False) -> None:
    gain = np.linalg.norm(s, ord=2, axis=(1, 2))
    if gain.max() > 1.0 + within:
        f = int(np.argmax(gain))
        at = f"{'between points, at ' if between else 'at '}{nm_from_thz(thz[f]):.6g} nm"
        raise UnsoundFile(
            f"the part makes light: {at} a field grows by {gain[f]:.6g}, allowed is {1 + within:g}",
            where=name,
            remedy="measure at closer wavelengths" if between else "check the calibration of the measurement",
        )


def _followed(s: np.ndarray, thz: np.ndarray, name: str) -> np.ndarray:
    """Unwrapped phase [F, n, n]; refused where a step may have gone either way round."""
    raw = np.angle(s)
    lit = np.abs(s) > DARK
    step = (np.diff(raw, axis=0) + np.pi) % (2 * np.pi) - np.pi
    step[~(lit[1:] & lit[:-1])] = 0.0
    jump = np.abs(step)
    # from one step to the next no more than pi either: else it went the long way round
    jump[1:] = np.maximum(jump[1:], np.where(np.abs(np.diff(step, axis=0)) > np.pi, np.pi, 0.0))
    if jump.max(initial=0.0) > STEP_MOST_RAD:
        f, o, i = np.unravel_index(int(np.argmax(jump)), jump.shape)
        raise UnsoundFile(
            f"the phase of S{o + 1}{i + 1} cannot be followed: between {nm_from_thz(thz[f]):.6g} and "
            f"{nm_from_thz(thz[f + 1]):.6g} nm it steps by {jump[f, o, i]:.3g} rad or more, "
            f"allowed is {STEP_MOST_RAD:.3g}",
            where=name,
            remedy="measure at closer wavelengths",
        )
    phase: np.ndarray = raw[:1] + np.concatenate([np.zeros_like(raw[:1]), np.cumsum(step, axis=0)])
    return phase


def _from_touchstone(path: Path, ports: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray]:
    try:
        import skrf
    except ImportError:
        raise MissingExtra(
            f"reading '{path.name}' needs scikit-rf",
            remedy="install it with: pip install 'meshctl[sparam]', or give the part as CSV",
        ) from None
    try:
        network = skrf.Network(str(path))
        s, hertz = np.array(network.s, complex), np.array(network.f, float)
    except Exception as problem:
        raise UnsoundFile(
            f"not readable as Touchstone: {problem}", where=path.name, remedy="write it as .s2p or .s4p"
        ) from None
    _check_points(hertz / HZ_PER_THZ, path.name)
    if s.shape[1] != len(ports):
        raise WrongSize(
            f"the file has {s.shape[1]} ports; {len(ports)} are named: {', '.join(ports)}",
            where=path.name,
            remedy="name the port of ours for each port of the file, in its order",
        )
    return hertz / HZ_PER_THZ, s


def _from_csv(path: Path, ports: tuple[str, ...]) -> tuple[np.ndarray, np.ndarray]:
    table = read_table(path, ("out", "in"), _NUMBERS.get, CSV_HEAD, CSV_HEAD)
    waves = np.array(table.column("wavelength_nm"), float)
    points = np.unique(waves)[::-1]
    s = np.zeros((len(points), len(ports), len(ports)), complex)
    given = np.zeros(s.shape, bool)
    at = np.searchsorted(-points, -waves)
    for i, (o, e) in enumerate(zip(table.column("out"), table.column("in"), strict=True)):
        for name in (o, e):
            if name not in ports:
                raise WrongSize(
                    f"port '{name}' is none of {', '.join(ports)}", where=table.where(i), remedy="correct the name"
                )
        place = at[i], ports.index(o), ports.index(e)
        if given[place]:
            raise DuplicateName(f"'{e}' to '{o}' stands twice", where=table.where(i), remedy="keep one row")
        given[place] = True
        s[place] = table.column("amplitude")[i] * np.exp(1j * table.column("phase_rad")[i])
    # the reverse way may be left out: parts are reciprocal
    back = ~given & given.swapaxes(1, 2)
    s[back] = s.swapaxes(1, 2)[back]
    given |= back
    partly = given.any(axis=0) & ~given.all(axis=0)
    if partly.any():
        o, e = np.argwhere(partly)[0]
        f = int(np.argmin(given[:, o, e]))
        raise MissingRow(
            f"'{ports[e]}' to '{ports[o]}' is missing at {points[f]:.6g} nm but given elsewhere",
            where=path.name,
            remedy="give every pair at all wavelengths, or at none where no light goes",
        )
    thz = thz_from_nm(points)
    _check_points(thz, path.name)
    return thz, s


def _check_points(thz: Any, name: str) -> None:
    if len(thz) < 2 or (np.diff(thz) <= 0).any() or thz[0] <= 0:
        raise UnsoundFile(
            f"the file has {len(thz)} points; their frequencies must be positive and rise",
            where=name,
            remedy="give at least two wavelengths, each once",
        )
