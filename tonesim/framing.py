"""A stream at any rate to overlapping frames at 48 kHz, the same however it arrives in blocks.

What is filtered or transformed in one go is always the same stretch of the signal, counted from
its beginning, so that any cut into blocks gives equal bits.
"""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
from scipy import signal

from tonesim.ear import FRAME, HOP, RATE_HZ
from tonesim.errors import UsageError
from tonesim.signals import Signal

LOWEST_RATE_HZ, HIGHEST_RATE_HZ = 8_000, 384_000
FRAMES_AT_ONCE = 32
FILTER_LOBES = 32  # to either side, in samples of the lower rate
FILTER_BETA = 10.06  # Kaiser window, 100 dB
PIECE_FRAMES = 16_384


class Resampler:
    """A stream of several channels brought to 48 kHz by an exact ratio of whole numbers.

    Parameters
    ----------
    sample_rate : int
        Rate that comes in, in hertz, 8 to 384 kHz.
    channels : int

    Notes
    -----
    `scipy.signal.resample_poly` over stretches with their surroundings, so that the result is that
    of the whole signal. The filter is flat within 0.001 dB up to 0.9 of the lower half-rate and
    lets 100 dB less through from 1.1 of it: whatever folds or mirrors from below 18 kHz at 44.1 kHz
    and above. No delay: time 0 stays time 0, and before it and after the end there is silence.

    Raises
    ------
    UsageError
        If the rate is outside its range or no whole number.
    """

    def __init__(self, sample_rate: int, channels: int) -> None:
        in_range = LOWEST_RATE_HZ <= sample_rate <= HIGHEST_RATE_HZ
        if not in_range or sample_rate % 1 != 0:
            raise UsageError(
                f"sample_rate is {sample_rate:g} Hz; expected a whole number from "
                f"{LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ}"
            )
        divisor = math.gcd(int(sample_rate), RATE_HZ)
        self.up, self.down = RATE_HZ // divisor, int(sample_rate) // divisor
        larger = max(self.up, self.down)
        reach = FILTER_LOBES * larger
        self._taps = (
            signal.firwin(2 * reach + 1, 1.0 / larger, window=("kaiser", FILTER_BETA))
            if larger > 1
            else None
        )
        # Surroundings and stretches are whole numbers of `down`, so that outputs fall on the grid.
        self._around = math.ceil(reach / self.up / self.down) * self.down
        self._piece = math.ceil(PIECE_FRAMES / self.down) * self.down
        self._held = np.zeros((self._around if self._taps is not None else 0, channels))
        self._taken = 0

    def add(self, block: Signal) -> Iterator[Signal]:
        """Take ``(n, channels)`` frames; give stretches of the result as they get complete."""
        if self._taps is None:
            yield block
            return
        self._taken += block.shape[0]
        self._held = np.concatenate([self._held, block])
        whole = self._piece + 2 * self._around
        start = 0
        while self._held.shape[0] - start >= whole:
            yield self._resampled(self._held[start : start + whole])
            start += self._piece
        self._held = self._held[start:].copy()

    def finish(self) -> Signal:
        """Give the rest; in all ``ceil(n up / down)`` frames for n taken."""
        if self._taps is None:
            return self._held
        missing = self._held.shape[0] - self._around
        total = math.ceil(self._taken * self.up / self.down)
        done = (self._taken - missing) * self.up // self.down
        room = math.ceil(missing / self.down) * self.down + self._around - missing
        padded = np.pad(self._held, ((0, room), (0, 0)))
        return self._resampled(padded)[: total - done]

    def _resampled(self, around: Signal) -> Signal:
        """Resample a stretch and give away what its surroundings made."""
        y = signal.resample_poly(around, self.up, self.down, axis=0, window=self._taps)
        edge = self._around * self.up // self.down
        inside: Signal = y[edge : y.shape[0] - edge]
        return inside


