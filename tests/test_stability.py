"""Loop gain, margins and verdicts against closed forms, hand nodal solutions and scipy.signal."""

import dataclasses
import functools
import json
import math

import numpy as np
import pytest
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from tonesim import stage
from tonesim.catalogue import load_catalogue
from tonesim.circuit import Circuit, Load, load_impedance, load_resistance, lower
from tonesim.curve import idle_point, static_point
from tonesim.design import Design
from tonesim.designfile import list_presets, load_design
from tonesim.errors import SolverError, UsageError
from tonesim.kernel.static import solve_static
from tonesim.loop import (
    Network,
    OpAmpPoles,
    loop_gain,
    loop_pencil,
    opamp_gain,
    opamp_poles,
    response,
    second_pole,
)
from tonesim.margins import (
    Margins,
    find_margins,
    growing_poles,
    judge,
    least_damping,
    overshoot_percent,
    pencil_poles,
)
from tonesim.smallsignal import Follower, build_network, device_ft_hz
from tonesim.stability import (
    AS_DESIGNED,
    NO_LOAD,
    damping_factor,
    estimate_stability,
    follower_at,
    judge_loop,
    output_impedance,
)
from tonesim.units import thermal_voltage

# A single pair with enough idle current, into a resistor: one crossover, no resonance.
PLAIN = {
    "output.upper": "MJE15030",
    "output.lower": "MJE15031",
    "output.emitter_ohm": 0.47,
    "bias.feed_ohm": 1000.0,
    "bias.upper": ["1N4001"],
    "bias.lower": ["1N4001"],
    "driver.part": "NE5532",
}
DARLINGTON = {"bias.upper": ["1N4148", "1N4148"], "bias.lower": ["1N4148", "1N4148"]}
# The output follows the op-amp's inner source at once.
WIRE = Network(np.eye(1), np.zeros((1, 1)), np.ones(1), np.ones(1), 0)


def _two_poles(gain_bandwidth_hz: float, second_pole_hz: float) -> OpAmpPoles:
    # A DC gain so high that the dominant pole is an integrator.
    return OpAmpPoles(gain_bandwidth_hz, 1e12, second_pole_hz, 45.0, 1.0, False)


@functools.cache
def _solved(name: str) -> tuple[Design, Circuit]:
    design = make_design({"plain": PLAIN, "darlington": DARLINGTON}[name])
    return design, lower(design)


# ---- op-amp ----


def test_tl072_phase_margin_gives_its_second_pole():
    # TL072 sheet: phase margin 45 degrees; at a crossover of 3 MHz that is a second pole at
    # 3 MHz and a gain-bandwidth product of 4.24 MHz (4 MHz typical is listed at 100 kHz).
    pole, gain_bandwidth = second_pole(3e6, 45.0)
    assert pole == pytest.approx(3e6)
    assert gain_bandwidth == pytest.approx(3e6 * math.sqrt(2.0))
    assert gain_bandwidth == pytest.approx(4.24e6, rel=1e-3)


@pytest.mark.parametrize("name", sorted(load_catalogue().opamps))
def test_an_op_amp_alone_has_the_phase_margin_of_its_sheet(name):
    part = load_catalogue().opamp(name)
    poles = opamp_poles(part)
    found = find_margins(lambda f: opamp_gain(poles, f) / part.min_stable_gain)
    assert poles.margin_assumed == (part.phase_margin_deg is None)
    # The dominant pole takes 90 degrees less its corner over the crossover, below 0.01 degrees.
    assert found.phase_margin_deg == pytest.approx(part.phase_margin_deg or 60.0, abs=0.01)
    assert found.gain_margin_db is None  # two poles never reach -180 degrees
    assert abs(opamp_gain(poles, 0.0)[0]) == pytest.approx(part.dc_gain)
    # Well between the poles gain times frequency is the gain-bandwidth product.
    f = 1e-3 * poles.second_pole_hz
    product = f * abs(opamp_gain(poles, f)[0])
    corner = part.gain_bandwidth_hz / part.dc_gain
    assert product == pytest.approx(part.gain_bandwidth_hz, rel=1e-5 + (corner / f) ** 2)


# ---- two poles: closed forms ----

