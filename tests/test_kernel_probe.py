"""The probed loop: Kirchhoff's laws at its nodes, and rails that come up as RC sections do."""

import functools

import numpy as np
import pytest
from conftest import make_design

from tonesim.kernel import amplifier as loop
from tonesim.kernel import probe
from tonesim.kernel.rails import RECTIFIED
from tonesim.stage import Stage, build_stage, state_at_rest, step_params

RATE = 384_000.0
TIGHT_V = 1e-9  # a last Newton step of this size leaves its square


@functools.cache
def whole(kind: str) -> Stage:
    supplies = {
        "stiff": {"kind": "bench", "positive_v": 15.0},
        "battery": {"kind": "battery", "positive_v": 15.0, "internal_ohm": 0.5},
        "transformer": {
            "kind": "transformer",
            "winding_v": 11.0,
            "winding_ohm": 0.5,
            "reservoir_f": 4700e-6,
        },
    }
    return build_stage(make_design({"supply": supplies[kind]}))


def params(stage: Stage) -> loop.AmplifierParams:
    return step_params(stage, 1.0 / RATE, TIGHT_V)


def tone(frames: int = 4000) -> np.ndarray:
    return 0.4 * np.sin(2.0 * np.pi * 950.0 * np.arange(1, frames + 1) / RATE)


