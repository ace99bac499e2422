"""What an audition found, as tables and as a line a frame."""

import csv
import io
from collections.abc import Sequence
from pathlib import Path

from tonesim.audition import Audition, Comparison
from tonesim.settle import HOTTER_K, THD_LEVELS_DB, Hot, Rung, Settled
from tonesim.tables import MOST_RTH, Quantity, Table, Value
from tonesim.verdict import JND_GROSS, JND_LIMIT, NMR_LIMIT_DB, RATIO_LIMIT_DB

CANNOT_TELL = (
    "The models do not know timing inside 43 ms, beats, training, or your room. Borderline means: "
    "listen, blind."
)


def verdict_tables(found: Audition) -> list[Table]:
    """Tables of one channel's audition."""
    both = [("what the bias adds", found.bias)]
    if found.everything is not None:
        both.append(("all distortion", found.everything))
    name = f"{Path(found.recording).name}, channel {found.channel + 1}"
    return [
        Table(
            "audible",
            f"{name}: verdict",
            (
                ("question", ""),
                ("verdict", ""),
                ("margin", "dB"),
                ("noise to mask, 95 %", "dB"),
                ("excitation ratio, 95 %", "dB"),
                ("level steps, 95 %", ""),
                ("frames above the mask", "%"),
                ("residual", "dB"),
            ),
            tuple(_verdict_row(question, each) for question, each in both),
            (
                f"Inaudible: no frame above {NMR_LIMIT_DB:g} dB noise to mask and {JND_LIMIT:g} "
                f"just noticeable steps of level. Audible: 5 % of the frames above "
                f"{RATIO_LIMIT_DB:g} dB excitation ratio or {JND_GROSS:g} steps. Margin: below 0 "
                "inaudible by that much, above 0 audible by that much.",
                CANNOT_TELL,
            ),
        ),
        _quartiles(name, found.bias),
        _moments(name, found.bias),
        Table(
            "audible",
            f"{name}: playback level that turns the verdict",
            (("question", ""), ("inaudible at", "dB"), ("audible at", "dB")),
            tuple(_level_row(question, each) for question, each in both),
            ("Against the level asked for; a dash where none from -60 to +30 dB does.",),
        ),
    ]


def _verdict_row(question: str, each: Comparison) -> tuple[Value, ...]:
    heard = each.audibility
    return (
        question,
        str(heard.verdict),
        heard.margins.margin_db,
        heard.nmr_p95_db,
        heard.ratio_p95_db,
        heard.jnd_p95,
        100.0 * heard.above_mask_share,
        heard.residual_db,
    )


def _quartiles(name: str, each: Comparison) -> Table:
    names = ("quietest quarter", "second", "third", "loudest quarter")
    quarters = each.audibility.quartiles
    return Table(
        "audible",
        f"{name}: what the bias adds, by level of the playing",
        (
            ("frames", ""),
            ("from", "dB"),
            ("to", "dB"),
            ("noise to mask, median", "dB"),
            ("95 %", "dB"),
            ("excitation ratio, 95 %", "dB"),
            ("verdict", ""),
        ),
        tuple(
            (
                name_,
                quarter.lowest_db,
                quarter.highest_db,
                quarter.nmr_median_db,
                quarter.nmr_p95_db,
                quarter.ratio_p95_db,
                str(quarter.margins.verdict),
            )
            for name_, quarter in zip(names[: len(quarters)], quarters, strict=True)
        ),
        ("Levels in dB SPL. A dead zone is a fixed voltage: look at the quiet quarters.",),
    )


def _moments(name: str, each: Comparison) -> Table:
    return Table(
        "audible",
        f"{name}: worst moments of what the bias adds",
        (("time", "s"), ("band", "Hz"), ("level", "dB"), ("noise to mask", "dB"), ("ratio", "dB")),
        tuple(
            (
                Quantity(moment.time_s, ""),
                moment.band_hz,
                moment.level_db,
                moment.nmr_db,
                moment.ratio_db,
            )
            for moment in each.audibility.moments
        ),
    )


