"""The application: screens as modes, keys from the table of actions, long work on a thread of its own.

Public: Dashboard, run.
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterable
from functools import partial
from typing import Any, ClassVar

from textual.app import App, SystemCommand
from textual.binding import BindingType
from textual.message import Message
from textual.screen import Screen

from meshctl.errors import Finding, WrongUsage
from meshctl.plan.pipeline import Effort
from meshctl.plan.plan import Plan
from meshctl.screens import phrases
from meshctl.screens.actions import SCREENS, actions_of, bindings_of
from meshctl.screens.base import Ask, Base, Tell
from meshctl.screens.drive import DriveScreen
from meshctl.screens.matrix import MatrixScreen
from meshctl.screens.mesh import MeshScreen
from meshctl.screens.routes import RoutesScreen
from meshctl.screens.spectrum import SpectrumScreen
from meshctl.screens.states import StatesScreen
from meshctl.screens.tints import GROUND, LIGHT, TINTS, Looks
from meshctl.session import Session
from meshctl.work import Work

READING = (
    "Reading the mesh:",
    "  lines are waveguides; the heavier and brighter, the more light of the chosen input",
    "  strokes from -3, -10, -20 and -40 dB: ━ ╍ ─ ╌, below ·",
    "  ═ bar   ╳ cross   47 the percentage that crosses   ! a fault   × waveguides crossing",
)


def _hex(colour: tuple[int, int, int]) -> str:
    return "#{:02x}{:02x}{:02x}".format(*colour)


class _Job:
    """Long work that may be told to stop."""

    def __init__(self, what: str) -> None:
        self.what, self.stopped = what, threading.Event()


class Dashboard(App[None]):
    """A piece of work in a terminal.

    Parameters
    ----------
    session : Session
    coloured : False uses bold, dim and reverse alone
    """

    class Progressed(Message):
        """A solve has come further."""

        def __init__(self, job: _Job, words: str) -> None:
            self.job, self.words = job, words
            super().__init__()

    class Ended(Message):
        """A solve has ended: with a plan, or why not."""

        def __init__(self, job: _Job, outcome: Plan | Exception) -> None:
            self.job, self.outcome = job, outcome
            super().__init__()

    TITLE = "meshctl"
    MODES: ClassVar[dict[str, str | Callable[[], Screen[Any]]]] = {
        "mesh": MeshScreen,
        "matrix": MatrixScreen,
        "drive": DriveScreen,
        "states": StatesScreen,
        "spectrum": SpectrumScreen,
        "routes": RoutesScreen,
    }
    DEFAULT_MODE = "mesh"
    BINDINGS: ClassVar[list[BindingType]] = [*bindings_of("")]
    COLOURS = f"""
    Screen {{ background: {_hex(GROUND)}; color: {_hex(LIGHT[1])}; }}
    ScrollView {{ background: {_hex(GROUND)}; }}
    .header {{ color: {_hex(GROUND)}; background: {_hex(LIGHT[1])}; }}
    .words {{ color: {_hex(LIGHT[2])}; }}
    .title, #title {{ color: {_hex(TINTS["split"])}; }}
    Ask, Tell {{ background: {_hex(GROUND)} 60%; }}
    .window {{ background: {_hex(GROUND)}; border: round {_hex(TINTS["bar"])}; }}
    """
    CSS = """
    .header, .keys, #title { height: 1; width: 100%; }
    .words { height: auto; min-height: 1; max-height: 3; width: 100%; }
    #wished { height: auto; max-height: 3; }
    Curve { height: 1fr; width: 1fr; }
    .body { height: 1fr; }
    .small { display: none; }
    .tiny .small { display: block; height: 1fr; }
    .tiny .body, .tiny .words { display: none; }
    MeshCanvas, ArrayTable, MatrixView { width: 1fr; height: 1fr; scrollbar-size: 1 1; }
    #inspector { width: 34; padding: 0 1; }
    .narrow #inspector { display: none; }
    .narrow.inspected #inspector { display: block; }
    .inspected #inspector { display: none; }
    Ask, Tell { align: center middle; }
    .window { width: 90%; max-width: 100; height: auto; max-height: 90%; padding: 0 1; }
    """

    def __init__(self, session: Session, *, coloured: bool = True) -> None:
        self.looks = Looks(coloured)
        super().__init__(ansi_color=not coloured)
        self.work = Work(session)
        self.cell, self.job, self.remark = 0, "", ""
        self._job: _Job | None = None
        self.work.subscribe(self._heard)

    @property
    def coloured(self) -> bool:
        """False where no colour is to be used."""
        return self.looks.coloured

    # ---- from the work
    def _heard(self, topics: frozenset[str]) -> None:
        self.remark = ""
        for screens in self._screen_stacks.values():
            for screen in screens:
                if isinstance(screen, Base):
                    screen.fresh = False
        for screen in reversed(self.screen_stack):
            if isinstance(screen, Base):
                screen.fresh = True
                screen.changed(topics)
                return

    def _front(self) -> Base | None:
        return next((s for s in reversed(self.screen_stack) if isinstance(s, Base)), None)

    def tell(self) -> None:
        """Header and line of words of the screen in front."""
        screen = self._front()
        if screen is not None:
            screen.tell()

    def say(self, words: str) -> None:
        """A remark in the line of words, until the next key that changes something."""
        self.remark = words
        self.tell()

    def attempt(self, act: Callable[[], None]) -> bool:
        """Do it; a finding becomes a remark."""
        try:
            act()
        except Finding as finding:
            self.say(str(finding))
            return False
        return True

    # ---- asking
    def ask_plain(self, question: str, then: Callable[[str | None], None], start: str = "") -> None:
        """Ask; `then` gets the answer, or None."""
        self.push_screen(Ask(question, start), then)

    def ask(self, question: str, then: Callable[[str], None], start: str = "") -> None:
        """Ask; `then` gets an answer where there is one, its findings become remarks."""

        def answered(answer: str | None) -> None:
            if answer is not None:
                self.attempt(partial(then, answer))

        self.ask_plain(question, answered, start)

    def ask_number(self, question: str, then: Callable[[float], None]) -> None:
        """Ask for a number."""

        def number(answer: str) -> None:
            try:
                value = float(answer)
            except ValueError:
                raise WrongUsage(f"'{answer}' is no number", remedy="write one such as 0.5") from None
            then(value)

        self.ask(question, number)

    # ---- long work
    def start(self, what: str, act: Callable[[Effort], Plan]) -> None:
        """Run on a thread; one at a time."""
        if self._job is not None:
            self.say(f"{self._job.what} is still running; esc stops it")
            return
        job = self._job = _Job(what)
        self.job = f"{what} ..  (esc stops)"
        self.tell()

        def progress(now: object) -> None:
            said = f"{what}: {now.evaluations} evaluations, {now.value:.3e}, {now.seconds:.0f} s"  # type: ignore[attr-defined]
            self.post_message(self.Progressed(job, said))

        def run() -> None:
            outcome: Plan | Exception
            try:
                outcome = act(Effort(progress=progress, cancel=job.stopped.is_set))
            except Exception as problem:  # shown, and raised again on the main thread where it is a bug
                outcome = problem
            self.post_message(self.Ended(job, outcome))

        threading.Thread(target=run, daemon=True, name=what).start()

    def start_route(self, words: str) -> None:
        """Find routes on a thread; the search itself ends after its seconds."""
        self.start(f"routing {words}", lambda _: self.work.route(words))

    def on_dashboard_progressed(self, event: Progressed) -> None:
        """Show how far it is."""
        if event.job is self._job:
            self.job = f"{event.words}  (esc stops)"
            self.tell()

    def on_dashboard_ended(self, event: Ended) -> None:
        """Take the plan, or say why there is none; what was stopped is let go."""
        if event.job is not self._job:
            return
        self._job, self.job = None, ""
        outcome = event.outcome
        if isinstance(outcome, Plan):
            self.work.take(outcome)
            self.say(f"{event.job.what}: done, {outcome.reason}; e shows the account")
        elif isinstance(outcome, Finding):
            self.say(str(outcome))
        else:
            raise outcome

    # ---- keys
    def action_go(self, name: str) -> None:
        if self.current_mode != name and not isinstance(self.screen, Ask | Tell):
            self.remark = ""
            self.switch_mode(name)

    def action_help(self) -> None:
        here = self._front()
        where = here.WHERE if here is not None else ""
        lines = [f"  {a.shown:<8} {a.words}" for a in actions_of(where)]
        every = [f"  {a.shown:<8} {a.words}" for a in actions_of("")] + ["  ctrl+p   all commands by name"]
        self.push_screen(Tell(f"Keys of screen {where}:", [*lines, "On all screens:", *every, *READING]))

    def action_undo(self) -> None:
        if not self.work.undo():
            self.say("nothing to take back")

    def action_redo(self) -> None:
        if not self.work.redo():
            self.say("nothing to do again")

    def action_solve(self) -> None:
        question = "target: identity, dft, hadamard, haar:SEED, permutation:2,1,.. or a file"
        self.ask(question, lambda words: self.start(f"solving {words}", partial(self.work.solve, words)))

    def action_explain(self) -> None:
        self.start("finding what keeps it from being closer", self.work.explain)

    def action_route(self) -> None:
        net = self.work.session.mesh.net
        self.ask(f"routes IN:OUT, a space between; such as {net.inputs[0]}:{net.outputs[-1]}", self.start_route)

    def action_cancel(self) -> None:
        if self._job is None:
            self.remark = ""
            self.tell()
            return
        what = self._job.what
        self._job.stopped.set()
        self._job, self.job = None, ""
        self.say(f"{what}: stopped, settings are as they were")

    def action_open(self) -> None:
        self.ask("plan file, or a state by name:", self.work.open)

    def action_save_plan(self) -> None:
        def save(path: str) -> None:
            try:
                self.work.save_plan(path)
            except OSError as problem:
                raise WrongUsage(
                    f"'{path}' cannot be written: {problem.strerror}", remedy="name another file"
                ) from None
            self.say(f"written: {path}")

        self.ask("write the plan to this file:", save, "plan.json")

    def action_save_state(self) -> None:
        def keep(name: str) -> None:
            try:
                path = self.work.save_state(name)
            except OSError as problem:
                raise WrongUsage(f"'{name}' cannot be kept: {problem.strerror}", remedy="see the mesh folder") from None
            screen = self._front()
            if isinstance(screen, StatesScreen):
                screen.renew()
            self.say(f"kept: {path.name}")

        self.ask("keep the plan as the state:", keep)

    def action_account(self) -> None:
        self.push_screen(Tell("The plan in hand", phrases.account(self.work)))

    def action_input(self, step: int) -> None:
        self.work.choose_input(self.work.state.input_row + step)

    def action_mend(self) -> None:
        self.work.mend()

    def action_off(self) -> None:
        self.say("no bench is connected: there are no outputs to switch off")

    def action_leave(self) -> None:
        if self._job is not None:
            self._job.stopped.set()
        self.exit()

    def get_system_commands(self, screen: Screen[object]) -> Iterable[SystemCommand]:
        """The palette: the same table as the keys."""
        where = screen.WHERE if isinstance(screen, Base) else ""
        for action in (*(actions_of(where) if where else ()), *actions_of("")):
            prefix = "screen" if action.where else "app"
            name = f"{action.words[:1].upper()}{action.words[1:]}"
            yield SystemCommand(name, f"key {action.shown}", partial(self.run_action, f"{prefix}.{action.name}"))


class _Coloured(Dashboard):
    CSS = Dashboard.CSS + Dashboard.COLOURS


def dashboard(session: Session, *, coloured: bool = True) -> Dashboard:
    """The application, with colour or without."""
    return _Coloured(session) if coloured else Dashboard(session, coloured=False)


def run(session: Session) -> None:
    """Open the dashboard until it is left; NO_COLOR in the environment takes all colour away."""
    dashboard(session, coloured=not os.environ.get("NO_COLOR")).run()


__all__ = ["SCREENS", "Dashboard", "dashboard", "run"]
