"""States of cells that no route needs: loops counted from the lattice, spectra by solving all waves."""

import numpy as np
import pytest
from plane_nets import Light, as_drawn, plane_net, traced_wishes, wide_reach

from meshctl.errors import WrongUsage
from meshctl.mesh.plane import hexagonal, hexagonal_rows, square, trigrid
from meshctl.solver.route import find_routes
from meshctl.solver.switches import settings_for
from meshctl.solver.unused import POLICIES, closed_loops, unused_states
from meshctl.solver.waves import route_graph

LATTICES = [hexagonal(2), hexagonal(4), hexagonal_rows(4, 5), square(4, 5), trigrid(4, 4)]
IDS = ["hexagons", "more hexagons", "rows", "squares", "triangles"]


def graph_of(lattice, form="gap", **words):
    net = plane_net(lattice, form, **words)
    return route_graph(net, as_drawn(net), wide_reach(net))


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
def test_bar_everywhere_closes_every_polygon(lattice):
    graph = graph_of(lattice)
    loops, _ = closed_loops(graph, np.zeros(lattice.n_cells, int))
    assert loops == 2 * sum(_is_ring(lattice))  # once in each direction


def _is_ring(lattice):
    """For every polygon: do its inner sides meet no free port, by walking round in bar."""
    seen, rings = set(), []
    for start in range(4 * lattice.n_cells):
        walk, at = [], start
        while at >= 0 and at not in seen:
            seen.add(at)
            walk.append(at)
            at = int(lattice.mate[at ^ 2])  # bar: a1 - b1, a2 - b2
        if walk and at == start:
            rings.append(True)
    # every ring is walked in both directions
    assert len(rings) % 2 == 0
    return rings[::2]


@pytest.mark.parametrize("lattice", LATTICES, ids=IDS)
@pytest.mark.parametrize("policy", list(POLICIES))
def test_no_loop_is_left_anywhere(lattice, policy):
    graph = graph_of(lattice)
    for seed in range(3):
        wishes = traced_wishes(lattice, 3, np.random.default_rng(seed))
        routing = find_routes(graph, wishes)
        unused = unused_states(graph, routing.share, policy=policy)
        used = ~np.isnan(routing.share)
        assert np.array_equal(unused.share[used], routing.share[used])
        assert unused.loops == 0
        assert closed_loops(graph, unused.share.astype(int))[0] == 0
        assert _unreached(lattice, unused.share.astype(int)) == 0


def _unreached(lattice, cross):
    """Waves that no light from the rim comes to, from the lattice alone."""
    seen = set()
    for at in lattice.rim.tolist():
        while at >= 0:
            seen.add(at)
            leaving = 4 * (at // 4) + 2 * (1 - at % 4 // 2) + (at % 2 ^ int(cross[at // 4]))
            at = int(lattice.mate[leaving])
    return 4 * lattice.n_cells - len(seen)


@pytest.mark.parametrize("count", [5, 10])
def test_routes_leave_no_loop_beside(count):
    lattice = hexagonal(2)
    graph = graph_of(lattice)
    for seed in range(12):
        wishes = traced_wishes(lattice, count, np.random.default_rng(seed))
        routing = find_routes(graph, wishes)
        assert routing.status == "found"
        unused = unused_states(graph, routing.share)
        assert unused.loops == 0
        assert _unreached(lattice, unused.share.astype(int)) == 0


def test_full_chip_says_what_loops_are_left():
    # with a route at each of the 36 ports hardly a cell is free, and some sets leave a loop whatever is tried
    lattice = hexagonal(2)
    graph = graph_of(lattice)
    left = []
    for seed in range(6):
        routing = find_routes(graph, traced_wishes(lattice, 18, np.random.default_rng(seed)))
        unused = unused_states(graph, routing.share)
        assert routing.status == "found"
        assert ("closed loop" in routing.words) == (routing.counts["loops_left"] > 0)
        assert (unused.loops > 0) == (_unreached(lattice, np.nan_to_num(unused.share).astype(int)) > 0)
        left.append(unused.loops)
    assert left.count(0) >= 4


ERRORS = {"equal": (0.03, 0.03), "opposite": (0.03, -0.03)}


@pytest.mark.parametrize("errors", list(ERRORS))
def test_ripple_stays_below_uniform_choices(errors):
    lattice = hexagonal(2)
    net = plane_net(lattice, "mzi", slope=0.003)
    sign = np.random.default_rng(1).choice([-1.0, 1.0], lattice.n_cells)[:, None]
    as_built = as_drawn(net, error_rad=(sign * ERRORS[errors]).ravel())
    reach, light = wide_reach(net), Light(net, as_built)
    graph = route_graph(net, as_built, reach)
    wavelengths = np.linspace(1540.0, 1560.0, 201)

    def ripple_db(share, wishes):
        power = light.power(settings_for(graph.switches, share), wavelengths)
        worst = 0.0
        for wish in wishes:
            curve = 10 * np.log10(light.between(power, *wish.split(":")))
            # fringes of loops, not the slow change that the couplers' slope gives every cell passed
            slow = np.polyval(np.polyfit(wavelengths - 1550.0, curve, 4), wavelengths - 1550.0)
            worst = max(worst, float(np.ptp(curve - slow)))
        return worst

    for seed in range(3):
        wishes = traced_wishes(lattice, 3, np.random.default_rng(seed))
        share = find_routes(graph, wishes).share
        found = ripple_db(unused_states(graph, share).share, wishes)
        assert found <= 0.05
        for state in (0.0, 1.0):
            assert found <= ripple_db(np.where(np.isnan(share), state, share), wishes) + 1e-12


def test_score_decides_among_policies():
    lattice = hexagonal(2)
    graph = graph_of(lattice)
    share = find_routes(graph, ["p1:p20"]).share
    more_bar = unused_states(graph, share, score=lambda s: float(np.nansum(s)))
    more_cross = unused_states(graph, share, score=lambda s: -float(np.nansum(s)))
    assert more_bar.share.sum() < more_cross.share.sum()
    assert more_cross.policy == "cross"


def test_driven_counts_what_power_off_changes():
    lattice = hexagonal(2)
    graph = graph_of(lattice)  # couplers rest at angle 0: bar
    unused = unused_states(graph, np.full(30, np.nan), policy="cross")
    assert unused.driven == int(unused.share.sum())
    assert (
        unused_states(graph, np.full(30, np.nan), policy="rest").driven
        == unused_states(graph, np.full(30, np.nan), policy="rest").turned
    )


def test_unknown_policy_is_named():
    graph = graph_of(hexagonal(1))
    with pytest.raises(WrongUsage, match="policy is 'dark'"):
        unused_states(graph, np.full(6, np.nan), policy="dark")
