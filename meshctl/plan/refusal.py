"""Which limit is in the way of an actuator, said with channel, value, unit, limit and remedy.

Public: refuse.
"""

from __future__ import annotations

from typing import Any, NoReturn

import numpy as np

from meshctl.errors import CurrentOutOfRange, DriveFinding, PowerOutOfRange, Unreachable, VoltageOutOfRange
from meshctl.laws.law import MA_PER_A
from meshctl.mesh.actuation import LawGroup
from meshctl.plan.chip import Chip
from meshctl.units import turns

REMEDY = "if the chip allows, or take the nearest with --best-effort"


def _alone(group: LawGroup, row: int) -> dict[str, Any]:
    """The parameters of one actuator of a group."""
    return {k: v[row : row + 1] for k, v in group.p.items()}


def refuse(chip: Chip, actuator: int, change_rad: float, rows: list[int], best: str = "") -> NoReturn:
    """Raise the finding that names what keeps an actuator from a change of its own.

    Parameters
    ----------
    actuator : the worst of those concerned
    change_rad : what it is asked for, from its rest
    rows : all actuators concerned
    """
    names = chip.mesh.actuator_names
    rows = [actuator, *(r for r in rows if r != actuator)]
    k = int(chip.actuators.channel[actuator])
    channel = f"channel '{chip.mesh.channel_names[k]}'"
    group = next(g for g in chip.groups if actuator in g.rows)
    p = _alone(group, int(np.flatnonzero(group.rows == actuator)[0]))
    source = chip.channels
    try:
        volts = float(group.law.volts(np.array([change_rad]), p)[0])
    except DriveFinding as finding:  # the law itself cannot: pull-in, gap, measured range, runaway
        finding.rows = (actuator,)
        finding.sentence = finding.sentence.replace("{names}", f"{{names}} on {channel}", 1)
        raise finding.named(names) from None
    said = f"{{names}} on {channel}: "
    if group.law.power_law:
        power = float(turns(abs(change_rad)) * p["p2pi_mw"][0])
        current = power / volts if volts else 0.0
        current_ma = MA_PER_A * current / 1e3
        if power > source.limit_mw[k]:
            raise PowerOutOfRange(
                f"{said}{power:.4g} mW is needed, the limit is {source.limit_mw[k]:.4g} mW{best}",
                rows=rows,
                remedy=f"raise limit_mw {REMEDY}",
            ).named(names)
        most = chip.level_range[1][k] if source.by_current[k] else source.limit_ma[k]
        if current_ma > most:
            raise CurrentOutOfRange(
                f"{said}{current_ma:.4g} mA is needed, the limit is {most:.4g} mA{best}",
                rows=rows,
                remedy=f"raise limit_ma {REMEDY}",
            ).named(names)
    low, high = (float(ends[k]) for ends in chip.level_range)
    low, high = max(low, float(chip.bounds.low_v[actuator])), min(high, float(chip.bounds.high_v[actuator]))
    if source.by_current[k]:
        low, high = 0.0, float(source.limit_v[k])
    if not low <= volts <= high:
        raise VoltageOutOfRange(
            f"{said}{volts:.4g} V is needed, allowed is {low:.4g} to {high:.4g} V{best}",
            rows=rows,
            remedy=f"raise limit_v or max_v {REMEDY}",
        ).named(names)
    raise Unreachable(
        f"{said}a change of {change_rad:.4g} rad is out of reach of all limits together{best}",
        rows=rows,
        remedy=f"raise its limits {REMEDY}",
    ).named(names)
