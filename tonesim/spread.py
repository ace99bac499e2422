"""Many builds of one design from parts within their tolerances: how far their figures lie apart.

Each build is drawn from a seed of its own and measured like the design: at rest, at its static
clip levels, and with two sines whose levels stay those of the design, as on a generator that
nobody touches. Nothing is trimmed: an offset or a bias that a builder would set shows as drawn.
"""

import csv
import io
import os
import re
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any, Literal, NamedTuple

import numpy as np

from tonesim.bench import TONE_HZ, Bench
from tonesim.design import Design
from tonesim.designfile import design_key, design_to_toml
from tonesim.errors import DesignError, OutputError, SolverError, UsageError
from tonesim.figures import LOUD_DB, QUIET_DB, Conditions, Evidence, Figures, measure_build
from tonesim.pool import Progress, run_all
from tonesim.ranks import beyond_chance, rank_correlations, rank_regression
from tonesim.tolerance import Tolerances, Varied, build_with, draw, varied_parts
from tonesim.units import db_to_ratio
from tonesim.wav import write_text_aside

LEAST_RUNS, MOST_RUNS = 10, 10_000
_TABLE_MARK = "build,left out because,"
_DESIGN_MARK = "# Drawn by tonesim spread"


class Quantity(NamedTuple):
    """How a figure is called and printed, and which end of it is the bad one."""

    name: str
    words: str
    unit: str
    bad: Literal["high", "far from nominal", "far from zero", "near zero"]


QUANTITIES: dict[str, Quantity] = {
    "idle_a": Quantity("idle", "idle current", "A", "high"),
    "offset_v": Quantity("offset", "output offset", "V", "far from zero"),
    "gain": Quantity("gain", "closed-loop gain", "", "far from nominal"),
    "clip_upper_v": Quantity("clip-upper", "upper half clips at", "V", "near zero"),
    "clip_lower_v": Quantity("clip-lower", "lower half clips at", "V", "near zero"),
    "thd_loud_percent": Quantity("thd-loud", f"distortion at {LOUD_DB:g} dB", "%", "high"),
    "thd_quiet_percent": Quantity("thd-quiet", f"distortion at {QUIET_DB:g} dB", "%", "high"),
}


@dataclass(frozen=True)
class Build:
    """One build: values of its keys, and its figures or the reason why it has none."""

    number: int
    drawn: dict[str, float]
    figures: Figures | None
    evidence: Evidence | None
    refusal: str = ""
    idles: bool = True


@dataclass(frozen=True)
class Refusal:
    """Builds left out for one reason, with the sentence of the first of them."""

    count: int
    share: float
    cannot_idle: bool
    first_build: int
    reason: str


@dataclass(frozen=True)
class Distribution:
    """One quantity over all builds measured; its unit is that of the quantity's name."""

    quantity: str
    nominal: float
    least: float
    at_5_percent: float
    at_25_percent: float
    median: float
    at_75_percent: float
    at_95_percent: float
    most: float
    worst: float
    worst_build: int


@dataclass(frozen=True)
class Influence:
    """What one part does to a quantity, or a group of like parts does together.

    `rank_correlation` is Spearman's, None for a group; `share` its square, or their sum.
    `beyond_chance` is False where parts without any influence could have such a share.
    """

    name: str
    share: float
    rank_correlation: float | None
    beyond_chance: bool


@dataclass(frozen=True)
class Ranking:
    """Which parts a quantity depends on, most first.

    `explained` is the share of the ranks' variance that a linear regression on all parts' ranks
    explains, adjusted for their number; None with too few builds.
    """

    quantity: str
    explained: float | None
    groups: tuple[Influence, ...]
    parts: tuple[Influence, ...]


@dataclass(frozen=True)
class SpreadReport:
    """Many builds of one design.

    `chance` is the share a part without any influence has on average, 1/(builds measured - 1).
    """

    title: str
    design_key_sha256: str
    runs: int
    seed: int
    tolerances: Tolerances
    tone_hz: float
    loud_peak_v: float
    quiet_peak_v: float
    nominal: Figures
    distributions: tuple[Distribution, ...]
    rankings: tuple[Ranking, ...]
    chance: float
    refusals: tuple[Refusal, ...]
    evidence: Evidence
    builds: tuple[Build, ...]

    @property
    def measured(self) -> int:
        """Builds that have figures."""
        return sum(build.figures is not None for build in self.builds)

    def as_dict(self) -> dict[str, Any]:
        """Everything but the single builds, as plain values for JSON."""
        data = asdict(self)
        del data["builds"]
        return {**data, "measured": self.measured}


