"""Margins of a feedback loop from its loop gain, and its poles.

Phase margin: 180 degrees + arg L where abs(L) = 1. Gain margin: 1 / abs(L) where
arg L = -180 degrees. Both after K. J. Astrom, R. M. Murray, "Feedback Systems", ch. 10.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy.linalg import eigvals
from scipy.optimize import brentq, minimize_scalar

Response = npt.NDArray[np.complex128]
Matrix = npt.NDArray[np.float64]
Loop = Callable[[npt.NDArray[np.float64]], Response]
Verdict = Literal["steady", "marginal", "likely to oscillate"]

# From the first of each pair on a loop is steady, from the second on marginal, below it likely
# to oscillate. Phase and gain: common practice, no source; both let a loop peak by about as
# much. Damping: ours; it sees what rings beside the crossover, such as the follower itself.
STEADY_DEG, MARGINAL_DEG = 45.0, 20.0
STEADY_DB, MARGINAL_DB = 6.0, 3.0
STEADY_DAMPING, MARGINAL_DAMPING = 0.1, 0.03
_LOWEST_DECADE, _HIGHEST_DECADE, _PER_DECADE = 0, 9, 60  # frequencies looked at: 1 Hz to 1 GHz
_FASTEST = 1e11  # rad/s; poles beyond stand for no charge at all
_TYPICAL = 2.0 * math.pi * 1e6  # rad/s; unit of time in which poles are looked for
_ROUND_OFF = 1.0  # rad/s; whatever grows more slowly is not told from round-off


@dataclass(frozen=True)
class Margins:
    """Margins of a loop gain; the worst where there are several crossings.

    A margin is None where the loop gain never passes 1 or its phase never passes -180 degrees.
    In a loop that holds still both are the least change to the brink of oscillation, the gain
    margin negative if it is a loss of gain; in one that oscillates they are the least of all,
    commonly negative. `peak_db` is the highest closed-loop gain abs(L / (1 + L)), None where an
    oscillation leaves none.
    """

    crossover_hz: float | None
    phase_margin_deg: float | None
    turnover_hz: float | None
    gain_margin_db: float | None
    peak_db: float | None
    peak_hz: float | None


def find_margins(loop: Loop, oscillates: bool = False) -> Margins:
    """Margins of a loop.

    Parameters
    ----------
    loop : callable
        (F,) frequencies in hertz to (F,) complex loop gain L, which is itself stable.
    oscillates : bool
        Whether the closed loop has growing poles, which decides what the worst crossing is.

    Returns
    -------
    Margins
        Crossings are bracketed at 60 frequencies a decade from 1 Hz to 1 GHz, then solved.
    """
    count = (_HIGHEST_DECADE - _LOWEST_DECADE) * _PER_DECADE + 1
    decades = np.linspace(_LOWEST_DECADE, _HIGHEST_DECADE, count)
    seen = loop(10.0**decades)

    def at(decade: float) -> complex:
        return complex(loop(np.array([10.0**decade]))[0])

    phases: list[tuple[float, float]] = []
    for k in _changes(_gain_db(seen)):
        x = brentq(lambda d: _gain_db(at(d)), decades[k], decades[k + 1], xtol=1e-12)
        beyond = float(_beyond_deg(at(x)))
        phases.append((beyond if oscillates else abs(beyond), 10.0**x))
    gains: list[tuple[float, float]] = []
    for k in _changes(_beyond_deg(seen)):
        if max(seen[k].real, seen[k + 1].real) < 0.0:  # else the phase passes 0 degrees
            x = brentq(lambda d: _beyond_deg(at(d)), decades[k], decades[k + 1], xtol=1e-12)
            gains.append((-float(_gain_db(at(x))), 10.0**x))
    nothing = (None, None)
    phase_margin, crossover = min(phases, default=nothing)
    nearest = None if oscillates else _distance
    gain_margin, turnover = min(gains, key=nearest, default=nothing)
    peak_db, peak_hz = (None, None) if oscillates else _peak(loop, decades, seen)
    return Margins(crossover, phase_margin, turnover, gain_margin, peak_db, peak_hz)


def _gain_db(loop_gain: Response | complex) -> npt.NDArray[np.float64]:
    return np.asarray(20.0 * np.log10(np.abs(loop_gain)))


def _beyond_deg(loop_gain: Response | complex) -> npt.NDArray[np.float64]:
    """Phase above -180 degrees, between -180 and 180."""
    return np.asarray(np.degrees(np.angle(-np.asarray(loop_gain))))


def _distance(margin: tuple[float, float]) -> float:
    return abs(margin[0])


def _changes(values: npt.NDArray[np.float64]) -> list[int]:
    """Where the sign changes between a value and the next."""
    above = values > 0.0
    return [int(k) for k in np.flatnonzero(above[:-1] != above[1:])]


def _peak(loop: Loop, decades: npt.NDArray[np.float64], seen: Response) -> tuple[float, float]:
    """Highest closed-loop gain in dB, and its frequency."""
    closed = np.abs(seen / (1.0 + seen))
    k = int(np.argmax(closed))
    around = (decades[max(k - 1, 0)], decades[min(k + 1, decades.size - 1)])

    def depth(decade: float) -> float:
        value = loop(np.array([10.0**decade]))[0]
        return -float(np.abs(value / (1.0 + value)))

    found = minimize_scalar(depth, bounds=around, method="bounded", options={"xatol": 1e-9})
    if -found.fun > closed[k]:
        return 20.0 * math.log10(-found.fun), float(10.0**found.x)
    return 20.0 * math.log10(float(closed[k])), float(10.0 ** decades[k])


def pencil_poles(g: Matrix, c: Matrix) -> Response:
    """Poles in rad/s of a linear network: the finite roots s of det(g + s c) = 0."""
    found = np.asarray(eigvals(g, -c * _TYPICAL))
    found = found[np.isfinite(found)]
    return np.asarray(found[np.abs(found) < _FASTEST / _TYPICAL] * _TYPICAL)


def growing_poles(poles: Response) -> int:
    """How many poles grow; one is enough for an oscillation."""
    return int(np.count_nonzero(poles.real > _ROUND_OFF))


def least_damping(poles: Response, above_hz: float = 0.0) -> float:
    """Least damping ratio, -Re(s) / abs(s), of all poles above a frequency; 1 if none rings."""
    ringing = poles[(np.abs(poles) > 2.0 * math.pi * above_hz) & (poles.imag != 0.0)]
    return float(np.min(-ringing.real / np.abs(ringing), initial=1.0))


def overshoot_percent(damping: float) -> float:
    """Overshoot of a pair of poles after a step, 100 exp(-pi z / sqrt(1 - z^2)).

    K. Ogata, "Modern Control Engineering", transient response of second-order systems.
    """
    if damping >= 1.0:
        return 0.0
    return 100.0 * math.exp(-math.pi * damping / math.sqrt(1.0 - damping * damping))


def judge(margins: Margins, damping: float) -> Verdict:
    """Verdict on a loop from its worst margin and the least damping ratio of its poles.

    Steady from 45 degrees, 6 dB and a damping ratio of 0.1 on, marginal from 20 degrees, 3 dB
    and 0.03 on. A margin that is None asks nothing; a growing pole has a negative damping ratio.
    """

    def reaches(degrees: float, decibels: float, ratio: float) -> bool:
        phase, gain = margins.phase_margin_deg, margins.gain_margin_db
        enough = damping >= ratio and (phase is None or phase >= degrees)
        return enough and (gain is None or abs(gain) >= decibels)

    if not reaches(MARGINAL_DEG, MARGINAL_DB, MARGINAL_DAMPING):
        return "likely to oscillate"
    return "steady" if reaches(STEADY_DEG, STEADY_DB, STEADY_DAMPING) else "marginal"
