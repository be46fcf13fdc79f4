"""The local runner: pieces of work on threads of this machine, results in the order of the pieces.

The heavy rooms (routing, drawing, coding, packing) release Python's lock, so threads are enough and share memory.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ThreadPoolExecutor, wait
from types import TracebackType
from typing import TypeVar

Piece = TypeVar("Piece")
Result = TypeVar("Result")


def usable_cores() -> int:
    """Cores that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


class LocalRunner:
    """Runs work on `workers` threads (default: one a core). Use as a context; leaving it waits for what is running.

    One worker is the calling thread itself, so that it takes one core and no more.
    """

    def __init__(self, workers: int | None = None) -> None:
        self.workers = workers or usable_cores()
        self._pool = ThreadPoolExecutor(self.workers)

    def __enter__(self) -> LocalRunner:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._pool.shutdown(wait=True, cancel_futures=True)

    def begin(self, work: Callable[[], Result]) -> Future[Result]:
        """Start one piece of work beside everything else; its `result()` waits for it."""
        future = self._pool.submit(work)
        if self.workers == 1:
            wait([future])
        return future

    def map(self, work: Callable[[Piece], Result], pieces: Iterable[Piece], ahead: int = 1) -> Iterator[Result]:
        """`work` on every piece; results in order. At most `ahead` pieces more than there are workers are in memory at once.

        Where results are small, looking further ahead keeps workers busy while a piece takes long whose turn it is. The
        first error stops taking pieces, and is raised here.
        """
        if self.workers == 1:
            yield from map(work, pieces)
            return
        waiting: deque[Future[Result]] = deque()
        try:
            for piece in pieces:
                waiting.append(self._pool.submit(work, piece))
                if len(waiting) >= self.workers + ahead:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()
