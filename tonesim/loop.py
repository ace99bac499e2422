"""A feedback loop in small signals: an op-amp of two poles around a linear network.

The network is a pair of matrices, (g + s c) y = drive v_x + inject i, first order in s
throughout, so that its response and its poles come from the same numbers. The loop is cut at
the op-amp's inner source v_x, which nothing loads: L = A F beta, with A the op-amp, F the
network from v_x to its output and beta the feedback divider.
"""

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from tonesim.catalogue import OpAmp

Vector = npt.NDArray[np.float64]
Matrix = npt.NDArray[np.float64]
Response = npt.NDArray[np.complex128]

ASSUMED_PHASE_MARGIN_DEG = 60.0  # common practice, no source
_TYPICAL = 2.0 * math.pi * 1e6  # rad/s, weighs both matrices alike


@dataclass(frozen=True)
class OpAmpPoles:
    """An op-amp of two poles.

    A(f) = A0 / ((1 + j f A0 / GBW) (1 + j f / f2)); `phase_margin_deg` is meant at the gain
    `margin_gain`, 1 for an op-amp that is stable at unity gain.
    """

    gain_bandwidth_hz: float
    dc_gain: float
    second_pole_hz: float
    phase_margin_deg: float
    margin_gain: float
    margin_assumed: bool


def second_pole(crossover_hz: float, phase_margin_deg: float) -> tuple[float, float]:
    """Second pole of a loop of two poles, from its crossover and its phase margin.

    The dominant pole takes 90 degrees: f2 = fu tan(PM), GBW = fu sqrt(1 + (fu / f2)^2).

    Returns
    -------
    second_pole_hz, gain_bandwidth_hz : float
        The latter is what the slope below the second pole points at.
    """
    pole = crossover_hz * math.tan(math.radians(phase_margin_deg))
    return pole, crossover_hz * math.hypot(1.0, crossover_hz / pole)


def opamp_poles(part: OpAmp) -> OpAmpPoles:
    """Poles of an op-amp from its data sheet's figures.

    Its phase margin is meant at the lowest gain it is stable at. Where the sheet lists none,
    `ASSUMED_PHASE_MARGIN_DEG` stands in, and `margin_assumed` says so.
    """
    margin = part.phase_margin_deg
    degrees = ASSUMED_PHASE_MARGIN_DEG if margin is None else margin
    reach = part.gain_bandwidth_hz / part.min_stable_gain
    pole, _ = second_pole(reach * math.sin(math.radians(degrees)), degrees)
    return OpAmpPoles(
        gain_bandwidth_hz=part.gain_bandwidth_hz,
        dc_gain=part.dc_gain,
        second_pole_hz=pole,
        phase_margin_deg=degrees,
        margin_gain=part.min_stable_gain,
        margin_assumed=margin is None,
    )


def opamp_gain(poles: OpAmpPoles, frequency_hz: npt.ArrayLike) -> Response:
    """Open-loop gain of an op-amp, (N,) complex, at (N,) frequencies in hertz."""
    jf = 1j * np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    first = 1.0 / poles.dc_gain + jf / poles.gain_bandwidth_hz
    return np.asarray(1.0 / (first * (1.0 + jf / poles.second_pole_hz)))


class Network(NamedTuple):
    """A linear network, (g + s c) y = drive v_x + inject i; y[output] is the output voltage."""

    g: Matrix  # (N, N)
    c: Matrix  # (N, N)
    drive: Vector  # (N,) per volt of the op-amp's inner source
    inject: Vector  # (N,) per ampere pushed into the output node
    output: int


def response(network: Network, column: Vector, frequency_hz: npt.ArrayLike) -> Response:
    """Output voltage, (F,) complex, for a unit in a source column at (F,) frequencies in hertz.

    With ``network.drive`` it is the follower's gain F, with ``network.inject`` the impedance
    of the output node in ohms, the op-amp's inner source standing still.
    """
    s = 2j * np.pi * np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    solved = np.linalg.solve(network.g + s[:, None, None] * network.c, column[:, None])
    return np.asarray(solved[:, network.output, 0])


def loop_pencil(network: Network, poles: OpAmpPoles, beta: float) -> tuple[Matrix, Matrix]:
    """Matrices g, c of the closed loop without an input: its poles solve det(g + s c) = 0.

    Two more unknowns are the op-amp's: v_1 (1/A0 + s/(2 pi GBW)) = -beta v_o and
    v_x (1 + s/(2 pi f2)) = v_1. Rows are scaled, which moves no pole.
    """
    n = network.drive.size
    g, c = np.zeros((n + 2, n + 2)), np.zeros((n + 2, n + 2))
    g[:n, :n], c[:n, :n] = network.g, network.c
    g[:n, n + 1] = -network.drive
    g[n, n], c[n, n] = 1.0 / poles.dc_gain, 1.0 / (2.0 * math.pi * poles.gain_bandwidth_hz)
    g[n, network.output] = beta
    g[n + 1, n + 1], c[n + 1, n + 1] = 1.0, 1.0 / (2.0 * math.pi * poles.second_pole_hz)
    g[n + 1, n] = -1.0
    scale = np.max(np.abs(g) + np.abs(c) * _TYPICAL, axis=1, keepdims=True)
    return g / scale, c / scale


def loop_gain(
    network: Network, poles: OpAmpPoles, beta: float, frequency_hz: npt.ArrayLike
) -> Response:
    """Loop gain A F beta, (F,) complex, at (F,) frequencies in hertz."""
    follower = response(network, network.drive, frequency_hz)
    return np.asarray(opamp_gain(poles, frequency_hz) * follower * beta)
