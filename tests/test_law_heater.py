"""Heaters: Ohm's law, resistance that follows heat, and where that runs away."""

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from meshctl.errors import PowerOutOfRange, ResistanceNotPositive, ThermalRunaway
from meshctl.laws import HEATER, LAWS
from meshctl.laws.heater import STABLE_SHARE, resistance_ohm

LAW = LAWS[HEATER]
TWO_PI = 2 * np.pi


def heater(**given):
    values = {"p2pi_mw": 24.0, "r_ohm": 600.0, "r_rise": 0.0} | given
    return {name: np.atleast_1d(np.asarray(v, float)) for name, v in values.items()}


def test_one_turn_takes_ohms_law_voltage():
    # P = V^2 / R (Ohm, Joule): 24 mW in 600 ohm is sqrt(0.024 * 600) V = 3.79473 V and 6.3246 mA
    p = heater()
    assert LAW.volts(TWO_PI, p) == pytest.approx([np.sqrt(0.024 * 600)], rel=1e-15)
    assert LAW.milliamps(TWO_PI, p) == pytest.approx([1e3 * np.sqrt(0.024 / 600)], rel=1e-15)
    assert LAW.power_mw(np.sqrt(0.024 * 600), p) == pytest.approx([24.0], rel=1e-14)


@pytest.mark.parametrize("rise", [0.3, 0.05, -0.05, -0.2])
def test_own_heat_settles_where_power_balances(rise):
    # second method: bracketed root of T p2pi R(T) = V^2 on the stable side
    p = heater(r_rise=rise)
    for volts in (0.1, 1.0, 3.0):
        top = 1 / (2 * abs(rise)) if rise < 0 else 50.0
        root = brentq(lambda t, v=volts: t * 0.024 * 600 * (1 + rise * t) - v * v, 0.0, top, xtol=1e-15)
        assert LAW.change_rad(volts, p) == pytest.approx([TWO_PI * root], abs=1e-12)


def test_given_heat_sets_the_resistance():
    # neighbours warm it by 2 turns: R = 600 (1 + 0.1 * 2) = 720 ohm
    p = heater(r_rise=0.1)
    assert LAW.change_rad(3.0, p, heat_turns=[2.0]) == pytest.approx([TWO_PI * 9.0 / 720 * 1e3 / 24], rel=1e-14)
    assert LAW.resistance_ohm(p, [2.0]) == pytest.approx([720.0])
    wanted = np.array([2.5])
    volts = LAW.volts(wanted, p, heat_turns=[2.0])
    assert LAW.change_rad(volts, p, heat_turns=[2.0]) == pytest.approx(wanted, abs=1e-14)


def test_falling_resistance_turns_back_at_maximum():
    # second method: numerical maximum of V(P) = sqrt(P R(P)) without the law's formula
    rise = -0.25
    top = minimize_scalar(
        lambda t: -np.sqrt(t * 0.024 * 600 * (1 + rise * t)), bounds=(0.0, 4.0), options={"xatol": 1e-10}
    )
    p = heater(r_rise=rise)
    assert top.x == pytest.approx(1 / (2 * 0.25), rel=1e-6)
    assert np.isfinite(LAW.change_rad(-top.fun * (1 - 1e-9), p)).all()
    with pytest.raises(ThermalRunaway, match=r"above .* V"):
        LAW.change_rad(-top.fun * (1 + 1e-9), p)


def test_inverse_keeps_off_the_turning_point():
    p = heater(r_rise=[-0.25, 0.25], p2pi_mw=[24.0, 24.0], r_ohm=[600.0, 600.0])
    edge = TWO_PI * STABLE_SHARE * 2.0
    assert LAW.reach_rad(p, 0.0, 50.0)[1][0] == pytest.approx(edge, abs=1e-12)
    LAW.volts([edge, edge], p)
    with pytest.raises(ThermalRunaway, match=r"43.44 mW is above 43.2 mW") as caught:
        LAW.volts([TWO_PI * 1.81, edge], p)
    assert caught.value.rows == (0,)


def test_warm_neighbours_bring_runaway_nearer():
    # V^2 = P R0 (1 + a (P + 1)) with a = -0.25 has its maximum at P = 1.5 turns, found numerically
    p, others = heater(r_rise=-0.25), 1.0
    top = minimize_scalar(lambda t: -t * (1 - 0.25 * (t + others)), bounds=(0.0, 3.0)).x
    below, above = (np.array([TWO_PI * STABLE_SHARE * top * s]) for s in (0.999, 1.001))
    LAW.volts(below, p, heat_turns=below / TWO_PI + others)
    with pytest.raises(ThermalRunaway):
        LAW.volts(above, p, heat_turns=above / TWO_PI + others)


def test_current_source_runs_away_when_rising():
    # independent: iterate T <- w (1 + a T), which settles only for a w < 1
    p, a = heater(r_rise=0.5), 0.5
    for share in (0.5, 0.9):
        cold = share / a
        heat = 0.0
        for _ in range(2000):
            heat = cold * (1 + a * heat)
        current = 1e3 * np.sqrt(cold * 0.024 / 600)
        assert LAW.change_at_ma(current, p) == pytest.approx([TWO_PI * heat], rel=1e-12)
        assert LAW.milliamps(TWO_PI * heat, p) == pytest.approx([current], rel=1e-12)
    with pytest.raises(ThermalRunaway, match=r"8.95 mA is at or above 8.944 mA"):
        LAW.change_at_ma(8.95, p)


def test_a_heater_takes_no_phase_away():
    p = heater(p2pi_mw=[24.0, 24.0], r_ohm=[600.0, 600.0])
    with pytest.raises(PowerOutOfRange, match=r"-3.82 mW is below 0 mW.*whole turns") as caught:
        LAW.volts([0.5, -1.0], p)
    assert caught.value.rows == (1,)


def test_nan_is_refused_not_passed():
    with pytest.raises(PowerOutOfRange):
        LAW.volts([np.nan], heater())


def test_resistance_must_stay_above_zero():
    assert resistance_ohm(2.0, 600.0, -0.4) == pytest.approx(120.0)
    with pytest.raises(ResistanceNotPositive, match=r"actuator 1: resistance is -120 ohm at a heat of 3 turns"):
        resistance_ohm([1.0, 3.0], [600.0, 600.0], [-0.4, -0.4])


def test_terminal_limit_bounds_the_reach():
    # 9 V on 600 ohm is 135 mW, 5.625 turns
    low, high = LAW.reach_rad(heater(), 0.0, 9.0)
    assert (low, high) == (pytest.approx([0.0]), pytest.approx([TWO_PI * 5.625], rel=1e-14))
    low, high = LAW.reach_rad(heater(), -9.0, -1.0)
    assert np.isnan([low, high]).all()
