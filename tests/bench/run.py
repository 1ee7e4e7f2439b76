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


STUDIES: tuple[Callable[[bool], Iterator[Row]], ...] = (decompose, propagate, startup)


def main() -> None:
    words = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    words.add_argument("--small", action="store_true", help="a smoke test: few repetitions, small sizes")
    words.add_argument("--json", metavar="FILE")
    words.add_argument("--only", metavar="WORD", help="studies whose name holds this word")
    chosen = words.parse_args()
    rows = []
    print(f"{'what':<34}{'against':<42}{'ours ms':>10}{'ref ms':>10}{'ratio':>8}{'bar':>7}")
    for study in STUDIES:
        if chosen.only and chosen.only not in study.__name__:
            continue
        for row in study(chosen.small):
            rows.append(row)
            bar = "" if row.bar is None else f"{row.bar:g}"
            print(
                f"{row.what:<34}{row.against:<42}{row.ours_ms:>10.3f}{row.reference_ms:>10.3f}{row.ratio:>8.2f}{bar:>7}",
                flush=True,
            )
    if chosen.json:
        Path(chosen.json).write_text(json.dumps([asdict(row) for row in rows], indent=1) + "\n")


if __name__ == "__main__":
    main()
