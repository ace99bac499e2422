"""Pictures of the bench: the curves behind them, what is drawn of them, and the files."""

import dataclasses
import functools
import re
import subprocess
import sys
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st
from matplotlib.figure import Figure
from matplotlib.text import Text
from scipy.special import wrightomega

from tonesim import paper
from tonesim.bench import Bench, distortion_of
from tonesim.circuit import Circuit, bench_load, load_resistance, lower
from tonesim.curve import static_point
from tonesim.designfile import load_design
from tonesim.distortion import LEVELS_DB, DistortionSheet, measure_point
from tonesim.errors import OutputError, UsageError
from tonesim.idle import IdleAt, IdleSheet, measure_idle
from tonesim.kernel import follower
from tonesim.kernel.devices import BipolarParams
from tonesim.kernel.half import CHAIN_NONE, HalfParams
from tonesim.pictures import (
    CROSSING_HZ,
    Curve,
    Held,
    burst_course,
    describe_chain,
    gain_curves,
    held_of,
    line_spectrum,
    neighbours,
    power_up_course,
    square_course,
    thinned,
    transfer_curve,
    zero_crossing,
)
from tonesim.plot import (
    draw_burst,
    draw_gain,
    draw_idle,
    draw_pictures,
    draw_power_up,
    draw_squares,
    draw_transfer,
)
from tonesim.plot_sines import (
    draw_crossings,
    draw_spectra,
    draw_thd_frequency,
    draw_thd_level,
    residual_scale,
)
from tonesim.power import BURST_S, PowerSheet, burst_trace, rail_in_burst
from tonesim.probe import Solved
from tonesim.sheet import Sheet, measure_sheet
from tonesim.transient import SQUARE_SHARES, SquareSheet, measure_power_up, measure_squares

SAGGING = {"supply": {"kind": "bench", "positive_v": 15.0, "source_ohm": 0.5}}
CHAIN = {"bias.upper": ["1N4148", "1N4148"], "bias.lower": ["1N4148", "1N4148"]}
NAMES = (
    *("transfer-curve", "small-signal-gain", "idle-against-temperature", "rails-in-burst"),
    *("thd-against-level", "thd-against-frequency", "zero-crossing", "spectrum"),
    *("square-wave", "power-up"),
)


def circuit_of(changes: dict[str, object] | None = None) -> Circuit:
    design = make_design(changes)
    return lower(design)._replace(load=bench_load(design))


@functools.cache
def bench() -> Bench:
    return Bench(make_design({**SAGGING, **CHAIN}))


@functools.cache
def distortion() -> DistortionSheet:
    """A thin sheet: few points at the internal rate."""
    b = bench()
    low = tuple(measure_point(b, b.probe.twin(), 1000.0, x) for x in (-40.0, -20.0, -1.0, 3.0))
    rows = tuple(
        tuple(measure_point(b, b.probe.twin(), f, x) for f in (200.0, 1000.0, 5000.0))
        for x in LEVELS_DB
    )
    return DistortionSheet(low[0].harmonics.frequency_hz, -150.0, low, rows, (), Solved())


@functools.cache
def power() -> PowerSheet:
    b = bench()
    trace = burst_trace(b)
    rails = (rail_in_burst(v, b.probe.rate_hz, 0.0) for v in (trace.positive_v, trace.negative_v))
    return PowerSheet(
        b.ohm, b.clip_point, (), (), (), BURST_S[1], *rails, (0.0, 0.0), 0.0, None, b.probe.solved
    )


@functools.cache
def idle() -> IdleSheet:
    return measure_idle(bench())


@functools.cache
def square() -> SquareSheet:
    return measure_squares(bench())


@functools.cache
def sheet(*sections: str) -> Sheet:
    """A sheet of some sections, the slow ones as above."""
    _, found = measure_sheet(bench().design, ("gain",))
    parts = {
        "idle": idle,
        "power": power,
        "distortion": distortion,
        "square": square,
        "power_up": lambda: measure_power_up(bench()),
    }
    return dataclasses.replace(found, **{name: parts[name]() for name in sections})


