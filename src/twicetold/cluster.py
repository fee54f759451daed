"""Running chunks on an existing dask.distributed cluster (extra ``cluster``).

The cluster's own scheduler decides where a chunk runs and runs it again when a worker is lost;
chunks are numbered and seeded by number, so the results are those of local threads to the byte.
"""

from __future__ import annotations

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


class ClusterPool:
    """Run chunks on the workers of a dask.distributed client."""

    def __init__(self, client: Any, progress: Progress) -> None:
        self.client = client
        self.progress = progress

    def run(
        self,
        function: Callable[[Shared, Key], Out],
        shared: Shared,
        keys: Sequence[Key],
        *,
        label: str,
    ) -> Iterator[Out]:
        """Yield the results in order; what is shared is sent to each worker once."""
        total = len(keys)
        self.progress(label, 0, total)
        if not total:
            return
        common = self.client.scatter(shared, broadcast=True, hash=False)
        threads = sum(self.client.nthreads().values()) or 1
        waiting: deque[Any] = deque()
        coming = iter(keys)
        try:
            for key in coming:
                waiting.append(self.client.submit(function, common, key, pure=False, retries=3))
                if len(waiting) >= AHEAD * threads:
                    break
            done = 0
            while waiting:
                out = waiting.popleft().result()
                done += 1
                for key in coming:
                    waiting.append(self.client.submit(function, common, key, pure=False, retries=3))
                    break
                yield out
                self.progress(label, done, total)
        finally:
            self.client.cancel(list(waiting))


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
        When dask.distributed is not installed, the scheduler does not answer, or it has no workers.
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
        yield ClusterPool(client, progress)
    finally:
        client.close()
