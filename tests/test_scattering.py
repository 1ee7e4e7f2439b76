"""Light through nets with loops and reflections, against closed forms and other solvers.

Numbers of equations and sections of the works named below are from memory.
"""

from types import SimpleNamespace

import numpy as np
import pytest

from meshctl.errors import UnsoundNet, WrongSize
from meshctl.mesh.plane import hexagonal, square, trigrid
from meshctl.optics.dissection import dissect
from meshctl.optics.elements import coupler_block
from meshctl.optics.scattering import compile_pattern, fields, jvp, scatter, vjp
from meshctl.optics.updater import Updater

EXACT = 1e-13  # some hundred rounding errors of fields of order one


# ---- nets by hand: parts as matrices over their ports
def coupler(angle_rad, amplitude=1.0):
    block = amplitude * coupler_block(angle_rad)  # b from a; light from b to a sees the transpose
    return np.block([[np.zeros((2, 2)), block.T], [block, np.zeros((2, 2))]])


def guide(amplitude):
    return np.array([[0, amplitude], [amplitude, 0]])


def mirror(r):
    t = 1j * np.sqrt(1 - r * r)
    return np.array([[r, t], [t, r]])


def net(parts, links, external, cell_of=None, cell_xy=None, full=False):
    """Compile parts (matrices); ports count on through the parts."""
    sizes = [len(part) for part in parts]
    start = np.concatenate([[0], np.cumsum(sizes)])
    mate = np.full(start[-1], -1)
    for p, q in links:
        mate[p], mate[q] = q, p
    out, into, values = [], [], []
    for first, part in zip(start, parts, strict=False):
        rows, columns = np.nonzero(np.ones_like(part) if full else part)
        out.append(first + rows)
        into.append(first + columns)
        values.append(part[rows, columns])
    cells = np.full(len(parts), -1) if cell_of is None else cell_of
    out, into = np.concatenate(out), np.concatenate(into)
    pattern = compile_pattern(start, mate, out, into, cells, external, cell_xy)
    return SimpleNamespace(pattern=pattern, values=np.concatenate(values)[None], mate=mate, start=start)


def respond(parts, links, external):
    made = net(parts, links, external)
    found = scatter(made.pattern, made.values)
    assert found.residual.max() <= 1e-12
    return found.response[0]


def lattice_net(lattice, rng, loss=0.99, reflection=0.0, cells=True, **options):
    """Every cell: two common phases, then a coupler, each with a random reflection at every port."""
    parts, links = [], []
    for c in range(lattice.n_cells):
        phase = loss * np.exp(1j * rng.uniform(0, 2 * np.pi))
        parts += [guide(phase), guide(phase), coupler(rng.uniform(0, np.pi / 2), loss)]
        links += [(8 * c + 1, 8 * c + 4), (8 * c + 3, 8 * c + 5)]
    ends = (8 * np.arange(lattice.n_cells)[:, None] + np.array([0, 2, 6, 7])).ravel()
    links += [(ends[p], ends[q]) for p, q in enumerate(lattice.mate) if q > p]
    if reflection:
        diagonal = [np.diag(reflection * np.exp(2j * np.pi * rng.random(len(p)))) for p in parts]
        parts = [p * np.sqrt(1 - 4 * reflection) + d for p, d in zip(parts, diagonal, strict=True)]
    cell_of = np.repeat(np.arange(lattice.n_cells), 3) if cells else None
    return net(parts, links, ends[lattice.rim], cell_of, lattice.cell_xy if cells else None, **options)


def dense(made):
    """The whole linear system at once: b = S a, a = P b on linked ports."""
    pattern, n = made.pattern, len(made.mate)
    s = np.zeros((len(made.values), n, n), complex)
    s[:, pattern.s_out_port, pattern.s_in_port] = made.values
    linked, ext = np.flatnonzero(made.mate >= 0), pattern.external_ports
    across = made.mate[linked][:, None]
    inner = np.linalg.solve(np.eye(len(linked)) - s[:, across, linked], s[:, across, ext])
    return s[:, ext[:, None], ext] + s[:, ext[:, None], linked] @ inner


