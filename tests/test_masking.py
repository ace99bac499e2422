"""The meter: the same under any cut, at any rate, heard again, in any room; odd recordings."""

from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sounds import QUIET_ROOM, RATE, dead_zone, noise, plucked_string, tone

from tonesim import nmr, roex
from tonesim.ear import Listening
from tonesim.errors import UsageError
from tonesim.masking import FrameSeries, MaskingMeter, band_readings, frame_series

HOME = Listening(90.0, 25.0)
FIGURES = [f.name for f in fields(FrameSeries) if f.name != "padded"]


def pair(seconds=2.0, rate=RATE):
    """A string, and the same with a softer one along with it."""
    t = np.arange(round(seconds * rate)) / rate
    fade = np.minimum(1.0, t / 0.02)  # a jump at time 0 has no meaning at another rate
    reference = fade * plucked_string(196.0, seconds, rate)
    return reference, reference + 0.003 * fade * plucked_string(294.0, seconds, rate)


@settings(max_examples=8)
@given(st.lists(st.integers(1, 40_000), min_size=1, max_size=4), st.sampled_from([44_100, RATE]))
def test_any_cut_gives_equal_bits(sizes, rate):
    reference, test = pair(1.5, rate)
    whole = frame_series(reference, test, rate, HOME)
    meter, start, turn = MaskingMeter(rate, HOME), 0, 0
    while start < reference.shape[0]:
        size = sizes[turn % len(sizes)] if turn < 20 else 10_000
        meter.add(reference[start : start + size], test[start : start + size])
        start, turn = start + size, turn + 1
    cut = meter.finish()
    for name in FIGURES:
        assert np.array_equal(getattr(whole, name), getattr(cut, name)), name


@pytest.mark.parametrize("rate", [22_050, 44_100, 88_200, 96_000])
def test_the_rate_of_a_recording_does_not_matter(rate):
    at_48, other = (frame_series(*pair(2.0, r), r, HOME) for r in (RATE, rate))
    assert other.frames == at_48.frames == 92
    # Measured: 0.03 dB, 0.003 jnd; the resampler's ripple and the last frame, which the end cuts.
    for name, tolerance in [("nmr_max_db", 0.05), ("ratio_max_db", 0.05), ("jnd_max", 0.005)]:
        np.testing.assert_allclose(getattr(other, name), getattr(at_48, name), atol=tolerance)
    np.testing.assert_allclose(other.level_db, at_48.level_db, atol=0.05)


def test_time_and_level_of_a_frame():
    series = frame_series(tone(1000.0, 74.0), tone(1000.0, 77.0), RATE, QUIET_ROOM)
    assert series.frames == 1 + (RATE - 2048) // 1024
    np.testing.assert_allclose(series.time_s[:2], [1024 / RATE, 2048 / RATE])
    np.testing.assert_allclose(series.level_db, 74.0, atol=0.01)
    np.testing.assert_allclose(series.level_dba, 77.0, atol=0.01)  # the louder; 0 dB at 1 kHz
    # A step of 3 dB: residual 20 lg(10^(3 / 20) - 1) = -7.7 dB.
    np.testing.assert_allclose(series.residual_db, 74.0 - 7.69, atol=0.02)


def test_the_middle_of_a_click_is_where_it_is():
    reference, test = tone(500.0, 60.0, 2.0), tone(500.0, 60.0, 2.0)
    test[60_000] += 0.01
    series = frame_series(reference, test, RATE, QUIET_ROOM)
    worst = int(np.argmax(series.nmr_max_db))
    assert abs(series.time_s[worst] - 60_000 / RATE) <= 512 / RATE
    assert np.sum(series.nmr_max_db > -50.0) == 2  # frames overlap by half


