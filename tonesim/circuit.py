"""From a design to bare numbers: names, units and files end here.

`lower` turns a checked ``Design`` into the kernel's parameter tuples; nothing else leaves this
module. Equations of the load: Thiele-Small equivalent circuit (Small, J. Audio Eng. Soc. 20(5),
1972) with a two-section ladder for the semi-inductance (Leach, J. Audio Eng. Soc. 50(6), 2002).
"""

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from tonesim.catalogue import (
    Diode,
    Loudspeaker,
    OpAmp,
    Transistor,
    conduction,
    saturation_current,
)
from tonesim.design import (
    BatterySupply,
    BenchSupply,
    Design,
    Multiplier,
    Side,
    TransformerSupply,
)
from tonesim.kernel.devices import BipolarParams
from tonesim.kernel.driver import BLEND_V, DriverParams
from tonesim.kernel.half import CHAIN_DROPS, CHAIN_MULTIPLIER, CHAIN_NONE, HalfParams
from tonesim.kernel.load import LoadParams
from tonesim.kernel.measured import MeasuredParams
from tonesim.kernel.rails import RECTIFIED, RESISTIVE, STIFF, RailParams
from tonesim.staticlaw import measured_halves
from tonesim.units import T0, ZERO_CELSIUS, thermal_voltage

Matrix = npt.NDArray[np.float64]

REFERENCE_C = T0 - ZERO_CELSIUS  # of all part parameters
NO_LIMIT = 1e9  # stands for "no current limit" [A]
_DROP_LEAK_OHM = 1e9  # a junction without a stated leak
_LEAST_OUTPUT_OHM = 30.0  # open-loop output resistance of any op-amp
_JUNCTION_V = 0.7  # a base-emitter junction at the current of clip
_MOST_HEADROOM = 0.8  # of what a measured curve leaves at its end


class Load(NamedTuple):
    """Continuous state space of the load: ds/dt = A s + B v, i = C s + D v.

    A Zobel network lies beside it.
    """

    a: Matrix
    b: Matrix
    c: Matrix
    d: float
    zobel_ohm: float = 0.0
    zobel_f: float = 0.0  # 0: no network


class Tone(NamedTuple):
    """Tone network (see front.py); positions of the pots from 0, full cut, to 1, full boost."""

    bass: float
    treble: float
    bass_end_ohm: float
    bass_pot_ohm: float
    bass_wiper_ohm: float
    bass_f: float
    treble_end_ohm: float
    treble_pot_ohm: float
    treble_f: float


class Front(NamedTuple):
    """Front end: gain stage, tone network, volume."""

    gain: float
    clip_positive_v: float
    clip_negative_v: float
    tone: Tone | None  # None: no network
    volume: float  # rotation, 0 to 1
    volume_middle: float  # share at half rotation


class Circuit(NamedTuple):
    """A design in bare numbers, for any sample rate."""

    upper: HalfParams
    lower: HalfParams
    driver: DriverParams
    rail_positive: RailParams
    rail_negative: RailParams
    mains_hz: float
    load: Load
    bench_ohm: float  # resistor that stands for the load on the bench, ohm
    gain: float  # volts at the op-amp's input per volt at the jack, or behind the front end
    front: Front | None = None  # None: straight from the jack


def _bipolar(
    part: Transistor, i_s: float, hfe: float, knee: tuple[float, float], temperature_c: float
) -> BipolarParams:
    v_t = thermal_voltage(temperature_c)
    warm = 1.0 + part.hfe_per_k * (temperature_c - REFERENCE_C)
    return BipolarParams(
        i_s=saturation_current(i_s, 1.0, part.eg_ev, part.xti, temperature_c),
        n_vt=v_t,
        v_t=v_t,
        hfe=hfe * max(warm, 0.1),
        i_k=knee[0],
        m=knee[1],
        beta_r=part.reverse_hfe,
    )


