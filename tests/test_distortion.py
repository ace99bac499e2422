"""Distortion over level and frequency: clipped sines in closed form, the floor, steps, two tones.

Series of the symmetric hard clip: b1 = A (2 phi + sin 2 phi) / pi and so on, sin phi = c/A
(computed by us; test_harmonics.py holds the analyser to them).
"""

import functools
import itertools
import math

import numpy as np
import pytest
from bench_pieces import SILICON, class_ab, class_ab_bench, reference_bench, reference_sheet
from conftest import make_design

from tonesim.bench import Bench
from tonesim.distortion import (
    LEVELS_DB,
    DistortionPoint,
    DistortionSheet,
    levels_db,
    measure_intermodulation,
    measure_point,
)
from tonesim.probe import Probe

# Chains as shipped in the presets, a pair of each kind; rails of 15 V and 8 ohm for all.
SCHOTTKY = "BAT85"
KINDS = {
    "no chain": {"bias": {}},
    "partial": {},
    "three drops": {"bias.upper": [SILICON, SILICON]},
    "mixed": {"bias.upper": [SILICON, SILICON], "bias.lower": [SILICON, "1N34A"]},
    "full": {"bias.upper": [SILICON, *[SCHOTTKY] * 2], "bias.lower": [SILICON, *[SCHOTTKY] * 2]},
    "multiplier": {
        "bias": {
            "feed_ohm": 3300.0,
            "multiplier": {
                "part": "BC547",
                "collector_base_ohm": 820.0,
                "base_emitter_ohm": 1000.0,
            },
        }
    },
    "single pair": {
        "bias": {},
        "output": {"upper": "TIP41C", "lower": "TIP42C"},
        "driver": {"part": "NJM4558", "feedback_ohm": "22k", "ground_leg_ohm": "1k"},
    },
}


@functools.cache
def kind(name: str) -> Bench:
    return Bench(make_design(KINDS[name]))


def sheet() -> DistortionSheet:
    found = reference_sheet()[1].distortion
    assert found is not None
    return found


# ---- what the figures stand on ----


@pytest.mark.parametrize("name", KINDS)
def test_the_floor_of_the_computation_is_below_120_db(name):
    bench = kind(name)
    floor = measure_point(bench, bench.still_probe.twin(), 1000.0, LEVELS_DB[0])
    # Worst found: -138 dB of the unbiased Darlington; chains -160 to -190 dB.
    assert floor.floor_db <= -120.0
    assert floor.steady
    assert bench.solved.unsettled_steps == 0


@pytest.mark.parametrize("name", ["no chain", "partial", "full", "single pair"])
def test_half_the_step_changes_distortion_by_a_thousandth_at_most(name):
    bench = kind(name)
    at_level = functools.partial(measure_point, frequency_hz=1000.0, level_db=-1.0)
    found = at_level(bench, bench.still_probe.twin()).harmonics.thd_f
    finer = at_level(bench, Probe(bench.stiff, 16)).harmonics.thd_f
    # 3e-4 found in unbiased stages, 0.003 dB; a second-order rule leaves a third of it.
    assert finer == pytest.approx(found, rel=1e-3)


def test_the_sheet_says_how_far_down_its_floor_is():
    assert -300.0 < sheet().floor_db <= -120.0
    assert all(point.steady for point in sheet().by_level)
    assert all(point.steady for row in sheet().by_frequency for point in row)
    assert all(pair.steady for pair in sheet().intermodulation)
    assert sheet().solved.unsettled_steps == 0


# ---- clipped sines ----


def clip_thd(a: float) -> float:
    """THD of a unit sine clipped at a."""
    phi = math.asin(a)
    b1 = (2.0 * phi + math.sin(2.0 * phi)) / math.pi
    square = (phi / 2.0 - math.sin(2.0 * phi) / 4.0 + a**2 * (math.pi / 2.0 - phi)) * 2.0 / math.pi
    return math.sqrt(2.0 * square - b1**2) / b1


