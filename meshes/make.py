"""Makes the demo meshes of this folder, all data invented: a bridge-monitoring station that switches and
weights light between fibre strain sensors and two readout units. Chips are named after wading birds.

Run `python meshes/make.py [FOLDER]`: with the same seed the same files come out.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from meshctl.laws.gap import GAP_LAW
from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.tables import table_text
from meshctl.plan.states import save_state
from meshctl.plan.switching import RouteTarget, route

SEED = 20
NOTE = "invented data: no such chip exists"

PLOVER8 = f"""\
# Eight lanes between strain sensors and the readout units; thermo-optic, one heater per phase.
format = 1
name = "plover8"
note = "{NOTE}"
wavelength_nm = 1550.0

[lattice]
shape = "rectangular"
modes = 8
cell = "mzi"
pitch_um = [400.0, 127.0]       # between columns, between lanes
balanced = true                 # a dummy loss wherever a lane skips a column

[guide]
n_eff = 2.44
n_group = 4.2
loss_db_per_cm = 1.5

[coupler]
loss_db = 0.05

[actuator.phase]
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0

[channel]
bits = 16
min_v = 0.0
max_v = 10.0
limit_v = 9.0
limit_ma = 20.0
ground = "G1"

[ground.G1]
resistance_ohm = 0.2

[rest]
state = "cross"

[budget]
loss_db = 2.0                   # what the readout units can spare between any two ports

[spread]                        # from die to die, each die's offsets and heaters being calibrated
split_rad = 0.02
phase_rad = 0.005
loss_db = 0.01
"""

KNOT16 = f"""\
# Sixteen lanes with two spare columns; measured, imperfect, and with one heater burnt out.
format = 1
name = "knot16"
note = "{NOTE}"
wavelength_nm = 1550.0

[lattice]
shape = "rectangular"
modes = 16
cell = "mzi"
spare = 2
pitch_um = [400.0, 127.0]
balanced = true

[guide]
n_eff = 2.44
n_group = 4.2
loss_db_per_cm = 1.5

[coupler]
loss_db = 0.04

[actuator.phase]
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0

[channel]
bits = 16
min_v = 0.0
max_v = 10.0
limit_v = 9.0
limit_ma = 20.0
ground = "G1"

[ground.G1]
resistance_ohm = 0.05

[rest]
state = "cross"

[spread]                        # from die to die, each die's offsets and heaters being calibrated
split_rad = 0.02
phase_rad = 0.005
loss_db = 0.01
"""

CURLEW = f"""\
# Thirty gap couplers on the edges of seven hexagons: rings, delay lines and filters between the sensors.
format = 1
name = "curlew"
note = "{NOTE}"
wavelength_nm = 1550.0

[lattice]
shape = "hexagonal"
rings = 2
cell = "gap"
side_um = 250.0

[guide]
n_eff = 2.44
n_group = 4.2
loss_db_per_cm = 1.0

[coupler]
loss_db = 0.02

[actuator.coupler]              # measured one by one: bar at pi and cross at 3 pi / 2 lie in range
law = "table"

[actuator.phase]                # one heater for both arms of a cell
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0

[channel]
bits = 16
min_v = 0.0
max_v = 10.0

[rest]
state = "unknown"

[budget]
loss_db = 1.5                   # what a filter can spare between any two ports

[spread]
split_rad = 0.02
phase_rad = 1.8
loss_db = 0.005
p2pi_share = 0.02
r_share = 0.02

