"""Bandwidth of the closed loop, small and at full output, against GBW/G, SR/(2 pi Vp) and more.

Closed forms of any op-amp handbook; figures computed by us. A bandwidth by the loop of
`tonesim.stability`, which is another way through other code, stands beside them.
"""

import functools
import math

import pytest
from bench_pieces import class_ab, opamp, reference_sheet, strong

from tonesim.bench import Bench
from tonesim.catalogue import OpAmp
from tonesim.design import Design
from tonesim.response import SMALL_DB, GainSheet, measure_gain
from tonesim.stability import estimate_stability


def amplifier(part: OpAmp, feedback: str = "22k", **changes: object) -> Design:
    """A heavily biased stage into a light load: next to nothing but the loop."""
    driver = {"part": part, "feedback_ohm": feedback, "ground_leg_ohm": "1k"}
    bias = class_ab().bias.model_dump(exclude_none=True)
    return class_ab(
        driver=driver,
        bias={**{k: bias[k] for k in ("upper", "lower")}, "feed_ohm": "10k"},
        load={"ohm": 1000.0},
        **changes,
    )


@functools.cache
def gain_sheet(gbw: float, slew: float, feedback: str = "22k") -> GainSheet:
    part = strong(gain_bandwidth_hz=gbw, slew_v_per_s=slew)
    return measure_gain(Bench(amplifier(part, feedback)))


# GBW/G: 3 MHz over 23 is 130.43 kHz, 1 MHz over 23 43.48 kHz (computed by us). The follower's
# gain is under 2 % short of 1 (chains of 70 ohm before feed resistors of 10 kilohm, and half an
# ohm before 1 kilohm), and the corner with it.
FOLLOWER = 0.02


@pytest.mark.parametrize(("gbw", "hertz"), [(3e6, 130.43e3), (1e6, 43.48e3), (10e6, 434.8e3)])
def test_small_signal_bandwidth_is_gain_bandwidth_over_gain(gbw, hertz):
    found = gain_sheet(gbw, 1e9)
    assert found.bandwidth_hz == pytest.approx(hertz, rel=FOLLOWER)
    assert found.bandwidth_estimate_hz == pytest.approx(hertz, rel=1e-4)
    assert found.ideal_gain == 23.0
    # At 1 kHz a corner of 43 kHz has cost 3e-4 already.
    assert found.gain == pytest.approx(23.0 / math.hypot(1.0, 1e3 / hertz), rel=1e-4)
    assert found.gain_db == pytest.approx(20.0 * math.log10(found.gain), abs=1e-9)
    assert found.unsettled_steps == 0


def test_bandwidth_falls_as_gain_rises():
    wide, narrow = gain_sheet(3e6, 1e9), gain_sheet(3e6, 1e9, "100k")
    # 1 MHz over 101 would be 9.90 kHz; 3 MHz over 101 is 29.70 kHz (computed by us).
    assert narrow.bandwidth_hz == pytest.approx(29.70e3, rel=FOLLOWER)
    assert narrow.bandwidth_hz * 101.0 == pytest.approx(wide.bandwidth_hz * 23.0, rel=5e-3)


def test_the_loop_s_crossover_is_the_bandwidth():
    driver = {
        "part": opamp("TL072", slew_v_per_s=1e9, phase_margin_deg=89.0),
        "feedback_ohm": "22k",
        "ground_leg_ohm": "1k",
    }
    design = class_ab(driver=driver)
    found = measure_gain(Bench(design))
    crossover = next(
        case.margins.crossover_hz
        for case in estimate_stability(design).cases
        if case.state == "idle" and case.load == "as designed"
    )
    assert crossover is not None
    # A loop of one pole is 3 dB down where its gain is one; the devices' charge, which only the
    # loop knows, turns its phase by a few degrees there.
    assert found.bandwidth_hz == pytest.approx(crossover, rel=0.03)
    # The op-amp's output resistance costs an eighth: neither is the bare GBW/G.
    assert found.bandwidth_hz < 0.95 * found.bandwidth_estimate_hz


# SR/(2 pi Vp) at 12 V peak: 741 6.63 kHz, LM358 3.98, 4558 22.55 (1.7 V/us), TL072 at 13 V/us
# 172.42 kHz (computed by us from the data sheets' slew rates).
@pytest.mark.parametrize(
    ("slew", "kilohertz"), [(0.5e6, 6.63), (0.3e6, 3.98), (1.7e6, 22.55), (13e6, 172.42)]
)
def test_full_power_bandwidth_is_slew_rate_over_two_pi_volts(slew, kilohertz):
    found = gain_sheet(100e6, slew)
    at_12_v = found.full_power_hz * found.full_output_v / 12.0
    assert at_12_v == pytest.approx(1e3 * kilohertz, rel=1e-3)


def test_driven_to_full_output_a_slewing_stage_becomes_a_triangle():
    # Far beyond the slew limit the output is a triangle of SR / 4f, whose fundamental is 8/pi^2 of
    # its peak: 3 dB down at f = 2 SR sqrt(2) / (pi^2 Vp), 1.80 times SR/(2 pi Vp). There the sine
    # has not quite become one, and rounded corners hold 2 % more.
    found = gain_sheet(100e6, 1.7e6)
    assert found.full_bandwidth_hz is not None
    ratio = found.full_bandwidth_hz / found.full_power_hz
    assert ratio == pytest.approx(4.0 * math.sqrt(2.0) / math.pi, rel=0.03)


def test_without_a_slew_limit_full_output_has_the_small_bandwidth():
    found = gain_sheet(3e6, 1e9)
    assert found.full_bandwidth_hz == pytest.approx(found.bandwidth_hz, rel=0.01)


def test_above_twenty_megahertz_is_none():
    found = gain_sheet(1e9, 1e12, "2k7")
    assert found.bandwidth_estimate_hz > 200e6
    assert found.bandwidth_hz is None
    assert found.full_bandwidth_hz is None


def test_levels_belong_together():
    bench, sheet, _ = reference_sheet()
    found = sheet.gain
    assert found is not None
    assert found.full_input_v == bench.clip_point.input_peak_v
    assert found.full_jack_v == found.full_input_v  # no gain before the op-amp
    assert found.full_output_v == pytest.approx(found.full_input_v * 22.277, rel=1e-3)
    assert found.level_v == pytest.approx(10.0 ** (SMALL_DB / 20.0) * found.full_output_v, rel=0.01)
    # The clip point loses one per cent of what is asked for: rms times sqrt(2).
    assert math.sqrt(2.0) * bench.clip_point.output_v == pytest.approx(
        found.full_output_v, rel=0.011
    )


def test_clean_gain_before_the_stage_lowers_the_jack_s_level():
    design = class_ab(input={"gain_db": 6.0})
    found = measure_gain(Bench(design))
    assert found.full_input_v / found.full_jack_v == pytest.approx(10.0**0.3, rel=1e-9)