def run_spread(
    design: Design,
    runs: int,
    tolerances: Tolerances,
    seed: int,
    progress: Progress | None = None,
) -> SpreadReport:
    """Draw and measure builds of a design, on all cores.

    Parameters
    ----------
    design : Design
    runs : int
        Builds, 10 to 10 000.
    tolerances : Tolerances
    seed : int
        Not below zero. Build k depends on seed and k alone.
    progress : callable, optional

    Returns
    -------
    SpreadReport

    Raises
    ------
    UsageError
        If runs, seed or a tolerance are outside their range.
    SolverError
        If the design cannot idle or be made to clip, or none of its builds can be measured.

    Notes
    -----
    Parts are drawn independently, so that the squared rank correlation of each (Spearman 1904)
    is its share of what a regression on all ranks explains (Iman and Conover 1979), up to the
    chance correlations of a finite number of builds, 1/(builds - 1) on average. What acts in
    either direction alike, as an offset may on distortion, has no rank correlation; it shows as
    a low `Ranking.explained`.

    References
    ----------
    C. Spearman, "The proof and measurement of association between two things", American Journal
    of Psychology 15, 1904. R. L. Iman, W. J. Conover, "The use of the rank transform in
    regression", Technometrics 21(4), 1979.
    """
    if not LEAST_RUNS <= runs <= MOST_RUNS:
        raise UsageError(f"runs are {runs}, expected {LEAST_RUNS} to {MOST_RUNS}")
    if seed < 0:
        raise UsageError(f"the seed is {seed}, expected a whole number not below zero")
    varied = varied_parts(design, tolerances)
    clip_v = Bench(design).clip_point.input_peak_v
    conditions = Conditions(clip_v * db_to_ratio(LOUD_DB), clip_v * db_to_ratio(QUIET_DB))
    conditions = replace(conditions, reach=measure_build(design, conditions).reach)
    nominal = measure_build(design, conditions)  # as the builds are
    seeds = np.random.SeedSequence(seed).spawn(runs)
    jobs: list[Callable[[], Build]] = [
        partial(_one_build, design, varied, number, each, conditions)
        for number, each in enumerate(seeds, start=1)
    ]
    builds = run_all(jobs, progress)
    good = [build for build in builds if build.figures is not None]
    refusals = _refusals(builds)
    if not good:
        raise SolverError(
            f"design {design.title!r}: none of {runs} builds can be measured; "
            f"build {refusals[0].first_build}: {refusals[0].reason}"
        )
    return SpreadReport(
        title=design.title,
        design_key_sha256=design_key(design),
        runs=runs,
        seed=seed,
        tolerances=tolerances,
        tone_hz=TONE_HZ,
        loud_peak_v=conditions.loud_v,
        quiet_peak_v=conditions.quiet_v,
        nominal=nominal.figures,
        distributions=tuple(_distribution(key, nominal.figures, good) for key in QUANTITIES),
        rankings=tuple(_ranking(key, varied, good) for key in QUANTITIES),
        chance=1.0 / max(len(good) - 1, 1),
        refusals=refusals,
        evidence=sum((b.evidence for b in good if b.evidence), nominal.evidence),
        builds=tuple(builds),
    )


def _one_build(
    design: Design,
    varied: Sequence[Varied],
    number: int,
    seed: np.random.SeedSequence,
    conditions: Conditions,
) -> Build:
    drawn = draw(varied, np.random.default_rng(seed))
    try:
        measured = measure_build(build_with(design, drawn), conditions)
    except DesignError as refused:
        reason = str(refused).partition("\n")[0].removeprefix("this build: ")
        return Build(number, drawn, None, None, reason)
    except SolverError as restless:
        return Build(number, drawn, None, None, str(restless), idles=False)
    return Build(number, drawn, measured.figures, measured.evidence)


def _refusals(builds: Sequence[Build]) -> tuple[Refusal, ...]:
    """Count builds left out by their reason, whatever figures the sentence holds."""
    first: dict[str, Build] = {}
    counts: dict[str, int] = {}
    for build in builds:
        if build.figures is None:
            kind = re.sub(r"(?<![\w.])[-+]?[0-9][0-9.]*(e[-+]?[0-9]+)?", "#", build.refusal)
            first.setdefault(kind, build)
            counts[kind] = counts.get(kind, 0) + 1
    return tuple(
        Refusal(
            count=counts[kind],
            share=counts[kind] / len(builds),
            cannot_idle=not first[kind].idles,
            first_build=first[kind].number,
            reason=first[kind].refusal,
        )
        for kind in sorted(counts, key=lambda kind: -counts[kind])
    )


