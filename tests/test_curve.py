"""Idle point, clip levels, rails and surfaces of whole designs."""

import dataclasses
import functools

import numpy as np
import pytest
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st

from tonesim.circuit import Circuit, load_resistance, lower
from tonesim.curve import (
    ClipLevel,
    OperatingPoint,
    build_surface,
    build_surfaces,
    chain_voltage,
    clip_levels,
    grid_axes,
    grid_for,
    idle_point,
    rail_at_rest,
    static_point,
)
from tonesim.designfile import list_presets, load_design
from tonesim.kernel.half import chain_law
from tonesim.limits import estimate_idle
from tonesim.processor import Amplifier

PRESETS = list_presets()
# Presets whose two sides differ, by their rails, their parts or their chains.
LOPSIDED = {
    *("lopsided-rails", "mismatched-pair", "three-drops"),
    *("battery-supply", "mixed-chain", "single-pair-current-limit"),
}
SYMMETRIC = [name for name in PRESETS if name not in LOPSIDED]
SINGLE = {"output.upper": "TIP41C", "output.lower": "TIP42C"}


@functools.cache
def _preset(name: str) -> tuple[Circuit, OperatingPoint]:
    circuit = lower(load_design(name))
    return circuit, idle_point(circuit)


@functools.cache
def _preset_clips(name: str) -> tuple[ClipLevel, ClipLevel]:
    return clip_levels(*_preset(name))


def _clips(changes: dict[str, object]) -> tuple[ClipLevel, ClipLevel]:
    circuit = lower(make_design(changes))
    return clip_levels(circuit, idle_point(circuit))


# ---- idle ----


@pytest.mark.parametrize("name", PRESETS)
def test_every_preset_comes_to_rest(name):
    circuit, idle = _preset(name)
    assert idle.converged
    assert idle.residual_a < 1e-9
    # Kirchhoff at both nodes, written out again.
    load_a = idle.output_v / load_resistance(circuit.load)
    assert idle.upper_current_a - idle.lower_current_a == pytest.approx(load_a, abs=1e-9)
    chains = idle.upper_chain_a - idle.lower_chain_a
    assert idle.driver_current_a + chains == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("name", PRESETS)
def test_rails_and_currents_at_rest_belong_together(name):
    circuit, idle = _preset(name)
    for rail, params, draw in (
        (idle.rail_positive, circuit.rail_positive, idle.draw_positive_a),
        (idle.rail_negative, circuit.rail_negative, idle.draw_negative_a),
    ):
        again = rail_at_rest(params, draw, circuit.mains_hz)
        assert rail.mean_v == pytest.approx(again.mean_v, abs=2e-6)
        assert rail.lowest_v <= rail.mean_v <= rail.highest_v
        assert rail.mean_v <= params.v_open
    point = static_point(circuit, 0.0, idle.rail_positive.mean_v, idle.rail_negative.mean_v)
    assert point.v_o == idle.output_v
    quiescent = 0.0 if circuit.driver.own_supply else circuit.driver.i_quiescent
    drawn = point.i_up + point.i_drive_up + quiescent
    if not circuit.driver.own_supply:
        drawn += max(point.i_amp, 0.0)
    assert idle.draw_positive_a == pytest.approx(drawn, rel=1e-9)


@pytest.mark.parametrize("name", SYMMETRIC)
def test_a_symmetric_design_has_no_offset_and_equal_halves(name):
    _, idle = _preset(name)
    assert abs(idle.output_v) < 1e-9
    assert idle.upper_current_a == pytest.approx(idle.lower_current_a, rel=1e-9)
    assert idle.rail_positive == idle.rail_negative
    up, low = _preset_clips(name)
    assert up.level_v == pytest.approx(-low.level_v, rel=1e-9)
    assert up.cause == low.cause


@pytest.mark.parametrize("name", sorted(LOPSIDED))
def test_a_lopsided_design_has_unlike_halves(name):
    up, low = _preset_clips(name)
    assert up.level_v != pytest.approx(-low.level_v, abs=1e-6) or up.gains_v != low.gains_v
    _, idle = _preset(name)
    # An offset needs an idle current in unlike halves; the loop leaves little of it.
    if name in {"lopsided-rails", "mismatched-pair", "three-drops"}:
        assert 1e-7 < abs(idle.output_v) < 5e-3


