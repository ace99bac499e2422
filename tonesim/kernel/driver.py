"""Op-amp as a driver: integrator with slew limit, output resistance with current limit.

    dv_x/dt = SR s(2 pi GBW (v_in - beta v_o - v_x / A0) / SR),   s(y) = y / sqrt(1 + y^2)
    i_amp   = I s(e / (R I)) + e g,   e = v_x - v_d,  R, I of the source or the sink side

The integrator itself stops at the swing limits, so that it never winds up.
"""

import math
from typing import NamedTuple

from tonesim.kernel.jit import kernel

BLEND_V = 0.2  # across the output resistance: where both sides have parted
LEAK = 1e-6  # conductance beside the current limit, keeps the slope above zero [S]


class DriverParams(NamedTuple):
    """Op-amp and feedback network."""

    omega: float  # 2 pi times gain-bandwidth product, rad/s
    slew: float  # V/s
    per_a0: float  # 1 / DC gain
    beta: float  # ground leg / (ground leg + feedback)
    r_source: float  # output resistance while it gives much current, ohm
    r_sink: float  # while it takes much current, ohm
    i_source: float  # ampere
    i_sink: float  # ampere
    drop_positive: float  # swing limit below the positive rail, volt
    drop_negative: float  # swing limit above the negative rail, volt
    own_supply: bool  # True: the two rails below, False: the stage's rails
    rail_positive: float
    rail_negative: float
    offset: float  # input offset, volt
    i_quiescent: float  # ampere


@kernel
def slewed(y):
    """s(y) = y / sqrt(1 + y^2) and its slope: odd, slope 1 at zero, bounded by 1."""
    r = 1.0 / math.sqrt(1.0 + y * y)
    return y * r, r * r * r


@kernel
def output_current(e, p):
    """Current out of the op-amp for the voltage e across its output resistance; slope.

    Each side has a resistance and a limit of its own. Around zero current both sides share their
    mean, R = r0 + (r1 - r0) e^2 / (e^2 + E^2): no step in the slope, which a class-AB output
    does not have. The current rises with e as r1 <= 2 r0.
    """
    if e > 0.0:
        r1, limit = p.r_source, p.i_source
    else:
        r1, limit = p.r_sink, p.i_sink
    r0 = 0.5 * (p.r_source + p.r_sink)
    e2 = e * e
    share = e2 / (e2 + BLEND_V * BLEND_V)
    r = r0 + (r1 - r0) * share
    s, slope = slewed(e / (r * limit))
    # e dR/de = 2 (r1 - r0) share (1 - share)
    g = slope * (r - 2.0 * (r1 - r0) * share * (1.0 - share)) / (r * r)
    return limit * s + LEAK * e, g + LEAK


@kernel
def rate(v_in, v_o, v_x, p):
    """dv_x/dt without swing limits, and its slope in the error voltage."""
    s, slope = slewed(p.omega * (v_in - p.beta * v_o - v_x * p.per_a0) / p.slew)
    return p.slew * s, p.omega * slope