class Framer:
    """Reference and test, as they arrive in blocks, to frames of reference and residual.

    Parameters
    ----------
    sample_rate : int
        In hertz, 8 to 384 kHz.

    Attributes
    ----------
    padded : bool
        Whether the signal was shorter than a frame, which silence had to fill. Set by `finish`.
    finished : bool

    Notes
    -----
    Frame n covers samples 1024 n to 1024 n + 2047 at 48 kHz. What is left over at the end, less
    than 1024 samples, makes no frame.
    """

    def __init__(self, sample_rate: int) -> None:
        self._resampler = Resampler(sample_rate, 2)
        self._sample_rate = sample_rate
        self._held = np.zeros((0, 2))
        self._heard = 0
        self._framed = False
        self.finished = False
        self.padded = False

    def add(self, reference: npt.ArrayLike, test: npt.ArrayLike) -> Iterator[tuple[Signal, Signal]]:
        """Take blocks of equal length; give frames of the reference and of test minus reference.

        Both are ``(n, 2048)``, n at most 32.

        Raises
        ------
        UsageError
            If the blocks are not one channel of equal length, hold a value that is not finite, or
            come after `finish`.
        """
        pair = self._checked(reference, test)
        for start in range(0, max(pair.shape[0], 1), PIECE_FRAMES):
            for piece in self._resampler.add(pair[start : start + PIECE_FRAMES]):
                yield from self._whole_chunks(piece)

    def finish(self) -> Iterator[tuple[Signal, Signal]]:
        """Give the frames that are left; nothing may be added any more.

        Raises
        ------
        UsageError
            If nothing was heard at all.
        """
        if self._heard == 0:
            raise UsageError("reference and test hold no samples; expected at least one")
        if not self.finished:
            self.finished = True
            yield from self._whole_chunks(self._resampler.finish())
            missing = FRAME - self._held.shape[0]
            if missing > 0 and not self._framed:
                self.padded = True
                self._held = np.pad(self._held, ((0, missing), (0, 0)))
            if self._held.shape[0] >= FRAME:
                yield self._cut(1 + (self._held.shape[0] - FRAME) // HOP)

    def _whole_chunks(self, piece: Signal) -> Iterator[tuple[Signal, Signal]]:
        self._held = np.concatenate([self._held, piece])
        while self._held.shape[0] >= FRAME + (FRAMES_AT_ONCE - 1) * HOP:
            yield self._cut(FRAMES_AT_ONCE)

    def _cut(self, frames: int) -> tuple[Signal, Signal]:
        self._framed = True
        windows = np.lib.stride_tricks.sliding_window_view(self._held, FRAME, axis=0)
        cut = windows[: (frames - 1) * HOP + 1 : HOP]  # (frames, 2, 2048)
        self._held = self._held[frames * HOP :].copy()
        return np.ascontiguousarray(cut[:, 0]), cut[:, 1] - cut[:, 0]

    def _checked(self, reference: npt.ArrayLike, test: npt.ArrayLike) -> Signal:
        if self.finished:
            raise UsageError("a block came after the end of the recording; start a new meter")
        columns = []
        for name, block in (("reference", reference), ("test", test)):
            x = np.asarray(block, dtype=np.float64)
            if x.ndim == 2 and x.shape[1] == 1:
                x = x[:, 0]
            if x.ndim != 1:
                raise UsageError(
                    f"{name} has the shape {x.shape}; expected one channel, shape (frames,)"
                )
            if not np.all(np.isfinite(x)):
                frame = int(np.flatnonzero(~np.isfinite(x))[0])
                raise UsageError(
                    f"{name} is {x[frame]} at frame {self._heard + frame}; expected finite samples"
                )
            columns.append(x)
        if columns[0].shape != columns[1].shape:
            raise UsageError(
                f"reference has {columns[0].shape[0]} frames and test {columns[1].shape[0]}; "
                "expected equal lengths"
            )
        self._heard += columns[0].shape[0]
        return np.stack(columns, axis=1)
