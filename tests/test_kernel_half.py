"""One half of the stage against an independent solver, closed forms and conservation laws."""

import functools
import math

import numpy as np
import pytest
from conftest import make_design
from hypothesis import example, given
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.special import lambertw

from tonesim.circuit import lower_half, saturation_current
from tonesim.kernel.devices import BipolarParams
from tonesim.kernel.half import (
    CHAIN_DROPS,
    CHAIN_MULTIPLIER,
    CHAIN_NONE,
    HalfParams,
    HalfPoint,
    catch_current,
    chain_law,
    drops,
    first_guess,
    multiplier,
    node_equations,
    solve_half,
    tabulate,
)
from tonesim.units import thermal_voltage

VT = thermal_voltage(25.0)
SINGLE = {"output.upper": "TIP41C", "output.lower": "TIP42C", "bias.feed_ohm": 470.0}
# Invented stages: every kind of drop, no feed, unlike sides, warm devices, a multiplier.
DESIGNS = {
    "single, no chain": {**SINGLE, "bias": {}},
    "single, rectifier": {
        **SINGLE,
        "bias.upper": ["1N5401"],
        "bias.lower": ["1N5401"],
        "output.emitter_ohm": 0.47,
    },
    "single, Schottky and germanium": {
        **SINGLE,
        "bias.upper": ["1N34A", "BAT85"],
        "bias.lower": ["1N5819", "1N60"],
        "output.lower_hfe_factor": 1.4,
        "output.upper_vbe_shift_v": 0.02,
    },
    "Darlington, no chain": {"bias": {}},
    "Darlington, silicon and Schottky": {
        "bias.upper": ["1N4148", "BAT85", "BAT85"],
        "bias.lower": ["BAT85", "1N4148", "BAT85"],
    },
    "Darlington, light-emitting and germanium": {
        "bias.upper": ["LED-red"],
        "bias.lower": ["1N34A", "1N4001"],
        "output.emitter_ohm": 1.0,
    },
    "Darlington, warm": {
        "bias.upper": ["1N4148", "1N4001"],
        "bias.lower": ["LED-red"],
        "bias.temperature_c": 50.0,
        "output.temperature_c": 60.0,
        "output.emitter_ohm": 1.0,
    },
    "Darlington, multiplier": {
        "bias": {
            "feed_ohm": 3300.0,
            "multiplier": {
                "part": "BC547",
                "collector_base_ohm": 820.0,
                "base_emitter_ohm": 1000.0,
            },
        }
    },
}
SIDES = {"upper": True, "lower": False}


@functools.cache
def half_of(name: str, side: str) -> HalfParams:
    return lower_half(make_design(DESIGNS[name]), SIDES[side])


def solve(half: HalfParams, u: float, h: float) -> HalfPoint:
    x = np.zeros(4)
    first_guess(u, h, half, x)
    return solve_half(u, h, h, half, x)


# ---- the same stage as nested bracketing on node voltages, written another way ----


def _exp(x: float) -> float:
    return math.exp(min(x, 300.0))


def _transistor(v_be: float, v_bc: float, p: BipolarParams) -> tuple[float, float]:
    """Base and collector current, from the equations named in kernel/devices.py."""
    f = p.i_s * (_exp(v_be / p.n_vt) - 1.0)
    r = p.i_s * (_exp(v_bc / p.v_t) - 1.0)
    gain = p.hfe / (1.0 + (max(f, 0.0) / p.i_k) ** p.m)
    return f / gain + r / p.beta_r, f - r - r / p.beta_r


def _single(v_be: float, h: float, p: HalfParams) -> tuple[float, float, float]:
    """Base voltage, base current and emitter current of one device under a rail."""
    r = p.r_emitter + p.r_e

    def inner(v_bc: float) -> tuple[float, float, float]:
        i_b, i_c = _transistor(v_be, v_bc, p.device)
        return i_b, i_c, v_be + r * (i_b + i_c)

    def collector_node(v_bc: float) -> float:
        _, i_c, v_bi = inner(v_bc)
        return h - p.r_c * i_c - v_bi + v_bc

    i_b, i_c, v_bi = inner(brentq(collector_node, -500.0, 3.0, xtol=1e-14, rtol=1e-15))
    return v_bi + i_b * p.r_b, i_b, i_b + i_c


