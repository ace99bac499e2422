"""Static answers: transfer surfaces, rails at rest, the idle point and the clip levels."""

import math
import threading
from collections import OrderedDict
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

from tonesim.circuit import NO_LIMIT, Circuit, load_resistance
from tonesim.kernel.half import CHAIN_NONE, HalfParams, chain_law, tabulate
from tonesim.kernel.rails import RECTIFIED, RailParams, rail_cycles
from tonesim.kernel.static import StaticPoint, solve_static
from tonesim.kernel.surface import Grid, limit_slopes

Table = npt.NDArray[np.float64]

_U_LOW, _U_HIGH = -2.0, 3.0  # devices turn on inside this range of drive [V]
_H_LOW, _H_HIGH = -2.0, 4.0  # catch diodes conduct and devices saturate inside this one [V]
_DU_DARLINGTON, _DU_SINGLE, _DU_COARSE = 1 / 64, 1 / 128, 1 / 2  # [V]
_DH_FINE, _DH_COARSE = 1 / 32, 1 / 4  # [V]
_BEYOND = 6.0  # reach of the grid past the sum of both rails [V]
_MOST_EMITTER_DROP = 8.0  # the fine zones grow with the emitter resistors' drop up to this [V]
_RAIL_STEP = 1 / 384_000  # step for rails at rest [s]
FAR_V = 1e6  # input that asks for the clip level [V]
_STEEP, _LEAST_REACH = 1 / 16, 1 / 1024  # reach of drive of a measured closed loop [V]
_STEEP_CELLS = 512  # of one half's share of the fine zone then
_KEPT_SURFACES = 16
_SHRINKS = 0.8  # what each round of the idle point must bring its rails' move down to
_NEAR = 0.5  # share of its current limit from which the op-amp counts as near it
_TIE = 0.05  # share by which two limits' effects may differ and still be a tie


class Surfaces(NamedTuple):
    """Both halves' transfer surfaces with the evidence of their solution."""

    grid: Grid
    upper: Table
    lower: Table
    residual: float  # worst node equation at any node, ampere or volt
    newton_steps: int  # most steps any node needed


@dataclass(frozen=True)
class Rail:
    """A rail with a constant load."""

    mean_v: float
    lowest_v: float
    highest_v: float
    capacitor_v: float


@dataclass(frozen=True)
class OperatingPoint:
    """The stage without a signal."""

    output_v: float
    upper_current_a: float
    lower_current_a: float
    upper_chain_a: float
    lower_chain_a: float
    driver_current_a: float
    driver_v: float
    drive_v: float
    rail_positive: Rail
    rail_negative: Rail
    draw_positive_a: float
    draw_negative_a: float
    residual_a: float
    converged: bool


@dataclass(frozen=True)
class ClipLevel:
    """Static clip level of one half, and what would raise it.

    `gains_v` holds, for each limit lifted alone, how much further the output would go;
    `residual_a` is the worst of all these solutions.
    """

    level_v: float
    cause: str
    gains_v: dict[str, float]
    load_current_a: float
    residual_a: float


