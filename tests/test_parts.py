"""Parts that reflect, cross or end a waveguide: closed forms, wrong values, and their places in a net."""

import json

import numpy as np
import pytest
from dense_light import dense_matrix

from meshctl.mesh.meshfile import lattice, load, write
from meshctl.mesh.response import Response

C_NM_THZ = 299_792.458  # speed of light, SI
HEAD = 'format = 1\nname = "parts"\nwavelength_nm = 1550.0\n'
GUIDE = "[guide]\nn_eff = 2.44\nn_group = 4.2\nloss_db_per_cm = {loss}\n"
EXACT = 1e-12  # a few hundred roundings of fields of order one


def explicit(elements, links, inputs=("i1",), outputs=("o1",), loss=0.0, more=""):
    listed = ", ".join(elements)
    return (
        f"{HEAD}inputs = {list(inputs)}\noutputs = {list(outputs)}\nelements = [{listed}]\n"
        f"links = {list(links)}\n{GUIDE.format(loss=loss)}{more}"
    ).replace("'", '"')


def light(folder, waves=None):
    mesh = load(folder)
    return Response(mesh.net, mesh.as_built).matrix(np.zeros(mesh.net.n_settings), waves)


def round_trip(length_um, waves, loss_db_per_cm=0.0):
    """Field factor of a guide: n(l) = 2.44 - 1.76 (l - l0) / l0, phase relative to that at l0 = 1550 nm."""
    index = 2.44 - (4.2 - 2.44) * (waves - 1550) / 1550
    phase = 2e3 * np.pi * length_um * (index / waves - 2.44 / 1550)
    return np.exp(1j * phase) * 10 ** (-loss_db_per_cm * length_um * 1e-4 / 20)


# ---- closed forms, over wavelength
WAVES = np.linspace(1545, 1555, 41)


def test_mach_zehnder_follows_its_closed_form(chip):
    toml = explicit(
        ['["k1", "coupler"]', '["g1", "guide", {length_um = 100.0}]', '["g2", "guide", {length_um = 160.0}]',
         '["k2", "coupler"]', '["m", "mirror", {reflected_power = 1e-30}]'],
        ["i1 m.a", "m.b k1.a1", "i2 k1.a2", "k1.b1 g1.a", "k1.b2 g2.a", "g1.b k2.a1", "g2.b k2.a2", "k2.b1 o1",
         "k2.b2 o2"],
        ("i1", "i2"), ("o1", "o2"),
    )  # fmt: skip
    power = np.abs(light(chip(toml), WAVES)) ** 2
    half = np.angle(round_trip(100, WAVES) / round_trip(160, WAVES)) / 2
    # textbook: bar power sin^2 (dphi / 2), cross power cos^2 (dphi / 2); the mirror sends it round by scattering
    assert np.abs(power[:, 0, 0] - np.sin(half) ** 2).max() < EXACT
    assert np.abs(power[:, 1, 0] - np.cos(half) ** 2).max() < EXACT


def test_all_pass_ring_follows_its_closed_form(chip):
    toml = explicit(
        ['["k", "coupler", {angle_rad = 0.4}]', '["g", "guide", {length_um = 900.0}]'],
        ["i1 k.a1", "k.b1 o1", "k.b2 g.a", "g.b k.a2"],
        loss=3.0,
    )
    t, a = np.cos(0.4), round_trip(900, WAVES, 3.0)
    # all-pass ring (Yariv 2000, from memory): (t - a) / (1 - t a), a the round trip
    assert np.abs(light(chip(toml), WAVES)[:, 0, 0] - (t - a) / (1 - t * a)).max() < EXACT


