"""Light over wavelength as a plan's codes give it: amplitude, power, phase, group delay, and features.

Public: Spectrum, spectrum, features.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from meshctl.mesh.response import Response
from meshctl.optics.features import Feature, feature_of
from meshctl.plan.chip import Chip
from meshctl.units import nm_from_thz, ps_from_phase_slope, thz_from_nm


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Fields between chosen ports over wavelength."""

    wavelengths_nm: np.ndarray  # f64[W]
    pairs: list[tuple[str, str]]  # input, output
    field: np.ndarray  # c128[W, pairs]
    slope_per_thz: np.ndarray  # c128[W, pairs], derivative of the field by the frequency

    @property
    def thz(self) -> np.ndarray:
        return np.asarray(thz_from_nm(self.wavelengths_nm))

    @property
    def power(self) -> np.ndarray:
        return np.asarray(np.abs(self.field) ** 2)

    @property
    def phase_rad(self) -> np.ndarray:
        return np.angle(self.field)

    @property
    def group_delay_ps(self) -> np.ndarray:
        """d phase / d angular frequency, analytic; NaN where it is dark."""
        turning = np.full(self.field.shape, np.nan)
        np.divide((self.field.conj() * self.slope_per_thz).imag, self.power, out=turning, where=self.power > 0.0)
        return np.asarray(ps_from_phase_slope(turning))


def spectrum(
    chip: Chip,
    codes: np.ndarray,
    wavelengths_nm: np.ndarray,
    pairs: list[tuple[str, str]] | None = None,
    response: Response | None = None,
) -> Spectrum:
    """What codes give between ports.

    Parameters
    ----------
    wavelengths_nm : float (W,)
    pairs : (input, output) names; None: every input with every output
    response : that of the chip at these codes, where it is at hand

    Cost: two to three times that of the matrices alone.
    """
    net = chip.net
    if pairs is None:
        pairs = [(i, o) for i in net.inputs for o in net.outputs]
    inputs, outputs = list(dict.fromkeys(i for i, _ in pairs)), list(dict.fromkeys(o for _, o in pairs))
    into = np.array([net.inputs.index(name) for name in inputs])
    out = np.array([net.outputs.index(name) for name in outputs])
    waves = np.asarray(wavelengths_nm, float)
    response = response or chip.response_at(codes)
    field, slope = response.slope_per_nm(chip.actual(codes), waves, into, out)
    rows, columns = [outputs.index(o) for _, o in pairs], [inputs.index(i) for i, _ in pairs]
    # l = c / f, so dl / df = -l / f
    per_thz = slope[:, rows, columns] * (-waves / thz_from_nm(waves))[:, None]
    return Spectrum(waves, pairs, field[:, rows, columns], per_thz)


def features(
    chip: Chip, codes: np.ndarray, wavelengths_nm: np.ndarray, pair: tuple[str, str], kind: str | None = None
) -> Feature | None:
    """Peaks or dips between one input and one output, sought between the given wavelengths."""
    response = chip.response_at(codes)

    def light(thz: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        found = spectrum(chip, codes, nm_from_thz(thz), [pair], response)
        field, slope = found.field[:, 0], found.slope_per_thz[:, 0]
        return np.abs(field) ** 2, 2.0 * (field.conj() * slope).real

    return feature_of(light, np.unique(thz_from_nm(wavelengths_nm)), kind)