def _devices(
    part: Transistor, temperature_c: float, hfe_factor: float, vbe_shift_v: float
) -> tuple[BipolarParams, BipolarParams]:
    """The device that carries the load current, and the one that drives it.

    A factor on a Darlington's gain is shared evenly between its two devices.
    """
    if part.kind == "darlington":
        hfe_factor = math.sqrt(hfe_factor)
    i_s = part.is_a * math.exp(-vbe_shift_v / thermal_voltage(REFERENCE_C))
    knee = (part.knee_a, part.knee_exponent)
    device = _bipolar(part, i_s, part.hfe * hfe_factor, knee, temperature_c)
    if part.kind != "darlington":
        return device, device
    assert part.first_is_a is not None
    assert part.first_hfe is not None
    assert part.first_knee_a is not None
    first_knee = (part.first_knee_a, part.first_knee_exponent)
    first = _bipolar(part, part.first_is_a, part.first_hfe * hfe_factor, first_knee, temperature_c)
    return device, first


def _chain(
    diodes: Sequence[Diode], temperature_c: float
) -> tuple[Matrix, Matrix, Matrix, float, float, float]:
    """Drops grouped by type: count, Is, n Vt (smallest Is first), shift, series ohm, leak S."""
    kinds: dict[tuple[float, float], float] = {}
    shift = series = leak = 0.0
    for d in diodes:
        if d.slope_v_per_k is None:
            i_s = saturation_current(d.is_a, d.n, d.eg_ev, d.xti, temperature_c)
            n_vt = d.n * thermal_voltage(temperature_c)
        else:
            i_s, n_vt = d.is_a, d.n * thermal_voltage(REFERENCE_C)
            shift += d.slope_v_per_k * (temperature_c - REFERENCE_C)
        kinds[(i_s, n_vt)] = kinds.get((i_s, n_vt), 0.0) + 1.0
        series += d.series_ohm
        leak += d.leak_ohm if d.leak_ohm is not None else _DROP_LEAK_OHM
    order = sorted(kinds)
    return (
        np.array([kinds[k] for k in order]),
        np.array([k[0] for k in order]),
        np.array([k[1] for k in order]),
        shift,
        series,
        1.0 / leak if leak else 0.0,
    )


def lower_half(design: Design, upper: bool) -> HalfParams:
    """Parameters of one half at its temperatures.

    Parameters
    ----------
    design : Design
    upper : bool
        Upper half, or lower half with its signs mirrored.

    Returns
    -------
    HalfParams
    """
    output, bias = design.output, design.bias
    part = output.upper if upper else output.lower
    hfe_factor = output.upper_hfe_factor if upper else output.lower_hfe_factor
    vbe_shift_v = output.upper_vbe_shift_v if upper else output.lower_vbe_shift_v
    device, first = _devices(part, output.temperature_c, hfe_factor, vbe_shift_v)
    diodes = bias.upper if upper else bias.lower
    multiplier: Multiplier | None = bias.upper_multiplied if upper else bias.lower_multiplied
    feed = bias.upper_feed if upper else bias.lower_feed
    count, i_s, n_vt, shift, series, leak = _chain(diodes, bias.temperature_c)
    if multiplier is not None:
        chain = CHAIN_MULTIPLIER
        m = multiplier.part
        spread, _ = _devices(m, bias.temperature_c, 1.0, 0.0)
        r_cb, g_be = multiplier.collector_base_ohm, 1.0 / multiplier.base_emitter_ohm
    else:
        chain = CHAIN_DROPS if diodes else CHAIN_NONE
        spread, r_cb, g_be = device, 1.0, 1.0
    catch = output.catch_diode
    v_t = thermal_voltage(REFERENCE_C)
    half = HalfParams(
        darlington=part.kind == "darlington",
        device=device,
        first=first,
        r_b=part.base_ohm,
        r_e=part.emitter_ohm,
        r_c=part.collector_ohm,
        g_1=1.0 / part.first_base_emitter_ohm if part.first_base_emitter_ohm else 0.0,
        g_2=1.0 / part.base_emitter_ohm if part.base_emitter_ohm else 0.0,
        r_emitter=output.upper_emitter if upper else output.lower_emitter,
        g_feed=1.0 / feed if feed else 0.0,
        chain=chain,
        chain_count=count if count.size else np.ones(1),
        chain_is=i_s if count.size else np.ones(1),
        chain_nvt=n_vt if count.size else np.ones(1),
        chain_shift=shift,
        chain_r=series,
        chain_g=leak,
        multiplier=spread,
        r_cb=r_cb,
        g_be=g_be,
        catch=BipolarParams(catch.is_a, catch.n * v_t, v_t, 1.0, 1.0, 1.0, 1.0),
        catch_r=catch.series_ohm,
    )
    if design.measured is None:
        return half
    return half._replace(chain=CHAIN_NONE, chain_shift=0.0, measured=lower_measured(design, upper))


