"""What a render is asked for, what it tells, and where both its files may go.

A result has a sidecar beside it: the same name, ending in ``.json``. It holds the design with all
values, so that the result can be made again, and the evidence of the solver. The sidecar is also
how tonesim knows its own results from other people's files.
"""

import hashlib
import json
import math
import os
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from tonesim import __version__
from tonesim.design import Design
from tonesim.designfile import design_key
from tonesim.errors import OutputError, RecordingError, UsageError
from tonesim.processor import Evidence
from tonesim.wav import RecordingInfo, refuse_same_file, write_text_aside

SIDECAR_KIND = "tonesim render"  # the word by which a sidecar of ours is known


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
            "output": str(self.output.resolve()),
            "sidecar": str(self.sidecar.resolve()),
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


@dataclass(frozen=True)
class Source:
    """A recording and the SHA-256 of its file, in hexadecimal."""

    info: RecordingInfo
    sha256: str


@dataclass(frozen=True)
class Written:
    """A performance, the factor it was written with, and what that did."""

    made: Performance
    gain: float = 1.0
    limited: bool = False
    clipped_samples: int = 0


def report_on(
    out: Path,
    source: Source,
    design: Design,
    options: RenderOptions,
    written: Written,
    total_s: float,
) -> RenderReport:
    """Put together the report of a result."""
    made = written.made
    gain_db = 20.0 * math.log10(written.gain)
    return RenderReport(
        output=out,
        sidecar=sidecar_of(out),
        recording=source.info,
        recording_sha256=source.sha256,
        design=design,
        design_key_sha256=design_key(design),
        options=options,
        channels=len(made.evidence),
        performance=made,
        input_full_scale_v=design.input.full_scale_v,
        output_full_scale_v=made.full_scale_v / written.gain,
        loudness_lufs=made.loudness_lufs + gain_db,
        peak_db=made.peak_db + gain_db,
        true_peak_db=made.true_peak_db + gain_db,
        match_gain_db=gain_db,
        match_limited=written.limited,
        clipped_samples=written.clipped_samples,
        total_s=total_s,
    )


def file_sha256(path: Path) -> str:
    """SHA-256 of a file, in hexadecimal; RecordingError if it cannot be read."""
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
    text = json.dumps(report.as_dict(), indent=2, allow_nan=False)
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
