"""mesh.toml of a new lattice, with its defaults written out for whoever edits it.

Public: lattice_text.
"""

from __future__ import annotations

import json

from meshctl.mesh.lattices import PLANE_SIZES

_HEATER = """\
[actuator.phase]                # every phase shifter that actuators.csv does not list
law = "heater"                  # phase = offset + 2 pi P / p2pi
p2pi_mw = 24.0
r_ohm = 600.0

"""


def _gap_actuator() -> str:
    """[actuator.coupler] of a new mesh with tunable couplers."""
    return (
        "[actuator.coupler]              # electrostatic gaps: closing raises the angle, bar at pi\n"
        'law = "gap"\n'
        "gap_nm = 200.0\nstiffness_n_per_m = 2.0\narea_um2 = 20.0\ndecay_nm = 50.0\nrest_rad = 3.05\nmargin = 0.8\n\n"
    )


def lattice_text(
    shape: str,
    name: str,
    *,
    modes: int | None,
    cell: str,
    spare: int,
    balanced: bool = False,
    plane: dict[str, int] | None = None,
) -> str:
    """mesh.toml of a new lattice, with its defaults written out; `plane` is the size of one with loops."""
    size = "" if modes is None else f"modes = {modes}\n"
    size += "".join(f"{key} = {count}\n" for key, count in (plane or {}).items())
    extra = f"spare = {spare}\n" if spare else ""
    extra += "balanced = true\n" if balanced else ""
    phases = _HEATER if cell == "mzi" or shape != "switch" else ""
    gaps = _gap_actuator() if cell == "gap" else ""
    place = "pitch_um = [400.0, 127.0]       # between columns, between lanes"
    if shape in PLANE_SIZES:
        place = "side_um = 250.0                 # length of every cell's guides"
    return f"""\
format = 1
name = {json.dumps(name, ensure_ascii=False)}
note = "as drawn; all numbers are placeholders until the chip is measured"
wavelength_nm = 1550.0

[lattice]
shape = "{shape}"
{size}cell = "{cell}"
{extra}{place}

[guide]
n_eff = 2.44
n_group = 4.2
loss_db_per_cm = 0.0

[coupler]
loss_db = 0.0

{phases}{gaps}[channel]                       # every output of the source that channels.csv does not list
bits = 16
min_v = 0.0
max_v = 10.0

[rest]
state = "{"cross" if cell == "mzi" else "unknown"}"                 # what a cell falls to without drive

[spread]                        # how far parts scatter from die to die (standard deviations)
split_rad = 0.02
phase_rad = 1.8
loss_db = 0.0
p2pi_share = 0.02
r_share = 0.02
"""
