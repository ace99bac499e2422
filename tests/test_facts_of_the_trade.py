"""One stage as a bench would meet it. Every expectation here: common practice, no source.

Darlington pair, JFET op-amp, rails of 15 V, loop gain 1 + 100k/4k7, no emitter resistors,
10 ohm, 1 V peak to peak in. What part tolerances allow: base-emitter voltages within 30 mV,
current gain within a factor of two; a distortion figure may be off by a factor of two by that
alone, an idle current by a factor of four.
"""

import functools

import numpy as np
import pytest
from conftest import make_design
from test_kernel_amplifier import RATE, run

from tonesim.circuit import lower
from tonesim.curve import clip_levels, idle_point
from tonesim.design import Design
from tonesim.kernel import amplifier as loop

SILICON, GERMANIUM = "1N4148", "1N34A"
CHAINS = {
    "none": ([], []),
    "one a side": ([SILICON], [SILICON]),
    "three": ([SILICON, SILICON], [SILICON]),
    "three and germanium": ([SILICON, SILICON], [SILICON, GERMANIUM]),
    "four": ([SILICON, SILICON], [SILICON, SILICON]),
}
LADDER = ["none", "one a side", "three", "three and germanium"]
FAST = 4 * RATE


def stage(chain: str, **changes: object) -> Design:
    upper, lower_half = CHAINS[chain]
    bias = {"feed_ohm": "5k6", "upper": upper, "lower": lower_half} if upper else {}
    return make_design(
        {
            "driver": {"part": "TL072", "feedback_ohm": "100k", "ground_leg_ohm": "4k7"},
            "output.emitter_ohm": 0.0,
            "load": {"ohm": 10.0},
            "bias": bias,
            **changes,
        }
    )


@functools.cache
def measured(chain: str, hertz: int) -> dict[str, float]:
    """Two periods' worth of 5 ms at 0.5 V peak: levels, THD of ten harmonics, supply power."""
    n = FAST // 200
    x = 0.5 * np.sin(2.0 * np.pi * hertz * np.arange(3 * n) / FAST)
    y, evidence = run(stage(chain), x, FAST)
    assert evidence[loop.UNSETTLED] == 0
    bins = np.abs(np.fft.rfft(y[-n:])) * 2.0 / n
    h = bins[hertz // 200 :: hertz // 200][:10]
    return {
        "gain": h[0] / 0.5,
        "swing_v": float(np.ptp(y[-n:])),
        "rms_v": float(np.sqrt(np.mean(y[-n:] ** 2))),
        "thd_percent": float(100.0 * np.sqrt(np.sum(h[1:] ** 2)) / h[0]),
        "supply_w": float(evidence[loop.ENERGY_RAILS] / x.size),
        "load_w": float(evidence[loop.ENERGY_LOAD] / x.size),
    }


def idle_draw_ma(chain: str, **changes: object) -> float:
    idle = idle_point(lower(stage(chain, **changes)))
    assert idle.converged
    return 1e3 * max(idle.draw_positive_a, idle.draw_negative_a)


def test_gain_and_swing_at_one_kilohertz_without_a_chain():
    m = measured("none", 1000)
    # Exact but for the loop's finite gain; a meter reads 22.4 to 22.5 V at best within 1 %.
    assert m["gain"] == pytest.approx(22.28, rel=0.002)
    assert m["swing_v"] == pytest.approx(22.3, abs=0.25)
    assert m["rms_v"] == pytest.approx(7.9, abs=0.05)


def test_supply_draws_about_ten_and_a_half_watts_for_six_in_the_load():
    m = measured("none", 1000)
    # Mean of a half sine, Vp / pi R, from each rail, and the op-amp's own draw beside it.
    assert m["supply_w"] == pytest.approx(10.5, abs=0.3)
    assert m["load_w"] == pytest.approx(6.3, abs=0.15)


@pytest.mark.parametrize("chain", LADDER)
def test_crossover_grows_with_frequency(chain):
    low, mid, high = (measured(chain, f)["thd_percent"] for f in (1000, 10_000, 20_000))
    # The loop gain falls in proportion to frequency: nearly ten times, then nearly twice.
    assert 5.0 < mid / low < 12.0
    assert 1.4 < high / mid < 2.2


def test_crossover_without_a_chain_has_the_usual_size():
    for hertz, percent in ((1000, 0.16), (10_000, 1.5), (20_000, 2.7)):
        assert percent / 2.0 < measured("none", hertz)["thd_percent"] < percent * 2.0


def test_each_drop_lowers_the_distortion():
    for hertz in (1000, 7000, 10_000, 20_000, 40_000):
        ladder = [measured(c, hertz)["thd_percent"] for c in LADDER]
        # "Much reduced", then less than half again, then less than half again.
        assert ladder[1] < 0.6 * ladder[0]
        assert ladder[2] < 0.5 * ladder[1]
        assert ladder[3] < 0.5 * ladder[2]


def test_three_drops_leave_a_trace_at_seven_and_show_at_forty_kilohertz():
    trace, prominent = (measured("three", f)["thd_percent"] for f in (7000, 40_000))
    # About 0.3 % of a sine is the least an eye finds on a screen.
    assert 0.1 < trace < 0.6
    assert prominent > 0.8


def test_with_a_germanium_drop_nothing_is_seen():
    assert measured("three and germanium", 7000)["thd_percent"] < 0.15
    assert measured("three and germanium", 40_000)["thd_percent"] < 0.5


def test_total_draw_rises_from_five_to_twenty_milliamperes():
    assert idle_draw_ma("one a side") == pytest.approx(5.0, abs=1.0)
    # Twenty lies inside what 30 mV of base-emitter voltage does to the pair's own share.
    pair = {"upper": "TIP122", "lower": "TIP127"}
    draws = [
        idle_draw_ma(
            "three and germanium",
            output={**pair, "upper_vbe_shift_v": s, "lower_vbe_shift_v": s},
        )
        for s in (0.03, 0.0, -0.03)
    ]
    assert draws == sorted(draws)
    assert draws[0] < 20.0 < draws[-1]
    assert draws[1] > 2.0 * idle_draw_ma("one a side")


def test_four_silicon_drops_are_too_hot_to_leave_alone():
    assert 100.0 < idle_draw_ma("four") < 800.0


def test_clipping_begins_just_above_the_test_level_and_one_half_goes_first():
    circuit = lower(stage("three"))
    upper, lower_half = clip_levels(circuit, idle_point(circuit))
    for level in (upper.level_v, -lower_half.level_v):
        assert 11.14 < level < 12.5
    assert 0.05 < abs(upper.level_v + lower_half.level_v) < 1.0
