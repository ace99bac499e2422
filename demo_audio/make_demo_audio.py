"""Make the three demo recordings: an electric guitar straight into an interface, computed.

Run by hand: ``python demo_audio/make_demo_audio.py [FOLDER]`` (by default the script's folder).
The music, the player and the guitar are invented. Every run gives the same bytes.

Each string is a set of damped modes in two polarisations (Fletcher and Rossing, "The Physics of
Musical Instruments", ch. 2 and 9). A note is one modal state that strokes add to and that palm,
pick and fingers damp; nothing is ever cut off or faded. The pickup reads the displacement, bends it
a little, differentiates it, and drives its own inductance, the pots and the cable.
All values below are typical ones from memory.
"""

from __future__ import annotations

import sys
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path

import numpy as np
import numpy.typing as npt
import soundfile as sf
from scipy import signal

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

RATE = 48_000
FULL_SCALE_V = 4.4  # peak volts at the jack that the interface turns into 0 dBFS (about +12 dBu)
BLOCK = 32  # frames over which damping and tension are taken as constant
CHUNK = 256  # blocks computed at once; silent modes are left out chunk by chunk
HIGHEST_MODE_HZ = 14_000.0
INAUDIBLE_M_S = 2e-6  # a mode slower than this under the pickup is left out
SCALE_M = 0.648
YOUNG_PA = 200e9
PALM_M = 0.016  # middle of the resting palm, from the bridge
A4_HZ = 440.0  # ISO 16


@dataclass(frozen=True)
class String:
    """A steel string: open pitch (MIDI number), tension, core diameter, losses, magnetic pull."""

    midi: int
    tension_n: float
    core_m: float
    air_loss_per_s: float
    bending_loss: float
    pull: float


# A 0.010 to 0.046 inch set at 648 mm, by string number.
STRINGS = {
    6: String(40, 78.0, 0.43e-3, 1.25, 1.1e-2, 1.80),
    5: String(45, 87.0, 0.39e-3, 1.35, 1.0e-2, 1.50),
    4: String(50, 82.0, 0.33e-3, 1.5, 8.0e-3, 1.20),
    3: String(55, 74.0, 0.43e-3, 1.6, 2.5e-3, 1.00),
    2: String(59, 68.5, 0.33e-3, 1.9, 2.0e-3, 0.75),
    1: String(64, 72.0, 0.254e-3, 2.3, 1.5e-3, 0.65),
}


@dataclass(frozen=True)
class Pickup:
    """Coils by distance from the bridge, and the circuit from the winding to the interface."""

    coils_m: tuple[float, ...]
    volts_per_m_s: float
    henry: float
    ohm: float
    pot_ohm: float
    hum_db: float
    farad: float = 620e-12  # winding and about 5 m of cable
    eddy_ohm: float = 900e3
    tone_farad: float = 22e-9
    interface_ohm: float = 1e6
    aperture_m: float = 4e-3
    bend_m: float = 6e-3  # displacement over which the field grows e-fold


@dataclass(frozen=True)
class Stroke:
    """One string struck once; times in seconds, height of the pluck and pick position in metres."""

    at: float
    string: int
    fret: int
    until: float
    height_m: float
    pick_m: float = 0.11
    palm: float = 0.0
    choke_per_s: float = 0.0
    vibrato_cents: float = 0.0
    up: bool = False


@dataclass
class Voice:
    """The strokes that act on one string at one fret, until the finger goes elsewhere."""

    string: int
    fret: int
    strokes: list[Stroke] = field(default_factory=list)
    leave: float = np.inf  # when the string is wanted for another fret


@dataclass(frozen=True)
class Modes:
    """Modes of one string at one fret, both polarisations in a row, shape (modes,).

    `reach` is the displacement seen by each coil per metre of modal amplitude, (modes, coils).
    """

    omega: Array
    sigma: Array
    wavenumber: Array
    cosine: Array  # share of a vertical pluck that this polarisation takes
    sine: Array  # share of a sideways pluck
    reach: Array
    stretch: float  # relative rise of pitch per unit of strain, E A / (2 T)

    def only(self, use: npt.NDArray[np.bool_]) -> Modes:
        """The chosen modes."""
        return Modes(
            self.omega[use],
            self.sigma[use],
            self.wavenumber[use],
            self.cosine[use],
            self.sine[use],
            self.reach[use],
            self.stretch,
        )


