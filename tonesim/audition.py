"""A recording through a design and its twins, and whether what lies between them is audible.

Two questions, asked of the same recording: what the choice of bias adds (against the twin without
a dead zone), and all distortion (against the linear twin). Everything goes through the same code,
the cabinet too; the references are matched by what a linear stage could explain (see `match`)
before the difference is given to the ear.
"""

from __future__ import annotations

import itertools
import tempfile
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np

from tonesim.audibility import Audibility, assess
from tonesim.design import Design
from tonesim.designfile import design_key
from tonesim.ear import Listening
from tonesim.errors import OutputError, UsageError
from tonesim.masking import FrameSeries, MaskingMeter
from tonesim.match import LinearFit, LinearMatch, LinearStage
from tonesim.playback import LevelSearch, search_level
from tonesim.pool import Progress
from tonesim.processor import Evidence
from tonesim.render import Voice, cabinet_response, channels_of, output_full_scale, silence
from tonesim.report import RenderOptions
from tonesim.signals import Signal
from tonesim.stage import Stage, build_stage
from tonesim.twin import crossover_free, linear
from tonesim.wav import Recording, create_recording, open_recording

SINE_SPL_DB = 82.0  # 100 dB at 1 W and 1 m, heard at 2 m: 81.9 dB for a sine of 1 V peak
ROOM_DBA = 30.0  # a quiet room
LINEAR_TAPS = 16  # with slow poles; more would redraw the harmonics of single notes
_PLAY_SHARE = 0.55  # of the time: playing, against matching and listening
_BIAS, _ALL = "bias", "all"


@dataclass(frozen=True)
class Comparison:
    """One question: the recording through the design against one of its twins.

    `reference` names the twin, `match` says what was taken out as linear, `levels` what the
    playback level does to the verdict.
    """

    question: str
    reference: str
    match: LinearMatch
    audibility: Audibility
    levels: LevelSearch | None
    series: FrameSeries

    def as_dict(self) -> dict[str, Any]:
        """Plain values, without the frames."""
        found = asdict(self.audibility)
        found["alignment_gap_db"] = self.audibility.alignment_gap_db
        found["margin_db"] = self.audibility.margins.margin_db
        told: dict[str, Any] = {
            "question": self.question,
            "reference": self.reference,
            "match": {**asdict(self.match), "removed_db": self.match.removed_db},
            "audibility": found,
        }
        if self.levels is not None:
            told["levels"] = {
                "inaudible_at_db": self.levels.inaudible_at_db,
                "audible_at_db": self.levels.audible_at_db,
                "monotone": self.levels.monotone,
            }
        return told


@dataclass(frozen=True)
class Audition:
    """The answers for one channel of a recording; `everything` is None where it was not asked.

    `shift_v` and `twin_idle_a` are those of the twin without a dead zone; `evidence` is the
    solver's for design, that twin, and the linear one.
    """

    recording: str
    channel: int
    title: str
    design_key_sha256: str
    listening: Listening
    cabinet: str | None
    bias: Comparison
    everything: Comparison | None
    idle_a: float
    twin_idle_a: float
    shift_v: float
    evidence: tuple[Evidence, ...]

    @property
    def unsettled_steps(self) -> int:
        """Steps of all stages that did not settle."""
        return sum(each.unsettled_steps for each in self.evidence)

    def as_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""
        return {
            "recording": self.recording,
            "channel": self.channel + 1,
            "title": self.title,
            "design_key_sha256": self.design_key_sha256,
            "sine_spl_db": self.listening.sine_spl_db,
            "room_dba": self.listening.room_dba,
            "cabinet": self.cabinet,
            "bias": self.bias.as_dict(),
            "all_distortion": None if self.everything is None else self.everything.as_dict(),
            "idle_a": self.idle_a,
            "twin_idle_a": self.twin_idle_a,
            "twin_shift_v": self.shift_v,
            "unsettled_steps": self.unsettled_steps,
        }


class Take:
    """One channel of a recording through a stage, on disk; removed when it is closed."""

    def __init__(self, file: BinaryIO, block_frames: int) -> None:
        self._file = file
        self._bytes = 8 * block_frames

    def write(self, volts: Signal) -> None:
        """Append a block."""
        try:
            self._file.write(np.ascontiguousarray(volts).tobytes())
        except OSError as failure:
            raise OutputError(
                f"the temporary file of a take cannot be written: {failure.strerror}"
            ) from None

    def blocks(self) -> Iterator[Signal]:
        """All blocks from the beginning."""
        self._file.seek(0)
        while raw := self._file.read(self._bytes):
            yield np.frombuffer(raw)


@dataclass(frozen=True)
class Residual:
    """Pairs of blocks: matched reference and what the design makes of it beyond."""

    reference: Signal
    residual: Signal


