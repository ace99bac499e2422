"""The stage around an operating point: a linear network of its parts, with their charge.

Time-domain simulation leaves charge storage of the output devices out; here it is kept, as one
capacitance a device, so that the loop can be judged at frequencies far above the audible ones.
Every law is the kernel's own, linearised where the static solution stands.

Hybrid-pi transistor with beta(f) = h / (1 + j f h / fT), that is a capacitance gm / (2 pi fT)
beside the base-emitter conductance (P. R. Gray et al., "Analysis and Design of Analog
Integrated Circuits", ch. 1; Sedra & Smith, "Microelectronic Circuits"), from memory.
"""

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from tonesim.catalogue import Transistor
from tonesim.circuit import Circuit, Load
from tonesim.kernel.devices import BipolarParams, bipolar
from tonesim.kernel.driver import output_current
from tonesim.kernel.half import CHAIN_NONE, HalfParams, chain_law, first_guess, solve_half
from tonesim.kernel.static import StaticPoint
from tonesim.loop import Network

Matrix = npt.NDArray[np.float64]

ASSUMED_FT_HZ = 2e6  # slow power transistors: 1 to 4 MHz (common practice, no source)
ASSUMED_COLLECTOR_BASE_F = 100e-12  # power transistors: 30 to 300 pF (common practice, no source)
_TIE_V = 1e-6  # across the op-amp's output resistance: neither side gives nor takes


def device_ft_hz(part: Transistor) -> float:
    """Transition frequency of each device of a part in hertz, assumed where none is listed.

    Each device of a Darlington has the listed one, so that at high frequencies the gain of
    the pair is (fT / f)^2.
    """
    return part.ft_hz if part.ft_hz is not None else ASSUMED_FT_HZ


@dataclass(frozen=True)
class HalfSignal:
    """One half at an operating point; magnitudes.

    `gm_s` and `hfe` (d ic / d ib) belong to the device that carries the load current,
    `first_gm_s` and `first_hfe` to the one that drives it (None in a single device);
    `emitter_ohm` is the part's own and the circuit's. `junctions_v` are the unknowns of
    `kernel/half.py` (the last an ampere where there is no chain).
    """

    output_a: float
    chain_a: float
    gm_s: float
    hfe: float
    first_gm_s: float | None
    first_hfe: float | None
    ft_hz: float
    chain_ohm: float
    emitter_ohm: float
    junctions_v: tuple[float, float, float, float]
    residual_a: float

    @property
    def re_ohm(self) -> float:
        """Resistance of the output device's emitter junction, 1 / gm, in ohms."""
        return 1.0 / self.gm_s if self.gm_s > 0.0 else math.inf


@dataclass(frozen=True)
class Follower:
    """The output follower at an operating point.

    `output_a` is the current into the load, positive out of the upper half; `driver_ohm` is
    the op-amp's open-loop output resistance there; `residual_a` the worst equation left over.
    """

    output_v: float
    output_a: float
    driver_ohm: float
    upper: HalfSignal
    lower: HalfSignal
    residual_a: float


def _gain_at(v_be: float, v_bc: float, p: BipolarParams) -> tuple[float, float]:
    """Transconductance and current gain for small signals."""
    _, _, b_e, _, c_e, _ = bipolar(v_be, v_bc, p)
    # Far below cut-off both slopes are too small for a float, and only the law's limit is left.
    return float(c_e), float(c_e / b_e) if b_e > 0.0 else p.hfe


def half_signal(half: HalfParams, u: float, h: float, ft_hz: float) -> HalfSignal:
    """One half for small signals.

    Parameters
    ----------
    half : HalfParams
    u, h : float
        Drive and headroom of the half in volts (see `kernel/half.py`).
    ft_hz : float
        Transition frequency of each of its devices.
    """
    x = np.zeros(4)
    first_guess(u, h, half, x)
    point = solve_half(u, h, h, half, x)
    first: tuple[float, float] | tuple[None, None] = (None, None)
    v_bc = float(x[2])
    if half.darlington:
        first = _gain_at(float(x[0]), v_bc, half.first)
        v_bc -= float(x[0])
    gm_s, hfe = _gain_at(float(x[1]), v_bc, half.device)
    _, v_slope, _, i_slope = chain_law(x[3], half)
    return HalfSignal(
        output_a=float(point.i_out),
        chain_a=float(point.i_drive),
        gm_s=gm_s,
        hfe=hfe,
        first_gm_s=first[0],
        first_hfe=first[1],
        ft_hz=ft_hz,
        chain_ohm=0.0 if half.chain == CHAIN_NONE else float(v_slope / i_slope),
        emitter_ohm=half.r_e + half.r_emitter,
        junctions_v=(float(x[0]), float(x[1]), float(x[2]), float(x[3])),
        residual_a=float(point.residual),
    )


def linearise(
    circuit: Circuit,
    point: StaticPoint,
    rails_v: tuple[float, float],
    load_a: float,
    ft_hz: tuple[float, float],
) -> Follower:
    """Follower at a static solution.

    Parameters
    ----------
    circuit : Circuit
    point : StaticPoint
    rails_v : (float, float)
        Magnitudes of both rails at that point.
    load_a : float
        Current into the load there.
    ft_hz : (float, float)
        Transition frequency of the upper and the lower half's devices.

    Returns
    -------
    Follower
        Where the op-amp neither gives nor takes current, `driver_ohm` is the larger side's.
    """
    v_o, v_d = float(point.v_o), float(point.v_d)
    e = float(point.v_x) - v_d
    around = (e - _TIE_V, e + _TIE_V) if abs(e) < _TIE_V else (e, e)
    siemens = min(float(output_current(side, circuit.driver)[1]) for side in around)
    upper = half_signal(circuit.upper, v_d - v_o, rails_v[0] - v_o, ft_hz[0])
    lower = half_signal(circuit.lower, v_o - v_d, rails_v[1] + v_o, ft_hz[1])
    return Follower(
        output_v=v_o,
        output_a=load_a,
        driver_ohm=1.0 / siemens,
        upper=upper,
        lower=lower,
        residual_a=max(
            float(point.imbalance), float(point.residual), upper.residual_a, lower.residual_a
        ),
    )


