"""How benchmarks measure: alternating, median of repeats, so that a slow moment of the machine hits both sides."""

from __future__ import annotations

import time
from collections.abc import Callable
from statistics import median


def alternate(works: dict[str, Callable[[], object]], repeats: int = 5) -> dict[str, float]:
    """Median seconds of each work, run in turn after one warm-up round."""
    seconds: dict[str, list[float]] = {name: [] for name in works}
    for turn in range(repeats + 1):
        for name, work in works.items():
            start = time.perf_counter()
            work()
            if turn:
                seconds[name].append(time.perf_counter() - start)
    return {name: median(values) for name, values in seconds.items()}


def in_threads(work: Callable[[int], object], threads: int) -> None:
    """Call `work` with 0, 1, ... at the same time."""
    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(threads) as pool:
        for _ in pool.map(work, range(threads)):
            pass
