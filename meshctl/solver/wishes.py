"""Wishes beyond one unitary matrix, from Python or from a target file.

A target file is TOML. One of these says what is wanted::

    matrix = "wanted.csv"                    # or rows of cells like "0.5-0.2j", or a named target
    power = [[0.5, 0.5], [0.5, 0.5]]
    state = {input = "in1", fields = ["0.6", "0.8j"]}
    dark = ["out3"]                          # also beside the others
    [[band]]                                 # one table for each band
    from = "in1"
    to = "out2"
    wavelengths_nm = [1549.8, 1550.2]        # the ends; `points` of them, 5 by default
    least_db = -1.0                          # or most_db = -20.0

and these say what counts: weight, free, only_inputs, only_outputs (then matrix, power and weight may have just
those columns and rows), wavelengths_nm (a list, or {from = .., to = .., count = ..}), over ("mean", "worst"),
nearest = true (the matrix need not be unitary), dilate = true (any matrix, as part of the mesh), largest = true
(scaled to the least loss).
Public: make_wish, read_wish, KEYS.
"""

from __future__ import annotations

import tomllib
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import Finding, MissingRow, NotFinite, OutOfRange, UnsoundFile, WrongSize, WrongUsage
from meshctl.mesh.files import read_text
from meshctl.mesh.tables import unknown_name
from meshctl.optics.grid import COUNT_MOST, HIGH_NM, LOW_NM
from meshctl.solver.target import TARGETS, Target, check_free, checked_array, make_target, read_matrix

KEYS = (
    "matrix", "power", "state", "dark", "band", "weight", "free", "only_inputs", "only_outputs", "wavelengths_nm",
    "over", "nearest", "dilate", "largest",
)  # fmt: skip
BAND_KEYS = ("from", "to", "wavelengths_nm", "points", "least_db", "most_db")
BAND_POINTS = 5


def make_wish(
    shape: tuple[int, int],
    *,
    matrix: Any = None,
    power: Any = None,
    weight: Any = None,
    free: str = "nothing",
    wavelengths_nm: Any = None,
    over: str = "mean",
    dark: Sequence[int] = (),
    least_db: Any = None,
    most_db: Any = None,
    scale: float = 1.0,
    source: str = "array",
) -> Target:
    """A target beyond one unitary matrix: what is asked is approached, and need not be possible.

    Parameters
    ----------
    shape : (outputs, inputs) of the mesh
    matrix : complex (out, in) or (W, out, in); one of matrix, power, dark and bands must be given
    power : float, likewise, shares from 0 to 1
    weight : float, likewise, from 0; 0 is an entry that does not matter
    wavelengths_nm : float (W,)
    over : "mean" of the wavelengths or "worst"
    dark : positions of outputs that no light is to reach
    least_db, most_db : float (W, out, in), pass and stop bands, NaN where nothing is asked

    Raises
    ------
    WrongSize, NotFinite, WrongUsage, OutOfRange
    """
    check_free(free)
    where = "" if source == "array" else source
    if over not in ("mean", "worst"):
        raise WrongUsage(f"over is '{over}'", where=where, remedy="use mean or worst")
    waves = None
    if wavelengths_nm is not None:
        waves = np.atleast_1d(np.asarray(wavelengths_nm, float))
        bad = waves[~((waves >= LOW_NM) & (waves <= HIGH_NM))]
        if waves.ndim != 1 or not len(waves) or len(bad):
            raise OutOfRange(
                f"wavelengths_nm holds {f'{bad[0]:g} nm' if len(bad) else waves}",
                where=where,
                remedy=f"give a list of wavelengths from {LOW_NM:g} to {HIGH_NM:g} nm",
            )

    def stack(values: Any, name: str, holes: bool = False) -> Any:
        if values is None:
            return None
        several = np.ndim(values) == 3 and waves is not None
        return checked_array(
            values, (len(waves), *shape) if several and waves is not None else shape, name, where, holes
        )

    matrix, power, weight = stack(matrix, "the target"), stack(power, "power"), stack(weight, "weight")
    least_db, most_db = stack(least_db, "least_db", True), stack(most_db, "most_db", True)
    if least_db is not None and (least_db > 0.0).any():
        raise OutOfRange(
            f"least_db is {np.nanmax(least_db):g} dB, more light than enters", where=where, remedy="give 0 dB or less"
        )
    if least_db is None and most_db is not None:
        least_db = np.full(most_db.shape, np.nan)
    if most_db is None and least_db is not None:
        most_db = np.full(least_db.shape, np.nan)
    if matrix is not None and power is not None:
        raise WrongUsage(
            "matrix and power are both given", where=where, remedy="leave one out: a matrix has its powers"
        )
    if matrix is None and power is None and least_db is None and not dark:
        raise WrongUsage("the target asks for nothing", where=where, remedy="give matrix, power, state, dark or bands")
    for name, array, high in (("power", power, 1.0), ("weight", weight, np.inf)):
        if array is not None and ((array < 0.0) | (array > high)).any():
            at = np.argwhere((array < 0.0) | (array > high))[0]
            raise OutOfRange(
                f"{name} in row {at[-2] + 1} column {at[-1] + 1} is {array[tuple(at)]:g}",
                where=where,
                remedy="give " + ("a share from 0 to 1" if name == "power" else "a number from 0"),
            )
    if dark:
        outside = [d for d in dark if not 0 <= d < shape[0]]
        if outside:
            raise WrongSize(
                f"there is no output at position {outside[0]}", where=where, remedy="name outputs that exist"
            )
        if matrix is None and power is None and least_db is None:
            # a shape to know the size by: nothing is asked of it
            least_db, most_db = np.full(shape, np.nan), np.full(shape, np.nan)
    if matrix is not None:
        matrix = matrix.astype(complex)
    return Target(
        matrix,
        free,
        source,
        None if power is None else power.astype(float),
        None if weight is None else weight.astype(float),
        waves,
        over,
        tuple(int(d) for d in dark),
        least_db,
        most_db,
        float(scale),
    )


