"""A bench sheet as tables: one form for the terminal and for CSV.

A value stands in the base unit of its column; how it is printed is decided here too.
"""

import csv
import io
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import NamedTuple

from tonesim.against import Against
from tonesim.bench import Reading
from tonesim.clipping import ClipSheet, HalfClip
from tonesim.distortion import DistortionPoint, DistortionSheet
from tonesim.explanation import Comparison
from tonesim.heat import Cooling, HeatSheet
from tonesim.idle import IdleSheet
from tonesim.power import THD_LEVELS, PowerSheet
from tonesim.response import GainSheet
from tonesim.sheet import Sheet
from tonesim.stability import Stability
from tonesim.thermal import Equilibrium
from tonesim.transient import PowerUpSheet, SquareSheet
from tonesim.units import format_quantity

_LEAST = 1e-9  # what is less is called so
MOST_RTH = 1e4  # K/W; what allows more allows any
_MOST_PERCENT = 1000.0  # a deviation beyond it is one of another kind
_LEAST_GAIN_V = 1e-3  # a limit whose lifting brings less brings nothing
_OF_ITS_OWN = ""  # unit of a column whose values bring their units along


class Quantity(NamedTuple):
    """A value with a unit of its own, whatever its column's is."""

    value: float | None
    unit: str


Value = float | str | Quantity | None


@dataclass(frozen=True)
class Table:
    """One table of a sheet.

    `columns` are headings with the unit of their values, the first of the rows' names; `notes`
    are sentences printed below it.
    """

    section: str
    title: str
    columns: tuple[tuple[str, str], ...]
    rows: tuple[tuple[Value, ...], ...]
    notes: tuple[str, ...] = ()


def shown(value: Value, unit: str) -> str:
    """Print a value in its unit, three digits, engineering prefixes."""
    if isinstance(value, Quantity):
        return shown(*value)
    if value is None:
        return "-"
    if isinstance(value, str):
        return value
    if not math.isfinite(value):
        return "none" if value > 0 else "-"
    if unit == "%":
        return f"{value:.3g} %" if abs(value) >= 1e-4 or value == 0.0 else "below 0.0001 %"
    if unit in ("A", "V", "W") and 0.0 < abs(value) < _LEAST:
        return f"below 1 n{unit}"
    if unit in ("dB", "°C", "°"):
        return f"{value:.1f} {unit}"
    if unit in ("K/W", "W/K", ""):
        return f"{value:.3g} {unit}".rstrip()
    return format_quantity(value, unit)


def tables(sheet: Sheet) -> list[Table]:
    """All tables of a sheet, in the order of the bench."""
    found: list[Table] = []
    makers: tuple[tuple[object, Callable[..., Iterator[Table]]], ...] = (
        (sheet.idle, lambda part: _idle(sheet, part)),
        (sheet.gain, _gain),
        (sheet.clip, _clip),
        (sheet.power, _power),
        (sheet.heat, _heat),
        (sheet.distortion, _distortion),
        (sheet.square, _square),
        (sheet.stability, _stability),
        (sheet.power_up, _power_up),
        (sheet.against, _against),
    )
    for part, make in makers:
        if part is not None:
            found += make(part)
    return found


def to_csv(found: Sequence[Table]) -> str:
    """Tables as CSV text: section, table, row, quantity, value, unit; a line a figure."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(["section", "table", "row", "quantity", "value", "unit"])
    for table in found:
        for name, row in zip(_row_names(table), table.rows, strict=True):
            for (heading, unit), value in zip(table.columns[1:], row[1:], strict=True):
                plain, own = value if isinstance(value, Quantity) else (value, unit)
                if plain is not None:
                    text_ = f"{plain:.9g}" if isinstance(plain, float) else plain
                    writer.writerow([table.section, table.title, name, heading, text_, own])
    return text.getvalue()


def _row_names(table: Table) -> list[str]:
    """Names of a table's rows; where rows share theirs, the next cell belongs to it."""
    units = [unit for _, unit in table.columns]
    names = [shown(row[0], units[0]) for row in table.rows]
    if len(set(names)) == len(names):
        return names
    return [
        f"{name}, {shown(row[1], units[1])}" for name, row in zip(names, table.rows, strict=True)
    ]


