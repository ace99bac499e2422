"""What a design's parts can bear, judged by explicit laws with unloaded rails.

`faults` says what cannot be built, `cautions` what can but deserves doubt, one sentence each.
They are estimates made before any solving: real idle and clip levels come from `curve`.
"""

import math
from collections.abc import Callable
from typing import NamedTuple

from tonesim.catalogue import Transistor, conduction, diode_drop
from tonesim.design import SIDES, Design, Multiplier, Side, TransformerSupply
from tonesim.units import format_quantity

# Junction to air without a heatsink, K/W (common practice, no source).
_FREE_AIR = {"TO-92": 200, "TO-18": 300, "TO-126": 100, "TO-220": 65, "TO-3": 35, "TO-264": 35}
_FREE_AIR_ELSE = 40
_WARM_ROOM_C = 40.0
_MAINS_TOLERANCE = 1.1
# A measured loop's gain lies this near the driver's: two resistors of 5 %, and meters.
_GAIN_TOLERANCE = 0.15
_RAIL_TOLERANCE = 0.02  # rails this near those of a measured curve are the same


class IdleEstimate(NamedTuple):
    """What the explicit laws of the parts say about a stage at rest."""

    current_a: float
    upper_chain_v: float
    lower_chain_v: float


def estimate_idle(design: Design) -> IdleEstimate:
    """Estimate idle current and chain voltages, rails unloaded, output at 0 V.

    The current is where both chains together hold what both base-emitter junctions and the
    emitter resistors need; bisection, since the need rises and what is held falls.
    """
    if not any(design.bias.drops_for(side) or design.bias.multiplier_for(side) for side in SIDES):
        return IdleEstimate(0.0, 0.0, 0.0)
    low, high = 1e-18, 100.0
    held = (0.0, 0.0)
    current = 0.0
    for _ in range(56):
        middle = math.sqrt(low * high)
        needed = 0.0
        bases = []
        for side in SIDES:
            need_v, base_a, current = _needed(design, side, middle)
            needed += need_v
            bases.append(base_a)
        held = (_held(design, "upper", bases[0]), _held(design, "lower", bases[1]))
        low, high = (middle, high) if sum(held) > needed else (low, middle)
    return IdleEstimate(current, *held)


def _needed(design: Design, side: Side, device_a: float) -> tuple[float, float, float]:
    """Return base to output voltage, base current and emitter current of a half."""
    output = design.output
    point = conduction(design.part_for(side), device_a, output.temperature_c)
    factor, shift = (
        (output.upper_hfe_factor, output.upper_vbe_shift_v)
        if side == "upper"
        else (output.lower_hfe_factor, output.lower_vbe_shift_v)
    )
    emitter_a = point.collector_a + point.base_a / factor
    return (
        point.vbe_v + shift + emitter_a * design.emitter_for(side),
        point.base_a / factor,
        emitter_a,
    )


def _held(design: Design, side: Side, base_a: float) -> float:
    """Voltage across a half's chain when its base takes a current, by bisection.

    Both chain laws are explicit in one current: that of the drops, or the multiplier's collector.
    """
    feed = design.bias.feed_for(side)
    multiplier = design.bias.multiplier_for(side)
    drops = design.bias.drops_for(side)
    if feed is None or not (drops or multiplier):
        return 0.0
    rail, temperature = design.rail_for(side), design.bias.temperature_c
    low, high = 1e-15, rail / feed
    voltage = 0.0
    for _ in range(40):
        middle = math.sqrt(low * high)
        if multiplier:
            voltage, current = _multiplied(multiplier, middle, temperature)
        else:
            current = middle
            voltage = sum(diode_drop(diode, current, temperature) for diode in drops)
        enough = (rail - voltage) / feed - base_a > current
        low, high = (middle, high) if enough else (low, middle)
    return voltage


