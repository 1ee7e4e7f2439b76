"""What can go wrong, one exception per finding, each with the exit code it ends a command with.

A message says what was found, the value with its unit, what is allowed, and what to do. Modules that
know no names (laws, drive) raise a `DriveFinding` with row numbers; whoever knows the mesh calls
`named` to put the actuators' names in.
"""

from __future__ import annotations

from collections.abc import Sequence

DONE, BUG, USAGE, UNSOUND, OUT_OF_REACH, BENCH, INTERRUPTED = 0, 1, 2, 3, 4, 5, 130


class Finding(Exception):
    """A finding that the user has to know of; `str()` of it is the whole message."""

    exit_code = BUG

    def __init__(self, what: str, *, where: str = "", remedy: str = "") -> None:
        self.what, self.where, self.remedy = what, where, remedy
        super().__init__(what)

    def __str__(self) -> str:
        place = f"{self.where}: " if self.where else ""
        todo = f"; {self.remedy}" if self.remedy else ""
        return f"{place}{self.what}{todo}"


# ---- wrong words: exit 2
class WrongUsage(Finding):
    """The command line or a call asks for something that does not exist."""

    exit_code = USAGE


class MissingExtra(WrongUsage):
    """A part of the package is needed that was not installed."""


# ---- a file's content: exit 3
class UnsoundFile(Finding):
    """A file's content cannot be used as it stands."""

    exit_code = UNSOUND


class MissingFile(UnsoundFile):
    """A file that is needed is not there."""


class UnknownKey(UnsoundFile):
    """A key, column or name that nothing knows."""


class DuplicateName(UnsoundFile):
    """Two things carry one name."""


class MissingRow(UnsoundFile):
    """A table lacks a row that another table or the mesh asks for."""


class NotFinite(UnsoundFile):
    """NaN or infinity where a number must stand."""


class OutOfRange(UnsoundFile):
    """A number outside what its quantity allows."""


class WrongSize(UnsoundFile):
    """An array whose shape does not fit the mesh."""


class NotUnitary(UnsoundFile):
    """A target matrix that loses or makes light."""


class StalePlan(UnsoundFile):
    """A plan made for another mesh, or for the same mesh before its physics changed."""


class UnsoundNet(UnsoundFile):
    """Elements and links that do not make a net."""


class TableNotMonotone(UnsoundFile):
    """A measured table that turns back, so that a value has two voltages."""


class CrosstalkUnsound(UnsoundFile):
    """A crosstalk table that is singular, not finite, or drops too much of its far part."""


class ResistanceNotPositive(UnsoundFile):
    """A heater whose resistance is zero or negative at its working point."""


# ---- out of reach: exit 4
class OutOfReach(Finding):
    """What was asked soundly lies outside what this chip and its source can do."""

    exit_code = OUT_OF_REACH


class NoClosedForm(OutOfReach):
    """No direct construction exists for this net and this target."""


class NoRoutes(OutOfReach):
    """Routes that are impossible together, or that were not found.

    Parameters
    ----------
    status : a key of solver.route.STATUSES
    conflict : the fewest routes that cannot go together, by name
    proof : "complete", "bounded" or "none"
    """

    def __init__(self, what: str, *, status: str, conflict: Sequence[str], proof: str, remedy: str = "") -> None:
        self.status, self.conflict, self.proof = status, tuple(conflict), proof
        super().__init__(what, remedy=remedy)


class LoopInNet(OutOfReach):
    """A net with loops or reflections where a light order is needed."""


class DriveFinding(OutOfReach):
    """Actuators that cannot be driven as wanted.

    Parameters
    ----------
    what : str
        The sentence in which ``{names}`` stands for the actuators.
    rows : sequence of int
        Positions of the actuators (or channels) concerned.
    remedy : str
    """

    shown = 6

    def __init__(self, what: str, *, rows: Sequence[int] = (), remedy: str = "", where: str = "") -> None:
        self.rows = tuple(int(r) for r in rows)
        self.sentence = what
        super().__init__(what, where=where, remedy=remedy)
        self._fill([f"actuator {r}" for r in self.rows])

    def _fill(self, names: Sequence[str]) -> None:
        listed = ", ".join(f"'{n}'" for n in names[: self.shown])
        if len(names) > self.shown:
            listed += f" and {len(names) - self.shown} more"
        self.what = self.sentence.replace("{names}", listed)
        self.args = (self.what,)

    def named(self, names: Sequence[str]) -> DriveFinding:
        """The same finding with `names[row]` in place of row numbers."""
        self._fill([names[r] for r in self.rows])
        return self


class VoltageOutOfRange(DriveFinding):
    """More volts are needed than the channel may give."""


class CurrentOutOfRange(DriveFinding):
    """More current is needed than the channel may give."""


class PowerOutOfRange(DriveFinding):
    """More power is needed than the actuator may take."""


class GapOutOfRange(DriveFinding):
    """A gap would have to open beyond its rest, or close beyond its travel."""


class PullIn(DriveFinding):
    """An electrostatic gap would collapse, or comes nearer to it than its margin allows."""


class ThermalRunaway(DriveFinding):
    """No stable temperature exists for a heater at this drive."""


class GroundDiverges(DriveFinding):
    """The shared ground takes so much of the voltage that no working point was found."""


class OutsideMeasuredRange(DriveFinding):
    """A value beyond what the measured table covers; tables are never extrapolated."""


class CrosstalkNotDominant(DriveFinding):
    """A heater warms its neighbours' phases more than its own."""


class SharedChannel(DriveFinding):
    """Actuators on one channel that want different drives."""


class Unreachable(DriveFinding):
    """Proved: no drive within the limits gives these phases."""


class NotFound(DriveFinding):
    """No drive was found; none was proved impossible."""


# ---- the bench: exit 5
class BenchRefused(Finding):
    """The bench refused or failed."""

    exit_code = BENCH
