"""From a measured static curve to the law of each half.

A row of drive v_d and output v_o, taken at rails +-V into R, says u = v_d - v_o, i = v_o / R and
h = V - v_o (mirrored below zero). Far from clip i depends on u alone: I(u). Where the stage
clips the current falls behind the straight continuation of I(u), limited by the headroom: with
h0 kept at no current, and R_sat = (h - h0) / i at the last row,

    i / l = q(I / l)        l = (h - h0) / R_sat

which gives back every row at its own rails, leaves the dead zone alone when the rails move, and
lets the clip level move with them.
"""

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.interpolate import PchipInterpolator
from scipy.optimize import isotonic_regression

from tonesim.kernel.measured import NOT_MEASURED, MeasuredParams
from tonesim.measured import LEAST_SERIES, METER, MeasuredTable

Array = npt.NDArray[np.float64]

_NOTHING = 1e-6  # share of the largest output that no meter tells from zero
_WINDOW = 0.05  # gain is taken over this share of a side's largest output
_KNEE_GAIN = 0.8  # a side clips where its gain stays below this share of its highest
_STRAIGHT_GAIN = 0.95  # and is straight as far as it keeps this one
_MOST_IDLE = 0.05  # of the current at clip, where a curve without any dead zone asks for more
_FLANK = 0.7  # the continuation is fitted from this share of the knee's current


class Rows(NamedTuple):
    """A table as a circuit sees it: drive, output current and their difference, ascending."""

    u: Array
    i: Array
    output_v: Array


def smooth_rows(table: MeasuredTable, load_ohm: float) -> Rows:
    """Rows of a table without the falls that readings' noise leaves.

    Both the output and drive minus output can only rise with the drive; what falls is
    replaced by its mean (isotonic regression). A closed loop's input counts as a drive once
    it is multiplied by the loop's gain.
    """
    driven = np.array(table.driven_v) * table.drive_gain
    y = np.asarray(isotonic_regression(np.array(table.output_v)).x)
    y = np.where(np.abs(y) < _NOTHING * np.max(np.abs(y)), 0.0, y)
    series = LEAST_SERIES * y
    u = np.asarray(isotonic_regression(driven - y - series).x) + series
    kept = np.concatenate([[True], np.diff(u) > 1e-9])
    return Rows(u[kept], y[kept] / load_ohm, y[kept])


def knee_row(rows: Rows) -> int:
    """Last row at which the upper side still follows its drive.

    Gain is taken from each row over a stretch of drive of at least 5 % of the largest output,
    which readings with a noise of 0.5 % bear. The knee lies where it stays below 80 % of its
    highest; a kink inside the last stretch is found by the gain from its beginning, and rows
    reached by a step of less gain than that belong to clip.
    """
    x, y = rows.u + rows.output_v, rows.output_v
    first = int(np.argmax(y > 0.0))
    # The step out of the other side's currents is no gain of this one.
    start = first - 1 if y[first - 1] == 0.0 else first
    stretch = _WINDOW * y[-1]
    ends = np.minimum(np.searchsorted(x, x + stretch), x.size - 1)
    gains = np.zeros(x.size)
    apart = ends > np.arange(x.size)
    gains[apart] = (y[ends] - y[:])[apart] / (x[ends] - x)[apart]
    gains[:start] = 0.0
    highest = float(np.max(gains))
    last = int(np.flatnonzero(gains >= _KNEE_GAIN * highest)[-1])
    within = np.arange(last + 1, ends[last] + 1)
    kept = within[(y[within] - y[last]) >= _STRAIGHT_GAIN * highest * (x[within] - x[last])]
    knee = max(int(kept[-1]) if kept.size else last, first)
    steps = np.diff(y) / np.diff(x)
    while knee > first and steps[knee - 1] < _KNEE_GAIN * highest:
        knee -= 1
    return knee


def _continuation(rows: Rows, knee: int) -> float:
    """Slope dI/du by which the upper side goes on beyond its knee, siemens."""
    flank = np.flatnonzero(rows.i[: knee + 1] >= _FLANK * rows.i[knee])
    if flank.size < 3:
        flank = np.array([max(knee - 1, 0), knee])
    i, u = rows.i[flank], rows.u[flank]
    spread = i - np.mean(i)
    ohm = float(spread @ (u - np.mean(u)) / (spread @ spread))
    least = LEAST_SERIES * rows.output_v[knee] / rows.i[knee]
    # The cubic that ends here must not pass beyond its nodes (see `surface.limit_slopes`).
    steepest = 3.0 * (rows.i[knee] - rows.i[knee - 1]) / (rows.u[knee] - rows.u[knee - 1])
    return float(min(1.0 / max(ohm, least), steepest))