def test_active_frames_are_those_with_sound_in_either_recording():
    x = tone(1000.0, 60.0, 2.0)
    first, second = x.copy(), x.copy()
    first[RATE // 2 :] = 0.0
    second[: RATE // 2] = 0.0
    second[3 * RATE // 2 :] = 0.0
    active = frame_series(first, second, RATE, QUIET_ROOM).active
    assert np.all(active[:68])
    assert not np.any(active[-17:])  # the excitation of a last sound takes a few frames to fade
    with_room = frame_series(first, second, RATE, Listening(100.0, 40.0)).active
    assert np.array_equal(active, with_room)  # the room makes nothing active


def test_an_active_frame_reaches_15_db_above_the_noise_of_the_ear():
    # 28.1 dB SPL do: 1.9 dB go into weighting, 0.7 beside the band, 9 into spreading at that level,
    # and the ear's noise is 1.5 dB.
    for level, active in [(27.5, False), (28.7, True)]:
        x = tone(1000.0, level)
        series = frame_series(x, x, RATE, QUIET_ROOM)
        assert np.all(series.active == active)


def test_room_noise_masks():
    reference, test = pair()
    silent = frame_series(reference, test, RATE, Listening(80.0))
    for dba, least in [(20.0, 0.0), (40.0, 8.0)]:
        room = frame_series(reference, test, RATE, Listening(80.0, dba))
        for name in ("nmr_max_db", "ratio_max_db", "quiet_max_db"):
            fall = getattr(silent, name) - getattr(room, name)
            assert np.min(fall) > -1e-9, name
        assert np.max(silent.nmr_max_db - room.nmr_max_db) > least


@pytest.mark.parametrize("change", [-23.0, -3.0, 0.0, 11.0])
def test_heard_again_at_another_level_as_if_played_there(change):
    reference, test = pair()
    meter = MaskingMeter(RATE, HOME, keep_bands=True)
    meter.add(reference, test)
    meter.finish()
    again = meter.replay(change)
    played = frame_series(reference, test, RATE, Listening(90.0 + change, 25.0))
    for name in ("nmr_max_db", "ratio_max_db", "quiet_max_db", "level_db", "level_dba"):
        # Powers are kept with 24 bits, 5e-7 dB; twice, and through slopes.
        np.testing.assert_allclose(getattr(again, name), getattr(played, name), atol=1e-5)
    np.testing.assert_allclose(again.jnd_max, played.jnd_max, rtol=1e-4, atol=1e-5)
    assert np.array_equal(again.active, played.active)


def test_only_a_finished_recording_with_its_bands_is_heard_again():
    reference, test = pair(0.1)
    for keep, finish in [(False, True), (True, False)]:
        meter = MaskingMeter(RATE, HOME, keep_bands=keep)
        meter.add(reference, test)
        if finish:
            meter.finish()
        with pytest.raises(UsageError, match="keep its bands and finish"):
            meter.replay(-6.0)


def test_what_is_kept_of_a_long_recording_is_small():
    meter = MaskingMeter(RATE, HOME)
    block = 0.1 * np.random.default_rng(1).standard_normal(RATE)
    for _ in range(20):
        meter.add(block, block)
    series = meter.finish()
    kept = sum(getattr(series, name).nbytes for name in FIGURES)
    assert kept < 100 * series.frames
    assert meter._framer._held.shape[0] < 2048 + 32 * 1024


def test_readings_per_band_are_those_of_the_series():
    reference, test = pair(1.0)
    readings = band_readings(reference, test, RATE, HOME)
    series = frame_series(reference, test, RATE, HOME)
    assert readings.nmr.shape == (series.frames, 109)
    assert readings.ratio.shape == (series.frames, 150)
    assert np.array_equal(10 * np.log10(readings.nmr.max(axis=1)), series.nmr_max_db)
    assert np.array_equal(nmr.CENTRES_HZ[readings.nmr.argmax(axis=1)], series.nmr_band_hz)
    assert np.array_equal(roex.CENTRES_HZ[readings.ratio.argmax(axis=1)], series.ratio_channel_hz)
    assert np.array_equal(readings.jnd.max(axis=1), series.jnd_max)


@pytest.mark.parametrize("frames", [1, 100, 2048, 5000])
def test_silence_has_figures(frames):
    silence = np.zeros(frames)
    series = frame_series(silence, silence, RATE, HOME)
    for name in FIGURES:
        assert np.all(np.isfinite(getattr(series, name))), name
    assert not np.any(series.active)
    assert np.all(series.level_db == -120.0)
    assert series.padded == (frames < 2048)


def test_extreme_levels_stay_finite():
    x = noise(50.0, 16_000.0, 90.0)
    for level in (-100.0, 180.0):
        series = frame_series(x, dead_zone(x, 0.1), RATE, Listening(level))
        for name in FIGURES:
            assert np.all(np.isfinite(getattr(series, name))), (name, level)


def test_a_sample_that_is_no_number_is_refused():
    meter = MaskingMeter(RATE, HOME)
    meter.add(np.zeros(100), np.zeros(100))
    with pytest.raises(UsageError, match="test is nan at frame 103"):
        meter.add(np.zeros(10), np.array([0.0, 0.0, 0.0, np.nan] + [0.0] * 6))
