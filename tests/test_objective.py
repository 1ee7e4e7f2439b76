"""What is made small, and its derivatives: against central differences, jax alone and closed forms."""

import math

import numpy as np
import pytest
from scipy.signal import butter, freqs
from scipy.stats import unitary_group

from meshctl.errors import NotFinite, WrongSize, WrongUsage
from meshctl.optics import measures
from meshctl.solver.objective import (
    OVER,
    Combined,
    DarkOutputs,
    Mask,
    MatrixError,
    PowerError,
    objective_of,
    smooth_worst,
    state_preparation,
)
from meshctl.solver.target import make_target
from meshctl.solver.wishes import make_wish

WAVES = np.array([1540.0, 1550.0, 1560.0])
SHAPE = (3, 4, 5)


def draw(*shape, seed=0):
    rng = np.random.default_rng(seed)
    return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)


def weights(seed=5):
    rng = np.random.default_rng(seed)
    return np.where(rng.uniform(size=SHAPE) < 0.3, 0.0, rng.uniform(size=SHAPE))


def bands():
    rng = np.random.default_rng(6)
    which = rng.uniform(size=SHAPE)
    return np.where(which < 0.3, 1.0, np.nan), np.where(which > 0.6, -3.0, np.nan)


def every_objective():
    for over in OVER:
        for free in measures.FREE_PHASES:
            yield MatrixError(draw(*SHAPE), weights(), free, over, WAVES)
        yield PowerError(np.abs(draw(*SHAPE)), weights(), over, WAVES)
        yield DarkOutputs((1, 2), (0, 3), over, WAVES)
        yield Mask(*bands(), WAVES, over)
    yield MatrixError(draw(4, 5), wavelengths_nm=WAVES)
    yield state_preparation(draw(4), 1, 5, WAVES)
    yield Combined(
        [(1.0, MatrixError(draw(*SHAPE), wavelengths_nm=WAVES)), (0.3, DarkOutputs((0,), None, "mean", WAVES))]
    )


@pytest.mark.parametrize("objective", list(every_objective()), ids=lambda o: type(o).__name__)
def test_cotangent_matches_central_differences(objective):
    matrix, step = draw(*SHAPE, seed=1), 1e-6
    _, cotangent = objective.evaluate(matrix)
    for seed in range(10):
        along = draw(*SHAPE, seed=10 + seed)
        up, down = objective.evaluate(matrix + step * along)[0], objective.evaluate(matrix - step * along)[0]
        numeric = (up - down) / (2 * step)
        # free phases on both sides are found by alternation, to the root of rounding
        assert np.vdot(cotangent, along).real == pytest.approx(numeric, rel=1e-5, abs=1e-7)


@pytest.mark.sample
@pytest.mark.slow
@pytest.mark.parametrize("free", ["nothing", "outputs", "inputs"])
def test_jax_alone_gives_same_cotangent(free):
    import jax
    import jax.numpy as jnp

    jax.config.update("jax_enable_x64", True)
    target, weight, matrix = draw(4, 5), weights()[0], draw(4, 5, seed=1)

    def one_minus_fidelity(m):
        overlap = weight * jnp.conj(target) * m
        sums = {
            "nothing": overlap.sum(),
            "outputs": jnp.abs(overlap.sum(1)).sum(),
            "inputs": jnp.abs(overlap.sum(0)).sum(),
        }
        light, norm = jnp.sum(weight * jnp.abs(m) ** 2), jnp.sum(weight * jnp.abs(target) ** 2)
        return 1.0 - jnp.abs(sums[free]) ** 2 / (light * norm)

    value, cotangent = MatrixError(target, weight, free).evaluate(matrix[None])
    assert value == pytest.approx(float(one_minus_fidelity(matrix)), abs=1e-14)
    # jax gives d/dx - i d/dy of a real function
    np.testing.assert_allclose(cotangent[0], np.conj(jax.grad(one_minus_fidelity)(matrix)), atol=1e-14)


