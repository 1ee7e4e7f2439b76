"""Named states: kept, listed, compared, found stale and solved again; figures by physics written out here."""

import json
import math
import os
import shutil
from pathlib import Path

import numpy as np
import pytest
from dense_light import dense_matrix
from scipy.optimize import brentq

import meshctl
from meshctl.errors import MissingFile, StalePlan, UnsoundFile, WrongUsage
from meshctl.mesh.meshfile import lattice, load, write
from meshctl.plan import states
from meshctl.plan.chip import Chip
from meshctl.plan.plan import plan_text
from meshctl.plan.states import compare, listed_states, load_state, renew_state, save_state, state_names

MESHES = Path(__file__).resolve().parent.parent / "meshes"
EPS0 = 8.8541878128e-12  # F/m, CODATA 2018


@pytest.fixture
def dunlin(tmp_path):
    """A copy of the switch, with its states."""
    shutil.copytree(MESHES / "dunlin", tmp_path / "dunlin")
    return load(tmp_path / "dunlin")


def edited(mesh, old, new):
    """The mesh read again after a change of its description."""
    toml = mesh.folder / "mesh.toml"
    text = toml.read_text()
    assert old in text
    toml.write_text(text.replace(old, new))
    return load(mesh.folder)


def goes(mesh, plan):
    """Where light of every input goes, by one dense solve over all parts."""
    power = np.abs(dense_matrix(mesh, Chip(mesh).actual(plan.codes))) ** 2
    return {mesh.net.inputs[k]: mesh.net.outputs[out] for k, out in enumerate(power.argmax(0).tolist())}


STRAIGHT = {"in1": "out1", "in2": "out2", "add1": "drop1", "add2": "drop2"}


def test_shipped_states_are_all_fresh():
    mesh = load(MESHES / "dunlin")
    names = state_names(mesh)
    assert {"through", "in1>drop1", "in1>drop2", "in2>drop1", "in2>drop2"} <= set(names)
    for name in names:
        plan, remarks = load_state(mesh, name)
        assert remarks == []
        low, high = Chip(mesh).level_range
        assert ((plan.volts >= low) & (plan.volts <= high)).all()
        assert (plan.headroom_v > 0.0).all()


@pytest.mark.parametrize("name", state_names(load(MESHES / "dunlin")))
def test_shipped_states_do_as_named(name):
    mesh = load(MESHES / "dunlin")
    found = goes(mesh, load_state(mesh, name)[0])
    if name == "through":
        assert found == STRAIGHT
    else:
        pairs = dict(part.split(">") for part in name.split("_"))
        assert pairs.items() <= found.items()
        # lanes that meet none of these go straight on
        columns = {p.replace("drop", "add") for p in pairs.values()}
        others = STRAIGHT.keys() - pairs.keys() - columns
        assert all(found[k] == STRAIGHT[k] for k in others)


def test_states_leave_hash_of_mesh(dunlin):
    save_state(dunlin, "another", meshctl.route(dunlin, ["in1:drop1"]))
    assert load(dunlin.folder).hash == load(MESHES / "dunlin").hash


def test_kept_state_reads_back_equal(dunlin):
    plan = meshctl.route(dunlin, ["in1:drop2", "in2:out2"])
    path = save_state(dunlin, "a.b_c-d>e", plan)
    assert path == dunlin.folder / "states" / "a.b_c-d>e.json"
    assert plan_text(load_state(dunlin, "a.b_c-d>e")[0]) == plan_text(plan)


