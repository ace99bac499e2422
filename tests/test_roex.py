"""Level-dependent roex filters against closed forms."""

import numpy as np
import pytest
from sounds import QUIET_ROOM, RATE, tone

from tonesim import ear, roex
from tonesim.masking import band_readings


def one_component(hertz, level_db):
    """All power of one bandwidth in the channel nearest to a frequency."""
    power = np.full((1, roex.CHANNELS), 1e-30)
    channel = int(np.argmin(np.abs(roex.CENTRES_HZ - hertz)))
    power[0, channel] = 10 ** (level_db / 10) * 5 * roex.STEP_CAM  # five channels are averaged
    return power, channel


def test_channels_lie_a_quarter_cam_apart():
    cam = ear.erb_number(roex.CENTRES_HZ)
    np.testing.assert_allclose(np.diff(cam), 0.25, atol=1e-12)
    np.testing.assert_allclose(roex.BANDS.edges_hz[[0, -1]], [40.1, 15_074.0], rtol=0.01)


def test_sharpness_is_four_centres_over_the_bandwidth():
    # Area of a symmetric roex(p) is 4 f / p: equal to the bandwidth. B. C. J. Moore et al., 1997:
    # p51 at 1 kHz is 30.2.
    assert roex.normal_sharpness(1000.0) == pytest.approx(30.16, abs=0.01)
    power, _ = one_component(1000.0, 51.0)
    pattern = roex.excitations(power, 0 * power + 1e-30)[0][0] / power.max()
    hertz = np.linspace(300.0, 3000.0, 20_000)
    g = np.abs(hertz - 1000.0) / 1000.0
    p = roex.normal_sharpness(1000.0)
    area = np.sum((1 + p * g) * np.exp(-p * g)) * (hertz[1] - hertz[0])
    assert area == pytest.approx(float(ear.erb_hz(1000.0)), rel=1e-3)
    assert pattern.max() == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize(
    ("level", "sharpness"), [(51, 30.16), (71, 23.16), (91, 16.16), (131, 3.016), (200, 3.016)]
)
def test_skirts_below_a_centre_widen_with_level(level, sharpness):
    # p falls by 0.35 a decibel at 1 kHz, down to a tenth of itself. Read from the excitation of a
    # channel above the component.
    power, channel = one_component(900.0, level)
    pattern = roex.excitations(power, 0 * power + 1e-30)[0][0] / power.max()
    above = channel + 8
    centre = roex.CENTRES_HZ[above]
    g = (centre - roex.CENTRES_HZ[channel]) / centre
    p = sharpness * roex.normal_sharpness(centre) / roex.normal_sharpness(1000.0)
    assert pattern[above] == pytest.approx((1 + p * g) * np.exp(-p * g), rel=0.005)


def test_skirts_above_a_centre_do_not_depend_on_level():
    patterns = []
    for level in (30, 60, 90):
        power, channel = one_component(1000.0, level)
        patterns.append(roex.excitations(power, 0 * power + 1e-30)[0][0][:channel] / power.max())
    np.testing.assert_allclose(patterns[0], patterns[1], atol=1e-12)
    np.testing.assert_allclose(patterns[2], patterns[1], atol=1e-12)


def test_excitation_of_a_tone_peaks_at_its_frequency_near_its_level():
    # Filters pass all of a tone, spread over the lines of its frame, at their centre: 80 dB less
    # its ear weighting.
    x = tone(1000.0, 80.0)
    readings = band_readings(0 * x, x, RATE, QUIET_ROOM)
    ratio = 10 * np.log10(readings.ratio[10])
    assert roex.CENTRES_HZ[np.argmax(ratio)] == pytest.approx(1000.0, rel=0.03)
    expected = 80.0 - 1.9131 - 1.456  # level, weighting, threshold in quiet at 1 kHz
    assert ratio.max() == pytest.approx(expected, abs=0.5)  # lines beside the centre pass less


def test_efficiency_and_threshold_in_quiet():
    # B. C. J. Moore et al., 1997: K is -3 dB at and above 1 kHz, rising to +13 dB at 50 Hz; memory.
    level = 10 * np.log10(roex.EFFICIENCY)
    assert np.all(level[roex.CENTRES_HZ >= 1000.0] == pytest.approx(-3.0))
    hertz = [50.0, 100.0, 200.0, 500.0]
    # 0.3 dB: channels do not stand at these frequencies, and K bends there.
    np.testing.assert_allclose(
        np.interp(hertz, roex.CENTRES_HZ, level), [13.0, 7.0, 3.0, -1.0], atol=0.3
    )
    assert np.interp(1000.0, roex.CENTRES_HZ, 10 * np.log10(roex.QUIET)) == pytest.approx(
        1.456, abs=0.01
    )
