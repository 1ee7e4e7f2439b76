"""From target to codes and back: predictions by an independent path, limits, whole turns, what is out of reach."""

import json
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from conftest import multiplied
from hypothesis import given
from hypothesis import strategies as st

import meshctl
from meshctl.errors import OutOfReach, StalePlan, VoltageOutOfRange
from meshctl.mesh.meshfile import lattice, load, write
from meshctl.plan.chip import Chip
from meshctl.plan.plan import check_fresh, plan_text, read_plan

TURN = 2 * np.pi


def built_chip(chip, lattice_toml, seed=4, modes=5):
    """A rectangular mesh with every heater, channel and part of its own, crosstalk and losses."""
    plain = load(chip(lattice_toml(modes=modes), "plain"))
    rng = np.random.default_rng(seed)
    actuators = [["actuator", "channel", "offset_rad", "p2pi_mw", "r_ohm"]]
    channels = [["channel", "bits", "min_v", "max_v", "offset_v", "gain"]]
    order = rng.permutation(plain.net.n_settings)
    for k, s in enumerate(order.tolist()):
        name = plain.net.setting_names[s]
        actuators.append([name, f"k{k}", *rng.uniform([-3, 20, 500], [3, 30, 700]).tolist()])
        channels.append([f"k{k}", int(rng.integers(12, 17)), *rng.uniform([0, 9, -0.01, 0.98], [0, 10, 0, 1]).tolist()])
    elements = [["element", "error_rad", "loss_db"]]
    elements += [[n, rng.normal(0, 0.02), 0.05] for n in plain.net.names.elements if ".split" in n]
    names = plain.net.setting_names
    crosstalk = [["from", "to", "coefficient"]]
    crosstalk += [[a, b, rng.uniform(0.005, 0.02)] for a, b in pairwise(names)]
    folder = chip(
        lattice_toml(modes=modes),
        "built",
        elements=elements,
        actuators=actuators,
        channels=channels,
        crosstalk=crosstalk,
    )
    return folder, {"actuators": actuators, "channels": channels, "elements": elements, "crosstalk": crosstalk}


def lanes_of(cell):
    """Upper lane of a rectangular mesh's cell, from its name alone."""
    column, row = (int(part) for part in cell[1:].split("_"))
    return 2 * (row - 1) + (column - 1) % 2


def by_hand(rows, codes, settings_names, modes):
    """Matrix of codes from the rows of the tables, in plain numpy: no function of the package."""
    channel = {row[0]: row[1:] for row in rows["channels"][1:]}
    code = dict(zip(channel, codes.tolist(), strict=True))
    own, offset = {}, {}
    for name, k, offset_rad, p2pi_mw, r_ohm in rows["actuators"][1:]:
        bits, low, high, offset_v, gain = channel[k]
        volts = offset_v + gain * (low + code[k] * (high - low) / (2**bits - 1))
        own[name], offset[name] = TURN * (volts**2 / r_ohm * 1e3) / p2pi_mw, offset_rad
    phase = {name: offset[name] + own[name] for name in own}
    for source, to, coefficient in rows["crosstalk"][1:]:
        phase[to] += coefficient * own[source]
    parts = []
    built = {row[0]: row[1:] for row in rows["elements"][1:]}
    for cell in sorted(
        {n.split(".")[0] for n in settings_names if n[0] == "c"}, key=lambda c: [*map(int, c[1:].split("_"))]
    ):
        m = lanes_of(cell)
        for half, split in (("outer", "split1"), ("inner", "split2")):
            error, loss = built[f"{cell}.{split}"]
            parts += [("phase", m, None, phase[f"{cell}.{half}"]), ("coupler", m, m + 1, np.pi / 4 + error)]
            parts += [("loss", lane, None, loss) for lane in (m, m + 1)]
    parts += [("phase", k, None, phase[f"out{k + 1}.phase"]) for k in range(modes)]
    return multiplied(parts, modes)