# Second-order feedback loop, L = (GBW / (j f G)) / (1 + j f / fp): natural frequency
# sqrt(GBW fp / G), damping 0.5 sqrt(fp G / GBW) (K. Ogata, "Modern Control Engineering").
TWO_POLES = [
    # GBW, G, fp, crossover, phase margin, damping, overshoot %, peak dB
    (10e6, 2.0, 3e6, 3.341e6, 41.92, 0.3873, 26.72, 2.924),
    (3e6, 23.0, 300e3, 121.0e3, 68.04, 0.7583, 2.59, 0.0),
]


@pytest.mark.parametrize(("gbw", "gain", "fp", "fc", "pm", "zeta", "over", "peak"), TWO_POLES)
def test_two_poles_agree_with_the_closed_form(gbw, gain, fp, fc, pm, zeta, over, peak):
    poles = _two_poles(gbw, fp)
    found = find_margins(functools.partial(loop_gain, WIRE, poles, 1.0 / gain))
    # Half a unit of the last digit printed.
    assert found.crossover_hz == pytest.approx(fc, rel=4.2e-4)
    assert found.phase_margin_deg == pytest.approx(pm, abs=0.006)
    assert found.gain_margin_db is None
    assert found.peak_db == pytest.approx(peak, abs=6e-4)
    # Exactly: x^2 (1 + x^2) = (GBW / (G fp))^2 with x = fc / fp.
    ratio = gbw / (gain * fp)
    x = math.sqrt((math.sqrt(1.0 + 4.0 * ratio**2) - 1.0) / 2.0)
    assert found.crossover_hz == pytest.approx(x * fp, rel=1e-9)
    assert found.phase_margin_deg == pytest.approx(90.0 - math.degrees(math.atan(x)), rel=1e-9)
    closed = pencil_poles(*loop_pencil(WIRE, poles, 1.0 / gain))
    assert growing_poles(closed) == 0
    damping = least_damping(closed)
    assert damping == pytest.approx(0.5 * math.sqrt(fp * gain / gbw), rel=1e-9)
    assert damping == pytest.approx(zeta, abs=6e-5)
    assert overshoot_percent(damping) == pytest.approx(over, abs=6e-3)
    natural = math.sqrt(gbw * fp / gain)
    assert np.abs(closed) == pytest.approx(2.0 * math.pi * natural, rel=1e-9)


def test_the_overshoot_is_that_of_a_step_through_scipy():
    gbw, gain, fp = TWO_POLES[0][:3]
    w = 2.0 * math.pi * math.sqrt(gbw * fp / gain)
    zeta = 0.5 * math.sqrt(fp * gain / gbw)
    _, y = signal.step(([w * w], [1.0, 2.0 * zeta * w, w * w]), N=20_001)
    assert 100.0 * (y.max() - 1.0) == pytest.approx(overshoot_percent(zeta), abs=1e-4)
    assert overshoot_percent(1.0) == 0.0


# ---- margins against polynomials ----


def _margins_by_roots(zeros, poles, k):
    """Margins of k prod(s - z) / prod(s - p) from the roots of polynomials in w alone."""
    # On s = j w both are polynomials in w; a product with its conjugate is one in real numbers.
    num = np.poly1d(np.real_if_close(np.poly(zeros) * k))
    den = np.poly1d(np.real_if_close(np.poly(poles)))

    def on_axis(p):
        return np.poly1d([c * 1j**n for c, n in zip(p.c, range(p.order, -1, -1), strict=True)])

    def conj(p):
        return np.poly1d(np.conj(p.c))

    n, d = on_axis(num), on_axis(den)

    def positive(roots):
        return [r.real for r in roots if abs(r.imag) < 1e-6 * abs(r) and r.real > 0.0]

    def at(w):
        return n(w) / d(w)

    unity = positive((n * conj(n) - d * conj(d)).roots)
    turning = positive(np.poly1d(np.imag((n * conj(d)).c)).roots)
    phases = [(np.degrees(np.angle(-at(w))), w / (2 * np.pi)) for w in unity]
    gains = [(-20 * np.log10(abs(at(w))), w / (2 * np.pi)) for w in turning if at(w).real < 0.0]
    return phases, gains


