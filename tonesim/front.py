"""Front end in numbers: tone network by nodal analysis, taper of the volume pot, discretisation.

Signal order: jack, gain stage (clips hard), tone network, buffer, volume. The tone network is
the negative-feedback one of Baxandall ("Negative-feedback tone control", Wireless World,
October 1952) without a centre tap on the treble pot:

                 +--bass_f--+--bass_f--+
    in--bass_end-+---- bass pot -------+-bass_end--out      wiper--bass_wiper--> virtual earth
    in--treble_end---- treble pot -----treble_end--out      wiper--treble_f----> virtual earth

Its amplifier is ideal: the summing point stays at 0 V, the output takes any current, and the
gain stage before it has no source resistance. Such an amplifier turns the signal over; the buffer
behind it turns it back, and is a plain follower where there is no network, so that the front end
keeps polarity either way. Only the gain stage clips.
"""

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from tonesim.circuit import Front, Matrix, Tone
from tonesim.kernel.front import STATES, FrontParams

# A wiper never gets nearer to the end of its track than this share, 1 ohm of 100 kilohm (common
# practice, no source): without it a bass capacitor would be shorted and its state would vanish.
_LEAST_TRACK = 1e-5

# Nodes: the first five are unknown; the input is given, the virtual earth at 0 V.
_UPPER, _WIPER, _LOWER, _TREBLE, _OUT, _IN, _EARTH = range(7)
_UNKNOWN = (_UPPER, _WIPER, _LOWER, _TREBLE, _OUT)
# Where currents must balance: not at the output, whose amplifier takes what comes.
_BALANCED = (_UPPER, _WIPER, _LOWER, _TREBLE, _EARTH)

Branch = tuple[int, int, float]


class ToneSpace(NamedTuple):
    """Continuous state space of the tone network: dw/dt = A w + B v_in, v_out = C w + D v_in.

    The states are the voltages of the three capacitors.
    """

    a: Matrix
    b: Matrix
    c: Matrix
    d: float


def taper(position: float, middle: float) -> float:
    """Share of the signal at a volume pot's wiper.

    Parameters
    ----------
    position : float
        Rotation, 0 to 1.
    middle : float
        Share at half rotation, above 0 and below 1; 0.5 is a linear track. Logarithmic (audio)
        tracks have 0.10 to 0.15 (common practice, no source).

    Returns
    -------
    float
        (b^position - 1) / (b - 1) with sqrt(b) = 1 / middle - 1: exactly 0 and 1 at the ends,
        `middle` in the middle, and rising throughout.

    Examples
    --------
    >>> [round(taper(position, 0.1), 3) for position in (0.0, 0.25, 0.5, 1.0)]
    [0.0, 0.025, 0.1, 1.0]
    """
    if middle == 0.5:
        return position
    log_b = 2.0 * math.log(1.0 / middle - 1.0)
    return math.expm1(position * log_b) / math.expm1(log_b)


def _branches(tone: Tone) -> tuple[list[Branch], list[Branch]]:
    """Resistors and capacitors of the tone network: node, node, value."""
    to_in = max(1.0 - tone.bass, _LEAST_TRACK) * tone.bass_pot_ohm
    to_out = max(tone.bass, _LEAST_TRACK) * tone.bass_pot_ohm
    resistors = [
        (_IN, _UPPER, tone.bass_end_ohm),
        (_UPPER, _WIPER, to_in),
        (_WIPER, _LOWER, to_out),
        (_LOWER, _OUT, tone.bass_end_ohm),
        (_WIPER, _EARTH, tone.bass_wiper_ohm),
        (_IN, _TREBLE, tone.treble_end_ohm + (1.0 - tone.treble) * tone.treble_pot_ohm),
        (_TREBLE, _OUT, tone.treble_end_ohm + tone.treble * tone.treble_pot_ohm),
    ]
    capacitors = [
        (_UPPER, _WIPER, tone.bass_f),
        (_WIPER, _LOWER, tone.bass_f),
        (_TREBLE, _EARTH, tone.treble_f),
    ]
    return resistors, capacitors


