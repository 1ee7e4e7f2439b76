"""The CSV tables of a mesh folder: read into columns with every field checked, and written back.

An empty field means the default. Every message names file, line, column, value and what is allowed.
Public: Table, read_table, table_text, unknown_name, brief.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from meshctl.errors import DuplicateName, MissingRow, NotFinite, OutOfRange, UnknownKey, UnsoundFile
from meshctl.mesh.files import read_text
from meshctl.mesh.quantities import Quantity


def _close_to(word: str, known: Iterable[str]) -> str:
    import difflib

    near = difflib.get_close_matches(word, list(known), n=1)
    return f"; did you mean '{near[0]}'?" if near else ""


def brief(text: str) -> str:
    """A user's own words for a message: one line, and not a whole table where a quote was never closed."""
    words = " ".join(text.split())
    return words if len(words) <= 60 else f"{words[:57]}.."


def unknown_name(kind: str, word: str, known: Iterable[str], where: str) -> UnknownKey:
    """The error for a name that nothing carries, with the nearest one that exists."""
    known = list(known)
    few = ", ".join(known[:8]) + (", .." if len(known) > 8 else "")
    return UnknownKey(
        f"{kind} '{brief(word)}' is not known{_close_to(word, known)}",
        where=where,
        remedy=f"use one of: {few}" if known else "remove it",
    )


@dataclass
class Table:
    """Rows of one CSV file by column; a missing field is None."""

    file: str
    columns: dict[str, list[Any]]
    lines: list[int] = field(default_factory=list)

    def __len__(self) -> int:
        return len(self.lines)

    def where(self, row: int) -> str:
        return f"{self.file} line {self.lines[row]}"

    def column(self, name: str) -> list[Any]:
        return self.columns.get(name) or [None] * len(self)


def _number(text: str, quantity: Quantity, where: str) -> float:
    try:
        if "_" in text:  # Python's own way of writing numbers, no one else's
            raise ValueError
        value = float(text)
    except ValueError:
        raise UnsoundFile(
            f"{quantity.name} is '{brief(text)}', which is no number",
            where=where,
            remedy=f"write {quantity.allowed}, or leave the field empty for the default",
        ) from None
    if not math.isfinite(value):
        raise NotFinite(
            f"{quantity.name} is {text}",
            where=where,
            remedy=f"write {quantity.allowed}, or leave the field empty for the default",
        )
    if not quantity.allows(value):
        raise OutOfRange(f"{quantity.name} is {text}; allowed is {quantity.allowed}", where=where, remedy="correct it")
    return value


def read_table(
    path: Path,
    words: Sequence[str],
    numbers: Callable[[str], Quantity | None],
    required: Sequence[str],
    allowed: Sequence[str],
) -> Table:
    """Read one CSV file.

    Parameters
    ----------
    words : columns that hold names
    numbers : the Quantity of any other column, None for a column that nothing knows
    required : columns that must be there and filled
    allowed : all column names, for messages

    Raises
    ------
    UnknownKey, DuplicateName, MissingRow, NotFinite, OutOfRange, UnsoundFile
    """
    name = path.name
    text = read_text(path, "table")
    try:
        return _parsed(text, name, words, numbers, required, allowed)
    except csv.Error as problem:
        raise UnsoundFile(f"not readable as CSV: {problem}", where=name, remedy="mend the file") from None


def _parsed(
    text: str,
    name: str,
    words: Sequence[str],
    numbers: Callable[[str], Quantity | None],
    required: Sequence[str],
    allowed: Sequence[str],
) -> Table:
    reader = csv.reader(io.StringIO(text), strict=True)
    head = [h.strip() for h in next(reader, [])]
    if not head:
        raise MissingRow("the file is empty", where=name, remedy=f"give it the head {','.join(required)},..")
    quantities: list[Quantity | None] = []
    for h in head:
        if head.count(h) > 1:
            raise DuplicateName(f"column '{h}' stands twice", where=f"{name} line 1", remedy="keep one")
        quantity = None if h in words else numbers(h)
        if h not in words and quantity is None:
            raise unknown_name("column", h, allowed, f"{name} line 1")
        quantities.append(quantity)
    for r in required:
        if r not in head:
            raise MissingRow(
                f"column '{r}' is missing",
                where=f"{name} line 1",
                remedy=f"the head needs {','.join(required)}",
            )
    must = [h in required for h in head]
    columns: dict[str, list[Any]] = {h: [] for h in head}
    lists = [columns[h] for h in head]
    lines: list[int] = []
    for row in reader:
        if not row or not any(row):
            continue
        line = reader.line_num
        if len(row) != len(head):
            raise UnsoundFile(
                f"{len(row)} fields where the head has {len(head)}",
                where=f"{name} line {line}",
                remedy="give every column a field, empty for the default",
            )
        lines.append(line)
        for raw, h, quantity, needed, into in zip(row, head, quantities, must, lists, strict=True):
            cell = raw.strip()
            if not cell:
                if needed:
                    raise MissingRow(
                        f"column '{h}' is empty",
                        where=f"{name} line {line}",
                        remedy="this field has no default",
                    )
                into.append(None)
            elif quantity is None:
                if not cell.isprintable():
                    raise UnsoundFile(
                        f"column '{h}' is {cell!r}, which has control codes",
                        where=f"{name} line {line}",
                        remedy="leave them out",
                    )
                into.append(cell)
            else:
                into.append(_number(cell, quantity, f"{name} line {line}"))
    return Table(name, columns, lines)


def _field(value: Any) -> str:
    if value is None or (isinstance(value, float) and math.isnan(value)):
        return ""
    return repr(float(value)) if isinstance(value, float) else str(value)


def table_text(head: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """CSV text; numbers are written so that they read back equal, NaN and None as empty fields."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(head)
    writer.writerows([_field(v) for v in row] for row in rows)
    return out.getvalue()
