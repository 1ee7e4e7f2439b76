"""What every law keeps: its inverse undoes its forward, inside its reach, at no negative power."""

import subprocess
import sys

import numpy as np
import pytest

from meshctl.errors import DriveFinding, MissingRow
from meshctl.laws import LAWS, law_row
from meshctl.laws.law import check_params

NAN = np.nan
ZERO = [0.0] * 5
# two or three invented actuators of each law, odd signs and defaults among them
SAMPLES = {
    "heater": {
        "p2pi_mw": [24.0, 20.0, 31.0],
        "r_ohm": [600.0, 500.0, 820.0],
        "offset_rad": [1.2, NAN, -0.4],
        "r_rise": [0.0, 0.1, -0.2],
    },
    "table": {
        "tables": [
            np.array([[0.0, 3.051, 0.001], [2.0, 3.347, 0.001], [3.0, 3.9, 0.001], [4.0, 4.9, 0.001]]),
            np.array([[-2.0, 1.0, 0.0], [-1.0, 0.7, 0.0], [0.5, 0.2, 0.0], [1.0, 0.2, 0.0], [2.0, -1.0, 0.0]]),
            np.stack([np.linspace(1.0, 5.0, 9), np.linspace(1.0, 5.0, 9) ** 2, np.zeros(9)], 1),
        ]
    },
    "gap": {
        "gap_nm": [200.0, 200.0, 250.0],
        "stiffness_n_per_m": [2.0, 2.0, 1.0],
        "area_um2": [20.0, 20.0, 30.0],
        "decay_nm": [50.0, 50.0, 80.0],
        "rest_rad": [3.05, 1.5, 0.3],
        "direction": [1.0, -1.0, NAN],
        "charge_v": [0.0, 0.3, -0.2],
        "polarity": [NAN, 1.0, -1.0],
        "optical_gap_nm": [NAN, 100.0, 8.0],
        "v_pi_v": [NAN, 5.0, NAN],
        "phase_rad_per_nm": [1e-3, 0.0, -2e-3],
        "phase_rad_per_nm2": [0.0, 0.0, 1e-5],
    },
    "comb": {
        "force_n_per_v2": [1e-9, 2e-9],
        "stiffness_n_per_m": [1.0, 2.0],
        "side_travel_nm": [100.0, 300.0],
        "decay_nm": [50.0, 90.0],
        "rest_rad": [1.0, 0.2],
        "charge_v": [0.0, 0.5],
        "capacitance_ff": [2.0, 1.0],
    },
    "pockels": {"linear_rad_per_v": [0.5, -0.5, 0.0], "quadratic_rad_per_v2": [0.0, 0.02, -0.1]},
    "carrier": {
        "linear_rad_per_v": [0.3, 0.2],
        "quadratic_rad_per_v2": [0.01, -0.02],
        "current_ma_per_v": [0.2, NAN],
    },
    "levels": {
        "tables": [
            np.array([[0.0, 0.0, 0.0], [2.0, 1.0, 0.0], [3.0, 0.5, 0.0]]),
            np.array([[1.0, 3.0, 0.0], [2.0, 1.0, 0.0]]),
        ],
        "off_level": [0.0, 1.0],
    },
}
LOW_V, HIGH_V = -8.0, 8.0


def sample(name):
    return {k: v if k == "tables" else np.array(v, float) for k, v in SAMPLES[name].items()}


def changes(law, p, count=201):
    """Changes all over the reach; of a stepwise law its ends."""
    low, high = law.reach_rad(p, LOW_V, HIGH_V)
    return np.linspace(low, high, 2 if law.stepwise else count)


every_law = pytest.mark.parametrize("law", LAWS, ids=lambda law: law.name)


def test_each_law_has_its_sample():
    assert set(SAMPLES) == {law.name for law in LAWS}


@every_law
def test_inverse_undoes_forward_inside_reach(law):
    p = sample(law.name)
    wanted = changes(law, p)
    volts = law.volts(wanted, p)
    assert np.abs(law.change_rad(volts, p) - wanted).max() <= 1e-12
    assert (volts >= LOW_V - 1e-9).all()
    assert (volts <= HIGH_V + 1e-9).all()


@every_law
def test_single_rows_answer_as_batches(law):
    p = sample(law.name)
    wanted = changes(law, p)
    batch = law.volts(wanted, p)
    np.testing.assert_array_equal(law.volts(wanted[1], p), batch[1])
    np.testing.assert_array_equal(law.change_rad(batch[1], p), law.change_rad(batch, p)[1])


@every_law
def test_wider_voltages_never_shrink_reach(law):
    p = sample(law.name)
    spans = [law.reach_rad(p, 0.5 - h, 1.0 + h) for h in np.linspace(0.0, 9.0, 19)]
    low, high = np.array([s[0] for s in spans]), np.array([s[1] for s in spans])
    known = np.isfinite(low)
    assert known[-1].all()
    assert not (known[:-1] & ~known[1:]).any()
    assert (np.diff(low, axis=0)[known[:-1]] <= 0.0).all()
    assert (np.diff(high, axis=0)[known[:-1]] >= 0.0).all()