def note_hz(string: int, fret: int) -> float:
    """Equal-tempered pitch, A4 = 440 Hz."""
    return float(A4_HZ * 2.0 ** ((STRINGS[string].midi + fret - 69) / 12))


def inharmonicity(string: int, length_m: float) -> float:
    """B = pi^3 E d^4 / (64 T L^2) in f_n = n f sqrt(1 + B n^2) (Fletcher and Rossing, ch. 2)."""
    s = STRINGS[string]
    return np.pi**3 * YOUNG_PA * s.core_m**4 / (64.0 * s.tension_n * length_m**2)


def string_modes(string: int, fret: int, pickup: Pickup) -> Modes:
    """Modes of one string at one fret: pitch, loss and what the pickup sees of them.

    The loss factor is friction in the string, air and bending added up (the form used by Woodhouse,
    Acta Acustica 90, 2004), and the neck's resonances where a partial meets one. The irregularities
    are seeded by string and fret: the same place on the neck always sounds the same.
    """
    s, length = STRINGS[string], SCALE_M * 2.0 ** (-fret / 12)
    b, f1 = inharmonicity(string, length), note_hz(string, fret)
    n = np.arange(1, 400)
    hz = f1 * n * np.sqrt((1 + b * n**2) / (1 + b))
    n, hz = n[hz < HIGHEST_MODE_HZ], hz[hz < HIGHEST_MODE_HZ]
    omega, k = 2 * np.pi * hz, np.pi * n / length
    friction = (1.6e-4 if string < 4 else 2.4e-4) * (1.0 if fret == 0 else 1.5)
    loss = (friction + s.air_loss_per_s / omega + s.bending_loss * b * n**2) / (1 + b * n**2)
    neck = sum(1.3 / (1 + (40 * (hz / f - f / hz)) ** 2) for f in (171.0, 393.0, 702.0))
    rng = np.random.default_rng([7, string, fret])
    uneven = np.exp(0.15 * rng.standard_normal((2, n.size)))
    flat, steep = uneven * (loss * omega / 2)
    lean = np.deg2rad(24 + 5 * rng.standard_normal())  # axes of the two polarisations
    apart = 2.5e-4 * (1 + 0.5 * rng.standard_normal(n.size))
    eye = np.exp(-0.5 * (k * pickup.aperture_m) ** 2) * s.pull
    reach = eye[:, None] * np.sin(k[:, None] * np.array(pickup.coils_m)) / len(pickup.coils_m)
    one = np.ones(n.size)
    return Modes(
        omega=np.concatenate([omega * (1 - apart / 4), omega * (1 + apart)]),
        sigma=np.concatenate([1.25 * steep + neck, 0.7 * flat + 0.2 * neck]),
        wavenumber=np.concatenate([k, k]),
        cosine=np.concatenate([one * np.cos(lean), one * -np.sin(lean)]),
        sine=np.concatenate([one * np.sin(lean), one * np.cos(lean)]),
        reach=np.concatenate([reach * np.cos(lean), reach * -np.sin(lean)]),
        stretch=YOUNG_PA * np.pi * s.core_m**2 / 4 / (2 * s.tension_n),
    )


def pluck(modes: Modes, stroke: Stroke, angle: float) -> Array:
    """Modal amplitudes of a string drawn aside to a corner under the pick and let go.

    Parameters
    ----------
    modes, stroke
        The string, and where and how far it is drawn.
    angle
        Direction of the pluck in radians from the vertical.

    Returns
    -------
    ndarray, (modes,)
        2 h sin(k x) / (k^2 x (L - x)), for every polarisation its share, in metres. A soft stroke
        slides off the rounded pick more slowly, which takes the highest modes.
    """
    k, length = modes.wavenumber, np.pi / modes.wavenumber[0]
    corner = 2 * stroke.height_m * np.sin(k * stroke.pick_m)
    corner = corner / (k**2 * stroke.pick_m * (length - stroke.pick_m))
    slip_s = 2.8e-5 + 4.4e-5 * np.exp(-stroke.height_m / 1e-3)
    width_m = 1.2e-3
    soft = np.exp(-0.5 * (modes.omega * slip_s) ** 2 - 0.5 * (k * width_m) ** 2)
    share = modes.cosine * np.cos(angle) + modes.sine * np.sin(angle)
    return np.asarray(corner * soft * share, dtype=np.float64)


