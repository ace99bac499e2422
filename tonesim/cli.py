"""The command line. Whatever takes time to import is imported where it is used."""

from __future__ import annotations

import json
import os
import sys
import traceback
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

from tonesim import __version__
from tonesim.errors import OutputError, TonesimError, UsageError

if TYPE_CHECKING:
    from tonesim.catalogue import Catalogue
    from tonesim.design import Design
    from tonesim.report import RenderOptions, RenderReport
    from tonesim.tolerance import Tolerances

INTERRUPTED = 130  # 128 + SIGINT, as shells count
BROKEN_PIPE = 141  # 128 + SIGPIPE
LEAST_AMBIENT_C, MOST_AMBIENT_C = -40.0, 150.0  # as for the temperatures of a design
COMPILE_S = 12  # on one core of a machine of 2024
KINDS = ("transistors", "diodes", "opamps", "loudspeakers", "cabinets")
F = TypeVar("F", bound=Callable[..., Any])


def _say(text: str) -> None:
    """Write to standard error; nothing in it may steer a terminal."""
    shown = "".join(c if c.isprintable() or c == "\n" else "?" for c in text)
    click.echo(shown, err=True)


class _Commands(click.Group):
    """A group that turns every error into one sentence and an exit code."""

    def main(self, args: Sequence[str] | None = None, **extra: Any) -> Any:  # type: ignore[override]
        """Run a command and leave with its exit code."""
        given = list(sys.argv[1:] if args is None else args)
        before = given[: given.index("--")] if "--" in given else given
        debug = "--debug" in before
        if debug:  # it may stand anywhere
            given.remove("--debug")
        for stream in (sys.stdout, sys.stderr):
            if hasattr(stream, "reconfigure"):  # a letter the terminal lacks is no reason to stop
                stream.reconfigure(errors="replace")
        extra.pop("standalone_mode", None)
        sys.exit(self._run(given, debug, extra))

    def _run(self, args: list[str], debug: bool, extra: dict[str, Any]) -> int:
        try:
            code = super().main(args=args, standalone_mode=False, **extra)
            sys.stdout.flush()
            return code if isinstance(code, int) else 0
        except BrokenPipeError:
            # What Python still flushes at exit must not meet the closed pipe again.
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return BROKEN_PIPE
        except (KeyboardInterrupt, click.Abort):
            _say("tonesim: interrupted, unfinished files are removed")
            return INTERRUPTED
        except click.ClickException as error:
            _say(f"tonesim: {_sentence(error)}")
            return error.exit_code
        except TonesimError as error:
            if debug:
                _say(traceback.format_exc())
            _say("\n".join(f"tonesim: {line}" for line in str(error).split("\n")))
            return error.exit_code
        except Exception as error:
            if debug:
                _say(traceback.format_exc())
            _say(
                f"tonesim: a fault in tonesim itself ({type(error).__name__}: {error}); please "
                "report it with what --debug prints"
            )
            return 1


def _sentence(error: click.ClickException) -> str:
    text = error.format_message()
    context = getattr(error, "ctx", None)
    hint = f" (see {context.command_path} --help)" if context is not None else ""
    return f"{text.rstrip('.')}{hint}"


@click.group(
    cls=_Commands,
    context_settings={"max_content_width": 100},
    epilog="\b\nBegin here:\n  tonesim demo\n  tonesim render low_riff -d full-chain --match -20",
)
@click.version_option(__version__, prog_name="tonesim", message="%(prog)s %(version)s")
@click.option("--debug", is_flag=True, expose_value=False, help="Show where an error comes from.")
def commands() -> None:
    """Hear a small solid-state guitar amplifier's output stage before it is built."""


def _design_options(function: F) -> F:
    """Options of every command that takes a design."""
    function = click.option(
        "--parts",
        "parts_file",
        metavar="FILE",
        help="A part file of your own, on top of the parts shipped.",
    )(function)
    return click.option(
        "--set",
        "changes",
        metavar="KEY=VALUE",
        multiple=True,
        help="Change a value of the design, as in bias.feed_ohm=4k7; may be repeated.",
    )(function)


