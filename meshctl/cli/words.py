"""Commands and their words, as data for argparse.

Public: parser.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable

from meshctl import __version__

EPILOG = "Exit codes: 0 done, 1 a bug, 2 wrong words, 3 unsound file, 4 out of reach, 5 bench, 130 interrupted."
FREE = ("nothing", "outputs", "inputs", "both")
TARGET = "FILE.npy, FILE.csv, FILE.toml, identity, dft, hadamard, haar:SEED, permutation:3,1,2,4"


class _Parser(argparse.ArgumentParser):
    """argparse with one clear line for wrong words."""

    def error(self, message: str) -> None:  # type: ignore[override]
        self.exit(2, f"{self.prog}: {message}; see '{self.prog} --help'\n")


def _plain(text: str) -> bool:
    """False for what only Python takes for a number: 1_0, or digits of other scripts."""
    return text.isascii() and "_" not in text


def _whole(low: int) -> Callable[[str], int]:
    def convert(text: str) -> int:
        try:
            value = int(text if _plain(text) else "")
        except ValueError:
            raise argparse.ArgumentTypeError(f"'{text}' is no whole number") from None
        if value < low:
            raise argparse.ArgumentTypeError(f"{value} is below {low}")
        return value

    return convert


def _positive(text: str) -> float:
    try:
        value = float(text if _plain(text) else "")
    except ValueError:
        raise argparse.ArgumentTypeError(f"'{text}' is no number") from None
    if not 0.0 < value < 1e9:
        raise argparse.ArgumentTypeError(f"{text} is not above 0")
    return value


def parser() -> argparse.ArgumentParser:
    """The parser of all commands."""
    top = _Parser(
        prog="meshctl",
        description="From a wished matrix, routes or a power split to drive voltages on a programmable photonic chip.",
        epilog=EPILOG,
        allow_abbrev=False,
    )
    top.add_argument("--version", action="version", version=f"meshctl {__version__}")
    verbs = top.add_subparsers(dest="command", metavar="COMMAND", title="commands")

    def verb(name: str, help_: str, example: str, *, json: bool = True) -> argparse.ArgumentParser:
        made = verbs.add_parser(
            name,
            help=help_,
            description=f"{help_[0].upper()}{help_[1:]}.",
            epilog=f"Example: {example}",
            allow_abbrev=False,
        )
        made.set_defaults(run=name.replace("-", "_"))
        if json:
            made.add_argument("--json", action="store_true", help="print one JSON object")
        return made

    new = verb("new", "make a mesh folder from a lattice", "meshctl new rectangular mychip --modes 8 --built 1")
    new.add_argument(
        "shape", metavar="SHAPE", help="rectangular, triangular, benes, tree, switch, hexagonal, square, trigrid"
    )
    new.add_argument("folder", metavar="FOLDER", help="the new folder; it must not exist yet")
    new.add_argument("--modes", type=_whole(1), metavar="N", help="number of lanes")
    new.add_argument("--rings", type=_whole(1), metavar="R", help="rings of hexagons")
    new.add_argument("--rows", type=_whole(1), metavar="R", help="rows of hexagons, squares or pairs of triangles")
    new.add_argument("--columns", type=_whole(1), metavar="C", help="columns of them")
    new.add_argument("--cell", choices=("mzi", "gap"), default="mzi", help="Mach-Zehnder or tunable coupler")
    new.add_argument("--spare", type=_whole(0), default=0, metavar="K", help="extra columns")
    new.add_argument("--balanced", action="store_true", help="dummy losses where lanes skip a column")
    new.add_argument("--built", type=_whole(0), metavar="SEED", help="as built: errors drawn from the spread")

    check = verb("check", "is the folder sound; what is on the chip; its losses", "meshctl check meshes/plover8")
    check.add_argument("mesh", metavar="MESH")

    show = verb("show", "the mesh and its states as text", "meshctl show meshes/plover8 plan.json --input in1")
    show.add_argument("mesh", metavar="MESH")
    show.add_argument("plan", metavar="PLAN", nargs="?")
    show.add_argument("--input", metavar="PORT", help="show where this port's light goes")
    show.add_argument("--width", type=_whole(40), metavar="COLUMNS", help="characters a line, default: the terminal's")
    show.add_argument("--ascii", action="store_true", help="no line-drawing characters")
    show.add_argument(
        "--words", action="store_true", help="a line of words for every cell, for logs and screen readers"
    )
    _stale(show)

    solve = verb("solve", "voltages for a target matrix", "meshctl solve meshes/plover8 haar:7 -o plan.json")
    solve.add_argument("mesh", metavar="MESH")
    solve.add_argument("target", metavar="TARGET", help=TARGET)
    solve.add_argument("-o", "--out", metavar="PLAN", help="write the plan to this file")
    solve.add_argument("--free", choices=FREE, default="nothing", help="port phases that do not count")
    descend = solve.add_mutually_exclusive_group()
    descend.add_argument(
        "--refine", action="store_true", default=None, help="descend on the chip model; default where not exact"
    )
    descend.add_argument("--no-refine", dest="refine", action="store_false", help="the closed form alone")
    solve.add_argument("--starts", type=_whole(1), default=1, metavar="N", help="descents from different settings")
    solve.add_argument("--seconds", type=_positive, metavar="S", help="stop refining after this time")
    solve.add_argument("--seed", type=_whole(0), default=0, metavar="SEED", help="of the further starts")
    solve.add_argument("--least-power", action="store_true", help="use what the matrix does not see to save power")
    solve.add_argument("--best-effort", action="store_true", help="hold what is out of reach at its limit")
    solve.add_argument("--explain", action="store_true", help="what keeps it from being closer: causes and elements")

    solve.add_argument("--save", metavar="NAME", help="keep the plan as a state of the mesh folder")

    route = verb(
        "route",
        "voltages that send light from ports to ports, or divide it",
        "meshctl route meshes/plover8 in1:out3 in2:out1=0.7,out5=0.3 -o plan.json",
    )
    route.add_argument("mesh", metavar="MESH")
    route.add_argument(
        "routes", metavar="IN:OUT", nargs="+", help="IN:OUT, IN:OUT=SHARE,OUT=SHARE, IN:OUT@12cells, IN:OUT@85ps"
    )
    route.add_argument("-o", "--out", metavar="PLAN", help="write the plan to this file")
    route.add_argument("--save", metavar="NAME", help="keep the plan as a state of the mesh folder")
    route.add_argument("--avoid", metavar="CELL,..", default="", help="cells and fixed parts that no route may pass")
    route.add_argument(
        "--priorities", metavar="P,..", help="a number for each route; the lowest are left out where not all go"
    )
    route.add_argument(
        "--unused", choices=("cross", "bar", "cleanest", "rest"), default="", help="state of cells that no route needs"
    )
    route.add_argument(
        "--band", metavar="FROM:TO:COUNT", default="", help="wavelengths of the check, default 10 nm either side"
    )
    route.add_argument("--seconds", type=_positive, default=10.0, metavar="S", help="of search and proof together")
    route.add_argument("--seed", type=_whole(0), default=0, metavar="SEED", help="of the order in which routes go")
    route.add_argument(
        "--best-effort", action="store_true", help="leave out what does not go together, hold actuators at their limits"
    )

    states = verb(
        "states",
        "named states of a mesh folder: list, show, compare, solve again",
        "meshctl states meshes/dunlin through 'in1>drop1'",
    )
    states.add_argument("mesh", metavar="MESH")
    states.add_argument("name", metavar="NAME", nargs="?", help="show this state")
    states.add_argument("other", metavar="OTHER", nargs="?", help="and what changes from it to this one")
    states.add_argument("--renew", metavar="NAME", help="solve this state's wish again, or all of them: all")
    _stale(states)

    predict = verb(
        "predict",
        "what the chip does with a plan's codes",
        "meshctl predict meshes/plover8 plan.json --wavelengths 1540:1560:5 -o spectrum.csv",
    )
    predict.add_argument("mesh", metavar="MESH")
    predict.add_argument("plan", metavar="PLAN")
    predict.add_argument("--matrix", metavar="FILE.npy", help="write the field matrix")
    predict.add_argument(
        "--wavelengths", metavar="FROM:TO:COUNT", help="in nm; FROM:TO:COUNTthz; channels itu:GHZ:FIRST:LAST"
    )
    predict.add_argument(
        "--between", metavar="IN:OUT", action="append", default=[], help="only this port pair; may be repeated"
    )
    predict.add_argument("-o", "--out", metavar="FILE.csv", help="write amplitude, power, phase and group delay")
    predict.add_argument("--figure", metavar="FILE.png", help="draw power and group delay over wavelength")
    predict.add_argument(
        "--feature", metavar="IN:OUT[:peak|:dip]", help="free spectral range, bandwidth, extinction, finesse"
    )
    _stale(predict)

    elements = verb(
        "elements", "flat list of parts in light order", "meshctl elements meshes/plover8 plan.json -o list.csv"
    )
    elements.add_argument("mesh", metavar="MESH")
    elements.add_argument("plan", metavar="PLAN")
    elements.add_argument("-o", "--out", metavar="FILE.csv", required=True)
    _stale(elements)

    cost = verb(
        "energy",
        "what holding and switching states costs, side by side",
        "meshctl energy meshes/plover8 plan.json meshes/dunlin other.json",
    )
    cost.add_argument("pairs", metavar="MESH PLAN", nargs="+", help="a mesh and its plan, as often as wished")
    _stale(cost)

    far = verb(
        "tolerance",
        "how far dies will be off, and what the next chip needs",
        "meshctl tolerance meshes/plover8 plan.json --require 'fidelity>=0.99' --until 1% -o run",
    )
    far.add_argument("mesh", metavar="MESH")
    far.add_argument("plan", metavar="PLAN")
    far.add_argument("--trials", type=_whole(1), default=1000, metavar="N", help="most dies drawn, default 1000")
    far.add_argument("--seed", type=_whole(0), default=0, metavar="SEED", help="of all dies")
    far.add_argument(
        "--policy", choices=("as-set", "corrected", "refined"), default="as-set",
        help="the plan's codes on each die; each die corrected; each die solved anew",
    )  # fmt: skip
    far.add_argument(
        "--require", metavar="MEASURE>=NUMBER", action="append", default=[],
        help="what a good die meets, such as 'fidelity>=0.99'; may be repeated",
    )  # fmt: skip
    far.add_argument(
        "--until", metavar="WIDTH", help="stop where the yield is known to plus or minus this, such as 1%%"
    )
    far.add_argument("--scale", type=_positive, default=1.0, metavar="F", help="all of [spread] times F")
    far.add_argument("--spec", action="store_true", help="how far each cause may scatter for the wished yield")
    far.add_argument("--yield", dest="wish", default="95%", metavar="SHARE", help="the wished yield, default 95%%")
    far.add_argument(
        "--lattices", action="store_true", help="compare rectangles, triangles, spares and Benes with this spread"
    )
    far.add_argument("--processes", type=_whole(1), default=1, metavar="N", help="of this machine, default 1")
    far.add_argument("--cluster", metavar="ADDRESS", help="a dask scheduler that shares the trials out")
    far.add_argument("-o", "--out", metavar="FOLDER", help="keep trials as they come; goes on where a run broke off")
    far.add_argument("--figures", metavar="FOLDER", help="histogram, yield against tolerance, sensitivity map")
    _stale(far)

    board = verb(
        "dashboard",
        "the mesh, its states and its drive on a terminal",
        "meshctl dashboard meshes/plover8 plan.json",
        json=False,
    )
    board.add_argument("mesh", metavar="MESH")
    board.add_argument("plan", metavar="PLAN", nargs="?", help="a plan file, or a state by name")
    _stale(board)

    verb("demo", "the main job on a shipped mesh, with what it means", "meshctl demo")
    return top


def _stale(made: argparse.ArgumentParser) -> None:
    made.add_argument("--stale-ok", action="store_true", help="take a plan made before the mesh changed")