def traced(stage: Stage, x: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    state, evidence = state_at_rest(stage), np.zeros(loop.EVIDENCE_SIZE)
    out = np.empty((x.size, probe.COLUMNS))
    probe.traced(x, out, state, evidence, params(stage))
    return out, state, evidence


@pytest.mark.parametrize("kind", ["stiff", "battery", "transformer"])
def test_probes_change_nothing(kind):
    stage, x = whole(kind), tone()
    state, evidence, y = state_at_rest(stage), np.zeros(loop.EVIDENCE_SIZE), np.empty(x.size)
    loop.advance(x, y, state, evidence, params(stage))
    out, probed_state, probed_evidence = traced(stage, x)
    assert np.array_equal(out[:, probe.OUTPUT], y)
    assert np.array_equal(probed_state, state)
    # Sums are added up in other portions.
    np.testing.assert_allclose(probed_evidence, evidence, rtol=1e-12)


def test_currents_at_the_output_node_add_up():
    stage = whole("stiff")
    out, _, _ = traced(stage, tone())
    # Kirchhoff: what both halves leave over flows into load and feedback network.
    into = out[:, probe.UPPER] - out[:, probe.LOWER]
    siemens = 1.0 / 8.0 + 1.0 / (33e3 + 1500.0)
    np.testing.assert_allclose(into, siemens * out[:, probe.OUTPUT], atol=1e-7)


def test_what_the_op_amp_gives_falls_across_its_output_resistance():
    stage = whole("stiff")
    out, _, _ = traced(stage, tone())
    e = out[:, probe.DRIVER] - out[:, probe.DRIVE]
    q = stage.circuit.driver
    assert q.r_source == q.r_sink
    # The law of kernel/driver.py written again: I s(e / R I) with s(y) = y / sqrt(1 + y^2).
    y = e / (q.r_source * q.i_source)
    np.testing.assert_allclose(
        out[:, probe.AMP], q.i_source * y / np.sqrt(1.0 + y**2) + 1e-6 * e, rtol=1e-12
    )


def test_rails_of_a_trace_are_those_each_step_was_made_with():
    stage = whole("battery")
    out, _, evidence = traced(stage, tone())
    # Ohm's law of a settled source: its mean current is the mean drop over its resistance.
    drop = 15.0 - out[:, probe.POSITIVE]
    drawn = evidence[loop.CHARGE_P] / out.shape[0]
    assert out[0, probe.POSITIVE] == stage.idle.rail_positive.mean_v
    # 50 us of decoupling are 20 steps of 4000, and the tone is cut off anywhere in its cycle.
    assert np.mean(drop) / 0.5 == pytest.approx(drawn, rel=5e-3)


@pytest.mark.parametrize("kind", ["stiff", "transformer"])
def test_powered_with_one_state_of_work_is_traced(kind):
    stage, x = whole(kind), tone()
    p = params(stage)
    expected, _, _ = traced(stage, x)
    angle = 2.0 * np.pi * stage.circuit.mains_hz / RATE * np.arange(1, x.size + 1)
    held = p._replace(mains_sin=0.0, mains_cos=1.0)
    state, evidence = state_at_rest(stage), np.zeros(loop.EVIDENCE_SIZE)
    out = np.empty((x.size, probe.COLUMNS))
    for least in (0.0, 12.0, 1e3):
        state[:] = state_at_rest(stage)
        probe.powered(np.sin(angle), x, out, state, evidence, held, held, least)
        if kind == "stiff":
            assert np.array_equal(out, expected)
        else:
            # The mains' sine is turned step by step in the one, computed in the other.
            np.testing.assert_allclose(out, expected, atol=1e-9)


def ramp(slope: float, tau: float, t: np.ndarray) -> np.ndarray:
    """Voltage of an RC section behind a ramp, slope (t - tau (1 - exp(-t / tau)))."""
    return slope * (t - tau * -np.expm1(-t / tau))


def test_an_empty_reservoir_follows_a_ramp_as_an_rc_section_does():
    # No chain, no feed, a dead op-amp: nothing is drawn, and the rail is an RC section.
    stage = build_stage(make_design({"bias": {}}))
    c, r = 470e-6, 2.0
    rail = stage.circuit.rail_positive._replace(
        kind=RECTIFIED, v_open=15.0, r_source=r, c=c, esr=0.0, v_diode=0.0
    )
    driver = stage.circuit.driver._replace(i_quiescent=0.0)
    circuit = stage.circuit._replace(rail_positive=rail, rail_negative=rail, driver=driver)
    held = params(stage._replace(circuit=circuit))._replace(mains_sin=0.0, mains_cos=1.0)
    asleep = held._replace(
        driver=driver._replace(
            own_supply=True,
            rail_positive=0.1,
            rail_negative=-0.1,
            drop_positive=0.0,
            drop_negative=0.0,
        )
    )
    n = round(0.01 * RATE)
    source = np.arange(1, n + 1) / n
    state, evidence = np.zeros(loop.LOAD), np.zeros(loop.EVIDENCE_SIZE)
    out = np.empty((n, probe.COLUMNS))
    probe.powered(source, np.zeros(n), out, state, evidence, asleep, held, 10.0)
    t = np.arange(n) / RATE
    # Explicit Euler of a source that is one step ahead: half a step of 39 mV a step's ramp.
    for column in (probe.POSITIVE, probe.NEGATIVE):
        np.testing.assert_allclose(out[:, column], ramp(15.0 / 0.01, r * c, t), atol=0.01)
    assert evidence[loop.UNSETTLED] == 0


def test_before_its_least_supply_the_dead_state_works_and_after_it_the_other():
    stage = whole("stiff")
    alive = params(stage)
    shifted = alive._replace(driver=alive.driver._replace(offset=0.01))
    circuit = stage.circuit
    rail = circuit.rail_positive._replace(
        kind=RECTIFIED, v_open=15.0, r_source=0.1, c=100e-6, esr=0.0, v_diode=0.0
    )
    dead, alive = (
        p._replace(rail_positive=rail, rail_negative=rail, mains_sin=0.0, mains_cos=1.0)
        for p in (shifted, alive)
    )
    n = 8000
    source = np.minimum(np.arange(1, n + 1) / 4000.0, 1.0)
    state, evidence = np.zeros(loop.LOAD), np.zeros(loop.EVIDENCE_SIZE)
    out = np.empty((n, probe.COLUMNS))
    probe.powered(source, np.zeros(n), out, state, evidence, dead, alive, 24.0)
    total = out[:, probe.POSITIVE] + out[:, probe.NEGATIVE]
    first = int(np.flatnonzero(total >= 24.0)[0])
    # The offset that only the one state has, times the gain of 23, and none of it later.
    assert np.max(np.abs(out[first - 200 : first, probe.OUTPUT] - 0.23)) < 0.01
    assert np.max(np.abs(out[-200:, probe.OUTPUT])) < 0.001
    assert np.all(np.abs(out[first : first + 3, probe.OUTPUT] - 0.23) > 1e-4)
