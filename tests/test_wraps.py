"""Whole turns of least power: against integer programmes, exhaustive search, and what may be claimed."""

import itertools
import subprocess
import sys

import numpy as np
import pytest
from scipy.optimize import Bounds, LinearConstraint, OptimizeResult, milp

from meshctl.drive import integer
from meshctl.drive.crosstalk import Crosstalk
from meshctl.drive.integer import Programme, prove
from meshctl.drive.wraps import LIMIT_TOLERANCE, least_power_wraps
from meshctl.errors import CrosstalkNotDominant, NotFinite, NotFound, Unreachable
from meshctl.mesh.neighbours import from_positions

EXPONENTIAL = {"amplitude": 0.05 * np.exp(2.0), "length_um": 100.0, "law": "exponential"}  # 5 % at 200 um
INVERSE = {"amplitude": 0.05, "length_um": 200.0, "law": "inverse"}  # 5 % at 200 um

LOWER_ARM = np.array([0.0, 50.0])  # um


def places(modes):
    """Two heaters a cell of a rectangular mesh, cells 500 um by 100 um apart."""
    cells = [(c, m) for c in range(modes) for m in range(c % 2, modes - 1, 2)]
    return np.array([(500.0 * c + shift, 100.0 * m) for c, m in cells for shift in (0.0, 250.0)])


def crosstalk_of(modes, law, signed, **more):
    upper = places(modes)
    lower = upper + LOWER_ARM if signed else np.full_like(upper, np.nan)
    return Crosstalk(from_positions(upper, lower, **law, **more))


def optimum(crosstalk, wanted, high):
    """Least power by scipy's integer programme, proved to the end; None where it is infeasible.

    Over whole turns alone: with own changes as further variables it calls some feasible targets infeasible.
    """
    A = np.linalg.inv(crosstalk.apply(np.eye(len(wanted))))
    result = milp(
        A.sum(axis=0),
        constraints=LinearConstraint(A, -A @ wanted, high - A @ wanted),
        integrality=np.ones(len(wanted)),
        bounds=Bounds(-8.0, 8.0),
        options={"mip_rel_gap": 0.0},
    )
    assert result.status in (0, 2)
    return result.fun + A.sum(axis=0) @ wanted if result.status == 0 else None


def solved(crosstalk, wanted, high, **more):
    n = len(wanted)
    return least_power_wraps(wanted, [True] * n, crosstalk, np.zeros(n), np.full(n, high), np.ones(n), **more)


def test_actuators_alone_take_nearest_turns():
    found = least_power_wraps(
        [0.25, -0.1, 1.3, 0.7, 0.7], [True, True, True, True, False], None, [0, 0, 0, -0.5, 0], [1.2] * 5, [24.0] * 5
    )
    # by hand: heaters into [0, 1), the drive of either sign to -0.3, the coupler untouched
    np.testing.assert_allclose(found.own_turns, [0.25, 0.9, 0.3, -0.3, 0.7], atol=1e-15)
    np.testing.assert_array_equal(found.wraps, [0, 1, -1, -1, 0])
    assert (found.verdict, found.violation) == ("least", 0.0)


def test_solving_alone_loads_neither_scipy():
    code = (
        "import sys; from meshctl.drive.wraps import least_power_wraps as w; "
        "w([0.2], [True], None, [0], [1], [1]); print([m for m in ('scipy', 'numba') if m in sys.modules])"
    )
    assert subprocess.run([sys.executable, "-c", code], capture_output=True, text=True).stdout == "[]\n"


@pytest.mark.parametrize("law", [EXPONENTIAL, INVERSE])
def test_positive_crosstalk_reaches_least_power(law):
    crosstalk, rng = crosstalk_of(8, law, signed=False), np.random.default_rng(1)
    for _ in range(10):
        wanted = rng.uniform(-0.5, 0.5, 56)
        found = solved(crosstalk, wanted, 1.2)
        # scipy.optimize.milp; its own tolerance is 1e-7 of a limit
        assert found.own_turns.sum() == pytest.approx(optimum(crosstalk, wanted, 1.2), rel=1e-6)
        assert found.verdict == ("least" if law is INVERSE else "found")


def test_signed_crosstalk_nears_least_power():
    crosstalk, rng = crosstalk_of(8, EXPONENTIAL, signed=True), np.random.default_rng(2)
    excess = []
    for _ in range(50):
        wanted = rng.uniform(-0.5, 0.5, 56)
        found = solved(crosstalk, wanted, 1.2)
        excess.append(found.own_turns.sum() / optimum(crosstalk, wanted, 1.2) - 1.0)
        total = crosstalk.apply(found.own_turns)
        np.testing.assert_allclose(total, wanted + found.wraps, rtol=0, atol=1e-12)
    assert np.mean(excess) < 1e-3
    assert max(excess) < 1e-2


