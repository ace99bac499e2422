"""Work spread over threads: the compiled loops release the interpreter's lock."""

import os
import time
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TypeVar

T = TypeVar("T")
Progress = Callable[[float], None]  # takes the share that is done, 0 to 1; may raise to stop

_LOOK_S = 0.02  # how often progress is told


def workers() -> int:
    """Threads worth starting: one a core this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def run_all(jobs: Sequence[Callable[[], T]], progress: Progress | None = None) -> list[T]:
    """Run jobs on as many threads as there are cores; results in their order.

    A failure, an interrupt too, ends what has not begun; what runs is waited for.

    Parameters
    ----------
    jobs : sequence of callables
        They share nothing that changes.
    progress : callable, optional
        Called on the calling thread.
    """
    with ThreadPoolExecutor(min(workers(), max(len(jobs), 1))) as pool:
        futures = [pool.submit(job) for job in jobs]
        try:
            while not all(future.done() for future in futures):
                time.sleep(_LOOK_S)
                for future in futures:
                    if future.done():
                        future.result()  # a failure ends the rest
                if progress is not None:
                    progress(sum(future.done() for future in futures) / len(futures))
            found = [future.result() for future in futures]
            if progress is not None:
                progress(1.0)
            return found
        finally:
            for future in futures:
                future.cancel()
