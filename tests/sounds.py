"""Sounds at stated levels for the tests of the ear models: a sine of peak 1 makes 100 dB SPL."""

import numpy as np

from tonesim.ear import Listening
from tonesim.signals import Signal, sine

RATE = 48_000
FULL_DB = 100.0
QUIET_ROOM = Listening(FULL_DB)


def tone(frequency_hz: float, spl_db: float, seconds: float = 1.0, rate: int = RATE) -> Signal:
    amplitude = 10 ** ((spl_db - FULL_DB) / 20)
    return sine(frequency_hz, amplitude, rate, round(seconds * rate))


def noise(low_hz: float, high_hz: float, spl_db: float, seconds: float = 1.0, seed: int = 1):
    """Gaussian noise in a band, with the power of a sine of that level."""
    frames = round(seconds * RATE)
    lines = np.fft.rfft(np.random.default_rng(seed).standard_normal(frames))
    hertz = np.fft.rfftfreq(frames, 1 / RATE)
    lines[(hertz < low_hz) | (hertz > high_hz)] = 0.0
    x = np.fft.irfft(lines, frames)
    return x * (10 ** ((spl_db - FULL_DB) / 20) / np.sqrt(2.0 * np.mean(x**2)))


def white_noise(spectrum_level_db: float, seconds: float = 1.0) -> Signal:
    """20 Hz to 16 kHz, with so much power in every hertz."""
    return noise(20.0, 16_000.0, spectrum_level_db + 10 * np.log10(15_980.0), seconds)


def dead_zone(x: Signal, half_width: float) -> Signal:
    """Crossover distortion at its simplest: nothing passes below the half width."""
    return np.sign(x) * np.maximum(np.abs(x) - half_width, 0.0)


def plucked_string(frequency_hz: float, seconds: float = 2.0, rate: int = RATE) -> Signal:
    """Invented: decaying harmonics, the higher the faster, peak about 1."""
    t = np.arange(round(seconds * rate)) / rate
    orders = np.arange(1, 21)[:, np.newaxis]
    partials = np.sin(2 * np.pi * frequency_hz * orders * t + orders**2) / orders
    x = np.sum(partials * np.exp(-t * (1.0 + 0.4 * orders)), axis=0)
    return x / np.max(np.abs(x))
