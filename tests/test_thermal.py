"""Heat against data sheets, published designs and closed forms.

"Computed by us" means from the closed form, by a separate script.
"""

import math
from dataclasses import replace

import numpy as np
import pytest
from conftest import make_design
from hypothesis import assume, example, given
from hypothesis import strategies as st
from scipy.special import lambertw, wrightomega

from tonesim.catalogue import load_catalogue
from tonesim.circuit import lower
from tonesim.curve import idle_point
from tonesim.errors import UsageError
from tonesim.thermal import (
    Bias,
    HeatPath,
    derated_power,
    junction_temperature,
    largest_heatsink,
    largest_stable_rth,
    optimum_idle_current,
    runaway_loop_gain,
    settle,
    vbe_slope,
)
from tonesim.units import thermal_voltage

VT = thermal_voltage(25.0)
PARTS = load_catalogue()

# ---- junction, sink ----


# Philips data sheets, design examples of heat sinks: TDA1521A (July 1994) 7.8 W, 6 K/W, 5.5 K/W;
# TDA2613 (July 1994) 4.1 W, 8 K/W, 14 K/W; TDA2611A (November 1982) 2.2 W, 11 + 1 K/W, 29 K/W;
# all with 150 °C in air of 60 °C. W. Stegall, notes on the thermal design of amplifiers: 35.9387 W,
# 1 + 0.2 K/W, 150 °C in air of 25 and 50 °C. The last row is computed by us.
@pytest.mark.parametrize(
    ("power", "rth_jc", "rth_cs", "ambient", "junction", "sink", "digits"),
    [
        (7.8, 6.0, 0.0, 60.0, 150.0, 5.5, 0.05),
        (4.1, 8.0, 0.0, 60.0, 150.0, 14.0, 0.5),
        (2.2, 11.0, 1.0, 60.0, 150.0, 29.0, 0.5),
        (35.9387, 1.0, 0.2, 25.0, 150.0, 2.27814, 6e-6),
        (35.9387, 1.0, 0.2, 50.0, 150.0, 1.58252, 6e-6),
        (15.8, 1.92, 0.5, 40.0, 130.0, 3.276, 6e-4),
    ],
)
def test_published_heat_sinks(power, rth_jc, rth_cs, ambient, junction, sink, digits):
    path = HeatPath(rth_jc, rth_cs, 0.0)
    need = largest_heatsink(power, path, ambient, junction)
    assert need.possible
    assert need.rth_sa_k_per_w == pytest.approx(sink, abs=digits)
    on_it = replace(path, rth_sa_k_per_w=need.rth_sa_k_per_w)
    assert junction_temperature(power, on_it, ambient) == pytest.approx(junction, abs=1e-9)


def test_published_temperatures_along_the_path():
    # Stegall, the same notes, figure 3: a circuit simulator's sink, case and junction in 25 °C.
    for path, expected in (
        (HeatPath(0.0, 0.0, 1.58252), 81.87371),
        (HeatPath(0.0, 0.2, 1.58252), 89.06145),
        (HeatPath(1.0, 0.2, 1.58252), 125.0002),
    ):
        # Printed to seven digits, from a power rounded to six.
        assert junction_temperature(35.9387, path, 25.0) == pytest.approx(expected, abs=2e-4)


def test_data_sheet_ratings_are_junction_temperatures():
    # TIP41C sheet (ON Semiconductor, Rev. 4, 2002): 65 W at a case of 25 °C, 1.92 K/W; 2.0 W in air
    # of 25 °C, 62.5 K/W; 150 °C either way. The resistance is printed to three digits.
    assert junction_temperature(65.0, HeatPath(1.92, 0.0, 0.0), 25.0) == pytest.approx(
        150.0, abs=0.4
    )
    in_air = HeatPath(1.92, 0.0, 62.5 - 1.92)
    assert junction_temperature(2.0, in_air, 25.0) == pytest.approx(150.0, abs=1e-9)


def test_two_devices_on_one_sink():
    # A sink that serves one at 2 K/W must have 1 K/W for two.
    one = HeatPath(1.5, 0.5, 2.0)
    two = HeatPath(1.5, 0.5, 1.0, sharing=2)
    assert junction_temperature(10.0, two, 40.0) == junction_temperature(10.0, one, 40.0) == 80.0
    assert largest_heatsink(10.0, two, 40.0, 80.0).rth_sa_k_per_w == 1.0


