"""The probe on a stage: same bits by every door, coherent steady tones, charge and energy."""

import functools
import math

import numpy as np
import pytest
from bench_pieces import class_ab
from conftest import make_design
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import bilinear, lfilter

from tonesim.designfile import load_design
from tonesim.probe import BASE_RATE_HZ, Probe, Solved
from tonesim.signals import sine
from tonesim.stage import build_stage


@pytest.fixture(scope="module")
def stiff() -> Probe:
    return Probe(build_stage(make_design(), resistor=True))


@pytest.fixture(scope="module")
def mains() -> Probe:
    return Probe(build_stage(load_design("small-saggy-transformer"), resistor=True))


@functools.cache
def linear() -> Probe:
    return Probe(build_stage(class_ab()))


def drive(probe: Probe, seconds: float = 0.01, peak_v: float = 0.3) -> np.ndarray:
    return sine(950.0, peak_v, probe.rate_hz, probe.frames(seconds))


@pytest.mark.parametrize("name", ["stiff", "mains"])
def test_trace_and_run_give_the_same_bits_however_the_signal_is_cut(name, request):
    probe = request.getfixturevalue(name)
    x = drive(probe)
    whole = probe.twin().run(x)
    assert np.array_equal(probe.twin().trace(x).output_v, whole)
    cut = probe.twin()
    pieces = [cut.run(x[:1]), cut.trace(x[1:700]).output_v, cut.run(x[700:])]
    assert np.array_equal(np.concatenate(pieces), whole)
    again = Probe(probe.stage)
    assert np.array_equal(again.run(x), whole)


def test_a_twin_shares_nothing_that_changes(stiff):
    x = drive(stiff)
    reference = Probe(stiff.stage)
    one, other = reference.twin(), reference.twin()
    first = one.run(x)
    steps = reference.solved.steps
    other.run(0.2 * x)
    other.run(x)
    assert np.array_equal(one.twin().run(x), first)  # at rest again, whatever its twin did
    assert reference.solved.steps == steps
    assert one.solved.steps == x.size
    assert other.solved.steps == 2 * x.size
    assert np.array_equal(reference.run(x), first)


def test_what_twins_did_is_counted_in_all(stiff):
    probe = Probe(stiff.stage)
    own = probe.solved
    twins = [probe.twin(), probe.twin()]
    grandchild = twins[0].twin()
    for k, each in enumerate((*twins, grandchild)):
        each.run(np.zeros(10 * (k + 1)))
    assert probe.solved == own
    assert probe.solved_in_all.steps == own.steps + 10 + 20 + 30
    assert twins[1].solved_in_all.steps == 20
    assert Solved(1, 2, 3) + Solved(10, 20, 30) == Solved(11, 22, 33)


def test_reset_is_rest_and_keeps_the_count(stiff):
    probe = stiff.twin()
    x = drive(probe)
    first = probe.run(x)
    steps = probe.solved.steps
    probe.reset()
    assert probe.solved.steps == steps
    assert np.array_equal(probe.run(x), first)
    assert probe.solved.steps == 2 * steps
    assert probe.solved.unsettled_steps == 0


@pytest.mark.parametrize("name", ["stiff", "mains"])
def test_rest_is_rest(name, request):
    probe = request.getfixturevalue(name)
    idle = probe.idle
    trace = probe.twin().trace(np.zeros(probe.frames(0.1)))  # whole mains cycles
    assert np.max(np.abs(trace.output_v - idle.output_v)) < 1e-4
    for rail, found in (
        (idle.rail_positive, trace.positive_v),
        (idle.rail_negative, trace.negative_v),
    ):
        # The static solution draws the current of the mean rail; under ripple it varies.
        assert np.mean(found) == pytest.approx(rail.mean_v, rel=5e-4)
        assert np.min(found) == pytest.approx(rail.lowest_v, rel=1e-3)
        assert np.max(found) == pytest.approx(rail.highest_v, rel=1e-3)


