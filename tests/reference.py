"""Slow independent versions of what the kernel computes.

The whole circuit as full node equations, integrated by IDA of SUNDIALS (Hindmarsh et al., ACM
TOMS 31(3), 2005) through scikit-sundae: variable order, variable step, no transfer surface,
no oversampling, no companion models. Only the parameter tuples are shared with the project.
"""

import math
from typing import Any

import numpy as np
import sksundae
from numba import njit

from tonesim.circuit import Circuit
from tonesim.curve import static_point
from tonesim.kernel.half import CHAIN_DROPS, CHAIN_NONE, HalfParams

# Unknowns of one half, as node voltages against ground (mirrored in the lower half):
# base, base of the second device, its inner base, its inner emitter, its outer emitter,
# inner collector, chain current, catch diode's junction voltage.
HALF = 8


@njit
def _exp(x: float) -> float:
    return math.exp(x) if x < 100.0 else math.exp(100.0) * (1.0 + x - 100.0)


@njit
def _currents(v_be: float, v_bc: float, p: Any) -> tuple[float, float]:
    """Base and collector current from the equations in the docstring of kernel/devices.py."""
    f = p.i_s * (_exp(v_be / p.n_vt) - 1.0)
    r = p.i_s * (_exp(v_bc / p.v_t) - 1.0)
    gain = p.hfe / (1.0 + (max(f, 0.0) / p.i_k) ** p.m)
    return f / gain + r / p.beta_r, f - r - r / p.beta_r


@njit
def _half(v: Any, v_d: float, v_o: float, rail: float, p: Any, out: Any) -> tuple[float, float]:
    """Residuals of one half (8,); current into the output node, current into the drive node."""
    b, m, bi, ei, e, c, i_chain, vk = v
    if p.darlington:
        ib1, ic1 = _currents(b - m, b - c, p.first)
        ib2, ic2 = _currents(bi - ei, m - c, p.device)
        i_base = ib1 + (b - m) * p.g_1
        out[0] = (ib1 + ic1 + (b - m) * p.g_1 - ib2 - (m - e) * p.g_2) * 1e3
    else:
        ib2, ic2 = _currents(bi - ei, bi - c, p.device)
        ic1 = 0.0
        i_base = ib2
        out[0] = m - b
    i_e = ib2 + ic2
    out[1] = m - bi - ib2 * p.r_b
    out[2] = ei - e - i_e * p.r_e
    i_out = i_e + ((m - e) * p.g_2 if p.darlington else 0.0)
    out[3] = e - v_o - i_out * p.r_emitter
    out[4] = rail - c - (ic1 + ic2) * p.r_c
    out[5] = (p.g_feed * (rail - b) - i_base - i_chain) * 1e3
    if p.chain == CHAIN_NONE:
        out[6] = b - v_d
    else:
        # The leak's share of the chain current is subtracted before the logarithms.
        through = i_chain - p.chain_g * (b - v_d)
        drop = through * p.chain_r
        for k in range(p.chain_is.size):
            ratio = through / p.chain_is[k]
            if ratio < -0.999999:
                ratio = -0.999999
            drop += p.chain_count[k] * p.chain_nvt[k] * math.log1p(ratio)
        out[6] = b - v_d - drop
    i_catch = p.catch.i_s * (_exp(vk / p.catch.n_vt) - 1.0)
    out[7] = vk + i_catch * p.catch_r - (v_o - rail)
    return i_out - i_catch, i_chain


@njit
def _residual(
    t: float, y: Any, yp: Any, out: Any, amplitude: float, hertz: float, g: Any, c: Any, v: Any
) -> None:
    """Residuals of the whole stage: [v_x, v_o, v_d, upper (8), lower (8), load states]."""
    upper, lower, q = c
    a, b, cl, d = g
    v_in = amplitude * math.sin(2.0 * math.pi * hertz * t) + q.offset
    v_x, v_o, v_d = y[0], y[1], y[2]
    up, down_up = _half(y[3 : 3 + HALF], v_d, v_o, v[0], upper, out[3 : 3 + HALF])
    low, down_low = _half(
        y[3 + HALF : 3 + 2 * HALF], -v_d, -v_o, v[1], lower, out[3 + HALF : 3 + 2 * HALF]
    )
    z = q.omega * (v_in - q.beta * v_o - v_x * q.per_a0) / q.slew
    out[0] = (yp[0] - q.slew * z / math.sqrt(1.0 + z * z)) * 1e-6
    e = v_x - v_d
    limit = q.i_source if e > 0.0 else q.i_sink
    mean = (q.r_source + q.r_sink) / 2.0
    far = (q.r_source if e > 0.0 else q.r_sink) - mean
    s = e / ((mean + far / (1.0 + (0.2 / e) ** 2 if e else math.inf)) * limit)
    out[2] = (limit * s / math.sqrt(1.0 + s * s) + 1e-6 * e + down_up - down_low) * 1e3
    n = b.size
    i_load = d * v_o
    for k in range(n):
        state = y[3 + 2 * HALF + k]
        i_load += cl[k] * state
        flow = b[k] * v_o
        for j in range(n):
            flow += a[k, j] * y[3 + 2 * HALF + j]
        out[3 + 2 * HALF + k] = (yp[3 + 2 * HALF + k] - flow) * 1e-4
    out[1] = up - low - i_load


