"""Inaudible, borderline or audible: the limits, and how far readings lie from them.

The strict model may say inaudible, only the lenient one or a gross change of level audible; what
is between them is borderline, for listening to. The limits come from listening thresholds: at all
of those looked at, the noise-to-mask ratio lies between -12 and +4 dB and the excitation ratio at
or below 0 dB. A level step of 0.25 dB, which is not heard, reads -16.6 dB and 0.35 just noticeable
differences; one of 0.5 dB, heard at best, -10.4 dB and 0.71.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
import numpy.typing as npt

from tonesim.masking import FrameSeries
from tonesim.signals import Signal

NMR_LIMIT_DB = -10.0  # no frame above: inaudible, together with the next
JND_LIMIT = 0.7
QUIET_LIMIT_DB = -6.0  # or this far below what noise of ear and room alone mask
RATIO_LIMIT_DB = 3.0  # 5 % of the frames above: audible
JND_GROSS = 4.0  # or 5 % of the frames above this
SHARE_PERCENT = 95.0


class Verdict(StrEnum):
    """What can be said of a difference before anyone listens."""

    INAUDIBLE = "inaudible"
    BORDERLINE = "borderline"
    AUDIBLE = "audible"


@dataclass(frozen=True)
class Margins:
    """How far readings lie above the two limits; in decibels the residual would have to fall.

    The distance in just noticeable differences is taken as 20 lg of its ratio to the limit, as
    for a residual in phase with the reference. Below 0 in the first: inaudible. At 0 or above in
    the second: audible.
    """

    above_inaudible_db: float
    above_audible_db: float

    @property
    def verdict(self) -> Verdict:
        """Reading of the two margins; where they contradict each other, borderline."""
        inaudible, audible = self.above_inaudible_db < 0.0, self.above_audible_db >= 0.0
        if inaudible == audible:
            return Verdict.BORDERLINE
        return Verdict.INAUDIBLE if inaudible else Verdict.AUDIBLE

    @property
    def margin_db(self) -> float:
        """Below 0: inaudible by that much. 0 or above: audible by that much, or borderline at 0."""
        figures = {
            Verdict.INAUDIBLE: self.above_inaudible_db,
            Verdict.BORDERLINE: 0.0,
            Verdict.AUDIBLE: self.above_audible_db,
        }
        return figures[self.verdict]


def counted(series: FrameSeries) -> npt.NDArray[np.bool_]:
    """Frames a verdict counts: the active ones, or all if none is."""
    return series.active if np.any(series.active) else np.ones(series.frames, dtype=np.bool_)


def percentile_95(values: Signal) -> float:
    """Value that 5 % of the frames exceed."""
    return float(np.percentile(values, SHARE_PERCENT))


def _in_decibels(jnd: float, limit: float) -> float:
    return 20.0 * math.log10(max(jnd, 1e-9) / limit)


def margins_of(series: FrameSeries, frames: npt.NDArray[np.generic]) -> Margins:
    """Margins of some frames of a series.

    Parameters
    ----------
    series : FrameSeries
    frames : numpy.ndarray
        Flags or indices; at least one frame.
    """
    strict = max(
        float(np.max(series.nmr_max_db[frames])) - NMR_LIMIT_DB,
        _in_decibels(float(np.max(series.jnd_max[frames])), JND_LIMIT),
    )
    quiet = float(np.max(series.quiet_max_db[frames])) - QUIET_LIMIT_DB
    lenient = max(
        percentile_95(series.ratio_max_db[frames]) - RATIO_LIMIT_DB,
        _in_decibels(percentile_95(series.jnd_max[frames]), JND_GROSS),
    )
    return Margins(above_inaudible_db=min(strict, quiet), above_audible_db=lenient)