[[insert]]                      # holds the suspended guide between two cells
name = "t1"
kind = "tether"
at = "c7.b1"
loss_db = 0.02
reflection_db = 40.0
"""


def _gap_tables(names: list[str], rng: np.random.Generator) -> str:
    """tables.csv: angle of every gap coupler over volts, as an electrostatic gap that closes would answer."""
    rows = []
    travel = np.linspace(0.0, 0.13, 14)  # of the gap; a third of it is pull-in
    for name in names:
        pull_in_v, decay, rest = 9.5 * np.exp(0.02 * rng.normal()), 0.25 * np.exp(0.01 * rng.normal()), 3.05
        rest += 0.01 * rng.normal()
        volts = pull_in_v * np.sqrt(27 / 4 * travel * (1 - travel) ** 2)
        value = rest * np.exp(travel / decay)
        rows += [(name, round(v, 3), round(k, 4), 0.001) for v, k in zip(volts.tolist(), value.tolist(), strict=True)]
    return table_text(("actuator", "volts_v", "value_rad", "sigma_rad"), rows)


def _common_heaters(names: list[str], rng: np.random.Generator) -> str:
    """actuators.csv: measured offset, power for 2 pi and resistance of the heater of every cell."""
    rows = []
    for name in names:
        offset, p2pi, r = rng.uniform(0, 2 * np.pi), 24 * np.exp(0.02 * rng.normal()), 600 * np.exp(0.02 * rng.normal())
        rows.append((name, "heater", round(offset, 4), round(p2pi, 3), round(r, 1)))
    return table_text(("actuator", "law", "offset_rad", "p2pi_mw", "r_ohm"), rows)


DUNLIN = f"""\
# Add-drop switch: rows in1 -> out1 and in2 -> out2 meet columns add1 -> drop1 and add2 -> drop2, with an
# electrostatic gap coupler where each row meets each column. Straight on is bar, so a row and a column cross
# in a waveguide crossing behind every coupler; the crossings are in the loss budget.
# Independent potentials on one ground. Closing a gap raises its angle: bar is reached at pi, cross at 3 pi/2.
format = 1
name = "dunlin"
note = "{NOTE}"
wavelength_nm = 1550.0
inputs = ["in1", "in2", "add1", "add2"]
outputs = ["out1", "out2", "drop1", "drop2"]
elements = [
    ["x11", "coupler"], ["x12", "coupler"], ["x21", "coupler"], ["x22", "coupler"],
    ["w11", "crossing"], ["w12", "crossing"], ["w21", "crossing"], ["w22", "crossing"],
]
tunable = ["x11", "x12", "x21", "x22"]
links = [
    "in1 x11.a1", "x11.b1 w11.a1", "w11.b2 x12.a1", "x12.b1 w12.a1", "w12.b2 out1",
    "in2 x21.a1", "x21.b1 w21.a1", "w21.b2 x22.a1", "x22.b1 w22.a1", "w22.b2 out2",
    "add1 x11.a2", "x11.b2 w11.a2", "w11.b1 x21.a2", "x21.b2 w21.a2", "w21.b1 drop1",
    "add2 x12.a2", "x12.b2 w12.a2", "w12.b1 x22.a2", "x22.b2 w22.a2", "w22.b1 drop2",
]

[coupler]
loss_db = 0.1
angle_slope_per_nm = 0.002

[crossing]
loss_db = 0.03

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
min_v = 0.0
max_v = 8.0

[rest]
state = "bar"