def figures() -> dict[str, Figure]:
    """Every picture of the bench piece, drawn anew."""
    b, held = bench(), held_of(bench())
    curves = gain_curves(b)
    rails = (power().positive_burst, power().negative_burst)
    return {
        "transfer-curve": draw_transfer(curves[0], (b.rest.upper.clip, b.rest.lower.clip), held),
        "small-signal-gain": draw_gain(curves, held),
        "idle-against-temperature": draw_idle(idle(), 25.0, held),
        "rails-in-burst": draw_burst(burst_course(b), rails, BURST_S[1], held),
        "thd-against-level": draw_thd_level(distortion(), held),
        "thd-against-frequency": draw_thd_frequency(distortion(), held),
        "zero-crossing": draw_crossings([zero_crossing(b, f) for f in CROSSING_HZ], held),
        "spectrum": draw_spectra([line_spectrum(b, x) for x in LEVELS_DB[:2]], held),
        "square-wave": draw_squares(
            [square_course(b, share) for share in SQUARE_SHARES],
            square(),
            held,
        ),
        "power-up": draw_power_up([power_up_course(b, unequal=x) for x in (False, True)], held),
    }


@functools.cache
def drawn() -> dict[str, Figure]:
    return figures()


def lines_of(figure: Figure) -> list[tuple[np.ndarray, np.ndarray]]:
    return [line.get_data() for axes in figure.axes for line in axes.get_lines()]


def holds(figure: Figure, x: np.ndarray, y: np.ndarray) -> bool:
    return any(np.array_equal(x, a) and np.array_equal(y, b) for a, b in lines_of(figure))


def at_zero(curve: Curve) -> float:
    return float(np.interp(0.0, curve.drive_v, curve.gain))


# ---- the curve of the pair ----


@pytest.mark.parametrize("preset", ["no-chain", "full-chain", "lopsided-rails", "vbe-multiplier"])
def test_the_curve_meets_the_static_solution_of_the_whole_stage(preset):
    # Another path: op-amp and both nodes solved together by nested brackets.
    design = load_design(preset)
    circuit = lower(design)._replace(load=bench_load(design))
    points = [static_point(circuit, v, 14.0, 13.0) for v in (-10.0, -0.2, -0.01, 0.02, 0.3, 10.0)]
    out = np.empty((len(points), follower.COLUMNS))
    drive = np.array([point.v_d for point in points])
    g = 1.0 / load_resistance(circuit.load)
    follower.follow(drive, 14.0, 13.0, g, circuit.upper, circuit.lower, out)
    # Both bracket the output to 1e-13 V; a drive node that is off by that costs as much again.
    np.testing.assert_allclose(out[:, follower.OUTPUT], [p.v_o for p in points], atol=1e-11)
    np.testing.assert_allclose(out[:, follower.UPPER], [p.i_up for p in points], atol=1e-10)
    np.testing.assert_allclose(out[:, follower.LOWER], [p.i_low for p in points], atol=1e-10)


@pytest.mark.parametrize("preset", ["no-chain", "mixed-chain", "single-pair-current-limit"])
def test_the_curve_ends_where_the_op_amp_gives_no_more(preset):
    b = Bench(load_design(preset))
    curve = gain_curves(b)[0]
    for end, clip in ((-1, b.rest.upper.clip), (0, b.rest.lower.clip)):
        if clip.cause != "supply current limit":  # which the static curve does not know
            # The clip level leaves out the feedback network, 1 / 2000 of the load and less.
            assert curve.output_v[end] == pytest.approx(clip.level_v, rel=5e-4)
    assert curve.residual_a < 1e-10


def test_the_gain_is_the_slope_of_the_curve():
    curve = transfer_curve(circuit_of(CHAIN), 15.0, -15.0)
    near = np.abs(curve.drive_v) < 2.5
    v, y, gain = curve.drive_v[near], curve.output_v[near], curve.gain[near]
    chord = (y[2:] - y[:-2]) / (v[2:] - v[:-2])
    # Steps of 8 mV, curvature over some 25 mV: h² / 6 of the third derivative.
    np.testing.assert_allclose(gain[1:-1], chord, atol=5e-3)


