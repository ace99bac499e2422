"""What the bench's meters read with a sine: closed forms, energy, and the same by a render.

Sources: R. L. Boylestad, L. Nashelsky, "Electronic Devices and Circuit Theory" (class B power);
A. S. Sedra, K. C. Smith, "Microelectronic Circuits". "Computed by us" means from the closed form.
"""

import functools
import math
from pathlib import Path

import numpy as np
import pytest
import soundfile as sf
from bench_pieces import class_ab, class_ab_bench, class_b, class_b_bench, opamp, reference_bench
from conftest import make_design
from test_facts_of_the_trade import LADDER, stage

from tonesim.bench import Bench, Reading, distortion_of, measure, stiffened
from tonesim.design import Design
from tonesim.designfile import load_design
from tonesim.distortion import measure_point
from tonesim.errors import SolverError
from tonesim.kernel.rails import STIFF
from tonesim.probe import Probe
from tonesim.render import render
from tonesim.report import RenderOptions
from tonesim.signals import coherent_frequency, sine
from tonesim.units import db_to_ratio, ratio_to_db

RAIL = 24.0


def read(bench: Bench, output_peak_v: float, hertz: float = 1000.0) -> Reading:
    return measure(bench.probe.twin(), hertz, output_peak_v / bench.gain, bench.record_s)


# ---- class B ----

# The feedback network of 34.5 kilohm across 8 ohm draws 2.3e-4 of the load's power. The op-amp
# stands on rails of its own and brings the bases' current, 1e-3 of the load's at most: that much
# is missing from the rails, and appears in the devices as if it came from there.
NETWORK, BASES = 3e-4, 1.5e-3


@pytest.mark.parametrize("ratio", [0.2, 0.5, 2.0 / math.pi, 0.8])
def test_class_b_powers_efficiency_and_heat(ratio):
    peak, ohm = RAIL * ratio, 8.0
    found = read(class_b_bench(), peak)
    load, supply = peak**2 / 2.0 / ohm, 2.0 * RAIL * peak / math.pi / ohm
    assert found.load_w == pytest.approx(load, rel=NETWORK)
    assert found.supply_w == pytest.approx(supply, rel=BASES)
    assert found.efficiency == pytest.approx(math.pi / 4.0 * ratio, rel=BASES)
    assert found.upper_w + found.lower_w == pytest.approx(supply - load, rel=2.0 * BASES)
    assert found.upper_w == pytest.approx(found.lower_w, rel=1e-4)
    # Mean of a half sine of Ip is Ip / pi, from each rail.
    for draw in (found.draw_positive_a, found.draw_negative_a):
        assert draw == pytest.approx(peak / math.pi / ohm, rel=BASES)
    assert found.output_v == pytest.approx(peak / math.sqrt(2.0), rel=1e-4)
    assert (found.highest_v, found.lowest_v) == pytest.approx((peak, -peak), rel=1e-3)
    assert found.positive_lowest_v == found.positive_highest_v == RAIL


# Sedra & Smith, class B design example (from memory): 20 W in 8 ohm from rails of 23 V takes
# 16.4 W from each rail, efficiency 61 %. Boylestad & Nashelsky, example 12.7 (from memory): 20 V
# peak in 16 ohm from 30 V takes 23.87 W, 52.36 %. A textbook companion of Scilab, book 73, example
# 10.3: 10 W in 8 ohm from 15 V; 15.099 W and 66.23 % computed by us from its inputs.
@pytest.mark.parametrize(
    ("rail", "ohm", "peak", "load", "supply", "per_cent"),
    [
        (23.0, 8.0, 17.889, 20.0, 2 * 16.371, 61.085),
        (30.0, 16.0, 20.0, 12.5, 23.87, 52.36),
        (15.0, 8.0, 12.649, 10.0, 15.099, 66.23),
    ],
)
def test_class_b_examples_of_the_textbooks(rail, ohm, peak, load, supply, per_cent):
    found = read(Bench(class_b(rail, ohm)), peak)
    assert found.load_w == pytest.approx(load, rel=1e-3)
    assert found.supply_w == pytest.approx(supply, rel=2.0 * BASES)
    assert 100.0 * found.efficiency == pytest.approx(per_cent, rel=2.0 * BASES)


