"""Recordings in and results out: the only module that knows file formats.

Inputs are only ever opened for reading. Outputs are written under a temporary name in the folder
they go to and renamed when they are complete, so a reader never meets half a file and a failure
leaves what was there before. Samples are float64 with full scale at 1.0 in memory.
"""

from __future__ import annotations

import os
import re
import secrets
import stat
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType

import numpy as np
import numpy.typing as npt
import soundfile as sf

from tonesim.errors import OutputError, RecordingError, UsageError
from tonesim.signals import Signal, as_frames

LOWEST_RATE_HZ = 8_000
HIGHEST_RATE_HZ = 384_000
LONGEST_RESPONSE_S = 2.0

# ending: (format, sample encodings it may hold; the first is the default)
_FORMATS = {
    ".wav": ("WAV", ("PCM_24", "PCM_16", "PCM_32", "FLOAT", "DOUBLE")),
    ".flac": ("FLAC", ("PCM_24", "PCM_16")),
    ".aiff": ("AIFF", ("PCM_24", "PCM_16", "PCM_32", "FLOAT", "DOUBLE")),
    ".aif": ("AIFF", ("PCM_24", "PCM_16", "PCM_32", "FLOAT", "DOUBLE")),
    ".w64": ("W64", ("PCM_24", "PCM_16", "PCM_32", "FLOAT", "DOUBLE")),
    ".caf": ("CAF", ("PCM_24", "PCM_16", "PCM_32", "FLOAT", "DOUBLE")),
    ".ogg": ("OGG", ("VORBIS",)),
}
_SUBTYPES = {
    "16": "PCM_16",
    "24": "PCM_24",
    "32": "PCM_32",
    "float": "FLOAT",
    "double": "DOUBLE",
    "vorbis": "VORBIS",
}
_BITS = {"PCM_16": 16, "PCM_24": 24, "PCM_32": 32}
_WIDTH_BYTES = {"PCM_16": 2, "PCM_24": 3, "PCM_32": 4, "FLOAT": 4, "DOUBLE": 8, "VORBIS": 0}
_LIMIT_BYTES = 0xFFFF_FFFF - 0xFFFF  # the 32-bit size field of WAV and AIFF files, less a header
_VORBIS_HIGHEST_RATE_HZ = 200_000  # beyond it the encoder does not start, and crashes when closed
_PIECE_FRAMES = 4096  # written at once; the Ogg encoder overflows its stack on very long pieces

# What the reading library logs when a header promises more than the file holds. W64 logs it of the
# whole file, RF64 in frames.
_TRUNCATED = re.compile(
    r"\b(?P<chunk>data|SSND|riff) : (?P<stated>\d+) \(should be (?P<found>\d+)\)"
    r"|frame count (?P<frames_found>\d+) does not match value from 'ds64' chunk of (?P<frames>\d+)"
)
_SLACK_BYTES = 64  # some writers count headers or padding in; a loss this small is let pass
_UNKNOWN_LENGTH = 0x7FFF_0000  # from here up a size means "written to a pipe, length unknown"


@dataclass(frozen=True)
class RecordingInfo:
    """What a recording is: `format` and `subtype` are the names of the file format's makers."""

    path: Path
    sample_rate: int
    frames: int
    channels: int
    format: str
    subtype: str

    @property
    def duration_s(self) -> float:
        """Length in seconds."""
        return self.frames / self.sample_rate


