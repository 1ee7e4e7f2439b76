"""Heaters with R(T) on shared grounds: against scipy.optimize.root, closed forms and the energy balance."""

import numpy as np
import pytest
from scipy import sparse
from scipy.optimize import root

from meshctl.drive.balance import HeatBalance
from meshctl.drive.ground import terminal_volts, working_point
from meshctl.errors import GroundDiverges, NotFinite, PowerOutOfRange, ResistanceNotPositive, ThermalRunaway

A = 56
ONES = np.ones(A)


def neighbours(n, share=0.05):
    """Warmth that falls by half from one heater to the next in a row."""
    steps = np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    return np.where(steps == 0, 0.0, 2.0 * share * 0.5**steps)


WARMING = neighbours(A)


def chip(rise, grounds, ground_ohm):
    """500 ohm, 40 mW a turn, on so many grounds; with one more the first heaters have none."""
    group = np.arange(A) * grounds // A
    return 500.0 * ONES, rise * ONES, 40.0 * ONES, group, np.full(grounds, ground_ohm)


def settled_by_root(volts, r_ohm, rise, p2pi, group, ground_ohm, start):
    """The same point from Ohm's law, Kirchhoff's current law and power = V I, by scipy.optimize.root."""

    def left(state):
        heat, shared_ma = state[:A], state[A:]
        r = r_ohm * (1.0 + rise * (heat + WARMING @ heat))
        current_ma = 1e3 * (volts - (1e-3 * ground_ohm * shared_ma)[group]) / r
        return np.r_[
            heat - 1e-3 * current_ma**2 * r / p2pi, shared_ma - np.bincount(group, current_ma, len(ground_ohm))
        ]

    found = root(left, start, method="hybr", options={"xtol": 1e-15})
    assert np.abs(left(found.x)).max() < 1e-9
    return found.x[:A]


@pytest.mark.parametrize("rise", [0.0, 0.1, 0.3, -0.15])
@pytest.mark.parametrize(("grounds", "ground_ohm"), [(1, 0.1), (1, 1.0), (1, 20.0), (7, 10.0)])
def test_working_point_undoes_terminal_volts(rise, grounds, ground_ohm):
    rng, parts = np.random.default_rng(1), chip(rise, grounds, ground_ohm)
    for own in 1.2 * rng.random((5, A)):
        terminals = terminal_volts(own, own + WARMING @ own, *parts)
        settled = working_point(terminals.volts, *parts, warming=WARMING)
        assert settled.steps <= 6
        # 20 ohm shared by 56 heaters of 500 ohm asks for 3 times the volts: some 10 roundings
        np.testing.assert_allclose(settled.own_turns, own, rtol=0, atol=1e-12)
        np.testing.assert_allclose(settled.current_ma, terminals.current_ma, rtol=0, atol=1e-10)


@pytest.mark.parametrize("rise", [0.1, -0.15])
def test_working_point_agrees_with_root(rise):
    parts = chip(rise, 4, 2.0)
    volts = np.random.default_rng(2).uniform(0.0, 4.5, A)
    settled = working_point(volts, *parts, warming=WARMING)
    start = np.r_[volts**2 / 20.0, np.full(4, 50.0)]
    expected = settled_by_root(volts, *parts, start)
    np.testing.assert_allclose(settled.own_turns, expected, rtol=0, atol=1e-12)


def test_single_heater_follows_closed_form():
    # P (1 + a P) = V^2 / (R P2pi): a quadratic in P
    volts, a = np.array([1.0, 3.0, 4.0]), np.array([0.1, -0.2, 0.0])
    settled = working_point(volts, [500.0] * 3, a, [40.0] * 3, [-1, -1, -1], [])
    cold = volts**2 / 20.0
    expected = [2 * c / (1 + np.sqrt(1 + 4 * k * c)) for c, k in zip(cold, a, strict=True)]
    np.testing.assert_allclose(settled.own_turns, expected, rtol=1e-13)