# ---- closed forms
@pytest.mark.parametrize("phase", [0.0, 0.4, np.pi, 6.0])
def test_all_pass_ring_matches_closed_form(phase):
    k, a = 0.7, 0.93
    ring = a * np.exp(1j * phase)
    found = respond([coupler(k), guide(ring)], [(3, 4), (5, 1)], [0, 2])
    # Yariv, Electron. Lett. 36 (2000) 321, with coupling i sin k
    assert found[1, 0] == pytest.approx((np.cos(k) - ring) / (1 - np.cos(k) * ring), abs=EXACT)
    assert abs(found - found.T).max() < EXACT
    assert found[0, 0] == found[1, 1] == 0


@pytest.mark.parametrize("phase", [0.0, 1.1, 3.0])
def test_add_drop_ring_matches_closed_form(phase):
    k1, k2 = 0.5, 0.8
    half = 0.97 * np.exp(0.5j * phase)
    parts = [coupler(k1), coupler(k2), guide(half), guide(half)]
    # ring: first b2 -> guide -> second a2, second b2 -> guide -> first a2; bus ports a1, b1
    found = respond(parts, [(3, 8), (9, 5), (7, 10), (11, 1)], [0, 2, 4, 6])
    c1, c2, turn = np.cos(k1), np.cos(k2), half**2
    # Bogaerts et al., Laser Photon. Rev. 6 (2012) 47, eqs. 5 and 6, with coupling i sin k
    assert found[1, 0] == pytest.approx((c1 - c2 * turn) / (1 - c1 * c2 * turn), abs=EXACT)
    drop = -np.sin(k1) * np.sin(k2) * half / (1 - c1 * c2 * turn)
    assert found[3, 0] == pytest.approx(drop, abs=EXACT)


def test_two_coupled_rings_match_closed_form():
    k1, k2, first, second = 0.6, 0.3, 0.98 * np.exp(0.2j), 0.95 * np.exp(-0.1j)
    # inner ring hangs on the outer one, which is cut in two halves around their coupler
    parts = [coupler(k1), coupler(k2), guide(first), guide(second)]
    found = respond(parts, [(3, 4), (6, 8), (9, 1), (7, 10), (11, 5)], [0, 2])
    # an all-pass ring whose round trip holds another (nested Yariv form)
    inner = (np.cos(k2) - second) / (1 - np.cos(k2) * second)
    expected = (np.cos(k1) - first * inner) / (1 - np.cos(k1) * first * inner)
    assert found[1, 0] == pytest.approx(expected, abs=EXACT)


def test_sagnac_loop_is_a_mirror():
    k, loop = 0.35, 0.9 * np.exp(0.8j)
    found = respond([coupler(k), guide(loop)], [(2, 4), (5, 3)], [0, 1])
    # Mortimore, J. Lightwave Technol. 6 (1988) 1217: both ways round the loop interfere
    assert found[0, 0] == pytest.approx(2j * np.cos(k) * np.sin(k) * loop, abs=EXACT)
    assert found[1, 0] == pytest.approx(np.cos(2 * k) * loop, abs=EXACT)


@pytest.mark.parametrize("phase", [0.0, 0.3, np.pi / 2])
def test_two_mirrors_follow_airy(phase):
    r = 0.9
    found = respond([mirror(r), guide(np.exp(1j * phase)), mirror(r)], [(1, 2), (3, 4)], [0, 5])
    # Airy: Born and Wolf, Principles of Optics, 7.6.1 (no loss): T = 1 / (1 + F sin^2 phase)
    contrast = 4 * r**2 / (1 - r**2) ** 2
    assert abs(found[1, 0]) ** 2 == pytest.approx(1 / (1 + contrast * np.sin(phase) ** 2), rel=1e-12)
    assert abs(found[0, 0]) ** 2 + abs(found[1, 0]) ** 2 == pytest.approx(1, abs=EXACT)


def test_nearly_dark_ring_stays_within_its_condition():
    k = 1e-5  # lossless, at resonance: the round trip is within k^2 / 2 of one
    found = respond([coupler(k), guide(1.0)], [(3, 4), (5, 1)], [0, 2])
    # Yariv as above: (c - 1) / (1 - c) = -1; condition 2 / k^2, ten times rounding allowed
    assert found[1, 0] == pytest.approx(-1, abs=10 * np.finfo(float).eps * 2 / k**2)


