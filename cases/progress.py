"""Telling the user how far a run is: a bar with the time left on a terminal, plain lines elsewhere."""

from __future__ import annotations

import sys
import time
from typing import Any, Protocol, TextIO


class Progress(Protocol):
    """What a run reports to. `start` opens a stage of `total` steps; `advance` says how many are done."""

    def start(self, stage: str, total: int) -> None: ...
    def advance(self, done: int) -> None: ...
    def say(self, text: str) -> None: ...
    def __enter__(self) -> Any: ...
    def __exit__(self, *fault: object) -> None: ...


class Silent:
    """Says nothing."""

    def start(self, stage: str, total: int) -> None: ...
    def advance(self, done: int) -> None: ...
    def say(self, text: str) -> None: ...

    def __enter__(self) -> Any:
        return self

    def __exit__(self, *fault: object) -> None: ...


class Lines(Silent):
    """Plain lines, at most one every few seconds: for pipes, logs and batch queues."""

    def __init__(self, stream: TextIO | None = None, interval: float = 10.0):
        self.stream, self.interval = stream or sys.stdout, interval
        self._stage, self._total, self._begun, self._told = "", 0, 0.0, 0.0
        self._finished = False

    def start(self, stage: str, total: int) -> None:
        self._stage, self._total = stage, total
        self._begun = self._told = time.monotonic()
        self._finished = False
        self.say(f"{stage}: {total} solutions")

    def advance(self, done: int) -> None:
        now = time.monotonic()
        finished = done >= self._total and not self._finished
        if done and (now - self._told > self.interval or finished):
            left = (now - self._begun) * (self._total - done) / done
            self.say(f"{self._stage}: {done} of {self._total}, about {duration(left)} left")
            self._told, self._finished = now, done >= self._total

    def say(self, text: str) -> None:
        print(text, file=self.stream, flush=True)


class Bar(Silent):
    """A bar with elapsed and remaining time (rich)."""

    def __init__(self, console: Any = None):
        from rich.progress import (
            BarColumn,
            MofNCompleteColumn,
            TextColumn,
            TimeElapsedColumn,
            TimeRemainingColumn,
        )
        from rich.progress import Progress as RichProgress

        self._bars = RichProgress(
            TextColumn("{task.description}"),
            BarColumn(),
            MofNCompleteColumn(),
            TimeElapsedColumn(),
            TextColumn("left"),
            TimeRemainingColumn(),
            console=console,
        )
        self._task: Any = None

    def __enter__(self) -> Any:
        self._bars.start()
        return self

    def __exit__(self, *fault: object) -> None:
        self._bars.stop()

    def start(self, stage: str, total: int) -> None:
        self._task = self._bars.add_task(stage, total=total)

    def advance(self, done: int) -> None:
        self._bars.update(self._task, completed=done)

    def say(self, text: str) -> None:
        self._bars.console.print(text, markup=False, highlight=False)


def duration(seconds: float) -> str:
    """A time span in words fit for its size: "8 s", "3 min 20 s", "2 h 10 min"."""
    seconds = max(0, round(seconds))
    if seconds < 60:
        return f"{seconds} s"
    if seconds < 3600:
        return f"{seconds // 60} min {seconds % 60} s"
    return f"{seconds // 3600} h {seconds % 3600 // 60} min"
