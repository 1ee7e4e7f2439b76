"""What the next chip needs: against closed forms, independent runs, and published comparisons of lattices."""

import math

import pytest
from scipy import stats

from meshctl import lattice, load, solve
from meshctl.errors import OutOfReach, WrongUsage
from meshctl.mesh.spread import Spread
from meshctl.session import demo_mesh_folder
from meshctl.tolerances.budget import budget_of
from meshctl.tolerances.lattices import compare_lattices
from meshctl.tolerances.requirement import requirement
from meshctl.tolerances.spec import fewest_met, fewest_trials, specification, yield_curve
from meshctl.tolerances.trials import run_trials, task_of

MESH = lattice("rectangular", modes=4)
PLAN = solve(MESH, "haar:1")
WISH = [requirement("fidelity>=0.99")]


def test_fewest_dies_follow_from_the_interval():
    met = fewest_met(0.95, 1000)
    low, before = (stats.binomtest(k, 1000).proportion_ci(0.95, method="exact").low for k in (met, met - 1))
    assert before < 0.95 <= low
    assert 0.025 ** (1 / fewest_trials(0.95)) >= 0.95 > 0.025 ** (1 / (fewest_trials(0.95) - 1))  # all dies good


def test_allowed_errors_meet_what_they_promise():
    spread = Spread(split_rad=0.01, phase_rad=0.02)
    spec = specification(task_of(MESH, PLAN, spread=spread), WISH, trials=400)
    for name, allowed in spec.allowed.items():
        scales = {c: allowed.scale for c in spread.active if name in (c, "together")}
        rest = {c: 0.0 for c in spread.active if c not in scales}
        if name == "codes":
            continue
        found = run_trials(task_of(MESH, PLAN, spread=spread, seed=5, scales={**scales, **rest}), 1500, WISH)
        assert found.yield_.high > 0.95, name
        assert found.yield_.share < 0.995, name  # and not far more than was wished
    assert spec.allowed["together"].scale < min(spec.allowed[c].scale for c in spread.active)


def test_coarser_codes_add_their_squares():
    # a level between two codes is uniform: variance q^2 / 12, from any textbook
    task = task_of(MESH, PLAN, spread=Spread(split_rad=0.01))
    bits = specification(task, WISH, trials=200).allowed["codes"]
    step = bits.scale * 10.0 / (2**16 - 1)
    added = budget_of(task_of(MESH, PLAN, spread=Spread(noise_v=step / math.sqrt(12.0)))).e2
    assert bits.value == math.ceil(16 - math.log2(bits.scale))
    assert 0.003 < added < 0.01  # most dies lose less than the 0.01 that is allowed, none much less


def test_causes_that_do_no_harm_say_so():
    spread = Spread(phase_rad=1e-7, split_rad=0.01)
    spec = specification(task_of(MESH, PLAN, spread=spread), [requirement("throughput>=0.5")], trials=100)
    assert {a.limit for a in spec.allowed.values()} == {"none"}


def test_yields_fall_as_scatter_grows():
    task = task_of(MESH, PLAN, spread=Spread(split_rad=0.03))
    shares = [y.share for y in yield_curve(task, WISH, (0.1, 1.0, 2.0, 10.0), trials=100)]
    assert shares == sorted(shares, reverse=True)
    assert (shares[0], shares[-1]) == (1.0, 0.0)


def test_two_processes_allow_the_same():
    task = task_of(MESH, PLAN, spread=Spread(split_rad=0.01, phase_rad=0.02))
    one, two = (specification(task, WISH, trials=100, processes=n).entry() for n in (1, 2))
    assert one == two


def test_cancelled_specifications_end_as_interrupted():
    task = task_of(MESH, PLAN, spread=Spread(split_rad=0.01))
    for processes in (1, 2):
        with pytest.raises(KeyboardInterrupt):
            specification(task, WISH, trials=100, processes=processes, cancel=lambda: True)


@pytest.mark.parametrize(
    ("asked", "finding", "said"),
    [
        ({"requirements": []}, WrongUsage, "add --require"),
        ({"wish": 1.0}, WrongUsage, "between 0 and 1"),
        ({"trials": 50}, WrongUsage, "at least 72"),
        ({"requirements": [requirement("throughput<=0.5")]}, OutOfReach, "even the die without scatter"),
    ],
)
def test_wrong_specifications_are_refused_in_words(asked, finding, said):
    task = task_of(MESH, PLAN, spread=Spread(split_rad=0.01))
    with pytest.raises(finding) as caught:
        specification(task, **{"requirements": WISH, **asked})
    assert said in str(caught.value)


def test_lattices_compare_on_the_same_targets():
    rows = compare_lattices(Spread(split_rad=0.01), modes=(8,), targets=("haar:1",), trials=100)
    error = {row.lattice: row.as_set for row in rows}
    assert error["rectangular+2"] > error["rectangular"] == pytest.approx(error["triangular"], rel=0.1)
    corrected = {row.lattice: row.corrected for row in rows}
    assert corrected["rectangular"] < 0.2 * error["rectangular"]
    assert corrected["rectangular+2"] > 0.2 * error["rectangular+2"]  # spare cells reach bar no nearer than they split


def test_routes_on_benes_keep_to_themselves():
    rows = compare_lattices(Spread(split_rad=0.02), shapes=("rectangular", "benes"), modes=(8,), targets=("routes:1",),
                            trials=100)  # fmt: skip
    # a path of k couplers errs by about k s^2: five stages of a Benes lattice against eight of a rectangle
    assert rows[1].as_set < rows[0].as_set
    assert rows[1].crosstalk_db < rows[0].crosstalk_db < -15.0


def test_targets_to_compare_by_are_checked():
    with pytest.raises(WrongUsage, match="haar:SEED or routes:SEED"):
        compare_lattices(Spread(split_rad=0.02), targets=("dft",))


def test_triangles_suffer_more_from_known_loss():
    # unequal paths cost triangles fidelity that rectangles keep (Clements et al. 2016)
    rows = compare_lattices(
        Spread(split_rad=1e-5), shapes=("rectangular", "triangular"), modes=(8,), targets=("haar:1",), trials=3,
        coupler_loss_db=0.2,
    )  # fmt: skip
    assert rows[0].as_set < 0.6 * rows[1].as_set


def test_lattices_that_cannot_say_why():
    rows = compare_lattices(Spread(split_rad=0.01), shapes=("benes",), modes=(8,), targets=("haar:1",), trials=3)
    assert rows[0].as_set is None
    assert "closed form" in rows[0].reason


@pytest.mark.slow
@pytest.mark.sample
def test_plover_specification_is_confirmed_and_refuted():
    mesh = load(demo_mesh_folder())
    plan = solve(mesh, "haar:1")
    scale = specification(task_of(mesh, plan), WISH, trials=1000).allowed["together"].scale
    apart = {}
    for factor in (1.0, 1.3):
        scales = dict.fromkeys(mesh.spread.active, factor * scale)
        apart[factor] = run_trials(task_of(mesh, plan, seed=77, scales=scales), 4000, WISH).yield_
    assert apart[1.0].half_width <= 0.01
    assert apart[1.0].low >= 0.94
    assert apart[1.0].share >= 0.95
    assert apart[1.3].high < 0.95