def test_pieces_apart_do_not_meet():
    # two all-pass rings and a closed ring of its own, which stays dark
    parts = [coupler(0.4), coupler(0.9), guide(np.exp(0.3j))]
    found = respond(parts, [(1, 3), (5, 7), (8, 9)], [0, 2, 4, 6])
    # Yariv as above with a round trip of one: full transmission with sign -1
    assert np.allclose(found, -np.kron(np.eye(2), [[0, 1], [1, 0]]), rtol=0, atol=EXACT)


def test_part_without_links_is_itself():
    found = respond([coupler(0.4)], [], [0, 1, 2, 3])
    assert np.array_equal(found, coupler(0.4))


# ---- other solvers
LATTICES = {"hexagons": hexagonal(2), "squares": square(3, 3), "triangles": trigrid(2, 3)}


@pytest.mark.parametrize("reflection", [0.0, 0.05])
@pytest.mark.parametrize("shape", LATTICES)
def test_lattices_agree_with_dense_solve(shape, reflection):
    made = lattice_net(LATTICES[shape], np.random.default_rng(1), reflection=reflection)
    found = scatter(made.pattern, made.values)
    # 1e-12: a few hundred parts of amplitude below one
    assert abs(found.response - dense(made)).max() < 1e-12
    assert found.residual.max() <= 1e-12
    assert abs(found.response - found.response.swapaxes(1, 2)).max() < EXACT


def joined_by_reference(made):
    """The same net in an RF network library: all parts side by side, links closed one by one."""
    import skrf

    pattern, n = made.pattern, len(made.mate)
    s = np.zeros((len(made.values), n, n), complex)
    s[:, pattern.s_out_port, pattern.s_in_port] = made.values
    left = list(range(n))
    for p, q in enumerate(made.mate.tolist()):
        if q > p:
            s = skrf.network.innerconnect_s(s, left.index(p), left.index(q))
            left = [port for port in left if port not in (p, q)]
    order = [left.index(port) for port in pattern.external_ports]
    return s[:, order][:, :, order]


@pytest.mark.parametrize("reflection", [0.0, 0.05])
def test_random_hexagons_agree_with_scikit_rf(reflection):
    made = lattice_net(hexagonal(2), np.random.default_rng(2), reflection=reflection)
    found = scatter(made.pattern, made.values)
    assert found.response.shape == (1, 36, 36)
    # scikit-rf 2.2 `innerconnect_s`; the bound is the project's own
    assert abs(found.response - joined_by_reference(made)).max() <= 1e-10


@pytest.mark.sample
@pytest.mark.slow
def test_six_rings_agree_with_dense_solve():
    made = lattice_net(hexagonal(6), np.random.default_rng(3), reflection=0.03)
    found = scatter(made.pattern, made.values)
    assert abs(found.response - dense(made)).max() <= 1e-10
    assert found.residual.max() <= 1e-12


def test_order_of_joining_does_not_matter():
    placed = lattice_net(hexagonal(2), np.random.default_rng(4), reflection=0.02)
    loose = lattice_net(hexagonal(2), np.random.default_rng(4), reflection=0.02, cells=False)
    a, b = (scatter(m.pattern, m.values).response for m in (placed, loose))
    assert abs(a - b).max() < 1e-12


def test_unused_entries_do_not_matter():
    tight = lattice_net(hexagonal(2), np.random.default_rng(5))
    full = lattice_net(hexagonal(2), np.random.default_rng(5), full=True)
    assert full.pattern.n_entries > tight.pattern.n_entries
    assert (
        abs(scatter(full.pattern, full.values).response - scatter(tight.pattern, tight.values).response).max() < 1e-12
    )


def test_chosen_ports_give_their_submatrix():
    made = lattice_net(hexagonal(2), np.random.default_rng(6))
    whole = scatter(made.pattern, made.values).response
    part = scatter(made.pattern, made.values, inputs=[7, 2], outputs=[30, 2, 11])
    assert abs(part.response - whole[:, [30, 2, 11]][:, :, [7, 2]]).max() < 1e-12
    assert part.pattern.fronts.size < made.pattern.fronts.size


