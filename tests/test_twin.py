"""The twins: free of crossover, or of everything."""

import numpy as np
import pytest

from tonesim.bench import Bench, distortion_of
from tonesim.designfile import load_design, replace
from tonesim.probe import Probe
from tonesim.stage import build_stage
from tonesim.thermal import optimum_idle_current
from tonesim.twin import crossover_free, linear, wanted_idle

CHAINS = ("no-chain", "partial-chain", "slow-driver", "small-saggy-transformer", "battery-supply")


@pytest.fixture(scope="module", params=CHAINS)
def pair(request):
    design = load_design(request.param)
    stage = build_stage(design, resistor=True)
    return design, stage, crossover_free(design, stage)


def thd(stage, peak_v: float, hertz: float = 1000.0) -> float:
    probe = Probe(stage)
    return distortion_of(probe.tone(((hertz, peak_v),), 0.02), probe.rate_hz).thd_f


def test_the_twin_idles_as_asked(pair):
    design, stage, twin = pair
    assert twin.stage.idle.converged
    # Sought on rails that stand still: those of the twin sag by its idle current, and a feed
    # resistor brings less.
    assert twin.idle_a == pytest.approx(max(twin.wanted_a, stage.idle.upper_current_a), rel=0.1)
    assert twin.wanted_a == wanted_idle(design, stage.circuit)


@pytest.mark.parametrize("level_db", [-60.0, -50.0, -40.0, -30.0, -20.0])
def test_the_twin_distorts_a_small_signal_by_less_than_a_hundredth_per_cent(pair, level_db):
    _design, stage, twin = pair
    clip = 3.0 / stage.circuit.driver.beta**-1  # about 3 V at the load, below every clip level
    assert thd(twin.stage, clip * 10.0 ** (level_db / 20.0)) < 1e-4


@pytest.mark.parametrize("name", ["no-chain", "partial-chain", "slow-driver"])
def test_the_twin_clips_where_the_stage_does(name):
    bench = Bench(load_design(name))
    twin = crossover_free(bench.design, bench.resistive)
    assert twin.shift_v > 0.1
    peak = 1.5 * bench.clip_point.input_peak_v
    crests = []
    for stage in (bench.resistive, twin.stage):
        probe = Probe(stage)
        crests.append(np.max(probe.tone(((1000.0, peak),), 0.1).output_v))
    # The op-amp carries a little more or less current in the twin: some tens of millivolts.
    assert crests[1] == pytest.approx(crests[0], rel=0.01)


def test_a_stage_that_idles_warm_is_its_own_twin():
    design = load_design("hot-chain")
    stage = build_stage(design, resistor=True)
    twin = crossover_free(design, stage)
    assert twin.stage is stage
    assert twin.shift_v == 0.0


def test_the_optimum_is_olivers():
    """Vt over the whole emitter resistance (Oliver, Hewlett-Packard Journal, February 1971)."""
    design = load_design("partial-chain")
    ohm = design.output.upper_emitter + design.output.upper.emitter_ohm
    assert wanted_idle(design, build_stage(design).circuit) == optimum_idle_current(ohm)


@pytest.mark.parametrize("name", CHAINS)
def test_the_linear_twin_is_linear(name):
    design = load_design(name)
    stage = linear(build_stage(design, resistor=True))
    for peak in (1e-3, 0.1, 10.0, 100.0):  # far past any clip level
        assert thd(stage, peak) < 1e-10
    probe = Probe(stage)
    rng = np.random.default_rng(5)
    x, y = rng.standard_normal((2, 2000))
    runs = []
    for signal in (x, y, x + y):
        probe.reset()
        runs.append(probe.run(signal))
    rest = stage.idle.output_v
    np.testing.assert_allclose(runs[2] - rest, runs[0] + runs[1] - 2.0 * rest, atol=1e-9)
    assert probe.solved.unsettled_steps == 0


def test_the_linear_twin_has_the_closed_loop_gain_and_bandwidth():
    """Gain 1 + Rf/Rg and a pole at GBW/G (common practice; Sedra and Smith, op-amp chapter)."""
    design = load_design("full-chain")
    stage = linear(build_stage(design, resistor=True))
    q = stage.circuit.driver
    probe = Probe(stage, 64)
    for hertz in (1e3, 50e3, 200e3):
        n = round(20 * probe.rate_hz / hertz)
        tone = probe.tone(((hertz, 0.1),), n / probe.rate_hz, prime=False)
        line = np.abs(np.fft.rfft(tone.output_v)[tone.cycles[0]]) * 2.0 / tone.output_v.size
        f = tone.cycles[0] * probe.rate_hz / tone.output_v.size
        corner = q.omega * (q.beta + q.per_a0) / (2.0 * np.pi)
        expected = 0.1 / (q.beta + q.per_a0) / np.hypot(1.0, f / corner)
        assert line == pytest.approx(expected, rel=1e-3)  # the trapezoidal rule at 24.6 MHz
        probe.reset()


def test_without_a_dead_zone_the_difference_to_the_twin_is_small():
    """A warm chain lies far nearer to its twin than no chain at the same level."""
    left = {}
    for name in ("no-chain", "full-chain"):
        design = load_design(name)
        stage = build_stage(design, resistor=True)
        twin = crossover_free(design, stage)
        ys = []
        for each in (stage, twin.stage):
            probe = Probe(each)
            ys.append(probe.tone(((440.0, 0.02),), 0.1).output_v)
        gain = ys[1] @ ys[0] / (ys[1] @ ys[1])
        left[name] = np.std(ys[0] - gain * ys[1]) / np.std(ys[0])
    assert left["full-chain"] < 1e-3 * left["no-chain"]


def test_a_pair_without_emitter_resistors_has_a_bounded_wish():
    design = replace(load_design("no-chain"), output={"emitter_ohm": 0.0})
    wish = wanted_idle(design, build_stage(design).circuit)
    assert wish <= 0.1 * design.rail_for("upper") / 8.0
