"""What is asked for: a matrix, powers or bands from a file, a name or a draw, refused with reasons where unsound.

To add a named target write its function, add its line to TARGETS, and its test.
Public: Target, TARGETS, read_target, make_target, checked_array, described, from_description.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np

from meshctl.errors import MissingFile, NotFinite, NotUnitary, UnsoundFile, WrongSize, WrongUsage
from meshctl.mesh.files import read_text
from meshctl.mesh.tables import brief, unknown_name
from meshctl.optics.measures import FREE_PHASES, unitarity_defect

UNITARY_WITHIN = 1e-9


@dataclass(frozen=True, eq=False)
class Target:
    """What is wished: a matrix or powers, at one wavelength or several.

    Arrays are [out, in], or [wavelength, out, in] where the wish differs from one wavelength to another.
    """

    matrix: Any  # c128[out, in] or [W, out, in]; None: only powers or bands are wished
    free: str = "nothing"  # port phases not asked for: nothing, outputs, inputs, both
    source: str = "array"  # where it came from, in words
    power: np.ndarray | None = None  # f64, share of each input's light at each output
    weight: np.ndarray | None = None  # f64; 0: does not matter; None: all entries alike
    wavelengths_nm: np.ndarray | None = None  # f64[W]; None: the centre alone
    over: str = "mean"  # of the wavelengths, or "worst"
    dark: tuple[int, ...] = ()  # outputs, from 0, that no light is to reach
    least_db: np.ndarray | None = None  # f64[W, out, in], pass bands; NaN: not asked
    most_db: np.ndarray | None = None  # f64[W, out, in], stop bands
    scale: float = 1.0  # what the matrix asked for was multiplied by

    @property
    def size(self) -> tuple[int, int]:
        for array in (self.matrix, self.power, self.least_db):
            if array is not None:
                return array.shape[-2], array.shape[-1]
        raise WrongUsage("the target asks for nothing")

    @property
    def plain(self) -> bool:
        """True where one matrix is all that is asked, every entry alike, at the centre wavelength."""
        others = (self.power, self.weight, self.wavelengths_nm, self.least_db)
        return self.matrix is not None and self.matrix.ndim == 2 and not self.dark and all(x is None for x in others)

    def start_matrix(self) -> np.ndarray:
        """The unitary matrix nearest to what is asked: what a closed form can start a refinement from.

        complex (n, n) for a mesh of n inputs and outputs; inputs or outputs that do not matter are filled up.
        """
        out, into = self.size
        if out != into:
            raise WrongSize(
                f"the target has {out} outputs and {into} inputs", remedy="give the refinement settings to start from"
            )
        asked = np.eye(out, dtype=complex)
        if self.matrix is not None:
            asked = self.matrix if self.matrix.ndim == 2 else self.matrix.mean(0)
            if self.matrix.ndim == 2 and unitarity_defect(asked) <= UNITARY_WITHIN:
                return np.asarray(asked)
        elif self.power is not None:
            asked = np.sqrt(self.power if self.power.ndim == 2 else self.power.mean(0)) + 0j
        elif self.least_db is not None:
            passed = np.where(np.isnan(self.least_db), -np.inf, self.least_db)
            asked = 10.0 ** (passed.reshape(-1, out, into).max(0) / 20.0) + 0j
        if self.weight is not None:
            asked = asked * ((self.weight if self.weight.ndim == 2 else self.weight.mean(0)) > 0.0)
        left, _, right = np.linalg.svd(asked)
        unitary: np.ndarray = left @ right
        return unitary


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
        raise WrongUsage(f"a Hadamard matrix of {modes} modes is not known here", remedy="use a power of two")
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
        raise WrongUsage(
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
WITH_ARGUMENT = {"haar": "haar:SEED, such as haar:7", "permutation": "permutation:3,1,2,4"}


def _from_csv(path: Path) -> np.ndarray:
    rows: list[list[complex]] = []
    with io.StringIO(read_text(path), newline="") as lines:
        try:
            for row in (r for r in csv.reader(lines, strict=True) if any(field.strip() for field in r)):
                line = len(rows) + 1
                values = []
                for column, field in enumerate(row, 1):
                    text = field.strip().replace(" ", "").replace("i", "j") if "inf" not in field else field.strip()
                    try:
                        if "_" in text:
                            raise ValueError
                        values.append(complex(text))
                    except ValueError:
                        raise UnsoundFile(
                            f"row {line} column {column} is '{brief(field)}'",
                            where=str(path),
                            remedy="write cells like 0.5-0.2j",
                        ) from None
                if rows and len(values) != len(rows[0]):
                    raise WrongSize(
                        f"row {line} has {len(values)}, row 1 has {len(rows[0])} cells",
                        where=str(path),
                        remedy="give one row per output, one cell per input",
                    )
                rows.append(values)
        except csv.Error as problem:
            raise UnsoundFile(f"not readable as CSV: {problem}", where=str(path), remedy="mend the file") from None
    if not rows:
        raise WrongSize("the file is empty", where=str(path), remedy="give one row per output")
    return np.array(rows, complex)


def _from_npy(path: Path) -> np.ndarray:
    try:
        with path.open("rb") as opened:
            loaded = np.load(opened, allow_pickle=False)
    except (ValueError, EOFError, OSError, MemoryError, BadZipFile) as problem:
        raise UnsoundFile(
            f"not readable as a numpy array: {problem}", where=str(path), remedy="save it with numpy.save"
        ) from None
    if not isinstance(loaded, np.ndarray) or loaded.dtype.kind not in "fciub":
        kind = getattr(loaded, "dtype", type(loaded).__name__)
        raise UnsoundFile(f"holds {kind}, not numbers", where=str(path), remedy="save a complex array")
    return loaded.astype(complex)


def read_matrix(path: Path) -> np.ndarray:
    """The numbers of a .npy or .csv file, unchecked."""
    return _from_npy(path) if path.suffix.lower() == ".npy" else _from_csv(path)


def check_free(free: str) -> None:
    if free not in FREE_PHASES:
        raise WrongUsage(f"free is '{free}'", remedy=f"use one of: {', '.join(FREE_PHASES)}")


def checked_array(values: Any, shape: tuple[int, ...], name: str, where: str, holes: bool = False) -> np.ndarray:
    """An array of numbers of a shape, all finite; `holes`: NaN may stand where nothing is asked."""
    array = np.asarray(values)
    if array.dtype.kind not in "fciub":
        raise UnsoundFile(f"{name} holds {array.dtype}, not numbers", where=where, remedy="give a complex array")
    if array.shape != shape:
        has = " x ".join(map(str, array.shape)) or "0-dimensional"
        several = f" at {shape[0]} wavelengths" if len(shape) == 3 else ""
        raise WrongSize(
            f"{name} is {has}; the mesh has {shape[-2]} outputs and {shape[-1]} inputs{several}",
            where=where,
            remedy=f"give a matrix of {' x '.join(map(str, shape))}",
        )
    bad = ~np.isfinite(array) & ~(np.isnan(array) & holes)
    if bad.any():
        at = np.argwhere(bad)[0]
        at_wave = f"wavelength {at[0] + 1} " if len(at) == 3 else ""
        raise NotFinite(
            f"{at_wave}row {at[-2] + 1} column {at[-1] + 1} is {array[tuple(at)]}",
            where=where,
            remedy="give finite numbers",
        )
    return array


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
    check_free(free)
    where = "" if source == "array" else source
    array = checked_array(matrix, shape, "the target", where).astype(complex)
    defect = unitarity_defect(array)
    if defect > UNITARY_WITHIN:
        largest = float(np.linalg.svd(array, compute_uv=False)[0])
        advice = f"; its largest singular value is {largest:.6g}"
        raise NotUnitary(
            f"not unitary: an entry of T^H T - 1 is {defect:.3g}, allowed is {UNITARY_WITHIN:g}{advice}",
            where=where,
            remedy="give a unitary matrix with more digits, the unitary factor of its polar decomposition, or ask for "
            "it as part of a larger mesh: a target file with matrix and dilate = true",
        )
    return Target(array, free, source)


def read_target(
    words: str,
    shape: tuple[int, int],
    free: str = "nothing",
    inputs: Sequence[str] | None = None,
    outputs: Sequence[str] | None = None,
) -> Target:
    """A target from the command line: FILE.npy, FILE.csv, FILE.toml, or one of TARGETS such as haar:7.

    Parameters
    ----------
    words : what the user wrote
    shape : (outputs, inputs) of the mesh
    inputs, outputs : names of the mesh's ports for target files, by default in1, in2, .. and out1, out2, ..

    Raises
    ------
    MissingFile, UnknownKey, WrongUsage, UnsoundFile and what `make_target` raises

    Example
    -------
    >>> read_target("permutation:2,1", (2, 2)).matrix.real.tolist()
    [[0.0, 1.0], [1.0, 0.0]]
    """
    path = Path(words)
    suffix = path.suffix.lower()
    if suffix in (".npy", ".csv", ".toml"):
        if not path.is_file():
            raise MissingFile("there is no such file", where=words, remedy="name a file that exists, or a target")
        if suffix == ".toml":
            from meshctl.solver.wishes import read_wish

            return read_wish(path, shape, free, inputs, outputs)
        return make_target(read_matrix(path), shape, free, words)
    name, colon, argument = words.partition(":")
    if name not in TARGETS:
        known = [WITH_ARGUMENT.get(n, n).partition(" ")[0].rstrip(",") for n in TARGETS] + [
            "FILE.npy",
            "FILE.csv",
            "FILE.toml",
        ]
        finding = unknown_name("target", words, known, "")
        raise WrongUsage(finding.what, remedy=finding.remedy)
    if shape[0] != shape[1]:
        raise WrongUsage(
            f"target '{words}' is square; the mesh has {shape[0]} outputs and {shape[1]} inputs",
            remedy="give a matrix of that size as a file",
        )
    if (name in WITH_ARGUMENT) != bool(colon):
        if colon:
            raise WrongUsage(f"target '{name}' takes no ':{brief(argument)}'", remedy=f"write {name}")
        raise WrongUsage(f"target '{words}' is not complete", remedy=f"write {WITH_ARGUMENT[name]}")
    matrix = TARGETS[name](shape[0], argument) if colon else TARGETS[name](shape[0])
    return make_target(matrix, shape, free, words)


_ARRAYS = ("power", "weight", "wavelengths_nm", "least_db", "most_db")


def _listed(array: np.ndarray) -> Any:
    """Nested lists with None for NaN, which JSON has not."""
    return np.where(np.isnan(array), None, array.astype(object)).tolist()  # type: ignore[call-overload]


def described(target: Target) -> dict[str, Any]:
    """The target as a plan file keeps it: by name where the name says all, else with its matrix."""
    entry: dict[str, Any] = {"source": target.source, "free": target.free, "size": list(target.size)}
    if target.plain and target.scale == 1.0:
        if target.source.partition(":")[0] not in TARGETS:
            entry["real"], entry["imag"] = target.matrix.real.tolist(), target.matrix.imag.tolist()
        return entry
    entry |= {"wish": True, "over": target.over, "dark": list(target.dark), "scale": target.scale}
    if target.matrix is not None:
        entry["real"], entry["imag"] = target.matrix.real.tolist(), target.matrix.imag.tolist()
    entry |= {name: _listed(getattr(target, name)) for name in _ARRAYS if getattr(target, name) is not None}
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
    matrix = np.array(entry["real"]) + 1j * np.array(entry["imag"]) if "real" in entry else None
    nearest = matrix is not None and unitarity_defect(matrix) > UNITARY_WITHIN
    if entry.get("wish") or nearest:
        from meshctl.solver.wishes import make_wish

        arrays = {name: np.array(entry[name], float) for name in _ARRAYS if name in entry}
        return make_wish(
            shape,
            matrix=matrix,
            free=entry["free"],
            over=entry.get("over", "mean"),
            dark=entry.get("dark", ()),
            scale=entry.get("scale", 1.0),
            source=entry["source"],
            **arrays,
        )
    if matrix is not None:
        return make_target(matrix, shape, entry["free"], entry["source"])
    if entry["source"].partition(":")[0] not in TARGETS:
        raise ValueError(f"'{brief(entry['source'])}' has no matrix beside it")
    return read_target(entry["source"], shape, entry["free"])
