"""The error of a plan from what scatters, without drawing a die: by cause and by element, from one pass of light.

To first order E^2 = E0^2 + sum of s_i^2 |J_i|^2, J_i what an error of part i does to the matrix beyond scale
and free phases. Parts that share errors add in phase. The second order is exact for independent angles and
phases of lossless parts up to the scatter of the overlap: every part is replaced by its mean over its errors.
Public: Budget, budget_of.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np

from meshctl.errors import DriveFinding, OutOfReach
from meshctl.mesh.sensitivity import part_jacobian, unseen
from meshctl.mesh.spread import CAUSES
from meshctl.optics.elements import COUPLER, PHASE
from meshctl.optics.measures import matrix_error
from meshctl.plan.chip import Chip
from meshctl.tolerances.chunks import Task

AT_ONCE = 256  # parts whose derivatives are held in memory together
STEP = 1e-4  # relative, of differences where laws have no slope by their parameters
HOLDS = 0.1  # share by which the second order may differ before the first is said not to hold
MOST_STUCK = 5000  # actuators that are stuck one by one


@dataclass(frozen=True, eq=False)
class Budget:
    """Mean E^2 of dies, and where it comes from."""

    e2_nominal: float
    by_cause: dict[str, float]  # added to the mean of E^2
    by_element: np.ndarray  # f64[E], the independent parts of all causes
    sensitivity: np.ndarray  # f64[E], E^2 per rad^2 of an error of each part
    second_order_e2: float | None  # mean E^2; None where a cause is not an angle or a phase of single parts

    @property
    def e2(self) -> float:
        """Mean of E^2 to first order."""
        return self.e2_nominal + sum(self.by_cause.values())

    @property
    def holds(self) -> bool:
        """False where the second order says otherwise, or E^2 is no small number."""
        if self.second_order_e2 is not None:
            return abs(self.e2 - self.second_order_e2) <= HOLDS * max(self.second_order_e2, 1e-15)
        return self.e2 <= HOLDS

    def entry(self, names: list[str], most: int = 20) -> dict[str, Any]:
        """As a JSON object, with the elements that add most and those that are most sensitive."""
        by = {
            "by_element": self.by_element,
            "most_sensitive": self.sensitivity,
        }
        listed = {
            key: {names[e]: float(v[e]) for e in np.argsort(-v, kind="stable")[:most].tolist() if v[e] > 0.0}
            for key, v in by.items()
        }
        return {
            "e2_nominal": self.e2_nominal,
            "e2": self.e2,
            "matrix_error": math.sqrt(self.e2),
            "by_cause": self.by_cause,
            "second_order_e2": self.second_order_e2,
            "first_order_holds": self.holds,
            **listed,
        }


class _Account:
    """Adds up what errors do, a block of parts at a time."""

    def __init__(self, task: Task) -> None:
        self.task, self.drawing, self.chip = task, task.drawing, Chip(task.mesh)
        goal = task.goal
        if goal.matrix is None:
            raise OutOfReach("the budget is of matrices; this plan is for routes", remedy="use --trials")
        self.net, codes = task.mesh.net, task.plan.codes
        self.response = self.chip.response_at(codes)
        if self.response.loops:
            raise OutOfReach("the budget needs a net without loops and reflections", remedy="use --trials")
        self.levels, self.settings = self.chip.levels(codes), self.chip.actual(codes)
        self.matrix = self.response.matrix(self.settings)
        self.light = float(np.linalg.norm(self.matrix) ** 2)
        self.target, self.free = goal.matrix, goal.free
        self.nominal = matrix_error(self.matrix, self.target, self.free) ** 2
        self.unseen = unseen(self.matrix, self.free)
        self.by_element = np.zeros(self.net.n_elements)
        self.sensitivity = np.zeros(self.net.n_elements)

    def sigma(self, cause: str) -> float:
        """Standard deviation of a cause, its scale counted."""
        return float(getattr(self.drawing.spread, cause) * self.task.scales.get(cause, 1.0))

    def seen(self, rows: np.ndarray) -> np.ndarray:
        """What counts of derivatives [n, out, in], as real numbers [n, 2 out in] of unit light."""
        flat = rows.reshape(len(rows), -1)
        real = np.concatenate([flat.real, flat.imag], axis=1) / math.sqrt(self.light)
        return np.asarray(real - (real @ self.unseen) @ self.unseen.T)

    def added(self, cause: str, sizes: np.ndarray, elements: np.ndarray, mean: np.ndarray | None = None) -> float:
        """Mean E^2 of a cause whose part k turns element k by `sizes` rad times an error of size 1.

        With a `mean` the errors are losses in dB, and have that mean.
        """
        by_loss = mean is not None
        columns = self.drawing.covariance_factor(cause)
        factor = np.concatenate(columns, axis=1) if columns else np.zeros((len(sizes), 0))
        if mean is not None:
            factor = np.column_stack([factor * sizes[:, None], mean])
        else:
            factor = factor * sizes[:, None]
        shared, alone = np.zeros((factor.shape[1], 2 * self.matrix.size)), 0.0
        independent = self.drawing.independent(cause)
        for start in range(0, len(elements), AT_ONCE):
            block = slice(start, start + AT_ONCE)
            rows = part_jacobian(self.response, self.settings, elements[block], by_loss=by_loss)
            seen = self.seen(rows)
            size2 = (seen**2).sum(1)
            part = independent * sizes[block] ** 2 * size2
            self.by_element[elements[block]] += part
            if not by_loss:
                self.sensitivity[elements[block]] = size2
            alone += float(part.sum())
            shared += factor[block].T @ seen
        return alone + float((shared**2).sum())


def _by_setting(account: _Account, own: np.ndarray, cause: str) -> float:
    """Mean E^2 where actuator (or channel's actuators) a changes its own setting by own [S, n] for an error of 1."""
    net = account.net
    columns = account.drawing.covariance_factor(cause)
    independent = account.drawing.independent(cause)
    factor = np.concatenate([*columns, math.sqrt(independent) * np.eye(own.shape[1])], axis=1)
    spread, total = own @ factor, np.zeros((factor.shape[1], 2 * account.matrix.size))
    alone = np.zeros(net.n_settings)
    elements = np.flatnonzero(net.setting_of >= 0)
    for start in range(0, len(elements), AT_ONCE):
        block = elements[start : start + AT_ONCE]
        seen = account.seen(part_jacobian(account.response, account.settings, block, by_loss=False))
        total += spread[net.setting_of[block]].T @ seen
        at = net.setting_of[block]
        np.add.at(alone, at, (seen**2).sum(1) * (own[at] ** 2).sum(1))
    account.by_element[net.first_element] += alone
    return float((total**2).sum())


def _own(account: _Account, change: np.ndarray) -> np.ndarray:
    """Settings [S, A] by the own changes of actuators, neighbours included, each times `change` [A]."""
    chip = account.chip
    own = np.zeros((chip.net.n_settings, len(chip.actuators)))
    own[chip.actuators.setting, np.arange(len(chip.actuators))] = 1.0
    if chip.actuators.crosstalk is not None:
        own += chip.actuators.crosstalk.toarray()
    own[~np.isnan(chip.mesh.as_built.stuck_rad)] = 0.0
    return own * change


def _slope(account: _Account, cause: str) -> np.ndarray:
    """Own change [A] for an error of 1 of each actuator, or of its channel's level.

    By differences of all at once: what one does to another through a shared ground is counted as its own.
    """
    chip, drawing = account.chip, account.drawing
    if cause == "noise_v":
        up, down = (chip.own_changes(account.levels + d) for d in (STEP, -STEP))
        return np.asarray((up - down) / (2.0 * STEP))
    from meshctl.tolerances.dies import mesh_of

    ends = [
        Chip(mesh_of(drawing, {cause: np.full(len(chip.actuators), d)})).own_changes(account.levels)
        for d in (STEP, -STEP)
    ]
    return np.asarray((ends[0] - ends[1]) / (2.0 * STEP))


def _cause(account: _Account, cause: str) -> float:
    drawing, spread, net = account.drawing, account.drawing.spread, account.net
    sigma = account.sigma(cause)
    rows = drawing.rows[cause]
    if cause in ("split_rad", "phase_rad"):
        return account.added(cause, np.full(len(rows), sigma), rows)
    if cause == "loss_db":
        mean, size = _folded(account.task.mesh.as_built.loss_db[rows], sigma)
        return account.added(cause, size, rows, mean)
    if cause == "temperature_k":
        return account.added(cause, np.full(len(rows), sigma * spread.phase_rad_per_k), rows)
    if cause in ("p2pi_share", "r_share"):
        return _by_setting(account, _own(account, sigma * _slope(account, cause)), cause)
    if cause == "noise_v":
        own = _own(account, sigma * _slope(account, cause))
        by_channel = np.zeros((net.n_settings, len(account.chip.channels)))
        np.add.at(by_channel.T, account.chip.actuators.channel, own.T)
        return _by_setting(account, by_channel, cause)
    if cause == "crosstalk_share":
        crosstalk = account.chip.actuators.crosstalk
        assert crosstalk is not None, "a drawing has crosstalk to scatter"
        coo = crosstalk.tocoo()
        change = account.chip.own_changes(account.levels)
        own = np.zeros((net.n_settings, coo.nnz))
        own[coo.row, np.arange(coo.nnz)] = sigma * coo.data * change[coo.col]
        return _by_setting(account, own, cause)
    if cause == "laser_nm":
        slope = account.response.slope_per_nm(account.settings, np.array([net.wavelength_nm]))[1]
        return float(sigma**2 * (account.seen(slope) ** 2).sum())
    return _stuck(account, sigma)


def _folded(loss_db: np.ndarray, sigma: float) -> tuple[np.ndarray, np.ndarray]:
    """(what the mean gains, standard deviation) of losses that are folded at 0: the folded normal law."""
    from scipy.special import erf

    at = loss_db / (sigma * math.sqrt(2.0))
    mean = sigma * math.sqrt(2.0 / math.pi) * np.exp(-(at**2)) + loss_db * erf(at)
    return mean - loss_db, np.sqrt(np.maximum(loss_db**2 + sigma**2 - mean**2, 0.0))


def _stuck(account: _Account, probability: float) -> float:
    """Each actuator dead in turn, measured whole: its error is not small."""
    count = len(account.chip.actuators)
    if count > MOST_STUCK:
        raise OutOfReach(f"stuck_share of {count} actuators; {MOST_STUCK} at most", remedy="use --trials for it")
    total = 0.0
    for a in range(count):
        stuck = np.arange(count) == a
        try:
            matrix, _ = account.task.dies.run({"stuck_share": stuck})
        except DriveFinding:
            continue
        added = probability * (matrix_error(matrix, account.target, account.free) ** 2 - account.nominal)
        account.by_element[account.net.first_element[account.chip.actuators.setting[a]]] += added
        total += added
    return total


def _second_order(account: _Account) -> float | None:
    """Mean E^2 with every part at its mean over its errors, less the scatter of the overlap."""
    drawing, spread, net = account.drawing, account.drawing.spread, account.net
    simple = {"split_rad", "phase_rad"}
    if account.free != "nothing" or not set(spread.active) <= simple:
        return None
    if any(drawing.independent(c) < 1.0 or spread.shape(c).distribution != "normal" for c in spread.active):
        return None
    variance = np.zeros(net.n_elements)
    for cause in spread.active:
        variance[drawing.rows[cause]] += account.sigma(cause) ** 2
    response, circuit = account.response, account.response.circuit
    from meshctl.optics.feedforward import fuse

    table = response.parts(account.settings) * np.exp(-0.5 * variance)
    blocks = np.empty((circuit.n_blocks, 8))
    fuse(circuit.first, circuit.element, circuit.side, table, blocks)
    mean = response.through(blocks)
    scatter = 0.0
    rows = np.flatnonzero((variance > 0.0) & ((net.kind == COUPLER) | (net.kind == PHASE)))
    for start in range(0, len(rows), AT_ONCE):
        block = rows[start : start + AT_ONCE]
        turned = part_jacobian(response, account.settings, block, by_loss=False)
        overlap = np.abs(np.tensordot(turned, np.conj(account.target), axes=2)) ** 2
        scatter += float((variance[block] * overlap).sum())
    size = float(np.linalg.norm(account.target) ** 2) * account.light
    return 1.0 - (abs(np.vdot(account.target, mean)) ** 2 + scatter) / size


def budget_of(task: Task) -> Budget:
    """Mean E^2 of a plan's codes on dies that scatter.

    Parameters
    ----------
    task : Task with the policy as-set

    Raises
    ------
    OutOfReach
        For routes, nets with loops, and policies that treat every die by itself.

    Cost: one derivative of the matrix for each part, some out in each: 0.1 s for 16 modes, some seconds for 64.
    """
    if task.policy != "as-set":
        raise OutOfReach(f"the budget is of codes as they are set, not {task.policy}", remedy="use --trials")
    account = _Account(task)
    by_cause = {cause: _cause(account, cause) for cause in CAUSES if cause in task.spread.active}
    return Budget(account.nominal, by_cause, account.by_element, account.sensitivity, _second_order(account))
