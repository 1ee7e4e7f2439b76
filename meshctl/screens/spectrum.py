"""Power over wavelength from the chosen input to one output, found on a thread of its own.

Public: SpectrumScreen.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator

import numpy as np
from textual.message import Message
from textual.widget import Widget
from textual.widgets import Static

from meshctl.errors import Finding
from meshctl.plan.spectrum import Spectrum
from meshctl.screens.base import Base
from meshctl.screens.curve import Curve
from meshctl.units import db_array

HALVES_NM = (0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 10.0, 20.0, 40.0)  # to either side of the centre
POINTS = 301


class SpectrumScreen(Base):
    """Screen 5."""

    WHERE = "spectrum"

    class Found(Message):
        """A spectrum, or why there is none."""

        def __init__(self, turn: int, outcome: Spectrum | Exception) -> None:
            self.turn, self.outcome = turn, outcome
            super().__init__()

    def body(self) -> Iterator[Widget]:
        self.output, self.half, self.turn = self.work.strongest_output(), HALVES_NM.index(5.0), 0
        self.found: Spectrum | None = None
        yield Static(id="title", markup=False)
        yield Curve()

    @property
    def pair(self) -> tuple[str, str]:
        """Input and output on show."""
        return self.work.input_name, self.work.session.mesh.net.outputs[self.output]

    def renew(self) -> None:
        """Begin to find it again; what was begun before is let go when it ends."""
        self.turn += 1
        turn, self.found = self.turn, None
        centre, half = self.work.session.mesh.net.wavelength_nm, HALVES_NM[self.half]
        entry, leaving = self.pair
        self.query_one("#title", Static).update(
            f"{entry} to {leaving}, {2 * half:g} nm wide, {POINTS} points: narrower notches may be missed"
        )
        try:
            task = self.work.spectrum_task(np.linspace(centre - half, centre + half, POINTS), self.pair)
        except Finding as finding:
            self.query_one(Curve).show(np.empty(0), np.empty(0), str(finding))
            return
        self.query_one(Curve).show(np.empty(0), np.empty(0), "being found ..")

        def run() -> None:
            outcome: Spectrum | Exception
            try:
                outcome = task()
            except Exception as problem:  # raised again on the main thread
                outcome = problem
            self.post_message(self.Found(turn, outcome))

        threading.Thread(target=run, daemon=True, name="spectrum").start()

    def on_spectrum_screen_found(self, event: Found) -> None:
        """Draw it, if it is still asked for."""
        if event.turn != self.turn:
            return
        outcome = event.outcome
        if isinstance(outcome, Finding):
            self.query_one(Curve).show(np.empty(0), np.empty(0), str(outcome))
        elif isinstance(outcome, Exception):
            raise outcome
        else:
            self.found = outcome
            self.query_one(Curve).show(outcome.wavelengths_nm, db_array(outcome.power[:, 0]))
        self.tell()

    def words(self) -> str:
        """Highest and lowest level."""
        if self.found is None:
            return ""
        level, waves = db_array(self.found.power[:, 0]), self.found.wavelengths_nm
        high, low = int(np.argmax(level)), int(np.argmin(level))
        return (
            f"highest {level[high]:.2f} dB at {waves[high]:.3f} nm; lowest {level[low]:.2f} dB at {waves[low]:.3f} nm"
        )

    # ---- keys
    def action_output(self, step: int) -> None:
        self.board.remark = ""
        self.output = (self.output + step) % len(self.work.session.mesh.net.outputs)
        self.renew()

    def action_wider(self, step: int) -> None:
        self.board.remark = ""
        self.half = min(max(self.half + step, 0), len(HALVES_NM) - 1)
        self.renew()
