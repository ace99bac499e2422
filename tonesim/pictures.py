"""What the pictures of the bench show and no section of the sheet keeps: curves and courses.

Static curves of the pair, one cycle with its residual, spectra, and traces thinned out to what
paper can show. Numbers only; `plot` draws them.
"""

from collections import Counter
from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np

from tonesim.bench import TONE_HZ, Bench, distortion_of
from tonesim.circuit import Circuit, bench_load, load_resistance, lower
from tonesim.curve import FAR_V, static_point
from tonesim.design import SIDES, Design, Side
from tonesim.designfile import replace
from tonesim.distortion import LEVELS_DB
from tonesim.errors import DesignError
from tonesim.harmonics import spectrum
from tonesim.kernel import follower
from tonesim.power import BURST_S, burst_trace
from tonesim.probe import BASE_RATE_HZ, Probe, Trace
from tonesim.signals import Signal
from tonesim.transient import SQUARE_SHARES, power_up, square_trace
from tonesim.units import E24, db_to_ratio, format_quantity

CROSSING_HZ = (50.0, 1000.0, 10_000.0)
CROSSING_DB = LEVELS_DB[1]  # relative to the clip point: low enough for the crossover to show
SPECTRUM_DB = LEVELS_DB[:2]
SPECTRUM_HZ = 20_000.0  # a spectrum is drawn up to here
DEAD = 0.5  # share of the largest gain below which a zone counts as dead
_NEAR_V = 3.0  # of the drive node: devices turn on inside
_FINE_V, _COARSE_V = 1 / 128, 1 / 32
_PER_CYCLE = 2048
_THIN_S, _THIN_UP_S = 1e-3, 0.25e-3  # of one point of a thinned trace


class Held(NamedTuple):
    """What stays the same in all pictures of a design; rails are idle means, negative signed."""

    title: str
    ohm: float
    positive_v: float
    negative_v: float


class Curve(NamedTuple):
    """Static curve of an output pair, (N,) each.

    `gain` is d v_o / d v_d at every point; `idle_a` flows through the upper half with the drive
    node at rest; `residual_a` is the worst equation left over.
    """

    label: str
    drive_v: Signal
    output_v: Signal
    gain: Signal
    idle_a: float
    residual_a: float

    @property
    def dead_zone_v(self) -> tuple[float, float] | None:
        """Drive between which the gain is below half its largest; None where it never is.

        The far ends, where the stage clips, do not count.
        """
        alive = np.flatnonzero(self.gain >= DEAD * float(np.max(self.gain)))
        rest = int(np.argmin(np.abs(self.output_v)))
        above, below = alive[alive >= rest], alive[alive <= rest]
        if rest in alive or not (above.size and below.size):
            return None
        return float(self.drive_v[below[-1]]), float(self.drive_v[above[0]])


class Crossing(NamedTuple):
    """One cycle of a sine, (N,) each, time 0 at the upward zero crossing of its fundamental."""

    frequency_hz: float
    level_db: float
    time_s: Signal
    output_v: Signal
    residual_v: Signal
    thd_percent: float
    steady: bool


class Spectrum(NamedTuple):
    """Lines of a sine, relative to its fundamental, (N,) each, and which ones are harmonics.

    `residue_db` is everything to 80 kHz that is neither harmonic nor hum, together.
    """

    frequency_hz: Signal
    relative_db: Signal
    tone_hz: float
    level_db: float
    output_v: float
    harmonics_hz: Signal
    harmonics_db: Signal
    residue_db: float


class Course(NamedTuple):
    """A trace thinned out, (N,) each: lowest and highest value of every piece."""

    low: Signal
    high: Signal


class Supplied(NamedTuple):
    """Output and rails (the negative one signed) over time, in seconds."""

    time_s: Signal
    output_v: Course
    positive_v: Course
    negative_v: Course


class Square(NamedTuple):
    """A square wave, (N,) each; time 0 at its rising edge, `share` of the clip level."""

    share: float
    time_s: Signal
    output_v: Signal
    drive_v: Signal


class PoweredUp(NamedTuple):
    """A stage that is switched on, with parts as drawn, or as unequal as they come."""

    unequal: bool
    supplied: Supplied


def held_of(bench: Bench) -> Held:
    """Title, resistor and rails of a design on the bench."""
    idle = bench.stage.idle
    return Held(
        bench.design.title, bench.ohm, idle.rail_positive.mean_v, -idle.rail_negative.mean_v
    )


def at_idle(held: Held) -> str:
    """Say what stood still where the rails were held."""
    return f"{_ohms(held)} resistor; rails held at {_rails(held)}, as at idle."


def as_it_comes(held: Held) -> str:
    """Say what stood still where the supply was the design's own."""
    return f"{_ohms(held)} resistor; supply as drawn, {_rails(held)} at idle."


def _ohms(held: Held) -> str:
    return format_quantity(held.ohm, "ohm")


def _rails(held: Held) -> str:
    positive, negative = (
        format_quantity(held.positive_v, "V"),
        format_quantity(-held.negative_v, "V"),
    )
    return f"+{positive} and −{negative}"


