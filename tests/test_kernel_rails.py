"""Rails: ripple and sag against closed forms, bench supplies and batteries, charge balance."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.optimize import brentq

from tonesim.curve import Rail, rail_at_rest
from tonesim.kernel.rails import RECTIFIED, RESISTIVE, STIFF, RailParams, rail_cycles, rail_step

NO_LIMIT = 1e9
DT = 1 / 384_000


def _transformer(v_open: float, winding_ohm: float, c: float, **changes: float) -> RailParams:
    """A winding with a bridge of 0.03 ohm and 0.75 V, and a reservoir of 0.05 ohm."""
    rail = RailParams(RECTIFIED, v_open, winding_ohm + 0.03, NO_LIMIT, c, 0.05, 0.75)
    return rail._replace(**changes)


def _source(v: float, ohm: float, limit: float = NO_LIMIT, c: float = 100e-6) -> RailParams:
    return RailParams(RESISTIVE, v, ohm, limit, c, 0.0, 0.0)


def _ripple(rail: Rail) -> float:
    return rail.highest_v - rail.lowest_v


# ---- ripple without source resistance ----


def _exact_lowest(crest: float, amps: float, c: float, hertz: float) -> float:
    """Lowest rail voltage with an ideal rectifier.

    The capacitor leaves the sine where its fall is I / (w C Vp), falls in a straight line and
    meets the next half wave.
    """
    w = 2.0 * math.pi * hertz
    leave = math.asin(amps / (w * c * crest)) / w  # after the crest

    def gap(t: float) -> float:
        line = crest * math.cos(w * leave) - amps / c * (t - leave)
        return line - crest * abs(math.cos(w * t))

    half = 0.5 / hertz
    return crest * abs(math.cos(w * brentq(gap, 0.5 * half, half, xtol=1e-15)))


# Ripple of an ideal rectifier, computed by us from the closed form; the triangle I / (2 f C)
# is the usual estimate (W. Stegall, note on ripple, 2009), and an upper bound.
@pytest.mark.parametrize(
    ("crest", "amps", "farads", "hertz", "ripple", "triangle"),
    [
        (24.0, 1.0, 4700e-6, 50.0, 1.8504, 2.1277),
        (24.0, 1.0, 4700e-6, 60.0, 1.5617, 1.7730),
        (34.0, 2.0, 10_000e-6, 50.0, 1.7867, 2.0000),
    ],
)
def test_the_ripple_of_a_stiff_winding_is_exact(crest, amps, farads, hertz, ripple, triangle):
    assert crest - _exact_lowest(crest, amps, farads, hertz) == pytest.approx(ripple, abs=1e-4)
    assert amps / (2.0 * hertz * farads) == pytest.approx(triangle, abs=1e-4)
    # A tenth of a milliohm stands for "none": at the charging peak it drops a millivolt.
    rail = _transformer(crest, 0.0, farads, r_source=1e-4, esr=0.0, v_diode=0.0)
    trace = np.zeros(3)
    rail_cycles(crest, amps, hertz, 1e-7, 6, rail, trace)
    assert trace[2] - trace[1] == pytest.approx(ripple, abs=2e-3)
    assert trace[1] == pytest.approx(_exact_lowest(crest, amps, farads, hertz), abs=2e-3)
    assert trace[2] - trace[1] < triangle


# W. Stegall, note on ripple (2009): 3.5 A, 6800 uF and a ripple of 120 Hz give 4.29 V.
def test_the_triangle_estimate_of_a_published_example_is_an_upper_bound():
    triangle = 3.5 / (120.0 * 6800e-6)
    assert triangle == pytest.approx(4.29, abs=5e-3)
    for ohm in (0.005, 0.1, 0.5):
        rail = _transformer(40.0, ohm, 6800e-6, r_source=ohm, esr=0.0, v_diode=0.0)
        ripple = _ripple(rail_at_rest(rail, 3.5, 60.0))
        assert 0.5 * 4.29 < ripple < 4.29


@given(
    amps=st.floats(0.01, 4.0),
    farads=st.floats(1000e-6, 20_000e-6),
    ohm=st.floats(0.02, 2.0),
    hertz=st.sampled_from([50.0, 60.0]),
)
def test_the_triangle_estimate_is_an_upper_bound(amps, farads, ohm, hertz):
    rail = _transformer(28.0, ohm, farads, esr=0.0)
    assert _ripple(rail_at_rest(rail, amps, hertz)) <= amps / (2.0 * hertz * farads)


# ---- sag of a real winding ----

# One rail with winding resistance (regulation as transformer makers define it, common practice
# values), 0.03 ohm and 0.75 V of bridge, 0.05 ohm of reservoir, constant current: computed by
# us by integrating the circuit. Mean, ripple and lowest voltage to the centivolt; peak and rms
# winding current.
SAG = [
    (28.51, 0.972, 4700e-6, 0.1, 50.0, 26.81, 0.19, 26.71, 0.91, 0.27),
    (28.51, 0.972, 4700e-6, 1.0, 50.0, 23.35, 1.46, 22.61, 4.19, 1.83),
    (33.91, 0.545, 6800e-6, 2.0, 50.0, 27.95, 2.07, 26.89, 8.38, 3.66),
    (33.91, 0.545, 6800e-6, 2.0, 60.0, 27.97, 1.77, 27.07, 8.39, 3.66),
    (23.97, 1.170, 2200e-6, 0.5, 50.0, 20.22, 1.60, 19.41, 2.35, 0.97),
]


@pytest.mark.parametrize("row", SAG)
def test_a_real_winding_sags_as_computed(row):
    v_open, ohm, farads, amps, hertz, mean, ripple, lowest, _, _ = row
    rail = rail_at_rest(_transformer(v_open, ohm, farads), amps, hertz)
    assert rail.mean_v == pytest.approx(mean, abs=0.011)
    assert _ripple(rail) == pytest.approx(ripple, abs=0.011)
    assert rail.lowest_v == pytest.approx(lowest, abs=0.011)


def _cycle(rail: RailParams, v_c: float, amps: float, hertz: float) -> tuple[np.ndarray, float]:
    """Source current over one mains cycle and the capacitor voltage at its end."""
    steps = round(1.0 / (hertz * DT))
    current = np.empty(steps)
    for k in range(steps):
        mains = math.sin(2.0 * math.pi * (k + 1) / steps)
        v_c, _, current[k] = rail_step(v_c, amps, mains, DT, rail)
    return current, v_c


# That the winding carries about 1.8 times the direct current is common practice, no source.
@pytest.mark.parametrize("row", SAG)
def test_a_winding_carries_the_computed_peak_and_rms_current(row):
    v_open, ohm, farads, amps, hertz, _, _, _, peak, rms = row
    params = _transformer(v_open, ohm, farads)
    current, _ = _cycle(params, rail_at_rest(params, amps, hertz).capacitor_v, amps, hertz)
    assert current.max() == pytest.approx(peak, abs=0.011)
    assert np.sqrt(np.mean(current**2)) == pytest.approx(rms, abs=0.011)


@pytest.mark.parametrize("row", SAG)
def test_over_a_cycle_the_source_gives_the_charge_that_is_drawn(row):
    v_open, ohm, farads, amps, hertz, *_ = row
    params = _transformer(v_open, ohm, farads)
    start = rail_at_rest(params, amps, hertz).capacitor_v
    current, end = _cycle(params, start, amps, hertz)
    assert end == pytest.approx(start, abs=1e-7)
    assert np.mean(current) == pytest.approx(amps, rel=1e-5)


def test_the_rail_agrees_with_an_ode_solver():
    # Reference: scipy.integrate.solve_ivp (LSODA) on the circuit's own equation.
    rail = _transformer(28.51, 0.972, 4700e-6)
    start = rail_at_rest(rail, 1.0, 50.0).capacitor_v

    def current(t: float, v: float) -> float:
        crest = rail.v_open * abs(math.sin(2.0 * math.pi * 50.0 * t)) - rail.v_diode
        return max(0.0, (crest - v + rail.esr * 1.0) / (rail.r_source + rail.esr))

    def slope(t: float, v: np.ndarray) -> list[float]:
        return [(current(t, v[0]) - 1.0) / rail.c]

    times = np.linspace(0.0, 0.02, 4001)
    solved = solve_ivp(slope, (0.0, 0.02), [start], "LSODA", times, rtol=1e-9, max_step=1e-5)
    v_rail = [
        v + rail.esr * (current(t, v) - 1.0) for t, v in zip(solved.t, solved.y[0], strict=True)
    ]
    found = rail_at_rest(rail, 1.0, 50.0)
    # One explicit step of 2.6 us moves the capacitor by half a millivolt.
    assert solved.y[0, -1] == pytest.approx(start, abs=1e-3)
    assert (min(v_rail), max(v_rail)) == pytest.approx((found.lowest_v, found.highest_v), abs=1e-3)


@pytest.mark.parametrize("v_open", [14.0, 28.51])
def test_without_load_a_winding_charges_to_its_crest_less_one_diode(v_open):
    rail = rail_at_rest(_transformer(v_open, 0.972, 4700e-6), 0.0, 50.0)
    assert rail.mean_v == pytest.approx(v_open - 0.75, abs=1e-3)
    assert _ripple(rail) < 1e-3


@given(amps=st.floats(0.0, 3.0), more=st.floats(0.01, 1.0))
def test_more_load_means_less_rail(amps, more):
    rail = _transformer(28.51, 0.972, 4700e-6)
    light, heavy = rail_at_rest(rail, amps, 50.0), rail_at_rest(rail, amps + more, 50.0)
    assert heavy.mean_v < light.mean_v
    assert heavy.lowest_v < light.lowest_v


# ---- bench supplies and batteries ----


def _settle(rail: RailParams, amps: float, seconds: float, v: float) -> tuple[float, float]:
    source = 0.0
    for _ in range(round(seconds / DT)):
        v, _, source = rail_step(v, amps, 0.0, DT, rail)
    return v, source


# Source resistance of 5 to 50 milliohm for a bench supply: common practice, no source.
@pytest.mark.parametrize(("v", "ohm"), [(15.0, 0.005), (15.0, 0.05), (12.6, 0.15), (9.0, 2.0)])
def test_a_source_drops_by_its_resistance(v, ohm):
    rail = _source(v, ohm)
    for amps in (0.0, 0.5, 1.5):
        assert rail_at_rest(rail, amps, 0.0).mean_v == pytest.approx(v - ohm * amps, rel=1e-12)
        moved, source = _settle(rail, amps, 0.02, v)
        assert moved == pytest.approx(v - ohm * amps, abs=1e-9)
        assert source == pytest.approx(amps, abs=1e-9)


def test_a_battery_recovers_with_its_time_constant():
    rail = _source(12.6, 0.15, c=470e-6)
    constant = 0.15 * 470e-6
    v, _ = _settle(rail, 0.0, constant, 10.0)
    left = (12.6 - v) / (12.6 - 10.0)
    # Backward Euler over 27 steps of a twenty-seventh of the time constant.
    assert left == pytest.approx(math.exp(-1.0), rel=0.03)


@given(ohm=st.floats(1e-3, 5.0), farads=st.floats(1e-9, 1e-2), amps=st.floats(-2.0, 5.0))
def test_a_source_is_stable_whatever_its_parts(ohm, farads, amps):
    rail = _source(15.0, ohm, c=farads)
    v, last = 15.0, math.inf
    for _ in range(50):
        v, _, _ = rail_step(v, amps, 0.0, DT, rail)
        gap = abs(v - (15.0 - ohm * amps))
        assert gap <= last + 1e-11  # round-off of voltages up to 30 V
        last = gap


def test_a_current_limit_lets_the_rail_fall_at_the_rate_of_the_missing_current():
    rail = _source(15.0, 0.02, limit=1.0, c=1000e-6)
    v = _settle(rail, 0.5, 0.01, 15.0)[0]
    after, source = _settle(rail, 3.0, 1e-3, v)
    assert source == 1.0
    # (3 A - 1 A) x 1 ms / 1000 uF; the first steps still carry half an ampere less.
    assert v - after == pytest.approx(2.0, abs=0.02)
    assert rail_at_rest(rail, 3.0, 0.0).mean_v == 0.0
    assert rail_at_rest(rail, 0.9, 0.0).mean_v == pytest.approx(15.0 - 0.018)
    back, source = _settle(rail, 0.0, 0.05, after)
    assert back == pytest.approx(15.0, abs=1e-6)
    assert source <= 1.0


def test_a_stiff_rail_does_not_move():
    rail = RailParams(STIFF, 15.0, 1e-3, NO_LIMIT, 100e-6, 0.0, 0.0)
    assert rail_step(15.0, 7.0, 0.0, DT, rail) == (15.0, 15.0, 7.0)
    assert rail_at_rest(rail, 7.0, 0.0) == Rail(15.0, 15.0, 15.0, 15.0)


def test_a_rectifier_does_not_take_charge_back():
    # Pushed up by a catch diode the reservoir rises above the crest, and the bridge blocks.
    rail = _transformer(20.0, 0.5, 2200e-6)
    v, _, source = rail_step(25.0, -1.0, 1.0, DT, rail)
    assert source == 0.0
    assert v == pytest.approx(25.0 + DT / 2200e-6, rel=1e-12)
