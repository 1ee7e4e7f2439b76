"""Every command in process: what goes to stdout, what to stderr, what is written, how it ends."""

import csv
import errno
import json
import os
import subprocess
import sys

import numpy as np
import pytest

from meshctl.mesh.meshfile import lattice, load, write

ACTUATOR_KEYS = {"element", "channel", "volts", "code", "phase_rad", "power_mw", "headroom_v"}
SOLVE_KEYS = {
    "mesh", "target", "fidelity", "matrix_error", "continuous", "throughput", "power_mw", "actuators", "reason",
    "warnings", "seconds",
}  # fmt: skip


@pytest.fixture
def solved(run, tmp_path):
    """A mesh folder of four modes, as built, and a plan for it."""
    folder, plan = tmp_path / "m", tmp_path / "plan.json"
    write(lattice("rectangular", modes=4, built=2), folder)
    assert run("solve", folder, "haar:7", "-o", plan)[0] == 0
    return folder, plan


# ---- new
@pytest.mark.parametrize(
    ("words", "cells"),
    [
        (["rectangular", "--modes", 6], 15),
        (["triangular", "--modes", 5, "--cell", "gap"], 10),
        (["rectangular", "--modes", 4, "--spare", 2, "--built", 3], 9),
        (["tree", "--modes", 8], 7),
        (["switch", "--cell", "gap"], 4),
    ],
)
def test_new_makes_a_sound_folder(run, tmp_path, words, cells):
    code, said, remarks = run("new", words[0], tmp_path / "m", *words[1:], "--json")
    mesh = load(tmp_path / "m")
    assert (code, remarks) == (0, "")
    assert json.loads(said)["cells"] == mesh.net.n_cells == cells
    assert json.loads(said)["hash"] == mesh.hash
    assert mesh.name == "m"


def test_new_draws_same_die_twice(run, tmp_path):
    hashes = {
        name: json.loads(run("new", "rectangular", tmp_path / name, "--modes", 4, "--built", seed, "--json")[1])["hash"]
        for name, seed in (("a", 1), ("b", 1), ("c", 2))
    }
    assert hashes["a"] == hashes["b"] != hashes["c"]


def test_new_takes_any_folder_name(run, tmp_path):
    assert run("new", "rectangular", tmp_path / 'my "best" chip', "--modes", 3)[0] == 0
    assert load(tmp_path / 'my "best" chip').name == 'my "best" chip'


def test_new_balances_losses_when_asked(run, tmp_path):
    run("new", "rectangular", tmp_path / "m", "--modes", 5, "--balanced")
    toml = tmp_path / "m" / "mesh.toml"
    toml.write_text(toml.read_text().replace("[coupler]\nloss_db = 0.0", "[coupler]\nloss_db = 0.1"))
    found = json.loads(run("check", tmp_path / "m", "--json")[1])
    # five columns of two couplers each, on every way
    assert all(abs(path["least_db"] - 1.0) <= 1e-12 and abs(path["most_db"] - 1.0) <= 1e-12 for path in found["paths"])


# ---- check
def test_check_counts_what_is_there(run, chip, lattice_toml):
    tap = '[[insert]]\nname = "t"\nkind = "tap"\nat = "in1"\nmonitor = "m1"\ncross_power = 0.1\n'
    more = "[coupler]\nloss_db = 0.2\n[guide]\nloss_db_per_cm = 2.0\n[budget]\nloss_db = 1.0\n" + tap
    actuators = [["actuator", "dead"], ["c1_1.inner", 1]]
    elements = [["element", "stuck_rad"], ["c2_1.outer", 0.5]]
    folder = chip(lattice_toml(modes=4, more=more), actuators=actuators, elements=elements)
    code, said, remarks = run("check", folder, "--json")
    found = json.loads(said)
    assert code == 0
    assert found["elements"] == {"coupler": 13, "phase": 16, "guide": 4}
    assert (found["cells"], found["settings"], found["actuators"]) == (6, 16, {"heater": 16})
    assert (found["monitors"], found["dead"], found["stuck"]) == (["m1"], ["c1_1.inner"], ["c2_1.outer"])
    # by hand: at most four columns of 2 couplers and the tap, 0.2 dB each, and 1.6 mm of guide at 2 dB/cm
    assert max(path["most_db"] for path in found["paths"]) == pytest.approx(9 * 0.2 + 0.32, abs=1e-12)
    assert min(path["least_db"] for path in found["paths"]) == pytest.approx(4 * 0.2 + 0.32, abs=1e-12)
    assert len(found["warnings"]) == 2
    assert "9 coupler parts at 0.2 dB are 1.80 dB, above the budget of 1 dB alone" in found["warnings"][0]
    assert "2.12 dB on the way (9 coupler, " in found["warnings"][1]
    assert remarks in ("", "".join(f"warning: {line}\n" for line in found["warnings"]))