def lower_measured(design: Design, upper: bool) -> MeasuredParams:
    """Law of one half from the design's measured curve.

    What the driver carries is not in a curve of the drive: base current comes from the pair's
    current gain, what the feed resistor brings from the bias section. A curve of the input
    holds all of it.
    """
    measured, driver = design.measured, design.driver
    assert measured is not None
    side: Side = "upper" if upper else "lower"
    # The feedback network lay across the load.
    network_ohm = driver.feedback_ohm + driver.ground_leg_ohm
    law = measured_halves(
        measured.table,
        (measured.positive_v, -measured.negative_v),
        1.0 / (1.0 / measured.load_ohm + 1.0 / network_ohm),
        (_least_headroom(design, "upper"), _least_headroom(design, "lower")),
        measured.idle_current_a,
        thermal_voltage(design.output.temperature_c),
    )[0 if upper else 1]
    if measured.input_v is not None:
        return law
    feed = design.bias.feed_for(side)
    return law._replace(
        base_share=1.0 / (1.0 + _pair_gain(design, side, float(law.i[-1]))),
        g_feed=1.0 / feed if feed else 0.0,
        v_feed=_JUNCTION_V * _junctions(design, side),
        chained=bool(design.bias.drops_for(side) or design.bias.multiplier_for(side)),
    )


def _pair_gain(design: Design, side: Side, current_a: float) -> float:
    """Current gain of a half as stated, or its part's at the knee of the measured curve."""
    measured, output = design.measured, design.output
    assert measured is not None
    if measured.current_gain is not None:
        return measured.current_gain
    point = conduction(design.part_for(side), current_a, output.temperature_c)
    factor = output.upper_hfe_factor if side == "upper" else output.lower_hfe_factor
    return factor * point.collector_a / point.base_a


def _junctions(design: Design, side: Side) -> int:
    """Base-emitter junctions between a half's base and the output."""
    return 2 if design.part_for(side).kind == "darlington" else 1


def _least_headroom(design: Design, side: Side) -> float:
    """Rail minus output that a half keeps at no current, as stated or by its junctions.

    A base fed from the rail cannot pass it: every base-emitter junction stays below. Driven by
    the op-amp it can, and the first of two devices saturates: one junction stays.
    """
    measured = design.measured
    assert measured is not None
    if measured.headroom_v is not None:
        return measured.headroom_v
    junctions = _junctions(design, side) - (design.bias.feed_for(side) is None)
    return min(_JUNCTION_V * junctions, _MOST_HEADROOM * measured.headroom_for(side))


def _output_resistances(part: OpAmp) -> tuple[tuple[float, float], tuple[float, float]]:
    """Output resistance and drop of both sides that meet the swings into 10 and 2 kilohm."""
    sides = (
        (part.swing_10k_positive_v, part.swing_2k_positive_v, part.source_limit_a),
        (-part.swing_10k_negative_v, -part.swing_2k_negative_v, part.sink_limit_a),
    )

    def softened(swing_v: float, ohm: float, limit: float) -> float:
        # The smooth current limit already costs something at the heavier load.
        i = swing_v / ohm
        return i / math.sqrt(1.0 - min(i / limit, 0.99) ** 2)

    pulls = [
        (light - heavy, softened(light, 10e3, limit), softened(heavy, 2e3, limit), heavy)
        for light, heavy, limit in sides
    ]
    found = [
        max(lost / (i_heavy - i_light), _LEAST_OUTPUT_OHM) for lost, i_light, i_heavy, _ in pulls
    ]
    # Each side's resistance at small currents is the mean of both: a few rounds settle it.
    for _ in range(60):
        mean = 0.5 * (found[0] + found[1])
        found = [
            max(
                r
                + (lost - (_across(i_heavy, r, mean) - _across(i_light, r, mean)))
                / (i_heavy - i_light),
                _LEAST_OUTPUT_OHM,
            )
            for r, (lost, i_light, i_heavy, _) in zip(found, pulls, strict=True)
        ]
    mean = 0.5 * (found[0] + found[1])
    drops = [
        part.at_rail_v - heavy - _across(i_heavy, r, mean)
        for r, (_, _, i_heavy, heavy) in zip(found, pulls, strict=True)
    ]
    return (found[0], drops[0]), (found[1], drops[1])


