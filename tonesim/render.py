"""From a recording and a design to a file: volts in, volts out, aligned to the sample.

A render is streamed: one block of every channel is in memory at a time, whatever the length. Each
channel has its own stage and cabinet. What the oversampling and the cabinet's filter delay is fed
as silence behind the recording and dropped before it, so that frame n of the result belongs to
frame n of the recording and both have the same length.

The result is the voltage across the load (or what the cabinet makes of it), divided by the
voltage that full scale stands for. By default that voltage is the highest rail without load plus
2 V, times the sum of the magnitudes of the cabinet's impulse response: more than the stage can
ever bring, and equal for all designs on like rails, so that results can be compared by ear.
"""

import hashlib
import itertools
import json
import math
import os
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np

from tonesim import __version__
from tonesim.cabinet import Cabinet, resample_response, shape_response
from tonesim.design import Design, design_key
from tonesim.errors import OutputError, RecordingError, UsageError
from tonesim.kernel.amplifier import advance
from tonesim.level import LevelMeter, LoudnessMeter, gain_to_match
from tonesim.processor import Amplifier, Evidence
from tonesim.signals import Signal
from tonesim.wav import (
    Recording,
    RecordingInfo,
    Writer,
    create_recording,
    open_recording,
    read_impulse_response,
    refuse_same_file,
    write_text_aside,
)

HEADROOM_V = 2.0  # above the highest rail: what catch diodes and filters may add
CEILING_DBTP = -1.0  # highest true peak of a loudness-matched result
SIDECAR_KIND = "tonesim render"  # the word by which a sidecar of ours is known
_MOST_CHANNELS = 2
_MATCH_SHARE = 0.03  # of the time a matched render takes, for its second pass
_SCRATCH_BYTES = 8

Sink = Callable[[Signal], None]
Progress = Callable[[float], None]


@dataclass(frozen=True)
class RenderOptions:
    """How a recording is rendered; what is played through is the design's affair.

    Attributes
    ----------
    channel : int, optional
        Only this channel of the recording, counted from 0.
    match_lufs : float, optional
        Loudness of the result; its true peak stays at or below -1 dBTP.
    output_full_scale_v : float, optional
        Volts that full scale of the result stands for.
    subtype : str, optional
        Sample encoding of the result, 24-bit by default.
    repair : bool
        Replace samples that are not finite by zero.
    multiply : int
        Factor on the internal rate, a power of two.
    replace : bool
        Write over files that tonesim has no record of writing.
    block_frames : int
        Frames in memory at once; the result does not depend on it.
    """

    channel: int | None = None
    match_lufs: float | None = None
    output_full_scale_v: float | None = None
    subtype: str | None = None
    repair: bool = False
    multiply: int = 1
    replace: bool = False
    block_frames: int = 8192

    def __post_init__(self) -> None:
        match, full_scale = self.match_lufs, self.output_full_scale_v
        if match is not None and not -70.0 < match <= 0.0:
            raise UsageError(f"match is {match:g} LUFS, expected more than -70 and 0 or less")
        if full_scale is not None and not 0.0 < full_scale <= 1e6:
            raise UsageError(
                f"output full scale is {full_scale:g} V, expected more than 0 and 1e6 or less"
            )
        if match is not None and full_scale is not None:
            raise UsageError("match and output full scale both set the level, expected one of them")
        if self.block_frames < 1:
            raise UsageError(f"block_frames is {self.block_frames}, expected 1 or more")


@dataclass(frozen=True)
class Performance:
    """What a stage did with a recording, and how loud the result is.

    Levels are relative to `full_scale_v`; loudness and true peak are minus infinity for silence.
    """

    evidence: tuple[Evidence, ...]
    full_scale_v: float
    oversampling: int
    stage_latency_frames: int
    cabinet_latency_frames: int
    loudness_lufs: float
    peak_db: float
    true_peak_db: float
    repaired_samples: int
    prepare_s: float
    run_s: float


