"""Routes down to codes: what the codes send where is found by solving all waves, never by the router's own books."""

import itertools
import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from dense_light import dense_matrix
from plane_nets import traced_wishes

import meshctl
from meshctl.errors import MissingRow, NoRoutes, NotFinite, UnsoundFile
from meshctl.mesh.meshfile import lattice, load, write
from meshctl.mesh.plane import hexagonal
from meshctl.plan.chip import Chip
from meshctl.plan.plan import plan_text, read_plan
from meshctl.plan.signals import fringes_db

MESHES = Path(__file__).resolve().parent.parent / "meshes"


@pytest.fixture(scope="module")
def dunlin():
    return load(MESHES / "dunlin")


@pytest.fixture(scope="module")
def curlew():
    return load(MESHES / "curlew")


def level_db(mesh, plan, pair, wavelength_nm=None):
    """dB between two ports by one dense solve over all parts of the chip as its codes set it."""
    power = np.abs(dense_matrix(mesh, Chip(mesh).actual(plan.codes), wavelength_nm)) ** 2
    source, sink = pair.split(":")
    return 10 * np.log10(power[mesh.net.outputs.index(sink), mesh.net.inputs.index(source)])


def within_limits(mesh, plan):
    chip = Chip(mesh)
    low, high = chip.level_range
    return bool(((plan.volts >= low - 1e-9) & (plan.volts <= high + 1e-9)).all()) and (plan.headroom_v >= 0).all()


def test_switch_gives_fourteen_of_all_maps(dunlin):
    # four swaps in a fixed order give 14 distinct maps of four lanes, by counting their products; the other
    # ten of the 24 permutations must be refused
    swaps = [(0, 2), (0, 3), (1, 2), (1, 3)]  # x11, x12, x21, x22 join rows in1, in2 with columns add1, add2
    reachable = set()
    for states in itertools.product((0, 1), repeat=4):
        lanes = [0, 1, 2, 3]
        for crossed, (a, b) in zip(states, swaps, strict=True):
            if crossed:
                lanes[a], lanes[b] = lanes[b], lanes[a]
        reachable.add(tuple(lanes.index(k) for k in range(4)))
    net, found, refused = dunlin.net, set(), set()
    for goes in itertools.permutations(range(4)):
        wishes = [f"{net.inputs[k]}:{net.outputs[out]}" for k, out in enumerate(goes)]
        try:
            plan = meshctl.route(dunlin, wishes)
        except NoRoutes as finding:
            refused.add((finding.status, finding.proof))
            continue
        power = np.abs(dense_matrix(dunlin, Chip(dunlin).actual(plan.codes))) ** 2
        assert power.argmax(0).tolist() == list(goes)
        assert power.max(0).min() > 0.88  # two couplers and three crossings lose 0.1 and 0.03 dB each at most thrice
        assert within_limits(dunlin, plan)
        found.add(goes)
    assert len(reachable) == 14
    assert found == reachable
    assert refused == {("impossible", "complete")}


@pytest.mark.parametrize(
    "wishes",
    [
        ["p33:p16", "p17:p29"],
        ["p36:p14", "p17:p1", "p20:p2"],
        ["p35:p22", "p27:p15", "p8:p26", "p23:p16"],
    ],
    ids=len,
)
def test_rings_lattice_carries_several_routes(curlew, wishes):
    plan = meshctl.route(curlew, wishes)
    assert plan.reason == "found"
    assert within_limits(curlew, plan)
    for entry, wish in zip(plan.routes, wishes, strict=True):
        level = level_db(curlew, plan, wish)
        # each cell passed loses its coupler and guides, some 0.045 dB by mesh.toml; nothing goes astray
        assert -level == pytest.approx(0.045 * len(entry["cells"]), abs=0.02)
        assert entry["signal_db"] == pytest.approx(level, abs=1e-9)
        assert entry["insertion_loss_db"] == pytest.approx(-level, abs=1e-9)


def test_levels_over_band_are_simulated(curlew):
    wishes, waves = ["p1:p12", "p20:p28"], [1548.0, 1549.3, 1550.6]
    plan = meshctl.route(curlew, wishes, band="1548:1550.6:3")
    for k, entry in enumerate(plan.routes):
        levels = [level_db(curlew, plan, wishes[k], wave) for wave in waves]
        other = wishes[1 - k].split(":")[0] + ":" + entry["output"]
        over = [level_db(curlew, plan, other, wave) - at for wave, at in zip(waves, levels, strict=True)]
        assert entry["least_signal_db"] == pytest.approx(min(levels), abs=1e-9)
        if max(over) > -200.0:  # below, rounding decides
            assert entry["worst_crosstalk_db"] == pytest.approx(max(over), abs=1e-6)


