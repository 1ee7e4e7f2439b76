"""The Python interface: the names on top, the same answers as the commands, and what a notebook shows."""

import json
import subprocess
import sys

import numpy as np
import pytest
from scipy import stats

import meshctl
from meshctl.errors import NotFinite, NotUnitary, WrongSize, WrongUsage


@pytest.mark.parametrize("name", meshctl.__all__)
def test_every_public_name_is_there(name):
    assert getattr(meshctl, name).__doc__
    assert name in dir(meshctl)


def test_unknown_name_lists_known_ones():
    with pytest.raises(AttributeError, match=r"meshctl has no 'slove'; it has .*solve"):
        meshctl.slove  # noqa: B018


def test_bare_import_loads_no_numpy():
    program = "import sys, meshctl; print([m for m in ('numpy', 'numba', 'jax', 'scipy') if m in sys.modules])"
    assert subprocess.run([sys.executable, "-c", program], capture_output=True, text=True).stdout == "[]\n"


def test_example_of_documentation_still_runs():
    mesh = meshctl.lattice("rectangular", modes=8, cell="mzi")
    target = stats.unitary_group.rvs(8, random_state=1)
    plan = meshctl.solve(mesh, target)
    matrix = meshctl.predict(mesh, plan, wavelengths_nm=None)
    overlap = abs(np.vdot(target, matrix)) ** 2 / 8 / np.vdot(matrix, matrix).real
    assert plan.settings.shape == plan.volts.shape == plan.codes.shape == (64,)
    assert abs(plan.fidelity - overlap) <= 1e-12  # F by its definition


def test_python_and_command_line_agree(run, tmp_path):
    mesh = meshctl.lattice("rectangular", modes=5, built=4)
    meshctl.write(mesh, tmp_path / "m")
    said = json.loads(run("solve", tmp_path / "m", "haar:3", "--json")[1])
    plan = meshctl.solve(meshctl.load(tmp_path / "m"), "haar:3")
    assert [row["code"] for row in said["actuators"]] == plan.codes.tolist()
    assert said["fidelity"] == plan.fidelity
    assert said["mesh_hash"] == mesh.hash


def test_lists_and_real_matrices_are_targets():
    mesh = meshctl.lattice("rectangular", modes=2)
    assert meshctl.solve(mesh, [[0, 1], [1, 0]]).fidelity > 0.999999
    assert meshctl.solve(mesh, np.eye(2, dtype=int)).fidelity > 0.999999


def test_target_brings_its_own_freedom():
    mesh = meshctl.lattice("rectangular", modes=3)
    target = meshctl.Target(np.asarray(stats.unitary_group.rvs(3, random_state=2)), "outputs")
    assert meshctl.solve(mesh, target).target["free"] == "outputs"


@pytest.mark.parametrize(
    ("target", "finding"),
    [
        (np.eye(3), WrongSize),
        (np.full((4, 4), np.nan), NotFinite),
        (np.ones((4, 4)), NotUnitary),
        ("haar", WrongUsage),
    ],
)
def test_wrong_targets_raise_their_findings(target, finding):
    with pytest.raises(finding):
        meshctl.solve(meshctl.lattice("rectangular", modes=4), target)


def test_one_wavelength_still_has_its_axis():
    mesh = meshctl.lattice("rectangular", modes=3)
    plan = meshctl.solve(mesh, "dft")
    assert meshctl.predict(mesh, plan, 1550.0).shape == (1, 3, 3)
    assert meshctl.predict(mesh, plan, [1550.0, 1551.0]).shape == (2, 3, 3)


def test_plan_arrays_are_read_only():
    plan = meshctl.solve(meshctl.lattice("rectangular", modes=3), "dft")
    with pytest.raises(ValueError, match="read-only"):
        plan.codes[0] = 5


def test_objects_draw_themselves_in_notebooks():
    from xml.etree import ElementTree

    mesh = meshctl.lattice("rectangular", modes=3)
    for drawn, word in ((mesh, "rectangular"), (meshctl.solve(mesh, "dft"), "fidelity")):
        table = ElementTree.fromstring(drawn._repr_html_())
        assert table.tag == "table"
        assert any(word in text for text in table.itertext())


