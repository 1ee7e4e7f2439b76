"""What can be done to a piece of work and taken back: frozen records.

`do` of a command gives the state after it, its inverse, and the topics that it touches.
Public: State, Command, Turn, Assume, Enter, Take, TOPICS.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from meshctl.mesh.graph import frozen
from meshctl.plan.plan import Plan

TOPICS = frozenset({"settings", "faults", "input", "plan"})


@dataclass(frozen=True, eq=False)
class State:
    """All that commands change."""

    wanted: np.ndarray  # f64[S], rad
    codes: np.ndarray | None  # i64[K] of the plan; None: cells were set by hand, the codes follow from `wanted`
    plan: Plan | None  # the last plan taken
    faults: tuple[tuple[int, float], ...] = ()  # setting, and where it is stuck in rad; NaN: its actuators are dead
    input_row: int = 0

    def same(self, other: State) -> bool:
        """True where nothing tells the two apart."""
        codes = (self.codes is None) == (other.codes is None) and (
            self.codes is None or other.codes is None or np.array_equal(self.codes, other.codes)
        )
        faults = repr(self.faults) == repr(other.faults)  # NaN is not equal to itself
        plain = self.plan is other.plan and faults and self.input_row == other.input_row
        return codes and plain and np.array_equal(self.wanted, other.wanted)


class Command(Protocol):
    """What can be done and taken back."""

    def do(self, state: State) -> tuple[State, Command, frozenset[str]]:
        """The state after it, the command that takes it back, and the topics touched."""
        ...


@dataclass(frozen=True, eq=False)
class Turn:
    """Put some settings to some values; codes None lets them follow from the settings."""

    rows: tuple[int, ...]
    values: tuple[float, ...]
    codes: np.ndarray | None = None

    def do(self, state: State) -> tuple[State, Command, frozenset[str]]:
        wanted = state.wanted.copy()
        wanted[list(self.rows)] = self.values
        back = Turn(self.rows, tuple(state.wanted[list(self.rows)].tolist()), state.codes)
        return replace(state, wanted=frozen(wanted), codes=self.codes), back, frozenset({"settings"})


@dataclass(frozen=True)
class Assume:
    """What would be if these settings were stuck or dead."""

    faults: tuple[tuple[int, float], ...]

    def do(self, state: State) -> tuple[State, Command, frozenset[str]]:
        return replace(state, faults=self.faults), Assume(state.faults), frozenset({"faults"})


@dataclass(frozen=True)
class Enter:
    """Show the light of another input."""

    input_row: int

    def do(self, state: State) -> tuple[State, Command, frozenset[str]]:
        return replace(state, input_row=self.input_row), Enter(state.input_row), frozenset({"input"})


@dataclass(frozen=True, eq=False)
class Take:
    """Take a plan, or what was in hand before one."""

    plan: Plan | None
    wanted: np.ndarray
    codes: np.ndarray | None

    def do(self, state: State) -> tuple[State, Command, frozenset[str]]:
        back = Take(state.plan, state.wanted, state.codes)
        after = replace(state, plan=self.plan, wanted=self.wanted, codes=self.codes)
        return after, back, frozenset({"settings", "plan"})