def _loop_of(zeros, poles, k):
    def loop(f):
        _, h = signal.freqs_zpk(zeros, poles, k, worN=2.0 * np.pi * f)
        return h

    return loop


@settings(max_examples=60)
@given(
    corners=st.lists(st.floats(2.5, 6.5), min_size=3, max_size=4),
    gain=st.floats(1.0, 4.0),
)
def test_margins_agree_with_roots_of_polynomials(corners, gain):
    # An outside reference: scipy.signal evaluates the loop, numpy's roots find the crossings.
    poles = [-2.0 * np.pi * 10.0**c for c in corners]
    k = 10.0**gain * np.prod(np.abs(poles))
    phases, gains = _margins_by_roots([], poles, k)
    closed = np.roots(np.polyadd(np.poly(poles), [k]))
    oscillates = bool(np.any(closed.real > 0.0))
    found = find_margins(_loop_of([], poles, k), oscillates)
    # Only poles: one crossing each. Roots of a polynomial of degree 8 hold about 1e-7.
    assert len(phases) == len(gains) == 1
    wanted = phases[0][0] if oscillates else abs(phases[0][0])
    assert found.phase_margin_deg == pytest.approx(wanted, abs=1e-3)
    assert found.crossover_hz == pytest.approx(phases[0][1], rel=1e-5)
    assert found.gain_margin_db == pytest.approx(gains[0][0], abs=1e-4)
    assert found.turnover_hz == pytest.approx(gains[0][1], rel=1e-5)
    # Nyquist's criterion for a stable loop gain of poles alone.
    assert (found.gain_margin_db < 0.0) == oscillates


def test_the_worst_of_several_crossings_is_taken():
    # A resonance lifts the loop gain above 1 again, past its first crossover.
    w = 2.0 * np.pi
    ring = [w * 1e5 * (-0.01 + 1j), w * 1e5 * (-0.01 - 1j)]
    poles = [-w * 10.0, *ring]
    k = 1e3 * abs(poles[0]) * abs(ring[0]) ** 2
    phases, gains = _margins_by_roots([], poles, k)
    closed = np.roots(np.polyadd(np.poly(poles), [k]))
    assert len(phases) == 3
    assert np.any(closed.real > 0.0)
    found = find_margins(_loop_of([], poles, k), oscillates=True)
    assert found.phase_margin_deg == pytest.approx(min(phases)[0], abs=1e-4)
    assert found.gain_margin_db == pytest.approx(min(gains)[0], abs=1e-4)
    assert found.peak_db is None
    assert found.phase_margin_deg < 0.0


def test_a_conditionally_stable_loop_says_how_much_gain_it_can_lose():
    # Three integrator-like poles and two zeros: the phase dips below -180 degrees and returns.
    w = 2.0 * np.pi
    poles, zeros = [-w, -w * 1.1, -w * 1.2], [-w * 1e3, -w * 1.1e3]
    k = 1e5 * w  # crosses 1 a hundred times above the zeros
    phases, gains = _margins_by_roots(zeros, poles, k)
    closed = np.roots(np.polyadd(np.poly(poles), k * np.poly(zeros)))
    assert np.all(closed.real < 0.0)
    found = find_margins(_loop_of(zeros, poles, k))
    nearest = min(gains, key=lambda g: abs(g[0]))
    assert nearest[0] < 0.0
    assert found.gain_margin_db == pytest.approx(nearest[0], abs=1e-3)
    assert found.phase_margin_deg == pytest.approx(phases[0][0], abs=1e-3)


def test_a_loop_gain_below_one_has_no_margins_and_is_steady():
    found = find_margins(_loop_of([], [-1e4], 0.5e4))
    assert found.phase_margin_deg is None
    assert found.gain_margin_db is None
    assert judge(found, 1.0) == "steady"