def test_add_drop_ring_follows_its_closed_form(chip):
    toml = explicit(
        ['["k1", "coupler", {angle_rad = 0.4}]', '["k2", "coupler", {angle_rad = 0.6}]',
         '["g1", "guide", {length_um = 400.0}]', '["g2", "guide", {length_um = 400.0}]'],
        ["i1 k1.a1", "k1.b1 o1", "k1.b2 g1.a", "g1.b k2.a2", "k2.b2 g2.a", "g2.b k1.a2", "i2 k2.a1", "k2.b1 o2"],
        ("i1", "i2"), ("o1", "o2"), loss=2.0,
    )  # fmt: skip
    half = round_trip(400, WAVES, 2.0)
    t1, t2, x1, x2 = np.cos(0.4), np.cos(0.6), 1j * np.sin(0.4), 1j * np.sin(0.6)
    found = light(chip(toml), WAVES)
    # add-drop ring (Yariv 2000, from memory), phases of our couplers
    assert np.abs(found[:, 0, 0] - (t1 - t2 * half**2) / (1 - t1 * t2 * half**2)).max() < EXACT
    assert np.abs(found[:, 1, 0] - x1 * x2 * half / (1 - t1 * t2 * half**2)).max() < EXACT


def test_two_coupled_rings_follow_their_closed_form(chip):
    toml = explicit(
        ['["k1", "coupler", {angle_rad = 0.5}]', '["k2", "coupler", {angle_rad = 0.2}]',
         '["g1", "guide", {length_um = 300.0}]', '["g2", "guide", {length_um = 300.0}]',
         '["g3", "guide", {length_um = 600.0}]'],
        ["i1 k1.a1", "k1.b1 o1", "k1.b2 g1.a", "g1.b k2.a1", "k2.b1 g2.a", "g2.b k1.a2", "k2.b2 g3.a", "g3.b k2.a2"],
        loss=2.0,
    )  # fmt: skip
    a = round_trip(600, WAVES, 2.0)
    t1, t2 = np.cos(0.5), np.cos(0.2)
    inner = a * (t2 - a) / (1 - t2 * a)  # the second ring is an all-pass in the round trip of the first
    assert np.abs(light(chip(toml), WAVES)[:, 0, 0] - (t1 - inner) / (1 - t1 * inner)).max() < EXACT


def test_sagnac_loop_reflects_by_its_coupler(chip):
    toml = explicit(
        ['["k", "coupler", {angle_rad = 0.3}]', '["g", "guide", {length_um = 200.0}]'],
        ["p1 k.a1", "p2 k.a2", "k.b1 g.a", "k.b2 g.b"],
    ).replace('inputs = ["i1"]\noutputs = ["o1"]\n', "")
    found = light(chip(toml), WAVES)
    # a loop mirror (Mortimore 1988, from memory): reflects sin^2 2k, transmits cos^2 2k
    assert np.abs(np.abs(found[:, 0, 0]) ** 2 - np.sin(0.6) ** 2).max() < EXACT
    assert np.abs(np.abs(found[:, 1, 0]) ** 2 - np.cos(0.6) ** 2).max() < EXACT
    assert np.abs(found[:, 0, 0] - 1j * np.sin(0.6) * round_trip(200, WAVES)).max() < EXACT


@pytest.mark.parametrize("kind", ["isolation", "mirror"])
def test_two_gaps_make_an_airy_cavity(chip, kind):
    part = f'["{{}}", "{kind}", {{{{reflected_power = 0.3}}}}]'
    toml = explicit(
        [part.format("g1"), part.format("g2"), '["w", "guide", {length_um = 350.0}]'],
        ["i1 g1.a", "g1.b w.a", "w.b g2.a", "g2.b o1"],
    )
    found = light(chip(toml), WAVES)[:, 0, 0]
    r, t, half = 1j * np.sqrt(0.3), np.sqrt(0.7), round_trip(350, WAVES)
    assert np.abs(found - t**2 * half / (1 - r**2 * half**2)).max() < EXACT
    # Airy: 1 / (1 + F sin^2 (phi / 2)), F = 4 R / (1 - R)^2, phi the round trip with both reflections at +90 degrees
    phi = 2 * np.angle(half) + np.pi
    airy = 1 / (1 + 4 * 0.3 / 0.7**2 * np.sin(phi / 2) ** 2)
    assert np.abs(np.abs(found) ** 2 - airy).max() < EXACT


