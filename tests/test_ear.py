"""Scales, weightings, calibration and bands of the ear, against closed forms and tables."""

import importlib.util
import math

import numpy as np
import pytest
from scipy import signal
from sounds import FULL_DB, RATE, tone

from tonesim import ear, nmr, roex
from tonesim.errors import UsageError


def test_critical_band_rate_of_bs_1387():
    # z = 7 asinh(f / 650): ends of the range, worked out by hand.
    assert ear.bark(80.0) == pytest.approx(0.859378, abs=1e-6)
    assert ear.bark(18_000.0) == pytest.approx(28.102394, abs=1e-6)
    hertz = np.array([20.0, 650.0, 15_000.0])
    np.testing.assert_allclose(ear.bark_to_hz(ear.bark(hertz)), hertz, rtol=1e-12)


def test_critical_band_rate_is_near_that_of_zwicker():
    # E. Zwicker's critical-band limits (1961), from memory: 8, 12 and 17 Bark at 920, 1720 and
    # 3700 Hz. The form of BS.1387 is an approximation; from 20 Bark on it runs 1 Bark high.
    np.testing.assert_allclose(ear.bark([920.0, 1720.0, 3700.0]), [8.0, 12.0, 17.0], atol=0.15)


def test_equivalent_rectangular_bandwidth():
    # B. R. Glasberg and B. C. J. Moore, 1990: 132.6 Hz at 1 kHz; 35.5 Hz at 100 Hz.
    assert ear.erb_hz(1000.0) == pytest.approx(132.639, abs=1e-3)
    assert ear.erb_hz(100.0) == pytest.approx(35.494, abs=1e-3)
    # 1 kHz stands at 15.62 on the ERB-number scale (15.59 with the rounded constants).
    assert ear.erb_number(1000.0) == pytest.approx(15.62, abs=0.05)
    hertz = np.array([50.0, 1000.0, 15_000.0])
    np.testing.assert_allclose(ear.erb_number_to_hz(ear.erb_number(hertz)), hertz, rtol=1e-12)


def test_one_cam_is_one_bandwidth():
    # The scale is the integral of 1 / ERB (its constant is rounded to three figures).
    hertz = np.geomspace(100.0, 10_000.0, 9)
    slope = (ear.erb_number(hertz + 0.5) - ear.erb_number(hertz - 0.5)) * ear.erb_hz(hertz)
    np.testing.assert_allclose(slope, 1.0, rtol=0.004)


def test_bandwidth_is_that_of_scipys_gammatone():
    # A gammatone filter of order 4 with b = 1.019 ERB has that equivalent rectangular bandwidth
    # (R. D. Patterson et al., 1992, from memory); scipy makes one from its own formula for it.
    for hertz in (500.0, 1000.0, 4000.0):
        b, a = signal.gammatone(hertz, "iir", fs=RATE)
        w = np.linspace(0.5 * hertz, 1.5 * hertz, 20_001)
        gain = np.abs(signal.freqz(b, a, worN=w, fs=RATE)[1]) ** 2
        rectangular = np.sum(gain) * (w[1] - w[0]) / np.max(gain)
        # 3 %: its tails beyond half the centre are left out, and the filter is not quite ideal.
        assert rectangular == pytest.approx(float(ear.erb_hz(hertz)), rel=0.03)


@pytest.mark.parametrize(
    ("hertz", "expected"),
    [
        (50, -23.9811),
        (100, -13.7662),
        (250, -6.5962),
        (500, -3.7438),
        (1000, -1.9131),
        (2000, 1.0915),
        (3300, 5.5861),
        (4000, 3.9768),
        (8000, -2.1967),
        (12_000, -7.9737),
        (16_000, -21.8565),
    ],
)
def test_ear_weighting(hertz, expected):
    # Closed form of BS.1387, four decimals by hand.
    assert ear.ear_weighting_db(hertz) == pytest.approx(expected, abs=1e-4)


def test_a_weighting():
    # IEC 61672-1, table of A-weighting, given to 0.1 dB.
    table = {31.5: -39.4, 50: -30.2, 100: -19.1, 200: -10.9, 500: -3.2, 1000: 0.0}
    table |= {2000: 1.2, 4000: 1.0, 8000: -1.1, 16_000: -6.6}
    hertz = 1000 * 10 ** (np.round(10 * np.log10(np.array(list(table)) / 1000)) / 10)
    # Nominal frequencies stand for exact ones of base ten (IEC 61260).
    np.testing.assert_allclose(ear.a_weighting_db(hertz), list(table.values()), atol=0.06)