def _fail(where: str, key: str, value: Any, remedy: str) -> UnsoundFile:
    return UnsoundFile(f"{key} is {value!r}", where=where, remedy=remedy)


def _cells(value: Any, key: str, folder: Path, where: str) -> np.ndarray:
    """Rows of numbers, of cells as text, or the name of a file beside the target file."""
    if isinstance(value, str):
        path = folder / value
        if path.suffix.lower() not in (".npy", ".csv") or not path.is_file():
            raise _fail(where, key, value, "name a .npy or .csv file beside the target file, or write rows of cells")
        return read_matrix(path)
    rows = value if isinstance(value, list) else None
    if not rows or not all(isinstance(row, list) and row for row in rows):
        raise _fail(where, key, value, "write a list of rows, one for each output")
    if len({len(row) for row in rows}) != 1:
        raise WrongSize(f"{key} has rows of different length", where=where, remedy="give each row a cell per input")
    return np.array([[_cell(cell, key, where) for cell in row] for row in rows])


def _cell(cell: Any, key: str, where: str) -> complex:
    if isinstance(cell, int | float) and not isinstance(cell, bool):
        return complex(cell)
    if isinstance(cell, str):
        try:
            return complex(cell.strip().replace(" ", "").replace("i", "j"))
        except ValueError:
            pass
    raise _fail(where, f"a cell of {key}", cell, 'write numbers, or "0.5-0.2j"')


def _real(cells: np.ndarray, key: str, where: str) -> np.ndarray:
    if np.abs(cells.imag).any():
        at = np.argwhere(cells.imag)[0]
        raise _fail(
            where, f"{key} in row {at[0] + 1} column {at[1] + 1}", complex(cells[tuple(at)]), "write real numbers"
        )
    return cells.real


def _number(value: Any, key: str, where: str) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float):
        raise _fail(where, key, value, "write a number")
    if not np.isfinite(value):
        raise NotFinite(f"{key} is {value}", where=where, remedy="write a finite number")
    return float(value)


def _flag(text: dict[str, Any], key: str, where: str) -> bool:
    value = text.get(key, False)
    if not isinstance(value, bool):
        raise _fail(where, key, value, "write true or false")
    return value


def _ports(value: Any, key: str, names: Sequence[str], where: str) -> list[int]:
    if not isinstance(value, list) or not value:
        raise _fail(where, key, value, f'write a list of port names, such as ["{names[0]}"]')
    rows = {name: row for row, name in enumerate(names)}
    for name in value:
        if not isinstance(name, str):
            raise _fail(where, key, name, f'write the name of a port, such as "{names[0]}"')
        if name not in rows:
            raise unknown_name(f"{key}: port", str(name), names, where)
    if len(set(value)) != len(value):
        raise _fail(where, key, value, "name each port once")
    return [rows[name] for name in value]


