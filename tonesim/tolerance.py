"""Tolerances of parts: which values differ from build to build, how far, and one such build.

What a figure rests on stands beside it. Every part is drawn by itself: no value is drawn twice
for two parts, and no two parts are taken from one batch. Not drawn: temperatures, the winding's
resistance, the op-amp's swing and slew rate, the load, the front end, and the voltage of a bench
supply or of an op-amp's own supply, which are set or regulated.
"""

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal, NamedTuple

import numpy as np

from tonesim.catalogue import Transistor
from tonesim.design import SIDES, BatterySupply, Design, Side, TransformerSupply
from tonesim.designfile import build_design
from tonesim.errors import DesignError, UsageError
from tonesim.limits import current_gain
from tonesim.units import thermal_voltage

# Tolerance letters of resistors, per cent (IEC 60062, from memory).
CLASSES = {"B": 0.1, "C": 0.25, "D": 0.5, "F": 1.0, "G": 2.0, "J": 5.0, "K": 10.0, "M": 20.0}
_MOST_PERCENT = 50.0
_MOST_SHIFT_V = 0.1  # range of a design's vbe_shift_v and offset_v
_LEAST_FACTOR, _MOST_FACTOR = 0.2, 5.0  # range of a design's hfe_factor
_REFERENCE_C = 25.0  # of part parameters


@dataclass(frozen=True)
class Tolerances:
    """How far the parts of a build may lie from the values of the design.

    Parameters
    ----------
    resistors_percent : float
        Class J of IEC 60062, 5 %, as sold for power stages.
    vbe_v : float
        Base-emitter voltage at a given current, volts either way; for a Darlington both
        junctions together. Common practice, no source: 30 mV, Is within a factor of 3.2.
    hfe_least, hfe_most : float
        Factors on the current gain, kept within the windows of the data sheet. Common
        practice, no source.
    diode_v : float
        Forward voltage of each drop at a given current, volts either way. The 1N4448's sheet
        gives 0.62 to 0.72 V at 5 mA for the whole production; a bag of one make lies within
        less than half of that window (common practice, no source).
    offset_v : float or None
        Input offset of the op-amp, either way; None takes the sheet's maximum.
    op_amp_percent : float
        Output current limit and gain-bandwidth product of the op-amp; sheets guarantee about
        a third less than typical.
    reservoir_percent : float
        Capacitance of the reservoirs: class M, 20 %.
    supply_percent : float
        Winding voltage, with the mains 10 % high or low, or the voltage of batteries.

    Raises
    ------
    UsageError
        If a value is outside its range.
    """

    resistors_percent: float = 5.0
    vbe_v: float = 0.030
    hfe_least: float = 0.5
    hfe_most: float = 1.6
    diode_v: float = 0.020
    offset_v: float | None = None
    op_amp_percent: float = 30.0
    reservoir_percent: float = 20.0
    supply_percent: float = 10.0

    def __post_init__(self) -> None:
        """Refuse what is no tolerance."""
        for name in ("resistors", "op_amp", "reservoir", "supply"):
            _check(name, getattr(self, f"{name}_percent"), 0.0, _MOST_PERCENT, "%")
        for name in ("vbe", "diode", "offset"):
            _check(name, getattr(self, f"{name}_v") or 0.0, 0.0, _MOST_SHIFT_V, "V")
        _check("least hFE", self.hfe_least, _LEAST_FACTOR, 1.0, "times nominal")
        _check("most hFE", self.hfe_most, 1.0, _MOST_FACTOR, "times nominal")


def _check(name: str, value: float, least: float, most: float, unit: str) -> None:
    if not least <= value <= most:  # not a number fails as well
        words = name.replace("_", "-")
        raise UsageError(
            f"tolerance of {words} is {value:g}, expected {least:g} to {most:g} {unit}"
        )


def resistor_percent(text: str) -> float:
    """Tolerance of resistors from a letter of IEC 60062 or a number of per cent.

    Raises
    ------
    UsageError

    Examples
    --------
    >>> resistor_percent("F"), resistor_percent("2.5 %")
    (1.0, 2.5)
    """
    bare = text.strip().removesuffix("%").strip()
    if bare.upper() in CLASSES:
        return CLASSES[bare.upper()]
    try:
        return float(bare)
    except ValueError:
        raise UsageError(
            f"tolerance of resistors is {text!r}, expected per cent or a letter: "
            f"{', '.join(f'{letter} {percent:g} %' for letter, percent in CLASSES.items())}"
        ) from None


class Varied(NamedTuple):
    """One property of one part that differs from build to build.

    `keys` are dotted keys of the design that move together, `nominal` their values. `low` and
    `high` are added to them ("shift") or multiply them ("factor", "ratio").
    """

    part: str
    group: str
    keys: tuple[str, ...]
    nominal: tuple[float, ...]
    law: Literal["shift", "factor", "ratio"]
    low: float
    high: float

    def values(self, z: float) -> tuple[float, ...]:
        """Values of the keys at a place in the range: -1 lowest, 0 nominal, 1 highest.

        Either half of the range is filled by itself, so that half of all parts lie below nominal:
        evenly, for a ratio evenly in its logarithm.
        """
        bound, share = (self.high, z) if z > 0.0 else (self.low, -z)
        if self.law == "shift":
            return tuple(value + share * bound for value in self.nominal)
        by = bound**share if self.law == "ratio" else 1.0 + share * (bound - 1.0)
        return tuple(value * by for value in self.nominal)


