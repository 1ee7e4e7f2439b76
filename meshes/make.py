"""Makes the demo meshes of this folder, all data invented: a bridge-monitoring station that switches and
weights light between fibre strain sensors and two readout units. Chips are named after wading birds.

Run `python meshes/make.py [FOLDER]`: with the same seed the same files come out.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np

from meshctl.mesh.meshfile import lattice, load
from meshctl.mesh.tables import table_text

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

[spread]
split_rad = 0.02
phase_rad = 1.8
loss_db = 0.01
p2pi_share = 0.02
r_share = 0.02
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

[spread]
split_rad = 0.02
phase_rad = 1.8
loss_db = 0.01
p2pi_share = 0.02
r_share = 0.02
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