@pytest.mark.parametrize(
    ("degrees", "decibels", "damping", "verdict"),
    [
        (45.0, 6.0, 0.1, "steady"),
        (44.9, 20.0, 0.5, "marginal"),
        (20.0, 20.0, 0.5, "marginal"),
        (19.9, 20.0, 0.5, "likely to oscillate"),
        (80.0, 5.9, 0.5, "marginal"),
        (80.0, -5.9, 0.5, "marginal"),
        (80.0, 2.9, 0.5, "likely to oscillate"),
        (80.0, 20.0, 0.09, "marginal"),
        (80.0, 20.0, 0.02, "likely to oscillate"),
        (None, None, -0.1, "likely to oscillate"),
        (None, None, 1.0, "steady"),
    ],
)
def test_the_verdict_follows_the_worst_figure(degrees, decibels, damping, verdict):
    assert judge(Margins(1e5, degrees, 1e6, decibels, 0.0, 1e5), damping) == verdict


# ---- follower ----


class Nodal:
    """Complex nodal analysis at many frequencies: nodes are names, None is ground."""

    def __init__(self, frequency_hz):
        self.s = 2j * np.pi * frequency_hz
        self.names: dict[str, int] = {}
        self.stamps: list[tuple[str, str, np.ndarray]] = []

    def _stamp(self, row, column, value):
        if row is not None and column is not None:
            for name in (row, column):
                self.names.setdefault(name, len(self.names))
            self.stamps.append((row, column, value * np.ones_like(self.s)))

    def admittance(self, p, q, y):
        for one, other in ((p, q), (q, p)):
            self._stamp(one, one, y)
            self._stamp(one, other, -y)

    def resistor(self, p, q, ohm):
        self.admittance(p, q, 1.0 / max(ohm, 1e-7))  # a wire where there is none

    def transistor(self, b, c, e, gm, hfe, ft_hz):
        """Hybrid-pi transistor, beta(f) = hfe / (1 + j f hfe / fT)."""
        f = self.s.imag / (2.0 * np.pi)
        self.admittance(b, e, gm / hfe * (1.0 + 1j * f * hfe / ft_hz))
        for node, sign in ((c, gm), (e, -gm)):
            self._stamp(node, b, sign)
            self._stamp(node, e, -sign)

    def solve(self, node, currents):
        n = len(self.names)
        y = np.zeros((self.s.size, n, n), complex)
        for row, column, value in self.stamps:
            y[:, self.names[row], self.names[column]] += value
        i = np.zeros((n, 1), complex)
        for name, ampere in currents.items():
            i[self.names[name]] = ampere
        return np.linalg.solve(y, i)[:, self.names[node], 0]


def _by_hand(circuit: Circuit, follower: Follower, f, cable_f, cob_f):
    """Follower's gain by nodal analysis; gm, gain and chain resistance as `follower` lists them."""
    net = Nodal(f)
    for h, half, p in (("u", follower.upper, circuit.upper), ("l", follower.lower, circuit.lower)):
        base, inner, collector, middle, second, emitter, outer = (f"{h}{k}" for k in range(7))
        net.resistor("drive", base, half.chain_ohm)
        net.admittance(base, None, p.g_feed)
        net.resistor(collector, None, p.r_c)
        if p.darlington:
            inner = base  # the first device has no base resistance of its own
            net.transistor(base, collector, middle, half.first_gm_s, half.first_hfe, half.ft_hz)
            net.admittance(base, middle, p.g_1)
            net.resistor(middle, second, p.r_b)
            net.transistor(second, collector, emitter, half.gm_s, half.hfe, half.ft_hz)
            net.admittance(middle, outer, p.g_2)
        else:
            net.resistor(base, inner, p.r_b)
            net.transistor(inner, collector, emitter, half.gm_s, half.hfe, half.ft_hz)
        net.resistor(emitter, outer, p.r_e)
        net.resistor(outer, "out", p.r_emitter)
        net.admittance(inner, collector, net.s * cob_f)
    net.admittance("out", None, 1.0 / load_impedance(circuit.load, f) + net.s * cable_f)
    net.resistor("drive", None, follower.driver_ohm)
    return net.solve("out", {"drive": 1.0 / follower.driver_ohm})


LOUDSPEAKER = {
    **DARLINGTON,
    "load": {"part": "12-inch-8-ohm", "zobel_ohm": 10.0, "zobel_f": 100e-9},
}
MULTIPLIER = {
    "bias": {
        "feed_ohm": 3300.0,
        "multiplier": {
            "part": "BC547",
            "collector_base_ohm": 820.0,
            "base_emitter_ohm": 1000.0,
        },
    }
}


