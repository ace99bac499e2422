"""Text for the terminal: tables where somebody reads, plain lines in a pipe.

Nothing that comes from a file is taken as markup or as a control code.
"""

import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from typing import Any

from rich import box
from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table as Grid
from rich.text import Text

from tonesim.audition import Audition
from tonesim.catalogue import CabinetShape, Diode, Loudspeaker, OpAmp, Part, Transistor, diode_drop
from tonesim.check import HalfAtRest, StageCheck
from tonesim.demo import DemoReport, Heard
from tonesim.hearing import ladder_tables, verdict_tables
from tonesim.render import CEILING_DBTP
from tonesim.report import RenderReport
from tonesim.settle import Settled
from tonesim.sheet import Sheet
from tonesim.tables import Table, shown
from tonesim.units import db_to_ratio, format_quantity, ratio_to_db

Row = Sequence[str]
Advance = Callable[[float], None]

_INDENT = "  "
_CLEARLY_DB = 3.0  # what makes one of two differences the larger one


def printable(text: str) -> str:
    """Return the text with everything a terminal would obey, or could not print, as "?"."""
    return "".join(c if c.isprintable() or c == "\n" else "?" for c in text)


def _console() -> Console:
    return Console(markup=False, highlight=False, emoji=False)


def print_line(text: str = "") -> None:
    """Print a line as it is; a terminal wraps it at words."""
    if sys.stdout.isatty():
        _console().print(Text(printable(text)))
    else:
        print(printable(text))


def print_table(title: str, columns: Row, rows: Sequence[Row]) -> None:
    """Print a table; in a pipe as columns two blanks apart, never cut.

    Parameters
    ----------
    title : str
    columns : sequence of str
        Headings; all empty for a list of names and values.
    rows : sequence of sequence of str
    """
    cells = [[printable(cell) for cell in row] for row in rows]
    if not sys.stdout.isatty():
        _print_plain(title, columns, cells)
        return
    headed = any(columns)
    table = Grid(title=Text(printable(title)), title_justify="left", show_header=headed)
    table.box = box.SIMPLE_HEAD if headed else None
    for column in columns:
        table.add_column(Text(column), overflow="fold")
    for row in cells:
        table.add_row(*(Text(cell) for cell in row))
    _console().print(table)


def _print_plain(title: str, columns: Row, rows: list[list[str]]) -> None:
    lines = [list(columns), *rows] if any(columns) else rows
    widths = [max((len(row[i]) for row in lines), default=0) for i in range(len(columns))]
    print(printable(title))
    for row in lines:
        cells = [cell.ljust(width) for cell, width in zip(row, widths, strict=True)]
        print((_INDENT + _INDENT.join(cells)).rstrip())


