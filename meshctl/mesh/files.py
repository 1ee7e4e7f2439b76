"""Writing that leaves either the old file whole or the new one: never half of one.

Public: write_whole, new_folder.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from meshctl.errors import MissingFile, UnsoundFile


def _mode() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return 0o666 & ~mask


def write_whole(path: Path, content: str | bytes) -> None:
    """Write a file beside its place and rename it there; a kill at any moment leaves the old file whole."""
    data = content.encode() if isinstance(content, str) else content
    path = Path(path)
    if path.is_dir():
        raise UnsoundFile("is a folder", where=str(path), remedy="name a file")
    if not path.parent.is_dir():
        raise MissingFile("its folder is not there", where=str(path), remedy=f"make '{path.parent}' first")
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", dir=path.parent)
    except OSError as problem:
        raise UnsoundFile(f"cannot be written: {problem.strerror}", where=str(path)) from None
    try:
        with os.fdopen(handle, "wb") as out:
            out.write(data)
            out.flush()
            os.fsync(out.fileno())
        os.chmod(name, _mode())
        os.replace(name, path)
    except OSError as problem:
        Path(name).unlink(missing_ok=True)
        raise UnsoundFile(f"cannot be written: {problem.strerror}", where=str(path)) from None
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise


@contextmanager
def new_folder(path: Path) -> Iterator[Path]:
    """A folder filled beside its place and renamed there at the end; an existing one is never touched."""
    path = Path(path)
    if path.exists():
        raise UnsoundFile("exists already", where=str(path), remedy="name a new folder, or remove that one first")
    if not path.absolute().parent.is_dir():
        raise MissingFile("its folder is not there", where=str(path), remedy=f"make '{path.parent}' first")
    try:
        work = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.absolute().parent))
    except OSError as problem:
        raise UnsoundFile(f"cannot be written: {problem.strerror}", where=str(path)) from None
    try:
        yield work
        os.chmod(work, 0o777 & ~(0o666 & ~_mode()) | 0o700)
        os.rename(work, path)
    except BaseException:
        shutil.rmtree(work, ignore_errors=True)
        raise
