"""A few figures of one build, found fast enough for hundreds of them.

At rest and at its static clip levels a stage needs no surface. For the two sines it gets surfaces
of the part its halves are expected to reach, a tenth of the whole, going by a stage measured
before; what it did reach is looked up afterwards, and a stage that went further is measured again
on whole surfaces.
"""

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from tonesim.bench import RECORD_S, SHORT_S, TONE_HZ, distortion_of
from tonesim.circuit import Circuit, bench_load, lower
from tonesim.curve import OperatingPoint, build_surfaces, clip_levels, grid_for
from tonesim.design import Design
from tonesim.kernel.surface import Grid
from tonesim.probe import BASE_RATE_HZ, Probe, Solved, Tone, Trace
from tonesim.signals import sine
from tonesim.stage import Stage, find_idle

LOUD_DB, QUIET_DB = -3.0, -40.0  # relative to the clip point of the design
# Of the internal rate. Against eight times the rate 0.6 % of an unbiased stage's distortion at
# the loud level is error, 0.1 % of any other above 0.0001 %.
MULTIPLY = 2
# What a build may need beyond the stage measured before it: drive [V], share of sag, swing [V].
_MORE_DRIVE_V, _MORE_SAG, _MORE_SWING_V = 0.25, 1.3, 0.25


@dataclass(frozen=True)
class Figures:
    """Figures of one build.

    `idle_a` flows through both halves: the lesser of their two currents, for the other one also
    feeds the load with what the offset takes; zero where a half is off. Clip levels are static,
    with their signs; distortion is that of a sine 3 dB and 40 dB below the design's clip point,
    into the rated resistance.
    """

    idle_a: float
    offset_v: float
    gain: float
    clip_upper_v: float
    clip_lower_v: float
    thd_loud_percent: float
    thd_quiet_percent: float


@dataclass(frozen=True)
class Evidence:
    """What the solvers say: worst residual, and steps and tones that did not come to rest.

    `measured_twice` counts the builds that left the part of the surfaces they were given.
    """

    residual_a: float
    unsettled_steps: int
    rescued_steps: int
    unsteady_tones: int
    measured_twice: int

    def __add__(self, other: "Evidence") -> "Evidence":
        """Worst and sum of two."""
        return Evidence(
            max(self.residual_a, other.residual_a),
            self.unsettled_steps + other.unsettled_steps,
            self.rescued_steps + other.rescued_steps,
            self.unsteady_tones + other.unsteady_tones,
            self.measured_twice + other.measured_twice,
        )


@dataclass(frozen=True)
class Reach:
    """How far a stage went under the loud sine.

    `drive_v` is the largest voltage between drive node and output, `sag` the share of the idle
    rail that was lost at worst.
    """

    drive_v: float
    sag: float


@dataclass(frozen=True)
class Conditions:
    """What every build is measured with.

    Peak volts at the op-amp's input of both sines, and how far the stage goes that the builds
    are variants of; None where nothing is known.
    """

    loud_v: float
    quiet_v: float
    reach: Reach | None = None


class Measured(NamedTuple):
    """Figures of a build, with evidence and reach."""

    figures: Figures
    evidence: Evidence
    reach: Reach


class _Heard(NamedTuple):
    loud: Tone
    quiet: Tone
    reach: Reach
    solved: Solved
    held: bool
    again: bool


def measure_build(design: Design, conditions: Conditions) -> Measured:
    """Measure a design at rest, at its clip levels and with two sines.

    Parameters
    ----------
    design : Design
    conditions : Conditions

    Raises
    ------
    SolverError
        If the design finds no idle point.
    """
    circuit = lower(design)
    idle = find_idle(circuit, design.title)
    above, below = clip_levels(circuit, idle)
    resistive = circuit._replace(load=bench_load(design))
    ideal = design.driver.gain
    gain = ideal / (1.0 + ideal / design.driver.part.dc_gain)
    # The idle point is that of the stage as drawn; on the bench resistor the probe comes to rest.
    heard = _hear(resistive, idle, gain, conditions)

    def thd(tone: Tone) -> float:
        return distortion_of(tone, BASE_RATE_HZ * MULTIPLY).thd_percent

    figures = Figures(
        idle_a=max(min(idle.upper_current_a, idle.lower_current_a), 0.0),
        offset_v=idle.output_v,
        gain=gain,
        clip_upper_v=above.level_v,
        clip_lower_v=below.level_v,
        thd_loud_percent=thd(heard.loud),
        thd_quiet_percent=thd(heard.quiet),
    )
    evidence = Evidence(
        residual_a=max(idle.residual_a, above.residual_a, below.residual_a),
        unsettled_steps=heard.solved.unsettled_steps,
        rescued_steps=heard.solved.rescued_steps,
        unsteady_tones=(not heard.loud.steady) + (not heard.quiet.steady),
        measured_twice=int(heard.again),
    )
    return Measured(figures, evidence, heard.reach)