def test_mirror_returns_with_its_phase(chip):
    toml = explicit(
        ['["m", "mirror", {loss_db = 6.0, reflected_power = 0.2, reflection_rad = 1.0}]'], ["p1 m.a", "p2 m.b"]
    )
    found = light(chip(toml.replace('inputs = ["i1"]\noutputs = ["o1"]\n', "")))
    r, t = np.sqrt(0.2) * np.exp(1j), 10 ** (-6 / 20)
    assert np.abs(found - np.array([[r, t], [t, r]])).max() < 1e-15


def test_terminator_returns_light_through_the_loop(chip):
    toml = explicit(
        ['["k", "coupler"]', '["e", "terminator", {reflection_db = 20.0, reflection_rad = 0.3}]'],
        ["p1 k.a1", "p2 k.a2", "k.b1 e.a"],
    ).replace('inputs = ["i1"]\noutputs = ["o1"]\n', "")
    found = light(chip(toml))
    r = 0.1 * np.exp(0.3j)
    # by hand: out and back through a 50:50 coupler, its other port dark
    assert np.abs(found - np.array([[0.5 * r, 0.5j * r], [0.5j * r, -0.5 * r]])).max() < 1e-15


def test_crossing_swaps_and_loses(chip):
    toml = explicit(
        ['["x", "crossing"]', '["t", "tether", {loss_db = 0.5}]'],
        ["i1 x.a1", "i2 x.a2", "x.b1 o1", "x.b2 t.a", "t.b o2"],
        ("i1", "i2"),
        ("o1", "o2"),
        more="[crossing]\nloss_db = 0.2\n",
    )
    found = light(chip(toml))
    expected = [[0, 10 ** (-0.2 / 20)], [10 ** (-0.7 / 20), 0]]
    assert np.abs(found - expected).max() < 1e-15


# ---- inserts
def gap_lattice(insert):
    return (
        f'{HEAD}[lattice]\nshape = "hexagonal"\nrings = 1\ncell = "gap"\n[actuator.coupler]\nlaw = "gap"\n'
        "gap_nm = 200.0\nstiffness_n_per_m = 2.0\narea_um2 = 20.0\ndecay_nm = 50.0\nrest_rad = 3.05\n"
        f'[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n{insert}'
    )


def test_insert_stands_where_it_says(chip):
    plain = load(chip(gap_lattice(""), name="plain"))
    names = list(plain.net.externals)
    mirror = '[[insert]]\nname = "m"\nkind = "mirror"\nat = "p4"\nreflected_power = 1.0\n'
    closed = load(chip(gap_lattice(mirror), name="closed"))
    settings = np.random.default_rng(0).uniform(0, 6, 12)
    found = Response(closed.net, closed.as_built).matrix(settings)
    p = names.index("p4")
    # a full mirror at an end: what enters there returns at once, the other ends see none of it
    assert found[p, p] == pytest.approx(1j, abs=1e-14)
    assert np.abs(np.delete(found[p], p)).max() < 1e-14
    assert np.abs(found - dense_matrix(closed, settings)).max() < EXACT


def test_terminator_takes_its_end_away(chip):
    end = '[[insert]]\nname = "e"\nkind = "terminator"\nat = "p4"\n'
    mesh, plain = load(chip(gap_lattice(end), name="cut")), load(chip(gap_lattice(""), name="plain"))
    assert "p4" not in mesh.net.inputs
    assert len(mesh.net.outputs) == 11
    settings = np.random.default_rng(0).uniform(0, 6, 12)
    kept = [k for k in range(12) if k != list(plain.net.externals).index("p4")]
    whole = Response(plain.net, plain.as_built).matrix(settings)
    # a terminator that returns nothing is a dark port
    assert np.abs(Response(mesh.net, mesh.as_built).matrix(settings) - whole[np.ix_(kept, kept)]).max() < 1e-14