def _half_start(v_d: float, v_o: float, rail: float, p: HalfParams) -> np.ndarray:
    """Node voltages near rest: every junction off, chain carrying the feed current."""
    y = np.full(HALF, v_o)
    if p.chain == CHAIN_DROPS:
        y[6] = p.g_feed * (rail - v_d)
    y[0] = v_d
    y[5] = rail
    y[7] = v_o - rail
    return y


def _load_matrices(circuit: Circuit) -> tuple[np.ndarray, np.ndarray, np.ndarray, float]:
    """The load as one state space, the Zobel network's capacitor as its last state."""
    net = circuit.load
    if not net.zobel_f:
        return net.a, net.b, net.c, net.d
    n = net.b.size
    rate = 1.0 / (net.zobel_ohm * net.zobel_f)
    a = np.zeros((n + 1, n + 1))
    a[:n, :n] = net.a
    a[n, n] = -rate
    return (
        a,
        np.append(net.b, rate),
        np.append(net.c, -1.0 / net.zobel_ohm),
        net.d + 1.0 / net.zobel_ohm,
    )


def integrate(
    circuit: Circuit, amplitude: float, hertz: float, times: np.ndarray, rtol: float = 1e-9
) -> np.ndarray:
    """Output voltage at `times` for a sine at the op-amp's input, stiff rails, from rest.

    Parameters
    ----------
    circuit : Circuit
    amplitude, hertz : float
        Volts peak and hertz of the input.
    times : (N,) ndarray
        Seconds, from 0 upward.
    rtol : float, optional

    Returns
    -------
    (N,) ndarray
    """
    v_p, v_n = circuit.rail_positive.v_open, circuit.rail_negative.v_open
    load = _load_matrices(circuit)
    parts = (circuit.upper, circuit.lower, circuit.driver)
    rest = static_point(circuit, 0.0, v_p, v_n)
    n = load[1].size
    size = 3 + 2 * HALF + n
    y0 = np.zeros(size)
    y0[:3] = rest.v_x, rest.v_o, rest.v_d
    y0[3 : 3 + HALF] = _half_start(rest.v_d, rest.v_o, v_p, circuit.upper)
    y0[3 + HALF : 3 + 2 * HALF] = _half_start(-rest.v_d, -rest.v_o, v_n, circuit.lower)

    def residual(t: float, y: np.ndarray, yp: np.ndarray, out: np.ndarray) -> None:
        _residual(t, y, yp, out, amplitude, hertz, load, parts, (v_p, v_n))

    y0 = _at_rest(residual, y0, n)
    solver = sksundae.ida.IDA(
        residual,
        rtol=rtol,
        atol=rtol * 0.1,
        algebraic_idx=list(range(1, 3 + 2 * HALF)),
        calc_initcond="yp0",
        max_num_steps=10_000_000,
        max_step=2e-6,
    )
    solution = solver.solve(times, y0, np.zeros(size))
    if not solution.success:
        raise RuntimeError(f"IDA stopped: {solution.message}")
    return np.asarray(solution.y[:, 1])


def _at_rest(residual: Any, y0: np.ndarray, n_load: int) -> np.ndarray:
    """Newton with a finite-difference Jacobian and a bounded step, derivatives zero."""
    size = y0.size
    zero = np.zeros(size)
    y = y0.copy()
    f = np.zeros(size)
    shifted = np.zeros(size)
    for _ in range(2000):
        residual(0.0, y, zero, f)
        jacobian = np.zeros((size, size))
        for k in range(size):
            h = 1e-7 * max(abs(y[k]), 1e-3)
            z = y.copy()
            z[k] += h
            residual(0.0, z, zero, shifted)
            jacobian[:, k] = (shifted - f) / h
        step = np.linalg.lstsq(jacobian, -f, rcond=None)[0]
        worst = float(np.max(np.abs(step)))
        y += step * min(1.0, 0.05 / worst) if worst > 0.0 else 0.0
        if worst < 1e-10:
            return y
    raise RuntimeError(f"no static solution, last step {worst:.3g} V")
