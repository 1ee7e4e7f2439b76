"""The commands `route` and `states`: what is printed and written, how they end, and one line for what is wrong."""

import csv
import json
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from conftest import multiplied

import meshctl
from meshctl.mesh.meshfile import load
from meshctl.plan.chip import Chip
from meshctl.plan.plan import read_plan
from meshctl.plan.states import load_state, state_names
from meshctl.solver.solution import REASONS

MESHES = Path(__file__).resolve().parent.parent / "meshes"
ROUTE_KEYS = {
    "mesh", "target", "power_error", "continuous", "throughput", "insertion_loss_db", "power_mw", "actuators", "reason",
    "warnings", "seconds",
}  # fmt: skip


@pytest.fixture(autouse=True)
def place(tmp_path, monkeypatch):
    """The current folder, with copies of the switch and of the lattice of hexagons."""
    for name in ("dunlin", "curlew", "plover8"):
        shutil.copytree(MESHES / name, tmp_path / name)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def levels(mesh, codes, wavelengths_nm=None):
    """dB between all ports; 1e-30 keeps darkness from the logarithm."""
    return 10 * np.log10(np.abs(Chip(mesh).matrix(codes, wavelengths_nm)) ** 2 + 1e-30)


def test_route_prints_its_json_keys(run):
    code, said, remarks = run("route", "dunlin", "in1:drop1", "in2:out2", "-o", "p.json", "--json")
    found, plan, mesh = json.loads(said), read_plan("p.json"), load("dunlin")
    assert (code, remarks) == (0, "")
    assert found.keys() >= ROUTE_KEYS
    assert not {"fidelity", "matrix_error"} & found.keys()
    assert found["reason"] == "found"
    assert found["insertion_loss_db"].keys() == {"in1:drop1", "in2:out2"}
    power = levels(mesh, plan.codes)
    assert found["insertion_loss_db"]["in1:drop1"] == pytest.approx(-power[2, 0], abs=1e-9)
    assert [row["code"] for row in found["actuators"]] == plan.codes.tolist()
    assert found["target"]["words"] == ["in1:drop1", "in2:out2"]


def test_route_prints_levels_as_text(run):
    code, said, remarks = run("route", "dunlin", "in1:drop1", "in2:out2")
    assert (code, remarks) == (0, "")
    lines = said.splitlines()
    (head,) = (line for line in lines if line.startswith("route "))
    assert head.split() == ["route", "share", "signal", "loss", "crosstalk", "worst", "stray", "ripple", "slow"]
    (row,) = (line.split() for line in lines if line.startswith("in1:drop1"))
    assert row[1:4] == ["1.0000", "-0.26", "0.26"]  # two couplers of 0.1 dB and two crossings of 0.03 dB
    assert REASONS["found"] in said


def test_crosstalk_within_band_is_warned(run):
    _, _, remarks = run("route", "dunlin", "in1:drop2", "in2:drop1", "add1:out2", "add2:out1", "--band", "1530:1570:3")
    assert remarks.count("warning: ") == 4
    # at 1530 nm four couplers in cross stand 0.002 * 20 of 3 pi / 2 off: sin^2 of that leaks by several ways
    assert "in1:drop2: crosstalk comes to -9." in remarks


def test_python_and_command_line_agree(run):
    said = json.loads(run("route", "curlew", "p29:p26", "p1:p4", "--seed", 2, "--json")[1])
    plan = meshctl.route(meshctl.load("curlew"), ["p29:p26", "p1:p4"], seed=2)
    assert [row["code"] for row in said["actuators"]] == plan.codes.tolist()
    assert said["power_error"] == plan.power_error
    assert [r["signal_db"] for r in said["routes"]] == [r["signal_db"] for r in plan.routes]


def test_impossible_routes_end_with_proof(run, place):
    code, said, remarks = run("route", "curlew", "p1:p20", "p10:p11", "p5:p30", "-o", "p.json", "--json")
    found = json.loads(said)
    assert code == 4
    assert found["conflict"] == ["p1:p20", "p5:p30"]
    assert (found["reason"], found["proof"]) == ("impossible", "complete")
    assert remarks.count("\n") == 1
    assert "routes p1:p20 and p5:p30 cannot go together" in remarks
    assert "(complete proof)" in remarks
    assert "--best-effort" in remarks
    assert not (place / "p.json").exists()


def test_best_effort_writes_partial_answer(run):
    code, said, remarks = run("route", "curlew", "p1:p20", "p5:p30", "-o", "p.json", "--best-effort", "--json")
    found, mesh = json.loads(said), load("curlew")
    assert (code, found["reason"]) == (0, "partly")
    assert found["search"]["left_out"] == ["p5:p30"]
    assert remarks == ""  # JSON has the warnings
    assert "p5:p30" in found["warnings"][0]
    power = levels(mesh, read_plan("p.json").codes)
    assert power[mesh.net.outputs.index("p20"), mesh.net.inputs.index("p1")] > -1.0


