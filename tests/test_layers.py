"""Imports point down, heavy libraries stay where they are allowed, and start-up loads only what it needs."""

import ast
import subprocess
import sys
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parent.parent / "meshctl"
LAYERS = (
    {"errors"},
    {"units"},
    {"optics", "laws"},
    {"mesh"},
    {"solver", "drive"},
    {"plan"},
    {"calibration", "tolerances", "bench"},
    {"session"},
    {"picture", "plots", "report"},
    {"work"},
    {"api", "cli", "screens"},
)
RANK = {room: rank for rank, rooms in enumerate(LAYERS) for room in rooms}
ON_DEMAND = {("plan", "plots"), ("cli", "screens")}  # a plan draws itself in a notebook; one command opens the screens
ALLOWED = {
    "numba": {"optics", "drive", "solver"},
    "matplotlib": {"plots", "report"},
    "textual": {"screens"},
    "pyvisa": {"bench"},
    "dask": {"tolerances"},
    "skrf": {"mesh", "optics"},
    "pydantic": {"mesh", "plan"},
}


def room_of(path):
    return named(path.relative_to(PACKAGE).parts[0].removesuffix(".py"))


def named(module):
    """The room of a top-level module; picture_light and its like are one room with picture."""
    return module.split("_")[0]


def imports(path):
    """Absolute module names that a file imports, those for type checking alone left out."""
    tree = ast.parse(path.read_text())
    hidden = {
        id(inner)
        for node in ast.walk(tree)
        if isinstance(node, ast.If) and "TYPE_CHECKING" in ast.unparse(node.test)
        for inner in ast.walk(node)
    }
    for node in ast.walk(tree):
        if id(node) in hidden:
            continue
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{path}: relative import"
            yield node.module
            if node.module == "meshctl":
                yield from (f"meshctl.{alias.name}" for alias in node.names)


FILES = sorted(p for p in PACKAGE.rglob("*.py") if p.parent != PACKAGE or p.stem not in ("__init__", "__main__"))


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_imports_point_down_or_sideways_within(path):
    room = room_of(path)
    for name in imports(path):
        top, _, rest = name.partition(".")
        if top != "meshctl" or not rest or rest == "__version__":
            continue
        other = named(rest.split(".")[0])
        if (room, other) in ON_DEMAND:
            continue
        assert other == room or RANK[other] < RANK[room] or {other, room} <= LAYERS[8], f"{path} imports {name}"


@pytest.mark.parametrize("path", FILES, ids=lambda p: str(p.relative_to(PACKAGE)))
def test_heavy_libraries_stay_in_their_rooms(path):
    for name in imports(path):
        top = name.split(".")[0]
        assert room_of(path) in ALLOWED.get(top, {room_of(path)}), f"{path} imports {name}"


def loaded(tmp_path, *arguments):
    """Modules loaded by one run of the command: top-level names, and those of scipy's parts."""
    code = (
        "import sys\nfrom meshctl.cli import main\n"
        f"code = main({list(arguments)!r})\n"
        "print('LOADED', code, *sorted({m.split('.')[0] for m in sys.modules}),"
        " *sorted(m for m in sys.modules if m.startswith('scipy.') and m.count('.') == 1))"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=tmp_path, capture_output=True, text=True, check=True)
    _, exit_code, *names = done.stdout.strip().splitlines()[-1].split()
    assert exit_code == "0", done.stderr
    return set(names)


MESH = str(PACKAGE.parent / "meshes" / "plover8")
HEAVY = {"jax", "jaxlib", "matplotlib", "textual", "networkx", "pandas", "skrf", "dask", "pyvisa", "rich"}


def test_help_loads_no_numpy_at_all(tmp_path):
    assert not loaded(tmp_path, "--help") & (HEAVY | {"numpy", "scipy", "numba", "pydantic"})


def test_main_verbs_load_nothing_heavy(tmp_path):
    solve = loaded(tmp_path, "solve", MESH, "haar:1", "-o", "plan.json")
    assert not solve & (HEAVY | {"scipy.sparse", "scipy.optimize", "scipy.interpolate", "scipy.stats"})
    for verb in (["check", MESH], ["show", MESH, "plan.json"], ["predict", MESH, "plan.json"]):
        assert not loaded(tmp_path, *verb) & HEAVY, verb
