"""The mesh as text: what is drawn, that it fits, and that its light is the response's."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from meshctl.errors import LoopInNet, OutOfRange, UnknownKey, WrongSize
from meshctl.mesh.building import Tables, build_mesh
from meshctl.mesh.description import parse_description
from meshctl.mesh.lattices import LATTICES, PLANE_SIZES
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.response import Response
from meshctl.optics.elements import cell_block
from meshctl.picture import describe, draw, light
from meshctl.picture_lanes import LINES, layout_of
from meshctl.picture_light import output_powers
from meshctl.picture_states import sites_of

SOURCE = """
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
margin = 0.8
[actuator.phase]
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0
[channel]
bits = 16
min_v = 0.0
max_v = 10.0
"""
RING = """
format = 1
name = "ring"
wavelength_nm = 1550.0
inputs = ["in1"]
outputs = ["out1"]
elements = [["split1", "coupler"], ["inner", "phase"], ["split2", "coupler"], ["turn", "phase"]]
tunable = ["inner", "turn"]
links = ["in1 split1.a1", "split1.b1 inner.a", "inner.b split2.a1", "split1.b2 split2.a2", "split2.b1 out1",
         "split2.b2 turn.a", "turn.b split1.a2"]
[cells.entry]
elements = ["split1", "inner", "split2"]
"""
MIXED = """
format = 1
name = "mixed"
wavelength_nm = 1550.0
inputs = ["left", "right"]
outputs = ["upper", "lower"]
elements = [["mix", "coupler"], ["swap", "crossing"], ["half", "coupler", {cross_power = 0.4}]]
tunable = ["mix"]
links = ["left mix.a1", "right mix.a2", "mix.b1 swap.a1", "mix.b2 swap.a2", "swap.b1 upper", "swap.b2 half.a1",
         "half.b1 lower"]
"""


def explicit(text):
    return build_mesh(parse_description(text + SOURCE), Tables(), text)


def inner(mesh, value_of):
    """Settings whose inner phases follow a rule of the cell's name; the others are 0."""
    pairs = [name.split(".") for name in mesh.net.setting_names]
    return np.array([value_of(cell) if role == "inner" else 0.0 for cell, role in pairs])


def by_chance(mesh, seed=1):
    return np.random.default_rng(seed).uniform(0.0, np.pi, mesh.net.n_settings)


def drawn_glyphs(mesh, settings):
    sites = sites_of(mesh, settings)
    return layout_of(mesh.net, sites, LINES).glyph


def states_of(panels):
    """Lines between lanes: each panel has two lines of heads, then a lane on every second line."""
    return [line for panel in panels for line in panel.splitlines()[3::2]]


@pytest.fixture(scope="module")
def four():
    return lattice("rectangular", modes=4)


@pytest.mark.parametrize("shape", ["rectangular", "triangular"])
def test_identity_shows_only_bar_cells(shape):
    mesh = lattice(shape, modes=4)
    settings = inner(mesh, lambda _: np.pi)
    drawing = draw(mesh, settings).split("\n\n")[0]
    # the response is the judge of what the settings do
    np.testing.assert_allclose(np.abs(Response(mesh.net, mesh.as_built).matrix(settings)), np.eye(4), atol=1e-12)
    assert drawing.count("═") == mesh.net.n_cells
    assert not set("╳╲╱╮╭╯╰!o") & set(drawing.replace("out", ""))


def test_cross_state_takes_lanes_through(four):
    drawing = draw(four, inner(four, lambda _: 0.0)).split("\n\n")[0]
    assert drawing.count("╳") == four.net.n_cells
    assert drawing.count("╲ ╱") == drawing.count("╱ ╲") == four.net.n_cells
    assert "═" not in drawing


def test_digit_tells_tenths_of_cross_power(four):
    # cross power of an ideal cell is cos^2(inner / 2), closed form
    for tenth in range(1, 10):
        phase = 2 * np.arccos(np.sqrt(tenth / 10))
        assert drawn_glyphs(four, inner(four, lambda _, phase=phase: phase)) == [str(tenth)] * 6


def test_cross_power_counts_splitting_errors():
    mesh = lattice("rectangular", modes=2)
    errors = np.where(mesh.net.kind == 0, 0.15, 0.0)
    mesh = replace(mesh, as_built=replace(mesh.as_built, error_rad=errors))
    block = cell_block(1.1, 0.4, 0.15, 0.15)  # written out from the coupler and phase blocks
    sites = sites_of(mesh, np.array([0.4, 1.1, 0.0, 0.0]))
    np.testing.assert_allclose(sites.cross_power, abs(block[1, 0]) ** 2, rtol=1e-12)  # rounding