def grid_for(circuit: Circuit) -> Grid:
    """Grid that holds every voltage the stage can reach; steps are powers of two."""
    span = circuit.rail_positive.v_open + circuit.rail_negative.v_open
    most_a = max(circuit.rail_positive.v_open, circuit.rail_negative.v_open) / circuit.bench_ohm
    r = max(circuit.upper.r_emitter, circuit.lower.r_emitter)
    drop = float(np.ceil(min(r * most_a, _MOST_EMITTER_DROP)))
    # A chain of much resistance reaches further down at full headroom.
    chain = max(half.chain_r * half.g_feed for half in (circuit.upper, circuit.lower))
    u_low = _U_LOW - float(np.ceil(min(chain * span, _MOST_EMITTER_DROP)))
    single = not (circuit.upper.darlington and circuit.lower.darlington)
    u_high = _U_HIGH + drop
    du_steep = 0.0
    if circuit.upper.measured.on:
        reach = max(float(np.max(np.abs(circuit.upper.measured.u))), _LEAST_REACH)
        single = True
        u_low = min(u_low, -float(np.ceil(min(reach, _MOST_EMITTER_DROP))) - 1.0)
        u_high = max(u_high, 1.0 - u_low)
        if reach < _STEEP:
            # A closed loop: all of the curve lies within millivolts of drive.
            u_high = 4.0 * 2.0 ** np.ceil(np.log2(reach))
            u_low, du_steep = -u_high, u_high / _STEEP_CELLS
    du = du_steep or (_DU_SINGLE if single else _DU_DARLINGTON)
    n_low = int(np.ceil((span + _BEYOND + u_low) / _DU_COARSE))
    h_high = _H_HIGH + drop
    return Grid(
        u_low=u_low - n_low * _DU_COARSE,
        u_fine=u_low,
        u_coarse=u_high,
        n_low=n_low,
        n_fine=round((u_high - u_low) / du),
        n_high=max(1, int(np.ceil((span + _BEYOND - u_high) / _DU_COARSE))),
        du_fine=du,
        du_coarse=_DU_COARSE,
        h_low=_H_LOW,
        h_coarse=h_high,
        n_h_fine=round((h_high - _H_LOW) / _DH_FINE),
        n_h_coarse=max(1, int(np.ceil((span + _BEYOND - h_high) / _DH_COARSE))),
        dh_fine=_DH_FINE,
        dh_coarse=_DH_COARSE,
        per_du_fine=1.0 / du,
        per_du_coarse=1.0 / _DU_COARSE,
        per_dh_fine=1.0 / _DH_FINE,
        per_dh_coarse=1.0 / _DH_COARSE,
    )


def grid_axes(grid: Grid) -> tuple[Table, Table]:
    """Drive and headroom of a grid's nodes, in volts."""
    us = np.concatenate(
        [
            grid.u_low + grid.du_coarse * np.arange(grid.n_low),
            grid.u_fine + grid.du_fine * np.arange(grid.n_fine),
            grid.u_coarse + grid.du_coarse * np.arange(grid.n_high + 1),
        ]
    )
    hs = np.concatenate(
        [
            grid.h_low + grid.dh_fine * np.arange(grid.n_h_fine),
            grid.h_coarse + grid.dh_coarse * np.arange(grid.n_h_coarse + 1),
        ]
    )
    return us, hs


_surfaces: OrderedDict[tuple[object, ...], tuple[Table, float, int]] = OrderedDict()
_surfaces_lock = threading.Lock()  # stages are built on several threads


def fingerprint(*values: object) -> tuple[object, ...]:
    """Every number of nested tuples and arrays, as a key."""
    return tuple(
        fingerprint(*v) if isinstance(v, tuple) else v.tobytes() if isinstance(v, np.ndarray) else v
        for v in values
    )


def build_surface(half: HalfParams, grid: Grid) -> tuple[Table, float, int]:
    """Transfer surface of one half; equal halves share one table.

    Parameters
    ----------
    half : HalfParams
    grid : Grid

    Returns
    -------
    table : (H, U, 4) ndarray
        i_out, di_out/du, i_drive, di_drive/du in amperes and siemens; shared, not to be written to.
    residual : float
        Worst node equation met, in amperes or volts.
    newton_steps : int
        Most steps any node needed.
    """
    key = fingerprint(half, grid)
    with _surfaces_lock:
        if key in _surfaces:
            _surfaces.move_to_end(key)
            return _surfaces[key]
    found = _tabulated(half, grid)
    with _surfaces_lock:
        _surfaces[key] = found
        while len(_surfaces) > _KEPT_SURFACES:
            _surfaces.popitem(last=False)
    return found


def _tabulated(half: HalfParams, grid: Grid) -> tuple[Table, float, int]:
    us, hs = grid_axes(grid)
    table = np.empty((hs.size, us.size, 4))
    residual, steps = tabulate(us, hs, half, table)
    limit_slopes(table, us)
    return table, residual, steps


def build_surfaces(circuit: Circuit, grid: Grid | None = None) -> Surfaces:
    """Both halves' transfer surfaces on one grid.

    Parameters
    ----------
    circuit : Circuit
    grid : Grid, optional
        By default one that holds every voltage. Surfaces of any other are not kept for later.
    """
    build = build_surface if grid is None else _tabulated
    grid = grid or grid_for(circuit)
    upper, r_up, n_up = build(circuit.upper, grid)
    lower, r_low, n_low = build(circuit.lower, grid)
    return Surfaces(grid, upper, lower, max(r_up, r_low), max(n_up, n_low))


