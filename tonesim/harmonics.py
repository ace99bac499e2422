"""Distortion read off coherent records: harmonics, hum, residue and intermodulation.

A coherent record holds whole periods of every tone in it. Its discrete Fourier transform needs no
window: each tone fills one line and nothing leaks into the others (IEEE Std 1241, coherent
sampling; from memory). Tones are therefore named by their cycles within the record, and records
that are not coherent are refused. Amplitudes of lines are peaks; sums of many lines are rms.
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tonesim.errors import UsageError
from tonesim.signals import Signal, coherent_frequency

Lines = npt.NDArray[np.complex128]

HUM_ORDERS = 20  # multiples of the mains counted as hum: the first ten of a full-wave ripple
_ROUNDING = 16.0 * float(np.finfo(np.float64).eps)  # what a transform leaves of nothing, per peak
_WHOLE = 1e-9  # cycles; a tone this far from a line leaks less than 1e-9 of itself


@dataclass(frozen=True)
class Harmonics:
    """What a distortion analyser reads of one tone.

    The record is mean + sum of V_n sin(n theta + phase_n) with phase_1 = 0, and what is left.
    `mean_v` is signed; `fundamental_v` and `harmonics_v` (order 2 first) are peaks; `phases_rad`
    are those of the harmonics: the third lies at 0 where peaks are flattened and at ±pi where the
    zero crossing is. `hum_v` and `residue_v` are rms; the residue is everything in the band that
    is neither mean, fundamental, harmonic nor hum, and so shows what the reading stands on.
    """

    frequency_hz: float
    bandwidth_hz: float
    mean_v: float
    fundamental_v: float
    harmonics_v: tuple[float, ...]
    phases_rad: tuple[float, ...]
    hum_v: float
    residue_v: float

    @property
    def highest_order(self) -> int:
        """Highest harmonic inside the band."""
        return len(self.harmonics_v) + 1

    @property
    def thd_f(self) -> float:
        """Root of the sum of the harmonics' squares, as a share of the fundamental."""
        return math.hypot(*self.harmonics_v) / self.fundamental_v

    @property
    def thd_r(self) -> float:
        """The same as a share of fundamental and harmonics together: never above 1.

        Total harmonic distortion of IEC 60268-3 (from memory), thd_f / sqrt(1 + thd_f²).
        """
        return self.thd_f / math.hypot(1.0, self.thd_f)

    @property
    def thd_percent(self) -> float:
        """`thd_f` in per cent."""
        return 100.0 * self.thd_f

    @property
    def thd_db(self) -> float:
        """`thd_f` in decibels; minus infinity without any harmonic."""
        return 20.0 * math.log10(self.thd_f) if self.thd_f > 0.0 else -math.inf

    @property
    def thd_n(self) -> float:
        """Distortion and noise: harmonics, hum and residue as a share of the whole but its mean."""
        rest = math.hypot(
            math.hypot(*self.harmonics_v) / math.sqrt(2.0), self.hum_v, self.residue_v
        )
        return rest / math.hypot(self.fundamental_v / math.sqrt(2.0), rest)


@dataclass(frozen=True)
class Intermodulation:
    """Second- and third-order products of two tones, as shares of a reference amplitude."""

    reference_v: float
    d2: float
    d3: float

    @property
    def total(self) -> float:
        """Both together, sqrt(d2² + d3²)."""
        return math.hypot(self.d2, self.d3)


def coherent_cycles(frequency_hz: float, sample_rate: float, frames: int, repeats: int = 1) -> int:
    """Cycles of the coherent tone nearest to a wanted frequency.

    Parameters
    ----------
    frequency_hz, sample_rate : float
    frames : int
        Length of the record.
    repeats : int
        Equal parts the record shall consist of: the one common divisor of cycles and frames.
        With 1 no two samples meet the wave at the same phase, and harmonics that alias fall
        between the true ones, into the residue.

    Raises
    ------
    UsageError
        If `repeats` does not divide the record, or no tone fits (see `coherent_frequency`).
    """
    if repeats < 1 or frames % repeats:
        raise UsageError(f"a record of {frames} frames does not fall into {repeats} equal parts")
    part = frames // repeats
    frequency = coherent_frequency(frequency_hz, sample_rate, part)
    return round(frequency * part / sample_rate) * repeats


