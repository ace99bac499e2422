"""The cabinet filter: shapes against analogue sections, responses at other rates, the laws."""

import numpy as np
import processor_laws as laws
import pytest
from scipy import signal

from tonesim.cabinet import Cabinet, analog_response_db, resample_response, shape_response
from tonesim.catalogue import CabinetShape, Corner, Peak, load_catalogue
from tonesim.errors import DesignError, UsageError
from tonesim.signals import sine

RATE = 48_000


def shape(highpass=(), peaks=(), lowpass=()):
    return CabinetShape(
        name="invented",
        highpass=tuple(Corner(hz=hz, q=q) for hz, q in highpass),
        peaks=tuple(Peak(hz=hz, q=q, gain_db=gain_db) for hz, q, gain_db in peaks),
        lowpass=tuple(Corner(hz=hz, q=q) for hz, q in lowpass),
        source="Invented for this test.",
    )


SHAPE = shape(
    highpass=[(97.0, 1.1)],
    peaks=[(121.0, 1.4, 2.0), (430.0, 0.9, -3.0), (2900.0, 1.6, 5.5)],
    lowpass=[(5100.0, 1.1), (5700.0, 0.8)],
)
CATALOGUE = load_catalogue()


def spectrum(response, latency, rate, frequency_hz):
    angle = -2j * np.pi * np.outer(frequency_hz, np.arange(response.size) - latency) / rate
    return np.exp(angle) @ response


def scipy_level_db(cabinet, frequency_hz):
    """The same sections by scipy.signal.freqs, each over s = j 2 pi f."""
    total = np.zeros(len(frequency_hz))
    w = 2 * np.pi * np.asarray(frequency_hz)

    def add(numerator, denominator):
        return 20 * np.log10(np.abs(signal.freqs(numerator, denominator, worN=w)[1]))

    for s in cabinet.highpass:
        w0 = 2 * np.pi * s.hz
        total += add([1, 0, 0], [1, w0 / s.q, w0**2])
    for s in cabinet.peaks:
        w0, a = 2 * np.pi * s.hz, 10 ** (s.gain_db / 40)
        total += add([1, w0 * a / s.q, w0**2], [1, w0 / (a * s.q), w0**2])
    for s in cabinet.lowpass:
        w0 = 2 * np.pi * s.hz
        total += add([w0**2], [1, w0 / s.q, w0**2])
    return total


def test_the_analogue_level_is_that_of_its_sections_relative_to_1_khz():
    f = np.geomspace(20.0, 20_000.0, 50)
    expected = scipy_level_db(SHAPE, f) - scipy_level_db(SHAPE, [1000.0])
    np.testing.assert_allclose(analog_response_db(SHAPE, f), expected, rtol=0, atol=1e-9)


@pytest.mark.parametrize("q", [0.5, 1.0, 1.7])
def test_a_second_order_section_passes_its_corner_with_its_q(q):
    # At its corner frequency a second-order low-pass or high-pass has the gain Q (textbook).
    s = 1j * 1000.0 / 4000.0
    for section, numerator in (("highpass", s * s), ("lowpass", 1.0)):
        at_1_khz = 20 * np.log10(abs(numerator / (s * s + s / q + 1)))
        corner = float(analog_response_db(shape(**{section: [(4000.0, q)]}), 4000.0))
        assert corner + at_1_khz == pytest.approx(20 * np.log10(q), abs=1e-9)


def test_a_peak_lifts_its_centre_by_its_gain():
    lift = shape(peaks=[(8000.0, 2.0, 6.0)])
    far = float(analog_response_db(lift, 1e-3))
    assert float(analog_response_db(lift, 8000.0)) - far == pytest.approx(6.0, abs=1e-9)


@pytest.mark.parametrize("name", sorted(CATALOGUE.cabinets))
def test_every_cabinet_of_the_catalogue_has_the_levels_it_states(name):
    part = CATALOGUE.cabinet(name)
    hz, level_db = np.array(part.checked).T
    assert hz.size >= 10
    # Stated to 0.1 dB.
    np.testing.assert_allclose(analog_response_db(part, hz), level_db, rtol=0, atol=0.0501)


