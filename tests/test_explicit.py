"""Nets given part by part, and parts put into a lattice: what joins what, and the light through it."""

import numpy as np
import pytest

from meshctl.errors import DuplicateName, MissingRow, OutOfRange, UnknownKey, UnsoundFile, UnsoundNet
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.response import Response

EXACT = 1e-14  # a few dozen roundings of fields of order one

ROWS_AND_COLUMNS = """\
format = 1
name = "switch"
wavelength_nm = 1550.0
inputs = ["in1", "in2", "add1", "add2"]
outputs = ["out1", "out2", "drop1", "drop2"]
elements = [["x11", "coupler"], ["x12", "coupler"], ["x21", "coupler"], ["x22", "coupler"]]
tunable = ["x11", "x12", "x21", "x22"]
links = ["in1 x11.a1", "x11.b1 x12.a1", "x12.b1 out1",
         "in2 x21.a1", "x21.b1 x22.a1", "x22.b1 out2",
         "add1 x11.a2", "x11.b2 x21.a2", "x21.b2 drop1",
         "add2 x12.a2", "x12.b2 x22.a2", "x22.b2 drop2"]
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
margin = 0.8
[channel]
bits = 14
max_v = 8.0
"""
TWO = (
    'format = 1\nname = "two"\nwavelength_nm = 1550.0\ninputs = ["i1"]\noutputs = ["o1"]\n'
    'elements = [["x", "coupler"], ["y", "phase"]]\nlinks = ["i1 x.a1", "x.b1 y.a", "y.b o1"]\n'
)


def tables_of_all():
    points = [(0.0, 3.051), (2.0, 3.347), (4.0, 4.1), (5.0, 4.9)]
    rows = [[name, *point, 0.001] for name in ("x11", "x12", "x21", "x22") for point in points]
    return {
        "actuators": [["actuator", "law"], *([name, "table"] for name in ("x11", "x12", "x21", "x22"))],
        "tables": [["actuator", "volts_v", "value_rad", "sigma_rad"], *rows],
    }


def test_switch_of_four_couplers_routes_light(chip):
    net = load(chip(ROWS_AND_COLUMNS)).net
    as_built = load(chip(ROWS_AND_COLUMNS, "again")).as_built
    k = np.array([0.3, 1.1, 2.0, 2.9])
    matrix = Response(net, as_built).matrix(k)
    c, s = np.cos(k), 1j * np.sin(k)
    # row and column of each light path multiplied by hand: cos for straight on, i sin for a turn
    assert abs(matrix[0, 0] - c[0] * c[1]) <= EXACT  # in1 straight through x11 and x12
    assert abs(matrix[2, 0] - s[0] * c[2]) <= EXACT  # in1 turned at x11, straight through x21
    assert abs(matrix[3, 0] - (c[0] * s[1] * c[3] + s[0] * s[2] * s[3])) <= EXACT  # both ways to drop2
    assert abs(matrix[1, 0] - (s[0] * s[2] * c[3] + c[0] * s[1] * s[3])) <= EXACT  # both ways to out2
    assert abs(matrix[2, 2] - c[0] * c[2]) <= EXACT  # add1 straight down to drop1
    assert np.abs(matrix.conj().T @ matrix - np.eye(4)).max() <= EXACT


def test_explicit_switch_equals_switch_lattice(chip):
    settings = np.array([0.3, 1.1, 2.0, 2.9])
    ours = load(chip(ROWS_AND_COLUMNS))
    theirs = lattice("switch", cell="gap")
    # the lattice's guides behind the switch turn by nothing at the centre wavelength
    difference = Response(ours.net, ours.as_built).matrix(settings) - Response(theirs.net, theirs.as_built).matrix(
        settings
    )
    assert np.abs(difference).max() <= EXACT


def test_tunable_couplers_are_their_own_cells(chip):
    net = load(chip(ROWS_AND_COLUMNS)).net
    assert net.names.cells == ["x11", "x12", "x21", "x22"]
    assert net.setting_names == ["x11", "x12", "x21", "x22"]
    assert net.setting_is_angle.all()


def test_measured_rows_replace_the_law(chip):
    from meshctl.plan.chip import Chip

    mesh = load(chip(ROWS_AND_COLUMNS, **tables_of_all()))
    made = Chip(mesh)
    # a table gives its own rows back: 0 V is code 0, 5 V is 5/8 of full scale
    assert np.abs(made.actual(np.zeros(4, np.int64)) - 3.051).max() <= 1e-12
    code = round(5.0 / 8.0 * (2**14 - 1))
    step = 8.0 / (2**14 - 1)
    assert np.abs(made.actual(np.full(4, code)) - 4.9).max() <= step * 1.5  # slope below 1.5 rad/V near its end