@pytest.mark.parametrize("name", PRESETS)
def test_the_idle_current_is_near_the_estimate_of_the_design(name):
    # An independent path: the catalogue's forward laws alone, rails without ripple and sag.
    estimate = estimate_idle(load_design(name))
    _, idle = _preset(name)
    if estimate.current_a > 1e-3:
        assert idle.upper_current_a == pytest.approx(estimate.current_a, rel=0.15)
    else:
        assert abs(idle.upper_current_a - estimate.current_a) < 3e-4


def test_an_offset_of_the_op_amp_appears_at_the_output_times_the_gain():
    circuit = lower(make_design({"driver.offset_v": 3e-3, "bias.upper": ["1N4148"] * 2}))
    idle = idle_point(circuit)
    assert idle.output_v == pytest.approx(3e-3 / circuit.driver.beta, rel=1e-3)


def test_the_sample_loop_rests_at_the_idle_point():
    for name in ("lopsided-rails", "no-chain"):
        amplifier = Amplifier(load_design(name))
        amplifier.prepare(48_000.0, 512)
        silence = amplifier.process(np.zeros(512))
        _, idle = _preset(name)
        assert np.max(np.abs(silence - idle.output_v)) < 1e-4


# ---- clip levels ----


@pytest.mark.parametrize("name", PRESETS)
def test_clip_levels_come_with_their_evidence(name):
    circuit, idle = _preset(name)
    for clip, rail in zip(
        _preset_clips(name), (idle.rail_positive, idle.rail_negative), strict=True
    ):
        assert clip.residual_a < 1e-6
        assert 0.0 < abs(clip.level_v) < rail.mean_v
        assert clip.load_current_a == pytest.approx(abs(clip.level_v) / circuit.bench_ohm)
        # Two op-amp limits within 5 % are a tie, decided by where its voltage goes.
        assert clip.gains_v[clip.cause] >= 0.95 * max(clip.gains_v.values())
        assert clip.gains_v[clip.cause] > 0.01
    up, low = _preset_clips(name)
    assert up.level_v > 0.0 > low.level_v


def test_an_op_amp_out_of_current_is_named_until_its_limit_is_raised():
    part = {"like": "NJM4558", "source_limit_a": 0.2, "sink_limit_a": 0.2}
    limited = _clips({**SINGLE, "bias": {}, "driver.part": "NJM4558"})
    raised = _clips({**SINGLE, "bias": {}, "driver.part": part})
    for before, after in zip(limited, raised, strict=True):
        assert before.cause == "driver current"
        assert after.cause != "driver current"
        assert abs(after.level_v) > abs(before.level_v) + 0.5


def test_the_preset_with_a_weak_op_amp_says_so():
    assert [c.cause for c in _preset_clips("single-pair-current-limit")] == ["driver current"] * 2


def test_a_driver_on_a_high_supply_saturates_the_pair():
    own = {"driver.part": "NE5532", "driver.positive_v": 20.0, "driver.negative_v": -20.0}
    up, low = _clips({**own, "bias": {}})
    assert (up.cause, low.cause) == ("saturation", "saturation")
    # What is missing from the rail: the Darlington's saturation voltage, a volt or so, and the
    # emitter resistor's share.
    assert 15.0 - 0.22 * up.load_current_a - up.level_v == pytest.approx(1.0, abs=0.3)
    # A higher rail lets the pair go on by as much, an op-amp with more swing does not.
    higher, _ = _clips({**own, "bias": {}, "supply.positive_v": 15.5})
    assert higher.level_v - up.level_v == pytest.approx(0.5, abs=0.06)
    assert up.gains_v["driver swing"] < 0.01


