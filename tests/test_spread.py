"""Scatter of dies: distributions and correlations against scipy.stats and closed forms, and what mesh.toml may say."""

import numpy as np
import pytest
from scipy import stats

from meshctl.errors import Finding, OutOfRange, UnknownKey, UnsoundFile
from meshctl.mesh.meshfile import die_tables, lattice, load
from meshctl.mesh.spread import Shape, Spread, drawn
from meshctl.tolerances.dies import Drawing, mesh_of, positions

MESH = lattice("rectangular", modes=8)


def errors_of(spread, cause, dies=200, mesh=MESH):
    drawing = Drawing(mesh, spread)
    return np.array([drawing.errors(drawing.normals(1, k))[cause] for k in range(dies)])


@pytest.mark.parametrize(
    ("distribution", "law"),
    # a uniform law of standard deviation s reaches from -sqrt(3) s to sqrt(3) s
    [("normal", stats.norm(0, 0.02)), ("uniform", stats.uniform(-0.02 * 3**0.5, 2 * 0.02 * 3**0.5))],
)
def test_errors_follow_the_law_they_name(distribution, law):
    found = errors_of(Spread(split_rad=0.02, shapes={"split_rad": Shape(distribution)}), "split_rad")
    assert stats.kstest(found.ravel(), law.cdf).pvalue > 0.01  # seeded: fixed, and 1 in 100 seeds fails


def test_samples_are_drawn_as_they_were_measured():
    measured = np.sort(stats.expon.rvs(size=400, random_state=3) * 0.01)
    spread = Spread(split_rad=0.01, shapes={"split_rad": Shape("samples", samples=measured)})
    found = errors_of(spread, "split_rad").ravel()
    assert np.isin(found, measured).all()
    assert stats.ks_2samp(found, measured).statistic < 0.02  # 22400 draws: 1.36 / sqrt(n) is 0.009


@pytest.mark.parametrize("share", [{"wafer": 1.0}, {"gradient": 0.5, "wafer": 0.2}, {"correlated": 0.6}])
def test_shares_leave_the_standard_deviation_alone(share):
    shape = Shape(correlation_um=500.0 if "correlated" in share else 0.0, **share)
    found = errors_of(Spread(split_rad=0.02, shapes={"split_rad": shape}), "split_rad", dies=3000)
    assert np.sqrt(np.mean(found**2)) == pytest.approx(0.02, rel=0.05)  # whole dies share: 3000 of them, 1.3 %


def test_neighbours_resemble_as_exponential_of_distance():
    spread = Spread(split_rad=0.02, shapes={"split_rad": Shape(correlated=1.0, correlation_um=400.0)})
    found, xy = errors_of(spread, "split_rad", dies=4000), positions(MESH.net)[Drawing(MESH, spread).couplers]
    distance = np.hypot(*(xy[:, None] - xy[None]).transpose(2, 0, 1))
    assert np.abs(np.corrcoef(found.T) - np.exp(-distance / 400.0)).max() < 0.09  # 1 / sqrt(4000) is 0.016


def test_gradients_tilt_over_the_whole_die():
    spread = Spread(split_rad=0.02, shapes={"split_rad": Shape(gradient=1.0)})
    die, xy = errors_of(spread, "split_rad", dies=1)[0], positions(MESH.net)[Drawing(MESH, spread).couplers]
    plane = np.column_stack([np.ones(len(xy)), xy])
    assert np.allclose(plane @ np.linalg.lstsq(plane, die, rcond=None)[0], die, atol=1e-12)


def test_two_causes_correlate_in_one_part():
    spread = Spread(p2pi_share=0.02, r_share=0.03, between=(("p2pi_share", "r_share", -0.7),))
    drawing = Drawing(MESH, spread)
    dies = [drawing.normals(1, k) for k in range(300)]
    first, second = (np.concatenate([d[c] for d in dies]) for c in ("p2pi_share", "r_share"))
    assert np.corrcoef(first, second)[0, 1] == pytest.approx(-0.7, abs=0.02)  # 19200 pairs: 0.004


def test_a_die_depends_on_its_number():
    drawing = Drawing(MESH, Spread(split_rad=0.02, phase_rad=0.1))
    late, again, other = drawing.normals(1, 7), drawing.normals(1, 7), drawing.normals(2, 7)
    assert all(np.array_equal(late[c], again[c]) and not np.array_equal(late[c], other[c]) for c in late)


def test_scales_stretch_errors_and_draw_nothing_new():
    drawing = Drawing(MESH, Spread(split_rad=0.02, phase_rad=0.1))
    normals = drawing.normals(1, 0)
    plain, wide = drawing.errors(normals), drawing.errors(normals, {"split_rad": 3.0})
    assert np.allclose(wide["split_rad"], 3.0 * plain["split_rad"])
    assert np.array_equal(wide["phase_rad"], plain["phase_rad"])


