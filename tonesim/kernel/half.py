"""One half of the output stage: its node equations and their static solution.

Voltages are counted from the output node and, in the lower half, mirrored, so that both
halves are the same code. Junction voltages are the unknowns: in them every current is explicit.

    x0  base-emitter voltage of the first device of a Darlington (unused for a single device)
    x1  base-emitter voltage of the device that carries the load current
    x2  base-collector voltage (of the first device of a Darlington)
    x3  what the chain's law is explicit in: a junction voltage, or its current where there is none
"""

import math
from typing import NamedTuple

import numpy as np

from tonesim.kernel.devices import BipolarParams, bipolar, exp_straight, junction
from tonesim.kernel.jit import kernel
from tonesim.kernel.measured import (
    NOT_MEASURED,
    MeasuredParams,
    measured_current,
    measured_drive,
)

CHAIN_NONE, CHAIN_DROPS, CHAIN_MULTIPLIER = 0, 1, 2

_FORWARD = 0.45  # a junction below this voltage may move up to here in one Newton step [V]
_STEP_UP = 0.08  # above it, at most this much [V]
_PATIENCE = 40
_MAX_STEPS = 400


class HalfParams(NamedTuple):
    """Everything a half's two currents depend on."""

    darlington: bool
    device: BipolarParams  # carries the load current
    first: BipolarParams  # drives it (a copy of `device` where there is one device only)
    r_b: float  # base resistance of `device`, ohm
    r_e: float  # emitter resistance inside the part, ohm
    r_c: float  # collector resistance, ohm
    g_1: float  # resistor across the first base-emitter junction, siemens
    g_2: float  # resistor across the second, siemens
    r_emitter: float  # emitter resistor of the circuit, ohm
    g_feed: float  # feed resistor, siemens (0: none)
    chain: int
    chain_count: np.ndarray  # drops of one type, as many as they are
    chain_is: np.ndarray  # saturation currents of the types, smallest first, ampere
    chain_nvt: np.ndarray  # their n Vt, volt
    chain_shift: float  # voltage added to the whole chain (a battery where there is none), volt
    chain_r: float  # series resistance of all drops, ohm
    chain_g: float  # leak across the chain, siemens
    multiplier: BipolarParams
    r_cb: float  # multiplier: collector to base, ohm
    g_be: float  # multiplier: base to emitter, siemens
    catch: BipolarParams  # catch diode (only i_s and n_vt are read)
    catch_r: float  # its series resistance, ohm
    drive_shift: float = 0.0  # battery in the drive: the half turns on that much earlier, volt
    measured: MeasuredParams = NOT_MEASURED  # stands in for all of the above but the catch diode


class HalfPoint(NamedTuple):
    """A static solution with its evidence."""

    i_out: float
    i_out_u: float
    i_drive: float
    i_drive_u: float
    residual: float  # worst node equation, in ampere or volt
    steps: int


@kernel
def drops(x, p):
    """Voltage and current of the junctions in series, explicit in the first junction's voltage."""
    i, g = junction(x, p.chain_is[0], p.chain_nvt[0])
    v = p.chain_count[0] * x + i * p.chain_r + p.chain_shift
    dv = p.chain_count[0] + g * p.chain_r
    for k in range(1, p.chain_is.size):
        # The first type has the smallest Is, so i > -Is holds for all the others.
        v += p.chain_count[k] * p.chain_nvt[k] * math.log1p(i / p.chain_is[k])
        dv += p.chain_count[k] * p.chain_nvt[k] * g / (p.chain_is[k] + i)
    return v, dv, i, g


@kernel
def multiplier(x, p):
    """Voltage and current of a Vbe multiplier, explicit in its base-emitter voltage.

    With w the base-to-collector voltage, the base node gives one equation in w that rises
    everywhere: w / R_cb + (base-collector junction) = v_be / R_be + i_b.
    """
    q = p.multiplier
    i_f, g_f = junction(x, q.i_s, q.n_vt)
    knee = (i_f / q.i_k) ** q.m if i_f > 0.0 else 0.0
    need = x * p.g_be + i_f * (1.0 + knee) / q.hfe
    d_need = p.g_be + g_f * (1.0 + (1.0 + q.m) * knee) / q.hfe
    g_cb = 1.0 / p.r_cb
    leak = q.i_s / q.beta_r
    w = need * p.r_cb
    if w < 0.0:
        # Start where the junction alone would carry it: from there Newton falls monotonically.
        w = max(w, -q.v_t * math.log1p(-need / leak))
    slope = g_cb
    for _ in range(60):
        e, de = exp_straight(-w / q.v_t)
        slope = g_cb + leak * de / q.v_t
        step = (w * g_cb - leak * (e - 1.0) - need) / slope
        w -= step
        if abs(step) < 1e-13:
            break
    dw = d_need / slope
    i_r, g_r = junction(-w, q.i_s, q.v_t)
    back = 1.0 + 1.0 / q.beta_r
    i = w * g_cb + i_f - i_r * back
    di = dw * g_cb + g_f + g_r * dw * back
    return x + w, 1.0 + dw, i, di


