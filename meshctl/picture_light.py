"""Where the light of one input goes inside a loop-free mesh: the power on both lanes of every block.

Public: light, light_together, lane_ends, output_powers.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from meshctl.errors import LoopInNet, WrongSize
from meshctl.mesh.graph import Mesh, Net
from meshctl.mesh.response import Response, circuit_of
from meshctl.mesh.tables import unknown_name
from meshctl.optics.feedforward import Circuit


def light(mesh: Mesh, settings: np.ndarray, input_port: str) -> np.ndarray:
    """Follow the light of one input block by block, at the centre wavelength.

    Parameters
    ----------
    mesh : Mesh
    settings : float (S,), rad
    input_port : name of the input that light of power 1 enters

    Returns
    -------
    float (B, 4): of each block of the net's circuit the powers that enter its two lanes, then those that
    leave them; lane b of a block of one lane stays 0.

    Raises
    ------
    UnknownKey, LoopInNet, WrongSize

    Cost: about 1 us for each block.

    Example
    -------
    >>> from meshctl import lattice
    >>> light(lattice("rectangular", modes=2), np.zeros(4), "in1")[0].round(3)
    array([1., 0., 0., 1.])
    """
    circuit = _loop_free(mesh.net)
    if input_port not in mesh.net.inputs:
        raise unknown_name("input", input_port, mesh.net.inputs, mesh.name)
    blocks = Response(mesh.net, mesh.as_built).blocks(settings)
    matrices = (blocks[:, 0::2] + 1j * blocks[:, 1::2]).tolist()
    field = [0j] * (circuit.n_lanes + 1)  # the last is lane b of blocks of one lane
    field[mesh.net.inputs.index(input_port)] = 1.0 + 0j
    fields = []
    lanes = zip(circuit.lane_a.tolist(), circuit.lane_b.tolist(), strict=True)
    for (a, b), (m00, m01, m10, m11) in zip(lanes, matrices, strict=True):
        x, y = field[a], field[b]
        u, v = m00 * x + m01 * y, m10 * x + m11 * y
        field[a] = u
        if b >= 0:
            field[b] = v
        else:
            v = 0j
        fields.append((x, y, u, v))
    return np.abs(np.array(fields, complex).reshape(-1, 4)) ** 2


def light_together(mesh: Mesh, settings: np.ndarray, inputs: Sequence[str]) -> np.ndarray | None:
    """Light of several inputs at once, powers added: float (B, 4), or None for a net with loops."""
    if circuit_of(mesh.net) is None or not inputs:
        return None
    total: np.ndarray = sum(light(mesh, settings, name) for name in inputs)  # type: ignore[assignment]
    return total


def _loop_free(net: Net) -> Circuit:
    circuit = circuit_of(net)
    if circuit is None:
        raise LoopInNet("the net has a loop: light in it is not followed block by block")
    return circuit


def lane_ends(net: Net, lit: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Powers that enter and that leave every lane [L], of what `light` returned.

    Raises
    ------
    LoopInNet, WrongSize
    """
    circuit = _loop_free(net)
    if lit.shape != (circuit.n_blocks, 4):
        raise WrongSize(f"the light has shape {lit.shape}; this net's is ({circuit.n_blocks}, 4)")
    start, end = np.zeros(circuit.n_lanes), np.zeros(circuit.n_lanes)
    blocks = np.arange(circuit.n_blocks)
    lane = np.r_[circuit.lane_a, circuit.lane_b]
    block, second = np.r_[blocks, blocks], np.repeat([0, 1], circuit.n_blocks)
    along = np.lexsort((block, lane))
    along = along[lane[along] >= 0]
    lane, block, second = lane[along], block[along], second[along]
    first = np.flatnonzero(np.r_[True, lane[1:] != lane[:-1]])
    last = np.r_[first[1:], len(lane)] - 1
    start[lane[first]] = lit[block[first], second[first]]
    end[lane[last]] = lit[block[last], 2 + second[last]]
    return start, end


def output_powers(net: Net, lit: np.ndarray) -> np.ndarray:
    """Powers at the outputs, of what `light` returned, in the order of `net.outputs`."""
    powers: np.ndarray = lane_ends(net, lit)[1][_loop_free(net).output_lane]
    return powers
