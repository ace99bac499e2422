"""Distortion of known waveforms: closed forms, IEC definitions, scipy as another reader.

"Computed by us" means from the closed form, by a separate script.
"""

import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy import fft, integrate, signal
from scipy.optimize import brentq
from scipy.special import zeta

from tonesim.errors import UsageError
from tonesim.harmonics import (
    amplitudes_at,
    analyse_harmonics,
    coherent_cycles,
    difference_distortion,
    modulation_distortion,
    spectrum,
)
from tonesim.signals import coherent_frequency, sine

RATE = 48_000.0
FRAMES = 1 << 16
# One period over the whole record. A waveform with kinks has harmonics that fall as 1/n²; what
# aliases onto the low ones comes from orders near FRAMES and is below 1e-9 of the peak.
THETA = 2.0 * np.pi * np.arange(FRAMES) / FRAMES
KINKED = 2e-9


def tones(*amplitudes_and_cycles, frames=FRAMES):
    """Sines whose turns are whole-number arithmetic, so that only the sine itself is rounded."""
    n = np.arange(frames)
    return sum(
        a * np.sin(2.0 * np.pi * ((c * n) % frames) / frames) for a, c in amplitudes_and_cycles
    )


def analysed(y, cycles=1):
    return analyse_harmonics(y, cycles, RATE)


def signed(h, order):
    """A harmonic over the fundamental, with the sign of its sine."""
    return h.harmonics_v[order - 2] / h.fundamental_v * math.cos(h.phases_rad[order - 2])


# ---- dead zone and symmetric clip ----


def bracket(n, phi):
    return math.sin((n + 1) * phi) / (n + 1) + math.sin((n - 1) * phi) / (n - 1)


def dead_zone(a):
    x = np.sin(THETA)
    return np.sign(x) * np.maximum(np.abs(x) - a, 0.0)


def dead_zone_thd(a):
    phi = math.asin(a)
    b1 = 1.0 - (2.0 * phi + math.sin(2.0 * phi)) / math.pi
    rest = math.pi / 2.0 - phi
    bracketed = rest / 2.0 + math.sin(2.0 * phi) / 4.0 - 2.0 * a * math.cos(phi) + a**2 * rest
    return b1, math.sqrt(2.0 * (2.0 / math.pi) * bracketed - b1**2) / b1


def clip_thd(a):
    phi = math.asin(a)
    b1 = (2.0 * phi + math.sin(2.0 * phi)) / math.pi
    bracketed = phi / 2.0 - math.sin(2.0 * phi) / 4.0 + a**2 * (math.pi / 2.0 - phi)
    return b1, math.sqrt(2.0 * (2.0 / math.pi) * bracketed - b1**2) / b1


# Width over amplitude; fundamental over amplitude; third, fifth and seventh over the fundamental
# and distortion in per cent. Computed by us, verified there by numerical integration.
@pytest.mark.parametrize(
    ("a", "b1", "third", "fifth", "seventh", "thd"),
    [
        (0.02, 0.97454, -0.870, -0.522, -0.372, 1.235),
        (0.05, 0.93636, -2.258, -1.346, -0.952, 3.103),
        (0.07, 0.91095, -3.237, -1.917, -1.342, 4.361),
        (0.10, 0.87289, -4.789, -2.797, -1.917, 6.268),
        (0.20, 0.74706, -10.687, -5.728, -3.418, 12.841),
        (0.30, 0.62384, -17.717, -8.079, -3.529, 19.874),
        (0.50, 0.39100, -35.251, -7.050, 2.518, 36.281),
        (0.70, 0.18812, -57.518, 10.583, 8.526, 59.379),
    ],
)
def test_a_dead_zone_reads_as_its_table(a, b1, third, fifth, seventh, thd):
    h = analysed(dead_zone(a))
    assert h.fundamental_v == pytest.approx(b1, abs=6e-6)
    for order, expected in ((3, third), (5, fifth), (7, seventh)):
        assert 100.0 * signed(h, order) == pytest.approx(expected, abs=6e-4)
    assert h.thd_percent == pytest.approx(thd, abs=6e-4)


