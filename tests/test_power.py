"""Power ratings, heat, sag, ripple, recovery: clipped sines, class B, RC sections, rails at rest.

Sources: Boylestad & Nashelsky, "Electronic Devices and Circuit Theory", and Sedra & Smith,
"Microelectronic Circuits" (largest loss of class B); clip series computed by us.
"""

import functools
import math

import numpy as np
import pytest
from bench_pieces import class_ab_bench, class_b_bench, class_b_power, opamp, reference_bench
from conftest import make_design
from scipy.optimize import brentq, minimize_scalar

from tonesim.bench import Bench, measure
from tonesim.circuit import load_impedance
from tonesim.curve import rail_at_rest
from tonesim.design import Design
from tonesim.designfile import load_design, replace
from tonesim.power import (
    THD_LEVELS,
    PowerSheet,
    burst_trace,
    heat_at,
    hum_at_idle,
    level_of_thd,
    measure_power,
    rail_in_burst,
    thd_at,
)

RATE = 384_000.0


@functools.cache
def class_ab_sheet() -> PowerSheet:
    return measure_power(class_ab_bench())


@functools.cache
def mains_bench() -> Bench:
    return Bench(load_design("full-chain"))


@functools.cache
def mains_sheet() -> tuple[PowerSheet, tuple[float, ...]]:
    told: list[float] = []
    return measure_power(mains_bench(), told.append), tuple(told)


# ---- power at a distortion ----


def clipped(a: float) -> tuple[float, float]:
    """THD and power of a unit sine clipped at a; closed form (computed by us)."""
    phi = math.asin(a)
    b1 = (2.0 * phi + math.sin(2.0 * phi)) / math.pi
    square = (phi / 2.0 - math.sin(2.0 * phi) / 4.0 + a**2 * (math.pi / 2.0 - phi)) * 2.0 / math.pi
    return math.sqrt(max(2.0 * square - b1**2, 0.0)) / b1, square


def clip_for(thd: float) -> float:
    return float(brentq(lambda a: clipped(a)[0] - thd, 0.05, 0.99999))


def test_power_at_one_and_ten_per_cent_is_that_of_a_clipped_sine():
    # Total power against a sine that just clips: 1.0475 at 1 %, 1.2878 at 10 % (computed by us).
    for thd, ratio in ((0.01, 1.0475), (0.1, 1.2878)):
        a = clip_for(thd)
        assert clipped(a)[1] / (a**2 / 2.0) == pytest.approx(ratio, abs=1e-4)
    one, ten = class_ab_sheet().at_thd
    assert one is not None
    assert ten is not None
    # Stiff rails, both halves alike, one device's worth of knee: within half a per cent.
    assert ten.load_w / one.load_w == pytest.approx(1.2878 / 1.0475, rel=5e-3)
    level = class_ab_bench().clip_v
    assert one.load_w == pytest.approx(1.0475 * level**2 / 16.0, rel=0.01)


def test_ratings_are_read_at_their_distortion():
    for thd, found in zip(THD_LEVELS, class_ab_sheet().at_thd, strict=True):
        assert found is not None
        assert found.harmonics.thd_f == pytest.approx(thd, rel=1e-3)
        assert thd_at(class_ab_bench(), found.input_peak_v) == pytest.approx(thd, rel=1e-3)
        assert found.steady
    powers = [class_ab_sheet().clip_point.load_w, *(r.load_w for r in class_ab_sheet().at_thd if r)]
    assert powers == sorted(powers)


def test_a_stage_that_distorts_more_before_it_clips_has_no_such_rating():
    # A slow op-amp leaves the dead zone to itself: above 1 % at 1 kHz before clipping.
    design = replace(
        reference_bench("none").design, **{"driver.part": opamp("TL072", gain_bandwidth_hz=3e5)}
    )
    bench = Bench(design)
    assert thd_at(bench, 0.9 * bench.clip_point.input_peak_v) > 0.01
    assert level_of_thd(bench, 0.01) is None
    assert level_of_thd(bench, 0.1) is not None


# ---- heat ----


