"""Noise-to-mask ratio with the ear model of Rec. ITU-R BS.1387, basic version: the strict opinion.

The ear takes a noise as masked where its power in a band of a quarter Bark stays below that of the
reference, spread over frequency and time, less an offset. Lone tones spread 12 dB below their own
power here, which keeps the model strict with noise in a tone; far above a loud tone it hears
harmonics 9 to 18 dB too soon. So it can rule audibility out, not in.

Constants from memory (BS.1387-1, 2001; P. Kabal, McGill University, 2002), checked in closed form.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from tonesim.ear import (
    FLOOR_POWER,
    HOP,
    RATE_HZ,
    Bands,
    bark,
    bark_to_hz,
    internal_noise_db,
    room_noise_lines,
)
from tonesim.kernel.excitation import smear, spread_bands
from tonesim.signals import Signal

LOWEST_HZ, HIGHEST_HZ, STEP_BARK = 80.0, 18_000.0, 0.25
LOWER_SLOPE_DB, LEVEL_SLOPE = 27.0, 0.2  # decibels per Bark, and that per decibel


def _bands() -> Bands:
    low, high = float(bark(LOWEST_HZ)), float(bark(HIGHEST_HZ))
    count = math.ceil((high - low) / STEP_BARK)
    edges = np.minimum(low + STEP_BARK * np.arange(count + 1), high)
    return Bands(bark_to_hz(edges), bark_to_hz(0.5 * (edges[:-1] + edges[1:])))


BANDS = _bands()
CENTRES_HZ = BANDS.centres_hz
INTERNAL_NOISE: Signal = 10.0 ** (internal_noise_db(CENTRES_HZ) / 10.0)
UPPER_SLOPE_DB: Signal = -24.0 - 230.0 / CENTRES_HZ  # at 0 dB; rises by LEVEL_SLOPE
TIME_CONSTANT_S: Signal = 0.008 + 100.0 / CENTRES_HZ * (0.030 - 0.008)
DECAY: Signal = np.exp(-HOP / (RATE_HZ * TIME_CONSTANT_S))  # a frame
OFFSET_DB: Signal = np.maximum(3.0, 0.25 * STEP_BARK * np.arange(BANDS.count))


def _raw_spread(band_power: Signal) -> Signal:
    out = np.empty(band_power.shape)
    spread_bands(band_power, UPPER_SLOPE_DB, LEVEL_SLOPE, LOWER_SLOPE_DB, STEP_BARK, out)
    return out


NORMAL: Signal = _raw_spread(np.ones((1, BANDS.count)))[0]


def spread(band_power: Signal) -> Signal:
    """Spread over frequency: excitation before time is looked at.

    A band of level L falls by 27 dB/Bark below it and by 24 + 230 / f - 0.2 L dB/Bark above it,
    never rising, and keeps its power; what bands send to one place adds up with exponent 0.4. The
    sum is scaled so that 0 dB in every band stays 0 dB.

    Parameters
    ----------
    band_power : (n, 109) numpy.ndarray
        Above 0.
    """
    return _raw_spread(band_power) / NORMAL


def excitation(band_power: Signal, noise: Signal, state: Signal) -> Signal:
    """Excitation of frames that follow one another.

    Parameters
    ----------
    band_power : (n, 109) numpy.ndarray
        From `BANDS.group`.
    noise : (109,) numpy.ndarray
        Steady noise in the bands: `INTERNAL_NOISE` and that of a room.
    state : (109,) numpy.ndarray
        What is left of earlier frames, zero before the first; moved on in place.

    Returns
    -------
    (n, 109) numpy.ndarray
        Follows a rise at once and falls with 8 to 32 ms.
    """
    out = np.empty(band_power.shape)
    smear(spread(band_power + noise), DECAY, state, out)
    return out


def room_noise(room_dba: float | None) -> Signal:
    """Power of steady room noise in each band, shape ``(109,)``."""
    noise: Signal = BANDS.group(room_noise_lines(room_dba)[np.newaxis])[0]
    return noise


def mask(excitation_power: Signal) -> Signal:
    """Largest noise that stays masked: excitation less 3 dB, above 12 Bark less a quarter of z.

    z counts from the lowest band, in Bark; shape ``(n, 109)`` as the excitation.
    """
    return excitation_power / 10.0 ** (OFFSET_DB / 10.0)


def noise_to_mask(noise_power: Signal, mask_power: Signal) -> Signal:
    """Noise-to-mask ratio as a ratio of powers; noise counts as at least -120 dB SPL."""
    ratio: Signal = np.maximum(noise_power, FLOOR_POWER) / mask_power
    return ratio


def level_step_db(level_db: npt.ArrayLike) -> Signal:
    """Step in excitation level that is heard half of the time (BS.1387), in decibels.

    Beyond all measure at and below 0 dB.
    """
    level = np.asarray(level_db, dtype=np.float64)
    high = np.maximum(level, 1e-3)
    step = 5.95072 * (6.39468 / high) ** 1.71332 - 0.198719
    step += high * (0.0550197 + high * (-0.00102438 + high * (5.05622e-6 + high * 9.01033e-11)))
    return np.where(level > 0.0, step, 1e30)


def level_difference_jnd(reference: Signal, test: Signal) -> Signal:
    """Distance of two excitations in just noticeable differences of level.

    |L_R - L_T| / s(0.3 max(L_R, L_T) + 0.7 L_T), s the step of `level_step_db`.

    Parameters
    ----------
    reference, test : (n, 109) numpy.ndarray
        Excitation powers, above 0.
    """
    left, right = 10.0 * np.log10(reference), 10.0 * np.log10(test)
    return np.abs(left - right) / level_step_db(0.3 * np.maximum(left, right) + 0.7 * right)