@pytest.mark.parametrize(
    ("a", "b1", "third", "fifth", "seventh", "thd"),
    [
        (0.99, 0.99880, 0.118, -0.114, 0.109, 0.286),
        (0.95, 0.98668, 1.244, -1.050, 0.799, 1.924),
        (0.90, 0.96261, 3.286, -2.287, 1.195, 4.220),
        (0.80, 0.89591, 8.186, -3.471, 0.036, 8.979),
        (0.7071, 0.81831, 12.966, -2.593, -1.852, 13.420),
        (0.50, 0.60900, 22.633, 4.527, -1.617, 23.294),
        (0.25, 0.31496, 30.579, 15.290, 8.054, 35.428),
        (0.10, 0.12711, 32.889, 19.207, 13.167, 43.040),
    ],
)
def test_a_symmetric_clip_reads_as_its_table(a, b1, third, fifth, seventh, thd):
    h = analysed(np.clip(np.sin(THETA), -a, a))
    # 0.7071 stands for the root of one half: the last digit moves.
    last = 2e-3 if a == 0.7071 else 6e-4
    assert h.fundamental_v == pytest.approx(b1, abs=6e-6 if a != 0.7071 else 1e-5)
    for order, expected in ((3, third), (5, fifth), (7, seventh)):
        assert 100.0 * signed(h, order) == pytest.approx(expected, abs=last)
    assert h.thd_percent == pytest.approx(thd, abs=last)


# The series themselves: dead zone bn = -(2A/(pi n)) [sin((n+1) phi)/(n+1) + sin((n-1) phi)/(n-1)],
# clip the same with the other sign, sin phi = a (Fourier series, closed form).
@given(st.floats(0.01, 0.95))
def test_dead_zone_and_clip_follow_their_series(a):
    phi = math.asin(a)
    gone, held = analysed(dead_zone(a)), analysed(np.clip(np.sin(THETA), -a, a))
    for h, sign, (b1, thd) in ((gone, -1.0, dead_zone_thd(a)), (held, 1.0, clip_thd(a))):
        assert h.fundamental_v == pytest.approx(b1, abs=KINKED)
        for n in (3, 5, 7, 9, 21):
            bn = sign * 2.0 / (math.pi * n) * bracket(n, phi)
            assert signed(h, n) * h.fundamental_v == pytest.approx(bn, abs=KINKED)
        # The closed form subtracts nearly equal squares: their rounding, over what is left.
        assert h.thd_f == pytest.approx(thd, rel=1e-6, abs=KINKED / b1 + 1e-15 / (thd * b1))
        assert max(h.harmonics_v[::2]) < KINKED  # even orders
        assert h.mean_v == pytest.approx(0.0, abs=KINKED)


def test_phases_tell_clip_from_crossover():
    assert analysed(np.clip(np.sin(THETA), -0.9, 0.9)).phases_rad[1] == pytest.approx(0.0, abs=1e-6)
    assert abs(analysed(dead_zone(0.05)).phases_rad[1]) == pytest.approx(math.pi, abs=1e-6)


# Clip level over peak for a given distortion, and power against a sine that just clips; computed
# by us. The square is the end of the row.
@pytest.mark.parametrize(
    ("per_cent", "level", "overdrive_db", "power"),
    [
        (1.0, 0.9715, 0.25, 1.0475),
        (3.0, 0.9262, None, 1.1119),
        (5.0, 0.8834, None, 1.1668),
        (10.0, 0.7787, 2.17, 1.2878),
        (30.0, 0.3606, 8.86, 1.6897),
    ],
)
def test_the_clip_level_of_a_distortion(per_cent, level, overdrive_db, power):
    def clipped(c):
        return np.clip(np.sin(THETA), -c, c)

    found = brentq(lambda c: analysed(clipped(c)).thd_percent - per_cent, 0.1, 0.999, xtol=1e-9)
    assert found == pytest.approx(level, abs=6e-5)
    assert overdrive_db is None or -20.0 * math.log10(found) == pytest.approx(
        overdrive_db, abs=6e-3
    )
    assert np.mean(clipped(found) ** 2) / (found**2 / 2.0) == pytest.approx(power, abs=6e-5)


# ---- asymmetric clip ----


@pytest.mark.parametrize(
    ("above", "below", "mean", "harmonics", "thd"),
    [
        (0.8, 0.9, -0.01758, (3.0413, 5.6482, 1.3417, 2.8578, 0.1860), 7.2624),
        (0.7, 1.0, -0.05009, (8.5313, 5.9719, 3.3101, 1.0988, 0.3198), 11.0758),
    ],
)
def test_an_asymmetric_clip_reads_as_its_table(above, below, mean, harmonics, thd):
    h = analysed(np.clip(np.sin(THETA), -below, above))
    assert h.mean_v == pytest.approx(mean, abs=6e-6)
    for found, expected in zip(h.harmonics_v, harmonics, strict=False):
        assert 100.0 * found / h.fundamental_v == pytest.approx(expected, abs=6e-5)
    assert h.thd_percent == pytest.approx(thd, abs=6e-5)


