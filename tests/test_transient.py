"""Square waves and power-up: single-pole rises, slew, the dead zone's time, offset and silence.

Rise time of one pole from 10 to 90 %: ln 9 / (2 pi f) = 0.35 / f, any handbook of pulse circuits.
"""

import functools
import math

import numpy as np
import pytest
from bench_pieces import SILICON, class_ab, opamp, reference_sheet, strong
from conftest import make_design

from tonesim.bench import Bench
from tonesim.catalogue import conduction
from tonesim.design import Design
from tonesim.designfile import load_design, replace
from tonesim.probe import Trace
from tonesim.transient import (
    RAMP_S,
    SQUARE_SHARES,
    SquareReading,
    measure_power_up,
    measure_squares,
    power_up,
    read_square,
    square_trace,
)

TWO = [SILICON, SILICON]


def loop_of(gbw: float, slew: float, **changes: object) -> Design:
    """A biased stage into a light load, gain 23: next to nothing but the loop."""
    part = strong(gain_bandwidth_hz=gbw, slew_v_per_s=slew)
    return class_ab(
        driver={"part": part, "feedback_ohm": "22k", "ground_leg_ohm": "1k"},
        bias={"feed_ohm": "10k", "upper": TWO, "lower": TWO},
        load={"ohm": 1000.0},
        **changes,
    )


@functools.cache
def squares(gbw: float, slew: float) -> tuple[SquareReading, ...]:
    found = measure_squares(Bench(loop_of(gbw, slew)))
    assert found.unsettled_steps == 0
    assert len(found.readings) == len(SQUARE_SHARES)
    return found.readings


# ---- square waves ----


# 3 MHz over 23: f-3dB 130.43 kHz, rise 2.683 us; 10 MHz over 23: 0.805 us (computed by us). The
# follower's gain is under 2 % short of 1, and the loop as much slower.
@pytest.mark.parametrize(("gbw", "microseconds"), [(3e6, 2.683), (10e6, 0.805)])
def test_a_loop_of_one_pole_rises_in_0_35_over_its_bandwidth(gbw, microseconds):
    small, large = squares(gbw, 1e9)
    for reading in (small, large):
        assert 1e6 * reading.rise_s == pytest.approx(microseconds, rel=0.025)
        assert reading.settled
        assert reading.overshoot < 1e-6
        assert reading.dead_s == 0.0
        # Steepest at the start: the whole step over one time constant, rise / ln 9, which the
        # trapezoidal rule rounds by (1 + dt / 2 tau)^2.
        tau = reading.rise_s / math.log(9.0)
        expected = 2.0 * reading.peak_v / tau / (1.0 + 0.5 / (64 * 384e3) / tau) ** 2
        assert reading.slew_v_per_s == pytest.approx(expected, rel=0.02)


# RC4558 1.7 V/us (data sheet), TL072 13 to 16 V/us.
@pytest.mark.parametrize("slew", [0.5e6, 1.7e6, 13e6])
def test_a_large_step_rises_at_the_slew_rate(slew):
    _, large = squares(100e6, slew)
    # Of the follower's 98 %.
    assert large.slew_v_per_s == pytest.approx(slew, rel=0.03)
    assert large.rise_s == pytest.approx(0.8 * 2.0 * large.peak_v / slew, rel=0.05)


def test_a_square_wave_that_has_no_time_to_settle_says_so():
    _, large = squares(100e6, 0.05e6)  # 16 V would take 0.3 ms
    assert not large.settled


def test_a_trace_is_low_high_low_of_the_share_asked_for():
    bench = Bench(loop_of(10e6, 1e9))
    probe, trace = square_trace(bench, 0.5)
    n = trace.output_v.size // 3
    assert n == probe.frames(0.5 / 2500.0)
    level = 0.5 * bench.clip_v
    for part, sign in ((0, -1.0), (1, 1.0), (2, -1.0)):
        end = trace.output_v[(part + 1) * n - 1]
        assert end == pytest.approx(sign * level, rel=1e-3)


