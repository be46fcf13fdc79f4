"""Phases of long work in, a moving bar on a terminal or plain lines in a log out.

Work calls ``report(phase, done, total)`` from any thread; a phase begins with its first report and ends when done
reaches total. What is counted should cost the same each: then the time left is right.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any, Protocol, TextIO

UNITS = {"reading": "particles", "finding": "particles", "drawing": "pixels"}
"""What is counted in phases whose names begin so."""
EVERY_S = 30.0
"""A log has a line of a phase at least so far apart."""


class Report(Protocol):
    """What long work calls: the name of its phase, and how much of it is done, in any one unit."""

    def __call__(self, phase: str, done: float, total: float) -> None: ...


class Pace:
    """How fast a phase goes, from what was reported of it.

    The second half of what is done counts: a build that was stopped has its first part at once, and the first chunks wait
    for the compiler.
    """

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._seen: list[tuple[float, float]] = []

    def report(self, done: float) -> None:
        """Take in that so much is done now."""
        if self._seen and done < self._seen[-1][1]:
            return
        self._seen.append((self._clock(), done))
        if len(self._seen) > 512:
            self._seen = self._seen[::2]

    def speed(self) -> float | None:
        """Done a second; None while nobody can tell."""
        if len(self._seen) < 2:
            return None
        last_time, last = self._seen[-1]
        first_time, first = next(seen for seen in self._seen if seen[1] >= last / 2 or seen is self._seen[-1])
        if first_time == last_time:
            first_time, first = self._seen[-2]
        return (last - first) / (last_time - first_time) if last_time > first_time and last > first else None

    def left(self, total: float) -> float | None:
        """Seconds until the total is reached."""
        speed = self.speed()
        if speed is None:
            return None
        last_time, last = self._seen[-1]
        return max(0.0, (total - last) / speed - (self._clock() - last_time))


def written(phase: str, pace: Pace, total: float) -> str:
    """What is said of a phase besides its share: how much a second, and the time left."""
    speed, left = pace.speed(), pace.left(total)
    if speed is None or left is None:
        return ""
    unit = UNITS.get(phase.split()[0])
    return (f"{_short(speed)} {unit}/s, " if unit else "") + f"{_duration(left)} left"


def _short(number: float) -> str:
    for size, name in ((1e9, " G"), (1e6, " M"), (1e3, " k")):
        if number >= size:
            return f"{number / size:.3g}{name}"
    return f"{number:.3g}"


def _duration(seconds: float) -> str:
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60}:{whole % 60:02d} min"
    return f"{whole // 3600}:{whole % 3600 // 60:02d} h"


@contextmanager
def shown(stream: TextIO) -> Iterator[Report]:
    """Show reports on `stream` while the context lasts: bars on a terminal, else lines."""
    if stream.isatty():
        with _bars(stream) as report:
            yield report
    else:
        yield Lines(stream)


class Lines:
    """One line when a phase begins, one when it ends, and one now and then between."""

    def __init__(self, stream: TextIO, clock: Callable[[], float] = time.monotonic) -> None:
        self._stream, self._clock = stream, clock
        self._begun: dict[str, float] = {}
        self._said: dict[str, float] = {}
        self._paces: dict[str, Pace] = {}
        self._ended: set[str] = set()
        self._lock = threading.Lock()

    def __call__(self, phase: str, done: float, total: float) -> None:
        with self._lock:
            if phase in self._ended:
                return
            now = self._clock()
            if phase not in self._begun:
                self._begun[phase] = self._said[phase] = now
                self._paces[phase] = Pace(self._clock)
                self._say(f"{phase} ...")
            pace = self._paces[phase]
            pace.report(done)
            if done >= total:
                self._ended.add(phase)
                self._say(f"{phase}: {now - self._begun[phase]:.1f} s")
            elif now - self._said[phase] >= EVERY_S:
                self._said[phase] = now
                self._say(f"{phase}: {done / total:.0%}, {written(phase, pace, total)}".rstrip(", "))

    def _say(self, line: str) -> None:
        print(line, file=self._stream, flush=True)


@contextmanager
def _bars(stream: TextIO) -> Iterator[Report]:
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskID, TaskProgressColumn, TextColumn, TimeElapsedColumn

    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=32, complete_style="yellow", finished_style="dim yellow"),
        TaskProgressColumn(),
        TimeElapsedColumn(),
        TextColumn("{task.fields[pace]}", markup=False),
    )
    with Progress(*columns, console=Console(file=stream)) as progress:
        tasks: dict[str, tuple[TaskID, Pace]] = {}
        lock = threading.Lock()

        def report(phase: str, done: float, total: float) -> None:
            with lock:
                if phase not in tasks:
                    tasks[phase] = progress.add_task(phase, total=total, pace=""), Pace()
                task, pace = tasks[phase]
                pace.report(done)
                more: dict[str, Any] = {"pace": "" if done >= total else written(phase, pace, total)}
            progress.update(task, completed=min(done, total), total=total, **more)

        yield report