def test_angle_of_gap_gives_its_cross():
    mesh = lattice("rectangular", modes=4, cell="gap")
    angle = np.array([0.7 if name.endswith("coupler") else 0.2 for name in mesh.net.setting_names])
    # sin^2 of the angle, the coupler's definition
    np.testing.assert_allclose(sites_of(mesh, angle).cross_power, np.sin(0.7) ** 2, rtol=1e-12)


@pytest.mark.parametrize("shape", [shape for shape in LATTICES if shape not in PLANE_SIZES])
@pytest.mark.parametrize("cell", ["mzi", "gap"])
def test_light_at_outputs_is_matrix(shape, cell):
    mesh = lattice(shape, modes=4, cell=cell)
    settings = by_chance(mesh)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    for column, name in enumerate(mesh.net.inputs):
        lit = light(mesh, settings, name)
        np.testing.assert_allclose(output_powers(mesh.net, lit), power[:, column], atol=1e-12)  # rounding


def test_light_in_losses_is_matrix():
    mesh = lattice("triangular", modes=5)
    loss = np.random.default_rng(2).uniform(0.0, 1.0, mesh.net.n_elements)
    mesh = replace(mesh, as_built=replace(mesh.as_built, loss_db=loss))
    settings = by_chance(mesh)
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings)) ** 2
    lit = light(mesh, settings, "in2")
    np.testing.assert_allclose(output_powers(mesh.net, lit), power[:, 1], atol=1e-12)  # rounding


def test_path_of_permutation_is_heavy(four):
    # all cells cross turn the order of the inputs round: in1 leaves at out4
    settings = inner(four, lambda _: 0.0)
    lines = draw(four, settings, lit=light(four, settings, "in1")).splitlines()
    rows = {line.split()[0]: line for line in lines if line.startswith("in")}
    assert "━ out4    0.0" in rows["in4"]
    assert rows["in1"].startswith("in1 ━━")
    assert [name for name, line in rows.items() if "━ out" in line] == ["in4"]
    assert all("dark" in rows[name] for name in ("in1", "in2", "in3"))


def test_strokes_thin_out_with_power():
    mesh = lattice("rectangular", modes=2)
    ends = []
    for wanted in (-1.0, -5.0, -15.0, -30.0, -50.0):
        settings = inner(mesh, lambda _, p=10 ** (wanted / 10): 2 * np.arccos(np.sqrt(p)))
        picture = draw(mesh, settings, lit=light(mesh, settings, "in1"))
        ends.append(next(line for line in picture.splitlines() if "out2" in line).split(" out2")[0][-1])
    assert "".join(ends) == "━╍─╌·"


@pytest.mark.parametrize("shape", LATTICES)
@pytest.mark.parametrize("width", [32, 80, 200])
@pytest.mark.parametrize("plain", [False, True])
def test_every_line_stays_within_width(shape, width, plain):
    loops = shape in PLANE_SIZES
    size = {"rows": 2, "columns": 3} if loops else {"modes": 4 if shape == "switch" else 16}
    mesh = lattice(shape, **size)
    settings = by_chance(mesh)
    lit = None if loops else light(mesh, settings, "in1")
    for picture in (draw(mesh, width=width, ascii=plain), draw(mesh, settings, lit=lit, width=width, ascii=plain)):
        assert max(map(len, picture.splitlines())) <= width
        assert picture.isascii() or not plain
        assert all(name in picture for name in (*mesh.net.inputs, *mesh.net.outputs))


def test_each_panel_shows_its_columns():
    mesh = lattice("rectangular", modes=16)
    picture = draw(mesh, by_chance(mesh), width=48)
    heads = [line for line in picture.splitlines() if line.startswith("columns")]
    assert heads == ["columns 1 to 8 of 16", "columns 9 to 16 of 16"]
    panels = picture.split("\n\n")[:2]
    marks = [sum(line.count(mark) for mark in "123456789═╳") for line in states_of(panels)]
    assert sum(marks) == mesh.net.n_cells
    assert all(panels[1].splitlines()[2 * k + 2].startswith(f"{k + 1:>4} ") for k in range(16))


def test_tree_rows_stand_by_output():
    mesh = lattice("tree", modes=8)
    names = layout_of(mesh.net, sites_of(mesh), LINES)
    assert names.exit == [f"out{k}" for k in range(1, 9)]
    assert names.entrance == ["in1", *[""] * 7]
    assert names.column == [0, 1, 1, 2, 2, 2, 2]


def test_switch_cells_never_share_place():
    mesh = lattice("switch", modes=4)
    layout = layout_of(mesh.net, sites_of(mesh), LINES)
    taken = [(c, r) for c, a, b in zip(layout.column, layout.upper, layout.lower, strict=True) for r in range(a, b + 1)]
    assert len(taken) == len(set(taken))
    assert all(f" {name}" in draw(mesh) for name in ("x11", "x12", "x21", "x22"))


