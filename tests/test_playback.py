"""Where the verdict turns with the playback level."""

import numpy as np
import pytest
from sounds import RATE, dead_zone, plucked_string

from tonesim.audibility import judge
from tonesim.ear import Listening
from tonesim.errors import UsageError
from tonesim.masking import MaskingMeter
from tonesim.playback import LevelSearch, search_level
from tonesim.verdict import Margins, Verdict


def recordings():
    reference = 10.0 * plucked_string(82.4, 1.0)
    test = dead_zone(reference, 0.003)
    return reference, test * np.dot(reference, reference) / np.dot(reference, test)


def searched(listening, *limits):
    meter = MaskingMeter(RATE, listening, keep_bands=True)
    meter.add(*recordings())
    meter.finish()
    return search_level(meter, *limits)


@pytest.fixture(scope="module")
def found():
    return searched(Listening(82.0, 30.0))


def test_edges_are_where_the_verdict_turns_when_played_there(found):
    assert found.monotone
    (inaudible,), (audible,) = found.inaudible_edges_db, found.audible_edges_db
    assert inaudible < audible
    for edge, low, high in [(inaudible, "inaudible", "borderline"), (audible, "borderline", "aud")]:
        # Edges are found within half a decibel.
        below, above = (
            judge(*recordings(), RATE, Listening(82.0 + edge + step, 30.0)).verdict
            for step in (-0.3, 0.3)
        )
        assert below == low
        assert above.startswith(high)


def test_changes_that_turn_the_verdict(found):
    at = dict(zip(found.changes_db, found.margins, strict=True))
    assert at[found.inaudible_at_db].verdict is Verdict.INAUDIBLE
    assert at[found.audible_at_db].verdict is Verdict.AUDIBLE
    assert found.inaudible_at_db == pytest.approx(found.inaudible_edges_db[0], abs=0.5)
    assert found.audible_at_db == pytest.approx(found.audible_edges_db[0], abs=0.5)
    assert found.changes_db[0] == -60.0
    assert found.changes_db[-1] == 30.0
    assert at[0.0].verdict == judge(*recordings(), RATE, Listening(82.0, 30.0)).verdict


def test_what_is_out_of_range_is_none():
    narrow = searched(Listening(120.0), -1.0, 0.0)
    assert narrow.changes_db == (-1.0, 0.0)
    assert narrow.inaudible_at_db is None
    assert narrow.audible_at_db == 0.0
    assert narrow.inaudible_edges_db == ()


def test_the_search_is_the_same_every_time(found):
    assert searched(Listening(82.0, 30.0)) == found


def test_turning_back_is_not_monotone():
    margins = tuple(Margins(strict, -10.0) for strict in (-1.0, 2.0, -3.0, 4.0))
    search = LevelSearch((-6.0, 0.0, 6.0, 12.0), margins, (-3.0, 3.0, 9.0), ())
    assert not search.monotone
    assert search.inaudible_at_db in (-6.0, 6.0)
    assert LevelSearch((-6.0, 0.0), margins[:2], (-3.0,), ()).monotone


@pytest.mark.parametrize("limits", [(1.0, 10.0), (-10.0, -1.0), (-1e9, 0.0)])
def test_a_range_without_the_present_level_is_refused(limits):
    with pytest.raises(UsageError, match="expected a range around 0"):
        searched(Listening(82.0), *limits)
