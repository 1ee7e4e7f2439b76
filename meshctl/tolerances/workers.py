"""Chunks of trials shared out: one process, several, or the workers of a cluster; always handed back in order.

Public: results, shared_out.
"""

from __future__ import annotations

import os
import signal
from collections import deque
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np

from meshctl.errors import OutOfReach
from meshctl.tolerances.chunks import Kept, Task, run_chunk

Piece = tuple[int, int]  # number of a chunk, trials in it
Cancel = Callable[[], bool]
AHEAD = 2  # chunks on their way for each worker
BREAKS = 3  # times that workers may die without one chunk done in between

_task: Task | None = None
_stop: Any = None


def _start(task: Task | None, stop: Any) -> None:
    """First thing in a worker: what is to be done; Ctrl-C is for the parent to hear."""
    global _task, _stop
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _task, _stop = task, stop


def _work(number: int, trials: int) -> np.ndarray | None:
    assert _task is not None, "a worker starts with its task"
    return run_chunk(_task, number, trials, lambda: bool(_stop.value))


@contextmanager
def _one_thread() -> Iterator[None]:
    """Processes started inside keep their linear algebra to one thread: there is one process for each core."""
    names = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS")
    before = {name: os.environ.get(name) for name in names}
    os.environ.update(dict.fromkeys(names, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def results(
    task: Task,
    pieces: list[Piece],
    kept: Kept,
    *,
    processes: int = 1,
    cluster: str | None = None,
    cancel: Cancel | None = None,
) -> Iterator[np.ndarray]:
    """Measures of chunk after chunk, from the folder where they are kept there, else run.

    Parameters
    ----------
    pieces : chunks by number, each with its number of trials
    processes : of this machine; 1 runs here
    cluster : address of a scheduler that shares chunks out instead
    cancel : asked between trials; True ends the iteration
    """
    stopped = cancel or (lambda: False)
    if cluster is not None:
        from meshctl.tolerances.cluster import cluster_results

        yield from cluster_results(task, pieces, kept, cluster, stopped)
    elif processes == 1:
        for number, trials in pieces:
            found = kept.read(number, trials)
            if found is None:
                found = run_chunk(task, number, trials, stopped)
                if found is None:
                    return
                kept.keep(number, found)
            yield found
    else:
        yield from _by_processes(task, pieces, kept, processes, stopped)


def _job(function: Callable[[Any, Cancel], Any], job: Any) -> Any:
    return function(job, lambda: bool(_stop.value))


def shared_out(
    function: Callable[[Any, Cancel], Any], jobs: list[Any], processes: int, cancel: Cancel | None
) -> list[Any]:
    """`function(job, cancel)` of every job, in order, by several processes.

    Raises
    ------
    KeyboardInterrupt
        Where `cancel` says so.
    OutOfReach
        Where a process dies: its job cannot be told from the others that were on their way.
    """
    from concurrent.futures import ProcessPoolExecutor, wait
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    context = get_context("spawn")
    stop = context.RawValue("b", 0)
    with _one_thread(), ProcessPoolExecutor(processes, context, _start, (None, stop)) as executor:
        futures = [executor.submit(_job, function, job) for job in jobs]
        while wait(futures, timeout=0.2).not_done:
            if cancel is not None and cancel():
                stop.value = 1
                executor.shutdown(wait=True, cancel_futures=True)
                raise KeyboardInterrupt
        try:
            return [future.result() for future in futures]
        except BrokenProcessPool:
            raise OutOfReach(
                "a worker process died", remedy="look at the memory of the machine, or use fewer --processes"
            ) from None


def _by_processes(task: Task, pieces: list[Piece], kept: Kept, processes: int, stopped: Cancel) -> Iterator[np.ndarray]:
    from concurrent.futures import Future, ProcessPoolExecutor
    from concurrent.futures import TimeoutError as NotYet
    from concurrent.futures.process import BrokenProcessPool
    from multiprocessing import get_context

    context = get_context("spawn")  # a fork would copy locks that threads of this process may hold
    stop = context.RawValue("b", 0)  # without a lock, that a killed worker could take along
    left, done = deque(pieces), deque[tuple[Piece, "np.ndarray | Future[np.ndarray | None]"]]()

    def pool() -> ProcessPoolExecutor:
        return ProcessPoolExecutor(processes, context, _start, (task.bare(), stop))

    with _one_thread():
        executor, breaks = pool(), 0
        try:
            while left or done:
                try:
                    while left and len(done) < AHEAD * processes:
                        known = kept.read(*left[0])
                        done.append((left[0], executor.submit(_work, *left[0]) if known is None else known))
                        left.popleft()
                    piece, coming = done[0]
                    if isinstance(coming, np.ndarray):
                        found: np.ndarray | None = coming
                    else:
                        while True:
                            try:
                                found = coming.result(timeout=0.1)
                                break
                            except NotYet:
                                if stopped():
                                    return
                        if found is None:
                            return
                        kept.keep(piece[0], found)
                except BrokenProcessPool:
                    breaks += 1
                    if breaks > BREAKS:
                        raise OutOfReach(
                            f"worker processes died {breaks} times with no chunk done in between",
                            remedy="look at the memory of the machine, or use fewer --processes",
                        ) from None
                    executor.shutdown(wait=False, cancel_futures=True)
                    executor = pool()
                    left.extendleft(reversed([piece for piece, _ in done]))
                    done.clear()
                    continue
                breaks = 0
                done.popleft()
                assert found is not None
                yield found
                if stopped():
                    return
        finally:
            stop.value = 1
            executor.shutdown(wait=True, cancel_futures=True)