@pytest.mark.parametrize("rate", [44_100, 48_000])
@pytest.mark.parametrize("name", sorted(CATALOGUE.cabinets))
def test_every_cabinet_of_the_catalogue_is_followed(name, rate):
    part = CATALOGUE.cabinet(name)
    response, latency = shape_response(part, rate)
    f = np.geomspace(50.0, 10_000.0, 400)
    level = 20 * np.log10(np.abs(spectrum(response, latency, rate, f)))
    np.testing.assert_allclose(level, analog_response_db(part, f), rtol=0, atol=0.05)


@pytest.mark.parametrize("rate", [8000, 22050, 44100, 48000, 96000, 192000])
def test_a_shape_follows_the_analogue_level_within_a_twentieth_of_a_db(rate):
    response, latency = shape_response(SHAPE, rate)
    f = np.geomspace(50.0, min(10_000.0, 0.42 * rate), 400)
    level = 20 * np.log10(np.abs(spectrum(response, latency, rate, f)))
    # A tail cut at -100 dB of about 1500 samples leaves at most about 0.015 dB.
    np.testing.assert_allclose(level, analog_response_db(SHAPE, f), rtol=0, atol=0.05)


def test_a_shape_is_the_analogue_filter_late_by_exactly_the_latency():
    response, latency = shape_response(SHAPE, RATE)
    f = np.geomspace(50.0, 10_000.0, 100)
    ours = spectrum(response, latency, RATE, f)
    sections = [([1, 0, 0], s) for s in SHAPE.highpass] + [([0, 0, 1], s) for s in SHAPE.lowpass]
    expected = np.ones(f.size, dtype=complex)
    for numerator, s in sections:
        x = 1j * f / s.hz
        expected *= np.polyval(numerator, x) / np.polyval([1, 1 / s.q, 1], x)
    for p in SHAPE.peaks:
        x, a = 1j * f / p.hz, 10 ** (p.gain_db / 40)
        expected *= np.polyval([1, a / p.q, 1], x) / np.polyval([1, 1 / (a * p.q), 1], x)
    # One sample of delay more or less would be 1.3 rad at 10 kHz.
    error = np.angle(ours / expected)
    assert np.max(np.abs(error)) < 0.01


def test_a_shape_ends_where_it_has_fallen_below_100_db():
    response, _ = shape_response(SHAPE, RATE)
    largest = np.max(np.abs(response))
    assert 500 < response.size < 4000
    assert abs(response[-1]) > 1e-5 * largest


def test_a_shape_that_rings_for_seconds_is_refused():
    with pytest.raises(DesignError, match=r"invented: a section at 0\.5 Hz with Q 2 rings"):
        shape_response(shape(highpass=[(0.5, 2.0)]), RATE)


def test_a_shape_without_sections_passes_everything():
    response, latency = shape_response(shape(), RATE)
    assert np.argmax(response) == latency
    f = np.linspace(20.0, 0.42 * RATE, 50)
    np.testing.assert_allclose(
        np.abs(spectrum(response, latency, RATE, f)), 1.0, rtol=0, atol=0.005
    )


@pytest.mark.parametrize(
    ("rate", "new_rate"),
    [
        (44100, 48000),
        (48000, 44100),
        (96000, 48000),
        (48000, 192000),
        (44100, 8000),
        (47999, 48000),
    ],
)
def test_a_response_describes_the_same_filter_at_another_rate(rate, new_rate):
    x = np.zeros(1500)
    x[[0, 5, 300, 1400]] = [1.0, -0.5, 0.2, 0.1]  # sharp from the first sample: the hard case
    y, latency = resample_response(x, rate, new_rate)
    f = np.linspace(20.0, 0.43 * min(rate, new_rate), 300)
    before, after = spectrum(x, 0, rate, f), spectrum(y, latency, new_rate, f)
    # Cutting the ringing of the band limit 32 samples before the beginning leaves about 2e-3.
    np.testing.assert_allclose(after, before, rtol=0, atol=0.004)