@pytest.mark.parametrize("free", measures.FREE_PHASES)
def test_value_is_squared_matrix_error(free):
    target, matrix = draw(4, 4), draw(3, 4, 4, seed=1)
    objective = MatrixError(target, free=free, wavelengths_nm=WAVES)
    wanted = np.broadcast_to(target, matrix.shape)
    assert objective.matrix_error(matrix) == pytest.approx(measures.matrix_error(matrix, wanted, free), abs=1e-12)
    assert objective.evaluate(matrix)[0] == pytest.approx(objective.matrix_error(matrix) ** 2, abs=1e-14)


@pytest.mark.parametrize("free", measures.FREE_PHASES)
def test_scale_and_free_phases_cost_nothing(free):
    target, rng = unitary_group.rvs(5, random_state=1), np.random.default_rng(0)
    rows, columns = np.exp(1j * rng.uniform(0, 6, (2, 5)))
    turned = 0.3j * target
    turned = (
        turned * (rows[:, None] if free in ("outputs", "both") else 1) * (columns if free in ("inputs", "both") else 1)
    )
    value, cotangent = MatrixError(target, free=free).evaluate(turned[None])
    assert value < 1e-14
    assert np.abs(cotangent).max() < 1e-6
    other = MatrixError(target, free="nothing").evaluate(turned[None])[0]
    assert (other > 0.1) == (free != "nothing")


def test_small_errors_keep_their_digits():
    target, off = unitary_group.rvs(4, random_state=1), draw(4, 4)
    # first order: E is the part of the change that a complex scale cannot mend, over |T| = 2
    part = off - target * np.vdot(target, off) / 4
    value, _ = MatrixError(target).evaluate((target + 1e-9 * off)[None])
    assert math.sqrt(value) == pytest.approx(1e-9 * np.linalg.norm(part) / 2, rel=1e-6)


def test_entries_without_weight_never_matter():
    weight, target, matrix = np.ones((4, 5)), draw(4, 5), draw(1, 4, 5, seed=1)
    weight[2, 3] = weight[0, 0] = 0.0
    other = matrix.copy()
    other[0, 2, 3], other[0, 0, 0] = 7.0, -2j
    for objective in (MatrixError(target, weight), PowerError(np.abs(target), weight)):
        value, cotangent = objective.evaluate(matrix)
        assert objective.evaluate(other)[0] == pytest.approx(value, rel=1e-14)
        assert cotangent[0, 2, 3] == 0.0


def test_smooth_worst_lies_just_below_largest():
    values = np.random.default_rng(0).uniform(size=12)
    value, by_each = smooth_worst(values)
    assert values.max() / 12 ** (1 / 16) <= value <= values.max()
    assert by_each @ values == pytest.approx(value)  # Euler: a mean of powers is homogeneous
    assert smooth_worst(np.zeros(3)) == (0.0, pytest.approx(1 / 3))


def test_worst_wavelength_outweighs_the_mean():
    target = np.eye(4)
    matrix = np.array([target, target, target + 0.1 * np.eye(4)[::-1]])
    each = [MatrixError(target).evaluate(m[None])[0] for m in matrix]
    mean = MatrixError(target, wavelengths_nm=WAVES).evaluate(matrix)[0]
    worst, cotangent = MatrixError(target, over="worst", wavelengths_nm=WAVES).evaluate(matrix)
    assert mean == pytest.approx(np.mean(each))
    assert 0.93 * max(each) < worst <= max(each)  # 3^(-1/16) = 0.934
    assert np.abs(cotangent[:2]).max() < 1e-12 < np.abs(cotangent[2]).max()


def test_states_want_one_column_alone():
    wanted, matrix = draw(4), draw(1, 4, 3, seed=1)
    column = matrix[0, :, 1]
    overlap = abs(np.vdot(wanted, column)) ** 2 / np.vdot(wanted, wanted).real / np.vdot(column, column).real
    assert state_preparation(wanted, 1, 3).evaluate(matrix)[0] == pytest.approx(1 - overlap)


