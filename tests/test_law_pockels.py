"""Electro-optic and carrier shifters: both polarities, and where the phase turns back."""

import numpy as np
import pytest

from meshctl.errors import VoltageOutOfRange
from meshctl.laws import CARRIER, LAWS, POCKELS
from meshctl.laws.law import check_params

LAW = LAWS[POCKELS]


def shifter(linear, quadratic, **more):
    given = {"linear_rad_per_v": linear, "quadratic_rad_per_v2": quadratic} | more
    return {name: np.atleast_1d(np.asarray(v, float)) for name, v in given.items()}


def test_inverse_is_the_root_nearest_zero():
    # numpy.roots as the second method
    p = shifter(0.5, -0.02)
    for change in (-4.0, -0.3, 1e-9, 2.0, 3.1):
        roots = np.roots([-0.02, 0.5, -change])
        assert LAW.volts(change, p) == pytest.approx([roots[np.argmin(np.abs(roots))]], rel=1e-7)


def test_small_changes_keep_all_digits():
    # V = change / linear (1 - quadratic change / linear^2 + ..): the second term is 4e-12 here
    assert LAW.volts(1e-10, shifter(0.5, 0.01)) == pytest.approx([2e-10 * (1 - 4e-12)], rel=1e-15)


def test_phase_beyond_turning_is_refused():
    # 0.5 V - 0.02 V^2 has its greatest value 3.125 rad at 12.5 V
    p = shifter([0.5, 0.5], [-0.02, 0.0])
    assert LAW.reach_rad(p, -20.0, 20.0)[1] == pytest.approx([3.125, 10.0])
    assert LAW.volts([3.125, 3.2], p) == pytest.approx([12.5, 6.4])
    with pytest.raises(VoltageOutOfRange, match=r"3.2 rad is beyond 3.125 rad") as caught:
        LAW.volts([3.2, 3.2], p)
    assert caught.value.rows == (0,)


def test_square_law_alone_answers_positive_volts():
    p = shifter(0.0, 0.1)
    assert LAW.volts(0.9, p) == pytest.approx([3.0])
    low, high = LAW.reach_rad(p, -5.0, 4.0)
    assert (low, high) == (pytest.approx([0.0]), pytest.approx([1.6]))
    with pytest.raises(VoltageOutOfRange, match=r"beyond 0 rad"):
        LAW.volts(-0.1, p)


def test_shifter_without_response_is_unsound():
    p = shifter([0.5, 0.0], [0.0, 0.0])
    assert [b.row for b in check_params(LAW, p)] == [1]
    with pytest.raises(VoltageOutOfRange):
        LAW.volts([1.0, 1.0], p)


def test_carriers_may_draw_static_current():
    # Ohm: 0.2 mA/V is 5 kohm; at 3 V 0.6 mA and 1.8 mW
    law = LAWS[CARRIER]
    p = shifter([0.3, 0.3], [0.0, 0.0], current_ma_per_v=[0.2, 0.0])
    assert law.resistance_ohm(p) == pytest.approx([5000.0, np.inf])
    assert law.power_mw(3.0, p) == pytest.approx([1.8, 0.0])
    assert LAW.power_mw(3.0, p) == pytest.approx([0.0, 0.0])


def test_capacitance_gives_switch_energy():
    # C V^2: 100 fF at 5 V is 2.5 pJ
    p = shifter(0.3, 0.0, capacitance_ff=100.0)
    assert LAW.switch_energy_nj(0.0, -5.0, p) == pytest.approx([2.5e-3])
    assert np.isnan(LAW.switch_energy_nj(0.0, 5.0, shifter(0.3, 0.0))).all()
