"""Resampling and framing: exact ratio, clean band, and the same under any cut."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal
from sounds import RATE, plucked_string

from tonesim.errors import UsageError
from tonesim.framing import FILTER_BETA, FILTER_LOBES, Framer, Resampler
from tonesim.signals import sine


def resampled(x, rate, size=4096):
    columns = x.reshape(x.shape[0], -1)
    resampler = Resampler(rate, columns.shape[1])
    parts = [
        part
        for start in range(0, x.shape[0], size)
        for part in resampler.add(columns[start : start + size])
    ]
    return np.concatenate([*parts, resampler.finish()]).reshape(-1, *x.shape[1:])


@pytest.mark.parametrize("rate", [8000, 22_050, 44_100, 88_200, 96_000, 192_000])
@pytest.mark.parametrize("frames", [1, 17, 40_001])
def test_a_stream_is_resampled_as_a_whole(rng, rate, frames):
    x = rng.standard_normal((frames, 2))
    up, down = Resampler(rate, 2).up, Resampler(rate, 2).down
    assert up * rate == down * RATE
    larger = max(up, down)
    taps = signal.firwin(2 * FILTER_LOBES * larger + 1, 1 / larger, window=("kaiser", FILTER_BETA))
    whole = signal.resample_poly(x, up, down, axis=0, window=taps)
    # Rounding only: the same products, perhaps summed otherwise.
    np.testing.assert_allclose(resampled(x, rate), whole, atol=1e-13)


def test_48_khz_passes_untouched(rng):
    x = rng.standard_normal(5000)
    assert np.array_equal(resampled(x, RATE), x)


@pytest.mark.parametrize("rate", [44_100, 96_000])
@pytest.mark.parametrize("hertz", [100.0, 5000.0, 18_000.0])
def test_a_tone_stays_that_tone(rate, hertz):
    y = resampled(sine(hertz, 1.0, rate, rate), rate)
    inside = slice(2000, -2000)  # away from where the tone begins and ends
    error = y[inside] - sine(hertz, 1.0, RATE, y.shape[0])[inside]
    assert np.max(np.abs(error)) < 1e-4  # -80 dB: 0.001 dB of ripple


def test_what_does_not_fit_is_gone():
    # From 96 kHz: 30 kHz would fold to 18 kHz.
    y = resampled(sine(30_000.0, 1.0, 96_000, 96_000), 96_000)
    assert np.max(np.abs(y[2000:-2000])) < 1e-5


@pytest.mark.parametrize("rate", [4000, 500_000, 44_100.5, float("nan")])
def test_rates_outside_the_range_are_refused(rate):
    with pytest.raises(UsageError, match="expected a whole number from 8000 to 384000"):
        Resampler(rate, 2)


def frames_of(reference, test, rate, sizes=(1 << 20,)):
    framer, chunks, start, turn = Framer(rate), [], 0, 0
    while start < reference.shape[0]:
        size = sizes[turn % len(sizes)]
        chunks += framer.add(reference[start : start + size], test[start : start + size])
        start, turn = start + size, turn + 1
    chunks += framer.finish()
    return [np.concatenate(column) for column in zip(*chunks, strict=True)], framer


def test_frames_are_stretches_of_the_signal(rng):
    reference, test = rng.standard_normal((2, 100_000))
    (first, second), framer = frames_of(reference, test, RATE)
    assert first.shape == (1 + (100_000 - 2048) // 1024, 2048)
    for n in (0, 31, 32, 95):
        part = slice(1024 * n, 1024 * n + 2048)
        assert np.array_equal(first[n], reference[part])
        assert np.array_equal(second[n], test[part] - reference[part])
    assert not framer.padded


@pytest.mark.parametrize(("frames", "padded"), [(1, True), (2047, True), (2048, False)])
def test_a_short_signal_makes_one_frame(frames, padded):
    (first, _), framer = frames_of(np.ones(frames), np.ones(frames), RATE)
    assert first.shape == (1, 2048)
    assert np.sum(first) == frames
    assert framer.padded is padded


@settings(max_examples=10)
@given(st.lists(st.integers(1, 30_000), min_size=1, max_size=4), st.sampled_from([44_100, RATE]))
def test_any_cut_gives_equal_bits(sizes, rate):
    x = plucked_string(110.0, 1.0, rate)
    whole, _ = frames_of(x, 0.9 * x, rate)
    cut, _ = frames_of(x, 0.9 * x, rate, [*sizes, 5000])
    assert all(np.array_equal(a, b) for a, b in zip(whole, cut, strict=True))


def test_blocks_that_cannot_be_used_are_refused():
    good = np.zeros(10)
    for reference, test, words in [
        (np.zeros((10, 2)), good, "expected one channel"),
        (good, np.zeros(9), "10 frames and test 9"),
        (np.array([0.0, np.nan]), np.zeros(2), "reference is nan at frame 1"),
        (good, np.append(np.zeros(9), -np.inf), "test is -inf at frame 9"),
    ]:
        with pytest.raises(UsageError, match=words):
            list(Framer(RATE).add(reference, test))
    with pytest.raises(UsageError, match="no samples"):
        list(Framer(RATE).finish())
    framer = Framer(RATE)
    list(framer.add(good, good))
    list(framer.finish())
    with pytest.raises(UsageError, match="after the end"):
        list(framer.add(good, good))
