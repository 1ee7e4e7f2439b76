"""Mesh folders: what is written is read back equal, what counts for the hash, and writing that survives a kill."""

import csv
import os
import signal
import subprocess
import sys
import tempfile
import time
from dataclasses import fields
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from meshctl.errors import MissingFile, UnsoundFile
from meshctl.mesh.files import new_folder, write_whole
from meshctl.mesh.meshfile import lattice, load, write

TOML = """\
format = 1
name = "t"
wavelength_nm = 1550.0
[lattice]
shape = "rectangular"
modes = 3
cell = "gap"
[coupler]
loss_db = 0.05
[actuator.phase]
law = "heater"
p2pi_mw = 24.0
r_ohm = 600.0
[actuator.coupler]
law = "gap"
gap_nm = 200.0
stiffness_n_per_m = 2.0
area_um2 = 20.0
decay_nm = 50.0
rest_rad = 3.05
[channel]
max_v = 10.0
limit_v = 9.0
[ground.G1]
resistance_ohm = 0.2
[ground.G2]
resistance_ohm = 0.3
"""
ELEMENTS = lattice("rectangular", modes=3, cell="gap").net.names.elements
TUNABLE = lattice("rectangular", modes=3, cell="gap").net.setting_names
PHASES = [name for name in TUNABLE if name.endswith("phase")]

any_number = st.floats(-1e6, 1e6, allow_nan=False, allow_subnormal=False)
share = st.floats(0.0, 100.0, allow_subnormal=False)


def maybe(strategy):
    return st.one_of(st.just(""), strategy)


def some(names):
    return st.lists(st.sampled_from(names), unique=True, min_size=1)


@st.composite
def element_rows(draw):
    rows = [["element", "error_rad", "loss_db", "stuck_rad", "sigma_rad"]]
    for name in draw(some(ELEMENTS)):
        stuck = draw(maybe(any_number)) if name in TUNABLE else ""
        rows.append([name, draw(maybe(any_number)), draw(maybe(share)), stuck, draw(maybe(share))])
    return {"elements": rows}


@st.composite
def actuator_rows(draw):
    rows = [["actuator", "element", "channel", "dead", "offset_rad", "p2pi_mw"]]
    for number, name in enumerate(draw(some(PHASES))):
        own = draw(st.sampled_from([name, f"h{number}"]))
        channel = draw(st.sampled_from(["", "k1", "k2"]))
        power = draw(maybe(st.floats(0.1, 100.0)))
        rows.append([own, name, channel, draw(st.sampled_from(["", "0", "1"])), draw(maybe(any_number)), power])
    return {"actuators": rows}


@st.composite
def channel_rows(draw):
    rows = [["channel", "bits", "min_v", "max_v", "offset_v", "gain", "limit_v", "limit_ma", "limit_mw",
             "ramp_v_per_s", "ground"]]  # fmt: skip
    columns = (
        st.integers(1, 32), st.floats(-5.0, 5.0), st.just(""), st.floats(-1.0, 1.0), st.floats(0.5, 2.0),
        *[st.floats(0.1, 100.0)] * 4, st.sampled_from(["G1", "G2"]),
    )  # fmt: skip
    for name in draw(some(TUNABLE)):
        rows.append([name, *(draw(maybe(column)) for column in columns)])
    return {"channels": rows}


@st.composite
def measured_rows(draw):
    measured = [["actuator", "volts_v", "value_rad", "sigma_rad"]]
    actuators = [["actuator", "law"]]
    for name in draw(some(TUNABLE)):
        actuators.append([name, "table"])
        steps = draw(st.lists(st.floats(0.01, 2.0), min_size=4, max_size=7))
        rise = np.cumsum(draw(st.lists(st.floats(0.01, 2.0), min_size=len(steps), max_size=len(steps))))
        volts, sign = np.cumsum(steps) - steps[0], draw(st.sampled_from([1.0, -1.0]))
        measured += [[name, float(v), float(sign * r), draw(maybe(share))] for v, r in zip(volts, rise, strict=True)]
    return {"actuators": actuators, "tables": measured}


@st.composite
def crosstalk_rows(draw):
    pairs = draw(st.lists(st.tuples(st.sampled_from(TUNABLE), st.sampled_from(TUNABLE)), unique=True, min_size=1))
    rows = [[a, b, draw(st.floats(-0.1, 0.1))] for a, b in pairs if a != b]
    return {"crosstalk": [["from", "to", "coefficient"], *rows]}


