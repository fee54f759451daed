"""Showing progress on a terminal, and opening the pool that does the work."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from twicetold.errors import TwicetoldError
from twicetold.workers import Pool, Progress, ThreadPool, no_progress


@contextmanager
def open_pool(
    *, workers: int | None = None, cluster: str | None = None, quiet: bool = False
) -> Iterator[Pool]:
    """Give a pool of threads, or of a cluster's workers, with a progress bar on a terminal.

    Raises
    ------
    TwicetoldError
        When the number of workers is not at least 1, or the cluster cannot be reached.
    """
    if workers is not None and workers < 1:
        raise TwicetoldError(f"`--workers` must be a whole number from 1 up, got {workers}.")
    with _progress(quiet) as progress:
        if cluster is None:
            yield ThreadPool(workers, progress)
        else:
            from twicetold.cluster import open_cluster

            with open_cluster(cluster, progress) as pool:
                yield pool


@contextmanager
def _progress(quiet: bool) -> Iterator[Progress]:
    """Give a callback that draws bars on stderr; nothing when piped or quiet."""
    if quiet or not sys.stderr.isatty():
        yield no_progress
        return
    from rich.console import Console
    from rich.progress import BarColumn, TextColumn, TimeRemainingColumn
    from rich.progress import Progress as Bars

    bars = Bars(
        TextColumn("{task.description}"),
        BarColumn(bar_width=30),
        TextColumn("{task.percentage:>3.0f} %"),
        TimeRemainingColumn(compact=True),
        console=Console(stderr=True),
        transient=True,
    )
    rows: dict[str, Any] = {}

    def show(label: str, done: int, total: int) -> None:
        if label not in rows:
            rows[label] = bars.add_task(label, total=total)
        bars.update(rows[label], completed=done, total=total)

    with bars:
        yield show
