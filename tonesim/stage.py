"""A design made ready to run: numbers, transfer surfaces, idle point, and the state at rest."""

import math
from typing import NamedTuple

import numpy as np

from tonesim.circuit import Circuit, bench_load, discretise_load, lower
from tonesim.curve import OperatingPoint, Surfaces, build_surfaces, idle_point
from tonesim.design import Design
from tonesim.errors import SolverError
from tonesim.kernel import amplifier as loop
from tonesim.kernel.amplifier import AmplifierParams
from tonesim.signals import Signal


class Stage(NamedTuple):
    """What a run of the sample loop is made of; shared by all runs, never written to."""

    circuit: Circuit
    surfaces: Surfaces
    idle: OperatingPoint


def find_idle(circuit: Circuit, title: str) -> OperatingPoint:
    """Idle point of a circuit.

    Raises
    ------
    SolverError
        If there is none.
    """
    idle = idle_point(circuit)
    rails_v = idle.rail_positive.mean_v, idle.rail_negative.mean_v
    why = None
    if not idle.residual_a < 1e-6:
        why = f"imbalance {idle.residual_a:.3g} A, expected below 1e-6 A"
    elif not idle.converged:
        why = "the rails do not come to rest under what the stage draws from them"
    elif min(rails_v) <= 0.0:
        why = "the supply's current limit is below what the op-amp alone draws"
    if why is not None:
        raise SolverError(f"design {title!r}: the stage finds no idle point ({why})")
    return idle


def build_stage(design: Design, *, resistor: bool = False) -> Stage:
    """Lower a design, build its surfaces and find its idle point.

    Parameters
    ----------
    design : Design
    resistor : bool
        True puts the bench resistor in place of a loudspeaker.

    Raises
    ------
    SolverError
        If the circuit cannot idle.
    """
    circuit = lower(design)
    if resistor:
        circuit = circuit._replace(load=bench_load(design))
    return Stage(circuit, build_surfaces(circuit), find_idle(circuit, design.title))


def step_params(stage: Stage, dt: float, tolerance_v: float) -> AmplifierParams:
    """Everything the sample loop reads, for steps of `dt` seconds."""
    circuit = stage.circuit
    angle = 2.0 * math.pi * circuit.mains_hz * dt
    return AmplifierParams(
        upper=stage.surfaces.upper,
        lower=stage.surfaces.lower,
        grid=stage.surfaces.grid,
        driver=circuit.driver,
        load=discretise_load(circuit.load, dt),
        rail_positive=circuit.rail_positive,
        rail_negative=circuit.rail_negative,
        mains_sin=math.sin(angle),
        mains_cos=math.cos(angle),
        dt=dt,
        tolerance=tolerance_v,
    )


def state_at_rest(stage: Stage) -> Signal:
    """State array of the static idle point."""
    load, idle = stage.circuit.load, stage.idle
    state = np.zeros(loop.LOAD + load.b.size)
    state[loop.O1 : loop.O3 + 1] = idle.output_v
    state[loop.D1 : loop.D3 + 1] = idle.drive_v
    state[loop.X1 : loop.X3 + 1] = idle.driver_v
    state[loop.CAP_P] = idle.rail_positive.capacitor_v
    state[loop.CAP_N] = idle.rail_negative.capacitor_v
    state[loop.RAIL_P] = idle.rail_positive.mean_v
    state[loop.RAIL_N] = idle.rail_negative.mean_v
    state[loop.MAINS_COS] = 1.0
    state[loop.ZOBEL_V] = idle.output_v
    if load.b.size:
        state[loop.LOAD :] = -np.linalg.solve(load.a, load.b) * idle.output_v
    return state