def _device(
    v_be: float, v_bc: float, p: BipolarParams, ft_hz: float, e: Matrix, c: Matrix
) -> tuple[Matrix, Matrix]:
    """Base and collector current as rows over a half's unknowns; e and c read both junctions."""
    _, _, b_e, b_c, c_e, c_c = bipolar(v_be, v_bc, p)
    charge = np.roll(e, 1, axis=0) * (c_e / (2.0 * math.pi * ft_hz))
    return b_e * e + b_c * c + charge, c_e * e + c_c * c


def _half_rows(
    half: HalfParams, signal: HalfSignal, collector_base_f: float
) -> tuple[Matrix, Matrix, Matrix]:
    """Node equations of `kernel/half.py`, linear and with charge.

    Returns
    -------
    equations : (4, 2, 4) ndarray
        Four equations; part without and part with s; over the four unknowns.
    output, drive : (2, 4) ndarray
        Current into the output node, and through the chain into the drive node.
    """
    rows = np.zeros((4, 2, 4))
    rows[np.arange(4), 0, np.arange(4)] = 1.0
    x0, x1, x2, x3 = rows
    v0, v1, v2, v3 = signal.junctions_v
    ft_hz = signal.ft_hz
    # x2 is the base-collector voltage of the device that is driven.
    across = np.roll(x2, 1, axis=0) * collector_base_f
    if half.darlington:
        base, collector = _device(v0, v2, half.first, ft_hz, x0, x2)
        base, collector = base + across, collector - across
        base_2, collector_2 = _device(v1, v2 - v0, half.device, ft_hz, x1, x2 - x0)
        emitter_2 = base_2 + collector_2
        w = x1 + half.r_b * base_2 + half.r_e * emitter_2
        inner = base + collector + half.g_1 * x0 - base_2 - half.g_2 * w
        output = emitter_2 + half.g_2 * w
        base = base + half.g_1 * x0
        collector = collector + collector_2
        v_base = half.r_emitter * output + w + x0
        v_collector = v_base - x2
    else:
        base, collector = _device(v1, v2, half.device, ft_hz, x1, x2)
        base, collector = base + across, collector - across
        inner = x0
        output = base + collector
        v_inside = (half.r_emitter + half.r_e) * output + x1
        v_base = v_inside + half.r_b * base
        v_collector = v_inside - x2
    _, v_slope, _, i_slope = chain_law(v3, half)
    chain = i_slope * x3
    equations = np.stack(
        [
            inner,
            -half.r_c * collector - v_collector,
            v_base - v_slope * x3,
            -half.g_feed * v_base - base - chain,
        ]
    )
    return equations, output, chain


def build_network(
    circuit: Circuit,
    follower: Follower,
    load: Load,
    cable_f: float = 0.0,
    collector_base_f: float = ASSUMED_COLLECTOR_BASE_F,
) -> Network:
    """Follower, load and cable as one network between the op-amp's inner source and the output.

    Rails stand still, so the supply's impedance is zero. The lower half's unknowns count with
    the signs of the upper half's.

    Parameters
    ----------
    circuit : Circuit
    follower : Follower
    load : Load
        May differ from the circuit's own.
    cable_f : float
        Capacitance across the load in farads.
    collector_base_f : float
        Capacitance in farads between collector and base of each half's driven device.
    """
    states = load.b.size
    drive, output, first_state = 8, 9, 10
    size = first_state + states + (1 if load.zobel_f else 0)
    m = np.zeros((2, size, size))
    for start, half, signal in (
        (0, circuit.upper, follower.upper),
        (4, circuit.lower, follower.lower),
    ):
        own = slice(start, start + 4)
        equations, to_output, to_drive = _half_rows(half, signal, collector_base_f)
        m[:, own, own] = equations.transpose(1, 0, 2)
        per_u = np.array([0.0, 0.0, -1.0, 0.0])
        per_h = np.array([0.0, 1.0, 0.0, half.g_feed])
        m[0, own, drive] = per_u
        m[0, own, output] = -per_u - per_h
        m[:, drive, own] = -to_drive
        m[:, output, own] = -to_output
    g, c = m
    g[drive, drive] += 1.0 / follower.driver_ohm
    g[output, output] += load.d
    c[output, output] += cable_f
    own = slice(first_state, first_state + states)
    g[output, own] = load.c
    g[own, own] = -load.a
    g[own, output] = -load.b
    c[own, own] = np.eye(states)
    if load.zobel_f:
        siemens = 1.0 / load.zobel_ohm
        g[output, output] += siemens
        g[output, -1] = g[-1, output] = -siemens
        g[-1, -1] = siemens
        c[-1, -1] = load.zobel_f
    source, inject = np.zeros(size), np.zeros(size)
    source[drive] = 1.0 / follower.driver_ohm
    inject[output] = 1.0
    return Network(g, c, source, inject, output)
