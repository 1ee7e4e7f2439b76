"""The command tolerance and meshctl.tolerance: answers, files, figures, and what is refused."""

import csv
import json

import numpy as np
import pytest

import meshctl
from meshctl.mesh.spread import Spread
from meshctl.plan.plan import plan_text
from meshctl.session import demo_mesh_folder
from meshctl.tolerances.lattices import compare_lattices

PLOVER = str(demo_mesh_folder())


@pytest.fixture(scope="module")
def plan(tmp_path_factory):
    path = tmp_path_factory.mktemp("plan") / "plan.json"
    path.write_text(plan_text(meshctl.solve(meshctl.load(PLOVER), "haar:1")))
    return path


def asked(run, plan, *more):
    code, out, err = run("tolerance", PLOVER, plan, "--json", *more)
    assert code == 0, err
    return json.loads(out)


def test_answers_hold_budget_trials_and_yield(run, plan):
    found = asked(run, plan, "--trials", 300, "--require", "fidelity>=0.95", "--require", "throughput>=0.5")
    assert found["trials"] == 300
    assert found["yield"]["low"] < found["yield"]["yield"] <= found["yield"]["high"]
    assert set(found["requirements"]) == {"fidelity>=0.95", "throughput>=0.5"}
    assert found["budget"]["e2"] == pytest.approx(found["measures"]["matrix_error"]["mean_square"], rel=0.1)


def test_two_processes_print_the_same_object(run, plan):
    one, two = (asked(run, plan, "--trials", 600, "--processes", n) for n in (1, 2))
    assert {**one, "seconds": 0} == {**two, "seconds": 0}


def test_text_tells_causes_measures_and_yield(run, plan):
    code, out, err = run("tolerance", PLOVER, plan, "--trials", 50, "--require", "fidelity>=0.9")
    assert (code, err) == (0, "")
    for word in ("50 dies, as-set, seed 0", "split_rad", "matrix_error", "yield 100.00 %", "no scatter"):
        assert word in out


def test_specification_is_a_table_of_causes(run, plan):
    code, out, _ = run("tolerance", PLOVER, plan, "--trials", 80, "--require", "fidelity>=0.99", "--spec")
    assert code == 0
    table = out[out.index("allowed for a yield of 95 %") :]
    for cause in ("split_rad", "phase_rad", "loss_db", "codes", "bits", "together"):
        assert cause in table


def test_folders_hold_answer_and_every_die(run, plan, tmp_path):
    found = asked(run, plan, "--trials", 260, "-o", tmp_path / "run")
    rows = list(csv.DictReader((tmp_path / "run" / "trials.csv").read_text().splitlines()))
    assert len(rows) == 260
    fidelity = np.mean([float(row["fidelity"]) for row in rows])
    assert fidelity == pytest.approx(found["measures"]["fidelity"]["mean"])
    kept = json.loads((tmp_path / "run" / "tolerance.json").read_text())
    assert {**kept, "seconds": 0} == {**found, "seconds": 0}


def test_longer_runs_go_on_from_shorter(run, plan, tmp_path):
    asked(run, plan, "--trials", 260, "-o", tmp_path / "run")
    longer, whole = asked(run, plan, "--trials", 520, "-o", tmp_path / "run"), asked(run, plan, "--trials", 520)
    assert {**longer, "seconds": 0} == {**whole, "seconds": 0}


def test_large_scatter_is_remarked_upon(run, plan):
    code, _, err = run("tolerance", PLOVER, plan, "--trials", 10, "--scale", 8)
    assert code == 0
    assert "first order no longer holds" in err


def test_other_policies_answer_without_budget(run, plan):
    found = asked(run, plan, "--trials", 20, "--policy", "corrected")
    assert found["budget"] is None
    assert "as they are set" in found["remarks"][0]


def test_python_answers_like_the_command(run, plan):
    mesh = meshctl.load(PLOVER)
    made = meshctl.tolerance(mesh, meshctl.solve(mesh, "haar:1"), trials=40, seed=3, require="fidelity>=0.9")
    found = asked(run, plan, "--trials", 40, "--seed", 3, "--require", "fidelity>=0.9")
    assert made.entry()["measures"] == found["measures"]
    assert "yield" in made._repr_html_()


def test_figures_are_drawn_into_a_folder(run, plan, tmp_path):
    code, _, err = run("tolerance", PLOVER, plan, "--trials", 60, "--require", "fidelity>=0.95",
                       "--figures", tmp_path / "pictures")  # fmt: skip
    assert code == 0, err
    sizes = {path.name: path.stat().st_size for path in (tmp_path / "pictures").iterdir()}
    assert set(sizes) == {"histogram.png", "yield.png", "sensitivity.png"}
    assert min(sizes.values()) > 5000  # an empty figure is smaller


def test_lattices_are_compared_on_demand(run, plan, tmp_path):
    code, out, err = run("tolerance", PLOVER, plan, "--trials", 5, "--lattices", "--figures", tmp_path / "pictures")
    assert code == 0, err
    assert (tmp_path / "pictures" / "scaling.png").stat().st_size > 5000
    for word in ("rectangular+2", "triangular", "benes", "no closed form", "routes", "crosstalk dB"):
        assert word in out


def test_scaling_is_drawn_for_every_lattice():
    from meshctl.plots_tolerance import scaling_figure

    rows = compare_lattices(Spread(split_rad=0.03), shapes=("rectangular", "triangular"), modes=(4, 6), trials=5)
    axes = scaling_figure(rows).axes[0]
    assert [line.get_label() for line in axes.lines][::2] == ["rectangular, as set", "triangular, as set"]


WRONG = {
    ("--require", "fidelty>=0.9"): (2, "did you mean 'fidelity'"),
    ("--require", "power_error<=0.1"): (2, "no meaning for this plan's target"),
    ("--require", "throughput>=0.99"): (4, "even the die without scatter has throughput 0.7"),
    ("--require", "fidelity>=0.9", "--until", "wide"): (2, "'wide' is no width"),
    ("--until", "1%"): (2, "add --require"),
    ("--spec",): (2, "add --require"),
    ("--require", "fidelity>=0.9", "--spec", "--yield", "120%"): (2, "'120%' is no yield"),
    ("--trials", "0"): (2, "0 is below 1"),
    ("--policy", "best"): (2, "as-set"),
    ("--scale", "-1"): (2, "not above 0"),
}


@pytest.mark.parametrize("words", WRONG)
def test_wrong_words_are_refused_with_remedies(words, run, plan):
    code, out, err = run("tolerance", PLOVER, plan, *words)
    assert code == WRONG[words][0]
    assert out == ""
    assert WRONG[words][1] in err


def test_missing_clusters_are_told_in_words(run, plan, monkeypatch):
    import sys

    monkeypatch.setitem(sys.modules, "dask.distributed", None)
    monkeypatch.setitem(sys.modules, "dask", None)
    code, _, err = run("tolerance", PLOVER, plan, "--cluster", "tcp://127.0.0.1:1")
    assert code == 2
    assert "meshctl[cluster]" in err
