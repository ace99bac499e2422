"""Loudness and peaks against Rec. ITU-R BS.1770-5, EBU Tech 3341, pyloudnorm and scipy."""

import math

import numpy as np
import pyloudnorm
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from tonesim.errors import UsageError
from tonesim.level import LevelMeter, LoudnessMeter, gain_to_match, k_weighting
from tonesim.signals import sine, square

RATE = 48_000
# pyloudnorm's default K filter is an approximation that reads 0.02 to 0.043 dB low.
PYLOUDNORM_BIAS_DB = (-0.045, 0.0)


def loudness(x, rate=RATE):
    x = np.asarray(x)
    meter = LoudnessMeter(rate, 1 if x.ndim == 1 else x.shape[1])
    meter.add(x)
    return meter.integrated()


def true_peak(x, rate=RATE):
    meter = LevelMeter(rate, 1)
    meter.add(x)
    return meter.true_peak_db


def steps(*levels_and_seconds):
    """A stereo 1 kHz sine at levels in dBFS, one after another."""
    frames = [round(seconds * RATE) for _, seconds in levels_and_seconds]
    gain = np.repeat([10 ** (level / 20) for level, _ in levels_and_seconds], frames)
    tone = gain * sine(1000.0, 1.0, RATE, gain.size)
    return np.stack([tone, tone], axis=1)


def test_the_filter_at_48_khz_is_the_table_of_the_standard():
    # Rec. ITU-R BS.1770-5, Annex 1, tables 1 and 2.
    shelf = [1.53512485958697, -2.69169618940638, 1.19839281085285]
    expected = [
        [*shelf, 1.0, -1.69065929318241, 0.73248077421585],
        [1.0, -2.0, 1.0, 1.0, -1.99004745483398, 0.99007225036621],
    ]
    np.testing.assert_allclose(k_weighting(RATE), expected, rtol=0, atol=1e-13)


@pytest.mark.parametrize("rate", [8000, 11025, 22050, 44100, 48000, 96000, 192000, 384000])
def test_997_hz_at_full_scale_in_one_channel_reads_minus_3_01(rate):
    # Rec. ITU-R BS.1770-5, Annex 1: "-3.01 LKFS".
    assert loudness(sine(997.0, 1.0, rate, 3 * rate), rate) == pytest.approx(-3.01, abs=0.005)


@pytest.mark.parametrize(
    ("rate", "highest_hz", "tolerance_db"),
    [(44100, 20_000, 0.003), (96000, 20_000, 0.011), (384000, 20_000, 0.014), (8000, 3800, 0.5)],
)
def test_the_filter_at_other_rates_follows_that_at_48_khz(rate, highest_hz, tolerance_db):
    f = np.geomspace(20.0, highest_hz, 200)
    here = np.abs(signal.sosfreqz(k_weighting(rate), worN=f, fs=rate)[1])
    there = np.abs(signal.sosfreqz(k_weighting(RATE), worN=f, fs=RATE)[1])
    np.testing.assert_allclose(20 * np.log10(here / there), 0.0, atol=tolerance_db)


@pytest.mark.parametrize(
    ("case", "expected"),
    [
        ([(-23, 20)], -23.0),
        ([(-33, 20)], -33.0),
        ([(-36, 10), (-23, 60), (-36, 10)], -23.0),
        ([(-72, 10), (-36, 10), (-23, 60), (-36, 10), (-72, 10)], -23.0),
        ([(-26, 20), (-20, 20.1), (-26, 20)], -23.0),
    ],
)
def test_ebu_tech_3341_cases_1_to_5(case, expected):
    # EBU Tech 3341, table of minimum requirements: integrated loudness within 0.1 LU.
    assert loudness(steps(*case)) == pytest.approx(expected, abs=0.1)