@pytest.mark.parametrize("changes", [PLAIN, DARLINGTON, LOUDSPEAKER, MULTIPLIER])
@pytest.mark.parametrize("share", [None, 0.2, -0.6])
@pytest.mark.parametrize("cable_f", [0.0, 10e-9])
def test_the_follower_agrees_with_a_hybrid_pi_circuit_solved_by_hand(changes, share, cable_f):
    design = make_design(changes)
    circuit = lower(design)
    follower = follower_at(circuit, design, share)
    f = np.logspace(0, 8, 161)
    network = build_network(circuit, follower, circuit.load, cable_f, 150e-12)
    found = response(network, network.drive, f)
    wanted = _by_hand(circuit, follower, f, cable_f, 150e-12)
    # What is left: leakage of reverse-biased junctions and the wires of 0.1 microohm.
    assert np.max(np.abs(found - wanted)) < 1e-6 * np.max(np.abs(wanted))


def test_one_conducting_half_follows_the_textbook_formula():
    # Emitter follower, output resistance re + RE + Rs / (1 + beta) before its load, with
    # beta = h / (1 + j f h / fT) (Sedra & Smith, "Microelectronic Circuits", from memory).
    base = {"output.upper": "2SC5200", "output.lower": "2SA1943", "bias": {}}
    design = make_design({**base, "output.emitter_ohm": 0.5})
    circuit = lower(design)
    follower = follower_at(circuit, design, 0.8)
    half, part = follower.upper, design.output.upper
    f = np.logspace(1, 7, 61)
    beta = half.hfe / (1.0 + 1j * f * half.hfe / part.ft_hz)
    # The junction itself is 1 / gm over alpha.
    z = 1.0 / half.gm_s * beta / (1.0 + beta) + half.emitter_ohm
    z = z + follower.driver_ohm / (1.0 + beta)
    ohm = load_resistance(circuit.load)
    wanted = ohm / (ohm + z)
    network = build_network(circuit, follower, circuit.load, 0.0, 0.0)
    found = response(network, network.drive, f)
    # The other half is off but for its leakage.
    assert found == pytest.approx(wanted, rel=1e-6)


def test_an_operating_point_has_the_laws_of_the_catalogue():
    design, circuit = _solved("plain")
    follower = follower_at(circuit, design, 0.5)
    part = design.output.upper
    half = follower.upper
    assert follower.output_a == pytest.approx(0.5, rel=1e-6)
    assert follower.output_v == pytest.approx(0.5 * circuit.bench_ohm, rel=1e-6)
    feedback_a = follower.upper.output_a - follower.lower.output_a
    assert feedback_a == pytest.approx(0.5, rel=1e-6)
    # gm = IC / Vt, and d ic / d ib of hfe / (1 + (IC / Ik)^m) (Sedra & Smith for the former).
    base_a = half.output_a / (1.0 + part.hfe / (1.0 + (half.output_a / part.knee_a) ** 2))
    collector_a = half.output_a - base_a
    assert half.gm_s == pytest.approx(collector_a / thermal_voltage(25.0), rel=1e-3)
    knee = (collector_a / part.knee_a) ** part.knee_exponent
    assert half.hfe == pytest.approx(part.hfe / (1.0 + (1.0 + part.knee_exponent) * knee), rel=1e-3)
    assert half.re_ohm * half.gm_s == pytest.approx(1.0)
    assert half.emitter_ohm == pytest.approx(0.47 + part.emitter_ohm)
    assert half.ft_hz == part.ft_hz
    assert half.first_gm_s is None
    assert follower.lower.gm_s < 0.1 * half.gm_s
    assert follower.residual_a < 1e-6
    mirrored = follower_at(circuit, design, -0.5)
    assert mirrored.lower.gm_s == pytest.approx(half.gm_s, rel=1e-6)
    # The driver's limit makes its output resistance rise with its current.
    assert follower.driver_ohm > circuit.driver.r_source