@every_law
def test_static_power_is_never_negative(law):
    p = sample(law.name)
    volts = law.volts(changes(law, p), p)
    assert (law.power_mw(volts, p) >= 0.0).all()
    assert (law.hold_power_mw(volts, p) >= 0.0).all()
    assert (law.resistance_ohm(p) > 0.0).all()


@every_law
def test_slope_agrees_with_finite_difference(law):
    p = sample(law.name)
    if law.stepwise:
        assert (law.slope_rad_per_v(law.volts(changes(law, p), p), p) == 0.0).all()
        return
    low, high = law.branch_v(p)
    low, high = np.maximum(low, LOW_V), np.minimum(high, HIGH_V)
    volts = np.linspace(low, high, 41)[2:-2] + 1e-3
    h = 1e-6
    central = (law.change_rad(volts + h, p) - law.change_rad(volts - h, p)) / (2 * h)
    # central difference at 1e-6 V: rounding 1e-15 / 1e-6, and a kink of the second derivative at table rows
    np.testing.assert_allclose(law.slope_rad_per_v(volts, p), central, rtol=1e-5, atol=1e-7)


@every_law
def test_volts_at_rest_change_nothing(law):
    p = sample(law.name)
    rest = law.rest_rad(p)
    if law.stepwise:
        assert np.abs(law.change_rad(law.volts(0.0, p), p)).max() == 0.0
        return
    known = np.isfinite(rest)
    volts = np.where(known, 0.0, law.branch_v(p)[0])
    assert np.abs(law.change_rad(volts, p)).max() <= 1e-15
    np.testing.assert_array_equal(law.reference_rad(p)[known], rest[known])


# straight shifters reach everything; the turning ones are tested apart
@pytest.mark.parametrize("name", [law.name for law in LAWS if law.name not in ("pockels", "carrier")])
def test_changes_beyond_reach_name_rows(name):
    law, p = LAWS[law_row(name)], sample(name)
    wanted = law.reach_rad(p, LOW_V, HIGH_V)[0]
    wanted[1] = -1e3
    with pytest.raises(DriveFinding) as caught:
        law.volts(wanted, p)
    assert caught.value.rows == (1,)
    assert "'b'" in str(caught.value.named(["a", "b", "c"]))


@every_law
def test_sound_parameters_have_no_breach(law):
    assert check_params(law, sample(law.name)) == []


@every_law
def test_each_parameter_refuses_numbers_outside(law):
    for param in law.params:
        p = sample(law.name)
        rows = law.rows(p)
        outside = param.high * 2 + 1 if np.isfinite(param.high) else param.low - 1.0
        p[param.name] = np.full(rows, outside if np.isfinite(outside) else -np.inf)
        found = [b for b in check_params(law, p) if b.param.name == param.name]
        assert [b.row for b in found] == list(range(rows))
        assert all(b.allowed == param.allowed() for b in found)


@every_law
def test_parameter_names_end_in_units(law):
    endings = {"mW": "_mw", "ohm": "_ohm", "rad": "_rad", "V": "_v", "nm": "_nm", "fF": "_ff", "nJ": "_nj"}
    for param in law.params:
        assert param.name.endswith(endings.get(param.unit, ""))
        assert param.help


@pytest.mark.parametrize("law", [law for law in LAWS if law.has_tables], ids=lambda law: law.name)
def test_laws_check_their_own_rows(law):
    for table in sample(law.name)["tables"]:
        law.check_rows(table)
    with pytest.raises(MissingRow, match=r"tables.csv, actuator 'a': "):
        law.check_rows(np.zeros((1, 3)), "tables.csv, actuator 'a'")


def test_missing_required_parameters_are_breaches():
    law = LAWS[law_row("heater")]
    p = {"r_ohm": np.array([600.0, NAN])}
    found = {(b.row, b.param.name, b.allowed) for b in check_params(law, p)}
    assert found == {
        (0, "p2pi_mw", "1e-06 to 1e+06 mW"),
        (1, "p2pi_mw", "1e-06 to 1e+06 mW"),
        (1, "r_ohm", "0.001 to 1e+09 ohm"),
    }
    with pytest.raises(MissingRow, match=r"needs p2pi_mw"):
        law.volts([1.0, 1.0], p)


def test_unknown_law_has_no_row():
    assert law_row("lever") is None
    assert [law_row(law.name) for law in LAWS] == list(range(len(LAWS)))


def test_laws_load_neither_scipy_nor_numba():
    code = "import sys, meshctl.laws, meshctl.laws.branch; print(*sys.modules)"
    modules = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    ours = {m for m in modules.split() if m.startswith("meshctl.") and not m.startswith("meshctl.laws")}
    assert not {"scipy", "numba", "jax"} & set(modules.split())
    assert ours == {"meshctl.errors", "meshctl.units"}
