"""Test signals: shapes, values at known instants, coherent frequencies."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tonesim.errors import UsageError
from tonesim.signals import (
    as_frames,
    burst,
    coherent_frequency,
    multitone,
    sine,
    square,
    step,
    two_tone,
)

RATE = 48_000


def test_one_axis_becomes_one_column_without_a_copy():
    x = np.zeros(5)
    assert as_frames(x).shape == (5, 1)
    assert np.shares_memory(as_frames(x), x)
    assert as_frames([[1, 2], [3, 4]]).dtype == np.float64


@pytest.mark.parametrize("shape", [(), (2, 3, 4)])
def test_other_numbers_of_axes_are_refused(shape):
    with pytest.raises(UsageError, match="frames, channels"):
        as_frames(np.zeros(shape))


def test_a_sine_has_its_values_at_the_quarters():
    x = sine(12_000.0, 2.0, RATE, 5)
    np.testing.assert_allclose(x, [0, 2, 0, -2, 0], rtol=0, atol=1e-14)
    assert sine(12_000.0, 2.0, RATE, 1, phase=math.pi / 2)[0] == 2.0


def test_a_square_is_half_the_time_up():
    x = square(480.0, 3.0, RATE, 4800)
    assert set(x) == {-3.0, 3.0}
    assert np.mean(x) == 0.0
    assert x[0] == 3.0


def test_a_step_and_a_burst_begin_and_end_where_asked():
    np.testing.assert_array_equal(step(2.0, 5, start=3), [0, 0, 0, 2, 2])
    x = burst(1000.0, 1.0, RATE, 100, 20, 60)
    assert not np.any(x[:20])
    assert not np.any(x[60:])
    np.testing.assert_array_equal(x[20:60], sine(1000.0, 1.0, RATE, 40))
    with pytest.raises(UsageError, match="does not fit"):
        burst(1000.0, 1.0, RATE, 100, 60, 101)


def test_two_tones_add():
    x = two_tone((60.0, 7000.0), (0.8, 0.2), RATE, 100)
    np.testing.assert_array_equal(x, sine(60.0, 0.8, RATE, 100) + sine(7000.0, 0.2, RATE, 100))


def test_a_multitone_has_equal_lines_and_the_asked_peak():
    frequencies = [100.0, 300.0, 1100.0]
    x = multitone(frequencies, 0.5, RATE, RATE, seed=3)
    assert np.max(np.abs(x)) == pytest.approx(0.5, rel=1e-12)
    lines = np.abs(np.fft.rfft(x))[[100, 300, 1100]]
    np.testing.assert_allclose(lines, lines[0], rtol=1e-9)
    np.testing.assert_array_equal(x, multitone(frequencies, 0.5, RATE, RATE, seed=3))
    with pytest.raises(UsageError, match="at least one"):
        multitone([], 1.0, RATE, 10)


@pytest.mark.parametrize("frequency", [-1.0, 24_001.0, math.nan])
def test_a_frequency_beyond_half_the_rate_is_refused(frequency):
    with pytest.raises(UsageError, match="frequency_hz"):
        sine(frequency, 1.0, RATE, 10)


@given(st.floats(20.0, 20_000.0), st.sampled_from([1000, 4096, 44_100, 65_536]))
def test_a_coherent_frequency_is_near_and_repeats_no_phase(frequency, frames):
    found = coherent_frequency(frequency, RATE, frames)
    periods = round(found * frames / RATE)
    assert found == periods * RATE / frames
    assert math.gcd(periods, frames) == 1
    if frequency > 2 * RATE / frames:
        assert abs(found - frequency) < 8 * RATE / frames


def test_a_coherent_sine_fills_one_line_of_the_spectrum():
    # IEEE Std 1241, coherent sampling (from memory): no leakage, so no window.
    frames = 4096
    frequency = coherent_frequency(997.0, RATE, frames)
    spectrum = np.abs(np.fft.rfft(sine(frequency, 1.0, RATE, frames))) / (frames / 2)
    line = round(frequency * frames / RATE)
    assert spectrum[line] == pytest.approx(1.0, abs=1e-12)
    assert np.max(np.delete(spectrum, line)) < 1e-11


def test_a_coherent_frequency_that_cannot_be_is_refused():
    with pytest.raises(UsageError, match="no coherent frequency"):
        coherent_frequency(24_000.0, RATE, 4096)
    with pytest.raises(UsageError, match="no coherent frequency"):
        coherent_frequency(1000.0, RATE, 2)