def audition(
    recording: Recording,
    design: Design,
    listening: Listening,
    options: RenderOptions,
    progress: Progress | None = None,
    *,
    search: bool = True,
    everything: bool = True,
    tap: Callable[[Residual], None] | None = None,
) -> list[Audition]:
    """Play a recording through a design and both twins and listen to what lies between.

    Parameters
    ----------
    recording : Recording
        Open; played from where it stands.
    design : Design
    listening : Listening
        In volts across the load, or what the cabinet makes of them.
    options : RenderOptions
        Channel, repair, internal rate.
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.
    search : bool
        Whether to look for the playback levels at which the verdicts turn.
    everything : bool
        Whether to ask for all distortion too, which takes the linear twin.
    tap : callable, optional
        Takes the residual of the bias, block by block, for one channel.

    Returns
    -------
    list of Audition
        One for each channel.

    Raises
    ------
    SolverError
        If the design cannot idle.
    RecordingError
        If the recording cannot be used.
    """
    tell = progress or (lambda share: None)
    own_stage = build_stage(design)
    free = crossover_free(design, own_stage)
    builders: tuple[Callable[[Design], Stage], ...] = (
        lambda _: own_stage,
        lambda _: free.stage,
        *((lambda _: linear(own_stage),) if everything else ()),
    )
    info = recording.info
    channels = channels_of(info, options)
    with ExitStack() as stack:
        takes = [
            [
                Take(stack.enter_context(tempfile.TemporaryFile()), options.block_frames)
                for _ in builders
            ]
            for _ in range(channels)
        ]
        voices = [
            [Voice(design, info.sample_rate, options, build) for build in builders]
            for _ in range(channels)
        ]
        latency = voices[0][0].latency
        total, done = info.frames + latency, 0
        blocks = recording.blocks(options.block_frames, options.channel)
        flat = [voice for row in voices for voice in row]
        with ThreadPoolExecutor(len(flat)) as pool:
            for block in itertools.chain(blocks, silence(latency, channels, options)):
                columns = [c for c in np.ascontiguousarray(block.T) for _ in builders]
                played = list(pool.map(Voice.play, flat, columns))
                for take, volts in zip((t for row in takes for t in row), played, strict=True):
                    take.write(volts)
                done += block.shape[0]
                tell(_PLAY_SHARE * done / total)
        key = design_key(design)
        found = []
        for channel in range(channels):
            start = _PLAY_SHARE + (1.0 - _PLAY_SHARE) * channel / channels
            own, without = takes[channel][:2]
            bias = _compare(
                _BIAS,
                "twin without a dead zone",
                (without, own),
                MaskingMeter(info.sample_rate, listening, keep_bands=search),
                LinearFit(info.sample_rate),
                tap,
            )
            tell(start + 0.5 * (1.0 - _PLAY_SHARE) / channels)
            whole = None
            if everything:
                whole = _compare(
                    _ALL,
                    "linear twin",
                    (takes[channel][2], own),
                    MaskingMeter(info.sample_rate, listening, keep_bands=search),
                    LinearFit(info.sample_rate, LINEAR_TAPS),
                )
            tell(start + (1.0 - _PLAY_SHARE) / channels)
            found.append(
                Audition(
                    recording=str(info.path),
                    channel=options.channel if options.channel is not None else channel,
                    title=design.title,
                    design_key_sha256=key,
                    listening=listening,
                    cabinet=_cabinet_name(design),
                    bias=bias,
                    everything=whole,
                    idle_a=_idle(voices[channel][0]),
                    twin_idle_a=free.idle_a,
                    shift_v=free.shift_v,
                    evidence=tuple(voice.stage.evidence for voice in voices[channel]),
                )
            )
    return found


def write_residual(
    recording_path: Path,
    out: Path,
    design: Design,
    listening: Listening,
    options: RenderOptions,
    boost_db: float,
    progress: Progress | None = None,
) -> tuple[list[Audition], int]:
    """Audition one channel and write what the bias adds, boosted, to listen to.

    Parameters
    ----------
    recording_path, out : Path
        The ending of `out` chooses the format; it must not exist.
    design : Design
    listening : Listening
    options : RenderOptions
    boost_db : float
        On top of the full scale that a render of the design has.
    progress : callable, optional

    Returns
    -------
    auditions : list of Audition
    clipped_samples : int
        Samples that the boost took past full scale.

    Raises
    ------
    UsageError
        If the recording has several channels and none is chosen.
    OutputError
        If `out` exists or cannot be written.
    """
    if out.exists():
        raise OutputError(f"{out} exists; a residual is written under a new name only")
    with open_recording(recording_path, repair=options.repair) as recording:
        info = recording.info
        if channels_of(info, options) != 1:
            raise UsageError(f"{recording_path} has {info.channels} channels: choose one")
        scale = output_full_scale(design, cabinet_response(design, info.sample_rate))
        factor = 10.0 ** (boost_db / 20.0) / scale
        with create_recording(out, info.sample_rate, 1, options.subtype) as writer:
            found = audition(
                recording,
                design,
                listening,
                options,
                progress,
                tap=lambda part: writer.write(factor * part.residual),
            )
            writer.close()
            return found, writer.clipped_samples


def _compare(
    question: str,
    reference: str,
    pair: tuple[Take, Take],
    meter: MaskingMeter,
    fit: LinearFit,
    tap: Callable[[Residual], None] | None = None,
) -> Comparison:
    """Match a reference to the take of the design, and listen to the difference."""
    for before, after in zip(pair[0].blocks(), pair[1].blocks(), strict=True):
        fit.update(before, after)
    match = fit.finish()
    stage = LinearStage(fit, match)
    matched = itertools.chain(
        (stage.process(*blocks) for blocks in zip(*(t.blocks() for t in pair), strict=True)),
        (stage.finish() for _ in range(1)),
    )
    for fair, heard in matched:
        meter.add(fair, heard)
        if tap is not None:
            tap(Residual(fair, heard - fair))
    series = meter.finish()
    return Comparison(
        question=question,
        reference=reference,
        match=match,
        audibility=assess(series),
        levels=search_level(meter) if meter.keeps_bands else None,
        series=series,
    )


def _idle(voice: Voice) -> float:
    idle = voice.stage.idle
    assert idle is not None  # set in prepare
    return min(idle.upper_current_a, idle.lower_current_a)


def _cabinet_name(design: Design) -> str | None:
    if design.cabinet is None:
        return None
    if design.cabinet.part is not None:
        return design.cabinet.part.name
    return Path(str(design.cabinet.file)).name
