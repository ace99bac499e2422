"""Excitation ratio with roex filters whose shape follows the level: the lenient opinion.

At threshold a signal excites some channel as much as K times its background plus the threshold in
quiet (B. C. J. Moore, B. R. Glasberg, T. Baer, J. Audio Eng. Soc. 45(4), 1997, constants from
memory). Filters widen downwards with level, so that masking spreads upwards as in listening
tests; beats between tone and noise are not known, so noise in a tone counts as masked 14 dB too
long. So the model can rule audibility in, not out.
"""

from __future__ import annotations

import numpy as np

from tonesim.ear import (
    FLOOR_POWER,
    Bands,
    erb_hz,
    erb_number_to_hz,
    internal_noise_db,
    room_noise_lines,
)
from tonesim.kernel.excitation import RoexShape, excite
from tonesim.signals import Signal

LOWEST_CAM, STEP_CAM, CHANNELS = 1.5, 0.25, 150  # 40 Hz to 15.1 kHz
# Efficiency of detection: K over frequency, interpolated on a logarithmic axis.
EFFICIENCY_HZ = (50.0, 100.0, 200.0, 500.0, 1000.0)
EFFICIENCY_DB = (13.0, 7.0, 3.0, -1.0, -3.0)
NORMAL_LEVEL_DB = 51.0  # filters are symmetric at this level in one bandwidth
SLOPE_AT_1_KHZ = 0.35  # of p per decibel


def _bands() -> Bands:
    edges = LOWEST_CAM + STEP_CAM * np.arange(CHANNELS + 1)
    return Bands(erb_number_to_hz(edges), erb_number_to_hz(edges[:-1] + STEP_CAM / 2.0))


BANDS = _bands()
CENTRES_HZ = BANDS.centres_hz
QUIET: Signal = 10.0 ** (internal_noise_db(CENTRES_HZ) / 10.0)
EFFICIENCY: Signal = 10.0 ** (
    np.interp(np.log10(CENTRES_HZ), np.log10(EFFICIENCY_HZ), EFFICIENCY_DB) / 10.0
)


def normal_sharpness(frequency_hz: Signal | float) -> Signal:
    """Sharpness p of a roex filter at 51 dB, four times its centre over its bandwidth."""
    return 4.0 * np.asarray(frequency_hz, dtype=np.float64) / erb_hz(frequency_hz)


_SHAPE = RoexShape(
    slope=SLOPE_AT_1_KHZ / float(normal_sharpness(1000.0)),
    normal_level_db=NORMAL_LEVEL_DB,
    least=0.1,
    most=3.0,
    neighbours=2,  # five channels stand around one bandwidth
    bands_per_erb=1.0 / STEP_CAM,
)
# p51 |g| of component j (first axis) at the filter of channel i.
_DISTANCE: Signal = (
    normal_sharpness(CENTRES_HZ) * np.abs(CENTRES_HZ - CENTRES_HZ[:, np.newaxis]) / CENTRES_HZ
)
_UPPER: Signal = np.triu(((1.0 + _DISTANCE) * np.exp(-_DISTANCE)).T)


def excitations(reference: Signal, residual: Signal) -> tuple[Signal, Signal]:
    """Excitation of two signals that share the ear.

    Filters are roex(p), (1 + p |g|) exp(-p |g|) with g = (f - centre) / centre; above the centre
    p = p51, below it p51 - 0.35 (p51 / p51 at 1 kHz) (X - 51), X the level of both signals in one
    equivalent rectangular bandwidth around f. p stays between a tenth and three times p51.

    Parameters
    ----------
    reference, residual : (n, 150) numpy.ndarray
        Power of each channel, from `BANDS.group`.
    """
    out = np.empty(reference.shape), np.empty(residual.shape)
    excite(reference, residual, _SHAPE, _DISTANCE, _UPPER, *out)
    return out


def excitation_ratio(reference: Signal, residual: Signal) -> Signal:
    """Residual over what it must reach to be heard, as a ratio of powers, shape ``(n, 150)``.

    E_residual / (K E_reference + E_quiet); the residual counts as at least -120 dB SPL.
    """
    background, heard = excitations(reference, residual)
    ratio: Signal = np.maximum(heard, FLOOR_POWER) / (EFFICIENCY * background + QUIET)
    return ratio


def room_noise(room_dba: float | None) -> Signal:
    """Power of steady room noise in each channel, shape ``(150,)``."""
    noise: Signal = BANDS.group(room_noise_lines(room_dba)[np.newaxis])[0]
    return noise
