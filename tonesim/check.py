"""A stage at rest, in the figures of the bench: what `tonesim check` says."""

from dataclasses import asdict, dataclass
from typing import Any

from tonesim.circuit import Circuit, lower
from tonesim.curve import ClipLevel, OperatingPoint, chain_voltage, clip_levels
from tonesim.design import Design
from tonesim.designfile import design_key
from tonesim.limits import cautions
from tonesim.stage import find_idle


@dataclass(frozen=True)
class HalfAtRest:
    """One half without a signal; magnitudes.

    `idle_a` flows through the output device's emitter, `chain_a` through the chain, `feed_a`
    through the feed resistor; `idle_w` is the heat of the output device.
    """

    idle_a: float
    chain_a: float
    chain_v: float
    feed_a: float
    idle_w: float
    rail_v: float
    rail_ripple_v: float
    draw_a: float
    clip: ClipLevel


@dataclass(frozen=True)
class StageCheck:
    """What can be said of a design without a signal.

    Rails are means, ripple is peak to peak. Draw and its power leave out a driver that has a
    supply of its own. The clip levels hold for slow signals into the bench load with the rails
    as at idle; `clean_w` is the sine power at the lower of the two.
    """

    title: str
    design_key_sha256: str
    upper: HalfAtRest
    lower: HalfAtRest
    output_offset_v: float
    ideal_gain: float
    gain: float
    bench_ohm: float
    clean_w: float
    draw_w: float
    cautions: tuple[str, ...]
    residual_a: float
    converged: bool

    def as_dict(self) -> dict[str, Any]:
        """Everything as plain values for JSON."""
        return asdict(self)


def check_design(design: Design) -> StageCheck:
    """Solve a stage at rest and find its clip levels.

    Raises
    ------
    SolverError
        If the stage finds no idle point.
    """
    circuit = lower(design)
    idle = find_idle(circuit, design.title)
    above, below = clip_levels(circuit, idle)
    upper = _half(circuit, idle, above, upper=True)
    lower_ = _half(circuit, idle, below, upper=False)
    least = min(abs(above.level_v), abs(below.level_v))
    ideal = gain = design.driver.gain
    if design.measured is not None and design.measured.input_v is not None:
        gain = design.measured.table.gain
    else:
        gain /= 1.0 + gain / design.driver.part.dc_gain
    return StageCheck(
        title=design.title,
        design_key_sha256=design_key(design),
        upper=upper,
        lower=lower_,
        output_offset_v=idle.output_v,
        ideal_gain=ideal,
        gain=gain,
        bench_ohm=circuit.bench_ohm,
        clean_w=least**2 / 2.0 / circuit.bench_ohm,
        draw_w=upper.draw_a * upper.rail_v + lower_.draw_a * lower_.rail_v,
        cautions=tuple(cautions(design)),
        residual_a=idle.residual_a,
        converged=idle.converged,
    )


def _half(circuit: Circuit, idle: OperatingPoint, clip: ClipLevel, *, upper: bool) -> HalfAtRest:
    """One half's figures, counted towards its own rail."""
    if upper:
        half, rail, sign = circuit.upper, idle.rail_positive, 1.0
        current, chain, draw = idle.upper_current_a, idle.upper_chain_a, idle.draw_positive_a
    else:
        half, rail, sign = circuit.lower, idle.rail_negative, -1.0
        current, chain, draw = idle.lower_current_a, idle.lower_chain_a, idle.draw_negative_a
    held = chain_voltage(half, chain)
    base = sign * idle.drive_v + held
    feed = half.g_feed * (rail.mean_v - base)
    if half.measured.on:
        feed = chain + half.measured.base_share * current if half.g_feed else 0.0
    return HalfAtRest(
        idle_a=current,
        chain_a=chain,
        chain_v=held,
        feed_a=feed,
        idle_w=current * (rail.mean_v - sign * idle.output_v - half.r_emitter * current),
        rail_v=rail.mean_v,
        rail_ripple_v=rail.highest_v - rail.lowest_v,
        draw_a=draw,
        clip=clip,
    )
