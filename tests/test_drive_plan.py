"""Settings put on real electronics and back: against physics written out here and solved by scipy."""

import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq, root

import meshctl
from meshctl.mesh.meshfile import lattice, load, write
from meshctl.optics.elements import cell_block
from meshctl.plan.chip import Chip
from meshctl.plan.energy import energy
from meshctl.plan.pipeline import solve
from meshctl.plan.placing import place, reach_of
from meshctl.solver.target import read_target

ROOT = Path(__file__).resolve().parent.parent
EPS0 = 8.8541878128e-12  # F/m, CODATA 2018


def edited(tmp_path, mesh, changes, more="", **tables):
    """The mesh written to a folder, its mesh.toml changed by hand, and read again."""
    folder = write(mesh, tmp_path / "edited")
    text = (folder / "mesh.toml").read_text()
    for old, new in changes.items():
        assert old in text
        text = text.replace(old, new)
    (folder / "mesh.toml").write_text(f"{text}\n{more}")
    for name, rows in tables.items():
        (folder / f"{name}.csv").write_text(rows)
    return load(folder)


def by_places(tmp_path, modes=4, extra="", channel="", amplitude=0.25):
    """Heaters with signed crosstalk of some 5 %, resistance that rises by a tenth a turn, and 1 ohm of ground."""
    return edited(
        tmp_path,
        lattice("rectangular", modes=modes, built=7),
        {"r_ohm = 600.0": f"r_ohm = 600.0\nr_rise = 0.1\n{extra}", "bits = 16": f'bits = 16\nground = "G1"\n{channel}'},
        "[ground.G1]\nresistance_ohm = 1.0\n"
        f'[crosstalk]\nlaw = "exponential"\namplitude = {amplitude}\ndistance_um = 60.0\narm_um = 60.0\n',
    )


def settled(chip, levels):
    """Settings that heaters take, from the circuit's equations by scipy.optimize.root."""
    p, n = chip.actuators.params, len(chip.actuators)
    cross = np.zeros((n, n)) if chip.actuators.crosstalk is None else chip.actuators.crosstalk.toarray()
    warming = np.abs(cross)
    volts, ohm = levels[chip.actuators.channel], float(chip.channels.ground_ohm[0])

    def balance(x):
        own, current = x[:n], x[n]
        r = p["r_ohm"] * (1 + p["r_rise"] * (own + warming @ own))
        through = (volts - ohm * current) / r
        return np.r_[through**2 * r * 1e3 / p["p2pi_mw"] - own, through.sum() - current]

    start = np.r_[volts**2 / p["r_ohm"] * 1e3 / p["p2pi_mw"], (volts / p["r_ohm"]).sum()]
    found = root(balance, start, tol=1e-14)
    own = found.x[:n]
    return p["offset_rad"] + 2 * np.pi * (own + cross @ own)


def off(a, b):
    """Largest difference up to whole turns."""
    return float(np.abs((a - b + np.pi) % (2 * np.pi) - np.pi).max())


def test_heaters_come_back_through_scipy(tmp_path):
    chip = Chip(by_places(tmp_path))
    assert 0.02 < np.abs(chip.actuators.crosstalk.data).max() < 0.2
    wanted = np.random.default_rng(3).uniform(0, 2 * np.pi, chip.net.n_settings)
    placed = place(chip, wanted)
    assert off(settled(chip, placed.levels), wanted) <= 1e-10  # before quantising
    # and the chip's own forward path says the same
    own = chip.reference_rad + chip.total_changes(chip.own_changes(placed.levels))
    assert off(own, wanted) <= 1e-10


def test_current_sources_come_back_too(tmp_path):
    chip = Chip(by_places(tmp_path, channel='drives = "milliamps"\nmax_ma = 15.0'))
    wanted = np.random.default_rng(4).uniform(0, 2 * np.pi, chip.net.n_settings)
    placed = place(chip, wanted)
    own = placed.change / 2 / np.pi
    p, warming = chip.actuators.params, abs(chip.actuators.crosstalk).toarray()
    r = p["r_ohm"] * (1 + p["r_rise"] * (own + warming @ own))
    np.testing.assert_allclose((placed.levels / 1e3) ** 2 * r * 1e3, own * p["p2pi_mw"], atol=1e-10)  # P = I^2 R
    assert off(chip.reference_rad + chip.total_changes(chip.own_changes(placed.levels)), wanted) <= 1e-10


