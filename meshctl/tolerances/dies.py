"""Dies drawn from a spread: the errors of every part by cause, and the mesh that such a die is.

A die is drawn from (seed, trial number) alone, so that it is the same die in any process and any order, and
its standard normal numbers do not depend on how far the causes scatter: dies of two scales differ by scale only.
Public: Drawing, Errors, mesh_of, positions.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from meshctl.errors import OutOfReach, UnsoundFile
from meshctl.mesh.graph import FREE, AsBuilt, Mesh, Net
from meshctl.mesh.spread import ACTUATORS, CAUSES, CHANNELS, COUPLERS, CROSSTALK, DIE, PHASES, Spread
from meshctl.optics.elements import COUPLER, PHASE

Errors = dict[str, np.ndarray]  # cause -> errors of its parts; causes that do nothing are left out

MOST_PLACES = 5000  # cells of a correlated spread: their correlations are factorised whole


def positions(net: Net) -> np.ndarray:
    """Place of every element, um (E, 2): its cell's, or that of the nearest part along its links that has one."""
    if not net.n_cells:
        return np.zeros((net.n_elements, 2))
    at = net.cell_of.astype(np.int64)
    owner = net.element_of_port
    linked = np.flatnonzero(net.mate >= 0)
    from_, to = owner[linked], owner[net.mate[linked]]
    while True:
        new = (at[from_] < 0) & (at[to] >= 0)
        if not new.any():
            break
        at[from_[new]] = at[to[new]]
    middle = net.cell_xy_um.mean(0)
    return np.where(at[:, None] >= 0, net.cell_xy_um[at], middle)


class Drawing:
    """What is drawn for each die of a mesh.

    Parameters
    ----------
    mesh : Mesh, the middle of the scatter: its own known errors stay
    spread : Spread; None: the mesh's own

    Raises
    ------
    UnsoundFile
        Where the spread holds nothing, or a cause has no parts to act on.
    """

    def __init__(self, mesh: Mesh, spread: Spread | None = None) -> None:
        self.mesh, self.spread = mesh, mesh.spread if spread is None else spread
        net, actuators = mesh.net, mesh.actuators
        self.couplers = np.flatnonzero(net.kind == COUPLER).astype(np.int32)
        self.phases = np.flatnonzero((net.kind == PHASE) & (net.setting_of != FREE)).astype(np.int32)
        coo = actuators.crosstalk.tocoo() if actuators.crosstalk is not None else None
        first = net.first_element
        rows = {
            COUPLERS: self.couplers,
            PHASES: self.phases,
            ACTUATORS: first[actuators.setting],
            CROSSTALK: first[coo.row] if coo is not None else np.empty(0, np.int32),
            CHANNELS: np.zeros(len(mesh.channels), np.int32),
            DIE: np.zeros(1, np.int32),
        }
        self.mixing = [m for parts in (COUPLERS, PHASES, ACTUATORS) if (m := self.spread.mixing(parts)) is not None]
        mixed = {cause for causes, _ in self.mixing for cause in causes}
        self.causes = tuple(c for c in CAUSES if c in self.spread.active or c in mixed)
        self.rows = {cause: rows[CAUSES[cause].parts] for cause in self.causes}
        for cause in self.spread.active:
            if not len(self.rows[cause]):
                raise UnsoundFile(
                    f"{cause} is {getattr(self.spread, cause):g}, but the mesh has no {CAUSES[cause].parts} to scatter",
                    where="mesh.toml key 'spread'",
                    remedy="remove that key",
                )
        self._fields = {cause: self._field_of(cause) for cause in self.causes}

    def _field_of(self, cause: str) -> tuple[np.ndarray | None, np.ndarray | None, np.ndarray | None]:
        """(tilts [n, 2], factor of the correlations of all places, place of each part) of a cause."""
        shape = self.spread.shape(cause)
        if not (shape.gradient or shape.correlated):
            return None, None, None
        xy = positions(self.mesh.net)[self.rows[cause]]
        tilts = None
        if shape.gradient:
            tilts = xy - xy.mean(0)
            size = np.sqrt((tilts**2).mean(0))
            # a die that lies along one line tilts along it alone
            tilts = tilts / np.where(size > 0.0, size, 1.0) / np.sqrt(np.maximum((size > 0.0).sum(), 1))
        if not shape.correlated:
            return tilts, None, None
        places, at = np.unique(xy, axis=0, return_inverse=True)
        if len(places) > MOST_PLACES:
            raise OutOfReach(
                f"{cause} is correlated over {len(places)} places; {MOST_PLACES} at most",
                remedy="use gradient and wafer alone for a mesh of this size",
            )
        distance = np.hypot(*(places[:, None, :] - places[None, :, :]).transpose(2, 0, 1))
        return tilts, np.linalg.cholesky(np.exp(-distance / shape.correlation_um)), at.ravel()

    def covariance_factor(self, cause: str) -> list[np.ndarray]:
        """Columns [n, k] of what parts share: the covariance of a cause of size 1 is their squares and a diagonal."""
        shape, (tilts, factor, at) = self.spread.shape(cause), self._fields[cause]
        columns = []
        if shape.wafer:
            columns.append(np.sqrt(shape.wafer) * np.ones((len(self.rows[cause]), 1)))
        if tilts is not None:
            columns.append(np.sqrt(shape.gradient) * tilts)
        if factor is not None and at is not None:
            columns.append(np.sqrt(shape.correlated) * factor[at])
        return columns

    def independent(self, cause: str) -> float:
        """Share of a cause's variance that parts do not share."""
        shape = self.spread.shape(cause)
        return max(0.0, 1.0 - shape.wafer - shape.gradient - shape.correlated)

    def normals(self, seed: int, trial: int) -> Errors:
        """Standard normal numbers of one die, cause by cause."""
        rng = np.random.Generator(np.random.PCG64((seed, trial)))
        found = {}
        for cause in self.causes:
            shape, (tilts, factor, at) = self.spread.shape(cause), self._fields[cause]
            z = rng.standard_normal(len(self.rows[cause]))
            shared = shape.wafer + shape.gradient + shape.correlated
            if shared:
                z *= np.sqrt(max(0.0, 1.0 - shared))
                if shape.wafer:
                    z += np.sqrt(shape.wafer) * rng.standard_normal()
                if tilts is not None:
                    z += np.sqrt(shape.gradient) * (tilts @ rng.standard_normal(2))
                if factor is not None and at is not None:
                    z += np.sqrt(shape.correlated) * (factor @ rng.standard_normal(len(factor)))[at]
            found[cause] = z
        for causes, lower in self.mixing:
            mixed = lower @ np.array([found[c] for c in causes])
            found |= dict(zip(causes, mixed, strict=True))
        return found

    def errors(self, normals: Errors, scales: Mapping[str, float] | None = None) -> Errors:
        """Errors of one die, each cause times its scale (1 where none is given)."""
        found = {}
        for cause in self.spread.active:
            scale = 1.0 if scales is None else scales.get(cause, 1.0)
            sigma = getattr(self.spread, cause)
            if scale == 0.0:
                continue
            if cause == "stuck_share":
                from scipy.special import ndtr

                stuck = ndtr(normals[cause]) < min(1.0, scale * sigma)
                if stuck.any():
                    found[cause] = stuck
            else:
                value = self.spread.shape(cause).values(normals[cause], sigma)
                found[cause] = value if scale == 1.0 else scale * value
        return found


