"""Routes: choose where from and where to, add them up, find them, and see what arrives or why not.

Public: RoutesScreen.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from textual.widget import Widget
from textual.widgets import Static

from meshctl.screens.base import Base
from meshctl.screens.phrases import figure
from meshctl.screens.table import ArrayTable, Column


def _level(value: float) -> str:
    return figure(float(value), ".2f")


COLUMNS = (
    Column("route", 20, str, right=False),
    Column("cells", 6),
    Column("loss dB", 8, _level),
    Column("crosstalk dB", 13, _level),
    Column("way", 60, str, right=False),
)


class RoutesScreen(Base):
    """Screen 6."""

    WHERE = "routes"

    def body(self) -> Iterator[Widget]:
        self.entry, self.leaving = 0, 0
        self.wished: list[str] = []
        yield Static(id="title", markup=False)
        yield Static(id="wished", markup=False)
        table = ArrayTable(COLUMNS, self.board.looks)
        table.can_focus = False  # arrows choose ports here
        yield table

    def renew(self) -> None:
        """Wishes, and the routes of the plan in hand."""
        self._choice()
        plan = self.work.state.plan
        routes = plan.routes if plan is not None else []

        def levels(key: str) -> np.ndarray:
            return np.array([np.nan if r[key] is None else r[key] for r in routes], float)

        self.query_one(ArrayTable).show(
            [
                np.array([f"{r['input']}:{r['output']}" for r in routes], str),
                np.array([len(r["cells"]) for r in routes], np.int64),
                levels("insertion_loss_db"),
                levels("worst_crosstalk_db"),
                np.array([" ".join(r["cells"]) for r in routes], str),
            ]
        )

    def _choice(self) -> None:
        net = self.work.session.mesh.net
        chosen = f"{net.inputs[self.entry]}:{net.outputs[self.leaving]}"
        self.query_one("#title", Static).update(f"next {chosen}   (arrows choose, enter adds it)")
        said = f"wished: {' '.join(self.wished)}   (g finds them)" if self.wished else "nothing wished yet"
        self.query_one("#wished", Static).update(said)

    def words(self) -> str:
        """What the table shows."""
        plan = self.work.state.plan
        count = len(plan.routes) if plan is not None else 0
        return f"{count} route{'s' * (count != 1)} in the plan in hand"

    # ---- keys
    def action_choose(self, entry: int, leaving: int) -> None:
        net = self.work.session.mesh.net
        self.entry = (self.entry + entry) % len(net.inputs)
        self.leaving = (self.leaving + leaving) % len(net.outputs)
        self.board.remark = ""
        self._choice()
        self.tell()

    def action_add(self) -> None:
        net = self.work.session.mesh.net
        self.wished.append(f"{net.inputs[self.entry]}:{net.outputs[self.leaving]}")
        self._choice()

    def action_drop(self) -> None:
        if self.wished:
            self.wished.pop()
        self._choice()

    def action_find(self) -> None:
        if not self.wished:
            self.board.say("nothing is wished: choose with the arrows, add with enter")
            return
        self.board.start_route(" ".join(self.wished))
