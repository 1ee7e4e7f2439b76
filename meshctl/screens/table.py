"""A long table over columns of numbers and words: only the lines in view are ever made into text.

Public: ArrayTable, Column.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
from rich.segment import Segment
from textual import events
from textual.binding import Binding, BindingType
from textual.geometry import Size
from textual.message import Message
from textual.scroll_view import ScrollView
from textual.strip import Strip

from meshctl.screens.tints import FAULT, LABEL, N_STYLES, STEPS, Looks


@dataclass(frozen=True)
class Column:
    """One column: its head, its width, how a value is shown, and whether to the right."""

    head: str
    width: int
    show: Callable[[Any], str] = str
    right: bool = True


class ArrayTable(ScrollView, can_focus=True):
    """Rows in an order that sorting and filtering change; a cursor; a head that stays."""

    BINDINGS: ClassVar[list[BindingType]] = [
        Binding("up", "cursor(-1)", "row above", show=False),
        Binding("down", "cursor(1)", "row below", show=False),
        Binding("pageup", "cursor(-10)", "rows up", show=False),
        Binding("pagedown", "cursor(10)", "rows down", show=False),
        Binding("home", "cursor(-1000000)", "first row", show=False),
        Binding("end", "cursor(1000000)", "last row", show=False),
    ]

    class Moved(Message):
        """The cursor is on another row."""

    def __init__(self, columns: Sequence[Column], looks: Looks) -> None:
        super().__init__()
        self.columns, self.looks = tuple(columns), looks
        self.data: list[np.ndarray] = [np.empty(0) for _ in columns]
        self.marked = np.empty(0, bool)
        self.order = np.empty(0, np.int64)
        self.by, self.down, self.words, self.cursor = -1, False, "", 0

    @property
    def row(self) -> int:
        """The row of the data under the cursor, -1: none."""
        return int(self.order[self.cursor]) if self.cursor < len(self.order) else -1

    def show(self, data: Sequence[np.ndarray], marked: np.ndarray | None = None) -> None:
        """Other numbers in the same columns; `marked` rows are tinted as faults."""
        self.data = list(data)
        self.marked = np.zeros(len(data[0]), bool) if marked is None else marked
        self.set_out()

    def set_out(self) -> None:
        """Filter and sort again."""
        kept = np.arange(len(self.data[0]))
        if self.words:
            names = np.char.lower(self.data[0].astype(str))
            kept = kept[np.char.find(names, self.words.lower()) >= 0]
        if self.by >= 0:
            kept = kept[np.argsort(self.data[self.by][kept], kind="stable")]
        self.order = kept[::-1] if self.down else kept
        self.cursor = min(self.cursor, max(len(kept) - 1, 0))
        self.virtual_size = Size(sum(c.width + 1 for c in self.columns), len(kept) + 1)
        self.refresh()

    def sort_next(self) -> None:
        """Sort by the column after the one sorted by; behind the last, as the chip has them."""
        self.by = self.by + 1 if self.by + 1 < len(self.columns) else -1
        self.set_out()

    def reverse(self) -> None:
        """Sort the other way."""
        self.down = not self.down
        self.set_out()

    def filter(self, words: str) -> None:
        """Keep rows whose first column has these letters."""
        self.words, self.cursor = words, 0
        self.set_out()

    def action_cursor(self, step: int) -> None:
        """Move the cursor, and say so."""
        self.step(step)
        self.post_message(self.Moved())

    def step(self, step: int) -> None:
        """Move the cursor and keep it in view."""
        self.cursor = min(max(self.cursor + step, 0), max(len(self.order) - 1, 0))
        room = max(self.size.height - 1, 1)
        top = self.scroll_offset.y
        wanted = min(max(top, self.cursor - room + 1), self.cursor)
        if wanted != top:
            self.scroll_to(y=wanted, animate=False, force=True)
        self.refresh()

    def render_line(self, y: int) -> Strip:
        """The head, or one row."""
        wide, (left, top) = self.size.width, self.scroll_offset
        if y == 0:
            arrow = "v" if self.down else "^"
            cells = [
                self._cell(column, column.head + (f" {arrow}" if k == self.by else ""))
                for k, column in enumerate(self.columns)
            ]
            style = self.looks.list[STEPS - 1]
        else:
            at = y - 1 + top
            if at >= len(self.order):
                return Strip.blank(wide, self.looks.list[LABEL])
            row = int(self.order[at])
            values = (column[row] for column in self.data)
            cells = [self._cell(c, c.show(value)) for c, value in zip(self.columns, values, strict=True)]
            kind = FAULT if self.marked[row] else LABEL
            style = self.looks.list[kind + N_STYLES * (at == self.cursor)]
        text = " ".join(cells)[left : left + wide].ljust(wide)
        return Strip([Segment(text, style)], wide)

    @staticmethod
    def _cell(column: Column, text: str) -> str:
        short = text if len(text) <= column.width else text[: column.width - 1] + "~"
        return short.rjust(column.width) if column.right else short.ljust(column.width)

    def on_click(self, event: events.Click) -> None:
        """Put the cursor on a row."""
        if event.y > 0:
            self.action_cursor(event.y - 1 + self.scroll_offset.y - self.cursor)
