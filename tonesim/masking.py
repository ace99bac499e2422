"""How far a residual stands above what masks it, frame by frame, by two models of the ear.

`tonesim.nmr` is strict, `tonesim.roex` lenient; what lies between them is for listening to. A
recording may arrive in blocks: what is kept is a dozen figures a frame, and on request the powers
of its bands, from which the same recording can be heard again at another level.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from tonesim import nmr, roex
from tonesim.ear import A_WEIGHTS, FRAME, HOP, RATE_HZ, Listening, decibels, power, spectra, spl_db
from tonesim.errors import UsageError
from tonesim.framing import Framer
from tonesim.signals import Signal

ACTIVE_DB = 15.0  # above the noise of the ear itself, in some band

Mask = npt.NDArray[np.bool_]


class BandPowers(NamedTuple):
    """What the models need of some frames; powers relative to 20 µPa, ear-weighted in bands.

    `reference`, `test`, `noise` and `difference` are ``(n, 109)`` over `nmr.BANDS`: noise is the
    power of the complex residual, difference that of the difference of magnitudes. `background`
    and `residual` are ``(n, 150)`` over `roex.BANDS`. The last three are ``(n,)``, whole spectrum:
    reference and residual unweighted, and the louder of reference and test A-weighted.
    """

    reference: Signal
    test: Signal
    noise: Signal
    difference: Signal
    background: Signal
    residual: Signal
    reference_level: Signal
    residual_level: Signal
    a_level: Signal


@dataclass(frozen=True)
class BandReadings:
    """Readings of frames that follow one another, per frame and band.

    Ratios of powers, not decibels. Shapes are ``(n, 109)`` over `nmr.CENTRES_HZ`, for `ratio`
    ``(n, 150)`` over `roex.CENTRES_HZ`, for `active` ``(n,)``.
    """

    nmr: Signal  # complex residual over mask
    difference_nmr: Signal  # difference of magnitudes over mask, as BS.1387 has it
    quiet: Signal  # complex residual over what noise of ear and room alone mask
    jnd: Signal  # distance of excitations, in just noticeable differences
    ratio: Signal  # excitation of the residual over what is needed to hear it
    active: Mask


@dataclass(frozen=True)
class FrameSeries:
    """Readings of every frame, each array of shape ``(frames,)``.

    A frame is active if reference or test excite some band 15 dB above the noise of the ear
    itself. The room does not count for that, so the same frames are judged in any room.
    """

    time_s: Signal  # middle of the frame
    level_db: Signal  # of the reference, dB SPL, unweighted
    level_dba: Signal  # of reference or test, whichever is louder
    residual_db: Signal  # dB SPL, unweighted
    active: Mask
    nmr_max_db: Signal
    nmr_band_hz: Signal  # centre of the band with the largest noise-to-mask ratio
    nmr_mean: Signal  # over bands; ratios of powers
    difference_mean: Signal
    quiet_max_db: Signal
    jnd_max: Signal
    ratio_max_db: Signal
    ratio_channel_hz: Signal
    padded: bool = False  # the recording was shorter than a frame

    @property
    def frames(self) -> int:
        """Number of frames."""
        return int(self.time_s.shape[0])


def band_powers(reference: Signal, residual: Signal, sine_spl_db: float) -> BandPowers:
    """Powers of frames of a reference and of test minus reference, each ``(n, 2048)`` at 48 kHz."""
    before, change = spectra(reference, sine_spl_db), spectra(residual, sine_spl_db)
    after = before + change
    of_reference, of_residual, of_test = power(before), power(change), power(after)
    of_difference = np.square(np.sqrt(of_reference) - np.sqrt(of_test))
    return BandPowers(
        reference=nmr.BANDS.group(of_reference),
        test=nmr.BANDS.group(of_test),
        noise=nmr.BANDS.group(of_residual),
        difference=nmr.BANDS.group(of_difference),
        background=roex.BANDS.group(of_reference),
        residual=roex.BANDS.group(of_residual),
        reference_level=np.sum(of_reference, axis=1),
        residual_level=np.sum(of_residual, axis=1),
        a_level=np.maximum(
            np.sum(of_reference * A_WEIGHTS, axis=1), np.sum(of_test * A_WEIGHTS, axis=1)
        ),
    )


class Hearing:
    """Both models over frames that follow one another: they remember the last excitations.

    Parameters
    ----------
    room_dba : float or None
        Steady pink noise of the room.
    """

    def __init__(self, room_dba: float | None) -> None:
        self._has_room = room_dba is not None
        self._noise = nmr.INTERNAL_NOISE + nmr.room_noise(room_dba)
        self._channel_noise = roex.room_noise(room_dba)
        self._quiet_mask = nmr.mask(nmr.spread(self._noise[np.newaxis]))
        self._room_state = np.zeros((2, nmr.BANDS.count))
        self._quiet_state = np.zeros((2, nmr.BANDS.count))

    def hear(self, powers: BandPowers) -> BandReadings:
        """Read the next frames."""
        pair = (powers.reference, powers.test)
        reference, test = (
            nmr.excitation(p, self._noise, state)
            for p, state in zip(pair, self._room_state, strict=True)
        )
        alone = (reference, test)
        if self._has_room:
            first, second = (
                nmr.excitation(p, nmr.INTERNAL_NOISE, state)
                for p, state in zip(pair, self._quiet_state, strict=True)
            )
            alone = (first, second)
        above = np.maximum(*alone) / nmr.INTERNAL_NOISE
        mask = nmr.mask(reference)
        return BandReadings(
            nmr=nmr.noise_to_mask(powers.noise, mask),
            difference_nmr=nmr.noise_to_mask(powers.difference, mask),
            quiet=nmr.noise_to_mask(powers.noise, self._quiet_mask),
            jnd=nmr.level_difference_jnd(reference, test),
            ratio=roex.excitation_ratio(powers.background + self._channel_noise, powers.residual),
            active=np.max(above, axis=1) >= 10.0 ** (ACTIVE_DB / 10.0),
        )


def _series(powers: BandPowers, readings: BandReadings, first_frame: int) -> FrameSeries:
    """Figures of each frame; the first one counted from the beginning of the recording."""
    frames = first_frame + np.arange(readings.active.shape[0])
    return FrameSeries(
        time_s=(frames * HOP + FRAME / 2) / RATE_HZ,
        level_db=spl_db(powers.reference_level),
        level_dba=spl_db(powers.a_level),
        residual_db=spl_db(powers.residual_level),
        active=readings.active,
        nmr_max_db=decibels(np.max(readings.nmr, axis=1)),
        nmr_band_hz=nmr.CENTRES_HZ[np.argmax(readings.nmr, axis=1)],
        nmr_mean=np.mean(readings.nmr, axis=1),
        difference_mean=np.mean(readings.difference_nmr, axis=1),
        quiet_max_db=decibels(np.max(readings.quiet, axis=1)),
        jnd_max=np.max(readings.jnd, axis=1),
        ratio_max_db=decibels(np.max(readings.ratio, axis=1)),
        ratio_channel_hz=roex.CENTRES_HZ[np.argmax(readings.ratio, axis=1)],
    )


def _joined(parts: list[FrameSeries], padded: bool) -> FrameSeries:
    names = [field.name for field in fields(FrameSeries) if field.name != "padded"]
    columns = {name: np.concatenate([getattr(part, name) for part in parts]) for name in names}
    return FrameSeries(**columns, padded=padded)


class MaskingMeter:
    """Listens to a reference and a test side by side, in blocks of any size.

    Parameters
    ----------
    sample_rate : int
        Of both, in hertz, 8 to 384 kHz.
    listening : Listening
        Level and room.
    keep_bands : bool
        Keep the powers of all bands, rounded to 24 bits, for `replay`: 140 kB a second of
        recording. Without them a frame leaves 90 bytes.

    Notes
    -----
    Reference and test must be aligned and matched already: gain and delay count as residual.
    """

    def __init__(self, sample_rate: int, listening: Listening, keep_bands: bool = False) -> None:
        self.listening = listening
        self._framer = Framer(sample_rate)
        self._hearing = Hearing(listening.room_dba)
        self._parts: list[FrameSeries] = []
        self._kept: list[list[npt.NDArray[np.float32]]] | None = [] if keep_bands else None
        self._frames = 0

    @property
    def keeps_bands(self) -> bool:
        """Whether the recording can be heard again."""
        return self._kept is not None

    def add(self, reference: npt.ArrayLike, test: npt.ArrayLike) -> None:
        """Hear a block of each, shape ``(n,)``, in the unit of `Listening.sine_spl_db`.

        Raises
        ------
        UsageError
            If the blocks are not one channel of equal length, hold a value that is not finite, or
            come after `finish`.
        """
        self._hear(self._framer.add(reference, test))

    def finish(self) -> FrameSeries:
        """Hear the rest and return the readings of all frames.

        Raises
        ------
        UsageError
            If nothing was heard.
        """
        self._hear(self._framer.finish())
        return _joined(self._parts, self._framer.padded)

    def replay(self, change_db: float) -> FrameSeries:
        """Hear the recording again, louder by `change_db`, in the same room.

        Raises
        ------
        UsageError
            If the bands were not kept or the recording is not finished.
        """
        if self._kept is None or not self._framer.finished:
            raise UsageError("to hear a recording again, keep its bands and finish it first")
        if change_db == 0.0:
            return _joined(self._parts, self._framer.padded)
        factor = 10.0 ** (change_db / 10.0)
        hearing, parts, first = Hearing(self.listening.room_dba), [], 0
        for kept in self._kept:
            powers = BandPowers(*(factor * array.astype(np.float64) for array in kept))
            parts.append(_series(powers, hearing.hear(powers), first))
            first += parts[-1].frames
        return _joined(parts, self._framer.padded)

    def _hear(self, chunks: Iterator[tuple[Signal, Signal]]) -> None:
        for reference, residual in chunks:
            powers = band_powers(reference, residual, self.listening.sine_spl_db)
            if self._kept is not None:
                self._kept.append([array.astype(np.float32) for array in powers])
            self._parts.append(_series(powers, self._hearing.hear(powers), self._frames))
            self._frames += reference.shape[0]


def frame_series(
    reference: npt.ArrayLike, test: npt.ArrayLike, sample_rate: int, listening: Listening
) -> FrameSeries:
    """Readings of all frames of two recordings, shape ``(n,)`` each; see `MaskingMeter`."""
    meter = MaskingMeter(sample_rate, listening)
    meter.add(reference, test)
    return meter.finish()


def band_readings(
    reference: npt.ArrayLike, test: npt.ArrayLike, sample_rate: int, listening: Listening
) -> BandReadings:
    """Readings per frame and band of two short recordings; 6 kB a frame, so for pictures only."""
    framer, hearing = Framer(sample_rate), Hearing(listening.room_dba)
    parts = [
        hearing.hear(band_powers(*chunk, listening.sine_spl_db))
        for source in (framer.add(reference, test), framer.finish())
        for chunk in source
    ]
    names = [field.name for field in fields(BandReadings)]
    return BandReadings(**{n: np.concatenate([getattr(p, n) for p in parts]) for n in names})