def test_where_no_sink_suffices():
    path = HeatPath(3.0, 1.0, 99.0)
    need = largest_heatsink(30.0, path, 40.0, 150.0)
    assert not need.possible
    assert need.rth_sa_k_per_w == 0.0
    assert need.coolest_junction_c == 160.0
    cold = largest_heatsink(0.0, path, 40.0, 150.0)
    assert (cold.possible, cold.rth_sa_k_per_w, cold.coolest_junction_c) == (True, math.inf, 40.0)
    assert not largest_heatsink(0.0, path, 160.0, 150.0).possible


# 2N3055 sheet (ON Semiconductor): 115 W at 25 °C, derate 0.657 W/K to 0 at 200 °C (1.52 K/W, so
# the slope agrees to the last printed digit). TIP41C sheet: 65 W, derate 0.52 W/K; 75/1.92 at
# 75 °C.
@pytest.mark.parametrize(
    ("name", "case", "watts", "digits"),
    [
        ("2N3055", 25.0, 115.0, 0.05),
        ("2N3055", 100.0, 115.0 - 75.0 * 0.657, 0.1),
        ("2N3055", 200.0, 0.0, 1e-12),
        ("2N3055", 250.0, 0.0, 1e-12),
        ("TIP41C", 25.0, 65.0, 0.05),
        ("TIP41C", 75.0, 39.1, 0.05),
        ("TIP41C", 75.0, 65.0 - 50.0 * 0.52, 0.1),
        ("TIP41C", -20.0, 65.0, 1e-12),
    ],
)
def test_derating_lines_of_data_sheets(name, case, watts, digits):
    part = PARTS.transistor(name)
    found = derated_power(case, part.rth_jc_k_per_w, part.tj_max_c, part.power_w)
    assert found == pytest.approx(watts, abs=digits)


RTH = st.floats(0.01, 100.0)
POWER = st.floats(0.0, 200.0)


@given(POWER, RTH, RTH, RTH, st.floats(0.0, 50.0), st.integers(1, 4))
def test_more_resistance_never_cools(power, rth_jc, rth_cs, rth_sa, more, sharing):
    path = HeatPath(rth_jc, rth_cs, rth_sa, sharing)
    here = junction_temperature(power, path, 25.0)
    for name in ("rth_jc_k_per_w", "rth_cs_k_per_w", "rth_sa_k_per_w"):
        worse = replace(path, **{name: getattr(path, name) + more})
        assert junction_temperature(power, worse, 25.0) >= here
    assert junction_temperature(power + more, path, 25.0) >= here


@given(st.floats(0.1, 200.0), RTH, RTH, st.floats(-20.0, 60.0), st.integers(1, 4))
def test_the_largest_sink_just_keeps_the_rating(power, rth_jc, rth_cs, ambient, sharing):
    path = HeatPath(rth_jc, rth_cs, 0.0, sharing)
    need = largest_heatsink(power, path, ambient, 150.0)
    hottest = junction_temperature(
        power, replace(path, rth_sa_k_per_w=need.rth_sa_k_per_w), ambient
    )
    if need.possible:
        assert hottest == pytest.approx(150.0, abs=1e-9)
    else:
        assert hottest == need.coolest_junction_c
        assert hottest >= 150.0


# ---- runaway ----


# Loop gain and largest resistance, computed by us with 25.7 mV; ours at 25 °C is 25.693 mV, which
# moves the rows by up to 3e-4 of themselves.
@pytest.mark.parametrize(
    ("vce", "theta", "emitter", "idle", "gain", "limit"),
    [
        (24.0, 5.0, 0.22, 0.050, 0.3270, 15.29),
        (24.0, 5.0, 0.0, 0.100, 0.9339, None),
        (24.0, 5.0, 0.0, 0.117, 1.093, None),
        (35.0, 8.0, 0.22, 0.100, 1.174, 6.81),
    ],
)
def test_loop_gains_of_heat(vce, theta, emitter, idle, gain, limit):
    bias = Bias(idle, vce, emitter)
    assert runaway_loop_gain(bias, theta) == pytest.approx(gain, rel=6e-4)
    assert runaway_loop_gain(bias, largest_stable_rth(bias)) == pytest.approx(1.0, rel=1e-12)
    assert limit is None or largest_stable_rth(bias) == pytest.approx(limit, rel=1e-3)