def _darlington(v_be: float, h: float, p: HalfParams) -> tuple[float, float, float]:
    """As `_single`, counted from the second device's base-emitter voltage."""

    def inner(v_bc: float) -> tuple[float, float, float, float]:
        i_b2, i_c2 = _transistor(v_be, v_bc, p.device)
        w = v_be + i_b2 * p.r_b + (i_b2 + i_c2) * p.r_e
        i_out = i_b2 + i_c2 + w * p.g_2
        v_m = p.r_emitter * i_out + w

        def first_emitter(v: float) -> float:
            i_b, i_c = _transistor(v, v + v_bc, p.first)
            return i_b + i_c + v * p.g_1 - i_b2 - w * p.g_2

        v_1 = brentq(first_emitter, -500.0, 3.0, xtol=1e-14, rtol=1e-15)
        i_b1, i_c1 = _transistor(v_1, v_1 + v_bc, p.first)
        collector_gap = h - p.r_c * (i_c1 + i_c2) - v_m + v_bc
        return collector_gap, v_m + v_1, i_b1 + v_1 * p.g_1, i_out

    if inner(0.0)[0] < 0.0:
        return 1e3, 0.0, 0.0  # more than this rail can carry: past the solution
    v_bc = brentq(lambda v: inner(v)[0], -500.0, 0.0, xtol=1e-14, rtol=1e-15)
    return inner(v_bc)[1:]


def _drops_current(v: float, p: HalfParams) -> float:
    """Current of drops in series at a voltage: one bracket on the current itself."""

    def voltage(i: float) -> float:
        kinds = zip(p.chain_count, p.chain_is, p.chain_nvt, strict=True)
        return p.chain_shift + i * p.chain_r + sum(n * k * math.log1p(i / s) for n, s, k in kinds)

    least, most = -min(p.chain_is) * (1.0 - 1e-15), 1e3
    if not voltage(least) < v < voltage(most):
        return least if v <= voltage(least) else most  # only met on the way to the solution
    return brentq(lambda i: voltage(i) - v, least, most, xtol=1e-300, rtol=1e-15)


def _multiplier_current(v: float, p: HalfParams) -> float:
    """Current of a multiplier at a voltage: one bracket on its base-emitter voltage."""

    def base_node(v_be: float) -> float:
        return (v - v_be) / p.r_cb - v_be * p.g_be - _transistor(v_be, v_be - v, p.multiplier)[0]

    v_be = brentq(base_node, -500.0, 5.0, xtol=1e-15, rtol=1e-15)
    return (v - v_be) / p.r_cb + _transistor(v_be, v_be - v, p.multiplier)[1]


def bracketed(half: HalfParams, u: float, h: float) -> tuple[float, float]:
    """i_out and i_drive of a half by nested bracketing."""
    device = _darlington if half.darlington else _single
    # From far below cut-off to hundreds of amperes.
    ends = (-2.0, 0.85) if half.darlington else (-100.0, 1.0)

    def chain(v: float) -> float:
        law = _multiplier_current if half.chain == CHAIN_MULTIPLIER else _drops_current
        return law(v, half) + half.chain_g * v

    def base_node(v_be: float) -> float:
        v_b, i_base, _ = device(v_be, h, half)
        if half.chain == CHAIN_NONE:
            return u + half.chain_shift - v_b
        return half.g_feed * (h - v_b) - i_base - chain(v_b - u)

    v_b, i_base, i_out = device(brentq(base_node, *ends, xtol=1e-14, rtol=1e-15), h, half)
    return i_out, half.g_feed * (h - v_b) - i_base


