"""Designs: a TOML file, or a shipped preset, to a frozen and cross-checked `Design`.

Keys carry SI units as suffixes; numbers may be written by IEC 60062 ("4k7", "0R22", "2200u").
A part is a name of the catalogue or a table of its own; after loading it is the part's model,
so that a design holds every value its sound depends on. Voltages are against ground, the
negative rail's with its sign; in a half, chain and feed belong between base and drive node
and between base and rail.
"""

import hashlib
import json
import math
import tomllib
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, Literal, NamedTuple

from pydantic import BeforeValidator, Field, ValidationError, field_validator, model_validator

from tonesim.catalogue import (
    CabinetShape,
    Catalogue,
    Diode,
    Loudspeaker,
    NotNegative,
    Number,
    OpAmp,
    Part,
    Positive,
    Record,
    Transistor,
    conduction,
    diode_drop,
    load_catalogue,
    nearest,
    problems,
    read_toml,
    resolve_part,
)
from tonesim.errors import DesignError
from tonesim.units import format_quantity, parse_quantity

Side = Literal["upper", "lower"]
SIDES: tuple[Side, Side] = ("upper", "lower")

_HERE = Path(__file__).parent
_LEAST_GAIN, _MOST_GAIN = 1.05, 1000.0
_MOST_RATIO = 8.0  # of a multiplier: it would hold about 5 V in one half
# Junction to air without a heatsink, K/W (common practice, no source).
_FREE_AIR = {"TO-92": 200, "TO-18": 300, "TO-126": 100, "TO-220": 65, "TO-3": 35, "TO-264": 35}
_FREE_AIR_ELSE = 40
_WARM_ROOM_C = 40.0
_MAINS_TOLERANCE = 1.1
# Besides every key called part: where a name may be opened to change a value inside it.
_NAMED_PARTS = {("output", "upper"), ("output", "lower"), ("output", "catch_diode")}
# Keys that stand for one another: setting one takes the other away.
_RIVALS = {
    ("load", "ohm"): "part",
    ("load", "part"): "ohm",
    ("cabinet", "part"): "file",
    ("cabinet", "file"): "part",
}


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


class Input(Record):
    """What a recording's 0 dBFS stands for, and clean gain before the op-amp.

    `full_scale_v` is the peak voltage at the jack.
    """

    full_scale_v: Annotated[Number, Field(gt=0, le=100)] = 4.4
    gain_db: Annotated[Number, Field(ge=-80, le=80)] = 0.0


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


class BenchSupply(Record):
    """Laboratory supply; ideal where `source_ohm` is zero."""

    kind: Literal["bench"]
    positive_v: Rail
    negative_v: NegativeRail
    source_ohm: NotNegative = 0.0
    current_limit_a: Positive | None = None
    decoupling_f: Positive = 100e-6

    _fill = model_validator(mode="before")(staticmethod(_mirrored))

    @property
    def open_positive_v(self) -> float:
        """Positive rail without load, volts."""
        return self.positive_v

    @property
    def negative(self) -> float:
        """Negative rail without load, volts, with its sign."""
        return self.negative_v

    @property
    def open_negative_v(self) -> float:
        """Negative rail without load, volts, with its sign."""
        return self.negative_v


class BatterySupply(Record):
    """Two batteries, one a rail, each with the internal resistance."""

    kind: Literal["battery"]
    positive_v: Rail
    negative_v: NegativeRail
    internal_ohm: Positive
    decoupling_f: Positive = 100e-6

    _fill = model_validator(mode="before")(staticmethod(_mirrored))

    @property
    def open_positive_v(self) -> float:
        """Positive rail without load, volts."""
        return self.positive_v

    @property
    def negative(self) -> float:
        """Negative rail without load, volts, with its sign."""
        return self.negative_v

    @property
    def open_negative_v(self) -> float:
        """Negative rail without load, volts, with its sign."""
        return self.negative_v


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


