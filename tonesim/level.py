"""Loudness, peak and gain: how loud a result is, and how to make two equally loud.

Loudness is that of Rec. ITU-R BS.1770-5, Annex 1; true peak its Annex 2. The library pyloudnorm
computes the same from a whole recording in memory; ours runs along block by block, and the tests
hold it against pyloudnorm and the published compliance signals. Any cut into blocks gives equal
bits: what is summed is always the same pieces of the signal.
"""

from __future__ import annotations

import copy
import math
from array import array
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
from scipy import signal

from tonesim.errors import UsageError
from tonesim.oversample import Oversampler
from tonesim.signals import Signal, as_frames

# Rec. ITU-R BS.1770-5, Annex 1
LOUDNESS_OFFSET_DB = -0.691
ABSOLUTE_GATE_LUFS = -70.0
RELATIVE_GATE_LU = -10.0
HOPS_PER_SECOND = 10  # 400 ms blocks, 75 % overlap
HOPS_PER_BLOCK = 4
CHANNEL_WEIGHTS = (1.0, 1.0, 1.0, 1.41, 1.41)  # L R C Ls Rs

# Analogue prototypes behind the 48 kHz coefficients of the standard, found from those by inverting
# the bilinear transform (B. De Man, 2018, from memory); the tests compare the coefficients.
REFERENCE_RATE_HZ = 48_000.0
CALIBRATION_HZ = 997.0
SHELF_HZ, SHELF_Q, SHELF_DB = 1681.974450955533, 0.7071752369554196, 3.999843853973347
SHELF_BAND_EXPONENT = 0.4996667741545416
HIGHPASS_HZ, HIGHPASS_Q = 38.13547087602444, 0.5003270373238773

TRUE_PEAK_RATE_HZ = 192_000.0  # 4 x 48 kHz, Annex 2
PIECE_FRAMES = 4096


def k_weighting(sample_rate: float) -> Signal:
    """Return the K-weighting filter as two second-order sections.

    The standard gives 48 kHz only. At other rates the prototypes are transformed anew and the gain
    set so that 997 Hz, the frequency of its calibration, passes alike. The shelf bends as the
    rate falls: by 0.003 dB at 44.1 kHz, by 0.05 dB at 22.05 kHz, by 0.5 dB (near 2.4 kHz) at 8 kHz.

    Parameters
    ----------
    sample_rate : float
        In hertz. At 48 kHz the result is the table of Rec. ITU-R BS.1770-5.

    Returns
    -------
    (2, 6) numpy.ndarray
        Sections ``b0 b1 b2 1 a1 a2``: high shelf, then high-pass.
    """
    sections = _bilinear_sections(sample_rate)
    if sample_rate != REFERENCE_RATE_HZ:
        wanted = _magnitude(_bilinear_sections(REFERENCE_RATE_HZ), REFERENCE_RATE_HZ)
        sections[0, :3] *= wanted / _magnitude(sections, sample_rate)
    return sections


def _magnitude(sections: Signal, sample_rate: float) -> float:
    response = signal.sosfreqz(sections, worN=[CALIBRATION_HZ], fs=sample_rate)[1]
    return float(np.abs(response[0]))


def _bilinear_sections(sample_rate: float) -> Signal:
    k = math.tan(math.pi * SHELF_HZ / sample_rate)
    high = 10.0 ** (SHELF_DB / 20.0)
    band = high**SHELF_BAND_EXPONENT
    damping = k / SHELF_Q
    lead = 1.0 + damping + k * k
    shelf = [
        (high + band * damping + k * k) / lead,
        2.0 * (k * k - high) / lead,
        (high - band * damping + k * k) / lead,
        1.0,
        2.0 * (k * k - 1.0) / lead,
        (1.0 - damping + k * k) / lead,
    ]
    k = math.tan(math.pi * HIGHPASS_HZ / sample_rate)
    damping = k / HIGHPASS_Q
    lead = 1.0 + damping + k * k
    highpass = [1.0, -2.0, 1.0, 1.0, 2.0 * (k * k - 1.0) / lead, (1.0 - damping + k * k) / lead]
    return np.array([shelf, highpass])


class _Pieces:
    """Cut a stream at fixed places: collects blocks of any size and hands out whole pieces."""

    def __init__(self, channels: int, longest: int) -> None:
        self._held = np.zeros((longest, channels))
        self._count = 0

    def add(self, block: Signal, length: Callable[[], int], use: Callable[[Signal], None]) -> None:
        """Add frames; call `use` with each piece of `length()` frames that gets complete."""
        taken = 0
        while taken < block.shape[0]:
            wanted = length()
            size = min(wanted - self._count, block.shape[0] - taken)
            self._held[self._count : self._count + size] = block[taken : taken + size]
            self._count += size
            taken += size
            if self._count == wanted:
                self._count = 0
                use(self._held[:wanted])

    def rest(self) -> Signal:
        """Return the frames that do not make a piece yet."""
        return self._held[: self._count]