POINTS = [(-25.0, 28.0), (-0.5, 15.0), (0.0, 15.0), (0.3, 12.0), (0.8, 4.0), (2.0, 1.5)]


@pytest.mark.parametrize(("u", "h"), POINTS)
@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize("name", DESIGNS)
def test_the_solution_agrees_with_nested_bracketing(name, side, u, h):
    half = half_of(name, side)
    point = solve(half, u, h)
    i_out, i_drive = bracketed(half, u, h)
    # Absolute part: a bracket ends at 1e-14 V, which at the largest slope is 1e-12 A.
    assert point.i_out == pytest.approx(i_out, rel=1e-8, abs=3e-12)
    assert point.i_drive == pytest.approx(i_drive, rel=1e-8, abs=3e-12)


@pytest.mark.parametrize("name", [n for n in DESIGNS if n.startswith("single")])
def test_the_solution_agrees_with_bracketing_below_the_output_node(name):
    # The rail under the output node: the transistor works backwards.
    for u, h in ((-1.0, -0.4), (0.5, -0.3), (0.7, -0.7), (-3.0, -1.5)):
        half = half_of(name, "upper")
        point = solve(half, u, h)
        assert (point.i_out, point.i_drive) == pytest.approx(
            bracketed(half, u, h), rel=1e-8, abs=3e-12
        )


VOLTS = st.floats(-60.0, 60.0)
CASES = st.tuples(st.sampled_from(sorted(DESIGNS)), st.sampled_from(sorted(SIDES)))


# The rail and the base far under the output node: both collector junctions conduct.
@example(case=("Darlington, no chain", "upper"), u=-3.0, h=-4.0)
@given(case=CASES, u=VOLTS, h=VOLTS)
def test_kirchhoffs_laws_hold_to_round_off_anywhere(case, u, h):
    point = solve(half_of(*case), u, h)
    assert all(math.isfinite(v) for v in point[:4])
    # Newton ends where a step is below 1e-11 of a volt; times the largest conductance it meets.
    size = 1.0 + abs(point.i_out) + abs(point.i_drive) + abs(u) + abs(h)
    assert point.residual < 1e-9 * size
    assert point.steps < 200


@given(case=CASES, u=VOLTS, h=VOLTS, du=st.floats(1e-3, 5.0))
def test_more_drive_pushes_more_out_and_takes_more_in(case, u, h, du):
    half = half_of(*case)
    low, high = solve(half, u, h), solve(half, u + du, h)
    noise = 1e-9 * (1e-3 + abs(low.i_out) + abs(low.i_drive))
    assert high.i_drive <= low.i_drive + noise
    assert low.i_drive_u <= noise
    # Without a collector voltage the base divides its current between both junctions, and under
    # the output node the transistor works backwards: there this is no law.
    if h >= 0.05:
        assert high.i_out >= low.i_out - noise
        assert low.i_out_u >= -noise


@given(case=CASES, u=VOLTS, h=st.floats(0.0, 60.0), dh=st.floats(1e-3, 5.0))
def test_more_headroom_pushes_more_out(case, u, h, dh):
    half = half_of(*case)
    low, high = solve(half, u, h), solve(half, u, h + dh)
    noise = 1e-9 * (1e-3 + abs(low.i_out) + abs(low.i_drive))
    assert high.i_out >= low.i_out - noise


@given(case=CASES, u=VOLTS, h=VOLTS)
def test_a_half_never_gives_power(case, u, h):
    half = half_of(*case)
    point = solve(half, u, h)
    # Seen from the output node: the rail gives i_out + i_drive at h, the drive node -i_drive at u.
    taken = h * (point.i_out + point.i_drive) - u * point.i_drive
    # The slope of a light-emitting diode with temperature acts as a battery of its size, at the
    # junction's own leakage: at most that power is created.
    leak = abs(half.chain_shift) * 1e-9
    noise = 1e-9 * (abs(h * point.i_out) + abs(u * point.i_drive) + abs(h * point.i_drive))
    assert taken >= -noise - leak - 1e-12