class Design(Record):
    """One output stage with its input, supply, load and cabinet, every value resolved."""

    title: Annotated[str, Field(min_length=1, max_length=200)]
    notes: Annotated[str, Field(max_length=20000)] = ""
    input: Input = Input()
    driver: Driver
    bias: Bias = Bias()
    output: Output
    supply: Supply
    load: Load
    cabinet: Cabinet | None = None

    @model_validator(mode="after")
    def _check(self) -> "Design":
        faults = [fault for check in _CHECKS for fault in check(self)]
        if faults:
            raise ValueError("\n".join(faults))
        return self

    def part_for(self, side: Side) -> Transistor:
        """Output transistor of a half."""
        return self.output.upper if side == "upper" else self.output.lower

    def emitter_for(self, side: Side) -> float:
        """Emitter resistor of a half, ohms."""
        return self.output.upper_emitter if side == "upper" else self.output.lower_emitter

    def rail_for(self, side: Side) -> float:
        """Rail of a half without load, volts, as a magnitude."""
        return self.supply.open_positive_v if side == "upper" else -self.supply.open_negative_v

    def cautions(self) -> list[str]:
        """Say what can be built but deserves doubt, one sentence each; estimates, not results."""
        return [caution for look in _CAUTIONS for caution in look(self)]

    def replace(self, *, catalogue: Catalogue | None = None, **changes: Any) -> "Design":
        """Return a changed copy, checked again like a file.

        Parameters
        ----------
        catalogue : Catalogue, optional
            Where names of parts are looked up; the shipped one by default.
        **changes
            Sections as mappings, ``bias={"feed_ohm": "4k7"}``, or dotted keys,
            ``**{"bias.feed_ohm": 4700}``. Only what is named changes.

        Raises
        ------
        DesignError
        """
        data = self.model_dump()
        for key, value in changes.items():
            _assign(data, key, value)
        return build_design(data, "the changed design", catalogue)


def build_design(
    data: Mapping[str, Any], where: str = "design", catalogue: Catalogue | None = None
) -> Design:
    """Validate the tables of a design.

    Parameters
    ----------
    data : mapping
        As a TOML reader returns it; parts may be names, tables or models.
    where : str
        What the sentences name as the place, usually the file.
    catalogue : Catalogue, optional

    Raises
    ------
    DesignError
        One sentence a problem, the first problem first, one a line.
    """
    context = {"catalogue": catalogue or load_catalogue()}
    try:
        return Design.model_validate(dict(data), context=context)
    except ValidationError as error:
        faults = problems(error, Design)
    raise DesignError("\n".join(f"{where}: {fault}" for fault in faults))


def load_design(
    source: Path | str, overrides: Sequence[str] = (), catalogue: Catalogue | None = None
) -> Design:
    """Load a design file or a shipped preset.

    Parameters
    ----------
    source : Path or str
        A path, or the name of a preset.
    overrides : sequence of str
        "KEY=VALUE" with a dotted key; VALUE is read as TOML if it is TOML, else as a text
        ("bias.feed_ohm=4k7", "bias.upper=1N4148,BAT85"). An empty VALUE takes the key out of
        the file; a TOML table is merged into the table it meets, but for a supply of another
        kind. A key inside a named part ("output.upper.hfe=60") changes that part.
    catalogue : Catalogue, optional

    Raises
    ------
    DesignError
    """
    path = _find(source)
    data = read_toml(path)
    _place_response(data, path.resolve().parent, str(path))
    where = str(path)
    if overrides:
        for override in overrides:
            _override(data, override)
        where += " as changed"
        _place_response(data, Path.cwd(), where)
    return build_design(data, where, catalogue)


def presets_folder() -> Path:
    """Folder of the shipped presets, in an installed package or in a checkout."""
    return _shipped_folder("presets")


def demo_audio_folder() -> Path:
    """Folder of the shipped recordings, in an installed package or in a checkout."""
    return _shipped_folder("demo_audio")


def list_presets() -> list[str]:
    """Names of the shipped presets, in alphabetical order."""
    return sorted(path.stem for path in presets_folder().glob("*.toml"))


