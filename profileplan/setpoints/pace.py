"""How is a long table made: in which blocks, and on how many cores?"""

from __future__ import annotations

import os
from collections import deque
from typing import TYPE_CHECKING, TypeVar

if TYPE_CHECKING:
    from collections.abc import Callable, Generator, Iterable, Iterator
    from concurrent.futures import Future

Job = TypeVar("Job")
Result = TypeVar("Result")

ROWS_AT_A_TIME = 24_576
"""Rows that are sampled and written together. More do not stay in the cache; with fewer, threads
wait for each other between calls."""

NUMBERS_AT_A_TIME = 600_000
"""Numbers that are written together at most: of tables with many columns fewer rows are, so that
memory does not grow with the columns either."""

MOST_WORKERS = 2
"""Threads that make rows: part of the work is not done in parallel, so more gain little."""


def blocks(rows: range, columns: int = 1) -> Iterator[range]:
    """Yield rows of so many columns block by block."""
    count = min(ROWS_AT_A_TIME, max(NUMBERS_AT_A_TIME // columns, 1))
    for start in range(rows.start, rows.stop, count):
        yield range(start, min(start + count, rows.stop))


def in_order(task: Callable[[Job], Result], jobs: Iterable[Job]) -> Generator[Result]:
    """Yield the results of jobs in their order, made on some cores, few of them ahead."""
    jobs = list(jobs)
    workers = min(MOST_WORKERS, _cores(), len(jobs))
    if workers <= 1:
        yield from map(task, jobs)
        return
    # Costs more to load than a short table to write.
    from concurrent.futures import ThreadPoolExecutor  # noqa: PLC0415

    with ThreadPoolExecutor(workers) as pool:
        waiting: deque[Future[Result]] = deque()
        try:
            for job in jobs:
                waiting.append(pool.submit(task, job))
                if len(waiting) > workers:
                    yield waiting.popleft().result()
            while waiting:
                yield waiting.popleft().result()
        finally:
            for future in waiting:
                future.cancel()


def _cores() -> int:
    """Return the number of cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