def open_recording(path: str | os.PathLike[str], *, repair: bool = False) -> Recording:
    """Open a recording for reading; use it in a ``with`` statement.

    Parameters
    ----------
    path : str or path
        Any format the sound file library reads (WAV, FLAC, AIFF, W64, CAF, Ogg, MP3, ...).
    repair : bool
        Replace samples that are not finite by 0.0, and count them, instead of refusing them.

    Raises
    ------
    RecordingError
        If there is no such file, it is a folder, pipe or device, may not be read, is not a
        recording, is empty, is shorter than its header says, or its rate is not 8 to 384 kHz.
    """
    path = Path(path)
    _check_readable(path)
    try:
        file = sf.SoundFile(_native(path))
    except (sf.SoundFileError, TypeError, ValueError) as error:
        reason = str(error).split(": ")[-1].rstrip(".")
        if isinstance(error, TypeError):  # headerless: it would need a rate from elsewhere
            reason = "headerless files carry no sample rate"
        raise RecordingError(f"{path} is not a recording that can be read: {reason}") from None
    try:
        _check_contents(path, file)
    except BaseException:
        file.close()
        raise
    return Recording(path, file, repair)


def _native(path: Path) -> str | bytes:
    """Return a path as the library takes it: on POSIX its bytes, which need not be any text."""
    return os.fsencode(path) if os.name == "posix" else str(path)


def _check_readable(path: Path) -> None:
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            raise RecordingError(f"{path} is a folder; a recording was expected")
        if not stat.S_ISREG(mode):  # opening a pipe would wait for ever
            raise RecordingError(
                f"{path} is a pipe or a device; a recording must be a regular file"
            )
        with path.open("rb"):
            pass
    except (FileNotFoundError, NotADirectoryError):
        raise RecordingError(f"{path} does not exist") from None
    except PermissionError:
        raise RecordingError(f"{path} may not be read: permission denied") from None
    except (OSError, ValueError) as error:
        raise RecordingError(f"{path} cannot be opened: {error}") from None


def _check_contents(path: Path, file: sf.SoundFile) -> None:
    if "lacks an end-of-stream bit" in file.extra_info:  # the mark that ends an Ogg stream
        raise RecordingError(f"{path} is cut short: its last page is missing")
    for match in _TRUNCATED.finditer(file.extra_info):
        if match["frames"]:
            raise RecordingError(_truncated(path, int(match["frames_found"]), int(match["frames"])))
        stated, found = int(match["stated"]), int(match["found"])
        known = stated < _UNKNOWN_LENGTH or match["chunk"] == "riff"
        if known and stated - found > _SLACK_BYTES:
            raise RecordingError(
                f"{path} is cut short: its header promises {stated} bytes and {found} are there"
            )
    if file.frames == 0:
        raise RecordingError(f"{path} holds no samples")
    if not LOWEST_RATE_HZ <= file.samplerate <= HIGHEST_RATE_HZ:
        raise RecordingError(
            f"{path} has a sample rate of {file.samplerate} Hz; "
            f"{LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz are supported"
        )


def _truncated(path: Path, found: int, stated: int) -> str:
    return f"{path} is cut short: its header promises {stated} frames and {found} can be read"


