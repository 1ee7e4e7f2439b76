"""Stepwise parts that keep their level: the exact one, or the nearest with its error."""

import numpy as np
import pytest

from meshctl.errors import DuplicateName, MissingRow, NotFinite, OutsideMeasuredRange
from meshctl.laws import LAWS, LEVELS
from meshctl.laws.law import check_params
from meshctl.laws.levels import check_levels

LAW = LAWS[LEVELS]
FOUR = np.array([[1.0, 0.2, 0.0], [2.0, 1.0, 0.0], [3.0, 0.6, 0.0], [4.0, 2.0, 0.0]])
TWO = np.array([[5.0, 3.0, 0.0], [-5.0, 0.0, 0.0]])
P = {"tables": [FOUR, TWO], "off_level": np.array([1.0, np.nan])}


def test_listed_levels_are_met_exactly():
    np.testing.assert_array_equal(LAW.rest_rad(P), [1.0, 3.0])
    np.testing.assert_array_equal(LAW.volts([0.6 - 1.0, -3.0], P), [3.0, -5.0])
    np.testing.assert_array_equal(LAW.change_rad([3.0, -5.0], P), [0.6 - 1.0, -3.0])


def test_nearest_level_tells_its_error():
    near = LAW.nearest_level([[0.9, -1.0], [-0.3, -2.0]], P)
    np.testing.assert_array_equal(near.level, [[3, 0], [2, 1]])
    np.testing.assert_array_equal(near.volts, [[4.0, 5.0], [3.0, -5.0]])
    np.testing.assert_allclose(near.error_rad, [[0.1, 1.0], [-0.1, -1.0]])


def test_between_levels_is_refused_loudly():
    with pytest.raises(OutsideMeasuredRange, match=r"0.9 rad is no level; the nearest gives 1 rad") as caught:
        LAW.volts([0.9, 0.0], P)
    assert caught.value.rows == (0,)


def test_pulses_far_from_listed_are_refused():
    np.testing.assert_array_equal(LAW.change_rad([3.04, 5.0], P), [0.6 - 1.0, 0.0])
    with pytest.raises(OutsideMeasuredRange, match=r"3.3 V is 0.3 V from the nearest level's 3 V"):
        LAW.change_rad([3.3, 5.0], P)


def test_reach_counts_only_writable_levels():
    low, high = LAW.reach_rad(P, 0.0, 3.5)
    np.testing.assert_allclose(low, [-0.8, np.nan])
    np.testing.assert_allclose(high, [0.0, np.nan])


def test_levels_hold_without_any_power():
    assert (LAW.hold_power_mw([3.0, 5.0], P) == 0.0).all()
    p = P | {"pulse_energy_nj": np.array([2.0, 2.0])}
    np.testing.assert_array_equal(LAW.switch_energy_nj([3.0, 5.0], [4.0, 5.0], p), [2.0, 0.0])


def test_off_level_must_be_listed():
    found = check_params(LAW, P | {"off_level": np.array([4.0, 0.5])})
    assert [(b.row, b.allowed) for b in found] == [
        (0, "a whole number, 0 to 3"),
        (1, "a whole number, 0 to 1"),
    ]


@pytest.mark.parametrize(
    ("table", "finding", "words"),
    [
        (FOUR[:1], MissingRow, "1 levels, at least 2"),
        (FOUR * [1, np.inf, 1], NotFinite, "level 0"),
        (FOUR[[0, 1, 1]], DuplicateName, "2 levels have pulses of 2 V"),
    ],
)
def test_unsound_levels_are_refused(table, finding, words):
    with pytest.raises(finding, match=words):
        check_levels(table)
    with pytest.raises(finding, match=f"actuator 1: .*{words}"):
        LAW.change_rad(1.0, {"tables": [FOUR, table]})
