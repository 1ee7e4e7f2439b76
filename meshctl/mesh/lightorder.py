"""The parts of a loop-free net in light order, as a flat list that any other program can multiply up.

Public: LightRow, light_order, HEAD.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import NamedTuple

import numpy as np

from meshctl.errors import LoopInNet
from meshctl.mesh.graph import AsBuilt, Net
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import CROSSING, GUIDE, KINDS, LOSS, PHASE
from meshctl.units import UM_PER_CM

HEAD = ("order", "element", "kind", "mode_a", "mode_b", "value", "actual")


class LightRow(NamedTuple):
    """One block: coupler [[cos k, i sin k], [i sin k, cos k]], phase exp(i p), loss 10^(-dB/20), crossing."""

    order: int
    element: str
    kind: str
    mode_a: int
    mode_b: int | None
    value: float  # setting or nominal
    actual: float  # in force


def light_order(net: Net, as_built: AsBuilt, wanted: np.ndarray, actual: np.ndarray) -> Iterator[LightRow]:
    """Rows whose blocks, multiplied in order and cut to [:n_out, :n_in], are the matrix at the centre wavelength.

    Parameters
    ----------
    wanted, actual : float (S,), settings as wished and as the codes give them

    Input k is lane k, dark inputs follow; a part's own loss stands in rows of kind loss behind it, and
    crossings close the list until lane k is output k.

    Raises
    ------
    LoopInNet
        Where the net has no light order.
    """
    circuit = circuit_of(net)
    if circuit is None:
        raise LoopInNet(
            "the net has a loop, a link against the light or a part that reflects, and so no light order",
            remedy="use predict --matrix for its matrix",
        )
    names, order = net.names.elements, 0
    settings = as_built.in_force(actual)
    guide_loss = net.length_um / UM_PER_CM * net.guide_loss_db_per_cm
    for e in circuit.element.tolist():
        kind, s = int(net.kind[e]), int(net.setting_of[e])
        a, b = int(circuit.element_lane_a[e]), int(circuit.element_lane_b[e])
        value = float(wanted[s] if s >= 0 else net.nominal[e])
        force = float((settings[s] if s >= 0 else net.nominal[e]) + as_built.error_rad[e])
        lanes = (a,) if b < 0 else (a, b)
        loss = float(as_built.loss_db[e] + guide_loss[e])
        if kind == LOSS:
            loss += float(net.nominal[e])
        else:
            # a guide turns by nothing at the centre wavelength
            shown = KINDS[PHASE if kind == GUIDE else kind].name
            at = 0.0 if kind in (GUIDE, CROSSING) else value
            act = 0.0 if kind == CROSSING else as_built.error_rad[e] if kind == GUIDE else force
            yield LightRow(order, names[e], shown, a, None if b < 0 else b, at, float(act))
            order += 1
        if loss or kind == LOSS:
            for lane in lanes:
                yield LightRow(order, names[e], "loss", lane, None, loss, loss)
                order += 1
    holds = list(range(circuit.n_lanes))  # which lane's light each position holds
    for k, lane in enumerate(circuit.output_lane.tolist()):
        at = holds.index(lane)
        if at != k:
            holds[k], holds[at] = holds[at], holds[k]
            yield LightRow(order, net.outputs[k], "crossing", k, at, 0.0, 0.0)
            order += 1