@given(case=CASES, u=st.floats(-20.0, 4.0), h=st.floats(-1.0, 30.0))
def test_the_slopes_in_drive_are_those_of_the_currents(case, u, h):
    half = half_of(*case)
    step = 1e-5
    here, up, down = (solve(half, u + d, h) for d in (0.0, step, -step))
    i_out_u = (up.i_out - down.i_out) / (2 * step)
    i_drive_u = (up.i_drive - down.i_drive) / (2 * step)
    noise = 1e-6 + 1e-6 * abs(i_out_u)
    assert here.i_out_u == pytest.approx(i_out_u, rel=1e-4, abs=noise)
    assert here.i_drive_u == pytest.approx(i_drive_u, rel=1e-4, abs=noise)


@given(
    case=CASES,
    x=st.tuples(*[st.floats(-1.0, 0.75)] * 2, st.floats(-8.0, 0.6), st.floats(-1.0, 0.7)),
    u=st.floats(-5.0, 5.0),
    h=st.floats(-2.0, 20.0),
)
def test_the_jacobian_is_the_derivative_of_the_node_equations(case, x, u, h):
    half = half_of(*case)
    point, step = np.array(x), 1e-6
    f, j = np.zeros(4), np.zeros((4, 4))
    scrap = np.zeros((4, 4))
    _, _, di_out, di_drive = node_equations(point, u, h, h, half, f, j)
    di_out = di_out.copy()
    for k in range(4):
        ahead, behind = np.zeros(4), np.zeros(4)
        x1, x2 = point.copy(), point.copy()
        x1[k] += step
        x2[k] -= step
        out1, i1, _, _ = node_equations(x1, u, h, h, half, ahead, scrap)
        out2, i2, _, _ = node_equations(x2, u, h, h, half, behind, scrap)
        noise = 1e-9 * (np.abs(f) + np.abs(ahead) + 1.0) / step * 1e-6 + 1e-12 / step
        found = (ahead - behind) / (2 * step)
        assert np.all(np.abs(found - j[:, k]) <= 1e-5 * np.abs(j[:, k]) + noise)
        assert (out1 - out2) / (2 * step) == pytest.approx(di_out[k], rel=1e-5, abs=noise[0])
        if k == 3:
            assert (i1 - i2) / (2 * step) == pytest.approx(di_drive, rel=1e-5, abs=noise[0])


@pytest.mark.parametrize("name", DESIGNS)
def test_a_table_holds_what_single_solutions_give(name):
    half = half_of(name, "upper")
    us, hs = np.linspace(-12.0, 4.0, 33), np.linspace(-2.0, 20.0, 12)
    table = np.empty((hs.size, us.size, 4))
    residual, _ = tabulate(us, hs, half, table)
    assert residual < 1e-9
    for k, h in enumerate(hs):
        for i, u in enumerate(us):
            point = solve(half, u, h)
            alone = (point.i_out - catch_current(h, half), *point[1:4])
            assert table[k, i] == pytest.approx(alone, rel=1e-7, abs=1e-11)


# ---- closed forms ----

# Diode and resistor in series, I = (n Vt/R) W[(Is R/(n Vt)) exp((V + Is R)/(n Vt))] - Is:
# Banwell and Jayakumar, Electronics Letters 36(4), 2000. Printed values computed by us from it.
BANWELL = [
    (5.0, 1e3, 1e-14, 1.0, 4.31170175e-3),
    (1.0, 10.0, 1e-12, 1.0, 37.4482656e-3),
    (0.7, 0.3, 25e-15, 1.0, 14.3717415e-3),
    (9.0, 470.0, 5.1e-9, 1.93, 17.5609022e-3),
    (0.3, 100.0, 1e-12, 1.0, 117.719113e-9),
]


