"""Coupler angles that do the same to light: every branch, and the signs that go with it."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from meshctl.laws.branch import branches
from meshctl.optics.elements import coupler_block

Z = np.diag([1.0, -1.0])
angles = st.one_of(st.floats(-7, 7), st.integers(-6, 6).map(lambda n: n * np.pi / 2))


@settings(max_examples=80, deadline=None)
@given(angles, st.floats(-8, 8), st.floats(0, 12))
def test_every_branch_gives_the_block(k, low, width):
    found = branches(k, low, low + width)
    for angle, sign, flipped in zip(found.angle_rad, found.sign, found.flipped, strict=True):
        block = coupler_block(k)
        expected = sign * (Z @ block @ Z if flipped else block)
        np.testing.assert_allclose(coupler_block(angle), expected, atol=1e-14)


@settings(max_examples=80, deadline=None)
@given(angles, st.floats(-8, 8), st.floats(0, 12))
def test_no_branch_in_range_is_missed(k, low, width):
    # second method: a fixed list of all candidates, cut to the range
    m = np.arange(-12, 13) * np.pi
    near = np.unique(np.round(np.concatenate([k + m, m - k]), 9))
    inside = near[(near > low + 1e-8) & (near < low + width - 1e-8)]
    found = branches(k, low, low + width).angle_rad
    assert (np.diff(found) > 1e-9).all()
    assert all(np.abs(found - a).min() < 1e-8 for a in inside)
    assert ((found >= low - 1e-11) & (found <= low + width + 1e-11)).all()


def test_rows_of_branches_end_in_nan():
    found = branches([0.5, 0.0, 1.0], 0.0, [7.0, 7.0, 0.3])
    assert found.angle_rad.shape == (3, 5)
    np.testing.assert_allclose(found.angle_rad[0], [0.5, np.pi - 0.5, np.pi + 0.5, 2 * np.pi - 0.5, 2 * np.pi + 0.5])
    np.testing.assert_array_equal(found.sign[0], [1, -1, -1, 1, 1])
    np.testing.assert_array_equal(np.isnan(found.angle_rad).sum(1), [0, 2, 5])
    assert not found.flipped[1:].any()


def test_endless_ranges_are_refused():
    with pytest.raises(ValueError, match=r"finite"):
        branches(0.5, 0.0, np.inf)
