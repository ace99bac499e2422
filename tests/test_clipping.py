"""What sets the clip level: limits against Ohm's and Kirchhoff's laws, and moved by their parts."""

import functools
import math

import pytest
from bench_pieces import SILICON, class_b, opamp, strong
from conftest import make_design
from scipy.optimize import brentq

from tonesim.bench import Bench
from tonesim.catalogue import conduction
from tonesim.circuit import lower
from tonesim.clipping import SLEW_HZ, ClipSheet, HalfClip, Limit, limits_of, measure_clip
from tonesim.curve import clip_levels, idle_point, static_point
from tonesim.design import Design
from tonesim.designfile import list_presets, load_design, replace

PRESETS = list_presets()


def halves(design: Design) -> dict[str, HalfClip]:
    """Both halves' limits, without the sine that `measure_clip` adds."""
    circuit = lower(design)
    idle = idle_point(circuit)
    return {
        side: HalfClip(side, clip.level_v, clip.cause, limits_of(circuit, idle, clip, side))
        for side, clip in zip(("upper", "lower"), clip_levels(circuit, idle), strict=True)
    }


@functools.cache
def preset(name: str) -> dict[str, HalfClip]:
    return halves(load_design(name))


def limit(half: HalfClip, name: str) -> Limit:
    return next(each for each in half.limits if each.name == name)


@pytest.mark.parametrize("name", PRESETS)
def test_no_limit_is_used_beyond_what_there_is(name):
    for half in preset(name).values():
        names = [each.name for each in half.limits]
        assert len(set(names)) == len(names)
        for each in half.limits:
            assert each.used >= 0.0
            if not each.name.startswith("slew"):
                assert each.used <= each.available
            assert each.in_hand == each.available - each.used
        # The one that sets the level gains most where it alone is lifted.
        gained = {each.name: each.gained_v for each in half.limits if each.gained_v is not None}
        assert half.cause in gained
        driver = {"driver swing", "driver current"}
        if half.cause in driver:
            assert max(gained, key=lambda n: gained[n]) in driver
        else:
            assert gained[half.cause] == max(gained.values())


@pytest.mark.parametrize("name", PRESETS)
def test_the_cause_has_little_in_hand(name):
    for half in preset(name).values():
        cause = limit(half, half.cause)
        # 1 % below the clip level; a soft limit (saturation, a smooth current limit) bends early.
        assert cause.in_hand < 0.45 * cause.available


@pytest.mark.parametrize("name", ["three-drops", "no-chain", "single-pair-current-limit"])
def test_slew_is_asked_at_twenty_kilohertz(name):
    design = load_design(name)
    for half in preset(name).values():
        found = next(each for each in half.limits if each.name.startswith("slew"))
        # Steepest slope of a sine, 2 pi f Vp, 1 % below the clip level.
        expected = 2.0 * math.pi * SLEW_HZ * 0.99 * abs(half.level_v)
        assert found.used == pytest.approx(expected, rel=1e-3)
        assert found.available == design.driver.part.slew_v_per_s


# ---- starvation ----


def starved(feed_ohm: float) -> Design:
    """Singles: the base takes much, and the feed resistor alone can bring it."""
    return make_design(
        {
            "driver": {
                "part": strong(),
                "feedback_ohm": "22k",
                "ground_leg_ohm": "1k",
                "positive_v": 25,
                "negative_v": -25,
            },
            "bias": {"feed_ohm": feed_ohm, "upper": [SILICON], "lower": [SILICON]},
            "output": {"upper": "TIP41C", "lower": "TIP42C", "emitter_ohm": 0.22},
        }
    )


@pytest.mark.parametrize("feed_ohm", [330.0, 470.0, 680.0])
def test_a_starved_half_stops_where_the_feed_resistor_feeds_the_base_alone(feed_ohm):
    half = halves(starved(feed_ohm))["upper"]
    assert half.cause == "base starvation"
    part = starved(feed_ohm).output.upper

    # Ohm's law: (rail - base) / R = base current of the load current, with the catalogue's law of
    # the transistor; nothing is left for the chain.
    def short(level: float) -> float:
        current = level / 8.0
        point = conduction(part, current * 0.99)
        base_v = level + 0.22 * current + point.vbe_v
        return (15.0 - base_v) / feed_ohm - point.base_a

    level = brentq(short, 0.1, 14.0)
    # The chain's reverse leakage and the early effect are left out: 2 %.
    assert half.level_v == pytest.approx(level, rel=0.02)
    found = limit(half, "base starvation")
    assert found.in_hand < 0.2 * found.available


def test_a_smaller_feed_resistor_raises_a_starved_level():
    levels = [halves(starved(ohm))["upper"].level_v for ohm in (680.0, 470.0, 330.0)]
    assert levels == sorted(levels)
    assert levels[-1] > 1.1 * levels[0]


def test_a_hopelessly_starved_chain_is_read_in_reverse():
    # A megohm feeds nothing: the op-amp swings to 12 V and the chain meets them in reverse, where
    # a 1N4148 leaks nanoamperes (data sheet: 25 nA at 20 V).
    feed = {"feed_ohm": "1M", "upper": [SILICON], "lower": [SILICON]}
    half = halves(make_design({"bias": feed}))["upper"]
    assert half.cause == "base starvation"
    assert half.level_v < 0.1
    found = limit(half, "base starvation")
    assert found.available == pytest.approx(found.used, abs=50e-9)


# ---- driver ----


