"""A half's current from a measured static curve.

    I(u)       current against drive as measured, both halves together, signed; straight beyond
    d          the half's share of it, s ln(1 + exp(I / s)), s = Iq / ln 2
    i(u, h)    l q(d / l),  l = (h - h0) / R;  0 where h <= h0

The two shares have the difference I at any drive, Iq each where it is zero, and the one that
turns off dies away exponentially, as it does with emitter resistors. q is what headroom leaves
of what drive asks for: a chain of power laws whose exponents lie between 0 and 1, so that i
rises with u and with h and never passes d.
"""

import math
from typing import NamedTuple

import numpy as np

from tonesim.kernel.jit import kernel


class MeasuredParams(NamedTuple):
    """A measured curve, seen from one half; arrays of one zero where there is none."""

    on: bool
    u: np.ndarray  # (N,) drive, ascending, volt
    i: np.ndarray  # (N,) I(u), ascending, ampere
    slope: np.ndarray  # (N,) dI/du; at the ends it goes on as it is, siemens
    h0: float  # headroom a half keeps at no current, volt
    r: float  # headroom beyond it over current, where the output stops, ohm
    log_z: np.ndarray  # (K,) logarithms of what is asked, d / l, ascending
    log_q: np.ndarray  # (K,) and of what is left of it, i / l
    idle: float  # Iq, ampere
    base_share: float  # of the half's current that its base takes
    g_feed: float  # feed resistor, siemens (0: none)
    v_feed: float  # rail minus output at which the feed resistor brings nothing, volt
    chained: bool  # between base and drive node a chain, which conducts one way


NOT_MEASURED = MeasuredParams(
    on=False,
    u=np.zeros(1),
    i=np.zeros(1),
    slope=np.zeros(1),
    h0=0.0,
    r=1.0,
    log_z=np.zeros(1),
    log_q=np.zeros(1),
    idle=0.0,
    base_share=0.0,
    g_feed=0.0,
    v_feed=0.0,
    chained=False,
)


@kernel
def interval(x, nodes):
    """Index of the interval between ascending nodes that x lies in, by halving."""
    lo, hi = 0, nodes.size - 1
    while hi - lo > 1:
        middle = (lo + hi) // 2
        if nodes[middle] <= x:
            lo = middle
        else:
            hi = middle
    return lo


@kernel
def curve_current(u, p):
    """I(u) and its slope: cubic Hermite between the nodes, straight beyond them."""
    n = p.u.size - 1
    if u <= p.u[0]:
        return p.i[0] + p.slope[0] * (u - p.u[0]), p.slope[0]
    if u >= p.u[n]:
        return p.i[n] + p.slope[n] * (u - p.u[n]), p.slope[n]
    k = interval(u, p.u)
    wide = p.u[k + 1] - p.u[k]
    t = (u - p.u[k]) / wide
    s = 1.0 - t
    rise = p.i[k + 1] - p.i[k]
    a, b = wide * p.slope[k], wide * p.slope[k + 1]
    i = p.i[k] + t * t * (3.0 - 2.0 * t) * rise + t * s * (s * a - t * b)
    slope = 6.0 * t * s * rise + s * (1.0 - 3.0 * t) * a + t * (3.0 * t - 2.0) * b
    return i, slope / wide


@kernel
def half_share(i, g, p):
    """One half's share of the signed current i, and its slope, of i's slope g."""
    if p.idle == 0.0:
        return (i, g) if i > 0.0 else (0.0, 0.0)
    s = p.idle / math.log(2.0)
    e = math.exp(-abs(i) / s)
    tail = s * math.log1p(e)
    if i > 0.0:
        return i + tail, g / (1.0 + e)
    return tail, g * e / (1.0 + e)


@kernel
def measured_current(u, h, p):
    """Current into the output node at drive u and headroom h, and its slope in u."""
    if h <= p.h0:
        return 0.0, 0.0
    i, g = curve_current(u, p)
    d, d_u = half_share(i, g, p)
    limit = (h - p.h0) / p.r
    z = d / limit
    last = p.log_z.size - 1
    if z <= math.exp(p.log_z[0]):
        return d, d_u
    x = math.log(z)
    if x >= p.log_z[last]:
        return limit * math.exp(p.log_q[last]), 0.0
    k = interval(x, p.log_z)
    power = (p.log_q[k + 1] - p.log_q[k]) / (p.log_z[k + 1] - p.log_z[k])
    q = math.exp(p.log_q[k] + power * (x - p.log_z[k]))
    return limit * q, power * q / z * d_u


@kernel
def measured_drive(i, i_u, h, p):
    """Current into the drive node, and its slope in u, when the half carries i.

    What the feed resistor brings and the base does not take; a chain lets nothing back.
    """
    fed = p.g_feed * max(h - p.v_feed, 0.0)
    left = fed - p.base_share * i
    if p.chained and left <= 0.0:
        return 0.0, 0.0
    return left, -p.base_share * i_u
