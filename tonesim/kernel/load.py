"""Load as a linear state space, stepped by the trapezoidal rule.

    s1 = P s0 + Q (v0 + v1),     i1 = C s1 + D v1 = g v1 + C (P s0 + Q v0)

    P = (1 - dt/2 A)^-1 (1 + dt/2 A),   Q = (1 - dt/2 A)^-1 dt/2 B,   g = C Q + D

The trapezoidal rule is the bilinear transform: it maps the left half-plane onto the unit disc,
so a passive network stays passive at any step. Where both halves let go of an inductive load it
rings at half the step rate, far above what the filters behind it let through; a formula that
damps this (two-step backward differentiation) was tried and is 3 to 6 dB less exact.
A Zobel network is a branch of its own.
"""

from typing import NamedTuple

import numpy as np

from tonesim.kernel.jit import kernel


class LoadParams(NamedTuple):
    """Discretised load: P (n, n), Q (n,), C (n,) and the conductance g = C Q + D."""

    p: np.ndarray
    q: np.ndarray
    c: np.ndarray
    g: float  # of load and Zobel network together
    zobel_g: float  # 1 / (R + dt / 2C), siemens (0: no network)
    zobel_k: float  # dt / 2C, ohm


@kernel
def load_history(s, v, p, out):
    """Fill out = P s + Q v; return C out, the part of the next current already known."""
    n = p.q.size
    i = 0.0
    for r in range(n):
        y = p.q[r] * v
        for k in range(n):
            y += p.p[r, k] * s[k]
        out[r] = y
        i += p.c[r] * y
    return i


@kernel
def zobel_step(v_c, i, v, p):
    """Capacitor voltage and current of the Zobel network after a step to the voltage v."""
    i_new = p.zobel_g * (v - v_c - p.zobel_k * i)
    return v_c + p.zobel_k * (i + i_new), i_new