def test_crosstalk_and_stray_on_switch(dunlin):
    wishes = ["in1:drop1", "in2:drop2"]
    plan = meshctl.route(dunlin, wishes, band="1550:1560:2")
    entry = plan.routes[0]
    unwanted, wanted = (level_db(dunlin, plan, pair, 1560.0) for pair in ("in2:drop1", "in1:drop1"))
    stray = max(level_db(dunlin, plan, f"in1:{out}", 1560.0) for out in ("out1", "out2", "drop2"))
    assert entry["worst_crosstalk_db"] == pytest.approx(unwanted - wanted, abs=1e-6)
    assert entry["worst_stray_db"] == pytest.approx(stray, abs=1e-6)
    # the coupler in cross stands at 3 pi / 2; 10 nm turn it by 0.002 * 10 of that: sin^2 of it stays behind
    assert stray == pytest.approx(10 * math.log10(math.sin(0.02 * 1.5 * math.pi) ** 2), abs=0.7)


def test_dead_heater_is_gone_round():
    mesh = load(MESHES / "knot16")
    assert np.flatnonzero(mesh.actuators.dead).size == 1
    rng = np.random.default_rng(5)
    for _ in range(4):
        order = rng.permutation(16)
        wishes = [f"in{k + 1}:out{order[k] + 1}" for k in range(16)]
        plan = meshctl.route(mesh, wishes)
        power = np.abs(meshctl.predict(mesh, plan)) ** 2
        assert power.argmax(0).tolist() == order.tolist()
        # 18 columns of two couplers of some 0.04 dB, 1.5 dB/cm over some 7 mm, and splittings 0.02 rad off
        assert 10 * np.log10(power.max(0).min()) > -3.5
        assert within_limits(mesh, plan)


def test_dead_heater_forbids_other_state():
    mesh = load(MESHES / "knot16")
    plan = meshctl.route(mesh, ["in1:out9"])
    cell = "c9_4"
    states = {entry["states"][entry["cells"].index(cell)] for entry in plan.routes if cell in entry["cells"]}
    assert states <= {"cross"}  # its rest: by 'dead' in actuators.csv and the offset there
    everything = " ".join(f"in{k}:out{k}" for k in range(1, 17)).split()
    for entry in meshctl.route(mesh, everything).routes:
        if cell in entry["cells"]:
            assert entry["states"][entry["cells"].index(cell)] == "cross"


def test_split_shares_arrive_as_wished():
    mesh = lattice("rectangular", modes=6)  # no losses
    plan = meshctl.route(mesh, ["in1:out2=0.7,out5=0.3", "in3:out6", "in5:out1=0.2,out3=0.5,out4=0.3"])
    power = np.abs(Chip(mesh).response.matrix(plan.settings)) ** 2
    wished = {(0, 1): 0.7, (0, 4): 0.3, (2, 5): 1.0, (4, 0): 0.2, (4, 2): 0.5, (4, 3): 0.3}
    for (source, sink), share in wished.items():
        assert power[sink, source] == pytest.approx(share, abs=1e-9)
    assert plan.continuous["power_error"] <= 1e-9
    # 16 bits over 10 V: some 1e-4 rad of a splitting phase
    assert 0.0 < plan.power_error < 1e-3


def test_split_on_lossy_chip_keeps_ratio():
    mesh = load(MESHES / "plover8")
    plan = meshctl.route(mesh, ["in1:out8", "in2:out1=0.7,out3=0.3"])
    power = np.abs(meshctl.predict(mesh, plan)) ** 2
    assert power[0, 1] / (power[0, 1] + power[2, 1]) == pytest.approx(0.7, abs=1e-3)
    assert [r["share_reached"] for r in plan.routes] == pytest.approx([1.0, 0.7, 0.3], abs=1e-3)
    # 1.28 dB are lost to guides and couplers: the wished power is missed by what is lost
    assert plan.power_error == pytest.approx(1.0 - power[7, 0], abs=1e-12)


SLOPED = (
    'format = 1\nname = "sloped"\nwavelength_nm = 1550.0\n[lattice]\nshape = "hexagonal"\nrings = 2\ncell = "mzi"\n'
    "side_um = 250.0\n[coupler]\nangle_slope_per_nm = 0.003\n[guide]\nn_eff = 2.44\nn_group = 4.2\n"
    '[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n[channel]\nbits = 16\nmax_v = 10.0\n'
)


