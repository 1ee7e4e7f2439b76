"""Every finding of the drive, made to happen from a mesh folder through the command.

Each must end in one line that names the actuator or channel, the value with its unit, what is allowed and a
remedy, with exit code 4 (out of reach) or 3 (the folder is unsound), and nothing written.
"""

import math
import re

import pytest

import meshctl
from meshctl import errors
from meshctl.cli import main
from meshctl.optics.elements import cell_block

HEATERS = """\
format = 1
name = "bench"
wavelength_nm = 1550.0
[lattice]
shape = "rectangular"
modes = {modes}
cell = "{cell}"
[actuator.phase]
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0
{phase}
{coupler}
[channel]
bits = 16
{channel}
{rest}
"""
GAP = """\
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
"""


def folder(tmp_path, *, modes=4, cell="mzi", phase="", coupler="", channel="", rest="", **tables):
    path = tmp_path / "bench"
    path.mkdir()
    text = HEATERS.format(modes=modes, cell=cell, phase=phase, coupler=coupler, channel=channel, rest=rest)
    (path / "mesh.toml").write_text(text)
    for name, rows in tables.items():
        (path / f"{name}.csv").write_text(rows)
    return path


def strong(pairs, coefficient):
    """crosstalk.csv of heaters that warm one another."""
    rows = [f"{a},{b},{coefficient}\n{b},{a},{coefficient}" for a, b in pairs]
    return "from,to,coefficient\n" + "\n".join(rows) + "\n"


CELL = [("c1_1.outer", "c1_1.inner")]
COLUMNS = [(f"c{c}_{r}.outer", f"c{c}_{r}.inner") for c in range(1, 9) for r in range(1, 4)]
TABLE = "actuator,volts_v,value_rad,sigma_rad\n" + "".join(f"c1_1.outer,{v},{v * v / 20},0.001\n" for v in range(6))
TURNING = "actuator,volts_v,value_rad\nc1_1.outer,0,0.0\nc1_1.outer,1,0.4\nc1_1.outer,2,0.3\nc1_1.outer,3,0.9\n"
BY_TABLE = "actuator,law\nc1_1.outer,table\n"
SHARED = "actuator,channel\nc1_1.outer,k1\nc1_1.inner,k1\n"

CASES = {
    "voltage": (errors.VoltageOutOfRange, {"channel": "limit_v = 2.0"}, ["channel 'c", " V is needed", "limit_v"]),
    "current": (errors.CurrentOutOfRange, {"channel": "limit_ma = 4.0"}, ["channel 'c", " mA is needed", "limit_ma"]),
    "current source": (
        errors.CurrentOutOfRange,
        {"channel": 'drives = "milliamps"\nmax_ma = 4.0'},
        ["channel 'c", " mA is needed", "limit_ma"],
    ),
    "power": (errors.PowerOutOfRange, {"channel": "limit_mw = 6.0"}, ["channel 'c", " mW is needed", "limit_mw"]),
    "pull-in": (
        errors.PullIn,
        {"cell": "gap", "coupler": GAP + "rest_rad = 3.2\nmargin = 0.05"},
        ["channel 'c", " V is above", "margin 0.05", "pull-in"],
    ),
    "gap opens": (
        errors.GapOutOfRange,
        {"cell": "gap", "coupler": GAP + "rest_rad = 3.0\nmargin = 0.3"},
        ["channel 'c", " nm of travel", "branch"],
    ),
    "runaway": (
        errors.ThermalRunaway,
        {"phase": "r_rise = -0.9"},
        ["mW", "runs away", "current source"],
    ),
    "outside table": (
        errors.OutsideMeasuredRange,
        {"actuators": BY_TABLE, "tables": TABLE},
        ["c1_1.outer", "rad", "measured"],
    ),
    "table turns": (
        errors.TableNotMonotone,
        {"actuators": BY_TABLE, "tables": TURNING},
        ["tables.csv", "c1_1.outer", "1 V", "fit"],
    ),
    "singular crosstalk": (
        errors.CrosstalkUnsound,
        {"crosstalk": strong(CELL, 1.0)},
        ["crosstalk.csv", "singular", "c1_1.outer", "c1_1.inner"],
    ),
    "crosstalk unreachable": (
        errors.Unreachable,
        {"crosstalk": strong(CELL, 0.2), "channel": "limit_mw = 6.0"},
        ["proved", "limits"],
    ),
    "shared channel": (errors.SharedChannel, {"actuators": SHARED}, ["channel 'k1'", " V", "channel of its own"]),
}


def finding(path):
    with pytest.raises(errors.Finding) as caught:
        meshctl.solve(meshctl.load(path), "haar:3")
    return caught.value