@settings(max_examples=15)
@given(
    drops=st.integers(0, 3),
    feed=st.floats(1e3, 20e3),
    emitter=st.floats(0.0, 1.0),
    load=st.floats(4.0, 100.0),
    negative=st.floats(-20.0, -8.0),
)
def test_a_passive_pair_never_amplifies_and_never_turns_back(drops, feed, emitter, load, negative):
    changes = {
        "bias.feed_ohm": feed,
        "bias.upper": ["1N4148"] * drops,
        "bias.lower": ["1N4148"] * drops,
        "output.emitter_ohm": emitter,
        "load.ohm": load,
        "supply": {"kind": "bench", "positive_v": 15.0, "negative_v": negative},
    }
    circuit = circuit_of(changes)
    curve = transfer_curve(circuit, 15.0, negative)
    assert np.all(np.diff(curve.drive_v) > 0.0)
    assert np.all(np.diff(curve.output_v) >= -1e-12)
    # The gain is a difference over 0.2 mV of currents known to 1e-12 A.
    assert np.all((curve.gain >= -1e-6) & (curve.gain <= 1.0 + 1e-6))
    assert curve.residual_a < 1e-9


# ---- against the ideal pair ----

VT = 0.0256926  # thermal voltage at 25 °C
RE, RL, IS = 0.22, 8.0, 1e-13


def ideal_pair(vq_per_vt: float) -> Circuit:
    """Two exponential devices without base current, battery between the bases (invented)."""
    idle = vq_per_vt * VT / RE
    device = BipolarParams(IS, VT, VT, 1e12, 1e12, 1.0, 1e12)
    battery = VT * np.log1p(idle / IS) + idle * RE

    def half(p: HalfParams) -> HalfParams:
        return p._replace(
            darlington=False,
            device=device,
            first=device,
            r_b=0.0,
            r_e=0.0,
            r_c=1e-6,
            g_1=0.0,
            g_2=0.0,
            r_emitter=RE,
            g_feed=0.0,
            chain=CHAIN_NONE,
            chain_shift=battery,
            catch=BipolarParams(1e-30, 1.0, VT, 1.0, 1.0, 1.0, 1.0),
        )

    circuit = circuit_of()
    load = circuit.load._replace(d=1.0 / RL)
    return circuit._replace(upper=half(circuit.upper), lower=half(circuit.lower), load=load)


@pytest.mark.parametrize("vq_per_vt", [0.5, 1.0, 2.0, 4.0])
def test_the_ideal_pair_follows_the_closed_form(vq_per_vt):
    # i = (Vt / RE) omega(v / Vt + Vq / Vt + ln(Vq / Vt)) for each half, omega the Wright omega
    # function of SciPy; Banwell and Jayakumar, Electronics Letters 36(4), 2000.
    curve = transfer_curve(ideal_pair(vq_per_vt), 20.0, -20.0)
    u = (curve.drive_v - curve.output_v) / VT
    rest = vq_per_vt + np.log(vq_per_vt)
    up, low = wrightomega(rest + u), wrightomega(rest - u)
    middle = np.abs(curve.output_v) < 10.0  # far from saturation
    load_a = VT / RE * (up - low)
    # Left out is the "- 1" of the diode law: 1e-13 A in 0.1 A; the balance is good to 1e-12 A.
    np.testing.assert_allclose(curve.output_v[middle] / RL, load_a[middle], atol=1e-9)
    slope = (up / (1.0 + up) + low / (1.0 + low)) / RE
    wanted = slope / (slope + 1.0 / RL)
    # Differences over 0.2 mV: (0.1 mV / Vt)² / 6 is 3e-6 of the slope of one half.
    np.testing.assert_allclose(curve.gain[middle], wanted[middle], rtol=3e-6)
    assert curve.idle_a == pytest.approx(vq_per_vt * VT / RE, rel=1e-9)


