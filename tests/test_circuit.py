"""From a design to bare numbers: every key of a design arrives where it belongs."""

import math

import numba
import numpy as np
import pytest
from conftest import make_design
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from tonesim import catalogue
from tonesim.catalogue import conduction, diode_drop, load_catalogue
from tonesim.circuit import lower, lower_half, lower_rails, saturation_current
from tonesim.designfile import list_presets, load_design
from tonesim.kernel.half import (
    CHAIN_DROPS,
    CHAIN_MULTIPLIER,
    CHAIN_NONE,
    HalfParams,
    chain_law,
    first_guess,
    solve_half,
)
from tonesim.kernel.rails import RECTIFIED, RESISTIVE, STIFF
from tonesim.units import thermal_voltage

PARTS = load_catalogue()


def _half(changes: dict[str, object], upper: bool = True) -> HalfParams:
    return lower_half(make_design(changes), upper)


def _on_voltage(half: HalfParams, amps: float) -> float:
    """Base voltage at an emitter current, far from saturation."""
    bare = half._replace(chain=CHAIN_NONE, chain_shift=0.0, chain_g=0.0, g_feed=0.0, r_emitter=0.0)
    x = np.zeros(4)

    def gap(u: float) -> float:
        first_guess(u, 10.0, bare, x)
        return solve_half(u, 10.0, 10.0, bare, x).i_out - amps

    return brentq(gap, 0.1, 4.0, xtol=1e-13)


# ---- transistors ----


@given(
    i_s=st.floats(1e-21, 1e-5),
    n=st.floats(1.0, 2.0),
    eg=st.floats(0.6, 2.3),
    celsius=st.floats(-40.0, 150.0),
)
def test_both_statements_of_the_temperature_law_agree(i_s, n, eg, celsius):
    assert saturation_current(i_s, n, eg, 3.0, celsius) == pytest.approx(
        catalogue.saturation_current(i_s, n, eg, 3.0, celsius), rel=1e-12
    )


# The catalogue's own forward law, explicit in the current, against the solved half.
@pytest.mark.parametrize("name", ["BD139", "TIP41C", "2N3055", "TIP122", "TIP142"])
@pytest.mark.parametrize("celsius", [0.0, 25.0, 75.0])
@pytest.mark.parametrize("device_a", [1e-3, 0.1, 1.0])
def test_a_lowered_part_follows_the_forward_law_of_the_catalogue(name, celsius, device_a):
    part = PARTS.transistor(name)
    changes = {"output.upper": name, "output.lower": part.complement, "load.ohm": 100.0}
    half = _half({**changes, "output.temperature_c": celsius})
    point = conduction(part, device_a, celsius)
    # Under a reversed collector the solved half leaks a picoampere more.
    assert _on_voltage(half, point.base_a + point.collector_a) == pytest.approx(
        point.vbe_v, abs=1e-6
    )


def test_a_junction_temperature_reaches_every_number_of_a_device():
    cold, warm = _half({}), _half({"output.temperature_c": 75.0})
    assert warm.device.v_t == warm.device.n_vt == thermal_voltage(75.0)
    # Factor 833.5 from 25 to 75 °C, computed by us from the closed form.
    assert warm.device.i_s / cold.device.i_s == pytest.approx(833.5, rel=1e-4)
    assert warm.first.i_s / cold.first.i_s == pytest.approx(833.5, rel=1e-4)
    # Current gain rises by 0.5 to 0.7 % per kelvin: common practice, no source.
    per_kelvin = (warm.device.hfe / cold.device.hfe - 1.0) / 50.0
    assert 0.005 <= per_kelvin <= 0.007


@pytest.mark.parametrize("pair", [("TIP41C", "TIP42C"), ("TIP122", "TIP127")])
@pytest.mark.parametrize("shift", [-0.03, 0.03])
def test_a_voltage_spread_moves_the_base_emitter_voltage_by_itself(pair, shift):
    changes = {"output.upper": pair[0], "output.lower": pair[1]}
    plain = _half(changes)
    moved = _half({**changes, "output.upper_vbe_shift_v": shift})
    other = _half({**changes, "output.upper_vbe_shift_v": shift}, upper=False)
    for amps in (0.1, 1.0):
        change = _on_voltage(moved, amps) - _on_voltage(plain, amps)
        # In a Darlington a higher second junction asks a little more of the first.
        assert change == pytest.approx(shift, abs=1e-4 if pair[0] == "TIP41C" else 3e-3)
    assert _on_voltage(other, 0.1) == pytest.approx(_on_voltage(plain, 0.1), rel=1e-9)


