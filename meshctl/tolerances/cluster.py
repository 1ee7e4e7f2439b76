"""The same chunks on the workers of a dask cluster; the only module that knows dask.

Public: cluster_results, require_dask.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable, Iterator
from typing import Any

import numpy as np

from meshctl.errors import MissingExtra, OutOfReach
from meshctl.tolerances.chunks import Kept, Task, run_chunk

CONNECT_S = 10.0
AHEAD = 2  # chunks on their way for each thread of the cluster

_own = threading.local()


def require_dask() -> Any:
    """dask's distributed, or a clear word on how to get it."""
    try:
        import dask.distributed
    except ImportError:
        raise MissingExtra(
            "--cluster needs dask, which is not installed", remedy="install it: pip install 'meshctl[cluster]'"
        ) from None
    return dask.distributed


def _on_worker(task: Task, token: str, number: int, trials: int) -> np.ndarray | None:
    # threads of one worker share what was sent, and trials run on arrays that cannot be shared
    if getattr(_own, "token", None) != token:
        _own.token, _own.task = token, task.bare()
    return run_chunk(_own.task, number, trials)


def cluster_results(
    task: Task, pieces: list[tuple[int, int]], kept: Kept, address: str, stopped: Callable[[], bool]
) -> Iterator[np.ndarray]:
    """Measures of chunk after chunk; a worker that dies has its chunks run by another.

    Raises
    ------
    MissingExtra, OutOfReach
    """
    distributed = require_dask()
    try:
        client = distributed.Client(address, timeout=CONNECT_S, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as problem:
        raise OutOfReach(
            f"no scheduler answers at '{address}': {problem}", remedy="start one there, or leave --cluster out"
        ) from None
    try:
        from uuid import uuid4

        token = uuid4().hex
        sent = client.scatter(task.bare(), broadcast=True)
        left: deque[tuple[int, int]] = deque(pieces)
        coming: deque[tuple[tuple[int, int], Any]] = deque()
        while left or coming:
            most = AHEAD * max(1, sum(client.nthreads().values()))
            while left and len(coming) < most:
                piece = left.popleft()
                known = kept.read(*piece)
                found = client.submit(_on_worker, sent, token, *piece, pure=False) if known is None else known
                coming.append((piece, found))
            piece, future = coming.popleft()
            if isinstance(future, np.ndarray):
                yield future
            else:
                values = _awaited(future, stopped, distributed)
                if values is None:
                    return
                kept.keep(piece[0], values)
                yield values
            if stopped():
                return
    finally:
        client.close()


def _awaited(future: Any, stopped: Callable[[], bool], distributed: Any) -> np.ndarray | None:
    while True:
        try:
            return np.asarray(future.result(timeout=0.5))
        except (TimeoutError, distributed.TimeoutError):
            if stopped():
                return None
