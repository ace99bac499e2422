"""The laws every processor keeps, as functions to be called from tests.

A processor has ``prepare(sample_rate, block_size)``, ``process(block)``, ``reset()`` and
``latency``. Each law takes a *factory* that returns a fresh, unprepared processor, so that it can
compare two.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from typing import Protocol

import numpy as np
import pytest

from tonesim.errors import UsageError
from tonesim.signals import Signal, sine, square

BLOCK_SIZES = (1, 17, 64, 509)


class Processor(Protocol):
    latency: int

    def prepare(self, sample_rate: float, block_size: int) -> None: ...
    def process(self, block: Signal) -> Signal: ...
    def reset(self) -> None: ...


Factory = Callable[[], Processor]


def run(processor: Processor, x: Signal, sizes: Sequence[int]) -> Signal:
    """Process `x` cut into blocks of the given sizes, again and again."""
    parts, start, turn = [], 0, 0
    while start < x.shape[0]:
        size = sizes[turn % len(sizes)]
        parts.append(np.array(processor.process(x[start : start + size])))
        start, turn = start + size, turn + 1
    return np.concatenate(parts)


def prepared(factory: Factory, sample_rate: float, block_size: int) -> Processor:
    processor = factory()
    processor.prepare(sample_rate, block_size)
    return processor


def any_cut_gives_equal_bits(factory: Factory, x: Signal, sample_rate: float) -> None:
    whole = prepared(factory, sample_rate, x.shape[0]).process(x)
    assert whole.shape == x.shape
    assert whole.dtype == np.float64
    for sizes in [(size,) for size in BLOCK_SIZES] + [BLOCK_SIZES]:
        cut = run(prepared(factory, sample_rate, max(sizes)), x, sizes)
        np.testing.assert_array_equal(cut, whole, err_msg=f"blocks of {sizes}")


def the_block_is_left_alone(factory: Factory, x: Signal, sample_rate: float) -> None:
    before = x.copy()
    processor = prepared(factory, sample_rate, x.shape[0])
    first = processor.process(x)
    np.testing.assert_array_equal(x, before)
    kept = first.copy()
    processor.process(x)
    np.testing.assert_array_equal(first, kept, err_msg="a returned block changed afterwards")


def reset_equals_fresh(factory: Factory, x: Signal, sample_rate: float) -> None:
    fresh = prepared(factory, sample_rate, x.shape[0]).process(x)
    used = prepared(factory, sample_rate, x.shape[0])
    carried = used.process(x)
    carried = used.process(x)
    assert not np.array_equal(carried, fresh), "the signal is too short to leave a past behind"
    used.reset()
    np.testing.assert_array_equal(used.process(x), fresh)
    used.prepare(sample_rate, x.shape[0])
    np.testing.assert_array_equal(used.process(x), fresh, err_msg="prepared a second time")


def an_impulse_arrives_at_the_latency(
    factory: Factory, sample_rate: float, amplitude: float = 1.0
) -> None:
    """Holds for processors whose response, their latency aside, is largest at once."""
    processor = prepared(factory, sample_rate, 4096)
    at = 100
    impulse = np.zeros(4096)
    impulse[at] = amplitude
    y = processor.process(impulse)
    assert isinstance(processor.latency, int)
    assert int(np.argmax(np.abs(y - y[0]))) == at + processor.latency


def silence_stays_idle(
    factory: Factory, sample_rate: float, idle: float = 0.0, tolerance: float = 0.0
) -> None:
    y = run(prepared(factory, sample_rate, 512), np.zeros(4096), (512,))
    assert np.max(np.abs(y - idle)) <= tolerance


def extremes_stay_finite(factory: Factory, sample_rate: float, amplitude: float) -> None:
    rng = np.random.default_rng(7)
    frames = 4096
    harsh = {
        "square": square(110.0, amplitude, sample_rate, frames),
        "noise": amplitude * rng.uniform(-1.0, 1.0, frames),
        "alternating": amplitude * (1.0 - 2.0 * (np.arange(frames) % 2)),
        "constant": np.full(frames, amplitude),
        "tiny": np.full(frames, 5e-324),
    }
    for name, x in harsh.items():
        y = run(prepared(factory, sample_rate, 512), x, (512,))
        assert np.all(np.isfinite(y)), name


def process_before_prepare_is_refused(factory: Factory) -> None:
    with pytest.raises(UsageError, match="before prepare"):
        factory().process(np.zeros(16))


def a_longer_block_than_prepared_gives_equal_bits(
    factory: Factory, x: Signal, sample_rate: float
) -> None:
    whole = prepared(factory, sample_rate, x.shape[0]).process(x)
    np.testing.assert_array_equal(prepared(factory, sample_rate, 64).process(x), whole)


def channels_do_not_meet(factory: Factory, x: Signal, sample_rate: float) -> None:
    """Two channels give what two processors of one channel give."""
    both = np.stack([x, np.roll(x, 31)], axis=1)
    together = prepared(factory, sample_rate, x.shape[0]).process(both)
    assert together.shape == both.shape
    for channel in range(2):
        alone = prepared(factory, sample_rate, x.shape[0]).process(both[:, channel])
        np.testing.assert_array_equal(together[:, channel], alone)


def threads_do_not_meet(factory: Factory, sample_rate: float, amplitude: float = 1.0) -> None:
    """Separate processors at work at the same time give what each gives alone."""
    inputs = [sine(110.0 * (i + 1), amplitude, sample_rate, 8192) for i in range(4)]
    alone = [run(prepared(factory, sample_rate, 64), x, (64,)) for x in inputs]
    results: list[Signal | None] = [None] * len(inputs)
    start = threading.Barrier(len(inputs))

    def work(i: int) -> None:
        processor = prepared(factory, sample_rate, 64)
        start.wait(timeout=60.0)
        results[i] = run(processor, inputs[i], (64,))

    threads = [threading.Thread(target=work, args=(i,)) for i in range(len(inputs))]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(timeout=60.0)
    for result, expected in zip(results, alone, strict=True):
        assert result is not None
        np.testing.assert_array_equal(result, expected)
