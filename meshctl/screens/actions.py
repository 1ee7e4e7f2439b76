"""All keys in one table: it fills the bindings, the line of keys, the help and the palette.

Public: Action, ACTIONS, SCREENS, actions_of, bindings_of.
"""

from __future__ import annotations

from dataclasses import dataclass

from textual.binding import Binding

SCREENS = ("mesh", "matrix", "drive", "states", "spectrum", "routes")


@dataclass(frozen=True)
class Action:
    """What one key does, on one screen or (where "") on all."""

    keys: str  # as textual names them, comma between
    shown: str  # as people name them
    name: str  # of the method, with its arguments
    words: str
    where: str = ""
    brief: str = ""  # in the line of keys; "": only in the help
    priority: bool = False


ACTIONS = (
    *(
        Action(str(k + 1), str(k + 1), f"go('{name}')", f"screen {k + 1}: {name}", "", name)
        for k, name in enumerate(SCREENS)
    ),
    Action("question_mark", "?", "help", "this help", "", "help"),
    Action("u", "u", "undo", "take back the last change", "", "undo"),
    Action("U", "U", "redo", "do again what was taken back"),
    Action("s", "s", "solve", "solve for a target matrix", "", "solve"),
    Action("r", "r", "route", "routes from ports to ports", "", "route"),
    Action("escape", "esc", "cancel", "stop the solve that is running"),
    Action("o", "o", "open", "open a plan file, or a state by name"),
    Action("w", "w", "save_plan", "write the plan to a file"),
    Action("k", "k", "save_state", "keep the plan as a state of the mesh"),
    Action("e", "e", "account", "the plan in words: measures, warnings, routes"),
    Action("a", "a", "explain", "account: what keeps the plan from being closer"),
    Action("left_square_bracket", "[", "input(-1)", "the input before"),
    Action("right_square_bracket", "]", "input(1)", "the next input"),
    Action("F", "F", "mend", "assume no faults any more"),
    Action("ctrl+o", "ctrl+o", "off", "outputs off (once a bench is connected)", priority=True),
    Action("q", "q", "leave", "leave the dashboard"),
    Action("left", "left", "move(-1, 0)", "cell to the left", "mesh"),
    Action("right", "right", "move(1, 0)", "cell to the right", "mesh"),
    Action("up", "up", "move(0, -1)", "cell above", "mesh"),
    Action("down", "down", "move(0, 1)", "cell below", "mesh"),
    Action("space", "space", "switch", "bar to cross and back", "mesh", "bar/cross"),
    Action("v", "v", "value", "cross power of the cell, typed", "mesh", "value"),
    Action("comma", ",", "nudge(-0.05)", "5 % less cross power", "mesh"),
    Action("full_stop", ".", "nudge(0.05)", "5 % more cross power", "mesh"),
    Action("f", "f", "fault", "what if the cell's actuators were dead", "mesh", "break"),
    Action("x", "x", "stuck", "what if a setting were stuck, typed", "mesh"),
    Action("plus,equals_sign", "+", "zoom(1)", "larger", "mesh", "zoom"),
    Action("minus", "-", "zoom(-1)", "smaller", "mesh"),
    Action("i", "i", "inspect", "the cell in words, beside the mesh", "mesh", "inspect"),
    Action("t", "t", "panel", "predicted, target, difference", "matrix", "panel"),
    Action("minus,plus,equals_sign", "-", "compact", "numbers or shades", "matrix", "shades"),
    Action("greater_than_sign", ">", "sort", "sort by the next column", "drive", "sort"),
    Action("less_than_sign", "<", "reverse", "sort the other way", "drive", "reverse"),
    Action("slash", "/", "filter", "show only names with these letters", "drive", "filter"),
    Action("enter", "enter", "pick", "the actuator's cell on the mesh", "drive", "to mesh"),
    Action("enter", "enter", "pick", "take the state in hand", "states", "take"),
    Action("d", "d", "difference", "what changes from the plan in hand to it", "states", "difference"),
    Action("n", "n", "step(1)", "take the next state", "states", "next"),
    Action("p", "p", "step(-1)", "take the state before", "states"),
    Action("down", "down", "output(1)", "the next output", "spectrum", "output"),
    Action("up", "up", "output(-1)", "the output before", "spectrum"),
    Action("minus", "-", "wider(1)", "wider", "spectrum", "wider"),
    Action("plus,equals_sign", "+", "wider(-1)", "narrower", "spectrum", "narrower"),
    Action("left", "left", "choose(-1, 0)", "the input before", "routes"),
    Action("right", "right", "choose(1, 0)", "the next input", "routes", "input"),
    Action("up", "up", "choose(0, -1)", "the output before", "routes"),
    Action("down", "down", "choose(0, 1)", "the next output", "routes", "output"),
    Action("enter", "enter", "add", "add this route to the wishes", "routes", "add"),
    Action("backspace", "backspace", "drop", "take the last wish away", "routes"),
    Action("g", "g", "find", "find the wished routes", "routes", "find"),
)


def actions_of(where: str) -> list[Action]:
    """The actions of one screen, or those of all where it is ""."""
    return [action for action in ACTIONS if action.where == where]


def bindings_of(where: str) -> list[Binding]:
    """The same as key bindings."""
    return [
        Binding(action.keys, action.name, action.words, show=False, priority=action.priority)
        for action in actions_of(where)
    ]
