"""The test bench: a design with its resistor connected, and what its meters read with a sine.

Levels are volts at the op-amp's input, where the generator is connected; rms unless called peak.
Distortion is measured with the resistor of the rated impedance, as on a real bench.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.optimize import brentq

from tonesim.check import StageCheck, check_design
from tonesim.design import Design
from tonesim.errors import SolverError
from tonesim.harmonics import Harmonics, analyse_harmonics
from tonesim.kernel.rails import STIFF
from tonesim.probe import Probe, Solved, Tone
from tonesim.signals import Signal, sine
from tonesim.stage import Stage, build_stage

TONE_HZ = 1000.0
RECORD_S = 0.1  # whole mains cycles of 50 and 60 Hz
SHORT_S = 0.02  # where no mains is in it
BAND_HZ = 80_000.0  # of distortion, as of common analysers
_SHORT = 0.01  # of a crest at the onset of clipping
_HUM_FROM = 16  # times the mains
_MULTIPLY = 8  # 3.072 MHz: what aliases of an unbiased stage stays below -120 dB


class Bench:
    """A design on the bench.

    Parameters
    ----------
    design : Design

    Raises
    ------
    SolverError
        If the design cannot idle.
    """

    def __init__(self, design: Design) -> None:
        self.design = design
        self.rest: StageCheck = check_design(design)
        self.stage: Stage = build_stage(design)
        self.ohm = self.stage.circuit.bench_ohm

    @cached_property
    def resistive(self) -> Stage:
        """The stage with the bench resistor in place of a loudspeaker."""
        return build_stage(self.design, resistor=True)

    @cached_property
    def stiff(self) -> Stage:
        """The same with rails that stay where they are at idle: no sag, no ripple."""
        return stiffened(self.resistive)

    @property
    def gain(self) -> float:
        """Closed-loop gain from the op-amp's input to the load."""
        return self.rest.gain

    @property
    def jack_gain(self) -> float:
        """Volts at the op-amp's input per volt at the jack."""
        return self.stage.circuit.gain

    @property
    def clip_v(self) -> float:
        """Peak output at which the first half clips statically, rails as at idle."""
        return min(abs(self.rest.upper.clip.level_v), abs(self.rest.lower.clip.level_v))

    @property
    def record_s(self) -> float:
        """Length of a record that is periodic with the mains."""
        return RECORD_S if self.stage.circuit.mains_hz else SHORT_S

    @cached_property
    def probe(self) -> Probe:
        """Probe at the internal rate with the resistor connected; for power, rails and levels."""
        return Probe(self.resistive)

    @cached_property
    def fine_probe(self) -> Probe:
        """The same at eight times the rate; for distortion."""
        return Probe(self.resistive, _MULTIPLY)

    @cached_property
    def loudspeaker_probe(self) -> Probe:
        """Probe at the internal rate on the stage as drawn."""
        return Probe(self.stage)

    @cached_property
    def still_probe(self) -> Probe:
        """The fine one on rails that stand still; for the floor of the computation."""
        return Probe(self.stiff, _MULTIPLY)

    @property
    def solved(self) -> Solved:
        """What the solver did so far in all runs of all these probes."""
        names = ("probe", "fine_probe", "loudspeaker_probe", "still_probe")
        used = [self.__dict__[name] for name in names if name in self.__dict__]
        return sum((probe.solved_in_all for probe in used), Solved())

    @cached_property
    def clip_point(self) -> Reading:
        """The sine whose lowest crest falls one per cent short of what the gain asks for.

        It is what a scope shows as the onset of clipping, with the rails as they sag under it.
        """
        probe = self.probe
        small = self.clip_v / self.gain / 10.0

        def crest(peak: float) -> float:
            return _crest(probe, peak, self.rest.output_offset_v, self.record_s)

        linear = crest(small) / small

        def short(peak: float) -> float:
            return crest(peak) / (linear * peak) - 1.0 + _SHORT

        high = self.clip_v / self.gain
        for _ in range(8):
            if short(high) < 0.0:
                break
            high *= 1.5
        else:
            raise SolverError(f"design {self.design.title!r}: no input makes it clip")
        peak = brentq(short, small, high, rtol=1e-4)
        return measure(probe.twin(), TONE_HZ, float(peak), self.record_s)


def _crest(probe: Probe, peak_v: float, offset_v: float, seconds: float) -> float:
    """Lowest crest, of either sign, of any cycle of a sine in the steady state.

    Under ripple the cycles differ; the one on the lowest rail clips first.
    """
    tone = probe.twin().tone(((TONE_HZ, peak_v),), seconds)
    ends = np.arange(tone.cycles[0]) * tone.output_v.size // tone.cycles[0]
    y = tone.output_v - offset_v
    return float(min(np.maximum.reduceat(y, ends).min(), np.maximum.reduceat(-y, ends).min()))


