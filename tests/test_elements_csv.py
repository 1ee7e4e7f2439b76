"""The flat list in light order, multiplied by a program of its own, is the predicted matrix."""

import csv

import numpy as np
import pytest
from conftest import multiplied

from meshctl.errors import LoopInNet
from meshctl.mesh.lightorder import HEAD, light_order
from meshctl.mesh.meshfile import lattice, load, write
from meshctl.mesh.response import Response

AGREES = 1e-10  # what a program that reads the list may count on
TAP = '[[insert]]\nname = "{0}"\nkind = "tap"\nat = "{1}"\nmonitor = "m{0}"\ncross_power = 0.03\n'


def listed(path):
    """Rows of the file as (kind, lane, lane or None, actual)."""
    with path.open(newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert [int(row["order"]) for row in rows] == list(range(len(rows)))
    return [
        (row["kind"], int(row["mode_a"]), int(row["mode_b"]) if row["mode_b"] else None, float(row["actual"]))
        for row in rows
    ]


def product(rows, n_out, n_in):
    lanes = 1 + max(max(a, b or 0) for _, a, b, _ in rows)
    return multiplied(rows, max(lanes, n_out, n_in))[:n_out, :n_in]


def built(chip, lattice_toml, shape, more="", cell="mzi", modes=6):
    """A lattice with known splitting errors, phase offsets and losses in every part."""
    plain = load(chip(lattice_toml(shape, modes, cell, more=more), "plain"))
    rng = np.random.default_rng(11)
    kinds = dict(zip(plain.net.names.elements, plain.net.kind.tolist(), strict=True))
    rows = [[name, rng.normal(0, 0.03) if kind in (0, 1) else "", rng.uniform(0, 0.3)] for name, kind in kinds.items()]
    losses = "[guide]\nloss_db_per_cm = 2.0\n"
    return chip(
        lattice_toml(shape, modes, cell, more=losses + more),
        "built",
        elements=[["element", "error_rad", "loss_db"], *rows],
    )


@pytest.mark.parametrize(
    ("shape", "cell", "more"),
    [
        ("rectangular", "mzi", ""),
        ("triangular", "mzi", ""),
        ("rectangular", "gap", ""),
        ("rectangular", "mzi", TAP.format("t1", "c2_1.b1") + TAP.format("t2", "in3")),
        ("rectangular", "mzi", '[[insert]]\nname = "l"\nkind = "loss"\nat = "out2"\nloss_db = 3.0\n'),
        ("rectangular", "mzi", '[[insert]]\nname = "g"\nkind = "guide"\nat = "out2"\nlength_um = 3000.0\n'),
    ],
)
def test_list_multiplied_is_predicted_matrix(run, tmp_path, chip, lattice_toml, shape, cell, more):
    folder = built(chip, lattice_toml, shape, more, cell)
    plan, flat, matrix = (tmp_path / name for name in ("plan.json", "list.csv", "matrix.npy"))
    assert run("solve", folder, "haar:4", "-o", plan, "--best-effort")[0] == 0
    assert run("elements", folder, plan, "-o", flat)[0] == 0
    assert run("predict", folder, plan, "--matrix", matrix)[0] == 0
    wanted = np.load(matrix)
    assert np.abs(product(listed(flat), *wanted.shape) - wanted).max() <= AGREES
    # and the losses are in it: no column keeps all its light
    assert (np.abs(wanted) ** 2).sum(0).max() < 0.99


@pytest.mark.parametrize(("shape", "cell"), [("tree", "mzi"), ("tree", "gap"), ("switch", "gap"), ("switch", "mzi")])
def test_other_lattices_have_their_list(chip, lattice_toml, shape, cell):
    mesh = load(built(chip, lattice_toml, shape, cell=cell, modes=4 if shape == "switch" else 8))
    settings = np.random.default_rng(1).uniform(0, 6, mesh.net.n_settings)
    rows = [(r.kind, r.mode_a, r.mode_b, r.actual) for r in light_order(mesh.net, mesh.as_built, settings, settings)]
    wanted = Response(mesh.net, mesh.as_built).matrix(settings)
    assert np.abs(product(rows, *wanted.shape) - wanted).max() <= AGREES


def test_outputs_in_other_order_end_with_crossings(chip):
    toml = (
        'format = 1\nname = "x"\nwavelength_nm = 1550.0\ninputs = ["i1", "i2", "i3"]\noutputs = ["o1", "o2", "o3"]\n'
        'elements = [["x", "coupler", {angle_rad = 0.4}], ["p", "phase", {phase_rad = 0.9}]]\n'
        'links = ["i1 x.a1", "i2 x.a2", "i3 p.a", "x.b1 o2", "x.b2 o3", "p.b o1"]\n'
    )
    mesh = load(chip(toml))
    rows = list(light_order(mesh.net, mesh.as_built, np.empty(0), np.empty(0)))
    flat = [(r.kind, r.mode_a, r.mode_b, r.actual) for r in rows]
    # by hand: o1 hears i3, o2 and o3 the coupler of i1 and i2
    c, s = np.cos(0.4), 1j * np.sin(0.4)
    assert rows[-1].kind == "crossing"
    assert np.abs(product(flat, 3, 3) - [[0, 0, np.exp(0.9j)], [c, s, 0], [s, c, 0]]).max() <= 1e-15


def test_list_has_its_documented_columns(run, tmp_path):
    write(lattice("rectangular", modes=3), tmp_path / "m")
    run("solve", tmp_path / "m", "dft", "-o", tmp_path / "p.json")
    code, said, _ = run("elements", tmp_path / "m", tmp_path / "p.json", "-o", tmp_path / "l.csv")
    lines = (tmp_path / "l.csv").read_text().splitlines()
    assert lines[0] == ",".join(HEAD) == "order,element,kind,mode_a,mode_b,value,actual"
    assert [line.split(",")[1] for line in lines[1:5]] == ["c1_1.outer", "c1_1.split1", "c1_1.inner", "c1_1.split2"]
    assert f"{len(lines) - 1} parts" in said
    assert code == 0


def test_value_is_wish_and_actual_is_force(run, tmp_path, chip, lattice_toml):
    folder = chip(
        lattice_toml(modes=2), elements=[["element", "error_rad"], ["c1_1.split1", 0.02], ["c1_1.inner", 0.3]]
    )
    run("solve", folder, "dft", "-o", tmp_path / "p.json")
    run("elements", folder, tmp_path / "p.json", "-o", tmp_path / "l.csv")
    with (tmp_path / "l.csv").open(newline="") as lines:
        rows = {row["element"]: (float(row["value"]), float(row["actual"])) for row in csv.DictReader(lines)}
    assert rows["c1_1.split1"] == (np.pi / 4, np.pi / 4 + 0.02)
    # the setting, rounded to 16 bits of volts (1e-3 rad and better), plus the known error
    assert abs(rows["c1_1.inner"][1] - rows["c1_1.inner"][0] - 0.3) <= 1e-3


def test_net_with_loop_has_no_list(chip):
    toml = (
        'format = 1\nname = "r"\nwavelength_nm = 1550.0\n'
        'elements = [["x", "coupler"], ["p", "phase"]]\nlinks = ["p1 x.a1", "p2 x.b1", "x.b2 p.a", "p.b x.a2"]\n'
    )
    mesh = load(chip(toml))
    with pytest.raises(LoopInNet, match="loop") as caught:
        list(light_order(mesh.net, mesh.as_built, np.empty(0), np.empty(0)))
    assert caught.value.exit_code == 4
