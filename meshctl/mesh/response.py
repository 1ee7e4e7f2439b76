"""From a net, its as-built values and settings to its matrix: compiles the net and picks the kernel.

Public: Response, circuit_of.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import cached_property
from typing import TYPE_CHECKING
from weakref import WeakKeyDictionary

import numpy as np

from meshctl.errors import LoopInNet, WrongSize
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.optics import elements as parts
from meshctl.optics.feedforward import Circuit, compile_circuit, fuse, propagate
from meshctl.units import UM_PER_CM, amplitude_from_loss_db

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.mesh.waves import Waves
    from meshctl.optics.adjoint import Keeping

_circuits: WeakKeyDictionary[Net, Circuit | None] = WeakKeyDictionary()


def circuit_of(net: Net) -> Circuit | None:
    """The net compiled for the loop-free kernels, or None where it has a loop or a part reflects; once per net."""
    if net not in _circuits:
        reflects = np.array([kind.reflects for kind in parts.KINDS])[net.kind].any()
        _circuits[net] = (
            None
            if reflects
            else compile_circuit(net.port_start, net.mate, net.cell_of, net.input_ports, net.output_ports)
        )
    return _circuits[net]


class Response:
    """What the chip does to light, for any settings and wavelengths.

    Parameters
    ----------
    net : Net
    as_built : AsBuilt
        Splitting errors, losses and stuck settings of the die.

    A net without loops and reflections goes through the loop-free kernels; `waves` serves all others.
    """

    def __init__(self, net: Net, as_built: AsBuilt) -> None:
        self.net, self.as_built = net, as_built
        kind = net.kind
        self._couplers = np.flatnonzero(kind == parts.COUPLER)
        self._turning = np.flatnonzero((kind == parts.PHASE) | (kind == parts.GUIDE))
        self._crossings = np.flatnonzero(kind == parts.CROSSING)
        self._losses = np.flatnonzero(kind == parts.LOSS)
        loss_db = as_built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
        loss_db[self._losses] += net.nominal[self._losses]
        self._amplitude = amplitude_from_loss_db(loss_db)
        self._moved = np.flatnonzero(net.setting_of >= 0)
        self._base = net.nominal + as_built.error_rad
        self._base[self._moved] = as_built.error_rad[self._moved]
        self._moved_by = net.setting_of[self._moved]

    @cached_property
    def circuit(self) -> Circuit:
        """The net in light order.

        Raises
        ------
        LoopInNet
            Where the net has a loop, a link that runs against the light, or a part that reflects.
        """
        circuit = circuit_of(self.net)
        if circuit is None:
            raise LoopInNet(
                "the net has a loop, a link against the light or a part that reflects, and so no light order",
                remedy="use predict for its matrix",
            )
        return circuit

    @property
    def loops(self) -> bool:
        """True where light may run both ways, so that `waves` is what answers."""
        return circuit_of(self.net) is None

    @cached_property
    def waves(self) -> Waves:
        """The same net by scattering, loops and reflections included."""
        from meshctl.mesh.waves import Waves

        return Waves(self.net, self.as_built)

    def _wavelengths(self, wavelengths_nm: np.ndarray | None) -> np.ndarray:
        return np.array([self.net.wavelength_nm]) if wavelengths_nm is None else np.asarray(wavelengths_nm, float)

    def values(self, settings: np.ndarray) -> np.ndarray:
        """Value in force of every element [E] at the centre wavelength."""
        if settings.shape != (self.net.n_settings,):
            raise WrongSize(f"settings have shape {settings.shape}; this net takes ({self.net.n_settings},)")
        value = self._base.copy()
        value[self._moved] += self.as_built.in_force(settings)[self._moved_by]
        return value

    def _fill(
        self,
        table: np.ndarray,
        couplers: np.ndarray,
        angle: np.ndarray,
        turning: np.ndarray,
        phase: np.ndarray,
    ) -> None:
        amplitude = self._amplitude
        table[0, couplers] = np.cos(angle) * amplitude[couplers]
        table[3, couplers] = np.sin(angle) * amplitude[couplers]
        table[0, turning] = np.cos(phase) * amplitude[turning]
        table[1, turning] = np.sin(phase) * amplitude[turning]

    @cached_property
    def _centre(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Amplitudes of all parts with no setting in force, and the rows that settings move."""
        net = self.net
        table = np.zeros((4, net.n_elements))
        table[0, self._losses] = self._amplitude[self._losses]
        table[2, self._crossings] = self._amplitude[self._crossings]
        self._fill(table, self._couplers, self._base[self._couplers], self._turning, self._base[self._turning])
        moved = net.setting_of >= 0
        return (
            table,
            np.flatnonzero(moved & (net.kind == parts.COUPLER)),
            np.flatnonzero(moved & (net.kind == parts.PHASE)),
        )

    def _table(self, value: np.ndarray, wavelength_nm: float | None) -> np.ndarray:
        """Amplitudes [4, E] of all parts at one wavelength; None is the centre."""
        base, couplers, phases = self._centre
        table = base.copy()
        if wavelength_nm is None or wavelength_nm == self.net.wavelength_nm:
            self._fill(table, couplers, value[couplers], phases, value[phases])
            return table
        net = self.net
        scale = parts.angle_scale(wavelength_nm, net.wavelength_nm, net.angle_slope_per_nm)
        phase = value * parts.phase_scale(wavelength_nm, net.wavelength_nm) + parts.guide_phase_rad(
            net.length_um, wavelength_nm, net.wavelength_nm, net.n_eff, net.n_group
        )
        self._fill(table, self._couplers, value[self._couplers] * scale, self._turning, phase[self._turning])
        return table

    def parts(self, settings: np.ndarray, wavelength_nm: float | None = None) -> np.ndarray:
        """Through and cross amplitudes of every part, [4, E]: real, imaginary of each."""
        return self._table(self.values(settings), wavelength_nm)

    def blocks(self, settings: np.ndarray, wavelength_nm: float | None = None) -> np.ndarray:
        """The fused 2x2 blocks [B, 8] of the net at one wavelength (None: the centre)."""
        return self._blocks(self.values(settings), wavelength_nm)

    def _blocks(self, value: np.ndarray, wavelength_nm: float | None) -> np.ndarray:
        circuit = self.circuit
        blocks = np.empty((circuit.n_blocks, 8))
        fuse(circuit.first, circuit.element, circuit.side, self._table(value, wavelength_nm), blocks)
        return blocks

    def _run(self, blocks: np.ndarray, fields: np.ndarray) -> np.ndarray:
        circuit = self.circuit
        real = np.zeros((circuit.n_lanes, fields.shape[1]))
        imag = np.zeros_like(real)
        real[: circuit.n_inputs], imag[: circuit.n_inputs] = fields.real, fields.imag
        propagate(circuit.lane_a, circuit.lane_b, blocks, real, imag)
        out: np.ndarray = real[circuit.output_lane] + 1j * imag[circuit.output_lane]
        return out

    def through(self, blocks: np.ndarray) -> np.ndarray:
        """Field matrix (out, in) of fused blocks [B, 8] of any making."""
        return self._run(blocks, np.eye(self.circuit.n_inputs))

    def matrix(self, settings: np.ndarray, wavelengths_nm: np.ndarray | None = None) -> np.ndarray:
        """Field matrix of the chip.

        Parameters
        ----------
        settings : float (S,), rad
        wavelengths_nm : float (W,), or None for the centre wavelength alone

        Returns
        -------
        complex (out, in), or (W, out, in) where wavelengths are given.

        Cost: per wavelength a few real products of the matrix's size; with loops see `optics.scattering`.
        """
        if self.loops:
            found = self.waves.matrix(self.values(settings), self._wavelengths(wavelengths_nm))
            return found[0] if wavelengths_nm is None else found
        return self.fields(settings, np.eye(self.circuit.n_inputs), wavelengths_nm)

    def fields(
        self, settings: np.ndarray, entering: np.ndarray, wavelengths_nm: np.ndarray | None = None
    ) -> np.ndarray:
        """Fields at the outputs for fields entering the inputs, without forming the matrix.

        Parameters
        ----------
        entering : complex (in,) or (in, k)

        Returns
        -------
        complex (out,) or (out, k); with wavelengths an axis of W before.
        """
        columns, n_inputs = np.asarray(entering), len(self.net.inputs)
        if columns.shape[0] != n_inputs:
            raise WrongSize(f"the entering field has {columns.shape[0]} rows; the chip has {n_inputs} inputs")
        if self.loops:
            return np.tensordot(self.matrix(settings, wavelengths_nm), columns, axes=(-1, 0))
        flat = columns.reshape(columns.shape[0], -1)
        value = self.values(settings)
        if wavelengths_nm is None:
            out = self._run(self._blocks(value, None), flat)
            return out.reshape(-1, *columns.shape[1:])
        runs = [self._run(self._blocks(value, float(w)), flat) for w in wavelengths_nm]
        return np.array(runs).reshape(len(runs), -1, *columns.shape[1:])

    def slope_per_nm(
        self,
        settings: np.ndarray,
        wavelengths_nm: np.ndarray,
        inputs: np.ndarray | None = None,
        outputs: np.ndarray | None = None,
    ) -> tuple[np.ndarray, np.ndarray]:
        """Field matrices and their derivative by the wavelength, complex [W, out, in] both.

        Parameters
        ----------
        settings : float (S,), rad
        wavelengths_nm : float (W,)
        inputs, outputs : positions among the inputs and outputs, None: all

        Cost: two to three times `matrix`; without loops one pass through all parts one by one.
        """
        value, waves = self.values(settings), np.asarray(wavelengths_nm, float)
        if self.loops:
            return self.waves.slope_per_nm(value, waves, inputs, outputs)
        from meshctl.optics.slope import follow

        circuit = self.circuit
        found = np.empty((2, len(waves), len(circuit.output_lane), circuit.n_inputs), complex)
        for w, wave in enumerate(waves.tolist()):
            found[:, w] = follow(circuit, self._table(value, wave), self._table_slope(value, wave))
        rows = np.arange(found.shape[2]) if outputs is None else outputs
        columns = np.arange(found.shape[3]) if inputs is None else inputs
        chosen = found[:, :, rows[:, None], columns]
        return chosen[0], chosen[1]

    def _table_slope(self, value: np.ndarray, wavelength_nm: float) -> np.ndarray:
        """Derivative by the wavelength of the amplitudes [4, E] of all parts."""
        net, table = self.net, np.zeros((4, self.net.n_elements))
        k, p = self._couplers, self._turning
        angle = value[k] * parts.angle_scale(wavelength_nm, net.wavelength_nm, net.angle_slope_per_nm)
        rate = self._amplitude[k] * value[k] * net.angle_slope_per_nm
        table[0, k], table[3, k] = -np.sin(angle) * rate, np.cos(angle) * rate
        now = self._table(value, wavelength_nm)
        turning = value[p] * parts.phase_slope_per_nm(wavelength_nm, net.wavelength_nm) + net.length_um[
            p
        ] * parts.guide_slope_rad_per_um_nm(wavelength_nm, net.n_group)
        table[0, p], table[1, p] = -now[1, p] * turning, now[0, p] * turning
        return table

    @cached_property
    def _keeping(self) -> Keeping:
        from meshctl.optics.adjoint import keeping

        return keeping(self.circuit, self._amplitude)

    def pullback(
        self,
        settings: np.ndarray,
        cotangent: np.ndarray | Callable[[np.ndarray], np.ndarray],
        wavelengths_nm: np.ndarray | None = None,
    ) -> np.ndarray:
        """Gradient of a real objective by the settings, from its cotangent by the matrix.

        Parameters
        ----------
        settings : float (S,), rad
        cotangent : complex, of the shape of `matrix`
            G in d objective = Re sum conj(G) dM. A function that makes it from the matrix may stand instead:
            the light is then followed once for value and gradient.
        wavelengths_nm : float (W,), or None for the centre wavelength alone

        Returns
        -------
        float (S,), zero for stuck settings

        Cost: three to four times `matrix`; with loops two to three times.
        """
        if self.loops:
            return self._pullback_by_waves(settings, cotangent, wavelengths_nm)
        from meshctl.optics.adjoint import fuse_back, propagate_back, run_keeping

        circuit, net = self.circuit, self.net
        value, waves = self.values(settings), [None] if wavelengths_nm is None else [float(w) for w in wavelengths_nm]
        went, matrices = [], []
        for wave in waves:
            table = self._table(value, wave)
            blocks = np.empty((circuit.n_blocks, 8))
            fuse(circuit.first, circuit.element, circuit.side, table, blocks)
            real, imag = np.zeros((2, circuit.n_lanes, circuit.n_inputs))
            real[: circuit.n_inputs] = np.eye(circuit.n_inputs)
            went.append((table, blocks, *run_keeping(circuit, blocks, real, imag, self._keeping), real, imag))
            matrices.append(real[circuit.output_lane] + 1j * imag[circuit.output_lane])
        matrix = np.array(matrices) if wavelengths_nm is not None else matrices[0]
        by_matrix = cotangent(matrix) if callable(cotangent) else cotangent
        if by_matrix.shape != matrix.shape:
            raise WrongSize(f"the cotangent has shape {by_matrix.shape}; the matrix {matrix.shape}")
        by_value, room = np.zeros(net.n_elements), np.empty((int(np.diff(circuit.first).max(initial=1)), 8))
        gradient, by_block = np.zeros(net.n_settings), np.empty((circuit.n_blocks, 8))
        for g, wave, (table, blocks, kept_real, kept_imag, real, imag) in zip(
            by_matrix.reshape(len(waves), *matrices[0].shape), waves, went, strict=True
        ):
            g_real, g_imag = np.zeros((2, circuit.n_lanes, circuit.n_inputs))
            g_real[circuit.output_lane], g_imag[circuit.output_lane] = g.real, g.imag
            propagate_back(
                circuit.lane_a, circuit.lane_b, blocks, self._keeping.at, kept_real, kept_imag, real, imag,
                g_real, g_imag, by_block,
            )  # fmt: skip
            fuse_back(circuit.first, circuit.element, circuit.side, table, by_block, room, by_value)
            moved = by_value[self._moved]
            if wave is not None:
                angle = parts.angle_scale(wave, net.wavelength_nm, net.angle_slope_per_nm)
                phase = parts.phase_scale(wave, net.wavelength_nm)
                moved = moved * np.where(net.kind[self._moved] == parts.COUPLER, angle, phase)
            gradient += np.bincount(self._moved_by, moved, net.n_settings)
        return np.where(np.isnan(self.as_built.stuck_rad), gradient, 0.0)

    def _pullback_by_waves(
        self,
        settings: np.ndarray,
        cotangent: np.ndarray | Callable[[np.ndarray], np.ndarray],
        wavelengths_nm: np.ndarray | None,
    ) -> np.ndarray:
        def by_matrix(found: np.ndarray) -> np.ndarray:
            matrix = found[0] if wavelengths_nm is None else found
            given = cotangent(matrix) if callable(cotangent) else cotangent
            if given.shape != matrix.shape:
                raise WrongSize(f"the cotangent has shape {given.shape}; the matrix {matrix.shape}")
            return given.reshape(found.shape)

        by_value = self.waves.pullback(self.values(settings), by_matrix, self._wavelengths(wavelengths_nm))
        gradient = np.bincount(self._moved_by, by_value[self._moved], self.net.n_settings)
        return np.where(np.isnan(self.as_built.stuck_rad), gradient, 0.0)
