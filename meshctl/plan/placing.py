"""Settings put on the electronics: whole turns, volts and codes within limits; the inverse of `chip`.

Public: Placed, place, reach_of.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from meshctl.drive.wraps import LIMIT_TOLERANCE, VERDICTS, Wraps, least_power_wraps
from meshctl.errors import DriveFinding, VoltageOutOfRange
from meshctl.plan.chip import Chip
from meshctl.solver.reach import Reach
from meshctl.units import radians, turns

_GROUND_ROUNDS = 6  # tightenings of the reach for the rise of a shared ground; each gains the whole rise
_V_TOLERANCE = 1e-9  # V beyond a limit that rounding may ask for


@dataclass(frozen=True, eq=False)
class Placed:
    """Settings as the source can give them."""

    codes: np.ndarray  # i64[K]
    volts: np.ndarray  # f64[K], before rounding to codes
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
    return Reach(low, high, period, np.clip(reference, low, high))


def fixed_settings(chip: Chip) -> np.ndarray:
    """Settings that no drive moves: stuck, or with dead actuators only, bool (S,)."""
    alive = np.zeros(chip.net.n_settings, bool)
    alive[chip.actuators.setting[~chip.actuators.dead]] = True
    return np.asarray(~alive | ~np.isnan(chip.mesh.as_built.stuck_rad))


class _Placement:
    """One placing: the live settings, each moved by its primary actuator."""

    def __init__(self, chip: Chip, settings: np.ndarray) -> None:
        self.chip = chip
        self.live = np.flatnonzero(~fixed_settings(chip))
        self.actuator = chip.primary[self.live]
        self.wanted = turns((settings - chip.reference_rad)[self.live])
        self.wraps = chip.period_rad[self.live] > 0.0
        low, high = chip.own_reach
        self.low, self.high = (turns(np.nan_to_num(ends[self.actuator])) for ends in (low, high))
        p2pi = chip.actuators.params.get("p2pi_mw")
        weight = np.ones(len(self.live)) if p2pi is None else p2pi[self.actuator]
        self.weight = np.where(np.isnan(weight), 0.0, weight)
        self.crosstalk = self._crosstalk()

    def _crosstalk(self):  # type: ignore[no-untyped-def]
        matrix = self.chip.actuators.crosstalk
        if matrix is None:
            return None
        from meshctl.drive.crosstalk import Crosstalk

        return Crosstalk(matrix.tocsr()[self.live][:, self.actuator])

    def search(self) -> Wraps:
        return least_power_wraps(self.wanted, self.wraps, self.crosstalk, self.low, self.high, self.weight)

    def names(self) -> list[str]:
        names = self.chip.mesh.actuator_names
        return [names[a] for a in self.actuator.tolist()]

    def terminal(self, own_turns: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(own changes [A], terminal volts [K]) that give the own turns of the live settings."""
        chip = self.chip
        change = np.zeros(len(chip.actuators))
        change[self.actuator] = radians(own_turns)
        at = np.zeros(len(chip.actuators))
        for group in chip.groups:
            if group.law.power_law and chip.coupled:
                continue
            try:
                at[group.rows] = group.law.volts(change[group.rows], group.p)
            except DriveFinding as finding:
                raise finding.named([chip.mesh.actuator_names[a] for a in group.rows.tolist()]) from None
        if chip.coupled:
            from meshctl.plan.circuit import terminal_volts

            at[chip.resistive] = terminal_volts(chip, change)
        volts = np.clip(0.0, *chip.terminal_range_v)
        live = ~chip.actuators.dead
        volts[chip.actuators.channel[live]] = at[live]
        return change, volts


def _held(placement: _Placement, found: Wraps) -> tuple[Wraps, tuple[int, ...]]:
    """The nearest that lies within limits, and the actuators held there."""
    own = np.clip(found.own_turns, placement.low, placement.high)
    rows = np.flatnonzero(np.abs(own - found.own_turns) > LIMIT_TOLERANCE)
    held = tuple(int(placement.actuator[r]) for r in rows)
    return Wraps(own, found.wraps, 0.0, found.verdict, found.rounds), held


