"""What must stand where in a plan file, as tables: one check refuses everything else by key, value and remedy.

Public: require, PLAN, TARGET, ROUTES_ASKED, ROUTE, SEARCH.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from meshctl.errors import MissingRow, UnsoundFile
from meshctl.optics.measures import FREE_PHASES
from meshctl.solver.solution import REASONS


@dataclass(frozen=True)
class Form:
    """What a value may be, and how that is said."""

    said: str
    holds: Callable[[Any], bool]


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _is_plain(text: str) -> bool:
    return all(c.isprintable() or c in "\n\t" for c in text)


def _list_of(one: Form, said: str, *, some: bool = False, count: int | None = None) -> Form:
    def holds(value: Any) -> bool:
        long_enough = isinstance(value, list) and (bool(value) or not some) and count in (None, len(value))
        return long_enough and all(map(one.holds, value))

    return Form(said, holds)


def _or_none(one: Form) -> Form:
    return Form(f"{one.said} or null", lambda value: value is None or one.holds(value))


TEXT = Form("a text without control codes", lambda value: isinstance(value, str) and _is_plain(value))
NUMBER = Form("a number", _is_number)
ABOVE_ZERO = Form("a number above 0", lambda value: _is_number(value) and value > 0)
COUNT = Form("a whole number, 0 or more", lambda v: isinstance(v, int) and not isinstance(v, bool) and v >= 0)
TRUTH = Form("true or false", lambda value: isinstance(value, bool))
OBJECT = Form("an object", lambda value: isinstance(value, dict))
TEXTS = _list_of(TEXT, "a list of texts")
NUMBERS = _list_of(NUMBER, "a list of numbers, one or more", some=True)
LEVEL = _or_none(NUMBER)

UNUSED = ("", "cross", "bar", "cleanest", "rest")  # keys of solver.unused.POLICIES, whose kernels stay unloaded

PLAN = {
    "mesh_name": TEXT,
    "mesh_hash": TEXT,
    "continuous": Form("an object of numbers", lambda v: isinstance(v, dict) and all(map(_is_number, v.values()))),
    "throughput_per_input": NUMBERS,
    "reason": Form(f"one of {', '.join(REASONS)}", lambda value: isinstance(value, str) and value in REASONS),
    "warnings": TEXTS,
    "shortfalls": _list_of(OBJECT, "a list of objects"),
    "saved_mw": NUMBER,
    "seed": COUNT,
    "version": TEXT,
}
TARGET = {
    "source": TEXT,
    "free": Form(f"one of {', '.join(FREE_PHASES)}", lambda value: isinstance(value, str) and value in FREE_PHASES),
    "size": _list_of(COUNT, "two whole numbers, outputs and inputs", count=2),
}
ROUTES_ASKED = {
    "source": TEXT,
    "words": _list_of(TEXT, "a list of routes, one or more", some=True),
    "avoid": TEXTS,
    "priorities": _or_none(NUMBERS),
    "unused": Form(f"empty or one of {', '.join(UNUSED[1:])}", lambda v: isinstance(v, str) and v in UNUSED),
    "seed": COUNT,
    "seconds": ABOVE_ZERO,
    "band": TEXT,
    "best_effort": TRUTH,
}
ROUTE = {
    "input": TEXT,
    "output": TEXT,
    "share": NUMBER,
    "cells": TEXTS,
    "states": TEXTS,
    "length_um": NUMBER,
    "delay_ps": NUMBER,
    "share_reached": LEVEL,
    "signal_db": LEVEL,
    "insertion_loss_db": LEVEL,
    "crosstalk_db": LEVEL,
    "stray_db": LEVEL,
    "least_signal_db": LEVEL,
    "worst_crosstalk_db": LEVEL,
    "worst_stray_db": LEVEL,
    "ripple_db": LEVEL,
    "slow_db": LEVEL,
}
SEARCH = {
    "status": TEXT,
    "words": TEXT,
    "left_out": TEXTS,
    "unused": TEXT,
    "turned": COUNT,
    "driven": COUNT,
    "loops": COUNT,
    "loops_beside_routes": COUNT,
}


def require(entry: Any, forms: Mapping[str, Form], where: str, inside: str = "") -> None:
    """Refuse an object that lacks a key of `forms`, or has something else there.

    Parameters
    ----------
    where : the file
    inside : what the object is called in it

    Raises
    ------
    UnsoundFile, MissingRow
    """
    if not isinstance(entry, dict):
        raise UnsoundFile(f"'{inside}' is {_brief(entry)}, must be an object", where=where, remedy="solve again")
    for key, form in forms.items():
        name = f"{inside}.{key}" if inside else key
        if key not in entry:
            raise MissingRow(f"key '{name}' is missing", where=where, remedy="solve again")
        if not form.holds(entry[key]):
            raise UnsoundFile(
                f"'{name}' is {_brief(entry[key])}, must be {form.said}", where=where, remedy="solve again"
            )


def _brief(value: Any) -> str:
    shown = repr(value)
    return shown if len(shown) <= 40 else f"{shown[:37]}.."
