"""What a plan says of settings that are not where they are wanted, and why.

Public: remarks, out_of_range.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from meshctl.plan.chip import Chip
from meshctl.plan.settling import Work
from meshctl.solver.solution import Shortfall

LISTED = 8  # settings named one by one; further ones are counted
HELD_LISTED = 6


def _cause(chip: Chip, shortfall: Shortfall) -> str:
    s = shortfall.setting
    if not np.isnan(chip.mesh.as_built.stuck_rad[s]):
        return "stuck"
    if chip.actuators.dead[chip.actuators.setting == s].all():
        return "dead"
    return "limit" if math.isnan(shortfall.wanted_rad) or abs(shortfall.off_rad) > 1e-8 else "cell"


def out_of_range(chip: Chip, work: Work) -> list[dict[str, Any]]:
    """Settings that are not where they are wanted, as records.

    What the closed form wants is told where it is what was used; after a refinement only where each stands.
    `cause` is stuck, dead, limit (of the drive), or cell (its couplers split too unevenly for it).
    """
    records = []
    for shortfall in work.solution.shortfalls:
        record: dict[str, Any] = {
            "element": chip.net.setting_names[shortfall.setting],
            "cause": _cause(chip, shortfall),
            "used_rad": shortfall.used_rad,
        }
        if not work.refined:
            record |= {
                "wanted_rad": shortfall.wanted_rad,
                "off_rad": shortfall.off_rad,
                "cross_power_off": shortfall.cross_power_off,
            }
        records.append(record)
    return records


def remarks(chip: Chip, work: Work) -> list[str]:
    """Warnings of a plan."""
    solution, placed = work.solution, work.placed
    names, said = chip.net.setting_names, list(placed.warnings)
    listed = sorted(solution.shortfalls, key=lambda s: -abs(s.cross_power_off) - _size(s.off_rad))
    for s in listed[:LISTED]:
        cause = _cause(chip, s)
        what = {"limit": "is at its limit" if work.refined else "is out of its range", "cell": "is out of its range"}
        standing = what.get(cause, "is stuck or dead")
        if work.refined:
            said.append(f"'{names[s.setting]}' {standing}: it stands at {s.used_rad:.4g} rad")
            continue
        off = f"{s.off_rad:+.4g} rad" if abs(s.off_rad) > 1e-8 else f"{s.cross_power_off:+.4g} in cross power"
        said.append(f"'{names[s.setting]}' {standing}: {off} from what the closed form wants")
    if len(listed) > LISTED:
        said.append(f"{len(listed) - LISTED} more settings are out of range")
    if work.worked_around:
        n = work.worked_around
        cells = "1 cell is" if n == 1 else f"{n} cells are"
        them = "it" if n == 1 else "them"
        said.append(f"{cells} out of the closed form's range; the refinement worked around {them}")
    if placed.held:
        actuators = chip.mesh.actuator_names
        first = ", ".join(f"'{actuators[a]}'" for a in placed.held[:HELD_LISTED])
        said.append(f"held at a limit: {first}{' and more' if len(placed.held) > HELD_LISTED else ''}")
    if solution.reason == "no_output_phases":
        said.append(
            "the target fixes output phases that nothing on the mesh sets; if they do not matter use --free outputs"
        )
    return said


def _size(off_rad: float) -> float:
    return 0.0 if math.isnan(off_rad) else abs(off_rad)