class Recording:
    """An open recording; made by `open_recording`.

    Attributes
    ----------
    info : RecordingInfo
    repaired : int
        Samples replaced by 0.0 since reading last began.
    """

    def __init__(self, path: Path, file: sf.SoundFile, repair: bool) -> None:
        self._file = file
        self._repair = repair
        self.repaired = 0
        self.info = RecordingInfo(
            path, file.samplerate, file.frames, file.channels, file.format, file.subtype
        )

    def __enter__(self) -> Recording:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()

    def blocks(self, block_size: int, channel: int | None = None) -> Iterator[Signal]:
        """Read from the beginning, block by block; only one block is in memory.

        Parameters
        ----------
        block_size : int
            Frames per block; the last may be shorter.
        channel : int, optional
            Only this one, counted from 0.

        Yields
        ------
        (n, channels) numpy.ndarray
            A new array each time; one column if `channel` was given.

        Raises
        ------
        RecordingError
            If a sample is not finite (the first is named) or the file ends too early.
        UsageError
            If there is no such channel or the block size is below 1.
        """
        if block_size < 1:
            raise UsageError(f"block_size is {block_size}; it must be at least 1")
        if channel is not None and not 0 <= channel < self.info.channels:
            raise UsageError(
                f"{self.info.path} has {self.info.channels} channel(s), "
                f"so there is no channel {channel + 1}"
            )
        return self._read(block_size, channel)

    def _read(self, block_size: int, channel: int | None) -> Iterator[Signal]:
        self.repaired = 0
        position = 0
        while position < self.info.frames:
            try:
                if position == 0:
                    self._file.seek(0)
                block: Signal = self._file.read(block_size, always_2d=True)
            except sf.SoundFileError as error:
                raise RecordingError(
                    f"{self.info.path} is damaged after frame {position}: {error}"
                ) from None
            if block.shape[0] == 0:
                raise RecordingError(_truncated(self.info.path, position, self.info.frames))
            if channel is not None:
                block = np.ascontiguousarray(block[:, channel : channel + 1])
            self._mend(block, position, channel or 0)
            position += block.shape[0]
            yield block

    def _mend(self, block: Signal, position: int, first_channel: int) -> None:
        bad = ~np.isfinite(block)
        count = int(np.count_nonzero(bad))
        if count == 0:
            return
        if not self._repair:
            frame, column = (int(i) for i in np.argwhere(bad)[0])
            raise RecordingError(
                f"{self.info.path} holds {block[frame, column]} instead of a sample in frame "
                f"{position + frame} ({(position + frame) / self.info.sample_rate:.4f} s), channel "
                f"{first_channel + column + 1}; {count} such up to frame "
                f"{position + block.shape[0]}. Repair replaces them by zero"
            )
        self.repaired += count
        block[bad] = 0.0


def read_impulse_response(path: str | os.PathLike[str]) -> tuple[Signal, int]:
    """Read a cabinet's impulse response: its first channel and its rate in hertz.

    Raises
    ------
    RecordingError
        As `open_recording`, and if it is longer than two seconds or silent.
    """
    with open_recording(path) as recording:
        info = recording.info
        if info.duration_s > LONGEST_RESPONSE_S:
            raise RecordingError(
                f"{info.path} lasts {info.duration_s:.2f} s; an impulse response "
                f"may last up to {LONGEST_RESPONSE_S:g} s"
            )
        samples = np.concatenate([block[:, 0] for block in recording.blocks(65536, channel=0)])
    if not np.any(samples):
        raise RecordingError(f"{info.path} is silent; an impulse response was expected")
    return samples, info.sample_rate


@contextmanager
def create_recording(
    path: str | os.PathLike[str],
    sample_rate: int,
    channels: int,
    subtype: str | None = None,
    seed: int = 0,
) -> Iterator[Writer]:
    """Write a recording; it appears under its name when the ``with`` block ends without an error.

    Parameters
    ----------
    path : str or path
        The ending chooses the format: .wav, .flac, .aiff, .w64, .caf or .ogg. A .wav that would
        pass 4 GB becomes RF64 (EBU Tech 3306), whose ending is the same.
    sample_rate : int
        In hertz.
    channels : int
    subtype : str, optional
        Sample encoding: 16, 24, 32, float, double or vorbis, or the library's name for it such
        as PCM_16. By default 24 bits, in .ogg Vorbis.
    seed : int
        Of the dither that 16-bit files get.

    Yields
    ------
    Writer

    Raises
    ------
    OutputError
        If the ending or encoding is unknown, the folder is missing, or writing fails. The same
        samples give the same file, except in .ogg, whose streams carry a random serial number.
    """
    path = Path(path)
    file_format, encoding = _encoding(path, subtype)
    with _aside(path) as aside:
        writer = Writer(path, aside, (sample_rate, channels, encoding), file_format, seed)
        try:
            yield writer
        finally:
            writer.close()


def _encoding(path: Path, subtype: str | None) -> tuple[str, str]:
    ending = path.suffix.lower()
    if ending not in _FORMATS:
        raise OutputError(
            f"{path} ends in {ending or 'nothing'!r}; known endings are {', '.join(_FORMATS)}"
        )
    file_format, encodings = _FORMATS[ending]
    encoding = encodings[0] if subtype is None else _SUBTYPES.get(subtype, subtype)
    if encoding not in encodings:
        names = [name for name, value in _SUBTYPES.items() if value in encodings]
        raise OutputError(
            f"{path} cannot hold samples of the kind {subtype!r}; "
            f"{ending} files hold {', '.join(names)}"
        )
    return file_format, encoding


