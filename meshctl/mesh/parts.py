"""What one part is, from the keys of its table in mesh.toml.

Public: Part, part_of, KIND_NAMES.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from meshctl.errors import DuplicateName, MissingRow, NotFinite, OutOfRange, UnsoundFile, WrongSize
from meshctl.mesh.measured import TIMES, Measured, read_measured
from meshctl.mesh.quantities import QUANTITIES
from meshctl.mesh.tables import unknown_name
from meshctl.optics.elements import GUIDE, ISOLATION, KINDS, MEASURED2, MEASURED4, MIRROR, TERMINATOR, TETHER
from meshctl.units import amplitude_from_loss_db, loss_db_from_power

KIND_NAMES = tuple(dict.fromkeys(kind.name for kind in KINDS))
_TWINS = {"cross_power": "angle_rad", "transmitted_power": "loss_db", "reflected_power": "reflection_db"}
ROUNDING = 1e-12


@dataclass(frozen=True, eq=False)
class Part:
    """One part as it enters a net."""

    kind: int  # row of KINDS
    nominal: float = 0.0  # rad, or dB
    length_um: float = 0.0
    reflection: complex = 0j  # field that it returns, on either side
    measured: Measured | None = None


def part_of(kind: int, given: dict[str, Any], where: str, folder: Path | None = None) -> Part:
    """A part from the keys that stand with it.

    Parameters
    ----------
    kind : row of KINDS; the first of its name where several share one
    given : keys and values as written
    where : place in mesh.toml, for messages
    folder : the mesh folder, for measured files

    Raises
    ------
    UnknownKey, NotFinite, OutOfRange, MissingRow, DuplicateName, UnsoundFile or what `read_measured` raises
    """
    keys = KINDS[kind].value_keys
    for key in given:
        if key not in keys:
            raise unknown_name("key", key, keys, where)
    if kind in (MEASURED2, MEASURED4):
        return _measured(given, where, folder)
    for key, value in given.items():
        if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
            raise NotFinite(f"{key} is {value!r}", where=where, remedy=f"write {QUANTITIES[key].allowed}")
        if not QUANTITIES[key].allows(value):
            raise OutOfRange(f"{key} is {value:g}", where=where, remedy=f"allowed is {QUANTITIES[key].allowed}")
        if _TWINS.get(key) in given:
            raise DuplicateName(f"{_TWINS[key]} and {key} say the same twice", where=where, remedy="keep one")
    if kind in (ISOLATION, TETHER, MIRROR, TERMINATOR):
        return _reflecting(kind, given, where)
    if not given:
        default = KINDS[kind].default
        if default is None:
            raise MissingRow(f"a {KINDS[kind].name} needs {' or '.join(keys)}", where=where, remedy="add it")
        return Part(kind, default)
    key, number = next(iter(given.items()))
    if key == "cross_power":
        return Part(kind, math.asin(math.sqrt(number)))
    return Part(kind, 0.0, float(number)) if kind == GUIDE else Part(kind, float(number))


def _reflecting(kind: int, given: dict[str, Any], where: str) -> Part:
    if "reflection_db" in given:
        returned = amplitude_from_loss_db(given["reflection_db"])
    else:
        returned = math.sqrt(given.get("reflected_power", 0.0))
    if "reflection_rad" in given and not returned:
        raise MissingRow(
            "reflection_rad stands alone", where=where, remedy="add reflection_db or reflected_power, or remove it"
        )
    if kind == TERMINATOR:
        return Part(kind, reflection=cmath.rect(returned, given.get("reflection_rad", 0.0)))
    name, turn = KINDS[kind].name, given.get("reflection_rad", math.pi / 2)
    if kind == MIRROR and not returned:
        raise MissingRow("a mirror needs reflection_db or reflected_power", where=where, remedy="add it")
    if "transmitted_power" in given:
        passes = math.sqrt(given["transmitted_power"])
    elif "loss_db" in given:
        passes = amplitude_from_loss_db(given["loss_db"])
    elif returned:  # nothing is lost but what returns
        passes = math.sqrt(1.0 - returned**2)
    else:
        raise MissingRow(
            f"{'an' if name[0] in 'aeiou' else 'a'} {name} needs loss_db or transmitted_power, or a reflection",
            where=where,
            remedy="add one",
        )
    # eigenvalues of [[r, t], [t, r]] are r + t and r - t
    most = passes**2 + returned**2 + 2 * passes * returned * abs(math.cos(turn))
    if most > 1.0 + ROUNDING:
        raise UnsoundFile(
            f"the {name} makes light: it passes {passes**2:.6g} and returns {returned**2:.6g} of the power"
            + (f", {turn:g} rad apart" if "reflection_rad" in given else ""),
            where=where,
            remedy="raise loss_db or reflection_db, or bring reflection_rad nearer to pi/2",
        )
    returns = cmath.rect(returned, turn) if "reflection_rad" in given else 1j * returned
    return Part(kind, loss_db_from_power(passes**2), reflection=returns)


def _measured(given: dict[str, Any], where: str, folder: Path | None) -> Part:
    file = given.get("file")
    if not isinstance(file, str) or not file:
        raise MissingRow("a measured part needs 'file'", where=where, remedy="name a .s2p, .s4p or .csv file")
    if Path(file).is_absolute() or ".." in Path(file).parts:
        raise UnsoundFile(f"file '{file}' lies outside the mesh folder", where=where, remedy="copy it into the folder")
    if folder is None:
        raise UnsoundFile(f"file '{file}' has no folder to lie in", where=where, remedy="load the mesh from its folder")
    time = given.get("time")
    if time is not None and time not in TIMES:
        raise unknown_name("time convention", str(time), TIMES, where)
    ports = given.get("ports")
    suffix = Path(file).suffix.lower()
    if ports is None:
        if suffix not in (".s2p", ".s4p"):
            raise MissingRow(
                f"the ports of '{file}' are not known",
                where=where,
                remedy='add ports = ["a", "b"], or ["a1", "a2", "b1", "b2"]',
            )
        ports = KINDS[MEASURED2 if suffix == ".s2p" else MEASURED4].ports
    for kind in (MEASURED2, MEASURED4):
        known = KINDS[kind].ports
        if isinstance(ports, list | tuple) and sorted(map(str, ports)) == sorted(known):
            data = read_measured(folder / file, tuple(ports), time, where)
            order = [list(ports).index(name) for name in known]
            turned = Measured(
                data.source,
                data.thz,
                data.magnitude[:, order][:, :, order],
                data.phase_rad[:, order][:, :, order],
            )
            return Part(kind, measured=turned)
    raise WrongSize(
        f"ports is {ports!r}; a measured part has the ports a, b or a1, a2, b1, b2",
        where=where,
        remedy="name each once, in the order of the file",
    )