def _shipped_folder(name: str) -> Path:
    inside = _HERE / name
    return inside if inside.is_dir() else _HERE.parent / name


def _find(source: Path | str) -> Path:
    text = str(source)
    if text in list_presets():
        return presets_folder() / f"{text}.toml"
    path = Path(source)
    try:
        known = path.exists()
    except (OSError, ValueError):
        known = False
    if known:
        return path
    presets = list_presets()
    close = nearest(path.stem, presets)
    offer = f"nearest presets: {', '.join(close)}" if close else f"presets: {', '.join(presets)}"
    shown = text if len(text) <= 200 else text[:197] + "..."
    raise DesignError(f"{shown!r} is neither a file nor a preset; {offer}")


def _place_response(data: Mapping[str, Any], folder: Path, where: str) -> None:
    """Make the path of an impulse response absolute, so that the design can travel."""
    cabinet = data.get("cabinet")
    if not isinstance(cabinet, dict) or not isinstance(cabinet.get("file"), str):
        return
    try:
        path = (folder / cabinet["file"]).resolve()
        found = path.is_file()
    except (OSError, ValueError):
        path, found = folder / "?", False
    if not found:
        raise DesignError(f"{where}: cabinet.file is {cabinet['file']!r}, no such file in {folder}")
    cabinet["file"] = str(path)


def _override(data: dict[str, Any], text: str) -> None:
    key, equals, value = text.partition("=")
    key = key.strip()
    if not equals or not all(key.split(".")):
        raise DesignError(f"{text!r} is no change, expected KEY=VALUE as in bias.feed_ohm=4k7")
    _assign(data, key, _override_value(value.strip()))


def _override_value(text: str) -> object:
    """Value of an override; None takes the key away."""
    if text == "":
        return None
    try:
        read = tomllib.loads(f"value = {text}")
    except (ValueError, RecursionError):
        return text
    value = read["value"]
    plain = isinstance(value, str | int | float | list | dict)
    return value if plain and len(read) == 1 else text


def _assign(data: dict[str, Any], key: str, value: object) -> None:
    """Set a dotted key in nested tables; a mapping is merged into the table it meets."""
    *path, last = key.split(".")
    table = data
    for depth, step in enumerate(path):
        inner = table.get(step)
        if isinstance(inner, str) and (step == "part" or (path[0], step) in _NAMED_PARTS):
            inner = {"like": inner}
        elif inner is None:
            inner = {}
        elif isinstance(inner, Part | Record):
            inner = inner.model_dump()
        elif not isinstance(inner, dict):
            raise DesignError(f"{key} cannot be set, {'.'.join(path[: depth + 1])} is no table")
        table[step] = inner
        table = inner
        _mark_changed(table, ".".join([*path[depth + 1 :], last]))
    met = table.get(last)
    if isinstance(value, Mapping) and isinstance(met, dict) and not _is_other_kind(met, value):
        for inner_key, inner_value in value.items():
            _assign(data, f"{key}.{inner_key}", inner_value)
        return
    rival = _RIVALS.get((path[-1], last)) if path else None
    if rival and value is not None:
        table.pop(rival, None)
    if value is None:
        table.pop(last, None)
    else:
        table[last] = value


def _is_other_kind(met: Mapping[str, Any], value: Mapping[str, Any]) -> bool:
    """Whether a table is meant to stand in another's place, not to be merged into it."""
    return (
        "like" in value or "name" in value or value.get("kind", met.get("kind")) != met.get("kind")
    )


def _mark_changed(table: dict[str, Any], key: str) -> None:
    """Let a part that is written out say that it is no longer the catalogue's."""
    if "name" in table and "source" in table and not str(table["name"]).endswith(", changed"):
        table["name"] = f"{table['name']}, changed"
        table["source"] = f"{table['source']} Changed in the design: {key}."


