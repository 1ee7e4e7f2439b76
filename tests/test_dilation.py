"""Matrices that lose light as parts of larger meshes, against scipy.linalg and bounds on unitary blocks."""

import numpy as np
import pytest
import scipy.linalg
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import unitary_group

from meshctl.errors import NotFinite, OutOfReach, WrongSize, WrongUsage
from meshctl.mesh.meshfile import lattice
from meshctl.mesh.response import Response
from meshctl.optics.measures import matrix_error
from meshctl.solver.closed import closed_form
from meshctl.solver.dilation import dilate, dilated_target, least_block_error
from meshctl.solver.objective import objective_of
from meshctl.solver.reach import full_reach
from meshctl.solver.refine import refine

EXACT = 1e-13  # rounding of a decomposition of some ten rows


def matrix_of_norm(norm, *shape, seed=0):
    rng = np.random.default_rng(seed)
    z = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    return norm * z / np.linalg.norm(z, 2)


def defect(u):
    return np.abs(u.conj().T @ u - np.eye(len(u))).max()


@given(st.integers(1, 5), st.integers(1, 5), st.integers(0, 3), st.integers(0, 99))
def test_block_of_a_unitary_is_wanted(p, q, spare, seed):
    wanted = matrix_of_norm(0.9, p, q, seed=seed)
    made = dilate(wanted, p + q + spare)
    assert made.scale == 1.0
    assert defect(made.unitary) < EXACT
    np.testing.assert_allclose(made.unitary[:p, :q], wanted, atol=EXACT)


def test_defects_are_square_roots_of_halmos():
    wanted = matrix_of_norm(0.8, 4, 4)
    u = dilate(wanted, 8).unitary
    # Halmos 1950: beside A stands (1 - A A^H)^(1/2), below it (1 - A^H A)^(1/2), each up to a unitary factor
    beside = scipy.linalg.sqrtm(np.eye(4) - wanted @ wanted.conj().T)
    below = scipy.linalg.sqrtm(np.eye(4) - wanted.conj().T @ wanted)
    np.testing.assert_allclose(scipy.linalg.polar(u[:4, 4:], side="left")[1], beside, atol=EXACT)
    np.testing.assert_allclose(scipy.linalg.polar(u[4:, :4])[1], below, atol=EXACT)


def test_lossless_directions_need_no_modes():
    left, right = unitary_group.rvs(5, random_state=0), unitary_group.rvs(5, random_state=1)
    wanted = left @ np.diag([1, 1, 1, 0.5, 0.2]) @ right
    np.testing.assert_allclose(dilate(wanted, 7).unitary[:5, :5], wanted, atol=EXACT)
    with pytest.raises(OutOfReach, match=r"at least 4 singular values of any 5 x 5 block are 1, and 3 of the target's"):
        dilate(wanted, 6)


def test_ports_of_the_block_are_chosen():
    wanted = matrix_of_norm(0.7, 2, 3)
    u = dilate(wanted, 6, outputs=[4, 1], inputs=[5, 0, 2]).unitary
    assert defect(u) < EXACT
    np.testing.assert_allclose(u[np.ix_([4, 1], [5, 0, 2])], wanted, atol=EXACT)


def test_large_matrices_are_scaled_and_say_so():
    wanted = matrix_of_norm(2.5, 3, 3)
    made = dilate(wanted, 5)  # scaled to its largest, one singular value is 1: two more modes suffice
    assert made.scale == pytest.approx(0.4)
    np.testing.assert_allclose(made.unitary[:3, :3], 0.4 * wanted, atol=EXACT)
    small = matrix_of_norm(0.5, 3, 3)
    assert dilate(small, 6).scale == 1.0
    assert dilate(small, 5, largest=True).scale == pytest.approx(2.0)
    with pytest.raises(OutOfReach, match="or let it be scaled to its largest"):
        dilate(small, 5)


def test_blocks_of_unitaries_have_lossless_directions():
    # what the impossibility rests on, seen in matrices of scipy's own drawing
    for seed in range(20):
        block = unitary_group.rvs(8, random_state=seed)[:6, :6]
        sigma = np.linalg.svd(block, compute_uv=False)
        np.testing.assert_allclose(sigma[:4], 1.0, atol=1e-12)
        assert sigma[4] < 1.0 - 1e-6