def _multiplied(
    multiplier: Multiplier, collector_a: float, temperature_c: float
) -> tuple[float, float]:
    """Voltage across a Vbe multiplier, VBE (1 + R1/R2) + IB R1, and the current through it."""
    point = conduction(multiplier.part, collector_a, temperature_c)
    through_r1 = point.vbe_v / multiplier.base_emitter_ohm + point.base_a
    voltage = point.vbe_v + through_r1 * multiplier.collector_base_ohm
    return voltage, point.collector_a + through_r1


def _driver_rails(design: Design) -> tuple[float, float]:
    driver, supply = design.driver, design.supply
    if driver.positive_v is not None and driver.negative_v is not None:
        return driver.positive_v, driver.negative_v
    return supply.open_positive_v, supply.open_negative_v


def _check_driver_supply(design: Design) -> list[str]:
    positive, negative = _driver_rails(design)
    part, total = design.driver.part, positive - negative
    if total <= part.supply_max_v:
        return []
    own = design.driver.positive_v is not None
    hint = "" if own else "; give it driver.positive_v and driver.negative_v of its own, or"
    return [
        f"driver.part is {part.name}, which stands {part.supply_max_v:g} V in all, found "
        f"{positive:.1f} V and {negative:.1f} V{hint or ';'} choose another type or lower rails"
    ]


def _check_breakdown(design: Design) -> list[str]:
    total = design.rail_for("upper") + design.rail_for("lower")
    return [
        f"output.{side} is {part.name} with VCEO {part.vceo_v:g} V, found {total:.1f} V between "
        "the rails, all of which it meets when the other half is on"
        for side in SIDES
        if (part := design.part_for(side)).vceo_v < total
    ]


def _peak_current(design: Design, side: Side) -> float:
    return design.rail_for(side) / (design.load.least_ohm + design.emitter_for(side))


def _check_peak_current(design: Design) -> list[str]:
    return [
        f"output.{side} is {part.name} with a peak current of {part.ic_peak_a:g} A, found a rail "
        f"of {design.rail_for(side):.1f} V that can push {peak:.1f} A into the load "
        f"({format_quantity(design.load.least_ohm, 'ohm')})"
        for side in SIDES
        if (peak := _peak_current(design, side)) > (part := design.part_for(side)).ic_peak_a
    ]


def _check_idle(design: Design) -> list[str]:
    if design.measured is not None:
        return []
    idle = estimate_idle(design)
    faults = []
    for side in SIDES:
        part = design.part_for(side)
        watts = idle.current_a * design.rail_for(side)
        if idle.current_a > part.ic_max_a or watts > part.power_w:
            faults.append(
                f"bias holds {idle.upper_chain_v + idle.lower_chain_v:.2f} V between the bases, "
                f"which turns the pair hard on: about {idle.current_a:.2g} A at idle and "
                f"{watts:.0f} W in output.{side}, where {part.name} stands {part.ic_max_a:g} A "
                f"and {part.power_w:g} W"
            )
    return faults[:1]


def _check_measured_gain(design: Design) -> list[str]:
    measured, gain = design.measured, design.driver.gain
    if measured is None or measured.input_v is None:
        return []
    found = measured.table.gain
    if abs(found / gain - 1.0) <= _GAIN_TOLERANCE:
        return []
    return [
        f"measured: output over input is {found:.4g} in the table, driver.feedback_ohm and "
        f"driver.ground_leg_ohm give {gain:.4g}, expected the same within "
        f"{100 * _GAIN_TOLERANCE:g} %"
    ]


_FAULTS: tuple[Callable[[Design], list[str]], ...] = (
    _check_driver_supply,
    _check_breakdown,
    _check_peak_current,
    _check_idle,
    _check_measured_gain,
)


