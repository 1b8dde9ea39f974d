"""What the screen says while a command works: a line for each step, and how far a long one is."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from contextlib import ExitStack
from typing import IO, TYPE_CHECKING, Any

from basinwright.progress import heard_by

if TYPE_CHECKING:
    from rich.progress import Progress

PATIENCE_S = 1.0
"""Shorter steps say nothing of how far they are."""
BETWEEN_LINES_S = 10.0
"""Time from one plain line about a step to the next."""


class Screen:
    """Says on standard error what is happening.

    On a terminal a long step has a bar with its rate and the time left; elsewhere a plain line every few seconds.

    Parameters
    ----------
    stream : file, optional
        Where to write.
    clock : callable
        Gives the time [s].
    """

    def __init__(self, stream: IO[str] | None = None, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._clock = clock
        self._started = self._since = self._spoke = clock()
        self._progress: Progress | None = None
        self._open = ExitStack()

    def __enter__(self) -> Screen:
        self._open.enter_context(heard_by(self.far))
        self._open.callback(self._end)
        return self

    def __exit__(self, *error: object) -> None:
        self._open.close()

    def __call__(self, text: str) -> None:
        """Print a line with the time since the start: a step begins."""
        self._end()
        self._since = self._spoke = self._clock()
        self._line(text)

    def far(self, done: float, total: float, unit: str) -> None:
        """Show how far the step is; see `basinwright.progress.tell`."""
        now = self._clock()
        elapsed = now - self._since
        if elapsed >= PATIENCE_S and total > 0 and done > 0:
            if self._stream.isatty():
                self._bar(done, total, _told(done, total, unit, elapsed))
            elif now - self._spoke >= BETWEEN_LINES_S and done < total:
                self._line(f"  {_told(done, total, unit, elapsed)}")
                self._spoke = now
        if done >= total:  # another loop of the same step may follow
            self._end()
            self._since = now

    def _line(self, text: str) -> None:
        print(f"[{self._clock() - self._started:6.1f} s] {text}", file=self._stream, flush=True)

    def _bar(self, done: float, total: float, told: str) -> None:
        if self._progress is None:
            from rich.console import Console
            from rich.progress import BarColumn, Progress, TextColumn

            self._progress = Progress(
                TextColumn("          "), BarColumn(), TextColumn("{task.description}", markup=False),
                console=Console(file=self._stream), transient=True, auto_refresh=False,
            )  # fmt: skip
            self._progress.add_task("")
            self._progress.start()
        task: Any = self._progress.task_ids[0]
        self._progress.update(task, completed=done, total=total, description=told, refresh=True)

    def _end(self) -> None:
        if self._progress is not None:
            self._progress.stop()
            self._progress = None


def _told(done: float, total: float, unit: str, elapsed_s: float) -> str:
    """Say how far, how fast and how much longer."""
    rate = done / elapsed_s
    share = f"{100.0 * done / total:.0f} %"
    counted = "" if unit == "%" else f", {done:,.0f} of {total:,.0f} {unit}, {rate:,.3g} {unit}/s"
    return f"{share}{counted}, {_duration((total - done) / rate)} left"


def _duration(seconds: float) -> str:
    if seconds < 90.0:
        return f"{seconds:.0f} s"
    return f"{seconds / 60.0:.0f} min" if seconds < 5400.0 else f"{seconds / 3600.0:.1f} h"
