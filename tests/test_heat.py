"""Heat sinks: rating, derating and settling of idle, by the formulas and by hand.

Tj = Ta + P (Rjc + Rcs + Rsa), the usual thermal circuit of data sheets.
"""

import dataclasses
import functools

import numpy as np
import pytest
from bench_pieces import SILICON, class_b_bench, class_b_power
from conftest import make_design

from tonesim.bench import Bench
from tonesim.curve import idle_point
from tonesim.heat import AMBIENT_C, MOST_RTH_SA, RTH_CS_K_PER_W, Cooling, HeatSheet, measure_heat
from tonesim.idle import heated, idle_heat
from tonesim.power import Heat, PowerSheet

TWO = [SILICON, SILICON]


def with_heat(power: PowerSheet, watts: float, loudspeaker_w: float | None = None) -> PowerSheet:
    """The sheet as if its devices had other heat."""
    speaker = () if loudspeaker_w is None else (Heat(120.0, 0.8, loudspeaker_w, loudspeaker_w),)
    heat = tuple(Heat(1000.0, s, s * watts, s * watts) for s in (0.5, 1.0))
    return dataclasses.replace(power, heat=heat, loudspeaker_heat=speaker)


def cooling(watts: float, ambient_c: float = AMBIENT_C, **more: float) -> Cooling:
    sheet = measure_heat(class_b_bench(), with_heat(class_b_power(), watts, **more), ambient_c)
    assert [each.side for each in sheet.devices] == ["upper", "lower"]
    return sheet.devices[0]


def test_the_printed_sink_puts_the_junction_at_its_rating():
    sheet = measure_heat(class_b_bench(), class_b_power())
    assert (sheet.ambient_c, sheet.rth_cs_k_per_w) == (AMBIENT_C, RTH_CS_K_PER_W)
    for each, part in zip(
        sheet.devices,
        (class_b_bench().design.output.upper, class_b_bench().design.output.lower),
        strict=True,
    ):
        assert each.part == part.name
        assert each.worst_w == pytest.approx(24.0**2 / (np.pi**2 * 8.0), rel=0.01)
        assert each.rth_sa_k_per_w is not None
        total = part.rth_jc_k_per_w + RTH_CS_K_PER_W + each.rth_sa_k_per_w
        assert AMBIENT_C + each.worst_w * total == pytest.approx(part.tj_max_c, abs=1e-9)
        assert each.junction_c == pytest.approx(part.tj_max_c, abs=1e-9)
        assert each.case_c == pytest.approx(part.tj_max_c - each.worst_w * part.rth_jc_k_per_w)
        # Derating: at the case temperature of the limit exactly this heat is allowed.
        assert each.allowed_w == pytest.approx(each.worst_w, rel=1e-9)


def test_a_published_sink_is_found():
    # Philips data sheet TDA1521A (July 1994), design of the heat sink: 7.8 W, 6 K/W from junction
    # to case, 150 °C in air of 60 °C need 5.5 K/W in all, of which 0.5 K/W are mica here.
    part = class_b_bench().design.output.upper.model_copy(
        update={"rth_jc_k_per_w": 6.0, "tj_max_c": 150.0}
    )
    design = class_b_bench().design
    output = design.output.model_copy(update={"upper": part})
    bench = Bench(design.model_copy(update={"output": output}))
    power = with_heat(class_b_power(), 7.8)
    found = measure_heat(bench, power, 60.0).devices[0]
    assert found.rth_sa_k_per_w == pytest.approx(5.5 - RTH_CS_K_PER_W, abs=0.05)  # as printed


def test_little_heat_needs_no_sink_and_far_too_much_finds_none():
    little = cooling(0.5)
    assert little.bare
    assert little.rth_sa_k_per_w == MOST_RTH_SA
    # The package alone, then: by hand.
    rth = little.rth_jc_k_per_w + RTH_CS_K_PER_W + MOST_RTH_SA
    assert little.junction_c == pytest.approx(AMBIENT_C + 0.5 * rth)
    assert little.allowed_w > little.worst_w
    much = cooling(200.0)
    assert much.rth_sa_k_per_w is None
    assert not much.bare
    assert much.junction_c > much.junction_max_c
    assert much.cool is much.tracking is much.idle_rth_sa_k_per_w is None
    assert much.allowed_w < much.worst_w


