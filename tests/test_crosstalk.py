"""Crosstalk: solved with near and far parts, refused where unsound, made from places, dropped with care."""

import numpy as np
import pytest
from scipy import sparse

from meshctl.drive.crosstalk import DENSE_TO, Crosstalk
from meshctl.drive.factor import NEGLIGIBLE
from meshctl.errors import CrosstalkNotDominant, CrosstalkUnsound, OutOfRange, UnknownKey
from meshctl.mesh.neighbours import DROPPED_LIMIT_RAD, dropped_error_rad, from_positions, split_far

BELOW = np.array([0.0, 25.0])  # um, from the heated arm to the other


def random_coefficients(n, size, seed=0):
    K = size * np.random.default_rng(seed).uniform(-1.0, 1.0, (n, n))
    np.fill_diagonal(K, 0.0)
    return K


def chain(n, coefficient):
    """Neighbours in a row: 1 + 2 k cos(j pi / (n + 1)) are the eigenvalues of C (textbook)."""
    return sparse.diags_array([coefficient] * 2, offsets=[-1, 1], shape=(n, n))


def near_only(K):
    return Crosstalk(K), K


def dense_far(K):
    near, far = split_far(K, 0.02)
    return Crosstalk(near, far.toarray()), K


def low_rank_far(K):
    rng = np.random.default_rng(5)
    U, V = 0.1 * rng.random((len(K), 3)), 0.1 * rng.random((len(K), 3))
    own = np.diag(np.einsum("ij,ij->i", U, V))
    return Crosstalk(K - own, (U, V)), K - own + U @ V.T


@pytest.mark.parametrize("made", [near_only, dense_far, low_rank_far])
def test_own_changes_follow_from_totals(made):
    crosstalk, K = made(random_coefficients(40, 0.04))
    x = np.random.default_rng(1).random(40)
    C = np.eye(40) + K
    # numpy.linalg on the whole matrix; condition below 10, so 1e-13 leaves 100 roundings
    np.testing.assert_allclose(crosstalk.solve(x), np.linalg.solve(C, x), rtol=0, atol=1e-13)
    np.testing.assert_allclose(crosstalk.solve_transposed(x), np.linalg.solve(C.T, x), rtol=0, atol=1e-13)
    np.testing.assert_allclose(crosstalk.apply(x), C @ x, rtol=0, atol=1e-13)
    np.testing.assert_allclose(crosstalk.diagonal_of_inverse(), np.diagonal(np.linalg.inv(C)), rtol=0, atol=1e-13)


@pytest.mark.parametrize(("made", "above"), [(near_only, 1.0 + 1e-12), (low_rank_far, 1.5)])
def test_condition_estimate_nears_the_condition(made, above):
    crosstalk, K = made(random_coefficients(40, 0.15))
    true = np.linalg.cond(np.eye(40) + K, 1)
    # from below, seldom below a third (Higham 1988, from memory); a low-rank part's own norm is only bounded
    assert true / 3.0 <= crosstalk.condition <= above * true


def test_totals_stay_inside_their_image():
    crosstalk, K = low_rank_far(random_coefficients(12, 0.1))
    rng = np.random.default_rng(2)
    low, high = -rng.random(12), rng.random(12)
    bottom, top = crosstalk.image(low, high)
    own = low[:, None] + (high - low)[:, None] * rng.integers(0, 2, (12, 500))
    totals = (np.eye(12) + K) @ own
    assert (totals >= bottom[:, None] - 1e-12).all()
    assert (totals <= top[:, None] + 1e-12).all()


@pytest.mark.parametrize(
    ("K", "message"),
    [
        ([[0.0, 1.0], [1.0, 0.0]], "singular"),
        ([[0.0, 1.0], [1.0 + 1e-9, 0.0]], "condition"),
        ([[0.0, np.nan], [0.1, 0.0]], "not a finite number"),
        ([[0.0, 0.1], [0.1, 0.02]], "on itself is 0.02"),
        ([[0.0, 0.1, 0.0], [0.1, 0.0, 0.0]], "square"),
    ],
)
def test_unsound_crosstalk_is_refused_by_name(K, message):
    with pytest.raises(CrosstalkUnsound, match=message):
        Crosstalk(np.array(K))


@pytest.mark.parametrize("short", [0.0, 2e-15, 1e-9])
def test_small_pivot_alone_is_not_singular(short):
    # rows 1 and 3 are singular or nearly so by themselves, the whole is not
    K = np.array([[0.0, 0.5, 0.0, 0.0], [0.5, 0.0, -1.0, short - 1.0], [0.5, 1.0, 0.0, 0.0], [0.0, -1.0, 0.0, 0.0]])
    x = np.array([1.0, 2.0, 3.0, 4.0])
    found = Crosstalk(K).solve(x)
    np.testing.assert_allclose(found, np.linalg.solve(np.eye(4) + K, x), rtol=0, atol=1e-12)


def test_outdone_heaters_are_named():
    K = np.zeros((3, 3))
    K[0, 1] = K[1, 0] = 1.3  # 2x2 inverse: A_ii = 1 / (1 - 1.69) < 0
    with pytest.raises(CrosstalkNotDominant) as caught:
        Crosstalk(K).require_dominant()
    assert caught.value.rows == (0, 1)