def spectrum(record: npt.ArrayLike) -> Lines:
    """Lines of a record as complex peak amplitudes, rectangular window.

    Parameters
    ----------
    record : (frames,) array_like

    Returns
    -------
    (frames // 2 + 1,) ndarray of complex
        Line k holds k cycles: record = Re sum of X_k exp(2 pi i k n / frames). Line 0 is the mean.

    Raises
    ------
    UsageError
        If the record has another shape, is shorter than three frames or is not finite.
    """
    x: Signal = np.asarray(record, dtype=np.float64)
    if x.ndim != 1 or x.size < 3:
        raise UsageError(
            f"a record has the shape (frames,) and three frames at least, found {x.shape}"
        )
    if not np.all(np.isfinite(x)):
        raise UsageError("the record holds samples that are not finite numbers")
    lines: Lines = np.fft.rfft(x) * (2.0 / x.size)
    lines[0] *= 0.5
    if x.size % 2 == 0:
        lines[-1] *= 0.5  # half the rate has no mirror image
    return lines


def amplitudes_at(record: npt.ArrayLike, cycles: npt.ArrayLike) -> Signal:
    """Peak amplitudes of a record at given cycle counts.

    Parameters
    ----------
    record : (frames,) array_like
    cycles : (n,) array_like
        Whole numbers from 0 to half the frames.

    Returns
    -------
    (n,) ndarray
    """
    lines = spectrum(record)
    wanted = np.atleast_1d(np.asarray(cycles, dtype=np.float64))
    at = [_whole(count, "cycles", 0, lines.size - 1) for count in wanted]
    return np.abs(lines[at])


