"""Colours: the tints of states, the ramp of light, and the styles made of them, with and without colour.

The tints lie far apart for three kinds of colour vision; tests/test_tints.py measures that.
Public: TINTS, GROUND, LIGHT, STEPS, Looks, STATE_TINTS.
"""

from __future__ import annotations

from rich.color import Color
from rich.style import Style

Rgb = tuple[int, int, int]

GROUND: Rgb = (16, 18, 24)
TINTS: dict[str, Rgb] = {
    "bar": (60, 140, 204),
    "cross": (244, 80, 110),
    "split": (230, 230, 255),
    "fault": (255, 190, 0),
}
LIGHT: tuple[Rgb, Rgb, Rgb] = ((122, 126, 134), (190, 186, 160), (255, 250, 225))  # dark, middle, full
STEPS = 16  # of light, over 40 dB
BRIGHT, FAINT = 13, 3  # steps from which strokes are bold, and up to which dim
STATE_TINTS = ("bar", "cross", "split", "split")  # by meshctl.picture_states: BAR, CROSS, SPLIT, UNKNOWN
LABEL, STATE_FIRST, FAULT, N_STYLES = STEPS, STEPS + 1, STEPS + 5, STEPS + 6


def light_colour(step: int) -> Rgb:
    """The ramp at a step from 0 to STEPS - 1."""
    at = step / (STEPS - 1) * 2
    low, high = (LIGHT[0], LIGHT[1]) if at < 1 else (LIGHT[1], LIGHT[2])
    part = at if at < 1 else at - 1
    red, green, blue = (round(a + (b - a) * part) for a, b in zip(low, high, strict=True))
    return red, green, blue


class Looks:
    """Looks by number: light 0 to 15, label, four states, fault; then the same for what is selected."""

    def __init__(self, coloured: bool) -> None:
        self.coloured = coloured
        self.list = [self._style(kind, selected) for selected in (False, True) for kind in range(N_STYLES)]

    def _style(self, kind: int, selected: bool) -> Style:
        if kind < STEPS:
            bold, dim, colour = kind >= BRIGHT, kind <= FAINT, light_colour(kind)
        elif kind == LABEL:
            bold, dim, colour = False, False, LIGHT[1]
        else:
            name = "fault" if kind == FAULT else STATE_TINTS[kind - STATE_FIRST]
            bold, dim, colour = name != "bar", False, TINTS[name]
        if not self.coloured:
            return Style(bold=bold or selected, dim=dim and not selected, reverse=selected)
        front, back = Color.from_rgb(*colour), Color.from_rgb(*GROUND)
        if selected:
            return Style(color=back, bgcolor=front, bold=True)
        return Style(color=front, bgcolor=back, bold=bold)