def rail_at_rest(rail: RailParams, draw_a: float, mains_hz: float) -> Rail:
    """A rail with a constant load, in its periodic state.

    Parameters
    ----------
    rail : RailParams
    draw_a : float
        Load current in amperes.
    mains_hz : float

    Returns
    -------
    Rail
        Mean, lowest and highest voltage of a mains cycle, magnitudes in volts.
    """
    if rail.kind != RECTIFIED:
        # A stiff rail has no source resistance to speak of; a limited one collapses.
        short = draw_a >= rail.i_limit
        v = 0.0 if short else rail.v_open - (rail.r_source * draw_a if rail.kind else 0.0)
        return Rail(v, v, v, v)
    trace = np.zeros(3)

    def gap(v: float) -> float:
        end = rail_cycles(v, draw_a, mains_hz, _RAIL_STEP, 1, rail, trace)
        return float(end - v)

    # The diode lets nothing above this in, and without a load nothing takes it out.
    high = rail.v_open - rail.v_diode
    if gap(-rail.v_open) < 0.0:
        return Rail(0.0, 0.0, 0.0, 0.0)  # more than the winding gives into a short circuit
    v = high if draw_a <= 0.0 else float(brentq(gap, -rail.v_open, high, xtol=1e-9))
    gap(v)
    return Rail(float(trace[0]), float(trace[1]), float(trace[2]), v)


def static_point(circuit: Circuit, input_v: float, v_p: float, v_n: float) -> StaticPoint:
    """The stage at rest with stiff rails of magnitude v_p, v_n and its load's resistance."""
    g = 1.0 / load_resistance(circuit.load)
    point: StaticPoint = solve_static(
        input_v, v_p, v_n, g, 0.0, circuit.upper, circuit.lower, circuit.driver
    )
    return point


def _draw(circuit: Circuit, point: StaticPoint) -> tuple[float, float]:
    """Current drawn from either rail at a static point."""
    quiescent = 0.0 if circuit.driver.own_supply else circuit.driver.i_quiescent
    i_amp = 0.0 if circuit.driver.own_supply else point.i_amp
    return (
        point.i_up + point.i_drive_up + quiescent + max(i_amp, 0.0),
        point.i_low + point.i_drive_low + quiescent + max(-i_amp, 0.0),
    )


def idle_point(circuit: Circuit) -> OperatingPoint:
    """The stage without a signal: currents, offset and rails that belong together.

    Rails and currents depend on each other; they are iterated until the rails stand still.

    Parameters
    ----------
    circuit : Circuit

    Returns
    -------
    OperatingPoint
        `converged` is False where the rails did not come to rest or a node equation is left
        unbalanced by more than a microampere.
    """
    positive = rail_at_rest(circuit.rail_positive, 0.0, circuit.mains_hz)
    negative = rail_at_rest(circuit.rail_negative, 0.0, circuit.mains_hz)
    settled = False
    v_p, v_n = positive.mean_v, negative.mean_v
    point = static_point(circuit, 0.0, v_p, v_n)
    share, before = 1.0, math.inf
    for _ in range(60):
        draw_p, draw_n = _draw(circuit, point)
        positive = rail_at_rest(circuit.rail_positive, draw_p, circuit.mains_hz)
        negative = rail_at_rest(circuit.rail_negative, draw_n, circuit.mains_hz)
        moved = max(abs(positive.mean_v - v_p), abs(negative.mean_v - v_n))
        if moved > _SHRINKS * before:
            share *= 0.5  # a weak supply answers to more draw with so little that both swing
        before = moved
        if share == 1.0:
            v_p, v_n = positive.mean_v, negative.mean_v
        else:
            v_p += share * (positive.mean_v - v_p)
            v_n += share * (negative.mean_v - v_n)
        point = static_point(circuit, 0.0, v_p, v_n)
        if moved < 1e-6:
            settled = True
            break
    draw_p, draw_n = _draw(circuit, point)
    residual = max(point.imbalance, point.residual)
    return OperatingPoint(
        output_v=point.v_o,
        upper_current_a=point.i_up,
        lower_current_a=point.i_low,
        upper_chain_a=point.i_drive_up,
        lower_chain_a=point.i_drive_low,
        driver_current_a=point.i_amp,
        driver_v=point.v_x,
        drive_v=point.v_d,
        rail_positive=positive,
        rail_negative=negative,
        draw_positive_a=draw_p,
        draw_negative_a=draw_n,
        residual_a=residual,
        converged=settled and residual < 1e-6,
    )