class Writer:
    """An output being written; made by `create_recording`.

    Attributes
    ----------
    frames : int
        Written so far.
    clipped_samples : int
        Samples beyond full scale (magnitude above 1.0) so far. Integer files hold them clipped,
        float files unchanged.
    """

    def __init__(
        self,
        path: Path,
        aside: Path,
        layout: tuple[int, int, str],
        file_format: str,
        seed: int,
    ) -> None:
        self.frames = 0
        self.clipped_samples = 0
        self._path = path
        self._aside = aside
        self._sample_rate, self._channels, self._encoding = layout
        self._format = file_format
        self._dither = np.random.default_rng(seed)
        self._file = self._open(aside)

    def write(self, block: npt.ArrayLike) -> None:
        """Append a block of shape ``(n,)`` or ``(n, channels)``.

        Raises
        ------
        OutputError
            If a sample is not finite, the shape does not fit, or the disk is full.
        """
        x = as_frames(block)
        if x.shape[1] != self._channels:
            raise OutputError(
                f"{self._path} has {self._channels} channel(s); a block of {x.shape[1]} came"
            )
        if not np.all(np.isfinite(x)):
            first = self.frames + int(np.argwhere(~np.isfinite(x))[0, 0])
            raise OutputError(f"{self._path}: frame {first} of the result is not a finite number")
        self.clipped_samples += int(np.count_nonzero(np.abs(x) > 1.0))
        frame_bytes = self._channels * _WIDTH_BYTES[self._encoding]
        if (self.frames + len(x)) * frame_bytes > _LIMIT_BYTES:
            self._pass_limit()
        self._put(self._file, self._codes(x) if self._encoding in _BITS else x)
        self.frames += x.shape[0]

    def _codes(self, x: Signal) -> npt.NDArray[np.int32]:
        """Round to the codes of an integer file, left-justified in 32 bits as the library wants.

        16-bit files get triangular dither of +-1 step (Lipshitz, Wannamaker and Vanderkooy, J.
        Audio Eng. Soc. 40(5), 1992; from memory), drawn sample by sample, so the cut into blocks
        does not matter.
        """
        bits = _BITS[self._encoding]
        full_scale = 2.0 ** (bits - 1)
        scaled = x * full_scale
        if bits == 16:
            pair = self._dither.random((*x.shape, 2))
            scaled += pair[..., 0] - pair[..., 1]
        codes = np.clip(np.rint(scaled), -full_scale, full_scale - 1.0)
        return codes.astype(np.int32) << (32 - bits)

    def _open(self, aside: Path) -> sf.SoundFile:
        if self._encoding == "VORBIS" and self._sample_rate > _VORBIS_HIGHEST_RATE_HZ:
            raise OutputError(
                f"{self._path} cannot be written at {self._sample_rate} Hz; "
                f".ogg files hold up to {_VORBIS_HIGHEST_RATE_HZ} Hz"
            )
        try:
            return sf.SoundFile(
                _native(aside),
                "w",
                samplerate=self._sample_rate,
                channels=self._channels,
                subtype=self._encoding,
                format=self._format,
            )
        except (sf.SoundFileError, ValueError) as error:
            raise OutputError(
                f"{self._path} cannot be written with {self._channels} channel(s) at "
                f"{self._sample_rate} Hz: {str(error).split(': ')[-1]}"
            ) from None

    def _put(self, file: sf.SoundFile, samples: npt.NDArray[np.generic]) -> None:
        try:
            for start in range(0, len(samples), _PIECE_FRAMES):
                file.write(samples[start : start + _PIECE_FRAMES])
        except (sf.SoundFileError, AssertionError) as error:  # the latter: fewer frames than given
            raise OutputError(
                f"{self._path} cannot be written beyond frame {self.frames}, "
                f"perhaps the disk is full: {error}"
            ) from None

    def _pass_limit(self) -> None:
        """Copy what is written of a WAV file into RF64: its sizes have 64 bits."""
        if self._format == "AIFF":
            raise OutputError(
                f"{self._path} passes 4 GB, more than AIFF files hold; use .wav or .caf"
            )
        if self._format != "WAV":
            return
        self._file.close()
        narrow = self._aside.with_suffix(".narrow")
        self._aside.rename(narrow)
        self._format = "RF64"
        try:
            self._file = self._open(self._aside)
            kind = "float64" if self._encoding in ("FLOAT", "DOUBLE") else "int32"
            with sf.SoundFile(_native(narrow)) as source:
                for block in source.blocks(65536, dtype=kind, always_2d=True):
                    self._put(self._file, block)
        finally:
            narrow.unlink()

    def close(self) -> None:
        """Finish the file; `create_recording` calls this."""
        if self._file.closed:
            return
        try:
            self._file.close()
        except sf.SoundFileError as error:
            raise OutputError(f"{self._path} cannot be finished: {error}") from None
        if self._encoding in ("FLOAT", "DOUBLE"):
            self._clear_time_stamp()

    def _clear_time_stamp(self) -> None:
        """Zero the date in the PEAK chunk of float files: same samples, same file."""
        with self._aside.open("r+b") as file:
            chunk = file.read(256).find(b"PEAK")
            if chunk >= 0:  # identifier, size, version, time stamp: four bytes each
                file.seek(chunk + 12)
                file.write(bytes(4))