def test_the_closed_form_gives_the_printed_figures():
    for a, percent in ((0.5, 23.294), (0.7071, 13.420), (0.9, 4.220)):
        assert 100.0 * clip_thd(a) == pytest.approx(percent, abs=1e-3)


@pytest.mark.parametrize(("level_db", "a"), [(6.0206, 0.5), (3.0103, math.sqrt(0.5))])
def test_past_clipping_a_stage_distorts_as_a_clipped_sine(level_db, a):
    bench = class_ab_bench()
    point = measure_point(bench, bench.fine_probe.twin(), 1000.0, level_db)
    # At the clip point the crest is 1 % short, so this much overdrive counts from 0.99 of it.
    assert point.harmonics.thd_f == pytest.approx(clip_thd(0.99 * a), rel=5e-3)
    # 23.29 % and 13.42 % themselves, with that per cent in it.
    assert point.harmonics.thd_f == pytest.approx(clip_thd(a), rel=0.04)
    # Both halves alike: no even harmonics to speak of; the third flattens the crest.
    assert max(point.harmonics.harmonics_v[0::2]) < 1e-6 * point.harmonics.fundamental_v
    assert point.harmonics.phases_rad[1] == pytest.approx(0.0, abs=0.05)


def test_crossover_narrows_the_crossing():
    bench = reference_bench("none")
    point = measure_point(bench, bench.fine_probe.twin(), 1000.0, -20.0)
    # Dead-zone series: the third lies against the fundamental; the loop turns it by under 90
    # degrees, as it subtracts a gap that lasts.
    assert abs(point.harmonics.phases_rad[1]) > math.pi / 2.0


# ---- the sweeps ----


def test_levels_go_from_ten_millivolts_to_six_decibels_past_clipping():
    bench = reference_sheet()[0]
    levels = levels_db(bench)
    assert levels == tuple(sorted(levels))
    assert levels[-1] == 6.0
    full = bench.clip_point.input_peak_v * bench.gain / math.sqrt(2.0)
    assert full * 10.0 ** (levels[0] / 20.0) == pytest.approx(0.010, rel=1e-9)
    points = sheet().by_level
    assert tuple(point.level_db for point in points) == levels
    # The fundamental of a biased stage is what the gain asks for, within its crossover's few %.
    assert points[0].output_v == pytest.approx(0.010, rel=0.02)
    for point in points:
        assert point.output_w == pytest.approx(point.output_v**2 / 10.0)
    for one, other in itertools.pairwise(points):
        assert other.output_v > one.output_v


def test_distortion_falls_to_the_clip_point_and_rises_steeply_past_it():
    points = {point.level_db: point.harmonics.thd_percent for point in sheet().by_level}
    assert points[-0.5] < points[-3.0] < 1.0
    past = [points[level] for level in (0.0, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0)]
    assert past == sorted(past)
    # 6 dB past clipping: 23.3 % (closed form), with unlike halves and a soft knee.
    assert points[6.0] == pytest.approx(100.0 * clip_thd(0.5), rel=0.05)
    lowest = sheet().lowest
    assert lowest.harmonics.thd_percent == min(points.values())


def test_frequencies_rise_and_stay_near_the_round_ones():
    wanted = (20, 30, 50, 100, 200, 500, 1e3, 2e3, 5e3, 7e3, 10e3, 15e3, 20e3, 30e3, 40e3)
    for level, row in zip(LEVELS_DB, sheet().by_frequency, strict=True):
        found = [point.frequency_hz for point in row]
        assert found == sorted(found)
        # A record of half a second below 150 Hz, a tenth to 900 Hz, a fiftieth above: to the next
        # number of cycles without common divisor with the frames it is 2 cycles at most.
        assert found == pytest.approx(wanted, rel=0.14)
        assert all(point.level_db == level for point in row)
        assert found[4:] == pytest.approx(wanted[4:], rel=0.055)