def test_an_op_amp_on_the_stage_s_rails_adds_its_own_current_and_the_bases():
    own = {"feedback_ohm": "33k", "ground_leg_ohm": "1k5", "part": opamp("TL072", quiescent_a=5e-3)}
    bench = Bench(class_b(15.0, driver=own))
    peak = 6.0
    found = read(bench, peak)
    closed = 2.0 * 15.0 * peak / math.pi / 8.0
    # 2 Vcc times its quiescent current; the bases' current now comes from these rails as well.
    assert found.supply_w == pytest.approx(closed + 2.0 * 15.0 * 5e-3, rel=BASES)


def test_a_feed_resistor_and_an_idle_current_are_in_the_draw():
    bench = class_ab_bench()
    found = read(bench, 1e-3)
    assert found.supply_w == pytest.approx(bench.rest.draw_w, rel=1e-4)
    assert found.upper_w == pytest.approx(bench.rest.upper.idle_w, rel=1e-4)


@pytest.mark.parametrize(
    "name", ["reference", "class ab", "battery-supply", "small-saggy-transformer", "mixed-chain"]
)
@pytest.mark.parametrize("share", [0.3, 1.0])
def test_the_supply_gives_what_load_devices_and_resistors_take(name, share):
    bench = bench_called(name)
    probe = bench.probe.twin()
    peak = share * bench.clip_point.input_peak_v
    found = measure(probe, 1000.0, peak, bench.record_s)
    n = probe.frames(bench.record_s)
    trace = probe.trace(sine(found.frequency_hz, peak, probe.rate_hz, n))
    circuit = probe.stage.circuit
    emitters = sum(
        ohm * float(np.mean(np.maximum(current, 0.0) ** 2))
        for ohm, current in (
            (circuit.upper.r_emitter, trace.upper_a),
            (circuit.lower.r_emitter, trace.lower_a),
        )
    )
    rest = found.supply_w - found.load_w - found.upper_w - found.lower_w - emitters
    # What is left burns in op-amp, feed resistors and chains: at least the op-amp's own current
    # (it is on these rails), at most every feed resistor with the whole supply across it.
    total = found.positive_mean_v + found.negative_mean_v
    least = circuit.driver.i_quiescent * total
    feeds = total**2 * (circuit.upper.g_feed + circuit.lower.g_feed)
    assert least * 0.99 < rest < least + feeds + total * found.driver_peak_a


@functools.cache
def bench_called(name: str) -> Bench:
    if name == "reference":
        return reference_bench("three")
    return class_ab_bench() if name == "class ab" else Bench(load_design(name))


def test_power_from_rails_that_sag_is_the_mean_of_the_product():
    bench = bench_called("battery-supply")
    probe = bench.probe.twin()
    found = measure(probe, 1000.0, bench.clip_point.input_peak_v, bench.record_s)
    # The current is largest where the rail is lowest: less than the product of both means.
    means = (
        found.positive_mean_v * found.draw_positive_a
        + found.negative_mean_v * found.draw_negative_a
    )
    assert 0.99 * means < found.supply_w < means
    # Ohm's law of the batteries, 0.15 ohm each.
    for mean, draw in (
        (found.positive_mean_v, found.draw_positive_a),
        (found.negative_mean_v, found.draw_negative_a),
    ):
        assert 12.6 - mean == pytest.approx(0.15 * draw, rel=1e-6)


def test_a_driver_s_meters_read_the_driver():
    bench = class_b_bench()
    found = read(bench, 16.0)
    # Two base-emitter voltages of a TIP142 above the output, 1.4 V to 2.1 V at 2 A by its sheet.
    assert 1.2 < found.driver_peak_v - 16.0 < 2.2
    # Its current gain is 1000 at least at 5 A (sheet), and more at 2 A.
    assert found.driver_peak_a < 2.0 / 500.0


# ---- clip point ----


@pytest.mark.parametrize("name", ["reference", "class ab", "small-saggy-transformer"])
def test_at_the_clip_point_the_lowest_crest_is_one_per_cent_short(name):
    bench = bench_called(name)
    point = bench.clip_point
    probe = bench.probe.twin()
    tone = probe.tone(((1000.0, point.input_peak_v),), bench.record_s)
    cycles = tone.cycles[0]
    y = tone.output_v - bench.rest.output_offset_v
    # Every cycle's crests, found by interpolation of the record on a grid of phases.
    phase = np.arange(y.size) * cycles / y.size
    crests = [
        (y[(phase >= k) & (phase < k + 1)].max(), -y[(phase >= k) & (phase < k + 1)].min())
        for k in range(cycles)
    ]
    small = bench.probe.twin().tone(((1000.0, 0.1 * point.input_peak_v),), bench.record_s)
    # A tenth of the level is far from clipping; crossover costs its crest below 1e-3 of a chain.
    linear = float(np.min([np.max(small.output_v), -np.min(small.output_v)])) * 10.0
    assert np.min(crests) / linear == pytest.approx(0.99, abs=2e-3)