def test_sources_feed_heaters_and_grounds():
    parts = chip(0.1, 3, 4.0)
    settled = working_point(np.linspace(0.0, 5.0, A), *parts, warming=WARMING)
    fed_mw = settled.volts @ settled.current_ma  # energy balance, textbook
    heated_mw = settled.own_turns @ parts[2]
    assert fed_mw == pytest.approx(heated_mw + 1e3 * np.sum(settled.ground_v**2) / 4.0, rel=1e-12)


def test_idle_heater_warms_from_raised_ground():
    # by hand: 3 V over 500 ohm, the idle 500 ohm in parallel with 100 ohm of ground
    settled = working_point([3.0, 0.0], [500.0] * 2, [0.0] * 2, [40.0] * 2, [0, 0], [100.0])
    rise = 3.0 * (1 / 500) / (1 / 500 + 1 / 500 + 1 / 100)
    assert settled.ground_v[0] == pytest.approx(rise, rel=1e-13)
    assert settled.own_turns[1] == pytest.approx(1e3 * rise**2 / 500.0 / 40.0, rel=1e-12)


def test_heaters_on_one_channel_share_volts():
    # two heaters of one channel in parallel are one of half the resistance and twice the power
    pair = working_point([3.0, 3.0], [500.0] * 2, [0.1] * 2, [40.0] * 2, [0, 0], [5.0])
    one = working_point([3.0], [250.0], [0.1], [80.0], [0], [5.0])
    np.testing.assert_allclose(pair.own_turns, one.own_turns[[0, 0]], rtol=1e-13)


@pytest.mark.parametrize("rise", [0.1, -0.1])
def test_currents_and_volts_mix_on_grounds(rise):
    own, parts = 1.2 * np.random.default_rng(3).random(A), chip(rise, 2, 3.0)
    terminals = terminal_volts(own, own + WARMING @ own, *parts)
    by_current = np.arange(A) % 2 == 0
    drive = np.where(by_current, terminals.current_ma, terminals.volts)
    settled = working_point(drive, *parts, warming=WARMING, current_driven=by_current)
    assert settled.steps <= 6
    np.testing.assert_allclose(settled.own_turns, own, rtol=0, atol=1e-12)
    np.testing.assert_allclose(settled.volts, terminals.volts, rtol=0, atol=1e-12)


