"""Op-amp as a driver: integrator with slew limit, output resistance with current limit.

    dv_x/dt = SR s(2 pi GBW (v_in - beta v_o - v_x / A0) / SR),   s(y) = y / sqrt(1 + y^2)
    i_amp   = I s(e / (R I)) + e g,   e = v_x - v_d,  R, I of the source or the sink side

The integrator itself stops at the swing limits, so that it never winds up.
"""

import math
from typing import NamedTuple

from tonesim.kernel.jit import kernel

LEAK = 1e-6  # conductance beside the current limit, keeps the slope above zero [S]


class DriverParams(NamedTuple):
    """Op-amp and feedback network."""

    omega: float  # 2 pi times gain-bandwidth product, rad/s
    slew: float  # V/s
    per_a0: float  # 1 / DC gain
    beta: float  # ground leg / (ground leg + feedback)
    r_source: float  # output resistance while it gives current, ohm
    r_sink: float  # while it takes current, ohm
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
    """Current out of the op-amp for the voltage e across its output resistance; slope."""
    if e > 0.0:
        r, limit = p.r_source, p.i_source
    else:
        r, limit = p.r_sink, p.i_sink
    s, slope = slewed(e / (r * limit))
    return limit * s + LEAK * e, slope / r + LEAK


@kernel
def rate(v_in, v_o, v_x, p):
    """dv_x/dt without swing limits, and its slope in the error voltage."""
    s, slope = slewed(p.omega * (v_in - p.beta * v_o - v_x * p.per_a0) / p.slew)
    return p.slew * s, p.omega * slope
