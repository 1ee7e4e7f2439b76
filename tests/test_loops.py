"""Meshes whose light runs both ways: their lattices in a folder, their matrix and its derivatives."""

import numpy as np
import pytest
from by_hand import ring_settings, write_plan
from dense_light import dense_matrix, rf_matrix

from meshctl.errors import LoopInNet
from meshctl.mesh.meshfile import MESH_TOML, lattice, load, write
from meshctl.mesh.plane import hexagonal, square
from meshctl.mesh.response import Response, circuit_of
from meshctl.mesh.ringing import ringing
from meshctl.mesh.stepping import Stepping
from meshctl.mesh.waves import Waves

WAVES = np.array([1541.0, 1550.0, 1563.0])
REFLECTING = """
[[insert]]
name = "t1"
kind = "tether"
at = "c7.b1"
loss_db = 0.02
reflection_db = 25.0
[[insert]]
name = "g1"
kind = "isolation"
at = "c12.a2"
transmitted_power = 0.9
reflected_power = 0.06
[[insert]]
name = "m1"
kind = "mirror"
at = "c16.b2"
reflected_power = 0.3
[[insert]]
name = "x1"
kind = "crossing"
at = "c3.b1 c20.a1"
[[insert]]
name = "e1"
kind = "terminator"
at = "p5"
reflection_db = 14.0
reflection_rad = 0.7
"""


def loop_toml(shape="hexagonal", size="rings = 2", cell="gap", more="", loss=1.0):
    return (
        f'format = 1\nname = "loops"\nwavelength_nm = 1550.0\n[lattice]\nshape = "{shape}"\n{size}\ncell = "{cell}"\n'
        f"side_um = 200.0\n[guide]\nn_eff = 2.44\nn_group = 4.2\nloss_db_per_cm = {loss}\n"
        "[coupler]\nloss_db = 0.03\nangle_slope_per_nm = 0.002\n"
        '[actuator.coupler]\nlaw = "gap"\ngap_nm = 200.0\nstiffness_n_per_m = 2.0\narea_um2 = 20.0\ndecay_nm = 50.0\n'
        'rest_rad = 3.05\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n' + more
    )


def some(mesh, seed=0):
    return np.random.default_rng(seed).uniform(0, 2 * np.pi, mesh.net.n_settings)


def response(mesh):
    return Response(mesh.net, mesh.as_built)


# ---- lattices in a folder
@pytest.mark.parametrize("cell", ["gap", "mzi"])
@pytest.mark.parametrize(
    ("shape", "size", "cells", "ends"),
    # counted: 9 R^2 - 3 R, 24 R - 12; 3 r c + 2 r + 2 c - 1; r (c + 1) + c (r + 1), 4 (r + c); 3 r c + r + c
    [
        ("hexagonal", {"rings": 2}, 30, 36),
        ("hexagonal", {"rows": 2, "columns": 3}, 27, None),
        ("square", {"rows": 2, "columns": 3}, 17, 20),
        ("trigrid", {"rows": 2, "columns": 2}, 16, 16),
    ],
)
def test_loop_lattices_have_counted_parts(shape, size, cells, ends, cell):
    net = lattice(shape, **size, cell=cell).net
    assert net.n_cells == cells
    assert net.n_settings == 2 * cells
    assert net.inputs == net.outputs == tuple(f"p{k + 1}" for k in range(len(net.externals)))
    assert ends is None or len(net.externals) == ends


def test_loop_cells_name_their_parts():
    names = lattice("hexagonal", rings=1, cell="gap").net.names
    assert names.elements[:5] == ["c1.common1", "c1.common2", "c1.coupler", "c1.guide1", "c1.guide2"]
    assert names.cells == ["c1", "c2", "c3", "c4", "c5", "c6"]
    other = lattice("square", rows=1, columns=1).net.names.elements[:6]
    assert other == ["c1.split1", "c1.upper", "c1.lower", "c1.split2", "c1.guide1", "c1.guide2"]


def test_both_commons_share_one_setting():
    net = lattice("hexagonal", rings=1, cell="gap").net
    row = net.names.element_row
    assert net.setting_of[row["c2.common1"]] == net.setting_of[row["c2.common2"]] == 2
    assert net.setting_names[:4] == ["c1.common1", "c1.coupler", "c2.common1", "c2.coupler"]
    arms = lattice("hexagonal", rings=1).net
    assert arms.setting_names[:2] == ["c1.upper", "c1.lower"]