def test_oliver_s_current_makes_the_gain_at_zero_that_of_large_currents():
    # B. M. Oliver, Hewlett-Packard Journal, February 1971: with Vt across each emitter
    # resistance the output resistance at zero, (RE + Vt/Iq) / 2, is RE, as it is far out but for
    # the Vt / i of the half that still conducts.
    def output_ohm(curve: Curve) -> np.ndarray:
        return RL * (1.0 / curve.gain - 1.0)

    curve = transfer_curve(ideal_pair(1.0), 20.0, -20.0)
    ohm = output_ohm(curve)
    middle = np.abs(curve.output_v) < 15.0
    rest = int(np.argmin(np.abs(curve.output_v)))
    assert ohm[rest] == pytest.approx(RE, rel=1e-5)
    far = np.abs(curve.output_v[middle][[0, -1]]) / RL
    assert ohm[middle][[0, -1]] == pytest.approx(RE + VT / far, rel=1e-3)
    # Less current: a dip of gain at zero. More: a bump, gm doubling.
    for vq_per_vt, wanted in ((0.5, 1.5), (2.0, 0.75), (4.0, 0.625)):
        other = transfer_curve(ideal_pair(vq_per_vt), 20.0, -20.0)
        at = int(np.argmin(np.abs(other.output_v)))
        assert output_ohm(other)[at] == pytest.approx(wanted * RE, rel=1e-5)
        assert (at_zero(other) < at_zero(curve)) == (vq_per_vt < 1.0)


# ---- bias and its neighbours ----


def test_class_b_dips_to_nothing_at_zero_and_a_biased_pair_does_not():
    bare = transfer_curve(circuit_of({"bias.upper": [], "bias.lower": []}), 15.0, -15.0)
    # Two Darlington junctions of 1.2 to 1.4 V to the threshold (common practice, no source).
    low, high = bare.dead_zone_v
    assert 2.0 < high - low < 3.0
    assert at_zero(bare) < 0.02
    biased = gain_curves(Bench(load_design("vbe-multiplier")))[0]
    assert biased.dead_zone_v is None
    middle = np.abs(biased.output_v) < 3.0
    assert np.ptp(biased.gain[middle]) < 0.02


@pytest.mark.parametrize("preset", ["full-chain", "small-saggy-transformer", "lopsided-rails"])
def test_a_drop_fewer_dips_deeper_and_a_drop_more_idles_hotter(preset):
    # Common practice, no source.
    drawn_, fewer, more = gain_curves(Bench(load_design(preset)))
    assert at_zero(fewer) < at_zero(drawn_) - 0.1
    assert fewer.idle_a < drawn_.idle_a < more.idle_a
    assert "fewer per half" in fewer.label
    assert "more per half" in more.label


def test_a_multiplier_s_neighbours_are_the_next_values_of_e24():
    # IEC 60063, E24: ... 750, 820, 910 ...
    found = neighbours(load_design("vbe-multiplier"))
    ohms = [each.bias.multiplier.collector_base_ohm for _, each in found]
    assert ohms == [750.0, 910.0]
    assert [label for label, _ in found] == [
        "R1 of the multiplier 750 Ω",
        "R1 of the multiplier 910 Ω",
    ]


def test_only_the_chain_differs_in_a_neighbour():
    design = load_design("mixed-chain")
    for _, other in neighbours(design):
        assert other.model_copy(update={"bias": design.bias}) == design
        assert other.bias != design.bias


def test_neighbours_that_the_design_refuses_are_left_out():
    assert neighbours(load_design("no-chain")) == ()  # nothing feeds a drop
    hot = ["1N4148"] * 4  # one more would ask 5.5 A of a pair that stands 5 A
    design = make_design({"bias.upper": hot, "bias.lower": hot})
    assert [label for label, _ in neighbours(design)] == ["one drop fewer per half"]


