"""Dies drawn one by one: against the chip's own forward path, published scalings, and runs broken off on the way."""

import json
import math
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from meshctl import lattice, load, route, solve
from meshctl.errors import OutOfReach, StalePlan, UnsoundFile, WrongUsage
from meshctl.mesh.response import Response
from meshctl.mesh.spread import Spread
from meshctl.optics.measures import matrix_error
from meshctl.plan.chip import Chip
from meshctl.plan.pipeline import Effort, predict
from meshctl.plan.pipeline import solve as plan_for
from meshctl.plan.plan import plan_text
from meshctl.session import demo_mesh_folder
from meshctl.solver.target import from_description
from meshctl.tolerances.budget import budget_of
from meshctl.tolerances.chunks import Kept, run_chunk
from meshctl.tolerances.dies import die_as_built, mesh_of
from meshctl.tolerances.requirement import MEASURES, requirement, until_width, yield_of
from meshctl.tolerances.trials import run_trials, task_of
from meshctl.tolerances.workers import results

MESH = lattice("rectangular", modes=4)
PLAN = solve(MESH, "haar:1")
SPREAD = Spread(split_rad=0.02, phase_rad=0.01)
PLOVER = load(demo_mesh_folder())  # losses, known errors, a shared ground
EVERY = Spread(
    split_rad=0.02, phase_rad=0.6, loss_db=0.03, p2pi_share=0.01, r_share=0.01, noise_v=0.01,
    temperature_k=2.0, phase_rad_per_k=0.01, laser_nm=0.4, stuck_share=0.02,
)  # fmt: skip


def entry(found):
    return json.dumps(found.entry())


def by_the_chip(task, errors):
    """Light of a die by the chip's own forward path, parts put together by hand."""
    die = mesh_of(task.drawing, errors)
    chip = Chip(replace(die, as_built=die_as_built(task.drawing, errors, drift=True)))
    levels = chip.levels(task.plan.codes) + errors.get("noise_v", 0.0)
    settings = chip.reference_rad + chip.total_changes(chip.own_changes(levels))
    waves = task.mesh.net.wavelength_nm + errors.get("laser_nm", np.zeros(1))
    return Response(chip.net, chip.mesh.as_built).matrix(settings, waves)[0]


@pytest.mark.parametrize("cause", ["split_rad", "phase_rad", "loss_db", "p2pi_share", "noise_v", "stuck_share", "all"])
def test_codes_give_what_the_chip_gives(cause):
    spread = EVERY if cause == "all" else EVERY.only(cause)
    task = task_of(PLOVER, solve(PLOVER, "haar:2"), spread=spread)
    for trial in range(4):
        errors = task.drawing.errors(task.drawing.normals(3, trial))
        assert np.abs(task.dies.run(errors)[0] - by_the_chip(task, errors)).max() < 1e-13  # rounding


@pytest.mark.parametrize("cause", ["crosstalk_share", "r_share"])
def test_crosstalk_scatters_as_the_chip_says(cause, chip, lattice_toml):
    law = '[crosstalk]\nlaw = "exponential"\namplitude = 0.05\ndistance_um = 300.0\narm_um = 30.0\n'
    mesh = load(chip(lattice_toml(more=law)))
    spread = Spread(crosstalk_share=0.3, r_share=0.02).only(cause)
    task = task_of(mesh, solve(mesh, "haar:2"), spread=spread)
    errors = task.drawing.errors(task.drawing.normals(3, 0))
    assert np.abs(task.dies.run(errors)[0] - by_the_chip(task, errors)).max() < 1e-13
    mean = run_trials(task, 1500).summary("matrix_error")["mean_square"]
    assert budget_of(task).e2 == pytest.approx(mean, rel=0.06)  # few causes dominate: E^2 scatters by its own size


def test_nets_with_loops_are_measured_too():
    mesh = load(demo_mesh_folder("curlew"))
    task = task_of(mesh, route(mesh, ["p1:p9"]), spread=Spread(split_rad=0.01, phase_rad=0.01))
    errors = task.drawing.errors(task.drawing.normals(3, 0))
    assert np.abs(task.dies.run(errors)[0] - by_the_chip(task, errors)).max() < 1e-12
    assert task.nominal()["insertion_loss_db"] == pytest.approx(task.plan.routes[0]["insertion_loss_db"], abs=1e-9)


