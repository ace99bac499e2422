"""The stability hint of the bench: how near the loop of a design is to oscillation.

The loop gain (see `loop.py`) is judged at several operating points and into several loads. An
estimate from data-sheet figures: what it assumes and what it leaves out stands in its result.
"""

import functools
import math
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from tonesim.circuit import Circuit, Load, load_resistance, lower
from tonesim.curve import ClipLevel, OperatingPoint, clip_levels, fingerprint
from tonesim.design import SIDES, Design, Side
from tonesim.errors import UsageError
from tonesim.kernel.static import StaticPoint, solve_static
from tonesim.loop import (
    Network,
    OpAmpPoles,
    Response,
    loop_gain,
    loop_pencil,
    opamp_poles,
    response,
)
from tonesim.margins import (
    MARGINAL_DAMPING,
    MARGINAL_DB,
    MARGINAL_DEG,
    STEADY_DAMPING,
    STEADY_DB,
    STEADY_DEG,
    Margins,
    Verdict,
    find_margins,
    growing_poles,
    judge,
    least_damping,
    pencil_poles,
)
from tonesim.smallsignal import (
    ASSUMED_COLLECTOR_BASE_F,
    Follower,
    build_network,
    device_ft_hz,
    linearise,
)
from tonesim.stage import find_idle
from tonesim.units import format_quantity

CABLES_F = (1e-9, 10e-9, 100e-9)  # capacitance across the load
SHARES = (0.1, 0.9)  # of the clip level's current, one half conducting
AS_DESIGNED, NO_LOAD, IDLE = "as designed", "no load", "idle"
LEFT_OUT = (
    "Layout, wiring inductance and the supply's impedance are not in these figures.",
    "Neither are the capacitance at the op-amp's inputs and charge in the chain, the catch diodes "
    "and a saturated output device.",
    "The model of a loudspeaker holds in the audible band; above it the impedance is a guess.",
)
_FULL = 0.5  # share of the clip level at which the follower counts as fully conducting
_DEAD = 0.5  # dead zone: follower gain below this share of what it is when fully conducting
_ENDLESS = 1e-8  # 1 / gain of an op-amp that holds its output where it is asked to
_MISSED, _MISSED_V = 1e-3, 1e-4  # by how much a point may miss the output asked for


@dataclass(frozen=True)
class StabilityCase:
    """The loop at one operating point into one load.

    `follower_gain` is that at direct current, `output_a` the current into the load, positive
    out of the upper half; `damping` the least damping ratio of the closed loop's poles around
    the crossover and above, negative where they grow. Where `follower_grows`, the follower
    oscillates into this load by itself, and no margin of the loop means anything: all are None.
    """

    state: str
    load: str
    output_a: float
    cable_f: float
    follower_gain: float
    margins: Margins
    damping: float
    growing_poles: int
    follower_grows: bool
    verdict: Verdict


@dataclass(frozen=True)
class Stability:
    """What small signals say of a loop; `worst` is the worst of its `cases`.

    `dead_zone`: at idle the output follows less than half as well as when it conducts.
    `residual_a` is the worst equation left over at any operating point.
    """

    title: str
    cases: tuple[StabilityCase, ...]
    worst: StabilityCase
    opamp: OpAmpPoles
    noise_gain: float
    min_stable_gain: float
    below_min_stable_gain: bool
    dead_zone: bool
    assumptions: tuple[str, ...]
    left_out: tuple[str, ...]
    residual_a: float

    def worst_into(self, load: str) -> StabilityCase:
        """Worst case into one load, "as designed", "no load" or "10 nF of cable"."""
        return _worst([case for case in self.cases if case.load == load])

    def as_dict(self) -> dict[str, Any]:
        """Everything as plain values for JSON."""
        return asdict(self)


class _Stage(NamedTuple):
    """A design with what every operating point of it shares."""

    circuit: Circuit
    design: Design
    rails_v: tuple[float, float]
    ft_hz: tuple[float, float]


def _stage(circuit: Circuit, design: Design, idle: OperatingPoint | None) -> _Stage:
    rest = find_idle(circuit, design.title) if idle is None else idle
    return _Stage(
        circuit,
        design,
        (rest.rail_positive.mean_v, rest.rail_negative.mean_v),
        (device_ft_hz(design.output.upper), device_ft_hz(design.output.lower)),
    )


