"""Light through loop-free nets, against plain dense products and closed forms."""

import dataclasses

import numpy as np
import pytest
from conftest import multiplied

from meshctl.errors import WrongSize
from meshctl.mesh.graph import AsBuilt, ListedNames, Net
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.response import Response, circuit_of
from meshctl.optics.elements import KINDS, kind_row

EXACT = 1e-13  # some hundred roundings of fields of order one
TWO_LANE = ("coupler", "crossing")


def built(rows, n_lanes, n_inputs, outputs, rng):
    """A net of (kind, lane, lane or None, value) in light order, its elements shuffled in memory."""
    shuffled = rng.permutation(len(rows))
    kinds = np.array([kind_row(rows[r][0]) for r in shuffled], np.uint8)
    start = np.r_[0, np.cumsum([len(KINDS[k].ports) for k in kinds])].astype(np.int32)
    place = {int(r): int(start[i]) for i, r in enumerate(shuffled)}
    mate = np.full(start[-1], -1, np.int32)
    leaving, entering = [None] * n_lanes, [None] * n_lanes
    for r, (kind, a, b, _) in enumerate(rows):
        for side, lane in enumerate([a, b] if kind in TWO_LANE else [a]):
            into, width = place[r] + side, 2 if kind in TWO_LANE else 1
            if leaving[lane] is None:
                entering[lane] = into
            else:
                mate[into], mate[leaving[lane]] = leaving[lane], into
            leaving[lane] = into + width
    values = np.array([rows[r][3] for r in shuffled])
    names = ListedNames([f"e{r}" for r in shuffled], [])
    ins, outs = tuple(f"in{k}" for k in range(n_inputs)), tuple(f"out{k}" for k in range(len(outputs)))
    ports = {f"in{k}": entering[k] for k in range(n_inputs)} | {f"out{k}": leaving[m] for k, m in enumerate(outputs)}
    n = len(rows)
    plain = np.full(n, -1, np.int32)
    net = Net(1550.0, kinds, values, np.zeros(n), plain, plain, np.empty((0, 2)), start, mate, ports, ins, outs,
              2.4, 4.2, 0.0, 0.0, names)  # fmt: skip
    return net, AsBuilt(np.zeros(n), np.zeros(n), np.empty(0), np.zeros(n))


def random_rows(rng, n_lanes, count):
    rows = [("phase", lane, None, rng.uniform(0, 6)) for lane in range(n_lanes)]  # every lane has an entrance
    for _ in range(count):
        kind = str(rng.choice(["coupler", "phase", "loss", "crossing"]))
        a, b = rng.choice(n_lanes, 2, replace=False)
        value = {"coupler": rng.uniform(0, 4), "phase": rng.uniform(-7, 7), "loss": rng.uniform(0, 2), "crossing": 0.0}
        rows.append((kind, int(a), int(b) if kind in TWO_LANE else None, value[kind]))
    return rows


@pytest.mark.parametrize("seed", range(12))
def test_kernel_agrees_with_dense_product(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(2, 9))
    rows = random_rows(rng, n, 60)
    outputs, n_inputs = rng.permutation(n)[: rng.integers(1, n + 1)], int(rng.integers(1, n + 1))
    net, as_built = built(rows, n, n_inputs, outputs, rng)
    matrix = Response(net, as_built).matrix(np.empty(0))
    # inputs that have no name are dark, outputs that have none are lost
    assert np.abs(matrix - multiplied(rows, n)[outputs, :n_inputs]).max() <= EXACT


def test_lossless_net_keeps_all_light():
    mesh = lattice("rectangular", modes=9)
    settings = np.random.default_rng(4).uniform(0, 7, mesh.net.n_settings)
    matrix = Response(mesh.net, mesh.as_built).matrix(settings)
    assert np.abs(matrix.conj().T @ matrix - np.eye(9)).max() <= EXACT


@pytest.mark.parametrize("count", [1, 5, 40])
def test_loss_compounds_from_part_to_part(count):
    # each coupler keeps 0.9 of the power, so that n of them keep 0.9^n
    rows = [("coupler", 0, 1, 0.3 + k) for k in range(count)]
    net, as_built = built(rows, 2, 2, [0, 1], np.random.default_rng(0))
    lossy = dataclasses.replace(as_built, loss_db=np.full(count, -10 * np.log10(0.9)))
    power = np.abs(Response(net, lossy).matrix(np.empty(0))) ** 2
    assert np.abs(power.sum(0) - 0.9**count).max() <= EXACT


def test_guide_loss_goes_by_its_length(chip):
    toml = (
        'format = 1\nname = "g"\nwavelength_nm = 1550.0\ninputs = ["in1"]\noutputs = ["out1"]\n'
        'elements = [["g", "guide", {length_um = 25000.0}]]\nlinks = ["in1 g.a", "g.b out1"]\n'
        "[guide]\nloss_db_per_cm = 2.0\n"
    )
    mesh = load(chip(toml))
    # 2.5 cm at 2 dB/cm are 5 dB
    assert abs(abs(Response(mesh.net, mesh.as_built).matrix(np.empty(0))[0, 0]) ** 2 - 10**-0.5) <= EXACT


def test_dark_lanes_bring_no_light():
    mesh = lattice("tree", modes=8)
    matrix = Response(mesh.net, mesh.as_built).matrix(np.full(mesh.net.n_settings, np.pi / 2))
    # seven couplings at inner = pi/2 halve the light each time: 1/8 everywhere (cos^2(pi/4) = 1/2)
    assert matrix.shape == (8, 1)
    assert np.abs(np.abs(matrix) ** 2 - 1 / 8).max() <= EXACT


