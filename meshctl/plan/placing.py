"""Settings put on the electronics: whole turns, volts and codes within limits; the inverse of `chip`.

Public: Placed, place, reach_of, fixed_settings, code_range, require_sound_crosstalk.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, NoReturn

import numpy as np

from meshctl.drive.wraps import LIMIT_TOLERANCE, Wraps, least_power_wraps
from meshctl.errors import CrosstalkUnsound, CurrentOutOfRange, DriveFinding, SharedChannel, VoltageOutOfRange
from meshctl.plan.chip import Chip
from meshctl.plan.refusal import refuse
from meshctl.solver.reach import Reach
from meshctl.units import radians, turns

_GROUND_ROUNDS = 6  # tightenings of the reach for the rise of a shared ground; each gains the whole rise
_TOLERANCE = 1e-9  # V or mA beyond a limit that rounding may ask for


@dataclass(frozen=True, eq=False)
class Placed:
    """Settings as the source can give them."""

    codes: np.ndarray  # i64[K]
    levels: np.ndarray  # f64[K], before rounding to codes: V, or mA
    change: np.ndarray  # f64[A], own changes before rounding
    verdict: str  # of the whole turns: a key of drive.wraps.VERDICTS
    held: tuple[int, ...] = ()  # actuators held at a limit (best effort only)
    warnings: list[str] = field(default_factory=list)


def reach_of(chip: Chip, background: np.ndarray | None = None) -> Reach:
    """What every setting can be within all limits of the drive.

    Parameters
    ----------
    background : float (S,), what neighbours add to settings that nothing moves (dead actuators)

    Stuck settings stand where they are stuck; settings whose actuators are all dead stand at their rest.
    """
    low_own, high_own = chip.own_reach
    setting = chip.actuators.setting
    n = chip.net.n_settings
    reference = chip.reference_rad + (0.0 if background is None else background)
    primary = chip.primary
    low = reference + np.nan_to_num(low_own)[primary]
    high = reference + np.nan_to_num(high_own)[primary]
    stuck = chip.mesh.as_built.stuck_rad
    is_stuck = ~np.isnan(stuck)
    low[is_stuck], high[is_stuck] = stuck[is_stuck], stuck[is_stuck]
    alive = np.zeros(n, bool)
    alive[setting[~chip.actuators.dead]] = True
    fixed = is_stuck | ~alive
    low[~alive & ~is_stuck] = high[~alive & ~is_stuck] = reference[~alive & ~is_stuck]
    period = np.where(fixed, 0.0, chip.period_rad)
    if chip.actuators.crosstalk is not None:
        # neighbours give phase too: what is out of reach is for the search of whole turns to say
        turning = period > 0.0
        high[turning] = np.maximum(high, low + period)[turning]
    return Reach(low, high, period, np.clip(reference, low, high))


def fixed_settings(chip: Chip) -> np.ndarray:
    """Settings that no drive moves: stuck, or with dead actuators only, bool (S,)."""
    alive = np.zeros(chip.net.n_settings, bool)
    alive[chip.actuators.setting[~chip.actuators.dead]] = True
    return np.asarray(~alive | ~np.isnan(chip.mesh.as_built.stuck_rad))


class _Placement:
    """One placing: the live settings, each moved by one actuator.

    Settings of heaters on the other arm are counted backwards, so that own turns are heat throughout.
    """

    def __init__(self, chip: Chip, settings: np.ndarray, moved_by: np.ndarray, turning: bool = True) -> None:
        self.chip = chip
        self.live = np.flatnonzero(~fixed_settings(chip))
        self.actuator = moved_by[self.live]
        self.sign = chip.arm[self.actuator]
        self.wanted = self.sign * turns((settings - chip.reference_rad)[self.live])
        self.wraps = (chip.period_rad[self.live] > 0.0) & turning
        ends = [self.sign * turns(np.nan_to_num(end[self.actuator])) for end in chip.own_reach]
        self.low, self.high = np.minimum(*ends), np.maximum(*ends)
        p2pi = chip.actuators.params.get("p2pi_mw")
        weight = np.ones(len(self.live)) if p2pi is None else p2pi[self.actuator]
        self.weight = np.where(np.isnan(weight), 0.0, weight)
        self.crosstalk = self._crosstalk()

    def _crosstalk(self):  # type: ignore[no-untyped-def]
        matrix = self.chip.actuators.crosstalk
        if matrix is None:
            return None
        from scipy.sparse import diags_array

        from meshctl.drive.crosstalk import Crosstalk

        signs = diags_array(self.sign)
        try:
            return Crosstalk(signs @ matrix.tocsr()[self.live][:, self.actuator] @ signs)
        except CrosstalkUnsound as finding:
            raise self._where_unsound(matrix, finding) from None

    def _where_unsound(self, matrix: Any, finding: CrosstalkUnsound) -> CrosstalkUnsound:
        """The same finding with the actuators that it is about."""
        dense = np.eye(len(self.live)) + matrix.tocsr()[self.live][:, self.actuator].toarray()
        _, sizes, kernel = np.linalg.svd(dense)
        worst = np.argsort(-np.abs(kernel[-1]), kind="stable")[:2]
        names = self.names()
        condition = float(sizes[0] / sizes[-1]) if sizes[-1] > 0.0 else np.inf
        return CrosstalkUnsound(
            f"{finding.what} (condition {condition:.2g}): '{names[worst[0]]}' and '{names[worst[-1]]}' "
            "cannot be told apart by what they heat",
            where=finding.where or "crosstalk.csv",
            remedy=finding.remedy,
        )

    def search(self) -> Wraps:
        try:
            return least_power_wraps(self.wanted, self.wraps, self.crosstalk, self.low, self.high, self.weight)
        except DriveFinding as finding:
            raise finding.named(self.names()) from None

    def given(self, own: np.ndarray) -> Wraps:
        turned = self.sign * turns(own[self.actuator])
        return Wraps(turned, np.zeros(len(turned), np.int64), 0.0, "found", 0)

    def names(self) -> list[str]:
        names = self.chip.mesh.actuator_names
        return [names[a] for a in self.actuator.tolist()]

    def levels(self, own_turns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(own changes [A], level [A] that each actuator wants of its channel) for own turns of the live settings."""
        chip = self.chip
        change = np.zeros(len(chip.actuators))
        change[self.actuator] = self.sign * radians(own_turns)
        at = np.zeros(len(chip.actuators))
        for group in chip.groups:
            if group.law.power_law and chip.coupled:
                continue
            try:
                at[group.rows] = group.law.volts(change[group.rows], group.p)
            except DriveFinding as finding:
                raise finding.named([chip.mesh.actuator_names[a] for a in group.rows.tolist()]) from None
        if chip.coupled:
            from meshctl.plan.circuit import heater_levels

            at[chip.resistive] = heater_levels(chip, change)
        return change, at