def _wavelengths(value: Any, where: str) -> np.ndarray:
    if isinstance(value, dict):
        if set(value) != {"from", "to", "count"}:
            raise _fail(where, "wavelengths_nm", value, "write {from = 1540.0, to = 1560.0, count = 5}")
        count = value["count"]
        if isinstance(count, bool) or not isinstance(count, int) or not 2 <= count <= COUNT_MOST:
            raise _fail(where, "wavelengths_nm count", count, f"write a whole number from 2 to {COUNT_MOST}")
        ends = [_number(value[k], f"wavelengths_nm {k}", where) for k in ("from", "to")]
        return np.linspace(ends[0], ends[1], count)
    if not isinstance(value, list) or not value:
        raise _fail(where, "wavelengths_nm", value, "write a list of wavelengths in nm")
    return np.array([_number(w, "wavelengths_nm", where) for w in value])


def _spread(array: np.ndarray, shape: tuple[int, int], rows: list[int], columns: list[int]) -> np.ndarray:
    """An array over the ports that matter, put in its place among all ports; one of full size as it is."""
    if array.shape == shape or array.shape != (len(rows), len(columns)):
        return array  # of a wrong size: refused where it is checked
    whole: np.ndarray = np.zeros(shape, array.dtype)
    whole[np.ix_(rows, columns)] = array
    return whole