@pytest.mark.parametrize("case", CASES, ids=str)
def test_each_finding_ends_in_one_line(case, tmp_path, capsys):
    kind, given, words = CASES[case]
    path = folder(tmp_path, **given)
    plan = tmp_path / "plan.json"
    code = main(["solve", str(path), "haar:3", "-o", str(plan)])
    said = capsys.readouterr().err.strip()
    assert type(finding(path)) is kind
    assert code == kind.exit_code
    assert "\n" not in said
    assert "Traceback" not in said
    assert not plan.exists()
    for word in words:
        assert word in said, said
    assert re.search(r"\d", said)
    assert ";" in said  # a remedy follows


def aimed(tmp_path, coefficient, turns, limit_mw):
    """A mesh of 144 heaters, more than are proved, two of which warm each other and need given turns."""
    settings = meshctl.solve(meshctl.lattice("rectangular", modes=12), "haar:3").settings
    rows = [
        f"{name},k{k},{settings[k] - 2 * math.pi * b}" for k, (name, b) in enumerate(zip(CELL[0], turns, strict=True))
    ]
    return folder(
        tmp_path,
        modes=12,
        crosstalk=strong(CELL, coefficient),
        actuators="actuator,channel,offset_rad\n" + "\n".join(rows) + "\n",
        channels=f"channel,limit_mw\nk0,{limit_mw}\nk1,{limit_mw}\n",
    )


def test_undecided_search_says_not_found(tmp_path, capsys):
    # C = [[1, -0.4], [-0.4, 1]]: 0.9 turns in both take 1.5 turns of power each, one limit is 1 turn (24 mW);
    # ranges of totals, -0.4 to 1, hold them all the same, so nothing short of a search can tell
    path = aimed(tmp_path, -0.4, (0.9, 0.9), 24.0)
    assert main(["solve", str(path), "haar:3"]) == 4
    assert "none was proved impossible" in capsys.readouterr().err
    assert type(finding(path)) is errors.NotFound


def test_heaters_outdone_by_neighbours_are_named(tmp_path, capsys):
    # C = [[1, 1.3], [1.3, 1]]: 0.9 and 0.3 turns ask for negative power, and so do all whole turns within reach
    path = aimed(tmp_path, 1.3, (0.9, 0.3), 12.0)
    assert main(["solve", str(path), "haar:3"]) == 4
    assert "'c1_1.outer'" in capsys.readouterr().err
    assert type(finding(path)) is errors.CrosstalkNotDominant


def test_resistance_at_zero_is_unsound(tmp_path, capsys):
    # all others warm one heater: R = R0 (1 - 0.45 T) is gone at 2.2 turns of heat
    others = [f"c{c}_{r}.{role}" for c, r in ((1, 2), (2, 1), (3, 1), (3, 2), (4, 1)) for role in ("outer", "inner")]
    rows = "from,to,coefficient\n" + "".join(f"{name},c1_1.outer,0.9\n" for name in others)
    path = folder(tmp_path, phase="r_rise = -0.45", crosstalk=rows)
    assert main(["solve", str(path), "haar:3"]) == 3
    assert "ohm" in capsys.readouterr().err
    assert type(finding(path)) is errors.ResistanceNotPositive


def test_neighbours_may_give_what_limits_deny(tmp_path):
    # C = [[1, 1.3], [1.3, 1]], b = (0.05, 0.9) turns: P = (0.174, 0.674) by Cramer's rule, though 0.9 turns
    # alone would be above the limit of 0.7 and the inverse has a negative diagonal
    outer, inner = 0.5, 1.0
    offsets = {"c1_1.outer": outer - 2 * math.pi * 0.05, "c1_1.inner": inner - 2 * math.pi * 0.9}
    path = folder(
        tmp_path,
        modes=2,
        crosstalk=strong(CELL, 1.3),
        channel="limit_mw = 16.8",
        actuators="actuator,offset_rad\n" + "".join(f"{k},{v}\n" for k, v in offsets.items()),
    )
    plan = meshctl.solve(meshctl.load(path), cell_block(inner, outer), free="outputs")
    assert plan.fidelity > 1 - 1e-6
    assert plan.power_mw[:2] / 24.0 == pytest.approx([0.1739, 0.6739], abs=2e-3)


def test_best_effort_holds_and_says_so(tmp_path, capsys):
    path = folder(tmp_path, channel="limit_v = 2.0")
    assert main(["solve", str(path), "haar:3", "--best-effort", "-o", str(tmp_path / "plan.json")]) == 0
    said = capsys.readouterr()
    assert "reason        limits" in said.out
    plan = meshctl.plan.plan.read_plan(tmp_path / "plan.json")
    assert plan.volts.max() <= 2.0
    assert plan.fidelity < plan.continuous["fidelity"]