def test_five_channels_are_weighted():
    # EBU Tech 3341 case 6: L R C Ls Rs at -28, -28, -24, -30, -30 dBFS read -23.0 LUFS.
    levels = 10 ** (np.array([-28, -28, -24, -30, -30]) / 20)
    x = sine(1000.0, 1.0, RATE, 20 * RATE)[:, np.newaxis] * levels
    assert loudness(x) == pytest.approx(-23.0, abs=0.1)


def decaying_notes(rate=44_100, seconds=6):
    t = np.arange(seconds * rate) / rate
    return 0.5 * np.exp(-(t % 2.0) / 0.4) * np.sin(2 * np.pi * 196.0 * t)


def test_a_decaying_signal_agrees_with_pyloudnorm():
    rng = np.random.default_rng(11)
    t = np.arange(6 * RATE) / RATE
    noise = rng.standard_normal((t.size, 2)) * (0.2 * np.exp(-(t % 2.0) / 0.4))[:, np.newaxis]
    for x, rate in [(decaying_notes(), 44_100), (noise, RATE)]:
        bias = pyloudnorm.Meter(rate).integrated_loudness(x) - loudness(x, rate)
        assert PYLOUDNORM_BIAS_DB[0] < bias < PYLOUDNORM_BIAS_DB[1]


def test_an_incomplete_last_block_is_dropped():
    # Rec. ITU-R BS.1770-5, Annex 1: here the last 50 ms complete no block.
    x = steps((-20, 1.0), (-3, 0.05))
    assert loudness(x) == loudness(x[:RATE])
    assert loudness(steps((-20, 1.0), (-3, 0.1))) > loudness(x) + 1.0


def test_silence_reads_minus_infinity():
    assert loudness(np.zeros(RATE)) == -math.inf
    assert loudness(np.zeros(100)) == -math.inf
    assert LoudnessMeter(RATE, 1).integrated() == -math.inf
    assert loudness(steps((-75, 3))) == -math.inf  # below the absolute gate


@pytest.mark.parametrize("seconds", [0.1, 0.25, 0.39])
def test_a_short_clip_reads_its_ungated_weighted_level(seconds):
    x = sine(1000.0, 0.1, RATE, round(seconds * RATE))
    weighted = signal.sosfilt(k_weighting(RATE), x)
    expected = -0.691 + 10 * np.log10(np.mean(weighted**2))
    assert loudness(x) == pytest.approx(expected, abs=1e-9)


@settings(max_examples=15, deadline=None)
@given(st.lists(st.integers(1, 9000), min_size=1, max_size=5), st.sampled_from([11_025, 44_100]))
def test_any_cut_gives_equal_readings(sizes, rate):
    x = np.random.default_rng(6).standard_normal((rate, 2))
    loud, level = LoudnessMeter(rate, 2), LevelMeter(rate, 2)
    start, turn = 0, 0
    while start < rate:
        block = x[start : start + sizes[turn % len(sizes)]]
        loud.add(block)
        level.add(block)
        if turn % 7 == 0:  # a reading in between must not disturb
            assert level.true_peak_db >= 20 * math.log10(level.peak)
        start, turn = start + len(block), turn + 1
    whole = LevelMeter(rate, 2)
    whole.add(x)
    assert loud.integrated() == loudness(x, rate)
    assert (level.peak, level.rms, level.true_peak_db) == (
        whole.peak,
        whole.rms,
        whole.true_peak_db,
    )


def test_memory_of_the_loudness_meter_grows_by_one_number_per_hop():
    meter = LoudnessMeter(RATE, 1)
    for _ in range(10):
        meter.add(np.ones(RATE))
    assert len(meter._hop_energy) == 100


def test_reset_forgets():
    loud, level = LoudnessMeter(RATE, 1), LevelMeter(RATE, 1)
    for meter in (loud, level):
        meter.add(square(100.0, 1.0, RATE, RATE))
        meter.reset()
        meter.add(sine(997.0, 0.5, RATE, RATE))
    assert loud.integrated() == loudness(sine(997.0, 0.5, RATE, RATE))
    assert level.true_peak_db == true_peak(sine(997.0, 0.5, RATE, RATE))


