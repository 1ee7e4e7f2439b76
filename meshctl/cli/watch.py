"""Long work on a terminal: a line of progress on stderr, and Ctrl-C that keeps the best so far.

Public: Watch.
"""

from __future__ import annotations

import signal
import sys
import threading
from types import FrameType, TracebackType
from typing import Any


class Watch:
    """While inside, the first Ctrl-C asks the work to stop, a second one breaks it off."""

    def __init__(self, what: str) -> None:
        self.what, self.interrupted, self._shown = what, False, False
        self._before: Any = None

    def __enter__(self) -> Watch:
        if threading.current_thread() is threading.main_thread():
            self._before = signal.signal(signal.SIGINT, self._interrupt)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, problem: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._before is not None:
            signal.signal(signal.SIGINT, self._before)
        if self._shown:
            print("\r\x1b[K", end="", file=sys.stderr, flush=True)

    def _interrupt(self, number: int, frame: FrameType | None) -> None:  # noqa: ARG002
        if self.interrupted:
            raise KeyboardInterrupt
        self.interrupted = True

    def stopped(self) -> bool:
        """True once Ctrl-C was pressed."""
        return self.interrupted

    def tell(self, line: str) -> None:
        """Show a line of progress in place of the last one, on a terminal only."""
        if not sys.stderr.isatty():
            return
        self._shown = True
        print(f"\r\x1b[K{line[:100]}", end="", file=sys.stderr, flush=True)

    def progress(self, now: Any) -> None:
        """Show how far a refine has come, on a terminal only."""
        self.tell(
            f"{self.what}: start {now.start} of {now.starts}, {now.evaluations} evaluations, "
            f"objective {now.value:.3e}, {now.seconds:.0f} s; Ctrl-C keeps the best so far"
        )