def write_bytes_aside(path: str | os.PathLike[str], data: bytes) -> None:
    """Write bytes under a temporary name and rename it.

    Raises
    ------
    OutputError
        If the folder is missing or writing fails.
    """
    with _aside(Path(path)) as aside:
        try:
            aside.write_bytes(data)
        except OSError as error:
            raise OutputError(f"{path} cannot be written: {error.strerror}") from None


def write_text_aside(path: str | os.PathLike[str], text: str) -> None:
    """Write UTF-8 text under a temporary name and rename it; raises like `write_bytes_aside`."""
    write_bytes_aside(path, text.encode("utf-8"))


@contextmanager
def _aside(path: Path) -> Iterator[Path]:
    """Give a temporary file beside `path`; move it there on success, remove it on any failure."""
    target = Path(os.path.realpath(path))  # a link stays a link to the new contents
    if not target.parent.is_dir():
        raise OutputError(f"{path} cannot be written: the folder {target.parent} does not exist")
    if target.exists() and not target.is_file():
        raise OutputError(f"{path} cannot be written: it is a folder or a device")
    if target.exists() and not os.access(target, os.W_OK):
        raise OutputError(f"{path} cannot be written: it is write-protected")
    aside = target.parent / f".tonesim-{os.getpid()}-{secrets.token_hex(4)}{target.suffix}"
    try:
        aside.open("xb").close()
    except OSError as error:
        raise OutputError(f"{path} cannot be written: {error.strerror}") from None
    try:
        yield aside
        os.replace(aside, target)
    except BaseException as error:
        aside.unlink(missing_ok=True)
        if isinstance(error, OSError) and error.filename == os.fspath(aside):
            raise OutputError(f"{path} cannot be written: {error.strerror}") from None
        raise


def refuse_same_file(
    output: str | os.PathLike[str], inputs: Iterable[str | os.PathLike[str]]
) -> None:
    """Refuse to write over an input, under whatever name or link it is given.

    Raises
    ------
    OutputError
        If `output` is the same file as one of `inputs`.
    """
    for source in inputs:
        if os.path.exists(output) and os.path.exists(source) and os.path.samefile(output, source):
            raise OutputError(f"{output} is also an input ({source}); inputs are never overwritten")