def slap(modes: Modes, stroke: Stroke, rng: np.random.Generator) -> Complex:
    """What a string adds to its motion when it meets a fret: a short impulse at that fret."""
    fret_m = SCALE_M * 2.0 ** (-rng.uniform(14, 20) / 12)
    speed = 0.3 * max(stroke.height_m - 1.7e-3, 0.0) * rng.uniform(0.3, 1.0)
    k, dull = modes.wavenumber, np.exp(-0.5 * (modes.omega * 2.5e-5) ** 2)
    kick = speed * np.sin(k * fret_m) * np.exp(-0.5 * (k * 2e-3) ** 2) * dull * modes.cosine
    return np.asarray(-1j * kick / modes.omega * modes.omega[0], dtype=np.complex128)


def ring(
    modes: Modes, state: Complex, profile: Array, damping: Array, bend: Array
) -> tuple[Array, Complex]:
    """Let a string ring on from a state.

    From one block border to the next a mode turns and shrinks at one complex rate, that of its own
    pitch and loss with tension, vibrato and damping added; at the borders nothing jumps.

    Parameters
    ----------
    modes
        The string.
    state : (modes,)
        Complex amplitudes in metres; displacement is the real part.
    profile : (kinds, modes)
        How much each kind of damping acts on each mode.
    damping : (kinds, frames + 1)
        Running integral of each kind of damping, no unit.
    bend : (frames + 1,)
        Running integral of the relative change of pitch, in seconds.

    Returns
    -------
    ndarray, (frames, coils)
        Displacement under each coil, in metres.
    ndarray, (modes,)
        The state after the last frame.
    """
    frames = bend.size - 1
    out = np.zeros((frames, modes.reach.shape[1]))
    for start in range(0, frames, BLOCK * CHUNK):
        stop = min(start + BLOCK * CHUNK, frames)
        here = slice(start, stop + 1)
        fast = np.abs(state) * modes.omega * np.abs(modes.reach).max(axis=1)
        use = fast > INAUDIBLE_M_S
        state, lost = np.zeros_like(state), state
        if np.any(use):
            out[start:stop], state[use] = _ring_chunk(
                modes.only(use), lost[use], profile[:, use], damping[:, here], bend[here]
            )
    return out, state


def _ring_chunk(
    modes: Modes, state: Complex, profile: Array, damping: Array, bend: Array
) -> tuple[Array, Complex]:
    frames = bend.size - 1
    border = np.append(np.arange(0, frames, BLOCK), frames)
    seconds = border / RATE
    # Plain sums, no library matrix product: those start threads and may add in another order.
    shrink = np.einsum("kb,kn->bn", damping[:, border] - damping[:, :1], profile)
    fade = seconds[:, None] * modes.sigma + shrink
    # Strain averaged over a period, (1/2L) int y'^2 dx: what a hard attack adds to the tension.
    strain = np.sum(np.exp(-2 * fade) * (modes.wavenumber * np.abs(state)) ** 2, axis=1) / 8
    gain = np.diff(seconds) * modes.stretch * strain[:-1]
    extra = np.append(0.0, np.cumsum(gain)) + bend[border] - bend[0]
    path = 1j * modes.omega * (seconds + extra)[:, None] - fade
    at_border = state * np.exp(path)
    turn = np.exp(np.diff(path, axis=0) / np.diff(border)[:, None])
    out = np.empty((turn.shape[0], BLOCK, modes.reach.shape[1]))
    now = at_border[:-1].copy()
    for j in range(BLOCK):
        out[:, j] = np.einsum("bn,nc->bc", now.real, modes.reach)
        now *= turn
    out = out.reshape(-1, modes.reach.shape[1])
    return out[:frames], at_border[-1]


def _raise(envelope: Array, start: float, stop: float, level: float, edge: float = 0.012) -> None:
    """Lift an envelope to `level` between two times (s), with soft edges, where it is lower."""
    first, last = round(start * RATE), min(round(min(stop, 1e4) * RATE), envelope.size)
    first = min(max(first, 0), envelope.size)
    if last <= first:
        return
    t = np.arange(last - first) / RATE
    rise = np.minimum(np.minimum((t + 1e-4) / edge, 1.0), (t[::-1] + 1e-4) / (0.3 * edge))
    rise = np.clip(rise, 0.0, 1.0)
    envelope[first:last] = np.maximum(envelope[first:last], level * np.sin(np.pi / 2 * rise) ** 2)


