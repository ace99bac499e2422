"""The stage on the bench: run at its internal rate, without filters, with probes on its nodes."""

from copy import copy
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from tonesim.curve import OperatingPoint
from tonesim.kernel import amplifier as loop
from tonesim.kernel import probe as probes
from tonesim.kernel.amplifier import advance
from tonesim.kernel.rails import STIFF
from tonesim.signals import Signal, coherent_frequency, sine
from tonesim.stage import Stage, state_at_rest, step_params

BASE_RATE_HZ = 384_000.0
TOLERANCE_V = 1e-6  # a last Newton step of this size leaves its square: far below -120 dB
_REST_S = 0.1  # silence before the first signal
_REST_STEPS = 4096  # the same where no rail moves: the static idle point is at rest
_STEADY = 1e-7  # change from record to record that counts as periodic, of the largest sample
_MOST_RECORDS = 40


class Trace(NamedTuple):
    """Probes of a run, (frames,) each: volts at the nodes, amperes out of halves and op-amp.

    `negative_v` is a magnitude; `upper_a` flows into the output node, `lower_a` out of it.
    """

    output_v: Signal
    drive_v: Signal
    driver_v: Signal
    positive_v: Signal
    negative_v: Signal
    upper_a: Signal
    lower_a: Signal
    driver_a: Signal


@dataclass(frozen=True)
class Solved:
    """What the solver did in a probe's runs."""

    steps: int = 0
    unsettled_steps: int = 0
    rescued_steps: int = 0

    def __add__(self, other: "Solved") -> "Solved":
        """Sum of two."""
        return Solved(
            self.steps + other.steps,
            self.unsettled_steps + other.unsettled_steps,
            self.rescued_steps + other.rescued_steps,
        )


class Tone(NamedTuple):
    """A coherent record of a sine or two in the steady state.

    `change_v` is the largest difference from the record before it: how steady the state is.
    """

    output_v: Signal
    cycles: tuple[int, ...]
    change_v: float
    steady: bool


class Probe:
    """A stage at a multiple of the internal rate; starts at rest.

    Parameters
    ----------
    stage : Stage
    multiply : int
        Factor on the internal rate of 384 kHz.
    """

    def __init__(self, stage: Stage, multiply: int = 1) -> None:
        self.stage = stage
        self.rate_hz = BASE_RATE_HZ * multiply
        self._params = step_params(stage, 1.0 / self.rate_hz, TOLERANCE_V)
        self._state = state_at_rest(stage)
        self._evidence = np.zeros(loop.EVIDENCE_SIZE)
        self._twins: list[Probe] = []
        still = self._params.rail_positive.kind == self._params.rail_negative.kind == STIFF
        self.run(np.zeros(_REST_STEPS if still else self.frames(_REST_S)))
        self._rest = self._state.copy()

    def twin(self) -> "Probe":
        """A probe on the same stage, at rest, that shares nothing that changes.

        Not for several threads at once: this one keeps count of its twins.
        """
        other = copy(self)
        other._state = self._rest.copy()
        other._evidence = np.zeros(loop.EVIDENCE_SIZE)
        other._twins = []
        self._twins.append(other)
        return other

    def frames(self, seconds: float) -> int:
        """Whole number of steps nearest to a time."""
        return round(seconds * self.rate_hz)

    def reset(self) -> None:
        """Back to rest; what the solver did stays counted."""
        self._state[:] = self._rest

    def run(self, x: Signal) -> Signal:
        """Volts at the op-amp's input to volts across the load, (frames,) each."""
        y = np.empty_like(x)
        advance(x, y, self._state, self._evidence, self._params)
        return y

    def trace(self, x: Signal) -> Trace:
        """Run over x (frames,) with all probes connected."""
        out = np.empty((x.size, probes.COLUMNS))
        probes.traced(x, out, self._state, self._evidence, self._params)
        return Trace(*np.ascontiguousarray(out.T))

    @property
    def idle(self) -> OperatingPoint:
        """Idle point of the stage."""
        return self.stage.idle

    @property
    def solved(self) -> Solved:
        """What the solver did so far in this probe."""
        e = self._evidence
        return Solved(int(e[loop.STEPS]), int(e[loop.UNSETTLED]), int(e[loop.RESCUED]))

    @property
    def solved_in_all(self) -> Solved:
        """The same in this probe and all its twins."""
        return sum((twin.solved_in_all for twin in self._twins), self.solved)

    def draw(self) -> Signal:
        """Charge drawn from both rails so far, (2,), coulombs."""
        e = self._evidence
        return np.array([e[loop.CHARGE_P], e[loop.CHARGE_N]]) / self.rate_hz

    def energy(self) -> float:
        """Energy drawn from both rails so far, joules."""
        return float(self._evidence[loop.ENERGY_RAILS]) / self.rate_hz

    def tone(
        self, parts: tuple[tuple[float, float], ...], seconds: float, *, prime: bool = True
    ) -> Tone:
        """Record of a sum of sines, repeated until it is periodic.

        Parameters
        ----------
        parts : tuple of (frequency_hz, amplitude_v)
            Volts at the op-amp's input, peak.
        seconds : float
            Length of the record; whole mains cycles, so that ripple is periodic in it.
        prime : bool
            True moves each frequency to a number of cycles without common divisor with the
            record, so that no alias meets a harmonic.

        Returns
        -------
        Tone
        """
        n = self.frames(seconds)
        x = np.zeros(n)
        cycles = []
        for frequency_hz, amplitude_v in parts:
            f = coherent_frequency(frequency_hz, self.rate_hz, n) if prime else frequency_hz
            cycles.append(round(f * n / self.rate_hz))
            x += sine(cycles[-1] * self.rate_hz / n, amplitude_v, self.rate_hz, n)
        y = self.run(x)
        change = np.inf
        limit = 0.0
        for _ in range(_MOST_RECORDS):
            before, y = y, self.run(x)
            change = float(np.max(np.abs(y - before)))
            limit = _STEADY * float(np.max(np.abs(y)))
            if change <= limit:
                break
        return Tone(y, tuple(cycles), change, change <= limit)