@pytest.mark.parametrize("seed", range(3))
def test_prediction_agrees_with_hand_calculation(chip, lattice_toml, seed):
    folder, rows = built_chip(chip, lattice_toml, seed)
    mesh = load(folder)
    codes = np.array([np.random.default_rng(seed).integers(0, 2**b) for b in mesh.channels.bits])
    matrix = Chip(mesh).matrix(codes)
    # phases up to some 40 rad, each rounded to 1e-14
    assert np.abs(matrix - by_hand(rows, codes, mesh.net.setting_names, 5)).max() <= 1e-12


def test_plan_predicts_what_its_codes_give(chip, lattice_toml):
    folder, rows = built_chip(chip, lattice_toml)
    mesh = load(folder)
    plan = meshctl.solve(mesh, "haar:3")
    hand = by_hand(rows, plan.codes, mesh.net.setting_names, 5)
    target = meshctl.solver.target.read_target("haar:3", (5, 5)).matrix
    overlap = abs(np.vdot(target, hand)) ** 2 / (np.vdot(target, target) * np.vdot(hand, hand)).real
    assert np.abs(meshctl.predict(mesh, plan) - hand).max() <= 1e-12
    # F = |tr T^H U|^2 / (tr T^H T tr U^H U) by its definition, E^2 = 1 - F
    assert abs(plan.fidelity - overlap) <= 1e-12
    assert abs(plan.matrix_error**2 - (1 - overlap)) <= 1e-12
    assert abs(plan.throughput - (np.abs(hand) ** 2).sum() / 5) <= 1e-12
    assert np.abs(plan.throughput_per_input - (np.abs(hand) ** 2).sum(0)).max() <= 1e-12


def test_ideal_elements_reach_target_exactly():
    plan = meshctl.solve(lattice("rectangular", modes=8), "haar:7")
    assert 1 - plan.continuous["fidelity"] <= 1e-12
    # 16 bits over 10 V: a step is 0.15 mV, at 5 V some 1e-4 rad on 64 settings
    assert 1e-6 < plan.matrix_error < 1e-3
    assert plan.reason == "codes"


def test_more_bits_come_closer_still(chip, lattice_toml):
    errors = []
    for bits in (8, 12):
        mesh = load(chip(lattice_toml(modes=6).replace("bits = 16", f"bits = {bits}"), f"b{bits}"))
        errors.append(np.mean([meshctl.solve(mesh, f"haar:{k}").matrix_error for k in range(4)]))
    # errors go as the step of a code, 2^-bits: 16 times less, within a factor of 2 for the draw
    assert 8 <= errors[0] / errors[1] <= 32


def test_power_and_headroom_add_up(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=4, channel="limit_v = 5.5")))
    plan = meshctl.solve(mesh, "haar:2")
    assert np.abs(plan.power_mw - plan.volts**2 / 600 * 1e3).max() <= 1e-9  # P = V^2 / R
    assert np.abs(plan.headroom_v - (5.5 - plan.volts)).max() <= 1e-12


def test_heater_turns_silicon_as_it_warms(chip, lattice_toml):
    # silicon: phase 2 pi L (dn/dT) dT / lambda with dn/dT = 1.86e-4 per K (from memory); a waveguide of 200 um
    # under a heater of 0.8 K/mW takes its 2 pi at 52 mW
    length_um, k_per_mw, dn_dt = 200.0, 0.8, 1.86e-4
    p2pi = 1.55 / (dn_dt * length_um * k_per_mw)
    mesh = load(chip(lattice_toml(modes=2).replace("p2pi_mw = 24.0", f"p2pi_mw = {p2pi!r}")))
    codes = np.array([1000, 20000, 40000, 65535])
    warm_k = (codes * 10.0 / 65535) ** 2 / 600.0 * 1e3 * k_per_mw
    phase = TURN * length_um * dn_dt * warm_k / 1.55
    assert np.abs(Chip(mesh).actual(codes) - phase).max() <= 1e-12  # rad, of up to 20
    assert 20.0 < p2pi < 100.0  # the range of common heaters (common practice)