KINDS = {
    "elements": element_rows(),
    "actuators": actuator_rows(),
    "channels": channel_rows(),
    "tables": measured_rows(),
    "crosstalk": crosstalk_rows(),
}


def made(folder, tables, toml=TOML):
    folder.mkdir()
    (folder / "mesh.toml").write_text(toml)
    for name, rows in tables.items():
        with (folder / f"{name}.csv").open("w", newline="") as out:
            csv.writer(out).writerows(rows)
    return load(folder)


def differences(one, two):
    """Names of fields that differ between two meshes, all arrays compared bit by bit."""
    found = [] if one.hash == two.hash else ["hash"]
    found += [n for n in ("actuator_names", "channel_names", "text", "name") if getattr(one, n) != getattr(two, n)]
    for record in ("net", "as_built", "actuators", "channels"):
        for f in fields(getattr(one, record)):
            a, b = (getattr(getattr(mesh, record), f.name) for mesh in (one, two))
            if isinstance(a, np.ndarray):
                same = np.array_equal(a, b, equal_nan=a.dtype.kind == "f")
            elif f.name in ("params", "tables"):
                same = a.keys() == b.keys() and all(np.array_equal(a[k], b[k], equal_nan=True) for k in a)
            elif f.name == "crosstalk" and a is not None:
                same = b is not None and np.array_equal(a.toarray(), b.toarray())
            else:
                same = f.name == "names" or a == b
            found += [] if same else [f"{record}.{f.name}"]
    return found


def written_back(tables):
    with tempfile.TemporaryDirectory() as work:
        mesh = made(Path(work) / "first", tables)
        return mesh, load(write(mesh, Path(work) / "second"))


@pytest.mark.parametrize("kind", KINDS)
def test_written_tables_are_read_back_equal(kind):
    @given(KINDS[kind])
    def holds(tables):
        mesh, again = written_back(tables)
        assert differences(mesh, again) == []

    holds()


@given(element_rows(), actuator_rows(), crosstalk_rows())
def test_written_folder_is_read_back_equal(elements, actuators, crosstalk):
    renamed = {row[1]: row[0] for row in actuators["actuators"][1:]}
    rows = [[renamed.get(source, source), *rest] for source, *rest in crosstalk["crosstalk"][1:]]
    mesh, again = written_back({**elements, **actuators, "crosstalk": [crosstalk["crosstalk"][0], *rows]})
    assert differences(mesh, again) == []


def test_comparison_sees_a_changed_number(tmp_path):
    # the comparison of the tests above has to see a single changed number
    plain = made(tmp_path / "a", {})
    other = made(tmp_path / "b", {"elements": [["element", "error_rad"], ["c1_1.coupler", 1e-300]]})
    assert differences(plain, other) == ["hash", "as_built.error_rad"]


@pytest.mark.parametrize("shape", ["rectangular", "triangular", "tree", "switch"])
@pytest.mark.parametrize("cell", ["mzi", "gap"])
def test_drawn_lattice_is_read_back_equal(tmp_path, shape, cell):
    mesh = lattice(shape, modes=4, cell=cell, built=3, balanced=shape == "rectangular")
    assert differences(mesh, load(write(mesh, tmp_path / "m"))) == []


ALL_ROWS = [[name, "gap" if name.endswith("coupler") else "heater", ""] for name in TUNABLE]
BACKWARDS = [[name, 16] for name in reversed(TUNABLE)]


@pytest.mark.parametrize(
    "tables",
    [
        {"actuators": [["actuator", "law", "offset_rad"], *ALL_ROWS[:3], ["c2_1.coupler", "gap", ""], *ALL_ROWS[4:]]},
        {"actuators": [["actuator", "law", "offset_rad"], *ALL_ROWS[:4], [*ALL_ROWS[4][:2], 5.0], *ALL_ROWS[5:]]},
        {"channels": [["channel", "bits"], *BACKWARDS]},
        {"channels": [["channel", "bits"], *BACKWARDS[:3], [BACKWARDS[3][0], 12], *BACKWARDS[4:]]},
    ],
)
def test_order_of_rows_survives_writing(tables):
    # rows are read first and defaults follow: dropping rows that say nothing new may not reorder the rest
    assert differences(*written_back(tables)) == []


