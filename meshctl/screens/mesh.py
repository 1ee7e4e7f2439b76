"""The mesh with its states and its light, and the selected cell in words.

Public: MeshScreen.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

from textual.containers import Horizontal, VerticalScroll
from textual.widget import Widget
from textual.widgets import Static

from meshctl.errors import WrongUsage
from meshctl.screens import phrases
from meshctl.screens.base import Base
from meshctl.screens.canvas import MeshCanvas

MANY = 600  # cells from which the smallest zoom is shown first


class MeshScreen(Base):
    """Screen 1."""

    WHERE = "mesh"
    inspected_lines = -1  # of the words beside the mesh; another number asks for another layout

    def body(self) -> Iterator[Widget]:
        zoom = 0 if self.work.mesh.net.n_cells > MANY else 1
        with Horizontal():
            yield MeshCanvas(self.work, self.board.looks, zoom)
            with VerticalScroll(id="inspector", can_focus=False):
                yield Static(markup=False)

    @property
    def canvas(self) -> MeshCanvas:
        """The picture."""
        return self.query_one(MeshCanvas)

    def renew(self) -> None:
        """Light, states and words again."""
        self.canvas.renew()
        self._inspect()

    def _inspect(self) -> None:
        panel = self.query_one("#inspector")
        if panel.display:
            lines = phrases.inspector(self.work, self.board.cell)
            panel.query_one(Static).update("\n".join(lines), layout=len(lines) != self.inspected_lines)
            self.inspected_lines = len(lines)

    def on_screen_resume(self) -> None:
        """Perhaps another cell was chosen elsewhere."""
        super().on_screen_resume()
        if self.canvas.cell != self.board.cell:
            self._select(self.board.cell)
        self.canvas.focus()

    def words(self) -> str:
        """The selected cell."""
        return phrases.selection(self.work, self.board.cell)

    def _select(self, cell: int) -> None:
        self.board.cell, self.board.remark = cell, ""
        self.canvas.select(cell)
        self._inspect()
        self.tell()

    def on_mesh_canvas_picked(self, event: MeshCanvas.Picked) -> None:
        """A click on a cell."""
        self._select(event.cell)

    # ---- keys
    def action_move(self, dx: int, dy: int) -> None:
        self._select(self.canvas.neighbour(dx, dy))

    def action_zoom(self, step: int) -> None:
        self.canvas.set_zoom(self.canvas.zoom + step)

    def action_inspect(self) -> None:
        self.set_class(not self.has_class("inspected"), "inspected")
        self.call_after_refresh(self._inspect)

    def action_switch(self) -> None:
        self.board.attempt(lambda: self.work.toggle_cell(self.board.cell))

    def action_nudge(self, step: float) -> None:
        power = self.work.cross_power(self.board.cell)
        if math.isnan(power):
            self.board.say("this cell has no cross power to change")
            return
        self.board.attempt(lambda: self.work.set_cell(self.board.cell, min(max(power + step, 0.0), 1.0)))

    def action_value(self) -> None:
        def set_to(answer: float) -> None:
            self.work.set_cell(self.board.cell, answer)

        self.board.ask_number("cross power of the cell, 0 is bar and 1 is cross:", set_to)

    def action_fault(self) -> None:
        def flip() -> None:
            broken = self.work.break_cell(self.board.cell)
            self.board.say("assumed: its actuators are dead" if broken else "no longer assumed: it works again")

        self.board.attempt(flip)

    def action_stuck(self) -> None:
        rows = self.work.settings_of_cell(self.board.cell)
        names = self.work.mesh.net.setting_names

        def stick(answer: str) -> None:
            name, _, value = answer.partition("=")
            known = [s for s in rows if names[s] == name.strip()]
            try:
                angle = float(value)
            except ValueError:
                angle = math.nan
            if not known or math.isnan(angle):
                listed = ", ".join(names[s] for s in rows)
                raise WrongUsage(f"'{answer}' is no setting and value", remedy=f"write NAME=RAD, names: {listed}")
            self.work.assume(known[0], angle)

        self.board.ask("what if it were stuck, NAME=RAD:", stick, f"{names[rows[-1]]}=" if rows else "")
