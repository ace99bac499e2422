"""A design with one tolerance at a time moved, and what its meters read then.

Static figures are solved on the device laws; sines run at the internal rate, on rails that stay
at their idle mean, so that a figure moves by the tolerance alone.
"""

import math
from typing import NamedTuple

import numpy as np
from scipy.optimize import brentq

from tonesim.bench import RECORD_S, SHORT_S, TONE_HZ, Bench, distortion_of, stiffened
from tonesim.circuit import Circuit, load_resistance
from tonesim.curve import FAR_V, OperatingPoint, build_surfaces, idle_point, rail_at_rest
from tonesim.design import SIDES, Side
from tonesim.kernel.static import half_at_rest, solve_static
from tonesim.probe import BASE_RATE_HZ, Probe
from tonesim.stage import Stage
from tonesim.windows import Tolerance

_COARSE_HZ = 900.0  # below it the internal rate itself is fine enough
_LOW_HZ, _LONG_S = 150.0, 0.5  # below this frequency a record this long, to hold enough cycles
_PAST_CLIP, _STEP = 4.0, 1.2  # an input is looked for up to here past clipping, in such steps
_LEVEL = 1e-3  # how closely its output is met
_RAIL_SHARE = 0.99  # of its current limit: the most a rail is asked for in a static curve
_REACH_V = 10.0  # how far past the rails a node is looked for


class Sine(NamedTuple):
    """Output of a sine, all of it, volts rms, and its distortion in per cent."""

    output_v: float
    thd_percent: float


class Variants:
    """A design with one tolerance at a time at a share of its window; nothing is solved twice.

    Parameters
    ----------
    bench : Bench
    """

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self.unsettled_steps = 0
        self._idle: dict[object, tuple[Circuit, OperatingPoint]] = {}
        self._stage: dict[object, Stage] = {}
        self._sine: dict[object, Sine] = {}

    def circuit(
        self, tolerance: Tolerance | None, share: float, *, resistor: bool = False
    ) -> tuple[Circuit, OperatingPoint]:
        """Circuit and idle point; as drawn, or with the bench resistor connected."""
        if tolerance is None or (share == 0.0 and not tolerance.absolute):
            stage = self.bench.resistive if resistor else self.bench.stage
            return stage.circuit, stage.idle
        key = (tolerance.part, share, resistor)
        if key not in self._idle:
            circuit = tolerance.circuit(self.bench.design, share, resistor=resistor)
            self._idle[key] = circuit, idle_point(circuit)
        return self._idle[key]

    def sine(
        self, tolerance: Tolerance | None, share: float, frequency_hz: float, peak_v: float
    ) -> Sine:
        """Read a sine with the rails held at idle; not a number where the stage cannot idle.

        `peak_v` is the generator's, at the op-amp's input.
        """
        place = ("", 0.0) if tolerance is None or share == 0.0 else (tolerance.part, share)
        key = (*place, frequency_hz, peak_v)
        if key not in self._sine:
            circuit, idle = self.circuit(tolerance, share, resistor=True)
            if not idle.converged:
                return Sine(math.nan, math.nan)
            if place not in self._stage:
                self._stage[place] = stiffened(Stage(circuit, build_surfaces(circuit), idle))
            multiply = round(self._probe(frequency_hz).rate_hz / BASE_RATE_HZ)
            self._sine[key] = self._read(Probe(self._stage[place], multiply), key[2:], SHORT_S)
        return self._sine[key]

    def own_sine(self, frequency_hz: float, peak_v: float) -> Sine:
        """Read a sine on the design as it stands, with the rails as they sag."""
        key = (frequency_hz, peak_v)
        if key not in self._sine:
            self._sine[key] = self._read(self._probe(frequency_hz).twin(), key, RECORD_S)
        return self._sine[key]

    def _probe(self, frequency_hz: float) -> Probe:
        return self.bench.probe if frequency_hz < _COARSE_HZ else self.bench.fine_probe

    def _read(self, probe: Probe, sine: tuple[float, float], seconds: float) -> Sine:
        frequency_hz, peak_v = sine
        seconds = _LONG_S if frequency_hz < _LOW_HZ else seconds
        tone = probe.tone(((frequency_hz, peak_v),), seconds)
        self.unsettled_steps += probe.solved.unsettled_steps
        found = distortion_of(tone, probe.rate_hz, probe.stage.circuit.mains_hz)
        rms = math.sqrt(0.5) * found.fundamental_v * math.hypot(1.0, found.thd_f)
        return Sine(rms, found.thd_percent)