def test_unscattered_dies_do_what_predict_says():
    plan = solve(PLOVER, "haar:2")
    nominal, said = task_of(PLOVER, plan).nominal(), predict(PLOVER, plan)
    assert nominal["matrix_error"] == pytest.approx(said.matrix_error, abs=1e-12)
    assert nominal["throughput"] == pytest.approx(said.throughput)
    assert nominal["power_mw"] == pytest.approx(said.power_mw.sum())


def test_local_correction_errs_as_was_published():
    # Ec = sqrt(2/3) N s^2 after local correction (Bandyopadhyay et al. 2021), its factor from memory
    mesh = lattice("rectangular", modes=32)
    task = task_of(mesh, solve(mesh, "haar:1"), spread=Spread(split_rad=0.03), policy="corrected")
    mean = run_trials(task, 60).summary("matrix_error")["mean"]
    assert mean == pytest.approx(math.sqrt(2 / 3) * 32 * 0.03**2, rel=0.25)  # the law holds for Haar means and large N


def test_corrected_dies_beat_codes_as_set():
    plans = {policy: task_of(PLOVER, solve(PLOVER, "haar:2"), spread=Spread(split_rad=0.08, p2pi_share=0.02),
                             policy=policy) for policy in ("as-set", "corrected", "refined")}  # fmt: skip
    error = {policy: run_trials(task, 8).summary("matrix_error")["mean"] for policy, task in plans.items()}
    assert error["refined"] < error["corrected"] < 0.2 * error["as-set"]


@pytest.mark.parametrize("heaters", ["together", "alone"])
def test_corrected_dies_do_what_solving_them_says(heaters):
    spread = Spread(split_rad=0.05, phase_rad=0.5, p2pi_share=0.02, r_share=0.02)
    mesh = PLOVER
    if heaters == "alone":
        mesh, spread = lattice("rectangular", modes=8), Spread(split_rad=0.05, phase_rad=0.5)
    task = task_of(mesh, solve(mesh, "haar:2"), spread=spread, policy="corrected")
    assert task.dies.alone == (heaters == "alone")
    for trial in range(3):
        errors = task.drawing.errors(task.drawing.normals(3, trial))
        die = mesh_of(task.drawing, errors)
        target = from_description(task.plan.target)
        anew = plan_for(die, target, best_effort=True, aware=False, joint=False, effort=Effort(refine=False))
        matrix, power = task.dies.run(errors)
        assert matrix_error(matrix, target.matrix) == pytest.approx(anew.matrix_error, rel=1e-6)
        assert power == pytest.approx(anew.power_mw.sum())


def test_drift_comes_after_the_correction():
    task = task_of(
        MESH, PLAN, spread=Spread(phase_rad=0.3, temperature_k=1.0, phase_rad_per_k=0.02), policy="corrected"
    )
    calm = task_of(MESH, PLAN, spread=Spread(phase_rad=0.3), policy="corrected")
    assert run_trials(calm, 5).summary("matrix_error")["mean"] < 3e-4  # what 16 bits leave
    assert run_trials(task, 50).summary("matrix_error")["mean"] > 0.005


def test_triangles_with_loss_err_more():
    # paths of unequal length lose unequal light: rectangles keep fidelity where triangles do not (Clements et al. 2016)
    error = {}
    for shape in ("rectangular", "triangular"):
        mesh = lattice(shape, modes=8)
        lossy = replace(mesh, as_built=replace(mesh.as_built, loss_db=np.where(mesh.net.kind == 0, 0.3, 0.0)))
        plan = replace(solve(mesh, "haar:1"), mesh_hash=lossy.hash)
        task = task_of(lossy, plan, spread=Spread(loss_db=1e-6))
        error[shape] = run_trials(task, 3).summary("matrix_error")["mean"]
    assert error["rectangular"] < 0.5 * error["triangular"]


@pytest.mark.parametrize(("met", "trials"), [(0, 10), (10, 10), (950, 1000), (1, 3)])
def test_intervals_are_those_of_scipy_stats(met, trials):
    found = yield_of(met, trials)
    exact = stats.binomtest(met, trials).proportion_ci(0.95, method="exact")
    assert (found.low, found.high) == pytest.approx((exact.low, exact.high), abs=1e-12)


def test_intervals_cover_as_often_as_said():
    met = stats.binom.rvs(200, 0.9, size=3000, random_state=1)
    covered = [y.low <= 0.9 <= y.high for y in (yield_of(int(m), 200) for m in met)]
    assert 0.95 <= np.mean(covered) < 0.98  # Clopper-Pearson is never below its confidence


