"""Derivatives of light through loop-free nets, against dense products, central differences and jax alone."""

from dataclasses import replace

import numpy as np
import pytest

from meshctl.errors import WrongSize
from meshctl.mesh.meshfile import lattice
from meshctl.mesh.response import Response
from meshctl.optics import adjoint
from meshctl.optics.feedforward import fuse, propagate

DIFFERENCE = 1e-8  # of a central difference with step 1e-5: truncation 1e-10, rounding 1e-11, times some terms


def draw(*shape, seed=0):
    rng = np.random.default_rng(seed)
    return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)


def chip(cell="mzi", modes=5, loss_db=0.0, seed=0, **more):
    """A response with errors and losses everywhere, and settings."""
    mesh, rng = lattice("rectangular", modes=modes, cell=cell, **more), np.random.default_rng(seed)
    n = mesh.net.n_elements
    built = replace(mesh.as_built, error_rad=rng.normal(0, 0.1, n), loss_db=rng.uniform(0, loss_db, n))
    return Response(mesh.net, built), rng.uniform(0, 6, mesh.net.n_settings)


def differences(value, settings, step=1e-5):
    moved = step * np.eye(len(settings))
    return np.array([(value(settings + e) - value(settings - e)) / (2 * step) for e in moved])


@pytest.mark.parametrize("cell", ["mzi", "gap"])
@pytest.mark.parametrize("loss_db", [0.0, 0.5, 20.0])
def test_gradient_by_settings_matches_differences(cell, loss_db):
    response, settings = chip(cell, loss_db=loss_db)
    waves = np.array([1530.0, 1550.0, 1580.0])
    cotangent = draw(3, 5, 5)
    numeric = differences(lambda s: np.vdot(cotangent, response.matrix(s, waves)).real, settings)
    np.testing.assert_allclose(response.pullback(settings, cotangent, waves), numeric, atol=DIFFERENCE)


