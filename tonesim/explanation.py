"""Which tolerance of a part would explain the difference between a measured and a computed figure.

One tolerance after another is moved until the computed figure meets the measured one: bracketed
outwards from the design as it stands, to three times the window parts come with, then closed in
on. What needs the smallest share of its window is the most plausible explanation.
"""

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import partial

from scipy.optimize import brentq

from tonesim.units import format_quantity, ratio_to_db
from tonesim.windows import Tolerance, shown_change

WITHIN = (0.5, 1.0)  # shares of a window at which a bracket is looked for
BEYOND = (*WITHIN, 2.0, 3.0)  # the same where no tolerance is enough
COSTLY = (1.0,)  # the same, both times, for figures that cost seconds
_CLOSE = 1e-4  # share of a window to which a bracket is closed
_LATTICE = 8  # parts of a window between which costly figures are interpolated
_FINEST = 64  # parts of a window to which the result is rounded then, and computed once more


@dataclass(frozen=True)
class Explanation:
    """A tolerance tried on a figure.

    `change` is what it would have to be, None where it does not do within `tried` times its
    window; `reached` is the figure computed with it, or at the place that comes nearest. `least`
    and `most` are what parts come with, in `unit` ("V", "%", or "x" for a factor), `share` how
    much of it is taken, with its sign.
    """

    part: str
    unit: str
    change: float | None
    least: float
    most: float
    window: str
    holder: str
    source: str
    share: float
    reached: float
    tried: float

    @property
    def within(self) -> bool:
        """Whether it lies within what parts come with."""
        return self.change is not None and abs(self.share) <= 1.0

    @property
    def words(self) -> str:
        """It as a phrase, "+12 mV of VBE on both devices, within the ±30 mV parts come with"."""
        if self.change is None:
            times = f"{self.tried:g} times " if self.tried != 1.0 else ""
            return f"tried {self.part}, to {times}the {self.window} {self.holder}"
        place = "within" if self.within else "beyond"
        of = " " if self.unit == "x" else " of "
        change = shown_change(self.change, self.unit)
        return f"{change}{of}{self.part}, {place} the {self.window} {self.holder}"


@dataclass(frozen=True)
class Comparison:
    """One measured figure beside the computed one.

    `computed` is None where the stage cannot get there. `agrees`: the difference is no more
    than a meter's error. `explanations` holds one or two tolerances within their windows, the
    most plausible first; without any, `nearest` is the one that comes nearest.
    """

    name: str
    unit: str
    measured: float
    computed: float | None
    agrees: bool
    explanations: tuple[Explanation, ...] = ()
    nearest: Explanation | None = None

    @property
    def deviation(self) -> float | None:
        """Measured minus computed, in `unit`."""
        return None if self.computed is None else self.measured - self.computed

    @property
    def deviation_percent(self) -> float | None:
        """The same in per cent of the computed figure; None for decibels and at zero."""
        if self.deviation is None or not self.computed or self.unit == "dB":
            return None
        return 100.0 * self.deviation / abs(self.computed)

    @property
    def deviation_db(self) -> float | None:
        """Measured against computed in decibels, for gain and distortion."""
        if self.unit == "dB":
            return self.deviation
        if self.unit not in ("", "%") or not self.computed or self.measured <= 0.0:
            return None
        return ratio_to_db(self.measured / self.computed)

    @property
    def verdict(self) -> str:
        """What would explain it, in words."""
        if self.computed is None:
            return "the stage does not reach this level: look at its clip levels first"
        if self.agrees:
            return "agrees as closely as a meter reads"
        if self.explanations:
            return "; or ".join(each.words for each in self.explanations)
        fault = "no single tolerance explains it: look for a fault"
        if self.nearest is None:
            return fault
        reached = format_quantity(self.nearest.reached, self.unit)
        gives = "" if self.nearest.change is not None else f", which gives {reached}"
        return f"{fault} ({self.nearest.words}{gives})"


@dataclass(frozen=True)
class Target:
    """What one comparison is about.

    `model` computes the figure with a tolerance at a share of its window; where `computed` holds
    more than it does (sag, ripple), what it gives is carried over in proportion, or for a figure
    that is `signed` as a difference. `error` is what a reading is good for: share of it, and its
    last digit. `lattice` asks for interpolation between few runs in place of many.
    """

    name: str
    unit: str
    measured: float
    computed: float | None
    error: tuple[float, float]
    model: Callable[[Tolerance | None, float], float]
    candidates: Sequence[Tolerance]
    signed: bool = False
    lattice: bool = False