@pytest.mark.parametrize("opposite", [False, True], ids=["equal", "opposite"])
def test_free_cells_keep_ripple_small(chip, opposite):
    plain = load(chip(SLOPED, "plain"))
    cells = [name for name in plain.net.names.elements if name.endswith(".split1")]
    rows = [["element", "error_rad"]]
    for name, sign in zip(cells, np.random.default_rng(1).choice([-1, 1], len(cells)).tolist(), strict=True):
        second = -sign if opposite else sign
        rows += [[name, 0.03 * sign], [name.replace("split1", "split2"), 0.03 * second]]
    mesh = load(chip(SLOPED, elements=rows))
    wishes = ["p36:p14", "p17:p1", "p20:p2"]
    waves = np.linspace(1540.0, 1560.0, 201)

    def ripple(matrices):
        worst = 0.0
        for wish in wishes:
            source, sink = (mesh.net.inputs.index(end) for end in wish.split(":"))
            curve = 20 * np.log10(np.abs(matrices[:, sink, source]))
            # fringes of loops, not the slow change that the couplers' slope gives every cell passed
            worst = max(worst, np.ptp(curve - np.polyval(np.polyfit(waves - 1550, curve, 4), waves - 1550)))
        return worst

    plan = meshctl.route(mesh, wishes)
    found = ripple(meshctl.predict(mesh, plan, waves))
    assert found <= 0.05
    assert max(r["ripple_db"] for r in plan.routes) == pytest.approx(found, abs=1e-6)
    assert plan.search["loops"] == 0
    # all bar and all cross: free cells turned by hand, those of routes as they are
    on_routes = {cell for r in plan.routes for cell in r["cells"]}
    upper = [k for k, n in enumerate(mesh.net.setting_names) if n.endswith(".upper") and n[:-6] not in on_routes]
    lower = [mesh.net.setting_names.index(mesh.net.setting_names[k][:-6] + ".lower") for k in upper]
    for apart in (0.0, np.pi):
        settings = Chip(mesh).actual(plan.codes)
        settings[upper] = settings[lower] + apart
        assert found <= ripple(Chip(mesh).response.matrix(settings, waves)) + 1e-3


def test_warm_dead_arm_is_made_up_for(chip):
    toml = SLOPED.replace("rings = 2", "rings = 1").replace("angle_slope_per_nm = 0.003", "loss_db = 0.0")
    plain = load(chip(toml, "plain"))
    cell = "c1"
    arms = [name for name in plain.net.setting_names if name.startswith(f"{cell}.")]
    assert len(arms) == 2
    actuators = [["actuator", "dead", "offset_rad"], [arms[0], 0, 0.4], [arms[1], 1, 0.1]]
    crosstalk = [["from", "to", "coefficient"], [arms[0], arms[1], 0.08]]
    mesh = load(chip(toml, actuators=actuators, crosstalk=crosstalk))
    plan = meshctl.route(mesh, ["p1:p4", "p7:p10"], unused="bar")
    rows = [mesh.net.setting_names.index(name) for name in arms]
    apart = plan.actual[rows[0]] - plan.actual[rows[1]]
    # both splittings are even: bar is a difference of pi, cross one of 0
    assert abs(math.remainder(apart, math.pi)) <= 3e-4  # a code is 0.15 mV, some 1e-4 rad
    assert plan.actual[rows[1]] - 0.1 == pytest.approx(0.08 * (plan.actual[rows[0]] - 0.4), abs=1e-9)
    assert abs(plan.actual[rows[1]] - 0.1) > 1e-2


def test_fringes_are_told_from_slope():
    waves = np.linspace(1540.0, 1560.0, 201)
    slow = -0.3 * ((waves - 1550) / 10) ** 2
    ripple, change = fringes_db(waves, slow + 0.05 * np.cos(2 * np.pi * waves / 0.73))
    assert change == pytest.approx(0.3, abs=0.01)
    assert ripple == pytest.approx(0.1, abs=0.003)  # peak to peak of 0.05 cos
    assert fringes_db(waves[:1], slow[:1]) == (0.0, 0.0)


def test_conflict_is_named_with_proof(curlew):
    with pytest.raises(NoRoutes, match=r"routes p1:p20 and p5:p30 cannot go together: .*\(complete proof\)") as said:
        meshctl.route(curlew, ["p1:p20", "p10:p11", "p5:p30"])
    assert said.value.conflict == ("p1:p20", "p5:p30")
    assert said.value.exit_code == 4