def test_dark_outputs_count_leaked_share():
    matrix = np.array([[[0.6, 0.0], [0.8j, 0.5]]])
    assert DarkOutputs([1]).evaluate(matrix)[0] == pytest.approx((0.64 + 0.25) / 2)
    assert DarkOutputs([1], [0]).evaluate(matrix)[0] == pytest.approx(0.64)


def test_butterworth_mask_is_met_by_butterworth():
    # order 4: -3.01 dB at the edge, 24.1 dB down at twice its frequency (scipy.signal's analogue response)
    frequency = np.array([0.5, 1.0, 2.0])
    response = freqs(*butter(4, 1.0, analog=True), worN=frequency)[1].reshape(3, 1, 1)
    nan = np.nan
    least, most = np.array([-0.1, -3.02, nan]).reshape(3, 1, 1), np.array([nan, nan, -24.0]).reshape(3, 1, 1)
    met = Mask(least, most, WAVES)
    assert met.evaluate(response)[0] == 0.0
    stricter = Mask(least + 1.0, most - 2.0, WAVES)
    down = 10 * np.log10(1 / (1 + frequency**8))
    excess = [down[0] - 0.9, down[1] + 2.02, down[2] + 26.0]
    np.testing.assert_allclose(stricter.excess_db(response).ravel(), excess, atol=1e-9)
    assert stricter.evaluate(response)[0] == pytest.approx(np.mean(np.square(excess)), rel=1e-9)


def test_targets_become_their_objectives():
    unitary = unitary_group.rvs(4, random_state=0)
    assert isinstance(objective_of(make_target(unitary, (4, 4))), MatrixError)
    assert isinstance(objective_of(make_wish((4, 4), power=np.full((4, 4), 0.25))), PowerError)
    assert isinstance(objective_of(make_wish((4, 4), most_db=np.full((4, 4), -20.0))), Mask)
    assert isinstance(objective_of(make_wish((4, 4), dark=[1])), DarkOutputs)
    weight = np.zeros((4, 4))
    weight[:, 2] = 1.0
    both = objective_of(make_wish((4, 4), matrix=unitary, weight=weight, dark=[1]))
    dark = unitary.copy()
    dark[1] = 0.0
    # only input 3 is lit: what the matrix lacks in the dark output is all that is missed
    lost = abs(unitary[1, 2]) ** 2
    assert both.evaluate(dark[None])[0] == pytest.approx(lost)
    assert both.evaluate(unitary[None])[0] == pytest.approx(lost)


@pytest.mark.parametrize(
    ("make", "finding", "words"),
    [
        (lambda: MatrixError(np.eye(2), -np.eye(2)), NotFinite, "row 1 column 1 is -1"),
        (lambda: MatrixError(np.eye(2), np.zeros((2, 2))), WrongUsage, "nothing is asked"),
        (lambda: MatrixError(np.eye(2), 1 - np.eye(2)), WrongUsage, "0 wherever it has a weight"),
        (lambda: MatrixError(np.eye(2), np.eye(3)), WrongSize, r"shape \(1, 3, 3\)"),
        (lambda: MatrixError(np.eye(2), over="best"), WrongUsage, "over is 'best'; use one of: mean, worst"),
        (lambda: MatrixError(draw(3, 2, 2)), WrongSize, "demands are given for 3 wavelengths, wavelengths for none"),
        (lambda: Mask(np.eye(2), -np.eye(2)), WrongUsage, "output 1 from input 1 is to be above 1 dB and below -1 dB"),
        (lambda: Combined([]), WrongUsage, "nothing is combined"),
        (lambda: DarkOutputs([5]).evaluate(draw(1, 2, 2)), WrongSize, "no output at position 5"),
        (
            lambda: Combined([(1.0, MatrixError(np.eye(2))), (1.0, MatrixError(np.eye(2), wavelengths_nm=WAVES))]),
            WrongUsage,
            "different wavelengths",
        ),
    ],
)
def test_senseless_objectives_are_refused_loudly(make, finding, words):
    with pytest.raises(finding, match=words):
        make()
