"""Hearing safety against the published tables."""

import pytest

from tonesim.exposure import exposure_hours_per_day, exposure_hours_per_week, hearing_notes


@pytest.mark.parametrize(
    ("level", "minutes"),
    [(85, 480), (88, 240), (91, 120), (94, 60), (97, 30), (100, 15), (103, 7.5), (106, 3.75)],
)
def test_hours_a_day_are_those_of_niosh(level, minutes):
    # NIOSH, recommended exposure limit (table on its noise page).
    assert 60 * exposure_hours_per_day(level) == pytest.approx(minutes, rel=1e-12)


@pytest.mark.parametrize(
    ("level", "hours"), [(80, 40.0), (85, 12.65), (90, 4.0), (95, 1.26), (100, 0.40), (105, 0.126)]
)
def test_hours_a_week_are_those_of_h_870(level, hours):
    # WHO-ITU H.870: 1.6 Pa²h a week for adults.
    assert exposure_hours_per_week(level) == pytest.approx(hours, rel=0.01)
    dose = (20e-6) ** 2 * 10 ** (level / 10) * exposure_hours_per_week(level)
    assert dose == pytest.approx(1.6, rel=1e-9)


@pytest.mark.parametrize(
    ("level", "words"),
    [
        (79.9, ()),
        (82.0, ("82 dBA", "25.2 h a week", "H.870")),
        (94.0, ("94 dBA", "1 h a day", "NIOSH")),
        (100.0, ("15 min a day",)),
        (130.0, (" s a day",)),
    ],
)
def test_warnings(level, words):
    notes = hearing_notes(level)
    assert bool(notes) == bool(words)
    assert all(word in notes[0] for word in words)