def _figure(build: Build, key: str) -> float:
    return float(getattr(build.figures, key))


def _badness(key: str, value: float, nominal: float) -> float:
    """Return how bad a figure is; only the order counts."""
    bad = QUANTITIES[key].bad
    if bad == "near zero":
        return -abs(value)
    if bad == "far from nominal":
        return abs(value - nominal)
    return abs(value) if bad == "far from zero" else value


def _distribution(key: str, nominal: Figures, builds: Sequence[Build]) -> Distribution:
    at = float(getattr(nominal, key))
    values = [_figure(build, key) for build in builds]
    worst = max(builds, key=lambda build: _badness(key, _figure(build, key), at))
    quantiles = np.quantile(values, (0.05, 0.25, 0.5, 0.75, 0.95))
    low, lower, middle, upper, high = (float(q) for q in quantiles)
    return Distribution(
        quantity=key,
        nominal=at,
        least=min(values),
        at_5_percent=low,
        at_25_percent=lower,
        median=middle,
        at_75_percent=upper,
        at_95_percent=high,
        most=max(values),
        worst=_figure(worst, key),
        worst_build=worst.number,
    )


def _ranking(key: str, varied: Sequence[Varied], builds: Sequence[Build]) -> Ranking:
    x = np.array([[build.drawn[each.keys[0]] for each in varied] for build in builds])
    y = np.array([_figure(build, key) for build in builds])
    chance = 1.0 / max(len(builds) - 1, 1)
    rho = rank_correlations(x, y)
    parts = [
        Influence(each.part, float(r * r), float(r), beyond_chance(r * r, 1, chance))
        for each, r in zip(varied, rho, strict=True)
    ]
    groups = []
    for group in dict.fromkeys(each.group for each in varied):
        shares = [float(r * r) for each, r in zip(varied, rho, strict=True) if each.group == group]
        share = sum(shares)
        groups.append(Influence(group, share, None, beyond_chance(share, len(shares), chance)))

    def most_first(found: list[Influence]) -> tuple[Influence, ...]:
        return tuple(sorted(found, key=lambda each: -each.share))

    return Ranking(key, rank_regression(x, y), most_first(groups), most_first(parts))


def table_text(report: SpreadReport) -> str:
    """All builds as comma-separated values: number, reason if left out, figures, values drawn.

    A figure or a value is written so that it reads back to the same number; headings of values
    are the dotted keys of the design.
    """
    keys = list(report.builds[0].drawn)
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow([*_TABLE_MARK.strip(",").split(","), *QUANTITIES, *keys])
    for build in report.builds:
        figures = ["" if build.figures is None else repr(_figure(build, key)) for key in QUANTITIES]
        values = [repr(build.drawn[key]) for key in keys]
        writer.writerow([build.number, build.refusal, *figures, *values])
    return text.getvalue()


def worst_text(report: SpreadReport, design: Design, quantity: str) -> str:
    """The build whose quantity is worst, as the text of a design file.

    Parameters
    ----------
    report : SpreadReport
    design : Design
        The one the report is about.
    quantity : str
        Key of `QUANTITIES`.
    """
    found = next(each for each in report.distributions if each.quantity == quantity)
    build = report.builds[found.worst_build - 1]
    title = f"{design.title[:150]}, build {build.number} of seed {report.seed}"
    words = QUANTITIES[quantity].words
    head = f"{_DESIGN_MARK}: build {build.number} of seed {report.seed}, worst by {words}.\n"
    return f"{head}\n{design_to_toml(build_with(design, build.drawn, title))}"


def check_place(path: str | os.PathLike[str]) -> None:
    """Refuse to put a table or a drawn design where a file of other origin stands.

    Raises
    ------
    OutputError
    """
    place = Path(path)
    if not place.parent.is_dir():
        raise OutputError(f"{path} cannot be written: the folder {place.parent} does not exist")
    if not place.exists():
        return
    try:
        with place.open("rb") as file:
            head = file.read(100)
    except OSError as failure:
        raise OutputError(f"{path} cannot be written: {failure.strerror}") from None
    if head and not head.startswith((_TABLE_MARK.encode(), _DESIGN_MARK.encode())):
        raise OutputError(
            f"{path} exists and was not written by tonesim spread; choose another name"
        )


def write_place(path: str | os.PathLike[str], text: str) -> None:
    """Write a table or a drawn design, whole or not at all.

    Raises
    ------
    OutputError
    """
    check_place(path)
    write_text_aside(path, text)
