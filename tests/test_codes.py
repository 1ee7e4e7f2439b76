"""Codes of the source: plain rounding within half a step, and rounding that spares the mesh's matrix."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import unitary_group

from meshctl.drive.codes import RIDGE, Source, round_against
from meshctl.errors import NotFinite, OutOfRange, VoltageOutOfRange


# ---- a rectangular mesh of its own: cell = splitter, inner phase, splitter, outer phase, in plain numpy
def cell(inner, outer):
    half = np.array([[1, 1j], [1j, 1]]) / np.sqrt(2)
    return half @ np.diag([np.exp(1j * inner), 1]) @ half @ np.diag([np.exp(1j * outer), 1])


def columns(modes):
    return [np.arange(c % 2, modes - 1, 2) for c in range(modes)]


def matrices(modes, phases):
    """Matrices [.., N, N] of phases [.., 2 * cells], outer and inner of each cell in the order of columns."""
    U = np.broadcast_to(np.eye(modes, dtype=complex), (*phases.shape[:-1], modes, modes)).copy()
    k = 0
    for upper in columns(modes):
        outer, inner = (np.exp(1j * phases[..., k + s : k + 2 * len(upper) : 2, None]) for s in (0, 1))
        a, b = U[..., upper, :] * outer, U[..., upper + 1, :]
        U[..., upper, :] = (inner - 1) / 2 * a + 1j * (inner + 1) / 2 * b
        U[..., upper + 1, :] = 1j * (inner + 1) / 2 * a + (1 - inner) / 2 * b
        k += 2 * len(upper)
    return U


def phases_of(U):
    """Phases of the mesh that gives U but for phases at its outputs, by nulling along its diagonals."""
    U, n = U.copy(), len(U)
    first, last = [], []
    for i in range(1, n):
        for j in range(i):
            if i % 2:  # null U[row, m] with columns m and m + 1
                row, m = n - 1 - j, i - 1 - j
                a, b = U[row, m], U[row, m + 1]
                inner, outer = 2 * np.arctan2(abs(b), abs(a)), np.angle(-a * np.conj(b))
                U[:, m : m + 2] = U[:, m : m + 2] @ cell(inner, outer).conj().T
                first.append((m, inner, outer))
            else:  # null U[m + 1, j] with rows m and m + 1
                m = n + j - i - 1
                a, b = U[m, j], U[m + 1, j]
                inner, outer = 2 * np.arctan2(abs(a), abs(b)), np.angle(b * np.conj(a))
                U[m : m + 2] = cell(inner, outer) @ U[m : m + 2]
                last.append((m, inner, outer))
    left = np.angle(np.diagonal(U)).copy()
    for m, inner, outer in reversed(last):  # cell(..)^H diag(left) = diag(left') cell(inner, outer')
        first.append((m, inner, left[m] - left[m + 1]))
        left[m], left[m + 1] = np.pi - inner - outer + left[m + 1], np.pi - inner + left[m + 1]
    depth, phases = np.zeros(n, int), {}
    for m, inner, outer in first:
        c = max(depth[m], depth[m + 1])
        c += (c - m) % 2
        phases[c, m] = outer, inner
        depth[m] = depth[m + 1] = c + 1
    return np.concatenate([phases[c, m] for c, upper in enumerate(columns(n)) for m in upper]) % (2 * np.pi)


def gram_matrix(modes, phases, step=1e-4):
    """Second derivative of the infidelity by the phases, output phases being free, over 2, by differences."""
    U = matrices(modes, phases)
    J = np.empty((len(phases), modes, modes), complex)
    for k in range(0, len(phases), 64):
        moved = step * np.eye(len(phases))[k : k + 64]
        J[k : k + 64] = (matrices(modes, phases + moved) - matrices(modes, phases - moved)) / (2 * step)
    turned = np.einsum("rc,krc->kr", U.conj(), J).imag  # what output phases take up
    J = J.reshape(len(phases), -1)
    return (J.conj() @ J.T).real / modes - turned @ turned.T / modes


def infidelity(U, V):
    return 1.0 - (np.abs(np.einsum("rc,rc->r", U.conj(), V)).sum() / len(U)) ** 2


def crosstalk_matrix(modes):
    cells = [(c, m) for c, upper in enumerate(columns(modes)) for m in upper]
    xy = np.array([(500.0 * c + s, 100.0 * m) for c, m in cells for s in (0.0, 250.0)])
    far = np.hypot(*(xy[:, None] - xy[None]).transpose(2, 0, 1))
    return np.where(far == 0.0, 1.0, 0.05 * np.exp(-(far - 200.0) / 100.0))  # 5 % at 200 um


# ---- a heater of 500 ohm, 40 mW a turn, resistance up 10 % at 1.2 turns
def heater_volts(turns):
    return np.sqrt(20.0 * turns * (1 + turns / 12.0))


def heater_turns(volts):
    return 2.0 * (volts**2 / 20.0) / (1 + np.sqrt(1 + volts**2 / 60.0))


def both_roundings(modes, bits, rng):
    """Infidelity plain and aware, and their rms phase errors, for one Haar matrix."""
    U = unitary_group.rvs(modes, random_state=rng)
    phases = phases_of(U)
    n, C = len(phases), crosstalk_matrix(modes)
    whole = np.full(n, float(heater_volts(1.2)))
    source = Source(np.full(n, bits), 0.0 * whole, whole, 0.0 * whole, np.ones(n))
    own = rng.random(n)  # what offsets leave to be given is anything in a turn
    nearest = source.nearest_codes(heater_volts(own))

    def own_of(codes):
        return 2 * np.pi * heater_turns(source.volts_of(codes))

    aware = round_against(gram_matrix(modes, phases), own_of, 2 * np.pi * own, nearest, source.highest, spread=C)
    errors = [C @ (own_of(codes) - 2 * np.pi * own) for codes in (nearest, aware.codes)]
    np.testing.assert_allclose(aware.error, errors[1], rtol=0, atol=1e-12)
    harm = [infidelity(matrices(modes, phases), matrices(modes, phases + e)) for e in errors]
    return [*harm, *(np.sqrt(np.mean(e**2)) for e in errors)]


def test_test_mesh_makes_its_matrix():
    U = unitary_group.rvs(7, random_state=np.random.default_rng(1))
    assert infidelity(U, matrices(7, phases_of(U))) < 1e-13


def test_gram_matrix_predicts_the_infidelity():
    rng = np.random.default_rng(2)
    phases, e = 2 * np.pi * rng.random(56), 1e-4 * rng.standard_normal(56)
    harm = infidelity(matrices(8, phases), matrices(8, phases + e))
    assert e @ gram_matrix(8, phases) @ e == pytest.approx(harm, rel=1e-2)  # next order: e times as much


def test_aware_rounding_spares_small_meshes():
    rng = np.random.default_rng(3)
    plain, aware, rms_plain, rms_aware = np.mean([both_roundings(8, 8, rng) for _ in range(12)], axis=0)
    assert plain / aware >= 2.5
    assert rms_aware / rms_plain <= 2.0


def test_aware_rounding_spares_large_meshes():
    plain, aware, rms_plain, rms_aware = both_roundings(32, 8, np.random.default_rng(4))
    assert plain / aware >= 4.0
    assert rms_aware / rms_plain <= 2.0


@pytest.mark.sample
@pytest.mark.slow
@pytest.mark.parametrize(("modes", "gain", "targets"), [(8, 2.5, 40), (32, 4.0, 5)])
@pytest.mark.parametrize("bits", [8, 10, 12])
def test_aware_gain_holds_for_bits(modes, gain, targets, bits):
    rng = np.random.default_rng(bits)
    plain, aware, rms_plain, rms_aware = np.mean([both_roundings(modes, bits, rng) for _ in range(targets)], axis=0)
    assert plain / aware >= gain
    assert rms_aware / rms_plain <= 2.0


def random_problem(rng, tied):
    """Five actuators on three channels, or three on three, with crosstalk between four settings."""
    channel = np.array([0, 1, 0, 2, 1]) if tied else np.arange(3)
    per_code = rng.uniform(0.5, 1.5, len(channel))
    J = rng.standard_normal((4, 6))
    spread = 0.2 * rng.standard_normal((4, len(channel)))
    spread[[*range(3)], [*range(3)]] += 1.0
    wanted = per_code * rng.uniform(100.0, 101.0, 3)[channel]
    return J @ J.T, lambda codes: per_code * codes[channel], wanted, channel, spread


@pytest.mark.parametrize("tied", [False, True])
def test_few_channels_come_near_exhaustive_search(tied):
    rng = np.random.default_rng(5)
    found, best = [], []
    for _ in range(40):
        gram, own_of, wanted, channel, spread = random_problem(rng, tied)
        whole = gram + RIDGE * np.trace(gram) / 4 * np.eye(4)

        def cost(codes, of=own_of, want=wanted, D=spread, H=whole):
            e = D @ (of(codes) - want)
            return e @ H @ e

        rounded = round_against(gram, own_of, wanted, [100, 100, 100], 255, channel=channel, spread=spread)
        assert rounded.cost == pytest.approx(cost(rounded.codes), rel=1e-9)
        assert rounded.cost_before == pytest.approx(cost(np.full(3, 100)), rel=1e-9)
        found.append(rounded.cost)
        best.append(min(cost(np.array(c)) for c in itertools.product(range(95, 107), repeat=3)))
    assert all(f >= b * (1 - 1e-9) for f, b in zip(found, best, strict=True))
    assert np.sum(found) <= 1.1 * np.sum(best)  # the codes given are 5 times off or more


def test_aware_rounding_keeps_within_limits():
    asked = []

    def own_of(codes):
        asked.append(codes)
        return codes.astype(float)

    J = np.random.default_rng(6).standard_normal((6, 2))
    wanted = np.array([0.4, 9.6, 5.0, 3.5, 9.9, 0.1])
    rounded = round_against(
        J @ J.T, own_of, wanted, [0, 10, 5, 3, 10, 0], [10, 10, 5, 255, 10, 255], lowest=[0, 0, 5, 0, 0, 0]
    )
    assert np.max(asked, axis=0).tolist() == [10, 10, 5, 19, 10, 16]
    assert np.min(asked, axis=0).tolist() == [0, 0, 5, 0, 0, 0]
    assert rounded.codes[2] == 5
    assert rounded.cost <= rounded.cost_before


def test_channel_without_actuators_stays():
    rounded = round_against(np.eye(2), lambda c: c[[0, 2]].astype(float), [3.4, 7.0], [3, 77, 9], 255, channel=[0, 2])
    assert rounded.codes.tolist() == [3, 77, 7]


def test_numbers_that_are_none_stop_rounding():
    with pytest.raises(NotFinite):
        round_against(np.eye(2), lambda c: np.where(c > 5, np.nan, c), [3.0, 3.0], [3, 3], 255)


# ---- the source
SOURCE = Source([8, 16, 12], [0.0, -5.0, 0.0], [10.0, 5.0, 4.0], [0.02, 0.0, -0.01], [1.01, 1.0, -1.0])


@given(st.tuples(st.integers(0, 255), st.integers(0, 65535), st.integers(0, 4095)))
def test_codes_come_back_from_volts(codes):
    np.testing.assert_array_equal(SOURCE.nearest_codes(SOURCE.volts_of(codes)), codes)


@given(st.tuples(*[st.floats(0.0, 1.0)] * 3))
def test_nearest_code_errs_half_a_step(place):
    ends = np.array([SOURCE.volts_of([0, 0, 0]), SOURCE.volts_of([255, 65535, 4095])])
    volts = ends[0] + np.array(place) * (ends[1] - ends[0])
    error = np.abs(SOURCE.volts_of(SOURCE.nearest_codes(volts)) - volts)
    assert (error <= 0.5 * np.abs(SOURCE.step_v) * (1 + 1e-9)).all()


def test_volts_of_codes_by_hand():
    # 0.02 + 1.01 * 10 * 51 / 255; the middle of 65535 steps; a channel of negative gain
    np.testing.assert_allclose(SOURCE.volts_of([51, 0, 4095]), [2.04, -5.0, -4.01], rtol=1e-14)


@pytest.mark.parametrize(("channel", "volts"), [(0, 10.15), (0, -0.01), (1, -5.001), (2, 0.1), (1, np.nan)])
def test_volts_beyond_a_channel_are_refused(channel, volts):
    wanted = SOURCE.volts_of([10, 10, 10])
    wanted[channel] = volts
    with pytest.raises(VoltageOutOfRange, match=r"V is outside .* V to .* V of its channel") as caught:
        SOURCE.nearest_codes(wanted)
    assert caught.value.rows == (channel,)


@pytest.mark.parametrize("codes", [[256, 0, 0], [0, -1, 0], [0, 0, 0.5]])
def test_codes_a_channel_lacks_are_refused(codes):
    with pytest.raises(OutOfRange, match="not a whole number from 0 to"):
        SOURCE.volts_of(codes)