def test_class_b_is_hottest_at_two_over_pi_of_its_rail():
    # Boylestad & Nashelsky, ch. 12; Sedra & Smith: Vcc^2 / (pi^2 RL) in each, at Vp = 2 Vcc/pi.
    bench = class_b_bench()

    def heat(peak: float) -> float:
        return heat_at(bench.probe.twin(), 1000.0, peak / bench.gain, 1.0).hotter_w

    best = minimize_scalar(lambda v: -heat(v), bounds=(10.0, 21.0), options={"xatol": 0.02})
    assert best.x == pytest.approx(48.0 / math.pi, rel=0.01)
    # The bases' current, a thousandth, is in it (see test_bench.py).
    assert -best.fun == pytest.approx(24.0**2 / (math.pi**2 * 8.0), rel=2e-3)


def test_the_sheet_s_worst_level_is_near_it():
    sheet = class_b_power()
    hottest = sheet.worst
    # Steps of a tenth of the level pass a flat top by 0.7 % at most.
    assert hottest.hotter_w == pytest.approx(24.0**2 / (math.pi**2 * 8.0), rel=0.01)
    peak = hottest.share * sheet.clip_point.input_peak_v * class_b_bench().gain
    assert peak == pytest.approx(48.0 / math.pi, rel=0.1)
    assert sheet.worst_loudspeaker is None
    assert sheet.loudspeaker_heat == ()
    assert hottest.hotter_w == max(max(h.upper_w, h.lower_w) for h in sheet.heat)


def test_a_loudspeaker_heats_a_pair_more_where_its_phase_turns():
    sheet, _ = mains_sheet()
    worst = sheet.worst_loudspeaker
    assert worst is not None
    circuit = mains_bench().stage.circuit
    z = load_impedance(circuit.load, np.array([h.frequency_hz for h in sheet.loudspeaker_heat]))
    # Somewhere it is inductive, somewhere capacitive, and somewhere near its least impedance.
    angles = np.degrees(np.angle(z))
    assert np.max(angles) > 20.0
    assert np.min(angles) < -20.0
    assert np.min(np.abs(z)) < 1.05 * np.min(
        np.abs(load_impedance(circuit.load, np.geomspace(100, 2e3, 500)))
    )
    # PD = 2 Vcc Vp/(pi |Z|) - Vp^2 cos(theta)/(2 |Z|) for both, ideal class B (computed by us), of
    # the loudspeaker's angle and the rails as they sag; the idle current of the chain, 1.1 W in
    # each without a signal, still shows: within a quarter.
    clip_v = sheet.clip_point.input_peak_v
    for heat, impedance in zip(sheet.loudspeaker_heat, z, strict=True):
        if heat.share != 0.8:
            continue
        peak = heat.share * clip_v * mains_bench().gain
        both = 2.0 * sheet.clip_point.positive_mean_v * peak / (math.pi * abs(impedance))
        both -= peak**2 * np.cos(np.angle(impedance)) / (2.0 * abs(impedance))
        assert heat.upper_w + heat.lower_w == pytest.approx(both, rel=0.25)


# ---- rails ----


def battery(internal_ohm: float, decoupling_f: float) -> Design:
    return make_design(
        {
            "bias": {},
            "supply": {
                "kind": "battery",
                "positive_v": 15.0,
                "internal_ohm": internal_ohm,
                "decoupling_f": decoupling_f,
            },
        }
    )


def test_on_a_stiff_supply_nothing_sags():
    for burst in (class_ab_sheet().positive_burst, class_ab_sheet().negative_burst):
        assert burst.sag == 0.0
        assert burst.recovery_s == 0.0
        assert burst.idle_v == burst.sagged_v == burst.lowest_v == 15.0
    assert class_ab_sheet().hum_idle_v == class_ab_sheet().hum_full_v == 0.0
    assert class_ab_sheet().ripple_idle_v == (0.0, 0.0)