def test_every_option_reaches_the_search(run):
    words = ["--unused", "rest", "--avoid", "c15", "--band", "1549:1551:5", "--seconds", 5, "--priorities", "2,1"]
    found = json.loads(run("route", "curlew", "p29:p26", "p1:p4", *words, "--json")[1])
    assert found["search"]["unused"] == "rest"
    assert "c15" not in found["routes"][0]["cells"]
    target = found["target"]
    assert (target["band"], target["seconds"], target["priorities"]) == ("1549:1551:5", 5.0, [2.0, 1.0])


def test_wished_length_is_kept_exactly(run):
    found = json.loads(run("route", "curlew", "p29:p26@9cells", "--json")[1])
    assert len(found["routes"][0]["cells"]) == 9
    code, _, remarks = run("route", "curlew", "p29:p26@6cells")
    assert code == 4
    assert remarks.startswith("meshctl route: route p29:p26@6cells is impossible: ")


@pytest.mark.parametrize(
    ("words", "exit_code", "says"),
    [
        ("route dunlin in1:dorp1", 2, ["output 'dorp1' is not known", "'drop1'"]),
        ("route dunlin inn1:drop1", 2, ["input 'inn1' is not known", "'in1'"]),
        ("route dunlin in1", 2, ["route 'in1' is not complete", "write IN:OUT"]),
        ("route dunlin in1:out1=0.7,out2=0.2", 2, ["shares add up to 0.9, must be 1"]),
        ("route dunlin in1:out1=0.7,out2", 2, ["a share to some outputs only"]),
        ("route dunlin in1:out1 in2:out1", 4, ["'out1' is asked for twice"]),
        ("route dunlin in1:out1 in1:out2", 2, ["start at the same port"]),
        ("route dunlin in1:out1,out1", 2, ["names 'out1' twice"]),
        ("route dunlin in1:out1 --save a/b", 2, ["'a/b' is no name for a state", "letters, digits"]),
        ("route dunlin in1:out1 --avoid x13", 2, ["cell 'x13' is not known", "x12"]),
        ("route dunlin in1:out1 --priorities 1,2", 2, ["priorities are 2, routes 1"]),
        ("route dunlin in1:out1 --priorities 1,x", 2, ["--priorities 1,x are no numbers"]),
        ("route dunlin in1:out1 --priorities nan", 2, ["--priorities nan are no numbers"]),
        ("route dunlin in1:out1 --unused dark", 2, ["invalid choice: 'dark'"]),
        ("route dunlin in1:out1 --band 1540", 2, ["--band 1540 is no range"]),
        ("route dunlin in1:out1 --seconds 0", 2, ["0 is not above 0"]),
        ("route dunlin in1:out1 -o no/p.json", 3, ["no/p.json", "its folder is not there"]),
        ("route nowhere in1:out1", 3, ["nowhere"]),
        ("solve plover8 dft --save a/b", 2, ["'a/b' is no name for a state"]),
        ("states dunlin trough", 3, ["state 'trough' is not known", "'through'"]),
        ("states dunlin through trough", 3, ["state 'trough' is not known"]),
        ("states dunlin a/b", 2, ["'a/b' is no name"]),
        ("states dunlin --renew trough", 3, ["state 'trough' is not known"]),
        ("states dunlin through --renew through", 2, ["--renew through and 'through' together"]),
        ("states plover8 x", 3, ["state 'x' is not known", "save one first"]),
    ],
)
def test_wrong_input_is_one_line(run, place, words, exit_code, says):
    code, said, remarks = run(*words.split())
    assert (code, said) == (exit_code, "")
    assert remarks.count("\n") == 1
    for part in says:
        assert part in remarks
    assert not list(place.glob("*/states/a"))


def test_stale_state_is_one_line(run, place):
    toml = place / "dunlin" / "mesh.toml"
    toml.write_text(toml.read_text().replace("decay_nm = 50.0", "decay_nm = 51.0"))
    code, said, remarks = run("states", "dunlin", "through")
    assert (code, said, remarks.count("\n")) == (3, "", 1)
    assert "state 'through'" in remarks
    code, said, remarks = run("states", "dunlin")
    assert code == 0
    assert said.count("stale") == 7
    assert "solve again with --renew through" in remarks
    assert run("states", "dunlin", "through", "--stale-ok")[0] == 0


def test_renewing_all_makes_them_fresh(run, place):
    toml = place / "dunlin" / "mesh.toml"
    toml.write_text(toml.read_text().replace("decay_nm = 50.0", "decay_nm = 51.0"))
    code, said, remarks = run("states", "dunlin", "--renew", "all")
    assert (code, remarks, said.count("found")) == (0, "", 14)  # reason and sentence for each of 7
    listed = json.loads(run("states", "dunlin", "--json")[1])["states"]
    assert all(row["fresh"] for row in listed)
    assert len(listed) == 7


def test_renewing_goes_on_after_failure(run, place):
    toml = place / "dunlin" / "mesh.toml"
    toml.write_text(toml.read_text().replace("max_v = 8.0", "max_v = 2.0"))  # bar needs 1.2 V, cross 3.9 V
    code, said, remarks = run("states", "dunlin", "--renew", "all", "--json")
    found = json.loads(said)
    assert code == 4
    assert list(found["renewed"]) == ["through"]
    assert len(found["failed"]) == 6
    assert remarks.count("stays as it was") == 6


