"""The loss budget that `check` prints: parts on the way, what each kind takes, and what is too much."""

import itertools
import json

import numpy as np
import pytest

from meshctl.mesh.budget import islands, path_losses
from meshctl.mesh.meshfile import lattice, load

HEAD = 'format = 1\nname = "b"\nwavelength_nm = 1550.0\n'


def chain(kind, count, value, more=""):
    names = [f"x{k}" for k in range(count)]
    links = [f"{a}.b {b}.a" for a, b in itertools.pairwise(names)]
    elements = ", ".join(f'["{n}", "{kind}", {value}]' for n in names)
    linked = json.dumps(["i1 x0.a", *links, f"{names[-1]}.b o1"])
    return f'{HEAD}inputs = ["i1"]\noutputs = ["o1"]\nelements = [{elements}]\nlinks = {linked}\n{more}'


def checked(run, folder):
    code, said, remarks = run("check", folder, "--json")
    assert code == 0
    found = json.loads(said)
    assert remarks in ("", "".join(f"warning: {line}\n" for line in found["warnings"]))
    return found


def test_many_small_losses_exceed_the_budget(run, chip):
    folder = chip(chain("isolation", 20, "{transmitted_power = 0.9}", "[budget]\nloss_db = 3.0\n"))
    found = checked(run, folder)
    path = found["paths"][0]
    # 0.9^20 = 0.1216, twenty times 0.4576 dB = 9.151 dB
    assert path["counts"] == {"isolation": 20}
    for db in (path["most_db"], path["least_db"]):
        assert db == pytest.approx(-10 * np.log10(0.9**20), abs=1e-12)
    assert (
        "i1 to o1: 20 isolation parts at 0.458 dB are 9.15 dB, above the budget of 3 dB alone" in found["warnings"][0]
    )
    assert "12.2 % of the light is left" in found["warnings"][0]
    assert len(found["warnings"]) == 2


def test_budget_that_is_kept_says_nothing(run, chip):
    found = checked(run, chip(chain("tether", 5, "{loss_db = 0.1}", "[budget]\nloss_db = 0.6\n")))
    assert found["warnings"] == []
    assert found["paths"][0]["loss_db"] == {"tether": pytest.approx(0.5, abs=1e-12)}


def test_loss_elements_count_with_their_value(run, chip):
    path = checked(run, chip(chain("loss", 3, "{loss_db = 0.25}")))["paths"][0]
    assert path["loss_db"] == {"loss": pytest.approx(0.75, abs=1e-12)}


def test_sum_of_kinds_exceeds_the_budget(run, chip, lattice_toml):
    more = "[coupler]\nloss_db = 0.1\n[guide]\nloss_db_per_cm = 2.0\n[budget]\nloss_db = 1.0\n"
    found = checked(run, chip(lattice_toml(modes=4, more=more)))
    # 8 couplers 0.8 dB, 1.6 mm of guide 0.32 dB: neither alone, both together
    assert len(found["warnings"]) == 1
    assert "1.12 dB on the way (8 coupler, " in found["warnings"][0]
    # from each of 4 inputs to the two inner outputs; the outer ones skip the last column
    assert "as are 7 ways more" in found["warnings"][0]


def by_hand(mesh, loss):
    """Most and least loss of all ways of a loop-free net, by walking every one of them."""
    net = mesh.net
    owner = net.element_of_port.tolist()
    found = {}

    def walk(port, spent, counts):
        e = owner[port]
        start, stop = int(net.port_start[e]), int(net.port_start[e + 1])
        width = (stop - start) // 2
        spent, counts = spent + loss[e], counts | {int(net.kind[e]): counts.get(int(net.kind[e]), 0) + 1}
        for out in range(start + width, stop):
            if net.kind[e] == 4 and out - start - width == port - start:
                continue  # a crossing goes across
            if net.mate[out] >= 0:
                walk(int(net.mate[out]), spent, counts)
            for name, q in net.externals.items():
                if q == out:
                    key = (entry, name)
                    least, most, best = found.get(key, (np.inf, -np.inf, {}))
                    best = counts if spent > most else best
                    found[key] = min(least, spent), max(most, spent), best

    for entry in net.inputs:
        walk(net.externals[entry], 0.0, {})
    return found


@pytest.mark.parametrize(("shape", "modes"), [("rectangular", 4), ("triangular", 4), ("benes", 4), ("tree", 4)])
def test_paths_agree_with_walking_all_ways(shape, modes):
    mesh = lattice(shape, modes=modes, built=1)
    rng = np.random.default_rng(0)
    losses = mesh.as_built.loss_db + rng.uniform(0.01, 0.1, mesh.net.n_elements)
    object.__setattr__(mesh.as_built, "loss_db", losses)
    expected = by_hand(mesh, losses)
    found = {(p.input, p.output): p for p in path_losses(mesh)}
    assert found.keys() == expected.keys()
    for pair, (least, most, counts) in expected.items():
        assert found[pair].least_db == pytest.approx(least, abs=1e-12)
        assert found[pair].most_db == pytest.approx(most, abs=1e-12)
        assert sum(found[pair].counts.values()) == sum(counts.values())
        assert found[pair].couplers == counts.get(0, 0)
        assert found[pair].crossings == counts.get(4, 0)