def test_names_in_notebooks_are_escaped():
    from xml.etree import ElementTree

    mesh = meshctl.lattice("rectangular", modes=2, name="<b>&")
    for drawn in (mesh, meshctl.solve(mesh, "dft")):
        assert "<b>&" in "".join(ElementTree.fromstring(drawn._repr_html_()).itertext())


def test_plan_draws_its_volts_and_power():
    mesh = meshctl.lattice("rectangular", modes=4)
    plan = meshctl.solve(mesh, "dft")
    above, below = plan.plot().axes
    applied, room = above.containers
    assert [bar.get_height() for bar in applied] == pytest.approx(plan.volts.tolist())
    assert [bar.get_height() + bar.get_y() for bar in room] == pytest.approx([10.0] * 16)  # the source's range
    assert sum(bar.get_height() for bar in below.containers[0]) == pytest.approx(plan.power_mw.sum())


MADE = meshctl.lattice("rectangular", modes=3)


@pytest.mark.parametrize(
    ("values", "says"),
    [
        ([-5.0], "-5 nm.*200 to 20000 nm"),
        ([0.0], "holds 0 nm"),
        ([np.nan], "holds nan nm"),
        ([], "is empty"),
        ("1540:1560:3", "the text '1540:1560:3'.*linspace"),
        ([[1550.0]], "2 dimensions"),
        ([[1550.0], [1.0, 2.0]], "no list of numbers"),
        ([1550j], "complex"),
    ],
)
def test_wrong_wavelengths_are_said(values, says):
    with pytest.raises(WrongUsage, match=f"wavelengths_nm.*{says}"):
        meshctl.predict(MADE, meshctl.solve(MADE, "dft"), values)


@pytest.mark.parametrize(
    ("call", "says"),
    [
        (lambda: meshctl.solve("meshes/plover8", "dft"), r"'meshes/plover8' \(str\), must be a Mesh; .*meshctl.load"),
        (lambda: meshctl.predict(MADE, "plan.json"), r"'plan.json' \(str\), must be a Plan"),
        (lambda: meshctl.tolerance(MADE, None), r"None \(NoneType\), must be a Plan"),
        (lambda: meshctl.route("m", ["in1:out1"]), "must be a Mesh"),
        (lambda: meshctl.solve(MADE, "dft", seconds=-1), "seconds is -1.*above 0"),
        (lambda: meshctl.solve(MADE, "dft", starts=0), "starts is 0.*from 1"),
        (lambda: meshctl.solve(MADE, "dft", seed=-1), "seed is -1.*from 0"),
        (lambda: meshctl.route(MADE, ["in1:out1"], seconds=-1), "seconds is -1"),
        (lambda: meshctl.route(MADE, ["in1:out1"], priorities=[np.nan]), "priorities are .*finite"),
        (lambda: meshctl.route(MADE, ["in1:out1"], avoid="c9_9"), "'c9_9'"),
        (lambda: meshctl.route(MADE, [5]), "wishes holds 5"),
        (lambda: meshctl.lattice("rectangular", modes="4"), "modes is '4', a str"),
        (lambda: meshctl.lattice("rectangular", modes=4.0), "modes is 4.0, a float"),
        (lambda: meshctl.lattice("rectangular", modes=4, built=-1), "built is -1.*from 0"),
    ],
)
def test_wrong_calls_name_value_and_remedy(call, says):
    with pytest.raises(WrongUsage, match=says):
        call()


def test_ragged_target_is_said():
    with pytest.raises(WrongSize, match="rows differ in length; give 3 rows of 3"):
        meshctl.solve(MADE, [[1, 2], [3]])


def test_one_name_to_avoid_may_stand_alone():
    assert meshctl.route(MADE, "in3:out3", avoid="c1_1").target["avoid"] == ["c1_1"]


def test_objects_name_themselves_in_a_line():
    plan = meshctl.solve(MADE, "dft")
    assert repr(MADE) == "<Mesh 'rectangular3': rectangular, 3 in, 3 out, 3 cells>"
    assert repr(plan).startswith("<Plan for mesh 'rectangular3': dft; fidelity 0.99999")
    assert len(repr(plan)) < 120