def test_best_effort_leaves_last_named_out(curlew):
    plan = meshctl.route(curlew, ["p1:p20", "p5:p30"], best_effort=True)
    assert plan.reason == "partly"
    assert plan.search["left_out"] == ["p5:p30"]
    assert any("left out: p5:p30" in line for line in plan.warnings)
    assert [r["output"] for r in plan.routes] == ["p20"]
    assert level_db(curlew, plan, "p1:p20") > -1.0
    # the wish left out counts: its light is wanted and missing
    assert plan.power_error > 0.9


def test_priorities_say_which_route_stays(curlew):
    plan = meshctl.route(curlew, ["p1:p20", "p5:p30"], priorities=[1, 2])
    assert plan.search["left_out"] == ["p1:p20"]
    assert level_db(curlew, plan, "p5:p30") > -1.0


def test_avoided_cells_are_not_passed(curlew):
    first = meshctl.route(curlew, ["p29:p26"]).routes[0]["cells"]
    other = meshctl.route(curlew, ["p29:p26"], avoid=[first[2]])
    assert first[2] not in other.routes[0]["cells"]
    assert -1.5 < level_db(curlew, other, "p29:p26") < 0.0
    # light does not mind what stands in the cell avoided: turned from bar to cross it arrives as before
    settings = Chip(curlew).actual(other.codes)
    settings[curlew.net.setting_names.index(f"{first[2]}.coupler")] += 0.5 * np.pi
    power = np.abs(dense_matrix(curlew, settings)) ** 2
    ends = [curlew.net.outputs.index(name) for name in ("p26", "p29")]
    assert 10 * np.log10(power[tuple(ends)]) == pytest.approx(level_db(curlew, other, "p29:p26"), abs=1e-3)


def test_file_of_routes_reads_back_equal(curlew, tmp_path):
    plan = meshctl.route(curlew, ["p1:p4", "p10:p20"], avoid=["c30"], seed=3)
    (tmp_path / "p.json").write_text(plan_text(plan))
    again = read_plan(tmp_path / "p.json")
    entry = json.loads(plan_text(plan))
    assert entry["fidelity"] is entry["matrix_error"] is None
    assert math.isnan(again.fidelity)
    assert plan_text(again) == plan_text(plan)
    assert (again.routes, again.search, again.power_error) == (plan.routes, plan.search, plan.power_error)
    np.testing.assert_array_equal(again.codes, plan.codes)


@pytest.mark.parametrize(
    ("spoil", "error", "says"),
    [
        (lambda e: e.pop("routes"), MissingRow, "'routes' is missing"),
        (lambda e: e.update(routes=[]), UnsoundFile, "'routes' must list one route or more"),
        (lambda e: e["routes"][0].pop("cells"), MissingRow, r"'routes\[0\].cells' is missing"),
        (lambda e: e["routes"][0].update(input=3), UnsoundFile, r"'routes\[0\].input' is 3, must be a text"),
        (lambda e: e["routes"][0].update(ripple_db="x"), UnsoundFile, "must be a number or null"),
        (lambda e: e.update(search=[]), UnsoundFile, r"'search' is \[\], must be an object"),
        (lambda e: e.update(power_error=None), NotFinite, "'power_error' is None"),
        (lambda e: e.update(continuous={}), MissingRow, "'continuous.power_error' is missing"),
        (lambda e: e["target"].update(words=[]), UnsoundFile, "must be a list of routes"),
        (lambda e: e["target"].update(words="in1:out2"), UnsoundFile, "must be a list of routes"),
        (lambda e: e["target"].update(seed=-1), UnsoundFile, "'target.seed' is -1, must be a whole number"),
        (lambda e: e["target"].update(seconds=0), UnsoundFile, "must be a number above 0"),
        (lambda e: e["target"].pop("avoid"), MissingRow, "'target.avoid' is missing"),
        (lambda e: e.update(reason="luck"), UnsoundFile, "'reason' is 'luck', must be one of exact"),
        (lambda e: e.update(mesh_hash=None), UnsoundFile, "'mesh_hash' is None, must be a text"),
    ],
)
def test_spoilt_file_of_routes_is_refused(dunlin, tmp_path, spoil, error, says):
    entry = json.loads(plan_text(meshctl.route(dunlin, ["in1:drop1"])))
    spoil(entry)
    (tmp_path / "p.json").write_text(json.dumps(entry))
    with pytest.raises(error, match=says):
        read_plan(tmp_path / "p.json")