def find_input(variants: Variants, output_v: float, frequency_hz: float) -> float | None:
    """Peak input for an output in volts rms; None where the stage does not get there.

    Looked for up to four times the input at which it clips.
    """
    bench = variants.bench

    def miss(peak: float) -> float:
        return math.log(variants.own_sine(frequency_hz, peak).output_v / output_v)

    if output_v > max(bench.design.rail_for(side) for side in SIDES):
        return None  # not even a square wave gets there
    low = high = math.sqrt(2.0) * output_v / bench.gain
    most = max(_PAST_CLIP * bench.clip_v / bench.gain, _STEP * low)
    above = miss(high)
    if abs(above) < _LEVEL:
        return high
    if above > 0.0:
        low = high / _STEP
    while above < 0.0:
        low, high = high, high * _STEP
        if high > most:
            return None
        above = miss(high)
    return float(brentq(miss, low, high, rtol=_LEVEL))


def small_gain(circuit: Circuit, frequency_hz: float = TONE_HZ) -> float:
    """Closed-loop gain of a follower inside an op-amp's loop, 1 / |beta + 1/A0 + j f/GBW|."""
    q = circuit.driver
    return 1.0 / abs(complex(q.beta + q.per_a0, 2.0 * math.pi * frequency_hz / q.omega))


def clip_reach(circuit: Circuit, rails_v: tuple[float, float], side: Side) -> float:
    """Output at which one half clips statically into the bench resistor, volts, signed.

    Parameters
    ----------
    circuit : Circuit
    rails_v : (positive, negative) magnitudes
    side : "upper" or "lower"
    """
    sign = 1.0 if side == "upper" else -1.0
    found = solve_static(
        sign * FAR_V,
        *rails_v,
        1.0 / circuit.bench_ohm,
        0.0,
        circuit.upper,
        circuit.lower,
        circuit.driver,
    )
    rail = circuit.rail_positive if side == "upper" else circuit.rail_negative
    return sign * min(abs(float(found.v_o)), rail.i_limit * circuit.bench_ohm)


def rail_means(idle: OperatingPoint) -> tuple[float, float]:
    """Both rails of an idle point, magnitudes, volts."""
    return idle.rail_positive.mean_v, idle.rail_negative.mean_v


def output_at_drive(circuit: Circuit, drive_v: float, rails_v: tuple[float, float]) -> float:
    """Output of the open loop for a voltage of the drive node, volts; rails are magnitudes.

    The output node's current, upper half minus lower half minus load, falls as it rises.
    """
    positive, negative = rails_v
    g = 1.0 / load_resistance(circuit.load)
    x = np.zeros(4)

    def into_output(v: float) -> float:
        up = half_at_rest(drive_v - v, positive - v, 0.0, circuit.upper, x)[0]
        low = half_at_rest(v - drive_v, v + negative, 0.0, circuit.lower, x)[0]
        return float(up - low - g * v)

    return float(brentq(into_output, -negative - _REACH_V, positive + _REACH_V, xtol=1e-9))


def loaded_rails(circuit: Circuit, idle: OperatingPoint, output_v: float) -> tuple[float, float]:
    """Rails while the measured output's current flows from one of them."""
    load_a = output_v / load_resistance(circuit.load)
    rails = []
    for rail, draw, own, taken in (
        (circuit.rail_positive, idle.draw_positive_a, idle.upper_current_a, load_a),
        (circuit.rail_negative, idle.draw_negative_a, idle.lower_current_a, -load_a),
    ):
        asked = max(draw, draw - own + taken)
        asked = min(asked, _RAIL_SHARE * rail.i_limit)
        rails.append(rail_at_rest(rail, asked, circuit.mains_hz).mean_v)
    return rails[0], rails[1]
