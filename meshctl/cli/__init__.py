"""The command line: words in, one call of the session, text or JSON out.

Only the standard library is loaded until a command runs, so that --help costs little more than a bare
interpreter. Public: main.
"""

from __future__ import annotations

import errno
import os
import sys
from collections.abc import Sequence
from types import ModuleType

from meshctl.errors import BUG, INTERRUPTED, UNSOUND, USAGE, Finding

FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO, errno.EBADF)  # of stdout


def _report_bug(problem: BaseException) -> int:
    """Keep the traceback in a file and say where: a user never sees one."""
    import tempfile
    import traceback

    text = "".join(traceback.format_exception(problem))
    with tempfile.NamedTemporaryFile("w", prefix="meshctl-bug-", suffix=".txt", delete=False) as out:
        out.write(text)
    print(
        f"meshctl: a bug in meshctl itself ({type(problem).__name__}: {problem}); "
        f"the details are in {out.name}: please report them",
        file=sys.stderr,
    )
    return BUG


def _commands() -> ModuleType:
    """The commands, imported with the garbage collector resting.

    Imports make hundreds of thousands of objects that all stay: looking through them again and again for
    garbage takes a tenth of the start-up.
    """
    import gc

    was_on = gc.isenabled() and "meshctl.cli.commands" not in sys.modules
    if was_on:
        gc.disable()
    try:
        from meshctl.cli import commands
    finally:
        if was_on:
            gc.freeze()
            gc.enable()
    return commands


def _lost(problem: OSError) -> str:
    """Why stdout took no more, and nothing more is tried with it."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    return f"stdout cannot be written: {(problem.strerror or str(problem)).lower()}; make room, or send it elsewhere"


def _streams() -> str | None:
    """What is wrong with stdout; a closed stderr is replaced, for messages must not land among the data."""
    if sys.stderr is None:
        sys.stderr = open(os.devnull, "w")  # noqa: SIM115 - as long as the process
    if sys.stdout is None:
        return "stdout is closed, so that the answer would be lost; leave it open, or send it to a file"
    return None


def _quiet() -> None:
    """A user's stderr has our own remarks and no warnings of libraries, unless Python is told to show them."""
    import warnings

    if not sys.warnoptions:
        warnings.simplefilter("ignore")


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; returns its exit code."""
    said = "meshctl"
    try:
        if arguments is None:
            _quiet()
        wrong = _streams()
        if wrong:
            print(f"meshctl: {wrong}", file=sys.stderr)
            return UNSOUND
        from meshctl.cli.words import parser

        words = parser()
        given = joined_signs(list(sys.argv[1:] if arguments is None else arguments))
        if any(word == "" or (word[:2] == "--" and word[-1:] == "=") for word in given):
            print("meshctl: an empty word is given; write a value, or leave its option out", file=sys.stderr)
            return USAGE
        try:
            chosen = words.parse_args(given)
        except SystemExit as end:  # argparse has said what was wrong
            return int(end.code or 0)
        if not hasattr(chosen, "run"):
            words.print_usage(sys.stderr)
            print("meshctl: name a command; 'meshctl --help' lists them", file=sys.stderr)
            return USAGE
        said = f"meshctl {chosen.command}"
        code: int = getattr(_commands(), chosen.run)(chosen)
        sys.stdout.flush()
        return code
    except Finding as finding:
        line = " ".join(str(finding).split())  # one line, whatever a file held
        print(f"{said}: {line}", file=sys.stderr)
        return finding.exit_code
    except KeyboardInterrupt:
        print(f"{said}: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except UnicodeEncodeError as problem:
        also = "pass --ascii, or " if said == "meshctl show" else ""
        shown = problem.object[problem.start : problem.start + 1]
        print(
            f"{said}: stdout takes {problem.encoding} alone, which lacks {shown!a}; {also}set PYTHONIOENCODING=utf-8",
            file=sys.stderr,
        )
        return USAGE
    except OSError as problem:
        if problem.errno not in FULL or problem.filename is not None:
            return _report_bug(problem)
        print(f"{said}: {_lost(problem)}", file=sys.stderr)
        return UNSOUND
    except Exception as problem:
        return _report_bug(problem)


def joined_signs(words: list[str]) -> list[str]:
    """Words where a value that begins with a minus sign is not taken for an option: --band -5:2:3 as --band=-5:2:3."""
    joined: list[str] = []
    for word in words:
        before = joined[-1] if joined else ""
        if word[:1] == "-" and word[1:2].isdigit() and before.startswith("--") and "=" not in before and before != "--":
            joined[-1] = f"{before}={word}"
        else:
            joined.append(word)
    return joined