def chain_battery(half: HalfParams, chain_a: float) -> HalfParams:
    """The half with its chain replaced by a battery of what it holds at a current.

    A battery conducts both ways: the base cannot starve.
    """
    return half._replace(chain=CHAIN_NONE, chain_shift=chain_voltage(half, chain_a))


def clip_levels(circuit: Circuit, idle: OperatingPoint) -> tuple[ClipLevel, ClipLevel]:
    """Static clip level of the upper and the lower half into the bench load, rails as at idle.

    Each limit is lifted alone, and the one whose lifting lets the output go furthest is the
    cause: driver swing, driver current, base starvation (the feed resistor alone supplies the
    base), saturation of the output device, or the supply's current limit. A measured curve
    has one limit in the place of starvation and saturation: its own.

    Parameters
    ----------
    circuit : Circuit
    idle : OperatingPoint

    Returns
    -------
    upper, lower : ClipLevel
    """
    return _clip(circuit, idle, 1.0), _clip(circuit, idle, -1.0)


def _clip(circuit: Circuit, idle: OperatingPoint, sign: float) -> ClipLevel:
    v_p, v_n = idle.rail_positive.mean_v, idle.rail_negative.mean_v
    g = 1.0 / circuit.bench_ohm
    q = circuit.driver

    def level(
        driver: object = q,
        upper: HalfParams = circuit.upper,
        lower: HalfParams = circuit.lower,
        extra: float = 0.0,
    ) -> StaticPoint:
        s: StaticPoint = solve_static(sign * FAR_V, v_p, v_n, g, extra, upper, lower, driver)
        return s

    point = level()
    reach = abs(point.v_o)
    lifted = {
        "driver swing": level(
            driver=q._replace(
                drop_positive=q.drop_positive - 20, drop_negative=q.drop_negative - 20
            )
        ),
        "driver current": level(
            driver=q._replace(i_source=NO_LIMIT, i_sink=NO_LIMIT, r_source=1e-3, r_sink=1e-3)
        ),
        "base starvation": level(
            upper=chain_battery(circuit.upper, idle.upper_chain_a),
            lower=chain_battery(circuit.lower, idle.lower_chain_a),
        ),
        "saturation": level(extra=20.0),
    }
    if circuit.upper.measured.on:
        # What starves or saturates inside it, a measured curve does not tell.
        lifted["measured curve"] = lifted.pop("saturation")
        del lifted["base starvation"]
    gains = {name: max(abs(s.v_o) - reach, 0.0) for name, s in lifted.items()}
    cause = max(gains, key=lambda name: gains[name])
    swing, current = gains["driver swing"], gains["driver current"]
    if cause.startswith("driver") and abs(swing - current) < _TIE * max(swing, current):
        # Either would do; it is the current where the op-amp nears its limit, else its swing.
        limit = q.i_source if sign > 0 else q.i_sink
        cause = "driver current" if abs(point.i_amp) > _NEAR * limit else "driver swing"
    rail = circuit.rail_positive if sign > 0 else circuit.rail_negative
    load_a = reach * g
    if rail.i_limit < NO_LIMIT and load_a > rail.i_limit:
        gains["supply current limit"] = reach - rail.i_limit / g
        reach = rail.i_limit / g
        cause = "supply current limit"
    return ClipLevel(
        level_v=float(np.copysign(reach, sign)),
        cause=cause,
        gains_v=gains,
        load_current_a=reach * g,
        residual_a=max(max(s.imbalance, s.residual) for s in (point, *lifted.values())),
    )


def chain_voltage(half: HalfParams, current_a: float) -> float:
    """Voltage across a half's chain at a current, in volts."""
    if half.chain == CHAIN_NONE:
        return 0.0

    def gap(x: float) -> float:
        return float(chain_law(x, half)[2]) - current_a

    low = -5.0
    while gap(low) > 0.0 and low > -1e3:
        low *= 2.0  # starved, a chain meets most of the rail in reverse
    x = brentq(gap, low, 5.0, xtol=1e-12)
    return float(chain_law(x, half)[0])