def test_on_stiff_rails_the_sine_clips_where_the_static_stage_does():
    for bench in (class_b_bench(), class_ab_bench()):
        # One per cent short of what is asked for is the level itself.
        asked = bench.clip_point.input_peak_v * bench.gain
        assert 0.99 * asked == pytest.approx(bench.clip_v, rel=2e-3)
        assert bench.clip_point.steady


def test_a_stage_nothing_makes_clip_is_refused(monkeypatch):
    bench = Bench(class_ab())
    monkeypatch.setattr("tonesim.bench._SHORT", 10.0)
    with pytest.raises(SolverError, match=r"'bench piece': no input makes it clip"):
        _ = bench.clip_point


# What the op-amp and both feed resistors want from 15 V is 1.4 + 3.7 mA and more.
@pytest.mark.parametrize(
    ("limit", "why"), [(4e-3, "rails do not come to rest"), (1e-3, "the op-amp alone draws")]
)
def test_a_design_that_cannot_idle_is_refused(limit, why):
    with pytest.raises(
        SolverError, match=rf"'bench piece': the stage finds no idle point \(.*{why}"
    ):
        Bench(make_design({"supply.current_limit_a": limit}))


# ---- stiff rails, records, steps ----


def test_stiffened_rails_stay_at_their_idle_mean():
    bench = bench_called("small-saggy-transformer")
    stage = stiffened(bench.resistive)
    idle = bench.resistive.idle
    for rail, mean in (
        (stage.circuit.rail_positive, idle.rail_positive.mean_v),
        (stage.circuit.rail_negative, idle.rail_negative.mean_v),
    ):
        assert rail.kind == STIFF
        assert rail.v_open == mean
    trace = Probe(stage).trace(sine(950.0, 0.2, 384e3, 4000))
    assert np.ptp(trace.positive_v) == np.ptp(trace.negative_v) == 0.0


def test_records_are_whole_mains_cycles():
    assert bench_called("small-saggy-transformer").record_s * 50.0 % 1.0 == 0.0
    assert Bench(load_design("four-ohm-loudspeaker")).record_s * 60.0 == pytest.approx(6.0)
    assert class_b_bench().record_s == 0.02


def test_every_run_on_the_bench_s_probes_is_counted():
    bench = Bench(class_ab())
    assert bench.solved.steps == 0
    _ = bench.clip_point
    after = bench.solved.steps
    # A search of several tones of two records at least, of 7680 steps each.
    assert after > 10 * 7680
    bench.fine_probe.twin().run(np.zeros(1000))
    bench.still_probe.twin().run(np.zeros(1000))
    assert bench.solved.steps == after + 2 * (1000 + 4096)  # each probe's own rest is in it
    assert bench.solved.unsettled_steps == 0


# ---- the same figure by a render ----

HERTZ = 950.0  # 19 cycles in 20 ms, at 48 and at 192 kHz


def rendered_harmonics(
    folder: Path, design: Design, peak_v: float, rate: int, *, multiply: int, orders: range
) -> np.ndarray:
    """Harmonics over the fundamental of a sine file through `tonesim.render`, by plain numpy."""
    seconds, record = 0.16, 0.02
    scale = design.input.full_scale_v
    x = peak_v / scale * np.sin(2.0 * np.pi * HERTZ * np.arange(round(seconds * rate)) / rate)
    sf.write(folder / "sine.wav", x, rate, subtype="DOUBLE")
    options = RenderOptions(subtype="float", multiply=multiply)
    report = render(folder / "sine.wav", folder / "out.wav", design, options)
    y, _ = sf.read(report.output)
    n = round(record * rate)
    # Two records before the end, clear of what the filters do with the end itself.
    lines = np.abs(np.fft.rfft(y[-3 * n : -2 * n]))
    cycles = round(HERTZ * record)
    return lines[[cycles * k for k in orders]] / lines[cycles]


FULL = "three and germanium"
RENDERED = {
    "no chain": (functools.partial(stage, "none"), (-3.0, -20.0), "none"),
    "full chain": (functools.partial(stage, FULL), (-1.0, 0.5), FULL),
}