def _across(current_a: float, ohm: float, mean_ohm: float) -> float:
    """Voltage across an output resistance that is its side's at much current, the mean at little.

    Solves e = R(e) i (see kernel/driver.py) by repeated substitution, which contracts.
    """
    e = ohm * current_a
    for _ in range(60):
        share = e * e / (e * e + BLEND_V * BLEND_V)
        e = (mean_ohm + (ohm - mean_ohm) * share) * current_a
    return e


def lower_driver(design: Design) -> DriverParams:
    """Op-amp and feedback network.

    The two listed swings (into 10 kilohm and 2 kilohm) give the output resistance and the
    voltage the stage behind it stops at, for either side. Where a measured curve holds the
    closed loop, the op-amp drives it from outside, with the loop's gain and bandwidth.
    """
    driver = design.driver
    part: OpAmp = driver.part
    (r_source, drop_positive), (r_sink, drop_negative) = _output_resistances(part)
    own = driver.positive_v is not None
    network = driver.ground_leg_ohm + driver.feedback_ohm
    beta, per_a0 = driver.ground_leg_ohm / network, 1.0 / part.dc_gain
    if design.measured is not None and design.measured.input_v is not None:
        beta, per_a0 = 0.0, 1.0 / design.measured.table.drive_gain
    return DriverParams(
        omega=2.0 * math.pi * part.gain_bandwidth_hz,
        slew=part.slew_v_per_s,
        per_a0=per_a0,
        beta=beta,
        r_source=r_source,
        r_sink=r_sink,
        i_source=part.source_limit_a,
        i_sink=part.sink_limit_a,
        drop_positive=drop_positive,
        drop_negative=drop_negative,
        own_supply=own,
        rail_positive=driver.positive_v if driver.positive_v is not None else 0.0,
        rail_negative=driver.negative_v if driver.negative_v is not None else 0.0,
        offset=driver.offset_v if driver.offset_v is not None else 0.0,
        i_quiescent=part.quiescent_a,
    )


def lower_rails(design: Design) -> tuple[RailParams, RailParams, float]:
    """Both rails, as magnitudes, and the mains frequency in hertz (0: none)."""
    supply = design.supply
    if isinstance(supply, TransformerSupply):

        def winding(v: float) -> RailParams:
            return RailParams(
                kind=RECTIFIED,
                v_open=math.sqrt(2.0) * v * (1.0 + supply.regulation),
                r_source=supply.winding_ohm + supply.bridge_ohm,
                i_limit=NO_LIMIT,
                c=supply.reservoir_f,
                esr=supply.reservoir_esr_ohm,
                v_diode=supply.bridge_drop_v,
            )

        return winding(supply.positive_winding), winding(supply.negative_winding), supply.mains_hz
    if isinstance(supply, BatterySupply):
        r, limit = supply.internal_ohm, None
    else:
        assert isinstance(supply, BenchSupply)
        r, limit = supply.source_ohm, supply.current_limit_a

    def source(v: float) -> RailParams:
        stiff = r == 0.0 and limit is None
        return RailParams(
            kind=STIFF if stiff else RESISTIVE,
            v_open=abs(v),
            r_source=max(r, 1e-3),
            i_limit=limit if limit is not None else NO_LIMIT,
            c=supply.decoupling_f,
            esr=0.0,
            v_diode=0.0,
        )

    return source(supply.positive_v), source(supply.negative_v), 0.0


def _loudspeaker(part: Loudspeaker) -> Load:
    """States: currents of L1, L2, L3 and Lces, and the voltage on Cmes."""
    l1, l2, l3 = part.l1_h, part.l2_h, part.l3_h
    r2, r3, re = part.r2_ohm, part.r3_ohm, part.re_ohm
    a = np.zeros((5, 5))
    a[0] = [-(re + r2 + r3) / l1, r2 / l1, r3 / l1, -1.0 / l1, 0.0]
    a[1, :2] = [r2 / l2, -r2 / l2]
    a[2, [0, 2]] = [r3 / l3, -r3 / l3]
    a[3, [0, 3, 4]] = [1.0 / part.cmes_f, -1.0 / (part.res_ohm * part.cmes_f), -1.0 / part.cmes_f]
    a[4, 3] = 1.0 / part.lces_h
    b = np.zeros(5)
    b[0] = 1.0 / l1
    c = np.zeros(5)
    c[0] = 1.0
    return Load(a, b, c, 0.0)