def _hear(circuit: Circuit, idle: OperatingPoint, gain: float, conditions: Conditions) -> _Heard:
    """Run both sines, on part of the surfaces if that holds them."""
    if conditions.reach is None:
        return _run(circuit, idle, None, conditions)
    swing = gain * conditions.loud_v + abs(idle.output_v)
    grid = part_grid(grid_for(circuit), idle, conditions.reach, swing)
    heard = _run(circuit, idle, grid, conditions)
    if heard.held:
        return heard
    more = _run(circuit, idle, None, conditions)
    return more._replace(solved=heard.solved + more.solved, again=True)


def _run(
    circuit: Circuit, idle: OperatingPoint, grid: Grid | None, conditions: Conditions
) -> _Heard:
    """Both sines on surfaces of one grid, None for the whole."""
    record_s = RECORD_S if circuit.mains_hz else SHORT_S
    probe = Probe(Stage(circuit, build_surfaces(circuit, grid), idle), MULTIPLY)
    twin = probe.twin()
    loud = probe.tone(((TONE_HZ, conditions.loud_v),), record_s)
    quiet = twin.tone(((TONE_HZ, conditions.quiet_v),), record_s)
    # The state is periodic: one mains cycle more, or the record where there is none, says all.
    frequency = loud.cycles[0] * probe.rate_hz / loud.output_v.size
    wave = sine(frequency, conditions.loud_v, probe.rate_hz, probe.frames(SHORT_S))
    trace = probe.trace(wave)
    lowest = min(
        trace.positive_v.min() / idle.rail_positive.mean_v,
        trace.negative_v.min() / idle.rail_negative.mean_v,
    )
    drive = np.max(np.abs(trace.drive_v - trace.output_v))
    return _Heard(
        loud=loud,
        quiet=quiet,
        reach=Reach(float(drive), float(1.0 - lowest)),
        solved=probe.solved + twin.solved,
        held=grid is None or holds(grid, trace),
        again=False,
    )


def part_grid(whole: Grid, idle: OperatingPoint, reach: Reach, swing_v: float) -> Grid:
    """Return the part of a grid that a stage is expected to reach; its nodes are the whole's.

    Parameters
    ----------
    whole : Grid
    idle : OperatingPoint
    reach : Reach
        Of a stage like it.
    swing_v : float
        Peak of the output in volts.
    """
    rails = idle.rail_positive, idle.rail_negative
    swing = swing_v + _MORE_SWING_V
    lowest = (1.0 - _MORE_SAG * reach.sag) * min(rail.mean_v for rail in rails) - swing
    highest = max(rail.highest_v for rail in rails) + swing
    per, du = whole.per_du_coarse, whole.du_coarse
    drive = float(np.ceil((reach.drive_v + _MORE_DRIVE_V) * per)) * du
    u_fine, u_coarse = max(whole.u_fine, -drive), min(whole.u_coarse, drive)
    n_low = 1 + max(round((u_fine - du + drive) * per), 0)
    n_high = 1 + max(round((drive - u_coarse) * per), 0)
    # A row of the fine zone stays in any case, so that the grid keeps both its zones.
    from_v = float(np.floor(lowest * whole.per_dh_coarse)) * whole.dh_coarse - whole.dh_fine
    h_low = max(whole.h_low, from_v)
    h_coarse = max(whole.h_coarse, h_low + whole.dh_fine)
    h_end = whole.h_coarse + whole.n_h_coarse * whole.dh_coarse
    n_h = int(np.ceil((min(highest, h_end) - h_coarse) * whole.per_dh_coarse))
    return whole._replace(
        u_low=u_fine - n_low * du,
        u_fine=u_fine,
        u_coarse=u_coarse,
        n_low=n_low,
        n_fine=round((u_coarse - u_fine) * whole.per_du_fine),
        n_high=n_high,
        h_low=h_low,
        h_coarse=h_coarse,
        n_h_fine=round((h_coarse - h_low) * whole.per_dh_fine),
        n_h_coarse=max(n_h, 1),
    )


def holds(grid: Grid, trace: Trace) -> bool:
    """Whether a run stayed inside a grid, off the cells of its rim.

    At the rim's nodes a slope may be limited otherwise than inside the whole grid.
    """
    out = trace.output_v
    headroom = np.concatenate([trace.positive_v - out, trace.negative_v + out])
    drive = float(np.max(np.abs(trace.drive_v - out)))
    u_high = grid.u_coarse + (grid.n_high - 1) * grid.du_coarse - grid.du_fine
    u_low = grid.u_low + grid.du_coarse + grid.du_fine
    h_high = grid.h_coarse + grid.n_h_coarse * grid.dh_coarse
    return bool(
        drive < min(u_high, -u_low)
        and headroom.min() >= grid.h_low + grid.dh_fine
        and headroom.max() < h_high
    )
