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
# to oscillate (common practice, no source). Both pairs let the loop peak by about as much.
STEADY_DEG, MARGINAL_DEG = 45.0, 20.0
STEADY_DB, MARGINAL_DB = 6.0, 3.0
_LOWEST_DECADE, _HIGHEST_DECADE, _PER_DECADE = 0, 9, 60  # frequencies looked at: 1 Hz to 1 GHz
_FASTEST = 1e11  # rad/s; poles beyond stand for no charge at all
_TYPICAL = 2.0 * math.pi * 1e6  # rad/s; unit of time in which poles are looked for
_ROUND_OFF = 1.0  # rad/s; whatever grows more slowly is not told from round-off


@dataclass(frozen=True)
class Margins:
    """Margins of a loop gain; the worst where there are several crossings.

    A margin is None where the loop gain never passes 1 or its phase never passes -180 degrees.
    Both are the least change to the brink of oscillation; negative where the phase is below
    -180 degrees at the crossover, or the gain above 1 at the turnover. `peak_db` is the highest closed-loop gain abs(L / (1 + L)), None
    where there is none because the loop oscillates.
    """

    crossover_hz: float | None
    phase_margin_deg: float | None
    turnover_hz: float | None
    gain_margin_db: float | None
    peak_db: float | None
    peak_hz: float | None


def find_margins(loop: Loop) -> Margins:
    """Margins of a loop whose gain is positive at direct current.

    Parameters
    ----------
    loop : callable
        (F,) frequencies in hertz to (F,) complex loop gain L.

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

    phases = []
    for k in _changes(_gain_db(seen)):
        x = brentq(lambda d: _gain_db(at(d)), decades[k], decades[k + 1], xtol=1e-12)
        phases.append((float(_beyond_deg(at(x))), 10.0**x))
    gains = []
    for k in _changes(_beyond_deg(seen)):
        if max(seen[k].real, seen[k + 1].real) < 0.0:  # else the phase passes 0 degrees
            x = brentq(lambda d: _beyond_deg(at(d)), decades[k], decades[k + 1], xtol=1e-12)
            gains.append((-float(_gain_db(at(x))), 10.0**x))
    phase_margin, crossover = min(phases, key=_distance, default=(None, None))
    gain_margin, turnover = min(gains, key=_distance, default=(None, None))
    peak_db, peak_hz = _peak(loop, decades, seen)
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


def judge(margins: Margins, growing: int) -> Verdict:
    """Verdict on a loop from its worse margin and its growing poles.

    Steady from 45 degrees of phase margin and 6 dB of gain margin on, marginal from 20 degrees
    and 3 dB on. One growing pole is enough for an oscillation, whatever the margins. A margin
    that is None asks nothing.
    """

    def at_least(degrees: float, decibels: float) -> bool:
        phase, gain = margins.phase_margin_deg, margins.gain_margin_db
        enough = phase is None or abs(phase) >= degrees
        return enough and (gain is None or abs(gain) >= decibels)

    if growing or not at_least(MARGINAL_DEG, MARGINAL_DB):
        return "likely to oscillate"
    return "steady" if at_least(STEADY_DEG, STEADY_DB) else "marginal"