def test_a_lone_drop_is_told_by_its_half():
    design = make_design({"bias.upper": ["1N4148"], "bias.lower": []})
    labels = [label for label, _ in neighbours(design)]
    assert labels == ["one drop fewer in the upper half", "one drop more per half"]
    assert describe_chain(design) == "1N4148 above, no chain below"
    assert describe_chain(load_design("full-chain")) == "1N4148 + 2 BAT85"


# Invented: a dead zone of 2 V, then nine tenths of the drive, clipped at 9 V.
DRIVE = [-13.0, -12.0, -11.0, -2.0, -1.5, -1.0, 0.0, 1.0, 1.5, 2.0, 11.0, 12.0, 13.0]
OUTPUT = [-9.0, -9.0, -9.0, -0.9, -0.45, 0.0, 0.0, 0.0, 0.45, 0.9, 9.0, 9.0, 9.0]


def measured_bench(kind: str) -> Bench:
    x, y = DRIVE, OUTPUT
    if kind == "input_v":
        x, y = [k / 23.0 for k in range(-12, 13)], [min(max(k, -9.0), 9.0) for k in range(-12, 13)]
    rows = {kind: x, "output_v": y, "positive_v": 15.0, "load_ohm": 8.0}
    return Bench(make_design({"bias": {}, "measured": rows}))


def test_a_measured_curve_is_drawn_as_it_was_measured():
    (curve,) = gain_curves(measured_bench("drive_v"))
    assert curve.label == "as drawn (measured curve)"
    told = np.interp(DRIVE[3:-3], curve.drive_v, curve.output_v)
    # Its monotone rows are kept to a fraction of a millivolt, between steps of 1/32 V of drive.
    np.testing.assert_allclose(told, OUTPUT[3:-3], atol=5e-3)
    low, high = curve.dead_zone_v
    assert 1.8 < high - low < 2.6


def test_a_measured_closed_loop_tells_nothing_of_its_pair(tmp_path):
    b, found = measure_sheet(measured_bench("input_v").design, ("idle", "square"))
    written = draw_pictures(b, found, tmp_path)
    assert {path.stem for path in written} == {"square-wave"}  # no curves, no temperatures


# ---- sines and courses ----


@pytest.mark.parametrize("frequency", CROSSING_HZ)
def test_a_crossing_starts_its_time_where_the_fundamental_rises_through_zero(frequency):
    found = zero_crossing(bench(), frequency)
    assert found.steady
    assert np.all(np.diff(found.time_s) > 0.0)
    whole = found.output_v - found.residual_v
    peak = (whole.max() - whole.min()) / 2.0
    wave = peak * np.sin(2.0 * np.pi * found.frequency_hz * found.time_s)
    mean = np.mean(whole)
    # The crest falls between samples: (pi / 2048)² / 2 of the peak at most.
    np.testing.assert_allclose(whole, wave + mean, atol=2e-6 * peak)
    assert found.time_s[0] == pytest.approx(-0.25 / frequency, abs=1.0 / frequency / 2000)


def test_a_residual_has_the_rms_of_its_distortion():
    found = zero_crossing(Bench(make_design({"bias.upper": [], "bias.lower": []})), 1000.0)
    fundamental = np.std(found.output_v - found.residual_v)
    # THD counts to 80 kHz, the residual everything: 2 % more in the narrow spikes of class B.
    assert 100.0 * np.std(found.residual_v) / fundamental == pytest.approx(
        found.thd_percent, rel=0.05
    )


def test_a_spectrum_shows_the_harmonics_of_the_analyser():
    found = line_spectrum(bench(), -1.0)
    b = bench()
    peak = b.clip_point.input_peak_v * 10.0 ** (-1.0 / 20.0)
    tone = b.fine_probe.twin().tone(((1000.0, peak),), b.record_s)
    wanted = distortion_of(tone, b.fine_probe.rate_hz)
    count = found.harmonics_db.size
    db = 20.0 * np.log10(np.array(wanted.harmonics_v[:count]) / wanted.fundamental_v)
    loud = db > -200.0
    np.testing.assert_allclose(found.harmonics_db[loud], db[loud], atol=1e-6)
    assert found.harmonics_hz == pytest.approx(found.tone_hz * np.arange(2, count + 2))
    at = int(np.argmin(np.abs(found.frequency_hz - found.tone_hz)))
    assert found.relative_db[at] == pytest.approx(0.0, abs=1e-9)


