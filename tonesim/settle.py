"""The least bias that hides the crossover: a ladder of candidates, each heard on every recording.

A builder chooses among chains of drops, or along one value of the E24 series. Every candidate is
played on every recording and the ear is asked what its bias adds; the candidates stand in the
order of their idle current, and the least that is inaudible on all recordings is the answer. That
the margin falls as the idle current grows is looked at, not assumed.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from typing import Any

from tonesim.audition import audition
from tonesim.bench import Bench, distortion_of
from tonesim.circuit import lower
from tonesim.design import SIDES, Design
from tonesim.designfile import design_key, replace
from tonesim.ear import Listening
from tonesim.errors import DesignError, SolverError, UsageError
from tonesim.idle import Runaway, idle_at, runaway_of
from tonesim.pool import Progress, run_all
from tonesim.probe import Probe
from tonesim.report import RenderOptions
from tonesim.stage import find_idle
from tonesim.units import db_to_ratio, format_quantity
from tonesim.verdict import Verdict
from tonesim.wav import open_recording

THD_LEVELS_DB = (-3.0, -40.0)  # below the clip level
HOTTER_K = 50.0  # what the chosen bias is asked to bear
MOST_CANDIDATES = 64
RISE_DB = 0.5  # from rung to rung: less is the resolution of the ear models, no rise
_TONE_HZ = 1000.0


@dataclass(frozen=True)
class Candidate:
    """One choice of bias: its name and the keys of the design it changes."""

    name: str
    changes: tuple[tuple[str, Any], ...]


@dataclass(frozen=True)
class Heard:
    """What the bias of a candidate adds to one recording; the worst channel counts."""

    recording: str
    verdict: Verdict
    margin_db: float
    above_inaudible_db: float
    nmr_p95_db: float


@dataclass(frozen=True)
class Rung:
    """A candidate with what it costs and what is heard of it.

    `margin_db` is the worst of all recordings: how far the difference lies above what the strict
    model lets pass, below 0 if it is inaudible. `thd_percent` belongs to `THD_LEVELS_DB`.
    """

    candidate: Candidate
    design: Design
    design_key_sha256: str
    idle_a: float
    idle_w: float
    draw_w: float
    thd_percent: tuple[float, ...]
    heard: tuple[Heard, ...]
    unsettled_steps: int

    @property
    def margin_db(self) -> float:
        """Worst margin above what the strict model lets pass."""
        return max(each.above_inaudible_db for each in self.heard)

    @property
    def verdict(self) -> Verdict:
        """Worst verdict of all recordings."""
        order = (Verdict.INAUDIBLE, Verdict.BORDERLINE, Verdict.AUDIBLE)
        return max((each.verdict for each in self.heard), key=order.index)

    @property
    def suffices(self) -> bool:
        """Whether it is inaudible on every recording."""
        return self.verdict is Verdict.INAUDIBLE


@dataclass(frozen=True)
class Refused:
    """A candidate that makes no usable stage, and why."""

    candidate: Candidate
    reason: str


@dataclass(frozen=True)
class Hot:
    """The chosen bias under heat: idle current now, and the pair 50 K hotter.

    Chain left cool, and chain as warm as the pair; None where no idle point is found.
    """

    now_a: float
    chain_cool_a: float | None
    chain_as_warm_a: float | None
    runaway: tuple[Runaway, ...]


@dataclass(frozen=True)
class Settled:
    """The ladder, in the order of idle current, and the least rung that suffices.

    `monotone` says whether the margin never rises by half a decibel from rung to rung; where it
    does, the answer is still the first that suffices, and a note says so.
    """

    rungs: tuple[Rung, ...]
    refused: tuple[Refused, ...]
    chosen: Rung | None
    monotone: bool
    hot: Hot | None
    notes: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain values for JSON."""

        def rung(each: Rung) -> dict[str, Any]:
            return {
                "name": each.candidate.name,
                "changes": dict(each.candidate.changes),
                "design_key_sha256": each.design_key_sha256,
                "idle_a": each.idle_a,
                "idle_w": each.idle_w,
                "draw_w": each.draw_w,
                "thd_percent": list(each.thd_percent),
                "margin_db": each.margin_db,
                "verdict": str(each.verdict),
                "heard": [{**asdict(h), "verdict": str(h.verdict)} for h in each.heard],
                "unsettled_steps": each.unsettled_steps,
            }

        return {
            "thd_levels_db": list(THD_LEVELS_DB),
            "rungs": [rung(each) for each in self.rungs],
            "refused": [{"name": e.candidate.name, "reason": e.reason} for e in self.refused],
            "chosen": None if self.chosen is None else self.chosen.candidate.name,
            "monotone": self.monotone,
            "hot": None if self.hot is None else asdict(self.hot),
            "notes": list(self.notes),
        }


