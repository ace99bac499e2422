"""Heat sinks: what keeps the output devices within their rating, and whether idle settles on it."""

import math
from dataclasses import dataclass

from tonesim.bench import Bench
from tonesim.curve import idle_point
from tonesim.design import SIDES, Side
from tonesim.idle import heated, idle_heat
from tonesim.power import PowerSheet
from tonesim.thermal import (
    Equilibrium,
    HeatPath,
    derated_power,
    junction_temperature,
    largest_heatsink,
    settle,
)

AMBIENT_C = 40.0  # inside a closed cabinet; common practice
RTH_CS_K_PER_W = 0.5  # greased mica or pad; common practice 0.1 to 1.5
MOST_RTH_SA = 60.0  # a TO-220 standing free, case to air; common practice 60 to 80


@dataclass(frozen=True)
class Cooling:
    """One output device on a heat sink of its own.

    `worst_w` is its heat at the worst level of a sine, resistor or loudspeaker. `rth_sa_k_per_w`
    is the largest sink-to-air resistance that keeps the junction at its rating there (None: none
    suffices; at most what the bare package has); `case_c` and `allowed_w` the case temperature it
    then has and the derated power at it. `cool` and `tracking` say where idle settles on this sink
    with the chain at ambient, or as warm as the junctions; where it does not even with tracking,
    `idle_rth_sa_k_per_w` is the largest sink it settles on, None if there is none.
    """

    side: Side
    part: str
    worst_w: float
    condition: str
    junction_max_c: float
    rth_jc_k_per_w: float
    rth_sa_k_per_w: float | None
    bare: bool
    case_c: float
    junction_c: float
    allowed_w: float
    cool: Equilibrium | None
    tracking: Equilibrium | None
    idle_rth_sa_k_per_w: float | None


@dataclass(frozen=True)
class HeatSheet:
    """Both output devices' cooling at an ambient temperature."""

    ambient_c: float
    rth_cs_k_per_w: float
    devices: tuple[Cooling, ...]


def measure_heat(bench: Bench, power: PowerSheet, ambient_c: float = AMBIENT_C) -> HeatSheet:
    """Size the heat sinks for the worst level and look where idle settles on them."""
    return HeatSheet(
        ambient_c, RTH_CS_K_PER_W, tuple(_cooling(bench, power, s, ambient_c) for s in SIDES)
    )


def _cooling(bench: Bench, power: PowerSheet, side: Side, ambient_c: float) -> Cooling:
    part = bench.design.part_for(side)
    resistor = max(power.heat, key=lambda each: _of(each.upper_w, each.lower_w, side))
    worst, condition = _of(resistor.upper_w, resistor.lower_w, side), "resistor"
    for each in power.loudspeaker_heat:
        warm = _of(each.upper_w, each.lower_w, side)
        if warm > worst:
            worst, condition = warm, f"loudspeaker at {each.frequency_hz:.0f} Hz"
    path = HeatPath(part.rth_jc_k_per_w, RTH_CS_K_PER_W, 0.0)
    need = largest_heatsink(worst, path, ambient_c, part.tj_max_c)
    bare = need.rth_sa_k_per_w > MOST_RTH_SA
    rth = min(need.rth_sa_k_per_w, MOST_RTH_SA) if need.possible else None
    used = HeatPath(part.rth_jc_k_per_w, RTH_CS_K_PER_W, rth or 0.0)
    junction = junction_temperature(worst, used, ambient_c)
    case = junction - worst * part.rth_jc_k_per_w
    tracking = _settled(bench, side, used, ambient_c, follows=True) if rth else None
    idle_rth = rth
    if tracking is not None and not tracking.settled:
        idle_rth = _sink_for_idle(bench, side, used, ambient_c)
    return Cooling(
        side=side,
        part=part.name,
        worst_w=worst,
        condition=condition,
        junction_max_c=part.tj_max_c,
        rth_jc_k_per_w=part.rth_jc_k_per_w,
        rth_sa_k_per_w=rth,
        bare=bare,
        case_c=case,
        junction_c=junction,
        allowed_w=derated_power(case, part.rth_jc_k_per_w, part.tj_max_c, part.power_w),
        cool=_settled(bench, side, used, ambient_c, follows=False) if rth else None,
        tracking=tracking,
        idle_rth_sa_k_per_w=idle_rth,
    )


def _sink_for_idle(bench: Bench, side: Side, path: HeatPath, ambient_c: float) -> float | None:
    """Largest sink-to-air resistance idle settles on with tracking, within a tenth; None if none.

    `path` holds one on which it does not.
    """
    low, high = 0.0, path.rth_sa_k_per_w

    def settles(rth: float) -> bool:
        tried = HeatPath(path.rth_jc_k_per_w, path.rth_cs_k_per_w, rth)
        return _settled(bench, side, tried, ambient_c, follows=True).settled

    if not settles(low):
        return None
    while high - low > 0.1 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if settles(middle) else (low, middle)
    return low


def _settled(
    bench: Bench, side: Side, path: HeatPath, ambient_c: float, *, follows: bool
) -> Equilibrium:
    """Where idle comes to rest with both junctions on such a path."""

    def heat(junction_c: float) -> float:
        circuit = heated(bench.design, junction_c, junction_c if follows else ambient_c)
        found = idle_heat(idle_point(circuit), circuit, side)
        return found if math.isfinite(found) else 1e6

    limit = bench.design.part_for(side).tj_max_c
    return settle(heat, path.total_k_per_w, ambient_c, limit)


def _of(upper: float, lower: float, side: Side) -> float:
    return upper if side == "upper" else lower
