"""The matrix as numbers or shades: predicted, wished, and the difference of their powers.

Public: MatrixScreen, MatrixView.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from rich.segment import Segment
from textual.containers import Horizontal
from textual.geometry import Size
from textual.scroll_view import ScrollView
from textual.strip import Strip
from textual.widget import Widget
from textual.widgets import Static

from meshctl.screens.base import Base
from meshctl.screens.phrases import figure
from meshctl.screens.tints import LABEL, STEPS, Looks

PANELS = ("predicted", "target", "difference")
WIDE, NARROW, NAME = 6, 2, 8  # characters of an entry as number and as shade, and of a port's name
SHADES = "·░▒▓█"
LEAST_DB = (-40.0, -20.0, -10.0, -3.0)  # from which the next denser shade stands


class MatrixView(ScrollView, can_focus=True):
    """Rows are outputs, columns are inputs; values in dB, or in hundredths for the difference."""

    def __init__(self, looks: Looks, inputs: tuple[str, ...], outputs: tuple[str, ...]) -> None:
        super().__init__()
        self.looks, self.inputs, self.outputs = looks, inputs, outputs
        self.values: np.ndarray | None = None
        self.level_db = np.empty((0, 0))
        self.compact = len(inputs) > 16

    def show(self, values: np.ndarray | None, level_db: np.ndarray) -> None:
        """Numbers, and the levels that give their tint; None: there is nothing to show."""
        self.values, self.level_db = values, level_db
        self.set_out()

    def set_out(self) -> None:
        """After other numbers, or another form of them."""
        wide = NARROW if self.compact else WIDE
        self.virtual_size = Size(NAME + wide * len(self.inputs), len(self.outputs) + 1)
        self.refresh()

    def render_line(self, y: int) -> Strip:
        """Names of inputs, or one output."""
        wide, (left, top) = self.size.width, self.scroll_offset
        plain = self.looks.list[LABEL]
        row = y - 1 + top
        if self.values is None or row >= len(self.outputs):
            text = "nothing to show: no matrix is asked for" if y == 0 and self.values is None else ""
            return Strip([Segment(text[:wide].ljust(wide), plain)], wide)
        room = NARROW if self.compact else WIDE
        if y == 0:
            names = [(n if not self.compact else _short(n)).rjust(room)[-room:] for n in self.inputs]
            line = Strip([Segment(" " * NAME + "".join(names), plain)])
        else:
            segments = [Segment(self.outputs[row][:NAME].ljust(NAME), plain)]
            for value, level in zip(self.values[row].tolist(), self.level_db[row].tolist(), strict=True):
                step = round((STEPS - 1) * min(max(1.0 + level / 40.0, 0.0), 1.0))
                segments.append(Segment(self._entry(value, level), self.looks.list[step]))
            line = Strip(segments)
        return line.crop(left, left + wide).adjust_cell_length(wide, plain)

    def _entry(self, value: float, level: float) -> str:
        if self.compact:
            return 2 * SHADES[sum(level >= least for least in LEAST_DB)]
        return (f"{value:.1f}" if abs(value) < 999.0 else "dark").rjust(WIDE)


def _short(name: str) -> str:
    return name[-2:] if name[-2:].isdigit() else name[-1:]


class MatrixScreen(Base):
    """Screen 2."""

    WHERE = "matrix"

    def body(self) -> Iterator[Widget]:
        net = self.work.session.mesh.net
        self.panel = 0
        yield Static(id="title", markup=False)
        with Horizontal():
            for _ in range(2):
                yield MatrixView(self.board.looks, net.inputs, net.outputs)

    def renew(self) -> None:
        """The panel chosen, and where there is room the target beside it."""
        first, second = self.query(MatrixView)
        net = self.work.session.mesh.net
        wide = NAME + (NARROW if first.compact else WIDE) * len(net.inputs)
        second.display = 2 * wide + 2 <= self.app.size.width
        shown = [PANELS[self.panel]]
        first.show(*self.work.table(PANELS[self.panel]))
        if second.display:
            other = PANELS[(self.panel + 1) % len(PANELS)]
            second.show(*self.work.table(other))
            shown.append(other)
        units = {"predicted": "predicted, dB", "target": "target, dB", "difference": "predicted - target, % of power"}
        self.query_one("#title", Static).update(" | ".join(units[name] for name in shown))

    def words(self) -> str:
        """How near it is."""
        said = [f"{name.replace('_', ' ')} {figure(value, '.6g')}" for name, value in self.work.measures.items()]
        return "; ".join(said) or "no wish to compare with: s solves for a target"

    def on_resize(self) -> None:
        super().on_resize()
        if self.fresh:
            self.renew()

    # ---- keys
    def action_panel(self) -> None:
        self.panel = (self.panel + 1) % len(PANELS)
        self.renew()

    def action_compact(self) -> None:
        for view in self.query(MatrixView):
            view.compact = not view.compact
            view.set_out()
        self.renew()
