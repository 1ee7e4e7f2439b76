"""Targets from files, names and draws, and why some are refused."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from meshctl.errors import MissingFile, NotFinite, NotUnitary, UnsoundFile, WrongSize, WrongUsage
from meshctl.solver.target import TARGETS, described, from_description, make_target, read_target

EXACT = 1e-15  # one or two roundings of numbers of order one


def target(words, modes=4):
    return read_target(words, (modes, modes)).matrix


@pytest.mark.parametrize("words", ["identity", "dft", "hadamard", "haar:3", "permutation:2,1,4,3"])
def test_every_named_target_is_unitary(words):
    assert words.partition(":")[0] in TARGETS
    matrix = target(words)
    assert np.abs(matrix.conj().T @ matrix - np.eye(4)).max() <= 1e-14  # rounding of a sum of four


def test_dft_turns_by_positive_angle():
    # omega = exp(+2 pi i / N), entries omega^(jk) / sqrt(N): the unitary inverse transform of numpy
    matrix = target("dft", 8)
    assert np.abs(matrix - np.fft.ifft(np.eye(8), norm="ortho")).max() <= EXACT
    assert matrix[1, 1].imag > 0


def test_hadamard_is_the_scipy_matrix():
    from scipy.linalg import hadamard

    assert np.abs(target("hadamard", 16) - hadamard(16) / 4).max() <= EXACT


def test_permutation_sends_inputs_where_named():
    # permutation:3,1,2,4 sends input 1 to output 3, input 2 to output 1, input 3 to output 2
    matrix = target("permutation:3,1,2,4")
    assert np.flatnonzero(matrix[:, 0]).tolist() == [2]
    assert np.flatnonzero(matrix[:, 1]).tolist() == [0]
    assert np.flatnonzero(matrix[:, 2]).tolist() == [1]
    assert (matrix @ np.array([10, 20, 30, 40])).real.tolist() == [20, 30, 10, 40]


def test_haar_moves_phases_of_triangle():
    # QR of a complex normal matrix from PCG64, phases of R's diagonal moved over (Mezzadri 2007)
    rng = np.random.Generator(np.random.PCG64(7))
    z = rng.standard_normal((5, 5)) + 1j * rng.standard_normal((5, 5))
    unitary = target("haar:7", 5)
    triangle = unitary.conj().T @ z
    assert np.abs(np.tril(triangle, -1)).max() <= 1e-14
    assert np.abs(np.diag(triangle).imag).max() <= 1e-14
    assert np.diag(triangle).real.min() > 0


def test_haar_entries_follow_their_law():
    # |U_11|^2 of a Haar matrix follows Beta(1, N - 1); without the moved phases arg U_11 would not be uniform
    drawn = np.array([target(f"haar:{seed}", 5)[0, 0] for seed in range(400)])
    assert stats.kstest(np.abs(drawn) ** 2, stats.beta(1, 4).cdf).pvalue > 0.01
    assert stats.kstest(np.angle(drawn) / (2 * np.pi) + 0.5, "uniform").pvalue > 0.01


@given(st.integers(0, 2**32), st.integers(1, 6))
def test_csv_is_read_back_equal(tmp_path_factory, seed, modes):
    matrix = target(f"haar:{seed}", modes)
    path = tmp_path_factory.mktemp("t") / "t.csv"
    path.write_text("\n".join(",".join(repr(complex(z)) for z in row) for row in matrix) + "\n")
    assert np.array_equal(read_target(str(path), (modes, modes)).matrix, matrix)


@given(st.integers(0, 2**32), st.integers(1, 6))
def test_npy_is_read_back_equal(tmp_path_factory, seed, modes):
    matrix = target(f"haar:{seed}", modes)
    path = tmp_path_factory.mktemp("t") / "t.npy"
    np.save(path, matrix)
    assert np.array_equal(read_target(str(path), (modes, modes)).matrix, matrix)


def test_csv_takes_cells_as_people_write(tmp_path):
    path = tmp_path / "t.csv"
    path.write_text("\ufeff0.6 , 0.8i\n0.8j,6e-1\n\n", encoding="utf-8")
    assert read_target(str(path), (2, 2)).matrix.tolist() == [[0.6, 0.8j], [0.8j, 0.6]]


@pytest.mark.parametrize("kind", ["int64", "float32", "complex64"])
def test_npy_of_other_numbers_is_taken(tmp_path, kind):
    path = tmp_path / "t.npy"
    np.save(path, np.eye(3).astype(kind))
    assert read_target(str(path), (3, 3)).matrix.dtype == complex


def test_defect_of_refused_matrix_is_told():
    # two columns that are 1e-6 from orthogonal
    with pytest.raises(NotUnitary, match=r"an entry of T\^H T - 1 is 1e-06, allowed is 1e-09; .*singular value"):
        make_target([[1.0, 1e-6], [0.0, (1 - 1e-12) ** 0.5]], (2, 2))


def test_unitary_limit_lies_at_named_value():
    within, beyond = (np.diag([1.0, np.sqrt(1 + d)]) for d in (0.9e-9, 1.1e-9))
    assert make_target(within, (2, 2)).size == (2, 2)
    with pytest.raises(NotUnitary):
        make_target(beyond, (2, 2))


@pytest.mark.parametrize(
    ("matrix", "finding", "says"),
    [
        (np.eye(3), WrongSize, "the target is 3 x 3; the mesh has 2 outputs and 2 inputs"),
        (np.zeros(4), WrongSize, "the target is 4;"),
        ([[1.0, np.nan], [0.0, 1.0]], NotFinite, "row 1 column 2 is"),
        ([[1.0, 0.0], [0.0, np.inf]], NotFinite, "row 2 column 2 is"),
        (np.array([["a", "b"], ["c", "d"]]), UnsoundFile, "not numbers"),
        (np.eye(2) * 0.5, NotUnitary, "allowed is 1e-09"),
    ],
)
def test_unsound_matrices_are_all_refused(matrix, finding, says):
    with pytest.raises(finding) as caught:
        make_target(matrix, (2, 2))
    assert says in str(caught.value)


@pytest.mark.parametrize(
    ("words", "finding"),
    [
        ("fourier", WrongUsage),
        ("haar", WrongUsage),
        ("haar:", WrongUsage),
        ("haar:-1", WrongUsage),
        ("haar:x", WrongUsage),
        ("dft:3", WrongUsage),
        ("permutation:1,2,3", WrongUsage),
        ("permutation:1,2,3,3", WrongUsage),
        ("permutation:0,1,2,3", WrongUsage),
        ("permutation:a,b,c,d", WrongUsage),
        ("none.npy", MissingFile),
        ("none.csv", MissingFile),
    ],
)
def test_incomplete_target_words_are_refused(words, finding):
    with pytest.raises(finding):
        target(words)


def test_hadamard_needs_power_of_two():
    with pytest.raises(WrongUsage, match="use a power of two"):
        target("hadamard", 6)


def test_unknown_free_phases_are_refused():
    with pytest.raises(WrongUsage, match="free is 'some'; use one of: nothing, outputs, inputs, both"):
        make_target(np.eye(2), (2, 2), "some")


@pytest.mark.parametrize("words", ["haar:7", "permutation:2,1,4,3"])
def test_named_target_is_kept_by_name(words):
    kept = json.loads(json.dumps(described(read_target(words, (4, 4), "outputs"))))
    assert "real" not in kept
    again = from_description(kept)
    assert np.array_equal(again.matrix, target(words))
    assert (again.free, again.source) == ("outputs", words)


def test_given_matrix_is_kept_whole():
    matrix = target("haar:1")
    kept = json.loads(json.dumps(described(make_target(matrix, (4, 4)))))
    assert np.array_equal(from_description(kept).matrix, matrix)
