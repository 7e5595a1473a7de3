"""Progress on standard error.

A reporter is called as ``reporter(stage, done, total)``, as often as the work likes; `total` is 0 or 1 for a
stage that is not counted. A count that falls back within a stage (another wave of bursts) begins a new count.
"""

from __future__ import annotations

import contextlib
import sys
import time
from collections.abc import Callable
from typing import Protocol, TextIO

from perdure._cli.rounding import seconds_text

__all__ = ["LineReporter", "Reporter", "SilentReporter", "TerminalReporter", "reporter_for"]

Clock = Callable[[], float]

# Seconds between two lines of one stage, and between two drawings of a terminal's line.
LINE_INTERVAL = 30.0
DRAW_INTERVAL = 0.1
BAR_WIDTH = 24


class Reporter(Protocol):
    """What the commands need of a reporter; the engine needs the call alone."""

    def __call__(self, stage: str, done: int, total: int) -> None: ...

    def close(self) -> None:
        """Leave the stream at the beginning of a line."""
        ...


class SilentReporter:
    """Prints nothing."""

    def __call__(self, stage: str, done: int, total: int) -> None:
        pass

    def close(self) -> None:
        pass


class _Counter:
    """Stage, elapsed and left seconds of the present count."""

    def __init__(self, clock: Clock) -> None:
        self.clock = clock
        self.stage: str | None = None
        self.done = 0
        self.first = 0
        self.begun = 0.0

    def enter(self, stage: str, done: int) -> bool:
        """Take note of a call; True if a new stage begins."""
        new = stage != self.stage
        if new or done < self.done:
            self.begun, self.first = self.clock(), done
        self.stage, self.done = stage, done
        return new

    def elapsed(self) -> float:
        return self.clock() - self.begun

    def left(self, total: int) -> float | None:
        """Seconds left at the speed since the first call of this count; None before there is one."""
        if not self.first < self.done <= total:
            return None
        return self.elapsed() * (total - self.done) / (self.done - self.first)


class LineReporter:
    """A plain line at each new stage, then at most one every 30 s: for logs and pipes."""

    def __init__(self, stream: TextIO, clock: Clock = time.monotonic) -> None:
        self._stream = stream
        self._count = _Counter(clock)
        self._clock = clock
        self._printed = 0.0

    def __call__(self, stage: str, done: int, total: int) -> None:
        new = self._count.enter(stage, done)
        if not new and self._clock() - self._printed < LINE_INTERVAL:
            return
        self._printed = self._clock()
        _write(self._stream, self._line(stage, done, total) + "\n")

    def close(self) -> None:
        pass

    def _line(self, stage: str, done: int, total: int) -> str:
        parts = [f"{stage} {done}/{total}" if total > 1 else stage]
        left = self._count.left(total)
        if total > 1 and left is not None:
            parts += [f"elapsed {seconds_text(self._count.elapsed())}", f"left {seconds_text(left)}"]
        return ", ".join(parts)


class TerminalReporter:
    """One line that is drawn over: stage, bar, count, time left. A new stage begins a new line."""

    def __init__(self, stream: TextIO, clock: Clock = time.monotonic) -> None:
        self._stream = stream
        self._count = _Counter(clock)
        self._clock = clock
        self._drawn_at = 0.0
        self._length = 0

    def __call__(self, stage: str, done: int, total: int) -> None:
        before = self._count.stage
        new = self._count.enter(stage, done)
        if new and before is not None:
            self.close()
        if not new and done < total and self._clock() - self._drawn_at < DRAW_INTERVAL:
            return
        self._drawn_at = self._clock()
        text = self._line(stage, done, total)
        _write(self._stream, "\r" + text.ljust(self._length))
        self._length = len(text)

    def close(self) -> None:
        if self._length:
            _write(self._stream, "\n")
        self._length = 0

    def _line(self, stage: str, done: int, total: int) -> str:
        if total <= 1:
            return stage
        filled = min(BAR_WIDTH, BAR_WIDTH * done // total)
        text = f"{stage}  [{'#' * filled}{'-' * (BAR_WIDTH - filled)}]  {done}/{total}"
        left = self._count.left(total)
        return text if left is None else f"{text}  left {seconds_text(left)}"


def reporter_for(*, quiet: bool, stream: TextIO | None = None) -> Reporter:
    """The reporter that fits the stream (standard error unless given)."""
    stream = sys.stderr if stream is None else stream
    if quiet or stream is None:  # None: started with standard error closed
        return SilentReporter()
    return TerminalReporter(stream) if stream.isatty() else LineReporter(stream)


def _write(stream: TextIO, text: str) -> None:
    """Write; a stream that takes no more must not end hours of work."""
    with contextlib.suppress(OSError, ValueError):
        stream.write(text)
        stream.flush()