def synthetic(y: np.ndarray, upper: np.ndarray, lower: np.ndarray) -> Trace:
    nothing = np.zeros_like(y)
    return Trace(y, nothing, nothing, nothing + 15.0, nothing + 15.0, upper, lower, nothing)


@pytest.mark.parametrize(("damping", "percent"), [(0.3873, 26.72), (0.7583, 2.59)])
def test_overshoot_of_two_poles_is_read_as_the_textbook_has_it(damping, percent):
    # exp(-pi z / sqrt(1 - z^2)): the figures of GBW 10 MHz, G 2, second pole 3 MHz and of 3 MHz,
    # 23, 300 kHz (computed by us).
    rate, n = 20e6, 8000
    t = np.arange(n) / rate
    w, root = 2.0 * np.pi * 150e3, math.sqrt(1.0 - damping**2)
    angle = w * root * t
    rise = 1.0 - np.exp(-damping * w * t) * (np.cos(angle) + damping / root * np.sin(angle))
    up = 2.0 * rise - 1.0
    y = np.concatenate([-np.ones(n), up, -up])
    found = read_square(synthetic(y, np.ones_like(y), np.ones_like(y)), rate, 1.0)
    assert 100.0 * found.overshoot == pytest.approx(percent, abs=0.02)
    assert found.settled
    assert found.peak_v == 1.0
    # 10 to 90 %, interpolated: by numpy on the same edge, up to its first crest.
    edge, times = rise[: n // 8], t[: n // 8]
    edge, times = edge[: np.argmax(edge)], times[: np.argmax(edge)]
    expected = np.interp(0.9, edge, times) - np.interp(0.1, edge, times)
    assert found.rise_s == pytest.approx(expected, rel=1e-3)


def test_the_time_both_halves_are_off_is_counted_at_two_per_cent():
    rate, n = 1e6, 3000
    upper, lower = np.ones(n), np.zeros(n)
    upper[1000:1007] = 0.0199
    upper[2000:2003] = 0.0201
    found = read_square(synthetic(np.repeat([-1.0, 1.0, -1.0], 1000), upper, lower), rate, 1.0)
    assert found.dead_s == pytest.approx(7e-6)


# ---- dead zone ----


@pytest.mark.parametrize("slew", [0.5e6, 1.7e6])
def test_an_unbiased_pair_is_off_as_long_as_the_driver_slews_across_it(slew):
    # 1.3 V over the slew rate: 2.60 us of a 741, 0.765 us at 1.7 V/us (computed by us). Exactly:
    # from 2 % of one half's current to 2 % of the other's the drive node goes two base-emitter
    # voltages, and the output its own 2 % twice.
    part = strong(slew_v_per_s=slew)
    design = make_design(
        {
            "bias": {},
            "driver": {"part": part, "feedback_ohm": "22k", "ground_leg_ohm": "1k"},
            "output": {"upper": "TIP41C", "lower": "TIP42C", "emitter_ohm": 0.0},
        }
    )
    _, large = measure_squares(Bench(design)).readings
    edge = 0.02 * large.peak_v
    drops = sum(
        conduction(each, edge / 8.0).vbe_v for each in (design.output.upper, design.output.lower)
    )
    # Two steps of 41 ns more or less, and the op-amp's own few per cent below its slew rate.
    assert large.dead_s == pytest.approx((drops + 2.0 * edge) / slew, rel=0.06, abs=8.2e-8)
    assert 1.1 < drops < 1.4
    assert 0.8 < large.dead_s / (1.3 / slew) < 1.3


def test_halves_that_overlap_are_never_both_off():
    for reading in measure_squares(Bench(load_design("hot-chain"))).readings:
        assert reading.dead_s == 0.0


def test_each_drop_shortens_the_dead_time():
    _, none = measure_squares(Bench(make_design({"bias": {}}))).readings
    _, one = measure_squares(Bench(make_design())).readings
    found = reference_sheet()[1].square
    assert found is not None
    assert none.dead_s > one.dead_s > found.readings[1].dead_s


# ---- power-up ----


@functools.cache
def full() -> Bench:
    return Bench(load_design("full-chain"))


def test_a_symmetric_design_comes_up_in_silence():
    sheet = measure_power_up(full())
    assert sheet.ramp_s is None  # from the mains
    assert sheet.unsettled_steps == 0
    assert [(t.loaded, t.unequal) for t in sheet.thumps] == [
        (True, False),
        (False, False),
        (True, True),
        (False, True),
    ]
    for thump in sheet.thumps[:2]:
        assert abs(thump.peak_v) < 1e-6
        assert abs(thump.rest_v) < 1e-6
        assert thump.last_s == 0.0
    # As parts come: offset at its maximum (10 mV by the TL072's sheet) times the gain of 21.6.
    for thump in sheet.thumps[2:]:
        assert thump.rest_v == pytest.approx(0.010 * full().gain, rel=2e-3)
        assert abs(thump.peak_v) >= abs(thump.rest_v)
        assert thump.last_s is not None
        assert thump.last_s < 0.1


@pytest.mark.parametrize("unequal", [False, True])
def test_the_op_amp_begins_where_both_rails_together_reach_its_least_supply(unequal):
    trace, thump = power_up(full(), loaded=True, unequal=unequal)
    least = full().design.driver.part.supply_min_v
    total = trace.positive_v + trace.negative_v
    assert thump.alive_s is not None
    at = round(thump.alive_s * 384e3)
    assert total[at] >= least
    assert np.all(total[:at] < least)
    # Before it the op-amp gives a microampere at most.
    assert np.max(np.abs(trace.driver_a[:at])) <= 2e-6
    # Rails end where the check has them; a smaller reservoir sags further under its own ripple.
    end = float(np.mean(trace.positive_v[-7680:]))
    assert end == pytest.approx(full().rest.upper.rail_v, rel=0.01 if unequal else 1e-3)
    assert thump.unsettled_steps == 0


def test_an_op_amp_on_rails_of_its_own_is_alive_from_the_start():
    design = load_design("regulated-driver")
    _, thump = power_up(Bench(design), loaded=True, unequal=False)
    assert thump.alive_s == 0.0


def test_below_its_least_supply_an_op_amp_never_works():
    part = opamp("TL072", supply_min_v=32.0)
    bench = Bench(
        make_design({"driver": {"part": part, "feedback_ohm": "33k", "ground_leg_ohm": "1k5"}})
    )
    _, thump = power_up(bench, loaded=True, unequal=True)
    assert thump.alive_s is None


def test_a_bench_supply_ramps_its_rails():
    bench = Bench(make_design())
    sheet = measure_power_up(bench)
    assert sheet.ramp_s == RAMP_S
    trace, thump = power_up(bench, loaded=True, unequal=False)
    # 7 V of 30 in all, a linear ramp behind 0.1 ohm and 100 uF: 10 us late.
    expected = 7.0 / 30.0 * RAMP_S
    assert thump.alive_s == pytest.approx(expected, abs=5e-5)
    half = round(0.5 * RAMP_S * 384e3)
    assert trace.positive_v[half] == pytest.approx(7.5, abs=0.02)


def test_a_design_with_unlike_halves_thumps_and_no_load_thumps_more():
    found = reference_sheet()[1].power_up
    assert found is not None
    loaded, open_ = found.thumps[:2]
    assert 0.001 < abs(loaded.peak_v) < abs(open_.peak_v)
    # Never beyond the rails there are at that moment.
    assert abs(open_.peak_v) < 15.0


def test_an_offset_of_the_design_is_where_it_rests():
    offset = 0.004
    bench = Bench(replace(load_design("full-chain"), **{"driver.offset_v": offset}))
    _, thump = power_up(bench, loaded=True, unequal=False)
    assert thump.rest_v == pytest.approx(offset * bench.gain, rel=1e-3)
    assert thump.rest_v == pytest.approx(bench.rest.output_offset_v, rel=1e-3)