def varied_parts(design: Design, tolerances: Tolerances) -> tuple[Varied, ...]:
    """Everything of a design that differs from build to build, in a fixed order.

    A tolerance of zero keeps its parts in the list, so that other parts are drawn the same.

    Raises
    ------
    DesignError
        If the design stands on a measured curve, which holds the parts of one build.
    UsageError
        If a tolerance reaches past what a design can say.
    """
    if design.measured is not None:
        raise DesignError(
            f"design {design.title!r} stands on a measured curve, which holds the parts of one "
            "build; parts can be drawn without its section measured (--set measured=)"
        )
    data = _spelt_out(design)
    return (
        *_resistors(data, tolerances),
        *_chains(design, data, tolerances),
        *_pair(design, data, tolerances),
        *_op_amp(design, data, tolerances),
        *_supply(design, data, tolerances),
    )


def _spelt_out(design: Design) -> dict[str, Any]:
    """Tables of a design in which each half has keys of its own."""
    data = design.model_dump()
    for side in SIDES:
        multiplier = design.bias.multiplier_for(side)
        data["bias"][f"{side}_feed_ohm"] = design.bias.feed_for(side)
        data["bias"][f"{side}_multiplier"] = multiplier.model_dump() if multiplier else None
        data["output"][f"{side}_emitter_ohm"] = design.emitter_for(side)
    return data


def _table(data: Any, key: str) -> tuple[Any, Any]:
    """Find the innermost table or list of a dotted key, and the last step into it."""
    *path, last = key.split(".")
    for step in path:
        data = data[int(step)] if isinstance(data, tuple | list) else data[step]
    return data, last


def _nominal(data: Mapping[str, Any], keys: Sequence[str]) -> tuple[float, ...]:
    found = []
    for key in keys:
        table, last = _table(data, key)
        found.append(float(table[last]))
    return tuple(found)


def _percent(
    data: Mapping[str, Any], part: str, group: str, keys: Sequence[str], percent: float
) -> Varied:
    share = percent / 100.0
    return Varied(
        part, group, tuple(keys), _nominal(data, keys), "factor", 1.0 - share, 1.0 + share
    )


def _resistors(data: Mapping[str, Any], tolerances: Tolerances) -> Iterator[Varied]:
    named = [
        ("feedback resistor", "gain resistors", "driver.feedback_ohm"),
        ("ground leg resistor", "gain resistors", "driver.ground_leg_ohm"),
    ]
    for side in SIDES:
        named.append((f"{side} feed resistor", "feed resistors", f"bias.{side}_feed_ohm"))
        named.append(
            (f"{side} emitter resistor", "emitter resistors", f"output.{side}_emitter_ohm")
        )
        if data["bias"][f"{side}_multiplier"]:
            for end in ("collector_base", "base_emitter"):
                words = end.replace("_", "-")
                named.append(
                    (
                        f"{side} multiplier, {words} resistor",
                        "multiplier resistors",
                        f"bias.{side}_multiplier.{end}_ohm",
                    )
                )
    for part, group, key in named:
        table, last = _table(data, key)
        if table[last]:  # a resistor left out, or of 0 ohm, is none
            yield _percent(data, part, group, (key,), tolerances.resistors_percent)


def _chains(design: Design, data: Mapping[str, Any], tolerances: Tolerances) -> Iterator[Varied]:
    for side in SIDES:
        for k, diode in enumerate(design.bias.drops_for(side)):
            ratio = math.exp(tolerances.diode_v / (diode.n * thermal_voltage(_REFERENCE_C)))
            key = f"bias.{side}.{k}.is_a"
            part = f"{side} drop {k + 1}, {diode.name}, saturation current"
            yield Varied(part, "drops", (key,), _nominal(data, (key,)), "ratio", 1.0 / ratio, ratio)
        multiplier = design.bias.multiplier_for(side)
        if multiplier is None:
            continue
        stem = f"bias.{side}_multiplier.part"
        ratio = math.exp(tolerances.vbe_v / thermal_voltage(_REFERENCE_C))
        keys = (f"{stem}.is_a",)
        part = f"{side} multiplier, saturation current"
        yield Varied(
            part, "multiplier VBE", keys, _nominal(data, keys), "ratio", 1.0 / ratio, ratio
        )
        low, high = hfe_range(multiplier.part, 1.0, tolerances)
        keys = (f"{stem}.hfe",)
        part = f"{side} multiplier, hFE"
        yield Varied(part, "multiplier hFE", keys, _nominal(data, keys), "ratio", low, high)