def test_an_asymmetric_clip_agrees_with_integration():
    # scipy.integrate.quad with the kinks named: knows nothing of samples.
    above, below = 0.8, 0.9
    up, down = math.asin(above), math.asin(below)
    kinks = [up, math.pi - up, math.pi + down, 2.0 * math.pi - down]

    def fourier(n, wave):
        def integrand(t):
            return min(max(math.sin(t), -below), above) * wave(n * t)

        return integrate.quad(integrand, 0.0, 2.0 * math.pi, points=kinks, limit=200)[0] / math.pi

    lines = spectrum(np.clip(np.sin(THETA), -below, above))
    for n in (1, 2, 3, 4, 5, 6):
        expected = complex(fourier(n, math.cos), -fourier(n, math.sin))
        assert lines[n] == pytest.approx(expected, abs=KINKED)


# ---- square, triangle, sawtooth ----

# Sampled jumps would alias with 1/n, so the waves are built from their series up to LAST, all of
# it inside the band: the record is exact. What the series has beyond is added by Hurwitz's zeta
# function, sum of 1/(q+k)^s from k = 0.
LAST = 401


def series_wave(weight, step):
    n = np.arange(1, LAST + 1, step)
    return np.sum([weight(k) * np.sin(k * THETA) for k in n], axis=0)


