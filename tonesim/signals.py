"""Signals: the array type used everywhere, its shape rule, and test signals for bench and tests.

A signal is a float64 array of shape ``(frames,)`` or ``(frames, channels)``; time runs along the
first axis. Generators return ``(frames,)``, start at time 0 and are plain functions of their
arguments, so the same call gives the same bits.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from tonesim.errors import UsageError

Signal = npt.NDArray[np.float64]


def as_frames(x: npt.ArrayLike) -> Signal:
    """Return a signal as ``(frames, channels)`` float64, without copying where that is possible.

    Parameters
    ----------
    x : (frames,) or (frames, channels) array_like

    Raises
    ------
    UsageError
        If `x` has no or more than two axes.
    """
    frames = np.asarray(x, dtype=np.float64)
    if frames.ndim not in (1, 2):
        raise UsageError(
            f"a signal has the shape (frames,) or (frames, channels), not {frames.shape}"
        )
    return frames[:, np.newaxis] if frames.ndim == 1 else frames


def _turns(frequency_hz: float, sample_rate: float, frames: int) -> Signal:
    """Return the position within the period, 0 to 1, reduced before pi makes it inexact."""
    if not (math.isfinite(frequency_hz) and 0.0 <= frequency_hz <= sample_rate / 2):
        raise UsageError(
            f"frequency_hz is {frequency_hz:g}; at {sample_rate:g} Hz it must lie "
            f"between 0 and {sample_rate / 2:g}"
        )
    turns: Signal = frequency_hz * np.arange(frames, dtype=np.float64) / sample_rate
    return turns % 1.0


def sine(
    frequency_hz: float, amplitude: float, sample_rate: float, frames: int, phase: float = 0.0
) -> Signal:
    """Return ``amplitude * sin(2 pi f t + phase)``, shape ``(frames,)``; `phase` in radians."""
    turns = _turns(frequency_hz, sample_rate, frames)
    return amplitude * np.sin(2.0 * np.pi * turns + phase)


def square(
    frequency_hz: float, amplitude: float, sample_rate: float, frames: int, phase: float = 0.0
) -> Signal:
    """Return a square wave of ``+amplitude`` and ``-amplitude``, shape ``(frames,)``.

    Each sample is the sign of the ideal wave at its instant (plus at the zero crossing itself), so
    the harmonics above half the rate alias: a stress signal, not one to measure harmonics with.
    """
    turns = _turns(frequency_hz, sample_rate, frames) + phase / (2.0 * np.pi)
    return np.where(turns % 1.0 < 0.5, amplitude, -amplitude)


def step(amplitude: float, frames: int, start: int = 0) -> Signal:
    """Return 0 before frame `start` and `amplitude` from there on, shape ``(frames,)``."""
    x = np.zeros(frames)
    x[start:] = amplitude
    return x


def burst(
    frequency_hz: float, amplitude: float, sample_rate: float, frames: int, start: int, stop: int
) -> Signal:
    """Return a tone burst: a sine, phase 0 at `start`, in frames `start` to `stop`, else 0."""
    if not 0 <= start <= stop <= frames:
        raise UsageError(f"a burst from frame {start} to {stop} does not fit into {frames} frames")
    x = np.zeros(frames)
    x[start:stop] = sine(frequency_hz, amplitude, sample_rate, stop - start)
    return x


def two_tone(
    frequencies_hz: tuple[float, float],
    amplitudes: tuple[float, float],
    sample_rate: float,
    frames: int,
) -> Signal:
    """Return the sum of two sines (intermodulation tests), shape ``(frames,)``."""
    first, second = (
        sine(f, a, sample_rate, frames) for f, a in zip(frequencies_hz, amplitudes, strict=True)
    )
    return first + second


def multitone(
    frequencies_hz: Sequence[float], peak: float, sample_rate: float, frames: int, seed: int = 0
) -> Signal:
    """Return equal sines with seeded random phases, scaled so that the largest sample is `peak`."""
    if len(frequencies_hz) == 0 or frames < 1:
        raise UsageError("a multitone needs at least one frequency and one frame")
    phases = np.random.default_rng(seed).uniform(0.0, 2.0 * np.pi, len(frequencies_hz))
    x = np.zeros(frames)
    for frequency, phase in zip(frequencies_hz, phases, strict=True):
        x += sine(frequency, 1.0, sample_rate, frames, phase)
    largest = float(np.max(np.abs(x)))
    return x * (peak / largest) if largest > 0.0 else x


def coherent_frequency(frequency_hz: float, sample_rate: float, frames: int) -> float:
    """Return the frequency nearest to the wanted one that samples a record coherently.

    ``J * sample_rate / frames`` with J whole and without common divisor with `frames`: the record
    holds J whole periods, so a Fourier transform needs no window, and no two samples meet the wave
    at the same phase (IEEE Std 1241, coherent sampling; from memory).

    Parameters
    ----------
    frequency_hz : float
        Wanted frequency, below half the rate.
    sample_rate : float
        In hertz.
    frames : int
        Length of the record.

    Raises
    ------
    UsageError
        If the frequency does not lie between 0 and half the rate, or the record is shorter than
        three frames.
    """
    if frames < 3 or not 0.0 < frequency_hz < sample_rate / 2:
        raise UsageError(
            f"no coherent frequency near {frequency_hz:g} Hz in {frames} frames "
            f"at {sample_rate:g} Hz"
        )
    wanted = frequency_hz * frames / sample_rate
    nearest = round(wanted)
    for distance in range(frames):
        periods = [
            j
            for j in (nearest - distance, nearest + distance)
            if 0 < j < frames / 2 and math.gcd(j, frames) == 1
        ]
        if periods:
            best = min(periods, key=lambda j: abs(j - wanted))
            return best * sample_rate / frames
    raise AssertionError("one period always fits")  # gcd(1, frames) == 1
