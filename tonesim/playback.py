"""What the playback level does to a verdict: where it turns."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass

from tonesim.errors import UsageError
from tonesim.masking import MaskingMeter
from tonesim.pool import run_all
from tonesim.verdict import Margins, Verdict, counted, margins_of

GRID_DB = 6.0  # steps in which levels are tried
RESOLUTION_DB = 0.5


@dataclass(frozen=True)
class LevelSearch:
    """How the verdict changes with the playback level, everything else the same.

    Edges are changes of level at which a limit is crossed, within half a decibel. One is what one
    expects; none, or several, happen: masking itself grows with level.
    """

    changes_db: tuple[float, ...]  # levels tried, relative to the present one, rising
    margins: tuple[Margins, ...]
    inaudible_edges_db: tuple[float, ...]
    audible_edges_db: tuple[float, ...]

    @property
    def monotone(self) -> bool:
        """Whether, over all levels tried, louder was never less audible by a limit."""
        rising = [
            [m.above_inaudible_db >= 0.0 for m in self.margins],
            [m.above_audible_db >= 0.0 for m in self.margins],
        ]
        return all(flags == sorted(flags) for flags in rising)

    @property
    def inaudible_at_db(self) -> float | None:
        """Change of level nearest to 0 that leaves it inaudible; None if none tried does."""
        return self._nearest(Verdict.INAUDIBLE)

    @property
    def audible_at_db(self) -> float | None:
        """Change of level nearest to 0 that makes it audible; None if none tried does."""
        return self._nearest(Verdict.AUDIBLE)

    def _nearest(self, verdict: Verdict) -> float | None:
        pairs = zip(self.changes_db, self.margins, strict=True)
        found = [change for change, margins in pairs if margins.verdict is verdict]
        return min(found, key=abs, default=None)


def search_level(
    meter: MaskingMeter, lowest_db: float = -60.0, highest_db: float = 30.0
) -> LevelSearch:
    """Find the playback levels at which the verdict changes.

    The recording is heard again at levels 6 dB apart; wherever a limit is crossed between two of
    them, the place is halved down to 0.5 dB.

    Parameters
    ----------
    meter : MaskingMeter
        Finished, its bands kept.
    lowest_db, highest_db : float
        Range of changes relative to the present level; contains 0.

    Raises
    ------
    UsageError
        If the range does not contain 0 or the meter cannot replay.
    """
    if not (-200.0 <= lowest_db <= 0.0 <= highest_db <= 200.0):
        raise UsageError(
            f"levels from {lowest_db:g} to {highest_db:g} dB are asked for; expected a range "
            "around 0 within 200 dB"
        )
    below, above = math.ceil(-lowest_db / GRID_DB), math.ceil(highest_db / GRID_DB)
    grid = [max(-GRID_DB * k, lowest_db) for k in range(below, 0, -1)]
    grid += [min(GRID_DB * k, highest_db) for k in range(above + 1)]

    def margins_at(change: float) -> Margins:
        series = meter.replay(change)
        return margins_of(series, counted(series))

    def job(change: float) -> Callable[[], Margins]:
        return lambda: margins_at(change)

    tried = dict(zip(grid, run_all([job(change) for change in grid]), strict=True))
    edges: list[tuple[float, ...]] = []
    for figure in (lambda m: m.above_inaudible_db, lambda m: m.above_audible_db):
        edges.append(_edges(tried, margins_at, figure))
    changes = sorted(tried)
    return LevelSearch(tuple(changes), tuple(tried[c] for c in changes), edges[0], edges[1])


def _edges(
    tried: dict[float, Margins],
    margins_at: Callable[[float], Margins],
    figure: Callable[[Margins], float],
) -> tuple[float, ...]:
    """Halve every interval between levels tried over which a margin changes sign."""
    found, changes = [], sorted(tried)
    for low, high in itertools.pairwise(changes):
        side = figure(tried[low]) >= 0.0
        if side == (figure(tried[high]) >= 0.0):
            continue
        while high - low > RESOLUTION_DB:
            middle = 0.5 * (low + high)
            tried[middle] = tried.get(middle) or margins_at(middle)
            if (figure(tried[middle]) >= 0.0) == side:
                low = middle
            else:
                high = middle
        found.append(0.5 * (low + high))
    return tuple(found)