def test_idle_is_the_point_the_bench_shows():
    design, circuit = _solved("darlington")
    idle = idle_point(circuit)
    follower = follower_at(circuit, design, idle=idle)
    # The bench counts the catch diode's leak of 22 nA as well.
    assert follower.upper.output_a == pytest.approx(idle.upper_current_a, abs=3e-8)
    # At rest the driver neither gives nor takes: the mean of its two sides counts.
    resting = 0.5 * (circuit.driver.r_source + circuit.driver.r_sink)
    assert follower.driver_ohm == pytest.approx(resting, rel=1e-2)
    assert follower.lower.chain_a == pytest.approx(idle.lower_chain_a, rel=1e-9)
    assert follower.upper.first_gm_s is not None
    # A silicon junction carries n Vt / I; two of them and their bulk resistance.
    diode = design.bias.upper[0]
    wanted = diode.n * thermal_voltage(25.0) / idle.upper_chain_a + diode.series_ohm
    assert follower.upper.chain_ohm == pytest.approx(2.0 * wanted, rel=1e-3)


@pytest.mark.parametrize("changes", [PLAIN, DARLINGTON, LOUDSPEAKER, MULTIPLIER, {}])
@pytest.mark.parametrize("output_a", [0.0, 0.15, -0.6])
def test_at_direct_current_the_gain_is_the_slope_of_the_static_solution(changes, output_a):
    # With a gain of 500 the loop shows its follower; slope by central differences.
    part = {"like": "TL072", "dc_gain": 500.0}
    design = make_design({**changes, "driver.part": part})
    circuit = lower(design)
    idle = idle_point(circuit)
    siemens = 1.0 / circuit.bench_ohm
    follower = follower_at(circuit, design, output_a, idle)
    load = Load(np.zeros((0, 0)), np.zeros(0), np.zeros(0), siemens)
    network = build_network(circuit, follower, load)
    loop = loop_gain(network, opamp_poles(design.driver.part), circuit.driver.beta, 0.0)[0].real
    rails = (idle.rail_positive.mean_v, idle.rail_negative.mean_v)

    def output(v_in):
        q = circuit.driver
        point = solve_static(v_in, *rails, siemens, 0.0, circuit.upper, circuit.lower, q)
        return point.v_o, point.v_x

    # The input at which a gain of 500 stands at the same point.
    drive = follower.output_v * circuit.driver.beta
    for _ in range(60):
        drive += circuit.driver.beta * (follower.output_v - output(drive)[0])
    assert output(drive)[0] == pytest.approx(follower.output_v, abs=1e-6)
    dv = 1e-6
    slope = (output(drive + dv)[0] - output(drive - dv)[0]) / (2.0 * dv)
    # Differences hold about 1e-4: the static solution is exact to 1e-10 V or so.
    assert loop / (1.0 + loop) / circuit.driver.beta == pytest.approx(slope, rel=1e-3)


def test_parts_without_a_transition_frequency_get_an_assumed_one():
    catalogue = load_catalogue()
    assert catalogue.transistor("TIP142").ft_hz is None
    assert device_ft_hz(catalogue.transistor("TIP142")) == pytest.approx(2e6)
    assert device_ft_hz(catalogue.transistor("TIP41C")) == pytest.approx(3e6)


# ---- closed loop ----


@settings(max_examples=40)
@given(
    cable=st.floats(-10.0, -6.5),
    current=st.floats(-0.7, 0.7),
    kind=st.sampled_from(["plain", "darlington"]),
)
def test_growing_poles_are_what_nyquist_s_criterion_counts(cable, current, kind):
    # Z = P + turns of 1 + L around zero (H. Nyquist, Bell System Technical Journal, 1932).
    design, circuit = _solved(kind)
    follower = follower_at(circuit, design, current)
    network = build_network(circuit, follower, circuit.load, 10.0**cable)
    poles, beta = opamp_poles(design.driver.part), circuit.driver.beta
    f = np.logspace(-2, 11, 13_001)
    angle = np.unwrap(np.angle(1.0 + loop_gain(network, poles, beta, f)))
    clockwise = -(angle[-1] - angle[0]) / np.pi  # negative frequencies turn as much again
    open_loop = growing_poles(pencil_poles(network.g, network.c))
    closed = pencil_poles(*loop_pencil(network, poles, beta))
    assert growing_poles(closed) == open_loop + round(clockwise)
    assert clockwise == pytest.approx(round(clockwise), abs=1e-3)