@pytest.mark.parametrize(("pair", "feed"), [({}, 39e3), (SINGLE, 4.7e3)])
def test_a_large_feed_resistor_starves_the_base(pair, feed):
    starved = _clips({**pair, "bias.feed_ohm": feed})
    fed = _clips({**pair, "bias.feed_ohm": feed / 4.0})
    for before, after in zip(starved, fed, strict=True):
        assert before.cause == "base starvation"
        assert abs(after.level_v) > 1.5 * abs(before.level_v)
        # Nothing else helps.
        assert all(g < 0.05 for name, g in before.gains_v.items() if name != "base starvation")


def test_a_starved_base_gets_what_the_feed_resistor_gives():
    # By hand: at the clip level the feed carries the base current alone, Vo/RL = (hFE + 1)
    # (V - Vo - RE Io - VBE)/R; the gain is that of the law at this current (common practice).
    circuit = lower(make_design({**SINGLE, "bias.feed_ohm": 22e3}))
    up, _ = clip_levels(circuit, idle_point(circuit))
    amps = up.level_v / 8.0
    hfe = circuit.upper.device.hfe / (1.0 + amps / circuit.upper.device.i_k)
    base = (15.0 - up.level_v - 0.22 * amps - 0.58) / 22e3
    assert (hfe + 1.0) * base == pytest.approx(amps, rel=0.02)


def test_without_a_chain_the_driver_swing_sets_the_level():
    changes = {"bias": {}, "load.ohm": 100.0, "output.emitter_ohm": 0.0}
    up, _ = _clips({**changes, "driver.part": "NE5532"})
    assert up.cause == "driver swing"
    # NE5532: 13.6 V into 10 kilohm (from memory), less the Darlington's two junctions.
    assert up.level_v == pytest.approx(13.6 - 1.25, abs=0.1)


def test_a_supply_limit_below_the_clip_current_is_the_cause():
    up, low = _clips({"supply.current_limit_a": 0.5})
    assert (up.cause, low.cause) == ("supply current limit", "supply current limit")
    assert up.level_v == pytest.approx(0.5 * 8.0)
    assert low.level_v == pytest.approx(-0.5 * 8.0)
    free, _ = _clips({"supply.current_limit_a": 5.0})
    assert free.cause != "supply current limit"


@pytest.mark.parametrize("changes", [{}, {**SINGLE, "bias": {}, "driver.part": "NJM4558"}])
def test_the_sample_loop_clips_where_the_static_solution_says(changes):
    design = make_design(changes)
    amplifier = Amplifier(design)
    amplifier.prepare(48_000.0, 480)
    up, low = clip_levels(amplifier.circuit, amplifier.idle)
    t = np.arange(4800) / 48_000.0
    amplifier.process(2.0 * up.level_v * amplifier.circuit.driver.beta * np.sin(200.0 * np.pi * t))
    evidence = amplifier.evidence
    assert evidence.unsettled_steps == 0
    # The loop reads the surface, the static solution the device laws.
    assert evidence.highest_v == pytest.approx(up.level_v, abs=5e-3)
    assert evidence.lowest_v == pytest.approx(low.level_v, abs=5e-3)


# ---- static solutions ----


@settings(max_examples=25)
@given(v_in=st.floats(-3.0, 3.0), step=st.floats(1e-3, 1.0))
def test_the_static_output_rises_with_the_input_and_is_odd(v_in, step):
    circuit = _preset("full-chain")[0]
    here = static_point(circuit, v_in, 14.0, 14.0)
    more = static_point(circuit, v_in + step, 14.0, 14.0)
    mirrored = static_point(circuit, -v_in, 14.0, 14.0)
    assert more.v_o >= here.v_o - 1e-9
    assert mirrored.v_o == pytest.approx(-here.v_o, abs=1e-9)
    assert here.imbalance < 1e-6
    assert here.residual < 1e-6


