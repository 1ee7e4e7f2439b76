"""A curve in dots of two by four for each character, with its axes in words.

Public: Curve.
"""

from __future__ import annotations

import numpy as np
from rich.text import Text
from textual.widget import Widget

MARGIN = 8  # characters left of the curve
STEP_DB, DEEPEST_DB = 5.0, 60.0
DOTS = np.array([[0x01, 0x08], [0x02, 0x10], [0x04, 0x20], [0x40, 0x80]])


class Curve(Widget):
    """Levels in dB over wavelength."""

    def __init__(self) -> None:
        super().__init__()
        self.x = self.y = np.empty(0)
        self.note = ""

    def show(self, x: np.ndarray, y: np.ndarray, note: str = "") -> None:
        """Another curve, or with no points a note in its place."""
        self.x, self.y, self.note = x, y, note
        self.refresh()

    def render(self) -> Text:
        """The curve with its axes."""
        wide, high = self.size.width - MARGIN - 1, self.size.height - 2
        if len(self.x) < 2 or wide < 10 or high < 3:
            return Text(self.note)
        finite = self.y[np.isfinite(self.y)]
        if not len(finite):
            return Text("no light at all")
        top = float(np.ceil(finite.max() / STEP_DB) * STEP_DB)
        bottom = max(float(np.floor(finite.min() / STEP_DB) * STEP_DB), top - DEEPEST_DB)
        bottom = min(bottom, top - STEP_DB)
        lines = [row.rjust(MARGIN) for row in self._scale(top, bottom, high)]
        drawn = self._dots(wide, high, top, bottom)
        body = [label + "".join(chr(0x2800 + d) for d in row) for label, row in zip(lines, drawn.tolist(), strict=True)]
        left, right = f"{self.x[0]:.3f} nm", f"{self.x[-1]:.3f} nm"
        foot = " " * MARGIN + left + right.rjust(max(wide - len(left), len(right) + 1))
        return Text("\n".join([*body, foot, self.note]), no_wrap=True)

    @staticmethod
    def _scale(top: float, bottom: float, high: int) -> list[str]:
        labels = [""] * high
        for row in (0, high // 2, high - 1):
            labels[row] = f"{top + (bottom - top) * (row + 0.5) / high:.1f} "
        labels[0] = f"{top:.0f} dB "
        return labels

    def _dots(self, wide: int, high: int, top: float, bottom: float) -> np.ndarray:
        """Bits of the characters, i64[high, wide]; points that follow one another are joined upright."""
        level = np.clip(np.nan_to_num(self.y, neginf=bottom, nan=bottom), bottom, top)
        rows = np.round((top - level) / (top - bottom) * (4 * high - 1)).astype(int)
        columns = np.round(np.linspace(0, 2 * wide - 1, len(rows))).astype(int)
        page = np.zeros((high, wide), np.int64)
        before = rows[0]
        for column, row in zip(columns.tolist(), rows.tolist(), strict=True):
            low, most = sorted((before, row))
            for y in range(low, most + 1):
                page[y // 4, column // 2] |= DOTS[y % 4, column % 2]
            before = row
        return page
