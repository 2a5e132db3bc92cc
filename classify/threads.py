"""Threads that leave the main one free to hear Ctrl-C."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from threading import Thread

# How often a waiting thread looks up: on some systems only then is Ctrl-C heard. In seconds.
LOOK_UP_S = 0.5


@contextmanager
def stoppable_pool(jobs: int, name: str = "") -> Iterator[ThreadPoolExecutor]:
    """Threads that, when their context ends early, finish what they are at and begin nothing else."""
    pool = ThreadPoolExecutor(jobs, name)
    try:
        yield pool
    finally:
        pool.shutdown(cancel_futures=True)


def aside(work: Callable[[], None]) -> None:
    """Do `work` in a thread of its own: a library's call that takes long would not return for Ctrl-C."""
    failed: list[BaseException] = []

    def guarded() -> None:
        try:
            work()
        except BaseException as error:  # handed to the waiting thread below
            failed.append(error)

    thread = Thread(target=guarded, daemon=True)
    thread.start()
    while thread.is_alive():
        thread.join(LOOK_UP_S)
    if failed:
        raise failed[0]