def _banwell(volts: float, ohm: float, i_s: float, n: float) -> float:
    n_vt = n * VT
    w = lambertw(i_s * ohm / n_vt * math.exp((volts + i_s * ohm) / n_vt)).real
    return n_vt / ohm * w - i_s


@pytest.mark.parametrize(("volts", "ohm", "i_s", "n", "amps"), BANWELL)
def test_a_diode_with_a_resistor_meets_its_closed_form(volts, ohm, i_s, n, amps):
    half = half_of("single, rectifier", "upper")._replace(
        chain_count=np.ones(1),
        chain_is=np.array([i_s]),
        chain_nvt=np.array([n * VT]),
        chain_r=ohm,
    )
    x = brentq(lambda x: drops(x, half)[0] - volts, 0.0, volts, xtol=1e-15)
    assert drops(x, half)[2] == pytest.approx(_banwell(volts, ohm, i_s, n), rel=1e-10)
    assert drops(x, half)[2] == pytest.approx(amps, rel=2e-9)


@pytest.mark.parametrize(("volts", "ohm", "i_s", "n", "amps"), BANWELL)
def test_the_catch_diode_meets_the_same_closed_form(volts, ohm, i_s, n, amps):
    catch = BipolarParams(i_s, n * VT, VT, 1.0, 1.0, 1.0, 1.0)
    half = half_of("single, rectifier", "upper")._replace(catch=catch, catch_r=ohm)
    assert catch_current(-volts, half) == pytest.approx(amps, rel=2e-9)


def test_the_catch_diode_leaks_its_saturation_current_under_the_rail():
    half = half_of("single, rectifier", "upper")
    assert catch_current(20.0, half) == pytest.approx(-half.catch.i_s, rel=1e-12)
    assert catch_current(0.0, half) == 0.0


def test_drops_of_several_types_add_their_voltages():
    half = half_of("single, Schottky and germanium", "upper")
    types = zip(half.chain_count, half.chain_is, half.chain_nvt, strict=True)
    types = list(types)
    for current in (1e-6, 1e-3, 20e-3):
        x = half.chain_nvt[0] * math.log1p(current / half.chain_is[0])
        v, _, i, _ = drops(x, half)
        written = sum(n * k * math.log(1.0 + current / s) for n, s, k in types)
        assert i == pytest.approx(current, rel=1e-12)
        assert v == pytest.approx(written + current * half.chain_r, rel=1e-12)


@given(name=st.sampled_from([n for n in DESIGNS if "no chain" not in n]), x=st.floats(-2.0, 0.8))
def test_a_chain_law_rises_and_its_slopes_are_derivatives(name, x):
    half, step = half_of(name, "upper"), 1e-6
    _, dv, i, di = chain_law(x, half)
    v1, _, i1, _ = chain_law(x + step, half)
    v2, _, i2, _ = chain_law(x - step, half)
    assert dv > 0.0
    assert di > 0.0
    assert (v1 - v2) / (2 * step) == pytest.approx(dv, rel=2e-4, abs=1e-6)
    assert (i1 - i2) / (2 * step) == pytest.approx(di, rel=2e-4, abs=1e-9 + 1e-9 * abs(i))