def hands(voice: Voice, modes: Modes, origin: float, frames: int) -> tuple[Array, Array, Array]:
    """How fingers, palm and pick damp a voice over time, and how the fretting finger bends it.

    Returns
    -------
    profile, damping, bend
        As `ring` takes them; the kinds are finger, palm, pick.
    """
    k, first = modes.wavenumber, voice.strokes[0]
    palm = 0.015 + 0.5 * (1 - np.cos(2 * k * PALM_M) * np.exp(-2 * (k * 5e-3) ** 2))
    profile = np.stack([np.ones(k.size), palm, np.sin(k * first.pick_m) ** 2])
    rate, pitch = np.zeros((3, frames)), np.zeros(frames)
    for i, s in enumerate(voice.strokes):
        later = voice.strokes[i + 1].at if i + 1 < len(voice.strokes) else np.inf
        lead = contact_s(s)
        end = min(s.until, voice.leave)
        _raise(rate[2], s.at - origin - lead, s.at - origin, 700.0, 0.002)
        if s.choke_per_s:
            _raise(rate[0], s.at - origin - 0.04, later - origin, s.choke_per_s)
        if s.palm:
            _raise(rate[1], s.at - origin - 0.02, min(later, end + 0.1) - origin, 150 * s.palm)
        if end < later:
            lift = 130.0 if voice.fret else 90.0
            _raise(rate[0], end - origin, later - origin - 0.01, lift, 0.035)
        if s.vibrato_cents:
            t = np.arange(frames) / RATE - (s.at - origin) - 0.35
            grow = np.clip(t / 0.5, 0.0, 1.0) * (t < later - s.at)
            pitch += grow * s.vibrato_cents * (1 - np.cos(2 * np.pi * 4.7 * t)) * np.log(2) / 1200
    damping = np.concatenate([np.zeros((3, 1)), np.cumsum(rate, axis=1)], axis=1) / RATE
    return profile, damping, np.append(0.0, np.cumsum(pitch)) / RATE


def contact_s(stroke: Stroke) -> float:
    """How long the pick holds the string before it lets go: soft strokes take longer."""
    return 0.006 + 0.010 * float(np.exp(-stroke.height_m / 1e-3))


def play_voice(voice: Voice, pickup: Pickup, length_s: float, rng: np.random.Generator) -> Array:
    """Displacement of one voice under each coil, (frames, coils) of the whole recording."""
    modes = string_modes(voice.string, voice.fret, pickup)
    out = np.zeros((round(length_s * RATE), len(pickup.coils_m)))
    begin = round(voice.strokes[0].at * RATE)
    end = min(min(voice.strokes[-1].until, voice.leave) + 0.5, length_s)
    frames = round(end * RATE) - begin
    profile, damping, bend = hands(voice, modes, begin / RATE, frames)
    kicks: list[tuple[int, Complex]] = []
    for s in voice.strokes:
        at = round(s.at * RATE) - begin
        angle = np.deg2rad(rng.uniform(25, 50)) * (1 if s.up else -1) + (np.pi if s.up else 0)
        shape = pluck(modes, s, angle)
        kicks.append((at, shape.astype(np.complex128)))
        drawn = round(contact_s(s) * RATE)
        ramp = 0.5 - 0.5 * np.cos(np.pi * np.arange(drawn) / drawn)
        out[begin + at - drawn : begin + at] += ramp[:, None] * (shape @ modes.reach)
        if s.height_m > 1.7e-3 and not s.palm > 0.9:
            period = RATE / note_hz(s.string, s.fret)
            for hit in range(5):
                late = at + round((hit + 0.5 + 0.04 * rng.standard_normal()) * period)
                kicks.append((late, slap(modes, s, rng) * 0.7**hit))
    kicks = sorted((kick for kick in kicks if kick[0] < frames), key=lambda kick: kick[0])
    state = np.zeros(modes.omega.size, dtype=np.complex128)
    for (at, kick), (until, _) in zip(kicks, [*kicks[1:], (frames, None)], strict=True):
        wave, state = ring(
            modes, state + kick, profile, damping[:, at : until + 1], bend[at : until + 1]
        )
        out[begin + at : begin + until] += wave
    return out


