"""A builder's measured figures beside the computed ones, with a tolerance that would explain each.

Idle figures, offset, gain and clip levels are solved on the static stage, distortion on the stage
at its internal rate. Where the supply sags or ripples, the computed figure is that of its own
rails; how it moves with a tolerance is computed on rails that stand still and carried over.
"""

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from tonesim.bench import Bench
from tonesim.circuit import Circuit
from tonesim.curve import OperatingPoint, chain_voltage, static_point
from tonesim.design import SIDES, Design, Side, TransformerSupply
from tonesim.explanation import Comparison, Target, compare
from tonesim.measured import MeasuredTable
from tonesim.pool import Progress
from tonesim.readings import FIGURES, FigureReading, LevelReading, Readings
from tonesim.units import format_quantity, ratio_to_db
from tonesim.variants import (
    Sine,
    Variants,
    clip_reach,
    find_input,
    loaded_rails,
    output_at_drive,
    rail_means,
    small_gain,
)
from tonesim.windows import (
    Tolerance,
    bandwidth,
    current_limit,
    drop,
    emitter,
    feed,
    feedback,
    hfe,
    load,
    offset,
    quiescent,
    reservoir,
    supply,
    swing,
    vbe,
)

# What a reading is good for: share of it, and the last digit (common practice, no source).
_AMMETER = (0.01, 1e-4)
_VOLTMETER = (0.005, 1e-3)
_OFFSET = (0.005, 2e-4)
_SCOPE = (0.02, 0.0)
_RIPPLE = (0.05, 1e-3)
_RATIO = (0.01, 0.0)
_DECIBELS = (0.0, 0.1)
_DISTORTION = (0.05, 2e-4)  # the last digit in per cent
_CURVE = 0.005  # share of the largest output

_NEAR_CLIP = 0.8  # distortion from this share of the clip level on is clipping's


@dataclass(frozen=True)
class Against:
    """Every figure of a file beside the computed one.

    `unsettled_steps` counts those of the runs the distortion figures are from.
    """

    file: str
    kind: str
    comparisons: tuple[Comparison, ...]
    unsettled_steps: int

    @property
    def faults(self) -> int:
        """How many figures no single tolerance explains."""
        return sum(not each.agrees and not each.explanations for each in self.comparisons)


def measure_against(bench: Bench, readings: Readings, progress: Progress | None = None) -> Against:
    """Put measured figures beside computed ones and explain what differs.

    Parameters
    ----------
    bench : Bench
    readings : Readings
    progress : callable, optional
        Takes the share that is done, 0 to 1; may raise to stop.
    """
    variants = Variants(bench)
    rows: Iterator[list[Target]]
    if readings.curve is not None:
        count, rows = len(readings.curve.output_v), _curve(variants, readings.curve)
    elif readings.levels:
        count, rows = len(readings.levels), _levels(variants, readings.levels)
    else:
        count = len(readings.figures)
        rows = ([_figure(variants, each)] for each in readings.figures)
    found: list[Comparison] = []
    for done, targets in enumerate(rows, start=1):
        found += [compare(target) for target in targets]
        if progress is not None:
            progress(done / count)
    return Against(readings.file, readings.kind, tuple(found), variants.unsettled_steps)


# Single figures


def _onset(bench: Bench) -> Callable[[Circuit, OperatingPoint], float]:
    """Static onset of clipping, rms, with the rails as low as a full sine pulls them."""
    full, idle = bench.clip_point, bench.stage.idle
    lowest = (full.positive_lowest_v, full.negative_lowest_v)
    sags = [low / mean for low, mean in zip(lowest, rail_means(idle), strict=True)]

    def onset(circuit: Circuit, idle: OperatingPoint) -> float:
        positive, negative = (sag * mean for sag, mean in zip(sags, rail_means(idle), strict=True))
        rails = (positive, negative)
        least = min(abs(clip_reach(circuit, rails, side)) for side in SIDES)
        return least / math.sqrt(2.0)

    return onset


