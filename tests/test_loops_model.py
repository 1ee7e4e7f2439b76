"""The data model carries loops: a hexagonal net solved by a plain dense scattering solve in this file."""

import numpy as np
import pytest

from meshctl.mesh.meshfile import load
from meshctl.mesh.response import circuit_of
from meshctl.optics.elements import KINDS

EXACT = 1e-12  # a dense solve of some 100 unknowns of order one, rounding times a condition below 100
ROOT3 = 3**0.5


def hexagons(centres):
    """Corners and edges of regular hexagons of side 1 about the given centres, shared ones once."""
    corners, edges = [], set()

    def corner(x, y):
        for k, (u, v) in enumerate(corners):
            if abs(u - x) + abs(v - y) < 1e-6:
                return k
        corners.append((x, y))
        return len(corners) - 1

    for x, y in centres:
        ring = [corner(x + np.sin(t), y + np.cos(t)) for t in np.arange(6) * np.pi / 3]
        edges |= {(min(p), max(p)) for p in zip(ring, ring[1:] + ring[:1], strict=True)}
    return np.array(corners), sorted(edges)


def hexagonal_toml(centres, angles, phases, loss_db=0.0):
    """Every edge two common phases and a tunable coupler; neighbours round a face are linked."""
    corners, edges = hexagons(centres)
    elements, links, ends = [], [], {k: [] for k in range(len(corners))}
    for e, (u, v) in enumerate(edges):
        elements += [f'["e{e}.common{s}", "phase", {{phase_rad = {phases[e]}}}]' for s in (1, 2)]
        elements += [f'["e{e}.l{s}", "loss", {{loss_db = {loss_db}}}]' for s in (1, 2)]
        elements += [f'["e{e}.k", "coupler", {{angle_rad = {angles[e]}}}]']
        for s in (1, 2):
            links += [f"e{e}.common{s}.b e{e}.l{s}.a", f"e{e}.l{s}.b e{e}.k.a{s}"]
        # looking from u to v side 1 lies on the left; looking back from v it lies on the right
        for here, there, left, right in (
            (u, v, f"e{e}.common1.a", f"e{e}.common2.a"),
            (v, u, f"e{e}.k.b2", f"e{e}.k.b1"),
        ):
            along = corners[there] - corners[here]
            ends[here].append((np.arctan2(along[1], along[0]), left, right))
    count = 0
    for around in ends.values():
        around.sort()
        for (turn, left, _), (after, _, right) in zip(around, around[1:] + around[:1], strict=True):
            if (after - turn) % (2 * np.pi) < np.pi * 0.99:  # inside a hexagon
                links.append(f"{left} {right}")
            else:  # two edges meet: the side that looks outward stands open
                links += [f"p{count + 1} {left}", f"p{count + 2} {right}"]
                count += 2
    return (
        'format = 1\nname = "hex"\nwavelength_nm = 1550.0\n'
        f"elements = [{', '.join(elements)}]\nlinks = [{', '.join(repr(link) for link in links)}]\n"
    ).replace("'", '"')


def dense_response(net):
    """[out, in] over all external ports: in-waves a = P b + e, b = S a, so (1 - P S) a = e."""
    n = len(net.mate)
    scatter, joined = np.zeros((n, n), complex), np.zeros((n, n))
    for element, row in enumerate(net.kind.tolist()):
        first, value = int(net.port_start[element]), float(net.nominal[element])
        if KINDS[row].name == "coupler":
            block = np.array([[np.cos(value), 1j * np.sin(value)], [1j * np.sin(value), np.cos(value)]])
        else:
            block = np.array([[np.exp(1j * value) if KINDS[row].name == "phase" else 10 ** (-value / 20)]])
        w = len(block)
        scatter[first + w : first + 2 * w, first : first + w] = block
        scatter[first : first + w, first + w : first + 2 * w] = block.T  # reciprocity
    for port in np.flatnonzero(net.mate >= 0):
        joined[port, net.mate[port]] = 1.0
    outside = np.array([net.externals[name] for name in net.outputs])
    entering = np.linalg.inv(np.eye(n) - joined @ scatter)
    return (scatter @ entering)[np.ix_(outside, outside)]


def one_hexagon(chip, angle_of, phase, loss_db=0.0):
    _, edges = hexagons([(0.0, 0.0)])
    angles = [angle_of.get(e, 0.0) for e in range(len(edges))]
    return load(chip(hexagonal_toml([(0.0, 0.0)], angles, [phase] * 6, loss_db))).net


def along(net, element, side):
    """The external port that an edge's outer lane has on its a or b side, or None."""
    owner = net.element_of_port
    names = net.names.elements
    for name, port in net.externals.items():
        if names[owner[port]].startswith(f"{element}.") and (names[owner[port]].endswith("k")) == (side == "b"):
            return name
    raise AssertionError(element)