def test_crossing_may_join_two_links(chip):
    two = '[[insert]]\nname = "x"\nkind = "crossing"\nat = "c1.b1 c4.b1"\n'
    crossed, plain = load(chip(gap_lattice(two), name="x")), load(chip(gap_lattice(""), name="plain"))
    settings = np.random.default_rng(0).uniform(0, 6, 12)
    # both arms pass straight on, so nothing changes but the count
    same = Response(crossed.net, crossed.as_built).matrix(settings) - Response(plain.net, plain.as_built).matrix(
        settings
    )
    assert np.abs(same).max() < 1e-14
    assert crossed.hash != plain.hash


def test_reflecting_part_ends_the_light_order(chip):
    insert = '[[insert]]\nname = "t1"\nkind = "tether"\nat = "c1_1.b1"\nloss_db = 0.02\nreflection_db = 40.0\n'
    toml = (
        f'{HEAD}[lattice]\nshape = "rectangular"\nmodes = 4\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\n'
        f"r_ohm = 600.0\n"
    )
    plain, mesh = load(chip(toml, name="plain")), load(chip(toml + insert, name="tether"))
    settings = np.random.default_rng(0).uniform(0, 6, mesh.net.n_settings)
    used = Response(mesh.net, mesh.as_built)
    assert used.loops
    change = used.matrix(settings) - Response(plain.net, plain.as_built).matrix(settings)
    # 0.02 dB is 0.0023 of the field; nothing returns twice
    assert 1e-4 < np.abs(change).max() < 0.0024
    assert np.abs(used.matrix(settings) - dense_matrix(mesh, settings)).max() < EXACT


def test_elements_of_reflecting_net_end_in_four(run, chip, tmp_path):
    plain = chip(f'{HEAD}[lattice]\nshape = "rectangular"\nmodes = 4\n[actuator.phase]\nlaw = "heater"\n'
                 "p2pi_mw = 24.0\nr_ohm = 600.0\n", name="plain")  # fmt: skip
    tether = chip((plain / "mesh.toml").read_text() + '[[insert]]\nname = "t1"\nkind = "tether"\nat = "c1_1.b1"\n'
                  "loss_db = 0.02\nreflection_db = 40.0\n", name="tether")  # fmt: skip
    assert run("solve", plain, "dft", "-o", tmp_path / "p.json")[0] == 0
    code, said, remarks = run("elements", tether, tmp_path / "p.json", "-o", tmp_path / "e.csv", "--stale-ok")
    assert (code, said) == (4, "")
    assert "part that reflects" in remarks
    assert "predict --matrix" in remarks
    assert not (tmp_path / "e.csv").exists()


def test_reflections_count_in_the_hash(chip):
    insert = '[[insert]]\nname = "t1"\nkind = "tether"\nat = "c1.b1"\nloss_db = 0.02\nreflection_db = {}\n'
    a, b = (load(chip(gap_lattice(insert.format(db)), name=f"m{db:.0f}")) for db in (40.0, 41.0))
    assert a.hash != b.hash
    written = load(write(a, a.folder.parent / "again"))
    assert written.hash == a.hash
    assert written.net.reflections == a.net.reflections


