"""Designs: an output stage, its input, front end, supply, load and cabinet, every value resolved.

Keys carry SI units as suffixes; numbers may be written by IEC 60062 ("4k7", "0R22", "2200u").
A part is a name of the catalogue or a table of its own; after loading it is the part's model,
so that a design holds every value its sound depends on. Voltages are against ground, the
negative rail's with its sign; in a half, chain and feed belong between base and drive node
and between base and rail. A section checks itself; what spans sections is checked in `limits`,
and `designfile.build_design` is the door that asks both.
"""

import math
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Literal

from pydantic import BeforeValidator, Field, field_validator, model_validator

from tonesim.catalogue import (
    CabinetShape,
    Diode,
    Loudspeaker,
    OpAmp,
    Transistor,
    load_catalogue,
    resolve_part,
)
from tonesim.measured import MOST_ROWS, MeasuredTable, judge_table, read_table
from tonesim.record import NotNegative, Number, Positive, Record
from tonesim.units import parse_quantity

Side = Literal["upper", "lower"]
SIDES: tuple[Side, Side] = ("upper", "lower")

_LEAST_GAIN, _MOST_GAIN = 1.05, 1000.0
_MOST_RATIO = 8.0  # of a multiplier: it would hold about 5 V in one half


def _chain_text(value: object) -> object:
    """Split the text form of a chain ("1N4148,BAT85"), as it comes from a command line."""
    if isinstance(value, str):
        return [name.strip() for name in value.split(",") if name.strip()]
    return value


TransistorField = Annotated[Transistor, BeforeValidator(resolve_part("transistors"))]
DiodeField = Annotated[Diode, BeforeValidator(resolve_part("diodes"))]
OpAmpField = Annotated[OpAmp, BeforeValidator(resolve_part("opamps"))]
LoudspeakerField = Annotated[Loudspeaker, BeforeValidator(resolve_part("loudspeakers"))]
CabinetField = Annotated[CabinetShape, BeforeValidator(resolve_part("cabinets"))]
Chain = Annotated[tuple[DiodeField, ...], BeforeValidator(_chain_text), Field(max_length=16)]
Celsius = Annotated[Number, Field(ge=-40, le=150)]
Resistor = Annotated[Number, Field(gt=0, le=1e8)]
Rail = Annotated[Number, Field(gt=0, le=200)]
NegativeRail = Annotated[Number, Field(lt=0, ge=-200)]
Factor = Annotated[Number, Field(ge=0.2, le=5)]
Shift = Annotated[Number, Field(ge=-0.1, le=0.1)]
Position = Annotated[Number, Field(ge=0, le=1)]  # of a pot
NetworkResistor = Annotated[Number, Field(ge=10, le=1e7)]
NetworkCapacitor = Annotated[Number, Field(ge=1e-12, le=1e-4)]
Volts = Annotated[tuple[float, ...], Field(max_length=MOST_ROWS)]


class Input(Record):
    """What a recording's 0 dBFS stands for, and clean gain before the op-amp.

    `full_scale_v` is the peak voltage at the jack.
    """

    full_scale_v: Annotated[Number, Field(gt=0, le=100)] = 4.4
    gain_db: Annotated[Number, Field(ge=-80, le=80)] = 0.0


class Tone(Record):
    """Bass and treble in a negative-feedback network (Baxandall 1952; drawn in `front`).

    Both pots have linear tracks: 0 is full cut, 0.5 flat, 1 full boost. Each has an end resistor
    at either side. A capacitor `bass_f` bridges each half of the bass pot, whose wiper reaches
    the summing point through `bass_wiper_ohm`; the treble pot's reaches it through `treble_f`.
    """

    bass: Position = 0.5
    treble: Position = 0.5
    bass_end_ohm: NetworkResistor = 22e3
    bass_pot_ohm: NetworkResistor = 100e3
    bass_wiper_ohm: NetworkResistor = 22e3
    bass_f: NetworkCapacitor = 22e-9
    treble_end_ohm: NetworkResistor = 15e3
    treble_pot_ohm: NetworkResistor = 220e3
    treble_f: NetworkCapacitor = 2.2e-9