def test_check_prints_text_for_people(run, solved):
    code, said, remarks = run("check", solved[0])
    assert (code, remarks) == (0, "")
    assert "rectangular, 1550 nm" in said
    assert "12 coupler, 16 phase, 4 guide" in said


# ---- solve
def test_solve_prints_one_json_object(run, solved):
    code, said, remarks = run("solve", solved[0], "haar:7", "--json")
    entry = json.loads(said)
    assert (code, remarks) == (0, "")
    assert entry.keys() >= SOLVE_KEYS
    assert entry["continuous"].keys() >= {"fidelity", "matrix_error"}
    assert len(entry["actuators"]) == 16
    assert all(row.keys() >= ACTUATOR_KEYS for row in entry["actuators"])
    assert abs(entry["power_mw"] - sum(row["power_mw"] for row in entry["actuators"])) <= 1e-9


def test_solve_names_angles_of_couplers(run, chip, lattice_toml):
    entry = json.loads(run("solve", chip(lattice_toml(modes=3, cell="gap")), "dft", "--json")[1])
    kinds = {row["element"]: "angle_rad" in row for row in entry["actuators"]}
    assert kinds["c1_1.coupler"] is True
    assert kinds["c1_1.phase"] is False


def test_solve_prints_table_for_people(run, solved):
    code, said, _ = run("solve", solved[0], "dft")
    lines = said.splitlines()
    assert code == 0
    assert lines[0].split() == ["actuator", "channel", "volts", "code", "value_rad", "power_mw", "headroom_v"]
    assert len([line for line in lines if line.startswith(("c", "out"))]) == 16
    assert any(line.startswith("fidelity ") for line in lines)


def test_solve_of_ideal_chip_is_exact(run, tmp_path):
    write(lattice("rectangular", modes=8), tmp_path / "m")
    entry = json.loads(run("solve", tmp_path / "m", "haar:7", "--json")[1])
    assert 1 - entry["continuous"]["fidelity"] <= 1e-12
    assert entry["fidelity"] > 0.999999


def test_solve_reads_targets_from_files(run, tmp_path, solved):
    matrix = np.fft.ifft(np.eye(4), norm="ortho")  # the dft of the conventions: exp(+2 pi i / N)
    np.save(tmp_path / "t.npy", matrix)
    (tmp_path / "t.csv").write_text("\n".join(",".join(repr(complex(z)) for z in row) for row in matrix))
    errors = {
        words: json.loads(run("solve", solved[0], words, "--json")[1])["matrix_error"]
        for words in ("dft", str(tmp_path / "t.npy"), str(tmp_path / "t.csv"))
    }
    assert max(errors.values()) - min(errors.values()) <= 1e-3  # rounding may turn a code where phases are nearly free


def test_free_outputs_are_kept_in_plan(run, tmp_path, solved):
    run("solve", solved[0], "haar:7", "--free", "outputs", "-o", tmp_path / "f.json")
    assert json.loads((tmp_path / "f.json").read_text())["target"]["free"] == "outputs"
    assert "free phases: outputs" in run("predict", solved[0], tmp_path / "f.json")[1]


