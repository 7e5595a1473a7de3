"""Progress and the time taken by stages."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, field

__all__ = ["Clock", "Progress", "silent"]

Progress = Callable[[str, int, int], None]


def silent(stage: str, done: int, total: int) -> None:
    """Progress that nobody watches."""


@dataclass
class Clock:
    """Seconds per stage."""

    seconds: dict[str, float] = field(default_factory=dict)
    last: float = field(default_factory=time.perf_counter)

    def stage(self, name: str) -> None:
        now = time.perf_counter()
        self.seconds[name] = self.seconds.get(name, 0.0) + now - self.last
        self.last = now