def test_saved_routes_are_listed_and_shown(run):
    assert run("route", "curlew", "p29:p26", "--save", "loop.1")[0] == 0
    assert run("solve", "plover8", "haar:2", "--save", "mix")[0] == 0
    assert [state_names(load(name)) for name in ("curlew", "plover8")] == [["loop.1"], ["mix"]]
    code, said, _ = run("states", "curlew", "loop.1", "--json")
    assert (code, json.loads(said)["target"]["words"]) == (0, ["p29:p26"])
    assert "haar:2" in run("states", "plover8", "mix")[1]
    assert "mix" in run("states", "plover8")[1]


def test_two_states_are_told_apart(run):
    said = run("states", "dunlin", "through", "in1>drop1")[1]
    assert "from 'through' to 'in1>drop1': change in 1 cell and 1 channel" in said
    (row,) = (line.split() for line in said.splitlines() if line.startswith("x11"))
    assert [float(v) for v in row[1:]] == [0.0, 1.0]
    found = json.loads(run("states", "dunlin", "through", "in1>drop1", "--json")[1])
    assert [c["cell"] for c in found["cells"]] == ["x11"]
    assert found["switch_nj"] > 0.0


def test_state_serves_where_plan_does(run):
    for verb in ("show", "predict"):
        assert run(verb, "dunlin", "in1>drop1")[0] == 0
    assert run("elements", "dunlin", "in1>drop1", "-o", "list.csv")[0] == 0
    assert run("energy", "dunlin", "through", "dunlin", "in1>drop1")[0] == 0
    shutil.copy("dunlin/states/through.json", "in1>drop1")  # a file of that name comes first
    assert json.loads(run("predict", "dunlin", "in1>drop1", "--json")[1])["routes"][0]["output"] == "out1"


def test_predict_reports_levels_of_routes(run):
    run("route", "dunlin", "in1:drop1", "in2:out2", "-o", "p.json")
    code, said, _ = run("predict", "dunlin", "p.json", "--wavelengths", "1550:1560:3", "--json")
    found, mesh = json.loads(said), load("dunlin")
    power = levels(mesh, read_plan("p.json").codes, np.array([1550.0, 1555.0, 1560.0]))
    assert (code, "fidelity" in found) == (0, False)
    assert found["routes"][0]["signal_db"] == pytest.approx(power[0, 2, 0], abs=1e-9)
    assert found["routes"][0]["least_signal_db"] == pytest.approx(power[:, 2, 0].min(), abs=1e-9)
    assert found["routes"][0]["worst_crosstalk_db"] == pytest.approx((power[:, 2, 1] - power[:, 2, 0]).max(), abs=1e-6)
    text = run("predict", "dunlin", "p.json")[1]
    assert "fidelity" not in text
    assert "nan" not in text


def test_listed_parts_multiply_to_prediction(run):
    assert run("elements", "dunlin", "in2>drop1", "-o", "list.csv")[0] == 0
    mesh, rows = load("dunlin"), []
    for row in csv.DictReader(Path("list.csv").read_text().splitlines()):
        a, b = int(row["mode_a"]), int(row["mode_b"]) if row["mode_b"] else None
        rows.append((row["kind"], a, b, float(row["actual"]) if row["actual"] else 0.0))
    product = multiplied(rows, 4)
    assert np.abs(product - Chip(mesh).matrix(load_state(mesh, "in2>drop1")[0].codes)).max() <= 1e-12


def test_show_lights_all_routed_inputs(run):
    run("route", "plover8", "in1:out8", "in5:out2", "-o", "p.json")
    said = run("show", "plover8", "p.json")[1]
    assert "route 1 in1:out8" in said
    assert "light of in1, in5" in said
    rows = {line.split()[0]: line for line in said.splitlines() if line.startswith("in")}
    assert all(("━" in rows[name].split("╲")[0]) == (name in ("in1", "in5")) for name in rows)
    assert "light of in1:" in run("show", "plover8", "p.json", "--input", "in1")[1]


def test_show_marks_cells_on_routes(run):
    run("route", "curlew", "p29:p26", "p1:p4", "-o", "p.json")
    said, plan = run("show", "curlew", "p.json", "--width", 100)[1], read_plan("p.json")
    marked = {1: set(), 2: set()}
    for line in said.splitlines():
        words = line.split()
        if words and words[0] in load("curlew").net.names.cells and words[3].isdigit():
            marked[int(words[3])].add(words[0])
    assert marked == {k: set(r["cells"]) for k, r in enumerate(plan.routes, 1)}
    assert "route 1 p29:p26, 5 cells" in said


def test_solving_loads_nothing_of_routes():
    program = (
        "import sys\nfrom meshctl.cli import main\ncode = main(['solve', 'plover8', 'haar:1', '-o', 'p.json'])\n"
        "assert code == 0\nprint([m for m in sys.modules if m.startswith('meshctl.') and m.split('.')[-1] in "
        "('route', 'switches', 'negotiate', 'conflict', 'unused', 'search', 'switching', 'signals')])"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "[]"