@pytest.mark.parametrize("farad", [20e-3, 47e-3])
def test_a_battery_s_rail_recovers_in_rc_times_ln_twenty(farad):
    ohm = 0.6
    bench = Bench(battery(ohm, farad))
    trace = burst_trace(bench)
    for rail in (trace.positive_v, trace.negative_v):
        found = rail_in_burst(rail, RATE, 0.0)
        assert found.recovery_s is not None
        # 5 % of the sag are left after RC ln 20; ripple at 1 kHz (period over RC, 2 to 8 %) moves
        # where the burst leaves the rail by half of itself.
        assert found.recovery_s == pytest.approx(ohm * farad * math.log(20.0), rel=0.05)
    # Ohm's law: the sag is the resistance times what the burst draws beyond idle.
    assert found.sag * found.idle_v == pytest.approx(ohm * extra_draw(bench), rel=0.02)


def extra_draw(bench: Bench) -> float:
    probe = bench.probe.twin()
    reading = measure(probe, 1000.0, bench.clip_point.input_peak_v, 0.02)
    return reading.draw_negative_a - bench.rest.lower.draw_a


def test_what_recovers_within_a_cycle_is_not_told_as_a_cycle():
    ohm, farad = 0.15, 470e-6
    bench = Bench(battery(ohm, farad))
    trace = burst_trace(bench)
    upper, lower = (rail_in_burst(r, RATE, 0.0) for r in (trace.positive_v, trace.negative_v))
    # The burst ends as the lower half's turn does: the upper rail is back already. The lower one
    # is an RC section behind a half sine of pi times its mean, which at its end still holds
    # pi a (1 + exp(-pi / a)) / (1 + a^2) of the mean, a = 2 pi f RC.
    assert upper.recovery_s == 0.0
    a = 2.0 * math.pi * 1000.0 * ohm * farad
    left = math.pi * a * (1.0 + math.exp(-math.pi / a)) / (1.0 + a**2)
    # 0.22 ms; the crossover takes a little off the half sine's end.
    assert lower.recovery_s == pytest.approx(ohm * farad * math.log(20.0 * left), rel=0.05)


@pytest.mark.parametrize(("tau", "sag"), [(0.03, 1.0), (0.08, 2.5)])
def test_a_synthetic_rail_is_read_as_it_was_made(tau, sag):
    # Exponential sag and recovery, a pure RC section.
    t = np.arange(round(1.0 * RATE)) / RATE
    rail = np.full(t.size, 20.0)
    on, off = (t >= 0.1) & (t < 0.4), t >= 0.4
    rail[on] -= sag * -np.expm1(-(t[on] - 0.1) / tau)
    end = sag * -math.expm1(-0.3 / tau)
    rail[off] -= end * np.exp(-(t[off] - 0.4) / tau)
    found = rail_in_burst(rail, RATE, 0.0)
    assert found.idle_v == pytest.approx(20.0, abs=1e-9)
    assert found.recovery_s == pytest.approx(tau * math.log(20.0), rel=5e-3)
    assert found.sagged_v == pytest.approx(20.0 - end, abs=2e-3 * sag)
    assert found.lowest_v == pytest.approx(20.0 - end, abs=1e-3)
    # With ripple of the mains a whole cycle must be back: half a cycle later, for its mean.
    ripple = 0.2 * np.abs(np.sin(2.0 * np.pi * 50.0 * t))
    late = rail_in_burst(rail + ripple, RATE, 50.0)
    assert late.recovery_s is not None
    assert 0.005 < late.recovery_s - tau * math.log(20.0) < 0.02


def test_a_rail_that_does_not_come_back_has_no_time():
    t = np.arange(round(1.0 * RATE)) / RATE
    rail = np.where(t < 0.1, 20.0, 18.0)
    assert rail_in_burst(rail, RATE, 0.0).recovery_s is None


def test_sag_and_ripple_at_full_output_are_those_of_a_rail_with_that_current():
    # `curve.rail_at_rest` solves the rectifier with a constant current of the same mean.
    sheet, _ = mains_sheet()
    point, circuit = sheet.clip_point, mains_bench().stage.circuit
    for rail, draw, mean, high, low in (
        (
            circuit.rail_positive,
            point.draw_positive_a,
            point.positive_mean_v,
            point.positive_highest_v,
            point.positive_lowest_v,
        ),
        (
            circuit.rail_negative,
            point.draw_negative_a,
            point.negative_mean_v,
            point.negative_highest_v,
            point.negative_lowest_v,
        ),
    ):
        still = rail_at_rest(rail, draw, circuit.mains_hz)
        assert mean == pytest.approx(still.mean_v, rel=2e-3)
        # Half sines of 1 kHz add their own charge to the ripple: Ip T / (2 pi C), a tenth.
        peak_a = point.output_v * math.sqrt(2.0) / 8.0
        own = peak_a * 1e-3 / (2.0 * math.pi * rail.c) * 2.0 + peak_a * rail.esr
        assert still.highest_v - still.lowest_v < high - low
        assert high - low < still.highest_v - still.lowest_v + own


