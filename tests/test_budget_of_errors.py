"""The analytic budget against published scalings, against dies drawn one by one, and against finite differences."""

import math

import numpy as np
import pytest

from meshctl import lattice, load, route, solve
from meshctl.errors import OutOfReach
from meshctl.mesh.response import Response
from meshctl.mesh.sensitivity import jacobian, part_jacobian
from meshctl.mesh.spread import Shape, Spread
from meshctl.session import demo_mesh_folder
from meshctl.tolerances.budget import budget_of
from meshctl.tolerances.trials import run_trials, task_of

CAUSES = {
    "split_rad": Spread(split_rad=0.003),
    "phase_rad": Spread(phase_rad=0.004),
    "p2pi_share": Spread(p2pi_share=0.001),
    "r_share": Spread(r_share=0.001),
    "noise_v": Spread(noise_v=0.001),
    "loss_db": Spread(loss_db=0.02),
    "tilted": Spread(split_rad=0.003, shapes={"split_rad": Shape(gradient=0.3, correlated=0.4, correlation_um=400.0)}),
    "all": Spread(split_rad=0.002, phase_rad=0.002, p2pi_share=0.0005, r_share=0.0005, noise_v=0.0005, loss_db=0.01),
}


def planned(modes, seed=1):
    mesh = lattice("rectangular", modes=modes)
    return mesh, solve(mesh, f"haar:{seed}")


@pytest.mark.parametrize("modes", [8, 16, 32])
def test_splitting_errors_grow_as_published(modes):
    # E0 = sqrt(2 N) s for a rectangular mesh of N modes, from memory; N - 1 in place of N: there are N (N - 1) couplers
    budget = budget_of(task_of(*planned(modes), spread=Spread(split_rad=0.001)))
    assert math.sqrt(budget.e2) == pytest.approx(math.sqrt(2 * (modes - 1)) * 0.001, rel=0.01)


@pytest.mark.slow
@pytest.mark.sample
@pytest.mark.parametrize("cause", CAUSES)
def test_budget_is_the_mean_of_dies(cause):
    task = task_of(*planned(16), spread=CAUSES[cause])
    budget, found = budget_of(task), run_trials(task, 4000)
    mean = found.summary("matrix_error")["mean_square"]
    assert budget.e2 == pytest.approx(mean, rel=0.03)


def test_small_mesh_budget_is_the_mean():
    task = task_of(*planned(6), spread=Spread(split_rad=0.003, phase_rad=0.003, loss_db=0.01))
    mean = run_trials(task, 2000).summary("matrix_error")["mean_square"]
    assert budget_of(task).e2 == pytest.approx(mean, rel=0.04)  # E^2 scatters by a quarter: 0.6 % of 2000


def test_causes_add_up_to_the_whole():
    mesh, plan = planned(6)
    whole = budget_of(task_of(mesh, plan, spread=CAUSES["all"]))
    alone = {c: budget_of(task_of(mesh, plan, spread=CAUSES["all"].only(c))) for c in whole.by_cause}
    assert whole.by_cause == pytest.approx({c: b.by_cause[c] for c, b in alone.items()})
    assert whole.by_element.sum() < whole.e2  # the mean of folded losses belongs to no part alone


def test_second_order_follows_large_scatter():
    mesh, plan = planned(12)
    task = task_of(mesh, plan, spread=Spread(split_rad=0.06, phase_rad=0.06))
    budget, mean = budget_of(task), run_trials(task, 1500).summary("matrix_error")["mean_square"]
    assert budget.second_order_e2 == pytest.approx(mean, rel=0.04)
    assert budget.e2 > 1.04 * mean
    assert budget_of(task_of(mesh, plan, spread=Spread(split_rad=0.002))).holds


def test_parts_answer_as_finite_differences_say():
    mesh, plan = planned(4)
    net, built = mesh.net, mesh.as_built
    rows, step = np.arange(net.n_elements), 1e-6
    for by_loss, given, name in ((False, built.error_rad, "error_rad"), (True, built.loss_db, "loss_db")):
        found = part_jacobian(Response(net, built), plan.actual, rows, by_loss=by_loss)
        for e in rows:
            ends = []
            for sign in (1.0, -1.0):
                moved = given + sign * step * (rows == e)
                ends.append(Response(net, type(built)(**{**vars(built), name: moved})).matrix(plan.actual))
            assert np.allclose(found[e], (ends[0] - ends[1]) / (2 * step), atol=1e-9)


def test_settings_answer_as_their_parts_do():
    mesh, plan = planned(4)
    response, rows = Response(mesh.net, mesh.as_built), np.flatnonzero(mesh.net.setting_of >= 0)
    parts = part_jacobian(response, plan.actual, rows, by_loss=False)
    assert np.allclose(jacobian(response, plan.actual)[mesh.net.setting_of[rows]], parts)


def test_free_output_phases_forgive_their_errors():
    mesh = lattice("rectangular", modes=4)
    spread = Spread(phase_rad=0.01)
    strict, free = (
        budget_of(task_of(mesh, solve(mesh, "haar:1", free=free), spread=spread)) for free in ("nothing", "outputs")
    )
    outputs = [
        e for e, name in enumerate(mesh.net.names.elements) if name.startswith("out") and name.endswith(".phase")
    ]
    assert free.sensitivity[outputs].max() < 1e-20 < strict.sensitivity[outputs].min()


def test_stuck_actuators_count_one_by_one():
    mesh, plan = planned(4)
    budget = budget_of(task_of(mesh, plan, spread=Spread(stuck_share=0.001)))
    mean = run_trials(task_of(mesh, plan, spread=Spread(stuck_share=0.001)), 4000).summary("matrix_error")
    assert budget.e2 == pytest.approx(mean["mean_square"], rel=0.3)  # some sixty of 4000 dies have one


def test_routes_and_loops_have_no_budget():
    mesh = load(demo_mesh_folder())
    with pytest.raises(OutOfReach, match="routes"):
        budget_of(task_of(mesh, route(mesh, ["in1:out3"])))
    with pytest.raises(OutOfReach, match="corrected"):
        budget_of(task_of(mesh, solve(mesh, "dft"), policy="corrected"))