# ---- the hash
def hash_with(tmp_path, toml=TOML, **tables):
    return made(tmp_path / f"m{len(list(tmp_path.iterdir()))}", tables, toml).hash


def test_names_and_notes_leave_hash_alone(tmp_path):
    plain = hash_with(tmp_path)
    assert hash_with(tmp_path, TOML.replace('name = "t"', 'name = "u"\nnote = "spilt coffee"')) == plain
    assert hash_with(tmp_path, "# a remark\n" + TOML + "\n[spread]\nsplit_rad = 0.3\n") == plain
    renamed = [["actuator", "element", "channel"], ["h", TUNABLE[0], "k"]]
    assert hash_with(tmp_path, actuators=renamed) == plain


def test_states_and_loose_files_leave_hash_alone(tmp_path):
    mesh = made(tmp_path / "m", {})
    (tmp_path / "m" / "states").mkdir()
    (tmp_path / "m" / "states" / "a.json").write_text("{}")
    (tmp_path / "m" / "notes.txt").write_text("x")
    assert load(tmp_path / "m").hash == mesh.hash


def test_defaults_written_out_leave_hash_alone(tmp_path):
    same = [["actuator", "law", "p2pi_mw", "r_ohm"], [TUNABLE[0], "heater", 24.0, 600.0]]
    assert hash_with(tmp_path, actuators=same) == hash_with(tmp_path)


@pytest.mark.parametrize(
    ("old", "new"),
    [
        ("1550.0", "1551.0"),
        ("modes = 3", "modes = 4"),
        ("loss_db = 0.05", "loss_db = 0.06"),
        ("loss_db = 0.05", "loss_db = 0.05\nangle_slope_per_nm = 0.001"),
        ("p2pi_mw = 24.0", "p2pi_mw = 24.000000000000004"),
        ("rest_rad = 3.05", "rest_rad = 3.06"),
        ("limit_v = 9.0", "limit_v = 8.0"),
        ("max_v = 10.0", "max_v = 10.5"),
        ("max_v = 10.0", 'max_v = 10.0\nground = "G1"'),
        ("resistance_ohm = 0.2", "resistance_ohm = 0.4"),
        ("[coupler]", "[guide]\nn_group = 3.9\n[coupler]"),
        ("[coupler]", "[guide]\nloss_db_per_cm = 1.0\n[coupler]"),
    ],
)
def test_physics_in_toml_changes_the_hash(tmp_path, old, new):
    assert hash_with(tmp_path, TOML.replace(old, new, 1)) != hash_with(tmp_path)


@pytest.mark.parametrize(
    "tables",
    [
        {"elements": [["element", "error_rad"], ["c1_1.coupler", 1e-12]]},
        {"elements": [["element", "loss_db"], ["c1_1.coupler", 0.0]]},
        {"elements": [["element", "stuck_rad"], ["c1_1.coupler", 0.0]]},
        {"actuators": [["actuator", "dead"], ["c1_1.phase", 1]]},
        {"actuators": [["actuator", "offset_rad"], ["c1_1.phase", 0.1]]},
        {"channels": [["channel", "bits"], ["c1_1.phase", 15]]},
        {"crosstalk": [["from", "to", "coefficient"], ["c1_1.phase", "out1.phase", 1e-3]]},
        {"actuators": [["actuator", "channel"], ["c1_1.phase", "k"], ["out1.phase", "k"]]},
    ],
)
def test_physics_in_tables_changes_the_hash(tmp_path, tables):
    # rows are given for the first setting, so that no order of actuators or channels changes with them
    assert hash_with(tmp_path, **tables) != hash_with(tmp_path)


# ---- writing
def test_existing_folder_is_never_rewritten(tmp_path):
    mesh = lattice("rectangular", modes=2)
    write(mesh, tmp_path / "m")
    before = (tmp_path / "m" / "mesh.toml").stat().st_mtime_ns
    with pytest.raises(UnsoundFile, match="exists already; name a new folder"):
        write(lattice("rectangular", modes=3), tmp_path / "m")
    assert (tmp_path / "m" / "mesh.toml").stat().st_mtime_ns == before
    assert sorted(p.name for p in tmp_path.iterdir()) == ["m"]