_as_json = click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")


def _load(source: str, changes: Sequence[str], parts_file: str | None) -> tuple[Design, Catalogue]:
    from tonesim.catalogue import load_catalogue
    from tonesim.designfile import load_design

    catalogue = load_catalogue(None if parts_file is None else Path(parts_file))
    return load_design(source, changes, catalogue), catalogue


def _warn_of_compiling() -> None:
    from tonesim.render import compiled

    if not compiled():
        _say(f"tonesim: compiling the circuit solver, once, about {COMPILE_S} s")


def _print_json(data: object) -> None:
    click.echo(json.dumps(data, indent=2, allow_nan=False))


@commands.command(
    epilog="\b\nExample:\n  tonesim render low_riff -d full-chain --set bias.feed_ohm=4k7"
)
@click.argument("recordings", metavar="RECORDING...", nargs=-1, required=True)
@click.option(
    "-d", "--design", "source", metavar="DESIGN", required=True, help="Design file, or a preset."
)
@click.option(
    "-o",
    "--output",
    metavar="OUT",
    help="File (.wav, .flac, .aiff, .w64, .caf, .ogg) or existing folder; by default "
    "RECORDING.DESIGN.wav in the current folder.",
)
@_design_options
@click.option("--channel", type=int, metavar="N", help="Only this channel, counted from 1.")
@click.option(
    "--cabinet",
    metavar="CABINET",
    help="A cabinet of the catalogue, an impulse response file, or none; by default the design's.",
)
@click.option(
    "--full-scale", metavar="VOLTS", help="Peak volts at the jack that 0 dBFS stands for."
)
@click.option("--gain", metavar="DB", help="Clean gain before the stage, on top of the design's.")
@click.option(
    "--match",
    type=float,
    metavar="LUFS",
    help="Bring the result to this loudness; its true peak stays at or below -1 dBTP.",
)
@click.option(
    "--output-full-scale",
    type=float,
    metavar="VOLTS",
    help="Volts that 0 dBFS of the result stands for; by default more than the stage brings: 1.5 "
    "times the highest rail + 2 V, times the cabinet's largest gain.",
)
@click.option(
    "--subtype",
    metavar="KIND",
    help="Samples of the result: 16 (dithered), 24 (default), 32, float, double, vorbis.",
)
@click.option("--repair", is_flag=True, help="Replace samples that are not finite by zero.")
@click.option(
    "--multiply",
    type=int,
    default=1,
    metavar="N",
    help="Internal rate times N (2, 4, 8): more accurate and slower.",
)
@click.option("--force", is_flag=True, help="Replace a file that tonesim has no record of writing.")
@_as_json
def render(
    recordings: tuple[str, ...],
    source: str,
    output: str | None,
    changes: tuple[str, ...],
    parts_file: str | None,
    as_json: bool,
    **given: Any,
) -> None:
    """Render recordings through a design.

    RECORDING is a file, or one of those shipped by its name (quiet_picking, strummed_chords,
    low_riff). Each becomes a file of the same length, aligned to the sample, and a report beside it
    (the same name, ending in .json). The result is the voltage across the load, or what the cabinet
    makes of it. A result rendered again replaces the old one; a file of other origin is left alone.
    """
    design, catalogue = _load(source, changes, parts_file)
    design = _played(design, catalogue, given)
    options = _render_options(given)
    paths = [_recording(name) for name in recordings]
    outs = _outputs(paths, output, Path(source).stem)
    reports = _render_all(paths, outs, design, options, quiet=as_json)
    if as_json:
        _print_json({"renders": [report.as_dict() for report in reports]})


def _recording(name: str) -> Path:
    """Path of a recording; the shipped ones are known by their names."""
    from tonesim.designfile import demo_audio_folder

    shipped = demo_audio_folder() / f"{name}.wav"
    bare = Path(name).name == name and not Path(name).exists()
    return shipped if bare and shipped.is_file() else Path(name)