def _level_row(question: str, each: Comparison) -> tuple[Value, ...]:
    levels = each.levels
    if levels is None:
        return (question, None, None)
    return (question, levels.inaudible_at_db, levels.audible_at_db)


def ladder_tables(found: Settled) -> list[Table]:
    """Tables of a ladder: every rung, the answer's neighbours, and what heat does to it."""
    recordings = [each.recording for each in found.rungs[0].heard]
    made = [
        Table(
            "settle",
            "the ladder, in the order of idle current",
            (
                ("bias", ""),
                ("idle current", "A"),
                ("idle heat of the pair", "W"),
                *((f"THD at {level:g} dB", "%") for level in THD_LEVELS_DB),
                *((name, "dB") for name in recordings),
                ("verdict", ""),
            ),
            tuple(
                (
                    _marked(rung, found.chosen),
                    rung.idle_a,
                    rung.idle_w,
                    *rung.thd_percent,
                    *(each.above_inaudible_db for each in rung.heard),
                    str(rung.verdict),
                )
                for rung in found.rungs
            ),
            (
                "Under each recording: how far what the bias adds lies above what is inaudible; "
                "below 0 it is. THD at 1 kHz below the clip level.",
                *found.notes,
            ),
        )
    ]
    if found.refused:
        made.append(
            Table(
                "settle",
                "refused",
                (("bias", ""), ("because", "")),
                tuple((each.candidate.name, each.reason) for each in found.refused),
            )
        )
    if found.chosen is not None and found.hot is not None:
        made.append(_hot_table(found.chosen, found.hot))
    return made


def _marked(rung: Rung, chosen: Rung | None) -> str:
    return f"> {rung.candidate.name}" if rung is chosen else rung.candidate.name


def _hot_table(chosen: Rung, hot: Hot) -> Table:
    rows: list[tuple[Value, ...]] = [
        ("idle current now", Quantity(hot.now_a, "A")),
        (
            f"pair {HOTTER_K:g} K hotter, chain left cool",
            "runs away" if hot.chain_cool_a is None else Quantity(hot.chain_cool_a, "A"),
        ),
        (
            f"pair and chain {HOTTER_K:g} K hotter",
            "runs away" if hot.chain_as_warm_a is None else Quantity(hot.chain_as_warm_a, "A"),
        ),
    ]
    for each in hot.runaway:
        for name, rth in (
            ("chain left cool", each.rth_apart_k_per_w),
            ("chain as warm", each.rth_together_k_per_w),
        ):
            rows.append(
                (
                    f"stable up to, {each.side} half, {name}",
                    "any" if rth is None or rth > MOST_RTH else Quantity(rth, "K/W"),
                )
            )
    return Table(
        "settle", f"{chosen.candidate.name} under heat", (("", ""), ("figure", "")), tuple(rows)
    )


def frames_csv(found: Sequence[Audition]) -> str:
    """Every frame as CSV text, both questions side by side."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    measures = ("nmr_max_db", "nmr_band_hz", "ratio_max_db", "jnd_max")
    both = [[e.bias] if e.everything is None else [e.bias, e.everything] for e in found]
    writer.writerow(
        ["recording", "channel", "time_s", "level_db", "active"]
        + [f"{each.question}_{measure}" for each in both[0] for measure in measures]
    )
    for each, asked in zip(found, both, strict=True):
        first = asked[0].series
        for k in range(min(answer.series.frames for answer in asked)):
            row: list[object] = [
                each.recording,
                each.channel + 1,
                f"{first.time_s[k]:.4f}",
                f"{first.level_db[k]:.2f}",
                int(first.active[k]),
            ]
            row += [f"{getattr(a.series, m)[k]:.3f}" for a in asked for m in measures]
            writer.writerow(row)
    return text.getvalue()