def _idle(sheet: Sheet, idle: IdleSheet) -> Iterator[Table]:
    rest = sheet.rest
    up, low = rest.upper, rest.lower
    yield Table(
        "idle",
        "at rest",
        (("", ""), ("upper", _OF_ITS_OWN), ("lower", _OF_ITS_OWN)),
        tuple(
            (name, Quantity(a, unit), Quantity(b, unit))
            for name, a, b, unit in (
                ("output device", up.idle_a, low.idle_a, "A"),
                ("chain", up.chain_a, low.chain_a, "A"),
                ("across the chain", up.chain_v, low.chain_v, "V"),
                ("feed resistor", up.feed_a, low.feed_a, "A"),
                ("heat of the device", up.idle_w, low.idle_w, "W"),
                ("rail", up.rail_v, -low.rail_v, "V"),
                ("ripple, peak to peak", up.rail_ripple_v, low.rail_ripple_v, "V"),
                ("draw on the rail", up.draw_a, low.draw_a, "A"),
            )
        ),
    )
    trim = "more than 200 mV" if idle.trim_v is None else Quantity(idle.trim_v, "V")
    yield Table(
        "idle",
        "op-amp and output",
        (("", ""), ("figure", _OF_ITS_OWN)),
        (
            ("output offset", Quantity(rest.output_offset_v, "V")),
            ("trim at the op-amp's input that nulls it", trim),
            ("op-amp's own current", Quantity(idle.driver_quiescent_a, "A")),
            ("op-amp gives to the chains", Quantity(idle.driver_a, "A")),
            ("power from both rails", Quantity(rest.draw_w, "W")),
        ),
    )
    if not idle.apart:
        return
    yield Table(
        "idle",
        "idle current over temperature",
        (
            ("pair at", "°C"),
            ("upper, chain left cool", "A"),
            ("lower, chain left cool", "A"),
            ("upper, chain as warm", "A"),
            ("lower, chain as warm", "A"),
        ),
        tuple(
            (
                apart.pair_c,
                *_currents(apart.converged, apart.upper_a, apart.lower_a),
                *_currents(both.converged, both.upper_a, both.lower_a),
            )
            for apart, both in zip(idle.apart, idle.together, strict=True)
        ),
    )
    yield Table(
        "idle",
        "margin to thermal runaway",
        (
            ("half", ""),
            ("heat rises, chain cool", "W/K"),
            ("stable up to, chain cool", "K/W"),
            ("heat rises, chain as warm", "W/K"),
            ("stable up to, chain as warm", "K/W"),
        ),
        tuple(
            (
                each.side,
                each.apart_w_per_k,
                _any_above(each.rth_apart_k_per_w),
                each.together_w_per_k,
                _any_above(each.rth_together_k_per_w),
            )
            for each in idle.runaway
        ),
        (
            "Stable up to this thermal resistance from junction to air; above it idle current and "
            "heat drive each other up. A chain on the heat sink tracks in part: expect a figure "
            "between both.",
        ),
    )


def _any_above(rth_k_per_w: float | None) -> Value:
    return "any" if rth_k_per_w is None or rth_k_per_w > MOST_RTH else rth_k_per_w


def _currents(converged: bool, upper: float, lower: float) -> tuple[Value, Value]:
    return (upper, lower) if converged else ("none found", "none found")


def _gain(gain: GainSheet) -> Iterator[Table]:
    yield Table(
        "gain",
        "closed loop",
        (("", ""), ("figure", _OF_ITS_OWN)),
        (
            ("gain at 1 kHz", gain.gain),
            ("the same in decibels", Quantity(gain.gain_db, "dB")),
            ("gain by the resistors", gain.ideal_gain),
            (
                f"-3 dB bandwidth at {shown(gain.level_v, 'V')} peak",
                Quantity(gain.bandwidth_hz, "Hz"),
            ),
            ("gain-bandwidth product over gain", Quantity(gain.bandwidth_estimate_hz, "Hz")),
            ("peak input for full output, at the op-amp", Quantity(gain.full_input_v, "V")),
            ("peak input for full output, at the jack", Quantity(gain.full_jack_v, "V")),
            ("full output, peak", Quantity(gain.full_output_v, "V")),
            ("full-power bandwidth (slew rate)", Quantity(gain.full_power_hz, "Hz")),
            ("-3 dB bandwidth driven to full output", Quantity(gain.full_bandwidth_hz, "Hz")),
        ),
        ("A front end and a volume control are not in these levels.",),
    )