def _checked(block: npt.ArrayLike, channels: int) -> Signal:
    x = as_frames(block)
    if x.shape[1] != channels:
        raise UsageError(f"the meter has {channels} channel(s); a block of {x.shape[1]} came")
    return x


class LoudnessMeter:
    """Integrated loudness of a stream.

    Parameters
    ----------
    sample_rate : int
        In hertz, 8 to 384 kHz.
    channels : int
        1 to 5: left, right, centre, left and right surround.

    Notes
    -----
    Memory grows by one number per 100 ms. At rates that are no multiple of 10 Hz the hops differ in
    length by one frame.
    """

    def __init__(self, sample_rate: int, channels: int) -> None:
        if not 1 <= channels <= len(CHANNEL_WEIGHTS):
            raise UsageError(f"channels is {channels}; loudness is defined for 1 to 5")
        if not 8_000 <= sample_rate <= 384_000:
            raise UsageError(f"sample_rate is {sample_rate} Hz; 8000 to 384000 Hz are supported")
        self.sample_rate = sample_rate
        self.channels = channels
        self._weights = np.array(CHANNEL_WEIGHTS[:channels])
        self._sections = k_weighting(sample_rate)
        self.reset()

    def reset(self) -> None:
        """Forget everything heard so far."""
        self._state = np.zeros((2, 2, self.channels))
        self._pieces = _Pieces(self.channels, self.sample_rate // HOPS_PER_SECOND + 1)
        self._hop_energy = array("d")

    def add(self, block: npt.ArrayLike) -> None:
        """Hear a block of shape ``(n,)`` or ``(n, channels)``, full scale at 1.0."""
        x = _checked(block, self.channels)
        if x.shape[0] == 0:
            return
        weighted, self._state = signal.sosfilt(self._sections, x, axis=0, zi=self._state)
        self._pieces.add(weighted, self._hop_length, self._finish_hop)

    def integrated(self) -> float:
        """Return the gated loudness in LUFS of what was heard so far; -inf for silence.

        Blocks of 400 ms every 100 ms; blocks below -70 LUFS are left out, then those more than
        10 LU below the loudness of the rest; an incomplete last block is dropped. A recording of
        less than 400 ms has no block: then it is the ungated K-weighted level of all there is.
        """
        hops = np.array(self._hop_energy)
        if hops.shape[0] < HOPS_PER_BLOCK:
            rest = self._pieces.rest()
            frames = self._hop_start(hops.shape[0]) + rest.shape[0]
            energy = float(np.sum(hops)) + self._energy(rest)
            return _lufs(energy / frames) if frames else -math.inf
        power = np.sum(np.lib.stride_tricks.sliding_window_view(hops, HOPS_PER_BLOCK), axis=1)
        starts = np.arange(power.shape[0] + HOPS_PER_BLOCK) * self.sample_rate // HOPS_PER_SECOND
        power /= starts[HOPS_PER_BLOCK:] - starts[:-HOPS_PER_BLOCK]
        loud = power[power > _power(ABSOLUTE_GATE_LUFS)]
        if loud.shape[0] == 0:
            return -math.inf
        gate = _lufs(float(np.mean(loud))) + RELATIVE_GATE_LU
        return _lufs(float(np.mean(loud[loud > _power(gate)])))

    def _hop_start(self, hop: int) -> int:
        return hop * self.sample_rate // HOPS_PER_SECOND

    def _hop_length(self) -> int:
        hop = len(self._hop_energy)
        return self._hop_start(hop + 1) - self._hop_start(hop)

    def _finish_hop(self, weighted: Signal) -> None:
        self._hop_energy.append(self._energy(weighted))

    def _energy(self, weighted: Signal) -> float:
        return float(np.sum(np.square(weighted), axis=0) @ self._weights)


def _lufs(power: float) -> float:
    return LOUDNESS_OFFSET_DB + 10.0 * math.log10(power) if power > 0.0 else -math.inf


def _power(lufs: float) -> float:
    return float(10.0 ** ((lufs - LOUDNESS_OFFSET_DB) / 10.0))


class LevelMeter:
    """Sample peak, true peak and rms of a stream.

    Parameters
    ----------
    sample_rate : float
        In hertz.
    channels : int

    Attributes
    ----------
    peak : float
        Largest magnitude of any sample, over all channels.

    Notes
    -----
    True peak is the largest magnitude at a power of two times the rate, four times at 44.1 and
    48 kHz (Rec. ITU-R BS.1770-5, Annex 2, with a longer filter than the one printed there). At four
    times it may read low by up to 0.17 dB for a tone at a quarter of the rate, 0.55 dB at 0.45.
    """

    def __init__(self, sample_rate: float, channels: int) -> None:
        self.channels = channels
        self.factor = 2 ** max(0, math.ceil(math.log2(TRUE_PEAK_RATE_HZ / sample_rate) - 0.2))
        self._up = [Oversampler(self.factor, PIECE_FRAMES) for _ in range(channels)]
        self._high = np.zeros(PIECE_FRAMES * self.factor)
        self.reset()

    def reset(self) -> None:
        """Forget everything heard so far."""
        for oversampler in self._up:
            oversampler.reset()
        self._pieces = _Pieces(self.channels, PIECE_FRAMES)
        self._energy = 0.0
        self._frames = 0
        self._true_peak = 0.0
        self.peak = 0.0

    def add(self, block: npt.ArrayLike) -> None:
        """Hear a block of shape ``(n,)`` or ``(n, channels)``."""
        x = _checked(block, self.channels)
        self._frames += x.shape[0]
        self.peak = max(self.peak, float(np.max(np.abs(x), initial=0.0)))
        self._pieces.add(x, lambda: PIECE_FRAMES, self._finish_piece)

    @property
    def rms(self) -> float:
        """Root mean square over frames and channels; 0 before anything is heard."""
        count = self._frames * self.channels
        energy = self._energy + float(np.sum(np.square(self._pieces.rest())))
        return math.sqrt(energy / count) if count else 0.0

    @property
    def true_peak_db(self) -> float:
        """True peak in dB relative to full scale (dBTP), as if silence followed; or -inf."""
        largest = max(self._true_peak, self.peak)
        rest = self._pieces.rest()
        for column, oversampler in enumerate(self._up):
            ahead = copy.deepcopy(oversampler)
            tail = np.concatenate([rest[:, column], np.zeros(ahead.latency)])
            for start in range(0, tail.shape[0], PIECE_FRAMES):
                piece = tail[start : start + PIECE_FRAMES]
                largest = max(largest, self._largest_between(ahead, piece))
        return 20.0 * math.log10(largest) if largest > 0.0 else -math.inf

    def _finish_piece(self, x: Signal) -> None:
        self._energy += float(np.sum(np.square(x)))
        for column, oversampler in enumerate(self._up):
            between = self._largest_between(oversampler, x[:, column])
            self._true_peak = max(self._true_peak, between)

    def _largest_between(self, oversampler: Oversampler, x: Signal) -> float:
        high = self._high[: x.shape[0] * self.factor]
        oversampler.up(x, high)
        return float(np.max(np.abs(high)))


def gain_to_match(
    measured_lufs: float, target_lufs: float, peak: float, ceiling_db: float = -1.0
) -> tuple[float, bool]:
    """Return the gain that brings a recording to a loudness without passing a peak.

    Parameters
    ----------
    measured_lufs, target_lufs : float
        A measured -inf (silence) asks for no gain.
    peak : float
        Largest magnitude of the recording, full scale at 1.0; give the true peak to keep it.
    ceiling_db : float
        Peak the result may reach, in dB relative to full scale.

    Returns
    -------
    gain : float
        Factor.
    limited : bool
        Whether the ceiling kept the gain below what the loudness asks for. Match all versions of a
        comparison by the lowest gain then, or they are not equally loud.

    Raises
    ------
    UsageError
        If a value is not a number, the target is not finite or the peak is negative.
    """
    if math.isnan(measured_lufs) or measured_lufs == math.inf or not math.isfinite(target_lufs):
        raise UsageError(f"cannot match {measured_lufs:g} LUFS to {target_lufs:g} LUFS")
    if not (math.isfinite(peak) and peak >= 0.0) or not math.isfinite(ceiling_db):
        raise UsageError(f"cannot match with a peak of {peak:g} and a ceiling of {ceiling_db:g} dB")
    gain = 1.0 if measured_lufs == -math.inf else 10.0 ** ((target_lufs - measured_lufs) / 20.0)
    ceiling = 10.0 ** (ceiling_db / 20.0)
    if gain * peak > ceiling:
        return ceiling / peak, True
    return gain, False
