"""A bar with the time that is left, on stderr: lively on a terminal, a line now and then in a log."""

from __future__ import annotations

import sys
import time
from types import TracebackType

__all__ = ["Meter"]

_EVERY = 10.0  # seconds between the lines of a log


class Meter:
    """Count work done, and say on stderr how far it is and how long it will take.

    Args:
        what: what is being done, in a few words.
        total: units of work.
    """

    def __init__(self, what: str, total: int) -> None:
        self.what, self.total, self.done = what, total, 0
        self._began = self._said = time.monotonic()
        self._bar = self._task = None
        if sys.stderr.isatty():
            from rich.console import Console
            from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

            self._bar = Progress(
                TextColumn("{task.description}"),
                BarColumn(),
                MofNCompleteColumn(),
                TextColumn("ETA"),
                TimeRemainingColumn(),
                TextColumn("{task.fields[note]}"),
                console=Console(stderr=True),
            )
            self._task = self._bar.add_task(what, total=total, note="")

    def __enter__(self) -> Meter:
        if self._bar is not None:
            self._bar.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._bar is not None:
            self._bar.stop()
        elif error is None and self.total:
            self._line(f"took {time.monotonic() - self._began:.0f} s")

    def advance(self, count: int) -> None:
        """Count some work as done."""
        self.done += count
        if self._bar is not None and self._task is not None:
            self._bar.advance(self._task, count)
        else:
            self._now_and_then("")

    def note(self, text: str) -> None:
        """Say what is going on within one unit of work."""
        if self._bar is not None and self._task is not None:
            self._bar.update(self._task, note=text)
        else:
            self._now_and_then(text)

    def _now_and_then(self, text: str) -> None:
        """Print a line unless the last one is recent."""
        now = time.monotonic()
        if now - self._said >= _EVERY:
            self._said = now
            left = (now - self._began) * (self.total - self.done) / self.done if self.done else None
            self._line("; ".join(filter(None, ["" if left is None else f"ETA {left:.0f} s", text])))

    def _line(self, text: str) -> None:
        """Print one line."""
        print(f"{self.what}: {self.done} of {self.total}, {text}", file=sys.stderr)
