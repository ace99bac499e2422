"""Transfer surfaces against the device laws and against a reference spline."""

import itertools

import numpy as np
import pytest
from conftest import make_design
from hypothesis import given
from hypothesis import strategies as st
from scipy.interpolate import CubicHermiteSpline

from tonesim.circuit import Circuit, lower
from tonesim.curve import Surfaces, build_surfaces, grid_axes
from tonesim.kernel.half import catch_current, first_guess, solve_half
from tonesim.kernel.surface import limit_slopes, look_up

# Two invented stages: a Darlington pair and a single pair.
STAGES = {
    "Darlington": {
        "bias.upper": ["1N4148", "BAT85", "BAT85"],
        "bias.lower": ["1N4148", "BAT85", "BAT85"],
    },
    "single": {
        "output.upper": "TIP41C",
        "output.lower": "TIP42C",
        "output.emitter_ohm": 0.47,
        "bias": {"feed_ohm": 470.0, "upper": ["1N5401"], "lower": ["1N5401"]},
    },
}


@pytest.fixture(scope="module")
def built() -> dict[str, tuple[Circuit, Surfaces]]:
    circuits = {name: lower(make_design(changes)) for name, changes in STAGES.items()}
    return {name: (circuit, build_surfaces(circuit)) for name, circuit in circuits.items()}


def _solved(circuit: Circuit, u: float, h: float) -> tuple[float, float]:
    x = np.zeros(4)
    first_guess(u, h, circuit.upper, x)
    point = solve_half(u, h, h, circuit.upper, x)
    return point.i_out - catch_current(h, circuit.upper), point.i_drive


@pytest.mark.parametrize("stage", STAGES)
def test_off_the_grid_the_currents_are_those_of_the_device_laws(built, rng, stage):
    circuit, surfaces = built[stage]
    span = circuit.rail_positive.v_open + circuit.rail_negative.v_open
    full = circuit.rail_positive.v_open / circuit.bench_ohm
    errors = []
    for u, h in zip(rng.uniform(-2.0, 2.5, 4000), rng.uniform(0.3, span, 4000), strict=True):
        i_out, i_drive = _solved(circuit, u, h)
        found = look_up(surfaces.upper, surfaces.grid, u, h)
        errors.append(abs(found[0] - i_out) / (full + abs(i_out)))
        assert found[3] == pytest.approx(i_drive, abs=1e-5)
    # Measured 4e-4 at worst: between rows of headroom the surface is straight, and where a
    # coarse row meets the knee of saturation or of starvation the current is not. On almost
    # the whole plane it is the cubic in u that counts, and that is a hundred times better.
    assert max(errors) < 6e-4
    assert np.median(errors) < 4e-6


@pytest.mark.parametrize("stage", STAGES)
def test_on_the_grid_the_currents_are_those_of_the_device_laws(built, rng, stage):
    circuit, surfaces = built[stage]
    us, hs = grid_axes(surfaces.grid)
    for u, h in zip(rng.choice(us, 500), rng.choice(hs[hs >= 0.0], 500), strict=True):
        found = look_up(surfaces.upper, surfaces.grid, u, h)
        assert (found[0], found[3]) == pytest.approx(_solved(circuit, u, h), rel=1e-7, abs=1e-11)


@pytest.mark.parametrize("stage", STAGES)
def test_a_row_is_the_cubic_hermite_spline_of_its_nodes(built, rng, stage):
    # Reference: scipy.interpolate.CubicHermiteSpline on the same nodes and slopes.
    surfaces = built[stage][1]
    us, hs = grid_axes(surfaces.grid)
    for row in (0, 40, 100, hs.size - 1):
        table = surfaces.upper[row]
        out = CubicHermiteSpline(us, table[:, 0], table[:, 1])
        drive = CubicHermiteSpline(us, table[:, 2], table[:, 3])
        for u in rng.uniform(us[0], us[-1], 300):
            found = look_up(surfaces.upper, surfaces.grid, u, hs[row])
            expected = [float(f(u, k)) for f in (out, drive) for k in (0, 1)]
            size = np.max(np.abs(table[:, [0, 2]]))
            assert [found[k] for k in (0, 1, 3, 4)] == pytest.approx(
                expected, rel=1e-9, abs=1e-13 * (1.0 + size) / surfaces.grid.du_fine
            )