def design_key(design: Design) -> str:
    """SHA-256, in hexadecimal, of everything the sound depends on.

    Title and notes do not count; an impulse response counts by its bytes, not by its path.

    Raises
    ------
    DesignError
        If the impulse response cannot be read.
    """
    data = design.model_dump(mode="json", exclude={"title", "notes"})
    if design.cabinet and design.cabinet.file:
        try:
            content = Path(design.cabinet.file).read_bytes()
        except OSError as failure:
            raise DesignError(
                f"cabinet.file is {design.cabinet.file!r}, it cannot be read: {failure.strerror}"
            ) from None
        data["cabinet"]["file"] = hashlib.sha256(content).hexdigest()
    text = json.dumps(data, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode()).hexdigest()


def design_to_toml(design: Design) -> str:
    """Write a design as a TOML text that loads to an equal design.

    Parts that equal the shipped ones are written by name, others as tables.
    """
    lines = [f"title = {_toml(design.title)}"]
    if design.notes:
        lines.append(f"notes = {_toml(design.notes)}")
    for key in type(design).model_fields:
        section = getattr(design, key)
        if isinstance(section, Record):
            lines += ["", *_toml_table(key, section)]
    return "\n".join(lines) + "\n"


def _toml_table(path: str, record: Record) -> list[str]:
    lines, tables = [f"[{path}]"], []
    for key in type(record).model_fields:
        value = getattr(record, key)
        name = _shipped_name(value)
        if name is not None:
            lines.append(f"{key} = {_toml(name)}")
        elif isinstance(value, Record):
            tables += ["", *_toml_table(f"{path}.{key}", value)]
        elif value is not None:
            lines.append(f"{key} = {_toml(value)}")
    return lines + tables


def _shipped_name(value: object) -> str | None:
    """Name of a part that the shipped catalogue holds unchanged."""
    catalogue = load_catalogue()
    kinds: dict[type, Mapping[str, Part]] = {
        Transistor: catalogue.transistors,
        Diode: catalogue.diodes,
        OpAmp: catalogue.opamps,
        Loudspeaker: catalogue.loudspeakers,
        CabinetShape: catalogue.cabinets,
    }
    if isinstance(value, Part) and kinds[type(value)].get(value.name) == value:
        return value.name
    return None


def _toml(value: object) -> str:
    if isinstance(value, str):
        # JSON's escapes are TOML's, but for DEL, which TOML wants escaped.
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if isinstance(value, tuple):
        return f"[{', '.join(_toml(item) for item in value)}]"
    if isinstance(value, Record):
        name = _shipped_name(value)
        if name is not None:
            return _toml(name)
        pairs = [(key, getattr(value, key)) for key in type(value).model_fields]
        return f"{{ {', '.join(f'{k} = {_toml(v)}' for k, v in pairs if v is not None)} }}"
    return "nan" if value is None else repr(value)


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


_CHECKS: tuple[Callable[[Design], list[str]], ...] = (
    _check_driver_supply,
    _check_breakdown,
    _check_peak_current,
    _check_idle,
)


def _doubt_idle(design: Design) -> list[str]:
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


def _current_gain(part: Transistor, current_a: float, temperature_c: float) -> float:
    """Find the current gain at a collector current, by bisection on the output device's share."""
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
            gain = factor * _current_gain(part, current, 25.0)
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
    doubts = []
    factors = (design.output.upper_hfe_factor, design.output.lower_hfe_factor)
    limits = (design.driver.part.source_limit_a, design.driver.part.sink_limit_a)
    for side, other, factor, limit in zip(SIDES, SIDES[::-1], factors, limits, strict=True):
        part, wanted = design.part_for(side), 0.6 * design.rail_for(side)
        current = wanted / design.load.bench_ohm
        base = current / (factor * _current_gain(part, current, 25.0))
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


_CAUTIONS: tuple[Callable[[Design], list[str]], ...] = (
    _doubt_idle,
    _doubt_gain_windows,
    _doubt_driver,
    _doubt_base_current,
    _doubt_peak_current,
    _doubt_multiplier,
)