def transfer_curve(
    circuit: Circuit, positive_v: float, negative_v: float, label: str = "as drawn"
) -> Curve:
    """Static curve of the pair, from one end of what the op-amp can drive it to, to the other.

    Parameters
    ----------
    circuit : Circuit
        Its load's resistance at zero frequency is what the pair drives.
    positive_v, negative_v : float
        Rails, the negative one with its sign; they stand still.
    label : str

    Returns
    -------
    Curve
        Drive in steps of 1/128 V where devices turn on, of 1/32 V elsewhere.
    """
    p, n = positive_v, -negative_v
    low, high = (static_point(circuit, sign * FAR_V, p, n).v_d for sign in (-1.0, 1.0))
    v = _FINE_V * np.arange(np.floor(low / _FINE_V) + 1.0, np.ceil(high / _FINE_V))
    steps = round(_COARSE_V / _FINE_V)
    v = v[(np.abs(v) < _NEAR_V) | (np.rint(v / _FINE_V) % steps == 0.0)]
    v = np.concatenate([[low], v, [high]])
    out = np.empty((v.size, follower.COLUMNS))
    g = 1.0 / load_resistance(circuit.load)
    follower.follow(v, p, n, g, circuit.upper, circuit.lower, out)
    at_rest = static_point(circuit, 0.0, p, n)
    return Curve(
        label=label,
        drive_v=v,
        output_v=out[:, follower.OUTPUT].copy(),
        gain=out[:, follower.GAIN].copy(),
        idle_a=float(at_rest.i_up),
        residual_a=float(np.max(out[:, [follower.IMBALANCE, follower.RESIDUAL]])),
    )


def neighbours(design: Design) -> tuple[tuple[str, Design], ...]:
    """Designs with a little less and a little more bias, each with its label.

    A half with a multiplier gets the next lower or higher R1 of E24 (IEC 60063), one with drops
    loses its last or has it once more; a half without drops takes the other half's. What the
    design refuses is left out, so that a stage without feed resistors has no neighbours; nor has
    a measured curve, which holds its chain.
    """
    if design.measured is not None:
        return ()
    found = []
    for more in (False, True):
        changes = {**_other_ratio(design, more), **_other_drops(design, more)}
        if not changes:
            continue
        try:
            other = replace(design, **changes)
        except DesignError:
            continue
        found.append((_label(changes, more), other))
    return tuple(found)


def _label(changes: Mapping[str, Any], more: bool) -> str:
    """Say in words what differs from the design as drawn."""
    told = []
    ohms = sorted({value for value in changes.values() if isinstance(value, float)})
    if ohms:
        told.append("R1 of the multiplier " + ", ".join(format_quantity(x, "ohm") for x in ohms))
    sides = [side for side in SIDES if f"bias.{side}" in changes]
    if sides:
        where = "per half" if len(sides) == 2 else f"in the {sides[0]} half"
        told.append(f"one drop {'more' if more else 'fewer'} {where}")
    return ", ".join(told)


def _other_ratio(design: Design, more: bool) -> dict[str, Any]:
    """R1 of every multiplier one preferred value further."""
    changes = {}
    for key in ("multiplier", "upper_multiplier", "lower_multiplier"):
        multiplier = getattr(design.bias, key)
        if multiplier is not None:
            step = _next_preferred(multiplier.collector_base_ohm, more)
            changes[f"bias.{key}.collector_base_ohm"] = step
    return changes


def _next_preferred(ohm: float, more: bool) -> float:
    """Next value of E24 above or below."""
    decade = int(np.floor(np.log10(ohm)))
    values = [float(f"{m}e{d}") for d in range(decade - 1, decade + 2) for m in E24]
    tie = 1e-6 * ohm
    if more:
        return min(value for value in values if value > ohm + tie)
    return max(value for value in values if value < ohm - tie)


def _other_drops(design: Design, more: bool) -> dict[str, Any]:
    """Chains of drops one shorter or longer."""
    bias = design.bias
    changes = {}
    for side in SIDES:
        drops = bias.drops_for(side)
        if bias.multiplier_for(side) is not None or bias.feed_for(side) is None:
            continue
        if not more and drops:
            changes[f"bias.{side}"] = drops[:-1]
        elif more:
            last = (drops or bias.lower or bias.upper)[-1:]
            if last:
                changes[f"bias.{side}"] = drops + last
    return changes


def describe_chain(design: Design) -> str:
    """Chains in words: "1N4148 + 2 BAT85", both halves' where they differ."""
    if design.measured is not None:
        return "measured curve"

    def half(side: Side) -> str:
        multiplier = design.bias.multiplier_for(side)
        if multiplier is not None:
            return f"multiplier × {multiplier.ratio:.3g}"
        names = Counter(drop.name for drop in design.bias.drops_for(side))
        drops = [f"{n} {name}" if n > 1 else name for name, n in names.items()]
        return " + ".join(drops) or "no chain"

    upper, low = (half(side) for side in SIDES)
    return upper if upper == low else f"{upper} above, {low} below"


