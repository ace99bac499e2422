"""A stage at rest: currents, offset and its trim, and how the idle current moves with heat."""

from dataclasses import dataclass

from scipy.optimize import brentq

from tonesim.bench import Bench
from tonesim.circuit import Circuit, lower
from tonesim.curve import OperatingPoint, idle_point, static_point
from tonesim.design import SIDES, Design, Side
from tonesim.thermal import Bias, largest_stable_rth, vbe_slope

TEMPERATURES_C = (0.0, 25.0, 40.0, 50.0, 60.0, 75.0, 90.0, 100.0, 125.0)
_MOST_TRIM_V = 0.2
_SLOPE_K = 1.0  # half-width of the difference that gives watts per kelvin


@dataclass(frozen=True)
class IdleAt:
    """Idle current of both halves at a temperature of the pair and one of the chain.

    `converged` is False where no idle point was found: the stage has run away.
    """

    pair_c: float
    chain_c: float
    upper_a: float
    lower_a: float
    converged: bool


@dataclass(frozen=True)
class Runaway:
    """How the idle heat of one output device answers to heat, at the design's temperatures.

    Watts per kelvin of the junction, with the chain left cool or as warm as the pair; a thermal
    resistance from junction to air times this is the loop gain, which must stay below 1.
    `estimate_w_per_k` is the textbook form VCE kappa / (RE + Vt/Iq) with the chain left cool.
    """

    side: Side
    apart_w_per_k: float
    together_w_per_k: float
    estimate_w_per_k: float

    @property
    def rth_apart_k_per_w(self) -> float | None:
        """Largest stable thermal resistance, chain left cool; None where any is stable."""
        return 1.0 / self.apart_w_per_k if self.apart_w_per_k > 0.0 else None

    @property
    def rth_together_k_per_w(self) -> float | None:
        """Largest stable thermal resistance, chain on the heat sink; None where any is stable."""
        return 1.0 / self.together_w_per_k if self.together_w_per_k > 0.0 else None


@dataclass(frozen=True)
class IdleSheet:
    """A stage at rest.

    `driver_a` flows out of the op-amp into the chains, `trim_v` is what must be added at the
    op-amp's input to bring the output to zero, None where 200 mV do not. What moves with
    temperature is empty where a measured curve stands in the design: it has only its own.
    """

    driver_a: float
    driver_quiescent_a: float
    trim_v: float | None
    apart: tuple[IdleAt, ...]
    together: tuple[IdleAt, ...]
    runaway: tuple[Runaway, ...]


def heated(design: Design, pair_c: float, chain_c: float) -> Circuit:
    """Lower a design with its pair and chain at other temperatures, whatever they bring."""
    output = design.output.model_copy(update={"temperature_c": pair_c})
    bias = design.bias.model_copy(update={"temperature_c": chain_c})
    return lower(design.model_copy(update={"output": output, "bias": bias}))


def idle_at(design: Design, pair_c: float, chain_c: float) -> IdleAt:
    """Idle currents of a design with its pair and chain at given temperatures."""
    idle = idle_point(heated(design, pair_c, chain_c))
    return IdleAt(pair_c, chain_c, idle.upper_current_a, idle.lower_current_a, idle.converged)


def idle_heat(idle: OperatingPoint, circuit: Circuit, side: Side) -> float:
    """Heat of one output device at rest, watts, without its emitter resistor."""
    if side == "upper":
        current, half = idle.upper_current_a, circuit.upper
        across = idle.rail_positive.mean_v - idle.output_v
    else:
        current, half = idle.lower_current_a, circuit.lower
        across = idle.rail_negative.mean_v + idle.output_v
    return max(current * (across - half.r_emitter * current), 0.0)


def offset_trim(circuit: Circuit, idle: OperatingPoint) -> float | None:
    """Volts at the op-amp's input that bring the output to zero, rails as at idle."""
    p, n = idle.rail_positive.mean_v, idle.rail_negative.mean_v

    def output(trim: float) -> float:
        return static_point(circuit, trim, p, n).v_o

    if output(-_MOST_TRIM_V) > 0.0 or output(_MOST_TRIM_V) < 0.0:
        return None
    return float(brentq(output, -_MOST_TRIM_V, _MOST_TRIM_V, xtol=1e-9))


def runaway_of(design: Design, side: Side) -> Runaway:
    """How the idle heat of one output device answers to heat."""
    pair, chain = design.output.temperature_c, design.bias.temperature_c

    def slope(chain_follows: bool) -> float:
        heats = []
        for step in (-_SLOPE_K, _SLOPE_K):
            circuit = heated(design, pair + step, chain + (step if chain_follows else 0.0))
            heats.append(idle_heat(idle_point(circuit), circuit, side))
        return (heats[1] - heats[0]) / (2.0 * _SLOPE_K)

    circuit = lower(design)
    idle = idle_point(circuit)
    upper = side == "upper"
    current = max(idle.upper_current_a if upper else idle.lower_current_a, 0.0)
    rail = idle.rail_positive if upper else idle.rail_negative
    part = design.part_for(side)
    bias = Bias(
        idle_a=current,
        vce_v=rail.mean_v,
        emitter_ohm=design.emitter_for(side) + part.emitter_ohm,
        vbe_slope_v_per_k=vbe_slope(part, max(current, 1e-9), pair),
        temperature_c=pair,
    )
    rth = largest_stable_rth(bias)
    return Runaway(side, slope(False), slope(True), 1.0 / rth)


def measure_idle(bench: Bench) -> IdleSheet:
    """Idle currents over temperature, the trim of the offset and the margin to runaway."""
    design, circuit, idle = bench.design, bench.stage.circuit, bench.stage.idle
    chain = design.bias.temperature_c
    heats = design.measured is None
    temperatures = TEMPERATURES_C if heats else ()
    return IdleSheet(
        driver_a=idle.driver_current_a,
        driver_quiescent_a=design.driver.part.quiescent_a,
        trim_v=offset_trim(circuit, idle),
        apart=tuple(idle_at(design, t, chain) for t in temperatures),
        together=tuple(idle_at(design, t, t) for t in temperatures),
        runaway=tuple(runaway_of(design, side) for side in (SIDES if heats else ())),
    )