def test_out_of_reach_writes_no_plan(run, tmp_path, chip, lattice_toml):
    folder = chip(lattice_toml(modes=4, channel="limit_v = 2.0"))
    plan = tmp_path / "p.json"
    code, said, remarks = run("solve", folder, "haar:1", "-o", plan)
    assert (code, said, plan.exists()) == (4, "", False)
    assert "--best-effort" in remarks
    code, said, remarks = run("solve", folder, "haar:1", "-o", plan, "--best-effort", "--json")
    assert (code, plan.exists()) == (0, True)
    assert json.loads(said)["reason"] == "limits"
    assert json.loads(said)["warnings"]


# ---- predict
def test_predict_repeats_what_solve_said(run, solved):
    plan = json.loads(solved[1].read_text())
    code, said, remarks = run("predict", *solved, "--json")
    entry = json.loads(said)
    assert (code, remarks) == (0, "")
    assert all(entry[key] == plan[key] for key in ("fidelity", "matrix_error", "throughput", "throughput_per_input"))


def test_predict_writes_the_field_matrix(run, tmp_path, solved):
    run("predict", *solved, "--matrix", tmp_path / "m.npy")
    matrix = np.load(tmp_path / "m.npy")
    # no loss on this die: unitary within rounding
    assert matrix.shape == (4, 4)
    assert np.abs(matrix.conj().T @ matrix - np.eye(4)).max() <= 1e-14


