"""Trials in chunks: what a worker does with one, and where the chunks of a run are kept.

Chunks do not depend on how many processes share them. Each is written whole as it comes, so that a run that was
broken off, at any moment, goes on where it was.
Public: Task, run_chunk, Kept, chunk_size, finite.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from meshctl.errors import DriveFinding, StalePlan, UnsoundFile
from meshctl.mesh.files import write_whole
from meshctl.mesh.graph import Mesh
from meshctl.mesh.spread import Spread
from meshctl.plan.plan import Plan
from meshctl.tolerances.dies import Drawing
from meshctl.tolerances.goal import Goal, goal_of
from meshctl.tolerances.policies import POLICIES, Policy

RUN_FILE = "run.json"
CHUNKS = "chunks"


@dataclass(eq=False)
class Task:
    """All that a worker has to know: which dies, and what is done with them."""

    mesh: Mesh
    plan: Plan
    spread: Spread
    seed: int = 0
    policy: str = "as-set"
    scales: Mapping[str, float] = field(default_factory=dict)

    @cached_property
    def drawing(self) -> Drawing:
        return Drawing(self.mesh, self.spread)

    @cached_property
    def goal(self) -> Goal:
        return goal_of(self.mesh, self.plan)

    @cached_property
    def dies(self) -> Policy:
        found: Policy = POLICIES[self.policy](self.drawing, self.plan)
        return found

    @property
    def chunk(self) -> int:
        return chunk_size(self.policy)

    def bare(self) -> Task:
        """The same without what was derived, for another process."""
        return Task(self.mesh, self.plan, self.spread, self.seed, self.policy, dict(self.scales))

    def die(self, trial: int) -> list[float]:
        """Measures of one die; NaN where its drive finds no working point."""
        return self.measured(self.drawing.errors(self.drawing.normals(self.seed, trial), self.scales))

    def measured(self, errors: dict[str, np.ndarray]) -> list[float]:
        """Measures of the die with these errors."""
        try:
            return self.goal.values(*self.dies.run(errors))
        except DriveFinding:
            return [float("nan")] * len(self.goal.measures)

    def nominal(self) -> dict[str, float]:
        """Measures of the die without any error."""
        return dict(zip(self.goal.measures, self.measured({}), strict=True))

    def identity(self) -> dict[str, Any]:
        """What two runs must have in common for their chunks to be of one run."""
        shapes = {
            cause: {**{k: v for k, v in vars(s).items() if k != "samples"}, "samples": _digest(s.samples)}
            for cause, s in self.spread.shapes.items()
        }
        return {
            "mesh": self.mesh.name,
            "mesh_hash": self.mesh.hash,
            "plan": _digest(self.plan.codes, self.plan.settings, json.dumps(self.plan.target, sort_keys=True)),
            "seed": self.seed,
            "policy": self.policy,
            "chunk": self.chunk,
            "spread": {key: getattr(self.spread, key) for key in self.spread.numbers()},
            "shapes": shapes,
            "between": [list(b) for b in self.spread.between],
            "scales": dict(self.scales),
            "measures": list(self.goal.measures),
        }


def finite(entry: Any) -> Any:
    """The same structure with NaN and infinity as null, for JSON."""
    if isinstance(entry, dict):
        return {key: finite(value) for key, value in entry.items()}
    if isinstance(entry, list | tuple):
        return [finite(value) for value in entry]
    return None if isinstance(entry, float) and not np.isfinite(entry) else entry


def chunk_size(policy: str) -> int:
    """Trials in a chunk of a policy."""
    size: int = POLICIES[policy].chunk  # type: ignore[attr-defined]
    return size


def _digest(*parts: Any) -> str:
    digest = hashlib.sha256()
    for part in parts:
        if part is not None:
            digest.update(part.encode() if isinstance(part, str) else np.ascontiguousarray(part).tobytes())
    return digest.hexdigest()


def run_chunk(task: Task, number: int, trials: int, cancel: Callable[[], bool] | None = None) -> np.ndarray | None:
    """Measures [trials, measures] of the trials of one chunk; None where `cancel` said so on the way."""
    first, found = number * task.chunk, np.empty((trials, len(task.goal.measures)))
    for row in range(trials):
        if cancel is not None and cancel():
            return None
        found[row] = task.die(first + row)
    return found


class Kept:
    """Chunks of a run in a folder; without one they live as long as the run.

    Parameters
    ----------
    folder : made if it is not there
    task : what the chunks are of; chunks of another run are refused

    Raises
    ------
    StalePlan
        Where the folder holds another run, with what differs.
    """

    def __init__(self, folder: Path | None, task: Task) -> None:
        self.folder, self.measures = folder, len(task.goal.measures)
        if folder is None:
            return
        identity = json.loads(json.dumps(task.identity()))
        marker = folder / RUN_FILE
        if marker.is_file():
            try:
                before = json.loads(marker.read_text(encoding="utf-8"))
            except (json.JSONDecodeError, UnicodeDecodeError) as problem:
                raise UnsoundFile(f"not readable: {problem}", where=str(marker), remedy="name another folder") from None
            differs = [k for k in identity if not isinstance(before, dict) or before.get(k) != identity[k]]
            if differs:
                raise StalePlan(
                    f"the folder holds another run: {', '.join(differs)} differ",
                    where=str(folder),
                    remedy="name a new folder, or remove that one first",
                )
        elif folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
            raise UnsoundFile("is neither empty nor a run of trials", where=str(folder), remedy="name a new folder")
        (folder / CHUNKS).mkdir(parents=True, exist_ok=True)
        if not marker.is_file():
            write_whole(marker, json.dumps(identity, indent=1) + "\n")

    def _path(self, number: int) -> Path:
        assert self.folder is not None
        return self.folder / CHUNKS / f"{number:06d}.npy"

    def read(self, number: int, trials: int) -> np.ndarray | None:
        """A chunk of at least that many trials that was kept; None: to be run."""
        if self.folder is None or not self._path(number).is_file():
            return None
        try:
            found = np.load(self._path(number), allow_pickle=False)
        except (OSError, ValueError) as problem:
            raise UnsoundFile(
                f"not readable: {problem}", where=str(self._path(number)), remedy="remove that file"
            ) from None
        if found.ndim != 2 or found.shape[1] != self.measures:
            raise UnsoundFile(
                f"holds an array of {found.shape}, must be (trials, {self.measures})",
                where=str(self._path(number)),
                remedy="remove that file",
            )
        return np.asarray(found[:trials]) if len(found) >= trials else None

    def keep(self, number: int, values: np.ndarray) -> None:
        """Write a chunk, whole or not at all."""
        if self.folder is None:
            return
        buffer = io.BytesIO()
        np.save(buffer, values)
        write_whole(self._path(number), buffer.getvalue())