def swung(swing_v: float) -> Design:
    part = opamp(
        "NE5532",
        swing_10k_positive_v=swing_v,
        swing_10k_negative_v=-swing_v,
        swing_2k_positive_v=swing_v - 0.2,
        swing_2k_negative_v=-swing_v + 0.2,
        source_limit_a=0.2,
        sink_limit_a=0.2,
    )
    driver = {"part": part, "feedback_ohm": "22k", "ground_leg_ohm": "1k"}
    return make_design({"driver": driver, "bias": {}})


def test_more_swing_of_the_op_amp_raises_the_level_by_as_much():
    # A volt more at the op-amp is a volt more at the output, less what the base-emitter voltages
    # and the emitter resistor take of it.
    low, high = (halves(swung(v))["upper"] for v in (11.0, 12.0))
    assert low.cause == high.cause == "driver swing"
    assert 0.9 < high.level_v - low.level_v < 1.0
    for half, swing in ((low, 11.0), (high, 12.0)):
        found = limit(half, "driver swing")
        # What is available is the swing into no load: Thevenin's source of the two listed ones.
        light, heavy = swing / 10e3, (swing - 0.2) / 2e3
        assert found.available == pytest.approx(swing + 0.2 * light / (heavy - light), abs=0.01)
        # 1 % of the level is in hand.
        assert found.in_hand == pytest.approx(0.01 * half.level_v, rel=0.25)


def test_an_op_amp_s_current_limit_is_named_and_moves_the_level():
    weak = load_design("single-pair-current-limit")
    assert preset("single-pair-current-limit")["upper"].cause == "driver current"
    part = weak.driver.part
    stronger = part.model_copy(
        update={
            "source_limit_a": 1.5 * part.source_limit_a,
            "sink_limit_a": 1.5 * part.sink_limit_a,
        }
    )
    raised = halves(replace(weak, **{"driver.part": stronger}))
    for side, before in preset("single-pair-current-limit").items():
        assert abs(raised[side].level_v) > abs(before.level_v) + 0.2
        found = limit(before, "driver current")
        assert found.available == pytest.approx(
            part.source_limit_a if side == "upper" else part.sink_limit_a
        )


# ---- saturation and supply ----


def test_a_saturated_device_keeps_its_saturation_voltage():
    # The op-amp's rails and current are ample: the level is the rail less what a TIP142 keeps.
    # Its sheet: at most 2 V at 5 A, 3 V at 10 A; at 2.9 A less than 2 V.
    half = halves(class_b())["upper"]
    found = limit(half, "saturation")
    assert 24.0 - half.level_v < 2.0
    assert found.available == pytest.approx(24.0 - 0.99 * half.level_v, rel=1e-3)
    assert 0.5 < found.used <= found.available


def test_a_supply_s_current_limit_is_named_with_its_number():
    design = make_design({"supply.current_limit_a": 0.8, "load": {"ohm": 8.0}})
    found = halves(design)
    for half in found.values():
        assert half.cause == "supply current limit"
        # Ohm's law.
        assert abs(half.level_v) == pytest.approx(0.8 * 8.0, rel=1e-9)
        named = limit(half, "supply current limit")
        assert (named.unit, named.available) == ("A", 0.8)
        # Load current, 1 % lower, and the half's feed beside it.
        assert named.used == pytest.approx(0.99 * 0.8, rel=0.01)
    ample = halves(replace(design, **{"supply.current_limit_a": 1.0}))
    assert ample["upper"].level_v == pytest.approx(8.0, rel=1e-9)
    assert all(
        each.name != "supply current limit" for each in halves(make_design())["upper"].limits
    )


# ---- whole sheet ----


@functools.cache
def lopsided() -> tuple[Bench, ClipSheet]:
    bench = Bench(load_design("lopsided-rails"))
    return bench, measure_clip(bench)


def test_the_half_that_goes_first_is_named():
    _, sheet = lopsided()
    assert abs(sheet.lower.level_v) < sheet.upper.level_v
    assert sheet.first == "lower half"
    assert sheet.residual_a < 1e-6
    swapped = replace(
        load_design("lopsided-rails"),
        **{
            "supply.positive_v": -lopsided()[0].design.supply.open_negative_v,
            "supply.negative_v": -lopsided()[0].design.supply.open_positive_v,
        },
    )
    assert measure_clip(Bench(swapped)).first == "upper half"


def test_equal_halves_clip_together():
    assert measure_clip(Bench(class_b())).first == "both together"


def test_a_slow_ramp_stops_at_the_levels_of_the_sheet():
    # The input that asks for a hundred times as much, by the static solver alone.
    for name in ("three-drops", "lopsided-rails"):
        circuit = lower(load_design(name))
        circuit = circuit._replace(load=Bench(load_design(name)).resistive.circuit.load)
        idle = idle_point(circuit)
        for side, sign in (("upper", 1.0), ("lower", -1.0)):
            point = static_point(
                circuit, sign * 100.0, idle.rail_positive.mean_v, idle.rail_negative.mean_v
            )
            # The feedback network beside the bench resistor is 3e-4 of the load.
            assert point.v_o == pytest.approx(preset(name)[side].level_v, rel=2e-3)


def test_the_sine_s_onset_is_below_the_static_level_of_the_first_half():
    bench, sheet = lopsided()
    assert sheet.sine_output_v == bench.clip_point.output_v
    assert math.sqrt(2.0) * sheet.sine_output_v <= 1.01 * abs(sheet.lower.level_v)
    assert sheet.sine_input_peak_v * bench.gain == pytest.approx(abs(sheet.lower.level_v), rel=0.03)
