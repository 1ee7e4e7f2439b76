"""What all screens share: header, body, line of words, line of keys; and the windows that ask or tell.

Public: Base, Ask, Tell.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from typing import TYPE_CHECKING, ClassVar

from rich.text import Text
from textual.app import ComposeResult
from textual.binding import Binding, BindingType
from textual.containers import Vertical, VerticalScroll
from textual.screen import ModalScreen, Screen
from textual.widget import Widget
from textual.widgets import Input, Static

from meshctl.screens import phrases
from meshctl.screens.actions import actions_of, bindings_of

if TYPE_CHECKING:  # pragma: no cover
    from meshctl.screens.app import Dashboard
    from meshctl.work import Work

LEAST = (60, 16)  # columns and rows below which nothing can be read
BESIDE = 100  # columns from which there is room beside the mesh


class Base(Screen[None]):
    """One screen of the dashboard; `WHERE` is its name in the table of actions."""

    WHERE = ""
    fresh = False  # nothing has changed since it was last drawn
    said_lines = 0  # of the line of words

    def __init_subclass__(cls) -> None:
        cls.BINDINGS = [*bindings_of(cls.WHERE)]
        super().__init_subclass__()

    @property
    def board(self) -> Dashboard:
        """The application."""
        return self.app  # type: ignore[return-value]

    @property
    def work(self) -> Work:
        """The piece of work on show."""
        return self.board.work

    def body(self) -> Iterator[Widget]:
        """The widgets between header and line of words."""
        raise NotImplementedError

    def compose(self) -> ComposeResult:
        yield Static(classes="header", markup=False)
        with Vertical(classes="body"):
            yield from self.body()
        yield Static(classes="small", markup=False)
        yield Static(classes="words", markup=False)
        yield Static(classes="keys", markup=False)

    def on_mount(self) -> None:
        """Fill in what the window shows first."""
        self.query_one(".keys", Static).update(self._keys())
        self.measure()

    def on_screen_resume(self) -> None:
        """Back from another screen: draw what changed meanwhile."""
        if not self.fresh:
            self.renew()
        self.fresh = True
        self.tell()

    def on_resize(self) -> None:
        """Another window: perhaps too small to read."""
        self.measure()

    def measure(self) -> None:
        """Say so where the window is too small."""
        wide, high = self.app.size
        small = wide < LEAST[0] or high < LEAST[1]
        self.set_class(small, "tiny")
        self.set_class(wide < BESIDE, "narrow")
        if small:
            self.query_one(".small", Static).update(
                f"This window is {wide} by {high}; the dashboard needs {LEAST[0]} by {LEAST[1]} or more. "
                "Enlarge it, or leave with q."
            )
        self.query_one(".keys", Static).update(self._keys())

    def _keys(self) -> Text:
        """As many keys as there is room for; the one for help always."""
        shown = [a for a in (*actions_of(self.WHERE), *actions_of("")) if a.brief]
        shown.sort(key=lambda action: action.name != "help")
        room, kept = self.app.size.width - 1, []
        for action in shown:
            wide = len(f" {action.shown} {action.brief} ")
            if wide <= room:
                room -= wide
                kept.append(action)
        line = Text()
        for action in (*kept[1:], *kept[:1]):
            line.append(f" {action.shown}", "bold").append(f" {action.brief} ")
        return line

    def changed(self, topics: frozenset[str]) -> None:  # noqa: ARG002
        """The work has changed in these topics."""
        self.renew()
        self.tell()

    def renew(self) -> None:
        """Draw the body again."""
        raise NotImplementedError

    def words(self) -> str:
        """The selection in one line."""
        return ""

    def tell(self) -> None:
        """Header and line of words; a solve that runs, or the last remark, stands before the selection."""
        if not self.is_mounted:
            return
        wide = self.app.size.width
        self.query_one(".header", Static).update(phrases.header(self.work, wide), layout=False)
        said = self.board.job or self.board.remark or self.words()
        lines = len(textwrap.wrap(said, max(wide, 1)))
        # another layout paints the whole window again: only where the number of lines asks for it
        self.query_one(".words", Static).update(said, layout=lines != self.said_lines)
        self.said_lines = lines


class Ask(ModalScreen[str | None]):
    """A question with one line of answer; escape answers nothing."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape", "dismiss(None)", "no answer", show=False)]

    def __init__(self, question: str, start: str = "") -> None:
        super().__init__()
        self.question, self.start = question, start

    def compose(self) -> ComposeResult:
        with Vertical(classes="window"):
            yield Static(self.question, markup=False)
            yield Input(self.start)

    def on_input_submitted(self, event: Input.Submitted) -> None:
        """The answer, or nothing where none was given."""
        self.dismiss(event.value.strip() or None)


class Tell(ModalScreen[None]):
    """Some lines to read."""

    BINDINGS: ClassVar[list[BindingType]] = [Binding("escape,q,enter,question_mark,e", "dismiss", "close", show=False)]

    def __init__(self, title: str, lines: list[str]) -> None:
        super().__init__()
        self.heading, self.lines = title, lines

    def compose(self) -> ComposeResult:
        with VerticalScroll(classes="window"):
            yield Static(self.heading, classes="title", markup=False)
            yield Static("\n".join(self.lines), markup=False)
            yield Static("esc closes", markup=False)
