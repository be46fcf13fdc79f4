"""Phases of long work in, a moving bar on a terminal or plain lines in a log out.

Work calls ``report(phase, done, total)`` from any thread; a phase begins with its first report and ends when done
reaches total.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Protocol, TextIO


class Report(Protocol):
    """What long work calls: the name of its phase, and how much of it is done, in any one unit."""

    def __call__(self, phase: str, done: float, total: float) -> None: ...


@contextmanager
def shown(stream: TextIO) -> Iterator[Report]:
    """Show reports on `stream` while the context lasts: bars with time left on a terminal, else a line at each end."""
    if stream.isatty():
        with _bars(stream) as report:
            yield report
    else:
        yield _Lines(stream)


class _Lines:
    """One line when a phase begins and one when it ends."""

    def __init__(self, stream: TextIO) -> None:
        self._stream = stream
        self._begun: dict[str, float] = {}
        self._ended: set[str] = set()
        self._lock = threading.Lock()

    def __call__(self, phase: str, done: float, total: float) -> None:
        with self._lock:
            if phase in self._ended:
                return
            if phase not in self._begun:
                self._begun[phase] = time.monotonic()
                self._say(f"{phase} ...")
            if done >= total:
                self._ended.add(phase)
                self._say(f"{phase}: {time.monotonic() - self._begun[phase]:.1f} s")

    def _say(self, line: str) -> None:
        print(line, file=self._stream, flush=True)


@contextmanager
def _bars(stream: TextIO) -> Iterator[Report]:
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        Progress,
        TaskID,
        TaskProgressColumn,
        TextColumn,
        TimeElapsedColumn,
        TimeRemainingColumn,
    )

    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(bar_width=32, complete_style="yellow", finished_style="dim yellow"),
        TaskProgressColumn(),
        TimeElapsedColumn(),
        TextColumn("left"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(file=stream)) as progress:
        tasks: dict[str, TaskID] = {}
        lock = threading.Lock()

        def report(phase: str, done: float, total: float) -> None:
            with lock:
                if phase not in tasks:
                    tasks[phase] = progress.add_task(phase, total=total)
            progress.update(tasks[phase], completed=min(done, total), total=total)

        yield report
