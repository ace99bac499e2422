"""A stage at rest: the figures agree with each other and with simple circuit laws."""

import dataclasses
import json

import pytest
from conftest import make_design

from tonesim import stage as stage_module
from tonesim.catalogue import diode_drop
from tonesim.check import HalfAtRest, check_design
from tonesim.designfile import list_presets, load_design
from tonesim.errors import SolverError


@pytest.mark.parametrize("preset", list_presets())
def test_the_currents_of_every_preset_add_up(preset):
    design = load_design(preset)
    found = check_design(design)
    assert found.converged
    assert found.residual_a < 1e-6
    driver = 0.0 if design.driver.positive_v is not None else design.driver.part.quiescent_a
    for half in (found.upper, found.lower):
        assert half.feed_a >= half.chain_a - 1e-9  # what the chain leaves over is base current
        assert half.rail_v > abs(half.clip.level_v)
        # Kirchhoff: the rail brings the pair's current, the feed's and the op-amp's own.
        assert half.draw_a >= half.idle_a + half.chain_a + driver - 1e-9
        assert half.clip.load_current_a == pytest.approx(abs(half.clip.level_v) / found.bench_ohm)
    assert found.draw_w == pytest.approx(
        found.upper.draw_a * found.upper.rail_v + found.lower.draw_a * found.lower.rail_v
    )
    assert json.loads(json.dumps(found.as_dict()))["title"] == design.title


def test_a_chain_holds_what_its_diodes_hold_at_its_current():
    design = make_design({"bias.upper": ["1N4148", "1N4001"], "bias.lower": ["1N4148"]})
    found = check_design(design)
    for half, drops in ((found.upper, design.bias.upper), (found.lower, design.bias.lower)):
        law = sum(diode_drop(diode, half.chain_a) for diode in drops)
        assert half.chain_v == pytest.approx(law, abs=1e-4)


def test_a_feed_resistor_obeys_ohm_s_law():
    design = make_design()
    found = check_design(design)
    # The drive node rests at about 0 V between two equal halves.
    expected = (15.0 - found.upper.chain_v) / 3900.0
    assert found.upper.feed_a == pytest.approx(expected, rel=2e-3)


def test_equal_halves_mirror_each_other():
    found = check_design(load_design("full-chain"))

    def figures(half: HalfAtRest) -> dict[str, float]:
        values = dataclasses.asdict(half)
        del values["clip"]
        return values

    assert figures(found.upper) == pytest.approx(figures(found.lower), rel=1e-6)
    assert found.upper.clip.level_v == pytest.approx(-found.lower.clip.level_v, rel=1e-6)
    assert found.output_offset_v == pytest.approx(0.0, abs=1e-6)


def test_the_input_offset_comes_out_times_the_gain():
    # Two drops a side: the op-amp has no dead zone to cross, which would cost it some offset.
    two = ["1N4148", "1N4148"]
    changes = {"driver.offset_v": 0.002, "bias.upper": two, "bias.lower": two}
    found = check_design(make_design(changes))
    assert found.ideal_gain == pytest.approx(23.0)
    assert found.output_offset_v == pytest.approx(0.002 * found.gain, rel=1e-3)


def test_a_finite_open_loop_gain_lowers_the_closed_loop_gain():
    # A / (1 + A beta), e.g. Horowitz and Hill, The Art of Electronics (from memory).
    design = make_design()
    a, beta = design.driver.part.dc_gain, 1.0 / 23.0
    assert check_design(design).gain == pytest.approx(a / (1.0 + a * beta), rel=1e-12)


def test_sine_power_is_that_of_the_half_that_clips_first():
    found = check_design(load_design("lopsided-rails"))
    least = min(found.upper.clip.level_v, -found.lower.clip.level_v)
    assert least == -found.lower.clip.level_v
    assert found.clean_w == pytest.approx(least**2 / 2.0 / 16.0)


def test_a_stage_without_idle_point_is_refused(monkeypatch):
    idle = stage_module.idle_point
    monkeypatch.setattr(
        stage_module, "idle_point", lambda c: dataclasses.replace(idle(c), converged=False)
    )
    with pytest.raises(SolverError, match="'bench piece': the stage finds no idle point"):
        check_design(make_design())
