"""What is asked for: a target matrix from a file, a name or a draw, refused with reasons where unsound.

To add a named target write its function, add its line to TARGETS, and its test.
Public: Target, TARGETS, read_target, make_target, described.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np

from meshctl.errors import MissingFile, NotFinite, NotUnitary, UnsoundFile, WrongSize, WrongUsage
from meshctl.mesh.tables import unknown_name
from meshctl.optics.measures import FREE_PHASES, unitarity_defect

UNITARY_WITHIN = 1e-9


@dataclass(frozen=True, eq=False)
class Target:
    """A wished matrix."""

    matrix: np.ndarray  # c128[out, in]
    free: str = "nothing"  # port phases not asked for: nothing, outputs, inputs, both
    source: str = "array"  # where it came from, in words

    @property
    def size(self) -> tuple[int, int]:
        return self.matrix.shape[0], self.matrix.shape[1]


def identity(modes: int) -> np.ndarray:
    """Every input to the output of its number."""
    return np.eye(modes, dtype=complex)


def dft(modes: int) -> np.ndarray:
    """Discrete Fourier transform, exp(+2 pi i jk / N) / sqrt(N)."""
    k = np.arange(modes)
    # whole turns are taken off first, so that large N loses no digits
    return np.exp(2j * np.pi * (np.outer(k, k) % modes) / modes) / math.sqrt(modes)


def hadamard(modes: int) -> np.ndarray:
    """Sylvester's Hadamard matrix / sqrt(N); N must be a power of two."""
    if modes & (modes - 1):
        raise WrongSize(f"a Hadamard matrix of {modes} modes is not known here", remedy="use a power of two")
    h = np.ones((1, 1), complex)
    while len(h) < modes:
        h = np.block([[h, h], [h, -h]])
    return h / math.sqrt(modes)


def haar(modes: int, seed: str) -> np.ndarray:
    """A matrix drawn from the Haar measure: QR of a complex normal matrix, phases of R's diagonal moved over.

    Source: Mezzadri, "How to generate random matrices from the classical compact groups", 2007.
    """
    if not seed.isascii() or not seed.isdigit():
        raise WrongUsage(f"haar:{seed} has no seed", remedy="write haar:SEED with a whole number from 0")
    rng = np.random.Generator(np.random.PCG64(int(seed)))
    z = rng.standard_normal((modes, modes)) + 1j * rng.standard_normal((modes, modes))
    q, r = np.linalg.qr(z)
    d = np.diag(r)
    out: np.ndarray = q * (d / np.abs(d))
    return out


def permutation(modes: int, order: str) -> np.ndarray:
    """permutation:3,1,2,4 sends input 1 to output 3, input 2 to output 1, .."""
    try:
        goes_to = [int(word) for word in order.split(",")]
    except ValueError:
        raise WrongUsage(f"permutation:{order} is not a list of numbers", remedy="write permutation:3,1,2,4") from None
    if len(goes_to) != modes:
        raise WrongSize(
            f"permutation:{order} names {len(goes_to)} outputs; the mesh has {modes}",
            remedy=f"name each output from 1 to {modes} once",
        )
    if sorted(goes_to) != list(range(1, modes + 1)):
        raise WrongUsage(f"permutation:{order} is no permutation", remedy=f"name each output from 1 to {modes} once")
    matrix = np.zeros((modes, modes), complex)
    matrix[np.array(goes_to) - 1, np.arange(modes)] = 1.0
    return matrix


TARGETS: dict[str, Callable[..., np.ndarray]] = {
    "identity": identity,
    "dft": dft,
    "hadamard": hadamard,
    "haar": haar,
    "permutation": permutation,
}
WITH_ARGUMENT = ("haar", "permutation")


def _from_csv(path: Path) -> np.ndarray:
    rows: list[list[complex]] = []
    with path.open(newline="", encoding="utf-8-sig") as lines:
        try:
            for row in (r for r in csv.reader(lines) if any(field.strip() for field in r)):
                line = len(rows) + 1
                values = []
                for column, field in enumerate(row, 1):
                    text = field.strip().replace(" ", "").replace("i", "j") if "inf" not in field else field.strip()
                    try:
                        values.append(complex(text))
                    except ValueError:
                        raise UnsoundFile(
                            f"row {line} column {column} is '{field.strip()}'",
                            where=str(path),
                            remedy="write cells like 0.5-0.2j",
                        ) from None
                if rows and len(values) != len(rows[0]):
                    raise WrongSize(
                        f"row {line} has {len(values)} cells where row 1 has {len(rows[0])}",
                        where=str(path),
                        remedy="give one row per output, one cell per input",
                    )
                rows.append(values)
        except UnicodeDecodeError as problem:
            raise UnsoundFile(f"not UTF-8 text: {problem.reason}", where=str(path), remedy="save it as UTF-8") from None
        except csv.Error as problem:
            raise UnsoundFile(f"not readable as CSV: {problem}", where=str(path), remedy="mend the file") from None
    if not rows:
        raise WrongSize("the file is empty", where=str(path), remedy="give one row per output")
    return np.array(rows, complex)