def test_no_plan_draws_unknown_states(four):
    drawing, legend = draw(four).split("\n\n")
    assert drawing.count("  o") == four.net.n_cells
    assert "not known" in legend
    assert "bar" not in legend


def test_faults_are_marked_and_named(four):
    names = four.net.setting_names
    stuck = np.where(np.array(names) == "c1_2.inner", 0.5, np.nan)
    dead = np.array(four.actuator_names) == "c2_1.outer"
    mesh = replace(
        four,
        as_built=replace(four.as_built, stuck_rad=stuck),
        actuators=replace(four.actuators, dead=dead),
    )
    settings = inner(mesh, lambda _: np.pi)
    assert drawn_glyphs(mesh, settings) == ["═", "!", "!", "═", "═", "═"]
    assert "c1_2.inner: stuck at 0.500 rad" in draw(mesh, settings)
    assert "c2_1.outer: its actuator is dead" in draw(mesh)
    assert "c1_2: cross power 0.94, inner 0.500 rad (stuck at 0.500 rad)" in describe(mesh, settings)


def test_fixed_parts_stand_in_brackets():
    mesh = explicit(MIXED)
    settings = np.array([np.pi / 4])
    picture = draw(mesh, settings, lit=light(mesh, settings, "left"))
    assert drawn_glyphs(mesh, settings) == ["5", "(x)", "(4)"]
    assert "× lane ends in no port" in picture
    # half of the light reaches each lane; of the lower one 0.4 is lost at the open end: 0.5 * 0.6
    np.testing.assert_allclose(output_powers(mesh.net, light(mesh, settings, "left")), [0.5, 0.3], rtol=1e-12)


def test_net_with_loop_is_table():
    mesh = explicit(RING)
    settings = np.array([2 * np.arccos(np.sqrt(0.3)), 0.0])
    rows = [line.split() for line in draw(mesh, settings).splitlines()]
    assert ["entry", "3", "0.30", "in1", "turn", "out1", "turn"] in rows
    assert describe(mesh, settings) == "entry: cross power 0.30, inner 1.982 rad"
    with pytest.raises(LoopInNet):
        light(mesh, settings, "in1")


def test_large_mesh_has_character_each():
    mesh = lattice("triangular", modes=70)
    settings = by_chance(mesh)
    picture = draw(mesh, settings, lit=light(mesh, settings, "in70"))
    drawing = picture[: picture.index("dB at the outputs")]
    rows = [line.lstrip().split(" ", 1) for line in drawing.splitlines() if line.lstrip()[:1].isdigit()]
    assert "70 lanes: one character for each cell, cell cK_R in column K, row R" in drawing
    assert sum(mark in "123456789═╳" for _, cells in rows[1:] for mark in cells) == 70 * 69 // 2
    assert max(map(len, picture.splitlines())) <= 80


def test_words_follow_the_format(four):
    settings = by_chance(four)
    lines = describe(four, settings).splitlines()
    value = dict(zip(four.net.setting_names, settings, strict=True))
    inner_rad, outer_rad = value["c1_2.inner"], value["c1_2.outer"]
    power = np.cos(inner_rad / 2) ** 2  # closed form of the ideal cell
    assert len(lines) == four.net.n_cells
    assert lines[1] == f"c1_2: cross power {power:.2f}, inner {inner_rad:.3f} rad, outer {outer_rad:.3f} rad"
    assert describe(four).splitlines()[1] == "c1_2: inner, outer"


def test_wrong_words_and_sizes_refused(four):
    settings = np.zeros(four.net.n_settings)
    with pytest.raises(UnknownKey, match="in9"):
        light(four, settings, "in9")
    with pytest.raises(WrongSize):
        draw(four, settings[1:])
    with pytest.raises(WrongSize):
        draw(four, settings, lit=np.zeros((3, 4)))
    with pytest.raises(OutOfRange):
        draw(four, width=10)


def test_light_changes_lanes_at_crossings():
    # rows and columns cross behind each coupler: straight on, in1 is on its own lane up to the first crossing only
    mesh = load(Path(__file__).resolve().parent.parent / "meshes" / "dunlin")
    settings = np.full(4, np.pi)
    rows = {line[:5].strip(): line for line in draw(mesh, settings, lit=light(mesh, settings, "in1")).splitlines()}
    first = rows["in1"].index("╲")
    assert set(rows["in1"][5:first]) == {"━"}
    assert "━" not in rows["in1"][first:]
    assert "━" not in rows["add1"][5:first]
    assert "━" in rows["add1"][first:]
    assert "━" not in rows["in2"]
