"""What is asked of light: from which port to which, in what shares, how long on the way.

Public: Wish, parse_wish.
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

from meshctl.errors import WrongUsage

SHARES_WITHIN = 1e-6  # of one: digits lost in writing thirds and sevenths
_FORM = "write IN:OUT, IN:OUT@12cells, IN:OUT@85ps or IN:OUT=0.7,OUT=0.3"
_LENGTH = re.compile(r"([0-9.eE+-]+)(cells?|ps)")


@dataclass(frozen=True)
class Wish:
    """Light from one port to one other, or divided among several."""

    source: str
    shares: tuple[tuple[str, float], ...]  # (output, share of what arrives), shares add up to 1
    cells: int | None = None  # switches to be passed
    delay_ps: float | None = None  # group delay wished

    @property
    def sinks(self) -> tuple[str, ...]:
        return tuple(name for name, _ in self.shares)

    @property
    def is_split(self) -> bool:
        return len(self.shares) > 1

    @property
    def words(self) -> str:
        """The wish as it is written on the command line."""
        if self.is_split:
            return f"{self.source}:" + ",".join(f"{name}={share:.10g}" for name, share in self.shares)
        length = f"@{self.cells}cells" if self.cells is not None else ""
        length += f"@{self.delay_ps:.10g}ps" if self.delay_ps is not None else ""
        return f"{self.source}:{self.shares[0][0]}{length}"

    def __str__(self) -> str:
        return self.words


def parse_wish(words: str) -> Wish:
    """A wish from the command line.

    Parameters
    ----------
    words : "in1:out3", "in1:out2=0.7,out5=0.3" (shares of what arrives; left out: equal ones),
        "p1:p9@12cells" or "p1:p9@85ps"

    Raises
    ------
    WrongUsage

    Example
    -------
    >>> parse_wish("in1:out2=0.75,out5=0.25").shares
    (('out2', 0.75), ('out5', 0.25))
    """
    source, colon, rest = words.strip().partition(":")
    if not colon or not source or not rest or ":" in rest:
        raise WrongUsage(f"route '{words}' is not complete", remedy=_FORM)
    rest, at, length = rest.partition("@")
    named = [part.partition("=") for part in rest.split(",")]
    sinks = [name.strip() for name, _, _ in named]
    if not all(sinks):
        raise WrongUsage(f"route '{words}' has an output without a name", remedy=_FORM)
    for k, name in enumerate(sinks):
        if name in sinks[:k]:
            raise WrongUsage(f"route '{words}' names '{name}' twice", remedy="name each output once")
        if name == source:
            raise WrongUsage(f"route '{words}' ends where it starts", remedy="name another output")
    cells, delay = _length(words, length) if at else (None, None)
    if at and len(sinks) > 1:
        raise WrongUsage(f"route '{words}' has a length and several outputs", remedy="give lengths to single routes")
    return Wish(source.strip(), tuple(zip(sinks, _shares(words, named), strict=True)), cells, delay)


def _shares(words: str, named: list[tuple[str, str, str]]) -> list[float]:
    given = [text for _, equals, text in named if equals]
    if not given:
        return [1.0 / len(named)] * len(named)
    if len(given) < len(named):
        raise WrongUsage(f"route '{words}' gives a share to some outputs only", remedy="give all of them, or none")
    shares = []
    for name, _, text in named:
        try:
            share = float(text)
        except ValueError:
            share = math.nan
        if not 0.0 < share <= 1.0:
            raise WrongUsage(f"route '{words}': the share of '{name.strip()}' is '{text}'", remedy="give it as 0 to 1")
        shares.append(share)
    total = sum(shares)
    if abs(total - 1.0) > SHARES_WITHIN:
        raise WrongUsage(
            f"route '{words}': shares add up to {total:.6g}, must be 1",
            remedy="write each as a share of what arrives",
        )
    return [share / total for share in shares]


def _length(words: str, text: str) -> tuple[int | None, float | None]:
    match = _LENGTH.fullmatch(text.strip())
    try:
        number = float(match[1]) if match else math.nan
    except ValueError:
        number = math.nan
    if match is None or not math.isfinite(number) or number <= 0.0:
        raise WrongUsage(f"route '{words}': the length '{text}' is unclear", remedy="write @12cells or @85ps")
    if match[2] == "ps":
        return None, number
    if number != int(number):
        raise WrongUsage(f"route '{words}': {number:g} cells is no whole number", remedy="write @12cells")
    return int(number), None
