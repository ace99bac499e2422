"""A fair reference: what a linear stage could have made of the same signal.

Before a difference between two signals is called distortion, all that a linear time-invariant
stage could explain is taken out of it: gain, and by choice a short filter with slow poles (a few
taps, and copies of the signal through one-pole low-passes that stand for coupling capacitors and a
loudspeaker's resonance). Coefficients are least squares over the whole signal, by a QR
factorisation that grows block by block: normal equations are hopelessly ill-conditioned here,
because a guitar has little treble (Golub and Van Loan, Matrix Computations, updating QR).
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from tonesim.errors import UsageError
from tonesim.signals import Signal

SLOW_POLES_HZ = (2.0, 5.0, 10.0, 20.0, 40.0, 80.0)
PRE_TAPS = 4  # of the filter, ahead in time
_CUTOFF = 1e-13  # singular values below this share of the largest carry nothing
_SILENT = 1e-30


@dataclass(frozen=True)
class LinearMatch:
    """What a linear stage explains, with the evidence of the fit.

    `gain` is the best gain alone; `gain_residual_db` what it leaves of the test signal and
    `residual_db` what the whole fit leaves, both relative to the test signal's power. `condition`
    is that of the columns, `rank` how many carry anything. A `residual_db` far below
    `gain_residual_db` means real linear filtering, or a single note whose harmonics the filter
    has redrawn.
    """

    gain: float
    coefficients: tuple[float, ...]
    gain_residual_db: float
    residual_db: float
    condition: float
    rank: int

    @property
    def removed_db(self) -> float:
        """How much more than a gain the linear fit has taken out, decibels."""
        return self.gain_residual_db - self.residual_db


class LinearFit:
    """Least-squares fit of a test signal by a linear stage on the reference.

    Parameters
    ----------
    sample_rate : float
    taps : int
        Taps of the filter; 1 fits a gain alone, without slow poles.
    """

    def __init__(self, sample_rate: float, taps: int = 1) -> None:
        if taps < 1:
            raise UsageError(f"taps is {taps}, expected 1 or more")
        self.taps = taps
        self._pre = PRE_TAPS if taps > 2 * PRE_TAPS else 0
        poles = SLOW_POLES_HZ if taps > 1 else ()
        self._decays = [math.exp(-2.0 * math.pi * pole / sample_rate) for pole in poles]
        self._r: Signal = np.zeros((0, taps + len(poles) + 1))
        self._fit_columns = _Columns(taps, self._pre, self._decays)

    def update(self, reference: Signal, test: Signal) -> None:
        """Take in a block of both, (frames,) each."""
        columns, kept = self._fit_columns.of(reference, test)
        if columns.shape[0]:
            stacked = np.vstack([self._r, np.column_stack([columns, kept])])
            self._r = np.asarray(np.linalg.qr(stacked, mode="r"))

    def finish(self) -> LinearMatch:
        """Solve what has been taken in.

        Returns
        -------
        LinearMatch
            With a gain of 1 where either signal was silent.
        """
        r = self._r
        n = r.shape[1] - 1
        if r.shape[0] < n + 1:
            r = np.vstack([r, np.zeros((n + 1 - r.shape[0], n + 1))])
        total = float(r[:, n] @ r[:, n])
        main = r[:, self._pre]
        power = float(main @ main)
        if total <= _SILENT or power <= _SILENT:
            alone = tuple(1.0 if k == self._pre else 0.0 for k in range(n))
            return LinearMatch(1.0, alone, -math.inf, -math.inf, 1.0, 0)
        gain = float(main @ r[:, n]) / power
        left = r[:, n] - gain * main
        if n == 1:
            level = _share_db(float(left @ left), total)
            return LinearMatch(gain, (gain,), level, level, 1.0, 1)
        found, _, rank, singular = np.linalg.lstsq(r[:, :n], r[:, n], rcond=_CUTOFF)
        rest = r[:, n] - r[:, :n] @ found
        return LinearMatch(
            gain=gain,
            coefficients=tuple(float(c) for c in found),
            gain_residual_db=_share_db(float(left @ left), total),
            residual_db=_share_db(float(rest @ rest), total),
            condition=float(singular[0] / max(singular[rank - 1], 1e-300)),
            rank=int(rank),
        )


class LinearStage:
    """The matched reference, block by block; delayed by the filter's taps ahead in time.

    Parameters
    ----------
    fit : LinearFit
        Gives the form of the filter.
    match : LinearMatch
    """

    def __init__(self, fit: LinearFit, match: LinearMatch) -> None:
        self._columns = _Columns(fit.taps, fit._pre, fit._decays)
        self._coefficients = np.array(match.coefficients)

    def process(self, reference: Signal, test: Signal) -> tuple[Signal, Signal]:
        """Matched reference and the test signal, equally delayed and equally long."""
        columns, kept = self._columns.of(reference, test)
        return columns @ self._coefficients, kept

    def finish(self) -> tuple[Signal, Signal]:
        """Give what is still owed, as if silence followed."""
        silence = np.zeros(self._columns.ahead)
        return self.process(silence, silence)


class _Columns:
    """Columns of the fit for successive blocks: shifted copies and slow low-passes."""

    def __init__(self, taps: int, pre: int, decays: list[float]) -> None:
        self._taps, self._pre, self._decays = taps, pre, decays
        self._past: Signal = np.zeros(taps - 1)
        self._owed: Signal = np.zeros(0)
        self._slow_owed: Signal = np.zeros((0, len(decays)))
        self._states = [np.zeros(1) for _ in decays]
        self._lead = pre

    @property
    def ahead(self) -> int:
        """Samples a row waits for."""
        return self._pre

    def of(self, reference: Signal, test: Signal) -> tuple[npt.NDArray[np.float64], Signal]:
        """Columns (frames, taps + poles) and the test samples that belong to them."""
        if reference.shape != test.shape or reference.ndim != 1:
            raise UsageError(
                f"reference {reference.shape} and test {test.shape}, expected equal (frames,)"
            )
        if reference.size == 0:
            return np.zeros((0, self._taps + len(self._decays))), np.zeros(0)
        x = np.concatenate([self._past, reference])
        self._past = x[x.size - (self._taps - 1) :] if self._taps > 1 else x[:0]
        n = reference.size
        # Column k holds the reference k - pre samples late; a row waits for its last sample.
        tapped = np.lib.stride_tricks.sliding_window_view(x, self._taps)[:n, ::-1]
        slow = np.empty((n, len(self._decays)))
        for k, decay in enumerate(self._decays):
            slow[:, k], self._states[k] = lfilter(
                [1.0 - decay], [1.0, -decay], reference, zi=self._states[k]
            )
        y = np.concatenate([self._owed, test])
        s = np.vstack([self._slow_owed, slow])
        skip = min(self._lead, n)
        self._lead -= skip
        tapped = tapped[skip:]
        rows = tapped.shape[0]
        self._owed, self._slow_owed = y[rows:], s[rows:]
        return np.column_stack([tapped, s[:rows]]), y[:rows]


def _share_db(part: float, whole: float) -> float:
    return 10.0 * math.log10(max(part, 1e-300) / whole)