def test_hexagon_has_twelve_external_ports(chip):
    # 24 R - 12 ports, 9 R^2 - 3 R edges for R = 1 rings (counting: 6 corners, two open ends each)
    net = one_hexagon(chip, {}, 0.0)
    assert len(net.externals) == 12
    assert net.inputs == net.outputs == tuple(net.externals)
    assert int((net.kind == 0).sum()) == 6


def test_two_hexagons_share_one_edge(chip):
    net = load(chip(hexagonal_toml([(0.0, 0.0), (ROOT3, 0.0)], [0.3] * 11, [0.0] * 11))).net
    # 10 corners and 11 edges (Euler: 10 - 11 + 2 faces = 1); the 8 corners where two edges meet stand open
    assert int((net.kind == 0).sum()) == 11
    assert len(net.externals) == 16


def test_loop_is_seen_as_loop(chip):
    assert circuit_of(one_hexagon(chip, {}, 0.0)) is None


@pytest.mark.parametrize("loss_db", [0.0, 0.2])
@pytest.mark.parametrize("phase", [0.0, 0.11, 1.0, np.pi / 6])
def test_hexagon_is_an_add_drop_ring(chip, phase, loss_db):
    # two couplers of the ring part of the way open, four in bar; through port of an add-drop ring:
    # (t1 - t2 A) / (1 - t1 t2 A), drop power K1 K2 |A| / |1 - t1 t2 A|^2 (Yariv 2000, Bogaerts et al. 2012, from
    # memory), A the round trip of 6 phases and 6 losses; the bus passes one phase and one loss itself
    k1, k2 = 0.5, 0.8
    net = one_hexagon(chip, {0: k1, 3: k2}, phase, loss_db)
    power = np.abs(dense_response(net)) ** 2
    a = 10 ** (-6 * loss_db / 20) * np.exp(6j * phase)
    t1, t2 = np.cos(k1), np.cos(k2)
    place = {name: k for k, name in enumerate(net.outputs)}
    start, through = place[along(net, "e0", "a")], place[along(net, "e0", "b")]
    bus = 10 ** (-loss_db / 10)
    assert abs(power[through, start] - bus * abs((t1 - t2 * a) / (1 - t1 * t2 * a)) ** 2) <= EXACT
    drops = [place[along(net, "e3", side)] for side in "ab"]
    # the light leaves coupler 2 on one side of its bus only, half a ring on: which half depends on where it turns
    dropped = power[drops, start]
    half = np.sin(k1) ** 2 * np.sin(k2) ** 2 / abs(1 - t1 * t2 * a) ** 2
    assert dropped.min() <= EXACT
    assert any(abs(dropped.max() - half * 10 ** (-n * loss_db / 10)) <= EXACT for n in (3, 4))


def test_ring_goes_dark_at_critical_coupling(chip):
    # t1 = t2 |A| on resonance: no light passes (from memory, same papers)
    loss_db, t2 = 0.1, np.cos(0.4)
    k1 = np.arccos(t2 * 10 ** (-6 * loss_db / 20))
    net = one_hexagon(chip, {0: k1, 3: 0.4}, 0.0, loss_db)
    place = {name: k for k, name in enumerate(net.outputs)}
    power = np.abs(dense_response(net)) ** 2
    assert power[place[along(net, "e0", "b")], place[along(net, "e0", "a")]] <= EXACT


@pytest.mark.parametrize("seed", range(4))
def test_joined_hexagons_keep_all_light(chip, seed):
    rng = np.random.default_rng(seed)
    centres = [(0.0, 0.0), (ROOT3, 0.0)]
    toml = hexagonal_toml(centres, rng.uniform(0.1, 1.5, 11).round(6), rng.uniform(0, 6, 11).round(6))
    response = dense_response(load(chip(toml)).net)
    # energy balance and reciprocity of a lossless net; no mirror in it, so nothing returns to where it came in
    assert np.abs(response.conj().T @ response - np.eye(16)).max() <= EXACT
    assert np.abs(response - response.T).max() <= EXACT


def test_lossy_hexagons_lose_light_everywhere(chip):
    centres = [(0.0, 0.0), (ROOT3, 0.0)]
    response = dense_response(load(chip(hexagonal_toml(centres, [0.7] * 11, [0.2] * 11, 0.5))).net)
    kept = (np.abs(response) ** 2).sum(0)
    # every path passes at least one loss of 0.5 dB
    assert (kept <= 10**-0.05 + EXACT).all()
    assert np.linalg.eigvalsh(np.eye(16) - response.conj().T @ response).min() >= -EXACT


def test_bar_edges_carry_light_straight_through(chip):
    net = one_hexagon(chip, {}, 0.3)
    power = np.abs(dense_response(net)) ** 2
    # every outer lane joins the two ports at its ends; the closed ring inside is dark
    assert np.abs(np.sort(power, axis=0)[-1] - 1.0).max() <= EXACT