def _pair(design: Design, data: Mapping[str, Any], tolerances: Tolerances) -> Iterator[Varied]:
    for side in SIDES:
        key = f"output.{side}_vbe_shift_v"
        nominal = _nominal(data, (key,))
        shift = tolerances.vbe_v
        _stay_within(key, nominal[0] - shift, nominal[0] + shift, -_MOST_SHIFT_V, _MOST_SHIFT_V)
        part = f"{side} output transistor, VBE"
        yield Varied(part, "output pair VBE", (key,), nominal, "shift", -shift, shift)
        yield _output_hfe(design, data, side, tolerances)


def _output_hfe(
    design: Design, data: Mapping[str, Any], side: Side, tolerances: Tolerances
) -> Varied:
    key = f"output.{side}_hfe_factor"
    nominal = _nominal(data, (key,))
    low, high = hfe_range(design.part_for(side), nominal[0], tolerances)
    _stay_within(key, nominal[0] * low, nominal[0] * high, _LEAST_FACTOR, _MOST_FACTOR)
    part = f"{side} output transistor, hFE"
    return Varied(part, "output pair hFE", (key,), nominal, "ratio", low, high)


def _stay_within(key: str, low: float, high: float, least: float, most: float) -> None:
    if low < least or high > most:
        raise UsageError(
            f"{key} would be drawn from {low:.3g} to {high:.3g}, expected {least:g} to {most:g}; "
            "take a smaller tolerance"
        )


def hfe_range(part: Transistor, factor: float, tolerances: Tolerances) -> tuple[float, float]:
    """Lowest and highest factor on a current gain that stays within the sheet's windows.

    The nominal gain stays in the range even where it is outside a window itself.
    """
    low, high = tolerances.hfe_least, tolerances.hfe_most
    for current, least, most in part.hfe_windows:
        gain = factor * current_gain(part, current, _REFERENCE_C)
        if least:
            low = max(low, min(least / gain, 1.0))
        if most:
            high = min(high, max(most / gain, 1.0))
    return low, high


def _op_amp(design: Design, data: Mapping[str, Any], tolerances: Tolerances) -> Iterator[Varied]:
    key, part = "driver.offset_v", design.driver.part
    offset = part.offset_max_v if tolerances.offset_v is None else tolerances.offset_v
    nominal = _nominal(data, (key,))
    _stay_within(key, nominal[0] - offset, nominal[0] + offset, -_MOST_SHIFT_V, _MOST_SHIFT_V)
    yield Varied("op-amp, input offset", "op-amp offset", (key,), nominal, "shift", -offset, offset)
    percent = tolerances.op_amp_percent
    limits = ("driver.part.source_limit_a", "driver.part.sink_limit_a")
    yield _percent(data, "op-amp, current limit", "op-amp current limit", limits, percent)
    keys = ("driver.part.gain_bandwidth_hz",)
    yield _percent(data, "op-amp, gain-bandwidth", "op-amp gain-bandwidth", keys, percent)


def _supply(design: Design, data: Mapping[str, Any], tolerances: Tolerances) -> Iterator[Varied]:
    supply = design.supply
    if isinstance(supply, TransformerSupply):
        windings = ("winding_v", "positive_winding_v", "negative_winding_v")
        keys = [f"supply.{key}" for key in windings if data["supply"][key] is not None]
        yield _percent(data, "mains, winding voltage", "mains", keys, tolerances.supply_percent)
        keys = ["supply.reservoir_f"]
        yield _percent(data, "reservoirs", "reservoirs", keys, tolerances.reservoir_percent)
    elif isinstance(supply, BatterySupply):
        for rail in ("positive", "negative"):
            keys = [f"supply.{rail}_v"]
            yield _percent(data, f"{rail} battery", "batteries", keys, tolerances.supply_percent)


def draw(varied: Sequence[Varied], rng: np.random.Generator) -> dict[str, float]:
    """Draw the parts of one build.

    Parameters
    ----------
    varied : sequence of Varied
    rng : numpy.random.Generator

    Returns
    -------
    dict
        Value of each dotted key, in the order of the parts. A drop's key counts its place in the
        chain from 0: ``bias.upper.0.is_a``.
    """
    places = rng.uniform(-1.0, 1.0, len(varied))
    drawn: dict[str, float] = {}
    for each, z in zip(varied, places, strict=True):
        drawn.update(zip(each.keys, each.values(float(z)), strict=True))
    return drawn


def build_with(design: Design, drawn: Mapping[str, float], title: str = "") -> Design:
    """Return a design with drawn values in it, checked like a file.

    Parts whose own values were drawn say so in their names.

    Raises
    ------
    DesignError
        If it cannot be built; the sentence begins with "this build: ".
    """
    data = _spelt_out(design)
    for side in SIDES:  # tables of the dump, to be written to
        data["bias"][side] = [dict(drop) for drop in data["bias"][side]]
    data["title"] = title or design.title
    for key, value in drawn.items():
        table, last = _table(data, key)
        if "source" in table and value != table[last] and ", drawn" not in table["name"]:
            table["name"] += ", drawn"
            table["source"] += " Values drawn within tolerances."
        table[last] = value
    return build_design(data, "this build")