[budget]
loss_db = 0.6
"""


# states of dunlin by row and column; the other lanes go straight on
DUNLIN_STATES = {
    "through": "in1:out1 in2:out2 add1:drop1 add2:drop2",
    "in1>drop1": "in1:drop1 in2:out2 add1:out1 add2:drop2",
    "in1>drop2": "in1:drop2 in2:out2 add1:drop1 add2:out1",
    "in2>drop1": "in1:out1 in2:drop1 add1:out2 add2:drop2",
    "in2>drop2": "in1:out1 in2:drop2 add1:drop1 add2:out2",
    "in1>drop1_in2>drop2": "in1:drop1 in2:drop2 add1:out1 add2:out2",
    "in1>drop2_in2>drop1": "in1:drop2 in2:drop1 add1:out2 add2:out1",
}


def _heaters(folder: Path, rng: np.random.Generator, dead: str = "") -> str:
    """actuators.csv: measured offset, power for 2 pi and resistance of every heater."""
    mesh = load(folder)
    rows = []
    for k, name in enumerate(mesh.net.setting_names, 1):
        offset, p2pi, r = rng.uniform(0, 2 * np.pi), 24 * np.exp(0.02 * rng.normal()), 600 * np.exp(0.02 * rng.normal())
        rows.append((name, name, f"k{k}", "heater", int(name == dead), round(offset, 4), round(p2pi, 3), round(r, 1)))
    head = ("actuator", "element", "channel", "law", "dead", "offset_rad", "p2pi_mw", "r_ohm")
    return table_text(head, rows)


def _couplers(folder: Path, rng: np.random.Generator, sigma_rad: float) -> str:
    """elements.csv: splitting errors as measured, with their uncertainty, and losses."""
    mesh = load(folder)
    rows = [
        (name, round(0.02 * rng.normal(), 5), round(0.04 * float(np.exp(0.2 * rng.normal())), 4), None, sigma_rad)
        for name in mesh.net.names.elements
        if ".split" in name
    ]
    return table_text(("element", "error_rad", "loss_db", "stuck_rad", "sigma_rad"), rows)


def _gaps(rng: np.random.Generator) -> tuple[str, str]:
    """actuators.csv of four gaps, and tables.csv: angles as measured at a dozen voltages, 1 mrad of noise."""
    names = ("x11", "x12", "x21", "x22")
    actuators, points = [], []
    volts = np.arange(0.0, 4.01, 0.4)
    for k, name in enumerate(names, 1):
        rest, gap, v_pi = 3.05 + 0.02 * rng.normal(), 200 + rng.normal(), round(5.17 + 0.03 * rng.normal(), 3)
        rest, gap = round(rest, 4), round(gap, 1)
        actuators.append((name, name, f"g{k}", "gap", 0, rest, gap, v_pi))
        p = {"rest_rad": rest, "gap_nm": gap, "v_pi_v": v_pi, "decay_nm": 50.0, "area_um2": 20.0, "margin": 0.8}
        rows = {key: np.array([value]) for key, value in p.items()} | {"stiffness_n_per_m": np.array([2.0])}
        for v in volts:
            angle = float(GAP_LAW.rest_rad(rows)[0] + GAP_LAW.change_rad(np.array([v]), rows)[0])
            points.append((name, round(float(v), 2), round(angle + 0.001 * rng.normal(), 4), 0.001))
    head = ("actuator", "element", "channel", "law", "dead", "rest_rad", "gap_nm", "v_pi_v")
    return table_text(head, actuators), table_text(("actuator", "volts_v", "value_rad", "sigma_rad"), points)


def make(into: Path) -> None:
    """Write all demo meshes into a folder."""
    rng = np.random.default_rng(SEED)
    for name, text in (("plover8", PLOVER8), ("knot16", KNOT16)):
        folder = into / name
        folder.mkdir(parents=True, exist_ok=True)
        for old in folder.glob("*.csv"):
            old.unlink()
        (folder / "mesh.toml").write_text(text)
        tables = {"actuators": _heaters(folder, rng, dead="c9_4.inner" if name == "knot16" else "")}
        if name == "knot16":
            tables["elements"] = _couplers(folder, rng, 0.002)
        for table, rows in tables.items():
            (folder / f"{table}.csv").write_text(rows)
    folder = into / "dunlin"
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "mesh.toml").write_text(DUNLIN)
    actuators, points = _gaps(np.random.default_rng(SEED + 1))
    (folder / "actuators.csv").write_text(actuators)
    (folder / "tables.csv").write_text(points)
    mesh = load(folder)
    for name, words in DUNLIN_STATES.items():
        save_state(mesh, name, route(mesh, RouteTarget(tuple(words.split()))))
    _make_curlew(into / "curlew")


def _make_curlew(folder: Path) -> None:
    rng = np.random.default_rng(SEED + 1)
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "mesh.toml").write_text(CURLEW)
    elements = lattice("hexagonal", rings=2, cell="gap").net.names.elements
    (folder / "tables.csv").write_text(_gap_tables([e for e in elements if e.endswith(".coupler")], rng))
    (folder / "actuators.csv").write_text(_common_heaters([e for e in elements if e.endswith(".common1")], rng))


if __name__ == "__main__":
    make(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent)
