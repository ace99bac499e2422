"""Jobs on threads: order, failure, interrupt, progress; the plain loop is the outside check."""

import threading
import time
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tonesim.pool import run_all, workers

SOON_S = 0.05  # longer than it takes between two tellings of progress


def later(value: int, seconds: float) -> Callable[[], int]:
    def job() -> int:
        time.sleep(seconds)
        return value

    return job


def test_results_keep_the_order_of_the_jobs_whoever_is_done_first():
    jobs = [later(k, 0.03 * (5 - k)) for k in range(6)]
    assert run_all(jobs) == [job() for job in jobs] == list(range(6))


@settings(max_examples=20)
@given(st.lists(st.integers(), max_size=40))
def test_a_pool_gives_what_a_plain_loop_gives(values):
    assert run_all([lambda v=v: v * v for v in values]) == [v * v for v in values]


def test_no_jobs_are_no_work():
    told: list[float] = []
    assert run_all([], told.append) == []
    assert told == [1.0]


def test_threads_are_as_many_as_the_cores_this_process_may_use():
    assert workers() >= 1
    seen: set[int] = set()

    def job() -> None:
        seen.add(threading.get_ident())
        time.sleep(0.01)

    run_all([job] * 40)
    assert 1 <= len(seen) <= workers()
    assert threading.get_ident() not in seen


@pytest.mark.parametrize("seconds", [0.0, SOON_S])
def test_progress_rises_from_job_to_job_and_ends_at_one(seconds):
    told: list[float] = []
    run_all([later(k, seconds) for k in range(6)], told.append)
    assert told == sorted(told)
    assert told[-1] == 1.0
    assert min(told) >= 0.0
    if seconds:
        # On any number of cores up to five something is done before all is.
        assert workers() > 5 or any(0.0 < share < 1.0 for share in told)


def test_progress_is_told_on_the_calling_thread():
    threads: set[int] = set()
    run_all([later(0, SOON_S)], lambda share: threads.add(threading.get_ident()))
    assert threads == {threading.get_ident()}


def test_a_failure_is_the_caller_s_and_ends_what_has_not_begun():
    begun: list[int] = []

    def job(k: int) -> Callable[[], None]:
        def work() -> None:
            begun.append(k)
            time.sleep(0.01)
            if k == 0:
                raise ValueError("the first one")

        return work

    jobs = [job(k) for k in range(400)]
    with pytest.raises(ValueError, match="the first one"):
        run_all(jobs)
    count = len(begun)
    assert count < len(jobs)
    time.sleep(SOON_S)
    assert len(begun) == count  # what ran was waited for, and nothing begins any more


@pytest.mark.parametrize("stop", [KeyboardInterrupt, RuntimeError])
def test_progress_may_raise_to_stop(stop):
    begun: list[int] = []

    def told(share: float) -> None:
        raise stop

    with pytest.raises(stop):
        run_all([lambda k=k: (begun.append(k), time.sleep(0.01)) for k in range(400)], told)
    count = len(begun)
    assert count < 400
    time.sleep(SOON_S)
    assert len(begun) == count


def test_compiled_loops_run_side_by_side_with_the_bits_of_one_after_the_other():
    from bench_pieces import class_ab_bench

    bench = class_ab_bench()
    x = [0.1 * k * np.sin(2.0 * np.pi * 950.0 * np.arange(20_000) / 384e3) for k in range(1, 9)]
    twins = [bench.probe.twin() for _ in x]
    together = run_all([lambda p=p, s=s: p.run(s) for p, s in zip(twins, x, strict=True)])
    for signal, y in zip(x, together, strict=True):
        assert np.array_equal(y, bench.probe.twin().run(signal))