# ---- wrong values
@pytest.mark.parametrize(
    ("part", "said"),
    [
        ('"tether", {}', "a tether needs loss_db or transmitted_power, or a reflection"),
        (
            '"isolation", {transmitted_power = 0.8, reflected_power = 0.3}',
            "the isolation makes light: it passes 0.8 and",
        ),
        (
            '"isolation", {transmitted_power = 0.5, reflected_power = 0.4, reflection_rad = 0.0}',
            "passes 0.5 and returns 0.4 of the power, 0 rad apart",
        ),
        ('"mirror", {loss_db = 1.0}', "a mirror needs reflection_db or reflected_power"),
        ('"mirror", {reflected_power = 1.5}', "reflected_power is 1.5; allowed is 0 to 1"),
        (
            '"mirror", {reflected_power = 0.5, reflection_db = 3.0}',
            "reflection_db and reflected_power say the same twice",
        ),
        ('"tether", {loss_db = 0.1, reflection_rad = 1.0}', "reflection_rad stands alone"),
        ('"tether", {loss_db = 0.1, angle_rad = 1.0}', "key 'angle_rad' is not known"),
        ('"tether", {loss_db = nan}', "loss_db is nan"),
        ('"mirrow", {}', "kind 'mirrow' is not known; did you mean 'mirror'?"),
    ],
)
def test_unsound_parts_are_refused(run, chip, part, said):
    folder = chip(explicit([f'["t", {part}]'], ["i1 t.a", "t.b o1"]))
    code, _, remarks = run("check", folder)
    assert code == 3
    assert "mesh.toml key 'elements.1'" in remarks
    assert said in remarks


@pytest.mark.parametrize(
    ("insert", "said"),
    [
        ('kind = "terminator"\nat = "c1.b2"\n', "port 'c1.b2' is linked; a terminator closes a free port"),
        ('kind = "mirror"\nat = "c1.b1 c2.b1"\nreflected_power = 0.5\n', "a mirror stands in one link"),
        ('kind = "crossing"\nat = "c1.b1 c1.b1"\n', "at names 'c1.b1' twice"),
        ('kind = "crossing"\nat = "c1.b7"\n', "port of the cell 'b7' is not known"),
        ('kind = "tether"\nat = "c99.b1"\nloss_db = 0.1\n', "place 'c99.b1' is not known"),
        ('kind = "tether"\nat = "c1.b1"\nreflection_db = -3.0\n', "-3 is out of range; allowed is 0 to 1000 dB"),
        ('kind = "mirror"\nat = "c1.b1"\nmonitor = "m"\nreflected_power = 0.5\n', "a mirror has no monitor"),
    ],
)
def test_unsound_inserts_are_refused(run, chip, insert, said):
    code, _, remarks = run("check", chip(gap_lattice(f'[[insert]]\nname = "t"\n{insert}')))
    assert code == 3
    assert "mesh.toml key 'insert.1" in remarks
    assert said in remarks


def test_phase_error_of_tether_is_refused(run, chip):
    folder = chip(
        explicit(['["t", "tether", {loss_db = 0.1}]'], ["i1 t.a", "t.b o1"]),
        elements=[["element", "error_rad"], ["t", 0.1]],
    )
    code, _, remarks = run("check", folder)
    assert code == 3
    assert "elements.csv line 2: error_rad is 0.1 for 't', a tether, which has no angle or phase" in remarks


@pytest.mark.parametrize(
    ("links", "said"),
    [
        (["i1 t.a", "t.a k.a1", "t.b o1"], "'t.a k.a1' uses a port that 'i1 t.a' uses already"),
        (["i1 t.a", "t.b", "k.b1 o1"], "the value is 't.b'; write two ends"),
        (["i1 t.a", "t.b q.a1", "k.b1 o1"], "element 'q' is not known"),
    ],
)
def test_wrong_links_are_refused(run, chip, links, said):
    folder = chip(explicit(['["t", "tether", {loss_db = 0.1}]', '["k", "coupler"]'], links))
    code, _, remarks = run("check", folder)
    assert code == 3
    assert "mesh.toml key 'links." in remarks
    assert said in remarks


def test_lattice_of_reflecting_parts_is_counted(run, chip):
    insert = '[[insert]]\nname = "t1"\nkind = "tether"\nat = "c1.b1"\nloss_db = 0.02\n'
    code, said, remarks = run("check", chip(gap_lattice(insert)), "--json")
    found = json.loads(said)
    assert (code, remarks) == (0, "")
    assert found["elements"] == {"coupler": 6, "phase": 12, "guide": 12, "tether": 1}
    assert found["loops"] is True
    assert lattice("hexagonal", rings=1, cell="gap").net.n_elements == 30