class Front(Record):
    """Gain stage that clips, tone network, buffer and volume pot, between jack and `input`'s gain.

    Clip levels are those at the gain stage's output; a negative one left out mirrors the
    positive. `volume_mid_percent` is what a logarithmic track has at half rotation.
    """

    gain_db: Annotated[Number, Field(ge=-40, le=100)] = 0.0
    clip_positive_v: Rail = 13.5
    clip_negative_v: NegativeRail | None = None
    tone: Tone | None = None
    volume: Position = 1.0
    volume_taper: Literal["linear", "logarithmic"] = "logarithmic"
    volume_mid_percent: Annotated[Number, Field(ge=1, le=50)] = 15.0

    @property
    def lowest_v(self) -> float:
        """Clip level of the negative side, volts, with its sign."""
        return -self.clip_positive_v if self.clip_negative_v is None else self.clip_negative_v

    @property
    def volume_middle(self) -> float:
        """Share of the signal at half rotation of the volume pot."""
        return 0.5 if self.volume_taper == "linear" else self.volume_mid_percent / 100.0


class Driver(Record):
    """Op-amp and feedback network; `offset_v` is signed, the part's own a magnitude."""

    part: OpAmpField
    feedback_ohm: Resistor
    ground_leg_ohm: Resistor
    offset_v: Annotated[Number, Field(ge=-0.1, le=0.1)] = 0.0
    positive_v: Rail | None = None
    negative_v: NegativeRail | None = None

    @field_validator("offset_v", mode="before")
    @classmethod
    def _none_is_zero(cls, value: object) -> object:
        return 0.0 if value is None else value

    @property
    def gain(self) -> float:
        """Closed-loop gain, 1 + feedback / ground leg."""
        return 1.0 + self.feedback_ohm / self.ground_leg_ohm

    @model_validator(mode="after")
    def _check(self) -> "Driver":
        if (self.positive_v is None) != (self.negative_v is None):
            raise ValueError("give positive_v and negative_v together, or neither")
        if self.gain < _LEAST_GAIN:
            raise ValueError(
                f"feedback_ohm and ground_leg_ohm give a gain of {self.gain:.3g}, expected "
                f"{_LEAST_GAIN:g} to {_MOST_GAIN:g}; are the two exchanged?"
            )
        if self.gain > _MOST_GAIN:
            raise ValueError(
                f"feedback_ohm and ground_leg_ohm give a gain of {self.gain:.4g}, expected "
                f"{_LEAST_GAIN:g} to {_MOST_GAIN:g}"
            )
        return self


class Multiplier(Record):
    """Vbe multiplier: holds about VBE (1 + R1/R2).

    R1 is `collector_base_ohm`, R2 `base_emitter_ohm`.
    """

    part: TransistorField
    collector_base_ohm: Resistor
    base_emitter_ohm: Resistor

    @property
    def ratio(self) -> float:
        """Multiple of VBE it holds, 1 + R1/R2."""
        return 1.0 + self.collector_base_ohm / self.base_emitter_ohm

    @model_validator(mode="after")
    def _check(self) -> "Multiplier":
        if self.part.kind != "single":
            raise ValueError(f"{self.part.name} is a Darlington, expected a single transistor")
        if self.ratio > _MOST_RATIO:
            raise ValueError(
                f"collector_base_ohm and base_emitter_ohm multiply VBE by {self.ratio:.3g}, "
                f"expected {_MOST_RATIO:g} or less; are the two exchanged?"
            )
        return self