def test_crossover_rises_with_frequency_as_the_loop_gain_falls():
    for level, row in zip(LEVELS_DB, sheet().by_frequency, strict=True):
        thd = [point.harmonics.thd_percent for point in row]
        assert thd == sorted(thd)
        # The facts of the trade: 1 to 10 to 20 kHz (common practice, no source).
        at = {round(point.frequency_hz / 1e3): point.harmonics.thd_percent for point in row}
        if level == -1.0:
            assert 2.0 < at[10] / at[1] < 12.0
            assert 1.4 < at[20] / at[10] < 2.2


def test_low_tones_distort_in_proportion_to_frequency():
    # Far below the corner of a loop of one pole its gain doubles as the frequency halves, and what
    # crossover leaves does so too; the duration of the gap keeps its share of the period.
    row = sheet().by_frequency[0]
    at = {round(p.frequency_hz): p.harmonics.thd_f / p.frequency_hz for p in row}
    assert at[46] == pytest.approx(at[22], rel=0.1)


# ---- two tones ----


@functools.cache
def still_pair() -> Bench:
    return Bench(class_ab())


def test_two_tones_through_a_known_curve_by_another_reader(monkeypatch):
    # The stage replaced by y = x + 0.01 x^2 + 0.02 x^3 at 1 V crest: d2 1.568935 %, d3 1.882722 %,
    # 2.450755 % in all; difference d2 0.24722 %, d3 0.37083 % (computed by us, closed form).
    bench = still_pair()
    scale = bench.clip_point.input_peak_v

    def bent(self: Probe, x: np.ndarray) -> np.ndarray:
        v = x / scale
        return v + 0.01 * v**2 + 0.02 * v**3

    probe = bench.probe.twin()
    monkeypatch.setattr(Probe, "run", bent)
    found = measure_intermodulation(bench, probe, 0.0)
    assert 100.0 * found.modulation.d2 == pytest.approx(1.568935, abs=1e-5)
    assert 100.0 * found.modulation.d3 == pytest.approx(1.882722, abs=1e-5)
    assert 100.0 * found.modulation.total == pytest.approx(2.450755, abs=1e-5)
    assert 100.0 * found.difference.d2 == pytest.approx(0.24722, abs=1e-5)
    assert 100.0 * found.difference.d3 == pytest.approx(0.37083, abs=1e-5)
    assert found.steady


def test_a_single_tone_through_the_same_curve(monkeypatch):
    bench = still_pair()
    scale = bench.clip_point.input_peak_v
    probe = bench.probe.twin()
    monkeypatch.setattr(Probe, "run", lambda self, x: (v := x / scale) + 0.01 * v**2 + 0.02 * v**3)
    point = measure_point(bench, probe, 1000.0, 0.0)
    # H1 1.0150, H2 0.0050, H3 0.0050, THD 0.696657 % (computed by us).
    assert point.harmonics.fundamental_v == pytest.approx(1.0150, abs=1e-9)
    assert point.harmonics.harmonics_v[:2] == pytest.approx((0.0050, 0.0050), abs=1e-9)
    assert point.harmonics.thd_percent == pytest.approx(0.696657, abs=1e-6)
    assert point.output_v == pytest.approx(1.0150 / math.sqrt(2.0))
    # A line or the rounding of them: nothing is left.
    assert point.floor_db < -250.0


def test_both_two_tone_measures_rise_as_the_level_falls_with_crossover():
    pairs = sheet().intermodulation
    assert [pair.level_db for pair in pairs] == list(LEVELS_DB)
    for name in ("modulation", "difference"):
        thirds = [getattr(pair, name).d3 for pair in pairs]
        assert thirds == sorted(thirds)
    # Rule of thumb: modulation distortion is a few times the harmonic distortion of its crest.
    loud = {p.level_db: p for p in sheet().by_level}[-1.0]
    assert 0.5 < pairs[0].modulation.total / loud.harmonics.thd_f < 5.0


def test_a_point_is_plain_numbers():
    point = sheet().by_level[0]
    assert isinstance(point, DistortionPoint)
    assert {type(v) for v in (point.output_v, point.output_w, point.floor_db)} == {float}