def test_nothing_runs_away_without_current_or_with_full_tracking():
    for bias in (Bias(0.0, 24.0, 0.0), Bias(0.1, 24.0, 0.22, tracking=1.0), Bias(0.1, 0.0, 0.22)):
        assert runaway_loop_gain(bias, 50.0) == 0.0
        assert largest_stable_rth(bias) == math.inf


@given(
    st.floats(1e-6, 2.0),
    st.floats(1.0, 60.0),
    st.floats(0.0, 2.0),
    st.floats(0.0, 0.99),
    st.floats(0.1, 60.0),
    st.floats(1.0, 3.0),
)
def test_the_loop_gain_rises_and_falls_with_its_causes(idle, vce, emitter, tracking, theta, times):
    bias = Bias(idle, vce, emitter, tracking=tracking)
    gain = runaway_loop_gain(bias, theta)
    almost = gain * (1.0 - 1e-12)  # where a cause changes nothing, rounding is left
    assert runaway_loop_gain(bias, theta * times) >= almost
    assert runaway_loop_gain(replace(bias, idle_a=idle * times), theta) >= almost
    assert runaway_loop_gain(replace(bias, vce_v=vce * times), theta) >= almost
    assert runaway_loop_gain(replace(bias, emitter_ohm=emitter + times), theta) <= gain
    assert runaway_loop_gain(replace(bias, tracking=tracking + 0.01), theta) <= gain
    assert gain < theta * vce * 0.002 * idle / VT * (1.0 + 1e-12)


# dVBE/dT at constant current = (V' - Eg - 3 kT/q)/T; -2.121, -1.982, -1.784 mV/K of a TIP41C and
# -1.911 of a 2N2222 at 1 mA, computed by us from the law without the current gain's own drift.
@pytest.mark.parametrize(
    ("name", "current", "slope"),
    [
        ("TIP41C", 0.02, 2.121e-3),
        ("TIP41C", 0.1, 1.982e-3),
        ("TIP41C", 1.0, 1.784e-3),
        ("2N2222", 1e-3, 1.911e-3),
    ],
)
def test_the_slope_of_a_junction(name, current, slope):
    part = PARTS.transistor(name).model_copy(update={"hfe_per_k": 0.0})
    assert vbe_slope(part, current) == pytest.approx(slope, abs=6e-7)


@pytest.mark.parametrize("name", ["TIP31C", "TIP41C", "2N3055", "MJE15030"])
def test_a_base_emitter_voltage_falls_about_two_millivolts_a_kelvin(name):
    # Common practice, no source: 2 to 2.2 mV/K for output devices at idle; a Darlington twice that.
    assert vbe_slope(PARTS.transistor(name), 0.05) == pytest.approx(0.0021, abs=2e-4)
    assert vbe_slope(PARTS.transistor("TIP122"), 0.05) == pytest.approx(0.0042, abs=4e-4)


# ---- best idle current ----


def test_olivers_idle_current():
    # B. M. Oliver, Hewlett-Packard Journal, February 1971: 26 mV across the emitter resistance,
    # which is the thermal voltage at 28.6 °C.
    assert 0.22 * optimum_idle_current(0.22, temperature_c=28.6) == pytest.approx(0.026, rel=1e-3)
    assert optimum_idle_current(0.22) == pytest.approx(0.1168, abs=6e-5)  # computed by us
    # What lies inside the device counts alike.
    inside = optimum_idle_current(0.10, 0.04, 8.0, 100.0)
    assert inside == pytest.approx(optimum_idle_current(0.22), rel=1e-12)


def test_about_22_millivolts_are_left_for_the_resistors_outside():
    # D. Self, "Audio Power Amplifier Design Handbook" (from memory): about 22 mV across each
    # emitter resistor of 0.22 ohm; the rest of the 26 mV falls inside the device.
    for name in ("TIP41C", "MJE15030", "2N3055"):
        part = PARTS.transistor(name)
        idle = optimum_idle_current(0.22, part.emitter_ohm, part.base_ohm, part.hfe)
        assert 0.22 * idle == pytest.approx(0.022, abs=0.002)


