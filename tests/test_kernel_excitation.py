"""Compiled loops of the ear models against slow forms written from the formulas."""

import math

import numpy as np
import pytest

from tonesim.kernel.excitation import (
    RoexShape,
    excite,
    group_lines,
    smear,
    spread_bands,
)

CENTRES = np.array([100.0, 180.0, 300.0, 700.0, 1500.0, 4000.0])
SLOPE = -24.0 - 230.0 / CENTRES


def spread_by_hand(power, step):
    """Double loop over bands, straight from the formula of BS.1387."""
    bands, out = power.shape[0], np.zeros(power.shape[0])
    for source in range(bands):
        level = 10 * math.log10(power[source])
        upper = min(SLOPE[source] + 0.2 * level, 0.0)
        weights = [
            10 ** ((27.0 if i <= source else upper) * (i - source) * step / 10)
            for i in range(bands)
        ]
        for i in range(bands):
            out[i] += (power[source] * weights[i] / sum(weights)) ** 0.4
    return out**2.5


@pytest.mark.parametrize("step", [0.25, 1.0])
def test_spreading_is_that_of_a_double_loop(rng, step):
    power = 10 ** rng.uniform(-12, 14, (7, CENTRES.size))  # up to slopes that would rise
    out = np.empty_like(power)
    spread_bands(power, SLOPE, 0.2, 27.0, step, out)
    wanted = np.array([spread_by_hand(row, step) for row in power])
    np.testing.assert_allclose(out, wanted, rtol=1e-12)  # sums of a hundred terms, rounding


def test_a_source_alone_keeps_its_power():
    power = np.full((1, 6), 1e-300)
    power[0, 2] = 1e6
    out = np.empty_like(power)
    spread_bands(power, SLOPE, 0.2, 27.0, 1.0, out)
    assert np.sum(out) == pytest.approx(1e6, rel=1e-12)


def test_smearing_follows_a_rise_at_once_and_falls_by_its_factor():
    decay, state = np.array([0.5, 0.1]), np.zeros(2)
    power = np.array([[8.0, 8.0]] * 60 + [[0.0, 0.0]] * 3)
    out = np.empty_like(power)
    smear(power, decay, state, out)
    assert np.all(out[:60] == 8.0)
    np.testing.assert_allclose(out[60:], 8.0 * decay ** np.array([[1], [2], [3]]), rtol=1e-12)
    np.testing.assert_allclose(state, out[-1])


def test_smearing_in_parts_is_the_same(rng):
    power = rng.uniform(0.0, 1.0, (20, 3))
    decay, whole, parts = np.array([0.9, 0.5, 0.1]), np.empty((20, 3)), np.empty((20, 3))
    smear(power, decay, np.zeros(3), whole)
    state = np.zeros(3)
    for start in (0, 7):
        part = slice(start, 7 if start == 0 else 20)
        smear(power[part], decay, state, parts[part])
    assert np.array_equal(whole, parts)


def test_grouping_is_a_sum_with_weights(rng):
    power, weights = rng.uniform(0.0, 1.0, (4, 9)), rng.uniform(0.0, 1.0, 6)
    out = np.empty((4, 2))
    group_lines(power, np.array([1, 5]), np.array([0, 4, 6]), weights, out)
    np.testing.assert_allclose(out[:, 0], power[:, 1:5] @ weights[:4])
    np.testing.assert_allclose(out[:, 1], power[:, 5:7] @ weights[4:])


def roex_by_hand(first, second, sharpness, shape):
    """Filter by filter: p above the centre fixed, below it by the level around the component."""
    bands = first.shape[0]
    out = np.zeros((2, bands))
    for j in range(bands):
        near = range(max(0, j - shape.neighbours), min(bands, j + shape.neighbours + 1))
        mean = np.mean([first[k] + second[k] for k in near])
        level = 10 * math.log10(mean * shape.bands_per_erb)
        q = 1.0 - shape.slope * (level - shape.normal_level_db)
        q = min(max(q, shape.least), shape.most)
        for i in range(bands):
            g = (CENTRES[j] - CENTRES[i]) / CENTRES[i]
            x = sharpness[i] * abs(g) * (q if g < 0 else 1.0)
            weight = (1 + x) * math.exp(-x)
            out[0, i] += weight * first[j]
            out[1, i] += weight * second[j]
    return out


def test_roex_filters_are_those_of_a_double_loop(rng):
    shape = RoexShape(0.35 / 30.0, 51.0, 0.1, 3.0, 1, 4.0)
    sharpness = np.array([10.0, 14.0, 18.0, 25.0, 30.0, 35.0])
    distance = sharpness * np.abs(CENTRES - CENTRES[:, np.newaxis]) / CENTRES
    upper = np.triu(((1 + distance) * np.exp(-distance)).T)
    first, second = 10 ** rng.uniform(-3, 11, (2, 5, 6))
    out = np.empty_like(first), np.empty_like(second)
    excite(first, second, shape, distance, upper, *out)
    for n in range(5):
        wanted = roex_by_hand(first[n], second[n], sharpness, shape)
        # What is cut off is -157 dB of the strongest component.
        atol = 1e-15 * max(first[n].max(), second[n].max())
        np.testing.assert_allclose([out[0][n], out[1][n]], wanted, rtol=1e-12, atol=atol)


def test_plain_python_gives_the_same(rng):
    power = 10 ** rng.uniform(0, 8, (3, 6))
    compiled, plain = np.empty_like(power), np.empty_like(power)
    spread_bands(power, SLOPE, 0.2, 27.0, 0.25, compiled)
    spread_bands.py_func(power, SLOPE, 0.2, 27.0, 0.25, plain)
    np.testing.assert_allclose(compiled, plain, rtol=1e-13)