def place(chip: Chip, settings: np.ndarray, *, best_effort: bool = False) -> Placed:
    """Volts and codes for settings, whole turns chosen for least power within limits.

    Parameters
    ----------
    settings : float (S,), rad, wanted values in force before `error_rad`
    best_effort : hold actuators at their limits rather than raise

    Raises
    ------
    Unreachable, NotFound, VoltageOutOfRange and other findings of the drive, naming actuators or channels.

    Cost: linear without crosstalk; with it see `least_power_wraps`.
    """
    placement = _Placement(chip, settings)
    held: tuple[int, ...] = ()
    lowest, highest = chip.terminal_range_v
    for attempt in range(_GROUND_ROUNDS):
        found = placement.search()
        if found.verdict in ("unreachable", "not_found"):
            if not best_effort:
                _refuse(chip, placement, found)
            found, held = _held(placement, found)
        change, volts = placement.terminal(found.own_turns)
        over = np.maximum(volts - highest, lowest - volts)
        bad = np.flatnonzero(over > _V_TOLERANCE)
        if not len(bad) or not chip.coupled or attempt == _GROUND_ROUNDS - 1:
            break
        # the shared ground takes its share: what exceeded its limit gets that much less room
        _tighten(chip, placement, volts, highest, bad)
    if len(bad):
        if not best_effort:
            k = int(bad[np.argmax(over[bad])])
            raise VoltageOutOfRange(
                f"{{names}}: {volts[k]:.4g} V is outside {lowest[k]:.4g} to {highest[k]:.4g} V",
                rows=bad.tolist(),
                remedy="raise limit_v or max_v if the chip allows, or choose a target that needs less",
            ).named(chip.mesh.channel_names)
        held += tuple(int(a) for a in np.flatnonzero(np.isin(chip.actuators.channel, bad)))
    volts = np.clip(volts, lowest, highest)
    codes = chip.source.nearest_codes(volts)
    codes[chip.volts(codes) > highest + _V_TOLERANCE] -= 1  # rounding must not step over a limit
    return Placed(codes, volts, change, found.verdict, tuple(sorted(set(held))))


def _tighten(chip: Chip, placement: _Placement, volts: np.ndarray, highest: np.ndarray, bad: np.ndarray) -> None:
    channel = chip.actuators.channel[placement.actuator]
    mine = np.flatnonzero(np.isin(channel, bad))
    share = (highest[channel[mine]] / volts[channel[mine]]) ** 2
    own_high = placement.high[mine]
    placement.high[mine] = np.minimum(own_high, own_high * share * (1.0 - 1e-6))


def _refuse(chip: Chip, placement: _Placement, found: Wraps) -> None:
    """Raise Unreachable or NotFound with what is needed, what there is, and what to do."""
    names = placement.names()
    rows = list(found.rows)
    if placement.crosstalk is None and rows:
        row = max(
            rows, key=lambda r: max(placement.low[r] - found.own_turns[r], found.own_turns[r] - placement.high[r])
        )
        a = int(placement.actuator[row])
        k = int(chip.actuators.channel[a])
        wanted = radians(float(placement.wanted[row]))
        what = "an angle" if not placement.wraps[row] else "a phase (or its whole turns)"
        from meshctl.errors import Unreachable

        raise Unreachable(
            f"{{names}}: {what} {wanted:.4g} rad from rest is needed at '{names[row]}'; within its limits it gives "
            f"{radians(float(placement.low[row])):.4g} to {radians(float(placement.high[row])):.4g} rad "
            f"({chip.bounds.low_v[a]:.4g} to {chip.bounds.high_v[a]:.4g} V on channel '{chip.mesh.channel_names[k]}'; "
            f"{VERDICTS['unreachable']})",
            rows=rows,
            remedy="raise limit_v, limit_ma or limit_mw if the chip allows, or use --best-effort",
        ).named(names)
    try:
        found.require()
    except DriveFinding as finding:
        raise finding.named(names) from None