def faded(x):
    """Without a jump at either end, which would overshoot between samples by itself."""
    ramp = np.minimum(1.0, np.minimum(np.arange(x.size), np.arange(x.size)[::-1]) / 2000)
    return x * ramp


@pytest.mark.parametrize(
    ("divisor", "phase_deg", "amplitude", "expected"),
    [
        (4, 0.0, 0.50, -6.0),
        (4, 45.0, 0.50, -6.0),
        (6, 60.0, 0.50, -6.0),
        (8, 67.5, 0.50, -6.0),
        (4, 45.0, 1.41, 3.0),
    ],
)
def test_ebu_tech_3341_cases_15_to_19(divisor, phase_deg, amplitude, expected):
    # EBU Tech 3341: true peak within +0.2 and -0.4 dB.
    x = faded(sine(RATE / divisor, amplitude, RATE, 20_000, math.radians(phase_deg)))
    assert -0.4 < true_peak(x) - expected < 0.2


def test_true_peak_agrees_with_scipy_resampling():
    x = faded(signal.sosfilt(signal.butter(4, 0.7, output="sos"), decaying_notes(RATE, 1)))
    x += faded(0.1 * np.random.default_rng(8).standard_normal(RATE)) * 0.5
    reference = 20 * math.log10(np.max(np.abs(signal.resample_poly(x, 64, 1))))
    # Four times the rate may miss the top by 0.17 dB for content up to a quarter of the rate.
    assert -0.2 < true_peak(x) - reference < 0.05


def test_true_peak_of_the_last_samples_is_not_missed():
    x = np.zeros(1000)
    x[-4:] = [0.5, 1.0, 1.0, 0.5]  # the top lies between two samples
    assert true_peak(x) > 0.5
    assert true_peak(x) == pytest.approx(true_peak(np.concatenate([x, np.zeros(4000)])), abs=1e-12)


def test_peak_and_rms_are_those_of_the_samples():
    x = np.random.default_rng(9).standard_normal((10_000, 2))
    meter = LevelMeter(RATE, 2)
    meter.add(x)
    assert meter.peak == np.max(np.abs(x))
    assert meter.rms == pytest.approx(math.sqrt(np.mean(x**2)), rel=1e-12)


def test_an_unused_meter_reads_nothing():
    meter = LevelMeter(RATE, 1)
    assert (meter.peak, meter.rms, meter.true_peak_db) == (0.0, 0.0, -math.inf)


def test_gain_matches_loudness():
    x = decaying_notes()
    gain, limited = gain_to_match(loudness(x, 44_100), -23.0, float(np.max(np.abs(x))))
    assert not limited
    assert loudness(gain * x, 44_100) == pytest.approx(-23.0, abs=1e-9)


def test_gain_stops_at_the_ceiling():
    gain, limited = gain_to_match(-30.0, -10.0, 0.5, ceiling_db=-6.0)
    assert limited
    assert 0.5 * gain == pytest.approx(10 ** (-6.0 / 20))


def test_silence_needs_no_gain():
    assert gain_to_match(-math.inf, -23.0, 0.0) == (1.0, False)


@pytest.mark.parametrize(
    "values",
    [
        (math.nan, -23.0, 0.5),
        (-20.0, -math.inf, 0.5),
        (-20.0, -23.0, -0.1),
        (-20.0, -23.0, math.inf),
        (-20.0, -23.0, 0.5, math.nan),
    ],
)
def test_gain_for_nonsense_is_refused(values):
    with pytest.raises(UsageError, match="cannot match"):
        gain_to_match(*values)


def test_meters_of_the_wrong_shape_are_refused():
    with pytest.raises(UsageError, match="1 to 5"):
        LoudnessMeter(RATE, 6)
    with pytest.raises(UsageError, match="4000 Hz"):
        LoudnessMeter(4000, 1)
    with pytest.raises(UsageError, match=r"2 channel\(s\); a block of 1"):
        LoudnessMeter(RATE, 2).add(np.zeros(10))