def test_stuck_actuators_come_as_often_as_said():
    drawing = Drawing(MESH, Spread(stuck_share=0.1))
    dies = [drawing.errors(drawing.normals(1, k)) for k in range(300)]
    share = np.mean([d["stuck_share"].mean() if d else 0.0 for d in dies])
    assert share == pytest.approx(0.1, abs=0.01)  # 19200 draws: 0.002
    assert mesh_of(drawing, dies[0]).actuators.dead.sum() == dies[0]["stuck_share"].sum()


def test_losses_never_fall_below_zero_decibel():
    drawing = Drawing(MESH, Spread(loss_db=0.5))
    assert mesh_of(drawing, drawing.errors(drawing.normals(1, 0))).as_built.loss_db.min() >= 0.0


def test_dies_of_new_meshes_stay_as_they_were():
    draw = drawn(Spread(split_rad=0.02, p2pi_share=0.01), np.array([True, False]), np.zeros(2), 2, 5)
    rng = np.random.default_rng(5)  # the order that mesh folders written earlier were drawn in
    split, _, _, p2pi, _ = (rng.standard_normal(n) for n in (1, 1, 2, 2, 2))
    assert draw.error_rad[0] == 0.02 * split[0]
    assert np.array_equal(draw.p2pi_factor, np.exp(0.01 * p2pi))
    assert die_tables(lattice("rectangular", modes=4), 3) == die_tables(lattice("rectangular", modes=4), 3)


WRONG = {
    "split_rad = -0.01": ("split_rad", "-0.01", "0 to 1 rad"),
    "stuck_share = 1.5": ("stuck_share", "1.5", "0 to 1"),
    "temperature_k = 2.0": ("temperature_k", "2", "phase_rad_per_k"),
    "crosstalk_share = 0.1": ("crosstalk_share", "0.1", "no crosstalk"),
    "[spread.shape.splitt_rad]\nwafer = 0.1": ("splitt_rad", "did you mean 'split_rad'"),
    "[spread.shape.split_rad]\nwafer = 0.7\ngradient = 0.6": ("split_rad", "1.3", "at most 1"),
    "[spread.shape.split_rad]\ncorrelated = 0.7": ("split_rad", "correlation_um"),
    "[spread.shape.laser_nm]\ngradient = 0.7": ("laser_nm", "no place"),
    '[spread.shape.split_rad]\ndistribution = "samples"': ("split_rad", "file"),
    'between = [["split_rad", "phase_rad", 0.5]]': ("split_rad", "phase_rad", "same parts"),
    'between = [["p2pi_share", "r_share", 1.0]]': ("correlation matrix", "p2pi_share and r_share 1", "not positive"),
}


@pytest.mark.parametrize("lines", WRONG)
def test_wrong_spreads_are_refused_in_words(lines, chip, lattice_toml):
    with pytest.raises(Finding) as caught:
        Drawing(load(chip(lattice_toml(more=f"[spread]\n{lines}\n"))))
    assert isinstance(caught.value, UnsoundFile)
    assert all(word in str(caught.value) for word in WRONG[lines]), str(caught.value)


def test_three_correlations_may_not_be_positive():
    pairs = (("p2pi_share", "r_share", -0.9), ("r_share", "stuck_share", -0.9), ("p2pi_share", "stuck_share", -0.9))
    with pytest.raises(UnsoundFile, match=r"least eigenvalue is -0\.8"):  # 1 - 2 * 0.9
        Spread(p2pi_share=0.1, between=pairs).check("mesh.toml spread")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("loss_db\n0.1\n", "head the samples with 'split_rad'"),
        ("split_rad\n0.1\nnan\n0.1\n", "nan"),
        ("split_rad\n0.1\nx\n", "line 3"),
        ("split_rad\n0.1\n", "at least 5"),
    ],
)
def test_wrong_samples_are_refused_in_words(text, words, chip, lattice_toml):
    shape = '[spread.shape.split_rad]\ndistribution = "samples"\nfile = "s.csv"\n'
    folder = chip(lattice_toml(more=shape))
    (folder / "s.csv").write_text(text)
    with pytest.raises(UnsoundFile, match=words):
        load(folder)


def test_samples_give_a_cause_its_size(chip, lattice_toml):
    folder = chip(lattice_toml(more='[spread.shape.split_rad]\ndistribution = "samples"\nfile = "s.csv"\n'))
    (folder / "s.csv").write_text("split_rad\n0.01\n-0.01\n0.01\n-0.01\n0.01\n")
    assert load(folder).spread.split_rad == pytest.approx(0.01)
    with pytest.raises(OutOfRange):
        Shape(wafer=0.8, correlated=0.5).check("split_rad", "here")
    with pytest.raises(UnknownKey):
        load(chip(lattice_toml(more="[spread]\nsplit = 0.1\n"), name="other"))
