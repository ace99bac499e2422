"""The rate changer: delay, pass band, images, aliases, and equal bits under any cut."""

import tracemalloc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tonesim.errors import UsageError
from tonesim.oversample import PASS_EDGE, Oversampler, half_band_branch, oversampling_factor
from tonesim.signals import burst, coherent_frequency, sine

FACTORS = [2, 4, 8, 16, 64]
STOP_DB = -110.0
PASS_DB = 0.001


def round_trip(oversampler, x, sizes):
    parts, start, turn = [], 0, 0
    while start < x.size:
        block = x[start : start + sizes[turn % len(sizes)]]
        high, low = np.empty(block.size * oversampler.factor), np.empty(block.size)
        oversampler.up(block, high)
        oversampler.down(high, low)
        parts.append(low)
        start, turn = start + block.size, turn + 1
    return np.concatenate(parts)


def response_up(factor, frames=512):
    impulse = np.zeros(frames)
    impulse[0] = 1.0
    high = np.empty(frames * factor)
    Oversampler(factor, frames).up(impulse, high)
    return high


def response_down(factor, frames=512):
    """Impulse response at the high rate: an impulse at high frame j gives its frames nF - j."""
    response = np.zeros(frames * factor)
    for j in range(factor):
        oversampler, out = Oversampler(factor, frames), np.empty(frames)
        impulse = np.zeros(frames * factor)
        impulse[j] = 1.0
        oversampler.down(impulse, out)
        at = np.arange(frames) * factor - j
        response[at[at >= 0]] = out[at >= 0]
    return response


def level_db(response, gain, factor):
    """Spectrum in dB and its frequencies as fractions of the base rate."""
    size = 8 * response.size
    spectrum = np.abs(np.fft.rfft(response, size)) / gain
    return 20.0 * np.log10(np.maximum(spectrum, 1e-12)), np.fft.rfftfreq(size, 1.0 / factor)


@pytest.mark.parametrize(
    ("sample_rate", "factor"),
    [
        (8000, 64),
        (11025, 32),
        (16000, 32),
        (22050, 16),
        (32000, 16),
        (44100, 8),
        (48000, 8),
        (88200, 4),
        (96000, 4),
        (176400, 2),
        (192000, 2),
        (352800, 1),
        (384000, 1),
        (768000, 1),
    ],
)
def test_the_factor_brings_the_rate_nearest_to_384_khz(sample_rate, factor):
    assert oversampling_factor(sample_rate) == factor
    assert oversampling_factor(sample_rate, multiply=4) == 4 * factor


@pytest.mark.parametrize(
    "wrong", [{"multiply": 3}, {"multiply": 0}, {"sample_rate": 0}, {"sample_rate": np.nan}]
)
def test_a_factor_of_nonsense_is_refused(wrong):
    with pytest.raises(UsageError, match=next(iter(wrong))):
        oversampling_factor(**{"sample_rate": 48000, **wrong})


@pytest.mark.parametrize("factor", FACTORS)
def test_an_impulse_arrives_at_the_latency_and_rings_alike_on_both_sides(factor):
    oversampler = Oversampler(factor, 64)
    impulse = np.zeros(1024)
    impulse[10] = 1.0
    y = round_trip(oversampler, impulse, [64])
    centre = 10 + oversampler.latency
    assert np.argmax(np.abs(y)) == centre
    assert not np.any(y[:10])
    around = y[10 : centre + oversampler.latency + 1]
    np.testing.assert_allclose(around, around[::-1], rtol=0, atol=1e-15)
    assert np.max(np.abs(y[centre + oversampler.latency + 1 :])) == 0.0


@pytest.mark.parametrize("factor", FACTORS)
@pytest.mark.parametrize(("way", "gain"), [(response_up, "factor"), (response_down, 1.0)])
def test_pass_band_is_flat_and_stop_band_is_110_db_down(factor, way, gain):
    level, frequency = level_db(way(factor), factor if gain == "factor" else gain, factor)
    assert np.max(np.abs(level[frequency <= PASS_EDGE])) < PASS_DB
    assert np.max(level[frequency >= 1.0 - PASS_EDGE]) < STOP_DB


@pytest.mark.parametrize("factor", FACTORS)
def test_half_the_base_rate_lies_6_db_down(factor):
    # Half-band filters are symmetric about this point (Crochiere and Rabiner, from memory).
    level, frequency = level_db(response_up(factor), factor, factor)
    assert np.interp(0.5, frequency, level) == pytest.approx(-6.0206, abs=0.01)


@pytest.mark.parametrize("frequency_hz", [20.0, 1000.0, 15000.0, 20000.0])
def test_a_sine_comes_back_delayed_by_the_latency(frequency_hz):
    oversampler = Oversampler(8, 512)
    x = sine(frequency_hz, 1.0, 44100, 6000)
    y = round_trip(oversampler, x, [512])
    late = oversampler.latency
    # 2e-4 is 0.002 dB: the ripple of both ways.
    np.testing.assert_allclose(y[1000:], x[1000 - late : -late], rtol=0, atol=2e-4)