def _by_channel(chip: Chip, at: np.ndarray, best_effort: bool) -> np.ndarray:
    """Levels [K] from what each live actuator [A] wants; those that share a channel must want the same."""
    levels = np.clip(0.0, *chip.level_range)
    live = np.flatnonzero(~chip.actuators.dead)
    channel = chip.actuators.channel[live]
    levels[channel] = at[live]
    lowest, highest = np.full(len(levels), np.inf), np.full(len(levels), -np.inf)
    np.minimum.at(lowest, channel, at[live])
    np.maximum.at(highest, channel, at[live])
    apart = np.where(np.isfinite(lowest), highest - lowest, 0.0)
    k = int(np.argmax(apart)) if len(apart) else 0
    if len(apart) and apart[k] > 0.5 * chip.source.step_v[k]:
        if not best_effort:
            unit = "mA" if chip.channels.by_current[k] else "V"
            raise SharedChannel(
                f"{{names}} share channel '{chip.mesh.channel_names[k]}' but need {lowest[k]:.4g} to "
                f"{highest[k]:.4g} {unit}",
                rows=live[channel == k].tolist(),
                remedy="give each a channel of its own, or take the middle with --best-effort",
            ).named(chip.mesh.actuator_names)
        shared = apart > 0.0
        levels[shared] = 0.5 * (lowest + highest)[shared]
    return levels


def _held(placement: _Placement, found: Wraps) -> tuple[Wraps, tuple[int, ...]]:
    """The nearest that lies within limits, and the actuators held there."""
    own = np.clip(found.own_turns, placement.low, placement.high)
    rows = np.flatnonzero(np.abs(own - found.own_turns) > LIMIT_TOLERANCE)
    held = tuple(int(placement.actuator[r]) for r in rows)
    return Wraps(own, found.wraps, 0.0, found.verdict, found.rounds), held


def require_sound_crosstalk(chip: Chip) -> None:
    """Refuse crosstalk that no drive can be found through, with the actuators concerned."""
    if chip.actuators.crosstalk is not None:
        _Placement(chip, chip.reference_rad, chip.primary)