def chain_ladder(design: Design, drops: Sequence[str], most: int) -> tuple[Candidate, ...]:
    """Chains of 0 to `most` drops a half, with half steps; of one type or all mixes of several.

    The upper half gets the odd drop. A multiplier of the design is taken out.

    Parameters
    ----------
    design : Design
    drops : sequence of str
        Names of the catalogue.
    most : int
        Drops of a half at most.

    Raises
    ------
    UsageError
        If no drop is named, or the ladder is longer than 64 rungs.
    """
    if not drops or most < 0:
        raise UsageError("a ladder of chains needs the name of a drop and 0 drops or more")
    halves = [
        chain
        for count in range(most + 1)
        for chain in itertools.combinations_with_replacement(drops, count)
    ]
    found = []
    for k, below in enumerate(halves):
        for above in halves[k:]:
            if above == below or len(above) == len(below) + 1:
                found.append(_chains(above, below))
    if len(found) > MOST_CANDIDATES:
        raise UsageError(
            f"{len(found)} chains can be made of {len(drops)} types and up to {most} drops, "
            f"expected {MOST_CANDIDATES} or fewer; name fewer types or drops"
        )
    return tuple(found)


def _chains(upper: Sequence[str], lower: Sequence[str]) -> Candidate:
    name = _chain_name(upper)
    if tuple(upper) != tuple(lower):
        name = f"{name} / {_chain_name(lower)}"
    changes = (
        ("bias.multiplier", None),
        ("bias.upper_multiplier", None),
        ("bias.lower_multiplier", None),
        ("bias.upper", list(upper)),
        ("bias.lower", list(lower)),
    )
    return Candidate(name, changes)


def _chain_name(chain: Sequence[str]) -> str:
    counted = [(name, len(list(group))) for name, group in itertools.groupby(chain)]
    return " + ".join(f"{n} x {name}" for name, n in counted) or "none"


def stated_chains(texts: Sequence[str]) -> tuple[Candidate, ...]:
    """Chains written out: ``1N4148,1N4148`` for both halves, ``1N4148,BAT85/1N4148`` apart."""
    found = []
    for text in texts:
        upper, _, lower = text.partition("/")
        halves = [
            []
            if half.strip().lower() == "none"
            else [n.strip() for n in half.split(",") if n.strip()]
            for half in (upper, lower or upper)
        ]
        found.append(_chains(*halves))
    return tuple(found)


def value_ladder(key: str, values: Sequence[float]) -> tuple[Candidate, ...]:
    """One key of the design along some values."""
    return tuple(
        Candidate(
            f"{key} = {format_quantity(value, 'ohm' if key.endswith('_ohm') else '')}",
            ((key, value),),
        )
        for value in values
    )


def climb(
    design: Design,
    candidates: Sequence[Candidate],
    recordings: Sequence[Path],
    listening: Listening,
    options: RenderOptions | None = None,
    progress: Progress | None = None,
) -> Settled:
    """Hear every candidate on every recording and name the least that hides its crossover.

    Parameters
    ----------
    design : Design
    candidates : sequence of Candidate
    recordings : sequence of Path
    listening : Listening
    options : RenderOptions, optional
    progress : callable, optional

    Raises
    ------
    UsageError
        If there is no candidate or no recording.
    DesignError
        If every candidate is refused.
    """
    if not candidates or not recordings:
        raise UsageError("settling a bias needs candidates and recordings")
    options = options or RenderOptions()
    jobs: list[Callable[[], Rung | Refused]] = [
        partial(_rung, design, each, recordings, listening, options) for each in candidates
    ]
    return _settled(run_all(jobs, progress))


def halve(
    design: Design,
    candidates: Sequence[Candidate],
    recordings: Sequence[Path],
    listening: Listening,
    options: RenderOptions | None = None,
    progress: Progress | None = None,
) -> Settled:
    """Find the least bias by halving a ladder that is ordered by idle current.

    The idle current of every candidate is solved, which costs little; the ear is asked at both
    ends and then at the middle of what is left. Whether the margin falls from rung to rung is
    looked at on the rungs that were heard. Parameters and errors as in `climb`.
    """
    if not candidates or not recordings:
        raise UsageError("settling a bias needs candidates and recordings")
    options = options or RenderOptions()
    tell = progress or (lambda share: None)
    refused: list[Rung | Refused] = []
    ordered: list[tuple[float, Candidate]] = []
    for each in candidates:
        try:
            changed = replace(design, **dict(each.changes))
            idle = find_idle(lower(changed), changed.title)
            ordered.append((min(idle.upper_current_a, idle.lower_current_a), each))
        except (DesignError, SolverError) as fault:
            refused.append(Refused(each, str(fault).split("\n", 1)[0]))
    ordered.sort(key=lambda pair: pair[0])
    found: dict[int, Rung | Refused] = {}
    most = math.ceil(math.log2(max(len(ordered), 2))) + 2

    def suffices(k: int) -> bool:
        if k not in found:
            found[k] = _rung(design, ordered[k][1], recordings, listening, options)
            tell(min(len(found) / most, 1.0))
        rung = found[k]
        return isinstance(rung, Rung) and rung.suffices

    if ordered:
        low, high = 0, len(ordered) - 1
        if suffices(high) and not suffices(low):
            while high - low > 1:
                middle = (low + high) // 2
                low, high = (low, middle) if suffices(middle) else (middle, high)
    return _settled([*refused, *(found[k] for k in sorted(found))])