@settings(max_examples=25)
@given(low=st.floats(0.0, 30e-9), more=st.floats(0.1e-9, 30e-9), current=st.floats(-0.7, 0.7))
def test_more_cable_never_raises_the_margin_of_a_plain_stage(low, more, current):
    design, circuit = _solved("plain")
    follower = follower_at(circuit, design, current)

    def phase(cable_f):
        case = judge_loop(circuit, design, follower, circuit.load, cable_f)
        assert case.margins.phase_margin_deg is not None
        assert case.growing_poles == 0
        return case.margins.phase_margin_deg

    assert phase(low + more) <= phase(low) + 1e-9


@settings(max_examples=25)
@given(ft=st.floats(1e6, 60e6), less=st.floats(0.3, 0.98), current=st.floats(-0.7, 0.7))
def test_slower_devices_never_raise_the_margin_of_a_plain_stage(ft, less, current):
    design, circuit = _solved("plain")
    follower = follower_at(circuit, design, current)

    def phase(ft_hz):
        slower = dataclasses.replace(
            follower,
            upper=dataclasses.replace(follower.upper, ft_hz=ft_hz),
            lower=dataclasses.replace(follower.lower, ft_hz=ft_hz),
        )
        case = judge_loop(circuit, design, slower, circuit.load)
        assert case.growing_poles == 0
        return case.margins.phase_margin_deg

    assert phase(ft * less) <= phase(ft) + 1e-9


def test_output_impedance_is_what_two_loads_show_at_rest():
    # A gain of 2000 leaves milliohms; measured as a builder does, from the voltages into two loads.
    part = {"like": "TL072", "dc_gain": 2000.0}
    for changes in (PLAIN, DARLINGTON):
        design = make_design({**changes, "driver.part": part})
        circuit = lower(design)
        idle = idle_point(circuit)
        found = output_impedance(circuit, design, [1e-3], idle=idle)[0]
        rails = (idle.rail_positive.mean_v, idle.rail_negative.mean_v)
        v, siemens = [], []
        for ohm in (8.0, 16.0):
            other = lower(make_design({**changes, "driver.part": part, "load.ohm": ohm}))
            # Small enough to stay near the idle point.
            v.append(static_point(other, 1e-4, *rails).v_o)
            siemens.append(1.0 / ohm)
        wanted = (v[1] - v[0]) / (v[0] * siemens[0] - v[1] * siemens[1])
        assert found.real == pytest.approx(wanted, rel=2e-3)
        assert abs(found.imag) < 1e-3 * found.real
        assert found.real > 1e-3


def test_the_damping_factor_is_the_rated_load_over_the_output_impedance():
    design, circuit = _solved("plain")
    at_1k = output_impedance(circuit, design, [1e3])[0]
    assert damping_factor(circuit, design) == pytest.approx(8.0 / abs(at_1k))
    # Output impedance rises where the loop gain falls, a decade by about a decade.
    at_10k = output_impedance(circuit, design, [1e4])[0]
    assert abs(at_10k) == pytest.approx(10.0 * abs(at_1k), rel=0.02)


# ---- whole designs ----


def _finite(value):
    if isinstance(value, dict):
        return all(_finite(v) for v in value.values())
    if isinstance(value, (list, tuple)):
        return all(_finite(v) for v in value)
    return not isinstance(value, float) or math.isfinite(value)


@pytest.mark.parametrize("preset", list_presets())
def test_every_preset_gets_finite_figures_and_a_verdict(preset):
    design = load_design(preset)
    found = estimate_stability(design)
    assert found.residual_a < 1e-6
    assert _finite(json.loads(json.dumps(found.as_dict())))
    assert found.noise_gain == pytest.approx(design.driver.gain)
    assert {case.load for case in found.cases} == {
        AS_DESIGNED,
        NO_LOAD,
        *(f"{c} nF of cable" for c in (1, 10, 100)),
    }
    for case in found.cases:
        m = case.margins
        assert 0.0 < case.follower_gain < 1.0
        assert m.crossover_hz is not None
        assert (m.phase_margin_deg is None) == case.follower_grows
        assert (m.peak_db is None) == (case.growing_poles > 0)
        assert (case.damping < 0.0) == (case.growing_poles > 0)
        assert case.verdict == judge(m, case.damping)
        if case.growing_poles:
            assert case.verdict == "likely to oscillate"
    order = ["steady", "marginal", "likely to oscillate"]
    assert found.worst.verdict == max((c.verdict for c in found.cases), key=order.index)
    assert found.worst_into(NO_LOAD).load == NO_LOAD
    words = " ".join(found.left_out)
    for left_out in ("Layout", "wiring inductance", "supply's impedance"):
        assert left_out in words