def lower_load(design: Design) -> Load:
    """Load with the feedback network across it, and the Zobel network beside it."""
    load = design.load
    if load.part is not None:
        net = _loudspeaker(load.part)
    else:
        assert load.ohm is not None
        net = Load(np.zeros((0, 0)), np.zeros(0), np.zeros(0), 1.0 / load.ohm)
    d = net.d + 1.0 / (design.driver.feedback_ohm + design.driver.ground_leg_ohm)
    return net._replace(d=d, zobel_ohm=load.zobel_ohm or 0.0, zobel_f=load.zobel_f or 0.0)


def bench_load(design: Design) -> Load:
    """Resistor of the rated impedance in place of a loudspeaker; the Zobel network stays."""
    network = 1.0 / (design.driver.feedback_ohm + design.driver.ground_leg_ohm)
    load = lower_load(design)
    nothing = np.zeros((0, 0)), np.zeros(0), np.zeros(0)
    return Load(*nothing, 1.0 / design.load.bench_ohm + network, load.zobel_ohm, load.zobel_f)


def load_impedance(load: Load, frequency_hz: npt.ArrayLike) -> npt.NDArray[np.complex128]:
    """Complex impedance of a load, in ohm.

    Parameters
    ----------
    load : Load
    frequency_hz : (N,) array_like

    Returns
    -------
    (N,) ndarray of complex
    """
    s = 2j * np.pi * np.atleast_1d(np.asarray(frequency_hz, dtype=float))
    eye = np.eye(load.b.size)
    y = np.array([load.c @ np.linalg.solve(k * eye - load.a, load.b) + load.d for k in s])
    if load.zobel_f:
        y = y + 1.0 / (load.zobel_ohm + 1.0 / (s * load.zobel_f))
    return np.asarray(1.0 / y)


def load_resistance(load: Load) -> float:
    """Resistance of a load at zero frequency, in ohm."""
    if load.b.size == 0:
        return 1.0 / load.d
    return float(1.0 / (load.d - load.c @ np.linalg.solve(load.a, load.b)))


def discretise_load(load: Load, dt: float) -> LoadParams:
    """Step of a load by the trapezoidal rule (see kernel/load.py).

    Parameters
    ----------
    load : Load
    dt : float
        Step in seconds.

    Returns
    -------
    LoadParams
    """
    n = load.b.size
    eye = np.eye(n)
    inverse = np.linalg.inv(eye - 0.5 * dt * load.a) if n else eye
    p = inverse @ (eye + 0.5 * dt * load.a)
    q = 0.5 * dt * (inverse @ load.b)
    zobel_k = 0.5 * dt / load.zobel_f if load.zobel_f else 0.0
    zobel_g = 1.0 / (load.zobel_ohm + zobel_k) if load.zobel_f else 0.0
    return LoadParams(
        p=np.ascontiguousarray(p),
        q=np.ascontiguousarray(q),
        c=np.ascontiguousarray(load.c),
        g=float(load.c @ q) + load.d + zobel_g,
        zobel_g=zobel_g,
        zobel_k=zobel_k,
    )


def lower_front(design: Design) -> Front | None:
    """Front end, None where the design has none."""
    front = design.front
    if front is None:
        return None
    tone = front.tone
    return Front(
        gain=10.0 ** (front.gain_db / 20.0),
        clip_positive_v=front.clip_positive_v,
        clip_negative_v=front.lowest_v,
        tone=Tone(*(float(getattr(tone, key)) for key in Tone._fields)) if tone else None,
        volume=front.volume,
        volume_middle=front.volume_middle,
    )


def lower(design: Design) -> Circuit:
    """Lower a design to bare numbers.

    Parameters
    ----------
    design : Design

    Returns
    -------
    Circuit
    """
    positive, negative, mains_hz = lower_rails(design)
    return Circuit(
        upper=lower_half(design, upper=True),
        lower=lower_half(design, upper=False),
        driver=lower_driver(design),
        rail_positive=positive,
        rail_negative=negative,
        mains_hz=mains_hz,
        load=lower_load(design),
        bench_ohm=design.load.bench_ohm,
        gain=10.0 ** (design.input.gain_db / 20.0),
        front=lower_front(design),
    )
