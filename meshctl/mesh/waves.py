"""Light through a net that runs both ways: from the values of its parts to scattering and its derivatives.

Public: Waves.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from functools import cached_property
from typing import Any

import numpy as np

from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.weaving import FOLDED, woven
from meshctl.optics import elements as parts
from meshctl.optics.scattering import Scattered, jvp, scatter, vjp
from meshctl.units import UM_PER_CM, amplitude_from_loss_db

CHUNK_BYTES = 1 << 25  # of S entries at once


class Waves:
    """Light through any net between its inputs and outputs.

    Parameters
    ----------
    net : Net
    as_built : AsBuilt

    `residual` and `dark_loops` tell of the last solve: the largest breach of a link over the largest field, and
    the most loops that no light enters.
    """

    def __init__(self, net: Net, as_built: AsBuilt) -> None:
        self.net, self.woven = net, woven(net)
        made = self.woven
        loss_db = as_built.loss_db + net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
        loss_db = np.where(net.kind == parts.LOSS, loss_db + net.nominal, loss_db)
        amplitude = amplitude_from_loss_db(loss_db)
        n_ports = len(made.pattern.mate)
        lost = np.bincount(made.folded_at, loss_db[made.folded], n_ports)
        # a one-lane part that was not folded stands before its own first port
        kept = np.flatnonzero(np.isin(net.kind[made.row], FOLDED))
        lone, first = np.unique(made.row[kept], return_index=True)
        self._lone = lone, np.minimum(made.pattern.s_out_port, made.pattern.s_in_port)[kept[first]]
        self._port_amplitude = amplitude_from_loss_db(lost)
        self._amplitude = amplitude[made.row]
        names = list(net.externals)
        self.inputs = np.array([names.index(name) for name in net.inputs])
        self.outputs = np.array([names.index(name) for name in net.outputs])
        self._couplers = np.flatnonzero(net.kind == parts.COUPLER)
        place = np.full(net.n_elements, -1)
        place[self._couplers] = np.arange(len(self._couplers))
        self._angle_of = place[made.row]
        self._turned = (net.kind == parts.PHASE) | (net.kind == parts.GUIDE)
        self._kept: Scattered | None = None
        self.residual, self.dark_loops = 0.0, 0

    # ---- parts
    @cached_property
    def _standing(self) -> tuple[np.ndarray, np.ndarray]:
        """Turning elements and the ports that they stand before."""
        made = self.woven
        turned = self._turned[made.folded]
        element = np.concatenate([made.folded[turned], self._lone[0]])
        port = np.concatenate([made.folded_at[turned], self._lone[1]])
        keep = self._turned[element]
        return element[keep], port[keep]

    def _ports(self, value: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Phase at the centre and length of guide before every port."""
        element, port = self._standing
        n = len(self.woven.pattern.mate)
        return np.bincount(port, value[element], n), np.bincount(port, self.net.length_um[element], n)

    def _scales(self, waves: np.ndarray) -> tuple[Any, Any, Any]:
        """What phases, micrometres of guide and coupler angles are multiplied by, [W] each."""
        net = self.net
        return (
            parts.phase_scale(waves, net.wavelength_nm),
            parts.guide_phase_rad_per_um(waves, net.wavelength_nm, net.n_eff, net.n_group),
            parts.angle_scale(waves, net.wavelength_nm, net.angle_slope_per_nm),
        )

    def _own(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """Entries [W, N] of the parts themselves."""
        made = self.woven
        _, _, stretch = self._scales(waves)
        own = np.empty((len(waves), len(made.row)), complex)
        own[:] = made.fixed
        angle = stretch[:, None] * value[self._couplers]
        own[:, made.through] = np.cos(angle)[:, self._angle_of[made.through]]
        own[:, made.cross] = 1j * np.sin(angle)[:, self._angle_of[made.cross]]
        for e, where, out, into in made.measured:
            own[:, where] = self.net.measured[e].at(waves)[:, out, into]
        own *= self._amplitude
        return own

    def _before(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """What stands before the two ports of every entry, multiplied, [W, N]."""
        scale, per_um, _ = self._scales(waves)
        phase, length = self._ports(value)
        turn = np.exp(1j * (scale[:, None] * phase + per_um[:, None] * length)) * self._port_amplitude
        pattern = self.woven.pattern
        both: np.ndarray = turn[:, pattern.s_out_port] * turn[:, pattern.s_in_port]
        return both

    def entries(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """The entries [W, N] of the parts' S in the order of the pattern."""
        return self._own(value, waves) * self._before(value, waves)

    def _entry_slopes(self, value: np.ndarray, waves: np.ndarray, entries: np.ndarray) -> np.ndarray:
        """Derivative of the entries by the wavelength, per nm."""
        net, made, pattern = self.net, self.woven, self.woven.pattern
        phase, length = self._ports(value)
        turning = (
            parts.phase_slope_per_nm(waves, net.wavelength_nm)[:, None] * phase
            + parts.guide_slope_rad_per_um_nm(waves, net.n_group)[:, None] * length
        )
        slope = 1j * (turning[:, pattern.s_out_port] + turning[:, pattern.s_in_port]) * entries
        own = np.zeros((len(waves), len(made.row)), complex)
        if net.angle_slope_per_nm:
            _, _, stretch = self._scales(waves)
            angle, rate = stretch[:, None] * value[self._couplers], net.angle_slope_per_nm * value[self._couplers]
            own[:, made.through] = (-np.sin(angle) * rate)[:, self._angle_of[made.through]]
            own[:, made.cross] = 1j * (np.cos(angle) * rate)[:, self._angle_of[made.cross]]
        for e, where, out, into in made.measured:
            own[:, where] = net.measured[e].slope_per_nm(waves)[:, out, into]
        if net.angle_slope_per_nm or made.measured:
            slope += own * self._amplitude * self._before(value, waves)
        return slope

    # ---- light
    def solved(
        self,
        value: np.ndarray,
        waves: np.ndarray,
        inputs: np.ndarray | None = None,
        outputs: np.ndarray | None = None,
        *,
        keep: bool = False,
    ) -> Scattered:
        """Scattering between inputs and outputs for element values [E] at wavelengths [W]."""
        found = scatter(
            self.woven.pattern,
            self.entries(value, waves),
            self.inputs if inputs is None else self.inputs[inputs],
            self.outputs if outputs is None else self.outputs[outputs],
            keep=keep,
            reuse=self._kept if keep else None,
        )
        if keep:
            self._kept = found
        self.residual = max(self.residual, float(found.residual.max(initial=0.0)))
        self.dark_loops = max(self.dark_loops, int(found.dark_loops.max(initial=0)))
        return found

    def release(self) -> None:
        """Leave what the last solve kept to whoever holds it; the next one takes memory of its own."""
        self._kept = None

    def _chunks(self, waves: np.ndarray, numbers: int) -> Iterator[slice]:
        size = max(1, CHUNK_BYTES // (16 * max(1, numbers)))
        return (slice(k, k + size) for k in range(0, len(waves), size))

    def _fresh(self) -> None:
        self.residual, self.dark_loops = 0.0, 0

    def matrix(self, value: np.ndarray, waves: np.ndarray) -> np.ndarray:
        """Field matrices [W, out, in]."""
        self._fresh()
        runs = [self.solved(value, waves[k]).response for k in self._chunks(waves, self.woven.pattern.n_entries)]
        return np.concatenate(runs) if runs else np.empty((0, len(self.outputs), len(self.inputs)), complex)

    def slope_per_nm(
        self, value: np.ndarray, waves: np.ndarray, inputs: np.ndarray | None = None, outputs: np.ndarray | None = None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Field matrices and their derivative by the wavelength, [W, out, in] both."""
        self._fresh()
        matrices, slopes = [], []
        for k in self._chunks(waves, self.woven.pattern.fronts.size):
            found = self.solved(value, waves[k], inputs, outputs, keep=True)
            matrices.append(found.response)
            slopes.append(jvp(found, self._entry_slopes(value, waves[k], found.s_values)))
        return np.concatenate(matrices), np.concatenate(slopes)

    def pullback(
        self, value: np.ndarray, cotangent: Callable[[np.ndarray], np.ndarray], waves: np.ndarray
    ) -> np.ndarray:
        """Gradient [E] by the value of every element, for a cotangent [W, out, in] made from the matrices.

        Cost: two to three times `matrix`; 16 bytes x the size of the fronts per wavelength are kept.
        """
        made, pattern = self.woven, self.woven.pattern
        self._fresh()
        found = self.solved(value, waves, keep=True)
        scale, _, stretch = self._scales(waves)
        g = vjp(found, cotangent(found.response)).conj()
        by_value = np.zeros(self.net.n_elements)
        # an entry turns with what stands before either of its ports
        turned = -(g * found.s_values).imag * scale[:, None]
        n = len(pattern.mate)
        by_port = np.bincount(pattern.s_out_port, turned.sum(0), n) + np.bincount(pattern.s_in_port, turned.sum(0), n)
        element, port = self._standing
        by_value[element] = by_port[port]
        angle = stretch[:, None] * value[self._couplers]
        g = g * self._before(value, waves) * self._amplitude * stretch[:, None]
        by_angle = np.zeros((len(waves), len(made.row)))
        by_angle[:, made.through] = (g[:, made.through].real) * -np.sin(angle)[:, self._angle_of[made.through]]
        by_angle[:, made.cross] = -(g[:, made.cross].imag) * np.cos(angle)[:, self._angle_of[made.cross]]
        by_value += np.bincount(made.row, by_angle.sum(0), self.net.n_elements)
        return by_value
