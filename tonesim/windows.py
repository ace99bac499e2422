"""What parts come with: spreads that move a stage's figures, each as a change of its design.

A tolerance is walked in shares: 0 is the design as it stands, 1 and -1 are the ends of what
parts come with. Factors are walked in ratios. Windows are common practice without a source,
unless the tolerance names one.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from tonesim.circuit import Circuit, bench_load, lower
from tonesim.design import BatterySupply, Design, Side, TransformerSupply
from tonesim.kernel.half import CHAIN_MULTIPLIER, HalfParams
from tonesim.tolerance import Tolerances
from tonesim.units import format_quantity

PRACTICE = "common practice, no source"
VBE_V = Tolerances.vbe_v  # either way: a saturation current 3.2 times as large or as small
LEAST_HFE, MOST_HFE = (
    Tolerances.hfe_least,
    Tolerances.hfe_most,
)  # of the typical gain, inside the sheets' windows
RESISTOR_PERCENT = Tolerances.resistors_percent
MAINS_PERCENT = Tolerances.supply_percent
BATTERY_PERCENT = 10.0  # from charged to flat
PANEL_PERCENT = 2.0  # a supply's own meter
RESERVOIR_PERCENT = Tolerances.reservoir_percent
LEAST_SWING_V, MOST_SWING_V = -1.5, 0.5  # least swing of op-amp sheets against the typical
LEAST_LIMIT, MOST_LIMIT = 0.25, 1.5  # 10 and 60 mA of a TL072, typically 40 (its sheet)
LEAST_BANDWIDTH, MOST_BANDWIDTH = 0.6, 1.4
LEAST_QUIESCENT, MOST_QUIESCENT = 0.5, 1.8


def _same_design(design: Design, _value: float) -> Design:
    return design


def _same_circuit(circuit: Circuit, _value: float) -> Circuit:
    return circuit


@dataclass(frozen=True)
class Tolerance:
    """One spread. `unit` is "V", "%" or "x" (a factor); `holder` says what comes with it.

    `change` acts on the design, `alter` on the circuit where no key of the design does. Values
    are changes of the design; an `absolute` one stands in place of the design's own.
    """

    part: str
    unit: str
    least: float
    most: float
    centre: float = 0.0
    holder: str = "parts come with"
    source: str = PRACTICE
    absolute: bool = False
    change: Callable[[Design, float], Design] = _same_design
    alter: Callable[[Circuit, float], Circuit] = _same_circuit

    def at(self, share: float) -> float:
        """Value at a signed share of the window."""
        end = self.most if share >= 0.0 else self.least
        if self.unit == "x":
            return self.centre * math.pow(end / self.centre, abs(share))
        return self.centre + abs(share) * (end - self.centre)

    @property
    def window(self) -> str:
        """The window in words: "±30 mV", "×0.5 to ×1.6"."""
        if self.least == -self.most:
            return f"±{format_quantity(self.most, self.unit)}"
        return f"{shown_change(self.least, self.unit)} to {shown_change(self.most, self.unit)}"

    def circuit(self, design: Design, share: float, *, resistor: bool) -> Circuit:
        """Lower a design with this tolerance at a share of its window.

        `resistor` puts the bench resistor in place of a loudspeaker.
        """
        value = self.at(share)
        changed = self.change(design, value)
        circuit = lower(changed)
        if resistor:
            circuit = circuit._replace(load=bench_load(changed))
        return self.alter(circuit, value)


def shown_change(value: float, unit: str) -> str:
    """Print a change with its sign: "+12 mV", "-2 %", "×0.62"."""
    if unit == "x":
        return f"×{value:.3g}"
    if unit == "%":
        return f"{value:+.2g} %"
    return ("+" if value > 0.0 else "") + format_quantity(value, unit)


def _sides(side: Side | None) -> tuple[Side, ...]:
    return ("upper", "lower") if side is None else (side,)


def _devices(side: Side | None) -> str:
    return "both devices" if side is None else f"the {side} device"


def _in(design: Design, section: str, changes: dict[str, Any]) -> Design:
    """Copy of a design with values of one section replaced, whatever they are."""
    part = getattr(design, section)
    return design.model_copy(update={section: part.model_copy(update=changes)})


def _scaled(design: Design, section: str, keys: tuple[str, ...], percent: float) -> Design:
    """The same with values scaled, those not given left out."""
    part, factor = getattr(design, section), 1.0 + percent / 100.0
    given = {key: getattr(part, key) for key in keys if getattr(part, key) is not None}
    return _in(design, section, {key: factor * value for key, value in given.items()})


def vbe(side: Side | None = None) -> Tolerance:
    """Base-emitter voltage of one output device, or of both alike."""

    def change(design: Design, value: float) -> Design:
        keys = [f"{each}_vbe_shift_v" for each in _sides(side)]
        return _in(design, "output", {key: getattr(design.output, key) + value for key in keys})

    return Tolerance(f"VBE on {_devices(side)}", "V", -VBE_V, VBE_V, change=change)


def hfe(side: Side | None = None) -> Tolerance:
    """Current gain of one output device, or of both alike."""

    def change(design: Design, value: float) -> Design:
        keys = [f"{each}_hfe_factor" for each in _sides(side)]
        return _in(design, "output", {key: getattr(design.output, key) * value for key in keys})

    return Tolerance(f"hFE of {_devices(side)}", "x", LEAST_HFE, MOST_HFE, 1.0, change=change)


def _resistor(part: str, section: str, *keys: str) -> Tolerance:
    return Tolerance(
        part,
        "%",
        -RESISTOR_PERCENT,
        RESISTOR_PERCENT,
        source="resistors of 5 %, series E24 of IEC 60063",
        change=lambda design, value: _scaled(design, section, keys, value),
    )


def feedback() -> Tolerance:
    """Ratio of the feedback resistors, as a change of the upper one."""
    part = "feedback_ohm (or as much less of ground_leg_ohm)"
    return _resistor(part, "driver", "feedback_ohm")


def feed() -> Tolerance:
    """Both feed resistors."""
    return _resistor("the feed resistors", "bias", "feed_ohm", "upper_feed_ohm", "lower_feed_ohm")


def emitter() -> Tolerance:
    """Both emitter resistors."""
    keys = ("emitter_ohm", "upper_emitter_ohm", "lower_emitter_ohm")
    return _resistor("the emitter resistors", "output", *keys)


def load() -> Tolerance:
    """Bench resistor."""

    def alter(circuit: Circuit, value: float) -> Circuit:
        factor = 1.0 + value / 100.0
        net = circuit.load
        if not net.b.size:
            net = net._replace(d=net.d / factor)
        return circuit._replace(bench_ohm=circuit.bench_ohm * factor, load=net)

    return Tolerance("the load resistor", "%", -RESISTOR_PERCENT, RESISTOR_PERCENT, alter=alter)


def supply(design: Design) -> Tolerance:
    """Voltage of both rails without load."""
    part, most, holder, source = "the supply's voltage", PANEL_PERCENT, "its meter has", PRACTICE
    keys: tuple[str, ...] = ("positive_v", "negative_v")
    if isinstance(design.supply, TransformerSupply):
        part, most, holder = "the mains voltage", MAINS_PERCENT, "the mains has"
        source = "IEC 60038, from memory"
        keys = ("winding_v", "positive_winding_v", "negative_winding_v")
    elif isinstance(design.supply, BatterySupply):
        part, most, holder = "the batteries' voltage", BATTERY_PERCENT, "batteries have"
    return Tolerance(
        part,
        "%",
        -most,
        most,
        holder=holder,
        source=source,
        change=lambda design, value: _scaled(design, "supply", keys, value),
    )


def offset(design: Design) -> Tolerance:
    """Input offset of the op-amp, as a whole, up to the maximum of its sheet."""
    most = max(design.driver.part.offset_max_v, 1e-6)
    return Tolerance(
        "op-amp input offset",
        "V",
        -most,
        most,
        holder="its sheet allows",
        source=f"offset_max_v of {design.driver.part.name}",
        absolute=True,
        change=lambda design, value: _in(design, "driver", {"offset_v": value}),
    )


def swing() -> Tolerance:
    """Swing of the op-amp, towards either rail alike."""

    def alter(circuit: Circuit, value: float) -> Circuit:
        q = circuit.driver
        return circuit._replace(
            driver=q._replace(
                drop_positive=q.drop_positive - value, drop_negative=q.drop_negative - value
            )
        )

    return Tolerance("op-amp swing", "V", LEAST_SWING_V, MOST_SWING_V, alter=alter)


def current_limit() -> Tolerance:
    """Current limit of the op-amp, towards either rail alike."""

    def alter(circuit: Circuit, value: float) -> Circuit:
        q = circuit.driver
        return circuit._replace(
            driver=q._replace(i_source=q.i_source * value, i_sink=q.i_sink * value)
        )

    part = "the op-amp's current limit"
    return Tolerance(part, "x", LEAST_LIMIT, MOST_LIMIT, 1.0, alter=alter)


def bandwidth() -> Tolerance:
    """Gain-bandwidth product of the op-amp."""

    def alter(circuit: Circuit, value: float) -> Circuit:
        q = circuit.driver
        return circuit._replace(driver=q._replace(omega=q.omega * value))

    part = "the op-amp's gain-bandwidth product"
    return Tolerance(part, "x", LEAST_BANDWIDTH, MOST_BANDWIDTH, 1.0, alter=alter)


def quiescent() -> Tolerance:
    """Supply current of the op-amp itself."""

    def alter(circuit: Circuit, value: float) -> Circuit:
        q = circuit.driver
        return circuit._replace(driver=q._replace(i_quiescent=q.i_quiescent * value))

    part = "the op-amp's own current"
    return Tolerance(part, "x", LEAST_QUIESCENT, MOST_QUIESCENT, 1.0, alter=alter)


def reservoir() -> Tolerance:
    """Both reservoir capacitors."""
    return Tolerance(
        "the reservoirs",
        "%",
        -RESERVOIR_PERCENT,
        RESERVOIR_PERCENT,
        source="letter M of IEC 60062",
        change=lambda design, value: _scaled(design, "supply", ("reservoir_f",), value),
    )


def drop() -> Tolerance:
    """Forward voltage of each drop of both chains, or VBE of their multipliers."""

    def moved(half: HalfParams, value: float) -> HalfParams:
        if half.chain == CHAIN_MULTIPLIER:
            q = half.multiplier
            return half._replace(multiplier=q._replace(i_s=q.i_s * math.exp(-value / q.v_t)))
        return half._replace(chain_shift=half.chain_shift + value * float(half.chain_count.sum()))

    def alter(circuit: Circuit, value: float) -> Circuit:
        return circuit._replace(
            upper=moved(circuit.upper, value), lower=moved(circuit.lower, value)
        )

    return Tolerance("each junction of the chains", "V", -VBE_V, VBE_V, alter=alter)
