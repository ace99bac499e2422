"""The stage at rest: node equations without time, solved on the device laws themselves.

No surface is used here, so idle and clip figures do not depend on the grid, and the sample
loop can be checked against them.
"""

from typing import NamedTuple

import numpy as np

from tonesim.kernel.bracket import MOST_CUTS, narrow, next_share
from tonesim.kernel.driver import output_current
from tonesim.kernel.half import catch_current, first_guess, solve_half
from tonesim.kernel.jit import kernel

_REACH = 10.0  # how far beyond the rails a node is looked for [V]


class StaticPoint(NamedTuple):
    """A stage at rest, with its evidence."""

    v_o: float
    v_d: float
    v_x: float
    i_up: float  # what each half pushes into or pulls out of the output node
    i_low: float
    i_drive_up: float  # what each half's chain pushes into the drive node
    i_drive_low: float
    i_amp: float
    imbalance: float  # larger of the two node currents left over, ampere
    residual: float  # worst node equation inside a half


@kernel
def half_at_rest(u, h, collector_extra, p, x):
    """A half's currents, catch diode included, from a start that always gets home."""
    first_guess(u, h, p, x)
    s = solve_half(u, h, h + collector_extra, p, x)
    return s.i_out - catch_current(h, p), s.i_drive, s.residual


@kernel
def drive_imbalance(v_d, v_o, v_x, v_p, v_n, extra, upper, lower, q, x):
    """Current into the drive node; it falls as v_d rises."""
    i, _g = output_current(v_x - v_d, q)
    _a, b, _r = half_at_rest(v_d - v_o, v_p - v_o, extra, upper, x)
    _c, d, _r2 = half_at_rest(v_o - v_d, v_o + v_n, extra, lower, x)
    return i + b - d


@kernel
def drive_at_rest(v_o, v_x, v_p, v_n, extra, upper, lower, q, x):
    """v_d at which the drive node is balanced."""
    x1, x2 = min(-v_n - _REACH, v_x), max(v_p + _REACH, v_x)
    f1 = drive_imbalance(x1, v_o, v_x, v_p, v_n, extra, upper, lower, q, x)
    f2 = drive_imbalance(x2, v_o, v_x, v_p, v_n, extra, upper, lower, q, x)
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_d = x1 + t * (x2 - x1)
        f = drive_imbalance(v_d, v_o, v_x, v_p, v_n, extra, upper, lower, q, x)
        x1, x2, x3, f1, f2, f3 = narrow(v_d, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    return x1 if abs(f1) < abs(f2) else x2


@kernel
def driver_at_rest(v_in, v_o, v_p, v_n, q):
    """v_x of an op-amp that has settled: A0 times its error, inside its swing."""
    if q.own_supply:
        top, bottom = q.rail_positive - q.drop_positive, q.rail_negative + q.drop_negative
    else:
        top, bottom = v_p - q.drop_positive, -v_n + q.drop_negative
    return min(max((v_in + q.offset - q.beta * v_o) / q.per_a0, bottom), top)


@kernel
def output_imbalance(v_o, v_in, v_p, v_n, g_load, extra, upper, lower, q, x):
    """Current into the output node, op-amp and drive node settled; it falls as v_o rises."""
    v_x = driver_at_rest(v_in, v_o, v_p, v_n, q)
    v_d = drive_at_rest(v_o, v_x, v_p, v_n, extra, upper, lower, q, x)
    a, _b, _r = half_at_rest(v_d - v_o, v_p - v_o, extra, upper, x)
    c, _d, _r2 = half_at_rest(v_o - v_d, v_o + v_n, extra, lower, x)
    return a - c - g_load * v_o


@kernel
def solve_static(v_in, v_p, v_n, g_load, extra, upper, lower, q):
    """Static solution for an input voltage.

    Parameters
    ----------
    v_in : float
        Volts at the op-amp's input; very large values ask for the clip level.
    v_p, v_n : float
        Magnitudes of the rails, volts.
    g_load : float
        Conductance from output to ground, siemens.
    extra : float
        Volts added to the rails at the collectors only (lifts saturation).
    upper, lower : HalfParams
    q : DriverParams

    Returns
    -------
    StaticPoint
    """
    x = np.zeros(4)
    x1, x2 = -v_n - _REACH, v_p + _REACH
    f1 = output_imbalance(x1, v_in, v_p, v_n, g_load, extra, upper, lower, q, x)
    f2 = output_imbalance(x2, v_in, v_p, v_n, g_load, extra, upper, lower, q, x)
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_o = x1 + t * (x2 - x1)
        f = output_imbalance(v_o, v_in, v_p, v_n, g_load, extra, upper, lower, q, x)
        x1, x2, x3, f1, f2, f3 = narrow(v_o, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    v_o = x1 if abs(f1) < abs(f2) else x2
    v_x = driver_at_rest(v_in, v_o, v_p, v_n, q)
    v_d = drive_at_rest(v_o, v_x, v_p, v_n, extra, upper, lower, q, x)
    a, b, r1 = half_at_rest(v_d - v_o, v_p - v_o, extra, upper, x)
    c, d, r2 = half_at_rest(v_o - v_d, v_o + v_n, extra, lower, x)
    i, _g = output_current(v_x - v_d, q)
    imbalance = max(abs(a - c - g_load * v_o), abs(i + b - d))
    return StaticPoint(v_o, v_d, v_x, a, c, b, d, i, imbalance, max(r1, r2))
