"""Gain and bandwidth of the closed loop, small and at full output."""

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from tonesim.bench import TONE_HZ, Bench
from tonesim.harmonics import amplitudes_at
from tonesim.probe import BASE_RATE_HZ, Probe
from tonesim.units import ratio_to_db

SMALL_DB = -20.0  # below the clip point: where the small-signal gain is measured
_CYCLES = 16
_PER_CYCLE = 200  # steps a cycle at least: the trapezoidal rule's delay is then below 0.1 %
_HIGHEST_HZ = 20e6
_THIRD_DB = 10.0 ** (-3.0 / 20.0)


@dataclass(frozen=True)
class GainSheet:
    """Gain and bandwidth.

    `full_input_v` is the peak at the op-amp's input at the clip point, `full_jack_v` the same
    at the jack. `full_power_hz` is the slew rate over 2 pi times the peak output there;
    `full_bandwidth_hz` where the output at this input has fallen by 3 dB.
    Bandwidths are None where they lie above 20 MHz.
    """

    ideal_gain: float
    gain: float
    gain_db: float
    level_v: float
    bandwidth_hz: float | None
    bandwidth_estimate_hz: float
    full_input_v: float
    full_jack_v: float
    full_output_v: float
    full_power_hz: float
    full_bandwidth_hz: float | None
    unsettled_steps: int


def measure_gain(bench: Bench) -> GainSheet:
    """Measure gain and bandwidth on rails that stand still."""
    part = bench.design.driver.part
    unsettled = 0

    def fundamental(frequency_hz: float, peak_v: float) -> float:
        nonlocal unsettled
        multiply = 1
        while BASE_RATE_HZ * multiply < _PER_CYCLE * frequency_hz:
            multiply *= 2
        probe = Probe(bench.stiff, multiply)
        seconds = round(_CYCLES * probe.rate_hz / frequency_hz) / probe.rate_hz
        # Sixteen cycles as they are: moved to fifteen or seventeen it would be another frequency.
        tone = probe.tone(((frequency_hz, peak_v),), seconds, prime=False)
        unsettled += probe.solved.unsettled_steps
        return float(amplitudes_at(tone.output_v, tone.cycles)[0])

    def corner(peak_v: float) -> float | None:
        wanted = _THIRD_DB * fundamental(TONE_HZ, peak_v)

        def above(octaves: float) -> float:
            return math.log(fundamental(TONE_HZ * 2.0**octaves, peak_v) / wanted)

        low, high = 0.0, 1.0
        while above(high) > 0.0:
            low, high = high, high + 1.0
            if TONE_HZ * 2.0**high > _HIGHEST_HZ:
                return None
        octaves: float = brentq(above, low, high, xtol=1e-3)
        return float(TONE_HZ * 2.0**octaves)

    full = bench.clip_point.input_peak_v
    small = full * 10.0 ** (SMALL_DB / 20.0)
    gain = fundamental(TONE_HZ, small) / small
    return GainSheet(
        ideal_gain=bench.design.driver.gain,
        gain=gain,
        gain_db=ratio_to_db(gain),
        level_v=small * gain,
        bandwidth_hz=corner(small),
        bandwidth_estimate_hz=part.gain_bandwidth_hz / bench.design.driver.gain,
        full_input_v=full,
        full_jack_v=full / bench.jack_gain,
        full_output_v=full * bench.gain,
        full_power_hz=part.slew_v_per_s / (2.0 * np.pi * full * bench.gain),
        full_bandwidth_hz=corner(full),
        unsettled_steps=unsettled,
    )
