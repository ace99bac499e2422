"""Idle over temperature, the trim of the offset, and the margin to runaway against closed forms."""

import functools
import itertools
import math

import pytest
from bench_pieces import SILICON, reference_bench, strong
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import brentq

from tonesim.bench import Bench
from tonesim.catalogue import Diode, conduction, diode_drop, load_catalogue
from tonesim.check import check_design
from tonesim.circuit import lower
from tonesim.curve import idle_point
from tonesim.design import Design
from tonesim.designfile import list_presets, load_design, replace
from tonesim.idle import (
    TEMPERATURES_C,
    heated,
    idle_at,
    idle_heat,
    measure_idle,
    offset_trim,
    runaway_of,
)
from tonesim.thermal import vbe_slope
from tonesim.units import thermal_voltage

PARTS = load_catalogue()


def stiffly_biased(emitter_ohm: float = 0.22, **changes: object) -> Design:
    """Singles behind chains that hold their voltage: 30 mA through each, many times the base's."""
    part: Diode = PARTS.diode(SILICON).model_copy(update={"series_ohm": 0.0})
    return make_design(
        {
            "driver": {"part": strong(), "feedback_ohm": "33k", "ground_leg_ohm": "1k5"},
            "bias": {"feed_ohm": 470.0, "upper": [part], "lower": [part]},
            "output": {"upper": "TIP41C", "lower": "TIP42C", "emitter_ohm": emitter_ohm},
            **changes,
        }
    )


@functools.cache
def settled(idle_a: float) -> Design:
    """The same, its drops chosen so that it idles at a current."""

    def chosen(fold: float) -> Design:
        part = stiffly_biased().bias.upper[0]
        part = part.model_copy(update={"is_a": part.is_a * math.exp(fold)})
        return replace(stiffly_biased(), **{"bias.upper": [part], "bias.lower": [part]})

    def gap(fold: float) -> float:
        return math.log(idle_point(lower(chosen(fold))).upper_current_a / idle_a)

    return chosen(brentq(gap, -3.0, 8.0, xtol=1e-9))


# ---- temperature ----


@pytest.mark.parametrize("preset", ["full-chain", "vbe-multiplier"])
def test_a_chain_left_cool_lets_the_idle_current_rise_and_one_on_the_sink_holds_it(preset):
    sheet = measure_idle(Bench(load_design(preset)))
    assert [each.pair_c for each in sheet.apart] == list(TEMPERATURES_C)
    found = [each for each in sheet.apart if each.converged]
    for before, after in itertools.pairwise(found):
        assert after.upper_a >= before.upper_a
        assert after.lower_a >= before.lower_a
    # Common practice, no source: a chain that tracks is there to hold the current. From 25 to
    # 75 degrees it does so within a factor of three where the cool one gains one of five or more.
    cold, warm = (next(e for e in sheet.together if e.pair_c == t) for t in (25.0, 75.0))
    assert 1.0 / 3.0 < warm.upper_a / cold.upper_a < 3.0
    apart = [next(e for e in sheet.apart if e.pair_c == t) for t in (25.0, 75.0)]
    assert apart[1].upper_a > 5.0 * apart[0].upper_a


def test_an_unbiased_pair_stays_off_at_every_temperature():
    sheet = measure_idle(reference_bench("none"))
    assert all(abs(each.upper_a) < 1e-6 for each in sheet.together)


@pytest.mark.parametrize("pair_c", [0.0, 25.0, 60.0, 100.0])
def test_with_a_stiff_bias_the_idle_current_follows_the_junction_s_law(pair_c):
    # V_chain = V_BE(I, T) + I RE in either half, by the catalogue's laws of diode and transistor.
    design = settled(0.05)
    found = idle_at(design, pair_c, 25.0)
    assert found.converged
    idle = idle_point(heated(design, pair_c, 25.0))
    assert found.upper_a == idle.upper_current_a
    part = design.output.upper
    hfe = part.hfe * (1.0 + part.hfe_per_k * (pair_c - 25.0))
    point = conduction(part, found.upper_a * hfe / (hfe + 1.0), pair_c)
    held = diode_drop(design.bias.upper[0], idle.upper_chain_a)
    # The knee of the current gain and the early effect are not in the collector current: 1 mV.
    assert idle.drive_v + held - idle.output_v == pytest.approx(
        point.vbe_v + 0.22 * found.upper_a, abs=1e-3
    )


# ---- offset ----


@pytest.mark.parametrize("preset", ["mismatched-pair", "battery-supply"])
def test_the_trim_put_into_the_offset_nulls_the_output(preset):
    design = replace(load_design(preset), **{"driver.offset_v": 0.004})
    bench = Bench(design)
    assert abs(bench.rest.output_offset_v) > 0.01
    trim = measure_idle(bench).trim_v
    assert trim is not None
    # Put in as the offset the design then has; rails move with it by a little.
    nulled = idle_point(lower(replace(design, **{"driver.offset_v": 0.004 + trim})))
    assert abs(nulled.output_v) < 1e-3 * abs(bench.rest.output_offset_v)


@settings(max_examples=10)
@given(st.floats(-0.02, 0.02))
def test_the_trim_of_an_offset_is_its_opposite(offset):
    # A symmetric stage has no other: gain times input error is the whole of its output.
    design = make_design({"driver.offset_v": offset})
    circuit = lower(design)
    trim = offset_trim(circuit, idle_point(circuit))
    assert trim == pytest.approx(-offset, abs=2e-6)


