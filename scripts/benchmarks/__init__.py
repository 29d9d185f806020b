"""Measurements of speed; each row is a ratio of two times taken in the same run."""

import time
from collections.abc import Callable


def best_time(work: Callable[[], object], *, repeats: int = 5) -> float:
    """Shortest of several wall-clock times of `work()`, s, after one call to warm up."""
    work()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def row(what: str, ratio: float, baseline: str) -> None:
    """Print one result: `what` takes `ratio` times as long (or as much) as `baseline`."""
    print(f"{what:<58} {ratio:>12.4g} x  {baseline}", flush=True)
