"""Measured tables: the monotone curve, its exact inverse, and what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import PchipInterpolator
from scipy.optimize import isotonic_regression

from meshctl.errors import MissingRow, NotFinite, OutOfRange, OutsideMeasuredRange, TableNotMonotone
from meshctl.laws import LAWS, TABLE
from meshctl.laws.curves import Curves, check_table
from meshctl.laws.smoothing import smoothed

LAW = LAWS[TABLE]


def rows_of(volts, value, sigma=0.0):
    return np.stack(np.broadcast_arrays(np.asarray(volts, float), value, sigma), 1)


def measured(noise=0.0, count=21, seed=0):
    """Phase of an invented heater whose resistance rises, 0 to 5 V, with seeded noise."""
    volts = np.linspace(0.0, 5.0, count)
    cold = volts**2 / 20.0
    value = 4 * np.pi * cold / (1 + np.sqrt(1 + 0.4 * cold))
    return rows_of(volts, value + noise * np.random.default_rng(seed).standard_normal(count), noise)


@st.composite
def tables(draw):
    count = draw(st.integers(4, 30))
    steps = st.floats(0.05, 2.0)
    volts = np.cumsum(draw(st.lists(steps, min_size=count, max_size=count)))
    volts = volts - draw(st.sampled_from([volts[0], 0.0, volts[count // 2], volts[-1] + 1]))
    rises = st.one_of(st.just(0.0), st.floats(1e-6, 3.0))
    value = np.cumsum([1.0, *draw(st.lists(rises, min_size=count - 1, max_size=count - 1))])
    value[-1] += 0.1
    return rows_of(volts, value * draw(st.sampled_from([1.0, -1.0])))


@settings(max_examples=60, deadline=None)
@given(st.lists(tables(), min_size=1, max_size=4))
def test_curve_agrees_with_scipy_pchip(several):
    curves = Curves(several)
    volts = np.linspace(curves.low_v, curves.high_v, 57)
    ours, slope = curves.at(volts), curves.slope_at(volts)
    for row, table in enumerate(several):
        power = 2 if table[0, 0] >= 0 else 1
        reference = PchipInterpolator(table[:, 0] ** power, table[:, 1])
        x = volts[:, row] ** power
        by_volts = reference.derivative()(x) * (2 * volts[:, row] if power == 2 else 1.0)
        # same formulas, another order of rounding: values to 90 rad, slopes over steps down to 0.05 V
        np.testing.assert_allclose(ours[:, row], reference(x), rtol=0, atol=1e-12)
        np.testing.assert_allclose(slope[:, row], by_volts, rtol=1e-8, atol=1e-9)


@settings(max_examples=60, deadline=None)
@given(st.lists(tables(), min_size=1, max_size=4), st.floats(0.0, 1.0))
def test_inverse_meets_the_same_curve(several, share):
    p = {"tables": several}
    low, high = LAW.reach_rad(p, -np.inf, np.inf)
    wanted = low + share * (high - low)
    volts = LAW.volts(wanted, p)
    # one last digit of V at up to 60 V and 60 rad/V is 4e-13 rad
    assert np.abs(LAW.change_rad(volts, p) - wanted).max() <= 1e-12


def test_inverse_on_flat_curves_is_sharp():
    # residual on the curve's own axis, where no rounding of V is in the way
    curves = Curves([rows_of([-3, -2, -1, 0, 1], [0.0, 1.0, 1.0, 1.0, 2.0]), measured()])
    value = np.linspace([0.0, 0.0], [2.0, measured()[-1, 1]], 2001)
    assert np.abs(curves.at(curves.volts_at(value)) - value).max() <= 1e-13


def test_level_stretch_answers_its_first_end():
    curves = Curves([rows_of([0, 1, 2, 3, 4], [0.0, 1.0, 1.0, 1.0, 2.0])])
    assert curves.volts_at(np.array([1.0])) == pytest.approx([1.0], abs=1e-12)


def test_rows_are_met_exactly():
    table = measured()
    change = LAW.change_rad(table[:, :1], {"tables": [table]})[:, 0]
    np.testing.assert_allclose(change, table[:, 1] - table[0, 1], rtol=0, atol=1e-14)


def test_square_axis_beats_linear_axis():
    # the law behind the rows is known here; scipy on a V axis is the yardstick
    table, fine = measured(), measured(count=401)
    ours = np.abs(LAW.change_rad(fine[:, :1], {"tables": [table]})[:, 0] - fine[:, 1]).max()
    linear = np.abs(PchipInterpolator(table[:, 0], table[:, 1])(fine[:, 0]) - fine[:, 1]).max()
    assert ours < linear / 3


def test_rest_is_unknown_without_zero_volts():
    started, crossing = (
        rows_of([1, 2, 3, 4], [5.0, 6.0, 8.0, 9.0]),
        rows_of([-2, -1, 0, 1], [1.0, 2.0, 4.0, 5.0]),
    )
    p = {"tables": [started, crossing]}
    rest = LAW.rest_rad(p)
    assert np.isnan(rest[0])
    assert rest[1] == pytest.approx(4.0)
    np.testing.assert_array_equal(LAW.reference_rad(p), [5.0, 4.0])
    np.testing.assert_array_equal(LAW.limit_v(p), [4.0, 1.0])


def test_nothing_is_read_beyond_rows():
    p = {"tables": [measured(), measured()]}
    top = measured()[-1, 1]  # 5 pi / (1 + sqrt(1.5)) rad
    with pytest.raises(
        OutsideMeasuredRange, match=r"'actuator 1': 7.07057 rad is outside its measured range of 0 to 7.06057"
    ) as c:
        LAW.volts([1.0, top + 0.01], p)
    assert c.value.rows == (1,)
    with pytest.raises(OutsideMeasuredRange, match=r"5.1 V is outside its measured range of 0 to 5 V"):
        LAW.change_rad([5.1, 1.0], p)
    with pytest.raises(OutsideMeasuredRange):
        LAW.change_rad([-0.1, np.nan], p)


def test_turning_tables_name_their_volts():
    table = rows_of([0, 1, 2, 3, 4], [0.0, 1.0, 0.9, 2.0, 1.9])
    with pytest.raises(TableNotMonotone, match=r"table x: .* after 1 V, 3 V; smooth it first: fit V\^2") as caught:
        check_table(table, where="table x")
    assert caught.value.exit_code == 3
    with pytest.raises(TableNotMonotone, match=r"actuator 1: value_rad turns back after 1 V, 3 V"):
        LAW.change_rad(1.0, {"tables": [measured(), table]})


@pytest.mark.parametrize(
    ("table", "finding", "words"),
    [
        (measured()[:3], MissingRow, "has 3 rows, needs at least 4"),
        (measured() * np.nan, NotFinite, "row 1 of the table"),
        (measured() - [0, 0, 1], OutOfRange, "sigma_rad is -1 rad at 0 V"),
        (measured()[[0, 2, 1, 3]], TableNotMonotone, "volts do not rise after 0.5 V"),
        (rows_of([0, 1, 2, 3], 1.0), TableNotMonotone, "ends as it began"),
    ],
)
def test_unsound_tables_are_refused(table, finding, words):
    with pytest.raises(finding, match=words):
        check_table(table)
    with pytest.raises(finding, match=f"actuator 0: .*{words}"):
        Curves([table])


@pytest.mark.parametrize(("how", "degree"), [("v2", 1), ("v4", 2)])
def test_smoothing_fit_agrees_with_polyfit(how, degree):
    table = measured(noise=0.05)
    table[:, 2] = np.linspace(0.02, 0.08, len(table))
    result = smoothed(table[::-1], how)
    square = table[:, 0] ** 2
    fit, cov = np.polyfit(square, table[:, 1], degree, w=1 / table[:, 2], cov="unscaled")
    basis = square[:, None] ** np.arange(degree, -1, -1)
    np.testing.assert_allclose(result[:, 1], basis @ fit, atol=1e-11)
    np.testing.assert_allclose(result[:, 2] ** 2, ((basis @ cov) * basis).sum(1), rtol=1e-8)


@pytest.mark.parametrize("sense", [1.0, -1.0])
def test_isotonic_smoothing_agrees_with_scipy(sense):
    table = measured(noise=0.3, count=51) * [1.0, sense, 1.0]
    table[:, 2] = np.linspace(0.2, 0.5, 51)
    reference = isotonic_regression(table[:, 1], weights=table[:, 2] ** -2, increasing=sense > 0)
    np.testing.assert_allclose(smoothed(table, "isotonic")[:, 1], reference.x, atol=1e-12)


def test_repeated_volts_merge_by_weight():
    table = np.concatenate([measured(0.1), measured(0.1, seed=1)])
    table[21:, 2] = 0.2
    result = smoothed(table, "isotonic")
    assert len(result) == 21
    # weights 1/0.01 and 1/0.04 share 4:1
    merged = 0.8 * table[:21, 1] + 0.2 * table[21:, 1]
    np.testing.assert_allclose(result[:, 1], isotonic_regression(merged).x, atol=1e-12)


def test_noisy_table_serves_after_smoothing():
    noisy = measured(noise=0.1, count=51, seed=3)
    with pytest.raises(TableNotMonotone):
        LAW.change_rad(1.0, {"tables": [noisy]})
    fitted = smoothed(noisy, "v4")
    # 51 rows of 0.1 rad and three numbers: about 0.1 sqrt(3/51) = 0.024 rad, five of them at most
    assert np.abs(fitted[:, 1] - measured(count=51)[:, 1]).max() < 0.12
    LAW.volts([3.0], {"tables": [fitted]})


def test_unknown_smoothing_is_refused():
    with pytest.raises(ValueError, match=r"must be one of v2, v4, isotonic"):
        smoothed(measured(), "cubic")