def _clip(clip: ClipSheet) -> Iterator[Table]:
    for half in (clip.upper, clip.lower):
        yield _half_clip(half)
    yield Table(
        "clip",
        "levels",
        (("", ""), ("figure", _OF_ITS_OWN)),
        (
            ("upper half, slow signal", Quantity(clip.upper.level_v, "V")),
            ("lower half, slow signal", Quantity(clip.lower.level_v, "V")),
            ("goes first", clip.first),
            ("sine of 1 kHz at the onset of clipping, rms", Quantity(clip.sine_output_v, "V")),
            ("input for it, peak", Quantity(clip.sine_input_peak_v, "V")),
        ),
        ("Onset: the lowest crest falls 1 % short, with the rails as they sag.",),
    )


def _half_clip(half: HalfClip) -> Table:
    return Table(
        "clip",
        f"{half.side} half: {shown(half.level_v, 'V')}, set by {half.cause}",
        (
            ("limit", ""),
            ("used", _OF_ITS_OWN),
            ("available", _OF_ITS_OWN),
            ("in hand", _OF_ITS_OWN),
            ("gained without", "V"),
        ),
        tuple(
            (
                limit.name,
                Quantity(limit.used, limit.unit),
                Quantity(limit.available, limit.unit),
                Quantity(limit.in_hand, limit.unit),
                0.0 if limit.gained_v and limit.gained_v < _LEAST_GAIN_V else limit.gained_v,
            )
            for limit in half.limits
        ),
        (
            "Used and available 1 % below the clip level; gained: how much further the output "
            "goes if this limit alone is lifted.",
        )
        if half.side == "lower"
        else (),
    )


def _power(power: PowerSheet) -> Iterator[Table]:
    readings: list[tuple[str, Reading | None]] = [("onset of clipping", power.clip_point)]
    readings += [
        (f"{100.0 * thd:g} % THD", found)
        for thd, found in zip(THD_LEVELS, power.at_thd, strict=True)
    ]
    yield Table(
        "power",
        f"sine of 1 kHz into {power.bench_ohm:g} Ω",
        (
            ("condition", ""),
            ("output, rms", "V"),
            ("power", "W"),
            ("from the supply", "W"),
            ("efficiency", "%"),
            ("THD", "%"),
            ("heat upper", "W"),
            ("heat lower", "W"),
            ("driver swing, peak", "V"),
            ("driver current, peak", "A"),
        ),
        tuple(
            (name, *[None] * 9)
            if found is None
            else (
                name,
                found.output_v,
                found.load_w,
                found.supply_w,
                100.0 * found.efficiency,
                found.harmonics.thd_percent,
                found.upper_w,
                found.lower_w,
                found.driver_peak_v,
                found.driver_peak_a,
            )
            for name, found in readings
        ),
        ("A dash: the stage distorts more than that before it clips, or never so much.",)
        if None in power.at_thd
        else (),
    )
    worst = [("sine of 1 kHz, resistor", power.worst)]
    if power.worst_loudspeaker is not None:
        at = power.worst_loudspeaker.frequency_hz
        worst.append((f"sine of {at:.0f} Hz, loudspeaker", power.worst_loudspeaker))
    yield Table(
        "power",
        "worst heat of the output devices",
        (("load", ""), ("level", "%"), ("upper", "W"), ("lower", "W")),
        tuple((name, 100.0 * heat.share, heat.upper_w, heat.lower_w) for name, heat in worst),
        ("Level as a share of the onset of clipping.",),
    )
    yield Table(
        "power",
        f"rails in a burst of {1e3 * power.burst_s:.0f} ms at the onset of clipping",
        (
            ("rail", ""),
            ("at idle", "V"),
            ("at the end", "V"),
            ("lowest", "V"),
            ("sag", "%"),
            ("recovers in", "s"),
        ),
        tuple(
            (name, rail.idle_v, rail.sagged_v, rail.lowest_v, 100.0 * rail.sag, rail.recovery_s)
            for name, rail in (
                ("positive", power.positive_burst),
                ("negative", power.negative_burst),
            )
        ),
    )
    yield Table(
        "power",
        "ripple and hum",
        (("", ""), ("at idle", "V"), ("at the onset of clipping", "V")),
        (
            ("ripple on the positive rail, peak to peak", *_ripples(power, positive=True)),
            ("ripple on the negative rail, peak to peak", *_ripples(power, positive=False)),
            ("hum at the output, rms", power.hum_idle_v, power.hum_full_v),
        ),
        ("What the op-amp lets through from its rails is not in it.",),
    )