# Vbe multiplier of a 2N2222 (Is 25 fA: Banwell and Jayakumar's extraction), gain 200, two
# resistors of 680 ohm: computed by us from V = VBE (1 + R1/R2) + IB R1 with 0.3 ohm in the
# emitter. The kernel's multiplier has no series resistance; its share is added here.
@pytest.mark.parametrize(
    ("current", "celsius", "volts"),
    [(5e-3, 25.0, 1.3417), (5e-3, 50.0, 1.2528), (5e-3, 75.0, 1.1629), (10e-3, 25.0, 1.4028)],
)
def test_a_multiplier_holds_its_computed_voltage(current, celsius, volts):
    v_t = thermal_voltage(celsius)
    i_s = saturation_current(25e-15, 1.0, 1.12, 3.0, celsius)
    q = BipolarParams(i_s, v_t, v_t, 200.0, 1e9, 1.0, 5.0)
    half = half_of("Darlington, multiplier", "upper")._replace(
        chain=CHAIN_MULTIPLIER, multiplier=q, r_cb=680.0, g_be=1.0 / 680.0
    )
    x = brentq(lambda x: multiplier(x, half)[2] - current, 0.2, 0.9, xtol=1e-15)
    v, _, i, _ = multiplier(x, half)
    i_e = i - x / 680.0
    # What 0.3 ohm adds at this emitter current: once to VBE, again through the divider.
    series = 0.3 * i_e * 2.0
    assert i == pytest.approx(current, rel=1e-9)
    assert v + series == pytest.approx(volts, abs=2e-4)


# ---- bias string: two 1N4148 and a TIP41C/TIP42C pair, rigid bias ----


def _battery(name: str, celsius: float, volts: float, emitter_ohm: float) -> HalfParams:
    design = make_design(
        {
            "output.upper": name,
            "output.lower": {"TIP41C": "TIP42C"}[name],
            "output.emitter_ohm": emitter_ohm,
            "output.temperature_c": celsius,
            "bias": {},
        }
    )
    half = lower_half(design, upper=True)
    return half._replace(chain=CHAIN_NONE, chain_shift=volts, chain_g=0.0, g_feed=0.0)


def _string_voltage(current: float, celsius: float) -> float:
    changes = {"bias.upper": ["1N4148", "1N4148"], "bias.temperature_c": celsius}
    half = lower_half(make_design(changes), upper=True)
    x = brentq(lambda x: drops(x, half)[2] - current, 0.0, 1.0, xtol=1e-15)
    return drops(x, half)[0]


# Computed by us from the closed form of the diode law (typical 1N4148 curve from memory).
@pytest.mark.parametrize(("current", "volts"), [(2e-3, 1.2812), (5e-3, 1.3779)])
def test_two_silicon_drops_hold_their_computed_voltage(current, volts):
    assert _string_voltage(current, 25.0) == pytest.approx(volts, abs=0.6e-4)


# Collector current of either side without load, current gain 90 at any temperature: computed
# by us from the closed forms. That a warm pair on a cold string draws several times as much is
# common practice, no source.
@pytest.mark.parametrize(
    ("string_a", "junction_c", "string_c", "milliamps"),
    [
        (2e-3, 25.0, 25.0, (112.4, 77.2, 49.3)),
        (2e-3, 75.0, 25.0, (345.9, 210.4, 120.7)),
        (2e-3, 75.0, 75.0, (121.5, 84.4, 54.4)),
        (5e-3, 25.0, 25.0, (221.9, 139.3, 82.2)),
        (5e-3, 75.0, 25.0, (481.1, 283.8, 158.2)),
    ],
)
def test_a_string_of_two_drops_sets_the_computed_idle_current(
    string_a, junction_c, string_c, milliamps
):
    volts = 0.5 * _string_voltage(string_a, string_c)
    for ohm, expected in zip((0.22, 0.47, 1.0), milliamps, strict=True):
        half = _battery("TIP41C", junction_c, volts, ohm)
        half = half._replace(device=half.device._replace(hfe=90.0))
        point = solve(half, 0.0, 15.0)
        assert 1e3 * (point.i_out + point.i_drive) == pytest.approx(expected, abs=0.06)


def test_both_sides_of_a_matched_pair_are_equal():
    upper, lower = half_of("single, rectifier", "upper"), half_of("single, rectifier", "lower")
    for u, h in POINTS:
        assert solve(upper, u, h) == solve(lower, u, h)


def test_a_chain_of_drops_is_marked_as_such():
    assert half_of("single, rectifier", "upper").chain == CHAIN_DROPS
    assert half_of("single, no chain", "upper").chain == CHAIN_NONE