def voices_of(strokes: Iterable[Stroke]) -> list[Voice]:
    """Gather strokes into voices: a string struck again at the same fret rings on."""
    voices: list[Voice] = []
    current: dict[int, Voice] = {}
    for s in sorted(strokes, key=lambda s: s.at):
        voice = current.get(s.string)
        if voice is None or voice.fret != s.fret:
            if voice is not None:
                voice.leave = min(voice.strokes[-1].until, s.at - contact_s(s) - 0.02)
            voice = current[s.string] = Voice(s.string, s.fret)
            voices.append(voice)
        voice.strokes.append(s)
    return voices


def sympathy(strings: dict[int, Array], voices: Sequence[Voice], pickup: Pickup) -> Array:
    """Open strings that nobody holds answer the others through the bridge, (frames, coils)."""
    drive = np.sum(list(strings.values()), axis=0).mean(axis=1)
    force = np.diff(drive, prepend=0.0)
    out = np.zeros((drive.size, len(pickup.coils_m)))
    for number in STRINGS:
        held = np.zeros(drive.size)
        for v in voices:
            if v.string == number:
                _raise(held, v.strokes[0].at - 0.1, min(v.strokes[-1].until, v.leave) + 0.3, 1.0)
        modes = string_modes(number, 0, pickup)
        half = modes.omega.size // 2
        for i in range(8):
            pole = np.exp((1j * modes.omega[i] - modes.sigma[i]) / RATE)
            answer = signal.lfilter([1.2e-3], [1.0, -pole], force * (1 - held)).imag
            out += (answer * (1 - held))[:, None] * modes.reach[i % half]
    return out


def pick_noise(strokes: Iterable[Stroke], frames: int, rng: np.random.Generator) -> Array:
    """Scrape of the pick over the string while it is in contact, in m/s under the pickup."""
    out = np.zeros(frames)
    scrape = signal.butter(2, (900, 5000), "bandpass", fs=RATE, output="sos")
    for s in strokes:
        n = round((contact_s(s) + 0.002) * RATE)
        swell = np.linspace(0, 1, n) ** 2 * np.minimum(np.linspace(n / 60, 0, n), 1.0)
        noise = signal.sosfilt(scrape, rng.standard_normal(n + 200))[200:] * swell
        at = round(s.at * RATE) - round(contact_s(s) * RATE)
        rough = 1.0 if s.string > 3 else 0.4
        out[at : at + n] += rough * noise * (14.0 * s.height_m + 8e-3)
    return out


def squeaks(voices: Sequence[Voice], frames: int, rng: np.random.Generator) -> Array:
    """Fingers leaving or sliding along wound strings between two frets, in m/s under the pickup."""
    out = np.zeros(frames)
    for v, after in pairwise(voices):
        if v.string < 4 or not v.fret or not np.isfinite(v.leave):
            continue
        n = round(rng.uniform(0.05, 0.11) * RATE)
        t = np.linspace(0, 1, n)
        speed = np.sin(np.pi * t) ** 0.7 * rng.uniform(0.7, 1.2)
        turns = np.cumsum(1800 * speed + 220 * rng.standard_normal(n)) / RATE
        tone = sum(np.sin(2 * np.pi * h * turns) / h for h in (1, 2, 3))
        level = 1.2e-3 * rng.uniform(0.3, 1.0) * (1 + 0.2 * abs(after.fret - v.fret))
        at = round((v.leave + 0.005) * RATE)
        n = min(n, frames - at)
        out[at : at + n] += (level * np.sin(np.pi * t) ** 2 * tone)[:n]
    return out


def jack_response(pickup: Pickup, hz: npt.NDArray[np.floating]) -> Complex:
    """Volts at the interface per volt induced: winding L and R against pots, cable and input.

    H = 1 / (1 + Z Y) with Z = R + sL and Y the sum of all that lies across the jack.
    """
    s = 2j * np.pi * np.maximum(hz, 1e-3)
    tone = 1 / (pickup.pot_ohm + 1 / (s * pickup.tone_farad))
    across = s * pickup.farad + 1 / pickup.pot_ohm + tone + 1 / pickup.interface_ohm
    winding = 1 / (1 / (s * pickup.henry) + 1 / pickup.eddy_ohm) + pickup.ohm
    coupling = s / (s + 2 * np.pi * 6.0)  # the interface's coupling capacitors
    return np.asarray(coupling / (1 + winding * across), dtype=np.complex128)


