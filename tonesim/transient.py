"""Square wave and power-up: the stage on a scope."""

from dataclasses import dataclass

import numpy as np

from tonesim.bench import Bench
from tonesim.circuit import Load
from tonesim.kernel import amplifier as loop
from tonesim.kernel import probe as probes
from tonesim.kernel.amplifier import AmplifierParams
from tonesim.kernel.rails import RECTIFIED, RailParams
from tonesim.probe import BASE_RATE_HZ, TOLERANCE_V, Probe, Trace
from tonesim.signals import Signal
from tonesim.stage import Stage, step_params

SQUARE_HZ = 2500.0
SQUARE_SHARES = (0.05, 0.7)  # of the clip level, peak
_SQUARE_MULTIPLY = 64  # 24.6 MHz: a step of 41 ns
_DEAD_SHARE = 0.02  # of the larger current: below it a half has let go
RAMP_S = 0.02  # of a bench supply that is switched on
_UP_S = 0.8  # of the power-up that is looked at
_QUIET_V = 0.05  # a thump has ended when the output stays this near to its rest
_DEAD_A = 1e-6  # of an op-amp below its least supply
_MARGIN_V = 0.5  # between its swing limits when it begins to work
_NO_LOAD_OHM = 1e6
_RESERVOIR = 0.2  # tolerance of electrolytics; common practice


@dataclass(frozen=True)
class SquareReading:
    """Response to a square wave whose ideal output is +-`peak_v`.

    Rise time from 10 to 90 % of the step, both edges' slower; overshoot as a share of the step;
    `dead_s` is how long at the zero crossing neither half gives 2 % of the current it gives at
    the top: what the driver takes to cross the dead zone, 0 where they overlap.
    """

    peak_v: float
    rise_s: float
    slew_v_per_s: float
    overshoot: float
    dead_s: float
    settled: bool


@dataclass(frozen=True)
class Thump:
    """Output while the supply comes up, largest excursion and when it is over.

    `last_s` counts from switching on to where the output stays within 50 mV of its rest; None
    where it does not within the record. `alive_s` is when the op-amp begins to work, None where
    it never does. `unequal`: reservoirs 20 % above and below, offset at its maximum.
    """

    loaded: bool
    unequal: bool
    peak_v: float
    peak_s: float
    last_s: float | None
    rest_v: float
    alive_s: float | None
    unsettled_steps: int


@dataclass(frozen=True)
class SquareSheet:
    """Square waves at a small and a large level."""

    square_hz: float
    readings: tuple[SquareReading, ...]
    unsettled_steps: int


@dataclass(frozen=True)
class PowerUpSheet:
    """Power-up with and without load, as drawn and as parts come.

    `ramp_s` is the rise time of a supply that is not fed from the mains.
    """

    ramp_s: float | None
    thumps: tuple[Thump, ...]

    @property
    def unsettled_steps(self) -> int:
        """Steps of all of them that did not settle."""
        return sum(thump.unsettled_steps for thump in self.thumps)


def square_trace(bench: Bench, share: float) -> tuple[Probe, Trace]:
    """One and a half periods of a square wave on stiff rails, sampled at 24.6 MHz."""
    probe = Probe(bench.stiff, _SQUARE_MULTIPLY)
    half = probe.frames(0.5 / SQUARE_HZ)
    peak = share * bench.clip_v / bench.gain
    x = np.full(3 * half, peak)
    x[:half] = x[2 * half :] = -peak
    return probe, probe.trace(x)