def test_chunks_do_not_depend_on_order():
    task = task_of(MESH, PLAN, spread=SPREAD)
    late = run_chunk(task, 3, 50)
    other = task.bare()
    run_chunk(other, 0, 50)
    assert np.array_equal(late, run_chunk(other, 3, 50))


def test_early_stops_look_at_width_only():
    task, wish = task_of(MESH, PLAN, spread=SPREAD), [requirement("fidelity>=0.9")]
    hopeless = [requirement("matrix_error<=0.001")]
    assert run_trials(task, 5000, hopeless, until=0.01).trials == run_trials(task, 5000, wish, until=0.01).trials == 250
    assert run_trials(task, 1000, wish, until=0.0001).stopped == "trials"


def test_folders_of_trials_go_on_unchanged(tmp_path):
    task, wish = task_of(MESH, PLAN, spread=SPREAD), [requirement("fidelity>=0.998")]
    whole, asked = run_trials(task, 1100, wish), iter([False] * 600 + [True] * 9)
    broken = run_trials(task, 1100, wish, folder=tmp_path / "run", cancel=lambda: next(asked))
    assert (broken.stopped, broken.trials) == ("interrupted", 500)
    assert entry(run_trials(task, 1100, wish, folder=tmp_path / "run")) == entry(whole)


def test_kept_chunks_are_not_run_again(tmp_path):
    task = task_of(MESH, PLAN, spread=SPREAD)
    run_trials(task, 500, folder=tmp_path / "run")
    kept = Kept(tmp_path / "run", task)
    kept.keep(1, np.full((250, len(task.goal.measures)), 7.0))
    assert run_trials(task, 500, folder=tmp_path / "run").values[250:].min() == 7.0


def test_folders_of_other_runs_are_refused(tmp_path):
    run_trials(task_of(MESH, PLAN, spread=SPREAD), 10, folder=tmp_path / "run")
    with pytest.raises(StalePlan, match="seed"):
        run_trials(task_of(MESH, PLAN, spread=SPREAD, seed=1), 10, folder=tmp_path / "run")
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "notes.txt").write_text("mine")
    with pytest.raises(UnsoundFile, match="neither empty"):
        run_trials(task_of(MESH, PLAN, spread=SPREAD), 10, folder=tmp_path / "other")
    (tmp_path / "run" / "chunks" / "000000.npy").write_bytes(b"x")
    with pytest.raises(UnsoundFile, match="remove that file"):
        run_trials(task_of(MESH, PLAN, spread=SPREAD), 10, folder=tmp_path / "run")


def test_routes_are_measured_by_their_powers():
    plan = route(PLOVER, ["in1:out3", "in2:out1"])
    found = run_trials(task_of(PLOVER, plan, spread=SPREAD), 20, [requirement("crosstalk_db<=-10")])
    assert found.task.goal.measures[0] == "power_error"
    assert found.summary("crosstalk_db")["mean"] < -20.0
    with pytest.raises(WrongUsage, match="power_error"):
        run_trials(task_of(PLOVER, plan, spread=SPREAD), 20, [requirement("fidelity>=0.9")])


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ("fidelty>=0.9", "did you mean 'fidelity'"),
        ("fidelity>=1.2", "allowed is 0 to 1"),
        ("fidelity=0.9", "MEASURE>=NUMBER"),
        ("throughput>=high", "'high' is no number"),
        ("power_mw<=nan", "power_mw is never nan"),
    ],
)
def test_wrong_requirements_are_refused_in_words(words, said):
    with pytest.raises(WrongUsage) as caught:
        requirement(words)
    assert said in str(caught.value)


def test_every_measure_can_be_required():
    for name, measure in MEASURES.items():
        value = max(measure.low, -5.0)
        assert requirement(f" {name} <= {value} ").met(np.array([value, np.nan])).tolist() == [True, False]
    assert until_width("1%") == until_width("0.01") == 0.01