@contextmanager
def progress_bars(total_frames: int) -> Iterator[Callable[[str, int], Advance]]:
    """Progress on a terminal's standard error, with the time left; nothing in a pipe.

    Yields
    ------
    callable
        ``begin(name, frames)`` names what is being worked on and its share of the total, and
        returns the function that takes its progress, 0 to 1.
    """
    console = Console(stderr=True, markup=False, highlight=False, emoji=False)
    if not console.is_terminal:
        yield lambda name, frames: lambda share: None
        return
    columns = (
        TextColumn("{task.description}", markup=False),
        BarColumn(),
        TextColumn("{task.percentage:>3.0f} %"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=console, transient=True) as progress:
        task = progress.add_task("", total=total_frames)

        def begin(name: str, frames: int) -> Advance:
            told = 0.0

            def advance(share: float) -> None:
                nonlocal told
                progress.update(task, advance=(share - told) * frames, description=printable(name))
                told = share

            return advance

        yield begin


def _db(value: float, unit: str) -> str:
    return f"{value:.1f} {unit}" if value > -1000.0 else "silent"


def show_render(report: RenderReport) -> None:
    """Print what was rendered and what deserves a doubt."""
    made = report.performance
    evidence = made.evidence
    rows = [
        ("written", f"{report.output} (report: {report.sidecar.name})"),
        ("design", f"{report.design.title} ({report.design_key_sha256[:12]})"),
        (
            "length",
            f"{report.recording.duration_s:.2f} s, {report.channels} channel(s) at "
            f"{report.recording.sample_rate} Hz, computed at {made.oversampling} times the rate",
        ),
        (
            "full scale",
            f"{report.input_full_scale_v:.4g} V at the jack in, "
            f"{report.output_full_scale_v:.4g} V out",
        ),
        ("peak at the load", ", ".join(f"{e.peak_v:.2f} V" for e in evidence)),
        (
            "lowest rails",
            ", ".join(
                f"+{e.lowest_positive_rail_v:.2f} V / -{e.lowest_negative_rail_v:.2f} V"
                for e in evidence
            ),
        ),
        (
            "loudness",
            f"{_db(report.loudness_lufs, 'LUFS')}, true peak {_db(report.true_peak_db, 'dBTP')}",
        ),
        (
            "speed",
            f"{report.real_time_factor:.1f} times real time, {report.total_s:.1f} s in all",
        ),
    ]
    print_table(report.recording.path.name, ("", ""), rows)
    for warning in render_warnings(report):
        print_line(f"{_INDENT}note: {warning}")


def render_warnings(report: RenderReport) -> list[str]:
    """What deserves a doubt about a result, one sentence each."""
    made, found = report.performance, []
    if report.clipped_samples:
        found.append(
            f"samples beyond full scale: {report.clipped_samples}; "
            "render again with a higher --output-full-scale"
        )
    if report.match_limited:
        found.append(
            f"the gain stops at a true peak of {CEILING_DBTP:g} dBTP, so the loudness is "
            f"{report.loudness_lufs:.1f} LUFS instead of {report.options.match_lufs:g}"
        )
    if report.options.match_lufs is not None and made.loudness_lufs < -1000.0:
        found.append("the result is silent and could not be matched in loudness")
    if made.repaired_samples:
        found.append(f"samples that were not finite and became zero: {made.repaired_samples}")
    unsettled = sum(e.unsettled_steps for e in made.evidence)
    if unsettled:
        found.append(f"time steps that did not settle: {unsettled}; please report this design")
    return found


def _half_rows(upper: HalfAtRest, lower: HalfAtRest) -> list[Row]:
    def row(name: str, unit: str, up: float, low: float) -> Row:
        return (name, format_quantity(up, unit), format_quantity(low, unit))

    return [
        row("idle current", "A", upper.idle_a, lower.idle_a),
        row("idle heat in the device", "W", upper.idle_w, lower.idle_w),
        row("chain voltage", "V", upper.chain_v, lower.chain_v),
        row("chain current", "A", upper.chain_a, lower.chain_a),
        row("feed current", "A", upper.feed_a, lower.feed_a),
        ("rail at idle", f"+{upper.rail_v:.2f} V", f"-{lower.rail_v:.2f} V"),
        row("ripple, peak to peak", "V", upper.rail_ripple_v, lower.rail_ripple_v),
        row("drawn from the rail", "A", upper.draw_a, lower.draw_a),
        ("clips at", f"{upper.clip.level_v:+.2f} V", f"{lower.clip.level_v:+.2f} V"),
        ("because of", upper.clip.cause, lower.clip.cause),
        *(
            row(f"gained without: {name}", "V", _tidy(upper, name), _tidy(lower, name))
            for name in dict.fromkeys((*upper.clip.gains_v, *lower.clip.gains_v))
        ),
    ]


def _tidy(half: HalfAtRest, limit: str) -> float:
    """Gain of a lifted limit in volts; below a tenth of a millivolt it is none."""
    gained = half.clip.gains_v.get(limit, 0.0)
    return gained if abs(gained) >= 1e-4 else 0.0


def show_check(check: StageCheck) -> None:
    """Print a stage at rest."""
    decibels = f"{ratio_to_db(check.gain):.2f} dB"
    print_table(
        check.title,
        ("", "upper half", "lower half"),
        _half_rows(check.upper, check.lower),
    )
    rows = [
        ("output offset", format_quantity(check.output_offset_v, "V")),
        (
            "closed-loop gain",
            f"{check.gain:.3f}, {decibels} (ideal op-amp {check.ideal_gain:.3f})",
        ),
        ("idle draw", format_quantity(check.draw_w, "W")),
        (
            "sine power before clipping",
            f"{format_quantity(check.clean_w, 'W')} into {format_quantity(check.bench_ohm, 'ohm')},"
            " rails as at idle",
        ),
        ("left over at the nodes", f"{check.residual_a:.1e} A (converged below 1e-6 A)"),
    ]
    print_table("whole stage", ("", ""), rows)
    for caution in check.cautions:
        print_line(f"caution: {caution}")


def show_sheet(sheet: Sheet, found: Sequence[Table]) -> None:
    """Print a bench sheet: its tables with their notes, and what deserves a doubt."""
    print_line(f"{sheet.title} ({sheet.design_key_sha256[:12]})")
    section = ""
    for table in found:
        if table.section != section:
            section = table.section
            print_line()
            print_line(section.upper())
        _print_values(table)
    print_line()
    for caution in sheet.rest.cautions:
        print_line(f"Caution: {caution}")
    if sheet.unsettled_steps:
        print_line(
            f"Caution: {sheet.unsettled_steps} step(s) of the computation did not settle; figures "
            "that move in time are in doubt."
        )
    print_line(
        "Computed from typical parts. Before you measure the real one: mains voltage kills, "
        "reservoirs hold charge, heat sinks burn; a current-limited supply and a resistor first, "
        "the loudspeaker last."
    )


def show_auditions(found: Sequence[Audition]) -> None:
    """Print the verdicts, where they come from, and what deserves a doubt."""
    first = found[0]
    room = (
        "no room noise"
        if first.listening.room_dba is None
        else (f"{first.listening.room_dba:g} dBA of room noise")
    )
    cabinet = first.cabinet or "no cabinet (a guitar loudspeaker hides more)"
    print_line(f"{first.title} ({first.design_key_sha256[:12]})")
    print_line(
        f"Heard through {cabinet}, {first.listening.sine_spl_db:g} dB SPL for a sine of 1 V peak, "
        f"{room}."
    )
    print_line(
        f"Idle current {format_quantity(first.idle_a, 'A')}; the twin without a dead zone idles on "
        f"{format_quantity(first.twin_idle_a, 'A')}."
    )
    for each in found:
        for table in verdict_tables(each):
            print_line()
            _print_values(table)
        asked = [each.bias] if each.everything is None else [each.bias, each.everything]
        for note in dict.fromkeys(note for answer in asked for note in answer.audibility.notes):
            print_line(f"  {note}")
        if each.unsettled_steps:
            print_line(
                f"Caution: {each.unsettled_steps} step(s) of the computation did not settle; the "
                "verdict is in doubt."
            )


def show_settled(title: str, heard: str, found: Settled) -> None:
    """Print a ladder and its answer."""
    print_line(title)
    print_line(heard)
    for table in ladder_tables(found):
        print_line()
        _print_values(table)
    print_line()
    if found.chosen is None:
        print_line("Nothing on this ladder hides the crossover on all recordings.")
        return
    chosen = found.chosen
    print_line(
        f"Least bias that hides it: {chosen.candidate.name}, idle current "
        f"{format_quantity(chosen.idle_a, 'A')}, {format_quantity(chosen.idle_w, 'W')} of heat in "
        "the pair."
    )
    place = found.rungs.index(chosen)
    for other, words in ((place - 1, "One step less"), (place + 1, "One step more")):
        if 0 <= other < len(found.rungs):
            rung = found.rungs[other]
            print_line(
                f"{words}: {rung.candidate.name}, {format_quantity(rung.idle_a, 'A')}, "
                f"{format_quantity(rung.idle_w, 'W')}, {rung.verdict}, {rung.margin_db:+.1f} dB."
            )


def _print_values(table: Table) -> None:
    """Print a table of values with its notes."""
    rows = [
        [shown(value, unit) for value, (_, unit) in zip(row, table.columns, strict=True)]
        for row in table.rows
    ]
    print_table(table.title, [heading for heading, _ in table.columns], rows)
    for note in table.notes:
        print_line(f"  {note}")


def _transistor_row(part: Transistor) -> Row:
    return (
        part.name,
        f"{part.polarity} {part.kind}",
        f"{part.hfe * (part.first_hfe or 1.0):.0f}",
        format_quantity(part.ic_max_a, "A"),
        format_quantity(part.vceo_v, "V"),
        format_quantity(part.power_w, "W"),
        part.complement or "",
    )


def _diode_row(part: Diode) -> Row:
    drops = (diode_drop(part, current) for current in (1e-3, 1e-2))
    return (part.name, part.technology, *(f"{drop:.3f} V" for drop in drops))


def _opamp_row(part: OpAmp) -> Row:
    return (
        part.name,
        format_quantity(part.gain_bandwidth_hz, "Hz"),
        f"{part.slew_v_per_s / 1e6:.3g} V/µs",
        f"{part.swing_2k_positive_v:+.3g} / {part.swing_2k_negative_v:+.3g} V",
        f"{format_quantity(part.source_limit_a, 'A')} / {format_quantity(part.sink_limit_a, 'A')}",
        format_quantity(part.supply_max_v, "V"),
    )


def _loudspeaker_row(part: Loudspeaker) -> Row:
    return (
        part.name,
        format_quantity(part.rated_ohm, "ohm"),
        format_quantity(part.re_ohm, "ohm"),
        format_quantity(part.le_h, "H"),
        format_quantity(part.fs_hz, "Hz"),
        f"{part.qts:.2f}",
    )


def _cabinet_row(part: CabinetShape) -> Row:
    def corners(name: str) -> str:
        return ", ".join(format_quantity(section.hz, "Hz") for section in getattr(part, name))

    peaks = ", ".join(f"{format_quantity(p.hz, 'Hz')} {p.gain_db:+g} dB" for p in part.peaks)
    return (part.name, corners("highpass"), peaks, corners("lowpass"))


_COLUMNS: Mapping[str, tuple[Row, Callable[[Any], Row]]] = {
    "transistors": (
        ("name", "type", "hFE", "IC max", "VCEO", "power", "complement"),
        _transistor_row,
    ),
    "diodes": (("name", "type", "drop at 1 mA", "at 10 mA"), _diode_row),
    "opamps": (
        ("name", "GBW", "slew rate", "swing into 2 kΩ at ±15 V", "source / sink", "supply max"),
        _opamp_row,
    ),
    "loudspeakers": (("name", "rated", "Re", "Le", "fs", "Qts"), _loudspeaker_row),
    "cabinets": (("name", "high-pass", "peaks", "low-pass"), _cabinet_row),
}


def show_parts(kind: str, parts: Sequence[Part]) -> None:
    """Print the parts of a kind with the figures they are chosen by."""
    columns, row = _COLUMNS[kind]
    print_table(kind, columns, [row(part) for part in parts])


def show_part(part: Part) -> None:
    """Print one part with all its values and their source."""
    values = part.model_dump(exclude={"name", "source"}, exclude_none=True)
    print_table(part.name, ("", ""), [(key, _plain_value(value)) for key, value in values.items()])
    print_line(f"source: {part.source}")


def _plain_value(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.6g}"
    if isinstance(value, dict):
        return ", ".join(f"{key} {_plain_value(inner)}" for key, inner in value.items())
    if isinstance(value, tuple | list):
        return "; ".join(
            " / ".join(_plain_value(i) for i in item)
            if isinstance(item, tuple | list)
            else _plain_value(item)
            for item in value
        )
    return "-" if value is None else str(value)


def show_demo(told: DemoReport) -> None:
    """Print what the demo wrote, what was measured on it and what to listen for."""
    print_table(
        "Three bias chains, otherwise one design (distortion of a 1 kHz sine)",
        ("preset", "idle current", "clips at", "at -3 dB of it", "at -40 dB of it"),
        [
            (
                variant.preset,
                format_quantity(variant.idle_a, "A"),
                f"{variant.clip_v:.1f} V",
                *(_percent(thd) for thd in variant.thd_percent),
            )
            for variant in told.variants
        ],
    )
    for name in dict.fromkeys(each.recording for each in told.heard):
        print_line()
        print_line(f"{name}: what lies between each chain and the full one")
        for each in told.heard:
            if each.recording == name:
                print_line(f"{_INDENT}{each.preset}: {_difference(each)}")
    print_line()
    print_line(
        f"All results are equally loud, {told.loudness_lufs:.1f} LUFS. Begin with the volume "
        "turned down: loud listening harms hearing for good, on headphones above all."
    )
    print_line()
    for each in told.heard:
        print_line(str(each.report.output))


def _percent(value: float) -> str:
    return f"{value:.2g} %" if value >= 0.001 else "below 0.001 %"


def _difference(each: Heard) -> str:
    """Say how far a result is from the full chain, and where to listen."""
    if each.loud_db is None or each.quiet_db is None:
        return "the reference; nothing should come in as its notes die away"
    where = f"the tail at {each.quiet_from_s:.1f} to {each.quiet_to_s:.1f} s"
    figures = (
        f"{_share(each.quiet_db)} in the quiet quarter, {_share(each.loud_db)} in the loud one"
    )
    more = each.quiet_db - each.loud_db
    if more > _CLEARLY_DB:
        return f"{figures}. Listen to {where}: {more:.0f} dB more of it than in the attacks"
    if more < -_CLEARLY_DB:
        return f"{figures}. Listen to the attacks: {-more:.0f} dB more of it than in {where}"
    return f"{figures}. Listen to the attacks and to {where} alike"


def _share(level_db: float) -> str:
    return f"{level_db:.0f} dB ({100.0 * db_to_ratio(level_db):.2g} %)"