@kernel
def chain_law(x, p):
    """Voltage across the chain, its current, and both slopes in x."""
    if p.chain == CHAIN_DROPS:
        v, dv, i, g = drops(x, p)
    elif p.chain == CHAIN_MULTIPLIER:
        v, dv, i, g = multiplier(x, p)
    else:
        return p.chain_shift, 0.0, x, 1.0
    return v, dv, i + p.chain_g * v, g + p.chain_g * dv


@kernel
def node_equations(x, u, h_feed, h_collector, p, f, j):
    """Fill the residuals f (4,) and the Jacobian j (4, 4); return i_out, i_drive, their slopes.

    `h_feed` and `h_collector` are the headroom seen by the feed resistor and by the collector:
    one number in a real stage, two when the causes of clipping are told apart.
    """
    di_out = np.zeros(4)
    for r in range(4):
        for c in range(4):
            j[r, c] = 0.0
    if p.darlington:
        ib1, ic1, b1e, b1c, c1e, c1c = bipolar(x[0], x[2], p.first)
        ib2, ic2, b2e, b2c, c2e, c2c = bipolar(x[1], x[2] - x[0], p.device)
        # Slopes in x0, x1, x2: the second device's base-collector voltage is x2 - x0.
        db2 = np.array([-b2c, b2e, b2c, 0.0])
        dc2 = np.array([-c2c, c2e, c2c, 0.0])
        de2 = db2 + dc2
        ie2 = ib2 + ic2
        w = x[1] + ib2 * p.r_b + ie2 * p.r_e
        dw = db2 * p.r_b + de2 * p.r_e
        dw[1] += 1.0
        f[0] = ib1 + ic1 + x[0] * p.g_1 - ib2 - w * p.g_2
        for c in range(4):
            j[0, c] = -db2[c] - dw[c] * p.g_2
        j[0, 0] += b1e + c1e + p.g_1
        j[0, 2] += b1c + c1c
        i_out = ie2 + w * p.g_2
        i_base = ib1 + x[0] * p.g_1
        i_coll = ic1 + ic2
        for c in range(4):
            di_out[c] = de2[c] + dw[c] * p.g_2
        di_base = np.array([b1e + p.g_1, 0.0, b1c, 0.0])
        di_coll = dc2
        di_coll[0] += c1e
        di_coll[2] += c1c
        v_b = p.r_emitter * i_out + w + x[0]
        dv_b = p.r_emitter * di_out + dw
        dv_b[0] += 1.0
        # The base-collector voltage is counted from the first base itself.
        v_c = v_b - x[2]
    else:
        ib, ic, be, bc, ce, cc = bipolar(x[1], x[2], p.device)
        i_out = ib + ic
        di_out[1] = be + ce
        di_out[2] = bc + cc
        i_base = ib
        di_base = np.array([0.0, be, bc, 0.0])
        i_coll = ic
        di_coll = np.array([0.0, ce, cc, 0.0])
        r = p.r_emitter + p.r_e
        v_b = r * i_out + x[1] + ib * p.r_b
        dv_b = r * di_out + di_base * p.r_b
        dv_b[1] += 1.0
        v_c = v_b - ib * p.r_b - x[2]
        f[0] = x[0]
        j[0, 0] = 1.0
    f[1] = h_collector - p.r_c * i_coll - v_c
    for c in range(4):
        j[1, c] = -p.r_c * di_coll[c] - dv_b[c]
        if not p.darlington:
            j[1, c] += di_base[c] * p.r_b
    j[1, 2] += 1.0
    v_chain, dv_chain, i_chain, di_chain = chain_law(x[3], p)
    f[2] = v_b - u - v_chain
    f[3] = p.g_feed * (h_feed - v_b) - i_base - i_chain
    for c in range(4):
        j[2, c] = dv_b[c]
        j[3, c] = -p.g_feed * dv_b[c] - di_base[c]
    j[2, 3] -= dv_chain
    j[3, 3] -= di_chain
    return i_out, i_chain, di_out, di_chain


@kernel
def eliminate(j, f):
    """Solve j y = f for (4, 4) in place by elimination with row exchange; f becomes y."""
    n = 4
    for k in range(n):
        pivot = k
        for r in range(k + 1, n):
            if abs(j[r, k]) > abs(j[pivot, k]):
                pivot = r
        if pivot != k:
            for c in range(k, n):
                j[k, c], j[pivot, c] = j[pivot, c], j[k, c]
            f[k], f[pivot] = f[pivot], f[k]
        for r in range(k + 1, n):
            m = j[r, k] / j[k, k]
            if m != 0.0:
                for c in range(k, n):
                    j[r, c] -= m * j[k, c]
                f[r] -= m * f[k]
    for k in range(n - 1, -1, -1):
        for c in range(k + 1, n):
            f[k] -= j[k, c] * f[c]
        f[k] /= j[k, k]