def place(
    chip: Chip,
    settings: np.ndarray,
    *,
    best_effort: bool = False,
    moved_by: np.ndarray | None = None,
    own: np.ndarray | None = None,
    turning: bool = True,
) -> Placed:
    """Volts and codes for settings, whole turns chosen for least power within limits.

    Parameters
    ----------
    settings : float (S,), rad, wanted values in force before `error_rad`
    best_effort : hold actuators at their limits rather than raise
    moved_by : int (S,), the actuator that moves each setting; by default its primary one
    own : float (A,), own changes within limits, rad, that give the settings; None: whole turns are searched for
    turning : whole turns may be added or taken off; they change light away from the centre wavelength

    Raises
    ------
    Unreachable, NotFound, VoltageOutOfRange and other findings of the drive, naming actuators or channels.

    Cost: linear without crosstalk; with it see `least_power_wraps`.
    """
    placement = _Placement(chip, settings, chip.primary if moved_by is None else moved_by, turning)
    held: tuple[int, ...] = ()
    lowest, highest = chip.level_range
    for attempt in range(_GROUND_ROUNDS):
        found = placement.search() if own is None else placement.given(own)
        if found.verdict in ("unreachable", "not_found"):
            if not best_effort:
                _refuse(chip, placement, found)
            found, held = _held(placement, found)
        change, at = placement.levels(found.own_turns)
        levels = _by_channel(chip, at, best_effort)
        over = np.maximum(levels - highest, lowest - levels)
        bad = np.flatnonzero(over > _TOLERANCE)
        if not len(bad) or not chip.coupled or attempt == _GROUND_ROUNDS - 1:
            break
        # the shared ground takes its share: what exceeded its limit gets that much less room
        _tighten(chip, placement, levels, highest, bad)
    if len(bad):
        if not best_effort:
            _refuse_levels(chip, levels, bad)
        held += tuple(int(a) for a in np.flatnonzero(np.isin(chip.actuators.channel, bad)))
    levels = np.clip(levels, lowest, highest)
    codes = chip.source.nearest_codes(levels)
    codes = np.clip(codes, *code_range(chip))  # rounding must not step over a limit of channel or law
    return Placed(codes, levels, change, found.verdict, tuple(sorted(set(held))))


def code_range(chip: Chip) -> tuple[np.ndarray, np.ndarray]:
    """Lowest and highest code of every channel within all limits, int64 (K,) both."""
    source, (bottom, top) = chip.source, (ends.copy() for ends in chip.level_range)
    volts = ~chip.by_current
    np.maximum.at(bottom, chip.actuators.channel[volts], chip.bounds.low_v[volts])
    np.minimum.at(top, chip.actuators.channel[volts], chip.bounds.high_v[volts])
    low = np.ceil((bottom - source.first_v) / source.step_v - 1e-9).astype(np.int64)
    high = np.floor((top - source.first_v) / source.step_v + 1e-9).astype(np.int64)
    return np.maximum(low, 0), np.minimum(high, source.highest)


def _refuse_levels(chip: Chip, levels: np.ndarray, bad: np.ndarray) -> NoReturn:
    lowest, highest = chip.level_range
    k = int(bad[np.argmax(np.maximum(levels - highest, lowest - levels)[bad])])
    current = bool(chip.channels.by_current[k])
    unit = "mA" if current else "V"
    finding: type[DriveFinding] = CurrentOutOfRange if current else VoltageOutOfRange
    rise = "" if current else ", the rise of the shared ground included"
    raise finding(
        f"channel {{names}}: {levels[k]:.4g} {unit} is needed{rise}, "
        f"allowed is {lowest[k]:.4g} to {highest[k]:.4g} {unit}",
        rows=[k, *(int(b) for b in bad if b != k)],
        remedy="raise the limit or the range if the chip allows, or take the nearest with --best-effort",
    ).named(chip.mesh.channel_names)


def _tighten(chip: Chip, placement: _Placement, levels: np.ndarray, highest: np.ndarray, bad: np.ndarray) -> None:
    channel = chip.actuators.channel[placement.actuator]
    mine = np.flatnonzero(np.isin(channel, bad))
    share = (highest[channel[mine]] / levels[channel[mine]]) ** 2
    own_high = placement.high[mine]
    placement.high[mine] = np.minimum(own_high, own_high * share * (1.0 - 1e-6))


def _refuse(chip: Chip, placement: _Placement, found: Wraps) -> NoReturn:
    """Say what is needed, what there is, and what to do."""
    if placement.crosstalk is None and found.rows:
        low, high, own = placement.low, placement.high, found.own_turns
        row = max(found.rows, key=lambda r: float(max(low[r] - own[r], own[r] - high[r])))
        asked = float(own[row])
        if placement.wraps[row] and asked < low[row]:
            asked += float(np.ceil(low[row] - asked))
        rows = placement.actuator[list(found.rows)].tolist()
        refuse(chip, int(placement.actuator[row]), float(placement.sign[row] * radians(asked)), rows)
    try:
        found.require()
    except DriveFinding as finding:
        raise finding.named(placement.names()) from None
    raise AssertionError("the whole turns were refused without a reason")