def _render_options(given: dict[str, Any]) -> RenderOptions:
    from tonesim.report import RenderOptions

    channel = given["channel"]
    if channel is not None and channel < 1:
        raise UsageError(f"--channel is {channel}, channels are counted from 1")
    return RenderOptions(
        channel=None if channel is None else channel - 1,
        match_lufs=given["match"],
        output_full_scale_v=given["output_full_scale"],
        subtype=given["subtype"],
        repair=given["repair"],
        multiply=given["multiply"],
        replace=given["force"],
    )


def _played(design: Design, catalogue: Catalogue, given: dict[str, Any]) -> Design:
    """Put what the options say about drive and cabinet into the design, so that it is recorded."""
    from tonesim.designfile import replace

    changed: dict[str, Any] = {}
    if given["full_scale"] is not None:
        changed["input.full_scale_v"] = _quantity("--full-scale", given["full_scale"], "V")
    if given["gain"] is not None:
        more = _quantity("--gain", given["gain"], "dB")
        changed["input.gain_db"] = design.input.gain_db + more
    cabinet = given["cabinet"]
    if cabinet is not None and cabinet.lower() == "none":
        changed["cabinet"] = None
    elif cabinet is not None:
        known = {name.lower(): name for name in catalogue.cabinets}
        if cabinet.lower() not in known and Path(cabinet).is_file():
            changed["cabinet"] = {"file": str(Path(cabinet).resolve())}
        else:
            changed["cabinet"] = {"part": catalogue.cabinet(cabinet).name}
    return replace(design, catalogue=catalogue, **changed) if changed else design


def _quantity(option: str, text: str, unit: str) -> float:
    from tonesim.units import parse_quantity

    try:
        return parse_quantity(text, unit)
    except ValueError as fault:
        raise UsageError(f"{option}: {fault}") from None


def _outputs(recordings: Sequence[Path], output: str | None, design_stem: str) -> list[Path]:
    """Where each recording goes; two into one place are refused."""
    target = Path(output or ".")
    if target.is_dir():
        outs = [target / f"{path.stem}.{design_stem}.wav" for path in recordings]
    elif output is not None and output.endswith(("/", os.sep)):
        raise OutputError(f"the folder {output} does not exist")
    elif len(recordings) > 1:
        raise UsageError(f"{len(recordings)} recordings cannot go into one file, {target}")
    else:
        outs = [target]
    taken: dict[Path, Path] = {}
    for path, out in zip(recordings, outs, strict=True):
        if out in taken:
            raise UsageError(f"{taken[out]} and {path} would both become {out}")
        taken[out] = path
    return outs


def _render_all(
    paths: Sequence[Path],
    outs: Sequence[Path],
    design: Design,
    options: RenderOptions,
    *,
    quiet: bool,
) -> list[RenderReport]:
    from tonesim.render import render as render_file
    from tonesim.report import check_output
    from tonesim.show import progress_bars, show_render
    from tonesim.wav import open_recording

    lengths = []
    for path, out in zip(paths, outs, strict=True):  # all that can be seen before the work begins
        check_output(out, paths, design, replace=options.replace)
        with open_recording(path, repair=options.repair) as recording:
            lengths.append(recording.info.frames)
    _warn_of_compiling()
    reports: list[RenderReport] = []
    try:
        with progress_bars(sum(lengths)) as begin:
            for path, out, frames in zip(paths, outs, lengths, strict=True):
                reports.append(render_file(path, out, design, options, begin(path.name, frames)))
    finally:  # what is finished is told even if a later one fails
        for report in [] if quiet else reports:
            show_render(report)
    return reports


@commands.command(epilog="\b\nExample:\n  tonesim check full-chain --set output.temperature_c=60")
@click.argument("source", metavar="DESIGN")
@_design_options
@_as_json
def check(source: str, changes: tuple[str, ...], parts_file: str | None, as_json: bool) -> None:
    """Validate a design and print its bench figures at rest.

    Idle currents, chain and feed, rails and ripple, offset, gain, draw and heat, and the level at
    which each half clips for slow signals, with what sets it. "Gained without" says how much
    further the output would go if that limit alone were lifted.
    """
    design, _ = _load(source, changes, parts_file)
    _warn_of_compiling()
    from tonesim.check import check_design

    found = check_design(design)
    if as_json:
        _print_json(found.as_dict())
    else:
        from tonesim.show import show_check

        show_check(found)