def test_a_stage_without_chain_is_judged_outside_its_dead_zone():
    found = estimate_stability(load_design("no-chain"))
    assert found.dead_zone
    assert any("dead zone" in text for text in found.assumptions)
    states = {case.state for case in found.cases if case.load == AS_DESIGNED}
    assert "idle" not in states
    edge = next(case for case in found.cases if "outside" in case.state)
    full = next(case for case in found.cases if "10 %" in case.state)
    assert edge.output_a < 0.1 * full.output_a
    assert edge.follower_gain == pytest.approx(0.5 * full.follower_gain, rel=0.05)
    biased = estimate_stability(load_design("full-chain"))
    assert not biased.dead_zone
    assert not any("dead zone" in text for text in biased.assumptions)


def test_a_mirrored_stage_is_judged_once_and_an_unlike_one_twice():
    def sides(name):
        found = estimate_stability(load_design(name), cables_f=())
        return {case.state.split()[0] for case in found.cases if "%" in case.state}

    assert sides("full-chain") == {"upper"}
    assert sides("mismatched-pair") == {"upper", "lower"}


def test_an_op_amp_below_its_least_gain_is_pointed_out():
    low = {"driver.feedback_ohm": 1000.0, "driver.ground_leg_ohm": 1000.0}
    found = estimate_stability(make_design({**PLAIN, **low, "driver.part": "NE5534"}))
    assert found.noise_gain == pytest.approx(2.0)
    assert found.min_stable_gain == 3.0
    assert found.below_min_stable_gain
    alike = estimate_stability(make_design({**PLAIN, **low, "driver.part": "NE5532"}))
    assert not alike.below_min_stable_gain
    # The same two figures but for the least gain: less margin.
    worst = found.worst_into(AS_DESIGNED).margins.phase_margin_deg
    assert worst is not None
    assert worst < (alike.worst_into(AS_DESIGNED).margins.phase_margin_deg or 0.0)


def test_assumptions_are_told_from_what_is_listed():
    texts = " ".join(estimate_stability(load_design("four-ohm-loudspeaker")).assumptions)
    assert "NE5532: second pole" in texts
    assert "60 degrees at a gain of 1, assumed" in texts
    assert "TIP142: transition frequency 2 MHz" in texts
    assert texts.count("none is listed") == 3
    texts = " ".join(estimate_stability(load_design("full-chain")).assumptions)
    assert "45 degrees at a gain of 1, as listed" in texts
    assert "none is listed" not in texts


def test_the_same_design_gives_the_same_figures():
    design = make_design(PLAIN)
    assert estimate_stability(design) == estimate_stability(design)


# ---- bad input ----


@pytest.mark.parametrize("output_a", [50.0, -50.0])
def test_a_current_out_of_reach_is_refused(output_a):
    design, circuit = _solved("plain")
    with pytest.raises(UsageError, match=r"output_a is -?50 A, which design 'bench piece' does"):
        follower_at(circuit, design, output_a)


def test_values_outside_their_range_are_refused():
    design, circuit = _solved("plain")
    with pytest.raises(UsageError, match="output_a is nan"):
        follower_at(circuit, design, math.nan)
    with pytest.raises(UsageError, match="cable_f is -1e-09 F, expected zero or more"):
        estimate_stability(design, cables_f=(-1e-9,))
    with pytest.raises(UsageError, match=r"a share of the clip level is 1\.5"):
        estimate_stability(design, shares=(1.5,))


def test_a_stage_without_idle_point_is_refused(monkeypatch):
    design, circuit = _solved("plain")
    restless = dataclasses.replace(idle_point(circuit), converged=False)
    monkeypatch.setattr(stage, "idle_point", lambda _: restless)
    with pytest.raises(SolverError, match="'bench piece': the stage finds no idle point"):
        follower_at(circuit, design)