def test_loops_take_the_way_of_least_loss(run, chip):
    toml = (
        f'{HEAD}[lattice]\nshape = "square"\nrows = 1\ncolumns = 1\nside_um = 1000.0\n[guide]\nloss_db_per_cm = 2.0\n'
        '[coupler]\nloss_db = 0.1\n[actuator.phase]\nlaw = "heater"\np2pi_mw = 24.0\nr_ohm = 600.0\n'
    )
    found = checked(run, chip(toml))
    pairs = {(p["input"], p["output"]): p for p in found["paths"]}
    # one square: from an end through its own cell, two couplers and 1 mm; round two or three corners more of both
    lengths = sorted({round(p["guide_mm"], 6) for p in pairs.values()})
    assert lengths == [1.0, 2.0, 3.0, 4.0]
    for p in pairs.values():
        assert p["counts"]["coupler"] == 2 * p["guide_mm"]
        assert p["least_db"] == pytest.approx(0.4 * p["guide_mm"], abs=1e-9)
    assert all(pairs[b, a]["least_db"] == pytest.approx(p["least_db"]) for (a, b), p in pairs.items())


def test_way_of_more_parts_may_lose_less(run, chip):
    toml = (
        f'{HEAD}elements = [["k", "coupler"], ["t1", "tether", {{loss_db = 0.02}}], ["t2", "tether", '
        '{loss_db = 0.005}], ["t3", "tether", {loss_db = 0.006}], ["t4", "tether", {loss_db = 0.007}], '
        '["j", "coupler"]]\n'
        'links = ["p1 k.a1", "k.b1 t1.a", "t1.b j.a1", "k.b2 t2.a", "t2.b t3.a", "t3.b t4.a", "t4.b j.a2", "j.b1 p2"]\n'
    )
    found = {(p["input"], p["output"]): p for p in checked(run, chip(toml))["paths"]}
    assert found["p1", "p2"]["counts"] == {"coupler": 2, "tether": 3}
    assert found["p1", "p2"]["least_db"] == pytest.approx(0.018, abs=1e-9)


def test_mirrors_may_turn_the_way_back(run, chip):
    toml = (
        f'{HEAD}elements = [["k", "coupler"], ["m", "mirror", {{reflected_power = 1.0}}]]\n'
        'links = ["p1 k.a1", "p2 k.a2", "k.b1 m.a"]\n'
    )
    found = checked(run, chip(toml))
    # in, back from the mirror, out by either port
    assert {(p["input"], p["output"]) for p in found["paths"]} == set(itertools.product(("p1", "p2"), repeat=2))
    assert all(p["counts"] == {"coupler": 2, "mirror": 1} for p in found["paths"])


def test_many_pairs_are_one_line_each_output(run):
    found = checked(run, "meshes/curlew")
    assert [p["output"] for p in found["paths"]] == [f"p{k + 1}" for k in range(36)]
    assert all(p["least_db"] <= p["most_db"] for p in found["paths"])
    assert found["warnings"] == []
    code, said, _ = run("check", "meshes/curlew")
    assert code == 0
    assert "30 coupler, 60 phase, 60 guide, 1 tether" in said
    assert "parts on the way of least loss; from the input that is worst for each output" in said
    assert "tether dB" in said


def test_islands_are_named(run, chip):
    toml = (
        f'{HEAD}inputs = ["i1", "i2"]\noutputs = ["o1", "o2"]\n'
        'elements = [["k", "coupler"], ["a", "coupler"], ["b", "phase", {phase_rad = 0.1}], ["c", "loss", '
        '{loss_db = 1.0}]]\nlinks = ["i1 k.a1", "i2 k.a2", "k.b1 o1", "a.b1 b.a", "b.b a.a1", "c.b o2"]\n'
    )
    folder = chip(toml)
    found = checked(run, folder)
    assert [len(group) for group in islands(load(folder).net)] == [2, 1]
    assert "no input is joined to 2 parts ('a', 'b'): link them, or take them out" in found["warnings"]
    assert "no input is joined to 1 parts ('c'): link them, or take them out" in found["warnings"]
    assert "no light from any input reaches o2" in found["warnings"]


def test_whole_nets_have_no_islands():
    assert islands(lattice("rectangular", modes=4).net) == []
    assert islands(lattice("hexagonal", rings=2, cell="gap").net) == []