# ---- physics
@pytest.mark.parametrize("shape", LATTICES)
def test_lossless_lattices_keep_all_power(shape):
    made = lattice_net(LATTICES[shape], np.random.default_rng(7), loss=1.0)
    found = scatter(made.pattern, made.values)
    power = (abs(found.response[0]) ** 2).sum(axis=0)
    # conservation of energy; 1e-11 allows loops that ring a hundredfold
    assert abs(power - 1).max() < 1e-11


def test_lost_power_is_lost_in_parts():
    made = lattice_net(hexagonal(2), np.random.default_rng(8), reflection=0.04)
    solved = scatter(made.pattern, made.values, keep=True)
    entering, leaving = fields(solved, np.eye(36)[5])
    ext = made.pattern.external_ports
    lost = (abs(entering) ** 2 - abs(leaving) ** 2).sum()
    # conservation of energy over all ports of all parts
    assert lost == pytest.approx(1 - (abs(leaving[0, ext]) ** 2).sum(), abs=1e-12)
    linked = np.flatnonzero(made.mate >= 0)
    assert abs(entering[0, linked] - leaving[0, made.mate[linked]]).max() < EXACT
    assert abs(leaving[0, ext] - solved.response[0, :, 5]).max() < EXACT


@pytest.mark.parametrize(("shape", "sets"), [("squares", 2), ("triangles", 2), ("hexagons", 1)])
def test_counter_propagating_sets_are_found(shape, sets):
    lattice = LATTICES[shape]
    made = lattice_net(lattice, np.random.default_rng(9))
    response = abs(scatter(made.pattern, made.values).response[0]) > 0
    groups = {tuple(np.flatnonzero(row)) for row in response}
    # squares and triangles: half of the ends reach the other half; hexagons mix all (two-colourings of faces)
    assert len(groups) == sets
    assert all(len(group) == len(lattice.rim) // sets for group in groups)


def test_closed_dark_loops_hold_no_light():
    lattice = hexagonal(2)
    parts = [coupler(0.0) for _ in range(lattice.n_cells)]  # all bar, lossless, in phase: seven closed rings
    links = [(p, q) for p, q in enumerate(lattice.mate) if q > p]
    made = net(parts, links, lattice.rim)
    found = scatter(made.pattern, made.values, keep=True)
    assert found.dark_loops.tolist() == [2 * lattice.faces]  # each ring in both directions
    assert found.residual[0] < EXACT
    assert np.array_equal(abs(found.response[0]).sum(axis=0), np.ones(36))
    entering, _ = fields(found, np.ones(36))
    # light from outside passes one cell along the rim and leaves; no other port is lit
    assert np.array_equal(np.flatnonzero(entering[0]), np.sort(lattice.rim))


# ---- derivatives
def random_change(pattern, rng, waves=1):
    change = rng.normal(size=(waves, pattern.n_entries)) + 1j * rng.normal(size=(waves, pattern.n_entries))
    return change + change[:, pattern.mirror]


@pytest.mark.parametrize("shape", LATTICES)
@pytest.mark.parametrize("reflection", [0.0, 0.05])
def test_derivatives_agree_with_central_differences(shape, reflection):
    rng = np.random.default_rng(10)
    made = lattice_net(LATTICES[shape], rng, reflection=reflection)
    change = random_change(made.pattern, rng)
    solved = scatter(made.pattern, made.values, keep=True)
    step = 1e-6
    up, down = (scatter(made.pattern, made.values + s * change).response for s in (step, -step))
    numeric = (up - down) / (2 * step)
    # central differences: step^2 plus rounding / step, relative to the largest entry
    scale = abs(numeric).max()
    assert abs(jvp(solved, change) - numeric).max() < 1e-7 * scale
    cotangent = rng.normal(size=numeric.shape) + 1j * rng.normal(size=numeric.shape)
    along = (vjp(solved, cotangent).conj() * change).sum().real
    assert along == pytest.approx((cotangent.conj() * jvp(solved, change)).sum().real, rel=1e-11, abs=1e-11 * scale)


def test_derivative_of_chosen_ports_agrees():
    rng = np.random.default_rng(11)
    made = lattice_net(hexagonal(2), rng, reflection=0.02)
    change = random_change(made.pattern, rng)
    solved = scatter(made.pattern, made.values, inputs=[1, 9, 4], outputs=[4, 20], keep=True)
    cotangent = rng.normal(size=(1, 2, 3)) + 1j * rng.normal(size=(1, 2, 3))
    # the two derivatives are built differently: reverse elimination, and a(i)^T dS a(j)
    along = (vjp(solved, cotangent).conj() * change).sum().real
    assert along == pytest.approx((cotangent.conj() * jvp(solved, change)).sum().real, rel=1e-11)


@pytest.mark.sample
@pytest.mark.slow
def test_derivative_agrees_with_jax():
    import jax
    import jax.numpy as jnp

    with jax.enable_x64(True):
        made = lattice_net(hexagonal(2), np.random.default_rng(12), reflection=0.03)
        pattern, n = made.pattern, len(made.mate)
        linked, ext = np.flatnonzero(made.mate >= 0), pattern.external_ports
        target = np.random.default_rng(13).random((36, 36)) * 0.1

        def objective(values):
            s = jnp.zeros((n, n), complex).at[pattern.s_out_port, pattern.s_in_port].add(values)
            across = made.mate[linked][:, None]
            inner = jnp.linalg.solve(jnp.eye(len(linked)) - s[across, linked], s[across, ext])
            response = s[ext[:, None], ext] + s[ext[:, None], linked] @ inner
            return ((jnp.abs(response) ** 2 - target) ** 2).sum()

        expected = np.array(jax.grad(objective)(jnp.asarray(made.values[0]))).conj()  # jax conjugates
    solved = scatter(pattern, made.values, keep=True)
    cotangent = 4 * (abs(solved.response) ** 2 - target) * solved.response
    found = vjp(solved, cotangent)[0]
    # jax differentiates by each entry alone; a reciprocal part moves an entry and its reverse together
    expected = 0.5 * (expected + expected[pattern.mirror])
    assert abs(found - expected).max() < 1e-11 * abs(expected).max()


def test_derivative_at_exact_bar_is_complete():
    rng = np.random.default_rng(21)
    lattice = hexagonal(2)
    angles = np.where(rng.random(lattice.n_cells) < 0.5, 0.0, np.pi / 2)  # zeros where light may turn up
    parts = [0.98 * coupler(k) for k in angles]
    links = [(p, q) for p, q in enumerate(lattice.mate) if q > p]
    made = net(parts, links, lattice.rim, full=True)
    solved = scatter(made.pattern, made.values, keep=True)
    change = random_change(made.pattern, rng)
    cotangent = rng.normal(size=solved.response.shape) + 1j * rng.normal(size=solved.response.shape)
    step = 1e-6
    up, down = (scatter(made.pattern, made.values + s * change).response for s in (step, -step))
    numeric = (cotangent.conj() * (up - down)).sum().real / (2 * step)
    # central differences, as above
    assert (vjp(solved, cotangent).conj() * change).sum().real == pytest.approx(numeric, rel=1e-6)


def test_kept_numbers_are_reused_only_once():
    made = lattice_net(hexagonal(2), np.random.default_rng(22))
    first = scatter(made.pattern, made.values, keep=True)
    expected = vjp(first, first.response)
    second = scatter(made.pattern, made.values, keep=True, reuse=first)
    assert np.array_equal(vjp(second, second.response), expected)
    with pytest.raises(ValueError, match="overwritten"):
        vjp(first, first.response)
    with pytest.raises(ValueError, match="keep=True"):
        vjp(scatter(made.pattern, made.values), first.response)


# ---- one changed part
@pytest.mark.parametrize("reflection", [0.0, 0.05])
@pytest.mark.parametrize("cells", [True, False])
def test_changed_part_agrees_with_fresh_solve(reflection, cells):
    made = lattice_net(hexagonal(2), np.random.default_rng(14), reflection=reflection, cells=cells)
    other = lattice_net(hexagonal(2), np.random.default_rng(15), reflection=reflection, cells=cells)
    update = Updater(scatter(made.pattern, made.values, keep=True))
    for part in (0, 13, 29):  # on the rim and inside
        rows = update.entries(part)
        changed = made.values.copy()
        changed[:, rows] = other.values[:, rows]
        fresh = scatter(made.pattern, changed).response
        assert abs(fresh - scatter(made.pattern, made.values).response).max() > 1e-3
        assert abs(update.response(part, changed[:, rows]) - fresh).max() < 1e-12


def test_changed_part_of_chosen_ports_agrees():
    made = lattice_net(hexagonal(2), np.random.default_rng(16))
    ports = {"inputs": [3, 17], "outputs": [30, 3, 5]}
    update = Updater(scatter(made.pattern, made.values, **ports, keep=True))
    rows = update.entries(8)
    changed = made.values.copy()
    changed[:, rows] *= np.exp(0.4j)
    fresh = scatter(made.pattern, changed, **ports).response
    assert abs(update.response(8, changed[:, rows]) - fresh).max() < 1e-12


# ---- many wavelengths, large nets
def test_wavelengths_do_not_touch_each_other():
    rng = np.random.default_rng(17)
    made = lattice_net(hexagonal(2), rng)
    values = made.values * np.exp(1j * rng.uniform(0, 0.01, (5, 1)))
    together = scatter(made.pattern, values).response
    alone = [scatter(made.pattern, v[None]).response[0] for v in values]
    assert np.array_equal(together, np.array(alone))


@pytest.mark.slow
def test_eighteen_rings_solve_without_residual():
    made = lattice_net(hexagonal(18), np.random.default_rng(18))
    found = scatter(made.pattern, made.values)
    assert found.residual.max() <= 1e-12


@pytest.mark.parametrize("places", [True, False])
def test_halving_closes_every_link_once(places):
    lattice = hexagonal(4)
    low = np.flatnonzero(lattice.mate > np.arange(len(lattice.mate)))
    links = np.column_stack([low // 4, lattice.mate[low] // 4])
    halving = dissect(lattice.n_cells, links, lattice.cell_xy if places else None)
    assert np.array_equal(np.sort(halving.closed), np.arange(len(links)))
    # the outermost cut crosses about a diameter of the lattice, 2 R cells of two links, not its area
    assert halving.first[-1] - halving.first[-2] <= 2 * (2 * 4 + 2)


# ---- wrong input
def test_part_that_is_not_reciprocal_is_refused():
    made = lattice_net(hexagonal(1), np.random.default_rng(19))
    values = made.values.copy()
    values[0, 4] *= 1.001
    with pytest.raises(UnsoundNet, match=r"element 2 is not reciprocal: S\[0, 2\] is .*; they may differ by 1e-09"):
        scatter(made.pattern, values)
    values[0, 4] = np.nan
    with pytest.raises(UnsoundNet, match="element 2 is not reciprocal"):
        scatter(made.pattern, values)


@pytest.mark.parametrize(
    ("mate", "out", "into", "external", "message"),
    [
        ([1, 2, 1, -1], [0], [0], [3], "port 0 is linked to port 1, which is linked elsewhere"),
        ([1, 0, -1, -1], [0], [0], [0], "port 0 is external and linked"),
        ([1, 0, -1, -1], [0], [0], [2, 2], "listed twice"),
        ([-1, -1, -1, -1], [0], [1], [0, 1], "from port 1 to port 0 and none back"),
        ([-1, -1, -1, -1], [0, 0], [0, 0], [0, 1], "an entry of S is listed twice"),
        ([-1, -1, -1, -1], [0, 2], [2, 0], [0, 1], "goes from port 2 of one element to 0 of another"),
    ],
)
def test_unsound_nets_are_refused_in_words(mate, out, into, external, message):
    with pytest.raises(UnsoundNet, match=message):
        compile_pattern([0, 2, 4], mate, out, into, [-1, -1], external)


def test_values_of_wrong_size_are_refused():
    made = lattice_net(hexagonal(1), np.random.default_rng(20))
    with pytest.raises(WrongSize, match=r"S values have shape \(1, 5\); this net takes \(W, 72\)"):
        scatter(made.pattern, made.values[:, :5])
    solved = scatter(made.pattern, made.values, keep=True)
    with pytest.raises(WrongSize, match="the response"):
        vjp(solved, np.zeros((1, 2, 2)))
    with pytest.raises(WrongSize, match="there is no part 99"):
        Updater(solved).prepare(99)
