"""What is done to a piece of work, and how it is taken back."""

import math
from dataclasses import replace

import numpy as np
import pytest

from meshctl.errors import OutOfRange, WrongUsage
from meshctl.mesh.glow import glow
from meshctl.mesh.meshfile import lattice, write
from meshctl.mesh.response import Response
from meshctl.plan.pipeline import Effort
from meshctl.session import Session, demo_mesh_folder
from meshctl.work import Assume, Enter, Turn, Work

CURLEW = demo_mesh_folder("curlew")


def plover():
    return Work(Session(demo_mesh_folder("plover8")))


def random_action(work, rng, plans):
    """One action with every argument drawn; findings are answers."""
    net = work.session.mesh.net
    cell, setting = int(rng.integers(net.n_cells)), int(rng.integers(net.n_settings))
    actions = (
        lambda: work.toggle_cell(cell),
        lambda: work.set_cell(cell, float(rng.uniform(-0.1, 1.1))),
        lambda: work.set_setting(setting, float(rng.normal(0.0, 40.0))),
        lambda: work.break_cell(cell),
        lambda: work.assume(setting, [None, math.nan, 1.0][int(rng.integers(3))]),
        work.mend,
        lambda: work.choose_input(int(rng.integers(-3, 20))),
        lambda: work.take(plans[int(rng.integers(len(plans)))]),
        work.undo,
        work.redo,
    )
    try:
        actions[int(rng.integers(len(actions)))]()
    except (OutOfRange, WrongUsage):  # shares beyond 0 to 1, angles beyond reason, cells that are stuck
        return


def test_undo_of_any_number_restores_states():
    work, rng = plover(), np.random.default_rng(8)
    plans = [work.solve(f"haar:{seed}", Effort(refine=False)) for seed in (1, 2)]
    for _ in range(5000):
        before = len(work.done)
        random_action(work, rng, plans)
        assert len(work.done) <= before + 1
    states = [work.state]
    while work.undo():
        states.append(work.state)
    assert len(states) > 100
    for earlier in reversed(states[:-1]):
        assert work.redo()
        assert work.state.same(earlier)


def test_cached_values_equal_those_made_fresh():
    work, rng = plover(), np.random.default_rng(3)
    plans = [work.solve("haar:1", Effort(refine=False))]
    for _ in range(60):
        random_action(work, rng, plans)
        _ = work.matrix, work.lit, work.sites
        fresh = Work(Session(demo_mesh_folder("plover8")))
        fresh.state = work.state
        assert np.array_equal(work.matrix, fresh.matrix)
        assert np.array_equal(work.lit, fresh.lit)
        assert np.array_equal(work.sites.cross_power, fresh.sites.cross_power, equal_nan=True)


def test_each_command_names_its_topics():
    state = plover().state
    for command, topics in ((Turn((0,), (1.0,)), {"settings"}), (Assume(()), {"faults"}), (Enter(1), {"input"})):
        after, inverse, touched = command.do(state)
        assert touched == topics
        assert inverse.do(after)[0].same(state)


@pytest.mark.parametrize("share", [0.0, 0.3, 1.0])
def test_a_cell_goes_where_asked(share):
    work = plover()
    work.set_cell(9, share)
    assert work.cross_power(9) == pytest.approx(share, abs=2e-4)  # 16 bits over 10 V: some 1e-4 rad


def test_light_ends_as_the_matrix_says():
    from meshctl.picture_light import output_powers

    work = plover()
    work.toggle_cell(0)
    work.choose_input(2)
    assert output_powers(work.mesh.net, work.lit) == pytest.approx(np.abs(work.matrix[:, 2]) ** 2, abs=1e-12)


def test_broken_actuators_change_the_plan_result():
    work = plover()
    work.take(work.solve("haar:1", Effort(refine=False)))
    whole = work.measures["fidelity"]
    assert work.break_cell(9)
    assert work.measures["fidelity"] < whole - 1e-3
    assert not work.break_cell(9)
    assert work.measures["fidelity"] == whole


def test_assumed_faults_are_never_saved(tmp_path):
    work = plover()
    work.break_cell(9)
    work.take(work.solve("haar:1", Effort(refine=False)))
    with pytest.raises(WrongUsage, match="assumed faults"):
        work.save_plan(tmp_path / "plan.json")
    assert not list(tmp_path.iterdir())


def test_hand_set_cells_are_not_saved(tmp_path):
    work = plover()
    work.take(work.solve("haar:1", Effort(refine=False)))
    work.toggle_cell(3)
    with pytest.raises(WrongUsage, match="by hand"):
        work.save_plan(tmp_path / "plan.json")
    work.undo()
    work.save_plan(tmp_path / "plan.json")
    other = plover()
    other.open(str(tmp_path / "plan.json"))
    assert np.array_equal(other.drive.codes, work.drive.codes)


def test_a_state_is_saved_and_opened(tmp_path):
    folder = write(lattice("rectangular", modes=4), tmp_path / "m")
    work = Work(Session(folder))
    work.take(work.solve("haar:1", Effort(refine=False)))
    work.save_state("first")
    work.take(work.solve("haar:2", Effort(refine=False)))
    assert work.difference("first").channels
    work.open("first")
    assert work.state.plan.target["source"] == "haar:1"


def test_refused_shares_leave_the_state():
    work = plover()
    before = work.state
    with pytest.raises(OutOfRange, match=r"c1_1.*not from 0 to 1"):
        work.set_cell(0, 1.5)
    assert work.state is before
    assert not work.done


def test_every_listener_hears_each_topic():
    work, heard = plover(), []
    work.subscribe(heard.append)
    work.choose_input(3)
    work.toggle_cell(0)
    work.undo()
    assert heard == [{"input"}, {"settings"}, {"settings"}]


def test_glow_at_ports_is_the_matrix():
    drawn = lattice("hexagonal", rings=2, cell="gap")
    net = replace(drawn.net, guide_loss_db_per_cm=0.0)
    built = replace(drawn.as_built, loss_db=np.zeros(net.n_elements))
    settings = np.random.default_rng(5).uniform(0.0, 3.0, net.n_settings)
    response = Response(net, built)
    power = glow(response, settings, 3)
    expected = np.abs(response.matrix(settings)[:, 3]) ** 2
    expected[net.outputs.index(net.inputs[3])] += 1.0  # what enters is counted where it enters
    ports = np.array([net.externals[name] for name in net.outputs])
    assert power[ports] == pytest.approx(expected, abs=1e-10)


def test_cells_of_a_ring_lattice_switch():
    work = Work(Session(CURLEW))
    for share in (1.0, 0.0):
        work.set_cell(5, share)
        assert work.cross_power(5) == pytest.approx(share, abs=1e-2)  # the measured gaps end short of full states