def _check_text_output(path: str, inputs: Sequence[str | None]) -> None:
    """Refuse, before the work begins, a place that cannot be written or holds an input."""
    from tonesim.wav import refuse_same_file

    folder = Path(os.path.realpath(path)).parent
    if not folder.is_dir():
        raise OutputError(f"{path} cannot be written: the folder {folder} does not exist")
    refuse_same_file(path, [name for name in inputs if name is not None])


@commands.command(
    epilog="\b\nExamples:\n  tonesim bench no-chain\n  tonesim bench full-chain idle heat "
    "--set output.emitter_ohm=0R47\n  tonesim bench full-chain against --against mine.csv"
)
@click.argument("source", metavar="DESIGN")
@click.argument("sections", metavar="[SECTION]...", nargs=-1)
@_design_options
@click.option(
    "--ambient", metavar="CELSIUS", default="40", help="Air around the heat sinks; 40 by default."
)
@click.option("--csv", "csv_file", metavar="FILE", help="Write every figure, a line each.")
@click.option(
    "--against",
    "against_file",
    metavar="FILE",
    help="Put figures you measured beside the computed ones (CSV).",
)
@click.option("--pictures", metavar="FOLDER", help="Draw curves and waveforms, SVG and PNG.")
@_as_json
def bench(
    source: str,
    sections: tuple[str, ...],
    changes: tuple[str, ...],
    parts_file: str | None,
    ambient: str,
    csv_file: str | None,
    against_file: str | None,
    pictures: str | None,
    as_json: bool,
) -> None:
    """Measure a design on the test bench.

    A sheet of what meters, scope and distortion analyser will show, in the order in which one
    measures. SECTION picks parts of it: idle, gain, clip, power, heat, distortion, square,
    stability, power-up. Levels are rms unless called peak; a loudspeaker is replaced by its rated
    resistance except where it is named.

    With --against the section "against" comes last: each figure of your file beside the computed
    one, and the tolerance of a part that would explain the difference. Name it to see it alone.
    """
    from tonesim.readings import read_readings
    from tonesim.sheet import check_sections, measure_sheet

    check_sections(sections, against=against_file is not None)
    readings = None if against_file is None else read_readings(Path(against_file))
    air = _quantity("--ambient", ambient, "°C")
    if not LEAST_AMBIENT_C <= air <= MOST_AMBIENT_C:
        raise UsageError(
            f"--ambient is {air:g} °C, expected {LEAST_AMBIENT_C:g} to {MOST_AMBIENT_C:g}"
        )
    if csv_file is not None:
        _check_text_output(csv_file, (source, parts_file))
    design, _ = _load(source, changes, parts_file)
    _warn_of_compiling()
    from tonesim.show import progress_bars, show_sheet
    from tonesim.tables import tables, to_csv

    with progress_bars(1000) as begin:
        rig, sheet = measure_sheet(design, sections, air, begin("bench", 1000), readings)
    drawn: tuple[Path, ...] = ()
    if pictures is not None:
        from tonesim.plot import draw_pictures

        with progress_bars(1000) as begin:
            drawn = draw_pictures(rig, sheet, Path(pictures), begin("pictures", 1000))
    if csv_file is not None:
        from tonesim.wav import write_text_aside

        write_text_aside(csv_file, to_csv(tables(sheet)))
    if as_json:
        _print_json(sheet.as_dict())
    else:
        show_sheet(sheet, tables(sheet))
        for path in drawn:
            click.echo(str(path))


