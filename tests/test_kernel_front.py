"""The front end's loop: clipping, the network's recursion, and that nothing sticks in it."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.signal import cont2discrete, dlti

from tonesim.circuit import Front, Tone
from tonesim.front import discretise_front, tone_space
from tonesim.kernel.front import SIZE, FrontParams, W, advance_front, clipped_mean

RATE = 384_000.0  # the default internal rate [Hz]
# Pots off their centres, so that all three states are at work (invented values).
TONE = Tone(0.8, 0.3, 22e3, 100e3, 22e3, 22e-9, 15e3, 220e3, 2.2e-9)
VOLTS = st.floats(-1e3, 1e3)
LEVELS = st.floats(0.01, 100.0)


def made(tone: Tone | None = None, gain: float = 1.0, top: float = 9.0, bottom: float = -7.0):
    return discretise_front(Front(gain, top, bottom, tone, 1.0, 0.15), 1.0 / RATE)


def run(params: FrontParams, x: np.ndarray, state: np.ndarray | None = None) -> np.ndarray:
    y = np.empty_like(x)
    advance_front(x, y, np.zeros(SIZE) if state is None else state, params)
    return y


def noise(frames: int, volts: float, seed: int = 5) -> np.ndarray:
    return volts * np.random.default_rng(seed).uniform(-1.0, 1.0, frames)


# ---- clipping ----


@given(u0=VOLTS, u1=VOLTS, top=LEVELS, bottom=LEVELS)
def test_the_mean_is_that_of_the_clipped_ramp(u0, u1, top, bottom):
    found = clipped_mean(u0, u1, -bottom, top)
    assert -bottom <= found <= top
    # Definition, by adaptive quadrature (QUADPACK through scipy), told where the kinks are.
    kinks = [(v - u0) / (u1 - u0) for v in (top, -bottom) if abs(u1 - u0) > 1e-9]
    inside = sorted(k for k in kinks if 0.0 < k < 1.0)
    area, _ = quad(
        lambda t: min(max(u0 + t * (u1 - u0), -bottom), top), 0.0, 1.0, points=inside or None
    )
    assert found == pytest.approx(area, rel=1e-7, abs=1e-9)


def test_the_clip_levels_are_reached_and_never_passed():
    for gain, top, bottom in ((10.0, 9.0, -7.0), (1e4, 0.6, -13.5)):
        y = run(made(None, gain, top, bottom), noise(5000, 4.0))
        assert y.min() >= bottom
        assert y.max() <= top
        held = run(made(None, gain, top, bottom), np.repeat([4.0, -4.0], 10))
        # Every step but the two that change level is wholly in clipping.
        assert np.all(held[1:10] == top)
        assert np.all(held[11:] == bottom)


# Fundamental of a sine of amplitude A clipped at L: A 2/pi (asin k + k sqrt(1 - k^2)),
# k = L / A (describing function of saturation; A. Gelb, W. E. Vander Velde, "Multiple-Input
# Describing Functions", 1968).
@pytest.mark.parametrize("amplitude", [1.0, 1.2, 2.0, 10.0])
def test_a_clipped_sine_has_the_fundamental_of_the_describing_function(amplitude):
    steps, limit = 3840, 1.0  # 100 Hz: what the mean over a step costs is 3e-7 here
    phase = 2.0 * np.pi * np.arange(2 * steps) / steps
    y = run(made(None, 1.0, limit, -limit), amplitude * np.sin(phase))[steps:]
    level = 2.0 * abs(np.mean(y * np.exp(-1j * phase[steps:])))
    k = limit / amplitude
    expected = amplitude * 2.0 / np.pi * (np.arcsin(k) + k * np.sqrt(1.0 - k * k))
    assert level == pytest.approx(expected, rel=1e-6)


def test_what_folds_back_is_30_db_below_that_of_clipped_samples():
    # 2503 Hz overdriven fourfold at 384 kHz, seen over a second; harmonics that are no multiple
    # of the tone below 20 kHz have folded. 108 dB down against 76 dB was measured.
    hertz, steps = 2503, 384_000
    x = 4.0 * np.sin(2.0 * np.pi * hertz * np.arange(2 * steps) / steps)
    worst = []
    for y in (run(made(None, 1.0, 1.0, -1.0), x), np.clip(x, -1.0, 1.0)):
        lines = np.abs(np.fft.rfft(y[steps:]))[:20_000]
        folded = np.delete(lines, np.arange(0, 20_000, hertz))
        worst.append(20.0 * np.log10(folded.max() / lines[hertz]))
    assert worst[0] < -105.0
    assert worst[0] < worst[1] - 28.0


# ---- the recursion ----


def test_the_recursion_is_the_bilinear_transform_of_the_network_after_the_mean():
    a, b, c, d = tone_space(TONE)
    discrete = cont2discrete(
        (a, b[:, None], c[None, :], np.array([[d]])), 1.0 / RATE, method="bilinear"
    )
    system = dlti(*discrete[:4], dt=1.0 / RATE)
    x = noise(400, 1.0)
    mean = 0.5 * (x + np.append(0.0, x[:-1]))
    _, reference, *_ = system.output(mean[:, None], np.arange(400) / RATE)
    # The buffer turns over what the network turned over.
    np.testing.assert_allclose(run(made(TONE), x), -reference[:, 0], rtol=1e-9, atol=1e-12)


@given(cuts=st.lists(st.integers(1, 60), min_size=1, max_size=30), gain=st.floats(0.1, 100.0))
def test_any_cut_gives_equal_bits(cuts, gain):
    params, x = made(TONE, gain), noise(sum(cuts), 2.0)
    whole = run(params, x)
    state, start = np.zeros(SIZE), 0
    for cut in cuts:
        part = run(params, x[start : start + cut], state)
        np.testing.assert_array_equal(part, whole[start : start + cut])
        start += cut


def test_it_may_run_in_place():
    x = noise(300, 3.0)
    expected = run(made(TONE, 5.0), x)
    advance_front(x, x, np.zeros(SIZE), made(TONE, 5.0))
    np.testing.assert_array_equal(x, expected)


def test_compiled_and_plain_python_agree():
    params, x = made(TONE, 5.0), noise(300, 3.0)
    plain = np.empty_like(x)
    advance_front.py_func(x, plain, np.zeros(SIZE), params)
    # The compiler may not reorder a sum either; the last bit is left to the C library's pow.
    np.testing.assert_allclose(run(params, x), plain, rtol=1e-14, atol=1e-300)


# ---- nothing sticks ----


def test_silence_stays_silent_and_a_fading_note_ends_at_exactly_zero():
    params, state = made(TONE), np.zeros(SIZE)
    assert np.all(run(params, np.zeros(1000), state) == 0.0)
    assert np.all(state == 0.0)
    run(params, noise(1000, 5.0), state)
    assert np.any(state[W:] != 0.0)
    # The slowest time constant is 2.5 ms; 70 of them to 1e-30, and some to spare.
    fade = run(params, np.zeros(round(0.3 * RATE)), state)
    assert np.all(state == 0.0)
    assert fade[-1] == 0.0
    smallest = np.min(np.abs(fade[fade != 0.0]))
    assert smallest > np.finfo(float).tiny


def test_what_is_no_number_passes_once_and_is_forgotten():
    params, x = made(TONE, 2.0), noise(200, 3.0)
    x[50] = np.nan
    y = run(params, x)
    assert list(np.flatnonzero(np.isnan(y))) == [50]
    x[50] = 0.0
    clean = run(params, x)
    np.testing.assert_array_equal(np.delete(y, 50), np.delete(clean, 50))


@pytest.mark.parametrize("value", [np.inf, -np.inf, 1e300, -1e300])
def test_what_is_too_large_is_clipped(value):
    x = np.zeros(64)
    x[20:24] = value
    y = run(made(None, 1e4), x)
    level = 9.0 if value > 0.0 else -7.0
    np.testing.assert_array_equal(y[21:24], level)
    # Half way up and half way down a ramp that is in clipping almost at once.
    assert y[20] == y[24] == pytest.approx(level, rel=1e-6)
    assert np.all(y[25:] == 0.0)
    assert np.all(np.isfinite(run(made(TONE, 1e4), x)))