def test_enough_power_never_fails_lifting():
    crosstalk, rng = crosstalk_of(8, INVERSE, signed=False), np.random.default_rng(3)
    # C^-1 has no positive entry off its diagonal: at Pmax = max A_ii every target has an answer
    assert crosstalk.inverse_falls_off_diagonal
    high = crosstalk.diagonal_of_inverse().max()
    verdicts = {solved(crosstalk, rng.uniform(-0.5, 0.5, 56), high).verdict for _ in range(1000)}
    assert verdicts == {"least"}


def test_outdone_pair_is_still_solved():
    crosstalk = Crosstalk(np.array([[0.0, 1.3], [1.3, 0.0]]))
    found = solved(crosstalk, [0.05, 0.9], 1.2)
    # by hand: p0 + 1.3 p1 = 1.05, 1.3 p0 + p1 = 0.9
    np.testing.assert_allclose(found.own_turns, [0.12 / 0.69, 0.465 / 0.69], rtol=1e-13)
    assert found.verdict == "found"


def test_far_too_little_is_raised_at_once():
    K = np.zeros((4, 4))
    K[0, 1:] = 0.5
    found = solved(Crosstalk(K), [0.0, 0.9, 0.9, 0.9], 1.2)
    # by hand: the others give 1.35 turns, so that two of its own leave 0.65
    np.testing.assert_allclose(found.own_turns, [0.65, 0.9, 0.9, 0.9], rtol=1e-13)
    assert (found.verdict, found.rounds) == ("least", 2)


def test_pair_step_saves_where_single_cannot():
    crosstalk, wanted = Crosstalk(np.array([[0.0, -0.1], [-0.1, 0.0]])), np.array([-0.05, 0.3])
    found = least_power_wraps(wanted, [True, True], crosstalk, [0, 0], [1.4, 1.4], [20.0, 1.0], proof="never")
    # by hand: of the turns within limits, (1, 0) costs 20.2 mW and (0, 1), a pair step away, 2.9 mW
    np.testing.assert_array_equal(found.wraps, [0, 1])
    np.testing.assert_allclose(found.own_turns, np.array([-0.05 + 0.13, 1.3 - 0.005]) / 0.99, rtol=1e-13)


def test_small_systems_agree_with_enumeration():
    rng = np.random.default_rng(4)
    seen = set()
    for _ in range(600):
        n = int(rng.integers(1, 5))
        K = rng.random((n, n)) * rng.choice([0.05, 0.2, 0.4]) * rng.choice([-1.0, 1.0, 1.0, 1.0], (n, n))
        np.fill_diagonal(K, 0.0)
        crosstalk, wanted, wraps = Crosstalk(K), rng.uniform(-2, 2, n), rng.random(n) < 0.8
        low, weight = np.where(rng.random(n) < 0.2, -0.6, 0.0), rng.choice([0.0, 1.0, 20.0], n)
        high = np.full(n, rng.choice([0.5, 1.0, 1.2, 2.0]))
        found = least_power_wraps(wanted, wraps, crosstalk, low, high, weight, proof="never")
        turns = [range(-6, 7) if w else (0,) for w in wraps]
        own = (wanted + np.array(list(itertools.product(*turns)))) @ np.linalg.inv(np.eye(n) + K).T
        allowed = ((own >= low - LIMIT_TOLERANCE) & (own <= high + LIMIT_TOLERANCE)).all(axis=1)
        seen.add((found.verdict, bool(allowed.any())))
        if found.verdict == "least":
            assert found.own_turns @ weight <= (own[allowed] @ weight).min() + 1e-9
    # every claim held, and each kind of answer came up
    assert seen >= {("least", True), ("found", True), ("unreachable", False), ("not_found", False)}
    assert not {("unreachable", True), ("least", False), ("found", False)} & seen


def test_proof_tells_unreachable_from_lost():
    crosstalk, rng = crosstalk_of(8, EXPONENTIAL, signed=True), np.random.default_rng(5)
    wanted = next(b for b in rng.uniform(-0.5, 0.5, (50, 56)) if solved(crosstalk, b, 0.97, proof="never").violation)
    assert optimum(crosstalk, wanted, 0.97) is None  # scipy.optimize.milp
    assert solved(crosstalk, wanted, 0.97, proof="never").verdict == "not_found"
    assert solved(crosstalk, wanted, 0.97).verdict == "unreachable"


def test_proof_on_request_shows_least(capfd):
    crosstalk, wanted = crosstalk_of(8, EXPONENTIAL, signed=True), np.random.default_rng(6).uniform(-0.5, 0.5, 56)
    searched, proved = solved(crosstalk, wanted, 1.2), solved(crosstalk, wanted, 1.2, proof="always")
    assert (searched.verdict, proved.verdict) == ("found", "least")
    assert proved.own_turns.sum() <= searched.own_turns.sum()
    assert capfd.readouterr() == ("", "")  # the programme prints in a process of its own


