"""Parts: their models and laws, the shipped part files, and a user's own part file.

A part file is TOML with the tables [transistors."NAME"], [diodes."NAME"], [opamps."NAME"],
[loudspeakers."NAME"] and [cabinets."NAME"]. Keys carry SI units as suffixes; numbers may be
written by IEC 60062 ("4k7"). ``like = "OTHER"`` starts from another entry. Every parameter is
meant at 25 °C; transistor laws have the signs of an NPN.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Any, Literal, NamedTuple, TypeVar

from pydantic import BeforeValidator, Field, ValidationError, ValidationInfo, model_validator

from tonesim.errors import DesignError
from tonesim.record import (
    NotNegative,
    Number,
    Positive,
    Record,
    nearest,
    problems,
    read_toml,
    shown,
)
from tonesim.units import BOLTZMANN, ELEMENTARY_CHARGE, T0, kelvin, thermal_voltage

_PARTS = Path(__file__).parent / "parts"


def _nan_is_open(value: object) -> object:
    return None if isinstance(value, float) and math.isnan(value) else value


Bound = Annotated[Positive | None, BeforeValidator(_nan_is_open)]


class Part(Record):
    """What every part has."""

    name: Annotated[str, Field(min_length=1, max_length=100)]
    source: Annotated[str, Field(min_length=1)]


class Transistor(Part):
    """Bipolar transistor, single or Darlington.

    With V' the voltage inside the series resistances (see `conduction`):
    IC = is_a (exp(V'/Vt) - 1), IB = IC (1 + (IC/knee_a)^knee_exponent) / hfe.
    In a Darlington the plain keys belong to the output device, the ``first_`` keys to the one
    that drives it, `first_base_emitter_ohm` and `base_emitter_ohm` are the resistors across
    their junctions.
    """

    polarity: Literal["npn", "pnp"]
    kind: Literal["single", "darlington"]
    is_a: Positive
    hfe: Positive
    knee_a: Positive
    knee_exponent: Positive = 1.0
    emitter_ohm: NotNegative
    base_ohm: NotNegative
    collector_ohm: NotNegative
    reverse_hfe: Positive = 5.0
    first_is_a: Positive | None = None
    first_hfe: Positive | None = None
    first_knee_a: Positive | None = None
    first_knee_exponent: Positive = 1.0
    first_base_emitter_ohm: Positive | None = None
    base_emitter_ohm: Positive | None = None
    complement: str | None = None
    ic_max_a: Positive
    ic_peak_a: Positive
    vceo_v: Positive
    power_w: Positive
    rth_jc_k_per_w: Positive
    tj_max_c: Positive
    ft_hz: Positive | None = None
    package: str
    typical_vbe: tuple[tuple[Positive, Positive], ...] = ()
    hfe_windows: tuple[tuple[Positive, Bound, Bound], ...] = ()
    vbe_max: tuple[Positive, Positive] | None = None
    vce_sat_max: tuple[Positive, Positive, Positive] | None = None
    hfe_per_k: Number = 0.006
    eg_ev: Positive = 1.12
    xti: Number = 3.0

    @model_validator(mode="after")
    def _check_kind(self) -> "Transistor":
        keys = (
            "first_is_a",
            "first_hfe",
            "first_knee_a",
            "first_base_emitter_ohm",
            "base_emitter_ohm",
        )
        given = [key for key in keys if getattr(self, key) is not None]
        if self.kind == "darlington" and len(given) < len(keys):
            absent = ", ".join(key for key in keys if key not in given)
            raise ValueError(f"a Darlington needs {absent} as well")
        if self.kind == "single" and given:
            raise ValueError(f"{given[0]} belongs to a Darlington, this is a single transistor")
        return self


class Diode(Part):
    """Junction of a bias chain or catch diode: V = n Vt ln(I/is_a + 1) + I series_ohm.

    `slope_v_per_k`, where given, replaces the temperature law; `leak_ohm` lies across it.
    """

    technology: Literal["silicon", "schottky", "germanium", "led"]
    n: Annotated[Number, Field(ge=0.5, le=5)]
    is_a: Positive
    series_ohm: NotNegative
    eg_ev: Positive
    xti: Number
    slope_v_per_k: Number | None = None
    leak_ohm: Positive | None = None
    i_max_a: Positive | None = None
    typical: tuple[tuple[Positive, Positive], ...] = ()


class OpAmp(Part):
    """Op-amp as a driver; swings are signed peaks on rails of ±at_rail_v."""

    gain_bandwidth_hz: Positive
    dc_gain: Annotated[Number, Field(gt=100)]
    slew_v_per_s: Positive
    at_rail_v: Positive = 15.0
    swing_10k_positive_v: Positive
    swing_10k_negative_v: Annotated[Number, Field(lt=0)]
    swing_2k_positive_v: Positive
    swing_2k_negative_v: Annotated[Number, Field(lt=0)]
    source_limit_a: Positive
    sink_limit_a: Positive
    offset_v: NotNegative
    offset_max_v: NotNegative
    bias_a: NotNegative
    supply_max_v: Positive
    supply_min_v: Positive
    quiescent_a: NotNegative
    phase_margin_deg: Annotated[Number, Field(gt=0, lt=90)] | None = None
    min_stable_gain: Annotated[Number, Field(ge=1)] = 1.0

    @model_validator(mode="after")
    def _check_swing(self) -> "OpAmp":
        sides = (
            (self.swing_2k_positive_v, self.swing_10k_positive_v, "positive"),
            (-self.swing_2k_negative_v, -self.swing_10k_negative_v, "negative"),
        )
        for loaded, light, side in sides:
            if not loaded <= light <= self.at_rail_v:
                raise ValueError(
                    f"the {side} swing must not grow with load nor pass the rail: found "
                    f"{loaded:g} V into 2 kΩ, {light:g} V into 10 kΩ, rail {self.at_rail_v:g} V"
                )
        return self


class Loudspeaker(Part):
    """Electrical side of a loudspeaker: voice coil and motional branch."""

    rated_ohm: Positive
    re_ohm: Positive
    le_h: Positive
    fs_hz: Positive
    qms: Positive
    qes: Positive
    semi_inductance_k: Positive
    semi_inductance_exponent: Annotated[Number, Field(gt=0, le=1)]
    l1_h: Positive
    l2_h: Positive
    r2_ohm: Positive
    l3_h: Positive
    r3_ohm: Positive

    @property
    def res_ohm(self) -> float:
        """Motional resistance in ohms, Re Qms / Qes."""
        return self.re_ohm * self.qms / self.qes

    @property
    def cmes_f(self) -> float:
        """Motional capacitance (moving mass) in farads, Qes / (2 pi fs Re)."""
        return self.qes / (2.0 * math.pi * self.fs_hz * self.re_ohm)

    @property
    def lces_h(self) -> float:
        """Motional inductance (compliance) in henries, Re / (2 pi fs Qes)."""
        return self.re_ohm / (2.0 * math.pi * self.fs_hz * self.qes)

    @property
    def qts(self) -> float:
        """Total quality factor, Qms Qes / (Qms + Qes)."""
        return self.qms * self.qes / (self.qms + self.qes)


class Corner(Record):
    """Second-order low-pass or high-pass section."""

    hz: Positive
    q: Positive


class Peak(Record):
    """Second-order peak; its gain is 0 dB far from it."""

    hz: Positive
    q: Positive
    gain_db: Number


class CabinetShape(Part):
    """Acoustic frequency response as a chain of analog sections, 0 dB at 1 kHz."""

    highpass: tuple[Corner, ...] = ()
    peaks: tuple[Peak, ...] = ()
    lowpass: tuple[Corner, ...] = ()
    checked: tuple[tuple[Positive, Number], ...] = ()


def saturation_current(
    is_a: float, n: float, eg_ev: float, xti: float, temperature_c: float
) -> float:
    """Saturation current in amperes at a temperature in degrees Celsius.

    Is(T) = Is(T0) (T/T0)^(xti/n) exp(Eg q/(n k) (1/T0 - 1/T)), T0 = 298.15 K
    (S. M. Sze, "Physics of Semiconductor Devices"; the form common to circuit simulators).
    """
    t = kelvin(temperature_c)
    exponent = eg_ev * ELEMENTARY_CHARGE / (n * BOLTZMANN) * (1.0 / T0 - 1.0 / t)
    return float(is_a * (t / T0) ** (xti / n) * math.exp(exponent))


def diode_drop(diode: Diode, current_a: float, temperature_c: float = 25.0) -> float:
    """Forward voltage in volts of a diode at a current in amperes; its leak is left out."""
    if diode.slope_v_per_k is None:
        i_s = saturation_current(diode.is_a, diode.n, diode.eg_ev, diode.xti, temperature_c)
        shift, v_t = 0.0, thermal_voltage(temperature_c)
    else:
        i_s, v_t = diode.is_a, thermal_voltage(25.0)
        shift = diode.slope_v_per_k * (temperature_c - 25.0)
    return diode.n * v_t * math.log1p(current_a / i_s) + current_a * diode.series_ohm + shift


class Conduction(NamedTuple):
    """One point of a transistor's forward-active law; magnitudes."""

    vbe_v: float
    base_a: float
    collector_a: float


def conduction(part: Transistor, device_a: float, temperature_c: float = 25.0) -> Conduction:
    """Forward-active point of a transistor, explicit in its output device's current.

    Parameters
    ----------
    part : Transistor
    device_a : float
        Collector current of the (output) device in amperes; all of the collector current in
        a single transistor, all but the first device's in a Darlington.
    temperature_c : float

    Notes
    -----
    VBE = Vt ln(IC/Is + 1) + IE Re + IB Rb. In a Darlington the first device carries
    IE1 = IB2 + (VBE2 + IE2 Re2)/R2 - VBE1/R1 and the base IB1 + VBE1/R1.
    """
    v_t = thermal_voltage(temperature_c)
    warmth = max(1.0 + part.hfe_per_k * (temperature_c - 25.0), 0.1)
    i_s = saturation_current(part.is_a, 1.0, part.eg_ev, part.xti, temperature_c)
    base = device_a * (1.0 + (device_a / part.knee_a) ** part.knee_exponent) / (part.hfe * warmth)
    outer = (device_a + base) * part.emitter_ohm
    vbe = v_t * math.log1p(device_a / i_s) + outer + base * part.base_ohm
    if part.kind == "single":
        return Conduction(vbe, base, device_a)
    r_1, r_2 = part.first_base_emitter_ohm or math.inf, part.base_emitter_ohm or math.inf
    first_is, first_hfe = part.first_is_a or math.inf, (part.first_hfe or math.inf) * warmth
    knee = part.first_knee_a or math.inf
    i_s = saturation_current(first_is, 1.0, part.eg_ev, part.xti, temperature_c)
    wanted = base + vbe / r_2
    collector = emitter = wanted
    vbe_first = 0.0
    for _ in range(30):  # contracts by about 1/hfe a round
        # R1 ends at the second base too and brings a part of what it wants.
        emitter = max(wanted - vbe_first / r_1, 0.0)
        collector = emitter / (
            1.0 + (1.0 + (collector / knee) ** part.first_knee_exponent) / first_hfe
        )
        vbe_first = v_t * math.log1p(collector / i_s)
    return Conduction(vbe + vbe_first, emitter - collector + vbe_first / r_1, device_a + collector)


P = TypeVar("P", bound=Part)
_MODELS: Mapping[str, type[Part]] = {
    "transistors": Transistor,
    "diodes": Diode,
    "opamps": OpAmp,
    "loudspeakers": Loudspeaker,
    "cabinets": CabinetShape,
}
_WORDS = {
    "transistors": "transistor",
    "diodes": "diode",
    "opamps": "op-amp",
    "loudspeakers": "loudspeaker",
    "cabinets": "cabinet",
}


@dataclass(frozen=True)
class Catalogue:
    """All parts known, by kind and name; names are found whatever their capitals."""

    transistors: Mapping[str, Transistor] = field(default_factory=dict)
    diodes: Mapping[str, Diode] = field(default_factory=dict)
    opamps: Mapping[str, OpAmp] = field(default_factory=dict)
    loudspeakers: Mapping[str, Loudspeaker] = field(default_factory=dict)
    cabinets: Mapping[str, CabinetShape] = field(default_factory=dict)

    def transistor(self, name: str) -> Transistor:
        """Transistor of that name; DesignError with the nearest names if there is none."""
        return _look_up(self.transistors, "transistors", name)

    def diode(self, name: str) -> Diode:
        """Diode of that name; DesignError with the nearest names if there is none."""
        return _look_up(self.diodes, "diodes", name)

    def opamp(self, name: str) -> OpAmp:
        """Op-amp of that name; DesignError with the nearest names if there is none."""
        return _look_up(self.opamps, "opamps", name)

    def loudspeaker(self, name: str) -> Loudspeaker:
        """Loudspeaker of that name; DesignError with the nearest names if there is none."""
        return _look_up(self.loudspeakers, "loudspeakers", name)

    def cabinet(self, name: str) -> CabinetShape:
        """Cabinet of that name; DesignError with the nearest names if there is none."""
        return _look_up(self.cabinets, "cabinets", name)

    def part(self, kind: str, name: str) -> Part:
        """Part of a kind ("transistors", "diodes", ...) and name."""
        parts: Mapping[str, Part] = getattr(self, kind)
        return _look_up(parts, kind, name)


def _look_up(parts: Mapping[str, P], kind: str, name: str) -> P:
    if name in parts:
        return parts[name]
    for known, part in parts.items():
        if known.lower() == name.strip().lower():
            return part
    close = nearest(name, parts)
    offer = f"nearest known: {', '.join(close)}" if close else f"known: {', '.join(parts)}"
    raise DesignError(f"no {_WORDS[kind]} is called {shown(name)}, {offer}")


def expand_part(kind: str, table: Mapping[str, Any], catalogue: Catalogue) -> dict[str, Any]:
    """Complete a part written as a table in a design: ``like``, name and source.

    Raises
    ------
    DesignError
        If ``like`` names no known part.
    """
    changes = dict(table)
    origin = changes.pop("like", None)
    if origin is None:
        return {"name": f"own {_WORDS[kind]}", "source": "given in the design file", **changes}
    if not isinstance(origin, str):
        raise DesignError(f"like is {shown(origin)}, expected the name of a part")
    base = catalogue.part(kind, origin).model_dump()
    if not changes:
        return base
    base["source"] = f"{base['source']} Changed in the design file: {', '.join(changes)}."
    base["name"] = f"{base['name']}, changed"
    return {**base, **changes}


def resolve_part(kind: str) -> Callable[[object, ValidationInfo], object]:
    """Make the validator that turns a part's name or table into what its model reads.

    The catalogue is the validation context's "catalogue", else the shipped one.
    """

    def resolve(value: object, info: ValidationInfo) -> object:
        catalogue = (info.context or {}).get("catalogue") or load_catalogue()
        try:
            if isinstance(value, str):
                return catalogue.part(kind, value)
            if isinstance(value, Mapping):
                return expand_part(kind, value, catalogue)
        except DesignError as unknown:
            raise ValueError(str(unknown)) from None
        if isinstance(value, Part):
            return value
        raise ValueError(f"found {shown(value)}, expected the name of a part or a table")

    return resolve


def load_catalogue(extra: Path | None = None) -> Catalogue:
    """Load the shipped parts, and a user's own part file on top of them.

    Parameters
    ----------
    extra : Path, optional
        A part file; its entries may replace shipped ones and start from them by ``like``.

    Raises
    ------
    DesignError
        If the file cannot be used; the sentence names file, part and key.
    """
    if extra is None:
        return _shipped()
    return _extended(_shipped(), read_toml(Path(extra)), str(extra))


@lru_cache(maxsize=1)
def _shipped() -> Catalogue:
    catalogue = Catalogue()
    for kind in _MODELS:
        path = _PARTS / f"{kind}.toml"
        catalogue = _extended(catalogue, read_toml(path), path.name)
    return catalogue


def _extended(catalogue: Catalogue, data: Mapping[str, Any], file: str) -> Catalogue:
    """Catalogue with the entries of a part file added."""
    found: dict[str, dict[str, Part]] = {kind: dict(getattr(catalogue, kind)) for kind in _MODELS}
    faults = []
    for kind, entries in data.items():
        if kind not in _MODELS:
            faults.append(f"{kind} is no kind of part, expected {', '.join(_MODELS)}")
        elif not isinstance(entries, Mapping):
            faults.append(f'{kind} is {shown(entries)}, expected tables [{kind}."NAME"]')
        else:
            for name in entries:
                try:
                    table = _written_out(kind, name, entries, catalogue)
                    found[kind][name] = _MODELS[kind].model_validate(table)
                except DesignError as fault:
                    faults.append(str(fault))
                except ValidationError as fault:
                    faults += problems(fault, _MODELS[kind], f"{kind}.{name}")
    if faults:
        raise DesignError("\n".join(f"{file}: {fault}" for fault in faults))
    return Catalogue(**{kind: MappingProxyType(parts) for kind, parts in found.items()})  # type: ignore[arg-type]


def _written_out(
    kind: str, name: str, entries: Mapping[str, Any], catalogue: Catalogue
) -> dict[str, Any]:
    """Follow ``like`` within the file first, then into the parts known before it."""
    layers: list[Mapping[str, Any]] = []
    seen: list[str] = []
    at = name
    while at in entries and at not in seen:
        entry = entries[at]
        if not isinstance(entry, Mapping):
            raise DesignError(f"{kind}.{at} is {shown(entry)}, expected a table")
        layers.append(entry)
        seen.append(at)
        if "like" not in entry:
            break
        at = entry["like"]
        if not isinstance(at, str):
            raise DesignError(f"{kind}.{seen[-1]}.like is {shown(at)}, expected a part's name")
    changes: dict[str, Any] = {}
    for layer in reversed(layers):
        changes.update({key: value for key, value in layer.items() if key != "like"})
    if "like" not in layers[-1]:
        return {**changes, "name": name}
    try:
        base = catalogue.part(kind, at).model_dump()
    except DesignError as fault:
        raise DesignError(f"{kind}.{seen[-1]}.like: {fault}") from None
    base["source"] += f" Changed in a part file: {', '.join(changes) or 'the name'}."
    return {**base, **changes, "name": name}