def _figure(variants: Variants, reading: FigureReading) -> Target:
    """One figure of the list in `readings.FIGURES`."""
    bench = variants.bench
    model, error = _model(bench, reading.name)

    def with_tolerance(tolerance: Tolerance | None, share: float) -> float:
        circuit, idle = variants.circuit(tolerance, share)
        return model(circuit, idle) if idle.converged else math.nan

    known = FIGURES[reading.name]
    own = with_tolerance(None, 0.0)
    return Target(
        name=known.words,
        unit=known.unit,
        measured=reading.value,
        computed=bench.clip_point.output_v if reading.name == "output_at_clip_v" else own,
        error=error,
        model=with_tolerance,
        candidates=_candidates(bench.design, reading.name),
        signed=known.sign == 0,
    )


Model = Callable[[Circuit, OperatingPoint], float]


def _model(bench: Bench, name: str) -> tuple[Model, tuple[float, float]]:
    """How a figure is computed, and how closely it is measured."""
    if name == "output_at_clip_v":
        return _onset(bench), _SCOPE
    models: dict[str, tuple[Model, tuple[float, float]]] = {
        "upper_idle_a": (lambda _, idle: idle.upper_current_a, _AMMETER),
        "lower_idle_a": (lambda _, idle: idle.lower_current_a, _AMMETER),
        "draw_positive_a": (lambda _, idle: idle.draw_positive_a, _AMMETER),
        "draw_negative_a": (lambda _, idle: idle.draw_negative_a, _AMMETER),
        "upper_chain_v": (lambda c, idle: chain_voltage(c.upper, idle.upper_chain_a), _VOLTMETER),
        "lower_chain_v": (lambda c, idle: chain_voltage(c.lower, idle.lower_chain_a), _VOLTMETER),
        "offset_v": (lambda _, idle: idle.output_v, _OFFSET),
        "gain": (lambda c, _: small_gain(c), _RATIO),
        "gain_db": (lambda c, _: ratio_to_db(small_gain(c)), _DECIBELS),
        "clip_positive_v": (lambda c, idle: clip_reach(c, rail_means(idle), "upper"), _SCOPE),
        "clip_negative_v": (lambda c, idle: clip_reach(c, rail_means(idle), "lower"), _SCOPE),
        "rail_positive_v": (lambda _, idle: idle.rail_positive.mean_v, _VOLTMETER),
        "rail_negative_v": (lambda _, idle: -idle.rail_negative.mean_v, _VOLTMETER),
        "ripple_positive_v": (
            lambda _, idle: idle.rail_positive.highest_v - idle.rail_positive.lowest_v,
            _RIPPLE,
        ),
        "ripple_negative_v": (
            lambda _, idle: idle.rail_negative.highest_v - idle.rail_negative.lowest_v,
            _RIPPLE,
        ),
    }
    return models[name]


def _candidates(design: Design, name: str) -> list[Tolerance]:
    """Tolerances a figure depends on, the usual ones first."""
    chain = [feed()] if design.bias.feed_for("upper") or design.bias.feed_for("lower") else []
    resistors = [emitter()] if max(design.output.upper_emitter, design.output.lower_emitter) else []
    if name.endswith("_idle_a"):
        return [vbe(), *resistors, *chain]
    if name.startswith("draw_"):
        return [vbe(), *resistors, *chain, *([] if _own_supply(design) else [quiescent()])]
    if name.endswith("_chain_v"):
        return [drop(), *chain]
    if name == "offset_v":
        return [offset(design)]
    if name.startswith("gain"):
        return [feedback()]
    if name.startswith("clip_"):
        side: Side = "upper" if name == "clip_positive_v" else "lower"
        return [hfe(side), supply(design), swing(), current_limit(), load(), *chain]
    if name == "output_at_clip_v":
        return [hfe(), supply(design), swing(), current_limit(), load(), *chain]
    if name.startswith("rail_"):
        return [supply(design)]
    return [reservoir(), vbe()] if isinstance(design.supply, TransformerSupply) else []


