"""What does the work of a run: anything that takes jobs and gives their results in order; and jobs done by parts."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable, Iterator
from typing import Protocol, TypeVar

from ..store.manifest import Done, Manifest
from ..store.parts import Part

J = TypeVar("J")
R = TypeVar("R")

FEW = 4
"""So many chunks of ordinary size take less time than a worker needs to start."""


def share(left: int, few: int, most: int) -> int:
    """How many of the records that are left the next job gets: fewer towards the end, so that all workers end at about
    the same time, but not below `few`, where a job costs more than what it does."""
    return min(most, max(few, left // 6))


class Engine(Protocol):
    """The processes of this machine (pool.py), or workers elsewhere."""

    def ordered_results(self, work: Callable[[J], R], jobs: Iterable[J], few: int = FEW) -> Iterator[tuple[J, R]]:
        """(job, work(job)) in the order of the jobs, a bounded number in flight.

        `work` and the jobs must be picklable and small: paths and ids, no arrays. Up to `few` jobs may be done in this
        process where that is sooner.
        """
        ...


class PartJob(Protocol):
    """A job whose result is a part."""

    @property
    def part(self) -> Part:
        """The stem of the files to write."""
        ...


P = TypeVar("P", bound=PartJob)


def done_in_order(
    engine: Engine, work: Callable[[P], Done], jobs: Iterable[P], manifest: Manifest, few: int = FEW
) -> Iterator[tuple[P, int]]:
    """(job, number of records) in the order of the jobs, each when its part is listed in the manifest.

    A job that an interrupted run has listed is not given out again.
    """
    order: deque[tuple[P, Done | None]] = deque()

    def unlisted() -> Iterator[P]:
        for job in jobs:
            listed = manifest.find(job.part)
            order.append((job, listed))
            if listed is None:
                yield job

    def listed_first() -> Iterator[tuple[P, int]]:
        while order and order[0][1] is not None:
            job, listed = order.popleft()
            yield job, listed.records if listed else 0

    for job, done in engine.ordered_results(work, unlisted(), few):
        yield from listed_first()
        order.popleft()
        manifest.add(job.part, done)
        yield job, done.records
    yield from listed_first()
