"""The output stage as a processor of blocks: volts at the jack in, volts across the load out.

One implementation serves files, batches and live sound. Everything is fixed, compiled and
allocated in `prepare`; `process` allocates nothing that grows, never raises on loud input and
gives the same bits however the signal is cut.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from tonesim.circuit import Circuit, lower
from tonesim.curve import OperatingPoint, Surfaces
from tonesim.design import Design
from tonesim.errors import UsageError
from tonesim.front import discretise_front
from tonesim.kernel import amplifier as loop
from tonesim.kernel import front as front_loop
from tonesim.kernel.amplifier import advance
from tonesim.kernel.front import advance_front
from tonesim.oversample import Oversampler, oversampling_factor
from tonesim.signals import Signal
from tonesim.stage import Stage, build_stage, state_at_rest, step_params

TOLERANCE_V = 1e-3  # a Newton step below this is the last: what is left is its square
_WARM_UP_S = 0.1  # silence run in `prepare`, so that the stage starts at rest
_PREPARE_FIRST = "process, reset, latency or evidence before prepare(sample_rate, block_size)"


@dataclass(frozen=True)
class Evidence:
    """What the solver did since the last reset, and the extremes it met."""

    steps: int
    iterations: int
    rescued_steps: int
    unsettled_steps: int
    worst_step_v: float
    highest_v: float
    lowest_v: float
    lowest_positive_rail_v: float
    lowest_negative_rail_v: float
    supply_energy_j: float
    load_energy_j: float
    positive_charge_c: float
    negative_charge_c: float

    @property
    def peak_v(self) -> float:
        """Largest magnitude at the output, in volts."""
        return max(self.highest_v, -self.lowest_v)


class Amplifier:
    """A design's output stage, one channel.

    Parameters
    ----------
    design : Design
    multiply : int, optional
        Factor on the internal rate (a power of two), for accuracy beyond the default.
    tolerance_v : float, optional
        Last Newton step that counts as settled, in volts.
    build : callable, optional
        Makes the stage of a design; another than its own is that of a twin (see `twin`).
    """

    def __init__(
        self,
        design: Design,
        multiply: int = 1,
        tolerance_v: float = TOLERANCE_V,
        build: Callable[[Design], Stage] = build_stage,
    ) -> None:
        self.design = design
        self._build = build
        self.circuit: Circuit = lower(design)
        self.multiply = multiply
        self.tolerance_v = tolerance_v
        self.factor = 0
        self.idle: OperatingPoint | None = None
        self.surfaces: Surfaces | None = None
        self._block = 0

    def prepare(self, sample_rate: float, block_size: int) -> None:
        """Fix rate and block size, build surfaces, compile, come to rest.

        Parameters
        ----------
        sample_rate : float
            Hertz.
        block_size : int
            Largest block `process` works on at once; longer ones are cut.

        Raises
        ------
        SolverError
            If the circuit cannot idle.
        """
        self.factor = oversampling_factor(sample_rate, multiply=self.multiply)
        dt = 1.0 / (sample_rate * self.factor)
        stage = self._build(self.design)
        self.circuit = stage.circuit
        self.surfaces, self.idle = stage.surfaces, stage.idle
        self._params = step_params(stage, dt, self.tolerance_v)
        front, gain = self.circuit.front, self.circuit.gain
        self._front = None if front is None else discretise_front(front, dt, gain)
        self._front_state = np.zeros(front_loop.SIZE)
        self._oversampler = Oversampler(self.factor, block_size)
        self._block = block_size
        self._fast_in = np.zeros(block_size * self.factor)
        self._fast_out = np.zeros(block_size * self.factor)
        self._state = state_at_rest(stage)
        self._evidence = np.zeros(loop.EVIDENCE_SIZE)
        self._warm_up(dt)
        self._rest = self._state.copy()
        self._rest_v = float(self._rest[loop.O1])
        self.reset()

    def _warm_up(self, dt: float) -> None:
        """Run silence: the last difference between static and moving solution dies here."""
        silence = np.zeros(round(_WARM_UP_S / dt))
        if self._front is not None:
            advance_front(silence, silence, self._front_state, self._front)
        advance(silence, np.empty_like(silence), self._state, self._evidence, self._params)

    def process(self, block: Signal) -> Signal:
        """Volts at the jack to volts across the load.

        Parameters
        ----------
        block : (frames,) ndarray

        Returns
        -------
        (frames,) ndarray

        Raises
        ------
        UsageError
            If `prepare` was not called.
        """
        if self._block == 0:
            raise UsageError(_PREPARE_FIRST)
        out = np.empty(block.shape[0])
        for start in range(0, block.shape[0], self._block):
            part = block[start : start + self._block]
            n = part.shape[0] * self.factor
            if self._front is None:
                self._oversampler.up(part * self.circuit.gain, self._fast_in[:n])
            else:
                self._oversampler.up(part, self._fast_in[:n])
                advance_front(self._fast_in[:n], self._fast_in[:n], self._front_state, self._front)
            advance(
                self._fast_in[:n],
                self._fast_out[:n],
                self._state,
                self._evidence,
                self._params,
            )
            # The filters begin at zero volts: they see the distance from rest.
            self._fast_out[:n] -= self._rest_v
            self._oversampler.down(self._fast_out[:n], out[start : start + self._block])
        out += self._rest_v
        return out

    def reset(self) -> None:
        """Back to the state after `prepare`."""
        if self._block == 0:
            raise UsageError(_PREPARE_FIRST)
        self._oversampler.reset()
        self._front_state[:] = 0.0
        self._state[:] = self._rest
        self._evidence[:] = 0.0
        self._evidence[loop.PEAK_P] = self._evidence[loop.PEAK_N] = self._state[loop.O1]
        self._evidence[loop.LOW_P] = self._state[loop.RAIL_P]
        self._evidence[loop.LOW_N] = self._state[loop.RAIL_N]

    @property
    def latency(self) -> int:
        """Delay of the oversampling filters, in whole samples."""
        if self._block == 0:
            raise UsageError(_PREPARE_FIRST)
        return self._oversampler.latency

    @property
    def rest_v(self) -> float:
        """Output voltage at rest, in volts."""
        if self._block == 0:
            raise UsageError(_PREPARE_FIRST)
        return self._rest_v

    @property
    def evidence(self) -> Evidence:
        """What the solver did since the last reset."""
        if self._block == 0:
            raise UsageError(_PREPARE_FIRST)
        e, dt = self._evidence, self._params.dt
        return Evidence(
            steps=int(e[loop.STEPS]),
            iterations=int(e[loop.ITERATIONS]),
            rescued_steps=int(e[loop.RESCUED]),
            unsettled_steps=int(e[loop.UNSETTLED]),
            worst_step_v=float(e[loop.WORST_STEP]),
            highest_v=float(e[loop.PEAK_P]),
            lowest_v=float(e[loop.PEAK_N]),
            lowest_positive_rail_v=float(e[loop.LOW_P]),
            lowest_negative_rail_v=float(e[loop.LOW_N]),
            supply_energy_j=float(e[loop.ENERGY_RAILS] * dt),
            load_energy_j=float(e[loop.ENERGY_LOAD] * dt),
            positive_charge_c=float(e[loop.CHARGE_P] * dt),
            negative_charge_c=float(e[loop.CHARGE_N] * dt),
        )