def test_cell_is_its_product_of_blocks():
    mesh = lattice("square", rows=1, columns=1)
    settings = np.zeros(8)  # three cells cross, so that light turns round the square no further than one corner
    settings[:2] = 0.4, 1.7
    found = response(mesh).matrix(settings)
    # C(pi/4) diag(upper, lower) C(pi/4): what goes into cell 1 outside and leaves it there
    half = np.array([[1, 1j], [1j, 1]]) / np.sqrt(2)
    cell = half @ np.diag(np.exp(1j * settings[:2])) @ half
    own = np.flatnonzero(mesh.net.cell_of[mesh.net.element_of_port[mesh.net.input_ports]] == 0)
    assert len(own) == 2
    bar = found[own[1], own[0]]
    assert min(abs(bar - cell[0, 0]), abs(bar - cell[1, 1])) < 1e-14
    assert (np.abs(found[:, own[0]]) ** 2).sum() == pytest.approx(1, abs=1e-13)


def test_lattice_ends_match_the_plane():
    plane, mesh = hexagonal(2), lattice("hexagonal", rings=2, cell="gap")
    owner = mesh.net.cell_of[mesh.net.element_of_port[mesh.net.input_ports]]
    assert np.array_equal(owner, plane.rim // 4)
    assert np.array_equal(mesh.net.cell_xy_um, 250.0 * plane.cell_xy)


def test_new_loop_mesh_reads_back(run, tmp_path):
    for words in (("hexagonal", "--rings", 2), ("square", "--rows", 2, "--columns", 3), ("trigrid", "--rows", 1)):
        code, said, remarks = run("new", words[0], tmp_path / words[0], *words[1:], "--cell", "gap", "--built", 5)
        if words[0] == "trigrid":
            assert code == 2
            assert "a trigrid lattice is sized by rows and columns" in remarks
        else:
            assert (code, remarks) == (0, "")
            mesh = load(tmp_path / words[0])
            assert f"{mesh.net.n_cells} cells, {2 * mesh.net.n_cells} settings" in said
            assert np.abs(mesh.as_built.error_rad).max() > 0


@pytest.mark.parametrize(
    ("edit", "said"),
    [
        (("rings = 2", ""), "a hexagonal lattice needs 'rings' or 'rows' and 'columns', not nothing"),
        (("rings = 2", "rings = 2\nrows = 3"), "needs 'rings' or 'rows' and 'columns', not 'rings' and 'rows'"),
        (("rings = 2", "rings = 0"), "0 is out of range; allowed is 1 to 64"),
        (("rings = 2", "rings = 2\nmodes = 8"), "a hexagonal lattice takes no 'modes'"),
        (("side_um = 200.0", "side_um = -1.0"), "-1 is out of range; allowed is above 0"),
        (("hexagonal", "hexagon"), "shape 'hexagon' is not known; did you mean 'hexagonal'?"),
        (('"hexagonal"\nrings = 2', '"rectangular"\nmodes = 4'), "a rectangular lattice takes no 'side_um'"),
    ],
)
def test_wrong_loop_lattices_are_refused(run, chip, edit, said):
    code, _, remarks = run("check", chip(loop_toml().replace(*edit)))
    assert code == 3
    assert MESH_TOML in remarks
    assert said in remarks


# ---- the matrix
@pytest.mark.parametrize("cell", ["gap", "mzi"])
@pytest.mark.parametrize("more", ["", REFLECTING])
def test_loops_agree_with_dense_solve(chip, cell, more):
    mesh = load(chip(loop_toml(cell=cell, more=more)))
    settings = some(mesh)
    found = response(mesh).matrix(settings, WAVES)
    expected = [dense_matrix(mesh, settings, w) for w in WAVES]
    # some hundred parts of amplitude below one, losses keep the condition small
    assert np.abs(found - expected).max() < 1e-12
    assert np.abs(response(mesh).matrix(settings) - found[1]).max() < 1e-14
    assert found.shape == (3, 35, 35) if more else (3, 36, 36)


@pytest.mark.parametrize(("shape", "size"), [("hexagonal", "rings = 2"), ("square", "rows = 2\ncolumns = 2")])
def test_loops_agree_with_scikit_rf(chip, shape, size):
    more = REFLECTING if shape == "hexagonal" else ""
    mesh = load(chip(loop_toml(shape, size, more=more)))
    settings = some(mesh, 1)
    used = response(mesh)
    # scikit-rf 2.2 innerconnect_s; the bounds are the project's own
    assert np.abs(used.matrix(settings, WAVES[2:])[0] - rf_matrix(mesh, settings, WAVES[2])).max() <= 1e-10
    assert used.waves.residual <= 1e-12


@pytest.mark.slow
def test_six_rings_agree_with_scikit_rf(chip):
    mesh = load(chip(loop_toml(size="rings = 6", more=REFLECTING)))
    settings = some(mesh, 2)
    used = response(mesh)
    assert mesh.net.n_cells == 306
    # scikit-rf 2.2, some 15 s; the bounds are the project's own
    assert np.abs(used.matrix(settings) - rf_matrix(mesh, settings)).max() <= 1e-10
    assert used.waves.residual <= 1e-12


@pytest.mark.slow
def test_eighteen_rings_compile_within_seconds():
    import time

    mesh = lattice("hexagonal", rings=18, cell="gap")
    started = time.perf_counter()
    used = response(mesh)
    used.matrix(some(mesh))
    # the project's own bound for the first solve of 2862 cells, ordering included
    assert time.perf_counter() - started < 10
    assert used.waves.residual <= 1e-12


def test_curlew_is_symmetric_and_keeps_energy():
    mesh = load("meshes/curlew")
    found = response(mesh).matrix(some(mesh, 3), WAVES)
    # reciprocity; and no part makes light
    assert np.abs(found - found.swapaxes(1, 2)).max() < 1e-13
    assert (np.linalg.norm(found, ord=2, axis=(1, 2)) < 1.0).all()
    assert np.abs(np.diagonal(found, axis1=1, axis2=2)).max() > 1e-4  # the tether reflects


def test_lossless_loops_keep_all_power(chip):
    toml = loop_toml(loss=0.0).replace("loss_db = 0.03", "loss_db = 0.0")
    mirror = '[[insert]]\nname = "m"\nkind = "mirror"\nat = "c9.b1"\nreflected_power = 0.4\n'
    mesh = load(chip(toml + mirror))
    found = response(mesh).matrix(some(mesh), WAVES)
    # conservation of energy; loops may ring a hundredfold
    assert np.abs(found.conj().swapaxes(1, 2) @ found - np.eye(36)).max() < 1e-11


@pytest.mark.parametrize("cell", ["gap", "mzi"])
def test_loop_free_nets_agree_both_ways(cell):
    mesh = lattice("rectangular", modes=5, cell=cell, built=3)
    used, settings = response(mesh), some(mesh)
    assert not used.loops
    waves = Waves(mesh.net, mesh.as_built)
    value = used.values(settings)
    # two methods, some hundred roundings
    assert np.abs(waves.matrix(value, WAVES) - used.matrix(settings, WAVES)).max() < 1e-13
    for ours, other in zip(used.slope_per_nm(settings, WAVES), waves.slope_per_nm(value, WAVES), strict=True):
        assert np.abs(ours - other).max() < 1e-11 * np.abs(ours).max()
    g = np.random.default_rng(1).normal(size=(3, 5, 5)) + 0j
    by_value = waves.pullback(value, lambda _: g, WAVES)
    moved = mesh.net.setting_of >= 0
    by_setting = np.bincount(mesh.net.setting_of[moved], by_value[moved])
    assert np.abs(by_setting - used.pullback(settings, g, WAVES)).max() < 1e-11


def test_lanes_without_couplers_are_followed(chip):
    toml = (
        'format = 1\nname = "t"\nwavelength_nm = 1550.0\ninputs = ["i1", "i2", "i3"]\noutputs = ["o1", "o2", "o3"]\n'
        'elements = [["g", "guide", {length_um = 100.0}], ["p", "phase", {phase_rad = 0.3}], ["l", "loss", '
        '{loss_db = 2.0}], ["m", "mirror", {reflected_power = 0.0001}], ["n", "loss", {loss_db = 3.0}]]\n'
        'links = ["i1 g.a", "g.b p.a", "p.b o1", "i2 l.a", "l.b m.a", "m.b o2", "i3 n.a", "n.b o3"]\n'
    )
    mesh = load(chip(toml))
    found = response(mesh).matrix(np.zeros(0))
    # by hand: exp(0.3 i) at the centre; 2 dB and sqrt(1 - r^2); 3 dB; the lanes do not mix
    expected = np.diag([np.exp(0.3j), 10 ** (-2 / 20) * np.sqrt(1 - 0.0001), 10 ** (-3 / 20)])
    assert np.abs(found - expected).max() < 1e-14


# ---- derivatives
@pytest.mark.parametrize("cell", ["gap", "mzi"])
def test_gradient_agrees_with_central_differences(chip, cell):
    mesh = load(chip(loop_toml(cell=cell, more=REFLECTING), elements=[["element", "stuck_rad"], ["c4.upper", 0.4]])
                if cell == "mzi" else chip(loop_toml(cell=cell, more=REFLECTING)))  # fmt: skip
    used, settings, rng = response(mesh), some(mesh), np.random.default_rng(4)
    shape = used.matrix(settings, WAVES).shape
    g = rng.normal(size=shape) + 1j * rng.normal(size=shape)
    gradient = used.pullback(settings, g, WAVES)
    step = 1e-6
    for s in [*rng.choice(mesh.net.n_settings, 12, replace=False).tolist(), 6, 7]:
        e = step * (np.arange(mesh.net.n_settings) == s)
        change = (used.matrix(settings + e, WAVES) - used.matrix(settings - e, WAVES)) / (2 * step)
        # central differences: rounding 1e-16 x size / step, and step^2
        assert gradient[s] == pytest.approx((g.conj() * change).sum().real, rel=1e-6, abs=1e-7 * np.abs(gradient).max())
    if cell == "mzi":
        assert gradient[mesh.net.setting_names.index("c4.upper")] == 0.0


def test_cotangent_may_be_a_function(chip):
    mesh = load(chip(loop_toml()))
    used, settings = response(mesh), some(mesh)
    target = np.eye(36)
    given = used.pullback(settings, 2 * (used.matrix(settings) - target))
    assert np.array_equal(used.pullback(settings, lambda m: 2 * (m - target)), given)


def test_wavelength_slope_agrees_with_differences(chip):
    mesh = load(chip(loop_toml(more=REFLECTING)))
    used, settings, step = response(mesh), some(mesh), 1e-5
    matrix, slope = used.slope_per_nm(settings, WAVES)
    numeric = (used.matrix(settings, WAVES + step) - used.matrix(settings, WAVES - step)) / (2 * step)
    assert np.array_equal(matrix, used.matrix(settings, WAVES))
    # central differences: step^2 times the third power of some 10 rad per nm, and rounding / step
    assert np.abs(slope - numeric).max() < 1e-6 * np.abs(slope).max()


# ---- loops that light hardly leaves
@pytest.mark.parametrize("extra_rad", [0.01, 1e-4, 1e-6])
def test_ringing_loop_is_named_with_its_error(extra_rad):
    mesh = lattice("hexagonal", rings=2, cell="gap")
    settings, cells, outer = ring_settings(mesh, extra_rad=extra_rad, phase_rad=0.0)
    used, (into, out) = response(mesh), (mesh.net.inputs.index(name) for name in outer)
    through = used.matrix(settings)[out, into]
    (loop,) = ringing(used, settings, np.array([1549.0, 1550.0]))
    assert set(loop.parts) == set(cells)
    assert loop.wavelength_nm == 1550.0
    # all-pass ring on resonance without loss: the field inside is 1 / (1 - t) round trips, (t - 1) / (1 - t) leaves;
    # both signs turned by the bars
    assert loop.build_up == pytest.approx(1 / (2 * np.sin(extra_rad / 2) ** 2), rel=1e-3)
    # ten times the condition number times rounding is all that may be lost
    assert abs(through - 1) <= loop.error == 10 * loop.build_up * np.finfo(float).eps
    assert used.waves.residual <= 1e-12
    assert "c1" in str(loop)
    assert "1550.000000 nm" in str(loop)


def test_closed_loop_is_named_as_dark():
    mesh = lattice("hexagonal", rings=2, cell="gap")
    settings, cells, _ = ring_settings(mesh, extra_rad=0.0, phase_rad=0.0)
    (loop,) = ringing(response(mesh), settings)
    assert np.isinf(loop.build_up)
    assert set(loop.parts) == set(cells)
    assert "never leaves it" in str(loop)
    settings[mesh.net.setting_is_angle] = 0.7
    assert ringing(response(mesh), settings) == []


def test_predict_names_the_ringing_loop(run, tmp_path):
    run("new", "hexagonal", tmp_path / "m", "--rings", 1)
    toml = tmp_path / "m" / MESH_TOML
    toml.write_text(toml.read_text().replace("bits = 16", "bits = 24"))
    mesh = load(tmp_path / "m")
    remarks = []
    for common in (0.0, np.pi):
        settings = np.zeros(12)
        settings[::2] = np.pi  # every cell bar: the one hexagon is a closed ring, up to the codes
        settings[:2] += common
        write_plan(mesh, settings, tmp_path / "p.json")
        code, said, remark = run("predict", tmp_path / "m", tmp_path / "p.json")
        assert code == 0
        assert "residual" in said
        remarks.append(remark)
    # six bars turn the light by a whole or by half a turn: one of the two resonates
    named = ["warning: light in the loop c1, c2, c4, c6, c5, c3" in remark for remark in remarks]
    assert sorted(named) == [False, True], remarks


@pytest.mark.parametrize("cell", ["gap", "mzi"])
def test_stepped_cell_agrees_with_fresh_solve(chip, cell):
    mesh = load(chip(loop_toml(cell=cell, more=REFLECTING)))
    used, settings, other = response(mesh), some(mesh), some(mesh, 1)
    steps = Stepping(used, settings, 1557.0)
    for c in (0, 13, 29):
        moved = settings.copy()
        moved[2 * c : 2 * c + 2] = other[2 * c : 2 * c + 2]
        fresh = used.matrix(moved, np.array([1557.0]))[0]
        # the same net by a low-rank update; and a step that does something
        assert np.abs(steps.matrix(c, other) - fresh).max() < 1e-12
        assert np.abs(fresh - used.matrix(settings, np.array([1557.0]))[0]).max() > 1e-2


# ---- what a net with loops cannot give
def test_loops_have_no_light_order():
    mesh = lattice("hexagonal", rings=1)
    assert circuit_of(mesh.net) is None
    with pytest.raises(LoopInNet, match="the net has a loop, a link against the light or a part that reflects"):
        response(mesh).blocks(np.zeros(12))


def test_loops_have_no_closed_form(run, chip):
    code, said, remarks = run("solve", chip(loop_toml(size="rings = 1")), "identity", "--no-refine")
    assert (code, said) == (4, "")
    assert "no closed form: this net has a loop" in remarks


def test_square_lattice_keeps_its_two_directions(chip):
    mesh = load(chip(loop_toml("square", "rows = 2\ncolumns = 2")))
    lit = np.abs(response(mesh).matrix(some(mesh))) > 0
    groups = {tuple(np.flatnonzero(row)) for row in lit}
    # two counter-propagating sets, as faces of squares can be coloured like a chessboard; reflection joins them
    assert len(groups) == 2
    assert len(square(2, 2).rim) == sum(map(len, groups))
    mirror = '[[insert]]\nname = "m"\nkind = "mirror"\nat = "c5.b1"\nreflected_power = 0.4\n'
    joined = load(chip(loop_toml("square", "rows = 2\ncolumns = 2", more=mirror), name="joined"))
    lit = np.abs(response(joined).matrix(some(joined))) > 0
    assert lit.sum(axis=1).max() > 8


def test_curlew_is_written_back_equal(tmp_path):
    mesh = load("meshes/curlew")
    again = load(write(mesh, tmp_path / "curlew"))
    assert again.hash == mesh.hash
    assert again.net.setting_names == mesh.net.setting_names
    assert again.net.reflections == mesh.net.reflections
    for a, table in mesh.actuators.tables.items():
        assert np.array_equal(again.actuators.tables[a], table)


def test_curlew_reaches_bar_and_cross():
    mesh = load("meshes/curlew")
    tables = mesh.actuators.tables
    assert len(tables) == 30
    for table in tables.values():
        assert table[0, 1] < np.pi < 1.5 * np.pi < table[-1, 1]
        assert table[-1, 0] < 10.0