def die_as_built(drawing: Drawing, errors: Errors, drift: bool) -> AsBuilt:
    """Angles, phases and losses of a die; with drift also what temperature adds."""
    built = drawing.mesh.as_built
    error, loss = built.error_rad.copy(), built.loss_db
    if "split_rad" in errors:
        error[drawing.couplers] += errors["split_rad"]
    if "phase_rad" in errors:
        error[drawing.phases] += errors["phase_rad"]
    if drift and "temperature_k" in errors:
        error[drawing.phases] += drawing.spread.phase_rad_per_k * errors["temperature_k"]
    if "loss_db" in errors:
        loss = loss.copy()
        loss[drawing.couplers] = np.abs(loss[drawing.couplers] + errors["loss_db"])
    return AsBuilt(error, loss, built.stuck_rad, built.sigma_rad)


ELECTRIC = ("p2pi_share", "r_share", "crosstalk_share", "stuck_share")


def mesh_of(drawing: Drawing, errors: Errors) -> Mesh:
    """The mesh that a die is, before anything drifts."""
    mesh = drawing.mesh
    as_built = die_as_built(drawing, errors, drift=False)
    if not any(cause in errors for cause in ELECTRIC):
        return replace(mesh, as_built=as_built)
    actuators = mesh.actuators
    params, dead, crosstalk = dict(actuators.params), actuators.dead, actuators.crosstalk
    for cause, key in (("p2pi_share", "p2pi_mw"), ("r_share", "r_ohm")):
        if cause in errors and key in params:
            params[key] = params[key] * np.exp(errors[cause])
    if "stuck_share" in errors:
        dead = dead | errors["stuck_share"]
    if "crosstalk_share" in errors and crosstalk is not None:
        coo = crosstalk.tocoo()
        coo.data = coo.data * (1.0 + errors["crosstalk_share"])
        crosstalk = coo.tocsr()
    return replace(mesh, as_built=as_built, actuators=replace(actuators, params=params, dead=dead, crosstalk=crosstalk))
