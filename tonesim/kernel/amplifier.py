"""The sample loop: op-amp, both halves, feedback, load and rails solved together.

Unknowns of a step are v_o, v_d and v_x; the implicit trapezoidal rule gives

    i_up(v_d - v_o, V+ - v_o) - i_low(v_o - v_d, v_o - V-) - g_l v_o - i_l = 0
    i_amp(v_x - v_d) + i_drive,up - i_drive,low = 0
    v_x = clip(v_x0 + hd (f(v_o, v_x) + f0))        f = dv_x/dt; clip at the swing limits

Newton runs from a quadratic extrapolation of the last three steps. A step that does not
settle is solved again by nested brackets, which cannot lose the sign change: every element is
passive, so the output node's current falls as v_o rises. What even that leaves
unbalanced is counted as unsettled.
"""

from typing import NamedTuple

import numpy as np

from tonesim.kernel.bracket import MOST_CUTS, narrow, next_share
from tonesim.kernel.driver import DriverParams, output_current, rate
from tonesim.kernel.jit import kernel
from tonesim.kernel.load import LoadParams, load_history, zobel_step
from tonesim.kernel.rails import RECTIFIED, RailParams, rail_step
from tonesim.kernel.surface import Grid, look_up

# Slots of the state array.
O1, O2, O3, D1, D2, D3, X1, X2, X3 = 0, 1, 2, 3, 4, 5, 6, 7, 8
F0 = 9  # dv_x/dt at the last step
CAP_P, CAP_N, RAIL_P, RAIL_N = 10, 11, 12, 13
MAINS_SIN, MAINS_COS = 14, 15
ZOBEL_V, ZOBEL_I = 16, 17
LOAD = 18  # first of the load's states

# Slots of the evidence array: counts and extremes since the last reset.
STEPS, ITERATIONS, RESCUED, UNSETTLED, WORST_STEP = 0, 1, 2, 3, 4
PEAK_P, PEAK_N, LOW_P, LOW_N = 5, 6, 7, 8
# Sums over the steps: times dt they are joules and coulombs.
ENERGY_RAILS, ENERGY_LOAD, CHARGE_P, CHARGE_N = 9, 10, 11, 12
EVIDENCE_SIZE = 13

_NEWTON_STEPS = 40
_PATIENCE = 16
_OUTSIDE = 1.0  # catch diodes hold the output about here beyond the rails [V]
_BOUND = 0.5  # largest Newton step of a half's drive [V]
_TOGETHER = 1 / 32  # share of a common step that counts against this bound
_REACH = 10.0  # how far beyond the rails a node is looked for [V]
_IMBALANCE = 1e-6  # current left at a node that counts as unsettled [A]


class AmplifierParams(NamedTuple):
    """Everything the sample loop reads."""

    upper: np.ndarray  # (H, U, 4) transfer surface
    lower: np.ndarray
    grid: Grid
    driver: DriverParams
    load: LoadParams
    rail_positive: RailParams
    rail_negative: RailParams
    mains_sin: float  # sine and cosine of the mains angle of one step
    mains_cos: float
    dt: float  # step, second
    tolerance: float  # last Newton step that counts as settled, volt


@kernel
def swing_limits(v_p, v_n, q):
    """Highest and lowest v_x for rails of magnitude v_p, v_n."""
    if q.own_supply:
        return q.rail_positive - q.drop_positive, q.rail_negative + q.drop_negative
    return v_p - q.drop_positive, -v_n + q.drop_negative