def test_gaps_come_back_through_force_balance():
    chip = Chip(lattice("rectangular", modes=4, cell="gap"))
    reach = reach_of(chip)
    angle = chip.net.setting_is_angle
    wanted = np.where(angle, 3.05 + 1.4 * np.random.default_rng(5).random(len(angle)), 1.0)
    assert (wanted[angle] < reach.high[angle]).all()
    levels = place(chip, wanted).levels[chip.actuators.channel]
    gap, k, area, decay = 200e-9, 2.0, 20e-12, 50e-9
    for s in np.flatnonzero(angle):
        v = levels[chip.primary[s]]
        # k x = eps0 A V^2 / (2 (g - x)^2), the stable root below a third of the gap
        x = brentq(lambda x, v=v: k * x - EPS0 * area * v * v / (2 * (gap - x) ** 2), 0.0, gap / 3, xtol=1e-22)
        assert 3.05 * math.exp(x / decay) == pytest.approx(wanted[s], abs=1e-10)


def test_neighbours_share_by_stated_distance_law(tmp_path):
    mesh = by_places(tmp_path, modes=2, amplitude=0.3)
    # one cell: its outer heater a quarter pitch (100 um) before the middle, its inner one as far behind; each
    # cell's arms lie 60 um apart and heaters on the upper one, so a heater disturbs by exp(-r / 60 um)
    direct, across = math.hypot(200, 0), math.hypot(200, 60)
    own = 1 - 0.3 * math.exp(-1.0)
    wanted = 0.3 * (math.exp(-direct / 60) - math.exp(-across / 60)) / own
    matrix = mesh.actuators.crosstalk.toarray()
    rows = {name: s for s, name in enumerate(mesh.net.setting_names)}
    assert matrix[rows["c1_1.inner"], rows["c1_1.outer"]] == pytest.approx(wanted, rel=1e-12)
    assert not matrix.diagonal().any()


def test_dropped_neighbours_are_refused_when_felt(tmp_path):
    with pytest.raises(meshctl.errors.CrosstalkUnsound, match=r"0\.01 rad"):
        edited(
            tmp_path,
            lattice("rectangular", modes=4),
            {},
            '[crosstalk]\nlaw = "inverse"\namplitude = 0.05\ndistance_um = 60.0\narm_um = 60.0\nkeep_above = 0.01\n',
        )


def test_free_gauges_save_a_fifth():
    mesh = lattice("rectangular", modes=8, built=5)  # offsets drawn at random
    shares = []
    for seed in range(10):
        plain, thrifty = (meshctl.solve(mesh, f"haar:{seed}", least_power=flag) for flag in (False, True))
        shares.append(1 - thrifty.power_mw.sum() / plain.power_mw.sum())
        assert thrifty.continuous["matrix_error"] < 1e-12
        assert thrifty.saved_mw == pytest.approx(plain.power_mw.sum() - thrifty.power_mw.sum(), abs=0.5)  # codes
    assert np.mean(shares) >= 0.20


def test_free_phases_of_ports_save_power():
    mesh = lattice("rectangular", modes=8, built=5)
    power = {free: meshctl.solve(mesh, "haar:1", free=free).power_mw.sum() for free in ("nothing", "outputs", "both")}
    assert power["both"] < power["outputs"] < power["nothing"]


def test_second_heater_takes_the_shorter_way(tmp_path):
    heaters = "actuator,element,offset_rad,arm\nc1_1.inner,c1_1.inner,0.3,1\nother,c1_1.inner,0,-1\n"
    mesh = edited(tmp_path, lattice("rectangular", modes=2), {}, "", actuators=heaters)
    chip = Chip(mesh)
    target = cell_block(0.1, 0.0)  # the inner phase has to go back by 0.2 rad, or on by 2 pi - 0.2
    plan = solve(mesh, read_target_like(target), least_power=True)
    other = chip.mesh.actuator_names.index("other")
    assert plan.fidelity > 1 - 1e-7
    assert plan.power_mw[other] == pytest.approx(24.0 * 0.2 / 2 / math.pi, rel=1e-3)
    assert plan.power_mw[0] == pytest.approx(0.0, abs=1e-4)  # rounding may use some codes (0.15 mV) of it


def read_target_like(matrix):
    from meshctl.solver.target import make_target

    return make_target(matrix, matrix.shape, "outputs")