def test_an_offset_beyond_two_hundred_millivolts_has_no_trim():
    circuit = lower(make_design())
    far = circuit._replace(driver=circuit.driver._replace(offset=0.3))
    assert offset_trim(far, idle_point(circuit)) is None


# ---- runaway ----


# theta VCE kappa / (RE + Vt/Iq) = 1: the heat's rise for a kelvin is VCE kappa / (RE + Vt/Iq).
# Common form of handbooks; with VCE 24 V, RE 0.22 ohm, Iq 50 mA, 2 mV/K it is 1/15.29 W/K
# (computed by us; test_thermal.py holds that figure).
@pytest.mark.parametrize("idle_a", [0.01, 0.05, 0.2])
def test_with_a_stiff_bias_the_heat_rises_as_the_closed_form_says(idle_a):
    design = settled(idle_a)
    found = runaway_of(design, "upper")
    part = design.output.upper
    kappa = vbe_slope(part, idle_a)
    emitter = 0.22 + part.emitter_ohm + thermal_voltage(25.0) / idle_a
    # What stands before the base counts by its share of the current: the base's own resistance,
    # and the chain's n Vt / I at its 30 mA.
    drop = design.bias.upper[0]
    chain = drop.n * thermal_voltage(25.0) / idle_point(lower(design)).upper_chain_a
    before = (part.base_ohm + chain) / part.hfe
    # The current gain rises with heat too and unloads the chain: 5 %.
    assert found.apart_w_per_k == pytest.approx(15.0 * kappa / (emitter + before), rel=0.05)
    # The sheet's estimate is the form with a bias that holds and no base resistance.
    assert found.estimate_w_per_k == pytest.approx(15.0 * kappa / emitter, rel=1e-3)
    assert found.rth_apart_k_per_w == pytest.approx(1.0 / found.apart_w_per_k)


@pytest.mark.parametrize("preset", ["full-chain", "vbe-multiplier", "hot-chain"])
@pytest.mark.parametrize("side", ["upper", "lower"])
def test_the_slope_of_heat_is_a_finite_difference_of_the_stage(preset, side):
    design = load_design(preset)
    found = runaway_of(design, side)
    pair, chain = design.output.temperature_c, design.bias.temperature_c

    def heat(more: float, follows: bool) -> float:
        circuit = heated(design, pair + more, chain + (more if follows else 0.0))
        return idle_heat(idle_point(circuit), circuit, side)

    # A quarter of the step, one-sided differences averaged: third order in a smooth law.
    for follows, slope in ((False, found.apart_w_per_k), (True, found.together_w_per_k)):
        quarter = (heat(0.25, follows) - heat(-0.25, follows)) / 0.5
        assert slope == pytest.approx(quarter, rel=5e-3, abs=2e-5)
    # A chain as warm as the pair gains on a cool one, always.
    assert found.together_w_per_k < found.apart_w_per_k


def test_where_heat_falls_with_heat_any_sink_is_stable():
    found = runaway_of(load_design("full-chain"), "upper")
    assert found.together_w_per_k < 0.0
    assert found.rth_together_k_per_w is None
    assert found.rth_apart_k_per_w is not None


# ---- agreement ----


@pytest.mark.parametrize("preset", list_presets())
def test_heat_at_idle_is_that_of_the_check(preset):
    design = load_design(preset)
    circuit, rest = lower(design), check_design(design)
    idle = idle_point(circuit)
    for side, half in (("upper", rest.upper), ("lower", rest.lower)):
        assert idle_heat(idle, circuit, side) == pytest.approx(max(half.idle_w, 0.0), rel=1e-9)
    same = idle_at(design, design.output.temperature_c, design.bias.temperature_c)
    assert (same.upper_a, same.lower_a) == (idle.upper_current_a, idle.lower_current_a)


WEAK = {"kind": "transformer", "winding_v": 11.0, "winding_ohm": 12.0, "reservoir_f": 2200e-6}


def test_a_weak_supply_holds_a_hot_stage_back():
    two = [SILICON, SILICON]
    design = make_design({"supply": WEAK, "bias.upper": two, "bias.lower": two})
    found = [idle_at(design, t, 25.0) for t in TEMPERATURES_C]
    # Rails that sag leave the chain less: the current rises by less than a volt over a few ohm.
    assert all(each.converged for each in found)
    currents = [each.upper_a for each in found]
    assert currents == sorted(currents)
    stiff = idle_at(make_design({"bias.upper": two, "bias.lower": two}), 125.0, 25.0)
    assert currents[-1] < 0.7 * stiff.upper_a


def test_a_stage_whose_supply_lets_go_says_so():
    # A bench supply of 300 mA: warm enough, the stage wants more and the rails collapse.
    two = [SILICON, SILICON]
    limited = {"kind": "bench", "positive_v": 15.0, "current_limit_a": 0.3}
    design = make_design({"supply": limited, "bias.upper": two, "bias.lower": two})
    found = {t: idle_at(design, t, 25.0) for t in (0.0, 125.0)}
    assert found[0.0].converged
    assert not found[125.0].converged