def gain_curves(bench: Bench) -> tuple[Curve, ...]:
    """Curve of the chain as drawn, then those of its neighbours, on the rails of the first.

    All drive the bench resistor. A measured curve of the closed loop tells nothing of the pair
    inside it: there is no curve then.
    """
    measured = bench.design.measured
    if measured is not None and measured.input_v is not None:
        return ()
    held = held_of(bench)
    designs = ((f"as drawn ({describe_chain(bench.design)})", bench.design),)
    return tuple(
        transfer_curve(
            lower(design)._replace(load=bench_load(design)),
            held.positive_v,
            held.negative_v,
            label,
        )
        for label, design in designs + neighbours(bench.design)
    )


def zero_crossing(bench: Bench, frequency_hz: float, level_db: float = CROSSING_DB) -> Crossing:
    """One cycle of a sine in the steady state and what is left without its fundamental.

    Rails stand still at their idle mean, so that ripple does not hide the residual.
    """
    multiply = max(1, int(np.ceil(_PER_CYCLE * frequency_hz / BASE_RATE_HZ)))
    probe = Probe(bench.stiff, multiply)
    n = round(probe.rate_hz / frequency_hz)
    frequency = probe.rate_hz / n
    peak = bench.clip_point.input_peak_v * db_to_ratio(level_db)
    tone = probe.tone(((frequency, peak),), n / probe.rate_hz, prime=False)
    lines = spectrum(tone.output_v)
    turns = np.arange(n) / n
    residual = tone.output_v - lines[0].real - (lines[1] * np.exp(2j * np.pi * turns)).real
    # A sine of phase 0 has its line at -90 degrees.
    turns = (turns + np.angle(lines[1]) / (2.0 * np.pi) + 0.5) % 1.0 - 0.25
    order = np.argsort(turns)
    found = distortion_of(tone, probe.rate_hz)
    return Crossing(
        frequency_hz=frequency,
        level_db=level_db,
        time_s=turns[order] / frequency,
        output_v=tone.output_v[order],
        residual_v=residual[order],
        thd_percent=found.thd_percent,
        steady=tone.steady,
    )


def line_spectrum(bench: Bench, level_db: float) -> Spectrum:
    """Spectrum of a 1 kHz sine with the rails as they sag and ripple, up to 20 kHz."""
    probe = bench.fine_probe.twin()
    peak = bench.clip_point.input_peak_v * db_to_ratio(level_db)
    tone = probe.tone(((TONE_HZ, peak),), bench.record_s)
    n, first = tone.output_v.size, tone.cycles[0]
    found = distortion_of(tone, probe.rate_hz, bench.stage.circuit.mains_hz)
    last = int(SPECTRUM_HZ * n / probe.rate_hz)
    level = np.abs(spectrum(tone.output_v)[: last + 1]) / found.fundamental_v
    relative = 20.0 * np.log10(np.maximum(level, 1e-12))
    at = first * np.arange(2, last // first + 1)
    rms = found.fundamental_v / np.sqrt(2.0)
    return Spectrum(
        frequency_hz=np.arange(1, last + 1) * probe.rate_hz / n,
        relative_db=relative[1:],
        tone_hz=found.frequency_hz,
        level_db=level_db,
        output_v=float(rms),
        harmonics_hz=at * probe.rate_hz / n,
        harmonics_db=relative[at],
        residue_db=float(20.0 * np.log10(max(found.residue_v / rms, 1e-12))),
    )


def thinned(trace: Signal, pieces: int) -> Course:
    """Lowest and highest value of equally long pieces of a trace (frames,)."""
    rows = trace[: trace.size // pieces * pieces].reshape(pieces, -1)
    return Course(rows.min(axis=1), rows.max(axis=1))


def _supplied(trace: Trace, start_s: float, thin_s: float) -> Supplied:
    output, positive, negative = trace.output_v, trace.positive_v, trace.negative_v
    pieces = round(output.size / BASE_RATE_HZ / thin_s)
    time = (np.arange(pieces) + 0.5) * output.size / pieces / BASE_RATE_HZ - start_s
    return Supplied(time, *(thinned(each, pieces) for each in (output, positive, -negative)))


def burst_course(bench: Bench) -> Supplied:
    """Output and rails in the burst of `power`, time 0 at its start."""
    trace = burst_trace(bench)
    return _supplied(trace, BURST_S[0], _THIN_S)


def power_up_course(bench: Bench, *, unequal: bool) -> PoweredUp:
    """Output and rails while the supply comes up with the load as drawn."""
    trace, _ = power_up(bench, loaded=True, unequal=unequal)
    return PoweredUp(unequal, _supplied(trace, 0.0, _THIN_UP_S))


def square_course(bench: Bench, share: float = SQUARE_SHARES[0]) -> Square:
    """Square wave of `transient` at a share of the clip level."""
    probe, trace = square_trace(bench, share)
    time = np.arange(trace.output_v.size) / probe.rate_hz - trace.output_v.size // 3 / probe.rate_hz
    return Square(share, time, trace.output_v, trace.drive_v)