@given(st.integers(0, 2**31), st.floats(4.2, 9.0), st.floats(6.4, 20.0), st.floats(24.5, 80.0))
def test_limits_hold_for_every_channel(seed, limit_v, limit_ma, limit_mw):
    mesh = lattice("rectangular", modes=4, built=seed)
    n = len(mesh.channels)
    limited = replace(
        mesh.channels, limit_v=np.full(n, limit_v), limit_ma=np.full(n, limit_ma), limit_mw=np.full(n, limit_mw)
    )
    try:
        plan = meshctl.solve(replace(mesh, channels=limited), "haar:5")
    except OutOfReach:
        # 2 pi take 24 mW, 3.8 V, 6.3 mA at 600 ohm; a die scatters them by 2 % (spread), seven sigmas are 15 %
        assert limit_v < 3.8 * 1.15 or limit_ma < 6.3 * 1.15 or limit_mw < 24 * 1.15
        return
    r = mesh.actuators.params["r_ohm"]
    assert plan.volts.max() <= limit_v + 1e-9
    assert (plan.volts / r * 1e3).max() <= limit_ma + 1e-9
    assert (plan.volts**2 / r * 1e3).max() <= limit_mw + 1e-9


@given(st.integers(0, 2**31))
def test_whole_turns_take_least_power(seed):
    # without crosstalk the least power for a phase is what lies above its offset by less than one turn
    mesh = lattice("rectangular", modes=4, built=seed)
    plan = meshctl.solve(mesh, "haar:5")
    own = TURN * plan.power_mw / mesh.actuators.params["p2pi_mw"]
    wanted = np.mod(plan.settings - mesh.actuators.params["offset_rad"], TURN)
    step = 5e-3  # rad that one code may be off: 16 bits over 10 V at 4 V, and a few codes for the matrix
    assert np.minimum(np.abs(own - wanted), np.abs(own - wanted + TURN)).max() <= step


def test_free_outputs_take_no_drive():
    mesh = lattice("rectangular", modes=6, built=2)
    fixed, free = (meshctl.solve(mesh, "haar:5", free=side) for side in ("nothing", "outputs"))
    outs = [name.startswith("out") for name in mesh.actuator_names]
    assert free.power_mw[outs].sum() <= 1e-9
    assert free.power_mw.sum() < fixed.power_mw.sum()
    # output powers are the same wish; both plans reach it
    assert max(fixed.matrix_error, free.matrix_error) < 0.05


def test_low_limit_is_out_of_reach(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=4, channel="limit_v = 2.0")))
    with pytest.raises(VoltageOutOfRange) as caught:
        meshctl.solve(mesh, "haar:5")
    said = str(caught.value)
    needed = float(said.partition(" V is needed")[0].rpartition(" ")[2])
    # a whole turn takes sqrt(24 mW * 600 ohm) = 3.79 V
    assert 2.0 < needed < 3.8
    assert "allowed is 0 to 2 V" in said
    assert "raise limit_v" in said


def test_best_effort_holds_at_limit(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=4, channel="limit_v = 2.0")))
    plan = meshctl.solve(mesh, "haar:5", best_effort=True)
    assert plan.volts.max() <= 2.0 + 1e-9
    assert plan.reason == "limits"
    assert plan.warnings
    assert plan.matrix_error > 0.01
    assert plan.continuous["matrix_error"] <= 1e-12


def test_best_effort_changes_nothing_in_reach():
    mesh = lattice("rectangular", modes=4, built=1)
    one, two = (meshctl.solve(mesh, "haar:5", best_effort=effort) for effort in (False, True))
    assert np.array_equal(one.codes, two.codes)


