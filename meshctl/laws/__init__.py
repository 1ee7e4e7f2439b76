"""Laws of one actuator, volts to phase or angle and back: the table of all of them.

Public: LAWS, law_row, HEATER, TABLE, GAP, COMB, POCKELS, CARRIER, LEVELS.
"""

from __future__ import annotations

from meshctl.laws.comb import COMB_LAW
from meshctl.laws.gap import GAP_LAW
from meshctl.laws.heater import HEATER_LAW
from meshctl.laws.law import Law
from meshctl.laws.levels import LEVELS_LAW
from meshctl.laws.pockels import CARRIER_LAW, POCKELS_LAW
from meshctl.laws.table import TABLE_LAW

LAWS: tuple[Law, ...] = (
    HEATER_LAW,
    TABLE_LAW,
    GAP_LAW,
    COMB_LAW,
    POCKELS_LAW,
    CARRIER_LAW,
    LEVELS_LAW,
)
HEATER, TABLE, GAP, COMB, POCKELS, CARRIER, LEVELS = range(7)
_ROWS = {law.name: row for row, law in enumerate(LAWS)}


def law_row(name: str) -> int | None:
    """Row of a law in LAWS, or None for an unknown name."""
    return _ROWS.get(name)
