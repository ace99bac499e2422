"""Rail voltage: one explicit step of a source and its reservoir.

A rail is a capacitor fed by a source and drained by the stage. Voltages are magnitudes: the
negative rail is the same code with its sign taken off.
"""

import math
from typing import NamedTuple

from tonesim.kernel.jit import kernel

STIFF, RESISTIVE, RECTIFIED = 0, 1, 2


class RailParams(NamedTuple):
    """One rail."""

    kind: int
    v_open: float  # open voltage; crest of the winding for a rectifier, volt
    r_source: float  # source resistance; winding and diode for a rectifier, ohm
    i_limit: float  # current limit of a bench supply, ampere (1e9: none)
    c: float  # reservoir or decoupling, farad
    esr: float  # its series resistance, ohm
    v_diode: float  # threshold of one diode, volt


@kernel
def rail_step(v_c, i_load, mains, dt, p):
    """Move a rail by one step.

    Parameters
    ----------
    v_c : float
        Voltage on the capacitor, volts.
    i_load : float
        Current drawn from the rail, amperes (negative: pushed back by a catch diode).
    mains : float
        Winding voltage divided by its crest, -1 to 1.
    dt : float
        Step in seconds.
    p : RailParams

    Returns
    -------
    v_c, v_rail, i_source : float
    """
    if p.kind == STIFF:
        return p.v_open, p.v_open, i_load
    if p.kind == RESISTIVE:
        # Implicit in the source current, so that any resistance and capacitance is stable.
        k = dt / p.c
        i_source = (p.v_open - v_c + k * i_load) / (p.r_source + k)
        if i_source > p.i_limit:
            i_source = p.i_limit
        v_c += k * (i_source - i_load)
        return v_c, v_c, i_source
    crest = p.v_open * abs(mains) - p.v_diode
    i_source = (crest - v_c + p.esr * i_load) / (p.r_source + p.esr)
    if i_source < 0.0:
        i_source = 0.0
    v_c += dt * (i_source - i_load) / p.c
    return v_c, v_c + p.esr * (i_source - i_load), i_source


@kernel
def rail_cycles(v_c, i_load, hertz, dt, cycles, p, trace):
    """Run a rail with a constant load for whole mains cycles.

    Parameters
    ----------
    trace : (3,) ndarray
        Filled with mean, lowest and highest rail voltage of the last cycle.

    Returns
    -------
    float
        Capacitor voltage at the end.
    """
    n = round(1.0 / (hertz * dt))
    for _ in range(cycles):
        total = 0.0
        low = 1e300
        high = -1e300
        for k in range(n):
            mains = math.sin(2.0 * math.pi * (k + 1) / n)
            v_c, v, _ = rail_step(v_c, i_load, mains, dt, p)
            total += v
            low = min(low, v)
            high = max(high, v)
        trace[0] = total / n
        trace[1] = low
        trace[2] = high
    return v_c
