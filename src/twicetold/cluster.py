"""Running chunks on an existing dask.distributed cluster (extra ``cluster``).

The cluster's own scheduler decides where a chunk runs and runs it again when a worker is lost;
chunks are numbered and seeded by number, so the results are those of local threads to the byte.
Workers must have the same twicetold, NumPy, SciPy and numba as this machine, or nothing is run.
"""

from __future__ import annotations

import os
import time
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any

from twicetold.errors import TwicetoldError
from twicetold.workers import Key, Out, Pool, Progress, Shared

#: Seconds to wait for the scheduler to answer.
TIMEOUT = 20
#: Chunks under way for each thread of the cluster; more would only fill the scheduler's memory.
AHEAD = 3
#: Seconds a cluster may be without any worker before the run gives up.
PATIENCE = 120.0
#: Seconds between two looks at the workers while a chunk is awaited.
LOOK = 5.0
#: Times that a chunk is handed in again after what it needed was lost with its workers.
AGAIN = 5
#: Packages whose versions shape numbers.
SAME = ("twicetold", "numpy", "scipy", "numba")
_GONE = "The cluster's scheduler is gone. Start it and run the same command again."
_LONELY = (
    "The cluster has been without workers for {:.0f} s. Start some and run the same command again."
)


class ClusterPool:
    """Run chunks on the workers of a dask.distributed client.

    Parameters
    ----------
    client : distributed.Client
    progress : Progress
        Told after each chunk.
    """

    def __init__(self, client: Any, progress: Progress) -> None:
        self.client = client
        self.progress = progress
        #: Threads of this machine, for what never leaves it (training the shares).
        self.workers = os.cpu_count() or 1
        self._sent: tuple[object, Any] | None = None

    def run(
        self,
        function: Callable[[Shared, Key], Out],
        shared: Shared,
        keys: Sequence[Key],
        *,
        label: str,
    ) -> Iterator[Out]:
        """Yield the results in order; what is shared is sent to each worker once.

        Raises
        ------
        TwicetoldError
            When the scheduler is gone, all workers are and none comes back, or a chunk ends every
            worker it is given to.
        """
        total = len(keys)
        self.progress(label, 0, total)
        most = AHEAD * max(self._threads(), 1)
        waiting: deque[tuple[Key, Any]] = deque()
        coming = iter(keys)
        done = 0
        try:
            while done < total:
                while len(waiting) < most and (key := next(coming, None)) is not None:
                    waiting.append((key, self._submit(function, shared, key)))
                key, future = waiting.popleft()
                out: Out = self._result(function, shared, key, future)
                done += 1
                yield out
                self.progress(label, done, total)
        finally:
            if waiting:
                self.client.cancel([future for _, future in waiting])

    def _submit(self, function: Callable[[Shared, Key], Out], shared: Shared, key: Key) -> Any:
        return self.client.submit(function, self._common(shared), key, pure=False)

    def _common(self, shared: object) -> Any:
        """Handle of what is shared; sent once while the same object is used."""
        if self._sent is not None:
            known, handle = self._sent
            if known is shared and handle.status == "finished":
                return handle
        handle = self._send(shared)
        self._sent = (shared, handle)
        return handle

    def _send(self, shared: object) -> Any:
        """Send to every worker; wait for workers while there are none."""
        until = time.monotonic() + PATIENCE
        while True:
            if self._threads():
                try:
                    # In a list, because a tuple would be taken apart and sent piece by piece.
                    return self.client.scatter([shared], broadcast=True, hash=False)[0]
                except (TimeoutError, ValueError):
                    pass  # a worker went while it was being sent to
            if time.monotonic() > until:
                raise TwicetoldError(_LONELY.format(PATIENCE))
            time.sleep(min(1.0, LOOK))

    @property
    def threads(self) -> int:
        """Threads of the cluster, for estimates."""
        return max(self._threads(), 1)

    def _threads(self) -> int:
        """Count the threads of all workers there are now."""
        try:
            return sum(self.client.nthreads().values())
        except OSError as err:
            raise TwicetoldError(_GONE) from err

    def _result(
        self, function: Callable[[Shared, Key], Out], shared: Shared, key: Key, future: Any
    ) -> Out:
        """Await one chunk; hand it in again where the shared object went down with its workers."""
        from distributed import CancelledError, KilledWorker

        for _ in range(AGAIN):
            try:
                self._await(future)
                out: Out = future.result()
            except KilledWorker as err:
                raise TwicetoldError(
                    "One piece of work ended every worker it was given to, most likely for want of "
                    "memory. Give the workers more memory, or fewer threads each."
                ) from err
            except CancelledError:
                if self.client.status != "running":
                    break
                future = self._submit(function, shared, key)
            else:
                return out
        raise TwicetoldError(
            "The cluster lost the work again and again. Look at its scheduler and workers, then "
            "run the same command again."
        )

    def _await(self, future: Any) -> None:
        """Wait until a chunk is done, failed or lost; never for a cluster without workers."""
        from distributed import wait

        lonely: float | None = None
        while not future.done():
            try:
                with self.client.as_current():
                    wait(future, timeout=LOOK)
            except TimeoutError:
                if self.client.status != "running":
                    raise TwicetoldError(_GONE) from None
                now = time.monotonic()
                lonely = None if self._threads() else lonely or now
                if lonely is not None and now - lonely > PATIENCE:
                    raise TwicetoldError(_LONELY.format(PATIENCE)) from None


@contextmanager
def open_cluster(address: str, progress: Progress) -> Iterator[Pool]:
    """Connect to a scheduler and give a pool of its workers.

    Parameters
    ----------
    address : str
        For instance ``tcp://10.0.0.5:8786``.
    progress : Progress

    Raises
    ------
    TwicetoldError
        When dask.distributed is not installed, the scheduler does not answer, it has no workers,
        or these have other versions of what makes numbers.
    """
    try:
        from distributed import Client
    except ImportError as err:
        raise TwicetoldError(
            "`--cluster` needs dask.distributed. Install it with: pip install 'twicetold[cluster]'."
        ) from err
    try:
        client = Client(address, timeout=TIMEOUT, set_as_default=False)
    except (OSError, ValueError, TypeError) as err:
        raise TwicetoldError(
            f"No scheduler answered at {address!r} within {TIMEOUT} s. Give its address as it "
            "prints it, for instance tcp://10.0.0.5:8786."
        ) from err
    try:
        if not client.nthreads():
            raise TwicetoldError(f"The scheduler at {address!r} has no workers. Start some first.")
        check_versions(client.get_versions(packages=list(SAME)))
        yield ClusterPool(client, progress)
    finally:
        client.close()


def check_versions(found: dict[str, Any]) -> None:
    """Refuse workers that would give other numbers than this machine.

    Parameters
    ----------
    found : dict
        As ``Client.get_versions`` gives it: packages of ``client`` and of each of ``workers``.

    Raises
    ------
    TwicetoldError
        Naming the package, what is here and what a worker has.
    """
    here = found["client"]["packages"]
    for worker, said in sorted(found["workers"].items()):
        for name in SAME:
            there = said["packages"].get(name)
            if there != here.get(name):
                raise TwicetoldError(
                    f"Workers must have the same {name} as this machine ({here.get(name)}), but "
                    f"{worker} has {there or 'none'}. Install the same versions on all of them."
                )