def test_steps_at_a_multiple_of_the_rate_are_as_many_times_as_short(stiff):
    fine = Probe(stiff.stage, 4)
    assert fine.rate_hz == 4 * BASE_RATE_HZ
    assert fine.frames(0.01) == 4 * stiff.frames(0.01)
    # The trapezoidal rule is of second order: a quarter of the step leaves a sixteenth.
    coarse, finer = stiff.twin().run(drive(stiff)), fine.run(drive(fine))
    at_start = np.abs(coarse - finer[::4])  # both begin at time zero
    assert np.max(at_start) < 5e-3 * np.max(np.abs(coarse))


# ---- tones ----


def test_a_tone_ends_in_a_steady_state(stiff):
    tone = stiff.twin().tone(((1000.0, 0.3),), 0.02)
    assert tone.steady
    assert tone.change_v <= 1e-7 * np.max(np.abs(tone.output_v))
    cycles, frames = tone.cycles[0], tone.output_v.size
    assert frames == stiff.frames(0.02)
    # Coprime, so that no alias meets a harmonic (IEEE Std 1241, coherent sampling; from memory).
    assert math.gcd(cycles, frames) == 1
    assert abs(cycles / 0.02 - 1000.0) <= 100.0
    # One more record by another door is the same record.
    probe = stiff.twin()
    x = sine(cycles / 0.02, 0.3, probe.rate_hz, frames)
    for _ in range(8):
        y = probe.run(x)
    assert np.max(np.abs(y - tone.output_v)) < 1e-6 * np.max(np.abs(y))


def test_a_tone_is_periodic_with_the_mains(mains):
    tone = mains.twin().tone(((1000.0, 0.2),), 0.1)
    assert tone.steady
    spectrum = np.abs(np.fft.rfft(tone.output_v))
    assert np.argmax(spectrum) == tone.cycles[0]


def test_two_tones_keep_their_frequencies_where_they_are_asked_to(stiff):
    parts = ((19_000.0, 0.1), (20_000.0, 0.1))
    tone = stiff.twin().tone(parts, 0.02, prime=False)
    assert tone.cycles == (380, 400)
    spectrum = np.abs(np.fft.rfft(tone.output_v))
    assert sorted(np.argsort(spectrum)[-2:]) == [380, 400]


def test_a_tone_that_never_becomes_periodic_says_so(stiff, monkeypatch):
    # One record after the first, which began at rest: the start is still in the difference.
    monkeypatch.setattr("tonesim.probe._MOST_RECORDS", 1)
    monkeypatch.setattr("tonesim.probe._STEADY", 1e-15)
    tone = stiff.twin().tone(((1000.0, 0.3),), 0.02)
    assert not tone.steady
    assert tone.change_v > 0.0


@settings(max_examples=10)
@given(st.floats(100.0, 5000.0), st.floats(0.001, 0.3))
def test_a_stage_without_crossover_is_a_loop_of_one_pole(hertz, peak):
    # First-order loop G / (1 + s G / (2 pi GBW)) by scipy's bilinear transform, which is the
    # trapezoidal rule; 100 MHz over 23 is 4.35 MHz. The pair's follower gain is about 1.5 % short
    # of 1 and the corner with it, which turns 5 kHz by 1e-4; the start rings until that is over.
    probe = linear().twin()
    x = sine(hertz, peak, probe.rate_hz, 3000)
    gain = 23.0
    b, a = bilinear([gain], [gain / (2.0 * np.pi * 100e6), 1.0], probe.rate_hz)
    gap = probe.run(x) - lfilter(b, a, x)
    assert np.max(np.abs(gap[200:])) < 1.5e-4 * gain * peak


# ---- charge and energy ----


def test_on_stiff_rails_energy_is_rail_times_charge(stiff):
    probe = stiff.twin()
    probe.run(drive(probe))
    charge = probe.draw()
    assert charge.shape == (2,)
    assert np.all(charge > 0.0)
    assert probe.energy() == pytest.approx(15.0 * float(np.sum(charge)), rel=1e-12)


def test_the_charge_of_a_rest_is_the_idle_draw_times_its_time(stiff):
    probe = stiff.twin()
    probe.run(np.zeros(probe.frames(0.01)))
    idle = probe.idle
    expected = 0.01 * np.array([idle.draw_positive_a, idle.draw_negative_a])
    np.testing.assert_allclose(probe.draw(), expected, rtol=1e-6)
