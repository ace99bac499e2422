"""Distortion of a stage against level and frequency, and with two tones.

Definitions of IEC 60268-3 (from memory): total harmonic distortion referred to the fundamental
and to the whole, modulation distortion with 60 Hz and 7 kHz 4 to 1, difference-frequency
distortion with 19 and 20 kHz.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np

from tonesim.bench import TONE_HZ, Bench, distortion_of
from tonesim.harmonics import (
    Harmonics,
    Intermodulation,
    difference_distortion,
    modulation_distortion,
)
from tonesim.pool import Progress, run_all
from tonesim.probe import Probe, Solved
from tonesim.units import db_to_ratio

LEVELS_DB = (-1.0, -20.0, -40.0)  # relative to the clip point
_LOWEST_V = 0.010  # of the output, rms
_PAST_CLIP_DB = 6.0
_LEVELS = 20
_FREQUENCIES = (20, 30, 50, 100, 200, 500, 1e3, 2e3, 5e3, 7e3, 10e3, 15e3, 20e3, 30e3, 40e3)
_LONG_S = 0.5  # record below this frequency, so that it holds enough cycles
_LOW_HZ = 150.0
_MIDDLE_S = 0.1  # the same, up to where the shortest record holds enough
_MIDDLE_HZ = 900.0
_COARSE_HZ = 900.0  # below it the internal rate itself does
_MODULATION_HZ = (60.0, 7000.0)
_DIFFERENCE_HZ = (19_000.0, 20_000.0)


@dataclass(frozen=True)
class DistortionPoint:
    """Distortion of one sine.

    `level_db` is the generator's, relative to the clip point; `output_v` the rms of the
    fundamental.
    """

    level_db: float
    frequency_hz: float
    input_peak_v: float
    output_v: float
    output_w: float
    harmonics: Harmonics
    change_v: float
    steady: bool

    @property
    def floor_db(self) -> float:
        """What is neither harmonic nor hum, relative to the fundamental, decibels."""
        return _db(self.harmonics.residue_v / max(self.output_v, 1e-300))


@dataclass(frozen=True)
class IntermodulationPoint:
    """Distortion of two tones whose common crest is `level_db` relative to the clip point."""

    level_db: float
    modulation: Intermodulation
    difference: Intermodulation
    steady: bool


@dataclass(frozen=True)
class DistortionSheet:
    """All of it; levels relative to the clip point.

    `floor_db` is what the computation leaves beside the harmonics of a full sine on rails that
    stand still, relative to the fundamental: its own error, which bounds every figure.
    """

    tone_hz: float
    floor_db: float
    by_level: tuple[DistortionPoint, ...]
    by_frequency: tuple[tuple[DistortionPoint, ...], ...]
    intermodulation: tuple[IntermodulationPoint, ...]
    solved: Solved

    @property
    def lowest(self) -> DistortionPoint:
        """Point of least distortion of the tone."""
        return min(self.by_level, key=lambda point: point.harmonics.thd_f)


def levels_db(bench: Bench) -> tuple[float, ...]:
    """Levels of the sweep: from 10 mV to 6 dB past clipping, denser near it."""
    full = bench.clip_point.input_peak_v * bench.gain
    lowest = min(_db(_LOWEST_V * np.sqrt(2.0) / full), -20.0)
    coarse = np.linspace(lowest, -4.0, _LEVELS)
    fine = np.array([-3.0, -2.0, -1.0, -0.5, 0.0, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0, _PAST_CLIP_DB])
    return tuple(float(x) for x in np.concatenate([coarse, fine]))


def measure_point(
    bench: Bench, probe: Probe, frequency_hz: float, level_db: float
) -> DistortionPoint:
    """Distortion of one sine on a probe at rest."""
    peak = bench.clip_point.input_peak_v * db_to_ratio(level_db)
    seconds = _LONG_S if frequency_hz < _LOW_HZ else bench.record_s
    if frequency_hz < _MIDDLE_HZ:
        seconds = max(seconds, _MIDDLE_S)
    tone = probe.tone(((frequency_hz, peak),), seconds)
    found = distortion_of(tone, probe.rate_hz, bench.stage.circuit.mains_hz)
    output = found.fundamental_v / np.sqrt(2.0)
    return DistortionPoint(
        level_db=level_db,
        frequency_hz=found.frequency_hz,
        input_peak_v=peak,
        output_v=float(output),
        output_w=float(output**2 / bench.ohm),
        harmonics=found,
        change_v=tone.change_v,
        steady=tone.steady,
    )


def measure_intermodulation(bench: Bench, probe: Probe, level_db: float) -> IntermodulationPoint:
    """Both two-tone measures at one level on a probe at rest."""
    peak = bench.clip_point.input_peak_v * db_to_ratio(level_db)
    low, high = _MODULATION_HZ
    seconds = max(bench.record_s, 0.1)  # whole cycles of all four tones
    one = probe.tone(((low, 0.8 * peak), (high, 0.2 * peak)), seconds, prime=False)
    probe.reset()
    first, second = _DIFFERENCE_HZ
    two = probe.tone(((first, 0.5 * peak), (second, 0.5 * peak)), seconds, prime=False)
    return IntermodulationPoint(
        level_db=level_db,
        modulation=modulation_distortion(one.output_v, *one.cycles),
        difference=difference_distortion(two.output_v, *two.cycles),
        steady=one.steady and two.steady,
    )


def measure_distortion(bench: Bench, progress: Progress | None = None) -> DistortionSheet:
    """Measure distortion against level and frequency, and with two tones.

    Parameters
    ----------
    bench : Bench
    progress : callable, optional
    """
    probes: list[Probe] = []

    def fresh(frequency_hz: float) -> Probe:
        # Low tones have their tenth harmonic and more far below half the internal rate.
        probe = bench.probe if frequency_hz < _COARSE_HZ else bench.fine_probe
        probes.append(probe.twin())
        return probes[-1]

    levels = levels_db(bench)
    sines = [(TONE_HZ, level) for level in levels]
    sines += [(float(f), level) for level in LEVELS_DB for f in _FREQUENCIES]
    jobs: list[Callable[[], DistortionPoint | IntermodulationPoint]] = [
        partial(measure_point, bench, fresh(f), f, level) for f, level in sines
    ]
    jobs += [
        partial(measure_intermodulation, bench, fresh(_MODULATION_HZ[1]), level)
        for level in LEVELS_DB
    ]
    found = run_all(jobs, progress)
    points = [p for p in found if isinstance(p, DistortionPoint)]
    pairs = [p for p in found if isinstance(p, IntermodulationPoint)]
    rest = points[len(levels) :]
    size = len(_FREQUENCIES)
    still = bench.still_probe.twin()
    probes.append(still)
    floor = measure_point(bench, still, TONE_HZ, LEVELS_DB[0])
    return DistortionSheet(
        tone_hz=points[0].frequency_hz,
        floor_db=floor.floor_db,
        by_level=tuple(points[: len(levels)]),
        by_frequency=tuple(tuple(rest[i : i + size]) for i in range(0, len(rest), size)),
        intermodulation=tuple(pairs),
        solved=sum((each.solved for each in probes), Solved()),
    )


def _db(ratio: float) -> float:
    return float(20.0 * np.log10(max(ratio, 1e-300)))