@pytest.mark.parametrize(
    ("weight", "step", "power", "whole", "printed"),
    [
        (lambda n: 1.0 / n, 2, 2, math.pi**2 / 8.0, 48.343),
        (lambda n: (-1.0) ** ((n - 1) // 2) / n**2, 2, 4, math.pi**4 / 96.0, 12.115),
        (lambda n: (-1.0) ** (n + 1) / n, 1, 2, math.pi**2 / 6.0, 80.308),
    ],
    ids=["square", "triangle", "sawtooth"],
)
def test_square_triangle_and_sawtooth(weight, step, power, whole, printed):
    h = analysed(series_wave(weight, step))
    beyond = zeta(power, (LAST + step) / step) / step**power
    thd = math.sqrt(h.thd_f**2 + beyond)
    assert thd == pytest.approx(math.sqrt(whole - 1.0), rel=1e-12)
    assert 100.0 * thd == pytest.approx(printed, abs=6e-4)
    assert h.thd_r**2 == pytest.approx(h.thd_f**2 / (1.0 + h.thd_f**2), rel=1e-12)
    assert h.residue_v < 1e-12


def test_a_square_wave_as_iec_60268_3_refers_it():
    # Referred to the whole a square wave has 43.524 % in place of 48.343 % (closed form).
    h = analysed(series_wave(lambda n: 1.0 / n, 2))
    harmonics = h.thd_f**2 + zeta(2, (LAST + 2) / 2) / 4.0
    assert 100.0 * math.sqrt(harmonics / (1.0 + harmonics)) == pytest.approx(43.524, abs=6e-4)
    # Of the series up to LAST thd_r itself lacks the share left out, 1/(2 LAST) of the squares.
    assert 100.0 * h.thd_r == pytest.approx(43.524, abs=0.2)


# ---- intermodulation ----


def polynomial(x):
    return x + 0.01 * x**2 + 0.02 * x**3


def test_a_polynomial_and_one_tone():
    # Closed form: H1 = 1 + 3/4 a3, H2 = a2/2, H3 = a3/4 at amplitude 1.
    h = analysed(polynomial(tones((1.0, 997))), 997)
    assert h.fundamental_v == pytest.approx(1.0150, abs=1e-13)
    assert h.harmonics_v[:2] == pytest.approx((0.0050, 0.0050), abs=1e-13)
    assert h.mean_v == pytest.approx(0.005, abs=1e-13)
    assert h.thd_percent == pytest.approx(0.696657, abs=6e-7)


def test_smpte_modulation_distortion_of_a_polynomial():
    # Tones of SMPTE RP 120: 60 Hz and 7 kHz, 4 to 1; one second holds whole periods of both.
    # Closed form: carrier A2 (1 + 1.5 a3 A1² + 0.75 a3 A2²), first sidebands a2 A1 A2, second
    # 0.75 a3 A1² A2.
    x = tones((0.8, 60), (0.2, 7000), frames=48_000)
    y = polynomial(x)
    low, first, carrier = amplitudes_at(y, [6880, 6940, 7000])
    assert carrier == pytest.approx(0.2 * (1.0 + 1.5 * 0.02 * 0.64 + 0.75 * 0.02 * 0.04), abs=1e-13)
    assert carrier == pytest.approx(0.20396, abs=6e-6)
    assert (first, low) == pytest.approx((0.00160, 0.00192), abs=1e-13)
    d = modulation_distortion(y, 60, 7000)
    assert d.reference_v == carrier
    assert (100.0 * d.d2, 100.0 * d.d3) == pytest.approx((1.568935, 1.882722), abs=6e-7)
    assert 100.0 * d.total == pytest.approx(2.450755, abs=6e-7)


def test_difference_distortion_of_a_polynomial():
    # 19 and 20 kHz, equal; closed form: tones A (1 + 9/4 a3 A²), difference a2 A², third
    # 3/4 a3 A³ each.
    y = polynomial(tones((0.5, 19_000), (0.5, 20_000), frames=192_000))
    assert amplitudes_at(y, [1000, 18_000, 19_000, 21_000]) == pytest.approx(
        [0.00250, 0.001875, 0.505625, 0.001875], abs=1e-13
    )
    d = difference_distortion(y, 19_000, 20_000)
    assert d.reference_v == pytest.approx(2 * 0.505625, abs=1e-13)
    assert (100.0 * d.d2, 100.0 * d.d3) == pytest.approx((0.24722, 0.37083), abs=6e-6)


def test_unequal_tones_are_referred_to_twice_the_upper_one():
    # Lindos LA100 manual, 2.16: by IEC 268-3 the reference is twice the amplitude of f2.
    y = tones((0.6, 190), (0.5, 200), (0.02, 10), (0.03, 180), (0.01, 210), frames=2048)
    d = difference_distortion(y, 190, 200)
    assert (d.reference_v, d.d2, d.d3) == pytest.approx((1.0, 0.02, 0.04), abs=1e-13)


@given(st.floats(0.0, 0.05), st.floats(0.0, 0.05))
def test_second_and_third_order_products_keep_apart(a2, a3):
    x = tones((0.4, 37), (0.1, 700), frames=4096)
    d = modulation_distortion(x + a2 * x**2 + a3 * x**3, 37, 700)
    carrier = 1.0 + 1.5 * a3 * 0.16 + 0.75 * a3 * 0.01
    assert d.d2 == pytest.approx(2.0 * a2 * 0.4 / carrier, abs=1e-13)
    assert d.d3 == pytest.approx(1.5 * a3 * 0.16 / carrier, abs=1e-13)
    two = tones((0.3, 500), (0.3, 530), frames=4096)
    d = difference_distortion(two + a2 * two**2 + a3 * two**3, 500, 530)
    tone = 1.0 + 2.25 * a3 * 0.09
    assert d.d2 == pytest.approx(a2 * 0.3 / 2.0 / tone, abs=1e-13)
    assert d.d3 == pytest.approx(0.75 * a3 * 0.09 / tone, abs=1e-13)


# ---- laws ----

AMPLITUDES = st.lists(st.floats(1e-6, 1.0), min_size=4, max_size=4)


@given(AMPLITUDES, st.integers(1, 100), st.floats(1e-3, 1e3))
def test_what_is_added_is_read(amplitudes, cycles, scale):
    mean, *others = amplitudes
    y = mean + tones(
        (1.0, cycles), *((a, cycles * n) for n, a in enumerate(others, 2)), frames=4001
    )
    h, scaled = analysed(y, cycles), analysed(scale * y, cycles)
    assert h.mean_v == pytest.approx(mean, abs=1e-13)
    assert h.fundamental_v == pytest.approx(1.0, abs=1e-13)
    assert h.harmonics_v[:3] == pytest.approx(others, abs=1e-13)
    assert h.residue_v < 1e-13
    # Ratios know no volts.
    assert scaled.fundamental_v == pytest.approx(scale * h.fundamental_v, rel=1e-12)
    assert scaled.thd_f == pytest.approx(h.thd_f, rel=1e-9)


@given(st.integers(0, 4000), st.floats(0.3, 0.95), st.floats(0.3, 0.95))
def test_a_shift_in_time_changes_nothing(shift, above, below):
    y = np.clip(tones((1.0, 7), frames=4001), -below, above)
    h, later = analysed(y, 7), analysed(np.roll(y, shift), 7)
    assert later.thd_f == pytest.approx(h.thd_f, rel=1e-12)
    assert later.harmonics_v == pytest.approx(h.harmonics_v, abs=1e-14)
    assert later.residue_v == pytest.approx(h.residue_v, abs=1e-12)
    for volts, one, other in zip(h.harmonics_v[:10], h.phases_rad, later.phases_rad, strict=False):
        # The phase of a line is known to its rounding over its size.
        assert abs(np.exp(1j * one) - np.exp(1j * other)) < 1e-12 / volts


@given(st.lists(st.floats(0.0, 3.0), min_size=2, max_size=6))
def test_both_definitions_of_distortion(harmonics):
    assume(sum(harmonics) > 1e-6)
    h = analysed(
        tones((1.0, 31), *((a, 31 * n) for n, a in enumerate(harmonics, 2)), frames=1024), 31
    )
    ratio = math.sqrt(sum(a**2 for a in harmonics))
    assert h.thd_f == pytest.approx(ratio, rel=1e-6)
    assert h.thd_r == pytest.approx(ratio / math.sqrt(1.0 + ratio**2), rel=1e-6)
    assert h.thd_r <= h.thd_f
    assert h.thd_r < 1.0
    assert h.thd_db == pytest.approx(20.0 * math.log10(h.thd_f))


def test_everything_together_is_the_rms_of_the_record(rng):
    # Parseval, over the whole band: mean, tone, harmonics, hum and residue leave nothing out.
    for frames in (4800, 4801):
        cycles = 101  # shares no line with hum at multiples of 5
        y = 0.3 + tones(
            (1.0, cycles), (0.1, 2 * cycles), (0.02, 5), (0.03, frames // 2), frames=frames
        )
        y += 0.01 * rng.standard_normal(frames) + 0.05 * (-1.0) ** np.arange(frames)
        h = analyse_harmonics(y, cycles, RATE, mains_hz=5 * RATE / frames)
        peaks = math.hypot(h.fundamental_v, *h.harmonics_v) / math.sqrt(2.0)
        rms = math.sqrt(np.mean(y**2))
        assert math.hypot(h.mean_v, peaks, h.hum_v, h.residue_v) == pytest.approx(rms, rel=1e-12)
        assert h.thd_n == pytest.approx(
            math.sqrt(1.0 - h.fundamental_v**2 / 2.0 / (rms**2 - h.mean_v**2)), rel=1e-12
        )


# ---- hum, noise, aliases, band ----


def test_hum_is_no_distortion():
    y = tones((10.0, 997), (0.01, 1994), frames=48_000)
    with_hum = y + tones((0.3, 50), (0.4, 100), (0.02, 947), (0.02, 1097), frames=48_000)
    clean, h = (analyse_harmonics(v, 997, RATE, mains_hz=50.0) for v in (y, with_hum))
    assert h.thd_f == pytest.approx(clean.thd_f, rel=1e-12)
    hum = math.sqrt((0.3**2 + 0.4**2 + 2 * 0.02**2) / 2.0)
    assert h.hum_v == pytest.approx(hum, rel=1e-12)
    assert h.residue_v < 1e-12
    assert h.thd_n == pytest.approx(math.hypot(0.01, math.sqrt(2) * hum) / 10.0, rel=2e-3)
    # Not told of the mains, it is residue; distortion is the same.
    untold = analyse_harmonics(with_hum, 997, RATE)
    assert untold.residue_v == pytest.approx(hum, rel=1e-12)
    assert (untold.hum_v, untold.thd_f) == (0.0, h.thd_f)


def test_sidebands_of_a_low_tone_fold_at_zero():
    # 82 Hz with ripple of 100 Hz: its lower sidebands lie at 18 and 118 Hz.
    y = tones((1.0, 82), (0.03, 18), (0.04, 118), frames=48_000)
    h = analyse_harmonics(y, 82, RATE, bandwidth_hz=20e3, mains_hz=100.0)
    assert h.hum_v == pytest.approx(0.05 / math.sqrt(2.0), rel=1e-12)
    assert h.residue_v < 1e-13


@given(st.integers(1, 300), st.integers(2, 6), st.sampled_from([44_100.0, 48_000.0, 384_000.0]))
def test_a_band_named_by_its_last_harmonic_holds_it(cycles, order, rate):
    y = tones((1.0, cycles), frames=4001)
    h = analyse_harmonics(y, cycles, rate, bandwidth_hz=order * cycles * (rate / 4001))
    assert h.highest_order == order


def test_noise_goes_to_the_residue_by_its_bandwidth(rng):
    noise = 0.01 * rng.standard_normal(FRAMES)
    y = tones((1.0, 1361)) + noise
    # White noise of 0.01 V over 24 kHz: sqrt(1/4) of it in 6 kHz; 16384 lines spread it by 1 %.
    h = analyse_harmonics(y, 1361, RATE, bandwidth_hz=6000.0)
    assert h.residue_v == pytest.approx(0.005, rel=0.03)
    assert analysed(y, 1361).residue_v == pytest.approx(0.01, rel=0.015)
    assert h.highest_order == 6  # 997 Hz


def test_the_band_ends_on_a_line_of_its_own_frequency():
    y = tones((1.0, 100), (0.1, 200), (0.1, 300), frames=4800)
    h = analyse_harmonics(y, 100, RATE, bandwidth_hz=2000.0)
    assert (h.highest_order, h.frequency_hz, h.bandwidth_hz) == (2, 1000.0, 2000.0)
    assert analyse_harmonics(y, 100, RATE, bandwidth_hz=3000.0).highest_order == 3
    assert analysed(y, 100).highest_order == 23  # the 24th lies at half the rate


def test_aliases_fall_beside_the_harmonics():
    # Coprime cycles: the folded harmonics of a clipped tone land on lines of their own.
    cycles = coherent_cycles(1000.0, RATE, 4096)
    assert math.gcd(cycles, 4096) == 1
    exact = clip_thd(0.5)[0]
    h = analysed(np.clip(tones((1.0, cycles), frames=4096), -0.5, 0.5), cycles)
    assert h.residue_v > 1e-4
    assert h.fundamental_v == pytest.approx(exact, abs=1e-6)
    # Cycles that divide the record: the same aliases hide in the harmonics.
    hidden = analysed(np.clip(tones((1.0, 64), frames=4096), -0.5, 0.5), 64)
    assert hidden.residue_v < 1e-14
    assert abs(hidden.fundamental_v - exact) > 1e-5


# What double precision leaves of a pure sine: the sine's own rounding is half a unit in the last
# place, 1.1e-16 or -319 dB at its top, and less on average; the transform adds little.
@pytest.mark.parametrize(("frames", "rate"), [(4096, 48e3), (65_536, 48e3), (48_000, 48e3)])
def test_the_floor_of_a_pure_sine(frames, rate):
    cycles = coherent_cycles(997.0, rate, frames)
    h = analyse_harmonics(tones((1.0, cycles), frames=frames), cycles, rate)
    assert h.fundamental_v == pytest.approx(1.0, abs=1e-14)
    assert h.thd_db < -310.0
    assert 20.0 * math.log10(h.residue_v) < -300.0
    assert max(h.harmonics_v) < 1e-15
    # `signals.sine` rounds f t before it drops the whole turns: 997 of them cost 1e-13.
    h = analyse_harmonics(sine(cycles * rate / frames, 1.0, rate, frames), cycles, rate)
    assert h.thd_db < -290.0
    assert 20.0 * math.log10(h.residue_v) < -250.0


# ---- other readers ----


def test_scipy_reads_the_same_lines(rng):
    for frames in (4096, 4095):
        y = rng.standard_normal(frames)
        ours = spectrum(y)
        peak_to_rms = np.full(ours.size, math.sqrt(0.5))
        peak_to_rms[0] = 1.0
        if frames % 2 == 0:
            peak_to_rms[-1] = 1.0
        _, power = signal.periodogram(y, window="boxcar", detrend=False, scaling="spectrum")
        np.testing.assert_allclose((peak_to_rms * np.abs(ours)) ** 2, power, rtol=1e-9, atol=1e-20)
        np.testing.assert_allclose(
            ours * frames * peak_to_rms**2, fft.rfft(y), rtol=0, atol=1e-12 * frames
        )


def test_least_squares_reads_the_same_harmonics(rng):
    # Sine fit at known frequencies (IEEE Std 1241; from memory): no transform in it.
    frames, cycles = 2000, 37
    y = np.clip(tones((1.0, cycles), frames=frames), -0.6, 0.8) + 1e-3 * rng.standard_normal(frames)
    h = analyse_harmonics(y, cycles, RATE)
    t = 2.0 * np.pi * cycles * np.arange(frames) / frames
    orders = np.arange(1, h.highest_order + 1)
    columns = [np.ones(frames)] + [w(n * t) for n in orders for w in (np.sin, np.cos)]
    fit, *_ = np.linalg.lstsq(np.stack(columns, axis=1), y, rcond=None)
    peaks = np.hypot(fit[1::2], fit[2::2])
    np.testing.assert_allclose((h.fundamental_v, *h.harmonics_v), peaks, rtol=0, atol=1e-12)
    left = y - np.stack(columns, axis=1) @ fit
    assert h.residue_v == pytest.approx(math.sqrt(np.mean(left**2)), rel=1e-9)


# ---- cycles ----


@given(st.floats(50.0, 20_000.0), st.sampled_from([4096, 48_000]), st.sampled_from([1, 2, 4, 16]))
def test_coherent_cycles_share_just_the_wished_divisor(frequency, frames, repeats):
    cycles = coherent_cycles(frequency, RATE, frames, repeats)
    assert math.gcd(cycles, frames) == repeats
    assert abs(cycles * RATE / frames - frequency) < 8 * repeats * RATE / frames
    if repeats == 1:
        assert cycles * RATE / frames == coherent_frequency(frequency, RATE, frames)


# ---- refusals ----


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"cycles": 99.5}, "cycles: found 99.5, expected a whole number from 1 to 2047"),
        ({"cycles": 0}, "found 0"),
        ({"cycles": math.nan}, "found nan"),
        ({"cycles": 2048}, "found 2048"),
        ({"cycles": 1500}, "holds no harmonic"),
        ({"bandwidth_hz": 1800.0}, "a band of 1800 Hz holds no harmonic of 996.094 Hz"),
        ({"bandwidth_hz": 25e3}, "bandwidth_hz is 25000"),
        ({"bandwidth_hz": math.nan}, "bandwidth_hz is nan"),
        ({"mains_hz": 50.0}, "mains_hz is 50: 4.26667 cycles"),
        ({"mains_hz": math.inf}, "mains_hz is inf"),
        ({"mains_hz": 0.0}, "mains_hz is 0"),
        ({"mains_hz": 5 * RATE / 4096}, "its lines fall on harmonics"),
    ],
)
def test_what_cannot_be_analysed_is_refused(change, words):
    asked = {"cycles": 85, "sample_rate": RATE, **change}
    with pytest.raises(UsageError, match=words):
        analyse_harmonics(tones((1.0, 85), frames=4096), **asked)