def read_square(trace: Trace, rate_hz: float, peak_v: float) -> SquareReading:
    """Read rise time, slope, overshoot and dead time off one and a half periods.

    Parameters
    ----------
    trace : Trace
        Low, high, low; the halves equally long.
    rate_hz : float
    peak_v : float
        What the output would be with an ideal stage; kept with the reading.
    """
    y = trace.output_v
    half = y.size // 3
    start, top, bottom = (
        float(np.mean(y[(k + 1) * half - half // 20 : (k + 1) * half])) for k in range(3)
    )
    up, down = y[half : 2 * half], y[2 * half :]
    step = top - start
    over = max(float(up.max()) - top, bottom - float(down.min()), 0.0)
    late = float(np.mean(up[-half // 10 : -half // 20]))
    return SquareReading(
        peak_v=peak_v,
        rise_s=max(_rise(up, start, top, rate_hz), _rise(-down, -top, -bottom, rate_hz)),
        slew_v_per_s=float(np.max(np.abs(np.diff(y)))) * rate_hz,
        overshoot=over / step,
        dead_s=_let_go(trace, rate_hz),
        settled=abs(top - late) < 1e-3 * step,
    )


def _rise(y: Signal, low: float, high: float, rate_hz: float) -> float:
    """Rise time from 10 to 90 % of a rising edge, seconds."""

    def crossing(level: float) -> float:
        after = int(np.argmax(y >= level))
        if after == 0:
            return 0.0
        return float(after - (y[after] - level) / (y[after] - y[after - 1]))

    step = high - low
    return (crossing(low + 0.9 * step) - crossing(low + 0.1 * step)) / rate_hz


def _let_go(trace: Trace, rate_hz: float) -> float:
    """Longest time both halves give less than a share of their larger current, seconds."""
    most = np.maximum(trace.upper_a, trace.lower_a)
    off = most < _DEAD_SHARE * most.max()
    ends = np.flatnonzero(np.diff(np.concatenate([[False], off, [False]]).astype(np.int8)))
    return float(np.max(ends[1::2] - ends[::2], initial=0)) / rate_hz


def measure_squares(bench: Bench) -> SquareSheet:
    """Square waves at a small and a large level."""
    readings, unsettled = [], 0
    for share in SQUARE_SHARES:
        probe, trace = square_trace(bench, share)
        readings.append(read_square(trace, probe.rate_hz, share * bench.clip_v))
        unsettled += probe.solved.unsettled_steps
    return SquareSheet(SQUARE_HZ, tuple(readings), unsettled)


def power_up(bench: Bench, *, loaded: bool, unequal: bool) -> tuple[Trace, Thump]:
    """Switch the supply on with no signal.

    A mains supply starts at the zero crossing with empty reservoirs; a bench supply or battery
    ramps its rails in 20 ms. Below its least supply the op-amp is taken as dead: it neither gives
    nor takes current, and its state waits at zero.

    Parameters
    ----------
    bench : Bench
    loaded : bool
        With the load as drawn, or with none but the feedback network.
    unequal : bool
        As parts come: reservoirs at either end of their tolerance, the op-amp's offset at its
        maximum.
    """
    circuit = bench.stage.circuit
    if not loaded:
        driver = bench.design.driver
        nothing = np.zeros((0, 0)), np.zeros(0), np.zeros(0)
        network = 1.0 / (driver.feedback_ohm + driver.ground_leg_ohm)
        circuit = circuit._replace(load=Load(*nothing, 1.0 / _NO_LOAD_OHM + network))
    if unequal:
        p, m = circuit.rail_positive, circuit.rail_negative
        circuit = circuit._replace(
            rail_positive=p._replace(c=p.c * (1.0 - _RESERVOIR)),
            rail_negative=m._replace(c=m.c * (1.0 + _RESERVOIR)),
            driver=circuit.driver._replace(offset=bench.design.driver.part.offset_max_v),
        )
    n = round(_UP_S * BASE_RATE_HZ)
    source = np.arange(1, n + 1) / BASE_RATE_HZ
    if circuit.mains_hz:
        source = np.sin(2.0 * np.pi * circuit.mains_hz * source)
    else:
        source = np.minimum(source / RAMP_S, 1.0)
        circuit = circuit._replace(
            rail_positive=_ramped(circuit.rail_positive),
            rail_negative=_ramped(circuit.rail_negative),
        )
    alive, dead, least = _states_of_work(bench, bench.stage._replace(circuit=circuit))
    state = np.zeros(loop.LOAD + circuit.load.b.size)
    evidence = np.zeros(loop.EVIDENCE_SIZE)
    out = np.empty((n, probes.COLUMNS))
    probes.powered(source, np.zeros(n), out, state, evidence, dead, alive, least)
    trace = Trace(*np.ascontiguousarray(out.T))
    return trace, _read_thump(trace, least, (loaded, unequal), int(evidence[loop.UNSETTLED]))


def _ramped(rail: RailParams) -> RailParams:
    """The rail as one whose source follows a given course; empty at first."""
    return rail._replace(
        kind=RECTIFIED,
        r_source=max(rail.r_source, 0.1),
        c=max(rail.c, 100e-6),
        esr=0.0,
        v_diode=0.0,
    )


def _states_of_work(bench: Bench, stage: Stage) -> tuple[AmplifierParams, AmplifierParams, float]:
    """Parameters with the op-amp at work and dead, and the supply from which it works."""
    held = step_params(stage, 1.0 / BASE_RATE_HZ, TOLERANCE_V)._replace(
        mains_sin=0.0, mains_cos=1.0
    )
    q = stage.circuit.driver
    asleep = q._replace(
        own_supply=True,
        rail_positive=0.1,
        rail_negative=-0.1,
        drop_positive=0.0,
        drop_negative=0.0,
        i_source=_DEAD_A,
        i_sink=_DEAD_A,
        r_source=1e6,
        r_sink=1e6,
    )
    least = bench.design.driver.part.supply_min_v
    if not q.own_supply:
        least = max(least, q.drop_positive + q.drop_negative + _MARGIN_V)
    return held, held._replace(driver=asleep), 0.0 if q.own_supply else least


def _read_thump(
    trace: Trace, least_supply: float, case: tuple[bool, bool], unsettled: int
) -> Thump:
    y = trace.output_v
    rest = float(np.mean(y[-y.size // 8 :]))
    at = int(np.argmax(np.abs(y)))
    loud = np.flatnonzero(np.abs(y - rest) > _QUIET_V)
    last: float | None = 0.0
    if loud.size:
        last = None if loud[-1] == y.size - 1 else float((loud[-1] + 1) / BASE_RATE_HZ)
    alive = np.flatnonzero(trace.positive_v + trace.negative_v >= least_supply)
    return Thump(
        loaded=case[0],
        unequal=case[1],
        peak_v=float(y[at]),
        peak_s=float(at / BASE_RATE_HZ),
        last_s=last,
        rest_v=rest,
        alive_s=float(alive[0] / BASE_RATE_HZ) if alive.size else None,
        unsettled_steps=unsettled,
    )


def measure_power_up(bench: Bench) -> PowerUpSheet:
    """Power-up with and without load, as drawn and as parts come."""
    thumps = tuple(
        power_up(bench, loaded=loaded, unequal=unequal)[1]
        for unequal in (False, True)
        for loaded in (True, False)
    )
    return PowerUpSheet(None if bench.stage.circuit.mains_hz else RAMP_S, thumps)
