"""The BS.1387 ear: tables, spreading, smearing and steps, against closed forms."""

import numpy as np
import pytest
from sounds import FULL_DB, QUIET_ROOM, RATE, tone

from tonesim import ear, nmr
from tonesim.masking import band_readings, frame_series

BAND_1_KHZ = 30

# Closed forms of BS.1387 worked out by hand to the digits shown: band, lower edge, centre and upper
# edge in Hz, ear weighting and internal noise in dB, time constant in ms, decay a frame, offset in
# dB. The first and last centre in the Recommendation's own table are 91.708 and 17690.045 (memory).
TABLE = [
    (0, 80.000, 91.708, 103.445, -14.7546, 9.8454, 31.9892, 0.51330, 3.0),
    (1, 103.445, 115.216, 127.023, -12.2891, 8.2026, 27.0946, 0.45504, 3.0),
    (2, 127.023, 138.870, 150.762, -10.5804, 7.0644, 23.8421, 0.40870, 3.0),
    (10, 324.055, 337.077, 350.207, -5.1793, 3.4752, 14.5267, 0.23026, 3.0),
    (30, 974.337, 995.408, 1016.797, -1.9245, 1.4614, 10.2101, 0.12376, 3.0),
    (54, 2486.170, 2532.456, 2579.551, 3.4977, 0.6924, 8.8687, 0.09022, 3.375),
    (67, 3995.398, 4068.324, 4142.546, 3.6943, 0.4738, 8.5408, 0.08226, 4.1875),
    (80, 6381.463, 6497.031, 6614.670, -1.3175, 0.3258, 8.3386, 0.07743, 5.0),
    (107, 16775.033, 17077.502, 17385.417, -27.5611, 0.1504, 8.1288, 0.07248, 6.6875),
    (108, 17385.417, 17690.044, 18000.000, -31.2523, 0.1462, 8.1244, 0.07238, 6.75),
]


def db(power):
    return 10 * np.log10(power)


@pytest.mark.parametrize("row", TABLE)
def test_band_table(row):
    band, *hertz = row[:4]
    weighting, noise, milliseconds, decay, offset = row[4:]
    edges = nmr.BANDS.edges_hz
    assert nmr.BANDS.count == 109
    found = (edges[band], nmr.CENTRES_HZ[band], edges[band + 1])
    np.testing.assert_allclose(found, hertz, atol=0.001)
    assert ear.ear_weighting_db(nmr.CENTRES_HZ[band]) == pytest.approx(weighting, abs=1e-4)
    assert db(nmr.INTERNAL_NOISE[band]) == pytest.approx(noise, abs=1e-4)
    assert 1e3 * nmr.TIME_CONSTANT_S[band] == pytest.approx(milliseconds, abs=1e-4)
    assert nmr.DECAY[band] == pytest.approx(decay, abs=1e-5)
    assert nmr.OFFSET_DB[band] == offset


def test_a_flat_pattern_of_0_db_stays_flat():
    np.testing.assert_allclose(db(nmr.spread(np.ones((1, 109)))), 0.0, atol=1e-12)


def test_one_band_alone_spreads_as_worked_out_by_hand():
    power = np.full((1, 109), 1e-12)
    power[0, BAND_1_KHZ] = 1e7
    level = db(nmr.spread(power))[0]
    expected = {29: 47.694, 30: 54.442, 31: 51.882, 34: 44.203, 46: 13.496, 26: 27.451}
    for band, value in expected.items():
        assert level[band] == pytest.approx(value, abs=0.001)
    raw = db(nmr.spread(power)[0] * nmr.NORMAL)
    np.testing.assert_allclose(raw[29:32], [59.245, 65.995, 63.437], atol=0.001)
    # 27 dB/Bark below, 10.2311 above at 70 dB; bands are a quarter of a Bark apart.
    assert raw[30] - raw[29] == pytest.approx(27 / 4, abs=1e-4)
    assert raw[30] - raw[31] == pytest.approx(10.2311 / 4, abs=1e-4)


def test_normalisation():
    found = nmr.NORMAL[[0, 30, 67, 108]]
    np.testing.assert_allclose(found, [4.8740, 14.2997, 14.4144, 5.9643], atol=1e-4)


def test_upper_slopes_at_70_db():
    # E. Terhardt, 1979: 24 + 230 / f - 0.2 L dB/Bark, here at 91.7, 995.4 and 4068 Hz.
    slopes = nmr.UPPER_SLOPE_DB[[0, 30, 67]] + 70 * nmr.LEVEL_SLOPE
    np.testing.assert_allclose(slopes, [-12.5080, -10.2311, -10.0565], atol=1e-4)