def induced_volts(strings: dict[int, Array], pickup: Pickup, other: Array) -> Array:
    """Field of every string under every coil, bent by nearness, differentiated, at the jack."""
    flux = np.zeros(other.size)
    for wave in strings.values():
        near = pickup.bend_m
        flux += np.sum(near / wave.shape[1] * np.expm1(wave * wave.shape[1] / near), axis=1)
    size = other.size + RATE
    hz = np.fft.rfftfreq(size, 1 / RATE)
    spectrum = 2j * np.pi * hz * np.fft.rfft(flux, size) + np.fft.rfft(other, size)
    converter = 1 / np.sqrt(1 + (hz / 21_500) ** 40)
    spectrum *= jack_response(pickup, hz) * converter * pickup.volts_per_m_s
    return np.asarray(np.fft.irfft(spectrum, size)[: other.size], dtype=np.float64)


def floor_volts(pickup: Pickup, frames: int, rng: np.random.Generator) -> Array:
    """Mains hum with its harmonics, the winding's thermal noise, the interface's own noise."""
    t = np.arange(frames) / RATE
    out = np.zeros(frames)
    mains = 50.0 + 0.01 * np.sin(2 * np.pi * 0.05 * t)
    turn = 2 * np.pi * np.cumsum(mains) / RATE
    for harmonic, below in zip(range(1, 41), _hum_shape(), strict=True):
        level = 10 ** ((pickup.hum_db - below) / 20) * FULL_SCALE_V
        out += level * np.sin(harmonic * turn + rng.uniform(0, 2 * np.pi))
    hz = np.fft.rfftfreq(frames, 1 / RATE)
    white = np.fft.rfft(rng.standard_normal(frames))
    pink = np.sqrt(200.0 / np.maximum(hz, 20.0) + 0.02)
    shaped = np.fft.irfft(white * pink * np.abs(jack_response(pickup, hz)), frames)
    hiss = rng.standard_normal(frames)
    floor = 10 ** (-92 / 20) * FULL_SCALE_V / np.sqrt(2)
    out += floor * shaped / np.std(shaped) + 0.15 * floor * hiss
    return out


def _hum_shape() -> Array:
    """Decibels of each harmonic below the first: odd ones stronger, falling with frequency."""
    h = np.arange(1, 41)
    return np.asarray(14 * np.log10(h) + 0.5 * h + np.where(h % 2, 0.0, 7.0), dtype=np.float64)


def perform(
    strokes: Sequence[Stroke],
    pickup: Pickup,
    length_s: float,
    seed: int,
    *,
    open_ring: bool = False,
) -> Array:
    """Volts at the jack of a whole recording, (frames,)."""
    rng = np.random.default_rng(seed)
    frames = round(length_s * RATE)
    voices = voices_of(strokes)
    strings: dict[int, Array] = {}
    for voice in voices:
        wave = play_voice(voice, pickup, length_s, rng)
        strings[voice.string] = strings[voice.string] + wave if voice.string in strings else wave
    if open_ring:
        strings[0] = sympathy(strings, voices, pickup)
    other = pick_noise(strokes, frames, rng) + squeaks(voices, frames, rng)
    return induced_volts(strings, pickup, other) + floor_volts(pickup, frames, rng)


# --- the three pieces -------------------------------------------------------------------------

NECK_SINGLE = Pickup((0.160,), 0.115, 2.8, 6.5e3, 250e3, hum_db=-80)
MIDDLE_SINGLE = Pickup((0.098,), 0.115, 2.8, 6.5e3, 250e3, hum_db=-79)
BRIDGE_HUMBUCKER = Pickup((0.036, 0.055), 0.13, 4.7, 8.5e3, 500e3, hum_db=-86, eddy_ohm=450e3)

