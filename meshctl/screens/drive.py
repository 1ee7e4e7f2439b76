"""Every actuator: what is wanted of it, what it is given, and how much room is left.

Public: DriveScreen.
"""

from __future__ import annotations

from collections.abc import Iterator

from textual.widget import Widget
from textual.widgets import Static

from meshctl.screens.base import Base
from meshctl.screens.phrases import figure
from meshctl.screens.table import ArrayTable, Column


def _shown(form: str):  # type: ignore[no-untyped-def]
    return lambda value: figure(float(value), form)


COLUMNS = (
    Column("actuator", 14, str, right=False),
    Column("wanted rad", 10, _shown(".4f")),
    Column("given rad", 9, _shown(".4f")),
    Column("volts", 8, _shown(".4f")),
    Column("code", 6),
    Column("room V", 7, _shown(".3f")),
    Column("mW", 8, _shown(".3f")),
    Column("status", 9, str, right=False),
)


class DriveScreen(Base):
    """Screen 3."""

    WHERE = "drive"

    def body(self) -> Iterator[Widget]:
        yield Static(id="title", markup=False)
        yield ArrayTable(COLUMNS, self.board.looks)

    @property
    def table(self) -> ArrayTable:
        """The table."""
        return self.query_one(ArrayTable)

    def renew(self) -> None:
        """All columns again."""
        found = self.work.actuator_columns()
        title = self.query_one("#title", Static)
        if isinstance(found, str):
            title.update(f"no drive for these settings: {found}")
            found = self.work.actuator_columns(placed=False)
            assert not isinstance(found, str)
        else:
            total = float(found[6].sum())
            title.update(f"{len(found[0])} actuators, {total:.2f} mW together")
        self.table.show(found, found[7] != "")

    def words(self) -> str:
        """The actuator under the cursor, and the filter."""
        row, table = self.table.row, self.table
        kept = f"{len(table.order)} with '{table.words}': " if table.words else ""
        if row < 0:
            return f"{kept}no actuator"
        setting = int(self.work.mesh.actuators.setting[row])
        return f"{kept}{self.work.mesh.actuator_names[row]} moves {self.work.mesh.net.setting_names[setting]}"

    def on_screen_resume(self) -> None:
        super().on_screen_resume()
        self.table.focus()

    def on_array_table_moved(self) -> None:
        """The cursor moved."""
        self.board.remark = ""
        self.tell()

    # ---- keys
    def action_sort(self) -> None:
        self.table.sort_next()

    def action_reverse(self) -> None:
        self.table.reverse()

    def action_filter(self) -> None:
        def keep(answer: str | None) -> None:
            self.table.filter(answer or "")
            self.tell()

        self.board.ask_plain("names with these letters, none for all:", keep, self.table.words)

    def action_pick(self) -> None:
        row = self.table.row
        net = self.work.mesh.net
        cell = int(net.cell_of[net.first_element[self.work.mesh.actuators.setting[row]]]) if row >= 0 else -1
        if cell < 0:
            self.board.say("this actuator is in no cell")
            return
        self.board.cell = cell
        self.board.action_go("mesh")
