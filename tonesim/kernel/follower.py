"""The output pair alone, op-amp taken away: what it makes of the volts at its drive node.

Solved on the device laws themselves, like `kernel/static.py`, but with each point started from
its neighbour, so that whole curves are cheap.
"""

import numpy as np

from tonesim.kernel.bracket import MOST_CUTS, narrow, next_share
from tonesim.kernel.half import catch_current, first_guess, solve_half
from tonesim.kernel.jit import kernel

# Columns of a curve: volts, share, ampere, and the worst node equation inside a half.
OUTPUT, GAIN, UPPER, LOWER, IMBALANCE, RESIDUAL = 0, 1, 2, 3, 4, 5
COLUMNS = 6

_REACH = 10.0  # how far beyond the rails the output is looked for [V]
_DELTA = 1e-4  # half-width of the differences the gain is made of, far below Vt [V]
_SLACK = 1e-9  # a bracket made of the last point is wider by this [V]
_MISSED = 1e-9  # a neighbour's solution that led nowhere leaves more than this [A or V]


@kernel
def half_near(u, h, p, x):
    """Current of a half, catch diode included, and its residual; x (4,) is a solution nearby."""
    s = solve_half(u, h, h, p, x)
    if not s.residual < _MISSED:
        first_guess(u, h, p, x)
        s = solve_half(u, h, h, p, x)
    return s.i_out - catch_current(h, p), s.residual


@kernel
def pair_imbalance(v_o, v_d, rails, g_load, upper, lower, x):
    """Current into the output node, which falls as v_o rises; both halves' own; residual."""
    a, r1 = half_near(v_d - v_o, rails[0] - v_o, upper, x[0])
    b, r2 = half_near(v_o - v_d, v_o + rails[1], lower, x[1])
    return a - b - g_load * v_o, a, b, max(r1, r2)


@kernel
def balance(low, high, v_d, rails, g_load, upper, lower, x):
    """v_o between low and high at which the output node is balanced, and whether it is there."""
    x1, x2 = low, high
    f1 = pair_imbalance(x1, v_d, rails, g_load, upper, lower, x)[0]
    f2 = pair_imbalance(x2, v_d, rails, g_load, upper, lower, x)[0]
    if f1 < 0.0 or f2 > 0.0:
        return x1, False
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_o = x1 + t * (x2 - x1)
        f = pair_imbalance(v_o, v_d, rails, g_load, upper, lower, x)[0]
        x1, x2, x3, f1, f2, f3 = narrow(v_o, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    return (x1 if abs(f1) < abs(f2) else x2), True


@kernel
def follow(v_ds, v_p, v_n, g_load, upper, lower, out):
    """Fill the static curve of the pair.

    The output follows with a gain between 0 and 1, because every element is passive; each point
    therefore lies between the last one and as much above it as the drive node has risen.

    Parameters
    ----------
    v_ds : (N,) ndarray
        Volts at the drive node, ascending.
    v_p, v_n : float
        Magnitudes of the rails, volts.
    g_load : float
        Conductance from output to ground, siemens.
    upper, lower : HalfParams
    out : (N, COLUMNS) ndarray
        Filled with v_o, d v_o / d v_d, the currents of both halves, and what the output node and
        the halves' own nodes leave over.
    """
    rails = np.array([v_p, v_n])
    x = np.zeros((2, 4))
    first_guess(v_ds[0], v_p, upper, x[0])
    first_guess(-v_ds[0], v_n, lower, x[1])
    v_o = 0.0
    for k in range(v_ds.size):
        v_d = v_ds[k]
        found = False
        if k > 0:
            high = v_o + (v_d - v_ds[k - 1]) + _SLACK
            v_o, found = balance(v_o - _SLACK, high, v_d, rails, g_load, upper, lower, x)
        if not found:
            v_o, found = balance(-v_n - _REACH, v_p + _REACH, v_d, rails, g_load, upper, lower, x)
        f1 = pair_imbalance(v_o, v_d - _DELTA, rails, g_load, upper, lower, x)[0]
        f2 = pair_imbalance(v_o, v_d + _DELTA, rails, g_load, upper, lower, x)[0]
        f3 = pair_imbalance(v_o - _DELTA, v_d, rails, g_load, upper, lower, x)[0]
        f4 = pair_imbalance(v_o + _DELTA, v_d, rails, g_load, upper, lower, x)[0]
        f, a, b, residual = pair_imbalance(v_o, v_d, rails, g_load, upper, lower, x)
        out[k, OUTPUT] = v_o
        out[k, GAIN] = (f2 - f1) / (f3 - f4)
        out[k, UPPER] = a
        out[k, LOWER] = b
        out[k, IMBALANCE] = abs(f)
        out[k, RESIDUAL] = residual
