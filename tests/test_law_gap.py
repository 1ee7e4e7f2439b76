"""Moved couplers: force balance, pull-in, margins, charge, parasitic phase and energy."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.optimize import brentq, minimize_scalar

from meshctl.errors import GapOutOfRange, PullIn
from meshctl.laws import COMB, GAP, HEATER, LAWS
from meshctl.laws.branch import branches
from meshctl.laws.gap import EPS0_F_PER_M, pull_in_v
from meshctl.laws.law import check_params

LAW, COMB_DRIVE = LAWS[GAP], LAWS[COMB]
K, G0, AREA = 2.0, 200e-9, 20e-12  # N/m, m, m^2 of an invented gap coupler


def gap(**given):
    values = {"gap_nm": 200.0, "stiffness_n_per_m": K, "area_um2": 20.0, "decay_nm": 50.0, "rest_rad": 3.05}
    rows = max((len(np.atleast_1d(v)) for v in given.values()), default=1)
    return {name: np.broadcast_to(np.asarray(v, float), rows) for name, v in (values | given).items()}


def holding_volts(travel_m):
    """Force balance solved for V, in SI units."""
    return np.sqrt(2 * K * travel_m / (EPS0_F_PER_M * AREA)) * (G0 - travel_m)


def test_pull_in_is_the_balance_maximum():
    # textbook (Senturia, from memory): V_PI = sqrt(8 k g0^3 / (27 eps0 A)) at x = g0/3; here numerical
    top = minimize_scalar(lambda x: -holding_volts(x), bounds=(0, G0), options={"xatol": 1e-18})
    assert top.x == pytest.approx(G0 / 3, rel=1e-5)
    assert LAW.unstable_v(gap()) == pytest.approx([-top.fun], rel=1e-10)
    assert LAW.unstable_nm(gap()) == pytest.approx([200 / 3])
    assert pull_in_v(2.0, 200.0, 20.0) == pytest.approx(5.1741, abs=1e-4)


@settings(max_examples=60, deadline=None)
@given(st.floats(1e-4, 0.999))
def test_travel_balances_the_force(share):
    volts = share * float(LAW.unstable_v(gap())[0])
    # in u = x/g0 and v = V/V_PI; brentq on the force itself, absolute tolerance far below u
    root = brentq(
        lambda u: K * u * G0 - EPS0_F_PER_M * AREA * volts**2 / (2 * (G0 * (1 - u)) ** 2),
        0,
        1 / 3,
        xtol=1e-16,
    )
    # at the fold u goes as the root of the distance to V_PI: 1e-16 there is 1e-8 / 2, at 0.999 1e-14
    assert LAW.travel_nm(volts, gap())[0] / 200 == pytest.approx(root, rel=1e-11, abs=1e-15)


def test_smallest_voltages_keep_all_digits():
    # u -> 4/27 v^2 (1 + 2 * 4/27 v^2) from the cubic's series
    v = np.array([[1e-9], [1e-6], [1e-4]])
    q = 4 / 27 * v**2
    travel = LAW.travel_nm(v * LAW.unstable_v(gap()), gap()) / 200
    np.testing.assert_allclose(travel, q * (1 + 2 * q), rtol=1e-13)


def step_reaches(share, damping=0.0):
    """Greatest travel over g0 after a voltage step on an undamped plate (energy kept, inertia 1)."""

    def motion(_, y):
        u = min(y[0], 0.999)
        return [y[1], -u + 4 / 27 * share**2 / (1 - u) ** 2 - damping * y[1]]

    return solve_ivp(motion, (0, 60), [0.0, 0.0], rtol=1e-9, atol=1e-11).y[0].max()


def test_default_margins_survive_undamped_steps():
    # energy balance: an undamped step pulls in at sqrt(27/32) = 0.9186 V_PI (from memory)
    critical = np.sqrt(27 / 32)
    assert step_reaches(critical * 0.999) < 0.52
    assert step_reaches(critical * 1.001) > 0.99
    margins = LAW.margin(gap(v_pi_v=[np.nan, 5.0, np.nan], margin=[np.nan, np.nan, 0.6]))
    np.testing.assert_array_equal(margins, [0.7, 0.8, 0.6])
    assert all(step_reaches(m) < 0.35 for m in margins)


def test_measured_pull_in_replaces_nominal():
    p = gap(v_pi_v=[np.nan, 4.0])
    np.testing.assert_allclose(LAW.limit_v(p), [0.7 * pull_in_v(2.0, 200.0, 20.0), 3.2])


def test_angle_follows_travel_and_direction():
    # coupling exp(-gap/d): 25 nm with d = 50 nm is a factor exp(1/2)
    volts = holding_volts(25e-9)
    p = gap(direction=[1.0, -1.0])
    angle = LAW.rest_rad(p) + LAW.change_rad(volts, p)
    np.testing.assert_allclose(angle, [3.05 * np.exp(0.5), 3.05 * np.exp(-0.5)], rtol=1e-12)


def test_charge_shifts_the_force_parabola():
    # force from (V - V0)^2: even about V0, and at 0 V the part already moved
    p = gap(charge_v=[0.4])
    up, down = (LAW.change_rad(0.4 + s, p) for s in (2.0, -2.0))
    assert up == pytest.approx(down, rel=1e-14)
    assert LAW.travel_nm(0.4, p) == pytest.approx([0.0], abs=1e-30)
    assert LAW.rest_rad(p)[0] > 3.05
    plain = LAW.travel_nm(2.0, gap())
    assert LAW.travel_nm(2.4, p) == pytest.approx(plain, rel=1e-14)
    np.testing.assert_allclose(LAW.limits_v(p), [0.4 - LAW.limit_v(gap()), 0.4 + LAW.limit_v(gap())])


def test_polarity_picks_one_side_of_charge():
    p = gap(charge_v=[0.4, 0.4], polarity=[1.0, -1.0])
    volts = LAW.volts([0.5, 0.5], p)
    assert volts.sum() == pytest.approx(0.8, abs=1e-12)
    assert volts[0] > 0.4 > volts[1]


def test_forward_beyond_pull_in_is_refused():
    v_pi = float(pull_in_v(2.0, 200.0, 20.0))
    LAW.change_rad(0.999 * v_pi, gap())
    with pytest.raises(PullIn, match=r"5.2 V from charge_v is above 5.174 V"):
        LAW.change_rad(5.2, gap())


def test_inverse_names_volts_limit_and_margin():
    p = gap(margin=[0.8, 0.8])
    inside, over, past = (3.05 * np.expm1(x / 50) for x in (20.0, 30.0, 70.0))
    with pytest.raises(PullIn, match=r"4\.\d+ V is above 4.139 V, margin 0.8 below the pull-in at 5.174 V") as c:
        LAW.volts([inside, over], p)
    assert c.value.rows == (1,)
    with pytest.raises(PullIn, match=r"travel of 70 nm is not below 66.67 nm.*margin 0.8 allows 4.139 V"):
        LAW.volts([inside, past], p)


def test_gap_never_opens_against_pull():
    with pytest.raises(GapOutOfRange, match=r"needs 8.952 nm of travel against the pull; it can only rise from 3.05"):
        LAW.volts([-0.5], gap())
    with pytest.raises(GapOutOfRange, match=r"can only fall from 3.05"):
        LAW.volts([0.5], gap(direction=[-1.0]))
    with pytest.raises(GapOutOfRange, match=r"not above 0 rad"):
        LAW.volts([-4.0], gap())


def test_optical_gap_stops_closing_travel():
    p = gap(optical_gap_nm=[10.0])
    assert LAW.reach_rad(p, 0.0, 8.0)[1] == pytest.approx([3.05 * np.expm1(0.2)], rel=1e-12)
    with pytest.raises(GapOutOfRange, match=r"travel of 15 nm is above its optical gap of 10 nm"):
        LAW.volts([3.05 * np.expm1(0.3)], p)
    with pytest.raises(GapOutOfRange, match=r"above its optical gap"):
        LAW.change_rad(4.0, p)
    assert LAW.change_rad(4.0, gap(optical_gap_nm=[10.0], direction=[-1.0]))[0] < 0


def test_bar_and_cross_lie_within_reach():
    # cross_power = sin^2 k (coupled modes): closing from 3.05 rad, bar is at pi, cross at 3 pi/2
    p = gap(margin=[0.8])
    low, high = LAW.rest_rad(p) + LAW.reach_rad(p, 0.0, 8.0)
    angles = [branches(k, low, high).angle_rad[0, 0] for k in (0.0, np.pi / 2)]
    np.testing.assert_allclose(angles, [np.pi, 1.5 * np.pi])
    volts = [LAW.volts(a - LAW.rest_rad(p), p)[0] for a in angles]
    travel = 50e-9 * np.log(np.array(angles) / 3.05)
    np.testing.assert_allclose(volts, holding_volts(travel), rtol=1e-10)


def test_parasitic_phase_follows_the_travel():
    # 25 nm at 2 mrad/nm and 1e-5 rad/nm^2: 0.05 + 0.00625 rad
    p = gap(phase_rad_per_nm=[2e-3], phase_rad_per_nm2=[1e-5])
    assert LAW.parasitic_phase_rad(holding_volts(25e-9), p) == pytest.approx([0.05625], rel=1e-10)
    assert LAW.parasitic_phase_rad(0.0, p) == pytest.approx([0.0])


def test_parasitic_phase_counts_from_zero_volts():
    # charged so that 0 V already travels 10 nm; at 25 nm 2e-3 * 15 + 1e-5 * (625 - 100) rad more
    p = gap(phase_rad_per_nm=[2e-3], phase_rad_per_nm2=[1e-5], charge_v=[-holding_volts(10e-9)])
    volts = holding_volts(25e-9) - holding_volts(10e-9)
    assert LAW.parasitic_phase_rad(volts, p) == pytest.approx([0.03525], rel=1e-9)


def test_wavelength_slope_follows_the_travel():
    # second method: the angle again with a decay length 1 nm of wavelength longer, by difference;
    # the net's own slope is the one at rest, so the rest angle is the same for both
    p, volts = gap(decay_slope_per_nm=[0.002]), holding_volts(25e-9)
    longer, shorter = (gap(decay_nm=[50 * (1 + s * 0.002 * 1e-3)]) for s in (1, -1))
    angles = [LAW.rest_rad(q) + LAW.change_rad(volts, q) for q in (longer, shorter)]
    assert LAW.angle_slope_per_nm(volts, p) == pytest.approx(np.log(angles[0] / angles[1]) / 2e-3, rel=1e-6)


def test_switch_energy_is_charge_times_voltage():
    # C V^2 with C = eps0 A / (g0 - x); at 25 nm 1.0119 fF
    volts = holding_volts(25e-9)
    farad = EPS0_F_PER_M * AREA / (G0 - 25e-9)
    assert LAW.switch_energy_nj(0.0, volts, gap()) == pytest.approx([1e9 * farad * volts**2], rel=1e-10)
    # charge that flows back to ground or into the source is not paid out again
    np.testing.assert_array_equal(LAW.switch_energy_nj(volts, [[0.0], [1.0]], gap()), [[0.0], [0.0]])
    assert LAW.switch_energy_nj(volts, -volts, gap()) == pytest.approx([2e9 * farad * volts**2], rel=1e-10)


def test_gaps_hold_on_far_less_energy():
    # common practice: holding electrostatically takes orders of magnitude less than heating
    heater = {"p2pi_mw": np.array([24.0]), "r_ohm": np.array([600.0])}
    hot = LAWS[HEATER].volts(np.pi, heater)
    per_second_nj = 1e6 * LAWS[HEATER].hold_power_mw(hot, heater)
    gap_nj = 1e6 * LAW.hold_power_mw(3.0, gap()) + LAW.switch_energy_nj(0.0, 3.0, gap())
    assert LAW.hold_power_mw(3.0, gap()) == pytest.approx([0.0])
    assert (gap_nj < 1e-6 * per_second_nj).all()


def comb():
    values = {"force_n_per_v2": 1e-9, "stiffness_n_per_m": 1.0, "side_travel_nm": 100.0}
    values |= {"decay_nm": 50.0, "rest_rad": 1.0, "capacitance_ff": 2.0}
    return {name: np.array([v]) for name, v in values.items()}


def test_comb_travel_grows_as_voltage_squared():
    # Hooke: 1e-9 N/V^2 * 25 V^2 / 1 N/m = 25 nm; fingers snap sideways at 100 nm, 10 V
    assert COMB_DRIVE.travel_nm(5.0, comb()) == pytest.approx([25.0], rel=1e-13)
    assert COMB_DRIVE.unstable_v(comb()) == pytest.approx([10.0])
    assert COMB_DRIVE.limit_v(comb()) == pytest.approx([7.0])
    with pytest.raises(PullIn, match=r"7.071 V is above 7 V"):
        COMB_DRIVE.volts([np.expm1(1.0)], comb())


def test_comb_capacitance_fits_its_pull():
    # virtual work: force = dC/dx V^2 / 2, so dC/dx = 2e-9 F/m; 25 nm add 0.05 fF
    grown = COMB_DRIVE.capacitance_ff(5.0, comb()) - COMB_DRIVE.capacitance_ff(0.0, comb())
    assert grown == pytest.approx([2e-9 * 25e-9 * 1e15], rel=1e-12)


def test_direction_and_polarity_are_signs():
    found = check_params(LAW, gap(direction=[1.0, 0.5], polarity=[0.0, -1.0]))
    assert [(b.row, b.param.name, b.allowed) for b in found] == [
        (1, "direction", "-1 or 1"),
        (0, "polarity", "-1 or 1"),
    ]
