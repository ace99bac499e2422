"""Device laws: current and conductance of a junction and of a bipolar transistor.

Equations and the meaning of the parameters: Gummel-Poon reduced to the terms a power
transistor's data sheet can fix (Sedra & Smith, "Microelectronic Circuits", ch. 6):

    i_f = Is (exp(v_be / (n Vt)) - 1)      forward transport current
    i_r = Is (exp(v_bc / Vt) - 1)          reverse transport current
    i_c = i_f - i_r (1 + 1/beta_r)
    i_b = i_f (1 + (i_f / Ik)^m) / hfe + i_r / beta_r
"""

import math
from typing import NamedTuple

from tonesim.kernel.jit import kernel

# Above this exponent the exponential goes on as a straight line, so that no start overflows.
_STRAIGHT = 90.0
_EXP_STRAIGHT = math.exp(_STRAIGHT)


class BipolarParams(NamedTuple):
    """One transistor's law at its junction temperature; signs as for an NPN."""

    i_s: float  # transport saturation current, ampere
    n_vt: float  # emission coefficient times thermal voltage, volt
    v_t: float  # thermal voltage, volt
    hfe: float  # current gain at low current
    i_k: float  # knee current of the gain, ampere
    m: float  # steepness of the fall above the knee
    beta_r: float  # reverse current gain


@kernel
def exp_straight(x):
    """exp(x) and its slope, continued as a straight line above 90."""
    if x > _STRAIGHT:
        return _EXP_STRAIGHT * (1.0 + x - _STRAIGHT), _EXP_STRAIGHT
    e = math.exp(x)
    return e, e


@kernel
def junction(v, i_s, n_vt):
    """Current and conductance of a junction, Is (exp(v / nVt) - 1)."""
    e, slope = exp_straight(v / n_vt)
    return i_s * (e - 1.0), i_s * slope / n_vt


@kernel
def bipolar(v_be, v_bc, p):
    """Base and collector current of a transistor with their four slopes.

    Parameters
    ----------
    v_be, v_bc : float
        Junction voltages, inside the series resistances, in volts.
    p : BipolarParams

    Returns
    -------
    i_b, i_c, di_b/dv_be, di_b/dv_bc, di_c/dv_be, di_c/dv_bc : float
        Amperes and siemens.
    """
    i_f, g_f = junction(v_be, p.i_s, p.n_vt)
    i_r, g_r = junction(v_bc, p.i_s, p.v_t)
    if i_f > 0.0:
        knee = (i_f / p.i_k) ** p.m
        i_b = i_f * (1.0 + knee) / p.hfe
        g_b = g_f * (1.0 + (1.0 + p.m) * knee) / p.hfe
    else:
        i_b = i_f / p.hfe
        g_b = g_f / p.hfe
    back = 1.0 / p.beta_r
    return (
        i_b + i_r * back,
        i_f - i_r * (1.0 + back),
        g_b,
        g_r * back,
        g_f,
        -g_r * (1.0 + back),
    )