def _at_rest(stage: _Stage, siemens: float) -> Follower:
    """Follower without a signal."""
    c = stage.circuit
    point: StaticPoint = solve_static(0.0, *stage.rails_v, siemens, 0.0, c.upper, c.lower, c.driver)
    return linearise(c, point, stage.rails_v, float(point.v_o) * siemens, stage.ft_hz)


def _held_at(stage: _Stage, output_v: float, siemens: float) -> Follower:
    """Follower with its output held at a voltage; an endless gain finds the same point."""
    c = stage.circuit
    driver = c.driver._replace(per_a0=_ENDLESS, offset=0.0)
    point: StaticPoint = solve_static(
        c.driver.beta * output_v, *stage.rails_v, siemens, 0.0, c.upper, c.lower, driver
    )
    return linearise(c, point, stage.rails_v, float(point.v_o) * siemens, stage.ft_hz)


def follower_at(
    circuit: Circuit,
    design: Design,
    output_a: float | None = None,
    idle: OperatingPoint | None = None,
) -> Follower:
    """Output follower for small signals at a current into the bench load.

    Parameters
    ----------
    circuit : Circuit
    design : Design
        The design it was lowered from.
    output_a : float, optional
        Amperes, positive out of the upper half; without it the stage has no signal.
    idle : OperatingPoint, optional
        Where it is known already; the rails are those at idle.

    Returns
    -------
    Follower

    Raises
    ------
    UsageError
        If the stage cannot bring that current.
    SolverError
        If the stage finds no idle point.
    """
    stage = _stage(circuit, design, idle)
    if output_a is None:
        return _at_rest(stage, 1.0 / load_resistance(circuit.load))
    if not math.isfinite(output_a):
        raise UsageError(f"output_a is {output_a}, expected a finite number of amperes")
    asked_v = output_a * circuit.bench_ohm
    found = _held_at(stage, asked_v, 1.0 / circuit.bench_ohm)
    if abs(found.output_v - asked_v) > _MISSED * abs(asked_v) + _MISSED_V:
        raise UsageError(
            f"output_a is {output_a:g} A, which design {design.title!r} does not reach: it "
            f"stops at {found.output_a:.4g} A into {circuit.bench_ohm:g} ohm"
        )
    return found


def _without_load(circuit: Circuit, design: Design) -> Load:
    """What stays across the output with the load unplugged: feedback and Zobel network."""
    siemens = 1.0 / (design.driver.feedback_ohm + design.driver.ground_leg_ohm)
    empty = np.zeros(0)
    return circuit.load._replace(a=np.zeros((0, 0)), b=empty, c=empty, d=siemens)


def output_impedance(
    circuit: Circuit,
    design: Design,
    frequency_hz: npt.ArrayLike,
    output_a: float | None = None,
    idle: OperatingPoint | None = None,
) -> Response:
    """Output impedance of the closed loop, Z0 / (1 + L) (Blackman 1943), load unplugged.

    Feedback and Zobel network belong to the stage. L is the loop gain without load, at the
    operating point `follower_at` finds with it.

    Parameters
    ----------
    circuit, design, output_a, idle
        As for `follower_at`.
    frequency_hz : (F,) array_like

    Returns
    -------
    (F,) ndarray of complex
        In ohms.
    """
    follower = follower_at(circuit, design, output_a, idle)
    network = build_network(circuit, follower, _without_load(circuit, design))
    loop = loop_gain(network, opamp_poles(design.driver.part), circuit.driver.beta, frequency_hz)
    return np.asarray(response(network, network.inject, frequency_hz) / (1.0 + loop))


def damping_factor(circuit: Circuit, design: Design, output_a: float | None = None) -> float:
    """Rated load over the magnitude of the output impedance at 1 kHz."""
    return circuit.bench_ohm / float(np.abs(output_impedance(circuit, design, [1e3], output_a)[0]))