@commands.command(
    epilog="\b\nExample:\n  tonesim spread no-chain --runs 20 --resistors 1 --csv builds.csv"
)
@click.argument("source", metavar="DESIGN")
@_design_options
@click.option("--runs", type=int, default=200, show_default=True, help="How many builds.")
@click.option("--seed", type=int, default=1, show_default=True, help="Other builds: another seed.")
@click.option(
    "--resistors", metavar="CLASS", default="J", show_default=True, help="Letter, or per cent."
)
@click.option("--vbe", metavar="VOLTS", help="VBE of each transistor, either way; 30 mV.")
@click.option(
    "--hfe", type=float, nargs=2, metavar="LEAST MOST", help="Factors on hFE; 0.5 and 1.6."
)
@click.option("--drops", metavar="VOLTS", help="Forward voltage of each drop, either way; 20 mV.")
@click.option("--offset", metavar="VOLTS", help="Input offset of the op-amp; its sheet's maximum.")
@click.option(
    "--op-amp", type=float, metavar="PERCENT", help="Its current limit and gain-bandwidth; 30."
)
@click.option("--reservoirs", type=float, metavar="PERCENT", help="Reservoir capacitors; 20.")
@click.option("--supply", type=float, metavar="PERCENT", help="Mains, or batteries; 10.")
@click.option("--csv", "table", metavar="FILE", help="All builds as a table, one row each.")
@click.option(
    "--save-worst",
    "worst",
    metavar="FIGURE FILE",
    nargs=2,
    multiple=True,
    help="The build worst by a figure as a design file: idle, offset, gain, clip-upper, "
    "clip-lower, thd-loud, thd-quiet; may be repeated.",
)
@_as_json
def spread(
    source: str,
    changes: tuple[str, ...],
    parts_file: str | None,
    as_json: bool,
    **given: Any,
) -> None:
    """Draw many builds of a design from parts within their tolerances.

    How far idle current, offset, gain, clip levels and distortion lie apart, and which parts that
    comes from. Builds that cannot idle or whose parts cannot bear it are counted with the reason.
    The same seed draws the same builds. Nothing is trimmed, and temperatures stay as they are.
    """
    design, _ = _load(source, changes, parts_file)
    from tonesim.showspread import show_spread
    from tonesim.spread import check_place, run_spread, table_text, worst_text, write_place

    tolerances = _tolerances(given)
    worst = [(_figure_named(name), path) for name, path in given["worst"]]
    places = [path for _, path in worst] + ([given["table"]] if given["table"] else [])
    _check_places(places, source)
    for place in places:
        check_place(place)
    _warn_of_compiling()
    from tonesim.show import progress_bars

    with progress_bars(given["runs"]) as begin:
        advance = begin("builds", given["runs"])
        report = run_spread(design, given["runs"], tolerances, given["seed"], advance)
    if given["table"]:
        write_place(given["table"], table_text(report))
    for quantity, path in worst:
        write_place(path, worst_text(report, design, quantity))
    if as_json:
        _print_json(report.as_dict())
    else:
        show_spread(report)


def _tolerances(given: dict[str, Any]) -> Tolerances:
    """Tolerances from the options; what is not given keeps its default."""
    from tonesim.tolerance import Tolerances, resistor_percent

    chosen: dict[str, float] = {"resistors_percent": resistor_percent(given["resistors"])}
    for option, key in (("vbe", "vbe_v"), ("drops", "diode_v"), ("offset", "offset_v")):
        if given[option] is not None:
            chosen[key] = _quantity(f"--{option}", given[option], "V")
    for option, key in (
        ("op_amp", "op_amp_percent"),
        ("reservoirs", "reservoir_percent"),
        ("supply", "supply_percent"),
    ):
        if given[option] is not None:
            chosen[key] = given[option]
    if given["hfe"]:
        chosen["hfe_least"], chosen["hfe_most"] = given["hfe"]
    return Tolerances(**chosen)


def _figure_named(name: str) -> str:
    """Key of the figure that --save-worst names."""
    from tonesim.spread import QUANTITIES

    keys = {quantity.name: key for key, quantity in QUANTITIES.items()}
    if name not in keys:
        raise UsageError(f"--save-worst names {name!r}, expected one of {', '.join(keys)}")
    return keys[name]


