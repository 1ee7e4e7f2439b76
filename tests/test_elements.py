"""Conventions by number: every part's block, its losses and its wavelength."""

import numpy as np
import pytest
from scipy.linalg import expm

from meshctl.optics.elements import (
    KINDS,
    angle_scale,
    cell_block,
    coupler_block,
    guide_phase_rad,
    kind_row,
    phase_block,
    phase_scale,
    through_and_cross,
)

EXACT = 1e-15  # one or two roundings of numbers of order one
PASSING = [kind.name for kind in KINDS if not kind.reflects]  # through and cross amplitudes say all of these
C_UM_THZ = 299.792458  # speed of light, um * THz (SI definition)
WAVES = {"wavelength_nm": 1543.0, "centre_nm": 1550.0, "n_eff": 2.4, "n_group": 4.2, "angle_slope_per_nm": 2e-3}


def amplitudes(kind, value=0.0, loss_db=0.0, length_um=0.0, xp=np, **waves):
    row = np.array([kind_row(kind)])
    return through_and_cross(
        row, *(xp.array([float(v)]) for v in (value, loss_db, length_um)), **(WAVES | waves), xp=xp
    )


def test_coupler_block_is_coupled_mode_solution():
    # dA/dz = i K A for two modes of coupling coefficient 1 over length k (coupled-mode theory, textbook)
    for k in (0.0, 0.3, np.pi / 4, 2.0, 4.0):
        assert np.abs(coupler_block(k) - expm(1j * k * np.array([[0, 1], [1, 0]]))).max() <= 1e-14  # expm's own


def test_coupler_is_bar_then_cross():
    assert np.allclose(coupler_block(0.0), np.eye(2), rtol=0, atol=EXACT)
    assert np.allclose(coupler_block(np.pi / 2), [[0, 1j], [1j, 0]], rtol=0, atol=EXACT)
    assert np.allclose(coupler_block(np.pi / 6), [[0.75**0.5, 0.5j], [0.5j, 0.75**0.5]], rtol=0, atol=EXACT)


def test_half_turn_more_flips_coupler_sign():
    assert np.allclose(coupler_block(0.7 + np.pi), -coupler_block(0.7), rtol=0, atol=EXACT)


def test_phase_acts_on_upper_arm_only():
    assert np.allclose(phase_block(np.pi / 2), [[1j, 0], [0, 1]], rtol=0, atol=EXACT)


@pytest.mark.parametrize(("inner", "cross_power"), [(0.0, 1.0), (np.pi, 0.0), (np.pi / 2, 0.5), (np.pi / 3, 0.75)])
def test_cell_crosses_at_zero_inner_phase(inner, cross_power):
    # Mach-Zehnder interferometer, cross power cos^2(inner / 2) (textbook)
    block = cell_block(inner, 0.4)
    assert abs(abs(block[1, 0]) ** 2 - cross_power) <= EXACT
    assert abs(abs(block[0, 0]) ** 2 - (1 - cross_power)) <= EXACT


def test_cell_block_equals_its_closed_form():
    # i exp(i t/2) [[exp(ip) sin t/2, cos t/2], [exp(ip) cos t/2, -sin t/2]] (Clements et al. 2016, with our couplers)
    t, p = 1.1, -2.3
    s, c, e = np.sin(t / 2), np.cos(t / 2), np.exp(1j * p)
    assert np.allclose(
        cell_block(t, p), 1j * np.exp(0.5j * t) * np.array([[e * s, c], [e * c, -s]]), rtol=0, atol=EXACT
    )


def test_splitting_errors_add_and_subtract():
    # at inner = 0 the two angles add to one coupler; at pi they subtract (coupled-mode theory)
    e1, e2 = 0.07, -0.03
    assert abs(abs(cell_block(0.0, 0.0, e1, e2)[1, 0]) ** 2 - np.cos(e1 + e2) ** 2) <= EXACT
    assert abs(abs(cell_block(np.pi, 0.0, e1, e2)[1, 0]) ** 2 - np.sin(e1 - e2) ** 2) <= EXACT


def test_first_error_belongs_to_first_coupler():
    # light of input 1 alone: after split1 its upper amplitude is cos(pi/4 + e1)
    parts = coupler_block(np.pi / 4) @ phase_block(0.9) @ coupler_block(np.pi / 4 + 0.1) @ phase_block(0.2)
    assert np.allclose(cell_block(0.9, 0.2, error1_rad=0.1), parts, rtol=0, atol=EXACT)