@dataclass(frozen=True)
class RenderReport:
    """What was rendered into which file, with the evidence."""

    output: Path
    sidecar: Path
    recording: RecordingInfo
    recording_sha256: str
    design: Design
    design_key_sha256: str
    options: RenderOptions
    channels: int
    performance: Performance
    input_full_scale_v: float
    output_full_scale_v: float
    loudness_lufs: float
    peak_db: float
    true_peak_db: float
    match_gain_db: float
    match_limited: bool
    clipped_samples: int
    total_s: float

    @property
    def real_time_factor(self) -> float:
        """Seconds of recording per second of computing, compiling and preparing left out."""
        return self.recording.duration_s / max(self.performance.run_s, 1e-9)

    def as_dict(self) -> dict[str, Any]:
        """Everything as plain values for JSON; what is not finite becomes None."""
        made = self.performance
        data = {
            "kind": SIDECAR_KIND,
            "tonesim_version": __version__,
            "output": str(self.output),
            "sidecar": str(self.sidecar),
            "recording": _recording_dict(self.recording, self.recording_sha256),
            "repaired_samples": made.repaired_samples,
            "design_title": self.design.title,
            "design_key_sha256": self.design_key_sha256,
            "options": asdict(self.options),
            "channels": self.channels,
            "input_full_scale_v": self.input_full_scale_v,
            "output_full_scale_v": self.output_full_scale_v,
            "loudness_lufs": self.loudness_lufs,
            "peak_db": self.peak_db,
            "true_peak_db": self.true_peak_db,
            "match_gain_db": self.match_gain_db,
            "match_limited": self.match_limited,
            "clipped_samples": self.clipped_samples,
            "oversampling_factor": made.oversampling,
            "stage_latency_removed_frames": made.stage_latency_frames,
            "cabinet_latency_removed_frames": made.cabinet_latency_frames,
            "per_channel": [
                {"peak_v": evidence.peak_v, **asdict(evidence)} for evidence in made.evidence
            ],
            "prepare_s": made.prepare_s,
            "run_s": made.run_s,
            "total_s": self.total_s,
            "real_time_factor": self.real_time_factor,
            "design": self.design.model_dump(mode="json"),
        }
        return {key: _finite_or_none(value) for key, value in data.items()}


def _recording_dict(info: RecordingInfo, sha256: str) -> dict[str, Any]:
    return {
        "path": str(info.path.resolve()),
        "name": info.path.name,
        "sample_rate_hz": info.sample_rate,
        "frames": info.frames,
        "channels": info.channels,
        "duration_s": info.duration_s,
        "format": info.format,
        "subtype": info.subtype,
        "sha256": sha256,
    }


def _finite_or_none(value: object) -> object:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def compiled() -> bool:
    """Whether the solver's machine code lies on disk, ready to be loaded.

    Looks for the compiler's index file and compares dates only; if it errs, the solver is compiled
    without notice.
    """
    stats = getattr(advance, "stats", None)
    if stats is None:  # the compiler is switched off
        return True
    code = advance.py_func.__code__
    source = Path(code.co_filename)
    pattern = f"{source.stem}.{code.co_name}-{code.co_firstlineno}.*.nbi"
    made = [path.stat().st_mtime for path in Path(stats.cache_path).glob(pattern)]
    return bool(made) and max(made) >= source.stat().st_mtime


def cabinet_response(design: Design, sample_rate: int) -> tuple[Signal, int] | None:
    """Impulse response of a design's cabinet and its latency in frames; None without a cabinet.

    Raises
    ------
    RecordingError
        If the impulse response is a file that cannot be used.
    DesignError
        If a section of the shape rings for too long.
    """
    if design.cabinet is None:
        return None
    if design.cabinet.part is not None:
        return shape_response(design.cabinet.part, sample_rate)
    assert design.cabinet.file is not None
    samples, rate = read_impulse_response(design.cabinet.file)
    return resample_response(samples, rate, sample_rate)


def output_full_scale(design: Design, response: tuple[Signal, int] | None) -> float:
    """Voltage that full scale of a result stands for, unless another is asked for.

    The highest rail without load plus 2 V, times the most the cabinet can make of such a voltage:
    the sum of the magnitudes of its impulse response (the bound of any convolution).
    """
    rail = max(design.supply.open_positive_v, -design.supply.open_negative_v)
    cabinet = 1.0 if response is None else float(np.sum(np.abs(response[0])))
    return (rail + HEADROOM_V) * cabinet


class _Voice:
    """One channel: a stage and its cabinet, from samples of a recording to volts."""

    def __init__(self, design: Design, rate: int, options: RenderOptions) -> None:
        self._full_scale_v = design.input.full_scale_v
        self.stage = Amplifier(design, multiply=options.multiply)
        self.stage.prepare(rate, options.block_frames)
        # At rest both extremes are the resting voltage; the cabinet begins at zero, so it gets the
        # distance from rest, and rest itself is seen by it as a steady voltage.
        self._rest_v = self.stage.evidence.highest_v
        response = cabinet_response(design, rate)
        self.cabinet = None if response is None else Cabinet(*response, rate)
        self._settled_v = 0.0
        if response is not None and self.cabinet is not None:
            self.cabinet.prepare(rate, options.block_frames)
            self._settled_v = self._rest_v * float(np.sum(response[0]))
        self.cabinet_latency = self.cabinet.latency if self.cabinet else 0
        self.latency = self.stage.latency + self.cabinet_latency
        self._waiting = self.latency

    def play(self, samples: Signal) -> Signal:
        """Give volts for samples; shorter until the latency is through."""
        volts = self.stage.process(samples * self._full_scale_v)
        if self.cabinet is not None:
            volts = self.cabinet.process(volts - self._rest_v) + self._settled_v
        dropped = min(self._waiting, volts.shape[0])
        self._waiting -= dropped
        return volts[dropped:]