def _doubt_idle(design: Design) -> list[str]:
    if design.measured is not None:
        return []
    idle = estimate_idle(design)
    doubts = []
    for side in SIDES:
        part = design.part_for(side)
        watts = idle.current_a * design.rail_for(side)
        bare = (part.tj_max_c - _WARM_ROOM_C) / _FREE_AIR.get(part.package, _FREE_AIR_ELSE)
        stem = (
            f"output.{side}: about {format_quantity(idle.current_a, 'A', 2)} at idle put "
            f"{watts:.1f} W into {part.name}"
        )
        if watts > part.power_w / 4:
            doubts.append(f"{stem}, above a quarter of its {part.power_w:g} W")
        elif watts > bare:
            doubts.append(
                f"{stem} before a note is played, more than its {part.package} stands without a "
                f"heatsink (about {bare:.1f} W); the bias must follow its temperature"
            )
    return doubts


def current_gain(part: Transistor, current_a: float, temperature_c: float) -> float:
    """Find the current gain at a collector current in amperes.

    By bisection on the output device's share of it.
    """
    low, high = 1e-9, current_a
    for _ in range(50):
        middle = math.sqrt(low * high)
        collector = conduction(part, middle, temperature_c).collector_a
        low, high = (middle, high) if collector < current_a else (low, middle)
    point = conduction(part, low, temperature_c)
    return point.collector_a / point.base_a


def _doubt_gain_windows(design: Design) -> list[str]:
    doubts = []
    factors = (design.output.upper_hfe_factor, design.output.lower_hfe_factor)
    for side, factor in zip(SIDES, factors, strict=True):
        part = design.part_for(side)
        for current, least, most in part.hfe_windows:
            gain = factor * current_gain(part, current, 25.0)
            if (least and gain < least) or (most and gain > most):
                window = f"{least or 0:g} to {most:g}" if most else f"{least:g} or more"
                doubts.append(
                    f"output.{side}: {part.name} has a current gain of {gain:.0f} at "
                    f"{format_quantity(current, 'A')}, its sheet says {window}"
                )
    return doubts


def _doubt_driver(design: Design) -> list[str]:
    driver, doubts = design.driver, []
    part = driver.part
    if driver.gain < part.min_stable_gain:
        doubts.append(
            f"driver: {part.name} is stable from a gain of {part.min_stable_gain:g}, found "
            f"{driver.gain:.2f}; it needs a compensation capacitor"
        )
    positive, negative = _driver_rails(design)
    if positive - negative < part.supply_min_v:
        doubts.append(
            f"driver: {part.name} wants {part.supply_min_v:g} V in all, found "
            f"{positive - negative:.1f} V"
        )
    mains = isinstance(design.supply, TransformerSupply) and driver.positive_v is None
    high = _MAINS_TOLERANCE * (positive - negative)
    if mains and high > part.supply_max_v:
        doubts.append(
            f"driver: with the mains 10 % high {part.name} meets {high:.1f} V in all, it stands "
            f"{part.supply_max_v:g} V"
        )
    return doubts


def _doubt_base_current(design: Design) -> list[str]:
    """Where current runs out at 60 % of the rail: the feed resistor's, or the op-amp's.

    With a chain the feed resistor alone brings the base current; the op-amp carries what the
    other half's feed pulls through its chain. Without one the op-amp brings the base current.
    """
    if design.measured is not None:
        return []
    doubts = []
    factors = (design.output.upper_hfe_factor, design.output.lower_hfe_factor)
    limits = (design.driver.part.source_limit_a, design.driver.part.sink_limit_a)
    for side, other, factor, limit in zip(SIDES, SIDES[::-1], factors, limits, strict=True):
        part, wanted = design.part_for(side), 0.6 * design.rail_for(side)
        current = wanted / design.load.bench_ohm
        base = current / (factor * current_gain(part, current, 25.0))
        brought = _brought(design, side, wanted)
        from_driver = base
        if brought is not None:
            from_driver = -max(brought - base, 0.0)
            if base > brought:
                doubts.append(
                    f"bias: the {side} half starves below {wanted:.1f} V across the load, "
                    f"{part.name} wants {format_quantity(base, 'A')} there and its feed resistor "
                    f"brings {format_quantity(brought, 'A')}"
                )
        from_driver += _brought(design, other, -wanted) or 0.0
        if from_driver > limit:
            doubts.append(
                f"driver: at {wanted:.1f} V across the load the {side} half wants "
                f"{format_quantity(from_driver, 'A')} from the op-amp, "
                f"{design.driver.part.name} gives {format_quantity(limit, 'A')}"
            )
    return doubts