def test_unnamed_outputs_lose_their_light():
    net, as_built = built([("coupler", 0, 1, 0.4)], 2, 2, [0], np.random.default_rng(0))
    power = np.abs(Response(net, as_built).matrix(np.empty(0))) ** 2
    assert np.abs(power - [[np.cos(0.4) ** 2, np.sin(0.4) ** 2]]).max() <= EXACT


def test_wavelength_scales_phase_of_cell():
    mesh = lattice("rectangular", modes=2)
    settings = np.zeros(mesh.net.n_settings)
    settings[mesh.net.setting_names.index("c1_1.inner")] = 2 * np.pi + 1.0  # a whole turn more counts off centre
    waves = np.array([1500.0, 1550.0, 1600.0])
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(settings, waves)) ** 2
    assert power.shape == (3, 2, 2)
    # Mach-Zehnder interferometer: cross power cos^2(phase / 2), phase as 1550 / wavelength
    assert np.abs(power[:, 1, 0] - np.cos((2 * np.pi + 1.0) * 1550 / waves / 2) ** 2).max() <= EXACT


def test_unbalanced_cell_repeats_every_spectral_range(chip):
    toml = (
        'format = 1\nname = "u"\nwavelength_nm = 1550.0\ninputs = ["i1", "i2"]\noutputs = ["o1", "o2"]\n'
        'elements = [["s", "coupler"], ["g", "guide", {length_um = 500.0}], ["t", "coupler"]]\n'
        'links = ["i1 s.a1", "i2 s.a2", "s.b1 g.a", "g.b t.a1", "s.b2 t.a2", "t.b1 o1", "t.b2 o2"]\n'
        "[guide]\nn_group = 4.0\n"
    )
    mesh = load(chip(toml))
    f0, span = 299.792458 / 1.55, 299.792458 / (4.0 * 500.0)  # THz; free spectral range c / (n_g L) (textbook)
    waves = 1e3 * 299.792458 / (f0 + span * np.array([0.0, 0.5, 1.0]))
    cross = np.abs(Response(mesh.net, mesh.as_built).matrix(np.empty(0), waves)[:, 1, 0]) ** 2
    assert np.abs(cross - [1.0, 0.0, 1.0]).max() <= 1e-12  # the guide holds 3000 rad, rounded to 1e-13 of itself


def test_coupler_slope_moves_the_splitting(chip):
    toml = (
        'format = 1\nname = "k"\nwavelength_nm = 1550.0\ninputs = ["i1"]\noutputs = ["o1", "o2"]\n'
        'elements = [["k", "coupler", {cross_power = 0.5}]]\nlinks = ["i1 k.a1", "k.b1 o1", "k.b2 o2"]\n'
        "[coupler]\nangle_slope_per_nm = 0.001\n"
    )
    mesh = load(chip(toml))
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(np.empty(0), np.array([1550.0, 1570.0]))) ** 2
    assert np.abs(power[:, 1, 0] - np.sin(np.pi / 4 * np.array([1.0, 1.02])) ** 2).max() <= EXACT


def test_centre_wavelength_gives_centre_matrix():
    mesh = lattice("triangular", modes=5, built=3)
    settings = np.random.default_rng(1).uniform(0, 7, mesh.net.n_settings)
    response = Response(mesh.net, mesh.as_built)
    assert np.array_equal(response.matrix(settings, np.array([1550.0]))[0], response.matrix(settings))


def test_field_vector_needs_no_matrix():
    mesh = lattice("rectangular", modes=6, built=2)
    rng = np.random.default_rng(5)
    settings = rng.uniform(0, 7, mesh.net.n_settings)
    vector = rng.standard_normal(6) + 1j * rng.standard_normal(6)
    response, waves = Response(mesh.net, mesh.as_built), np.array([1540.0, 1560.0])
    assert np.abs(response.fields(settings, vector) - response.matrix(settings) @ vector).max() <= EXACT
    assert np.abs(response.fields(settings, vector, waves) - response.matrix(settings, waves) @ vector).max() <= EXACT


def test_vector_of_wrong_length_is_refused():
    mesh = lattice("rectangular", modes=4)
    with pytest.raises(WrongSize, match="5 rows; the chip has 4"):
        Response(mesh.net, mesh.as_built).fields(np.zeros(mesh.net.n_settings), np.ones(5))


def test_stuck_setting_ignores_what_is_asked():
    mesh = lattice("rectangular", modes=2)
    stuck = np.full(mesh.net.n_settings, np.nan)
    stuck[mesh.net.setting_names.index("c1_1.inner")] = np.pi  # bar
    response = Response(mesh.net, dataclasses.replace(mesh.as_built, stuck_rad=stuck))
    assert np.abs(np.abs(response.matrix(np.zeros(mesh.net.n_settings))) - np.eye(2)).max() <= EXACT


def test_loop_has_no_light_order():
    net, _ = built([("coupler", 0, 1, 0.4)], 2, 2, [0, 1], np.random.default_rng(0))
    mate = np.array([-1, 3, -1, 1], np.int32)  # b2 back to a2
    ports = {"in0": 0, "out0": 2}
    ring = dataclasses.replace(net, mate=mate, externals=ports, inputs=("in0",), outputs=("out0",))
    assert circuit_of(ring) is None