@kernel
def driver_voltage(v_o, v_in, v_x0, f0, hd, top, bottom, q):
    """v_x for a given v_o; the step equation rises in v_x everywhere."""
    x1, x2 = min(bottom, v_x0), max(top, v_x0)
    f1 = x1 - v_x0 - hd * (rate(v_in, v_o, x1, q)[0] + f0)
    f2 = x2 - v_x0 - hd * (rate(v_in, v_o, x2, q)[0] + f0)
    if f1 >= 0.0:
        return bottom
    if f2 <= 0.0:
        return top
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_x = x1 + t * (x2 - x1)
        f = v_x - v_x0 - hd * (rate(v_in, v_o, v_x, q)[0] + f0)
        x1, x2, x3, f1, f2, f3 = narrow(v_x, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    return min(max(x1 if abs(f1) < abs(f2) else x2, bottom), top)


@kernel
def drive_imbalance(v_d, v_o, v_x, v_p, v_n, p):
    """Current into the drive node; it falls as v_d rises."""
    i, _g = output_current(v_x - v_d, p.driver)
    _a, _au, _ah, b, _bu, _bh = look_up(p.upper, p.grid, v_d - v_o, v_p - v_o)
    _c, _cu, _ch, d, _du, _dh = look_up(p.lower, p.grid, v_o - v_d, v_o + v_n)
    return i + b - d


@kernel
def drive_node(v_o, v_x, v_p, v_n, p):
    """v_d at which the drive node is balanced, for given v_o and v_x."""
    x1, x2 = min(-v_n - _REACH, v_x), max(v_p + _REACH, v_x)
    f1 = drive_imbalance(x1, v_o, v_x, v_p, v_n, p)
    f2 = drive_imbalance(x2, v_o, v_x, v_p, v_n, p)
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_d = x1 + t * (x2 - x1)
        f = drive_imbalance(v_d, v_o, v_x, v_p, v_n, p)
        x1, x2, x3, f1, f2, f3 = narrow(v_d, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    return x1 if abs(f1) < abs(f2) else x2


@kernel
def output_imbalance(v_o, v_in, i_l, v_x0, f0, hd, v_p, v_n, p):
    """Current into the output node, the rest settled; it falls as v_o rises. Also v_d, v_x."""
    top, bottom = swing_limits(v_p, v_n, p.driver)
    v_x = driver_voltage(v_o, v_in, v_x0, f0, hd, top, bottom, p.driver)
    v_d = drive_node(v_o, v_x, v_p, v_n, p)
    a, _au, _ah, _b, _bu, _bh = look_up(p.upper, p.grid, v_d - v_o, v_p - v_o)
    c, _cu, _ch, _d, _du, _dh = look_up(p.lower, p.grid, v_o - v_d, v_o + v_n)
    return a - c - p.load.g * v_o - i_l, v_d, v_x


@kernel
def solve_step(v_in, i_l, v_x0, f0, hd, v_p, v_n, p):
    """The step equations by nested brackets: slow, and sure of the sign change.

    Returns
    -------
    v_o, v_d, v_x, imbalance : float
        The imbalance is the larger of the two node currents left over, in amperes.
    """
    x1, x2 = -v_n - _REACH, v_p + _REACH
    f1, _d1, _x1 = output_imbalance(x1, v_in, i_l, v_x0, f0, hd, v_p, v_n, p)
    f2, _d2, _x2 = output_imbalance(x2, v_in, i_l, v_x0, f0, hd, v_p, v_n, p)
    x3, f3, t = x2, f2, 0.5
    for _ in range(MOST_CUTS):
        v_o = x1 + t * (x2 - x1)
        f, _d, _x = output_imbalance(v_o, v_in, i_l, v_x0, f0, hd, v_p, v_n, p)
        x1, x2, x3, f1, f2, f3 = narrow(v_o, f, x1, x2, f1, f2)
        t, tight = next_share(x1, x2, x3, f1, f2, f3)
        if tight:
            break
    v_o = x1 if abs(f1) < abs(f2) else x2
    left, v_d, v_x = output_imbalance(v_o, v_in, i_l, v_x0, f0, hd, v_p, v_n, p)
    return v_o, v_d, v_x, max(abs(left), abs(drive_imbalance(v_d, v_o, v_x, v_p, v_n, p)))


@kernel
def advance(x, y, state, evidence, p):
    """Run the stage over x (N,) volts at the op-amp's input; fill y (N,) volts at the output.

    `state` and `evidence` go in and come out; everything about the past is in `state`, so any
    cut of the signal gives the same bits.
    """
    q = p.driver
    g_l = p.load.g
    hd = 0.5 * p.dt
    n_load = p.load.q.size
    o1, o2, o3 = state[O1], state[O2], state[O3]
    d1, d2, d3 = state[D1], state[D2], state[D3]
    x1, x2, x3 = state[X1], state[X2], state[X3]
    f0 = state[F0]
    v_p, v_n = state[RAIL_P], state[RAIL_N]
    wave_s, wave_c = state[MAINS_SIN], state[MAINS_COS]
    load_state = state[LOAD : LOAD + n_load]
    history = np.empty(n_load)
    rectified = p.rail_positive.kind == RECTIFIED or p.rail_negative.kind == RECTIFIED
    iterations = 0
    rescued = 0
    unsettled = 0
    worst = evidence[WORST_STEP]
    peak_p, peak_n = evidence[PEAK_P], evidence[PEAK_N]
    low_p, low_n = evidence[LOW_P], evidence[LOW_N]
    energy_rails, energy_load = evidence[ENERGY_RAILS], evidence[ENERGY_LOAD]
    charge_p, charge_n = evidence[CHARGE_P], evidence[CHARGE_N]
    cap_p, cap_n = state[CAP_P], state[CAP_N]
    zobel_v, zobel_i = state[ZOBEL_V], state[ZOBEL_I]

    for n in range(x.size):
        v_in = x[n] + q.offset
        top, bottom = swing_limits(v_p, v_n, q)
        i_l = load_history(load_state, o1, p.load, history)
        i_l -= p.load.zobel_g * (zobel_v + p.load.zobel_k * zobel_i)
        v_o = min(max(3.0 * (o1 - o2) + o3, -v_n - _OUTSIDE), v_p + _OUTSIDE)
        v_d = min(max(3.0 * (d1 - d2) + d3, -v_n), v_p)
        v_x = min(max(3.0 * (x1 - x2) + x3, bottom), top)
        base = x1 + hd * f0
        settled = False
        move = 0.0
        f = 0.0
        i_rail_p = 0.0
        i_rail_n = 0.0
        i_amp = 0.0
        bound = _BOUND
        for step in range(_NEWTON_STEPS):
            iterations += 1
            if step > _PATIENCE:
                bound *= 0.75  # breaks a cycle between two sides of a kink
            a, au, ah, b, bu, bh = look_up(p.upper, p.grid, v_d - v_o, v_p - v_o)
            c, cu, ch, d, du, dh = look_up(p.lower, p.grid, v_o - v_d, v_o + v_n)
            i_amp, g_amp = output_current(v_x - v_d, q)
            f, slope = rate(v_in, v_o, v_x, q)
            r1 = a - c - g_l * v_o - i_l
            j11 = -au - ah - cu - ch - g_l
            j12 = au + cu
            r2 = i_amp + b - d
            j21 = -bu - bh - du - dh
            j22 = bu + du - g_amp
            r3 = v_x - base - hd * f
            j31 = hd * slope * q.beta
            k33 = 1.0 / (1.0 + hd * slope * q.per_a0)
            e2 = g_amp * r3 * k33 - r2
            e21 = j21 - g_amp * j31 * k33
            det = 1.0 / (j11 * j22 - j12 * e21)
            dvo = (-r1 * j22 - j12 * e2) * det
            dvd = (j11 * e2 + e21 * r1) * det
            dvx = -(r3 + j31 * dvo) * k33
            if v_x + dvx > top or v_x + dvx < bottom:
                # The integrator stops: v_x is known, two unknowns are left.
                dvx = (top if v_x + dvx > top else bottom) - v_x
                e2 = -r2 - g_amp * dvx
                det = 1.0 / (j11 * j22 - j12 * j21)
                dvo = (-r1 * j22 - j12 * e2) * det
                dvd = (j11 * e2 + j21 * r1) * det
            move = max(abs(dvo), abs(dvd))
            if not move < 1e6:
                break
            # Only the drive of a half meets an exponential; both nodes may travel together.
            strain = max(abs(dvd - dvo), _TOGETHER * move)
            if strain > bound:
                k = bound / strain
                dvo *= k
                dvd *= k
                dvx *= k
            v_o += dvo
            v_d += dvd
            v_x += dvx
            if move < p.tolerance:
                # First order from the last look-up: what is left is of second order in the move.
                up = dvd - dvo
                i_rail_p = a + b + (au + bu) * up - (ah + bh) * dvo
                i_rail_n = c + d - (cu + du) * up + (ch + dh) * dvo
                i_amp += g_amp * (dvx - dvd)
                settled = True
                break
        if not settled:
            rescued += 1
            v_o, v_d, v_x, move = solve_step(v_in, i_l, x1, f0, hd, v_p, v_n, p)
            if not move < _IMBALANCE:
                unsettled += 1
            move = 0.0
            a, au, ah, b, bu, bh = look_up(p.upper, p.grid, v_d - v_o, v_p - v_o)
            c, cu, ch, d, du, dh = look_up(p.lower, p.grid, v_o - v_d, v_o + v_n)
            i_rail_p = a + b
            i_rail_n = c + d
            i_amp, g_amp = output_current(v_x - v_d, q)
        worst = max(worst, move)

        f0, slope = rate(v_in, v_o, v_x, q)
        if (v_x >= top and f0 > 0.0) or (v_x <= bottom and f0 < 0.0):
            f0 = 0.0
        if not abs(f0) <= q.slew:
            unsettled += 1  # the input was no number: forget it, so that the stage recovers
            f0 = 0.0
        i_load = g_l * v_o + i_l
        for k in range(n_load):
            load_state[k] = history[k] + p.load.q[k] * v_o
        zobel_v, zobel_i = zobel_step(zobel_v, zobel_i, v_o, p.load)
        o3, o2, o1 = o2, o1, v_o
        d3, d2, d1 = d2, d1, v_d
        x3, x2, x1 = x2, x1, v_x
        y[n] = v_o

        if not q.own_supply:
            i_rail_p += q.i_quiescent + max(i_amp, 0.0)
            i_rail_n += q.i_quiescent + max(-i_amp, 0.0)
        energy_rails += v_p * i_rail_p + v_n * i_rail_n
        energy_load += v_o * i_load
        charge_p += i_rail_p
        charge_n += i_rail_n
        if rectified:
            s = wave_s * p.mains_cos + wave_c * p.mains_sin
            wave_c = wave_c * p.mains_cos - wave_s * p.mains_sin
            wave_s = s
        cap_p, v_p, _i = rail_step(cap_p, i_rail_p, wave_s, p.dt, p.rail_positive)
        cap_n, v_n, _i = rail_step(cap_n, i_rail_n, wave_s, p.dt, p.rail_negative)
        peak_p = max(peak_p, v_o)
        peak_n = min(peak_n, v_o)
        low_p = min(low_p, v_p)
        low_n = min(low_n, v_n)

    state[O1], state[O2], state[O3] = o1, o2, o3
    state[D1], state[D2], state[D3] = d1, d2, d3
    state[X1], state[X2], state[X3] = x1, x2, x3
    state[F0] = f0
    state[ZOBEL_V], state[ZOBEL_I] = zobel_v, zobel_i
    state[CAP_P], state[CAP_N] = cap_p, cap_n
    state[RAIL_P], state[RAIL_N] = v_p, v_n
    state[MAINS_SIN], state[MAINS_COS] = wave_s, wave_c
    evidence[STEPS] += x.size
    evidence[ITERATIONS] += iterations
    evidence[RESCUED] += rescued
    evidence[UNSETTLED] += unsettled
    evidence[WORST_STEP] = worst
    evidence[PEAK_P], evidence[PEAK_N] = peak_p, peak_n
    evidence[LOW_P], evidence[LOW_N] = low_p, low_n
    evidence[ENERGY_RAILS], evidence[ENERGY_LOAD] = energy_rails, energy_load
    evidence[CHARGE_P], evidence[CHARGE_N] = charge_p, charge_n