def _from_npy(path: Path) -> np.ndarray:
    try:
        loaded = np.load(path, allow_pickle=False)
    except (ValueError, EOFError, OSError, MemoryError, BadZipFile) as problem:
        raise UnsoundFile(
            f"not readable as a numpy array: {problem}", where=str(path), remedy="save it with numpy.save"
        ) from None
    if not isinstance(loaded, np.ndarray) or loaded.dtype.kind not in "fciub":
        kind = getattr(loaded, "dtype", type(loaded).__name__)
        raise UnsoundFile(f"holds {kind}, not numbers", where=str(path), remedy="save a complex array")
    return loaded.astype(complex)


def make_target(matrix: Any, shape: tuple[int, int], free: str = "nothing", source: str = "array") -> Target:
    """Check a matrix against the mesh it is wished from.

    Parameters
    ----------
    matrix : complex (out, in)
    shape : (outputs, inputs) of the mesh

    Raises
    ------
    WrongSize, NotFinite, NotUnitary
        NotUnitary where an entry of T^H T differs from the unit matrix by more than 1e-9.
    """
    if free not in FREE_PHASES:
        raise WrongUsage(f"free is '{free}'", remedy=f"use one of: {', '.join(FREE_PHASES)}")
    where = "" if source == "array" else source
    array = np.asarray(matrix)
    if array.dtype.kind not in "fciub":
        raise UnsoundFile(f"holds {array.dtype}, not numbers", where=where, remedy="give a complex array")
    array = array.astype(complex)
    if array.shape != shape:
        has = " x ".join(map(str, array.shape)) or "0-dimensional"
        raise WrongSize(
            f"the target is {has}; the mesh has {shape[0]} outputs and {shape[1]} inputs",
            where=where,
            remedy=f"give a matrix of {shape[0]} x {shape[1]}",
        )
    if not np.isfinite(array).all():
        row, column = np.argwhere(~np.isfinite(array))[0]
        raise NotFinite(
            f"row {row + 1} column {column + 1} is {array[row, column]}",
            where=where,
            remedy="give finite numbers",
        )
    defect = unitarity_defect(array)
    if defect > UNITARY_WITHIN:
        largest = float(np.linalg.svd(array, compute_uv=False)[0])
        advice = f"; its largest singular value is {largest:.6g}"
        raise NotUnitary(
            f"not unitary: an entry of T^H T - 1 is {defect:.3g}, allowed is {UNITARY_WITHIN:g}{advice}",
            where=where,
            remedy="give a unitary matrix with more digits, or the unitary factor of its polar decomposition",
        )
    return Target(array, free, source)


def read_target(words: str, shape: tuple[int, int], free: str = "nothing") -> Target:
    """A target from the command line: FILE.npy, FILE.csv, or one of TARGETS such as haar:7.

    Parameters
    ----------
    words : what the user wrote
    shape : (outputs, inputs) of the mesh

    Raises
    ------
    MissingFile, UnknownKey, WrongUsage, UnsoundFile and what `make_target` raises

    Example
    -------
    >>> read_target("permutation:2,1", (2, 2)).matrix.real.tolist()
    [[0.0, 1.0], [1.0, 0.0]]
    """
    path = Path(words)
    if path.suffix in (".npy", ".csv"):
        if not path.is_file():
            raise MissingFile("there is no such file", where=words, remedy="name a .npy or .csv file, or a target")
        matrix = _from_npy(path) if path.suffix == ".npy" else _from_csv(path)
        return make_target(matrix, shape, free, words)
    name, colon, argument = words.partition(":")
    if name not in TARGETS:
        known = [f"{n}:.." if n in WITH_ARGUMENT else n for n in TARGETS] + ["FILE.npy", "FILE.csv"]
        finding = unknown_name("target", words, known, "")
        raise WrongUsage(finding.what, remedy=finding.remedy)
    if shape[0] != shape[1]:
        raise WrongSize(
            f"target '{words}' is square; the mesh has {shape[0]} outputs and {shape[1]} inputs",
            remedy="give a matrix of that size as a file",
        )
    if (name in WITH_ARGUMENT) != bool(colon):
        form = f"{name}:.." if name in WITH_ARGUMENT else name
        raise WrongUsage(f"target '{words}' is not complete", remedy=f"write {form}")
    matrix = TARGETS[name](shape[0], argument) if colon else TARGETS[name](shape[0])
    return make_target(matrix, shape, free, words)


def described(target: Target) -> dict[str, Any]:
    """The target as a plan file keeps it: by name where the name says all, else with its matrix."""
    entry: dict[str, Any] = {"source": target.source, "free": target.free, "size": list(target.size)}
    if target.source.partition(":")[0] not in TARGETS:
        entry["real"], entry["imag"] = target.matrix.real.tolist(), target.matrix.imag.tolist()
    return entry


def from_description(entry: dict[str, Any]) -> Target:
    """The target that `described` wrote.

    Raises
    ------
    UnsoundFile
        Where `described` cannot have written it.
    """
    try:
        return _from_description(entry)
    except (KeyError, IndexError, TypeError, ValueError, AttributeError) as problem:
        what = f"the target of the plan is not readable: {type(problem).__name__} {problem}"
        raise UnsoundFile(what, remedy="solve again") from None


def _from_description(entry: dict[str, Any]) -> Target:
    shape = (int(entry["size"][0]), int(entry["size"][1]))
    if "real" in entry:
        matrix = np.array(entry["real"]) + 1j * np.array(entry["imag"])
        return make_target(matrix, shape, entry["free"], entry["source"])
    return read_target(entry["source"], shape, entry["free"])