def _ripples(power: PowerSheet, *, positive: bool) -> tuple[float, float]:
    full = power.clip_point
    if positive:
        return power.ripple_idle_v[0], full.positive_highest_v - full.positive_lowest_v
    return power.ripple_idle_v[1], full.negative_highest_v - full.negative_lowest_v


def _heat(heat: HeatSheet) -> Iterator[Table]:
    yield Table(
        "heat",
        f"heat sinks, one a device, {heat.ambient_c:g} °C around them",
        (
            ("half", ""),
            ("device", ""),
            ("worst heat", "W"),
            ("with", ""),
            ("sink, at most", "K/W"),
            ("case then", "°C"),
            ("junction then", "°C"),
            ("idle settles, chain cool", "°C"),
            ("idle settles, chain as warm", "°C"),
        ),
        tuple(
            (
                each.side,
                each.part,
                each.worst_w,
                each.condition,
                _sink(each),
                each.case_c,
                each.junction_c,
                _settling(each.cool),
                _settling(each.tracking),
            )
            for each in heat.devices
        ),
        (
            f"{heat.rth_cs_k_per_w:g} K/W from case to sink. The figure keeps the junction at its "
            "rating: choose less. A sink at this limit burns skin.",
            *_idle_sinks(heat),
        ),
    )


def _sink(each: Cooling) -> Value:
    if each.rth_sa_k_per_w is None:
        return "none suffices"
    return "none needed" if each.bare else each.rth_sa_k_per_w


def _settling(found: Equilibrium | None) -> Value:
    if found is None:
        return None
    if found.settled:
        return found.junction_c
    return "runs away" if found.loop_gain >= 1.0 else "too hot"


def _idle_sinks(heat: HeatSheet) -> Iterator[str]:
    for each in heat.devices:
        if each.tracking is None or each.tracking.settled:
            continue
        if each.idle_rth_sa_k_per_w is None:
            yield f"The {each.side} device does not settle at idle on any heat sink."
        else:
            yield (
                f"At idle the {each.side} device settles on {each.idle_rth_sa_k_per_w:.2g} K/W "
                "or less, the chain as warm as its junction."
            )


def _distortion(found: DistortionSheet) -> Iterator[Table]:
    yield Table(
        "distortion",
        f"against level, {found.tone_hz:.0f} Hz",
        (
            ("level", "dB"),
            ("output, rms", "V"),
            ("power", "W"),
            ("THD", "%"),
            ("THD of the whole", "%"),
            ("second", "%"),
            ("third", "%"),
            ("fifth", "%"),
            ("THD and noise", "%"),
        ),
        tuple(_level_row(point) for point in found.by_level),
        (
            "Level of the generator against the onset of clipping. THD is referred to the "
            "fundamental, of the whole to the whole output (IEC 60268-3); harmonics to 80 kHz. "
            f"Floor of the computation: {found.floor_db:.0f} dB.",
        ),
    )
    levels = [row[0].level_db for row in found.by_frequency]
    yield Table(
        "distortion",
        "THD against frequency",
        (("frequency", "Hz"), *((f"at {level:g} dB", "%") for level in levels)),
        tuple(
            (points[0].frequency_hz, *(point.harmonics.thd_percent for point in points))
            for points in zip(*found.by_frequency, strict=True)
        ),
        (
            "Harmonics to 80 kHz and to the tenth at least; frequencies lie a little beside the "
            "round ones, clear of the mains.",
        ),
    )
    yield Table(
        "distortion",
        "two tones",
        (
            ("level", "dB"),
            ("modulation, 60 Hz and 7 kHz 4:1", "%"),
            ("of second order", "%"),
            ("of third order", "%"),
            ("difference, 19 and 20 kHz, second", "%"),
            ("third", "%"),
        ),
        tuple(
            (
                each.level_db,
                100.0 * each.modulation.total,
                100.0 * each.modulation.d2,
                100.0 * each.modulation.d3,
                100.0 * each.difference.d2,
                100.0 * each.difference.d3,
            )
            for each in found.intermodulation
        ),
        ("Crest of both tones together against the onset of clipping (SMPTE, IEC 60268-3).",),
    )


