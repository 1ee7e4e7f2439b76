"""Speed of the main parts as ratios to a reference timed in the same run: a table, and JSON with --json FILE.

python tests/bench/run.py [--small] [--json FILE] [--only WORD]
Each row is the median over interleaved pairs (reference, ours), so that a machine whose speed drifts drifts
for both. Rows to add: write a function that yields `Row`s and put it in STUDIES.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass
from pathlib import Path

import numpy as np
import scipy.linalg

MESHES = Path(__file__).resolve().parents[2] / "meshes"


@dataclass
class Row:
    """One comparison."""

    what: str
    against: str
    ours_ms: float
    reference_ms: float
    ratio: float
    bar: float | None = None  # ratio that is wished for; never asserted


def seconds(work: Callable[[], object]) -> float:
    started = time.perf_counter()
    work()
    return time.perf_counter() - started


def compare(what: str, against: str, ours: Callable, reference: Callable, pairs: int, bar: float | None) -> Row:
    """Median of `pairs` interleaved pairs, each side repeated until it takes a millisecond."""
    ours(), reference()
    again_ours = max(1, int(2e-3 / max(seconds(ours), 1e-7)))
    again_ref = max(1, int(2e-3 / max(seconds(reference), 1e-7)))
    mine, theirs = [], []
    for _ in range(pairs):
        theirs.append(seconds(lambda: [reference() for _ in range(again_ref)]) / again_ref)
        mine.append(seconds(lambda: [ours() for _ in range(again_ours)]) / again_ours)
    ratios = [a / b for a, b in zip(mine, theirs, strict=True)]
    return Row(
        what, against, 1e3 * statistics.median(mine), 1e3 * statistics.median(theirs), statistics.median(ratios), bar
    )


def haar(n: int) -> np.ndarray:
    rng = np.random.default_rng(n)
    q, _ = np.linalg.qr(rng.standard_normal((n, n)) + 1j * rng.standard_normal((n, n)))
    return q


def decompose(small: bool) -> Iterator[Row]:
    """The rectangular decomposition against a QR factorisation of the same matrix."""
    from meshctl.solver.decompose import rectangular

    for n, bar in ((8, None), (64, 2.5), (256, 4.0)):
        if small and n > 64:
            continue
        u = haar(n)
        yield compare(
            f"decompose N = {n}", "scipy.linalg.qr", lambda u=u: rectangular(u), lambda u=u: scipy.linalg.qr(u),
            7 if small else 31, bar,
        )  # fmt: skip


def propagate(small: bool) -> Iterator[Row]:
    """Blocks to matrix, and settings to matrix, against one complex matrix product of the same size."""
    from meshctl.mesh.meshfile import lattice
    from meshctl.mesh.response import Response
    from meshctl.optics.feedforward import propagate as kernel

    for n in (64, 128):
        mesh = lattice("rectangular", modes=n)
        response = Response(mesh.net, mesh.as_built)
        settings = np.random.default_rng(0).uniform(0, 2 * np.pi, mesh.net.n_settings)
        circuit, blocks = response.circuit, response.blocks(settings)
        u = haar(n)

        def run(circuit=circuit, blocks=blocks, n=n) -> None:
            real, imag = np.eye(n), np.zeros((n, n))
            kernel(circuit.lane_a, circuit.lane_b, blocks, real, imag)

        pairs = 11 if small else 51
        yield compare(f"propagate N = {n}", "complex product", run, lambda u=u: u @ u, pairs, 4.5)
        yield compare(
            f"settings to matrix N = {n}", "complex product",
            lambda r=response, s=settings: r.matrix(s), lambda u=u: u @ u, pairs, None,
        )  # fmt: skip


def gradient(small: bool) -> Iterator[Row]:
    """Matrix error and its derivative by every setting, against one complex matrix product of the same size."""
    from meshctl.mesh.meshfile import lattice
    from meshctl.mesh.response import Response
    from meshctl.solver.objective import MatrixError

    for n, bar in ((64, 25.0), (128, 50.0)):
        mesh = lattice("rectangular", modes=n, built=1)
        response, objective = Response(mesh.net, mesh.as_built), MatrixError(haar(n))
        settings = np.random.default_rng(0).uniform(0, 2 * np.pi, mesh.net.n_settings)

        def run(response=response, settings=settings, objective=objective) -> np.ndarray:
            return response.pullback(settings, lambda m: objective.evaluate(m[None])[1][0])

        u = haar(n)
        yield compare(
            f"value + gradient N = {n}", "complex product", run, lambda u=u: u @ u, 11 if small else 51, bar
        )  # fmt: skip


REFERENCE = """\
import numpy, numba, scipy.linalg
from meshctl_bench_kernel import total
total(numpy.ones(3))
"""
KERNEL = """\
from numba import njit
@njit("float64(float64[::1])", cache=True)
def total(x):
    s = 0.0
    for q in x:
        s += q
    return s
