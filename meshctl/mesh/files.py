"""Writing that leaves either the old file whole or the new one: never half of one.

Public: read_text, made_folder, write_whole, new_folder.
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


def _refused(path: Path, problem: OSError, what: str) -> UnsoundFile:
    """What the system says of a file, with what to do."""
    said = problem.strerror or type(problem).__name__
    return UnsoundFile(f"cannot be {what}: {said}", where=str(path), remedy="check its place, its rights and the disk")


def read_text(path: Path, what: str = "file", remedy: str = "") -> str:
    """A text file in UTF-8, with or without a byte order mark.

    Raises
    ------
    MissingFile, UnsoundFile
        Where it is not there, is a folder, may not be read, or is no UTF-8 text.
    """
    path = Path(path)
    try:
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        raise MissingFile(
            f"there is no such {what}", where=str(path), remedy=remedy or f"name a {what} that exists"
        ) from None
    except IsADirectoryError:
        raise UnsoundFile("is a folder", where=str(path), remedy=remedy or f"name a {what}") from None
    except UnicodeDecodeError as problem:
        raise UnsoundFile(f"not UTF-8 text: {problem.reason}", where=str(path), remedy="save it as UTF-8") from None
    except OSError as problem:
        raise _refused(path, problem, "read") from None


def made_folder(path: Path) -> Path:
    """A folder that is there afterwards; what stands in the way is said."""
    path = Path(path)
    try:
        path.mkdir(exist_ok=True)
    except FileExistsError:
        raise UnsoundFile("is a file where a folder must be", where=str(path), remedy="move it away") from None
    except OSError as problem:
        raise _refused(path, problem, "made") from None
    return path


def write_whole(path: Path, content: str | bytes) -> None:
    """Write a file beside its place and rename it there; a kill at any moment leaves the old file whole.

    A link is followed; what is no regular file (a pipe, a device) is written to and never replaced.
    """
    data = content.encode() if isinstance(content, str) else content
    path = Path(path)
    if path.is_dir():
        raise UnsoundFile("is a folder", where=str(path), remedy="name a file")
    try:
        place = path.resolve()
    except (OSError, RuntimeError):  # a ring of links
        raise UnsoundFile("is a link that leads nowhere", where=str(path), remedy="name another file") from None
    if not place.parent.is_dir():
        raise MissingFile("its folder is not there", where=str(path), remedy=f"make '{path.parent}' first")
    try:
        if place.exists() and not place.is_file():
            with place.open("wb") as out:
                out.write(data)
            return
        handle, name = tempfile.mkstemp(prefix=f".{place.name}.", dir=place.parent)
    except OSError as problem:
        raise _refused(path, problem, "written") from None
    try:
        with os.fdopen(handle, "wb") as out:
            out.write(data)
            out.flush()
            os.fsync(out.fileno())
        os.chmod(name, _mode())
        os.replace(name, place)
    except OSError as problem:
        Path(name).unlink(missing_ok=True)
        raise _refused(path, problem, "written") from None
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise


@contextmanager
def new_folder(path: Path) -> Iterator[Path]:
    """A folder filled beside its place and renamed there at the end; an existing one is never touched."""
    path = Path(path)
    if os.path.lexists(path):
        raise UnsoundFile("exists already", where=str(path), remedy="name a new folder, or remove that one first")
    if not path.absolute().parent.is_dir():
        raise MissingFile("its folder is not there", where=str(path), remedy=f"make '{path.parent}' first")
    try:
        work = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.absolute().parent))
    except OSError as problem:
        raise _refused(path, problem, "written") from None
    try:
        yield work
        os.chmod(work, 0o777 & ~(0o666 & ~_mode()) | 0o700)
        try:
            os.rename(work, path)
        except OSError as problem:
            raise _refused(path, problem, "written") from None
    except BaseException:
        shutil.rmtree(work, ignore_errors=True)
        raise