def _settled(found: Sequence[Rung | Refused]) -> Settled:
    refused = tuple(each for each in found if isinstance(each, Refused))
    rungs = sorted(
        (each for each in found if isinstance(each, Rung)),
        key=lambda rung: (rung.idle_a, -rung.margin_db),
    )
    if not rungs:
        raise DesignError(f"no candidate makes a usable stage; the first: {refused[0].reason}")
    chosen = next((rung for rung in rungs if rung.suffices), None)
    margins = [rung.margin_db for rung in rungs]
    monotone = all(after <= before + RISE_DB for before, after in itertools.pairwise(margins))
    return Settled(
        rungs=tuple(rungs),
        refused=refused,
        chosen=chosen,
        monotone=monotone,
        hot=None if chosen is None else _heated(chosen),
        notes=tuple(_notes(rungs, chosen, monotone)),
    )


def _rung(
    design: Design,
    candidate: Candidate,
    recordings: Sequence[Path],
    listening: Listening,
    options: RenderOptions,
) -> Rung | Refused:
    try:
        changed = replace(design, **dict(candidate.changes))
        bench = Bench(changed)
    except (DesignError, SolverError) as fault:
        return Refused(candidate, str(fault).split("\n", 1)[0])
    heard, unsettled = [], 0
    for path in recordings:
        with open_recording(path, repair=options.repair) as recording:
            channels = audition(
                recording, changed, listening, options, search=False, everything=False
            )
        unsettled += sum(each.unsettled_steps for each in channels)
        worst = max(channels, key=lambda c: c.bias.audibility.margins.above_inaudible_db)
        audibility = worst.bias.audibility
        heard.append(
            Heard(
                recording=path.name,
                verdict=audibility.verdict,
                margin_db=audibility.margins.margin_db,
                above_inaudible_db=audibility.margins.above_inaudible_db,
                nmr_p95_db=audibility.nmr_p95_db,
            )
        )
    rest = bench.rest
    return Rung(
        candidate=candidate,
        design=changed,
        design_key_sha256=design_key(changed),
        idle_a=min(rest.upper.idle_a, rest.lower.idle_a),
        idle_w=rest.upper.idle_w + rest.lower.idle_w,
        draw_w=rest.draw_w,
        thd_percent=tuple(_thd(bench, level) for level in THD_LEVELS_DB),
        heard=tuple(heard),
        unsettled_steps=unsettled,
    )


def _thd(bench: Bench, level_db: float) -> float:
    """THD at 1 kHz on rails that stand still, per cent."""
    probe = Probe(bench.stiff)
    peak = bench.clip_v / bench.gain * db_to_ratio(level_db)
    tone = probe.tone(((_TONE_HZ, peak),), 0.02)
    return distortion_of(tone, probe.rate_hz).thd_percent


def _heated(rung: Rung) -> Hot:
    design = rung.design
    pair, chain = design.output.temperature_c, design.bias.temperature_c
    hot = pair + HOTTER_K
    cool, warm = idle_at(design, hot, chain), idle_at(design, hot, chain + HOTTER_K)
    return Hot(
        now_a=rung.idle_a,
        chain_cool_a=max(cool.upper_a, cool.lower_a) if cool.converged else None,
        chain_as_warm_a=max(warm.upper_a, warm.lower_a) if warm.converged else None,
        runaway=tuple(runaway_of(design, side) for side in SIDES),
    )


def _notes(rungs: Sequence[Rung], chosen: Rung | None, monotone: bool) -> list[str]:
    notes = []
    if chosen is None:
        best = min(rungs, key=lambda rung: rung.margin_db)
        worst = max(best.heard, key=lambda each: each.above_inaudible_db)
        notes.append(
            f"Nothing offered suffices: {best.candidate.name} comes nearest, {worst.recording} "
            f"still lies {best.margin_db:.1f} dB above what is inaudible."
        )
    if not monotone:
        notes.append(
            "The margin does not fall with every step of idle current: clipping or unlike halves "
            "add what more current does not take away."
        )
    steps = sum(rung.unsettled_steps for rung in rungs)
    if steps:
        notes.append(f"{steps} step(s) of the computation did not settle; the answer is in doubt.")
    if chosen is not None and not math.isfinite(chosen.margin_db):
        notes.append("At the chosen bias nothing is left to hear.")
    return notes