"""


def cpu_seconds(command: list[str], folder: str) -> float:
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    subprocess.run(command, cwd=folder, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return (after.ru_utime + after.ru_stime) - (before.ru_utime + before.ru_stime)


def startup(small: bool) -> Iterator[Row]:
    """Processor time of whole processes."""
    with tempfile.TemporaryDirectory() as folder:
        (Path(folder) / "reference.py").write_text(REFERENCE)
        (Path(folder) / "meshctl_bench_kernel.py").write_text(KERNEL)
        python = sys.executable
        bare = [python, "-c", "pass"]
        reference = [python, "reference.py"]
        ours = [python, "-m", "meshctl"]
        solve = [*ours, "solve", os.fspath(MESHES / "plover8"), "haar:7", "-o", "plan.json"]
        for what, against, mine, theirs, bar in (
            ("start: --help", "bare interpreter", [*ours, "--help"], bare, 8.0),
            ("start: plover8 solve", "numpy, numba, scipy.linalg, one kernel", solve, reference, 1.6),
        ):
            cpu_seconds(mine, folder), cpu_seconds(theirs, folder)
            pairs = [(cpu_seconds(theirs, folder), cpu_seconds(mine, folder)) for _ in range(3 if small else 11)]
            yield Row(
                what,
                against,
                1e3 * statistics.median(m for _, m in pairs),
                1e3 * statistics.median(t for t, _ in pairs),
                statistics.median(m / t for t, m in pairs),
                bar,
            )


def wave_system(rings: int) -> tuple:
    """Light both ways through a hexagonal mesh: its solver, the values of its parts, and the same as a linear system.

    Unknown are the waves a on linked ports: (I - P S) a = P S e, response S_E a + S_EE e for light e at the ends.
    """
    import scipy.sparse as sp

    from meshctl.mesh.meshfile import lattice
    from meshctl.mesh.response import Response

    mesh = lattice("hexagonal", rings=rings, cell="gap", built=1)
    response = Response(mesh.net, mesh.as_built)
    value = response.values(np.random.default_rng(0).uniform(0, 2 * np.pi, mesh.net.n_settings))
    waves, centre = response.waves, np.array([1550.0])
    entries = waves.entries(value, centre)
    pattern = waves.woven.pattern
    n = len(pattern.mate)
    s = sp.csc_matrix((entries[0], (pattern.s_out_port, pattern.s_in_port)), shape=(n, n))
    linked, ends = np.flatnonzero(pattern.mate >= 0), pattern.external_ports
    across = s[pattern.mate[linked]]
    system = sp.csc_matrix(sp.identity(len(linked)) - across[:, linked])
    right, out_inner, out_own = across[:, ends].toarray(), s[ends][:, linked], s[ends][:, ends].toarray()
    return waves, value, entries, system, right, out_inner, out_own


def scattering(small: bool) -> Iterator[Row]:
    """Nets with loops, all ports, per wavelength: against sparse and dense solves and a network library."""
    from scipy.sparse.linalg import splu

    from meshctl.optics.scattering import scatter, vjp
    from meshctl.optics.updater import Updater

    centre = np.array([1550.0])
    for rings, cells, bar, pairs in ((2, 30, None, 21), (6, 306, 1 / 3, 9), (18, 2862, 1 / 1.5, 5)):
        if small and rings > 2:
            continue
        waves, value, entries, system, right, out_inner, out_own = wave_system(rings)

        columns = np.ascontiguousarray(right.T)

        def sparse(system=system, columns=columns, out_inner=out_inner, out_own=out_own) -> np.ndarray:
            factors = splu(system)  # one column at a time: all at once takes several times as long
            return out_inner @ np.column_stack([factors.solve(column) for column in columns]) + out_own

        def ours(waves=waves, value=value) -> np.ndarray:
            return waves.matrix(value, centre)[0]

        assert np.abs(ours() - sparse()).max() < 1e-9
        yield compare(f"scattering {cells} cells", "scipy splu, its own ordering", ours, sparse, pairs, bar)
        if rings == 2:
            dense, inner = system.toarray(), out_inner.toarray()
            yield compare(
                "scattering 30 cells", "numpy dense solve", ours,
                lambda d=dense, r=right, i=inner, o=out_own: i @ np.linalg.solve(d, r) + o, pairs, None,
            )  # fmt: skip
            yield compare("scattering 30 cells", "scikit-rf, link by link", ours, network_join(waves, entries), 5, None)
        if rings == 18:
            continue
        pattern, kept = waves.woven.pattern, [scatter(waves.woven.pattern, entries, keep=True)]
        g = np.ones_like(kept[0].response)

        def value_only(pattern=pattern, entries=entries, kept=kept) -> None:
            kept[0] = scatter(pattern, entries, keep=True, reuse=kept[0])

        def gradient(kept=kept, g=g, again=value_only) -> None:
            again()
            vjp(kept[0], g)

        yield compare(f"value + gradient, {cells} cells", "value alone", gradient, value_only, pairs, 3.0)
        update = Updater(scatter(pattern, entries, keep=True))
        cell = cells // 2
        changed = entries[:, update.entries(cell)] * np.exp(0.1j)
        yield compare(
            f"one changed cell, {cells} cells", "own fresh solve", lambda u=update, k=cell, c=changed: u.response(k, c),
            lambda p=pattern, e=entries: scatter(p, e), pairs, 1 / 3 if rings == 6 else None,
        )  # fmt: skip


def network_join(waves, entries: np.ndarray) -> Callable[[], np.ndarray]:
    import skrf

    pattern = waves.woven.pattern
    n = len(pattern.mate)
    s = np.zeros((1, n, n), complex)
    s[:, pattern.s_out_port, pattern.s_in_port] = entries

    def join() -> np.ndarray:
        joined, left = s, list(range(n))
        for p, q in enumerate(pattern.mate.tolist()):
            if q > p:
                joined = skrf.network.innerconnect_s(joined, left.index(p), left.index(q))
                left = [port for port in left if port not in (p, q)]
        return joined

    return join


def spectrum(small: bool) -> Iterator[Row]:
    """A thousand wavelengths of a shipped mesh with loops against starting the process at all."""
    from meshctl.mesh.meshfile import load
    from meshctl.mesh.response import Response

    mesh = load(MESHES / "curlew")
    response = Response(mesh.net, mesh.as_built)
    settings = np.random.default_rng(0).uniform(0, 2 * np.pi, mesh.net.n_settings)
    waves = np.linspace(1540, 1560, 1000)
    start = [sys.executable, "-c", "import meshctl.session"]
    yield compare(
        "curlew, 1000 wavelengths", "start of the process", lambda: response.matrix(settings, waves),
        lambda: subprocess.run(start, check=True, cwd=MESHES.parent), 3 if small else 9, 1.0,
    )  # fmt: skip


def within(what: str, wish: str, work: Callable, wish_s: float, repeats: int) -> Row:
    """The least of some runs against a time that is wished for."""
    work()
    least = min(seconds(work) for _ in range(repeats))
    return Row(what, wish, 1e3 * least, 1e3 * wish_s, least / wish_s, 1.0)


def wraps(small: bool) -> Iterator[Row]:
    """Whole turns of 4032 heaters against the factorisation of their crosstalk before it."""
    from meshctl.drive.crosstalk import Crosstalk
    from meshctl.drive.wraps import least_power_wraps
    from meshctl.mesh.lattices import assemble, rectangular
    from meshctl.mesh.neighbours import from_positions

    modes = 16 if small else 64
    cells = assemble(rectangular(modes), "mzi", (500.0, 100.0)).cell_xy_um
    upper = np.concatenate([cells + np.array([-125.0, 25.0]), cells + np.array([125.0, 25.0])])
    for signed in (False, True):
        lower = upper - np.array([0.0, 50.0]) if signed else np.full_like(upper, np.nan)
        matrix = from_positions(upper, lower, 0.4, 100.0, "exponential", keep_above=1e-6)
        n = len(upper)
        wanted = np.random.default_rng(8).uniform(-0.5, 0.5, n)
        crosstalk, every = Crosstalk(matrix), np.ones(n)
        yield compare(
            f"whole turns of {n}, {'signed' if signed else 'positive'}", "one sparse factorisation",
            lambda c=crosstalk, w=wanted, one=every: least_power_wraps(w, one > 0, c, 0 * one, 1.3 * one, one),
            lambda m=matrix: Crosstalk(m), 5 if small else 15, 1.0,
        )  # fmt: skip


def routing(small: bool) -> Iterator[Row]:
    """Permutations in closed form, and sets of routes through hexagons, proofs of impossibility included."""
    from meshctl.mesh.meshfile import lattice
    from meshctl.solver.permute import permuter
    from meshctl.solver.reach import full_reach
    from meshctl.solver.route import find_routes
    from meshctl.solver.waves import route_graph
    from meshctl.solver.wish import parse_wish

    for shape in ("rectangular", "benes"):
        mesh = lattice(shape, modes=32 if small else 256)
        graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
        form, order = permuter(graph), np.random.default_rng(0).permutation(len(mesh.net.inputs))
        yield within(f"permutation, {shape} {len(order)}", "5 ms", lambda f=form, o=order: f.states(o), 5e-3, 5)
    for rings, wish_s in ((6, 2.0), (11, 10.0)):
        if small and rings > 6:
            continue
        mesh = lattice("hexagonal", rings=rings, cell="gap")
        graph = route_graph(mesh.net, mesh.as_built, full_reach(mesh.net.setting_is_angle))
        rng = np.random.default_rng(rings)
        worst: list[float] = []
        for count in (5, 10):
            ports = rng.permutation(len(mesh.net.inputs))[: 2 * count] + 1
            wishes = [parse_wish(f"p{a}:p{b}") for a, b in zip(ports[::2], ports[1::2], strict=True)]
            worst.append(seconds(lambda w=wishes, g=graph: find_routes(g, w, seconds=60.0)))
        row = f"verdict on random routes, {mesh.net.n_cells} cells"
        yield Row(row, f"{wish_s:g} s", 1e3 * max(worst), 1e3 * wish_s, max(worst) / wish_s, 1.0)


def first_solve(small: bool) -> Iterator[Row]:
    """The first solve of a large lattice, ordering included."""
    from meshctl.mesh.meshfile import lattice
    from meshctl.mesh.response import Response

    mesh = lattice("hexagonal", rings=4 if small else 18, cell="gap")
    settings = np.random.default_rng(0).uniform(0, 3, mesh.net.n_settings)
    took = seconds(lambda: Response(mesh.net, mesh.as_built).matrix(settings))
    yield Row(f"first solve of {mesh.net.n_cells} cells", "10 s", 1e3 * took, 1e4, took / 10.0, 1.0)


MEMORY = """\
import sys
from pathlib import Path
from meshctl import lattice, solve
from meshctl.mesh.spread import Spread
from meshctl.tolerances.trials import run_trials, task_of
mesh = lattice("rectangular", modes=int(sys.argv[2]))
task = task_of(mesh, solve(mesh, "haar:1"), spread=Spread(split_rad=0.01, phase_rad=0.01))
run_trials(task, int(sys.argv[1]))
# the rusage of a process counts what its parent held before: the kernel's own mark of this program alone
print(int(Path("/proc/self/status").read_text().split("VmHWM:")[1].split()[0]) / 1024)
"""


ONE_CORE = "OPENBLAS_NUM_THREADS"


def trials(small: bool) -> Iterator[Row]:
    """Dies of a tolerance run by the core: in a process whose matrix products keep to one core, too."""
    with tempfile.TemporaryDirectory() as folder:
        rows = Path(folder) / "rows.json"
        command = [sys.executable, __file__, "--only", "dies_on_one_core", "--json", os.fspath(rows)]
        subprocess.run(
            [*command, *(["--small"] if small else [])],
            check=True,
            stdout=subprocess.DEVNULL,
            env={**os.environ, ONE_CORE: "1"},
        )
        yield from (Row(**row) for row in json.loads(rows.read_text()))


def dies_on_one_core(small: bool) -> Iterator[Row]:
    """One die of a tolerance run, drawn, set and measured, against one complex matrix product of its size."""
    from meshctl.api import solve
    from meshctl.mesh.meshfile import lattice
    from meshctl.mesh.spread import Spread
    from meshctl.tolerances.budget import budget_of
    from meshctl.tolerances.trials import task_of

    spread, dies = Spread(split_rad=0.01, phase_rad=0.01), 100 if small else 1000
    for n in (16,) if small else (16, 64):
        mesh, u = lattice("rectangular", modes=n), haar(n)
        plan = solve(mesh, "haar:1")
        for policy, bar in (("as-set", 8.0), ("corrected", 40.0)):
            task = task_of(mesh, plan, spread=spread, policy=policy)
            mine, theirs = [], []
            task.die(0)
            for k in range(0, dies, 50):
                theirs.append(seconds(lambda u=u: [u @ u for _ in range(500)]) / 500)
                mine.append(seconds(lambda k=k, task=task: [task.die(k + j) for j in range(50)]) / 50)
            ratios = [a / b for a, b in zip(mine, theirs, strict=True)]
            yield Row(
                f"{policy} die N = {n}, mean of {dies}", "complex product", 1e3 * statistics.median(mine),
                1e3 * statistics.median(theirs), statistics.median(ratios), bar if n == 64 else None,
            )  # fmt: skip
        task = task_of(mesh, plan, spread=spread)
        yield within(f"budget of errors N = {n}", "1 s, wished", lambda task=task: budget_of(task), 1.0, 1)
    size = "8" if small else "64"
    few, many = (
        float(subprocess.run([sys.executable, "-c", MEMORY, count, size], capture_output=True, check=True).stdout)
        for count in ("1000", "10000")
    )
    yield Row(f"MB more for 10000 dies N = {size}", "50 MB over 1000 dies", many - few, 50.0, (many - few) / 50.0, 1.0)


STUDIES: tuple[Callable[[bool], Iterator[Row]], ...] = (
    decompose,
    propagate,
    gradient,
    startup,
    scattering,
    spectrum,
    wraps,
    routing,
    first_solve,
    trials,
)


def main() -> None:
    words = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    words.add_argument("--small", action="store_true", help="a smoke test: few repetitions, small sizes")
    words.add_argument("--json", metavar="FILE")
    words.add_argument("--only", metavar="WORD", help="studies whose name holds this word")
    chosen = words.parse_args()
    rows = []
    print(f"{'what':<38}{'against':<42}{'ours ms':>10}{'ref ms':>10}{'ratio':>8}{'bar':>7}")
    studies = STUDIES if chosen.only != dies_on_one_core.__name__ else (dies_on_one_core,)
    for study in studies:
        if chosen.only and chosen.only not in study.__name__:
            continue
        for row in study(chosen.small):
            rows.append(row)
            bar = "" if row.bar is None else f"{row.bar:.3g}"
            print(
                f"{row.what:<38}{row.against:<42}{row.ours_ms:>10.3f}{row.reference_ms:>10.3f}{row.ratio:>8.2f}{bar:>7}",
                flush=True,
            )
    if chosen.json:
        Path(chosen.json).write_text(json.dumps([asdict(row) for row in rows], indent=1) + "\n")


if __name__ == "__main__":
    main()