@given(st.lists(st.floats(-1e3, 1e3), min_size=12, max_size=60), st.integers(1, 12))
def test_a_thinned_trace_holds_every_value(values, pieces):
    trace = np.array(values)
    low, high = thinned(trace, pieces)
    assert low.shape == high.shape == (pieces,)
    kept = trace[: trace.size // pieces * pieces]
    assert low.min() == kept.min()
    assert high.max() == kept.max()
    assert np.all(low <= high)


def test_a_burst_begins_at_time_zero():
    found = burst_course(bench())
    quiet = found.time_s < -1e-3
    loud = (found.time_s > 2e-3) & (found.time_s < BURST_S[1] - 2e-3)
    rest = bench().rest.output_offset_v
    assert np.max(np.abs(found.output_v.high[quiet] - rest)) < 1e-3
    assert found.output_v.high[loud].min() > 0.9 * bench().clip_v
    assert found.positive_v.low[loud].max() < found.positive_v.low[quiet].min()


@given(st.floats(1e-3, 100.0), st.floats(1e-12, 100.0))
def test_a_residual_is_magnified_by_1_2_or_5_and_stays_inside(high, residual):
    times = residual_scale(high, residual)
    mantissa = times / 10.0 ** np.floor(np.log10(times) + 1e-9)
    assert min(abs(mantissa - m) for m in (1.0, 2.0, 5.0)) < 1e-6
    assert times * residual <= 0.56 * high
    assert times <= 100_000.0 * (1.0 + 1e-9)
    if times < 90_000.0:
        assert times * residual > 0.2 * high


# ---- what is drawn ----


def test_the_lines_hold_the_data_as_given():
    b, pictures = bench(), drawn()
    curves = gain_curves(b)
    assert holds(pictures["transfer-curve"], curves[0].drive_v, curves[0].output_v)
    for curve in curves:
        assert holds(pictures["small-signal-gain"], curve.output_v, curve.gain)
    points = idle().together
    assert holds(
        pictures["idle-against-temperature"],
        np.array([p.pair_c for p in points]),
        np.array([p.upper_a for p in points]),
    )
    level = distortion().by_level
    assert holds(
        pictures["thd-against-level"],
        np.array([p.output_v for p in level]),
        np.array([p.harmonics.thd_percent for p in level]),
    )
    for row in distortion().by_frequency:
        assert holds(
            pictures["thd-against-frequency"],
            np.array([p.frequency_hz for p in row]),
            np.array([p.harmonics.thd_percent for p in row]),
        )
    for share in SQUARE_SHARES:
        square = square_course(b, share)
        assert holds(pictures["square-wave"], square.time_s, square.output_v)
    up = power_up_course(b, unequal=True).supplied
    assert holds(pictures["power-up"], up.time_s, up.positive_v.low)
    course = burst_course(b)
    assert holds(pictures["rails-in-burst"], course.time_s, course.negative_v.high)


def test_a_residual_is_drawn_as_often_magnified_as_it_says():
    found = zero_crossing(bench(), 1000.0)
    figure = draw_crossings([found], held_of(bench()))
    (axes,) = figure.axes
    output, residual = (line.get_ydata() for line in axes.get_lines())
    np.testing.assert_array_equal(output, found.output_v)
    said = float(re.search(r"residual × ([0-9.]+)", axes.get_title())[1])
    np.testing.assert_allclose(residual, said * found.residual_v, rtol=1e-12)


def test_temperatures_without_idle_point_are_told_and_not_drawn():
    good, lost = IdleAt(25.0, 25.0, 0.04, 0.04, True), IdleAt(125.0, 25.0, 9.0, 9.0, False)
    sheet = dataclasses.replace(idle(), apart=(good, lost), together=(good,))
    figure = draw_idle(sheet, 25.0, held_of(bench()))
    assert all(x.tolist() == [25.0] for x, _ in lines_of(figure))
    assert any("at 125\u00a0°C" in text.get_text() for text in figure.texts)


def test_unlike_halves_have_a_line_each():
    points = tuple(IdleAt(t, t, 0.04, 0.05, True) for t in (0.0, 50.0))
    sheet = dataclasses.replace(idle(), apart=points, together=points)
    assert len(lines_of(draw_idle(sheet, 25.0, held_of(bench())))) == 4


def test_more_lines_than_looks_are_refused():
    curve = gain_curves(bench())[0]
    with pytest.raises(UsageError, match="5 lines in one picture, expected 4 at most"):
        draw_gain([curve] * 5, held_of(bench()))


@pytest.mark.parametrize("name", NAMES)
def test_lettering_is_large_enough_and_nothing_lies_on_an_axes(name):
    figure = drawn()[name]
    assert figure.get_size_inches()[0] <= 6.7  # text width of an A4 page: drawn at print size
    sizes = [t.get_fontsize() for t in figure.findobj(Text) if t.get_text()]
    assert min(sizes) >= 9.0
    figure.draw_without_rendering()
    boxes = [axes.get_tightbbox() for axes in figure.axes]
    around = [*figure.legends, *figure.texts]
    for artist in around:
        box = artist.get_window_extent()
        assert not any(box.overlaps(other) for other in boxes), artist
        assert box.x1 <= figure.bbox.x1 + 1.0
    assert not any(
        a.get_window_extent().overlaps(b.get_window_extent())
        for k, a in enumerate(around)
        for b in around[k + 1 :]
    )


@pytest.mark.parametrize("name", NAMES)
def test_every_axis_has_a_name_and_a_unit_and_the_caption_the_design(name):
    figure = drawn()[name]
    for axes in figure.axes:
        for label in (axes.get_xlabel(), axes.get_ylabel()):
            assert re.fullmatch(r"[a-z].* \(.+\)", label), label
    caption = figure.texts[-1].get_text()
    assert caption.startswith("bench piece. ")
    assert f"+{held_of(bench()).positive_v:.3g}\u00a0V" in caption  # the rails


@pytest.mark.parametrize("name", NAMES)
def test_lines_in_one_axes_differ_without_their_colour(name):
    for axes in drawn()[name].axes:
        seen = [
            (str(line.get_linestyle()), str(line._dash_pattern), line.get_marker())
            for line in axes.get_lines()
            if not line.get_label().startswith("_")
        ]
        assert len(set(seen)) == len(seen)


def test_colours_stand_out_from_white():
    # WCAG 2.2, 1.4.3: contrast of relative luminances, 4.5 at least (from memory).
    for look in paper.LOOKS:
        rgb = np.array([int(look.color[k : k + 2], 16) / 255.0 for k in (1, 3, 5)])
        linear = np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)
        luminance = linear @ np.array([0.2126, 0.7152, 0.0722])
        assert 1.05 / (luminance + 0.05) >= 4.5