def test_guide_phase_grows_with_its_path():
    # at shorter waves more periods fit into the guide, and twice the guide holds twice as many
    one = guide_phase_rad(100.0, 1549.0, 1550.0, 2.4, 4.2)
    assert one > 0.0
    assert abs(guide_phase_rad(200.0, 1549.0, 1550.0, 2.4, 4.2) - 2 * one) <= 1e-12  # rounding of 0.1 rad per um


def test_guide_turns_once_per_spectral_range():
    # free spectral range c / (n_g L) in frequency (textbook)
    length, n_group = 250.0, 4.2
    f0 = C_UM_THZ / 1.55
    for turns in (1, -3):
        wave_nm = 1e3 * C_UM_THZ / (f0 + turns * C_UM_THZ / (n_group * length))
        phase = guide_phase_rad(length, wave_nm, 1550.0, 2.4, n_group)
        assert abs(phase - 2 * np.pi * turns) <= 1e-9  # 2 pi n L / lambda is some 2500 rad, kept to 1e-13 of itself


def test_group_delay_is_positive_phase_slope():
    length, step = 1000.0, 1e-3  # um, THz
    f0 = C_UM_THZ / 1.55
    ahead, behind = (guide_phase_rad(length, 1e3 * C_UM_THZ / f, 1550.0, 2.4, 4.2) for f in (f0 + step, f0 - step))
    delay_ps = (ahead - behind) / (2 * np.pi * 2 * step)
    assert abs(delay_ps - 4.2 * length / C_UM_THZ) <= 1e-6  # ps; n_g L / c is 14 ps, the difference loses 7 digits


def test_phase_scales_as_centre_over_wavelength():
    assert phase_scale(775.0, 1550.0) == 2.0
    assert abs(amplitudes("phase", 1.3, wavelength_nm=775.0)[0][0] - np.exp(2.6j)) <= EXACT


def test_coupler_angle_follows_its_slope():
    assert abs(angle_scale(1560.0, 1550.0, 0.002) - 1.02) <= EXACT
    t, x = amplitudes("coupler", 0.5, wavelength_nm=1560.0, angle_slope_per_nm=0.002)
    assert abs(t[0] - np.cos(0.51)) <= EXACT
    assert abs(x[0] - 1j * np.sin(0.51)) <= EXACT


@pytest.mark.parametrize("kind", PASSING)
def test_every_kind_loses_its_decibels(kind):
    # 10 dB are a tenth of the power (definition); a lossless part keeps all of it, both lanes apart
    value = 0.0 if kind == "loss" else 0.7
    t, x = amplitudes(kind, value, loss_db=10.0, length_um=80.0 if kind == "guide" else 0.0)
    assert abs(abs(t[0]) ** 2 + abs(x[0]) ** 2 - 0.1) <= EXACT
    assert abs((np.conj(t) * x).real[0]) <= EXACT


def test_loss_element_loses_its_value():
    assert abs(abs(amplitudes("loss", 3.0, loss_db=7.0)[0][0]) ** 2 - 0.1) <= EXACT


def test_unknown_kinds_have_no_row():
    assert kind_row("ring") is None
    assert all(KINDS[kind_row(kind.name)].name == kind.name for kind in KINDS)


@pytest.mark.sample
@pytest.mark.slow
def test_jax_arrays_give_numpy_blocks():
    import jax

    jax.config.update("jax_enable_x64", True)
    import jax.numpy as jnp

    for kind in PASSING:
        ours, theirs = amplitudes(kind, 0.7, 0.2, 30.0), amplitudes(kind, 0.7, 0.2, 30.0, xp=jnp)
        assert all(np.abs(a - np.asarray(b)).max() <= 1e-14 for a, b in zip(ours, theirs, strict=True))
    inner, outer = np.array([0.4, 2.0]), np.array([1.0, -1.0])
    theirs = cell_block(jnp.asarray(inner), jnp.asarray(outer), 0.1, 0.2, xp=jnp)
    assert np.abs(np.asarray(theirs) - cell_block(inner, outer, 0.1, 0.2)).max() <= 1e-14