@pytest.mark.parametrize("dba", [20.0, 30.0])
def test_room_noise_reads_its_a_weighted_level_and_is_pink(dba):
    lines = ear.room_noise_lines(dba)
    assert 10 * np.log10(np.sum(lines * ear.A_WEIGHTS)) == pytest.approx(dba, abs=1e-9)
    octaves = [
        np.sum(lines[(f <= ear.LINES_HZ) & (2 * f > ear.LINES_HZ)]) for f in (500, 1000, 4000)
    ]
    np.testing.assert_allclose(octaves, octaves[0], rtol=0.03)  # lines at the borders
    assert not np.any(ear.room_noise_lines(None))


def test_calibration_is_energy_true():
    # BS.1387 takes the largest line of a 1019.5 Hz sine, gamma (N - 1) / 4 with gamma = 0.8497176
    # (P. Kabal, 2002, from memory); all lines of the sine together are 3.1775 dB more.
    n = np.arange(ear.FRAME)
    largest = max(
        np.max(np.abs(np.fft.rfft(ear.WINDOW * np.sin(2 * np.pi * 1019.5 / RATE * (n + 1024 * m)))))
        for m in range(10)
    )
    assert largest / ((ear.FRAME - 1) / 4) == pytest.approx(0.849718, abs=1e-6)
    assert -20 * math.log10(ear.CALIBRATION * largest) == pytest.approx(3.1775, abs=1e-4)


@pytest.mark.parametrize("hertz", [100.0, 440.0, 997.0, 1011.7, 5000.0, 15_000.0])
def test_lines_of_a_sine_add_up_to_its_level(hertz):
    frames = np.lib.stride_tricks.sliding_window_view(tone(hertz, 73.0), ear.FRAME)[:8192:1024]
    levels = 10 * np.log10(np.sum(ear.power(ear.spectra(frames, FULL_DB)), axis=1))
    # A low tone meets its own mirror image: a few thousandths of a decibel at 100 Hz.
    np.testing.assert_allclose(levels, 73.0, atol=0.005)


def test_white_noise_reads_its_level():
    x = np.random.default_rng(4).standard_normal(200 * ear.FRAME) * 10 ** (-30 / 20)
    frames = x.reshape(-1, ear.FRAME)
    mean = np.mean(np.sum(ear.power(ear.spectra(frames, FULL_DB)), axis=1))
    # rms of a sine of peak 1 is 3.01 dB below it. 0.05 dB: 200 frames of 2048 random samples.
    assert 10 * np.log10(mean) == pytest.approx(FULL_DB - 30 + 3.01, abs=0.05)


def test_one_volt_in_front_of_a_loudspeaker():
    # 1 V peak is 12.05 dB below 2.83 V rms; 6.02 dB less at 2 m.
    assert ear.loudspeaker_sine_spl_db(100.0, 1.0) == pytest.approx(87.95, abs=0.01)
    assert ear.loudspeaker_sine_spl_db(100.0, 2.0) == pytest.approx(81.93, abs=0.01)
    for values in [(100.0, 0.0), (math.nan, 1.0), (100.0, math.inf)]:
        with pytest.raises(UsageError, match="distance"):
            ear.loudspeaker_sine_spl_db(*values)


def test_pressure_of_a_sample():
    # 94 dB SPL is 1 Pa rms (0.02 dB off, by definition of the reference pressure).
    assert ear.pascals_per_unit(94.0) / math.sqrt(2.0) == pytest.approx(1.0, abs=0.003)


@pytest.mark.skipif(
    importlib.util.find_spec("mosqito") is None, reason="mosqito (extra `loudness`) is not there"
)
@pytest.mark.parametrize(("spl_db", "sone"), [(40.0, 1.0), (60.0, 4.0), (80.0, 16.0)])
def test_pressure_gives_the_loudness_of_iso_532_1(spl_db, sone):
    # A 1 kHz tone of 40 dB SPL is 1 sone, and twice as loud every 10 dB (ISO 532-1). The library
    # reads 0.6, 1.7 and 5 % high there; a decibel of calibration is 8 %.
    from mosqito.sq_metrics import loudness_zwst

    x = tone(1000.0, spl_db, 2.0) * ear.pascals_per_unit(FULL_DB)
    assert loudness_zwst(x, RATE)[0] == pytest.approx(sone, rel=0.06)


def test_bands_share_lines_out_without_loss(rng):
    for model in (nmr, roex):
        inside = (model.BANDS.edges_hz[0] + 12 < ear.LINES_HZ) & (
            model.BANDS.edges_hz[-1] - 12 > ear.LINES_HZ
        )
        power = np.where(inside, rng.uniform(0.0, 1.0, (3, ear.LINES)), 0.0)
        total = np.sum(model.BANDS.group(power), axis=1)
        np.testing.assert_allclose(total, power @ ear.EAR_WEIGHTS, rtol=1e-12)


@pytest.mark.parametrize("values", [(math.nan, None), (math.inf, 30.0), (90.0, math.nan)])
def test_a_level_that_is_none_is_refused(values):
    with pytest.raises(UsageError, match="expected a finite level in decibels"):
        ear.Listening(*values)
