"""Verdict, margins, moments and quartiles; and that more residual is never less audible."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sounds import QUIET_ROOM, RATE, dead_zone, noise, plucked_string, tone

from tonesim.audibility import assess, judge, level_quartiles, worst_moments
from tonesim.ear import Listening
from tonesim.masking import frame_series
from tonesim.verdict import Margins, Verdict, margins_of

HOME = Listening(82.0, 30.0)  # a volt of a 100 dB loudspeaker at 2 m, a quiet room at night


def matched(reference, test):
    """The test at the gain that fits the reference best."""
    return test * (np.dot(reference, reference) / np.dot(reference, test))


def with_dead_zone(half_width_v, peak_v=10.0, hertz=82.4):
    reference = peak_v * plucked_string(hertz, 2.0)
    return reference, matched(reference, dead_zone(reference, half_width_v))


@pytest.mark.parametrize(
    ("margins", "verdict", "margin_db"),
    [
        ((-0.1, -20.0), Verdict.INAUDIBLE, -0.1),
        ((0.0, -0.1), Verdict.BORDERLINE, 0.0),
        ((12.0, 0.0), Verdict.AUDIBLE, 0.0),
        ((12.0, 5.0), Verdict.AUDIBLE, 5.0),
        ((-1.0, 1.0), Verdict.BORDERLINE, 0.0),  # a contradiction is for ears
    ],
)
def test_verdict_of_two_margins(margins, verdict, margin_db):
    assert Margins(*margins).verdict is verdict
    assert Margins(*margins).margin_db == margin_db


def test_limits():
    x = tone(1000.0, 70.0)
    series = frame_series(x, x, RATE, QUIET_ROOM)
    ones = np.ones(series.frames)

    def verdict(nmr, quiet, jnd, ratio):
        changed = replace(
            series,
            nmr_max_db=nmr * ones,
            quiet_max_db=quiet * ones,
            jnd_max=jnd * ones,
            ratio_max_db=ratio * ones,
        )
        return assess(changed).verdict

    assert verdict(-10.1, 20.0, 0.69, -20.0) is Verdict.INAUDIBLE
    assert verdict(-9.9, 20.0, 0.69, -20.0) is Verdict.BORDERLINE
    assert verdict(-10.1, 20.0, 0.71, -20.0) is Verdict.BORDERLINE
    assert verdict(-9.9, -6.1, 0.71, -20.0) is Verdict.INAUDIBLE  # under the noise of the room
    assert verdict(0.0, 20.0, 0.71, 3.0) is Verdict.AUDIBLE
    assert verdict(0.0, 20.0, 4.0, -20.0) is Verdict.AUDIBLE
    assert verdict(0.0, 20.0, 3.99, 2.99) is Verdict.BORDERLINE


def test_verdict_rises_with_crossover_distortion():
    found = [judge(*with_dead_zone(d), RATE, HOME) for d in (1e-4, 1e-3, 1e-2, 1e-1)]
    assert [r.verdict for r in found] == ["inaudible", "borderline", "audible", "audible"]
    totals = [r.nmr_total_db for r in found]
    # 20 dB a decade as long as the residual is small against the signal.
    np.testing.assert_allclose(np.diff(totals)[:2], 20.0, atol=2.5)
    assert all(np.diff(totals) > 8.0)
    assert all(r.alignment_gap_db < 3.0 for r in found)
    assert not any(r.notes for r in found)


def test_a_small_dead_zone_counts_20_db_a_decade():
    x = tone(220.0, 90.0, 0.5)
    totals = [
        judge(x, matched(x, dead_zone(x, d)), RATE, QUIET_ROOM).nmr_total_db
        for d in (1e-5, 1e-4, 1e-3)
    ]
    np.testing.assert_allclose(np.diff(totals), 20.0, atol=0.1)


def test_the_part_of_a_dead_zone_that_no_gain_removes():
    # Half width d, sine of much larger peak: rms d sqrt(1 - 8 / pi²) = 0.4352 d, so that in front
    # of a loudspeaker with S dB for a volt peak it makes S + 20 lg d - 4.2 dB SPL.
    x = 10.0 * tone(220.0, 100.0, 1.0)
    result = judge(x, matched(x, dead_zone(x, 0.01)), RATE, Listening(82.0))
    wanted = 82.0 - 40.0 + 20 * np.log10(0.4352 * np.sqrt(2.0))
    assert result.residual_db + result.level_db == pytest.approx(wanted, abs=0.1)


def test_the_verdict_depends_on_the_level():
    # 0.1 % of the peak: heard at 80 dB SPL, not at 50 dB, as the threshold in quiet says.
    reference, test = with_dead_zone(0.001, peak_v=1.0)
    assert judge(reference, test, RATE, Listening(50.0)).verdict is Verdict.INAUDIBLE
    assert judge(reference, test, RATE, Listening(80.0)).verdict is not Verdict.INAUDIBLE


@pytest.mark.parametrize(("gain_db", "verdict"), [(0.1, "inaudible"), (6.0, "audible")])
def test_gain_is_a_difference_too(gain_db, verdict):
    x = plucked_string(110.0)
    result = judge(x, x * 10 ** (gain_db / 20), RATE, Listening(82.0))
    assert result.verdict == verdict


RESIDUALS = {
    "hiss": lambda x: noise(100.0, 10_000.0, 100.0, x.shape[0] / RATE, seed=7),
    "crossover": lambda x: matched(x, dead_zone(x, 0.02)) - x,
    "loss of level": lambda x: -x,
    "another string": lambda x: plucked_string(233.0, x.shape[0] / RATE),
}


@settings(max_examples=16)
@given(
    st.sampled_from(sorted(RESIDUALS)),
    st.floats(-110.0, -6.0),
    st.floats(0.01, 30.0),
    st.sampled_from([60.0, 80.0, 100.0]),
)
def test_more_residual_is_never_less_audible(kind, level_db, rise_db, sine_spl_db):
    # Up to -6 dB: a residual of the size of the reference may cancel it, and a larger one turn it.
    x = plucked_string(147.0, 0.5)
    residual = RESIDUALS[kind](x)
    residual *= np.sqrt(np.mean(x**2) / np.mean(residual**2))
    margins = [
        assess(
            frame_series(x, x + 10 ** (level / 20) * residual, RATE, Listening(sine_spl_db, 25.0))
        ).margins
        for level in (level_db, min(level_db + rise_db, -6.0))
    ]
    # Below the level of the ear's own floor both read the same.
    assert margins[1].above_inaudible_db >= margins[0].above_inaudible_db - 1e-6
    assert margins[1].above_audible_db >= margins[0].above_audible_db - 1e-6
    assert margins[1].margin_db >= margins[0].margin_db - 1e-6


def test_identical_recordings_have_no_residual():
    x = plucked_string(110.0)
    result = judge(x, x.copy(), RATE, HOME)
    assert result.verdict is Verdict.INAUDIBLE
    assert result.margins.above_inaudible_db < -90.0
    assert (result.moments, result.jnd_max, result.above_mask_share) == ((), 0.0, 0.0)
    assert any("no residual" in note for note in result.notes)


def test_silence_is_said():
    result = judge(np.zeros(RATE), np.zeros(RATE), RATE, HOME)
    assert (result.verdict, result.active_frames) == (Verdict.INAUDIBLE, 0)
    assert any("No frame reaches 15 dB" in note for note in result.notes)
    assert np.isfinite(result.margins.margin_db)


def test_a_short_recording_is_padded_and_said():
    x = tone(1000.0, 70.0, 0.02)
    result = judge(x, 1.5 * x, RATE, QUIET_ROOM)
    assert result.padded
    assert result.frames == 1
    assert result.verdict is Verdict.AUDIBLE
    assert any("shorter than a frame" in note for note in result.notes)
    assert len(result.quartiles) == 1


def test_a_loud_level_is_warned_of():
    x = tone(1000.0, 94.0)
    notes = judge(x, x, RATE, QUIET_ROOM).notes
    assert any("94 dBA" in note and "1 h a day" in note for note in notes)


def test_a_loud_fault_alone_is_warned_of():
    x = tone(1000.0, 40.0)
    notes = judge(x, x + tone(3000.0, 100.0), RATE, QUIET_ROOM).notes
    assert any("NIOSH" in note for note in notes)


def test_shares_and_percentiles():
    x, hiss = tone(500.0, 70.0, 2.0), noise(100.0, 10_000.0, 60.0, 2.0)
    test = x.copy()
    test[: RATE // 2] += hiss[: RATE // 2]  # a quarter of the time
    result = judge(x, test, RATE, QUIET_ROOM)
    assert result.frames == result.active_frames == 92
    assert 0.24 < result.disturbed_share <= result.above_mask_share < 0.29
    assert list(result.nmr_percentiles_db) == sorted(result.nmr_percentiles_db)
    assert result.nmr_percentiles_db[0] < -100.0  # median: nothing there
    assert result.nmr_percentiles_db[3] == result.nmr_p95_db > 20.0
    assert result.nmr_p95_db <= result.nmr_max_db


def test_worst_moments_are_one_each():
    x = tone(500.0, 70.0, 4.0)
    test = x.copy()
    for second, level, hertz in [(1.0, 60.0, 3000.0), (2.5, 50.0, 5000.0)]:
        start = round(second * RATE)
        test[start : start + 4800] += tone(hertz, level, 0.1)
    moments = judge(x, test, RATE, QUIET_ROOM).moments
    assert [m.time_s for m in moments[:2]] == pytest.approx([1.05, 2.55], abs=0.06)
    assert moments[0].band_hz == pytest.approx(3000.0, rel=0.03)
    assert moments[1].band_hz == pytest.approx(5000.0, rel=0.03)
    assert moments[0].level_db == pytest.approx(70.0, abs=0.01)
    assert moments[0].margin_db == pytest.approx(moments[0].nmr_db + 10.0)
    times = sorted(m.time_s for m in moments)
    assert np.min(np.diff(times)) >= 0.5
    assert [m.nmr_db for m in moments] == sorted((m.nmr_db for m in moments), reverse=True)
    series = frame_series(x, test, RATE, QUIET_ROOM)
    assert len(worst_moments(series, count=2)) == 2


def test_a_single_moment_is_pointed_at():
    x = tone(500.0, 70.0, 4.0)
    test = x.copy()
    test[RATE : RATE + 1000] += tone(3000.0, 60.0, 1.0)[:1000]  # in 2 or 3 of 186 frames
    result = judge(x, test, RATE, QUIET_ROOM)
    assert result.verdict is Verdict.BORDERLINE
    assert any("Single moments may be heard: " in note for note in result.notes)


def test_quartiles_tell_of_tails():
    # The same faint tone beside a loud sound, which masks it, and beside a soft one.
    x = np.concatenate([tone(500.0, 80.0), tone(500.0, 50.0)])
    series = frame_series(x, x + tone(750.0, 40.0, 2.0), RATE, QUIET_ROOM)
    parts = level_quartiles(series)
    assert [p.frames for p in parts] == [23, 23, 23, 23]
    levels = [level for p in parts for level in (p.lowest_db, p.highest_db)]
    assert levels == sorted(levels)
    np.testing.assert_allclose(levels[::7], [50.0, 80.0], atol=0.01)
    assert parts[0].nmr_median_db > parts[3].nmr_median_db + 10.0
    assert parts[0].ratio_p95_db > parts[3].ratio_p95_db + 10.0
    assert parts[0].margins.verdict is Verdict.AUDIBLE
    whole = assess(series).margins
    assert max(p.margins.above_inaudible_db for p in parts) <= whole.above_inaudible_db


def test_margins_of_some_frames():
    reference, test = with_dead_zone(0.003)
    series = frame_series(reference, test, RATE, HOME)
    flags = np.zeros(series.frames, dtype=bool)
    flags[10:20] = True
    assert margins_of(series, flags) == margins_of(series, np.arange(10, 20))