def _asked(rows: Rows, knee: int, slope: float) -> Array:
    """Current that the straight continuation asks for, from the knee's row on."""
    return np.asarray(rows.i[knee] + slope * (rows.u[knee:] - rows.u[knee]))


def find_knee(rows: Rows) -> tuple[int, float]:
    """Knee's row of the upper side and the slope beyond it, siemens.

    Headroom can only take more of what is asked as it gets less. Where a later row keeps more
    of it again the curve was not at its limit yet, and the knee lies there.
    """
    knee = knee_row(rows)
    while True:
        slope = _continuation(rows, knee)
        kept = rows.i[knee:] / _asked(rows, knee, slope)
        late = np.flatnonzero(kept > np.minimum.accumulate(kept) * (1.0 + METER))
        if not late.size:
            return knee, slope
        knee += int(late[-1])


def _kept_current(
    rows: Rows, knee: int, slope: float, headroom_v: Array, idle_a: float
) -> tuple[float, Array, Array]:
    """R_sat, and log z and log q from the knee on: exponents between 0 and 1, ends at q = 1."""
    asked, h = _asked(rows, knee, slope), headroom_v[knee:]
    # This half carries what flows through the other as well.
    other = np.zeros(asked.size)
    if idle_a > 0.0:
        scale = idle_a / math.log(2.0)
        other = scale * np.log1p(np.exp(-asked / scale))
    share, i = asked + other, rows.i[knee:] + other
    r = float(h[-1] / i[-1])
    log_z, log_q = np.log(share * r / h), np.log(i * r / h)
    z, q = [log_z[0]], [log_q[0]]
    for z1, q1 in zip(log_z[1:], log_q[1:], strict=True):
        if z1 > z[-1]:
            q.append(q[-1] + min(max(q1 - q[-1], 0.0), z1 - z[-1]))
            z.append(z1)
    # One node alone says: whatever is asked, up to this limit.
    if len(z) == 1:
        z.append(z[0] + 1.0)
        q.append(q[0])
    return r, np.array(z), np.array(q)


def _least_idle(rows: Rows, v_t: float) -> float:
    """Least idle current of either half that gives the slope dI/du where the output is zero.

    Two equal halves without emitter resistors give Rout = (Vt / Iq) / 2 (Sedra and Smith, class
    AB stage), a slope of 2 Iq / Vt; resistors would ask for more current.
    """
    k = int(np.argmax(rows.i > 0.0))
    slope = (rows.i[k] - rows.i[k - 1]) / (rows.u[k] - rows.u[k - 1])
    return float(min(0.5 * v_t * slope, _MOST_IDLE * min(rows.i[-1], -rows.i[0])))


def measured_halves(
    table: MeasuredTable,
    rails_v: tuple[float, float],
    load_ohm: float,
    least_headroom_v: tuple[float, float],
    idle_a: float | None,
    v_t: float,
) -> tuple[MeasuredParams, MeasuredParams]:
    """Laws of both halves from a measured curve.

    Parameters
    ----------
    table : MeasuredTable
    rails_v : (2,) tuple of float
        Magnitudes of the positive and the negative rail while it was measured, volts.
    load_ohm : float
        Load while it was measured.
    least_headroom_v : (2,) tuple of float
        Rail minus output that either half keeps at no current; less than at the last row.
    idle_a : float or None
        Idle current of either half, amperes; None: the least that gives the slope at rest.
    v_t : float
        Thermal voltage of the pair, volts.

    Returns
    -------
    upper, lower : MeasuredParams
        Without base current and feed resistor.
    """
    up = smooth_rows(table, load_ohm)
    down = Rows(*(-part[::-1] for part in up))
    ends = (find_knee(up), find_knee(down))
    if idle_a is None:
        idle_a = _least_idle(up, v_t) if table.kind == "drive" else 0.0
    halves = []
    for side, rows in enumerate((up, down)):
        (knee, slope), (other_knee, other_slope) = ends[side], ends[1 - side]
        headroom = rails_v[side] - least_headroom_v[side] - rows.output_v
        r, log_z, log_q = _kept_current(rows, knee, slope, headroom, idle_a)
        span = slice(rows.u.size - 1 - other_knee, knee + 1)
        u, i = np.ascontiguousarray(rows.u[span]), np.ascontiguousarray(rows.i[span])
        inner = PchipInterpolator(u, i).derivative()(u)
        inner[0], inner[-1] = other_slope, slope
        halves.append(
            NOT_MEASURED._replace(
                on=True,
                u=u,
                i=i,
                slope=inner,
                h0=least_headroom_v[side],
                r=r,
                log_z=log_z,
                log_q=log_q,
                idle=idle_a,
            )
        )
    return halves[0], halves[1]
