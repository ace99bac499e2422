"""Which limit sets the clip level, and how much the others have in hand just below it."""

import math
from dataclasses import dataclass

from scipy.optimize import brentq

from tonesim.bench import Bench
from tonesim.circuit import NO_LIMIT, Circuit
from tonesim.curve import ClipLevel, OperatingPoint, chain_voltage
from tonesim.design import SIDES, Side
from tonesim.kernel.half import CHAIN_NONE
from tonesim.kernel.static import StaticPoint, solve_static

SLEW_HZ = 20_000.0  # where the slew rate is asked about
_JUST_BELOW = 0.99  # of the clip level: the loop still holds the output
_TOGETHER = 1e-3  # by which both levels may differ and still count as equal
_LOST = 0.01  # of this output, lost when a collector has nothing in hand


@dataclass(frozen=True)
class Limit:
    """One limit of a half, 1 % below the clip level.

    `used` and `available` are in `unit`, their difference is in hand. `gained_v` is how much
    further the output would go if this limit alone were lifted, None where that was not asked.
    """

    name: str
    unit: str
    used: float
    available: float
    gained_v: float | None

    @property
    def in_hand(self) -> float:
        """What is left, in `unit`."""
        return self.available - self.used


@dataclass(frozen=True)
class HalfClip:
    """Static clip level of a half, its cause, and all its limits."""

    side: Side
    level_v: float
    cause: str
    limits: tuple[Limit, ...]


@dataclass(frozen=True)
class ClipSheet:
    """Both halves; the clip point is that of a 1 kHz sine, rails as they sag under it."""

    upper: HalfClip
    lower: HalfClip
    first: str
    sine_output_v: float
    sine_input_peak_v: float
    residual_a: float


def _point_at(
    circuit: Circuit, rails_v: tuple[float, float], output_v: float, extra: float
) -> StaticPoint:
    """Bench resistor at an output voltage the loop holds; `extra` lifts both collectors."""
    point: StaticPoint = solve_static(
        output_v * (circuit.driver.beta + circuit.driver.per_a0) - circuit.driver.offset,
        *rails_v,
        1.0 / circuit.bench_ohm,
        extra,
        circuit.upper,
        circuit.lower,
        circuit.driver,
    )
    return point


def limits_of(
    circuit: Circuit, idle: OperatingPoint, clip: ClipLevel, side: Side
) -> tuple[Limit, ...]:
    """Every limit of a half with what it uses and has, 1 % below the clip level.

    Parameters
    ----------
    circuit : Circuit
    idle : OperatingPoint
        Its rails hold.
    clip : ClipLevel
        Of this half.
    side : "upper" or "lower"

    Returns
    -------
    tuple of Limit
        Driver swing and current; what the feed resistor brings beside what the base takes, where
        there is a chain; the collector's voltage beside what it needs; the supply's current
        limit, where there is one; slew rate at 20 kHz.
    """
    upper = side == "upper"
    rails = (idle.rail_positive.mean_v, idle.rail_negative.mean_v)
    rail = rails[0] if upper else rails[1]
    q, half = circuit.driver, circuit.upper if upper else circuit.lower
    wanted = _JUST_BELOW * clip.level_v
    point = _point_at(circuit, rails, wanted, 0.0)
    level = abs(point.v_o)
    own = (q.rail_positive if upper else -q.rail_negative) if q.own_supply else rail
    gains = clip.gains_v
    limits = [
        Limit(
            "driver swing",
            "V",
            abs(point.v_x),
            own - (q.drop_positive if upper else q.drop_negative),
            gains.get("driver swing"),
        ),
        Limit(
            "driver current",
            "A",
            max(point.i_amp if upper else -point.i_amp, 0.0),
            q.i_source if upper else q.i_sink,
            gains.get("driver current"),
        ),
    ]
    if half.chain != CHAIN_NONE and "base starvation" in gains:
        chain = point.i_drive_up if upper else point.i_drive_low
        base = (point.v_d if upper else -point.v_d) + chain_voltage(half, chain)
        brought = half.g_feed * (rail - base)
        limits.append(
            Limit("base starvation", "A", brought - chain, brought, gains["base starvation"])
        )
    name = "measured curve" if "measured curve" in gains else "saturation"
    needed = _collector_need(circuit, rails, wanted, rail - level)
    limits.append(Limit(name, "V", needed, rail - level, gains.get(name)))
    own_rail = circuit.rail_positive if upper else circuit.rail_negative
    if own_rail.i_limit < NO_LIMIT:
        drawn = abs(point.i_up + point.i_drive_up if upper else point.i_low + point.i_drive_low)
        limits.append(
            Limit(
                "supply current limit",
                "A",
                drawn,
                own_rail.i_limit,
                gains.get("supply current limit"),
            )
        )
    limits.append(
        Limit(
            f"slew at {SLEW_HZ / 1e3:g} kHz", "V/s", 2.0 * math.pi * SLEW_HZ * level, q.slew, None
        )
    )
    return tuple(limits)


def _collector_need(
    circuit: Circuit, rails_v: tuple[float, float], output_v: float, across_v: float
) -> float:
    """Voltage a collector needs above the output: below it the output falls by 1 %."""
    whole = abs(_point_at(circuit, rails_v, output_v, 0.0).v_o)

    def kept(lowered: float) -> float:
        level = abs(_point_at(circuit, rails_v, output_v, -lowered).v_o)
        return level - (1.0 - _LOST) * whole

    if across_v <= 0.0 or kept(across_v) > 0.0:
        return 0.0
    return across_v - float(brentq(kept, 0.0, across_v, xtol=1e-4))


def measure_clip(bench: Bench) -> ClipSheet:
    """Clip levels of both halves, and what each limit has in hand."""
    rest, circuit, idle = bench.rest, bench.stage.circuit, bench.stage.idle
    upper, lower = (
        HalfClip(
            side,
            at_rest.clip.level_v,
            at_rest.clip.cause,
            limits_of(circuit, idle, at_rest.clip, side),
        )
        for side, at_rest in zip(SIDES, (rest.upper, rest.lower), strict=True)
    )
    difference = abs(upper.level_v) - abs(lower.level_v)
    first = "both together"
    if abs(difference) > _TOGETHER * abs(upper.level_v):
        first = "lower half" if difference > 0.0 else "upper half"
    return ClipSheet(
        upper=upper,
        lower=lower,
        first=first,
        sine_output_v=bench.clip_point.output_v,
        sine_input_peak_v=bench.clip_point.input_peak_v,
        residual_a=max(rest.upper.clip.residual_a, rest.lower.clip.residual_a),
    )