def test_old_state_survives_failed_write(dunlin, monkeypatch):
    before = (dunlin.folder / "states" / "through.json").read_bytes()
    plan = meshctl.route(dunlin, ["in1:drop1"])

    def broken(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", broken)
    with pytest.raises(UnsoundFile, match="No space left"):
        save_state(dunlin, "through", plan)
    assert (dunlin.folder / "states" / "through.json").read_bytes() == before
    assert not list((dunlin.folder / "states").glob(".*"))


@pytest.mark.parametrize("name", ["a/b", "../x", "a b", "", ".", "..", ".hidden", "a\\b", "ä", "x" * 101, "a\nb"])
def test_name_that_leaves_folder_is_refused(dunlin, name):
    plan = load_state(dunlin, "through")[0]
    with pytest.raises(WrongUsage, match="is no name for a state; use letters, digits"):
        save_state(dunlin, name, plan)
    with pytest.raises(WrongUsage, match="is no name"):
        load_state(dunlin, name)


def test_missing_state_names_near_one(dunlin):
    with pytest.raises(MissingFile, match=r"state 'trough' is not known.*'through'"):
        load_state(dunlin, "trough")


def test_mesh_without_folder_keeps_none():
    mesh = lattice("switch", cell="gap")
    assert state_names(mesh) == []
    with pytest.raises(WrongUsage, match="has no folder"):
        save_state(mesh, "x", meshctl.route(mesh, ["in1:out1"]))


def test_first_state_makes_its_folder(tmp_path):
    mesh = load(write(lattice("switch", cell="gap"), tmp_path / "m"))
    with pytest.raises(MissingFile, match="save one first"):
        load_state(mesh, "x")
    save_state(mesh, "x", meshctl.route(mesh, ["in1:out1"]))
    assert state_names(mesh) == ["x"]


def test_newer_physics_make_states_stale(dunlin):
    newer = edited(dunlin, "decay_nm = 50.0", "decay_nm = 51.0")
    with pytest.raises(StalePlan, match=r"state 'through'.*whose physics differs"):
        load_state(newer, "through")
    plan, remarks = load_state(newer, "through", stale_ok=True)
    assert len(remarks) == 1
    assert plan.mesh_hash == dunlin.hash
    assert not any(row.fresh for row in listed_states(newer))
    assert all("--renew" in row.note for row in listed_states(newer))


def test_renewed_state_fits_newer_physics(dunlin):
    old = load_state(dunlin, "in1>drop1")[0]
    newer = edited(dunlin, "decay_nm = 50.0", "decay_nm = 40.0")
    # the old volts turn the couplers too far now: a quarter of the light goes astray, by dense solve
    power = np.abs(dense_matrix(newer, Chip(newer).actual(old.codes))) ** 2
    drop, row = newer.net.outputs.index("drop1"), newer.net.inputs.index("in1")
    assert power[drop, row] < 0.75
    plan = renew_state(newer, "in1>drop1")
    assert goes(newer, plan)["in1"] == "drop1"
    assert load_state(newer, "in1>drop1")[1] == []
    assert plan.target == old.target
    assert [row.name for row in listed_states(newer) if row.fresh] == ["in1>drop1"]


def test_states_of_matrices_are_renewed_too(tmp_path):
    mesh = load(write(lattice("rectangular", modes=4), tmp_path / "m"))
    save_state(mesh, "mix", meshctl.solve(mesh, "haar:3", free="outputs", seed=5))
    newer = edited(mesh, "p2pi_mw = 24.0", "p2pi_mw = 25.0")
    plan = renew_state(newer, "mix")
    assert plan.mesh_hash == newer.hash != mesh.hash
    assert (plan.target["source"], plan.target["free"], plan.seed) == ("haar:3", "outputs", 5)
    assert plan.continuous["matrix_error"] < 1e-9
    # the same phases take 25/24 of the power, but for codes
    assert plan.power_mw.sum() == pytest.approx(
        25 / 24 * meshctl.solve(mesh, "haar:3", free="outputs").power_mw.sum(), rel=1e-3
    )


def test_failed_renewal_keeps_old_state(dunlin):
    before = (dunlin.folder / "states" / "in1>drop1.json").read_bytes()
    weak = edited(dunlin, "max_v = 8.0", "max_v = 2.0")
    with pytest.raises(meshctl.errors.NoRoutes):
        renew_state(weak, "in1>drop1")
    assert (dunlin.folder / "states" / "in1>drop1.json").read_bytes() == before


def test_list_says_what_is_unreadable(dunlin):
    (dunlin.folder / "states" / "cut.json").write_text('{"format": 1, "mesh')
    (dunlin.folder / "states" / "not a state.json").write_text("{}")
    beyond = json.loads((dunlin.folder / "states" / "through.json").read_text())
    beyond["codes"][0] = 1 << 14  # the source has 14 bits
    (dunlin.folder / "states" / "beyond.json").write_text(json.dumps(beyond))
    rows = {row.name: row for row in listed_states(dunlin)}
    assert "code 16384 of channel 'g1' is outside 0 to 16383" in rows["beyond"].note
    assert not rows["beyond"].fresh
    assert "not readable as JSON" in rows["cut"].note
    assert "not a state" not in rows
    assert rows["through"].fresh
    assert rows["through"].target == "in1:out1 in2:out2 add1:drop1 add2:drop2"


def coupler(mesh, name, volts):
    """Angle and capacitance of a gap from its force balance k x = eps0 A V^2 / (2 (g - x)^2)."""
    params = {key: column[mesh.actuator_names.index(name)] for key, column in mesh.actuators.params.items()}
    gap, area, v_pi = params["gap_nm"] * 1e-9, params["area_um2"] * 1e-12, params["v_pi_v"]
    stiffness = 27 / 8 * EPS0 * area * v_pi**2 / gap**3  # V_pi^2 = 8 k g^3 / (27 eps0 A)
    x = brentq(lambda x: stiffness * x - EPS0 * area * volts**2 / (2 * (gap - x) ** 2), 0, gap / 3, xtol=1e-22)
    return params["rest_rad"] * math.exp(x / (params["decay_nm"] * 1e-9)), EPS0 * area / (gap - x)


def test_difference_names_cells_and_channels(dunlin):
    before, after = (load_state(dunlin, name)[0] for name in ("through", "in1>drop2"))
    found = compare(dunlin, before, after)
    assert [c.cell for c in found.cells] == ["x12"]  # where row 1 meets column 2
    (cell,), (channel,) = found.cells, found.channels
    assert channel.channel == "g2"
    assert (channel.before_code, channel.after_code) == (before.codes[1], after.codes[1])
    angles = [coupler(dunlin, "x12", volts)[0] for volts in (channel.before_v, channel.after_v)]
    assert [cell.before, cell.after] == pytest.approx([math.sin(k) ** 2 for k in angles], abs=1e-6)
    assert found.hold_before_mw == found.hold_after_mw == 0.0  # a gap draws no static current


def test_switching_energy_charges_the_gap(dunlin):
    before, after = (load_state(dunlin, name)[0] for name in ("through", "in1>drop2"))
    found, (channel,) = compare(dunlin, before, after), compare(dunlin, before, after).channels
    charge = [coupler(dunlin, "x12", v)[1] * v for v in (channel.before_v, channel.after_v)]
    # the source gives the charge that flows at the new voltage; on the way back it gives none
    assert found.switch_nj == pytest.approx((charge[1] - charge[0]) * channel.after_v * 1e9, rel=1e-6)
    assert found.back_nj == 0.0


def test_equal_states_show_no_difference(dunlin):
    plan = load_state(dunlin, "through")[0]
    found = compare(dunlin, plan, plan)
    assert (found.cells, found.phases, found.channels, found.switch_nj) == ((), (), (), 0.0)


def test_phases_outside_cells_are_compared():
    mesh = lattice("rectangular", modes=3)
    before, after = (meshctl.solve(mesh, f"haar:{k}") for k in (1, 2))
    found = compare(mesh, before, after)
    changed = {change.element: change for change in found.phases}
    assert {f"out{k}.phase" for k in (1, 2, 3)} & changed.keys()
    assert not any(name.endswith(".inner") for name in changed)  # these are cross powers
    for c in found.cells:
        inner = mesh.net.setting_names.index(f"{c.cell}.inner")
        # even splittings: cross power cos^2 of half the inner phase
        assert c.after == pytest.approx(math.cos(after.actual[inner] / 2) ** 2, abs=1e-9)


def test_names_stay_shorter_than_files_allow():
    assert len(f".{'x' * states._MOST}.json.") + 8 < 255  # mkstemp adds 8 characters


def test_state_file_is_plain_plan(dunlin, run, tmp_path):
    shutil.copy(dunlin.folder / "states" / "through.json", tmp_path / "p.json")
    code, said, _ = run("predict", dunlin.folder, tmp_path / "p.json", "--json")
    assert code == 0
    assert {r["output"] for r in json.loads(said)["routes"]} == set(STRAIGHT.values())


JUNK = (None, True, -1, 2.5, "x", [], {}, [1], ["x"], {"a": 1}, [None], 1e400)


def test_spoilt_states_are_never_bugs(dunlin, run):
    path = dunlin.folder / "states" / "through.json"
    whole, rng = path.read_text(), np.random.default_rng(0)
    codes = set()
    for inside in ((), ("target",), ("routes", 0), ("search",), ("continuous",)):
        keys = json.loads(whole)
        for step in inside:
            keys = keys[step]
        for key in keys:
            entry = spoilt = json.loads(whole)
            for step in inside:
                spoilt = spoilt[step]
            spoilt[key] = JUNK[rng.integers(len(JUNK))]
            path.write_text(json.dumps(entry))
            for words in (("states", dunlin.folder, "through"), ("show", dunlin.folder, "through")):
                code, _, remarks = run(*words)
                codes.add(code)
                assert code in (0, 3), (key, remarks)
                assert code == 0 or remarks.count("\n") == 1
    assert codes == {0, 3}
