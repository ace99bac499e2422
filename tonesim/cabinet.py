"""The loudspeaker cabinet: a linear filter behind the stage, from a shape or an impulse response.

A shape is a chain of analogue second-order sections (common practice, no source). Its response and
that of a recorded impulse response at another rate reach the render's rate the same way: their
spectrum is written down on a grid of frequencies, faded out towards half the rate, delayed a few
samples to make room for what the fade rings before the beginning, and transformed to time.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from scipy import fft

from tonesim.catalogue import CabinetShape
from tonesim.errors import DesignError, UsageError
from tonesim.kernel import fir
from tonesim.signals import Signal, as_frames

NORMAL_HZ = 1000.0  # shapes are 0 dB here
FADE_START = 0.44  # of the rate; the spectrum fades to nothing at half the rate
LATENCY_FRAMES = 32  # room for the ringing of that fade, in samples of the lower rate
TRIM = 1e-5  # of the largest sample, -100 dB: the tail of a shape ends here
SETTLED_NEPER = 14.0  # a section has decayed to -122 dB
LONGEST_S = 2.0


def _analog_response(shape: CabinetShape, frequency_hz: Signal) -> npt.NDArray[np.complex128]:
    """Return the product of the sections, not normalised.

    With s = j f / f0: high-pass s^2 / D and low-pass 1 / D, D = s^2 + s / Q + 1; peak
    (s^2 + s A / Q + 1) / (s^2 + s / (A Q) + 1), A = 10^(dB / 40).
    """
    response = np.ones(frequency_hz.shape, dtype=np.complex128)
    for section in shape.highpass:
        s = 1j * frequency_hz / section.hz
        response *= s * s / (s * s + s / section.q + 1.0)
    for peak in shape.peaks:
        s = 1j * frequency_hz / peak.hz
        a = 10.0 ** (peak.gain_db / 40.0)
        response *= (s * s + s * a / peak.q + 1.0) / (s * s + s / (a * peak.q) + 1.0)
    for section in shape.lowpass:
        s = 1j * frequency_hz / section.hz
        response /= s * s + s / section.q + 1.0
    return response


def _normal_gain(shape: CabinetShape) -> float:
    return float(np.abs(_analog_response(shape, np.array([NORMAL_HZ])))[0])


def analog_response_db(shape: CabinetShape, frequency_hz: npt.ArrayLike) -> Signal:
    """Return the level of a shape in dB relative to 1 kHz.

    Parameters
    ----------
    shape : CabinetShape
    frequency_hz : array_like
        Above 0, in hertz.

    Returns
    -------
    numpy.ndarray
        As many values.
    """
    frequencies = np.asarray(frequency_hz, dtype=np.float64)
    level: Signal = np.abs(_analog_response(shape, frequencies)) / _normal_gain(shape)
    return 20.0 * np.log10(level)


def shape_response(shape: CabinetShape, sample_rate: float) -> tuple[Signal, int]:
    """Return the impulse response of a shape.

    Parameters
    ----------
    shape : CabinetShape
    sample_rate : float
        In hertz.

    Returns
    -------
    response : (n,) numpy.ndarray
        Follows magnitude and phase of the analogue shape, apart from the latency, up to 0.44 of the
        rate; cut where it has fallen below -100 dB.
    latency : int
        Samples.

    Raises
    ------
    DesignError
        If a section rings for longer than two seconds.
    """
    poles = [(section.hz, section.q) for section in (*shape.highpass, *shape.lowpass)]
    poles += [(peak.hz, peak.q * 10.0 ** (peak.gain_db / 40.0)) for peak in shape.peaks]
    settled_s = 0.0
    for hz, q in poles:
        settled_s = max(settled_s, _settling_s(hz, q))
        if settled_s > LONGEST_S:
            raise DesignError(
                f"cabinet {shape.name}: a section at {hz:g} Hz with Q {q:g} rings for "
                f"{settled_s:.1f} s; up to {LONGEST_S:g} s are computed"
            )
    # Twice as long: what rings before the beginning must not meet the tail.
    room = 4 * LATENCY_FRAMES + math.ceil(settled_s * sample_rate)
    size = fft.next_fast_len(2 * room, real=True)
    spectrum = _analog_response(shape, fft.rfftfreq(size, 1.0 / sample_rate))
    spectrum /= _normal_gain(shape)
    response = _to_time(spectrum, size, 1.0, LATENCY_FRAMES)[: size // 2]
    audible = np.flatnonzero(np.abs(response) > TRIM * np.max(np.abs(response)))
    return response[: audible[-1] + 1].copy(), LATENCY_FRAMES


def _settling_s(hz: float, q: float) -> float:
    # Poles decay as exp(-w0 t / 2Q); overdamped ones by the slower of two, about exp(-w0 Q t).
    return SETTLED_NEPER / (2.0 * math.pi * hz * (0.5 / q if q > 0.5 else q))


def _to_time(spectrum: npt.NDArray[np.complex128], size: int, band: float, latency: int) -> Signal:
    """Fade a spectrum out towards `band` times half the rate, delay it and transform it."""
    turns = np.arange(spectrum.shape[0]) / size
    faded = np.clip((turns / band - FADE_START) / (0.5 - FADE_START), 0.0, 1.0)
    window = 0.5 + 0.5 * np.cos(np.pi * faded)
    delay = np.exp(-2j * np.pi * latency * turns)
    response: Signal = fft.irfft(spectrum * window * delay, size)
    return response


def resample_response(samples: Signal, rate: int, sample_rate: int) -> tuple[Signal, int]:
    """Bring an impulse response to another rate, so that the filter it describes stays the same.

    Parameters
    ----------
    samples : (n,) numpy.ndarray
        The response at `rate`.
    rate, sample_rate : int
        In hertz.

    Returns
    -------
    response : (m,) numpy.ndarray
        Same magnitude in decibels at every frequency up to 0.44 of the lower rate.
    latency : int
        Samples the response begins late, at `sample_rate`; 0 if the rates are equal.

    Raises
    ------
    UsageError
        If a rate is not positive or the response is empty.
    """
    if rate < 1 or sample_rate < 1 or samples.ndim != 1 or samples.shape[0] == 0:
        raise UsageError(
            f"cannot bring a response of shape {samples.shape} from {rate} to {sample_rate} Hz"
        )
    if rate == sample_rate:
        return samples.copy(), 0
    divisor = math.gcd(rate, sample_rate)
    step, new_step = rate // divisor, sample_rate // divisor
    # The same time span in whole samples of both rates, with room for ringing at both ends.
    latency = math.ceil(LATENCY_FRAMES * max(1.0, sample_rate / rate))
    room = math.ceil(4 * latency * rate / sample_rate)
    spans = math.ceil((samples.shape[0] + room) / step)
    size, new_size = spans * step, spans * new_step
    spectrum = fft.rfft(samples, size)[: new_size // 2 + 1]
    spectrum = np.pad(spectrum, (0, new_size // 2 + 1 - spectrum.shape[0]))
    response = _to_time(spectrum, new_size, min(1.0, rate / sample_rate), latency)
    length = math.ceil(samples.shape[0] * sample_rate / rate) + 2 * latency
    return response[:length].copy(), latency


class Cabinet:
    """A cabinet as a filter over blocks.

    Parameters
    ----------
    response : (n,) array_like
        Impulse response at `sample_rate`.
    latency : int
        Samples of delay in the response that belong to its making, not to the cabinet.
    sample_rate : float
        The rate the response was made for, in hertz.

    Notes
    -----
    Direct convolution: equal bits under any cut into blocks, no delay beyond `latency`, and a cost
    that grows with the length of the response.

    Raises
    ------
    UsageError
        If the response is empty or not finite, or the latency lies outside it.
    """

    def __init__(self, response: npt.ArrayLike, latency: int, sample_rate: float) -> None:
        taps = np.array(response, dtype=np.float64)
        if taps.ndim != 1 or taps.shape[0] == 0 or not np.all(np.isfinite(taps)):
            raise UsageError("a cabinet needs an impulse response of finite numbers, shape (n,)")
        if not 0 <= latency < taps.shape[0]:
            raise UsageError(
                f"a latency of {latency} lies outside a response of {taps.shape[0]} samples"
            )
        self._taps = taps
        self._sample_rate = sample_rate
        self._block_size = 0
        self._lines: list[Signal] = []  # one per channel
        self._out = np.zeros(0)
        self._started = False
        self.latency = latency

    def prepare(self, sample_rate: float, block_size: int) -> None:
        """Compile and allocate for blocks of up to `block_size` frames; forget the past.

        Raises
        ------
        UsageError
            If the response was made for another rate or the block size is below 1.
        """
        if sample_rate != self._sample_rate:
            raise UsageError(
                f"the cabinet was made for {self._sample_rate:g} Hz, not {sample_rate:g} Hz"
            )
        if block_size < 1:
            raise UsageError(f"block_size is {block_size}; it must be at least 1")
        self._block_size = block_size
        self._out = np.zeros(block_size)
        self._lines = [self._line()]
        fir.filter_block(self._lines[0], 1, self._taps, self._out)
        self.reset()

    def process(self, block: Signal) -> Signal:
        """Filter one block.

        Parameters
        ----------
        block : (n,) or (n, channels) numpy.ndarray
            Any n; one longer than prepared is cut. All blocks have the same number of channels.

        Returns
        -------
        numpy.ndarray
            A new array of the same shape.

        Raises
        ------
        UsageError
            If `prepare` has not been called or the shape does not fit.
        """
        if self._block_size == 0:
            raise UsageError("process was called before prepare: call prepare first")
        x = as_frames(block)
        self._use_channels(x.shape[1])
        past = self._taps.shape[0] - 1
        y = np.empty(x.shape)
        for start in range(0, x.shape[0], self._block_size):
            part = slice(start, min(start + self._block_size, x.shape[0]))
            count = part.stop - start
            for channel, line in enumerate(self._lines):
                line[past : past + count] = x[part, channel]
                fir.filter_block(line, count, self._taps, self._out)
                y[part, channel] = self._out[:count]
        return y.reshape(block.shape)

    def reset(self) -> None:
        """Forget the past: the state is as after `prepare`."""
        self._started = False
        for line in self._lines:
            line.fill(0.0)

    def _line(self) -> Signal:
        return np.zeros(self._taps.shape[0] - 1 + self._block_size)

    def _use_channels(self, channels: int) -> None:
        if len(self._lines) != channels:
            if self._started:
                raise UsageError(
                    f"a block of {channels} channel(s) came after blocks of {len(self._lines)}"
                )
            self._lines = [self._line() for _ in range(channels)]
        self._started = True