def _brought(design: Design, side: Side, output_v: float) -> float | None:
    """Return the current a half's feed resistor brings at an output voltage towards its rail."""
    feed = design.bias.feed_for(side)
    chained = design.bias.drops_for(side) or design.bias.multiplier_for(side)
    if feed is None or not chained:
        return None
    vbe = 0.7 if design.part_for(side).kind == "single" else 1.4
    return max((design.rail_for(side) - output_v - vbe) / feed, 0.0)


def _doubt_peak_current(design: Design) -> list[str]:
    doubts = []
    for side in SIDES:
        part, peak = design.part_for(side), _peak_current(design, side)
        if peak > part.ic_max_a:
            doubts.append(
                f"output.{side}: the rail can push {peak:.1f} A into the load, {part.name} "
                f"stands {part.ic_max_a:g} A continuously"
            )
    return doubts


def _doubt_multiplier(design: Design) -> list[str]:
    if design.measured is not None:
        return []
    doubts = []
    for side in SIDES:
        multiplier, feed = design.bias.multiplier_for(side), design.bias.feed_for(side)
        if multiplier is None or feed is None:
            continue
        brought = design.rail_for(side) / feed
        divider = 0.6 / multiplier.base_emitter_ohm
        if brought < 2.0 * divider:
            doubts.append(
                f"bias: the {side} multiplier's divider takes "
                f"{format_quantity(divider, 'A', 2)} of the {format_quantity(brought, 'A', 2)} "
                "the feed resistor brings; its transistor hardly conducts"
            )
    return doubts


def _doubt_measured(design: Design) -> list[str]:
    measured = design.measured
    if measured is None:
        return []
    doubts = [
        "measured: the curve holds at the temperatures it was taken at; how the idle current moves "
        "with heat, and whether the loop is stable, is not in it"
    ]
    if measured.idle_current_a is None:
        taken = (
            "the least that gives the curve's slope at zero output is taken"
            if measured.input_v is None
            else "none is taken"
        )
        doubts.append(
            f"measured: a static curve does not show the idle current, {taken}; draw and heat "
            "at rest and of quiet notes are only as good as that (measured.idle_current_a "
            "states it)"
        )
    for side, rises, end in zip(SIDES[::-1], measured.table.still_rises, (0, -1), strict=True):
        if rises:
            doubts.append(
                f"measured: the output still follows at {measured.table.output_v[end]:.4g} V, "
                f"the last row of the {side} half; it is taken to clip there"
            )
    for side, then in zip(SIDES, (measured.positive_v, -measured.negative_v), strict=True):
        rail = design.rail_for(side)
        if abs(rail / then - 1.0) > _RAIL_TOLERANCE:
            doubts.append(
                f"measured: the {side} rail was {then:.4g} V and is {rail:.4g} V in this design; "
                "the clip level is carried over by its headroom, the dead zone as it was"
            )
    if measured.input_v is not None:
        doubts.append(
            "measured: a static curve of the closed loop hides what the op-amp takes time for; "
            "its way across the dead zone is missing, so crossover distortion of notes comes out "
            "too low, and so is the way back from clip (a curve of drive_v holds the dead zone)"
        )
    return doubts


_CAUTIONS: tuple[Callable[[Design], list[str]], ...] = (
    _doubt_measured,
    _doubt_idle,
    _doubt_gain_windows,
    _doubt_driver,
    _doubt_base_current,
    _doubt_peak_current,
    _doubt_multiplier,
)


def faults(design: Design) -> list[str]:
    """Say what cannot be built, one sentence each, the key named."""
    return [fault for check in _FAULTS for fault in check(design)]


def cautions(design: Design) -> list[str]:
    """Say what can be built but deserves doubt, one sentence each; estimates, not results."""
    return [caution for look in _CAUTIONS for caution in look(design)]
