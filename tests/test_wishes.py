"""Wishes beyond one unitary matrix: target files, their errors, and what is written read back equal."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meshctl.errors import (
    MissingRow,
    NotFinite,
    NotUnitary,
    OutOfRange,
    OutOfReach,
    UnknownKey,
    UnsoundFile,
    WrongSize,
)
from meshctl.optics.measures import unitarity_defect
from meshctl.solver.target import described, from_description, haar, make_target, read_target
from meshctl.solver.wishes import make_wish


@pytest.fixture
def wish(tmp_path):
    """Read a target file of a text, for a mesh of 3 x 3 with ports in1.. and out1.. ."""

    def read(text, shape=(3, 3), **more):
        path = tmp_path / "wish.toml"
        path.write_text(text)
        return read_target(str(path), shape, **more)

    return read


def same(a, b):
    for name in ("matrix", "power", "weight", "wavelengths_nm", "least_db", "most_db"):
        x, y = getattr(a, name), getattr(b, name)
        assert (x is None) == (y is None), name
        if x is not None:
            np.testing.assert_array_equal(x, y, name)
    assert (a.free, a.over, a.dark, a.scale, a.source) == (b.free, b.over, b.dark, b.scale, b.source)


def test_matrix_files_stand_beside_the_target(wish, tmp_path):
    np.save(tmp_path / "m.npy", haar(3, "1"))
    target = wish('matrix = "m.npy"\nfree = "outputs"')
    np.testing.assert_array_equal(target.matrix, haar(3, "1"))
    assert target.free == "outputs"
    assert target.plain
    np.testing.assert_array_equal(wish('matrix = "haar:1"').matrix, haar(3, "1"))


def test_cells_may_be_text_or_numbers(wish):
    target = wish('nearest = true\nmatrix = [[1, 0, 0], ["0.5-0.5i", "1j", 0.25], [0, 0, 1]]')
    np.testing.assert_array_equal(target.matrix[1], [0.5 - 0.5j, 1j, 0.25])


def test_some_inputs_take_their_columns_alone(wish):
    target = wish('only_inputs = ["in3", "in1"]\nmatrix = [[1, 0], [0, 1], [0, 0]]')
    np.testing.assert_array_equal(target.weight, [[1, 0, 1]] * 3)
    np.testing.assert_array_equal(target.matrix, [[0, 0, 1], [1, 0, 0], [0, 0, 0]])
    start = target.start_matrix()
    assert unitarity_defect(start) < 1e-14
    np.testing.assert_allclose(start[:, [2, 0]], np.eye(3)[:, :2], atol=1e-14)


def test_ports_go_by_the_mesh_names(wish):
    named = {"inputs": ["north", "east", "south"], "outputs": ["a", "b", "c"]}
    target = wish('power = [[1, 0, 0], [0, 1, 0], [0, 0, 0]]\ndark = ["c"]', **named)
    assert target.dark == (2,)
    with pytest.raises(UnknownKey, match="dark: port 'out3' is not known"):
        wish('dark = ["out3"]', **named)


def test_states_want_one_lit_input(wish):
    target = wish('state = {input = "in2", fields = [0.6, "0.8j", 0]}')
    np.testing.assert_array_equal(target.weight, [[0, 1, 0]] * 3)
    np.testing.assert_array_equal(target.matrix[:, 1], [0.6, 0.8j, 0])


def test_wavelengths_are_listed_or_counted(wish):
    listed = wish('matrix = "dft"\nwavelengths_nm = [1540.0, 1550.0, 1560.0]\nover = "worst"')
    counted = wish('matrix = "dft"\nwavelengths_nm = {from = 1540.0, to = 1560.0, count = 3}\nover = "worst"')
    same(listed, counted)
    assert listed.over == "worst"
    assert not listed.plain


def test_bands_share_one_list_of_wavelengths(wish):
    target = wish(
        '[[band]]\nfrom = "in1"\nto = "out2"\nwavelengths_nm = [1549.0, 1551.0]\npoints = 3\nleast_db = -1.0\n'
        '[[band]]\nfrom = "in1"\nto = "out2"\nwavelengths_nm = [1551.0, 1553.0]\npoints = 2\nmost_db = 0.0\n'
        '[[band]]\nfrom = "in1"\nto = "out2"\nwavelengths_nm = [1550.0]\nleast_db = -0.5\n'
    )
    np.testing.assert_array_equal(target.wavelengths_nm, [1549.0, 1550.0, 1551.0, 1553.0])
    nan = np.nan
    np.testing.assert_array_equal(target.least_db[:, 1, 0], [-1.0, -0.5, -1.0, nan])
    np.testing.assert_array_equal(target.most_db[:, 1, 0], [nan, nan, 0.0, 0.0])
    assert np.count_nonzero(~np.isnan(target.least_db)) == 3


def test_dilated_files_name_their_scale(wish):
    target = wish(
        "dilate = true\nlargest = true\nmatrix = [[0.5, 0.0], [0.0, 0.25]]\n"
        'only_inputs = ["in1", "in3"]\nonly_outputs = ["out1", "out2"]'
    )
    assert target.scale == pytest.approx(2.0)
    np.testing.assert_allclose(target.matrix[np.ix_([0, 1], [0, 2])], [[1.0, 0.0], [0.0, 0.5]], atol=1e-15)
    np.testing.assert_array_equal(target.weight, [[1, 0, 1], [1, 0, 1], [0, 0, 0]])
    with pytest.raises(OutOfReach, match="impossible on 3 lossless modes"):
        wish("dilate = true\nmatrix = [[0.5, 0.0], [0.0, 0.25]]")


def test_plain_lossy_matrices_are_still_refused(wish):
    with pytest.raises(NotUnitary, match="dilate = true"):
        wish("matrix = [[0.5, 0, 0], [0, 0.5, 0], [0, 0, 0.5]]")
    with pytest.raises(NotUnitary, match=r"its largest singular value is 0\.5"):
        make_target(0.5 * np.eye(2), (2, 2))


def test_command_line_free_outranks_the_file(wish):
    assert wish('matrix = "dft"\nfree = "outputs"').free == "outputs"
    assert wish('matrix = "dft"\nfree = "outputs"', free="both").free == "both"


@pytest.mark.parametrize(
    ("text", "finding", "words"),
    [
        ("matrx = 1", UnknownKey, "key 'matrx' is not known; did you mean 'matrix'"),
        ("matrix = ", UnsoundFile, "not readable as TOML"),
        ("", UnsoundFile, "the target asks for nothing; give matrix, power, state, dark or bands"),
        ('matrix = "none.csv"', UnsoundFile, "matrix is 'none.csv'; name a .npy or .csv file beside"),
        ("matrix = [[1, 0], [0]]", WrongSize, "rows of different length"),
        ('matrix = [["x"]]', UnsoundFile, "a cell of matrix is 'x'"),
        ("nearest = true\nmatrix = [[1]]", WrongSize, "the target is 1 x 1; the mesh has 3 outputs and 3 inputs"),
        ('power = [[1, 0, 0], ["1j", 0, 0], [0, 0, 0]]', UnsoundFile, "power in row 2 column 1 is 1j"),
        ("power = [[1, 0, 0], [2, 0, 0], [0, 0, 0]]", OutOfRange, "power in row 2 column 1 is 2; give a share from 0"),
        ('matrix = "dft"\npower = [[1, 0, 0], [0, 1, 0], [0, 0, 1]]', UnsoundFile, "matrix and power are both given"),
        ('matrix = "dft"\nweight = [[-1, 0, 0], [0, 1, 0], [0, 0, 1]]', OutOfRange, "weight in row 1 column 1 is -1"),
        ('matrix = "dft"\nfree = "some"', UnsoundFile, "free is 'some'"),
        ('matrix = "dft"\nonly_inputs = ["in9"]', UnknownKey, "only_inputs: port 'in9' is not known"),
        ('matrix = "dft"\nonly_inputs = ["in1", "in1"]', UnsoundFile, "name each port once"),
        ('matrix = "dft"\nwavelengths_nm = [0.0]', OutOfRange, "wavelengths_nm holds 0"),
        ('matrix = "dft"\nwavelengths_nm = [nan]', NotFinite, "wavelengths_nm is nan"),
        ('matrix = "dft"\nwavelengths_nm = {from = 1.0, to = 2.0, count = 1}', UnsoundFile, "count is 1"),
        ('matrix = "dft"\nnearest = 1', UnsoundFile, "nearest is 1; write true or false"),
        (
            'matrix = "dft"\nwavelengths_nm = [1540.0, 1550.0]\nover = "best"',
            UnsoundFile,
            "over is 'best'; use mean or worst",
        ),
        ('matrix = "dft"\nover = "worst"', UnsoundFile, "over is given for a single wavelength"),
        ('matrix = "dft"\nlargest = true', UnsoundFile, "largest is given without dilate"),
        ('matrix = "dft"\ndilate = true\ndark = ["out1"]', UnsoundFile, "dark stands beside it"),
        ('state = {input = "in1"}', UnsoundFile, "state is"),
        ('state = {input = "in1", fields = [1]}', UnsoundFile, "write 3 fields, one for each output"),
        ('[[band]]\nfrom = "in1"\nwavelengths_nm = [1550.0]', MissingRow, "band 1: 'to' is missing"),
        ('[[band]]\nfrom = "in1"\nto = "out1"\nwavelengths_nm = [1550.0]', UnsoundFile, "either least_db or most_db"),
        ('[[band]]\nform = "in1"', UnknownKey, "did you mean 'from'"),
    ],
)
def test_senseless_target_files_are_refused_loudly(wish, text, finding, words):
    with pytest.raises(finding, match=words) as caught:
        wish(text)
    assert "wish.toml" in str(caught.value)


shares = st.floats(0.0, 1.0)
lists = st.lists(shares, min_size=4, max_size=4)


@given(lists, lists, st.sampled_from(["mean", "worst"]), st.booleans(), st.integers(0, 9))
def test_described_wishes_are_read_back_equal(power, weight, over, several, seed):
    power, weight = np.array(power).reshape(2, 2), np.array(weight).reshape(2, 2)
    waves = np.array([1540.0, 1550.0]) if several else None
    least = np.where(power > 0.5, -power, np.nan)
    for target in (
        make_wish((2, 2), power=power, weight=weight, over=over, wavelengths_nm=waves),
        make_wish((2, 2), matrix=haar(2, str(seed)), weight=weight, free="both", dark=[1], wavelengths_nm=waves),
        make_wish((2, 2), least_db=least, most_db=-power, wavelengths_nm=waves),
        make_target(haar(2, str(seed)), (2, 2), "inputs"),
    ):
        same(target, from_description(json.loads(json.dumps(described(target)))))


def test_start_matrices_are_unitary_and_near():
    power = np.array([[0.8, 0.2], [0.2, 0.8]])
    lossy = make_wish((2, 2), matrix=np.diag([0.5, 0.25]), weight=np.ones((2, 2)))
    masks = make_wish((2, 2), least_db=np.array([[np.nan, -1.0], [-1.0, np.nan]]))
    np.testing.assert_allclose(lossy.start_matrix(), np.eye(2), atol=1e-15)
    np.testing.assert_allclose(np.abs(masks.start_matrix()), [[0, 1], [1, 0]], atol=1e-15)
    assert unitarity_defect(make_wish((2, 2), power=power).start_matrix()) < 1e-14