# beat, string, fret, length in beats, height of the pluck in mm, vibrato in cents
QUIET = [
    (0.0, 5, 3, 3.8, 0.75, 0),
    (0.5, 4, 5, 3.2, 0.6, 0),
    (1.0, 3, 4, 0.9, 0.6, 0),
    (1.5, 2, 3, 1.4, 0.65, 0),
    (2.0, 3, 4, 1.9, 0.7, 0),
    (3.0, 2, 5, 0.9, 0.75, 9),
    (3.0, 3, 7, 0.9, 0.6, 0),
    (4.0, 6, 0, 3.9, 0.8, 0),
    (4.5, 4, 2, 3.2, 0.55, 0),
    (5.0, 3, 0, 1.4, 0.6, 0),
    (5.0, 2, 0, 0.9, 0.6, 0),
    (5.5, 1, 3, 0.5, 0.7, 0),
    (6.0, 1, 2, 0.9, 0.65, 0),
    (6.5, 2, 3, 1.4, 0.6, 0),
    (7.0, 3, 2, 0.9, 0.75, 10),
    (8.0, 5, 0, 3.8, 0.85, 0),
    (8.5, 4, 2, 3.0, 0.55, 0),
    (9.0, 3, 2, 1.7, 0.6, 0),
    (9.0, 2, 1, 0.7, 0.65, 0),
    (9.75, 2, 3, 0.9, 0.6, 0),
    (10.25, 1, 0, 1.5, 0.7, 0),
    (11.0, 3, 4, 0.9, 0.65, 0),
    (11.0, 2, 5, 0.9, 0.7, 8),
    (12.0, 6, 0, 9.4, 0.9, 0),
    (12.25, 5, 2, 9.1, 0.7, 0),
    (12.75, 4, 4, 8.6, 0.65, 0),
    (13.5, 3, 0, 7.8, 0.6, 0),
    (13.5, 2, 0, 7.8, 0.65, 0),
]

SHAPES = {  # frets from string 6 to string 1; x is not played
    "Am7": "x02010",
    "Em": "022000",
    "F": "133211",
    "C": "x32033",
    "Bm": "x24432",
    "F#m": "244222",
    "G": "320003",
}
# chord and eight quavers: D down, U up, lower case softer, p palm-muted down, x choked, . ring on
STRUMS = [
    ("Am7", "D.dUxudU"),
    ("Em", "D.dU.UdU"),
    ("F", "D.DUxuDU"),
    ("C", "D.d.DUdu"),
    ("F#m", "pppDpppU"),
    ("Bm", "pppDp.DU"),
    ("G", "D......."),
]

# semiquavers: string, fret, then m palm-muted, P power chord, s single; - ring on, . silence
RIFF = [
    "E0m .   E0m E0m E3P -   -   E0m E0m A1s -   E0m E0m E1P -   -",
    "E0m .   E0m E0m A2P -   -   E0m A0m A0m A1P -   E0m E3s E1s -",
    "E0m .   E0m E0m E3P -   -   E0m E0m A1s -   A0m A0m A3P -   -",
    "E0m E0m E6P -   -   E0m E0m E5P -   -   E0m A0m A1s E3s E1s -",
    "E0P -   -   -   -   -   E0m E0m E1P -   .   E0m E0P -   -   -",
]


def quiet_picking() -> Array:
    """Single notes and double stops, soft, over the neck pickup; open strings answer."""
    rng = np.random.default_rng(11)
    beat, strokes = 60 / 74, []
    for at, string, fret, length, mm, cents in QUIET:
        start = (
            0.7 + at * beat + 0.011 * rng.standard_normal() + 0.012 * (4 - string) * (at % 1 == 0)
        )
        strokes.append(
            Stroke(
                at=start,
                string=string,
                fret=fret,
                until=0.7 + (at + length) * beat + 0.02 * rng.standard_normal(),
                height_m=mm * 1e-3 * float(np.exp(0.12 * rng.standard_normal())),
                pick_m=0.14 + 0.008 * rng.standard_normal(),
                vibrato_cents=float(cents),
                up=string < 4 and at % 1 != 0,
            )
        )
    return perform(strokes, NECK_SINGLE, 19.6, 12, open_ring=True)


