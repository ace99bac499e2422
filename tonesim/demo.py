"""The shipped recordings through three bias chains, equally loud, and what to listen for.

The three presets differ in their bias chain only. What is said about them is measured on the very
results: how far each lies from the one with the full chain, in the loud and in the quiet quarter
of its sounding frames, after the best common gain (least squares).
"""

import itertools
import threading
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from tonesim.check import StageCheck, check_design
from tonesim.design import Design
from tonesim.designfile import demo_audio_folder, load_design
from tonesim.errors import RecordingError
from tonesim.harmonics import analyse_harmonics
from tonesim.processor import Amplifier
from tonesim.render import CEILING_DBTP, Progress, perform
from tonesim.report import (
    Performance,
    RenderOptions,
    RenderReport,
    Source,
    Written,
    check_output,
    file_sha256,
    report_on,
    write_sidecar,
)
from tonesim.signals import Signal, coherent_frequency, sine
from tonesim.units import db_to_ratio
from tonesim.wav import create_recording, open_recording

PRESETS = ("no-chain", "partial-chain", "full-chain")
REFERENCE = "full-chain"
LOUDEST_LUFS = -16.0  # of the results, unless their peaks ask for less
LEVELS_DB = (-3.0, -40.0)  # below the clip level, where distortion is measured
_WORKERS = 2
_RATE = 48_000
_RECORD = 9600  # frames of a distortion measurement
_TONE_HZ = 1000.0
_HIGHEST_HZ = 20_000.0
_WINDOW_S = 0.05
_SOUNDING = 1e-3  # of the loudest window: what lies below is rest (-60 dB)


@dataclass(frozen=True)
class Variant:
    """A preset of the demo; distortion in per cent at -3 dB and -40 dB below its clip level."""

    preset: str
    title: str
    idle_a: float
    clip_v: float
    thd_percent: tuple[float, float]


@dataclass(frozen=True)
class Heard:
    """One result: level of its difference from the full chain, relative to the full chain.

    The quiet quarter lies mostly between `quiet_from_s` and `quiet_to_s`; the differences are None
    for the full chain itself.
    """

    recording: str
    preset: str
    report: RenderReport
    loud_db: float | None
    quiet_db: float | None
    quiet_from_s: float
    quiet_to_s: float


@dataclass(frozen=True)
class DemoReport:
    """What the demo wrote and measured."""

    loudness_lufs: float
    variants: tuple[Variant, ...]
    heard: tuple[Heard, ...]
    total_s: float

    def as_dict(self) -> dict[str, Any]:
        """Plain values for JSON; the reports are beside the results."""
        return {
            "loudness_lufs": self.loudness_lufs,
            "total_s": self.total_s,
            "variants": [asdict(variant) for variant in self.variants],
            "results": [
                {
                    "output": str(each.report.output.resolve()),
                    "recording": each.recording,
                    "preset": each.preset,
                    "difference_loud_quarter_db": each.loud_db,
                    "difference_quiet_quarter_db": each.quiet_db,
                    "quiet_quarter_from_s": each.quiet_from_s,
                    "quiet_quarter_to_s": each.quiet_to_s,
                }
                for each in self.heard
            ],
        }


@dataclass(frozen=True)
class _Job:
    recording: Path
    preset: str
    out: Path


@dataclass(frozen=True)
class _Take:
    source: Source
    made: Performance
    result: Signal


def run_demo(folder: Path, progress: Progress | None = None) -> DemoReport:
    """Render every shipped recording through the three presets into a folder.

    Parameters
    ----------
    folder : Path
        Must exist. Results of an earlier demo in it are replaced.
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.

    Raises
    ------
    RecordingError
        If the shipped recordings are missing.
    OutputError
        If a result cannot be written.
    """
    started = time.perf_counter()
    recordings = sorted(demo_audio_folder().glob("*.wav"))
    if not recordings:
        raise RecordingError(f"no recordings are found in {demo_audio_folder()}")
    designs = {preset: load_design(preset) for preset in PRESETS}
    jobs = [
        _Job(recording, preset, folder / f"{recording.stem}.{preset}.wav")
        for recording, preset in itertools.product(recordings, PRESETS)
    ]
    for job in jobs:
        check_output(job.out, recordings, designs[job.preset])
    variants = tuple(_variant(preset, designs[preset]) for preset in PRESETS)
    takes = _take_all(jobs, designs, progress or (lambda share: None))
    target = min(
        LOUDEST_LUFS,
        *(take.made.loudness_lufs + CEILING_DBTP - take.made.true_peak_db for take in takes),
    )
    heard = []
    for job, take in zip(jobs, takes, strict=True):
        reference = takes[jobs.index(_Job(job.recording, REFERENCE, _sibling(job)))]
        gain = db_to_ratio(target - take.made.loudness_lufs)
        report = _write(job, take, designs[job.preset], gain, target)
        heard.append(_listen(job, take, reference, report))
    return DemoReport(target, variants, tuple(heard), time.perf_counter() - started)


def _sibling(job: _Job) -> Path:
    return job.out.with_name(f"{job.recording.stem}.{REFERENCE}.wav")