def _check_places(places: Sequence[str], source: str) -> None:
    """Refuse one place for two results, and the design's own file."""
    from tonesim.wav import refuse_same_file

    for k, place in enumerate(places):
        if any(os.path.abspath(place) == os.path.abspath(other) for other in places[:k]):
            raise UsageError(f"{place} is asked for twice, expected a name for each result")
        refuse_same_file(place, [source])


@commands.command(
    epilog="\b\nExamples:\n  tonesim parts diodes\n  tonesim parts transistors TIP122"
)
@click.argument("kind", required=False, type=click.Choice(KINDS, case_sensitive=False))
@click.argument("name", required=False)
@click.option("--parts", "parts_file", metavar="FILE", help="A part file of your own as well.")
@_as_json
def parts(kind: str | None, name: str | None, parts_file: str | None, as_json: bool) -> None:
    """List parts, or show all values of one.

    A design names its parts by these names; with a kind and a name, the values and their source.
    """
    from tonesim.catalogue import load_catalogue

    catalogue = load_catalogue(None if parts_file is None else Path(parts_file))
    if kind is not None and name is not None:
        part = catalogue.part(kind, name)
        if as_json:
            _print_json(part.model_dump(mode="json"))
            return
        from tonesim.show import show_part

        show_part(part)
        return
    listed = {each: getattr(catalogue, each) for each in (KINDS if kind is None else (kind,))}
    if as_json:
        _print_json(
            {
                each: {name: part.model_dump(mode="json") for name, part in found.items()}
                for each, found in listed.items()
            }
        )
        return
    from tonesim.show import show_parts

    for each, found in listed.items():
        show_parts(each, list(found.values()))


@commands.command(epilog="\b\nExample:\n  tonesim presets no-chain > mine.toml")
@click.argument("name", required=False)
@_as_json
def presets(name: str | None, as_json: bool) -> None:
    """List the designs shipped, or print one.

    What is printed is a design file to start from.
    """
    from tonesim.designfile import list_presets, presets_folder
    from tonesim.record import nearest, read_toml

    known = list_presets()
    if name is not None and name not in known:
        close = nearest(name, known) or known
        raise UsageError(f"no preset is called {name!r}, nearest known: {', '.join(close)}")
    texts = {
        each: (presets_folder() / f"{each}.toml").read_text(encoding="utf-8") for each in known
    }
    if name is not None:
        click.echo(json.dumps({"name": name, "text": texts[name]}) if as_json else texts[name])
        return
    rows = [
        (
            each,
            str(read_toml(presets_folder() / f"{each}.toml")["title"]),
            text.partition("\n")[0].removeprefix("#").strip(),
        )
        for each, text in texts.items()
    ]
    if as_json:
        _print_json({each: {"title": title, "about": about} for each, title, about in rows})
        return
    from tonesim.show import print_table

    print_table("presets", ("name", "title", "about"), rows)


@contextmanager
def _new_folder(path: Path) -> Iterator[None]:
    """Make a folder, and take it away again if nothing came of it."""
    made = not path.exists()
    try:
        path.mkdir(parents=True, exist_ok=True)
    except OSError as failure:
        raise OutputError(f"the folder {path} cannot be made: {failure.strerror}") from None
    try:
        yield
    except BaseException:
        if made and not any(path.iterdir()):
            path.rmdir()
        raise


@commands.command(epilog="\b\nExample:\n  tonesim demo listening")
@click.argument("folder", default="tonesim-demo")
@_as_json
def demo(folder: str, as_json: bool) -> None:
    """Render what is shipped through three bias chains.

    The three designs differ in their bias chain only, and all results are equally loud. They go
    into FOLDER, ./tonesim-demo by default; what to listen for is said with its figures.
    """
    _warn_of_compiling()
    from tonesim.demo import run_demo
    from tonesim.show import progress_bars, show_demo

    target = Path(folder)
    with _new_folder(target), progress_bars(1000) as begin:
        told = run_demo(target, begin("demo", 1000))
    if as_json:
        _print_json(told.as_dict())
    else:
        show_demo(told)