def test_a_constant_passes_unchanged():
    for factor in FACTORS:
        high, low = np.empty(512 * factor), np.empty(512)
        oversampler = Oversampler(factor, 512)
        oversampler.up(np.ones(512), high)
        oversampler.down(high, low)
        np.testing.assert_allclose(low[-100:], 1.0, rtol=0, atol=1e-14)


def test_harmonics_of_a_cubed_sine_do_not_fold_back():
    frames = 8192
    frequency = coherent_frequency(15_000.0, 44_100, frames)
    x = sine(frequency, 1.0, 44_100, 2 * frames)
    oversampler = Oversampler(8, 2 * frames)
    high, low = np.empty(16 * frames), np.empty(2 * frames)
    oversampler.up(x, high)
    oversampler.down(high**3, low)
    # sin^3 = 3/4 sin - 1/4 sin 3x: the third harmonic, 45 kHz, would fold to 0.9 kHz.
    spectrum = np.abs(np.fft.rfft(low[frames:])) / (frames / 2)
    line = round(frequency * frames / 44_100)
    assert spectrum[line] == pytest.approx(0.75, rel=1e-3)
    spectrum[line] = 0.0
    assert np.max(spectrum) < 0.75 * 10.0 ** (STOP_DB / 20.0)


@settings(max_examples=30, deadline=None)
@given(
    st.sampled_from([1, 2, 4, 8, 16]),
    st.lists(st.integers(1, 96), min_size=1, max_size=6),
    st.integers(0, 2**32 - 1),
)
def test_any_cut_gives_equal_bits(factor, sizes, seed):
    x = np.random.default_rng(seed).standard_normal(500)
    whole = round_trip(Oversampler(factor, 500), x, [500])
    np.testing.assert_array_equal(round_trip(Oversampler(factor, 96), x, sizes), whole)


@pytest.mark.parametrize("factor", [1, 8])
def test_reset_equals_fresh(factor):
    x = burst(1000.0, 1.0, 48000, 400, 0, 400)
    oversampler = Oversampler(factor, 64)
    first = round_trip(oversampler, x, [64])
    oversampler.reset()
    np.testing.assert_array_equal(round_trip(oversampler, x, [64]), first)


def test_factor_one_passes_through_without_delay():
    x = np.random.default_rng(1).standard_normal(100)
    oversampler = Oversampler(1, 100)
    assert oversampler.latency == 0
    np.testing.assert_array_equal(round_trip(oversampler, x, [33]), x)


def test_up_and_down_allocate_no_arrays():
    oversampler = Oversampler(8, 4096)
    x, high = np.zeros(4096), np.zeros(32768)
    oversampler.up(x, high)
    oversampler.down(high, x)
    tracemalloc.start()
    oversampler.up(x, high)
    oversampler.down(high, x)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < x.nbytes / 4  # array headers of views only


def test_wrong_lengths_are_refused():
    oversampler = Oversampler(8, 64)
    with pytest.raises(UsageError, match="65 samples came; 1 to 64"):
        oversampler.up(np.zeros(65), np.zeros(520))
    with pytest.raises(UsageError, match="block of 0"):
        oversampler.up(np.zeros(0), np.zeros(0))
    with pytest.raises(UsageError, match="shape"):
        oversampler.up(np.zeros(64), np.zeros(511))
    with pytest.raises(UsageError, match="shape"):
        oversampler.down(np.zeros(8), np.zeros(2))
    with pytest.raises(UsageError, match="power of two"):
        Oversampler(6, 64)
    with pytest.raises(UsageError, match="block_size"):
        Oversampler(8, 0)


@pytest.mark.parametrize("attenuation_db", [60.0, 90.0, 112.0])
def test_a_half_band_filter_meets_its_attenuation_with_the_taps_kaiser_estimates(attenuation_db):
    branch = half_band_branch(0.2, attenuation_db)
    np.testing.assert_array_equal(branch, branch[::-1])
    assert np.sum(branch) == pytest.approx(1.0, abs=1e-15)
    taps = np.zeros(2 * branch.size - 1)
    taps[::2] = 0.5 * branch
    taps[branch.size - 1] = 0.5
    spectrum = np.abs(np.fft.rfft(taps, 8192))
    stop = spectrum[np.fft.rfftfreq(8192) >= 0.3]
    assert 20.0 * np.log10(np.max(stop)) <= -attenuation_db + 0.01
    # Kaiser's estimate (Kaiser 1974, from memory); half-band lengths come in steps of 4.
    estimate = (attenuation_db - 7.95) / (2.285 * 2 * np.pi * 0.1) + 1
    assert abs(taps.size - estimate) < 6