def _take_all(jobs: list[_Job], designs: dict[str, Design], progress: Progress) -> list[_Take]:
    """Run all jobs on two threads; any exception, an interrupt too, stops them all."""
    stop = threading.Event()
    shares = [0.0] * len(jobs)

    def run(index: int) -> _Take:
        def advance(share: float) -> None:
            if stop.is_set():
                raise InterruptedError
            shares[index] = share

        return _take(jobs[index], designs[jobs[index].preset], advance)

    with ThreadPoolExecutor(_WORKERS) as pool:
        futures = [pool.submit(run, index) for index in range(len(jobs))]
        try:
            while not all(future.done() for future in futures):
                time.sleep(0.1)
                for future in futures:
                    if future.done():
                        future.result()  # a failure ends the rest
                progress(sum(shares) / len(shares))
            return [future.result() for future in futures]
        finally:
            stop.set()


def _take(job: _Job, design: Design, advance: Callable[[float], None]) -> _Take:
    parts: list[Signal] = []
    with open_recording(job.recording) as recording:
        made = perform(recording, design, RenderOptions(), parts.append, advance)
        return _Take(
            Source(recording.info, file_sha256(job.recording)), made, np.concatenate(parts)
        )


def _write(job: _Job, take: _Take, design: Design, gain: float, target: float) -> RenderReport:
    info = take.source.info
    options = RenderOptions(match_lufs=target)
    started = time.perf_counter()
    with create_recording(job.out, info.sample_rate, take.result.shape[1]) as writer:
        writer.write(gain * take.result)
        writer.close()
        written = Written(take.made, gain, clipped_samples=writer.clipped_samples)
        spent = take.made.prepare_s + take.made.run_s + time.perf_counter() - started
        report = report_on(job.out, take.source, design, options, written, spent)
        write_sidecar(report)
    return report


def _listen(job: _Job, take: _Take, reference: _Take, report: RenderReport) -> Heard:
    rate = take.source.info.sample_rate
    size = max(1, round(_WINDOW_S * rate))
    x, y = reference.result.mean(axis=1), take.result.mean(axis=1)
    count = max(1, x.shape[0] // size)
    x, y = x[: count * size], y[: count * size]
    aligned = y * (float(x @ y) / max(float(y @ y), 1e-300))
    power = np.mean(np.square(x.reshape(count, -1)), axis=1)
    error = np.mean(np.square((aligned - x).reshape(count, -1)), axis=1)
    sounding = np.flatnonzero(power > np.max(power) * _SOUNDING**2)
    order = sounding[np.argsort(power[sounding], kind="stable")]
    quarter = max(1, order.shape[0] // 4)
    quiet, loud = order[:quarter], order[-quarter:]
    first, last = _longest_run(np.sort(quiet))
    own = job.preset == REFERENCE
    return Heard(
        recording=job.recording.name,
        preset=job.preset,
        report=report,
        loud_db=None if own else _ratio_db(error[loud], power[loud]),
        quiet_db=None if own else _ratio_db(error[quiet], power[quiet]),
        quiet_from_s=first * size / rate,
        quiet_to_s=(last + 1) * size / rate,
    )


def _ratio_db(error: Signal, power: Signal) -> float:
    return float(10.0 * np.log10(np.sum(error) / np.sum(power) + 1e-30))


def _longest_run(frames: Signal) -> tuple[int, int]:
    """First and last of the longest run of neighbours; a gap of one window is let pass."""
    runs = np.split(frames, np.flatnonzero(np.diff(frames) > 2) + 1)
    longest = max(runs, key=len)
    return int(longest[0]), int(longest[-1])


def _variant(preset: str, design: Design) -> Variant:
    found: StageCheck = check_design(design)
    clip = min(abs(found.upper.clip.level_v), abs(found.lower.clip.level_v))
    stage = Amplifier(design)
    stage.prepare(_RATE, _RECORD)
    gain = found.gain * db_to_ratio(design.input.gain_db)
    high, low = (
        100.0 * total_distortion(stage, clip / gain * db_to_ratio(level)) for level in LEVELS_DB
    )
    return Variant(preset, design.title, found.upper.idle_a, clip, (high, low))


def total_distortion(stage: Amplifier, amplitude_v: float) -> float:
    """Total harmonic distortion of a prepared stage near 1 kHz, harmonics up to 20 kHz.

    Ratio of the root sum square of the harmonics to the fundamental, from a coherent record
    (IEC 60268-3, total harmonic distortion; from memory), so ripple between them does not count.

    Parameters
    ----------
    stage : Amplifier
        Prepared at 48 kHz; it is reset.
    amplitude_v : float
        Peak volts at the jack.
    """
    frequency = coherent_frequency(_TONE_HZ, _RATE, _RECORD)
    stage.reset()
    y = stage.process(sine(frequency, amplitude_v, _RATE, 2 * _RECORD))[_RECORD:]
    cycles = round(frequency * _RECORD / _RATE)
    return analyse_harmonics(y, cycles, _RATE, _HIGHEST_HZ).thd_f