@pytest.mark.parametrize("stage", STAGES)
def test_the_slopes_are_the_derivatives_of_what_is_looked_up(built, rng, stage):
    surfaces = built[stage][1]
    us, hs = grid_axes(surfaces.grid)
    step = 1e-6
    reach = 3.0  # beyond the grid as well
    count = 0
    for u, h in zip(
        rng.uniform(us[0] - reach, us[-1] + reach, 3000),
        rng.uniform(hs[0] - reach, hs[-1] + reach, 3000),
        strict=True,
    ):
        # Across a border in h the slope jumps; such points are left out.
        if np.min(np.abs(us - u)) < 2 * step or np.min(np.abs(hs - h)) < 2 * step:
            continue
        count += 1
        o, o_u, o_h, d, d_u, d_h = look_up(surfaces.upper, surfaces.grid, u, h)
        right = look_up(surfaces.upper, surfaces.grid, u + step, h)
        left = look_up(surfaces.upper, surfaces.grid, u - step, h)
        above = look_up(surfaces.upper, surfaces.grid, u, h + step)
        below = look_up(surfaces.upper, surfaces.grid, u, h - step)
        for slope, ahead, behind, here in (
            (o_u, right[0], left[0], o),
            (o_h, above[0], below[0], o),
            (d_u, right[3], left[3], d),
            (d_h, above[3], below[3], d),
        ):
            noise = 1e-15 * (1.0 + abs(here)) / step + 1e-9
            difference = (ahead - behind) / (2 * step)
            assert difference == pytest.approx(slope, rel=1e-6, abs=10 * noise)
    assert count > 2900


@pytest.mark.parametrize("stage", STAGES)
@pytest.mark.parametrize("side", ["upper", "lower"])
def test_currents_are_continuous_across_every_border(built, rng, stage, side):
    surfaces = built[stage][1]
    table = getattr(surfaces, side)
    us, hs = grid_axes(surfaces.grid)
    tiny = 1e-10
    borders = [(u, h) for u in us for h in rng.uniform(hs[0], hs[-1], 2)]
    borders += [(u, h) for h in hs for u in rng.uniform(us[0], us[-1], 4)]
    for u, h in borders:
        before = look_up(table, surfaces.grid, u - tiny, h - tiny)
        after = look_up(table, surfaces.grid, u + tiny, h + tiny)
        for current, slopes in ((0, (1, 2)), (3, (4, 5))):
            steepest = sum(max(abs(before[k]), abs(after[k])) for k in slopes)
            allowed = 4 * tiny * steepest + 1e-13 * (1.0 + abs(before[current]))
            assert abs(after[current] - before[current]) <= allowed
        # The slope in u has no jump either: it is stored at the nodes.
        for k in (1, 4):
            curvature = 1e3 * (abs(before[k]) + abs(after[k]) + 1.0) / surfaces.grid.du_fine
            assert abs(after[k] - before[k]) <= tiny * curvature


@pytest.mark.parametrize("stage", STAGES)
def test_outside_the_grid_the_currents_go_on_as_straight_lines(built, stage):
    surfaces = built[stage][1]
    us, hs = grid_axes(surfaces.grid)
    g = surfaces.grid
    for edge, away in ((us[0], -1.0), (us[-1], 1.0)):
        at = [look_up(surfaces.upper, g, edge + k * away, 11.3) for k in range(4)]
        for c in (0, 3):
            steps = np.diff([p[c] for p in at])
            assert steps == pytest.approx(np.full(3, steps[0]), rel=1e-9, abs=1e-13)
            assert steps[0] == pytest.approx(away * at[0][c + 1], rel=1e-9, abs=1e-13)
    for edge, away in ((hs[0], -1.0), (hs[-1], 1.0)):
        at = [look_up(surfaces.upper, g, 0.4, edge + k * away) for k in range(4)]
        for c in (0, 3):
            steps = np.diff([p[c] for p in at])
            assert steps == pytest.approx(np.full(3, steps[0]), rel=1e-9, abs=1e-12)


