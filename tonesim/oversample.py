"""Raise the rate before a non-linear step and lower it again behind it.

A non-linear circuit makes harmonics beyond half the sample rate, which would fold back into the
audible band. The cure is to compute it at a higher rate, by a cascade of half-band filters, each of
which doubles the rate on the way up and halves it on the way down (Crochiere and Rabiner,
*Multirate Digital Signal Processing*, 1983; Kaiser window design: Kaiser 1974; both from memory).

What holds at every rate and factor, one way (the tests measure it):

- pass band, up to 0.4535 of the base rate (20 kHz at 44.1 kHz): flat within 0.001 dB;
- from 0.5465 of the base rate upward, images (up) and aliases (down): at least 110 dB down;
- in between, the transition band: the filter falls from 0 dB through -6.02 dB at half the base
  rate to -110 dB. A tone at 0.5 - d of the rate leaves an image at 0.5 + d, and what the circuit
  makes at 0.5 + d folds to 0.5 - d, both weakened only by that slope. Neither reaches below 0.4535.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy import signal

from tonesim.errors import UsageError
from tonesim.kernel import fir
from tonesim.signals import Signal

TARGET_RATE_HZ = 384_000.0
PASS_EDGE = 0.4535  # of the base rate: 20 kHz at 44.1 kHz
ATTENUATION_DB = 112.0  # one stage; leaves room for the sum of all stages to meet 110 dB


def oversampling_factor(sample_rate: float, multiply: int = 1) -> int:
    """Return the power of two whose product with the rate is nearest, in log, to 384 kHz.

    Parameters
    ----------
    sample_rate : float
        In hertz.
    multiply : int
        A further power of two, for tests of accuracy.

    Returns
    -------
    int
        At least 1.

    Raises
    ------
    UsageError
        If the rate is not positive or `multiply` is not a power of two.
    """
    if not (math.isfinite(sample_rate) and sample_rate > 0.0):
        raise UsageError(f"sample_rate is {sample_rate:g} Hz; it must be positive")
    _check_power_of_two("multiply", multiply)
    return multiply << max(0, round(math.log2(TARGET_RATE_HZ / sample_rate)))


def half_band_branch(pass_edge: float, attenuation_db: float) -> Signal:
    """Return the non-zero taps of a half-band low-pass beside its middle tap, scaled to the sum 1.

    Parameters
    ----------
    pass_edge : float
        End of the pass band as a fraction of the higher rate, below 0.25; the stop band begins at
        ``0.5 - pass_edge``.
    attenuation_db : float
        Wanted in the stop band; the ripple of the pass band is as small.

    Returns
    -------
    (2 M,) numpy.ndarray
        Symmetric. The whole filter has 4 M - 1 taps; M grows until the attenuation is met.
    """
    width = 0.5 - 2.0 * pass_edge
    beta = signal.kaiser_beta(attenuation_db + 1.0)  # the formula is up to 1 dB short here
    stop = np.linspace(0.5 - pass_edge, 0.5, 512)
    # Kaiser's estimate of the length is good to a few taps: begin well below it.
    half = max(1, int((attenuation_db - 7.95) / (2.285 * 2.0 * np.pi * width) / 4) - 3)
    while True:
        taps = signal.firwin(4 * half - 1, 0.5, window=("kaiser", beta))
        branch: Signal = taps[::2] + taps[::2][::-1]
        branch /= np.sum(branch)
        offsets = np.arange(half) + 0.5
        # Zero-phase response: 1/2 from the middle tap, cosines from the symmetric rest.
        response = 0.5 + np.cos(4.0 * np.pi * np.outer(stop, offsets)) @ branch[half:]
        if np.max(np.abs(response)) <= 10.0 ** (-attenuation_db / 20.0):
            return branch
        half += 1


@dataclass(frozen=True)
class _Stage:
    """One doubling: its taps and the arrays that keep past and work, all allocated once."""

    branch: Signal
    up_line: Signal
    even_line: Signal
    odd_line: Signal
    scratch: Signal
    low: Signal  # what comes down, at the lower rate of this stage

    @staticmethod
    def build(branch: Signal, capacity: int) -> _Stage:
        past = branch.shape[0] - 1
        return _Stage(
            branch,
            np.zeros(past + capacity),
            np.zeros(past + capacity),
            np.zeros(branch.shape[0] // 2 + capacity),
            np.zeros(capacity),
            np.zeros(capacity),
        )


class Oversampler:
    """One channel up by `factor` and down again, block by block.

    Parameters
    ----------
    factor : int
        A power of two; 1 passes samples through.
    block_size : int
        The longest block that will come, in base samples.

    Attributes
    ----------
    factor, block_size : int
    latency : int
        Delay of up and down together in base samples, exact: the cascade is symmetric about it. The
        stages alone may end between two base samples; a pure delay at the high rate fills that up.

    Notes
    -----
    Any cut into blocks gives equal bits. `up` and `down` allocate no arrays. The constructor
    compiles the filters.
    """

    def __init__(self, factor: int, block_size: int) -> None:
        _check_power_of_two("factor", factor)
        if block_size < 1:
            raise UsageError(f"block_size is {block_size}; it must be at least 1")
        self.factor = factor
        self.block_size = block_size
        self._stages: list[_Stage] = []
        delay = 0
        for s in range(factor.bit_length() - 1):
            # Later stages must also stop what the first one's transition band let through.
            edge = PASS_EDGE / 2 if s == 0 else (1.0 - PASS_EDGE) / 2 ** (s + 1)
            branch = half_band_branch(edge, ATTENUATION_DB)
            self._stages.append(_Stage.build(branch, block_size << s))
            delay += (branch.shape[0] - 1) * (factor >> s)
        self._pad = -delay % factor
        self.latency = (delay + self._pad) // factor
        self._delayed = np.zeros(self._pad + block_size * factor)
        self._top = np.zeros(block_size * factor)
        self.up(np.zeros(1), np.zeros(factor))
        self.down(np.zeros(factor), np.zeros(1))
        self.reset()

    def up(self, x: Signal, out: Signal) -> None:
        """Raise the rate of one block.

        Parameters
        ----------
        x : (n,) numpy.ndarray
            n from 1 to `block_size`.
        out : (n * factor,) numpy.ndarray
            Receives the block at the high rate.

        Raises
        ------
        UsageError
            If a length is wrong.
        """
        n = self._check(x, out, x.shape[0])
        if not self._stages:
            out[:] = x
            return
        past = self._stages[0].branch.shape[0] - 1
        self._stages[0].up_line[past : past + n] = x
        for s, stage in enumerate(self._stages):
            count = n << s
            if s + 1 < len(self._stages):
                following = self._stages[s + 1]
                past = following.branch.shape[0] - 1
                target = following.up_line[past:]
            else:
                target = self._top
            fir.interpolate_by_two(stage.up_line, count, stage.branch, stage.scratch, target)
        out[:] = self._top[: n * self.factor]

    def down(self, y: Signal, out: Signal) -> None:
        """Lower the rate of one block.

        Parameters
        ----------
        y : (n * factor,) numpy.ndarray
            A block at the high rate.
        out : (n,) numpy.ndarray
            Receives the block at the base rate.

        Raises
        ------
        UsageError
            If a length is wrong.
        """
        n = self._check(out, y, out.shape[0])
        if not self._stages:
            out[:] = y
            return
        high = n * self.factor
        self._delayed[self._pad : self._pad + high] = y
        source = self._delayed
        for s in reversed(range(len(self._stages))):
            stage = self._stages[s]
            fir.decimate_by_two(
                source,
                n << s,
                stage.branch,
                stage.even_line,
                stage.odd_line,
                stage.scratch,
                stage.low,
            )
            source = stage.low
        fir.keep_past(self._delayed, self._pad, high)
        out[:] = source[:n]

    def reset(self) -> None:
        """Forget the past: the state is as after construction."""
        self._delayed.fill(0.0)
        for stage in self._stages:
            for line in (stage.up_line, stage.even_line, stage.odd_line):
                line.fill(0.0)

    def _check(self, low: Signal, high: Signal, n: int) -> int:
        if not 1 <= n <= self.block_size:
            raise UsageError(f"a block of {n} samples came; 1 to {self.block_size} were agreed")
        if low.shape != (n,) or high.shape != (n * self.factor,):
            raise UsageError(
                f"at factor {self.factor} a block of shape {(n,)} goes with {(n * self.factor,)}; "
                f"got {low.shape} and {high.shape}"
            )
        return n


def _check_power_of_two(name: str, value: int) -> None:
    if value < 1 or value & (value - 1):
        raise UsageError(f"{name} is {value}; it must be a power of two: 1, 2, 4, 8, ...")
