"""What both models of the ear share: scales, calibration, ear weighting, noise floors, bands.

Powers are relative to 20 µPa, so that 1 is 0 dB SPL. A model looks at frames of 2048 samples at
48 kHz, every 1024, through a Hann window (Rec. ITU-R BS.1387, basic version). Its constants are
from memory; the tests hold them against the closed forms and against listening thresholds.
Frequencies are in hertz unless the name says otherwise.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tonesim.errors import UsageError
from tonesim.kernel.excitation import group_lines
from tonesim.signals import Signal

RATE_HZ = 48_000
FRAME = 2048
HOP = 1024
LINES = FRAME // 2 + 1
LINE_HZ = RATE_HZ / FRAME
LINES_HZ: Signal = LINE_HZ * np.arange(LINES, dtype=np.float64)

PRESSURE_PA = 20e-6  # 0 dB SPL
FLOOR_POWER = 1e-12  # -120 dB SPL stands for nothing
CALIBRATION_HZ = 1019.5  # half a line off a line, Rec. ITU-R BS.1387
SENSITIVITY_V = 2.83  # rms, 1 W into 8 ohms (IEC 60268-5)

WINDOW: Signal = 0.5 - 0.5 * np.cos(2.0 * np.pi * np.arange(FRAME) / (FRAME - 1))


@dataclass(frozen=True)
class Listening:
    """How loud, and in what room, a signal is heard.

    Parameters
    ----------
    sine_spl_db : float
        Sound pressure level of a steady sine whose peak is 1 in the unit of the signal (a volt,
        or full scale), dB re 20 µPa rms. See `loudspeaker_sine_spl_db`.
    room_dba : float or None
        Steady noise of the room, A-weighted, with a pink spectrum; None for a silent room.

    Raises
    ------
    UsageError
        If a figure is not finite.
    """

    sine_spl_db: float
    room_dba: float | None = None

    def __post_init__(self) -> None:
        for name in ("sine_spl_db", "room_dba"):
            value = getattr(self, name)
            if value is not None and not math.isfinite(value):
                raise UsageError(f"{name} is {value}; expected a finite level in decibels")


def loudspeaker_sine_spl_db(sensitivity_db: float, distance_m: float) -> float:
    """Level that a sine of 1 V peak makes in front of a loudspeaker, dB SPL.

    sensitivity - 20 lg(2.83 sqrt 2) - 20 lg(distance / 1 m): free field, no room gain.

    Parameters
    ----------
    sensitivity_db : float
        Sound pressure level for 2.83 V rms at 1 m.
    distance_m : float
        In metres, above 0.

    Raises
    ------
    UsageError
        If the distance is not above 0 or a value is not finite.
    """
    if not (math.isfinite(distance_m) and distance_m > 0.0 and math.isfinite(sensitivity_db)):
        raise UsageError(
            f"sensitivity_db is {sensitivity_db:g} and distance_m {distance_m:g}; expected a "
            "finite level and a distance above 0"
        )
    return sensitivity_db - 20.0 * math.log10(SENSITIVITY_V * math.sqrt(2.0) * distance_m)


def pascals_per_unit(sine_spl_db: float) -> float:
    """Sound pressure of a sample of 1, in pascals: 20 µPa sqrt 2 10^(level / 20)."""
    return PRESSURE_PA * math.sqrt(2.0) * math.pow(10.0, sine_spl_db / 20.0)


def bark(frequency_hz: npt.ArrayLike) -> Signal:
    """Critical-band rate of BS.1387, 7 asinh(f / 650), in Bark."""
    return 7.0 * np.arcsinh(np.asarray(frequency_hz, dtype=np.float64) / 650.0)


def bark_to_hz(bark_value: npt.ArrayLike) -> Signal:
    """Frequency at a critical-band rate; inverse of `bark`."""
    return 650.0 * np.sinh(np.asarray(bark_value, dtype=np.float64) / 7.0)


def erb_hz(frequency_hz: npt.ArrayLike) -> Signal:
    """Equivalent rectangular bandwidth of the auditory filter, 24.7 (0.00437 f + 1).

    Reference: B. R. Glasberg and B. C. J. Moore, Hearing Research 47, 1990.
    """
    return 24.7 * (0.00437 * np.asarray(frequency_hz, dtype=np.float64) + 1.0)


def erb_number(frequency_hz: npt.ArrayLike) -> Signal:
    """Position on the ERB-number scale, 21.4 lg(0.00437 f + 1), in Cam."""
    return 21.4 * np.log10(0.00437 * np.asarray(frequency_hz, dtype=np.float64) + 1.0)


def erb_number_to_hz(cam: npt.ArrayLike) -> Signal:
    """Frequency at a position on the ERB-number scale; inverse of `erb_number`."""
    return (10.0 ** (np.asarray(cam, dtype=np.float64) / 21.4) - 1.0) / 0.00437


def ear_weighting_db(frequency_hz: npt.ArrayLike) -> Signal:
    """Transmission through outer and middle ear (BS.1387), in decibels; frequencies above 0.

    -2.184 k^-0.8 + 6.5 exp(-0.6 (k - 3.3)^2) - 0.001 k^3.6, k in kilohertz.
    """
    k = np.asarray(frequency_hz, dtype=np.float64) / 1000.0
    weighting: Signal = -2.184 * k**-0.8 + 6.5 * np.exp(-0.6 * (k - 3.3) ** 2) - 0.001 * k**3.6
    return weighting


def internal_noise_db(frequency_hz: npt.ArrayLike) -> Signal:
    """Noise the ear itself adds to a band (BS.1387), 1.456 k^-0.8 dB, k in kilohertz."""
    k = np.asarray(frequency_hz, dtype=np.float64) / 1000.0
    noise: Signal = 1.456 * k**-0.8
    return noise


def a_weighting_db(frequency_hz: npt.ArrayLike) -> Signal:
    """A-weighting of sound level meters (IEC 61672-1, closed form), in decibels."""
    f2 = np.square(np.asarray(frequency_hz, dtype=np.float64))
    bottom = (f2 + 20.6**2) * np.sqrt((f2 + 107.7**2) * (f2 + 737.9**2)) * (f2 + 12194.0**2)
    return 20.0 * np.log10(12194.0**2 * f2**2 / bottom) + 2.0


def _line_weights(level_db: Signal) -> Signal:
    """Power weights of all lines from levels at those above 0 Hz; the mean carries no sound."""
    weights: Signal = np.concatenate([[0.0], 10.0 ** (level_db / 10.0)])
    return weights


EAR_WEIGHTS = _line_weights(ear_weighting_db(LINES_HZ[1:]))
A_WEIGHTS = _line_weights(a_weighting_db(LINES_HZ[1:]))


def room_noise_lines(room_dba: float | None) -> Signal:
    """Power of steady room noise in each line, shape ``(1025,)``; zero without a room.

    Pink: as much power in every octave from 23 Hz to 24 kHz, scaled to an A-weighted sum. Quiet
    rooms fall off about so or more steeply (common practice, no source).
    """
    if room_dba is None:
        return np.zeros(LINES)
    power: Signal = np.concatenate([[0.0], 1.0 / LINES_HZ[1:]])
    power *= math.pow(10.0, room_dba / 10.0) / float(power @ A_WEIGHTS)
    return power


def _calibration() -> float:
    """Factor on amplitudes that makes the lines of a sine of peak 1 add up to a power of 1."""
    times = np.arange(FRAME) + HOP * np.arange(10)[:, np.newaxis]
    tone = np.sin(2.0 * np.pi * CALIBRATION_HZ / RATE_HZ * times)
    power = np.abs(np.fft.rfft(tone * WINDOW, axis=1)) ** 2
    return 1.0 / math.sqrt(float(np.mean(np.sum(power, axis=1))))


# Energy-true: BS.1387 itself lets the largest line read the level, which is 3.18 dB more. This one
# meets the threshold in quiet (ISO 226).
CALIBRATION = _calibration()


def spectra(frames: Signal, sine_spl_db: float) -> npt.NDArray[np.complex128]:
    """Spectrum of each frame, whose squares are powers relative to 20 µPa.

    Parameters
    ----------
    frames : (n, 2048) numpy.ndarray
        At 48 kHz.
    sine_spl_db : float
        Level of a sine of peak 1.

    Returns
    -------
    (n, 1025) numpy.ndarray
    """
    scale = CALIBRATION * 10.0 ** (sine_spl_db / 20.0)
    lines: npt.NDArray[np.complex128] = np.fft.rfft(frames * (scale * WINDOW), axis=1)
    return lines


def power(lines: npt.NDArray[np.complex128]) -> Signal:
    """Square of the magnitude."""
    return np.square(lines.real) + np.square(lines.imag)


class Bands:
    """Bands of a model: the ear-weighted power of lines, shared out by overlap.

    A line k covers (k - 1/2) to (k + 1/2) line distances; each band gets the part that lies
    inside it.

    Parameters
    ----------
    edges_hz : (bands + 1,) numpy.ndarray
        Rising.
    centres_hz : (bands,) numpy.ndarray
    """

    def __init__(self, edges_hz: Signal, centres_hz: Signal) -> None:
        self.edges_hz, self.centres_hz = edges_hz, centres_hz
        self.count = centres_hz.shape[0]
        first, start, weights = [], [0], []
        for low, high in itertools.pairwise(edges_hz):
            lines = np.arange(math.floor(low / LINE_HZ + 0.5), math.floor(high / LINE_HZ + 0.5) + 1)
            lines = lines[lines < LINES]
            top = np.minimum((lines + 0.5) * LINE_HZ, high)
            bottom = np.maximum((lines - 0.5) * LINE_HZ, low)
            first.append(int(lines[0]))
            start.append(start[-1] + lines.shape[0])
            weights.append((top - bottom) / LINE_HZ * EAR_WEIGHTS[lines])
        self._first, self._start = np.array(first), np.array(start)
        self._weights: Signal = np.concatenate(weights)

    def group(self, line_power: Signal) -> Signal:
        """Ear-weighted power of each band, ``(n, 1025)`` to ``(n, bands)``."""
        out = np.empty((line_power.shape[0], self.count))
        group_lines(line_power, self._first, self._start, self._weights, out)
        return out


def decibels(power_ratio: npt.ArrayLike) -> Signal:
    """10 lg of a ratio of powers, which is taken as at least -300 dB."""
    decibel: Signal = 10.0 * np.log10(np.maximum(power_ratio, 1e-30))
    return decibel


def spl_db(level_power: npt.ArrayLike) -> Signal:
    """Sound pressure level of a power, at least -120 dB."""
    return decibels(np.maximum(level_power, FLOOR_POWER))