def test_too_few_modes_are_named_with_reason():
    wanted = matrix_of_norm(0.8, 6, 6)
    with pytest.raises(OutOfReach) as caught:
        dilate(wanted, 8)
    said = str(caught.value)
    assert "impossible on 8 lossless modes: at least 4 singular values of any 6 x 6 block are 1" in said
    assert "take a mesh of at least 12 modes" in said
    least = least_block_error(np.linalg.svd(wanted, compute_uv=False), 4)
    assert f"the least error up to scale is {least:.6g}" in said


def test_least_error_is_met_and_never_beaten():
    wanted = matrix_of_norm(0.8, 6, 6)
    left, sigma, right = np.linalg.svd(wanted)
    least = least_block_error(sigma, 4)
    # the block that the formula describes exists on 8 modes ..
    best = sigma.copy()
    best[:4] = sigma[:4].mean()
    block = dilate(left @ np.diag(best) @ right, 8, largest=True).unitary[:6, :6]
    assert matrix_error(block, wanted) == pytest.approx(least, abs=1e-12)
    # .. and a mesh of 8 modes refined for the block comes to it from above
    mesh, target, weight = lattice("rectangular", modes=8), np.zeros((8, 8), complex), np.zeros((8, 8))
    target[:6, :6], weight[:6, :6] = wanted, 1.0
    from meshctl.solver.objective import MatrixError

    rng, reach = np.random.default_rng(0), full_reach(mesh.net.setting_is_angle)
    for _ in range(3):
        start = rng.uniform(0, 2 * np.pi, mesh.net.n_settings)
        found = refine(mesh.net, mesh.as_built, MatrixError(target, weight), reach, start).matrix_error
        assert least - 1e-9 <= found <= 1.5 * least


@pytest.mark.parametrize(("size", "modes"), [(4, 8), (6, 12)])
def test_ideal_chips_give_norm_below_one(size, modes):
    wanted = matrix_of_norm(0.8, size, size)
    mesh = lattice("rectangular", modes=modes)
    target = dilated_target(wanted, (modes, modes))
    found = closed_form(mesh.net, mesh.as_built, target, full_reach(mesh.net.setting_is_angle))
    block = Response(mesh.net, mesh.as_built).matrix(found.settings)[:size, :size]
    turned = block * np.exp(-1j * np.angle(np.vdot(wanted, block)))
    np.testing.assert_allclose(turned, wanted, atol=1e-6)
    whole = Response(mesh.net, mesh.as_built).matrix(found.settings)[None]
    assert objective_of(target).matrix_error(whole) <= 1e-12


def test_only_the_block_is_refined():
    from dataclasses import replace

    wanted, mesh = matrix_of_norm(0.8, 3, 3), lattice("rectangular", modes=6)
    rng, target = np.random.default_rng(0), dilated_target(wanted, (6, 6))
    built = replace(
        mesh.as_built, error_rad=np.where(mesh.net.kind == 0, rng.normal(0, 0.05, mesh.net.n_elements), 0.0)
    )
    reach = full_reach(mesh.net.setting_is_angle)
    start = closed_form(mesh.net, built, target, reach)
    found = refine(mesh.net, built, objective_of(target), reach, start.settings)
    block = Response(mesh.net, built).matrix(found.settings)[:3, :3]
    assert matrix_error(block, wanted) <= 1e-9


@pytest.mark.parametrize(
    ("call", "finding", "words"),
    [
        (
            lambda: dilate(np.eye(3), 2),
            OutOfReach,
            "a matrix of 3 x 3 is no part of 2 modes; take a mesh of at least 3",
        ),
        (lambda: dilate(np.zeros((2, 2)), 4), WrongUsage, "0 everywhere"),
        (lambda: dilate(np.array([[np.nan]]), 4), NotFinite, "row 1 column 1 is"),
        (lambda: dilate(np.ones(3), 4), WrongSize, r"shape \(3,\)"),
        (lambda: dilate(np.eye(2), 4, outputs=[1, 1]), WrongSize, r"outputs are \[1, 1\]; give 2 different positions"),
        (lambda: dilated_target(np.eye(2), (4, 3)), WrongSize, "4 outputs and 3 inputs"),
    ],
)
def test_senseless_dilations_are_refused_loudly(call, finding, words):
    with pytest.raises(finding, match=words):
        call()