def perform(
    recording: Recording,
    design: Design,
    options: RenderOptions,
    sink: Sink,
    progress: Progress | None = None,
) -> Performance:
    """Play a recording through a design, block by block.

    Parameters
    ----------
    recording : Recording
    design : Design
    options : RenderOptions
        `match_lufs` and `subtype` are not looked at.
    sink : callable
        Takes each block of the result, shape (n, channels), relative to full scale.
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.

    Returns
    -------
    Performance

    Raises
    ------
    RecordingError
        If the recording has more than two channels and none was chosen, or a sample is not finite.
    SolverError
        If the stage finds no idle point.
    """
    info = recording.info
    channels = _channels(info, options)
    blocks = recording.blocks(options.block_frames, options.channel)
    started = time.perf_counter()
    with ThreadPoolExecutor(channels) as pool:
        voices = list(
            pool.map(lambda _: _Voice(design, info.sample_rate, options), range(channels))
        )
        full_scale = options.output_full_scale_v or output_full_scale(
            design, cabinet_response(design, info.sample_rate)
        )
        loudness = LoudnessMeter(info.sample_rate, channels)
        level = LevelMeter(info.sample_rate, channels)
        running = time.perf_counter()
        total, done = info.frames + voices[0].latency, 0
        for block in itertools.chain(blocks, _silence(voices[0].latency, channels, options)):
            columns = list(pool.map(_Voice.play, voices, np.ascontiguousarray(block.T)))
            result = np.column_stack(columns) / full_scale
            loudness.add(result)
            level.add(result)
            sink(result)
            done += block.shape[0]
            if progress is not None:
                progress(done / total)
    return Performance(
        evidence=tuple(voice.stage.evidence for voice in voices),
        full_scale_v=full_scale,
        oversampling=voices[0].stage.factor,
        stage_latency_frames=voices[0].stage.latency,
        cabinet_latency_frames=voices[0].cabinet_latency,
        loudness_lufs=loudness.integrated(),
        peak_db=_level_db(level.peak),
        true_peak_db=level.true_peak_db,
        repaired_samples=recording.repaired,
        prepare_s=running - started,
        run_s=time.perf_counter() - running,
    )


def _channels(info: RecordingInfo, options: RenderOptions) -> int:
    if options.channel is not None:
        return 1
    if info.channels > _MOST_CHANNELS:
        raise RecordingError(
            f"{info.path} has {info.channels} channels, expected one or two; choose one"
        )
    return info.channels


def _silence(frames: int, channels: int, options: RenderOptions) -> Iterator[Signal]:
    for start in range(0, frames, options.block_frames):
        yield np.zeros((min(options.block_frames, frames - start), channels))


def _level_db(magnitude: float) -> float:
    return 20.0 * math.log10(magnitude) if magnitude > 0.0 else -math.inf


def render(
    recording: Path,
    out: Path,
    design: Design,
    options: RenderOptions | None = None,
    progress: Progress | None = None,
) -> RenderReport:
    """Render a recording through a design into a file, with a sidecar ``.json`` beside it.

    Both files are complete or not there: they are written under temporary names and renamed.

    Parameters
    ----------
    recording, out : Path
        The ending of `out` chooses the format.
    design : Design
    options : RenderOptions, optional
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.

    Returns
    -------
    RenderReport

    Raises
    ------
    RecordingError
        If the recording or the cabinet's impulse response cannot be used.
    OutputError
        If the result cannot be written, is an input, or is a file that tonesim has no record of
        writing.
    SolverError
        If the stage finds no idle point.
    """
    started = time.perf_counter()
    options = options or RenderOptions()
    recording, out = Path(recording), Path(out)
    check_output(out, [recording], design, replace=options.replace)
    with open_recording(recording, repair=options.repair) as source:
        info = source.info
        channels = _channels(info, options)
        digest = _sha256(recording)
        with create_recording(out, info.sample_rate, channels, options.subtype) as writer:
            if options.match_lufs is None:
                made = perform(source, design, options, writer.write, progress)
                gain, limited = 1.0, False
            else:
                made, gain, limited = _matched(source, design, options, writer, out, progress)
            writer.close()
            gain_db = 20.0 * math.log10(gain)
            report = RenderReport(
                output=out,
                sidecar=sidecar_of(out),
                recording=info,
                recording_sha256=digest,
                design=design,
                design_key_sha256=design_key(design),
                options=options,
                channels=channels,
                performance=made,
                input_full_scale_v=design.input.full_scale_v,
                output_full_scale_v=made.full_scale_v / gain,
                loudness_lufs=made.loudness_lufs + gain_db,
                peak_db=made.peak_db + gain_db,
                true_peak_db=made.true_peak_db + gain_db,
                match_gain_db=gain_db,
                match_limited=limited,
                clipped_samples=writer.clipped_samples,
                total_s=time.perf_counter() - started,
            )
            write_sidecar(report)
    return report