def _bands(
    bands: Any, shape: tuple[int, int], inputs: Sequence[str], outputs: Sequence[str], where: str
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Wavelengths, least_db and most_db of all bands together."""
    if not isinstance(bands, list) or not all(isinstance(band, dict) for band in bands):
        raise _fail(where, "band", bands, "write a [[band]] table for each band")
    asked = []
    for k, band in enumerate(bands, 1):
        place = f"{where} band {k}"
        for key in band:
            if key not in BAND_KEYS:
                raise unknown_name("key", key, BAND_KEYS, place)
        for key in ("from", "to", "wavelengths_nm"):
            if key not in band:
                raise MissingRow(f"'{key}' is missing", where=place, remedy="each band names two ports and its ends")
        if ("least_db" in band) == ("most_db" in band):
            raise WrongUsage("give either least_db or most_db", where=place, remedy="least_db for a pass band")
        (column,), (row,) = (
            _ports([band["from"]], "from", inputs, place),
            _ports([band["to"]], "to", outputs, place),
        )
        ends = _wavelengths(band["wavelengths_nm"], place)
        points = band.get("points", BAND_POINTS)
        if isinstance(points, bool) or not isinstance(points, int) or not 1 <= points <= COUNT_MOST:
            raise _fail(place, "points", points, f"write a whole number from 1 to {COUNT_MOST}")
        waves = np.linspace(ends[0], ends[-1], points) if len(ends) == 2 else ends
        key = "least_db" if "least_db" in band else "most_db"
        value = _number(band[key], key, place)
        if key == "least_db" and value > 0.0:
            raise OutOfRange(f"least_db is {value:g} dB, more light than enters", where=place, remedy="write 0 or less")
        asked.append((waves, row, column, key, value))
    waves = np.unique(np.concatenate([a[0] for a in asked]))
    limits = {key: np.full((len(waves), *shape), np.nan) for key in ("least_db", "most_db")}
    for own, row, column, key, value in asked:
        at = np.searchsorted(waves, own)
        stricter = np.fmax if key == "least_db" else np.fmin
        limits[key][at, row, column] = stricter(limits[key][at, row, column], value)
    return waves, limits["least_db"], limits["most_db"]


def read_wish(
    path: Path,
    shape: tuple[int, int],
    free: str = "nothing",
    inputs: Sequence[str] | None = None,
    outputs: Sequence[str] | None = None,
) -> Target:
    """A target file.

    Parameters
    ----------
    shape : (outputs, inputs) of the mesh
    free : counts where it is not "nothing"; else what the file says
    inputs, outputs : names of the mesh's ports, by default in1, in2, .. and out1, out2, ..

    Raises
    ------
    UnsoundFile and findings under it, WrongUsage, OutOfReach
        With file, key, value, what is allowed and what to do.
    """
    where = str(path)
    try:
        text = tomllib.loads(read_text(path))
    except tomllib.TOMLDecodeError as problem:
        raise UnsoundFile(f"not readable as TOML: {problem}", where=where, remedy="correct it there") from None
    try:
        return _wish(text, path, shape, free, inputs, outputs)
    except WrongUsage as finding:  # what the file asks, not what stands on the command line
        raise UnsoundFile(finding.what, where=finding.where or where, remedy=finding.remedy) from None
    except Finding as finding:
        finding.where = finding.where or where
        raise


def _wish(
    text: dict[str, Any],
    path: Path,
    shape: tuple[int, int],
    free: str,
    inputs: Sequence[str] | None,
    outputs: Sequence[str] | None,
) -> Target:
    where = str(path)
    in_names = [f"in{k + 1}" for k in range(shape[1])] if inputs is None else list(inputs)
    out_names = [f"out{k + 1}" for k in range(shape[0])] if outputs is None else list(outputs)
    for key in text:
        if key not in KEYS:
            raise unknown_name("key", key, KEYS, where)
    free = free if free != "nothing" else text.get("free", "nothing")
    check_free(free)
    only = "only_inputs" in text or "only_outputs" in text
    columns = _ports(text.get("only_inputs", in_names), "only_inputs", in_names, where)
    rows = _ports(text.get("only_outputs", out_names), "only_outputs", out_names, where)
    matrix = None
    if "matrix" in text:
        value = text["matrix"]
        if isinstance(value, str) and value.partition(":")[0] in TARGETS:
            from meshctl.solver.target import read_target

            matrix = read_target(value, (len(rows), len(columns))).matrix
        else:
            matrix = _cells(value, "matrix", path.parent, where)
    if _flag(text, "dilate", where):
        return _dilated(text, matrix, shape, free, rows if only else None, columns if only else None, where)
    if "largest" in text:
        raise WrongUsage("largest is given without dilate", where=where, remedy="write dilate = true beside it")
    made: dict[str, Any] = {"free": free, "source": where, "over": text.get("over", "mean")}
    weight = None
    if only:
        weight = _spread(np.ones((len(rows), len(columns))), shape, rows, columns)
    if "weight" in text:
        weight = _spread(
            _real(_cells(text["weight"], "weight", path.parent, where), "weight", where), shape, rows, columns
        )
    if "state" in text:
        if matrix is not None or "power" in text or only:
            raise WrongUsage("state stands beside another wish", where=where, remedy="leave the other out")
        matrix, weight = _state(text["state"], shape, in_names, where)
    elif matrix is not None:
        matrix = _spread(matrix, shape, rows, columns)
    if "power" in text:
        made["power"] = _spread(
            _real(_cells(text["power"], "power", path.parent, where), "power", where), shape, rows, columns
        )
    if "wavelengths_nm" in text:
        made["wavelengths_nm"] = _wavelengths(text["wavelengths_nm"], where)
    if "dark" in text:
        made["dark"] = _ports(text["dark"], "dark", out_names, where)
    if "band" in text:
        if "wavelengths_nm" in text or matrix is not None or "power" in text:
            raise WrongUsage(
                "bands stand beside matrix, power or wavelengths_nm",
                where=where,
                remedy="leave these out: bands have their own",
            )
        made["wavelengths_nm"], made["least_db"], made["most_db"] = _bands(
            text["band"], shape, in_names, out_names, where
        )
    if "over" in text and len(made.get("wavelengths_nm", ())) < 2:
        raise WrongUsage("over is given for a single wavelength", where=where, remedy="give wavelengths_nm or bands")
    nearest = _flag(text, "nearest", where)
    plain = weight is None and not nearest and not {"wavelengths_nm", "dark", "power"} & set(made)
    if matrix is not None and plain:
        return make_target(matrix, shape, free, where)
    return make_wish(shape, matrix=matrix, weight=weight, **made)


def _state(state: Any, shape: tuple[int, int], in_names: list[str], where: str) -> tuple[np.ndarray, np.ndarray]:
    if not isinstance(state, dict) or set(state) != {"input", "fields"}:
        raise _fail(where, "state", state, 'write {input = "in1", fields = ["0.6", "0.8j"]}')
    (column,) = _ports([state["input"]], "state input", in_names, where)
    fields = state["fields"]
    if not isinstance(fields, list) or len(fields) != shape[0]:
        raise _fail(where, "state fields", fields, f"write {shape[0]} fields, one for each output")
    matrix, weight = np.zeros(shape, complex), np.zeros(shape)
    matrix[:, column] = [_cell(cell, "state fields", where) for cell in fields]
    weight[:, column] = 1.0
    return matrix, weight


def _dilated(
    text: dict[str, Any],
    matrix: np.ndarray | None,
    shape: tuple[int, int],
    free: str,
    rows: list[int] | None,
    columns: list[int] | None,
    where: str,
) -> Target:
    from meshctl.solver.dilation import dilated_target

    beside = [key for key in text if key not in ("matrix", "free", "only_inputs", "only_outputs", "dilate", "largest")]
    if matrix is None or beside:
        what = f"{beside[0]} stands beside it" if beside else "it has no matrix"
        raise WrongUsage(
            f"dilate = true, and {what}", where=where, remedy="give matrix, and free or only_ keys at most"
        )
    return dilated_target(
        matrix, shape, free, where, largest=_flag(text, "largest", where), outputs=rows, inputs=columns
    )
