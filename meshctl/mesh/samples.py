"""Measured scatter: the [spread] of mesh.toml with its files of samples, one number a line under the cause's name.

Public: read_spread.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import NotFinite, UnsoundFile
from meshctl.mesh.files import read_text
from meshctl.mesh.spread import Shape, Spread, spread_of

FEWEST = 5  # samples: fewer say nothing of a distribution


def read_spread(entry: Mapping[str, Any], folder: Path | None) -> Spread:
    """The spread of a mesh.

    Parameters
    ----------
    entry : [spread] as a dict, checked key by key
    folder : where files of samples lie

    Raises
    ------
    UnsoundFile or a finding under it
    """
    shapes = {}
    for cause, given in entry["shape"].items():
        length, file = given["correlation_um"], given["file"]
        samples = None if file is None else _samples(cause, file, folder)
        shares = {key: given[key] for key in ("distribution", "wafer", "gradient", "correlated")}
        shapes[cause] = Shape(**shares, correlation_um=0.0 if length is None else length, samples=samples)
    return spread_of(entry, shapes, "mesh.toml spread")


def _samples(cause: str, file: str, folder: Path | None) -> np.ndarray:
    path = (folder or Path()) / file
    lines = read_text(path, "file of samples").split()
    if not lines or lines[0] != cause:
        found = lines[0] if lines else "nothing"
        raise UnsoundFile(f"the first line is '{found}'", where=str(path), remedy=f"head the samples with '{cause}'")
    values = []
    for number, text in enumerate(lines[1:], 2):
        try:
            values.append(float(text))
        except ValueError:
            raise UnsoundFile(f"'{text}' is no number", where=f"{path} line {number}", remedy="correct it") from None
        if not math.isfinite(values[-1]):
            raise NotFinite(f"{text} is no number to use", where=f"{path} line {number}", remedy="remove the line")
    if len(values) < FEWEST:
        raise UnsoundFile(f"{len(values)} samples", where=str(path), remedy=f"give at least {FEWEST}")
    return np.sort(np.array(values))