def test_programme_out_of_time_proves_nothing():
    rng = np.random.default_rng(7)
    inverse = np.linalg.inv(np.eye(60) + 0.3 * rng.uniform(-1, 1, (60, 60)))
    sides = -inverse @ rng.random(60)
    wide = np.full(60, 20.0)
    proof = prove(Programme(inverse, inverse.sum(axis=0), sides, sides + 0.5, -wide, wide), 0.0)
    assert proof.status == "undecided"


def test_couplers_feel_heaters_but_never_wrap():
    K = np.array([[0.0, 0.0], [0.2, 0.0]])  # heater 0 moves coupler 1
    found = least_power_wraps([-0.3, 0.5], [True, False], Crosstalk(K), [0, 0], [1.2, 0.45], [24, 0])
    # by hand: heater 0.7, so that the coupler's own part is 0.5 - 0.14
    np.testing.assert_allclose(found.own_turns, [0.7, 0.36], rtol=1e-13)
    np.testing.assert_array_equal(found.wraps, [1, 0])


@pytest.mark.parametrize("crosstalk", [None, Crosstalk(np.array([[0.0, 0.1], [0.1, 0.0]]))])
def test_rounding_below_zero_costs_nothing(crosstalk):
    found = solved(crosstalk, np.array([-1e-14, 0.0]), 1.2)
    np.testing.assert_allclose(found.own_turns, [0.0, 0.0], atol=1e-14)
    assert (found.own_turns >= 0.0).all()
    np.testing.assert_array_equal(found.wraps, [0, 0])


@pytest.mark.parametrize("crosstalk", [None, Crosstalk(np.array([[0.0, 0.1], [0.1, 0.0]]))])
def test_unreachable_names_its_actuators(crosstalk):
    found = solved(crosstalk, [0.2, 0.7], 0.5)
    assert found.verdict == "unreachable"
    with pytest.raises(Unreachable, match="actuator 1"):
        found.require()


def test_lift_alone_proves_some_unreachable():
    # both totals lie in the image [0, 0.75]; heater 1 would need -0.4, and a turn more is beyond 0.75
    found = solved(Crosstalk(np.array([[0.0, 0.5], [0.5, 0.0]])), [0.7, 0.05], 0.5, proof="never")
    assert found.verdict == "unreachable"
    assert optimum(Crosstalk(np.array([[0.0, 0.5], [0.5, 0.0]])), np.array([0.7, 0.05]), 0.5) is None


def test_process_that_fails_proves_nothing(monkeypatch):
    monkeypatch.setattr(sys, "executable", "no-such-python")
    one = np.ones(1)
    assert prove(Programme(np.eye(1), one, one, one, one, one), 1.0).status == "undecided"


def test_infeasible_stands_only_when_confirmed(monkeypatch):
    statuses = iter([2, 0])  # infeasible with presolving, solved without
    monkeypatch.setattr(
        integer, "_milp", lambda *_, **__: OptimizeResult(status=next(statuses), x=None, mip_dual_bound=None)
    )
    one = np.ones(1)
    assert integer.solve(Programme(np.eye(1), one, one, one, one, one), 1.0).status == "undecided"


def test_lost_search_is_no_proof():
    crosstalk, rng = crosstalk_of(8, EXPONENTIAL, signed=True), np.random.default_rng(5)
    answers = (solved(crosstalk, b, 0.97, proof="never") for b in rng.uniform(-0.5, 0.5, (50, 56)))
    with pytest.raises(NotFound, match="none was proved impossible"):
        next(a for a in answers if a.violation).require()


def test_large_outdone_mesh_says_so():
    n = 102  # more than the integer programme is asked for
    K = np.kron(np.eye(n // 2), [[0.0, 1.3], [1.3, 0.0]])
    with pytest.raises(CrosstalkNotDominant):
        solved(Crosstalk(K), np.tile([0.2, 0.05], n // 2), 0.1)


@pytest.mark.parametrize("given", [([np.nan], [1.0], [1.0]), ([0.1], [np.nan], [1.0]), ([0.1], [1.0], [np.inf])])
def test_numbers_that_are_none_are_refused(given):
    wanted, high, weight = given
    with pytest.raises(NotFinite, match="actuator 0"):
        least_power_wraps(wanted, [True], None, [0.0], high, weight)


@pytest.mark.parametrize("signed", [False, True])
def test_large_mesh_leaves_no_residual(signed):
    crosstalk = crosstalk_of(64, EXPONENTIAL, signed, keep_above=1e-5)
    rng = np.random.default_rng(8)
    solved(crosstalk, rng.uniform(-0.5, 0.5, 4032), 1.2)  # the columns that a descent needs are kept from here on
    for wanted in rng.uniform(-0.5, 0.5, (5, 4032)):
        found = solved(crosstalk, wanted, 1.2)
        residual = crosstalk.apply(found.own_turns) - wanted - found.wraps
        assert np.abs(residual).max() <= 1e-12
        assert found.verdict == "found"