def test_what_no_die_meets_is_refused():
    task = task_of(MESH, PLAN, spread=SPREAD)
    with pytest.raises(OutOfReach, match="even the die without scatter has throughput 1"):
        run_trials(task, 10, [requirement("throughput<=0.5")])
    with pytest.raises(WrongUsage, match="until"):
        run_trials(task, 10, until=0.01)
    with pytest.raises(UnsoundFile, match="nothing scatters"):
        task_of(MESH, PLAN, spread=Spread())
    for wrong in ({"policy": "best"}, {"seed": -1}):
        with pytest.raises(WrongUsage):
            task_of(MESH, PLAN, spread=SPREAD, **wrong)


# ---- processes
@pytest.mark.slow
def test_killed_workers_change_nothing_but_time(tmp_path):
    task, pieces = task_of(MESH, PLAN, spread=SPREAD), [(k, 250) for k in range(40)]
    found, killed = [], 0
    for values in results(task, pieces, Kept(tmp_path / "run", task), processes=2):
        found.append(values)
        if not killed:
            killed = children()[0]
            os.kill(killed, signal.SIGKILL)
    assert np.array_equal(np.concatenate(found), np.concatenate([run_chunk(task, *piece) for piece in pieces]))


def children():
    """Worker processes of this one, by id."""
    import multiprocessing

    return [p.pid for p in multiprocessing.active_children()]


@pytest.mark.slow
def test_clusters_and_killed_workers_change_nothing(tmp_path):
    distributed = pytest.importorskip("distributed")
    task, pieces = task_of(MESH, PLAN, spread=SPREAD), [(k, 250) for k in range(40)]
    found = []
    with distributed.LocalCluster(
        n_workers=2, threads_per_worker=2, processes=True, dashboard_address=None, silence_logs=50
    ) as cluster:
        for values in results(task, pieces, Kept(tmp_path / "run", task), cluster=cluster.scheduler_address):
            found.append(values)
            if len(found) == 2:
                os.kill(next(iter(cluster.workers.values())).pid, signal.SIGKILL)
    assert np.array_equal(np.concatenate(found), np.concatenate([run_chunk(task, *piece) for piece in pieces]))


@pytest.mark.slow
@pytest.mark.sample
def test_interrupted_commands_go_on_unchanged(tmp_path):
    (tmp_path / "plan.json").write_text(plan_text(solve(PLOVER, "haar:1")))
    command = [sys.executable, "-m", "meshctl", "tolerance", str(demo_mesh_folder()), "plan.json", "--trials", "10000",
               "--require", "fidelity>=0.98", "--json"]  # fmt: skip
    first = subprocess.Popen([*command, "-o", "run"], cwd=tmp_path, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    while not len(list((tmp_path / "run" / "chunks").glob("0*.npy"))) >= 2:
        time.sleep(0.02)
    first.send_signal(signal.SIGINT)
    told = first.communicate()[1].decode()
    assert first.returncode == 130, told
    runs = [
        subprocess.run([*command, *more], cwd=tmp_path, capture_output=True, check=True) for more in (["-o", "run"], [])
    ]
    went_on, whole = (json.loads(run.stdout) for run in runs)
    assert {**went_on, "seconds": 0} == {**whole, "seconds": 0}


@pytest.mark.slow
@pytest.mark.sample
@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="reads the memory's high mark where Linux keeps it")
def test_memory_stays_flat_in_trials():
    code = """
import sys
from pathlib import Path
from meshctl import lattice, solve
from meshctl.mesh.spread import Spread
from meshctl.tolerances.trials import run_trials, task_of
mesh = lattice("rectangular", modes=16)
run_trials(task_of(mesh, solve(mesh, "haar:1"), spread=Spread(split_rad=0.01, phase_rad=0.01)), int(sys.argv[1]))
print(int(Path("/proc/self/status").read_text().split("VmHWM:")[1].split()[0]))
"""
    few, many = (
        int(subprocess.run([sys.executable, "-c", code, n], capture_output=True, check=True).stdout)
        for n in ("1000", "10000")
    )
    assert many - few < 50 * 1024  # kB


def test_error_of_dies_is_no_normal_law():
    found = run_trials(task_of(MESH, PLAN, spread=SPREAD), 500)
    values = found.column("matrix_error")
    assert found.summary("matrix_error")["quantile_0.5"] == np.quantile(values, 0.5)
    assert found.summary("fidelity")["mean"] == pytest.approx(1.0 - np.mean(values**2))
    assert matrix_error(by_the_chip(found.task, found.task.drawing.errors(found.task.drawing.normals(0, 4))),
                        found.task.goal.matrix) == pytest.approx(values[4], abs=1e-12)  # fmt: skip