@given(st.floats(0.05, 2.0), st.floats(0.0, 100.0))
def test_at_olivers_current_a_pair_is_as_stiff_at_rest_as_far_out(emitter, temperature):
    # Pair of ideal junctions: i = (Vt/RE) omega(z) each way, by scipy's Wright omega function.
    v_t = thermal_voltage(temperature)
    v_q = optimum_idle_current(emitter, temperature_c=temperature) * emitter

    def conductance(v):
        both = [
            wrightomega(s * v / v_t + v_q / v_t + math.log(v_q / v_t)).real for s in (1.0, -1.0)
        ]
        return sum(w / (1.0 + w) for w in both) / emitter

    assert conductance(0.0) == pytest.approx(1.0 / emitter, rel=1e-9)
    assert conductance(1e6 * v_t) == pytest.approx(1.0 / emitter, rel=2e-6)


# ---- equilibrium ----


@given(st.floats(0.0, 5.0), st.floats(0.0, 0.15), st.floats(0.1, 8.0))
def test_a_straight_line_of_heat_settles_by_hand(at_rest, per_kelvin, theta):
    gain = theta * per_kelvin
    assume(gain < 0.99)
    rise = theta * at_rest / (1.0 - gain)
    assume(not 124.0 < rise < 126.0)
    e = settle(lambda t: at_rest + per_kelvin * (t - 25.0), theta, 25.0, 150.0)
    assert e.settled == e.converged == (rise < 125.0)
    assert e.loop_gain == pytest.approx(gain, abs=1e-9)
    if e.settled:
        # The temperature is known to the residual over the distance of the loop gain from 1.
        assert e.junction_c == pytest.approx(25.0 + rise, abs=1e-6 / (1.0 - gain))
        assert e.power_w == pytest.approx((e.junction_c - 25.0) / theta, abs=1e-6 / theta)
        assert e.residual_k < 1e-6
    else:
        assert e.junction_c == 150.0
        assert e.residual_k > 0.0


@example(0.998 * 20.0 / (10.0 * math.e), 20.0, 10.0)  # two solutions 2.5 K apart
@given(st.floats(0.01, 10.0), st.floats(10.0, 40.0), st.floats(0.5, 40.0))
def test_exponential_heat_settles_by_lamberts_function_or_runs_away(at_rest, fold, theta):
    # T - Ta = theta P0 exp((T - Ta)/T0) has solutions up to theta P0 / T0 = 1/e, the lower one at
    # -T0 W(-theta P0 / T0); scipy's Lambert function.
    x = theta * at_rest / fold
    # Right at the edge two solutions nearer than the search's step may be passed over.
    assume(abs(x * math.e - 1.0) > 1e-3)
    e = settle(lambda t: at_rest * math.exp((t - 25.0) / fold), theta, 25.0, 175.0)
    if x * math.e > 1.0:
        assert not e.settled
        assert not e.converged
        assert e.junction_c == 175.0
        assert e.loop_gain > 1.0
        return
    assert e.settled
    assert e.converged
    assert e.loop_gain < 1.0
    rise = -fold * lambertw(-x).real
    assert e.junction_c == pytest.approx(25.0 + rise, abs=1e-6 / (1.0 - e.loop_gain) + 1e-9)
    assert e.loop_gain == pytest.approx(rise / fold, abs=1e-5)


def test_too_hot_is_not_runaway():
    e = settle(lambda t: 10.0 + 0.01 * t, 20.0, 25.0, 150.0)
    assert not e.settled
    assert e.loop_gain == pytest.approx(0.2, abs=1e-9)


def test_a_jump_of_heat_is_found_but_not_called_converged():
    e = settle(lambda t: 10.0 if t < 80.0 else 1.0, 10.0, 25.0, 150.0)
    assert e.settled
    assert not e.converged
    assert e.junction_c == pytest.approx(80.0, abs=1e-6)
    assert e.residual_k > 40.0


def test_heat_is_asked_only_between_the_limits():
    asked = []

    def power(t):
        asked.append(t)
        return 0.05 * len(asked)

    settle(power, 1.0, 25.0, 150.0)
    settle(lambda t: asked.append(t) or 0.0, 1.0, 25.0, 150.0)
    settle(lambda t: asked.append(t) or 1e3, 1.0, 25.0, 150.0)
    assert min(asked) >= 25.0
    assert max(asked) <= 150.0