def analyse_harmonics(
    record: npt.ArrayLike,
    cycles: float,
    sample_rate: float,
    bandwidth_hz: float | None = None,
    mains_hz: float | None = None,
) -> Harmonics:
    """Harmonics, hum and residue of a coherent record of one tone.

    Parameters
    ----------
    record : (frames,) array_like
        In volts.
    cycles : float
        Whole number of periods of the fundamental in the record.
    sample_rate : float
    bandwidth_hz : float, optional
        Lines above it are not counted; half the rate unless given. A harmonic exactly at half the
        rate is left to the residue, its amplitude depends on its phase.
    mains_hz : float, optional
        Multiples of it (up to `HUM_ORDERS`), alone and as sidebands of the fundamental, count as
        hum instead of residue. It must be coherent too.

    Raises
    ------
    UsageError
        If a tone is not coherent, not even the second harmonic lies in the band, hum and harmonics
        share lines, or the record holds no fundamental to refer to.
    """
    lines, frames = spectrum(record), np.size(record)
    first = _whole(cycles, "cycles", 1, (frames - 1) // 2)
    frequency_hz = first * sample_rate / frames
    band_hz = sample_rate / 2.0 if bandwidth_hz is None else bandwidth_hz
    last = _last_line(band_hz, sample_rate, frames)
    orders = np.arange(2, min(last, (frames - 1) // 2) // first + 1)
    if orders.size == 0:
        raise UsageError(
            f"a band of {band_hz:g} Hz holds no harmonic of {frequency_hz:g} Hz, expected more "
            f"than {2.0 * frequency_hz:g} Hz"
        )
    fundamental = _tone(lines, first, record)
    harmonics = lines[orders * first]
    quarter = np.pi / 2.0  # the phase of a sine counts as 0, that of a cosine as a quarter
    phases = np.angle(harmonics) + quarter - orders * (np.angle(lines[first]) + quarter)

    hum = _hum_lines(first, mains_hz, sample_rate, frames, last)
    if np.intersect1d(hum, first * np.arange(orders[-1] + 1)).size:
        raise UsageError(
            f"mains_hz is {mains_hz:g}: its lines fall on harmonics of {frequency_hz:g} Hz, "
            "expected another frequency"
        )
    power = 0.5 * np.abs(lines[: last + 1]) ** 2
    if 2 * last == frames:
        power[-1] *= 2.0  # at half the rate the peak is the rms
    hum_power = float(np.sum(power[hum]))
    power[0] = power[first] = 0.0
    power[orders * first] = 0.0
    power[hum] = 0.0
    return Harmonics(
        frequency_hz=frequency_hz,
        bandwidth_hz=band_hz,
        mean_v=float(lines[0].real),
        fundamental_v=fundamental,
        harmonics_v=tuple(np.abs(harmonics).tolist()),
        phases_rad=tuple(np.angle(np.exp(1j * phases)).tolist()),
        hum_v=math.sqrt(hum_power),
        residue_v=math.sqrt(float(np.sum(power))),
    )


def modulation_distortion(
    record: npt.ArrayLike, f1_cycles: float, f2_cycles: float
) -> Intermodulation:
    """How far a low tone f1 modulates a high one f2: sidebands as shares of the high tone.

    d2 = [U(f2+f1) + U(f2-f1)] / U(f2), d3 = [U(f2+2 f1) + U(f2-2 f1)] / U(f2); IEC 60268-3,
    modulation distortion (from memory); usual tones 60 Hz and 7 kHz, 4 to 1 (SMPTE RP 120).

    Parameters
    ----------
    record : (frames,) array_like
    f1_cycles, f2_cycles : float
        Whole numbers of periods in the record; f2 above 2 f1 and no multiple of f1.

    Raises
    ------
    UsageError
        If a tone is not coherent, a sideband falls beside the record's lines or on a harmonic of
        f1, or there is no high tone.
    """
    lines = spectrum(record)
    f1, f2 = (_whole(f, "cycles", 1, (np.size(record) - 1) // 2) for f in (f1_cycles, f2_cycles))
    if f2 <= 2 * f1 or f2 % f1 == 0:
        raise UsageError(
            f"tones of {f1} and {f2} cycles, expected the second above twice the first and "
            "no multiple of it"
        )
    _whole(f2 + 2 * f1, "the upper sideband", 1, (np.size(record) - 1) // 2)
    reference = _tone(lines, f2, record)
    d2, d3 = (float(np.sum(np.abs(lines[[f2 - k * f1, f2 + k * f1]]))) for k in (1, 2))
    return Intermodulation(reference, d2 / reference, d3 / reference)


def difference_distortion(
    record: npt.ArrayLike, f1_cycles: float, f2_cycles: float
) -> Intermodulation:
    """Difference products of two equal tones close together, f1 below f2.

    d2 = U(f2-f1) / R, d3 = [U(2 f1-f2) + U(2 f2-f1)] / R with R = 2 U(f2); IEC 60268-3,
    difference-frequency distortion (from memory); usual tones 19 and 20 kHz.

    Parameters
    ----------
    record : (frames,) array_like
    f1_cycles, f2_cycles : float
        Whole numbers of periods in the record; f2 above f1 and below 1.5 f1.

    Raises
    ------
    UsageError
        If a tone is not coherent, a product falls beside the record's lines, or there are no tones.
    """
    lines = spectrum(record)
    most = (np.size(record) - 1) // 2
    f1, f2 = (_whole(f, "cycles", 1, most) for f in (f1_cycles, f2_cycles))
    if not f1 < f2 < 1.5 * f1:
        raise UsageError(
            f"tones of {f1} and {f2} cycles, expected the second above the first by less than half"
        )
    _whole(2 * f2 - f1, "the upper product", 1, most)
    _tone(lines, f1, record)
    reference = 2.0 * _tone(lines, f2, record)
    d3 = float(np.sum(np.abs(lines[[2 * f1 - f2, 2 * f2 - f1]])))
    return Intermodulation(reference, float(abs(lines[f2 - f1])) / reference, d3 / reference)


def _whole(count: float, name: str, least: int, most: int) -> int:
    """Return a count of cycles that is whole and inside its range."""
    if not (least <= count <= most and float(count).is_integer()):
        raise UsageError(f"{name}: found {count:g}, expected a whole number from {least} to {most}")
    return int(count)


def _tone(lines: Lines, cycles: int, record: npt.ArrayLike) -> float:
    """Peak amplitude of a tone that others are referred to."""
    amplitude = float(abs(lines[cycles]))
    if amplitude <= _ROUNDING * float(np.max(np.abs(record))):
        raise UsageError(f"the record holds no tone of {cycles} cycles to refer distortion to")
    return amplitude


def _last_line(bandwidth_hz: float, sample_rate: float, frames: int) -> int:
    if not 0.0 < bandwidth_hz <= sample_rate / 2.0:
        raise UsageError(
            f"bandwidth_hz is {bandwidth_hz:g}; at {sample_rate:g} Hz it must lie between 0 and "
            f"{sample_rate / 2.0:g}"
        )
    return math.floor(bandwidth_hz * frames / sample_rate + _WHOLE)


def _hum_lines(
    first: int, mains_hz: float | None, sample_rate: float, frames: int, last: int
) -> npt.NDArray[np.int_]:
    """Lines of the mains and of its sidebands around the fundamental, inside the band."""
    if mains_hz is None:
        return np.zeros(0, dtype=np.int_)
    mains = mains_hz * frames / sample_rate
    if not (math.isfinite(mains) and mains > 0.5 and abs(mains - round(mains)) <= _WHOLE):
        raise UsageError(
            f"mains_hz is {mains_hz:g}: {mains:g} cycles in the record, expected a whole number"
        )
    multiples = round(mains) * np.arange(1, HUM_ORDERS + 1)
    found = np.unique(np.concatenate([multiples, first + multiples, np.abs(first - multiples)]))
    return found[found <= last]
