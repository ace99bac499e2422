"""Power, rails and heat of a stage: what flows from the supply, into the load and into the sink."""

from dataclasses import dataclass
from functools import partial

import numpy as np
from scipy.optimize import brentq

from tonesim.bench import TONE_HZ, Bench, Reading, distortion_of, measure
from tonesim.circuit import load_impedance
from tonesim.pool import Progress, run_all
from tonesim.probe import Probe, Solved, Trace
from tonesim.signals import burst

THD_LEVELS = (0.01, 0.1)  # of the power ratings
_MOST_OVERDRIVE = 4.0  # times the clip point
_SHARES = (0.2, 0.35, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0)  # of the clip point, for the heat
_BURST_S = (0.1, 0.3, 0.6)  # silence, sine, silence
_BACK = 0.05  # of the sag that may be left when a rail counts as recovered
_LONG_S = 0.5
_RESONANCE_HZ = (20.0, 300.0)  # where a loudspeaker's resonance is looked for


@dataclass(frozen=True)
class Heat:
    """Heat of both output devices with a sine at a share of the clip point."""

    frequency_hz: float
    share: float
    upper_w: float
    lower_w: float

    @property
    def hotter_w(self) -> float:
        """Heat of the hotter device."""
        return max(self.upper_w, self.lower_w)


@dataclass(frozen=True)
class RailInBurst:
    """One rail in a burst of a sine at the clip point; magnitudes in volts.

    `sagged_v` is the mean over the burst's last cycle, of the mains where there is one, else of
    the sine. `recovery_s` is the time after the burst until 95 % of the sag are back, None where
    it is not within the record; with mains it is the mean of a whole mains cycle that is back.
    """

    idle_v: float
    sagged_v: float
    lowest_v: float
    recovery_s: float | None

    @property
    def sag(self) -> float:
        """Sag as a share of the idle rail."""
        return 1.0 - self.sagged_v / self.idle_v if self.idle_v else 0.0


@dataclass(frozen=True)
class PowerSheet:
    """Power, rails and heat.

    `at_thd` holds the reading for each of `THD_LEVELS`, None where the stage distorts more than
    that before it clips, or never so much. Ripple is peak to peak, hum rms at the output.
    """

    bench_ohm: float
    clip_point: Reading
    at_thd: tuple[Reading | None, ...]
    heat: tuple[Heat, ...]
    loudspeaker_heat: tuple[Heat, ...]
    burst_s: float
    positive_burst: RailInBurst
    negative_burst: RailInBurst
    ripple_idle_v: tuple[float, float]
    hum_idle_v: float
    hum_full_v: float | None
    solved: Solved

    @property
    def worst(self) -> Heat:
        """Hottest of all levels with the resistor."""
        return max(self.heat, key=lambda each: each.hotter_w)

    @property
    def worst_loudspeaker(self) -> Heat | None:
        """Hottest of all levels and frequencies with the loudspeaker, if there is one."""
        return max(self.loudspeaker_heat, key=lambda each: each.hotter_w, default=None)


def thd_at(bench: Bench, peak_v: float) -> float:
    """THD at 1 kHz, as a share of the fundamental, for a peak at the op-amp's input."""
    tone = bench.probe.twin().tone(((TONE_HZ, peak_v),), bench.record_s)
    return distortion_of(tone, bench.probe.rate_hz).thd_f


def level_of_thd(bench: Bench, thd: float) -> float | None:
    """Peak input at which clipping brings the distortion to a share, None if it never does.

    Distortion rises steadily once a stage clips, so the crossing above 90 % of the clip point
    is looked for.
    """
    low = 0.9 * bench.clip_point.input_peak_v
    high = _MOST_OVERDRIVE * bench.clip_point.input_peak_v
    if thd_at(bench, low) > thd or thd_at(bench, high) < thd:
        return None
    return float(brentq(lambda peak: np.log(thd_at(bench, peak) / thd), low, high, rtol=1e-4))


def heat_at(probe: Probe, frequency_hz: float, peak_v: float, share: float) -> Heat:
    """Heat of the output devices with a sine on a probe at rest."""
    seconds = _LONG_S if frequency_hz < TONE_HZ / 2.0 else 0.1
    found = measure(probe, frequency_hz, share * peak_v, seconds)
    return Heat(found.frequency_hz, share, found.upper_w, found.lower_w)


