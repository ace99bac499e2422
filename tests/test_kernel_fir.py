"""Direct filters against numpy and scipy, and their indifference to the cut into blocks."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from tonesim.kernel import fir
from tonesim.oversample import half_band_branch

# Sums of up to 2100 products of unit normal numbers, each product rounded to 1.1e-16.
ROUNDING = 1e-12


def line_with(x, past):
    return np.concatenate([np.zeros(past), x])


def filtered(x, taps, sizes):
    line = np.zeros(taps.size - 1 + x.size)
    parts, start, turn = [], 0, 0
    while start < x.size:
        count = min(sizes[turn % len(sizes)], x.size - start)
        line[taps.size - 1 : taps.size - 1 + count] = x[start : start + count]
        out = np.empty(count)
        fir.filter_block(line, count, taps, out)
        parts.append(out)
        start, turn = start + count, turn + 1
    return np.concatenate(parts)


@pytest.mark.parametrize("length", [1, 2, 7, 8, 9, 17, 80, 2100])
@pytest.mark.parametrize("count", [1, 5, 512, 513, 1500])
def test_a_filter_agrees_with_numpy_convolution(length, count):
    rng = np.random.default_rng(length + count)
    taps, x = rng.standard_normal(length), rng.standard_normal(count)
    out = np.empty(count)
    fir.convolve(line_with(x, length - 1), count, taps, out)
    np.testing.assert_allclose(out, np.convolve(x, taps)[:count], rtol=0, atol=ROUNDING)


@settings(max_examples=40, deadline=None)
@given(
    st.integers(1, 60),
    st.lists(st.integers(1, 700), min_size=1, max_size=6),
    st.integers(0, 2**32 - 1),
)
def test_any_cut_gives_equal_bits(length, sizes, seed):
    rng = np.random.default_rng(seed)
    taps, x = rng.standard_normal(length), rng.standard_normal(1400)
    np.testing.assert_array_equal(filtered(x, taps, sizes), filtered(x, taps, [1400]))


def test_compiled_sums_keep_the_order_of_plain_python():
    rng = np.random.default_rng(3)
    taps, x = rng.standard_normal(19), rng.standard_normal(37)
    out = np.empty(37)
    fir.convolve(line_with(x, 18), 37, taps, out)
    padded = line_with(x, 18)
    for n in range(37):
        total = 0.0
        for k in range(19):
            total += taps[k] * padded[n + 18 - k]  # one rounding per step: no fused multiply-add
        assert out[n] == total


def test_not_a_number_stays_visible():
    x = np.zeros(20)
    x[4] = np.nan
    out = filtered(x, np.array([1.0, 0.0, 0.0]), [20])
    assert np.isnan(out[4:7]).all()
    assert np.isfinite(np.delete(out, [4, 5, 6])).all()


def half_band_taps(branch):
    taps = np.zeros(2 * branch.size - 1)
    taps[::2] = 0.5 * branch
    taps[branch.size - 1] = 0.5
    return taps


@pytest.mark.parametrize("pass_edge", [0.227, 0.13, 0.03])
def test_interpolation_agrees_with_scipy_upfirdn(pass_edge):
    branch = half_band_branch(pass_edge, 100.0)
    x = np.random.default_rng(4).standard_normal(600)
    out = np.empty(1200)
    fir.interpolate_by_two(line_with(x, branch.size - 1), 600, branch, np.empty(600), out)
    expected = signal.upfirdn(2.0 * half_band_taps(branch), x, up=2)[:1200]
    np.testing.assert_allclose(out, expected, rtol=0, atol=ROUNDING)


@pytest.mark.parametrize("pass_edge", [0.227, 0.13, 0.03])
def test_decimation_agrees_with_scipy_upfirdn(pass_edge):
    branch = half_band_branch(pass_edge, 100.0)
    x = np.random.default_rng(5).standard_normal(1200)
    even, odd = np.zeros(branch.size - 1 + 600), np.zeros(branch.size // 2 + 600)
    out = np.empty(600)
    fir.decimate_by_two(x, 600, branch, even, odd, np.empty(600), out)
    expected = signal.upfirdn(half_band_taps(branch), x, down=2)[:600]
    np.testing.assert_allclose(out, expected, rtol=0, atol=ROUNDING)