def judge_loop(
    circuit: Circuit,
    design: Design,
    follower: Follower,
    load: Load,
    cable_f: float = 0.0,
    names: tuple[str, str] = ("", ""),
) -> StabilityCase:
    """Margins, poles and verdict of the loop around one follower into one load.

    Parameters
    ----------
    circuit, design : Circuit, Design
    follower : Follower
    load : Load
    cable_f : float
        Capacitance across the load in farads.
    names : (str, str)
        Of state and load, for the result.

    Raises
    ------
    UsageError
        If the capacitance is negative or not finite.
    """
    if not (math.isfinite(cable_f) and cable_f >= 0.0):
        raise UsageError(f"cable_f is {cable_f} F, expected zero or more")
    network = build_network(circuit, follower, load, cable_f)
    poles, beta = opamp_poles(design.driver.part), circuit.driver.beta
    loop = functools.partial(loop_gain, network, poles, beta)
    closed = pencil_poles(*loop_pencil(network, poles, beta))
    growing = growing_poles(closed)
    margins = find_margins(loop, growing > 0)
    # Poles a decade below the crossover are the load's own resonances.
    damping = least_damping(closed, 0.1 * (margins.crossover_hz or 0.0))
    follower_grows = growing_poles(pencil_poles(network.g, network.c)) > 0
    if follower_grows:
        margins = Margins(margins.crossover_hz, None, None, None, None, None)
    return StabilityCase(
        state=names[0],
        load=names[1],
        output_a=follower.output_a,
        cable_f=cable_f,
        follower_gain=_gain_at_rest(network),
        margins=margins,
        damping=damping,
        growing_poles=growing,
        follower_grows=follower_grows,
        verdict=judge(margins, damping),
    )


def _gain_at_rest(network: Network) -> float:
    return float(response(network, network.drive, [0.0])[0].real)


def _worst(cases: Sequence[StabilityCase]) -> StabilityCase:
    order: list[Verdict] = ["likely to oscillate", "marginal", "steady"]

    def rank(case: StabilityCase) -> tuple[int, float, float]:
        margin = case.margins.phase_margin_deg
        return (
            order.index(case.verdict),
            case.damping,
            math.inf if margin is None else margin,
        )

    return min(cases, key=rank)


def _sides(stage: _Stage) -> tuple[Side, ...]:
    """Halves that differ: one where the stage is its own mirror image."""
    c, d = stage.circuit, stage.circuit.driver
    mirrored = (
        fingerprint(c.upper) == fingerprint(c.lower)
        and stage.ft_hz[0] == stage.ft_hz[1]
        and math.isclose(*stage.rails_v, rel_tol=1e-9)
        and (d.r_source, d.i_source, d.drop_positive) == (d.r_sink, d.i_sink, d.drop_negative)
        and d.rail_positive == -d.rail_negative
        and d.offset == 0.0
    )
    return SIDES[:1] if mirrored else SIDES


def _edge(stage: _Stage, load: Load, most_v: float, enough: float) -> Follower:
    """Follower just outside the dead zone: the least output at which its gain is enough."""
    siemens = 1.0 / load_resistance(load)

    def gain(output_v: float) -> float:
        follower = _held_at(stage, output_v, siemens)
        return _gain_at_rest(build_network(stage.circuit, follower, load))

    inside, outside = 1e-8 * most_v, most_v
    for _ in range(24):  # halves the logarithm: to within a part in a million
        middle = math.copysign(math.sqrt(inside * outside), most_v)
        inside, outside = (inside, middle) if gain(middle) >= enough else (middle, outside)
    return _held_at(stage, outside, siemens)


def _idle_states(
    stage: _Stage, load: Load, clips: dict[Side, ClipLevel]
) -> Iterator[tuple[str, Follower]]:
    """Just outside the dead zone of each half that has one; else, or beside it, no signal."""
    siemens = 1.0 / load_resistance(load)
    rest = _at_rest(stage, siemens)
    idle_gain = _gain_at_rest(build_network(stage.circuit, rest, load))
    dead = 0
    for side in _sides(stage):
        full_v = _FULL * clips[side].level_v
        full = _held_at(stage, full_v, siemens)
        enough = _DEAD * _gain_at_rest(build_network(stage.circuit, full, load))
        if idle_gain < enough:
            dead += 1
            yield f"outside the dead zone, {side} half", _edge(stage, load, full_v, enough)
    if dead < len(_sides(stage)):
        yield IDLE, rest