@given(
    stage=st.sampled_from(sorted(STAGES)),
    side=st.sampled_from(["upper", "lower"]),
    u=st.floats(-60.0, 60.0),
    du=st.floats(0.0, 2.0),
    h=st.floats(0.0, 36.0),
)
def test_the_currents_are_monotone_in_drive(built, stage, side, u, du, h):
    surfaces = built[stage][1]
    table = getattr(surfaces, side)
    low = look_up(table, surfaces.grid, u, h)
    high = look_up(table, surfaces.grid, u + du, h)
    noise = 1e-12 * (1.0 + abs(low[0]))
    assert high[0] >= low[0] - noise
    assert high[3] <= low[3] + noise
    assert low[1] >= -noise
    assert low[4] <= noise


def _limited(values: np.ndarray, slopes: np.ndarray, us: np.ndarray) -> np.ndarray:
    table = np.zeros((1, us.size, 4))
    table[0, :, 0], table[0, :, 1] = values, slopes
    table[0, :, 2], table[0, :, 3] = -values, -slopes
    limit_slopes(table, us)
    np.testing.assert_array_equal(table[0, :, 3], -table[0, :, 1])
    np.testing.assert_array_equal(table[0, :, 0], values)
    return table[0, :, 1]


# Fritsch and Carlson, SIAM J. Numer. Anal. 17(2), 1980: a slope of at most three times the
# smaller neighbouring secant keeps the cubic monotone.
def test_a_corner_gets_a_slope_that_does_not_overshoot():
    us = np.arange(6.0)
    values = np.array([0.0, 0.0, 0.0, 10.0, 20.0, 30.0])
    slopes = _limited(values, np.array([0.0, 0.0, 10.0, 10.0, 10.0, 10.0]), us)
    assert list(slopes) == [0.0, 0.0, 0.0, 10.0, 10.0, 10.0]
    dense = CubicHermiteSpline(us, values, slopes)(np.linspace(0.0, 5.0, 2001))
    assert np.all(np.diff(dense) >= -1e-12)
    assert dense.min() >= 0.0


def test_a_slope_is_zero_where_the_data_turn_round():
    us = np.arange(5.0)
    slopes = _limited(
        np.array([0.0, 1.0, 2.0, 1.0, 0.0]), np.array([1.0, 1.0, 0.9, -1.0, -1.0]), us
    )
    assert list(slopes) == [1.0, 1.0, 0.0, -1.0, -1.0]


def test_slopes_within_the_bound_are_left_alone():
    us = np.array([0.0, 0.5, 1.5, 2.0])
    values = np.array([0.0, 1.0, 2.0, 4.0])
    wanted = np.array([5.9, 2.9, 2.9, 11.9])
    np.testing.assert_array_equal(_limited(values, wanted, us), wanted)


@given(
    rises=st.lists(st.floats(0.0, 10.0), min_size=3, max_size=12),
    slope=st.lists(st.floats(-50.0, 50.0), min_size=13, max_size=13),
    widths=st.lists(st.floats(0.01, 2.0), min_size=12, max_size=12),
)
def test_rising_data_give_a_rising_cubic_whatever_the_slopes(rises, slope, widths):
    us = np.concatenate([[0.0], np.cumsum(widths[: len(rises)])])
    values = np.concatenate([[0.0], np.cumsum(rises)])
    slopes = _limited(values, np.array(slope[: us.size]), us)
    spline = CubicHermiteSpline(us, values, slopes)
    steepest = np.max(np.abs(slopes)) + np.max(np.diff(values) / np.diff(us))
    for a, b in itertools.pairwise(us):
        assert np.all(spline(np.linspace(a, b, 50), 1) >= -1e-9 * (1.0 + steepest))
