"""Twins of a stage: what its distortion is measured against.

The crossover-free twin is the same stage with each half's drive shifted until both conduct at
rest, so that the dead zone is gone while clipping, starvation, sag and load stay: what lies
between the two is what the choice of bias adds. The linear twin is the same closed loop with an
ideal follower and rails that never move: what lies between is all distortion.
"""

from dataclasses import dataclass, replace

import numpy as np
from scipy.optimize import brentq

from tonesim.circuit import NO_LIMIT, Circuit
from tonesim.curve import Surfaces, build_surfaces, grid_axes, grid_for, idle_point
from tonesim.design import SIDES, Design
from tonesim.kernel.rails import STIFF
from tonesim.stage import Stage, find_idle
from tonesim.thermal import optimum_idle_current

_MOST_SHIFT_V = 2.0  # more than any pair's dead zone
_MOST_SHARE = 0.1  # of the peak load current: more idle than that counts as enough
_LEAST_OHM = 0.05  # emitter resistance assumed where there is next to none
_FOLLOWER_S = 1e3  # conductance of the ideal follower
_ENDLESS_V = 1e4  # rails of the linear twin
_ENDLESS_SLEW = 1e15  # V/s


@dataclass(frozen=True)
class CrossoverFree:
    """The twin with its evidence.

    `shift_v` is what each half's drive was moved by, 0 where the stage idles warm enough by
    itself; `idle_a` the twin's idle current, `wanted_a` what was aimed at.
    """

    stage: Stage
    shift_v: float
    idle_a: float
    wanted_a: float


def wanted_idle(design: Design, circuit: Circuit) -> float:
    """Idle current at which a pair has no crossover distortion to speak of, amperes.

    Oliver's optimum for the emitter resistance in circuit, but no more than a tenth of the peak
    load current.
    """
    ohm = min(design.emitter_for(side) + design.part_for(side).emitter_ohm for side in SIDES)
    rail = min(design.rail_for(side) for side in SIDES)
    best = optimum_idle_current(max(ohm, _LEAST_OHM), temperature_c=design.output.temperature_c)
    return min(best, _MOST_SHARE * rail / circuit.bench_ohm)


def shifted(circuit: Circuit, shift_v: float) -> Circuit:
    """Circuit with both drives moved by a voltage.

    The op-amp's swing shrinks by the same voltage, so that a stage clips where it did.
    """
    driver = circuit.driver
    return circuit._replace(
        upper=circuit.upper._replace(drive_shift=shift_v),
        lower=circuit.lower._replace(drive_shift=shift_v),
        driver=driver._replace(
            drop_positive=driver.drop_positive + shift_v,
            drop_negative=driver.drop_negative + shift_v,
        ),
    )


def crossover_free(design: Design, stage: Stage) -> CrossoverFree:
    """Twin of a stage without its dead zone.

    It idles on more current, so that its rails stand a little lower at rest; under a signal that
    clips only the half that conducts draws on its rail, and they sag as in the design.

    Parameters
    ----------
    design : Design
    stage : Stage
        Built from the design.

    Raises
    ------
    SolverError
        If the twin finds no idle point.
    """
    circuit, own = stage.circuit, stage.idle
    rails = own.rail_positive.mean_v, own.rail_negative.mean_v
    wanted = wanted_idle(design, circuit)
    idle = min(own.upper_current_a, own.lower_current_a)
    if idle >= wanted:
        return CrossoverFree(stage, 0.0, idle, wanted)
    still = circuit._replace(
        rail_positive=circuit.rail_positive._replace(kind=STIFF, v_open=rails[0]),
        rail_negative=circuit.rail_negative._replace(kind=STIFF, v_open=rails[1]),
        mains_hz=0.0,
    )

    def short(shift: float) -> float:
        found = idle_point(shifted(still, shift))
        return min(found.upper_current_a, found.lower_current_a) - wanted

    shift = float(brentq(short, 0.0, _MOST_SHIFT_V, xtol=1e-6))
    twin = shifted(circuit, shift)
    made = Stage(twin, build_surfaces(twin), find_idle(twin, design.title))
    idle = min(made.idle.upper_current_a, made.idle.lower_current_a)
    return CrossoverFree(made, shift, idle, wanted)


def linear(stage: Stage) -> Stage:
    """Twin of a stage with an ideal follower, rails that never move and no limit anywhere.

    The op-amp's bandwidth, gain and offset stay.
    """
    circuit = stage.circuit
    driver = circuit.driver._replace(
        slew=_ENDLESS_SLEW,
        i_source=NO_LIMIT,
        i_sink=NO_LIMIT,
        own_supply=True,
        rail_positive=_ENDLESS_V,
        rail_negative=-_ENDLESS_V,
        drop_positive=0.0,
        drop_negative=0.0,
    )
    front = circuit.front
    if front is not None:
        front = front._replace(clip_positive_v=_ENDLESS_V, clip_negative_v=-_ENDLESS_V)
    grid = grid_for(circuit)
    us, hs = grid_axes(grid)
    table = np.zeros((hs.size, us.size, 4))
    # Both halves push and pull alike: the pair is one conductance.
    table[:, :, 0] = 0.5 * _FOLLOWER_S * us
    table[:, :, 1] = 0.5 * _FOLLOWER_S
    twin = circuit._replace(
        driver=driver,
        rail_positive=circuit.rail_positive._replace(kind=STIFF, v_open=_ENDLESS_V),
        rail_negative=circuit.rail_negative._replace(kind=STIFF, v_open=_ENDLESS_V),
        mains_hz=0.0,
        front=front,
    )
    surfaces = Surfaces(grid, table, table, 0.0, 0)
    offset = driver.offset / (driver.beta + driver.per_a0)
    # The op-amp's output resistance carries nothing: drive node and op-amp state are one.
    rest = replace(
        stage.idle,
        output_v=offset,
        drive_v=offset,
        driver_v=offset,
        upper_current_a=0.0,
        lower_current_a=0.0,
        upper_chain_a=0.0,
        lower_chain_a=0.0,
        driver_current_a=0.0,
    )
    return Stage(twin, surfaces, rest)
