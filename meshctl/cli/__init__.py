"""The command line: words in, one call of the session, text or JSON out.

Only the standard library is loaded until a command runs, so that --help costs little more than a bare
interpreter. Public: main.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from types import ModuleType

from meshctl.errors import BUG, INTERRUPTED, USAGE, Finding


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


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command; returns its exit code."""
    from meshctl.cli.words import parser

    words = parser()
    given = list(sys.argv[1:] if arguments is None else arguments)
    try:
        chosen = words.parse_args(given)
    except SystemExit as end:  # argparse has said what was wrong
        return int(end.code or 0)
    if not hasattr(chosen, "run"):
        words.print_usage(sys.stderr)
        print("meshctl: name a command; 'meshctl --help' lists them", file=sys.stderr)
        return USAGE
    try:
        commands = _commands()
        code: int = getattr(commands, chosen.run)(chosen)
        sys.stdout.flush()
        return code
    except Finding as finding:
        line = " ".join(str(finding).split())  # one line, whatever a file held
        print(f"meshctl {chosen.command}: {line}", file=sys.stderr)
        return finding.exit_code
    except KeyboardInterrupt:
        print(f"meshctl {chosen.command}: interrupted", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as problem:
        return _report_bug(problem)
