"""Running many chunks of work: threads here, a cluster when one is given.

Chunks are numbered, draw from their own seed and are yielded in order, so no result depends on
how many workers there are. Chunk functions are module-level, take ``(shared, key)`` and are short
(a fraction of a second), so that an interrupt is answered soon.
"""

from __future__ import annotations

import os
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from typing import Protocol, TypeVar

Shared = TypeVar("Shared")
Key = TypeVar("Key")
Out = TypeVar("Out")

#: Called with (label, chunks done, chunks in all).
Progress = Callable[[str, int, int], None]


def no_progress(label: str, done: int, total: int) -> None:
    """Say nothing."""


class Pool(Protocol):
    """Anything that can run numbered chunks and give their results back in order."""

    progress: Progress

    def run(
        self,
        function: Callable[[Shared, Key], Out],
        shared: Shared,
        keys: Sequence[Key],
        *,
        label: str,
    ) -> Iterator[Out]:
        """Yield ``function(shared, key)`` for each key, in the order of ``keys``."""
        ...


def _processors() -> int:
    """Give the number of processors this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


class ThreadPool:
    """Run chunks on threads of this process (the kernels release the interpreter lock).

    Parameters
    ----------
    workers : int or None
        Number of threads; None takes one per processor this process may use.
    progress : Progress
        Told after each chunk.
    """

    def __init__(self, workers: int | None = None, progress: Progress = no_progress) -> None:
        if workers is not None and workers < 1:
            raise ValueError(f"`workers` must be a whole number from 1 up, got {workers}.")
        self.workers = workers or _processors()
        self.progress = progress

    def run(
        self,
        function: Callable[[Shared, Key], Out],
        shared: Shared,
        keys: Sequence[Key],
        *,
        label: str,
    ) -> Iterator[Out]:
        """Yield the results in order, keeping at most a few chunks in flight (bounded memory)."""
        total = len(keys)
        self.progress(label, 0, total)
        if self.workers == 1 or total <= 1:
            for done, key in enumerate(keys, 1):
                yield function(shared, key)
                self.progress(label, done, total)
            return
        waiting: deque[Future[Out]] = deque()
        with ThreadPoolExecutor(self.workers) as threads:
            try:
                coming = iter(keys)
                for key in coming:
                    waiting.append(threads.submit(function, shared, key))
                    if len(waiting) > 2 * self.workers:
                        break
                done = 0
                while waiting:
                    out = waiting.popleft().result()
                    done += 1
                    for key in coming:
                        waiting.append(threads.submit(function, shared, key))
                        break
                    yield out
                    self.progress(label, done, total)
            finally:
                for future in waiting:
                    future.cancel()