@pytest.mark.parametrize("pair", [("TIP41C", "TIP42C"), ("TIP122", "TIP127")])
def test_a_gain_spread_multiplies_the_gain_of_its_own_side(pair):
    changes = {"output.upper": pair[0], "output.lower": pair[1]}
    spread = {**changes, "output.upper_hfe_factor": 0.6, "output.lower_hfe_factor": 1.3}
    plain = _half(changes)
    for upper, factor in ((True, 0.6), (False, 1.3)):
        half = _half(spread, upper)
        ratios = [half.device.hfe / plain.device.hfe]
        if half.darlington:
            ratios.append(half.first.hfe / plain.first.hfe)
        assert math.prod(ratios) == pytest.approx(factor)
        assert ratios == pytest.approx([ratios[0]] * len(ratios))


def test_resistors_of_the_part_and_of_the_circuit_arrive():
    half = _half({})
    part = PARTS.transistor("TIP122")
    assert half.darlington
    assert (half.r_b, half.r_e, half.r_c) == (part.base_ohm, part.emitter_ohm, part.collector_ohm)
    assert 1.0 / half.g_1 == pytest.approx(part.first_base_emitter_ohm)
    assert 1.0 / half.g_2 == pytest.approx(part.base_emitter_ohm)
    sides = {
        "output.upper_emitter_ohm": 0.33,
        "output.lower_emitter_ohm": 0.47,
        "bias.upper_feed_ohm": 3300.0,
        "bias.lower_feed_ohm": 4700.0,
    }
    sides["bias"] = {"upper": ["1N4148"], "lower": ["1N4148"]}
    # "bias" replaces the table, so it has to come first.
    ordered = {"bias": sides.pop("bias"), **sides}
    upper, lower_side = _half(ordered), _half(ordered, upper=False)
    assert (upper.r_emitter, lower_side.r_emitter) == (0.33, 0.47)
    assert 1.0 / upper.g_feed == pytest.approx(3300.0)
    assert 1.0 / lower_side.g_feed == pytest.approx(4700.0)


def test_a_single_device_has_no_first():
    half = _half({"output.upper": "TIP41C", "output.lower": "TIP42C"})
    assert not half.darlington
    assert half.first == half.device
    assert half.g_1 == half.g_2 == 0.0


def test_the_catch_diode_is_that_of_the_design():
    half = _half({"output.catch_diode": "1N5401"})
    diode = PARTS.diode("1N5401")
    assert half.catch.i_s == diode.is_a
    assert half.catch.n_vt == pytest.approx(diode.n * thermal_voltage(25.0))
    assert half.catch_r == diode.series_ohm


# ---- chains ----

CHAINS = [
    ["1N4148"],
    ["1N4148", "1N4148", "BAT85"],
    ["LED-red", "1N34A"],
    ["1N5401", "LED-green", "1N5819", "1N4001"],
]


@pytest.mark.parametrize("chain", CHAINS)
@pytest.mark.parametrize("celsius", [0.0, 25.0, 60.0])
def test_a_chain_drops_what_its_diodes_drop_one_by_one(chain, celsius):
    # A generous emitter resistor, so that no chain is refused as too hot.
    changes = {"bias.upper": chain, "bias.lower": chain, "bias.temperature_c": celsius}
    half = _half({**changes, "output.emitter_ohm": 10.0, "load.ohm": 100.0})
    assert half.chain == CHAIN_DROPS
    for amps in (0.3e-3, 3e-3, 20e-3):
        x = brentq(lambda x, i=amps: chain_law(x, half)[2] - i, -1.0, 2.5, xtol=1e-15)
        volts = sum(diode_drop(PARTS.diode(name), amps, celsius) for name in chain)
        # The leak across the chain takes up to 5 uA (1N34A), a per cent of the least current.
        through = amps - half.chain_g * chain_law(x, half)[0]
        exact = sum(diode_drop(PARTS.diode(name), through, celsius) for name in chain)
        assert chain_law(x, half)[0] == pytest.approx(exact, rel=1e-9)
        assert chain_law(x, half)[0] == pytest.approx(volts, abs=2e-3)


def test_equal_drops_are_counted_and_the_smallest_saturation_current_comes_first():
    half = _half({"bias.upper": ["BAT85", "1N4148", "BAT85"]})
    assert list(half.chain_is) == sorted(half.chain_is)
    assert list(half.chain_count) == [1.0, 2.0]
    assert half.chain_is[0] == PARTS.diode("1N4148").is_a
    expected = PARTS.diode("1N4148").series_ohm + 2 * PARTS.diode("BAT85").series_ohm
    assert half.chain_r == pytest.approx(expected)


def test_without_a_chain_the_bases_are_tied_to_the_drive_node():
    half = _half({"bias": {}})
    assert half.chain == CHAIN_NONE
    assert (half.g_feed, half.chain_shift, half.chain_g) == (0.0, 0.0, 0.0)


def test_a_multiplier_takes_the_place_of_a_chain():
    multiplier = {"part": "BC547", "collector_base_ohm": 820.0, "base_emitter_ohm": 1000.0}
    half = _half({"bias": {"feed_ohm": 3300.0, "multiplier": multiplier}})
    assert half.chain == CHAIN_MULTIPLIER
    assert half.r_cb == 820.0
    assert 1.0 / half.g_be == pytest.approx(1000.0)
    assert half.multiplier.i_s == PARTS.transistor("BC547").is_a