def estimate_stability(
    design: Design,
    cables_f: Sequence[float] = CABLES_F,
    shares: Sequence[float] = SHARES,
) -> Stability:
    """Judge the loop of a design from its small-signal loop gain.

    Operating points: idle (or just outside the dead zone), and each half at shares of its clip
    level's current. Loads: as designed, the same with cables, and, at idle, no load.

    Parameters
    ----------
    design : Design
    cables_f : sequence of float
        Capacitances across the load in farads.
    shares : sequence of float
        Of the clip level's current, above 0 and below 1.

    Returns
    -------
    Stability

    Raises
    ------
    UsageError
        If a share or a capacitance is out of its range, or the design has a measured curve:
        what is quick about a loop is not in a static one.
    SolverError
        If the stage finds no idle point.
    """
    if design.measured is not None:
        raise UsageError(
            f"design {design.title!r} has a measured curve, which is static and tells nothing of "
            "stability; leave the section measured out"
        )
    for share in shares:
        if not 0.0 < share < 1.0:
            raise UsageError(f"a share of the clip level is {share:g}, expected 0 to 1")
    circuit = lower(design)
    idle = find_idle(circuit, design.title)
    stage = _stage(circuit, design, idle)
    clips = dict(zip(SIDES, clip_levels(circuit, idle), strict=True))
    unloaded = _without_load(circuit, design)
    loaded_states = list(_idle_states(stage, circuit.load, clips))
    dead = loaded_states[0][0] != IDLE
    for side in _sides(stage):
        for share in shares:
            follower = _held_at(stage, share * clips[side].level_v, 1.0 / circuit.bench_ohm)
            loaded_states.append((f"{side} half at {100.0 * share:g} % of clip", follower))
    loads = [(AS_DESIGNED, 0.0)]
    loads += [(f"{format_quantity(cable, 'F')} of cable", cable) for cable in cables_f]
    jobs = [
        (follower, circuit.load, cable_f, (state, name))
        for state, follower in loaded_states
        for name, cable_f in loads
    ]
    jobs += [
        (follower, unloaded, 0.0, (state, NO_LOAD))
        for state, follower in _idle_states(stage, unloaded, clips)
    ]
    cases = tuple(judge_loop(circuit, design, *job) for job in jobs)
    part, poles = design.driver.part, opamp_poles(design.driver.part)
    noise_gain = design.driver.gain
    return Stability(
        title=design.title,
        cases=cases,
        worst=_worst(cases),
        opamp=poles,
        noise_gain=noise_gain,
        min_stable_gain=part.min_stable_gain,
        below_min_stable_gain=noise_gain < part.min_stable_gain,
        dead_zone=dead,
        assumptions=tuple(_assumptions(design, poles, dead)),
        left_out=LEFT_OUT,
        residual_a=max(follower.residual_a for follower, _, _, _ in jobs),
    )


def _assumptions(design: Design, poles: OpAmpPoles, dead: bool) -> Iterator[str]:
    """What was taken for granted, sentence by sentence."""
    part = design.driver.part
    second = format_quantity(poles.second_pole_hz, "Hz")
    origin = "assumed (common practice): none is listed" if poles.margin_assumed else "as listed"
    yield (
        f"{part.name}: second pole at {second}, from a phase margin of "
        f"{poles.phase_margin_deg:g} degrees at a gain of {poles.margin_gain:g}, {origin}."
    )
    yield (
        f"{part.name}: its open-loop output resistance is the slope between its two listed "
        "swings, at every frequency; small signals often meet less, so this errs towards caution."
    )
    for transistor in dict.fromkeys((design.output.upper, design.output.lower)):
        ft = format_quantity(device_ft_hz(transistor), "Hz")
        origin = "as listed" if transistor.ft_hz else "assumed (common practice): none is listed"
        devices = ", each of its two devices" if transistor.kind == "darlington" else ""
        yield f"{transistor.name}: transition frequency {ft} at every current{devices}, {origin}."
    capacitance = format_quantity(ASSUMED_COLLECTOR_BASE_F, "F")
    yield f"Output devices: {capacitance} between collector and base, assumed (common practice)."
    if dead:
        yield (
            "At idle the stage is in its dead zone and the follower has no gain to speak of; the "
            "loop is judged just outside it, where the follower has half its full gain."
        )
    yield (
        f"Steady is called a loop from {STEADY_DEG:g} degrees and {STEADY_DB:g} dB of margin on, "
        f"marginal from {MARGINAL_DEG:g} degrees and {MARGINAL_DB:g} dB on (common practice); "
        f"poles with a damping ratio below {STEADY_DAMPING:g} or {MARGINAL_DAMPING:g} count alike."
    )