@pytest.mark.parametrize(
    ("n", "coefficient", "outdone"),
    [
        (DENSE_TO + 1, 0.45, False),  # rows below 1: dominant
        (30, 0.501, False),  # rows above 1, yet 1 - 2 k cos(pi / 31) > 0: positive definite
        (DENSE_TO + 1, 0.5, False),
        (31, 0.9, True),
    ],
)
def test_dominance_agrees_with_the_inverse(n, coefficient, outdone):
    crosstalk = Crosstalk(chain(n, coefficient))
    inverse = np.linalg.inv(np.eye(n) + chain(n, coefficient).toarray())
    assert bool(len(crosstalk.not_dominant)) is outdone
    np.testing.assert_array_equal(crosstalk.not_dominant, np.flatnonzero(np.diagonal(inverse) <= 0.0))


@pytest.mark.parametrize("coefficient", [0.2, 0.3])  # by series; by columns
def test_columns_of_large_inverse_suffice(coefficient):
    n = DENSE_TO + 1
    crosstalk = Crosstalk(chain(n, coefficient))
    inverse = np.linalg.inv(np.eye(n) + chain(n, coefficient).toarray())
    columns = crosstalk.inverse_columns
    assert np.abs(columns.toarray() - inverse).max() < NEGLIGIBLE
    assert columns.nnz < 40 * n
    partner, cross = crosstalk.partners
    assert set(partner[500, :4]) == {498, 499, 501, 502}
    np.testing.assert_allclose(cross[500, :4], inverse[500, partner[500, :4]], rtol=0, atol=NEGLIGIBLE)


def test_places_give_crosstalk_by_hand():
    upper, lower = np.array([[0.0, 0.0], [0.0, 30.0]]), np.array([[0.0, 20.0], [0.0, 50.0]])
    K = from_positions(upper, lower, 0.4, 50.0, "exponential").toarray()
    own = 1.0 - 0.4 * np.exp(-20 / 50)
    # distances read off the drawing: upper to upper 30, lower arm 1 to heater 0 50, lower arm 0 to heater 1 10
    assert K[1, 0] == pytest.approx((0.4 * np.exp(-30 / 50) - 0.4 * np.exp(-50 / 50)) / own, rel=1e-14)
    assert K[0, 1] == pytest.approx((0.4 * np.exp(-30 / 50) - 0.4 * np.exp(-10 / 50)) / own, rel=1e-14)
    assert K[0, 1] < 0.0 < K[1, 0]


def test_phase_of_one_arm_warms_unsigned():
    upper, lower = np.array([[0.0, 0.0], [0.0, 400.0]]), np.full((2, 2), np.nan)
    K = from_positions(upper, lower, 0.05, 200.0, "inverse").toarray()
    np.testing.assert_allclose(K, [[0.0, 0.025], [0.025, 0.0]], rtol=1e-14)


def test_slices_of_rows_make_one_matrix():
    upper = np.random.default_rng(3).uniform(0, 1e4, (700, 2))
    K = from_positions(upper, upper + BELOW, 0.02, 50.0, "exponential")
    some = [3, 511, 512, 699]
    part = from_positions(upper[some], upper[some] + BELOW, 0.02, 50.0, "exponential")
    np.testing.assert_array_equal(K.toarray()[np.ix_(some, some)], part.toarray())


@pytest.mark.parametrize(
    ("changed", "finding"),
    [({"law": "square"}, UnknownKey), ({"amplitude": 2.0}, OutOfRange), ({"keep_above": 0.01}, CrosstalkUnsound)],
)
def test_places_that_mislead_are_refused(changed, finding):
    upper = np.array([[0.0, 0.0], [0.0, 100.0]])
    given = {"amplitude": 0.05, "length_um": 60.0, "law": "exponential"} | changed
    with pytest.raises(finding):
        from_positions(upper, upper + BELOW, **given)


def test_heater_on_foreign_arm_is_refused():
    upper = np.array([[0.0, 0.0], [0.0, 0.0]])
    with pytest.raises(OutOfRange, match="actuator 1 gives actuator 0"):
        from_positions(upper, upper + 2.0 * BELOW, 0.05, 60.0, "inverse")


def test_parts_of_crosstalk_sum_up():
    K = random_coefficients(20, 0.1)
    near, far = split_far(K, 0.05)
    np.testing.assert_array_equal(near.toarray() + far.toarray(), K)
    assert np.abs(far.toarray()).max() <= 0.05 < np.abs(near.data).min()


def test_dropped_error_agrees_with_draws():
    K = random_coefficients(30, 1e-4)
    reach = np.linspace(1.0, 6.0, 30)
    found = dropped_error_rad(K, reach)
    drawn = K @ (np.random.default_rng(4).random((30, 20000)) * reach[:, None])
    worst = max(K[i] @ (np.sign(K[i]) * reach) for i in range(30))  # each at its end with the worse sign
    assert found.rms_rad == pytest.approx(np.sqrt(np.mean(drawn**2)), rel=0.02)  # 20000 draws: 0.5 %
    assert found.worst_rad == pytest.approx(worst, rel=1e-12)


def test_dropping_too_much_is_refused():
    allowed = DROPPED_LIMIT_RAD / 6.0
    dropped_error_rad([[0.0, 0.999 * allowed], [0.0, 0.0]], 6.0)
    with pytest.raises(CrosstalkUnsound, match=r"0.01001 rad"):
        dropped_error_rad([[0.0, 1.001 * allowed], [0.0, 0.0]], 6.0)