def test_large_chip_settles_with_sparse_warmth():
    n = 1000
    own, warming = np.random.default_rng(4).random(n), sparse.csr_array(np.triu(np.tril(neighbours(n), 8), -8))
    parts = (500.0, 0.1, 40.0, np.arange(n) // 250, np.full(4, 0.5))
    terminals = terminal_volts(own, own + warming @ own, *parts)
    settled = working_point(terminals.volts, *parts, warming=warming)
    assert settled.steps <= 6
    np.testing.assert_allclose(settled.own_turns, own, rtol=0, atol=1e-12)


# V^2 = R P2pi P (1 + a P) is largest at P = 1 / (2 |a|), where it is R P2pi / (4 |a|)
TURNING_V = np.sqrt(500.0 * 0.04 / (4 * 0.2))


def test_falling_resistance_runs_away_on_volts():
    settled = working_point([0.9999 * TURNING_V], [500.0], [-0.2], [40.0], [0], [0.0])
    assert settled.own_turns[0] == pytest.approx(2.5, rel=0.02)  # sqrt(2e-4) = 0.014 short of the turning point
    with pytest.raises(ThermalRunaway, match=r"actuator 0.*5 V, a falling resistance on a voltage"):
        working_point([1.0001 * TURNING_V], [500.0], [-0.2], [40.0], [0], [0.0])


@pytest.mark.parametrize("volts", [20.0, 1e3, 1e5])
def test_runaway_far_beyond_is_named(volts):
    with pytest.raises(ThermalRunaway, match=rf"actuator 1.*{volts:.4g} V".replace("+", r"\+")):
        working_point([1.0, volts], [500.0] * 2, [-0.3] * 2, [40.0] * 2, [0, 0], [1.0], warming=neighbours(2))


def test_rising_resistance_runs_away_on_current():
    # P = q (1 + a P) with q = I^2 R / P2pi: no stable heat from a q = 1 on
    limit_ma = 1e3 * np.sqrt(0.04 / 500.0 / 0.3)
    settled = working_point([0.9 * limit_ma], [500.0], [0.3], [40.0], [-1], [], current_driven=True)
    assert settled.own_turns[0] == pytest.approx(0.81 / 0.3 / 0.19, rel=1e-12)
    with pytest.raises(ThermalRunaway, match="rising resistance on a current source"):
        working_point([1.01 * limit_ma], [500.0], [0.3], [40.0], [-1], [], current_driven=True)


@pytest.mark.parametrize(("share", "runs"), [(0.98, False), (1.02, True)])
def test_heaters_run_away_in_company(share, runs):
    # two alike warm each other by half: P = q (1 + a 1.5 P), stable to a q = 1 / 1.5 though each alone is to 1
    drive_ma = 1e3 * np.sqrt(share / 1.5 * 0.04 / 500.0 / 0.3)
    given = ([drive_ma] * 2, [500.0] * 2, [0.3] * 2, [40.0] * 2, [-1, -1], [])
    more = {"warming": np.array([[0.0, 0.5], [0.5, 0.0]]), "current_driven": True}
    if runs:
        with pytest.raises(ThermalRunaway, match="actuator 0', 'actuator 1"):
            working_point(*given, **more)
    else:
        assert working_point(*given, **more).own_turns[0] == pytest.approx(share / 1.5 / 0.3 / (1 - share), rel=1e-10)


@pytest.mark.parametrize(("heat", "runs"), [(0.32, False), (0.36, True)])
def test_company_past_its_turning_point_is_unstable(heat, runs):
    # with R falling by 1 a turn and half the other's heat, V^2 ~ P (1 - 1.5 P) turns back at P = 1 / 3
    across = np.sqrt(np.full(2, 20.0 * heat * (1 - 1.5 * heat)))
    system = HeatBalance(
        across, np.zeros(2, bool), np.full(2, 500.0), -np.ones(2), np.full(2, 0.04), np.empty(0),
        np.array([-1, -1]), np.array([[0.0, 0.5], [0.5, 0.0]]),
    )  # fmt: skip
    own = np.full(2, heat)
    if runs:
        with pytest.raises(ThermalRunaway, match="actuator 0', 'actuator 1"):
            system.require_stable(own, 1.5 * own)
    else:
        system.require_stable(own, 1.5 * own)


def test_heat_near_the_turning_point_is_refused():
    # own heat at the turning point 1 / (2 * 0.3) = 1.667 turns, of which 0.9 may be used
    terminal_volts([1.49], [1.49], [500.0], [-0.3], [40.0], [0], [1.0])
    with pytest.raises(ThermalRunaway, match=r"60\.4 mW is above 60 mW"):
        terminal_volts([1.51], [1.51], [500.0], [-0.3], [40.0], [0], [1.0])


def test_resistance_that_vanishes_is_named():
    with pytest.raises(ResistanceNotPositive, match=r"actuator 1: resistance is -50 ohm"):
        terminal_volts([0.1, 0.1], [0.1, 2.2], [500.0] * 2, [-0.5] * 2, [40.0] * 2, [0, 0], [1.0])


def test_less_than_no_heat_is_refused():
    with pytest.raises(PowerOutOfRange, match=r"'actuator 1'.*-4 mW"):
        terminal_volts([0.1, -0.1], [0.1, 0.1], [500.0] * 2, [0.0] * 2, [40.0] * 2, [0, 0], [1.0])


def test_grounds_that_do_not_settle_are_named():
    with pytest.raises(GroundDiverges, match="2 ohm of shared ground"):
        working_point(np.full(A, 6.0), *chip(0.1, 1, 2.0), warming=WARMING, max_steps=1)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_drive_that_is_no_number_is_refused(bad):
    with pytest.raises(NotFinite, match="actuator 1"):
        working_point([1.0, bad], [500.0] * 2, [0.0] * 2, [40.0] * 2, [0, 0], [1.0])