def test_one_setting_may_move_two_parts(chip):
    toml = ROWS_AND_COLUMNS.replace('["x11", "x12", "x21", "x22"]\nlinks', '["x11 x22", "x12 x21"]\nlinks')
    net = load(chip(toml)).net
    assert net.setting_of.tolist() == [0, 1, 1, 0]
    assert net.setting_names == ["x11", "x12"]


def test_ports_left_over_are_dark(chip):
    mesh = load(chip(TWO))
    # x.a2 and x.b2 have no name: half the light of i1 is lost there
    assert Response(mesh.net, mesh.as_built).matrix(np.empty(0)) == pytest.approx(np.array([[0.5**0.5]]), abs=EXACT)


def test_part_values_come_in_their_units(chip):
    toml = TWO.replace('["x", "coupler"]', '["x", "coupler", {cross_power = 0.25}]').replace(
        '["y", "phase"]', '["y", "phase", {phase_rad = 0.5}]'
    )
    mesh = load(chip(toml))
    wanted = 0.75**0.5 * np.exp(0.5j)
    assert abs(Response(mesh.net, mesh.as_built).matrix(np.empty(0))[0, 0] - wanted) <= EXACT


def test_crossing_swaps_and_loses_its_loss(chip):
    toml = (
        'format = 1\nname = "x"\nwavelength_nm = 1550.0\ninputs = ["i1", "i2"]\noutputs = ["o1", "o2"]\n'
        'elements = [["x", "crossing"]]\nlinks = ["i1 x.a1", "i2 x.a2", "x.b1 o1", "x.b2 o2"]\n'
        "[crossing]\nloss_db = 10.0\n"
    )
    mesh = load(chip(toml))
    assert np.abs(Response(mesh.net, mesh.as_built).matrix(np.empty(0)) - 0.1**0.5 * np.eye(2)[::-1]).max() <= EXACT


# ---- inserts
TAP = '[[insert]]\nname = "t1"\nkind = "tap"\nat = "{at}"\nmonitor = "m1"\ncross_power = 0.02\n'


@pytest.mark.parametrize("at", ["c1_1.b1", "c1_1.split2.b1", "c2_1.a1", "in2", "out3", "c2_1.split1.a2"])
def test_tap_takes_two_percent_everywhere(chip, lattice_toml, at):
    plain = load(chip(lattice_toml(modes=4), "plain"))
    mesh = load(chip(lattice_toml(modes=4, more=TAP.format(at=at))))
    assert mesh.net.monitors == ("m1",)
    settings = np.random.default_rng(2).uniform(0, 6, mesh.net.n_settings)
    before = Response(plain.net, plain.as_built).matrix(settings)
    after = Response(mesh.net, mesh.as_built).matrix(settings)
    # light from all inputs at once carries 4; what passed the tap's lane carries one lane's share of it
    lost = (np.abs(before) ** 2).sum() - (np.abs(after) ** 2).sum()
    assert abs(lost - 0.02) <= EXACT * 10


def test_tap_stands_on_named_lane(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=2, more=TAP.format(at="c1_1.b1"))))
    bar = np.zeros(mesh.net.n_settings)
    bar[mesh.net.setting_names.index("c1_1.inner")] = np.pi
    power = np.abs(Response(mesh.net, mesh.as_built).matrix(bar)) ** 2
    # bar: input 1 leaves by b1 and pays the tap, input 2 does not
    assert np.abs(power - np.diag([0.98, 1.0])).max() <= EXACT


def test_tap_leads_light_to_monitor(chip, lattice_toml):
    mesh = load(chip(lattice_toml(modes=2, more=TAP.format(at="in1"))))
    net = mesh.net
    row = net.names.element_row["t1"]
    assert net.port_name(net.externals["in1"]) == "t1.a1"
    assert net.port_name(net.externals["m1"]) == "t1.b2"
    assert net.port_name(int(net.mate[net.port_start[row] + 2])) == "c1_1.outer.a"
    assert abs(np.sin(net.nominal[row]) ** 2 - 0.02) <= EXACT


@pytest.mark.parametrize(
    ("kind", "value", "factor"),
    [
        ("loss", "loss_db = 10.0", 0.1**0.5),
        ("phase", "phase_rad = 0.7", np.exp(0.7j)),
        ("guide", "length_um = 90.0", 1),
    ],
)
def test_inserted_parts_act_on_their_port(chip, lattice_toml, kind, value, factor):
    more = f'[[insert]]\nname = "p"\nkind = "{kind}"\nat = "out2"\n{value}\n'
    plain, mesh = load(chip(lattice_toml(modes=3), "plain")), load(chip(lattice_toml(modes=3, more=more)))
    settings = np.random.default_rng(3).uniform(0, 6, mesh.net.n_settings)
    wanted = np.diag([1, factor, 1]) @ Response(plain.net, plain.as_built).matrix(settings)
    assert np.abs(Response(mesh.net, mesh.as_built).matrix(settings) - wanted).max() <= EXACT