def test_predict_writes_rows_of_spectrum(run, tmp_path, solved):
    code, said, _ = run("predict", *solved, "--wavelengths", "1540:1560:5", "-o", tmp_path / "s.csv", "--json")
    with (tmp_path / "s.csv").open(newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert code == 0
    assert json.loads(said)["wavelengths_nm"] == [1540.0, 1545.0, 1550.0, 1555.0, 1560.0]
    assert len(rows) == 5 * 4 * 4
    first = [float(row["power"]) for row in rows if row["wavelength_nm"] == "1540.0" and row["input"] == "in1"]
    assert abs(sum(first) - 1) <= 1e-14


def test_predict_matrix_and_spectrum_agree(run, tmp_path, solved):
    run("predict", *solved, "--wavelengths", "1540:1560:2", "-o", tmp_path / "s.csv", "--matrix", tmp_path / "m.npy")
    matrix = np.load(tmp_path / "m.npy")
    with (tmp_path / "s.csv").open(newline="") as lines:
        row = next(r for r in csv.DictReader(lines) if (r["input"], r["output"]) == ("in2", "out3"))
    assert matrix.shape == (2, 4, 4)
    assert float(row["power"]) == pytest.approx(abs(matrix[0, 2, 1]) ** 2, rel=1e-14)
    assert float(row["phase_rad"]) == pytest.approx(np.angle(matrix[0, 2, 1]), abs=1e-14)


def test_stale_plan_passes_with_remark(run, solved):
    toml = solved[0] / "mesh.toml"
    toml.write_text(toml.read_text().replace("p2pi_mw = 24.0", "p2pi_mw = 25.0").replace("1550.0", "1551.0"))
    code, _, remarks = run("predict", *solved)
    assert code == 3
    assert "--stale-ok" in remarks
    code, said, remarks = run("predict", *solved, "--stale-ok", "--json")
    assert code == 0
    assert remarks.startswith("warning: ")
    assert json.loads(said)["fidelity"] < 1


# ---- the rest
def test_elements_counts_the_rows_written(run, tmp_path, solved):
    code, said, _ = run("elements", *solved, "-o", tmp_path / "l.csv", "--json")
    entry = json.loads(said)
    assert code == 0
    assert entry["rows"] == len((tmp_path / "l.csv").read_text().splitlines()) - 1


def test_old_output_is_replaced_whole(run, tmp_path, solved):
    (tmp_path / "l.csv").write_text("old\n" * 10_000)
    run("elements", *solved, "-o", tmp_path / "l.csv")
    assert "old" not in (tmp_path / "l.csv").read_text()


def test_demo_runs_the_main_job(run):
    code, said, remarks = run("demo")
    assert (code, remarks) == (0, "")
    assert "fidelity" in said
    entry = json.loads(run("demo", "--json")[1])
    assert entry["mesh"] == "plover8"
    assert len(entry["actuators"]) == 64


@pytest.mark.parametrize("name", ["plover8", "knot16"])
def test_shipped_meshes_are_all_sound(run, name):
    from meshctl.session import demo_mesh_folder

    folder = demo_mesh_folder(name)
    code, said, _ = run("check", folder, "--json")
    assert code == 0
    assert "invented" in json.loads(said)["note"]
    code, said, _ = run("solve", folder, "haar:7", "--best-effort", "--json")
    assert code == 0
    assert json.loads(said)["fidelity"] > (0.9999 if name == "plover8" else 0.5)


@pytest.mark.parametrize("verb", ["new", "check", "show", "solve", "predict", "elements", "demo"])
def test_help_of_every_verb_shows_example(run, verb):
    code, said, remarks = run(verb, "--help")
    assert (code, remarks) == (0, "")
    assert f"meshctl {verb}" in said.split("Example:")[1]


def test_help_lists_all_exit_codes(run):
    code, said, _ = run("--help")
    assert code == 0
    assert all(word in said for word in ("0 done", "1 a bug", "2 wrong", "3 unsound", "4 out of reach", "130"))


def test_version_is_printed_on_request(run):
    import meshctl

    assert run("--version")[:2] == (0, f"meshctl {meshctl.__version__}\n")


def test_interrupt_ends_with_its_code(run, solved, monkeypatch):
    def interrupted(*_, **__):
        raise KeyboardInterrupt

    monkeypatch.setattr("meshctl.session.Session.solve", interrupted)
    code, said, remarks = run("solve", solved[0], "dft")
    assert (code, said) == (130, "")
    assert remarks == "meshctl solve: interrupted\n"


def test_bug_is_reported_without_traceback(run, solved, monkeypatch, tmp_path):
    def broken(*_, **__):
        raise ZeroDivisionError("one over nothing")

    monkeypatch.setattr("meshctl.session.Session.solve", broken)
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    code, said, remarks = run("solve", solved[0], "dft")
    assert (code, said) == (1, "")
    assert "a bug in meshctl itself (ZeroDivisionError: one over nothing)" in remarks
    assert "Traceback" not in remarks
    assert "Traceback" in next(tmp_path.glob("meshctl-bug-*.txt")).read_text()


def meshctl_process(words, **how):
    return subprocess.Popen([sys.executable, "-m", "meshctl", *words], text=True, stderr=subprocess.PIPE, **how)


def test_closed_stdout_is_said():
    done = subprocess.run(
        ["sh", "-c", '"$0" -m meshctl check meshes/plover8 >&-', sys.executable], capture_output=True, text=True
    )
    assert (done.returncode, done.stderr.count("\n")) == (3, 1)
    assert "stdout is closed" in done.stderr


def test_terminal_without_lines_is_pointed_to_ascii():
    for words, code in ((["show", "meshes/plover8"], 2), (["show", "meshes/plover8", "--ascii"], 0)):
        made = {**os.environ, "PYTHONIOENCODING": "ascii"}
        process = meshctl_process(words, stdout=subprocess.DEVNULL, env=made)
        said = process.communicate()[1]
        assert process.returncode == code
        assert said.count("\n") == (1 if code else 0)
        assert ("--ascii" in said) == bool(code)


def test_stdout_without_room_is_said(run, monkeypatch):
    def full(_):
        raise OSError(errno.ENOSPC, "No space left on device")

    from meshctl.cli import commands

    monkeypatch.setattr(commands, "check", full)
    monkeypatch.setattr("os.dup2", lambda *_: None)
    code, _, remarks = run("check", "meshes/plover8")
    assert (code, remarks.count("\n")) == (3, 1)
    assert "stdout cannot be written: no space left on device" in remarks


def test_interruption_before_the_command_runs(run, monkeypatch):
    def interrupted():
        raise KeyboardInterrupt

    monkeypatch.setattr("meshctl.cli.words.parser", interrupted)
    assert run("check", "m") == (130, "", "meshctl: interrupted\n")
