"""From a recording and a design to a file: volts in, volts out, aligned to the sample.

A render is streamed: one block of every channel is in memory at a time, whatever the length. Each
channel has its own stage and cabinet. What the oversampling and the cabinet's filter delay is fed
as silence behind the recording and dropped before it, so that frame n of the result belongs to
frame n of the recording and both have the same length.

The result is the voltage across the load (or what the cabinet makes of it), divided by the
voltage that full scale stands for. By default that is 1.5 times the highest rail without load plus
2 V, times the cabinet's largest gain: square waves and noise 20 dB beyond clipping stay below it
(the tests try), and it is equal for all designs on like rails, so that results can be compared by
ear. Samples that pass it all the same are counted.
"""

import itertools
import math
import tempfile
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from pathlib import Path
from typing import BinaryIO

import numpy as np

from tonesim.cabinet import Cabinet, resample_response, shape_response
from tonesim.design import Design
from tonesim.errors import OutputError, RecordingError
from tonesim.kernel.amplifier import advance
from tonesim.level import LevelMeter, LoudnessMeter, gain_to_match
from tonesim.processor import Amplifier
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
from tonesim.signals import Signal
from tonesim.stage import Stage, build_stage
from tonesim.wav import (
    Recording,
    RecordingInfo,
    Writer,
    create_recording,
    open_recording,
    read_impulse_response,
)

HEADROOM_V = 2.0  # above the highest rail: what the catch diodes let through
OVERSHOOT = 1.5  # of a hard-clipped wave behind the steep filter that lowers the rate
CEILING_DBTP = -1.0  # highest true peak of a loudness-matched result
_MOST_CHANNELS = 2
_MATCH_SHARE = 0.03  # of the time a matched render takes, for its second pass
_SCRATCH_BYTES = 8

Sink = Callable[[Signal], None]
Progress = Callable[[float], None]


def compiled() -> bool:
    """Whether the solver's machine code lies on disk, ready to be loaded.

    Looks for the compiler's index file only (`kernel.jit` has dropped what is stale); if it errs,
    the solver is compiled without notice.
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

    1.5 times the highest rail without load plus 2 V, times the cabinet's largest gain.
    """
    rail = max(design.supply.open_positive_v, -design.supply.open_negative_v)
    cabinet = 1.0
    if response is not None:
        size = 4 << response[0].shape[0].bit_length()
        cabinet = float(np.max(np.abs(np.fft.rfft(response[0], size))))
    return OVERSHOOT * (rail + HEADROOM_V) * cabinet


class Voice:
    """One channel: a stage and its cabinet, from samples of a recording to volts.

    Parameters
    ----------
    design : Design
    rate : int
        Of the recording, hertz.
    options : RenderOptions
    build : callable, optional
        Makes the stage of the design, or that of a twin.
    """

    def __init__(
        self,
        design: Design,
        rate: int,
        options: RenderOptions,
        build: Callable[[Design], Stage] = build_stage,
    ) -> None:
        self._full_scale_v = design.input.full_scale_v
        self.stage = Amplifier(design, multiply=options.multiply, build=build)
        self.stage.prepare(rate, options.block_frames)
        # The cabinet begins at zero, so it gets the distance from rest, and rest itself is seen by
        # it as a steady voltage.
        self._rest_v = self.stage.rest_v
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
    channels = channels_of(info, options)
    blocks = recording.blocks(options.block_frames, options.channel)
    started = time.perf_counter()
    with ThreadPoolExecutor(channels) as pool:
        # In this thread, because what they may have to compile can be interrupted in the main one.
        voices = [Voice(design, info.sample_rate, options) for _ in range(channels)]
        full_scale = options.output_full_scale_v or output_full_scale(
            design, cabinet_response(design, info.sample_rate)
        )
        loudness = LoudnessMeter(info.sample_rate, channels)
        level = LevelMeter(info.sample_rate, channels)
        running = time.perf_counter()
        total, done = info.frames + voices[0].latency, 0
        for block in itertools.chain(blocks, silence(voices[0].latency, channels, options)):
            columns = list(pool.map(Voice.play, voices, np.ascontiguousarray(block.T)))
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


def channels_of(info: RecordingInfo, options: RenderOptions) -> int:
    """Channels that are played: one that is chosen, or one or two.

    Raises
    ------
    RecordingError
        If there are more and none was chosen.
    """
    if options.channel is not None:
        return 1
    if info.channels > _MOST_CHANNELS:
        raise RecordingError(
            f"{info.path} has {info.channels} channels, expected one or two; choose one"
        )
    return info.channels


def silence(frames: int, channels: int, options: RenderOptions) -> Iterator[Signal]:
    """Blocks of silence that push out what filters delay."""
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
        channels = channels_of(info, options)
        digest = file_sha256(recording)
        with create_recording(out, info.sample_rate, channels, options.subtype) as writer:
            if options.match_lufs is None:
                made = perform(source, design, options, writer.write, progress)
                gain, limited = 1.0, False
            else:
                made, gain, limited = _matched(source, design, options, writer, out, progress)
            writer.close()
            report = report_on(
                out,
                Source(info, digest),
                design,
                options,
                Written(made, gain, limited, writer.clipped_samples),
                time.perf_counter() - started,
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
    with ExitStack() as stack:
        try:
            file = stack.enter_context(
                tempfile.TemporaryFile(prefix=".tonesim-", dir=out.resolve().parent)
            )
        except OSError as failure:
            raise OutputError(f"{out} cannot be written: {failure.strerror}") from None
        yield file


def _put(scratch: BinaryIO, block: Signal, out: Path) -> None:
    try:
        scratch.write(np.ascontiguousarray(block).tobytes())
    except OSError as failure:
        raise OutputError(
            f"{out}: the temporary file beside it cannot be written: {failure.strerror}"
        ) from None