def test_two_inserts_follow_one_another(chip, lattice_toml):
    loss = '[[insert]]\nname = "l{0}"\nkind = "loss"\nat = "{1}"\nloss_db = 5.0\n'
    mesh = load(chip(lattice_toml(modes=2, more=loss.format(1, "in1") + loss.format(2, "l1.b"))))
    kept = (np.abs(Response(mesh.net, mesh.as_built).matrix(np.zeros(mesh.net.n_settings))) ** 2).sum(0)
    assert np.abs(kept - [0.1, 1.0]).max() <= EXACT


# ---- what cannot be built
@pytest.mark.parametrize(
    ("old", "new", "finding", "says"),
    [
        ('"x.b1 y.a"', '"x.b1 y.a", "x.b2 y.a"', UnsoundNet, "'x.b2 y.a' uses a port that 'x.b1 y.a' uses already"),
        ('"x.b1 y.a"', '"x.b1 y.c"', UnknownKey, "port of phase 'y' 'c' is not known"),
        ('"x.b1 y.a"', '"x.b1 z.a"', UnknownKey, "element 'z' is not known"),
        ('"x.b1 y.a"', '"x.b1"', UnsoundFile, "the value is 'x.b1'; write two ends"),
        ('"i1 x.a1"', '"i2 x.a1"', UnknownKey, "port 'i2' is not known"),
        ('"i1 x.a1", ', "", MissingRow, "port 'i1' is linked to nothing"),
        ('["y", "phase"]', '["x", "phase"]', DuplicateName, "element 'x' stands twice"),
        ('["y", "phase"]', '["y", "fase"]', UnknownKey, "kind 'fase' is not known; did you mean 'phase'"),
        ('["y", "phase"]', '["y", "guide"]', MissingRow, "a guide needs length_um"),
        ('["y", "phase"]', '["y", "loss", {loss_db = -1.0}]', OutOfRange, "loss_db is -1"),
        ('["x", "coupler"]', '["x", "coupler", {cross_power = 1.5}]', OutOfRange, "cross_power is 1.5"),
        ('["x", "coupler"]', '["x", "coupler", {cross_power = 0.5, angle_rad = 1.0}]', DuplicateName, "same twice"),
        ('outputs = ["o1"]', 'outputs = ["o1"]\ntunable = ["q"]', UnknownKey, "element 'q' is not known"),
        ('outputs = ["o1"]', 'outputs = ["o1"]\ntunable = ["x y"]', UnsoundFile, "couplers only, or phases only"),
        ('outputs = ["o1"]', 'outputs = ["o1"]\ntunable = ["x", "x"]', DuplicateName, "'x' is tunable twice"),
        ('outputs = ["o1"]', 'outputs = ["o1", "o1"]', DuplicateName, "port 'o1' is named twice"),
        ('"y.b o1"', '"y.b o1", "x.b2 o1"', DuplicateName, "port 'o1' is linked twice"),
    ],
)
def test_nets_that_cannot_be_are_refused(chip, old, new, finding, says):
    assert TWO.count(old) == 1
    with pytest.raises(finding) as caught:
        load(chip(TWO.replace(old, new)))
    assert says in str(caught.value)
    assert "mesh.toml key" in str(caught.value)


@pytest.mark.parametrize(
    ("insert", "says"),
    [
        (TAP.format(at="c9_1.b1"), "place 'c9_1.b1' is not known"),
        (TAP.format(at="c1_1.b7"), "port of the cell 'b7' is not known"),
        (TAP.format(at="in1").replace('monitor = "m1"\n', ""), "a tap needs 'monitor'"),
        (TAP.format(at="in1").replace("m1", "in2"), "port 'in2' exists already"),
        (TAP.format(at="in1").replace("t1", "c1_1.outer"), "the name 'c1_1.outer' is taken"),
        (TAP.format(at="in1").replace("cross_power = 0.02", ""), "a tap needs cross_power or angle_rad"),
        (TAP.format(at="in1").replace("tap", "loss"), "a loss has no monitor"),
    ],
)
def test_inserts_that_fit_nowhere_are_refused(chip, lattice_toml, insert, says):
    with pytest.raises(UnsoundFile) as caught:
        load(chip(lattice_toml(modes=2, more=insert)))
    assert says in str(caught.value)
    assert "insert" in str(caught.value)