def compare(target: Target) -> Comparison:
    """One figure beside its computed one, explained where they differ."""
    if target.computed is None:
        return Comparison(target.name, target.unit, target.measured, None, False)
    share, digit = target.error
    difference = target.measured - target.computed
    agrees = abs(difference) <= share * abs(target.measured) + digit
    plain = partial(Comparison, target.name, target.unit, target.measured, target.computed, agrees)
    if agrees:
        return plain()
    near, far = (COSTLY, COSTLY) if target.lattice else (WITHIN, BEYOND)
    tried = [explain(target, tolerance, near) for tolerance in target.candidates]
    within = sorted((t for t in tried if t.within), key=lambda t: abs(t.share))
    if within:
        return plain(explanations=tuple(within[:2]))
    if far != near:
        tried = [explain(target, tolerance, far) for tolerance in target.candidates]
    solved = [t for t in tried if t.change is not None]
    if solved:
        return plain(nearest=min(solved, key=lambda t: abs(t.share)))
    return plain(nearest=min(tried, key=lambda t: abs(t.reached - target.measured), default=None))


def explain(target: Target, tolerance: Tolerance, steps: Sequence[float]) -> Explanation:
    """Share of a tolerance's window at which the computed figure meets the measured one.

    Parameters
    ----------
    target : Target
        Its computed figure is not None.
    tolerance : Tolerance
    steps : sequence of float
        Shares of the window at which a bracket is looked for, to either side, ascending.
    """
    assert target.computed is not None
    start = target.model(None, 0.0)
    measured, computed = target.measured, target.computed
    proportional = not target.signed and start != 0.0 and measured / start > 0.0

    def shown(value: float) -> float:
        """Carry a figure of the model over to the computed one."""
        return computed * value / start if proportional else computed + value - start

    def miss(share: float) -> float:
        value = shown(target.model(tolerance, share))
        if proportional:
            return math.log(value / measured) if value / measured > 0.0 else math.nan
        return value - measured

    found, ends = bracket(miss, steps)
    if found is None:
        best = min(ends, key=lambda s: abs(miss(s)), default=0.0)
        return _explanation(tolerance, None, best, shown(target.model(tolerance, best)), steps[-1])
    share = (interpolate if target.lattice else close_in)(miss, *found)
    reached = shown(target.model(tolerance, share))
    return _explanation(tolerance, tolerance.at(share), share, reached, steps[-1])


def _explanation(
    tolerance: Tolerance, change: float | None, share: float, reached: float, tried: float
) -> Explanation:
    return Explanation(
        part=tolerance.part,
        unit=tolerance.unit,
        change=change,
        least=tolerance.least,
        most=tolerance.most,
        window=tolerance.window,
        holder=tolerance.holder,
        source=tolerance.source,
        share=share,
        reached=reached,
        tried=tried,
    )


def bracket(
    miss: Callable[[float], float], steps: Sequence[float]
) -> tuple[tuple[float, float] | None, list[float]]:
    """Two shares between which a miss changes its sign, nearest to zero; and those tried.

    A side ends where there is no solution (not a number).
    """
    last = {1.0: (0.0, miss(0.0)), -1.0: (0.0, miss(0.0))}
    tried = [0.0] if math.isfinite(last[1.0][1]) else []
    for step in steps if tried else ():
        for side in list(last):
            share, before = last[side]
            value = miss(side * step)
            if not math.isfinite(value):
                del last[side]
                continue
            tried.append(side * step)
            if value == 0.0 or (value > 0.0) != (before > 0.0):
                return (share, side * step), tried
            last[side] = (side * step, value)
    return None, tried


def close_in(miss: Callable[[float], float], first: float, second: float) -> float:
    """Share at which a miss is zero, between two of unlike sign."""
    return float(brentq(miss, first, second, xtol=_CLOSE))


def interpolate(miss: Callable[[float], float], first: float, second: float) -> float:
    """Find the same share from the nearest eighths of a window, by a straight line.

    Eighths serve every figure that asks for them; so does the result, rounded to a 64th.
    """
    low, high = round(first * _LATTICE), round(second * _LATTICE)
    a, b = miss(first), miss(second)
    while abs(high - low) > 1:
        middle = (low + high) // 2
        value = miss(middle / _LATTICE)
        if (value > 0.0) == (a > 0.0):
            low, a = middle, value
        else:
            high, b = middle, value
    share = (low + (high - low) * a / (a - b)) / _LATTICE
    return round(share * _FINEST) / _FINEST
