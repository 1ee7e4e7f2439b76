"""Name, unit, allowed range and meaning of every number in a mesh folder, as data.

Table heads, range checks and messages come from here.
Public: Quantity, QUANTITIES.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

INF = math.inf
RAD_MOST = 1e6  # beyond, a phase kept in double precision is worth less than any measured one


@dataclass(frozen=True)
class Quantity:
    """One number as a user may write it."""

    name: str
    unit: str
    low: float
    high: float
    help: str
    default: float = math.nan
    low_open: bool = False  # the lowest value itself is not allowed

    def allows(self, value: float) -> bool:
        """True for a finite number in range."""
        above = value > self.low if self.low_open else value >= self.low
        return math.isfinite(value) and above and value <= self.high

    @property
    def allowed(self) -> str:
        """The range in words, for messages."""
        unit = f" {self.unit}" if self.unit else ""
        if self.low == -INF and self.high == INF:
            return f"any finite number{' in' + unit if unit else ''}"
        if self.high == INF:
            return f"{'above' if self.low_open else 'at least'} {self.low:g}{unit}"
        return f"{'above ' if self.low_open else ''}{self.low:g} to {self.high:g}{unit}"


def _q(name: str, unit: str, low: float, high: float, default: float, text: str, open_: bool = False) -> Quantity:
    return Quantity(name, unit, low, high, text, default, open_)


QUANTITIES: dict[str, Quantity] = {
    q.name: q
    for q in (
        # elements.csv
        _q("error_rad", "rad", -RAD_MOST, RAD_MOST, 0.0, "angle or phase that the part has beyond its wanted value"),
        _q("loss_db", "dB", 0.0, 1000.0, 0.0, "power lost in the part"),
        _q("stuck_rad", "rad", -RAD_MOST, RAD_MOST, math.nan, "value at which the setting is stuck"),
        _q("sigma_rad", "rad", 0.0, RAD_MOST, 0.0, "standard uncertainty of error_rad"),
        # channels.csv
        _q("bits", "", 1, 32, 16, "resolution of the source"),
        _q("min_v", "V", -1e4, 1e4, 0.0, "voltage of code 0"),
        _q("max_v", "V", -1e4, 1e4, 10.0, "voltage of the highest code"),
        _q("min_ma", "mA", 0.0, 1e5, 0.0, "current of code 0, for a channel that drives current"),
        _q("max_ma", "mA", 0.0, 1e5, 20.0, "current of the highest code, for a channel that drives current"),
        _q("offset_v", "V", -1e3, 1e3, 0.0, "voltage at the terminal for 0 V asked"),
        _q("gain", "", 0.0, 1e3, 1.0, "volts at the terminal per volt asked", True),
        _q("limit_v", "V", 0.0, 1e4, INF, "highest voltage, of either sign", True),
        _q("limit_ma", "mA", 0.0, 1e5, INF, "highest current of an actuator on the channel", True),
        _q("limit_mw", "mW", 0.0, 1e6, INF, "highest power of an actuator on the channel", True),
        _q("ramp_v_per_s", "V/s", 0.0, 1e9, INF, "fastest change of the voltage", True),
        # tables.csv, crosstalk.csv
        _q("volts_v", "V", -1e4, 1e4, math.nan, "voltage of the measured point"),
        _q("value_rad", "rad", -RAD_MOST, RAD_MOST, math.nan, "phase or angle measured there"),
        _q("coefficient", "", -100.0, 100.0, math.nan, "rad in the element per rad of the actuator's own"),
        # mesh.toml
        _q("wavelength_nm", "nm", 200.0, 20000.0, math.nan, "centre wavelength"),
        _q("n_eff", "", 1.0, 6.0, 2.4, "effective index at the centre wavelength"),
        _q("n_group", "", 1.0, 12.0, 4.2, "group index at the centre wavelength"),
        _q("loss_db_per_cm", "dB/cm", 0.0, 1000.0, 0.0, "propagation loss of waveguides"),
        _q("angle_slope_per_nm", "1/nm", -1.0, 1.0, 0.0, "relative change of a coupler angle per nm"),
        _q("length_um", "um", 0.0, 1e9, math.nan, "length of a waveguide"),
        _q("angle_rad", "rad", -RAD_MOST, RAD_MOST, math.pi / 4, "angle of a coupler"),
        _q("cross_power", "", 0.0, 1.0, 0.5, "share of power that a coupler sends across"),
        _q("phase_rad", "rad", -RAD_MOST, RAD_MOST, 0.0, "phase of a part that nothing moves"),
        _q("transmitted_power", "", 0.0, 1.0, 1.0, "share of power that a reflecting part lets through"),
        _q("reflected_power", "", 0.0, 1.0, 0.0, "share of power that a part returns"),
        _q("reflection_db", "dB", 0.0, 1000.0, INF, "returned power below what enters"),
        _q("reflection_rad", "rad", -RAD_MOST, RAD_MOST, math.pi / 2, "phase of what returns over what passes"),
        _q("resistance_ohm", "ohm", 0.0, 1e6, 0.0, "resistance of a shared ground"),
        _q("pitch_um", "um", 0.0, 1e6, math.nan, "distance between columns, between lanes", True),
        _q("at_um", "um", -1e9, 1e9, math.nan, "place of a cell"),
        _q("side_um", "um", 0.0, 1e6, 250.0, "length of a lattice cell", True),
        _q("modes", "", 2, 4096, math.nan, "number of lanes"),
        _q("spare", "", 0, 256, 0, "extra columns"),
        _q("rings", "", 1, 64, math.nan, "rings of hexagons"),
        _q("rows", "", 1, 256, math.nan, "rows of faces"),
        _q("columns", "", 1, 256, math.nan, "columns of faces"),
        # [crosstalk]
        _q("amplitude", "", 0.0, 1.0, math.nan, "warming of another arm, as a share of that of the heater's own"),
        _q("distance_um", "um", 0.0, 1e6, math.nan, "length of the distance law", True),
        _q("arm_um", "um", 0.0, 1e6, math.nan, "distance of the two arms of a cell", True),
        _q("keep_above", "", 0.0, 1.0, 0.0, "smaller coefficients are left out, if that costs less than 0.01 rad"),
        # [spread]
        _q("split_rad", "rad", 0.0, 1.0, 0.0, "scatter of coupler angles"),
        _q("p2pi_share", "", 0.0, 1.0, 0.0, "scatter of the power for 2 pi, as a share of it"),
        _q("r_share", "", 0.0, 1.0, 0.0, "scatter of resistances, as a share of them"),
        _q("crosstalk_share", "", 0.0, 10.0, 0.0, "scatter of crosstalk coefficients, as a share of them"),
        _q("noise_v", "V", 0.0, 1e3, 0.0, "noise of the source's levels, mA where it drives current"),
        _q("temperature_k", "K", 0.0, 1e3, 0.0, "drift of the temperature since calibration"),
        _q("phase_rad_per_k", "rad/K", -1e3, 1e3, 0.0, "change of a settable phase with temperature"),
        _q("laser_nm", "nm", 0.0, 100.0, 0.0, "drift of the laser's wavelength"),
        _q("stuck_share", "", 0.0, 1.0, 0.0, "probability that an actuator does nothing"),
        _q("variance_share", "", 0.0, 1.0, 0.0, "share of a cause's variance"),
        _q("correlation_um", "um", 0.0, 1e6, math.nan, "distance over which parts resemble one another", True),
        _q("correlation", "", -1.0, 1.0, 0.0, "correlation of two causes in the same part"),
    )
}