def strum(shape: str, kind: str, at: float, until: float, rng: np.random.Generator) -> list[Stroke]:
    """One stroke over a chord: string after string, down from string 6 or up from string 1."""
    numbers = [6 - i for i, fret in enumerate(shape) if fret != "x"]
    if kind == "p":
        numbers = numbers[:3]
    elif kind in "Uu":
        numbers = numbers[::-1][: int(rng.integers(3, 5))]
    elif kind == "d":
        numbers = numbers[: int(rng.integers(4, 6))]
    force = {"D": 1.0, "U": 0.9, "d": 0.85, "u": 0.7, "p": 1.15, "x": 0.95}[kind]
    gap = {"D": 0.011, "d": 0.013, "p": 0.006, "x": 0.007}.get(kind, 0.007)
    pick_m, moment, strokes = 0.12 + 0.01 * rng.standard_normal(), at, []
    for number in numbers:
        strokes.append(
            Stroke(
                at=moment,
                string=number,
                fret=int(shape[6 - number]),
                until=until,
                height_m=1e-3 * force * float(np.exp(0.12 * rng.standard_normal())),
                pick_m=pick_m + 0.002 * rng.standard_normal(),
                palm=0.6 * (kind == "p"),
                choke_per_s=55.0 * (kind == "x"),
                up=kind in "Uu",
            )
        )
        moment += gap * float(np.exp(0.25 * rng.standard_normal()))
    return strokes


def strummed_chords() -> Array:
    """Open and barre chords, down and up, some palm-muted or choked, over the middle pickup."""
    rng = np.random.default_rng(421)
    quaver, strokes = 60 / 104 / 2, []
    for bar, (name, pattern) in enumerate(STRUMS):
        end = 0.6 + (bar + 1) * 8 * quaver - 0.03 + (0.75 if bar + 1 == len(STRUMS) else 0)
        for i, kind in enumerate(pattern):
            if kind == ".":
                continue
            late = 0.008 * rng.standard_normal() + 0.014 * (i % 2)
            at = 0.6 + (bar * 8 + i) * quaver + late - 0.015
            until = end if kind != "x" else at + quaver * 0.9
            strokes += strum(SHAPES[name], kind, at, until + 0.008 * rng.standard_normal(), rng)
    return perform(strokes, MIDDLE_SINGLE, 18.4, 422)


def riff_strokes(token: str, at: float, until: float, rng: np.random.Generator) -> list[Stroke]:
    """The strokes of one token of the riff; a power chord takes root, fifth and octave."""
    root = {"E": 6, "A": 5}[token[0]]
    fret, kind = int(token[1]), token[2]
    notes = [(root, fret)]
    if kind == "P":
        notes += [(root - 1, fret + 2), (root - 2, fret + 2)]
    muted = kind == "m"
    return [
        Stroke(
            at=at + i * 0.004 * float(np.exp(0.3 * rng.standard_normal())),
            string=string,
            fret=number,
            until=until,
            height_m=(2.6 if muted else 1.8) * 1e-3 * float(np.exp(0.07 * rng.standard_normal())),
            pick_m=0.075 + 0.005 * rng.standard_normal(),
            palm=float(np.clip(0.9 + 0.1 * rng.standard_normal(), 0.6, 1.1)) * muted,
            up=muted and bool(rng.random() < 0.25),
        )
        for i, (string, number) in enumerate(notes)
    ]


def low_riff() -> Array:
    """A hard riff on the two lowest strings over the bridge humbucker."""
    rng = np.random.default_rng(31)
    step, strokes = 60 / 116 / 4, []
    tokens = [token for bar in RIFF for token in bar.split()]
    for i, token in enumerate(tokens):
        if token in "-.":
            continue
        stop = i + 1
        while stop < len(tokens) and tokens[stop] == "-":
            stop += 1
        at = 0.5 + i * step + 0.005 * rng.standard_normal()
        ring_on = 1.3 if stop == len(tokens) else -0.012
        strokes += riff_strokes(token, at, 0.5 + stop * step + ring_on, rng)
    return perform(strokes, BRIDGE_HUMBUCKER, 13.4, 32)


RECORDINGS = {
    "quiet_picking": quiet_picking,
    "strummed_chords": strummed_chords,
    "low_riff": low_riff,
}


def write(path: Path, volts: Array) -> None:
    """Write volts as 24-bit mono, FULL_SCALE_V at digital full scale."""
    counts = np.round(volts / FULL_SCALE_V * 2**23).astype(np.int32)
    sf.write(path, counts * 256, RATE, subtype="PCM_24")


def main(folder: Path) -> None:
    """Make all recordings in a folder and say their peaks."""
    for name, make in RECORDINGS.items():
        volts = make()
        write(folder / f"{name}.wav", volts)
        print(f"{name}.wav  {volts.size / RATE:.1f} s  peak {np.max(np.abs(volts)):.3f} V")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
