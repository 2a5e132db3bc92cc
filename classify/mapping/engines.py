"""Where blocks are computed: in threads of this process, or on a Dask cluster (`cluster`).

An engine gives blocks in whatever order they are done, with a bounded number under way.
"""

from __future__ import annotations

from collections.abc import Generator, Sequence
from concurrent.futures import FIRST_COMPLETED, Future, wait
from contextlib import closing
from dataclasses import dataclass
from itertools import islice
from threading import Event
from typing import TYPE_CHECKING, Protocol

from threadpoolctl import threadpool_limits

from classify.errors import LandassayError, Problem
from classify.mapping.blocks import Block, BlockWork
from classify.raster.grid import Window
from classify.threads import LOOK_UP_S, stoppable_pool

if TYPE_CHECKING:
    from classify.mapping.cluster import Cluster

# Blocks under way per worker: one computed, one read or waiting to be written.
_UNDER_WAY = 2

Numbered = tuple[int, Window]


class Engine(Protocol):
    """Computes blocks."""

    def run(self, work: BlockWork, windows: Sequence[Numbered]) -> Generator[Block]:
        """Compute every numbered window. Stops all work when closed. Raises what a block raises."""

    @property
    def warnings(self) -> tuple[Problem, ...]:
        """What the user should know of the engine."""


def cluster(address: str) -> Cluster:
    """An engine on a Dask cluster. Raises LandassayError if Dask is not installed or the cluster cannot be used."""
    try:
        from classify.mapping.cluster import connect
    except ModuleNotFoundError as error:
        fix = "pip install 'landassay[cluster]'"
        raise LandassayError("work on a cluster needs the package distributed, which is missing", fix=fix) from error
    return connect(address)


@dataclass(frozen=True, slots=True)
class Threads:
    """`jobs` threads that compute and as many that read ahead for them."""

    jobs: int = 1
    warnings: tuple[Problem, ...] = ()

    def run(self, work: BlockWork, windows: Sequence[Numbered]) -> Generator[Block]:
        """See Engine. Libraries underneath are kept to one thread each meanwhile, or cores would be asked for twice."""
        stop = Event()
        remaining = iter(windows)
        with (
            threadpool_limits(1),
            closing(work),
            stoppable_pool(self.jobs, "compute") as computers,
            stoppable_pool(self.jobs, "read") as readers,
        ):
            under_way: set[Future[Block]] = set()

            def start(number: int, window: Window) -> Future[Block]:
                bands = readers.submit(work.read, window)
                return computers.submit(lambda: work.compute(number, window, bands.result(), stop.is_set))

            try:
                while True:
                    for number, window in islice(remaining, _UNDER_WAY * self.jobs - len(under_way)):
                        under_way.add(start(number, window))
                    if not under_way:
                        return
                    done, under_way = wait(under_way, timeout=LOOK_UP_S, return_when=FIRST_COMPLETED)
                    for future in done:
                        yield future.result()
            finally:
                stop.set()