def test_warmer_air_asks_for_a_larger_sink():
    cool, warm = cooling(10.0, 25.0), cooling(10.0, 60.0)
    assert cool.rth_sa_k_per_w is not None
    assert warm.rth_sa_k_per_w is not None
    # 35 K over 10 W.
    assert cool.rth_sa_k_per_w - warm.rth_sa_k_per_w == pytest.approx(3.5)


def test_the_worse_of_resistor_and_loudspeaker_counts_and_is_named():
    assert cooling(10.0, loudspeaker_w=9.0).condition == "resistor"
    speaker = cooling(10.0, loudspeaker_w=12.0)
    assert speaker.condition == "loudspeaker at 120 Hz"
    assert speaker.worst_w == 12.0


# ---- idle on the sink ----


@functools.cache
def biased() -> tuple[Bench, PowerSheet]:
    """One silicon and two Schottky drops a side: tame as they track, wild left cool."""
    chain = [SILICON, "BAT85", "BAT85"]
    bench = Bench(make_design({"bias.upper": chain, "bias.lower": chain}))
    return bench, with_heat(class_b_power(), 3.0)


@functools.cache
def biased_heat() -> HeatSheet:
    return measure_heat(*biased())


def idle_watts(bench: Bench, junction_c: float, chain_c: float) -> float:
    circuit = heated(bench.design, junction_c, chain_c)
    return idle_heat(idle_point(circuit), circuit, "upper")


def test_where_idle_settles_heat_and_path_agree():
    bench, _ = biased()
    found = biased_heat().devices[0]
    assert found.tracking is not None
    assert found.rth_sa_k_per_w is not None
    assert found.tracking.settled
    assert found.tracking.converged
    theta = found.rth_jc_k_per_w + RTH_CS_K_PER_W + found.rth_sa_k_per_w
    watts = idle_watts(bench, found.tracking.junction_c, found.tracking.junction_c)
    assert found.tracking.power_w == pytest.approx(watts, rel=1e-9)
    assert AMBIENT_C + theta * watts == pytest.approx(found.tracking.junction_c, abs=1e-3)
    assert found.tracking.residual_k < 1e-3
    assert found.tracking.loop_gain < 1.0
    # It settles on the sink of the worst level: nothing smaller has to be looked for.
    assert found.idle_rth_sa_k_per_w == found.rth_sa_k_per_w


def test_a_chain_left_cool_runs_away_on_the_same_sink_and_says_so():
    bench, _ = biased()
    found = biased_heat().devices[0]
    assert found.cool is not None
    assert found.rth_sa_k_per_w is not None
    assert not found.cool.settled
    assert not found.cool.converged
    # By hand: at every temperature up to the rating the heat asks for more than there is.
    theta = found.rth_jc_k_per_w + RTH_CS_K_PER_W + found.rth_sa_k_per_w
    for junction in np.linspace(AMBIENT_C, found.junction_max_c, 12):
        assert AMBIENT_C + theta * idle_watts(bench, float(junction), AMBIENT_C) > junction


def test_a_design_too_hot_even_as_it_tracks_gets_the_sink_it_settles_on():
    # Four silicon drops hold a Darlington pair at 0.14 A and more as both warm up.
    bench = Bench(make_design({"bias.upper": TWO, "bias.lower": TWO}))
    power = with_heat(class_b_power(), 3.0)
    found = measure_heat(bench, power).devices[0]
    assert found.tracking is not None
    assert found.rth_sa_k_per_w is not None
    assert not found.tracking.settled
    rth = found.idle_rth_sa_k_per_w
    assert rth is not None
    assert 0.0 < rth < found.rth_sa_k_per_w

    def settles(rth_sa: float) -> bool:
        theta = found.rth_jc_k_per_w + RTH_CS_K_PER_W + rth_sa
        temperatures = np.arange(AMBIENT_C, found.junction_max_c, 2.0)
        return any(AMBIENT_C + theta * idle_watts(bench, t, t) <= t for t in temperatures)

    # Within a tenth, by a plain walk up the temperatures.
    assert settles(0.95 * rth)
    assert not settles(1.2 * rth)