def pair(emitter, idle_cold, vce, slope=0.002):
    """Heat of a device with fixed bias voltage: RE I + Vt ln(I/I0) = slope (T - 25), Vt fixed."""

    def current(t):
        z = (idle_cold * emitter + slope * (t - 25.0)) / VT + math.log(idle_cold * emitter / VT)
        return VT / emitter * wrightomega(z).real

    return current, lambda t: vce * current(t)


@given(st.floats(0.1, 1.0), st.floats(0.005, 0.2), st.floats(10.0, 40.0), st.floats(0.5, 12.0))
def test_the_loop_gain_at_rest_is_that_of_the_formula(emitter, idle_cold, vce, theta):
    current, power = pair(emitter, idle_cold, vce)
    e = settle(power, theta, 25.0, 150.0)
    at_rest = Bias(current(e.junction_c), vce, emitter)
    # A central difference over a tenth of a kelvin, one-sided at the limit.
    assert e.loop_gain == pytest.approx(runaway_loop_gain(at_rest, theta), rel=2e-3)
    assert not e.settled or e.loop_gain < 1.0
    warmer = settle(power, 1.1 * theta, 25.0, 150.0)
    assert warmer.junction_c >= e.junction_c - 1e-5


def test_a_stage_of_the_project_settles_on_a_sink_and_runs_away_without():
    two = ["1N4148", "1N4148"]  # invented; diodes in the room's air, junctions on their own

    def power(junction_c):
        changes = {"output.temperature_c": junction_c, "bias.upper": two, "bias.lower": two}
        idle = idle_point(lower(make_design(changes)))
        return idle.upper_current_a * idle.rail_positive.mean_v

    on_sink = settle(power, 5.0, 25.0, 150.0)
    assert on_sink.settled
    assert on_sink.converged
    assert 60.0 < on_sink.junction_c < 120.0
    assert 25.0 + 5.0 * power(on_sink.junction_c) == pytest.approx(on_sink.junction_c, abs=1e-6)
    bare = settle(power, 65.0, 25.0, 150.0)
    assert not bare.settled
    assert bare.loop_gain > 1.0


# ---- refusals ----


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: HeatPath(-1.0, 0.0, 0.0), "rth_jc_k_per_w is -1"),
        (lambda: HeatPath(1.0, math.inf, 0.0), "rth_cs_k_per_w is inf"),
        (lambda: HeatPath(1.0, 0.0, 0.0, 0), "sharing is 0"),
        (lambda: junction_temperature(-1.0, HeatPath(1, 1, 1), 25.0), "power_w is -1"),
        (lambda: largest_heatsink(math.nan, HeatPath(1, 1, 1), 25.0, 150.0), "power_w is nan"),
        (lambda: derated_power(25.0, 0.0, 150.0, 65.0), "rth_jc_k_per_w is 0"),
        (lambda: Bias(-0.1, 24.0, 0.22), "idle_a is -0.1"),
        (lambda: Bias(0.1, 24.0, 0.22, tracking=1.2), "tracking is 1.2"),
        (lambda: Bias(0.1, 24.0, 0.22, temperature_c=-300.0), "temperature_c is -300"),
        (lambda: runaway_loop_gain(Bias(0.1, 24.0, 0.22), -1.0), "rth_ja_k_per_w is -1"),
        (lambda: optimum_idle_current(0.0), "resistance is 0 ohm in all"),
        (lambda: optimum_idle_current(0.22, hfe=0.0), "hfe is 0"),
        (lambda: optimum_idle_current(-0.22), "emitter_ohm is -0.22"),
        (lambda: settle(lambda t: 1.0, 1.0, 150.0, 150.0), "junction_max_c is 150"),
        (lambda: settle(lambda t: -1.0, 1.0, 25.0, 150.0), "idle power at 25 °C is -1"),
        (lambda: settle(lambda t: 1.0, -1.0, 25.0, 150.0), "rth_ja_k_per_w is -1"),
    ],
)
def test_nonsense_is_refused(make, words):
    with pytest.raises(UsageError, match=words):
        make()


def test_answers_are_plain_numbers():
    need = largest_heatsink(5.0, HeatPath(3.0, 1.0, 0.0), 50.0, 150.0)
    e = settle(lambda t: np.float64(1.0), 1.0, 25.0, 150.0)
    assert type(need.rth_sa_k_per_w) is float
    assert {type(v) for v in (e.junction_c, e.power_w, e.residual_k, e.loop_gain)} == {float}
    assert {type(v) for v in (e.settled, e.converged)} == {bool}