@pytest.mark.parametrize("name", [n for n in PRESETS if n not in ("no-chain", "slow-driver")])
def test_the_chain_voltage_is_the_inverse_of_the_chain_law(name):
    circuit, idle = _preset(name)
    for half, amps in (
        (circuit.upper, idle.upper_chain_a),
        (circuit.lower, idle.lower_chain_a),
    ):
        if half.chain == 0:
            assert chain_voltage(half, amps) == 0.0
            continue
        volts = chain_voltage(half, amps)
        grid = np.linspace(-1.0, 2.0, 3001)
        law = np.array([chain_law(x, half)[:3:2] for x in grid])
        assert volts == pytest.approx(np.interp(amps, law[:, 1], law[:, 0]), abs=2e-3)
        assert chain_voltage(half, 0.0) == pytest.approx(0.0, abs=1e-9)


# ---- surfaces ----


@pytest.mark.parametrize("name", PRESETS)
def test_the_grid_holds_every_voltage_of_the_stage(name):
    circuit, _ = _preset(name)
    grid = grid_for(circuit)
    us, hs = grid_axes(grid)
    span = circuit.rail_positive.v_open + circuit.rail_negative.v_open
    assert us[0] <= -span
    assert us[-1] >= span
    assert hs[0] <= -1.5
    assert hs[-1] >= span + 1.5
    assert np.all(np.diff(us) > 0.0)
    assert np.all(np.diff(hs) > 0.0)
    for step in (grid.du_fine, grid.du_coarse, grid.dh_fine, grid.dh_coarse):
        assert np.log2(step) == int(np.log2(step))
    assert us.size == grid.n_low + grid.n_fine + grid.n_high + 1
    assert hs.size == grid.n_h_fine + grid.n_h_coarse + 1
    # The zones meet without a gap.
    assert us[grid.n_low] == grid.u_fine
    assert us[grid.n_low + grid.n_fine] == grid.u_coarse
    assert hs[grid.n_h_fine] == grid.h_coarse


def test_equal_halves_share_one_table_and_unlike_ones_do_not():
    same = build_surfaces(lower(make_design()))
    assert same.upper is same.lower
    other = build_surfaces(lower(make_design({"output.lower_hfe_factor": 1.3})))
    assert other.upper is not other.lower
    assert np.any(other.upper != other.lower)
    np.testing.assert_array_equal(other.upper, same.upper)


def test_a_surface_comes_with_its_evidence():
    circuit = lower(make_design())
    surfaces = build_surfaces(circuit)
    assert surfaces.residual < 1e-9
    assert 1 < surfaces.newton_steps < 50
    table, residual, steps = build_surface(circuit.upper, surfaces.grid)
    assert table is surfaces.upper
    assert (residual, steps) == (surfaces.residual, surfaces.newton_steps)
    us, hs = grid_axes(surfaces.grid)
    assert table.shape == (hs.size, us.size, 4)


def test_many_designs_do_not_fill_the_memory_with_tables():
    circuit = lower(make_design({"supply.positive_v": 6.0}))
    # A handful of nodes is enough to fill the cache.
    few = {"n_low": 1, "n_fine": 4, "n_high": 1, "n_h_fine": 2, "n_h_coarse": 1}
    grid = grid_for(circuit)._replace(**few)
    first, _, _ = build_surface(circuit.upper, grid)
    assert build_surface(circuit.upper, grid)[0] is first
    for k in range(20):
        build_surface(circuit.upper._replace(r_emitter=0.3 + 0.01 * k), grid)
    again, _, _ = build_surface(circuit.upper, grid)
    assert again is not first
    np.testing.assert_array_equal(again, first)


def test_operating_points_cannot_be_changed():
    _, idle = _preset("full-chain")
    with pytest.raises(dataclasses.FrozenInstanceError):
        idle.output_v = 1.0


def test_an_op_amp_lifted_far_beyond_the_rails_is_still_solved():
    own = {"driver.positive_v": 9.0, "driver.negative_v": -9.0}
    up, low = _clips({**own, "bias.upper": ["1N4148"] * 2, "bias.lower": ["1N4148"] * 2})
    assert up.level_v == pytest.approx(-low.level_v, rel=1e-9)
    assert up.cause == low.cause == "driver swing"
    assert up.gains_v == pytest.approx(low.gains_v, abs=1e-9)
    assert max(up.residual_a, low.residual_a) < 1e-9
