"""Light in meshes whose light runs both ways: their matrix, its derivatives, one cell stepped."""

import numpy as np
import pytest
from dense_light import dense_matrix, rf_matrix
from loop_meshes import REFLECTING, WAVES, loop_toml, response, some

from meshctl.errors import LoopInNet
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.plane import square
from meshctl.mesh.response import circuit_of
from meshctl.mesh.stepping import Stepping
from meshctl.mesh.waves import Waves


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


@pytest.mark.sample
@pytest.mark.slow
def test_eighteen_rings_leave_no_residual():
    mesh = lattice("hexagonal", rings=18, cell="gap")
    used = response(mesh)
    used.matrix(some(mesh))
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
