"""The named states of the mesh: the list, what differs, and taking one after the other.

Public: StatesScreen.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from textual.widget import Widget
from textual.widgets import Static

from meshctl.plan.states import Difference, StateRow
from meshctl.screens.base import Base, Tell
from meshctl.screens.phrases import figure
from meshctl.screens.table import ArrayTable, Column

COLUMNS = (
    Column("state", 24, str, right=False),
    Column("wish", 24, str, right=False),
    Column("mW", 8, lambda value: figure(float(value), ".3f")),
    Column("ends", 10, str, right=False),
    Column("note", 60, str, right=False),
)


def difference_lines(found: Difference) -> list[str]:
    """What changes, in words."""
    lines = [f"{c.cell}: cross power {c.before:.3f} to {c.after:.3f}" for c in found.cells]
    lines += [f"{p.element}: {p.before_rad:.3f} to {p.after_rad:.3f} rad" for p in found.phases]
    lines += [
        f"channel {c.channel}: {c.before_v:.4f} to {c.after_v:.4f} V, code {c.before_code} to {c.after_code}"
        for c in found.channels
    ]
    lines.append(f"holding: {found.hold_before_mw:.3f} to {found.hold_after_mw:.3f} mW")
    lines.append(f"switching: {figure(found.switch_nj, '.3g')} nJ there, {figure(found.back_nj, '.3g')} nJ back")
    return lines


class StatesScreen(Base):
    """Screen 4."""

    WHERE = "states"

    def body(self) -> Iterator[Widget]:
        self.rows: list[StateRow] = []
        yield Static(id="title", markup=False)
        yield ArrayTable(COLUMNS, self.board.looks)

    @property
    def table(self) -> ArrayTable:
        """The table."""
        return self.query_one(ArrayTable)

    def renew(self) -> None:
        """The list as the folder has it now."""
        self.rows = self.work.session.states()
        columns = zip(*((r.name, r.target, r.power_mw, r.reason, r.note) for r in self.rows), strict=True)
        found = [np.array(column) for column in columns] or [np.empty(0, str) for _ in COLUMNS]
        self.table.show(found, np.array([not r.fresh for r in self.rows], bool))
        count = len(self.rows)
        said = (
            f"{count} state{'s' * (count != 1)} in the mesh folder"
            if count
            else "no states yet: k keeps the plan as one"
        )
        self.query_one("#title", Static).update(said)

    def words(self) -> str:
        """The state under the cursor."""
        row = self.table.row
        return "" if row < 0 else f"{self.rows[row].name}: {self.rows[row].target} {self.rows[row].note}"

    def on_screen_resume(self) -> None:
        self.fresh = False  # the folder may have changed
        super().on_screen_resume()
        self.table.focus()

    def on_array_table_moved(self) -> None:
        """The cursor moved."""
        self.board.remark = ""
        self.tell()

    def _chosen(self) -> str | None:
        row = self.table.row
        if row < 0:
            self.board.say("no state here: k keeps the plan in hand as one")
            return None
        return self.rows[row].name

    # ---- keys
    def action_pick(self) -> None:
        name = self._chosen()
        if name is not None and self.board.attempt(lambda: self.work.open_state(name)):
            self.board.say(f"state {name} is in hand; u takes it back, 1 shows it")

    def action_step(self, step: int) -> None:
        self.table.step(step)
        self.action_pick()

    def action_difference(self) -> None:
        name = self._chosen()
        if name is None:
            return

        def show() -> None:
            lines = difference_lines(self.work.difference(name))
            self.board.push_screen(Tell(f"from the plan in hand to {name}", lines))

        self.board.attempt(show)