class Bias(Record):
    """Feed resistors and chains. A half has drops, or a multiplier, or neither."""

    feed_ohm: Resistor | None = None
    upper_feed_ohm: Resistor | None = None
    lower_feed_ohm: Resistor | None = None
    upper: Chain = ()
    lower: Chain = ()
    multiplier: Multiplier | None = None
    upper_multiplier: Multiplier | None = None
    lower_multiplier: Multiplier | None = None
    temperature_c: Celsius = 25.0

    @property
    def upper_feed(self) -> float | None:
        """Feed resistor of the upper half in ohms, None where there is none."""
        return self.feed_ohm if self.upper_feed_ohm is None else self.upper_feed_ohm

    @property
    def lower_feed(self) -> float | None:
        """Feed resistor of the lower half in ohms, None where there is none."""
        return self.feed_ohm if self.lower_feed_ohm is None else self.lower_feed_ohm

    def feed_for(self, side: Side) -> float | None:
        """Feed resistor of a half in ohms, None where there is none."""
        return self.upper_feed if side == "upper" else self.lower_feed

    def drops_for(self, side: Side) -> tuple[Diode, ...]:
        """Return the drops of a half's chain, from the base to the drive node."""
        return self.upper if side == "upper" else self.lower

    @property
    def upper_multiplied(self) -> Multiplier | None:
        """Multiplier of the upper half: its own, else the one common to both."""
        return self.upper_multiplier or self.multiplier

    @property
    def lower_multiplied(self) -> Multiplier | None:
        """Multiplier of the lower half: its own, else the one common to both."""
        return self.lower_multiplier or self.multiplier

    def multiplier_for(self, side: Side) -> Multiplier | None:
        """Multiplier of a half: its own, else the one common to both."""
        return self.upper_multiplied if side == "upper" else self.lower_multiplied

    @model_validator(mode="after")
    def _check(self) -> "Bias":
        faults = []
        for side in SIDES:
            drops, multiplier = self.drops_for(side), self.multiplier_for(side)
            if drops and multiplier:
                faults.append(
                    f"the {side} half has both drops ({side}) and a multiplier, expected one "
                    "of them (multiplier serves both halves, upper_multiplier or "
                    "lower_multiplier one)"
                )
            elif (drops or multiplier) and self.feed_for(side) is None:
                faults.append(
                    f"feed_ohm (or {side}_feed_ohm) is missing, the chain of the {side} half "
                    "conducts only what a feed resistor brings"
                )
        if faults:
            raise ValueError("\n".join(faults))
        return self


class Output(Record):
    """The pair, its emitter resistors, catch diodes, temperature and spread.

    A positive `upper_vbe_shift_v` means that this part needs more base-emitter voltage.
    """

    upper: TransistorField
    lower: TransistorField
    emitter_ohm: NotNegative = 0.0
    upper_emitter_ohm: NotNegative | None = None
    lower_emitter_ohm: NotNegative | None = None
    temperature_c: Celsius = 25.0
    catch_diode: DiodeField = Field(default_factory=lambda: load_catalogue().diode("1N4004"))
    upper_hfe_factor: Factor = 1.0
    lower_hfe_factor: Factor = 1.0
    upper_vbe_shift_v: Shift = 0.0
    lower_vbe_shift_v: Shift = 0.0

    @property
    def upper_emitter(self) -> float:
        """Emitter resistor of the upper half in ohms."""
        return self.emitter_ohm if self.upper_emitter_ohm is None else self.upper_emitter_ohm

    @property
    def lower_emitter(self) -> float:
        """Emitter resistor of the lower half in ohms."""
        return self.emitter_ohm if self.lower_emitter_ohm is None else self.lower_emitter_ohm

    @model_validator(mode="after")
    def _check(self) -> "Output":
        faults = []
        for side, part, polarity in (("upper", self.upper, "npn"), ("lower", self.lower, "pnp")):
            if part.polarity != polarity:
                hint = f"; its complement is {part.complement}" if part.complement else ""
                faults.append(
                    f"{side} is {part.name}, a {part.polarity.upper()}, expected "
                    f"{'an NPN' if polarity == 'npn' else 'a PNP'}{hint}"
                )
        if faults:
            raise ValueError("\n".join(faults))
        return self


def _mirrored(data: object) -> object:
    """Fill in the negative rail of a symmetrical supply."""
    if not isinstance(data, Mapping) or data.get("negative_v") is not None:
        return data
    try:
        mirror = -abs(parse_quantity(data.get("positive_v", 1.0), "V")) or -1.0
    except ValueError:
        mirror = -1.0  # positive_v is refused by itself
    return {**data, "negative_v": mirror}


class _StatedRails(Record):
    """Supply whose rails are given as such; a negative rail left out mirrors the positive."""

    positive_v: Rail
    negative_v: NegativeRail
    decoupling_f: Positive = 100e-6

    _fill = model_validator(mode="before")(staticmethod(_mirrored))

    @property
    def open_positive_v(self) -> float:
        """Positive rail without load, volts."""
        return self.positive_v

    @property
    def open_negative_v(self) -> float:
        """Negative rail without load, volts, with its sign."""
        return self.negative_v