@pytest.mark.parametrize(
    ("record", "words"),
    [
        (np.zeros(4096), "no tone of 85 cycles"),
        (np.full(4096, 5.0), "no tone of 85 cycles"),
        (tones((1.0, 84), frames=4096), "no tone of 85 cycles"),
        (np.full(4096, np.nan), "not finite"),
        (np.zeros((4096, 2)), r"found \(4096, 2\)"),
        (np.zeros(2), "three frames"),
    ],
    ids=["silence", "constant", "another tone", "nan", "stereo", "short"],
)
def test_records_without_a_tone_are_refused(record, words):
    with pytest.raises(UsageError, match=words):
        analyse_harmonics(record, 85, RATE)


def test_two_tones_that_cannot_be_told_apart_are_refused():
    y = tones((0.8, 10), (0.2, 105), frames=1024)
    for f1, f2 in ((10, 100), (10, 15), (105, 10), (10.5, 105), (10, 495)):
        with pytest.raises(UsageError, match="expected"):
            modulation_distortion(y, f1, f2)
    for f1, f2 in ((100, 100), (100, 150), (105, 100), (100, 105.5), (450, 500)):
        with pytest.raises(UsageError, match="expected"):
            difference_distortion(y, f1, f2)
    with pytest.raises(UsageError, match="no tone of 205 cycles"):
        modulation_distortion(y, 10, 205)
    with pytest.raises(UsageError, match="no tone of 101 cycles"):
        difference_distortion(y, 101, 105)
    with pytest.raises(UsageError, match="whole number from 0 to 512"):
        amplitudes_at(y, [3, 513])
    with pytest.raises(UsageError, match="3 equal parts"):
        coherent_cycles(1000.0, RATE, 4096, repeats=3)