def test_failed_folder_leaves_nothing_behind(tmp_path):
    def half_way():
        with new_folder(tmp_path / "m") as work:
            (work / "mesh.toml").write_text("half")
            raise RuntimeError("stop")

    with pytest.raises(RuntimeError):
        half_way()
    assert list(tmp_path.iterdir()) == []


def test_failed_file_leaves_old_one(tmp_path):
    write_whole(tmp_path / "f", "old")
    with pytest.raises(TypeError):
        write_whole(tmp_path / "f", 5)
    assert (tmp_path / "f").read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["f"]


def test_file_in_missing_folder_is_refused(tmp_path):
    with pytest.raises(MissingFile, match="its folder is not there; make "):
        write_whole(tmp_path / "no" / "f", "x")


@pytest.mark.skipif(os.name != "posix", reason="kills by signal")
def test_killed_write_leaves_old_file_whole(tmp_path):
    # a process rewrites one file without end; killed at any moment, the file is one of the two texts, whole
    size, path = 400_000, tmp_path / "plan.json"
    write_whole(path, "a" * size)
    program = (
        "import sys; from pathlib import Path; from meshctl.mesh.files import write_whole\n"
        f"print('on', flush=True)\nwhile True:\n for c in 'ba': write_whole(Path(sys.argv[1]), c * {size})"
    )
    rng, seen = np.random.default_rng(0), []
    for _ in range(8):
        with subprocess.Popen([sys.executable, "-c", program, str(path)], stdout=subprocess.PIPE) as process:
            process.stdout.readline()
            time.sleep(rng.uniform(0.005, 0.08))
            process.send_signal(signal.SIGKILL)
        text = path.read_text()
        assert len(text) == size
        assert len(set(text)) == 1
        seen.append(text[0])
    assert len([p for p in tmp_path.iterdir() if p.name != "plan.json"]) <= 8  # at most the one being written


@pytest.mark.skipif(os.name != "posix", reason="kills by signal")
def test_killed_folder_is_whole_or_absent(tmp_path):
    program = (
        "import sys; from pathlib import Path; from meshctl.mesh.files import new_folder, write_whole\n"
        "print('on', flush=True)\nk = 0\nwhile True:\n k += 1\n with new_folder(Path(sys.argv[1]) / f'm{k}') as w:\n"
        "  for n in 'abc': write_whole(w / n, n * 50000)"
    )
    rng = np.random.default_rng(1)
    for run in range(4):
        (tmp_path / f"r{run}").mkdir()
        with subprocess.Popen([sys.executable, "-c", program, tmp_path / f"r{run}"], stdout=subprocess.PIPE) as process:
            process.stdout.readline()
            time.sleep(rng.uniform(0.01, 0.08))
            process.send_signal(signal.SIGKILL)
        for folder in (tmp_path / f"r{run}").glob("m*"):
            assert {p.name: p.stat().st_size for p in folder.iterdir()} == {"a": 50000, "b": 50000, "c": 50000}


def test_written_files_have_usual_rights(tmp_path):
    write_whole(tmp_path / "f", "x")
    (tmp_path / "g").write_text("x")
    assert (tmp_path / "f").stat().st_mode == (tmp_path / "g").stat().st_mode


def test_links_are_followed_when_written(tmp_path):
    (tmp_path / "link.json").symlink_to(tmp_path / "real.json")
    write_whole(tmp_path / "link.json", "one")
    assert (tmp_path / "link.json").is_symlink()
    assert (tmp_path / "real.json").read_text() == "one"


@pytest.mark.skipif(os.name != "posix", reason="needs a named pipe")
def test_pipes_are_written_to_not_replaced(tmp_path):
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    reader = os.open(pipe, os.O_RDONLY | os.O_NONBLOCK)
    write_whole(pipe, "one")
    assert os.read(reader, 10) == b"one"
    assert pipe.is_fifo()
    os.close(reader)


def test_folder_in_place_of_table_is_named(chip, lattice_toml, run):
    folder = chip(lattice_toml())
    (folder / "actuators.csv").mkdir()
    code, out, err = run("check", folder)
    assert (code, out) == (3, "")
    assert "actuators.csv: is a folder" in err