@given(st.floats(1e-9, 1e9))
def test_plain_numbers_have_no_exponent(value):
    told = paper.plain(value)
    assert "e" not in told
    assert float(told) == pytest.approx(value, rel=6e-3)


# ---- files ----


def svg_words(data: bytes) -> str:
    root = ElementTree.fromstring(data)
    texts = root.iter("{http://www.w3.org/2000/svg}text")
    return "\n".join("".join(text.itertext()) for text in texts)


@pytest.mark.parametrize("name", NAMES)
def test_svg_is_well_formed_and_holds_its_words_as_text(name):
    words = svg_words(paper.picture_bytes(drawn()[name], "svg"))
    figure = drawn()[name]
    assert figure.axes[0].get_ylabel() in words
    assert figure.axes[-1].get_xlabel() in words
    assert "bench piece" in words


@pytest.mark.slow
def test_the_same_data_give_the_same_bytes_whatever_the_process_has_set():
    once = {(n, k): paper.picture_bytes(f, k) for n, f in drawn().items() for k in paper.FORMATS}
    with matplotlib.rc_context({"font.size": 20, "lines.linewidth": 5, "svg.fonttype": "path"}):
        again = {
            (n, k): paper.picture_bytes(f, k) for n, f in figures().items() for k in paper.FORMATS
        }
        assert matplotlib.rcParams["font.size"] == 20  # left as it was
    assert once == again