def _matched(
    source: Recording,
    design: Design,
    options: RenderOptions,
    writer: Writer,
    out: Path,
    progress: Progress | None,
) -> tuple[Performance, float, bool]:
    """Render into a scratch file, measure, and write the result at the loudness asked for."""
    assert options.match_lufs is not None

    def first(share: float) -> None:
        if progress is not None:
            progress(share * (1.0 - _MATCH_SHARE))

    with _scratch(out) as scratch:
        made = perform(source, design, options, lambda block: _put(scratch, block, out), first)
        peak = 10.0 ** (made.true_peak_db / 20.0)
        gain, limited = gain_to_match(made.loudness_lufs, options.match_lufs, peak, CEILING_DBTP)
        channels = len(made.evidence)
        size = options.block_frames * channels * _SCRATCH_BYTES
        total = max(scratch.tell(), 1)
        scratch.seek(0)
        while raw := scratch.read(size):
            writer.write(gain * np.frombuffer(raw).reshape(-1, channels))
            if progress is not None:
                progress(1.0 - _MATCH_SHARE * (1.0 - scratch.tell() / total))
    return made, gain, limited


@contextmanager
def _scratch(out: Path) -> Iterator[BinaryIO]:
    """Open a file in the folder of `out` that has no name, or loses it, whatever happens."""
    try:
        file = tempfile.TemporaryFile(prefix=".tonesim-", dir=out.resolve().parent)
    except OSError as failure:
        raise OutputError(f"{out} cannot be written: {failure.strerror}") from None
    with file:
        yield file  # type: ignore[misc]  # a buffered random file is a BinaryIO to us


def _put(scratch: BinaryIO, block: Signal, out: Path) -> None:
    try:
        scratch.write(np.ascontiguousarray(block).tobytes())
    except OSError as failure:
        raise OutputError(
            f"{out}: the temporary file beside it cannot be written: {failure.strerror}"
        ) from None


def _sha256(path: Path) -> str:
    try:
        with path.open("rb") as file:
            return hashlib.file_digest(file, "sha256").hexdigest()
    except OSError as failure:
        raise RecordingError(f"{path} cannot be read: {failure.strerror}") from None


def sidecar_of(out: Path) -> Path:
    """Where the report of a result goes: the same name, ending in ``.json``."""
    return out.with_suffix(".json")


def write_sidecar(report: RenderReport) -> None:
    """Write the report of a result beside it, whole or not at all."""
    text = json.dumps(report.as_dict(), indent=2, ensure_ascii=False, allow_nan=False)
    write_text_aside(report.sidecar, text + "\n")


def check_output(
    out: Path, recordings: Sequence[Path], design: Design, *, replace: bool = False
) -> None:
    """Refuse a place for a result where something would be lost.

    A result is replaced, together with its sidecar, if that sidecar says that tonesim wrote it:
    rendering again is everyday work. Any other file is left alone unless `replace` is set. An
    input is never written over.

    Raises
    ------
    OutputError
    """
    sidecar = sidecar_of(out)
    inputs: list[str | os.PathLike[str]] = [*recordings]
    if design.cabinet is not None and design.cabinet.file is not None:
        inputs.append(design.cabinet.file)
    for target in (out, sidecar):
        refuse_same_file(target, inputs)
    if replace or not (out.is_file() or sidecar.is_file()):
        return
    if not _is_ours(sidecar, out):
        found = out if out.is_file() else sidecar
        raise OutputError(
            f"{found} exists and {sidecar.name} does not say that tonesim wrote {out.name}; "
            "choose another name, or force to replace it"
        )


def _is_ours(sidecar: Path, out: Path) -> bool:
    try:
        data = json.loads(sidecar.read_text(encoding="utf-8"))
        return bool(data["kind"] == SIDECAR_KIND and Path(data["output"]).name == out.name)
    except (OSError, ValueError, KeyError, TypeError):
        return False