class BenchSupply(_StatedRails):
    """Laboratory supply; ideal where `source_ohm` is zero."""

    kind: Literal["bench"]
    source_ohm: NotNegative = 0.0
    current_limit_a: Positive | None = None


class BatterySupply(_StatedRails):
    """Two batteries, one a rail, each with the internal resistance."""

    kind: Literal["battery"]
    internal_ohm: Positive


class TransformerSupply(Record):
    """Centre-tapped transformer, bridge and a reservoir a rail.

    `winding_v` is the rms voltage of one winding at full load; without load its crest is
    sqrt(2) winding_v (1 + regulation).
    """

    kind: Literal["transformer"]
    winding_v: Rail | None = None
    positive_winding_v: Rail | None = None
    negative_winding_v: Rail | None = None
    winding_ohm: Positive
    regulation: Annotated[Number, Field(ge=0, le=0.6)] = 0.0
    reservoir_f: Positive
    reservoir_esr_ohm: NotNegative = 0.05
    mains_hz: Number = 50.0
    bridge_drop_v: NotNegative = 0.75
    bridge_ohm: NotNegative = 0.03

    @field_validator("mains_hz")
    @classmethod
    def _check_mains(cls, value: float) -> float:
        if value not in (50.0, 60.0):
            raise ValueError(f"found {value:g} Hz, expected 50 or 60")
        return value

    @model_validator(mode="after")
    def _check(self) -> "TransformerSupply":
        if self.winding_v is None and None in (self.positive_winding_v, self.negative_winding_v):
            raise ValueError("winding_v is missing (or positive_winding_v and negative_winding_v)")
        if min(self.open_positive_v, -self.open_negative_v) <= 0.0:
            raise ValueError("bridge_drop_v leaves nothing of the winding's crest")
        return self

    @property
    def positive_winding(self) -> float:
        """Winding of the positive rail, volts rms at full load."""
        return self.positive_winding_v or self.winding_v or 0.0

    @property
    def negative_winding(self) -> float:
        """Winding of the negative rail, volts rms at full load (a magnitude)."""
        return self.negative_winding_v or self.winding_v or 0.0

    @property
    def open_positive_v(self) -> float:
        """Positive rail without load, volts."""
        crest = math.sqrt(2.0) * self.positive_winding * (1.0 + self.regulation)
        return crest - self.bridge_drop_v

    @property
    def open_negative_v(self) -> float:
        """Negative rail without load, volts, with its sign."""
        crest = math.sqrt(2.0) * self.negative_winding * (1.0 + self.regulation)
        return self.bridge_drop_v - crest


Supply = Annotated[BenchSupply | TransformerSupply | BatterySupply, Field(discriminator="kind")]


class Load(Record):
    """Resistor or loudspeaker, with an optional Zobel network across it."""

    ohm: Annotated[Number, Field(gt=0, le=1e6)] | None = None
    part: LoudspeakerField | None = None
    zobel_ohm: Resistor | None = None
    zobel_f: Positive | None = None

    @model_validator(mode="after")
    def _check(self) -> "Load":
        if (self.ohm is None) == (self.part is None):
            found = "neither" if self.ohm is None else "both"
            raise ValueError(f"found {found} of ohm and part, expected exactly one")
        if (self.zobel_ohm is None) != (self.zobel_f is None):
            raise ValueError("give zobel_ohm and zobel_f together, or neither")
        return self

    @property
    def bench_ohm(self) -> float:
        """Resistor that stands for the load on the bench: its rated impedance, ohms."""
        return self.part.rated_ohm if self.part else self.ohm or math.inf

    @property
    def least_ohm(self) -> float:
        """Least resistance the pair can meet, ohms: a loudspeaker's at direct current."""
        return self.part.re_ohm if self.part else self.ohm or math.inf