def stiffened(stage: Stage) -> Stage:
    """Return the stage on rails that stay at their idle mean."""
    circuit, idle = stage.circuit, stage.idle
    positive, negative = idle.rail_positive.mean_v, idle.rail_negative.mean_v
    return stage._replace(
        circuit=circuit._replace(
            rail_positive=circuit.rail_positive._replace(kind=STIFF, v_open=positive),
            rail_negative=circuit.rail_negative._replace(kind=STIFF, v_open=negative),
            mains_hz=0.0,
        )
    )


def distortion_of(tone: Tone, rate_hz: float, mains_hz: float = 0.0) -> Harmonics:
    """Harmonics of a tone, to 80 kHz and to the tenth at least.

    Hum is told from residue where its lines cannot meet a harmonic: from 16 times the mains.
    """
    cycles, frames = tone.cycles[0], tone.output_v.size
    frequency = cycles * rate_hz / frames
    band = min(max(BAND_HZ, 10.0 * frequency), rate_hz / 2.0)
    mains = mains_hz if mains_hz and frequency > _HUM_FROM * mains_hz else None
    return analyse_harmonics(tone.output_v, cycles, rate_hz, band, mains)


@dataclass(frozen=True)
class Reading:
    """What the meters read while a sine of constant level goes on.

    Power into the load is that at the output node, rails are over the record, `upper_w` and
    `lower_w` the heat of the output devices without their emitter resistors; `driver_peak_v`
    and `driver_peak_a` what the op-amp gives at its output. `change_v` is the largest difference
    from the record before.
    """

    frequency_hz: float
    input_peak_v: float
    output_v: float
    highest_v: float
    lowest_v: float
    load_w: float
    supply_w: float
    positive_mean_v: float
    positive_lowest_v: float
    positive_highest_v: float
    negative_mean_v: float
    negative_lowest_v: float
    negative_highest_v: float
    draw_positive_a: float
    draw_negative_a: float
    upper_w: float
    lower_w: float
    driver_peak_v: float
    driver_peak_a: float
    harmonics: Harmonics
    change_v: float
    steady: bool

    @property
    def efficiency(self) -> float:
        """Power in the load per power from the rails."""
        return self.load_w / self.supply_w if self.supply_w > 0.0 else 0.0


def measure(probe: Probe, frequency_hz: float, peak_v: float, seconds: float) -> Reading:
    """Read every meter with a sine in the steady state.

    Parameters
    ----------
    probe : Probe
    frequency_hz : float
        Moved a little, so that the record is coherent.
    peak_v : float
        Volts at the op-amp's input.
    seconds : float
        Length of the record, whole mains cycles.

    Returns
    -------
    Reading
    """
    tone = probe.tone(((frequency_hz, peak_v),), seconds)
    n, cycles = tone.output_v.size, tone.cycles[0]
    before, given = probe.draw(), probe.energy()
    trace = probe.trace(sine(cycles * probe.rate_hz / n, peak_v, probe.rate_hz, n))
    draw = (probe.draw() - before) * probe.rate_hz / n
    supply = (probe.energy() - given) * probe.rate_hz / n
    circuit = probe.stage.circuit
    p, m, v = trace.positive_v, trace.negative_v, trace.output_v

    def heat(current: Signal, across: Signal, ohm: float) -> float:
        flowing = np.maximum(current, 0.0)
        return float(np.mean(flowing * across - ohm * flowing**2))

    return Reading(
        frequency_hz=cycles * probe.rate_hz / n,
        input_peak_v=peak_v,
        output_v=float(np.sqrt(np.mean(np.square(v)))),
        highest_v=float(v.max()),
        lowest_v=float(v.min()),
        load_w=float(np.mean(v * (trace.upper_a - trace.lower_a))),
        supply_w=supply,
        positive_mean_v=float(p.mean()),
        positive_lowest_v=float(p.min()),
        positive_highest_v=float(p.max()),
        negative_mean_v=float(m.mean()),
        negative_lowest_v=float(m.min()),
        negative_highest_v=float(m.max()),
        draw_positive_a=float(draw[0]),
        draw_negative_a=float(draw[1]),
        upper_w=heat(trace.upper_a, p - v, circuit.upper.r_emitter),
        lower_w=heat(trace.lower_a, m + v, circuit.lower.r_emitter),
        driver_peak_v=float(np.max(np.abs(trace.drive_v))),
        driver_peak_a=float(np.max(np.abs(trace.driver_a))),
        harmonics=distortion_of(tone, probe.rate_hz, circuit.mains_hz),
        change_v=tone.change_v,
        steady=tone.steady,
    )