@pytest.mark.parametrize(
    ("rate", "multiply", "top_hz"), [(48_000, 1, 19.5e3), (192_000, 1, 19.5e3), (192_000, 4, 78e3)]
)
@pytest.mark.parametrize("name", RENDERED)
@pytest.mark.parametrize("which", [0, 1])
def test_a_rendered_sine_has_the_distortion_the_bench_reads(
    tmp_path, name, which, rate, multiply, top_hz
):
    make, levels, chain = RENDERED[name]
    bench = reference_bench(chain)
    point = measure_point(bench, bench.fine_probe.twin(), HERTZ, levels[which])
    assert point.harmonics.frequency_hz == pytest.approx(HERTZ)
    orders = range(2, int(top_hz / HERTZ) + 1)  # what lies where file and analyser are both flat
    thd = np.hypot.reduce(point.harmonics.harmonics_v[: len(orders)])
    thd /= point.harmonics.fundamental_v
    found = rendered_harmonics(
        tmp_path, make(), point.input_peak_v, rate, multiply=multiply, orders=orders
    )
    # 0.1 dB: the trapezoidal rule at 384 kHz costs 0.07 dB at 19 kHz, and 0.3 dB at 38 kHz, so
    # the whole band is compared at four times that rate (DEVELOPERS.md).
    assert ratio_to_db(float(np.hypot.reduce(found) / thd)) == pytest.approx(0.0, abs=0.1)
    # Harmonic by harmonic, where it stands clear of the file's rounding (24 bits, spread over
    # hundreds of lines).
    clear = found > 10.0 * 2.0**-24
    assert np.count_nonzero(clear) >= 5
    expected = np.array(point.harmonics.harmonics_v[: len(orders)]) / point.harmonics.fundamental_v
    np.testing.assert_allclose(found[clear], expected[clear], rtol=0.05)


# ---- the reference circuit on its sheet (common practice, no source; see its own file) ----


def test_the_reference_circuit_reads_as_its_builder_would_read_it():
    bench = reference_bench("none")
    # 1 V peak to peak in: gain 22.28, about 22.4 V peak to peak and 7.9 V rms out, about 10.5 W
    # from the supply for 6.3 W in the load.
    found = measure(bench.probe.twin(), 1000.0, 0.5, bench.record_s)
    assert found.highest_v - found.lowest_v == pytest.approx(22.3, abs=0.25)
    assert found.output_v == pytest.approx(7.9, abs=0.05)
    assert found.supply_w == pytest.approx(10.5, abs=0.3)
    assert found.load_w == pytest.approx(6.3, abs=0.15)
    # About 0.5 V in for 22.4 V peak to peak out, read the other way round.
    gain = found.harmonics.fundamental_v / found.input_peak_v
    assert gain == pytest.approx(22.28, rel=2e-3)
    assert 22.4 / 2.0 / gain == pytest.approx(0.503, abs=0.005)


@functools.cache
def thd_at_test_level(chain: str, hertz: float) -> float:
    bench = reference_bench(chain)
    probe = bench.fine_probe.twin()
    tone = probe.tone(((hertz, 0.5),), 0.02)
    return distortion_of(tone, probe.rate_hz).thd_percent


def test_crossover_rises_with_frequency_and_falls_with_every_drop():
    for hertz in (1e3, 1e4, 2e4):
        ladder = [thd_at_test_level(chain, hertz) for chain in LADDER]
        assert ladder == sorted(ladder, reverse=True)
        assert ladder[1] < 0.6 * ladder[0]
    for chain in LADDER:
        low, mid, high = (thd_at_test_level(chain, f) for f in (1e3, 1e4, 2e4))
        assert low < mid < high


def test_a_coherent_tone_is_read_where_it_lies():
    frames = 7680
    hertz = coherent_frequency(1000.0, 384e3, frames)
    bench = class_ab_bench()
    tone = bench.probe.twin().tone(((1000.0, 0.1),), 0.02)
    found = distortion_of(tone, bench.probe.rate_hz)
    assert found.frequency_hz == pytest.approx(hertz)
    # To 80 kHz, and to the tenth harmonic where that lies higher.
    assert found.bandwidth_hz == 80_000.0
    tone = bench.probe.twin().tone(((10_000.0, 0.1),), 0.02)
    found = distortion_of(tone, bench.probe.rate_hz)
    assert found.highest_order == 10
    assert found.bandwidth_hz == pytest.approx(10.0 * found.frequency_hz)


def test_levels_are_in_decibels_of_the_clip_point():
    bench = class_ab_bench()
    point = measure_point(bench, bench.fine_probe.twin(), 1000.0, -20.0)
    assert point.input_peak_v == bench.clip_point.input_peak_v * db_to_ratio(-20.0)
    assert point.output_w == pytest.approx(point.output_v**2 / 8.0)