class Cabinet(Record):
    """Shape of the catalogue, or the path of an impulse response (WAV)."""

    part: CabinetField | None = None
    file: Annotated[str, Field(min_length=1, max_length=4000)] | None = None

    @model_validator(mode="after")
    def _check(self) -> "Cabinet":
        if (self.file is None) == (self.part is None):
            found = "neither" if self.file is None else "both"
            raise ValueError(f"found {found} of part and file, expected exactly one")
        return self


class Measured(Record):
    """Measured static curve in place of the computed halves.

    `file` is a CSV table (see `measured`); after loading its rows stand in `output_v` and in
    `drive_v` (the op-amp's output) or `input_v` (the closed loop's input), which may also be
    written in the design itself. Rails and load are those of the measurement.
    """

    file: Annotated[str, Field(min_length=1, max_length=4000)] | None = None
    drive_v: Volts | None = None
    input_v: Volts | None = None
    output_v: Volts = ()
    positive_v: Rail
    negative_v: NegativeRail
    load_ohm: Annotated[Number, Field(gt=0, le=1e6)]
    headroom_v: Annotated[Number, Field(ge=0, le=100)] | None = None
    current_gain: Annotated[Number, Field(ge=1, le=1e6)] | None = None
    idle_current_a: Annotated[Number, Field(ge=0, le=10)] | None = None

    _fill = model_validator(mode="before")(staticmethod(_mirrored))

    @model_validator(mode="before")
    @classmethod
    def _read(cls, data: object) -> object:
        """Put a file's rows in the place of its path, so that the design can travel."""
        if not isinstance(data, Mapping) or not isinstance(data.get("file"), str):
            return data
        for key in ("drive_v", "input_v", "output_v"):
            if data.get(key):
                raise ValueError(f"found both file and {key}, expected one of them")
        table = read_table(Path(data["file"]))
        rows = {f"{table.kind}_v": table.driven_v, "output_v": table.output_v}
        return {**data, "file": None, **rows}

    @property
    def table(self) -> MeasuredTable:
        """The rows, judged and ascending."""
        if self.drive_v is not None:
            return judge_table("drive", self.drive_v, self.output_v)
        return judge_table("input", self.input_v or (), self.output_v)

    def headroom_for(self, side: Side) -> float:
        """Rail minus output at the last row of a half, volts."""
        rows = self.table.output_v
        return self.positive_v - rows[-1] if side == "upper" else rows[0] - self.negative_v

    @model_validator(mode="after")
    def _check(self) -> "Measured":
        if (self.drive_v is None) == (self.input_v is None):
            found = "none of" if self.drive_v is None else "both"
            raise ValueError(f"found {found} drive_v and input_v, expected a file or one of them")
        for side in SIDES:
            key = "positive_v" if side == "upper" else "negative_v"
            left = self.headroom_for(side)
            rail = abs(self.positive_v if side == "upper" else self.negative_v)
            if left <= 0.0:
                raise ValueError(
                    f"{key} is {getattr(self, key):g} V, but the table's output reaches "
                    f"{rail - left:.4g} V towards it; expected the rail during the measurement, "
                    "beyond all outputs"
                )
            if self.headroom_v is not None and self.headroom_v >= left:
                raise ValueError(
                    f"headroom_v is {self.headroom_v:g} V, but the table's output comes within "
                    f"{left:.4g} V of {key}; expected less"
                )
        return self


class Design(Record):
    """An output stage, its input, front end, supply, load and cabinet, every value resolved."""

    title: Annotated[str, Field(min_length=1, max_length=200)]
    notes: Annotated[str, Field(max_length=20000)] = ""
    input: Input = Input()
    front: Front | None = None
    driver: Driver
    bias: Bias = Bias()
    output: Output
    supply: Supply
    load: Load
    cabinet: Cabinet | None = None
    measured: Measured | None = None

    def part_for(self, side: Side) -> Transistor:
        """Output transistor of a half."""
        return self.output.upper if side == "upper" else self.output.lower

    def emitter_for(self, side: Side) -> float:
        """Emitter resistor of a half, ohms."""
        return self.output.upper_emitter if side == "upper" else self.output.lower_emitter

    def rail_for(self, side: Side) -> float:
        """Rail of a half without load, volts, as a magnitude."""
        return self.supply.open_positive_v if side == "upper" else -self.supply.open_negative_v