def test_a_response_agrees_with_scipy_resampling():
    envelope = signal.windows.hann(801)
    x = envelope * sine(3000.0, 1.0, 44_100, 801)
    y, latency = resample_response(x, 44_100, 48_000)
    # The gain of a filter is the sum of its samples, so more of them are smaller.
    expected = signal.resample_poly(x, 160, 147) * 44_100 / 48_000
    np.testing.assert_allclose(
        y[latency : latency + expected.size], expected[: y.size - latency], rtol=0, atol=2e-3
    )


def test_a_response_at_its_own_rate_is_unchanged():
    x = np.random.default_rng(2).standard_normal(64)
    y, latency = resample_response(x, RATE, RATE)
    assert latency == 0
    np.testing.assert_array_equal(y, x)
    assert y is not x


def test_a_response_without_samples_or_rate_is_refused():
    with pytest.raises(UsageError, match="0 to 48000"):
        resample_response(np.ones(4), 0, RATE)
    with pytest.raises(UsageError, match=r"shape \(0,\)"):
        resample_response(np.ones(0), 44100, RATE)


def test_a_cabinet_convolves():
    rng = np.random.default_rng(3)
    response, x = rng.standard_normal(700), rng.standard_normal((2000, 2))
    cabinet = Cabinet(response, 0, RATE)
    cabinet.prepare(RATE, 2000)
    expected = signal.fftconvolve(x, response[:, np.newaxis], axes=0)[:2000]
    np.testing.assert_allclose(cabinet.process(x), expected, rtol=0, atol=1e-11)


def cabinet():
    return Cabinet(*shape_response(SHAPE, RATE), RATE)


def noise(frames=3000):
    return np.random.default_rng(5).standard_normal(frames)


def test_any_cut_gives_equal_bits():
    laws.any_cut_gives_equal_bits(cabinet, noise(), RATE)
    laws.any_cut_gives_equal_bits(cabinet, noise(4000).reshape(2000, 2), RATE)


def test_the_block_is_left_alone():
    laws.the_block_is_left_alone(cabinet, noise(), RATE)


def test_reset_equals_fresh():
    laws.reset_equals_fresh(cabinet, noise(), RATE)


def test_an_impulse_arrives_at_the_latency():
    def thin():
        return Cabinet(*shape_response(shape(), RATE), RATE)

    laws.an_impulse_arrives_at_the_latency(thin, RATE)


def test_silence_stays_silent():
    laws.silence_stays_idle(cabinet, RATE)


def test_extremes_stay_finite():
    laws.extremes_stay_finite(cabinet, RATE, 1e30)


def test_process_before_prepare_is_refused():
    laws.process_before_prepare_is_refused(cabinet)


def test_a_longer_block_than_prepared_gives_equal_bits():
    laws.a_longer_block_than_prepared_gives_equal_bits(cabinet, noise(), RATE)


def test_channels_do_not_meet():
    laws.channels_do_not_meet(cabinet, noise(), RATE)


def test_threads_do_not_meet():
    laws.threads_do_not_meet(cabinet, RATE)


def test_another_rate_than_the_response_was_made_for_is_refused():
    with pytest.raises(UsageError, match="made for 48000 Hz, not 44100 Hz"):
        cabinet().prepare(44_100, 64)
    with pytest.raises(UsageError, match="block_size is 0"):
        cabinet().prepare(RATE, 0)


def test_a_change_of_channels_in_mid_stream_is_refused():
    stage = cabinet()
    stage.prepare(RATE, 64)
    stage.process(np.zeros((64, 2)))
    with pytest.raises(UsageError, match=r"1 channel\(s\) came after blocks of 2"):
        stage.process(np.zeros(64))
    stage.reset()
    assert stage.process(np.zeros(64)).shape == (64,)


@pytest.mark.parametrize("response", [[], [1.0, np.nan], [[1.0]]])
def test_a_response_that_is_no_signal_is_refused(response):
    with pytest.raises(UsageError, match="impulse response of finite numbers"):
        Cabinet(response, 0, RATE)


def test_a_latency_outside_the_response_is_refused():
    with pytest.raises(UsageError, match="latency of 2 lies outside"):
        Cabinet([1.0, 0.5], 2, RATE)