def bands_of(x):
    cut = np.lib.stride_tricks.sliding_window_view(x, ear.FRAME)[:: ear.HOP]
    return nmr.BANDS.group(ear.power(ear.spectra(cut, FULL_DB)))


def excitation_of(x):
    return nmr.excitation(bands_of(x), nmr.INTERNAL_NOISE, np.zeros(109))


def near(hertz):
    return int(np.argmin(np.abs(nmr.CENTRES_HZ - hertz)))


def test_excitation_of_a_tone():
    grouped = bands_of(tone(1000.0, 80.0))[5]
    assert db(grouped[BAND_1_KHZ]) == pytest.approx(77.390, abs=0.002)
    assert db(np.sum(grouped)) == pytest.approx(80 - 1.9131, abs=0.002)  # and its weighting
    steady = db(excitation_of(tone(1000.0, 80.0))[5])
    assert steady[BAND_1_KHZ] == pytest.approx(65.822, abs=0.002)
    found = [steady[near(f)] for f in (500, 2000, 4000)]
    np.testing.assert_allclose(found, [3.606, 26.447, 2.306], atol=0.005)


def test_excitation_decays_by_its_factor_a_frame():
    x = np.concatenate([tone(1000.0, 80.0)[: 10 * 1024], np.zeros(12 * 1024)])
    level = db(excitation_of(x)[:, BAND_1_KHZ])
    # -10 lg of the decay, 9.074 dB; the tone's end itself, and the ear's noise, move it by 0.01 dB.
    np.testing.assert_allclose(np.diff(level)[9:13], -9.074, atol=0.012)


@pytest.mark.parametrize(
    ("level", "step"),
    [
        (5, 9.122),
        (10, 3.02024),
        (20, 1.37594),
        (30, 1.08765),
        (40, 0.94414),
        (50, 0.79942),
        (60, 0.63643),
        (70, 0.46826),
        (80, 0.31775),
        (90, 0.21159),
        (100, 0.17821),
    ],
)
def test_step_of_level_that_is_heard(level, step):
    # Polynomial of BS.1387, by hand; a decibel for soft sounds, a third for loud ones.
    assert nmr.level_step_db(level) == pytest.approx(step, abs=6e-6 if level > 5 else 5e-4)


def test_steps_of_what_is_not_heard_are_never_noticed():
    assert np.all(nmr.level_step_db([-40.0, 0.0]) == 1e30)
    quiet, quieter = np.full((1, 109), 0.9), np.full((1, 109), 0.5)
    assert np.all(nmr.level_difference_jnd(quiet, quieter) < 1e-28)


@pytest.mark.parametrize(
    ("reference_db", "test_db", "at_db"), [(80.0, 60.0, 66.0), (60.0, 80.0, 80.0)]
)
def test_the_step_is_taken_at_a_level_that_favours_the_louder(reference_db, test_db, at_db):
    # 0.3 max + 0.7 of the test (BS.1387): 0.3 x 80 + 0.7 x 60 = 66 dB, and 80 dB.
    reference, test = (np.full((1, 109), 10 ** (x / 10)) for x in (reference_db, test_db))
    found = nmr.level_difference_jnd(reference, test)
    np.testing.assert_allclose(found, 20.0 / nmr.level_step_db(at_db), rtol=1e-12)


def test_a_tone_added_far_away_counts_decibel_for_decibel():
    # 1 kHz at 80 dB, 3 kHz 60, 40 and 20 dB below: 20 dB each.
    reference = tone(1000.0, 80.0)
    for below, total, largest in [(60, 0.46, 20.26), (40, 20.46, 40.26), (20, 40.46, 60.26)]:
        test = reference + tone(3000.0, 80.0 - below)
        series = frame_series(reference, test, RATE, QUIET_ROOM)
        assert db(np.mean(series.nmr_mean)) == pytest.approx(total, abs=0.02)
        assert np.max(series.nmr_max_db) == pytest.approx(largest, abs=0.02)


def test_identical_signals_rest_on_the_floor():
    series = frame_series(tone(1000.0, 80.0), tone(1000.0, 80.0), RATE, QUIET_ROOM)
    # The floor of -120 dB SPL over the softest mask, some 6.6 dB below the ear's noise: -113.
    np.testing.assert_allclose(series.nmr_max_db, -113.4, atol=0.3)
    assert np.all(series.jnd_max == 0.0)
    assert np.all(np.isfinite(series.ratio_max_db))


def test_worst_band_of_an_added_tone_is_its_own():
    reference = tone(1000.0, 80.0)
    readings = band_readings(reference, reference + tone(3000.0, 40.0), RATE, QUIET_ROOM)
    assert readings.nmr.shape == (45, 109)
    assert set(np.argmax(readings.nmr, axis=1)) == {near(3000.0)}