@pytest.mark.parametrize(
    ("spoil", "says"),
    [
        (lambda e: e["target"].update(words=["x"]), "'target' cannot be used: route 'x' is not complete"),
        (lambda e: e["target"].update(band="1540"), "'target' cannot be used: band 1540 is no range"),
        (lambda e: e["routes"][0].update(output="out9"), "route in1:out9 that its wish lacks"),
        (lambda e: e["target"].update(words=["in1:drop2"]), "route in1:drop1 that its wish lacks"),
    ],
)
def test_unreadable_wish_is_no_crash(dunlin, tmp_path, spoil, says):
    entry = json.loads(plan_text(meshctl.route(dunlin, ["in1:drop1"])))
    spoil(entry)
    (tmp_path / "p.json").write_text(json.dumps(entry))
    with pytest.raises(UnsoundFile, match=says):
        meshctl.predict(dunlin, read_plan(tmp_path / "p.json"))


def test_matrix_plans_keep_their_keys():
    entry = json.loads(plan_text(meshctl.solve(lattice("rectangular", modes=3), "dft")))
    assert not {"routes", "search", "power_error"} & entry.keys()


def test_coupler_kept_from_cross_is_impossible(tmp_path, dunlin):
    folder = write(dunlin, tmp_path / "weak")
    toml = folder / "mesh.toml"
    toml.write_text(toml.read_text().replace("max_v = 8.0", "max_v = 2.0"))  # bar needs 1.2 V, cross 3.9 V
    with pytest.raises(NoRoutes, match="route in1:drop1 is impossible: no way leads"):
        meshctl.route(load(folder), ["in1:drop1"])


def test_notebook_table_shows_power_error(dunlin):
    shown = meshctl.route(dunlin, ["in1:drop1"])._repr_html_()
    assert "power error" in shown
    assert "nan" not in shown


@pytest.mark.parametrize(
    ("status", "proof", "says"),
    [
        ("impossible_within", "bounded", r"\(bounded proof: longer ways are not ruled out\); choose other ports"),
        ("not_found", "none", r"\(10 s\); none were proved impossible; give more --seconds or another --seed"),
    ],
)
def test_weaker_verdicts_claim_no_more(curlew, monkeypatch, status, proof, says):
    from meshctl.plan import switching

    found = switching.find_routes

    def weaker(*args, **words):
        return replace(found(*args, **words), status=status, words="as far as was looked")

    monkeypatch.setattr(switching, "find_routes", weaker)
    with pytest.raises(NoRoutes, match=rf"as far as was looked {says}") as said:
        meshctl.route(curlew, ["p1:p20", "p5:p30"])
    assert (said.value.status, said.value.proof) == (status, proof)


def test_short_time_is_no_proof(curlew):
    with pytest.raises(NoRoutes, match="none were proved impossible") as said:
        meshctl.route(curlew, ["p1:p20", "p5:p30"], seconds=1e-9)
    assert (said.value.status, said.value.proof) == ("not_found", "none")


def test_loops_left_by_full_chip_are_told(curlew):
    told = {}
    for seed in (0, 5):  # with a route at every port hardly a cell is free; the second set leaves a ring
        wishes = traced_wishes(hexagonal(2), 18, np.random.default_rng(seed))
        plan = meshctl.route(curlew, wishes)
        # a ring is two closed ways of light, one in each direction; light of no port comes to them
        told[seed] = plan.search["loops"], any("closed loops are left" in line for line in plan.warnings)
        for wish in wishes:
            assert next(r for r in plan.routes if f"{r['input']}:{r['output']}" == wish)["signal_db"] > -1.5
    assert told == {0: (0, False), 5: (2, True)}


def test_light_that_goes_elsewhere_is_told(curlew, monkeypatch):
    from meshctl.plan import switching

    settings_for = switching.settings_for

    def off(switches, share, entering):
        settings = settings_for(switches, share, entering)
        angle = curlew.net.setting_is_angle
        return np.where(angle, settings + 0.3, settings)  # every coupler 0.3 rad beyond its state

    monkeypatch.setattr(switching, "settings_for", off)
    plan = meshctl.route(curlew, ["p29:p26"])
    level = level_db(curlew, plan, "p29:p26")
    assert level < -1.0
    assert f"p29:p26: {-level:.2f} dB are lost, " in plan.warnings[0]