def tone_space(tone: Tone) -> ToneSpace:
    """State space of the tone network, inverting as it is, from its parts by nodal analysis.

    With every capacitor replaced by a source of its voltage w, what is left is resistive:

        [ G   K ] [ v ]   [ -G_in v_in ]
        [ K'  0 ] [ i ] = [  w         ]        dw/dt = i / capacitance

    with the node voltages v and the capacitor currents i unknown, and K which capacitor leaves or
    enters which node (C.-W. Ho, A. E. Ruehli, P. A. Brennan, "The modified nodal approach to
    network analysis", IEEE Trans. Circuits and Systems CAS-22, 1975).

    Parameters
    ----------
    tone : Tone

    Returns
    -------
    ToneSpace
        A (3, 3), B (3,), C (3,), D.
    """
    resistors, capacitors = _branches(tone)
    conductance = np.zeros((7, 7))
    for one, other, ohm in resistors:
        conductance[[one, other], [one, other]] += 1.0 / ohm
        conductance[[one, other], [other, one]] -= 1.0 / ohm
    incidence = np.zeros((7, STATES))
    for k, (one, other, _) in enumerate(capacitors):
        incidence[[one, other], k] = 1.0, -1.0
    nodes = len(_UNKNOWN)
    system = np.zeros((nodes + STATES, nodes + STATES))
    system[:nodes, :nodes] = conductance[np.ix_(_BALANCED, _UNKNOWN)]
    system[:nodes, nodes:] = incidence[_BALANCED, :]
    system[nodes:, :nodes] = incidence[_UNKNOWN, :].T
    given = np.zeros((nodes + STATES, STATES + 1))  # one column a capacitor, the last the input
    given[nodes:, :STATES] = np.eye(STATES)
    given[:nodes, STATES] = -conductance[_BALANCED, _IN]
    solved = np.linalg.solve(system, given)
    rates = solved[nodes:] / np.array([[farad] for _, _, farad in capacitors])
    out = solved[_OUT]
    return ToneSpace(rates[:, :STATES], rates[:, STATES], out[:STATES], float(out[STATES]))


def _space(front: Front) -> ToneSpace:
    """Everything behind the gain stage: network, buffer and volume; no states without network."""
    level = taper(front.volume, front.volume_middle)
    if front.tone is None:
        return ToneSpace(np.zeros((0, 0)), np.zeros(0), np.zeros(0), level)
    network = tone_space(front.tone)
    return network._replace(c=-level * network.c, d=-level * network.d)


def front_response(front: Front, frequency_hz: npt.ArrayLike) -> npt.NDArray[np.complex128]:
    """Transfer function of the front end from jack to wiper of the volume pot, below clipping.

    Parameters
    ----------
    front : Front
    frequency_hz : (N,) array_like

    Returns
    -------
    (N,) ndarray of complex
        gain (C (s - A)^-1 B + D) at s = 2 pi j f.
    """
    s = 2j * np.pi * np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    space = _space(front)
    eye = np.eye(space.b.size)
    h = [space.c @ np.linalg.solve(k * eye - space.a, space.b) + space.d for k in s]
    return np.asarray(front.gain * np.array(h, dtype=complex))


def discretise_front(front: Front, dt: float, gain: float = 1.0) -> FrontParams:
    """Step of the front end by the trapezoidal rule (see kernel/front.py).

    Parameters
    ----------
    front : Front
    dt : float
        Step in seconds.
    gain : float
        Linear gain behind the volume pot.

    Returns
    -------
    FrontParams
        With F = (1 - dt/2 A)^-1: P = F (1 + dt/2 A), Q = (P + 1) F dt/2 B, C as it is, and
        D + C F dt/2 B. What the kernel adds by taking means is in its own notes.
    """
    space = _space(front)
    n = space.b.size
    p, q, c = np.zeros((STATES, STATES)), np.zeros(STATES), np.zeros(STATES)
    d = space.d
    if n:
        eye = np.eye(n)
        inverse = np.linalg.inv(eye - 0.5 * dt * space.a)
        p = inverse @ (eye + 0.5 * dt * space.a)
        at_once = 0.5 * dt * (inverse @ space.b)
        q = (p + eye) @ at_once
        c = gain * space.c
        d += float(space.c @ at_once)
    return FrontParams(
        gain=front.gain,
        top=front.clip_positive_v,
        bottom=front.clip_negative_v,
        p=np.ascontiguousarray(p),
        q=np.ascontiguousarray(q),
        c=np.ascontiguousarray(c),
        d=gain * d,
    )