def test_dragged_phase_is_made_up_for(tmp_path):
    mesh = edited(
        tmp_path,
        lattice("rectangular", modes=4, cell="gap"),
        {"rest_rad = 3.05": "rest_rad = 3.05\nphase_rad_per_nm = 0.02"},
        "",
    )
    plan = meshctl.solve(mesh, "haar:2")
    assert plan.continuous["matrix_error"] < 1e-12
    # by hand: every coupler turns both lanes behind it by 0.02 rad a nm, travel from the force balance
    chip = Chip(mesh)
    v = chip.levels(plan.codes)[chip.actuators.channel[chip.primary]]
    built = chip.as_built(chip.levels(plan.codes))
    rows = mesh.net.names.element_row
    for s, name in enumerate(mesh.net.setting_names):
        if name.endswith("coupler"):
            x = brentq(
                lambda x, v=v[s]: 2.0 * x - EPS0 * 20e-12 * v * v / (2 * (2e-7 - x) ** 2), 0, 2e-7 / 3, xtol=1e-22
            )
            for side in (1, 2):
                assert built.error_rad[rows[f"{name}.drag{side}"]] == pytest.approx(0.02 * x * 1e9, abs=1e-9)


@pytest.mark.parametrize(("modes", "gain"), [(8, 2.5), pytest.param(32, 4.0, marks=pytest.mark.slow)])
def test_rounding_against_matrix_beats_plain(modes, gain, tmp_path):
    mesh = edited(
        tmp_path,
        lattice("rectangular", modes=modes, built=2),
        {"bits = 16": "bits = 8", "max_v = 10.0": "max_v = 4.2"},
        "",
    )
    ideal = np.random.default_rng(0)
    plain, aware = [], []
    for seed in ideal.integers(0, 1000, 12 if modes == 8 else 2):
        target = read_target(f"haar:{seed}", (modes, modes), "outputs")
        for flag, into in ((False, plain), (True, aware)):
            plan = solve(mesh, target, aware=flag)
            # what codes cost beyond the settings themselves
            into.append(plan.matrix_error**2 - plan.continuous["matrix_error"] ** 2)
    assert np.mean(plain) / np.mean(aware) >= gain


def test_gaps_hold_for_far_less_than_heaters():
    # an electrostatic gap draws no static current, a heater does: common practice says orders of magnitude
    heaters, gaps = lattice("switch"), lattice("switch", cell="gap")
    spent = []
    for mesh in (heaters, gaps):
        plan = meshctl.solve(mesh, "permutation:3,2,1,4", free="both")
        assert plan.fidelity > 1 - 1e-6
        spent.append(energy(Chip(mesh), plan.codes).held_nj(1.0))
    assert spent[1] < 1e-6 * spent[0]


def test_switch_energy_is_charge_times_volts():
    mesh = lattice("switch", cell="gap")
    chip = Chip(mesh)
    codes = np.full(4, 20000)
    v = float(chip.levels(codes)[0])
    x = brentq(lambda x: 2.0 * x - EPS0 * 20e-12 * v * v / (2 * (2e-7 - x) ** 2), 0, 2e-7 / 3, xtol=1e-22)
    capacitance = EPS0 * 20e-12 / (2e-7 - x)  # parallel plates
    assert energy(chip, codes).switch_nj == pytest.approx(4 * capacitance * v * v * 1e9, rel=1e-9)


def test_demo_switch_reaches_all_its_states():
    mesh = load(ROOT / "meshes" / "dunlin")
    chip, reach = Chip(mesh), reach_of(Chip(mesh))
    # bar is pi and cross is 3 pi / 2, both within the voltage limit of every coupler
    assert (reach.low <= math.pi).all()
    assert (reach.high >= 1.5 * math.pi).all()
    assert (chip.bounds.high_v < 8.0).all()
    maps, swaps = {}, [(0, 2), (0, 3), (1, 2), (1, 3)]  # the lanes where x11, x12, x21, x22 join row and column
    for states in itertools.product((0, 1), repeat=4):
        settings = np.where(states, 1.5 * math.pi, math.pi)
        power = np.abs(chip.response.matrix(settings)) ** 2
        lanes = [0, 1, 2, 3]
        for crossed, (a, b) in zip(states, swaps, strict=True):
            if crossed:
                lanes[a], lanes[b] = lanes[b], lanes[a]
        goes = [lanes.index(k) for k in range(4)]
        assert power.argmax(0).tolist() == goes
        maps[states] = tuple(goes)
    # two pairs of states send light alike, by counting products of the four swaps
    assert len(maps) == 16
    assert len(set(maps.values())) == 14


def test_written_drive_reads_back_equal(tmp_path):
    mesh = by_places(tmp_path, channel='drives = "milliamps"\nmax_ma = 15.0')
    write(mesh, tmp_path / "again")
    assert load(tmp_path / "again").hash == mesh.hash