def _level_row(point: DistortionPoint) -> tuple[Value, ...]:
    found = point.harmonics
    shares = [100.0 * found.harmonics_v[order - 2] / found.fundamental_v for order in (2, 3, 5)]
    return (
        point.level_db,
        point.output_v,
        point.output_w,
        found.thd_percent,
        100.0 * found.thd_r,
        *shares,
        100.0 * found.thd_n,
    )


def _square(square: SquareSheet) -> Iterator[Table]:
    yield Table(
        "square",
        f"square wave of {square.square_hz:.0f} Hz, rails held",
        (
            ("output, peak", "V"),
            ("rise time", "s"),
            ("steepest", "V/s"),
            ("overshoot", "%"),
            ("both halves off at zero", "s"),
        ),
        tuple(
            (
                each.peak_v,
                each.rise_s,
                each.slew_v_per_s,
                100.0 * each.overshoot,
                each.dead_s,
            )
            for each in square.readings
        ),
        ("Charge in the output devices is left out: a real edge rings more.",),
    )


def _stability(found: Stability) -> Iterator[Table]:
    yield Table(
        "stability",
        "loop in small signals (a hint)",
        (
            ("state", ""),
            ("load", ""),
            ("crossover", "Hz"),
            ("phase margin", "°"),
            ("gain margin", "dB"),
            ("verdict", ""),
        ),
        tuple(
            (
                case.state,
                case.load,
                case.margins.crossover_hz,
                case.margins.phase_margin_deg,
                case.margins.gain_margin_db,
                str(case.verdict),
            )
            for case in found.cases
        ),
        (*found.left_out, *found.assumptions),
    )


def _power_up(found: PowerUpSheet) -> Iterator[Table]:
    start = "from the mains' zero crossing"
    if found.ramp_s is not None:
        start = f"in a ramp of {1e3 * found.ramp_s:.0f} ms"
    yield Table(
        "power-up",
        f"rails come up {start}, no signal",
        (
            ("load", ""),
            ("parts", ""),
            ("op-amp works from", "s"),
            ("largest output", "V"),
            ("at", "s"),
            ("over by", "s"),
            ("rests at", "V"),
        ),
        tuple(
            (
                "as drawn" if each.loaded else "none",
                "as they come" if each.unequal else "as drawn",
                "never" if each.alive_s is None else each.alive_s,
                each.peak_v,
                each.peak_s,
                "not in this record" if each.last_s is None else each.last_s,
                each.rest_v,
            )
            for each in found.thumps
        ),
        (
            "As they come: reservoirs 20 % above and below, the op-amp's offset at its maximum. "
            "Over: within 50 mV of where it rests.",
        ),
    )


def _against(found: Against) -> Iterator[Table]:
    yield Table(
        "against",
        f"measured figures of {found.file}",
        (
            ("figure", ""),
            ("measured", _OF_ITS_OWN),
            ("computed", _OF_ITS_OWN),
            ("deviation", _OF_ITS_OWN),
            ("of the computed", _OF_ITS_OWN),
            ("what would explain it", ""),
        ),
        tuple(
            (
                each.name,
                Quantity(each.measured, each.unit),
                Quantity(each.computed, each.unit),
                Quantity(each.deviation, each.unit),
                _relative(each),
                each.verdict,
            )
            for each in found.comparisons
        ),
        (
            "Each figure is explained by one tolerance alone, all else as in the design; 10 mV of "
            "VBE are also what 5 K of a junction make (2 mV/K), a Darlington's two 2.5 K, or as "
            "much across a chain.",
            "Windows are common practice unless the JSON names a source. Clip levels are static, "
            "with the rails as at idle; the onset of clipping is a sine's, with the rails as they "
            "sag.",
        ),
    )


def _relative(each: Comparison) -> Value:
    if each.unit in ("%", "dB"):
        return Quantity(each.deviation_db, "dB")
    percent = each.deviation_percent
    if percent is not None and abs(percent) > _MOST_PERCENT:
        return f"more than {_MOST_PERCENT:g} %"
    return Quantity(percent, "%")