def test_dead_heater_stays_cold_and_listed(chip, lattice_toml):
    rows = [["actuator", "dead", "offset_rad"], ["c2_1.inner", 1, 0.7]]
    mesh = load(chip(lattice_toml(modes=4), actuators=rows))
    plan = meshctl.solve(mesh, "haar:5")
    at = mesh.net.setting_names.index("c2_1.inner")
    assert plan.actual[at] == 0.7
    assert plan.power_mw[mesh.actuator_names.index("c2_1.inner")] == 0.0
    assert [short["element"] for short in plan.shortfalls] == ["c2_1.inner"]
    assert any("'c2_1.inner' is stuck or dead" in said for said in plan.warnings)


def test_stuck_setting_keeps_its_value(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=4), elements=[["element", "stuck_rad"], ["c3_1.inner", 1.1]]))
    plan = meshctl.solve(mesh, "haar:5")
    at = mesh.net.setting_names.index("c3_1.inner")
    assert plan.actual[at] == 1.1
    assert [short["element"] for short in plan.shortfalls] == ["c3_1.inner"]


def test_gap_mesh_is_driven_within_travel(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=4, cell="gap")))
    plan = meshctl.solve(mesh, "haar:5")
    # electrostatic pull-in V = sqrt(8 k g^3 / (27 eps0 A)) (textbook), margin 0.8
    pull_in = np.sqrt(8 * 2.0 * (200e-9) ** 3 / (27 * 8.8541878128e-12 * 20e-12))
    gaps = [name.endswith("coupler") for name in mesh.actuator_names]
    assert plan.volts[gaps].max() <= 0.8 * pull_in
    assert plan.matrix_error < 1e-2
    assert plan.continuous["matrix_error"] <= 1e-12


def test_wavelengths_give_one_matrix_each():
    mesh = lattice("rectangular", modes=4, built=1)
    plan = meshctl.solve(mesh, "haar:5")
    waves = [1540.0, 1550.0, 1560.0]
    matrices = meshctl.predict(mesh, plan, waves)
    assert matrices.shape == (3, 4, 4)
    assert np.array_equal(matrices[1], meshctl.predict(mesh, plan))
    assert np.abs(matrices[0] - matrices[1]).max() > 1e-3


# ---- plan files
def test_plan_is_read_back_equal(tmp_path):
    mesh = lattice("rectangular", modes=4, built=1)
    plan = meshctl.solve(mesh, np.eye(4)[::-1] * 1j)
    (tmp_path / "p.json").write_text(plan_text(plan))
    again = read_plan(tmp_path / "p.json")
    for name, value in vars(plan).items():
        assert (
            np.array_equal(getattr(again, name), value)
            if isinstance(value, np.ndarray)
            else (getattr(again, name) == value)
        ), name


def test_plan_keeps_columns_not_records():
    plan = meshctl.solve(lattice("rectangular", modes=4), "dft")
    kept = json.loads(plan_text(plan))
    assert len(kept["codes"]) == 16
    assert all(isinstance(code, int) for code in kept["codes"])


def test_plan_for_other_physics_is_stale():
    one, other = (lattice("rectangular", modes=4, built=seed) for seed in (1, 2))
    plan = meshctl.solve(one, "dft")
    with pytest.raises(StalePlan) as caught:
        meshctl.predict(other, plan)
    assert one.hash[:12] in str(caught.value)
    assert other.hash[:12] in str(caught.value)
    assert len(check_fresh(other, plan, stale_ok=True)) == 1


def test_renamed_mesh_keeps_its_plans(tmp_path):
    mesh = lattice("rectangular", modes=4, built=1)
    plan = meshctl.solve(mesh, "dft")
    folder = write(mesh, tmp_path / "m")
    toml = folder / "mesh.toml"
    toml.write_text(toml.read_text().replace('name = "rectangular4"', 'name = "other"\nnote = "moved"', 1).replace(
        'note = "as drawn', '# note = "as drawn', 1))  # fmt: skip
    assert check_fresh(load(folder), plan) == []


def test_same_question_gives_same_codes():
    mesh = lattice("rectangular", modes=6, built=1)
    one, two = (meshctl.solve(mesh, "haar:9") for _ in range(2))
    assert np.array_equal(one.codes, two.codes)
    assert one.fidelity == two.fidelity