def _own_supply(design: Design) -> bool:
    return design.driver.positive_v is not None


# Distortion against level


def _levels(variants: Variants, rows: Sequence[LevelReading]) -> Iterator[list[Target]]:
    """Distortion of each row, and its output where the row holds input and output."""
    for row in rows:
        f = row.frequency_hz
        if row.input_v is not None:
            peak: float | None = math.sqrt(2.0) * row.input_v
            level = f"{format_quantity(row.input_v, 'V')} in"
        else:
            assert row.output_v is not None
            peak = find_input(variants, row.output_v, f)
            level = f"{format_quantity(row.output_v, 'V')} out"
        place = f"{level}, {format_quantity(f, 'Hz')}"
        own = None if peak is None else variants.own_sine(f, peak)
        targets = [_thd(variants, f"THD, {place}", row.thd_percent, own, (f, peak or 0.0))]
        if peak is not None and None not in (row.input_v, row.output_v):
            targets.insert(0, _output(variants, f"output, {place}", row, own))
        yield targets


def _near_clip(bench: Bench, peak_v: float) -> bool:
    return peak_v * bench.gain > _NEAR_CLIP * bench.clip_v


def _thd(
    variants: Variants, name: str, measured: float, own: Sine | None, sine: tuple[float, float]
) -> Target:
    """Distortion of a sine, `sine` its frequency and its peak at the input."""
    design = variants.bench.design
    clipping = _near_clip(variants.bench, sine[1])
    return Target(
        name=name,
        unit="%",
        measured=measured,
        computed=own and own.thd_percent,
        error=_DISTORTION,
        model=lambda tolerance, share: variants.sine(tolerance, share, *sine).thd_percent,
        candidates=[supply(design), hfe(), load()] if clipping else [vbe(), bandwidth()],
        lattice=True,
    )


def _output(variants: Variants, name: str, row: LevelReading, own: Sine | None) -> Target:
    """Output of a sine whose input was measured too."""
    assert row.input_v is not None
    assert row.output_v is not None
    design = variants.bench.design
    sine = row.frequency_hz, math.sqrt(2.0) * row.input_v
    clipping = _near_clip(variants.bench, sine[1])
    return Target(
        name=name,
        unit="V",
        measured=row.output_v,
        computed=own and own.output_v,
        error=_RATIO,
        model=lambda tolerance, share: variants.sine(tolerance, share, *sine).output_v,
        candidates=[feedback(), *([supply(design), hfe(), load()] if clipping else [])],
        lattice=True,
    )


# Static curves


def _curve(variants: Variants, curve: MeasuredTable) -> Iterator[list[Target]]:
    """Every row of a static curve, on the rails that its output current leaves."""
    most = max(abs(v) for v in curve.output_v)
    for row in zip(curve.driven_v, curve.output_v, strict=True):
        yield [_row(variants, curve.kind, row, most)]


def _row(variants: Variants, kind: str, row: tuple[float, float], most_v: float) -> Target:
    driven, measured = row
    design = variants.bench.design

    def model(tolerance: Tolerance | None, share: float) -> float:
        circuit, idle = variants.circuit(tolerance, share, resistor=True)
        rails = loaded_rails(circuit, idle, measured)
        if not idle.converged or min(rails) <= 0.0:
            return math.nan
        if kind == "drive":
            return output_at_drive(circuit, driven, rails)
        return float(static_point(circuit, driven, *rails).v_o)

    computed = model(None, 0.0)
    side: Side = "upper" if driven > 0.0 else "lower"
    if kind == "drive":
        candidates = [vbe(side), emitter(), supply(design), hfe(side), load()]
    else:
        candidates = [offset(design), feedback(), hfe(side), supply(design), swing()]
        candidates += [current_limit(), load()]
    return Target(
        name=f"{kind} {format_quantity(driven, 'V')}",
        unit="V",
        measured=measured,
        computed=computed if math.isfinite(computed) else None,
        error=(0.0, _CURVE * most_v),
        model=model,
        candidates=candidates,
        signed=True,
    )