def test_ripple_of_a_light_load_is_the_textbook_s():
    # Sedra & Smith, peak rectifier: Vr = I / (2 f C) for a full-wave one, from above: the
    # conduction angle of a winding of half an ohm makes it less.
    sheet, _ = mains_sheet()
    rest = mains_bench().rest
    for ripple, draw in zip(
        sheet.ripple_idle_v, (rest.upper.draw_a, rest.lower.draw_a), strict=True
    ):
        textbook = draw / (2.0 * 50.0 * 4700e-6)
        assert 0.75 * textbook < ripple < 1.02 * textbook


def test_the_burst_begins_at_idle_and_sags_to_the_steady_state():
    sheet, _ = mains_sheet()
    for burst, idle, full in (
        (sheet.positive_burst, mains_bench().rest.upper.rail_v, sheet.clip_point.positive_mean_v),
        (sheet.negative_burst, mains_bench().rest.lower.rail_v, sheet.clip_point.negative_mean_v),
    ):
        assert burst.idle_v == pytest.approx(idle, rel=5e-4)
        assert burst.sagged_v == pytest.approx(full, rel=5e-3)
        assert burst.lowest_v < burst.sagged_v
        assert burst.recovery_s is not None
        assert burst.sag == pytest.approx(1.0 - full / idle, rel=0.05)


def test_hum_at_idle_is_that_of_a_silent_run():
    bench = mains_bench()
    y = bench.probe.twin().run(np.zeros(round(0.1 * RATE)))
    spectrum = np.abs(np.fft.rfft(y - y.mean())) / y.size * math.sqrt(2.0)
    # Parseval.
    assert hum_at_idle(bench) == pytest.approx(float(np.sqrt(np.sum(spectrum**2))), abs=1e-12)


def test_hum_at_full_output_is_the_mains_lines_and_its_sidebands():
    sheet, _ = mains_sheet()
    point = sheet.clip_point
    tone = mains_bench().probe.twin().tone(((1000.0, point.input_peak_v),), 0.1)
    lines = np.abs(np.fft.rfft(tone.output_v)) * 2.0 / tone.output_v.size
    # Multiples of 50 Hz (5 cycles in the record), alone and around the tone, by plain numpy.
    mains, first = 5 * np.arange(1, 21), tone.cycles[0]
    hum = np.unique(np.concatenate([mains, first + mains, np.abs(first - mains)]))
    rms = math.sqrt(float(np.sum(lines[hum] ** 2)) / 2.0)
    assert sheet.hum_full_v == pytest.approx(rms, rel=1e-3)
    assert rms > 1e-4  # crests just clip on rails that ripple


# ---- the sheet ----


def test_progress_rises_to_one_and_every_run_is_counted():
    sheet, told = mains_sheet()
    assert list(told) == sorted(told)
    assert told[-1] == 1.0
    assert sheet.solved.unsettled_steps == 0
    # The clip point's search, two THD levels, 20 tones of heat, a burst: seconds of steps.
    assert sheet.solved.steps > 10.0 * RATE
    assert sheet.burst_s == pytest.approx(0.3)


def test_the_reference_circuit_s_clip_point_is_just_above_its_test_level():
    # Common practice, no source (see test_facts_of_the_trade.py): it clips above 11.14 V.
    bench = reference_bench("three")
    point = bench.clip_point
    assert 0.5 < point.input_peak_v < 0.56
    assert 11.14 < point.output_v * math.sqrt(2.0) < 12.5
    assert point.load_w == pytest.approx(point.output_v**2 / 10.0, rel=1e-3)