def test_light_emitting_diodes_warm_by_their_stated_slope():
    cold = _half({"bias.upper": ["LED-red"], "output.emitter_ohm": 2.2})
    warm = _half({"bias.upper": ["LED-red"], "output.emitter_ohm": 2.2, "bias.temperature_c": 45.0})
    # -1.8 mV/K: common practice, no source.
    for x in (1.4, 1.6):
        fall = chain_law(x, warm)[0] - chain_law(x, cold)[0]
        assert fall == pytest.approx(20.0 * -0.0018, rel=1e-9)


# ---- supplies ----


# Crest of a winding without load, sqrt(2) V (1 + regulation): regulation as transformer makers
# define it; computed by us for 2x18 V 12 %, 2x22 V 9 %, 2x15 V 13 %.
@pytest.mark.parametrize(
    ("volts", "regulation", "crest"),
    [(18.0, 0.12, 28.51), (22.0, 0.09, 33.91), (15.0, 0.13, 23.97)],
)
def test_a_transformer_rises_to_its_open_crest(volts, regulation, crest):
    supply = {
        "kind": "transformer",
        "winding_v": volts,
        "winding_ohm": 1.0,
        "regulation": regulation,
        "reservoir_f": 4700e-6,
        "mains_hz": 60.0,
    }
    changes = {"supply": supply, "driver.positive_v": 15.0, "driver.negative_v": -15.0}
    positive, negative, hertz = lower_rails(make_design({**changes, "load.ohm": 32.0}))
    assert positive == negative
    assert positive.kind == RECTIFIED
    assert positive.v_open == pytest.approx(crest, abs=6e-3)
    assert positive.r_source == pytest.approx(1.03)  # with 0.03 ohm of bridge
    assert (positive.v_diode, positive.esr, positive.c) == (0.75, 0.05, 4700e-6)
    assert hertz == 60.0


def test_unlike_windings_give_unlike_rails():
    supply = {
        "kind": "transformer",
        "positive_winding_v": 12.0,
        "negative_winding_v": 9.0,
        "winding_ohm": 1.0,
        "reservoir_f": 4700e-6,
    }
    positive, negative, hertz = lower_rails(make_design({"supply": supply}))
    assert positive.v_open == pytest.approx(12.0 * math.sqrt(2.0))
    assert negative.v_open == pytest.approx(9.0 * math.sqrt(2.0))
    assert hertz == 50.0


def test_a_bench_supply_is_stiff_until_it_has_a_resistance_or_a_limit():
    stiff, _, hertz = lower_rails(make_design({}))
    assert (stiff.kind, stiff.v_open, hertz) == (STIFF, 15.0, 0.0)
    soft, _, _ = lower_rails(make_design({"supply.source_ohm": 0.02}))
    assert (soft.kind, soft.r_source) == (RESISTIVE, 0.02)
    limited, _, _ = lower_rails(make_design({"supply.current_limit_a": 3.0}))
    assert (limited.kind, limited.i_limit) == (RESISTIVE, 3.0)
    assert limited.r_source > 0.0


def test_batteries_are_sources_with_their_internal_resistance():
    supply = {"kind": "battery", "positive_v": 12.6, "negative_v": -9.6, "internal_ohm": 0.15}
    positive, negative, _ = lower_rails(make_design({"supply": supply}))
    assert (positive.kind, positive.v_open, positive.r_source) == (RESISTIVE, 12.6, 0.15)
    assert negative.v_open == 9.6  # rails are magnitudes


# ---- the whole ----


def test_the_input_gain_is_a_voltage_ratio():
    assert lower(make_design({"input.gain_db": 20.0})).gain == pytest.approx(10.0)
    assert lower(make_design({})).gain == 1.0


def test_a_loudspeaker_is_benched_at_its_rated_impedance():
    assert lower(make_design({"load": {"part": "12-inch-8-ohm"}})).bench_ohm == 8.0
    assert lower(make_design({"load.ohm": 6.0})).bench_ohm == 6.0


@pytest.mark.parametrize("name", list_presets())
def test_every_preset_is_lowered_to_finite_numbers(name):
    circuit = lower(load_design(name))

    def finite(value: object) -> bool:
        if value is None:
            return True
        if isinstance(value, tuple):
            return all(finite(part) for part in value)
        return bool(np.all(np.isfinite(np.asarray(value, dtype=float))))

    assert finite(circuit)


def test_every_preset_has_the_types_the_kernel_was_compiled_for():
    # A whole number where a float belongs would have everything compiled a second time.
    kinds = {
        tuple(numba.typeof(part) for part in (c.upper, c.lower, c.driver, c.rail_positive))
        for c in (lower(load_design(name)) for name in list_presets())
    }
    assert len(kinds) == 1