def test_gradient_by_blocks_matches_dense_products():
    rng, lanes, columns = np.random.default_rng(1), 4, 3
    lane_a, lane_b = np.array([0, 2, 1, 3, 0], np.int32), np.array([1, 3, 2, -1, 3], np.int32)
    blocks = rng.normal(size=(5, 8))
    fields, g = draw(lanes, columns, seed=2), draw(lanes, columns, seed=3)
    dense = []
    for a, b, row in zip(lane_a, lane_b, blocks, strict=True):
        whole, block = np.eye(lanes, dtype=complex), (row[::2] + 1j * row[1::2]).reshape(2, 2)
        at = [a, b] if b >= 0 else [a]
        whole[np.ix_(at, at)] = block[: len(at), : len(at)]
        dense.append(whole)
    real, imag = fields.real.copy(), fields.imag.copy()
    propagate(lane_a, lane_b, blocks, real, imag)
    g_real, g_imag, gradient, none = g.real.copy(), g.imag.copy(), np.empty((5, 8)), np.empty((0, 2, columns))
    at = np.full(5, -1, np.int32)
    adjoint.propagate_back(lane_a, lane_b, blocks, at, none, none, real, imag, g_real, g_imag, gradient)
    # product rule: G of factor k is (what follows)^H g (what came)^H
    for k, (a, b) in enumerate(zip(lane_a, lane_b, strict=True)):
        came, follows = fields, np.eye(lanes)
        for m in dense[:k]:
            came = m @ came
        for m in dense[k + 1 :]:
            follows = m @ follows
        by_dense = follows.conj().T @ g @ came.conj().T
        got = (gradient[k, ::2] + 1j * gradient[k, 1::2]).reshape(2, 2)
        at = [a, b] if b >= 0 else [a]
        # inverses of five random blocks, condition numbers up to some tens each
        np.testing.assert_allclose(got[: len(at), : len(at)], by_dense[np.ix_(at, at)], rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(real + 1j * imag, fields, atol=1e-9)


def test_opaque_parts_still_give_gradients():
    response, settings = chip(modes=4)
    loss = response.as_built.loss_db.copy()
    loss[response.net.names.element_row["c2_1.split1"]] = 6000.0  # no light at all: an amplitude of 1e-300
    loss[response.net.names.element_row["c3_1.inner"]] = 80.0
    dark = Response(response.net, replace(response.as_built, loss_db=loss))
    cotangent = draw(4, 4)
    numeric = differences(lambda s: np.vdot(cotangent, dark.matrix(s)).real, settings)
    got = dark.pullback(settings, cotangent)
    np.testing.assert_allclose(got, numeric, atol=DIFFERENCE)
    assert np.abs(got).max() > 0.1


def kept_columns(cells, factor):
    """Columns at whose cells fields are kept, if these cells leave this factor of their light."""
    response, _ = chip(modes=8)
    circuit, rows = response.circuit, response.net.names.element_row
    amplitude = np.ones(response.net.n_elements)
    amplitude[[rows[f"{cell}.inner"] for cell in cells]] = factor
    kept = adjoint.keeping(circuit, amplitude)
    assert (kept.at[kept.blocks] == np.arange(len(kept.blocks))).all()
    assert np.count_nonzero(kept.at >= 0) == len(kept.blocks)
    names = response.net.names.elements
    return {int(names[circuit.element[circuit.first[b]]][1]) for b in kept.blocks}


def test_fields_are_kept_where_light_fades():
    every = [f"c{c}_{r}" for c in range(1, 9) for r in range(1, 4 if c % 2 == 0 else 5)]
    assert kept_columns([], 1.0) == set()
    # four in a row: 0.11^3 is just above a thousandth, 0.11^4 far below; then it begins anew. The outermost
    # lanes meet no cell in column 4 and come to their fourth, by the light of column 3, in column 5
    assert kept_columns(every, 0.11) == {4, 5, 8}
    # light that stays clear on one lane does not undo what the other lost
    assert kept_columns(["c1_1", "c3_1", "c5_1", "c7_1"], 0.11) == {7}


def test_every_side_of_a_block_has_its_derivative():
    # one block of six parts: phases on the second and first lane, couplers between
    first, element, side = np.array([0, 6], np.int32), np.arange(6, dtype=np.int32)[::-1].copy(), [2, 0, 1, 2, 0, 2]
    side, two_lanes = np.array(side, np.uint8), np.array(side)[::-1] == 0
    values, loss, by_block = np.linspace(0.3, 2.0, 6), np.linspace(0.5, 1.0, 6), draw(1, 4)

    def parts(v):
        turned = np.where(two_lanes, np.cos(v), np.exp(1j * v)) * loss
        crossed = np.where(two_lanes, 1j * np.sin(v), 0) * loss
        return np.array([turned.real, turned.imag, crossed.real, crossed.imag])

    def value(v):
        block = np.empty((1, 8))
        fuse(first, element, side, parts(v), block)
        return np.vdot(by_block, block[:, ::2] + 1j * block[:, 1::2]).real

    pairs, got = np.ascontiguousarray(by_block).view(float), np.empty(6)
    adjoint.fuse_back(first, element, side, parts(values), pairs, np.empty((6, 8)), got)
    np.testing.assert_allclose(got, differences(value, values), atol=DIFFERENCE)


def test_stuck_settings_have_no_gradient():
    response, settings = chip()
    stuck = np.full(len(settings), np.nan)
    stuck[3] = 1.0
    held = Response(response.net, replace(response.as_built, stuck_rad=stuck))
    got = held.pullback(settings, draw(5, 5))
    assert got[3] == 0.0
    assert np.count_nonzero(got) == len(settings) - 1


def test_shared_settings_add_their_gradients():
    response, settings = chip()
    net, cotangent = response.net, draw(5, 5)
    apart = response.pullback(np.r_[settings[0], settings[0], settings[2:]], cotangent)
    shared_of = np.maximum(net.setting_of - (net.setting_of > 0), np.where(net.setting_of < 0, -1, 0))
    fewer = replace(response.as_built, stuck_rad=response.as_built.stuck_rad[1:])
    shared = Response(replace(net, setting_of=shared_of.astype(np.int32)), fewer)
    together = shared.pullback(np.r_[settings[0], settings[2:]], cotangent)
    np.testing.assert_allclose(together, np.r_[apart[0] + apart[1], apart[2:]], atol=1e-13)


def test_cotangent_may_be_a_function():
    response, settings = chip()
    waves, wanted = np.array([1540.0, 1550.0]), draw(2, 5, 5)
    seen = []

    def cotangent(matrix):
        seen.append(matrix)
        return 2 * (matrix - wanted)

    got = response.pullback(settings, cotangent, waves)
    np.testing.assert_array_equal(seen, [response.matrix(settings, waves)])
    np.testing.assert_array_equal(got, response.pullback(settings, 2 * (seen[0] - wanted), waves))


def test_cotangents_of_wrong_shape_are_refused():
    response, settings = chip()
    with pytest.raises(WrongSize, match=r"the cotangent has shape \(4, 5\); the matrix \(5, 5\)"):
        response.pullback(settings, draw(4, 5))


@pytest.mark.sample
@pytest.mark.slow
def test_jax_alone_gives_same_gradient():
    import jax
    import jax.numpy as jnp

    from meshctl.optics.elements import COUPLER

    jax.config.update("jax_enable_x64", True)
    response, settings = chip(modes=8)
    net, circuit, cotangent = response.net, response.circuit, draw(8, 8)

    def value(s):
        m = jnp.eye(8, dtype=complex)
        in_force = jnp.where(net.setting_of >= 0, s[net.setting_of], net.nominal) + response.as_built.error_rad
        for e in circuit.element:
            a, b, v = circuit.element_lane_a[e], circuit.element_lane_b[e], in_force[e]
            if net.kind[e] == COUPLER:
                upper = jnp.cos(v) * m[a] + 1j * jnp.sin(v) * m[b]
                m = m.at[b].set(1j * jnp.sin(v) * m[a] + jnp.cos(v) * m[b]).at[a].set(upper)
            elif net.setting_of[e] >= 0:
                m = m.at[a].multiply(jnp.exp(1j * v))
            else:
                m = m.at[a].multiply(jnp.exp(1j * response.as_built.error_rad[e]))
        return jnp.sum(jnp.conj(cotangent) * m[circuit.output_lane]).real

    by_jax = jax.grad(value)(jnp.asarray(settings))
    np.testing.assert_allclose(response.pullback(settings, cotangent), by_jax, atol=1e-12)