def burst_trace(bench: Bench) -> Trace:
    """Trace of silence, a 1 kHz sine at the clip point, and silence, resistor connected."""
    probe = bench.probe.twin()
    before, on, after = (probe.frames(seconds) for seconds in _BURST_S)
    peak = bench.clip_point.input_peak_v
    return probe.trace(
        burst(TONE_HZ, peak, probe.rate_hz, before + on + after, before, before + on)
    )


def rail_in_burst(rail_v: np.ndarray, rate_hz: float, mains_hz: float) -> RailInBurst:
    """Read a rail's voltage (frames,) off a burst trace."""
    start, stop = (round(seconds * rate_hz) for seconds in np.cumsum(_BURST_S[:2]))
    cycle = round(rate_hz / mains_hz) if mains_hz else round(rate_hz / TONE_HZ)
    total = np.concatenate([[0.0], np.cumsum(rail_v)])
    mean = (total[cycle:] - total[:-cycle]) / cycle  # of the cycle that begins there
    idle, sagged = float(mean[start - cycle]), float(mean[stop - cycle])
    # Only ripple needs a mean after the burst; it would hide what is quicker than a cycle.
    after = mean[stop - cycle :] if mains_hz else rail_v[stop:]
    back = np.flatnonzero(after >= idle - _BACK * (idle - sagged))
    recovery = None
    if idle - sagged < 1e-6 * idle:
        recovery = 0.0
    elif back.size:
        recovery = float(back[0] / rate_hz)
    return RailInBurst(idle, sagged, float(rail_v[start:stop].min()), recovery)


def hum_at_idle(bench: Bench) -> float:
    """Ripple at the output without a signal, rms volts; the op-amp's own rejection is not in it."""
    probe = bench.probe.twin()
    y = probe.run(np.zeros(probe.frames(0.1)))
    return float(np.std(y))


def measure_power(bench: Bench, progress: Progress | None = None) -> PowerSheet:
    """Measure power, rails and heat.

    Parameters
    ----------
    bench : Bench
    progress : callable, optional
    """
    clip = bench.clip_point
    at_thd = []
    for thd in THD_LEVELS:
        peak = level_of_thd(bench, thd)
        at_thd.append(
            None if peak is None else measure(bench.probe.twin(), TONE_HZ, peak, bench.record_s)
        )
    jobs = [
        partial(heat_at, bench.probe.twin(), TONE_HZ, clip.input_peak_v, share) for share in _SHARES
    ]
    used = [bench.probe]
    if bench.design.load.part is not None:
        used.append(bench.loudspeaker_probe)
        jobs += [
            partial(heat_at, bench.loudspeaker_probe.twin(), f, clip.input_peak_v, share)
            for f in _hard_frequencies(bench)
            for share in (0.4, 0.6, 0.8, 1.0)
        ]
    found = run_all(jobs, progress)
    trace = burst_trace(bench)
    mains = bench.stage.circuit.mains_hz
    rate = bench.probe.rate_hz
    return PowerSheet(
        bench_ohm=bench.ohm,
        clip_point=clip,
        at_thd=tuple(at_thd),
        heat=tuple(found[: len(_SHARES)]),
        loudspeaker_heat=tuple(found[len(_SHARES) :]),
        burst_s=_BURST_S[1],
        positive_burst=rail_in_burst(trace.positive_v, rate, mains),
        negative_burst=rail_in_burst(trace.negative_v, rate, mains),
        ripple_idle_v=(bench.rest.upper.rail_ripple_v, bench.rest.lower.rail_ripple_v),
        hum_idle_v=hum_at_idle(bench) if mains else 0.0,
        hum_full_v=clip.harmonics.hum_v if mains else 0.0,
        solved=sum((probe.solved_in_all for probe in used), Solved()),
    )


def _hard_frequencies(bench: Bench) -> tuple[float, ...]:
    """Where a loudspeaker is hard to drive: least impedance, and either side of the resonance."""
    f = np.geomspace(*_RESONANCE_HZ, 200)
    z = load_impedance(bench.stage.circuit.load, f)
    least = np.geomspace(100.0, 2000.0, 200)
    at_least = least[np.argmin(np.abs(load_impedance(bench.stage.circuit.load, least)))]
    angles = np.angle(z)
    return tuple(float(x) for x in (f[np.argmax(angles)], f[np.argmin(angles)], at_least))
