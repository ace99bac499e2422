"""Is a difference audible at a level? The verdict with all it rests on, and where it shows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tonesim.ear import Listening, decibels
from tonesim.exposure import hearing_notes
from tonesim.masking import ACTIVE_DB, FrameSeries, MaskingMeter
from tonesim.signals import Signal
from tonesim.verdict import (
    NMR_LIMIT_DB,
    RATIO_LIMIT_DB,
    Margins,
    Verdict,
    counted,
    margins_of,
    percentile_95,
)

DISTURBED_DB = 1.5  # BS.1387: a relatively disturbed frame
PERCENTILES = (50.0, 75.0, 90.0, 95.0, 99.0)

# Noise unrelated to the reference keeps half its power in a difference of magnitudes, 3 dB; more
# than twice that is a shift in time or phase.
ALIGNMENT_GAP_DB = 6.0
NO_RESIDUAL_DB = -119.0  # dB SPL

MOMENTS = 5
MOMENT_S = 0.5  # frames nearer than this to a worse one belong to it


@dataclass(frozen=True)
class Moment:
    """A place where the residual stands out."""

    time_s: float
    band_hz: float
    level_db: float  # of the reference, dB SPL
    nmr_db: float
    ratio_db: float
    jnd: float
    margin_db: float  # of the noise-to-mask ratio above its limit


@dataclass(frozen=True)
class LevelQuartile:
    """A quarter of the frames, by level of the reference: tails are in the first."""

    lowest_db: float  # dB SPL
    highest_db: float
    frames: int
    nmr_median_db: float
    nmr_p95_db: float
    ratio_p95_db: float
    jnd_p95: float
    margins: Margins


@dataclass(frozen=True)
class Audibility:
    """A verdict with all it rests on. Frames that count are the active ones, or all if none is.

    `nmr_total_db` is the mean over frames and bands, `difference_total_db` the same for the
    difference of magnitudes. `nmr_p95_db` and the like are over the largest value in each frame;
    `*_percentiles_db` follow `PERCENTILES`. `above_mask_share` is the share of frames with a
    noise-to-mask ratio of at least 0 dB, `disturbed_share` of at least 1.5 dB.
    """

    verdict: Verdict
    margins: Margins
    nmr_total_db: float
    difference_total_db: float
    nmr_p95_db: float
    nmr_max_db: float
    nmr_percentiles_db: tuple[float, ...]
    ratio_p95_db: float
    ratio_max_db: float
    ratio_percentiles_db: tuple[float, ...]
    jnd_p95: float
    jnd_max: float
    quiet_max_db: float
    above_mask_share: float
    disturbed_share: float
    residual_db: float  # relative to the reference, unweighted
    level_db: float  # mean over the frames that count, dB SPL
    level_dba: float
    frames: int
    active_frames: int
    padded: bool
    moments: tuple[Moment, ...]
    quartiles: tuple[LevelQuartile, ...]
    notes: tuple[str, ...]

    @property
    def alignment_gap_db(self) -> float:
        """Noise-to-mask ratio of the complex residual over that of the magnitudes, both total.

        A shift in time or phase opens it; distortion and noise leave it at about 3 dB at most.
        """
        return self.nmr_total_db - self.difference_total_db


def _mean_db(levels_db: Signal) -> float:
    return float(decibels(np.mean(10.0 ** (levels_db / 10.0))))


def worst_moments(
    series: FrameSeries, count: int = MOMENTS, apart_s: float = MOMENT_S
) -> tuple[Moment, ...]:
    """Frames with the largest noise-to-mask ratio, worst first, none near a worse one.

    Parameters
    ----------
    series : FrameSeries
    count : int
        At most so many.
    apart_s : float
        In seconds.
    """
    frames = np.flatnonzero(counted(series))
    found: list[int] = []
    for frame in frames[np.argsort(-series.nmr_max_db[frames], kind="stable")]:
        if len(found) == count:
            break
        if all(abs(series.time_s[frame] - series.time_s[other]) >= apart_s for other in found):
            found.append(int(frame))
    return tuple(
        Moment(
            time_s=float(series.time_s[k]),
            band_hz=float(series.nmr_band_hz[k]),
            level_db=float(series.level_db[k]),
            nmr_db=float(series.nmr_max_db[k]),
            ratio_db=float(series.ratio_max_db[k]),
            jnd=float(series.jnd_max[k]),
            margin_db=float(series.nmr_max_db[k]) - NMR_LIMIT_DB,
        )
        for k in found
    )


def level_quartiles(series: FrameSeries) -> tuple[LevelQuartile, ...]:
    """Frames that count in four groups of rising level; fewer if there are fewer frames."""
    frames = np.flatnonzero(counted(series))
    frames = frames[np.argsort(series.level_db[frames], kind="stable")]
    return tuple(
        LevelQuartile(
            lowest_db=float(series.level_db[part[0]]),
            highest_db=float(series.level_db[part[-1]]),
            frames=part.shape[0],
            nmr_median_db=float(np.median(series.nmr_max_db[part])),
            nmr_p95_db=percentile_95(series.nmr_max_db[part]),
            ratio_p95_db=percentile_95(series.ratio_max_db[part]),
            jnd_p95=percentile_95(series.jnd_max[part]),
            margins=margins_of(series, part),
        )
        for part in np.array_split(frames, 4)
        if part.shape[0] > 0
    )


def assess(series: FrameSeries) -> Audibility:
    """Verdict on the readings of a whole recording.

    Parameters
    ----------
    series : FrameSeries
        From `MaskingMeter.finish` or `masking.frame_series`.
    """
    use = counted(series)
    nmr, ratio, jnd = series.nmr_max_db[use], series.ratio_max_db[use], series.jnd_max[use]
    margins = margins_of(series, use)
    total, difference = (
        float(decibels(np.mean(mean[use]))) for mean in (series.nmr_mean, series.difference_mean)
    )
    level = _mean_db(series.level_db[use])
    residual = _mean_db(series.residual_db[use]) - level
    has_residual = float(np.max(series.residual_db)) > NO_RESIDUAL_DB
    level_dba = _mean_db(series.level_dba[use])
    return Audibility(
        verdict=margins.verdict,
        margins=margins,
        nmr_total_db=total,
        difference_total_db=difference,
        nmr_p95_db=percentile_95(nmr),
        nmr_max_db=float(np.max(nmr)),
        nmr_percentiles_db=tuple(float(v) for v in np.percentile(nmr, PERCENTILES)),
        ratio_p95_db=percentile_95(ratio),
        ratio_max_db=float(np.max(ratio)),
        ratio_percentiles_db=tuple(float(v) for v in np.percentile(ratio, PERCENTILES)),
        jnd_p95=percentile_95(jnd),
        jnd_max=float(np.max(jnd)),
        quiet_max_db=float(np.max(series.quiet_max_db[use])),
        above_mask_share=float(np.mean(nmr >= 0.0)),
        disturbed_share=float(np.mean(nmr >= DISTURBED_DB)),
        residual_db=residual,
        level_db=level,
        level_dba=level_dba,
        frames=series.frames,
        active_frames=int(np.sum(series.active)),
        padded=series.padded,
        moments=worst_moments(series) if has_residual else (),
        quartiles=level_quartiles(series),
        notes=_notes(series, has_residual, total - difference) + hearing_notes(level_dba),
    )


def _notes(series: FrameSeries, has_residual: bool, gap_db: float) -> tuple[str, ...]:
    notes = []
    if not has_residual:
        notes.append("There is no residual: both recordings are the same.")
    if series.padded:
        notes.append("The recording is shorter than a frame of 43 ms; silence fills the rest.")
    if not np.any(series.active):
        notes.append(
            f"No frame reaches {ACTIVE_DB:.0f} dB above the noise of the ear; all are counted."
        )
    if gap_db > ALIGNMENT_GAP_DB:
        notes.append(
            "Most of the residual is a shift in time or phase, not distortion: align the "
            "recordings, or take the verdict as one on a linear change."
        )
    use = counted(series)
    ratio = series.ratio_max_db[use]
    above = int(np.sum(ratio >= RATIO_LIMIT_DB))
    if above and margins_of(series, use).verdict is not Verdict.AUDIBLE:
        notes.append(
            f"Single moments may be heard: {above} of {ratio.shape[0]} frames pass the limit of "
            f"the lenient model, by up to {np.max(ratio) - RATIO_LIMIT_DB:.1f} dB."
        )
    return tuple(notes)


def judge(
    reference: npt.ArrayLike, test: npt.ArrayLike, sample_rate: int, listening: Listening
) -> Audibility:
    """Say whether a test differs audibly from a reference.

    Parameters
    ----------
    reference, test : (n,) array_like
        Aligned and matched; in the unit of ``listening.sine_spl_db``.
    sample_rate : int
        In hertz, 8 to 384 kHz.
    listening : Listening
        Level and room.

    Raises
    ------
    UsageError
        If shapes, values or rate cannot be used.
    """
    meter = MaskingMeter(sample_rate, listening)
    meter.add(reference, test)
    return assess(meter.finish())