def test_titles_may_hold_anything():
    held = Held('$x$ & <b> "amp" \x01 \u65e5 ' + "w" * 150, 8.0, 15.0, -15.0)
    figure = draw_gain(gain_curves(bench())[:1], held)
    words = svg_words(paper.picture_bytes(figure, "svg"))
    assert '$x$ & <b> "amp"' in words
    assert paper.picture_bytes(figure, "png").startswith(b"\x89PNG")


def test_all_pictures_of_all_sections(tmp_path):
    told: list[float] = []
    folder = tmp_path / "new" / "pictures"
    written = draw_pictures(
        bench(),
        sheet("idle", "power", "distortion", "square", "power_up"),
        folder,
        told.append,
    )
    wanted = [folder / f"{name}.{kind}" for name in NAMES for kind in ("svg", "png")]
    assert sorted(written) == sorted(wanted) == sorted(folder.iterdir())
    assert told == sorted(told)
    assert told[-1] == 1.0
    for path in written:
        data = path.read_bytes()
        assert data.startswith(b"\x89PNG" if path.suffix == ".png" else b"<?xml")
        if path.suffix == ".png":  # 150 dots an inch at least
            assert int.from_bytes(data[16:20], "big") >= 6.7 * 150


def test_sections_that_were_not_measured_have_no_pictures(tmp_path):
    written = draw_pictures(bench(), sheet("idle"), tmp_path)
    assert {path.stem for path in written} == {
        "transfer-curve",
        "small-signal-gain",
        "idle-against-temperature",
    }


def test_pictures_of_ours_are_replaced_and_others_left_alone(tmp_path):
    first = draw_pictures(bench(), sheet(), tmp_path)
    data = [path.read_bytes() for path in first]
    first[0].write_bytes(data[0].replace(b"drive node", b"another word"))
    assert draw_pictures(bench(), sheet(), tmp_path) == first
    assert [path.read_bytes() for path in first] == data
    foreign = tmp_path / "small-signal-gain.png"
    foreign.write_bytes(b"a holiday")
    first[0].unlink()
    with pytest.raises(OutputError, match="does not say that tonesim drew it"):
        draw_pictures(bench(), sheet(), tmp_path)
    assert foreign.read_bytes() == b"a holiday"
    assert not first[0].exists()  # told before anything is drawn


def test_a_folder_that_cannot_be_made_is_told(tmp_path):
    (tmp_path / "file").write_text("x")
    for folder in (tmp_path / "file", tmp_path / "file" / "inside"):
        with pytest.raises(OutputError, match=re.escape(f"the folder {folder} cannot be made")):
            draw_pictures(bench(), sheet(), folder)


def test_a_folder_in_a_picture_s_place_is_told(tmp_path):
    (tmp_path / "small-signal-gain.svg").mkdir()
    with pytest.raises(OutputError, match=r"small-signal-gain\.svg cannot be replaced"):
        draw_pictures(bench(), sheet(), tmp_path)


def test_a_disk_that_is_full_leaves_no_half_picture(tmp_path, monkeypatch):
    def full(self: Path, data: bytes) -> int:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "write_bytes", full)
    with pytest.raises(OutputError, match="No space left on device"):
        draw_pictures(bench(), sheet(), tmp_path)
    assert list(tmp_path.iterdir()) == []


def test_drawing_keeps_no_global_figures():
    code = "import sys, tonesim.plot; print('matplotlib.pyplot' in sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