@kernel
def first_guess(u, h, p, x):
    """A start with every junction cut off, from which Newton always gets home."""
    u += p.drive_shift
    x[3] = 0.0
    if p.chain == CHAIN_NONE and u > h:
        # The drive holds the base above its collector.
        x[0] = 0.0
        x[1] = min(u, 0.0)
        x[2] = min(u - h, 0.4)
        return
    base = min(u, h, 0.0)
    if p.darlington:
        x[1] = min(base * p.g_1 / (p.g_1 + p.g_2), h)
        x[0] = base - x[1]
    else:
        x[0] = 0.0
        x[1] = base
    x[2] = base - h


@kernel
def solve_half(u, h_feed, h_collector, p, x):
    """Static currents of a half; x (4,) is the start and becomes the solution.

    Newton with a bounded rise of every junction voltage; falls are safe because the
    exponential is convex.

    Returns
    -------
    HalfPoint
    """
    u += p.drive_shift
    if p.measured.on:
        i, i_u = measured_current(u, h_collector, p.measured)
        i_drive, i_drive_u = measured_drive(i, i_u, h_feed, p.measured)
        return HalfPoint(i, i_u, i_drive, i_drive_u, 0.0, 0)
    f = np.empty(4)
    j = np.empty((4, 4))
    steps = 0
    i_out, i_drive, di_out, di_drive = node_equations(x, u, h_feed, h_collector, p, f, j)
    for step in range(_MAX_STEPS):
        steps = step + 1
        eliminate(j, f)
        scale = 1.0
        for k in range(4):
            rise = -f[k]
            if rise > 0.0 and not (k == 3 and p.chain == CHAIN_NONE):
                room = max(_STEP_UP, _FORWARD - x[k])
                if rise > room:
                    scale = min(scale, room / rise)
        if p.darlington:
            # The second device's base-collector voltage is a difference of two unknowns.
            rise = f[0] - f[2]
            room = max(_STEP_UP, _FORWARD - x[2] + x[0])
            if rise > room:
                scale = min(scale, room / rise)
        if step > _PATIENCE:
            scale *= 0.5 if step < 4 * _PATIENCE else 0.1  # breaks the rare cycle
        worst = 0.0
        for k in range(4):
            worst = max(worst, abs(f[k]) / (1.0 + abs(x[k])))
            x[k] -= scale * f[k]
        i_out, i_drive, di_out, di_drive = node_equations(x, u, h_feed, h_collector, p, f, j)
        if worst < 1e-11:
            break
    residual = 0.0
    for k in range(4):
        residual = max(residual, abs(f[k]))
    # Implicit function theorem: j dx/du = -df/du, and u stands only in the chain's equation.
    f[0] = 0.0
    f[1] = 0.0
    f[2] = 1.0
    f[3] = 0.0
    eliminate(j, f)
    i_out_u = 0.0
    for k in range(4):
        i_out_u += di_out[k] * f[k]
    return HalfPoint(i_out, i_out_u, i_drive, di_drive * f[3], residual, steps)


@kernel
def catch_current(h, p):
    """Current of the catch diode out of the output node when it stands above the rail."""
    v = -h
    if v <= 0.0:
        return p.catch.i_s * math.expm1(v / p.catch.n_vt)
    # Diode with series resistance: Newton on its own junction voltage, from above.
    x = min(v, p.catch.n_vt * math.log1p(v / (p.catch_r * p.catch.i_s + 1e-30)))
    for _ in range(60):
        i, g = junction(x, p.catch.i_s, p.catch.n_vt)
        step = (x + i * p.catch_r - v) / (1.0 + g * p.catch_r)
        x -= step
        if abs(step) < 1e-13:
            break
    i, g = junction(x, p.catch.i_s, p.catch.n_vt)
    return i


@kernel
def tabulate(us, hs, p, table):
    """Fill a transfer surface row by row, each node started from its neighbour.

    Parameters
    ----------
    us, hs : (U,), (H,) ndarray
        Grid of drive and headroom, ascending, in volts.
    p : HalfParams
    table : (H, U, 4) ndarray
        Filled with i_out, its slope in u, i_drive, its slope in u.

    Returns
    -------
    residual : float
        Worst node equation met.
    steps : int
        Largest number of Newton steps taken at a node.
    """
    x = np.empty(4)
    row = np.empty(4)
    worst = 0.0
    most = 0
    for k in range(hs.size):
        if k == 0:
            first_guess(us[0], hs[0], p, row)
        for i in range(us.size):
            if i == 0:
                x[:] = row
            s = solve_half(us[i], hs[k], hs[k], p, x)
            if i == 0:
                row[:] = x
            catch = catch_current(hs[k], p)
            table[k, i, 0] = s.i_out - catch
            table[k, i, 1] = s.i_out_u
            table[k, i, 2] = s.i_drive
            table[k, i, 3] = s.i_drive_u
            worst = max(worst, s.residual)
            most = max(most, s.steps)
    return worst, most
