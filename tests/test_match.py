"""The linear match against stages whose answer is known."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.signal import butter, lfilter, sosfilt
from scipy.special import erfc

from tonesim.errors import UsageError
from tonesim.match import PRE_TAPS, LinearFit, LinearMatch, LinearStage

RATE = 48_000.0


def noise(frames: int = 48_000, seed: int = 3) -> np.ndarray:
    """Noise with little treble, like a guitar."""
    return lfilter([1.0], [1.0, -0.95], np.random.default_rng(seed).standard_normal(frames))


def fitted(
    x: np.ndarray, y: np.ndarray, taps: int, block: int = 4096
) -> tuple[LinearFit, LinearMatch]:
    fit = LinearFit(RATE, taps)
    for start in range(0, x.size, block):
        fit.update(x[start : start + block], y[start : start + block])
    return fit, fit.finish()


def one_pole(x: np.ndarray, hertz: float) -> np.ndarray:
    a = math.exp(-2.0 * math.pi * hertz / RATE)
    return lfilter([1.0 - a], [1.0, -a], x)


@pytest.mark.parametrize("delay", [0, 3])
def test_a_linear_stage_leaves_less_than_minus_hundred_decibels(delay):
    x = noise()
    y = one_pole(0.98 * (x - one_pole(x, 20.0)), 30_000.0)
    y = np.concatenate([np.zeros(delay), y[: y.size - delay]])
    _, match = fitted(x, y, 32)
    assert match.gain_residual_db > -30.0
    assert match.residual_db < -100.0
    assert match.removed_db > 70.0
    assert match.condition < 1e6


def test_a_signal_ahead_in_time_is_met_too():
    x = noise()
    y = np.concatenate([x[PRE_TAPS:], np.zeros(PRE_TAPS)])
    _, match = fitted(x[:-PRE_TAPS], y[:-PRE_TAPS], 16)
    assert match.residual_db < -200.0


@pytest.mark.parametrize(
    ("ratio", "gain"), [(0.01, 0.9920), (0.1, 0.9203), (0.5, 0.6171), (1.0, 0.3173)]
)
def test_the_gain_of_a_dead_zone_on_noise_is_bussgangs(ratio, gain):
    """E[xy]/E[x²] = erfc(d / (σ √2)) for Gaussian noise (Bussgang 1952; closed form).

    A million samples scatter by about 0.1 % of the gain.
    """
    x = np.random.default_rng(11).standard_normal(1_000_000)
    y = np.sign(x) * np.maximum(np.abs(x) - ratio, 0.0)
    _, match = fitted(x, y, 1, 100_000)
    assert match.gain == pytest.approx(float(erfc(ratio / math.sqrt(2.0))), abs=2e-3)
    assert match.gain == pytest.approx(gain, abs=2e-3)


def test_the_fit_is_that_of_lstsq_on_the_whole_signal():
    x = noise(6000)
    y = sosfilt(butter(2, 3000.0, fs=RATE, output="sos"), x) + 0.01 * x**3
    _, match = fitted(x, y, 12, 500)
    padded = np.concatenate([np.zeros(11), x])
    columns = [padded[11 - k : 11 - k + x.size] for k in range(12)]
    matrix = np.column_stack(columns)
    slow = np.column_stack([one_pole(x, f) for f in (2.0, 5.0, 10.0, 20.0, 40.0, 80.0)])
    rows = x.size - PRE_TAPS
    a = np.column_stack([matrix[PRE_TAPS:], slow[:rows]])
    expected, *_ = np.linalg.lstsq(a, y[:rows], rcond=None)
    left = y[:rows] - a @ expected
    share = 10.0 * math.log10(float(left @ left) / float(y[:rows] @ y[:rows]))
    assert match.residual_db == pytest.approx(share, abs=1e-6)
    np.testing.assert_allclose(match.coefficients[:12], expected[:12], rtol=1e-5, atol=1e-7)


@pytest.mark.parametrize("taps", [1, 16])
def test_any_cut_gives_the_same_residual(taps):
    x = noise(9000)
    y = np.tanh(x / 5.0)
    fit, match = fitted(x, y, taps)
    _, other = fitted(x, y, taps, 37)
    assert other.residual_db == pytest.approx(match.residual_db, abs=1e-9)
    whole = LinearStage(fit, match).process(x, y)
    stage = LinearStage(fit, match)
    parts = [stage.process(x[k : k + 501], y[k : k + 501]) for k in range(0, x.size, 501)]
    for k in (0, 1):
        np.testing.assert_allclose(
            np.concatenate([part[k] for part in parts]), whole[k], atol=1e-12
        )
    rest = stage.finish()
    assert rest[0].size == x.size - whole[0].size
    np.testing.assert_array_equal(np.concatenate([whole[1], rest[1]]), y)
    left = whole[1] - whole[0]
    share = 10.0 * math.log10(float(left @ left) / float(whole[1] @ whole[1]))
    assert share == pytest.approx(match.residual_db, abs=1e-6)


@settings(max_examples=25, deadline=None)
@given(gain=st.floats(0.01, 100.0), scale=st.floats(1e-3, 1e3))
def test_a_gain_is_found_at_any_level(gain, scale):
    x = scale * noise(2000)
    _, match = fitted(x, gain * x, 1)
    assert match.gain == pytest.approx(gain, rel=1e-12)
    assert match.residual_db < -250.0


@settings(max_examples=15, deadline=None)
@given(amount=st.floats(1e-4, 0.3))
def test_more_columns_never_leave_more(amount):
    x = noise(4000)
    y = x + amount * np.abs(x)
    left = [fitted(x, y, taps)[1].residual_db for taps in (1, 16, 32)]
    assert left[1] <= left[0] + 1e-2  # the fits begin a few samples apart
    assert left[2] <= left[1] + 1e-2


@pytest.mark.parametrize("quiet", ["reference", "test"])
def test_silence_has_a_gain_of_one_and_nothing_left(quiet):
    x = np.zeros(1000)
    y = noise(1000)
    pair = (x, y) if quiet == "reference" else (y, x)
    _, match = fitted(*pair, 16)
    assert (match.gain, match.rank) == (1.0, 0)
    assert match.residual_db == -math.inf


def test_nonsense_is_refused():
    with pytest.raises(UsageError, match="taps is 0, expected 1 or more"):
        LinearFit(RATE, 0)
    with pytest.raises(UsageError, match=r"reference \(3,\) and test \(4,\), expected equal"):
        LinearFit(RATE).update(np.zeros(3), np.zeros(4))
